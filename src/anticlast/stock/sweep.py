"""Read-back motion as the stock field's kernels take it: straight segments of the cutter, and stations along them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from anticlast.stock import _sweep_kernels as kernels
from anticlast.stock.grid import turned_points
from anticlast.tolerances import STOCK_CHORD_MM, STOCK_REACH_MM

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.records import Bools, Floats, Ints, PartMotion

# The shank end of the flutes is held too when pieces are joined, and a point as far up as a holder usually is.
_REACH_MM = 60.0
_MOST_JOINED = 64


@dataclass(frozen=True, slots=True)
class Segments:
    """Straight segments of motion in the turned frame, in order of time.

    Attributes
    ----------
    ends : (k, 12) [mm, 1]
        Reference point (tip + corner radius along the axis) and unit axis at the start, then at the end.
    shape : (k,) int64
        Which cutter of the sequence they were made from.
    row : (k,) int64
        Row of the part motion at the end.
    before : (k,) int64
        Row of the part motion at the start.
    rapid : (k,) bool
    length_mm : (k,)
        Travel of the reference point.
    """

    ends: Floats
    shape: Ints
    row: Ints
    before: Ints
    rapid: Bools
    length_mm: Floats

    def __len__(self) -> int:
        return len(self.shape)


def take_segments(
    motion: PartMotion, cutters: Sequence[Cutter], moving: Bools | None = None, chord_mm: float = STOCK_CHORD_MM
) -> Segments:
    """Join pieces of part motion into segments, as few as stay near them.

    Pieces are joined only within one motion, as long as the reference point stays within ``chord_mm`` of where it was and a
    point 60 mm up the axis within ``STOCK_REACH_MM``.

    Parameters
    ----------
    motion : PartMotion
    cutters : sequence of Cutter
        Motion with any other tool is left out.
    moving : (m,) bool, optional
        Rows to use; all that move if not given.
    chord_mm : float
    """
    count = len(motion.tip_mm)
    numbers = np.array([cutter.number for cutter in cutters], np.int64)
    shape = np.full(count, -1, np.int64)
    height = np.zeros(count)
    for position, cutter in enumerate(cutters):
        rows = motion.tool == numbers[position]
        shape[rows], height[rows] = position, cutter.reference_height_mm
    live = (shape >= 0) & (motion.fraction > 0.0)
    live[:1] = False
    if moving is not None:
        live &= moving
    tip, axis = turned_points(motion.tip_mm), turned_points(motion.axis)
    last = np.empty(2 * count, np.int64)
    kept = kernels.join_rows(
        tip, axis, height, motion.motion, motion.fraction, live, chord_mm, STOCK_REACH_MM, _REACH_MM, _MOST_JOINED, last
    )
    pairs = last[: 2 * kept].reshape(-1, 2)
    before, row = pairs[:, 0], pairs[:, 1]
    up = height[row][:, None]
    ends = np.hstack((tip[before] + up * axis[before], axis[before], tip[row] + up * axis[row], axis[row]))
    return Segments(
        ends=np.ascontiguousarray(ends),
        shape=shape[row],
        row=row,
        before=before,
        rapid=np.asarray(motion.rapid[row]),
        length_mm=np.linalg.norm(ends[:, 6:9] - ends[:, :3], axis=1),
    )


def shape_table(cutters: Sequence[Cutter]) -> Floats:
    """Return disc radius, corner radius and height of the flutes above the reference point, (n, 3) [mm]."""
    rows = [
        (
            0.0 if cutter.shape == "ball" else cutter.radius_mm - cutter.corner_radius_mm,
            cutter.corner_radius_mm,
            max(0.0, cutter.flute_length_mm - cutter.corner_radius_mm),
        )
        for cutter in cutters
    ]
    return np.array(rows, dtype=np.float64).reshape(-1, 3)


@dataclass(frozen=True, slots=True)
class Stations:
    """Places along feed segments where the cutter's front is looked at.

    Attributes
    ----------
    first : (k + 1,) int64
        Station rows of segment k: first[k] to first[k + 1].
    segment : (n,) int64
    frame : (n, 15)
        Reference point [mm], axis, across (unit, 90 degrees left of the feed, square to the axis), feed direction (unit),
        change of the axis along the feed [1/mm]; turned frame.
    """

    first: Ints
    segment: Ints
    frame: Floats

    def __len__(self) -> int:
        return len(self.segment)


def lay_stations(segments: Segments, spacing_mm: float, longest_mm: float) -> Stations:
    """Lay stations: at the start of a segment once ``spacing_mm`` were travelled, and every ``longest_mm`` within it.

    A segment that turns off the one before, or follows a rapid or another cutter, gets one in any case.
    """
    count = len(segments)
    number = np.zeros(count, np.int64)
    kernels.count_stations(
        segments.ends, segments.shape, segments.rapid, segments.length_mm, spacing_mm, longest_mm, math.cos(0.17), number
    )
    first = np.concatenate(([0], np.cumsum(number)))
    segment = np.repeat(np.arange(count), number)
    share = (np.arange(len(segment)) - first[segment]) / np.maximum(1, number[segment])
    return Stations(first, segment, _frames(segments, segment, share))


def _frames(segments: Segments, segment: Ints, share: Floats) -> Floats:
    ends, length = segments.ends[segment], segments.length_mm[segment]
    point = ends[:, :3] + share[:, None] * (ends[:, 6:9] - ends[:, :3])
    axis = ends[:, 3:6] + share[:, None] * (ends[:, 9:12] - ends[:, 3:6])
    axis /= np.linalg.norm(axis, axis=1, keepdims=True)
    step = np.maximum(length, 1e-9)[:, None]
    feed = (ends[:, 6:9] - ends[:, :3]) / step
    turn = (ends[:, 9:12] - ends[:, 3:6]) / step
    across = np.cross(axis, feed)
    size = np.linalg.norm(across, axis=1)
    # Plunging: any direction square to the axis serves.
    plunge = size < 1e-6
    least = np.eye(3)[np.argmin(np.abs(axis), axis=1)]
    across[plunge] = np.cross(axis, least)[plunge]
    across /= np.linalg.norm(across, axis=1, keepdims=True)
    return np.ascontiguousarray(np.hstack((point, axis, across, feed, turn)))


def seconds_of(segments: Segments, motion: PartMotion, seconds: npt.NDArray[np.float64]) -> Floats:
    """Return the time of each segment [s] from the time of each motion (nan where none is known)."""
    start = np.where(motion.motion[segments.before] == motion.motion[segments.row], motion.fraction[segments.before], 0.0)
    return np.asarray(seconds[motion.motion[segments.row]] * (motion.fraction[segments.row] - start))
