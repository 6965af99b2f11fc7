"""Loads gathered pass by pass."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from anticlast.records import Floats, Ints, Job, PartMotion
    from anticlast.stock.engagement import Engagement
    from anticlast.stock.loads import Loads
    from anticlast.stock.sweep import Segments

Pair = tuple[float, float]


@dataclass(frozen=True, slots=True)
class PassLoad:
    """What one pass meets. Largest values along the pass unless named mean; pairs are low and high.

    Attributes
    ----------
    operation, number, cutter : int
    line_first, line_last : int
        Program lines.
    length_mm : float
        Of feed motion that cuts.
    removed_mm3 : float
    depth_mm, depth_mean_mm, width_mm, width_mean_mm : float
    engaged_rad, entry_rad, exit_rad : float
        Widest engaged arc, and where it begins and ends, see ``Engagement``.
    removal_mm3_min, removal_mean_mm3_min : float
    chip_mm, chip_mean_mm : float
    speed_mm_min : (float, float)
        At the slowest and the fastest engaged point.
    tangential_mean_n, tangential_peak_n, force_n, torque_nmm, power_w, deflection_mm, mark_mm : (float, float)
        By the material's range; nan if no force is known. ``force_n`` is across the cutter, radial force included.
    force_line, power_line, chip_line, speed_line, deflection_line : int
        Program line where each is largest.
    flags : tuple of str
        What is over its limit, see ``limits.flags_of``.
    """

    operation: int
    number: int
    cutter: int
    line_first: int
    line_last: int
    length_mm: float
    removed_mm3: float
    depth_mm: float
    depth_mean_mm: float
    width_mm: float
    width_mean_mm: float
    engaged_rad: float
    entry_rad: float
    exit_rad: float
    removal_mm3_min: float
    removal_mean_mm3_min: float
    chip_mm: float
    chip_mean_mm: float
    speed_mm_min: Pair
    tangential_mean_n: Pair
    tangential_peak_n: Pair
    force_n: Pair
    torque_nmm: Pair
    power_w: Pair
    deflection_mm: Pair
    mark_mm: Pair
    force_line: int
    power_line: int
    chip_line: int
    speed_line: int
    deflection_line: int
    flags: tuple[str, ...] = ()


def pass_loads(
    job: Job,
    segments: Segments,
    found: Engagement,
    loads: Loads,
    operation: Ints,
    number: Ints,
    motion: PartMotion,
    known: bool,
) -> tuple[PassLoad, ...]:
    """Gather the loads of every pass, in order of time; motion that belongs to no pass is left out.

    Parameters
    ----------
    segments, found, loads
        Row by row.
    operation, number : (k,) int64
        Operation and pass of each segment.
    motion : PartMotion
        For the program lines.
    known : bool
        Whether cutting forces are known.
    """
    from anticlast.stock.limits import flagged

    key = operation * (int(number.max(initial=0)) + 1) + number
    rows = np.flatnonzero((number > 0) & ~segments.rapid)
    if not rows.size:
        return ()
    order = rows[np.argsort(key[rows], kind="stable")]
    edges = np.concatenate(([0], np.flatnonzero(np.diff(key[order])) + 1, [len(order)]))
    groups = [order[low:high] for low, high in zip(edges[:-1], edges[1:], strict=True)]
    groups.sort(key=lambda group: int(group[0]))
    lines = motion.line[segments.row]
    return tuple(
        flagged(job, _one(job, segments, found, loads, group, operation, number, lines, known))
        for group in groups
    )


def _one(
    job: Job, segments: Segments, found: Engagement, loads: Loads, rows: np.ndarray, operation: Ints, number: Ints,
    lines: Ints, known: bool,
) -> PassLoad:  # fmt: skip
    cutting = rows[found.section_mm2[rows] > 0.0]
    length = segments.length_mm[cutting]

    def most(values: Floats) -> float:
        return float(np.nanmax(values[cutting], initial=0.0)) if cutting.size else 0.0

    def mean(values: Floats) -> float:
        good = np.isfinite(values[cutting])
        return float(np.average(values[cutting][good], weights=length[good])) if np.any(good) else 0.0

    def pair(values: Floats) -> Pair:
        return (most(values[:, 0]), most(values[:, 1])) if known else (float("nan"), float("nan"))

    def line(values: Floats) -> int:
        best = np.where(np.isfinite(values[cutting]), values[cutting], -1.0)
        return int(lines[cutting[int(np.argmax(best))]]) if cutting.size else int(lines[rows[0]])

    widest = cutting[int(np.argmax(found.arc_rad[cutting]))] if cutting.size else rows[0]
    seen = cutting[found.arc_rad[cutting] > 0.0]
    slowest = float(found.speed_slow_mm_min[seen].min()) if seen.size else 0.0
    first = rows[0]
    return PassLoad(
        operation=int(operation[first]),
        number=int(number[first]),
        cutter=job.cutters[int(segments.shape[first])].number,
        line_first=int(lines[rows].min()),
        line_last=int(lines[rows].max()),
        length_mm=float(length.sum()),
        removed_mm3=float(found.volume_mm3[rows].sum()),
        depth_mm=most(found.depth_mm),
        depth_mean_mm=mean(found.depth_mm),
        width_mm=most(found.width_mm),
        width_mean_mm=mean(found.width_mm),
        engaged_rad=float(found.arc_rad[widest]),
        entry_rad=float(found.entry_rad[widest]),
        exit_rad=float(found.exit_rad[widest]),
        removal_mm3_min=most(found.removal_mm3_min),
        removal_mean_mm3_min=mean(found.removal_mm3_min),
        chip_mm=most(found.chip_max_mm),
        chip_mean_mm=mean(found.chip_mean_mm),
        speed_mm_min=(slowest, most(found.speed_fast_mm_min)),
        tangential_mean_n=pair(found.force_mean_n),
        tangential_peak_n=pair(found.force_peak_n),
        force_n=pair(loads.force_n),
        torque_nmm=pair(found.torque_peak_nmm),
        power_w=pair(found.power_w),
        deflection_mm=pair(loads.deflection_mm),
        mark_mm=pair(loads.mark_mm),
        force_line=line(loads.force_n[:, 1]),
        power_line=line(found.power_w[:, 1]),
        chip_line=line(found.chip_max_mm),
        speed_line=line(found.speed_fast_mm_min),
        deflection_line=line(loads.mark_mm[:, 1]),
    )
