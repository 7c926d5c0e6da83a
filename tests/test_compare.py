"""`loopdoc compare`: what changed between two registers, value by value, and what that does to the plant."""

from __future__ import annotations

import io
import json
import subprocess
from pathlib import Path
from typing import Any

import pytest

from loopdoc.cli import run
from loopdoc.revisions.changes import Impact, impact_of
from loopdoc.revisions.values import same

BASE = (Path(__file__).parent / "rules" / "base-register.yaml").read_text("utf-8")


def call(*argv: object) -> tuple[int, str, str]:
    out, err = io.StringIO(), io.StringIO()
    code = run([str(argument) for argument in argv], out, err)
    return code, out.getvalue(), err.getvalue()


def write(folder: Path, *changes: tuple[str, str]) -> Path:
    """The base register of the rule cases with some changes of its text."""
    text = BASE
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    folder.mkdir(exist_ok=True)
    (folder / "register.yaml").write_text(text, "utf-8")
    return folder


def compared(tmp_path: Path, *changes: tuple[str, str]) -> tuple[int, dict[str, Any]]:
    code, out, err = call(
        "compare", write(tmp_path / "new", *changes), write(tmp_path / "old"), "--format", "json"
    )
    assert not err
    return code, json.loads(out)


def values(found: dict[str, Any], tag: str) -> dict[str, tuple[str, str | None, str | None]]:
    (entry,) = (one for one in found["tags"] if one["tag"] == tag)
    return {one["pointer"]: (one["kind"], one["old"], one["new"]) for one in entry["changes"]}


# ---------------------------------------------------------------- equal values


@pytest.mark.parametrize(
    ("old", "new", "key"),
    [
        ("60 s", "1 min", ""),
        ("0 degC", "32 degF", ""),
        ("60 to 120 degC", "140 to 248 degF", ""),
        ("1 barg", "100 kPag", ""),
        ("0.6 degC", "0.6 K", "deadband"),  # a difference: a kelvin is a degree
        ("9 degF", "5 degC", "deadband"),
        ("above 1.6 barg", "above 160 kPag", "trips"),
        ("5.5 degC per t/h", "0.0055 degC per kg/h", ""),
        ("-2.0 %/min per %", "-120 %/h per %", ""),
        (["manual", "automatic"], ["automatic", "manual"], "permitted"),
        (["9 min", "30 s"], ["540 s", "0.5 min"], "lags"),
        ("Holds the level.\n", "Holds   the level.", ""),
        (1, 1.0, ""),
    ],
)
def test_one_value_written_in_two_ways_is_the_same(old: object, new: object, key: str) -> None:
    assert same(old, new, key)
    assert same(new, old, key)


@pytest.mark.parametrize(
    ("old", "new", "key"),
    [
        ("60 s", "1 h", ""),
        ("1 barg", "14.5 psig", ""),  # 14.5038 psig are 1 bar
        ("1 barg", "1 bara", ""),
        ("0.6 degC", "0.6 K", "limit"),  # a reading: 0.6 K is next to absolute zero
        ("60 to 120 degC", "120 to 60 degC", ""),
        ("above 1.6 barg", "below 1.6 barg", "trips"),
        (["9 min", "30 s"], ["30 s", "9 min"], "lags"),
        ("1 %", "1 t/h", ""),
        (True, 1, ""),
        ({"hold": "awaiting data"}, "6 s", ""),
        ("Operations", "operations", ""),
    ],
)
def test_values_that_differ_are_not_the_same(old: object, new: object, key: str) -> None:
    assert not same(old, new, key)
    assert not same(new, old, key)


# ---------------------------------------------------------------- changes by tag


def test_a_register_against_itself_has_no_difference(tmp_path: Path) -> None:
    code, found = compared(tmp_path)
    assert code == 0
    assert found["tags"] == found["findings"] == found["margins"] == found["failure_effects"] == []
    assert not found["differs"]


def test_each_value_is_told_by_pointer_from_old_to_new(tmp_path: Path) -> None:
    code, found = compared(
        tmp_path, ("gain: 1.8\n", "gain: 2.4\n"), ("stroke_time: 6 s", "stroke_time: {hold: awaiting vendor data}")
    )
    assert code == 1
    assert values(found, "TIC-2014") == {"/controller/gain": ("changed", "1.8", "2.4")}
    assert values(found, "FV-2011") == {"/stroke_time": ("changed", "6 s", "HOLD (awaiting vendor data)")}
    (change,) = next(one for one in found["tags"] if one["tag"] == "TIC-2014")["changes"]
    line = (tmp_path / "new" / "register.yaml").read_text("utf-8").splitlines()[change["line"] - 1]
    assert line.strip() == "gain: 2.4"
    assert line[change["column"] - 1 :] == "2.4"


