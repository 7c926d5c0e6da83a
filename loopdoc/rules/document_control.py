"""Rules on what a register needs to be issued."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import FinalElement, HeldValue, Interlock, Loop, Revision, known
from loopdoc.rules.acceptance import date
from loopdoc.rules.finding import Alike, Level
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule

_FOR_REVIEW = "issued for review"
_SIGNATURES = {"prepared_by": "who prepared it", "checked_by": "who checked it", "approved_by": "who approved it"}
_LEFT_OUT = "IO"
"""Letters that many sites leave out of their revision codes, since they read as digits."""


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
        alike=Alike(what, f"values on hold: {held.reason}"),
    )


@rule(level=Level.WARNING, source="ISO 7200:2004, creator and approval person are mandatory data fields (from memory)")
def approval_missing(plant: Plant) -> Iterator[Draft]:
    """A revision does not say who prepared, checked and approved it.

    Why:
        The title block carries the three names, and whoever builds or operates from the document relies on them. At a
        status beyond review an empty field means that nobody has answered for the content.
    Breaks:
        `status: issued for construction` without `approved_by`, or with it on hold.
    Holds:
        A revision issued for review says who prepared it; at every later status it also says who checked and who
        approved it. Earlier revisions, under `history`, are not judged.
    What this check cannot see:
        Whether they did.
    """
    revision = need(plant.register.revision, "the revision")
    status = need(revision.status, "the status of the revision")
    wanted = ("prepared_by",) if status == _FOR_REVIEW else tuple(_SIGNATURES)
    for key in wanted:
        written = getattr(revision, key)
        name = known(written)
        if name is not None and any(map(str.isalnum, name)):
            continue
        is_held = written is not None and name is None
        yield draft(
            "revision",
            f"revision {known(revision.code) or ''} is {status}, but {_SIGNATURES[key]} is "
            + ("on hold" if is_held else "not written"),
            remedy=f"write `{key}`, or issue it for review",
            at=revision.origin.place(key) if written is not None else revision.origin.key(),
            related=((revision.origin.place("status"), f"the status, {status}"),),
        )


@rule(level=Level.WARNING, source="common practice of document control: the four-eyes principle")
def check_not_independent(plant: Plant) -> Iterator[Draft]:
    """Who prepared a revision has also checked or approved it.

    Why:
        A check by the one who made the document finds what he looked for, and repeats what he took for granted. The
        three names stand in the title block so that a second pair of eyes has seen the content.
    Breaks:
        `prepared_by: A. Meyer` with `checked_by: A. Meyer`, in whatever spelling of capitals and blanks.
    Holds:
        Whoever prepared the revision is neither its checker nor its approver. One person may check and approve. Earlier
        revisions, under `history`, are not judged.
    What this check cannot see:
        Two names for one person, or one department whose members check each other: write the persons, or accept it by a
        deviation.
    """
    revision = need(plant.register.revision, "the revision")
    preparer = need(revision.prepared_by, "who prepared the revision")
    only_if(any(map(str.isalnum, preparer)))
    for key in ("checked_by", "approved_by"):
        other = known(getattr(revision, key))
        if other is not None and _person(other) == _person(preparer):
            yield draft(
                "revision",
                f"revision {known(revision.code) or ''} is prepared and {key[:-3]} by one name, {preparer}",
                remedy=f"have somebody else answer for it, and write who in `{key}`",
                at=revision.origin.place(key),
                related=((revision.origin.place("prepared_by"), f"prepared by {preparer}"),),
            )


def _person(name: str) -> str:
    return "".join(filter(str.isalnum, name)).casefold()


@rule(level=Level.WARNING, source="ISO 7200:2004, revision index (from memory); common practice")
def history_missing(plant: Plant) -> Iterator[Draft]:
    """The revision history lacks the revision before this one, or what a revision changed.

    Why:
        A reader who holds revision A wants to know what B changes. Without the line of the earlier revision, or with a
        line that says nothing, he has to compare every value.
    Breaks:
        `revision: {code: B}` without `history`; `code: D` over a history that ends at B; an entry without `summary`.
    Holds:
        Codes that are a single letter or a number follow one another without a gap (I and O may be left out), the first
        being A, 0 or 1; each entry, and this revision where it is not the first, has a summary. Of other codes only the
        summaries are judged. Entries in another order are a matter of history-disordered.
    What this check cannot see:
        Whether the summary is complete.
    """
    revision = need(plant.register.revision, "the revision")
    code = need(revision.code, "the code of the revision")
    issued = (*plant.register.history, revision)
    codes = [known(entry.code) or "" for entry in issued]
    first = codes[0]
    if _before(first) and _before(first) not in codes:
        at = issued[0].origin.place("code")
        yield draft(
            "history",
            f"the history begins with revision {first}, and says nothing of {_before(first)} before it",
            remedy=f"add revision {_before(first)} to `history`, with its date and summary",
            at=at,
        )
    for (earlier, later), entry in zip(pairwise(codes), issued[1:], strict=True):
        if _sort(earlier) == _sort(later) != "" and _before(later) not in ("", *codes) and later != earlier:
            if _sort(later) == "letter" and later < earlier:
                continue
            if _sort(later) == "number" and int(later) < int(earlier):
                continue
            yield draft(
                "history",
                f"revision {later} follows {earlier}; revision {_before(later)} is missing",
                remedy=f"add revision {_before(later)} to `history`, with its date and summary",
                at=entry.origin.place("code"),
            )
    for entry in issued if len(issued) > 1 else ():
        if entry.summary is None:
            yield draft(
                "history",
                f"revision {known(entry.code) or code} does not say what it changed",
                remedy="write its `summary`",
                at=entry.origin.key() if entry is revision else entry.origin.place("code"),
            )


@rule(level=Level.WARNING, source="common practice: each revision has a code of its own and a later date")
def history_disordered(plant: Plant) -> Iterator[Draft]:
    """Two revisions have one code, or a later one has an earlier date.

    Why:
        A document is known by its number and its revision. Two issues with one code cannot be told apart on paper, and
        dates out of order mean that one of them was not changed with the revision.
    Breaks:
        `revision: {code: B, date: 2026-08-20}` over a history in which A is of 2026-09-01; two entries with code A.
    Holds:
        Codes are used once, and dates do not go backwards from one revision to the next.
    What this check cannot see:
        Whether the dates are those of the issue.
    """
    revision = need(plant.register.revision, "the revision")
    issued = (*plant.register.history, revision)
    only_if(len(issued) > 1)
    used: dict[str, Revision] = {}
    for entry in issued:
        code = known(entry.code)
        if code is not None and used.setdefault(code, entry) is not entry:
            yield draft(
                "history",
                f"the code {code} is used for two revisions",
                remedy="give this one a code of its own",
                at=entry.origin.place("code"),
                related=((used[code].origin.place("code"), f"the first revision {code}"),),
            )
    dated = [(entry, day) for entry in issued if (day := date(known(entry.date)))]
    for (earlier, before), (later, day) in pairwise(dated):
        if day < before:
            yield draft(
                "history",
                f"revision {known(later.code)} is of {day.isoformat()}, before revision {known(earlier.code)} of "
                f"{before.isoformat()}",
                remedy="correct the date, or the order of the revisions",
                at=later.origin.place("date"),
                related=((earlier.origin.place("date"), f"the date of revision {known(earlier.code)}"),),
            )
    if len(dated) < len(issued):
        not_checked("the date of a revision is not known")


def _sort(code: str) -> str:
    """What sort of code a revision has; empty where codes of it do not follow one another in a known order."""
    if len(code) == 1 and code.isascii() and code.isupper():
        return "letter"
    return "number" if code.isascii() and code.isdigit() else ""


def _before(code: str) -> str:
    """The code before this one; empty where it may be the first, or no order is known."""
    match _sort(code):
        case "letter" if code != "A":
            before = chr(ord(code) - 1)
            return chr(ord(before) - 1) if before in _LEFT_OUT else before
        case "number" if int(code) > 1:
            return str(int(code) - 1).zfill(len(code))
    return ""


@rule(level=Level.NOTE, source="ISA-5.4, minimum content of a loop diagram: identification of the loop (from memory)")
def drawing_missing(plant: Plant) -> Iterator[Draft]:
    """A loop, final element or interlock does not name its drawing.

    Why:
        Whoever holds the loop sheet looks for the loop on its piping and instrumentation diagram. Without the number he
        has to search.
    Breaks:
        `FIC-2011` without `drawing`, where other loops have one.
    Holds:
        Every loop, final element and interlock has a `drawing`. Where none of a register has one, that is told once.
    What this check cannot see:
        Whether the tag stands on that drawing.
    """
    register = plant.register
    sections: tuple[tuple[Loop | FinalElement | Interlock, ...], ...] = (
        tuple(register.loops.values()), tuple(register.final_elements.values()), tuple(register.interlocks.values()),
    )  # fmt: skip
    parts = [part for section in sections for part in section]
    only_if(parts)
    without = [part for part in parts if part.drawing is None]
    if len(without) == len(parts):
        yield draft(
            "register",
            f"no loop, final element or interlock names its drawing ({len(parts)} of them)",
            remedy="write `drawing:` under each",
            at=register.root.place(()),
        )
        return
    for part in without:
        yield draft(
            part.tag,
            "it does not name the drawing on which it stands",
            remedy="write `drawing:` with the number of its piping and instrumentation diagram",
            at=part.origin.key(),
        )
