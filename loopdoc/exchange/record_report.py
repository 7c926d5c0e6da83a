"""What results of loop checks come to, as text and as JSON, and their keeping beside the register."""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from loopdoc.engineering.loop_check import LoopChecks
from loopdoc.engineering.record_verdict import (
    JudgedFunction,
    JudgedReading,
    JudgedRecord,
    Verdict,
    faults_of,
    filled,
    judge,
)
from loopdoc.exchange.escaping import for_json, for_terminal
from loopdoc.register.model import Loop
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.records import (
    FOLDER,
    RESULTS,
    LoopRecord,
    RecordFault,
    entry_text,
    read_records,
    records_text,
)

_FILE_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,99}")
_WORDS = {"as_found": "as found", "as_found_falling": "falling", "as_left": "as left", "as_left_falling": "falling"}


def judged_records(
    records: Sequence[LoopRecord], checks: Mapping[str, LoopChecks], loops: Mapping[str, Loop]
) -> tuple[JudgedRecord, ...] | tuple[RecordFault, ...]:
    """Every record filled in and judged, or everything in them that the register does not know."""
    faults: list[RecordFault] = []
    for record in records:
        if record.tag in checks:
            faults.extend(faults_of(record, checks[record.tag], loops[record.tag]))
        else:
            remedy = "write a tag of the register"
            faults.append(RecordFault(record.place("tag"), f"the register has no loop `{record.tag[:80]}`", remedy))
    if faults:
        return tuple(faults)
    return tuple(judge(checks[record.tag], filled(record, checks[record.tag])) for record in records)


def faults_text(faults: Iterable[RecordFault]) -> str:
    """Each fault with its place and its remedy."""
    lines = [f"{fault.place}: error: {fault.message}\n    remedy: {fault.remedy}\n" for fault in faults]
    return for_terminal("".join(lines))


# ---------------------------------------------------------------- text


def report_text(judged: Sequence[JudgedRecord], loops: int) -> str:
    """Each loop with what is not simply a pass, and the count of all; ``loops`` is the number in the register."""
    lines: list[str] = []
    for one in judged:
        record = one.record
        with_what = f", {record.instrument}" if record.instrument else ""
        lines.append(f"{record.tag}: {one.verdict} ({record.date}, {record.by}{with_what})")
        lines.extend(f"    {line}" for line in _lines(one))
    counts = {verdict: sum(one.verdict is verdict for one in judged) for verdict in Verdict}
    tags = {one.record.tag for one in judged}
    lines.append(
        f"{len(judged)} {'check' if len(judged) == 1 else 'checks'} read: {counts[Verdict.PASS]} pass, "
        f"{counts[Verdict.FAIL]} fail, {counts[Verdict.NOT_DONE]} not complete; {loops - len(tags)} of {loops} loops "
        "not in these results."
    )
    return for_terminal("\n".join(lines)) + "\n"


def _lines(judged: JudgedRecord) -> Iterator[str]:
    missing: list[str] = []
    for reading in judged.readings:
        if reading.changed:
            yield f"{reading.reading.key}: before the change of {reading.changed}, {_change(reading)}: check again"
        if reading.as_found is Verdict.FAIL or reading.as_left is Verdict.FAIL:
            yield _out(reading)
        elif reading.final is Verdict.NOT_DONE and not reading.changed:
            missing.append(reading.reading.key)
    for function in judged.functions:
        if function.changed:
            yield f"{function.check.key}: before a change, {_function_change(function)}: check again"
        if function.result is Verdict.FAIL:
            remark = function.recorded.remark if function.recorded else ""
            yield f"{function.check.key}: fail{f' ({remark})' if remark else ''}"
        elif function.final is Verdict.NOT_DONE and not function.changed:
            missing.append(function.check.key)
    if missing:
        whole = len(judged.readings) + len(judged.functions)
        yield f"not done, {len(missing)} of {whole}: {', '.join(missing)}"


