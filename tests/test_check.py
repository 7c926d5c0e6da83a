"""The check as a whole: what it does with bad input, deviations, failing rules, and what it cannot check."""

from __future__ import annotations

import datetime
import io
import json
import random
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import yaml

from loopdoc.cli import run
from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.register.load import Loaded, Unreadable, load
from loopdoc.register.model import FinalElement, Loop
from loopdoc.register.text import TextFile, read_text
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.check import INTERNAL, check
from loopdoc.rules.finding import CheckResult, Level
from loopdoc.rules.references import Names
from loopdoc.rules.rule import Draft, NotChecked, draft, need, rule

BASE = (Path(__file__).parent / "rules" / "base-register.yaml").read_text("utf-8")
TODAY = datetime.date(2026, 11, 20)


def read(folder: Path, text: str | bytes, **others: str) -> Loaded | Unreadable:
    (folder / "register.yaml").write_bytes(text if isinstance(text, bytes) else text.encode())
    for name, content in others.items():
        (folder / f"{name}.yaml").write_text(content, "utf-8")
    return load(folder)


def checked(folder: Path, text: str, **others: str) -> CheckResult:
    loaded = read(folder, text, **others)
    assert isinstance(loaded, Loaded), loaded
    return check(Plant(loaded.register), loaded.faults, today=TODAY)


# ---------------------------------------------------------------- what cannot be read

BOMB = "a: &a [x, x]\nb: &b [*a, *a]\nc: [*b, *b]\n"


@pytest.mark.parametrize(
    ("content", "line", "column", "says"),
    [
        (random.Random(1).randbytes(4096), 1, None, "not UTF-8"),
        (b"", 1, 1, "empty"),
        (b"- a\n- b\n", 1, 1, "a register is a mapping"),
        (b"just words\n", 1, 1, "a register is a mapping"),
        (b"format: 1\ninclude: [units/*.yaml]\n", 2, 11, "no file matches `units/*.yaml`"),
        (b"format: 1\nsite:\n\tname: Fellside\n", 3, 1, "a tab is used for indentation"),
        (b"format: 1\nformat: 2\n", 2, 1, "the key `format` stands twice"),
        (BOMB.encode(), 1, 4, "`&a` names a value"),
        (b"format: 1\nsite: {name: \x00}\n", 2, 14, "control character"),
    ],
    ids=["random bytes", "empty", "list", "words", "missing include", "tab", "duplicate key", "alias bomb", "nul"],
)
def test_what_is_no_register_is_told_with_its_place(
    content: bytes, line: int, column: int | None, says: str, tmp_path: Path
) -> None:
    unreadable = read(tmp_path, content)
    assert isinstance(unreadable, Unreadable)
    fault = unreadable.faults[0]
    assert fault.place.line == line
    assert column in (None, fault.place.column)
    assert says in fault.message
    assert fault.remedy


@pytest.mark.parametrize("written", ["[]", "text", "7", "true", "{}", "~", "[[[]]]"])
@pytest.mark.parametrize(
    "key", ["loops", "final_elements", "functions", "interlocks", "deviations", "texts", "units", "policy"]
)
def test_something_else_in_place_of_a_section_is_a_finding_or_nothing(key: str, written: str, tmp_path: Path) -> None:
    data = base_data() | {key: yaml.safe_load(written)}
    result = checked(tmp_path, as_text(data))
    assert INTERNAL not in {finding.rule for finding in result.findings}


ODD: tuple[Any, ...] = (
    None, [], {}, [None], {"hold": "awaiting design"}, {"hold": None}, {"to": "FIC-2011"}, 0, -1, 1.5e300, True,
    "", " ", "TIC-2014", "FIC-2011", "FV-2011", "FY-3002", "cascade", "0 %", "-5 s", "3 barg", "1e9 degC", "7 t/h",
    "5 to 1 bara", "0 to 0 degC", "above 5 m", "-1 degC per %", "2 %/min per t/h", "x" * 500,
)  # fmt: skip


def base_data() -> dict[str, Any]:
    file = read_text(BASE.encode(), "register.yaml")
    assert isinstance(file, TextFile)
    assert isinstance(file.data, dict)
    return file.data


def as_text(data: Any) -> str:
    return json.dumps(data, ensure_ascii=False)  # YAML reads JSON


def spots(data: Any) -> Iterator[tuple[Any, Any]]:
    """Every container of some data with each of its keys or indexes."""
    entries = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    for key, value in list(entries):
        yield data, key
        yield from spots(value)


