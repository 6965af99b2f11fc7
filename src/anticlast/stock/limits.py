"""What is too much for cutter, spindle, material and surface, and the findings that say what to change."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Final

from anticlast import materials
from anticlast.records import Finding
from anticlast.stock.loads import breaking_force_n

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.records import Job, Operation
    from anticlast.stock.clearance import BodyClearance, RapidContact
    from anticlast.stock.pass_loads import PassLoad

# Bending may leave this much of a mark on a finished surface if the operation names no scallop limit [mm].
_MARK_MM: Final = 0.01
# Material that columns could not let go of is worth a word above this share of what was taken.
_LEFT_IN_SHARE: Final = 1e-3


@dataclass(frozen=True, slots=True)
class Limit:
    """One limit of one operation: what is held against it, and what to do about it.

    Attributes
    ----------
    flag : str
        Word for the table.
    value, limit : float
        Highest of the pass, and what is allowed, in ``unit``.
    unit : str
    line : int
        Where the value is reached.
    own : bool
        Set by the job: passing it withholds the program.
    what, advice : str
        Sentence parts.
    """

    flag: str
    value: float
    limit: float
    unit: str
    line: int
    own: bool
    what: str
    advice: str

    @property
    def over(self) -> bool:
        """Whether the limit is passed."""
        return self.value > self.limit


def _cutter(job: Job, number: int) -> Cutter:
    return next(cutter for cutter in job.cutters if cutter.number == number)


def _operation(job: Job, index: int) -> Operation | None:
    return next((operation for operation in job.operations if operation.index == index), None)


def limits_of(job: Job, one: PassLoad) -> tuple[Limit, ...]:
    """Return what a pass is held against; values that are not known are left out."""
    cutter, operation = _cutter(job, one.cutter), _operation(job, one.operation)
    material = materials.material(job.stock.material)
    feed = operation.feed_mm_min if operation else math.nan
    fastest = one.speed_mm_min[1] / 1e3
    too_fast = 100.0 - 100.0 * material.cutting_speed_m_min.high / max(fastest, 1e-9)

    def slower(limit: float, value: float) -> str:
        share = limit / value if value > 0.0 else 1.0
        at = f" to about {share * feed:.0f} mm/min" if math.isfinite(feed) else f" to {100 * share:.0f} %"
        return f"lower the feed{at}, or take less depth or width"

    force_limit = breaking_force_n(cutter) if cutter.max_force_n is None else cutter.max_force_n
    found = [
        Limit(
            "force", one.force_n[1], force_limit, "N", one.force_line, cutter.max_force_n is not None,
            f"the force on T{cutter.number} may reach", slower(force_limit, one.force_n[1]),
        ),
        Limit(
            "power", one.power_w[1], 1e3 * job.machine.spindle.power_kw, "W", one.power_line, False,
            f"cutting with T{cutter.number} takes up to", slower(1e3 * job.machine.spindle.power_kw, one.power_w[1]),
        ),
        Limit(
            "speed", fastest, material.cutting_speed_m_min.high, "m/min", one.speed_line, False,
            f"the fastest point of T{cutter.number} cuts {material.name} at",
            f"lower the spindle speed by {too_fast:.0f} %",
        ),
        Limit(
            "chip", one.chip_mm, 2.0 * cutter.radius_mm * material.feed_per_tooth_share.high, "mm", one.chip_line, False,
            f"the chip of T{cutter.number} is as thick as",
            slower(2.0 * cutter.radius_mm * material.feed_per_tooth_share.high, one.chip_mm) + ", or turn the spindle faster",
        ),
        *_bending_limits(cutter, operation, one),
    ]  # fmt: skip
    return tuple(limit for limit in found if math.isfinite(limit.value))


def _bending_limits(cutter: Cutter, operation: Operation | None, one: PassLoad) -> list[Limit]:
    advice = "use less stickout or a thicker cutter, or take less depth or feed"
    if cutter.max_deflection_mm is not None:
        what = f"the tip of T{cutter.number} may bend aside by"
        return [
            Limit(
                "bending",
                one.deflection_mm[1],
                cutter.max_deflection_mm,
                "mm",
                one.deflection_line,
                True,
                what,
                advice,
            )
        ]
    if operation is None or operation.does != "finish":
        return []
    limit = _MARK_MM if operation.scallop_mm is None else operation.scallop_mm
    what = f"bending of T{cutter.number} may mark the surface by"
    return [Limit("bending", one.mark_mm[1], limit, "mm", one.deflection_line, False, what, advice)]


def flagged(job: Job, one: PassLoad) -> PassLoad:
    """Return the pass with its flags: force, power, speed, chip, bending where over a limit; axis where the axis cuts."""
    flags = [limit.flag for limit in limits_of(job, one) if limit.over]
    if one.speed_mm_min[0] == 0.0 and one.speed_mm_min[1] > 0.0 and _cutter(job, one.cutter).shape == "ball":
        flags.append("axis")
    return replace(one, flags=tuple(flags))


def load_findings(
    job: Job,
    passes: Sequence[PassLoad],
    near: Sequence[BodyClearance],
    contacts: Sequence[RapidContact],
    left_in_mm3: float,
) -> tuple[Finding, ...]:
    """Return a finding for each operation and limit, for each body, and for rapids, against the stock as it stood."""
    findings: list[Finding] = []
    for index in sorted({one.operation for one in passes}):
        findings += _operation_findings(job, index, [one for one in passes if one.operation == index])
    if passes and not any(math.isfinite(one.force_n[1]) for one in passes):
        message = (
            f"no cutting force is published for {job.stock.material} that we know of: force, power and bending are not given;"
            " set specific_force = [lowest, highest] under [stock] if you have values"
        )
        findings.append(Finding("cutting force", True, math.nan, math.nan, "N/mm^2", 0, message))
    findings += [_clearance(body) for body in near]
    findings.append(_rapids(contacts))
    taken = sum(one.removed_mm3 for one in passes)
    if left_in_mm3 > _LEFT_IN_SHARE * taken:
        message = f"{left_in_mm3:.3g} mm3 under overhangs could not be followed: columns hold four pieces of material each"
        findings.append(
            Finding("overhangs", False, left_in_mm3, _LEFT_IN_SHARE * taken, "mm3", 0, message, warning=True)
        )
    return tuple(findings)


def _operation_findings(job: Job, index: int, passes: list[PassLoad]) -> list[Finding]:
    every = [(limit, one) for one in passes for limit in limits_of(job, one)]
    findings = []
    for flag in dict.fromkeys(limit.flag for limit, _ in every):
        same = [(limit, one) for limit, one in every if limit.flag == flag]
        worst, one = max(same, key=lambda entry: entry[0].value / entry[0].limit)
        over = sum(limit.over for limit, _ in same)
        check = f"{flag}, operation {index}" if index else flag
        value = f"{worst.what} {worst.value:.4g} {worst.unit}"
        if not over:
            message = f"operation {index}: {value}; {worst.limit:.4g} {worst.unit} are allowed"
            findings.append(Finding(check, True, worst.value, worst.limit, worst.unit, worst.line, message))
            continue
        more = f", and so in {over - 1} more passes" if over > 1 else ""
        message = f"operation {index}, pass {one.number}: {value}, over {worst.limit:.4g} {worst.unit}{more}; {worst.advice}"
        findings.append(
            Finding(
                check, False, worst.value, worst.limit, worst.unit, worst.line, message, warning=not worst.own
            )
        )
    return findings


def _clearance(body: BodyClearance) -> Finding:
    check = f"{body.body} of T{body.cutter} in stock"
    if body.row < 0:
        message = (
            f"the {body.body} of T{body.cutter} stays {body.distance_mm:.0f} mm or more clear of the stock"
        )
        return Finding(check, True, body.distance_mm, 0.0, "mm", 0, message)
    where = f"at [{body.at_mm[0]:.2f}, {body.at_mm[1]:.2f}]"
    if body.first_row < 0:
        when = " at rapid" if body.body == "cutting end" else ""
        message = f"the {body.body} of T{body.cutter} comes within {max(0.0, body.distance_mm):.2f} mm of the stock{when} {where}"
        return Finding(check, True, body.distance_mm, 0.0, "mm", body.line, message)
    advice = (
        "lift higher before moving across"
        if body.body == "cutting end"
        else "use more stickout or longer flutes, or clear the stock above first"
    )
    message = (
        f"the {body.body} of T{body.cutter} reaches {-body.distance_mm:.2f} mm into the stock as it stands {where},"
        f" first on line {body.first_line}; {advice}"
    )
    return Finding(check, False, body.distance_mm, 0.0, "mm", body.line, message)


def _rapids(contacts: Sequence[RapidContact]) -> Finding:
    if not contacts:
        return Finding(
            "rapids in stock", True, 0.0, 0.0, "mm3", 0, "no rapid runs into the stock as it stands"
        )
    worst = max(contacts, key=lambda contact: contact.volume_mm3)
    message = (
        f"{len(contacts)} rapid moves run into the stock, first on line {contacts[0].line}; the worst would take"
        f" {worst.volume_mm3:.3g} mm3 at rapid: lift higher, or move there at feed"
    )
    return Finding("rapids in stock", False, worst.volume_mm3, 0.0, "mm3", worst.line, message)
