"""Kinematics against published-style worked poses, scipy's rotations, brute force, and round trips on many machines."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from anticlast.errors import BadInput
from anticlast.machine import _kernels
from anticlast.machine.kinematics import Kinematics
from anticlast.records import Axis, Control, Machine, Spindle

MICRO = 1e-6
CONTROL = Control("inverse", "G64", 4, 4, 3, 500.0, False, "M2")


def linear(letter: str, low: float = -200.0, high: float = 400.0) -> Axis:
    return Axis(letter, "linear", (low, high), 3000.0, 2000.0, 400.0, 8000.0)


def rotary(letter, direction, carries, turns=None, limits=None, through=(0.0, 0.0, 0.0)) -> Axis:
    turns = turns if turns is not None else (-1 if carries == "work" else 1)
    return Axis(
        letter,
        "rotary",
        limits,
        3600.0,
        3600.0,
        1500.0,
        3e4,
        carries,
        tuple(direction),
        tuple(through),
        turns,
    )


def machine(*axes: Axis, pivot: float = 0.0, name: str = "made here") -> Machine:
    linears = (linear("X"), linear("Y"), linear("Z"))
    spindle = Spindle(2000, 24000, 0.35)
    return Machine(name, name, "mm", pivot, linears + axes, spindle, CONTROL, Path("made-here.toml"))


X, Y, Z = (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0)
HALF = math.sqrt(0.5)
# The six machines that ship, as the documentation lists them.
SHIPPED = {
    "mill-3": machine(),
    "rotary-a": machine(rotary("A", X, "work", limits=(-110, 110))),
    "rotary-b": machine(rotary("B", Y, "work", limits=(-110, 110))),
    "trunnion-ac": machine(rotary("A", X, "work", limits=(-120, 30)), rotary("C", Z, "work")),
    "trunnion-bc": machine(rotary("B", Y, "work", limits=(-30, 120)), rotary("C", Z, "work")),
    "head-b-table-c": machine(rotary("B", Y, "cutter", limits=(-95, 95)), rotary("C", Z, "work"), pivot=40.0),
}
OTHERS = {
    "head-cb": machine(rotary("C", Z, "cutter"), rotary("B", Y, "cutter"), pivot=120.0),
    "nutating head": machine(rotary("C", Z, "cutter"), rotary("B", (0, HALF, HALF), "cutter"), pivot=80.0),
    "nutating table": machine(
        rotary("B", (0, -HALF, HALF), "work", through=(0, 5, -30)), rotary("C", Z, "work", through=(1, 2, 3))
    ),
    "table A, head B": machine(
        rotary("A", X, "work", through=(0, 3, -20)), rotary("B", Y, "cutter"), pivot=50.0
    ),
    "head B, table A": machine(rotary("B", Y, "cutter"), rotary("A", X, "work", turns=1), pivot=50.0),
    "trunnion-ac off crossing": machine(
        rotary("A", X, "work", through=(0, 0, -12)), rotary("C", Z, "work", through=(0, 7, 0))
    ),
}
# Point (20, 10) of z = 0.01 (x^2 - y^2) and its normal; derived in docs/theory-machine.md, digits checked there.
POINT = np.array([[20.0, 10.0, 3.0]])
NORMAL = np.array([[-0.36514837, 0.18257419, 0.91287093]])


def random_axes(rng: np.random.Generator, count: int, tilt_max_deg: float = 180.0) -> np.ndarray:
    tilt = np.radians(rng.uniform(0.0, tilt_max_deg, count))
    around = rng.uniform(-math.pi, math.pi, count)
    return np.column_stack([np.sin(tilt) * np.cos(around), np.sin(tilt) * np.sin(around), np.cos(tilt)])


def twin_forward(kin: Kinematics, words: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Forward kinematics by scipy's Rotation, straight from the chain's definition, one pose at a time."""
    tips, axes = [], []
    for row in words:
        head, table = Rotation.identity(), []
        for axis, word in zip(kin.machine.rotary, row[3:], strict=True):
            turn = Rotation.from_rotvec(np.radians(axis.turns * word) * np.array(axis.direction))
            if axis.carries == "cutter":
                head = head * turn
            else:
                table.append((turn, np.array(axis.through)))
        spindle = head.apply([0.0, 0.0, 1.0])
        length = kin.machine.pivot_length_mm + kin.gauge_length_mm
        point = row[:3] + kin.part_origin_mm + np.array([0, 0, length]) - length * spindle
        for turn, through in table:
            point = turn.inv().apply(point - through) + through
            spindle = turn.inv().apply(spindle)
        tips.append(point - kin.part_origin_mm)
        axes.append(spindle)
    return np.array(tips), np.array(axes)


