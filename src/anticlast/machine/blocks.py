"""Blocks of a program before they are text: rounding to the posted digits, dropping what does not move, and time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from anticlast.machine.digits import Digits
from anticlast.machine.kinematics import Kinematics, limit_arrays
from anticlast.posting.arcs import arc_length_mm
from anticlast.records import Bools, Bytes, Floats, Ints, Job
from anticlast.tolerances import LIMIT_MM


@dataclass(frozen=True, slots=True)
class Blocks:
    """Blocks in order; fields as in ``records.AxisPath``. ``minutes`` is what the feed asks for, 0 on rapids.

    ``arcs`` None: every block is a straight move.
    """

    words: Floats
    rapid: Bools
    minutes: Floats
    purpose: Bytes
    pass_index: Ints
    arcs: Floats | None = None

    @property
    def arc_rows(self) -> Floats:
        """``arcs``, or the (n, 5) zeros that stand for straight moves."""
        return np.zeros((len(self.words), 5)) if self.arcs is None else self.arcs

    def moving(self, before: Floats | None) -> Blocks:
        """Leave out blocks that end where the one before ended; their time goes to the next block.

        ``before`` (k,) are the words that the first block starts from; None keeps the first block whatever it says.
        """
        if not len(self.words):
            return self
        ahead = self.words[:1] + 1.0 if before is None else before[None, :]
        keep = np.any(np.diff(self.words, axis=0, prepend=ahead) != 0.0, axis=1)
        if keep.all():
            return self
        kept = np.flatnonzero(keep)
        minutes = np.zeros(len(kept))
        if kept.size:
            # Each dropped block belongs to the next kept one; after the last there is none.
            to = np.searchsorted(kept, np.arange(len(keep)))
            inside = to < len(kept)
            np.add.at(minutes, to[inside], self.minutes[inside])
        arcs = None if self.arcs is None else self.arcs[keep]
        return Blocks(
            self.words[keep], self.rapid[keep], minutes, self.purpose[keep], self.pass_index[keep], arcs
        )


def joined(parts: Sequence[Blocks]) -> Blocks:
    """All blocks one after the other, without those that do not move; the first block stays."""
    return Blocks(
        np.concatenate([part.words for part in parts]),
        np.concatenate([part.rapid for part in parts]),
        np.concatenate([part.minutes for part in parts]),
        np.concatenate([part.purpose for part in parts]),
        np.concatenate([part.pass_index for part in parts]),
        np.concatenate([part.arc_rows for part in parts])
        if any(part.arcs is not None for part in parts)
        else None,
    ).moving(None)


def time_blocks(blocks: Blocks, start: Floats, job: Job) -> Blocks:
    """Give every block its time: what the feed asks for, but no axis above its fastest feed, and printable as F.

    Parameters
    ----------
    blocks : Blocks
    start : (k,)
        Words before the first block.
    job : Job

    Returns
    -------
    Blocks
        Minutes raised to the slowest axis's time and to the control's block rate; on rapids the time of the slowest axis at
        its rapid rate. Under G94 a block whose F would be printed as 0 is given the smallest F there is (NISTIR 6556,
        section 2.1.2.5: F counts X Y Z if they move, else the rotary axes).
    """
    machine = job.machine
    step = np.abs(np.diff(blocks.words, axis=0, prepend=start[None, :]))
    along = np.linalg.norm(step[:, :3], axis=1)
    if blocks.arcs is not None:
        along = arc_length_mm(blocks.arcs, step[:, :3])
        # Somewhere on it each axis of an arc's plane may go as fast as the arc.
        step[:, :3] = np.where(blocks.arcs[:, :1] > 0.0, along[:, None], step[:, :3])
    feed = np.array([axis.feed for axis in machine.axes])
    rapid = np.array([axis.rapid for axis in machine.axes])
    minutes = np.maximum(blocks.minutes, (step / feed).max(axis=1))
    if machine.control.block_rate > 0.0:
        minutes = np.maximum(minutes, 1.0 / (60.0 * machine.control.block_rate))
    if not _inverse(blocks, step, job):
        along = along / Digits.of(job).unit_mm
        around = np.linalg.norm(step[:, 3:], axis=1)
        counted = np.where(along > 0.0, along, around)
        least = 10.0**-machine.control.feed_decimals
        minutes = np.where(counted > 0.0, np.minimum(minutes, counted / least), minutes)
    minutes = np.where(blocks.rapid, (step / rapid).max(axis=1), minutes)
    return replace(blocks, minutes=minutes)


def split_long(blocks: Blocks, start: Floats, job: Job, digits: Digits) -> Blocks:
    """Split timed blocks that last longer than F under G93 can say (F is 1/minutes and must not be printed as 0)."""
    step = np.diff(blocks.words, axis=0, prepend=start[None, :])
    longest = 10.0**job.machine.control.feed_decimals
    if not _inverse(blocks, step, job):
        return blocks
    whole = blocks.rapid | (blocks.arc_rows[:, 0] > 0.0)
    parts = np.where(whole, 1, np.ceil(blocks.minutes / longest)).astype(np.int64)
    if parts.max(initial=1) == 1:
        return blocks
    row = np.repeat(np.arange(len(parts)), parts)
    number = np.arange(len(row)) - np.repeat(np.cumsum(parts) - parts, parts) + 1
    back = (1.0 - number / parts[row])[:, None] * step[row]
    return Blocks(
        digits.round_words(blocks.words[row] - back),
        blocks.rapid[row],
        blocks.minutes[row] / parts[row],
        blocks.purpose[row],
        blocks.pass_index[row],
        None if blocks.arcs is None else blocks.arcs[row],
    )


def _inverse(blocks: Blocks, step: Floats, job: Job) -> bool:
    """Whether the operation is posted with inverse-time feed: a rotary axis moves at feed on a machine that has G93."""
    turns = np.any(step[:, 3:] != 0.0, axis=1) & ~blocks.rapid
    return job.machine.control.feed_mode == "inverse" and bool(turns.any())


def limit_notes(kinematics: Kinematics, words: Floats) -> tuple[str, ...]:
    """One sentence for each linear axis whose spindle gauge point leaves its limits; the proof decides."""
    low, high = limit_arrays(kinematics.machine.linear)
    gauge = kinematics.gauge_point(words)
    notes = []
    for j, axis in enumerate(kinematics.machine.linear):
        under, over = low[j] - float(gauge[:, j].min()), float(gauge[:, j].max()) - high[j]
        if max(under, over) > LIMIT_MM:
            limit = low[j] if under >= over else high[j]
            notes.append(f"{axis.letter} has to go {max(under, over):.3f} mm past its limit of {limit:g}")
    return tuple(notes)
