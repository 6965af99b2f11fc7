"""Which cutter, pattern, direction and tilt finishes a job soonest: cases, their honest time, and their ranking.

A case is planned, posted, read back and timed as the job itself is; ``search`` chooses which cases are worth it.
"""

from __future__ import annotations

from typing import Any


def __getattr__(name: str) -> Any:
    """Load the comparison only when it is used: worker processes must set themselves up before numba is imported."""
    if name == "compare":
        from anticlast.compare.search import compare

        return compare
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
