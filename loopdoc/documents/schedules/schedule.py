"""What every schedule is made of: tables on landscape paper whose cells hold a value, a HOLD or a dash with meaning."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.language import ENGLISH
from loopdoc.documents.narrative.open_points import DEVIATION_HEAD, deviation_rows, held_name
from loopdoc.documents.page_fit import MM, title_table_height
from loopdoc.documents.titleblock import Document
from loopdoc.documents.values import DASH, HOLD, shown
from loopdoc.documents.whereabouts import NO_UNIT, file_name, told_at
from loopdoc.documents.wording import NO_BREAK, Prose, Run, Setter, counted, listed, sentence, upper_first, value
from loopdoc.register.model import Hold, known
from loopdoc.register.quantity import Quantity, Range
from loopdoc.rules.references import defined_tags

TEMPLATE = "schedule.html"
NOT_APPLICABLE = "n/a"
DASHES = (
    f"{DASH} stands where the register gives nothing, {NOT_APPLICABLE} where nothing can be given; {HOLD} is a value "
    "not yet known, with its reason under its number at the end."
)
"""How to read the cells of a schedule."""

_EDGES = 20.0 + 10.0
"""Left and right margin of every page [mm]."""
_BELOW = 8.0 + 2.0
"""Under and over the title block [mm]."""


@dataclass(frozen=True, slots=True)
class Paper:
    """A sheet of paper, lying."""

    name: str
    width_mm: float
    """Between the margins."""


A4 = Paper("A4", 297.0 - _EDGES)
A3 = Paper("A3", 420.0 - _EDGES)


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell; each line is set on a line of its own."""

    lines: tuple[Prose, ...]
    kind: str = ""
    """strong, mark or empty."""
    over: int = 1
    """Columns that it covers."""
    down: int = 1
    """Rows that it covers."""


@dataclass(frozen=True, slots=True)
class Column:
    """A column of a table."""

    heading: str
    share: float
    """Of the width of the table [%]."""


@dataclass(frozen=True, slots=True)
class Row:
    """A row; its first cell heads it."""

    cells: tuple[Cell, ...]
    anchor: str = ""
    kind: str = ""
    """trip, or empty."""


@dataclass(frozen=True, slots=True)
class Group:
    """Rows that belong together, under a heading of their own where they have one."""

    rows: tuple[Row, ...]
    heading: Prose = ()


@dataclass(frozen=True, slots=True)
class Schedule:
    """A table with its title."""

    title: str
    columns: tuple[Column, ...]
    groups: tuple[Group, ...]


DEVIATIONS = tuple(map(Column, DEVIATION_HEAD, (16.0, 29.0, 32.0, 14.0, 9.0)))


@dataclass(frozen=True, slots=True)
class HoldLine:
    """A hold with its number and its reason."""

    number: str
    reason: str


class Writer:
    """Writes the cells of one document and counts its holds."""

    def __init__(self, basis: Basis) -> None:
        register = basis.plant.register
        tags = [defined.tag for defined in defined_tags(register)]
        self._setter = Setter(register, tags, lambda tag: told_at(basis.plant, tag))
        self._reasons: dict[str, int] = {}
        self._plant = basis.plant

    def text(self, written: object) -> str:
        """A value with its unit, HOLD with the number of its reason, a dash where nothing is given."""
        if isinstance(written, Hold):
            return self.held(written.reason)
        if isinstance(written, Quantity | Range):
            return value(written)
        return shown(written)

    def held(self, reason: str) -> str:
        """HOLD with the number under which its reason stands."""
        return f"{HOLD}{NO_BREAK}{self._reasons.setdefault(reason, len(self._reasons) + 1)}"

    def prose(self, text: str) -> Prose:
        """Text set with its tags and values whole."""
        runs = self._setter.prose(text)
        return tuple(replace(run, kind="hold") if run.text.startswith(f"{HOLD}{NO_BREAK}") else run for run in runs)

    def cell(self, *lines: object, kind: str = "", over: int = 1, down: int = 1) -> Cell:
        """A cell of values or texts."""
        return Cell(tuple(self.prose(self.text(line)) for line in lines), kind, over, down)

    def value(self, written: object, tag: str) -> Cell:
        """A value that leads to the sheet of its tag."""
        text = self.text(written)
        if text.startswith((HOLD, DASH)):
            return self.cell(text)
        return Cell(((Run(text, "value", told_at(self._plant, tag).sheet),),))

    def plain(self, text: str, *, kind: str = "", over: int = 1, down: int = 1) -> Cell:
        """A cell whose text is set as it is, in one run."""
        return Cell(((Run(text),),), kind, over, down)

    def words(self, written: str | Hold | None) -> Cell:
        """A sentence of the register, with a stop."""
        return self.cell(sentence(written) if isinstance(written, str) else written)

    def holds_of(self, tag: str, concerns: Callable[[Sequence[str | int]], bool]) -> str:
        """What is on hold under a tag and concerns the schedule, each with its number; a dash for nothing."""
        found = [
            f"{held_name(hold.path)} ({self.held(hold.reason)})"
            for hold in self._plant.register.holds
            if hold.tag == tag and concerns(hold.path)
        ]
        return ", ".join(found) or DASH

    def reason_at(self, tag: str, *path: str) -> str | None:
        """HOLD with its number where just this value is held; None where it is not."""
        for hold in self._plant.register.holds:
            if hold.tag == tag and hold.path == path:
                return self.held(hold.reason)
        return None

    @property
    def holds(self) -> tuple[HoldLine, ...]:
        """The reasons by number."""
        return tuple(HoldLine(f"{HOLD}{NO_BREAK}{number}", reason) for reason, number in self._reasons.items())


