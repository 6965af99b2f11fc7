"""Picture of the stock before an operation: plan map of what remains, two sections, and what its passes meet."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from anticlast.report import picture_sheet as sheet
from anticlast.report.numbers import Units
from anticlast.saddle import Saddle
from anticlast.stock.thickness import tops_at_mm

if TYPE_CHECKING:
    from anticlast.records import Floats, Job
    from anticlast.stock.preview import StockPreview, StockState

_SECTION_POINTS = 500
# Thickness that differs by less than this is drawn as even [mm].
_EVEN_MM = 1e-3


def stock_picture(preview: StockPreview, path: Path) -> None:
    """Draw the stock before the operation that the preview was asked for.

    Left: thickness over the finished surface in plan, with a scale. Right: sections along part X and Y through the part's
    middle, stock and finished surface; below them, removal rate and force of the operation's passes. Lengths are in the
    job's units.

    Parameters
    ----------
    preview : StockPreview
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
    job, state = preview.job, preview.state
    units = Units(job.units == "inch")
    with sheet.look():
        figure = Figure(figsize=(11.0, 6.8))
        _heading(figure, preview, units)
        middle = _middle(job)
        _map(figure, job, state, units, middle)
        for place, along in enumerate("xy"):
            axes = sheet.axes_at(figure, 6.75, 1.05 + 1.75 * place, 3.95, 1.25)
            _section(axes, job, state, units, along, middle)
        _passes(sheet.axes_at(figure, 6.75, 4.85, 3.6, 1.3), preview, units)
        sheet.save(figure, path)


def _middle(job: Job) -> tuple[float, float]:
    x0, y0, x1, y1 = job.part.outline.bounds
    return (0.5 * (x0 + x1), 0.5 * (y0 + y1))


def _heading(figure: Any, preview: StockPreview, units: Units) -> None:
    job, state = preview.job, preview.state
    low, mean, high = state.thickness_mm
    when = f"before operation {state.before}" if state.before <= len(job.operations) else "at the end"
    figure.text(0.03, 0.955, f"{job.name}: stock {when}", size=13, weight="bold", va="center")
    volume = state.above_part_mm3 * units.scale**3
    figure.text(
        0.03,
        0.915,
        f"{job.stock.material}; {volume:.5g} {units.name}³ over the finished surface, thickness {units.length(low, bare=True)}"
        f" to {units.length(high)}, mean {units.length(mean)}",
        size=9.5,
        color=sheet.QUIET,
        va="center",
    )


def _map(figure: Any, job: Job, state: StockState, units: Units, middle: tuple[float, float]) -> None:
    from matplotlib.patches import PathPatch
    from matplotlib.ticker import MaxNLocator

    k = units.scale
    x0, y0, x1, y1 = (bound * k for bound in job.stock.outline.bounds)
    extent = max(x1 - x0, y1 - y0)
    low_y = y0 - 0.16 * extent
    wide, tall = x1 - x0 + 0.1 * extent, y1 + 0.05 * extent - low_y
    width = min(5.0, 4.35 * wide / tall)
    axes = sheet.axes_at(figure, 0.75 + 0.5 * (5.0 - width), 1.1, width, width * tall / wide)
    values = np.ma.masked_invalid(state.map.thickness_mm.astype(float) * k)
    low, high = float(values.min()), float(values.max())
    levels = np.asarray(MaxNLocator(9, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high))
    if high - low < _EVEN_MM * k:
        levels = 0.5 * (low + high) + _EVEN_MM * k * np.array([-1.0, 1.0])
    filled = axes.contourf(state.map.x_mm * k, state.map.y_mm * k, values, levels=levels, cmap="cividis")
    below = sheet.axes_at(figure, 1.0, 1.75 + width * tall / wide, 4.5, 0.16)
    bar = figure.colorbar(filled, cax=below, orientation="horizontal")
    bar.set_label(f"thickness along the surface normal, {units.name}")
    bar.outline.set_linewidth(0.6)
    axes.add_patch(
        PathPatch(
            sheet.outline_path(job.stock.outline, k), fill=False, edgecolor=sheet.QUIET, lw=0.8, ls="--"
        )
    )
    axes.add_patch(
        PathPatch(sheet.outline_path(job.part.outline, k), fill=False, edgecolor=sheet.INK, lw=1.4)
    )
    axes.axhline(middle[1] * k, color=sheet.TIGHT, lw=0.7, ls=(0, (8, 3)))
    axes.axvline(middle[0] * k, color=sheet.WIDE, lw=0.7, ls=(0, (3, 2)))
    axes.set_xlim(x0 - 0.05 * extent, x1 + 0.05 * extent)
    axes.set_ylim(low_y, y1 + 0.05 * extent)
    axes.set_xlabel(f"part X, {units.name}")
    axes.set_ylabel(f"part Y, {units.name}", labelpad=2)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    bar_length = sheet.round_length(0.25 * extent)
    sheet.scale_bar(axes, x0, y0 - 0.1 * extent, bar_length, units.name, 0.014 * extent)


