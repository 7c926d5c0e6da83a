"""Results of loop checks: from a blank through a workbook or YAML to verdicts, files and the next record."""

from __future__ import annotations

import datetime
import io
import json
import re
import shutil
import zipfile
from pathlib import Path
from xml.sax.saxutils import escape

import jsonschema
import pytest
from xlsxwriter import Workbook

from loopdoc.cli import run
from loopdoc.documents.basis import basis_of
from loopdoc.documents.check_record.check_record import RecordView, check_records
from loopdoc.documents.check_record.expected import plant_checks
from loopdoc.engineering.loop_check import LoopChecks, Reading
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.record_verdict import JudgedRecord, Verdict, judge
from loopdoc.exchange.record_workbook import (
    MAX_COLUMNS,
    MAX_PARTS,
    MAX_ROWS,
    MAX_UNPACKED,
    blank_workbook,
    read_workbook,
)
from loopdoc.register.load import Loaded, load
from loopdoc.register.records import (
    LoopRecord,
    RecordFault,
    load_records,
    read_records,
    records_text,
    schema_text,
)
from loopdoc.register.text import TextFile, read_text
from loopdoc.register.units import UNITS

DEMO = Path(__file__).parents[1] / "examples" / "tarn-hollow"
REGISTER = """\
format: 1
site: {name: Test site, owner: Instruments}
revision: {code: A, date: 2026-11-20, status: issued for review}
units: {"20": {name: Column}}
loops:
  TIC-2014:
    unit: "20"
    service: Tray temperature
    measurement: {transmitter: TT-2014, variable: temperature, range: 0 to 100 degC, signal: 4-20 mA}
    controller: {action: reverse, output: {to: TV-2014}, modes: {permitted: [manual, automatic]}}
    alarms: {high: {limit: 90 degC, deadband: 1 degC}}
  TI-2015:
    unit: "20"
    measurement: {transmitter: TT-2015, sensor: thermocouple type K, range: 0 to 400 degC}
final_elements:
  TV-2014: {unit: "20", kind: control valve, opens_on: rising signal, fails: closed, signal: 4-20 mA}
"""
# The accepted readings are 0.5 % of span off, 0.5 degC: common practice, the default of the policy.
GOOD = """\
format: 1
checks:
  - tag: TIC-2014
    date: 2026-11-30
    by: A. Meyer
    readings:
      measurement 0 %: {as_found: 0.5 degC, as_found_falling: -0.5 degC}
      measurement 25 %: {as_found: 25.2 degC, as_found_falling: 24.9 degC}
      high alarm: {as_found: 90.1 degC}
    functions:
      controller action: {result: pass}
"""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "plant").mkdir()
    (tmp_path / "plant" / "register.yaml").write_text(REGISTER, "utf-8")
    return tmp_path / "plant"


def checks_of(folder: Path) -> dict[str, LoopChecks]:
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    return plant_checks(Plant(loaded.register))


def records_in(text: str) -> tuple[LoopRecord, ...]:
    found = read_records(text.encode(), "results.yaml")
    assert all(isinstance(one, LoopRecord) for one in found), found
    return found  # type: ignore[return-value]


def judged(folder: Path, text: str) -> JudgedRecord:
    (record,) = records_in(text)
    return judge(checks_of(folder)[record.tag], record)


def command(*arguments: object) -> tuple[int, str, str]:
    out, err = io.StringIO(), io.StringIO()
    code = run(["record", *map(str, arguments)], out, err)
    return code, out.getvalue(), err.getvalue()


def recorded(tmp_path: Path, folder: Path, text: str, *more: str) -> tuple[int, str, str]:
    results = tmp_path / "results.yaml"
    results.write_text(text, "utf-8")
    return command(folder, results, *more)


# ---------------------------------------------------------------- verdicts


def verdicts(found: JudgedRecord, key: str) -> tuple[Verdict, Verdict | None]:
    one = next(one for one in found.readings if one.reading.key == key)
    return one.as_found, one.as_left


