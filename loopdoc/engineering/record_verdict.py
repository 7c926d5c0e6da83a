"""Judges what was recorded at a loop check against the limits of its day, and says what has changed since."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from difflib import get_close_matches
from enum import StrEnum

from loopdoc.engineering.loop_check import FunctionCheck, LoopChecks, Reading
from loopdoc.register.model import Loop, known
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.records import CONDITIONS, RESULTS, LoopRecord, RecordedFunction, RecordedReading, RecordFault
from loopdoc.register.units import Unit, UnitError, convert, convert_difference

_ROUNDING = 1e-5
"""Share of the largest figure by which two limits may differ and still be the same: they are kept to six digits."""


class Verdict(StrEnum):
    """What a check came to; what has not been done has not passed."""

    PASS = "pass"
    FAIL = "fail"
    NOT_DONE = "not done"


@dataclass(frozen=True, slots=True)
class JudgedReading:
    """One reading with what became of it."""

    reading: Reading
    recorded: RecordedReading | None
    as_found: Verdict
    as_left: Verdict | None
    """None where nothing was adjusted."""
    changed: str
    """What of the register has changed since, such as `range`; empty where nothing has."""

    @property
    def final(self) -> Verdict:
        """As it was left: a reading for a value that has changed since must be made again."""
        left = self.as_left or self.as_found
        return Verdict.NOT_DONE if self.changed and left is Verdict.PASS else left


@dataclass(frozen=True, slots=True)
class JudgedFunction:
    """One function check with what became of it."""

    check: FunctionCheck
    recorded: RecordedFunction | None
    result: Verdict
    changed: bool
    """Whether the words of the register that it was checked against have changed since."""

    @property
    def final(self) -> Verdict:
        return Verdict.NOT_DONE if self.changed and self.result is Verdict.PASS else self.result


@dataclass(frozen=True, slots=True)
class JudgedRecord:
    """One check of one loop, judged in all that the register asks for now."""

    record: LoopRecord
    readings: tuple[JudgedReading, ...]
    functions: tuple[JudgedFunction, ...]

    @property
    def verdict(self) -> Verdict:
        """Fail where anything failed as it was left, not done where anything is lacking, else pass."""
        return worst((*(one.final for one in self.readings), *(one.final for one in self.functions)))

    @property
    def corrected(self) -> tuple[JudgedReading, ...]:
        """Readings out of tolerance as found and within it as left."""
        return tuple(one for one in self.readings if one.as_found is Verdict.FAIL and one.as_left is Verdict.PASS)


def worst(verdicts: Iterable[Verdict]) -> Verdict:
    """What several verdicts come to; nothing checked is not done."""
    found = set(verdicts)
    if Verdict.FAIL in found:
        return Verdict.FAIL
    return Verdict.PASS if found == {Verdict.PASS} else Verdict.NOT_DONE


def judge(checks: LoopChecks, record: LoopRecord) -> JudgedRecord:
    """Every check that the register asks for, with what the record says of it."""
    readings = [_judged_reading(reading, record.readings.get(reading.key)) for reading in checks.readings]
    if any(one.changed == "range" for one in readings):
        # A tolerance in percent of span changes with the range; what has really changed is told.
        readings = [
            replace(one, changed="range") if one.changed == "tolerance" and one.reading.group != "travel" else one
            for one in readings
        ]
    return JudgedRecord(
        record,
        tuple(readings),
        tuple(_judged_function(check, record.functions.get(check.key)) for check in checks.functions),
    )


def _judged_reading(reading: Reading, recorded: RecordedReading | None) -> JudgedReading:
    if recorded is None:
        return JudgedReading(reading, None, Verdict.NOT_DONE, None, "")
    found = _verdict(reading, recorded, "as_found")
    left = _verdict(reading, recorded, "as_left")
    adjusted = any(getattr(recorded, name) is not None for name in RESULTS if name.startswith("as_left"))
    return JudgedReading(reading, recorded, found, left if adjusted else None, _changed(reading, recorded))


def _verdict(reading: Reading, recorded: RecordedReading, when: str) -> Verdict:
    names = (when, f"{when}_falling") if reading.both_ways else (when,)
    values: list[Quantity | None] = [getattr(recorded, name) for name in names]
    limits = recorded.accept or Range(reading.low, reading.high, reading.unit)
    verdicts = []
    for value in values:
        if value is None:
            verdicts.append(Verdict.NOT_DONE)
            continue
        try:
            inside = _within(_in_unit(value.value, value.unit, limits.unit, reading), limits)
        except UnitError:
            inside = False
        verdicts.append(Verdict.PASS if inside else Verdict.FAIL)
    return worst(verdicts)


def _within(value: float, limits: Range) -> bool:
    margin = _ROUNDING * max(abs(limits.low), abs(limits.high))
    return limits.low - margin <= value <= limits.high + margin


def _in_unit(value: float, unit: Unit, wanted: Unit, reading: Reading) -> float:
    """A recorded value in another unit; the limit of a deviation is a difference."""
    difference = reading.key.startswith("deviation")
    return convert_difference(value, unit, wanted) if difference else convert(value, unit, wanted)


def _changed(reading: Reading, recorded: RecordedReading) -> str:
    """What of the register differs from what was checked."""

    def differ(value: float, unit: Unit, now: float) -> bool:
        then = _in_unit(value, unit, reading.unit, reading)
        return abs(then - now) > _ROUNDING * max(abs(then), abs(now), abs(reading.high))

    try:
        if recorded.expected and differ(recorded.expected.value, recorded.expected.unit, reading.expected):
            return reading.subject
        limits = recorded.accept
        if limits and (differ(limits.low, limits.unit, reading.low) or differ(limits.high, limits.unit, reading.high)):
            return "tolerance"
    except UnitError:
        return reading.subject
    return ""


def _judged_function(check: FunctionCheck, recorded: RecordedFunction | None) -> JudgedFunction:
    if recorded is None:
        return JudgedFunction(check, None, Verdict.NOT_DONE, changed=False)
    changed = bool(recorded.against) and recorded.against != check.against
    return JudgedFunction(check, recorded, Verdict(recorded.result), changed)


# ---------------------------------------------------------------- results that come in


def faults_of(record: LoopRecord, checks: LoopChecks, loop: Loop) -> tuple[RecordFault, ...]:
    """What a record holds that the loop's checks do not know, or in a unit that does not fit."""
    return (*_reading_faults(record, checks), *_function_faults(record, checks), *_condition_faults(record, loop))


