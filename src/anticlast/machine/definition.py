"""Find and load machine files: by name in the post folder, by path, or from an installed entry point."""

from __future__ import annotations

import re
from functools import cache
from pathlib import Path
from typing import Any, Final

from anticlast.errors import BadInput, Fault
from anticlast.file_schema import nearest
from anticlast.machine import python_post
from anticlast.machine.file_tables import machine_from
from anticlast.records import Axis, Machine
from anticlast.toml_lines import read_source, shown

_NAME: Final = re.compile(r"[A-Za-z0-9_-]+")


@cache
def post_folder() -> Path:
    """Folder with the machine files that come with the package.

    In a wheel it is ``_post`` inside the package; in a checkout or an editable install ``post`` at the top of
    the project.

    Raises
    ------
    BadInput
        If neither is there.
    """
    package = Path(__file__).resolve().parents[1]
    for folder in (package / "_post", package.parents[1] / "post"):
        if folder.is_dir() and any(folder.glob("*.toml")):
            return folder
    raise BadInput(Fault("post", 0, "", "the folder of machine files is missing; install the package again"))


def shipped_names() -> tuple[str, ...]:
    """Names of the machine files in the post folder, in alphabetical order."""
    return tuple(sorted(path.stem for path in post_folder().glob("*.toml")))


def load_machine(name_or_path: str, relative_to: Path | None = None) -> Machine:
    """Load a machine.

    Parameters
    ----------
    name_or_path : str
        A name in the post folder or of an installed post (letters, digits, hyphen, underscore), or else the
        path of a machine file: ``.toml``, or ``.py`` for a Python post.
    relative_to : Path, optional
        Folder that a relative path starts from; the current one if not given.

    Returns
    -------
    Machine
        All lengths in mm.

    Raises
    ------
    BadInput
        With every fault of the file; file and line are those of the machine file.
    """
    name = name_or_path.strip()
    if _NAME.fullmatch(name):
        return _load_named(name)
    path = (relative_to or Path()) / Path(name)
    if path.suffix.lower() == ".py":
        return python_post.load(path, str(path))
    if path.suffix.lower() != ".toml":
        raise BadInput(
            Fault(
                shown(name_or_path),
                0,
                "",
                f"needs a machine name ({_names()}) or the path of a .toml or .py file",
            )
        )
    return machine_from(read_source(path, str(path)), path.stem, path)


def _load_named(name: str) -> Machine:
    path = post_folder() / f"{name}.toml"
    if name in shipped_names():
        return machine_from(read_source(path, f"{name}.toml"), name, path)
    installed = python_post.installed()
    if name in installed:
        return python_post.load_entry_point(installed[name])
    near = nearest(name, (*shipped_names(), *installed))
    hint = f'; nearest is "{near}"' if near else ""
    raise BadInput(
        Fault(
            name,
            0,
            "",
            f"no machine of that name; needs one of {_names()}, or the path of a machine file{hint}",
        )
    )


def _names() -> str:
    return ", ".join((*shipped_names(), *python_post.installed()))


def list_machines() -> list[Machine]:
    """Load every machine in the post folder and every installed post, in alphabetical order of their names.

    Raises
    ------
    BadInput
        With the faults of all files that cannot be used.
    """
    found: list[Machine] = []
    faults: list[Fault] = []
    for name in sorted({*shipped_names(), *python_post.installed()}):
        try:
            found.append(_load_named(name))
        except BadInput as error:
            faults.extend(error.faults)
    if faults:
        raise BadInput(faults)
    return found


def machine_json(machine: Machine) -> dict[str, Any]:
    """Describe a machine as plain data: lengths mm, angles degrees, feeds per minute."""
    return {
        "name": machine.name,
        "title": machine.title,
        "file": str(machine.source),
        "units": machine.units,
        "pivot_length_mm": machine.pivot_length_mm,
        "axes": [
            {
                "letter": axis.letter,
                "kind": axis.kind,
                "carries": axis.carries,
                "limits": list(axis.limits) if axis.limits else None,
                "rapid": axis.rapid,
                "feed": axis.feed,
                "acceleration": axis.acceleration,
                "jerk": axis.jerk,
            }
            for axis in machine.axes
        ],
        "spindle_rpm": [machine.spindle.min_rpm, machine.spindle.max_rpm],
        "spindle_power_kw": machine.spindle.power_kw,
        "feed_mode": machine.control.feed_mode,
        "path_mode": machine.control.path_mode,
    }


def _reach(axis: Axis) -> str:
    if axis.limits is None:
        return f"{axis.letter} endless"
    unit = "mm" if axis.kind == "linear" else "deg"
    return f"{axis.letter} {axis.limits[0]:g} to {axis.limits[1]:g} {unit}"


def machine_lines(machine: Machine) -> list[str]:
    """Describe a machine in a few lines of text."""
    linear = ", ".join(_reach(axis) for axis in machine.linear)
    rotary = ", ".join(f"{_reach(axis)} (carries the {axis.carries})" for axis in machine.rotary) or "none"
    spindle = machine.spindle
    return [
        f"{machine.name}: {machine.title}",
        f"  linear axes (gauge point): {linear}",
        f"  rotary axes: {rotary}",
        f"  spindle: {spindle.min_rpm:g} to {spindle.max_rpm:g} rev/min, {spindle.power_kw:g} kW",
        f"  control: {machine.control.feed_mode} feed, {machine.control.path_mode}",
        f"  file: {machine.source}",
    ]
