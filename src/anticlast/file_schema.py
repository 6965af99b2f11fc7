"""Check tables of a user's file against a model, and say every fault in one plain form: found X; needs Y."""

from __future__ import annotations

import difflib
import json
import types
import typing
from collections.abc import Mapping
from dataclasses import dataclass, field
from decimal import Decimal
from functools import cache
from typing import Annotated, Any, Final, Generic, Literal, TypeVar

from pydantic import BaseModel, ConfigDict, GetCoreSchemaHandler, ValidationError, create_model
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

from anticlast.toml_lines import Location, Source, shown

Units = Literal["mm", "inch"]

MM_PER_INCH: Final = 25.4  # exact: international yard and pound agreement, 1959

# Names and titles go into headings and program comments, whose lines must stay well under 256 characters.
LONGEST_LINE: Final = 120

# Limits of an inch file are printed to 6 digits; a value typed as printed must be taken (relative slack).
_PRINTED_SLACK: Final = 1e-5

# unit of a quantity -> (mm per file unit in an inch file, name in a mm file, name in an inch file)
_UNITS: Final[dict[str, tuple[float, str, str]]] = {
    "length": (MM_PER_INCH, "mm", "inch"),
    "feed": (MM_PER_INCH, "mm/min", "inch/min"),
    "acceleration": (MM_PER_INCH, "mm/s^2", "inch/s^2"),
    "jerk": (MM_PER_INCH, "mm/s^3", "inch/s^3"),
    "curvature": (1.0 / MM_PER_INCH, "1/mm", "1/inch"),
}


def plain_number(value: float) -> str:
    """Write a number to 6 digits without an exponent."""
    return format(Decimal(f"{value:.6g}"), "f")


@dataclass(frozen=True, slots=True)
class Quantity:
    """Annotation of a number in a file: its unit and range; brings an inch file's value to mm on the way in.

    Attributes
    ----------
    unit : str
        "length", "feed", "acceleration", "jerk" or "curvature" follow the file's units; any other text is the
        unit itself, and empty is a plain number.
    low, high : float
        Range in mm units, both ends allowed unless ``above``.
    above : bool
        The low end itself is not allowed.
    whole : bool
        Only whole numbers.
    """

    unit: str
    low: float
    high: float
    above: bool = False
    whole: bool = False

    def factor(self, units: Units) -> float:
        """Millimetre units per file unit."""
        return _UNITS[self.unit][0] if units == "inch" and self.unit in _UNITS else 1.0

    def unit_name(self, units: Units) -> str:
        """Unit as a user writes it."""
        _, metric, imperial = _UNITS.get(self.unit, (1.0, self.unit, self.unit))
        return imperial if units == "inch" else metric

    def range_text(self, units: Units) -> str:
        """Say the range in the file's units, as in ``above 0 and at most 100 mm``."""
        factor, unit = self.factor(units), self.unit_name(units)
        low, high = plain_number(self.low / factor), plain_number(self.high / factor)
        span = f"above {low} and at most {high}" if self.above else f"from {low} to {high}"
        return f"{span}, in {unit}" if unit.startswith("1/") else f"{span} {unit}".rstrip()

    def describe(self, units: Units) -> str:
        """Say what is needed, as in ``a number above 0 and at most 100 mm``."""
        return f"a {'whole ' if self.whole else ''}number {self.range_text(units)}"

    def holds(self, value: float, units: Units) -> bool:
        """Whether a value in mm units is in range."""
        slack = _PRINTED_SLACK if self.factor(units) != 1.0 else 0.0
        low, high = self.low - slack * abs(self.low), self.high + slack * abs(self.high)
        return (low < value if self.above else low <= value) and value <= high

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        """Hook this range check behind pydantic's own type check."""

        def check(value: float, info: core_schema.ValidationInfo) -> float:
            units: Units = (info.context or {}).get("units", "mm")
            converted = value * self.factor(units)
            if not self.holds(converted, units):
                raise PydanticCustomError("out_of_range", "out of range")
            return int(converted) if self.whole else float(converted)

        return core_schema.with_info_after_validator_function(check, handler(source))


