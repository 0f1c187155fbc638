"""Small parts for the tests of the products, with numbers that can be summed by hand."""

from collections.abc import Iterator
from html.parser import HTMLParser

import numpy as np
import xarray as xr
from matplotlib.figure import Figure
from matplotlib.text import Text
from numpy.typing import NDArray

from gradred import survey
from tests.synthetic import CRS, EAST, NORTH, lines_part, pattern

Array = NDArray[np.float64]


def lines_of(count: int, crs: str = CRS) -> xr.Dataset:
    """Return the first stations of a pattern of two traverses and two ties; nothing removed."""
    flight = pattern(traverses=2, ties=2, step=300.0)
    gradient = np.random.default_rng(3).normal(0.0, 30.0, (len(flight.line), 6))
    part = lines_part(flight, gradient).isel(station=slice(count))
    return part.assign_attrs(crs=crs)


def ledger_lines() -> xr.Dataset:
    """Return four stations with motion and terrain removed, the last flagged.

    As read 10 n in every component, n = 1 to 4; removed 1 n and 3 n: left 6 n.
    """
    rank = np.arange(1.0, 5.0)[:, None] * np.ones(6)
    lines = lines_of(4)
    for name in ("gradient", "as_read"):
        lines = survey.put("lines", lines, name, 10.0 * rank, frame="enu")
    lines = survey.subtract(lines, "motion", rank, 0.5)
    lines = survey.subtract(lines, "terrain", 3.0 * rank, rank, density=2480.0)
    lines = survey.put("lines", lines, "sigma", np.full((4, 6), 4.0), frame="enu")
    return survey.flag(lines, "spike", np.array([False, False, False, True]))


def grid_of(crs: str = CRS, east: float = EAST, north: float = NORTH) -> xr.Dataset:
    """Return a grid of 7 columns of 100 m and 5 rows of 50 m, every value another; one missing."""
    x, y = east + 100.0 * np.arange(7.0), north + 50.0 * np.arange(5.0)
    tensor = np.arange(7.0 * 5 * 6).reshape(5, 7, 6) - 100.0
    tensor[1, 2] = np.nan
    grid = survey.new("grid", crs, easting=x, northing=y)
    grid = survey.put("grid", grid, "gradient", tensor, frame="grid")
    grid = survey.put("grid", grid, "sigma", 0.01 * np.abs(tensor) + 1.0, frame="grid")
    grid = survey.put("grid", grid, "gz", 0.1 * tensor[..., 5])
    return survey.put("grid", grid, "invariant_2", tensor[..., 0] ** 3)


def model_of() -> xr.Dataset:
    """Return a sphere and a prism, and 2 × 3 × 4 voxels with the strongest in layer 2."""
    east, north = EAST + 100.0 * np.arange(4.0), NORTH + 100.0 * np.arange(3.0)
    model = survey.new("model", CRS, cell_easting=east, cell_northing=north)
    model = survey.put("model", model, "body_kind", ["sphere", "prism"])
    place = ["easting [m]", "northing [m]"]
    names = [
        [*place, "height [m]", "radius [m]", "density [kg/m3]", "", ""],
        [*place, "top [m]", "width [m]", "length [m]", "extent [m]", "density [kg/m3]"],
    ]
    model = survey.put("model", model, "body_parameter", names)
    values = [
        [EAST + 120.0, NORTH + 90.0, -150.0, 60.0, 450.12345, np.nan, np.nan],
        [EAST + 250.0, NORTH + 150.0, -40.0, 80.0, 120.0, 60.0, -300.0],
    ]
    errors = [[2.0, 2.5, 7.0, 0.0, 33.0, np.nan, np.nan], [1.0, 1.0, 4.0, 3.0, 3.0, 0.0, 25.0]]
    model = survey.put("model", model, "body_value", values)
    model = survey.put("model", model, "body_sigma", errors)
    top = np.broadcast_to(-50.0 * np.arange(2.0)[:, None, None], (2, 3, 4))
    density = np.linspace(-80.0, 120.0, 24).reshape(2, 3, 4)
    model = survey.put("model", model, "voxel_density", density, chi_squared=1.0)
    model = survey.put("model", model, "voxel_top", top)
    model = survey.put("model", model, "voxel_bottom", top - 50.0)
    for name, column in (
        ("weight", [9, 3, 1]),
        ("chi_squared", [4, 2, 1]),
        ("roughness", [1, 2, 5]),
    ):
        model = survey.put("model", model, f"tradeoff_{name}", column)
    return model


def texts(figure: Figure) -> list[str]:
    """Return every text that a figure shows, not the empty ones."""
    found = figure.findobj(lambda artist: isinstance(artist, Text))
    words = [artist.get_text() for artist in found if isinstance(artist, Text)]
    return [word for word in words if word]


class Page(HTMLParser):
    """What a page holds: its tags with their attributes, its words, the cells of its tables."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self.cells: list[list[str]] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag == "tr":
            self.cells.append([])
        elif tag in ("td", "th"):
            self.cells[-1].append("")

    def handle_data(self, data: str) -> None:
        if self.tags and self.tags[-1][0] != "style":
            self.words.append(" ".join(data.split()))
        if self.tags and self.tags[-1][0] in ("td", "th") and data.strip():
            self.cells[-1][-1] += data

    def of(self, tag: str) -> Iterator[dict[str, str | None]]:
        """Yield the attributes of every tag of a name."""
        return (attrs for name, attrs in self.tags if name == tag)
