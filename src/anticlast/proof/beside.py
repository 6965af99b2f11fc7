"""Motion beside the part: an upright cutter whose disc stays off the outline cannot touch the finished surface."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import shapely

from anticlast.tolerances import MEASURE_MM, SAME_DIRECTION_RAD

if TYPE_CHECKING:
    from anticlast.records import Bools, Job, PartMotion


def pieces_beside(job: Job, motion: PartMotion) -> Bools:
    """Tell which pieces cannot cut the finished surface, (m,) bool.

    In plan an upright cutting end and its flutes fill a disc of the cutter's radius; moved straight, they stay within the
    radius of the segment that the tip draws. Where that segment is a radius or more from the outline nothing over the
    outline is touched, however deep the cutter stands beside it.
    """
    beside = np.zeros(len(motion.tip_mm), dtype=bool)
    radius = {cutter.number: cutter.radius_mm for cutter in job.cutters}
    size = np.array([radius.get(int(tool), np.inf) for tool in motion.tool])
    level = np.hypot(motion.axis[:, 0], motion.axis[:, 1]) < SAME_DIRECTION_RAD
    upright = level & np.roll(level, 1) & (motion.axis[:, 2] > 0.0) & np.isfinite(size)
    rows = np.flatnonzero(upright)
    rows = rows[rows > 0]
    if rows.size:
        ends = np.stack((motion.tip_mm[rows - 1, :2], motion.tip_mm[rows, :2]), axis=1)
        outline = job.part.outline
        away = shapely.distance(outline.polygon, shapely.linestrings(ends))
        beside[rows] = away >= size[rows] + outline.flattening_mm - MEASURE_MM
    return beside
