"""Findings as code-quality JSON, the list of issues that a forge shows beside the changed lines.

Fields after the report format published for GitLab's code quality reports, a subset of the Code Climate engine
specification.
"""

from __future__ import annotations

from loopdoc.exchange.escaping import for_json, for_line
from loopdoc.rules.baseline import fingerprints
from loopdoc.rules.finding import CheckResult, Level

_SEVERITY = {Level.ERROR: "major", Level.WARNING: "minor", Level.NOTE: "info"}


def as_code_quality(result: CheckResult, *, folder: str) -> str:
    """The open findings; ``folder`` is the register's own, relative to the root of the repository."""
    known = fingerprints(result)
    return (
        for_json(
            [
                {
                    "description": for_line(f"{finding.tag}: {finding.message}; {finding.remedy}"),
                    "check_name": finding.rule,
                    "fingerprint": known[finding],
                    "severity": _SEVERITY[finding.level],
                    "location": {"path": f"{folder}{finding.place.file}", "lines": {"begin": finding.place.line}},
                }
                for finding in result.findings
            ]
        )
        + "\n"
    )
