"""Load a job file: every fault of it at once, or a ``records.Job`` in mm and radians."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from anticlast import job_checks as checks
from anticlast import job_cuts as cuts
from anticlast import job_speeds as speeds
from anticlast import outline as outlines
from anticlast.cutter import Cutter
from anticlast.errors import BadInput, Fault, OutlineError
from anticlast.file_schema import (
    MM_PER_INCH,
    Checked,
    FileTable,
    Units,
    check_table,
    found_text,
    nearest,
    unknown_key,
)
from anticlast.job_schema import (
    JOB_TABLES,
    CutterTable,
    JobTable,
    MachineTable,
    OperationTable,
    OutlineTable,
    PartTable,
    StockTable,
)
from anticlast.job_turn import turned_job
from anticlast.machine.definition import load_machine
from anticlast.outline import Outline
from anticlast.records import Floats, Job, Machine, Operation, Part, Stock
from anticlast.toml_lines import Source, parse_source, read_source


@dataclass(slots=True)
class _Draft:
    """A job on its way: its checked tables, and what could be built of them."""

    source: Source
    folder: Path
    units: Units
    job: Checked[JobTable]
    part: Checked[PartTable]
    stock: Checked[StockTable]
    machine: Checked[MachineTable]
    cutters: list[Checked[CutterTable]]
    operations: list[Checked[OperationTable]]


def load_job(path: str | Path) -> Job:
    """Load and check a job file.

    Parameters
    ----------
    path : path
        The job file; paths inside it start from its folder.

    Returns
    -------
    Job
        In mm and radians whatever the file's units.

    Raises
    ------
    BadInput
        With every fault of the job file, and of the machine file it names.
    """
    path = Path(path)
    return _job_from(read_source(path, str(path)), path)


def parse_job(text: str, path: str | Path) -> Job:
    """Load a job from text, as if it stood in a file at ``path``.

    Raises
    ------
    BadInput
        With every fault of the text.
    """
    return _job_from(parse_source(text, str(path)), Path(path))


def _job_from(source: Source, path: Path) -> Job:
    draft = _read_tables(source, path.parent)
    checks.check_job(draft.job)
    machine, machine_faults = _machine(draft)
    part_outline = _outline(draft, draft.part, "part")
    blank = _blank(draft, part_outline)
    surface = _surface(draft, part_outline)
    checks.check_stock(draft.stock, surface, draft.units)
    _check_material(draft.stock)
    checks.check_stock_files(draft.stock, draft.folder)
    _check_part_origin(draft, machine)
    _check_turn(draft)
    for cutter in draft.cutters:
        checks.check_cutter(cutter, draft.units)
    checks.check_numbers(draft.cutters)
    for operation in draft.operations:
        checks.check_operation(operation, draft.cutters, machine, draft.units)
        cuts.check_cut(operation, draft.cutters, draft.stock, draft.units)
    if machine is not None:
        speeds.check_speeds(draft.stock, draft.cutters, draft.operations, machine)
    faults = sorted(source.faults, key=lambda fault: fault.line) + machine_faults
    if faults:
        raise BadInput(faults)
    assert machine is not None, "no fault was found"
    assert part_outline is not None, "no fault was found"
    assert blank is not None, "no fault was found"
    built = _build(draft, path, machine, part_outline, blank)
    return turned_job(built, math.radians(draft.machine.table.turn))


# ------------------------------------------------------------------------------------------ tables


def _read_tables(source: Source, folder: Path) -> _Draft:
    data = source.data
    for key in data:
        if key not in JOB_TABLES:
            source.add((key,), unknown_key(key, JOB_TABLES))
    head = data.get("job")
    units: Units = "inch" if isinstance(head, Mapping) and head.get("units") == "inch" else "mm"

    def table(key: str, model: type[Any]) -> Checked[Any]:
        if key not in data:
            required = [name for name, field in model.model_fields.items() if field.is_required()]
            keys = f"the key{'s' if len(required) > 1 else ''} {', '.join(required)}"
            source.add((key,), f"missing; needs a table [{key}] with {keys}")
            return Checked(source, (key,), {}, frozenset(), model)
        return check_table(source, (key,), data[key], model, units)

    def tables(key: str, model: type[FileTable]) -> list[Checked[Any]]:
        raw = data.get(key)
        if raw is None:
            source.add((key,), f"missing; needs at least one [[{key}]]")
            return []
        if not isinstance(raw, list):
            source.add((key,), f"found {found_text(raw)}; needs [[{key}]], in double brackets")
            return []
        if not raw:
            source.add((key,), f"found an empty list; needs at least one [[{key}]]")
        return [check_table(source, (key, position), item, model, units) for position, item in enumerate(raw)]

    return _Draft(
        source=source,
        folder=folder,
        units=units,
        job=table("job", JobTable),
        part=table("part", PartTable),
        stock=table("stock", StockTable),
        machine=table("machine", MachineTable),
        cutters=tables("cutter", CutterTable),
        operations=tables("operation", OperationTable),
    )


def _machine(draft: _Draft) -> tuple[Machine | None, list[Fault]]:
    """Load the machine; a missing file is a fault of the job file, what is wrong inside it its own."""
    name = draft.machine.get("file")
    if name is None:
        return None, []
    try:
        return load_machine(name, draft.folder), []
    except BadInput as error:
        inside = [fault for fault in error.faults if fault.line > 0]
        for fault in error.faults:
            if fault.line == 0:
                where = "; a path starts from the folder of this file" if Path(name).suffix else ""
                draft.machine.fault("file", f"found {found_text(name)}; {fault.message}{where}")
        return None, inside


def _check_part_origin(draft: _Draft, machine: Machine | None) -> None:
    if machine is not None and machine.rotary and "part_origin" not in draft.machine.given:
        draft.machine.fault(
            "part_origin",
            f"missing; {machine.name} has rotary axes: needs [x, y, z], the part origin from where they meet",
        )


def _check_turn(draft: _Draft) -> None:
    """A measured blank stands as it was measured."""
    if draft.machine.get("turn"):
        for key in ("mesh", "heights"):
            if draft.stock.get(key) is not None:
                draft.machine.fault(
                    "turn",
                    f"has no place beside {key} in [stock]: measure the blank as it is set, without turn",
                )


def _check_material(stock: Checked[StockTable]) -> None:
    from anticlast import materials

    name = stock.get("material")
    if name is None or materials.find(name) is not None:
        return
    near = nearest(name, materials.all_names())
    hint = f'; nearest is "{near}"' if near else ""
    stock.fault("material", f"found {found_text(name)}; needs one of {', '.join(materials.names())}{hint}")


# ------------------------------------------------------------------------------------------ outlines


def _outline(draft: _Draft, owner: Checked[Any], name: str) -> Outline | None:
    """Check and build ``[part.outline]`` or ``[stock.outline]``; None if it has faults."""
    raw = owner.get("outline")
    if raw is None:
        return None
    table = check_table(draft.source, (name, "outline"), raw, OutlineTable, draft.units)
    if not checks.check_outline_keys(table, draft.units) or table.get("center") is None:
        return None
    try:
        return _built(table.values, draft)
    except OutlineError as error:
        table.fault({"polygon": "points", "file": "path"}.get(table.get("shape"), ""), str(error))
        return None


def _built(values: Mapping[str, Any], draft: _Draft) -> Outline:
    center = values["center"]
    match values["shape"]:
        case "rectangle":
            return outlines.rectangle(values["size"], values.get("corner_radius") or 0.0, center)
        case "circle":
            return outlines.circle(values["diameter"], center)
        case "slot":
            return outlines.slot(values["size"], center)
        case "polygon":
            return outlines.polygon(values["points"], values.get("holes") or (), center)
    scale_mm = MM_PER_INCH if draft.units == "inch" else 1.0
    return outlines.from_file(draft.folder / values["path"], center, scale_mm)


def _blank(draft: _Draft, part_outline: Outline | None) -> Outline | None:
    """Outline of the blank: its own, or the part's grown by the margin with its corners kept sharp."""
    stock = draft.stock
    if "outline" in stock.given:
        own = _outline(draft, stock, "stock")
        if own is not None and part_outline is not None:
            checks.check_covers(stock, own, part_outline, draft.units)
        return own
    margin = stock.get("margin")
    if part_outline is None or margin is None:
        return None
    return part_outline.grown(margin, corners="mitre")


