"""Which finding each deviation accepts, and what becomes of the deviations that accept none.

A deviation accepts exactly one finding: one rule at one place. Where its rule finds something at several places of a
tag, `at` goes on to the place as a pointer in prose does: `TIC-2014/alarms/high/limit`.
"""

from __future__ import annotations

import datetime
from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from enum import Enum

from loopdoc.register.model import Deviation, Hold, known
from loopdoc.register.place import Place
from loopdoc.register.text import TextFile
from loopdoc.rules.finding import Finding

_BY_TAG = ("loops", "final_elements", "instruments", "functions", "interlocks", "texts", "units")
"""Sections whose entries stand under a tag or a number."""


class State(Enum):
    """What a deviation does."""

    ACCEPTS = "accepts a finding"
    EXPIRED = "has expired"
    INCOMPLETE = "is not approved"
    AMBIGUOUS = "could accept several findings"
    UNUSED = "accepts nothing"


@dataclass(frozen=True, slots=True)
class DeviationUse:
    """A deviation and what it does in one check."""

    deviation: Deviation
    state: State
    on: datetime.date | None
    """The day of the check; None where it is not known, and no deviation can have expired."""
    places: tuple[str, ...] = ()
    """Where its rule finds something, as `at` would name it."""
    already: Deviation | None = None
    """Another deviation that accepts the same finding."""

    @property
    def tag(self) -> str:
        """The tag at which it stands, without the place below it; `deviations` where that is not known."""
        return (known(self.deviation.at) or "deviations").partition("/")[0]


@dataclass(frozen=True, slots=True)
class Accepted:
    """Findings told apart by whether a deviation accepts them."""

    accepted: tuple[Finding, ...]
    still_open: tuple[Finding, ...]
    uses: tuple[DeviationUse, ...]
    """Every deviation, in the order of the register."""


def accept(
    findings: Sequence[Finding],
    deviations: Iterable[Deviation],
    on: datetime.date | None,
    *,
    never: Collection[str],
    files: Mapping[str, TextFile],
) -> Accepted:
    """What the deviations accept on one day; findings of the rules in ``never`` stay open."""
    entries = list(enumerate(deviations))
    named = {(known(one.rule), at) for _, one in entries for at in _tags(known(one.at) or "")}
    by_rule: dict[tuple[str, str], dict[str, list[Finding]]] = {}
    for finding in findings:
        key = (finding.rule, finding.tag)
        if key in named and finding.rule not in never:
            by_place = by_rule.setdefault(key, {})
            by_place.setdefault(_pointer(finding.place, files), []).append(finding)
    taken: dict[Finding, Deviation] = {}
    uses: dict[int, DeviationUse] = {}
    # One that names a place takes its finding before one that names only the tag.
    for index, deviation in sorted(entries, key=lambda entry: -(known(entry[1].at) or "").count("/")):
        uses[index] = _use(deviation, on, by_rule, taken)
    return Accepted(
        tuple(
            replace(finding, accepted_by=taken[finding], touches=_touched(finding, files))
            for finding in findings
            if finding in taken
        ),
        tuple(finding for finding in findings if finding not in taken),
        tuple(uses[index] for index, _ in entries),
    )


def _use(
    deviation: Deviation,
    on: datetime.date | None,
    by_rule: Mapping[tuple[str, str], Mapping[str, list[Finding]]],
    taken: dict[Finding, Deviation],
) -> DeviationUse:
    if not complete(deviation):
        return DeviationUse(deviation, State.INCOMPLETE, on)
    until = date(known(deviation.until))
    if on is not None and until is not None and until < on:
        return DeviationUse(deviation, State.EXPIRED, on)
    at, rule = known(deviation.at) or "", known(deviation.rule) or ""
    found = by_rule.get((rule, at), {})
    if not found and "/" in at:
        found = {
            place: those
            for place, those in by_rule.get((rule, at.partition("/")[0]), {}).items()
            if place == at or place.startswith(f"{at}/")
        }
    free = {place: those for place, those in found.items() if not any(one in taken for one in those)}
    if len(free) > 1:
        return DeviationUse(deviation, State.AMBIGUOUS, on, tuple(sorted(free)))
    if not free:
        already = next((taken[one] for those in found.values() for one in those if one in taken), None)
        return DeviationUse(deviation, State.UNUSED, on, already=already)
    ((place, those),) = free.items()
    taken.update(dict.fromkeys(those, deviation))
    return DeviationUse(deviation, State.ACCEPTS, on, (place,))


def complete(deviation: Deviation) -> bool:
    """Whether reason, approver and end date are all given, so that it can be in force."""
    written = (deviation.reason, deviation.approved_by, deviation.until)
    return all(isinstance(one, str) and any(map(str.isalnum, one)) for one in written) and bool(
        date(known(deviation.until))
    )


def lacking(deviation: Deviation) -> tuple[str, ...]:
    """Keys of what a deviation lacks before it can be in force, where the format does not tell of them."""
    keys = ("reason", "approved_by", "until")
    written: dict[str, str | Hold | None] = {key: getattr(deviation, key) for key in keys}
    return tuple(
        key
        for key, one in written.items()
        if (isinstance(one, Hold) and one.readable) or (isinstance(one, str) and not any(map(str.isalnum, one)))
    )


def date(written: str | None) -> datetime.date | None:
    """A date of the register; None where there is none, or it is none, of which the schema tells."""
    try:
        return datetime.date.fromisoformat(written) if written else None
    except ValueError:
        return None


def _tags(at: str) -> tuple[str, ...]:
    """What a finding's tag may be where a deviation stands at a tag, or at a place below one."""
    return (at, at.partition("/")[0])


def _pointer(place: Place, files: Mapping[str, TextFile]) -> str:
    """A place as `at` names it: the tag, then the keys below it (RFC 6901)."""
    steps = _steps(place, files)
    below = steps[1:] if len(steps) > 1 and steps[0] in _BY_TAG else steps
    return "/".join(str(step).replace("~", "~0").replace("/", "~1") for step in below)


def _steps(place: Place, files: Mapping[str, TextFile]) -> tuple[str | int, ...]:
    file = files.get(place.file)
    return file.path_at(place.line, place.column) if file else ()


def _touched(finding: Finding, files: Mapping[str, TextFile]) -> tuple[str, ...]:
    """The tags under which a finding and its related places stand."""
    places = (finding.place, *(related.place for related in finding.related))
    return tuple(dict.fromkeys((finding.tag, *(tag for place in places if (tag := _tag_at(place, files))))))


def _tag_at(place: Place, files: Mapping[str, TextFile]) -> str:
    steps = _steps(place, files)
    return str(steps[1]) if len(steps) > 1 and steps[0] in _BY_TAG else ""
