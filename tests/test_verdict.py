"""The verdict on program texts written here by hand: a sound one passes, each way of spoiling it is found."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from anticlast.proof import checks
from anticlast.proof.verdict import moving_pieces, prove
from anticlast.readback.forward import part_motion
from anticlast.readback.reader import read_program
from anticlast.records import Finding, Job, Proof
from anticlast.saddle import Saddle
from conftest import JobMaker

UM = 1e-3
RADIUS = 3.0
SAFE = 11.5

HEAD = ["G21 G17 G90 G94 G40 G49 G80 G54 G61", "T1 M6", "M3 S16000", "G43 H1"]
TAIL = ["M5", "M2"]


def passes(
    saddle: Saddle, half_x: float, half_y: float, step: float, chord: float, lift: float = 0.0
) -> list[np.ndarray]:
    """Tips of an upright ball on parallel passes along Y, back and forth, reaching over the outline."""
    x = np.linspace(-half_x, half_x, math.ceil(2 * half_x / step) + 1)
    y = np.linspace(-half_y - 1.0, half_y + 1.0, math.ceil((2 * half_y + 2.0) / chord) + 1)
    found = []
    for number, at in enumerate(x):
        along = y if number % 2 == 0 else y[::-1]
        centres = saddle.offset(np.column_stack((np.full(len(y), at), along)), RADIUS + lift)
        found.append(centres - [0.0, 0.0, RADIUS])
    return found


def text(tips: list[np.ndarray], head: list[str] = HEAD, safe: float = SAFE, feed: float = 1200.0) -> str:
    first = tips[0][0]
    lines = [*head, f"G0 Z{safe:.4f}", f"G0 X{first[0]:.4f} Y{first[1]:.4f}", f"G0 Z{safe:.4f}"]
    lines += [f"G1 X{p[0]:.4f} Y{p[1]:.4f} Z{p[2]:.4f} F{feed:g}" for run in tips for p in run]
    return "\n".join([*lines, f"G1 Z{safe:.4f}", f"G0 Z{safe + 2:.4f}", *TAIL]) + "\n"


def sound(job: Job, step: float = 0.45, lift: float = 0.0) -> list[np.ndarray]:
    return passes(Saddle.of(job.part), 10.4, 8.0, step, 0.5, lift)


Prover = Callable[[Job, str], Proof]


@pytest.fixture
def proved(tmp_path: Path) -> Prover:
    def run(job: Job, program: str) -> Proof:
        path = tmp_path / "program.ngc"
        path.write_text(program, encoding="utf-8")
        lengths = {cutter.number: cutter.gauge_length_mm for cutter in job.cutters}
        return prove(job, read_program(path, length_offsets=lengths), 0.2)[0]

    return run


@pytest.fixture
def upright(make_job: JobMaker) -> Job:
    return make_job(machine="mill-3")


def failed(proof: Proof) -> dict[str, Finding]:
    return {finding.check: finding for finding in proof.findings if not finding.ok}


def test_a_sound_program_is_released(upright: Job, proved: Prover) -> None:
    proof = proved(upright, text(sound(upright)))
    assert failed(proof) == {}
    assert proof.released
    # Largest stepover on the surface 0.4481 sqrt(1 + 0.1^2), R = 3, along the crown: s^2/8 (1/R - k) near 8.2 um.
    assert 7.0 * UM < proof.scallop_max_mm <= proof.scallop_bound_mm <= proof.scallop_max_mm + 0.1 * UM
    assert proof.uncut_area_mm2 == 0.0
    assert proof.grid_mm == 0.2
    # Shank 18 mm over the tip, radius 3; the surface stands 0.5 mm over the tip's place at most around it.
    assert 15.0 < proof.holder_clearance_mm < 18.0
    # Top of the blank at most 0.005 * 13^2 + 0.3 / cos = 1.148; the ball passes at Z 11.5 over the corner.
    assert 5.0 < proof.rapid_clearance_mm < SAFE
    assert set(proof.travel) == {"X", "Y", "Z"}
    assert proof.travel["X"][0] == pytest.approx(sound(upright)[0][:, 0].min(), abs=1e-3)
    assert proof.scallop_map is not None
    assert np.nanmax(proof.scallop_map.height_mm) <= proof.scallop_max_mm + 1e-6


def test_findings_are_sentences_with_numbers(upright: Job, proved: Prover) -> None:
    proof = proved(upright, text(sound(upright, step=0.8)))
    for finding in proof.findings:
        assert finding.message
        assert finding.check
    high = failed(proof)["scallop"]
    assert "over the limit of 10.00 µm" in high.message
    assert "stepover" in high.message
    assert high.worst == proof.scallop_max_mm > high.limit == 0.01
    assert high.line > len(HEAD)
    assert not proof.released


def test_a_scallop_limit_is_kept_to_the_measuring_uncertainty(upright: Job, proved: Prover) -> None:
    """The same program against limits just over and just under what it leaves."""
    program = text(sound(upright))
    highest = proved(upright, program).scallop_max_mm
    for limit, ok in ((highest + 0.1 * UM, True), (highest - 0.1 * UM, True), (highest - 0.3 * UM, False)):
        operation = replace(upright.operations[0], scallop_mm=limit)
        found = failed(proved(replace(upright, operations=(operation,)), program))
        assert ("scallop" not in found) is ok


def test_a_stepover_job_has_no_scallop_limit(make_job: JobMaker, proved: Prover) -> None:
    job = make_job(machine="mill-3", limit="stepover = 0.8")
    proof = proved(job, text(sound(job, step=0.8)))
    scallop = next(finding for finding in proof.findings if finding.check == "scallop")
    assert scallop.ok
    assert math.isnan(scallop.limit)
    assert scallop.worst > 0.02


def test_five_micrometres_down_is_a_gouge(upright: Job, proved: Prover) -> None:
    proof = proved(upright, text(sound(upright, lift=-5.0 * UM)))
    gouge = failed(proof)["gouge"]
    # Chords of 0.5 mm across the crown dig in by k L^2 / 8 = 0.31 um more; posted digits round by 0.05 um.
    assert gouge.worst == pytest.approx(5.3 * UM, abs=0.15 * UM)
    assert gouge.limit == 4.0 * UM
    assert gouge.line > len(HEAD)
    assert proof.gouge_max_mm <= proof.gouge_bound_mm <= proof.gouge_max_mm + 0.02 * UM


def test_stock_left_on_purpose_does_not_count(upright: Job, proved: Prover) -> None:
    operation = replace(upright.operations[0], allowance_mm=0.1)
    job = replace(upright, operations=(operation,))
    left = proved(job, text(sound(job, lift=0.1)))
    plain = proved(upright, text(sound(upright)))
    assert failed(left) == {}
    assert left.scallop_max_mm == pytest.approx(plain.scallop_max_mm, rel=0.05)


def test_a_missing_strip_is_uncut(upright: Job, proved: Prover) -> None:
    tips = sound(upright)
    found = failed(proved(upright, text(tips[:-8])))
    assert found["uncut area"].worst > 10.0
    assert "scallop" in found


def test_fast_low_and_far_moves_are_found(upright: Job, proved: Prover) -> None:
    tips = sound(upright)
    fast = failed(proved(upright, text(tips, feed=2500.0)))
    # The passes run along Y, slopes are gentle: Y takes nearly all of F.
    assert fast.keys() <= {"feed X", "feed Y", "feed Z"}
    assert fast["feed Y"].worst == pytest.approx(2500.0, rel=0.01)
    assert fast["feed Y"].limit == 2000.0
    low = failed(proved(upright, text(tips, safe=4.0)))["rapids"]
    assert low.limit == 5.0
    assert 2.0 < low.worst < 4.0
    moved = replace(upright, part_origin_mm=(95.0, 0.0, 30.0))
    far = failed(proved(moved, text(tips)))["travel X"]
    assert far.worst == pytest.approx(95.0 + 10.4, abs=0.4)
    assert far.limit == 100.0
    assert "part_origin" in far.message


def test_rapids_through_the_blank_are_found(upright: Job, proved: Prover) -> None:
    tips = sound(upright)
    program = text(tips).replace("G0 Z11.5000\nG1", "G0 Z-2\nG1", 1)
    found = failed(proved(upright, program))["rapids"]
    assert found.worst < 0.0
    assert program.splitlines()[found.line - 1] == "G0 Z-2"


def test_lifting_at_rapid_out_of_the_cut_is_allowed(upright: Job, proved: Prover) -> None:
    program = text(sound(upright)).replace("G1 Z11.5000\n", "")
    assert "rapids" not in failed(proved(upright, program))


def test_a_short_cutter_lets_the_holder_touch(upright: Job, proved: Prover) -> None:
    stub = replace(upright.cutters[0], flute_length_mm=4.0, stickout_mm=4.2, holder=((30.0, 20.0),))
    operation = replace(upright.operations[0], cutter=stub)
    job = replace(upright, cutters=(stub,), operations=(operation,), part_origin_mm=(0.0, 0.0, 60.0))
    # The holder's face is 4.2 mm over the tip and 30 mm round; flanks rise 0.5 mm only: still clear.
    clear = proved(job, text(sound(job)))
    assert 3.0 < clear.holder_clearance_mm < 4.2
    assert "holder" not in failed(clear)
    stub = replace(stub, stickout_mm=3.2, flute_length_mm=3.1)
    steep = replace(job, part=replace(job.part, a_per_mm=0.05), cutters=(stub,))
    deep = failed(proved(steep, text(passes(Saddle.of(steep.part), 10.4, 8.0, 0.4, 0.5))))
    assert deep["holder"].worst < 0.0
    assert "stickout" in deep["holder"].message


def test_spindle_tool_offset_and_units_are_checked(upright: Job, proved: Prover) -> None:
    tips = sound(upright)[:2]

    def spoiled(old: str, new: str) -> dict[str, Finding]:
        return failed(proved(upright, text(tips, [line.replace(old, new) for line in HEAD])))

    assert spoiled("S16000", "S30000")["spindle speed"].worst == 30000.0
    assert spoiled("S16000", "S500")["spindle speed"].limit == upright.machine.spindle.min_rpm
    assert "spindle direction" in spoiled("M3", "M4")
    assert "spindle running" in spoiled("M3", "M5")
    assert "cutter known" in spoiled("T1", "T7")
    assert "length offset" in spoiled("H1", "H7")
    assert "work offset" in spoiled("G54", "G55")
    assert spoiled("G21", "G20")["units"].message.endswith("post it with G21")


def test_language_errors_stand_beside_what_could_be_measured(upright: Job, proved: Prover) -> None:
    lines = text(sound(upright)).splitlines()
    lines.insert(len(lines) - 3, "G1 X1 E5")
    proof = proved(upright, "\n".join(lines) + "\n")
    assert "language" in failed(proof)
    assert not proof.released
    assert proof.uncut_area_mm2 == 0.0


def test_a_program_that_cuts_nothing(upright: Job, proved: Prover) -> None:
    proof = proved(upright, "\n".join([*HEAD, "G0 Z50", "G0 X0 Y0", *TAIL]) + "\n")
    assert {"feed motion", "uncut area", "scallop"} <= failed(proof).keys()
    assert proof.uncut_area_mm2 == pytest.approx(upright.part.outline.area_mm2, rel=1e-6)
    empty = proved(upright, "\n".join([*HEAD[:1], *TAIL]) + "\n")
    assert not empty.released


def test_feed_moves_from_nowhere_are_refused(upright: Job, proved: Prover) -> None:
    program = "\n".join([*HEAD, "G1 X1 F500", "G0 Z50 X0 Y0", *TAIL]) + "\n"
    found = failed(proved(upright, program))["start known"]
    assert found.line == len(HEAD) + 1


def test_a_blank_too_thin_for_the_part(make_job: JobMaker, upright: Job, proved: Prover) -> None:
    job = make_job(machine="mill-3", stock_extra="")
    thin = replace(job, stock=replace(job.stock, top_mm=0.3))
    found = failed(proved(thin, text(sound(thin))))["stock"]
    # The saddle rises to a x^2 = 0.5 at x = 10, y = 0.
    assert found.worst == pytest.approx(0.2, abs=1e-3)


def test_moves_that_start_where_the_machine_was_left_are_left_out(upright: Job, tmp_path: Path) -> None:
    path = tmp_path / "program.ngc"
    path.write_text(text(sound(upright)[:1]), encoding="utf-8")
    lengths = {1: upright.cutters[0].gauge_length_mm}
    program = read_program(path, length_offsets=lengths)
    motion = part_motion(program, upright.machine, upright.part_origin_mm, lengths)
    moving = moving_pieces(upright, program, motion)
    known = motion.line[moving]
    assert known.min() == len(HEAD) + 3
    assert moving.sum() == np.count_nonzero((motion.fraction > 0.0) & (motion.line >= len(HEAD) + 3))


def test_axis_speeds_of_straight_and_round_moves(tmp_path: Path, upright: Job) -> None:
    path = tmp_path / "program.ngc"
    path.write_text("\n".join([*HEAD, "G0 X0 Y0 Z50", "G1 X3 Y4 F600", "G3 X13 Y4 I5 J0 F300", *TAIL]) + "\n")
    speed = checks.axis_speeds(read_program(path, length_offsets={1: 79.0}).motions)
    assert np.isnan(speed[0]).all()
    np.testing.assert_allclose(speed[1], [360.0, 480.0, 0.0, 0.0, 0.0, 0.0], atol=1e-9)
    np.testing.assert_allclose(speed[2], [300.0, 300.0, 0.0, 0.0, 0.0, 0.0], atol=1e-9)


def test_a_rotary_axis_past_its_limit(make_job: JobMaker, proved: Prover) -> None:
    job = make_job()
    program = "\n".join([*HEAD, "G0 A0 C0", "G0 X0 Y0 Z60", "G0 A40", "G1 Z50 F500", "G0 Z60", *TAIL]) + "\n"
    found = failed(proved(job, program))["travel A"]
    assert (found.worst, found.limit, found.unit) == (40.0, 30.0, "deg")
    assert program.splitlines()[found.line - 1] == "G0 A40"
