"""The reader against NISTIR 6556: its worked examples, its rules, and the checks on legal programs.

Source of every expected value unless said otherwise: T. Kramer, F. Proctor, E. Messina, "The NIST RS274NGC
Interpreter - Version 3", NISTIR 6556, 17 August 2000; the section is named beside each. "Derived" means
worked out by hand from the section named; "from memory" marks wording or rules recalled without the text at
hand.
"""

from __future__ import annotations

import itertools
import math
from pathlib import Path

import numpy as np
import pytest

from anticlast.errors import BadInput
from anticlast.readback import reader
from anticlast.readback.checks import check_axes, check_cutters, check_places, known_places
from anticlast.readback.columns import Columns
from anticlast.readback.interpreter import Interpreter
from anticlast.readback.language import LanguageError
from anticlast.readback.reader import MOST_ERRORS, read_bytes, read_program
from anticlast.records import Axis, Control, Machine, ReadProgram, Shape, Spindle

NANOMETRE = 1e-6
MICROSECOND = 1e-6
PRINTED = 5e-5  # the report prints four decimals

MODES = "G21\nG17 G40 G49 G80 G90 G94\nG54 G64\n"
HEAD = MODES + "T1 M6\nS1000 M3\nG43 H1\nG0 X0 Y0 Z0 A0 B0 C0\n"
HEAD_LINES = HEAD.count("\n")


def read(text: str, **options: object) -> ReadProgram:
    return read_bytes(text.encode("latin-1"), "program.ngc", **options)


def cut(body: str, **options: object) -> ReadProgram:
    """Read lines in a program that is complete and clean around them."""
    program = read(HEAD + body + "\nM2\n", **options)
    assert program.findings == (), program.findings
    return program


def errors(program: ReadProgram, check: str = "language") -> list[tuple[int, str]]:
    return [(found.line, found.message) for found in program.findings if found.check == check]


def refused(body: str, **options: object) -> str:
    """Read lines of which the first breaks the language, and return the message."""
    program = read(HEAD + body + "\nM2\n", **options)
    found = errors(program)
    assert found, f"{body!r} was accepted"
    assert found[0][0] == HEAD_LINES + 1
    assert "NISTIR 6556 section" in found[0][1]
    return found[0][1]


class Session:
    """A control at its keyboard: lines one by one, also past M2, as in section 5.1.2."""

    def __init__(self, at: tuple[float, ...] = (0.0,) * 6, **options: object) -> None:
        self.columns = Columns(16)
        self.control = Interpreter(self.columns, start=at, **options)
        self.control.execute(1, "g21 g17 g90 g94 g54 g98")

    def __call__(self, text: str) -> list[tuple[int, list[float]]]:
        """Execute a line and return the motions it made as (shape, end)."""
        low, self.events_before = self.columns.rows, len(self.control.events)
        self.control.execute(2, text)
        shapes, ends = self.columns.held["shape"], self.columns.end
        return [(int(shapes[row]), ends[row].tolist()) for row in range(low, self.columns.rows)]

    def said(self) -> list[str]:
        return [event.what for event in self.control.events[self.events_before :]]


# ------------------------------------------------------------------------------------------ worked examples


def test_keyboard_session_of_table_10() -> None:
    """Section 5.1.2, Table 10: tool 2 has length offset 1.0; values printed there to four decimals."""
    run = Session(length_offsets={2: 1.0})
    assert run("g1 x3 y1 f20.0") == [(Shape.FEED, [3, 1, 0, 0, 0, 0])]
    ((shape, end),) = run("g2 x[6-[4*3/2]] r 7.01 z0.5")
    assert (shape, end[:3]) == (Shape.ARC_CW, [0.0, 1.0, 0.5])
    assert run.columns.centre[1, 0] == pytest.approx(1.5, abs=PRINTED)
    assert run.columns.centre[1, 1] == pytest.approx(7.8476, abs=PRINTED)
    run("t2")
    assert run.said() == ["select"]
    run("m6 g43 h2")
    assert run.said() == ["tool", "length offset"]
    run("m2")
    assert run.said() == ["end"]
    ((shape, end),) = run("g1 x asin[0.5]")
    assert shape == Shape.FEED
    assert end[:3] == pytest.approx([30.0, 1.0, -0.5], abs=NANOMETRE)  # the offset of 1 outlives M2
    moves = run("g91 g81 x3 y2 z-0.8 r1.5 l2")
    expected = [
        (Shape.RAPID, [30, 1, 1]),
        (Shape.RAPID, [33, 3, 1]),
        (Shape.FEED, [33, 3, 0.2]),
        (Shape.RAPID, [33, 3, 1]),
        (Shape.RAPID, [36, 5, 1]),
        (Shape.FEED, [36, 5, 0.2]),
        (Shape.RAPID, [36, 5, 1]),
    ]
    assert [shape for shape, _ in moves] == [shape for shape, _ in expected]
    assert np.array([end[:3] for _, end in moves]) == pytest.approx(
        np.array([end for _, end in expected]), abs=NANOMETRE
    )
    before = run.control.state.snapshot()
    with pytest.raises(LanguageError, match="ASIM"):
        run("g1 x asim[0.5]")
    assert run.control.state == before


def test_helix_time_of_table_10() -> None:
    """Section 2.1.2.6 over the arc of Table 10, derived: helix of 3.0644 mm, at F20 0.1532 min."""
    program = cut("G1 X3 Y1 F20\nG2 X0 R7.01 Z0.5")
    motions = program.motions
    assert motions.turns[-1] * math.hypot(1.5, 7.8476 - 1) == pytest.approx(
        math.sqrt(3.0644**2 - 0.25), abs=PRINTED
    )
    assert motions.seconds[-1] / 60.0 == pytest.approx(0.1532, abs=PRINTED)


