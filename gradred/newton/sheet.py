"""The dipping sheet: a thin or thick slab as the vertices and faces of a polyhedron."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

_FACES: Final = np.array(
    [
        [0, 3, 2],
        [0, 1, 3],
        [4, 7, 5],
        [4, 6, 7],
        [0, 5, 1],
        [0, 4, 5],
        [2, 7, 6],
        [2, 3, 7],
        [0, 6, 4],
        [0, 2, 6],
        [1, 7, 3],
        [1, 5, 7],
    ]
)


def dipping_sheet(
    easting: float,
    northing: float,
    top: float,
    strike: float,
    dip: float,
    length: float,
    extent: float,
    thickness: float,
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    r"""Corners and faces of a rectangular slab in the ``grid`` frame: easting, northing, up.

    With the unit vectors :math:`\hat s` along strike, :math:`\hat d` down dip and their normal,

    .. math:: \hat s = (\sin α, \cos α, 0), \quad
        \hat d = (\cos α \cos δ, -\sin α \cos δ, -\sin δ), \quad \hat n = \hat d × \hat s

    the corners are :math:`c ± \tfrac12 L \hat s ± \tfrac12 T \hat n + \{0, E\} \hat d`. The sheet
    dips to the right of an observer who looks along strike.

    Assumptions
    -----------
    All six faces are planes at right angles to each other. The upper edge face is level only
    where the dip is 90 degrees: the highest corners stand ½ T cos δ above ``top``.

    Parameters
    ----------
    easting, northing, top : float
        c, the centre of the upper edge face, metres; ``top`` is its height.
    strike : float
        α, clockwise from grid north, degrees.
    dip : float
        δ, down from the horizontal, degrees; 90 stands upright, 0 lies flat and reaches to the
        right.
    length, extent, thickness : float
        L along strike, E down dip, T across the sheet, metres.

    Returns
    -------
    vertices : (8, 3) array
        Easting, northing and height of the corners, metres.
    faces : (12, 3) array
        Triangles of corners, counter-clockwise seen from outside.

    Accuracy
    --------
    Exact to rounding.

    Source
    ------
    Right-hand rule of strike and dip: common practice, no source.

    Checked by
    ----------
    ``tests/newton/test_sheet.py``: volume, corners of an upright and a flat sheet, closed surface,
    and the tensor of the prism that an upright sheet is.
    """
    alpha, delta = np.radians(strike), np.radians(dip)
    along = np.array([np.sin(alpha), np.cos(alpha), 0.0])
    right = np.array([np.cos(alpha), -np.sin(alpha), 0.0])
    up = np.array([0.0, 0.0, 1.0])
    down_dip = np.cos(delta) * right - np.sin(delta) * up
    normal = np.sin(delta) * right + np.cos(delta) * up
    centre = np.array([easting, northing, top])
    corners = [
        centre + a * 0.5 * length * along + n * 0.5 * thickness * normal + d * extent * down_dip
        for d in (0.0, 1.0)
        for a in (-1.0, 1.0)
        for n in (-1.0, 1.0)
    ]
    return np.array(corners), _FACES.copy()
