"""Files of results of loop checks, each read by what it is: a workbook or YAML."""

from __future__ import annotations

from collections.abc import Collection, Iterable
from pathlib import Path

from loopdoc.exchange.record_report import faults_text
from loopdoc.exchange.record_workbook import MAX_BYTES, read_workbook
from loopdoc.register.records import LoopRecord, RecordFault, read_records

WORKBOOKS = (".xlsx", ".xlsm", ".xls", ".ods")


def read_results(paths: Iterable[Path], tags: Collection[str]) -> tuple[LoopRecord, ...] | str:
    """The checks in these files in order, or the text of all that keeps them from being read."""
    records: list[LoopRecord] = []
    faults: list[RecordFault] = []
    for path in paths:
        with path.open("rb") as file:
            content = file.read(MAX_BYTES + 1)
        workbook = path.suffix.lower() in WORKBOOKS or content.startswith(b"PK")
        for one in read_workbook(content, path.name, tags) if workbook else read_records(content, path.name):
            if isinstance(one, RecordFault):
                faults.append(one)
            else:
                records.append(one)
    return faults_text(faults) if faults else tuple(records)
