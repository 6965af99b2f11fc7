"""Time against scallop: the cases worth having, each the fastest of its smoothness."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from anticlast.compare.answer import FrontPoint
from anticlast.compare.cases import Case
from anticlast.compare.ranking import rank, time_s
from anticlast.compare.run import Outcome

# The scallop limit is varied by these factors around the job's.
FACTORS = (0.5, 2.0)


def varied(case: Case) -> list[Case]:
    """Return a case at the other scallop limits."""
    return [replace(case, scallop_mm=factor * case.scallop_mm) for factor in FACTORS]


def front(outcomes: Sequence[Outcome]) -> tuple[FrontPoint, ...]:
    """Return every outcome with costs as a point, by rising scallop; best if none is as smooth and faster.

    Of several with equal scallop and time, the first is the best one.
    """
    points = sorted(rank(outcomes), key=lambda outcome: (_scallop(outcome), time_s(outcome)))
    found, fastest = [], float("inf")
    for outcome in points:
        best = time_s(outcome) < fastest
        fastest = min(fastest, time_s(outcome))
        found.append(FrontPoint(outcome.case, _scallop(outcome), time_s(outcome), best))
    return tuple(found)


def _scallop(outcome: Outcome) -> float:
    assert outcome.costs is not None, "only outcomes with costs are ranked"
    return outcome.costs.scallop_mm
