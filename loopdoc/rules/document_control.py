"""Rules on what a register needs to be issued."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.register.model import HeldValue
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, rule


@rule(level=Level.NOTE, source="common practice: holds are listed and cleared before construction")
def hold_open(held: HeldValue) -> Iterator[Draft]:
    """A value is on hold.

    Why:
        A document that is issued with a hold is not complete, and whoever builds or operates from it has to
        know what is still open. Rules that need the value count as not checked.
    Breaks:
        `range: {hold: awaiting vendor data}`.
    Holds:
        Every value is written.
    What this check cannot see:
        Who is to supply the value, and when: the reason is the place to say so.
    """
    what = "/".join(map(str, held.path))
    yield draft(
        held.tag,
        f"`{what}` is on hold: {held.reason}" if what else f"on hold: {held.reason}",
        remedy="write the value when it is known, in place of the hold",
        at=held.place,
    )
