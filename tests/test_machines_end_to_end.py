"""The same jobs on every machine that ships, and on chains at odd angles, from the job file to the verdict."""

from __future__ import annotations

import math
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from anticlast import pipeline
from anticlast.machine.axes import CROSS_SHARE, budget_of, choose_rotary
from anticlast.machine.definition import load_machine
from anticlast.machine.kinematics import Kinematics
from anticlast.passes.plan import plan_operation
from anticlast.proof.verdict import prove
from anticlast.records import Purpose, Shape
from conftest import ROOT, job_text

MICROMETRE = 1e-3
MACHINES = ["mill-3", "rotary-a", "rotary-b", "trunnion-ac", "trunnion-bc", "head-b-table-c"]
SMALL: dict[str, object] = {
    "outline": 'shape = "circle"\ndiameter = 10.0', "limit": "scallop = 0.03", "tolerance": 0.01, "a": 0.012, "top": 3.0,
    "bottom": -8.0, "margin": 2.0, "stickout": 30.0,
}  # fmt: skip
HOLED = 'shape = "polygon"\npoints = [[-6, -5], [6, -5], [6, 3], [3, 5], [-6, 5]]\nholes = [[[-1, -1], [1, -1], [0, 1]]]'
JOBS: dict[str, dict[str, object]] = {
    "normal": {},
    "lead one way": {
        "outline": 'shape = "rectangle"\nsize = [10.0, 8.0]', "pattern": "graded", "direction": 0.0, "tilt": "lead = 15.0",
        "way": "one-way",
    },
    "lead and lean": {"tilt": "lead = 8.0\nlean = -12.0", "direction": 30.0},
    "even": {"pattern": "even", "tilt": "lead = 12.0", "extra_part": "b = 0.006"},
    "holed": {"outline": HOLED, "tilt": "lean = 15.0", "direction": 0.0},
    "slot steep": {"a": 0.03, "outline": 'shape = "slot"\nsize = [12.0, 6.0]', "tilt": "lead = 10.0", "direction": 60.0},
    "fixed": {"tilt": 'axis = "fixed"\nfixed = [0.2, 0.1, 1.0]', "outline": 'shape = "slot"\nsize = [12.0, 6.0]'},
}  # fmt: skip


def made_of(folder: Path, *, inch: bool = False, **changes: object):
    path = folder / "job.toml"
    text = job_text(**{**SMALL, **changes})
    path.write_text(in_inch(text) if inch else text, encoding="utf-8")
    return pipeline.make(path, folder / "out", grid_mm=0.2)


@pytest.mark.parametrize("machine", MACHINES)
@pytest.mark.parametrize("name", JOBS)
def test_every_machine_passes_every_job(name: str, machine: str, tmp_path: Path) -> None:
    made = made_of(tmp_path, machine=machine, **JOBS[name])
    assert made.released, [finding.message for finding in made.findings if not finding.ok]
    assert (tmp_path / "out" / "test-tile.ngc").exists()


# ------------------------------------------------------------------------------------------ chains at odd angles

HALF = math.sqrt(0.5)
WIDE = (
    ("limits = [-75.0, 75.0]", "limits = [-200.0, 200.0]"),
    ("limits = [0.0, 260.0]", "limits = [-100.0, 500.0]"),
)


def machine_file(folder: Path, rotary: list[dict[str, object]], pivot: float = 0.0, changes=()) -> str:
    """Write a machine file: X Y Z and the control of the A/C table with other rotary axes; return its path."""
    text = (ROOT / "post" / "trunnion-ac.toml").read_text(encoding="utf-8")
    head, tail = text[: text.index('[[axis]]\nletter = "A"')], text[text.index("[spindle]\nmin") :]
    head = head.replace("pivot_length = 0.0", f"pivot_length = {pivot}")
    tables = []
    for axis in rotary:
        keys = {
            "kind": "rotary",
            "rapid": 3600.0,
            "feed": 3600.0,
            "acceleration": 1500.0,
            "jerk": 30000.0,
            **axis,
        }
        lines = [
            f'{key} = "{value}"' if isinstance(value, str) else f"{key} = {value}"
            for key, value in keys.items()
        ]
        tables.append("[[axis]]\n" + "\n".join(lines) + "\n\n")
    text = head + "".join(tables) + tail
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    path = folder / "odd-machine.toml"
    path.write_text(text, encoding="utf-8")
    return path.as_posix()


