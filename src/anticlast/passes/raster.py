"""Pattern *raster*: parallel plan-view passes at one plan step."""

from __future__ import annotations

import math

import numpy as np

from anticlast.errors import NotConverged
from anticlast.outline import Outline
from anticlast.passes.cover import Samples
from anticlast.passes.frame import PassFrame
from anticlast.passes.spacing import edge_distances, left_behind, widest_constant_step
from anticlast.records import Floats
from anticlast.tolerances import SAME_POINT_MM

_ROUNDS = 8


def evenly(low_mm: float, high_mm: float, edges_mm: tuple[float, float], step_mm: float) -> Floats:
    """Return the fewest lines (n,) between two edges, all shrunk alike so that they come out even at both.

    Neither edge distance nor step is exceeded; all are smaller by the same share.
    """
    width = high_mm - low_mm
    count = max(1, math.ceil((width - sum(edges_mm)) / step_mm - 1e-9) + 1)
    shrink = width / (sum(edges_mm) + (count - 1) * step_mm)
    return low_mm + shrink * (edges_mm[0] + step_mm * np.arange(count, dtype=np.float64))


def lines_for_scallop(frame: PassFrame, samples: Samples, height_mm: float) -> Floats:
    """Return v of the passes (n,) [mm], ascending: the fewest at one step that keep to ``height_mm``."""
    step = widest_constant_step(frame, samples, height_mm)
    return evenly(samples.v_low_mm, samples.v_high_mm, edge_distances(frame, samples, height_mm), step)


def lines_for_stepover(frame: PassFrame, outline: Outline, samples: Samples, stepover_mm: float) -> Floats:
    """Return v of the passes (n,) [mm], ascending, at most the stepover apart on the surface.

    The step is not shrunk to come out even: what is over is shared by the two edges, neither farther than
    half a step.

    Raises
    ------
    NotConverged
        If the step does not settle on the stepover asked for.
    """
    low, high = samples.v_low_mm, samples.v_high_mm
    uu, uv, vv = frame.hessian_uv()
    along = 1.0 + (uu * samples.u_mm + uv * samples.v_mm) ** 2
    across = (uv * samples.u_mm + vv * samples.v_mm) ** 2
    step = stepover_mm * float(np.sqrt(along / (along + across)).min())
    # Samples lie all over the outline, strips between passes do not quite: the step may still grow a little,
    # and a step for one count is all but the step for the next. Counting up ends it, should the two disagree.
    count = math.ceil((high - low) / step - 1e-9)
    if count > 1:
        step = _settled_step(frame, outline, 0.5 * (low + high), count, step, stepover_mm)
        count = math.ceil((high - low) / step - 1e-9)
    for number in range(count, count + _ROUNDS):
        if number == 1:
            return np.array([0.5 * (low + high)])
        step = _settled_step(frame, outline, 0.5 * (low + high), number, step, stepover_mm)
        if number * step >= high - low - SAME_POINT_MM:
            return _about(0.5 * (low + high), number, step)
    raise NotConverged("number of passes", high - low - (count + _ROUNDS) * step, step)


def _about(middle_mm: float, count: int, step_mm: float) -> Floats:
    return middle_mm + step_mm * (np.arange(count, dtype=np.float64) - 0.5 * (count - 1))


def _settled_step(
    frame: PassFrame, outline: Outline, middle_mm: float, count: int, step_mm: float, stepover_mm: float
) -> float:
    """Return the plan step at which ``count`` lines about a middle lie just the stepover apart."""
    miss = 0.0
    for _ in range(_ROUNDS):
        largest = left_behind(frame, outline, _about(middle_mm, count, step_mm)).stepover_mm[1]
        miss = abs(largest - stepover_mm)
        if miss <= SAME_POINT_MM:
            return step_mm
        step_mm *= stepover_mm / largest
    raise NotConverged("plan step of the stepover", miss, SAME_POINT_MM)
