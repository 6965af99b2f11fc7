"""Stepover and scallop height of a ball cutter: second-order forms, flat rule, length floor, local values.

Plan coordinates, pass lines and scallop height are defined in `anticlast.passes.cusp`, which has the exact
cusps. Derivations: docs/theory-surface.md.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from anticlast.errors import BadInput, CannotPlan, Fault, NotConverged
from anticlast.passes.cusp import lines_beside, require_fit, require_scallop, surface_step
from anticlast.quadrature import integrate
from anticlast.saddle import Saddle
from anticlast.tolerances import SAME_STEPOVER

if TYPE_CHECKING:
    from anticlast.outline import Outline
    from anticlast.records import Floats

# Ra of a parabolic cusp as a share of its height. A circular arc of h = 0.0035 R gives 0.2565.
_RA_SHARE = 4.0 / (9.0 * math.sqrt(3.0))
_MAX_ROUNDS = 60


def _gap_across(
    saddle: Saddle, radius_mm: float, xy: Floats, direction_rad: npt.ArrayLike, allowance_mm: float
) -> Floats:
    """Return 2 h / (s/2)^2 (n,) [1/mm]: the second-order gap across the feed, least over shifts along it."""
    require_fit(saddle, radius_mm, xy, allowance_mm)
    k_t, k_b, tau, _, _ = saddle.along(xy, direction_rad)
    # G = (I - e S)(I - (R + e) S) / R with S the shape operator and e the allowance; e = 0: I / R - S.
    first, second = radius_mm + 2.0 * allowance_mm, allowance_mm * (radius_mm + allowance_mm)
    g_tt = (1.0 - first * k_t + second * (k_t * k_t + tau * tau)) / radius_mm
    g_bb = (1.0 - first * k_b + second * (k_b * k_b + tau * tau)) / radius_mm
    g_tb = (second * (k_t + k_b) - first) * tau / radius_mm
    return g_bb - g_tb * g_tb / g_tt


def second_order_height(
    saddle: Saddle,
    radius_mm: float,
    xy: npt.ArrayLike,
    direction_rad: npt.ArrayLike,
    stepover_mm: npt.ArrayLike,
    allowance_mm: float = 0.0,
) -> Floats:
    """Return the scallop height (n,) [mm] at xy (n, 2) [mm] for a stepover on the surface, to second order.

    h = s^2/8 [1/R - k_b - tau^2 / (1/R - k_t)] for no allowance: the gap form I/R - S with the shift along
    the feed eliminated (Schur complement). Follows from the cusp metric of T. Kim, Constant cusp height tool
    paths as geodesic parallels on an abstract Riemannian manifold, CAD 39 (2007) 477-489;
    docs/theory-surface.md#scallop-with-torsion.
    """
    xy = np.asarray(xy, dtype=np.float64).reshape(-1, 2)
    step = np.asarray(stepover_mm, dtype=np.float64)
    return step * step / 8.0 * _gap_across(saddle, radius_mm, xy, direction_rad, allowance_mm)


def second_order_step(
    saddle: Saddle,
    radius_mm: float,
    xy: npt.ArrayLike,
    direction_rad: npt.ArrayLike,
    scallop_mm: npt.ArrayLike,
    allowance_mm: float = 0.0,
) -> Floats:
    """Return the surface stepover (n,) [mm] for a scallop height: `second_order_height` reversed."""
    xy = np.asarray(xy, dtype=np.float64).reshape(-1, 2)
    height = np.asarray(scallop_mm, dtype=np.float64)
    return np.sqrt(8.0 * height / _gap_across(saddle, radius_mm, xy, direction_rad, allowance_mm))


def flat_height(radius_mm: float, stepover_mm: float) -> float:
    """Return the scallop height [mm] on a flat: R - sqrt(R^2 - s^2/4), the handbook rule in exact form."""
    if not 0.0 <= stepover_mm <= 2.0 * radius_mm:
        message = (
            f"passes {stepover_mm:.4g} mm apart do not overlap under a ball of radius {radius_mm:.4g} mm"
        )
        raise CannotPlan("scallop", message, stepover_mm, 2.0 * radius_mm)
    quarter = stepover_mm * stepover_mm / 4.0
    return quarter / (radius_mm + math.sqrt(radius_mm * radius_mm - quarter))


def flat_step(radius_mm: float, scallop_mm: float) -> float:
    """Return the stepover [mm] on a flat that leaves a scallop height: 2 sqrt(2 R h - h^2)."""
    require_scallop(radius_mm, np.array([scallop_mm]))
    return 2.0 * math.sqrt(scallop_mm * (2.0 * radius_mm - scallop_mm))


def length_floor_mm(
    saddle: Saddle, outline: Outline, radius_mm: float, scallop_mm: float, allowance_mm: float = 0.0
) -> float:
    """Return the least length [mm] of a ball path over the outline at a scallop height, to leading order.

    The widest strip at a point lies across the least-gap direction, k_max: w = sqrt(8 h / (1/R - k_max)); the
    floor is the integral of dA / w. docs/theory-surface.md#length-floor.
    """
    require_scallop(radius_mm, np.array([scallop_mm]))

    def density(xy: Floats) -> Floats:
        require_fit(saddle, radius_mm, xy, allowance_mm)
        k_max = saddle.principal(xy)[0]
        gap = (1.0 - allowance_mm * k_max) * (1.0 - (radius_mm + allowance_mm) * k_max) / radius_mm
        return saddle.stretch(xy) * np.sqrt(gap / (8.0 * scallop_mm))

    return integrate(outline.polygon, density)


def roughness_um(height_mm: npt.ArrayLike) -> tuple[Floats, Floats]:
    """Return (Ra, Rz) [um] across the feed of parabolic cusps of a height [mm]: 4/(9 sqrt 3) h and h."""
    height = np.asarray(height_mm, dtype=np.float64)
    return _RA_SHARE * 1e3 * height, 1e3 * height


def local_scallop(
    saddle: Saddle,
    radius_mm: float,
    xy: npt.ArrayLike,
    direction_rad: float,
    stepover_mm: float,
    allowance_mm: float = 0.0,
) -> Floats:
    """Return the exact scallop height (n,) [mm] over xy (n, 2) [mm] between passes a stepover apart.

    The stepover is the distance on the surface square to the feed; the two pass lines are placed so that
    their cusp stands over xy. Fixed-point iteration h <- h (S/s)^2 on the exact pass lines of each height.
    """
    xy = np.asarray(xy, dtype=np.float64).reshape(-1, 2)
    c, s = math.cos(direction_rad), math.sin(direction_rad)
    u, v = xy[:, 0] * c + xy[:, 1] * s, xy[:, 1] * c - xy[:, 0] * s
    height = second_order_height(saddle, radius_mm, xy, direction_rad, stepover_mm, allowance_mm)
    height = np.minimum(height, 0.5 * radius_mm)
    off = np.inf
    for _ in range(_MAX_ROUNDS):
        right, left = lines_beside(saddle, radius_mm, u, v, direction_rad, height, allowance_mm)
        ratio = stepover_mm / surface_step(saddle, u, right, left, direction_rad)
        height = np.minimum(height * ratio * ratio, 0.999 * radius_mm)
        off = float(np.abs(ratio - 1.0).max()) if len(ratio) else 0.0
        if off <= SAME_STEPOVER:
            return height
    raise NotConverged("scallop at a stepover", off, SAME_STEPOVER)


def local_step(
    saddle: Saddle,
    radius_mm: float,
    xy: npt.ArrayLike,
    direction_rad: float,
    scallop_mm: float,
    allowance_mm: float = 0.0,
) -> Floats:
    """Return the exact surface stepover (n,) [mm] over xy (n, 2) [mm] that leaves a scallop height there."""
    xy = np.asarray(xy, dtype=np.float64).reshape(-1, 2)
    c, s = math.cos(direction_rad), math.sin(direction_rad)
    u, v = xy[:, 0] * c + xy[:, 1] * s, xy[:, 1] * c - xy[:, 0] * s
    right, left = lines_beside(saddle, radius_mm, u, v, direction_rad, scallop_mm, allowance_mm)
    return surface_step(saddle, u, right, left, direction_rad)


@dataclass(frozen=True, slots=True)
class ScallopField:
    """Stepover and scallop over the outline, for pictures.

    ``stepover_mm[j, i]`` and ``scallop_mm[j, i]`` belong to ``x_mm[i]``, ``y_mm[j]``; nan outside.
    """

    x_mm: Floats
    y_mm: Floats
    stepover_mm: Floats
    scallop_mm: Floats


def scallop_field(
    saddle: Saddle,
    outline: Outline,
    radius_mm: float,
    direction_rad: float,
    *,
    stepover_mm: float | None = None,
    scallop_mm: float | None = None,
    allowance_mm: float = 0.0,
    samples: int = 120,
) -> ScallopField:
    """Return stepover and scallop on a plan grid of ``samples`` points along the longer side of the outline.

    One of ``stepover_mm`` and ``scallop_mm`` is given and the same everywhere; the other varies.
    """
    function = varying(saddle, radius_mm, direction_rad, stepover_mm, scallop_mm, allowance_mm)
    x0, y0, x1, y1 = outline.bounds
    spacing = max(x1 - x0, y1 - y0) / (samples - 1)
    x = np.linspace(x0, x1, max(2, round((x1 - x0) / spacing) + 1))
    y = np.linspace(y0, y1, max(2, round((y1 - y0) / spacing) + 1))
    xy = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    inside = outline.contains(xy)
    varies, fixed = np.full(len(xy), np.nan), np.full(len(xy), np.nan)
    varies[inside] = function(xy[inside])
    fixed[inside] = stepover_mm if stepover_mm is not None else scallop_mm
    steps, heights = (fixed, varies) if stepover_mm is not None else (varies, fixed)
    shape = (len(y), len(x))
    return ScallopField(x, y, steps.reshape(shape), heights.reshape(shape))


def varying(
    saddle: Saddle,
    radius_mm: float,
    direction_rad: float,
    stepover_mm: float | None,
    scallop_mm: float | None,
    allowance_mm: float,
) -> Callable[[Floats], Floats]:
    """Return the function of xy that varies: the scallop at a stepover, or the stepover at a scallop."""
    if stepover_mm is not None and scallop_mm is None:
        return lambda xy: local_scallop(saddle, radius_mm, xy, direction_rad, stepover_mm, allowance_mm)
    if scallop_mm is not None and stepover_mm is None:
        return lambda xy: local_step(saddle, radius_mm, xy, direction_rad, scallop_mm, allowance_mm)
    raise BadInput(Fault("command line", 0, "--stepover, --scallop", "give exactly one of them"))
