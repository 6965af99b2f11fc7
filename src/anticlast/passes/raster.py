"""Pattern *raster*: parallel plan-view passes at one plan step."""

from __future__ import annotations

import math

import numpy as np

from anticlast.errors import NotConverged
from anticlast.outline import Outline
from anticlast.passes.cover import Samples
from anticlast.passes.frame import PassFrame
from anticlast.passes.cusp import surface_step
from anticlast.passes.spacing import edge_distances, left_behind, widest_constant_step
from anticlast.records import Floats
from anticlast.tolerances import SAME_POINT_MM

_ROUNDS = 8


def evenly(low_mm: float, high_mm: float, edges_mm: tuple[float, float], step_mm: float) -> Floats:
    """Return the fewest lines (n,) between two edges, everything shrunk alike so that they come out even at both.

    Neither edge distance nor step is exceeded; all are smaller by the same share.
    """
    width = high_mm - low_mm
    count = max(1, math.ceil((width - sum(edges_mm)) / step_mm - 1e-9) + 1)
    shrink = width / (sum(edges_mm) + (count - 1) * step_mm)
    return low_mm + shrink * (edges_mm[0] + step_mm * np.arange(count))


def lines_for_scallop(frame: PassFrame, outline: Outline, samples: Samples, height_mm: float) -> Floats:
    """Return v of the passes (n,), ascending [mm]: the fewest at one plan step that leave at most ``height_mm``."""
    step = widest_constant_step(frame, samples, height_mm)
    return evenly(samples.v_low_mm, samples.v_high_mm, edge_distances(frame, samples, height_mm), step)


def lines_for_stepover(frame: PassFrame, outline: Outline, samples: Samples, stepover_mm: float) -> Floats:
    """Return v of the passes (n,), ascending [mm], whose largest distance on the surface inside the outline is as given.

    The step is not shrunk to come out even: what is over is shared by the two edges, neither farther than half a step.

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
    largest = 0.0
    for _ in range(_ROUNDS):
        count = max(1, math.ceil((high - low) / step - 1e-9))
        lines = 0.5 * (low + high) + step * (np.arange(count) - 0.5 * (count - 1))
        if count == 1:
            return lines
        largest = left_behind(frame, outline, lines).stepover_mm[1]
        if abs(largest - stepover_mm) <= SAME_POINT_MM:
            return lines
        step *= stepover_mm / largest
    raise NotConverged("plan step of the stepover", abs(largest - stepover_mm), SAME_POINT_MM)


__all__ = ["evenly", "lines_for_scallop", "lines_for_stepover", "surface_step"]