@pytest.mark.parametrize(
    ("start", "line", "centre", "radius", "end"),
    [
        ((0, 0, 5), "G17 G2 X10 Y15 R20 Z5", None, 20.0, (10, 15, 5)),  # 3.5.3.1
        ((7, 7, 0), "G17 G2 X10 Y16 I3 J4 Z9", (10, 11), 5.0, (10, 16, 9)),  # 3.5.3.2
    ],
)
def test_arc_examples(start, line, centre, radius, end) -> None:
    program = cut("G0 X{} Y{} Z{}\n".format(*start) + line + " F100")
    motions = program.motions
    assert motions.shape[-1] == Shape.ARC_CW
    assert motions.end[-1, :3] == pytest.approx(end, abs=NANOMETRE)
    for point in (motions.start[-1], motions.end[-1]):
        assert math.dist(point[:2], motions.centre[-1, :2]) == pytest.approx(radius, abs=NANOMETRE)
    if centre:
        assert motions.centre[-1, :2] == pytest.approx(centre, abs=NANOMETRE)


def test_canned_cycle_examples() -> None:
    """Section 3.5.16.2, both examples, from (1, 2, 3)."""
    moves = Session((1, 2, 3, 0, 0, 0))("G90 G81 G98 X4 Y5 Z1.5 R2.8 F50")
    expected = [
        (Shape.RAPID, [4, 5, 3]),
        (Shape.RAPID, [4, 5, 2.8]),
        (Shape.FEED, [4, 5, 1.5]),
        (Shape.RAPID, [4, 5, 3]),
    ]
    assert [(shape, end[:3]) for shape, end in moves] == expected
    moves = Session((1, 2, 3, 0, 0, 0))("G91 G81 G98 X4 Y5 Z-0.6 R1.8 L3 F50")
    assert moves[0][0] == Shape.RAPID
    assert moves[0][1][:3] == pytest.approx([1, 2, 4.8], abs=NANOMETRE)
    holes = [end[:3] for shape, end in moves if shape == Shape.FEED]
    assert np.array(holes) == pytest.approx(
        np.array([[5, 7, 4.2], [9, 12, 4.2], [13, 17, 4.2]]), abs=NANOMETRE
    )
    assert moves[-1][1][:3] == pytest.approx([13, 17, 4.8], abs=NANOMETRE)


def test_axis_offset_example() -> None:
    """Section 3.5.18: at X = 4, G92 X7 makes the offset -3 and X read 7; then G92 X9 makes it -5."""
    run = Session((4, 0, 0, 0, 0, 0))
    run("G92 X7")
    assert run.control.state.shift[0] == -3.0
    run("G92 X9")
    assert run.control.state.shift[0] == -5.0
    assert run("G1 X9 F1")[0][1][0] == 4.0  # X reads 9 where it stands
    run("G92.2")
    assert run("G1 X9 F1")[0][1][0] == 9.0
    run("G92.3")
    assert run("G1 X9 F1")[0][1][0] == 4.0
    run("G92.1")
    run("G92.3")
    assert run("G1 X9 F1")[0][1][0] == 9.0


def test_blanks_inside_words() -> None:
    """Section 3.3: "g0x +0. 12 34y 7" is "g0 x+0.1234 y7"."""
    for plain in (True, False):
        one = cut("g1 x1 f1\ng0x +0. 12 34y 7", plain_lines=plain)
        other = cut("g1 x1 f1\ng0 x+0.1234 y7", plain_lines=plain)
        assert one.motions.end[-1].tolist() == other.motions.end[-1].tolist()
        assert one.motions.end[-1, :2].tolist() == [0.1234, 7.0]


def test_word_order_carries_no_meaning() -> None:
    """Section 3.3.6: a line of five items is the same in all 120 orders."""
    ends = set()
    for items in itertools.permutations(("G1", "X1.5", "Z-2", "F300", "M8")):
        motions = cut(" ".join(items)).motions
        ends.add((*motions.end[-1], motions.feed_word[-1], int(motions.coolant[-1]), motions.seconds[-1]))
    assert len(ends) == 1


def test_parameters_set_after_the_line_is_read() -> None:
    """Section 3.3.3: with #3 = 15, "#3=6 G1 X#3" moves to 15, then #3 is 6."""
    motions = cut("#3=15\n#3=6 G1 X#3 F100\nG1 X#3\n#4=3 #5=2\nG1 X##4 Y[#5+1]").motions
    assert motions.end[-3:, 0].tolist() == [15.0, 6.0, 6.0]
    assert motions.end[-1, 1] == 3.0


EXPRESSIONS = [  # appendix C.2; each line there states the X it should reach
    ("[1 + 2 * 3 - 4 / 5]", 6.2),
    ("[15 MOD 4.0]", 3.0),
    ("[2 or 2]", 1.0),
    ("[2 xor 2]", 0.0),
    ("[2 and 0]", 0.0),
    ("round[-0.5001]", -1.0),
    ("fix[-0.499]", -1.0),
    ("fup[-0.499]", 0.0),
    ("atan[1.7321]/[1.0]", 60.0),
    ("[2 ** 3.0]", 8.0),
    # Derived from 3.3.2.3 and 3.3.2.4: precedence, left to right within a level, degrees.
    ("[2 ** 3 ** 2]", 64.0),
    ("[7 - 3 - 2]", 2.0),
    ("[2 + 3 ** 2 * 2]", 20.0),
    ("[1 + 0 or 0 * 5]", 1.0),
    ("[[1 + 2] * [3 + 4]]", 21.0),
    ("abs[-1.5]", 1.5),
    ("acos[0.5]", 60.0),
    ("asin[-1]", -90.0),
    ("cos[60]", 0.5),
    ("sin[30]", 0.5),
    ("tan[45]", 1.0),
    ("sqrt[sqrt[16]]", 2.0),
    ("exp[ln[3]]", 3.0),
    ("round[2.4]", 2.0),
    ("fix[2.8]", 2.0),
    ("fup[2.2]", 3.0),
    ("[-1.5 - -2]", 0.5),
    ("[-2 MOD 3]", 1.0),  # never negative: from memory
    (".5", 0.5),
    ("5.", 5.0),
    ("-0.0", 0.0),
    ("+3", 3.0),
    ("007", 7.0),  # 3.3.2.1
]


