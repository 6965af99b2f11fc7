"""What a comparison found, as records, as JSON and as lines to read."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from anticlast.compare.cases import Case
from anticlast.compare.costs import Costs
from anticlast.compare.ranking import best_of_families
from anticlast.compare.run import Outcome
from anticlast.report.numbers import Units, clock

# Times below this (seconds) print as nothing, directions nearer than this (radians) as the same.
_NOTHING_S = 0.05
_TENTHS_BELOW_S = 120.0
_SAME_RAD = math.radians(0.05)
# Rows of the table; the job's own and the best of every pair are shown wherever they stand.
_ROWS = 12


@dataclass(frozen=True, slots=True)
class DirectionAnswer:
    """Which feed direction is best with everything else as in the job.

    Attributes
    ----------
    own_rad, own_s : float, float or None
        The job's own direction and its time; None where it cannot be cut.
    best_rad, best_s : float or None
        The fastest of the directions tried; None where none can be cut.
    shortest_rad : float
        Shortest cut of straight passes, to leading order; for bull and flat end mills the most convex on the mean.
    own_length_mm, shortest_length_mm : float or None
        These cuts' lengths to leading order; None where no ball is used.
    """

    own_rad: float
    own_s: float | None
    best_rad: float | None
    best_s: float | None
    shortest_rad: float
    own_length_mm: float | None
    shortest_length_mm: float | None

    def as_json(self) -> dict[str, Any]:
        """Return plain data: mm, seconds, degrees."""
        return {
            "own_deg": math.degrees(self.own_rad),
            "own_s": self.own_s,
            "best_deg": None if self.best_rad is None else math.degrees(self.best_rad),
            "best_s": self.best_s,
            "shortest_deg": math.degrees(self.shortest_rad),
            "own_length_mm": self.own_length_mm,
            "shortest_length_mm": self.shortest_length_mm,
        }

    def line(self) -> str:
        """Return what the best direction is and what it saves, as a sentence."""
        if self.best_rad is None or self.best_s is None:
            said = "with the job's other settings no direction can be cut"
        elif _same_line(self.best_rad, self.own_rad):
            said = f"best feed direction with the job's other settings: {_degrees(self.own_rad)}, as the job has it"
        else:
            said = f"best feed direction with the job's other settings: {_degrees(self.best_rad)}, {_exact(self.best_s)}"
            said += f"; the job has {_degrees(self.own_rad)}"
            if self.own_s is None:
                said += ", which cannot be cut"
            else:
                saved = self.own_s - self.best_s
                said += f", {_exact(self.own_s)}: saves {_exact(saved)} ({100.0 * saved / self.own_s:.0f} %)"
        if self.own_length_mm and self.shortest_length_mm and not _same_line(self.shortest_rad, self.own_rad):
            shorter = 100.0 * (1.0 - self.shortest_length_mm / self.own_length_mm)
            said += f"; the shortest cut is at {_degrees(self.shortest_rad)}, {max(shorter, 0.0):.1f} % under the job's"
        return said


def _exact(seconds: float) -> str:
    """Return a time with tenths up to two minutes, so that near cases can be told apart."""
    return f"{seconds:.1f} s" if seconds < _TENTHS_BELOW_S else clock(seconds)


def _same_line(first_rad: float, second_rad: float) -> bool:
    """Tell if two directions are the same for passes that run both ways."""
    return abs((first_rad - second_rad + 0.5 * math.pi) % math.pi - 0.5 * math.pi) < _SAME_RAD


def _degrees(angle_rad: float) -> str:
    return f"{math.degrees(angle_rad):.1f}°"


@dataclass(frozen=True, slots=True)
class Proven:
    """A case that went through the full proof: released, or why not."""

    case: Case
    released: bool
    findings: tuple[str, ...]
    scallop_mm: float
    gouge_mm: float


@dataclass(frozen=True, slots=True)
class FrontPoint:
    """One case at one scallop limit; ``best`` if none is both smoother and faster."""

    case: Case
    scallop_mm: float
    time_s: float
    best: bool


def as_json(found: tuple[Comparison, ...]) -> dict[str, Any]:
    """Return what `search.compare` found as plain data: mm, seconds, degrees."""
    return {"schema": 1, "operations": [one.as_json() for one in found]}


@dataclass(frozen=True, slots=True)
class Comparison:
    """All about one finishing operation.

    Attributes
    ----------
    ranked : tuple of Outcome
        Cases that can be cut, fastest first; none that the full proof refused.
    refused : tuple of Outcome
        Cases that cannot, with the reason.
    not_tried : int
        Combinations left out because their parts were no faster one at a time.
    hopeless : tuple of (cutter, pattern, seconds)
        Families that were not varied further: feed alone takes so long, longer than the best case in all.
    own : Outcome
        The operation as the job has it.
    least_speed_m_min : float
        Low end of the material's cutting speeds.
    """

    job: str
    units: str
    machine: str
    operation: int
    scallop_mm: float
    least_speed_m_min: float
    own: Outcome
    ranked: tuple[Outcome, ...]
    refused: tuple[Outcome, ...]
    not_tried: int
    hopeless: tuple[tuple[int, str, float], ...]
    direction: DirectionAnswer
    front: tuple[FrontPoint, ...]
    proven: tuple[Proven, ...]
    settings: tuple[str, ...]
    notes: tuple[str, ...]

    @property
    def best(self) -> Outcome | None:
        """The fastest case, None if no case can be cut."""
        return self.ranked[0] if self.ranked else None

    # ------------------------------------------------------------------------------ JSON

    def as_json(self) -> dict[str, Any]:
        """Return plain data: mm, seconds, degrees."""
        return {
            "job": self.job,
            "machine": self.machine,
            "operation": self.operation,
            "scallop_mm": self.scallop_mm,
            "material_speed_m_min": self.least_speed_m_min,
            "own": _outcome_json(self.own),
            "ranked": [_outcome_json(outcome) for outcome in self.ranked],
            "refused": [_outcome_json(outcome) for outcome in self.refused],
            "not_tried": self.not_tried,
            "hopeless": [
                {"cutter": cutter, "pattern": pattern, "cut_only_s": seconds} for cutter, pattern, seconds in self.hopeless
            ],
            "direction": self.direction.as_json(),
            "front": [
                {**_case_json(point.case), "scallop_predicted_mm": point.scallop_mm, "time_s": point.time_s, "best": point.best}
                for point in self.front
            ],
            "proven": [
                {
                    **_case_json(proven.case), "released": proven.released, "findings": list(proven.findings),
                    "scallop_max_mm": _finite(proven.scallop_mm), "gouge_max_mm": _finite(proven.gouge_mm),
                }
                for proven in self.proven
            ],
            "settings": list(self.settings),
            "notes": list(self.notes),
        }  # fmt: skip

    # ------------------------------------------------------------------------------ text

    def lines(self) -> list[str]:
        """Return the comparison as lines to read, lengths in the job's units."""
        units = Units(self.units == "inch")
        tried = len(self.ranked) + len(self.refused)
        out = [
            f"operation {self.operation}, {self.machine}, scallop limit {units.small(self.scallop_mm)}: {tried} cases tried,"
            f" {len(self.ranked)} can be cut, {len(self.refused)} cannot"
        ]
        if self.ranked:
            out += ["", *self._table(units), ""]
        out += self._summary()
        out += self._refusals()
        return out + [f"- {note}" for note in self.notes]

    def _table(self, units: Units) -> list[str]:
        head = (
            "rank", "cutter", "pattern", "feed", "tilt", "way", "passes", "lifts", "cut length", "scallop", "slowest cut",
            "rotary travel", "held back", "time",
        )  # fmt: skip
        rows: list[tuple[str, ...]] = [head]
        shown = {outcome.case for outcome in (*self.ranked[:_ROWS], *best_of_families(self.ranked), self.own)}
        for rank, outcome in enumerate(self.ranked, start=1):
            if outcome.case in shown:
                mark = "*" if outcome.case == self.own.case else ""
                rows.append((f"{rank}{mark}", *_row(outcome, units)))
        widths = [max(len(row[column]) for row in rows) for column in range(len(head))]
        left = {2, 4, 5}
        return [
            "  ".join(
                text.ljust(width) if column in left else text.rjust(width)
                for column, (text, width) in enumerate(zip(row, widths, strict=True))
            ).rstrip()
            for row in rows
        ] + [
            "* as the job has it; slowest cut: smallest cutting speed; held back: by the limits of the rotary axes",
            *(
                [f"{hidden} slower cases are not shown; --json lists all"]
                if (hidden := len(self.ranked) + 1 - len(rows))
                else []
            ),
        ]

    def _summary(self) -> list[str]:
        best, own = self.best, self.own
        out = [self.direction.line()]
        if best is None or best.costs is None:
            return [*out, "no case can be cut as the job stands"]
        out.append(f"best: {best.case.words}: {_exact(best.costs.time_s)}{_against(own, best.costs)}")
        out += _held_lines(best.costs)
        out += self._speed_lines(best.costs)
        out += (
            [f"to use it, set in operation {self.operation}: " + ", ".join(self.settings)]
            if self.settings
            else []
        )
        for proven in self.proven:
            said = "every check passed" if proven.released else "refused: " + "; ".join(proven.findings)
            out.append(f"proof of {proven.case.words}: {said}")
        if not self.proven:
            out.append("not proven; make the program to prove it")
        for cutter, pattern, seconds in self.hopeless:
            out.append(
                f"T{cutter} {pattern} was not varied further: feed alone takes {clock(seconds)}, longer than the best in all"
            )
        if self.not_tried:
            out.append(
                f"{self.not_tried} further combinations were not tried, since their parts were no faster one at a time;"
                " --all tries them"
            )
        return out

    def _speed_lines(self, best: Costs) -> list[str]:
        """Warn of a best case that cuts slower than the material should be, and name the fastest that does not."""
        low, units = self.least_speed_m_min, Units(self.units == "inch")

        def speed(m_min: float) -> str:
            return units.cutting_speed(1000.0 * m_min)

        if best.least_speed_m_min >= low:
            return []
        line = f"its slowest cut is {speed(best.least_speed_m_min)}, and the material wants {speed(low)}"
        for rank, outcome in enumerate(self.ranked, start=1):
            if outcome.costs is not None and outcome.costs.least_speed_m_min >= low:
                return [
                    f"{line}; the fastest that keeps to it is rank {rank}, {_exact(outcome.costs.time_s)}"
                ]
        return [f"{line}; no case keeps to it, a faster spindle or more lean would help"]

    def _refusals(self) -> list[str]:
        grouped: dict[str, list[Case]] = {}
        for outcome in self.refused:
            grouped.setdefault(outcome.reason, []).append(outcome.case)
        out = []
        for reason, cases in grouped.items():
            also = f" and {len(cases) - 1} more" if len(cases) > 1 else ""
            out.append(f"cannot be cut: {cases[0].words}{also}: {reason}")
        return out


