"""The normal field of the level ellipsoid, along the lines."""

from __future__ import annotations

from typing import Literal

import numpy as np
import xarray as xr
from pydantic import Field

from gradred import survey
from gradred.newton.ellipsoid import normal_tensor
from gradred.reduction.crossings import Array
from gradred.stage import Degrees, Metres, Settings, stage


class NormalFieldSettings(Settings):
    """Settings of the stage ``remove_normal_field``."""

    ellipsoid: Literal["GRS80", "WGS84"] = Field("GRS80", description="level ellipsoid")
    attitude_sd: Degrees = Field(
        0.005, ge=0, le=5, description="standard deviation of the attitude that turned the readings"
    )
    height_sd: Metres = Field(
        0.2, ge=0, le=100, description="standard deviation of the stations' heights"
    )


def normal_sigma(normal: Array, attitude_sd: float, height_sd: float) -> Array:
    r"""Return what errors of attitude and height make of the normal field, ``enu`` frame.

    .. math:: σ_{xz} = δ\,|Γ_{zz} - Γ_{xx}|, \quad σ_{xy} = δ\,|Γ_{yy} - Γ_{xx}|, \quad
        σ_{zz}^2 = (2 δ^2 |Γ_{zz} - Γ_{yy}|)^2 + (2 δ Γ_{yz})^2 + (0.00145\,σ_h)^2

    4.6 E per milliradian of tilt; a tilt enters the diagonal by its square and by the small yz.

    Parameters
    ----------
    normal : (n, 6) array
        E.
    attitude_sd : float
        δ, degrees, of each angle.
    height_sd : float
        σ_h, m.

    Returns
    -------
    (n, 6) array
        E.
    """
    delta = np.radians(attitude_sd)
    xx, _, _, yy, yz, zz = normal.T
    lift, mixed = 0.00145 * height_sd, 2.0 * delta * np.abs(yz)
    square = np.sqrt(2.0) * delta**2
    parts = (
        np.hypot(square * np.abs(zz - xx), 0.5 * lift),
        delta * np.abs(yy - xx),
        delta * np.abs(zz - xx),
        np.sqrt((square * (zz - yy)) ** 2 + mixed**2 + (0.5 * lift) ** 2),
        delta * np.abs(zz - yy),
        np.sqrt(2.0 * (square * (zz - yy)) ** 2 + mixed**2 + lift**2),
    )
    return np.stack(parts, axis=1)


@stage(
    makes="lines",
    needs={"lines": ("gradient", "latitude", "height")},
    adds=("removed_normal", "sigma_normal"),
    physics=normal_tensor,
)
def remove_normal_field(lines: xr.Dataset, settings: NormalFieldSettings) -> xr.Dataset:
    """Remove the gravitational gradient of the level ellipsoid at every station."""
    survey.frame_of("lines", lines, "gradient", "enu", where="stage remove_normal_field")
    latitude, height = lines["latitude"].to_numpy(), lines["height"].to_numpy()
    whole = np.isfinite(latitude) & np.isfinite(height)
    normal = np.full((len(height), 6), np.nan)
    if whole.any():
        normal[whole] = normal_tensor(latitude[whole], height[whole], ellipsoid=settings.ellipsoid)
    sigma = normal_sigma(normal, settings.attitude_sd, settings.height_sd)
    return survey.subtract(lines, "normal", normal, sigma, ellipsoid=settings.ellipsoid)
