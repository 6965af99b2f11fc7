"""Arcs in place of short straight moves: legal to the last digit, true to the path, fewer blocks, proven the same way."""

from __future__ import annotations

import math
import re
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from anticlast import pipeline
from anticlast.machine.axes import budget_of
from anticlast.posting import _arc_kernels
from anticlast.posting.arcs import arc_length_mm, fit_arcs
from anticlast.records import Purpose, Shape
from anticlast.saddle import Saddle
from conftest import job_text
from test_machines_end_to_end import HOLED, in_inch

MICROMETRE = 1e-3
TILE: dict[str, object] = {
    "outline": 'shape = "circle"\ndiameter = 14.0', "limit": "scallop = 0.015", "tolerance": 0.006, "a": 0.008, "top": 3.0,
    "bottom": -8.0, "margin": 2.0, "machine": "mill-3",
}  # fmt: skip
# Plane: its first, second and third axis (NISTIR 6556 section 3.5.3: arcs turn the first to the second under G3).
PLANES = {17: (0, 1, 2), 18: (2, 0, 1), 19: (1, 2, 0)}


def made_of(folder: Path, *, arcs: bool = True, inch: bool = False, **changes: object):
    text = job_text(**{**TILE, **changes})
    path = folder / "job.toml"
    path.write_text((in_inch(text) if inch else text) + (f"arcs = {str(arcs).lower()}\n"), encoding="utf-8")
    return pipeline.make(path, folder / "out", grid_mm=0.2)


def fitted(points, normal, budget_mm, *, bowed=True, side=1.0, digit=1e-4, purpose=None):
    count = len(points)
    purpose = np.zeros(count, np.uint8) if purpose is None else purpose
    return fit_arcs(
        points, normal, np.round(points / digit) * digit, purpose, np.zeros(count, np.int64), np.full(count, budget_mm), side,
        digit, bowed=bowed, inch=False,
    )  # fmt: skip


class TestFit:
    @pytest.mark.parametrize("plane", PLANES)
    @pytest.mark.parametrize("sense", [1.0, -1.0])
    def test_a_helix_is_one_arc(self, plane, sense):
        """Radius 12 about (3, -4) in the plane, 2 radians, 5 mm along the third axis: centre, angle and length come back."""
        first, second, third = PLANES[plane]
        angle = 0.3 + sense * np.linspace(0.0, 2.0, 41)
        points, normal = np.zeros((41, 3)), np.zeros((41, 3))
        points[:, first], points[:, second] = 3.0 + 12.0 * np.cos(angle), -4.0 + 12.0 * np.sin(angle)
        points[:, third] = np.linspace(1.0, 6.0, 41)
        normal[:, first], normal[:, second] = -np.cos(angle), -np.sin(angle)
        row, arcs = fitted(points, normal, 2e-4)
        assert row.tolist() == [40]
        assert arcs[0, 0] == plane
        assert arcs[0, 1] == pytest.approx(2.0 * sense, abs=2e-5)
        centre = points[0] + arcs[0, 2:]
        assert (centre[first], centre[second]) == pytest.approx((3.0, -4.0), abs=2e-4)
        assert arcs[0, 2 + third] == 0.0
        length = arc_length_mm(arcs, (points[-1] - points[0])[None, :])
        assert length[0] == pytest.approx(math.hypot(24.0, 5.0), abs=5e-4)

    def test_a_straight_line_stays_straight(self):
        points = np.column_stack([np.linspace(0, 10, 11), np.zeros(11), np.zeros(11)])
        row, arcs = fitted(points, np.tile([0.0, 0.0, 1.0], (11, 1)), 1e-4)
        assert row.tolist() == list(range(1, 11))
        assert not arcs.any()

    def test_blocks_do_not_cross_from_one_purpose_to_the_next(self):
        angle = np.linspace(0.0, 1.0, 21)
        points = np.column_stack([9 * np.cos(angle), 9 * np.sin(angle), np.zeros(21)])
        purpose = np.where(np.arange(21) <= 7, Purpose.CUT, Purpose.LINK).astype(np.uint8)
        row, _ = fitted(points, -points / 9.0, 2e-4, purpose=purpose)
        assert row.tolist() == [7, 20]

    @pytest.mark.parametrize(("a", "budget"), [(0.005, 3e-4), (0.02, 3e-4), (0.02, 2e-3)])
    def test_a_parabola_takes_hardly_more_arcs_than_it_must(self, a, budget):
        """Against greedy arcs whose radius scipy's bounded minimiser picks for the least largest distance of 200 places."""
        x = np.linspace(-15.0, 15.0, 301)
        points = np.column_stack([x, np.zeros(301), a * x * x])
        normal = np.column_stack([-2 * a * x, np.zeros(301), np.ones(301)])
        normal /= np.linalg.norm(normal, axis=1)[:, None]
        row, arcs = fitted(points, normal, budget)
        assert (arcs[:, 0] == 18).all()
        ends = np.concatenate(([0], row))
        worst = 0.0
        for i, j, arc in zip(ends[:-1], ends[1:], arcs, strict=True):
            dense = np.linspace(x[i], x[j], 200)
            centre = points[i] + arc[2:]
            off = np.hypot(dense - centre[0], a * dense * dense - centre[2]) - math.hypot(arc[2], arc[4])
            worst = max(worst, float(np.abs(off).max()))
        # 0.07 um for the ends and 0.07 um for the centre, rounded to 1e-4 mm
        assert worst <= budget + 0.15 * MICROMETRE
        best, at = 0, 0
        while at < 300:
            far = at + 1
            while far < 300 and least_distance(a, x[at], x[far + 1]) <= budget:
                far += 1
            best, at = best + 1, far
        assert best <= len(row) <= 1.3 * best + 1

    def test_interpreted_kernel_agrees(self):
        x = np.linspace(0.0, 4.0, 17)
        points = np.column_stack([x, 0.01 * x, 0.02 * x * x])
        normal = np.column_stack([-0.04 * x, np.zeros(17), np.ones(17)])
        normal /= np.linalg.norm(normal, axis=1)[:, None]
        args = (
            points, normal, np.zeros(17), np.round(points, 4), np.zeros(17, np.int64), np.full(17, 3e-4), 0.5, 1e-4, 1e-3, 1e3,
        )  # fmt: skip
        fast, plain = _arc_kernels.fit_all(*args), _arc_kernels.fit_all.py_func(*args)
        assert fast[0].tolist() == plain[0].tolist()
        assert fast[1] == pytest.approx(plain[1], abs=1e-12)
        assert _arc_kernels.fit_one.py_func(
            *args[:4], 0, int(fast[0][0]), int(fast[1][0, 0]), 0.5, 3e-4, 1e-4, 1e-3, 1e3, np.zeros(5)
        )


