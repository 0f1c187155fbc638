"""Reading flight lines: what is delivered arrives in gradred's units, frames and signs."""

import gzip
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr

from gradred import survey
from gradred.ingest.tables import given, read_lines
from tests.ingest.deliveries import COLUMNS, GOOD, STATED, columns, settings, table


def test_a_nine_element_table_becomes_the_part_lines(tmp_path: Path) -> None:
    lines = read_lines(settings(table(tmp_path)))
    assert lines.attrs["crs"] == "EPSG:32633"
    assert lines["line"].to_numpy().tolist() == ["L10", "L10", "L10", "T90", "T90"]
    assert lines["kind"].to_numpy().tolist() == ["traverse"] * 3 + ["tie"] * 2
    assert lines["flight"].to_numpy().tolist() == ["F1"] * 5
    assert lines["time"].to_numpy()[2] == np.datetime64("2031-03-05T08:00:02.5")
    # the first row by hand: means and half differences of the off-diagonal pairs, exact in binary
    np.testing.assert_array_equal(lines["gradient"][0], [1.0, 2.25, 3.25, 4.0, 5.25, -5.0])
    np.testing.assert_array_equal(lines["antisymmetric"][0], [0.25, -0.25, 0.25])
    assert lines["gradient"].attrs["frame"] == lines["antisymmetric"].attrs["frame"] == "body"
    np.testing.assert_array_equal(lines["as_read"], lines["gradient"])
    np.testing.assert_array_equal(lines["rates"][0], [1e-5, 2e-5, 3e-5])
    assert not lines["flag"].to_numpy().any()
    # on the central meridian of zone 33: false easting, and no convergence (PROJ: 1e-9 degrees)
    np.testing.assert_allclose(lines["easting"][:3], 500_000.0, atol=1e-6)
    np.testing.assert_allclose(lines["convergence"][:3], 0.0, atol=1e-9)


def test_what_the_settings_say_comes_is_what_comes(tmp_path: Path) -> None:
    stated = settings(table(tmp_path))
    assert given(stated) == ("heading", "pitch", "roll", "rates", "clearance", "antisymmetric")
    assert set(given(stated)) <= set(read_lines(stated).data_vars)


def six(**more: Any) -> dict[str, Any]:
    return {"columns": columns(yx=None, zx=None, zy=None), **more}


def test_six_elements_are_the_tensor(tmp_path: Path) -> None:
    lines = read_lines(settings(table(tmp_path), **six()))
    np.testing.assert_array_equal(lines["gradient"][0], [1.0, 2.0, 3.0, 4.0, 5.0, -5.0])
    assert "antisymmetric" not in lines


@pytest.mark.parametrize("absent", ["xx", "yy", "zz"])
def test_five_elements_are_completed_by_a_zero_trace(tmp_path: Path, absent: str) -> None:
    stated = six(columns=columns(yx=None, zx=None, zy=None, **{absent: None}))
    lines = read_lines(settings(table(tmp_path), **stated))
    place = ["xx", "xy", "xz", "yy", "yz", "zz"].index(absent)
    whole = [1.0, 2.0, 3.0, 4.0, 5.0, -5.0]
    assert lines["gradient"].attrs["completed"] == lines["as_read"].attrs["completed"] == absent
    assert lines["gradient"].to_numpy()[0, place] == whole[place]


def test_signs_and_units_are_taken_as_stated(tmp_path: Path) -> None:
    units = {
        "gradient": "uGal/m", "height": "ft", "clearance": "ft", "longitude": "deg",
        "attitude": "deg", "rates": "mrad/s",
    }  # fmt: skip
    plain = read_lines(settings(table(tmp_path)))
    turned = read_lines(
        settings(
            table(tmp_path),
            units=units,
            sign="static-negative",
            rates_sign="left-handed",
            height_reference="orthometric",
            separation=45.5,
        )
    )
    # 1 uGal/m = 10 E and 1 ft = 0.3048 m, both exact; one rounding each
    np.testing.assert_allclose(turned["gradient"], -10.0 * plain["gradient"], rtol=1e-15)
    np.testing.assert_allclose(turned["antisymmetric"], -10.0 * plain["antisymmetric"], rtol=1e-15)
    np.testing.assert_allclose(turned["rates"], -1e-3 * plain["rates"], rtol=1e-15)
    np.testing.assert_allclose(turned["height"], 0.3048 * plain["height"] + 45.5, rtol=1e-15)
    np.testing.assert_allclose(turned["clearance"], 0.3048 * plain["clearance"], rtol=1e-15)


@pytest.mark.parametrize(
    "text",
    [
        "\ufeff" + GOOD,
        GOOD.replace("\n", "\r\n"),
        GOOD.replace("\n", "\r"),
        GOOD.removesuffix("\n"),
        GOOD.replace(",", " , "),
        GOOD + "\n\n",
        GOOD.replace("F1,T90", '"F1","T90"'),
    ],
    ids=["mark", "CRLF", "CR", "no last line end", "padded", "empty rows", "quotes"],
)
def test_ways_of_writing_the_same_table(tmp_path: Path, text: str) -> None:
    expected = read_lines(settings(table(tmp_path)))
    xr.testing.assert_equal(read_lines(settings(table(tmp_path, text, "other.csv"))), expected)


