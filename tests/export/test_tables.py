import gzip
import json
import struct
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
import xarray as xr
from pyproj import CRS

from gradred import survey
from gradred.errors import SurveyError
from gradred.export.tables import (
    LedgerSettings,
    TableSettings,
    ledger_summary,
    line_table,
    write_ledger,
    write_lines,
)
from tests.export.parts import grid_of, ledger_lines, lines_of

WRITERS = ((write_lines, TableSettings()), (write_ledger, LedgerSettings()))


def test_the_ledger_is_what_a_pencil_finds() -> None:
    # stations n = 1, 2, 3 are good, the fourth is flagged: mean n = 2, rms n = √(14/3), peak 3
    table = ledger_summary(ledger_lines()).set_index(["entry", "component"])
    rms = np.sqrt(14.0 / 3.0)
    told = {
        "as read": (10.0, np.nan),
        "rotation of the platform": (1.0, 0.5),
        "attraction of the terrain": (3.0, rms),
        "left": (6.0, 4.0),
    }
    assert list(dict.fromkeys(table.index.get_level_values(0))) == list(told)
    for entry, (size, sigma) in told.items():
        for component in ("xx", "xy", "xz", "yy", "yz", "zz"):
            # sums of three numbers: rounding alone
            found = table.loc[[(entry, component)]].to_numpy()[0]
            expected = [2 * size, rms * size, 3 * size, sigma]
            np.testing.assert_allclose(found, expected, rtol=1e-14)


def test_the_means_of_the_ledger_file_close(tmp_path: Path) -> None:
    lines = lines_of(30)
    random = np.random.default_rng(8)
    for key in survey.CORRECTIONS:
        lines = survey.subtract(lines, key, random.normal(0.0, 200.0, (30, 6)), 1.0)
    lines = survey.flag(lines, "spike", random.random(30) < 0.2)
    write_ledger(lines, LedgerSettings(), tmp_path)
    table = pd.read_csv(tmp_path / "ledger.csv")
    assert list(table.columns) == [
        "entry", "component", "mean_E", "rms_E", "peak_E", "sigma_rms_E"
    ]  # fmt: skip
    means = table.pivot_table(index="component", columns="entry", values="mean_E")
    entries = means[list(survey.CORRECTIONS.values())].sum(axis=1)
    # printed to 1e-6 E, eight numbers
    np.testing.assert_allclose(means["as read"], means["left"] + entries, rtol=0, atol=4e-6)


def test_a_ledger_without_a_good_station_has_no_size() -> None:
    lines = survey.flag(ledger_lines(), "spike", np.ones(4, dtype=bool))
    table = ledger_summary(lines)
    assert table[["mean_E", "rms_E", "sigma_rms_E"]].isna().to_numpy().all()
    assert (table["peak_E"] == 0.0).all()


