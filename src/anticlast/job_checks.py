"""Checks across the keys of a job file: what fits together, what is missing, what contradicts."""

from __future__ import annotations

import math
import unicodedata
from pathlib import Path
from typing import Any, Final

import numpy as np

from anticlast.file_schema import (
    LONGEST_LINE,
    Checked,
    Quantity,
    Units,
    describe,
    found_text,
    is_line,
    key_types,
    nearest,
    needed_option,
)
from anticlast.job_schema import (
    FINISH_PATTERNS,
    OUTLINE_KEYS,
    OUTLINE_PATTERNS,
    ROUGH_PATTERNS,
    CutterTable,
    Direction,
    JobTable,
    OperationTable,
    OutlineTable,
    StockTable,
)
from anticlast.outline import Outline
from anticlast.records import Floats, Machine
from anticlast.tolerances import SAME_POINT_MM

_LENGTH: Final = Quantity("length", 0, 0)


def length_text(value_mm: float, units: Units) -> str:
    """Write a length in the file's units, unit included."""
    return f"{value_mm / _LENGTH.factor(units):.6g} {_LENGTH.unit_name(units)}"


def slug_of(name: str) -> str:
    """Name for the outputs: lower-case ASCII letters and digits, everything between them one hyphen."""
    plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode("ascii").lower()
    words = "".join(letter if letter.isalnum() else " " for letter in plain).split()
    return "-".join(words)[:80].strip("-")


# Names that Windows keeps for devices, whatever the suffix; a file of such a name cannot be made there.
_DEVICES: Final = {
    "con",
    "prn",
    "aux",
    "nul",
    *(f"{port}{digit}" for port in ("com", "lpt") for digit in range(1, 10)),
}


def check_job(job: Checked[JobTable]) -> None:
    """The name must give file names."""
    name = job.get("name")
    if name is None:
        return
    slug = slug_of(name)
    if not is_line(name):
        job.fault("name", f"found {found_text(name)}; needs one line of at most {LONGEST_LINE} characters")
    elif not slug:
        job.fault("name", f"found {found_text(name)}; needs a letter of A to Z or a digit, to name the files")
    elif slug in _DEVICES:
        job.fault(
            "name",
            f'found {found_text(name)}; Windows keeps the file name "{slug}" for itself, needs another name',
        )


def check_outline_keys(outline: Checked[OutlineTable], units: Units) -> bool:
    """Check that keys and sizes fit the shape; return whether an outline can be built."""
    shape = outline.get("shape")
    if shape is None:
        return False
    needed, optional = OUTLINE_KEYS[shape]
    good = all(outline.get(key) is not None for key in (*needed, *outline.given))
    for key in needed:
        if key not in outline.given:
            what = describe(key_types(OutlineTable)[key], units)
            outline.fault(key, f'missing; the shape "{shape}" needs {what}')
    for key in sorted(outline.given & set(OutlineTable.model_fields) - {"shape", *needed, *optional}):
        keys = ", ".join((*needed, *optional))
        outline.fault(key, f'has no place in the shape "{shape}", whose keys are {keys}')
    size, radius = outline.get("size"), outline.get("corner_radius")
    if shape == "rectangle" and size is not None and radius is not None and radius > min(size) / 2:
        limit = length_text(min(size) / 2, units)
        outline.fault(
            "corner_radius",
            f"found {length_text(radius, units)}; needs at most half the shorter side, {limit}",
        )
        good = False
    points = outline.get("points")
    if shape == "polygon" and points is not None and len(points) < 3:
        outline.fault("points", f"found {len(points)} points; needs at least three")
        good = False
    return good


