"""Pattern *layers*: rough the blank down to the allowance over the surface in flat layers.

Each layer is peeled from where it is open; the cutter goes from pass to pass in air on the same level, and down to the next
layer in air. docs/theory-roughing.md.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import shapely
from shapely.geometry import LineString, Point

from anticlast.errors import CannotPlan
from anticlast.passes.rough import limits
from anticlast.passes.rough.layout import Layer, layout
from anticlast.passes.rough.peel import SIMPLER_MM, SLIVER_MM, Piece
from anticlast.passes.rough.track import Track, track_for
from anticlast.passes.rough.walk import Walk
from anticlast.passes.rows import Nearest
from anticlast.passes.tilt import angle_between
from anticlast.records import CutterPath, Floats, Job, Operation, Purpose
from anticlast.tolerances import REACH_RAD

# Ways down into stock at half the feed: the bottom cuts as well as the sides (common practice).
_DESCENT_FEED_SHARE = 0.5
# Radii of an arc onto a closed pass, of the cutter's radius, the largest that fits; and places on the pass it is tried at.
_LEAD_IN_RADII = (2.0, 1.5, 1.0, 0.75, 0.5, 0.35)
_LEAD_IN_PLACES = 12


def plan_layers(job: Job, operation: Operation, nearest_axis: Nearest) -> CutterPath:
    """Plan a roughing operation.

    Parameters
    ----------
    job : Job
    operation : Operation
        One of the job's, that roughs.
    nearest_axis : callable
        From wished cutter axes (n, 3) in part coordinates to the reachable ones nearest to them.

    Returns
    -------
    CutterPath
        ``contact_mm`` is the tip; ``stepover_mm`` is the width of cut.

    Raises
    ------
    CannotPlan
        The cutter cannot stand along part Z, or it cannot get into any of the stock.
    """
    axis = upright_axis(operation, nearest_axis)
    roughing = [other for other in job.operations if other.does == "rough" and other.index <= operation.index]
    found = layout(job.part, job.stock, tuple(roughing), job.clearance_mm)
    track = track_for(job, operation, axis)
    planner = _Planner(job, operation, track)
    for layer in found.layers:
        planner.cut(layer)
    track.lift()
    if not track.stretches:
        raise CannotPlan(
            "stock to rough",
            f"operation {operation.index}: no stock that cutter {operation.cutter.number} can get at stands more than "
            f"{operation.allowance_mm:g} mm above the surface",
        )
    width = limits.cut_width_mm(operation)
    return CutterPath(
        operation=operation,
        stretches=tuple(track.stretches),
        passes=planner.passes,
        cut_length_mm=track.cut_length_mm,
        stepover_mm=(width, width),
        scallop_predicted_mm=0.0,
        chord_mm=SIMPLER_MM,
        notes=_notes(job, operation, len(found.layers), found.closed_mm2),
    )


def upright_axis(operation: Operation, nearest_axis: Nearest) -> Floats:
    """Return the axis (3,) of a cutter that stands along part Z, or raise `CannotPlan`."""
    wished = np.array([[0.0, 0.0, 1.0]])
    off = float(angle_between(nearest_axis(wished), wished)[0])
    if operation.fixed_axis is not None:
        off = max(off, math.acos(min(1.0, operation.fixed_axis[2])))
    if off > REACH_RAD:
        raise CannotPlan(
            "cutter axis",
            f"operation {operation.index}: pattern {operation.pattern!r} needs the cutter along part Z, and it stands "
            f"{math.degrees(off):.3g} degrees off; leave out axis and fixed, or turn the part",
            math.degrees(off),
            0.0,
            "deg",
        )
    return wished[0]


def _notes(job: Job, operation: Operation, layers: int, closed_mm2: float) -> tuple[str, ...]:
    """Return what the job should know of the stock that is left."""
    least, most = operation.allowance_mm, limits.left_mm(operation, job.part)
    found = [f"{layers} layers; {least:.2f} to {most:.2f} mm are left over the surface, in steps"]
    if closed_mm2 > SLIVER_MM:
        found.append(
            f"{closed_mm2:.1f} mm2 of layers are left standing: closed all round, and cutter "
            f"{operation.cutter.number} finds no room there to go down on a helix or ramp"
        )
    return tuple(found)


@dataclass(slots=True)
class _Planner:
    """Puts the passes of layer after layer in order and joins them."""

    job: Job
    operation: Operation
    track: Track
    walk: Walk | None = None
    passes: int = 0

    def cut(self, layer: Layer) -> None:
        """Cut all passes of a layer, nearest first, none before those that make room for it."""
        radius = limits.cut_radius_mm(self.operation)
        above, self.walk = self.walk, Walk(layer.room, layer.stock, radius)
        waits = _waits(layer.pieces, 2.0 * radius + limits.cut_width_mm(self.operation))
        todo = set(range(len(layer.pieces)))
        entered = False
        while todo:
            free = [i for i in sorted(todo) if not waits[i] & todo]
            piece, xy = self._nearest([layer.pieces[i] for i in free])
            todo.remove(free[piece])
            self._pass(layer, layer.pieces[free[piece]], xy, None if entered else above)
            entered = True
            self.passes += 1

    def _nearest(self, pieces: list[Piece]) -> tuple[int, Floats]:
        """Return which piece starts nearest to where the cutter stands, and its points in cutting order."""
        stands = self.track.stands
        best, found, chosen = math.inf, pieces[0].xy, 0
        for number, piece in enumerate(pieces):
            both = self.operation.way == "both" and not piece.closed and piece.descent is None
            for xy in (piece.xy, piece.xy[::-1]) if both else (piece.xy,):
                if stands is None:
                    far = 0.0
                elif piece.closed:
                    far = float(np.hypot(*(xy - stands[:2]).T).min())
                else:
                    far = math.hypot(*(xy[0] - stands[:2]))
                if far < best:
                    best, found, chosen = far, xy, number
        return chosen, found

    def _pass(self, layer: Layer, piece: Piece, xy: Floats, above: Walk | None) -> None:
        """Cut one pass, and get to it."""
        assert self.walk is not None
        z, track = layer.z_mm, self.track
        if piece.descent is not None:
            track.start(piece.descent[0], self.passes)
            track.cut(piece.descent[1:], self.passes, Purpose.ENTRY, _DESCENT_FEED_SHARE)
            track.cut(_at(xy, z), self.passes, Purpose.ENTRY)
        else:
            if piece.closed:
                xy = self._led_in(xy)
            if not self.walk.is_clear(xy[[0, 0]]):
                # No arc fits: straight in, no deeper than the width of cut.
                xy = np.vstack((self._straight_in(xy[0]), xy))
            self._get_to(xy[0], z, above)
            track.cut(_at(xy, z), self.passes)
        self.walk.cut(piece.swept)

    def _led_in(self, ring: Floats) -> Floats:
        """Return a closed pass that starts with an arc from air, near where the cutter stands; without if none fits."""
        assert self.walk is not None
        xy = ring[:-1]
        stands = self.track.stands
        order = np.argsort(np.hypot(*(xy - stands[:2]).T)) if stands is not None else np.arange(len(xy))
        places = order[:: max(1, len(order) // _LEAD_IN_PLACES)]
        for share in _LEAD_IN_RADII:
            for place in places.tolist():
                turned = np.roll(xy, -place, axis=0)
                turned = np.vstack((turned, turned[:1]))
                arc = _arc_onto(turned, share * limits.cut_radius_mm(self.operation))
                if self.walk.is_clear(arc[[0, 0]]) and shapely.covers(self.walk.room, LineString(arc)):
                    return np.vstack((arc, turned[1:]))
        turned = np.roll(xy, -int(order[0]), axis=0)
        return np.vstack((turned, turned[:1]))

    def _get_to(self, start: Floats, z: float, above: Walk | None) -> None:
        """Bring the cutter to where a pass starts: on this level, from the one above, or from the air."""
        assert self.walk is not None
        stands, track = self.track.stands, self.track
        if stands is not None and stands[2] > z:
            stands = self._down(stands, z, above)
        if stands is not None:
            way = self.walk.way(stands[:2], start)
            if way is not None:
                track.link(_at(way[1:], z), self.passes)
                return
        track.start([*start, z], self.passes)

    def _down(self, stands: Floats, z: float, above: Walk | None) -> Floats | None:
        """Go down in air to a level from the one above; None if there is no way."""
        assert self.walk is not None
        target = self._in_air(stands[:2])
        if above is None or target is None:
            return None
        way = above.way(stands[:2], target)
        if way is None:
            return None
        self.track.link(_at(way[1:], stands[2]), self.passes)
        self.track.link(_at(way[-1:], z), self.passes)
        return np.array([*way[-1], z])

    def _straight_in(self, start: Floats) -> Floats:
        """Return the nearest place in air from which a straight way to a pass keeps off the surface."""
        assert self.walk is not None
        for place in (self._in_air(start), self._in_air(start, 0.0)):
            if place is not None and shapely.covers(self.walk.room, LineString([place, start])):
                return place
        raise CannotPlan(
            "way to a pass",
            f"operation {self.operation.index}: no way in air to the pass at ({start[0]:.3f}, {start[1]:.3f}) was found; "
            "change width_of_cut or depth_of_cut a little",
        )

    def _in_air(self, near: Floats, inside_mm: float = 2.0 * SLIVER_MM) -> Floats | None:
        """Return the place nearest to one, well in air, at which the cutter touches nothing on this level."""
        assert self.walk is not None
        air = shapely.buffer(self.walk.air, -inside_mm) if inside_mm > 0.0 else self.walk.air
        if air.is_empty:
            return None
        line = shapely.shortest_line(air, Point(near))
        return np.asarray(shapely.get_coordinates(line)[0])


def _waits(pieces: tuple[Piece, ...], near_mm: float) -> list[set[int]]:
    """Return for each piece those of the round before that lie so near that they have to be cut first."""
    lines = [LineString(piece.xy) for piece in pieces]
    by_round: dict[int, list[int]] = {}
    for i, piece in enumerate(pieces):
        by_round.setdefault(piece.round, []).append(i)
    found: list[set[int]] = []
    for i, piece in enumerate(pieces):
        earlier = by_round.get(piece.round - 1, [])
        near = [j for j in earlier if shapely.dwithin(lines[i], lines[j], near_mm)]
        found.append(set(near or earlier))
    return found


def _arc_onto(path: Floats, radius_mm: float) -> Floats:
    """Return a quarter circle (n, 2) that runs tangent onto the start of a path from its left, where the air is."""
    along = path[1] - path[0]
    along = along / np.linalg.norm(along)
    left = np.array([-along[1], along[0]])
    angle = np.linspace(0.5 * math.pi, 0.0, 13)[:, None]
    return path[0] + radius_mm * ((1.0 - np.cos(angle)) * left - np.sin(angle) * along)


def _at(xy: Floats, z_mm: float) -> Floats:
    return np.column_stack((xy, np.full(len(xy), z_mm)))
