"""What a loop check measures: each figure with what should be found, and within which limits.

Assumptions
-----------
- The tolerance covers the whole way from the signal that is applied to the reading on the display. Where a
  square root is taken, a tolerance in percent of span lies on the differential pressure: near zero flow the root
  turns a small error of pressure into a large one of flow.
- A final element passes its stroke when it is not slower than the register says, since the calculated responses
  rest on that time.
- A signal at the far ends is judged by NAMUR NE 43, as in `loopdoc.engineering.scaling`.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from loopdoc.engineering.pairing import ControlledLoop, Plant, Route
from loopdoc.engineering.scaling import (
    CHECK_POINTS_PCT,
    FAILURE_HIGH_MA,
    FAILURE_LOW_MA,
    MEASUREMENT_HIGH_MA,
    MEASUREMENT_LOW_MA,
    check_points,
    dp_from_flow_fraction,
    flow_from_dp_fraction,
    percent_from_milliampere,
    percent_from_value,
    pt100_tolerance_degc,
    signal_state,
    value_from_percent,
)
from loopdoc.engineering.thermocouple import thermocouple_signal_mv
from loopdoc.register.model import Alarm, FinalElement, Loop, Measurement, known
from loopdoc.register.quantity import Range
from loopdoc.register.units import UNITS, Unit, UnitError, convert, convert_difference

PERCENT = UNITS["%"]
_SECOND = UNITS["s"]
_THERMOCOUPLE = re.compile(r"\b[Tt]hermocouple,? (?:type )?(?P<kind>[BEJKNRST])\b")
_PT100_CLASS = re.compile(r"\bclass (?P<kind>AA|A|B|C)\b")
REFERENCE_JUNCTIONS_DEGC = (0.0, 20.0, 25.0)
"""Temperatures of the terminals for which a record shows the millivolts to apply: an ice point and two rooms."""


@dataclass(frozen=True, slots=True)
class Tolerance:
    """The largest error that a loop check accepts of a reading."""

    size: float
    """In `unit`."""
    unit: Unit
    """Percent of span, or a unit of the range."""
    stated: bool
    """Whether the measurement states it; else it is the policy's."""


@dataclass(frozen=True, slots=True)
class Reading:
    """One figure of a loop check."""

    key: str
    """Names it among the readings of its loop: `measurement 25 %`, `high alarm`, `FV-2011 travel 25 %`."""
    group: str
    """measurement, travel, stroke time, alarm or trip."""
    subject: str
    """What of the register it rests on: range, limit, dead band, stroke time; a change of that makes a result old."""
    at: str
    """The point at which it is read: `25 %` of the signal or the output, `high alarm`."""
    unit: Unit
    expected: float
    low: float
    """Least value accepted."""
    high: float
    """Largest value accepted."""
    both_ways: bool = False
    """Whether it is read with the signal rising and again falling."""
    tag: str = ""
    """The final element or interlock that it belongs to; empty for the loop's own."""


def reading_digits(low: float, high: float) -> int:
    """Decimals that show half the width of what is accepted to two digits: with them limits are printed and judged."""
    half = (high - low) / 2.0
    return max(0, 1 - math.floor(math.log10(half))) if half > 0.0 else 3


@dataclass(frozen=True, slots=True)
class FunctionCheck:
    """One thing that a loop must do, judged by the eye: pass or fail."""

    key: str
    """Names it among the checks of its loop: `controller action`, `FV-2011 without air`."""
    do: str
    """What the technician does, as a sentence."""
    expect: str
    """What should happen, as a sentence; empty where the register does not say."""
    against: str
    """The words of the register that it rests on; a change of them makes a result old."""


@dataclass(frozen=True, slots=True)
class LoopChecks:
    """All that is checked on one loop."""

    tag: str
    readings: tuple[Reading, ...]
    functions: tuple[FunctionCheck, ...]

    def reading(self, key: str) -> Reading | None:
        return next((reading for reading in self.readings if reading.key == key), None)

    def function(self, key: str) -> FunctionCheck | None:
        return next((check for check in self.functions if check.key == key), None)


# ---------------------------------------------------------------- sensors


def thermocouple_type(measurement: Measurement) -> str:
    """Letter of a thermocouple's type; empty for another sensor."""
    found = _THERMOCOUPLE.search(known(measurement.sensor) or "")
    return found["kind"] if found else ""


def is_pt100(measurement: Measurement) -> bool:
    """Whether the sensor is a platinum resistance thermometer of 100 ohm."""
    return (known(measurement.sensor) or "").startswith("Pt100")


def pt100_class(measurement: Measurement) -> str:
    """Tolerance class of a Pt100 by IEC 60751; empty where the register does not name one."""
    found = _PT100_CLASS.search(known(measurement.sensor) or "") if is_pt100(measurement) else None
    return found["kind"] if found else ""


