"""The set-up on one sheet: plan and two sections of blank and finished surface, cutters above to scale."""

from __future__ import annotations

import math
import textwrap
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from anticlast.report import picture_sheet as sheet
from anticlast.report.numbers import Units
from anticlast.report.picture_parts import dimension, helper, inch_of, origin_mark, row_width, stand_cutters
from anticlast.saddle import Saddle

if TYPE_CHECKING:
    from anticlast.records import Floats, Job

# The sheet, inches: A4 upright, room left of every view for its dimensions, notes to the right of the plan.
_WIDE, _TALL = 8.27, 11.69
_LEFT, _TOP, _FOOT = 1.25, 1.55, 1.05
_BETWEEN_ROWS, _BETWEEN_COLUMNS = 1.0, 1.2
_NOTES = 2.55
_NOTE_LETTERS = 37  # of a line of notes
_SECTION_POINTS = 121
_LEVEL_GAP = 0.17  # between names of levels


@dataclass(frozen=True, slots=True)
class _Views:
    """What the views reach over, mm: (low, high) along each part axis, and where the shorter section ends."""

    x: tuple[float, float]
    y: tuple[float, float]
    z: tuple[float, float]
    section_top: float

    @classmethod
    def of(cls, job: Job) -> _Views:
        blank, part = job.stock.outline.bounds, job.part.outline.bounds
        x = (min(blank[0], part[0]), max(blank[2], part[2]))
        y = (min(blank[1], part[1]), max(blank[3], part[3]))
        reach = row_width(job.cutters) / 2.0
        middle = 0.5 * (x[0] + x[1])
        x = (min(x[0], middle - reach), max(x[1], middle + reach))
        plane = job.stock.top_mm + job.clearance_mm
        longest = max(cutter.gauge_length_mm for cutter in job.cutters)
        return cls(x, y, (min(job.stock.bottom_mm, 0.0), plane + longest), plane + 2.0)

    def inches_per_mm(self) -> float:
        """Return the largest scale at which all views and the notes fit the sheet."""
        wide, deep = self.x[1] - self.x[0], self.y[1] - self.y[0]
        high = self.z[1] - self.z[0]
        return min(
            (_WIDE - _LEFT - _BETWEEN_COLUMNS - 0.35) / (wide + deep),
            (_WIDE - _LEFT - 0.75 - _NOTES) / wide,
            (_TALL - _TOP - _BETWEEN_ROWS - _FOOT) / (deep + high),
        )


