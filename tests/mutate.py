"""Spoil one token of a program, and judge by brute force what that does: nothing here shares code with the proof.

The judge knows upright cutters only. It samples the read motion densely, cuts a plain height map in order of time and looks
along the surface normals at what stays, so what it calls harmful is harmful; it does not find the last micrometre.
"""

from __future__ import annotations

import random
import re
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from anticlast.readback.checks import known_places
from anticlast.readback.forward import part_motion
from anticlast.readback.reader import read_program
from anticlast.records import Job, Proof, ReadProgram, Shape
from anticlast.saddle import Saddle

_WORD = re.compile(r"([A-Za-z])([-+]?\d*\.?\d+\.?)")
_STEP_MM, _CELL_MM, _NODE_MM = 0.1, 0.25, 0.15
# The judge's own error: samples 0.1 mm apart on a ball stand 0.1^2 / (8 R) over its path, rounded up.
_JUDGE_MM = 1e-3
_SAME_MM = 1e-6


# ---------------------------------------------------------------------------------------- spoiling


def _words(text: str, letters: str = "") -> list[re.Match[str]]:
    return [found for found in _WORD.finditer(text) if not letters or found.group(1).upper() in letters]


def _put(text: str, start: int, end: int, new: str) -> str:
    return text[:start] + new + text[end:]


def digit(text: str, rng: random.Random) -> str:
    """Change one digit of one word."""
    word = rng.choice(_words(text))
    at = rng.choice([i for i in range(word.start(2), word.end(2)) if text[i].isdigit()])
    return _put(text, at, at + 1, rng.choice([d for d in "0123456789" if d != text[at]]))


def sign(text: str, rng: random.Random) -> str:
    """Turn the sign of one number."""
    word = rng.choice(_words(text, "XYZFS"))
    number = word.group(2)
    return _put(text, *word.span(2), number[1:] if number[0] == "-" else f"-{number}")


def point(text: str, rng: random.Random) -> str:
    """Drop the decimal point of one number, or move it one place."""
    word = rng.choice([found for found in _words(text) if "." in found.group(2)[1:-1]])
    number = word.group(2)
    at = number.index(".")
    bare = number.replace(".", "")
    moved = bare[: at + 1] + "." + bare[at + 1 :]
    return _put(text, *word.span(2), rng.choice([bare, moved]))


def dropped_line(text: str, rng: random.Random) -> str:
    """Leave out one line."""
    lines = text.splitlines(keepends=True)
    at = rng.randrange(len(lines))
    return "".join(lines[:at] + lines[at + 1 :])


def doubled_line(text: str, rng: random.Random) -> str:
    """Write one line twice."""
    lines = text.splitlines(keepends=True)
    at = rng.randrange(len(lines))
    return "".join(lines[: at + 1] + lines[at:])


def swapped_words(text: str, rng: random.Random) -> str:
    """Swap the letters of two words of one line."""
    lines = text.splitlines(keepends=True)
    at = rng.choice([i for i, line in enumerate(lines) if len(_words(line)) > 1])
    one, two = sorted(rng.sample(_words(lines[at]), 2), key=lambda word: word.start())
    line = _put(lines[at], *two.span(1), one.group(1))
    lines[at] = _put(line, *one.span(1), two.group(1))
    return "".join(lines)


def _code(text: str, rng: random.Random) -> re.Match[str]:
    """Choose a G or M word: first which code, so that the many G1 do not crowd out the rest, then which of its places."""
    words = _words(text, "GM")
    code = rng.choice(sorted({word.group() for word in words}))
    return rng.choice([word for word in words if word.group() == code])


def dropped_code(text: str, rng: random.Random) -> str:
    """Leave out one G or M word."""
    word = _code(text, rng)
    return _put(text, *word.span(), "")


def changed_code(text: str, rng: random.Random) -> str:
    """Write another G or M code in place of one."""
    word = _code(text, rng)
    codes = {"G": "0 1 2 3 17 18 20 21 28 40 43 49 53 54 55 61 64 80 90 91 92 93 94", "M": "0 1 2 3 4 5 6 30"}
    return _put(text, *word.span(2), rng.choice(codes[word.group(1).upper()].split()))


def truncated(text: str, rng: random.Random) -> str:
    """Cut the file off anywhere."""
    return text[: rng.randrange(len(text))]


def tool_or_offset(text: str, rng: random.Random) -> str:
    """Call another cutter, or its length."""
    word = rng.choice(_words(text, "TH"))
    return _put(text, *word.span(2), rng.choice([n for n in "0235" if n != word.group(2)]))


KINDS: tuple[Callable[[str, random.Random], str], ...] = (
    digit, sign, point, dropped_line, doubled_line, swapped_words, dropped_code, changed_code, truncated, tool_or_offset,
)  # fmt: skip


