"""Pictures on paper and screen: stepover against scallop over the part, and the set-up (``picture_setup``).

Figures are made without pyplot, so nothing is kept between pictures. matplotlib is imported when a picture
is drawn.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from anticlast.passes.scallop import flat_height, local_scallop, local_step
from anticlast.report import picture_sheet as sheet
from anticlast.report.numbers import Units
from anticlast.report.picture_setup import setup_picture
from anticlast.saddle import Saddle

if TYPE_CHECKING:
    from anticlast.passes.scallop import ScallopAnswer
    from anticlast.records import Floats, Job

__all__ = ["scallop_picture", "setup_picture"]

_CELLS = 72  # of the map along the longer side; a smooth function needs no more
_BANDS = 9
_NOTHING_VARIES = 1e-6  # of the value itself: beyond what the iterations behind it settle
_CURVE_POINTS = 25
_DRAWN_POINTS = 600


def scallop_picture(job: Job, answer: ScallopAnswer, path: Path) -> None:
    """Draw what ``scallop`` answered: a plan map of what varies, and the curves at its two extremes.

    The map shows the stepover at the scallop asked for, or the scallop at the stepover asked for, with the
    feed direction, a scale bar and the tightest and widest place. Beside it, scallop against stepover at
    both places and on a flat. Lengths are in the job's units.

    Parameters
    ----------
    job : Job
        Surface, outline and units.
    answer : ScallopAnswer
        Of ``passes.scallop.scallop_answer`` for this job.
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
        figure = Figure(figsize=(11.0, 6.8))
        _heading(figure, job, answer, units)
        _map(figure, job, answer, units)
        _curves(sheet.axes_at(figure, 6.75, 1.1, 3.95, 3.3), job, answer, units)
        _table(sheet.axes_at(figure, 6.75, 5.0, 3.95, 1.6), answer, units)
        sheet.save(figure, path)


def _heading(figure: Any, job: Job, answer: ScallopAnswer, units: Units) -> None:
    figure.text(0.03, 0.955, f"{job.name}: stepover against scallop", size=13, weight="bold", va="center")
    asked = (
        f"scallop {units.length(answer.flat_scallop_mm)} everywhere"
        if answer.asked == "scallop"
        else f"stepover {units.length(answer.flat_stepover_mm)} everywhere"
    )
    allowance = f", allowance {units.length(answer.allowance_mm)}" if answer.allowance_mm else ""
    figure.text(
        0.03,
        0.915,
        f"T{answer.cutter}, ball diameter {units.length(2 * answer.radius_mm)}; {asked}; "
        f"feed {math.degrees(answer.direction_rad):.4g}° from part X{allowance}",
        size=9.5,
        color=sheet.QUIET,
        va="center",
    )


# ------------------------------------------------------------------------------------ the map


def _field(job: Job, answer: ScallopAnswer) -> tuple[Floats, Any, Floats]:
    """Return corners (n, 2), triangles (m, 3) and what varies (n,) at the corners, mm."""
    from anticlast.solid import surface_mesh

    x0, y0, x1, y1 = job.part.outline.bounds
    points, faces = surface_mesh(job.part, max(x1 - x0, y1 - y0) / _CELLS)
    xy, saddle = points[:, :2], Saddle.of(job.part)
    if answer.asked == "scallop":
        values = local_step(
            saddle, answer.radius_mm, xy, answer.direction_rad, answer.flat_scallop_mm, answer.allowance_mm
        )
    else:
        values = local_scallop(
            saddle, answer.radius_mm, xy, answer.direction_rad, answer.flat_stepover_mm, answer.allowance_mm
        )
    return xy, faces, values


