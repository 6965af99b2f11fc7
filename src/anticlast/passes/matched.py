"""Pattern *matched*: a bull or flat end mill leaned so that its swept profile fits the surface, in wide strips.

docs/theory-matched.md.
"""

from __future__ import annotations

import numpy as np

from anticlast.errors import CannotPlan
from anticlast.passes import matched_notes as notes
from anticlast.passes.cover import spread
from anticlast.passes.cusp import surface_step
from anticlast.passes.legs import legs_of, linked
from anticlast.passes.matched_lines import Laid, lay
from anticlast.passes.matched_rows import Chords, stretches_of
from anticlast.passes.matched_task import Task
from anticlast.passes.profile import Nearest
from anticlast.passes.strip_lines import NoStrip
from anticlast.records import Bools, CutterPath, Job, Operation, Purpose

# Links take no longer than this at feed (seconds): a lift, a rapid and an entry take more.
_LINK_SECONDS = 1.0
# Of the machine stage's half of the budget, what the highest of many ridges is usually raised by.
_LINEAR_SHARE = 0.5
_LOOK_MM = 1.5


def plan_matched(job: Job, operation: Operation, nearest: Nearest, rise_mm: float) -> CutterPath:
    """Plan the matched passes of a finishing operation.

    Parameters
    ----------
    job : Job
    operation : Operation
        With a bull or flat end mill and a scallop limit. Its lead is the least lead.
    nearest : callable
        From wished cutter axes (n, 3) in part coordinates to the reachable ones nearest to them.
    rise_mm : float
        How far above its pass the cutter starts an entry.

    Raises
    ------
    CannotPlan
        If the axis is fixed; if the cutter finds no strip somewhere, for no lean within reach keeps limit, tolerance
        and tilt error; or if a ball of the same radius would take far fewer passes.
    NotConverged
        If no spacing of the passes settles.
    """
    _require(operation)
    task = Task.of(job, operation, nearest)
    best = task.best()
    if isinstance(best, NoStrip):
        raise notes.no_strip(task, best, job.machine.name)
    wanted = best[1].v_mm.size
    notes.check_against_ball(task, wanted)
    laid = lay(task, *best)
    legs = legs_of(task.frame, laid.pieces, laid.order, _stays(task, laid))
    chords = Chords(0.5 * task.budget_mm, min(task.budget_mm, 0.5 * operation.tolerance_mm))
    stretches, sag = stretches_of(task, laid, legs, chords, rise_mm)
    cut = legs.purpose == Purpose.CUT
    return CutterPath(
        operation=operation,
        stretches=stretches,
        passes=len(laid.order),
        cut_length_mm=float(task.frame.saddle.line_length_mm(legs.start_mm[cut], legs.end_mm[cut]).sum()),
        stepover_mm=_stepover(task, laid),
        scallop_predicted_mm=laid.left.highest_mm + sag + 0.5 * _LINEAR_SHARE * task.budget_mm,
        chord_mm=chords.outward_mm,
        notes=notes.notes_of(task, laid, wanted, len(stretches) - 1),
    )


def _require(operation: Operation) -> None:
    if operation.scallop_mm is None:
        raise CannotPlan("scallop", f"operation {operation.index}: pattern 'matched' needs a scallop limit")
    if operation.cutter.shape == "ball":
        raise CannotPlan(
            "cutter shape",
            f"operation {operation.index}: pattern 'matched' needs a bull or flat end mill, "
            f"cutter {operation.cutter.number} is a ball",
        )
    if operation.fixed_axis is not None:
        raise CannotPlan(
            "cutter axis",
            f"operation {operation.index}: pattern 'matched' sets the lean of the cutter itself; "
            'leave axis = "fixed" out, or use a ball and another pattern',
        )


def _stays(task: Task, laid: Laid) -> Bools:
    """Tell after which piece the cutter may go on to the next without a lift."""
    operation = task.operation
    ground = task.outline.grown(2.0 * operation.cutter.radius_mm)
    longest = _LINK_SECONDS * operation.feed_mm_min / 60.0
    return linked(task.frame, laid.pieces, laid.order, ground, longest, operation.way == "one-way")


def _stepover(task: Task, laid: Laid) -> tuple[float, float]:
    """Return smallest and largest surface distance between neighbouring passes inside the outline; (0, 0) for one pass."""
    lines, direction = laid.lines_mm, task.frame.direction_rad
    if lines.size < 2:
        return 0.0, 0.0
    index, u0, u1 = task.outline.clip_lines(direction, 0.5 * (lines[1:] + lines[:-1]))
    if not index.size:
        return 0.0, 0.0
    owner, u = spread(u0, u1, _LOOK_MM)
    strip = np.asarray(index[owner])
    steps = surface_step(task.frame.saddle, u, lines[strip], lines[strip + 1], direction)
    return float(steps.min()), float(steps.max())
