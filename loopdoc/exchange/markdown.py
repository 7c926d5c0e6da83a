"""A summary of a check in Markdown, for the comment or the job page of a pull request."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence

from loopdoc.exchange.escaping import as_code, for_markdown
from loopdoc.exchange.findings import (
    CAUTION,
    accepted_why,
    baseline_told,
    by_what,
    counted,
    gathered,
    not_checked,
    shared_by,
    summary,
)
from loopdoc.register.place import Place
from loopdoc.rules.finding import CheckResult, Finding, Level

MAX_ROWS = 200
"""Rows of one table; forges cut a page of some 65,000 characters, and nobody reads on."""


def as_markdown(result: CheckResult, *, folder: str) -> str:
    """Tables of the findings by level, what deviations accept, and what was not checked.

    ``folder`` is the register's own, relative to the root of the repository.
    """
    lines = ["## Check of the loop register", "", for_markdown(summary(result))]
    lines += [line for told in baseline_told(result) for line in ("", for_markdown(told))]
    for level in sorted(Level, reverse=True):
        findings = [finding for finding in result.findings if finding.level is level]
        if findings:
            lines += ["", f"### {counted(len(findings), str(level).capitalize())}", ""]
            lines += _table(findings, folder, "Remedy", lambda finding: finding.remedy)
    if result.accepted:
        lines += ["", f"### {counted(len(result.accepted), 'Finding')} accepted by deviation", ""]
        lines += _table(result.accepted, folder, "Deviation", accepted_why)
    unchecked = list(not_checked(result))
    if unchecked:
        lines += ["", "### Not checked", "", "| Rule | Places | Why |", "| --- | ---: | --- |"]
        lines += [f"| {as_code(rule)} | {entry.not_checked} | {for_markdown(why)} |" for rule, entry, why in unchecked]
    return "\n".join([*lines, "", CAUTION, ""])


def _table(findings: Sequence[Finding], folder: str, last: str, answer: Callable[[Finding], str]) -> Iterator[str]:
    yield f"| Place | Tag | Rule | Finding | {last} |"
    yield "| --- | --- | --- | --- | --- |"
    alone, lots = gathered(findings)
    for finding in alone[:MAX_ROWS]:
        where = [as_code(f"{folder}{finding.place.file}:{finding.place.line}")]
        where += [f"see {_beside(related.place, finding.place, folder)}" for related in finding.related]
        cells = [
            "<br>".join(where),
            for_markdown(finding.tag),
            as_code(finding.rule),
            for_markdown(finding.message),
            for_markdown(answer(finding)),
        ]
        yield f"| {' | '.join(cells)} |"
    if len(alone) > MAX_ROWS:
        yield f"| | | | and {len(alone) - MAX_ROWS} more | |"
    for lot in lots:
        first = lot[0]
        tags = [f"{as_code(what)}: {for_markdown(', '.join(tags))}" for what, tags in by_what(lot).items()]
        cells = [
            f"{as_code(f'{folder}{first.place.file}:{first.place.line}')} and {len(lot) - 1} more",
            "",
            as_code(first.rule),
            "<br>".join([for_markdown(f"{len(lot)} {shared_by(lot)}"), *tags]),
            for_markdown(answer(first)),
        ]
        yield f"| {' | '.join(cells)} |"


def _beside(place: Place, other: Place, folder: str) -> str:
    return f"line {place.line}" if place.file == other.file else as_code(f"{folder}{place.file}:{place.line}")
