"""Integrals of smooth densities over a plan outline: Gauss quadrature on triangles that fill it exactly."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from anticlast.errors import NotConverged
from anticlast.tolerances import QUADRATURE

if TYPE_CHECKING:
    from shapely.geometry.base import BaseGeometry

    from anticlast.records import Floats

# Gauss-Legendre nodes on [0, 1]; five a side make a triangle rule exact for degree 8.
_NODES, _WEIGHTS = (part / 2 for part in np.polynomial.legendre.leggauss(5))
_NODES = _NODES + 0.5
_MAX_REFINEMENTS = 12
# A triangle with less than this share of the integral may err by that share, or slivers refine for ever.
_SMALL_SHARE = 1e-3


def integrate(
    polygon: BaseGeometry, density: Callable[[Floats], Floats], relative: float = QUADRATURE
) -> float:
    """Return the integral of a smooth density over a plan polygon.

    The polygon is cut into triangles along its own edges; each gets a 5 x 5 collapsed Gauss-Legendre rule,
    exact to degree 8, and is quartered until its quarters agree with it.

    Parameters
    ----------
    polygon : shapely geometry [mm]
        Polygon or multipolygon, holes allowed.
    density : callable
        Takes xy (n, 2) [mm], returns (n,).
    relative : float
        Error allowed, as a share of the whole.

    Raises
    ------
    NotConverged
        If the density is not smooth enough to refine to the tolerance.
    """
    triangles = triangulated(polygon)
    if not len(triangles):
        return 0.0
    coarse = _triangle_sums(triangles, density)
    total, done = float(np.abs(coarse).sum()), 0.0
    worst = 0.0
    for _ in range(_MAX_REFINEMENTS):
        quarters = _quartered(triangles)
        fine = _triangle_sums(quarters, density).reshape(-1, 4)
        error = np.abs(fine.sum(axis=1) - coarse)
        # Quadrature on the quarters is far better than the difference, so the difference is a safe bound.
        open_ = error > relative * np.maximum(np.abs(coarse), _SMALL_SHARE * total)
        done += float(fine[~open_].sum())
        if not open_.any():
            return done
        worst = float(error[open_].sum())
        triangles = quarters.reshape(-1, 4, 3, 2)[open_].reshape(-1, 3, 2)
        coarse = fine[open_].reshape(-1)
    raise NotConverged("integral over the outline", worst, relative * total)


def triangulated(polygon: BaseGeometry) -> Floats:
    """Return triangles (m, 3, 2) [mm] that fill a plan polygon exactly, no new corners."""
    import shapely

    if polygon.is_empty:
        return np.empty((0, 3, 2))
    pieces = shapely.get_parts(shapely.constrained_delaunay_triangles(polygon))
    return shapely.get_coordinates(pieces).reshape(-1, 4, 2)[:, :3].copy()


def nodes_and_weights(triangles: Floats) -> tuple[Floats, Floats]:
    """Return quadrature points (25 m, 2) [mm] and weights (25 m,) [mm^2] of triangles (m, 3, 2) [mm]."""
    u, v = (grid.ravel() for grid in np.meshgrid(_NODES, _NODES, indexing="ij"))
    weight = np.outer(_WEIGHTS, _WEIGHTS).ravel() * u  # (u, v) -> corner + u (e1 + v (e2 - e1))
    e1, e2 = triangles[:, 1] - triangles[:, 0], triangles[:, 2] - triangles[:, 0]
    twice_area = np.abs(e1[:, 0] * e2[:, 1] - e1[:, 1] * e2[:, 0])
    xy = triangles[:, None, 0] + u[:, None] * (e1[:, None] + v[:, None] * (e2 - e1)[:, None])
    return np.ascontiguousarray(xy.reshape(-1, 2)), (twice_area[:, None] * weight).ravel()


def _triangle_sums(triangles: Floats, density: Callable[[Floats], Floats]) -> Floats:
    """Return the quadrature of the density over each triangle (m,)."""
    xy, weights = nodes_and_weights(triangles)
    return (density(xy) * weights).reshape(len(triangles), -1).sum(axis=1)


def _quartered(triangles: Floats) -> Floats:
    """Return the four halves-of-edges children (4 m, 3, 2) of triangles (m, 3, 2), in order."""
    a, b, c = triangles[:, 0], triangles[:, 1], triangles[:, 2]
    ab, bc, ca = (a + b) / 2, (b + c) / 2, (c + a) / 2
    children = np.stack(
        [np.stack(t, axis=1) for t in ((a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca))], axis=1
    )
    return children.reshape(-1, 3, 2)