@pytest.mark.parametrize(
    ("values", "as_found", "as_left"),
    [
        ("as_found: 25.5 degC, as_found_falling: 24.5 degC", Verdict.PASS, None),  # both on the limit
        ("as_found: 25.51 degC, as_found_falling: 25 degC", Verdict.FAIL, None),
        ("as_found: 25 degC, as_found_falling: 24.49 degC", Verdict.FAIL, None),
        ("as_found: 25 degC", Verdict.NOT_DONE, None),  # never read falling
        ("as_found: 26 degC", Verdict.FAIL, None),
        ("as_found: 26 degC, as_found_falling: 26 degC, as_left: 25 degC, as_left_falling: 25 degC",
         Verdict.FAIL, Verdict.PASS),
        ("as_found: 26 degC, as_found_falling: 26 degC, as_left: 25 degC", Verdict.FAIL, Verdict.NOT_DONE),
        ("as_found: 25 degC, as_found_falling: 25 degC, as_left: 26 degC, as_left_falling: 25 degC",
         Verdict.PASS, Verdict.FAIL),
        ("as_found: 77 degF, as_found_falling: 298.15 K", Verdict.PASS, None),  # both are 25 degC
    ],
)  # fmt: skip
def test_a_reading_is_judged_both_ways(folder: Path, values: str, as_found: Verdict, as_left: Verdict | None) -> None:
    readings = f"{{measurement 25 %: {{{values}}}}}"
    text = f"format: 1\nchecks:\n  - {{tag: TIC-2014, date: 2026-11-30, by: A, readings: {readings}}}\n"
    assert verdicts(judged(folder, text), "measurement 25 %") == (as_found, as_left)


def complete(checks: LoopChecks) -> str:
    """A record in which everything is as it should be."""
    head = {"tag": checks.tag, "date": "2026-11-30", "by": "A. Meyer"}
    lines = ["format: 1", "checks:", f"  - tag: {head.pop('tag')}"]
    lines += [*(f"    {key}: {value}" for key, value in head.items()), "    readings:"]
    for one in checks.readings:
        value = f"{one.expected} {one.unit.symbol}"
        lines.append(f"      {one.key}: {{as_found: {value}{f', as_found_falling: {value}' if one.both_ways else ''}}}")
    lines.append("    functions:")
    lines += [f"      {one.key}: {{result: pass}}" for one in checks.functions]
    return "\n".join(lines) + "\n"


def test_a_loop_passes_only_where_everything_was_done(folder: Path) -> None:
    text = complete(checks_of(folder)["TIC-2014"])
    assert judged(folder, text).verdict is Verdict.PASS
    without = re.sub(r"      high alarm clears: .*\n", "", text)
    assert without != text
    assert judged(folder, without).verdict is Verdict.NOT_DONE
    assert judged(folder, text.replace("{result: pass}", "{result: not done}", 1)).verdict is Verdict.NOT_DONE
    assert judged(folder, text.replace("{result: pass}", "{result: fail}", 1)).verdict is Verdict.FAIL


def test_a_corrected_reading_passes_and_is_told(folder: Path, tmp_path: Path) -> None:
    text = complete(checks_of(folder)["TIC-2014"]).replace(
        "measurement 25 %: {as_found: 25.0 degC, as_found_falling: 25.0 degC}",
        "measurement 25 %: {as_found: 26 degC, as_found_falling: 26 degC, as_left: 25 degC, as_left_falling: 25 degC}",
    )
    code, out, _ = recorded(tmp_path, folder, text)
    assert code == 0
    assert "TIC-2014: pass (2026-11-30, A. Meyer)" in out
    assert "as found fail, as left pass" in out


def test_exit_code_and_summary(folder: Path, tmp_path: Path) -> None:
    code, out, _ = recorded(tmp_path, folder, GOOD)
    assert code == 0
    assert "TIC-2014: not done" in out
    assert "1 check read: 0 pass, 0 fail, 1 not complete; 1 of 2 loops not in these results." in out
    code, out, _ = recorded(tmp_path, folder, GOOD.replace("90.1 degC", "90.6 degC"))
    assert code == 1
    assert "high alarm: as found 90.6 degC; accepted 89.5 to 90.5 degC: as found fail" in out


def test_json_holds_every_reading(folder: Path, tmp_path: Path) -> None:
    code, out, _ = recorded(tmp_path, folder, GOOD, "--format", "json")
    document = json.loads(out)
    assert code == 0
    (check,) = document["checks"]
    checks = checks_of(folder)["TIC-2014"]
    assert [one["name"] for one in check["readings"]] == [one.key for one in checks.readings]
    by_name = {one["name"]: one for one in check["readings"]}
    assert by_name["measurement 0 %"]["as_found_verdict"] == "pass"
    assert by_name["measurement 0 %"]["as_left_verdict"] is None
    assert by_name["measurement 50 %"]["as_found_verdict"] == "not done"
    assert document["summary"] == {"pass": 0, "fail": 0, "not_done": 1, "loops": 2, "loops_without_results": 1}