class TestWorkedPoses:
    """The worked pose of docs/theory-machine.md: pivots meet at the work origin, cutter along machine Z at rotary zero."""

    def test_table_ac(self):
        kin = Kinematics(SHIPPED["trunnion-ac"], (0, 0, 0), 60.0)
        words, valid = kin.inverse(POINT, NORMAL)
        assert valid.all()
        found = words[0][np.argsort(words[0][:, 3])]
        # A table axis has turns = -1: words are the negatives of R = Rx(A) Rz(C) angles, which carry the normal to Z.
        expected = [[-24.09484255, 63.43494882], [24.09484255, -116.56505118]]
        assert found[:, 3:] == pytest.approx(np.array(expected), abs=MICRO)
        assert found[0, :3] == pytest.approx([17.88854382, -13.47219359, -2.73861279], abs=MICRO)

    def test_table_bc(self):
        kin = Kinematics(SHIPPED["trunnion-bc"], (0, 0, 0), 60.0)
        words, valid = kin.inverse(POINT, NORMAL)
        assert valid.all()
        found = words[0][np.argsort(words[0][:, 3])]
        assert found[0, 3:] == pytest.approx([-24.09484255, -26.56505118], abs=MICRO)
        assert found[0, :3] == pytest.approx([13.47219359, 17.88854382, -2.73861279], abs=MICRO)

    def test_head_cb(self):
        kin = Kinematics(machine(rotary("C", Z, "cutter"), rotary("B", Y, "cutter")), (0, 0, 0), 60.0)
        words, _ = kin.inverse(POINT, NORMAL)
        found = words[0][np.argmax(words[0][:, 4])]
        assert found[[4, 3]] == pytest.approx([24.09484255, 153.43494882], abs=MICRO)
        # tip = XYZ + (0, 0, L) - L u
        assert found[:3] + [0, 0, 60.0] - 60.0 * NORMAL[0] == pytest.approx(POINT[0], abs=10 * MICRO)

    def test_mixed_table_a_head_b(self):
        kin = Kinematics(machine(rotary("A", X, "work", turns=1), rotary("B", Y, "cutter")), (0, 0, 0), 60.0)
        words, _ = kin.inverse(POINT, NORMAL)
        found = words[0][np.argmin(np.abs(words[0][:, 4]))]
        assert found[3:] == pytest.approx([11.30993247, -21.41671403], abs=MICRO)