@pytest.mark.parametrize("seed", range(40))
def test_odd_values_anywhere_make_no_rule_fail(seed: int, tmp_path: Path) -> None:
    chance = random.Random(seed)
    data = base_data()
    below_the_top = [spot for spot in spots(data) if spot[0] is not data]
    for container, key in chance.sample(below_the_top, 12):
        container[key] = chance.choice(ODD)
    result = checked(tmp_path, as_text(data))
    assert [finding.message for finding in result.findings if finding.rule == INTERNAL] == []
    assert result.findings, "twelve odd values and nothing found"


# ---------------------------------------------------------------- deviations

TOO_SHORT = BASE.replace("high: 10.5 t/h}", "high: 12.5 t/h}")


def with_deviation(**changes: str) -> str:
    entries = {
        "rule": "output-limit-outside-setpoint",
        "at": "TIC-2014",
        "reason": "until the shutdown",
        "approved_by": "Operations",
        "until": "2026-11-20",
    } | changes
    written = ", ".join(f"{key}: {value}" for key, value in entries.items() if value)
    return f"{TOO_SHORT}deviations:\n  - {{{written}}}\n"


def test_a_deviation_in_force_accepts_its_finding_to_its_last_day(tmp_path: Path) -> None:
    result = checked(tmp_path, with_deviation())
    assert [finding.rule for finding in result.findings] == []
    (accepted,) = result.accepted
    assert accepted.rule == "output-limit-outside-setpoint"
    assert accepted.accepted_by is not None
    assert accepted.accepted_by.reason == "until the shutdown"


@pytest.mark.parametrize(
    "changes",
    [
        {"until": "2026-11-19"},
        {"until": "{hold: awaiting the plan}"},
        {"approved_by": "{hold: awaiting operations}"},
        {"approved_by": ""},
        {"rule": "secondary-range-short"},
        {"at": "FIC-2011"},
    ],
    ids=["expired", "without end", "not approved", "approved by nobody", "of another rule", "at another tag"],
)
def test_a_deviation_that_is_not_in_force_accepts_nothing(changes: dict[str, str], tmp_path: Path) -> None:
    result = checked(tmp_path, with_deviation(**changes))
    assert "output-limit-outside-setpoint" in {finding.rule for finding in result.findings}
    assert result.accepted == ()


def test_without_a_day_deviations_are_judged_by_the_date_of_the_revision(tmp_path: Path) -> None:
    loaded = read(tmp_path, with_deviation())
    assert isinstance(loaded, Loaded)
    assert len(check(Plant(loaded.register), ()).accepted) == 1
    loaded = read(tmp_path, with_deviation().replace("date: 2026-11-20", "date: 2026-11-21"))
    assert isinstance(loaded, Loaded)
    assert len(check(Plant(loaded.register), ()).accepted) == 0


