"""One token of a sound program is spoilt: whatever does harm by brute force must be withheld."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import mutate
from anticlast.proof.verdict import prove
from anticlast.readback.reader import read_program
from anticlast.records import Job, Proof, ReadProgram
from anticlast.saddle import Saddle
from conftest import JobMaker
from test_verdict import passes, text

COUNT, SEED, GRID_MM = 60, 20, 0.5


@pytest.fixture
def small(make_job: JobMaker) -> Job:
    return make_job(
        machine="mill-3", stock_extra="", outline='shape = "rectangle"\nsize = [6.0, 5.0]', top=4.0
    )


def program(job: Job) -> str:
    return text(passes(Saddle.of(job.part), 3.4, 2.5, 0.45, 0.5), safe=9.5)


def prover(job: Job) -> mutate.Prove:
    lengths = {cutter.number: cutter.gauge_length_mm for cutter in job.cutters}

    def run(path: Path) -> tuple[Proof, ReadProgram]:
        read = read_program(path, length_offsets=lengths)
        return prove(job, read, GRID_MM)[0], read

    return run


def test_nothing_harmful_slips_through(small: Job, tmp_path: Path) -> None:
    outcomes = mutate.run(small, program(small), COUNT, SEED, tmp_path, prover(small))
    table = mutate.table(outcomes)
    print(table)
    assert not [one for one in outcomes if one.escaped], table
    # The mutations are not all of one fate: some do harm that the judge sees, some change nothing at all.
    assert sum(bool(one.harm) for one in outcomes) >= COUNT // 5
    assert any(one.same and one.released for one in outcomes)
    assert len({check for one in outcomes for check in one.caught_by}) >= 5


def test_the_judge_knows_harm_from_none(small: Job, tmp_path: Path) -> None:
    """A sound program does none; deeper by 20 um it gouges; with two passes left out a ridge stands; a low rapid hits."""
    path = tmp_path / "program.ngc"
    lengths = {cutter.number: cutter.gauge_length_mm for cutter in small.cutters}

    def judged(content: str) -> list[str]:
        path.write_text(content, encoding="utf-8")
        return mutate.harm(small, read_program(path, length_offsets=lengths, plain_lines=False))

    saddle, sound = Saddle.of(small.part), program(small)
    tips = passes(saddle, 3.4, 2.5, 0.45, 0.5)
    assert judged(sound) == []
    assert judged(text(passes(saddle, 3.4, 2.5, 0.45, 0.5, -0.02), safe=9.5)) == ["gouge"]
    assert judged(text([*tips[:6], *tips[8:]], safe=9.5)) == ["scallop"]
    assert judged(sound.replace("G0 Z9.5000\nG1", "G0 Z2.0000\nG1", 1)) == ["collision"]
    assert judged(sound.replace("S16000", "S1600")) == ["spindle"]
    # s^2 / 8 (1/R - 2a) of a stepover of 0.425 mm, R = 3 mm: 7.30 um (derived here). No node is nearer than 0.0125 mm to a cusp,
    # whose flanks rise by s / 2R: 0.89 um less.
    path.write_text(sound, encoding="utf-8")
    left = mutate.residuals(small, mutate.walk(small, read_program(path, length_offsets=lengths)).tip)
    assert left.max() == pytest.approx(0.0073 - 0.00089, abs=0.0002)
    assert np.median(left) > 0.0
