"""The tables of a machine file, their checks, and the record made of them.

``docs/machine-file.md`` lists the same keys with their units, ranges and defaults.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Final, Literal

from anticlast.errors import BadInput
from anticlast.file_schema import (
    LONGEST_LINE,
    Checked,
    FileTable,
    Quantity,
    Says,
    Units,
    check_table,
    found_text,
    is_line,
    nearest,
    needed_option,
    unknown_key,
)
from anticlast.records import Axis, Control, Machine, Spindle, Times
from anticlast.toml_lines import Source

LINEAR: Final = ("X", "Y", "Z")
_KINDS: Final = ("linear", "rotary")
MACHINE_TABLES: Final = ("machine", "axis", "spindle", "control", "times")

Coordinate = Annotated[float, Quantity("length", -5000, 5000)]
Angle = Annotated[float, Quantity("degrees", -36000, 36000)]
UnitPart = Annotated[float, Quantity("", -1e6, 1e6)]
Digits = Annotated[int, Quantity("", 0, 6, whole=True)]


class MachineHead(FileTable):
    """``[machine]``."""

    title: Annotated[str, Says("text in quotes")]
    units: Literal["mm", "inch"] = "mm"
    pivot_length: Annotated[float, Quantity("length", 0, 1000)] = 0.0


class LinearAxis(FileTable):
    """``[[axis]]`` with ``kind = "linear"``."""

    letter: Literal["X", "Y", "Z"]
    kind: Literal["linear"]
    limits: Annotated[tuple[Coordinate, Coordinate], Says("[low, high], two numbers")]
    rapid: Annotated[float, Quantity("feed", 0, 200000, above=True)]
    feed: Annotated[float, Quantity("feed", 0, 200000, above=True)]
    acceleration: Annotated[float, Quantity("acceleration", 0, 100000, above=True)]
    jerk: Annotated[float, Quantity("jerk", 0, 10000000, above=True)]


class RotaryAxis(FileTable):
    """``[[axis]]`` with ``kind = "rotary"``."""

    letter: Literal["A", "B", "C"]
    kind: Literal["rotary"]
    carries: Literal["work", "cutter"]
    direction: Annotated[tuple[UnitPart, UnitPart, UnitPart], Says("[i, j, k], three numbers")]
    through: Annotated[tuple[Coordinate, Coordinate, Coordinate], Says("[x, y, z], three numbers")] = (
        0.0,
        0.0,
        0.0,
    )
    turns: Annotated[int, Says("1 or -1")] | None = None
    limits: Annotated[tuple[Angle, Angle], Says("[low, high], two numbers in degrees")] | None = None
    rapid: Annotated[float, Quantity("degrees/min", 0, 1000000, above=True)]
    feed: Annotated[float, Quantity("degrees/min", 0, 1000000, above=True)]
    acceleration: Annotated[float, Quantity("degrees/s^2", 0, 1000000, above=True)]
    jerk: Annotated[float, Quantity("degrees/s^3", 0, 100000000, above=True)]


class SpindleTable(FileTable):
    """``[spindle]``."""

    min: Annotated[float, Quantity("rev/min", 0, 200000)]
    max: Annotated[float, Quantity("rev/min", 1, 200000)]
    power: Annotated[float, Quantity("kW", 0, 100, above=True)]


class DecimalsTable(FileTable):
    """``decimals`` of ``[control]``."""

    length: Annotated[int, Quantity("", 2, 6, whole=True)] = 4
    angle: Annotated[int, Quantity("", 2, 6, whole=True)] = 4
    feed: Annotated[int, Quantity("", 0, 6, whole=True)] = 3


class ControlTable(FileTable):
    """``[control]``."""

    feed_mode: Literal["inverse", "per-minute"] = "inverse"
    path_mode: Literal["G61", "G61.1", "G64"] = "G64"
    decimals: Annotated[Any, Says("{ length = 4, angle = 4, feed = 3 }")] = None
    block_rate: Annotated[float, Quantity("blocks/s", 0, 100000)] = 0.0
    line_numbers: bool = False
    program_end: Literal["M2", "M30"] = "M2"


class TimesTable(FileTable):
    """``[times]``."""

    tool_change: Annotated[float, Quantity("s", 0, 3600)] = 0.0
    spindle_start: Annotated[float, Quantity("s", 0, 3600)] = 0.0
    coolant: Annotated[float, Quantity("s", 0, 3600)] = 0.0


def machine_from(source: Source, name: str, path: Path) -> Machine:
    """Check a machine file's data and make the record.

    Parameters
    ----------
    source : Source
        Parsed file; takes the faults.
    name : str
        The machine's name, the file's stem.
    path : Path
        Where the file is.

    Raises
    ------
    BadInput
        With every fault of the file, in file order.
    """
    for key in source.data:
        if key not in MACHINE_TABLES:
            source.add((key,), unknown_key(key, MACHINE_TABLES))
    raw_head = source.data.get("machine", {})
    units: Units = "inch" if isinstance(raw_head, Mapping) and raw_head.get("units") == "inch" else "mm"
    if "machine" not in source.data:
        source.add(("machine",), "missing; needs a table [machine] with the key title")
    head = (
        check_table(source, ("machine",), raw_head, MachineHead, units) if "machine" in source.data else None
    )
    title = head.get("title") if head is not None else None
    if head is not None and title is not None and not (title.strip() and is_line(title)):
        head.fault("title", f"found {found_text(title)}; needs one line of 1 to {LONGEST_LINE} characters")
    axes = _axes(source, units)
    spindle = _spindle(source, units)
    control, decimals = _control(source, units)
    times = check_table(source, ("times",), source.data.get("times", {}), TimesTable, units)
    if source.faults:
        raise BadInput(sorted(source.faults, key=lambda fault: fault.line))
    assert head is not None, "a missing [machine] is a fault"
    table = control.table
    return Machine(
        name=name,
        title=head.table.title,
        units=units,
        pivot_length_mm=head.table.pivot_length,
        axes=tuple(_axis_record(axis.table) for axis in axes),
        spindle=Spindle(spindle.table.min, spindle.table.max, spindle.table.power),
        control=Control(
            feed_mode=table.feed_mode,
            path_mode=table.path_mode,
            length_decimals=decimals.table.length,
            angle_decimals=decimals.table.angle,
            feed_decimals=decimals.table.feed,
            block_rate=table.block_rate,
            line_numbers=table.line_numbers,
            program_end=table.program_end,
        ),
        source=path,
        times=Times(times.table.tool_change, times.table.spindle_start, times.table.coolant),
    )


def _axes(source: Source, units: Units) -> list[Checked[Any]]:
    """Check all axes; X Y Z first, rotary axes in the file's order (from the machine frame outwards)."""
    raw = source.data.get("axis")
    if raw is None:
        source.add(("axis",), "missing; needs an [[axis]] for each of X, Y, Z and every rotary axis")
        return []
    if not isinstance(raw, (list, tuple)):
        source.add(
            ("axis",), f"found {found_text(raw)}; needs one [[axis]] for each axis, in double brackets"
        )
        return []
    checked: list[Checked[Any]] = []
    first_with: dict[str, int] = {}
    for position, item in enumerate(raw):
        axis = _one_axis(source, position, item, units)
        if axis is None:
            continue
        checked.append(axis)
        letter = axis.get("letter")
        if letter in first_with:
            axis.fault(
                "letter", f'found "{letter}" again; axis[{first_with[letter]}] has that letter already'
            )
        elif letter is not None:
            first_with[letter] = position + 1
    known = all(axis.get("letter") for axis in checked) and len(checked) == len(raw)
    missing = [letter for letter in LINEAR if letter not in first_with]
    if missing and known:
        source.add(("axis",), f"no [[axis]] with the letter {' or '.join(missing)}; needs X, Y and Z")
    rotary = [axis for axis in checked if axis.model is RotaryAxis]
    if len(rotary) > 2:
        rotary[2].fault("", f"found {len(rotary)} rotary axes; needs at most 2")
    return sorted(
        checked, key=lambda axis: LINEAR.index(axis.get("letter")) if axis.get("letter") in LINEAR else 3
    )


