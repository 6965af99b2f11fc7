"""One matched operation in short: where strips are asked for, what they must keep, and ways to lean worth a try.

docs/theory-matched.md.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from anticlast.outline import Outline
from anticlast.passes.fit import Demand, Family, Fit, changes_axis, fit, reaches_all
from anticlast.passes.frame import PassFrame
from anticlast.passes.profile import Nearest, Sweep
from anticlast.passes.strip_lines import Layer, Lines, NoStrip, lay_lines
from anticlast.records import Bools, Floats, Job, Operation
from anticlast.saddle import Saddle
from anticlast.tolerances import CHORD_SHARE_OF_STRIP

# Stations lie no further apart than this share of the surface's tightest radius: between them curvature changes by 2 % of itself.
_STATION_SHARE = 0.22
_LEAST_STATIONS = 9
# Where not every axis is reached, lead and lean change along a line by themselves, and what is chosen changes from line to line.
_CLOSE_ALONG_MM, _CLOSE_ACROSS_MM = 3.0, 4.0
_RIM_MM = 1.0
# There a strip may be lifted off its deepest place by this share of the height at most.
_LIFT_SHARE = 0.15


@dataclass(frozen=True, slots=True)
class Task:
    """A matched operation on its surface and machine.

    Attributes
    ----------
    frame : PassFrame
        Of the feed direction; its radius is that of the cutter.
    sweep : Sweep
    outline : Outline
    operation : Operation
    u_mm, v_mm : (nu,), (nv,)
        Stations, over the outline and the cutter's radius round it.
    counts : (nv, nu) bool
        Those that lie inside the outline or next to it.
    full : bool
        The machine reaches every axis that is asked for.
    """

    frame: PassFrame
    sweep: Sweep
    outline: Outline
    operation: Operation
    u_mm: Floats
    v_mm: Floats
    counts: Bools
    full: bool

    @classmethod
    def of(cls, job: Job, operation: Operation, nearest: Nearest) -> Task:
        """Return the task of an operation, stations laid as closely as the machine asks for."""
        saddle, outline = Saddle.of(job.part), job.part.outline
        frame = PassFrame(saddle, operation.direction_rad, operation.cutter.radius_mm, operation.allowance_mm)
        sweep = Sweep(saddle, operation.direction_rad, operation.cutter, operation.allowance_mm, nearest)
        rim = frame.uv(outline.boundary_points(_RIM_MM))
        full = reaches_all(sweep, *rim)
        widest = _STATION_SHARE * 0.5 / max(saddle.a_per_mm, saddle.b_per_mm)
        spacing = (widest, widest) if full else (min(widest, _CLOSE_ALONG_MM), min(widest, _CLOSE_ACROSS_MM))
        grids = []
        for at, apart in zip(rim, spacing, strict=True):
            low, high = (
                float(at.min()) - operation.cutter.radius_mm,
                float(at.max()) + operation.cutter.radius_mm,
            )
            grids.append(np.linspace(low, high, max(_LEAST_STATIONS, math.ceil((high - low) / apart) + 1)))
        along, across = grids
        return cls(frame, sweep, outline, operation, along, across, _beside(frame, outline, grids), full)

    @property
    def budget_mm(self) -> float:
        """What chords and linearisation together may add to the scallop, mm."""
        return min(self.operation.tolerance_mm, CHORD_SHARE_OF_STRIP * (self.operation.scallop_mm or 0.0))

    @property
    def design_mm(self) -> float:
        """Scallop limit less that budget, mm."""
        return (self.operation.scallop_mm or 0.0) - self.budget_mm

    @property
    def ways(self) -> tuple[int, ...]:
        """How passes are fed: +1 along +u, -1 against it."""
        return (1,) if self.operation.way == "one-way" else (1, -1)

    def stations(self) -> tuple[Floats, Floats]:
        """Return u and v (n,) of all stations, v by v."""
        v, u = (grid.ravel() for grid in np.meshgrid(self.v_mm, self.u_mm, indexing="ij"))
        return u, v

    def inside(self) -> Bools:
        """Tell which stations lie inside the outline (nv, nu); the one nearest to it, if none does."""
        u, v = self.stations()
        inside = self.outline.contains(self.frame.xy(u, v))
        if not inside.any():
            point = self.outline.polygon.representative_point()
            pu, pv = self.frame.uv(np.array([[point.x, point.y]]))
            inside[np.argmin(np.hypot(u - pu, v - pv))] = True
        return inside.reshape(self.counts.shape)

    def families(self) -> list[Family]:
        """Return the ways to lean that are worth a try: by lead; with fewer rotary axes also by lean, to either side."""
        lead = Family("lead", True, 1.0, self.operation.lean_rad)
        if self.full:
            return [lead]
        lean = [Family("lean", False, sign, self.operation.lead_rad) for sign in (1.0, -1.0)]
        u, v = self.stations()
        return [family for family in (lead, *lean) if changes_axis(self.sweep, u, v, family)] or [lead]

    def fit(self, family: Family, height_mm: float) -> Fit:
        """Return the widest strips that leave at most a height."""
        # Chords may gouge as much as they may raise the scallop; what is left of the tolerance is for the tilt error.
        allowed = self.operation.tolerance_mm - 0.5 * self.budget_mm
        lift = math.inf if self.full else _LIFT_SHARE * height_mm
        demand = Demand(
            height_mm, self.operation.lead_margin_rad, allowed, max(self.operation.lead_rad, 0.0), lift
        )
        return fit(self.sweep, self.u_mm, self.v_mm, self.ways, family, demand, self.counts, self.full)

    def layer(self, found: Fit, zigzag: bool = True) -> Layer:
        """Return what lines for a fit are laid by."""
        return Layer(self.frame, self.outline, found, zigzag)

    def best(self) -> tuple[Fit, Lines] | NoStrip:
        """Return the fit at the design height that needs fewest passes, with its lines; or a place that has no strip."""
        best: tuple[Fit, Lines] | None = None
        refused = NoStrip(0.0, 0.0)
        for family in self.families():
            found = self.fit(family, self.design_mm)
            lines = lay_lines(self.layer(found))
            if isinstance(lines, NoStrip):
                refused = lines
            elif best is None or lines.wanted < best[1].wanted:
                best = (found, lines)
        return best or refused

    def with_part_turned(self) -> Task:
        """Return the same task with the part turned a quarter turn on the table, on half as many lines of stations.

        Part coordinates turn with it.
        """
        nearest = self.sweep.nearest
        v = np.linspace(self.v_mm[0], self.v_mm[-1], max(_LEAST_STATIONS, self.v_mm.size // 2 + 1))

        def turned(axis: Floats) -> Floats:
            """Return the nearest axes (n, 3): turned into the machine, asked for, turned back."""
            got = nearest(np.column_stack((-axis[:, 1], axis[:, 0], axis[:, 2])))
            return np.column_stack((got[:, 1], -got[:, 0], got[:, 2]))

        counts = _beside(self.frame, self.outline, [self.u_mm, v])
        return replace(self, sweep=replace(self.sweep, nearest=turned), v_mm=v, counts=counts)


def _beside(frame: PassFrame, outline: Outline, grids: list[Floats]) -> Bools:
    """Tell which stations of a grid lie inside the outline or next to it (nv, nu)."""
    v, u = (grid.ravel() for grid in np.meshgrid(grids[1], grids[0], indexing="ij"))
    beside = outline.grown(max(float(grid[1] - grid[0]) for grid in grids)).contains(frame.xy(u, v))
    return np.asarray(beside).reshape(grids[1].size, grids[0].size)
