"""The picture of a comparison: time against scallop, every case a mark, the best front a line with numbers."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from anticlast.report import picture_sheet as sheet
from anticlast.report.numbers import Units, clock

if TYPE_CHECKING:
    from anticlast.compare.answer import Comparison, FrontPoint
    from anticlast.records import Job

__all__ = ["compare_picture"]

_SHEET_IN = (11.5, 6.6)
# Cutter and pattern are told apart by shape as well as by colour.
_SHAPES = ("o", "s", "^", "D", "v", "P", "X", "h")
_COLOURS = ("#0b5c8a", "#b3400a", "#2e6b3e", "#6b3fa0", "#8a6d0b")
# Times that spread further than this are drawn on a logarithmic scale.
_WIDE = 5.0
_ROWS = 12  # of the list beside the plot
_WORDS = 62  # letters in a line of it


def compare_picture(job: Job, found: Sequence[Comparison], path: Path) -> None:
    """Draw what ``compare`` found: one sheet for each operation, below each other.

    Across: the highest scallop predicted, in small units. Up: estimated time. The line joins the cases that no other beats
    in both; its numbers are explained beside it.

    Parameters
    ----------
    job : Job
    found : sequence of Comparison
        Of ``compare.search.compare``, at least one.
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
    with sheet.look():
        figure = Figure(figsize=(_SHEET_IN[0], _SHEET_IN[1] * len(found)))
        for row, one in enumerate(found):
            _draw(figure, job, one, units, _SHEET_IN[1] * row)
        sheet.save(figure, path)


def _draw(figure: Any, job: Job, one: Comparison, units: Units, top_in: float) -> None:
    head = sheet.axes_at(figure, 0.35, top_in + 0.2, _SHEET_IN[0] - 0.7, 0.65)
    head.axis("off")
    head.text(
        0.0,
        0.72,
        f"{job.name}, operation {one.operation}: time against scallop",
        size=13,
        weight="bold",
        va="center",
    )
    head.text(
        0.0, 0.16, f"{one.machine}; scallop limit of the job {units.small(one.scallop_mm)}; {len(one.ranked)} cases can be"
        f" cut, {len(one.refused)} cannot", size=9.5, color=sheet.QUIET, va="center",
    )  # fmt: skip
    axes = sheet.axes_at(figure, 1.2, top_in + 1.05, 5.4, 4.85)
    side = sheet.axes_at(figure, 6.95, top_in + 1.05, 4.35, 4.85)
    side.axis("off")
    side.set_xlim(0.0, 1.0)
    side.set_ylim(0.0, 1.0)
    if not one.front:
        axes.axis("off")
        axes.text(0.5, 0.5, "no case can be cut", ha="center", va="center", size=11)
        return
    marks = _marks(one.front)
    best = [point for point in one.front if point.best]
    _points(axes, one, marks, best, units)
    _key(side, marks, best, units)


def _marks(front: Sequence[FrontPoint]) -> dict[tuple[int, str], tuple[str, str]]:
    """Return shape and colour of every cutter and pattern, in a fixed order."""
    names = sorted({point.case.family for point in front})
    return {
        name: (_SHAPES[number % len(_SHAPES)], _COLOURS[number % len(_COLOURS)])
        for number, name in enumerate(names)
    }


def _points(
    axes: Any,
    one: Comparison,
    marks: dict[tuple[int, str], tuple[str, str]],
    best: Sequence[FrontPoint],
    units: Units,
) -> None:
    small = units.small_scale
    for point in one.front:
        shape, colour = marks[point.case.family]
        # Open marks: where several cases come to the same, all show.
        axes.plot(
            point.scallop_mm * small, point.time_s, shape, ms=8.0 if point.best else 6.0, mec=colour, mew=1.3,
            mfc=colour if point.best else "none", zorder=4 if point.best else 3, ls="none",
        )  # fmt: skip
        if point.case == one.own.case:
            axes.plot(
                point.scallop_mm * small,
                point.time_s,
                "o",
                ms=13.0,
                mfc="none",
                mec=sheet.INK,
                mew=1.2,
                zorder=5,
            )
            # Cases keep to the limit, so there is room beyond it.
            axes.annotate(
                "the job", (point.scallop_mm * small, point.time_s), (34, 0), textcoords="offset points", size=8.5,
                ha="left", va="center", zorder=6, arrowprops={"arrowstyle": "-", "color": sheet.INK, "lw": 0.8, "shrinkB": 6},
            )  # fmt: skip
    # Between two points of the front the smoother one is the best there is.
    steps = ([point.scallop_mm * small for point in best], [point.time_s for point in best])
    axes.plot(*steps, color=sheet.INK, lw=1.0, zorder=2, drawstyle="steps-post")
    # Nothing lies below and to the left of a point of the front: there is room for its number.
    for number, point in enumerate(best, start=1):
        axes.annotate(
            str(number), (point.scallop_mm * small, point.time_s), (-6, -6), textcoords="offset points", size=9,
            weight="bold", ha="right", va="top", zorder=6,
        )  # fmt: skip
    _scales(axes, one, units)


