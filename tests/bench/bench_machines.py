"""The same forty small jobs on every machine that ships: how many are released, and how long they take.

Run: python tests/bench/bench_machines.py
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
from test_machines_end_to_end import HOLED, MACHINES, SMALL, in_inch  # noqa: E402

OUTLINES = (
    'shape = "circle"\ndiameter = 10.0',
    'shape = "rectangle"\nsize = [12.0, 8.0]\ncorner_radius = 1.0',
    HOLED,
    'shape = "slot"\nsize = [12.0, 5.0]',
)
TILTS = (
    "",
    "lead = 15.0",
    "lean = -14.0",
    "lead = 8.0\nlean = 12.0",
    'axis = "fixed"\nfixed = [0.15, -0.1, 1.0]',
)
PATTERNS = ("raster", "graded", "even")
DIRECTIONS = (0.0, 90.0, 37.0, -120.0)


def job(number: int, machine: str) -> str:
    """Return the text of one of the forty jobs; every ninth is in inch."""
    pattern = PATTERNS[number % 3]
    text = job_text(
        **{
            **SMALL,
            "machine": machine,
            "outline": OUTLINES[number % 4],
            "tilt": TILTS[number % 5],
            "pattern": pattern,
            "direction": DIRECTIONS[number // 3 % 4],
            "way": "both" if pattern == "even" or number // 2 % 2 == 0 else "one-way",
            "a": (0.012, 0.02, 0.006)[number % 3],
            "extra_part": ("", "b = 0.009\nrotate = 25.0")[number // 5 % 2],
            "diameter": (6.0, 4.0)[number // 7 % 2],
        }
    )
    return in_inch(text) if number % 9 == 4 else text


def main() -> None:
    from anticlast import pipeline

    released, began = 0, time.perf_counter()
    with tempfile.TemporaryDirectory() as folder:
        for number in range(40):
            for machine in MACHINES:
                path = Path(folder) / "job.toml"
                path.write_text(job(number, machine), encoding="utf-8")
                made = pipeline.make(path, Path(folder) / "out", grid_mm=0.3)
                released += made.released
                if not made.released:
                    print(number, machine, [finding.message for finding in made.findings if not finding.ok])
    print(f"{released} of {40 * len(MACHINES)} released in {time.perf_counter() - began:.0f} s")


if __name__ == "__main__":
    main()
