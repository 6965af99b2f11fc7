"""The compiled reader against the interpreter on generated programs, and both against noise."""

from __future__ import annotations

import time
import tracemalloc

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from anticlast.errors import BadInput
from anticlast.readback import _kernels as kernels
from anticlast.readback import fast
from anticlast.readback.cycles import MOST_REPEATS
from anticlast.readback.expressions import NUMBER
from anticlast.readback.fast import run_plain
from anticlast.readback.reader import read_bytes
from anticlast.records import ReadProgram

HEAD = b"G21\nG17 G40 G49 G80 G90 G94\nG54 G64\nT1 M6\nS1000 M3\nG43 H1\nG0 X0 Y0 Z0 A0 B0 C0\n"


def agree(data: bytes, **options: object) -> ReadProgram:
    """Read twice, with and without the compiled reader, and compare everything."""
    fast = read_bytes(data, "p", plain_lines=True, **options)
    full = read_bytes(data, "p", plain_lines=False, **options)
    for name in fast.motions.__slots__:
        one, other = getattr(fast.motions, name), getattr(full.motions, name)
        assert np.array_equal(one, other, equal_nan=one.dtype.kind == "f"), (name, data)
    assert (fast.events, fast.findings, fast.blocks, fast.units) == (
        full.events, full.findings, full.blocks, full.units,
    ), data  # fmt: skip
    return fast


blank = st.sampled_from(["", "", "", " ", "\t", "  "])
number = st.one_of(
    st.integers(-400, 400).map(str),
    st.floats(-2e3, 2e3).map(lambda value: f"{value:.4f}"),
    st.floats(-9e5, 9e5).map(lambda value: f"{value:.13f}"),
    st.sampled_from(["0", "-0", "+.5", "5.", "007", "-0.0", ".", "1.2.3", "- 5", "1 2", "9999999999", "1e3"]),
    st.sampled_from(["123456789012345.5", "0.00000000000000000000000001", "3.14159265358979312"]),
)
axis_word = st.tuples(st.sampled_from("XYZABCxyzabc"), blank, number, blank).map("".join)
plain_line = st.tuples(
    st.sampled_from(["", "", "", "/", "N12 ", "n 99999", "N123456 "]),
    blank,
    st.sampled_from(["", "", "G1 ", "G0", "g01 ", "G00 ", "G1.0 "]),
    st.lists(axis_word, min_size=0, max_size=5, unique_by=lambda word: word[0].upper()).map("".join),
    st.one_of(st.just(""), number.map(lambda value: "F" + value.lstrip("-"))),
).map("".join)
OTHER_LINES = """
(note)|(MSG, hello)|G90|G91|G93|G94|G20|G21|M5|M3 S200|M8|M9|G49|G43 H2|G2 X1 Y1 R5 F9
G3 X2 Y2 I1 J1 F3|G3 I1 X#1|#1=5|G1 X[1+2] F5|G92 X1 C5|G92.1|G92.2|G92.3|G55|G54|G81 Z-1 R1 X4
G80|T2 M6|G4 P1|X#1|G53 G0 X1|%|M2|Q5|G18|G17|M30|G28|G10 L2 P1 X1|G1 X1 X2|G64
G82 X1 Z-2 R1 P1 L3|G1 X1 (c) F3|G0 Y5;|G1X1Y2Z3F4|G1 G91 X5||\t
"""
other_line = st.sampled_from(OTHER_LINES.strip("\n").replace("\n", "|").split("|"))
program_text = st.lists(st.one_of(plain_line, plain_line, plain_line, other_line), max_size=30)


@settings(derandomize=True, max_examples=400, deadline=None)
@given(program_text, st.sampled_from(["\n", "\r\n", "\r"]), st.booleans(), st.booleans(), st.booleans())
def test_compiled_reader_and_interpreter_agree(lines, ending, headed, deleting, told) -> None:
    data = (HEAD if headed else b"") + ending.join(lines).encode()
    options: dict[str, object] = {"block_delete": deleting}
    if told:
        options |= {
            "length_offsets": {1: 40.0, 2: 50.0},
            "work_origin": [1.0, 2.0, 3.0],
            "start_words": [1, 2, 3],
        }
    agree(data, **options)


