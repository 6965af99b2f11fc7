"""Stock after roughing: flat terraces, and what of them still stands at a height."""

from __future__ import annotations

from dataclasses import dataclass

import shapely
from shapely.geometry import Polygon
from shapely.geometry.base import BaseGeometry

from anticlast.passes.rough.contour import Grid
from anticlast.passes.rough.peel import thick_parts


@dataclass(frozen=True, slots=True)
class Terraces:
    """A blank and the layers taken off it so far.

    Attributes
    ----------
    blank : polygons
        Plan of the blank.
    top_mm : float
        Z of its flat top.
    offset : Grid or None
        Height of its upper side where that is not flat but at an even distance over the surface.
    cleared : tuple of (z_mm, polygons)
        Plan areas in which nothing stands higher than z.
    """

    blank: BaseGeometry
    top_mm: float
    offset: Grid | None = None
    cleared: tuple[tuple[float, BaseGeometry], ...] = ()

    def standing(self, level_mm: float) -> BaseGeometry:
        """Return the plan area in which stock stands higher than a level."""
        if level_mm >= self.top_mm:
            return Polygon()
        stock = self.blank
        if self.offset is not None:
            stock = shapely.difference(stock, self.offset.below(level_mm))
        down = [area for z, area in self.cleared if z <= level_mm + 1e-9]
        return thick_parts(shapely.difference(stock, shapely.union_all(down))) if down else stock

    def top_over(self, place: BaseGeometry) -> float:
        """Return a height that no stock over a plan area exceeds."""
        for level in sorted({z for z, _ in self.cleared}):
            if not shapely.intersects(self.standing(level), place):
                return level
        return self.top_mm

    def with_cleared(self, level_mm: float, area: BaseGeometry) -> Terraces:
        """Return the stock after one more layer."""
        return Terraces(self.blank, self.top_mm, self.offset, (*self.cleared, (level_mm, area)))
