"""What is open at a tag: findings, deviations, holds and checks that could not be made, for the pages of the site."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from loopdoc.documents.basis import Basis
from loopdoc.documents.narrative.open_points import HOLD_RULE, OpenPoints, held_name
from loopdoc.documents.values import shown
from loopdoc.documents.wording import sentence
from loopdoc.register.model import HeldValue
from loopdoc.register.place import Place
from loopdoc.rules.finding import Finding, Level


@dataclass(frozen=True, slots=True)
class Point:
    """A finding or a hold as a page tells it."""

    kind: str
    """error, warning, note, deviation or hold."""
    what: str
    """Id of the rule, or what is on hold."""
    tag: str
    text: str
    remedy: str
    """What to write instead; of a deviation, who approved it and until when."""
    place: Place

    @property
    def heading(self) -> str:
        """The kind as a label."""
        return _HEADINGS[self.kind]


_HEADINGS = {"error": "Error", "warning": "Warning", "note": "Note", "deviation": "Deviation", "hold": "Hold"}


@dataclass(frozen=True, slots=True)
class NotMade:
    """A check that could not be made."""

    rule: str
    tag: str
    reason: str


@dataclass(frozen=True, slots=True)
class Counts:
    """How much is open."""

    errors: int
    warnings: int
    notes: int
    accepted: int
    not_made: int
    holds: int
    rules: tuple[str, ...]
    """Rules that found something there, each once."""

    @property
    def open(self) -> str:
        """Open findings in words; empty where there are none."""
        named = ((self.errors, "error"), (self.warnings, "warning"), (self.notes, "note"))
        return ", ".join(f"{count} {name if count == 1 else f'{name}s'}" for count, name in named if count)

    @property
    def weight(self) -> int:
        """Key that sorts the worst highest."""
        return (self.errors * 1000 + self.warnings) * 1000 + self.notes

    @property
    def states(self) -> str:
        """Words by which a list is filtered."""
        named = (
            (self.errors, "error"), (self.errors + self.warnings + self.notes, "open"), (self.accepted, "accepted"),
            (self.not_made, "not-checked"), (self.holds, "hold"),
        )  # fmt: skip
        return " ".join((*(name for count, name in named if count), *self.rules)) or "clean"


class Points:
    """All that is open in a register, found by tag. A hold counts as a hold and not as a finding besides."""

    def __init__(self, basis: Basis) -> None:
        register, result = basis.plant.register, basis.result
        self._open = OpenPoints(register.holds, result.findings, result.accepted)
        self._not_made: dict[str, list[NotMade]] = {}
        for rule, entry in result.coverage.items():
            for subject, reason in entry.where:
                for tag in dict.fromkeys(subject.split()):
                    self._not_made.setdefault(tag, []).append(NotMade(rule, tag, reason))

    def points(self, tags: Iterable[str]) -> tuple[Point, ...]:
        """Findings, the worst first, then deviations, then holds."""
        own = set(tags)
        findings = sorted(self._open.findings(own), key=lambda finding: (-finding.level, finding.order))
        return (
            *(point_of(finding) for finding in findings),
            *(point_of(finding) for finding in self._open.accepted(own)),
            *(hold_point(hold) for hold in self._open.holds(own)),
        )

    def not_made(self, tags: Iterable[str]) -> tuple[NotMade, ...]:
        """Checks that could not be made about these tags."""
        return tuple(one for tag in sorted(set(tags)) for one in self._not_made.get(tag, ()))

    def counts(self, tags: Iterable[str]) -> Counts:
        """How much is open about these tags."""
        own = set(tags)
        found, accepted = self._open.findings(own), self._open.accepted(own)
        levels = [finding.level for finding in found]
        rules = dict.fromkeys(finding.rule for finding in (*found, *accepted))
        return Counts(
            levels.count(Level.ERROR), levels.count(Level.WARNING), levels.count(Level.NOTE),
            len(accepted), len(self.not_made(own)), len(self._open.holds(own)), tuple(rules),
        )  # fmt: skip


def all_points(basis: Basis) -> tuple[Point, ...]:
    """Every finding, deviation and hold of a register."""
    result = basis.result
    findings = [finding for finding in result.findings if finding.rule != HOLD_RULE]
    findings.sort(key=lambda finding: (-finding.level, finding.order))
    holds: Sequence[HeldValue] = basis.plant.register.holds
    return (*map(point_of, findings), *map(point_of, result.accepted), *map(hold_point, holds))


def point_of(finding: Finding) -> Point:
    """A finding, open or accepted."""
    deviation = finding.accepted_by
    if deviation is None:
        return Point(
            str(finding.level), finding.rule, finding.tag, sentence(_on_a_page(finding.message)),
            sentence(_on_a_page(finding.remedy)), finding.place,
        )  # fmt: skip
    approved = f"Approved by {shown(deviation.approved_by)}, until {shown(deviation.until)}."
    text = f"{sentence(_on_a_page(finding.message))} Accepted: {sentence(shown(deviation.reason))}"
    return Point("deviation", finding.rule, finding.tag, text, approved, finding.place)


def hold_point(hold: HeldValue) -> Point:
    """A value on hold."""
    return Point("hold", held_name(hold.path), hold.tag, sentence(hold.reason), "", hold.place)


def _on_a_page(message: str) -> str:
    """On a page, words of the register stand in quotation marks and not in the back ticks of a terminal."""
    return re.sub(r"`([^`]*)`", "“\\1”", message)
