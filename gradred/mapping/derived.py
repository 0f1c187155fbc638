"""Maps that are computed from the mapped tensor, cell by cell."""

from __future__ import annotations

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gradred import survey
from gradred.stage import Settings, stage
from gradred.tensor import horizontal_curvature, invariants

Array = NDArray[np.float64]

DERIVED = (
    "horizontal_curvature",
    "invariant_1",
    "invariant_2",
    "dimensionality",
    "total_gradient",
    "tilt",
)


class DeriveSettings(Settings):
    """Settings of the stage ``derive_maps``: there is nothing to set."""


def derived_maps(tensor: Array) -> dict[str, Array]:
    r"""Return what a tensor says in every frame turned about the vertical.

    .. math:: C = \sqrt{((Γ_{yy} - Γ_{xx})/2)^2 + Γ_{xy}^2}, \quad
        D = -\frac{27 I_2^2}{4 I_1^3}, \quad
        A = \sqrt{Γ_{xz}^2 + Γ_{yz}^2 + Γ_{zz}^2}, \quad
        θ = \arctan\frac{Γ_{zz}}{\sqrt{Γ_{xz}^2 + Γ_{yz}^2}}

    the horizontal curvature C, the invariants I1 and I2, the dimensionality D (0 over a source
    that is long in one direction, 1 over a point or anything seen as one), the length A of the
    gradient of gz and its tilt θ.

    Parameters
    ----------
    tensor : (..., 6) array
        E, z vertical, trace zero.

    Returns
    -------
    dict of (...) arrays
        E for C and A, E2 and E3 for the invariants, degrees for θ, 1 for D; D and θ are NaN
        where the tensor vanishes.

    Accuracy
    --------
    Rounding of the tensor given; noise makes C, A and D positive where there is no signal.

    Source
    ------
    Pedersen and Rasmussen 1990, Geophysics 55, 1558-1566 (invariants and dimensionality); Miller
    and Singh 1994, J. Applied Geophysics 32, 213-217 (tilt; from memory).

    Checked by
    ----------
    ``tests/mapping/test_derived.py`` over a point and a line of mass in closed form.
    """
    first, second = invariants(tensor)
    flat = np.hypot(tensor[..., 2], tensor[..., 4])
    total = np.hypot(flat, tensor[..., 5])
    there = (first < 0.0) & (total > 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        dimensionality = np.clip(-27.0 * second**2 / (4.0 * first**3), 0.0, 1.0)
    return {
        "horizontal_curvature": horizontal_curvature(tensor),
        "invariant_1": first,
        "invariant_2": second,
        "dimensionality": np.where(there, dimensionality, np.nan),
        "total_gradient": total,
        "tilt": np.where(there, np.degrees(np.arctan2(tensor[..., 5], flat)), np.nan),
    }


@stage(makes="grid", needs={"grid": ("gradient",)}, adds=DERIVED, physics=derived_maps)
def derive_maps(grid: xr.Dataset, settings: DeriveSettings) -> xr.Dataset:
    """Derive maps of curvature, invariants, dimensionality, total gradient and tilt."""
    survey.frame_of("grid", grid, "gradient", "grid", where="stage derive_maps")
    out = grid
    for name, values in derived_maps(grid["gradient"].to_numpy()).items():
        out = survey.put("grid", out, name, values)
    return out