def sensor_tolerances(measurement: Measurement) -> tuple[float, ...]:
    """Tolerance of a Pt100 itself at each step [unit of the range]; empty where its class or the range is not known."""
    measured, kind = known(measurement.range), pt100_class(measurement)
    if measured is None or not kind or measured.unit.kind != "temperature":
        return ()
    steps = (value_from_percent(step, low=measured.low, high=measured.high) for step in _steps(measured))
    degrees = (pt100_tolerance_degc(convert(step, measured.unit, "degC"), kind) for step in steps)
    return tuple(convert_difference(size, "degC", measured.unit) for size in degrees)


def thermocouple_signals_mv(measurement: Measurement, reference_degc: float) -> tuple[float, ...]:
    """Millivolts to apply at each step with the terminals at a temperature; empty outside the range of the type."""
    measured, kind = known(measurement.range), thermocouple_type(measurement)
    if measured is None or not kind or measured.unit.kind != "temperature":
        return ()
    steps = (value_from_percent(step, low=measured.low, high=measured.high) for step in _steps(measured))
    try:
        return tuple(
            thermocouple_signal_mv(
                kind, measuring_degc=convert(step, measured.unit, "degC"), reference_degc=reference_degc
            )
            for step in steps
        )
    except ValueError:
        return ()


def _steps(measured: Range) -> Sequence[float]:
    return CHECK_POINTS_PCT if measured.low != measured.high else ()


@dataclass(frozen=True, slots=True)
class SignalLimit:
    """A current at an end of the signal and what it says by NAMUR NE 43."""

    current_ma: float
    percent: float
    """Where it lies on the range [%]."""
    state: str
    """failure low, failure high or measurement."""


def signal_limits(measurement: Measurement) -> tuple[SignalLimit, ...]:
    """The four currents at which NE 43 draws its lines; empty for a signal without a live zero in milliampere."""
    if known(measurement.signal) != "4-20 mA":
        return ()
    ends = (FAILURE_LOW_MA, MEASUREMENT_LOW_MA, MEASUREMENT_HIGH_MA, FAILURE_HIGH_MA)
    return tuple(SignalLimit(end, percent_from_milliampere(end), signal_state(end)) for end in ends)


# ---------------------------------------------------------------- tolerance


def tolerance_of(measurement: Measurement, *, default_pct: float) -> Tolerance | None:
    """The tolerance of a measurement; None where the one it states is held or not of its range."""
    if measurement.tolerance is None:
        return Tolerance(default_pct, PERCENT, stated=False)
    stated, measured = known(measurement.tolerance), known(measurement.range)
    if stated is None or measured is None or not stated.value >= 0:
        return None
    if stated.unit != PERCENT and stated.unit.difference_kind != measured.unit.difference_kind:
        return None
    return Tolerance(stated.value, stated.unit, stated=True)


def accepted(value: float, measured: Range, tolerance: Tolerance, *, square_root: bool) -> tuple[float, float]:
    """The least and the largest reading [unit of the range] that pass where a value should be read."""
    if tolerance.unit != PERCENT:
        size = convert_difference(tolerance.size, tolerance.unit, measured.unit)
        return value - size, value + size
    share = percent_from_value(value, low=measured.low, high=measured.high) / 100.0
    if square_root and share >= 0.0:
        pressure = dp_from_flow_fraction(share)
        least = max(0.0, pressure - tolerance.size / 100.0)
        shares = (flow_from_dp_fraction(least), flow_from_dp_fraction(pressure + tolerance.size / 100.0))
    else:
        shares = (share - tolerance.size / 100.0, share + tolerance.size / 100.0)
    ends = [value_from_percent(100.0 * end, low=measured.low, high=measured.high) for end in shares]
    return min(ends), max(ends)


# ---------------------------------------------------------------- readings


def readings(plant: Plant, loop: Loop, *, tolerance_pct: float, travel_pct: float) -> tuple[Reading, ...]:
    """Every figure of the loop check of one loop that follows from the register."""
    return (
        *_of_measurement(loop, tolerance_pct),
        *_of_travel(plant.controlled.get(loop.tag), travel_pct),
        *_of_alarms(loop, tolerance_pct),
        *_of_trips(plant, loop, tolerance_pct),
    )


def _usable(loop: Loop, tolerance_pct: float) -> tuple[Measurement, Range, Tolerance] | None:
    measurement = known(loop.measurement)
    measured = known(measurement.range) if measurement else None
    if measurement is None or measured is None or measured.low == measured.high:
        return None
    tolerance = tolerance_of(measurement, default_pct=tolerance_pct)
    return (measurement, measured, tolerance) if tolerance else None


def _is_root(measurement: Measurement) -> bool:
    return known(measurement.characteristic) == "square root"


def _printed(expected: float, low: float, high: float) -> tuple[float, float, float]:
    """The figures as they are printed, so that who reads the paper and who judges go by the same limits.

    Limits are rounded towards each other: a printed one never lets pass what the tolerance does not.
    """
    digits = reading_digits(low, high)
    unit, slack = 10.0**digits, 1e-6  # what is a whole number of the last digit but for binary noise stays as it is
    inward = math.ceil(low * unit - slack) / unit, math.floor(high * unit + slack) / unit
    return (round(expected, digits), *inward)


