"""Lines of matched passes: side by side, each as far from the last as their two strips reach at the worst place.

docs/theory-matched.md#spacing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from anticlast.errors import NotConverged
from anticlast.outline import Outline
from anticlast.passes.cover import merged, spread, strip_extents
from anticlast.passes.fit import Fit
from anticlast.passes.frame import PassFrame
from anticlast.records import Floats
from anticlast.tolerances import SAME_POINT_MM

_SAMPLE_MM = 1.0
_ROUNDS = 40
_MOST_LINES = 20_000


@dataclass(frozen=True, slots=True)
class Lines:
    """v of the passes, ascending, and how many it would take if a fraction of a pass could be cut."""

    v_mm: Floats
    wanted: float


@dataclass(frozen=True, slots=True)
class NoStrip:
    """A place of the outline that no strip covers, plan (u, v) [mm]."""

    u_mm: float
    v_mm: float


def lay_lines(frame: PassFrame, outline: Outline, fit: Fit) -> Lines | NoStrip:
    """Return the fewest lines whose strips cover the outline, the first as far in as the low edge allows.

    Raises
    ------
    NotConverged
        If a step does not settle.
    """
    low, high = outline.v_range(frame.direction_rad)
    widest = float(np.maximum(fit.strips.left_mm, fit.strips.right_mm).max())
    if widest <= 0.0:
        return _barest(frame, outline, fit, low, high)
    first = _edge(frame, outline, fit, low, widest, 1)
    end = _edge(frame, outline, fit, high, widest, -1)
    if first is None or end is None:
        return _barest(frame, outline, fit, low, high)
    lines = [first]
    while lines[-1] < end:
        step = _step(frame, outline, fit, lines[-1], min(2.0 * widest, high - lines[-1]))
        if step <= SAME_POINT_MM or len(lines) > _MOST_LINES:
            return _barest(frame, outline, fit, low, high)
        lines.append(lines[-1] + step)
    if len(lines) == 1:
        return Lines(
            np.array([0.5 * (low + high) if end < first else first]),
            max(1.0 - (first - end) / (high - low), 0.5),
        )
    return Lines(np.array(lines), len(lines) - (lines[-1] - end) / (lines[-1] - lines[-2]))


def closed_up(lines: Lines, outline: Outline, direction_rad: float) -> Floats:
    """Return the lines (n,) drawn together evenly, so that the last lies no further out than it need."""
    v = lines.v_mm
    if v.size < 2:
        return v
    last = v[-1] - (v.size - lines.wanted) * (v[-1] - v[-2])
    return v[0] + (v - v[0]) * ((last - v[0]) / (v[-1] - v[0]))


def _over(frame: PassFrame, outline: Outline, low: float, high: float) -> Floats:
    """Return places u (n,) all along the shadow of what of the outline lies between two lines."""
    strip, u0, u1 = strip_extents(frame, outline, np.array([[low, high]]))
    if not strip.size:
        return np.empty(0)
    _, first, last = merged(strip, u0, u1, 0.0)
    return spread(first, last, _SAMPLE_MM)[1]


def _edge(
    frame: PassFrame, outline: Outline, fit: Fit, edge: float, widest: float, side: int
) -> float | None:
    """Return the line whose strip just reaches an edge of the outline, at ``side`` +1 from the low one."""
    at = edge
    for _ in range(_ROUNDS):
        inward = edge + side * widest
        u = _over(frame, outline, min(edge, inward), max(edge, inward))
        left, right = fit.reach(u, np.full(u.size, at))
        reach = float((right if side > 0 else left).min())
        if reach <= SAME_POINT_MM:
            return None
        moved = edge + side * reach
        if abs(moved - at) <= SAME_POINT_MM:
            return moved
        at = moved
    raise NotConverged("first and last pass", abs(moved - at), SAME_POINT_MM)


def _step(frame: PassFrame, outline: Outline, fit: Fit, at: float, most: float) -> float:
    """Return how far the next line lies: the strips of both just meet at the worst place between."""
    u = _over(frame, outline, at, at + most)
    if not u.size:
        return most
    left, _ = fit.reach(u, np.full(u.size, at))
    step = float(left.min())
    for _ in range(_ROUNDS):
        _, right = fit.reach(u, np.full(u.size, at + step))
        found = float((left + right).min())
        if abs(found - step) <= SAME_POINT_MM:
            return found
        step = found
    raise NotConverged("step to the next pass", abs(found - step), SAME_POINT_MM)


def _barest(frame: PassFrame, outline: Outline, fit: Fit, low: float, high: float) -> NoStrip:
    """Return the place of the outline where the strip is narrowest."""
    levels = np.linspace(low + SAME_POINT_MM, high - SAME_POINT_MM, 41)
    index, u0, u1 = outline.clip_lines(frame.direction_rad, levels)
    owner, u = spread(u0, u1, _SAMPLE_MM)
    v = levels[index[owner]]
    left, right = fit.reach(u, v)
    worst = int(np.argmin(np.minimum(left, right)))
    return NoStrip(float(u[worst]), float(v[worst]))
