"""The set-up on one sheet: plan and two sections of the blank with the finished surface, cutters above it to scale."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from anticlast.report import picture_sheet as sheet
from anticlast.report.numbers import Units
from anticlast.saddle import Saddle

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.outline import Outline
    from anticlast.records import Floats, Job

_WIDE_IN, _TALL_IN = 8.27, 11.69  # A4 upright
_SIDE_IN = 0.55
_TOP_IN, _FOOT_IN = 1.25, 0.75
_ROOM_IN = 0.55  # for dimensions beside each view
_NOTES_IN = 2.35
_GAP_SHARE = 0.25  # between cutters, of the widest holder


def setup_picture(job: Job, path: Path) -> None:
    """Draw the set-up of a job for print on A4: plan, sections along X and along Y, cutters above, all to one scale.

    Shown are the blank, the outline of the part, the finished surface, the part origin (program zero), the height
    above which rapid moves stay, and each cutter with its holder, tip on that height. Lengths are in the job's units.

    Parameters
    ----------
    job : Job
    path : Path
        ``.png`` or ``.svg``.

    Raises
    ------
    BadInput
        Another ending.
    CannotWrite
        The file cannot be written.
    """
    from matplotlib.figure import Figure

    sheet.check_suffix(path)
    units = Units(job.units == "inch")
    views = _Views(job)
    with sheet.look():
        figure = Figure(figsize=(_WIDE_IN, _TALL_IN))
        scale = views.inches_per_mm()
        left, top = _SIDE_IN + _ROOM_IN, _TOP_IN
        plan = _view(figure, left, top, views.x, views.y, scale)
        _plan(plan, job, units)
        below = top + (views.y[1] - views.y[0]) * scale + 1.0
        front = _view(figure, left, below, views.x, views.z, scale)
        _section(front, job, units, across=False)
        _cutters(front, job, units, views)
        beside = left + (views.x[1] - views.x[0]) * scale + 1.15
        high = (views.z[1] - views.section_top) * scale
        end = _view(figure, beside, below + high, views.y, (views.z[0], views.section_top), scale)
        _section(end, job, units, across=True)
        _heading(figure, job, units, scale)
        _notes(figure, left + (views.x[1] - views.x[0]) * scale + 0.75, top, job, units)
        sheet.save(figure, path)
