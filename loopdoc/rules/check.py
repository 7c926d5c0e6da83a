"""Runs every rule over a plant and sorts what they find."""

from __future__ import annotations

import datetime
from collections.abc import Collection, Iterable
from dataclasses import replace
from typing import Any

from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.failure import FailureAnalysis
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.time_to_act import TimeToAct
from loopdoc.register.model import known
from loopdoc.register.place import Fault
from loopdoc.rules.acceptance import DeviationUse, accept, date
from loopdoc.rules.baseline import with_paths
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.finding import CheckResult, Coverage, Finding, Level, Ran
from loopdoc.rules.policy import limits_from
from loopdoc.rules.rule import NotApplicable, NotChecked, Rule
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

    ``faults`` are what the reader of the text found; they become findings of the rule `schema`. ``today`` is the day
    on which deviations are judged: the date of the revision where it is not given, so that a register says the same
    whenever it is looked at. ``dynamics`` are those of the plant, where whoever asks for the check needs them as well.
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
    asked = [rule for rule in rules if not only or rule.id in only]
    coverage = {rule.id: Coverage() for rule in asked}

    def found(scope: Scope, *, on_deviations: bool) -> list[Finding]:
        runs = [rule for rule in asked if (DeviationUse in rule.subjects) is on_deviations]
        findings = [finding for rule in runs for finding in _findings(rule, scope, coverage[rule.id])]
        return with_paths(findings, register.files)

    outcome = accept(
        found(scope, on_deviations=False),
        register.deviations,
        today or _date_of_revision(plant),
        never=(INTERNAL,),
        files={file.name: file for file in register.files},
    )
    # What came of the deviations is judged last, and by no deviation.
    on_deviations = found(replace(scope, uses=outcome.uses, ran=Ran.of(coverage)), on_deviations=True)
    return CheckResult(
        tuple(sorted((*outcome.still_open, *on_deviations), key=lambda finding: finding.order)),
        tuple(sorted(outcome.accepted, key=lambda finding: finding.order)),
        coverage,
    )


def _date_of_revision(plant: Plant) -> datetime.date | None:
    revision = plant.register.revision
    return date(known(revision.date)) if revision else None


def _findings(rule: Rule, scope: Scope, counts: Coverage) -> list[Finding]:
    """What one rule finds in the whole plant, counting what it checked and what it could not."""
    findings: list[Finding] = []
    try:
        asked = rule.asks(scope)
        for subject in rule.visits(scope):
            _judge(rule, subject, asked, scope, counts, findings)
    except Exception as error:  # one broken rule must not silence the others
        findings.append(_internal_error(rule, scope.plant, error, scope))
    return findings


def _judge(
    rule: Rule, subject: Any, asked: tuple[Any, ...], scope: Scope, counts: Coverage, findings: list[Finding]
) -> None:
    """Add what one rule finds in one subject, and count whether it could be checked."""
    try:
        for found in rule.function(subject, *asked):
            level = found.level or rule.level
            findings.append(
                Finding(
                    rule.id, level, found.tag, found.message, found.remedy, found.place, found.related, found.alike
                )
            )
    except NotApplicable:
        return
    except NotChecked as lacking:
        counts.not_checked += 1
        counts.reasons[str(lacking)] += 1
        counts.where.append((name_of(subject), str(lacking)))
        return
    except Exception as error:
        findings.append(_internal_error(rule, subject, error, scope))
        return
    counts.checked += 1


def _by_file(faults: Iterable[Fault]) -> Faults:
    by_file: dict[str, list[Fault]] = {}
    for fault in faults:
        by_file.setdefault(fault.place.file, []).append(fault)
    return Faults({name: tuple(found) for name, found in by_file.items()})


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
