"""What the page's pictures are drawn from: numbers as base64 typed arrays inside one JSON object.

Everything that the viewer, the map and the charts show is decided here: which rows of the program are kept,
how each quantity is scaled into the job's units, and where its scale starts and ends.
"""

from __future__ import annotations

import base64
import math
from typing import Any

import numpy as np

from anticlast.cutter import Cutter
from anticlast.outline import Outline
from anticlast.records import Finding, Floats, Ints, Job, Made, Purpose
from anticlast.report.along import UNKNOWN, Along, along
from anticlast.report.numbers import Units
from anticlast.report.spacing import coded, highest_near, local_stepover, pooled
from anticlast.report.thinning import GROWTH, thin, thin_to
from anticlast.tolerances import MEASURE_MM

FEW_ROWS = 12000  # up to here every row is kept
MOST_KNOTS = 36000  # kept rows; about 100 bytes each in the page
MOST_MAP_CELLS = 460  # along the longer side of the scallop map
PATH_MM = 0.01  # the drawn path may leave the true one by this much before the number of knots forces more
AXIS_UNIT = 0.004  # change of the unit axis that counts like PATH_MM (0.23 degrees)
SHARE = 0.02  # share of a quantity's range that counts like PATH_MM, before the number of knots forces more
MOST_SHARE = 0.16  # beyond this the path gives way as well
HEIGHT_STEP_MM = 1e-5  # one step of the map's int16 heights
FLAT = 1e-5  # share of a value below which its changes are round-off
MESH_PARTS = 64  # edges of the drawn surface along its longer side
SHAPED_BY = ("reached", "tilt", "rotary")  # quantities whose course along the program the kept rows follow
PURPOSES = {
    Purpose.CUT: "cutting",
    Purpose.OVERRUN: "overrun past the outline",
    Purpose.LINK: "link to the next pass",
    Purpose.ENTRY: "entry at feed",
    Purpose.EXIT: "exit at feed",
    Purpose.RAPID: "rapid",
}


def packed(values: np.ndarray) -> dict[str, str]:
    """Return an array as its little-endian type name and base64 bytes; ``page.unpacked`` undoes it."""
    array = np.ascontiguousarray(values)
    array = array.astype(array.dtype.newbyteorder("<"), copy=False)
    kind = {"f": "f", "i": "i", "u": "u"}[array.dtype.kind] + str(array.dtype.itemsize)
    return {"t": kind, "b": base64.b64encode(array.tobytes()).decode("ascii")}


def cutter_profile(cutter: Cutter) -> list[dict[str, Any]]:
    """Half outlines [radius, height above the tip], mm, of cutting end, shank and holder."""
    corner, radius = cutter.corner_radius_mm, cutter.radius_mm
    turn = np.linspace(-math.pi / 2, 0.0, 13) if corner > 0 else np.zeros(1)
    arc = np.column_stack((radius - corner + corner * np.cos(turn), corner + corner * np.sin(turn)))
    top = max(cutter.flute_length_mm, corner)
    end = [[0.0, 0.0], *arc.tolist(), [radius, top]]
    bodies = [{"name": "cutting end", "points": end}]
    for body in cutter.bodies():
        if body.name == "flutes":
            continue
        low, high, r = body.low_mm, body.high_mm, body.radius_mm
        bodies.append({"name": body.name, "points": [[0.0, low], [r, low], [r, high], [0.0, high]]})
    return bodies


def rings(outline: Outline) -> list[list[list[float]]]:
    """Rings of an outline as lists of [x, y], mm, to 0.1 um, the first point not repeated."""
    import shapely

    found = []
    for part in shapely.get_parts(outline.polygon):
        for ring in (part.exterior, *part.interiors):
            found.append(np.round(shapely.get_coordinates(ring)[:-1], 4).tolist())
    return found


def surface_mesh(job: Job) -> dict[str, Any]:
    """Plan triangles of the part's surface; the page's script lifts them onto z = a x'^2 - b y'^2."""
    x0, y0, x1, y1 = job.part.outline.bounds
    corners = job.part.outline.triangles(max(x1 - x0, y1 - y0) / MESH_PARTS * math.sqrt(2)).reshape(-1, 2)
    points, index = np.unique(np.round(corners, 4), axis=0, return_inverse=True)
    part = job.part
    return {
        "a": part.a_per_mm,
        "b": part.b_per_mm,
        "rotate": part.rotate_rad,
        "xy": packed(points.astype(np.float32)),
        "index": packed(index.reshape(-1).astype(np.uint32)),
    }


