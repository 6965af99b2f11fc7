"""Cutter lengths that a program says it was made for, against the lengths at hand.

Where a rotary axis carries the cutter, X Y Z hold its gauge length: with another length the same text cuts another form. A
program may state the length in a message, ``(MSG, T1 GAUGE LENGTH 79 MM)``, which the control also shows to the operator
(NISTIR 6556 section 3.3.4). The statement can only withhold a program; without one the geometry alone decides.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Final

from anticlast.records import Finding, Machine, ReadProgram

_STATED: Final = re.compile(r"T(\d{1,5}) GAUGE LENGTH (\d{1,6}(?:\.\d{1,9})?) (MM|INCH)")
# A last digit of a length as it is measured and written down, 0.001 mm or 0.0001 inch.
_DIGIT_MM: Final = {"MM": 0.001, "INCH": 0.00254}
_UNIT_MM: Final = {"MM": 1.0, "INCH": 25.4}


def check_lengths(
    program: ReadProgram, machine: Machine, gauge_length_by_tool: Mapping[int, float]
) -> tuple[Finding, ...]:
    """Compare each gauge length that the program states with that of the cutter; only where the cutter tilts.

    Parameters
    ----------
    program : ReadProgram
    machine : Machine
    gauge_length_by_tool : Mapping[int, float]
        Tip to spindle gauge point of each cutter, mm.

    Returns
    -------
    tuple of Finding
        Check "gauge length", one for each statement about a known cutter.
    """
    if not any(axis.carries == "cutter" for axis in machine.rotary):
        return ()
    found = []
    for event in program.events:
        stated = _STATED.fullmatch(str(event.value).strip().upper()) if event.what == "message" else None
        if stated is None or int(stated[1]) not in gauge_length_by_tool:
            continue
        unit, tool = stated[3], int(stated[1])
        made_for = float(stated[2]) * _UNIT_MM[unit]
        at_hand = gauge_length_by_tool[tool]
        ok = abs(made_for - at_hand) <= _DIGIT_MM[unit]
        message = f"T{tool}: the program was made for a gauge length of {made_for:.3f} mm"
        message += (
            ", which the cutter has"
            if ok
            else f", the cutter has {at_hand:.3f} mm; the cutter tilts, so X Y Z hold that length: post the program again"
        )
        found.append(Finding("gauge length", ok, made_for, at_hand, "mm", event.line, message))
    return tuple(found)