# ---------------------------------------------------------------- what has changed since


@pytest.mark.parametrize(
    ("old", "new", "subject", "keys"),
    [
        ("range: 0 to 100 degC", "range: 0 to 120 degC", "range",
         {"measurement 0 %", "measurement 25 %", "high alarm"}),
        ("signal: 4-20 mA}\n    controller", "signal: 4-20 mA, tolerance: 1 %}\n    controller", "tolerance",
         {"measurement 0 %", "measurement 25 %", "high alarm"}),
        ("limit: 90 degC", "limit: 85 degC", "limit", {"high alarm"}),
    ],
)  # fmt: skip
def test_a_result_before_a_change_is_no_pass(
    folder: Path, tmp_path: Path, old: str, new: str, subject: str, keys: set[str]
) -> None:
    assert recorded(tmp_path, folder, GOOD, "--write")[0] == 0
    assert old in REGISTER
    (folder / "register.yaml").write_text(REGISTER.replace(old, new), "utf-8")
    kept = load_records(folder)
    assert isinstance(kept, dict)
    found = judge(checks_of(folder)["TIC-2014"], kept["TIC-2014"][-1])
    assert {one.reading.key for one in found.readings if one.changed == subject} == keys
    assert all(one.final is Verdict.NOT_DONE for one in found.readings if one.changed)
    view = view_of(folder, "TIC-2014")
    assert any(f"Before the change of {subject}, to be checked again" in line for line in view.last)


def test_a_function_checked_against_other_words_is_no_pass(folder: Path, tmp_path: Path) -> None:
    recorded(tmp_path, folder, GOOD, "--write")
    (folder / "register.yaml").write_text(REGISTER.replace("action: reverse", "action: direct"), "utf-8")
    kept = load_records(folder)
    assert isinstance(kept, dict)
    found = judge(checks_of(folder)["TIC-2014"], kept["TIC-2014"][-1])
    action = next(one for one in found.functions if one.check.key == "controller action")
    assert action.changed
    assert action.final is Verdict.NOT_DONE


# ---------------------------------------------------------------- keeping


def view_of(folder: Path, tag: str) -> RecordView:
    loaded, kept = load(folder), load_records(folder)
    assert isinstance(loaded, Loaded)
    assert isinstance(kept, dict)
    page = next(page for page in check_records(basis_of(loaded, kept)) if page.name == tag)
    view = page.view["record"]
    assert isinstance(view, RecordView)
    return view


def test_results_are_kept_and_the_next_record_shows_them(folder: Path, tmp_path: Path) -> None:
    assert view_of(folder, "TIC-2014").last == ()
    code, _, err = recorded(tmp_path, folder, GOOD, "--write")
    assert (code, err) == (0, "wrote records/TIC-2014.yaml\n")
    view = view_of(folder, "TIC-2014")
    assert view.last[0] == "Last results: 2026-11-30, A. Meyer: not complete."
    table = next(table for table in view.tables if table.title == "Measurement")
    assert [row[-1] for row in table.rows] == ["0.5; −0.5", "25.2; 24.9", "–", "–", "–"]
    assert view_of(folder, "TI-2015").last == ()


def test_what_is_kept_is_one_fact_a_line_and_valid(folder: Path, tmp_path: Path) -> None:
    recorded(tmp_path, folder, GOOD, "--write")
    text = (folder / "records" / "TIC-2014.yaml").read_text("utf-8")
    assert "      measurement 25 %:\n        expected: 25 degC\n        accept: 24.5 to 25.5 degC\n" in text
    assert "      controller action:\n        against: reverse\n        result: pass\n" in text
    assert "{" not in text
    file = read_text(text.encode(), "x")
    assert isinstance(file, TextFile)
    validator = jsonschema.Draft202012Validator(
        json.loads(schema_text()), format_checker=jsonschema.FormatChecker(["date"])
    )
    assert list(validator.iter_errors(file.data)) == []


