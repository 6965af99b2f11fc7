"""Pattern *matched*: a bull or flat end mill leaned so that its swept profile fits the surface, in wide strips.

docs/theory-matched.md.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from anticlast.errors import CannotPlan, NotConverged
from anticlast.outline import Outline
from anticlast.passes import matched_rows, strips
from anticlast.passes.cover import Pieces, pieces_of, spread
from anticlast.passes.cusp import surface_step
from anticlast.passes.fit import TOLD_ERROR_RAD, Demand, Family, Fit, fit, reaches_all
from anticlast.passes.frame import PassFrame
from anticlast.passes.legs import legs_of, linked
from anticlast.passes.order import Cut, cutting_order
from anticlast.passes.profile import Nearest, Sweep, Track
from anticlast.passes.scallop import second_order_step
from anticlast.records import CutterPath, Floats, Job, Operation, Purpose
from anticlast.saddle import Saddle
from anticlast.tolerances import CHORD_SHARE_OF_STRIP

# Stations lie no further apart than this share of the surface's tightest radius: curvature changes by 1 % of itself then.
_STATION_SHARE = 0.15
_LEAST_STATIONS = 9
# With one rotary axis what can be leaned changes faster, from pass to pass.
_CLOSE_STATION_MM = 3.0
# Passes run this much further than contacts need (mm), so that the last pose is never the one that cuts.
_OVERRUN_MM = 0.3
# Rims are looked at, and ridges and strips along their length, at this spacing.
_LOOK_MM = 1.0
_LOOK_ASIDE = 8
_ROUNDS = 8
# The height is lowered until the passes come out at a whole number within this share of one.
_EVEN_SHARE = 0.05
# Of the machine stage's half of the budget, what the highest of many ridges is usually raised by.
_LINEAR_SHARE = 0.5
# Links take no longer than this at feed.
_LINK_SECONDS = 1.0


@dataclass(frozen=True, slots=True)
class Laid:
    """Lines, pieces in cutting order and what they leave, for one way of leaning."""

    fit: Fit
    lines_mm: Floats
    pieces: Pieces
    order: list[Cut]
    highest_mm: float
    lowest_mm: float
    lift_mm: float


def plan_matched(job: Job, operation: Operation, nearest: Nearest, rise_mm: float) -> CutterPath:
    """Plan the matched passes of a finishing operation.

    Parameters
    ----------
    job : Job
    operation : Operation
        With a bull or flat end mill and a scallop limit.
    nearest : callable
        From wished cutter axes (n, 3) in part coordinates to the reachable ones nearest to them.
    rise_mm : float
        How far above its pass the cutter starts an entry.

    Raises
    ------
    CannotPlan
        If the axis is fixed, or the cutter finds no strip somewhere: no lean within reach keeps limit, tolerance
        and tilt error.
    NotConverged
        If no spacing of the passes settles.
    """
    _require(operation)
    assert operation.scallop_mm is not None, "checked"
    saddle, outline = Saddle.of(job.part), job.part.outline
    frame = PassFrame(saddle, operation.direction_rad, operation.cutter.radius_mm, operation.allowance_mm)
    sweep = Sweep(saddle, operation.direction_rad, operation.cutter, operation.allowance_mm, nearest)
    budget = _budget_mm(operation)
    design = operation.scallop_mm - budget
    stations, full = _stations(sweep, outline)
    best, refused = _best_family(frame, sweep, outline, operation, stations, full, design)
    if best is None:
        raise _no_strip(frame, operation, refused, full, job)
    laid = _lay(frame, sweep, outline, operation, best, stations, full, design)
    legs = legs_of(frame, laid.pieces, laid.order, _stays(frame, operation, laid, outline, sweep))
    chords = matched_rows.Chords(0.5 * budget, min(budget, 0.5 * operation.tolerance_mm))
    stretches, sag = matched_rows.stretches_of(frame, sweep, operation, laid, legs, chords, rise_mm)
    cut = legs.purpose == Purpose.CUT
    return CutterPath(
        operation=operation,
        stretches=stretches,
        passes=len(laid.order),
        cut_length_mm=float(saddle.line_length_mm(legs.start_mm[cut], legs.end_mm[cut]).sum()),
        stepover_mm=_stepover(frame, outline, laid.lines_mm),
        scallop_predicted_mm=laid.highest_mm + sag + _LINEAR_SHARE * 0.5 * budget,
        chord_mm=chords.outward_mm,
        notes=_notes(frame, sweep, operation, outline, laid, full, len(stretches), design, stations),
    )


def _require(operation: Operation) -> None:
    if operation.scallop_mm is None:
        raise CannotPlan("scallop", f"operation {operation.index}: pattern 'matched' needs a scallop limit")
    if operation.cutter.shape == "ball":
        raise CannotPlan(
            "cutter shape",
            f"operation {operation.index}: pattern 'matched' needs a bull or flat end mill, "
            f"cutter {operation.cutter.number} is a ball",
        )
    if operation.fixed_axis is not None:
        raise CannotPlan(
            "cutter axis",
            f"operation {operation.index}: pattern 'matched' sets the lean of the cutter itself; "
            'leave axis = "fixed" out, or use a ball and another pattern',
        )


def _stations(sweep: Sweep, outline: Outline) -> tuple[tuple[Floats, Floats], bool]:
    """Return u and v grids of stations over the outline and the cutter's reach round it, and if all axes are reached."""
    c, s = math.cos(sweep.direction_rad), math.sin(sweep.direction_rad)
    xy = outline.boundary_points(_LOOK_MM)
    u, v = xy[:, 0] * c + xy[:, 1] * s, xy[:, 1] * c - xy[:, 0] * s
    full = reaches_all(sweep, u, v)
    tightest = 0.5 / max(sweep.saddle.a_per_mm, sweep.saddle.b_per_mm)
    grids = []
    for across, at in ((False, u), (True, v)):
        low, high = float(at.min()) - sweep.cutter.radius_mm, float(at.max()) + sweep.cutter.radius_mm
        spacing = _STATION_SHARE * tightest
        if not full and across:
            spacing = min(spacing, _CLOSE_STATION_MM)
        grids.append(np.linspace(low, high, max(_LEAST_STATIONS, math.ceil((high - low) / spacing) + 1)))
    return (grids[0], grids[1]), full


