"""Results of loop checks, kept beside the register in `records/`: one file a loop, the oldest check first.

They are no part of the design: no rule reads them and no fingerprint counts them, so that a loop can be checked
without a new revision of every document.
"""

from __future__ import annotations

import json
import re
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING, Any

from loopdoc.register.expected import Format
from loopdoc.register.quantity import Quantity, QuantityError, Range, parse_quantity, parse_range
from loopdoc.register.schema import refused_paths, validator_of
from loopdoc.register.schema_faults import explained
from loopdoc.register.text import TextFile, read_text

if TYPE_CHECKING:
    from jsonschema_rs import Draft202012Validator

FOLDER = "records"
RESULTS = ("as_found", "as_found_falling", "as_left", "as_left_falling")
"""What may be read at one point: before and after an adjustment, the first of each with the signal rising."""
HEADS = ("witnessed_by", "instrument", "calibration", "remarks")
"""Texts that a check may carry besides its date and who made it."""
CONDITIONS = ("ambient", "reference_junction")
"""Temperatures that a check may carry."""
_SCHEMA = "record.schema.json"
MAX_FILES = 20_000
# Text that YAML reads as it stands without quotes: it begins as a word or as a number with its unit.
_PLAIN = re.compile(r"(?:[A-Za-z]|[-+]?[0-9.]+ [A-Za-z%])[A-Za-z0-9 .,;%/()+_-]*(?<! )")
_WORDS = ("true", "false", "null", "yes", "no", "on", "off")


@dataclass(frozen=True, slots=True)
class RecordFault:
    """Something in results that cannot be taken as it stands."""

    place: str
    """File, line and column, or file, sheet and cell."""
    message: str
    remedy: str


@dataclass(frozen=True, slots=True)
class RecordedReading:
    """What was read at one point."""

    expected: Quantity | None
    """What should have been read by the register of that day."""
    accept: Range | None
    """The least and the largest reading that passed by the register of that day."""
    as_found: Quantity | None
    as_found_falling: Quantity | None
    as_left: Quantity | None
    as_left_falling: Quantity | None


@dataclass(frozen=True, slots=True)
class RecordedFunction:
    """What was seen at one function check."""

    result: str
    """pass, fail or not done."""
    against: str
    """The words of the register that it was checked against; empty where they were not given."""
    remark: str


@dataclass(frozen=True, slots=True)
class LoopRecord:
    """One check of one loop."""

    tag: str
    date: str
    """ISO 8601 date."""
    by: str
    witnessed_by: str
    instrument: str
    calibration: str
    remarks: str
    ambient: Quantity | None
    reference_junction: Quantity | None
    readings: Mapping[str, RecordedReading]
    functions: Mapping[str, RecordedFunction]
    place: Callable[..., str] = field(repr=False, compare=False)
    """Where a part of it stands, by its path: `place("readings", "high alarm", "as_found")`."""


def schema_text() -> str:
    """The JSON Schema of a record file, as text."""
    return (files("loopdoc.schemas") / _SCHEMA).read_text(encoding="utf-8")


def read_records(content: bytes, name: str) -> tuple[LoopRecord, ...] | tuple[RecordFault, ...]:
    """The checks in one file, or everything that keeps it from being read."""
    file = read_text(content, name)
    if not isinstance(file, TextFile):
        return (RecordFault(str(file.place), file.message, file.remedy),)
    if not isinstance(file.data, dict):
        return (RecordFault(str(file.place(())), "a record file is a mapping of keys", "begin with `format: 1`"),)
    paths = refused_paths(file.data, _validator())
    found = [fault for path in paths for fault in explained(file, path, _format())]
    found.sort(key=lambda fault: (fault.place, fault.pointer))
    faults = [RecordFault(str(fault.place), fault.message, fault.remedy) for fault in found]
    if faults:
        return tuple(faults)
    records = tuple(_record(file, index, check, faults) for index, check in enumerate(file.data["checks"]))
    return tuple(faults) or records


