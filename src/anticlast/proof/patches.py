"""Finished surface and blank, cut into flat patches under a tree of bounding spheres, for distance searches."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import shapely

from anticlast.proof.nodes import grid_lines
from anticlast.saddle import Saddle

if TYPE_CHECKING:
    from anticlast.outline import Outline
    from anticlast.records import Floats, Job

# How far a patch may stand off the curved surface: small against the clearance tolerance; for a first look, less fine.
FINE_MM, COARSE_MM = 0.004, 0.05
_SMALLEST_MM, _LARGEST_MM = 0.5, 4.0
_WALL_MM = 1.5
# Cells that the boundary cuts are split this fine each way; patches reach over the outline by no more than that.
_EDGE_SPLIT = 4
_LEAF = 4


@dataclass(frozen=True, slots=True)
class PatchTree:
    """Flat patches in part coordinates, sorted for a tree of bounding spheres.

    Attributes
    ----------
    patches : (n, 10) [mm]
        Middle, two half sides, and how far the true surface may stand off.
    spheres : (k, 4) [mm]
        Middle and radius of what lies under each tree node; node 0 is the root.
    child : (k, 2) int64
        Two nodes below, or -1 - first and -1 - (last + 1) of the patches in a leaf.
    """

    patches: Floats
    spheres: Floats
    child: npt.NDArray[np.int64]


def plant(patches: Floats) -> PatchTree:
    """Sort patches (n, 10) [mm] into a tree: halved along the longer extent until few are left."""
    order = np.arange(len(patches))
    reach = np.linalg.norm(patches[:, 3:6], axis=1) + np.linalg.norm(patches[:, 6:9], axis=1) + patches[:, 9]
    middle = patches[:, :3]
    spheres: list[tuple[float, float, float, float]] = []
    child: list[list[int]] = []
    pending = [(0, len(patches), -1, 0)]
    while pending:
        first, last, parent, side = pending.pop()
        node = len(spheres)
        if parent >= 0:
            child[parent][side] = node
        rows = order[first:last]
        low, high = middle[rows].min(axis=0), middle[rows].max(axis=0)
        centre = 0.5 * (low + high)
        radius = float(np.max(np.linalg.norm(middle[rows] - centre, axis=1) + reach[rows]))
        spheres.append((float(centre[0]), float(centre[1]), float(centre[2]), radius))
        if last - first <= _LEAF:
            child.append([-1 - first, -1 - last])
            continue
        child.append([0, 0])
        along = middle[rows, int(np.argmax(high - low))]
        cut = (last - first) // 2
        order[first:last] = rows[np.argpartition(along, cut)]
        pending.append((first, first + cut, node, 0))
        pending.append((first + cut, last, node, 1))
    return PatchTree(np.ascontiguousarray(patches[order]), np.array(spheres), np.array(child, np.int64))


def cells(outline: Outline, size_mm: float) -> tuple[Floats, Floats]:
    """Return middles (n, 2) and half sides (n, 2) [mm] of axis-parallel cells that cover an outline."""
    x0, y0, x1, y1 = outline.bounds
    gx, gy = grid_lines(x0, x1, size_mm), grid_lines(y0, y1, size_mm)
    middle, half = _boxes(gx[:-1], gx[1:], gy[:-1], gy[1:])
    whole = _covered(outline, middle, half)
    fine_x = np.linspace(x0, x1, _EDGE_SPLIT * (len(gx) - 1) + 1)
    fine_y = np.linspace(y0, y1, _EDGE_SPLIT * (len(gy) - 1) + 1)
    fine, fine_half = _boxes(fine_x[:-1], fine_x[1:], fine_y[:-1], fine_y[1:])
    parent = whole.reshape(len(gy) - 1, len(gx) - 1)
    free = ~np.repeat(np.repeat(parent, _EDGE_SPLIT, axis=0), _EDGE_SPLIT, axis=1).ravel()
    fine, fine_half = fine[free], fine_half[free]
    low, high = fine - fine_half, fine + fine_half
    boxes = shapely.box(low[:, 0], low[:, 1], high[:, 0], high[:, 1])
    touched = np.asarray(shapely.intersects(outline.polygon, boxes))
    return np.concatenate((middle[whole], fine[touched])), np.concatenate((half[whole], fine_half[touched]))


def _boxes(left: Floats, right: Floats, low: Floats, high: Floats) -> tuple[Floats, Floats]:
    x, y = np.meshgrid(0.5 * (left + right), 0.5 * (low + high))
    dx, dy = np.meshgrid(0.5 * (right - left), 0.5 * (high - low))
    return np.column_stack((x.ravel(), y.ravel())), np.column_stack((dx.ravel(), dy.ravel()))


def _covered(outline: Outline, middle: Floats, half: Floats) -> npt.NDArray[np.bool_]:
    low, high = middle - half, middle + half
    shapely.prepare(outline.polygon)
    return np.asarray(
        shapely.covers(outline.polygon, shapely.box(low[:, 0], low[:, 1], high[:, 0], high[:, 1]))
    )


def surface_patches(saddle: Saddle, outline: Outline, offset_mm: float, sag_mm: float = FINE_MM) -> Floats:
    """Return patches (n, 10) of the surface moved out along its normal, over an outline [mm].

    ``sag_mm`` is how far the surface may stand off a patch, unless that takes patches under half a mm.
    """
    bend = 2.0 * max(saddle.a_per_mm, saddle.b_per_mm)
    size = float(np.clip(2.0 * np.sqrt(sag_mm / bend), _SMALLEST_MM, _LARGEST_MM))
    middle, half = cells(outline, size)
    ax = np.column_stack((half[:, 0], np.zeros(len(half))))
    ay = np.column_stack((np.zeros(len(half)), half[:, 1]))
    point = saddle.offset(middle, offset_mm)
    one = 0.5 * (saddle.offset(middle + ax, offset_mm) - saddle.offset(middle - ax, offset_mm))
    two = 0.5 * (saddle.offset(middle + ay, offset_mm) - saddle.offset(middle - ay, offset_mm))
    # z - tangent plane = a u^2 - b v^2, at most max(a, b) |half|^2; the offset adds less than bend * offset of that.
    sag = 0.5 * bend * np.sum(half**2, axis=1) * (1.0 + 4.0 * bend * abs(offset_mm))
    return np.column_stack((point, one, two, sag))


def finished_patches(job: Job, sag_mm: float = FINE_MM) -> PatchTree:
    """Return the finished surface over the part's outline."""
    return plant(surface_patches(Saddle.of(job.part), job.part.outline, 0.0, sag_mm))