def _families(operation: Operation, full: bool) -> list[Family]:
    """Return the ways to lean that are worth a try: by lead, and with fewer rotary axes also by lean, to either side."""
    lead = Family("lead", True, 1.0, operation.lean_rad)
    if full:
        return [lead]
    return [
        lead,
        Family("lean to the left", False, 1.0, operation.lead_rad),
        Family("lean to the right", False, -1.0, operation.lead_rad),
    ]


def _demand(operation: Operation, height_mm: float) -> Demand:
    allowed = operation.tolerance_mm - 0.5 * _budget_mm(operation)
    return Demand(height_mm, operation.lead_margin_rad, allowed, max(operation.lead_rad, 0.0))


def _budget_mm(operation: Operation) -> float:
    """Return what chords and linearisation together may add to the scallop."""
    return min(operation.tolerance_mm, CHORD_SHARE_OF_STRIP * (operation.scallop_mm or 0.0))


def _ways(operation: Operation) -> tuple[int, ...]:
    return (1,) if operation.way == "one-way" else (1, -1)


def _best_family(
    frame: PassFrame, sweep: Sweep, outline: Outline, operation: Operation, stations: tuple[Floats, Floats], full: bool,
    height_mm: float,
) -> tuple[tuple[Fit, strips.Lines] | None, strips.NoStrip]:  # fmt: skip
    """Return the fit that needs fewest passes with its lines, or None and a place that has no strip."""
    best: tuple[Fit, strips.Lines] | None = None
    refused = strips.NoStrip(0.0, 0.0)
    for family in _families(operation, full):
        found = fit(sweep, *stations, _ways(operation), family, _demand(operation, height_mm), full)
        lines = strips.lay_lines(frame, outline, found)
        if isinstance(lines, strips.NoStrip):
            refused = lines
        elif best is None or lines.wanted < best[1].wanted:
            best = (found, lines)
    return best, refused