def posted(blocks: int, seed: int, inverse: bool) -> bytes:
    """A program as a post would write it: modal words, four decimals, F on each block under G93."""
    rng = np.random.default_rng(seed)
    steps = rng.normal(size=(blocks, 5)) * [0.3, 0.3, 0.05, 0.5, 2.0]
    words = np.cumsum(steps, axis=0)
    lines = ["G93" if inverse else "G94", "G1 X0 F9"]
    for row, keep in zip(words.tolist(), (rng.random((blocks, 5)) < 0.8).tolist(), strict=True):
        text = [
            f"{letter}{value:.4f}" for letter, value, kept in zip("XYZAC", row, keep, strict=True) if kept
        ]
        lines.append(" ".join(text or ["X0"]) + (f" F{rng.uniform(50, 4000):.3f}" if inverse else ""))
    return HEAD + "\n".join(lines).encode() + b"\nG94\nM2\n"


@pytest.mark.parametrize("inverse", [True, False])
def test_posted_programs_agree(inverse: bool, monkeypatch: pytest.MonkeyPatch) -> None:
    by_kernel = []

    def counted(text, at, line, control, block_delete):
        low = control.columns.rows
        result = run_plain(text, at, line, control, block_delete)
        by_kernel.append(control.columns.rows - low)
        return result

    monkeypatch.setattr(fast, "run_plain", counted)
    program = agree(posted(3000, 7, inverse))
    assert sum(by_kernel) == 3001
    assert program.findings == ()
    assert program.blocks == len(program.motions.line) + 9


@settings(derandomize=True, max_examples=300, deadline=None)
@given(
    st.one_of(
        st.floats(-1e9, 1e9).map(lambda value: f"{value:.9f}"),
        number,
        st.text("0123456789+-. \t", max_size=22),
    )
)
def test_compiled_numbers_are_correctly_rounded(text: str) -> None:
    """Twin: the grammar of section 3.3.2.1 as a pattern, and Python's own correctly rounded conversion."""
    data = np.frombuffer(text.encode() + b"\n", dtype=np.uint8)
    value, stop = kernels._number(data, 0)
    squeezed = text.replace(" ", "").replace("\t", "")
    found = NUMBER.match(squeezed)
    if stop >= 0:
        assert found
        assert value == float(found.group())
        assert text[stop:].replace(" ", "").replace("\t", "") == squeezed[found.end() :]
    elif found and found.end() == len(squeezed):
        assert (
            len(squeezed.strip("+-").replace(".", "").lstrip("0")) > 15
            or len(squeezed.partition(".")[2]) > 22
        )


def test_kernel_as_plain_python_gives_the_same() -> None:
    """Twin: the same function without compilation, on a posted program."""
    data = np.frombuffer(posted(60, 3, True), dtype=np.uint8)
    results = []
    for kernel in (kernels.read_plain, kernels.read_plain.py_func):
        ints, floats = np.zeros(kernels.INTS, dtype=np.int64), np.zeros(kernels.FLOATS)
        ints[:] = (1, 1, 1, 1, 1, 63)
        floats[kernels.FACTOR] = 1.0
        columns = (
            np.zeros(99, np.int64),
            np.zeros(99, np.uint8),
            np.zeros((99, 6)),
            np.zeros((99, 6)),
            np.zeros(99),
        )
        at = bytes(data).index(b"G93\n") + 4
        results.append([*kernel(data, at, 8, ints, floats, 0, *columns), *columns, ints, floats])
    assert results[0][2] > 55
    for one, other in zip(*results, strict=True):
        assert np.array_equal(one, other)


# ------------------------------------------------------------------------------------------ hostile input

