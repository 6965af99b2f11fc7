"""What set-up drawings are made of: dimension lines, the mark of program zero, cutters in their holders."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from anticlast.report import picture_sheet as sheet

if TYPE_CHECKING:
    from collections.abc import Sequence

    from anticlast.cutter import Cutter

_GAP_SHARE = 0.25  # between cutters, of the widest holder


def inch_of(axes: Any) -> float:
    """Return how many mm of the part one inch of paper shows."""
    wide_in = axes.figure.get_size_inches()[0] * axes.get_position().width
    return float(np.ptp(axes.get_xlim()) / wide_in)


def dimension(axes: Any, start: tuple[float, float], end: tuple[float, float], label: str) -> None:
    """Draw a dimension line between two points with its figure on it; upright ones read from the right."""
    style = {
        "arrowstyle": "<|-|>",
        "color": sheet.QUIET,
        "lw": 0.7,
        "mutation_scale": 7,
        "shrinkA": 0,
        "shrinkB": 0,
    }
    axes.annotate("", end, start, arrowprops=style, annotation_clip=False)
    upright = start[0] == end[0]
    axes.text(
        (start[0] + end[0]) / 2,
        (start[1] + end[1]) / 2,
        label,
        size=8,
        ha="center",
        va="center",
        rotation=90 if upright else 0,
        clip_on=False,
        bbox={"facecolor": sheet.PAPER, "edgecolor": "none", "pad": 1.2},
    )


def helper(axes: Any, start: tuple[float, float], end: tuple[float, float], style: str = "-") -> None:
    """Draw a thin line, such as leads from an edge to its dimension."""
    axes.plot(*zip(start, end, strict=True), style, color=sheet.QUIET, lw=0.5, clip_on=False, zorder=1.5)


def origin_mark(axes: Any, across: str, up: str) -> None:
    """Mark program zero: a quartered circle and the two axis directions that the view shows."""
    from matplotlib.patches import Circle, Wedge

    inch = inch_of(axes)
    reach, radius = 0.42 * inch, 0.07 * inch
    arrow = {
        "arrowstyle": "-|>",
        "color": sheet.TIGHT,
        "lw": 1.1,
        "mutation_scale": 9,
        "shrinkA": 0,
        "shrinkB": 0,
    }
    for tip, name, place in (((reach, 0.0), across, (1.12, -0.02)), ((0.0, reach), up, (0.0, 1.2))):
        axes.annotate("", tip, (0.0, 0.0), arrowprops=arrow, annotation_clip=False, zorder=7)
        axes.text(
            place[0] * reach,
            place[1] * reach,
            name,
            size=8.5,
            weight="bold",
            color=sheet.TIGHT,
            ha="center",
            va="center",
            clip_on=False,
            zorder=8,
            bbox={"facecolor": sheet.PAPER, "edgecolor": "none", "pad": 0.6, "alpha": 0.8},
        )
    axes.add_patch(
        Circle((0, 0), radius, facecolor=sheet.PAPER, edgecolor=sheet.TIGHT, lw=0.9, zorder=7, clip_on=False)
    )
    for start in (0, 180):
        axes.add_patch(
            Wedge((0, 0), radius, start, start + 90, facecolor=sheet.TIGHT, zorder=7.5, clip_on=False)
        )


def row_width(cutters: Sequence[Cutter]) -> float:
    """Return the width of all cutters side by side, a quarter of the widest between them, mm."""
    widths = [_widest(cutter) for cutter in cutters]
    return sum(widths) + _GAP_SHARE * max(widths) * (len(widths) - 1)


def _widest(cutter: Cutter) -> float:
    return 2.0 * max(body.radius_mm for body in cutter.bodies())


def stand_cutters(axes: Any, cutters: Sequence[Cutter], middle_mm: float, base_mm: float) -> None:
    """Stand cutters with their holders side by side about a middle, tips on one height, by number."""
    at = middle_mm - 0.5 * row_width(cutters)
    gap = _GAP_SHARE * max(_widest(cutter) for cutter in cutters)
    for cutter in sorted(cutters, key=lambda each: each.number):
        middle = at + 0.5 * _widest(cutter)
        _cutter(axes, cutter, middle, base_mm)
        axes.text(
            middle,
            base_mm + cutter.gauge_length_mm + 0.1 * inch_of(axes),
            f"T{cutter.number}",
            size=9,
            weight="bold",
            ha="center",
            va="bottom",
            clip_on=False,
        )
        at += _widest(cutter) + gap


def _cutter(axes: Any, cutter: Cutter, middle: float, base: float) -> None:
    from matplotlib.patches import Polygon

    angle = np.linspace(0.0, math.pi / 2, 25)
    corner = cutter.corner_radius_mm
    end = np.column_stack(
        (cutter.radius_mm - corner + corner * np.sin(angle), corner * (1.0 - np.cos(angle)))
    )
    shapes = [(np.concatenate(([[0.0, 0.0]], end, [[0.0, corner]])), sheet.STEEL)]
    for body in cutter.bodies():
        colour = sheet.HOLDER if body.name.startswith("holder") else sheet.STEEL
        r, low, high = body.radius_mm, body.low_mm, body.high_mm
        shapes.append((np.array([[0.0, low], [r, low], [r, high], [0.0, high]]), colour))
    for half, colour in shapes:
        ring = np.concatenate((half, half[::-1] * np.array([-1.0, 1.0]))) + np.array([middle, base])
        axes.add_patch(
            Polygon(ring, closed=True, facecolor=colour, edgecolor=sheet.INK, lw=0.6, clip_on=False)
        )
    axes.plot(
        (middle, middle),
        (base, base + cutter.gauge_length_mm),
        color=sheet.INK,
        lw=0.5,
        ls=(0, (12, 3, 2, 3)),
    )
