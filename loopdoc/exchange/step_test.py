"""Reads a step or bump test from a table of text: time, what was moved, measurement.

The head names the columns with their units: `time [s], output [%], measurement [degC]`. Times may be ISO 8601
instead, under a plain `time`. Columns stand apart by commas, semicolons or tabs; with the latter two a decimal
comma is read as one.
"""

from __future__ import annotations

import datetime
import math
import re
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.commanded import OPENING, OUTPUT, SECONDARY
from loopdoc.register.place import Fault, Place
from loopdoc.register.units import Unit, UnitError, unit

FloatArray = NDArray[np.float64]

MAX_BYTES = 16 * 1024 * 1024
MAX_SAMPLES = 200_000
_SHOWN_CHARACTERS = 40
TIME, MEASUREMENT = "time", "measurement"
MOVED = (OUTPUT, OPENING, SECONDARY)
_COLUMNS = f"`time [s]`, `{OUTPUT} [%]` (or `{OPENING} [%]`, `{SECONDARY} [t/h]`) and `measurement [degC]`"
_HEAD = re.compile(r"([A-Za-z_ ]+?) *(?:\[ *([^\[\]]*?) *\]|\( *([^()]*(?:\([^()]*\))?[^()]*?) *\))?")
_NUMBER = re.compile(r"[+-]?(?:[0-9]+(?:([.,])[0-9]*)?|([.,])[0-9]+)(?:[eE][+-]?[0-9]{1,3})?")
_MOMENT = re.compile(
    r"[0-9]{4}-[0-9]{2}-[0-9]{2}[T ][0-9]{2}:[0-9]{2}(?::[0-9]{2}(?:[.,][0-9]{1,9})?)?(?:Z|[+-][0-9]{2}:?[0-9]{2})?"
)


@dataclass(frozen=True, slots=True, eq=False)
class StepTest:
    """A recorded test."""

    file: str
    """Name of the file."""
    date: str
    """ISO date of the first sample; empty where the times carry none."""
    time_s: FloatArray
    """(n,) strictly increasing [s], from 0 on."""
    recorded: str
    """What was moved: output, opening or secondary."""
    moved: FloatArray
    """(n,) in `moved_unit`."""
    moved_unit: Unit
    measurement: FloatArray
    """(n,) in `measurement_unit`."""
    measurement_unit: Unit


class _Refused(Exception):
    """Carries a fault out of the reader; never leaves this module."""

    def __init__(self, line: int, column: int, message: str, remedy: str) -> None:
        self.line, self.column, self.message, self.remedy = line, column, message, remedy


@dataclass(frozen=True, slots=True)
class _Field:
    column: int
    """Character of the line at which it begins, from 1."""
    text: str


@dataclass(frozen=True, slots=True)
class _Column:
    index: int
    head: _Field
    unit: Unit | None


def read_step_test(content: bytes, name: str) -> StepTest | Fault:
    """Read a recorded test, or say at which line and column it cannot be read as one."""
    try:
        return _read(content, name)
    except _Refused as refused:
        return Fault(Place(name, refused.line, refused.column), refused.message, refused.remedy)


