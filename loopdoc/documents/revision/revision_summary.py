"""The revision summary: what changes and what that does to the plant, as a document that a reviewer signs."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import replace

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.revision.affected import Kinds, documents_between
from loopdoc.documents.revision.revision_story import story
from loopdoc.documents.schedules.schedule import A4, Cell, Column, Group, Row, Schedule, ScheduleKind, Writer, page
from loopdoc.documents.values import DASH
from loopdoc.documents.wording import sentence, upper_first
from loopdoc.revisions.changes import NAMED, Change, Kind, TagChange
from loopdoc.revisions.compare import RegisterComparison, compared
from loopdoc.revisions.effects import MarginChange

KIND = ScheduleKind(
    "revision-summary", "Revision summary", "RS", A4,
    ("Change reviewed by", "Date", "Accepted for the plant by", "Date", "Remarks"),
)
CHANGES = (Column("Tag", 9), Column("Value", 19), Column("Was", 27), Column("Is", 27), Column("Place", 18))
FINDINGS = (
    Column("Tag", 9), Column("Rule", 14), Column("What becomes of it", 13), Column("Finding", 36), Column("Remedy", 28),
)  # fmt: skip
MARGINS = (
    Column("Loop", 10), Column("Gain margin", 14), Column("Phase margin, °", 14), Column("Ms", 14),
    Column("Crossover, rad/s", 18), Column("Speed ratio", 14), Column("State", 16),
)  # fmt: skip
FAILURES = (Column("Loop", 9), Column("Failure", 15), Column("Was", 38), Column("Is", 38))
TIMES = (Column("Loop", 14), Column("Alarm", 14), Column("Interlock", 16), Column("Was", 28), Column("Is", 28))
CHARTED = (Column("Interlock", 12), Column("Part", 10), Column("Tag", 14), Column("Was", 32), Column("Is", 32))
DOCUMENTS = (
    Column("Document number", 16), Column("Type", 18), Column("Title", 28), Column("Part", 20),
    Column("What becomes of it", 18),
)  # fmt: skip

READING = (
    "Changes are told by what they mean: a value in other units, a moved line or a renamed file is none. Margins, "
    "failure effects and times are calculated from both registers in the same way. Documents are compared as a reader "
    "sees them; one that only bears the new revision is not listed."
)
CAUTION = (
    "The summary tells what differs and what follows from the models and signs of the register. It does not tell "
    "whether a change is right: that is the reviewer's to judge, with the hazard study and the plant at hand."
)
_WORDS = {Kind.ADDED: "new", Kind.REMOVED: "removed", Kind.CHANGED: "changed", Kind.RENAMED: "renamed"}


def revision_summaries(basis: Basis, kinds: Kinds) -> Iterator[Page]:
    """The summary of the change since the revision against which documents are issued; none without one."""
    if basis.against is not None:
        found = compared(basis.against, basis, old_named="", new_named="")
        found = replace(found, documents=documents_between(basis.against, basis, kinds))
        yield _Summary(basis, found).page()


class _Summary:
    """The summary while it is written."""

    def __init__(self, basis: Basis, found: RegisterComparison) -> None:
        self._basis = basis
        self._found = found
        self._writer = Writer(basis)

    def page(self) -> Page:
        found = self._found
        return page(
            self._basis, self._writer, KIND, title=f"Revision {found.new} against {found.old}",
            extent="What changes, and what that does to the plant", reading=(READING,), caution=CAUTION,
            lead=story(found), schedules=tuple(self._schedules()),
        )  # fmt: skip

    def _schedules(self) -> Iterator[Schedule]:
        effects, plain, cell = self._found.effects, self._writer.plain, self._writer.cell
        tables: tuple[tuple[str, tuple[Column, ...], Iterable[Sequence[Cell]]], ...] = (
            ("Effect on the check", FINDINGS, (
                (cell(one.finding.tag), plain(one.finding.rule),
                 plain(f"{upper_first(one.what)} ({one.finding.level})", kind="strong" if one.appears else ""),
                 cell(sentence(one.finding.message)), cell(sentence(one.finding.remedy)))
                for one in effects.findings
            )),
            ("Margins", MARGINS, map(self._margins, effects.margins)),
            ("Failure effects", FAILURES, (
                (cell(one.tag), cell(one.failure),
                 cell(upper_first(one.before) or DASH),
                 cell(upper_first(one.after) or DASH, kind="strong" if one.worse else ""))
                for one in effects.failures
            )),
            ("Time from alarm to trip", TIMES, (
                (cell(one.tag), plain(one.alarm.replace("_", "-")), cell(one.interlock), *map(plain, one.told))
                for one in effects.times
            )),
            ("Cause and effect", CHARTED, (
                (cell(one.interlock), plain(one.what), cell(one.about), plain(one.old or DASH), plain(one.new or DASH))
                for one in self._found.cause_and_effect
            )),
            ("Documents affected", DOCUMENTS, (
                (plain(one.number), plain(one.kind), cell(one.title), cell(one.supplementary_title),
                 plain(one.what if one.what != "changed" else _blocks(one.blocks, one.removed)))
                for one in self._found.documents or ()
            )),
        )  # fmt: skip
        if self._found.tags:
            yield Schedule("Changes, the farthest reaching first", CHANGES, tuple(self._changes()))
        for title, columns, cells in tables:
            rows = tuple(Row(tuple(row)) for row in cells)
            if rows:
                yield Schedule(title, columns, (Group(rows),))

    def _changes(self) -> Iterator[Group]:
        reach = None
        rows: list[Row] = []
        for tag in self._found.tags:
            if self._found.impact(tag) is not reach:
                if rows and reach:
                    yield Group(tuple(rows), self._writer.prose(upper_first(str(reach))))
                reach, rows = self._found.impact(tag), []
            rows.extend(self._rows(tag))
        if rows:
            yield Group(tuple(rows), self._writer.prose(upper_first(str(reach))))

    def _rows(self, tag: TagChange) -> Iterator[Row]:
        plain, name = self._writer.plain, self._writer.cell(_subject(tag))
        if tag.kind is not Kind.CHANGED:
            what = f"{upper_first(NAMED[tag.section])} {_WORDS[tag.kind]}"
            was = tag.was or (tag.service if tag.kind is Kind.REMOVED else "")
            now = tag.evidence or (tag.service if tag.kind is Kind.ADDED else "")
            place = next((str(one.place) for one in tag.changes if one.place), DASH)
            yield Row((name, plain(what, kind="strong"), plain(was or DASH), plain(now or DASH), plain(place)))
        if tag.kind in (Kind.CHANGED, Kind.RENAMED):
            for change in tag.changes:
                yield Row((
                    name, plain(_value_name(change)), plain(change.old or DASH), plain(_is(change)),
                    plain(str(change.place) if change.place else DASH),
                ))  # fmt: skip

    def _margins(self, one: MarginChange) -> Sequence[Cell]:
        plain = self._writer.plain
        figures = [plain(before if before == after else f"{before} → {after}")
                   for before, after in zip(one.before.figures, one.after.figures, strict=True)]  # fmt: skip
        before, after = (_state(side.stable, side.reason, side.figures) for side in (one.before, one.after))
        state = after if before == after else f"{before} → {after}"
        return (self._writer.cell(one.tag), *figures, plain(state, kind="strong" if after == "unstable" else ""))


def _subject(tag: TagChange) -> str:
    return "Head of the register" if tag.section == "register" else tag.tag


def _value_name(change: Change) -> str:
    return change.pointer[1:].replace("_", " ").replace("/", " / ")


def _is(change: Change) -> str:
    if change.kind is Kind.REWRITTEN:
        return f"{change.new} ({change.kind})"
    return f"{change.new or 'removed'}{f' ({change.remark})' if change.remark else ''}"


def _state(stable: bool, reason: str, figures: Sequence[str]) -> str:
    if all(figure == DASH for figure in figures):
        return f"not known{f': {reason}' if reason else ''}"
    return "stable" if stable else "unstable"


def _blocks(changed: int, removed: int) -> str:
    told = [f"{changed} {'block' if changed == 1 else 'blocks'} differ{'s' if changed == 1 else ''}"] if changed else []
    noun = "" if changed else "block " if removed == 1 else "blocks "
    told += [f"{removed} {noun}gone"] if removed else []
    return ", ".join(told)
