"""The field of a homogeneous polyhedron with plane faces."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence

import numpy as np
from numba import njit, prange
from numpy.typing import ArrayLike, NDArray

from gradred.errors import SurveyError
from gradred.newton.bodies import point_gravity, point_potential, point_tensor, rows
from gradred.newton.prism import edge_log
from gradred.units import EOTVOS, MILLIGAL, G

Array = NDArray[np.float64]
Faces = Sequence[Sequence[int]] | NDArray[np.integer]

_FAR = 30.0
_ORDER = 5


Vector = tuple[float, float, float]


@njit(error_model="numpy", cache=True)
def _dot(a: Vector, b: Vector) -> float:
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2]


@njit(error_model="numpy", cache=True)
def _cross(a: Vector, b: Vector) -> Vector:
    return a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]


@njit(error_model="numpy", cache=True)
def _less(a: Vector, b: Vector) -> Vector:
    return a[0] - b[0], a[1] - b[1], a[2] - b[2]


@njit(error_model="numpy", cache=True)
def _angle(a: Vector, b: Vector, c: Vector, normal: Vector, height: float) -> float:
    """Return the signed solid angle of a triangle (van Oosterom and Strackee 1983)."""
    if height == 0.0:
        return 0.0
    ra, rb, rc = math.sqrt(_dot(a, a)), math.sqrt(_dot(b, b)), math.sqrt(_dot(c, c))
    # the triple product a·(b × c) from the area, which keeps its digits far away
    top = height * _dot(_cross(_less(b, a), _less(c, b)), normal)
    bottom = ra * rb * rc + _dot(a, b) * rc + _dot(b, c) * ra + _dot(c, a) * rb
    return 2.0 * math.atan2(top, bottom)


@njit(error_model="numpy", cache=True)
def _edge(b: Vector, c: Vector, normal: Vector, least: float) -> tuple[Vector, float]:
    """Return the outward normal of an edge within its face times its logarithm, and its flux."""
    step = _less(c, b)
    length = math.sqrt(_dot(step, step))
    e = (step[0] / length, step[1] / length, step[2] / length)
    along = _dot(b, e)
    across = _cross(b, e)
    log = edge_log(math.sqrt(_dot(across, across)), 0.0, along, along + length, least)
    out = _cross(e, normal)
    return (out[0] * log, out[1] * log, out[2] * log), _dot(b, out) * log


@njit(error_model="numpy", cache=True)
def _face(ring: Array, point: Vector, normal: Vector, least: float, total: Array) -> None:
    """Add what one face gives to potential, gravity and tensor (10 numbers per unit G ρ).

    Werner and Scheeres 1997, eqs. 10, 15 and 16, gathered face by face.
    """
    last = ring.shape[0] - 1
    a = (ring[0, 0] - point[0], ring[0, 1] - point[1], ring[0, 2] - point[2])
    height = _dot(a, normal)
    angle = flux = m0 = m1 = m2 = 0.0
    b = (ring[last, 0] - point[0], ring[last, 1] - point[1], ring[last, 2] - point[2])
    for i in range(last + 1):
        c = (ring[i, 0] - point[0], ring[i, 1] - point[1], ring[i, 2] - point[2])
        if i > 1:
            angle += _angle(a, b, c, normal, height)
        out, part = _edge(b, c, normal, least)
        m0, m1, m2, flux = m0 + out[0], m1 + out[1], m2 + out[2], flux + part
        b = c
    m0, m1, m2 = m0 - normal[0] * angle, m1 - normal[1] * angle, m2 - normal[2] * angle
    sheet = flux - height * angle
    total[0] += 0.5 * height * sheet
    total[1] -= normal[0] * sheet
    total[2] -= normal[1] * sheet
    total[3] -= normal[2] * sheet
    total[4] += normal[0] * m0
    total[5] += 0.5 * (normal[0] * m1 + normal[1] * m0)
    total[6] += 0.5 * (normal[0] * m2 + normal[2] * m0)
    total[7] += normal[1] * m1
    total[8] += 0.5 * (normal[1] * m2 + normal[2] * m1)
    total[9] += normal[2] * m2


@njit(parallel=True, error_model="numpy", cache=True)
def _sums(
    points: Array,
    corners: Array,
    normals: Array,
    starts: NDArray[np.int64],
    least: float,
    out: Array,
) -> None:
    """Fill (n, 10) potential, gravity and tensor per unit G ρ; faces are rings of ``corners``."""
    for n in prange(points.shape[0]):
        point = (points[n, 0], points[n, 1], points[n, 2])
        for f in range(normals.shape[0]):
            normal = (normals[f, 0], normals[f, 1], normals[f, 2])
            _face(corners[starts[f] : starts[f + 1]], point, normal, least, out[n])


def _field(points: ArrayLike, vertices: ArrayLike, faces: Faces, density: float) -> Array:
    """Return (n, 10) potential, gravity and tensor in SI."""
    where, corners = rows(points, 3, "points"), rows(vertices, 3, "vertices")
    rings = _rings(corners, faces)
    middle = corners.mean(axis=0)
    size = float(np.linalg.norm(corners - middle, axis=1).max())
    distant = np.linalg.norm(where - middle, axis=1) > _FAR * size
    out = np.zeros((len(where), 10))
    near = np.ascontiguousarray(where[~distant])
    part = np.zeros((len(near), 10))
    normals = np.array([_normal(corners[ring]) for ring in rings])
    starts = np.cumsum([0] + [len(ring) for ring in rings])
    _sums(near, corners[np.concatenate(rings)], normals, starts, 1e-9 * size, part)
    out[~distant] = G * density * part
    if distant.any():
        nodes, volumes = _quadrature(corners, rings, middle)
        far, mass = where[distant], density * volumes
        out[distant, 0] = point_potential(far, nodes, mass)
        out[distant, 1:4] = MILLIGAL * point_gravity(far, nodes, mass)
        out[distant, 4:] = EOTVOS * point_tensor(far, nodes, mass)
    return out


def _rings(corners: Array, faces: Faces) -> list[NDArray[np.intp]]:
    """Return the faces as index rings, or refuse a surface that is open or turned inside."""
    rings = [np.asarray(face, dtype=np.intp) for face in faces]
    if any(len(r) < 3 or r.min() < 0 or r.max() >= len(corners) for r in rings) or not rings:
        raise SurveyError(
            f"a face names other than three or more of the {len(corners)} vertices",
            where="polyhedron",
            cure="list for each face the numbers of its vertices, from 0",
        )
    edges = Counter(
        (int(a), int(b)) for ring in rings for a, b in zip(ring, np.roll(ring, -1), strict=True)
    )
    lone = [edge for edge in edges if edges[edge] != 1 or edges.get(edge[::-1]) != 1]
    if lone:
        raise SurveyError(
            f"the edge from vertex {lone[0][0]} to {lone[0][1]} does not join two faces",
            where="polyhedron",
            cure="close the surface, and list every face counterclockwise seen from outside",
        )
    if _quadrature(corners, rings, corners.mean(axis=0))[1].sum() <= 0.0:
        raise SurveyError(
            "the faces are listed clockwise seen from outside: the volume is not positive",
            where="polyhedron",
            cure="turn the order of every face round",
        )
    return rings


def _normal(ring: Array) -> Array:
    """Return the unit normal of a plane ring, by Newell's sum over its edges."""
    total = np.cross(ring - ring[0], np.roll(ring, -1, axis=0) - ring[0]).sum(axis=0)
    return np.asarray(total / np.linalg.norm(total))


