"""Workbooks for loop checks: the blank to fill in, one sheet a loop, and the filled one read back.

A workbook from outside is taken as hostile: its archive is looked at before anything of it is unpacked, it is
packed anew within bounds, and a cell far out cannot make a sheet of a thousand million cells.
"""

from __future__ import annotations

import datetime
import io
import re
import zipfile
import zlib
from collections.abc import Callable, Collection, Iterator, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Any
from xml.parsers import expat

from loopdoc.engineering.loop_check import LoopChecks, Reading
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.records import LoopRecord, RecordedFunction, RecordedReading, RecordFault
from loopdoc.register.units import UNITS, Unit

MAX_BYTES = 16 * 1024 * 1024
MAX_UNPACKED = 64 * 1024 * 1024
MAX_PARTS = 5_000
MAX_ROWS, MAX_COLUMNS = 5_000, 100
MAX_TEXT = 2_000
GUIDE = "Read me"
LOOP = "Loop"
_TEXT_HEADS = {
    "Tested by": "by",
    "Witnessed by": "witnessed_by",
    "Test instrument": "instrument",
    "Its calibration number": "calibration",
    "Remarks": "remarks",
}
_NUMBER_HEADS = {"Ambient temperature, degC": "ambient", "Reference junction, degC": "reference_junction"}
DATE = "Date"
READING, FUNCTION = "Reading", "Function"
_RESULT_COLUMNS = {
    "As found, rising": "as_found",
    "As found, falling": "as_found_falling",
    "As left, rising": "as_left",
    "As left, falling": "as_left_falling",
}
_READING_COLUMNS = (READING, "Expected", "Accept from", "Accept to", "Unit", *_RESULT_COLUMNS)
_FUNCTION_COLUMNS = (FUNCTION, "Do", "Should happen", "Checked against", "Result", "Remark")
RESULTS = ("pass", "fail", "not done")
_WIDTHS = (30, 34, 40, 22, 12, 16, 16, 16, 16)
_CREATED = datetime.datetime(2000, 1, 1)
"""The same for every workbook, so that the same register gives the same bytes."""
_NUMBER = re.compile(r"[+-]?[0-9]+(?:[.,][0-9]+)?")
_CELL = re.compile(r"([A-Z]{1,3})([0-9]{1,7})")


# ---------------------------------------------------------------- the blank


def blank_workbook(checks: Sequence[LoopChecks], *, guide: Sequence[str]) -> bytes:
    """A workbook with a sheet for each loop to fill in, after a page of words about it."""
    from xlsxwriter import Workbook

    content = io.BytesIO()
    book = Workbook(
        content,
        {"in_memory": True, "strings_to_formulas": False, "strings_to_urls": False, "strings_to_numbers": False},
    )
    book.set_properties({"created": _CREATED})
    formats = {
        "head": book.add_format({"bold": True, "bg_color": "#E4E4E4", "border": 1, "text_wrap": True}),
        "plain": book.add_format({"border": 1, "text_wrap": True, "valign": "top"}),
        "input": book.add_format({"border": 1, "locked": False, "valign": "top"}),
        "text": book.add_format({"border": 1, "locked": False, "valign": "top", "num_format": "@", "text_wrap": True}),
        "shut": book.add_format({"border": 1, "bg_color": "#BBBBBB"}),
    }
    words = book.add_worksheet(GUIDE)
    words.set_column(0, 0, 110)
    for row, line in enumerate(guide):
        words.write_string(row, 0, line)
    taken = {GUIDE.casefold()}
    for loop in checks:
        _write_sheet(book.add_worksheet(_sheet_name(loop.tag, taken)), loop, formats)
    book.close()
    return content.getvalue()


def _sheet_name(tag: str, taken: set[str]) -> str:
    """A name that a workbook takes; the tag in the first row counts."""
    plain = re.sub(r"[\[\]:*?/\\']", "_", tag)[:28]
    name, number = plain, 1
    while name.casefold() in taken or name.casefold() == "history":
        number += 1
        name = f"{plain}_{number}"
    taken.add(name.casefold())
    return name