def test_the_same_results_are_kept_once_and_others_are_added(folder: Path, tmp_path: Path) -> None:
    path = folder / "records" / "TIC-2014.yaml"
    recorded(tmp_path, folder, GOOD, "--write")
    path.write_text("# kept by hand\n" + path.read_text("utf-8").rstrip("\n"), "utf-8")
    before = path.read_text("utf-8")
    assert recorded(tmp_path, folder, GOOD, "--write")[2] == ""
    assert path.read_text("utf-8") == before
    recorded(tmp_path, folder, GOOD.replace("2026-11-30", "2027-01-15"), "--write")
    after = path.read_text("utf-8")
    assert after.startswith(before + "\n")
    kept = load_records(folder)
    assert isinstance(kept, dict)
    assert [record.date for record in kept["TIC-2014"]] == ["2026-11-30", "2027-01-15"]


def test_a_file_that_does_not_end_with_its_checks_is_left_alone(folder: Path, tmp_path: Path) -> None:
    path = folder / "records" / "TIC-2014.yaml"
    recorded(tmp_path, folder, GOOD, "--write")
    turned = "checks:\n" + path.read_text("utf-8").split("checks:\n")[1] + "format: 1\n"
    path.write_text(turned, "utf-8")
    code, _, err = recorded(tmp_path, folder, GOOD.replace("2026-11-30", "2027-01-15"), "--write")
    assert code == 2
    assert "does not end with its list of checks" in err
    assert path.read_text("utf-8") == turned


@pytest.mark.parametrize(
    "words",
    ["=1+1", "- a", "true", "a: b", "# not a comment", "12", 'He said "no"', "C-26", "{x}", "%", "naïve", "a  b"],
)
def test_any_words_come_back_as_they_were(words: str) -> None:
    quoted = json.dumps(words)
    (record,) = records_in(f"format: 1\nchecks: [{{tag: T-1, date: 2026-11-30, by: {quoted}, remarks: {quoted}}}]\n")
    assert record.by == words
    assert records_in(records_text([record])) == (record,)


def test_a_check_and_its_fingerprint_do_not_hang_on_records(folder: Path, tmp_path: Path) -> None:
    def checked() -> str:
        out = io.StringIO()
        run(["check", str(folder), "--format", "json"], out, io.StringIO())
        return out.getvalue()

    before = checked()
    recorded(tmp_path, folder, GOOD, "--write")
    (folder / "records" / "spoilt.yaml").write_text("nonsense: [", "utf-8")
    assert checked() == before
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    assert set(loaded.sources) == {"register.yaml"}


def test_a_spoilt_record_stops_the_issue_of_check_records_only(folder: Path, tmp_path: Path) -> None:
    (folder / "records").mkdir()
    (folder / "records" / "TIC-2014.yaml").write_text("format: 1\nchecks: [{tag: TIC-2014}]\n", "utf-8")
    out, err = io.StringIO(), io.StringIO()
    arguments = ["issue", str(folder), "--out", str(tmp_path / "out"), "--formats", "html", "--documents"]
    assert run([*arguments, "check-record"], out, err) == 2
    assert "records/TIC-2014.yaml:2:10: error: check 1 has no `by`" in err.getvalue()
    assert run([*arguments, "loop-sheet"], out, err) == 0


# ---------------------------------------------------------------- faults in YAML


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("25.2 degC", '"25,2 degC"', "results.yaml:8:36: error: `as_found` of the reading measurement 25 %: "
         "`25,2 degC` has a decimal comma\n    remedy: write `25.2 degC`"),
        ("25.2 degC", "25.2", "results.yaml:8:36: error: `as_found` of the reading measurement 25 % is the number "
         "25.2, without a unit"),
        ("25.2 degC", "25.2 barg", "results.yaml:8:36: error: TIC-2014 measurement 25 % is in `barg`\n"
         "    remedy: write it in `degC`"),
        ("high alarm:", "hgh alarm:", "results.yaml:9:18: error: TIC-2014 has no check `hgh alarm`\n"
         "    remedy: did you mean `high alarm`?"),
        ("as_found: 90.1", "as_found_falling: 90.1", "results.yaml:9:38: error: TIC-2014 high alarm is read once"),
        ("2026-11-30", "2026-11-31", "results.yaml:4:11: error: `date` of check 1 is `2026-11-31`"),
        ("TIC-2014", "TIC-9999", "results.yaml:3:10: error: the register has no loop `TIC-9999`"),
        ("result: pass", "result: ok", "results.yaml:11:35: error: `result` of the function check controller action is "
         "`ok`\n    remedy: write `pass`, `fail` or `not done`"),
        ("    by: A. Meyer\n", "", "results.yaml:3:5: error: check 1 has no `by`"),
        ("by: A. Meyer", "by: A. Meyer\n    ambient: 3 barg", "error: the ambient is in `barg`"),
        ("by: A. Meyer", "by: A. Meyer\n    reference_junction: 20 degC", "TIC-2014 is not measured by a thermocouple"),
        ("format: 1", "format: 2", "results.yaml:1:9: error: `format` is the number 2"),
        (GOOD, "[]", "results.yaml:1:1: error: a record file is a mapping of keys"),
        (GOOD, "a: [", "results.yaml:2:1: error: a value is missing here"),
    ],
)  # fmt: skip
def test_every_fault_has_its_place(folder: Path, tmp_path: Path, old: str, new: str, told: str) -> None:
    assert old in GOOD
    code, out, err = recorded(tmp_path, folder, GOOD.replace(old, new), "--write")
    assert (code, out) == (2, "")
    assert told in err
    assert not (folder / "records").exists()