def test_other_delimiters_gzip_comments_and_no_header(tmp_path: Path) -> None:
    expected = read_lines(settings(table(tmp_path)))
    for delimiter in ";\t|":
        path = table(tmp_path, GOOD.replace(",", delimiter), "other.csv")
        xr.testing.assert_equal(read_lines(settings(path, delimiter=delimiter)), expected)
    path = table(tmp_path, GOOD.replace(",", "   ").replace("\nF1", "\n  F1"), "blanks.dat")
    xr.testing.assert_equal(read_lines(settings(path, delimiter=" ")), expected)
    path = table(tmp_path, gzip.compress(GOOD.encode()), "lines.csv.gz")
    xr.testing.assert_equal(read_lines(settings(path)), expected)
    path = table(tmp_path, "# made up\n" + GOOD.replace("F1,T90", "# pause\nF1,T90", 1), "c.csv")
    xr.testing.assert_equal(read_lines(settings(path, header=2, comment="#")), expected)
    path = table(tmp_path, GOOD.partition("\n")[2], "bare.csv")
    header = GOOD.partition("\n")[0].split(",")
    numbered = {name: str(header.index(column) + 1) for name, column in COLUMNS.items()}
    xr.testing.assert_equal(read_lines(settings(path, header=0, columns=numbered)), expected)


def test_several_tables_are_one_survey(tmp_path: Path) -> None:
    header, *rows = GOOD.splitlines(keepends=True)
    first = table(tmp_path, "".join([header, *rows[:2]]), "first.csv")
    second = table(tmp_path, "".join([header, *rows[2:]]), "second.csv")
    xr.testing.assert_equal(
        read_lines(settings(first, second)), read_lines(settings(table(tmp_path)))
    )


def test_missing_values_are_kept_and_flagged(tmp_path: Path) -> None:
    header, *rows = GOOD.splitlines()
    fields = [row.split(",") for row in rows]
    fields[0][13], fields[1][4], fields[2][8], fields[3][10] = "", "*", "-9999.0", " nan "
    text = "\n".join([header, *(",".join(row) for row in fields), ""])
    lines = read_lines(settings(table(tmp_path, text), nulls=["*", "-9999"]))
    assert survey.flag_counts(lines) == {
        "reading_missing": 1, "position_missing": 1, "attitude_missing": 1, "rates_missing": 1,
        "spike": 0, "outside_terrain_model": 0, "rejected_by_processor": 0,
    }  # fmt: skip
    assert lines["flag"].to_numpy().tolist() == [1, 2, 4, 8, 0]
    assert np.isnan(lines["latitude"].to_numpy()).tolist() == [False, True, False, False, False]
    assert np.isnan(lines["easting"].to_numpy()).tolist() == [False, True, False, False, False]


@pytest.mark.parametrize(
    ("date", "date_format"),
    [
        ("2031-03-05", "YYYY-MM-DD"),
        ("2031/03/05", "YYYY/MM/DD"),
        ("20310305", "YYYYMMDD"),
        ("05/03/2031", "DD/MM/YYYY"),
        ("03/05/2031", "MM/DD/YYYY"),
    ],
)
def test_a_date_beside_the_time_of_day(tmp_path: Path, date: str, date_format: str) -> None:
    expected = read_lines(settings(table(tmp_path)))["time"]
    clock = GOOD.replace("2031-03-05T", f"{date},").replace("time", "day,clock")
    stated = {"columns": columns(time="clock", date="day"), "date_format": date_format}
    lines = read_lines(settings(table(tmp_path, clock), **stated))
    np.testing.assert_array_equal(lines["time"], expected)
    seconds = clock
    for text, second in (
        ("08:00:00", "28800"), ("08:00:01", "28801"), ("08:00:02.5", "28802.5"),
        ("08:10:00", "29400"), ("08:10:01", "29401"),
    ):  # fmt: skip
        seconds = seconds.replace(f",{text},", f",{second},")
    stated["columns"] = columns(time=None, seconds="clock", date="day")
    lines = read_lines(settings(table(tmp_path, seconds), **stated))
    np.testing.assert_array_equal(lines["time"], expected)


def test_times_ahead_of_utc_and_times_that_say_utc(tmp_path: Path) -> None:
    expected = read_lines(settings(table(tmp_path)))["time"].to_numpy()
    ahead = read_lines(settings(table(tmp_path), ahead_of_utc=18.0))["time"].to_numpy()
    np.testing.assert_array_equal(expected - ahead, np.timedelta64(18, "s"))
    said = table(tmp_path, GOOD.replace(",15.0", "Z,15.0"), "z.csv")
    np.testing.assert_array_equal(read_lines(settings(said))["time"], expected)


def test_a_column_of_kind_and_no_column_of_flight(tmp_path: Path) -> None:
    text = GOOD.replace("flight", "kind").replace("F1,L10", "Traverse,L10")
    text = text.replace("F1,T90", "repeat,T90")
    stated = {"columns": columns(flight=None, kind="kind"), "ties": None}
    lines = read_lines(settings(table(tmp_path, text), **stated))
    assert lines["kind"].to_numpy().tolist() == ["traverse"] * 3 + ["repeat"] * 2
    assert lines["flight"].to_numpy().tolist() == ["2031-03-05"] * 5


def test_the_settings_are_not_changed_by_reading(tmp_path: Path) -> None:
    stated = settings(table(tmp_path))
    before = stated.model_dump()
    read_lines(stated)
    assert stated.model_dump() == before
    assert STATED["columns"] is COLUMNS
