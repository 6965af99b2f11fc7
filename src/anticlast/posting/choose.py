"""Which writer posts for a machine: the plain one, or the ``write`` of a post given as a Python file or entry point."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import IO

from anticlast.errors import BadInput, Fault
from anticlast.machine.python_post import load_module
from anticlast.posting.writer import write_program
from anticlast.records import AxisPath, Job, Machine

Writer = Callable[[Job, Iterable[AxisPath], IO[str]], tuple[int, ...]]


def writer_for(machine: Machine) -> Writer:
    """Return the function that writes programs for this machine.

    A machine file in TOML takes the plain writer. A Python post may define ``write(job, axis_paths, stream)``, which
    returns the line on which each operation starts; without it the plain writer serves too.

    Raises
    ------
    BadInput
        When a Python post cannot be loaded, or its ``write`` is not callable.
    """
    if machine.source.suffix != ".py":
        return write_program
    module = load_module(machine.source, str(machine.source))
    write = getattr(module, "write", write_program)
    if not callable(write):
        raise BadInput(
            Fault(str(machine.source), 0, "write", "is not a function write(job, axis_paths, stream)")
        )
    return write
