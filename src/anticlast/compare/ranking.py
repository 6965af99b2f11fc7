"""The order of cases: by honest time."""

from __future__ import annotations

from collections.abc import Sequence

from anticlast.compare.run import Outcome


def time_s(outcome: Outcome) -> float:
    """Return the estimated time of an outcome that has costs."""
    assert outcome.costs is not None, "only outcomes with costs are ranked"
    return outcome.costs.time_s


def rank(outcomes: Sequence[Outcome]) -> tuple[Outcome, ...]:
    """Return the outcomes that have costs, fastest first; of equals the one that was tried first."""
    return tuple(sorted((outcome for outcome in outcomes if outcome.costs is not None), key=time_s))


def best_of_families(ranked: Sequence[Outcome]) -> list[Outcome]:
    """Return the fastest outcome of every cutter and pattern, in the order given."""
    found: dict[tuple[int, str], Outcome] = {}
    for outcome in ranked:
        found.setdefault(outcome.case.family, outcome)
    return list(found.values())
