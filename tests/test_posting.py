"""The posted text: legal to the letter, exact to the last digit, constant memory."""

from __future__ import annotations

import io
import re
import tracemalloc
from dataclasses import replace

import numpy as np
import pytest

from anticlast.posting.writer import comment, plain, program_lines, write_program
from anticlast.records import AxisPath, Job, Purpose

# NISTIR 6556 sections 3.3.2 and 3.3.2.1: legal words are a letter of this list and a plain real number.
WORD = re.compile(r"[ABCDFGHIJKLMNPQRSTXYZ][+-]?(?:\d+\.?\d*|\.\d+)")
LINE = re.compile(rf"(?:{WORD.pattern}(?: {WORD.pattern})*|\([^()]*\)|%)")


def axis_path(job: Job, n: int = 200, *, minutes: float = 0.001) -> AxisPath:
    """A wandering path with a descent at rapid, as the machine stage would hand it over."""
    letters = job.machine.letters
    rng = np.random.default_rng(7)
    words = np.round(np.cumsum(rng.normal(0.0, 0.2, (n, len(letters))), axis=0), 4)
    rapid = np.zeros(n, bool)
    rapid[:2] = True
    return AxisPath(
        operation=job.operations[0],
        letters=letters,
        words=words,
        rapid=rapid,
        minutes=np.full(n, minutes),
        purpose=np.where(rapid, Purpose.RAPID, Purpose.CUT).astype(np.uint8),
        pass_index=np.where(rapid, -1, np.arange(n) // 50),
        start=np.zeros(len(letters)),
    )


def texts(job: Job, path: AxisPath) -> list[str]:
    return list(program_lines(job, [path]))


@pytest.mark.parametrize("machine", ["mill-3", "rotary-a", "trunnion-ac"])
@pytest.mark.parametrize("units", ["mm", "inch"])
def test_every_line_is_in_the_grammar(make_job, machine, units) -> None:
    job = replace(make_job(machine=machine), units=units)
    for line in texts(job, axis_path(job)):
        assert len(line) < 256
        assert LINE.fullmatch(line), line


def test_one_word_of_a_letter_a_line_and_no_letter_twice(make_job) -> None:
    job = make_job()
    for line in texts(job, axis_path(job)):
        if line.startswith("("):
            continue
        letters = [word[0] for word in WORD.findall(line) if word[0] not in "GM"]
        assert len(letters) == len(set(letters)), line


def test_inverse_time_gives_f_on_every_feed_line_and_minutes_come_back(make_job) -> None:
    """NISTIR 6556 section 3.5.19: under G93, F is one over the minutes, on every line that feeds."""
    job = make_job()
    path = axis_path(job, minutes=0.0025)
    lines = texts(job, path)
    body = lines[lines.index("G93") + 1 : lines.index("G94", lines.index("G93"))]
    feeding = False
    seen = 0
    for line in body:
        if line.startswith("("):
            continue
        feeding = line.startswith("G1") or (feeding and not line.startswith("G0"))
        assert ("F" in line) == feeding, line
        if feeding:
            seen += 1
            assert float(line.rpartition("F")[2]) == pytest.approx(1 / 0.0025, abs=0.0005)
    assert seen == 198


def test_per_minute_feed_never_faster_than_asked_and_at_most_two_percent_slower(make_job) -> None:
    job = make_job(machine="mill-3")
    path = axis_path(job)
    standing = {"X": 0.0, "Y": 0.0, "Z": 0.0}
    feed = 0.0
    rows = iter(range(len(path.rapid)))
    for line in texts(job, path):
        words = dict((word[0], float(word[1:])) for word in WORD.findall(line) if word[0] in "XYZF")
        if line.startswith("(") or not words:
            continue
        if set(words) == {"Z"} and line.startswith("G0"):  # Z goes alone first; the rest of row 0 follows
            standing.update(words)
            continue
        row = next(rows)
        before = np.array(list(standing.values()))
        feed = words.pop("F", feed)
        standing.update(words)
        if not path.rapid[row]:
            length = float(np.linalg.norm(np.array(list(standing.values())) - before))
            minutes = length / feed
            assert 0.999 * path.minutes[row] <= minutes <= 1.03 * path.minutes[row]


def test_words_come_back_to_the_last_digit(make_job) -> None:
    job = make_job()
    path = axis_path(job)
    standing = np.full(5, np.nan)
    row = 0
    for line in texts(job, path):
        words = {word[0]: float(word[1:]) for word in WORD.findall(line) if word[0] in "XYZAC"}
        if line.startswith("(") or not words:
            continue
        for letter, value in words.items():
            standing["XYZAC".index(letter)] = value
        if np.isnan(standing).any():  # Z goes alone first; the rest of row 0 follows
            assert set(words) == {"Z"}
            continue
        np.testing.assert_allclose(standing, path.words[row], atol=1e-9)
        row += 1
    assert row == len(path.words)


def test_inch_words_are_inches(make_job) -> None:
    job = replace(make_job(machine="mill-3"), units="inch")
    path = axis_path(job)
    last = [line for line in texts(job, path) if re.match(r"(G1 )?X", line)][-1]
    x_inch = float(re.search(r"X(-?[\d.]+)", last).group(1))
    assert x_inch * 25.4 == pytest.approx(path.words[-1, 0], abs=0.5e-5 * 25.4)
    assert "G20" in texts(job, path)


def test_the_end_is_spelled_out(make_job) -> None:
    """M2 cancels neither the length offset nor anything else but what section 3.6.1 lists."""
    job = make_job()
    lines = texts(job, axis_path(job))
    assert lines[-5:] == ["M5", "M9", "G49", "M2", "%"]
    assert lines[0] == "%"
    assert sum(line in {"M2", "M30"} for line in lines) == 1


def test_order_of_start_tool_then_spindle_then_offset(make_job) -> None:
    job = make_job()
    lines = texts(job, axis_path(job))
    start = lines.index("T1 M6")
    assert lines[start : start + 4] == ["T1 M6", "S16000 M3", "G43 H1", "G93"]


def test_line_numbers_wrap_below_six_digits(make_job) -> None:
    job = make_job()
    control = replace(job.machine.control, line_numbers=True)
    job = replace(job, machine=replace(job.machine, control=control))
    numbers = [
        int(match.group(1))
        for line in texts(job, axis_path(job, 100_050))
        if (match := re.match(r"N(\d+) ", line))
    ]
    assert max(numbers) == 99999
    assert numbers[-1] < 200


def test_memory_does_not_grow_with_the_program(make_job) -> None:
    """Ten times the blocks may not need twice the memory."""
    job = make_job()
    peaks = []
    for n in (20_000, 200_000):
        path = axis_path(job, n)
        tracemalloc.start()
        write_program(job, [path], _Sink())
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[1] < 2 * peaks[0]


class _Sink(io.TextIOBase):
    def write(self, text: str) -> int:
        return len(text)


@pytest.mark.parametrize(
    ("value", "decimals", "text"),
    [
        (-0.00001, 4, "0"),
        (1.5, 4, "1.5"),
        (100.0, 0, "100"),
        (-2.0, 3, "-2"),
        (0.00005, 4, "0.0001"),
        (1e-9, 4, "0"),
    ],
)
def test_plain_numbers(value, decimals, text) -> None:
    assert plain(value, decimals) == text


def test_comments_cannot_break_out() -> None:
    assert comment("tile (left) ümlaut\n%") == "(tile [left] ?mlaut?%)"
    assert len(comment("x" * 500)) < 256


def test_write_program_returns_where_operations_start(make_job) -> None:
    job = make_job()
    stream = io.StringIO()
    starts = write_program(job, [axis_path(job)], stream)
    lines = stream.getvalue().splitlines()
    assert len(starts) == 1
    assert lines[starts[0] - 1].startswith("(OPERATION 1")
