"""A process model found from a test: as text for people, as JSON for programs, and as values for the register."""

from __future__ import annotations

import math
from dataclasses import dataclass
from decimal import ROUND_HALF_EVEN, Decimal
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.commanded import OPENING, OUTPUT, Commanded, commanded
from loopdoc.engineering.confidence import Estimate, Model
from loopdoc.engineering.identification import Identification, identify
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.stages import Lacking
from loopdoc.exchange.escaping import for_json, for_terminal
from loopdoc.exchange.findings import CAUTION, as_line
from loopdoc.exchange.responses import TUNING_CAUTION
from loopdoc.exchange.step_test import StepTest
from loopdoc.register.edit import Value, replace_file, set_values
from loopdoc.register.load import Loaded
from loopdoc.register.model import Process, Register, known
from loopdoc.register.place import Fault, Place
from loopdoc.register.quantity import display_number, parse_gain, parse_quantity
from loopdoc.register.text import read_text
from loopdoc.register.units import UNITS, Unit, convert_difference, difference_unit, same_difference

FloatArray = NDArray[np.float64]

MOST_DIGITS = 4
"""Significant digits of a written value at most: no plant is known better."""
MOVES_TOLD = 6
TIME_UNITS = ((7200.0, "h"), (120.0, "min"), (0.0, "s"))
"""From this time on [s], write it in that unit, where the register has no other."""
PER_SECOND_FROM, PER_MINUTE_FROM = 100.0, 0.01
"""An integrating gain that is this or more in a minute is written per second, or per minute; else per hour."""


@dataclass(frozen=True, slots=True)
class Identified:
    """A test, what it says of the process, and how the two are named."""

    tag: str
    """Of the loop; empty where no register and no tag were given."""
    test: StepTest
    result: Identification
    commanded: Commanded | None
    """None where there is no register: the process is then per unit of the output as recorded."""
    process: Process | None
    """What the register holds so far."""

    @property
    def moved(self) -> FloatArray:
        """(n,) what moved, in `moved_unit`."""
        return self.commanded.moved if self.commanded else self.test.moved

    @property
    def measurement(self) -> FloatArray:
        """(n,) in `measurement_unit`."""
        return self.commanded.measurement if self.commanded else self.test.measurement

    @property
    def moved_unit(self) -> Unit:
        return self.commanded.unit if self.commanded else self.test.moved_unit

    @property
    def measurement_unit(self) -> Unit:
        return self.commanded.measurement_unit if self.commanded else self.test.measurement_unit

    @property
    def moved_name(self) -> str:
        """What moved, in words."""
        if self.commanded:
            return f"{self.commanded.what} of {self.commanded.tag}"
        return self.test.recorded

    @property
    def moved_label(self) -> str:
        """What moved, short enough for an axis."""
        return self.commanded.tag if self.commanded else self.test.recorded

    @property
    def title(self) -> str:
        """The test, and the loop where it is named."""
        return f"{self.tag}: {self.test_name}" if self.tag else self.test_name

    @property
    def plot_title(self) -> str:
        """The same, with what a reader of the plot alone must know."""
        return self.title if self.result.model else f"{self.title}: refused, the test supports no model"

    @property
    def test_name(self) -> str:
        """The test, as the source of a model names it."""
        return f"step test {self.test.date}".rstrip() + f", file {self.test.file}"


def identified(test: StepTest, tag: str, register: Register | None) -> Identified | Lacking:
    """What a test says of the process of a loop, or why the register does not say how to take its output."""
    if register is None:
        return Identified(tag, test, identify(test.time_s, test.moved, test.measurement), None, None)
    record = commanded(
        Plant(register),
        tag,
        recorded=test.recorded,
        moved=test.moved,
        unit=test.moved_unit,
        measurement=test.measurement,
        measurement_unit=test.measurement_unit,
    )
    if isinstance(record, Lacking):
        return record
    process = known(register.loops[tag].process)
    if process is not None and record.branch:
        process = process.branches.get(record.tag)
    integrates = process is not None and process.integrating
    result = identify(test.time_s, record.moved, record.measurement, integrates=integrates)
    return Identified(tag, test, result, record, process)