@pytest.mark.parametrize(("text", "value"), EXPRESSIONS)
def test_expressions(text: str, value: float) -> None:
    tolerance = 1e-3 if "1.7321" in text else 1e-12
    assert cut(f"G1 X{text} F1").motions.end[-1, 0] == pytest.approx(value, abs=tolerance)


def test_start_line_of_the_engraving_program() -> None:
    """Appendix C.1, line n0020: by Table 8 F, S, T, tool change, spindle, however they are written."""
    program = read(MODES + "n0020 t1 m6 m3 f20 s4000\nM2\n")
    said = [(event.what, event.value) for event in program.events if event.line == 4]
    assert said == [("feed", 20.0), ("speed", 4000.0), ("select", 1.0), ("tool", 1.0), ("spindle", 4000.0)]


# Arcs of appendix C.1: start, line, centre, swept degrees, radius. The figures are derived from the program
# there; the lines are ours, since only the figures were at hand.
ENGRAVED = [
    ((13.5, 0.0), "G3 X11 Y2.5 J2.5", (13.5, 2.5), 270.0, 2.5),
    ((30.0, 2.5), "G2 X30 Y2.5 I2.5", (32.5, 2.5), 360.0, 2.5),
    ((55.0, 2.5), "G3 X55 Y2.5 I2.5", (57.5, 2.5), 360.0, 2.5),
    ((64.0, 4.0), "G2 X69 R4", (66.5, 0.8775), 77.364, 4.0),
    ((79.5, 0.0), "G3 X79.5 Y5 R2.5", (79.5, 2.5), 180.0, 2.5),
]


def test_arcs_of_the_engraving_program() -> None:
    length = 0.0
    for start, line, centre, swept, radius in ENGRAVED:
        motions = cut(f"G0 X{start[0]} Y{start[1]}\n{line} F20").motions
        assert motions.centre[-1, :2] == pytest.approx(centre, abs=PRINTED)
        assert math.degrees(motions.turns[-1]) == pytest.approx(swept, abs=5e-4)
        length += motions.turns[-1] * radius
        assert motions.seconds[-1] == pytest.approx(motions.turns[-1] * radius * 3.0, abs=MICROSECOND)
    assert length == pytest.approx(56.4519, abs=PRINTED)  # arc length of the whole program


# Appendix B, Tables 12 and 13 less G41 and G40: text from memory, its sums derived from the report.
CONTOURS = {
    "Table 12": (
        "G1 X1 Y5 F20\nG1 Y4\nG3 X2 Y3 I1\nG2 X3 Y2 J-1\nG1 Y-1\nG2 X2 Y-2 I-1\nG1 X-2\nG2 X-2.6 Y-0.2 J1\n"
        "G1 X1.4 Y2.8\nG2 X2 Y3 I0.6 J-0.8",
        (2.0, 3.0),
        7.8540,
        {1.0},
    ),
    "Table 13": (
        "G1 X1.5 Y5 F20\nG1 Y4\nG3 X2 Y3.5 I0.5\nG2 X3.5 Y2 J-1.5\nG1 Y-1\nG2 X2 Y-2.5 I-1.5\nG1 X-2\n"
        "G2 X-2.9 Y0.2 J1.5\nG1 X1.1 Y3.2\nG2 X2 Y3.5 I0.9 J-1.2",
        (2.0, 3.5),
        10.2102,
        {0.5, 1.5},
    ),
}


@pytest.mark.parametrize("name", CONTOURS)
def test_contours_of_appendix_b(name: str) -> None:
    text, closes, arcs, radii = CONTOURS[name]
    motions = cut(text).motions
    after = slice(len(motions.line) - 9, None)  # the first line only leads up
    turned = motions.turns[after]
    spoke = np.hypot(*(motions.start[after, :2] - motions.centre[after, :2]).T)
    assert set(np.round(spoke[turned > 0], 9)) == radii
    assert (spoke * turned).sum() == pytest.approx(arcs, abs=PRINTED)
    straight = np.hypot(*(motions.end[after, :2] - motions.start[after, :2]).T)[turned == 0].sum()
    assert straight == pytest.approx(13.0, abs=NANOMETRE)
    assert tuple(motions.end[-1, :2]) == closes


def test_canned_cycles_in_the_three_planes() -> None:
    """Appendix C.3 runs every cycle in three planes, results not stated: derived from 3.5.16."""
    for plane, axes in ((17, (0, 1, 2)), (18, (2, 0, 1)), (19, (1, 2, 0))):
        first, second, normal = ("XYZ"[axis] for axis in axes)
        for code, waits, feeds_out in (
            (81, False, False),
            (82, True, False),
            (85, False, True),
            (89, True, True),
        ):
            wait = " P0.25" if waits else ""
            program = cut(f"G{plane} G99 G{code} {first}1 {second}2 {normal}-3 R0.5{wait} F60\n{first}4")
            motions = program.motions
            rows = np.flatnonzero(motions.line > HEAD_LINES)
            depth = motions.end[rows, axes[2]].tolist()
            # up to R, across, down, out; then across, down, out again with the words that stay in force
            assert depth == [0.5, 0.5, -3.0, 0.5, 0.5, -3.0, 0.5]
            assert motions.end[rows[-1], list(axes)].tolist() == [4.0, 2.0, 0.5]
            out = Shape.FEED if feeds_out else Shape.RAPID
            assert motions.shape[rows].tolist() == [0, 0, Shape.FEED, out, 0, Shape.FEED, out]
            assert motions.seconds[rows[2]] == pytest.approx(3.5, abs=MICROSECOND)
            dwells = [event.value for event in program.events if event.what == "dwell"]
            assert dwells == ([0.25, 0.25] if waits else [])


