"""The answer to "which stepover leaves which scallop here", for a ball cutter over the outline.

The exact cusps (`anticlast.passes.cusp`) and the stepover rules (`anticlast.passes.stepover`) can be had from
here too. Derivations: docs/theory-surface.md.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from anticlast.errors import BadInput, Fault
from anticlast.extremes import extremes
from anticlast.passes.cusp import (
    cusp_height,
    lines_beside,
    plan_of,
    plan_step,
    surface_step,
)
from anticlast.passes.stepover import (
    ScallopField,
    flat_height,
    flat_step,
    length_floor_mm,
    local_scallop,
    local_step,
    roughness_um,
    scallop_field,
    second_order_height,
    second_order_step,
    varying,
)
from anticlast.quadrature import nodes_and_weights
from anticlast.saddle import Saddle

if TYPE_CHECKING:
    from anticlast.cutter import Cutter
    from anticlast.outline import Outline

_MM_PER_INCH = 25.4

__all__ = [
    "ScallopAnswer",
    "ScallopField",
    "cusp_height",
    "flat_height",
    "flat_step",
    "length_floor_mm",
    "lines_beside",
    "local_scallop",
    "local_step",
    "plan_of",
    "plan_step",
    "roughness_um",
    "scallop_answer",
    "scallop_field",
    "second_order_height",
    "second_order_step",
    "surface_step",
]


@dataclass(frozen=True, slots=True)
class ScallopAnswer:
    """Stepover against scallop for one cutter and direction over the outline.

    Attributes
    ----------
    cutter : int
        Its number.
    radius_mm, direction_rad, allowance_mm : float
    asked : {"stepover", "scallop"}
        Which of the two was given; the other varies over the outline.
    stepover_mm : (tightest, mean, widest)
        Distance on the surface square to the feed; mean over the area.
    scallop_mm : (smallest, mean, largest)
    tightest_at_mm, widest_at_mm : (x, y)
        Part coordinates. Tightest: smallest stepover for a scallop, largest scallop for a stepover.
    flat_stepover_mm, flat_scallop_mm : float
        What was asked, and what the flat rule R - sqrt(R^2 - s^2/4) makes of it.
    flat_leaves_mm : (smallest, largest)
        The scallop that passes at ``flat_stepover_mm`` leave on this surface.
    ra_um, rz_um : float
        Roughness across the feed where the scallop is largest, from the cusps alone.
    """

    cutter: int
    radius_mm: float
    direction_rad: float
    allowance_mm: float
    asked: str
    stepover_mm: tuple[float, float, float]
    scallop_mm: tuple[float, float, float]
    tightest_at_mm: tuple[float, float]
    widest_at_mm: tuple[float, float]
    flat_stepover_mm: float
    flat_scallop_mm: float
    flat_leaves_mm: tuple[float, float]
    ra_um: float
    rz_um: float

    def as_json(self) -> dict[str, Any]:
        """Return the answer as plain data, lengths in mm."""
        step, height = self.stepover_mm, self.scallop_mm
        return {
            "cutter": self.cutter,
            "direction_deg": math.degrees(self.direction_rad),
            "allowance_mm": self.allowance_mm,
            "asked": self.asked,
            "stepover_mm": {"tightest": step[0], "mean": step[1], "widest": step[2]},
            "scallop_mm": {"smallest": height[0], "mean": height[1], "largest": height[2]},
            "at": {"tightest": list(self.tightest_at_mm), "widest": list(self.widest_at_mm)},
            "flat_rule": {
                "stepover_mm": self.flat_stepover_mm,
                "scallop_mm": self.flat_scallop_mm,
                "leaves_mm": {"smallest": self.flat_leaves_mm[0], "largest": self.flat_leaves_mm[1]},
            },
            "ra_um": self.ra_um,
            "rz_um": self.rz_um,
        }

    def lines(self, units: str = "mm") -> list[str]:
        """Return a table to read; lengths in ``units``, mm or inch."""
        scale, digits = (1.0, 4) if units == "mm" else (1.0 / _MM_PER_INCH, 5)
        step, height = self.stepover_mm, self.scallop_mm
        height = height[::-1]  # the tightest place has the largest scallop

        def row(name: str, s: float, h: float, at: tuple[float, float] | None) -> str:
            d = digits - 2
            x, y = (round(c * scale, d) + 0.0 for c in at or (0.0, 0.0))  # + 0.0: no negative zero
            place = "" if at is None else f"   at X{x:.{d}f} Y{y:.{d}f}"
            return f"  {name:<16}{s * scale:>12.{digits}f}{h * scale:>12.{digits + 1}f}{place}"

        promised, worst = self.flat_scallop_mm, self.flat_leaves_mm[1]
        share = 100.0 * (worst / promised - 1.0)
        verdict = f"{abs(share):.1f} % {'over' if share > 0 else 'under'} what it says"
        return [
            f"T{self.cutter}, ball diameter {2 * self.radius_mm * scale:.{digits - 1}f} {units}, "
            f"feed at {math.degrees(self.direction_rad):.4g} deg from X, "
            f"allowance {self.allowance_mm * scale:.{digits - 1}f}",
            f"  {units:<16}{'stepover':>12}{'scallop':>12}",
            row("tightest place", step[0], height[0], self.tightest_at_mm),
            row("mean over area", step[1], height[1], None),
            row("widest place", step[2], height[2], self.widest_at_mm),
            row("flat rule", self.flat_stepover_mm, self.flat_scallop_mm, None),
            f"  The flat rule's stepover leaves {self.flat_leaves_mm[0] * scale:.{digits + 1}f} to "
            f"{worst * scale:.{digits + 1}f} {units} here: at most {verdict}.",
            f"  Across the feed where the scallop is largest: Ra {self.ra_um:.2f} um, Rz {self.rz_um:.2f} um",
        ]


def scallop_answer(
    saddle: Saddle,
    outline: Outline,
    cutter: Cutter,
    direction_rad: float,
    stepover_mm: float | None = None,
    scallop_mm: float | None = None,
    allowance_mm: float = 0.0,
) -> ScallopAnswer:
    """Answer which stepover leaves which scallop over the outline, exactly, with the flat rule beside it.

    Parameters
    ----------
    saddle, outline, cutter
        The surface, its outline, and a ball.
    direction_rad : float
        Feed direction from part X.
    stepover_mm, scallop_mm : float or None
        Exactly one of them.
    allowance_mm : float
        Stock left on the surface, along its normal.

    Raises
    ------
    BadInput
        If the cutter is no ball, or not exactly one of stepover and scallop is given.
    CannotPlan
        If the ball does not fit the surface, or the passes do not overlap.
    """
    if cutter.shape != "ball":
        message = (
            f"cutter {cutter.number} is a {cutter.shape} end mill; stepover against scallop needs a ball"
        )
        raise BadInput(Fault("command line", 0, "cutter", message))
    radius = cutter.radius_mm
    function = varying(saddle, radius, direction_rad, stepover_mm, scallop_mm, allowance_mm)
    x0, y0, x1, y1 = outline.bounds
    extent = max(x1 - x0, y1 - y0)
    least, most = extremes(outline, function)
    nodes, weights = nodes_and_weights(outline.triangles(extent / 6.0))
    weights = weights * saddle.stretch(nodes)
    varies = (least.value, float(function(nodes) @ weights / weights.sum()), most.value)
    if scallop_mm is not None:
        flat = (flat_step(radius, scallop_mm), scallop_mm)
        left = varying(saddle, radius, direction_rad, flat[0], None, allowance_mm)
        flat_leaves = tuple(place.value for place in extremes(outline, left))
        steps, heights, tightest, widest = varies, (scallop_mm,) * 3, least, most
    else:
        assert stepover_mm is not None  # `varying` has seen to it
        flat, flat_leaves = (stepover_mm, flat_height(radius, stepover_mm)), (varies[0], varies[2])
        steps, heights, tightest, widest = (stepover_mm,) * 3, varies, most, least
    ra_um, rz_um = roughness_um(heights[2])
    return ScallopAnswer(
        cutter=cutter.number,
        radius_mm=radius,
        direction_rad=direction_rad,
        allowance_mm=allowance_mm,
        asked="stepover" if scallop_mm is None else "scallop",
        stepover_mm=steps,
        scallop_mm=heights,
        tightest_at_mm=tightest.at_mm,
        widest_at_mm=widest.at_mm,
        flat_stepover_mm=flat[0],
        flat_scallop_mm=flat[1],
        flat_leaves_mm=(flat_leaves[0], flat_leaves[1]),
        ra_um=float(ra_um),
        rz_um=float(rz_um),
    )