SEEDS = [
    HEAD
    + b"G1 X1.5 Y-2 F100\nG93 G1 X2 A5 F30\nG94 G2 X3 Y0 I1 F9\n(MSG, x)\nG81 X1 Z-1 R1 L3 F5\nG80\nM2\n",
    HEAD + b"#1=[2*sin[30]]\nG1 X#1 Y[atan[1]/[2]] F5\nG91\nX.1\nG92 X0\nG10 L2 P2 X1\nG55\nG4 P1\nM30\n%\n",
    b"%\nN10 G20\n/G0 G90 G94 G54 G17 X1 Z2\nG1 X5 F9\nY5\nG3 X1 Y1 R9\nG82 Z-1 R2 P1 X1\nM5 M9\n%\n",
]
PIECES = [
    *(
        b"G1 ",
        b"G0",
        b"G2 ",
        b"G3",
        b"G81 ",
        b"G91 ",
        b"G92 ",
        b"G53 ",
        b"G93 ",
        b"X",
        b"Y-1",
        b"Z[",
        b"]",
        b"#1",
        b"#1=",
        b"(",
        b")",
    ),
    *(
        b"%",
        b"\n",
        b"\r",
        b"/",
        b"N5",
        b"M2",
        b"M6",
        b"T1",
        b"sqrt[",
        b"**",
        b"99999999999",
        b".",
        b"-",
        b"L9999",
        b"R1",
        b"\xff",
        b"E",
    ),
]


def mutated(rng: np.random.Generator) -> bytes:
    """Noise, pieces of the language, or a good program with bytes changed, cut or doubled."""
    kind = rng.integers(5)
    if kind == 0:
        return rng.integers(0, 256, rng.integers(1, 80), dtype=np.uint8).tobytes()
    if kind == 1:
        return rng.integers(9, 127, rng.integers(1, 120), dtype=np.uint8).tobytes()
    if kind == 2:
        return b"".join(PIECES[k] for k in rng.integers(len(PIECES), size=rng.integers(1, 30)))
    data = bytearray(SEEDS[rng.integers(len(SEEDS))])
    for _ in range(rng.integers(1, 6)):
        at = int(rng.integers(len(data)))
        change = rng.integers(4)
        if change == 0:
            data[at] = rng.integers(1, 256)
        elif change == 1:
            del data[at : at + int(rng.integers(1, 9))]
        elif change == 2:
            data[at:at] = PIECES[rng.integers(len(PIECES))]
        else:
            data[at:at] = data[at : at + int(rng.integers(1, 40))]
        if not data:
            break
    return bytes(data)


def test_no_text_crashes_the_reader() -> None:
    """20,000 seeded inputs: each gives a record or BadInput, none takes long, every fifth agrees."""
    rng = np.random.default_rng(6556)
    read = unusable = clean = 0
    slowest = 0.0
    for k in range(20_000):
        data = mutated(rng)
        began = time.perf_counter()
        try:
            program = agree(data) if k % 5 == 0 else read_bytes(data, "noise")
        except BadInput:
            unusable += b"\0" in data
            continue
        slowest = max(slowest, time.perf_counter() - began)
        read += 1
        clean += all(found.check != "language" for found in program.findings)
        assert np.isfinite(program.motions.end).all()
        assert len(program.findings) < 60
    assert read + unusable == 20_000
    assert min(read, unusable, clean) > 100  # the mutations reach all three outcomes
    assert slowest < 2.0


@pytest.mark.parametrize(
    "data",
    [
        HEAD + b"G91 G81 X1 Z-1 R1 F1 L3000\n" * 40 + b"M2\n",
        HEAD + b"X" * 5_000_000,
        HEAD + b"G1 X" + b"[" * 250 + b"\nM2\n",
        HEAD + b"G1 X" + b"#" * 250 + b"\nM2\n",
        HEAD + b"G1 X" + b"[" * 100 + b"1" + b"]" * 100 + b" F1\nM2\n",
        HEAD + b"\r" * 3_000_000,
        HEAD + b"(" * 250,
        b"%\n" * 100_000,
        HEAD + b"M2\n" + b"(x)\n" * 50_000,
    ],
    ids=["repeats", "long line", "brackets", "marks", "deep", "line ends", "comments", "percent", "tail"],
)
def test_memory_and_time_are_bounded(data: bytes) -> None:
    tracemalloc.start()
    began = time.perf_counter()
    try:
        program = read_bytes(data, "hostile")
        _, peak = tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    assert time.perf_counter() - began < 20.0
    assert peak < 600 * (len(data) + 4 * MOST_REPEATS)  # a few rows of some 200 bytes for each repeat
    assert len(program.findings) <= 30


def test_deep_brackets_are_legal() -> None:
    program = read_bytes(HEAD + b"G1 X" + b"[" * 120 + b"1.5" + b"]" * 120 + b"F1\nM2\n", "deep")
    assert program.findings == ()
    assert program.motions.end[-1, 0] == 1.5
