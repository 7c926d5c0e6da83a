"""Runs every rule over a plant and sorts what they find."""

from __future__ import annotations

import datetime
import os
from collections.abc import Collection, Iterable, Iterator
from dataclasses import replace
from typing import Any

from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.failure import FailureAnalysis
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.time_to_act import TimeToAct
from loopdoc.register.model import Deviation, known
from loopdoc.register.place import Fault
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.baseline import with_paths
from loopdoc.rules.finding import CheckResult, Coverage, Finding, Level
from loopdoc.rules.policy import limits_from
from loopdoc.rules.rule import Draft, NotApplicable, NotChecked, Rule
from loopdoc.rules.subjects import Faults, Scope, name_of, place_of, tag_of

INTERNAL = "internal-error"
"""The id of a finding that a rule failed: a defect of the program, which no deviation accepts."""


def check(
    plant: Plant,
    faults: Iterable[Fault],
    *,
    only: Collection[str] = (),
    today: datetime.date | None = None,
    rules: tuple[Rule, ...] = RULES,
    dynamics: Dynamics | None = None,
) -> CheckResult:
    """Check a plant by all rules, or by the ones named in ``only``.

    ``faults`` are what the reader of the text found; they become findings of the rule `schema`. ``dynamics`` are
    those of the plant, where whoever asks for the check needs them as well.
    """
    register = plant.register
    scope = Scope(
        plant,
        limits_from(register.policy),
        _by_file(faults),
        tuple(rule.id for rule in rules),
        dynamics or Dynamics(plant),
        TimeToAct(plant),
        FailureAnalysis(plant),
    )
    found: list[Finding] = []
    coverage: dict[str, Coverage] = {}
    for rule in rules:
        if not only or rule.id in only:
            coverage[rule.id] = Coverage()
            found.extend(_findings(rule, scope, coverage[rule.id]))
    accepted, still_open = _accept(with_paths(found, register.files), register.deviations, today or _today())
    return CheckResult(
        tuple(sorted(still_open, key=lambda finding: finding.order)),
        tuple(sorted(accepted, key=lambda finding: finding.order)),
        coverage,
    )


def _findings(rule: Rule, scope: Scope, counts: Coverage) -> Iterator[Finding]:
    """What one rule finds in the whole plant, counting what it checked and what it could not."""
    try:
        asked = rule.asks(scope)
        for subject in rule.visits(scope):
            yield from _in_subject(rule, subject, asked, scope, counts)
    except Exception as error:  # one broken rule must not silence the others
        yield _internal_error(rule, scope.plant, error, scope)


def _in_subject(rule: Rule, subject: Any, asked: tuple[Any, ...], scope: Scope, counts: Coverage) -> Iterator[Finding]:
    try:
        for found in rule.function(subject, *asked):
            yield _finding(rule, found)
    except NotApplicable:
        return
    except NotChecked as lacking:
        counts.not_checked += 1
        counts.reasons[str(lacking)] += 1
        counts.where.append((name_of(subject), str(lacking)))
        return
    except Exception as error:
        yield _internal_error(rule, subject, error, scope)
        return
    counts.checked += 1


def _finding(rule: Rule, found: Draft) -> Finding:
    level = found.level or rule.level
    return Finding(rule.id, level, found.tag, found.message, found.remedy, found.place, found.related)


def _by_file(faults: Iterable[Fault]) -> Faults:
    by_file: dict[str, list[Fault]] = {}
    for fault in faults:
        by_file.setdefault(fault.place.file, []).append(fault)
    return Faults({name: tuple(found) for name, found in by_file.items()})


def _accept(
    findings: list[Finding], deviations: tuple[Deviation, ...], today: datetime.date
) -> tuple[list[Finding], list[Finding]]:
    """Findings that a deviation in force accepts, and those that stay open."""
    in_force = {
        (known(deviation.rule), known(deviation.at)): deviation
        for deviation in deviations
        if known(deviation.approved_by) and (until := _date(known(deviation.until))) and until >= today
    }
    accepted, still_open = [], []
    for finding in findings:
        deviation = in_force.get((finding.rule, finding.tag))
        if deviation is None or finding.rule == INTERNAL:
            still_open.append(finding)
        else:
            accepted.append(replace(finding, accepted_by=deviation))
    return accepted, still_open


def _date(written: str | None) -> datetime.date | None:
    try:
        return datetime.date.fromisoformat(written) if written else None
    except ValueError:
        return None  # the schema has said so


def _today() -> datetime.date:
    """Today; or the day of SOURCE_DATE_EPOCH, so that a document can be made again as it was."""
    epoch = os.environ.get("SOURCE_DATE_EPOCH", "")
    try:
        return datetime.datetime.fromtimestamp(int(epoch), datetime.UTC).date()
    except (ValueError, OverflowError, OSError):  # not set, or no date
        return datetime.date.today()


def _internal_error(rule: Rule, subject: Any, error: Exception, scope: Scope) -> Finding:
    told = " ".join(f"{type(error).__name__}: {error}".split())
    return Finding(
        INTERNAL,
        Level.ERROR,
        tag_of(subject),
        f"the rule `{rule.id}` failed here ({told}); it is not checked",
        "report this as a defect of loopdoc, with the lines around this place",
        place_of(subject, scope.plant),
    )
