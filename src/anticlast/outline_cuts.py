"""How an outline is cut: by parallel lines into intervals, and by square cells into triangles.

Arrays in, arrays out; ``outline.Outline`` is the door to both.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Literal

import numpy as np
import shapely
from shapely.geometry import MultiPolygon, Polygon

from anticlast.tolerances import SAME_POINT_MM

if TYPE_CHECKING:
    from anticlast.records import Bools, Floats, Ints


def cut_edges(along: Floats, across: Floats, lines: Floats) -> tuple[Ints, Floats, Floats]:
    """Return the intervals of sorted parallel lines inside closed rings, touched corners left out.

    Parameters
    ----------
    along, across : (m, 2)
        u and v of the two ends of every edge, mm; an end shared by two edges has to be bit-equal in both.
    lines : (k,)
        v of the lines, ascending, mm.

    Returns
    -------
    line_index : (n,) int64
    u0, u1 : (n,)
        Where the line enters and leaves, mm.
    """
    across, met = _snapped(across, lines)
    above = _cuts(along, across, lines, "left")
    below = _cuts(along, across, lines, "right")
    plain = ~met[above[0]]
    pieces = [(above[0][plain], above[1][plain], above[2][plain])]
    pieces += [_merged(int(index), above, below) for index in np.flatnonzero(met)]
    line_index, u0, u1 = (np.concatenate(columns) for columns in zip(*pieces, strict=True))
    keep = u1 - u0 > SAME_POINT_MM
    return line_index[keep], u0[keep], u1[keep]


def cell_triangles(region: Polygon | MultiPolygon, max_edge_mm: float) -> Floats:
    """Cut a region into counter-clockwise triangles (m, 3, 2) that share whole edges, none too long."""
    cell = max_edge_mm / math.sqrt(2.0)
    vertices = shapely.get_coordinates(region)
    x = _cell_lines(vertices[:, 0], cell, 0.41)
    y = _cell_lines(vertices[:, 1], cell, 0.53)
    left, low = (corner.ravel() for corner in np.meshgrid(x[:-1], y[:-1]))
    right, high = (corner.ravel() for corner in np.meshgrid(x[1:], y[1:]))
    boxes = shapely.box(left, low, right, high)
    shapely.prepare(region)
    whole = np.asarray(shapely.contains_properly(region, boxes))
    cut = shapely.intersects(region, boxes) & ~whole
    filled = _halved(left[whole], low[whole], right[whole], high[whole])
    clipped = shapely.intersection(region, boxes[cut])
    pieces = shapely.get_parts(shapely.constrained_delaunay_triangles(clipped))
    edged = shapely.get_coordinates(pieces).reshape(-1, 4, 2)[:, :3]
    return np.concatenate((filled, _counter_clockwise(edged)))


def _snapped(across: Floats, lines: Floats) -> tuple[Floats, Bools]:
    """Put vertices that all but lie on a line exactly on it; also tell which lines were met by a vertex.

    Vertices that are bit-equal stay so, hence rings stay closed.
    """
    met = np.zeros(lines.size, dtype=bool)
    if lines.size == 0:
        return across, met
    right = np.clip(np.searchsorted(lines, across), 1, max(lines.size - 1, 1))
    left = right - 1
    right = np.minimum(right, lines.size - 1)
    nearest = np.where(np.abs(across - lines[left]) <= np.abs(lines[right] - across), left, right)
    close = np.abs(lines[nearest] - across) <= SAME_POINT_MM
    met[nearest[close]] = True
    # Equal lines share the fate of the first of them.
    met = np.isin(lines, lines[met])
    return np.where(close, lines[nearest], across), met


def _cuts(
    along: Floats, across: Floats, lines: Floats, side: Literal["left", "right"]
) -> tuple[Ints, Floats, Floats]:
    """Return line index, u0 and u1 where sorted lines cut the edges, by the even-odd rule.

    ``side="left"`` counts an edge for low <= v < high, which is the cut just above the line; ``"right"`` for
    low < v <= high, the cut just below it.
    """
    low, high = across.min(axis=1), across.max(axis=1)
    first, last = np.searchsorted(lines, low, side), np.searchsorted(lines, high, side)
    count = last - first
    edge = np.repeat(np.arange(low.size), count)
    within = np.arange(edge.size) - np.repeat(np.cumsum(count) - count, count)
    line = first[edge] + within
    v0, v1 = across[edge, 0], across[edge, 1]
    share = (lines[line] - v0) / (v1 - v0)
    u = along[edge, 0] * (1.0 - share) + along[edge, 1] * share
    order = np.lexsort((u, line))
    line, u = line[order], u[order]
    return line[0::2], u[0::2], u[1::2]


def _merged(
    index: int, above: tuple[Ints, Floats, Floats], below: tuple[Ints, Floats, Floats]
) -> tuple[Ints, Floats, Floats]:
    """Return the union of the cuts just above and just below one line."""
    spans = sorted(
        (float(u0), float(u1))
        for line, starts, ends in (above, below)
        for u0, u1 in zip(starts[line == index], ends[line == index], strict=True)
    )
    joined: list[list[float]] = []
    for u0, u1 in spans:
        if joined and u0 <= joined[-1][1] + SAME_POINT_MM:
            joined[-1][1] = max(joined[-1][1], u1)
        else:
            joined.append([u0, u1])
    found = np.array(joined, dtype=np.float64).reshape(-1, 2)
    return np.full(len(joined), index, dtype=np.int64), found[:, 0], found[:, 1]


def _cell_lines(vertices: Floats, cell_mm: float, share: float) -> Floats:
    """Return evenly spaced lines beyond the vertices on both sides, none of them on a vertex.

    The lines stand in the widest gap between the vertices' remainders. ``share`` of the gap differs between
    x and y so that a 45 degree edge does not run through cell corners either.
    """
    remainder = np.unique(np.mod(vertices, cell_mm))
    gap = np.diff(np.append(remainder, remainder[0] + cell_mm))
    widest = int(np.argmax(gap))
    phase = remainder[widest] + share * gap[widest]
    first = math.floor((vertices.min() - phase) / cell_mm)
    last = math.ceil((vertices.max() - phase) / cell_mm)
    return phase + cell_mm * np.arange(first, last + 1)


def _halved(left: Floats, low: Floats, right: Floats, high: Floats) -> Floats:
    """Return two counter-clockwise triangles for each axis-parallel cell, (2 n, 3, 2)."""
    a, b = np.stack((left, low), axis=-1), np.stack((right, low), axis=-1)
    c, d = np.stack((right, high), axis=-1), np.stack((left, high), axis=-1)
    return np.concatenate((np.stack((a, b, c), axis=1), np.stack((a, c, d), axis=1)))


def _counter_clockwise(triangles: Floats) -> Floats:
    """Return triangles (m, 3, 2) with the clockwise ones turned round."""
    one, two = triangles[:, 1] - triangles[:, 0], triangles[:, 2] - triangles[:, 0]
    clockwise = one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0] < 0.0
    turned = triangles.copy()
    turned[clockwise] = triangles[clockwise][:, ::-1]
    return turned
