"""The stock preview as data and as a machinist's table."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from anticlast.records import Finding
    from anticlast.stock.pass_loads import Pair, PassLoad
    from anticlast.stock.preview import StockPreview, StockState

_MM_PER_INCH = 25.4
# Passes in the printed table; the others are counted, and the worst of each kind is among the findings.
_SHOWN_PASSES = 12


def _number(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def _span(pair: Pair) -> dict[str, float | None]:
    return {"low": _number(pair[0]), "high": _number(pair[1])}


def _thickness(state: StockState) -> dict[str, float]:
    low, mean, high = state.thickness_mm
    return {"min": low, "mean": mean, "max": high}


def _pass(one: PassLoad) -> dict[str, Any]:
    return {
        "operation": one.operation,
        "pass": one.number,
        "cutter": one.cutter,
        "lines": [one.line_first, one.line_last],
        "length_mm": one.length_mm,
        "removed_mm3": one.removed_mm3,
        "depth_mm": one.depth_mm,
        "depth_mean_mm": one.depth_mean_mm,
        "width_mm": one.width_mm,
        "width_mean_mm": one.width_mean_mm,
        "engaged_deg": math.degrees(one.engaged_rad),
        "entry_deg": math.degrees(one.entry_rad),
        "exit_deg": math.degrees(one.exit_rad),
        "removal_rate_mm3_min": one.removal_mm3_min,
        "removal_rate_mean_mm3_min": one.removal_mean_mm3_min,
        "chip_mm": one.chip_mm,
        "chip_mean_mm": one.chip_mean_mm,
        "cutting_speed_m_min": {"slowest": one.speed_mm_min[0] / 1e3, "fastest": one.speed_mm_min[1] / 1e3},
        "force_n": _span(one.force_n),
        "tangential_force_mean_n": _span(one.tangential_mean_n),
        "tangential_force_peak_n": _span(one.tangential_peak_n),
        "torque_nmm": _span(one.torque_nmm),
        "power_w": _span(one.power_w),
        "deflection_mm": _span(one.deflection_mm),
        "mark_mm": _span(one.mark_mm),
        "flags": list(one.flags),
    }


def _finding(finding: Finding) -> dict[str, Any]:
    return {
        "check": finding.check, "ok": finding.ok, "warning": finding.warning, "worst": _number(finding.worst),
        "limit": _number(finding.limit), "unit": finding.unit, "line": finding.line, "message": finding.message,
    }  # fmt: skip


def preview_json(preview: StockPreview, only: int | None) -> dict[str, Any]:
    """Return the preview as plain data; see ``StockPreview.as_json``."""
    state = preview.state
    operations = []
    for operation in preview.job.operations:
        before, after = preview.states[operation.index - 1], preview.states[operation.index]
        operations.append(
            {
                "index": operation.index,
                "does": operation.does,
                "cutter": operation.cutter.number,
                "removed_mm3": before.volume_mm3 - after.volume_mm3,
                "volume_above_part_before_mm3": before.above_part_mm3,
                "volume_above_part_after_mm3": after.above_part_mm3,
                "thickness_before_mm": _thickness(before),
                "thickness_after_mm": _thickness(after),
            }
        )
    return {
        "job": preview.job.name,
        "before": preview.before,
        "grid_mm": preview.spacing_mm,
        "material": preview.job.stock.material,
        "forces_known": preview.material_known,
        "stock_volume_mm3": state.volume_mm3,
        "volume_above_part_mm3": state.above_part_mm3,
        "thickness_mm": _thickness(state),
        "operations": operations,
        "passes": [_pass(one) for one in preview.passes if only is None or one.operation == only],
        "clearance": [
            {
                "cutter": body.cutter, "body": body.body, "distance_mm": body.distance_mm, "slack_mm": body.slack_mm,
                "line": body.line,
            }
            for body in preview.clearances
        ],
        "findings": [_finding(finding) for finding in preview.findings],
    }  # fmt: skip


def preview_lines(preview: StockPreview, only: int | None) -> list[str]:
    """Return the preview as lines of text, lengths in the job's units."""
    job, state = preview.job, preview.state
    inch = job.units == "inch"
    k, unit = (1.0 / _MM_PER_INCH, "inch") if inch else (1.0, "mm")
    low, mean, high = (k * value for value in state.thickness_mm)
    end = state.before > len(job.operations)
    lines = [
        f"stock {'at the end' if end else f'before operation {state.before}'}: {k**3 * state.above_part_mm3:.6g} {unit}^3 over"
        f" the finished surface, thickness {low:.3f} to {high:.3f} {unit}, mean {mean:.3f} {unit}",
        f"{job.stock.material}, columns of {k * preview.spacing_mm:.4g} {unit}",
    ]
    for operation in job.operations:
        before, after = preview.states[operation.index - 1], preview.states[operation.index]
        passes = [one for one in preview.passes if one.operation == operation.index]
        lines.append(
            f"operation {operation.index}: {operation.does}, T{operation.cutter.number}: takes"
            f" {k**3 * (before.volume_mm3 - after.volume_mm3):.6g} {unit}^3 in {len(passes)} passes, leaves"
            f" {k * after.thickness_mm[0]:.3f} to {k * after.thickness_mm[2]:.3f} {unit}"
        )
        if passes and (only is None or only == operation.index):
            lines += _table(passes, k, unit)
    lines.append("checks:")
    for finding in sorted(preview.findings, key=lambda item: (item.ok, item.warning)):
        mark = "ok  " if finding.ok else "note" if finding.warning else "FAIL"
        where = f" (line {finding.line})" if finding.line and not finding.ok else ""
        lines.append(f"  {mark}  {finding.message}{where}")
    return lines


def _range(pair: Pair, scale: float, digits: int) -> str:
    if not math.isfinite(pair[1]):
        return "not known"
    return f"{scale * pair[0]:.{digits}f} to {scale * pair[1]:.{digits}f}"


def _table(passes: list[PassLoad], k: float, unit: str) -> list[str]:
    head = (
        f"   pass    depth    width  arc deg  removal {unit}^3/min   speed m/min"
        "      force N        power W     bending um  flags"
    )
    shown = passes
    if len(passes) > _SHOWN_PASSES:
        # The first, the last, and the heaviest between them.
        heavy = sorted(passes, key=lambda one: (-len(one.flags), -one.removal_mm3_min))[: _SHOWN_PASSES - 2]
        kept = {passes[0].number, passes[-1].number, *(one.number for one in heavy)}
        shown = [one for one in passes if one.number in kept]
    rows = [head]
    for one in shown:
        slow, fast = (value / 1e3 for value in one.speed_mm_min)
        rows.append(
            f"  {one.number:5d} {k * one.depth_mm:8.3f} {k * one.width_mm:8.3f} {math.degrees(one.engaged_rad):8.0f}"
            f" {k**3 * one.removal_mm3_min:18.5g} {slow:6.0f} to {fast:<5.0f} {_range(one.force_n, 1.0, 1):>14}"
            f" {_range(one.power_w, 1.0, 1):>14} {_range(one.deflection_mm, 1e3, 1):>14}  {' '.join(one.flags)}"
        )
    if len(shown) < len(passes):
        rows.append(f"  and {len(passes) - len(shown)} lighter passes; --json has them all")
    return rows