def blank_patches(job: Job) -> PatchTree:
    """Return the blank as it was before any cutting: its top, flat or near the finished form, and its walls."""
    stock, saddle = job.stock, Saddle.of(job.part)
    outline = stock.outline
    if stock.allowance_mm is None:
        middle, half = cells(outline, _LARGEST_MM)
        none = np.zeros(len(middle))
        top = np.column_stack(
            (middle, np.full(len(middle), stock.top_mm), half[:, 0], none, none, none, half[:, 1], none, none)
        )
    else:
        top = surface_patches(saddle, outline, stock.allowance_mm)
    ring = [shapely.get_coordinates(part) for part in _rings(outline)]
    ends = [np.stack((points[:-1], points[1:]), axis=1) for points in ring]
    wall = np.concatenate(ends)
    both = wall.reshape(-1, 2)
    bend = 0.0
    if stock.allowance_mm is None:
        tops = np.full((len(wall), 2), stock.top_mm)
    else:
        # The normal offset stands at most allowance / cos(slope) over the surface.
        z = saddle.height(both[:, 0], both[:, 1]) + stock.allowance_mm * saddle.stretch(both)
        tops = np.minimum(stock.top_mm, z).reshape(-1, 2)
        bend = 2.0 * max(saddle.a_per_mm, saddle.b_per_mm) * (1.0 + stock.allowance_mm)
    # A wall is a parallelogram: its upper edge goes straight from end to end, its foot with it, near the bottom.
    middle, half = 0.5 * (wall[:, 0] + wall[:, 1]), 0.5 * (wall[:, 1] - wall[:, 0])
    none = np.zeros(len(wall))
    high = tops.mean(axis=1)
    half_z = 0.5 * (high - stock.bottom_mm)
    slant = 0.5 * (tops[:, 1] - tops[:, 0])
    sag = 0.5 * bend * np.sum(half**2, axis=1)
    walls = np.column_stack((middle, high - half_z, half, slant, none, none, half_z, sag))
    return plant(np.concatenate((top, walls)))


def _rings(outline: Outline) -> list[shapely.LinearRing]:
    split = shapely.segmentize(outline.polygon, _WALL_MM)
    return [ring for part in shapely.get_parts(split) for ring in (part.exterior, *part.interiors)]
