"""Rotation of the platform: what an instrument reads because it turns."""

from __future__ import annotations

from typing import Any, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import Field
from scipy.interpolate import CubicSpline

from gradred import survey
from gradred.errors import ReadingsError
from gradred.reduction.crossings import Array, Index
from gradred.stage import Degrees, RadiansPerSecond, Settings, stage
from gradred.tensor import COMPONENTS, ned_to_body, trace
from gradred.units import EARTH_RATE, EOTVOS

_SLIPS: Final = {
    np.degrees(1.0): "deg/s declared as rad/s",
    1.0 / np.degrees(1.0): "rad/s declared as deg/s",
    1000.0: "mrad/s declared as rad/s",
    0.001: "rad/s declared as mrad/s",
    3600.0 * np.degrees(1.0): "deg/h declared as rad/s",
}

ArrayOrFloat = Array | float


class MotionSettings(Settings):
    """Settings of the stage ``remove_motion``."""

    rate_sd: RadiansPerSecond = Field(
        1e-8, ge=0, le=1e-2, description="standard deviation of one delivered rate, rad/s"
    )
    attitude_sd: Degrees = Field(
        0.001,
        ge=0,
        le=1,
        description="reading-to-reading standard deviation of the attitude, where rates are "
        "differentiated from it",
    )


def rotation_term(rates: Array) -> Array:
    r"""Return the symmetric part of what rotation adds to a reading, in the ``body`` frame.

    .. math:: -ΩΩ = |ω|^2 I - ω ω^T, \quad Ω = [ω×]

    so that a static-output-positive instrument reads :math:`M = Γ - ΩΩ - \dot Ω`, with the trace
    2|ω|² and the antisymmetric part −dΩ/dt.

    Assumes ω relative to inertial space: it holds the Earth's rate and the transport rate, and
    nothing of them is left for the normal field to remove.

    Parameters
    ----------
    rates : (n, 3) array
        ω about forward, starboard and down, rad/s.

    Returns
    -------
    (n, 6) array
        E.

    Accuracy
    --------
    Exact; a rate wrong by δ changes it by 2 ω δ: 1 E for 3e-8 rad/s when turning at 1 deg/s.

    Source
    ------
    Rummel, Yi and Stummer 2011, J. Geodesy 85, 777-790.

    Checked by
    ----------
    ``tests/reduction/test_motion.py`` against the trace at 1 deg/s and the Earth's rate squared.
    """
    square = np.einsum("ni,ni->n", rates, rates)
    x, y, z = rates.T
    parts = (square - x * x, -x * y, -x * z, square - y * y, -y * z, square - z * z)
    return np.stack(parts, axis=1) / EOTVOS


def rotation_sigma(rates: Array, sd: ArrayOrFloat) -> Array:
    """Return (n, 6) standard deviations, E, of ``rotation_term`` from those of the rates, rad/s."""
    x2, y2, z2 = (rates**2).T
    spread = np.sqrt(
        np.stack([4 * (y2 + z2), x2 + y2, x2 + z2, 4 * (x2 + z2), y2 + z2, 4 * (x2 + y2)], axis=1)
    )
    return np.asarray(spread * np.reshape(sd, (-1, 1)) / EOTVOS)


