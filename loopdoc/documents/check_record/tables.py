"""The tables of a loop check record: what is applied, what should be found, and cells to write in."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from loopdoc.documents.check_record.expected import elements_of
from loopdoc.documents.loop_sheet.expected_signals import ExpectedRow, expected_commands, expected_readings
from loopdoc.documents.values import DASH, shown
from loopdoc.documents.wording import NO_BREAK, listed, value
from loopdoc.engineering.loop_check import (
    REFERENCE_JUNCTIONS_DEGC,
    LoopChecks,
    Reading,
    pt100_class,
    reading_digits,
    sensor_tolerances,
    thermocouple_signals_mv,
    thermocouple_type,
)
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.record_verdict import JudgedReading, JudgedRecord, Verdict
from loopdoc.register.model import Loop, Measurement, known
from loopdoc.register.quantity import Quantity, display_quantity
from loopdoc.register.units import Unit

FUNCTIONS = "Functions"
_SPEEDS = ("variable-speed drive", "motor")


@dataclass(frozen=True, slots=True)
class Column:
    """A column of a table; a blank one is written in by hand."""

    heading: str
    share: float
    """Of the table's width, beside the shares of the other columns."""
    blank: bool = False


@dataclass(frozen=True, slots=True)
class CheckTable:
    """A table to fill in."""

    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[str, ...], ...]
    """A cell that nobody fills in holds `–`, one to fill in nothing."""
    note: str = ""

    @property
    def widths(self) -> tuple[str, ...]:
        """Width of each column as CSS writes it."""
        whole = sum(column.share for column in self.columns)
        return tuple(f"{100 * column.share / whole:.4g}%" for column in self.columns)


# ---------------------------------------------------------------- tables


def measurement_table(loop: Loop, checks: LoopChecks, judged: JudgedRecord | None) -> Iterator[CheckTable]:
    """What is applied and shown at each step; nothing where the readings do not follow."""
    found = [reading for reading in checks.readings if reading.group == "measurement"]
    measurement = known(loop.measurement)
    if not found or measurement is None:
        return
    applied = list(_applied(loop, measurement))
    unit = found[0].unit
    columns = [Column("Step", 7), *(Column(f"{row.what}, {row.unit}", 10) for row in applied)]
    columns += [Column(f"{loop.tag} shows, {unit.display}", 10), Column(f"Accept, {unit.display}", 14)]
    sensor = sensor_tolerances(measurement)
    if sensor:
        columns.append(Column(f"Sensor itself, ±{unit.display}", 8))
    columns += _blanks(judged)
    digits = _digits(found)
    rows = []
    for index, reading in enumerate(found):
        cells = [reading.at.replace(" ", NO_BREAK), *(row.values[index] for row in applied)]
        cells += [_number(reading.expected, digits), _limits(reading, digits)]
        if sensor:
            cells.append(f"{sensor[index]:.2f}")
        rows.append((*cells, *_results(reading, judged)))
    yield CheckTable("Measurement", tuple(columns), tuple(rows), _measurement_note(measurement))


def _applied(loop: Loop, measurement: Measurement) -> Iterator[ExpectedRow]:
    """What is put in at each step: the sensor's own signal, then the transmitter's."""
    kind = thermocouple_type(measurement)
    if kind:
        for reference in REFERENCE_JUNCTIONS_DEGC:
            signals = thermocouple_signals_mv(measurement, reference)
            if signals:
                what = f"Type {kind}, terminals at {reference:g}{NO_BREAK}°C"
                yield ExpectedRow(what, "mV", tuple(_number(signal, 3) for signal in signals))
    for row in expected_readings(loop)[:-1]:  # the last is what the display shows
        if not row.what.startswith("Type "):
            yield row


def _measurement_note(measurement: Measurement) -> str:
    notes = []
    kind = pt100_class(measurement)
    if sensor_tolerances(measurement):
        notes.append(
            f"Sensor itself: class {kind} by IEC 60751, added to the tolerance only where the sensor stands in a bath "
            "and is not simulated"
        )
    if thermocouple_type(measurement):
        notes.append(
            "Millivolts by IEC 60584: at another temperature of the terminals, take off the emf at that temperature; "
            "a source with its own compensation is set to the temperature itself"
        )
    if known(measurement.characteristic) == "square root":
        notes.append("The differential pressure at 100 % is on the transmitter's calibration certificate")
    return ". ".join(notes) + "." if notes else ""


