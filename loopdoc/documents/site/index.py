"""The index of the site: a row for every loop, interlock, further part and document, with what is open at it."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from loopdoc.documents.basis import Basis
from loopdoc.documents.site.around import Around, Link, is_told_apart
from loopdoc.documents.site.places import PER_LOOP, SCHEMES, Issue, Places, address
from loopdoc.documents.site.points import Counts, Points
from loopdoc.documents.values import DASH, shown
from loopdoc.documents.whereabouts import NO_UNIT, anchor, document_name, file_name, natural, unit_numbers, unit_of
from loopdoc.engineering.pairing import Scheme
from loopdoc.register.model import FinalElement, Instrument, Interlock, Loop, known


@dataclass(frozen=True, slots=True)
class Row:
    """One line of the index; every field is text ready to place."""

    name: Link
    title: str
    unit: str
    kind: str
    scheme: Link | None
    counts: Counts | None
    """None for a document, at which nothing is open by itself."""
    documents: tuple[Link, ...]
    also: str
    """What it is found by besides what the row shows."""


@dataclass(frozen=True, slots=True)
class Choice:
    """One value of a filter and how many rows have it."""

    value: str
    label: str
    count: int


def index_rows(basis: Basis, places: Places, around: Around, points: Points) -> Iterator[Row]:
    """Loops in the order of the register, interlocks, parts that no loop answers for, then the other documents."""
    writer = _Rows(basis, places, around, points)
    yield from writer.loops()
    yield from writer.others()
    yield from writer.documents()


def choices(values: Iterable[tuple[str, str]]) -> tuple[Choice, ...]:
    """The values of a filter with their labels, each once, in order of first appearance."""
    counts: dict[str, int] = {}
    labels: dict[str, str] = {}
    for value, label in values:
        counts[value] = counts.get(value, 0) + 1
        labels.setdefault(value, label)
    return tuple(Choice(value, labels[value], count) for value, count in counts.items())


class _Rows:
    def __init__(self, basis: Basis, places: Places, around: Around, points: Points) -> None:
        self._plant = basis.plant
        self._places = places
        self._around = around
        self._points = points
        self._covered: set[str] = set()
        self._units = {file_name(number): number for number in unit_numbers(self._plant) if number != NO_UNIT}

    def loops(self) -> Iterator[Row]:
        plant = self._plant
        for loop in plant.register.loops.values():
            tags = self._around.tags(loop)
            self._covered.update(tags)
            scheme = plant.scheme_of(loop.tag)
            interlocks = [interlock.tag for interlock in self._around.interlocks(loop)]
            yield Row(
                self._loop_name(loop, scheme), shown(loop.service), self._unit(loop), _loop_kind(loop),
                self._scheme(scheme), self._points.counts(tags), tuple(self._of_loop(loop, scheme)),
                self._also(tags, (*tags, *interlocks, known(loop.purpose) or "", known(loop.drawing) or "",
                                  *self._numbers(loop))),
            )  # fmt: skip

    def others(self) -> Iterator[Row]:
        register = self._plant.register
        parts: tuple[Interlock | Instrument | FinalElement, ...] = (
            *register.interlocks.values(), *register.instruments.values(), *register.final_elements.values(),
        )  # fmt: skip
        for part in sorted(parts, key=lambda part: (isinstance(part, FinalElement), natural(part.tag))):
            if part.tag in self._covered:
                continue
            tags = (part.tag,)
            chart = isinstance(part, Interlock)
            name = self._name(part.tag, "cause-and-effect" if chart else "instrument-list",
                              file_name(unit_of(part)), at=anchor(part.tag))  # fmt: skip
            words = (*part.initiators, *part.actions) if isinstance(part, Interlock) else ()
            kind = "Interlock" if chart else "Instrument" if isinstance(part, Instrument) else "Final element"
            yield Row(name, shown(part.service), self._unit(part), kind, None, self._points.counts(tags), (),
                      self._also(tags, words))  # fmt: skip

    def documents(self) -> Iterator[Row]:
        for one in self._places.issued:
            if one.kind in PER_LOOP:  # they stand in the rows of their loops
                continue
            document = one.page.document
            form = self._places.formats[0]
            unit = self._units.get(one.page.name, "")
            yield Row(
                Link(document.number, address(one.path, ending=f".{form}")), document.title, unit, document.kind,
                None, None, tuple(self._files(one, "")[1:]), document.supplementary_title,
            )  # fmt: skip

    def _loop_name(self, loop: Loop, scheme: Scheme) -> Link:
        """The tag, leading to the first of the loop's documents."""
        first = next(self._of_loop(loop, scheme), None)
        return Link(loop.tag, first.address if first else "")

    def _name(self, tag: str, kind: str, name: str, at: str = "") -> Link:
        one = self._places.document(kind, name)
        if one is None:
            return Link(tag)
        form = self._places.formats[0]
        return Link(tag, address(one.path, ending=f".{form}", at=at if form == "html" else ""))

    def _unit(self, part: Loop | Interlock | Instrument | FinalElement) -> str:
        unit = unit_of(part)
        return unit if unit != NO_UNIT else DASH

    def _scheme(self, scheme: Scheme) -> Link | None:
        if not is_told_apart(self._plant, scheme):
            return None
        path = f"{SCHEMES}/{document_name(scheme.lead.tag)}"
        return Link(scheme.lead.tag, address(path))

    def _of_loop(self, loop: Loop, scheme: Scheme) -> Iterator[Link]:
        for kind, label in PER_LOOP.items():
            one = self._places.document(kind, scheme.lead.tag if kind == "response" else loop.tag)
            if one is not None and (kind != "response" or loop.tag in self._plant.controlled):
                yield from self._files(one, label)

    def _files(self, one: Issue, label: str) -> list[Link]:
        return [
            Link(said, address(one.path, ending=f".{form}"), one.page.document.kind)
            for form in self._places.formats
            for said in (label if form == "html" else form.upper(),)
        ]

    def _numbers(self, loop: Loop) -> Iterator[str]:
        for kind in PER_LOOP:
            one = self._places.document(kind, loop.tag)
            if one is not None:
                yield one.page.document.number

    def _also(self, tags: tuple[str, ...], words: Iterable[str]) -> str:
        told = [f"{point.kind} {point.what}: {point.text}" for point in self._points.points(tags)]
        told += [f"not checked {one.rule}: {one.reason}" for one in self._points.not_made(tags)]
        return "\n".join((" ".join(dict.fromkeys(word for word in words if word)), *told))


def _loop_kind(loop: Loop) -> str:
    return "Controller" if loop.controller is not None else "Indicator"