def _change(reading: JudgedReading) -> str:
    recorded = reading.recorded
    then = [str(part) for part in (recorded.expected, recorded.accept) if part is not None] if recorded else []
    now = Quantity(float(f"{reading.reading.expected:.6g}"), reading.reading.unit)
    return f"checked against {', '.join(then)}, now {now}, {_accepted(reading)}"


def _function_change(function: JudgedFunction) -> str:
    then = function.recorded.against if function.recorded else ""
    return f"checked against `{then}`, now `{function.check.against}`"


def _accepted(reading: JudgedReading) -> str:
    low, high = (float(f"{end:.6g}") for end in (reading.reading.low, reading.reading.high))
    return str(Range(low, high, reading.reading.unit))


def _out(reading: JudgedReading) -> str:
    recorded = reading.recorded
    assert recorded is not None
    values = []
    for name in RESULTS:
        value = getattr(recorded, name)
        if value is not None:
            values.append(f"{_WORDS[name]} {value}")
    left = f", as left {reading.as_left}" if reading.as_left else ""
    limits = recorded.accept if recorded.accept is not None else _accepted(reading)
    return f"{reading.reading.key}: {', '.join(values)}; accepted {limits}: as found {reading.as_found}{left}"


# ---------------------------------------------------------------- JSON


def report_json(judged: Sequence[JudgedRecord], loops: int) -> str:
    """The same as one JSON object, every reading and function in it."""
    document = {
        "checks": [_check_object(one) for one in judged],
        "summary": {
            **{verdict.value.replace(" ", "_"): sum(one.verdict is verdict for one in judged) for verdict in Verdict},
            "loops": loops,
            "loops_without_results": loops - len({one.record.tag for one in judged}),
        },
    }
    return for_json(document) + "\n"


def _check_object(judged: JudgedRecord) -> dict[str, Any]:
    record = judged.record
    return {
        "tag": record.tag,
        "date": record.date,
        "by": record.by,
        "witnessed_by": record.witnessed_by,
        "instrument": record.instrument,
        "calibration": record.calibration,
        "verdict": judged.verdict,
        "readings": [_reading_object(one) for one in judged.readings],
        "functions": [
            {
                "name": one.check.key,
                "result": one.result,
                "remark": one.recorded.remark if one.recorded else "",
                "before_change": one.changed,
            }
            for one in judged.functions
        ],
    }


def _reading_object(one: JudgedReading) -> dict[str, Any]:
    recorded = one.recorded
    values = {name: str(value) if (value := getattr(recorded, name, None)) is not None else None for name in RESULTS}
    return {
        "name": one.reading.key,
        "expected": one.reading.expected,
        "low": one.reading.low,
        "high": one.reading.high,
        "unit": one.reading.unit.symbol,
        **values,
        "as_found_verdict": one.as_found,
        "as_left_verdict": one.as_left,
        "before_change_of": one.changed or None,
    }


# ---------------------------------------------------------------- keeping


def kept(folder: Path, records: Iterable[LoopRecord]) -> dict[str, bytes] | str:
    """The files beside a register with records added, by their names below its folder; or why that cannot be.

    What stands in a file stays as it is, and a check that is there already is not added again. What comes out is
    read anew and must hold exactly what was meant.
    """
    added: dict[str, list[LoopRecord]] = {}
    for record in records:
        if not _FILE_NAME.fullmatch(record.tag):
            return f"no file can be named after the tag `{record.tag[:80]}`"
        added.setdefault(record.tag, []).append(record)
    contents: dict[str, bytes] = {}
    for tag, new in added.items():
        name = f"{FOLDER}/{tag}.yaml"
        path = folder / name
        before = path.read_bytes() if path.exists() else b""
        old = read_records(before, name) if before else ()
        if any(isinstance(one, RecordFault) for one in old):
            return f"{name} cannot be read as it stands"
        new = [record for record in new if record not in old]
        if not new:
            continue
        ended = before if before.endswith(b"\n") else before + b"\n"
        content = ended + "".join(map(entry_text, new)).encode() if before else records_text(new).encode()
        if read_records(content, name) != (*old, *new):
            return f"{name} does not end with its list of checks; move what stands after it"
        contents[name] = content
    return contents
