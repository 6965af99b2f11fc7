"""From program words to the cutter's pose in part coordinates and back, for any chain of up to two rotary axes.

Frames: part coordinates have their origin at the saddle point; the machine frame has part axes parallel to its own when all
rotary words are 0, the part origin then standing at ``part_origin_mm``. Program zero is the part origin, so at rotary zero
the words X Y Z are the tip's part coordinates. Rotary words are degrees; ``turns`` of the axis gives their sign.

Derivation, worked poses and the handling of the pole: docs/theory-machine.md, "Poses".
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from anticlast.errors import BadInput, Fault
from anticlast.machine import _kernels
from anticlast.records import Axis, Bools, Bytes, Floats, Machine
from anticlast.tolerances import POLE_RAD, REACH_RAD, SAME_DIRECTION_RAD

LINEAR = ("X", "Y", "Z")


@dataclass(frozen=True, slots=True)
class RotaryChoices:
    """Rotary words that give wished cutter axes, limits ignored.

    Attributes
    ----------
    words : (n, branches, m)
        Degrees in (-180, 180], rotary axes in the machine's order. A free word is 0.
    free : (n, branches, m) uint8
        1 where the cutter axis does not depend on the word: the pole.
    miss_rad : (n, branches)
        Angle between the wished axis and the one these words give; not 0 where the wish is out of the machine's reach.
    """

    words: Floats
    free: Bytes
    miss_rad: Floats


class Kinematics:
    """The poses of one machine with one cutter and one place for the part.

    Parameters
    ----------
    machine : Machine
        Axes X Y Z, then at most two rotary axes that are not parallel to each other, listed from the machine frame outwards.
    part_origin_mm : sequence of 3
        Where the part origin stands in the machine frame with all rotary words 0, mm.
    gauge_length_mm : float
        Tip to spindle gauge point, mm.

    Raises
    ------
    BadInput
        The machine has other axes than that.
    """

    def __init__(self, machine: Machine, part_origin_mm: Sequence[float], gauge_length_mm: float) -> None:
        self.machine = machine
        self.letters = machine.letters
        self.gauge_length_mm = float(gauge_length_mm)
        self.part_origin_mm = np.asarray(part_origin_mm, dtype=np.float64)
        rotary = machine.rotary
        _check_axes(machine)
        self.chain = _chain(rotary)
        self.base = np.append(self.part_origin_mm, machine.pivot_length_mm + self.gauge_length_mm)
        self.low, self.high = limit_arrays(rotary)

    @property
    def rotary_count(self) -> int:
        """Number of rotary axes, 0 to 2."""
        return self.chain.shape[0]

    @property
    def carries_cutter(self) -> bool:
        """True if some rotary axis carries the cutter."""
        return bool((self.chain[:, 7] == 0.0).any())

    def forward(self, words: npt.ArrayLike) -> tuple[Floats, Floats]:
        """Pose of the cutter in part coordinates.

        Parameters
        ----------
        words : (n, k)
            Program words in the order of ``letters``: mm, and degrees for rotary axes.

        Returns
        -------
        tip : (n, 3)
            Cutter tip, mm.
        axis : (n, 3)
            Unit cutter axis from the tip to the spindle.
        """
        return _kernels.forward(self.chain, self.base, self._rows(words, 3 + self.rotary_count))

    def rotary(self, axis: npt.ArrayLike) -> RotaryChoices:
        """Rotary words for cutter axes (n, 3) in part coordinates: every branch, limits ignored.

        Two rotary axes give two branches: the spindle direction must lie on a cone about one axis and on another cone
        about the other, and two cones with one apex meet in two lines (Paden-Kahan subproblem 2; Murray, Li, Sastry,
        A Mathematical Introduction to Robotic Manipulation, 1994, section 3.3.2). One or no rotary axis gives one.
        """
        words, free, miss = _kernels.solve_rotary(self.chain, POLE_RAD, self._rows(axis, 3))
        return RotaryChoices(words, free, miss)

    def inverse(
        self, tip: npt.ArrayLike, axis: npt.ArrayLike, near: npt.ArrayLike | None = None
    ) -> tuple[Floats, Bools]:
        """Program words that bring the cutter into a pose, every branch, limits ignored.

        Parameters
        ----------
        tip : (n, 3)
            Cutter tip in part coordinates, mm.
        axis : (n, 3)
            Unit cutter axis in part coordinates.
        near : (m,) or (n, m), optional
            Rotary words (degrees) to keep where the pose does not decide them (at the pole); 0 if not given.

        Returns
        -------
        words : (n, branches, k)
            Order of ``letters``; rotary words in (-180, 180] unless kept from ``near``.
        valid : (n, branches) bool
            True where the pose is reached; where not, the words give the axis nearest to the wish on that branch.
        """
        tips = self._rows(tip, 3)
        choices = self.rotary(axis)
        rot = choices.words
        if near is not None and choices.free.any():
            keep = np.broadcast_to(np.asarray(near, dtype=np.float64), (len(tips), self.rotary_count))
            rot = np.where(choices.free.astype(bool), keep[:, None, :], rot)
        count, branches, m = rot.shape
        flat = np.ascontiguousarray(rot.reshape(count * branches, m))
        words = _kernels.place(self.chain, self.base, flat, 0.0, np.repeat(tips, branches, axis=0))
        return words.reshape(count, branches, 3 + m), choices.miss_rad <= REACH_RAD

    def place(self, point: npt.ArrayLike, rotary_words_deg: npt.ArrayLike, height_mm: float = 0.0) -> Floats:
        """Words (n, k) that bring a point of the cutter to a point of the part at given rotary words.

        Parameters
        ----------
        point : (n, 3)
            Part coordinates, mm.
        rotary_words_deg : (n, m)
            Rotary words, degrees.
        height_mm : float
            Height above the tip, along the cutter axis, of the cutter's point; 0 is the tip itself.
        """
        rot = self._rows(rotary_words_deg, self.rotary_count)
        return _kernels.place(self.chain, self.base, rot, float(height_mm), self._rows(point, 3))

    def nearest_axis(self, axis: npt.ArrayLike) -> Floats:
        """Cutter axis nearest to the wished one that the machine reaches inside its rotary limits.

        Parameters
        ----------
        axis : (n, 3)
            Wished unit cutter axis in part coordinates.

        Returns
        -------
        (n, 3)
            The wish itself where some branch reaches it, else the reachable unit axis at the smallest angle from it. With
            no rotary axis that is the spindle direction.
        """
        return _kernels.nearest_axis(self.chain, self.low, self.high, POLE_RAD, self._rows(axis, 3))

    def spindle(self, words: npt.ArrayLike) -> Floats:
        """Spindle direction (n, 3) in the machine frame, from the tip towards the spindle."""
        rows = self._rows(words, 3 + self.rotary_count)
        return _kernels.spindle(self.chain, np.ascontiguousarray(rows[:, 3:]))

    def machine_tip(self, words: npt.ArrayLike) -> Floats:
        """Cutter tip (n, 3) in the machine frame, mm: XYZ + part origin + (0, 0, L) - L axis, L the pivot's distance."""
        rows = self._rows(words, 3 + self.rotary_count)
        length = self.base[3]
        return rows[:, :3] + self.part_origin_mm + np.array([0.0, 0.0, length]) - length * self.spindle(rows)

    def gauge_point(self, words: npt.ArrayLike) -> Floats:
        """Spindle gauge point (n, 3) in the machine frame, mm: the point whose travel the linear limits bound."""
        return self.machine_tip(words) + self.gauge_length_mm * self.spindle(words)

    def gauge_offset(self, words: npt.ArrayLike) -> Floats:
        """Gauge point minus the words X Y Z (n, 3), mm: depends on the rotary words alone."""
        rows = self._rows(words, 3 + self.rotary_count)
        return self.gauge_point(rows) - rows[:, :3]

    @staticmethod
    def _rows(values: npt.ArrayLike, width: int) -> Floats:
        """Values as a C-contiguous float64 array of rows of one width."""
        rows = np.ascontiguousarray(values, dtype=np.float64)
        if rows.ndim != 2 or rows.shape[1] != width:
            raise ValueError(f"expected an array of shape (n, {width}), found {rows.shape}")
        return rows


