"""Python posts: machines that a table cannot express, as a module with a function ``machine()``.

``machine()`` returns the same nested tables as a machine file, or a finished ``records.Machine``. The module
may also define ``write``; the writer finds it through ``Machine.source``.
"""

from __future__ import annotations

import importlib.util
import inspect
import sys
import traceback
from collections.abc import Callable, Mapping
from dataclasses import replace
from importlib.metadata import EntryPoint, entry_points
from pathlib import Path
from types import ModuleType
from typing import Any, Final

from anticlast.errors import BadInput, Fault
from anticlast.file_schema import found_text
from anticlast.machine.file_tables import machine_from
from anticlast.records import Machine
from anticlast.toml_lines import Source, shown, why_unreadable

GROUP: Final = "anticlast.posts"


def installed() -> dict[str, EntryPoint]:
    """Entry points of installed posts, by name."""
    return {point.name: point for point in entry_points(group=GROUP)}


def load_entry_point(point: EntryPoint) -> Machine:
    """Load the machine of an installed post; the entry point names a module.

    Raises
    ------
    BadInput
        Whatever goes wrong in the module.
    """
    file = f"{GROUP}:{point.name}"
    module = _guarded(point.load, file, Path(file))
    if not isinstance(module, ModuleType):
        raise BadInput(Fault(file, 0, "", f"the entry point {shown(point.value)} is not a module; needs one"))
    path = Path(module.__file__ or file)
    return _machine_of(module, str(path), point.name, path)


def load_module(path: Path, file: str) -> ModuleType:
    """Run a Python post and return its module.

    Parameters
    ----------
    path : Path
    file : str
        How messages name it.

    Raises
    ------
    BadInput
        The file is missing or fails to run; with the line it failed on.
    """
    try:
        path.read_bytes()
    except (OSError, ValueError) as error:
        raise BadInput(Fault(file, 0, "", why_unreadable(path, error))) from None
    spec = importlib.util.spec_from_file_location(f"anticlast_post_{path.stem}", path)
    assert spec is not None, "a .py path always has a loader"
    assert spec.loader is not None, "a .py path always has a loader"
    module = importlib.util.module_from_spec(spec)
    loader = spec.loader
    _guarded(lambda: loader.exec_module(module), file, path)
    return module


def load(path: Path, file: str) -> Machine:
    """Load the machine of a Python post given by path.

    Raises
    ------
    BadInput
        Whatever goes wrong in it, with the line.
    """
    return _machine_of(load_module(path, file), file, path.stem, path)


def _machine_of(module: ModuleType, file: str, name: str, path: Path) -> Machine:
    function = getattr(module, "machine", None)
    if not callable(function):
        raise BadInput(
            Fault(file, 1, "machine", "missing; needs a function machine() that returns the machine's tables")
        )
    line = function.__code__.co_firstlineno if inspect.isfunction(function) else 1
    made = _guarded(function, file, path)
    if isinstance(made, Machine):
        return replace(made, source=path)
    if not isinstance(made, Mapping):
        message = (
            f"found {found_text(made)}; machine() needs to return the machine's tables or a records.Machine"
        )
        raise BadInput(Fault(file, line, "machine", message))
    return machine_from(Source(file, made, {(): line}), name, path)


def _guarded(function: Callable[[], Any], file: str, path: Path) -> Any:
    """Call the user's code; what it raises becomes a fault at the line of its file that raised."""
    try:
        return function()
    except (KeyboardInterrupt, GeneratorExit):
        raise
    except SyntaxError as error:
        raise BadInput(
            Fault(file, error.lineno or 0, "", f"not valid Python: {shown(error.msg or '')}")
        ) from None
    except BaseException as error:  # user code may raise anything at all, SystemExit included
        frames = traceback.extract_tb(sys.exc_info()[2])
        lines = [frame.lineno for frame in frames if frame.lineno and Path(frame.filename).name == path.name]
        message = f"the post raised {type(error).__name__}: {shown(str(error))}"
        raise BadInput(Fault(file, lines[-1] if lines else 0, "", message)) from None