def _row(outcome: Outcome, units: Units) -> tuple[str, ...]:
    case, costs = outcome.case, outcome.costs
    assert costs is not None, "ranked cases have costs"
    travel = " ".join(
        f"{letter} {degrees:.0f}°" for letter, degrees in costs.rotary_travel_deg.items() if degrees >= 0.5
    )
    held = "?" if costs.held_back is None else _seconds(costs.held_back.by_rotary_s)
    return (
        f"T{case.cutter}", case.pattern, f"{math.degrees(case.direction_rad):.1f}°", case.tilt.name, case.way,
        str(costs.passes), str(costs.lifts), units.long(costs.cut_length_mm), units.small(costs.scallop_mm),
        units.cutting_speed(1000.0 * costs.least_speed_m_min), travel or "none", held, _exact(costs.time_s),
    )  # fmt: skip


def _seconds(value_s: float) -> str:
    return "0 s" if value_s < _NOTHING_S else clock(value_s)


def _against(own: Outcome, best: Costs) -> str:
    if own.costs is None:
        return f"; as the job has it, it cannot be cut: {own.reason}"
    if own.costs.time_s <= best.time_s:
        return ", as the job has it"
    saved = own.costs.time_s - best.time_s
    return (
        f", saves {_exact(saved)} ({100.0 * saved / own.costs.time_s:.0f} %) against the job as it is,"
        f" {_exact(own.costs.time_s)}"
    )