def travel_tables(plant: Plant, loop: Loop, checks: LoopChecks, judged: JudgedRecord | None) -> Iterator[CheckTable]:
    """What each final element does at each step of the output."""
    signals = {row.what: row for row in expected_commands(plant, loop)}
    for element in elements_of(plant, loop):
        found = [one for one in checks.readings if one.group == "travel" and one.tag == element.tag]
        if not found:
            continue
        kind = known(element.kind)
        what = "speed" if kind in _SPEEDS else "power" if kind == "heater bank" else "opening"
        signal = signals.get(f"Signal to {element.tag}")
        columns = [Column("Output", 7)]
        if signal:
            columns.append(Column(f"Signal to {element.tag}, {signal.unit}", 11))
        columns += [Column(f"{what.capitalize()}, %", 10), Column("Accept, %", 14), *_blanks(judged)]
        rows = []
        digits = _digits(found)
        for index, reading in enumerate(found):
            cells = [reading.at.replace(" ", NO_BREAK)]
            if signal:
                cells.append(signal.values[index])
            cells += [_number(reading.expected, digits), _limits(reading, digits)]
            rows.append((*cells, *_results(reading, judged)))
        facts = [known(element.service), kind, f"channel {known(element.channel)}" if known(element.channel) else None]
        named = ", ".join(filter(None, facts))
        title = f"{'Stroke' if what == 'opening' else what.capitalize()} of {element.tag}"
        yield CheckTable(f"{title}{f' ({named})' if named else ''}", tuple(columns), tuple(rows))


def point_table(plant: Plant, loop: Loop, checks: LoopChecks, judged: JudgedRecord | None) -> Iterator[CheckTable]:
    """Stroke times, alarms and trips: one figure each."""
    found = [one for one in checks.readings if one.group in ("stroke time", "alarm", "trip")]
    kinds = {element.tag: known(element.kind) for element in elements_of(plant, loop)}
    rows = []
    for reading in found:
        if reading.group == "stroke time":
            verb = _stroke_words(kinds[reading.tag], reading.at)
            point, expected = f"{reading.tag} {verb}", _with_unit(reading.expected, reading.unit)
            accept, delay = f"at most {expected}", DASH
        else:
            digits = _digits([reading])
            point = _point_words(reading)
            expected = f"{_number(reading.expected, digits)}{NO_BREAK}{reading.unit.display}"
            accept, delay = _limits(reading, digits), _delay(plant, loop, reading)
        rows.append((point, expected, accept, delay, *_results(reading, judged, single=True)))
    for kind, alarm in loop.alarms.items():
        name = f"{kind.replace('_', '-')} alarm"
        if checks.reading(name) is None:
            limit = "not stated" if alarm.limit is None else shown(alarm.limit)
            row = (name.capitalize(), limit, DASH, shown(alarm.delay), "", "")
            rows.append((*row, DASH) if judged else row)
    if not rows:
        return
    groups = dict.fromkeys(reading.group for reading in found) | ({"alarm": None} if loop.alarms else {})
    titles = {"stroke time": "stroke times", "alarm": "alarms", "trip": "trips"}
    columns = (
        Column("Point", 20), Column("Expected", 12), Column("Accept", 18), Column("Delay", 8),
        Column("As found", 14, blank=True), Column("As left", 14, blank=True),
        *((Column("Last", 12),) if judged else ()),
    )  # fmt: skip
    yield CheckTable(listed(titles[group] for group in groups).capitalize(), columns, tuple(rows))


def _stroke_words(kind: str | None, way: str) -> str:
    if kind in _SPEEDS:
        return "speeds up in" if way == "opening" else "slows down in"
    return "opens in" if way == "opening" else "closes in"


def _point_words(reading: Reading) -> str:
    if reading.group == "trip":
        return reading.key
    return reading.key[0].upper() + reading.key[1:]


