"""Small made-up results of a job, built by hand from the records, to write report pages from."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np

from anticlast import outline
from anticlast.cutter import Cutter
from anticlast.records import (
    Axis,
    AxisPath,
    Control,
    CutterPath,
    Finding,
    Job,
    Machine,
    Made,
    Motions,
    MotionTimes,
    Operation,
    OperationResult,
    Part,
    PartMotion,
    Proof,
    Purpose,
    ReadProgram,
    ScallopMap,
    Spindle,
    Stock,
    Stretch,
)
from anticlast.saddle import Saddle

BALL = Cutter(1, "ball", 3.0, 3.0, 2, 18.0, 3.0, 30.0, ((8.0, 20.0), (16.0, 25.0)))
FIRST_LINE = 40  # line of the first motion of the program
STEPOVER_MM = 0.5
SIZE_MM = (60.0, 40.0)


def machine() -> Machine:
    linear = [Axis(letter, "linear", (-75.0, 75.0), 3000.0, 2000.0, 400.0, 8000.0) for letter in "XYZ"]
    turn = [
        Axis(
            "A",
            "rotary",
            (-120.0, 30.0),
            3600.0,
            3600.0,
            1500.0,
            3e4,
            "work",
            (1.0, 0.0, 0.0),
            (0.0, 0.0, 0.0),
            -1,
        ),
        Axis("C", "rotary", None, 7200.0, 7200.0, 3000.0, 6e4, "work", (0.0, 0.0, 1.0), (0.0, 0.0, 0.0), -1),
    ]
    control = Control("inverse", "G64", 4, 4, 3, 500.0, False, "M2")
    title = "Small trunnion mill: A tilts, C turns the table"
    return Machine(
        "trunnion-ac", title, "mm", 0.0, (*linear, *turn), Spindle(2000, 24000, 0.35), control, Path("t.toml")
    )


def job(name: str = "press mould", units: str = "mm") -> Job:
    finish = Operation(
        1,
        "finish",
        BALL,
        "raster",
        0.0,
        0.012,
        None,
        0.0,
        18000.0,
        1500.0,
        math.radians(15),
        0.0,
        None,
        0.002,
        "both",
    )
    return Job(
        name=name,
        slug="press-mould",
        units=units,
        source=Path("job.toml"),
        part=Part(0.008, 0.008, 0.0, outline.rectangle(SIZE_MM)),
        stock=Stock("tooling board", 8.0, -20.0, outline.rectangle((SIZE_MM[0] + 6, SIZE_MM[1] + 6)), 0.3),
        machine=machine(),
        part_origin_mm=(0.0, 0.0, 55.0),
        clearance_mm=5.0,
        cutters=(BALL,),
        operations=(finish,),
    )


def stretch(job: Job, across: float, turned: bool, number: int, points: int) -> Stretch:
    """One pass along X at y = across, with entry, overrun, cutting, overrun and exit."""
    saddle = Saddle.of(job.part)
    half = SIZE_MM[0] / 2
    x = np.linspace(-half - 1, half + 1, points)
    x = x[::-1] if turned else x
    xy = np.column_stack((x, np.full(points, across)))
    normal = saddle.normal(xy)
    touch = saddle.point(xy)
    lead = math.radians(15) * (-1 if turned else 1)
    feed = np.gradient(touch, axis=0)
    feed /= np.linalg.norm(feed, axis=1, keepdims=True)
    axis = math.cos(lead) * normal + math.sin(abs(lead)) * feed
    axis /= np.linalg.norm(axis, axis=1, keepdims=True)
    tip = touch + 3.0 * normal - 3.0 * axis
    purpose = np.where(np.abs(x) <= half, Purpose.CUT, Purpose.OVERRUN).astype(np.uint8)
    lift = np.array([[0.0, 0.0, 2.0]])
    tip = np.concatenate((tip[:1] + lift, tip, tip[-1:] + lift))
    rows = [0, *range(points), points - 1]
    purpose = np.concatenate(([Purpose.ENTRY], purpose, [Purpose.EXIT])).astype(np.uint8)
    purpose[1] = Purpose.ENTRY
    return Stretch(
        tip,
        axis[rows],
        touch[rows],
        normal[rows],
        purpose,
        np.full(points + 2, number),
        np.full(points + 2, 1500.0),
    )


def axis_words(tip: np.ndarray, axis: np.ndarray, origin: np.ndarray) -> np.ndarray:
    """Words X Y Z A C for a table that turns the cutter axis upright: A = acos k, C = atan2(i, j)."""
    a = np.arccos(np.clip(axis[:, 2], -1, 1))
    c = np.unwrap(np.arctan2(axis[:, 0], axis[:, 1]))
    p = tip + origin
    x = np.cos(c) * p[:, 0] - np.sin(c) * p[:, 1]
    y = np.sin(c) * p[:, 0] + np.cos(c) * p[:, 1]
    turned = np.column_stack((x, np.cos(a) * y - np.sin(a) * p[:, 2], np.sin(a) * y + np.cos(a) * p[:, 2]))
    return np.round(np.column_stack((turned - origin, np.degrees(a), np.degrees(c))), 4)


def made(
    points: int = 60,
    passes: int = 81,
    name: str = "press mould",
    units: str = "mm",
    folder: Path | None = None,
) -> Made:
    """A released job: ``passes`` passes of ``points`` points, proven on a grid, timed."""
    the_job = job(name, units)
    across = (np.arange(passes) - (passes - 1) / 2) * min(STEPOVER_MM, SIZE_MM[1] / max(passes - 1, 1))
    stretches = tuple(stretch(the_job, y, bool(i % 2), i, points) for i, y in enumerate(across))
    operation = the_job.operations[0]
    predicted = 0.0115
    cut = sum(
        float(np.linalg.norm(np.diff(s.contact_mm, axis=0), axis=1)[s.purpose[1:] == 0].sum())
        for s in stretches
    )
    plan = CutterPath(operation, stretches, passes, cut, (0.49, 0.51), predicted, 0.0004)

    tip = np.concatenate([s.tip_mm for s in stretches])
    axis = np.concatenate([s.axis for s in stretches])
    purpose = np.concatenate([s.purpose for s in stretches])
    number = np.concatenate([s.pass_index for s in stretches])
    rapid = np.zeros(len(tip), bool)
    rapid[np.cumsum([0] + [len(s.purpose) for s in stretches[:-1]])] = True
    words = axis_words(tip, axis, np.array(the_job.part_origin_mm))
    start = np.array([0.0, 0.0, 60.0, 0.0, 0.0])
    steps = np.linalg.norm(np.diff(tip, axis=0, prepend=tip[:1] + 20), axis=1)
    asked = np.maximum(steps, 1e-3) / np.where(rapid, 3000.0, 1500.0)
    axis_path = AxisPath(
        operation, the_job.machine.letters, words, rapid, asked, purpose, np.where(rapid, -1, number), start
    )
    n = len(tip)
    six = np.zeros((n, 6))
    six[:, [0, 1, 2, 3, 5]] = words
    before = np.zeros((n, 6))
    before[1:] = six[:-1]
    before[0, [0, 1, 2, 3, 5]] = start
    shape = np.where(rapid, 0, 1).astype(np.uint8)
    zero, one = np.zeros(n), np.ones(n, np.int64)
    line = FIRST_LINE + np.arange(n)
    motions = Motions(
        line, shape, six, before, np.zeros((n, 3)), np.full(n, 17, np.uint8), zero,
        np.where(rapid, np.nan, asked * 60),
        np.where(rapid, 0.0, 1 / asked), ~rapid, one, one, one, np.full(n, 18000.0), np.zeros(n, np.uint8),
    )  # fmt: skip
    # The machine slows where the passes end: half the asked feed there, 90 % elsewhere.
    slow = np.where(np.abs(tip[:, 0]) > 25, 2.0, 1.0 / 0.9)
    times = MotionTimes(asked * 60 * slow, asked * 60, np.where(slow > 1.5, 2, 1).astype(np.uint8))
    motion = PartMotion(
        np.concatenate(([[0.0, 0.0, 60.0]], tip)), np.concatenate(([[0.0, 0.0, 1.0]], axis)),
        np.concatenate(([0], line)), np.concatenate(([True], rapid)), np.ones(n + 1, np.int64),
        np.arange(-1, n), np.ones(n + 1),
    )  # fmt: skip
    program = ReadProgram("press-mould.ngc", n, motions, (), units, ())
    findings = checks(line)
    proof = Proof(
        0.1, 0.0113, 0.0115, (4.0, 6.25), 0.0003, 0.0005, 0.0, 4.2, 6.1,
        {"X": (-44.0, 44.0), "Y": (-39.0, 41.0), "Z": (12.0, 140.0), "A": (0.0, 33.0), "C": (-180.0, 190.0)},
        findings, scallop_map(the_job, across),
    )  # fmt: skip
    total = (float(times.seconds.sum()), float(times.feed_only_s.sum()))
    result = OperationResult(
        1, "finish", "raster", 1, passes, cut, 450.0, cut / 1.04, (0.49, 0.51), predicted, total[0], total[1]
    )
    return Made(
        job=the_job, released=True, cutter_paths=(plan,), axis_paths=(axis_path,), program=program,
        program_text=(folder or Path(".")) / "press-mould.ngc", program_sha256="5f" * 32,
        part_motion=motion, proof=proof, times=times, operations=(result,), findings=findings,
        cautions=("Dust of tooling board: take it off at the cutter and wear a mask.",),
    )  # fmt: skip


def scallop_map(the_job: Job, across: np.ndarray) -> ScallopMap:
    """Cusps between the passes, one gouge of 4 um near (-20, -12), nan outside the outline."""
    x = np.arange(-SIZE_MM[0] / 2 - 0.5, SIZE_MM[0] / 2 + 0.51, 0.1)
    y = np.arange(-SIZE_MM[1] / 2 - 0.5, SIZE_MM[1] / 2 + 0.51, 0.1)
    gap = np.abs(y[:, None] - across[None, :]).min(axis=1)
    height = (gap / 0.25) ** 2 * 0.0113
    field = np.repeat(height[:, None], len(x), axis=1) * (1 - 0.3 * np.abs(x) / 30)
    grid_x, grid_y = np.meshgrid(x, y)
    field[np.hypot(grid_x + 20, grid_y + 12) < 1.5] = -0.004
    inside = the_job.part.outline.contains(np.column_stack((grid_x.ravel(), grid_y.ravel()))).reshape(
        field.shape
    )
    field[~inside] = np.nan
    return ScallopMap(x, y, field.astype(np.float32))


def checks(line: np.ndarray) -> tuple[Finding, ...]:
    at = int(line[len(line) // 3])
    return (
        Finding(
            "scallop",
            True,
            0.0113,
            0.012,
            "mm",
            at,
            "The highest scallop left is 11.3 µm; the job allows 12 µm.",
        ),
        Finding(
            "gouge", True, 0.0003, 0.002, "mm", at + 20, "Nothing is cut more than 0.3 µm below the surface."
        ),
        Finding("holder", True, 4.2, 0.5, "mm", at + 90, "The holder stays 4.2 mm clear of the stock."),
        Finding("travel X", True, 44.0, 75.0, "mm", at + 7, "X reaches 44 mm of 75 mm."),
        Finding(
            "cutting speed",
            False,
            62.0,
            90.0,
            "m/min",
            0,
            "The ball cuts at 62 m/min, slower than usual.",
            warning=True,
        ),
    )


def withheld(base: Made) -> Made:
    """The same job with a failed check: no file stands under the program's name."""
    bad = Finding(
        "scallop",
        False,
        0.0148,
        0.012,
        "mm",
        int(base.program.motions.line[300]),
        "A scallop of 14.8 µm is left; 12 allowed.",
    )
    findings = (base.findings[1], bad, *base.findings[2:])
    proof = replace(base.proof, findings=findings, scallop_max_mm=0.0148)
    return replace(
        base, released=False, program_text=None, program_sha256="", findings=findings, proof=proof,
        advice=("Ask for a scallop of 10 µm, or choose a ball of 8 mm.",),
    )  # fmt: skip


def not_planned(base: Made) -> Made:
    """A job for which no path could be planned: nothing but findings and advice."""
    bad = Finding(
        "cutter 1 fits the surface", False, 40.0, 31.25, "mm", 0, "T1: ball radius 40 mm against 31.25 mm."
    )
    return Made(
        job=base.job, released=False, cutter_paths=(), axis_paths=(), program=None, program_text=None,
        program_sha256="", part_motion=None, proof=None, times=None, operations=(), findings=(bad,),
        advice=("Choose a ball below 62.5 mm diameter.",),
    )  # fmt: skip
