"""Each form in which `loopdoc check` reports, as its reader would take it."""

from __future__ import annotations

import io
import json
import re
import unicodedata
from collections import Counter
from dataclasses import replace
from pathlib import Path
from typing import Any
from urllib.parse import unquote
from xml.etree import ElementTree

import jsonschema
import pytest
from hypothesis import given
from hypothesis import strategies as st
from markdown_it import MarkdownIt

from loopdoc.cli import run
from loopdoc.engineering.pairing import Plant
from loopdoc.exchange.code_quality import as_code_quality
from loopdoc.exchange.findings import as_json, as_text
from loopdoc.exchange.junit import as_junit
from loopdoc.exchange.markdown import as_markdown
from loopdoc.exchange.sarif import MAX_RESULTS, as_sarif
from loopdoc.exchange.source_lines import SHOWN_COLUMNS, SourceLines, columns
from loopdoc.register.load import Loaded, load
from loopdoc.register.place import Place
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.check import INTERNAL, check
from loopdoc.rules.finding import CheckResult, Coverage, Finding, Level

ROOT = Path(__file__).parent.parent
BASE = (ROOT / "tests" / "rules" / "base-register.yaml").read_text("utf-8")
SARIF_SCHEMA = json.loads((ROOT / "tests" / "data" / "sarif-schema-2.1.0.json").read_text("utf-8"))
FORMATS = ("text", "json", "sarif", "junit", "markdown", "code-quality")
# The output limit of a primary beyond the setpoint limit of its secondary, a value held, and one accepted finding.
BROKEN = BASE.replace("high: 10.5 t/h}", "high: 12.5 t/h}").replace(
    "stroke_time: 6 s", "stroke_time: {hold: vendor}", 1
)


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def call(*argv: object, stdout: io.StringIO | None = None) -> tuple[int, str, str]:
    out, err = stdout or io.StringIO(), io.StringIO()
    code = run([str(argument) for argument in argv], out, err)
    return code, out.getvalue(), err.getvalue()