# ------------------------------------------------------------------------------------------ feed and time

FEEDS = [  # derived from 2.1.2.5 A, B, C and 3.5.19: line, minutes
    ("G1 X100 A90 F200", 0.5),
    ("G1 A90 F200", 0.45),
    ("G1 A30 C40 F100", 0.5),
    ("G93 G1 X7 B3 F4", 0.25),
    ("G1 X0.01 A1 F200", 0.01 / 200),
    ("G93 G1 X0.2 F3000", 0.2 / 600),
    ("G1 X3 Y4 Z12 F13", 1.0),
    ("G3 X0 Y0 I5 Z3 F10", math.hypot(10 * math.pi, 3) / 10),  # 2.1.2.6, full turn of a helix
    ("G3 X0 Y0 I5 A720 F10", math.pi),  # 2.1.2.5 A with a rotary axis riding along
]


@pytest.mark.parametrize(("line", "minutes"), FEEDS)
def test_time_that_f_asks_for(line: str, minutes: float) -> None:
    for plain in (True, False):
        motions = cut("G0 X0\n" + line, plain_lines=plain).motions
        assert motions.seconds[-1] == pytest.approx(60.0 * minutes, rel=1e-12)
        assert math.isnan(motions.seconds[0])


def test_inch_feeds_are_inches_a_minute() -> None:
    """3.5.7 and 2.1.2.5: an inch program; rotary words and rotary feeds stay degrees (2.1.2.9)."""
    text = (HEAD + "G1 X2 F4\nG1 A90 F180\nG2 X4 I1 F4\nM2\n").replace("G21", "G20")
    program = read(text)
    assert program.findings == ()
    assert program.units == "inch"
    ends = program.motions.end[-3:]
    assert ends[:, 0] == pytest.approx([50.8, 50.8, 101.6], abs=NANOMETRE)
    assert ends[1, 3] == 90.0
    assert program.motions.seconds[-3:] == pytest.approx([30.0, 30.0, 60 * math.pi / 4], rel=1e-12)


def test_rotary_words_are_not_folded() -> None:
    """2.1.2.2, derived: G90 C370 from 0 turns +370; C10 from C350 turns -340; G91 C-20 turns -20."""
    motions = cut("G1 C370 F100\nC350\nC10\nG91 C-20").motions
    turned = motions.end[-4:, 5] - motions.start[-4:, 5]
    assert turned.tolist() == [370.0, -20.0, -340.0, -20.0]


def test_the_order_inside_a_line() -> None:
    """3.8, Table 8, derived: M5 stops before the move, G91 acts before it, M9 before it, M2 after it."""
    program = read(HEAD + "M8\nG1 X1 F10\nM9 G0 Z5\nG91 X1\nM2 X5\n")
    assert program.findings == ()
    motions = program.motions
    assert motions.coolant[-4:].tolist() == [2, 0, 0, 0]
    assert motions.end[-2:, 0].tolist() == [2.0, 7.0]
    stopped = read(HEAD + "M5 G1 X5 F10\nM2\n")
    assert [found.check for found in stopped.findings] == ["spindle running"]
    assert stopped.motions.spindle_rpm[-1] == 0.0


def test_length_offset_moves_the_reading_not_the_machine() -> None:
    """2.1.2.3, 3.5.11: known lengths change Z's reading; unknown ones make it unknown until Z is given."""
    known = cut("G0 Z10\nT2 M6\nM3\nG43 H2\nG0 X5\nG1 Z1 F10", length_offsets={1: 40.0, 2: 55.0})
    assert known.motions.end[-2, 2] == 10.0 + 40.0 - 55.0
    unknown = cut("G0 Z10\nT2 M6\nM3\nG43 H2\nG0 X5\nG1 Z1 F10")
    starts, ends = known_places(unknown)
    assert starts[-2:, 2].tolist() == [False, False]
    assert ends[-2:, 2].tolist() == [False, True]
    starts, ends = known_places(known)
    assert starts[-2:].all()
    assert not starts[0].any()
    assert ends[0].all()
    assert known.motions.start[0].tolist() == [0.0] * 6  # not even the offset of 40 moves a place nobody told


def test_start_words_are_told() -> None:
    program = read(
        MODES + "T1 M6\nM3 S100\nG43 H1\nG1 X5 F10\nM2\n", start_words={"X": 1.0, "Z": 7.0, "C": 30.0}
    )
    assert program.motions.start[0].tolist() == [1.0, 0.0, 7.0, 0.0, 0.0, 30.0]
    starts, _ = known_places(read(MODES + "T1 M6\nM3 S9\nG0 X5\nM2\n", start_words=[0, 0, 9]))
    assert starts.all()


# ------------------------------------------------------------------------------------------ error checklist

