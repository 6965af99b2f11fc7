"""Comparing cases: honest times and their order, costs worked out another way, the same answer whoever runs it."""

from __future__ import annotations

import json
import math
import re
import sys
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from typer.testing import CliRunner

from anticlast import pipeline
from anticlast.cli import app
from anticlast.compare import cases as case_list
from anticlast.compare import search
from anticlast.compare.answer import Comparison, Proven, as_json
from anticlast.compare.cases import Case, Tilt
from anticlast.compare.costs import Costs, asked_seconds, costs_of
from anticlast.compare.front import front
from anticlast.compare.ranking import best_of_families, rank
from anticlast.compare.run import Outcome, Setup, try_case
from anticlast.compare.search import compare
from anticlast.errors import BadInput
from anticlast.job import load_job
from anticlast.machine.axes import row_minutes
from anticlast.machine.motion import estimate
from anticlast.records import AxisPath, CutterPath, Job, Purpose, ReadProgram
from conftest import JobMaker, job_text

BULL = """\
[[cutter]]
number = 2
shape = "bull"
diameter = 6.0
corner_radius = 0.5
flutes = 2
flute_length = 18.0
shank_diameter = 6.0
stickout = 34.0
holder = [[16.0, 20.0], [32.0, 25.0]]
"""
BIG_BALL = """\
[[cutter]]
number = 3
shape = "ball"
diameter = 100.0
flutes = 4
flute_length = 80.0
shank_diameter = 40.0
stickout = 90.0
"""
SMALL = {
    "outline": 'shape = "rectangle"\nsize = [9.0, 7.0]',
    "a": 0.011,
    "extra_part": "b = 0.006\nrotate = 20.0",
    "limit": "scallop = 0.02",
    "direction": 0.0,
    "tolerance": 0.006,
    "top": 4.0,
    "bottom": -8.0,
}


def crib_text(*cutters: str, **changes: object) -> str:
    text = job_text(**{**SMALL, **changes})
    return text.replace("[[operation]]", "".join(cutters) + "[[operation]]")


