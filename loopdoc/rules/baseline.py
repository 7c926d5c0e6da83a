"""What tells a finding from another when lines move, and which findings an earlier revision had already."""

from __future__ import annotations

import hashlib
from collections import Counter
from collections.abc import Iterable
from dataclasses import replace

from loopdoc.register.text import TextFile
from loopdoc.rules.finding import Baseline, CheckResult, Finding, Level

Identity = tuple[str, str, str, int]
"""Rule, tag, path by keys, and which of several such it is in order of place."""


def with_paths(findings: Iterable[Finding], files: Iterable[TextFile]) -> list[Finding]:
    """The findings, each with the path at which it stands."""
    by_name = {file.name: file for file in files}
    return [replace(finding, path=_path(finding, by_name)) for finding in findings]


def _path(finding: Finding, files: dict[str, TextFile]) -> str:
    file = files.get(finding.place.file)
    steps = file.path_at(finding.place.line, finding.place.column) if file else ()
    # The index of a list says how many entries stand before, not which entry it is.
    return "/".join("-" if isinstance(step, int) else step.replace("~", "~0").replace("/", "~1") for step in steps)


def identities(findings: Iterable[Finding]) -> dict[Finding, Identity]:
    """What each finding is known by, whatever line it stands in."""
    seen: Counter[tuple[str, str, str]] = Counter()
    known = {}
    for finding in sorted(findings, key=lambda finding: finding.order):
        named = (finding.rule, finding.tag, finding.path)
        known[finding] = (*named, seen[named])
        seen[named] += 1
    return known


def fingerprints(result: CheckResult) -> dict[Finding, str]:
    """A short text for each finding, open or accepted, that stays while rule, tag and path do."""
    known = identities((*result.findings, *result.accepted))
    return {
        finding: hashlib.sha256("\0".join(map(str, identity)).encode("utf-8", "surrogateescape")).hexdigest()[:32]
        for finding, identity in known.items()
    }


def new_since(result: CheckResult, earlier: CheckResult, revision: str) -> CheckResult:
    """What a check finds that the check of an earlier revision had not found.

    A finding is new where the earlier revision has none of the same rule, tag and path, where it says something else
    than it did (a loop without margin has less of it) or has become worse, and where it was accepted by a deviation
    and is open now.
    """
    before: dict[Identity, tuple[Level, str]] = {}
    now = identities((*result.findings, *result.accepted))
    accepted_before = set()
    for finding, identity in identities((*earlier.findings, *earlier.accepted)).items():
        before[identity] = (finding.level, finding.message)
        if finding.accepted_by:
            accepted_before.add(identity)

    def is_new(finding: Finding) -> bool:
        identity = now[finding]
        if identity not in before:
            return True
        level, message = before[identity]
        if finding.level > level or finding.message != message:
            return True
        return finding.accepted_by is None and identity in accepted_before

    findings = tuple(finding for finding in result.findings if is_new(finding))
    accepted = tuple(finding for finding in result.accepted if is_new(finding))
    passed_over = len(result.findings) + len(result.accepted) - len(findings) - len(accepted)
    return replace(result, findings=findings, accepted=accepted, baseline=Baseline(revision, passed_over))
