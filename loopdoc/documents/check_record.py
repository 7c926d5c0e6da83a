"""The loop check record: what a technician applies and should find at one loop, with room for what is found."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.check_record_fit import (
    LONGER,
    SIZES,
    Rows,
    filled_height,
    frame_height,
    labelled_height,
    words_height,
)
from loopdoc.documents.check_record_list import elements_of, loop_checks
from loopdoc.documents.expected_signals import ExpectedRow, expected_commands, expected_readings
from loopdoc.documents.loop_panels import cell, hold_lines, joined, related_interlocks
from loopdoc.documents.loop_sheet import serial
from loopdoc.documents.page_fit import room
from loopdoc.documents.values import DASH, shown
from loopdoc.documents.wording import NO_BREAK, counted, listed, sentence, value
from loopdoc.engineering.failure import FailureAnalysis
from loopdoc.engineering.loop_check import (
    PERCENT,
    REFERENCE_JUNCTIONS_DEGC,
    LoopChecks,
    Reading,
    pt100_class,
    reading_digits,
    sensor_tolerances,
    thermocouple_signals_mv,
    thermocouple_type,
    tolerance_of,
)
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.record_verdict import JudgedReading, JudgedRecord, Verdict, judge
from loopdoc.register.model import Hold, Loop, Measurement, known
from loopdoc.register.quantity import Quantity, display_quantity
from loopdoc.register.records import LoopRecord
from loopdoc.register.units import Unit
from loopdoc.rules.policy import Limits, limits_from

FOLDER = "check-records"
TEMPLATE = "check-record.html"
SAFETY_NOTE = (
    "A safety interlock is proved by its own procedure (IEC 61511); what is tried here does not take its place."
)
FUNCTIONS = "Functions"
ORDER_OF_WORK = "Order of work (each only after the one before it has passed)"
NOT_TRIED = (
    ("process",),
    ("disturbances",),
    *(("controller", key) for key in ("form", "gain", "proportional_band", "reset", "repeats", "rate", "interval")),
)
"""What of the register no loop check touches."""
HALF = 0.45
"""Of a page: with less before them, the functions begin on the first page."""
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


@dataclass(frozen=True, slots=True)
class RecordView:
    """What the template of a check record places."""

    tag: str
    service: str
    facts: tuple[tuple[tuple[str, str], ...], ...]
    order: tuple[tuple[str, str], ...]
    """Loops of a cascade in the order in which they are checked, each with a word on it; empty for a single loop."""
    blanks: tuple[str, ...]
    """Labels of what is written in about the test itself."""
    last: tuple[str, ...]
    """Sentences on the last results; empty where there are none."""
    tables: tuple[CheckTable, ...]
    notes: tuple[str, ...]
    holds: tuple[str, ...]
    classes: str = ""
    """Classes of the page."""


def check_records(basis: Basis) -> Iterator[Page]:
    """One record for every loop, in the order of the register."""
    plant = basis.plant
    limits = limits_from(plant.register.policy)
    analysis = FailureAnalysis(plant)
    for loop in plant.register.loops.values():
        number = known(loop.unit)
        unit = plant.register.units.get(number) if number else None
        document = basis.document(
            kind="Loop check record",
            code="CR",
            title=" ".join(part for part in (loop.tag, known(loop.service)) if part),
            supplementary_title=f"Unit {' '.join(filter(None, (number, known(unit.name) if unit else None))) or DASH}",
            unit=number or "00",
            serial=serial(plant, loop),
        )
        view = _fitted(record_view(plant, limits, analysis, loop, basis.records), room(document))
        yield Page(FOLDER, loop.tag, document, TEMPLATE, {"record": view})


def record_view(
    plant: Plant,
    limits: Limits,
    analysis: FailureAnalysis,
    loop: Loop,
    records: Mapping[str, tuple[LoopRecord, ...]],
) -> RecordView:
    """What the check record of one loop says."""
    checks = loop_checks(plant, limits, analysis, loop)
    latest = records[loop.tag][-1] if records.get(loop.tag) else None
    judged = judge(checks, latest) if latest else None
    measurement = known(loop.measurement)
    blanks = ["Date", "Tested by", "Witnessed by", "Test instrument", "Its calibration number", "Ambient temperature"]
    if measurement and thermocouple_type(measurement):
        blanks.append("Reference junction")
    elements = elements_of(plant, loop)
    interlocks = related_interlocks(plant, loop, elements)
    tables = [
        *_measurement_table(loop, checks, judged),
        *_travel_tables(plant, loop, checks, judged),
        *_point_table(plant, loop, checks, judged),
        *_function_table(checks, judged),
    ]
    safety = any(known(interlock.layer) == "safety" for interlock in interlocks)
    tags = {loop.tag, *(element.tag for element in elements), *(interlock.tag for interlock in interlocks)}
    if measurement and (transmitter := known(measurement.transmitter)):
        tags.add(transmitter)
    return RecordView(
        tag=loop.tag,
        service=cell(loop.service),
        facts=_facts(plant, loop, limits),
        order=_order(plant, loop, records),
        blanks=tuple(blanks),
        last=tuple(_last(judged)) if judged else (),
        tables=tuple(tables),
        notes=(*_missing(loop, checks), *((SAFETY_NOTE,) if safety else ())),
        holds=tuple(hold_lines(plant, tags, loop.tag, without=NOT_TRIED)),
    )


def _fitted(view: RecordView, height: float) -> RecordView:
    """The record with the highest rows that one page takes; else on two pages, the functions on the second."""
    for sizes in SIZES:
        if record_height(view, sizes) <= height:
            return replace(view, classes=sizes.name)
    for sizes in SIZES:
        functions = sum(_table_height(table, sizes) for table in view.tables if table.title == FUNCTIONS)
        before = record_height(view, sizes) - functions
        if HALF * height < before <= height and functions <= height:
            return replace(view, classes=f"{sizes.name} apart")
    return replace(view, classes=LONGER.name)


def record_height(view: RecordView, sizes: Rows) -> float:
    """Height of a record on one page [pt]."""
    height = frame_height(f"{view.tag} {view.service}")
    height += sum(labelled_height([fact for _, fact in row], sizes) for row in view.facts)
    order = "; ".join(f"{index}. {tag} ({word})" for index, (tag, word) in enumerate(view.order, 1))
    lines = [f"{ORDER_OF_WORK}: {order}"] if view.order else []
    lines += [" ".join(view.last)] if view.last else []
    lines += [*view.notes, *(f"HOLD    {line}" for line in view.holds)]
    height += sum(words_height(line, sizes) for line in lines)
    return height + sum(_table_height(table, sizes) for table in view.tables)


def _table_height(table: CheckTable, sizes: Rows) -> float:
    head = [column.heading for column in table.columns]
    return filled_height(table.title, head, table.rows, [column.share for column in table.columns], table.note, sizes)


# ---------------------------------------------------------------- head


def _facts(plant: Plant, loop: Loop, limits: Limits) -> tuple[tuple[tuple[str, str], ...], ...]:
    measurement = known(loop.measurement)
    first = (("Drawing", cell(loop.drawing)), ("Hazard direction", cell(loop.hazard)))
    if measurement is None:
        return ((*first, ("Measurement", cell(loop.measurement))),)
    sensors = [cell(part) for part in (measurement.element, measurement.sensor) if part is not None]
    signals = [cell(part) for part in (measurement.signal, measurement.channel) if part is not None]
    measured = cell(measurement.range)
    if known(measurement.characteristic) == "square root":
        measured = joined([measured, "square root in the control system"])
    return (
        (*first, ("Transmitter", cell(measurement.transmitter)), ("Element and sensor", joined(sensors))),
        (
            ("Range", measured),
            ("Signal and channel", joined(signals)),
            ("Filter", cell(measurement.filter)),
            ("Tolerance of a reading", _tolerance(measurement, limits)),
        ),
    )


def _tolerance(measurement: Measurement, limits: Limits) -> str:
    if isinstance(measurement.tolerance, Hold):
        return cell(measurement.tolerance)
    tolerance = tolerance_of(measurement, default_pct=limits.loop_check_tolerance)
    if tolerance is None:
        return f"{cell(measurement.tolerance)}, not of the range"
    if tolerance.stated:
        size = f"±{cell(measurement.tolerance)}"
    else:
        size = f"±{display_quantity(Quantity(tolerance.size, PERCENT))}"
    of = ""
    if tolerance.unit == PERCENT:
        root = known(measurement.characteristic) == "square root"
        of = " of the differential pressure span" if root else " of span"
    changed = limits.loop_check_tolerance != Limits().loop_check_tolerance
    return size + of + ("" if tolerance.stated else ", by the site's policy" if changed else ", common practice")


def _order(plant: Plant, loop: Loop, records: Mapping[str, tuple[LoopRecord, ...]]) -> tuple[tuple[str, str], ...]:
    """The loops of the cascade, innermost first, with the last results where there are any."""
    below = [controlled.tag for controlled in plant.chain(loop.tag)] or [loop.tag]
    above: list[str] = []
    waiting = [loop.tag]
    while waiting:
        for primary in plant.primaries_of(waiting.pop(0)):
            if primary.tag not in (*above, *below):
                above.append(primary.tag)
                waiting.append(primary.tag)
    if len(below) + len(above) == 1:
        return ()
    return tuple((tag, _beside(tag, loop.tag, records)) for tag in (*below, *above))


def _beside(tag: str, own: str, records: Mapping[str, tuple[LoopRecord, ...]]) -> str:
    if tag == own:
        return "this loop"
    return f"last checked {records[tag][-1].date}" if records.get(tag) else ""


def _last(judged: JudgedRecord) -> Iterator[str]:
    """What the last check came to, in sentences."""
    record = judged.record
    words = {Verdict.PASS: "passed", Verdict.FAIL: "FAILED", Verdict.NOT_DONE: "not complete"}
    with_what = f" with {record.instrument}" if record.instrument else ""
    calibrated = f" ({record.calibration})" if record.calibration else ""
    yield f"Last results: {record.date}, {record.by}{with_what}{calibrated}: {words[judged.verdict]}."
    corrected = judged.corrected
    if corrected:
        yield f"Out of tolerance as found and put right: {listed(one.reading.key for one in corrected)}."
    failed = [one.reading.key for one in judged.readings if one.final is Verdict.FAIL]
    failed += [one.check.key for one in judged.functions if one.final is Verdict.FAIL]
    if failed:
        yield f"Failed: {listed(failed)}."
    old: dict[str, list[str]] = {}
    for one in judged.readings:
        if one.changed:
            old.setdefault(one.changed, []).append(one.reading.key)
    for subject, keys in old.items():
        yield f"Before the change of {subject}, to be checked again: {listed(keys)}."
    changed = [one.check.key for one in judged.functions if one.changed]
    if changed:
        yield f"Before a change of what is checked, to be checked again: {listed(changed)}."
    lacking = sum(one.recorded is None for one in judged.readings) + sum(
        one.recorded is None or one.result is Verdict.NOT_DONE for one in judged.functions
    )
    lacking += sum(one.recorded is not None and one.final is Verdict.NOT_DONE and not one.changed
                   for one in judged.readings)  # fmt: skip
    if lacking:
        yield f"Not done: {counted(lacking, 'check')}."
    if record.remarks:
        yield sentence(f"Remarks: {record.remarks}")


# ---------------------------------------------------------------- tables


def _measurement_table(loop: Loop, checks: LoopChecks, judged: JudgedRecord | None) -> Iterator[CheckTable]:
    found = [reading for reading in checks.readings if reading.group == "measurement"]
    measurement = known(loop.measurement)
    if not found or measurement is None:
        return
    applied = list(_applied(loop, measurement))
    unit = found[0].unit
    columns = [Column("Step", 6), *(Column(f"{row.what}, {row.unit}", 9) for row in applied)]
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


def _travel_tables(plant: Plant, loop: Loop, checks: LoopChecks, judged: JudgedRecord | None) -> Iterator[CheckTable]:
    signals = {row.what: row for row in expected_commands(plant, loop)}
    for element in elements_of(plant, loop):
        found = [one for one in checks.readings if one.group == "travel" and one.tag == element.tag]
        if not found:
            continue
        kind = known(element.kind)
        what = "speed" if kind in _SPEEDS else "power" if kind == "heater bank" else "opening"
        signal = signals.get(f"Signal to {element.tag}")
        columns = [Column("Output", 6)]
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


def _point_table(plant: Plant, loop: Loop, checks: LoopChecks, judged: JudgedRecord | None) -> Iterator[CheckTable]:
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


def _function_table(checks: LoopChecks, judged: JudgedRecord | None) -> Iterator[CheckTable]:
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
    return [*columns, Column("Last", 15)] if judged else columns


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
    told = "; ".join(shown(reading).partition(NO_BREAK)[0] if same_unit else value(reading) for reading in given)
    if one.changed:
        return f"{told or DASH}, before the change of {one.changed}"
    mark = {Verdict.FAIL: " FAIL", Verdict.NOT_DONE: " not done"}.get(one.final, "")
    return f"{told}{mark}" if told else "not done"


# ---------------------------------------------------------------- words


def _missing(loop: Loop, checks: LoopChecks) -> Iterator[str]:
    """Why a table that a technician looks for is not there."""
    measurement = known(loop.measurement)
    if any(reading.group == "measurement" for reading in checks.readings):
        return
    if measurement is None or isinstance(measurement.range, Hold) or isinstance(measurement.tolerance, Hold):
        yield "The readings are on HOLD with what they follow from."
    elif measurement.range is None:
        yield "The readings do not follow from the register: the range is not stated."
    else:
        yield "The readings do not follow from the register: range and tolerance do not agree."


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


def _with_unit(figure: float, unit: Unit) -> str:
    return display_quantity(Quantity(figure, unit))