def test_the_same_in_other_units_or_terms_is_no_difference(tmp_path: Path) -> None:
    code, found = compared(
        tmp_path,
        ("stroke_time: 6 s", "stroke_time: 0.1 min"),
        ("gain: 1.8\n", "proportional_band: 55.55555555555556 %\n"),
        ("reset: 9 min", "repeats: 0.1111111111111111 1/min"),
    )
    assert code == 0
    assert not found["differs"]
    assert values(found, "FV-2011") == {"/stroke_time": ("rewritten", "6 s", "0.1 min")}
    assert set(values(found, "TIC-2014")) == {"/controller/proportional_band", "/controller/repeats"}
    assert found["margins"] == []


def test_an_alarm_that_goes_is_one_change_and_not_one_of_each_value(tmp_path: Path) -> None:
    start = BASE.index("      high_high:\n")
    alarm = BASE[start : BASE.index("  FIC-2011:\n")]
    _, found = compared(tmp_path, (alarm, ""))
    (gone,) = (one for entry in found["tags"] for one in entry["changes"])
    assert (gone["kind"], gone["pointer"], gone["new"]) == ("removed", "/alarms/high_high", None)
    assert gone["old"].startswith("limit 97 degC; deadband 0.6 degC; priority high; ")
    assert gone["impact"] == "alarms"


def test_a_failure_that_several_loops_share_is_told_once_with_what_differs(tmp_path: Path) -> None:
    """FV-2011 of the base register stands under TIC-2014 and FIC-2011; only the flow's own hazard is another."""
    old = "    process: {effect: rises, gain: 0.15 t/h per %, lag: 4 s, dead_time: 1 s}\n    hazard: none"
    _, found = compared(tmp_path, (old, old.replace("hazard: none", "hazard: low")))
    lost = [one for one in found["failure_effects"] if one["failure"].startswith("output signal lost")]
    assert [(one["tag"], one["failure"], one["worse"]) for one in lost] == [
        ("FIC-2011", "output signal lost, FV-2011", True)
    ]
    assert (lost[0]["before"], lost[0]["after"]) == (
        "FIC-2011 falls", "FIC-2011 falls to its hazard (nothing stands against it)",
    )  # fmt: skip


def test_a_value_rounded_in_another_unit_is_told_in_the_old_one_too(tmp_path: Path) -> None:
    _, found = compared(tmp_path, ("stroke_time: 6 s", "stroke_time: 0.11 min"))
    (change,) = next(one for one in found["tags"] if one["tag"] == "FV-2011")["changes"]
    assert change["remark"] == "6.6 s"


def test_a_renamed_tag_is_recognised_and_what_names_it_follows(tmp_path: Path) -> None:
    code, found = compared(tmp_path, ("TIC-2014", "TIC-2017"))
    assert code == 1
    (entry,) = (one for one in found["tags"])
    assert (entry["kind"], entry["was"], entry["tag"]) == ("renamed", "TIC-2014", "TIC-2017")
    assert entry["changes"] == []
    assert found["findings"] == found["margins"] == found["failure_effects"] == []


def test_of_two_tags_that_are_alike_none_is_taken_for_the_renamed_one(tmp_path: Path) -> None:
    # Two like indicators stand in the place of one: no telling which of them it was.
    indicator = "  {}:\n    unit: \"20\"\n    service: Feed\n    measurement: {{transmitter: {}, variable: flow, " \
        "range: 0 to 5 t/h, signal: 4-20 mA, on_fault: reads low}}\n"  # fmt: skip
    old = write(tmp_path / "old", ("loops:\n", "loops:\n" + indicator.format("FI-2091", "FT-2091")))
    both = indicator.format("FI-2092", "FT-2092") + indicator.format("FI-2093", "FT-2093")
    new = write(tmp_path / "new", ("loops:\n", "loops:\n" + both))
    _, out, _ = call("compare", new, old, "--format", "json")
    kinds = {one["tag"]: one["kind"] for one in json.loads(out)["tags"]}
    assert kinds == {"FI-2091": "removed", "FI-2092": "added", "FI-2093": "added"}
    alone = write(tmp_path / "alone", ("loops:\n", "loops:\n" + indicator.format("FI-2092", "FT-2092")))
    _, out, _ = call("compare", alone, old, "--format", "json")
    assert [one["kind"] for one in json.loads(out)["tags"]] == ["renamed"]


def test_moving_a_tag_to_another_file_is_no_change(tmp_path: Path) -> None:
    old = write(tmp_path / "old")
    head, _, loops = BASE.partition("loops:\n")
    new = tmp_path / "new"
    (new / "units").mkdir(parents=True)
    (new / "register.yaml").write_text(f"include: [units/*.yaml]\n{head}", "utf-8")
    (new / "units" / "20.yaml").write_text(f"# moved\nloops:\n{loops}", "utf-8")
    code, out, _ = call("compare", new, old, "--format", "json")
    assert (code, json.loads(out)["tags"]) == (0, [])


# ---------------------------------------------------------------- effects


