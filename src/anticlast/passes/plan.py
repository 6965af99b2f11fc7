"""From an operation to its cutter path: the registry of patterns, and the steps that all patterns share.

docs/theory-passes.md.
"""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from anticlast.errors import CannotPlan
from anticlast.outline import Outline
from anticlast.passes import entry, semi
from anticlast.passes.courses import Course
from anticlast.passes.cover import pieces_of, spread
from anticlast.passes.cusp import require_fit
from anticlast.passes.even import even_layout
from anticlast.passes.frame import PassFrame
from anticlast.passes.layers import plan_layers
from anticlast.passes.layout import Layout, graded_layout, raster_layout
from anticlast.passes.legs import Legs, legs_of, linked
from anticlast.passes.matched import plan_matched
from anticlast.passes.order import cutting_order
from anticlast.passes.profile_cut import plan_outline
from anticlast.passes.rough.limits import left_mm
from anticlast.passes.rows import Nearest, Rows, Tilt, rows_of, sag_density, strays
from anticlast.passes.tilt import tip_from_contact
from anticlast.records import CutterPath, Job, Operation, Purpose, Stretch, frozen_array
from anticlast.saddle import Saddle
from anticlast.tolerances import SAME_DIRECTION_RAD

# Pattern name, as in the job file, to what lays its passes.
PATTERNS: dict[str, Callable[[Saddle, Outline, Operation], Layout]] = {
    "even": even_layout,
    "graded": graded_layout,
    "raster": raster_layout,
}

# Patterns that do not sweep the surface, to what plans all of their operation.
SHAPING: dict[str, Callable[[Job, Operation, Nearest], CutterPath]] = {
    "layers": plan_layers,
    "profile": plan_outline,
}

# Ground within this many overruns of the outline is passes' own: a strip's pass may end half a step and an
# overrun outside, and gaps of two overruns more are bridged.
_GROUND_OVERRUNS = 2.0
# The cutter stays down on a link that takes no longer than this (seconds at feed): a lift, a rapid and an
# entry take more.
_LINK_SECONDS = 1.0
# Length is integrated over runs of at most this much, 5 points each: the slope changes by less than 0.5 over one.
_RUN_MM = 4.0
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(5)
# Curvature changes little over this much of a surface that a ball of some millimetres all but fills.
_FIT_MM = 0.5


def plan_operation(job: Job, operation: Operation, nearest_axis: Nearest) -> CutterPath:
    """Plan the passes of an operation, links, entries and exits included.

    Parameters
    ----------
    job : Job
    operation : Operation
        One of the job's.
    nearest_axis : callable
        From wished cutter axes (n, 3) in part coordinates to the reachable ones nearest to them.

    Returns
    -------
    CutterPath
        ``chord_mm`` is how far off the part a straight move between rows may take the ball's centre; into the
        part, at most twice as far. The same amount again is left to the machine stage.

    Raises
    ------
    CannotPlan
        If the pattern is not available, the cutter is not one it can use, or the cutter does not fit the
        surface.
    NotConverged
        If no spacing of the passes settles.
    """
    if operation.pattern in SHAPING:
        return SHAPING[operation.pattern](job, operation, nearest_axis)
    require_pattern(operation)
    if operation.pattern == "matched":
        return plan_matched(job, operation, nearest_axis, _rise_mm(job, operation))
    saddle, outline = Saddle.of(job.part), job.part.outline
    _require_fit(saddle, outline, operation)
    laid = PATTERNS[operation.pattern](saddle, outline, operation)
    pieces = pieces_of(laid.frame, laid.outline, laid.lines_mm, laid.overrun_mm, laid.bridge_mm)
    order = cutting_order(pieces, operation.way)
    stays = linked(
        laid.course,
        pieces,
        order,
        outline.grown(_GROUND_OVERRUNS * laid.reach_mm),
        _LINK_SECONDS * operation.feed_mm_min / 60.0,
        operation.way == "one-way",
    )
    legs = legs_of(laid.course, pieces, order, stays)
    tilt = Tilt(operation.lead_rad, operation.lean_rad, operation.fixed_axis, nearest_axis)
    ball = PassFrame(saddle, 0.0, operation.cutter.radius_mm, operation.allowance_mm)
    rows = rows_of(ball, laid.course, legs, laid.chords, tilt)
    stretches = _stretches(ball, operation, rows, _rise_mm(job, operation))
    notes = (f"the cutter lifts {len(stretches) - 1} times between passes",) if len(stretches) > 1 else ()
    predicted = _predicted(ball, laid, turning=_turns(stretches))
    return CutterPath(
        operation=operation,
        stretches=stretches,
        passes=len(order),
        cut_length_mm=_cut_length(saddle, laid.course, legs),
        stepover_mm=laid.left.stepover_mm,
        scallop_predicted_mm=predicted,
        chord_mm=laid.chords.outward_mm,
        notes=(*notes, *semi.notes_of(operation, predicted)),
    )