def test_the_day_of_the_source_is_today_for_the_command(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    read(tmp_path, with_deviation())

    def accepted(*options: str) -> int:
        out = io.StringIO()
        run(["check", str(tmp_path), "--format", "json", *options], out, io.StringIO())
        return len(json.loads(out.getvalue())["accepted"])

    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1795132800")  # 2026-11-20T00:00Z, by `date -u -d @1795132800`
    assert accepted() == 1
    assert accepted("--date", "2026-11-21") == 0
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1795219200")  # a day later
    assert accepted() == 0
    assert accepted("--date", "2026-11-20") == 1


@pytest.mark.parametrize("epoch", ["", "yesterday", "9" * 30])
def test_a_day_of_the_source_that_is_none_is_left_aside(
    epoch: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", epoch)
    read(tmp_path, BASE)
    assert run(["check", str(tmp_path), "--fail-on", "note"], io.StringIO(), io.StringIO()) == 0


def test_a_day_that_is_none_is_refused(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as left:
        run(["check", str(tmp_path), "--date", "tomorrow"], io.StringIO(), io.StringIO())
    assert left.value.code == 2
    assert "`tomorrow` is no day; write it as in 2026-11-20" in capsys.readouterr().err


def test_an_accepted_finding_touches_every_tag_that_it_speaks_of(tmp_path: Path) -> None:
    (accepted,) = checked(tmp_path, with_deviation()).accepted
    # the primary's output limit, and the setpoint limit of the secondary that it passes
    assert accepted.touches == ("TIC-2014", "FIC-2011")


def test_findings_at_one_place_are_one_for_a_deviation_and_those_in_two_steps_are_not(tmp_path: Path) -> None:
    upsets = '  "30":\n    upsets: [Cut FIC-9901 and FIC-9902., Cut FIC-9903.]\n    overview'
    text = BASE.replace('  "30":\n    overview', upsets)
    deviation = "deviations:\n  - {rule: text-tag-unknown, at: %s, reason: r, approved_by: a, until: 2026-11-20}\n"
    result = checked(tmp_path, text + deviation % '"30/upsets/0"')
    named = [finding.message.split(" names ")[1].split(",")[0] for finding in result.accepted]
    assert named == ["FIC-9901", "FIC-9902"]
    assert [finding.rule for finding in result.findings] == ["text-tag-unknown"]
    result = checked(tmp_path, text + deviation % '"30"')
    assert result.accepted == ()
    (told,) = [finding for finding in result.findings if finding.rule == "deviation-ambiguous"]
    assert "30/upsets/0 or 30/upsets/1" in told.message


def test_no_deviation_accepts_what_is_found_of_deviations(tmp_path: Path) -> None:
    entry = "{rule: %s, at: TIC-2014, reason: r, approved_by: a, until: 2026-11-20}"
    rules = ("margin-low", "deviation-unused")
    text = BASE + "deviations:\n" + "".join(f"  - {entry % rule}\n" for rule in rules)
    result = checked(tmp_path, text)
    assert result.accepted == ()
    assert [finding.rule for finding in result.findings] == ["deviation-unused", "deviation-unused"]


# ---------------------------------------------------------------- the machinery


@rule(level=Level.ERROR, source="test")
def fails_at_one_tag(element: FinalElement) -> Iterator[Draft]:
    """Fails.

    Why:
        To see.
    Breaks:
        One.
    Holds:
        Others.
    What this check cannot see:
        Nothing.
    """
    if element.tag == "FV-3003":
        raise ZeroDivisionError("of\nsomething")
    yield draft(element.tag, "seen", remedy="none", at=element.origin)


@rule(level=Level.NOTE, source="test")
def finds_one_and_lacks_one(loop: Loop) -> Iterator[Draft]:
    """Finds before it lacks.

    Why:
        To see.
    Breaks:
        One.
    Holds:
        Others.
    What this check cannot see:
        Nothing.
    """
    yield draft(loop.tag, "found", remedy="none", at=loop.origin)
    if loop.tag == "FI-3004":
        need(None, "a value")


def test_a_rule_that_fails_is_told_and_the_others_still_run(tmp_path: Path) -> None:
    loaded = read(tmp_path, TOO_SHORT)
    assert isinstance(loaded, Loaded)
    result = check(Plant(loaded.register), (), rules=(fails_at_one_tag, *RULES), today=TODAY)
    (internal,) = [finding for finding in result.findings if finding.rule == INTERNAL]
    assert internal.level is Level.ERROR
    assert internal.tag == "FV-3003"
    assert internal.place == loaded.register.final_elements["FV-3003"].origin.key()
    assert "fails-at-one-tag" in internal.message
    assert "ZeroDivisionError: of something" in internal.message
    assert result.coverage["fails-at-one-tag"].checked == 5, "the other final elements"
    assert "output-limit-outside-setpoint" in {finding.rule for finding in result.findings}


def test_what_was_found_before_a_value_was_lacking_stands(tmp_path: Path) -> None:
    loaded = read(tmp_path, BASE)
    assert isinstance(loaded, Loaded)
    result = check(Plant(loaded.register), (), rules=(finds_one_and_lacks_one,), today=TODAY)
    coverage = result.coverage["finds-one-and-lacks-one"]
    assert len(result.findings) == len(loaded.register.loops)
    assert coverage.not_checked == 1
    assert coverage.checked == len(loaded.register.loops) - 1
    assert coverage.where == [("FI-3004", "a value is not given")]
    assert dict(coverage.reasons) == {"a value is not given": 1}


def test_findings_come_in_order_of_file_line_and_column(tmp_path: Path) -> None:
    text = BASE.replace("units:\n", "include: [a.yaml]\nunits:\n").replace("high: 10.5 t/h}", "high: 12.5 t/h}")
    text = text.replace("gain: 1.8", "gain: 0").replace("reset: 9 min", "reset: 0 s")
    included = 'final_elements:\n  FV-9: {unit: "20", kind: control valve, fails: open, safe: closed}\n'
    result = checked(tmp_path, text, a=included)
    places = [(finding.place.file, finding.place.line, finding.place.column) for finding in result.findings]
    assert places == sorted(places)
    assert {file for file, *_ in places} == {"a.yaml", "register.yaml"}
    again = checked(tmp_path, text, a=included)
    assert again.findings == result.findings


def test_a_duplicate_in_another_file_stands_at_the_later_one(tmp_path: Path) -> None:
    text = BASE.replace("units:\n", "include: [a.yaml]\nunits:\n")
    result = checked(tmp_path, text, a='final_elements:\n  FV-2011: {unit: "20", kind: control valve}\n')
    (finding,) = [finding for finding in result.findings if finding.rule == "tag-duplicate"]
    assert str(finding.place) == "a.yaml:2:3"
    assert finding.related[0].place.file == "register.yaml"


def test_only_the_rules_asked_for_run(tmp_path: Path) -> None:
    loaded = read(tmp_path, TOO_SHORT)
    assert isinstance(loaded, Loaded)
    result = check(Plant(loaded.register), (), only=["tuning-invalid"], today=TODAY)
    assert list(result.coverage) == ["tuning-invalid"]
    assert result.findings == ()


def test_a_held_range_is_counted_and_not_judged(tmp_path: Path) -> None:
    result = checked(tmp_path, BASE.replace("range: 60 to 120 degC", "range: {hold: awaiting vendor data}"))
    assert [finding.rule for finding in result.findings] == ["hold-open"]
    lacking = {rule: entry.not_checked for rule, entry in result.coverage.items() if entry.not_checked}
    # TIC-2014 once each and in its cascade, its two alarms, and as a trip of IS-2002
    assert lacking == {
        "range-reversed": 1,
        "unit-incompatible": 2,
        "operating-outside-range": 1,
        "setpoint-limit-outside-range": 1,
        "alarm-outside-range": 2,
        "alarm-deadband": 2,
        "trip-outside-range": 1,
        "alarm-time-short": 2,
        "loop-unstable": 1,
        "margin-low": 1,
        "interval-too-slow": 1,
        "filter-too-slow": 1,
        "cascade-too-slow": 1,
        "cascade-no-benefit": 1,
    }
    assert result.not_checked == 18


def test_a_policy_moves_a_threshold(tmp_path: Path) -> None:
    text = BASE.replace("loops:\n  # A", "policy: {secondary_range_ratio: 1.2}\nloops:\n  # A")
    found = [finding for finding in checked(tmp_path, text).findings if finding.rule == "secondary-range-wide"]
    # 15 / 12 = 1.25 and 60 / (58 - 12) = 1.304
    assert ["1.25 times" in finding.message or "1.3 times" in finding.message for finding in found] == [True, True]


@pytest.mark.parametrize(
    ("written", "nearest"),
    [
        ("FIC-2101", "FIC-2011"),  # two neighbours swapped
        ("FIC-2012", "FIC-2011"),  # one digit
        ("FIC2011", "FIC-2011"),  # one left out
        ("FIC-20111", "FIC-2011"),  # one too many
        ("fic-2011", "FIC-2011"),
        ("LIC-3002", None),
        ("40", None),  # too short to have a nearest
    ],
)
def test_the_nearest_tag_is_one_slip_away(written: str, nearest: str | None) -> None:
    assert Names("a loop", ["FIC-2011", "TIC-4050", "20"]).nearest(written) == nearest


def test_a_rule_must_explain_itself_and_visit_something_known() -> None:
    def without_headings(loop: Loop) -> Iterator[Draft]:
        """Only a statement."""
        yield from ()

    def of_nothing(number: int) -> Iterator[Draft]:
        """A statement.

        Why:
            a
        Breaks:
            b
        Holds:
            c
        What this check cannot see:
            d
        """
        yield from ()

    def asking_for_a_loop(controlled: ControlledLoop, other: Loop) -> Iterator[Draft]:
        """A statement.

        Why:
            a
        Breaks:
            b
        Holds:
            c
        What this check cannot see:
            d
        """
        yield from ()

    make = rule(level=Level.NOTE, source="test")
    with pytest.raises(TypeError, match="needs the headings"):
        make(without_headings)
    with pytest.raises(TypeError, match="no rule can ask for"):
        make(of_nothing)
    with pytest.raises(TypeError, match="no rule can ask for"):
        make(asking_for_a_loop)


def test_need_tells_a_hold_from_what_is_not_there(tmp_path: Path) -> None:
    loaded = read(tmp_path, BASE.replace("gain: 1.8", "gain: {hold: x}").replace("range: 60 to 120 degC", "range: 60"))
    assert isinstance(loaded, Loaded)
    loop = loaded.register.loops["TIC-2014"]
    with pytest.raises(NotChecked, match="the gain is on hold"):
        need(loop.controller.gain, "the gain")  # type: ignore[union-attr]
    with pytest.raises(NotChecked, match="the range could not be read"):
        need(loop.measurement.range, "the range")  # type: ignore[union-attr]
    with pytest.raises(NotChecked, match="the rate is not given"):
        need(None, "the rate")
