"""The order of the stages, and nothing else: plan, post, read back, prove, estimate, report.

Only this module knows which stage follows which. The half above the posted text and the half below it share records and
geometry; what passes between them is the file.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Callable, Sequence
from dataclasses import asdict, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from anticlast import files
from anticlast.errors import BadInput, CannotPlan, Fault
from anticlast.records import (
    AxisPath,
    CutterPath,
    Finding,
    Job,
    Made,
    MotionTimes,
    Operation,
    OperationResult,
    PartMotion,
    Purpose,
    ReadProgram,
)

if TYPE_CHECKING:
    from anticlast.machine.calibrate import Calibration
    from anticlast.machine.timing import ProgramTime
    from anticlast.passes.scallop import ScallopAnswer
    from anticlast.stock.preview import StockPreview
    from anticlast.survey import Survey

SCHEMA = 1
STL_CHORD_MM = 0.01  # chord error of surface.stl: far below what a picture or a printed copy shows

Progress = Callable[[str], None]


def _quiet(_: str) -> None:
    """Take a progress message and drop it."""


def load_job(path: str | Path) -> Job:
    """Load and check a job file.

    Raises
    ------
    BadInput
        With every fault of the file at once.
    """
    from anticlast.job import load_job as load

    return load(Path(path))


def survey(job: Job) -> Survey:
    """Say what the job's surface asks of cutter and machine, and where on the table the part should sit."""
    from anticlast.survey import placement, steady
    from anticlast.survey import survey as look

    return replace(look(job), placement=placement(job), steady=steady(job))


def scallop(
    job: Job,
    operation: Operation,
    *,
    stepover: float | None = None,
    scallop: float | None = None,
    direction_deg: float | None = None,
) -> ScallopAnswer:
    """Answer stepover against scallop for an operation's cutter on the job's surface.

    ``stepover`` and ``scallop`` are in the job's units; without either, the operation's own value decides.
    """
    from anticlast.passes.scallop import scallop_answer
    from anticlast.saddle import Saddle

    to_mm = 25.4 if job.units == "inch" else 1.0
    stepover_mm = None if stepover is None else stepover * to_mm
    scallop_mm = None if scallop is None else scallop * to_mm
    if stepover_mm is None and scallop_mm is None:
        stepover_mm, scallop_mm = operation.stepover_mm, operation.scallop_mm
    direction_rad = operation.direction_rad if direction_deg is None else math.radians(direction_deg)
    return scallop_answer(
        Saddle.of(job.part),
        job.part.outline,
        operation.cutter,
        direction_rad,
        stepover_mm=stepover_mm,
        scallop_mm=scallop_mm,
        allowance_mm=operation.allowance_mm,
    )


def plan(job: Job, progress: Progress = _quiet) -> tuple[tuple[CutterPath, ...], tuple[AxisPath, ...]]:
    """Plan every operation: passes, then axis motion.

    Returns
    -------
    cutter_paths, axis_paths
        One of each an operation, in cutting order.

    Raises
    ------
    CannotPlan
        When no safe path exists: the cutter does not fit the surface, or a pattern cannot be cut with it.
    """
    from anticlast.machine.axes import axis_path, choose_rotary
    from anticlast.machine.kinematics import Kinematics
    from anticlast.passes.plan import plan_operation

    cutter_paths: list[CutterPath] = []
    for operation in job.operations:
        progress(f"operation {operation.index}: {operation.does}, {operation.pattern}: passes")
        kinematics = Kinematics(job.machine, job.part_origin_mm, operation.cutter.gauge_length_mm)
        cutter_paths.append(plan_operation(job, operation, kinematics.nearest_axis))
    # Which way the rotary axes take is decided over the whole program: what is short now may run into a limit later.
    progress("ways of the rotary axes")
    chosen = choose_rotary(job, cutter_paths)
    axis_paths: list[AxisPath] = []
    stand = None
    for path, words in zip(cutter_paths, chosen, strict=True):
        operation = path.operation
        progress(f"operation {operation.index}: {operation.does}, {operation.pattern}: axis motion")
        axes = axis_path(job, path, stand, last=operation is job.operations[-1], chosen=words)
        stand = axes.words[-1]
        axis_paths.append(axes)
    return tuple(cutter_paths), tuple(axis_paths)


