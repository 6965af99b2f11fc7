"""From an operation to its cutter path: the registry of patterns, and the steps that all patterns share.

docs/theory-passes.md.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from anticlast.errors import CannotPlan, NotConverged
from anticlast.outline import Outline
from anticlast.passes import entry, graded, raster
from anticlast.passes.cover import Samples, pieces_of, sample
from anticlast.passes.cusp import require_fit
from anticlast.passes.frame import PassFrame
from anticlast.passes.legs import Legs, legs_of, linked
from anticlast.passes.matched import plan_matched
from anticlast.passes.order import cutting_order
from anticlast.passes.rows import Chords, Nearest, Rows, Tilt, rows_of, sag_density
from anticlast.passes.spacing import Left, left_behind
from anticlast.passes.tilt import tip_from_contact
from anticlast.records import CutterPath, Floats, Job, Operation, Purpose, Stretch, frozen_array
from anticlast.saddle import Saddle
from anticlast.tolerances import CHORD_SHARE_OF_SCALLOP, SIDEWAYS_SHARE_OF_STEP

LinesForScallop = Callable[[PassFrame, Outline, Samples, float], Floats]

# Pattern name, as in the job file, to the lines it lays for a scallop limit.
PATTERNS: dict[str, LinesForScallop] = {
    "graded": graded.lines_for_scallop,
    "raster": raster.lines_for_scallop,
}

# Cusps are asked at places; where one between them comes out higher than designed, the design is lowered.
# Once is the rule.
_ROUNDS = 8
# Ground within this many overruns of the outline is passes' own: a strip's pass may end half a step and an
# overrun outside.
_GROUND_OVERRUNS = 2.0
# The cutter stays down on a link that takes no longer than this (seconds at feed): a lift, a rapid and an
# entry take more.
_LINK_SECONDS = 1.0
# Curvature changes little over this much of a surface that a ball of some millimetres all but fills.
_FIT_MM = 0.5


@dataclass(frozen=True, slots=True)
class _Laid:
    """Pass lines (v, ascending), what they leave, and how far chords may stray."""

    lines_mm: Floats
    left: Left
    chords: Chords


def plan_operation(job: Job, operation: Operation, nearest_axis: Nearest) -> CutterPath:
    """Plan the passes of a finishing operation, links, entries and exits included.

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
    require_pattern(operation)
    if operation.pattern == "matched":
        return plan_matched(job, operation, nearest_axis, _rise_mm(job, operation))
    saddle, outline = Saddle.of(job.part), job.part.outline
    _require_fit(saddle, outline, operation)
    frame = PassFrame(saddle, operation.direction_rad, operation.cutter.radius_mm, operation.allowance_mm)
    laid = _lay(frame, outline, operation)
    overrun = _overrun(frame, outline, laid.lines_mm)
    bridge = (2.0 * _GROUND_OVERRUNS - 2.0) * overrun
    pieces = pieces_of(frame, outline, laid.lines_mm, overrun, bridge)
    order = cutting_order(pieces, operation.way)
    stays = linked(
        frame,
        pieces,
        order,
        outline.grown(_GROUND_OVERRUNS * overrun),
        _LINK_SECONDS * operation.feed_mm_min / 60.0,
        operation.way == "one-way",
    )
    legs = legs_of(frame, pieces, order, stays)
    tilt = Tilt(operation.lead_rad, operation.lean_rad, operation.fixed_axis, nearest_axis)
    rows = rows_of(frame, legs, laid.chords, tilt)
    stretches = _stretches(frame, operation, rows, _rise_mm(job, operation))
    notes = (f"the cutter lifts {len(stretches) - 1} times between passes",) if len(stretches) > 1 else ()
    return CutterPath(
        operation=operation,
        stretches=stretches,
        passes=len(order),
        cut_length_mm=_cut_length(saddle, legs),
        stepover_mm=laid.left.stepover_mm,
        scallop_predicted_mm=_predicted(frame, laid),
        chord_mm=laid.chords.outward_mm,
        notes=notes,
    )


def require_pattern(operation: Operation) -> None:
    """Raise `CannotPlan` unless the operation's pattern is available and can use its cutter."""
    if operation.pattern == "matched":
        return
    if operation.pattern not in PATTERNS:
        names = " and ".join(sorted([*PATTERNS, "matched"]))
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


