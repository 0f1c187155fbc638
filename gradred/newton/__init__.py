"""The field of mass, of the Earth, of Moon and Sun: bare arrays in, arrays out."""

from gradred.newton.bodies import (
    point_gravity,
    point_potential,
    point_tensor,
    prism_gravity,
    prism_potential,
    prism_tensor,
    sphere_gravity,
    sphere_potential,
    sphere_tensor,
)
from gradred.newton.ellipsoid import normal_gravitation, normal_gravity, normal_tensor
from gradred.newton.heightfield import exact_terrain_tensor, terrain_tensor
from gradred.newton.polyhedron import (
    polyhedron_gravity,
    polyhedron_potential,
    polyhedron_tensor,
)
from gradred.newton.sheet import dipping_sheet
from gradred.newton.tides import tide_acceleration, tide_tensor

__all__ = [
    "dipping_sheet",
    "exact_terrain_tensor",
    "normal_gravitation",
    "normal_gravity",
    "normal_tensor",
    "point_gravity",
    "point_potential",
    "point_tensor",
    "polyhedron_gravity",
    "polyhedron_potential",
    "polyhedron_tensor",
    "prism_gravity",
    "prism_potential",
    "prism_tensor",
    "sphere_gravity",
    "sphere_potential",
    "sphere_tensor",
    "terrain_tensor",
    "tide_acceleration",
    "tide_tensor",
]
