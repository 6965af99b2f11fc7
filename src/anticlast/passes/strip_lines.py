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


@dataclass(frozen=True, slots=True)
class Layer:
    """What lines are laid by.

    Attributes
    ----------
    frame : PassFrame
    outline : Outline
    fit : Fit
    zigzag : bool
        Passes alternate, the lowest fed along +u; else every pass has to do for every way of the fit.
    """

    frame: PassFrame
    outline: Outline
    fit: Fit
    zigzag: bool

    def ways(self, number: int) -> tuple[int, ...]:
        """Return which ways of the fit a line may be fed, as indices."""
        every = tuple(range(len(self.fit.angle_rad)))
        return (number % 2,) if self.zigzag and len(every) > 1 else every


def lay_lines(layer: Layer, begin_mm: Floats | None = None) -> Lines | NoStrip:
    """Return the fewest lines whose strips cover the outline, the first as far in as the low edge allows.

    Parameters
    ----------
    layer : Layer
    begin_mm : (n,), optional
        Lines that stand already, ascending.

    Raises
    ------
    NotConverged
        If a step does not settle.
    """
    low, high = layer.outline.v_range(layer.frame.direction_rad)
    strips = layer.fit.strips
    widest = float(np.maximum(strips.left_mm, strips.right_mm).max())
    if widest <= 0.0:
        return _barest(layer, low, high)
    found = [_edge(layer, number, high, widest, -1) for number in (0, 1)]
    ends = [end for end in found if end is not None]
    first = _edge(layer, 0, low, widest, 1)
    if first is None or len(ends) < len(found):
        return _barest(layer, low, high)
    lines = [first] if begin_mm is None else begin_mm.tolist()
    while lines[-1] < ends[(len(lines) - 1) % 2]:
        step = _step(layer, len(lines) - 1, lines[-1], min(2.0 * widest, high - lines[-1]))
        if step <= SAME_POINT_MM or len(lines) > _MOST_LINES:
            return _barest(layer, low, high)
        lines.append(lines[-1] + step)
    over = lines[-1] - ends[(len(lines) - 1) % 2]
    if len(lines) == 1:
        return Lines(np.array(lines) - 0.5 * over, max(1.0 - over / (high - low), 0.5))
    return Lines(np.array(lines), len(lines) - min(over / (lines[-1] - lines[-2]), 1.0))


def closed_up(lines: Lines) -> Floats:
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


def _edge(layer: Layer, number: int, edge: float, widest: float, side: int) -> float | None:
    """Return the line whose strip just reaches an edge of the outline, at ``side`` +1 from the low one."""
    at = edge
    inward = edge + side * widest
    u = _over(layer.frame, layer.outline, min(edge, inward), max(edge, inward))
    for _ in range(_ROUNDS):
        left, right = layer.fit.reach(layer.ways(number), u, np.full(u.size, at))
        reach = float((right if side > 0 else left).min())
        if reach <= SAME_POINT_MM:
            return None
        moved = edge + side * reach
        if abs(moved - at) <= SAME_POINT_MM:
            return moved
        at = moved
    raise NotConverged("first and last pass", abs(moved - at), SAME_POINT_MM)


def _step(layer: Layer, number: int, at: float, most: float) -> float:
    """Return how far the next line lies: the strips of both just meet at the worst place between."""
    u = _over(layer.frame, layer.outline, at, at + most)
    if not u.size:
        return most
    left, _ = layer.fit.reach(layer.ways(number), u, np.full(u.size, at))
    step = float(left.min())
    for _ in range(_ROUNDS):
        _, right = layer.fit.reach(layer.ways(number + 1), u, np.full(u.size, at + step))
        found = float((left + right).min())
        if abs(found - step) <= SAME_POINT_MM:
            return found
        step = found
    # Where leads change from station to station a step may swing about its place; the lower end is safe.
    return min(found, step)


def _barest(layer: Layer, low: float, high: float) -> NoStrip:
    """Return the place of the outline where the strip is narrowest."""
    levels = np.linspace(low + SAME_POINT_MM, high - SAME_POINT_MM, 41)
    index, u0, u1 = layer.outline.clip_lines(layer.frame.direction_rad, levels)
    owner, u = spread(u0, u1, _SAMPLE_MM)
    v = levels[index[owner]]
    left, right = layer.fit.reach(tuple(range(len(layer.fit.angle_rad))), u, v)
    worst = int(np.argmin(np.minimum(left, right)))
    return NoStrip(float(u[worst]), float(v[worst]))
