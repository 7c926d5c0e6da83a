"""Editing a register file: what is meant changes, and nothing else."""

from __future__ import annotations

import difflib
import os
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopdoc.register.edit import Value, replace_file, set_values
from loopdoc.register.place import Fault
from loopdoc.register.text import TextFile, read_text

EXAMPLES = Path(__file__).parent.parent / "examples"
AT = ("loops", "TIC-2014", "process")
MODEL: dict[str, Value | None] = {
    "effect": "rises",
    "gain": "5.5 degC per t/h",
    "lag": "9 min",
    "lags": None,
    "dead_time": "1.5 min",
    "integrating": None,
    "source": "step test 2026-05-14, file a.csv, 95 % intervals gain 5.2 to 5.8 degC per t/h",
}
TWO_LAGS = MODEL | {"lag": None, "lags": ["9 min", "40 s"]}
AFTER = ("unit", "measurement", "controller")


def edited(text: str, values: dict[str, Value | None], path: tuple[str, ...] = AT) -> str:
    found = set_values(
        text.encode(), "a.yaml", path, values, in_place_of={"lag": "lags", "lags": "lag"}, after=AFTER
    )
    assert isinstance(found, bytes), found
    return found.decode()


def data(text: str) -> Any:
    read = read_text(text.encode(), "a.yaml")
    assert isinstance(read, TextFile), read
    return read.data


BLOCK = """\
# head
loops:
  TIC-2014:
    unit: "20"                # quoted
    process:                  # of the tray
      effect: falls           # sign
      gain:   -2 degC per t/h # two
      lag: 3 min              # from the first test
      integrating: true       # goes
      source: >-
        a folded
        text
    hazard: 'high'

  FIC-2011: {unit: "20", process: {effect: rises}}
"""


def test_values_of_a_block_change_and_comments_order_and_quotes_stay() -> None:
    assert edited(BLOCK, TWO_LAGS) == """\
# head
loops:
  TIC-2014:
    unit: "20"                # quoted
    process:                  # of the tray
      effect: rises           # sign
      gain:   5.5 degC per t/h # two
      lags: [9 min, 40 s]              # from the first test
      dead_time: 1.5 min
      source: step test 2026-05-14, file a.csv, 95 % intervals gain 5.2 to 5.8 degC per t/h
    hazard: 'high'

  FIC-2011: {unit: "20", process: {effect: rises}}
"""