def require_pattern(operation: Operation) -> None:
    """Raise `CannotPlan` unless the operation's pattern is available and can use its cutter."""
    if operation.pattern == "matched":
        return
    if operation.pattern not in PATTERNS:
        names = " and ".join(sorted([*PATTERNS, *SHAPING, "matched"]))
        raise CannotPlan(
            "pattern",
            f"operation {operation.index}: pattern {operation.pattern!r} is not available; "
            f"the patterns are {names}",
        )
    if operation.cutter.shape != "ball":
        raise CannotPlan(
            "cutter shape",
            f"operation {operation.index}: pattern {operation.pattern!r} needs a ball cutter, "
            f"cutter {operation.cutter.number} is a {operation.cutter.shape} end mill",
        )


# Part of the budget for straight moves that turning axes were seen to use up, at the highest cusp of varied jobs.
_TURNING_SHARE = 0.4


def _require_fit(saddle: Saddle, outline: Outline, operation: Operation) -> None:
    """Raise `CannotPlan` unless the ball fits the concave curvature all over the outline."""
    places = np.vstack((outline.boundary_points(_FIT_MM), outline.grid(_FIT_MM)))
    require_fit(saddle, operation.cutter.radius_mm, places, operation.allowance_mm)


def _turns(stretches: tuple[Stretch, ...]) -> bool:
    """Whether the cutter axis turns while it cuts, so that rotary axes move between rows."""
    first = stretches[0].axis[0]
    return any(float(np.abs(stretch.axis - first).max()) > SAME_DIRECTION_RAD for stretch in stretches)


def _predicted(ball: PassFrame, laid: Layout, *, turning: bool) -> float:
    """Return the highest scallop to expect: the exact cusp, and what straight moves are likely to add.

    With rotary axes turning, blocks are held against the curve of the ball's centre itself, within the whole
    budget; over varied jobs they were seen to add two fifths of it, give or take as much. Without, the path goes in
    chords: the whole sag counts where the feed is concave. Chord ends of neighbouring passes do not line up, so of
    many cusps some stand on the middles of two chords that lie off the part, and some on the ends of two that cut
    into it. docs/theory-passes.md#budget.
    """
    left = laid.left
    if turning:
        return float(left.height_mm.max()) + _TURNING_SHARE * 2.0 * laid.chords.outward_mm
    outward, aside = strays(ball, left.xy_mm, left.along, np.zeros(len(left.xy_mm)))
    density = sag_density(outward, aside, laid.chords)
    sag = np.maximum(outward, 0.0) / (8.0 * np.maximum(density, np.finfo(float).tiny) ** 2)
    return float((left.height_mm + np.where(outward > 0.0, sag, 0.0)).max())