def _surface(draft: _Draft, outline: Outline | None) -> tuple[Floats, Floats] | None:
    part = draft.part
    if outline is None or not part.all_of("a", "rotate") or ("b" in part.given and part.get("b") is None):
        return None
    a = part.get("a")
    return checks.surface_range(a, part.get("b") or a, math.radians(part.get("rotate")), outline)


# ------------------------------------------------------------------------------------------ records


def _build(draft: _Draft, path: Path, machine: Machine, outline: Outline, blank: Outline) -> Job:
    from anticlast import materials

    head, part, stock, where = draft.job.table, draft.part.table, draft.stock.table, draft.machine.table
    cutters = tuple(speeds.cutter_of(cutter.table) for cutter in draft.cutters)
    by_number = {cutter.number: cutter for cutter in cutters}
    return Job(
        name=head.name,
        slug=checks.slug_of(head.name),
        units=head.units,
        source=path,
        part=Part(part.a, part.a if part.b is None else part.b, math.radians(part.rotate), outline),
        stock=Stock(
            materials.material(stock.material).name,
            stock.top,
            stock.bottom,
            blank,
            stock.allowance,
            None if stock.mesh is None else draft.folder / stock.mesh,
            None if stock.heights is None else draft.folder / stock.heights,
            stock.specific_force,
        ),
        machine=machine,
        part_origin_mm=where.part_origin or (0.0, 0.0, 0.0),
        clearance_mm=where.clearance,
        cutters=cutters,
        operations=_operations(draft, by_number, machine),
    )


