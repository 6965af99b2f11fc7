"""The page's words and tables as HTML text; everything from outside is escaped."""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np

from anticlast.cutter import Cutter
from anticlast.records import CutterPath, Finding, Made, Operation, OperationResult, Shape
from anticlast.report.cutting_values import cutting_values
from anticlast.report.data import scallop_limit_mm, wanted_height_mm
from anticlast.report.numbers import NOT_MEASURED, Units, clock, plain, sentence, text

SHAPES = {"ball": "ball end", "bull": "bull nose", "flat": "flat end"}
PROVE_OUT = (
    "Read the machine's own manual and the rules of your shop first; they come before this page. "
    "Trained people only.",
    "Set the blank and clamps as drawn. Check that nothing stands in the way of holder or turning table.",
    "Set the work offset (G54) on program zero, and a length offset for every cutter from the table above. "
    "Check both twice.",
    "Check each cutter's diameter, stickout and holder against the table: the proof holds for these only.",
    "Prove out above the part: raise G54 in Z until the whole program runs in the air, single block, "
    "rapid override low, a hand on feed hold.",
    "Lower G54 to its true place and take the first pass of each operation in single block, "
    "watching distance to go.",
    "Eye and hearing protection on. Keep clear of chips, dust and everything that turns; "
    "let nobody reach in while it moves.",
    "Measure after the first part before you cut the next.",
)


def findings_of(made: Made) -> tuple[Finding, ...]:
    """All findings, failed first, then warnings, then passed; each group in the order they were found."""
    found = made.findings or (made.proof.findings if made.proof else ())
    return tuple(sorted(found, key=lambda finding: _rank(finding)[0]))


def _rank(finding: Finding) -> tuple[int, str, str]:
    if finding.ok:
        return 2, "pass", "✓ passed"
    return (1, "warn", "! warning") if finding.warning else (0, "fail", "✗ failed")


def _rows(pairs: Iterable[tuple[str, list[str]]]) -> str:
    return "".join(
        f'<tr><th scope="row">{text(label)}</th>{"".join(f"<td>{text(cell)}</td>" for cell in cells)}</tr>'
        for label, cells in pairs
    )


def _side(name: str, heads: str, pairs: Iterable[tuple[str, list[str]]]) -> str:
    """A table with a quantity a row and a thing a column."""
    return (
        f'<table class="side"><thead><tr><th scope="col">{name}</th>{heads}</tr></thead>'
        f"<tbody>{_rows(pairs)}</tbody></table>"
    )


def _range(low: str, high: str, unit: str = "") -> str:
    """Two figures without units as a range, or one if they print alike."""
    if NOT_MEASURED in (low, high):
        return NOT_MEASURED
    shown = low if low == high else f"{low} to {high}"
    return f"{shown} {unit}".strip()


# ------------------------------------------------------------------------------------------------ head


def head(made: Made, units: Units) -> str:
    """Job, verdict, program, machine, and the figures looked for first."""
    machine = made.job.machine
    if made.released:
        warnings = sum(not finding.ok for finding in findings_of(made))
        more = f", {warnings} warning{'s' if warnings != 1 else ''}" if warnings else ""
        stamp = _stamp("released", "✓", f"every check passed{more}")
    else:
        count = sum(not finding.ok and not finding.warning for finding in findings_of(made))
        failed = f"{count} check{'s' if count != 1 else ''} failed" if count else "not proven"
        stamp = _stamp("withheld", "✗", f"{failed}: there is no program to run")
    if made.program_text is not None:
        program = (
            f"{text(made.program_text.name)}, SHA-256 <code title='{text(made.program_sha256)}'>"
            f"{text(made.program_sha256[:12])}</code>"
        )
    else:
        program = "none written"
    blocks = f", {made.program.blocks} blocks" if made.program and made.released else ""
    unit = "inch (G20), small heights in tenths: 1 tenth = 0.0001 in" if units.inch else "mm (G21)"
    if machine.rotary:
        unit += "; rotary words in degrees"
    facts = (
        f"<dt>Program</dt><dd>{program}{blocks}</dd>"
        f"<dt>Machine</dt><dd>{text(machine.title)} <span class='quiet'>({text(machine.name)})</span></dd>"
        f"<dt>Units</dt><dd>{unit}</dd>"
    )
    return (
        f'<div class="who"><p class="kind">Saddle finishing, shop sheet</p><h1>{text(made.job.name)}</h1>'
        f"<dl>{facts}</dl></div>{stamp}{_key_figures(made, units)}{_to_change(made)}"
    )