@pytest.mark.parametrize("arguments", [[], ["--only", "TIC-2014"], ["x.yaml", "--blank", "b.xlsx"]])
def test_results_or_a_blank(folder: Path, arguments: list[str]) -> None:
    code, _, err = command(folder, *arguments)
    assert code == 2
    assert "name files of results, or --blank" in err


# ---------------------------------------------------------------- the workbook


def blank(folder: Path, tmp_path: Path, *more: str) -> bytes:
    path = tmp_path / "blank.xlsx"
    code, out, _ = command(folder, "--blank", path, *more)
    assert code == 0
    assert out.startswith(f"wrote {path}: ")
    return path.read_bytes()


def sheet_parts(content: bytes) -> dict[str, str]:
    """The XML of each sheet by the sheet's name."""
    with zipfile.ZipFile(io.BytesIO(content)) as archive:
        names = re.findall(r'<sheet name="([^"]+)"', archive.read("xl/workbook.xml").decode())
        return {name: archive.read(f"xl/worksheets/sheet{n}.xml").decode() for n, name in enumerate(names, 1)}


def replaced(content: bytes, part: str, change: dict[str, str]) -> bytes:
    """The workbook with texts replaced in one of its parts."""
    anew = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(content)) as archive, zipfile.ZipFile(anew, "w", zipfile.ZIP_DEFLATED) as out:
        for name in archive.namelist():
            text = archive.read(name)
            for old, new in change.items() if name == part else ():
                assert old.encode() in text, old
                text = text.replace(old.encode(), new.encode(), 1)
            out.writestr(name, text)
    return anew.getvalue()


def filled(content: bytes, tag: str, cells: dict[str, object]) -> bytes:
    """A blank with values written into cells, as a spreadsheet program writes them."""
    names = list(sheet_parts(content))
    part = f"xl/worksheets/sheet{names.index(tag) + 1}.xml"
    text = sheet_parts(content)[tag]
    change = {}
    for address, value in cells.items():
        cell = re.search(rf'<c r="{address}"( s="\d+")?(?:/>|( t="\w+")?><v>[^<]*</v></c>)', text)
        assert cell, address
        if isinstance(value, int | float):
            new = f'<c r="{address}"{cell[1] or ""}><v>{value}</v></c>'
        else:
            new = f'<c r="{address}"{cell[1] or ""} t="inlineStr"><is><t>{escape(str(value))}</t></is></c>'
        change[cell[0]] = new
    return replaced(content, part, change)


# Where things stand in the sheet of TIC-2014: heads in B2 to B9, readings from row 12, functions below them.
HEADS: dict[str, object] = {"B2": "2026-11-30", "B3": "A. Meyer", "B5": "Decade box DB-7", "B8": 18.5}


def rows_of(checks: LoopChecks) -> dict[str, int]:
    """Row of each reading and function in the sheet of a loop, counted from 1."""
    first = 11 + 1
    rows = {one.key: first + index for index, one in enumerate(checks.readings)}
    start = first + len(checks.readings) + 2
    return rows | {one.key: start + index for index, one in enumerate(checks.functions)}


