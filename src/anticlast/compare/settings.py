"""From a case back to the job file: the keys that differ, and what the comparison took for granted."""

from __future__ import annotations

import math
from dataclasses import replace

from anticlast.compare.cases import Case, operation_for, own_case
from anticlast.records import Job, Operation
from anticlast.report.numbers import Units


def settings_of(job: Job, operation: Operation, case: Case) -> tuple[str, ...]:
    """Return the lines of the job file that make an operation into a case."""
    new, scale = operation_for(job, operation, case), 1.0 / 25.4 if job.units == "inch" else 1.0
    said = [
        ("cutter", f"{case.cutter}", new.cutter.number != operation.cutter.number),
        ("pattern", f'"{case.pattern}"', new.pattern != operation.pattern),
        (
            "direction",
            f"{math.degrees(case.direction_rad):.4g}",
            new.direction_rad != operation.direction_rad,
        ),
        ("lead", f"{math.degrees(new.lead_rad):.4g}", new.lead_rad != operation.lead_rad),
        ("lean", f"{math.degrees(new.lean_rad):.4g}", new.lean_rad != operation.lean_rad),
        ("axis", _axis_text(new.fixed_axis), new.fixed_axis != operation.fixed_axis),
        ("way", f'"{case.way}"', new.way != operation.way),
        ("scallop", f"{case.scallop_mm * scale:.4g} instead of the stepover", operation.scallop_mm is None),
        ("spindle", f"{new.spindle_rpm:.0f}", new.spindle_rpm != operation.spindle_rpm),
        ("feed", f"{new.feed_mm_min * scale:.4g}", new.feed_mm_min != operation.feed_mm_min),
    ]
    return tuple(f"{key} = {value}" for key, value, differs in said if differs)


def _axis_text(axis: tuple[float, float, float] | None) -> str:
    return '"surface"' if axis is None else "[" + ", ".join(f"{part:.6f}" for part in axis) + "]"


def notes_of(job: Job, operation: Operation, scallop_mm: float) -> tuple[str, ...]:
    """Say what was taken for granted."""
    units = Units(job.units == "inch")
    notes = []
    if operation.scallop_mm is None:
        notes.append(
            f"the job gives a stepover; cases keep to the most that it leaves, {units.small(scallop_mm)}"
        )
    for cutter in job.cutters:
        given = [
            other
            for other in job.operations
            if other.does == "finish" and other.cutter.number == cutter.number
        ]
        if not given:
            case = own_case(operation, scallop_mm)
            new = operation_for(job, operation, replace(case, cutter=cutter.number))
            notes.append(
                f"T{cutter.number} has no finishing operation of its own: same speed at the full diameter and same feed per"
                f" tooth as T{operation.cutter.number}, {new.spindle_rpm:.0f} rev/min, {units.feed(new.feed_mm_min)}"
            )
    return tuple(notes)
