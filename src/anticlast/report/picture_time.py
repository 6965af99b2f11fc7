"""Picture of a program's time: how much of the programmed feed is reached along the program and over the part, and why not."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from anticlast.machine.timing import CAUSES, ProgramTime
from anticlast.records import Floats, Ints, Job, Motions, MotionTimes, PartMotion, Shape
from anticlast.report import picture_sheet as sheet
from anticlast.report.numbers import Units, clock

if TYPE_CHECKING:
    from matplotlib.colors import Colormap

_BINS = 480  # of the strip along the program: what a sheet of this width shows
_CELLS = 90  # of the map along the longer side of the part
_BARS = 7
# By the number of the cause, told apart by lightness as well.
_COLOURS = (sheet.FAINT, sheet.WIDE, sheet.TIGHT, sheet.INK)
_NAMES = ("at feed", "axis speed", "acceleration", "block rate")


def time_picture(
    job: Job, timed: ProgramTime, motions: Motions, times: MotionTimes, part: PartMotion, path: Path
) -> None:
    """Draw the share of the feed reached over time, the same over the part, and what holds it back.

    Parameters
    ----------
    job : Job
        Outline and units.
    timed, motions, times, part
        Of one program: its answer, its motions and their times, and the motion in part coordinates.
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
    with sheet.look():
        figure = Figure(figsize=(11.0, 7.4))
        figure.text(0.03, 0.955, f"{timed.program}: time and feed", size=13, weight="bold", va="center")
        figure.text(
            0.03, 0.92,
            f"{timed.machine}   |   {clock(timed.total_s)} estimated, {clock(timed.feed_only_s)} by F and rapid rates alone",
            size=9.5, color=sheet.QUIET, va="center",
        )  # fmt: skip
        _along(sheet.axes_at(figure, 0.75, 1.0, 9.8, 1.75), motions, times)
        _over_part(figure, job, motions, times, part)
        _bars(sheet.axes_at(figure, 7.0, 3.65, 3.55, 0.42 * min(max(len(timed.hold_backs), 1), _BARS)), timed)
        sheet.save(figure, path)


def shares(motions: Motions, times: MotionTimes, edges_s: Floats) -> tuple[Floats, Floats]:
    """Share of the feed reached (b,) and share of time under each cause (b, causes) in bins of program time.

    Parameters
    ----------
    motions, times
        Of one program; rapids count to no bin. nan where a bin has no feed motion.
    edges_s : (b + 1,)
        Edges of the bins, seconds from the start, without waits.

    Notes
    -----
    A motion that spans several bins counts in each by its part of the time.
    """
    ends = np.cumsum(times.seconds)
    feed = motions.shape != Shape.RAPID
    rates = [np.where(feed, times.feed_only_s, 0.0)]
    rates += [
        np.where(feed & (times.held_back_by == cause), times.seconds, 0.0) for cause in range(len(CAUSES))
    ]
    # What has passed by each edge, linear within a motion; the difference is what falls into the bin.
    grown = [
        np.diff(np.interp(edges_s, np.concatenate(([0.0], ends)), np.concatenate(([0.0], np.cumsum(rate)))))
        for rate in rates
    ]
    by_cause = np.column_stack(grown[1:])
    spent = by_cause.sum(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        return grown[0] / spent, by_cause / spent[:, None]


def _along(axes: Any, motions: Motions, times: MotionTimes) -> None:
    """Strip over time: area under the share of the feed that is reached, below it a band in the colours of the causes."""
    total = float(times.seconds.sum())
    edges = np.linspace(0.0, total, _BINS + 1)
    reached, by_cause = shares(motions, times, edges)
    scale, unit = (60.0, "min") if total > 180.0 else (1.0, "s")
    axes.stairs(np.nan_to_num(100.0 * reached), edges / scale, fill=True, color=sheet.STEEL, lw=0)
    bottom = np.full(_BINS, -26.0)
    for cause, colour in enumerate(_COLOURS):
        height = 20.0 * np.nan_to_num(by_cause[:, cause])
        axes.bar(
            edges[:-1] / scale, height, width=np.diff(edges) / scale, bottom=bottom, align="edge", color=colour,
            lw=0, label=_NAMES[cause],
        )  # fmt: skip
        bottom = bottom + height
    axes.set_xlim(0.0, total / scale)
    axes.set_ylim(-30.0, 104.0)
    axes.set_yticks([0, 25, 50, 75, 100])
    axes.set_ylabel("% of the feed reached")
    axes.set_xlabel(f"time along the program, {unit}, without waits")
    axes.axhline(100.0, color=sheet.QUIET, lw=0.5, ls=":")
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=4, frameon=False, fontsize=8.5)


