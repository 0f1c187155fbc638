"""The bodies that can be fitted: their parameters, and their tensors."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Annotated, Final, Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from gradred.newton.bodies import prism_tensor, sphere_tensor
from gradred.newton.polyhedron import polyhedron_tensor
from gradred.newton.sheet import dipping_sheet
from gradred.stage import Degrees, Metres, Settings

Array = NDArray[np.float64]

Easting = Annotated[Metres, Field(ge=-1e8, le=1e8)]
Height = Annotated[Metres, Field(ge=-50_000, le=9000)]
Size = Annotated[Metres, Field(ge=1, le=100_000)]
Contrast = Annotated[float, Field(ge=-6000, le=6000)]
Spread = Annotated[float, Field(gt=0, le=100_000)]

_SD: Final = "standard deviation a priori of a parameter about its start, by name, in its unit"


class SphereStart(Settings):
    """Settings of the stage ``fit_bodies``: where the fit of a sphere starts."""

    kind: Literal["sphere"] = Field(description="a sphere")
    easting: Easting = Field(ge=-1e8, le=1e8, description="easting of the centre, survey CRS")
    northing: Easting = Field(ge=-1e8, le=1e8, description="northing of the centre, survey CRS")
    height: Height = Field(
        ge=-50_000, le=9000, description="height of the centre above the ellipsoid"
    )
    radius: Size = Field(ge=1, le=100_000, description="radius")
    density: Contrast = Field(ge=-6000, le=6000, description="density contrast, kg/m3")
    hold: list[str] = Field(
        ["radius"],
        description="parameters kept at their start; a sphere shows its mass, not its radius",
    )
    sd: dict[str, Spread] = Field({}, description=_SD)


class PrismStart(Settings):
    """Settings of the stage ``fit_bodies``: where the fit of an upright prism starts."""

    kind: Literal["prism"] = Field(description="an upright prism along the axes of the grid")
    easting: Easting = Field(ge=-1e8, le=1e8, description="easting of the middle, survey CRS")
    northing: Easting = Field(ge=-1e8, le=1e8, description="northing of the middle, survey CRS")
    top: Height = Field(ge=-50_000, le=9000, description="height of the top above the ellipsoid")
    width: Size = Field(ge=1, le=100_000, description="side along easting")
    length: Size = Field(ge=1, le=100_000, description="side along northing")
    extent: Size = Field(ge=1, le=100_000, description="from top to bottom")
    density: Contrast = Field(ge=-6000, le=6000, description="density contrast, kg/m3")
    hold: list[str] = Field([], description="parameters kept at their start")
    sd: dict[str, Spread] = Field({}, description=_SD)


class SheetStart(Settings):
    """Settings of the stage ``fit_bodies``: where the fit of a dipping sheet starts."""

    kind: Literal["sheet"] = Field(description="a dipping sheet")
    easting: Easting = Field(
        ge=-1e8, le=1e8, description="easting of the middle of its upper edge, survey CRS"
    )
    northing: Easting = Field(
        ge=-1e8, le=1e8, description="northing of the middle of its upper edge, survey CRS"
    )
    top: Height = Field(
        ge=-50_000, le=9000, description="height of the upper edge above the ellipsoid"
    )
    strike: Degrees = Field(ge=-360, le=360, description="strike, clockwise from grid north")
    dip: Degrees = Field(ge=1, le=179, description="dip, to the right of the strike")
    length: Size = Field(ge=1, le=100_000, description="length along strike")
    extent: Size = Field(ge=1, le=100_000, description="length down dip")
    thickness: Size = Field(ge=1, le=100_000, description="thickness across the sheet")
    density: Contrast = Field(ge=-6000, le=6000, description="density contrast, kg/m3")
    hold: list[str] = Field(
        ["thickness"],
        description="parameters kept at their start; a thin sheet shows thickness times contrast",
    )
    sd: dict[str, Spread] = Field({}, description=_SD)


Start = SphereStart | PrismStart | SheetStart


@dataclass(frozen=True)
class Shape:
    """A kind of body: its parameters with their units, the contrast last; its field; its volume.

    ``unit_tensor`` takes parameters and points (n, 3) to (n, 6) E of 1 kg/m3, in the ``grid``
    frame; ``volume`` takes parameters to m3.
    """

    parameters: dict[str, str]
    unit_tensor: Callable[[Array, Array], Array]
    volume: Callable[[Array], float]

    def tensor(self, values: Array, points: Array) -> Array:
        """Return the (n, 6) tensor, E, at (n, 3) points, ``grid``."""
        return np.asarray(values[-1] * self.unit_tensor(values, points))


_STEP: Final = {"m": 10.0, "degree": 1.0, "kg/m3": 20.0}
# (0.1 m / 100 m)2 = 1e-6 of a derivative is cut off; 1e-13 of the field over 1e-3 of it is rounding
_DERIVATIVE_STEP: Final = {"m": 0.1, "degree": 0.01}


def step_of(unit: str) -> float:
    """Return how far a parameter of a unit moves to change the field by a like amount."""
    return _STEP[unit]


def derivative_step_of(unit: str) -> float:
    """Return half the step of a central difference in a parameter of a unit."""
    return _DERIVATIVE_STEP[unit]


def bounds_of(name: str) -> tuple[float, float]:
    """Return the bounds of a parameter: those of its start value."""
    for start in (SphereStart, PrismStart, SheetStart):
        field = start.model_fields.get(name)
        if field is not None:
            found = {type(item).__name__: item for item in field.metadata}
            return float(found["Ge"].ge), float(found["Le"].le)
    raise KeyError(name)


def _sphere(values: Array, points: Array) -> Array:
    easting, northing, height, radius, _ = values
    return sphere_tensor(points, [[easting, northing, height]], [radius], [1.0])


def _prism(values: Array, points: Array) -> Array:
    easting, northing, top, width, length, extent, _ = values
    box = [
        easting - 0.5 * width,
        easting + 0.5 * width,
        northing - 0.5 * length,
        northing + 0.5 * length,
        top - extent,
        top,
    ]
    return prism_tensor(points, [box], 1.0)


def _sheet(values: Array, points: Array) -> Array:
    vertices, faces = dipping_sheet(*values[:-1])
    return polyhedron_tensor(points, vertices, faces, 1.0)


def _ball(values: Array) -> float:
    return float(4.0 / 3.0 * np.pi * values[3] ** 3)


def _box(values: Array) -> float:
    return float(np.prod(values[3:6]))


def _slab(values: Array) -> float:
    return float(np.prod(values[5:8]))


SHAPES: Final[dict[str, Shape]] = {
    "sphere": Shape(
        {
            "easting": "m",
            "northing": "m",
            "height": "m",
            "radius": "m",
            "density": "kg/m3",
        },
        _sphere,
        _ball,
    ),
    "prism": Shape(
        {
            "easting": "m",
            "northing": "m",
            "top": "m",
            "width": "m",
            "length": "m",
            "extent": "m",
            "density": "kg/m3",
        },
        _prism,
        _box,
    ),
    "sheet": Shape(
        {
            "easting": "m",
            "northing": "m",
            "top": "m",
            "strike": "degree",
            "dip": "degree",
            "length": "m",
            "extent": "m",
            "thickness": "m",
            "density": "kg/m3",
        },
        _sheet,
        _slab,
    ),
}
