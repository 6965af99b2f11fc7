"""The layers of a roughing operation: their heights, where the cutter may stand on each, and their passes.

docs/theory-roughing.md.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import shapely
from shapely.geometry import LineString, Polygon
from shapely.geometry.base import BaseGeometry

from anticlast.passes.rough import limits
from anticlast.passes.rough.contour import Grid
from anticlast.passes.rough.field import TipField
from anticlast.passes.rough.opening import SMALLEST, opening
from anticlast.passes.rough.peel import Bite, Piece, grown, peel, thick_parts
from anticlast.passes.rough.terraces import Terraces
from anticlast.records import Job, Operation, Part, Stock
from anticlast.saddle import Saddle
from anticlast.tolerances import SAME_POINT_MM

# Inner corners of passes are rounded to this share of the cutter's radius.
_CORNER_SHARE = 1.0
# Cells of the height grid along the longer side, and the finest spacing that is worth it (mm).
_CELLS, _FINEST_MM, _COARSEST_MM = 160, 0.35, 1.0
# Nothing is claimed to be cleared within this of where passes really went (mm).
_DOUBT_MM = 0.02
_MOST_OPENINGS = 50
# Rounds of a third of the width after an opening, until there is room for arcs onto the passes.
_CAREFUL_ROUNDS = 5


@dataclass(frozen=True, slots=True)
class Layer:
    """One layer: z of its floor, where the cutter's centre may stand, stock before and its passes."""

    z_mm: float
    room: BaseGeometry
    stock: BaseGeometry
    pieces: tuple[Piece, ...]


@dataclass(frozen=True, slots=True)
class Layout:
    """All layers of an operation from the top down, the stock afterwards, and what it could not get into [mm2]."""

    layers: tuple[Layer, ...]
    after: Terraces
    closed_mm2: float


@lru_cache(maxsize=8)
def layout(part: Part, stock: Stock, operations: tuple[Operation, ...], gap_mm: float) -> Layout:
    """Return the layers of the last of some roughing operations, given that the others were cut before it.

    Parameters
    ----------
    part, stock : Part, Stock
    operations : tuple of Operation
        All that rough, in cutting order.
    gap_mm : float
        How far outside the blank the cutter's edge needs room to come down in air.
    """
    operation = operations[-1]
    site = _Site(part, stock, operation, gap_mm)
    before = layout(part, stock, operations[:-1], gap_mm).after if operations[:-1] else untouched(part, stock)
    terraces, layers, closed = before, [], 0.0
    above = stock.top_mm
    for z in site.levels():
        room = site.room(z)
        removable = _removable(room, terraces.standing(z), site.bite.radius_mm)
        pieces, rest = _cut(site, room, removable, terraces, above, z)
        if pieces:
            layers.append(Layer(z, room, removable, tuple(pieces)))
        closed += rest.area
        clear = shapely.intersection(grown(room, site.clear_radius_mm - _DOUBT_MM), site.near)
        if not rest.is_empty:
            clear = shapely.difference(clear, grown(rest, _DOUBT_MM))
        terraces = terraces.with_cleared(z + limits.cusp_mm(operation), clear)
        above = z
    return Layout(tuple(layers), terraces, closed)


def stock_before(job: Job, operation: Operation) -> Terraces:
    """Return the stock that an operation meets after the roughing operations before it.

    What semi-finishing and finishing take off is not counted: the stock stands no higher than this.
    """
    earlier = tuple(
        other for other in job.operations if other.does == "rough" and other.index < operation.index
    )
    if earlier:
        return layout(job.part, job.stock, earlier, job.clearance_mm).after
    return untouched(job.part, job.stock)


def untouched(part: Part, stock: Stock) -> Terraces:
    """Return the blank before any roughing."""
    blank, allowance = stock.outline.polygon, stock.allowance_mm
    if allowance is None:
        return Terraces(blank, stock.top_mm)
    # The surface moved out by m along its normal lies where the centre of a rolling ball of radius m is.
    field = TipField(Saddle.of(part), 0.0, allowance, allowance)
    x0, y0, x1, y1 = blank.bounds
    edge = 2.0 * _COARSEST_MM
    box = (x0 - edge, y0 - edge, x1 + edge, y1 + edge)
    return Terraces(blank, stock.top_mm, Grid.over(box, _spacing_mm(box), field.height_and_slope))


def _spacing_mm(box: tuple[float, float, float, float]) -> float:
    return min(max(max(box[2] - box[0], box[3] - box[1]) / _CELLS, _FINEST_MM), _COARSEST_MM)


def _removable(room: BaseGeometry, standing: BaseGeometry, radius_mm: float) -> BaseGeometry:
    return thick_parts(shapely.intersection(standing, grown(room, radius_mm)))


def _cut(
    site: _Site, room: BaseGeometry, stock: BaseGeometry, terraces: Terraces, above_mm: float, z_mm: float
) -> tuple[list[Piece], BaseGeometry]:
    """Return the passes of a layer: from where there is air, then closed regions from their openings."""
    pieces, rest = peel(room, stock, site.bite)
    barred: list[BaseGeometry] = []
    for _ in range(_MOST_OPENINGS):
        if rest.is_empty:
            break
        found = site.closed(room, rest, barred)
        if found is None:
            break
        number = max((piece.round for piece in pieces), default=-1) + 1
        top = above_mm if above_mm >= site.stock.top_mm else above_mm + limits.cusp_mm(site.operation)
        first = opening(found, site.operation.cutter, site.bite.radius_mm, top, z_mm, number)
        if first is None or not site.is_open(first, terraces.standing(top)):
            barred.append(found)
            continue
        pieces.append(first)
        rest = thick_parts(shapely.difference(rest, first.swept))
        for bite, rounds in ((site.careful, _CAREFUL_ROUNDS), (site.bite, None)):
            more, rest = peel(room, rest, bite, 1 + max(piece.round for piece in pieces), rounds)
            pieces += more
        barred.append(found)
    return pieces, rest


