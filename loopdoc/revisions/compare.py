"""Two registers compared: what changed, what that does to the plant, and how far it reaches."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

from loopdoc.register.model import Register, Revision, known
from loopdoc.revisions.changes import Change, Impact, Kind, TagChange, changes_between
from loopdoc.revisions.effects import Effects, Worked, effects_between
from loopdoc.rules.finding import Level


@dataclass(frozen=True, slots=True)
class Side:
    """One of two registers, as a reader knows it."""

    named: str
    """As it was asked for: a git revision, a folder."""
    code: str
    date: str

    def __str__(self) -> str:
        return f"{self.code} of {self.date}" if self.code and self.date else self.code or self.named


@dataclass(frozen=True, slots=True)
class DocumentChange:
    """What becomes of one document."""

    what: str
    """new, withdrawn or changed."""
    kind: str
    number: str
    title: str
    supplementary_title: str
    blocks: int
    """Paragraphs, rows and figures that differ; of a new document all."""
    removed: int
    """Those of the old document that are gone."""


@dataclass(frozen=True, slots=True)
class EffectLine:
    """What one interlock is tripped by, votes or does, before and after."""

    interlock: str
    what: str
    """cause, effect or voting."""
    about: str
    """Tag of the cause or of the effect."""
    old: str
    new: str


@dataclass(frozen=True)
class RegisterComparison:
    """Two registers side by side."""

    old: Side
    new: Side
    tags: tuple[TagChange, ...]
    """By impact, the farthest first, then by unit and tag."""
    effects: Effects
    documents: tuple[DocumentChange, ...] | None
    """In the order of an issue; None where they were not asked for."""

    @property
    def differs(self) -> bool:
        """Whether the registers differ in more than their writing."""
        return any(not change.only_rewritten for change in self.tags)

    def impact(self, change: TagChange) -> Impact:
        """How far the change under a tag reaches, with what it does to the plant."""
        return max(change.impact, self._reach.get(change.tag, Impact.RECORD))

    @cached_property
    def _reach(self) -> dict[str, Impact]:
        return _reach(self.effects)

    @cached_property
    def cause_and_effect(self) -> tuple[EffectLine, ...]:
        """What changes in the cause and effect charts."""
        return tuple(line for tag in self.tags if tag.section == "interlocks" for line in _lines(tag))


def compared(old: Worked, new: Worked, *, old_named: str, new_named: str) -> RegisterComparison:
    """What changed from one register to another and what that does; documents are added by whoever can build them."""
    tags = changes_between(old.plant.register, new.plant.register)
    names = {change.was: change.tag for change in tags if change.kind is Kind.RENAMED}
    effects = effects_between(old, new, names)
    sides = _side(old.plant.register, old_named), _side(new.plant.register, new_named)
    reach = _reach(effects)
    ordered = sorted(
        tags,
        key=lambda change: (
            -max(change.impact, reach.get(change.tag, Impact.RECORD)),
            change.section in ("register", "deviations"),
            change.unit,
            change.tag,
        ),
    )
    return RegisterComparison(*sides, tuple(ordered), effects, None)


def _side(register: Register, named: str) -> Side:
    revision: Revision | None = register.revision
    return Side(
        named,
        (known(revision.code) if revision else None) or "",
        (known(revision.date) if revision else None) or "",
    )


def _reach(effects: Effects) -> dict[str, Impact]:
    """How far the effects on each tag reach."""
    found: dict[str, Impact] = {}

    def reaches(tag: str, impact: Impact) -> None:
        found[tag] = max(impact, found.get(tag, Impact.RECORD))

    for margin in effects.margins:
        reaches(margin.tag, Impact.CONTROL)
    for time in effects.times:
        reaches(time.tag, Impact.ALARMS)
    for failure in effects.failures:
        if failure.worse:
            reaches(failure.tag, Impact.PROTECTION)
    for finding in effects.findings:
        if finding.appears and finding.finding.level is Level.ERROR:
            reaches(finding.finding.tag, Impact.PROTECTION)
    return found


_CHARTED = {"initiators": "cause", "actions": "effect", "voting": "voting"}


def _lines(tag: TagChange) -> Iterator[EffectLine]:
    grouped: dict[tuple[str, str], list[Change]] = {}
    for change in tag.changes:
        key, _, rest = change.pointer[1:].partition("/")
        if key in _CHARTED and change.kind is not Kind.REWRITTEN:
            grouped.setdefault((_CHARTED[key], rest.partition("/")[0]), []).append(change)
    for (what, about), changes in grouped.items():
        old, new = (", ".join(filter(None, (_worded(one, side) for one in changes))) for side in ("old", "new"))
        yield EffectLine(tag.tag, what, about, old, new)


def _worded(change: Change, side: str) -> str:
    value: str = getattr(change, side)
    key = change.pointer.rpartition("/")[2]
    return value if not value or key in ("trips", "voting") or change.pointer.count("/") < 3 else f"{key} {value}"
