"""Runs every rule over a plant and sorts what they find."""

from __future__ import annotations

import datetime
import os
from collections.abc import Collection, Iterable

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Deviation, Register, known
from loopdoc.register.place import Fault, Place
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.finding import CheckResult, Coverage, Finding, Level
from loopdoc.rules.policy import limits_from
from loopdoc.rules.rule import SUBJECTS, NotApplicable, NotChecked, Rule, tag_of

INTERNAL = "internal-error"


def check(
    plant: Plant,
    faults: Iterable[Fault],
    *,
    only: Collection[str] = (),
    today: datetime.date | None = None,
) -> CheckResult:
    """Check a plant by all rules, or by the ones named in ``only``.

    ``faults`` are what the reader of the text found; they become findings of the rule `schema`.
    """
    register = plant.register
    limits = limits_from(register.policy)
    found: list[Finding] = []
    coverage: dict[str, Coverage] = {}
    for rule in RULES:
        if only and rule.id not in only:
            continue
        counts = coverage[rule.id] = Coverage()
        for subject in SUBJECTS[rule.subject](plant):
            try:
                drafts = list(rule.function(subject, limits))
            except NotApplicable:
                continue
            except NotChecked as lacking:
                counts.not_checked += 1
                counts.reasons[str(lacking)] += 1
                counts.where.append((tag_of(subject), str(lacking)))
                continue
            except Exception as error:  # one broken rule must not silence the others
                found.append(_internal_error(rule, tag_of(subject), error, register))
                continue
            counts.checked += 1
            found.extend(Finding(rule.id, rule.level, d.tag, d.message, d.remedy, d.place, d.related) for d in drafts)
    if not only or "schema" in only:
        coverage["schema"] = Coverage(checked=len(register.files))
        found.extend(
            Finding("schema", Level.ERROR, _tag_of_fault(fault), fault.message, fault.remedy, fault.place) for fault in faults
        )
    accepted, still_open = _accept(found, register.deviations, today or _today())
    return CheckResult(
        tuple(sorted(still_open, key=lambda finding: finding.order)),
        tuple(sorted(accepted, key=lambda finding: finding.order)),
        coverage,
    )


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
        if deviation is None:
            still_open.append(finding)
        else:
            accepted.append(
                Finding(
                    finding.rule, finding.level, finding.tag, finding.message, finding.remedy, finding.place,
                    finding.related, deviation,
                )
            )  # fmt: skip
    return accepted, still_open


def _date(written: str | None) -> datetime.date | None:
    try:
        return datetime.date.fromisoformat(written) if written else None
    except ValueError:
        return None  # the schema has said so


def _today() -> datetime.date:
    """Today; or the day of SOURCE_DATE_EPOCH, so that a document can be made again as it was."""
    epoch = os.environ.get("SOURCE_DATE_EPOCH", "")
    if epoch.isdigit():
        return datetime.datetime.fromtimestamp(int(epoch), datetime.UTC).date()
    return datetime.date.today()


def _tag_of_fault(fault: Fault) -> str:
    steps = [step.replace("~1", "/").replace("~0", "~") for step in fault.pointer.split("/")[1:]]
    return steps[1] if len(steps) > 1 else steps[0] if steps else "register"


def _internal_error(rule: Rule, tag: str, error: Exception, register: Register) -> Finding:
    where = register.defined_at(tag) or Place(register.root.name, 1, 1)
    return Finding(
        INTERNAL,
        Level.ERROR,
        tag,
        f"the rule `{rule.id}` failed here ({type(error).__name__}: {error}); it is not checked",
        "report this as a defect of loopdoc, with the lines around this place",
        where,
    )
