"""What a loop check should find: the signal and the reading at each step, from the field to the display."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.values import DASH
from loopdoc.engineering.loop_check import command_pct, is_pt100, opening_pct, thermocouple_type
from loopdoc.engineering.pairing import Plant, Route
from loopdoc.engineering.scaling import (
    CHECK_POINTS_PCT,
    CheckPoint,
    check_points,
    pt100_resistance_ohm,
    value_from_percent,
)
from loopdoc.engineering.thermocouple import thermocouple_emf_mv
from loopdoc.register.model import FinalElement, Loop, Measurement, known
from loopdoc.register.units import UnitError, convert

_SIGNAL_ENDS = {"4-20 mA": (4.0, 20.0, "mA"), "0-20 mA": (0.0, 20.0, "mA"), "1-5 V": (1.0, 5.0, "V")}
"""Analogue signals: what they are at 0 and at 100 %."""
_DECIMALS = {"mA": 2, "V": 3}


@dataclass(frozen=True, slots=True)
class ExpectedRow:
    """One quantity of a loop check with its value at each step, as text."""

    what: str
    unit: str
    values: tuple[str, ...]


STEPS = tuple(f"{percent:g}\u00a0%" for percent in CHECK_POINTS_PCT)
"""The steps of a loop check, in percent of the signal or of the output."""


def expected_readings(loop: Loop, language: Language = ENGLISH) -> tuple[ExpectedRow, ...]:
    """What the display should show when the transmitter's signal is applied, sensor signals included."""
    measurement = known(loop.measurement)
    measured = known(measurement.range) if measurement else None
    if measurement is None or measured is None or measured.low == measured.high:
        return ()
    root = known(measurement.characteristic) == "square root"
    points = check_points(low=measured.low, high=measured.high, square_root=root)
    rows = [*_signal_rows(measurement, points, language, root=root)]
    readings = _rounded([point.value for point in points], language)
    rows.append(ExpectedRow(language.shows(loop.tag), language.unit(measured.unit.display), readings))
    return tuple(rows)


def expected_commands(plant: Plant, loop: Loop, language: Language = ENGLISH) -> tuple[ExpectedRow, ...]:
    """What the output should do at each step: the signal and the opening, or the secondary's setpoint."""
    controlled = plant.controlled.get(loop.tag)
    rows: list[ExpectedRow] = []
    for route in controlled.routes if controlled else ():
        if isinstance(route.end, FinalElement):
            rows.extend(_element_rows(route.end, route, language))
        elif not route.via:
            output = known(controlled.controller.output) if controlled else None
            span = known(output.span) if output else None
            if span is not None and span.low != span.high:
                asked = [value_from_percent(step, low=span.low, high=span.high) for step in CHECK_POINTS_PCT]
                what, unit = language.setpoint_of(route.end.tag), language.unit(span.unit.display)
                rows.append(ExpectedRow(what, unit, _rounded(asked, language)))
    return tuple(rows)


def _signal_rows(
    measurement: Measurement, points: Sequence[CheckPoint], language: Language, *, root: bool
) -> Iterator[ExpectedRow]:
    sensor = _sensor_row(measurement, points, language)
    if sensor:
        yield sensor
    if root:
        shares = tuple(language.digits(f"{point.signal_pct:g}") for point in points)
        yield ExpectedRow(language.label("Differential pressure"), "%", shares)
    ends = _SIGNAL_ENDS.get(known(measurement.signal) or "")
    if ends:
        what = language.signal_of(known(measurement.transmitter) or DASH)
        yield _signal_row(what, ends, CHECK_POINTS_PCT, language)


def _sensor_row(
    measurement: Measurement, points: Sequence[CheckPoint], language: Language
) -> ExpectedRow | None:
    """What a resistance thermometer or thermocouple gives at each step; None for another sensor, or outside its range.

    Thermocouples with the reference junction at 0 degC.
    """
    measured = known(measurement.range)
    couple = thermocouple_type(measurement)
    if measured is None or not (is_pt100(measurement) or couple):
        return None
    try:
        temperatures = [convert(point.value, measured.unit, "degC") for point in points]
        if not couple:
            ohms = tuple(language.digits(f"{pt100_resistance_ohm(temperature):.2f}") for temperature in temperatures)
            return ExpectedRow(language.pt100(), "Ω", ohms)
        emf = [thermocouple_emf_mv(couple, temperature) for temperature in temperatures]
    except (UnitError, ValueError):
        return None
    return ExpectedRow(language.thermocouple(couple), "mV", tuple(language.digits(_signed(f"{mv:.3f}")) for mv in emf))


def _element_rows(element: FinalElement, route: Route, language: Language) -> Iterator[ExpectedRow]:
    """Signal and opening of a final element at each step of the controller's output."""
    commands = [command_pct(step, route.branch) for step in CHECK_POINTS_PCT]
    signals = [100.0 - command if known(element.output_block) == "reversed" else command for command in commands]
    ends = _SIGNAL_ENDS.get(known(element.signal) or "")
    if ends:
        yield _signal_row(language.signal_to(element.tag), ends, signals, language)
    openings = [opening for step in CHECK_POINTS_PCT if (opening := opening_pct(step, element, route)) is not None]
    if openings:
        what = language.position_of(element.tag, known(element.kind) or "")
        yield ExpectedRow(what, "%", tuple(language.digits(_plain(opening)) for opening in openings))


def _signal_row(
    what: str, ends: tuple[float, float, str], percents: Sequence[float], language: Language
) -> ExpectedRow:
    low, high, unit = ends
    values = (value_from_percent(percent, low=low, high=high) for percent in percents)
    return ExpectedRow(what, unit, tuple(language.digits(f"{value:.{_DECIMALS[unit]}f}") for value in values))


def _rounded(values: Sequence[float], language: Language) -> tuple[str, ...]:
    """Readings with one number of decimals, so that the largest has four digits."""
    largest = max(abs(value) for value in values)
    decimals = max(0, 3 - math.floor(math.log10(largest)))
    return tuple(language.digits(_signed(f"{value:.{decimals}f}")) for value in values)


def _signed(number: str) -> str:
    return number.replace("-", "−")


def _plain(value: float) -> str:
    return f"{value:.1f}".removesuffix(".0")