# ---------------------------------------------------------------- rounding


def rounded(value: float, half_width: float) -> str:
    """A value with the digits that its interval supports.

    Two digits of the half width where they are up to 35, one where they are more.
    Source: Particle Data Group, Review of Particle Physics, introduction (rule for rounding, from memory).
    """
    return format(_quantized(value, _place(value, half_width)), "f")


def _place(value: float, half_width: float) -> int:
    """Power of ten of the last digit."""
    most = (math.floor(math.log10(abs(value))) if value else 0) - MOST_DIGITS + 1
    if not (0.0 < half_width < math.inf):
        return most
    power = math.floor(math.log10(half_width))
    leading = half_width / 10.0**power
    return max(power - 1 if leading < 3.545 else power, most)


def _quantized(value: float, place: int) -> Decimal:
    exact = Decimal(repr(float(value))).quantize(Decimal(1).scaleb(place), rounding=ROUND_HALF_EVEN)
    return exact if exact else abs(exact)  # no minus before a nought


@dataclass(frozen=True, slots=True)
class _Shown:
    """An estimate in a unit, all three figures rounded to the same place."""

    value: str
    low: str
    high: str
    unit: str

    @property
    def quantity(self) -> str:
        return f"{self.value} {self.unit}"

    @property
    def interval(self) -> str:
        return f"{self.low} to {self.high} {self.unit}"


def _shown(estimate: Estimate, unit: str, size: float = 1.0) -> _Shown:
    value, low, high = (figure / size for figure in (estimate.value, estimate.low, estimate.high))
    place = _place(value, (high - low) / 2.0)
    shown = [format(_quantized(figure, place), "f") for figure in (value, low, high)]
    return _Shown(shown[0], shown[1], shown[2], unit)


def _time(estimate: Estimate, written: Unit | None) -> _Shown:
    """A time, in the unit in which the register has it so far."""
    symbol = written.symbol if written else next(unit for least, unit in TIME_UNITS if estimate.value >= least)
    return _shown(estimate, symbol, UNITS[symbol].factor)


def _gain(found: Identified, model: Model) -> _Shown:
    """The gain, in the units in which the register has it so far."""
    written = known(found.process.gain) if found.process else None
    changed, moved = _difference(found.measurement_unit), found.moved_unit
    if written is not None and same_difference(written.denominator, moved):
        moved = written.denominator
    if written is not None and same_difference(written.numerator, changed):
        changed = written.numerator
    size = convert_difference(1.0, changed, found.measurement_unit)
    size /= convert_difference(1.0, moved, found.moved_unit)
    if not model.integrating:
        return _shown(model.gain, f"{changed} per {moved}", size)
    time = written.per_time.symbol if written is not None and written.per_time is not None else None
    if time is None:
        per_min = abs(model.gain.value) / size * UNITS["min"].factor
        time = "s" if per_min >= PER_SECOND_FROM else "min" if per_min >= PER_MINUTE_FROM else "h"
    return _shown(model.gain, f"{changed}/{time} per {moved}", size / UNITS[time].factor)


def _difference(unit: Unit) -> Unit:
    """The unit in which gains state changes of a reading: `bar` of one in `barg`, but degC as it is written."""
    return unit if unit.kind == "temperature" else difference_unit(unit)


@dataclass(frozen=True, slots=True)
class _Figures:
    """The model's figures as they are written."""

    gain: _Shown
    lags: tuple[_Shown, ...]
    dead_time: _Shown


def _figures(found: Identified, model: Model) -> _Figures:
    process = found.process
    lags = known(process.lags) if process else None
    dead_time = known(process.dead_time) if process else None
    units = [lag.unit for lag in lags or ()]
    return _Figures(
        _gain(found, model),
        tuple(_time(lag, units[i] if i < len(units) else None) for i, lag in enumerate(model.lags_s)),
        _time(model.dead_time_s, dead_time.unit if dead_time else None),
    )