def _no_strip(frame: PassFrame, operation: Operation, at: strips.NoStrip, full: bool, job: Job) -> CannotPlan:
    x, y = frame.xy(np.array([at.u_mm]), np.array([at.v_mm]))[0]
    cutter = operation.cutter
    why = (
        f"a {2.0 * cutter.radius_mm:.4g} mm {cutter.shape} end mill finds no lean near ({x:.2f}, {y:.2f}) at which it leaves "
        f"no more than {1e3 * (operation.scallop_mm or 0.0):.3g} µm without gouging over {1e3 * operation.tolerance_mm:.3g} µm "
        f"under a tilt error of {math.degrees(operation.lead_margin_rad):.3g} degrees"
    )
    mend = (
        "use a smaller cutter, a larger tolerance or a smaller lead_margin"
        if full
        else f"machine {job.machine.name} cannot lean it as it needs: turn the part on the table, use a machine with two "
        "rotary axes, or a ball and another pattern"
    )
    return CannotPlan("strip", f"operation {operation.index}: {why}; {mend}")


def _lay(
    frame: PassFrame, sweep: Sweep, outline: Outline, operation: Operation, best: tuple[Fit, strips.Lines],
    stations: tuple[Floats, Floats], full: bool, design_mm: float,
) -> Laid:  # fmt: skip
    """Return passes that keep to the design height as they are cut, and come out even at both edges."""
    found, lines = best
    count = lines.v_mm.size
    height = design_mm
    evened = count - lines.wanted <= _EVEN_SHARE
    laid = None
    for _ in range(_ROUNDS):
        if not evened:
            # Strips grow with about the fourth root of the height; what a whole number of passes has to spare lowers it.
            evened = True
            lower = height * max((lines.wanted - _EVEN_SHARE) / count, 0.5) ** 3
            other = fit(sweep, *stations, _ways(operation), found.family, _demand(operation, lower), full)
            tried = strips.lay_lines(frame, outline, other)
            if isinstance(tried, strips.Lines) and tried.v_mm.size == count:
                found, lines, height = other, tried, lower
        laid = _as_cut(
            frame, sweep, outline, operation, found, strips.closed_up(lines, outline, frame.direction_rad)
        )
        if laid.highest_mm <= design_mm:
            return laid
        height *= (1.0 - 1e-3) * design_mm / laid.highest_mm
        found = fit(sweep, *stations, _ways(operation), found.family, _demand(operation, height), full)
        again = strips.lay_lines(frame, outline, found)
        if isinstance(again, strips.NoStrip):
            break
        lines, count = again, again.v_mm.size
    highest = laid.highest_mm if laid is not None else math.inf
    raise NotConverged("spacing of the matched passes", highest - design_mm, 0.0)


def _as_cut(
    frame: PassFrame, sweep: Sweep, outline: Outline, operation: Operation, found: Fit, lines_mm: Floats
) -> Laid:
    """Return passes on given lines in cutting order, and the highest and lowest place that they leave in the outline."""
    ahead = float(found.strips.ahead_mm.max()) + _OVERRUN_MM
    behind = float(found.strips.behind_mm.max()) + _OVERRUN_MM
    longest = max(ahead, behind)
    pieces = pieces_of(frame, outline, lines_mm, longest, 2.0 * longest)
    order = cutting_order(pieces, operation.way)
    u0, u1 = pieces.u0_mm.copy(), pieces.u1_mm.copy()
    for cut in order:
        # Contacts lie ahead of the strip as the table measures it, along +u; per way the fields know which end needs it.
        way = 0 if cut.sign > 0 else min(1, len(found.angle_rad) - 1)
        u1[cut.piece] += float(found.strips.ahead_mm[way].max()) + _OVERRUN_MM - longest
        u0[cut.piece] -= float(found.strips.behind_mm[way].max()) + _OVERRUN_MM - longest
    pieces = replace(pieces, u0_mm=u0, u1_mm=u1)
    sign = np.zeros(lines_mm.size, dtype=np.int64)
    for cut in order:
        sign[pieces.line[cut.piece]] = cut.sign
    low, high = float(u0.min()) - sweep.reach_mm, float(u1.max()) + sweep.reach_mm
    tracks = [
        track_of(sweep, found, float(v), int(way), low, high) for v, way in zip(lines_mm, sign, strict=True)
    ]
    height = _looked_at(frame, sweep, outline, tracks, lines_mm, found)
    return Laid(found, lines_mm, pieces, order, float(height.max()), float(height.min()), 0.0)


