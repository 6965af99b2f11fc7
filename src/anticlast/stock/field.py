"""The stock as it stands: columns parallel to part Z, each a few pieces of material, cut by read-back motion in time order.

Columns stand on a plan grid that is turned against the part (``grid.TURN_RAD``). Cells that the blank's edge crosses count with
the area inside. Bands of rows are cut in threads, each in time order by itself, so the result does not depend on their
number. Errors and their sizes: docs/theory-stock.md.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Final

import numpy as np

from anticlast.saddle import Saddle
from anticlast.stock import _field_kernels as kernels
from anticlast.stock.grid import ColumnGrid, turned_surface
from anticlast.stock.sweep import Segments, Stations, shape_table
from anticlast.stock.watch import Watch

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.outline import Outline
    from anticlast.records import Bools, Bytes, Floats, Ints

PIECES: Final = 4  # of material that a column can hold
_LEAST_BAND_ROWS, _BANDS = 12, 16
# Segments, and stations, worked through at a time: bounds the memory of what a run returns.
_RUN_SEGMENTS, _RUN_STATIONS = 8_000, 8_000
# A point of the cutter's front counts as cutting when the feed is within 87.7 degrees of its normal: nearer to square the
# chip is thinner than 1/25 of the feed per tooth, and a groove read between columns would look like material.
LEAST_COSINE: Final = 0.04
# The front is looked at this share of the grid spacing ahead of where it is; three times as far before a wall.
_AHEAD_SHARE = 0.25
# Gap between a low end found between sub-poses and its bound, as a share of the grid spacing.
_CLOSE_SHARE = 0.01


@dataclass(slots=True)
class StockField:
    """Material of the blank as it stands. ``cut`` changes it; ``copy`` keeps a state.

    Attributes
    ----------
    grid : ColumnGrid
    high_mm, low_mm : (4, rows, columns)
        Part Z of the ends of each column's pieces of material, from the top one down.
    count : (rows, columns) int64
        Pieces in each column.
    area_mm2 : (rows, columns)
        Area of each cell inside the blank; 0 where there is none.
    owner : (rows, columns) int64
        Row of the part motion that lowered the column's top last, -1 where none did.
    left_in_mm3 : float
        Material that should have gone but had to be left, because a column held four pieces already.
    bands : tuple of (int, int)
        Rows (first, after) that are cut together.
    """

    grid: ColumnGrid
    high_mm: Floats
    low_mm: Floats
    count: Ints
    area_mm2: Floats
    owner: Ints
    left_in_mm3: float = 0.0
    bands: tuple[tuple[int, int], ...] = field(init=False, default=())

    def __post_init__(self) -> None:
        rows = self.grid.rows
        bands = max(1, min(_BANDS, rows // _LEAST_BAND_ROWS))
        edges = np.linspace(0, rows, bands + 1).astype(int).tolist()
        self.bands = tuple(zip(edges[:-1], edges[1:], strict=True))

    @classmethod
    def of_heights(cls, grid: ColumnGrid, area_mm2: Floats, bottom_mm: float, top_mm: Floats) -> StockField:
        """Return a field of one piece a column, from a flat bottom to a top (rows, columns) [mm]."""
        there = (area_mm2 > 0.0) & (top_mm > bottom_mm)
        high, low = np.zeros((PIECES, *grid.shape)), np.zeros((PIECES, *grid.shape))
        high[0], low[0] = np.where(there, top_mm, 0.0), np.where(there, bottom_mm, 0.0)
        return cls(
            grid,
            high,
            low,
            there.astype(np.int64),
            np.where(there, area_mm2, 0.0),
            np.full(grid.shape, -1, np.int64),
        )

    def copy(self) -> StockField:
        """Return a field of its own with the same material."""
        return StockField(
            self.grid, self.high_mm.copy(), self.low_mm.copy(), self.count.copy(), self.area_mm2,
            self.owner.copy(), self.left_in_mm3,
        )  # fmt: skip

    # ------------------------------------------------------------------------------ measures

    def lengths_mm(self, above_mm: Floats | float = -np.inf) -> Floats:
        """Return how much material each column holds above a height, (rows, columns) [mm]."""
        piece = np.arange(PIECES)[:, None, None] < self.count
        return np.asarray(
            np.sum(
                np.where(piece, np.maximum(self.high_mm - np.maximum(self.low_mm, above_mm), 0.0), 0.0),
                axis=0,
            )
        )

    def volume_mm3(self) -> float:
        """Return the volume of all material."""
        return float(np.sum(self.area_mm2 * self.lengths_mm()))

    def volume_above_mm3(self, saddle: Saddle, outline: Outline) -> float:
        """Return the volume that stands above the finished surface inside an outline."""
        x, y = self.grid.middles_xy()
        inside = np.minimum(self.grid.areas_mm2(outline), self.area_mm2)
        return float(np.sum(inside * self.lengths_mm(saddle.height(x, y))))

    def tops_mm(self) -> Floats:
        """Return part Z of the highest material of each column, nan where there is none, (rows, columns)."""
        return np.where(self.count > 0, self.high_mm[0], np.nan)

    # ------------------------------------------------------------------------------ cutting

    def run(
        self, segments: Segments, cutters: Sequence[Cutter], saddle: Saddle, span: tuple[int, int], *,
        cuts: Bools | None = None, along_normal: Bools | None = None, stations: Stations | None = None,
        rings: Floats | None = None, angles: int = 1, watch: Watch | None = None,
    ) -> Taken:  # fmt: skip
        """Cut with a run of segments in time order; see `Taken` for what comes back.

        Parameters
        ----------
        segments : Segments
            Made from ``cutters``.
        cutters : sequence of Cutter
        saddle : Saddle
            Finished surface, part coordinates; depths along its normal are taken from it.
        span : (first, after)
            Segments to cut with.
        cuts : (k,) bool, optional
            Segments that remove material; all if not given.
        along_normal : (k,) bool, optional
            Segments whose depth counts along the surface normal; the others along the cutter axis.
        stations, rings, angles
            Where the cutter's front is to be looked at, and the points on it: (shapes, rings, 4).
        watch : Watch, optional
            Bodies whose distance from the stock as it stands is to be followed.
        """
        first, after = span
        number = after - first
        whole = np.ones(len(segments), bool)
        cuts = whole if cuts is None else cuts
        along_normal = ~whole if along_normal is None else along_normal
        if stations is None:
            stations = Stations(
                np.zeros(len(segments) + 1, np.int64), np.empty(0, np.int64), np.empty((0, 15))
            )
        rings = np.zeros((len(cutters), 1, 4)) if rings is None else rings
        looked = int(stations.first[after] - stations.first[first])
        hits = np.zeros((looked, rings.shape[1], angles), np.uint8)
        taken = np.zeros((len(self.bands), number, 4))
        taken[:, :, 1], taken[:, :, 2] = np.inf, -np.inf
        table = (segments.ends, segments.shape, shape_table(cutters), segments.row, cuts, along_normal)
        spacing = self.grid.spacing_mm
        sampling = (
            stations.first,
            stations.frame,
            rings,
            _AHEAD_SHARE * spacing,
            LEAST_COSINE,
            _CLOSE_SHARE * spacing,
        )
        watching = (watch or Watch.nothing(len(self.bands))).arguments(segments.rapid, spacing)
        surface = turned_surface(saddle)

        # Every band gets its copy before any starts: rows that two bands read must not change under one of them.
        copies = [self._columns(band) for band in self.bands]

        def work(band: int) -> None:
            low_row, after_row = self.bands[band]
            grid = (self.grid.u0_mm, self.grid.v0_mm, spacing, low_row)
            answers = (after_row - low_row, low_row if low_row else -1, after_row)
            near, found = watch.of_band(band) if watch else (np.empty(0), np.empty((0, 7)))
            kernels.run_band(
                grid, answers, surface, copies[band], self.area_mm2[low_row:after_row],
                self.owner[low_row:after_row], table, span, sampling, watching, taken[band], hits, near, found,
            )  # fmt: skip

        with ThreadPoolExecutor(_workers()) as pool:
            list(pool.map(work, range(len(self.bands))))
        for (low_row, after_row), (high, low, count) in zip(self.bands, copies, strict=True):
            own = after_row - low_row
            self.high_mm[:, low_row:after_row], self.low_mm[:, low_row:after_row] = (
                high[:, :own],
                low[:, :own],
            )
            self.count[low_row:after_row] = count[:own]
        self.left_in_mm3 += float(taken[:, :, 3].sum())
        return Taken(
            volume_mm3=taken[:, :, 0].sum(axis=0),
            low_mm=taken[:, :, 1].min(axis=0, initial=np.inf),
            high_mm=taken[:, :, 2].max(axis=0, initial=-np.inf),
            hits=hits,
        )

    def _columns(self, band: tuple[int, int]) -> tuple[Floats, Floats, Ints]:
        """Return a copy of a band's material, with one row more for reading between rows."""
        rows = slice(band[0], min(band[1] + 1, self.grid.rows))
        return (
            np.ascontiguousarray(self.high_mm[:, rows]),
            np.ascontiguousarray(self.low_mm[:, rows]),
            self.count[rows].copy(),
        )


