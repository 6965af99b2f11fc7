"""Which cases are worth trying, in rounds; then the front, the proof of the best, and the answer.

First the job as it is; every cutter along its best direction in every tilt; its other patterns in the tilts that did best.
Then, for every cutter that still can win, with its best pattern, the other directions and the other way in its best tilt, and
the other tilts along its best direction; and its other patterns once more in what did best.
"""

from __future__ import annotations

import contextlib
import tempfile
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from pathlib import Path

from anticlast import pipeline
from anticlast.compare import front as fronts
from anticlast.compare.answer import Comparison, DirectionAnswer, Proven
from anticlast.compare.cases import (
    Case,
    directions,
    families,
    finishing,
    job_for,
    operation_for,
    own_case,
    scallop_of,
)
from anticlast.compare.choices import Choices
from anticlast.compare.ranking import best_of_families, rank, time_s
from anticlast.compare.run import Outcome, Setup
from anticlast.compare.settings import notes_of, settings_of
from anticlast.compare.workers import RunAll, workers
from anticlast.cutter import Cutter
from anticlast.errors import CannotPlan
from anticlast.materials import material
from anticlast.passes.direction import cut_length_mm
from anticlast.passes.scallop import length_floor_mm
from anticlast.records import Job
from anticlast.saddle import Saddle

# Told what is going on, how many cases are done and how many are known of.
Progress = Callable[[str, int, int], None]

# Cases that the full proof may refuse before no more are tried, beyond the number asked for.
_MORE_PROOFS = 3
# A cutter's other patterns are tried in this many of its fastest tilts.
_TILTS = 2


def compare(
    job: Job,
    *,
    operation: int | None = None,
    every: bool = False,
    front: bool = False,
    prove: int = 1,
    grid_mm: float | None = None,
    cores: int | None = None,
    dask: str | None = None,
    progress: Progress = lambda text, done, total: None,
) -> tuple[Comparison, ...]:
    """Compare the ways to finish a job's surface.

    Parameters
    ----------
    job : Job
    operation : int, optional
        Index of one finishing operation; all of them if not given.
    every : bool
        Try every combination, not only those that rounds lead to.
    front : bool
        Vary the scallop limit for the best case of every cutter and pattern, not only for the best of all.
    prove : int
        How many of the best cases to prove in full.
    grid_mm : float, optional
        Spacing of the proof's grid.
    cores, dask
        As `workers` takes them.
    progress : callable

    Returns
    -------
    tuple of Comparison
        One for each operation; the same whoever runs the cases.

    Raises
    ------
    BadInput
        No such operation, or no such cluster.
    """
    chosen = finishing(job, operation)
    found = []
    with workers(cores, dask) as run_all:
        for one in chosen:
            search = _Search(Setup(job, one), scallop_of(job, one), run_all, progress)
            found.append(search.answer(every, front, prove, grid_mm))
    return tuple(found)


