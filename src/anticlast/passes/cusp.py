"""Exact cusps between neighbouring passes of a ball on the saddle.

Plan coordinates of a feed direction d [rad] from part X: u = x cos d + y sin d along the feed, v = -x sin d +
y cos d to its left. A pass line is a plan line v = const; the ball touches the surface (or, with an
allowance, the surface moved out along its normal by it) along that line. Scallop height is measured along the
surface normal, from the finished surface moved out by the allowance up to the cusp.
docs/theory-surface.md#exact-cusp.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from anticlast.errors import CannotPlan, NotConverged
from anticlast.saddle import Saddle
from anticlast.tolerances import CUSP_RESIDUAL

if TYPE_CHECKING:
    from anticlast.records import Floats

_STEP_NODES, _STEP_WEIGHTS = np.polynomial.legendre.leggauss(8)


def turned_form(saddle: Saddle, direction_rad: float) -> Floats:
    """Return (A, B, C) [1/mm] (3,): z = (A u^2 + 2 B u v + C v^2) / 2 in the direction's coordinates."""
    c, s = math.cos(direction_rad), math.sin(direction_rad)
    turn = np.array([[c, -s], [s, c]])  # (u, v) to (x, y)
    turned = turn.T @ saddle.hessian() @ turn
    return np.array([turned[0, 0], turned[0, 1], turned[1, 1]])


def plan_of(u_mm: npt.ArrayLike, v_mm: npt.ArrayLike, direction_rad: float) -> Floats:
    """Return part xy (n, 2) [mm] of plan coordinates u, v (n,) [mm] of a direction [rad]."""
    u, v = np.broadcast_arrays(np.asarray(u_mm, dtype=np.float64), np.asarray(v_mm, dtype=np.float64))
    c, s = math.cos(direction_rad), math.sin(direction_rad)
    return np.column_stack((np.ravel(u * c - v * s), np.ravel(u * s + v * c)))


def require_fit(saddle: Saddle, radius_mm: float, xy: Floats, allowance_mm: float = 0.0) -> None:
    """Raise unless a ball fits the concave curvature at every xy (n, 2) [mm]: (R + allowance) k_max < 1.

    Raises
    ------
    CannotPlan
        Check ``"cutter fits"``; ``worst`` is the radius, ``limit`` the largest that fits, mm.
    """
    reach = radius_mm + allowance_mm
    if reach * 2.0 * saddle.a_per_mm < 1.0 or not len(xy):
        return  # k_max is at most 2a anywhere
    tightest = float(saddle.principal(xy)[0].max())
    if reach * tightest >= 1.0:
        limit = 1.0 / tightest - allowance_mm
        message = (
            f"a ball of radius {radius_mm:.4g} mm does not fit the concave curvature of the surface, "
            f"which takes less than {limit:.4g} mm; use a smaller cutter or a flatter surface"
        )
        raise CannotPlan("cutter fits", message, radius_mm, limit)


def require_scallop(radius_mm: float, scallop: Floats) -> None:
    """Raise unless 0 < scallop < radius everywhere."""
    if len(scallop) and not (scallop.min() > 0.0 and scallop.max() < radius_mm):
        worst = float(scallop.max() if scallop.min() > 0.0 else scallop.min())
        message = (
            f"a scallop of {worst:.4g} mm is impossible: above 0 and below the radius {radius_mm:.4g} mm"
        )
        raise CannotPlan("scallop", message, worst, radius_mm)


def _check_settled(residual: Floats) -> None:
    """Raise unless every Newton residual (lengths over the ball radius) is round-off."""
    worst = float(residual.max()) if len(residual) else 0.0
    if not worst <= CUSP_RESIDUAL:
        raise NotConverged("cusp between passes", worst, CUSP_RESIDUAL)


def _columns(*values: npt.ArrayLike) -> list[Floats]:
    """Return the values as equally long contiguous float64 arrays (n,)."""
    arrays = np.broadcast_arrays(*(np.atleast_1d(np.asarray(value, dtype=np.float64)) for value in values))
    return [np.ascontiguousarray(array.ravel()) for array in arrays]


def plan_step(
    saddle: Saddle,
    radius_mm: float,
    u_mm: npt.ArrayLike,
    v_mm: npt.ArrayLike,
    direction_rad: float,
    scallop_mm: npt.ArrayLike,
    allowance_mm: float = 0.0,
) -> Floats:
    """Return the plan distance (n,) [mm], > 0, from pass line v to the next one on its left.

    Exact: the cusp between the two, standing over plan abscissa u, is ``scallop_mm`` high.

    Parameters
    ----------
    saddle : Saddle
    radius_mm : float
        Ball radius.
    u_mm, v_mm, scallop_mm : scalar or (n,) [mm]
        Abscissa of the cusp, pass line, height wanted above the allowance.
    direction_rad : float
        Feed direction from part X.
    allowance_mm : float
        Stock left on the surface, along its normal.

    Raises
    ------
    CannotPlan
        ``"cutter fits"`` where the ball is too large for the surface, ``"scallop"`` if the height is
        impossible.
    NotConverged
        If no such pass line can be found.
    """
    from anticlast.passes import _scallop_kernels as kernels

    u, v, scallop = _columns(u_mm, v_mm, scallop_mm)
    require_scallop(radius_mm, scallop)
    require_fit(saddle, radius_mm, plan_of(u, v, direction_rad), allowance_mm)
    step, residual = np.empty_like(u), np.empty_like(u)
    form = turned_form(saddle, direction_rad)
    kernels.next_lines(form, float(radius_mm), float(allowance_mm), u, v, scallop, step, residual)
    _check_settled(residual)
    require_fit(saddle, radius_mm, plan_of(u, v + step, direction_rad), allowance_mm)
    return step


