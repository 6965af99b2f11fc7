"""What happens along the program: one row a piece of motion, with the quantities that a machinist asks about.

The rows are what the control will do, as read back from the program text. Only what the text does not say
(the purpose of a move, the pass it belongs to) is taken from the plan, matched block by block. Without a
program the planned path itself is shown, and the quantities that need a program stay empty.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
import numpy.typing as npt

from anticlast.cutter import Cutter
from anticlast.errors import NotConverged
from anticlast.records import (
    AxisPath,
    Bools,
    Bytes,
    CutterPath,
    Floats,
    Ints,
    Job,
    Made,
    MotionTimes,
    PartMotion,
    Purpose,
    ReadProgram,
)
from anticlast.tolerances import LIMIT_MM, PIECE_MM

UNKNOWN = 255  # purpose of a feed move that the plan does not hold
RUN = 4096  # blocks compared at a time
LOOK_AHEAD = 12  # planned blocks that may be missing from the text in a row (no word changed)
# mm or degrees; a word read back is off its plan by half a posted digit at most, inch included
SAME_WORD = 10 * LIMIT_MM
PIECES = 15  # of a motion as read back that are drawn as one
MOST_ROUNDS = 30
# mm; change of the contact in the last round, far below what a picture or a feed shows
SETTLED_MM = 1e-4


@dataclass(frozen=True, slots=True)
class Along:
    """Rows in order of execution; row i is the piece of motion that ends there, row 0 is where it starts.

    Attributes
    ----------
    letters : tuple of str
        Axis letters of ``words``; empty when there is no program.
    tip_mm, axis, contact_mm : (n, 3)
        Pose of the cutter, and its contact on the finished surface (nan where it does not cut), part
        coordinates.
    words : (n, k)
        Program words at the end of the block that the row is part of: mm and degrees.
    line : (n,) int64
        Line of the program, 0 when unknown.
    purpose : (n,) uint8
        ``Purpose`` or 255 when unknown.
    operation, pass_index : (n,) int64
        Place in ``made.cutter_paths`` and pass, -1 when none.
    tool : (n,) int64
    clock_s : (n,)
        Time since the start.
    asked_mm_min, reached_mm_min : (n,)
        Feed that F asks for and mean feed that the machine reaches over the block: of the cutter contact
        where it cuts, else of the reference point. nan on rapids.
    tilt_rad : (n,)
        Angle between cutter axis and surface normal; nan where it does not cut.
    rotary_deg_min : (n,)
        Fastest rotary axis over the block; 0 on a machine without.
    notes : tuple of str
        What could not be worked out, and why.
    slack_mm : float
        Furthest that the tip may leave the straight line between two rows.
    """

    letters: tuple[str, ...]
    tip_mm: Floats
    axis: Floats
    contact_mm: Floats
    words: Floats
    line: Ints
    purpose: Bytes
    operation: Ints
    pass_index: Ints
    tool: Ints
    clock_s: Floats
    asked_mm_min: Floats
    reached_mm_min: Floats
    tilt_rad: Floats
    rotary_deg_min: Floats
    notes: tuple[str, ...] = ()
    slack_mm: float = 0.0

    @property
    def cutting(self) -> Bools:
        """Rows whose contact lies on the part."""
        return self.purpose == Purpose.CUT


def match_blocks(ends: Floats, words: Floats) -> Ints:
    """Find the planned block behind each motion read: both run in the same order, either may have extra rows.

    Parameters
    ----------
    ends : (m, k)
        Words at the end of each motion.
    words : (n, k)
        Words at the end of each planned block, same columns.

    Returns
    -------
    (m,) int64
        Row of ``words``, -1 where no planned block ends there.
    """
    found = np.full(len(ends), -1)
    row = at = 0
    while row < len(ends) and at < len(words):
        size = min(RUN, len(ends) - row, len(words) - at)
        same = _alike(ends[row : row + size], words[at : at + size])
        run = size if same.all() else int(np.argmin(same))
        found[row : row + run] = np.arange(at, at + run)
        row, at = row + run, at + run
        if run == size:
            continue
        ahead = np.flatnonzero(_alike(ends[row], words[at : at + LOOK_AHEAD]))
        if len(ahead):
            at += int(ahead[0])  # planned blocks that the text leaves out
        else:
            row += 1  # a motion that was not planned
    return found


def _alike(one: Floats, two: Floats) -> Bools:
    return np.all(np.abs(one - two) <= SAME_WORD, axis=-1)


def contact(job: Job, cutter: Cutter, tip_mm: Floats, axis: Floats) -> tuple[Floats, Floats]:
    """Contact on the finished surface and the normal there, for a cutter that touches it.

    A ball touches where its centre is nearest to the surface. A bull or flat end mill touches with its
    corner: the centre of the corner arc lies in the plane of axis and normal, on the low side.

    Parameters
    ----------
    tip_mm, axis : (n, 3)
        Part coordinates; axis from the tip to the spindle.

    Returns
    -------
    contact_mm, normal : (n, 3)
        nan in rows of a bull or flat end mill where the search does not settle: the cutter stands so upright
        there that its whole bottom is as near.

    Raises
    ------
    NotConverged
        When the nearest point of the surface cannot be found.
    """
    from anticlast.saddle import Saddle

    saddle = Saddle.of(job.part)
    point = tip_mm + cutter.reference_height_mm * axis
    foot, _ = saddle.closest(point)
    if cutter.shape == "ball":
        return saddle.point(foot), saddle.normal(foot)
    settled = np.zeros(len(foot), bool)
    for _ in range(
        MOST_ROUNDS
    ):  # each round leaves about (corner circle radius) * curvature / sin(tilt) of the error
        normal = saddle.normal(foot)
        low = axis * np.sum(axis * normal, axis=1, keepdims=True) - normal
        size = np.linalg.norm(low, axis=1, keepdims=True)
        arm = (cutter.radius_mm - cutter.corner_radius_mm) * low / np.where(size > 0, size, 1.0)
        last = foot
        foot, _ = saddle.closest(point + arm)
        settled = np.linalg.norm(foot - last, axis=1) < SETTLED_MM
        if settled.all():
            break
    foot = np.where(settled[:, None], foot, 0.0)
    return (
        np.where(settled[:, None], saddle.point(foot), np.nan),
        np.where(settled[:, None], saddle.normal(foot), np.nan),
    )


def along(made: Made) -> Along | None:
    """Return the rows of a job's program, else of its plan; None when there is neither."""
    if made.program is not None and made.part_motion is not None and len(made.part_motion.line) > 1:
        return _of_program(made, made.program, made.part_motion)
    if made.cutter_paths:
        return _of_plan(made.cutter_paths)
    return None


