"""Collects the rows of an upright cutter's path and cuts them into stretches."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from anticlast.records import Floats, Job, Operation, Purpose, Stretch, frozen_array
from anticlast.tolerances import SAME_POINT_MM


class Track:
    """Rows of the tip's path with an upright cutter, in order; every move is straight.

    Parameters
    ----------
    operation : Operation
    axis : (3,)
        Cutter axis, unit.
    link_feed_mm_min : float
        Feed of moves in air.
    """

    def __init__(self, operation: Operation, axis: Floats, link_feed_mm_min: float) -> None:
        self.operation = operation
        self.axis = axis
        self.link_feed_mm_min = link_feed_mm_min
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

    def start(self, tip: npt.ArrayLike, owner: int) -> None:
        """Lift, and come down at a new place."""
        self.lift()
        self._row(np.asarray(tip, dtype=np.float64), Purpose.LINK, owner, self.link_feed_mm_min)

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
        """End the stretch."""
        if len(self._tip) > 1:
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


def link_feed_mm_min(job: Job, operation: Operation) -> float:
    """Return the feed of moves in air: the slowest linear axis's fastest, or the operation's own if that is higher."""
    feeds = [axis.feed for axis in job.machine.axes if axis.kind == "linear"]
    return max(operation.feed_mm_min, min(feeds, default=0.0))