@dataclass(frozen=True, slots=True)
class Says:
    """Annotation that words what a value needs where its type alone would not."""

    text: str


class FileTable(BaseModel):
    """Base of all tables: strict types (a whole number may stand for a decimal one), no unknown keys."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)


T = TypeVar("T", bound=FileTable)


@dataclass(slots=True)
class Checked(Generic[T]):
    """A table after the model's check: every value that was good on its own, even if the whole table was not.

    Attributes
    ----------
    values : dict
        Valid values in mm units, defaults included; a faulty or missing key is absent.
    given : frozenset of str
        Keys that stand in the file, good or bad.
    """

    source: Source
    at: Location
    values: dict[str, Any]
    given: frozenset[str]
    model: type[T]
    _table: T | None = field(default=None)

    def get(self, key: str) -> Any:
        """Value of a key, None if it is absent or faulty."""
        return self.values.get(key)

    def all_of(self, *keys: str) -> bool:
        """Whether all of these keys have a value that is good on its own."""
        return all(self.values.get(key) is not None for key in keys)

    def fault(self, key: str, message: str) -> None:
        """Note a fault at a key of this table; an empty key means the table."""
        self.source.add((*self.at, key) if key else self.at, message)

    @property
    def complete(self) -> bool:
        """Whether every key is there and good on its own."""
        return self._table is not None

    @property
    def table(self) -> T:
        """The validated table; only to be asked for when it is complete."""
        assert self._table is not None, "asked for a table that has faults"
        return self._table


def found_text(value: Any) -> str:
    """Name a value as it stands in the file."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return shown(json.dumps(value, ensure_ascii=False))
    if isinstance(value, int):
        return str(value) if abs(value) < 10**15 else "a whole number of more than 15 digits"
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, (tuple, list)):
        return f"a list of {len(value)}" if value else "an empty list"
    if isinstance(value, Mapping):
        return "a table"
    return "a date or time" if type(value).__module__ == "datetime" else shown(repr(value))


def is_line(text: str) -> bool:
    """Whether a text can stand in a heading: one line, printable, not too long."""
    return len(text) <= LONGEST_LINE and text.isprintable()


def options_text(options: typing.Iterable[str]) -> str:
    """List allowed texts: ``"ball", "bull" or "flat"``."""
    quoted = [json.dumps(option) for option in options]
    return quoted[0] if len(quoted) == 1 else ", ".join(quoted[:-1]) + " or " + quoted[-1]


def needed_option(options: typing.Sequence[str]) -> str:
    """Say which text is needed: ``one of "ball", "bull" or "flat"``, or the only one."""
    return f"one of {options_text(options)}" if len(options) > 1 else options_text(options)


def nearest(word: str, options: typing.Iterable[str]) -> str | None:
    """Return the option most like a word, or None if none is much like it."""
    close = difflib.get_close_matches(word.lower()[:80], list(options), n=1, cutoff=0.65)
    return close[0] if close else None


def freeze(value: Any) -> Any:
    """Turn lists into tuples all the way down, which is what strict models of frozen tables take."""
    if isinstance(value, (list, tuple)):
        return tuple(freeze(item) for item in value)
    if isinstance(value, Mapping):
        return {key: freeze(item) for key, item in value.items()}
    return value


def describe(annotation: Any, units: Units) -> str:
    """Say what an annotated type needs, in the file's units."""
    if typing.get_origin(annotation) is Annotated:
        inner, *metadata = typing.get_args(annotation)
        for item in metadata:
            if isinstance(item, Quantity):
                return item.describe(units)
            if isinstance(item, Says):
                return item.text
        return describe(inner, units)
    origin, arguments = typing.get_origin(annotation), typing.get_args(annotation)
    if origin in (types.UnionType, typing.Union):
        return describe(next(option for option in arguments if option is not types.NoneType), units)
    if origin is Literal:
        return needed_option(arguments)
    if origin is tuple:
        if arguments[-1] is Ellipsis:
            return f"a list, each item {describe(arguments[0], units)}"
        return f"a list of {len(arguments)}, each {describe(arguments[0], units)}"
    return {str: "text in quotes", bool: "true or false"}[annotation]