def _scales(axes: Any, one: Comparison, units: Units) -> None:
    from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator

    times = [point.time_s for point in one.front]
    widest = max(max(point.scallop_mm for point in one.front), one.scallop_mm) * units.small_scale
    axes.set_xlim(0.0, 1.08 * widest)
    if max(times) > _WIDE * min(times):
        low, high = 0.7 * min(times), 1.5 * max(times)
        axes.set_yscale("log")
        axes.set_ylim(low, high)
        axes.yaxis.set_major_locator(FixedLocator(_round_times(low, high)))
        axes.yaxis.set_minor_locator(NullLocator())
    else:
        axes.set_ylim(0.0, 1.12 * max(times))
        axes.yaxis.set_major_locator(FixedLocator(_even_times(1.12 * max(times))))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: _time_text(value)))
    axes.axvline(one.scallop_mm * units.small_scale, color=sheet.QUIET, lw=0.8, ls="--", zorder=1)
    axes.set_xlabel(f"highest scallop predicted, {units.small_name}; dashed: limit of the job")
    axes.set_ylabel("estimated time")
    axes.grid(color=sheet.FAINT, lw=0.5)
    axes.set_axisbelow(True)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)


_ROUND_S = (1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1200, 1800, 3600, 7200, 14400, 36000, 86400)


def _round_times(low_s: float, high_s: float) -> list[float]:
    """Return round times (seconds) between two, as a person would step through them."""
    return [float(value) for value in _ROUND_S if low_s <= value <= high_s]


def _even_times(high_s: float) -> list[float]:
    """Return round times (seconds) at even steps from 0."""
    step = next((value for value in _ROUND_S if high_s / value <= 8.0), _ROUND_S[-1])
    return [float(step * number) for number in range(int(high_s / step) + 1)]


def _time_text(seconds: float) -> str:
    if seconds < 60.0:
        return f"{seconds:g} s"
    if seconds % 60.0:
        return clock(seconds)
    return f"{seconds / 60.0:g} min" if seconds < 3600.0 or seconds % 3600.0 else f"{seconds / 3600.0:g} h"


def _key(
    axes: Any, marks: dict[tuple[int, str], tuple[str, str]], best: Sequence[FrontPoint], units: Units
) -> None:
    """List the front by number, and say which mark is which cutter and pattern."""
    axes.text(0.0, 0.985, "Best front: none is smoother and faster", size=9.5, weight="bold", va="top")
    y = 0.93
    for number, point in enumerate(best[:_ROWS], start=1):
        axes.text(0.0, y, str(number), size=9, weight="bold", va="top")
        axes.text(0.06, y, f"{units.small(point.scallop_mm)}, {clock(point.time_s)}", size=9, va="top")
        axes.text(0.06, y - 0.034, _clipped(_short(point)), size=8, va="top", color=sheet.QUIET)
        y -= 0.078
    if len(best) > _ROWS:
        axes.text(0.06, y, f"and {len(best) - _ROWS} more", size=8, va="top", color=sheet.QUIET)
    rows = math.ceil(len(marks) / 2)
    for index, ((cutter, pattern), (shape, colour)) in enumerate(marks.items()):
        x, y = 0.02 + 0.5 * (index % 2), 0.045 * (rows - 1 - index // 2)
        axes.plot(x, y, shape, ms=6.0, color=colour, clip_on=False)
        axes.text(x + 0.04, y, f"T{cutter} {pattern}", size=8.5, va="center")


def _short(point: FrontPoint) -> str:
    case = point.case
    feed = f"{math.degrees(case.direction_rad):.4g}°"
    way = "" if case.way == "both" else ", one-way"
    return f"T{case.cutter} {case.pattern}, feed {feed}, {case.tilt.name}{way}"


def _clipped(text: str) -> str:
    return text if len(text) <= _WORDS else text[: _WORDS - 1] + "…"
