"""A finding: one result of the check, and what a whole check found."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import IntEnum

from loopdoc.register.model import Deviation
from loopdoc.register.place import Place


class Level(IntEnum):
    """How much a finding matters; a higher number is worse."""

    NOTE = 1
    WARNING = 2
    ERROR = 3

    def __str__(self) -> str:
        return self.name.lower()


@dataclass(frozen=True, slots=True)
class Related:
    """A second place that belongs to a finding, and what stands there."""

    place: Place
    what: str


@dataclass(frozen=True, slots=True)
class Alike:
    """What lets findings of one rule be told together, where there are many."""

    what: str
    """What the finding itself is about, such as `measurement/range`."""
    shared: str
    """What it shares with the others, such as the reason of a hold."""


@dataclass(frozen=True, slots=True)
class Finding:
    """One result of the check."""

    rule: str
    level: Level
    tag: str
    """The tag (or, for texts and document control, the section) it is about."""
    message: str
    remedy: str
    place: Place
    related: tuple[Related, ...] = ()
    alike: Alike | None = None
    """None where a finding is always told by itself."""
    accepted_by: Deviation | None = None
    """The deviation that accepts it."""
    path: str = ""
    """Where it stands by keys, as `loops/TIC-2014/alarms/high`, which outlives moved lines and renamed files."""
    touches: tuple[str, ...] = ()
    """Of an accepted finding: every tag under which it or a related place stands, so that no document is without it."""

    @property
    def order(self) -> tuple[str, int, int, str, str]:
        return (self.place.file, self.place.line, self.place.column, self.rule, self.message)


@dataclass(slots=True)
class Coverage:
    """How often a rule was checked, could not be checked, and why not."""

    checked: int = 0
    not_checked: int = 0
    reasons: Counter[str] = field(default_factory=Counter)
    """Why it was not checked, in words, each with its count."""
    where: list[tuple[str, str]] = field(default_factory=list)
    """Tag and reason of each check that was not made."""


@dataclass(frozen=True, slots=True)
class Ran:
    """What the rules of one check could look at, for the rules that judge what came of the others."""

    rules: frozenset[str]
    """Ids of the rules that were run."""
    not_checked: Mapping[tuple[str, str], str]
    """Why a rule could not be checked, by its id and each tag that it was about."""

    @classmethod
    def of(cls, coverage: Mapping[str, Coverage]) -> Ran:
        """What the rules could look at, from what they counted."""
        lacking = {
            (rule, word): reason
            for rule, entry in coverage.items()
            for subject, reason in entry.where
            for word in subject.split()
        }
        return cls(frozenset(coverage), lacking)


@dataclass(frozen=True, slots=True)
class Baseline:
    """An earlier revision of the register, whose own findings a check passes over."""

    revision: str
    """As it was asked for."""
    passed_over: int
    """How many findings, open or accepted, that revision had already."""
    unreadable: str = ""
    """Why that revision could not be read as a register; every finding then counts as new."""


@dataclass(frozen=True, slots=True)
class CheckResult:
    """All that one check found, accepted and could not check."""

    findings: tuple[Finding, ...]
    """Open findings in order of file, line, column and rule."""
    accepted: tuple[Finding, ...]
    """Findings accepted by a deviation in force."""
    coverage: dict[str, Coverage]
    """By rule id, in the order of the catalogue."""
    baseline: Baseline | None = None
    """The earlier revision against which the findings are new."""

    def count(self, level: Level) -> int:
        return sum(1 for finding in self.findings if finding.level is level)

    @property
    def checked(self) -> int:
        return sum(entry.checked for entry in self.coverage.values())

    @property
    def not_checked(self) -> int:
        return sum(entry.not_checked for entry in self.coverage.values())

    def about(self, tags: set[str]) -> tuple[Finding, ...]:
        """Open findings about any of these tags."""
        return tuple(finding for finding in self.findings if finding.tag in tags)
