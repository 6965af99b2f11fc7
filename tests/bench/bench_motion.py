"""How fast the time model is, and how near to time-optimal it stays on smooth paths.

Run: python tests/bench/bench_motion.py
Prints figures and decides nothing. Processor time of one thread, compiled code warm, best of three.
"""

from __future__ import annotations

import math
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from anticlast.machine.motion import estimate
from test_kinematics import SHIPPED
from test_motion import motions, smooth_paths

MILL = SHIPPED["trunnion-ac"]
BLOCKS = 100_000


def programs():
    """A finishing raster on a table A/C, and a random walk in five axes: the worst there is, a corner at every block."""
    step = np.arange(BLOCKS + 1)
    x = 40.0 * np.abs((step / 800.0) % 2.0 - 1.0) - 20.0
    y = (step // 800) * 0.2
    turn = np.degrees(np.unwrap(np.arctan2(y - 10.03, x)))
    yield "raster", np.column_stack([x, y, 0.005 * (x * x - y * y), -0.5 * x, 0 * x, turn])
    walk = np.cumsum(np.random.default_rng(2).normal(0.0, 0.05, (BLOCKS + 1, 6)), axis=0)
    walk[:, 4] = 0.0
    yield "random walk", walk


def main() -> None:
    """Print the figures."""
    for name, words in programs():
        program = motions(np.round(words, 4), 1500.0)
        seconds = []
        for _ in range(4):
            began = time.process_time()
            times = estimate(program, MILL)
            seconds.append(time.process_time() - began)
        print(
            f"{name:15s} {BLOCKS:,} blocks: {min(seconds[1:]):.2f} s; program takes {times.seconds.sum():.0f} s"
        )
    try:
        import toppra
    except ImportError:
        print("toppra is not here: no comparison")
        return
    axes = tuple(replace(axis, jerk=math.inf) for axis in MILL.axes)
    made = replace(MILL, axes=axes, control=replace(MILL.control, block_rate=0.0))
    speed = np.array([axis.feed / 60 for axis in axes])
    accel = np.array([axis.acceleration for axis in axes])
    constraints = [
        toppra.constraint.JointVelocityConstraint(np.column_stack([-speed, speed])),
        toppra.constraint.JointAccelerationConstraint(
            np.column_stack([-accel, accel]),
            discretization_scheme=toppra.constraint.DiscretizationType.Interpolation,
        ),
    ]
    for name, path in smooth_paths(1000):
        words = path[:, [0, 1, 2, 3, 5]]
        along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(words[:, :3], axis=0), axis=1))])
        grid = np.linspace(0.0, along[-1], 4001)
        solver = toppra.algorithm.TOPPRA(
            constraints, toppra.SplineInterpolator(along, words), gridpoints=grid
        )
        rate = solver.compute_parameterization(0.0, 0.0)[1]
        bound = float((2 * np.diff(grid) / (rate[1:] + rate[:-1])).sum())
        ours = float(estimate(motions(np.round(path, 4), 1e7), made).seconds.sum())
        print(
            f"{name:15s} time-optimal {bound:.4f} s, estimate {ours:.4f} s: {100 * (ours / bound - 1):+.2f} %"
        )


if __name__ == "__main__":
    main()
