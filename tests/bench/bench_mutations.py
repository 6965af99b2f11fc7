"""Spoil one token of small sound programs, many times, and print which check caught what.

Run with ``python tests/bench/bench_mutations.py [COUNT] [SEED]``, 2000 and 1 if not given; 0.2 s or more each. Every mutation
that does harm by brute force and is released all the same is printed; the exit status is then 1.
"""

from __future__ import annotations

import difflib
import sys
import tempfile
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import mutate
import test_mutations as small
from anticlast.job import load_job
from conftest import job_text

# The program fits both: on the flatter saddle its scallops are lower.
SAMPLES = {"saddle 0.005": 0.005, "saddle 0.002": 0.002}


def run(name: str, a_per_mm: float, count: int, seed: int) -> int:
    """Return how many harmful mutations of one sample escaped."""
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "job.toml"
        outline = 'shape = "rectangle"\nsize = [6.0, 5.0]'
        file.write_text(
            job_text(machine="mill-3", stock_extra="", outline=outline, top=4.0, a=a_per_mm), encoding="utf-8"
        )
        job = load_job(file)
        sound = small.program(job)
        path = Path(folder) / "sound.ngc"
        path.write_text(sound, encoding="utf-8")
        prove = small.prover(job)
        if not prove(path)[0].released:
            raise SystemExit(f"{name}: the program is not released before it is spoilt")
        began = time.perf_counter()
        outcomes = mutate.run(job, sound, count, seed, Path(folder), prove)
    print(f"{name}: {count} mutations, seed {seed}, {time.perf_counter() - began:.0f} s")
    print(mutate.table(outcomes))
    escaped = [one for one in outcomes if one.escaped]
    for one in escaped:
        change = difflib.unified_diff(sound.splitlines(), one.text.splitlines(), n=0, lineterm="")
        print("ESCAPED", one.kind, *one.harm, *list(change)[2:8], sep=" | ")
    return len(escaped)


def main() -> int:
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 2000
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else 1
    return 1 if sum(run(name, a, count, seed) for name, a in SAMPLES.items()) else 0


if __name__ == "__main__":
    sys.exit(main())
