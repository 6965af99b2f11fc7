"""A part set turned about Z on the table: everything the job says in plan, in the directions of the machine."""

from __future__ import annotations

import math
from dataclasses import replace

import shapely.affinity

from anticlast.outline import Outline
from anticlast.records import Job, Operation


def turned_job(job: Job, turn_rad: float) -> Job:
    """Return the job with part and blank turned about Z at the part origin.

    Part coordinates stay parallel to the machine's axes at rotary zero; what turns in them is the surface, both outlines, feed
    directions and fixed axes. Lead and lean go with the feed.

    Parameters
    ----------
    job : Job
    turn_rad : float
        Counterclockwise seen from above.
    """
    if turn_rad == 0.0:
        return job
    return replace(
        job,
        part=replace(
            job.part,
            rotate_rad=job.part.rotate_rad + turn_rad,
            outline=_turned_outline(job.part.outline, turn_rad),
        ),
        stock=replace(job.stock, outline=_turned_outline(job.stock.outline, turn_rad)),
        operations=tuple(_turned_operation(operation, turn_rad) for operation in job.operations),
        turn_rad=job.turn_rad + turn_rad,
    )


def _turned_outline(outline: Outline, turn_rad: float) -> Outline:
    polygon = shapely.affinity.rotate(outline.polygon, turn_rad, origin=(0.0, 0.0), use_radians=True)
    return Outline(polygon, outline.flattening_mm)


def _turned_operation(operation: Operation, turn_rad: float) -> Operation:
    axis = operation.fixed_axis
    if axis is not None:
        i, j, k = axis
        cos, sin = math.cos(turn_rad), math.sin(turn_rad)
        axis = (i * cos - j * sin, i * sin + j * cos, k)
    return replace(operation, direction_rad=operation.direction_rad + turn_rad, fixed_axis=axis)