def test_the_blank_has_a_sheet_for_each_loop(folder: Path, tmp_path: Path) -> None:
    content = blank(folder, tmp_path)
    assert list(sheet_parts(content)) == ["Read me", "TIC-2014", "TI-2015"]
    assert blank(folder, tmp_path) == content
    assert list(sheet_parts(blank(folder, tmp_path, "--only", "TI-2015"))) == ["Read me", "TI-2015"]
    code, _, err = command(folder, "--blank", tmp_path / "x.xlsx", "--only", "TI-9")
    assert (code, err) == (2, "loopdoc: the register has no loop TI-9\n")


def test_a_blank_as_it_is_holds_no_results(folder: Path, tmp_path: Path) -> None:
    found = read_workbook(blank(folder, tmp_path), "b.xlsx", ["TIC-2014", "TI-2015"])
    assert found == (RecordFault("b.xlsx", "no sheet holds results", "fill in a sheet: date, who, and what was found"),)


def test_round_trip_from_the_blank_to_the_next_record(folder: Path, tmp_path: Path) -> None:
    rows = rows_of(checks_of(folder)["TIC-2014"])
    content = filled(
        blank(folder, tmp_path),
        "TIC-2014",
        HEADS
        | {
            f"F{rows['measurement 0 %']}": 0.5,
            f"G{rows['measurement 0 %']}": -0.5,
            f"F{rows['measurement 25 %']}": 26,
            f"G{rows['measurement 25 %']}": 25,
            f"H{rows['measurement 25 %']}": 25.1,
            f"I{rows['measurement 25 %']}": 25,
            f"E{rows['controller action']}": "pass",
            f"E{rows['TV-2014 without air']}": "fail",
            f"F{rows['TV-2014 without air']}": "=HYPERLINK(1) sticks",
        },
    )
    path = tmp_path / "filled.xlsx"
    path.write_bytes(content)
    code, out, err = command(folder, path, "--write")
    assert err == "wrote records/TIC-2014.yaml\n"
    assert code == 1  # a function failed
    assert "TV-2014 without air: fail (=HYPERLINK(1) sticks)" in out
    kept = load_records(folder)
    assert isinstance(kept, dict)
    (record,) = kept["TIC-2014"]
    assert (record.date, record.by, record.instrument) == ("2026-11-30", "A. Meyer", "Decade box DB-7")
    assert str(record.ambient) == "18.5 degC"
    reading = record.readings["measurement 25 %"]
    assert [str(value) for value in (reading.as_found, reading.as_found_falling, reading.as_left)] == [
        "26 degC", "25 degC", "25.1 degC",
    ]  # fmt: skip
    assert record.functions["TV-2014 without air"].against == "closed"
    last = view_of(folder, "TIC-2014").last
    assert last[0] == "Last results: 2026-11-30, A. Meyer with Decade box DB-7: FAILED."
    assert last[1] == "Out of tolerance as found and put right: measurement 25 %."
    assert command(folder, path, "--write")[2] == ""  # the second time there is nothing new


def test_a_date_of_the_spreadsheet_program_is_read(folder: Path, tmp_path: Path) -> None:
    content = io.BytesIO()
    book = Workbook(content, {"in_memory": True})
    sheet = book.add_worksheet("TIC-2014")
    for row, (label, value) in enumerate((("Loop", "TIC-2014"), ("Date", None), ("Tested by", "A"))):
        sheet.write(row, 0, label)
        sheet.write(row, 1, value)
    sheet.write_datetime(1, 1, datetime.datetime(2026, 11, 30), book.add_format({"num_format": "d.m.yyyy"}))
    book.close()
    (record,) = read_workbook(content.getvalue(), "b.xlsx", ["TIC-2014"])
    assert isinstance(record, LoopRecord)
    assert record.date == "2026-11-30"