def _section(
    axes: Any, job: Job, state: StockState, units: Units, along: str, middle: tuple[float, float]
) -> None:
    """Draw one section: stock filled, finished surface as a line over the part's outline."""
    k = units.scale
    x0, y0, x1, y1 = job.stock.outline.bounds
    low, high, other = (x0, x1, middle[1]) if along == "x" else (y0, y1, middle[0])
    place = np.linspace(low, high, _SECTION_POINTS)
    fixed = np.full(_SECTION_POINTS, other)
    x, y = (place, fixed) if along == "x" else (fixed, place)
    bottom = job.stock.bottom_mm
    tops: Floats = np.where(
        job.stock.outline.contains(np.column_stack((x, y))), tops_at_mm(state.field, x, y, bottom), bottom
    )
    surface = Saddle.of(job.part).height(x, y)
    inside = job.part.outline.contains(np.column_stack((x, y)))
    colour = sheet.TIGHT if along == "x" else sheet.WIDE
    axes.fill_between(place * k, bottom * k, tops * k, color=sheet.BLANK, lw=0)
    axes.plot(place * k, tops * k, color=sheet.QUIET, lw=0.8)
    axes.plot(place * k, np.where(inside, surface, np.nan) * k, color=colour, lw=1.3)
    upper = max(float(tops.max()), float(surface[inside].max(initial=bottom))) * k
    lower = min(float(surface[inside].min(initial=tops.min())), float(tops.max())) * k
    room = 0.12 * (upper - lower) + 1e-9
    axes.set_ylim(lower - 2.0 * room, upper + room)
    axes.set_xlim(low * k, high * k)
    name = "Y" if along == "x" else "X"
    axes.set_title(
        f"section along part {along.upper()} at {name} {units.length(other)}; height stretched", loc="left"
    )
    axes.set_ylabel(f"Z, {units.name}", labelpad=2)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)


def _passes(axes: Any, preview: StockPreview, units: Units) -> None:
    """Draw removal rate, and the force's range where it is known, over the passes of the operation."""
    k3 = units.scale**3
    shown = [one for one in preview.passes if one.operation == preview.before]
    axes.spines["top"].set_visible(False)
    axes.set_xlabel(f"pass of operation {preview.before}")
    if not shown:
        axes.text(
            0.5, 0.5, "no pass cuts", ha="center", va="center", transform=axes.transAxes, color=sheet.QUIET
        )
        axes.set_yticks([])
        axes.set_xticks([])
        return
    number = np.array([one.number for one in shown], dtype=float)
    axes.plot(number, [k3 * one.removal_mm3_min for one in shown], color=sheet.INK, lw=1.1)
    axes.set_ylabel(f"removal, {units.name}³/min", labelpad=2)
    axes.set_ylim(bottom=0.0)
    axes.set_title("removal rate (line) and force (band), pass by pass", loc="left")
    high = np.array([one.force_n[1] for one in shown])
    if np.all(np.isnan(high)):
        axes.spines["right"].set_visible(False)
        return
    beside = axes.twinx()
    beside.fill_between(number, [one.force_n[0] for one in shown], high, color=sheet.TIGHT, alpha=0.3, lw=0)
    beside.set_ylabel("force, N", color=sheet.TIGHT)
    beside.set_ylim(
        0.0, 1.1 * max(1e-9, float(np.nanmax(high))) if not math.isnan(float(np.nanmax(high))) else 1.0
    )
    beside.spines["top"].set_visible(False)