def _write_sheet(sheet: Any, loop: LoopChecks, formats: dict[str, Any]) -> None:
    for column, width in enumerate(_WIDTHS):
        sheet.set_column(column, column, width)
    sheet.write_string(0, 0, LOOP, formats["head"])
    sheet.write_string(0, 1, loop.tag, formats["plain"])
    row = 1
    for label in (DATE, *_TEXT_HEADS, *_NUMBER_HEADS):
        sheet.write_string(row, 0, label, formats["head"])
        sheet.write_blank(row, 1, None, formats["input" if label in _NUMBER_HEADS else "text"])
        row += 1
    sheet.write_string(1, 2, "year-month-day, such as 2026-11-30")
    row += 1
    if loop.readings:
        row = _write_readings(sheet, loop.readings, formats, row) + 1
    if loop.functions:
        for column, label in enumerate(_FUNCTION_COLUMNS):
            sheet.write_string(row, column, label, formats["head"])
        for check in loop.functions:
            row += 1
            for column, text in enumerate((check.key, check.do, check.expect or "Not stated", check.against)):
                sheet.write_string(row, column, text, formats["plain"])
            sheet.write_blank(row, 4, None, formats["text"])
            sheet.write_blank(row, 5, None, formats["text"])
            sheet.data_validation(row, 4, row, 4, {"validate": "list", "source": list(RESULTS)})
    sheet.protect("", {"format_columns": True, "format_rows": True})
    sheet.set_landscape()
    sheet.set_paper(9)
    sheet.fit_to_pages(1, 0)


def _write_readings(sheet: Any, readings: Sequence[Reading], formats: dict[str, Any], row: int) -> int:
    for column, label in enumerate(_READING_COLUMNS):
        sheet.write_string(row, column, label, formats["head"])
    for reading in readings:
        row += 1
        sheet.write_string(row, 0, reading.key, formats["plain"])
        for column, figure in enumerate((reading.expected, reading.low, reading.high), 1):
            sheet.write_number(row, column, float(f"{figure:.6g}"), formats["plain"])
        sheet.write_string(row, 4, reading.unit.symbol, formats["plain"])
        for column, name in enumerate(_RESULT_COLUMNS.values(), 5):
            shut = name.endswith("falling") and not reading.both_ways
            sheet.write_blank(row, column, None, formats["shut" if shut else "input"])
    return row + 1


# ---------------------------------------------------------------- reading it back


class _Refused(Exception):
    """Carries why the workbook as a whole cannot be read; never leaves this module."""

    def __init__(self, message: str, remedy: str) -> None:
        self.message, self.remedy = message, remedy


def read_workbook(content: bytes, name: str, tags: Collection[str]) -> tuple[LoopRecord, ...] | tuple[RecordFault, ...]:
    """The checks in a filled workbook, or all that keeps it from being read; loops left blank are passed over."""
    try:
        sheets = list(_sheets(_packed_anew(content)))
    except _Refused as refused:
        return (RecordFault(name, refused.message, refused.remedy),)
    faults: list[RecordFault] = []
    records: list[LoopRecord] = []
    for title, rows in sheets:
        if title == GUIDE or not any(cell != "" for row in rows for cell in row):
            continue
        record = _Sheet(name, title, rows, faults).record(tags)
        if record is not None:
            records.append(record)
    if not faults and not records:
        return (RecordFault(name, "no sheet holds results", "fill in a sheet: date, who, and what was found"),)
    return tuple(faults) or tuple(records)


