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


Start = SphereStart | PrismStart | SheetStart


@dataclass(frozen=True)
class Shape:
    """Parameters of a kind of body with unit, step of the search and bounds, and its tensor."""

    parameters: dict[str, str]
    tensor: Callable[[Array, Array], Array]


_STEP: Final = {"m": 10.0, "degree": 1.0, "kg/m3": 20.0}


def step_of(unit: str) -> float:
    """Return how far a parameter of a unit moves to change the field by a like amount."""
    return _STEP[unit]


def bounds_of(name: str) -> tuple[float, float]:
    """Return the bounds of a parameter: those of its start value."""
    for start in (SphereStart, PrismStart, SheetStart):
        field = start.model_fields.get(name)
        if field is not None:
            found = {type(item).__name__: item for item in field.metadata}
            return float(found["Ge"].ge), float(found["Le"].le)
    raise KeyError(name)


def _sphere(values: Array, points: Array) -> Array:
    easting, northing, height, radius, density = values
    return sphere_tensor(points, [[easting, northing, height]], [radius], [density])


def _prism(values: Array, points: Array) -> Array:
    easting, northing, top, width, length, extent, density = values
    box = [
        easting - 0.5 * width,
        easting + 0.5 * width,
        northing - 0.5 * length,
        northing + 0.5 * length,
        top - extent,
        top,
    ]
    return prism_tensor(points, [box], density)


def _sheet(values: Array, points: Array) -> Array:
    *shape, density = values
    vertices, faces = dipping_sheet(*shape)
    return polyhedron_tensor(points, vertices, faces, density)


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
    ),
}