@pytest.mark.parametrize(
    ("cells", "told"),
    [
        ({"F12": "25,1"}, "cell F12: error: measurement 0 % is the text `25,1` with a decimal comma, not a number"),
        ({"F12": "25.1"}, "cell F12: error: measurement 0 % is the text `25.1`, not a number"),
        ({"F12": "0.2 degC"}, "cell F12: error: measurement 0 % is `0.2 degC`, not a number"),
        ({"F12": "=cmd|' /C calc'!A0"}, "cell F12: error: measurement 0 % is `=cmd|' /C calc'!A0`, not a number"),
        ({"B2": "30.11.2026", "F12": 1}, "cell B2: error: the date is `30.11.2026`"),
        ({"B2": 46356, "F12": 1}, "cell B2: error: the date is `46356.0`"),
        ({"B1": "TIC-2041", "F12": 1}, "cell B1: error: the register has no loop `TIC-2041`\n    remedy: did you mean"),
        ({"A1": "Pump", "F12": 1}, "cell A1: error: this is not a sheet of a blank"),
        ({"D12": "", "F12": 1}, "cell D12: error: `Accept to` of measurement 0 % is empty"),
        ({"E12": "furlong", "F12": 1}, "cell E12: error: the unit of measurement 0 % is `furlong`"),
        ({"A13": "measurement 7 %", "F13": 1}, "cell A13: error: TIC-2014 has no check `measurement 7 %`"),
        ({"B3": "A\u202eB", "F12": 1}, "cell B3: error: `Tested by` holds a control character"),
        ({"B3": "A" * 3000, "F12": 1}, "cell B3: error: `Tested by` has more than 2000 characters"),
        ({"D11": "Most", "F12": 1}, "cell A11: error: the column `Accept to` is missing"),
    ],
)
def test_a_hostile_or_careless_cell_is_named(folder: Path, tmp_path: Path, cells: dict[str, object], told: str) -> None:
    path = tmp_path / "filled.xlsx"
    path.write_bytes(filled(blank(folder, tmp_path), "TIC-2014", {**HEADS, **cells}))
    code, out, err = command(folder, path, "--write")
    assert (code, out) == (2, "")
    assert told in err
    assert err.startswith("filled.xlsx, sheet TIC-2014, ")
    assert not (folder / "records").exists()


def test_results_without_a_date_are_refused(folder: Path, tmp_path: Path) -> None:
    content = filled(blank(folder, tmp_path), "TIC-2014", {"F12": 0.1})
    found = read_workbook(content, "b.xlsx", ["TIC-2014", "TI-2015"])
    assert [(one.place, one.message) for one in found if isinstance(one, RecordFault)] == [
        ("b.xlsx, sheet TIC-2014, cell B2", "`Date` of TIC-2014 is empty"),
        ("b.xlsx, sheet TIC-2014, cell B3", "`Tested by` of TIC-2014 is empty"),
    ]


def test_a_workbook_of_another_kind_is_refused(tmp_path: Path) -> None:
    content = io.BytesIO()
    book = Workbook(content, {"in_memory": True})
    book.add_worksheet("Prices").write(0, 0, "Gravel")
    book.close()
    (fault,) = read_workbook(content.getvalue(), "b.xlsx", ["TIC-2014"])
    assert isinstance(fault, RecordFault)
    assert fault.place == "b.xlsx, sheet Prices, cell A1"


def message(content: bytes) -> str:
    (fault,) = read_workbook(content, "b.xlsx", ["TIC-2014", "TI-2015"])
    assert isinstance(fault, RecordFault)
    assert fault.place == "b.xlsx"
    return fault.message