def _stamp(state: str, sign: str, words: str) -> str:
    return (
        f'<p class="stamp {state}"><span aria-hidden="true">{sign}</span><strong>{state.upper()}</strong>'
        f" {words}</p>"
    )


def _key_figures(made: Made, units: Units) -> str:
    figures: list[tuple[str, str, str]] = []
    if made.times is not None and made.program is not None:
        rapid = made.program.motions.shape == Shape.RAPID
        total, moving = made.times.total_s, float(made.times.seconds[rapid].sum())
        waiting = made.times.waiting_s
        figures += [
            ("time", clock(total), "on this machine"),
            ("cutting", clock(total - moving - waiting), "feed moves"),
            ("rapid", clock(moving), f"G0 moves; {clock(waiting)} of waits" if waiting else "G0 moves"),
        ]
    if made.proof is not None:
        limit = scallop_limit_mm(made)
        asked = "no limit set" if limit is None else f"limit {units.small(limit)}"
        figures += [
            ("highest scallop", units.small(made.proof.scallop_max_mm), asked),
            ("deepest gouge", units.small(made.proof.gouge_max_mm), "below the surface"),
            ("holder keeps off by", units.gap(made.proof.holder_clearance_mm), "from the finished surface"),
        ]
    if not figures:
        return ""
    cells = "".join(
        f"<div><dt>{text(name)}</dt><dd>{text(value)}</dd><dd class='quiet'>{text(note)}</dd></div>"
        for name, value, note in figures
    )
    return f'<dl class="figures">{cells}</dl>'


def _to_change(made: Made) -> str:
    if made.released:
        return ""
    failed = [finding for finding in findings_of(made) if not finding.ok and not finding.warning]
    said = list(dict.fromkeys(map(sentence, [*made.advice, *(f.message for f in failed)])))
    if not said:
        said = ["The program was not proven. Run the job again and read what it says."]
    items = "".join(f"<li>{text(line)}</li>" for line in said)
    return f'<div class="change"><h2>Why, and what to change</h2><ul>{items}</ul></div>'


# ------------------------------------------------------------------------------------------------ what is cut


def _of_cutter(made: Made, cutter: Cutter) -> list[Operation]:
    return [operation for operation in made.job.operations if operation.cutter.number == cutter.number]


def cutters(made: Made, units: Units) -> str:
    """One column a cutter."""
    columns = made.job.cutters
    used = [_of_cutter(made, cutter) for cutter in columns]

    def each(values: Iterable[float], show: str) -> str:
        shown = dict.fromkeys(plain(value, 0) if show == "rpm" else units.feed(value) for value in values)
        return ", ".join(shown) or "not used"

    def holder(cutter: Cutter) -> str:
        steps = [
            f"⌀{units.length(2 * r, bare=True)} × {units.length(length, bare=True)}"
            for r, length in cutter.holder
        ]
        return ", ".join(steps) + f" {units.name}" if steps else "none given"

    pairs = [
        ("shape", [SHAPES[cutter.shape] for cutter in columns]),
        ("diameter", [units.length(2 * cutter.radius_mm) for cutter in columns]),
        ("corner radius", [units.length(cutter.corner_radius_mm) for cutter in columns]),
        ("flutes, cutting length", [f"{c.flutes}, {units.length(c.flute_length_mm)}" for c in columns]),
        ("shank", [units.length(2 * cutter.shank_radius_mm) for cutter in columns]),
        ("stickout", [units.length(cutter.stickout_mm) for cutter in columns]),
        ("holder from its face up", [holder(cutter) for cutter in columns]),
        ("gauge length", [units.length(cutter.gauge_length_mm) for cutter in columns]),
        ("length offset", [f"H{cutter.number}" for cutter in columns]),
        ("spindle, rev/min", [each((op.spindle_rpm for op in ops), "rpm") for ops in used]),
        ("feed at the contact", [each((op.feed_mm_min for op in ops), "feed") for ops in used]),
    ]
    heads = "".join(f'<th scope="col">T{cutter.number}</th>' for cutter in columns)
    return _side("Cutter", heads, pairs)


def operations(made: Made, units: Units) -> str:
    """One column an operation: what was asked, what the path is, what it leaves, how long it takes."""
    jobs = made.job.operations
    results = {result.index: result for result in made.operations}
    paths = {path.operation.index: path for path in made.cutter_paths}
    finishing = [operation.index for operation in jobs if operation.does == "finish"]
    last = finishing[-1] if finishing else -1
    asked = [_asked(made, operation, units) for operation in jobs]
    found = [
        _found(made, operation, results.get(operation.index), operation.index == last, units)
        for operation in jobs
    ]
    works = [_works(made, operation, paths.get(operation.index), units) for operation in jobs]
    labels = [
        (name, [column[name] for column in group]) for group in (asked, found, works) for name in group[0]
    ]
    heads = "".join(f'<th scope="col">{operation.index}: {text(operation.does)}</th>' for operation in jobs)
    return _side("Operation", heads, labels)


