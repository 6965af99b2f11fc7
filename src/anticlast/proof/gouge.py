"""How deep the cutting end went below the finished surface, measured from the motion rather than from nodes.

The distance from the surface changes by no more than one moves, so a ball of radius R about a centre at distance d
reaches exactly R - d below the surface, under the foot of its centre: docs/theory-proof.md#gouge. No grid is needed.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from anticlast.proof import _kernels
from anticlast.proof.pieces import Pieces, sub_points

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
    _kernels.feet(saddle.a_per_mm, saddle.b_per_mm, np.ascontiguousarray(points), distance, plan)
    return distance, plan


def near_pieces(saddle: Saddle, pieces: Pieces, margin_mm: float) -> Ints:
    """Return the pieces whose cutting end may come within a margin [mm] of the surface: the distance changes 1 : 1."""
    rows = np.flatnonzero(pieces.active)
    half = 0.5 * np.linalg.norm(pieces.c1[rows] - pieces.c0[rows], axis=1)
    reach = pieces.size[rows, 0] + pieces.size[rows, 1]
    d0, _ = distances(saddle, pieces.c0[rows])
    d1, _ = distances(saddle, pieces.c1[rows])
    return rows[np.minimum(d0, d1) - half < reach + margin_mm]


def deepest_gouge(saddle: Saddle, outline: Outline, pieces: Pieces) -> Gouge:
    """Return the deepest gouge of ball ends inside the outline, with its bound.

    Parameters
    ----------
    saddle : Saddle
    outline : Outline
    pieces : Pieces
    """
    near = near_pieces(saddle, pieces, 0.0)
    if near.size == 0:
        return Gouge(0.0, 0.0, (0.0, 0.0), -1)
    segment, centres = sub_points(pieces.c0[near], pieces.c1[near], _STEP_MM)
    piece = near[segment]
    distance, plan = distances(saddle, centres)
    depth = pieces.size[piece, 1] - distance
    return _worst(saddle, outline, depth, centres, plan, piece)


def _worst(saddle: Saddle, outline: Outline, depth: Floats, centres: Floats, plan: Floats, piece: Ints) -> Gouge:
    """Return the deepest of the measured depths whose feet lie inside, and the bound between neighbours."""
    part_xy = np.column_stack(saddle.plan(plan[:, 0], plan[:, 1]))
    worst = _first_inside(outline, part_xy, depth, 0.0)
    deepest = 0.0 if worst < 0 else float(depth[worst])
    step = np.linalg.norm(np.diff(centres, axis=0), axis=1)
    # Along a line the distance dips below its chord by at most the convex curvature at that offset allows.
    bend = 2.0 * saddle.b_per_mm
    bend /= max(0.1, 1.0 - bend * max(0.0, float(-np.min(distances(saddle, centres[depth > 0.0])[0], initial=0.0))))
    between = np.maximum(depth[1:], depth[:-1]) + bend * step**2 / 8.0
    between[piece[1:] != piece[:-1]] = -np.inf
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
