"""What makes rings usable as an outline, and the sentences said when they are not."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import shapely
from shapely.geometry import MultiPolygon, Polygon

from anticlast.errors import OutlineError
from anticlast.tolerances import SAME_POINT_MM

if TYPE_CHECKING:
    from anticlast.records import Floats


def place(point: npt.ArrayLike) -> str:
    """Return a point as ``(x, y)`` for a sentence."""
    x, y = np.asarray(point, dtype=np.float64)[:2]
    return f"({x:.6g}, {y:.6g})"


def check_region(region: Polygon | MultiPolygon) -> None:
    """Raise ``OutlineError`` unless a region is closed, free of self-crossings and has an area."""
    if not isinstance(region, Polygon | MultiPolygon) or region.is_empty:
        raise OutlineError("the outline is empty; it has to enclose an area")
    if not np.isfinite(shapely.get_coordinates(region)).all():
        raise OutlineError("a coordinate of the outline is not a finite number")
    if not region.is_valid:
        raise OutlineError(_what_is_wrong(shapely.is_valid_reason(region)))
    if region.area <= SAME_POINT_MM * region.length:
        raise OutlineError("the outline encloses no area; its points lie on one line")


def _what_is_wrong(reason: str) -> str:
    """Turn the reason that GEOS gives (words and a place in brackets) into a sentence of our own."""
    words, _, spot = reason.partition("[")
    numbers = spot.rstrip("]").split()
    where = f" at {place([float(number) for number in numbers[:2]])} mm" if len(numbers) >= 2 else ""
    known = {
        "Self-intersection": "the outline crosses itself",
        "Ring Self-intersection": "the outline touches itself",
        "Hole lies outside shell": "a hole lies outside the outline",
        "Holes are nested": "a hole lies inside another hole",
        "Interior is disconnected": "holes cut the outline into separate pieces",
        "Nested shells": "a region lies inside another region",
        "Duplicate Rings": "a ring is given twice",
        "Too few points in geometry component": "a ring has fewer than three different points",
    }
    sentence = known.get(words.strip(), f"the outline is not valid ({words.strip()})")
    return f"{sentence}{where}; give each ring as a simple loop, holes inside and apart from each other"


def checked_ring(points: npt.ArrayLike, what: str) -> Floats:
    """Return (n, 2) points of one ring, checked for number, kind and crossing, repeated points dropped."""
    try:
        ring = np.array(points, dtype=np.float64)
    except (TypeError, ValueError):
        raise OutlineError(f"{what} is not a list of [x, y] pairs of numbers") from None
    if ring.size == 0 or ring.ndim != 2 or ring.shape[1] != 2:
        raise OutlineError(f"{what} is not a list of [x, y] pairs of numbers")
    bad = np.flatnonzero(~np.isfinite(ring).all(axis=1))
    if bad.size:
        raise OutlineError(f"point {bad[0] + 1} of {what} is not a finite number")
    same_as_last = np.hypot(*(ring - np.roll(ring, 1, axis=0)).T) <= SAME_POINT_MM
    ring = ring[~same_as_last]
    if len(ring) < 3:
        raise OutlineError(f"{what} has {len(ring)} different points; at least three are needed")
    hull = shapely.convex_hull(shapely.multipoints(ring))
    if shapely.area(hull) <= SAME_POINT_MM * shapely.length(hull):
        raise OutlineError(f"{what} encloses no area; its points lie on one line")
    loop = shapely.polygons(ring)
    if not loop.is_valid:
        raise OutlineError(_what_is_wrong(shapely.is_valid_reason(loop)).replace("the outline", what, 1))
    return ring