def _read(content: bytes, name: str) -> StepTest:
    lines = _lines(content)
    first, head = next(((n, line) for n, line in enumerate(lines, 1) if line.strip()), (1, ""))
    delimiter = next((mark for mark in (";", "\t", ",") if mark in head), None)
    if delimiter is None:
        raise _Refused(first, 1, "the first line does not name columns", f"begin with {_COLUMNS}, apart by commas")
    names = list(_fields(head, delimiter, first))
    clock_column, moved_column, measured_column = _columns(names, first)
    clock = _Clock(clock_column, first)
    numbers = _Numbers()
    times: list[float] = []
    moved: list[float] = []
    measurement: list[float] = []
    for n, line in enumerate(lines[first:], first + 1):
        if not line.strip():
            continue
        fields = list(_fields(line, delimiter, n))
        if len(fields) != len(names):
            raise _Refused(n, 1, *_unlike(len(fields), len(names), delimiter))
        if len(times) == MAX_SAMPLES:
            raise _Refused(n, 1, f"more than {MAX_SAMPLES} samples", "cut the file to the test, or thin it out")
        at = clock.seconds(fields[clock_column.index], n, numbers)
        if times and at <= times[-1]:
            column = fields[clock_column.index].column
            raise _Refused(n, column, "the time does not increase here", "sort the lines, and keep one a moment")
        times.append(at)
        moved.append(numbers.value(fields[moved_column.index], n))
        measurement.append(numbers.value(fields[measured_column.index], n))
    if not times:
        raise _Refused(first, 1, "no samples follow the head", "write one line a sample")
    assert moved_column.unit is not None
    assert measured_column.unit is not None
    return StepTest(
        file=name,
        date=clock.date,
        time_s=np.array(times) - times[0],
        recorded=_key(moved_column.head),
        moved=np.array(moved),
        moved_unit=moved_column.unit,
        measurement=np.array(measurement),
        measurement_unit=measured_column.unit,
    )


def _lines(content: bytes) -> list[str]:
    if len(content) > MAX_BYTES:
        raise _Refused(1, 1, f"the file is larger than {MAX_BYTES // 2**20} MiB", "cut it to the test, or thin it out")
    if content[:2] in (b"\xff\xfe", b"\xfe\xff"):
        raise _Refused(1, 1, "this is UTF-16 text", "save the file as CSV in UTF-8")
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        before = content[: error.start].decode("utf-8")
        line = before.count("\n") + 1
        raise _Refused(
            line, len(before) - before.rfind("\n"), "this is not UTF-8 text", "save the file as CSV in UTF-8"
        ) from None
    if "\0" in text:
        raise _Refused(1, 1, "this is not a text file", "save the table as CSV in UTF-8")
    return text.replace("\r\n", "\n").replace("\r", "\n").split("\n")


def _fields(line: str, delimiter: str, n: int) -> Iterator[_Field]:
    """The fields of a line, without spaces and quotes around them."""
    start = 0
    while True:
        inside = line[start:].lstrip(" ")
        begin = len(line) - len(inside)
        if inside.startswith('"'):
            close = line.find('"', begin + 1)
            if close < 0:
                raise _Refused(n, begin + 1, "a quote is not closed", "close the quote")
            end = line.find(delimiter, close)
            end = len(line) if end < 0 else end
            if line[close + 1 : end].strip():
                raise _Refused(n, close + 2, "text stands behind a closing quote", "put the whole value in quotes")
            yield _Field(begin + 1, line[begin + 1 : close].strip())
        else:
            end = line.find(delimiter, start)
            end = len(line) if end < 0 else end
            text = line[start:end]
            yield _Field(start + 1 + len(text) - len(text.lstrip()), text.strip())
        if end == len(line):
            return
        start = end + 1


def _key(head: _Field) -> str:
    """The name of a column without its unit, in lower case."""
    found = _HEAD.fullmatch(head.text)
    return found[1].strip().lower() if found else ""