def _map(figure: Any, job: Job, answer: ScallopAnswer, units: Units) -> None:
    """Draw the plan map in the left column, its scale of colours below it."""
    from matplotlib.patches import PathPatch

    xy, faces, values = _field(job, answer)
    shown = (xy[:, 0] * units.scale, xy[:, 1] * units.scale, faces, values * units.scale)
    x0, y0, x1, y1 = (bound * units.scale for bound in job.part.outline.bounds)
    extent = max(x1 - x0, y1 - y0)
    middle = 0.5 * (x0 + x1)
    half = max(0.5 * (x1 - x0), 0.38 * extent) + 0.05 * extent
    low, high = y0 - 0.23 * extent, y1 + 0.05 * extent
    width = min(5.0, 4.35 * 2.0 * half / (high - low))
    height = width * (high - low) / (2.0 * half)
    left = 0.75 + 0.5 * (5.0 - width)
    axes = sheet.axes_at(figure, left, 1.1, width, height)
    _bands(axes, sheet.axes_at(figure, 1.0, 1.75 + height, 4.5, 0.16), shown, answer.asked, units.name)
    rim = sheet.outline_path(job.part.outline, units.scale)
    axes.add_patch(PathPatch(rim, fill=False, edgecolor=sheet.INK, lw=1.4))
    axes.set_xlim(middle - half, middle + half)
    axes.set_ylim(low, high)
    axes.set_xlabel(f"part X, {units.name}")
    axes.set_ylabel(f"part Y, {units.name}", labelpad=2)
    axes.set_yticks([tick for tick in axes.get_yticks() if y0 <= tick <= y1])
    axes.set_xticks([tick for tick in axes.get_xticks() if x0 <= tick <= x1])
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    base = y0 - 0.14 * extent
    bar = sheet.round_length(0.25 * extent)
    sheet.scale_bar(axes, middle - half + 0.05 * extent, base, bar, units.name, 0.014 * extent)
    _feed_arrow(
        axes, middle + half - 0.09 * extent, base + 0.007 * extent, 0.065 * extent, answer.direction_rad
    )
    _places(axes, answer, units, middle, 0.5 * (y0 + y1))


def _bands(axes: Any, below: Any, shown: tuple[Floats, Floats, Any, Floats], asked: str, unit: str) -> None:
    """Fill the map in bands of equal step, a line between them; one plain colour if nothing varies."""
    from matplotlib.ticker import MaxNLocator

    x, y, faces, values = shown
    low, high = float(values.min()), float(values.max())
    if high - low <= _NOTHING_VARIES * high:
        levels = 0.5 * (low + high) * np.array([0.99, 1.01])
    else:
        levels = np.asarray(MaxNLocator(_BANDS, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high))
    filled = axes.tricontourf(x, y, faces, values, levels=levels, cmap="cividis")
    inner = levels[(levels > low) & (levels < high)]
    if inner.size:
        axes.tricontour(x, y, faces, values, levels=inner, colors=sheet.INK, linewidths=0.4, alpha=0.55)
    bar = axes.figure.colorbar(filled, cax=below, orientation="horizontal")
    near = 1e-3 * (levels[1] - levels[0])
    digits = next(count for count in range(15) if np.abs(np.round(levels, count) - levels).max() <= near)
    every = 1 if digits <= 4 and len(levels) < 8 else 2
    bar.set_ticks(levels[::every], labels=[f"{level:.{digits}f}" for level in levels[::every]])
    name = "stepover" if asked == "scallop" else "scallop"
    bar.set_label(f"{name}, {unit}; varies by {100.0 * (high / low - 1.0):.2g} % over the part")
    bar.outline.set_linewidth(0.6)


def _feed_arrow(axes: Any, x: float, y: float, reach: float, direction_rad: float) -> None:
    dx, dy = reach * math.cos(direction_rad), reach * math.sin(direction_rad)
    axes.annotate(
        "",
        (x + dx, y + dy),
        (x - dx, y - dy),
        arrowprops={
            "arrowstyle": "-|>",
            "color": sheet.INK,
            "lw": 1.6,
            "mutation_scale": 13,
            "shrinkA": 0,
            "shrinkB": 0,
        },
    )
    axes.text(x - 1.3 * reach, y, "feed", ha="right", va="center", size=8.5)