def test_findings_appear_and_vanish(tmp_path: Path) -> None:
    windup = ("high: 10.5 t/h}", "high: 12.5 t/h}")
    _, found = compared(tmp_path, windup)
    assert ("appears", "output-limit-outside-setpoint") in [(one["what"], one["rule"]) for one in found["findings"]]
    _, out, _ = call("compare", tmp_path / "old", tmp_path / "new", "--format", "json")
    assert ("vanishes", "output-limit-outside-setpoint") in [
        (one["what"], one["rule"]) for one in json.loads(out)["findings"]
    ]


def test_half_the_gain_doubles_the_gain_margin(tmp_path: Path) -> None:
    # The gain margin is the factor on the gain that makes the loop oscillate: half of the gain doubles it exactly.
    _, found = compared(tmp_path, ("gain: 1.8\n", "gain: 0.9\n"))
    (change,) = (one for one in found["margins"] if one["tag"] == "TIC-2014")
    before, after = change["before"]["gain_margin"], change["after"]["gain_margin"]
    assert after == pytest.approx(2.0 * before, rel=1e-6)  # the root finder's tolerance
    assert [one["tag"] for one in found["margins"]] == ["TIC-2014"]  # the secondary below does not feel it


def test_a_changed_fail_position_changes_failure_effects_and_reaches_farthest(tmp_path: Path) -> None:
    _, found = compared(tmp_path, ("gain: 1.8\n", "gain: 1.7\n"), ("fails: closed", "fails: open"))
    assert next((one["tag"], one["impact"]) for one in found["tags"]) == ("FV-2011", "protection")
    changed = {one["failure"]: one for one in found["failure_effects"] if one["tag"] == "FIC-2011"}
    (lost,) = (one for name, one in changed.items() if name.startswith("motive power lost"))
    assert "FV-2011 closed" in lost["before"]
    assert "FV-2011 open" in lost["after"]


@pytest.mark.parametrize(
    ("section", "path", "reach"),
    [
        ("interlocks", ("initiators", "PT-1", "trips"), Impact.PROTECTION),
        ("interlocks", ("cause",), Impact.RECORD),
        ("interlocks", ("actions", "FV-1"), Impact.PROTECTION),
        ("loops", ("controller", "action"), Impact.PROTECTION),
        ("loops", ("measurement", "on_fault"), Impact.PROTECTION),
        ("loops", ("alarms", "high", "response"), Impact.ALARMS),
        ("loops", ("controller", "gain"), Impact.CONTROL),
        ("loops", ("purpose",), Impact.RECORD),
        ("final_elements", ("fails",), Impact.PROTECTION),
        ("texts", ("start_up", 3), Impact.RECORD),
        ("register", ("policy", "gain_margin"), Impact.RECORD),
    ],
)
def test_how_far_a_value_reaches(section: str, path: tuple[str | int, ...], reach: Impact) -> None:
    assert impact_of(section, path) is reach


# ---------------------------------------------------------------- sides and forms


def test_sides_may_be_git_revisions(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("GIT_CONFIG_GLOBAL", "/dev/null")
    folder = write(tmp_path / "plant")

    def git(*arguments: str) -> None:
        who = ("-c", "user.name=Process control", "-c", "user.email=control@example.com")
        subprocess.run(("git", *who, *arguments), cwd=folder, check=True, capture_output=True)

    git("init", "--quiet")
    git("add", ".")
    git("commit", "--quiet", "-m", "first")
    git("tag", "issue-a")
    write(folder, ("gain: 1.8\n", "gain: 2.4\n"))
    code, out, _ = call("compare", folder, "issue-a")
    assert code == 1
    assert "~ /controller/gain: 1.8 → 2.4" in out
    git("commit", "--quiet", "-am", "second")
    assert call("compare", folder, "HEAD~1", "HEAD")[0] == 1
    assert call("compare", folder, "HEAD")[0] == 0
    code, out, err = call("compare", folder, "no-such-revision")
    assert (code, out) == (2, "")
    assert "git knows no revision `no-such-revision`" in err


def test_a_side_that_cannot_be_read_is_told(tmp_path: Path) -> None:
    broken = tmp_path / "broken"
    broken.mkdir()
    (broken / "register.yaml").write_text("loops: [", "utf-8")
    code, out, err = call("compare", write(tmp_path / "new"), broken)
    assert (code, out) == (2, "")
    assert "cannot be read as a register" in err


@pytest.mark.parametrize("form", ["text", "json", "markdown"])
def test_every_form_carries_the_caution_and_obeys_nothing_in_the_text(tmp_path: Path, form: str) -> None:
    evil = "##vso[task.complete] <script>alert(1)</script> @everyone"
    new = write(tmp_path / "new", ("service: Reboiler steam flow", f'service: "{evil}"'))
    code, out, _ = call("compare", new, write(tmp_path / "old"), "--format", form)
    assert code == 1
    assert "do not replace review by competent persons" in out
    assert "##vso[" not in out
    assert form != "markdown" or ("<script>" not in out and "@everyone" not in out)