def _one_axis(source: Source, position: int, raw: Any, units: Units) -> Checked[Any] | None:
    at = ("axis", position)
    kind = raw.get("kind") if isinstance(raw, Mapping) else None
    if isinstance(raw, Mapping) and kind not in _KINDS:
        near = nearest(kind, _KINDS) if isinstance(kind, str) else None
        hint = f'; nearest is "{near}"' if near else ""
        found = f"found {found_text(kind)}" if "kind" in raw else "missing"
        source.add((*at, "kind"), f"{found}; needs {needed_option(_KINDS)}{hint}")
        return None
    model: type[FileTable] = RotaryAxis if kind == "rotary" else LinearAxis
    axis: Checked[Any] = check_table(source, at, raw, model, units)
    limits = axis.get("limits")
    if limits is not None and not limits[0] < limits[1]:
        axis.fault("limits", "the low limit is not below the high limit; needs [low, high]")
    elif limits is not None and model is RotaryAxis and not limits[0] <= 0.0 <= limits[1]:
        axis.fault(
            "limits",
            f"0 is outside {limits[0]:g} to {limits[1]:g}; needs limits that take in 0, where programs start",
        )
    turns = axis.get("turns")
    if turns is not None and turns not in (-1, 1):
        axis.fault("turns", f"found {turns}; needs 1 or -1")
    direction = axis.get("direction")
    if direction is not None and math.hypot(*direction) == 0.0:
        axis.fault(
            "direction",
            "found a direction of no length; needs one that points somewhere, such as [1.0, 0.0, 0.0]",
        )
    return axis