# ---------------------------------------------------------------- for the register


def register_values(found: Identified) -> dict[str, Value | None]:
    """What the register's `process` is to hold, key by key; None for a key that goes.

    Raises
    ------
    ValueError
        The test supports no model, or a value does not read back.
    """
    model = found.result.model
    if model is None:
        raise ValueError("the test supports no model")
    figures = _figures(found, model)
    parse_gain(figures.gain.quantity)
    for time in (*figures.lags, figures.dead_time):
        parse_quantity(time.quantity)
    lags = [lag.quantity for lag in figures.lags]
    return {
        "effect": "rises" if model.gain.value > 0.0 else "falls",
        "gain": figures.gain.quantity,
        "lag": lags[0] if len(lags) == 1 else None,
        "lags": lags if len(lags) > 1 else None,
        "lead": None,  # no form that is fitted has one
        "dead_time": figures.dead_time.quantity,
        "integrating": True if model.integrating else None,
        "source": f"{found.test_name}, 95 % intervals {_intervals(figures)}",
    }


def write_into(loaded: Loaded, folder: Path, found: Identified) -> Place | str:
    """Write the model into the register, and say where; or why it was not written."""
    register, record = loaded.register, found.commanded
    assert record is not None  # without a register nothing is written
    if any(tag == found.tag for tag, _, _ in register.twice):
        return f"{found.tag} is defined twice; mend that first"
    origin = register.loops[found.tag].origin
    steps = (*origin.path, "process", *(("branches", record.tag) if record.branch else ()))
    path = tuple(str(step) for step in steps)
    name = origin.source.name
    content = loaded.sources[name]
    changed = set_values(
        content,
        name,
        path,
        register_values(found),
        in_place_of={"lag": "lags", "lags": "lag"},
        after=("unit", "service", "drawing", "purpose", "measurement", "operating", "controller"),
    )
    if isinstance(changed, Fault):
        return as_line(changed.place, changed.message, changed.remedy)
    complaint = replace_file(folder / name, before=content, after=changed)
    return complaint or Place(name, *_line_of(changed, name, path))


def _line_of(content: bytes, name: str, path: tuple[str, ...]) -> tuple[int, int]:
    again = read_text(content, name)
    assert not isinstance(again, Fault)  # the edit has read it back
    place = again.place(path, key=True)
    return place.line, place.column


def plot_caption(found: Identified) -> str:
    """The model with its intervals, or why there is none, for the plot."""
    result = found.result
    if result.model is None:
        return f"No model: {'; '.join(result.refusals)}."
    figures, noise = _figures(found, result.model), result.leftover.noise if result.leftover else 0.0
    values = [f"gain {figures.gain.quantity}", *(f"lag {lag.quantity}" for lag in figures.lags)]
    values.append(f"dead time {figures.dead_time.quantity}")
    return (
        f"{result.model.name[0].upper()}{result.model.name[1:]}: {', '.join(values)}; 95 % intervals: "
        f"{_intervals(figures)}. Noise {display_number(noise, 2)} {_difference(found.measurement_unit)} (standard "
        "deviation); a drift is fitted with the model. What was moved holds until the next sample."
    )


def _intervals(figures: _Figures) -> str:
    parts = [f"gain {figures.gain.interval}"]
    parts += [f"lag {lag.interval}" for lag in figures.lags]
    return ", ".join([*parts, f"dead time {figures.dead_time.interval}"])


# ---------------------------------------------------------------- text


def identified_text(found: Identified, written: Place | None = None) -> str:
    """The model with its intervals, the residuals, the forms compared and the cautions, or the refusal."""
    result, test = found.result, found.test
    lines = [found.title, _record_line(found)]
    if found.commanded is None:
        lines.append(
            f"no register given: the process is per unit of the {test.recorded} as recorded, not of what the register "
            "states it for"
        )
    lines.extend(_conversion(found))
    if result.model is None:
        lines.extend(f"refused: {reason}" for reason in result.refusals)
    else:
        lines.extend(["", *_model_lines(found, result.model)])
        lines.extend(_residual_lines(found))
        lines.extend(_register_lines(found))
        lines.extend(f"caution: {caution}" for caution in result.cautions)
    if written is not None:
        lines.append(f"wrote the process of {found.tag} at {written}; see what `loopdoc check` now says")
    lines.extend(["", f"{CAUTION} {TUNING_CAUTION}"])
    return for_terminal("\n".join(lines)) + "\n"