def _asked(made: Made, operation: Operation, units: Units) -> dict[str, str]:
    lead, lean = (plain(math.degrees(angle), 2) for angle in (operation.lead_rad, operation.lean_rad))
    if not made.job.machine.rotary:
        axis = "upright: the machine has no rotary axis"
    elif operation.fixed_axis is not None:
        axis = "fixed at " + ", ".join(plain(value, 4) for value in operation.fixed_axis)
    else:
        axis = f"follows the surface; lead {lead}°, lean {lean}°"
    return {
        "cutter": f"T{operation.cutter.number}",
        "pattern": operation.pattern,
        "direction from part X": f"{plain(math.degrees(operation.direction_rad), 2)}°",
        "way": "both ways" if operation.way == "both" else "one way",
        "cutter axis": axis,
        "allowance left": units.length(operation.allowance_mm),
    }


def _found(
    made: Made, operation: Operation, result: OperationResult | None, last: bool, units: Units
) -> dict[str, str]:
    names = (
        "passes", "cut length", "link length", "length floor (share of it)", "stepover on the surface",
        "scallop: asked", "scallop: predicted | proven", "time (from feed alone)",
    )  # fmt: skip
    limit = "by stepover" if operation.scallop_mm is None else units.small(operation.scallop_mm)
    if result is None:
        return {**dict.fromkeys(names, "not planned"), names[5]: limit}
    floor = "does not apply"
    if result.length_floor_mm > 0:
        floor = (
            f"{units.long(result.length_floor_mm)} (× {result.cut_length_mm / result.length_floor_mm:.3f})"
        )
    proven = "cut over later"
    if last:
        proven = units.small(made.proof.scallop_max_mm) if made.proof else NOT_MEASURED
    predicted = units.small(result.scallop_predicted_mm) if operation.does != "rough" else "none"
    low, high = (units.length(value, bare=True) for value in result.stepover_mm)
    values = (
        str(result.passes), units.long(result.cut_length_mm), units.long(result.link_length_mm), floor,
        _range(low, high, units.name), limit, f"{predicted} | {proven}",
        f"{clock(result.time_s)} ({clock(result.feed_only_time_s)})",
    )  # fmt: skip
    return dict(zip(names, values, strict=True))


def _works(made: Made, operation: Operation, path: CutterPath | None, units: Units) -> dict[str, str]:
    values = cutting_values(made.job, operation, path)
    flat, steep = (plain(math.degrees(angle), 1) for angle in values.tilt_rad)
    known = math.isfinite(values.depth_mm)
    least, most = (units.length(d, bare=True) for d in values.effective_diameter_mm)
    slow, fast = (units.cutting_speed(speed, bare=True) for speed in values.speed_mm_min)
    tooth = units.length(values.feed_per_tooth_mm)
    thin, thick = (units.length(chip, bare=True) for chip in values.chip_mm)
    return {
        "depth of cut": units.length(values.depth_mm) if known else "uneven, up to the whole blank",
        "tilt from the normal": f"{_range(flat, steep)}°",
        "diameter that cuts": _range(least, most, units.name),
        "cutting speed there": _range(slow, fast, "ft/min" if units.inch else "m/min"),
        "feed per tooth (chip, thinned)": f"{tooth} ({_range(thin, thick, units.name)})",
    }


# ------------------------------------------------------------------------------------------------ checks


def checks(made: Made, units: Units) -> str:
    """All findings as a table."""
    found = findings_of(made)
    if not found:
        return "<p>No check was made: the job did not get that far.</p>"
    rows = []
    for finding in found:
        _, css, word = _rank(finding)
        line = f'<button type="button" class="to-line" data-line="{finding.line}">{finding.line}</button>'
        rows.append(
            f'<tr class="{css}"><td class="mark">{word}</td><th scope="row">{text(finding.check)}</th>'
            f'<td data-label="worst">{text(units.found(finding.worst, finding.unit, finding.limit))}</td>'
            f'<td data-label="limit">{text(units.allowed(finding.limit, finding.unit, finding.worst))}</td>'
            f'<td data-label="line">{line if finding.line > 0 else "none"}</td>'
            f'<td class="said">{text(sentence(finding.message))}</td></tr>'
        )
    heads = "".join(
        f'<th scope="col">{name}</th>' for name in ("", "check", "worst", "limit", "line", "in words")
    )
    return f'<table class="checks"><thead><tr>{heads}</tr></thead><tbody>{"".join(rows)}</tbody></table>'


