"""What the outline asks of straight passes: where it is met, and how far each must run to cover its strip.

All in the plan coordinates (u, v) of a `PassFrame`. docs/theory-passes.md#cover.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import shapely

from anticlast.outline import Outline
from anticlast.passes.frame import PassFrame
from anticlast.records import Floats, Ints
from anticlast.tolerances import SAME_POINT_MM

# Levels per narrowest leading-order step, and samples along a level: curvature changes little over a
# millimetre of a surface that a ball of some millimetres fits.
_LEVELS_PER_STEP = 4.0
_SAMPLE_MM = 1.5


@dataclass(frozen=True, slots=True)
class Samples:
    """Points of the outline on plan lines of constant v, interval ends always among them, sorted by v.

    ``crowding`` is the cusp metric there (`PassFrame.crowding`), the larger the narrower a pass may be.
    ``v_low_mm``, ``v_high_mm`` bound the outline; ``gap_mm`` is the largest distance between neighbouring
    lines.
    """

    u_mm: Floats
    v_mm: Floats
    crowding: Floats
    v_low_mm: float
    v_high_mm: float
    gap_mm: float

    def window(self, low_mm: float, high_mm: float) -> slice:
        """Return the samples with low <= v <= high, widened by one line each way."""
        reach = self.gap_mm * (1.0 + 1e-9)
        first = int(np.searchsorted(self.v_mm, low_mm - reach))
        last = int(np.searchsorted(self.v_mm, high_mm + reach, "right"))
        return slice(first, max(last, first + 1))


@dataclass(frozen=True, slots=True)
class Pieces:
    """Straight pieces of the passes, in order of line and then u.

    Attributes
    ----------
    line : (n,) int64
        Pass line that the piece lies on.
    u0_mm, u1_mm : (n,)
        Its ends.
    v_mm : (n,)
    inside : list of (k, 2)
        For each piece, where it lies inside the outline, ascending in u.
    """

    line: Ints
    u0_mm: Floats
    u1_mm: Floats
    v_mm: Floats
    inside: list[Floats]


def sample(frame: PassFrame, outline: Outline, height_mm: float) -> Samples:
    """Return points over the whole outline, lines close enough for passes that leave ``height_mm``."""
    low, high = outline.v_range(frame.direction_rad)
    inset = min(10.0 * SAME_POINT_MM, 1e-3 * (high - low))
    coarse = _on_lines(frame, outline, np.linspace(low + inset, high - inset, 65))
    narrowest = np.sqrt(8.0 * height_mm / float(frame.crowding(*coarse).max()))
    count = max(9, int(np.ceil(_LEVELS_PER_STEP * (high - low) / narrowest)) + 1)
    levels = np.linspace(low + inset, high - inset, count)
    u, v = _on_lines(frame, outline, levels)
    return Samples(u, v, frame.crowding(u, v), low, high, float(levels[1] - levels[0]))


def spread(first: Floats, last: Floats, spacing_mm: float) -> tuple[Ints, Floats]:
    """Return interval index and place (m,) of points at most a spacing apart, interval ends among them."""
    count = np.maximum(1, np.ceil((last - first) / spacing_mm)).astype(np.int64) + 1
    owner = np.repeat(np.arange(first.size), count)
    within = np.arange(owner.size) - np.repeat(np.cumsum(count) - count, count)
    share = within / np.repeat(count - 1, count)
    return owner, first[owner] * (1.0 - share) + last[owner] * share


def _on_lines(frame: PassFrame, outline: Outline, levels: Floats) -> tuple[Floats, Floats]:
    index, u0, u1 = outline.clip_lines(frame.direction_rad, levels)
    owner, u = spread(u0, u1, _SAMPLE_MM)
    return u, levels[index[owner]]


def strip_extents(frame: PassFrame, outline: Outline, bounds: Floats) -> tuple[Ints, Floats, Floats]:
    """Return the intervals of u over which the outline occupies each strip of v: its exact shadow along v.

    The shadow of a connected part is that of its rim, and the rim of what lies in a strip is made of edge
    pieces and of intervals on the strip's two sides; so the union of their shadows is the answer, holes and
    all.

    Parameters
    ----------
    bounds : (m, 2)
        Lower and upper v of each strip.

    Returns
    -------
    strip : (k,) int64
    u0, u1 : (k,)
        Not merged, in no order.
    """
    strips = len(bounds)
    low_index, low0, low1 = outline.clip_lines(frame.direction_rad, bounds[:, 0])
    high_index, high0, high1 = outline.clip_lines(frame.direction_rad, bounds[:, 1])
    ends_u, ends_v = _rim(frame, outline)
    bottom, top = ends_v.min(axis=1), ends_v.max(axis=1)
    # Strips are ordered and their bounds ascend, so an edge meets a run of them.
    first = np.searchsorted(bounds[:, 1], bottom)
    last = np.searchsorted(bounds[:, 0], top, "right")
    count = np.maximum(last - first, 0)
    edge = np.repeat(np.arange(bottom.size), count)
    strip = np.repeat(first, count) + np.arange(edge.size) - np.repeat(np.cumsum(count) - count, count)
    strip = np.clip(strip, 0, strips - 1)
    u, v = ends_u[edge], ends_v[edge]
    rise = v[:, 1] - v[:, 0]
    level = np.abs(rise) < SAME_POINT_MM
    safe = np.where(level, 1.0, rise)
    share = np.stack(
        [(np.clip(bounds[strip, side], bottom[edge], top[edge]) - v[:, 0]) / safe for side in (0, 1)]
    )
    share = np.where(level, np.array([[0.0], [1.0]]), share)
    cut = u[:, 0] * (1.0 - share) + u[:, 1] * share
    return (
        np.concatenate((low_index, high_index, strip)),
        np.concatenate((low0, high0, cut.min(axis=0))),
        np.concatenate((low1, high1, cut.max(axis=0))),
    )


def _rim(frame: PassFrame, outline: Outline) -> tuple[Floats, Floats]:
    """Return u (m, 2) and v (m, 2) of both ends of every edge."""
    rings = [shapely.get_coordinates(ring) for ring in shapely.get_rings(shapely.get_parts(outline.polygon))]
    edges = np.concatenate([np.hstack((ring[:-1], ring[1:])) for ring in rings])
    start, end = frame.uv(edges[:, :2]), frame.uv(edges[:, 2:])
    return np.column_stack((start[0], end[0])), np.column_stack((start[1], end[1]))


def merged(group: Ints, first: Floats, last: Floats, bridge_mm: float) -> tuple[Ints, Floats, Floats]:
    """Return the unions of intervals group by group, gaps up to ``bridge_mm`` closed, in order."""
    order = np.lexsort((first, group))
    group, first, last = group[order], first[order], last[order]
    base, span = float(first.min()), float(last.max() - first.min()) + 2.0 * abs(bridge_mm) + 1.0
    shift = group * span - base
    end = np.maximum.accumulate(last + shift)
    starts = np.ones(group.size, dtype=bool)
    starts[1:] = first[1:] + shift[1:] > end[:-1] + bridge_mm
    head = np.flatnonzero(starts)
    tail = np.append(head[1:], group.size) - 1
    return group[head], first[head], end[tail] - shift[tail]


def pieces_of(
    frame: PassFrame,
    outline: Outline,
    lines_mm: Floats,
    overrun_mm: float | Callable[[Ints, Floats], Floats],
    bridge_mm: float,
) -> Pieces:
    """Return the pieces of every pass: its strip's shadow, an overrun longer at each end.

    A strip reaches a little over half-way to the neighbouring lines, and to the outline's rim beyond the
    outermost.

    Parameters
    ----------
    lines_mm : (n,)
        v of the passes, ascending.
    overrun_mm : float or callable
        The same everywhere, or from line and u (n,) to the difference of u.
    bridge_mm : float
        Gaps between pieces of one pass that are crossed with the cutter down.
    """
    low, high = outline.v_range(frame.direction_rad)
    middle = 0.5 * (lines_mm[1:] + lines_mm[:-1])
    overlap = 0.05 * np.diff(lines_mm)
    bounds = np.column_stack(
        (np.concatenate(([low], middle - overlap)), np.concatenate((middle + overlap, [high])))
    )
    strip, u0, u1 = strip_extents(frame, outline, bounds)
    if callable(overrun_mm):
        u0, u1 = u0 - overrun_mm(strip, u0), u1 + overrun_mm(strip, u1)
    else:
        u0, u1 = u0 - overrun_mm, u1 + overrun_mm
    line, start, end = merged(strip, u0, u1, bridge_mm)
    index, in0, in1 = outline.clip_lines(frame.direction_rad, lines_mm)
    inside = []
    cuts = np.searchsorted(index, np.arange(lines_mm.size + 1))
    for owner, a, b in zip(line.tolist(), start.tolist(), end.tolist(), strict=True):
        run = slice(int(cuts[owner]), int(cuts[owner + 1]))
        spans = np.column_stack((in0[run], in1[run]))
        inside.append(spans[(spans[:, 1] > a) & (spans[:, 0] < b)])
    return Pieces(line, start, end, lines_mm[line], inside)