def least_distance(a: float, x0: float, x1: float) -> float:
    """Largest distance of the parabola z = a x^2 from the best circle through its ends at x0 and x1."""
    p, q = np.array([x0, a * x0 * x0]), np.array([x1, a * x1 * x1])
    along = (q - p) / np.linalg.norm(q - p)
    left = np.array([-along[1], along[0]])
    dense = np.linspace(x0, x1, 200)
    places = np.column_stack([dense, a * dense * dense])

    def worst(away: float) -> float:
        centre = (p + q) / 2 + away * left
        return float(np.abs(np.linalg.norm(places - centre, axis=1) - np.linalg.norm(p - centre)).max())

    rough = 0.5 / a
    return float(
        minimize_scalar(
            worst, bounds=(0.5 * rough, 6.0 * rough), method="bounded", options={"xatol": 1e-6}
        ).fun
    )


# ------------------------------------------------------------------------------------------ from job to proof

CASES: dict[str, dict[str, object]] = {
    "along X": {"direction": 0.0},
    "along Y": {"direction": 90.0, "pattern": "graded"},
    "aslant": {"direction": 30.0},
    "fixed axis on a table": {
        "machine": "trunnion-ac",
        "tilt": 'axis = "fixed"\nfixed = [0.1, 0.15, 1.0]',
        "outline": HOLED,
    },
}


@pytest.mark.parametrize("name", CASES)
def test_fewer_blocks_and_the_same_surface(name: str, tmp_path: Path) -> None:
    made = {}
    for arcs in (False, True):
        folder = tmp_path / str(arcs)
        folder.mkdir()
        made[arcs] = made_of(folder, arcs=arcs, **CASES[name])
        assert made[arcs].released, [finding.message for finding in made[arcs].findings if not finding.ok]
    straight, bent = made[False], made[True]
    assert bent.program.blocks <= straight.program.blocks / 2
    turning = np.isin(bent.program.motions.shape, (Shape.ARC_CW, Shape.ARC_CCW))
    assert turning.sum() > 20
    assert not np.isin(straight.program.motions.shape, (Shape.ARC_CW, Shape.ARC_CCW)).any()
    operation = bent.job.operations[0]
    # Straight moves may use up the share of the scallop that is set aside for them, and arcs leave some of it.
    assert bent.proof.scallop_max_mm == pytest.approx(
        straight.proof.scallop_max_mm, abs=0.03 * operation.scallop_mm
    )
    assert bent.proof.scallop_max_mm <= operation.scallop_mm
    assert bent.times.seconds.sum() <= 1.02 * straight.times.seconds.sum()