def _record_line(found: Identified) -> str:
    test = found.test
    span = float(test.time_s[-1])
    interval = float(np.median(np.diff(test.time_s))) if len(test.time_s) > 1 else 0.0
    line = f"{len(test.time_s)} samples over {_said(span)}, mostly {_said(interval)} apart"
    moved = found.commanded.moved if found.commanded else test.moved
    changes = np.flatnonzero(np.diff(moved)) + 1
    told = [
        f"{'+' if moved[i] > moved[i - 1] else ''}{display_number(float(moved[i] - moved[i - 1]), 4)} at "
        f"{_said(float(test.time_s[i]))}"
        for i in changes[:MOVES_TOLD]
    ]
    more = f" and {len(changes) - MOVES_TOLD} more" if len(changes) > MOVES_TOLD else ""
    return f"{line}; {found.moved_name}, {found.moved_unit}: {', '.join(told) or 'no move'}{more}"


def _conversion(found: Identified) -> list[str]:
    """How the recorded output was taken, where that is not plain."""
    commanded, test = found.commanded, found.test
    if commanded is None:
        return []
    lines = []
    if commanded.reversed:
        lines.append(f"the opening of {commanded.tag} falls as the output rises (register: signal and output block)")
    elif test.recorded == OUTPUT and commanded.what == OPENING:
        lines.append(f"the output is taken for the opening of {commanded.tag}")
    elif test.recorded == OUTPUT:
        lines.append(
            f"the output is taken for what {commanded.tag} did: it must have followed; else record its measurement as "
            f"`secondary [{commanded.unit}]`"
        )
    if commanded.selectors:
        lines.append(f"the output must have been the one that {' and '.join(commanded.selectors)} selected")
    return lines


def _model_lines(found: Identified, model: Model) -> list[str]:
    figures = _figures(found, model)
    rows = [("gain", figures.gain)]
    rows += [("lag", lag) for lag in figures.lags]
    rows.append(("dead time", figures.dead_time))
    drift = _shown(model.drift_per_s, f"{_difference(found.measurement_unit)}/h", 1.0 / UNITS["h"].factor)
    rows.append(("slope before" if model.integrating else "drift", drift))
    effect = "rises" if model.gain.value > 0.0 else "falls"
    lines = [
        f"{model.name}; the measurement {effect} with the {found.moved_name}",
        f"    {'':14}{'':32}95 % interval",
    ]
    return lines + [f"    {name:14}{shown.quantity:32}{shown.low} to {shown.high}" for name, shown in rows]


def _residual_lines(found: Identified) -> list[str]:
    leftover, unit = found.result.leftover, _difference(found.measurement_unit)
    assert leftover is not None  # a model has residuals
    noise = f"noise {display_number(leftover.noise, 2)} {unit}"
    if leftover.disturbance:
        noise += (
            f", and a disturbance of {display_number(leftover.disturbance, 2)} {unit} remembered over "
            f"{_said(leftover.memory_s)}"
        )
    first, *others = found.result.candidates
    compared = ", ".join(f"{other.name} {_signed(other.criterion)}" for other in others)
    return [
        f"residuals: {noise} (standard deviations); Durbin-Watson {display_number(leftover.durbin_watson, 2)}, "
        f"Ljung-Box probability once whitened {_probability(leftover.white_probability)}",
        f"Bayesian information criterion above that of {first.name}: {compared}",
    ]


def _probability(value: float) -> str:
    return display_number(value, 2) if value >= 0.001 else "below 0.001"


