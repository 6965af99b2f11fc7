"""Closed forms of the saddle z = a x'^2 - b y'^2: shape, curvature, nearest point, lengths and areas.

Part coordinates, right-handed, origin at the saddle point, Z up out of the part; (x', y') are (x, y) turned
by ``-rotate_rad``. The normal points up. Curvature is positive where the surface is concave as seen from
above, so that along x' at the origin it is +2a. Derivations: docs/theory-surface.md.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from anticlast.errors import NotConverged
from anticlast.quadrature import integrate

if TYPE_CHECKING:
    from shapely.geometry.base import BaseGeometry

    from anticlast.records import Floats, Part

# Slope change along a line below which 8-point quadrature (error < 1e-16) is used: the closed form cancels.
_SMALL_SLOPE_CHANGE = 0.2
_LINE_NODES, _LINE_WEIGHTS = np.polynomial.legendre.leggauss(8)
_MAX_NEWTON = 200


def _points(values: npt.ArrayLike, width: int) -> Floats:
    """Return values as a C-contiguous (n, width) float64 array."""
    array = np.ascontiguousarray(values, dtype=np.float64)
    if array.ndim == 1 and array.size in (0, width):
        array = array.reshape(-1, width)
    if array.ndim != 2 or array.shape[1] != width:
        raise ValueError(f"expected points of shape (n, {width}), got {array.shape}")
    return array


@dataclass(frozen=True, slots=True)
class Saddle:
    """The saddle z = a x'^2 - b y'^2 without an edge.

    Attributes
    ----------
    a_per_mm, b_per_mm : float
        [1/mm], both > 0: half the concave and half the convex curvature at the origin.
    rotate_rad : float
        [rad] from part X to the concave direction x', counter-clockwise seen from above.
    """

    a_per_mm: float
    b_per_mm: float
    rotate_rad: float

    def __post_init__(self) -> None:
        if not (self.a_per_mm > 0.0 and self.b_per_mm > 0.0 and math.isfinite(self.a_per_mm + self.b_per_mm)):
            raise ValueError(f"a saddle needs a > 0 and b > 0, got a = {self.a_per_mm}, b = {self.b_per_mm}")

    @classmethod
    def of(cls, part: Part) -> Saddle:
        """Return the saddle of a part record."""
        return cls(part.a_per_mm, part.b_per_mm, part.rotate_rad)

    # ------------------------------------------------------------------------------ frames

    def local(self, x: npt.ArrayLike, y: npt.ArrayLike) -> tuple[Floats, Floats]:
        """Return (x', y') [mm] of plan points (x, y) [mm], same shape; also turns vectors."""
        x, y = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
        c, s = math.cos(self.rotate_rad), math.sin(self.rotate_rad)
        return x * c + y * s, y * c - x * s

    def plan(self, p: npt.ArrayLike, q: npt.ArrayLike) -> tuple[Floats, Floats]:
        """Return part (x, y) [mm] of (x', y') = (p, q) [mm]; the reverse of `local`."""
        p, q = np.asarray(p, dtype=np.float64), np.asarray(q, dtype=np.float64)
        c, s = math.cos(self.rotate_rad), math.sin(self.rotate_rad)
        return p * c - q * s, p * s + q * c

    # ------------------------------------------------------------------------------ shape

    def height(self, x: npt.ArrayLike, y: npt.ArrayLike) -> Floats:
        """Return z [mm] over plan points (x, y) [mm] of any shape."""
        p, q = self.local(x, y)
        return self.a_per_mm * p * p - self.b_per_mm * q * q

    def gradient(self, x: npt.ArrayLike, y: npt.ArrayLike) -> tuple[Floats, Floats]:
        """Return the slopes (dz/dx, dz/dy) [1] at plan points (x, y) [mm] of any shape."""
        p, q = self.local(x, y)
        return self.plan(2.0 * self.a_per_mm * p, -2.0 * self.b_per_mm * q)

    def hessian(self) -> Floats:
        """Return the (2, 2) second derivatives [1/mm] of the height over part (x, y); the same everywhere."""
        c, s = math.cos(self.rotate_rad), math.sin(self.rotate_rad)
        a, b = 2.0 * self.a_per_mm, 2.0 * self.b_per_mm
        mixed = (a + b) * c * s
        return np.array([[a * c * c - b * s * s, mixed], [mixed, a * s * s - b * c * c]])

    def point(self, xy: npt.ArrayLike) -> Floats:
        """Return surface points (n, 3) [mm] over plan points xy (n, 2) [mm]."""
        xy = _points(xy, 2)
        return np.column_stack((xy, self.height(xy[:, 0], xy[:, 1])))

    def stretch(self, xy: npt.ArrayLike) -> Floats:
        """Return W = sqrt(1 + zx^2 + zy^2) (n,) [1]: surface area per plan area, 1 / cos(slope)."""
        xy = _points(xy, 2)
        zx, zy = self.gradient(xy[:, 0], xy[:, 1])
        return np.sqrt(1.0 + zx * zx + zy * zy)

    def slope_rad(self, xy: npt.ArrayLike) -> Floats:
        """Return the angle [rad] (n,) between the surface and the horizontal at xy (n, 2) [mm]."""
        xy = _points(xy, 2)
        return np.arctan(np.hypot(*self.gradient(xy[:, 0], xy[:, 1])))

    def normal(self, xy: npt.ArrayLike) -> Floats:
        """Return upward unit normals (n, 3) [1] at xy (n, 2) [mm]: (-zx, -zy, 1) / W."""
        xy = _points(xy, 2)
        zx, zy = self.gradient(xy[:, 0], xy[:, 1])
        w = np.sqrt(1.0 + zx * zx + zy * zy)
        return np.column_stack((-zx / w, -zy / w, 1.0 / w))

    def offset(self, xy: npt.ArrayLike, distance_mm: npt.ArrayLike) -> Floats:
        """Return points (n, 3) [mm] at ``distance_mm`` (scalar or (n,)) along the normal at xy (n, 2)."""
        xy = _points(xy, 2)
        distance = np.broadcast_to(np.asarray(distance_mm, dtype=np.float64), (len(xy),))
        return self.point(xy) + distance[:, None] * self.normal(xy)

    def tangent(self, xy: npt.ArrayLike, direction_rad: npt.ArrayLike) -> Floats:
        """Return unit tangents (n, 3) [1] over the plan direction [rad] from part X (scalar or (n,))."""
        xy = _points(xy, 2)
        direction = np.broadcast_to(np.asarray(direction_rad, dtype=np.float64), (len(xy),))
        return self._lifted(xy, np.cos(direction), np.sin(direction))

    def rulings(self, xy: npt.ArrayLike) -> tuple[Floats, Floats]:
        """Return the unit directions (n, 3) [1] of the two straight lines on the surface through xy (n, 2).

        In plan: (x', y') = (sqrt b, sqrt a) and (sqrt b, -sqrt a), where a dx'^2 - b dy'^2 vanishes.
        """
        xy = _points(xy, 2)
        p, q = math.sqrt(self.b_per_mm), math.sqrt(self.a_per_mm)
        return self._lifted(xy, *self.plan(p, q)), self._lifted(xy, *self.plan(p, -q))

    def _lifted(self, xy: Floats, dx: npt.ArrayLike, dy: npt.ArrayLike) -> Floats:
        """Return the unit tangent (n, 3) over plan direction (dx, dy)."""
        zx, zy = self.gradient(xy[:, 0], xy[:, 1])
        dx, dy = np.broadcast_to(dx, zx.shape), np.broadcast_to(dy, zx.shape)
        vector = np.column_stack((dx, dy, zx * dx + zy * dy))
        return vector / np.linalg.norm(vector, axis=1, keepdims=True)

    # ------------------------------------------------------------------------------ curvature

    def _second_form(self, xy: Floats, t: Floats, s: Floats) -> Floats:
        """Return II(t, s) (n,) [1/mm] of two tangent vectors (n, 3): the plan Hessian over W."""
        hessian = self.hessian()
        return np.einsum("ni,ij,nj->n", t[:, :2], hessian, s[:, :2]) / self.stretch(xy)

    def normal_curvature(self, xy: npt.ArrayLike, tangent: npt.ArrayLike) -> Floats:
        """Return the normal curvature (n,) [1/mm] along unit tangents (n, 3), concave positive.

        k = II(t, t) = (t_xy . Hess z . t_xy) / W; docs/theory-surface.md#curvature.
        """
        xy, tangent = _points(xy, 2), _points(tangent, 3)
        return self._second_form(xy, tangent, tangent)

    def torsion(self, xy: npt.ArrayLike, tangent: npt.ArrayLike) -> Floats:
        """Return the geodesic torsion (n,) [1/mm] along unit tangents t (n, 3): II(t, b), b = n x t.

        The sign turns with the side; only its square enters the scallop. docs/theory-surface.md#curvature.
        """
        xy, tangent = _points(xy, 2), _points(tangent, 3)
        return self._second_form(xy, tangent, np.cross(self.normal(xy), tangent))

    def along(
        self, xy: npt.ArrayLike, direction_rad: npt.ArrayLike
    ) -> tuple[Floats, Floats, Floats, Floats, Floats]:
        """Return what a pass in plan direction ``direction_rad`` (scalar or (n,)) meets at xy (n, 2) [mm].

        Returns
        -------
        k_t, k_b, tau : (n,) [1/mm]
            Normal curvature along the feed and across it, geodesic torsion.
        tangent, binormal : (n, 3) [1]
            Unit tangent along the feed, and the unit tangent square to it on its left.
        """
        xy = _points(xy, 2)
        tangent = self.tangent(xy, direction_rad)
        binormal = np.cross(self.normal(xy), tangent)
        return (
            self._second_form(xy, tangent, tangent),
            self._second_form(xy, binormal, binormal),
            self._second_form(xy, tangent, binormal),
            tangent,
            binormal,
        )

    def principal(self, xy: npt.ArrayLike) -> tuple[Floats, Floats, Floats, Floats]:
        """Return the principal curvatures and their directions at xy (n, 2) [mm].

        The second form in the orthonormal frame along part X is a symmetric 2 x 2 matrix with eigenvalues
        H +- sqrt(H^2 - K), K = -4ab / W^4, H = (a (1 + 4 b^2 y'^2) - b (1 + 4 a^2 x'^2)) / W^3. K < 0, so
        the two never meet and the directions are always defined. docs/theory-surface.md#curvature.

        Returns
        -------
        k_max, k_min : (n,) [1/mm]
            Most concave (> 0) and most convex (< 0) normal curvature.
        dir_max, dir_min : (n, 3) [1]
            Unit tangents; dir_min is dir_max turned a quarter turn to the left.
        """
        xy = _points(xy, 2)
        p, q = self.local(xy[:, 0], xy[:, 1])
        a, b = self.a_per_mm, self.b_per_mm
        w2 = 1.0 + 4.0 * (a * a * p * p + b * b * q * q)
        mean = (a * (1.0 + 4.0 * b * b * q * q) - b * (1.0 + 4.0 * a * a * p * p)) / w2**1.5
        root = np.sqrt(mean * mean + 4.0 * a * b / (w2 * w2))
        k_tt, k_bb, k_tb, tangent, binormal = self.along(xy, 0.0)
        angle = 0.5 * np.arctan2(2.0 * k_tb, k_tt - k_bb)
        c, s = np.cos(angle)[:, None], np.sin(angle)[:, None]
        return mean + root, mean - root, c * tangent + s * binormal, c * binormal - s * tangent

    # ------------------------------------------------------------------------------ nearest point

    def closest(self, points: npt.ArrayLike) -> tuple[Floats, Floats]:
        """Return the nearest surface point and the signed distance of points (n, 3) [mm].

        With t the height of the point over its foot, the foot is at x' = X/(1 - 2at), y' = Y/(1 + 2bt), and t
        solves one increasing equation on (-1/(2b), 1/(2a)). A root there is the *global* minimum (that of a
        quadratic on one quadric: J. J. Moré, Generalizations of the trust region problem, Optim. Methods
        Softw. 2 (1993) 189-209), so no start can mislead. docs/theory-surface.md#nearest-point.

        Parameters
        ----------
        points : (n, 3) [mm]
            Part coordinates, any distance away.

        Returns
        -------
        xy : (n, 2) [mm]
            Plan of the nearest surface point; where two are equally near, one of them.
        distance_mm : (n,)
            Positive above the surface.

        Raises
        ------
        NotConverged
            If the iteration stalls; carries the largest residual height.
        """
        points = _points(points, 3)
        p, q = self.local(points[:, 0], points[:, 1])
        z = points[:, 2]
        above = z >= self.a_per_mm * p * p - self.b_per_mm * q * q
        foot_p, foot_q = np.empty_like(p), np.empty_like(q)
        a, b = self.a_per_mm, self.b_per_mm
        foot_p[above], foot_q[above] = _foot_above(a, b, p[above], q[above], z[above])
        # Seen from below, the saddle is a saddle with the two directions swapped.
        below = ~above
        foot_q[below], foot_p[below] = _foot_above(b, a, q[below], p[below], -z[below])
        xy = np.column_stack(self.plan(foot_p, foot_q))
        distance = np.linalg.norm(points - self.point(xy), axis=1)
        return xy, np.where(above, distance, -distance)

    # ------------------------------------------------------------------------------ lengths, areas

    def line_length_mm(self, start_xy: npt.ArrayLike, end_xy: npt.ArrayLike) -> Floats:
        """Return the length (n,) [mm] on the surface over plan lines from start to end (n, 2) [mm].

        Over a plan line the surface is a parabola whose slope m grows evenly, so the length is
        (F(m1) - F(m0)) / (m1 - m0) per plan length with F(m) = (m sqrt(1 + m^2) + asinh m) / 2.
        """
        start, end = _points(start_xy, 2), _points(end_xy, 2)
        step = end - start
        plan_mm = np.hypot(step[:, 0], step[:, 1])
        unit = step / np.where(plan_mm > 0.0, plan_mm, 1.0)[:, None]
        m0, m1 = (np.einsum("in,ni->n", np.array(self.gradient(*end_xy.T)), unit) for end_xy in (start, end))
        change = m1 - m0
        nodes = m0 + 0.5 * change * (1.0 + _LINE_NODES[:, None])
        mean = 0.5 * _LINE_WEIGHTS @ np.sqrt(1.0 + nodes * nodes)
        wide = np.abs(change) > _SMALL_SLOPE_CHANGE
        m0, m1, change = m0[wide], m1[wide], change[wide]
        mean[wide] = (m1 * np.hypot(1.0, m1) + np.arcsinh(m1) - m0 * np.hypot(1.0, m0) - np.arcsinh(m0)) / (
            2.0 * change
        )
        return plan_mm * mean

    def area_mm2(self, polygon: BaseGeometry) -> float:
        """Return the surface area [mm^2] over a plan polygon (shapely, mm): the integral of W."""
        return integrate(polygon, self.stretch)


def _foot_above(a: float, b: float, x: Floats, y: Floats, z: Floats) -> tuple[Floats, Floats]:
    """Return the foot (x', y') on z = a x'^2 - b y'^2 of points on or above it, in the saddle's own frame.

    Unknown s = 1 - 2at in [0, 1]; g(s) = a (x/s)^2 - b (y/c)^2 + t - z falls; c = 1 + 2bt = 1 + (1 - s) b/a.
    """
    ratio = b / a
    foot_x = np.empty_like(x)
    # On the plane x' = 0 and beyond the focal line the foot leaves that plane: s = 0, two feet, one is taken.
    split = (x == 0.0) & (0.5 / a - b * (y / (1.0 + ratio)) ** 2 - z < 0.0)
    c = np.where(split, 1.0 + ratio, 1.0)
    foot_x[split] = np.sqrt((z[split] - 0.5 / a + b * (y[split] / (1.0 + ratio)) ** 2) / a)
    rest = ~split
    s = np.ones(int(rest.sum()))
    s[:] = _solve_foot(a, b, x[rest], y[rest], z[rest])
    foot_x[rest] = x[rest] / s
    c[rest] = 1.0 + (1.0 - s) * ratio
    return foot_x, y / c


def _solve_foot(a: float, b: float, x: Floats, y: Floats, z: Floats) -> Floats:
    """Return the root s (n,) of g in `_foot_above` by Newton kept inside a shrinking bracket."""
    ratio, eps = b / a, np.finfo(np.float64).eps
    reach = z + b * y * y  # >= a x^2, since the point is on or above the surface
    low = np.abs(x) * np.sqrt(a / np.where(reach > 0.0, reach, np.inf))
    low, high = np.minimum(low, 1.0), np.ones_like(x)
    w2 = 1.0 + 4.0 * (a * a * x * x + b * b * y * y)
    s = np.clip(1.0 - 2.0 * a * (z - a * x * x + b * y * y) / w2, np.maximum(low, eps), 1.0)
    residual = np.zeros_like(x)
    active = np.arange(len(x))
    for _ in range(_MAX_NEWTON):
        if not active.size:
            return s
        xa, ya, za, sa = x[active], y[active], z[active], s[active]
        c = 1.0 + (1.0 - sa) * ratio
        rise, fall, t = a * (xa / sa) ** 2, b * (ya / c) ** 2, (1.0 - sa) / (2.0 * a)
        g = rise - fall + t - za
        slope = -(2.0 * rise / sa + 2.0 * fall * ratio / c + 0.5 / a)
        low[active] = np.where(g > 0.0, sa, low[active])
        high[active] = np.where(g > 0.0, high[active], sa)
        step = sa - g / slope
        lo, hi = low[active], high[active]
        outside = (step < lo) | (step > hi) | ~np.isfinite(step)
        middle = np.where(lo > 0.0, np.sqrt(lo * hi), 0.5 * hi)
        s[active] = np.where(outside, middle, step)
        residual[active] = np.abs(g)
        noise = 8.0 * eps * (rise + fall + t + np.abs(za))
        settled = (
            (np.abs(s[active] - sa) <= 2.0 * eps * sa) | (np.abs(g) <= noise) | (hi - lo <= 2.0 * eps * hi)
        )
        active = active[~settled]
    raise NotConverged("nearest point on the saddle", float(residual[active].max()), 8.0 * eps)