def post(job: Job, axis_paths: tuple[AxisPath, ...], path: Path) -> tuple[Path, tuple[int, ...]]:
    """Post the program beside ``path`` under a temporary name; the caller releases or discards it.

    Returns
    -------
    temporary : Path
        The file, complete and flushed to disk.
    starts : tuple of int
        Line on which each operation starts.
    """
    from anticlast.posting.choose import writer_for

    write = writer_for(job.machine)
    with files.beside(path, keep=True) as (stream, temporary):
        starts = write(job, axis_paths, stream)
    return temporary, starts


def read_back(job: Job, path: Path) -> ReadProgram:
    """Read a program text as the control would."""
    from anticlast.readback.reader import read_program

    return read_program(
        path, length_offsets={cutter.number: cutter.gauge_length_mm for cutter in job.cutters}
    )


def _result(path: CutterPath, axes: AxisPath, floor_mm: float, times: tuple[float, float]) -> OperationResult:
    operation = path.operation
    links = 0.0
    for stretch in path.stretches:
        moves = stretch.purpose[1:] != Purpose.CUT
        reference = stretch.tip_mm + operation.cutter.reference_height_mm * stretch.axis
        steps = np.linalg.norm(np.diff(reference, axis=0), axis=1)
        links += float(steps[moves].sum())
    # Descents and lifts at feed are planned by the machine stage; on them the tip travels along the cutter axis.
    hops = (~axes.rapid) & (axes.pass_index < 0)
    linear = np.array([letter in "XYZ" for letter in axes.letters])
    steps = np.diff(axes.words, axis=0, prepend=axes.start[None, :])[:, linear]
    links += float(np.linalg.norm(steps[hops], axis=1).sum())
    return OperationResult(
        index=operation.index,
        does=operation.does,
        pattern=operation.pattern,
        cutter=operation.cutter.number,
        passes=path.passes,
        cut_length_mm=path.cut_length_mm,
        link_length_mm=links,
        length_floor_mm=floor_mm,
        stepover_mm=path.stepover_mm,
        scallop_predicted_mm=path.scallop_predicted_mm,
        time_s=times[0],
        feed_only_time_s=times[1],
    )


def floor_mm(job: Job, path: CutterPath) -> float:
    """Return the length floor of an operation, mm; 0 where none is defined (no finishing ball)."""
    from anticlast.passes.scallop import length_floor_mm
    from anticlast.saddle import Saddle

    operation = path.operation
    height = operation.scallop_mm if operation.scallop_mm is not None else path.scallop_predicted_mm
    if operation.cutter.shape != "ball" or operation.does != "finish":
        return 0.0
    return float(length_floor_mm(Saddle.of(job.part), job.part.outline, operation.cutter.radius_mm, height))


def _share_times(
    times: MotionTimes, program: ReadProgram, starts: tuple[int, ...]
) -> list[tuple[float, float]]:
    """Split the program's time over its operations, given the line on which each starts."""
    lines = np.array([*starts, np.iinfo(np.int64).max])
    bounds = np.searchsorted(program.motions.line, lines)
    waits = [
        sum(wait.seconds for wait in times.waits if first <= wait.line < last)
        for first, last in zip(lines[:-1], lines[1:], strict=True)
    ]
    return [
        (float(times.seconds[low:high].sum()) + waiting, float(times.feed_only_s[low:high].sum()))
        for low, high, waiting in zip(bounds[:-1], bounds[1:], waits, strict=True)
    ]


