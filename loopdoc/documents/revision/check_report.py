"""The check report: what the check of the register found, accepted, looked at and could not look at."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.language import ENGLISH
from loopdoc.documents.narrative.open_points import HOLD_RULE, hold_rows
from loopdoc.documents.schedules.schedule import A4, Column, Group, Row, Schedule, ScheduleKind, Writer, page
from loopdoc.documents.values import DASH, shown
from loopdoc.documents.wording import counted, listed, sentence, upper_first
from loopdoc.register.model import Deviation
from loopdoc.register.quantity import display_number
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.finding import Coverage, Finding, Level
from loopdoc.rules.policy import Limits, limits_from, policy_entries

KIND = ScheduleKind(
    "check-report", "Check report", "QR", A4,
    ("Findings reviewed by", "Date", "Deviations and holds accepted by", "Date", "Remarks"),
)
FINDINGS = (
    Column("Tag", 9), Column("Rule", 14), Column("Place", 15), Column("Finding", 34), Column("Remedy", 28),
)  # fmt: skip
ACCEPTED = (
    Column("Tag", 9), Column("Rule", 13), Column("Finding", 29), Column("Reason", 29), Column("Approved by", 13),
    Column("Until", 7),
)  # fmt: skip
HOLDS = (Column("On hold", 26), Column("Of", 34), Column("Reason", 40))
COVERAGE = (
    Column("Rule", 15), Column("What it finds", 30), Column("Level", 6), Column("Checked", 6), Column("Not checked", 7),
    Column("Found", 5), Column("Why it could not be checked, and where", 31),
)  # fmt: skip
WHOLE = (Column("Rule", 19), Column("What it finds", 66), Column("Level", 7), Column("Checked", 8))
POLICY = (
    Column("Threshold", 15), Column("In force", 8), Column("Default", 8), Column("Unit", 15), Column("Meaning", 28),
    Column("Source of the default", 26),
)  # fmt: skip
NAMED_PLACES = 6
"""Tags named beside a reason; of more the number is told."""

READING = (
    "A check compares what the register says with itself and with the thresholds below; what the register does not say "
    "cannot be checked, and a check that could not be made is not a check passed."
)
CAUTION = (
    "A register without findings is not thereby right, and a plant is not thereby well controlled: rules see what is "
    "written. Safety functions are judged in their own lifecycle (IEC 61511)."
)


def check_reports(basis: Basis) -> Iterator[Page]:
    """The report on the whole register."""
    yield _Report(basis).page()


class _Report:
    """The report while it is written."""

    def __init__(self, basis: Basis) -> None:
        self._basis = basis
        self._writer = Writer(basis)
        self._result = basis.result
        self._limits = limits_from(basis.plant.register.policy)

    def page(self) -> Page:
        schedules = (
            *self._findings(), *self._accepted(), *self._holds(), *self._coverage(), *self._policy(),
        )  # fmt: skip
        site = self._basis.plant.register.site
        return page(
            self._basis, self._writer, KIND, title="Check of the register", extent=shown(site.name if site else None),
            reading=(self._summary(), READING), caution=CAUTION, schedules=schedules, view={"deviations": ()},
        )  # fmt: skip

    def _summary(self) -> str:
        counts = [counted(self._result.count(level), str(level)) for level in sorted(Level, reverse=True)]
        found = f"The check finds {listed(counts)}"
        kept = f"{counted(len(self._result.accepted), 'finding')} accepted by deviation"
        holds = counted(len(self._basis.plant.register.holds), "value")
        made = f"{self._result.checked} checks were made and {self._result.not_checked} could not be made"
        return f"{sentence(found)} {sentence(f'{upper_first(kept)}; {holds} on hold')} {sentence(made)}"

    def _findings(self) -> Iterator[Schedule]:
        groups = []
        for level in sorted(Level, reverse=True):
            found = [one for one in self._result.findings if one.level is level]
            rows = tuple(self._finding(one) for one in found if one.rule != HOLD_RULE)
            holds = len(found) - len(rows)
            listed_below = f"; {holds} of them on values on hold, which are listed below" if holds else ""
            if found:
                heading = self._writer.prose(f"{upper_first(counted(len(found), str(level)))}{listed_below}")
                groups.append(Group(rows, heading))
        if groups:
            yield Schedule("Open findings", FINDINGS, tuple(groups))

    def _finding(self, finding: Finding) -> Row:
        write = self._writer
        return Row((
            write.cell(finding.tag), write.plain(finding.rule), write.plain(str(finding.place)),
            write.cell(sentence(finding.message)), write.cell(sentence(finding.remedy)),
        ))  # fmt: skip

    def _accepted(self) -> Iterator[Schedule]:
        rows = tuple(self._deviation(one, one.accepted_by) for one in self._result.accepted if one.accepted_by)
        if rows:
            yield Schedule("Findings accepted by deviation", ACCEPTED, (Group(rows),))

    def _deviation(self, finding: Finding, deviation: Deviation) -> Row:
        write = self._writer
        return Row((
            write.cell(finding.tag), write.plain(finding.rule), write.cell(sentence(finding.message)),
            write.cell(sentence(shown(deviation.reason))), write.cell(deviation.approved_by),
            write.cell(deviation.until),
        ))  # fmt: skip

    def _holds(self) -> Iterator[Schedule]:
        rows = tuple(
            Row(tuple(self._writer.cell(text) for text in row))
            for row in hold_rows(self._basis.plant.register.holds, ENGLISH)
        )
        if rows:
            yield Schedule("Values on hold", HOLDS, (Group(rows),))

    def _coverage(self) -> Iterator[Schedule]:
        """Rules with something to tell first, then those that looked everywhere and found nothing."""
        found = (*self._result.findings, *self._result.accepted)
        by_id = {rule.id: rule for rule in RULES}
        open_: list[Row] = []
        whole: list[Row] = []
        idle: list[Row] = []
        for rule, entry in self._result.coverage.items():
            write, count = self._writer, sum(one.rule == rule for one in found)
            head = (write.plain(rule), write.plain(by_id[rule].statement), write.plain(str(by_id[rule].level)),
                    write.plain(str(entry.checked)))  # fmt: skip
            if entry.not_checked or count:
                counts = write.plain(str(entry.not_checked)), write.plain(str(count))
                open_.append(Row((*head, *counts, write.cell(*_reasons(entry)))))
            else:
                (whole if entry.checked else idle).append(Row(head))
        if open_:
            yield Schedule("Checks that found something, or could not all be made", COVERAGE, (Group(tuple(open_)),))
        quiet = (("Made wherever they apply", whole), ("Nothing in the register to which they apply", idle))
        groups = tuple(Group(tuple(rows), self._writer.prose(heading)) for heading, rows in quiet if rows)
        if groups:
            yield Schedule("Checks without a finding", WHOLE, groups)

    def _policy(self) -> Iterator[Schedule]:
        """Thresholds that the register sets first, each strong where it is not the default."""
        write, defaults = self._writer, Limits()
        changed: list[Row] = []
        usual: list[Row] = []
        for entry in policy_entries():
            now, default = getattr(self._limits, entry.name), getattr(defaults, entry.name)
            about = entry.metadata
            differs = now != default
            kind = "strong" if differs else ""
            row = Row((
                write.plain(entry.name.replace("_", " "), kind=kind),
                write.plain(display_number(now), kind=kind), write.plain(display_number(default)),
                write.plain(about["unit"]), write.plain(upper_first(about["meaning"])), write.plain(about["source"]),
            ))  # fmt: skip
            (changed if differs else usual).append(row)
        groups = [Group(tuple(changed), write.prose("Changed from the default by the register"))] if changed else []
        groups += [Group(tuple(usual), write.prose("Default"))] if usual else []

        yield Schedule("Thresholds in force", POLICY, tuple(groups))


def _reasons(entry: Coverage) -> Sequence[str]:
    """Each reason, the most frequent first, with the tags where it held."""
    told = []
    for reason, count in sorted(entry.reasons.items(), key=lambda item: (-item[1], item[0])):
        tags = list(dict.fromkeys(tag for tag, why in entry.where if why == reason))
        where = listed(tags if len(tags) <= NAMED_PLACES else [*tags[: NAMED_PLACES - 1], "others"])
        told.append(f"{count}: {reason} ({where})")
    return told or [DASH]
