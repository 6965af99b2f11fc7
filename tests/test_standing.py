"""Rapids and holder against the stock as it stands: the same move is refused before the stock is cut and passes after."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from anticlast.proof.standing import holder_in_standing, rapids_in_standing, sure_mm
from anticlast.proof.verdict import prove
from anticlast.readback.reader import read_program
from anticlast.records import Finding, Job, PartMotion, Proof
from anticlast.saddle import Saddle
from anticlast.stock.clearance import BodyClearance
from conftest import JobMaker
from test_verdict import passes, text

# A block with its top at z = 6; tips on the finished surface stay under 0.6, so the passes take the whole height off.
TOP, SAFE = 6.0, 11.5
LOW = 5.6
ACROSS = ["G0 X-5 Y0", f"G0 Z{LOW}", "G0 X5 (across)", f"G0 Z{SAFE}"]


@pytest.fixture
def block(make_job: JobMaker) -> Job:
    return make_job(machine="mill-3", stock_extra="", top=TOP)


def verdict(job: Job, program: str, folder: Path) -> Proof:
    path = folder / "program.ngc"
    path.write_text(program, encoding="utf-8")
    lengths = {cutter.number: cutter.gauge_length_mm for cutter in job.cutters}
    return prove(job, read_program(path, length_offsets=lengths), 0.4)[0]


def finding(proof: Proof, check: str) -> Finding:
    return next(found for found in proof.findings if found.check == check)


def with_rapid(job: Job, *, first: bool) -> str:
    """Return a sound program with a low rapid across the middle, before the first pass or after the last."""
    tips = passes(Saddle.of(job.part), 10.4, 8.0, 0.45, 0.5)
    lines = text(tips, safe=SAFE).splitlines()
    feeding = [index for index, line in enumerate(lines) if line.startswith("G1")]
    at = feeding[0] - 2 if first else feeding[-1] + 1
    return "\n".join([*lines[:at], *ACROSS, *lines[at:]]) + "\n"


def test_a_rapid_through_stock_that_still_stands_is_refused(block: Job, tmp_path: Path) -> None:
    program = with_rapid(block, first=True)
    proof = verdict(block, program, tmp_path)
    found = finding(proof, "rapids")
    lines = program.splitlines()
    assert not proof.released
    assert not found.ok
    # The ball's tip is 0.4 mm under the top of the block: down in one line, across in the next.
    assert lines[found.line - 1] in ACROSS[1:3]
    assert found.worst < 0.0
    assert "cutting end of cutter 1 reaches" in found.message
    assert f"line {found.line}" in found.message


def test_the_same_rapid_passes_once_the_stock_is_gone(block: Job, tmp_path: Path) -> None:
    program = with_rapid(block, first=False)
    proof = verdict(block, program, tmp_path)
    found = finding(proof, "rapids")
    assert found.ok, found.message
    # Tip at 5.6; under it the surface z = 0.005 (x^2 - y^2) and 10 um of scallop: nearest at x = 5, z = 0.125.
    assert found.worst == pytest.approx(LOW - 0.125, abs=0.3)
    assert "(across)" in program.splitlines()[found.line - 1]
    assert proof.rapid_clearance_mm == found.worst


def test_what_sampling_may_miss_is_taken_off(block: Job, tmp_path: Path) -> None:
    """5.45 mm are found; a job that asks for 5.4 is not given them, for they could not be shown."""
    found = finding(
        verdict(replace(block, clearance_mm=5.4), with_rapid(block, first=False), tmp_path), "rapids"
    )
    assert not found.ok
    assert found.worst > 5.4
    assert "surely no nearer than 5." in found.message


def test_a_holder_in_a_tall_block_is_refused(make_job: JobMaker, tmp_path: Path) -> None:
    """The holder begins 34 mm over the tip and is wider than the flutes; the block stands 40 mm over the part."""
    job = make_job(machine="mill-3", stock_extra="", top=40.0)
    tips = passes(Saddle.of(job.part), 10.4, 8.0, 0.9, 1.0)
    program = text(tips, safe=46.0)
    found = finding(verdict(job, program, tmp_path), "holder in stock")
    assert not found.ok
    assert not found.warning
    assert program.splitlines()[found.line - 1].startswith("G1")
    # The tip is down to about -0.5 at the outline's corners: at most 40.5 - 34 mm of the holder are in.
    assert -6.8 < found.worst < 0.0
    assert "into the stock as it stands" in found.message


def test_a_rapid_cannot_hide_behind_a_nearer_feed_move(block: Job) -> None:
    """Only a body's least distance is known: at feed and not shown to be clear, it says nothing good about rapids."""
    feed = np.array([False, False])
    motion = PartMotion(
        np.zeros((2, 3)), np.tile([0.0, 0.0, 1.0], (2, 1)), np.array([1, 2]), feed, np.ones(2, np.int64),
        np.array([-1, 0]), np.ones(2),
    )  # fmt: skip
    near = BodyClearance(1, "holder 1", 0.1, 0.25, 1, 2, (0.0, 0.0), -1, 0)
    assert sure_mm(near) == pytest.approx(0.1 - 0.25 - 0.02)
    assert not rapids_in_standing(block, [near], motion, rigid_clear=False).ok
    assert rapids_in_standing(block, [near], motion, rigid_clear=True).ok
    assert not holder_in_standing([near], motion)[0].ok
    clear = replace(near, distance_mm=0.3)
    assert rapids_in_standing(block, [clear], motion, rigid_clear=False).ok
    assert holder_in_standing([clear], motion)[0].ok
