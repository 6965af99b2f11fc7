"""Time and memory of the whole main job, and how near the passes come to the length floor.

Run: python tests/bench/bench_make.py
Prints the figures; nothing here passes or fails.
"""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests"))

from conftest import job_text  # noqa: E402

STANDARD = {
    "outline": 'shape = "rectangle"\nsize = [100.0, 100.0]',
    "a": 0.005,
    "top": 13.0,
    "bottom": -20.0,
    "margin": 3.0,
    "limit": "scallop = 0.005",
    "tolerance": 0.002,
    "tilt": "lead = 15.0",
    "pattern": "raster",
}
# The shipped trunnion turns 30 degrees one way; the standard job is 100 mm wide, so the travel is opened up for it.
WIDE = "machine.toml"


def wide_machine(folder: Path) -> None:
    text = (ROOT / "post" / "trunnion-ac.toml").read_text(encoding="utf-8")
    text = text.replace("limits = [-75.0, 75.0]", "limits = [-200.0, 200.0]").replace(
        "[0.0, 260.0]", "[0.0, 400.0]"
    )
    (folder / WIDE).write_text(text, encoding="utf-8")


def child(job: str, out: str) -> None:
    from anticlast import pipeline

    began = time.perf_counter()
    stamps: list[tuple[str, float]] = []
    made = pipeline.make(
        job, out, grid_mm=0.1, progress=lambda text: stamps.append((text, time.perf_counter()))
    )
    took = time.perf_counter() - began
    stamps.append(("end", time.perf_counter()))
    for (text, start), (_, stop) in zip(stamps, stamps[1:], strict=False):
        print(f"    {stop - start:6.2f} s  {text}")
    entry = made.operations[0] if made.operations else None
    print(
        json.dumps(
            {
                "released": made.released,
                "seconds": round(took, 2),
                "memory_mb": round(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024),
                "blocks": made.program.blocks if made.program else 0,
                "passes": entry.passes if entry else 0,
                "predicted_um": round(entry.scallop_predicted_mm * 1000, 3) if entry else None,
                "proven_um": round(made.proof.scallop_max_mm * 1000, 3) if made.proof else None,
                "bound_um": round(made.proof.scallop_bound_mm * 1000, 3) if made.proof else None,
                "length_over_floor": round(entry.cut_length_mm / entry.length_floor_mm, 4) if entry else None,
                "failed": [finding.message for finding in made.findings if not finding.ok],
            }
        )
    )


def help_time() -> None:
    times = []
    for _ in range(5):
        began = time.perf_counter()
        subprocess.run(
            [sys.executable, "-m", "anticlast.cli", "--help"], check=True, stdout=subprocess.DEVNULL
        )
        times.append(time.perf_counter() - began)
    print(f"anticlast --help: {sorted(times)[2]:.2f} s, median of 5")


def main() -> None:
    help_time()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        wide_machine(folder)
        job = folder / "job.toml"
        for title, changes in {
            "standard job, first run (compiles)": {},
            "standard job, warm": {},
            "graded, one way": {"pattern": "graded", "way": "one-way"},
            "3-axis graded": {"pattern": "graded", "machine": "mill-3", "tilt": ""},
        }.items():
            job.write_text(job_text(**{**STANDARD, "machine": WIDE, **changes}), encoding="utf-8")
            print(title)
            subprocess.run([sys.executable, __file__, "child", str(job), str(folder / "out")], check=True)


if __name__ == "__main__":
    if len(sys.argv) > 1:
        child(sys.argv[2], sys.argv[3])
    else:
        main()
