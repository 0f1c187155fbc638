"""A flight that turns and rolls far more than a survey does, and its attitude in inertial axes."""

from typing import Final

import numpy as np
from numpy.typing import NDArray

from gradred.flight import Motion, fly, wander
from gradred.tensor import body_to_enu
from gradred.units import EARTH_RATE

Array = NDArray[np.float64]

START: Final = np.datetime64("2024-05-14T12:00:00", "ns")


def rough_flight(at: Array, seed: int = 3) -> Motion:
    """Return the motion at the seconds given, 0 to 60; every term of the rates is large."""
    random = np.random.default_rng(seed)
    knots = np.arange(0.0, 61.0)
    swing = np.stack([wander(random, len(knots), 4.0) for _ in range(6)], axis=1)
    path = swing[:, :3] * [0.01, 0.01, 100.0] + [-43.1, 31.7, 600.0]
    return fly(START, knots, path, swing[:, 3:] * [30.0, 10.0, 15.0] + [40.0, 0.0, 0.0], at)


def body_to_inertial(motion: Motion, at: Array) -> Array:
    """Return (n, 3, 3) from body axes to axes that do not turn with the Earth."""
    angle = np.radians(motion.longitude) + EARTH_RATE * at
    latitude = np.radians(motion.latitude)
    sl, cl, sp, cp = np.sin(angle), np.cos(angle), np.sin(latitude), np.cos(latitude)
    none = np.zeros_like(sl)
    enu = np.stack([-sl, -sp * cl, cp * cl, cl, -sp * sl, cp * sl, none, cp, sp], axis=-1)
    to_enu = body_to_enu(motion.heading, motion.pitch, motion.roll).matrix
    return np.asarray(enu.reshape(-1, 3, 3) @ to_enu)
