"""Pattern *even*: passes whose spacing holds the scallop at the limit everywhere."""

from __future__ import annotations

import numpy as np
import shapely

from anticlast.outline import Outline
from anticlast.passes.courses import left_over
from anticlast.passes.cover import spread
from anticlast.passes.frame import PassFrame
from anticlast.passes.layout import Layout, chords_of, settled
from anticlast.passes.parallels import Bundle, Parallels, parallels
from anticlast.passes.raster import evenly
from anticlast.passes.spacing import Left
from anticlast.records import Floats, Ints, Operation
from anticlast.saddle import Saddle
from anticlast.tolerances import SAME_POINT_MM

# Straight edges of the outline are curves among the passes; cut this short (mm) their chords stay within 1e-5 mm for
# passes that bend no more than a ball that fits.
_EDGE_MM = 0.05
# The exact cusp differs from the leading order by a share that changes over centimetres.
_RIDGE_SAMPLE_MM = 3.0
_MOST_PLACES = 1000


def even_layout(saddle: Saddle, outline: Outline, operation: Operation) -> Layout:
    """Lay pattern *even*: parallels in the cusp metric to the line through the saddle point along the feed direction.

    Raises
    ------
    CannotPlan
        If the passes would cross over the outline, or a stepover is given.
    """
    frame = PassFrame(saddle, operation.direction_rad, operation.cutter.radius_mm, operation.allowance_mm)
    ball = PassFrame(saddle, 0.0, frame.radius_mm, frame.allowance_mm)
    fine = Outline(shapely.segmentize(outline.polygon, _EDGE_MM), outline.flattening_mm)
    chart, u, v = parallels(frame, fine)
    rim = np.column_stack((u, v))
    charted = Outline(shapely.transform(fine.polygon, lambda _: rim))

    def lay(height_mm: float) -> tuple[Floats, Left]:
        step = float(np.sqrt(8.0 * height_mm / chart.crowding))
        lines = evenly(float(v.min()), float(v.max()), (0.5 * step, 0.5 * step), step)
        return lines, _left(ball, chart, charted, lines, rim)

    lines, left = settled(operation, lay)
    _, by_u, by_v = chart.place(u, v)
    gap = float(np.diff(lines).max()) if lines.size > 1 else float(np.ptp(v))
    reach = gap * float(np.linalg.norm(by_v, axis=1).max())
    course = chart.bundle(lines)

    def overrun(line: Ints, u_mm: Floats) -> Floats:
        return reach / np.linalg.norm(course.at(line, u_mm)[1], axis=1)

    bridge = 2.0 * reach / float(np.linalg.norm(by_u, axis=1).max())
    chords = chords_of(operation, operation.scallop_mm or 0.0, left)
    return Layout(course, ball, charted, lines, left, chords, reach, overrun, bridge)


def _left(ball: PassFrame, chart: Parallels, charted: Outline, lines_mm: Floats, rim: Floats) -> Left:
    """Return what the passes leave: at ridges half-way between neighbours, and on the rim."""
    course = chart.bundle(lines_mm)
    places = [_on_rim(ball, course, chart, lines_mm, rim)]
    stepover = (0.0, 0.0)
    if lines_mm.size > 1:
        middle = 0.5 * (lines_mm[1:] + lines_mm[:-1])
        index, u0, u1 = charted.clip_lines(0.0, middle)
        owner, u = spread(u0, u1, _RIDGE_SAMPLE_MM)
        strip = index[owner]
        xy, by_u, by_v = chart.place(u, middle[strip])
        steps = _surface_step(ball.saddle, xy, by_u, by_v) * float(lines_mm[1] - lines_mm[0])
        stepover = (float(steps.min()), float(steps.max()))
        at = np.arange(0, u.size, max(1, u.size // _MOST_PLACES))
        below = left_over(ball, course, strip[at], u[at], xy[at])
        above = left_over(ball, course, strip[at] + 1, u[at], xy[at])
        # Heights go with the squares of the distances: where they meet, the root is the harmonic mean of the two.
        root = 2.0 / (1.0 / np.sqrt(below) + 1.0 / np.sqrt(above))
        places.append((xy[at], _unit(by_u[at]), root * root))
    xy, along, height = (np.concatenate(column) for column in zip(*places, strict=True))
    return Left(float(height.max()), xy, along, height, stepover)


def _on_rim(
    ball: PassFrame, course: Bundle, chart: Parallels, lines_mm: Floats, rim: Floats
) -> tuple[Floats, Floats, Floats]:
    """Return the rim's points farthest from passes, the feed direction there, and the least that passes leave."""
    after = np.clip(np.searchsorted(lines_mm, rim[:, 1]), 0, lines_mm.size - 1)
    before = np.maximum(after - 1, 0)
    near = np.minimum(np.abs(rim[:, 1] - lines_mm[after]), np.abs(rim[:, 1] - lines_mm[before]))
    at = np.argsort(-near)[:_MOST_PLACES]
    xy, by_u, _ = chart.place(rim[at, 0], rim[at, 1])
    height = np.minimum(
        left_over(ball, course, before[at], rim[at, 0], xy),
        left_over(ball, course, after[at], rim[at, 0], xy),
    )
    return xy, _unit(by_u), height


def _unit(vectors: Floats) -> Floats:
    return vectors / np.maximum(np.linalg.norm(vectors, axis=1, keepdims=True), SAME_POINT_MM)


def _surface_step(saddle: Saddle, xy: Floats, by_u: Floats, by_v: Floats) -> Floats:
    """Return the distance on the surface square to the passes per step of v (n,): |S_u x S_v| / |S_u|."""
    zx, zy = saddle.gradient(xy[:, 0], xy[:, 1])
    s_u, s_v = (np.column_stack((d, zx * d[:, 0] + zy * d[:, 1])) for d in (by_u, by_v))
    return np.linalg.norm(np.cross(s_u, s_v), axis=1) / np.linalg.norm(s_u, axis=1)