def check_cutter(cutter: Checked[CutterTable], units: Units) -> None:
    """Corner radius, flutes and stickout must make one cutter."""
    shape, diameter, corner = cutter.get("shape"), cutter.get("diameter"), cutter.get("corner_radius")
    if shape == "bull" and "corner_radius" not in cutter.given:
        what = describe(key_types(CutterTable)["corner_radius"], units)
        cutter.fault("corner_radius", f'missing; the shape "bull" needs {what}')
    if shape in ("ball", "flat") and "corner_radius" in cutter.given:
        cutter.fault(
            "corner_radius",
            f'has no place in the shape "{shape}"; only a "bull" has a corner radius of its own',
        )
    if shape == "bull" and diameter is not None and corner is not None and corner >= diameter / 2:
        limit = length_text(diameter / 2, units)
        cutter.fault(
            "corner_radius", f"found {length_text(corner, units)}; needs less than half the diameter, {limit}"
        )
    flute, stickout = cutter.get("flute_length"), cutter.get("stickout")
    if flute is not None and stickout is not None and flute > stickout:
        limit = length_text(stickout, units)
        cutter.fault(
            "flute_length", f"found {length_text(flute, units)}; needs at most the stickout, {limit}"
        )
    end = {"ball": diameter and diameter / 2, "bull": corner}.get(shape) if shape else None
    if flute is not None and end is not None and flute < end:
        what = "radius of the ball" if shape == "ball" else "corner radius"
        cutter.fault(
            "flute_length",
            f"found {length_text(flute, units)}; needs at least the {what}, {length_text(end, units)}",
        )


def check_numbers(cutters: list[Checked[CutterTable]]) -> None:
    """No two cutters may have one number."""
    first_with: dict[int, int] = {}
    for position, cutter in enumerate(cutters, start=1):
        number = cutter.get("number")
        if number in first_with:
            cutter.fault(
                "number", f"found {number} again; cutter[{first_with[number]}] has that number already"
            )
        elif number is not None:
            first_with[number] = position


def check_operation(
    operation: Checked[OperationTable],
    cutters: list[Checked[CutterTable]],
    machine: Machine | None,
    units: Units,
) -> None:
    """Everything that can be said of an operation without working out its speeds."""
    number = operation.get("cutter")
    numbers = {cutter.get("number"): cutter for cutter in cutters if cutter.get("number") is not None}
    cutter = numbers.get(number)
    if number is not None and cutter is None and numbers and len(numbers) == len(cutters):
        known = ", ".join(str(each) for each in sorted(numbers))
        operation.fault("cutter", f"found {number}; needs the number of a [[cutter]] of this file: {known}")
    _check_pattern(operation, cutter)
    _check_step(operation, cutter, units)
    _exactly_one(operation, "spindle", "cutting_speed")
    _exactly_one(operation, "feed", "feed_per_tooth")
    spindle = operation.get("spindle")
    if spindle is not None and machine is not None:
        low, high = machine.spindle.min_rpm, machine.spindle.max_rpm
        if not low <= spindle <= high:
            operation.fault(
                "spindle",
                f"found {spindle:g}; needs from {low:g} to {high:g} rev/min, the range of {machine.name}",
            )
    _check_axis(operation, units)


def _exactly_one(operation: Checked[OperationTable], first: str, second: str) -> None:
    if first in operation.given and second in operation.given:
        operation.fault(second, f"given besides {first}; needs one of the two, not both")
    elif first not in operation.given and second not in operation.given:
        operation.fault("", f"neither {first} nor {second} is given; needs one of the two")


def pattern_of(operation: Checked[OperationTable]) -> str | None:
    """Pattern of an operation, or the default for what it does: layers, profile, else raster; None if bad."""
    if "pattern" in operation.given or operation.get("does") is None:
        return operation.get("pattern")
    return {"rough": "layers", "outline": "profile"}.get(operation.get("does"), "raster")


def _check_pattern(operation: Checked[OperationTable], cutter: Checked[CutterTable] | None) -> None:
    does, pattern = operation.get("does"), operation.get("pattern")
    resolved = pattern_of(operation)
    if resolved is not None and resolved != "matched" and "lead_margin" in operation.given:
        operation.fault(
            "lead_margin", f'has no place in the pattern "{resolved}"; only "matched" sets the lead itself'
        )
    if does is None or pattern is None:
        return
    allowed = {"rough": ROUGH_PATTERNS, "outline": OUTLINE_PATTERNS}.get(does, FINISH_PATTERNS)
    if pattern not in allowed:
        needed = needed_option(allowed)
        operation.fault("pattern", f'found "{pattern}"; an operation that does "{does}" needs {needed}')
    elif pattern == "matched" and cutter is not None and cutter.get("shape") == "ball":
        operation.fault(
            "pattern", 'found "matched" with a ball cutter; needs a bull or flat cutter, or another pattern'
        )