BROKEN = [  # what a control must refuse: line, words of the message, section
    ("G1 X1 O5 F1", "O: is no letter", "3.3.2"),
    ("G1 U1 F1", "U: is no letter", "3.3.2"),
    ("G1 X1 F1 ;end", ";: is no character", "3.3.2"),
    ("G1 X1é F1", "CHARACTER 233", "3.3.2"),
    ("G1 X1e-5 F1", "E: is no letter", "3.3.2"),
    ("G1 X1" + " " * 256, "longer than 256", "3.3"),
    ("N000009 G1 X1 F1", "1 to 5 digits", "3.3.1"),
    ("N G1 X1 F1", "1 to 5 digits", "3.3.1"),
    ("N-1 G1 X1 F1", "1 to 5 digits", "3.3.1"),
    ("N1.5 G1 X1 F1", "no character", "3.3.2"),
    ("G1 X1 N5 F1", "stands first", "3.3.1"),
    ("G1 / X1 F1", "/: is no character", "3.3.2"),
    ("G0 G1 X1", "G1: G0 of the same modal group", "3.4"),
    ("G90 G91", "same modal group", "3.4"),
    ("G4 G53 G0 X1 P1", "same modal group", "3.4"),
    ("M3 M4", "same modal group", "3.4"),
    ("M7 M8", "same modal group", "3.4"),
    ("M0 M3 M6 M8 M48", "more than 4 M", "3.3.5"),
    ("G1 X1 X2 F1", "X: letter is twice", "3.3.5"),
    ("G1 X1 F1 F2", "F: letter is twice", "3.3.5"),
    ("G1 X1 (a (b) F1", "comment inside a comment", "3.3.4"),
    ("G1 X1 (a F1", "not closed", "3.3.4"),
    ("G1 X1 ) F1", ")", "3.3.2"),
    ("G1 X (a) 1 F1", "missing here", "3.3.2"),
    ("(caf\xe9)", "not printable ASCII", "3.3.4"),
    ("#0=1", "numbered 1 to 5399", "3.3.2.2"),
    ("#5400=1", "numbered 1 to 5399", "3.3.2.2"),
    ("#1.5=1", "numbered 1 to 5399", "3.3.2.2"),
    ("G1 X#77 F1", "#77: is read before it is set", "3.2.1"),
    ("#5221=3", "refused", "3.2.1"),
    ("#1 5", "= is missing", "3.3.3"),
    ("G1 X F1", "missing here", "3.3.2"),
    ("G1 X", "end of line", "3.3.2"),
    ("G1 X. F1", "missing here", "3.3.2"),
    ("G1 X1..2 F1", ".: is no character", "3.3.2"),
    ("G1 X+-3 F1", "missing here", "3.3.2"),
    ("G1 X[1+2 F1", "operator or ]", "3.3.2.3"),
    ("G1 X[1+2", "end of line", "3.3.2.3"),
    ("G1 X[1 2 + ] F1", "missing here", "3.3.2"),
    ("G1 X[1/0] F1", "no finite value", "3.3.2.3"),
    ("G1 X[-8**0.5] F1", "no finite value", "3.3.2.3"),
    ("G1 X[9**999999] F1", "no finite value", "3.3.2.3"),
    ("G1 Xsqrt[-1] F1", "no finite value", "3.3.2.4"),
    ("G1 Xln[0] F1", "no finite value", "3.3.2.4"),
    ("G1 Xasin[1.1] F1", "no finite value", "3.3.2.4"),
    ("G1 Xatan[1] F1", "two bracketed values", "3.3.2.4"),
    ("G1 Xasim[1] F1", "ASIM", "3.3.2"),
    ("G1 X" + "[" * 200, "more brackets", "3.3.2.3"),
    ("G1 X9999999999 F1", "beyond", "3.3.2.1"),
    ("G5 X1", "G5: is no code", "3.5"),
    ("G1.5 X1", "G1.5: is no code", "3.5"),
    ("G1.001 X1", "is no code", "3.5"),
    ("M98", "M98: is no code", "3.6"),
    ("M3.5", "is no code", "3.6"),
    ("G0", "at least one axis word", "3.5.1"),
    ("G1 F100", "at least one axis word", "3.5.2"),
    ("G2 I1 F1", "at least one axis word", "3.5.3"),
    ("G92", "at least one axis word", "3.5.18"),
    ("G2 Z1 I1 F1", "needs X or Y under G17", "3.5.3"),
    ("G2 X1 F1", "needs R, or I or J", "3.5.3"),
    ("G18 G2 X1 J1 F1", "J: has no meaning in an arc under G18", "3.5.3.2"),
    ("G2 X1 K1 F1", "K: has no meaning", "3.5.3.2"),  # from memory
    ("G2 X1 I1 R1 F1", "R: stands beside I", "3.5.3"),  # from memory
    ("G2 X10 I5.01 F1", "the radius is", "3.5.3.2"),
    ("G2 X1 I0 F1", "no radius", "3.5.3.2"),  # from memory
    ("G2 X10 R4.9 F1", "shorter than half", "3.5.3.1"),  # from memory
    ("G2 X0 Y0 R5 F1", "end other than the start", "3.5.3.1"),
    ("G2 X5 R0 F1", "shorter than half", "3.5.3.1"),
    ("G80 X1", "axis words under G80", "3.5.15"),
    ("G1 G92 X1 F1", "two codes that use axis words", "3.4"),
    ("G0 G28 X1", "two codes that use axis words", "3.4"),
    ("G93 G1 X1", "needs its own F", "3.5.19"),
    ("G93 G2 X1 R1", "needs its own F", "3.5.19"),
    ("G93 G38.2 Z-5 F1", "not allowed under G93", "3.5.9.1"),
    ("G93 G81 X1 Z-1 R1 F1", "not allowed under G93", "3.5.16"),
    ("G38.2 A5 F1", "needs an X, Y or Z", "3.5.9.1"),
    ("G38.2 Z-5 A5 F1", "must not move a rotary", "3.5.9.1"),
    ("G38.2 Z-0.2 F1", "nearer than", "3.5.9.1"),
    ("G38.2 Z-5 F1", "not available in a proof", "3.5.9"),
    ("G2 G53 X1 R5 F1", "only with a G0 or G1", "3.5.12"),
    ("G53", "only with a G0 or G1", "3.5.12"),
    ("G53 G0 X1", "not known", "3.5.12"),
    ("G91 G53 G0 X1", "not allowed under G91", "3.5.12"),  # from memory
    ("G41 D1 G1 X1 F1", "compensation is not followed", "3.5.10"),
    ("G42 G1 X1 F1", "compensation is not followed", "3.5.10"),
    ("G43", "needs an H word", "3.5.11"),
    ("G43 H100", "H takes 0 to 99", "3.5.11"),
    ("G43 H-1", "H takes 0 to 99", "3.5.11"),
    ("G43 H1.5", "whole number", "3.5.11"),
    ("G4", "needs P", "3.5.4"),  # from memory
    ("G4 P-1", "needs P", "3.5.4"),
    ("S-5", "not negative", "3.7.2"),
    ("T-1", "T takes 0 to 99", "3.7.3"),
    ("T100", "T takes 0 to 99", "3.7.3"),
    ("F-1", "not negative", "3.7.1"),  # from memory
    ("G1 X1 F-1", "not negative", "3.7.1"),
    ("G10 L2 P0 X1", "P takes 1 to 9", "3.5.5"),
    ("G10 L2 P10 X1", "P takes 1 to 9", "3.5.5"),
    ("G10 L2 X1", "needs L2 and P", "3.5.5"),
    ("G10 L3 P1 X1", "L takes 2", "3.5.5"),
    ("G28", "known to the control only", "3.5.8"),
    ("G30 Z5", "known to the control only", "3.5.8"),
    ("G92.3", "known to the control only", "3.5.18"),
    ("G81 X1 Z-1 R-2 F1", "below the bottom", "3.5.16"),
    ("G81 X1 Z-1 R1 L0 F1", "L takes 1", "3.5.16"),
    ("G81 X1 Z-1 R1 L2.5 F1", "whole number", "3.5.16"),
    ("G81 X1 Z-1 R1 L99999 F1", "L takes 1 to 10000", "3.5.16"),
    ("G81 X1 R1 F1", "needs Z", "3.5.16"),
    ("G81 X1 Z-1 F1", "needs R", "3.5.16"),
    ("G81 A1 F1", "needs an X, Y or Z", "3.5.16"),
    ("G81 X1 Z-1 R1 A5 F1", "must not move a rotary", "3.5.16"),
    ("G82 X1 Z-1 R1 F1", "needs P", "3.5.16"),
    ("G83 X1 Z-1 R1 Q1 F1", "refused in a proof", "3.5.16"),
    ("G84 X1 Z-1 R1 F1", "refused in a proof", "3.5.16"),
    ("G1 X1 H1 F1", "H: nothing on this line uses", "3.3"),  # from memory, as the next
    ("G1 X1 I1 F1", "I: nothing on this line uses", "3.3"),
    ("G1 X1 P1 F1", "P: nothing on this line uses", "3.3"),
    ("G1 X1 L1 F1", "L: nothing on this line uses", "3.3"),
    ("G1 X1 D1 F1", "D: nothing on this line uses", "3.3"),
    ("%", "%: is no character", "3.3.2"),
]