@pytest.fixture
def broken(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A register with findings in the folder `plant a` of the current one."""
    folder = tmp_path / "plant a"
    folder.mkdir()
    (folder / "register.yaml").write_text(BROKEN, "utf-8")
    monkeypatch.chdir(tmp_path)
    return folder


def result_of(folder: Path) -> CheckResult:
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    return check(Plant(loaded.register), loaded.faults)


# ---------------------------------------------------------------- many holds of one reason


def test_many_holds_of_one_reason_are_told_together_to_people_and_one_by_one_to_programs(tmp_path: Path) -> None:
    """Four valves of one vendor and one of another: the four share a head, the one keeps its line and caret."""
    valves = [f"FV-200{number}" for number in range(4)]
    elements = [f"  {tag}: {{kind: control valve, stroke_time: {{hold: asked of the vendor}}}}" for tag in valves]
    elements += ["  FV-2004: {kind: control valve, fails: {hold: hazard study}}"]
    (tmp_path / "register.yaml").write_text("\n".join(["format: 1", "final_elements:", *elements, ""]), "utf-8")
    text = call("check", tmp_path, "--only", "hold-open")[1]
    assert text.count("hold-open") == 2
    assert "register.yaml:3:34: note: hold-open: 4 values on hold: asked of the vendor\n" in text
    assert f"    stroke_time: {', '.join(valves)}\n" in text
    assert "register.yaml:7:34: note: hold-open: FV-2004: `fails` is on hold: hazard study\n      7 |" in text
    table = call("check", tmp_path, "--only", "hold-open", "--format", "markdown")[1]
    assert f"4 values on hold: asked of the vendor<br>`stroke_time`: {', '.join(valves)} |" in table.replace("\\", "")
    found = json.loads(call("check", tmp_path, "--only", "hold-open", "--format", "json")[1])["findings"]
    assert [one["tag"] for one in found] == [*valves, "FV-2004"]


# ---------------------------------------------------------------- text: line and caret


@pytest.mark.parametrize(
    ("text", "column", "shown", "before"),
    [
        ("    range: 0 to 12 t/h", 12, "    range: 0 to 12 t/h", 11),
        ("a:\tb", 4, "a:    b", 6),  # a tab is shown as four blanks
        ("反応器: x", 6, "反応器: x", 8),  # three signs of two columns, colon, blank
        ("e\u0301: x", 5, "e\u0301: x", 3),  # a combining accent has no column of its own
        ("a\u200bb: x", 6, "a\\u200bb: x", 10),  # an unseen character is written out in six
        ("a: b   ", 4, "a: b", 3),
        ("a: b", 40, "a: b", 4),
    ],
)
def test_a_caret_stands_under_its_place(text: str, column: int, shown: str, before: int) -> None:
    excerpt = SourceLines({"r.yaml": f"first\n{text}\nlast".encode()}).excerpt(Place("r.yaml", 2, column))
    assert excerpt == (shown, " " * before)


@given(st.integers(1, 400), st.integers(1, 400))
def test_a_long_line_is_shown_around_its_place(length: int, column: int) -> None:
    text = "".join(chr(ord("0") + at % 75) for at in range(length))
    column = min(column, length)
    excerpt = SourceLines({"r.yaml": text.encode()}).excerpt(Place("r.yaml", 1, column))
    assert excerpt is not None
    line, before = excerpt
    assert line[len(before)] == text[column - 1]
    assert columns(line) <= SHOWN_COLUMNS + 2  # the two marks of omission
    assert line.strip("…") in text


def test_lines_of_a_file_with_a_mark_at_its_start_and_two_characters_at_line_ends() -> None:
    lines = SourceLines({"r.yaml": b"\xef\xbb\xbfa: 1\r\nb: 2\r\n"})
    assert lines.excerpt(Place("r.yaml", 1, 4)) == ("a: 1", "   ")
    assert lines.excerpt(Place("r.yaml", 2, 4)) == ("b: 2", "   ")
    assert lines.excerpt(Place("other.yaml", 1, 1)) is None
    assert lines.excerpt(Place("r.yaml", 9, 1)) is None


def test_text_shows_the_line_of_the_finding_and_of_what_belongs_to_it(broken: Path) -> None:
    code, out, _ = call("check", broken)
    lines = out.splitlines()
    # A caret on a wrapped line points at nothing; terminals and the logs of build servers have 100 columns and more.
    assert all(columns(line) <= 100 for line in lines if re.match(r" {2,}\d* \| ", line))
    at = next(number for number, line in enumerate(lines) if "output-limit-outside-setpoint" in line)
    where = re.match(r"register\.yaml:(\d+):(\d+): error: ", lines[at])
    assert where
    source = BROKEN.splitlines()[int(where[1]) - 1]
    assert lines[at + 1] == f"{where[1]:>7} | {source}"
    assert lines[at + 2] == " " * 7 + " | " + " " * (int(where[2]) - 1) + "^"
    assert source[int(where[2]) - 1 :].startswith("12.5 t/h")
    assert code == 1


@pytest.mark.parametrize(
    ("terminal", "environment", "coloured"),
    [
        (True, {}, True),
        (False, {}, False),
        (True, {"NO_COLOR": "1"}, False),
        (True, {"NO_COLOR": ""}, True),
        (False, {"FORCE_COLOR": "1"}, True),
        (False, {"FORCE_COLOR": ""}, False),
        (True, {"TERM": "dumb"}, False),
    ],
)
def test_colour_is_for_a_terminal_that_wants_it(
    terminal: bool, environment: dict[str, str], coloured: bool, broken: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for name in ("NO_COLOR", "FORCE_COLOR", "TERM"):
        monkeypatch.delenv(name, raising=False)
    for name, value in environment.items():
        monkeypatch.setenv(name, value)
    out = call("check", broken, stdout=Terminal() if terminal else None)[1]
    plain = re.sub(r"\x1b\[[\d;]*m", "", out)
    assert (plain != out) is coloured
    assert "\x1b" not in plain
    assert plain == as_text(result_of(broken), {"register.yaml": BROKEN.encode()})


def test_text_that_is_no_register_is_shown_with_its_line_too(broken: Path) -> None:
    (broken / "register.yaml").write_text("format: 1\nsite: {name: [}\n", "utf-8")
    code, out, err = call("check", broken)
    assert (code, out) == (2, "")
    assert "      2 | site: {name: [}" in err


# ---------------------------------------------------------------- SARIF


def validate(document: Any) -> None:
    jsonschema.Draft4Validator(SARIF_SCHEMA, format_checker=jsonschema.Draft4Validator.FORMAT_CHECKER).validate(
        document
    )


@pytest.mark.parametrize("name", ["tarn-hollow", "tennessee-eastman"])
def test_sarif_of_the_examples_is_valid(name: str) -> None:
    document = json.loads(as_sarif(result_of(ROOT / "examples" / name), folder=""))
    validate(document)
    (run_,) = document["runs"]
    rules = run_["tool"]["driver"]["rules"]
    assert [rule["id"] for rule in rules] == [rule.id for rule in RULES]
    assert all(rule["help"]["text"] and rule["help"]["markdown"] for rule in rules)
    for result in run_["results"]:
        assert rules[result["ruleIndex"]]["id"] == result["ruleId"]
        assert result["message"]["text"].strip()


def test_sarif_tells_places_from_the_current_folder_in_a_uri(broken: Path) -> None:
    code, out, _ = call("check", broken, "--format", "sarif")
    document = json.loads(out)
    validate(document)
    (run_,) = document["runs"]
    assert code == 1
    (result,) = [one for one in run_["results"] if one["ruleId"] == "output-limit-outside-setpoint"]
    place = result["locations"][0]["physicalLocation"]
    assert place["artifactLocation"] == {"uri": "plant%20a/register.yaml", "uriBaseId": "%SRCROOT%"}
    line = BROKEN.splitlines()[place["region"]["startLine"] - 1]
    assert line[place["region"]["startColumn"] - 1 :].startswith("12.5 t/h")
    (related,) = result["relatedLocations"]
    assert related["message"]["text"]
    assert result["locations"][0]["logicalLocations"] == [
        {"name": "TIC-2014", "fullyQualifiedName": "loops/TIC-2014/controller/output/high"}
    ]


def fingerprints(folder: Path) -> Counter[str]:
    document = json.loads(as_sarif(result_of(folder), folder=""))
    return Counter(result["partialFingerprints"]["rulePathOrdinal/v1"] for result in document["runs"][0]["results"])


def test_a_fingerprint_outlives_a_moved_line_and_a_renamed_file(broken: Path) -> None:
    (broken / "register.yaml").write_text(BROKEN.replace("action: reverse", "action: direct"), "utf-8")
    before = fingerprints(broken)
    assert len(before) > 2
    assert set(before.values()) == {1}
    text = (broken / "register.yaml").read_text("utf-8")
    (broken / "register.yaml").write_text(f"# a line more\n\n{text}", "utf-8")
    assert fingerprints(broken) == before
    (broken / "register.yaml").rename(broken / "other.yaml")
    assert fingerprints(broken / "other.yaml") == before


def test_sarif_shows_an_accepted_finding_as_suppressed_with_its_reason() -> None:
    document = json.loads(as_sarif(result_of(ROOT / "examples" / "tarn-hollow"), folder=""))
    suppressed = [result for result in document["runs"][0]["results"] if "suppressions" in result]
    assert len(suppressed) == len(result_of(ROOT / "examples" / "tarn-hollow").accepted) > 0
    for result in suppressed:
        (suppression,) = result["suppressions"]
        assert suppression["status"] == "accepted"
        assert "approved by" in suppression["justification"]


def test_sarif_names_what_was_not_checked() -> None:
    result = result_of(ROOT / "examples" / "tarn-hollow")
    document = json.loads(as_sarif(result, folder=""))
    told = document["runs"][0]["invocations"][0]["toolExecutionNotifications"]
    unchecked = {rule for rule, entry in result.coverage.items() if entry.not_checked}
    assert {one["associatedRule"]["id"] for one in told} == unchecked
    assert any("the stroke time is on hold" in one["message"]["text"] for one in told)


def made_up(number: int, level: Level) -> Finding:
    return Finding("hold-open", level, f"X-{number}", "message", "remedy", Place("register.yaml", number, 1))


def test_sarif_holds_no_more_results_than_a_forge_takes_and_drops_the_least() -> None:
    notes = tuple(made_up(number, Level.NOTE) for number in range(1, MAX_RESULTS + 1))
    errors = tuple(made_up(number, Level.ERROR) for number in range(MAX_RESULTS + 1, MAX_RESULTS + 8))
    result = CheckResult(notes + errors, (), {"hold-open": Coverage(checked=1)})
    (run_,) = json.loads(as_sarif(result, folder=""))["runs"]
    levels = Counter(one["level"] for one in run_["results"])
    assert levels == {"error": 7, "note": 25_000 - 7}
    (told,) = run_["invocations"][0]["toolExecutionNotifications"]
    assert told["message"]["text"].startswith("7 findings of the lowest levels left out")


# ---------------------------------------------------------------- JUnit, Markdown, code quality


def junit(result: CheckResult, least: Level | None = Level.ERROR) -> ElementTree.Element:
    return ElementTree.fromstring(as_junit(result, folder="", least=least))


def cases_of(suites: ElementTree.Element) -> dict[str, ElementTree.Element]:
    return {case.attrib["name"]: case for case in suites.iter("testcase")}


def test_junit_has_a_case_a_rule_and_counts_them(broken: Path) -> None:
    suites = junit(result_of(broken))
    cases = cases_of(suites)
    assert {rule.id for rule in RULES} <= cases.keys() | {name.removesuffix(" (not checked)") for name in cases}
    (suite,) = suites
    for counted, tag in (("tests", "testcase"), ("failures", "failure"), ("errors", "error"), ("skipped", "skipped")):
        assert int(suites.attrib[counted]) == int(suite.attrib[counted]) == len(list(suite.iter(tag)))
    failure = cases["output-limit-outside-setpoint"].find("failure")
    assert failure is not None
    assert failure.attrib["type"] == "error"
    assert re.search(r"register\.yaml:\d+:\d+: error: TIC-2014: ", failure.text or "")
    assert "remedy: " in (failure.text or "")


@pytest.mark.parametrize(("fail_on", "failing"), [("error", False), ("note", True), ("never", False)])
def test_junit_fails_what_the_exit_code_fails(fail_on: str, failing: bool, broken: Path) -> None:
    out = call("check", broken, "--format", "junit", "--fail-on", fail_on)[1]
    case = cases_of(ElementTree.fromstring(out))["hold-open"]
    assert (case.find("failure") is not None) is failing
    assert (case.find("system-out") is None) is failing


def test_junit_shows_what_was_not_checked_as_skipped_never_as_passed(broken: Path) -> None:
    cases = cases_of(junit(result_of(broken)))
    skipped = cases["stroke-too-slow (not checked)"].find("skipped")
    assert skipped is not None
    assert skipped.attrib["message"] == "not checked in 1 place: the stroke time is on hold (1)"
    nothing = cases_of(junit(CheckResult((), (), {"hold-open": Coverage()})))["hold-open"].find("skipped")
    assert nothing is not None


def test_junit_calls_a_defect_of_the_program_an_error() -> None:
    defect = replace(made_up(1, Level.ERROR), rule=INTERNAL)
    suites = junit(CheckResult((defect,), (), {"hold-open": Coverage()}))
    assert suites.attrib["errors"] == "1"
    assert cases_of(suites)[INTERNAL].find("error") is not None


def tables(markdown: str) -> list[list[list[str]]]:
    """Text of each cell of each row of each table, heads left out."""
    found: list[list[list[str]]] = []
    inside = False
    for token in MarkdownIt("gfm-like").parse(markdown):
        if token.type in ("tbody_open", "tbody_close"):
            inside = token.type == "tbody_open"
            found.extend([[]] if inside else [])
        elif inside and token.type == "tr_open":
            found[-1].append([])
        elif inside and token.type == "inline":
            found[-1][-1].append("".join(part.content for part in token.children or []))
    return found


def test_markdown_has_a_table_a_level_with_place_message_and_remedy(broken: Path) -> None:
    result = result_of(broken)
    text = call("check", broken, "--format", "markdown")[1]
    errors, *_, unchecked = tables(text)
    assert len(errors) == result.count(Level.ERROR)
    finding = next(one for one in result.findings if one.rule == "output-limit-outside-setpoint")
    row = next(row for row in errors if row[2] == finding.rule)
    assert row[0].startswith(f"plant a/register.yaml:{finding.place.line}")
    assert row[1] == "TIC-2014"
    assert (row[3], row[4]) == (finding.message.replace("`", ""), finding.remedy.replace("`", ""))
    assert ["stroke-too-slow", "1", "the stroke time is on hold (1 of 1)"] in unchecked


def test_markdown_of_many_findings_says_how_many_it_leaves_out() -> None:
    findings = tuple(made_up(number, Level.NOTE) for number in range(1, 1001))
    (rows,) = tables(as_markdown(CheckResult(findings, (), {}), folder=""))
    assert rows[-1][3] == f"and {1001 - len(rows)} more"


def test_code_quality_has_the_fields_that_the_forge_reads(broken: Path) -> None:
    issues = json.loads(call("check", broken, "--format", "code-quality")[1])
    assert len(issues) == len(result_of(broken).findings)
    assert len({issue["fingerprint"] for issue in issues}) == len(issues)
    for issue in issues:
        assert issue["description"]
        assert issue["check_name"] in {rule.id for rule in RULES}
        assert issue["severity"] in {"info", "minor", "major", "critical", "blocker"}
        assert Path(issue["location"]["path"]).is_file()
        assert issue["location"]["lines"]["begin"] >= 1


# ---------------------------------------------------------------- every form


@pytest.mark.parametrize("form", FORMATS[1:])
def test_a_text_that_is_no_register_is_reported_in_every_form_and_exits_2(form: str, broken: Path) -> None:
    (broken / "register.yaml").write_text("format: 1\nsite:\n\tname: x\n", "utf-8")
    code, out, err = call("check", broken, "--format", form)
    assert code == 2
    assert "a tab is used for indentation" in out
    assert "a tab is used for indentation" in err
    if form == "sarif":
        document = json.loads(out)
        validate(document)
        assert document["runs"][0]["invocations"][0]["executionSuccessful"] is False
        assert document["runs"][0]["results"][0]["locations"][0]["physicalLocation"]["region"]["startLine"] == 3


HOSTILE = "`]]> <b>@ops</b> | [a](https://example.com) \\u202e \\u200b ##vso[task.x]y & \\U000e0041"


@pytest.mark.parametrize("name", ["\x1b[2J\u202e`|@x <b>.yaml", "::error ::x.yaml", "a\nb.yaml"])
@pytest.mark.parametrize("form", FORMATS)
def test_a_hostile_register_commands_nothing_in_any_form(form: str, name: str, broken: Path) -> None:
    text = BROKEN.replace("to: FIC-2011", f"to: {HOSTILE!r}")
    head, separator, rest = text.partition("loops:\n")
    (broken / "register.yaml").write_text(f'include: ["*.yaml"]\n{head}', "utf-8")
    (broken / name).write_text(separator + rest, "utf-8")
    code, out, err = call("check", broken, "--format", form)
    assert code == 1, err
    unseen = {character for character in out if unicodedata.category(character) in {"Cc", "Cf", "Cs", "Cn"}} - {"\n"}
    assert unseen == set()
    assert not re.search(r"^\s*::|##vso\[", out, re.MULTILINE)
    match form:
        case "json":
            assert {finding["file"] for finding in json.loads(out)["findings"]} >= {name}
        case "sarif":
            validate(json.loads(out))
            results = json.loads(out)["runs"][0]["results"]
            places = [one["locations"][0]["physicalLocation"]["artifactLocation"]["uri"] for one in results]
            assert all(re.fullmatch(r"[\w%./~-]+", place) for place in places)
            assert f"plant a/{name}" in {unquote(place) for place in places}
        case "junit":
            assert ElementTree.fromstring(out).attrib["name"] == "loopdoc check"
        case "markdown":
            assert {len(row) for table in tables(out)[:-1] for row in table} == {5}
            plain = [
                part
                for token in MarkdownIt("gfm-like").parse(out)
                for part in token.children or []
                if part.type != "code_inline"
            ]
            assert {part.type for part in plain} <= {"text", "text_special", "html_inline"}
            assert {part.content for part in plain if part.type == "html_inline"} <= {"<br>"}
            assert not [part for part in plain if re.search(r"@\w", part.content)]
        case "code-quality":
            assert {issue["location"]["path"] for issue in json.loads(out)} >= {f"plant a/{name}"}


def test_every_form_says_the_same_count(broken: Path) -> None:
    result = result_of(broken)
    count = len(result.findings)
    assert count > 1
    assert len(json.loads(as_json(result))["findings"]) == count
    assert len(json.loads(as_code_quality(result, folder=""))) == count
    assert len(json.loads(as_sarif(result, folder=""))["runs"][0]["results"]) == count + len(result.accepted)
    failures = junit(result, Level.NOTE).iter("failure")
    assert sum(len(re.findall(r"^  remedy: ", failure.text or "", re.MULTILINE)) for failure in failures) == count
    levels = len({finding.level for finding in result.findings})
    assert sum(map(len, tables(as_markdown(result, folder=""))[:levels])) == count