def _packed_anew(content: bytes) -> bytes:
    """The workbook with the parts that are read, each within bounds: what an archive declares need not be true."""
    if len(content) > MAX_BYTES:
        raise _Refused(f"the workbook is larger than {MAX_BYTES // 2**20} MiB", "send the blank's own sheets only")
    if not content.startswith(b"PK"):
        raise _Refused("this is not an .xlsx workbook", "save it as .xlsx, or send the results as YAML")
    packed = io.BytesIO()
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as archive, zipfile.ZipFile(packed, "w") as anew:
            parts = archive.infolist()
            if len(parts) > MAX_PARTS or sum(part.file_size for part in parts) > MAX_UNPACKED:
                raise _Refused(
                    f"the workbook unpacks to more than {MAX_UNPACKED // 2**20} MiB or {MAX_PARTS} parts",
                    "send the blank's own sheets only",
                )
            for part in parts:
                if part.filename.endswith((".xml", ".rels")):
                    text = archive.read(part)  # no more than its declared size
                    _look_at(text, part.filename)
                    anew.writestr(part.filename, text)
    except (zipfile.BadZipFile, NotImplementedError, RuntimeError, EOFError, zlib.error) as error:
        raise _Refused("the workbook is damaged or locked", "save it anew, without a password") from error
    return packed.getvalue()


def _look_at(text: bytes, part: str) -> None:
    """Refuse cells far out and definitions inside the XML."""

    def start(tag: str, attributes: dict[str, str]) -> None:
        local = tag.rpartition(":")[2]
        if local not in ("c", "row"):
            return
        at = attributes.get("r", "")
        found = _CELL.fullmatch(at)
        line = found[2] if found else at if local == "row" else ""
        if (found and _column_number(found[1]) > MAX_COLUMNS) or (line.isdigit() and int(line) > MAX_ROWS):
            raise _Refused(
                f"a sheet has something at {at}, beyond row {MAX_ROWS} or column {MAX_COLUMNS}",
                "delete what stands outside the blank's own rows and columns",
            )

    def doctype(*_: Any) -> None:
        raise _Refused("the workbook defines XML entities", "save it anew from a spreadsheet program")

    parser = expat.ParserCreate()
    parser.StartElementHandler = start
    parser.StartDoctypeDeclHandler = doctype
    try:
        parser.Parse(text, True)
    except expat.ExpatError as error:
        raise _Refused(f"{part} in the workbook is not XML", "save it anew from a spreadsheet program") from error


def _column_number(letters: str) -> int:
    number = 0
    for letter in letters:
        number = 26 * number + ord(letter) - 64
    return number


def _sheets(content: bytes) -> Iterator[tuple[str, list[list[Any]]]]:
    import python_calamine

    try:
        book = python_calamine.load_workbook(io.BytesIO(content))
        for sheet in book.sheets_metadata:
            if sheet.typ == python_calamine.SheetTypeEnum.WorkSheet:
                yield sheet.name, book.get_sheet_by_name(sheet.name).to_python(skip_empty_area=False)
    except (python_calamine.CalamineError, ValueError, KeyError, OSError) as error:
        raise _Refused("the workbook cannot be read", "save it anew as .xlsx from a spreadsheet program") from error


@dataclass(frozen=True, slots=True)
class _Cell:
    """A value of a sheet with its address."""

    value: Any
    address: str


