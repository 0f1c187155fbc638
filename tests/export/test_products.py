import json
import struct
from functools import cache
from pathlib import Path

import netCDF4
import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
import rasterio
import xarray as xr
from matplotlib.text import Text
from numpy.typing import NDArray

from gradred import survey
from gradred.export.grids import GridSettings, georeference, maps_of, write_grids
from gradred.export.maps import DrawSettings, draw_maps, map_sheet, save_figure, tensor_sheet
from gradred.export.models import ModelSettings, body_table, write_model
from gradred.export.report import ReportSettings, write_report
from gradred.export.sheet import limits_of
from gradred.export.tables import (
    LedgerSettings,
    TableSettings,
    ledger_summary,
    write_ledger,
    write_lines,
)
from gradred.inversion.cautions import CAUTION
from gradred.mapping.derived import DeriveSettings, derive_maps
from gradred.newton.bodies import point_tensor
from tests.synthetic import CRS, EAST, NORTH, lines_part, pattern

Array = NDArray[np.float64]

DRAW = DrawSettings(survey_name="Test block", dots=60)


@cache
def lines() -> xr.Dataset:
    flight = pattern(traverses=4, ties=2, step=100.0)
    random = np.random.default_rng(0)
    n = len(flight.line)
    data = lines_part(flight, random.normal(0, 30, (n, 6)))
    data = survey.subtract(data, "motion", random.normal(0, 100, (n, 6)), 0.1)
    data = survey.subtract(data, "terrain", random.normal(0, 50, (n, 6)), 2.0, density=2480.0)
    data = survey.put("lines", data, "terrain_height", np.full(n, -20.0))
    return survey.put("lines", data, "sigma", np.full((n, 6), 4.0), frame="enu")


@cache
def grid() -> xr.Dataset:
    x, y = EAST + np.arange(50.0, 3000, 100), NORTH + np.arange(50.0, 2000, 100)
    mx, my = np.meshgrid(x, y)
    points = np.column_stack([mx.ravel(), my.ravel(), np.zeros(mx.size)])
    tensor = point_tensor(points, [[EAST + 900, NORTH + 700, -400.0]], [2e10])
    tensor = tensor.reshape(*mx.shape, 6)
    tensor[0, 0] = np.nan
    data = survey.new("grid", CRS, easting=x, northing=y)
    data = survey.put("grid", data, "gradient", tensor, frame="grid")
    data = survey.put("grid", data, "sigma", np.full_like(tensor, 1.5), frame="grid")
    data = survey.put("grid", data, "gz", np.nan_to_num(tensor[..., 5]) / 10)
    made: xr.Dataset = derive_maps(data, DeriveSettings())
    return made


@cache
def model() -> xr.Dataset:
    data = survey.new(
        "model",
        CRS,
        cell_easting=EAST + np.arange(100.0, 1000, 200),
        cell_northing=NORTH + np.arange(100.0, 800, 200),
    )
    data = survey.put("model", data, "body_kind", np.array(["sphere"], dtype=object))
    names = ["easting [m]", "northing [m]", "height [m]", "radius [m]", "density [kg/m3]"]
    data = survey.put("model", data, "body_parameter", np.array([names], dtype=object))
    values = [[EAST + 500.0, NORTH + 400.0, -300.0, 150.0, 600.0]]
    data = survey.put("model", data, "body_value", values)
    data = survey.put("model", data, "body_sigma", [[3.0, 4.0, 9.0, 0.0, 20.0]])
    shape = (3, 4, 5)
    tops = -100.0 * np.arange(3.0)[:, None, None] * np.ones(shape)
    density = np.random.default_rng(1).normal(0, 100, shape)
    for name, cells in (("density", density), ("top", tops), ("bottom", tops - 100.0)):
        data = survey.put("model", data, f"voxel_{name}", cells)
    for name in ("weight", "chi_squared", "roughness"):
        data = survey.put("model", data, f"tradeoff_{name}", [4.0, 2.0, 1.0])
    n = lines().sizes["station"]
    for kind in ("bodies", "voxels"):
        data = survey.put("model", data, f"predicted_{kind}", np.zeros((n, 6)), frame="enu")
        data = survey.put(
            "model", data, f"residual_{kind}", lines()["gradient"].to_numpy(), frame="enu"
        )
        data = survey.put("model", data, f"chi_squared_{kind}", np.ones(6))
    return data


