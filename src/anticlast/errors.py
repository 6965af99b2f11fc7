"""The ladder of errors a user can meet, each with the exit status it ends in.

``BadInput`` carries every fault of a file at once, so that one round of editing mends them all.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing wrong with what the user gave.

    Attributes
    ----------
    file : str
        File as the user named it, or ``"command line"``.
    line : int
        Line of the fault, counted from 1; 0 when no line can be named (the file cannot be opened).
    key : str
        Dotted key, such as ``cutter[1].diameter``, or an option's name; empty when the fault is of the file as a whole.
    message : str
        What was found and what would be valid, as a sentence.
    """

    file: str
    line: int
    key: str
    message: str

    def __str__(self) -> str:
        where = self.file if self.line == 0 else f"{self.file}:{self.line}"
        return f"{where}: {self.key}: {self.message}" if self.key else f"{where}: {self.message}"


class AnticlastError(Exception):
    """Root of everything this project raises on purpose."""

    exit_status = 2


class BadInput(AnticlastError):
    """A job file, machine file, program or option cannot be used; ends in exit status 2.

    Attributes
    ----------
    faults : tuple of Fault
        All of them, in file order.
    """

    exit_status = 2

    def __init__(self, faults: Fault | list[Fault] | tuple[Fault, ...]) -> None:
        self.faults: tuple[Fault, ...] = (faults,) if isinstance(faults, Fault) else tuple(faults)
        super().__init__("\n".join(str(fault) for fault in self.faults))


class OutlineError(AnticlastError):
    """An outline is not a usable closed region; the loader turns it into a located ``BadInput``."""


class CannotPlan(AnticlastError):
    """The job is well formed, but no safe path exists for it; ends in exit status 1, program withheld.

    Attributes
    ----------
    check : str
        Name of the check that failed, as it appears among the findings.
    worst, limit : float
        What was found and what is allowed, in ``unit``.
    unit : str
        ``"mm"``, ``"deg"`` and so on.
    """

    exit_status = 1

    def __init__(
        self, check: str, message: str, worst: float = 0.0, limit: float = 0.0, unit: str = "mm"
    ) -> None:
        super().__init__(message)
        self.check = check
        self.worst = worst
        self.limit = limit
        self.unit = unit


class NotConverged(AnticlastError):
    """An iteration stopped before it met its tolerance; carries the last residual rather than a silent guess."""

    exit_status = 1

    def __init__(self, what: str, residual: float, tolerance: float) -> None:
        super().__init__(f"{what} did not converge: residual {residual:.3g}, tolerance {tolerance:.3g}")
        self.residual = residual
        self.tolerance = tolerance


class CannotWrite(AnticlastError):
    """An output could not be written; nothing under its name was changed."""

    exit_status = 2

    def __init__(self, path: Path, reason: str) -> None:
        super().__init__(f"{path}: cannot be written ({reason}); nothing under that name was changed")
        self.path = path