def fit_findings(job: Job) -> tuple[Finding, ...]:
    """Check, before anything is planned, that each ball fits the surface it is to finish."""
    from anticlast.saddle import Saddle
    from anticlast.survey import largest_ball_radius_mm

    largest = largest_ball_radius_mm(Saddle.of(job.part), job.part.outline)
    findings = []
    for operation in job.operations:
        cutter = operation.cutter
        if cutter.shape != "ball" or operation.does != "finish":
            continue
        radius = cutter.radius_mm + operation.allowance_mm
        ok = radius < largest
        findings.append(
            Finding(
                check=f"cutter {cutter.number} fits the surface",
                ok=ok,
                worst=radius,
                limit=largest,
                unit="mm",
                line=0,
                message=f"T{cutter.number}: ball radius {cutter.radius_mm:.4g} mm against {largest:.4g} mm, the tightest concave"
                " radius of the surface"
                + (
                    ""
                    if ok
                    else f". It would cut into the finished form; choose a ball below {2 * largest:.4g} mm diameter"
                ),
            )
        )
    return tuple(findings)


def make(
    job: Job | str | Path,
    out: str | Path = "out",
    *,
    grid_mm: float | None = None,
    progress: Progress = _quiet,
) -> Made:
    """Run the main job: plan, post, read back, prove, estimate, report.

    Parameters
    ----------
    job : Job or path
    out : path
        Folder for ``<slug>.ngc``, ``summary.json``, ``report.html`` and ``surface.stl``; made if missing.
    grid_mm : float, optional
        Spacing of the proof's grid; chosen from the job if not given.
    progress : callable
        Told in a few words what is being done.

    Returns
    -------
    Made
        Also when the program is withheld: then ``released`` is False, the findings say why, and no file stands under
        the program's name.

    Raises
    ------
    BadInput
        When the job cannot be used; nothing is written.
    CannotWrite
        When an output cannot be written; the old files stand.
    """
    if not isinstance(job, Job):
        job = load_job(job)
    folder = files.folder(Path(out))
    program_path = folder / f"{job.slug}.ngc"
    temporary: Path | None = None
    try:
        made, temporary = _run(job, program_path, grid_mm, progress)
        progress("report")
        _write_surface(job, folder)
        _write_page(made, folder)
        files.write_text(folder / "summary.json", json.dumps(summary(made), indent=2) + "\n")
        if made.released and temporary is not None:
            files.rename(temporary, program_path)
            temporary = None
        else:
            files.discard(program_path)
    finally:
        if temporary is not None:
            files.discard(temporary)
    return made


def _withheld(job: Job, findings: tuple[Finding, ...], advice: tuple[str, ...] = ()) -> Made:
    return Made(
        job=job, released=False, cutter_paths=(), axis_paths=(), program=None, program_text=None, program_sha256="",
        part_motion=None, proof=None, times=None, operations=(), findings=findings, cautions=cautions(job),
        advice=advice,
    )  # fmt: skip


def _run(job: Job, program_path: Path, grid_mm: float | None, progress: Progress) -> tuple[Made, Path | None]:
    from anticlast.machine.motion import estimate
    from anticlast.proof.verdict import prove

    fits = fit_findings(job)
    if not all(finding.ok for finding in fits):
        return _withheld(job, fits, tuple(finding.message for finding in fits if not finding.ok)), None
    try:
        cutter_paths, axis_paths = plan(job, progress)
    except CannotPlan as refused:
        finding = Finding(refused.check, False, refused.worst, refused.limit, refused.unit, 0, str(refused))
        return _withheld(job, (*fits, finding), (str(refused),)), None
    progress("posting")
    temporary, starts = post(job, axis_paths, program_path)
    try:
        progress("reading back")
        program = read_back(job, temporary)
        progress("proving")
        proof, part_motion = prove(job, program, grid_mm)
        loads = _load_findings(job, program, part_motion, progress)
        times = estimate(program.motions, job.machine, program.events)
    except BaseException:
        files.discard(temporary)
        raise
    shares = _share_times(times, program, starts)
    floors = [floor_mm(job, path) for path in cutter_paths]
    results = tuple(
        _result(path, axes, floor, share)
        for path, axes, floor, share in zip(cutter_paths, axis_paths, floors, shares, strict=True)
    )
    findings = (*fits, *proof.findings, *loads)
    released = all(finding.ok or finding.warning for finding in findings)
    made = Made(
        job=job, released=released, cutter_paths=cutter_paths, axis_paths=axis_paths, program=program,
        program_text=program_path if released else None, program_sha256=_sha256(temporary) if released else "",
        part_motion=part_motion, proof=proof, times=times, operations=results, findings=findings, cautions=cautions(job),
        advice=tuple(finding.message for finding in findings if not finding.ok),
    )  # fmt: skip
    return made, temporary


