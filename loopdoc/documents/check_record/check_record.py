"""The loop check record: what a technician applies and should find at one loop, with room for what is found."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.check_record.expected import elements_of, loop_checks
from loopdoc.documents.check_record.fit import (
    LONGER,
    SIZES,
    Rows,
    filled_height,
    frame_height,
    labelled_height,
    words_height,
)
from loopdoc.documents.check_record.tables import (
    FUNCTIONS,
    CheckTable,
    function_table,
    measurement_table,
    point_table,
    travel_tables,
)
from loopdoc.documents.language import ENGLISH
from loopdoc.documents.loop_sheet.loop_sheet import serial
from loopdoc.documents.loop_sheet.loop_tables import hold_lines, related_interlocks
from loopdoc.documents.loop_sheet.panels import cell, joined
from loopdoc.documents.narrative.open_points import accepted_in_a_sentence
from loopdoc.documents.page_fit import room
from loopdoc.documents.values import DASH
from loopdoc.documents.wiring_words import terminal_lines
from loopdoc.documents.wording import counted, listed, sentence
from loopdoc.engineering.failure import FailureAnalysis
from loopdoc.engineering.loop_check import (
    PERCENT,
    LoopChecks,
    thermocouple_type,
    tolerance_of,
)
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.record_verdict import JudgedRecord, Verdict, judge
from loopdoc.register.model import Hold, Loop, Measurement, known
from loopdoc.register.quantity import Quantity, display_quantity
from loopdoc.register.records import LoopRecord
from loopdoc.rules.finding import Finding
from loopdoc.rules.policy import Limits, limits_from

FOLDER = "check-records"
TEMPLATE = "check-record.html"
SAFETY_NOTE = (
    "A safety interlock is proved by its own procedure (IEC 61511); what is tried here does not take its place."
)
ORDER_OF_WORK = "Order of work (each only after the one before it has passed)"
NOT_TRIED = (
    ("process",),
    ("disturbances",),
    *(("controller", key) for key in ("form", "gain", "proportional_band", "reset", "repeats", "rate", "interval")),
)
"""What of the register no loop check touches."""
HALF = 0.45
"""Of a page: with less before them, the functions begin on the first page."""


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
        view = record_view(plant, limits, analysis, loop, basis.records)
        noted = replace(view, notes=(*view.notes, *_deviations(loop.tag, basis.result.accepted)))
        view = _fitted(noted, room(document))
        yield Page(FOLDER, loop.tag, document, TEMPLATE, {"record": view})


def _deviations(tag: str, accepted: Iterable[Finding]) -> Iterator[str]:
    """One line: a record is filled in on its page, and the loop sheet tells them whole."""
    found = accepted_in_a_sentence([finding for finding in accepted if tag in finding.touches], ENGLISH)
    if found:
        yield found


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
        *measurement_table(loop, checks, judged),
        *travel_tables(plant, loop, checks, judged),
        *point_table(plant, loop, checks, judged),
        *function_table(checks, judged),
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
    terminals = tuple(_terminals(plant, loop))
    wires = (terminals,) if terminals else ()
    first = (("Drawing", cell(loop.drawing)), ("Hazard direction", cell(loop.hazard)))
    if measurement is None:
        return ((*first, ("Measurement", cell(loop.measurement))), *wires)
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
        *wires,
    )


def _terminals(plant: Plant, loop: Loop) -> Iterator[tuple[str, str]]:
    """Where a calibrator is connected: the terminals of the transmitter and of each final element."""
    measurement = known(loop.measurement)
    wirings = [(known(measurement.transmitter) or loop.tag, measurement.wiring)] if measurement else []
    wirings += [(element.tag, element.wiring) for element in elements_of(plant, loop)]
    for tag, wiring in wirings:
        lines = terminal_lines(wiring, cell)
        if lines:
            yield f"Terminals of {tag}", joined(lines, "; ")


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


def _missing(loop: Loop, checks: LoopChecks) -> Iterator[str]:
    """Why a table that a technician looks for is not there."""
    measurement = known(loop.measurement)
    if any(reading.group == "measurement" for reading in checks.readings):
        return
    if measurement is None or isinstance(measurement.range, Hold) or isinstance(measurement.tolerance, Hold):
        yield "No readings are given: what they follow from is on HOLD."
    elif measurement.range is None:
        yield "The readings do not follow from the register: the range is not stated."
    else:
        yield "The readings do not follow from the register: range and tolerance do not agree."