# ------------------------------------------------------------------------------------------------ set-up


def setup(made: Made, units: Units) -> str:
    """Where things stand, cautions, and how to prove out."""
    job = made.job
    machine = job.machine
    origin = " ".join(
        f"{axis} {units.length(v, bare=True)}" for axis, v in zip("XYZ", job.part_origin_mm, strict=True)
    )
    x0, y0, x1, y1 = job.stock.outline.bounds
    size = " × ".join(
        units.length(v, bare=True) for v in (x1 - x0, y1 - y0, job.stock.top_mm - job.stock.bottom_mm)
    )
    facts = [
        ("Program zero (G54)", "the saddle point of the part, Z up, with every rotary axis at 0"),
        ("Blank", f"{job.stock.material}, {size} {units.name} (X × Y × Z)"),
        (
            "Blank top, bottom",
            f"Z {units.length(job.stock.top_mm, bare=True)}, Z {units.length(job.stock.bottom_mm)}",
        ),
        ("Clearance", f"rapid moves stay {units.length(job.clearance_mm)} above the stock"),
    ]
    if machine.rotary:
        facts.insert(
            1,
            (
                "Saddle point, from where the rotary axes meet",
                f"{origin} {units.name}; wrong place, wrong part",
            ),
        )
    if job.stock.allowance_mm is not None:
        facts.insert(
            -1, ("Stock on the surface", f"{units.length(job.stock.allowance_mm)} left by the cut before")
        )
    if any(axis.carries == "cutter" for axis in machine.rotary):
        facts.append(
            (
                "Gauge lengths",
                "as in the cutter table: the cutter tilts, so another length needs another program",
            )
        )
    listed = "".join(f"<dt>{text(name)}</dt><dd>{text(value)}</dd>" for name, value in facts)
    cautions = "".join(f"<li>{text(caution)}</li>" for caution in made.cautions)
    material = (
        f'<div class="caution"><h3>Cautions for {text(job.stock.material)}</h3><ul>{cautions}</ul></div>'
        if cautions
        else ""
    )
    steps = "".join(f"<li>{text(step)}</li>" for step in PROVE_OUT)
    return f'<dl class="facts">{listed}</dl>{material}<h3>How to prove out</h3><ol>{steps}</ol>'


def travel(made: Made, units: Units) -> str:
    """What each axis uses of what it has."""
    if made.proof is None or not made.proof.travel:
        return ""
    limits = {axis.letter: axis for axis in made.job.machine.axes}
    origin = "where the rotary axes meet" if made.job.machine.rotary else "the machine file's zero"
    rows = []
    for letter, (low, high) in made.proof.travel.items():
        axis = limits.get(letter)
        linear = axis is not None and axis.kind == "linear"
        show = (lambda v: units.length(v, bare=True)) if linear else (lambda v: plain(v, 2))
        unit = units.name if linear else "°"
        has = (
            "endless"
            if axis is None or axis.limits is None
            else _range(show(axis.limits[0]), show(axis.limits[1]), unit)
        )
        rows.append((letter, [_range(show(low), show(high), unit), has]))
    return (
        '<h3>Travel</h3><table class="travel"><thead><tr><th scope="col">axis</th><th scope="col">used</th>'
        f'<th scope="col">has</th></tr></thead><tbody>{_rows(rows)}</tbody></table>'
        f'<p class="quiet">Linear axes: spindle gauge point, counted from {origin}.</p>'
    )


def bounds_note(made: Made, units: Units) -> str:
    """How sure the proven heights are."""
    proof = made.proof
    if proof is None:
        return ""
    sure = units.small(proof.scallop_bound_mm) if np.isfinite(proof.scallop_bound_mm) else NOT_MEASURED
    wanted = wanted_height_mm(made)
    allowance = f" Heights count from the allowance of {units.length(wanted)} that is left." if wanted else ""
    uncut = f" {units.area(proof.uncut_area_mm2)} is left uncut." if proof.uncut_area_mm2 > 0 else ""
    return (
        f"Measured on the program read back, on a grid of {units.length(proof.grid_mm)}; between grid points "
        f"the scallop is at most {sure}.{allowance}{uncut}"
    )
