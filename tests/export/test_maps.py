import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from cmcrameri import cm
from matplotlib.collections import PolyCollection
from matplotlib.figure import Figure
from matplotlib.text import Annotation
from pydantic import ValidationError
from pyproj import Geod, Transformer

from gradred import survey
from gradred.errors import SurveyError
from gradred.export.grids import maps_of
from gradred.export.maps import (
    CAUTION,
    DrawSettings,
    draw_maps,
    map_sheet,
    save_figure,
    tensor_sheet,
)
from gradred.export.sheet import limits_of
from tests.export.parts import grid_of, lines_of, texts
from tests.synthetic import EAST, NORTH

DRAW = DrawSettings(survey_name="Block 7", dots=50)


def sheet_of(grid: xr.Dataset, name: str = "gradient_zz", **chosen: Any) -> Figure:
    settings = DRAW.model_copy(update=chosen)
    return map_sheet(grid, name, maps_of(grid)[name], settings, lines_of(8))


def wide_grid(crs: str, east: float, north: float, side: float) -> xr.Dataset:
    axis = np.linspace(0.0, side, 11)
    grid = survey.new("grid", crs, easting=east + axis, northing=north + axis)
    return survey.put("grid", grid, "gradient", np.ones((11, 11, 6)), frame="grid")


@pytest.mark.parametrize(
    ("crs", "east", "north"),
    [
        ("EPSG:32633", EAST, NORTH),
        ("EPSG:32633", 650_000.0, NORTH),
        ("EPSG:32733", 650_000.0, 7_000_000.0),
        ("EPSG:32633", 500_000.0, NORTH),
        ("EPSG:32633", 506_000.0, NORTH),
    ],
)
def test_true_north_points_where_the_ellipsoid_says(crs: str, east: float, north: float) -> None:
    figure = sheet_of(grid_of(crs, east, north))
    axes = figure.axes[0]
    # azimuth of grid north by a geodesic of 1 km up the grid
    back = Transformer.from_crs(crs, "EPSG:4326", always_xy=True)
    x, y = east + 300.0, north + 100.0
    foot, tip = back.transform(x, y - 500.0), back.transform(x, y + 500.0)
    azimuth = Geod(ellps="WGS84").inv(*foot, *tip)[0]
    told = [text for text in texts(figure) if text.startswith(("grid N", "true N"))]
    arrows = [text for text in axes.texts if isinstance(text, Annotation)]
    if abs(azimuth) <= 0.1:
        assert told == ["grid N"]
        assert len(arrows) == 1
        return
    assert told[0] == "grid N"
    angle = float(told[1].removeprefix("true N ").removesuffix("°").replace("−", "-"))
    # seen from grid north, clockwise, true north lies at minus the azimuth; printed to 0.1°
    assert angle == pytest.approx(-azimuth, abs=0.051)
    leans = [float(a.xy[0]) - float(a.xyann[0]) for a in arrows]
    assert leans[0] == 0.0
    assert np.sign(leans[1]) == -np.sign(azimuth)


@pytest.mark.parametrize("side", [900.0, 2300.0, 6000.0, 17_000.0, 140_000.0])
def test_the_scale_bar_is_as_long_as_it_says(side: float) -> None:
    figure = sheet_of(wide_grid("EPSG:32633", EAST, NORTH, side))
    axes = figure.axes[0]
    bars = [c for c in axes.collections if isinstance(c, PolyCollection)]
    corners = np.concatenate([bar.get_paths()[0].vertices for bar in bars])
    drawn = 1000.0 * float(np.ptp(corners[:, 0]))
    label = next(t for t in texts(figure) if re.fullmatch(r"[0-9]+ k?m", t))
    number, unit = label.split(" ")
    length = float(number) * (1000.0 if unit == "km" else 1.0)
    # coordinates of 500 km in double precision: 1e-10 km
    assert drawn == pytest.approx(length, abs=1e-6)
    assert number.rstrip("0") in ("1", "2", "5")
    assert 0.1 * side < length <= 0.3 * 1.1 * side