def _require_fit(saddle: Saddle, outline: Outline, operation: Operation) -> None:
    """Raise `CannotPlan` unless the ball fits the concave curvature all over the outline."""
    places = np.vstack((outline.boundary_points(_FIT_MM), outline.grid(_FIT_MM)))
    require_fit(saddle, operation.cutter.radius_mm, places, operation.allowance_mm)


def _lay(frame: PassFrame, outline: Outline, operation: Operation) -> _Laid:
    """Return the pass lines: by the scallop limit less what chords may add, or by the stepover."""
    if operation.scallop_mm is None:
        if operation.stepover_mm is None or operation.pattern != "raster":
            raise CannotPlan(
                "stepover", f"operation {operation.index}: a stepover can be given for pattern 'raster' only"
            )
        height = operation.stepover_mm**2 / (8.0 * frame.radius_mm)
        samples = sample(frame, outline, height)
        lines = raster.lines_for_stepover(frame, outline, samples, operation.stepover_mm)
        left = left_behind(frame, outline, lines)
        return _Laid(lines, left, _chords(operation, left.highest_mm, left))
    design = operation.scallop_mm - _budget(operation, operation.scallop_mm)
    height = design
    samples = sample(frame, outline, height)
    for _ in range(_ROUNDS):
        lines = PATTERNS[operation.pattern](frame, outline, samples, height)
        left = left_behind(frame, outline, lines)
        if left.highest_mm <= design:
            return _Laid(lines, left, _chords(operation, operation.scallop_mm, left))
        height *= (1.0 - 1e-4) * design / left.highest_mm
    raise NotConverged("spacing of the passes", left.highest_mm - design, 0.0)


def _budget(operation: Operation, height_mm: float) -> float:
    """Return what chords and linearisation together may add to a scallop, mm."""
    return min(operation.tolerance_mm, CHORD_SHARE_OF_SCALLOP * height_mm)


def _chords(operation: Operation, height_mm: float, left: Left) -> Chords:
    """Return the planner's half of the budget; inward, where chords take stock off, it may be twice that."""
    outward = 0.5 * _budget(operation, height_mm)
    sideways = SIDEWAYS_SHARE_OF_STEP * (left.stepover_mm[0] or operation.cutter.radius_mm)
    return Chords(
        outward, min(2.0 * outward, 0.5 * operation.tolerance_mm), min(sideways, operation.tolerance_mm)
    )


def _overrun(frame: PassFrame, outline: Outline, lines_mm: Floats) -> float:
    """Return how far passes run past the outline: a step, and as far as the deepest cut runs ahead in it."""
    low, high = outline.v_range(frame.direction_rad)
    gap = float(np.diff(lines_mm).max()) if lines_mm.size > 1 else 0.0
    gap = max(gap, 2.0 * (float(lines_mm[0]) - low), 2.0 * (high - float(lines_mm[-1])))
    u, v = frame.uv(outline.boundary_points(1.0))
    return gap * (1.0 + float(np.abs(frame.shear(u, v)).max()))


def _predicted(frame: PassFrame, laid: _Laid) -> float:
    """Return the highest scallop to expect: the exact cusp, and the whole chord's sag where the feed is concave.

    Chord ends of neighbouring passes do not line up, so of many cusps some stand on the middles of two chords that lie
    off the part, and some on the ends of two that cut into it. docs/theory-passes.md#budget.
    """
    left = laid.left
    xy = frame.xy(left.u_mm, left.v_mm)
    along = np.broadcast_to(frame.xy(np.ones(1), np.zeros(1)), xy.shape)
    density = sag_density(frame, xy, along, laid.chords)
    _, _, bend = frame.centre(left.u_mm, left.v_mm, np.ones(1), np.zeros(1))
    up = np.einsum("ni,ni->n", bend, frame.normal_uv(left.u_mm, left.v_mm))
    sag = np.maximum(up, 0.0) / (8.0 * np.maximum(density, np.finfo(float).tiny) ** 2)
    return float((left.height_mm + np.where(up > 0.0, sag, 0.0)).max())


def _cut_length(saddle: Saddle, legs: Legs) -> float:
    cut = legs.purpose == Purpose.CUT
    return float(saddle.line_length_mm(legs.start_mm[cut], legs.end_mm[cut]).sum())


def _rise_mm(job: Job, operation: Operation) -> float:
    """Return how far above its pass the ball starts an entry: clear of what earlier operations left."""
    earlier = [other.allowance_mm for other in job.operations if other.index < operation.index]
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
