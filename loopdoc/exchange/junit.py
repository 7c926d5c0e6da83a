"""The result of a check as JUnit XML: a test case a rule, its findings a failure.

The form is that of the Ant JUnit task as build servers read it; they show one failure a case, so that all findings
of a rule stand in one.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterator

from loopdoc.exchange.escaping import for_line, for_xml
from loopdoc.exchange.findings import accepted_why, baseline_told, counted, summary
from loopdoc.rules.check import INTERNAL
from loopdoc.rules.finding import CheckResult, Coverage, Finding, Level


def as_junit(result: CheckResult, *, folder: str, least: Level | None) -> str:
    """The whole check; findings below ``least`` (None: all) are told without failing their case.

    ``folder`` is the register's own, relative to the root of the repository.
    """
    by_rule: dict[str, list[Finding]] = defaultdict(list)
    for finding in result.findings:
        by_rule[finding.rule].append(finding)
    accepted: dict[str, list[Finding]] = defaultdict(list)
    for finding in result.accepted:
        accepted[finding.rule].append(finding)
    cases: list[str] = []
    failures = errors = skipped = 0
    # A defect of the program, or a text that is no register, has findings without coverage.
    rules = [*result.coverage, *(rule for rule in by_rule if rule not in result.coverage)]
    for rule in rules:
        entry = result.coverage.get(rule, Coverage())
        findings = by_rule[rule]
        failing = [finding for finding in findings if least is not None and finding.level >= least]
        if findings or entry.checked:
            kind = "error" if rule == INTERNAL else "failure"
            failures += bool(failing) and kind == "failure"
            errors += bool(failing) and kind == "error"
            told = [_told(f, folder) for f in findings if f not in failing]
            told += [f"{_told(f, folder)}\n  accepted: {accepted_why(f)}" for f in accepted[rule]]
            cases.extend(_case(rule, [*_failure(kind, failing, folder), *_output(told)]))
        elif not entry.not_checked:
            skipped += 1
            nothing = "the register has nothing that this rule looks at"
            cases.extend(_case(rule, [f'      <skipped message="{nothing}"/>']))
        if entry.not_checked:
            skipped += 1
            why = "; ".join(f"{reason} ({times})" for reason, times in entry.reasons.most_common())
            message = f"not checked in {counted(entry.not_checked, 'place')}: {why}"
            cases.extend(_case(f"{rule} (not checked)", [f'      <skipped message="{for_xml(for_line(message))}"/>']))
    tests = sum(line.lstrip().startswith("<testcase") for line in cases)
    counts = f'tests="{tests}" failures="{failures}" errors="{errors}" skipped="{skipped}"'
    notes = "\n".join([summary(result), *baseline_told(result)])
    return "\n".join(
        [
            '<?xml version="1.0" encoding="UTF-8"?>',
            f'<testsuites name="loopdoc check" {counts}>',
            f'  <testsuite name="loopdoc check" {counts}>',
            *cases,
            f"    <system-out>{for_xml(notes)}</system-out>",
            "  </testsuite>",
            "</testsuites>",
            "",
        ]
    )


def _case(name: str, inside: list[str]) -> Iterator[str]:
    head = f'    <testcase classname="loopdoc" name="{for_xml(name)}"'
    if not inside:
        yield f"{head}/>"
        return
    yield f"{head}>"
    yield from inside
    yield "    </testcase>"


def _failure(kind: str, failing: list[Finding], folder: str) -> Iterator[str]:
    if failing:
        worst = max(failing, key=lambda finding: finding.level)
        more = f" (and {len(failing) - 1} more)" if len(failing) > 1 else ""
        message = for_xml(for_line(f"{worst.tag}: {worst.message}{more}"))
        told = for_xml("\n".join(_told(finding, folder) for finding in failing))
        yield f'      <{kind} message="{message}" type="{worst.level}">{told}</{kind}>'


def _output(told: list[str]) -> Iterator[str]:
    if told:
        yield f"      <system-out>{for_xml(chr(10).join(told))}</system-out>"


def _told(finding: Finding, folder: str) -> str:
    lines = [f"{folder}{finding.place}: {finding.level}: {finding.tag}: {finding.message}"]
    lines += [f"  see {folder}{related.place}: {related.what}" for related in finding.related]
    return "\n".join([*lines, f"  remedy: {finding.remedy}"])