def archive_of(parts: dict[str, bytes]) -> bytes:
    content = io.BytesIO()
    with zipfile.ZipFile(content, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, part in parts.items():
            archive.writestr(name, part)
    return content.getvalue()


def test_an_archive_that_swells_is_not_unpacked() -> None:
    swollen = archive_of({"xl/worksheets/sheet1.xml": b" " * (MAX_UNPACKED + 1)})
    assert len(swollen) < 100_000
    assert "unpacks to more than 64 MiB" in message(swollen)
    assert "parts" in message(archive_of({f"x{n}.xml": b"" for n in range(MAX_PARTS + 1)}))


def test_an_archive_that_lies_about_its_size_is_refused(folder: Path, tmp_path: Path) -> None:
    # The stated size of a part is 24 bytes into its entry in the archive's directory, as the ZIP format has it.
    content = bytearray(archive_of({"xl/worksheets/sheet1.xml": b"<a>" + b" " * 100_000 + b"</a>"}))
    entry = content.rindex(b"PK\x01\x02")
    content[entry + 24 : entry + 28] = (3).to_bytes(4, "little")
    assert message(bytes(content)) == "the workbook is damaged or locked"


@pytest.mark.parametrize("far", [f"A{MAX_ROWS + 1}", "XFD1048576", f"CW{MAX_COLUMNS}"])
def test_a_cell_far_out_is_refused(folder: Path, tmp_path: Path, far: str) -> None:
    content = blank(folder, tmp_path)
    row = re.sub("[A-Z]", "", far)
    cell = f'<row r="{row}"><c r="{far}"><v>1</v></c></row></sheetData>'
    assert "something at" in message(replaced(content, "xl/worksheets/sheet2.xml", {"</sheetData>": cell}))


def test_entities_in_the_xml_are_refused(folder: Path, tmp_path: Path) -> None:
    change = {"<worksheet": '<!DOCTYPE a [<!ENTITY b "b">]><worksheet'}
    assert "entities" in message(replaced(blank(folder, tmp_path), "xl/worksheets/sheet2.xml", change))


@pytest.mark.parametrize("content", [b"", b"tag,date\n", b"PK\x03\x04 nothing more", b"\xd0\xcf\x11\xe0" * 200])
def test_what_is_no_workbook_is_refused(content: bytes) -> None:
    assert re.search("not an .xlsx workbook|damaged", message(content))


def test_an_archive_without_a_workbook_is_refused() -> None:
    assert message(archive_of({"notes.xml": b"<a/>"})) == "the workbook cannot be read"
    assert "is not XML" in message(archive_of({"xl/worksheets/sheet1.xml": b"<a>"}))


def test_text_of_the_register_is_no_formula_in_the_blank() -> None:
    reading = Reading("=1+1", "alarm", "limit", "@SUM(1)", UNITS["degC"], 1.0, 0.0, 2.0)
    content = blank_workbook([LoopChecks("=2+2", (reading,), ())], guide=["=3+3", "https://example.com"])
    with zipfile.ZipFile(io.BytesIO(content)) as archive:
        for name in archive.namelist():
            assert b"<f>" not in archive.read(name), name
            assert b"<hyperlink " not in archive.read(name), name


def test_the_blank_of_the_demo_is_read_back_whole(tmp_path: Path) -> None:
    shutil.copytree(DEMO, tmp_path / "demo")
    content = blank(tmp_path / "demo", tmp_path)
    sheets = sheet_parts(content)
    assert len(sheets) == 41
    tags = list(checks_of(tmp_path / "demo"))
    found = read_workbook(filled(content, "PIC-2021", HEADS | {"F12": 0.001, "G12": 0.0}), "b.xlsx", tags)
    assert [(one.tag, list(one.readings)) for one in found if isinstance(one, LoopRecord)] == [
        ("PIC-2021", ["measurement 0 %"])
    ]


def test_functions_of_a_workbook_were_checked_against_the_register_as_it_is(tmp_path: Path) -> None:
    """FIC-2011 of the demo: its interlock acts on two tags, whose printed values hold blanks that no workbook keeps."""
    shutil.copytree(DEMO, tmp_path / "demo")
    checks = checks_of(tmp_path / "demo")
    rows = rows_of(checks["FIC-2011"])
    passed = {f"E{rows[one.key]}": "pass" for one in checks["FIC-2011"].functions}
    content = filled(blank(tmp_path / "demo", tmp_path), "FIC-2011", HEADS | passed)
    (record,) = read_workbook(content, "b.xlsx", list(checks))
    assert isinstance(record, LoopRecord)
    judged = judge(checks["FIC-2011"], record)
    assert len(judged.functions) == len(checks["FIC-2011"].functions) > 10
    assert all(one.final is Verdict.PASS for one in judged.functions)


def test_a_check_record_carries_its_results_and_is_stale_when_others_come(folder: Path, tmp_path: Path) -> None:
    recorded(tmp_path, folder, GOOD, "--write")
    out, err = io.StringIO(), io.StringIO()
    issued = tmp_path / "issued"
    arguments = ["issue", str(folder), "--out", str(issued), "--documents", "check-record", "--formats", "pdf"]
    assert run([*arguments, "--jobs", "1"], out, err) == 0, err.getvalue()

    def attested() -> str:
        told = io.StringIO()
        run(["attest", str(issued / "check-records" / "TIC-2014.pdf"), str(folder)], told, io.StringIO())
        return told.getvalue()

    assert "yes          the pages are those that it gives, byte for byte" in attested()
    assert "stale" not in attested()
    recorded(tmp_path, folder, GOOD.replace("2026-11-30", "2027-01-15"), "--write")
    assert "yes          the pages are those that it gives, byte for byte" in attested()
    assert "stale: results of loop checks have been added or changed since" in attested()