def _cut_length(saddle: Saddle, course: Course, legs: Legs) -> float:
    """Return the length on the surface of all cutting legs: Gauss-Legendre in u, some runs a leg."""
    cut = np.flatnonzero(legs.purpose == Purpose.CUT)
    owner, edge = spread(np.zeros(cut.size), np.abs(legs.u1_mm[cut] - legs.u0_mm[cut]), _RUN_MM)
    inner = owner[1:] == owner[:-1]
    first, last, leg = edge[:-1][inner], edge[1:][inner], cut[owner[1:][inner]]
    low = np.minimum(legs.u0_mm, legs.u1_mm)[leg]
    u = low + 0.5 * (first + last) + 0.5 * (last - first) * _NODES[:, None]
    at, rate, _ = course.at(np.tile(legs.line[leg], len(_NODES)), u.ravel())
    zx, zy = saddle.gradient(at[:, 0], at[:, 1])
    speed = np.sqrt((rate**2).sum(axis=1) + (zx * rate[:, 0] + zy * rate[:, 1]) ** 2).reshape(u.shape)
    return float((0.5 * (last - first) * (_WEIGHTS @ speed)).sum())


def _rise_mm(job: Job, operation: Operation) -> float:
    """Return how far above its pass the ball starts an entry: clear of what earlier operations left."""
    earlier = [
        left_mm(o, job.part) for o in job.operations if o.index < operation.index and o.does != "outline"
    ]
    before = max([job.stock.allowance_mm or 0.0, *earlier])
    return max(before - operation.allowance_mm, 0.0) + entry.ABOVE_STOCK_MM


def _stretches(frame: PassFrame, operation: Operation, rows: Rows, rise_mm: float) -> tuple[Stretch, ...]:
    """Return the rows cut into stretches, each with its entry and exit."""
    bounds = np.searchsorted(rows.stretch, np.arange(int(rows.stretch[-1]) + 2))
    return tuple(
        _stretch(frame, operation, rows, slice(int(first), int(last)), rise_mm)
        for first, last in pairwise(bounds)
    )


def _stretch(frame: PassFrame, operation: Operation, rows: Rows, run: slice, rise_mm: float) -> Stretch:
    contact, normal, axis = rows.contact_mm[run], rows.normal[run], rows.axis[run]
    tangent, purpose, owner = rows.tangent[run], rows.purpose[run], rows.pass_index[run]
    cutter = operation.cutter
    tip = tip_from_contact(contact, normal, axis, cutter, operation.allowance_mm)
    ways = []
    for end, sign in ((0, -1.0), (-1, 1.0)):
        bend = frame.saddle.normal_curvature(contact[[end], :2], tangent[[end]])
        along = frame.heading(contact[[end], :2], tangent[[end]])[0]
        ways.append(
            entry.way_off(
                frame.saddle,
                contact[end] + frame.reach_mm * normal[end],
                normal[end],
                sign * along,
                float(bend[0]),
                frame.reach_mm,
                rise_mm,
                operation.tolerance_mm,
            )
            - cutter.radius_mm * axis[end]
        )
    into, off = ways[0][::-1], ways[1]
    # The row on which an entry ends is the first of the pass.
    purpose = np.concatenate(
        (np.full(len(into) + 1, Purpose.ENTRY), purpose[1:], np.full(len(off), Purpose.EXIT))
    )
    share = np.where(purpose == Purpose.ENTRY, entry.ENTRY_FEED_SHARE, 1.0)

    def held(values: npt.NDArray) -> npt.NDArray:
        """Return rows with the pass's end values standing still on entry and exit."""
        return np.concatenate((values[[0] * len(into)], values, values[[-1] * len(off)]))

    return Stretch(
        tip_mm=frozen_array(np.concatenate((into, tip, off))),
        axis=frozen_array(held(axis)),
        contact_mm=frozen_array(held(contact)),
        normal=frozen_array(held(normal)),
        purpose=frozen_array(purpose, np.uint8),
        pass_index=frozen_array(held(owner), np.int64),
        feed_mm_min=frozen_array(operation.feed_mm_min * share),
    )