def turning(letter, direction, carries, through=(0.0, 0.0, 0.0), limits=None) -> dict[str, object]:
    keys = {
        "letter": letter, "carries": carries, "direction": [float(x) for x in direction], "through": list(through),
        "turns": -1 if carries == "work" else 1,
    }  # fmt: skip
    return {**keys, "limits": list(limits)} if limits else keys


X, Y, Z = (1, 0, 0), (0, 1, 0), (0, 0, 1)
ODD: dict[str, tuple[list[dict[str, object]], float]] = {
    "nutating table": (
        [turning("B", (0, -HALF, HALF), "work", (0.0, 5.0, -30.0)), turning("C", Z, "work", (1.0, 2.0, 3.0))], 0.0,
    ),
    "nutating head": ([turning("C", Z, "cutter"), turning("B", (0, HALF, HALF), "cutter")], 80.0),
    "nutating head over a table": ([turning("B", (0, HALF, HALF), "cutter"), turning("C", Z, "work")], 60.0),
    "pivots off the crossing": (
        [turning("A", X, "work", (0.0, 0.0, -12.0), (-120.0, 30.0)), turning("C", Z, "work", (0.0, 7.0, 0.0))], 0.0,
    ),
    "head with limited C": ([turning("C", Z, "cutter", limits=(-200.0, 200.0)), turning("B", Y, "cutter")], 120.0),
    "head over a tilting table": ([turning("A", X, "work", (0.0, 3.0, -20.0)), turning("B", Y, "cutter")], 50.0),
}  # fmt: skip


@pytest.mark.parametrize("job", ["normal", "lead and lean"])
@pytest.mark.parametrize("name", ODD)
def test_chains_at_odd_angles(name: str, job: str, tmp_path: Path) -> None:
    """The general solution of two rotary axes, proved by the read-back half's own forward kinematics."""
    rotary, pivot = ODD[name]
    made = made_of(tmp_path, machine=machine_file(tmp_path, rotary, pivot, WIDE), **JOBS[job])
    assert made.released, [finding.message for finding in made.findings if not finding.ok]


# ------------------------------------------------------------------------------------------ limits of the C axis


def limited_c(folder: Path, low: float, high: float) -> str:
    return machine_file(
        folder, [turning("A", X, "work", limits=(-120.0, 30.0)), turning("C", Z, "work", limits=(low, high))]
    )


@pytest.mark.parametrize("job", ["normal", "even", "holed", "lead and lean"])
def test_a_limit_of_c_is_met_above_the_part(job: str, tmp_path: Path) -> None:
    """C from -90 to 270: passes on one side of the pole start where those on the other have to end. It turns back in the air."""
    made = made_of(tmp_path, machine=limited_c(tmp_path, -90.0, 270.0), **JOBS[job])
    assert made.released, [finding.message for finding in made.findings if not finding.ok]
    path, axes = made.cutter_paths[0], made.axis_paths[0]
    assert axes.words[:, 4].min() >= -90.0
    assert axes.words[:, 4].max() <= 270.0
    chosen = choose_rotary(made.job, [path])[0]
    splits = [
        (stretch, run.last) for stretch, c in zip(path.stretches, chosen, strict=True) for run in c.runs[:-1]
    ]
    assert splits, "the job was meant to run into the limit"
    for stretch, row in splits:
        # Never in the cut: the row lies on a link or outside the outline, or on its very edge.
        either = {int(stretch.purpose[row]), int(stretch.purpose[row + 1])}
        assert either & {Purpose.OVERRUN, Purpose.LINK}
    # No axis turns fast in the cut: rewinds are rapids, at a height that the blank's corners cannot reach.
    step = np.abs(np.diff(axes.words, axis=0, prepend=axes.start[None, :]))
    assert step[axes.purpose == Purpose.CUT][:, 4].max() < 90.0
    assert step[axes.rapid][:, 4].max() > 90.0
    assert any("turn back inside its limits" in note for note in axes.notes)


def test_with_room_for_it_nothing_is_lifted(tmp_path: Path) -> None:
    made = made_of(tmp_path, machine=limited_c(tmp_path, -360.0, 360.0), **JOBS["normal"])
    assert made.released
    assert len(choose_rotary(made.job, made.cutter_paths)[0][0].runs) == 1


