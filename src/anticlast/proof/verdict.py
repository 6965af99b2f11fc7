"""The verdict on one program text: every check, and what was measured on the way."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from anticlast.proof import checks
from anticlast.proof.beside import pieces_beside
from anticlast.proof.collisions import (
    Clearance,
    cutting_body,
    flute_clearance,
    least_clearance,
    lifts,
    nearer,
    rigid_bodies,
    rigid_clearance,
)
from anticlast.proof.patches import COARSE_MM, blank_patches, finished_patches
from anticlast.proof.standing import holder_in_standing, rapids_in_standing, standing_clearances
from anticlast.proof.virtual_cut import measure, scallop_map
from anticlast.readback.checks import check_axes, check_cutters, known_places
from anticlast.readback.forward import axis_travel, part_motion
from anticlast.readback.lengths import check_lengths
from anticlast.records import SIX, Proof

if TYPE_CHECKING:
    from anticlast.records import Bools, Finding, Job, PartMotion, ReadProgram

_NOTHING = Clearance(math.inf, math.inf)


def prove(job: Job, program: ReadProgram, grid_mm: float | None = None) -> tuple[Proof, PartMotion]:
    """Prove a program that was read back, against its job.

    What could be read of a program that breaks the language is measured all the same; it is never released.

    Parameters
    ----------
    job : Job
    program : ReadProgram
    grid_mm : float, optional
        Spacing of the virtual cut's nodes [mm]; chosen from the job if not given.

    Returns
    -------
    Proof
    PartMotion
        The motion that was proved, in part coordinates.

    Raises
    ------
    NotConverged
        An iteration of the geometry stalled.
    """
    lengths = {cutter.number: cutter.gauge_length_mm for cutter in job.cutters}
    # Cutters the job does not know are reported; their motion is placed as if they had no length.
    used = np.unique(np.concatenate((program.motions.tool, program.motions.offset_h))).tolist()
    lengths = {**{int(number): 0.0 for number in used}, **lengths}
    motion = part_motion(program, job.machine, job.part_origin_mm, lengths)
    travel = axis_travel(program, job.machine, job.part_origin_mm, lengths)
    findings: list[Finding] = [*program.findings, *check_axes(program, job.machine)]
    findings += check_cutters(program, {cutter.number for cutter in job.cutters})
    findings += check_lengths(program, job.machine, lengths)
    findings += checks.check_cuts_at_all(program)
    findings.append(checks.check_units(job, program))
    findings += checks.check_stock(job)
    moving = moving_pieces(job, program, motion)
    findings += checks.check_start_known(program, motion, moving)
    beside = pieces_beside(job, motion)
    cut = measure(job, motion, grid_mm, wanted_mm=checks.wanted_height_mm(job), moving=moving & ~beside)
    findings.append(checks.check_scallop(job, cut, motion))
    findings.append(checks.check_gouge(job, cut.gouge, motion))
    findings.append(checks.check_uncut(job, cut))
    holder, rapid = _collisions(job, motion, moving, beside, findings)
    findings += checks.check_travel(job, travel)
    findings += checks.check_feeds(job, program.motions)
    findings += checks.check_spindle(job, program.motions)
    wanted = checks.wanted_height_mm(job)
    proof = Proof(
        grid_mm=cut.grid_mm,
        scallop_max_mm=cut.highest_mm - wanted,
        scallop_bound_mm=cut.bound_mm - wanted,
        scallop_at_mm=cut.highest_at_mm,
        gouge_max_mm=cut.gouge.deepest_mm,
        gouge_bound_mm=cut.gouge.bound_mm,
        uncut_area_mm2=cut.uncut_area_mm2,
        holder_clearance_mm=holder,
        rapid_clearance_mm=rapid,
        travel={letter: (low, high) for letter, (low, high, _, _) in travel.items()},
        findings=tuple(findings),
        scallop_map=scallop_map(cut, _stepover_mm(job), checks.gouge_limit_mm(job)),
    )
    return proof, motion


def _collisions(
    job: Job, motion: PartMotion, moving: Bools, beside: Bools, findings: list[Finding]
) -> tuple[float, float]:
    """Add the findings about collisions; return holder and rapid clearance [mm].

    ``beside`` are pieces whose flutes cannot touch the finished surface.
    """
    finished, coarse, blank = finished_patches(job), finished_patches(job, COARSE_MM), blank_patches(job)
    at_rapid = moving & motion.rapid & ~lifts(motion)
    flutes = holder = cutting = rigid = in_stock = _NOTHING
    for cutter in job.cutters:
        bodies = rigid_bodies(cutter)
        flutes = nearer(flutes, flute_clearance(finished, motion, moving & ~beside, cutter, 0.0))
        holder = nearer(holder, rigid_clearance(coarse, finished, motion, moving, cutter))
        ends = [cutting_body(cutter)]
        cutting = nearer(cutting, least_clearance(blank, motion, at_rapid, cutter, ends, share=0.0))
        rigid = nearer(rigid, least_clearance(blank, motion, at_rapid, cutter, bodies))
        feeding = moving & ~motion.rapid
        in_stock = nearer(in_stock, least_clearance(blank, motion, feeding, cutter, bodies, 1.0))
    findings.append(checks.check_flutes(job, flutes, motion))
    findings.append(checks.check_holder(holder, motion))
    rapids, near = (
        checks.check_rapids(job, cutting, rigid, motion),
        min(cutting.distance_mm, rigid.distance_mm),
    )
    in_blank = checks.check_holder_in_stock(in_stock, motion)
    if not rapids.ok or in_blank:
        # The blank before any cut is the strict answer; what stands by then decides where that one is not enough.
        standing = standing_clearances(job, motion, moving)
        in_blank = holder_in_standing(standing, motion) if in_blank else []
        if not rapids.ok:
            rapids = rapids_in_standing(job, standing, motion, rigid_clear=rigid.bound_mm > 0.0)
            near = rapids.worst
    findings += [rapids, *in_blank]
    return holder.distance_mm, near


def _stepover_mm(job: Job) -> float:
    """Return about how far apart crests of the finishing operations lie: s^2 = 8 R h on a flat [mm]; 0 if unknown."""
    finishing = [operation for operation in job.operations if operation.does == "finish"]
    return max(
        (
            operation.stepover_mm
            or math.sqrt(8.0 * operation.cutter.radius_mm * (operation.scallop_mm or 0.0))
            for operation in finishing
        ),
        default=0.0,
    )


def moving_pieces(job: Job, program: ReadProgram, motion: PartMotion) -> Bools:
    """Tell which pieces are motion between places that the program states, (m,) bool.

    Left out are rows where a new length offset puts the tip elsewhere without motion, and the first moves of a program,
    which start wherever the machine was left.
    """
    at_start, at_end = known_places(program)
    columns = [SIX.index(letter) for letter in job.machine.letters]
    known: Bools = np.logical_and.reduce((at_start & at_end)[:, columns], axis=1)
    moving: Bools = motion.fraction > 0.0
    moving[:1] = False
    if known.size:
        moving &= known[np.maximum(motion.motion, 0)]
    return moving
