"""Pattern *graded*: parallel passes, each as far from the one before as the tightest point between them allows."""

from __future__ import annotations

import numpy as np

from anticlast.errors import NotConverged
from anticlast.outline import Outline
from anticlast.passes.cover import Samples
from anticlast.passes.frame import PassFrame
from anticlast.passes.raster import evenly
from anticlast.passes.spacing import edge_distances, next_step
from anticlast.records import Floats

# The last pass may come out this share of a step off before the rest is spread over all steps.
_EVEN_SHARE = 0.01
_ROUNDS = 20


def lines_for_scallop(frame: PassFrame, outline: Outline, samples: Samples, height_mm: float) -> Floats:
    """Return v of the passes (n,), ascending [mm], that leave at most ``height_mm`` and come out even at both edges.

    The first pass lies as far inside as the edge allows, each next one as far as the tightest point between
    allows. That ends at a fraction of a pass; the height is lowered, steps going with its square root, until
    it ends at a whole one.

    Raises
    ------
    NotConverged
        If no height below the limit makes the passes come out even.
    """
    low, high = samples.v_low_mm, samples.v_high_mm
    height, over = height_mm, np.inf
    lines, wanted = _march(frame, samples, height)
    count = int(np.ceil(wanted - 1e-9))
    for _ in range(_ROUNDS):
        edges = edge_distances(frame, samples, height)
        if sum(edges) >= high - low:
            return evenly(low, high, edges, high - low)
        end = high - edges[1]
        over = (count - wanted) if lines.size == count else np.inf
        if lines.size == count and 0.0 <= over <= _EVEN_SHARE:
            return lines[0] + (lines - lines[0]) * ((end - lines[0]) / (lines[-1] - lines[0]))
        # A hair below what leading order says, so that the end is met from the side where no limit is
        # exceeded.
        height = min(height_mm, height * (wanted / (count - 0.3 * _EVEN_SHARE)) ** 2)
        lines, wanted = _march(frame, samples, height)
    raise NotConverged("even graded passes", float(over), _EVEN_SHARE)


def _march(frame: PassFrame, samples: Samples, height_mm: float) -> tuple[Floats, float]:
    """Return the lines from the low edge until one reaches the high edge, and how many it takes, as a fraction."""
    first, last = edge_distances(frame, samples, height_mm)
    end = samples.v_high_mm - last
    lines = [samples.v_low_mm + first]
    while lines[-1] < end:
        lines.append(lines[-1] + next_step(frame, samples, lines[-1], height_mm))
    if len(lines) == 1:
        return np.array(lines), 1.0
    return np.array(lines), len(lines) - (lines[-1] - end) / (lines[-1] - lines[-2])