def texts(figure: object) -> str:
    found = figure.findobj(Text)  # type: ignore[attr-defined]
    return "\n".join(text.get_text() for text in found)


def test_parquet_holds_every_column_with_unit_frame_and_place(tmp_path: Path) -> None:
    before = lines().copy(deep=True)
    write_lines(lines(), TableSettings(), tmp_path)
    xr.testing.assert_identical(lines(), before)
    table = pq.read_table(tmp_path / "lines.parquet")
    np.testing.assert_array_equal(table["gradient_zz"], lines()["gradient"].to_numpy()[:, 5])
    about = table.schema.field("removed_terrain_xy").metadata
    assert about[b"unit"] == b"E"
    assert about[b"frame"] == b"enu"
    # GeoParquet 1.1: points as WKB, little-endian, x then y
    geo = json.loads(table.schema.metadata[b"geo"])
    assert geo["version"] == "1.1.0"
    assert geo["columns"]["geometry"]["encoding"] == "WKB"
    order, kind, x, y = struct.unpack("<BIdd", table["geometry"][3].as_py())
    assert (order, kind) == (1, 1)
    assert (x, y) == (lines()["longitude"][3].item(), lines()["latitude"][3].item())


def test_csv_is_read_back_and_its_columns_are_told(tmp_path: Path) -> None:
    write_lines(lines(), TableSettings(), tmp_path)
    table = pd.read_csv(tmp_path / "lines.csv.gz")
    told = pd.read_csv(tmp_path / "lines_columns.csv")
    assert list(table.columns) == list(told["column"])
    # printed to four decimals of an eotvos
    np.testing.assert_allclose(
        table["gradient_xx"], lines()["gradient"].to_numpy()[:, 0], rtol=0, atol=5.1e-5
    )
    first = (tmp_path / "lines.csv.gz").read_bytes()
    write_lines(lines(), TableSettings(), tmp_path)
    assert (tmp_path / "lines.csv.gz").read_bytes() == first


def test_the_ledger_adds_up(tmp_path: Path) -> None:
    table = ledger_summary(lines())
    means = table.pivot_table(index="component", columns="entry", values="mean_E")
    parts = means["left"] + means["rotation of the platform"] + means["attraction of the terrain"]
    np.testing.assert_allclose(means["as read"], parts, rtol=0, atol=1e-9)
    row = table[(table["entry"] == "attraction of the terrain") & (table["component"] == "zz")]
    removed = lines()["removed_terrain"].to_numpy()[:, 5]
    assert row["rms_E"].item() == pytest.approx(np.sqrt(np.mean(removed**2)), rel=1e-12)
    assert row["peak_E"].item() == np.abs(removed).max()
    assert row["sigma_rms_E"].item() == pytest.approx(2.0)
    write_ledger(lines(), LedgerSettings(), tmp_path)
    assert len(pd.read_csv(tmp_path / "ledger.csv")) == 24


def test_geotiffs_lie_where_the_grid_lies(tmp_path: Path) -> None:
    before = grid().copy(deep=True)
    write_grids(grid(), GridSettings(), tmp_path)
    xr.testing.assert_identical(grid(), before)
    assert len(list((tmp_path / "grids").glob("*.tif"))) == len(maps_of(grid()))
    with rasterio.open(tmp_path / "grids" / "gradient_zz.tif") as raster:
        assert raster.crs.to_epsg() == 32633
        assert raster.transform == georeference(grid())
        assert raster.units == ("E",)
        assert raster.tags()["frame"] == "grid"
        band = raster.read(1, masked=True)
        x, y = EAST + 950.0, NORTH + 650.0
        seen = band[raster.index(x, y)]
        # row 0 of the raster lies in the north; single precision
        expected = grid()["gradient"].sel(easting=x, northing=y, component="zz").item()
        assert seen == pytest.approx(expected, rel=1e-6)
        assert band.mask[raster.index(EAST + 50.0, NORTH + 50.0)]


def test_netcdf_units_are_those_of_cf(tmp_path: Path) -> None:
    write_grids(grid(), GridSettings(geotiff=False), tmp_path)
    with netCDF4.Dataset(tmp_path / "grid.nc") as stored:
        assert stored["gradient"].units == "1e-9 s-2"
        assert stored["gz"].units == "1e-5 m s-2"
        assert stored["gradient"].frame == "grid"
        assert "UTM zone 33N" in stored.crs_wkt
    assert not (tmp_path / "grids").exists()