def _signed(value: float) -> str:
    return f"{'+' if value >= 0.0 else ''}{display_number(value, 2)}"


def _register_lines(found: Identified) -> list[str]:
    """What the register holds so far, beside what the test says."""
    process, model = found.process, found.result.model
    if process is None or model is None:
        return []
    parts = []
    gain, lags, dead_time = known(process.gain), known(process.lags), known(process.dead_time)
    if gain is not None:
        parts.append(f"gain {gain}")
    if lags:
        parts.append(f"{'lag' if len(lags) == 1 else 'lags'} {' and '.join(map(str, lags))}")
    lead = known(process.lead)
    if lead is not None:
        parts.append(f"lead {lead}")
    if dead_time is not None:
        parts.append(f"dead time {dead_time}")
    if process.integrating:
        parts.append("integrating")
    source = known(process.source)
    lines = [f"the register holds: {', '.join(parts) or 'no figures'}{f' ({source})' if source else ''}"]
    if lead is not None:
        lines.append(
            f"caution: no form with a lead is fitted: what is found stands for the lead of {lead} as well, by its lags "
            "and dead time, and takes its place"
        )
    effect = known(process.effect)
    if effect in ("rises", "falls") and (effect == "rises") != (model.gain.value > 0.0):
        lines.append(
            f"caution: the register says that the measurement {effect}; the test says the opposite, and with it the "
            "action of the controller turns round: see what test, valve and output block really do before anything is "
            "changed"
        )
    if model.integrating and not process.integrating:
        lines.append("caution: the register says that the process settles; in the test it ramps")
    return lines


def _said(seconds: float) -> str:
    symbol = next(unit for least, unit in TIME_UNITS if seconds >= least)
    return f"{display_number(seconds / UNITS[symbol].factor, 3)} {symbol}"


# ---------------------------------------------------------------- JSON


def identified_json(found: Identified, written: Place | None = None) -> str:
    """The same for programs: times in seconds, the gain in the units stated; an integrating gain per second."""
    result, test = found.result, found.test
    model, leftover = result.model, result.leftover
    document: dict[str, Any] = {
        "tag": found.tag or None,
        "file": test.file,
        "date": test.date or None,
        "samples": len(test.time_s),
        "duration_s": _number(float(test.time_s[-1])),
        "moved": {"what": found.moved_name, "unit": found.moved_unit.symbol, "recorded": test.recorded},
        "measurement_unit": found.measurement_unit.symbol,
        "refused": list(result.refusals),
        "cautions": list(result.cautions),
        "model": None,
        "register": None,
    }
    if model is not None:
        document["model"] = {
            "form": model.name,
            "effect": "rises" if model.gain.value > 0.0 else "falls",
            "integrating": model.integrating,
            "gain": _interval(model.gain),
            "lags_s": [_interval(lag) for lag in model.lags_s],
            "dead_time_s": _interval(model.dead_time_s),
            "drift_per_s": _interval(model.drift_per_s),
            "from_rest": model.from_rest,
        }
        values = register_values(found)
        document["register"] = {key: value for key, value in values.items() if value is not None}
    if leftover is not None:
        document["residuals"] = {
            "noise": _number(leftover.noise),
            "disturbance": _number(leftover.disturbance),
            "memory_s": _number(leftover.memory_s),
            "durbin_watson": _number(leftover.durbin_watson),
            "ljung_box_probability": _number(leftover.white_probability),
            "gain_interval_widened": _number(leftover.widened),
        }
    document["candidates"] = [
        {"form": entry.name, "criterion_above_best": _number(entry.criterion)} for entry in result.candidates
    ]
    document["written"] = None if written is None else {"file": written.file, "line": written.line}
    document["caution"] = f"{CAUTION} {TUNING_CAUTION}"
    return for_json(document) + "\n"


def _interval(estimate: Estimate) -> dict[str, float | None]:
    return {"value": _number(estimate.value), "low": _number(estimate.low), "high": _number(estimate.high)}


def _number(value: float) -> float | None:
    return float(f"{value:.6g}") if math.isfinite(value) else None