def mutations(text: str, count: int, seed: int) -> Iterator[tuple[str, str]]:
    """Yield kind and text of seeded mutations, the kinds in turn; each differs from the text."""
    rng = random.Random(seed)
    for number in range(count):
        kind = KINDS[number % len(KINDS)]
        spoilt = kind(text, rng)
        while spoilt == text:
            spoilt = kind(text, rng)
        yield kind.__name__, spoilt


# ---------------------------------------------------------------------------------------- judging


@dataclass(frozen=True)
class Walk:
    """Tips (n, 3) sampled along a program [mm], whether at rapid (n,), and the row of motion (n,)."""

    tip: np.ndarray
    rapid: np.ndarray
    row: np.ndarray


def walk(job: Job, read: ReadProgram) -> Walk:
    """Sample the read motion; motion whose place is not known is left out."""
    lengths = {cutter.number: cutter.gauge_length_mm for cutter in job.cutters}
    used = {int(n) for n in (*read.motions.tool, *read.motions.offset_h)}
    motion = part_motion(read, job.machine, job.part_origin_mm, {**dict.fromkeys(used, 0.0), **lengths})
    at_start, at_end = known_places(read)
    known = (
        np.logical_and(at_start, at_end)[:, :3].all(axis=1) if len(read.motions.line) else np.zeros(0, bool)
    )
    tips, rapid, rows = [np.zeros((0, 3))], [np.zeros(0, bool)], [np.zeros(0, int)]
    for i in range(1, len(motion.tip_mm)):
        row = int(motion.motion[i])
        if motion.fraction[i] <= 0.0 or not known[row]:
            continue
        one, two = motion.tip_mm[i - 1], motion.tip_mm[i]
        # A spoilt number may run far away; what leaves the travel is told by the end points.
        steps = min(2000, max(1, int(np.ceil(np.linalg.norm(two - one) / _STEP_MM))))
        tips.append(one + np.linspace(0.0, 1.0, steps + 1)[:, None] * (two - one))
        rapid.append(np.full(steps + 1, bool(motion.rapid[i])))
        rows.append(np.full(steps + 1, row))
    return Walk(np.concatenate(tips), np.concatenate(rapid), np.concatenate(rows))


def residuals(job: Job, tip: np.ndarray) -> np.ndarray:
    """Height along the normal that a ball leaves over nodes inside the outline [mm], negative where it gouges."""
    x0, y0, x1, y1 = job.part.outline.bounds
    x, y = np.meshgrid(np.arange(x0 + 0.1, x1, _NODE_MM), np.arange(y0 + 0.1, y1, _NODE_MM))
    xy = np.column_stack((x.ravel(), y.ravel()))
    saddle, radius = Saddle.of(job.part), job.cutters[0].radius_mm
    centre = tip[tip[:, 2] < job.stock.top_mm] + [0.0, 0.0, radius]
    left = np.full(len(xy), 9.9)
    for k, (point, normal) in enumerate(zip(saddle.offset(xy, 0.0), saddle.normal(xy), strict=True)):
        arm = centre - point
        arm = arm[np.abs(arm[:, 0]) + np.abs(arm[:, 1]) < 2.0 * radius]
        along = arm @ normal
        across = np.einsum("ij,ij->i", arm, arm) - along**2
        near = across < radius**2
        if near.any():
            left[k] = min(9.9, float(np.min(along[near] - np.sqrt(radius**2 - across[near]))))
    return left


def rapid_contact_mm(job: Job, path: Walk) -> float:
    """Deepest that a rapid, the shank or the holder reaches into the standing blank, from a height map cut in order [mm]."""
    x0, y0, x1, y1 = job.stock.outline.bounds
    gx, gy = np.arange(x0 + _CELL_MM / 2, x1, _CELL_MM), np.arange(y0 + _CELL_MM / 2, y1, _CELL_MM)
    height = np.full((len(gy), len(gx)), job.stock.top_mm)
    cutter, worst = job.cutters[0], 0.0
    radius, before = cutter.radius_mm, np.full(3, np.inf)
    wide = cutter.holder[0][0] if cutter.holder else radius
    for tip, rapid in zip(path.tip, path.rapid, strict=True):
        lifted = tip[2] >= before[2] and np.hypot(*(tip - before)[:2]) < 1e-9
        before = tip
        if tip[2] > height.max():
            continue
        off2 = (gx[None, :] - tip[0]) ** 2 + (gy[:, None] - tip[1]) ** 2
        under = off2 < radius**2
        if tip[2] + cutter.stickout_mm < job.stock.top_mm:
            reach = height[off2 < wide**2].max(initial=-np.inf) - tip[2] - cutter.stickout_mm
            worst = max(worst, float(reach))
        if not under.any():
            continue
        floor = tip[2] + radius - np.sqrt(np.maximum(0.0, radius**2 - off2))
        if rapid and not lifted:
            worst = max(worst, float((height - floor)[under].max()))
        height = np.where(under, np.minimum(height, floor), height)
    return worst