def _places(axes: Any, answer: ScallopAnswer, units: Units, middle_x: float, middle_y: float) -> None:
    """Mark the tightest and the widest place, lettering turned towards the middle of the part."""
    from matplotlib.patheffects import withStroke

    halo = [withStroke(linewidth=2.6, foreground=sheet.PAPER)]
    spots = [
        ("tightest", answer.tightest_at_mm, "v", sheet.TIGHT),
        ("widest", answer.widest_at_mm, "o", sheet.WIDE),
    ]
    placed: list[tuple[float, float]] = []
    for name, at_mm, marker, colour in spots:
        x, y = at_mm[0] * units.scale, at_mm[1] * units.scale
        axes.plot(x, y, marker, color=colour, mec=sheet.PAPER, mew=1.3, ms=9.5, zorder=5, clip_on=False)
        right = x <= middle_x + 1e-9
        up = y <= middle_y + 1e-9
        if any(
            abs(other[0] - x) + abs(other[1] - y) < 0.2 * abs(np.ptp(axes.get_xlim())) for other in placed
        ):
            up = not up
        placed.append((x, y))
        axes.annotate(
            name,
            (x, y),
            (9 if right else -9, 9 if up else -9),
            textcoords="offset points",
            size=9,
            weight="bold",
            color=colour,
            ha="left" if right else "right",
            va="bottom" if up else "top",
            path_effects=halo,
            zorder=6,
        )


# ------------------------------------------------------------------------------------ the curves


def _curves(axes: Any, job: Job, answer: ScallopAnswer, units: Units) -> None:
    """Scallop against stepover at the tightest and widest place and on a flat, with what was asked marked."""
    saddle, scale = Saddle.of(job.part), units.scale
    widest = 1.3 * max(answer.stepover_mm[2], answer.flat_stepover_mm)
    steps = np.linspace(0.0, min(widest, 2.0 * answer.radius_mm), _DRAWN_POINTS)
    flat = np.array([steps, [flat_height(answer.radius_mm, float(step)) for step in steps]])
    curves = [
        ("tightest place", _curve(saddle, answer, answer.tightest_at_mm, widest), sheet.TIGHT, "-"),
        ("widest place", _curve(saddle, answer, answer.widest_at_mm, widest), sheet.WIDE, "-."),
        ("flat rule", flat, sheet.QUIET, "--"),
    ]
    near = axes.inset_axes((0.18, 0.57, 0.36, 0.38))
    for panel in (axes, near):
        for name, curve, colour, style in curves:
            panel.plot(curve[0] * scale, curve[1] * scale, style, color=colour, lw=1.6, label=name)
        _asked(panel, answer, scale)
    _near(axes, near, answer, scale)
    axes.set_xlim(0.0, widest * scale)
    axes.set_ylim(0.0, max(float(np.interp(widest, *curve)) for _, curve, _, _ in curves) * scale)
    axes.set_xlabel(f"stepover on the surface, {units.name}")
    axes.set_ylabel(f"scallop, {units.name}")
    axes.grid(color=sheet.FAINT, lw=0.5)
    axes.set_axisbelow(True)
    axes.legend(loc="lower right", framealpha=1.0, edgecolor=sheet.FAINT, fontsize=8.5, handlelength=3.2)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)


def _curve(saddle: Saddle, answer: ScallopAnswer, at_mm: tuple[float, float], widest_mm: float) -> Floats:
    """Return stepover and scallop (2, n), mm, at one place, up to a stepover or a little beyond."""
    here = np.array([at_mm])

    def step_of(height: float) -> float:
        return float(
            local_step(saddle, answer.radius_mm, here, answer.direction_rad, height, answer.allowance_mm)[0]
        )

    # Scallop goes with the square of the stepover, so a first pair scales to the end of the curve.
    known = 0.5 * (answer.scallop_mm[0] + answer.scallop_mm[2])
    highest = min(known * (widest_mm / step_of(known)) ** 2 * 1.1, 0.5 * answer.radius_mm)
    # Stepover over the root of the scallop hardly changes, so few exact points make a fine curve.
    roots = math.sqrt(highest) * np.linspace(0.0, 1.0, _CURVE_POINTS)[1:]
    ratios = [step_of(float(root * root)) / root for root in roots]
    drawn = np.linspace(0.0, roots[-1], _DRAWN_POINTS)
    return np.array([np.interp(drawn, roots, ratios) * drawn, drawn * drawn])