def test_every_station_is_a_point_of_wkb(tmp_path: Path) -> None:
    lines = ledger_lines()
    write_lines(lines, TableSettings(csv=False), tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["lines.parquet"]
    table = pq.read_table(tmp_path / "lines.parquet")
    # OGC 06-103r4, 8.2: byte order 1 little-endian, type 1 point, x, y as doubles; 21 bytes
    points = [struct.unpack("<BIdd", point) for point in table["geometry"].to_pylist()]
    assert {point[:2] for point in points} == {(1, 1)}
    np.testing.assert_array_equal([point[2] for point in points], lines["longitude"])
    np.testing.assert_array_equal([point[3] for point in points], lines["latitude"])
    # GeoParquet 1.1.0: primary column, encoding, types, CRS as PROJJSON
    about = json.loads(table.schema.metadata[b"geo"])
    column = about["columns"][about["primary_column"]]
    assert about["primary_column"] == "geometry"
    assert (column["encoding"], column["geometry_types"]) == ("WKB", ["Point"])
    assert CRS.from_json_dict(column["crs"]).to_epsg() == 4326
    assert table.schema.metadata[b"survey_crs"] == b"EPSG:32633"


def test_parquet_gives_every_number_back_with_its_unit(tmp_path: Path) -> None:
    lines = ledger_lines()
    write_lines(lines, TableSettings(csv=False), tmp_path)
    table = pq.read_table(tmp_path / "lines.parquet")
    # flagged readings stay in place
    assert table["flag"].to_pylist() == [0, 0, 0, survey.FLAGS["spike"]]
    np.testing.assert_array_equal(
        table["time"].to_numpy().astype("datetime64[ns]"), lines["time"].to_numpy()
    )
    assert table["line"].to_pylist() == ["L000"] * 4
    for row in survey.VARIABLES:
        if row.part != "lines" or row.name not in lines:
            continue
        told = [field for field in table.schema if field.name.startswith(row.name)]
        assert told, row.name
        unit = "UTC" if row.unit == "time" else row.unit
        first = table.schema.field(row.name if len(row.dims) == 1 else f"{row.name}_xx").metadata
        assert first[b"unit"] == unit.encode()
        assert first[b"meaning"] == row.meaning.encode()
    for number, component in enumerate(("xx", "xy", "xz", "yy", "yz", "zz")):
        np.testing.assert_array_equal(
            table[f"sigma_terrain_{component}"], lines["sigma_terrain"].to_numpy()[:, number]
        )


def test_csv_keeps_the_millimetre_and_a_ten_thousandth_of_an_eotvos(tmp_path: Path) -> None:
    lines = lines_of(12)
    write_lines(lines, TableSettings(), tmp_path)
    table = pd.read_csv(tmp_path / "lines.csv.gz", parse_dates=["time"])
    np.testing.assert_array_equal(
        table["time"].to_numpy().astype("datetime64[ns]"), lines["time"].to_numpy()
    )
    # half a unit of the last printed digit: 1e-8 degree is 1 mm, 1e-3 m, 1e-4 E
    for name, half in (("longitude", 5.1e-9), ("easting", 5.1e-4), ("pitch", 5.1e-9)):
        np.testing.assert_allclose(table[name], lines[name], rtol=0, atol=half)
    for number, component in enumerate(("xx", "xy", "xz", "yy", "yz", "zz")):
        np.testing.assert_allclose(
            table[f"as_read_{component}"], lines["as_read"][:, number], rtol=0, atol=5.1e-5
        )
    told = pd.read_csv(tmp_path / "lines_columns.csv").set_index("column")
    assert list(told.index) == list(table.columns)
    assert told.loc["gradient_xy", "unit"] == "E"
    assert told.loc["gradient_xy", "frame"] == "enu"
    assert told.loc["time", "unit"] == "UTC"
    assert told.loc["height", "meaning"] == "height of the instrument above the ellipsoid"


def test_axial_vectors_become_three_columns() -> None:
    rates = np.arange(12.0).reshape(4, 3) * 1e-3
    lines = survey.put("lines", ledger_lines(), "rates", rates, frame="body")
    table, told = line_table(lines)
    np.testing.assert_array_equal(table[["rates_x", "rates_y", "rates_z"]], rates)
    assert told["rates_y"]["frame"] == "body"
    assert told["rates_y"]["unit"] == "rad/s"


def test_missing_readings_stay_missing(tmp_path: Path) -> None:
    values = ledger_lines()["gradient"].to_numpy().copy()
    values[1, 2] = np.nan
    lines = survey.put("lines", ledger_lines(), "gradient", values, frame="enu")
    write_lines(lines, TableSettings(), tmp_path)
    column = pd.read_csv(tmp_path / "lines.csv.gz")["gradient_xz"]
    assert list(column.isna()) == [False, True, False, False]
    assert pd.read_parquet(tmp_path / "lines.parquet")["gradient_xz"].isna().sum() == 1


def test_equal_lines_give_equal_bytes_in_any_folder(tmp_path: Path) -> None:
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        for write, chosen in WRITERS:
            write(ledger_lines(), chosen, tmp_path / name)
    names = sorted(path.name for path in (tmp_path / "a").iterdir())
    assert names == ["ledger.csv", "lines.csv.gz", "lines.parquet", "lines_columns.csv"]
    for name in names:
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes()
    # RFC 1952, 2.3.1: bytes 4 to 7 hold the time, 0 for none
    packed = (tmp_path / "a" / "lines.csv.gz").read_bytes()
    assert packed[4:8] == bytes(4)
    assert gzip.decompress(packed).startswith(b"time,longitude,latitude,height,")


def test_the_lines_are_not_changed(tmp_path: Path) -> None:
    lines = ledger_lines()
    before = lines.copy(deep=True)
    for write, chosen in WRITERS:
        write(lines, chosen, tmp_path)
    ledger_summary(lines)
    xr.testing.assert_identical(lines, before)


def test_another_part_and_missing_columns_are_refused(tmp_path: Path) -> None:
    with pytest.raises(SurveyError) as caught:
        write_lines(grid_of(), TableSettings(), tmp_path)
    assert str(caught.value) == (
        "SurveyError: this is the part 'grid', not 'lines'\n"
        "  where: going into stage write_lines\n"
        "  cure:  hand over the lines"
    )
    with pytest.raises(SurveyError) as caught:
        write_ledger(ledger_lines().drop_vars("as_read"), LedgerSettings(), tmp_path)
    assert str(caught.value) == (
        "SurveyError: the lines lack as_read\n"
        "  where: going into stage write_ledger\n"
        "  cure:  deliver it, or put the stage that makes it before this one"
    )
    assert not list(tmp_path.iterdir())