def _reading_faults(record: LoopRecord, checks: LoopChecks) -> Iterator[RecordFault]:
    for key, recorded in record.readings.items():
        reading = checks.reading(key)
        if reading is None:
            yield _unknown(record, "readings", key, [reading.key for reading in checks.readings])
            continue
        for name in (*RESULTS, "expected", "accept"):
            value: Quantity | Range | None = getattr(recorded, name)
            if value is None:
                continue
            place = record.place("readings", key, name)
            try:
                _in_unit(0.0, value.unit, reading.unit, reading)
            except UnitError:
                unit, wanted = value.unit.symbol, reading.unit.symbol
                yield RecordFault(place, f"{record.tag} {key} is in `{unit}`", f"write it in `{wanted}`")
                continue
            if name.endswith("_falling") and not reading.both_ways:
                yield RecordFault(place, f"{record.tag} {key} is read once", "leave the falling value out")


def _function_faults(record: LoopRecord, checks: LoopChecks) -> Iterator[RecordFault]:
    for key in record.functions:
        if checks.function(key) is None:
            yield _unknown(record, "functions", key, [check.key for check in checks.functions])


def _unknown(record: LoopRecord, group: str, key: str, known_keys: list[str]) -> RecordFault:
    near = get_close_matches(key[:80], known_keys, 1)
    remedy = f"did you mean `{near[0]}`?" if near else "the check record of the loop names them"
    return RecordFault(record.place(group, key), f"{record.tag} has no check `{key[:80]}`", remedy)


def _condition_faults(record: LoopRecord, loop: Loop) -> Iterator[RecordFault]:
    for name in CONDITIONS:
        value: Quantity | None = getattr(record, name)
        if value is not None and value.unit.kind != "temperature":
            what = name.replace("_", " ")
            yield RecordFault(
                record.place(name), f"the {what} is in `{value.unit.symbol}`", "write a temperature such as `18 degC`"
            )
    measurement = known(loop.measurement)
    sensor = (known(measurement.sensor) if measurement else None) or ""
    if record.reference_junction is not None and "thermocouple" not in sensor.casefold():
        place = record.place("reference_junction")
        yield RecordFault(place, f"{record.tag} is not measured by a thermocouple", "leave the reference junction out")


def filled(record: LoopRecord, checks: LoopChecks) -> LoopRecord:
    """The record with what it was checked against, where it does not say that itself."""
    readings = {}
    for key, recorded in record.readings.items():
        reading = checks.reading(key)
        assert reading is not None, key
        readings[key] = replace(
            recorded,
            expected=recorded.expected or Quantity(_kept(reading.expected), reading.unit),
            accept=recorded.accept or Range(_kept(reading.low), _kept(reading.high), reading.unit),
        )
    functions = {}
    for key, seen in record.functions.items():
        check = checks.function(key)
        assert check is not None, key
        functions[key] = replace(seen, against=seen.against or check.against)
    return replace(record, readings=readings, functions=functions)


def _kept(value: float) -> float:
    """A calculated figure to six digits, as a record keeps it."""
    return float(f"{value:.6g}")
