"""Smallest and largest value of a smooth function over a plan outline, edges and corners included."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

if TYPE_CHECKING:
    from anticlast.outline import Outline
    from anticlast.records import Floats

# Samples across the longer side, before the best is narrowed down by zooms of 5 x 5 points by this factor.
_SAMPLES = 40
_ZOOM = 0.6
_ZOOMS = 30


class Place(NamedTuple):
    """A value and the plan point (x, y) [mm] where it is taken."""

    value: float
    at_mm: tuple[float, float]


def sample(outline: Outline, samples: int = _SAMPLES) -> tuple[Floats, float]:
    """Return points (n, 2) [mm] on the edge and inside, and their spacing [mm]: longer side over samples."""
    x0, y0, x1, y1 = outline.bounds
    spacing = max(x1 - x0, y1 - y0) / samples
    return np.concatenate((outline.boundary_points(spacing), outline.grid(spacing))), spacing


def extremes(outline: Outline, function: Callable[[Floats], Floats]) -> tuple[Place, Place]:
    """Return the smallest and the largest value over the outline, each with its place.

    Samples, then zooms in on the best sample; finds the best of several only if they are a sample apart.

    Parameters
    ----------
    outline : Outline
    function : callable
        Takes xy (n, 2) [mm], returns (n,).
    """
    xy, spacing = sample(outline)
    values = function(xy)
    least = _narrowed(outline, function, xy[values.argmin()], spacing, -1.0)
    most = _narrowed(outline, function, xy[values.argmax()], spacing, 1.0)
    return least, most


def inside(outline: Outline, xy: Floats) -> Floats:
    """Return xy (n, 2) [mm] with each point outside replaced by the nearest one of the outline."""
    import shapely

    outside = ~shapely.intersects_xy(outline.polygon, xy[:, 0], xy[:, 1])
    if outside.any():
        xy = xy.copy()
        lines = shapely.shortest_line(outline.polygon, shapely.points(xy[outside]))
        xy[outside] = shapely.get_coordinates(lines)[::2]
    return xy


def _narrowed(
    outline: Outline, function: Callable[[Floats], Floats], xy: Floats, span_mm: float, sign: float
) -> Place:
    """Return the largest sign * function near xy (2,) inside the outline, by a grid search that zooms in."""
    offsets = np.stack(np.meshgrid(*[np.linspace(-1.0, 1.0, 5)] * 2), axis=-1).reshape(-1, 2)
    best, at = -np.inf, xy
    for _ in range(_ZOOMS):
        tried = np.concatenate((at[None], inside(outline, at + span_mm * offsets)))
        values = sign * function(tried)
        k = int(values.argmax())
        if values[k] > best:
            best, at = float(values[k]), tried[k]
        span_mm *= _ZOOM
    return Place(sign * best, (float(at[0]), float(at[1])))