def lines_beside(
    saddle: Saddle,
    radius_mm: float,
    u_mm: npt.ArrayLike,
    v_mm: npt.ArrayLike,
    direction_rad: float,
    scallop_mm: npt.ArrayLike,
    allowance_mm: float = 0.0,
) -> tuple[Floats, Floats]:
    """Return the pass lines v1 < v < v2 (n,) [mm] whose cusp over plan (u, v) is ``scallop_mm`` high.

    Exact. Parameters and Raises as `plan_step`, with (u, v) the cusp's place.
    """
    from anticlast.passes import _scallop_kernels as kernels

    u, v, scallop = _columns(u_mm, v_mm, scallop_mm)
    require_scallop(radius_mm, scallop)
    require_fit(saddle, radius_mm, plan_of(u, v, direction_rad), allowance_mm)
    right, left, residual = np.empty_like(u), np.empty_like(u), np.empty_like(u)
    form = turned_form(saddle, direction_rad)
    kernels.lines_beside(form, float(radius_mm), float(allowance_mm), u, v, scallop, right, left, residual)
    _check_settled(residual)
    return right, left


def cusp_height(
    saddle: Saddle,
    radius_mm: float,
    u_mm: npt.ArrayLike,
    v1_mm: npt.ArrayLike,
    v2_mm: npt.ArrayLike,
    direction_rad: float,
    allowance_mm: float = 0.0,
) -> Floats:
    """Return the exact height (n,) [mm] above the allowance of the cusp between two pass lines.

    For a surface point q with normal n, a pass leaves stock up to the smallest h with dist(q + h n, centre
    curve) = R; the cusp is where two passes leave the same, at plan abscissa u.
    docs/theory-surface.md#exact-cusp.

    Parameters
    ----------
    saddle : Saddle
    radius_mm : float
        Ball radius.
    u_mm, v1_mm, v2_mm : scalar or (n,) [mm]
        Abscissa of the cusp and the two pass lines, in either order.
    direction_rad : float
        Feed direction from part X.
    allowance_mm : float
        Stock left on the surface, along its normal.

    Raises
    ------
    CannotPlan
        ``"cutter fits"`` where the ball is too large for the surface, ``"scallop"`` if the passes do not
        overlap.
    NotConverged
        If no cusp can be found.
    """
    from anticlast.passes import _scallop_kernels as kernels

    u, v1, v2 = _columns(u_mm, v1_mm, v2_mm)
    for v in (v1, v2):
        require_fit(saddle, radius_mm, plan_of(u, v, direction_rad), allowance_mm)
    apart = surface_step(saddle, u, v1, v2, direction_rad)
    if len(apart) and apart.max() >= 2.0 * radius_mm:
        message = f"passes {apart.max():.4g} mm apart leave a ridge between them that a ball of radius "
        raise CannotPlan(
            "scallop", message + f"{radius_mm:.4g} mm does not reach", float(apart.max()), 2.0 * radius_mm
        )
    height, residual = np.empty_like(u), np.empty_like(u)
    form = turned_form(saddle, direction_rad)
    kernels.cusps(form, float(radius_mm), float(allowance_mm), u, v1, v2, height, residual)
    _check_settled(np.where(apart > 0.0, residual, 0.0))
    return np.where(apart > 0.0, height, 0.0)


def surface_step(
    saddle: Saddle, u_mm: npt.ArrayLike, v1_mm: npt.ArrayLike, v2_mm: npt.ArrayLike, direction_rad: float
) -> Floats:
    """Return the distance (n,) [mm] on the surface, square to the feed, between pass lines at abscissa u.

    A plan strip of width dv along the feed has W du dv of surface, and sqrt(1 + z_u^2) du of length, so it is
    W / sqrt(1 + z_u^2) dv wide; integrated from v1 to v2 by 8-point Gauss-Legendre.
    """
    u, v1, v2 = _columns(u_mm, v1_mm, v2_mm)
    a, b, c = turned_form(saddle, direction_rad)
    v = 0.5 * (v1 + v2) + 0.5 * (v2 - v1) * _STEP_NODES[:, None]
    along, across = 1.0 + (a * u + b * v) ** 2, (b * u + c * v) ** 2
    return 0.5 * np.abs(v2 - v1) * (_STEP_WEIGHTS @ np.sqrt(1.0 + across / along))