class _Site:
    """What stays the same over the layers of one operation."""

    def __init__(self, part: Part, stock: Stock, operation: Operation, gap_mm: float) -> None:
        self.part, self.stock, self.operation = part, stock, operation
        self.saddle = Saddle.of(part)
        cutter = operation.cutter
        radius = limits.cut_radius_mm(operation)
        width = limits.cut_width_mm(operation)
        self.bite = Bite(radius, width, _CORNER_SHARE * radius)
        self.careful = Bite(radius, width / 3.0, SMALLEST * radius)
        self.clear_radius_mm = limits.radius_at_mm(cutter, limits.cusp_mm(operation))
        self.blank = stock.outline.polygon
        self.zone = self._zone()
        reach = cutter.radius_mm + 2.0 * self.bite.corner_mm + self.bite.width_mm + gap_mm + 1.0
        x0, y0, x1, y1 = self.blank.bounds
        self.box = (x0 - reach, y0 - reach, x1 + reach, y1 + reach)
        self.near = shapely.box(*self.box)
        self.spacing_mm = _spacing_mm(self.box)
        self.grid = self._grid(TipField.of_cutter(self.saddle, cutter, operation.allowance_mm))
        self.bodies = self._bodies()

    def _grid(self, field: TipField) -> Grid:
        return Grid.over(self.box, self.spacing_mm, field.height_and_slope)

    def _zone(self) -> BaseGeometry | None:
        """Return the plan area that the cutter may touch; None where that is the whole blank."""
        reach = self.operation.reach_mm
        if reach is None:
            return None
        zone = self.part.outline.grown(reach, corners="mitre").polygon
        return None if shapely.covers(zone, self.blank) else zone

    def _bodies(self) -> tuple[tuple[float, float, Grid], ...]:
        """Return (radius, height over the tip, lowest tip heights) of shank and holder wider than the cut.

        A body keeps off the surface raised by all that roughing may have left on it so far.
        """
        deepest = self.levels()[-1]
        found = []
        x, y = np.array(self.box)[[0, 2, 0, 2]], np.array(self.box)[[1, 1, 3, 3]]
        steepest = float(np.hypot(*self.saddle.gradient(x, y)).max())
        left = limits.left_mm(self.operation, self.part) * math.hypot(1.0, steepest)
        for body in self.operation.cutter.bodies():
            if body.name == "flutes" or body.radius_mm <= self.bite.radius_mm:
                continue
            if deepest + body.low_mm >= self.stock.top_mm:
                continue
            grid = self._grid(TipField(self.saddle, body.radius_mm, 0.0, left - body.low_mm))
            found.append((body.radius_mm, body.low_mm, grid))
        return tuple(found)

    def levels(self) -> list[float]:
        """Return the z of the layers' floors, from the top down, evenly no more than the depth of cut apart.

        The lowest is that of the surface with its allowance around the part, as far out as a cutter at its edge
        reaches; never below the blank.
        """
        ground = shapely.intersection(
            self.part.outline.grown(2.0 * self.operation.cutter.radius_mm).polygon, self.blank
        )
        rim = shapely.get_coordinates(shapely.segmentize(shapely.boundary(ground), 0.5))
        raised = self.saddle.height(rim[:, 0], rim[:, 1]) + self.operation.allowance_mm * self.saddle.stretch(
            rim
        )
        top = self.stock.top_mm
        lowest = max(float(raised.min()), self.stock.bottom_mm)
        count = max(1, math.ceil((top - lowest) / limits.cut_depth_mm(self.operation) - 1e-9))
        return [top - (top - lowest) * (number + 1) / count for number in range(count)]

    def room(self, z_mm: float) -> BaseGeometry:
        """Return where the cutter's centre may stand with its tip at z."""
        room = self._whole(self.grid.below(z_mm))
        if self.zone is not None:
            room = shapely.intersection(room, shapely.buffer(self.zone, -self.operation.cutter.radius_mm))
        for radius, low, grid in self.bodies:
            if z_mm + low < self.stock.top_mm:
                room = shapely.intersection(room, grid.below(z_mm))
                if self.zone is not None:
                    room = shapely.intersection(room, shapely.buffer(self.zone, -radius))
        return room

    def is_open(self, piece: Piece, standing: BaseGeometry) -> bool:
        """Tell whether a way down starts where the layer above is cleared."""
        path = LineString(piece.xy)
        return bool(
            shapely.intersection(grown(path, self.clear_radius_mm - 2.0 * _DOUBT_MM), standing).area
            <= SAME_POINT_MM
        )

    def _whole(self, room: BaseGeometry) -> BaseGeometry:
        """Return a region without the islands that a grid makes of narrow valleys between its nodes."""
        rim = shapely.boundary(self.grid.inner)
        parts = [part for part in shapely.get_parts(room) if isinstance(part, Polygon)]
        kept = [
            part for part in parts if part.area > 9.0 * self.spacing_mm**2 or shapely.intersects(part, rim)
        ]
        return shapely.union_all(kept) if kept else Polygon()

    def closed(self, room: BaseGeometry, rest: BaseGeometry, barred: list[BaseGeometry]) -> Polygon | None:
        """Return a part of the room from which stock can be cut that could not be reached from air, None if none."""
        for part in shapely.get_parts(room):
            if not isinstance(part, Polygon) or any(shapely.equals(part, other) for other in barred):
                continue
            if not thick_parts(shapely.intersection(rest, grown(part, self.bite.radius_mm))).is_empty:
                return part
        return None
