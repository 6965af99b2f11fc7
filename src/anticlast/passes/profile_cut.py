"""Pattern *profile*: bring the part to its outline with a flat cutter that goes round it in layers.

The cutter's centre runs at its radius outside the outline, inside holes, with the part to its right: climb milling for a
right-hand cutter turning clockwise (M3). docs/theory-roughing.md, "The outline".
"""

from __future__ import annotations

import math

import numpy as np
import shapely
from shapely.geometry import LinearRing, LineString, MultiLineString, Point, Polygon
from shapely.geometry.base import BaseGeometry

from anticlast.errors import CannotPlan
from anticlast.passes import ramp
from anticlast.passes.layers import upright_axis
from anticlast.passes.loop import Loop
from anticlast.passes.rough import limits
from anticlast.passes.rough.layout import stock_before
from anticlast.passes.rough.terraces import Terraces
from anticlast.passes.rough.track import Track, track_for
from anticlast.passes.rows import Nearest
from anticlast.passes.tabs import lay_tabs
from anticlast.records import Bools, CutterPath, Floats, Job, Operation, Purpose
from anticlast.tolerances import SAME_POINT_MM

# Ramps at half the feed: the bottom cuts as well as the sides (common practice).
_RAMP_FEED_SHARE = 0.5
# A ramp into the blank's top starts this much above it (mm).
_ABOVE_MM = 0.2
# Spacing of the places on a contour at which it is asked whether stock stands there, as a share of the radius.
_SPACING_SHARE = 0.25
# Radii of the arc from outside onto the contour, of the cutter's radius, and places it is tried at. Longer ways through
# the blank are not worth a ramp saved.
_ARC_RADII = (1.0, 1.5, 2.0)
_ARC_PLACES = 48
# In air the cutter keeps this much off stock (mm).
_OFF_MM = 0.05


def contours(job: Job, operation: Operation) -> tuple[list[Loop], int]:
    """Return the paths of the cutter's centre, outer ones first, and how many holes are too small for it.

    Chords of rounded corners come nearer to the corner than their ends by r (1 - cos(step / 2)); the path is moved out by as
    much, and by what the outline's own chords may hide, so that the cutter never reaches into the outline.
    """
    outline = job.part.outline
    off = operation.cutter.radius_mm + operation.allowance_mm + outline.flattening_mm
    sag = 0.5 * operation.tolerance_mm
    quarter = max(4, math.ceil(math.pi / (4.0 * math.acos(1.0 - sag / (off + sag)))))
    moved = shapely.buffer(outline.polygon, off + sag, quad_segs=quarter)
    parts = [part for part in shapely.get_parts(moved) if isinstance(part, Polygon)]
    turned = [shapely.orient_polygons(part, exterior_cw=True) for part in parts]
    rings = [part.exterior for part in turned] + [ring for part in turned for ring in part.interiors]
    holes = sum(len(part.interiors) for part in shapely.get_parts(outline.polygon))
    return [Loop(shapely.get_coordinates(ring)) for ring in rings], holes - sum(
        len(part.interiors) for part in turned
    )


def plan_outline(job: Job, operation: Operation, nearest_axis: Nearest) -> CutterPath:
    """Plan an operation that cuts the part's outline.

    Parameters
    ----------
    job : Job
    operation : Operation
        One of the job's, that cuts the outline.
    nearest_axis : callable
        From wished cutter axes (n, 3) in part coordinates to the reachable ones nearest to them.

    Returns
    -------
    CutterPath
        ``contact_mm`` is the tip; ``stepover_mm`` is the width of the groove, twice.

    Raises
    ------
    CannotPlan
        The cutter is not flat or cannot stand along part Z, its shank or holder would meet the walls, or there is nothing
        to cut.
    """
    cutter = operation.cutter
    if cutter.shape != "flat":
        raise CannotPlan("cutter shape", f"operation {operation.index}: the outline needs a flat cutter")
    axis = upright_axis(operation, nearest_axis)
    stock = stock_before(job, operation)
    floor = floor_mm(job, operation)
    loops, lost = contours(job, operation)
    _check_walls(operation, stock, loops, floor)
    track = track_for(job, operation, axis)
    notes: dict[str, None] = {}
    if lost:
        notes[f"{lost} holes are too small for cutter {cutter.number} and are not cut"] = None
    rounds = 0
    for loop in loops:
        cut = _Contour(job, operation, loop, stock, track, rounds)
        rounds = cut.run(floor)
        notes.update(dict.fromkeys(cut.notes))
    track.lift()
    if not track.stretches:
        raise CannotPlan(
            "outline", f"operation {operation.index}: no stock stands along the outline above z = {floor:.3f}"
        )
    return CutterPath(
        operation=operation,
        stretches=tuple(track.stretches),
        passes=rounds,
        cut_length_mm=track.cut_length_mm,
        stepover_mm=(2.0 * cutter.radius_mm, 2.0 * cutter.radius_mm),
        scallop_predicted_mm=0.0,
        chord_mm=operation.tolerance_mm,
        notes=tuple(notes),
    )