@pytest.mark.parametrize(("line", "words", "section"), BROKEN, ids=[case[0][:28] for case in BROKEN])
def test_broken_lines_are_located(line: str, words: str, section: str) -> None:
    for plain in (True, False):
        message = refused(line, plain_lines=plain)
        assert words in message
        assert f"section {section}]" in message


def test_a_broken_line_changes_nothing() -> None:
    """5.1.2: after a read error the state is unchanged; motions before the line are kept, none after it."""
    program = read(HEAD + "G1 X1 F100\nG91 G1 X5 Q1\nG1 X2\nM2\n")
    assert errors(program) == [
        (HEAD_LINES + 2, "Q: nothing on this line uses this word [NISTIR 6556 section 3.3]")
    ]
    assert program.motions.line[-1] == HEAD_LINES + 1
    assert len(program.findings) == 1


def test_errors_are_collected_up_to_a_number() -> None:
    program = read(HEAD + "G1 X1 Q1\n" * 50 + "M2\n")
    found = errors(program)
    assert len(found) == MOST_ERRORS + 1
    assert [line for line, _ in found[:-1]] == list(range(HEAD_LINES + 1, HEAD_LINES + 1 + MOST_ERRORS))
    assert "nothing was read from this line on" in found[-1][1]
    several = read(HEAD + "G1 X1 Q1\nG1 X2 F5\nG99 X1 U2\nM2\n")
    assert [line for line, _ in errors(several)] == [HEAD_LINES + 1, HEAD_LINES + 3]


def test_no_motion_mode_is_assumed() -> None:
    program = read(MODES.replace("G80", "") + "X5\nM2\n")
    assert errors(program) == [
        (4, "axis word: no motion mode is stated (G0, G1, ...) [NISTIR 6556 section 3.4]")
    ]


# ------------------------------------------------------------------------------------------ file and end


def test_percent_lines() -> None:
    """3.1: both or neither; nothing after the second counts; M2 or M30 or the second % ends the program."""
    body = HEAD + "G1 X1 F5\n"
    assert read("%\n" + body + "%\n").findings == ()
    assert read("\n  % \n" + body + "M2\n%\n").findings == ()
    assert read("%\r\n" + body.replace("\n", "\r\n") + "M30\r\n%").findings == ()
    assert read("%\r" + body.replace("\n", "\r") + "M30\r%").findings == ()
    missing = read("%\n" + body + "M2\n")
    assert errors(missing) == [
        (HEAD_LINES + 3, "%: the first line is %, but there is no second % line [NISTIR 6556 section 3.1]")
    ]
    (after,) = read("%\n" + body + "%\nG1 X2\n").findings
    assert (after.check, after.ok, after.warning, after.line) == ("program end", False, True, HEAD_LINES + 4)


