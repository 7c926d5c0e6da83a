"""The result of a check as text for people and as JSON for programs."""

from __future__ import annotations

import json
from typing import Any

from loopdoc.register.place import Place
from loopdoc.rules.finding import CheckResult, Finding, Level

CAUTION = (
    "These results support and do not replace review by competent persons; local codes, the hazard study and the "
    "manufacturer's data govern. Safety instrumented functions need their own lifecycle (IEC 61511)."
)


def as_text(result: CheckResult) -> str:
    """Findings with their remedies, what deviations accept, and what was and was not checked."""
    lines: list[str] = []
    for finding in result.findings:
        lines.extend(_finding_lines(finding))
    for finding in result.accepted:
        deviation = finding.accepted_by
        assert deviation is not None
        lines.append(f"{_head(finding, 'accepted')}: {finding.message}")
        lines.append(
            f"    deviation: {deviation.reason}; approved by {deviation.approved_by}, until {deviation.until}"
        )
    if lines:
        lines.append("")
    lines.append(summary(result))
    unchecked = {rule: entry for rule, entry in result.coverage.items() if entry.not_checked}
    if unchecked:
        lines.append("Not checked, because the register lacks what the rule needs:")
        width = max(map(len, unchecked))
        for rule, entry in unchecked.items():
            reason, times = entry.reasons.most_common(1)[0]
            others = len(entry.reasons) - 1
            more = f" and {others} other {'reason' if others == 1 else 'reasons'}" if others else ""
            lines.append(
                f"    {rule:<{width}}  {entry.not_checked:>4}  {reason} ({times} of {entry.not_checked}){more}"
            )
    lines.append(CAUTION)
    return escape("\n".join(lines)) + "\n"


def summary(result: CheckResult) -> str:
    """One line: findings by level, deviations, checks made and not made."""

    def counted(number: int, one: str) -> str:
        return f"{number} {one}" if number == 1 else f"{number} {one}s"

    found = ", ".join(counted(result.count(level), str(level)) for level in sorted(Level, reverse=True))
    return (
        f"{found}; {counted(len(result.accepted), 'finding')} accepted by deviation; "
        f"{counted(result.checked, 'check')} made, {result.not_checked} not made."
    )


def as_json(result: CheckResult) -> str:
    """Findings, accepted findings and coverage as one JSON object."""
    document = {
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
    return json.dumps(document, ensure_ascii=False, indent=2) + "\n"


def as_line(place: Place, message: str, remedy: str) -> str:
    """A fault that keeps the register from being read, in the form of a finding."""
    return escape(f"{place}: error: schema: {message}\n    remedy: {remedy}")


def _head(finding: Finding, level: str) -> str:
    return f"{finding.place}: {level}: {finding.rule}: {finding.tag}"


def _finding_lines(finding: Finding) -> list[str]:
    lines = [f"{_head(finding, str(finding.level))}: {finding.message}"]
    lines.extend(f"    see {related.place}: {related.what}" for related in finding.related)
    lines.append(f"    remedy: {finding.remedy}")
    return lines


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


def escape(text: str) -> str:
    """Text that a terminal shows and does not obey: control and bidirectional characters are written out."""
    return "".join(c if c == "\n" or (c.isprintable() or c == " ") else f"\\u{ord(c):04x}" for c in text)
