"""Where passes run in plan: each pass of a pattern is one line of a course, with a parameter u along it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from anticlast.errors import NotConverged
from anticlast.passes.frame import PassFrame, deepest_step
from anticlast.records import Floats, Ints
from anticlast.tolerances import SAME_POINT_MM

_ROUNDS = 40


class Course(Protocol):
    """The plan curves of a pattern's passes."""

    def at(self, line: Ints, u_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Return plan points (n, 2) [mm] in part coordinates, and their first two derivatives by u."""
        ...


@dataclass(frozen=True, slots=True)
class Straight:
    """Straight passes: v of each in ``lines_mm``, u along the feed of ``frame``."""

    frame: PassFrame
    lines_mm: Floats

    def at(self, line: Ints, u_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Return plan points (n, 2) [mm] in part coordinates, and their first two derivatives by u."""
        xy = self.frame.xy(u_mm, self.lines_mm[line])
        feed = self.frame.xy(np.ones(1), np.zeros(1))
        return xy, np.repeat(feed, len(xy), axis=0), np.zeros_like(xy)


def left_over(ball: PassFrame, course: Course, line: Ints, u_mm: Floats, xy_mm: Floats) -> Floats:
    """Return the height (n,) [mm] that one endless pass of any course leaves over plan points: exact.

    As `PassFrame.left_over`. Along a curve X(u) the centre's second derivative is that along a straight line with
    direction X', plus its rate along X''.

    Parameters
    ----------
    ball : PassFrame
        With ``direction_rad`` 0: (u, v) of the frame are part (x, y).
    line : (n,) int64
    u_mm : (n,)
        Where on the pass to start looking.
    xy_mm : (n, 2)
        The points, part coordinates.

    Raises
    ------
    NotConverged
    """
    x, y = xy_mm[:, 0], xy_mm[:, 1]
    n = ball.normal_uv(x, y)
    point = np.column_stack((xy_mm, ball.saddle.height(x, y))) + ball.allowance_mm * n
    u, step = np.array(u_mm, dtype=np.float64), np.zeros(len(xy_mm))
    for _ in range(_ROUNDS):
        at, rate, turn = course.at(line, u)
        c, c1, c2 = ball.centre(at[:, 0], at[:, 1], rate[:, 0], rate[:, 1])
        c2 = c2 + ball.centre(at[:, 0], at[:, 1], turn[:, 0], turn[:, 1])[1]
        height, step = deepest_step(c - point, c1, c2, n, ball.radius_mm)
        u = u - step
        if not np.any(np.abs(step[np.isfinite(height)]) > SAME_POINT_MM):
            return height
    raise NotConverged("height left by one pass", float(np.abs(step).max()), SAME_POINT_MM)