def write_job(folder: Path, *cutters: str, **changes: object) -> Path:
    path = folder / "job.toml"
    path.write_text(crib_text(*cutters, **changes), encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def job(tmp_path_factory: pytest.TempPathFactory) -> Job:
    """One rotary axis, a ball that leans, and a ball far too large."""
    path = write_job(tmp_path_factory.mktemp("job"), BIG_BALL, machine="rotary-a", tilt="lean = 15.0")
    return load_job(path)


@pytest.fixture(scope="module")
def found(job: Job) -> Comparison:
    (one,) = compare(job, cores=1, prove=0)
    return one


@cache
def chain(path: Path) -> tuple[Job, CutterPath, AxisPath, ReadProgram]:
    """The stages one by one, for a job file with one operation."""
    job = load_job(path)
    (passes,), (axes,) = pipeline.plan(job)
    temporary, _ = pipeline.post(job, (axes,), path.with_suffix(".ngc"))
    return job, passes, axes, pipeline.read_back(job, temporary)


def keys_of(case: Case) -> str:
    """The case's tilt as a user would write it."""
    tilt = case.tilt
    if tilt.fixed_axis is not None:
        return f"axis = {list(tilt.fixed_axis)}"
    return f"lead = {math.degrees(tilt.lead_rad)!r}\nlean = {math.degrees(tilt.lean_rad)!r}"


# ------------------------------------------------------------------------------------------ honest time


def test_times_are_those_of_the_job_written_out(job: Job, found: Comparison, tmp_path: Path) -> None:
    """A job file written for a case by hand, planned, posted, read back and estimated, takes the time of the case."""
    picked = (*best_of_families(found.ranked), found.ranked[len(found.ranked) // 2], found.ranked[-1])
    seen = []
    for number, outcome in enumerate({outcome.case: outcome for outcome in picked}.values()):
        case, costs = outcome.case, outcome.costs
        assert costs is not None
        folder = tmp_path / str(number)
        folder.mkdir()
        path = write_job(
            folder, BIG_BALL, machine="rotary-a", pattern=case.pattern, direction=math.degrees(case.direction_rad),
            tilt=keys_of(case), way=case.way,
        )  # fmt: skip
        alone, passes, _, program = chain(path)
        took = estimate(program.motions, alone.machine, program.events).total_s
        # Degrees in the file and back cost the last bits.
        assert costs.time_s == pytest.approx(took, rel=1e-6)
        assert costs.passes == passes.passes
        assert costs.cut_length_mm == pytest.approx(passes.cut_length_mm, rel=1e-9)
        seen.append(took)
    assert len(seen) >= 4


def test_ranking_is_by_time_and_nothing_beats_the_feed(found: Comparison) -> None:
    assert len(found.ranked) > 12
    times = [outcome.costs.time_s for outcome in found.ranked if outcome.costs]
    assert times == sorted(times)
    assert found.best is found.ranked[0]
    for outcome in found.ranked:
        costs = outcome.costs
        assert costs is not None
        # No axis of this mill is too slow for the feed wished, so F never asks for less time than the cut at that feed.
        assert costs.cut_only_s < costs.feed_only_s <= costs.time_s * (1.0 + 1e-9)
        assert costs.scallop_mm <= 0.02


def test_every_pattern_direction_tilt_and_way_was_tried(job: Job, found: Comparison) -> None:
    (operation,) = job.operations
    tried = {outcome.case for outcome in (*found.ranked, *found.refused)}
    of_ball = {case for case in tried if case.cutter == 1}
    assert {case.pattern for case in of_ball} == {"raster", "graded", "even"}
    assert {case.way for case in of_ball} == {"both", "one-way"}
    feeds = case_list.directions(job, operation, operation.cutter, 0.02)
    assert {round(case.direction_rad, 9) for case in of_ball} >= {round(feed, 9) for feed in feeds}
    tilts = {tilt.name for tilt in case_list.tilts(job, operation, operation.cutter, feeds[0]).values()}
    assert {case.tilt.name for case in of_ball} >= tilts
    assert {"normal", "fixed upright"} <= tilts
    assert found.own.case == case_list.own_case(operation, 0.02)
    assert found.own.costs is not None


def test_best_direction_is_said_with_what_it_saves(found: Comparison) -> None:
    answer = found.direction
    same_settings = [
        outcome
        for outcome in found.ranked
        if replace(outcome.case, direction_rad=0.0) == replace(found.own.case, direction_rad=0.0)
    ]
    assert len(same_settings) >= 4
    assert same_settings[0].costs is not None
    assert found.own.costs is not None
    assert answer.best_rad == same_settings[0].case.direction_rad
    assert answer.best_s == same_settings[0].costs.time_s
    assert answer.own_s == found.own.costs.time_s
    line = answer.line()
    assert f"{math.degrees(answer.best_rad or 0.0):.1f}°" in line
    assert "as the job has it" in line or "saves" in line


def test_the_settings_said_make_the_best_case(job: Job, found: Comparison, tmp_path: Path) -> None:
    best = found.best
    assert best is not None
    assert best.costs is not None
    assert found.settings
    text = crib_text(BIG_BALL, machine="rotary-a", tilt="lean = 15.0")
    for setting in found.settings:
        key = setting.split(" = ")[0]
        text, changed = re.subn(rf"(?m)^{key} = .*\n(?=(?:.*\n)*?\Z)", setting + "\n", text, count=0)
        if not changed:
            text += setting + "\n"
    path = tmp_path / "job.toml"
    path.write_text(text, encoding="utf-8")
    alone, _, _, program = chain(path)
    took = estimate(program.motions, alone.machine, program.events).total_s
    # Settings are said to a few digits.
    assert took == pytest.approx(best.costs.time_s, rel=1e-3)


def test_what_cannot_be_cut_says_why(found: Comparison) -> None:
    too_large = [outcome for outcome in found.refused if outcome.case.cutter == 3]
    assert too_large
    for outcome in too_large:
        assert outcome.check == "cutter fits"
        assert "radius 50 mm" in outcome.reason
    assert any("cannot be cut: T3" in line for line in found.lines())


def test_a_load_that_the_job_limits_refuses(tmp_path: Path) -> None:
    """Half a newton across a cutter in aluminium is less than any cut of 0.3 mm takes; a kilonewton is more."""
    reasons = []
    for force in (0.5, 1000.0):
        text = crib_text(machine="mill-3", material="aluminium 6061", limit="scallop = 0.04")
        path = tmp_path / f"{force}.toml"
        path.write_text(text.replace("flutes = 2\n", f"flutes = 2\nmax_force = {force}\n"), encoding="utf-8")
        loaded = load_job(path)
        (operation,) = loaded.operations
        outcome = try_case(Setup(loaded, operation), case_list.own_case(operation, 0.04))
        reasons.append((outcome.costs is None, outcome.check[:5]))
    assert reasons == [(True, "force"), (False, "")]


# ------------------------------------------------------------------------------------------ the same for everyone


def test_same_answer_twice_and_on_two_cores(tmp_path: Path) -> None:
    path = write_job(tmp_path, machine="mill-3", pattern="graded", limit="scallop = 0.04")
    alone = [json.dumps(as_json(compare(load_job(path), cores=1, prove=0))) for _ in range(2)]
    assert alone[0] == alone[1]
    told: list[tuple[str, int, int]] = []
    two = compare(
        load_job(path), cores=2, prove=0, progress=lambda text, done, total: told.append((text, done, total))
    )
    assert json.dumps(as_json(two)) == alone[0]
    assert told[-1][1] == told[-1][2] == max(done for _, done, _ in told)


def test_dask_gives_the_same_answer(tmp_path: Path) -> None:
    distributed = pytest.importorskip("distributed")
    loaded = load_job(write_job(tmp_path, machine="mill-3", limit="scallop = 0.04"))
    with distributed.LocalCluster(
        n_workers=1, threads_per_worker=1, processes=False, dashboard_address=None
    ) as cluster:
        there = compare(loaded, dask=cluster.scheduler_address, prove=0)
    assert as_json(there) == as_json(compare(loaded, cores=1, prove=0))


def test_dask_missing_or_silent_is_said(job: Job, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(BadInput, match=r'pip install "anticlast\[cluster\]"'):
        compare(job, dask="tcp://127.0.0.1:1")


# ------------------------------------------------------------------------------------------ costs


@pytest.fixture(scope="module")
def swivelled(
    tmp_path_factory: pytest.TempPathFactory,
) -> tuple[Path, Job, CutterPath, AxisPath, ReadProgram, Costs]:
    """A led ball on two rotary axes, whose limits hold the feed back."""
    path = write_job(tmp_path_factory.mktemp("swivelled"), machine="trunnion-ac", tilt="lead = 15.0")
    job, passes, axes, program = chain(path)
    return path, job, passes, axes, program, costs_of(job, passes, axes, program)


def test_smallest_cutting_speed_of_a_led_ball(swivelled: tuple) -> None:
    """Lead 15 degrees everywhere: v = pi D sin(15) n, 6 mm at 16000 rev/min (derived in docs/comparing.md)."""
    assert swivelled[5].least_speed_m_min == pytest.approx(
        math.pi * 0.006 * math.sin(math.radians(15.0)) * 16000, rel=1e-6
    )


def test_smallest_cutting_speed_of_a_bull_is_near_its_full_diameter(tmp_path: Path) -> None:
    loaded = load_job(write_job(tmp_path, BULL, a=0.005, extra_part="", direction=90.0))
    (operation,) = loaded.operations
    case = replace(
        case_list.own_case(operation, 0.02), cutter=2, pattern="matched", tilt=Tilt("by the pattern")
    )
    outcome = try_case(Setup(loaded, operation), case)
    assert outcome.costs is not None, outcome.reason
    # The contact lies between the centre circle of the corner, 2.5 mm, and the full radius, 3 mm, at small leads.
    low, high = (2.0 * math.pi * radius * 16.0 for radius in (2.5, 2.6))
    assert low <= outcome.costs.least_speed_m_min <= high


def test_rotary_travel_is_what_the_text_says(swivelled: tuple, tmp_path: Path) -> None:
    _, job, _, axes, _, costs = swivelled
    temporary, _ = pipeline.post(job, (axes,), tmp_path / "x.ngc")
    for letter in "AC":
        words, travel, before = re.compile(rf"(?<![A-Z(]){letter}(-?[0-9.]+)"), 0.0, 0.0
        for line in temporary.read_text(encoding="ascii").splitlines():
            match = words.search(re.sub(r"\(.*?\)", "", line))
            if match:
                travel += abs(float(match.group(1)) - before)
                before = float(match.group(1))
        assert costs.rotary_travel_deg[letter] == pytest.approx(travel, abs=1e-3)
    assert costs.rotary_travel_deg["C"] > 180.0


def test_asked_time_is_length_over_feed(swivelled: tuple) -> None:
    """All rows of the passes at 1500 mm/min: contact length over feed, summed by hand."""
    _, job, passes, axes, program, _ = swivelled
    asked = asked_seconds(job, passes, axes, program.motions)
    assert asked is not None
    on = axes.pass_index >= 0
    pass_rows = (axes.purpose == Purpose.CUT) | (axes.purpose == Purpose.OVERRUN)
    blocks = asked[len(asked) - len(axes.words) :]
    wanted = 0.0
    for stretch in passes.stretches:
        step = np.linalg.norm(np.diff(stretch.contact_mm, axis=0), axis=1)
        here = (stretch.purpose[1:] == Purpose.CUT) | (stretch.purpose[1:] == Purpose.OVERRUN)
        wanted += float(step[here].sum()) / 1500.0 * 60.0
    # Blocks and rows part company by half a block at the ends of passes.
    assert float(blocks[on & pass_rows].sum()) == pytest.approx(wanted, rel=0.01)


def test_asked_time_of_arcs_is_that_of_the_rows(tmp_path: Path) -> None:
    """On three axes nothing turns, and passes may be posted as arcs: rows and blocks still ask for the same time."""
    path = write_job(tmp_path, machine="mill-3", tilt="arcs = true", extra_part="", direction=90.0)
    job, passes, axes, program = chain(path)
    assert (program.motions.turns > 0.0).sum() > 10
    asked = asked_seconds(job, passes, axes, program.motions)
    assert asked is not None
    blocks = asked[len(asked) - len(axes.words) :]
    wanted = 0.0
    for stretch in passes.stretches:
        point = stretch.tip_mm + 3.0 * stretch.axis
        wanted += 60.0 * float(row_minutes(stretch, point).sum())
    assert float(blocks[axes.pass_index >= 0].sum()) == pytest.approx(wanted, rel=1e-9)
    # One by one too: block for block what the program's own F asks for, where no axis is too slow for it.
    posted = program.motions.seconds[len(asked) - len(axes.words) :]
    cut = (axes.pass_index >= 0) & (axes.purpose == Purpose.CUT) & (posted > 0.05)
    assert cut.sum() > 10
    np.testing.assert_allclose(blocks[cut], posted[cut], rtol=0.02)


def test_rotary_limits_cost_what_a_machine_without_them_saves(swivelled: tuple, tmp_path: Path) -> None:
    """The job posted anew for the same machine with rotary axes two hundred times as fast takes so much less."""
    path, job, _, _, program, costs = swivelled
    text = (Path(job.machine.source)).read_text(encoding="utf-8")
    head, *rotary = re.split(r'(?m)^(?=\[\[axis\]\]\nletter = "[AC]")', text)
    fast = [
        re.sub(
            r"(?m)^(rapid|feed|acceleration|jerk) = ([0-9.]+)",
            lambda m: f"{m[1]} = {float(m[2]) * 200}",
            part,
        )
        for part in rotary
    ]
    (tmp_path / "fast.toml").write_text(head + "".join(fast), encoding="utf-8")
    free_path = tmp_path / "job.toml"
    free_path.write_text(
        path.read_text(encoding="utf-8").replace('"trunnion-ac"', '"fast.toml"'), encoding="utf-8"
    )
    free_job, _, _, free = chain(free_path)

    def feeding(program: ReadProgram, job: Job) -> float:
        return float(estimate(program.motions, job.machine).seconds[program.motions.shape != 0].sum())

    assert len(fast) == 2
    saved = feeding(program, job) - feeding(free, free_job)
    assert saved > 2.0
    held = costs.held_back
    assert held is not None
    assert held.by_rotary_s == pytest.approx(saved, rel=0.05)
    assert held.by_all_s >= held.by_rotary_s
    assert 0.0 < held.by_speed_s["C"] <= held.by_all_s


def test_nothing_holds_back_what_does_not_turn(found: Comparison) -> None:
    still = [outcome for outcome in found.ranked if outcome.case.tilt.name == "fixed upright"]
    assert still
    for outcome in still:
        costs = outcome.costs
        assert costs is not None
        assert costs.held_back is not None
        assert costs.rotary_travel_deg == {"A": 0.0}
        assert costs.held_back.by_rotary_s == pytest.approx(0.0, abs=0.02)


def test_speeds_of_a_cutter_without_an_operation(tmp_path: Path) -> None:
    """Same speed at the full diameter, same feed per tooth; the machine's spindle ends at 24000 and starts at 2000."""
    big = BIG_BALL.replace("100.0", "12.0").replace("40.0", "12.0")
    loaded = load_job(write_job(tmp_path, big, feed=1600))
    (operation,) = loaded.operations
    rpm, feed = case_list.speeds(loaded, operation, loaded.cutters[1])
    assert rpm == pytest.approx(8000.0)  # half of 16000 at twice the diameter
    assert feed == pytest.approx(1600.0 / (16000 * 2) * 4 * 8000.0)
    slow = replace(operation, spindle_rpm=3000.0)
    assert case_list.speeds(loaded, slow, loaded.cutters[1])[0] == loaded.machine.spindle.min_rpm


# ------------------------------------------------------------------------------------------ tilts, directions


def test_three_axes_leave_one_tilt(make_job: JobMaker) -> None:
    loaded = make_job(machine="mill-3")
    found = case_list.tilts(loaded, loaded.operations[0], loaded.cutters[0], 0.3)
    assert {tilt.name for tilt in found.values()} == {"normal"}
    assert set(found) >= {"lead 15°", "fixed upright"}


def test_two_rotary_axes_tell_all_tilts_apart(make_job: JobMaker) -> None:
    loaded = make_job(machine="head-b-table-c", tilt="lead = 7.0\nlean = -3.0")
    found = case_list.tilts(loaded, loaded.operations[0], loaded.cutters[0], 0.3)
    assert all(tilt.name == name for name, tilt in found.items())
    assert "lead 7° lean -3°" in found
    for tilt in found.values():
        if tilt.fixed_axis is not None:
            assert math.hypot(*tilt.fixed_axis) == pytest.approx(1.0, abs=1e-12)


def test_directions_hold_the_trades_own_and_repeat_none(job: Job) -> None:
    (operation,) = job.operations
    feeds = case_list.directions(job, operation, operation.cutter, 0.02)
    for wished in (0.0, math.pi / 4, math.pi / 2, math.radians(110.0)):
        assert min(
            abs((feed - wished + math.pi / 2) % math.pi - math.pi / 2) for feed in feeds
        ) < math.radians(1.0)
    for number, feed in enumerate(feeds):
        for other in feeds[:number]:
            assert abs((feed - other + math.pi / 2) % math.pi - math.pi / 2) > math.radians(1.0)


# ------------------------------------------------------------------------------------------ order and front


def made_up(time_s: float, scallop_mm: float, cutter: int = 1) -> Outcome:
    case = Case(cutter, "raster", time_s, Tilt("normal"), "both", scallop_mm)
    return Outcome(case, Costs(1, 0, 1, 1.0, scallop_mm, time_s, time_s, time_s, 0.0, {}, None))


@settings(derandomize=True, max_examples=60)
@given(st.lists(st.tuples(st.integers(1, 9), st.integers(1, 9)), max_size=12))
def test_front_against_brute_force(pairs: list[tuple[int, int]]) -> None:
    """A case is on the front if no other is at least as smooth and as fast and better in one; equal ones count once."""
    points = front([made_up(float(time), scallop / 1000.0) for time, scallop in pairs])
    kept = {(point.time_s, point.scallop_mm) for point in points if point.best}
    brute = {
        (float(t), s / 1000.0)
        for t, s in pairs
        if not any(u <= t and r <= s and (u, r) != (t, s) for u, r in pairs)
    }
    assert kept == brute
    assert sum(point.best for point in points) == len(brute)
    assert len(points) == len(pairs)


def test_equal_times_keep_their_order_and_refused_ones_no_rank() -> None:
    first, second = made_up(5.0, 0.01, cutter=2), made_up(5.0, 0.01, cutter=1)
    refused = Outcome(second.case, None, "travel X", "too far")
    assert rank([first, refused, second, made_up(1.0, 0.02, 3)])[1:] == (first, second)


# ------------------------------------------------------------------------------------------ proof


def test_the_proof_decides_who_is_best(job: Job, monkeypatch: pytest.MonkeyPatch) -> None:
    """What the proof refuses leaves the ranking, with its findings, and the next one is proven."""
    asked: list[Case] = []

    def refuse_first(setup: Setup, case: Case, grid_mm: float | None) -> Proven:
        asked.append(case)
        return Proven(case, len(asked) > 1, ("scallop too high",) if len(asked) == 1 else (), 0.02, 0.0)

    monkeypatch.setattr(search, "_proof", refuse_first)
    (one,) = compare(replace(job, cutters=job.cutters[:1]), cores=1, prove=1)
    assert len(asked) == 2
    assert one.best is not None
    assert one.best.case == asked[1]
    (refused,) = [outcome for outcome in one.refused if outcome.case == asked[0]]
    assert (refused.check, refused.reason) == ("proof", "scallop too high")
    assert any("refused: scallop too high" in line for line in one.lines())


def test_the_best_is_proven_through_the_whole_pipeline(job: Job, found: Comparison) -> None:
    assert found.best is not None
    (operation,) = job.operations
    proven = search._proof(Setup(job, operation), found.best.case, 0.2)
    assert proven.released, proven.findings
    assert found.best.costs is not None
    # The limit, and what the virtual cut may be off by.
    assert proven.scallop_mm <= 0.02 + 0.0002
    assert proven.scallop_mm == pytest.approx(found.best.costs.scallop_mm, rel=0.02)


# ------------------------------------------------------------------------------------------ the command


def run(*words: str | Path):
    return CliRunner().invoke(app, [str(word) for word in words])


@pytest.fixture
def quick(tmp_path: Path) -> Path:
    return write_job(tmp_path, machine="mill-3", limit="scallop = 0.04")


def test_command_says_it_all(quick: Path) -> None:
    result = run("compare", quick, "--cores", "1", "--prove", "0")
    assert result.exit_code == 0, result.output
    for said in (
        "rank",
        "as the job has it",
        "best feed direction",
        "best: T1",
        "to use it, set",
        "not proven",
    ):
        assert said in result.output
    times = re.findall(r"(?m)^ *\d+\*? .* ([0-9.]+) s$", result.output)
    assert len(times) >= 5
    assert [float(time) for time in times] == sorted(float(time) for time in times)


def test_command_json_and_picture(quick: Path, tmp_path: Path) -> None:
    picture = tmp_path / "front.svg"
    result = run("compare", quick, "--cores", "1", "--prove", "0", "--json", "--picture", picture)
    assert result.exit_code == 0, result.output
    (one,) = json.loads(result.output)["operations"]
    limits = {point["scallop_limit_mm"] for point in one["front"]}
    assert {round(limit, 6) for limit in limits} == {0.02, 0.04, 0.08}
    assert one["ranked"][0]["time_s"] == min(entry["time_s"] for entry in one["ranked"])
    drawn = picture.read_text(encoding="utf-8")
    for text in ("time against scallop", "Best front", "T1 raster", "T1 graded", "the job", "estimated time"):
        assert text in drawn


def test_every_cutter_and_pattern_has_a_mark_of_its_own() -> None:
    from anticlast.report.picture_compare import _marks

    points = front([made_up(float(number), 0.01, cutter=number) for number in range(1, 25)])
    assert len(set(_marks(points).values())) == 24


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (("--operation", "4"), "the operations that finish are: 1"),
        (("--picture", "front.bmp"), "a picture is .png or .svg"),
        (("--cores", "0"), "--cores"),
        (("--prove", "-1"), "--prove"),
        (("--dask", "nowhere"), "--dask"),
    ],
)
def test_command_refuses_bad_options(quick: Path, options: tuple[str, ...], message: str) -> None:
    result = run("compare", quick, *options)
    assert result.exit_code == 2
    assert message in result.output
    assert "Traceback" not in result.output


def test_command_exits_1_if_nothing_can_be_cut(tmp_path: Path) -> None:
    text = crib_text(machine="mill-3", diameter=100.0)
    path = tmp_path / "job.toml"
    path.write_text(
        text.replace("flute_length = 18.0", "flute_length = 80.0").replace(
            "stickout = 34.0", "stickout = 90.0"
        )
    )
    result = run("compare", path, "--cores", "1")
    assert result.exit_code == 1
    assert "no case can be cut" in result.output
    assert "radius 50 mm" in result.output


def test_help_has_an_example() -> None:
    assert "Example: anticlast compare" in run("compare", "--help").output