def _spindle(source: Source, units: Units) -> Checked[SpindleTable]:
    if "spindle" not in source.data:
        source.add(("spindle",), "missing; needs a table [spindle] with the keys min, max, power")
    raw = source.data.get("spindle", {})
    if "spindle" not in source.data:
        return Checked(source, ("spindle",), {}, frozenset(), SpindleTable)
    spindle = check_table(source, ("spindle",), raw, SpindleTable, units)
    if spindle.all_of("min", "max") and spindle.get("min") >= spindle.get("max"):
        spindle.fault(
            "min",
            f"found {spindle.get('min'):g}; needs less than max, which is {spindle.get('max'):g} rev/min",
        )
    return spindle


def _control(source: Source, units: Units) -> tuple[Checked[ControlTable], Checked[DecimalsTable]]:
    control = check_table(source, ("control",), source.data.get("control", {}), ControlTable, units)
    raw = control.get("decimals")
    decimals = check_table(source, ("control", "decimals"), {} if raw is None else raw, DecimalsTable, units)
    return control, decimals


def _axis_record(table: LinearAxis | RotaryAxis) -> Axis:
    if isinstance(table, LinearAxis):
        column = LINEAR.index(table.letter)
        unit = (float(column == 0), float(column == 1), float(column == 2))
        return Axis(
            table.letter,
            "linear",
            table.limits,
            table.rapid,
            table.feed,
            table.acceleration,
            table.jerk,
            direction=unit,
        )
    size = math.hypot(*table.direction)
    i, j, k = (part / size for part in table.direction)
    turns = table.turns if table.turns is not None else (-1 if table.carries == "work" else 1)
    return Axis(
        letter=table.letter,
        kind="rotary",
        limits=table.limits,
        rapid=table.rapid,
        feed=table.feed,
        acceleration=table.acceleration,
        jerk=table.jerk,
        carries=table.carries,
        direction=(i, j, k),
        through=table.through,
        turns=turns,
    )
