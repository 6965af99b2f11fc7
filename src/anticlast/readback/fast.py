"""Hands runs of plain lines to the compiled reader and takes its state back: same results, only faster."""

from __future__ import annotations

import numpy as np

from anticlast.readback import _kernels as kernels
from anticlast.readback.interpreter import Interpreter

_NEEDED = frozenset(("units", "distance", "work offset"))


def ready(control: Interpreter) -> bool:
    """Return whether plain lines would need no report that only the interpreter makes."""
    state = control.state
    return not state.ended and state.moved and state.stated.union(state.told) >= _NEEDED


def run_plain(
    text: np.ndarray, at: int, line: int, control: Interpreter, block_delete: bool
) -> tuple[int, int]:
    """Read plain lines from ``at`` on, as far as they reach.

    Parameters
    ----------
    text : (n,) uint8
        The whole program.
    at, line : int
        Where the next line starts, and how many lines come before it.
    control : Interpreter
        Its state and columns are carried on.
    block_delete : bool
        Whether lines with "/" are skipped.

    Returns
    -------
    (at, line) : (int, int)
        Where a line that is not plain starts, or the end.
    """
    state, columns = control.state, control.columns
    columns.make_room()
    ints = np.zeros(kernels.INTS, dtype=np.int64)
    floats = np.zeros(kernels.FLOATS)
    ints[kernels.MOTION] = {0: 0, 10: 1}.get(-1 if state.motion is None else state.motion, -1)
    ints[kernels.ABSOLUTE] = state.absolute
    ints[kernels.INVERSE] = state.inverse
    ints[kernels.MAY_FEED] = "feed mode" in state.stated or "feed mode" in state.told
    ints[kernels.MAY_DELETE] = not block_delete
    ints[kernels.AXES_READY] = state.named & state.known if state.absolute else state.named
    floats[kernels.FEED] = state.feed
    floats[kernels.FACTOR] = state.factor
    floats[kernels.POSITION : kernels.POSITION + 6] = state.at
    floats[kernels.SHIFT : kernels.SHIFT + 6] = state.shift
    low = columns.rows
    held = columns.held
    at, line, row, blocks = kernels.read_plain(
        text, at, line, ints, floats, low,
        held["line"], held["shape"], columns.start, columns.end, held["feed_word"],
    )  # fmt: skip
    if row > low:
        # Centre and turns stay as they were made: zero. Only a line that breaks the language leaves dropped
        # rows behind, and no row after it is kept.
        columns.constants(low, row, state)
        columns.rows = row
        control.blocks += blocks
        place = floats[kernels.POSITION : kernels.POSITION + 6].tolist()
        state.at = (place[0], place[1], place[2], place[3], place[4], place[5])
        state.feed = float(floats[kernels.FEED])
        state.motion = 10 if ints[kernels.MOTION] == 1 else 0
        state.depth = state.clear = state.dwell = None
    return int(at), int(line)
