"""How far apart passes may lie: the tightest place, the outline's edges, and what lines leave behind.

Exact cusps come from ``passes.scallop``; the leading-order metric only picks the places worth asking about.
docs/theory-passes.md#spacing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from anticlast.outline import Outline
from anticlast.passes.cover import Samples, spread
from anticlast.passes.cusp import cusp_height, lines_beside, plan_step, surface_step
from anticlast.passes.frame import PassFrame
from anticlast.records import Floats

# The exact cusp leaves the leading order by a share of about h/R and of the curvature's change over half a
# step; places whose metric is within this share of the worst are asked exactly.
_TIGHT_SHARE = 0.06
# Never ask more places than this at once: they are the worst ones.
_MOST_PLACES = 600
_RIDGE_SAMPLE_MM = 1.5
_RIM_SAMPLES_PER_GAP = 4.0


def tight(crowding: Floats, share: float = _TIGHT_SHARE) -> np.ndarray:
    """Return the indices of the places whose metric is within a share of the worst, at most a few hundred."""
    found = np.flatnonzero(crowding >= (1.0 - share) * crowding.max())
    if found.size > _MOST_PLACES:
        found = found[np.argpartition(crowding[found], -_MOST_PLACES)[-_MOST_PLACES:]]
    return found


def widest_constant_step(frame: PassFrame, samples: Samples, height_mm: float) -> float:
    """Return the largest plan step [mm] that leaves at most ``height_mm`` all over the outline."""
    at = tight(samples.crowding)
    right, left = lines_beside(
        frame.saddle,
        frame.radius_mm,
        samples.u_mm[at],
        samples.v_mm[at],
        frame.direction_rad,
        height_mm,
        frame.allowance_mm,
    )
    return float((left - right).min())


def next_step(frame: PassFrame, samples: Samples, v_mm: float, height_mm: float) -> float:
    """Return the plan step [mm] from pass line v to the next: what the tightest point between allows."""
    reach = 0.0
    while True:
        window = samples.window(v_mm, v_mm + reach)
        crowding = samples.crowding[window]
        # Neighbouring lines of samples hold the same u nearly; the metric's change between them is inside the
        # share.
        at = tight(crowding)
        u = samples.u_mm[window][at]
        step = float(
            plan_step(
                frame.saddle, frame.radius_mm, u, v_mm, frame.direction_rad, height_mm, frame.allowance_mm
            ).min()
        )
        if step <= max(reach, samples.gap_mm):
            return step
        reach = step if reach == 0.0 else 1.05 * step


def edge_distances(frame: PassFrame, samples: Samples, height_mm: float) -> tuple[float, float]:
    """Return how far [mm] the first and the last pass may lie from the lowest and highest v of the outline.

    A single ball's track may leave ``height_mm`` at the very edge; beyond it there is nothing left to leave.
    """
    half = 0.5 * math.sqrt(8.0 * height_mm / float(samples.crowding.min()))
    low, high = samples.v_low_mm, samples.v_high_mm
    found = []
    for edge, window, side in (
        (low, samples.window(low, low + half), 1),
        (high, samples.window(high - half, high), 0),
    ):
        at = tight(samples.crowding[window])
        u = samples.u_mm[window][at]
        beside = lines_beside(
            frame.saddle, frame.radius_mm, u, edge, frame.direction_rad, height_mm, frame.allowance_mm
        )[side]
        found.append(float(np.abs(beside - edge).min()))
    return found[0], found[1]


@dataclass(frozen=True, slots=True)
class Left:
    """What a set of passes leaves inside the outline, chords not counted.

    Attributes
    ----------
    highest_mm : float
        Highest cusp, the outline's rim included.
    xy_mm, along : (n, 2)
        Plan of the places that were asked exactly, part coordinates, and the unit plan direction of the passes there.
    height_mm : (n,)
        What is left there.
    stepover_mm : (float, float)
        Smallest and largest distance on the surface between neighbouring passes; (0, 0) for a single pass.
    """

    highest_mm: float
    xy_mm: Floats
    along: Floats
    height_mm: Floats
    stepover_mm: tuple[float, float]


def left_behind(frame: PassFrame, outline: Outline, lines_mm: Floats) -> Left:
    """Return what passes on lines (n,), ascending v, leave in the outline: between them and on its rim."""
    places = []
    stepover = (0.0, 0.0)
    if lines_mm.size > 1:
        middle = 0.5 * (lines_mm[1:] + lines_mm[:-1])
        index, u0, u1 = outline.clip_lines(frame.direction_rad, middle)
        owner, u = spread(u0, u1, _RIDGE_SAMPLE_MM)
        strip = index[owner]
        gap = np.diff(lines_mm)[strip]
        steps = surface_step(frame.saddle, u, lines_mm[strip], lines_mm[strip + 1], frame.direction_rad)
        if steps.size:
            stepover = (float(steps.min()), float(steps.max()))
            at = tight(frame.crowding(u, middle[strip]) * gap * gap)
            height = cusp_height(
                frame.saddle,
                frame.radius_mm,
                u[at],
                lines_mm[strip[at]],
                lines_mm[strip[at] + 1],
                frame.direction_rad,
                frame.allowance_mm,
            )
            places.append((u[at], middle[strip[at]], height))
    places.append(_on_rim(frame, outline, lines_mm))
    u, v, height = (np.concatenate(column) for column in zip(*places, strict=True))
    feed = np.repeat(frame.xy(np.ones(1), np.zeros(1)), u.size, axis=0)
    return Left(float(height.max()), frame.xy(u, v), feed, height, stepover)


def _on_rim(frame: PassFrame, outline: Outline, lines_mm: Floats) -> tuple[Floats, Floats, Floats]:
    """Return the rim's worst points and the height there: the least that passes on either side leave."""
    low, high = outline.v_range(frame.direction_rad)
    gap = float(np.diff(lines_mm).mean()) if lines_mm.size > 1 else high - low
    u, v = frame.uv(outline.boundary_points(gap / _RIM_SAMPLES_PER_GAP))
    after = np.clip(np.searchsorted(lines_mm, v), 0, lines_mm.size - 1)
    before = np.clip(after - 1, 0, lines_mm.size - 1)
    near = np.minimum(np.abs(v - lines_mm[after]), np.abs(v - lines_mm[before]))
    at = tight(frame.crowding(u, v) * near * near, 4.0 * _TIGHT_SHARE)
    u, v = u[at], v[at]
    height = np.minimum(
        frame.left_over(u, v, lines_mm[before[at]]), frame.left_over(u, v, lines_mm[after[at]])
    )
    return u, v, height