def _sha256(path: Path) -> str:
    digest = hashlib.sha256()
    with path.open("rb") as stream:
        for piece in iter(lambda: stream.read(1 << 20), b""):
            digest.update(piece)
    return digest.hexdigest()


def prove(
    program: str | Path, job: Job, *, grid_mm: float | None = None, progress: Progress = _quiet
) -> Made:
    """Prove any program text for a job, whoever wrote it. Writes nothing.

    Raises
    ------
    BadInput
        When the program file cannot be used at all.
    """
    from anticlast.machine.motion import estimate
    from anticlast.proof.verdict import prove as judge

    path = Path(program)
    progress("reading")
    read = read_back(job, path)
    progress("proving")
    proof, part_motion = judge(job, read, grid_mm)
    findings = (*proof.findings, *_load_findings(job, read, part_motion, progress))
    times = estimate(read.motions, job.machine, read.events)
    released = all(finding.ok or finding.warning for finding in findings)
    return Made(
        job=job, released=released, cutter_paths=(), axis_paths=(), program=read, program_text=path,
        program_sha256=_sha256(path), part_motion=part_motion, proof=proof, times=times, operations=(),
        findings=findings, cautions=cautions(job),
        advice=tuple(finding.message for finding in findings if not finding.ok),
    )  # fmt: skip


def stock(
    job: Job, before: int | None = None, *, spacing_mm: float | None = None, progress: Progress = _quiet
) -> StockPreview:
    """Preview the stock before an operation and what every pass will meet. Writes nothing that stays.

    Parameters
    ----------
    job : Job
    before : int, optional
        Operation, counted from 1, whose stock is asked for; the first if not given.
    spacing_mm : float, optional
        Spacing of the stock's columns; chosen from the job if not given.

    Raises
    ------
    BadInput
        There is no such operation, or the blank's mesh or measured heights cannot be used.
    CannotPlan
        No safe path exists.
    """
    import tempfile

    from anticlast.readback.forward import part_motion
    from anticlast.stock.preview import stock_preview

    if before is not None and not 1 <= before <= len(job.operations):
        message = f"found {before}; needs the number of an operation, 1 to {len(job.operations)}"
        raise BadInput(Fault("command line", 0, "--before", message))
    for finding in fit_findings(job):
        if not finding.ok:
            raise CannotPlan(finding.check, finding.message, finding.worst, finding.limit, finding.unit)
    _, axis_paths = plan(job, progress)
    with tempfile.TemporaryDirectory() as folder:
        progress("posting and reading back")
        temporary, _ = post(job, axis_paths, Path(folder) / f"{job.slug}.ngc")
        program = read_back(job, temporary)
        lengths = {cutter.number: cutter.gauge_length_mm for cutter in job.cutters}
        motion = part_motion(program, job.machine, job.part_origin_mm, lengths)
        return stock_preview(job, program, motion, before, spacing_mm=spacing_mm, progress=progress)


def _load_findings(
    job: Job, program: ReadProgram, motion: PartMotion | None, progress: Progress
) -> tuple[Finding, ...]:
    """Hold a program against the limits that the job sets on its cutters; nothing is worked out if it sets none."""
    if motion is None or all(
        cutter.max_force_n is None and cutter.max_deflection_mm is None for cutter in job.cutters
    ):
        return ()
    from anticlast.stock.preview import stock_preview

    progress("loads")
    found = stock_preview(job, program, motion).findings
    return tuple(finding for finding in found if finding.check.startswith(("force", "bending")))


