"""Line drawings that need no script, for print and where WebGL is missing: passes in plan, set-up."""

from __future__ import annotations

import math

import numpy as np
import shapely

from anticlast.records import Floats, Job, Purpose
from anticlast.report.along import Along
from anticlast.report.numbers import Units, text
from anticlast.report.thinning import thin_to
from anticlast.saddle import Saddle

WIDTH = 480.0  # of every drawing, in its own units; lettering of 15 stays legible at 360 px
MARGIN = 26.0
MOST_POINTS = 6000
FINE = 0.4  # drawing units a line may be off


class _Sheet:
    """Places mm on a drawing: x to the right, y (or z) up."""

    def __init__(self, low: tuple[float, float], high: tuple[float, float]) -> None:
        self.low, self.high = low, high
        self.scale = (WIDTH - 2 * MARGIN) / max(high[0] - low[0], (high[1] - low[1]) / 1.3)
        self.left = (WIDTH - self.scale * (high[0] - low[0])) / 2
        self.height = self.scale * (high[1] - low[1]) + 2 * MARGIN

    def place(self, points: Floats) -> Floats:
        x = self.left + (points[:, 0] - self.low[0]) * self.scale
        y = MARGIN + (self.high[1] - points[:, 1]) * self.scale
        return np.column_stack((x, y))

    def line(self, points: Floats, css: str, *, closed: bool = False) -> str:
        spots = " ".join(f"{x:.1f},{y:.1f}" for x, y in self.place(points))
        return f'<{"polygon" if closed else "polyline"} class="{css}" points="{spots}"/>'

    def zero(self, across: str, up: str) -> str:
        """Mark of program zero with the directions of its two axes."""
        x, y = self.place(np.zeros((1, 2)))[0]
        return (
            f'<g class="zero"><circle cx="{x:.1f}" cy="{y:.1f}" r="6"/>'
            f'<path d="M{x:.1f} {y:.1f}h46m-7 -4l7 4l-7 4"/>'
            f'<path d="M{x:.1f} {y:.1f}v-46m-4 7l4 -7l4 7"/>'
            f'<text x="{x + 50:.1f}" y="{y + 5:.1f}">{across}</text>'
            f'<text x="{x - 5:.1f}" y="{y - 52:.1f}">{up}</text></g>'
        )

    def ruler(self, units: Units) -> str:
        """A bar of a round length, bottom left, with its length in words."""
        length = round_length(0.25 * (self.high[0] - self.low[0]) * units.scale)
        size = length / units.scale * self.scale
        y = self.height - 8
        return (
            f'<g class="ruler"><path d="M6 {y - 5:.1f}v5h{size:.1f}v-5"/>'
            f'<text x="{size + 12:.1f}" y="{y:.1f}">{length:g} {units.name}</text></g>'
        )

    def wrap(self, title: str, parts: list[str]) -> str:
        body = "".join(parts)
        return (
            f'<svg class="drawing" viewBox="0 0 {WIDTH:.0f} {self.height:.0f}" role="img"'
            f' aria-label="{text(title)}">'
            f"<title>{text(title)}</title>{body}</svg>"
        )


def round_length(about: float) -> float:
    """Largest of 1, 2, 5 times a power of ten that is not above a length."""
    power = 10.0 ** math.floor(math.log10(about))
    return next(power * step for step in (5, 2, 1) if power * step <= about)


def _rings(polygon: shapely.Geometry) -> list[Floats]:
    parts = shapely.get_parts(polygon)
    return [shapely.get_coordinates(ring)[:-1] for part in parts for ring in (part.exterior, *part.interiors)]


def _sheet_over(job: Job) -> _Sheet:
    x0, y0, x1, y1 = job.stock.outline.bounds
    a0, b0, a1, b1 = job.part.outline.bounds
    return _Sheet((min(x0, a0), min(y0, b0)), (max(x1, a1), max(y1, b1)))


def plan_drawing(job: Job, rows: Along | None, units: Units) -> str:
    """Blank, outline and passes seen from above, as SVG text."""
    sheet = _sheet_over(job)
    parts = [sheet.line(ring, "blank", closed=True) for ring in _rings(job.stock.outline.polygon)]
    parts += [sheet.line(ring, "part", closed=True) for ring in _rings(job.part.outline.polygon)]
    if rows is not None:
        parts += _passes(sheet, rows)
    parts += [sheet.zero("X", "Y"), sheet.ruler(units)]
    return sheet.wrap("Plan view: blank, outline of the part, passes and program zero", parts)


def _passes(sheet: _Sheet, rows: Along) -> list[str]:
    """The path cut into runs of one kind; rapids dashed, links thin."""
    kind = np.where(rows.purpose == Purpose.RAPID, 2, np.where(rows.purpose == Purpose.CUT, 0, 1))
    keep = np.zeros(len(kind), bool)
    differs = kind[1:] != kind[:-1]
    keep[:-1] |= differs
    keep[1:] |= differs
    path = np.concatenate(([0.0], np.cumsum(np.linalg.norm(np.diff(rows.tip_mm[:, :2], axis=0), axis=1))))
    chosen, _ = thin_to(sheet.place(rows.tip_mm[:, :2]) / FINE, path, keep, 1.0, MOST_POINTS)
    css = ("pass", "link", "rapid")
    found = []
    start = 0
    kinds = kind[chosen]
    for i in range(1, len(chosen)):
        if i + 1 == len(chosen) or kinds[i + 1] != kinds[i]:
            run = chosen[start : i + 1]
            if len(run) > 1:
                found.append(sheet.line(rows.tip_mm[run, :2], css[int(kinds[i])]))
            start = i
    return found


def front_drawing(job: Job, units: Units) -> str:
    """Set-up seen from the front (X to the right, Z up): blank, surface, program zero, clearance plane."""
    x0, _, x1, _ = job.stock.outline.bounds
    a0, _, a1, _ = job.part.outline.bounds
    low, high = min(x0, a0), max(x1, a1)
    stock = job.stock
    plane = stock.top_mm + job.clearance_mm
    sheet = _Sheet((low, min(stock.bottom_mm, 0.0)), (high, max(plane, 0.0)))
    saddle = Saddle.of(job.part)
    x = np.linspace(a0, a1, 61)
    curve = np.column_stack((x, saddle.height(x, np.zeros_like(x))))
    box = np.array([[x0, stock.bottom_mm], [x1, stock.bottom_mm], [x1, stock.top_mm], [x0, stock.top_mm]])
    levels = [(plane, "clearance"), (stock.top_mm, "blank top"), (stock.bottom_mm, "blank bottom")]
    parts = [sheet.line(box, "blank solid", closed=True), sheet.line(curve, "part")]
    parts.append(sheet.line(np.array([[low, plane], [high, plane]]), "rapid"))
    for z, name in levels:
        spot = sheet.place(np.array([[low, z]]))[0]
        parts.append(
            f'<text x="{spot[0] + 4:.1f}" y="{spot[1] - 5:.1f}">'
            f"{name} Z {text(units.length(z, bare=True))}</text>"
        )
    parts.append(sheet.zero("X", "Z"))
    return sheet.wrap(
        "Set-up from the front: blank, finished surface at Y 0, clearance plane and program zero", parts
    )