@pytest.mark.parametrize(
    ("crs", "east", "north", "side"),
    [
        ("EPSG:32633", EAST, NORTH, 1500.0),
        ("EPSG:32633", EAST, NORTH, 6000.0),
        # across 180°: Fiji
        ("EPSG:32701", 177_000.0, 8_100_000.0, 9000.0),
        ("EPSG:32633", EAST, NORTH, 150_000.0),
    ],
)
def test_meridians_and_parallels_carry_their_own_angle(
    crs: str, east: float, north: float, side: float
) -> None:
    axes = sheet_of(wide_grid(crs, east, north, side)).axes[0]
    back = Transformer.from_crs(crs, "EPSG:4326", always_xy=True)
    found = set()
    for text in axes.texts:
        match = re.fullmatch(r"\s*([0-9]+)°([0-9.]+)′([EWNS])", text.get_text())
        if match is None:
            continue
        value = (float(match[1]) + float(match[2]) / 60.0) * (1 if match[3] in "EN" else -1)
        x, y = text.get_position()
        lon, lat = back.transform(1e3 * x, 1e3 * y)
        gap = (lon if match[3] in "EW" else lat) - value
        # a curved line told by 50 points over at most 150 km: within 1e-4 degree
        assert abs((gap + 180.0) % 360.0 - 180.0) < 1e-4, text.get_text()
        assert text.get_text() not in found
        found.add(text.get_text())
    assert 2 <= len(found) <= 12


@pytest.mark.parametrize("name", ["gradient_xx", "gradient_yz", "invariant_2"])
def test_signed_maps_are_even_about_zero(name: str) -> None:
    image = sheet_of(grid_of(), name).axes[0].images[0]
    low, high = image.get_clim()
    values = maps_of(grid_of())[name].to_numpy()
    there = values[np.isfinite(values)]
    assert low == -high
    assert high == np.abs(np.percentile(there, [0.5, 99.5])).max()
    assert image.get_cmap() == cm.vik


def test_unsigned_maps_run_from_low_to_high() -> None:
    image = sheet_of(grid_of(), "sigma_xy").axes[0].images[0]
    values = maps_of(grid_of())["sigma_xy"].to_numpy()
    assert image.get_clim() == tuple(np.percentile(values[np.isfinite(values)], [0.5, 99.5]))
    assert image.get_cmap() == cm.batlow
    low, high = limits_of("gz", np.full(3, 2.0))
    assert low == 2.0 < high


def test_the_field_is_drawn_on_its_ground() -> None:
    image = sheet_of(grid_of()).axes[0].images[0]
    # half a cell around the centres, in km
    expected = [EAST - 50.0, EAST + 650.0, NORTH - 25.0, NORTH + 225.0]
    np.testing.assert_allclose(1e3 * np.array(image.get_extent()), expected, rtol=0, atol=1e-6)
    assert image.origin == "lower"
    drawn = np.ma.filled(np.ma.asarray(image.get_array()).astype(float), np.nan)
    np.testing.assert_array_equal(drawn, maps_of(grid_of())["gradient_zz"])


def test_a_sheet_tells_what_place_and_worth() -> None:
    grid = survey.put(
        "grid",
        grid_of(),
        "datum",
        np.zeros(6),
        frame="grid",
        shortest_wavelength=412.3,
        line_spacing=200.0,
    )
    grid = survey.put("grid", grid, "sigma_gz", np.full((5, 7), 0.25))
    told = "\n".join(texts(sheet_of(grid)))
    middle = np.nanmedian(grid["sigma"].to_numpy()[..., 5])
    for words in (
        r"$\Gamma_{zz}$  ·  Block 7",
        "WGS 84 / UTM zone 33N (EPSG:32633)",
        "axes x easting, y northing, z up",
        "no wavelength below 412 m is resolved",
        f"standard deviation {middle:.2g} E (median)",
        CAUTION,
        "easting, km",
        "northing, km",
    ):
        # long lines of the foot are wrapped
        assert words in told or words in told.replace("\n", " "), words
    told = " ".join("\n".join(texts(sheet_of(grid, "gz"))).split())
    assert "$g_z$, positive down · Block 7" in told
    assert "standard deviation 0.25 mGal (median)" in told
    assert "level and long wavelengths are not from this survey" in told
    told = " ".join(texts(tensor_sheet(grid, "Block 7")))
    assert all(words in told for words in (CAUTION, "EPSG:32633", "Block 7", "true N"))