def track_of(sweep: Sweep, found: Fit, v_mm: float, way: int, low_mm: float, high_mm: float) -> Track:
    """Return the poses of the pass on a line from low to high u."""
    u = low_mm + sweep.step_mm * np.arange(math.ceil((high_mm - low_mm) / sweep.step_mm) + 4)
    v = np.full(u.size, v_mm)
    lead, lean, lift = found.wish(0 if way > 0 else 1, u, v)
    return Track(v_mm, low_mm, sweep.table(*sweep.poses(u, v, way, lead, lean, lift)))


def _looked_at(
    frame: PassFrame, sweep: Sweep, outline: Outline, tracks: list[Track], lines_mm: Floats, found: Fit
) -> Floats:
    """Return heights at all ridges between passes, in all strips, and on the rim, inside the outline (n,)."""
    seen = []
    index, u0, u1 = outline.clip_lines(frame.direction_rad, 0.5 * (lines_mm[1:] + lines_mm[:-1]))
    owner, u = spread(u0, u1, _LOOK_MM)
    strip = index[owner]
    for number, (first, second) in enumerate(zip(tracks[:-1], tracks[1:], strict=True)):
        at = u[strip == number]
        if at.size:
            seen.append(sweep.ridges(at, first, second)[1])
    index, u0, u1 = outline.clip_lines(frame.direction_rad, lines_mm)
    owner, u = spread(u0, u1, _LOOK_MM)
    strip = index[owner]
    rim_u, rim_v = frame.uv(outline.boundary_points(_LOOK_MM))
    near = np.argmin(np.abs(rim_v[:, None] - lines_mm), axis=1)
    rim = np.full(rim_u.size, np.inf)
    for number, track in enumerate(tracks):
        at = u[strip == number]
        left, right = found.reach(at, np.full(at.size, track.v_mm))
        share = np.linspace(-0.95, 0.95, 2 * _LOOK_ASIDE + 1)
        v = track.v_mm + np.where(share > 0.0, share * left[:, None], share * right[:, None])
        if at.size:
            places = np.broadcast_to(at[:, None], v.shape).ravel()
            seen.append(sweep.heights(places, v.ravel(), track))
        beside = np.flatnonzero(np.abs(near - number) <= 1)
        if beside.size:
            rim[beside] = np.minimum(rim[beside], sweep.heights(rim_u[beside], rim_v[beside], track))
    seen.append(rim)
    return np.concatenate(seen)


def _stays(frame: PassFrame, operation: Operation, laid: Laid, outline: Outline, sweep: Sweep) -> np.ndarray:
    """Tell after which piece the cutter goes on to the next without a lift."""
    ground = outline.grown(2.0 * operation.cutter.radius_mm)
    longest = _LINK_SECONDS * operation.feed_mm_min / 60.0
    return linked(frame, laid.pieces, laid.order, ground, longest, operation.way == "one-way")


def _stepover(frame: PassFrame, outline: Outline, lines_mm: Floats) -> tuple[float, float]:
    """Return smallest and largest surface distance between neighbouring passes inside the outline."""
    if lines_mm.size < 2:
        return 0.0, 0.0
    index, u0, u1 = outline.clip_lines(frame.direction_rad, 0.5 * (lines_mm[1:] + lines_mm[:-1]))
    owner, u = spread(u0, u1, _LOOK_MM)
    strip = index[owner]
    if not strip.size:
        return 0.0, 0.0
    steps = surface_step(frame.saddle, u, lines_mm[strip], lines_mm[strip + 1], frame.direction_rad)
    return float(steps.min()), float(steps.max())


# ------------------------------------------------------------------------------------------ notes


def _notes(
    frame: PassFrame, sweep: Sweep, operation: Operation, outline: Outline, laid: Laid, full: bool, stretches: int,
    design_mm: float, stations: tuple[Floats, Floats],
) -> tuple[str, ...]:  # fmt: skip
    found = laid.fit
    inside = _inside(frame, outline, found)
    lead, lean = (np.degrees(found.reached_rad[i][:, inside]) for i in (0, 1))
    width = (found.strips.left_mm + found.strips.right_mm)[:, inside]
    notes = [
        f"lead {lead.min():.2f} to {lead.max():.2f} degrees"
        + (f", lean {lean.min():.2f} to {lean.max():.2f} degrees" if np.abs(lean).max() > 1e-3 else "")
        + f", strips {width.min():.2f} to {width.max():.2f} mm wide in plan",
        _tilt_note(operation, found, inside),
    ]
    if stretches > 1:
        notes.append(f"the cutter lifts {stretches - 1} times between passes")
    ball = _ball_note(frame, operation, found, inside, width)
    if ball:
        notes.append(ball)
    if not full:
        notes.append(_turned_note(frame, sweep, operation, outline, laid, stations, design_mm))
    return tuple(notes)


