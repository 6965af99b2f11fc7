"""What a pattern hands to the steps all patterns share: the course of its passes, and what they leave.

Every pattern has coordinates (u, v) in which its passes are lines of constant v; `Layout.frame` and ``Layout.outline``
are in these. docs/theory-passes.md#budget.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from anticlast.errors import CannotPlan, NotConverged
from anticlast.outline import Outline
from anticlast.passes import graded, raster
from anticlast.passes.courses import Course, Straight
from anticlast.passes.cover import Samples, sample
from anticlast.passes.frame import PassFrame
from anticlast.passes.rows import Chords
from anticlast.passes.spacing import Left, left_behind
from anticlast.records import Floats, Ints, Operation
from anticlast.saddle import Saddle
from anticlast.tolerances import CHORD_SHARE_OF_SCALLOP, SIDEWAYS_SHARE_OF_STEP

# Cusps are asked at places; where one between them comes out higher than designed, the design is lowered. Once or
# twice is the rule.
_ROUNDS = 8


@dataclass(frozen=True, slots=True)
class Layout:
    """The passes of an operation.

    Attributes
    ----------
    course : Course
        Where they run in plan, line by line.
    frame : PassFrame
        Turns plan points of ``outline`` into (u, v) in which pass i is the line v = ``lines_mm[i]``.
    outline : Outline
        The part's outline in the coordinates that ``frame`` turns.
    lines_mm : (n,)
        Ascending.
    left : Left
    chords : Chords
    reach_mm : float
        How far passes run past the outline.
    overrun_mm : float or callable
        The same as a difference of u; a callable takes line and u (n,).
    bridge_mm : float
        Difference of u that is no more than twice ``reach_mm`` anywhere.
    """

    course: Course
    frame: PassFrame
    outline: Outline
    lines_mm: Floats
    left: Left
    chords: Chords
    reach_mm: float
    overrun_mm: float | Callable[[Ints, Floats], Floats]
    bridge_mm: float


def budget_mm(operation: Operation, height_mm: float) -> float:
    """Return what chords and linearisation together may add to a scallop, mm."""
    return min(operation.tolerance_mm, CHORD_SHARE_OF_SCALLOP * height_mm)


def chords_of(operation: Operation, height_mm: float, left: Left) -> Chords:
    """Return the planner's half of the budget; inward, where chords take stock off, it may be twice that."""
    outward = 0.5 * budget_mm(operation, height_mm)
    sideways = SIDEWAYS_SHARE_OF_STEP * (left.stepover_mm[0] or operation.cutter.radius_mm)
    return Chords(
        outward,
        min(2.0 * outward, 0.5 * operation.tolerance_mm),
        min(sideways, operation.tolerance_mm),
    )


def settled(operation: Operation, lay: Callable[[float], tuple[Floats, Left]]) -> tuple[Floats, Left]:
    """Return lines laid by the scallop limit less the budget, so that what they leave keeps to it.

    Parameters
    ----------
    lay : callable
        From a height [mm] to lines, and what they leave.

    Raises
    ------
    NotConverged
    """
    limit = operation.scallop_mm
    if limit is None:
        raise CannotPlan(
            "stepover", f"operation {operation.index}: a stepover can be given for pattern 'raster' only"
        )
    design = limit - budget_mm(operation, limit)
    height, over = design, 0.0
    for _ in range(_ROUNDS):
        lines, left = lay(height)
        over = left.highest_mm - design
        if over <= 0.0:
            return lines, left
        height *= (1.0 - 1e-4) * design / left.highest_mm
    raise NotConverged("spacing of the passes", over, 0.0)


def raster_layout(saddle: Saddle, outline: Outline, operation: Operation) -> Layout:
    """Lay pattern *raster*, by scallop or by stepover."""
    if operation.stepover_mm is None:
        return _straight(saddle, outline, operation, raster.lines_for_scallop)
    frame = _frame(saddle, operation)
    samples = sample(frame, outline, operation.stepover_mm**2 / (8.0 * frame.radius_mm))
    lines = raster.lines_for_stepover(frame, outline, samples, operation.stepover_mm)
    left = left_behind(frame, outline, lines)
    return _layout(frame, outline, lines, left, chords_of(operation, left.highest_mm, left))


def graded_layout(saddle: Saddle, outline: Outline, operation: Operation) -> Layout:
    """Lay pattern *graded*."""
    return _straight(saddle, outline, operation, graded.lines_for_scallop)


def _frame(saddle: Saddle, operation: Operation) -> PassFrame:
    return PassFrame(saddle, operation.direction_rad, operation.cutter.radius_mm, operation.allowance_mm)


def _straight(
    saddle: Saddle,
    outline: Outline,
    operation: Operation,
    lines_for: Callable[[PassFrame, Samples, float], Floats],
) -> Layout:
    frame = _frame(saddle, operation)
    limit = (
        operation.scallop_mm or operation.tolerance_mm
    )  # without a limit nothing is laid, `settled` says so
    samples = sample(frame, outline, limit)

    def lay(height_mm: float) -> tuple[Floats, Left]:
        lines = lines_for(frame, samples, height_mm)
        return lines, left_behind(frame, outline, lines)

    lines, left = settled(operation, lay)
    return _layout(frame, outline, lines, left, chords_of(operation, limit, left))


def _layout(frame: PassFrame, outline: Outline, lines: Floats, left: Left, chords: Chords) -> Layout:
    """Return the layout of straight passes. They overrun by a step, and as far as the deepest cut runs ahead in it."""
    low, high = outline.v_range(frame.direction_rad)
    gap = float(np.diff(lines).max()) if lines.size > 1 else 0.0
    gap = max(gap, 2.0 * (float(lines[0]) - low), 2.0 * (high - float(lines[-1])))
    u, v = frame.uv(outline.boundary_points(1.0))
    overrun = gap * (1.0 + float(np.abs(frame.shear(u, v)).max()))
    return Layout(
        Straight(frame, lines), frame, outline, lines, left, chords, overrun, overrun, 2.0 * overrun
    )