def limit_arrays(axes: Sequence[Axis]) -> tuple[Floats, Floats]:
    """Low and high limits (m,) of axes in their own units; minus and plus infinity where an axis has none."""
    low = np.array([-math.inf if a.limits is None else a.limits[0] for a in axes], dtype=np.float64)
    high = np.array([math.inf if a.limits is None else a.limits[1] for a in axes], dtype=np.float64)
    return low, high


def _check_axes(machine: Machine) -> None:
    """Raise BadInput unless the machine is X Y Z plus at most two rotary axes that span a plane of directions."""
    faults: list[Fault] = []
    rotary = machine.rotary
    if machine.letters[:3] != LINEAR or len(machine.linear) != 3:
        found = " ".join(machine.letters)
        faults.append(
            Fault(str(machine.source), 0, "axis", f"axes are {found}; X Y Z must come first, once each")
        )
    if len(rotary) > 2:
        message = f"{len(rotary)} rotary axes; at most two can be planned for"
        faults.append(Fault(str(machine.source), 0, "axis", message))
    elif len(rotary) == 2:
        cross = np.cross(rotary[0].direction, rotary[1].direction)
        if float(np.linalg.norm(cross)) < SAME_DIRECTION_RAD:
            letters = f"{rotary[0].letter} and {rotary[1].letter}"
            message = f"{letters} are parallel; two rotary axes must point in different directions"
            faults.append(Fault(str(machine.source), 0, "axis.direction", message))
    if faults:
        raise BadInput(faults)


def _chain(rotary: Sequence[Axis]) -> Floats:
    """The kernels' (m, 8) table of rotary axes."""
    rows = np.zeros((len(rotary), 8))
    for row, axis in zip(rows, rotary, strict=True):
        direction = np.asarray(axis.direction, dtype=np.float64)
        row[0:3] = direction / np.linalg.norm(direction)
        row[3:6] = axis.through
        row[6] = float(axis.turns)
        row[7] = 1.0 if axis.carries == "work" else 0.0
    return rows