def test_a_limit_too_tight_for_one_pass_is_refused_by_name(tmp_path: Path) -> None:
    """A pass beside the pole turns C by nearly half a turn, 2 atan(x/y), from 90 degrees less to 90 more: +-100 has no room."""
    made = made_of(tmp_path, machine=limited_c(tmp_path, -100.0, 100.0), **JOBS["normal"])
    assert not made.released
    failed = [finding for finding in made.findings if not finding.ok]
    assert [finding.check for finding in failed] == ["travel C"]
    assert not (tmp_path / "out" / "test-tile.ngc").exists()


# ------------------------------------------------------------------------------------------ least rotary travel


def planned(job):
    """Cutter paths of the operations that follow the surface: upright ones leave the turning axis where it stands."""
    paths = []
    for operation in job.operations:
        if operation.does in ("semi-finish", "finish"):
            kinematics = Kinematics(job.machine, job.part_origin_mm, operation.cutter.gauge_length_mm)
            paths.append(plan_operation(job, operation, kinematics.nearest_axis))
    return kinematics, paths


def travel_of(chosen) -> float:
    """Degrees that all rotary axes turn, from zero, over every row and between stretches."""
    runs = [run.rotary_deg for operation in chosen for stretch in operation for run in stretch.runs]
    words = np.concatenate(runs)
    return float(np.abs(np.diff(words, axis=0, prepend=np.zeros((1, words.shape[1])))).sum())


def naive_travel(kin: Kinematics, stretches) -> float:
    """Row by row the nearest words that are inside the limits: what a post without foresight does."""
    now, total = np.zeros(kin.rotary_count), 0.0
    for stretch in stretches:
        found = kin.rotary(stretch.axis)
        for row, free in zip(found.words, found.free == 1, strict=True):
            row = np.where(free, now, row)
            words = row - 360.0 * np.round((row - now) / 360.0)
            inside = ((words >= kin.low - 1e-9) & (words <= kin.high + 1e-9)).all(axis=1)
            far = np.where(inside, np.abs(words - now).sum(axis=1), np.inf)
            best = int(far.argmin())
            assert np.isfinite(far[best])
            total += far[best]
            now = words[best]
    return total


def shortest_by_dijkstra(kin: Kinematics, stretches, cross_rad: np.ndarray) -> float:
    """Least travel over every choice of branch on every row, by scipy's Dijkstra on the graph of all of them.

    Nodes are rows times branches inside the limits; an endless axis takes the short way. Edges join rows that follow each
    other on one branch, and branches where the straight joint move keeps the axis to ``cross_rad`` (of each stretch), or between
    stretches, where all are free.
    """
    from scipy.sparse import coo_matrix
    from scipy.sparse.csgraph import dijkstra

    axis = np.concatenate([stretch.axis for stretch in stretches])
    heads = np.cumsum([0, *(len(stretch.axis) for stretch in stretches)])[:-1]
    found = kin.rotary(axis)
    words = found.words
    for row in np.flatnonzero(found.free.any(axis=(1, 2))):
        assert row not in heads
        words[row] = np.where(
            found.free[row] == 1, words[row - 1], words[row]
        )  # a free word stays, on either branch
    count, branches, _ = words.shape
    inside = ((words >= kin.low - 1e-9) & (words <= kin.high + 1e-9)).all(axis=2)
    hop = np.isin(np.arange(count), heads)
    cross = np.repeat(cross_rad, [len(stretch.axis) for stretch in stretches])[1:]
    tails, tips, weights = [], [], []
    for one in range(branches):
        for other in range(branches):
            turn = words[1:, other] - words[:-1, one]
            turn = np.where(np.isinf(kin.low), turn - 360.0 * np.round(turn / 360.0), turn)
            allowed = inside[:-1, one] & inside[1:, other]
            if one != other:
                allowed &= hop[1:] | (strayed(kin, axis, words[:-1, one], turn) <= cross)
            rows = np.flatnonzero(allowed)
            tails.append(rows * branches + one)
            tips.append((rows + 1) * branches + other)
            weights.append(np.abs(turn[rows]).sum(axis=1))
        first = words[0, one]
        if inside[0, one]:
            tails.append(np.array([count * branches]))
            tips.append(np.array([one]))
            weights.append(np.array([np.abs(first).sum()]))
    size = count * branches + 1
    graph = coo_matrix(
        (np.concatenate(weights), (np.concatenate(tails), np.concatenate(tips))), shape=(size, size)
    )
    far = dijkstra(graph.tocsr(), indices=size - 1)
    return float(far[(count - 1) * branches : count * branches].min())