def test_read_back_arcs_keep_the_ball_on_the_surface(tmp_path: Path) -> None:
    """The ball's centre on every cutting arc, by the reader's own way, is one radius from the saddle."""
    made = made_of(tmp_path, direction=0.0)
    motions, motion, axes = made.program.motions, made.part_motion, made.axis_paths[0]
    turning = np.flatnonzero(np.isin(motions.shape, (Shape.ARC_CW, Shape.ARC_CCW)))
    purpose = axes.purpose[axes.arcs[:, 0] > 0]
    assert len(purpose) == len(turning)
    cutting = np.isin(motion.motion, turning[purpose <= Purpose.OVERRUN])
    operation = made.job.operations[0]
    centre = motion.tip_mm + operation.cutter.radius_mm * motion.axis
    _, distance = Saddle.of(made.job.part).closest(centre[cutting])
    assert cutting.sum() > 500
    # Budget, 0.09 um of rounding at each end, 0.09 um of the centre's.
    allowed = budget_of(operation).point_mm + 0.27 * MICROMETRE
    assert np.abs(distance - operation.cutter.radius_mm).max() <= allowed


@pytest.mark.parametrize("inch", [False, True])
def test_every_arc_is_legal(inch: bool, tmp_path: Path) -> None:
    """NISTIR 6556 section 3.5.3.2, by hand: plane stated, both centre words, radii at both ends alike after rounding."""
    made = made_of(tmp_path, inch=inch, direction=90.0)
    assert made.released, [finding.message for finding in made.findings if not finding.ok]
    limit = 0.0002 if inch else 0.002
    plane, mode, at, arcs, worst = "G17", "", {"X": math.nan, "Y": math.nan, "Z": math.nan}, 0, 0.0
    for line in (tmp_path / "out" / "test-tile.ngc").read_text(encoding="ascii").splitlines():
        if line[0] in "(%":
            continue
        codes = [word for word in line.split() if word[0] == "G"]
        plane = next((code for code in codes if code in ("G17", "G18", "G19")), plane)
        mode = next((code for code in codes if code in ("G0", "G1", "G2", "G3")), mode)
        words = {word[0]: float(word[1:]) for word in line.split() if word[0] in "XYZIJK"}
        assert len(words) == len([word for word in line.split() if word[0] in "XYZIJK"])
        if mode in ("G2", "G3") and words:
            arcs += 1
            pair = {"G17": "XY", "G18": "ZX", "G19": "YZ"}[plane]
            offset = {letter: "IJK"["XYZ".index(letter)] for letter in pair}
            assert {*offset.values()} == {letter for letter in words if letter in "IJK"}
            assert any(letter in words for letter in pair)
            start = math.hypot(*(words[offset[letter]] for letter in pair))
            end = math.hypot(
                *(words.get(letter, at[letter]) - at[letter] - words[offset[letter]] for letter in pair)
            )
            worst = max(worst, abs(start - end))
        else:
            assert not {"I", "J", "K"} & set(words)
        at |= {letter: value for letter, value in words.items() if letter in at}
    assert arcs > 20
    assert worst <= limit / 2
    assert plane == "G17"


def test_feed_of_an_arc_is_along_the_helix(tmp_path: Path) -> None:
    """Section 2.1.2.6. Seconds read back from F are those that were asked for: within 2 % slower, the rest is block rate."""
    made = made_of(tmp_path, direction=0.0)
    motions, axes = made.program.motions, made.axis_paths[0]
    rows = np.flatnonzero(axes.arcs[:, 0] > 0)
    turning = np.isin(motions.shape, (Shape.ARC_CW, Shape.ARC_CCW))
    ratio = motions.seconds[turning] / (60.0 * axes.minutes[rows])
    assert ratio.min() >= 0.999
    assert ratio.max() <= 1.021


def test_off_by_default_and_where_rotary_axes_move(tmp_path: Path) -> None:
    (tmp_path / "job.toml").write_text(job_text(**TILE), encoding="utf-8")
    pipeline.make(tmp_path / "job.toml", tmp_path / "plain", grid_mm=0.5)
    plain = (tmp_path / "plain" / "test-tile.ngc").read_bytes()
    made_of(tmp_path, arcs=False)
    assert (tmp_path / "out" / "test-tile.ngc").read_bytes() == plain
    assert not re.search(rb"\bG[23]\b", plain)
    made = made_of(tmp_path, machine="trunnion-ac", outline='shape = "circle"\ndiameter = 6.0')
    assert made.released
    assert made.axis_paths[0].arcs is None
