"""Fit a machine file's acceleration, jerk and block rate to stopwatch readings, and say how sure that is.

Three numbers are looked for: a scale on all accelerations, a scale on all jerks, and the block rate. docs/theory-machine.md,
"Calibration".
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from anticlast.errors import NotConverged
from anticlast.machine.motion import estimate
from anticlast.records import Event, Floats, Machine, Motions
from anticlast.tolerances import CALIBRATION_STEP, READING_SHARE

# Natural logarithms of what is looked for: scales from a twentieth to twenty, jerk wider, rates that the file allows.
NAMES = ("acceleration", "jerk", "block rate")
_LOW = np.log(np.array([0.05, 0.01, 5.0]))
_HIGH = np.log(np.array([20.0, 100.0, 1e5]))
# 95 % of a chi-square distribution with one degree of freedom: a reading's cost may rise by this within its error.
_QUANTILE = 3.841458820694124
# Acceleration is taken to be wrong first, unless another has to move far less.
_RELUCTANCE = (1.0, 1.5, 1.5)
_SCAN = 9  # starts tried over a range
_ROUNDS = 60
_UNFELT = 1e-3  # squared slope, errors per unit of logarithm: below it a factor of e^30 hides within an error


@dataclass(frozen=True, slots=True)
class Reading:
    """A program as read and the seconds it took."""

    program: str
    motions: Motions
    events: tuple[Event, ...]
    seconds: float


@dataclass(frozen=True, slots=True)
class Told:
    """One number: what the machine file has, what the readings say, and how far it may be off.

    Attributes
    ----------
    name : str
        "acceleration" and "jerk" are factors on the file's values of all axes, "block rate" is in blocks a second.
    before, value : float
        The file's (1 for a factor; infinite for no block rate) and the fitted one, the same if it was not fitted.
    low, high : float
        Range that explains the readings as well, 95 %; 0 or infinite where it has no end within reason.
    fitted : bool
    """

    name: str
    before: float
    value: float
    low: float
    high: float
    fitted: bool


@dataclass(frozen=True, slots=True)
class Calibration:
    """What stopwatch readings say about a machine.

    ``machine`` has the fitted values. ``estimated_s`` and ``before_s`` are the times of the readings' programs with and
    without them, ``error_s`` the error that each reading may have (one standard deviation). ``explained`` is False if
    no values bring all estimates within three such errors.
    """

    machine: Machine
    told: tuple[Told, ...]
    programs: tuple[str, ...]
    measured_s: tuple[float, ...]
    before_s: tuple[float, ...]
    estimated_s: tuple[float, ...]
    error_s: tuple[float, ...]
    explained: bool

    def as_json(self) -> dict[str, Any]:
        """Return plain data; an end that is not there is null."""
        return {
            "explained": self.explained,
            "parameters": [
                {
                    "name": item.name, "fitted": item.fitted, "before": _end(item.before), "value": _end(item.value),
                    "low": _end(item.low) or None, "high": _end(item.high),
                }
                for item in self.told
            ],
            "readings": [
                {"program": name, "measured_s": seconds, "before_s": before, "estimated_s": after, "error_s": error}
                for name, seconds, before, after, error in zip(
                    self.programs, self.measured_s, self.before_s, self.estimated_s, self.error_s, strict=True
                )
            ],
            "machine_file": self.file_lines() if self.explained else [],
        }  # fmt: skip

    def lines(self) -> list[str]:
        """Say what was found, how sure it is, and what to put into the machine file."""
        said = [
            f"{name}: measured {seconds:.1f} s, estimated {before:.1f} s before and {after:.1f} s after the fit"
            for name, seconds, before, after in zip(
                self.programs, self.measured_s, self.before_s, self.estimated_s, strict=True
            )
        ]
        if not self.explained:
            short = all(
                measured < before for measured, before in zip(self.measured_s, self.before_s, strict=True)
            )
            hint = "faster than F and rapid rates ask" if short else "slower than these can explain"
            return [
                *said,
                "No acceleration, jerk and block rate explain these readings: the machine is"
                f" {hint}. Look at feed and rapid override, fastest feeds and [times] in the machine file, and that the"
                " program is the one that ran.",
            ]
        said += [_told_line(item) for item in self.told]
        if not all(item.fitted for item in self.told):
            said.append("The ranges allow for what was left as it is being off by half or double.")
        if len(self.measured_s) == 1:
            said.append("One reading tells one number; measure programs of other kinds to tell the others.")
        return [
            *said,
            "For the machine file (it is not changed):",
            *("  " + line for line in self.file_lines()),
        ]

    def file_lines(self) -> list[str]:
        """Lines for the machine file, in its own units, of what was fitted."""
        fitted = {item.name for item in self.told if item.fitted}
        out: list[str] = []
        for axis in self.machine.axes if fitted & {"acceleration", "jerk"} else ():
            unit = 25.4 if self.machine.units == "inch" and axis.kind == "linear" else 1.0
            out.append(f"# [[axis]] {axis.letter}")
            out += [
                f"{key} = {_digits(value / unit)}"
                for key, value in (("acceleration", axis.acceleration), ("jerk", axis.jerk))
                if key in fitted
            ]
        if "block rate" in fitted:
            out += ["# [control]", f"block_rate = {_digits(self.machine.control.block_rate)}"]
        return out


def _end(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def _digits(value: float) -> str:
    """Three digits, no exponent."""
    return f"{float(f'{value:.3g}'):.10g}"


def _told_line(item: Told) -> str:
    def text(value: float) -> str:
        return f"{value:.3g}" if item.name != "block rate" else f"{value:.0f} blocks/s"

    name = item.name if item.name == "block rate" else f"{item.name}, times the file's"
    low, high = item.low > 0.0, math.isfinite(item.high)
    span = (
        f"{text(item.low)} to {text(item.high)}"
        if low and high
        else f"{text(item.low)} and above" if low else f"{text(item.high)} and below" if high else "any value"
    )  # fmt: skip
    if item.fitted:
        return f"{name}: {text(item.value)}; 95 % sure of {span}"
    return f"{name}: not told by these readings, {span} would do as well; left as it is"


def scaled(machine: Machine, logs: Floats) -> Machine:
    """Return the machine with accelerations and jerks times exp(logs[0]), exp(logs[1]) and block rate exp(logs[2])."""
    accel, jerk, rate = (float(value) for value in np.exp(logs))
    axes = tuple(
        replace(axis, acceleration=axis.acceleration * accel, jerk=axis.jerk * jerk) for axis in machine.axes
    )
    rate = 0.0 if logs[2] >= _HIGH[2] else rate
    return replace(machine, axes=axes, control=replace(machine.control, block_rate=rate))


class _Fit:
    """Cost of parameters against readings: squares of the differences, each in units of its error."""

    def __init__(self, readings: Sequence[Reading], machine: Machine, error_s: Floats) -> None:
        self.readings, self.machine, self.error_s = readings, machine, error_s
        self.held: dict[bytes, Floats] = {}
        rate = machine.control.block_rate
        self.start = np.array([0.0, 0.0, math.log(rate) if rate > 0.0 else _HIGH[2]])

    def times(self, logs: Floats) -> Floats:
        key = logs.tobytes()
        if key not in self.held:
            made = scaled(self.machine, logs)
            self.held[key] = np.array([estimate(r.motions, made, r.events).total_s for r in self.readings])
        return self.held[key]

    def off(self, logs: Floats) -> Floats:
        measured = np.array([reading.seconds for reading in self.readings])
        return (self.times(logs) - measured) / self.error_s

    def cost(self, logs: Floats) -> float:
        return float((self.off(logs) ** 2).sum())

    def along(self, logs: Floats, which: int) -> Callable[[float], float]:
        """Cost as a function of one parameter."""

        def cost(value: float) -> float:
            moved = logs.copy()
            moved[which] = value
            return self.cost(moved)

        return cost

    def best_along(self, logs: Floats, which: int) -> Floats:
        """Move one parameter to the best of a scan of its range, since times do not feel a rate that is not reached."""
        cost = self.along(logs, which)
        grid = np.unique(np.append(np.linspace(_LOW[which], _HIGH[which], _SCAN), logs[which]))
        moved = logs.copy()
        moved[which] = grid[int(np.argmin([cost(float(value)) for value in grid]))]
        return moved

    def slopes(self, logs: Floats, free: Sequence[int]) -> Floats:
        """Derivatives of the differences by the free parameters, (n, f), from central differences."""
        columns = []
        for which in free:
            low, high = logs.copy(), logs.copy()
            low[which] = max(logs[which] - 0.02, _LOW[which])
            high[which] = min(logs[which] + 0.02, _HIGH[which])
            columns.append((self.off(high) - self.off(low)) / (high[which] - low[which]))
        return np.column_stack(columns)

    def settle(self, logs: Floats, free: Sequence[int]) -> Floats:
        """Least squares over the free parameters by damped Gauss-Newton steps (Levenberg, Quart. Appl. Math. 2 (1944))."""
        damping, cost = 1e-3, self.cost(logs)
        for _ in range(_ROUNDS):
            slopes, off = self.slopes(logs, free), self.off(logs)
            normal = slopes.T @ slopes
            while damping < 1e9:
                wall = normal + damping * np.diag(np.maximum(np.diag(normal), 1e-9))
                moved = logs.copy()
                moved[list(free)] -= np.linalg.solve(wall, slopes.T @ off)
                moved = np.clip(moved, _LOW, _HIGH)
                better = self.cost(moved)
                if better <= cost:
                    break
                damping *= 10.0
            else:
                return logs
            step = float(np.abs(moved - logs).max())
            logs, cost, damping = moved, better, damping * 0.1
            if step < CALIBRATION_STEP:
                return logs
        raise NotConverged("the fit to the readings", step, CALIBRATION_STEP)


def calibrate(readings: Sequence[Reading], machine: Machine, error_s: float) -> Calibration:
    """Fit what the readings can tell, one number after the other, as long as each explains more than their error.

    Parameters
    ----------
    readings : sequence of Reading
        At least one; no more numbers are fitted than there are readings.
    machine : Machine
        As its file has it.
    error_s : float
        Standard deviation of a reading, seconds; ``READING_SHARE`` of the reading comes on top, for the model.

    Raises
    ------
    NotConverged
        If the least-squares steps do not settle.
    """
    measured = np.array([reading.seconds for reading in readings])
    errors = np.hypot(error_s, READING_SHARE * measured)
    fit = _Fit(readings, machine, errors)
    logs = fit.start.copy()
    free: list[int] = []
    while len(free) < min(len(readings), len(NAMES)):
        tried = [which for which in range(len(NAMES)) if which not in free]
        ends = [_with(fit, logs, free, which) for which in tried]
        costs = np.array([fit.cost(end) for end in ends])
        # Among those that explain the readings alike, the one that has to move least from the file's value.
        moves = np.array(
            [
                abs(end[which] - fit.start[which]) * _RELUCTANCE[which]
                for end, which in zip(ends, tried, strict=True)
            ]
        )
        best = int(np.where(costs <= costs.min() + 1.0, moves, math.inf).argmin())
        if free and fit.cost(logs) - costs[best] <= _QUANTILE:
            break
        free.append(tried[best])
        logs = ends[best]
    told = tuple(_told(fit, logs, free, which) for which in range(len(NAMES)))
    return Calibration(
        machine=scaled(machine, logs),
        told=told,
        programs=tuple(reading.program for reading in readings),
        measured_s=tuple(measured.tolist()),
        before_s=tuple(fit.times(fit.start).tolist()),
        estimated_s=tuple(fit.times(logs).tolist()),
        error_s=tuple(errors.tolist()),
        explained=bool(np.abs(fit.off(logs)).max() <= 3.0),
    )


def _with(fit: _Fit, logs: Floats, free: list[int], which: int) -> Floats:
    """Best parameters with one more of them free."""
    return fit.settle(fit.best_along(logs, which), [*free, which])


def _told(fit: _Fit, logs: Floats, free: list[int], which: int) -> Told:
    """What is known of one parameter, fitted or not."""
    if which in free:
        low, high = _range(fit, logs, free, which)
    else:
        low, high = (_edge(fit, logs, which, float(end)) for end in (_LOW[which], _HIGH[which]))
    before, value = (
        math.inf if which == 2 and at[2] >= _HIGH[2] else math.exp(at[which]) for at in (fit.start, logs)
    )
    return Told(
        NAMES[which], before, value, 0.0 if low <= _LOW[which] else math.exp(low),
        math.inf if high >= _HIGH[which] else math.exp(high), which in free,
    )  # fmt: skip


def _range(fit: _Fit, logs: Floats, free: list[int], which: int) -> tuple[float, float]:
    """Range of a fitted parameter: from the readings' errors, and from parameters that were not fitted.

    Each of those is set to half and to double the file's value and the fit repeated; where the readings allow it, its range
    counts too.
    """
    low, high = _spread(fit, logs, free, which)
    # Slopes tell nothing of where a number stops mattering (an acceleration that is not reached): go and see.
    low = min(low, _edge(fit, logs, which, float(_LOW[which])))
    high = max(high, _edge(fit, logs, which, float(_HIGH[which])))
    worst = fit.cost(logs) + _QUANTILE
    for other in (number for number in range(len(NAMES)) if number not in free):
        for factor in (-math.log(2.0), math.log(2.0)):
            moved = logs.copy()
            moved[other] += factor
            if logs[other] >= _HIGH[other]:
                continue  # a machine file without a block rate is believed
            moved = fit.settle(moved, free)
            if fit.cost(moved) <= worst:
                ends = _spread(fit, moved, free, which)
                low, high = min(low, ends[0]), max(high, ends[1])
    return low, high


def _spread(fit: _Fit, logs: Floats, free: list[int], which: int) -> tuple[float, float]:
    """Range of a fitted parameter from the normal equations; a misfit larger than the errors widens it."""
    slopes = fit.slopes(logs, free)
    spare = len(fit.readings) - len(free)
    misfit = max(1.0, fit.cost(logs) / spare) if spare else 1.0
    # A direction that the readings do not feel makes the range wide, not nothing.
    weights, axes = np.linalg.eigh(slopes.T @ slopes)
    part = axes[free.index(which)] ** 2
    half = math.sqrt(float((part / np.maximum(weights, _UNFELT)).sum()) * misfit * _QUANTILE)
    return float(logs[which]) - half, float(logs[which]) + half


def _edge(fit: _Fit, logs: Floats, which: int, end: float) -> float:
    """How far one parameter alone can go towards an end of its range before the readings speak against it."""
    cost = fit.along(logs, which)
    allowed = fit.cost(logs) + _QUANTILE
    if cost(end) <= allowed:
        return end
    inside, outside = float(logs[which]), end
    while abs(outside - inside) > 10.0 * CALIBRATION_STEP:
        middle = 0.5 * (inside + outside)
        if cost(middle) <= allowed:
            inside = middle
        else:
            outside = middle
    return inside