def kept_rows(rows: Along, quantities: list[Floats], findings: tuple[Finding, ...]) -> tuple[Ints, float]:
    """Choose the rows that are drawn: changes of kind, lines that findings name, and what the picture needs.

    Returns
    -------
    rows : (m,) int64
    tolerance : float
        Furthest the drawn path leaves the true one, mm.
    """
    if len(rows.line) <= FEW_ROWS:
        return np.arange(len(rows.line)), 0.0
    changes = [rows.purpose, rows.operation, rows.pass_index, rows.tool]
    kind = np.stack([np.asarray(change, dtype=np.int64) for change in changes], axis=1)
    differs = np.any(kind[1:] != kind[:-1], axis=1)
    keep = np.zeros(len(rows.line), bool)
    keep[:-1] |= differs
    keep[1:] |= differs
    named = [finding.line for finding in findings if finding.line > 0]
    keep |= np.isin(rows.line, named)
    pose = np.concatenate((rows.tip_mm / PATH_MM, rows.axis / AXIS_UNIT), axis=1)
    steps = np.linalg.norm(np.diff(rows.tip_mm, axis=0), axis=1)
    steps += np.linalg.norm(np.diff(rows.axis, axis=0), axis=1)  # a turn on the spot still takes its share
    path = np.concatenate(([0.0], np.cumsum(steps)))
    even = np.stack([_even(values) for values in quantities], axis=1)
    share = SHARE
    while True:
        values = np.concatenate((pose, even / share), axis=1)
        chosen = thin(values, path, keep, 1.0)
        if len(chosen) <= MOST_KNOTS:
            return chosen, PATH_MM
        if share >= MOST_SHARE:
            break
        share *= 2.0
    chosen, tolerance = thin_to(values, path, keep, GROWTH, MOST_KNOTS)
    return chosen, tolerance * PATH_MM


def _even(values: Floats) -> Floats:
    """Scale finite values to 0..1, nan to 0."""
    finite = values[np.isfinite(values)]
    if not finite.size:
        return np.zeros(len(values))
    low, high = float(finite.min()), float(finite.max())
    return np.nan_to_num((values - low) / ((high - low) or 1.0), nan=0.0)


def _span(values: Floats, *, from_zero: bool = False) -> list[float]:
    """Ends of a colour scale: 0.5 and 99.5 per cent points, so that one odd block does not hide the rest."""
    finite = values[np.isfinite(values)]
    if not finite.size:
        return [0.0, 1.0]
    low, high = (float(edge) for edge in np.percentile(finite, (0.5, 99.5)))
    low = 0.0 if from_zero else low
    if high - low <= FLAT * max(
        abs(low), abs(high)
    ):  # one and the same value everywhere: give the scale some width
        width = 0.01 * abs(high) or 1.0
        return [low - (0.0 if from_zero else width), high + width]
    return [low, high]


def _quantity(key: str, title: str, unit: str, digits: int, values: Floats, **more: Any) -> dict[str, Any]:
    span = more.pop("span", None) or _span(values)
    entry = {
        "key": key,
        "title": title,
        "unit": unit,
        "digits": digits,
        "span": [float(f"{edge:.9g}") for edge in span],
    }
    return {**entry, **more, "values": values}


def quantities(made: Made, rows: Along, units: Units) -> list[dict[str, Any]]:
    """Quantities to colour the passes by, each in the unit it is shown in, nan where it does not apply."""
    feed, digits = f"{units.name}/min", 1 if units.inch else 0
    # Links, entries and exits turn the cutter about a contact that hardly moves: no contact feed there.
    off = np.isin(rows.purpose, (Purpose.LINK, Purpose.ENTRY, Purpose.EXIT))
    asked = np.where(off, np.nan, rows.asked_mm_min)
    reached = np.where(off, np.nan, rows.reached_mm_min)
    if not np.isfinite(reached).any():
        reached = asked
    stepover = local_stepover(rows.contact_mm, rows.cutting, rows.operation, rows.pass_index)
    scallop_map = made.proof.scallop_map if made.proof else None
    crest = np.full(len(rows.line), np.nan)
    if scallop_map is not None and scallop_map.height_mm.size:
        wide = stepover[np.isfinite(stepover)]
        crest = highest_near(
            scallop_map, rows.contact_mm, float(np.percentile(wide, 99)) if wide.size else 1.0
        )
    cutting = rows.cutting
    on_part = np.where(cutting, reached, np.nan)
    passes = np.where(rows.pass_index >= 0, rows.pass_index + 1.0, np.nan)
    return [
        _quantity("reached", "contact feed reached", feed, digits, reached * units.scale,
                  span=_span(on_part * units.scale, from_zero=True)),
        _quantity("asked", "contact feed asked", feed, digits, asked * units.scale,
                  span=_span(np.where(cutting, asked, np.nan) * units.scale, from_zero=True)),
        _quantity("tilt", "tilt of the axis from the surface normal", "°", 2, np.degrees(rows.tilt_rad)),
        _quantity("rotary", "rotary speed", "rev/min", 2, rows.rotary_deg_min / 360.0,
                  span=_span(rows.rotary_deg_min / 360.0, from_zero=True)),
        _quantity("stepover", "local stepover", units.name, 4 if units.inch else 3, stepover * units.scale),
        _quantity("scallop", "local scallop", units.small_name, 2, crest * units.small_scale,
                  span=_span(crest * units.small_scale, from_zero=True)),
        _quantity("pass", "pass number", "", 0, passes),
    ]  # fmt: skip