def rates_from_attitude(
    seconds: Array, longitude: Array, latitude: Array, attitude: Array, line: Index
) -> Array:
    r"""Return rates relative to inertial space in the ``body`` frame, from attitude and position.

    .. math:: ω = ω_{nb} + C_{nb} \bigl((Ω + \dot λ) \cos φ, -\dot φ, -(Ω + \dot λ) \sin φ\bigr)

    with the angles and positions of each line differentiated as cubic splines.

    Parameters
    ----------
    seconds : (n,) array
        Time, s, ascending within a line.
    longitude, latitude : (n,) arrays
        Degrees.
    attitude : (n, 3) array
        Heading, pitch, roll, degrees.
    line : (n,) int array
        Number of the line of each station.

    Returns
    -------
    (n, 3) array
        rad/s; NaN on lines of fewer than four stations.

    Accuracy
    --------
    Noise of the attitude over the time between readings; what turns faster than two readings is
    lost, and its square with it.

    Source
    ------
    Groves 2013, Principles of GNSS, Inertial, and Multisensor Integrated Navigation Systems, 2nd
    edition, sections 2.3 and 5.4 (from memory).

    Checked by
    ----------
    ``tests/reduction/test_motion.py`` against the exact rates of a simulated flight.
    """
    out = np.full((len(line), 3), np.nan)
    angles = np.column_stack([longitude, latitude, attitude])
    for number in np.unique(line):
        here = np.flatnonzero((line == number) & np.isfinite(angles).all(axis=1))
        if len(here) < 4:
            continue
        unwrapped = np.unwrap(np.radians(angles[here]), axis=0)
        change = CubicSpline(seconds[here], unwrapped)(seconds[here], nu=1)
        _, phi, heading, pitch, roll = unwrapped.T
        d_lon, d_lat, d_heading, d_pitch, d_roll = change.T
        spin = EARTH_RATE + d_lon
        level = np.stack([spin * np.cos(phi), -d_lat, -spin * np.sin(phi)], axis=1)
        own = np.stack(
            [
                d_roll - d_heading * np.sin(pitch),
                d_pitch * np.cos(roll) + d_heading * np.cos(pitch) * np.sin(roll),
                d_heading * np.cos(pitch) * np.cos(roll) - d_pitch * np.sin(roll),
            ],
            axis=1,
        )
        turn = ned_to_body(*np.degrees([heading, pitch, roll]))
        out[here] = own + turn.vector(level)
    return out


def _slope(seen: Array, expected: Array, line: Index) -> tuple[float, float, float]:
    """Return slope of seen on expected within lines, its standard error, and the correlation."""
    whole = np.isfinite(seen) & np.isfinite(expected)
    if np.count_nonzero(whole) < 10:
        return float("nan"), float("nan"), 0.0
    y, x, owner = seen[whole].copy(), expected[whole].copy(), line[whole]
    for values in (x, y):
        means = np.bincount(owner, values) / np.maximum(np.bincount(owner), 1)
        values -= means[owner]
    power = float(x @ x)
    if power == 0.0:
        return float("nan"), float("nan"), 0.0
    slope = float(x @ y) / power
    rest = y - slope * x
    error = float(np.sqrt(rest @ rest / (len(x) - 2) / power))
    return slope, error, float(x @ y / np.sqrt(power * max(float(y @ y), 1e-300)))


def _increments(values: Array, seconds: Array, line: Index, *, integrate: bool) -> Array:
    """Return (n,) change over two steps, or the integral over them by Simpson; NaN at line ends."""
    out = np.full(len(line), np.nan)
    inner = (line[2:] == line[:-2]) & (len(line) > 2)
    if integrate:
        step = 0.5 * (seconds[2:] - seconds[:-2])
        change = step / 3.0 * (values[:-2] + 4.0 * values[1:-1] + values[2:])
    else:
        change = values[2:] - values[:-2]
    out[1:-1] = np.where(inner, change, np.nan)
    return out


def check_rates(
    rates: Array, total: Array | None, axial: Array | None, seconds: Array, line: Index
) -> dict[str, float]:
    """Compare rates with the trace and the antisymmetric part, or refuse them.

    Parameters
    ----------
    rates : (n, 3) array
        rad/s, ``body``.
    total : (n,) array or None
        Trace of the reading, E, which is 2|ω|² and noise.
    axial : (n, 3) array or None
        Vector of the antisymmetric part, E, which is −dω/dt and noise.
    seconds, line : (n,) arrays
        Time, s, and number of the line.

    Returns
    -------
    dict
        Slopes that should be 1, with the standard error of the first.
    """
    told: dict[str, float] = {}
    if total is not None:
        square = 2.0 * np.einsum("ni,ni->n", rates, rates) / EOTVOS
        slope, error, match = _slope(total, square, line)
        told |= {"trace_slope": slope, "trace_slope_sd": error}
        if match > 0.5 and abs(slope - 1.0) > max(0.05, 6.0 * error):
            _refuse(1.0 / np.sqrt(slope), f"the trace follows 2|ω|² with the slope {slope:.3g}")
    if axial is not None:
        pairs = [
            (
                _increments(rates[:, axis], seconds, line, integrate=False),
                _increments(-axial[:, axis] * EOTVOS, seconds, line, integrate=True),
            )
            for axis in range(3)
        ]
        seen, expected = (np.concatenate(part) for part in zip(*pairs, strict=True))
        slope, _, match = _slope(seen, expected, np.tile(line, 3))
        told |= {"antisymmetric_slope": slope, "antisymmetric_match": match}
        if abs(match) > 0.7 and not 0.7 < slope < 1.4:
            _refuse(
                slope, f"changes of the rates follow the antisymmetric part by {slope:.3g}, not 1"
            )
    return told