def test_the_components_stand_in_the_places_of_the_tensor() -> None:
    axes = tensor_sheet(grid_of(), "Block 7").axes[:9]
    titles = [a.get_title(loc="left") for a in axes]
    assert titles == [
        r"$\Gamma_{xx}$", r"$\Gamma_{xy}$", r"$\Gamma_{xz}$",
        "", r"$\Gamma_{yy}$", r"$\Gamma_{yz}$",
        "", "", r"$\Gamma_{zz}$",
    ]  # fmt: skip
    for a, title in zip(axes, titles, strict=True):
        if title:
            drawn = np.ma.filled(np.ma.asarray(a.images[0].get_array()).astype(float), np.nan)
            name = f"gradient_{title[9:11]}"
            np.testing.assert_array_equal(drawn, maps_of(grid_of())[name])


def test_a_name_with_dollars_is_no_formula(tmp_path: Path) -> None:
    chosen = DRAW.model_copy(update={"survey_name": r"Cut $\frac{ at 5$"})
    figure = map_sheet(grid_of(), "gz", maps_of(grid_of())["gz"], chosen)
    # a name read as a formula would stop the drawing
    assert save_figure(figure, tmp_path / "gz.png", chosen) == [tmp_path / "gz.png"]
    told = texts(tensor_sheet(grid_of(), chosen.survey_name))
    assert any(text.startswith(r"Cut \$\frac{ at 5\$") for text in told)


def test_an_empty_map_is_drawn_white(tmp_path: Path) -> None:
    grid = survey.put("grid", grid_of(), "gradient", np.full((5, 7, 6), np.nan), frame="grid")
    grid = survey.put("grid", grid, "sigma", np.full((5, 7, 6), np.nan), frame="grid")
    figure = sheet_of(grid, contours=3)
    assert not any("standard deviation" in text for text in texts(figure))
    assert save_figure(figure, tmp_path / "zz.png", DRAW) == [tmp_path / "zz.png"]


def test_contours_and_flight_path_are_drawn_when_asked() -> None:
    plain, full = sheet_of(grid_of()).axes[0], sheet_of(grid_of(), contours=4).axes[0]
    assert len(full.collections) == len(plain.collections) + 1
    flown = sheet_of(grid_of(), flight_path=True).axes[0]
    path = next(line for line in flown.lines if line.get_marker() == ".")
    np.testing.assert_array_equal(path.get_xdata(), lines_of(8)["easting"] / 1e3)


def test_pictures_are_the_same_bytes_and_the_grid_stays(tmp_path: Path) -> None:
    grid = grid_of()
    before = grid.copy(deep=True)
    chosen = DRAW.model_copy(update={"pdf": True, "contours": 3, "flight_path": True})
    made = []
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        figure = map_sheet(grid, "gz", maps_of(grid)["gz"], chosen, lines_of(8))
        made.append(save_figure(figure, tmp_path / name / "gz.png", chosen))
    xr.testing.assert_identical(grid, before)
    assert [path.name for path in made[0]] == ["gz.png", "gz.pdf"]
    # PNG, 5.2: eight bytes of signature; PDF 1.7, 7.5.2: the header
    for first, second, start in zip(*made, (b"\x89PNG\r\n\x1a\n", b"%PDF-1."), strict=True):
        assert first.read_bytes() == second.read_bytes()
        assert first.read_bytes().startswith(start)


def test_another_part_and_settings_out_of_bounds_are_refused(tmp_path: Path) -> None:
    with pytest.raises(SurveyError) as caught:
        draw_maps(lines_of(3), DRAW, tmp_path)
    assert str(caught.value) == (
        "SurveyError: this is the part 'lines', not 'grid'\n"
        "  where: going into stage draw_maps\n"
        "  cure:  hand over the grid"
    )
    assert not list(tmp_path.iterdir())
    with pytest.raises(ValidationError) as faults:
        DrawSettings.model_validate({"survey_name": "n", "dots": 20, "contours": -1})
    assert [(e["loc"], e["msg"]) for e in faults.value.errors()] == [
        (("dots",), "Input should be greater than or equal to 50"),
        (("contours",), "Input should be greater than or equal to 0"),
    ]