def _columns(names: list[_Field], n: int) -> tuple[_Column, _Column, _Column]:
    """The columns of the time, of what was moved and of the measurement."""
    found: dict[str, _Column] = {}
    for index, head in enumerate(names):
        key = _key(head)
        if key not in (TIME, *MOVED, MEASUREMENT):
            continue
        if key in found:
            raise _Refused(n, head.column, f"the column `{key}` stands twice", "keep one of them")
        match = _HEAD.fullmatch(head.text)
        written = (match[2] or match[3]) if match else None
        try:
            found[key] = _Column(index, head, unit(written) if written else None)
        except UnitError as error:
            fault, _, remedy = str(error).partition("; ")
            raise _Refused(n, head.column, fault, remedy) from None
    moved = [key for key in MOVED if key in found]
    for missing in [key for key in (TIME, MEASUREMENT) if key not in found] + ([] if moved else [OUTPUT]):
        message = f"there is no column `{missing}`"
        raise _Refused(n, 1, message, f"name the columns {_COLUMNS}; others are passed over")
    if len(moved) > 1:
        message = f"the columns `{moved[0]}` and `{moved[1]}` both say what was moved"
        raise _Refused(n, found[moved[1]].head.column, message, "keep one of them")
    for key in (moved[0], MEASUREMENT):
        if found[key].unit is None:
            message = f"the column `{key}` has no unit"
            raise _Refused(n, found[key].head.column, message, f"write it in brackets, as in {_COLUMNS}")
    return found[TIME], found[moved[0]], found[MEASUREMENT]


def _unlike(found: int, wanted: int, delimiter: str) -> tuple[str, str]:
    message = f"this line has {found} {'field' if found == 1 else 'fields'} where the head names {wanted}"
    if delimiter == "," and found > wanted:
        return message, "with decimal commas, let semicolons stand between the columns; else mend the line"
    return message, "mend or delete the line"


class _Numbers:
    """Reads numbers, all of one file with the same decimal mark."""

    def __init__(self) -> None:
        self._mark = ""

    def value(self, field: _Field, n: int) -> float:
        found = _NUMBER.fullmatch(field.text)
        if not field.text:
            raise _Refused(n, field.column, "a value is missing here", "delete the line, or write the value")
        if found is None:
            message = f"`{_short(field.text)}` is not a number"
            raise _Refused(n, field.column, message, "delete the line, or write a number such as 84.5")
        mark = found[1] or found[2]
        if mark:
            if self._mark and mark != self._mark:
                message = f"`{field.text}` has another decimal mark than the numbers before it"
                raise _Refused(n, field.column, message, "write one decimal mark, and none for thousands")
            self._mark = mark
        value = float(field.text.replace(",", "."))
        if not math.isfinite(value):
            raise _Refused(n, field.column, f"`{field.text}` is too large a number", "correct its exponent")
        return value


class _Clock:
    """Reads times: numbers in a unit of time, or moments of ISO 8601."""

    def __init__(self, column: _Column, n: int) -> None:
        self.date = ""
        self._unit = column.unit
        self._first: datetime.datetime | None = None
        if column.unit is not None and column.unit.kind != "time":
            message = f"`{column.unit}` is no unit of time"
            raise _Refused(n, column.head.column, message, "write `time [s]`, `time [min]` or `time [h]`")

    def seconds(self, field: _Field, n: int, numbers: _Numbers) -> float:
        """The time in seconds: of a number since its zero, of a moment since the first one."""
        if self._unit is not None:
            return numbers.value(field, n) * self._unit.factor
        if _NUMBER.fullmatch(field.text):
            message = "the time is a number, and the column `time` has no unit"
            raise _Refused(n, field.column, message, "write `time [s]`, or times such as 2026-05-14T10:00:00")
        if not _MOMENT.fullmatch(field.text):
            message = f"`{_short(field.text)}` is not a time"
            raise _Refused(n, field.column, message, "write it as 2026-05-14T10:00:00 (ISO 8601)")
        try:
            moment = datetime.datetime.fromisoformat(field.text)
        except ValueError:
            message = f"`{field.text}` is not in the calendar or not on the clock"
            raise _Refused(n, field.column, message, "correct the time") from None
        if self._first is None:
            self._first, self.date = moment, moment.date().isoformat()
        if (moment.tzinfo is None) != (self._first.tzinfo is None):
            message = "some times have a zone and others have none"
            raise _Refused(n, field.column, message, "write all of them with a zone or all without")
        return (moment - self._first).total_seconds()


def _short(text: str) -> str:
    return text if len(text) <= _SHOWN_CHARACTERS else text[:_SHOWN_CHARACTERS] + "…"