def time(program: str | Path, job: Job) -> tuple[ProgramTime, ReadProgram, MotionTimes]:
    """Estimate the time of any program on a job's machine: its time, and what it was worked out from. Writes nothing.

    Raises
    ------
    BadInput
        When the program cannot be read to its end.
    """
    from anticlast.machine.motion import estimate
    from anticlast.machine.timing import marks_of, program_time
    from anticlast.readback.reader import read_program

    path = Path(program)
    # Times do not depend on where the part stands, so no length offsets are needed, nor all cutters be the job's.
    read = read_program(path)
    broken = [
        Fault(str(path), item.line, "", item.message) for item in read.findings if item.check == "language"
    ]
    if broken:
        raise BadInput(broken)
    times = estimate(read.motions, job.machine, read.events)
    answer = program_time(
        path.name, read.blocks, read.motions, times, job.machine, marks_of(path.read_bytes())
    )
    return answer, read, times


def in_part(program: ReadProgram, job: Job) -> PartMotion:
    """Return a program's motion in part coordinates, by forward kinematics of what was read."""
    from anticlast.readback.forward import part_motion

    lengths = {cutter.number: cutter.gauge_length_mm for cutter in job.cutters}
    return part_motion(program, job.machine, job.part_origin_mm, lengths)


def calibrate(
    readings: Sequence[tuple[str | Path, float]], job: Job, *, error_s: float, progress: Progress = _quiet
) -> Calibration:
    """Fit the job's machine to programs and the seconds each took. Writes nothing, the machine file least of all."""
    from anticlast.machine.calibrate import Reading
    from anticlast.machine.calibrate import calibrate as fit

    taken = []
    for program, seconds in readings:
        progress(f"reading {program}")
        _, read, _ = time(program, job)
        taken.append(Reading(Path(program).name, read.motions, read.events, seconds))
    progress("fitting")
    return fit(taken, job.machine, error_s)


def cautions(job: Job) -> tuple[str, ...]:
    """Cautions that go with the blank's material, from the materials table."""
    from anticlast.materials import material

    return tuple(material(job.stock.material).cautions)


def _write_surface(job: Job, folder: Path) -> None:
    from anticlast.solid import write_stl

    write_stl(job.part, job.stock.bottom_mm, STL_CHORD_MM, folder / "surface.stl")


def _write_page(made: Made, folder: Path) -> None:
    from anticlast.report.page import write_page

    write_page(made, folder / "report.html")


def _number(value: float) -> float | None:
    """JSON has no infinity and no nan; what was not measured is null."""
    return float(value) if np.isfinite(value) else None


def _finding(finding: Finding) -> dict[str, Any]:
    entry = asdict(finding)
    entry["worst"] = _number(finding.worst)
    entry["limit"] = _number(finding.limit)
    return entry


def summary(made: Made) -> dict[str, Any]:
    """Return the content of ``summary.json``: lengths mm, times s, whatever the job's units."""
    proof, times, program = made.proof, made.times, made.program
    proof_entry: dict[str, Any] = {"findings": [_finding(finding) for finding in made.findings], "travel": {}}
    for key in (
        "grid_mm", "scallop_max_mm", "scallop_bound_mm", "gouge_max_mm", "gouge_bound_mm", "uncut_area_mm2",
        "holder_clearance_mm", "rapid_clearance_mm",
    ):  # fmt: skip
        proof_entry[key] = _number(getattr(proof, key)) if proof else None
    if proof:
        proof_entry["travel"] = {
            axis: [float(low), float(high)] for axis, (low, high) in proof.travel.items()
        }
    rapid = program.motions.shape == 0 if program else np.zeros(0, bool)
    total, waiting = (times.total_s, times.waiting_s) if times else (0.0, 0.0)
    rapid_s = float(times.seconds[rapid].sum()) if times else 0.0
    return {
        "schema": SCHEMA,
        "job": made.job.name,
        "released": made.released,
        "program": {
            "file": made.program_text.name if made.program_text else None,
            "sha256": made.program_sha256 or None,
            "blocks": program.blocks if program else 0,
        },
        "operations": [
            {**asdict(entry), "stepover_mm": [float(value) for value in entry.stepover_mm]}
            for entry in made.operations
        ],
        "proof": proof_entry,
        "time": {
            "total_s": total,
            "cutting_s": total - waiting - rapid_s,
            "rapid_s": rapid_s,
            "waiting_s": waiting,
            "feed_only_s": float(times.feed_only_s.sum()) if times else 0.0,
        },
    }