def _planned(axis_paths: tuple[AxisPath, ...], columns: list[int]) -> tuple[Floats, Bytes, Ints, Ints]:
    """Planned blocks that change a word, of all operations in a row: words, purpose, operation, pass."""
    words, purpose, operation, passes = [], [], [], []
    for place, path in enumerate(axis_paths):
        moved = np.any(np.diff(path.words, axis=0, prepend=path.start[None, :]) != 0, axis=1)
        words.append(path.words[moved])
        purpose.append(np.where(path.rapid[moved], np.uint8(Purpose.RAPID), path.purpose[moved]))
        operation.append(np.full(int(moved.sum()), place))
        passes.append(path.pass_index[moved])
    if not words:
        return np.empty((0, len(columns))), np.empty(0, np.uint8), np.empty(0, int), np.empty(0, int)
    return np.concatenate(words), np.concatenate(purpose), np.concatenate(operation), np.concatenate(passes)


def _per_motion(moved: npt.NDArray, seconds: Floats) -> Floats:
    """Feed in mm/min; nan where no time passes."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(seconds > 0, 60.0 * moved / seconds, np.nan)


def _reference(cutters: tuple[Cutter, ...], motion: PartMotion) -> Floats:
    heights = np.zeros(len(motion.tool))
    for cutter in cutters:
        heights[motion.tool == cutter.number] = cutter.reference_height_mm
    return motion.tip_mm + heights[:, None] * motion.axis


def _touch(made: Made, motion: PartMotion, finishing: Bools) -> tuple[Floats, Floats, tuple[str, ...]]:
    """Contact and normal at every row of a pass on the finished surface; nan elsewhere."""
    touched = np.full(motion.tip_mm.shape, np.nan)
    normals = np.full(motion.tip_mm.shape, np.nan)
    notes: list[str] = []
    near = finishing.copy()
    near[:-1] |= finishing[1:]  # a pass starts where the move before it ended
    for cutter in made.job.cutters:
        rows = np.flatnonzero(near & (motion.tool == cutter.number))
        if not len(rows):
            continue
        try:
            touched[rows], normals[rows] = contact(made.job, cutter, motion.tip_mm[rows], motion.axis[rows])
        except NotConverged as failed:
            notes.append(f"T{cutter.number}: contact, tilt and contact feed are not shown: {failed}")
            continue
        lost = int(np.isnan(touched[rows, 0]).sum())
        if lost:
            notes.append(
                f"T{cutter.number}: no single contact at {lost} of {len(rows)} points, so none is shown."
            )
    return touched, normals, tuple(notes)


def fewer_pieces(motion: PartMotion) -> tuple[PartMotion, float]:
    """Keep the end of each motion and every so many of the pieces within it.

    The read-back splits a motion evenly until each piece is straight within ``PIECE_MM``. The sagitta of an
    arc grows with the square of its length, so k pieces taken as one are straight within k^2 of that. Derived
    here.

    Returns
    -------
    motion : PartMotion
    slack_mm : float
        Furthest that the tip may now leave the straight lines; 0 if nothing was dropped.
    """
    n = len(motion.motion)
    last = np.ones(n, bool)
    last[:-1] = motion.motion[1:] != motion.motion[:-1]
    starts = np.concatenate(([0], np.flatnonzero(last)[:-1] + 1))
    within = np.arange(n) - np.repeat(starts, np.diff(np.concatenate((starts, [n]))))
    rows = np.flatnonzero(last | (within % PIECES == PIECES - 1))
    if len(rows) == n:
        return motion, 0.0
    kept = {field.name: getattr(motion, field.name)[rows] for field in fields(motion)}
    return PartMotion(**kept), PIECES**2 * PIECE_MM


def _of_program(made: Made, program: ReadProgram, motion: PartMotion) -> Along:
    motion, slack = fewer_pieces(motion)
    motions = program.motions
    letters = made.job.machine.letters
    columns = ["XYZABC".index(letter) for letter in letters]
    words, purposes, operations, passes = _planned(made.axis_paths, columns)
    match = match_blocks(motions.end[:, columns], words)
    known = match >= 0
    safe = np.where(known, match, 0)
    rapid = motions.shape == 0

    def planned(values: np.ndarray, otherwise: int) -> np.ndarray:
        return np.where(known, values[safe], otherwise) if len(values) else np.full(len(match), otherwise)

    purpose = np.where(rapid, int(Purpose.RAPID), planned(purposes, UNKNOWN)).astype(np.uint8)
    of = motion.motion
    first = of < 0
    row_purpose = np.where(first, np.uint8(Purpose.RAPID), purpose[of])
    row_operation = np.where(first, -1, planned(operations, -1)[of])
    # The last entry stands for operation -1.
    sweeps = np.array([*(path.operation.does != "rough" for path in made.axis_paths), False])
    finishing = (row_purpose <= Purpose.OVERRUN) & sweeps[row_operation]
    touched, normals, notes = _touch(made, motion, finishing)
    reference = _reference(made.job.cutters, motion)

    moved = np.linalg.norm(np.diff(reference, axis=0, prepend=reference[:1]), axis=1)
    slid = np.linalg.norm(np.diff(touched, axis=0, prepend=touched[:1]), axis=1)
    moved = np.where(finishing & np.isfinite(slid), slid, moved)
    length = np.bincount(of[~first], weights=moved[~first], minlength=len(rapid))
    seconds, asked_s = _seconds(made.times, program)
    feeds = ~rapid[of] & ~first
    turned = np.abs(motions.end - motions.start)[:, 3:].max(axis=1)
    ends = np.cumsum(seconds)
    return Along(
        letters=letters,
        tip_mm=motion.tip_mm,
        axis=motion.axis,
        contact_mm=np.where((finishing & (row_purpose == Purpose.CUT))[:, None], touched, np.nan),
        words=np.where(first[:, None], motions.start[0, columns], motions.end[of][:, columns]),
        line=motion.line,
        purpose=row_purpose,
        operation=row_operation,
        pass_index=np.where(first, -1, planned(passes, -1)[of]),
        tool=motion.tool,
        clock_s=np.where(first, 0.0, (ends - seconds)[of] + motion.fraction * seconds[of]),
        asked_mm_min=np.where(feeds, _per_motion(length, asked_s)[of], np.nan),
        reached_mm_min=np.where(feeds, _per_motion(length, seconds)[of], np.nan),
        tilt_rad=np.where(finishing & (row_purpose == Purpose.CUT), _angle(motion.axis, normals), np.nan),
        rotary_deg_min=np.where(first, 0.0, np.nan_to_num(_per_motion(turned, seconds))[of]),
        notes=notes,
        slack_mm=slack,
    )


def _angle(one: Floats, two: Floats) -> Floats:
    """Angle between unit vectors, radians; accurate near 0, where acos is not."""
    return 2.0 * np.arcsin(np.clip(np.linalg.norm(one - two, axis=1) / 2.0, 0.0, 1.0))


def _seconds(times: MotionTimes | None, program: ReadProgram) -> tuple[Floats, Floats]:
    """Time of each motion as estimated and as F asks; without an estimate what F asks, rapids nothing."""
    asked = np.nan_to_num(program.motions.seconds)
    if times is None:
        return asked, asked
    return times.seconds, np.where(np.isfinite(program.motions.seconds), asked, times.feed_only_s)


def _of_plan(paths: tuple[CutterPath, ...]) -> Along:
    """Planned stretches one after the other, joined as if by rapids; no words, lines or machine times."""
    parts = [(place, path, stretch) for place, path in enumerate(paths) for stretch in path.stretches]
    tips = np.concatenate([stretch.tip_mm for _, _, stretch in parts])
    axes = np.concatenate([stretch.axis for _, _, stretch in parts])
    purpose = np.concatenate([_opened(stretch.purpose) for _, _, stretch in parts])
    cut = purpose == Purpose.CUT
    touched = np.concatenate([stretch.contact_mm for _, _, stretch in parts])
    normals = np.concatenate([stretch.normal for _, _, stretch in parts])
    feed = np.concatenate([stretch.feed_mm_min for _, _, stretch in parts])
    n = len(tips)
    return Along(
        letters=(),
        tip_mm=tips,
        axis=axes,
        contact_mm=np.where(cut[:, None], touched, np.nan),
        words=np.empty((n, 0)),
        line=np.zeros(n, np.int64),
        purpose=purpose,
        operation=np.concatenate([np.full(len(stretch.purpose), place) for place, _, stretch in parts]),
        pass_index=np.concatenate([stretch.pass_index for _, _, stretch in parts]),
        tool=np.concatenate([np.full(len(s.purpose), path.operation.cutter.number) for _, path, s in parts]),
        clock_s=np.zeros(n),
        asked_mm_min=np.where(purpose == Purpose.RAPID, np.nan, feed),
        reached_mm_min=np.full(n, np.nan),
        tilt_rad=np.where(cut, _angle(axes, normals), np.nan),
        rotary_deg_min=np.zeros(n),
        notes=("No program was read back: the passes shown are the plan.",),
    )


def _opened(purpose: Bytes) -> Bytes:
    """Mark the row that a stretch starts at as reached by a rapid."""
    opened = purpose.copy()
    opened[0] = Purpose.RAPID
    return opened
