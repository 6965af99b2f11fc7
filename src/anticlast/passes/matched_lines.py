"""Matched passes as they will be cut: lines in cutting order, and what is left between them, looked at with the true cutter.

docs/theory-matched.md#spacing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from anticlast.errors import NotConverged
from anticlast.passes.cover import Pieces, pieces_of, spread
from anticlast.passes.fit import Fit
from anticlast.passes.matched_task import Task
from anticlast.passes.order import Cut, cutting_order
from anticlast.passes.profile import Track
from anticlast.passes.strip_lines import Lines, NoStrip, closed_up, lay_lines
from anticlast.records import Floats

# Passes run this much further than contacts need (mm), so that the last pose is never the one that cuts.
_OVERRUN_MM = 0.3
# Rims, ridges and strips are looked at along their length at this spacing, strips at so many places to either side.
_LOOK_MM = 1.5
_LOOK_ASIDE = 5
# What a pass leaves this share of the way to its neighbour is its own: no other cuts there.
_OWN_SHARE = 0.4
_ROUNDS = 12
# Passes may lie this share of the tolerance below the surface between stations before they are raised.
_SINK_SHARE = 0.25
# The height is lowered until the passes come out at a whole number within this share of one.
_EVEN_SHARE = 0.05
# Where something stands too high, steps are cut down for this share of the limit.
_UNDER = 0.98


@dataclass(frozen=True, slots=True)
class Left:
    """What passes leave inside the outline: highest on the ridge after each pass, in strips, and on the rim beside each pass.

    -inf where a ridge or a strip does not meet the outline. ``lowest_mm`` is the lowest place of all strips.
    """

    ridge_mm: Floats
    strip_mm: Floats
    rim_mm: Floats
    lowest_mm: float

    @property
    def highest_mm(self) -> float:
        """Highest of all."""
        return float(max(self.ridge_mm.max(initial=-math.inf), self.strip_mm.max(), self.rim_mm.max()))


@dataclass(frozen=True, slots=True)
class Laid:
    """Lines, pieces in cutting order and what they leave, for one way of leaning."""

    fit: Fit
    lines_mm: Floats
    pieces: Pieces
    order: list[Cut]
    left: Left


def lay(task: Task, found: Fit, lines: Lines) -> Laid:
    """Return passes that keep to the design height as they are cut, and come out even at both edges.

    Parameters
    ----------
    task : Task
    found, lines : Fit, Lines
        As `Task.best` has them.

    Raises
    ------
    NotConverged
        If what is left stays over the design height.
    """
    design = task.design_mm
    if task.full and lines.v_mm.size - lines.wanted > _EVEN_SHARE:
        found, lines = _evened(task, found, lines)
    layer, at = task.layer(found), closed_up(lines)
    highest = found_for = design
    for _ in range(_ROUNDS):
        pieces, order = _cut_order(task, found, at)
        if layer.zigzag and not _alternates(pieces, order):
            # Cells of the outline are cut in another order than the lines lie; each line has to do for both ways.
            layer = replace(layer, zigzag=False)
            again = lay_lines(layer)
            if isinstance(again, NoStrip):
                break
            at = closed_up(again)
            pieces, order = _cut_order(task, found, at)
        left = _left_by(task, found, at, pieces, order)
        highest = left.highest_mm
        sunk = -left.lowest_mm > _SINK_SHARE * task.operation.tolerance_mm
        if highest <= design and not sunk:
            return Laid(found, at, pieces, order, left)
        if sunk:
            # Between stations lead and lift are not quite what they should be: all passes go up by as much.
            raised = replace(found.strips, lift_mm=found.strips.lift_mm - left.lowest_mm)
            found = replace(found, strips=raised)
            layer = replace(layer, fit=found)
            continue
        if float(left.strip_mm.max()) > design:
            found_for *= 0.98 * design / float(left.strip_mm.max())
            found = task.fit(found.family, found_for)
            layer = replace(layer, fit=found)
            again = lay_lines(layer)
        else:
            again = lay_lines(layer, _narrowed(task, at, left))
        if isinstance(again, NoStrip):
            break
        at = again.v_mm
    raise NotConverged("spacing of the matched passes", highest - design, 0.0)


def _evened(task: Task, found: Fit, lines: Lines) -> tuple[Fit, Lines]:
    """Return a fit for a lower height that takes as many passes: strips grow with about its fourth root."""
    lower = task.design_mm * max((lines.wanted - _EVEN_SHARE) / lines.v_mm.size, 0.5) ** 3
    other = task.fit(found.family, lower)
    tried = lay_lines(task.layer(other))
    if isinstance(tried, Lines) and tried.v_mm.size == lines.v_mm.size:
        return other, tried
    return found, lines


def _narrowed(task: Task, lines_mm: Floats, left: Left) -> Floats:
    """Return the lines with each step cut down where its ridge, or the rim beside it, stands too high.

    Heights go with the square of the step at least.
    """
    low, _ = task.outline.v_range(task.frame.direction_rad)
    worst = np.maximum(np.append(left.ridge_mm, -np.inf), left.rim_mm)
    share = np.sqrt(np.minimum(_UNDER * task.design_mm / np.maximum(worst, task.design_mm * _UNDER), 1.0))
    first = (lines_mm[0] - low) * (share[0] if left.rim_mm[0] > task.design_mm else 1.0)
    # A rim may lie to either side of its pass.
    either = np.minimum(share[:-1], np.where(left.rim_mm[1:] > task.design_mm, share[1:], 1.0))
    return low + first + np.concatenate(([0.0], np.cumsum(np.diff(lines_mm) * either)))


def _alternates(pieces: Pieces, order: list[Cut]) -> bool:
    """Tell whether every piece is fed as zigzag lines were laid: along +u on even lines, against it on odd ones."""
    return all(cut.sign == (1 if pieces.line[cut.piece] % 2 == 0 else -1) for cut in order)


def _cut_order(task: Task, found: Fit, lines_mm: Floats) -> tuple[Pieces, list[Cut]]:
    """Return the pieces of passes on given lines, as far past the outline as contacts lie from what they cut, in order."""
    ahead, behind = found.strips.ahead_mm, found.strips.behind_mm
    longest = float(max(ahead.max(), behind.max())) + _OVERRUN_MM
    pieces = pieces_of(task.frame, task.outline, lines_mm, longest, 2.0 * longest)
    order = cutting_order(pieces, task.operation.way)
    u0, u1 = pieces.u0_mm.copy(), pieces.u1_mm.copy()
    for cut in order:
        way = 0 if cut.sign > 0 else 1
        u1[cut.piece] += float(ahead[way].max()) + _OVERRUN_MM - longest
        u0[cut.piece] -= float(behind[way].max()) + _OVERRUN_MM - longest
    return replace(pieces, u0_mm=u0, u1_mm=u1), order


def track_of(task: Task, found: Fit, v_mm: float, way: int, low_mm: float, high_mm: float) -> Track:
    """Return the poses of the pass on a line, fed along +u (way 1) or against it (-1), from low to high u."""
    sweep = task.sweep
    u = np.asarray(
        low_mm + sweep.step_mm * np.arange(math.ceil((high_mm - low_mm) / sweep.step_mm) + 4), np.float64
    )
    v = np.full(u.size, v_mm, np.float64)
    lead, lean, lift = found.wish(0 if way > 0 else 1, u, v)
    return Track(v_mm, low_mm, sweep.table(*sweep.poses(u, v, way, lead, lean, lift)))


def _left_by(task: Task, found: Fit, lines_mm: Floats, pieces: Pieces, order: list[Cut]) -> Left:
    """Return what passes leave, each taken to go on without end along its line."""
    sign = np.zeros(lines_mm.size, dtype=np.int64)
    for cut in order:
        sign[pieces.line[cut.piece]] = cut.sign
    reach = task.sweep.reach_mm
    low, high = float(pieces.u0_mm.min()) - reach, float(pieces.u1_mm.max()) + reach
    tracks = [
        track_of(task, found, float(v), int(way), low, high) for v, way in zip(lines_mm, sign, strict=True)
    ]
    ridge = np.full(max(lines_mm.size - 1, 0), -np.inf)
    for number, u in enumerate(_places(task, 0.5 * (lines_mm[1:] + lines_mm[:-1]))):
        if u.size:
            ridge[number] = task.sweep.ridges(u, tracks[number], tracks[number + 1])[1].max()
    strip, lowest = np.full(lines_mm.size, -np.inf), math.inf
    for number, (u, track) in enumerate(zip(_places(task, lines_mm), tracks, strict=True)):
        if u.size:
            own = _in_strip(task, found, lines_mm, number, u, track, int(sign[number]))
            strip[number], lowest = own.max(), min(lowest, float(own.min()), _under_edge(task, u, track))
    return Left(ridge, strip, _on_rim(task, lines_mm, tracks), lowest)


def _in_strip(
    task: Task, found: Fit, lines_mm: Floats, number: int, u_mm: Floats, track: Track, sign: int
) -> Floats:
    """Return the heights of a pass's own strip at abscissae u (n,) and some places to either side."""
    share = np.linspace(-0.95, 0.95, 2 * _LOOK_ASIDE + 1)
    left, right = found.reach((0 if sign >= 0 else 1,), u_mm, np.full(u_mm.size, track.v_mm))
    aside = np.where(share > 0.0, share * left[:, None], share * right[:, None])
    if lines_mm.size > 1:
        steps = np.diff(lines_mm)[max(number - 1, 0) : number + 1]
        aside = np.clip(aside, -_OWN_SHARE * float(steps.min()), _OWN_SHARE * float(steps.min()))
    places = np.broadcast_to(u_mm[:, None], aside.shape).ravel()
    return task.sweep.heights(places, track.v_mm + aside.ravel(), track)


