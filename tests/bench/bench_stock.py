"""Time and memory of the stock field: a job of 200,000 blocks, roughed, semi-finished and finished, with loads of every block.

Run: python tests/bench/bench_stock.py
Prints the figures; nothing here passes or fails.
"""

from __future__ import annotations

import resource
import time
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from anticlast import outline
from anticlast.cutter import Cutter
from anticlast.records import PartMotion
from anticlast.saddle import Saddle
from anticlast.stock import field as fields
from anticlast.stock.engagement import LONGEST_CELLS, follow
from anticlast.stock.field import StockField
from anticlast.stock.grid import ColumnGrid
from anticlast.stock.sweep import take_segments

SIDE, TOP, BOTTOM = 100.0, 12.5, -20.0
SADDLE = Saddle(0.005, 0.005, 0.0)
CUTTERS = (
    Cutter(1, "bull", 5.0, 1.0, 3, 25.0, 5.0, 40.0, ((16.0, 20.0), (25.0, 25.0))),
    Cutter(2, "ball", 4.0, 4.0, 2, 20.0, 4.0, 40.0, ((16.0, 20.0), (25.0, 25.0))),
    Cutter(3, "ball", 3.0, 3.0, 2, 18.0, 3.0, 40.0, ((16.0, 20.0), (25.0, 25.0))),
)


def raster(step: float, block: float, lift: float, radius: float) -> np.ndarray:
    """Tips of an upright ball over the surface lifted along its normal, passes along x."""
    rows = []
    for number, y in enumerate(np.arange(-SIDE / 2, SIDE / 2, step)):
        x = np.arange(-SIDE / 2, SIDE / 2, block)
        xy = np.column_stack((x if number % 2 == 0 else x[::-1], np.full(len(x), y)))
        centre = SADDLE.offset(xy, radius + lift)
        rows.append(centre - np.array([0.0, 0.0, radius]))
    return np.concatenate(rows)


def layers(depth: float, step: float, lift: float, radius: float) -> np.ndarray:
    """Tips of an upright bull end mill in flat layers: over each place, no deeper than the lifted surface around it."""
    rows = []
    for z in np.arange(TOP - depth, -12.5, -depth):
        for number, y in enumerate(np.arange(-SIDE / 2, SIDE / 2, step)):
            x = np.arange(-SIDE / 2, SIDE / 2, 2.0)
            around = np.linspace(0, 2 * np.pi, 16)
            high = np.max(
                [SADDLE.height(x + radius * np.cos(t), y + radius * np.sin(t)) for t in around], axis=0
            )
            tips = np.column_stack((x, np.full(len(x), y), np.maximum(z, high + lift)))
            rows.append(tips if number % 2 == 0 else tips[::-1])
    return np.concatenate(rows)


def program(blocks: int) -> PartMotion:
    rough = layers(3.0, 4.0, 0.6, 5.0)
    semi = raster(1.2, 0.5, 0.25, 4.0)
    left = blocks - len(rough) - len(semi)
    finish = raster(0.34, SIDE * (SIDE / 0.34) / left, 0.0, 3.0)
    tips = np.concatenate((rough, semi, finish))
    count = len(tips)
    tool = np.repeat([1, 2, 3], [len(rough), len(semi), len(finish)])
    rapid = np.zeros(count, bool)
    rapid[np.flatnonzero(np.diff(tool)) + 1] = True
    motion = np.arange(count) - 1
    fraction = np.ones(count)
    fraction[rapid] = 0.0  # a new cutter stands elsewhere without motion
    fraction[0] = 0.0
    axis = np.tile([0.0, 0.0, 1.0], (count, 1))
    return PartMotion(tips, axis, np.arange(count), rapid, tool, motion, fraction)


def once(motion: PartMotion, spacing: float, workers: int) -> np.ndarray:
    fields.ThreadPoolExecutor = lambda _: ThreadPoolExecutor(workers)  # type: ignore[attr-defined, misc, assignment]
    blank = outline.rectangle((SIDE + 6.0, SIDE + 6.0))
    grid = ColumnGrid.over(blank, spacing)
    field = StockField.of_heights(grid, grid.areas_mm2(blank), BOTTOM, np.full(grid.shape, TOP))
    before = field.volume_mm3()
    began = time.perf_counter()
    segments = take_segments(motion, CUTTERS, longest_mm=LONGEST_CELLS * spacing)
    joined = time.perf_counter()
    for cuts_only in (True, False):
        own = field.copy()
        start, cpu = time.perf_counter(), time.process_time()
        if cuts_only:
            for span in fields.runs(segments, None):
                own.run(segments, CUTTERS, SADDLE, span)
        else:
            found = follow(
                own, segments, CUTTERS, SADDLE, seconds=segments.length_mm / 25.0, rpm=np.full(len(segments), 16000.0),
                laws=np.array([[264.0, 0.348, 0.0, 0.0], [0.0, 0.0, 243.77, 7.53]]),
            )  # fmt: skip
            print(f"    peak force {found.force_peak_n.max(axis=0)} N")
        took, cpu = time.perf_counter() - start, time.process_time() - cpu
        print(
            f"  {'cut only' if cuts_only else 'with loads'}: {took:6.2f} s ({cpu:.2f} s of processor), {len(segments)} segments,"
            f" {before - own.volume_mm3():.1f} mm3 taken, {grid.rows} x {grid.columns} columns of {spacing} mm,"
            f" {workers} threads, joining {joined - began:.2f} s,"
            f" {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MB"
        )
    return own.high_mm


def main() -> None:
    motion = program(200_000)
    print(f"{len(motion.line)} blocks: {np.bincount(motion.tool)[1:]} by cutter")
    once(program(25_000), 0.5, 2)  # compiles
    for spacing in (0.5, 0.33):
        print(f"grid {spacing} mm")
        one = once(motion, spacing, 1)
        two = once(motion, spacing, 2)
        print(f"  same to the last bit with one and two threads: {np.array_equal(one, two)}")


if __name__ == "__main__":
    main()