@pytest.mark.parametrize("name", [*SHIPPED, *OTHERS])
class TestEveryMachine:
    def test_forward_agrees_with_scipy(self, name):
        kin = Kinematics({**SHIPPED, **OTHERS}[name], (3.0, -4.0, 55.0), 67.0)
        rng = np.random.default_rng(1)
        words = rng.uniform(-170, 170, (40, 3 + kin.rotary_count))
        tip, axis = kin.forward(words)
        twin_tip, twin_axis = twin_forward(kin, words)
        assert tip == pytest.approx(twin_tip, abs=1e-11)
        assert axis == pytest.approx(twin_axis, abs=1e-13)

    def test_rotary_zero_reads_part_coordinates(self, name):
        kin = Kinematics({**SHIPPED, **OTHERS}[name], (3.0, -4.0, 55.0), 67.0)
        words = np.zeros((1, 3 + kin.rotary_count))
        words[0, :3] = [5.0, 6.0, 7.0]
        tip, axis = kin.forward(words)
        assert tip[0] == pytest.approx([5.0, 6.0, 7.0], abs=1e-12)
        assert axis[0] == pytest.approx([0.0, 0.0, 1.0], abs=1e-14)
        assert kin.gauge_point(words)[0] == pytest.approx([8.0, 2.0, 62.0 + 67.0], abs=1e-12)

    def test_every_branch_returns_to_the_pose(self, name):
        kin = Kinematics({**SHIPPED, **OTHERS}[name], (3.0, -4.0, 55.0), 67.0)
        rng = np.random.default_rng(2)
        made = rng.uniform(-179, 179, (200, 3 + kin.rotary_count))
        tip, axis = kin.forward(made)
        words, valid = kin.inverse(tip, axis)
        assert valid.all()
        for branch in range(words.shape[1]):
            again_tip, again_axis = kin.forward(np.ascontiguousarray(words[:, branch]))
            assert again_axis == pytest.approx(axis, abs=1e-9)
            assert again_tip == pytest.approx(tip, abs=1e-7)
        difference = words[:, :, 3:] - made[:, None, 3:]
        difference -= 360.0 * np.round(difference / 360.0)
        assert np.abs(difference).max(axis=2, initial=0.0).min(axis=1).max() < MICRO

    def test_gauge_point_is_the_spindle_end_in_the_machine_frame(self, name):
        kin = Kinematics({**SHIPPED, **OTHERS}[name], (3.0, -4.0, 55.0), 67.0)
        words = np.random.default_rng(3).uniform(-90, 90, (20, 3 + kin.rotary_count))
        if kin.carries_cutter:
            # The pivot lies pivot_length behind the gauge point along the spindle and moves with XYZ alone.
            pivot = kin.gauge_point(words) + kin.machine.pivot_length_mm * kin.spindle(words)
            still = words[:, :3] + kin.part_origin_mm + [0, 0, 67.0 + kin.machine.pivot_length_mm]
            assert pivot == pytest.approx(still, abs=1e-11)
        else:
            assert kin.gauge_point(words) == pytest.approx(
                words[:, :3] + kin.part_origin_mm + [0, 0, 67.0], abs=1e-11
            )

    def test_nearest_axis_beats_a_grid_search(self, name):
        kin = Kinematics({**SHIPPED, **OTHERS}[name], (0, 0, 0), 60.0)
        wished = random_axes(np.random.default_rng(4), 60)
        found = kin.nearest_axis(wished)
        assert np.linalg.norm(found, axis=1) == pytest.approx(np.ones(60), abs=1e-12)
        ranges = [
            np.linspace(*(a.limits if a.limits is not None else (-180.0, 180.0)), 181)
            for a in kin.machine.rotary
        ]
        grid = (
            np.stack(np.meshgrid(*ranges, indexing="ij"), axis=-1).reshape(-1, len(ranges))
            if ranges
            else None
        )
        rot = grid if grid is not None else np.zeros((1, 0))
        _, reachable = kin.forward(np.column_stack([np.zeros((len(rot), 3)), rot]))
        best = (wished @ reachable.T).max(axis=1)
        dots = np.sum(wished * found, axis=1)
        assert (dots >= best - 1e-12).all()
        # and it is no better than a grid of 2 degrees allows: nothing out of reach is claimed
        assert (np.arccos(np.clip(best, -1, 1)) - np.arccos(np.clip(dots, -1, 1))).max() < math.radians(3.0)