@dataclass(frozen=True, slots=True)
class ScheduleKind:
    """A kind of schedule: where it is filed, what it is called and who signs it."""

    folder: str
    name: str
    code: str
    """In the document number."""
    paper: Paper = A3
    signatures: tuple[str, ...] = ()
    """Label of each cell of the sign-off, the widest last; empty where the title block is signature enough."""


REVIEW = (
    "Reviewed by, for process control", "For operations", "For process safety", "Date of the review", "Remarks",
)  # fmt: skip
"""Who signs a schedule of what the hazard study rests on."""


def unit_title(basis: Basis, number: str) -> str:
    """`Unit 20 Rectification`."""
    unit = basis.plant.register.units.get(number)
    name = known(unit.name) if unit else None
    return f"Unit {number} {name}" if name else f"Unit {number}"


def extent(*counts: tuple[int, str]) -> str:
    """What a schedule holds: `Three interlocks and five causes`; what it holds none of is left out."""
    return upper_first(listed(counted(count, noun) for count, noun in counts if count))


def serial(basis: Basis, number: str) -> str:
    """Serial of a unit's only schedule of a kind; it tells the units apart where the numbering does not."""
    return "001" if "{unit}" in basis.plant.register.numbering else number


def page(
    basis: Basis,
    writer: Writer,
    kind: ScheduleKind,
    *,
    extent: str,
    reading: Iterable[str],
    unit: str = NO_UNIT,
    title: str = "",
    caution: str = "",
    lead: Iterable[str] = (),
    schedules: Sequence[Schedule],
    view: Mapping[str, Any] | None = None,
    template: str = TEMPLATE,
) -> Page:
    """A schedule ready for its template: of a unit, or with a title of its own.

    ``lead`` tells the schedule in words before its tables, ``view`` is what the template places besides.
    """
    document = basis.document(
        kind=kind.name, code=kind.code, title=title or unit_title(basis, unit), supplementary_title=extent, unit=unit,
        serial=serial(basis, unit),
    )  # fmt: skip
    whole = {
        "paper": kind.paper.name,
        "foot": foot(document),
        "reading": tuple(writer.prose(text) for text in reading),
        "caution": caution,
        "lead": tuple(writer.prose(text) for text in lead),
        "schedules": schedules,
        "deviations": deviations(basis, writer, (*schedules, *(view or {}).get("charts", ()))),
        "signatures": kind.signatures,
        **(view or {}),
        "holds": writer.holds,
    }
    return Page(kind.folder, file_name(unit) if unit != NO_UNIT else "plant", document, template, whole)


def deviations(basis: Basis, writer: Writer, schedules: Iterable[Any]) -> tuple[Schedule, ...]:
    """The accepted findings that touch what a row of the schedules, or a group of rows, is about."""
    groups = [group for part in schedules for group in part.groups]
    heads = (line for group in groups for row in group.rows for line in row.cells[0].lines)
    lines = (*(group.heading for group in groups), *heads)
    tags = {run.text for line in lines for run in line if run.kind == "tag"}
    touching = (finding for finding in basis.result.accepted if not tags.isdisjoint(finding.touches))
    rows = tuple(Row(tuple(writer.cell(text) for text in row)) for row in deviation_rows(touching, ENGLISH))
    return (Schedule("Accepted deviations", DEVIATIONS, (Group(rows),)),) if rows else ()


def foot(document: Document) -> str:
    """The lower margin of a landscape page, as CSS writes it."""
    return f"{title_table_height(document) / MM + _BELOW:.1f}mm"
