"""The result of a check as SARIF 2.1.0 (OASIS, Static Analysis Results Interchange Format)."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterator
from typing import Any
from urllib.parse import quote

from loopdoc import __version__
from loopdoc.exchange.escaping import for_json, for_line, for_terminal
from loopdoc.exchange.findings import accepted_why, baseline_told, counted
from loopdoc.register.place import Place
from loopdoc.rules.baseline import fingerprints
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.check import INTERNAL
from loopdoc.rules.explain import as_markdown, explanation
from loopdoc.rules.finding import CheckResult, Finding, Related

SCHEMA = "https://docs.oasis-open.org/sarif/sarif/v2.1.0/errata01/os/schemas/sarif-schema-2.1.0.json"
MAX_RESULTS = 25_000
"""A large forge refuses a run with more results; the least of them are then left out, and that is said."""
ROOT_BASE = "%SRCROOT%"
_SHOWN_TAGS = 5


def as_sarif(result: CheckResult, *, folder: str) -> str:
    """One run with rules, open findings, accepted ones as suppressed, and what was not checked.

    ``folder`` is the register's own, relative to the root of the repository.
    """
    index = {rule.id: number for number, rule in enumerate(RULES)}
    known = fingerprints(result)
    everything = (*result.findings, *result.accepted)
    kept = set(sorted(everything, key=lambda finding: (-finding.level, finding.order))[:MAX_RESULTS])
    notes = [_notification("note", text) for text in baseline_told(result)]
    if len(kept) < len(everything):
        left_out = counted(len(everything) - len(kept), "finding")
        notes.append(_notification("warning", f"{left_out} of the lowest levels left out; a run holds {MAX_RESULTS}."))
    document = {
        "$schema": SCHEMA,
        "version": "2.1.0",
        "runs": [
            {
                "tool": {"driver": _driver()},
                "columnKind": "unicodeCodePoints",
                "originalUriBaseIds": {ROOT_BASE: {"description": {"text": "The folder in which loopdoc was run."}}},
                "invocations": [
                    {
                        "executionSuccessful": bool(result.coverage)
                        and all(finding.rule != INTERNAL for finding in everything),
                        "toolExecutionNotifications": [*notes, *_not_checked(result, index)],
                    }
                ],
                "results": [
                    _result(finding, folder, index, known[finding]) for finding in everything if finding in kept
                ],
            }
        ],
    }
    return for_json(document) + "\n"


def _driver() -> dict[str, Any]:
    return {
        "name": "loopdoc",
        "version": __version__,
        "rules": [
            {
                "id": rule.id,
                "shortDescription": {"text": rule.statement},
                "fullDescription": {"text": f"{rule.statement} {rule.sections['Why']}"},
                "help": {"text": explanation(rule), "markdown": as_markdown(rule)},
                "defaultConfiguration": {"level": str(rule.level)},
            }
            for rule in RULES
        ],
    }


def _result(finding: Finding, folder: str, index: dict[str, int], fingerprint: str) -> dict[str, Any]:
    written: dict[str, Any] = {
        "ruleId": finding.rule,
        "level": str(finding.level),
        "message": {"text": for_terminal(f"{finding.tag}: {finding.message}\nRemedy: {finding.remedy}")},
        "locations": [_location(finding.place, folder) | {"logicalLocations": [_logical(finding)]}],
        # Some forges know a finding again by the second key alone and would otherwise make it from the line.
        "partialFingerprints": {"rulePathOrdinal/v1": fingerprint, "primaryLocationLineHash": fingerprint},
    }
    if finding.rule in index:
        written["ruleIndex"] = index[finding.rule]
    if finding.related:
        written["relatedLocations"] = [
            _related(number, related, folder) for number, related in enumerate(finding.related, 1)
        ]
    if finding.accepted_by:
        written["suppressions"] = [
            {"kind": "external", "status": "accepted", "justification": for_line(accepted_why(finding))}
        ]
    return written


def _location(place: Place, folder: str) -> dict[str, Any]:
    # surrogateescape: a file name is bytes, and a URI can carry any of them
    uri = quote(f"{folder}{place.file}".encode("utf-8", "surrogateescape"))
    return {
        "physicalLocation": {
            "artifactLocation": {"uri": uri, "uriBaseId": ROOT_BASE},
            "region": {"startLine": place.line, "startColumn": place.column},
        }
    }


def _logical(finding: Finding) -> dict[str, str]:
    return {"name": for_line(finding.tag), "fullyQualifiedName": for_line(finding.path or finding.tag)}


def _related(number: int, related: Related, folder: str) -> dict[str, Any]:
    return {"id": number, "message": {"text": for_line(related.what)}} | _location(related.place, folder)


def _not_checked(result: CheckResult, index: dict[str, int]) -> Iterator[dict[str, Any]]:
    for rule, entry in result.coverage.items():
        tags: dict[str, list[str]] = defaultdict(list)
        for tag, reason in entry.where:
            tags[reason].append(tag)
        for reason, lacking in tags.items():
            more = len(lacking) - _SHOWN_TAGS
            where = ", ".join(lacking[:_SHOWN_TAGS]) + (f" and {more} more" if more > 0 else "")
            notification = _notification("note", f"{rule} was not checked for {where}: {reason}.")
            if rule in index:
                notification["associatedRule"] = {"id": rule, "index": index[rule]}
            yield notification


def _notification(level: str, text: str) -> dict[str, Any]:
    return {"level": level, "message": {"text": for_line(text)}}