def _refuse(ratio: float, how: str) -> None:
    if ratio < 0.0:
        guess = "the sign of the rates or of the readings is turned"
    else:
        near = min(_SLIPS, key=lambda factor: abs(np.log(ratio / factor)))
        likely = _SLIPS[near] if abs(np.log(ratio / near)) < 0.1 else "another unit, or a lag"
        guess = f"rates {ratio:.3g} times what the readings say; this looks like {likely}"
    raise ReadingsError(
        f"the rates do not belong to the readings: {how}",
        where="stage remove_motion, all lines together",
        cure=f"{guess}: correct the unit or the sign in read_lines",
    )


@stage(
    makes="lines",
    needs={"lines": ("gradient", "time", "line", "flag")},
    adds=("removed_motion", "sigma_motion", "rates"),
    physics=rotation_term,
)
def remove_motion(lines: xr.Dataset, settings: MotionSettings) -> xr.Dataset:
    """Remove what the rotation of the platform adds to the reading.

    Where no rates are delivered they are differentiated from the attitude, which the attribute
    ``rates_from`` of ``removed_motion`` and its larger standard deviation tell.
    """
    survey.frame_of("lines", lines, "gradient", "body", where="stage remove_motion")
    _, line = np.unique(lines["line"].to_numpy().astype(str), return_inverse=True)
    time = lines["time"].to_numpy()
    seconds = (time - time.min()) / np.timedelta64(1, "s")
    delivered = "rates" in lines
    rates = lines["rates"].to_numpy() if delivered else _differentiated(lines, seconds, line)
    gradient = lines["gradient"]
    completed = gradient.attrs.get("completed")
    total = None if completed else trace(gradient.to_numpy())
    axial = lines["antisymmetric"].to_numpy() if "antisymmetric" in lines else None
    told = check_rates(rates, total, axial, seconds, line)
    amount = _closed(rotation_term(rates), completed)
    sd: ArrayOrFloat = settings.rate_sd
    if not delivered:
        sd = np.radians(settings.attitude_sd) / np.median(np.diff(seconds))
    out = lines if delivered else survey.put("lines", lines, "rates", rates, frame="body")
    return survey.subtract(
        out,
        "motion",
        amount,
        rotation_sigma(rates, sd),
        rates_from="delivered" if delivered else "attitude, differentiated",
        **told,
    )


def _differentiated(lines: xr.Dataset, seconds: Array, line: NDArray[Any]) -> Array:
    missing = [name for name in ("heading", "pitch", "roll") if name not in lines]
    if missing:
        raise ReadingsError(
            f"the lines hold neither rates nor {', '.join(missing)}",
            where="stage remove_motion",
            cure="deliver rates or the whole attitude, or leave this stage out if the rotation "
            "was removed before delivery",
        )
    attitude = np.column_stack([lines[name].to_numpy() for name in ("heading", "pitch", "roll")])
    longitude, latitude = lines["longitude"].to_numpy(), lines["latitude"].to_numpy()
    return rates_from_attitude(seconds, longitude, latitude, attitude, line)


def _closed(amount: Array, completed: str | None) -> Array:
    """Return the term with a completed element's share closed to zero trace, as the element was."""
    if completed:
        place = COMPONENTS.index(completed)
        amount = amount.copy()
        amount[:, place] -= trace(amount)
    return amount