@dataclass(slots=True)
class _Search:
    """The state of one operation's comparison."""

    setup: Setup
    scallop_mm: float
    run_all: RunAll
    progress: Progress
    outcomes: dict[Case, Outcome] = field(default_factory=dict)
    extra: dict[Case, Outcome] = field(default_factory=dict)
    hopeless: list[tuple[int, str, float]] = field(default_factory=list)
    done: int = 0
    known: int = 0

    # ------------------------------------------------------------------------------ running

    def run(self, cases: Iterable[Case], into: dict[Case, Outcome], text: str) -> None:
        """Run the cases that are new."""
        fresh = [
            case for case in dict.fromkeys(cases) if case not in self.outcomes and case not in self.extra
        ]
        self.known += len(fresh)
        self.progress(text, self.done, self.known)

        def told(more: int) -> None:
            self.done += more
            self.progress(text, self.done, self.known)

        for outcome in self.run_all(self.setup, fresh, told) if fresh else ():
            into[outcome.case] = outcome

    def best(self, family: tuple[int, str] | None = None) -> Outcome | None:
        """Return the fastest outcome so far, of a family or of all."""
        ranked = rank(list(self.outcomes.values()))
        return next((outcome for outcome in ranked if family in (None, outcome.case.family)), None)

    # ------------------------------------------------------------------------------ rounds

    def answer(self, every: bool, front: bool, prove: int, grid_mm: float | None) -> Comparison:
        """Run the rounds and return what they found."""
        job, operation = self.setup.job, self.setup.operation
        own = own_case(operation, self.scallop_mm)
        pairs = families(job, operation, self.scallop_mm)
        ways = [Choices.of(job, operation, cutter, pattern, self.scallop_mm) for cutter, pattern in pairs]
        feeds = directions(job, operation, operation.cutter, self.scallop_mm)
        turned = [own, *(replace(own, direction_rad=feed) for feed in feeds)]
        self.run(turned, self.outcomes, "the job as it is, other directions")
        if every:
            self.run((case for choices in ways for case in choices.all()), self.outcomes, "every combination")
        else:
            self._rounds(ways)
        unsuited = [
            case for case, outcome in self.outcomes.items() if outcome.check == "cutter shape" and case != own
        ]
        for case in unsuited:
            del self.outcomes[case]
        suited = {case.family for case in self.outcomes}
        everything = {case for choices in ways if choices.family in suited for case in choices.all()}
        proven = self._prove(prove, grid_mm)
        self._vary(front)
        direction = self._direction(turned)
        return self._comparison(own, direction, len(everything - set(self.outcomes)), proven)

    def _rounds(self, ways: list[Choices]) -> None:
        """Try every cutter, tilt, pattern, direction and way, but not each with each."""
        own = self.setup.operation
        first: dict[int, Choices] = {}
        for choices in sorted(ways, key=lambda c: c.family != (own.cutter.number, own.pattern)):
            first.setdefault(choices.cutter.number, choices)
        leads = list(first.values())
        self.run((case for c in leads for case in c.along(0)), self.outcomes, "every cutter, its tilts")
        others = [(c, self._tilts_of(c.cutter)) for c in ways if c not in leads]
        self.run((case for c, names in others for case in c.along(0, names)), self.outcomes, "every pattern")
        able = [c for c in ways if self._can_win(c)]
        open_ = self._best_pairs(able)
        self.run(
            (case for c in open_ for case in c.turned(self._best_of(c))), self.outcomes, "directions and ways"
        )
        self.run(
            (case for c in open_ for case in c.tilted(self._best_of(c))),
            self.outcomes,
            "tilts along the best",
        )
        bests = {c.cutter.number: self._best_of(c) for c in open_}
        again = ((bests.get(c.cutter.number), c.pattern) for c in able)
        self.run(
            (replace(case, pattern=name) for case, name in again if case),
            self.outcomes,
            "every pattern again",
        )

    def _best_pairs(self, able: list[Choices]) -> list[Choices]:
        """Return for each cutter the pattern that did best so far; the first, if none can be cut."""
        ranked = [one.case.family for one in rank(list(self.outcomes.values()))]
        place = {family: number for number, family in reversed(list(enumerate(ranked)))}
        found: dict[int, Choices] = {}
        for choices in sorted(able, key=lambda c: place.get(c.family, len(ranked))):
            found.setdefault(choices.cutter.number, choices)
        return list(found.values())

    def _tilts_of(self, cutter: Cutter) -> list[str] | None:
        """Return the names of a cutter's fastest tilts so far, None if nothing could be cut with it."""
        ranked = [one for one in rank(list(self.outcomes.values())) if one.case.cutter == cutter.number]
        return list(dict.fromkeys(one.case.tilt.name for one in ranked))[:_TILTS] or None

    def _best_of(self, choices: Choices) -> Case | None:
        found = self.best(choices.family)
        return None if found is None else found.case

    def _can_win(self, choices: Choices) -> bool:
        """Tell if a pair may still beat the best: no ball path is shorter than the length floor, to leading order."""
        best, cutter = self.best(), choices.cutter
        if best is None or best.costs is None or cutter.shape != "ball" or self.best(choices.family) is None:
            return True
        job, operation = self.setup.job, self.setup.operation
        try:
            floor = length_floor_mm(
                Saddle.of(job.part),
                job.part.outline,
                cutter.radius_mm,
                self.scallop_mm,
                operation.allowance_mm,
            )
        except CannotPlan:
            return False
        feed = operation_for(job, operation, choices.case(0, choices.names(0)[0], operation.way)).feed_mm_min
        least_s = 60.0 * floor / feed
        if least_s <= best.costs.time_s:
            return True
        self.hopeless.append((*choices.family, least_s))
        return False

    # ------------------------------------------------------------------------------ afterwards

    def _vary(self, front: bool) -> None:
        """Run the best case, or the best of every pair, at other scallop limits."""
        bests = best_of_families(rank(list(self.outcomes.values())))
        chosen = bests if front else bests[:1]
        self.run(
            (case for one in chosen for case in fronts.varied(one.case)), self.extra, "other scallop limits"
        )

    def _prove(self, count: int, grid_mm: float | None) -> list[Proven]:
        """Prove the best cases in full until ``count`` passed; what the proof refuses leaves the ranking."""
        proven: list[Proven] = []
        for outcome in rank(list(self.outcomes.values())):
            passed = sum(one.released for one in proven)
            if passed >= count or len(proven) >= count + _MORE_PROOFS:
                break
            self.progress(f"proving {outcome.case.words}", self.done, self.known)
            result = _proof(self.setup, outcome.case, grid_mm)
            proven.append(result)
            if not result.released:
                self.outcomes[outcome.case] = Outcome(outcome.case, None, "proof", "; ".join(result.findings))
        return proven

    def _comparison(
        self, own: Case, direction: DirectionAnswer, not_tried: int, proven: list[Proven]
    ) -> Comparison:
        job, operation = self.setup.job, self.setup.operation
        outcomes = list(self.outcomes.values())
        ranked = rank(outcomes)
        return Comparison(
            job=job.name,
            units=job.units,
            machine=job.machine.name,
            operation=operation.index,
            scallop_mm=self.scallop_mm,
            least_speed_m_min=material(job.stock.material).cutting_speed_m_min.low,
            own=self.outcomes[own],
            ranked=ranked,
            refused=tuple(outcome for outcome in outcomes if outcome.costs is None),
            not_tried=not_tried,
            hopeless=tuple(self.hopeless),
            direction=direction,
            front=fronts.front([*outcomes, *self.extra.values()]),
            proven=tuple(proven),
            settings=settings_of(job, operation, ranked[0].case) if ranked else (),
            notes=notes_of(job, operation, self.scallop_mm),
        )

    def _direction(self, turned: list[Case]) -> DirectionAnswer:
        """Return the best of the directions in which the job's own operation was tried; the first is its own."""
        job, operation = self.setup.job, self.setup.operation
        outcomes = [self.outcomes[case] for case in dict.fromkeys(turned)]
        ranked = rank(outcomes)
        own, shortest = turned[0].direction_rad, turned[1].direction_rad
        lengths: list[float | None] = [None, None]
        if operation.cutter.shape == "ball":
            # Where the ball does not fit, the cases say so themselves.
            with contextlib.suppress(CannotPlan):
                lengths = [
                    cut_length_mm(
                        Saddle.of(job.part), job.part.outline, operation.cutter.radius_mm, self.scallop_mm, direction,
                        "pass by pass", operation.allowance_mm,
                    )
                    for direction in (own, shortest)
                ]  # fmt: skip
        return DirectionAnswer(
            own_rad=own,
            own_s=time_s(outcomes[0]) if outcomes[0].costs else None,
            best_rad=ranked[0].case.direction_rad if ranked else None,
            best_s=time_s(ranked[0]) if ranked else None,
            shortest_rad=shortest,
            own_length_mm=lengths[0],
            shortest_length_mm=lengths[1],
        )


def _proof(setup: Setup, case: Case, grid_mm: float | None) -> Proven:
    """Take one case through the whole pipeline: plan, post, read back, prove."""
    job = job_for(setup.job, setup.operation, case)
    _, axis_paths = pipeline.plan(job)
    with tempfile.TemporaryDirectory(prefix="anticlast-") as folder:
        temporary, _ = pipeline.post(job, axis_paths, Path(folder) / f"{job.slug}.ngc")
        made = pipeline.prove(temporary, job, grid_mm=grid_mm)
    assert made.proof is not None, "prove always measures"
    failed = tuple(finding.message for finding in made.findings if not finding.ok and not finding.warning)
    return Proven(case, made.released, failed, made.proof.scallop_max_mm, made.proof.gouge_max_mm)
