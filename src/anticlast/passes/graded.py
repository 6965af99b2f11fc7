"""Pattern *graded*: parallel passes, each as far from the last as the tightest point between them allows."""

from __future__ import annotations

import numpy as np

from anticlast.passes.cover import Samples
from anticlast.passes.frame import PassFrame
from anticlast.passes.raster import evenly
from anticlast.passes.spacing import edge_distances, next_step
from anticlast.records import Floats

# The last pass may come out this share of a step past its place before the rest is spread over all steps.
_EVEN_SHARE = 0.01
_ROUNDS = 12


def lines_for_scallop(frame: PassFrame, samples: Samples, height_mm: float) -> Floats:
    """Return v of the passes (n,), ascending [mm], that leave ``height_mm`` and come out even at both edges.

    The first pass lies as far inside as the edge allows, each next one as far as the tightest point between
    them allows. That ends at a fraction of a pass. The height is lowered, steps going with its square root,
    until it ends at a whole one; where the outline jumps and no height does that, the closest is taken. The
    last hundredth of a step is spread over all of them.
    """
    low, high = samples.v_low_mm, samples.v_high_mm
    height = height_mm
    lines, wanted, end = _march(frame, samples, height)
    count = lines.size
    if count == 1:
        edges = edge_distances(frame, samples, height)
        return evenly(low, high, edges, high - low)
    best, best_end, over = lines, end, count - wanted
    floor, ceiling = 0.0, height
    for _ in range(_ROUNDS):
        if over <= _EVEN_SHARE:
            break
        # Leading order, a hair short of it so as to end past the last place; between the heights known to be
        # too low and high enough.
        height *= (wanted / (count - 0.3 * _EVEN_SHARE)) ** 2
        if not floor < height < ceiling:
            height = 0.5 * (max(floor, 0.9 * ceiling) + ceiling)
        lines, wanted, end = _march(frame, samples, height)
        if lines.size > count:
            floor = height
        elif lines.size == count:
            ceiling = height
            if count - wanted < over:
                best, best_end, over = lines, end, count - wanted
    return best[0] + (best - best[0]) * ((best_end - best[0]) / (best[-1] - best[0]))


def _march(frame: PassFrame, samples: Samples, height_mm: float) -> tuple[Floats, float, float]:
    """Return lines from the low edge to past the last place, how many it takes, and that place."""
    first, last = edge_distances(frame, samples, height_mm)
    end = samples.v_high_mm - last
    lines = [samples.v_low_mm + first]
    while lines[-1] < end:
        lines.append(lines[-1] + next_step(frame, samples, lines[-1], height_mm))
    if len(lines) == 1:
        return np.array(lines), 1.0, end
    return np.array(lines), len(lines) - (lines[-1] - end) / (lines[-1] - lines[-2]), end