def _check_step(
    operation: Checked[OperationTable], cutter: Checked[CutterTable] | None, units: Units
) -> None:
    does, pattern = operation.get("does"), pattern_of(operation)
    both = "scallop" in operation.given and "stepover" in operation.given
    if both:
        operation.fault("stepover", "given besides scallop; needs one of the two, not both")
    elif does in ("finish", "semi-finish"):
        if "scallop" not in operation.given and "stepover" not in operation.given:
            operation.fault("", "neither scallop nor stepover is given; needs one of the two")
        elif "stepover" in operation.given and pattern in ("graded", "even", "matched"):
            operation.fault("stepover", f'has no place in the pattern "{pattern}"; needs scallop instead')
    stepover = operation.get("stepover")
    diameter = cutter.get("diameter") if cutter is not None else None
    if stepover is not None and diameter is not None and stepover >= diameter:
        limit = length_text(diameter, units)
        operation.fault(
            "stepover",
            f"found {length_text(stepover, units)}; needs less than the diameter of the cutter, {limit}",
        )


def _check_axis(operation: Checked[OperationTable], units: Units) -> None:
    axis = operation.get("axis")
    if axis is not None:
        if isinstance(axis, str) and axis in ("surface", "fixed"):
            if axis == "surface" and "fixed" in operation.given:
                operation.fault("fixed", 'given besides axis = "surface"; needs axis = "fixed", or no fixed')
        elif isinstance(axis, tuple):
            if "fixed" in operation.given:
                operation.fault("fixed", "given besides a direction in axis; needs the direction once")
            _check_direction(operation, "axis", axis, units)
        else:
            near = nearest(axis, ("surface", "fixed")) if isinstance(axis, str) else None
            hint = f'; nearest is "{near}"' if near else ""
            operation.fault(
                "axis", f'found {found_text(axis)}; needs "surface", "fixed" or a direction [i, j, k]{hint}'
            )
    if operation.get("fixed") is not None:
        _check_direction(operation, "fixed", operation.get("fixed"), units)


def _check_direction(
    operation: Checked[OperationTable], key: str, value: tuple[Any, ...], units: Units
) -> None:
    if len(value) != 3:
        operation.fault(key, f"found {found_text(value)}; needs {describe(Direction, units)}")
        return
    bad = [position for position, part in enumerate(value) if not _is_number(part)]
    for position in bad:
        place = (*operation.at, key, position)
        operation.source.add(place, f"found {found_text(value[position])}; needs a number")
    if bad:
        return
    if not value[2] > 0:
        operation.fault(
            key,
            f"found k = {value[2]:g}; needs k above 0: the direction points from the tip up to the spindle",
        )


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and abs(value) <= 1e6


def axis_of(table: OperationTable) -> tuple[float, float, float] | None:
    """Fixed cutter axis, a unit vector in part coordinates; None if the axis follows the surface."""
    if isinstance(table.axis, tuple):
        given = table.axis
    elif table.axis == "fixed" or (table.axis is None and table.fixed is not None):
        given = table.fixed or (0.0, 0.0, 1.0)
    else:
        return None
    size = math.hypot(*given)
    i, j, k = (part / size for part in given)
    return (i, j, k)


