"""What a matched operation tells beside its path: leads, tilt errors, the ball it stands against, a turned part.

docs/theory-matched.md#guard.
"""

from __future__ import annotations

import math

import numpy as np

from anticlast.errors import CannotPlan
from anticlast.passes.fit import TOLD_ERROR_RAD, Fit
from anticlast.passes.matched_lines import Laid
from anticlast.passes.matched_task import Task
from anticlast.passes.scallop import second_order_step
from anticlast.passes.strip_lines import NoStrip
from anticlast.records import Bools, Floats

# A matched operation that takes this many times the passes of a ball is refused.
_MOST_BALLS = 1.25


def notes_of(task: Task, laid: Laid, wanted: int, lifts: int) -> tuple[str, ...]:
    """Return the notes of a planned operation.

    Parameters
    ----------
    task : Task
    laid : Laid
    wanted : int
        Passes as counted before they were looked at as they lie; what the turned part is compared with.
    lifts : int
        How often the cutter lifts between passes.
    """
    found, inside = laid.fit, task.inside()
    lead, lean = (np.degrees(found.reached_rad[i][:, inside]) for i in (0, 1))
    width = (found.strips.left_mm + found.strips.right_mm)[:, inside]
    leans = np.abs(lean).max() >= 0.005
    notes = [
        f"lead {lead.min():.2f} to {lead.max():.2f} degrees"
        + (f", lean {lean.min():.2f} to {lean.max():.2f} degrees" if leans else "")
        + f"; strips {width.min():.2f} to {width.max():.2f} mm wide in plan",
        _tilt_note(task, found, inside),
    ]
    ball = _ball_note(task, inside, width)
    if ball:
        notes.append(ball)
    if lifts:
        notes.append(f"the cutter lifts {lifts} times between passes")
    if not task.full:
        notes.append(_turned_note(task, wanted))
    return tuple(notes)


def _tilt_note(task: Task, found: Fit, inside: Bools) -> str:
    """Say what a tilt error does: of 0.05 degrees always, and of the error the lead was chosen to survive."""
    told = float(found.strips.told_gouge_mm[:, inside].max())
    rise = TOLD_ERROR_RAD * float(found.strips.arm_mm[:, inside].max())
    text = (
        f"a tilt error of {math.degrees(TOLD_ERROR_RAD):.2f} degrees about the contact would gouge {1e3 * told:.2f} µm and "
        f"raise the scallop by up to {1e3 * rise:.2f} µm"
    )
    margin = math.degrees(task.operation.lead_margin_rad)
    worst = float(found.strips.margin_gouge_mm[:, inside].max())
    return (
        f"{text}; lead_margin = {margin:.3g} degrees would gouge {1e3 * worst:.2f} µm, "
        f"{1e3 * task.operation.tolerance_mm:.3g} µm are allowed"
    )


def ball_steps_mm(task: Task, u_mm: Floats, v_mm: Floats) -> Floats | None:
    """Return plan steps (n,) [mm] of a ball of the same radius at the same scallop limit; None if it does not fit there."""
    frame, operation = task.frame, task.operation
    xy = frame.xy(u_mm, v_mm)
    try:
        step = second_order_step(
            frame.saddle, operation.cutter.radius_mm, xy, frame.direction_rad, operation.scallop_mm or 0.0,
            operation.allowance_mm,
        )  # fmt: skip
    except CannotPlan:
        return None
    tangent = frame.saddle.tangent(xy, frame.direction_rad)
    return step / (frame.saddle.stretch(xy) * np.linalg.norm(tangent[:, :2], axis=1))


def _ball_note(task: Task, inside: Bools, width: Floats) -> str:
    """Compare the strips with the steps of a ball of the same radius at the same scallop limit."""
    u, v = task.stations()
    step = ball_steps_mm(task, u[inside.ravel()], v[inside.ravel()])
    if step is None:
        return "a ball of the same radius would not fit the surface"
    ratio = width.min(axis=0) / step
    text = f"strips are {ratio.min():.2f} to {ratio.max():.2f} times as wide as the steps of a ball of the same radius"
    worse = float(np.mean(ratio < 1.0))
    if worse > 0.0:
        text += f"; on {100.0 * worse:.0f} % of the surface the ball is better"
    return text


def _turned_note(task: Task, wanted: int | None) -> str:
    """Say what turning the part a quarter turn on the table would gain, on a machine that does not reach every axis.

    ``wanted`` are the passes as the part lies, None if it cannot be cut so.
    """
    best = task.with_part_turned().best()
    turned = "with the part turned 90 degrees on the table"
    if isinstance(best, NoStrip):
        return f"{turned} there would be no strip near ({_xy(task, best)})"
    then = best[1].v_mm.size
    if wanted is None:
        return f"{turned} it would take about {then} passes"
    gain = f"{100.0 * (1.0 - then / wanted):.0f} % fewer" if then < wanted else "no gain"
    return f"{turned} it would take about {then} passes instead of {wanted}: {gain}"


def _xy(task: Task, at: NoStrip) -> str:
    x, y = task.frame.xy(np.array([at.u_mm]), np.array([at.v_mm]))[0]
    return f"{x:.2f}, {y:.2f}"


def no_strip(task: Task, at: NoStrip, machine: str) -> CannotPlan:
    """Return the refusal of an operation that finds no strip at a place: why, and what would mend it."""
    operation, cutter = task.operation, task.operation.cutter
    limit, gouge = 1e3 * (operation.scallop_mm or 0.0), 1e3 * operation.tolerance_mm
    why = (
        f"a {2.0 * cutter.radius_mm:.4g} mm {cutter.shape} end mill finds no lean near ({_xy(task, at)}) at which it leaves no "
        f"more than {limit:.3g} µm and gouges no more than {gouge:.3g} µm under a tilt error of "
        f"{math.degrees(operation.lead_margin_rad):.3g} degrees"
    )
    if task.full:
        mend = "use a smaller cutter, a larger tolerance or a smaller lead_margin"
    else:
        mend = f"{machine} cannot lean it as it needs: {_turned_note(task, None)}; or use a ball and another pattern"
    return CannotPlan("strip", f"operation {operation.index}: {why}; {mend}")


def check_against_ball(task: Task, passes: int) -> None:
    """Raise `CannotPlan` if a ball of the same radius, at the narrowest of its steps, takes far fewer passes."""
    u, v = (at[task.counts.ravel()] for at in task.stations())
    step = ball_steps_mm(task, u, v)
    if step is None:
        return
    low, high = task.outline.v_range(task.frame.direction_rad)
    balls = math.ceil((high - low) / float(step.min()))
    if passes <= _MOST_BALLS * balls:
        return
    raise CannotPlan(
        "strip",
        f"operation {task.operation.index}: matched strips would take about {passes} passes, a ball of the same radius {balls}; "
        "use the ball and another pattern, or another direction"
        + ("" if task.full else f"; {_turned_note(task, passes)}"),
        float(passes),
        _MOST_BALLS * balls,
        "passes",
    )
