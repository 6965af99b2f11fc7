"""Who runs the cases: this process, worker processes on this computer, or a Dask cluster.

Outcomes come back in the order of the cases and hold nothing measured with a clock, so they are the same whoever ran them.
"""

from __future__ import annotations

import contextlib
import os
from collections.abc import Callable, Iterator, Sequence
from functools import partial
from typing import TYPE_CHECKING, Any

from anticlast.compare.run import Outcome, Setup, prepare, try_case
from anticlast.errors import AnticlastError, BadInput, Fault

if TYPE_CHECKING:
    from anticlast.compare.cases import Case

Told = Callable[[int], None]  # how many more cases are done
RunAll = Callable[[Setup, Sequence["Case"], Told], list[Outcome]]

# Windows waits for no more handles than this at once (Python's documentation of ProcessPoolExecutor).
_MOST_PROCESSES = 61
_DASK_SECONDS = 20.0


class WorkerLost(AnticlastError):
    """A worker process ended before its case was done: out of memory, or stopped from outside."""

    exit_status = 2


def usable_cores() -> int:
    """Return how many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return max(1, len(os.sched_getaffinity(0)))
    return os.cpu_count() or 1


@contextlib.contextmanager
def workers(cores: int | None = None, dask: str | None = None) -> Iterator[RunAll]:
    """Yield what runs a row of cases.

    Parameters
    ----------
    cores : int, optional
        Worker processes; all cores if not given, this process alone for 1.
    dask : str, optional
        Address of a Dask scheduler; then ``cores`` does not matter.

    Raises
    ------
    BadInput
        The cluster does not answer, or the package for it is missing.
    WorkerLost
        A worker process ended.
    """
    if dask is not None:
        with _cluster(dask) as run:
            yield run
        return
    count = min(cores if cores is not None else usable_cores(), _MOST_PROCESSES)
    if count <= 1:
        yield _here
        return
    with _processes(count) as run:
        yield run


def _here(setup: Setup, cases: Sequence[Case], told: Told) -> list[Outcome]:
    outcomes = []
    for case in cases:
        outcomes.append(try_case(setup, case))
        told(1)
    return outcomes


@contextlib.contextmanager
def _processes(count: int) -> Iterator[RunAll]:
    from concurrent.futures import ProcessPoolExecutor, as_completed
    from concurrent.futures.process import BrokenProcessPool
    from multiprocessing import get_context

    # Workers start afresh on every system: a copy of a process that has threads may hang.
    pool = ProcessPoolExecutor(count, mp_context=get_context("spawn"), initializer=prepare)

    def run(setup: Setup, cases: Sequence[Case], told: Told) -> list[Outcome]:
        futures = [pool.submit(try_case, setup, case) for case in cases]
        for _ in as_completed(futures):
            told(1)
        return [future.result() for future in futures]

    try:
        yield run
    except BrokenProcessPool as error:
        raise WorkerLost(
            "a worker process ended before its case was done, most likely for want of memory; use fewer --cores"
        ) from error
    finally:
        pool.shutdown(wait=True, cancel_futures=True)


@contextlib.contextmanager
def _cluster(address: str) -> Iterator[RunAll]:
    client = _client(address)
    from distributed import KilledWorker, as_completed
    from distributed.comm import CommClosedError

    def run(setup: Setup, cases: Sequence[Case], told: Told) -> list[Outcome]:
        futures = client.map(partial(try_case, setup), cases, pure=False)
        for _ in as_completed(futures, loop=client.loop):
            told(1)
        return list(client.gather(futures))

    try:
        yield run
    except (KilledWorker, CommClosedError) as error:
        raise WorkerLost(f"the cluster at {address} lost a worker or went away; start it again") from error
    except ModuleNotFoundError as error:
        message = f"a worker of the cluster at {address} lacks {error.name}; install the same version of Anticlast there"
        raise WorkerLost(message) from error
    finally:
        client.close()


def _client(address: str) -> Any:
    try:
        from distributed import Client
    except ImportError as error:
        message = 'a Dask cluster needs the package distributed, which is not installed: pip install "anticlast[cluster]"'
        raise BadInput(Fault("command line", 0, "--dask", message)) from error
    try:
        return Client(address, timeout=_DASK_SECONDS, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        message = f"found {address!r}, where no cluster answers; give the scheduler's address, such as tcp://shop-pc:8786"
        raise BadInput(Fault("command line", 0, "--dask", message)) from error
