"""From legs to rows: points so close that the ball's centre, going straight between them, stays true.

Between rows the reference point goes straight. How far that strays from the centre path is settled by the
path's own curvature, in closed form: toward the normal it changes the scallop or gouges, sideways it only
moves the pass. docs/theory-passes.md#chords.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from anticlast.passes.courses import Course
from anticlast.passes.cover import spread
from anticlast.passes.frame import PassFrame
from anticlast.passes.legs import Legs, walk
from anticlast.passes.tilt import angle_between, turned_between, wished_axis
from anticlast.records import Bytes, Floats, Ints, Purpose
from anticlast.tolerances import AXIS_TURN_RAD

Nearest = Callable[[Floats], Floats]

# Places along a leg where its curvature and its axis are asked before rows are laid: on a millimetre neither
# changes by more than a few percent, and a link turns evenly.
_PROBE_MM = 1.0
_PROBES_ON_LINK = 9


@dataclass(frozen=True, slots=True)
class Chords:
    """How far straight moves of the ball's centre may stray, mm: off the part, into it, sideways."""

    outward_mm: float
    inward_mm: float
    sideways_mm: float


@dataclass(frozen=True, slots=True)
class Tilt:
    """Lead and lean, or a fixed axis, and what the machine makes of the wish."""

    lead_rad: float
    lean_rad: float
    fixed: tuple[float, float, float] | None
    nearest: Nearest


@dataclass(frozen=True, slots=True)
class Rows:
    """Rows of all stretches in order, as in ``records.Stretch``; ``tangent`` is along the feed, unit."""

    contact_mm: Floats
    normal: Floats
    tangent: Floats
    axis: Floats
    purpose: Bytes
    pass_index: Ints
    stretch: Ints


def strays(frame: PassFrame, xy: Floats, along: Floats, bend_per_mm: Floats) -> tuple[Floats, Floats]:
    """Return C''.n and |C'' square to n and C'| (n,) [1/mm] per plan millimetre of motion: outward and sideways.

    C'' of the ball's centre along a plan path with unit direction d that bends to its left by k is that along a
    straight path plus k times the centre's rate along the left.

    Parameters
    ----------
    xy, along : (n, 2)
        Plan place, and unit direction of motion there.
    bend_per_mm : (n,)
        Plan curvature of the path, positive to the left.
    """
    u, v = frame.uv(xy)
    du, dv = frame.uv(along)
    _, rate, bend = frame.centre(u, v, du, dv)
    bend = bend + bend_per_mm[:, None] * frame.centre(u, v, -dv, du)[1]
    normal = frame.normal_uv(u, v)
    side = np.cross(normal, rate)
    aside = np.abs(np.einsum("ni,ni->n", bend, side)) / np.linalg.norm(side, axis=1)
    return np.einsum("ni,ni->n", bend, normal), aside


def sag_density(outward: Floats, aside: Floats, chords: Chords) -> Floats:
    """Return how many rows per plan millimetre (n,) chords ask for: one of length l sags by l^2 / 8 of `strays`."""
    limit = np.where(outward > 0.0, outward / chords.outward_mm, -outward / chords.inward_mm)
    return np.sqrt(np.maximum(limit, aside / chords.sideways_mm) / 8.0)


def rows_of(frame: PassFrame, course: Course, legs: Legs, chords: Chords, tilt: Tilt) -> Rows:
    """Return the rows of all legs: both ends of each, and as many between as chords and axis turn ask for."""
    link_ends = _link_axes(frame, course, legs, tilt)
    leg, share = _probes(legs)
    xy, along, bend = walk(course, legs, leg, share)
    axis, _, _ = _axes(frame, xy, along, leg, share, legs, link_ends, tilt)
    density = sag_density(*strays(frame, xy, along, bend), chords)
    inner = leg[1:] == leg[:-1]
    run = np.linalg.norm(np.diff(xy, axis=0), axis=1)
    turn = angle_between(axis[:-1], axis[1:]) / AXIS_TURN_RAD
    need = np.where(inner, np.maximum(np.maximum(density[:-1], density[1:]) * run, turn), 0.0)
    leg, share = _even_shares(leg, share, need, legs)
    xy, along, _ = walk(course, legs, leg, share)
    axis, normal, tangent = _axes(frame, xy, along, leg, share, legs, link_ends, tilt)
    return Rows(
        frame.saddle.point(xy),
        normal,
        tangent,
        axis,
        legs.purpose[leg],
        legs.pass_index[leg],
        legs.stretch[leg],
    )


