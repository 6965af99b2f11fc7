"""Spindle speed from cutting speed, at the diameter that a cutter really cuts on."""

from __future__ import annotations

import math

from anticlast.cutter import Cutter
from anticlast.file_schema import Checked
from anticlast.job_checks import axis_of
from anticlast.job_schema import CutterTable, OperationTable, StockTable
from anticlast.records import Machine


def cutter_of(table: CutterTable) -> Cutter:
    """Make the record of a cutter whose table has no faults."""
    radius = table.diameter / 2.0
    corner = {"ball": radius, "bull": table.corner_radius or 0.0, "flat": 0.0}[table.shape]
    shank = table.diameter if table.shank_diameter is None else table.shank_diameter
    return Cutter(
        number=table.number,
        shape=table.shape,
        radius_mm=radius,
        corner_radius_mm=corner,
        flutes=table.flutes,
        flute_length_mm=table.flute_length,
        shank_radius_mm=shank / 2.0,
        stickout_mm=table.stickout,
        holder=tuple((diameter / 2.0, length) for diameter, length in table.holder),
        plunge=table.plunge,
        ramp_angle_rad=math.radians(table.ramp_angle),
        max_force_n=table.max_force,
        max_deflection_mm=table.max_deflection,
    )


def spindle_rpm(
    table: OperationTable, cutter: Cutter, machine: Machine, left_before_mm: float | None
) -> float:
    """Spindle speed: as given, or from the cutting speed v at the effective diameter, n = v / (pi D_e).

    Parameters
    ----------
    table : OperationTable
    cutter : Cutter
    machine : Machine
    left_before_mm : float or None
        What the operation before leaves on the surface, or for the first the blank; None if unknown.

    Returns
    -------
    float
        rev/min, not yet held against the machine's range.
    """
    if table.spindle is not None:
        return table.spindle
    assert table.cutting_speed is not None, "one of the two is checked to be there"
    return (
        table.cutting_speed
        * 1000.0
        / (math.pi * _cutting_diameter_mm(table, cutter, machine, left_before_mm))
    )


def check_speeds(
    stock: Checked[StockTable],
    cutters: list[Checked[CutterTable]],
    operations: list[Checked[OperationTable]],
    machine: Machine,
) -> None:
    """Hold the spindle speeds that come of cutting speeds against the machine's range."""
    whole = {cutter.table.number: cutter.table for cutter in cutters if cutter.complete}
    left_before_mm = stock.get("allowance")
    for operation in operations:
        cutter = whole.get(operation.get("cutter"))
        if (
            operation.complete
            and cutter is not None
            and operation.get("cutting_speed")
            and not operation.get("spindle")
        ):
            _check_speed(operation, cutter_of(cutter), machine, left_before_mm)
        if operation.get("does") != "outline":
            left_before_mm = operation.get("allowance")


def _check_speed(
    operation: Checked[OperationTable], cutter: Cutter, machine: Machine, left_before_mm: float | None
) -> None:
    table = operation.table
    rpm = spindle_rpm(table, cutter, machine, left_before_mm)
    low, high = machine.spindle.min_rpm, machine.spindle.max_rpm
    if low <= rpm <= high:
        return
    diameter_mm = _cutting_diameter_mm(table, cutter, machine, left_before_mm)
    slowest, fastest = (math.pi * diameter_mm * limit / 1000.0 for limit in (low, high))
    operation.fault(
        "cutting_speed",
        f"found {table.cutting_speed:g}; on the effective diameter of {diameter_mm:.4g} mm that is {rpm:.0f} "
        f"rev/min, but {machine.name} turns from {low:g} to {high:g}; "
        f"needs from {slowest:.4g} to {fastest:.4g} m/min, or spindle",
    )


def _cutting_diameter_mm(
    table: OperationTable, cutter: Cutter, machine: Machine, left_before_mm: float | None
) -> float:
    """Effective diameter at the depth the operation takes off; if unknown, at the depth of its scallop."""
    if left_before_mm is not None and left_before_mm > table.allowance:
        depth_mm = left_before_mm - table.allowance
    elif table.scallop is not None:
        depth_mm = table.scallop
    elif table.stepover is not None:
        depth_mm = table.stepover**2 / (8.0 * cutter.radius_mm)  # handbook form for a flat, h = s^2 / (8 R)
    else:
        depth_mm = cutter.radius_mm
    return cutter.effective_diameter_mm(depth_mm, _tilt_rad(table, machine))


def _tilt_rad(table: OperationTable, machine: Machine) -> float:
    """Angle asked for between cutter axis and surface normal; at the saddle point for a fixed axis."""
    fixed = axis_of(table)
    if fixed is not None:
        return math.acos(min(1.0, fixed[2]))
    if not machine.rotary:
        return 0.0
    return math.acos(math.cos(math.radians(table.lead)) * math.cos(math.radians(table.lean)))
