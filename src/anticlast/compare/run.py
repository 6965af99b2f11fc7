"""One case from plan to time: planned, posted to a temporary file, read back, checked and estimated.

Runs in worker processes: imports nothing that loads numba before `prepare` had its say.
"""

from __future__ import annotations

import math
import os
import tempfile
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from anticlast.compare.cases import Case
    from anticlast.compare.costs import Costs
    from anticlast.records import Finding, Job, Operation, ReadProgram

# Clearances above this need not be told apart here (mm).
_NEAR_MM = 1.0
# Findings on loads, by the start of their names; a limit that the job sets makes them more than a warning.
_LOADS = ("force", "bending")


@dataclass(frozen=True, slots=True)
class Setup:
    """What all cases of one operation share."""

    job: Job
    operation: Operation


@dataclass(frozen=True, slots=True)
class Outcome:
    """A case and what came of it: its costs, or the check that refused it and why."""

    case: Case
    costs: Costs | None
    check: str = ""
    reason: str = ""


def prepare() -> None:
    """Set up a worker process: one thread each, for the processes already take all cores."""
    os.environ["NUMBA_NUM_THREADS"] = "1"


def try_case(setup: Setup, case: Case) -> Outcome:
    """Plan, post, read back, check and time one case.

    The full proof is left to the best cases; what is checked here are the predicted scallop, the language, the axis
    limits, feeds and spindle, that flutes, shank and holder stay clear, and the load if the job limits it.
    """
    from anticlast import pipeline
    from anticlast.compare.cases import job_for
    from anticlast.compare.costs import costs_of
    from anticlast.errors import CannotPlan, NotConverged

    job = job_for(setup.job, setup.operation, case)
    for finding in pipeline.fit_findings(job):
        if not finding.ok:
            return Outcome(case, None, "cutter fits", finding.message)
    try:
        (path,), (axes,) = pipeline.plan(job)
    except CannotPlan as refused:
        return Outcome(case, None, refused.check, _without_number(str(refused), setup.operation.index))
    except NotConverged as refused:
        return Outcome(case, None, "converged", str(refused))
    with tempfile.TemporaryDirectory(prefix="anticlast-") as folder:
        temporary, _ = pipeline.post(job, (axes,), Path(folder) / f"{job.slug}.ngc")
        program = pipeline.read_back(job, temporary)
        for finding in quick_findings(job, program, path.scallop_predicted_mm):
            if not finding.ok and not finding.warning:
                return Outcome(case, None, finding.check, finding.message)
    return Outcome(case, costs_of(job, path, axes, program))


def _without_number(message: str, index: int) -> str:
    return message.removeprefix(f"operation {index}: ")


def quick_findings(job: Job, program: ReadProgram, scallop_mm: float) -> list[Finding]:
    """Return the findings on a program, whose text still stands, that need no virtual cut."""
    from anticlast.proof import checks, collisions
    from anticlast.proof.patches import finished_patches
    from anticlast.proof.verdict import moving_pieces
    from anticlast.readback.checks import check_axes, check_cutters
    from anticlast.readback.forward import axis_travel, part_motion

    lengths = {0: 0.0, **{cutter.number: cutter.gauge_length_mm for cutter in job.cutters}}
    found = [_scallop(job, scallop_mm), *program.findings, *check_axes(program, job.machine)]
    found += check_cutters(program, {cutter.number for cutter in job.cutters})
    found += checks.check_travel(job, axis_travel(program, job.machine, job.part_origin_mm, lengths))
    found += [*checks.check_feeds(job, program.motions), *checks.check_spindle(job, program.motions)]
    if not all(finding.ok or finding.warning for finding in found):
        return found
    motion = part_motion(program, job.machine, job.part_origin_mm, lengths)
    moving = moving_pieces(job, program, motion)
    cutter = job.operations[0].cutter
    part, rigid = finished_patches(job), collisions.rigid_bodies(cutter)
    found.append(
        checks.check_flutes(job, collisions.flute_clearance(part, motion, moving, cutter, 0.0), motion)
    )
    holder = collisions.least_clearance(part, motion, moving, cutter, rigid, _NEAR_MM)
    found.append(checks.check_holder(holder, motion))
    if cutter.max_force_n is not None or cutter.max_deflection_mm is not None:
        from anticlast.stock.preview import stock_preview

        found += [one for one in stock_preview(job, program, motion).findings if one.check.startswith(_LOADS)]
    return found


def _scallop(job: Job, scallop_mm: float) -> Finding:
    from anticlast.records import Finding
    from anticlast.tolerances import MEASURE_MM

    limit = job.operations[0].scallop_mm
    limit = math.inf if limit is None else limit
    message = f"the planner predicts a scallop of {1e3 * scallop_mm:.2f} µm; {1e3 * limit:.2f} µm are allowed"
    return Finding("scallop", scallop_mm <= limit + MEASURE_MM, scallop_mm, limit, "mm", 0, message)
