"""How fast programs are read back, beside pandas reading the same numbers as a table.

Run with ``python tests/bench/bench_reader.py [BLOCKS]``. pandas is wanted for the
comparison only and left out if absent.
Best of five runs each, processor time on one core, compiled code warm.
"""

from __future__ import annotations

import io
import sys
import time
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import numpy as np

from anticlast.readback.forward import axis_travel, part_motion
from anticlast.readback.reader import read_bytes
from anticlast.records import Axis, Control, Machine, Spindle

HEAD = "G21\nG17 G40 G49 G80 G90 G94\nG54 G64\nT1 M6\nS1000 M3\nG43 H1\nG0 X0 Y0 Z60 A0 C0\nG1 Z0 F500\n"


def best_of_five(run: Callable[[], object]) -> float:
    times = []
    for _ in range(5):
        began = time.process_time()
        run()
        times.append(time.process_time() - began)
    return min(times)


def table(blocks: int) -> np.ndarray:
    """A finishing pass to and fro: 0.1 mm steps, tilting a little; columns X Y Z A C F."""
    step = np.arange(blocks)
    x = 40.0 * np.abs((step / 400.0) % 2.0 - 1.0) - 20.0
    y = (step // 400) * 0.2 % 30.0
    z = 0.005 * (x * x - y * y)
    return np.column_stack([x, y, z, -0.5 * x, 0.7 * y, 3000.0 + x])


def trunnion() -> Machine:
    linear = tuple(Axis(letter, "linear", (-200.0, 200.0), 3000, 2000, 400, 8000) for letter in "XYZ")
    tilt = Axis("A", "rotary", None, 3600, 3600, 1500, 30000, "work", (1.0, 0.0, 0.0), (0.0, 0.0, 0.0), -1)
    turn = Axis("C", "rotary", None, 3600, 3600, 1500, 30000, "work", (0.0, 0.0, 1.0), (0.0, 0.0, 0.0), -1)
    control = Control("inverse", "G64", 4, 4, 3, 500.0, False, "M2")
    return Machine(
        "m", "m", "mm", 0.0, (*linear, tilt, turn), Spindle(0.0, 24000.0, 0.3), control, Path("m.toml")
    )


def main() -> None:
    blocks = int(sys.argv[1]) if len(sys.argv) > 1 else 300_000
    numbers = table(blocks)
    lines = ["X{:.4f} Y{:.4f} Z{:.4f} A{:.4f} C{:.4f} F{:.3f}".format(*row) for row in numbers.tolist()]
    data = (HEAD + "G93 G1 X0 F9\n" + "\n".join(lines) + "\nG94\nM2\n").encode()
    read_bytes(data[:2000], "warm")
    seconds = best_of_five(lambda: read_bytes(data, "p"))
    print(f"read back       {blocks / seconds:12,.0f} blocks/s   ({len(data) / seconds / 1e6:.0f} MB/s)")
    few = min(blocks, 20_000)
    some = (HEAD + "G93 G1 X0 F9\n" + "\n".join(lines[:few]) + "\nG94\nM2\n").encode()
    slow = best_of_five(lambda: read_bytes(some, "p", plain_lines=False))
    print(f"  line by line  {few / slow:12,.0f} blocks/s")
    try:
        import pandas
    except ImportError:
        print("pandas is not here: no comparison")
    else:
        text = "x,y,z,a,c,f\n" + "\n".join(
            "{:.4f},{:.4f},{:.4f},{:.4f},{:.4f},{:.3f}".format(*row) for row in numbers.tolist()
        )
        other = best_of_five(lambda: pandas.read_csv(io.StringIO(text)))
        print(f"pandas.read_csv {blocks / other:12,.0f} rows/s     ratio {other / seconds:.2f}")
    for count in (blocks // 4, blocks // 2, blocks):
        part = (HEAD + "G93 G1 X0 F9\n" + "\n".join(lines[:count]) + "\nG94\nM2\n").encode()
        tracemalloc.start()
        read_bytes(part, "p")
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        print(f"memory          {peak / count:12.0f} bytes a block at {count:,} blocks")
    program = read_bytes(data, "p")
    machine = trunnion()
    part_motion(program, machine, (0.0, 0.0, 55.0), {1: 60.0})
    motion = part_motion(program, machine, (0.0, 0.0, 55.0), {1: 60.0})
    seconds = best_of_five(lambda: part_motion(program, machine, (0.0, 0.0, 55.0), {1: 60.0}))
    print(
        f"part motion     {blocks / seconds:12,.0f} blocks/s   ({len(motion.line) / blocks:.2f} pieces each)"
    )
    seconds = best_of_five(lambda: axis_travel(program, machine, (0.0, 0.0, 55.0), {1: 60.0}))
    print(f"axis travel     {blocks / seconds:12,.0f} blocks/s")


if __name__ == "__main__":
    main()