def setup_picture(job: Job, path: Path) -> None:
    """Draw the set-up of a job for print on A4: plan, sections along X and Y, cutters above, to one scale.

    Shown are the blank, the outline of the part, the finished surface, the part origin (program zero), the
    height above which rapid moves stay, and each cutter with its holder, tip on that height. Lengths are in
    the job's units.

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
    views = _Views.of(job)
    scale = views.inches_per_mm()
    wide, deep = (views.x[1] - views.x[0]) * scale, (views.y[1] - views.y[0]) * scale
    row = _TOP + deep + _BETWEEN_ROWS
    with sheet.look():
        figure = Figure(figsize=(_WIDE, _TALL))
        _heading(figure, job, units, scale)
        _scale_bar(figure, row + (views.z[1] - views.z[0]) * scale + 0.62, units, scale)
        _plan(_view(figure, (_LEFT, _TOP), views.x, views.y, scale), job, units)
        front = _view(figure, (_LEFT, row), views.x, views.z, scale)
        _section(front, job, units, across=False)
        stand_cutters(front, job.cutters, 0.5 * sum(views.x), job.stock.top_mm + job.clearance_mm)
        corner = (_LEFT + wide + _BETWEEN_COLUMNS, row + (views.z[1] - views.section_top) * scale)
        end = _view(figure, corner, views.y, (views.z[0], views.section_top), scale)
        _section(end, job, units, across=True)
        _notes(figure, _LEFT + wide + 0.75, job, units)
        sheet.save(figure, path)


def _view(
    figure: Any,
    corner: tuple[float, float],
    across: tuple[float, float],
    up: tuple[float, float],
    scale: float,
) -> Any:
    """Return bare axes in mm at a corner (left, top, inches) of the sheet."""
    axes = sheet.axes_at(figure, *corner, (across[1] - across[0]) * scale, (up[1] - up[0]) * scale)
    axes.set_xlim(*across)
    axes.set_ylim(*up)
    axes.axis("off")
    return axes


# ------------------------------------------------------------------------------------ words


def _heading(figure: Any, job: Job, units: Units, scale: float) -> None:
    """Write name, machine, unit and scale over a rule."""
    from matplotlib.lines import Line2D

    figure.text(0.06, 1 - 0.5 / _TALL, f"{job.name}: set-up", size=15, weight="bold", va="center")
    unit = "inch" if units.inch else "mm"
    ratio = 25.4 * scale  # mm of paper for a mm of part
    shown = f"1 : {1 / ratio:.2f}" if ratio < 1.0 else f"{ratio:.2f} : 1"
    figure.text(
        0.06,
        1 - 0.8 / _TALL,
        "   |   ".join((job.machine.title, f"lengths in {unit}", f"{shown} when printed on A4")),
        size=8.5,
        color=sheet.QUIET,
        va="center",
    )
    level = 1 - 0.98 / _TALL
    figure.add_artist(Line2D([0.06, 0.94], [level, level], color=sheet.INK, lw=0.8))


def _scale_bar(figure: Any, top: float, units: Units, scale: float) -> None:
    wide = _WIDE - _LEFT - 0.4
    axes = sheet.axes_at(figure, _LEFT, top, wide, 0.25)
    axes.set_xlim(0, wide / scale * units.scale)
    axes.set_ylim(0, 1)
    axes.axis("off")
    sheet.scale_bar(axes, 0.0, 0.35, sheet.round_length(1.2 / scale * units.scale), units.name, 0.25)


def _notes(figure: Any, left: float, job: Job, units: Units) -> None:
    """Write what the setter needs in figures, wrapped, from the top of the plan downwards."""
    lines: list[tuple[str, str]] = []
    for head, body in _facts(job, units):
        lines.append((head, "bold"))
        lines += [(line, "normal") for line in textwrap.wrap(body, _NOTE_LETTERS)]
    top = _TOP
    for line, weight in lines:
        top += 0.075 if weight == "bold" else 0.0
        colour = sheet.INK if weight == "bold" else sheet.QUIET
        figure.text(
            left / _WIDE, 1 - top / _TALL, line, size=7.6, weight=weight, color=colour, va="top", ha="left"
        )
        top += 0.14


def _facts(job: Job, units: Units) -> list[tuple[str, str]]:
    def span(low: float, high: float) -> str:
        return f"{units.length(low, bare=True)} to {units.length(high, bare=True)}"

    x0, y0, x1, y1 = job.stock.outline.bounds
    stock = job.stock
    size = " × ".join(
        units.length(side, bare=True) for side in (x1 - x0, y1 - y0, stock.top_mm - stock.bottom_mm)
    )
    origin = " ".join(
        f"{axis}{units.length(at, bare=True)}" for axis, at in zip("XYZ", job.part_origin_mm, strict=True)
    )
    low, high = _heights(job)
    allowance = (
        ""
        if stock.allowance_mm is None
        else f"; roughed to {units.length(stock.allowance_mm)} over the surface"
    )
    facts = [
        ("Blank", f"{stock.material}, {size}{allowance}"),
        (
            "Blank from part origin",
            f"X {span(x0, x1)}; Y {span(y0, y1)}; Z {span(stock.bottom_mm, stock.top_mm)}",
        ),
        (
            "Program zero (G54)",
            "part origin with all rotary axes at 0" if job.machine.rotary else "part origin",
        ),
        ("Part origin in the machine", f"{origin}, rotary axes at 0" if job.machine.rotary else origin),
        ("Finished surface", f"Z {span(low, high)}"),
        ("Rapid moves", f"stay above Z {units.length(stock.top_mm + job.clearance_mm)} over the blank"),
    ]
    for cutter in job.cutters:
        kind = f"{cutter.shape} {units.length(2 * cutter.radius_mm)}"
        corner = f", corner {units.length(cutter.corner_radius_mm)}" if cutter.shape == "bull" else ""
        body = f"{kind}{corner}; stickout {units.length(cutter.stickout_mm)}; gauge length "
        facts.append((f"Cutter T{cutter.number}", body + units.length(cutter.gauge_length_mm)))
    return facts


def _heights(job: Job) -> tuple[float, float]:
    """Return the lowest and highest Z of the finished surface, mm, from samples a hundredth apart."""
    x0, y0, x1, y1 = job.part.outline.bounds
    spacing = max(x1 - x0, y1 - y0) / 100.0
    xy = np.concatenate((job.part.outline.boundary_points(spacing), job.part.outline.grid(spacing)))
    z = Saddle.of(job.part).height(xy[:, 0], xy[:, 1])
    return float(z.min()), float(z.max())


# ------------------------------------------------------------------------------------ plan


def _plan(axes: Any, job: Job, units: Units) -> None:
    """Blank and part from above, contour lines of the surface, its two main directions, sizes and origin."""
    from matplotlib.patches import PathPatch

    from anticlast.solid import surface_mesh

    blank, part = job.stock.outline, job.part.outline
    axes.add_patch(
        PathPatch(sheet.outline_path(blank, 1.0), facecolor=sheet.BLANK, edgecolor=sheet.QUIET, lw=0.8)
    )
    axes.add_patch(
        PathPatch(sheet.outline_path(part, 1.0), facecolor=sheet.PAPER, edgecolor=sheet.INK, lw=1.4)
    )
    x0, y0, x1, y1 = part.bounds
    points, faces = surface_mesh(job.part, max(x1 - x0, y1 - y0) / 60.0)
    if np.ptp(points[:, 2]) > 0.0:
        levels = np.linspace(points[:, 2].min(), points[:, 2].max(), 13)[1:-1]
        axes.tricontour(
            points[:, 0],
            points[:, 1],
            faces,
            points[:, 2],
            levels,
            colors=sheet.FAINT,
            linewidths=0.7,
            linestyles="solid",
        )
    for turn, name in ((0.0, "concave"), (math.pi / 2, "convex")):
        _main_direction(axes, job, job.part.rotate_rad + turn, name)
    origin_mark(axes, "X", "Y")
    _plan_sizes(axes, blank.bounds, units)
    low = axes.get_xlim()[0]
    axes.text(
        low,
        axes.get_ylim()[0] - 0.6 * inch_of(axes),
        "Plan",
        size=9,
        weight="bold",
        va="center",
        clip_on=False,
    )


def _main_direction(axes: Any, job: Job, direction_rad: float, name: str) -> None:
    """Draw the line through the saddle point along which the surface is hollow or crowned."""
    along = np.array([math.cos(direction_rad), math.sin(direction_rad)])
    spans = job.part.outline.clip_line(direction_rad, 0.0)
    for u0, u1 in spans:
        axes.plot(*np.outer(along, (u0, u1)), color=sheet.WIDE, lw=0.8, ls=(0, (9, 3, 2, 3)), zorder=3)
    # On the side with more room: one side has the arrow of an axis, the other only the origin mark.
    inch = inch_of(axes)
    sides = (
        [(max(spans[-1, 0], 0.52 * inch), spans[-1, 1]), (spans[0, 0], min(spans[0, 1], -0.12 * inch))]
        if len(spans)
        else []
    )
    best = max(sides, key=lambda side: side[1] - side[0], default=(0.0, 0.0))
    if best[1] - best[0] > 0.5 * inch:
        x, y = along * (0.5 * (best[0] + best[1]))
        axes.text(
            x,
            y,
            name,
            size=7.5,
            color=sheet.WIDE,
            ha="center",
            va="center",
            zorder=4,
            rotation=(math.degrees(direction_rad) + 90.0) % 180.0 - 90.0,
            rotation_mode="anchor",
            bbox={"facecolor": sheet.PAPER, "edgecolor": "none", "pad": 0.8},
        )


def _plan_sizes(axes: Any, bounds: tuple[float, float, float, float], units: Units) -> None:
    """Size of the blank below and on the left; from its edges to the origin above and on the right."""
    x0, y0, x1, y1 = bounds
    inch = inch_of(axes)
    off, over = 0.3 * inch, 0.36 * inch
    for x in (x0, x1):
        helper(axes, (x, y0), (x, y0 - over))
    for y in (y0, y1):
        helper(axes, (x0, y), (x0 - over, y))
    dimension(axes, (x0, y0 - off), (x1, y0 - off), units.length(x1 - x0, bare=True))
    dimension(axes, (x0 - off, y0), (x0 - off, y1), units.length(y1 - y0, bare=True))
    if x0 < 0.0 < x1:
        for x in (x0, 0.0):
            helper(axes, (x, y1 if x else 0.0), (x, y1 + over))
        dimension(axes, (x0, y1 + off), (0.0, y1 + off), units.length(-x0, bare=True))
    if y0 < 0.0 < y1:
        for y in (y0, 0.0):
            helper(axes, (x1 if y else 0.0, y), (x1 + over, y))
        dimension(axes, (x1 + off, y0), (x1 + off, 0.0), units.length(-y0, bare=True))


# ------------------------------------------------------------------------------------ sections


def _section(axes: Any, job: Job, units: Units, *, across: bool) -> None:
    """Cut blank and part upright along X, or Y when ``across``; through the origin if the part is there."""
    direction = math.pi / 2 if across else 0.0
    v = (
        0.0
        if len(job.part.outline.clip_line(direction, 0.0))
        else float(np.mean(job.part.outline.v_range(direction)))
    )
    stock = job.stock
    for u0, u1 in stock.outline.clip_line(direction, v):
        u, z, roughed = _profile(job, direction, v, (u0, u1))
        top = np.full_like(z, stock.top_mm)
        if stock.allowance_mm is not None:
            top = np.minimum(stock.top_mm, roughed)
        axes.fill_between(
            u, stock.bottom_mm, top, facecolor=sheet.BLANK, edgecolor=sheet.QUIET, lw=0.8, clip_on=False
        )
        axes.fill_between(
            u, np.minimum(z, top), top, facecolor=sheet.PAPER, hatch="////", edgecolor=sheet.FAINT, lw=0.0
        )
    for span in job.part.outline.clip_line(direction, v):
        u, z, _ = _profile(job, direction, v, (span[0], span[1]))
        axes.plot(u, z, color=sheet.INK, lw=1.6, solid_capstyle="butt", zorder=4)
    _levels(axes, job, units)
    origin_mark(axes, "Y" if across else "X", "Z")
    other = -v if across else v
    name = f"Section along {'Y' if across else 'X'}\nat {'X' if across else 'Y'} {units.length(other)}"
    below = stock.bottom_mm - 0.15 * inch_of(axes)
    axes.text(axes.get_xlim()[0], below, name, size=9, weight="bold", clip_on=False, va="top")


def _profile(
    job: Job, direction: float, v: float, span: tuple[float, float]
) -> tuple[Floats, Floats, Floats]:
    """Return u and, along a plan line, the heights of the finished surface and of the stock left on it, mm.

    Stock left along the normal stands 1 / cos(slope) as high (to first order; the picture shows no more).
    """
    u = np.linspace(*span, _SECTION_POINTS)
    x = u * math.cos(direction) - v * math.sin(direction)
    y = u * math.sin(direction) + v * math.cos(direction)
    saddle = Saddle.of(job.part)
    z = saddle.height(x, y)
    return u, z, z + (job.stock.allowance_mm or 0.0) * saddle.stretch(np.column_stack((x, y)))


def _levels(axes: Any, job: Job, units: Units) -> None:
    """Name the heights left of a section, names pushed apart where heights are close."""
    stock, inch = job.stock, inch_of(axes)
    low, high = axes.get_xlim()
    plane = stock.top_mm + job.clearance_mm
    axes.plot((low, high), (plane, plane), ls=(0, (6, 4)), color=sheet.WIDE, lw=0.9, clip_on=False)
    axes.plot(
        (low, high), (stock.top_mm, stock.top_mm), ls=(0, (1, 3)), color=sheet.QUIET, lw=0.8, clip_on=False
    )
    levels = sorted([(stock.bottom_mm, "bottom"), (0.0, "origin"), (stock.top_mm, "top"), (plane, "rapid")])
    heights = [z for z, _ in levels]
    for index in range(1, len(heights)):
        heights[index] = max(heights[index], heights[index - 1] + _LEVEL_GAP * inch)
    for (z, name), at in zip(levels, heights, strict=True):
        colour = sheet.WIDE if name == "rapid" else sheet.QUIET
        axes.plot((low - 0.2 * inch, low - 0.08 * inch, low), (at, z, z), color=colour, lw=0.5, clip_on=False)
        axes.text(
            low - 0.23 * inch,
            at,
            f"{name} {units.length(z, bare=True)}",
            size=7.6,
            ha="right",
            va="center",
            color=colour,
            clip_on=False,
        )