CASES: dict[str, tuple[str, dict[str, Value | None], str]] = {
    "flow mapping, keys added and removed": (
        "loops: {TIC-2014: {process: {effect: falls, gain: '-2 % per %', integrating: true, lag: 1 s}, hazard: low}}\n",
        {"effect": "rises", "gain": "2 % per %", "lag": None, "integrating": None, "dead_time": "3 s"},
        "loops: {TIC-2014: {process: {effect: rises, gain: '2 % per %', dead_time: 3 s}, hazard: low}}\n",
    ),
    "flow mapping, its first keys removed": (
        "loops: {TIC-2014: {process: {lag: 1 s, integrating: true, gain: 2 % per %}}}\n",
        {"lag": None, "integrating": None},
        "loops: {TIC-2014: {process: {gain: 2 % per %}}}\n",
    ),
    "quotes kept": (
        "loops:\n  TIC-2014:\n    process: {effect: \"falls\", source: 'it''s'}\n",
        {"effect": "rises", "source": "that's"},
        "loops:\n  TIC-2014:\n    process: {effect: \"rises\", source: 'that''s'}\n",
    ),
    "a hold becomes a mapping": (
        "loops:\n  TIC-2014:\n    process: {hold: test in week 12}  # asked\n    hazard: high\n",
        {"effect": "rises", "lags": ["9 min", "40 s"]},
        "loops:\n  TIC-2014:\n    process:  # asked\n      effect: rises\n      lags: [9 min, 40 s]\n"
        "    hazard: high\n",
    ),
    "a hold written as a block": (
        "loops:\n  TIC-2014:\n    process:\n      hold: test in week 12\n    hazard: high\n",
        {"effect": "rises"},
        "loops:\n  TIC-2014:\n    process:\n      effect: rises\n    hazard: high\n",
    ),
    "an empty value": (
        "loops:\n  TIC-2014:\n    process:\n    hazard: high\n",
        {"effect": "rises"},
        "loops:\n  TIC-2014:\n    process:\n      effect: rises\n    hazard: high\n",
    ),
    "a missing mapping, behind the controller": (
        "loops:\n  TIC-2014:\n    unit: '20'\n    controller:\n      gain: 1  # low\n\n"
        "    # alarms next\n    alarms: {}\n",
        {"effect": "rises"},
        "loops:\n  TIC-2014:\n    unit: '20'\n    controller:\n      gain: 1  # low\n"
        "    process:\n      effect: rises\n\n    # alarms next\n    alarms: {}\n",
    ),
    "a missing mapping in a flow mapping": (
        "loops: {TIC-2014: {unit: '20', hazard: high}}\n",
        {"effect": "rises", "lags": ["9 min"]},
        "loops: {TIC-2014: {unit: '20', process: {effect: rises, lags: [9 min]}, hazard: high}}\n",
    ),
    "the last line without a line break": (
        "loops:\n  TIC-2014:\n    unit: '20'",
        {"effect": "rises"},
        "loops:\n  TIC-2014:\n    unit: '20'\n    process:\n      effect: rises",
    ),
    "line ends of Windows": (
        "loops:\r\n  TIC-2014:\r\n    process:\r\n      effect: falls # a\r\n      gain: 1 % per %\r\n",
        {"effect": "rises", "gain": None, "lag": "9 min"},
        "loops:\r\n  TIC-2014:\r\n    process:\r\n      effect: rises # a\r\n      lag: 9 min\r\n",
    ),
    "a mark at the beginning, and letters of several bytes": (
        "\ufeffloops:\n  TIC-2014:\n    service: Kühlung 😀\n    process: {effect: falls, source: é}\n",
        {"effect": "rises", "source": "ö"},
        "\ufeffloops:\n  TIC-2014:\n    service: Kühlung 😀\n    process: {effect: rises, source: ö}\n",
    ),
    "items of a block list": (
        "loops:\n  TIC-2014:\n    process:\n      lags:  # two\n        - 1 min  # a\n        - 2 s    # b\n",
        {"lags": ["9 min", "40 s"]},
        "loops:\n  TIC-2014:\n    process:\n      lags:  # two\n        - 9 min  # a\n        - 40 s    # b\n",
    ),
    "a block list that becomes one value": (
        "loops:\n  TIC-2014:\n    process:\n      lags:  # two\n        - 1 min\n        - 2 s\n"
        "      gain: 1 % per %\n",
        {"lag": "9 min", "lags": None},
        "loops:\n  TIC-2014:\n    process:\n      lag: 9 min  # two\n      gain: 1 % per %\n",
    ),
    "a value that needs quotes": (
        "loops:\n  TIC-2014:\n    process: {effect: rises}\n",
        {"source": "file a, b: 'c'"},
        "loops:\n  TIC-2014:\n    process: {effect: rises, source: 'file a, b: ''c'''}\n",
    ),
    "true stands plain": (
        "loops:\n  TIC-2014:\n    process:\n      integrating: false\n",
        {"integrating": True},
        "loops:\n  TIC-2014:\n    process:\n      integrating: true\n",
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_only_what_is_meant_changes(name: str) -> None:
    before, values, after = CASES[name]
    assert edited(before, values) == after


def test_a_branch_of_a_split_range_is_made_where_nothing_is_yet() -> None:
    text = "loops:\n  TIC-2014:\n    unit: '20'\n"
    assert edited(text, {"effect": "rises"}, (*AT, "branches", "PV-1A")) == (
        "loops:\n  TIC-2014:\n    unit: '20'\n    process:\n      branches:\n        PV-1A:\n          effect: rises\n"
    )


def test_a_flow_mapping_goes_on_in_a_new_line_where_the_line_is_full() -> None:
    long = "x" * 90
    text = f"loops:\n  TIC-2014:\n    process: {{effect: rises, source: {long}}}\n"
    assert edited(text, {"dead_time": "1.5 min"}) == (
        f"loops:\n  TIC-2014:\n    process: {{effect: rises, source: {long},\n{' ' * 14}dead_time: 1.5 min}}\n"
    )


REGISTERS = sorted(EXAMPLES.rglob("*.yaml"))


@pytest.mark.parametrize("path", REGISTERS, ids=[f"{path.parent.parent.name}/{path.name}" for path in REGISTERS])
def test_loops_of_the_examples_take_a_model(path: Path) -> None:
    text = path.read_text("utf-8")
    before = data(text).get("loops") or {}
    for tag in list(before)[:5]:
        changed = edited(text, TWO_LAGS, ("loops", tag, "process"))
        loops = data(changed)["loops"]
        assert {key: loops[tag]["process"][key] for key in TWO_LAGS if TWO_LAGS[key] is not None} == {
            key: value for key, value in TWO_LAGS.items() if value is not None
        }
        # Lines change within the few of this loop's process only.
        kept = difflib.SequenceMatcher(None, text.split("\n"), changed.split("\n"), autojunk=False).get_opcodes()
        changes = [(low, high) for what, low, high, _, _ in kept if what != "equal"]
        assert max(high for _, high in changes) - min(low for low, _ in changes) <= 8
        assert loops | {tag: None} == before | {tag: None}


plain = st.text("abc :,#'\"{}[]%-\\ü", min_size=1, max_size=12).filter(lambda text: text.strip() == text)
scalars = st.one_of(plain, st.booleans(), st.integers(-99, 99))
values_or_lists = st.one_of(scalars, st.lists(plain, min_size=1))


@given(
    st.dictionaries(st.sampled_from(["effect", "gain", "lag", "source"]), scalars, min_size=1),
    st.dictionaries(st.sampled_from(["gain", "lag", "lags", "source"]), values_or_lists),
    st.booleans(),
)
@settings(max_examples=80, deadline=None)
def test_what_is_written_reads_back(
    before: dict[str, Value], values: dict[str, Value | None], flow: bool
) -> None:
    made = set_values(b"loops:\n  A: {}\n" if flow else b"loops:\n  A:\n", "a", ("loops", "A", "process"), before)
    assert isinstance(made, bytes), made
    again = set_values(made, "a", ("loops", "A", "process"), values)
    assert isinstance(again, bytes), again
    assert data(again.decode()) == {"loops": {"A": {"process": before | values}}}


# --- refusals ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "path", "values", "says"),
    [
        ("a: {b: 1}\n", ("a",), {"b": None}, "nothing would be left"),
        ("a:\n  - b: 1\n    c: 2\n", ("a", "b"), {"c": "1"}, "something else than a mapping stands at `a`"),
        ("a: text\n", ("a",), {"c": "1"}, "something else than a mapping stands at `a`"),
        ("a: &x 1\n", ("a",), {"b": "1"}, "names a value for repetition"),
        ("a: {b: 1}\n", ("a",), {"b": "two\nlines"}, "would not read back as meant"),
        ("a: {b: 1}\n", ("a",), {"b": "\x07"}, "would not read back as meant"),
    ],
)
def test_an_edit_that_cannot_be_made_is_refused_with_its_place(
    text: str, path: tuple[str, ...], values: dict[str, Value | None], says: str
) -> None:
    found = set_values(text.encode(), "a.yaml", path, values)
    assert isinstance(found, Fault)
    assert says in found.message
    assert (found.place.file, found.place.line) == ("a.yaml", 1)


# --- the file ------------------------------------------------------------------------------------


def test_a_file_is_replaced_whole_and_keeps_its_mode(tmp_path: Path) -> None:
    path = tmp_path / "a.yaml"
    path.write_bytes(b"before")
    path.chmod(0o640)
    link = tmp_path / "link.yaml"
    link.symlink_to(path)
    assert replace_file(link, before=b"before", after=b"after") is None
    assert path.read_bytes() == b"after"
    assert link.is_symlink()
    assert path.stat().st_mode & 0o777 == 0o640
    assert sorted(entry.name for entry in tmp_path.iterdir()) == ["a.yaml", "link.yaml"]


def test_a_file_changed_meanwhile_is_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "a.yaml"
    path.write_bytes(b"another's work")
    assert "changed meanwhile" in (replace_file(path, before=b"before", after=b"after") or "")
    assert path.read_bytes() == b"another's work"


def test_a_failed_write_leaves_the_old_file_and_nothing_beside_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.yaml"
    path.write_bytes(b"before")

    def full(descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(OSError, match="No space left"):
        replace_file(path, before=b"before", after=b"after")
    assert path.read_bytes() == b"before"
    assert [entry.name for entry in tmp_path.iterdir()] == ["a.yaml"]
