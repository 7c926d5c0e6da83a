"""Where a reader goes from a loop or a scheme: up and down the cascade, to what protects it, to what tells of it."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.narrative.protection_story import acts
from loopdoc.documents.site.places import PER_LOOP, SCHEMES, Issue, Places, address
from loopdoc.documents.values import shown
from loopdoc.documents.whereabouts import anchor, document_name, file_name, mover, unit_of
from loopdoc.engineering.pairing import Plant, Scheme
from loopdoc.register.model import FinalElement, Function, Interlock, Loop, known

ROOT = "../"
"""From the folder of a page to the folder of the issue."""


@dataclass(frozen=True, slots=True)
class Link:
    """A place to go; text alone where the issue holds nothing to lead to."""

    label: str
    address: str = ""
    note: str = ""
    current: bool = False
    """Whether the reader is there already."""


@dataclass(frozen=True, slots=True)
class Entry:
    """Links of one sort."""

    label: str
    links: tuple[Link, ...]


@dataclass(frozen=True, slots=True)
class Node:
    """One tag of a scheme with what it commands."""

    link: Link
    kind: str
    below: tuple[Node, ...]
    again: bool = False
    """True where the tag stands above already, with what it commands."""


def is_told_apart(plant: Plant, scheme: Scheme) -> bool:
    """Whether a scheme has a page of its own: more than one loop on one final element."""
    own = [loop for loop in scheme.loops if loop.tag in plant.controlled]
    return bool(own) and len(own) + len(scheme.functions) + len(scheme.final_elements) > 2


class Around:
    """The ways between the pages of one issue."""

    def __init__(self, plant: Plant, places: Places) -> None:
        self._plant = plant
        self._places = places
        self._functions: dict[str, list[Function]] = {}
        for tag, function in plant.register.functions.items():
            owner = mover(plant, tag)
            if owner is not None:
                self._functions.setdefault(owner.tag, []).append(function)
        self._initiated: dict[str, list[Interlock]] = {}
        for trip in plant.trips:
            if trip.loop is not None:
                self._initiated.setdefault(trip.loop.tag, []).append(trip.interlock)
        self._acting: dict[str, list[Interlock]] = {}
        for interlock in plant.register.interlocks.values():
            for tag in interlock.actions:
                self._acting.setdefault(tag, []).append(interlock)

    # -- what belongs to a loop

    def elements(self, loop: Loop) -> tuple[FinalElement, ...]:
        """Final elements that a loop's output moves, directly or through functions."""
        controlled = self._plant.controlled.get(loop.tag)
        routes = controlled.routes if controlled else ()
        return tuple({route.end.tag: route.end for route in routes if isinstance(route.end, FinalElement)}.values())

    def moved(self, loop: Loop) -> tuple[FinalElement, ...]:
        """Final elements that a loop moves in the end, through the loops below it."""
        found: dict[str, FinalElement] = {}
        waiting, seen = [loop], {loop.tag}
        while waiting:
            here = waiting.pop(0)
            found.update({element.tag: element for element in self.elements(here)})
            controlled = self._plant.controlled.get(here.tag)
            for route in controlled.routes if controlled else ():
                if isinstance(route.end, Loop) and route.end.tag not in seen:
                    seen.add(route.end.tag)
                    waiting.append(route.end)
        return tuple(found.values())

    def functions(self, loop: Loop) -> tuple[Function, ...]:
        """Functions behind a loop's output, and those that a secondary has for its only commander."""
        controlled = self._plant.controlled.get(loop.tag)
        routes = controlled.routes if controlled else ()
        found = {function.tag: function for route in routes for function in route.via}
        found.update({function.tag: function for function in self._functions.get(loop.tag, ())})
        return tuple(found.values())

    def transmitter(self, loop: Loop) -> str:
        """Tag of a loop's transmitter; empty where the register names none."""
        measurement = known(loop.measurement)
        return (known(measurement.transmitter) if measurement else None) or ""

    def tags(self, loop: Loop) -> tuple[str, ...]:
        """Everything that a loop's page answers for."""
        functions = [function.tag for function in self.functions(loop)]
        elements = [element.tag for element in self.elements(loop)]
        return tuple(dict.fromkeys(tag for tag in (loop.tag, self.transmitter(loop), *functions, *elements) if tag))

    def interlocks(self, loop: Loop) -> tuple[Interlock, ...]:
        """Interlocks that a loop's transmitter trips, or that act on the loop or what it moves."""
        found = [*self._initiated.get(loop.tag, ())]
        for tag in (loop.tag, *(element.tag for element in self.moved(loop))):
            found += self._acting.get(tag, ())
        return tuple({one.tag: one for one in found}.values())

    # -- links

    def to(self, tag: str, *, label: str = "", note: str = "") -> Link:
        """A link to the page of a tag; text alone where there is none."""
        return Link(label or tag, self._address(tag), note)

    def _address(self, tag: str) -> str:
        plant, register = self._plant, self._plant.register
        loop = register.loops.get(tag) or plant.loop_of_transmitter.get(tag)
        if loop is not None:
            sheet = self._places.document("loop-sheet", loop.tag)
            return address(sheet.path, root=ROOT) if sheet else ""
        interlock = register.interlocks.get(tag)
        part = interlock or register.final_elements.get(tag) or register.instruments.get(tag)
        if part is not None:
            kind = "cause-and-effect" if interlock else "instrument-list"
            listed = self._places.document(kind, file_name(unit_of(part)))
            return address(listed.path, root=ROOT, at=anchor(tag)) if listed else ""
        return self._scheme_address(mover(plant, tag), at=anchor(tag))

    def _scheme_address(self, loop: Loop | None, at: str = "") -> str:
        if loop is None:
            return ""
        path = f"{SCHEMES}/{document_name(self._plant.scheme_of(loop.tag).lead.tag)}"
        return address(path, root=ROOT, at=at) if self._places.has(f"{path}.html") else ""

    def documents(self, one: Issue, label: str, *, here: str = "") -> Iterator[Link]:
        """A document as a page, and as a file to print; ``here`` is the path of the page that is read."""
        if "html" in self._places.formats:
            yield Link(label, current=True) if one.path == here else Link(label, address(one.path, root=ROOT))
        if "pdf" in self._places.formats:
            yield Link(f"{label} (PDF)" if "html" not in self._places.formats else "PDF",
                       address(one.path, root=ROOT, ending=".pdf"))  # fmt: skip

    # -- entries

    def loop(self, loop: Loop, here: str, language: Language) -> tuple[Entry, ...]:
        """Where to go from a page about a loop, which is in this language."""
        plant = self._plant
        scheme = plant.scheme_of(loop.tag)
        page = self._scheme_address(loop)
        commanders = plant.commanders.get(loop.tag, ())
        moved = self.moved(loop)
        commanded = [tag for tag in plant.targets(loop.tag) if tag not in {element.tag for element in moved}]
        return _filled(
            ("Scheme", [Link(f"{scheme.lead.tag} {shown(scheme.lead.service)}", page)] if page else []),
            ("Commanded by", [self.to(tag) for tag in commanders]),
            ("Commands", [self.to(tag) for tag in commanded]),
            ("Final element", [self.to(e.tag, note=shown(e.service)) for e in moved]),
            ("Interlocks", [self.to(i.tag, note=self._does(i, loop, language)) for i in self.interlocks(loop)]),
            ("Alarms", list(self._alarms(loop, language))),
            ("Narrative", list(self._narrative((loop.tag,), language))),
            ("Schedules", list(self._schedules(self.tags(loop)))),
            ("Documents", list(self._own_documents(loop, scheme, here))),
        )

    def scheme(self, scheme: Scheme) -> tuple[Entry, ...]:
        """Where to go from the page of a scheme."""
        interlocks = {one.tag: one for loop in scheme.loops for one in self.interlocks(loop)}
        response = self._places.document("response", scheme.lead.tag)
        return _filled(
            ("Interlocks", [self.to(one.tag, note=shown(one.service)) for one in interlocks.values()]),
            ("Narrative", list(self._narrative([loop.tag for loop in scheme.loops], ENGLISH))),
            ("Responses", list(self.documents(response, "Response plots")) if response else []),
        )

    def node(self, tag: str, above: frozenset[str] = frozenset(), seen: set[str] | None = None) -> Node:
        """A tag with what it commands, down to the final elements."""
        found = set() if seen is None else seen
        again = tag in found
        found.add(tag)
        below = () if again or tag in above else self._plant.targets(tag)
        return Node(
            self.to(tag, note=self._service(tag)), self._kind(tag),
            tuple(self.node(target, above | {tag}, found) for target in below), again,
        )  # fmt: skip

    def _service(self, tag: str) -> str:
        register = self._plant.register
        part = register.loops.get(tag) or register.functions.get(tag) or register.final_elements.get(tag)
        return known(part.service) or "" if part else ""

    def _kind(self, tag: str) -> str:
        register = self._plant.register
        if tag in register.loops:
            return "loop"
        part = register.functions.get(tag) or register.final_elements.get(tag)
        return known(part.kind) or "" if part else "not in the register"

    def _does(self, interlock: Interlock, loop: Loop, language: Language) -> str:
        does = acts(interlock, {loop.tag, *(element.tag for element in self.moved(loop))}, language)
        trips = any(one.tag == interlock.tag for one in self._initiated.get(loop.tag, ()))
        return ", ".join(part for part in (language.label("tripped from here") if trips else "", does) if part)

    def _alarms(self, loop: Loop, language: Language) -> Iterator[Link]:
        at = next(((one, at) for one, at in self._places.rows(self.tags(loop)) if one.kind == "alarm-schedule"), None)
        for kind, alarm in loop.alarms.items():
            where = address(at[0].path, root=ROOT, at=at[1]) if at and "html" in self._places.formats else ""
            priority = known(alarm.priority)
            said = f"{language.label('Priority')} {language.term('priority', priority)}" if priority else ""
            yield Link(f"{language.alarm_name(kind)} {language.shown(alarm.limit)}", where, said)

    def _narrative(self, tags: Iterable[str], language: Language) -> Iterator[Link]:
        seen = set()
        for tag in tags:
            for one, at, heading in self._places.told(tag):
                if (one.path, at) not in seen and "html" in self._places.formats:
                    seen.add((one.path, at))
                    unit = f"{language.label('Unit')} "
                    yield Link(f"{one.page.name.replace('unit-', unit, 1)}, {heading}",
                               address(one.path, root=ROOT, at=at))  # fmt: skip

    def _schedules(self, tags: Sequence[str]) -> Iterator[Link]:
        if "html" in self._places.formats:
            for one, at in self._places.rows(tags):
                yield Link(one.page.document.kind, address(one.path, root=ROOT, at=at))

    def _own_documents(self, loop: Loop, scheme: Scheme, here: str) -> Iterator[Link]:
        for kind in PER_LOOP:
            one = self._places.document(kind, loop.tag if kind != "response" else scheme.lead.tag)
            if one is not None and (kind != "response" or loop.tag in self._plant.controlled):
                yield from self.documents(one, one.page.document.kind, here=here)


def _filled(*entries: tuple[str, Sequence[Link]]) -> tuple[Entry, ...]:
    return tuple(Entry(label, tuple(links)) for label, links in entries if links)
