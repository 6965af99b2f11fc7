"""Time of a comparison, how far it looked, and what the best case saves.

Run: python tests/bench/bench_compare.py [CORES]
Prints the figures; nothing here passes or fails.
"""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests"))

from conftest import job_text  # noqa: E402

BULL = """\
[[cutter]]
number = 2
shape = "bull"
diameter = 6.0
corner_radius = 0.5
flutes = 2
flute_length = 18.0
shank_diameter = 6.0
stickout = 34.0
holder = [[16.0, 20.0], [32.0, 25.0]]
"""
COMMON = {
    "outline": 'shape = "rectangle"\nsize = [60.0, 60.0]', "a": 0.005, "top": 8.0, "bottom": -16.0,
    "limit": "scallop = 0.005", "tolerance": 0.002,
}  # fmt: skip
JOBS = {
    "trunnion-ac, ball 6 and bull 6, 60 x 60 mm, 5 um": ({"tilt": "lead = 15.0"}, BULL),
    "rotary-a, ball 6, b = 0.6 a, turned 20 degrees": (
        {"machine": "rotary-a", "tilt": "lean = 15.0", "extra_part": "b = 0.003\nrotate = 20.0", "direction": 0.0}, "",
    ),
    "mill-3, ball 6": ({"machine": "mill-3", "direction": 0.0}, ""),
}  # fmt: skip


def directions() -> None:
    """Time and gain of the best feed direction over some surfaces."""
    import math

    from anticlast import outline
    from anticlast.passes.direction import best_direction, cut_length_mm
    from anticlast.saddle import Saddle

    print("best feed direction (60 x 40 mm, off the saddle point by 10, 5 mm; ball 6, 5 um)")
    for a, b, rotate in ((0.005, 0.005, 0.0), (0.01, 0.004, 20.0), (0.004, 0.012, 60.0), (0.02, 0.01, -35.0)):
        saddle, part = Saddle(a, b, math.radians(rotate)), outline.rectangle((60.0, 40.0), 0.0, (10.0, 5.0))
        began = time.perf_counter()
        found = best_direction(saddle, part, 3.0, 0.005)
        took = time.perf_counter() - began
        tried = [
            cut_length_mm(saddle, part, 3.0, 0.005, math.radians(d), "pass by pass") for d in range(0, 180, 5)
        ]
        print(
            f"  a {a} b {b} rotate {rotate:5.1f}: {math.degrees(found.direction_rad):6.1f} deg, {took:.2f} s, shorter than"
            f" the worst by {100 * (1 - found.cut_length_mm / max(tried)):.1f} %"
        )


def comparisons(cores: int | None) -> None:
    """Wall time and outcome of whole comparisons, without the proof of the best."""
    from anticlast.compare.search import compare
    from anticlast.job import load_job

    for title, (changes, more) in JOBS.items():
        with tempfile.TemporaryDirectory() as name:
            path = Path(name) / "job.toml"
            text = job_text(**{**COMMON, **changes}).replace("[[operation]]", more + "[[operation]]")
            path.write_text(text, encoding="utf-8")
            began = time.perf_counter()
            (one,) = compare(load_job(path), prove=0, cores=cores)
            took = time.perf_counter() - began
        tried = len(one.ranked) + len(one.refused)
        print(
            f"{title}: {tried} cases ({len(one.refused)} cannot be cut, {one.not_tried} not tried) in {took:.1f} s"
        )
        for outcome in (one.best, one.own):
            if outcome is not None and outcome.costs is not None:
                print(f"  {outcome.costs.time_s:8.1f} s  {outcome.case.words}")
        print(f"  {one.direction.line()}")


if __name__ == "__main__":
    directions()
    comparisons(int(sys.argv[1]) if len(sys.argv) > 1 else None)