def surface_range(
    a_per_mm: float, b_per_mm: float, rotate_rad: float, outline: Outline
) -> tuple[Floats, Floats]:
    """Return the lowest and the highest point of the finished surface inside an outline.

    A saddle has no lowest or highest point of its own, so both lie on the boundary. Along an edge p + t d the
    height is q2 t^2 + q1 t + q0 with q2 = a dx'^2 - b dy'^2, q1 = 2 (a x' dx' - b y' dy'): its ends and
    t = -q1 / (2 q2) are all the candidates, exact for the polygon (derived here).

    Returns
    -------
    lowest, highest : (3,)
        Part coordinates, mm.
    """
    import shapely

    rings = [np.asarray(ring.coords)[:, :2] for ring in shapely.get_parts(shapely.get_rings(outline.polygon))]
    start = np.concatenate([ring[:-1] for ring in rings])
    step = np.concatenate([np.diff(ring, axis=0) for ring in rings])
    cos, sin = math.cos(rotate_rad), math.sin(rotate_rad)
    turn = np.array([[cos, sin], [-sin, cos]])
    p, d = start @ turn.T, step @ turn.T
    weight = np.array([a_per_mm, -b_per_mm])
    q2, q1 = (d * d) @ weight, 2.0 * (p * d) @ weight
    with np.errstate(divide="ignore", invalid="ignore"):
        t = np.where(q2 != 0.0, -q1 / (2.0 * q2), 0.0)
    t = np.clip(np.nan_to_num(t), 0.0, 1.0)
    xy = np.concatenate([start, start + t[:, None] * step])
    local = xy @ turn.T
    height = (local * local) @ weight
    points = np.column_stack([xy, height])
    return points[int(np.argmin(height))], points[int(np.argmax(height))]


def check_stock(stock: Checked[StockTable], surface: tuple[Floats, Floats] | None, units: Units) -> None:
    """The blank must have a height, one outline, and hold the finished surface."""
    top, bottom = stock.get("top"), stock.get("bottom")
    if "margin" in stock.given and "outline" in stock.given:
        stock.fault("margin", "given besides [stock.outline]; needs one of the two, not both")
    if top is not None and bottom is not None and not bottom < top:
        stock.fault(
            "bottom",
            f"found {length_text(bottom, units)}; needs less than the top, {length_text(top, units)}",
        )
        return
    if surface is None:
        return
    low, high = surface
    if top is not None and high[2] > top:
        stock.fault(
            "top",
            f"found {length_text(top, units)}; needs at least the highest surface, {_height(high, units)}",
        )
    if bottom is not None and low[2] <= bottom:
        stock.fault(
            "bottom",
            f"found {length_text(bottom, units)}; needs less than the lowest surface, {_height(low, units)}",
        )


def check_stock_files(stock: Checked[StockTable], folder: Path) -> None:
    """At most one of allowance, mesh and heights, and the file has to be there; what is in it is checked when it is read."""
    given = [key for key in ("allowance", "mesh", "heights") if key in stock.given]
    for key in given[1:]:
        stock.fault(key, f"given besides {given[0]}; needs one of allowance, mesh and heights")
    for key, suffix in (("mesh", ".stl"), ("heights", ".csv")):
        name = stock.get(key)
        if name is None:
            continue
        if not name.lower().endswith(suffix):
            stock.fault(key, f"found {found_text(name)}; needs the path of a {suffix} file")
        elif not (folder / name).is_file():
            stock.fault(
                key,
                f"found {found_text(name)}; there is no such file; a path starts from the folder of this file",
            )
    force = stock.get("specific_force")
    if force is not None and force[0] > force[1]:
        stock.fault("specific_force", f"found {found_text(force)}; needs the lower value first")


def _height(point: Floats, units: Units) -> str:
    factor = _LENGTH.factor(units)
    x, y = (float(part) / factor for part in point[:2])
    return f"{length_text(float(point[2]), units)} at [{x:.4g}, {y:.4g}]"


def check_covers(stock: Checked[StockTable], blank: Outline, part: Outline, units: Units) -> None:
    """A blank with its own outline must take in the whole part, but for what flattened curves can hide."""
    import shapely

    slack_mm = blank.flattening_mm + part.flattening_mm + SAME_POINT_MM
    outside = shapely.difference(part.polygon, shapely.buffer(blank.polygon, slack_mm))
    if outside.is_empty:
        return
    factor = _LENGTH.factor(units)
    inside = outside.representative_point()
    area = f"{outside.area / factor**2:.4g} {_LENGTH.unit_name(units)}^2"
    stock.fault(
        "outline",
        f"{area} of the part lie outside it, around [{inside.x / factor:.4g}, {inside.y / factor:.4g}]; "
        "needs an outline that takes in the whole part",
    )