def _under_edge(task: Task, u_mm: Floats, track: Track) -> float:
    """Return the lowest place under both edges of the bottom and half-way to them, at abscissae u (n,)."""
    xy = task.frame.xy(u_mm, np.full(u_mm.size, track.v_mm))
    tangent = task.frame.saddle.tangent(xy, task.frame.direction_rad)
    across = task.frame.saddle.stretch(xy) * np.linalg.norm(tangent[:, :2], axis=1)
    aside = task.sweep.disc_mm / across[:, None] * np.array([-1.0, -0.75, 0.75, 1.0])
    places = np.broadcast_to(u_mm[:, None], aside.shape).ravel()
    return float(task.sweep.heights(places, track.v_mm + aside.ravel(), track).min())


def _on_rim(task: Task, lines_mm: Floats, tracks: list[Track]) -> Floats:
    """Return the highest place of the rim beside each pass (n,): the least that it and its neighbours leave there."""
    u, v = task.frame.uv(task.outline.boundary_points(_LOOK_MM))
    near = np.argmin(np.abs(v[:, None] - lines_mm), axis=1)
    height = np.full(u.size, np.inf)
    for number, track in enumerate(tracks):
        beside = np.flatnonzero(np.abs(near - number) <= 1)
        if beside.size:
            height[beside] = np.minimum(height[beside], task.sweep.heights(u[beside], v[beside], track))
    return np.array([height[near == number].max(initial=-np.inf) for number in range(lines_mm.size)])


def _places(task: Task, lines_mm: Floats) -> list[Floats]:
    """Return places u along the part of each line (n,) that lies inside the outline."""
    index, u0, u1 = task.outline.clip_lines(task.frame.direction_rad, lines_mm)
    owner, u = spread(u0, u1, _LOOK_MM)
    line = index[owner]
    return [u[line == number] for number in range(lines_mm.size)]