def strayed(kin: Kinematics, axis: np.ndarray, start: np.ndarray, turn: np.ndarray) -> np.ndarray:
    """Largest angle of three between an even joint move's axis and the even turn from row to row, radians."""
    theta = np.arccos(np.clip(np.einsum("ij,ij->i", axis[:-1], axis[1:]), -1, 1))[:, None]
    worst = np.zeros(len(turn))
    for share in (0.25, 0.5, 0.75):
        _, got = kin.forward(np.column_stack([np.zeros((len(turn), 3)), start + share * turn]))
        with np.errstate(invalid="ignore", divide="ignore"):
            wish = (np.sin((1 - share) * theta) * axis[:-1] + np.sin(share * theta) * axis[1:]) / np.sin(
                theta
            )
        wish = np.where(theta > 1e-9, wish, axis[:-1])
        worst = np.maximum(worst, 2 * np.arcsin(np.clip(np.linalg.norm(got - wish, axis=1) / 2, 0, 1)))
    return worst


def least_travel(job, kin: Kinematics, paths) -> float:
    stretches = [stretch for path in paths for stretch in path.stretches]
    cross = [CROSS_SHARE * budget_of(path.operation).axis_rad for path in paths for _ in path.stretches]
    return shortest_by_dijkstra(kin, stretches, np.array(cross))


@pytest.mark.parametrize("sample", ["mirror-seat", "formwork-tile"])
def test_rotary_travel_on_the_samples_is_the_least_there_is(sample: str) -> None:
    """Over a whole program no choice of branches turns the axes less, and none of it is worse than choosing row by row."""
    job = pipeline.load_job(ROOT / "samples" / sample / "job.toml")
    kin, paths = planned(job)
    ours = travel_of(choose_rotary(job, paths))
    assert ours == pytest.approx(least_travel(job, kin, paths), rel=1e-9)
    assert ours <= naive_travel(kin, [stretch for path in paths for stretch in path.stretches]) * (1 + 1e-12)


@pytest.mark.parametrize(
    ("name", "machine"),
    [("lead one way", "trunnion-ac"), ("lead and lean", "head-b-table-c"), ("even", "trunnion-bc")],
)
def test_rotary_travel_of_small_jobs_is_the_least_there_is(name: str, machine: str, make_job) -> None:
    job = make_job(**{**SMALL, **JOBS[name], "machine": machine})
    kin, paths = planned(job)
    assert travel_of(choose_rotary(job, paths)) == pytest.approx(least_travel(job, kin, paths), rel=1e-9)


# ------------------------------------------------------------------------------------------ length of the cutter


def lines_of(folder: Path) -> list[str]:
    return (folder / "out" / "test-tile.ngc").read_text(encoding="ascii").splitlines()


def failed_checks(folder: Path, lines: list[str], job) -> set[str]:
    path = folder / "changed.ngc"
    path.write_text("\n".join(lines) + "\n", encoding="ascii")
    proof, _ = prove(job, pipeline.read_back(job, path), 0.2)
    return {finding.check for finding in proof.findings if not finding.ok and not finding.warning}


def longer(job, extra_mm: float):
    cutter = replace(job.cutters[0], stickout_mm=job.cutters[0].stickout_mm + extra_mm)
    operations = tuple(replace(operation, cutter=cutter) for operation in job.operations)
    return replace(job, cutters=(cutter,), operations=operations)