def limits_left(job: Job, read: ReadProgram) -> list[str]:
    """Name the limits of machine and job that the motions leave."""
    motions, found = read.motions, []
    lengths = {cutter.number: cutter.gauge_length_mm for cutter in job.cutters}
    _, at_end = known_places(read)
    for column, axis in enumerate(job.machine.linear):
        gauge = motions.end[at_end[:, column], column] + job.part_origin_mm[column]
        if column == 2:
            gauge = gauge + np.array([lengths.get(int(h), 0.0) for h in motions.offset_h])[at_end[:, 2]]
        low, high = axis.limits or (-np.inf, np.inf)
        if gauge.size and (gauge.min() < low - 1e-3 or gauge.max() > high + 1e-3):
            found.append(f"travel {axis.letter}")
        speed = np.abs(motions.end - motions.start)[:, column] * 60.0
        feeding = (motions.shape == Shape.FEED) & (motions.seconds > 0.0)
        if np.any(speed[feeding] > 1.01 * axis.feed * motions.seconds[feeding]):
            found.append(f"feed {axis.letter}")
    cutting = motions.shape != Shape.RAPID
    rpm = motions.spindle_rpm[cutting]
    if np.any((rpm < job.machine.spindle.min_rpm) | (rpm > job.machine.spindle.max_rpm)):
        found.append("spindle")
    if not set(motions.tool[cutting].tolist()) <= set(lengths):
        found.append("tool")
    if np.any(motions.offset_h[cutting] != motions.tool[cutting]):
        found.append("length offset")
    return found


def harm(job: Job, read: ReadProgram) -> list[str]:
    """Say what harm a program that can be read does, by brute force; empty if none."""
    found = limits_left(job, read)
    path = walk(job, read)
    left = residuals(job, path.tip)
    operation = job.operations[0]
    if left.max() > (operation.scallop_mm or 0.0) + _JUDGE_MM:
        found.append("scallop")
    if left.min() < -operation.tolerance_mm - _JUDGE_MM:
        found.append("gouge")
    if rapid_contact_mm(job, path) > 0.02:
        found.append("collision")
    if path.tip.size and path.tip[:, 2].min() < job.stock.bottom_mm:
        found.append("under the blank")
    return found


def same_motion(one: ReadProgram, two: ReadProgram) -> bool:
    """Whether two programs make the same motions with the same cutter, feeds and spindle."""
    a, b = one.motions, two.motions
    return len(a.line) == len(b.line) and all(
        np.allclose(getattr(a, name), getattr(b, name), atol=_SAME_MM, equal_nan=True)
        for name in ("end", "start", "centre", "turns", "seconds", "shape", "tool", "offset_h", "spindle_rpm")
    )


# ---------------------------------------------------------------------------------------- the table


@dataclass(frozen=True)
class Outcome:
    """What became of one mutation: its kind, the harm it does, whether released, and the checks that withheld it."""

    kind: str
    harm: tuple[str, ...]
    released: bool
    caught_by: tuple[str, ...]
    same: bool
    text: str

    @property
    def escaped(self) -> bool:
        """Harmful and released."""
        return self.released and bool(self.harm)


Prove = Callable[[Path], tuple[Proof, ReadProgram]]


def run(job: Job, text: str, count: int, seed: int, folder: Path, prove: Prove) -> list[Outcome]:
    """Ask for a verdict on seeded mutations of a program; the harm of those that cannot be read is not asked for."""
    path = folder / "mutation.ngc"
    lengths = {cutter.number: cutter.gauge_length_mm for cutter in job.cutters}

    def read(content: str) -> ReadProgram:
        path.write_text(content, encoding="utf-8")
        return read_program(path, length_offsets=lengths, plain_lines=False)

    sound, outcomes = read(text), []
    for kind, spoilt in mutations(text, count, seed):
        full = read(spoilt)
        proof, _ = prove(path)
        caught = tuple(sorted({one.check for one in proof.findings if not one.ok and not one.warning}))
        unread = any(not one.ok and not one.warning for one in full.findings)
        same = not unread and same_motion(sound, full)
        did = () if same or unread else tuple(harm(job, full))
        outcomes.append(Outcome(kind, did, proof.released, caught, same, spoilt))
    return outcomes


def table(outcomes: list[Outcome]) -> str:
    """Return what was caught by which check, by kind of mutation."""
    rows = [f"{'mutation':<15}{'all':>6}{'same':>6}{'harm':>6}{'held':>6}{'escaped':>9}  caught by"]
    for kind in dict.fromkeys(one.kind for one in outcomes):
        mine = [one for one in outcomes if one.kind == kind]
        checks = Counter(check for one in mine for check in one.caught_by)
        told = ", ".join(f"{check} {number}" for check, number in checks.most_common())
        sums = [len(mine), *(sum(map(bool, column)) for column in zip(
            *((one.same, one.harm, not one.released) for one in mine), strict=True))]  # fmt: skip
        rows.append(
            f"{kind:<15}" + "".join(f"{n:>6}" for n in sums) + f"{sum(o.escaped for o in mine):>9}  {told}"
        )
    return "\n".join(rows)
