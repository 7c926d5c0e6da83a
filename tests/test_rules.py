"""Every rule against registers that break it and registers that just do not.

A case is a list of replacements in the lines of `rules/base-register.yaml`, in which every rule holds. The mark
`▸` stands before the very character at which a finding must stand, and is taken out before the text is read.
"""

from __future__ import annotations

import importlib
import pkgutil
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path

import pytest
import yaml

import loopdoc.rules
from loopdoc.engineering.pairing import Plant
from loopdoc.register.load import Loaded, load
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.check import check
from loopdoc.rules.finding import CheckResult, Level
from loopdoc.rules.policy import policy_entries
from loopdoc.rules.rule import HEADINGS, Rule

FOLDER = Path(__file__).parent / "rules"
BASE_FILE = FOLDER / "base-register.yaml"
MARK = "▸"


@dataclass(frozen=True)
class Case:
    """A register that breaks a rule, or just does not."""

    rule: str
    case: str
    replace: dict[str, str]
    """Text of the base register, which must stand there once, and what is written in its place."""
    finds: list[str] = field(default_factory=list)
    """A part of the message of each finding of the rule, in the order of the marks."""
    remedy: str = ""
    """A part of the remedy of the first finding."""
    also: list[str] = field(default_factory=list)
    """Other rules that find an error, as a true consequence."""
    not_checked: str = ""
    """Why the rule cannot be checked somewhere."""


def cases() -> list[Case]:
    files = sorted(file for file in FOLDER.glob("*.yaml") if file != BASE_FILE)
    return [Case(file.stem, **entry) for file in files for entry in yaml.safe_load(file.read_text("utf-8"))]


@cache
def base() -> str:
    return BASE_FILE.read_text("utf-8")


def patched(case: Case) -> str:
    text = base()
    for old, new in case.replace.items():
        assert text.count(old) == 1, f"`{old}` stands {text.count(old)} times in the base register"
        text = text.replace(old, new)
    return text


def without_marks(text: str) -> tuple[str, list[tuple[int, int]]]:
    """The text without its marks, and the line and column of each."""
    marks = []
    while (at := text.find(MARK)) >= 0:
        marks.append((text.count("\n", 0, at) + 1, at - text.rfind("\n", 0, at)))
        text = text[:at] + text[at + 1 :]
    return text, marks


def checked(text: str, folder: Path) -> CheckResult:
    (folder / "register.yaml").write_text(text, "utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    return check(Plant(loaded.register), loaded.faults)


@pytest.mark.parametrize("case", [pytest.param(case, id=f"{case.rule}: {case.case}") for case in cases()])
def test_a_case_finds_what_it_says_and_nothing_else(case: Case, tmp_path: Path) -> None:
    text, marks = without_marks(patched(case))
    result = checked(text, tmp_path)

    own = [finding for finding in result.findings if finding.rule == case.rule]
    assert [(f.place.file, f.place.line, f.place.column) for f in own] == [("register.yaml", *mark) for mark in marks]
    assert len(own) == len(case.finds)
    for finding, part in zip(own, case.finds, strict=True):
        assert part in finding.message
    if case.remedy:
        assert case.remedy in own[0].remedy

    errors = {finding.rule for finding in result.findings if finding.level is Level.ERROR}
    assert errors - {case.rule} == set(case.also)

    coverage = result.coverage[case.rule]
    assert any(case.not_checked in reason for reason in coverage.reasons) == bool(case.not_checked)
    if not case.finds and not case.not_checked and case.rule != "hold-open":
        assert coverage.checked, "a case that holds must have been checked"


def test_nothing_is_found_in_the_base_register(tmp_path: Path) -> None:
    result = checked(base(), tmp_path)
    assert [f"{finding.place} {finding.rule}" for finding in result.findings if finding.level > Level.NOTE] == []
    assert result.not_checked == 0


# ---------------------------------------------------------------- one rule, one name, everywhere


def rules_in_modules() -> dict[str, Rule]:
    found = {}
    for module in pkgutil.iter_modules(loopdoc.rules.__path__):
        names = vars(importlib.import_module(f"loopdoc.rules.{module.name}"))
        found |= {name: value for name, value in names.items() if isinstance(value, Rule)}
    return found


def test_the_catalogue_holds_every_rule_once() -> None:
    ids = [rule.id for rule in RULES]
    assert len(ids) == len(set(ids))
    assert set(ids) == {rule.id for rule in rules_in_modules().values()}


def test_a_rule_is_named_after_its_function() -> None:
    for name, rule in rules_in_modules().items():
        assert rule.id == name.replace("_", "-")


def test_every_rule_has_a_case_that_breaks_it_and_one_that_just_holds() -> None:
    breaking = {case.rule for case in cases() if case.finds}
    holding = {case.rule for case in cases() if not case.finds and not case.not_checked}
    ids = {rule.id for rule in RULES}
    assert breaking == ids
    assert holding == ids


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.id)
def test_a_rule_says_why_it_is_there(rule: Rule) -> None:
    assert tuple(rule.sections) == HEADINGS
    assert all(text.endswith(".") and len(text) > 10 for text in rule.sections.values())
    assert rule.statement.endswith(".")
    assert rule.statement.count(".") == 1, "one sentence states the fault"
    assert rule.source


def test_every_threshold_is_explained_and_used() -> None:
    # Most are used by rules; the tolerances of a loop check by its record and by what judges the results.
    sources = "".join(path.read_text("utf-8") for path in Path(loopdoc.rules.__path__[0]).parent.rglob("*.py"))
    for entry in policy_entries():
        assert entry.metadata["unit"]
        assert entry.metadata["meaning"]
        assert entry.metadata["source"]
        assert f"limits.{entry.name}" in sources