def path_data(made: Made, rows: Along, units: Units) -> dict[str, Any]:
    """Kept rows of the program with pose, words, line, purpose and quantities."""
    shown = quantities(made, rows, units)
    chosen, tolerance = kept_rows(
        rows, [entry["values"] for entry in shown if entry["key"] in SHAPED_BY], made.findings
    )
    decimals = [_decimals(made.job, letter) for letter in rows.letters]
    scales = [units.scale if letter in "XYZ" else 1.0 for letter in rows.letters]
    words = np.rint(rows.words[chosen] * np.array(scales) * 10.0 ** np.array(decimals, dtype=float))
    for entry in shown:
        entry["values"] = packed(entry["values"][chosen].astype(np.float32))
    return {
        "rows": len(chosen),
        "of_rows": max(
            len(rows.line), len(made.part_motion.line) if made.part_motion and rows.letters else 0
        ),
        "tolerance": float(f"{tolerance + rows.slack_mm:.4g}"),
        "letters": list(rows.letters),
        "decimals": decimals,
        "words": packed(np.clip(words, -(2.0**31) + 1, 2.0**31 - 1).astype(np.int32)),
        "tip": packed(rows.tip_mm[chosen].astype(np.float32)),
        "axis": packed(np.rint(rows.axis[chosen] * 32767.0).astype(np.int16)),
        "line": packed(rows.line[chosen].astype(np.uint32)),
        "purpose": packed(rows.purpose[chosen].astype(np.uint8)),
        "operation": packed(rows.operation[chosen].astype(np.int16)),
        "tool": packed(rows.tool[chosen].astype(np.int32)),
        "clock": packed(rows.clock_s[chosen].astype(np.float32)),
        "purposes": {
            **{str(int(key)): name for key, name in PURPOSES.items()},
            str(UNKNOWN): "other feed move",
        },
        "feeds": [path.operation.feed_mm_min * units.scale for path in made.cutter_paths],
        "quantities": shown,
        "notes": list(rows.notes),
    }


def _decimals(job: Job, letter: str) -> int:
    if letter in "XYZ":
        return 5 if job.units == "inch" else 4
    return 4


def scallop_limit_mm(made: Made) -> float | None:
    """Lowest scallop limit of the finishing operations; None when the job sets stepovers only."""
    limits = [
        op.scallop_mm for op in made.job.operations if op.does == "finish" and op.scallop_mm is not None
    ]
    return min(limits) if limits else None


def wanted_height_mm(made: Made) -> float:
    """Height over the finished surface that the last operation is to leave; scallops count from there."""
    return made.job.operations[-1].allowance_mm if made.job.operations else 0.0


def gouge_limit_mm(made: Made) -> float:
    """Depth that counts as a gouge: the limit of the gouge check, else what the proof can measure."""
    limits = [
        f.limit
        for f in made.findings
        if "gouge" in f.check.lower() and f.unit == "mm" and math.isfinite(f.limit)
    ]
    return max(min(limits), MEASURE_MM) if limits else MEASURE_MM


def map_data(made: Made) -> dict[str, Any] | None:
    """The scallop map, coarse: highest and lowest height of each block of cells; None without a map."""
    scallop = made.proof.scallop_map if made.proof else None
    if made.proof is None or scallop is None or not np.isfinite(scallop.height_mm).any():
        return None
    x, y, high, low = pooled(scallop, MOST_MAP_CELLS)
    high_codes, step = coded(np.stack((high, low)), HEIGHT_STEP_MM)
    limit = scallop_limit_mm(made)
    top = limit if limit is not None else made.proof.scallop_max_mm
    return {
        "nx": len(x),
        "ny": len(y),
        "x0": float(x[0]),
        "y0": float(y[0]),
        "dx": float(x[1] - x[0]) if len(x) > 1 else made.proof.grid_mm,
        "dy": float(y[1] - y[0]) if len(y) > 1 else made.proof.grid_mm,
        "step": step,
        "wanted": wanted_height_mm(made),
        "high": packed(high_codes[0]),
        "low": packed(high_codes[1]),
        "limit": limit,
        "allowed": None if limit is None else limit + MEASURE_MM,
        "gouge": gouge_limit_mm(made),
        "top": top if math.isfinite(top) and top > 0 else 1e-3,
        "worst": [float(value) for value in made.proof.scallop_at_mm],
        "grid": made.proof.grid_mm,
    }


def page_data(made: Made, units: Units, rows: Along | None = None) -> dict[str, Any]:
    """Everything the page's scripts draw from. Lengths mm unless a quantity names another unit."""
    rows = rows if rows is not None else along(made)
    job = made.job
    return {
        "units": {
            "length": units.name, "scale": units.scale, "digits": 4 if units.inch else 3,
            "small": units.small_name, "small_scale": units.small_scale,
        },
        "surface": surface_mesh(job),
        "outline": rings(job.part.outline),
        "blank": {"rings": rings(job.stock.outline), "top": job.stock.top_mm, "bottom": job.stock.bottom_mm},
        "cutters": {str(cutter.number): cutter_profile(cutter) for cutter in job.cutters},
        "path": path_data(made, rows, units) if rows is not None else None,
        "map": map_data(made),
    }  # fmt: skip