def _held_lines(costs: Costs) -> list[str]:
    held = costs.held_back
    if held is None:
        return ["how long the axes hold the feed back cannot be told from this post's text"]
    if not costs.rotary_travel_deg:
        return []
    if held.by_rotary_s < _NOTHING_S:
        rotary = "the limits of the rotary axes do not hold the feed back"
    else:
        rotary = f"the limits of the rotary axes hold the feed back for {clock(held.by_rotary_s)}"
    by = [
        f"{letter} {_seconds(seconds)}"
        for letter, seconds in held.by_speed_s.items()
        if seconds >= _NOTHING_S
    ]
    speed = f", by fastest feed {', '.join(by)}" if by else ""
    return [f"{rotary}; all axes together for {_seconds(held.by_all_s)}{speed}"]


def _case_json(case: Case) -> dict[str, Any]:
    tilt = case.tilt
    return {
        "cutter": case.cutter,
        "pattern": case.pattern,
        "direction_deg": math.degrees(case.direction_rad),
        "tilt": tilt.name,
        "lead_deg": math.degrees(tilt.lead_rad),
        "lean_deg": math.degrees(tilt.lean_rad),
        "fixed_axis": None if tilt.fixed_axis is None else list(tilt.fixed_axis),
        "way": case.way,
        "scallop_limit_mm": case.scallop_mm,
    }


def _outcome_json(outcome: Outcome) -> dict[str, Any]:
    entry = _case_json(outcome.case)
    costs = outcome.costs
    if costs is None:
        return {**entry, "check": outcome.check, "reason": outcome.reason}
    held = costs.held_back
    return {
        **entry,
        "time_s": costs.time_s,
        "feed_only_s": costs.feed_only_s,
        "cut_only_s": costs.cut_only_s,
        "passes": costs.passes,
        "lifts": costs.lifts,
        "blocks": costs.blocks,
        "cut_length_mm": costs.cut_length_mm,
        "scallop_predicted_mm": costs.scallop_mm,
        "least_cutting_speed_m_min": costs.least_speed_m_min,
        "rotary_travel_deg": costs.rotary_travel_deg,
        "held_back_s": held
        and {"all": held.by_all_s, "rotary": held.by_rotary_s, "by_speed": held.by_speed_s},
    }


def _finite(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None