@pytest.mark.parametrize("units", ["mm", "inch"])
def test_a_tilting_head_refuses_another_length(units: str, tmp_path: Path) -> None:
    """Where the cutter tilts, X Y Z hold its length: 1 mm more is seen in the cut, and any difference in what is stated."""
    made = made_of(tmp_path, inch=units == "inch", machine="head-b-table-c", **JOBS["lead and lean"])
    assert made.released
    lines = lines_of(tmp_path)
    stated = [line for line in lines if line.startswith("(MSG, T1 GAUGE LENGTH")]
    length, scale = made.job.cutters[0].gauge_length_mm, 25.4 if units == "inch" else 1.0
    assert len(stated) == 1
    # Stated to 0.001 mm or 0.0001 inch.
    assert float(stated[0].split()[4]) * scale == pytest.approx(length, abs=1.3 * MICROMETRE)
    assert f" {stated[0].split()[4]} OFFSET H1" in next(line for line in lines if line.startswith("(T1 "))
    assert failed_checks(tmp_path, lines, made.job) == set()
    assert "gauge length" in failed_checks(tmp_path, lines, longer(made.job, 0.05))
    silent = [line for line in lines if not line.startswith("(MSG")]
    assert failed_checks(tmp_path, silent, made.job) == set()
    # Without the statement the geometry alone has to see it: the tip is off by (1 - cos B) and sin B times the difference.
    assert failed_checks(tmp_path, silent, longer(made.job, 1.0)) & {"scallop", "gouge"}


def test_a_table_takes_any_length(tmp_path: Path) -> None:
    """Where only the work turns, the length offset makes up for the cutter's length."""
    made = made_of(tmp_path, **JOBS["lead and lean"], machine="trunnion-ac")
    lines = lines_of(tmp_path)
    assert not any(line.startswith("(MSG") for line in lines)
    assert failed_checks(tmp_path, lines, longer(made.job, 1.0)) == set()


# ------------------------------------------------------------------------------------------ positioning, 3+2 and 4 axes


@pytest.mark.parametrize(
    ("machine", "fixed"),
    [("trunnion-ac", (0.2, 0.1, 1.0)), ("trunnion-bc", (0.2, 0.1, 1.0)), ("head-b-table-c", (0.2, 0.1, 1.0)),
     ("rotary-a", (0.0, 0.3, 1.0)), ("rotary-b", (0.3, 0.0, 1.0))],
)  # fmt: skip
def test_a_fixed_axis_is_positioned_once(
    machine: str, fixed: tuple[float, float, float], tmp_path: Path
) -> None:
    """Rotary axes turn before the first descent and after the last lift; feeds are per minute throughout."""
    made = made_of(
        tmp_path, machine=machine, tilt=f'axis = "fixed"\nfixed = {list(fixed)}', outline=HOLED, way="one-way"
    )
    assert made.released, [finding.message for finding in made.findings if not finding.ok]
    lines = [line for line in lines_of(tmp_path) if not line.startswith(("(", "%"))]
    assert not any(line.startswith("G93") for line in lines)
    rotary = [i for i, line in enumerate(lines) if re.search(r"\b[ABC]-?[0-9.]", line)]
    feeds = [i for i, line in enumerate(lines) if line.startswith("G1 ")]
    assert rotary
    assert all(i < feeds[0] or i > feeds[-1] for i in rotary)
    motions = made.program.motions
    feeding = motions.shape == Shape.FEED
    assert (motions.start[feeding][:, 3:] == motions.end[feeding][:, 3:]).all()
    axis = made.part_motion.axis[~made.part_motion.rapid]
    wish = np.array(fixed) / np.linalg.norm(fixed)
    # The words are rounded to 1e-4 degrees: 0.9 microradians an axis.
    assert np.abs(axis - wish).max() < 2e-6


# ------------------------------------------------------------------------------------------ inch


# What a job or machine file holds in lengths, lengths a minute, a second squared and cubed.
LENGTHS = (
    "size", "diameter", "corner_radius", "points", "holes", "top", "bottom", "margin", "allowance", "part_origin", "clearance",
    "flute_length", "shank_diameter", "stickout", "holder", "scallop", "tolerance", "feed", "limits", "rapid", "acceleration",
    "jerk", "through",
)  # fmt: skip


def in_inch(text: str) -> str:
    """The same job or X Y Z machine file in inch: lengths over 25.4, curvatures times 25.4, all digits kept."""
    out = []
    for line in text.splitlines():
        key = line.split(" = ")[0]
        factor = 25.4 if key in ("a", "b") else 1 / 25.4 if key in LENGTHS else None
        if factor is not None:
            head, value = line.split(" = ", 1)
            value = re.sub(r"-?\d+(?:\.\d+)?", lambda number: repr(float(number[0]) * factor), value)  # noqa: B023
            line = f"{head} = {value}"
        out.append('units = "inch"' if line == 'units = "mm"' else line)
    return "\n".join(out) + "\n"