def _delay(plant: Plant, loop: Loop, reading: Reading) -> str:
    """How long a limit must be passed before it acts."""
    if reading.group == "trip":
        interlock = plant.register.interlocks[reading.tag]
        initiator = reading.key.rpartition(" trip by ")[2]
        return shown(interlock.initiators[initiator].delay)
    if reading.key.endswith(" clears"):
        return DASH
    return shown(loop.alarms[reading.key.removesuffix(" alarm").replace("-", "_")].delay)


def function_table(checks: LoopChecks, judged: JudgedRecord | None) -> Iterator[CheckTable]:
    """What is tried and judged by the eye."""
    if not checks.functions:
        return
    done = {one.check.key: one for one in judged.functions} if judged else {}
    rows = []
    for check in checks.functions:
        expect = check.expect or "Not stated in the register"
        row: tuple[str, ...] = (check.key[0].upper() + check.key[1:], check.do, expect, "", "", "")
        if judged:
            one = done[check.key]
            last = f"{one.result} before a change" if one.changed else str(one.result)
            row = (*row, last if one.recorded else DASH)
        rows.append(row)
    columns = (
        Column("Function", 17), Column("Do", 33), Column("Should happen", 44),
        Column("Pass", 6, blank=True), Column("Fail", 6, blank=True), Column("Remarks", 20, blank=True),
        *((Column("Last", 9),) if judged else ()),
    )  # fmt: skip
    yield CheckTable(FUNCTIONS, columns, tuple(rows))


def _blanks(judged: JudgedRecord | None) -> list[Column]:
    columns = [
        Column("As found, rising", 10, blank=True),
        Column("As found, falling", 10, blank=True),
        Column("As left, rising", 10, blank=True),
        Column("As left, falling", 10, blank=True),
    ]
    return [*columns, Column("Last", 12)] if judged else columns


def _results(reading: Reading, judged: JudgedRecord | None, *, single: bool = False) -> tuple[str, ...]:
    """Cells to fill in, and what was read last."""
    cells = ("", "") if single else ("", "" if reading.both_ways else DASH, "", "" if reading.both_ways else DASH)
    if judged is None:
        return cells
    one = next(one for one in judged.readings if one.reading is reading)
    return (*cells, _read_last(one))


def _read_last(one: JudgedReading) -> str:
    """What was read at the last check, as left where it was adjusted."""
    recorded = one.recorded
    if recorded is None:
        return DASH
    if one.as_left is None:
        values = (recorded.as_found, recorded.as_found_falling)
    else:
        values = (recorded.as_left, recorded.as_left_falling)
    given = [reading for reading in values if reading is not None]
    same_unit = all(reading.unit == one.reading.unit for reading in given)
    digits = _digits([one.reading])
    told = "; ".join(_at_least(reading, digits) if same_unit else value(reading) for reading in given)
    if one.changed:
        return f"{told or DASH}, before the change of {one.changed}"
    mark = {Verdict.FAIL: " FAIL", Verdict.NOT_DONE: " not done"}.get(one.final, "")
    return f"{told}{mark}" if told else "not done"


# ---------------------------------------------------------------- words


def _digits(found: Sequence[Reading]) -> int:
    """Decimals for readings that stand below each other."""
    digits = max(reading_digits(one.low, one.high) for one in found)
    # A last digit that is nought everywhere says nothing.
    while digits and all(_shorter(figure, digits) for one in found for figure in (one.expected, one.low, one.high)):
        digits -= 1
    return digits


def _shorter(figure: float, digits: int) -> bool:
    return math.isclose(round(figure, digits - 1), round(figure, digits), abs_tol=10.0 ** -(digits + 2))


def _limits(reading: Reading, digits: int) -> str:
    return f"{_number(reading.low, digits)} to {_number(reading.high, digits)}"


def _number(figure: float, digits: int) -> str:
    written = f"{figure:.{digits}f}"
    return written.lstrip("-") if float(written) == 0 else written.replace("-", "−")


def _at_least(reading: Quantity, digits: int) -> str:
    """What was read, with the decimals of what it is held against, or its own where it has more."""
    written = shown(reading).partition(NO_BREAK)[0]
    return written if len(written.partition(".")[2]) >= digits else _number(reading.value, digits)


def _with_unit(figure: float, unit: Unit) -> str:
    return display_quantity(Quantity(figure, unit))
