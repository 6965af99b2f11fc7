"""What the cutter meets along read-back motion: depth, width, engaged arc, chip, cutting speed, cutting force.

The stock field is cut in time order; before each stretch of feed motion the cutter's front is held against the stock as it
stands. Volumes come from what the columns lose, so they add up; arcs, chips and forces come from points of the front,
scaled to those volumes. Derivations and what is left out: docs/theory-stock.md.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

from anticlast.stock import _load_kernels as kernels
from anticlast.stock.field import LEAST_COSINE, StockField, runs
from anticlast.stock.rings import ANGLES, ring_table, rings_of
from anticlast.stock.smooth import along_path, carried, windowed, windowed_extremes
from anticlast.stock.sweep import Segments, lay_stations

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.records import Bools, Floats
    from anticlast.saddle import Saddle
    from anticlast.stock.watch import Watch

# A station once a cell was travelled; segments no longer than so many cells.
_STATION_CELLS: Final = 1.0
LONGEST_CELLS: Final = 4.0
# What columns lose is spread over this much path to either side, in cells: a column beside a wall goes all at once.
_WINDOW_CELLS = 5.0
# The front's own section and what the columns lost agree within this factor, or the front was not seen well enough.
_MOST_SCALE: Final = 4.0
_STATION_BLOCK = 2048


@dataclass(frozen=True, slots=True)
class Engagement:
    """What the cutter meets, one row a segment of motion. Zero where nothing is cut; nan where it is not known.

    Attributes
    ----------
    volume_mm3 : (k,)
        Taken by the segment, rapids too.
    section_mm2 : (k,)
        Taken per mm of feed, over a few cells of path.
    depth_mm : (k,)
        Along the cutter axis, or along the surface normal where that was asked for.
    width_mm : (k,)
        Section over depth: the mean width of what is taken.
    entry_rad, exit_rad : (k,)
        Where on the cutter's turn the engaged arc begins and ends, clockwise seen from the spindle's side, from the left
        of the feed: 0 to pi is the front half of a slot.
    arc_rad : (k,)
        Engaged angle.
    feed_mm_min, removal_mm3_min : (k,)
    chip_mean_mm, chip_max_mm : (k,)
        Chip thickness: feed per tooth times the feed's share along the normal of the cutting surface.
    speed_slow_mm_min, speed_fast_mm_min : (k,)
        Cutting speed at the engaged points nearest to and furthest from the axis; 0 where the axis itself is engaged.
    force_mean_n, force_peak_n : (k, 2)
        Tangential force, lowest and highest by the laws given; mean over a turn, and at the worst angle with teeth that do
        not twist.
    torque_mean_nmm, torque_peak_nmm : (k, 2)
    power_w : (k, 2)
        Mean torque times spindle speed.
    rpm : (k,)
    scale : (k,)
        Section by volume over section by the front's points: how well the front was seen; forces are scaled by it.
    """

    volume_mm3: Floats
    section_mm2: Floats
    depth_mm: Floats
    width_mm: Floats
    entry_rad: Floats
    exit_rad: Floats
    arc_rad: Floats
    feed_mm_min: Floats
    removal_mm3_min: Floats
    chip_mean_mm: Floats
    chip_max_mm: Floats
    speed_slow_mm_min: Floats
    speed_fast_mm_min: Floats
    force_mean_n: Floats
    force_peak_n: Floats
    torque_mean_nmm: Floats
    torque_peak_nmm: Floats
    power_w: Floats
    rpm: Floats
    scale: Floats


def follow(
    field: StockField, segments: Segments, cutters: Sequence[Cutter], saddle: Saddle, *, seconds: Floats, rpm: Floats,
    laws: Floats, along_normal: Bools | None = None, breaks: Sequence[int] = (),
    at_break: Callable[[int], None] | None = None, watch: Watch | None = None,
) -> Engagement:  # fmt: skip
    """Cut the field with all segments in time order and say what the cutter meets.

    Parameters
    ----------
    field : StockField
        Is cut.
    segments : Segments
        Made from ``cutters``, none longer than ``LONGEST_CELLS`` of the field's spacing.
    saddle : Saddle
        Finished surface.
    seconds : (k,)
        Time of each segment; nan where unknown.
    rpm : (k,)
        Spindle speed of each segment, >= 0.
    laws : (m, 4)
        Laws of the specific cutting force, see ``loads.laws_of``; m = 0 if none is known.
    along_normal : (k,) bool, optional
        Segments whose depth counts along the surface normal.
    breaks : sequence of int
        Segments before which ``at_break`` is called, with the segment.
    watch : Watch, optional
    """
    spacing = field.grid.spacing_mm
    stations = lay_stations(segments, _STATION_CELLS * spacing)
    rings = [rings_of(cutter) for cutter in cutters]
    edge, inner, outer = (
        np.array([getattr(ring, name) for ring in rings]).reshape(len(rings), -1)
        for name in ("edge_mm", "inner_mm", "outer_mm")
    )
    rim = np.array([ring.rim for ring in rings]).reshape(len(rings), -1, 2)
    places = ring_table(cutters)
    flutes = np.array([cutter.flutes for cutter in cutters], np.int64)
    feed = np.divide(
        60.0 * segments.length_mm, seconds, out=np.full(len(segments), np.nan), where=seconds > 0.0
    )
    tooth = np.divide(feed, rpm * flutes[segments.shape], out=np.full(len(segments), np.nan), where=rpm > 0.0)
    tooth[segments.rapid] = np.nan
    table = np.zeros((len(stations), kernels.COLUMNS))
    volume, low, high = np.zeros(len(segments)), np.zeros(len(segments)), np.zeros(len(segments))
    for first, after in runs(segments, stations, breaks):
        if at_break is not None and first in breaks:
            at_break(first)
        taken = field.run(
            segments, cutters, saddle, (first, after), along_normal=along_normal, stations=stations, rings=places,
            angles=ANGLES, watch=watch,
        )  # fmt: skip
        volume[first:after], low[first:after], high[first:after] = (
            taken.volume_mm3,
            taken.low_mm,
            taken.high_mm,
        )
        rows = slice(int(stations.first[first]), int(stations.first[after]))
        of = stations.segment[rows]
        arguments = (
            taken.hits, stations.frame[rows], segments.shape[of], places, edge, inner, outer, rim, flutes, tooth[of], laws,
            LEAST_COSINE, table[rows],
        )  # fmt: skip
        _in_blocks(len(of), arguments)
    found = carried(table, stations.first, segments.rapid)
    return _rows(segments, volume, low, high, feed, rpm, found, spacing)


def _in_blocks(count: int, arguments: tuple) -> None:
    blocks = range(0, count, _STATION_BLOCK)
    with ThreadPoolExecutor(4) as pool:
        list(
            pool.map(
                lambda start: kernels.station_loads(start, min(count, start + _STATION_BLOCK), *arguments),
                blocks,
            )
        )


def _rows(
    segments: Segments,
    volume: Floats,
    low: Floats,
    high: Floats,
    feed: Floats,
    rpm: Floats,
    found: Floats,
    spacing: float,
) -> Engagement:
    path = along_path(segments)
    reach = _WINDOW_CELLS * spacing
    feeding = ~segments.rapid
    section = windowed(path, np.where(feeding, volume, 0.0), segments.length_mm, reach)
    seen = windowed(path, found[:, kernels.AREA] * segments.length_mm, segments.length_mm, reach)
    # What neighbours took is spread over this segment only if it meets stock itself.
    meets = (volume > 0.0) | (found[:, kernels.AREA] > 0.0)
    cutting = feeding & meets & (section > 0.0) & (segments.length_mm > 0.0)
    lowest, highest = windowed_extremes(path, low, high, reach)
    depth = np.where(cutting & (highest > lowest), highest - lowest, 0.0)
    scale = np.divide(section, seen, out=np.zeros(len(section)), where=seen > 0.0)
    good = cutting & (seen > 0.0) & (found[:, kernels.AREA] > 0.0)
    scale = np.where(good, np.clip(scale, 1.0 / _MOST_SCALE, _MOST_SCALE), 0.0)

    def column(index: int) -> Floats:
        return np.where(good, found[:, index], 0.0)

    def pair(index: int) -> Floats:
        return np.asarray(found[:, index : index + 2] * scale[:, None])

    turn = 2.0 * math.pi * rpm
    torque = pair(kernels.TORQUE_LOW)
    return Engagement(
        volume_mm3=volume,
        section_mm2=np.where(cutting, section, 0.0),
        depth_mm=depth,
        width_mm=np.divide(section, depth, out=np.zeros(len(depth)), where=depth > 0.0),
        entry_rad=column(kernels.ENTRY),
        exit_rad=column(kernels.EXIT),
        arc_rad=column(kernels.ARC),
        feed_mm_min=np.where(feeding, feed, np.nan),
        removal_mm3_min=np.where(cutting, section * feed, 0.0),
        chip_mean_mm=column(kernels.CHIP_MEAN),
        chip_max_mm=column(kernels.CHIP_MAX),
        speed_slow_mm_min=column(kernels.SLOW_MM) * turn,
        speed_fast_mm_min=column(kernels.FAST_MM) * turn,
        force_mean_n=pair(kernels.MEAN_LOW),
        force_peak_n=pair(kernels.PEAK_LOW),
        torque_mean_nmm=torque,
        torque_peak_nmm=pair(kernels.TORQUE_PEAK_LOW),
        power_w=torque * 1e-3 * turn[:, None] / 60.0,
        rpm=rpm,
        scale=scale,
    )