def part_cells(
    motions: Motions, times: MotionTimes, part: PartMotion, x_edges: Floats, y_edges: Floats
) -> Floats:
    """Share of the feed reached in plan cells (y, x): seconds that F asks for over seconds taken; nan where nothing cuts."""
    row: Ints = np.maximum(part.motion, 0)
    moves = (part.motion >= 0) & (motions.shape[row] != Shape.RAPID)
    share = np.diff(part.fraction, prepend=0.0)
    share = np.where(share > 0.0, share, part.fraction)  # the first piece of a motion
    middle = part.tip_mm.copy()
    middle[1:] = 0.5 * (part.tip_mm[1:] + part.tip_mm[:-1])
    # Long pieces are spread over the cells they cross.
    step = np.abs(np.diff(part.tip_mm, axis=0, prepend=part.tip_mm[:1]))[:, :2].max(axis=1)
    cell = min(x_edges[1] - x_edges[0], y_edges[1] - y_edges[0])
    parts = np.clip(np.ceil(step / cell), 1, 500).astype(np.int64)
    parts[~moves] = 0
    of = np.repeat(np.arange(len(row)), parts)
    place = (np.arange(len(of)) - np.repeat(np.cumsum(parts) - parts, parts) + 0.5) / parts[of] - 0.5
    way = np.diff(part.tip_mm, axis=0, prepend=part.tip_mm[:1])
    at = middle[of, :2] + place[:, None] * way[of, :2]
    weight = (share / np.maximum(parts, 1))[of]
    sums = [
        _blurred(
            np.histogram2d(at[:, 1], at[:, 0], bins=(y_edges, x_edges), weights=weight * value[row[of]])[0]
        )
        for value in (times.feed_only_s, times.seconds)
    ]
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(sums[1] > 0.0, sums[0] / sums[1], np.nan)


def _blurred(cells: Floats) -> Floats:
    """Sum each cell with its eight neighbours, so that passes a few cells apart leave no gaps."""
    wide = np.pad(cells, 1)
    wide = wide[:-2] + wide[1:-1] + wide[2:]
    return wide[:, :-2] + wide[:, 1:-1] + wide[:, 2:]


def _colours() -> Colormap:
    import matplotlib

    return matplotlib.colormaps["cividis"]


def _over_part(figure: Any, job: Job, motions: Motions, times: MotionTimes, part: PartMotion) -> None:
    """Plan map of the same over the part."""
    from matplotlib.patches import PathPatch

    units = Units(job.units == "inch")
    x0, y0, x1, y1 = job.part.outline.bounds
    margin = 0.08 * max(x1 - x0, y1 - y0)
    x0, y0, x1, y1 = x0 - margin, y0 - margin, x1 + margin, y1 + margin
    cell = max(x1 - x0, y1 - y0) / _CELLS
    x_edges, y_edges = np.arange(x0, x1 + cell, cell), np.arange(y0, y1 + cell, cell)
    shown = 100.0 * part_cells(motions, times, part, x_edges, y_edges)
    width = min(4.9, 3.1 * (x1 - x0) / (y1 - y0))
    axes = sheet.axes_at(figure, 0.75, 3.55, width, width * (y1 - y0) / (x1 - x0))
    mesh = axes.pcolormesh(
        x_edges * units.scale,
        y_edges * units.scale,
        shown,
        cmap=_colours(),
        vmin=0.0,
        vmax=100.0,
        rasterized=True,
    )
    axes.add_patch(
        PathPatch(sheet.outline_path(job.part.outline, units.scale), fill=False, edgecolor=sheet.INK, lw=1.2)
    )
    axes.set_xlim(x0 * units.scale, x1 * units.scale)
    axes.set_ylim(y0 * units.scale, y1 * units.scale)
    axes.set_xlabel(f"part X, {units.name}")
    axes.set_ylabel(f"part Y, {units.name}", labelpad=1)
    bar = figure.colorbar(mesh, cax=sheet.axes_at(figure, 0.9 + width, 3.55, 0.14, 2.4))
    bar.set_label("% of the feed reached")
    bar.outline.set_linewidth(0.6)


def _bars(axes: Any, timed: ProgramTime) -> None:
    """Seconds that each cause and axis costs, longest first."""
    items = timed.hold_backs[:_BARS]
    axes.set_title("what it costs, and where most")
    if not items:
        axes.axis("off")
        axes.text(0.0, 0.9, "nothing holds the feed back", transform=axes.transAxes, va="top")
        return
    longest = max(item.lost_s for item in items)
    for place, item in enumerate(items):
        colour = _COLOURS[CAUSES.index(item.cause)]
        axes.barh(-place, item.lost_s, color=colour, height=0.4)
        name = f"{item.axis} axis, {item.cause}" if item.axis else item.cause
        axes.text(
            0.0,
            -place + 0.42,
            f"{name}: {clock(item.lost_s)}, line {item.line}",
            size=8,
            va="center",
            color=sheet.INK,
        )
    axes.set_xlim(0.0, 1.05 * longest)
    axes.set_ylim(-len(items) + 0.65, 0.65)
    axes.set_yticks([])
    axes.set_xlabel("s beyond what F asks for")
    for side in ("top", "right", "left"):
        axes.spines[side].set_visible(False)
