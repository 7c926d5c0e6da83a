"""What is still open: holds, accepted deviations and findings, each said once."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence

from loopdoc.documents.values import shown
from loopdoc.documents.wording import grouped, listed, sentence, upper_first
from loopdoc.register.model import HeldValue
from loopdoc.rules.finding import Finding

HOLD_RULE = "hold-open"
"""The rule whose findings say no more than the list of holds."""

HOLD_HEAD = ("On hold", "Of", "Reason")
DEVIATION_HEAD = ("Rule and tag", "Finding", "Reason", "Approved by", "Until")
FINDING_HEAD = ("Level", "Rule and tag", "Finding", "Remedy")

_NAMES = {
    ("measurement", "on_fault"): "fault reading",
    ("measurement",): "measurement",
    ("controller", "on_bad_measurement"): "response to a bad measurement",
    ("controller",): "controller",
    ("process", "gain"): "process gain",
    ("process", "effect"): "process effect",
    ("process", "dead_time"): "dead time",
    ("process", "lag"): "lag",
    ("process", "lags"): "lags",
    ("process",): "process model",
    ("hazard",): "hazard",
    ("fails",): "fail position",
    ("safe",): "safe position",
    ("to",): "destination",
}


def held_name(path: Sequence[str | int]) -> str:
    """What is held, in words: `process gain`, `range`, `high alarm limit`."""
    steps = tuple(str(step) for step in path)
    if steps in _NAMES:
        return _NAMES[steps]
    words = [step.replace("_", " ") for step in steps]
    if len(steps) > 1 and steps[0] == "alarms":
        return f"{steps[1].replace('_', '-')} alarm {' '.join(words[2:])}".strip()
    if len(steps) > 1 and steps[0] == "disturbances":
        return f"{words[2]} of the disturbance {steps[1]}" if len(steps) > 2 else f"disturbance {steps[1]}"
    if len(steps) > 1 and steps[0] == "process" and steps[1] == "branches":
        return f"process {' of '.join(reversed(words[2:]))}"
    if len(steps) > 1 and steps[0] in ("setpoint", "output", "operating"):
        return " ".join(words)
    return " ".join(words[1:]) if len(words) > 1 and steps[0] in ("measurement", "controller") else " ".join(words)


def held_in_a_sentence(holds: Iterable[HeldValue]) -> str:
    """`Still on hold: the hazard of A, B and C; the process gain of A`; empty where nothing is held."""
    tags_of = grouped((held_name(hold.path), hold.tag) for hold in holds)
    names_of = grouped((listed(tags), name) for name, tags in tags_of.items())
    parts = [f"the {listed(names)} of {tags}" for tags, names in names_of.items()]
    return sentence(f"Still on hold: {'; '.join(parts)}") if parts else ""


def hold_rows(holds: Iterable[HeldValue]) -> Iterator[tuple[str, ...]]:
    """Holds of one value for one reason in one row, as `HOLD_HEAD` names the columns."""
    by_value: dict[tuple[str, str], list[str]] = {}
    for hold in holds:
        tags = by_value.setdefault((held_name(hold.path), hold.reason), [])
        if hold.tag not in tags:
            tags.append(hold.tag)
    for (name, reason), tags in by_value.items():
        yield upper_first(name), listed(tags), sentence(reason)


def deviation_rows(accepted: Iterable[Finding]) -> Iterator[tuple[str, ...]]:
    """Accepted findings with who approved them, why and until when."""
    for finding in accepted:
        deviation = finding.accepted_by
        if deviation is not None:
            yield (
                f"{finding.rule}, {finding.tag}",
                sentence(finding.message),
                sentence(shown(deviation.reason)),
                shown(deviation.approved_by),
                shown(deviation.until),
            )


def accepted_in_a_sentence(accepted: Sequence[Finding]) -> str:
    """Which deviations stand; empty where none does."""
    found = [f"{finding.tag} ({finding.rule})" for finding in accepted]
    if not found:
        return ""
    return sentence(f"{'a deviation stands' if len(found) == 1 else 'deviations stand'} at {listed(found)}")


def finding_rows(findings: Iterable[Finding]) -> Iterator[tuple[str, ...]]:
    """Findings as `FINDING_HEAD` names the columns."""
    for finding in findings:
        yield str(finding.level), f"{finding.rule}, {finding.tag}", sentence(finding.message), sentence(finding.remedy)


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
