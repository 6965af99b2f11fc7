"""Cutting speed and chip of a finishing operation at the diameter that really cuts."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.records import CutterPath, Job, Operation, Purpose


@dataclass(frozen=True, slots=True)
class CuttingValues:
    """What the cutter works at, from the flattest to the steepest tilt met along the passes.

    Attributes
    ----------
    depth_mm : float
        Stock to take, normal to the surface; nan when the blank has no even allowance there.
    tilt_rad : (float, float)
        Smallest and largest angle between cutter axis and surface normal.
    effective_diameter_mm, speed_mm_min : (float, float)
        At those tilts.
    feed_per_tooth_mm : float
        Feed over spindle speed and number of flutes.
    chip_mm : (float, float)
        Feed per tooth times effective over full diameter.
    """

    depth_mm: float
    tilt_rad: tuple[float, float]
    effective_diameter_mm: tuple[float, float]
    speed_mm_min: tuple[float, float]
    feed_per_tooth_mm: float
    chip_mm: tuple[float, float]


def depth_of_cut_mm(job: Job, operation: Operation) -> float:
    """Stock found on the surface less what is left; nan when nothing before left an even allowance."""
    found = math.nan if job.stock.allowance_mm is None else job.stock.allowance_mm
    for before in job.operations:
        if before.index >= operation.index:
            break
        found = before.allowance_mm
    return found - operation.allowance_mm


def tilt_range_rad(job: Job, operation: Operation, path: CutterPath | None) -> tuple[float, float]:
    """Smallest and largest angle of the cutter axis to the normal where it cuts; as asked without a path."""
    if path is not None:
        cosines = [
            np.sum(stretch.axis * stretch.normal, axis=1)[stretch.purpose == Purpose.CUT]
            for stretch in path.stretches
        ]
        every = np.concatenate(cosines) if cosines else np.empty(0)
        if every.size and operation.does != "rough":
            return (
                math.acos(float(np.clip(every.max(), -1.0, 1.0))),
                math.acos(float(np.clip(every.min(), -1.0, 1.0))),
            )
    asked = math.acos(math.cos(operation.lead_rad) * math.cos(operation.lean_rad))
    return asked, asked


def cutting_values(job: Job, operation: Operation, path: CutterPath | None) -> CuttingValues:
    """Work out speed and chip at the effective diameter.

    A ball cuts on D_e = D sin(tilt + acos(1 - 2 ap / D)) at most (``Cutter.effective_diameter_mm``); makers'
    tables multiply the feed by D / D_e to keep the chip (Dapra, Ball nose feed and speed compensation, table
    2), so an uncompensated feed per tooth leaves a chip of D_e / D of it. Without an even allowance the full
    diameter is taken.
    """
    cutter = operation.cutter
    depth = depth_of_cut_mm(job, operation)
    tilt = tilt_range_rad(job, operation, path)
    full = 2.0 * cutter.radius_mm
    known = math.isfinite(depth) and depth > 0
    ends = [cutter.effective_diameter_mm(depth, angle) if known else full for angle in tilt]
    low, high = min(ends), max(ends)
    tooth = operation.feed_mm_min / (operation.spindle_rpm * cutter.flutes)
    return CuttingValues(
        depth_mm=depth,
        tilt_rad=tilt,
        effective_diameter_mm=(low, high),
        speed_mm_min=(math.pi * low * operation.spindle_rpm, math.pi * high * operation.spindle_rpm),
        feed_per_tooth_mm=tooth,
        chip_mm=(tooth * low / full, tooth * high / full),
    )
