"""Forward kinematics of read-back programs: worked poses, scipy, straightness of the pieces, axis travel."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from anticlast import tolerances
from anticlast.errors import BadInput
from anticlast.machine.definition import load_machine
from anticlast.readback import _forward_kernels as kernels
from anticlast.readback.forward import axis_travel, part_motion
from anticlast.readback.reader import read_bytes
from anticlast.records import SIX, Axis, Control, Machine, PartMotion, ReadProgram, Shape, Spindle

NANOMETRE = 1e-6
WORKED = 2e-8  # the worked poses are stated to eight decimals
MODES = "G21\nG17 G40 G49 G80 G90 G94\nG54 G64\nT1 M6\nS1000 M3\nG43 H1\n"


def read(body: str) -> ReadProgram:
    program = read_bytes((MODES + body + "\nM2\n").encode(), "p")
    assert not [found for found in program.findings if found.check == "language"], program.findings
    return program


def rotary(letter: str, carries: str, turns: int, direction=None, through=(0.0, 0.0, 0.0)) -> Axis:
    along = direction or {"A": (1.0, 0.0, 0.0), "B": (0.0, 1.0, 0.0), "C": (0.0, 0.0, 1.0)}[letter]
    return Axis(letter, "rotary", None, 3600, 3600, 1500, 30000, carries, along, through, turns)


def machine(*axes: Axis, pivot: float = 0.0) -> Machine:
    linear = tuple(Axis(letter, "linear", (-200.0, 200.0), 3000, 2000, 400, 8000) for letter in "XYZ")
    control = Control("inverse", "G64", 4, 4, 3, 500.0, False, "M2")
    return Machine(
        "m", "m", "mm", pivot, (*linear, *axes), Spindle(0.0, 24000.0, 0.3), control, Path("m.toml")
    )


def twin(words: np.ndarray, what: Machine, origin: np.ndarray, offset: float, gauge: float):
    """Twin of the kernel with scipy: definition of the machine file, read the other way round."""

    def turn(axis: Axis) -> Rotation:
        return Rotation.from_rotvec(
            np.radians(axis.turns * words[SIX.index(axis.letter)]) * np.array(axis.direction)
        )

    head = Rotation.identity()
    for axis in what.rotary:
        if axis.carries == "cutter":
            head = head * turn(axis)
    direction = head.apply([0.0, 0.0, 1.0])
    pivot = what.pivot_length_mm
    tip = words[:3] + origin + [0.0, 0.0, pivot + offset] - (pivot + gauge) * direction
    gauge_point = tip + gauge * direction
    for axis in what.rotary:
        if axis.carries == "work":
            tip = turn(axis).inv().apply(tip - axis.through) + axis.through
            direction = turn(axis).inv().apply(direction)
    return tip - origin, direction, gauge_point


# The worked pose: a = 0.01, point (20, 10, 3) of z = a (x^2 - y^2), cutter axis along the normal. Derived
# here: the normal is (-0.4, 0.2, 1) / sqrt(1.2). Matrices right-handed, so all axes turn +1.
NORMAL = np.array([-0.4, 0.2, 1.0]) / math.sqrt(1.2)
POSES = [
    (("A", "C"), "work", {"A": 24.09484255, "C": -63.43494882}, (17.88854382, -13.47219359, -2.73861279)),
    (("A", "C"), "work", {"A": -24.09484255, "C": 116.56505118}, (-17.88854382, 13.47219359, -2.73861279)),
    (("B", "C"), "work", {"B": 24.09484255, "C": 26.56505118}, (13.47219359, 17.88854382, -2.73861279)),
]


@pytest.mark.parametrize(("letters", "carries", "turns", "point"), POSES)
def test_worked_poses_of_tables(letters, carries, turns, point) -> None:
    what = machine(*(rotary(letter, carries, 1) for letter in letters))
    words = dict(zip("XYZ", point, strict=True)) | turns
    motion = part_motion(
        read("G0 " + " ".join(f"{k}{v:.8f}" for k, v in words.items())), what, (0, 0, 0), {1: 30.0}
    )
    assert motion.tip_mm[-1] == pytest.approx([20.0, 10.0, 3.0], abs=WORKED)
    assert motion.axis[-1] == pytest.approx(NORMAL, abs=1e-9)


def test_worked_poses_of_heads() -> None:
    head = machine(rotary("C", "cutter", 1), rotary("B", "cutter", 1), pivot=40.0)
    motion = part_motion(read("G0 B24.09484255 C153.43494882"), head, (0, 0, 0), {1: 30.0})
    assert motion.axis[-1] == pytest.approx(NORMAL, abs=1e-9)
    assert motion.tip_mm[-1] == pytest.approx([0.0, 0.0, 70.0] - 70.0 * NORMAL, abs=NANOMETRE)
    mixed = machine(rotary("A", "work", 1), rotary("B", "cutter", 1))
    motion = part_motion(read("G0 A11.30993247 B-21.41671403"), mixed, (0, 0, 0), {1: 30.0})
    assert motion.axis[-1] == pytest.approx(NORMAL, abs=1e-9)


def test_signs_of_the_standard() -> None:
    """ISO 841: a positive word of an axis that carries the work turns it left-handed; here a table C at +90.

    The work turns clockwise seen from above, so what lay along part +Y now points along machine +X.
    """
    table = machine(rotary("C", "work", -1))
    motion = part_motion(read("G0 X10 Y0 Z0 C90"), table, (0, 0, 25.0), {1: 30.0})
    assert motion.tip_mm[-1] == pytest.approx([0.0, 10.0, 0.0], abs=NANOMETRE)
    head = machine(rotary("B", "cutter", 1), pivot=40.0)
    motion = part_motion(read("G0 X0 B90"), head, (0, 0, 0), {1: 30.0})
    assert motion.axis[-1] == pytest.approx(
        [1.0, 0.0, 0.0], abs=NANOMETRE
    )  # B+ leans the cutter's upper end to +X
    assert motion.tip_mm[-1] == pytest.approx([-70.0, 0.0, 70.0], abs=NANOMETRE)


def test_at_rotary_zero_words_are_part_coordinates() -> None:
    for what in (
        machine(),
        machine(rotary("A", "work", -1), rotary("C", "work", -1)),
        machine(rotary("B", "cutter", 1), pivot=9),
    ):
        motion = part_motion(read("G0 X1 Y2 Z3\nG1 X4 F5"), what, (7.0, -3.0, 55.0), {1: 41.0})
        assert motion.tip_mm[-2:] == pytest.approx(np.array([[1, 2, 3], [4, 2, 3]]), abs=NANOMETRE)
        assert motion.axis[-1] == pytest.approx([0, 0, 1], abs=NANOMETRE)


def random_machine(rng: np.random.Generator) -> Machine:
    axes = []
    for letter in rng.permutation(list("ABC"))[: rng.integers(1, 4)]:
        direction = rng.normal(size=3)
        direction /= np.linalg.norm(direction)
        through = tuple(rng.normal(size=3) * 20)
        axes.append(
            rotary(
                str(letter),
                ["work", "cutter"][rng.integers(2)],
                int(rng.choice([-1, 1])),
                tuple(direction),
                through,
            )
        )
    return machine(*axes, pivot=float(rng.uniform(0, 60)))


def test_random_machines_agree_with_scipy() -> None:
    """Poses at the ends of all motions, for axes in any direction through any point, and a wrong H."""
    rng = np.random.default_rng(841)
    for _ in range(25):
        what = random_machine(rng)
        origin = rng.normal(size=3) * 30
        words = np.round(rng.normal(size=(6, 6)) * [20, 20, 20, 40, 40, 40], 4)
        lines = ["G0 " + " ".join(f"{k}{v}" for k, v in zip(SIX, row.tolist(), strict=True)) for row in words]
        lines.insert(3, "G43 H2")
        motion = part_motion(read("\n".join(lines)), what, origin, {1: 30.0, 2: 37.5})
        for k, row in enumerate(words):
            tip, axis, _ = twin(row, what, origin, 30.0 if k < 3 else 37.5, 30.0)
            last = np.flatnonzero(motion.motion == k)[-1]
            assert motion.fraction[last] == 1.0
            assert motion.tip_mm[last] == pytest.approx(tip, abs=NANOMETRE)
            assert motion.axis[last] == pytest.approx(axis, abs=1e-9)


def words_at(program: ReadProgram, m: int, part: float) -> np.ndarray:
    """Words part of the way along a motion; arcs in the XY plane."""
    moves = program.motions
    words = moves.start[m] + part * (moves.end[m] - moves.start[m])
    if moves.shape[m] >= Shape.ARC_CW:
        spoke = moves.start[m, :2] - moves.centre[m, :2]
        angle = (-1.0 if moves.shape[m] == Shape.ARC_CW else 1.0) * part * moves.turns[m]
        cosine, sine = math.cos(angle), math.sin(angle)
        words[:2] = moves.centre[m, :2] + [
            spoke[0] * cosine - spoke[1] * sine,
            spoke[0] * sine + spoke[1] * cosine,
        ]
    return words


@pytest.mark.parametrize(
    "name", ["mill-3", "rotary-a", "rotary-b", "trunnion-ac", "trunnion-bc", "head-b-table-c"]
)
def test_shipped_machines_agree_with_scipy(name: str) -> None:
    what = load_machine(name)
    rng = np.random.default_rng(5)
    origin = np.array([3.0, -4.0, 55.0])
    for row in np.round(rng.normal(size=(20, 6)) * [20, 20, 20, 40, 40, 90], 4):
        used = {k: v for k, v in zip(SIX, row.tolist(), strict=True) if k in what.letters}
        motion = part_motion(
            read("G0 " + " ".join(f"{k}{v}" for k, v in used.items())), what, origin, {1: 61.5}
        )
        tip, axis, _ = twin(row, what, origin, 61.5, 61.5)
        assert motion.tip_mm[-1] == pytest.approx(tip, abs=NANOMETRE)
        assert motion.axis[-1] == pytest.approx(axis, abs=1e-9)


def off_straight(
    motion: PartMotion, program: ReadProgram, what: Machine, origin: np.ndarray
) -> tuple[float, float]:
    """Greatest distance of the true tip path from the pieces (mm), greatest turn of the axis in one (rad)."""
    worst = 0.0
    for row in range(1, len(motion.line)):
        m = motion.motion[row]
        if motion.fraction[row] == 0.0:
            continue
        begin = motion.fraction[row - 1] if motion.motion[row - 1] == m else 0.0
        for inside in (0.25, 0.5, 0.75):
            part = begin + inside * (motion.fraction[row] - begin)
            words = words_at(program, m, part)
            tip, _, _ = twin(words, what, origin, 30.0, 30.0)
            chord = motion.tip_mm[row] - motion.tip_mm[row - 1]
            away = tip - motion.tip_mm[row - 1]
            along = np.clip(away @ chord / max(chord @ chord, 1e-300), 0.0, 1.0)
            worst = max(worst, float(np.linalg.norm(away - along * chord)))
    turned = np.linalg.norm(np.diff(motion.axis, axis=0), axis=1)
    return worst, float(turned.max())


def test_pieces_are_straight() -> None:
    rng = np.random.default_rng(10)
    for k in range(6):
        what = random_machine(rng) if k else machine(rotary("A", "work", -1), rotary("C", "work", -1))
        origin = rng.normal(size=3) * 30
        body = "G0 X10 Y5 Z20 A0 B0 C0\nG1 X12 Z22 A3 C-4 F100\nX30 Y-20 B5\nB-3 C20\nA1"
        program = read(body)
        motion = part_motion(program, what, origin, {1: 30.0})
        worst, turned = off_straight(motion, program, what, origin)
        assert worst < tolerances.PIECE_MM
        assert turned < tolerances.PIECE_TURN_RAD


def test_arcs_are_flattened() -> None:
    what = machine(rotary("B", "cutter", 1), rotary("C", "work", -1), pivot=40.0)
    origin = np.array([1.0, 2.0, 30.0])
    program = read("G0 X10 Y5 Z20 B0 C0\nG2 X10 Y5 I6 J3 F100\nG3 X20 Y5 R7 Z18\nG2 X12 Y3 R-6 B4 C9")
    motion = part_motion(program, what, origin, {1: 30.0})
    worst, _ = off_straight(motion, program, what, origin)
    assert worst < tolerances.PIECE_MM + tolerances.ARC_CHORD_MM
    full = motion.tip_mm[motion.motion == 1]
    radius = np.linalg.norm(full[:, :2] - [16.0, 8.0], axis=1)
    assert radius == pytest.approx(math.hypot(6, 3), abs=NANOMETRE)
    # Sagitta r (1 - cos(t/2)) of chords that are no finer than they need be.
    assert len(full) == math.ceil(2 * math.pi * math.sqrt(math.hypot(6, 3) / (8 * tolerances.ARC_CHORD_MM)))


def test_pieces_are_not_wasted() -> None:
    """At 50 mm from the axis 1 degree leaves straight by r (1 - cos(t/2)) = 1.903847 um (derived here)."""
    assert 50e3 * (1 - math.cos(math.radians(0.5))) == pytest.approx(1.903847, abs=1e-6)
    motion = part_motion(
        read("G0 X50 Y0 Z0 C0\nG1 C1 F9"), machine(rotary("C", "work", -1)), (0, 0, 0), {1: 30.0}
    )
    assert (motion.motion == 1).sum() == math.ceil(math.sqrt(1.903847e-3 / tolerances.PIECE_MM))
    motion = part_motion(
        read("G0 X0 Y0 Z0 C0\nG1 C90 F9"), machine(rotary("C", "work", -1)), (0, 0, 0), {1: 30.0}
    )
    assert (motion.motion == 1).sum() == 180  # on the axis only the turn counts
    motion = part_motion(read("G0 X0 Y0 Z0\nG1 X90 F9\nX0"), machine(), (0, 0, 0), {1: 30.0})
    assert len(motion.line) == 4


def test_rows_tell_where_they_come_from() -> None:
    what = machine(rotary("C", "work", -1))
    motion = part_motion(read("G0 X5 Y0 Z0 C0\nG1 C1 F9\nX6"), what, (0, 0, 0), {1: 30.0})
    assert (motion.motion[0], motion.line[0], motion.fraction[0], motion.rapid[0]) == (-1, 0, 0.0, True)
    assert set(motion.line[motion.motion == 1]) == {8}
    # One degree at 5 mm: the sagitta r phi^2 / 8 = 0.19 um decides how many pieces there are.
    count = math.ceil(math.sqrt(5.0 * math.radians(1.0) ** 2 / 8.0 / tolerances.PIECE_MM))
    assert count > 1
    assert motion.fraction[motion.motion == 1] == pytest.approx(np.arange(1, count + 1) / count)
    assert motion.rapid[motion.motion == 0].all()
    assert not motion.rapid[motion.motion > 0].any()
    with pytest.raises(ValueError, match="read-only"):
        motion.tip_mm[0] = 0.0


def test_a_new_cutter_is_placed_not_moved() -> None:
    """Between motions with other lengths a row of fraction 0 says where the tip is then."""
    program = read_bytes(
        (MODES + "G0 X1 Y2 Z60\nT2 M6\nM3\nG43 H2\nG0 X5\nM2\n").encode(),
        "p",
        length_offsets={1: 30.0, 2: 34.0},
    )
    motion = part_motion(program, machine(), (0, 0, 0), {1: 30.0, 2: 34.0})
    assert motion.fraction.tolist() == [0.0, 1.0, 0.0, 1.0]
    assert motion.tip_mm[2:].tolist() == [[1.0, 2.0, 56.0], [5.0, 2.0, 56.0]]
    assert motion.tool.tolist() == [1, 1, 2, 2]


def test_a_wrong_length_offset_shows() -> None:
    """With H2, 34 mm, on a cutter of 30 mm the tip stands 4 mm higher than the words say."""
    motion = part_motion(read("G43 H2\nG0 X0 Y0 Z5"), machine(), (0, 0, 0), {1: 30.0, 2: 34.0})
    assert motion.tip_mm[-1].tolist() == [0.0, 0.0, 9.0]


def test_unknown_lengths_are_refused() -> None:
    with pytest.raises(BadInput, match="no length is known for H1; known cutters: 3"):
        part_motion(read("G0 X1"), machine(), (0, 0, 0), {3: 30.0})
    with pytest.raises(BadInput, match="straight pieces"):
        part_motion(read("G0 X1 C0\nG1 C900000000 F1"), machine(rotary("C", "work", 1)), (0, 0, 0), {1: 30.0})


def test_a_program_without_motion_has_one_pose() -> None:
    motion = part_motion(read("(nothing)"), machine(rotary("C", "work", 1)), (1, 2, 3), {})
    assert motion.tip_mm.tolist() == [[0.0, 0.0, 0.0]]
    assert motion.axis.tolist() == [[0.0, 0.0, 1.0]]


# ------------------------------------------------------------------------------------------ travel


def test_travel_of_linear_and_rotary_axes() -> None:
    program = read("G0 X10 Y0 Z50\nC-5\nG1 X-20 C400 F100\nY7 C9\nG49 G0 Z60")
    travel = axis_travel(program, machine(rotary("C", "work", -1)), (1.0, 2.0, 55.0), {1: 30.0})
    assert travel == {
        "X": (-19.0, 11.0, 9, 7),
        "Y": (2.0, 9.0, 7, 10),
        "Z": (115.0, 135.0, 11, 7),  # under G49 the words are the gauge point's own
        "C": (-5.0, 400.0, 8, 9),
    }


def test_travel_reaches_the_quarter_points_of_arcs() -> None:
    """Circle about (6, 2), radius 5, from its right end over the top to (9, -2); half circles in ZX, XY."""
    program = read("G0 X11 Y2 Z40\nG3 X9 Y-2 I-5 F9\nG18 G3 X9 Z30 R5\nG17 G3 X9 Y18 R10")
    travel = axis_travel(program, machine(), (0.0, 0.0, 0.0), {1: 30.0})
    assert travel["X"][:2] == pytest.approx((1.0, 19.0), abs=NANOMETRE)
    assert travel["Y"][:2] == pytest.approx((-3.0, 18.0), abs=NANOMETRE)
    assert travel["X"][2:] == (8, 10)
    half = axis_travel(read("G18 G0 X9 Z40\nG3 X9 Z30 R5 F9"), machine(), (0.0, 0.0, 0.0), {1: 30.0})
    assert half["X"][1] == pytest.approx(14.0, abs=NANOMETRE)


def test_places_that_are_not_stated_do_not_count() -> None:
    program = read("G0 Z90\nG0 X5\nG0 Y6")
    travel = axis_travel(program, machine(rotary("C", "work", -1)), (0.0, 0.0, 0.0), {1: 30.0})
    assert travel == {"X": (5.0, 5.0, 8, 8), "Y": (6.0, 6.0, 9, 9), "Z": (120.0, 120.0, 7, 7)}


def test_travel_of_a_tilting_head_against_dense_samples() -> None:
    what = machine(rotary("B", "cutter", 1), rotary("C", "work", -1), pivot=40.0)
    origin = np.array([1.0, 2.0, 30.0])
    program = read("G0 X10 Y5 Z20 B0 C0\nG1 X12 Z22 B70 F100\nX-30 B-80\nG2 X-20 Y0 R30 B10")
    travel = axis_travel(program, what, origin, {1: 30.0})
    points = [
        twin(words_at(program, m, part), what, origin, 30.0, 30.0)[2]
        for m in range(4)
        for part in np.linspace(0.0 if m else 1.0, 1.0, 1001)
    ]
    low, high = np.min(points, axis=0), np.max(points, axis=0)
    for i, letter in enumerate("XYZ"):
        # The sampling here is coarser than the pieces: an extreme between two samples may be missed by 1e-3
        # of the sweep.
        assert travel[letter][0] == pytest.approx(low[i], abs=1e-4)
        assert travel[letter][1] == pytest.approx(high[i], abs=1e-4)
        assert travel[letter][0] <= low[i] + tolerances.PIECE_MM
        assert travel[letter][1] >= high[i] - tolerances.PIECE_MM


# ------------------------------------------------------------------------------------------ kernels and speed


def test_kernels_as_plain_python_give_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    what = machine(rotary("B", "cutter", 1), rotary("C", "work", -1), pivot=40.0)
    program = read("G0 X10 Y5 Z20 B0 C0\nG1 X12 Z22 B2 F100\nG2 X20 Y0 R30 C2")
    compiled = part_motion(program, what, (1.0, 2.0, 30.0), {1: 30.0})
    travel = axis_travel(program, what, (1.0, 2.0, 30.0), {1: 30.0})
    for name in (
        "_turn",
        "_away",
        "_machine",
        "_into_work",
        "pose",
        "between",
        "_pieces",
        "count_pieces",
        "walk",
        "gauge_extremes",
    ):
        monkeypatch.setattr(kernels, name, getattr(kernels, name).py_func)
    plain = part_motion(program, what, (1.0, 2.0, 30.0), {1: 30.0})
    for name in compiled.__slots__:
        assert getattr(plain, name) == pytest.approx(getattr(compiled, name), abs=1e-12)
    for letter, extremes in axis_travel(program, what, (1.0, 2.0, 30.0), {1: 30.0}).items():
        assert extremes == pytest.approx(travel[letter], abs=1e-12)