class TestChain:
    @settings(max_examples=60, derandomize=True, deadline=None)
    @given(
        seed=st.integers(0, 10**6),
        carries=st.tuples(st.sampled_from(["work", "cutter"]), st.sampled_from(["work", "cutter"])),
        turns=st.tuples(st.sampled_from([-1, 1]), st.sampled_from([-1, 1])),
    )
    def test_random_directions_pivots_and_senses(self, seed, carries, turns):
        rng = np.random.default_rng(seed)
        directions = random_axes(rng, 2)
        if np.linalg.norm(np.cross(*directions)) < 0.2:
            return
        axes = [
            rotary(letter, d, c, turns=t, through=rng.uniform(-50, 50, 3))
            for letter, d, c, t in zip("AC", directions, carries, turns, strict=True)
        ]
        kin = Kinematics(machine(*axes, pivot=rng.uniform(0, 100)), rng.uniform(-50, 50, 3), 60.0)
        made = rng.uniform(-179, 179, (30, 5))
        tip, axis = kin.forward(made)
        twin_tip, twin_axis = twin_forward(kin, made)
        assert tip == pytest.approx(twin_tip, abs=1e-10)
        words, valid = kin.inverse(tip, axis)
        assert valid.all()
        for branch in range(2):
            again_tip, again_axis = kin.forward(np.ascontiguousarray(words[:, branch]))
            assert again_axis == pytest.approx(twin_axis, abs=1e-7)
            assert again_tip == pytest.approx(twin_tip, abs=2e-5)

    def test_small_tilts_keep_their_digits(self):
        """Next to the pole the tilt comes out to full relative precision, and the tip does not move."""
        kin = Kinematics(SHIPPED["trunnion-ac"], (0, 0, 55.0), 60.0)
        tilt = np.array([1e-6, 1e-4, 1e-2])
        axis = np.column_stack([np.sin(tilt), np.zeros(3), np.cos(tilt)])
        words, valid = kin.inverse(np.zeros((3, 3)), axis)
        assert valid.all()
        assert np.abs(words[:, :, 3]) == pytest.approx(np.degrees(tilt)[:, None] * np.ones((1, 2)), rel=1e-9)

    def test_pole_keeps_the_word_it_is_told(self):
        kin = Kinematics(SHIPPED["trunnion-ac"], (10.0, 0, 55.0), 60.0)
        words, valid = kin.inverse([[1.0, 2.0, 3.0]], [[0.0, 0.0, 1.0]], near=[0.0, 423.5])
        assert valid.all()
        assert words[0, :, 4] == pytest.approx([423.5, 423.5])
        tip, _ = kin.forward(words[0])
        assert tip == pytest.approx(np.array([[1.0, 2.0, 3.0]] * 2), abs=1e-9)

    def test_out_of_reach_is_not_valid(self):
        kin = Kinematics(SHIPPED["rotary-a"], (0, 0, 0), 60.0)
        _, valid = kin.inverse([[0.0, 0.0, 0.0]], [[math.sin(0.1), 0.0, math.cos(0.1)]])
        assert not valid.any()
        nutating = Kinematics(
            machine(rotary("C", Z, "work"), rotary("B", (0, 0.5, math.sqrt(0.75)), "cutter")), (0, 0, 0), 60
        )
        _, valid = nutating.inverse(
            [[0.0, 0.0, 0.0]], random_axes(np.random.default_rng(0), 1, 0.0) * [1, 1, -1]
        )
        assert not valid.any()

    def test_parallel_axes_are_refused(self):
        twins = machine(rotary("A", X, "work"), rotary("B", X, "work"))
        with pytest.raises(BadInput, match="A and B are parallel"):
            Kinematics(twins, (0, 0, 0), 60.0)

    def test_wrong_shape_is_refused(self):
        with pytest.raises(ValueError, match=r"shape \(n, 5\)"):
            Kinematics(SHIPPED["trunnion-ac"], (0, 0, 0), 60.0).forward([[0.0, 0.0, 0.0]])

    def test_lists_and_float32_are_taken(self):
        kin = Kinematics(SHIPPED["trunnion-ac"], (0, 0, 0), 60.0)
        words = np.asfortranarray(np.array([[1, 2, 3, 10, 20], [4, 5, 6, -10, 40]], dtype=np.float32))
        assert kin.forward(words)[0] == pytest.approx(kin.forward(words.tolist())[0], abs=1e-12)


def test_interpreted_kernel_agrees():
    """The compiled solver and the same source run by plain Python give the same words."""
    kin = Kinematics(OTHERS["nutating table"], (1, 2, 3), 60.0)
    axis = kin.forward(np.random.default_rng(5).uniform(-150, 150, (20, 5)))[1]
    fast = _kernels.solve_rotary(kin.chain, 1e-7, axis)
    plain = _kernels.solve_rotary.py_func(kin.chain, 1e-7, axis)
    for one, other in zip(fast, plain, strict=True):
        assert one == pytest.approx(other, abs=1e-12)
    wished = random_axes(np.random.default_rng(6), 20)
    args = (kin.chain, np.array([-40.0, -100.0]), np.array([70.0, 20.0]), 1e-7, wished)
    assert _kernels.nearest_axis(*args) == pytest.approx(_kernels.nearest_axis.py_func(*args), abs=1e-12)
