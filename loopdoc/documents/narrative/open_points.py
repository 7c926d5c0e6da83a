"""What is still open: holds, accepted deviations and findings, each said once."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.wording import grouped, sentence, upper_first
from loopdoc.register.model import HeldValue, known
from loopdoc.rules.finding import Finding

HOLD_RULE = "hold-open"
"""The rule whose findings say no more than the list of holds."""

HOLD_HEAD = ("On hold", "Of", "Reason")
DEVIATION_HEAD = ("Rule and tag", "Finding", "Reason", "Approved by", "Until")
FINDING_HEAD = ("Level", "Rule and tag", "Finding", "Remedy")


def held_name(path: Sequence[str | int]) -> str:
    """What is held, in English: `process gain`, `range`, `high alarm limit`."""
    return ENGLISH.held_name(path)


def held_in_a_sentence(holds: Iterable[HeldValue], language: Language) -> str:
    """`Still on hold: the hazard of A, B and C; the process gain of A`; empty where nothing is held."""
    return language.still_on_hold([(language.held_name(hold.path), hold.tag) for hold in holds])


def hold_rows(holds: Iterable[HeldValue], language: Language) -> Iterator[tuple[str, ...]]:
    """Holds of one value for one reason in one row, as `HOLD_HEAD` names the columns."""
    by_value: dict[tuple[str, str], list[str]] = {}
    for hold in holds:
        tags = by_value.setdefault((language.held_name(hold.path), hold.reason), [])
        if hold.tag not in tags:
            tags.append(hold.tag)
    for (name, reason), tags in by_value.items():
        yield upper_first(name), language.listed(tags), sentence(reason)


def deviation_rows(accepted: Iterable[Finding], language: Language) -> Iterator[tuple[str, ...]]:
    """Accepted findings with who approved them, why and until when."""
    for finding in accepted:
        deviation = finding.accepted_by
        if deviation is not None:
            yield (
                f"{finding.rule}, {finding.tag}",
                _told(finding, finding.message, language),
                sentence(language.value(deviation.reason)),
                language.entry(known(deviation.approved_by) or language.shown(deviation.approved_by)),
                language.date(until) if (until := known(deviation.until)) else language.shown(deviation.until),
            )


def accepted_in_a_sentence(accepted: Sequence[Finding], language: Language) -> str:
    """Which deviations stand; empty where none does."""
    by_tag = grouped((finding.tag, finding.rule) for finding in accepted)
    found = [f"{tag} ({', '.join(rules)})" for tag, rules in by_tag.items()]
    return language.deviations_stand(found, sum(map(len, by_tag.values()))) if found else ""


def finding_rows(findings: Iterable[Finding], language: Language) -> Iterator[tuple[str, ...]]:
    """Findings as `FINDING_HEAD` names the columns."""
    for finding in findings:
        message, remedy = (_told(finding, text, language) for text in (finding.message, finding.remedy))
        yield language.term("level", str(finding.level)), f"{finding.rule}, {finding.tag}", message, remedy


def _told(finding: Finding, text: str, language: Language) -> str:
    what, by = language.label("value in a finding"), language.by_check(finding.rule)
    return language.message(language.finding_text(text), finding.tag, what, by)


class OpenPoints:
    """Holds, findings and accepted findings of a register, found by their tags."""

    def __init__(self, holds: Iterable[HeldValue], findings: Iterable[Finding], accepted: Iterable[Finding]) -> None:
        self._holds: dict[str, list[HeldValue]] = {}
        for hold in holds:
            self._holds.setdefault(hold.tag, []).append(hold)
        self._findings = _by_tag(finding for finding in findings if finding.rule != HOLD_RULE)
        self._accepted: dict[str, list[Finding]] = {}
        for finding in accepted:
            for tag in finding.touches:
                self._accepted.setdefault(tag, []).append(finding)

    def holds(self, tags: Iterable[str]) -> tuple[HeldValue, ...]:
        """Holds under these tags, in the order of the register."""
        found = [hold for tag in set(tags) for hold in self._holds.get(tag, ())]
        return tuple(sorted(found, key=lambda hold: hold.place))

    def findings(self, tags: Iterable[str]) -> tuple[Finding, ...]:
        """Open findings about these tags, without those that only repeat a hold."""
        return _of(self._findings, tags)

    def accepted(self, tags: Iterable[str]) -> tuple[Finding, ...]:
        """Accepted findings that touch one of these tags."""
        return _of(self._accepted, tags)


def _by_tag(findings: Iterable[Finding]) -> dict[str, list[Finding]]:
    found: dict[str, list[Finding]] = {}
    for finding in findings:
        found.setdefault(finding.tag, []).append(finding)
    return found


def _of(by_tag: dict[str, list[Finding]], tags: Iterable[str]) -> tuple[Finding, ...]:
    found = {one for tag in set(tags) for one in by_tag.get(tag, ())}
    return tuple(sorted(found, key=lambda one: one.order))