def _inside(frame: PassFrame, outline: Outline, found: Fit) -> np.ndarray:
    """Tell which stations lie inside the outline (nv, nu); the one nearest to it, if none does."""
    v, u = (grid.ravel() for grid in np.meshgrid(found.v_mm, found.u_mm, indexing="ij"))
    inside = outline.contains(frame.xy(u, v))
    if not inside.any():
        point = outline.polygon.representative_point()
        pu, pv = frame.uv(np.array([[point.x, point.y]]))
        inside[np.argmin(np.hypot(u - pu, v - pv))] = True
    return inside.reshape(found.v_mm.size, found.u_mm.size)


def _tilt_note(operation: Operation, found: Fit, inside: np.ndarray) -> str:
    """Say what a tilt error does: of 0.05 degrees always, and of the error the lead was chosen to survive."""
    strips_ = found.strips
    told = np.max(np.maximum(0.0, strips_.told_gouge_mm[:, inside]))
    rise = TOLD_ERROR_RAD * float(np.max(strips_.arm_mm[:, inside]))
    text = f"a tilt error of 0.05 degrees about the contact would gouge {1e3 * told:.2f} µm and raise the scallop by up to {1e3 * rise:.2f} µm"
    margin = math.degrees(operation.lead_margin_rad)
    if abs(margin - 0.05) > 1e-9:
        worst = float(np.max(strips_.margin_gouge_mm[:, inside]))
        text += f"; the lead is chosen for {margin:.3g} degrees, which would gouge {1e3 * worst:.2f} µm"
    return f"{text}; {1e3 * operation.tolerance_mm:.3g} µm are allowed"


def _ball_note(frame: PassFrame, operation: Operation, found: Fit, inside: np.ndarray, width: Floats) -> str:
    """Compare the strips with the steps of a ball of the same radius at the same scallop limit."""
    v, u = (grid[inside] for grid in np.meshgrid(found.v_mm, found.u_mm, indexing="ij"))
    xy = frame.xy(u, v)
    try:
        step = second_order_step(
            frame.saddle, operation.cutter.radius_mm, xy, frame.direction_rad, operation.scallop_mm or 0.0,
            operation.allowance_mm,
        )  # fmt: skip
    except CannotPlan:
        return "a ball of the same radius would not fit the surface"
    _, _, _, tangent, _ = frame.saddle.along(xy, frame.direction_rad)
    across = frame.saddle.stretch(xy) * np.linalg.norm(tangent[:, :2], axis=1)
    ratio = width.min(axis=0) * across / step
    text = f"strips are {ratio.min():.2f} to {ratio.max():.2f} times as wide as the steps of a ball of the same radius"
    worse = float(np.mean(ratio < 1.0))
    if worse > 0.0:
        text += f"; over {100.0 * worse:.0f} % of the surface the ball is better: use it and another pattern there"
    return text


def _turned_note(
    frame: PassFrame, sweep: Sweep, operation: Operation, outline: Outline, laid: Laid, stations: tuple[Floats, Floats],
    design_mm: float,
) -> str:  # fmt: skip
    """Say what turning the part a quarter turn on the table would gain, on a machine that does not reach every axis."""

    def turned(axis: Floats) -> Floats:
        """Return the nearest axis with the part turned 90 degrees: turn into the machine, ask, turn back."""
        there = np.column_stack((-axis[:, 1], axis[:, 0], axis[:, 2]))
        got = sweep.nearest(np.ascontiguousarray(there))
        return np.column_stack((got[:, 1], -got[:, 0], got[:, 2]))

    other = replace(sweep, nearest=turned)
    best, _ = _best_family(frame, other, outline, operation, stations, False, design_mm)
    now = len(laid.lines_mm)
    if best is None:
        return f"with the part turned 90 degrees on the table this machine could not cut matched strips; as it is they take {now} passes"
    then = best[1].v_mm.size
    change = "no fewer" if then >= now else f"{100.0 * (1.0 - then / now):.0f} % fewer"
    return (
        f"with the part turned 90 degrees on the table it would take {then} passes instead of {now}, {change}"
    )