def _quadrature(
    corners: Array, rings: list[NDArray[np.intp]], middle: Array
) -> tuple[Array, Array]:
    """Return nodes (k, 3) and signed volumes (k,) that stand for the body far away.

    The body is cut into tetrahedra from its middle, each summed by Gauss's rule in collapsed
    coordinates (Stroud 1971, Approximate Calculation of Multiple Integrals; from memory): exact
    to degree 7, so that terms of (1/30)^8 and beyond are left at 30 times its size.
    """
    node, weight = np.polynomial.legendre.leggauss(_ORDER)
    node, weight = 0.5 * (node + 1.0), 0.5 * weight
    u, v, w = (axis.ravel() for axis in np.meshgrid(node, node, node, indexing="ij"))
    jacobian = np.einsum("i,j,k->ijk", weight, weight, weight).ravel() * u**2 * v
    nodes, volumes = [], []
    for ring in rings:
        for i in range(1, len(ring) - 1):
            a, b, c = corners[ring[[0, i, i + 1]]] - middle
            at = u[:, None] * (a + v[:, None] * ((b - a) + w[:, None] * (c - b)))
            nodes.append(middle + at)
            volumes.append(jacobian * np.dot(a, np.cross(b, c)))
    return np.concatenate(nodes), np.concatenate(volumes)


def polyhedron_potential(
    points: ArrayLike, vertices: ArrayLike, faces: Faces, density: float
) -> Array:
    """Return the (n,) potential, m2/s2, of a polyhedron; arguments as ``polyhedron_tensor``."""
    return np.asarray(_field(points, vertices, faces, density)[:, 0])


def polyhedron_gravity(
    points: ArrayLike, vertices: ArrayLike, faces: Faces, density: float
) -> Array:
    """Return the (n, 3) gravity, mGal, ``grid`` frame; arguments as ``polyhedron_tensor``."""
    return np.asarray(_field(points, vertices, faces, density)[:, 1:4] / MILLIGAL)


def polyhedron_tensor(
    points: ArrayLike, vertices: ArrayLike, faces: Faces, density: float
) -> Array:
    r"""Return the tensor of a homogeneous polyhedron in the ``grid`` frame.

    .. math:: Γ = G ρ \sum_f n_f \Bigl(\sum_{e \in f} n_e \ln\frac{r_a + r_b + l}{r_a + r_b - l}
        - n_f ω_f \Bigr)

    with n the outward normals of faces and, within them, of edges, and ω the signed solid angle.
    On a face the mean of both sides is returned; nearer to an edge than 1e-9 of the body's size,
    where the logarithm grows without bound, the value at that distance.

    Assumes plane faces.

    Parameters
    ----------
    points : (n, 3) array
        East, north, up, m.
    vertices : (v, 3) array
        East, north, up, m.
    faces : sequence of index sequences
        Vertices of each face, counterclockwise seen from outside; the surface must be closed.
    density : float
        Contrast, kg/m3.

    Returns
    -------
    (n, 6) array
        E.

    Accuracy
    --------
    1e-10 of the tensor's norm: rounding grows with the cube of the distance in sizes up to 30,
    beyond which the body is summed by quadrature.

    Source
    ------
    Werner and Scheeres 1997, Celestial Mechanics and Dynamical Astronomy 65, 313-344.

    Checked by
    ----------
    ``tests/newton/test_polyhedron.py`` against the prism.
    """
    return np.asarray(_field(points, vertices, faces, density)[:, 4:] / EOTVOS)