@pytest.mark.parametrize("machine", ["mill-3", "trunnion-ac", "head-b-table-c"])
def test_an_inch_job_is_the_same_job(machine: str, tmp_path: Path) -> None:
    """Proof, travel and time as in mm; the last posted digit is 1e-5 inch = 0.254 um instead of 0.1 um."""
    made = {}
    for inch in (False, True):
        folder = tmp_path / str(inch)
        folder.mkdir()
        made[inch] = made_of(folder, inch=inch, machine=machine, **JOBS["lead one way"])
        assert made[inch].released, [finding.message for finding in made[inch].findings if not finding.ok]
    mm, inch_ = made[False], made[True]
    for name in ("scallop_max_mm", "scallop_bound_mm", "gouge_max_mm", "gouge_bound_mm"):
        assert getattr(inch_.proof, name) == pytest.approx(getattr(mm.proof, name), abs=0.4 * MICROMETRE), (
            name
        )
    for name in ("holder_clearance_mm", "rapid_clearance_mm"):
        # Clearances are looked for no finer than they matter, from whichever place comes first.
        assert getattr(inch_.proof, name) == pytest.approx(getattr(mm.proof, name), abs=0.1), name
    words, same = inch_.axis_paths[0].words, mm.axis_paths[0].words
    assert len(words) == pytest.approx(len(same), rel=0.02)
    if machine == "mill-3":
        # Half a digit of each, 0.127 um and 0.05 um.
        assert np.abs(words - same).max() <= 0.18 * MICROMETRE
    assert inch_.proof.uncut_area_mm2 == mm.proof.uncut_area_mm2 == 0.0
    for letter, (low, high) in mm.proof.travel.items():
        # Heights for rapids are rounded up to the posted digit; rotary words hang on the cutter axes alone.
        assert inch_.proof.travel[letter] == pytest.approx((low, high), abs=2 * MICROMETRE)
    assert {f.check for f in inch_.findings} == {f.check for f in mm.findings}
    assert inch_.operations[0].cut_length_mm == pytest.approx(mm.operations[0].cut_length_mm, rel=1e-9)
    assert inch_.times.seconds.sum() == pytest.approx(mm.times.seconds.sum(), rel=0.02)
    text = lines_of(tmp_path / "True")
    assert "G20" in text
    assert "G21" not in text
    assert all(
        len(line) < 256 and re.fullmatch(r"%|\([ -~]*\)|[A-Z][-0-9.]+(?: [A-Z][-0-9.]+)*", line)
        for line in text
    )
    # Five decimals at most: what the radius rule and 0.254 um steps need (machine files in mm say four).
    assert (
        max(
            len(number)
            for line in text
            if line[0] in "GXYZ"
            for number in re.findall(r"[XYZ]-?\d*\.(\d+)", line)
        )
        == 5
    )
    feeds = mm.program.motions.shape == Shape.FEED
    if not mm.program.motions.inverse[feeds].any():
        per_minute = inch_.program.motions.feed_word[inch_.program.motions.shape == Shape.FEED]
        assert per_minute.max() == pytest.approx(1500 / 25.4, rel=1e-3)


def test_a_machine_file_in_inch_is_the_same_machine(tmp_path: Path) -> None:
    text = (ROOT / "post" / "mill-3.toml").read_text(encoding="utf-8")
    path = tmp_path / "mill-inch.toml"
    path.write_text(in_inch(text).replace("length = 4", "length = 5"), encoding="utf-8")
    one, other = load_machine("mill-3"), load_machine(str(path))
    for a, b in zip(one.axes, other.axes, strict=True):
        assert b.limits == pytest.approx(a.limits)
        assert (b.rapid, b.feed, b.acceleration, b.jerk) == pytest.approx(
            (a.rapid, a.feed, a.acceleration, a.jerk)
        )
    programs = []
    for machine in ("mill-3", path.as_posix()):
        for inch in (False, True):
            made = made_of(tmp_path, inch=inch, machine=machine)
            assert made.released, [finding.message for finding in made.findings if not finding.ok]
            programs.append([line for line in lines_of(tmp_path) if not line.startswith("(")])
    assert programs[0] == programs[2]
    assert programs[1] == programs[3]
