"""The best feed direction for straight passes: the one that needs the shortest cut.

All to leading order in the scallop height, from the cusp metric. docs/comparing.md#best-feed-direction.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np

from anticlast.errors import NotConverged
from anticlast.outline import Outline
from anticlast.passes.cover import spread
from anticlast.passes.cusp import require_fit, require_scallop
from anticlast.passes.frame import PassFrame
from anticlast.passes.stepover import second_order_step
from anticlast.quadrature import nodes_and_weights
from anticlast.records import Floats
from anticlast.saddle import Saddle
from anticlast.tolerances import SAME_FEED_DIRECTION_RAD

# How passes may be spaced: all at one plan step, each pass by its own tightest place, every place by itself.
Spacing = Literal["one step", "pass by pass", "everywhere"]

# Directions tried before the best are narrowed down: every 5 degrees. Lengths go with cos 2d to leading order.
_TRIED = 36
_NARROWED = 2
_MOST_ROUNDS = 60
_GOLDEN = 0.5 * (math.sqrt(5.0) - 1.0)
# A direction no worse than the closed form by more than this share is the closed form: sums over levels are coarse, and
# curves are polygons, mirrored to about as much; integrals are exact but for round-off.
_SAME_LENGTH = {"pass by pass": 1e-6, "one step": 1e-10, "everywhere": 1e-10}
# Levels over the outline's width, samples along each (mm), cells of the quadrature over its longer side.
_LEVELS = 240
_SAMPLE_MM = 1.5
_CELLS = 8


@dataclass(frozen=True, slots=True)
class FeedDirection:
    """A feed direction and what straight passes along it come to, to leading order.

    Attributes
    ----------
    direction_rad : float
        From part X, in [0, pi): passes run both ways.
    cut_length_mm : float
        Length of the contact path inside the outline.
    least_strip_mm : float
        Width on the surface, square to the feed, of the narrowest strip a pass may leave behind it.
    own_axis : bool
        The direction is exactly that of the saddle's convex axis, ``rotate`` + 90 degrees.
    """

    direction_rad: float
    cut_length_mm: float
    least_strip_mm: float
    own_axis: bool


def convex_axis_rad(saddle: Saddle) -> float:
    """Return the plan direction of the saddle's convex axis, from part X, in [0, pi).

    At the saddle point it is the best feed direction of any cutter: the surface is most convex along the feed and most
    concave across it.
    """
    return (saddle.rotate_rad + 0.5 * math.pi) % math.pi


def widest_strip_rad(saddle: Saddle, xy: Floats) -> Floats:
    """Return the feed direction (n,) in plan, in [0, pi), along which a pass over xy (n, 2) [mm] is widest.

    Closed form: the principal direction of the most convex curvature, whatever the ball.
    """
    along = saddle.principal(xy)[3]
    return np.mod(np.arctan2(along[:, 1], along[:, 0]), math.pi)


def cut_length_mm(
    saddle: Saddle,
    outline: Outline,
    radius_mm: float,
    scallop_mm: float,
    direction_rad: float,
    spacing: Spacing,
    allowance_mm: float = 0.0,
) -> float:
    """Return the length [mm] of straight passes over the outline at a scallop height, to leading order.

    Parameters
    ----------
    saddle, outline : Saddle, Outline
    radius_mm : float
        Ball radius.
    scallop_mm : float
    direction_rad : float
        Feed direction from part X.
    spacing : {"one step", "pass by pass", "everywhere"}
        One plan step for all passes, by the tightest place of the outline; each pass by the tightest place on it; or,
        as a bound, every place by itself.
    allowance_mm : float

    Raises
    ------
    CannotPlan
        The ball does not fit the surface, or the height is impossible.
    """
    measure = _ball_measure(saddle, outline, radius_mm, scallop_mm, spacing, allowance_mm)
    return measure(direction_rad)


def best_direction(
    saddle: Saddle,
    outline: Outline,
    radius_mm: float,
    scallop_mm: float,
    spacing: Spacing = "pass by pass",
    allowance_mm: float = 0.0,
) -> FeedDirection:
    """Return the feed direction in which a ball needs the shortest cut.

    Parameters
    ----------
    saddle, outline : Saddle, Outline
        Any rotation, b different from a, any outline.
    radius_mm, scallop_mm, allowance_mm : float
    spacing : {"one step", "pass by pass", "everywhere"}
        As in `cut_length_mm`.

    Raises
    ------
    CannotPlan
        The ball does not fit the surface, or the height is impossible.
    NotConverged
    """
    measure = _ball_measure(saddle, outline, radius_mm, scallop_mm, spacing, allowance_mm)
    direction, own = _least(measure, convex_axis_rad(saddle), _SAME_LENGTH[spacing])
    xy = np.vstack((outline.boundary_points(_SAMPLE_MM), outline.grid(_SAMPLE_MM)))
    strip = second_order_step(saddle, radius_mm, xy, direction, scallop_mm, allowance_mm)
    return FeedDirection(direction, measure(direction), float(strip.min()), own)


def most_convex_direction_rad(saddle: Saddle, outline: Outline) -> float:
    """Return the direction from part X, in [0, pi), along which the outline's surface is most convex on the mean.

    For bull and flat end mills: their heel clears what is convex along the feed, and their swept profile fits what is
    concave across it. Also the limit of `best_direction` for ever smaller balls. The mean over the surface of the normal
    curvature along t is that of (t . Hess z . t) / (1 + (grad z . t)^2) over the plan.

    Raises
    ------
    NotConverged
    """
    xy, weights = _quadrature(outline)
    gradient, hessian = np.column_stack(saddle.gradient(xy[:, 0], xy[:, 1])), saddle.hessian()

    def mean_bend(direction_rad: float) -> float:
        t = np.array([math.cos(direction_rad), math.sin(direction_rad)])
        slope = gradient @ t
        return float(weights @ (float(t @ hessian @ t) / (1.0 + slope * slope)) / weights.sum())

    return _least(mean_bend, convex_axis_rad(saddle), _SAME_LENGTH["everywhere"])[0]


# ---------------------------------------------------------------------------------------- lengths


def _ball_measure(
    saddle: Saddle,
    outline: Outline,
    radius_mm: float,
    scallop_mm: float,
    spacing: Spacing,
    allowance_mm: float,
) -> Callable[[float], float]:
    """Return the cut length [mm] as a function of the direction [rad]."""
    if spacing not in get_args(Spacing):
        raise ValueError(f"spacing {spacing!r} is none of {get_args(Spacing)}")
    require_scallop(radius_mm, np.array([scallop_mm]))
    rim = np.vstack((outline.boundary_points(_SAMPLE_MM), outline.grid(_SAMPLE_MM)))
    require_fit(saddle, radius_mm, rim, allowance_mm)

    def frame(direction_rad: float) -> PassFrame:
        return PassFrame(saddle, direction_rad, radius_mm, allowance_mm)

    if spacing == "pass by pass":
        return lambda direction: _by_pass(frame(direction), outline, scallop_mm)
    xy, weights = _quadrature(outline)

    def by_place(direction_rad: float) -> float:
        straight = frame(direction_rad)
        zx, zy = saddle.gradient(xy[:, 0], xy[:, 1])
        stretch = np.hypot(1.0, zx * math.cos(direction_rad) + zy * math.sin(direction_rad))
        if spacing == "one step":
            crowding = np.full(len(xy), straight.crowding(*straight.uv(rim)).max())
        else:
            crowding = straight.crowding(*straight.uv(xy))
        return float(weights @ (stretch * np.sqrt(crowding / (8.0 * scallop_mm))))

    return by_place


def _by_pass(frame: PassFrame, outline: Outline, scallop_mm: float) -> float:
    """Return the length [mm] of passes each as far from the next as its tightest place allows.

    Passes per plan width are sqrt(crowding / 8h) at the tightest place of the line; summed over midpoints of levels.
    """
    low, high = outline.v_range(frame.direction_rad)
    gap = (high - low) / _LEVELS
    levels = np.linspace(low + 0.5 * gap, high - 0.5 * gap, _LEVELS)
    index, u0, u1 = outline.clip_lines(frame.direction_rad, levels)
    owner, u = spread(u0, u1, _SAMPLE_MM)
    crowding = frame.crowding(u, levels[index[owner]])
    tightest = np.zeros(_LEVELS)
    np.maximum.at(tightest, index[owner], crowding)
    ends = (frame.xy(at, levels[index]) for at in (u0, u1))
    length = frame.saddle.line_length_mm(*ends)
    return float(gap * np.sum(length * np.sqrt(tightest[index] / (8.0 * scallop_mm))))


def _quadrature(outline: Outline) -> tuple[Floats, Floats]:
    """Return points (n, 2) [mm] and weights (n,) [mm^2] that integrate smooth densities over the outline."""
    x0, y0, x1, y1 = outline.bounds
    return nodes_and_weights(outline.triangles(max(x1 - x0, y1 - y0) / _CELLS))


# ---------------------------------------------------------------------------------------- the search


def _least(function: Callable[[float], float], closed_form_rad: float, same: float) -> tuple[float, bool]:
    """Return where a function of period pi is least, and whether that is the closed form.

    A round of directions that holds the closed form, then golden sections around the best of them.
    """
    tried = closed_form_rad + math.pi / _TRIED * np.arange(_TRIED)
    values = np.array([function(direction) for direction in tried])
    dips = np.flatnonzero((values <= np.roll(values, 1)) & (values <= np.roll(values, -1)))
    best, least = closed_form_rad, float(values[0])
    for dip in dips[np.argsort(values[dips], kind="stable")][:_NARROWED]:
        at, value = _golden(function, float(tried[dip]), math.pi / _TRIED)
        if value < least - same * abs(least):
            best, least = at, value
    return best % math.pi, best == closed_form_rad


def _golden(function: Callable[[float], float], middle: float, reach: float) -> tuple[float, float]:
    """Return place and value of the least of a function within ``reach`` of a place, by golden sections."""
    low, high = middle - reach, middle + reach
    left, right = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
    at_left, at_right = function(left), function(right)
    for _ in range(_MOST_ROUNDS):
        if high - low <= SAME_FEED_DIRECTION_RAD:
            return (left, at_left) if at_left <= at_right else (right, at_right)
        if at_left <= at_right:
            high, right, at_right = right, left, at_left
            left = high - _GOLDEN * (high - low)
            at_left = function(left)
        else:
            low, left, at_left = left, right, at_right
            right = low + _GOLDEN * (high - low)
            at_right = function(right)
    raise NotConverged("best feed direction", high - low, SAME_FEED_DIRECTION_RAD)
