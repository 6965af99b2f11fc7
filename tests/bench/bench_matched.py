"""Matched strips over many saddles: passes, cut length against the ball's floor, planning time; time against ball programs.

Run: python tests/bench/bench_matched.py
Prints the figures; nothing here passes or fails.
"""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests"))

from anticlast.errors import CannotPlan, NotConverged  # noqa: E402
from anticlast.job import load_job  # noqa: E402
from anticlast.machine.kinematics import Kinematics  # noqa: E402
from anticlast.passes.plan import plan_operation  # noqa: E402
from anticlast.passes.scallop import length_floor_mm  # noqa: E402
from anticlast.records import CutterPath, Job  # noqa: E402
from anticlast.saddle import Saddle  # noqa: E402
from conftest import job_text  # noqa: E402

# a, b / a, side mm, cutter diameter mm, corner radius mm, scallop mm, direction off the best degrees
CASES = [
    (0.001, 1.0, 60.0, 6.0, 0.5, 0.005, 0.0),
    (0.002, 1.0, 60.0, 6.0, 0.5, 0.005, 0.0),
    (0.005, 1.0, 60.0, 6.0, 0.5, 0.005, 0.0),
    (0.005, 1.0, 100.0, 6.0, 0.5, 0.005, 0.0),
    (0.005, 1.0, 60.0, 6.0, 0.0, 0.005, 0.0),
    (0.005, 1.0, 60.0, 10.0, 1.0, 0.005, 0.0),
    (0.005, 1.0, 60.0, 6.0, 1.5, 0.005, 0.0),
    (0.005, 2.0, 60.0, 6.0, 0.5, 0.005, 0.0),
    (0.005, 0.5, 60.0, 6.0, 0.5, 0.005, 0.0),
    (0.005, 1.0, 60.0, 6.0, 0.5, 0.005, 20.0),
    (0.005, 1.0, 60.0, 6.0, 0.5, 0.005, 90.0),
    (0.010, 1.0, 60.0, 6.0, 0.5, 0.010, 0.0),
    (0.010, 1.0, 100.0, 6.0, 0.5, 0.005, 0.0),
    (0.020, 1.0, 60.0, 6.0, 0.5, 0.005, 0.0),
    (0.020, 1.0, 30.0, 3.0, 0.2, 0.005, 0.0),
]


def job_of(
    folder: Path, a: float, ratio: float, side: float, diameter: float, corner: float, **changes: object
) -> Job:
    # High enough at the corners either way.
    rise = 0.25 * side * side * a * max(1.0, ratio)
    text = job_text(
        a=a, extra_part=f"b = {a * ratio}", outline=f'shape = "rectangle"\nsize = [{side}, {side}]',
        top=rise + 1.0, bottom=-rise - 8.0, diameter=diameter, cutter_shape="bull" if corner else "flat", pattern="matched",
        tolerance=0.002, **changes,
    )  # fmt: skip
    if corner:
        text = text.replace('shape = "bull"\n', f'shape = "bull"\ncorner_radius = {corner}\n')
    path = folder / "job.toml"
    path.write_text(text, encoding="utf-8")
    return load_job(path)


def planned(job: Job) -> tuple[CutterPath, float]:
    operation = job.operations[-1]
    kinematics = Kinematics(job.machine, job.part_origin_mm, operation.cutter.gauge_length_mm)
    began = time.perf_counter()
    path = plan_operation(job, operation, kinematics.nearest_axis)
    return path, time.perf_counter() - began


def table(folder: Path) -> None:
    titles = f"{'a':>6} {'b/a':>4} {'side':>5} {'D':>4} {'r':>4} {'h um':>5} {'off':>4}"
    print(f"{titles} | passes  step mm      pred um  floor/cut  plan s")
    for a, ratio, side, diameter, corner, scallop, off in CASES:
        job = job_of(
            folder, a, ratio, side, diameter, corner, limit=f"scallop = {scallop}", direction=90.0 + off
        )
        head = f"{a:6.3f} {ratio:4.1f} {side:5.0f} {diameter:4.0f} {corner:4.1f} {1e3 * scallop:5.1f} {off:4.0f} |"
        try:
            path, took = planned(job)
        except (CannotPlan, NotConverged) as refused:
            print(head, refused)
            continue
        floor = length_floor_mm(Saddle.of(job.part), job.part.outline, diameter / 2.0, scallop)
        step = f"{path.stepover_mm[0]:.2f}-{path.stepover_mm[1]:.2f}"
        print(
            f"{head} {path.passes:6d}  {step:11s}  {1e3 * path.scallop_predicted_mm:6.3f}  "
            f"{floor / path.cut_length_mm:9.2f}  {took:6.2f}"
        )


def times(folder: Path) -> None:
    """Program time under the machine's limits, posted and read back, matched against ball patterns."""
    from anticlast import pipeline
    from anticlast.machine.motion import estimate

    print(
        "\n60 x 60 mm, a = 0.005, 5 um, trunnion-ac, feed 1500: posted, read back, timed under the axis limits"
    )
    square = {
        "outline": 'shape = "rectangle"\nsize = [60.0, 60.0]',
        "top": 9.0,
        "bottom": -18.0,
        "tolerance": 0.002,
    }
    seconds = {}
    for name, changes in {
        "matched": {"pattern": "matched", "cutter_shape": "bull"},
        "graded, lead 15": {"pattern": "graded", "tilt": "lead = 15.0"},
        "graded, lean 15": {"pattern": "graded", "tilt": "lean = 15.0"},
        "graded, fixed upright": {"pattern": "graded", "tilt": 'axis = "fixed"'},
        "graded, fixed at 20": {"pattern": "graded", "tilt": "axis = [0.0, 0.342, 0.94]"},
    }.items():
        text = job_text(**{**square, "limit": "scallop = 0.005", **changes})
        text = text.replace('shape = "bull"\n', 'shape = "bull"\ncorner_radius = 0.5\n')
        path = folder / "job.toml"
        path.write_text(text, encoding="utf-8")
        job = load_job(path)
        cutter_paths, axis_paths = pipeline.plan(job)
        temporary, _ = pipeline.post(job, axis_paths, folder / "tile.ngc")
        program = pipeline.read_back(job, temporary)
        seconds[name] = float(np.nansum(estimate(program.motions, job.machine).seconds))
        temporary.unlink()
        print(
            f"  {name:24s} {cutter_paths[0].passes:5d} passes {program.blocks:7d} blocks {seconds[name]:8.1f} s"
        )
    best = min(value for name, value in seconds.items() if name != "matched")
    print(f"  matched takes {seconds['matched'] / best:.3f} of the best ball program")


def main() -> None:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        planned(job_of(folder, 0.005, 1.0, 12.0, 6.0, 0.5, limit="scallop = 0.01"))
        table(folder)
        times(folder)


if __name__ == "__main__":
    main()
