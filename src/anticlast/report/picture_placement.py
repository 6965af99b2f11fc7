"""The margin left on each axis of the machine, where the part sits now and where it would sit best."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

from anticlast.errors import BadInput, Fault
from anticlast.report import picture_sheet as sheet
from anticlast.report.numbers import Units

if TYPE_CHECKING:
    from anticlast.machine.placement import Place, Placement
    from anticlast.records import Axis, Job

# Inches: room for one axis and its two bars, and around the rows of bars.
_ROW, _LEFT, _RIGHT, _TOP, _FOOT = 0.86, 1.15, 0.75, 1.45, 0.95
_WIDE = 9.0
_ENDLESS_DEG = 360.0  # drawn across for an axis without limits, at least


def placement_picture(job: Job, placement: Placement | None, path: Path) -> None:
    """Draw the travel of each axis between its limits: in the cut, drawn back clear of the blank, and what is left.

    Two bars an axis where another place is proposed: now, and there. Lengths are in the job's units.

    Parameters
    ----------
    job : Job
    placement : Placement or None
        Of ``survey.placement`` for this job.
    path : Path
        ``.png`` or ``.svg``.

    Raises
    ------
    BadInput
        Another ending, or no operation follows the surface.
    CannotWrite
        The file cannot be written.
    """
    from matplotlib.figure import Figure

    sheet.check_suffix(path)
    if placement is None:
        raise BadInput(
            Fault(str(job.source), 0, "operation", "no operation follows the surface; nothing to place")
        )
    units = Units(job.units == "inch")
    axes_count = len(job.machine.axes)
    tall = _TOP + axes_count * _ROW + _FOOT
    with sheet.look():
        figure = Figure(figsize=(_WIDE, tall))
        _heading(figure, job, placement, units, tall)
        for row, axis in enumerate(job.machine.axes):
            spot = sheet.axes_at(figure, _LEFT, _TOP + row * _ROW, _WIDE - _LEFT - _RIGHT, _ROW * 0.72)
            _bars(spot, axis, placement, units)
        _key(sheet.axes_at(figure, _LEFT, tall - 0.62, _WIDE - _LEFT - _RIGHT, 0.3))
        sheet.save(figure, path)


def _heading(figure: Any, job: Job, placement: Placement, units: Units, tall: float) -> None:
    def line(inches: float, text: str, **look: Any) -> None:
        figure.text(_LEFT / _WIDE, 1.0 - inches / tall, text, va="center", **look)

    line(0.4, f"{job.name}: margin left on each axis", size=13, weight="bold")
    line(0.72, f"{job.machine.name}. now: {_place(placement.now, units)}", size=9.5, color=sheet.QUIET)
    if placement.moves:
        share = placement.best.motion_min / placement.now.motion_min if placement.now.motion_min else 1.0
        text = f"best: {_place(placement.best, units)}; the axes move {100 * share:.0f} % of what they do now"
    else:
        text = "no other place on the table would move the axes notably less"
    line(0.98, text, size=9.5, color=sheet.QUIET)


def _place(place: Place, units: Units) -> str:
    x, y, z = (f"{value * units.scale:.4g}" for value in place.part_origin_mm)
    return f"part origin X {x}, Y {y}, Z {z} {units.name}, turned {place.turn_deg:g}°"


def _bars(axes: Any, axis: Axis, placement: Placement, units: Units) -> None:
    """Limits, reach and cut of one axis as bars over each other, with both margins in numbers at the ends."""
    factor, unit = (units.scale, units.name) if axis.kind == "linear" else (1.0, "°")
    places = [placement.now, placement.best] if placement.moves else [placement.now]
    spans = [place.reach[axis.letter] for place in places]
    low, high = axis.limits or _endless(spans)
    edge_low, edge_high = min(low, *(span[0] for span in spans)), max(high, *(span[1] for span in spans))
    axes.set_xlim(edge_low * factor, edge_high * factor)
    axes.set_ylim(len(places), 0.0)
    axes.set_yticks([])
    for side in ("left", "right", "top"):
        axes.spines[side].set_visible(False)
    axes.text(-0.115, 0.5, axis.letter, transform=axes.transAxes, size=13, weight="bold", va="center")
    for row, (name, place) in enumerate(zip(("now", "best"), places, strict=False)):
        middle = row + 0.5
        axes.barh(
            middle, (high - low) * factor, left=low * factor, height=0.78, color=sheet.BLANK, linewidth=0
        )
        for span, tall, colour in ((place.reach, 0.5, sheet.STEEL), (place.cut, 0.5, sheet.WIDE)):
            start, end = span[axis.letter]
            axes.barh(
                middle, (end - start) * factor, left=start * factor, height=tall, color=colour, linewidth=0
            )
        axes.text(
            -0.015,
            1.0 - middle / len(places),
            name,
            transform=axes.transAxes,
            size=8.5,
            ha="right",
            va="center",
        )
        if axis.limits is not None:
            _margins(axes, place.margin[axis.letter], 1.0 - middle / len(places), factor, unit)
    if axis.limits is None:
        axes.text(1.015, 0.5, "endless", transform=axes.transAxes, size=8.5, va="center", color=sheet.QUIET)


def _endless(spans: list[tuple[float, float]]) -> tuple[float, float]:
    """Whole turns that hold all spans."""
    low = math.floor(min(span[0] for span in spans) / _ENDLESS_DEG) * _ENDLESS_DEG
    high = math.ceil(max(span[1] for span in spans) / _ENDLESS_DEG) * _ENDLESS_DEG
    return (low, high) if high > low else (-0.5 * _ENDLESS_DEG, 0.5 * _ENDLESS_DEG)


def _margins(axes: Any, margin: tuple[float, float], height: float, factor: float, unit: str) -> None:
    """Both margins as numbers inside the ends of the bar; what is past a limit in the colour of a warning."""
    for value, place, align in ((margin[0], 0.006, "left"), (margin[1], 0.994, "right")):
        short = value < 0.0
        axes.text(
            place,
            height,
            f"{abs(value) * factor:.1f} {unit}" + (" over" if short else ""),
            transform=axes.transAxes,
            size=8.0,
            ha=align,
            va="center",
            color=sheet.TIGHT if short else sheet.INK,
            bbox={"facecolor": sheet.PAPER, "edgecolor": "none", "alpha": 0.75, "pad": 1.0},
        )


def _key(axes: Any) -> None:
    from matplotlib.patches import Rectangle

    axes.set_xlim(0.0, 10.0)
    axes.set_ylim(0.0, 1.0)
    axes.axis("off")
    spots = (
        (0.0, sheet.WIDE, "in the cut"),
        (2.0, sheet.STEEL, "drawn back clear of the blank"),
        (5.4, sheet.BLANK, "limits"),
    )
    for left, colour, name in spots:
        axes.add_patch(Rectangle((left, 0.25), 0.35, 0.5, facecolor=colour, linewidth=0))
        axes.text(left + 0.48, 0.5, name, size=8.5, va="center")
