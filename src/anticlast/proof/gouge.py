"""How deep the cutting end went below the finished surface, measured from the motion rather than from nodes.

The distance from the surface changes by no more than one moves, so a ball of radius R about a centre at distance d
reaches exactly R - d below the surface, under the foot of its centre: docs/theory-proof.md#gouge. No grid is needed.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from anticlast.proof import _reach_kernels as kernels
from anticlast.proof.pieces import Pieces, sub_points
from anticlast.proof.threads import in_threads, spans

if TYPE_CHECKING:
    from anticlast.outline import Outline
    from anticlast.records import Floats, Ints
    from anticlast.saddle import Saddle

# Distance between measurements along a piece: the bound between two is off by k step^2 / 8, 6e-6 mm at k = 0.02 / mm.
_STEP_MM = 0.05
# Points asked about at a time, deepest first.
_BLOCK = 4096


@dataclass(frozen=True, slots=True)
class Gouge:
    """Deepest place below the finished surface inside the outline.

    Attributes
    ----------
    deepest_mm, bound_mm : float
        Found, and what no gouge exceeds; 0 if the cutter never went below the surface.
    at_mm : (float, float)
        Part coordinates.
    piece : int
        Row of the part motion, -1 if none.
    """

    deepest_mm: float
    bound_mm: float
    at_mm: tuple[float, float]
    piece: int


def distances(saddle: Saddle, points: Floats) -> tuple[Floats, Floats]:
    """Return signed distance (n,) [mm] and foot in plan (n, 2) [mm] of points (n, 3) [mm], all in the saddle's frame."""
    distance, plan = np.empty(len(points)), np.empty((len(points), 2))
    points = np.ascontiguousarray(points)

    def run(span: tuple[int, int]) -> None:
        some = slice(*span)
        kernels.feet(saddle.a_per_mm, saddle.b_per_mm, points[some], distance[some], plan[some])

    in_threads(run, spans(len(points)))
    return distance, plan


def rim_distances(saddle: Saddle, centres: Floats, axes: Floats, disc_mm: Floats) -> tuple[Floats, Floats]:
    """Return the least signed distance (n,) [mm] on circles about cutter axes, and its foot in plan (n, 2) [mm].

    Parameters
    ----------
    centres, axes : (n, 3) [mm, 1]
        Saddle's frame.
    disc_mm : (n,) [mm]
        Radius of each circle.
    """
    distance, plan = np.empty(len(centres)), np.empty((len(centres), 2))
    centres, axes = np.ascontiguousarray(centres), np.ascontiguousarray(axes)

    def run(span: tuple[int, int]) -> None:
        some = slice(*span)
        kernels.rims(
            saddle.a_per_mm, saddle.b_per_mm, centres[some], axes[some], disc_mm[some], distance[some], plan[some]
        )  # fmt: skip

    in_threads(run, spans(len(centres)))
    return distance, plan


def near_pieces(saddle: Saddle, pieces: Pieces) -> Ints:
    """Return the pieces whose cutting end may come below the surface: the distance changes no faster than one moves."""
    rows = np.flatnonzero(pieces.active)
    c0, c1, size = pieces.c0[rows], pieces.c1[rows], pieces.size[rows]
    half = 0.5 * np.linalg.norm(c1 - c0, axis=1)
    turned = np.linalg.norm(pieces.a1[rows] - pieces.a0[rows], axis=1)
    d0, _ = distances(saddle, c0)
    d1, _ = distances(saddle, c1)
    near = np.minimum(d0, d1) - half < size[:, 0] + size[:, 1]
    wide = np.flatnonzero(near & (size[:, 0] > 0.0))
    r0, _ = rim_distances(saddle, c0[wide], pieces.a0[rows[wide]], size[wide, 0])
    r1, _ = rim_distances(saddle, c1[wide], pieces.a1[rows[wide]], size[wide, 0])
    reach = half[wide] + 0.5 * size[wide, 0] * turned[wide]
    near[wide] = np.minimum(r0, r1) - reach < size[wide, 1]
    return rows[near]


def deepest_gouge(saddle: Saddle, outline: Outline, pieces: Pieces) -> Gouge:
    """Return the deepest gouge of cutting ends inside the outline, with its bound.

    Parameters
    ----------
    saddle : Saddle
    outline : Outline
    pieces : Pieces
    """
    near = near_pieces(saddle, pieces)
    if near.size == 0:
        return Gouge(0.0, 0.0, (0.0, 0.0), -1)
    segment, share, centres = sub_points(pieces.c0[near], pieces.c1[near], _STEP_MM)
    piece = near[segment]
    disc, corner = pieces.size[piece, 0], pieces.size[piece, 1]
    distance, plan = distances(saddle, centres)
    wide = np.flatnonzero(disc > 0.0)
    axes = pieces.a0[piece[wide]] + share[wide, None] * (pieces.a1 - pieces.a0)[piece[wide]]
    axes /= np.linalg.norm(axes, axis=1, keepdims=True)
    distance[wide], plan[wide] = rim_distances(saddle, centres[wide], axes, disc[wide])
    # How far any point of the cutting end moves from one measurement to the next.
    moved = np.linalg.norm(np.diff(centres, axis=0), axis=1)
    turned = np.linalg.norm((pieces.a1 - pieces.a0)[piece[1:]], axis=1) * np.abs(np.diff(share))
    moved += disc[1:] * turned
    moved[piece[1:] != piece[:-1]] = np.nan
    return _worst(saddle, outline, corner - distance, moved, plan, piece)


def _worst(
    saddle: Saddle, outline: Outline, depth: Floats, moved: Floats, plan: Floats, piece: Ints
) -> Gouge:
    """Return the deepest of the measured depths whose feet lie inside, and the bound between neighbours."""
    part_xy = np.column_stack(saddle.plan(plan[:, 0], plan[:, 1]))
    worst = _first_inside(outline, part_xy, depth, 0.0)
    deepest = 0.0 if worst < 0 else float(depth[worst])
    # Along a line the distance dips below its chord by at most what the convex curvature at that offset allows.
    bend = 2.0 * saddle.b_per_mm
    bend /= max(0.1, 1.0 - bend * max(0.0, float(depth.max())))
    between = np.maximum(depth[1:], depth[:-1]) + bend * moved**2 / 8.0
    between[np.isnan(between)] = -np.inf
    # A foot moves faster than its centre by 1 / (1 - k d); twice a step takes in all that could lie inside.
    high = _first_inside(outline.grown(2.0 * _STEP_MM), part_xy[:-1], between, deepest)
    bound = deepest if high < 0 else float(between[high])
    if worst < 0:
        return Gouge(0.0, bound, (0.0, 0.0), -1)
    return Gouge(deepest, bound, (float(part_xy[worst, 0]), float(part_xy[worst, 1])), int(piece[worst]))


def _first_inside(outline: Outline, xy: Floats, value: Floats, above: float) -> int:
    """Return the row of the highest value above a limit whose point lies inside the outline, -1 if there is none."""
    rows = np.flatnonzero(value > above)
    rows = rows[np.argsort(-value[rows])]
    for start in range(0, len(rows), _BLOCK):
        block = rows[start : start + _BLOCK]
        inside = outline.contains(xy[block])
        if inside.any():
            return int(block[np.argmax(inside)])
    return -1