def floor_mm(job: Job, operation: Operation) -> float:
    """Return the z that the outline is cut down to: by the depth, or to the blank's bottom less the skin."""
    if operation.depth_mm is not None:
        return job.stock.top_mm - operation.depth_mm
    return job.stock.bottom_mm + operation.skin_mm


def _check_walls(operation: Operation, stock: Terraces, loops: list[Loop], floor_z: float) -> None:
    """Raise `CannotPlan` where shank or holder would rub on walls of the groove."""
    cutter = operation.cutter
    path = MultiLineString([loop.xy for loop in loops])
    for body in cutter.bodies():
        if body.name == "flutes" or (body.name == "shank" and body.radius_mm < cutter.radius_mm - _OFF_MM):
            continue
        over = stock.top_over(shapely.buffer(path, body.radius_mm)) - (floor_z + body.low_mm)
        if over > SAME_POINT_MM:
            what = "flutes" if body.name == "shank" else "stickout"
            raise CannotPlan(
                "depth of the outline",
                f"operation {operation.index}: the {body.name} of cutter {cutter.number} would go {over:.2f} mm deep between "
                f"the walls of the groove; cut less deep, or use a cutter with longer {what}",
                over,
                0.0,
            )


class _Contour:
    """Cuts one contour, layer by layer."""

    def __init__(
        self, job: Job, operation: Operation, loop: Loop, stock: Terraces, track: Track, rounds: int
    ) -> None:
        self.job, self.operation, self.loop, self.stock, self.track = job, operation, loop, stock, track
        self.rounds = rounds
        self.notes: list[str] = []
        self.radius_mm = operation.cutter.radius_mm
        self.tab_top_mm = job.stock.bottom_mm + operation.tab_height_mm
        count = max(2, math.ceil(loop.length_mm / (_SPACING_SHARE * self.radius_mm)))
        self.places = np.arange(count) * loop.length_mm / count
        self.spots = shapely.points(loop.points(self.places))
        self.tabs: list[tuple[float, float]] = []

    def run(self, floor_z: float) -> int:
        """Cut down to the floor; return the number of rounds made so far."""
        top = self.job.stock.top_mm
        layers = max(1, math.ceil((top - floor_z) / limits.cut_depth_mm(self.operation) - 1e-9))
        above = top
        if floor_z < self.tab_top_mm - SAME_POINT_MM and self._holds_a_piece():
            self._lay_tabs(floor_z)
        self.track.lift()
        for number in range(1, layers + 1):
            z = top - (top - floor_z) * number / layers
            standing = self.stock.standing(z)
            cuts = self._cuts(standing)
            if cuts.any():
                self._layer(z, above, standing, cuts)
                self.rounds += 1
            above = z
        self.track.lift()
        return self.rounds

    def _holds_a_piece(self) -> bool:
        """Whether cutting the contour parts a piece from the rest: not where the cutter clears all of a hole."""
        inside = Polygon(self.loop.xy)
        swept = LineString(self.loop.xy).buffer(self.radius_mm)
        return not inside.difference(swept).buffer(-_OFF_MM).is_empty

    def _lay_tabs(self, floor_z: float) -> None:
        operation = self.operation
        width = operation.tab_width_mm or self.radius_mm
        groove = 2.0 * (self.radius_mm + operation.allowance_mm)
        blank = self.job.stock.outline.polygon
        self.tabs = lay_tabs(self.loop, operation.tabs, 0.5 * width + self.radius_mm, groove, blank)
        free = floor_z <= self.job.stock.bottom_mm + SAME_POINT_MM
        if len(self.tabs) < operation.tabs and free:
            self.notes.append(
                f"{len(self.tabs)} of {operation.tabs} tabs on a contour of {self.loop.length_mm:.0f} mm: there is no room, or no"
                " blank beyond the groove to hold on to"
            )
        if not self.tabs and free:
            hole = shapely.is_ccw(LinearRing(self.loop.xy))
            self.notes.append(
                f"the {'piece in a hole' if hole else 'part'} comes free of the blank: hold it from below"
            )

    def _cuts(self, standing: BaseGeometry) -> Bools:
        """Tell at which places the cutter is in stock that stands over a level."""
        if standing.is_empty:
            return np.zeros(len(self.places), dtype=bool)
        return np.asarray(shapely.distance(standing, self.spots) < self.radius_mm + _OFF_MM)

    # ------------------------------------------------------------------------------------------ layers

    def _layer(self, z: float, above: float, standing: BaseGeometry, cuts: Bools) -> None:
        if self.tabs and z < self.tab_top_mm - SAME_POINT_MM:
            self._tabbed(z, above)
        elif not cuts.all():
            self._from_air(z, cuts)
        else:
            arc = self._arc_from_outside(standing)
            if arc is not None:
                self._by_arc(z, *arc)
            else:
                self._by_ramp(z, above)

    def _from_air(self, z: float, cuts: Bools) -> None:
        """One round that starts in air on the contour; where no stock stands it is a link."""
        loop, track = self.loop, self.track
        first = int(np.argmax(cuts & ~np.roll(cuts, 1)))
        start = float(self.places[first - 1])
        self._stand(start, z)
        # Up to each change along the contour; the row after a change lies on its far side.
        order = np.roll(np.arange(len(cuts)), -first)
        places = np.concatenate((self.places[order], [start]))
        at = start + (places - start) % loop.length_mm
        at[-1] = start + loop.length_mm
        state = cuts[order]
        edges = np.flatnonzero(np.diff(state)) + 1
        bounds = np.concatenate(([start], np.where(state[edges], at[edges - 1], at[edges]), [at[-1]]))
        cutting = bool(state[0])
        for low, high in zip(bounds[:-1], bounds[1:], strict=True):
            points = _level(loop.between(low, high)[1:], z)
            if cutting:
                track.cut(points, self.rounds)
            elif high < at[-1]:
                track.link(points, self.rounds)
            cutting = not cutting

    def _by_arc(self, z: float, place: float, arc: Floats) -> None:
        """One round that an arc from outside leads onto, and its mirror image off."""
        loop, track = self.loop, self.track
        stands = track.stands
        ahead = loop.tangents(np.array([place]))[0]
        off = arc[::-1] - arc[-1]
        off = arc[-1] + off - 2.0 * (off @ ahead)[:, None] * ahead
        here = [*arc[0], z]
        if stands is not None and self._clear(np.array([stands[:2], arc[0]]), self.stock.standing(z)):
            track.link(np.array([[*arc[0], stands[2]], here]), self.rounds)
        else:
            track.start(here, self.rounds)
        track.cut(_level(arc[1:], z), self.rounds)
        track.cut(_level(loop.between(place, place + loop.length_mm)[1:], z), self.rounds)
        track.cut(_level(off[1:], z), self.rounds, Purpose.EXIT)

    def _by_ramp(self, z: float, above: float) -> None:
        """Down a ramp along the contour from the layer above, and once round on the floor."""
        loop, track = self.loop, self.track
        start = self._place_of_tip() or 0.0
        top = above + (_ABOVE_MM if above >= self.job.stock.top_mm else 0.0)
        self._stand(start, top)
        fall = math.tan(self.operation.cutter.ramp_angle_rad)
        places = loop.places(start, start + (top - z) / fall)
        tips = np.column_stack((loop.points(places), top - (places - start) * fall))
        tips[-1, 2] = z
        track.cut(tips[1:], self.rounds, Purpose.ENTRY, _RAMP_FEED_SHARE)
        end = float(places[-1])
        track.cut(_level(loop.between(end, end + loop.length_mm)[1:], z), self.rounds)

    def _tabbed(self, z: float, above: float) -> None:
        """From tab to tab: down a ramp between two of them, back to its start, on to its end, up and over."""
        loop, track = self.loop, self.track
        over = self.tab_top_mm
        for number, (_, start) in enumerate(self.tabs):
            end = self.tabs[(number + 1) % len(self.tabs)][0]
            end = start + (end - start) % loop.length_mm
            path = loop.between(start, end)
            # The first way down starts in the layer above, the others where the tip has come across a tab.
            down_from = above if number == 0 else min(above, over)
            if number == 0 and (
                track.stands is None or np.abs(track.stands[:2] - path[0]).max() > SAME_POINT_MM
            ):
                track.start([*path[0], max(over, above)], self.rounds)
            track.link(_level(path[:1], down_from), self.rounds)
            tips = ramp.along(path, down_from, z, self.operation.cutter.ramp_angle_rad)
            track.cut(tips[1:], self.rounds, Purpose.ENTRY, _RAMP_FEED_SHARE)
            reached = start + self._along(path, tips[-1, :2])
            track.cut(_level(loop.between(start, reached)[::-1][1:], z), self.rounds)
            track.cut(_level(path[1:], z), self.rounds)
            track.link(_level(path[-1:], over), self.rounds)
            crossing = _level(loop.between(end, end + self._tab_length(number + 1))[1:], over)
            if above > over + SAME_POINT_MM:
                track.cut(crossing, self.rounds)
            else:
                track.link(crossing, self.rounds)

    def _tab_length(self, number: int) -> float:
        low, high = self.tabs[number % len(self.tabs)]
        return high - low

    # ------------------------------------------------------------------------------------------ places

    def _stand(self, place: float, z: float) -> None:
        """Bring the tip to a place on the contour at a level whose stock is gone there: along the layer above, or lifted."""
        track, loop = self.track, self.loop
        xy = loop.points(np.array([place]))[0]
        here = self._place_of_tip()
        if here is None:
            track.start([*xy, z], self.rounds)
            return
        assert track.stands is not None
        ahead = (place - here) % loop.length_mm
        back = loop.length_mm - ahead
        way = loop.between(here, here + ahead) if ahead <= back else loop.between(place, place + back)[::-1]
        track.link(_level(way, track.stands[2]), self.rounds)
        track.link(np.array([[*xy, z]]), self.rounds)

    def _place_of_tip(self) -> float | None:
        """Return where on the contour the tip stands, None if it is elsewhere."""
        stands = self.track.stands
        if stands is None:
            return None
        line, here = LineString(self.loop.xy), Point(stands[:2])
        if float(shapely.distance(line, here)) > SAME_POINT_MM:
            return None
        return float(shapely.line_locate_point(line, here))

    def _along(self, path: Floats, at: Floats) -> float:
        return float(shapely.line_locate_point(LineString(path), Point(at)))

    def _arc_from_outside(self, standing: BaseGeometry) -> tuple[float, Floats] | None:
        """Return a place on the contour and an arc onto it that starts in air, the shortest found, or None."""
        loop, keep = self.loop, self.radius_mm + self.operation.allowance_mm
        places = np.linspace(0.0, loop.length_mm, _ARC_PLACES, endpoint=False)
        points, tangents = loop.points(places), loop.tangents(places)
        for share in _ARC_RADII:
            radius = share * self.radius_mm
            for place, point, along in zip(places.tolist(), points, tangents, strict=True):
                left = np.array([-along[1], along[0]])
                angle = np.linspace(0.5 * math.pi, 0.0, 13)[:, None]
                arc = point + radius * ((1.0 - np.cos(angle)) * left - np.sin(angle) * along)
                mirrored = point + radius * ((1.0 - np.cos(angle)) * left + np.sin(angle) * along)
                if not all(self._clear(way[[0, 0]], standing) for way in (arc, mirrored)):
                    continue
                both = LineString(np.vstack((arc, mirrored[::-1])))
                if float(shapely.distance(self.job.part.outline.polygon, both)) >= keep:
                    return place, arc
        return None

    def _clear(self, xy: Floats, standing: BaseGeometry) -> bool:
        line = LineString(xy)
        return standing.is_empty or float(shapely.distance(standing, line)) >= self.radius_mm + _OFF_MM


def _level(xy: Floats, z_mm: float) -> Floats:
    return np.column_stack((xy, np.full(len(xy), z_mm)))
