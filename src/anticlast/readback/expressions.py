"""Values of words: numbers, parameters, functions, bracketed expressions (NISTIR 6556 section 3.3.2).

Text comes here in lower case with blanks taken out.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from functools import partial
from typing import Final

from anticlast.readback.language import INTEGER_SLACK, LAST_PARAMETER, LanguageError

NUMBER: Final = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)")
_DEEPEST: Final = 128  # a line of 256 characters cannot close more brackets than this

_FUNCTION: Final = re.compile(r"(abs|acos|asin|atan|cos|exp|fix|fup|ln|round|sin|sqrt|tan)\[")
_NAME: Final = re.compile(r"[a-z]+")
_OPERATOR: Final = re.compile(r"\*\*|\*|/|mod|\+|-|or|xor|and")
_LEVELS: Final = (frozenset(("**",)), frozenset(("*", "/", "mod")), frozenset(("+", "-", "or", "xor", "and")))


def _round(value: float) -> float:
    return math.copysign(math.floor(abs(value) + 0.5), value)  # halves away from zero (from memory)


_APPLY: Final[dict[str, Callable[[float], float]]] = {
    "abs": abs,
    "acos": lambda value: math.degrees(math.acos(value)),
    "asin": lambda value: math.degrees(math.asin(value)),
    "cos": lambda value: math.cos(math.radians(value)),
    "exp": math.exp,
    "fix": lambda value: float(math.floor(value)),
    "fup": lambda value: float(math.ceil(value)),
    "ln": math.log,
    "round": _round,
    "sin": lambda value: math.sin(math.radians(value)),
    "sqrt": math.sqrt,
    "tan": lambda value: math.tan(math.radians(value)),
}


def _mod(left: float, right: float) -> float:
    rest = math.fmod(left, right)
    return rest + abs(right) if rest < 0.0 else rest  # never negative (from memory; the text only names MOD)


_COMBINE: Final[dict[str, Callable[[float, float], float]]] = {
    "**": lambda left, right: math.pow(left, right),
    "*": lambda left, right: left * right,
    "/": lambda left, right: left / right,
    "mod": _mod,
    "+": lambda left, right: left + right,
    "-": lambda left, right: left - right,
    "or": lambda left, right: float(left != 0.0 or right != 0.0),
    "xor": lambda left, right: float((left != 0.0) != (right != 0.0)),
    "and": lambda left, right: float(left != 0.0 and right != 0.0),
}


def _checked(what: str, section: str, compute: Callable[[], float]) -> float:
    """Run one arithmetic step; a result that is no finite number is the program's error, not ours."""
    try:
        value = compute()
    except (ValueError, ZeroDivisionError, OverflowError):
        raise LanguageError(what, "has no finite value here", section) from None
    if not math.isfinite(value):
        raise LanguageError(what, "has no finite value here", section)
    return value


def real_value(text: str, at: int, parameters: Mapping[int, float], depth: int = 0) -> tuple[float, int]:
    """Read one real value.

    Parameters
    ----------
    text : str
        A line in lower case without blanks.
    at : int
        Where the value starts.
    parameters : Mapping[int, float]
        Values known of the numbered parameters.
    depth : int
        How many brackets are open.

    Returns
    -------
    (value, at) : (float, int)
        The value, and where the text after it starts.

    Raises
    ------
    LanguageError
        There is no legal value.
    """
    if depth > _DEEPEST:
        raise LanguageError("[", "more brackets opened than a line can close", "3.3.2.3")
    found = NUMBER.match(text, at)
    if found:
        return float(found.group()), found.end()
    mark = text[at : at + 1]
    if mark == "[":
        return _expression(text, at, parameters, depth + 1)
    if mark == "#":
        return _parameter(text, at, parameters, depth)
    named = _FUNCTION.match(text, at)
    if named:
        return _function(named.group(1), text, named.end() - 1, parameters, depth)
    unknown = _NAME.match(text, at)
    shown = (unknown.group() if unknown else text[at : at + 8].split("\x01")[0]).upper() or "end of line"
    raise LanguageError(shown, "a number, parameter, function or [expression] is missing here", "3.3.2")


def _function(
    name: str, text: str, at: int, parameters: Mapping[int, float], depth: int
) -> tuple[float, int]:
    value, at = _expression(text, at, parameters, depth + 1)
    if name == "atan":
        if text[at : at + 2] != "/[":
            raise LanguageError("ATAN", "takes two bracketed values, ATAN[y]/[x]", "3.3.2.4")
        other, at = _expression(text, at + 1, parameters, depth + 1)
        return math.degrees(math.atan2(value, other)), at
    return _checked(f"{name.upper()}[{value:g}]", "3.3.2.4", lambda: _APPLY[name](value)), at


def _parameter(text: str, at: int, parameters: Mapping[int, float], depth: int) -> tuple[float, int]:
    marks = 0
    while text[at : at + 1] == "#":
        marks += 1
        at += 1
    value, at = real_value(text, at, parameters, depth)
    for _ in range(marks):
        index = parameter_index(value)
        if index not in parameters:
            raise LanguageError(
                f"#{index}", "is read before it is set; its value would come from the control", "3.2.1"
            )
        value = parameters[index]
    return value, at


def parameter_index(value: float) -> int:
    """Return value as the number of a parameter, 1 to 5399."""
    nearest = round(value) if abs(value) < 1e6 else 0
    if abs(value - nearest) > INTEGER_SLACK or not 1 <= nearest <= LAST_PARAMETER:
        raise LanguageError(f"#{value:g}", f"parameters are numbered 1 to {LAST_PARAMETER}", "3.3.2.2")
    return nearest


def _expression(text: str, at: int, parameters: Mapping[int, float], depth: int) -> tuple[float, int]:
    """Read ``[a op b ...]``: ``**`` binds first, then ``* / MOD``, then the rest; left to right."""
    value, at = real_value(text, at + 1, parameters, depth)
    values, operators = [value], []
    while text[at : at + 1] != "]":
        found = _OPERATOR.match(text, at)
        if not found:
            shown = text[at : at + 1].replace("\x01", "(").strip() or "end of line"
            raise LanguageError(shown, "an operator or ] is missing in this expression", "3.3.2.3")
        value, at = real_value(text, found.end(), parameters, depth)
        operators.append(found.group())
        values.append(value)
    for level in _LEVELS:
        kept_values, kept_operators = [values[0]], []
        for operator, right in zip(operators, values[1:], strict=True):
            if operator in level:
                left = kept_values[-1]
                shown = f"[{left:g} {operator.upper()} {right:g}]"
                kept_values[-1] = _checked(shown, "3.3.2.3", partial(_COMBINE[operator], left, right))
            else:
                kept_values.append(right)
                kept_operators.append(operator)
        values, operators = kept_values, kept_operators
    return values[0], at + 1