class _Sheet:
    """One sheet of the workbook, read by its labels."""

    def __init__(self, file: str, title: str, rows: list[list[Any]], faults: list[RecordFault]) -> None:
        self._file, self._title, self._rows, self._faults = file, title, rows, faults
        self._addresses: dict[tuple[str, ...], str] = {}

    def record(self, tags: Collection[str]) -> LoopRecord | None:
        """The check in this sheet; None where it is blank, or where a fault has been told."""
        tag = self._cell(0, 1)
        if self._cell(0, 0).value != LOOP or not isinstance(tag.value, str) or not tag.value:
            self._fault("A1", f"this is not a sheet of a blank: A1 should say `{LOOP}` and B1 the tag", "see --blank")
            return None
        if tag.value not in tags:
            near = get_close_matches(tag.value[:80], tags, 1)
            hint = f"did you mean {near[0]}?" if near else "write a tag of the register"
            self._fault(tag.address, f"the register has no loop `{tag.value[:80]}`", hint)
            return None
        before = len(self._faults)
        heads = self._heads()
        readings = dict(self._readings())
        functions = dict(self._functions())
        if len(self._faults) > before or not (heads or readings or functions):
            return None
        for label, key in ((DATE, "date"), ("Tested by", "by")):
            if key not in heads:
                self._fault(self._address_of(label), f"`{label}` of {tag.value} is empty", "fill it in")
        if len(self._faults) > before:
            return None
        texts: dict[str, str] = {key: heads.get(key) or "" for key in ("date", *_TEXT_HEADS.values())}
        return LoopRecord(
            tag=tag.value,
            **texts,
            ambient=heads.get("ambient"),
            reference_junction=heads.get("reference_junction"),
            readings=readings,
            functions=functions,
            place=self._placed(),
        )

    # -- parts

    def _heads(self) -> dict[str, Any]:
        found: dict[str, Any] = {}
        for row in range(1, len(self._rows)):
            label, cell = self._cell(row, 0).value, self._cell(row, 1)
            if label in (READING, FUNCTION):
                break
            if cell.value == "" or not isinstance(label, str):
                continue
            if label == DATE:
                found["date"] = self._date(cell)
                self._addresses[("date",)] = cell.address
            elif label in _TEXT_HEADS:
                found[_TEXT_HEADS[label]] = self._text(cell, label)
                self._addresses[(_TEXT_HEADS[label],)] = cell.address
            elif label in _NUMBER_HEADS:
                number = self._number(cell, label)
                key = _NUMBER_HEADS[label]
                found[key] = None if number is None else Quantity(number, UNITS["degC"])
                self._addresses[(key,)] = cell.address
        return found

    def _readings(self) -> Iterator[tuple[str, RecordedReading]]:
        for row, columns in self._table(READING, _READING_COLUMNS):
            key = self._cell(row, 0).value
            results = {name: self._cell(row, columns[label]) for label, name in _RESULT_COLUMNS.items()}
            if all(cell.value == "" for cell in results.values()):
                continue
            unit = self._unit(self._cell(row, columns["Unit"]), key)
            limits = {label: self._cell(row, columns[label]) for label in ("Expected", "Accept from", "Accept to")}
            figures = {label: self._number(cell, f"`{label}` of {key}") for label, cell in limits.items()}
            values = {name: self._number(cell, key) if cell.value != "" else None for name, cell in results.items()}
            for name, cell in results.items():
                self._addresses["readings", key, name] = cell.address
            self._addresses["readings", key] = self._cell(row, 0).address
            expected, low, high = figures.values()
            if unit is None or expected is None or low is None or high is None:
                continue
            yield (
                key,
                RecordedReading(
                    expected=Quantity(expected, unit),
                    accept=Range(low, high, unit),
                    **{name: None if value is None else Quantity(value, unit) for name, value in values.items()},
                ),
            )

    def _functions(self) -> Iterator[tuple[str, RecordedFunction]]:
        for row, columns in self._table(FUNCTION, _FUNCTION_COLUMNS):
            key = self._cell(row, 0).value
            result, remark = self._cell(row, columns["Result"]), self._cell(row, columns["Remark"])
            self._addresses["functions", key] = self._cell(row, 0).address
            if result.value == "":
                if remark.value != "":
                    self._fault(result.address, f"{key} has a remark and no result", f"write {_either(RESULTS)}")
                continue
            told = result.value.strip().lower() if isinstance(result.value, str) else ""
            if told not in RESULTS:
                self._fault(
                    result.address, f"the result of {key} is `{str(result.value)[:40]}`", f"write {_either(RESULTS)}"
                )
                continue
            against = self._cell(row, columns["Checked against"])
            yield (
                key,
                RecordedFunction(
                    told,
                    self._text(against, key) if against.value != "" else "",
                    self._text(remark, key) if remark.value != "" else "",
                ),
            )

    def _table(self, head: str, columns: Sequence[str]) -> Iterator[tuple[int, dict[str, int]]]:
        """Rows below a head, down to the first without a name, with the columns by their labels."""
        start = next((row for row in range(len(self._rows)) if self._cell(row, 0).value == head), None)
        if start is None:
            return
        labels = {label: index for index, label in enumerate(self._rows[start]) if isinstance(label, str) and label}
        missing = [label for label in columns if label not in labels]
        if missing:
            self._fault(f"A{start + 1}", f"the column `{missing[0]}` is missing", "take a new blank, see --blank")
            return
        for row in range(start + 1, len(self._rows)):
            key = self._cell(row, 0).value
            if key == "":
                return
            if isinstance(key, str):
                yield row, labels

    # -- cells

    def _cell(self, row: int, column: int) -> _Cell:
        line = self._rows[row] if row < len(self._rows) else []
        value = line[column] if column < len(line) else ""
        value = value.strip() if isinstance(value, str) else value
        return _Cell(value, f"{chr(65 + column)}{row + 1}" if column < 26 else f"row {row + 1}")

    def _address_of(self, label: str) -> str:
        row = next((row for row in range(len(self._rows)) if self._cell(row, 0).value == label), 0)
        return f"B{row + 1}"

    def _date(self, cell: _Cell) -> str | None:
        value = cell.value
        if isinstance(value, datetime.datetime):
            value = value.date()
        if isinstance(value, datetime.date):
            return value.isoformat()
        if isinstance(value, str):
            try:
                return datetime.datetime.strptime(value, "%Y-%m-%d").date().isoformat()
            except ValueError:
                pass
        self._fault(cell.address, f"the date is `{str(value)[:40]}`", "write year-month-day, such as 2026-11-30")
        return None

    def _text(self, cell: _Cell, what: str) -> str:
        value = cell.value
        if isinstance(value, float):
            value = f"{value:.15g}"
        text = " ".join(str(value).split())
        if not text.isprintable():
            self._fault(cell.address, f"`{what}` holds a control character", "delete it")
            return ""
        if len(text) > MAX_TEXT:
            self._fault(cell.address, f"`{what}` has more than {MAX_TEXT} characters", "shorten it")
            return ""
        return text

    def _number(self, cell: _Cell, what: str) -> float | None:
        value = cell.value
        if isinstance(value, int | float) and not isinstance(value, bool):
            return float(value)
        shown = str(value)[:40]
        if value == "":
            self._fault(cell.address, f"{what} is empty", "take a new blank, see --blank")
        elif isinstance(value, str) and _NUMBER.fullmatch(value):
            comma = " with a decimal comma" if "," in value else ""
            self._fault(
                cell.address, f"{what} is the text `{shown}`{comma}, not a number",
                "enter it as a number, with the decimal sign of the spreadsheet program",
            )  # fmt: skip
        else:
            self._fault(cell.address, f"{what} is `{shown}`, not a number", "enter a number without its unit")
        return None

    def _unit(self, cell: _Cell, key: str) -> Unit | None:
        if isinstance(cell.value, str) and cell.value in UNITS:
            return UNITS[cell.value]
        self._fault(cell.address, f"the unit of {key} is `{str(cell.value)[:40]}`", "take a new blank, see --blank")
        return None

    # -- faults

    def _fault(self, address: str, message: str, remedy: str) -> None:
        self._faults.append(RecordFault(self._at(address), message, remedy))

    def _at(self, address: str) -> str:
        return f"{self._file}, sheet {self._title}, cell {address}"

    def _placed(self) -> Callable[..., str]:
        addresses, at = dict(self._addresses), self._at

        def place(*path: str) -> str:
            while path and path not in addresses:
                path = path[:-1]
            return at(addresses.get(path, "B1"))

        return place


def _either(words: Sequence[str]) -> str:
    return f"{', '.join(f'`{word}`' for word in words[:-1])} or `{words[-1]}`"