@pytest.mark.parametrize("text", ["", "\n\n", HEAD, HEAD + "G1 X1 F5", "%\n" + HEAD])
def test_a_missing_end_is_found(text: str) -> None:
    found = errors(read(text), "program end")
    assert len(found) == 1
    assert "it may be cut off" in found[0][1]


def test_a_file_cut_off_in_mid_line() -> None:
    whole = HEAD + "G1 X12.5 F100\nX-3.25\nM2\n"
    assert read(whole[:-1]).findings == ()  # no last line end is fine
    for length in range(len(HEAD), len(whole) - 2):
        found = read(whole[:length]).findings
        assert any(finding.check == "program end" for finding in found), whole[:length]


def test_text_after_the_end_is_found() -> None:
    (found,) = read(HEAD + "M2\n\n(done)\nG1 X5 F5\nG1 X6\n").findings
    assert (found.check, found.ok, found.warning, found.line) == ("program end", False, False, HEAD_LINES + 4)
    program = read(HEAD + "M2\nG1 X5 F5\n")
    assert program.motions.line[-1] == HEAD_LINES


def test_files_that_cannot_be_used(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with pytest.raises(BadInput, match="cannot be read: No such file"):
        read_program(tmp_path / "none.ngc")
    with pytest.raises(BadInput, match="is a folder"):
        read_program(tmp_path)
    binary = tmp_path / "binary.ngc"
    binary.write_bytes(b"G21\n\0\0")
    with pytest.raises(BadInput, match="zero byte") as caught:
        read_program(binary)
    assert caught.value.faults[0].line == 2
    monkeypatch.setattr(reader, "MOST_BYTES", 4)
    with pytest.raises(BadInput, match="longer than the 4 bytes"):
        read_program(binary)
    monkeypatch.undo()
    good = tmp_path / "good.ngc"
    good.write_text(HEAD + "G1 X1 F5\nM2\n")
    program = read_program(good)
    assert program.findings == ()
    assert program.path == str(good)
    assert program.blocks == HEAD_LINES + 2


def test_block_delete() -> None:
    """2.2.2: lines with "/" are executed unless the switch is on."""
    text = HEAD + "G1 X1 F5\n/ X2\n/N5 X3\nM2\n"
    for plain in (True, False):
        assert read(text, plain_lines=plain).motions.end[-1, 0] == 3.0
        assert read(text, plain_lines=plain, block_delete=True).motions.end[-1, 0] == 1.0


def test_messages_and_other_events() -> None:
    """3.3.4, 3.3.5: only the last comment of a line counts, MSG in any case and spacing."""
    program = cut(
        "( m S g , clamp ok )\n(MSG, no) (plain)\nG4 P2.5\nM0\nM1\nM60\nM48\nM49\nM7\nM8\nM9\nS0\nS500\nM4"
    )
    said = [(event.what, event.value) for event in program.events if event.line > HEAD_LINES]
    assert said == [
        ("message", "clamp ok"),
        ("dwell", 2.5),
        ("stop", "M0"),
        ("stop", "M1"),
        ("stop", "M60"),
        ("overrides", "on"),
        ("overrides", "off"),
        ("coolant", 1.0),
        ("coolant", 3.0),
        ("coolant", 0.0),
        ("speed", 0.0),
        ("speed", 500.0),
        ("spindle", -500.0),
        ("end", "M2"),
    ]


# ------------------------------------------------------------------------------------------ machine
# coordinates


def test_machine_coordinates_with_a_known_origin() -> None:
    """3.5.12: G53 is absolute in machine coordinates; with H1 = 40 the gauge point is 40 above the tip."""
    program = cut(
        "G53 G0 X10 Z200 C90\nX1", work_origin=[100.0, 0.0, 55.0, 0.0, 0.0, 30.0], length_offsets={1: 40.0}
    )
    assert program.motions.end[-2].tolist() == [-90.0, 0.0, 105.0, 0.0, 0.0, 60.0]
    assert program.motions.end[-1, 0] == 1.0
    message = refused("G53 G0 Z5", work_origin=[0.0, 0.0, 0.0])
    assert "the length of H1 is not known" in message


def test_reference_points_with_known_places() -> None:
    """3.5.8: by way of the programmed point, or straight without axis words."""
    options = {
        "work_origin": [0.0, 0.0, 50.0],
        "reference_points": {28: [1, 2, 300, 0, 0, 0]},
        "length_offsets": {1: 40.0},
    }
    motions = cut("G28 Z90\nG28", **options).motions
    assert motions.end[-3:, :3].tolist() == [[0, 0, 90], [1, 2, 210], [1, 2, 210]]
    assert set(motions.shape[-3:]) == {Shape.RAPID}


def test_work_offsets_move_the_reading() -> None:
    """3.5.5, 3.5.13: G10 sets an origin in machine coordinates; G55 reads the same place from there."""
    program = read(HEAD + "G10 L2 P2 X30 Y5\nG55 G0 Z1\nG54 G0 Z2\nM2\n", work_origin=[10.0, 0.0, 0.0])
    assert program.motions.end[-2, :2].tolist() == [-20.0, -5.0]
    assert program.motions.end[-1, :2].tolist() == [0.0, 0.0]
    assert program.motions.work_offset[-2:].tolist() == [2, 1]
    assert [found.check for found in program.findings] == ["work offset"]
    moved = read(HEAD + "G10 L2 P1 X30\nG0 Z1\nM2\n", work_origin=[10.0, 0.0, 0.0])
    assert moved.motions.end[-1, 0] == -20.0
    assert [(found.check, found.line) for found in moved.findings] == [("work offset", HEAD_LINES + 1)]


# ------------------------------------------------------------------------------------------ checks on legal
# programs

LEGAL_BUT_WRONG = [  # program, check, line
    (MODES + "T1 M6\nG43 H1\nG0 Z5\nG1 X1 F5\nM2\n", "spindle running", 7),
    (MODES + "T1 M6\nM3\nG43 H1\nG0 Z5\nG1 X1 F5\nM2\n", "spindle running", 8),  # S never given, 3.6.2
    (MODES + "M3 S5\nG43 H1\nG1 X1 F5\nM2\n", "tool in spindle", 6),
    (MODES + "M6\nM3 S5\nG43 H0\nG0 X1\nM2\n", "tool in spindle", 4),
    (MODES + "T1 M6\nM3 S5\nG0 X1\nG1 Z1 F5\nM2\n", "length offset", 7),
    (MODES + "T1 M6\nM3 S5\nG0 Z1\nG43 H1 X1\nM2\n", "length offset", 6),
    (MODES + "T1 M6\nM3 S5\nG43 H2\nG1 X1 F5\nM2\n", "length offset", 7),
    (HEAD + "G1 X1\nM2\n", "feed stated", HEAD_LINES + 1),
    (HEAD + "G1 X1 F0\nM2\n", "feed stated", HEAD_LINES + 1),
    (HEAD + "G93 G1 X1 F5\nG94 G1 X2\nM2\n", "feed stated", HEAD_LINES + 2),
    (HEAD + "G1 X1 F5\nG93\nG94\nX2\nM2\n", "feed stated", HEAD_LINES + 4),
    (HEAD + "G20\nM2\n", "units", HEAD_LINES + 1),
    (HEAD.replace("G21", ""), "modes stated", HEAD_LINES),
    (HEAD.replace("G90", "") + "M2\n", "modes stated", HEAD_LINES),
    (HEAD.replace("G54", "") + "M2\n", "modes stated", HEAD_LINES),
    (HEAD.replace("G94", "") + "G0 X1\nG1 X2 F5\nX3\nM2\n", "modes stated", HEAD_LINES + 2),
    (HEAD.replace("G17", "") + "G1 X2 F5\nG2 X3 R1\nM2\n", "modes stated", HEAD_LINES + 2),
    (HEAD + "G81 X1 Z-1 R1 F5\nM2\n", "modes stated", HEAD_LINES + 1),
    (HEAD + "G55 G0 X1\nM2\n", "work offset", HEAD_LINES + 1),
]


@pytest.mark.parametrize(("text", "check", "line"), LEGAL_BUT_WRONG)
def test_checks_on_legal_programs(text: str, check: str, line: int) -> None:
    for plain in (True, False):
        program = read(text, plain_lines=plain)
        assert errors(program) == []
        found = errors(program, check)
        assert [place for place, _ in found] == [line]


def test_an_h_without_a_cutter() -> None:
    program = read(HEAD + "G43 H7\nM2\n", length_offsets={1: 40.0})
    assert [(found.check, found.line) for found in program.findings] == [("length offset", HEAD_LINES + 1)]


def machine(*rotary: str) -> Machine:
    axes = [Axis(letter, "linear", (-100.0, 100.0), 3000, 2000, 400, 8000) for letter in "XYZ"]
    axes += [
        Axis(letter, "rotary", None, 3600, 3600, 1500, 30000, "work", (0.0, 0.0, 1.0), (0.0, 0.0, 0.0), -1)
        for letter in rotary
    ]
    control = Control("inverse", "G64", 4, 4, 3, 500.0, False, "M2")
    spindle = Spindle(0.0, 24000.0, 0.3)
    return Machine("m", "m", "mm", 0.0, tuple(axes), spindle, control, Path("m.toml"))


def test_words_for_axes_that_are_not_there() -> None:
    """5.2: whether such words are ignored or an error is the builder's choice, so none may be there."""
    program = cut("G1 X1 F5")
    found = check_axes(program, machine("C"))
    assert [(finding.line, finding.message[:2]) for finding in found] == [
        (HEAD_LINES, "A:"),
        (HEAD_LINES, "B:"),
    ]
    assert check_axes(program, machine("A", "B", "C")) == ()


def test_places_that_are_not_stated() -> None:
    """A feed motion may start only where every axis of the machine has been sent, or was told to stand."""
    text = MODES + "T1 M6\nS1000 M3\nG43 H1\nG0 Z5\nG1 X1 F5\nG1 Y1\nM2\n"
    found = check_places(read(text), machine("C"))
    assert [(finding.line, finding.worst, finding.message[-8:]) for finding in found] == [
        (8, 1.0, "X stands"),
        (8, 2.0, "Y stands"),
        (8, 2.0, "C stands"),
    ]
    assert check_places(read(text, start_words=[0] * 6, length_offsets={1: 9.0}), machine("C")) == ()
    assert check_places(cut("G1 X1 F5"), machine("C")) == ()


def test_cutters_that_are_not_there() -> None:
    program = cut("G1 X1 F5\nT3 M6\nM3\nG43 H3\nG1 X5")
    assert check_cutters(program, {1, 3}) == ()
    found = check_cutters(program, [1])
    assert [(finding.check, finding.line) for finding in found] == [("cutter known", HEAD_LINES + 5)] * 2


def test_records_cannot_be_written_to() -> None:
    motions = cut("G1 X1 F5").motions
    for name in motions.__slots__:
        with pytest.raises(ValueError, match="read-only"):
            getattr(motions, name)[0] = 0
