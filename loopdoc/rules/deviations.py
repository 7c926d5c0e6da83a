"""Rules on deviations: findings accepted in writing."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.register.model import known
from loopdoc.rules.acceptance import DeviationUse, State, lacking
from loopdoc.rules.finding import Level, Ran
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule

_NAMES = {"reason": "reason", "approved_by": "approver", "until": "end date"}


@rule(level=Level.WARNING, source="common practice: a deviation is accepted for a stated time")
def deviation_expired(use: DeviationUse) -> Iterator[Draft]:
    """The last day of a deviation has passed.

    Why:
        What was accepted until the next shutdown was not accepted for good. After its last day the finding is open
        again, and somebody has to decide once more.
    Breaks:
        `until: 2026-11-19` on 2026-11-20.
    Holds:
        The last day is today or later. `loopdoc check` judges by the day on which it runs, or by `--date`; documents
        judge by the date of their revision, so that a document issued again from one register says the same.
    What this check cannot see:
        Whether the reason still holds.
    """
    only_if(use.state is not State.INCOMPLETE)
    until = need(use.deviation.until, "the end date of the deviation")
    on = use.on or not_checked("the date of the revision is not given")
    if use.state is State.EXPIRED:
        yield draft(
            use.tag,
            f"the deviation from {known(use.deviation.rule)} ended on {until}; today is {on.isoformat()}",
            remedy="put the finding right, or have the deviation approved again until a later day",
            at=use.deviation.origin.place("until"),
        )


@rule(level=Level.WARNING, source="common practice; IEC 61511-1:2016, management of change (from memory)")
def deviation_unapproved(use: DeviationUse) -> Iterator[Draft]:
    """A deviation lacks its approver, its reason or its end date, and so accepts nothing.

    Why:
        Whoever writes a deviation does not accept it by writing it. Until somebody answers for it the finding stays
        open.
    Breaks:
        `approved_by: {hold: awaiting operations}`; `approved_by: "-"`.
    Holds:
        Reason, approver and end date are written.
    What this check cannot see:
        Whether the approver may approve it.
    """
    for key in ("reason", "approved_by", "until"):
        if getattr(use.deviation, key) is None:
            not_checked(f"the {_NAMES[key]} of the deviation is not given")  # the schema asks for it
    for key in lacking(use.deviation):
        yield draft(
            use.tag,
            f"the deviation from {known(use.deviation.rule)} has no {_NAMES[key]}, and accepts nothing",
            remedy=f"write the {_NAMES[key]}, or take the deviation out",
            at=use.deviation.origin.place(key),
        )


@rule(level=Level.WARNING, source="common practice: what is accepted can be told from what is not")
def deviation_ambiguous(use: DeviationUse) -> Iterator[Draft]:
    """A deviation could accept several findings, and so accepts none.

    Why:
        Who approved one finding has not approved the other that the same rule makes at the same tag, today or after
        the next change. A deviation is for one finding.
    Breaks:
        `rule: alarm-order, at: TIC-2014` where both the high and the low alarm are out of order.
    Holds:
        Its rule finds something at one place of the tag only; or `at` names the place, as in
        `TIC-2014/alarms/high/limit`. Each further finding has a deviation of its own.
    What this check cannot see:
        Two findings of one rule at the very same value: they count as one.
    """
    only_if(use.state in (State.AMBIGUOUS, State.ACCEPTS))
    if use.state is State.AMBIGUOUS:
        *others, last = use.places
        yield draft(
            use.tag,
            f"the deviation from {known(use.deviation.rule)} at {known(use.deviation.at)} could be for "
            f"{', '.join(others)} or {last}; it accepts nothing",
            remedy=f"write `at: {use.places[0]}`, and a deviation for each other one that is accepted too",
            at=use.deviation.origin.place("at"),
        )


@rule(level=Level.WARNING, source="common practice")
def deviation_unused(use: DeviationUse, ran: Ran) -> Iterator[Draft]:
    """A deviation accepts no finding.

    Why:
        The finding has been put right, or the deviation names the wrong rule or tag. If it stays, it will accept in
        silence the next finding of that rule there, which nobody has looked at.
    Breaks:
        A deviation from `secondary-range-short` at FIC-2011, whose range covers what is asked of it.
    Holds:
        Every deviation in force accepts a finding.
    What this check cannot see:
        Whether the finding is still the one that was looked at, where its numbers have changed.
    """
    only_if(use.state in (State.UNUSED, State.ACCEPTS))
    named = need(use.deviation.rule, "the rule of the deviation")
    at = need(use.deviation.at, "the tag of the deviation")
    if use.state is State.ACCEPTS:
        return
    if named not in ran.rules:
        not_checked("the rule of the deviation was not run")
    if (named, use.tag) in ran.not_checked:
        reason = ran.not_checked[named, use.tag]
        not_checked(f"the rule of the deviation could not be checked there: {reason}")
    if use.already:
        message = f"the deviation from {named} at {at} accepts nothing: another one accepts that finding"
    else:
        message = f"the deviation from {named} at {at} accepts nothing: the rule finds nothing there"
    yield draft(
        use.tag,
        message,
        remedy="take the deviation out, or correct its rule or its tag",
        at=use.deviation.origin.place("rule"),
        related=((use.already.origin.place("rule"), "the deviation that accepts it"),) if use.already else (),
    )
