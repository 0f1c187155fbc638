"""Constants with their sources, and the units that a delivery may be written in.

Every factor is an exact definition unless its line says otherwise.
"""

from __future__ import annotations

import math
from typing import Final

from gradred.errors import ReadingsError

G: Final = 6.67430e-11
"""Newtonian constant, m3 kg-1 s-2: CODATA 2018, Tiesinga et al. 2021, Rev. Mod. Phys. 93 025010."""

EOTVOS: Final = 1e-9
"""One eotvos in s-2: 1 E = 1e-9 s-2 = 0.1 mGal/km."""

MILLIGAL: Final = 1e-5
"""One milligal in m/s2."""

MICROGAL: Final = 1e-8
"""One microgal in m/s2."""

EARTH_RATE: Final = 7.292115e-5
"""Rate of the Earth's rotation, rad/s: GRS80 constant, Moritz 2000, J. Geodesy 74, 128-133."""

CF_UNITS: Final = {
    "E": "1e-9 s-2",
    "E2": "1e-18 s-4",
    "E3": "1e-27 s-6",
    "mGal": "1e-5 m s-2",
    "uGal": "1e-8 m s-2",
    "m": "m",
    "degree": "degree",
    "rad/s": "rad s-1",
    "kg/m3": "kg m-3",
    "s": "s",
    "1": "1",
}
"""How each unit of the survey is written in a file, so that UDUNITS parses it."""

FACTORS: Final[dict[str, dict[str, float]]] = {
    "length": {
        "m": 1.0,
        "km": 1000.0,
        "ft": 0.3048,
        # survey foot of the United States: Federal Register notice 24 FR 5348, 1959
        "ft-us": 1200.0 / 3937.0,
    },
    "angle": {"deg": 1.0, "rad": math.degrees(1.0), "mrad": math.degrees(1e-3)},
    "rate": {
        "rad/s": 1.0,
        "mrad/s": 1e-3,
        "deg/s": math.radians(1.0),
        "deg/h": math.radians(1.0) / 3600.0,
    },
    "gradient": {"E": 1.0, "s-2": 1e9, "1e-9 s-2": 1.0, "mGal/km": 10.0, "uGal/m": 10.0},
    "density": {"kg/m3": 1.0, "g/cm3": 1000.0, "t/m3": 1000.0},
}
"""Per quantity, what one of each accepted unit is in gradred's own: m, degree, rad/s, E, kg/m3."""


def factor(unit: str, quantity: str, *, where: str) -> float:
    """Return what one ``unit`` is in gradred's own unit of ``quantity``.

    Parameters
    ----------
    unit : str
        The unit as the pipeline file states it.
    quantity : str
        A key of ``FACTORS``.
    where : str
        Place named in the refusal of an unknown unit.

    Returns
    -------
    float
        Multiply a delivered number by it.
    """
    accepted = FACTORS[quantity]
    if unit not in accepted:
        raise ReadingsError(
            f"unknown unit {unit!r} for a {quantity}",
            where=where,
            cure=f"write one of: {', '.join(accepted)}",
        )
    return accepted[unit]