def _operations(draft: _Draft, cutters: Mapping[int, Cutter], machine: Machine) -> tuple[Operation, ...]:
    made: list[Operation] = []
    left_before = draft.stock.table.allowance
    for index, checked in enumerate(draft.operations, start=1):
        table = checked.table
        cutter = cutters[table.cutter]
        rpm = speeds.spindle_rpm(table, cutter, machine, left_before)
        feed = table.feed if table.feed is not None else (table.feed_per_tooth or 0.0) * cutter.flutes * rpm
        pattern = checks.pattern_of(checked)
        assert pattern is not None, "no fault was found"
        made.append(
            Operation(
                index=index,
                does=table.does,
                cutter=cutter,
                pattern=pattern,
                direction_rad=math.radians(table.direction),
                scallop_mm=table.scallop,
                stepover_mm=table.stepover,
                allowance_mm=table.allowance,
                spindle_rpm=rpm,
                feed_mm_min=feed,
                lead_rad=math.radians(table.lead),
                lean_rad=math.radians(table.lean),
                fixed_axis=checks.axis_of(table),
                tolerance_mm=table.tolerance,
                way=table.way,
                lead_margin_rad=math.radians(table.lead_margin),
                depth_of_cut_mm=table.depth_of_cut,
                width_of_cut_mm=table.width_of_cut,
                slotting=table.slotting,
                reach_mm=table.reach,
                depth_mm=table.depth,
                tabs=0 if table.skin > 0.0 and "tabs" not in checked.given else table.tabs,
                tab_width_mm=table.tab_width,
                tab_height_mm=table.tab_height,
                skin_mm=table.skin,
                arcs=table.arcs,
            )
        )
        if table.does != "outline":
            left_before = table.allowance
    return tuple(made)
