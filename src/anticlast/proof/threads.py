"""Sharing work out over threads; the kernels release the interpreter while they run."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

import numpy as np

Answer = TypeVar("Answer")

# Several runs for each worker even out unequal work.
_RUNS_PER_WORKER = 8
_MOST_WORKERS = 8


def workers() -> int:
    """Return how many threads to use."""
    return max(1, min(_MOST_WORKERS, os.cpu_count() or 1))


def spans(count: int) -> list[tuple[int, int]]:
    """Return runs of rows (first, after last) that share ``count`` rows out over the workers."""
    runs = max(1, min(count, _RUNS_PER_WORKER * workers()))
    edges = np.linspace(0, count, runs + 1).astype(int)
    return list(zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True))


def in_threads(work: Callable[[tuple[int, int]], Answer], runs: Iterable[tuple[int, int]]) -> list[Answer]:
    """Do the runs in threads; answers come in order."""
    with ThreadPoolExecutor(workers()) as pool:
        return list(pool.map(work, runs))
