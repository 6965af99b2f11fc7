"""Read-back motion as the stock field's kernels take it: straight segments of the cutter, and stations along them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from anticlast.stock import _sweep_kernels as kernels
from anticlast.stock.grid import turned_points
from anticlast.tolerances import STOCK_CHORD_MM, STOCK_REACH_MM

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.records import Bools, Floats, Ints, PartMotion

# The shank end of the flutes is held too when pieces are joined, and a point as far up as a holder usually is.
_REACH_MM = 60.0
_MOST_JOINED = 64
# Turn of the feed direction that calls for a station of its own.
_SHARP_RAD = 0.1745


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
    share : (k, 2)
        How far along its motion the segment starts and ends, 0 to 1.
    rapid : (k,) bool
    length_mm : (k,)
        Travel of the reference point.
    """

    ends: Floats
    shape: Ints
    row: Ints
    share: Floats
    rapid: Bools
    length_mm: Floats

    def __len__(self) -> int:
        return len(self.shape)


def take_segments(
    motion: PartMotion, cutters: Sequence[Cutter], moving: Bools | None = None, *,
    chord_mm: float = STOCK_CHORD_MM, longest_mm: float = math.inf,
) -> Segments:  # fmt: skip
    """Join pieces of part motion into segments, as few as stay near them.

    Pieces are joined only within one motion, as long as the reference point stays within ``chord_mm`` of where it was and a
    point 60 mm up the axis within ``STOCK_REACH_MM``. Feed segments longer than ``longest_mm`` are split again.

    Parameters
    ----------
    motion : PartMotion
    cutters : sequence of Cutter
        Motion with any other tool is left out.
    moving : (m,) bool, optional
        Rows to use; all that move if not given.
    chord_mm, longest_mm : float
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
        tip,
        axis,
        height,
        motion.motion,
        motion.fraction,
        live,
        chord_mm,
        STOCK_REACH_MM,
        _REACH_MM,
        _MOST_JOINED,
        last,
    )
    pairs = last[: 2 * kept].reshape(-1, 2)
    before, row = pairs[:, 0], pairs[:, 1]
    up = height[row][:, None]
    ends = np.hstack((tip[before] + up * axis[before], axis[before], tip[row] + up * axis[row], axis[row]))
    begun = np.where(motion.motion[before] == motion.motion[row], motion.fraction[before], 0.0)
    share = np.column_stack((begun, motion.fraction[row]))
    length = np.linalg.norm(ends[:, 6:9] - ends[:, :3], axis=1)
    rapid = np.asarray(motion.rapid[row])
    parts = np.where(rapid, 1, np.maximum(1, np.ceil(length / longest_mm))).astype(np.int64)
    of, low, high = _split(parts)
    return Segments(
        ends=np.ascontiguousarray(np.hstack((_between(ends[of], low), _between(ends[of], high)))),
        shape=shape[row][of],
        row=row[of],
        share=np.column_stack([share[of, 0] + part * (share[of, 1] - share[of, 0]) for part in (low, high)]),
        rapid=rapid[of],
        length_mm=length[of] / parts[of],
    )


def _split(parts: Ints) -> tuple[Ints, Floats, Floats]:
    """Return which segment each part comes of, and the shares of it where the part starts and ends."""
    of = np.repeat(np.arange(len(parts)), parts)
    place = np.arange(len(of)) - (np.cumsum(parts) - parts)[of]
    return of, place / parts[of], (place + 1) / parts[of]


def _between(ends: Floats, share: Floats) -> Floats:
    """Return point and unit axis (n, 6) at shares of segments (n, 12)."""
    part = share[:, None]
    # The far end is taken as it is, so that parts join without a gap.
    pose = np.where(part == 1.0, ends[:, 6:], ends[:, :6] + part * (ends[:, 6:] - ends[:, :6]))
    pose[:, 3:] /= np.linalg.norm(pose[:, 3:], axis=1, keepdims=True)
    return pose


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
    """Starts of feed segments where the cutter's front is looked at.

    Attributes
    ----------
    first : (k + 1,) int64
        Station rows of segment k: first[k] to first[k + 1], none or one.
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


def lay_stations(segments: Segments, spacing_mm: float) -> Stations:
    """Lay a station at the start of each feed segment, but where less than ``spacing_mm`` was travelled since the last.

    A segment that turns off the one before by ten degrees, or follows a rapid or another cutter, gets one in any case.
    """
    number = np.zeros(len(segments), np.int64)
    kernels.mark_stations(
        segments.ends,
        segments.shape,
        segments.rapid,
        segments.length_mm,
        spacing_mm,
        math.cos(_SHARP_RAD),
        number,
    )
    segment = np.flatnonzero(number)
    return Stations(np.concatenate(([0], np.cumsum(number))), segment, _frames(segments, segment))


def _frames(segments: Segments, segment: Ints) -> Floats:
    ends = segments.ends[segment]
    point, axis = ends[:, :3], ends[:, 3:6]
    step = segments.length_mm[segment][:, None]
    feed = (ends[:, 6:9] - ends[:, :3]) / step
    turn = (ends[:, 9:12] - ends[:, 3:6]) / step
    across = np.cross(axis, feed)
    # Plunging: any direction square to the axis serves.
    plunge = np.linalg.norm(across, axis=1) < 1e-6
    least = np.eye(3)[np.argmin(np.abs(axis), axis=1)]
    across[plunge] = np.cross(axis, least)[plunge]
    across /= np.linalg.norm(across, axis=1, keepdims=True)
    return np.ascontiguousarray(np.hstack((point, axis, across, feed, turn)))


def seconds_of(segments: Segments, motion: PartMotion, seconds: Floats) -> Floats:
    """Return the time of each segment [s] from the time of each motion (nan where none is known)."""
    return np.asarray(seconds[motion.motion[segments.row]] * (segments.share[:, 1] - segments.share[:, 0]))