def _step_into(annotation: Any, position: str | int) -> Any:
    """Annotation of one item of an annotated list."""
    if typing.get_origin(annotation) is Annotated:
        return _step_into(typing.get_args(annotation)[0], position)
    arguments = typing.get_args(annotation)
    if typing.get_origin(annotation) in (types.UnionType, typing.Union):
        return _step_into(next(option for option in arguments if option is not types.NoneType), position)
    if typing.get_origin(annotation) is tuple and isinstance(position, int):
        return arguments[0] if arguments[-1] is Ellipsis else arguments[min(position, len(arguments) - 1)]
    return annotation


@cache
def key_types(model: type[FileTable]) -> dict[str, Any]:
    """Annotated types of a model's keys."""
    return typing.get_type_hints(model, include_extras=True)


@cache
def _partial(model: type[FileTable]) -> type[FileTable]:
    """Make the same model with no key required: it keeps what is good of a table with faults."""
    required = [name for name, item in model.model_fields.items() if item.is_required()]
    fields: dict[str, Any] = {name: (key_types(model)[name] | None, None) for name in required}
    return create_model(f"Partial{model.__name__}", __base__=model, **fields)


def check_table(source: Source, at: Location, raw: Any, model: type[T], units: Units) -> Checked[T]:
    """Check one table and note all its faults in the source.

    Parameters
    ----------
    source : Source
        Takes the faults.
    at : tuple
        Path of the table in the file.
    raw : Any
        What stands there.
    model : type of FileTable
        What should.
    units : {"mm", "inch"}
        Units of the file; values come back in mm.
    """
    if not isinstance(raw, Mapping):
        keys = ", ".join(model.model_fields)
        source.add(at, f"found {found_text(raw)}; needs a table with the keys {keys}")
        return Checked(source, at, {}, frozenset(), model)
    frozen: dict[str, Any] = freeze(raw)
    context = {"units": units}
    given = frozenset(frozen)
    try:
        table = model.model_validate(frozen, context=context)
    except ValidationError as error:
        bad: set[str] = set()
        for item in error.errors(include_url=False, include_context=False):
            bad.add(str(item["loc"][0]))
            _note(source, at, item["loc"], item["type"], item["input"], model, units)
        good = {key: value for key, value in frozen.items() if key not in bad}
        part = _partial(model).model_validate(good, context=context)
        values = {key: value for key, value in part if key not in bad and value is not None}
        return Checked(source, at, values, given, model)
    return Checked(source, at, dict(table), given, model, table)


def _note(
    source: Source, at: Location, place: Location, kind: str, value: Any, model: type[FileTable], units: Units
) -> None:
    """Turn one of pydantic's errors into a fault of the file."""
    if kind == "extra_forbidden":
        source.add((*at, *place), unknown_key(str(place[0]), model.model_fields))
        return
    annotation = key_types(model)[str(place[0])]
    if kind == "missing" and len(place) == 1:
        source.add((*at, *place), f"missing; needs {describe(annotation, units)}")
        return
    if kind == "missing":  # a list that is too short: pydantic names the item that is not there
        place = place[:-1]
    for position in place[1:]:
        annotation = _step_into(annotation, position)
    message = f"found {found_text(value)}; needs {describe(annotation, units)}"
    options = typing.get_args(annotation) if typing.get_origin(annotation) is Literal else ()
    if isinstance(value, str) and options and (near := nearest(value, options)):
        message += f"; nearest is {json.dumps(near)}"
    source.add((*at, *place), message)


def unknown_key(key: str, options: typing.Iterable[str]) -> str:
    """Say what could have been meant by a key that means nothing."""
    if near := nearest(key, options):
        return f'unknown key; nearest valid key is "{near}"'
    return f"unknown key; valid keys are {', '.join(options)}"
