"""Collects the rows of an upright cutter's path and cuts them into stretches."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from anticlast.records import Floats, Job, Operation, Purpose, Stretch, frozen_array
from anticlast.tolerances import SAME_POINT_MM

# More than the machine stage adds to clearances itself (mm).
_SPARE_MM = 0.1


class Track:
    """Rows of the tip's path with an upright cutter, in order; every move is straight.

    Parameters
    ----------
    operation : Operation
    axis : (3,)
        Cutter axis, unit.
    link_feed_mm_min : float
        Feed of moves in air.
    safe_mm : float
        Z at which stretches start and end, over all stock; from there down to a start is air.
    """

    def __init__(self, operation: Operation, axis: Floats, link_feed_mm_min: float, safe_mm: float) -> None:
        self.operation = operation
        self.axis = axis
        self.link_feed_mm_min = link_feed_mm_min
        self.safe_mm = safe_mm
        self.stretches: list[Stretch] = []
        self.cut_length_mm = 0.0
        self._tip: list[Floats] = []
        self._purpose: list[int] = []
        self._owner: list[int] = []
        self._feed: list[float] = []

    @property
    def stands(self) -> Floats | None:
        """Where the tip stands (3,), None if it is up in the air."""
        return self._tip[-1] if self._tip else None

    def start(self, tip: Sequence[float] | Floats, owner: int) -> None:
        """Lift, and come down at a new place."""
        self.lift()
        x, y, z = (float(part) for part in tip)
        self.link(np.array([[x, y, max(z, self.safe_mm)], [x, y, z]]), owner)

    def link(self, tips: Floats, owner: int) -> None:
        """Go along points (n, 3) in air."""
        for tip in tips:
            self._row(tip, Purpose.LINK, owner, self.link_feed_mm_min)

    def cut(self, tips: Floats, owner: int, purpose: Purpose = Purpose.CUT, share: float = 1.0) -> None:
        """Go along points (n, 3) in stock, at a share of the operation's feed."""
        for tip in tips:
            before = self.stands
            if self._row(tip, purpose, owner, share * self.operation.feed_mm_min) and purpose == Purpose.CUT:
                self.cut_length_mm += float(np.linalg.norm(tip - before))

    def lift(self) -> None:
        """Go up and end the stretch."""
        if len(self._tip) > 1:
            x, y, z = (float(part) for part in self._tip[-1])
            self.link(np.array([[x, y, max(z, self.safe_mm)]]), self._owner[-1])
            tip = np.array(self._tip)
            count = len(tip)
            self.stretches.append(
                Stretch(
                    tip_mm=frozen_array(tip),
                    axis=frozen_array(np.tile(self.axis, (count, 1))),
                    contact_mm=frozen_array(tip.copy()),
                    normal=frozen_array(np.tile((0.0, 0.0, 1.0), (count, 1))),
                    purpose=frozen_array(self._purpose, np.uint8),
                    pass_index=frozen_array(self._owner, np.int64),
                    feed_mm_min=frozen_array(self._feed),
                )
            )
        self._tip, self._purpose, self._owner, self._feed = [], [], [], []

    def _row(self, tip: Floats, purpose: int, owner: int, feed: float) -> bool:
        """Add a row unless it stands where the last one does; tell whether it was added."""
        if self._tip and float(np.abs(tip - self._tip[-1]).max()) <= SAME_POINT_MM:
            return False
        self._tip.append(tip)
        self._purpose.append(int(purpose))
        self._owner.append(owner)
        self._feed.append(feed)
        return True


def track_for(job: Job, operation: Operation, axis: Floats) -> Track:
    """Return an empty track for an operation.

    Stretches start at the height from which the machine stage need not lift the cutter any further: it takes a flat
    bottom of radius e for part of a ball of radius sqrt(2) e about a point as high as the rim is wide.
    """
    rim = operation.cutter.radius_mm - operation.cutter.corner_radius_mm
    safe = job.stock.top_mm + job.clearance_mm + (math.sqrt(2.0) - 1.0) * rim + _SPARE_MM
    return Track(operation, axis, link_feed_mm_min(job, operation), safe)


def link_feed_mm_min(job: Job, operation: Operation) -> float:
    """Return the feed of moves in air: the slowest linear axis's fastest, or the operation's own if that is higher."""
    feeds = [axis.feed for axis in job.machine.axes if axis.kind == "linear"]
    return max(operation.feed_mm_min, min(feeds, default=0.0))