def _of_measurement(loop: Loop, tolerance_pct: float) -> Iterator[Reading]:
    usable = _usable(loop, tolerance_pct)
    if usable is None:
        return
    measurement, measured, tolerance = usable
    root = _is_root(measurement)
    for point in check_points(low=measured.low, high=measured.high, square_root=root):
        at = f"{point.signal_pct:g} %"
        low, high = accepted(point.value, measured, tolerance, square_root=root)
        yield Reading(
            f"measurement {at}", "measurement", "range", at, measured.unit, *_printed(point.value, low, high),
            both_ways=point.signal_pct < CHECK_POINTS_PCT[-1],
        )  # fmt: skip


def _of_travel(controlled: ControlledLoop | None, travel_pct: float) -> Iterator[Reading]:
    for route in controlled.routes if controlled else ():
        element = route.end
        if not isinstance(element, FinalElement):
            continue
        if known(element.signal) != "contact" and element.opens_on is not None:
            for step in CHECK_POINTS_PCT:
                opening = opening_pct(step, element, route)
                if opening is None:
                    break
                at = f"{step:g} %"
                low, high = max(0.0, opening - travel_pct), min(100.0, opening + travel_pct)
                yield Reading(
                    f"{element.tag} travel {at}", "travel", "travel", at, PERCENT, *_printed(opening, low, high),
                    both_ways=step < CHECK_POINTS_PCT[-1], tag=element.tag,
                )  # fmt: skip
        time = known(element.stroke_time)
        if time is not None and time.unit.kind == "time" and time.value > 0:
            stroke = time.to("s")
            for way in ("opening", "closing"):
                yield Reading(
                    f"{element.tag} stroke time {way}", "stroke time", "stroke time", way, _SECOND, stroke, 0.0, stroke,
                    tag=element.tag,
                )  # fmt: skip


def opening_pct(output_pct: float, element: FinalElement, route: Route) -> float | None:
    """Opening of a final element [%] at a controller output; None where the register does not say how it opens."""
    command = command_pct(output_pct, route.branch)
    signal = 100.0 - command if known(element.output_block) == "reversed" else command
    opens_on = known(element.opens_on)
    if opens_on is None:
        return None
    return signal if opens_on == "rising signal" else 100.0 - signal


def command_pct(output_pct: float, branch: Range | None) -> float:
    """What a controller's output asks of one final element of a split range; the output itself elsewhere."""
    if branch is None or branch.low == branch.high:
        return output_pct
    return min(100.0, max(0.0, 100.0 * (output_pct - branch.low) / (branch.high - branch.low)))


def _of_alarms(loop: Loop, tolerance_pct: float) -> Iterator[Reading]:
    usable = _usable(loop, tolerance_pct)
    for kind, alarm in loop.alarms.items() if usable else ():
        assert usable is not None
        name = f"{kind.replace('_', '-')} alarm"
        yield from _point(name, "alarm", "limit", _alarm_limit(alarm, usable[1]), usable)
        yield from _point(f"{name} clears", "alarm", "dead band", _clearing(alarm, usable[1]), usable)


def _point(
    key: str, group: str, subject: str, limit: float | None, usable: tuple[Measurement, Range, Tolerance], tag: str = ""
) -> Iterator[Reading]:
    if limit is None:
        return
    measurement, measured, tolerance = usable
    if key.startswith("deviation"):  # a difference from the setpoint, which has no place on a root
        low, high = accepted(measured.low + limit, measured, tolerance, square_root=False)
        low, high = low - measured.low, high - measured.low
    else:
        low, high = accepted(limit, measured, tolerance, square_root=_is_root(measurement))
    yield Reading(key, group, subject, key, measured.unit, *_printed(limit, low, high), tag=tag)


def _alarm_limit(alarm: Alarm, measured: Range) -> float | None:
    limit = known(alarm.limit)
    if limit is None:
        return None
    try:
        if alarm.kind == "deviation":
            return limit.difference_in(measured.unit.symbol)
        return limit.to(measured.unit.symbol)
    except UnitError:
        return None


def _clearing(alarm: Alarm, measured: Range) -> float | None:
    limit, band = _alarm_limit(alarm, measured), known(alarm.deadband)
    if limit is None or band is None:
        return None
    try:
        size = band.difference_in(measured.unit.symbol)
    except UnitError:
        return None
    return limit + size if alarm.kind in ("low", "low_low") else limit - size


def _of_trips(plant: Plant, loop: Loop, tolerance_pct: float) -> Iterator[Reading]:
    usable = _usable(loop, tolerance_pct)
    for trip in plant.trips if usable else ():
        limit = known(trip.initiator.limit)
        if trip.loop is not loop or limit is None:
            continue
        assert usable is not None
        try:
            value = limit.to(usable[1].unit.symbol)
        except UnitError:
            continue
        key = f"{trip.interlock.tag} trip by {trip.initiator.tag}"
        yield from _point(key, "trip", "limit", value, usable, tag=trip.interlock.tag)
