"""Time, memory and tightness of the virtual cut on hand-made passes over 100 x 100 mm, 0.1 mm grid.

Run: python tests/bench/bench_virtual_cut.py [SIDE_MM]
Each case runs twice; the first run may compile. Prints the figures; nothing here passes or fails.
"""

from __future__ import annotations

import math
import sys
import time
from pathlib import Path

import numpy as np

try:
    import resource
except ImportError:  # not on Windows
    resource = None  # type: ignore[assignment]

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "src"), str(ROOT / "tests")]

from anticlast.outline import rectangle  # noqa: E402
from anticlast.proof.virtual_cut import measure, scallop_map  # noqa: E402
from anticlast.saddle import Saddle  # noqa: E402
from test_virtual_cut import ball, ball_passes, job, mill, mill_passes  # noqa: E402

RADIUS, STEP, PIECE = 3.0, 0.34, 0.27
SADDLE = Saddle(0.004, 0.004, 0.0)


def peak_mb() -> float:
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0 if resource else math.nan


def report(name: str, made, motion, grid: float) -> None:
    for attempt in ("first", "again"):
        wall, cpu = time.perf_counter(), time.process_time()
        cut = measure(made, motion, grid)
        wall, cpu = time.perf_counter() - wall, time.process_time() - cpu
        print(
            f"{name}, {len(motion.tip_mm) - 1} pieces, {attempt}: {wall:.2f} s ({cpu:.2f} s of processor time), "
            f"highest {cut.highest_mm * 1e3:.3f} um, bound +{(cut.bound_mm - cut.highest_mm) * 1e6:.0f} nm, "
            f"gouge {cut.gouge.deepest_mm * 1e3:.3f} um, peak memory {peak_mb():.0f} MB"
        )
    assert scallop_map(cut).height_mm.size > 0


def main() -> None:
    side = float(sys.argv[1]) if len(sys.argv) > 1 else 100.0
    half = 0.5 * side
    print(f"memory before the first case: {peak_mb():.0f} MB")
    across = np.arange(-half - 1.0, half + 1.0 + STEP, STEP)
    outline = rectangle((side, side))
    motion = ball_passes(SADDLE, RADIUS, math.pi / 2, across, half + 1.0, PIECE)
    report("ball, R 3", job(SADDLE, outline, ball(RADIUS), 0.3, limit=0.005), motion, 0.1)
    deep = ball_passes(SADDLE, RADIUS, math.pi / 2, across, half + 1.0, PIECE, lift=-2.0)
    report("ball, 2 mm too deep", job(SADDLE, outline, ball(RADIUS), 0.3, limit=0.005), deep, 0.1)
    cutter = mill(4.0, 1.0)
    lead = math.asin(2.0 * SADDLE.a_per_mm * 4.0) + math.radians(1.0)
    strips = mill_passes(SADDLE, cutter, lead, np.arange(-half - 1.0, half + 3.0, 2.0), half + 1.0, 0.5)
    report("bull, R 4 r 1, leaned", job(SADDLE, outline, cutter, 0.3, limit=0.01), strips, 0.1)


if __name__ == "__main__":
    main()