def test_bodies_stand_under_the_caution(tmp_path: Path) -> None:
    write_model(model(), ModelSettings(), tmp_path)
    text = (tmp_path / "bodies.csv").read_text(encoding="utf-8")
    assert text.startswith(f"# {CAUTION}\nbody,kind,parameter,unit,value,standard_error,from\n")
    table = body_table(model())
    assert list(table["from"]) == ["fitted", "fitted", "fitted", "held", "fitted"]
    assert list(table["unit"]) == ["m", "m", "m", "m", "kg/m3"]
    assert survey.open_part(tmp_path / "model.nc")[1].attrs["caution"] == CAUTION


def test_a_map_tells_where_it_lies_and_what_it_is_worth() -> None:
    figure = map_sheet(grid(), "gradient_zz", maps_of(grid())["gradient_zz"], DRAW)
    told = texts(figure)
    for piece in ("EPSG:32633", "UTM zone 33N", "500 m", "grid N", "true N", "Test block"):
        assert piece in told, piece
    assert "standard deviation 1.5 E (median)" in told
    assert "Not for navigation" in told
    # on the central meridian grid and true north are one: 15 E in zone 33
    middle = grid().assign_coords(easting=grid()["easting"] - EAST + 500_000.0 - 1500.0)
    told = texts(map_sheet(middle, "gradient_zz", maps_of(middle)["gradient_zz"], DRAW))
    assert "true N" not in told


def test_colours_are_even_about_zero_where_the_sign_counts() -> None:
    values = np.array([-10.0, 0.0, 5.0, np.nan])
    low, high = limits_of("gradient_xx", values)
    assert low == -high
    assert limits_of("gz", values)[0] != -limits_of("gz", values)[1]
    assert limits_of("gz", np.array([np.nan])) == (-1.0, 1.0)


def test_figures_are_the_same_bytes_twice(tmp_path: Path) -> None:
    chosen = DRAW.model_copy(update={"pdf": True, "contours": 5, "flight_path": True})
    values = maps_of(grid())["gradient_xz"]
    content = []
    for _ in range(2):
        figure = map_sheet(grid(), "gradient_xz", values, chosen, lines())
        made = save_figure(figure, tmp_path / "xz.png", chosen)
        content.append([path.read_bytes() for path in made])
    assert [path.suffix for path in made] == [".png", ".pdf"]
    assert content[0] == content[1]


def test_every_map_is_drawn_and_the_tensor_in_its_arrangement(tmp_path: Path) -> None:
    some = grid()[["gradient", "gz"]].assign_attrs(grid().attrs)
    before = some.copy(deep=True)
    made = draw_maps(some, DRAW, tmp_path)
    xr.testing.assert_identical(some, before)
    assert {path.stem for path in made} == {"tensor", *maps_of(some)}
    told = texts(tensor_sheet(some, "Test block"))
    assert all(f"_{{{c}}}" in told for c in ("xx", "xy", "xz", "yy", "yz", "zz"))


def test_the_report_is_one_page_without_a_network(tmp_path: Path) -> None:
    settings = ReportSettings(survey_name="<b>Block</b> & more", crs=CRS, profiles=1, dots=60)
    write_report(settings, tmp_path, lines=lines(), grid=grid(), model=model())
    page = (tmp_path / "report.html").read_text(encoding="utf-8")
    for forbidden in ("http://", "https://", "<script", "<b>Block"):
        assert forbidden not in page
    assert "&lt;b&gt;Block&lt;/b&gt; &amp; more" in page
    assert CAUTION in page
    assert page.count("<img ") == page.count(' alt="') == page.count("<figcaption>") >= 6
    for title in ("What was flown", "What was removed", "How good it is", "The field", "The model"):
        assert title in page
    write_report(settings, tmp_path, lines=lines(), grid=grid(), model=model())
    assert (tmp_path / "report.html").read_text(encoding="utf-8") == page


def test_a_report_of_nothing_still_opens(tmp_path: Path) -> None:
    write_report(ReportSettings(survey_name="n", crs=CRS), tmp_path)
    page = (tmp_path / "report.html").read_text(encoding="utf-8")
    assert CAUTION in page
    assert "<img" not in page