@dataclass(frozen=True, slots=True)
class Taken:
    """What a run of segments took, one row a segment.

    Attributes
    ----------
    volume_mm3 : (n,)
    low_mm, high_mm : (n,)
        Where what was taken begins and ends: over the tip along the cutter axis, or over the finished surface along its
        normal. inf and -inf where nothing was taken.
    hits : (stations of the run, rings, angles) uint8
        1 where a point of the cutter's front stood before material.
    """

    volume_mm3: Floats
    low_mm: Floats
    high_mm: Floats
    hits: Bytes


def runs(segments: Segments, stations: Stations | None, breaks: Sequence[int] = ()) -> list[tuple[int, int]]:
    """Split all segments into spans (first, after) of bounded memory; a span never reaches over one of ``breaks``."""
    edges = sorted({0, len(segments), *(int(place) for place in breaks)})
    spans = []
    for low, high in zip(edges[:-1], edges[1:], strict=True):
        first = low
        while first < high:
            after = min(high, first + _RUN_SEGMENTS)
            if stations is not None:
                full = (
                    int(np.searchsorted(stations.first, stations.first[first] + _RUN_STATIONS, side="right"))
                    - 1
                )
                after = min(after, max(first + 1, full))
            spans.append((first, after))
            first = after
    return spans


def _workers() -> int:
    return max(1, min(8, os.cpu_count() or 1))