def _probes(legs: Legs) -> tuple[Ints, Floats]:
    """Return leg and share along it of the places where curvature and axis are asked."""
    length = np.linalg.norm(legs.end_mm - legs.start_mm, axis=1)
    fine = np.where(legs.purpose == Purpose.LINK, length / (_PROBES_ON_LINK - 1), length)
    spans = np.maximum(length / np.minimum(fine, _PROBE_MM), 1.0)
    leg, place = spread(np.zeros_like(length), spans, 1.0)
    return leg, place / spans[leg]


def _even_shares(leg: Ints, share: Floats, need: Floats, legs: Legs) -> tuple[Ints, Floats]:
    """Return leg and share of every row: each leg divided evenly by ``need``, which is summed along it.

    The first row of a stretch is the start of its first leg; every other leg starts at the last row of the
    one before.
    """
    heads = np.searchsorted(leg, np.arange(legs.stretch.size))
    total = np.bincount(leg[1:], weights=need, minlength=legs.stretch.size)
    count = np.maximum(np.ceil(total), 1.0)
    run = np.concatenate(([0.0], np.cumsum(need)))
    before = run[heads]
    scale = np.divide(count, total, out=np.zeros_like(total), where=total > 0.0)
    # Legs that need nothing have no even measure of their own; their two ends are all their rows.
    place = np.where((total > 0.0)[leg], (run - before[leg]) * scale[leg], share * count[leg])
    base = np.concatenate(([0.0], np.cumsum(count + 1.0)))[:-1]
    opens = np.ones(legs.stretch.size, dtype=bool)
    opens[1:] = legs.stretch[1:] != legs.stretch[:-1]
    rows = count.astype(np.int64) + opens
    owner = np.repeat(np.arange(rows.size), rows)
    number = np.arange(owner.size) - np.repeat(np.cumsum(rows) - rows, rows) + np.where(opens, 0, 1)[owner]
    at = np.interp(base[owner] + number, base[leg] + place, share)
    at = np.where(number == 0, 0.0, np.where(number == count[owner], 1.0, at))
    return owner, at


def _link_axes(frame: PassFrame, course: Course, legs: Legs, tilt: Tilt) -> tuple[Floats, Floats]:
    """Return the wished axes (n, 3) at both ends of every leg; on a link those of the passes it joins."""
    link = legs.purpose == Purpose.LINK
    n = np.arange(link.size)
    before = np.where(link, np.maximum(n - 1, 0), n)
    after = np.where(link, np.minimum(n + 1, link.size - 1), n)
    leaving = walk(course, legs, before, link.astype(np.float64))[1]
    arriving = walk(course, legs, after, (~link).astype(np.float64))[1]
    return _wished(frame, legs.start_mm, leaving, tilt)[0], _wished(frame, legs.end_mm, arriving, tilt)[0]


def _wished(frame: PassFrame, xy: Floats, along: Floats, tilt: Tilt) -> tuple[Floats, Floats, Floats]:
    """Return wished axis, normal, feed tangent (n, 3) at xy (n, 2), fed along unit plan directions (n, 2)."""
    zx, zy = frame.saddle.gradient(xy[:, 0], xy[:, 1])
    normal = np.column_stack((-zx, -zy, np.ones_like(zx)))
    normal /= np.linalg.norm(normal, axis=1, keepdims=True)
    tangent = np.column_stack((along, zx * along[:, 0] + zy * along[:, 1]))
    tangent /= np.linalg.norm(tangent, axis=1, keepdims=True)
    if tilt.fixed is not None:
        return np.broadcast_to(np.array(tilt.fixed), normal.shape), normal, tangent
    return wished_axis(normal, tangent, tilt.lead_rad, tilt.lean_rad), normal, tangent


def _axes(
    frame: PassFrame,
    xy: Floats,
    along: Floats,
    leg: Ints,
    share: Floats,
    legs: Legs,
    link_ends: tuple[Floats, Floats],
    tilt: Tilt,
) -> tuple[Floats, Floats, Floats]:
    """Return reached axis, normal, tangent (n, 3): nearest to the wish, or on links to an even turn."""
    axis, normal, tangent = _wished(frame, xy, along, tilt)
    link = np.flatnonzero(legs.purpose[leg] == Purpose.LINK)
    if link.size and tilt.fixed is None:
        axis[link] = turned_between(link_ends[0][leg[link]], link_ends[1][leg[link]], share[link])
    return tilt.nearest(np.ascontiguousarray(axis)), normal, tangent