def _near(axes: Any, near: Any, answer: ScallopAnswer, scale: float) -> None:
    """Set the window of the small panel to where the curves meet what was asked for, so that they part."""
    from matplotlib.ticker import MaxNLocator

    spots = (
        np.array(
            [
                (answer.stepover_mm[0], answer.scallop_mm[2]),
                (answer.stepover_mm[2], answer.scallop_mm[0]),
                (answer.flat_stepover_mm, answer.flat_scallop_mm),
            ]
        )
        * scale
    )
    low, high = spots.min(axis=0), spots.max(axis=0)
    middle = 0.5 * (low + high)
    # Scallop goes with the square of the stepover: half the relative spread in one is the whole in the other.
    spread = max(float(np.max((high - low) / middle * (1.0, 0.5))), 1e-4)
    near.set_xlim(middle[0] * (1.0 - 0.9 * spread), middle[0] * (1.0 + 0.9 * spread))
    near.set_ylim(middle[1] * (1.0 - 1.3 * spread), middle[1] * (1.0 + 1.3 * spread))
    for axis in (near.xaxis, near.yaxis):
        axis.set_major_locator(MaxNLocator(3))
    near.ticklabel_format(useOffset=False, style="plain")
    near.tick_params(labelsize=7, length=2, pad=2)
    axes.indicate_inset_zoom(near, edgecolor=sheet.QUIET, lw=0.8)


def _asked(axes: Any, answer: ScallopAnswer, scale: float) -> None:
    """Draw the line of what was asked for and a dot where each curve meets it."""
    step, height = answer.stepover_mm, answer.scallop_mm
    tight, wide = (step[0], height[2]), (step[2], height[0])
    if answer.asked == "scallop":
        axes.axhline(answer.flat_scallop_mm * scale, color=sheet.INK, lw=0.8)
    else:
        axes.axvline(answer.flat_stepover_mm * scale, color=sheet.INK, lw=0.8)
    flat = (answer.flat_stepover_mm, answer.flat_scallop_mm)
    for (s, h), colour, marker in (
        (flat, sheet.QUIET, "s"),
        (tight, sheet.TIGHT, "v"),
        (wide, sheet.WIDE, "o"),
    ):
        axes.plot(s * scale, h * scale, marker, color=colour, mec=sheet.PAPER, mew=1.0, ms=8.0, zorder=5)


def _table(axes: Any, answer: ScallopAnswer, units: Units) -> None:
    """Write the figures under the curves: place, stepover, scallop."""
    axes.axis("off")
    axes.set_xlim(0.0, 1.0)
    axes.set_ylim(0.0, 1.0)
    step, height = answer.stepover_mm, answer.scallop_mm
    rows = [
        ("tightest place", step[0], height[2], sheet.TIGHT),
        ("widest place", step[2], height[0], sheet.WIDE),
        ("flat rule", answer.flat_stepover_mm, answer.flat_scallop_mm, sheet.QUIET),
    ]
    digits = 5 if units.inch else 4
    for x, head in ((0.64, f"stepover, {units.name}"), (1.0, f"scallop, {units.name}")):
        axes.text(x, 0.95, head, ha="right", va="center", size=8.5, color=sheet.QUIET)
    for index, (name, s, h, colour) in enumerate(rows):
        y = 0.79 - 0.155 * index
        axes.text(0.0, y, name, va="center", size=9, weight="bold", color=colour)
        axes.text(0.64, y, f"{s * units.scale:.{digits}f}", ha="right", va="center", size=9)
        axes.text(1.0, y, f"{h * units.scale:.{digits + 1}f}", ha="right", va="center", size=9)
    low, high = (f"{value * units.scale:.{digits + 1}f}" for value in answer.flat_leaves_mm)
    axes.text(
        0.0,
        0.15,
        f"The flat rule's stepover leaves {low} to {high} {units.name} here.\n"
        f"Roughness across the feed, at worst: Ra {answer.ra_um:.2f} µm, Rz {answer.rz_um:.2f} µm",
        va="center",
        size=8.5,
        color=sheet.INK,
        linespacing=1.5,
    )
