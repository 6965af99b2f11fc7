"""How deep and how wide a roughing or outline operation cuts, and what it leaves: the job's keys or their defaults."""

from __future__ import annotations

import math
from typing import Final

from anticlast.cutter import Cutter
from anticlast.records import Operation, Part

# Of the diameter, where the job does not say: layers and width of a roughing cut on bench-top machines, and the
# shallower layers of an outline's groove, which is cut over the full width (common practice).
DEPTH_SHARE: Final = 0.25
WIDTH_SHARE: Final = 0.25
GROOVE_DEPTH_SHARE: Final = 0.15


def cut_depth_mm(operation: Operation) -> float:
    """Return the largest depth of cut along the axis, mm: `depth_of_cut`, or a share of the diameter."""
    if operation.depth_of_cut_mm is not None:
        return operation.depth_of_cut_mm
    share = GROOVE_DEPTH_SHARE if operation.does == "outline" else DEPTH_SHARE
    return min(share * 2.0 * operation.cutter.radius_mm, operation.cutter.flute_length_mm)


def radius_at_mm(cutter: Cutter, height_mm: float) -> float:
    """Return the cutter's radius this much above its tip, mm: the corner arc, then the full radius."""
    corner = cutter.corner_radius_mm
    if height_mm >= corner:
        return cutter.radius_mm
    return cutter.radius_mm - corner + math.sqrt(height_mm * (2.0 * corner - height_mm))


def cut_radius_mm(operation: Operation) -> float:
    """Return the cutter's radius at the top of a layer of the full depth of cut, mm."""
    return radius_at_mm(operation.cutter, cut_depth_mm(operation))


def cut_width_mm(operation: Operation) -> float:
    """Return the width of cut, mm: `width_of_cut`, else `stepover`, else a share of the diameter.

    Never more than the radius at the top of a layer unless slotting is asked for: on a straight run the cutter is
    then engaged over a quarter turn at most.
    """
    radius = cut_radius_mm(operation)
    wanted = operation.width_of_cut_mm or operation.stepover_mm
    if wanted is None:
        wanted = WIDTH_SHARE * 2.0 * operation.cutter.radius_mm
    return min(wanted, (1.95 if operation.slotting else 1.0) * radius)


def cusp_mm(operation: Operation) -> float:
    """Return the height of the cusps that neighbouring passes leave on a layer's floor, mm; 0 for a flat bottom.

    Two corner arcs of radius r whose flat bottoms leave a gap g meet r - sqrt(r^2 - g^2 / 4) above the floor.
    """
    cutter = operation.cutter
    corner = cutter.corner_radius_mm
    gap = cut_width_mm(operation) - 2.0 * (cutter.radius_mm - corner)
    if gap <= 0.0:
        return 0.0
    return corner - math.sqrt(max(corner * corner - 0.25 * gap * gap, 0.0))


def left_mm(operation: Operation, part: Part) -> float:
    """Return a bound on the stock over the finished surface after an operation, along the normal, mm.

    Roughing leaves its allowance, on it steps as high as a layer, and where the surface is hollow what a flat bottom bridges;
    other operations leave their allowance.
    """
    if operation.does == "rough":
        return (
            operation.allowance_mm
            + cut_depth_mm(operation)
            + cusp_mm(operation)
            + _bridged_mm(operation, part)
        )
    return operation.allowance_mm


def _bridged_mm(operation: Operation, part: Part) -> float:
    """Return how far a flat bottom stays above a hollow that it reaches over, mm; 0 for a ball.

    A disc of radius R cuts lowest over the saddle point when that lies on its rim, towards the side that falls. On the rim
    x^2 = 2 R y - y^2, and a x^2 - b y^2 is highest at y = a R / (a + b): a^2 R^2 / (a + b) over the saddle point (derived here).
    """
    cutter = operation.cutter
    if cutter.shape == "ball":
        return 0.0
    return part.a_per_mm**2 * cutter.radius_mm**2 / (part.a_per_mm + part.b_per_mm)