def load_records(folder: Path) -> dict[str, tuple[LoopRecord, ...]] | tuple[RecordFault, ...]:
    """The checks kept beside the register in a folder, by tag, each loop's oldest first; or what cannot be read."""
    found: list[LoopRecord] = []
    faults: list[RecordFault] = []
    names = sorted(folder.joinpath(FOLDER).glob("*.yaml"))
    if len(names) > MAX_FILES:
        return (RecordFault(FOLDER, f"more than {MAX_FILES} files", "keep one file a loop"),)
    for path in names:
        name = f"{FOLDER}/{path.name}"
        try:
            content = path.read_bytes()
        except OSError as error:
            faults.append(RecordFault(name, f"the file cannot be read ({error.strerror})", "check its permissions"))
            continue
        for one in read_records(content, name):
            if isinstance(one, RecordFault):
                faults.append(one)
            else:
                found.append(one)
    return tuple(faults) or by_tag(found)


def by_tag(records: Iterable[LoopRecord]) -> dict[str, tuple[LoopRecord, ...]]:
    """Checks by the tag of their loop, each loop's oldest first."""
    found: dict[str, list[LoopRecord]] = {}
    for record in records:
        found.setdefault(record.tag, []).append(record)
    return {tag: tuple(sorted(checks, key=lambda record: record.date)) for tag, checks in found.items()}


def _record(file: TextFile, index: int, check: dict[str, Any], faults: list[RecordFault]) -> LoopRecord:
    def place(*path: str) -> str:
        return str(file.place(("checks", index, *path)))

    def value(written: dict[str, Any], *path: str) -> Any:
        text = written.get(path[-1])
        if text is None:
            return None
        try:
            return parse_range(text) if path[-1] == "accept" else parse_quantity(text)
        except QuantityError as error:
            faults.append(RecordFault(place(*path), f"`{path[-1]}`: {error.fault}", error.remedy))
            return None

    return LoopRecord(
        tag=check["tag"],
        date=check["date"],
        by=check["by"],
        **{key: check.get(key, "") for key in HEADS},
        **{key: value(check, key) for key in CONDITIONS},
        readings={
            key: RecordedReading(
                **{name: value(entry, "readings", key, name) for name in ("expected", "accept", *RESULTS)}
            )
            for key, entry in check.get("readings", {}).items()
        },
        functions={
            key: RecordedFunction(entry["result"], entry.get("against", ""), entry.get("remark", ""))
            for key, entry in check.get("functions", {}).items()
        },
        place=place,
    )


@cache
def _format() -> Format:
    return Format(json.loads(schema_text()))


@cache
def _validator() -> Draft202012Validator:
    return validator_of(json.loads(schema_text()))


# ---------------------------------------------------------------- writing


def records_text(records: Iterable[LoopRecord]) -> str:
    """Checks as a record file holds them, one fact a line."""
    return "format: 1\nchecks:\n" + "".join(map(entry_text, records))


def entry_text(record: LoopRecord) -> str:
    """One check as an entry of a record file."""
    lines = [f"  - tag: {_scalar(record.tag)}", f"    date: {record.date}", f"    by: {_scalar(record.by)}"]
    for key in ("witnessed_by", "instrument", "calibration", *CONDITIONS, "remarks"):
        value = getattr(record, key)
        if value:
            lines.append(f"    {key}: {_scalar(str(value))}")
    if record.readings:
        lines.append("    readings:")
    for name, reading in record.readings.items():
        lines.append(f"      {_scalar(name)}:")
        for key in ("expected", "accept", *RESULTS):
            value = getattr(reading, key)
            if value is not None:
                lines.append(f"        {key}: {_scalar(str(value))}")
    if record.functions:
        lines.append("    functions:")
    for name, function in record.functions.items():
        lines.append(f"      {_scalar(name)}:")
        told = {key: getattr(function, key) for key in ("against", "result", "remark")}
        lines += [f"        {key}: {_scalar(text)}" for key, text in told.items() if text]
    return "\n".join(lines) + "\n"


def _scalar(text: str) -> str:
    """A text as YAML: plain where that is read back as it stands, else in quotes."""
    return text if _PLAIN.fullmatch(text) and text.casefold() not in _WORDS else json.dumps(text, ensure_ascii=False)
