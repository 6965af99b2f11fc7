"""A closed plan path, looked at by the length along it."""

from __future__ import annotations

import numpy as np

from anticlast.records import Floats


class Loop:
    """A closed path; lengths along it wrap.

    Parameters
    ----------
    xy : (n, 2)
        Its corners in the order of travel, the first repeated at the end.
    """

    def __init__(self, xy: Floats) -> None:
        self.xy = xy
        self.at = np.concatenate(([0.0], np.cumsum(np.linalg.norm(np.diff(xy, axis=0), axis=1))))

    @property
    def length_mm(self) -> float:
        """Length of one round."""
        return float(self.at[-1])

    def points(self, place_mm: Floats) -> Floats:
        """Return the points (n, 2) at lengths (n,) along the path."""
        place = np.asarray(place_mm, dtype=np.float64) % self.length_mm
        return np.column_stack(
            (np.interp(place, self.at, self.xy[:, 0]), np.interp(place, self.at, self.xy[:, 1]))
        )

    def between(self, start_mm: float, end_mm: float) -> Floats:
        """Return the path (n, 2) from one length to another further on, both ends and all corners between."""
        return self.points(self.places(start_mm, end_mm))

    def places(self, start_mm: float, end_mm: float) -> Floats:
        """Return the lengths (n,) from one to another further on, both ends and all corners between."""
        first, last = int(np.floor(start_mm / self.length_mm)), int(np.floor(end_mm / self.length_mm))
        corners = np.concatenate([self.at[:-1] + turn * self.length_mm for turn in range(first, last + 1)])
        inner = corners[(corners > start_mm) & (corners < end_mm)]
        return np.concatenate(([start_mm], inner, [end_mm]))

    def tangents(self, place_mm: Floats) -> Floats:
        """Return unit tangents (n, 2) of the edges that start at or go through lengths (n,)."""
        place = np.asarray(place_mm, dtype=np.float64) % self.length_mm
        edge = np.clip(np.searchsorted(self.at, place, side="right") - 1, 0, len(self.at) - 2)
        step = self.xy[edge + 1] - self.xy[edge]
        return step / np.linalg.norm(step, axis=1, keepdims=True)

    def bend_rad(self, start_mm: float, end_mm: float) -> float:
        """Return how far the path turns in all from one length to another further on."""
        way = np.diff(self.between(start_mm, end_mm), axis=0)
        heading = np.unwrap(np.arctan2(way[:, 1], way[:, 0]))
        return float(np.abs(np.diff(heading)).sum())
