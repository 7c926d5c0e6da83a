"""The result of a check as text for people and as JSON for programs."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from loopdoc.exchange.escaping import for_json, for_terminal
from loopdoc.exchange.source_lines import SourceLines
from loopdoc.register.place import Fault, Place
from loopdoc.rules.finding import CheckResult, Coverage, Finding, Level

CAUTION = (
    "These results support and do not replace review by competent persons; local codes, the hazard study and the "
    "manufacturer's data govern. Safety instrumented functions need their own lifecycle (IEC 61511)."
)
TOLD_TOGETHER = 4
"""From so many on, findings that share what they say are told together."""
_COLOURS = {"error": "\x1b[1;31m", "warning": "\x1b[1;33m", "note": "\x1b[1;36m", "accepted": "\x1b[1m"}
_PLAIN = "\x1b[0m"


class _Page:
    """Lines of text for a terminal; colour is set here only, around text that is escaped already."""

    def __init__(self, sources: Mapping[str, bytes], *, colour: bool) -> None:
        self._sources = SourceLines(sources)
        self._colour = colour
        self.lines: list[str] = []

    def say(self, text: str) -> None:
        self.lines.append(for_terminal(text))

    def head(self, place: Place, level: str, text: str) -> None:
        self.lines.append(f"{for_terminal(str(place))}: {self._coloured(level, level)}: {for_terminal(text)}")

    def source(self, place: Place, level: str) -> None:
        excerpt = self._sources.excerpt(place)
        if excerpt:
            line, before = excerpt
            self.lines.append(f"{place.line:>7} | {line}".rstrip())
            self.lines.append(f"{'':7} | {before}{self._coloured('^', level)}")

    def text(self) -> str:
        return "\n".join(self.lines) + "\n"

    def _coloured(self, text: str, level: str) -> str:
        return f"{_COLOURS[level]}{text}{_PLAIN}" if self._colour and level in _COLOURS else text


def as_text(result: CheckResult, sources: Mapping[str, bytes], *, colour: bool = False) -> str:
    """Findings with their lines and remedies, what deviations accept, and what was and was not checked."""
    page = _Page(sources, colour=colour)
    alone, told_together = gathered(result.findings)
    for finding in alone:
        level = str(finding.level)
        page.head(finding.place, level, f"{finding.rule}: {finding.tag}: {finding.message}")
        page.source(finding.place, level)
        for related in finding.related:
            page.say(f"    see {related.place}: {related.what}")
            page.source(related.place, "")
        page.say(f"    remedy: {finding.remedy}")
    for together in told_together:
        first = together[0]
        page.head(first.place, str(first.level), f"{first.rule}: {len(together)} {shared_by(together)}")
        for what, tags in by_what(together).items():
            page.say(f"    {what}: {', '.join(tags)}")
        page.say(f"    remedy: {first.remedy}")
    for finding in result.accepted:
        page.head(finding.place, "accepted", f"{finding.rule}: {finding.tag}: {finding.message}")
        page.say(f"    deviation: {accepted_why(finding)}")
    if page.lines:
        page.say("")
    page.say(summary(result))
    for told in baseline_told(result):
        page.say(told)
    unchecked = list(not_checked(result))
    if unchecked:
        page.say("Not checked, because the register lacks what the rule needs:")
        width = max(len(rule) for rule, _, _ in unchecked)
        for rule, entry, why in unchecked:
            page.say(f"    {rule:<{width}}  {entry.not_checked:>4}  {why}")
    page.say(CAUTION)
    return page.text()


def unreadable_text(faults: tuple[Fault, ...], sources: Mapping[str, bytes], *, colour: bool = False) -> str:
    """The faults that keep the register from being read, in the form of findings."""
    page = _Page(sources, colour=colour)
    for fault in faults:
        page.head(fault.place, "error", f"schema: {fault.message}")
        page.source(fault.place, "error")
        page.say(f"    remedy: {fault.remedy}")
    return page.text()


def unreadable_result(faults: tuple[Fault, ...], sources: Mapping[str, bytes]) -> CheckResult:
    """Those faults as findings of the rule `schema`, for programs; nothing else has been checked."""
    findings = tuple(
        Finding("schema", Level.ERROR, "register", fault.message, fault.remedy, fault.place, path=fault.pointer)
        for fault in faults
        if fault.place.file in sources
    )
    return CheckResult(tuple(sorted(findings, key=lambda finding: finding.order)), (), {})


def as_line(place: Place, message: str, remedy: str) -> str:
    """A fault that keeps the register from being read, in the form of a finding."""
    return for_terminal(f"{place}: error: schema: {message}\n    remedy: {remedy}")


# ---------------------------------------------------------------- parts that other forms share


def gathered(findings: Sequence[Finding]) -> tuple[list[Finding], list[list[Finding]]]:
    """Findings to be told one by one, then those of which many share what they say, each such lot together."""
    found: dict[tuple[str, str], list[Finding]] = {}
    for finding in findings:
        if finding.alike:
            found.setdefault((finding.rule, finding.alike.shared), []).append(finding)
    lots = [lot for lot in found.values() if len(lot) >= TOLD_TOGETHER]
    among = {id(finding) for lot in lots for finding in lot}
    return [finding for finding in findings if id(finding) not in among], lots


def shared_by(together: Sequence[Finding]) -> str:
    """What findings that are told together share."""
    alike = together[0].alike
    assert alike is not None
    return alike.shared


def by_what(together: Sequence[Finding]) -> dict[str, list[str]]:
    """The tags of findings that are told together, by what is found at them."""
    found: dict[str, list[str]] = {}
    for finding in together:
        assert finding.alike is not None
        found.setdefault(finding.alike.what or "the whole of it", []).append(finding.tag)
    return found


def summary(result: CheckResult) -> str:
    """One line: findings by level, deviations, checks made and not made."""
    found = ", ".join(counted(result.count(level), str(level)) for level in sorted(Level, reverse=True))
    return (
        f"{found}; {counted(len(result.accepted), 'finding')} accepted by deviation; "
        f"{counted(result.checked, 'check')} made, {result.not_checked} not made."
    )


def counted(number: int, one: str) -> str:
    """A number with its noun in singular or plural."""
    return f"{number} {one}" if number == 1 else f"{number} {one}s"


def baseline_told(result: CheckResult) -> tuple[str, ...]:
    """What is said about the earlier revision against which the findings are new; nothing without one."""
    baseline = result.baseline
    if baseline is None:
        return ()
    if baseline.unreadable:
        return (f"Nothing is passed over: {baseline.unreadable}",)
    passed_over = counted(baseline.passed_over, "finding")
    return (f"New or changed since {baseline.revision}; {passed_over} of before passed over.",)


def accepted_why(finding: Finding) -> str:
    """Reason, approver and end date of the deviation that accepts a finding."""
    deviation = finding.accepted_by
    assert deviation is not None
    return f"{str(deviation.reason).rstrip('. ')}; approved by {deviation.approved_by}, until {deviation.until}"


def not_checked(result: CheckResult) -> Iterator[tuple[str, Coverage, str]]:
    """Rules that could not be checked somewhere: id, coverage, and the most frequent reason in words."""
    for rule, entry in result.coverage.items():
        if entry.not_checked:
            reason, times = entry.reasons.most_common(1)[0]
            others = len(entry.reasons) - 1
            more = f" and {others} other {'reason' if others == 1 else 'reasons'}" if others else ""
            yield rule, entry, f"{reason} ({times} of {entry.not_checked}){more}"


# ---------------------------------------------------------------- JSON


def as_json(result: CheckResult) -> str:
    """Findings, accepted findings and coverage as one JSON object."""
    document: dict[str, Any] = {
        "findings": [_finding_object(finding) for finding in result.findings],
        "accepted": [
            _finding_object(finding)
            | {
                "deviation": {
                    "reason": str(finding.accepted_by.reason),
                    "approved_by": str(finding.accepted_by.approved_by),
                    "until": str(finding.accepted_by.until),
                }
            }
            for finding in result.accepted
            if finding.accepted_by
        ],
        "checked": {rule: entry.checked for rule, entry in result.coverage.items()},
        "not_checked": {
            rule: [{"tag": tag, "reason": reason} for tag, reason in entry.where]
            for rule, entry in result.coverage.items()
            if entry.not_checked
        },
        "caution": CAUTION,
    }
    if result.baseline:
        document["since"] = {"revision": result.baseline.revision, "passed_over": result.baseline.passed_over}
        if result.baseline.unreadable:
            document["since"]["unreadable"] = result.baseline.unreadable
    return for_json(document) + "\n"


def _finding_object(finding: Finding) -> dict[str, Any]:
    return {
        "rule": finding.rule,
        "level": str(finding.level),
        "tag": finding.tag,
        "message": finding.message,
        "remedy": finding.remedy,
        "file": finding.place.file,
        "line": finding.place.line,
        "column": finding.place.column,
        "related": [
            {"file": r.place.file, "line": r.place.line, "column": r.place.column, "what": r.what}
            for r in finding.related
        ],
    }
