"""Every tag that a register defines, and every place where it names one."""

from __future__ import annotations

from collections.abc import Collection, Iterator
from dataclasses import dataclass
from functools import cached_property

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Hold, Loop, Origin, Register, known
from loopdoc.register.place import Place

SECTIONS = ("register", "site", "revision", "history", "texts")
"""Where a finding may stand that is about no tag; a deviation may name them."""


@dataclass(frozen=True, slots=True)
class DefinedTag:
    """A tag that the register defines."""

    tag: str
    what: str
    """What it is, such as `loop` or `transmitter`."""
    place: Place
    unit: str | Hold | None
    """The unit that the register gives it; None for a transmitter, which has the unit of no part of its own."""
    unit_place: Place


@dataclass(frozen=True)
class Names:
    """Tags among which a reference may choose."""

    what: str
    """What they are, in words: `a loop, a function or a final element`."""
    tags: Collection[str]

    def nearest(self, written: str) -> str | None:
        """The tag that differs from the written one by one character, or by two neighbours swapped."""
        for short in _shortened(written):
            for tag in self._by_shortened.get(short, ()):
                if tag != written:
                    return tag
        return None

    @cached_property
    def _by_shortened(self) -> dict[str, list[str]]:
        found: dict[str, list[str]] = {}
        for tag in self.tags:
            for short in _shortened(tag):
                found.setdefault(short, []).append(tag)
        return found


def _shortened(tag: str) -> Iterator[str]:
    """A tag with no character left out, then with each in turn; two tags that share one of these are near."""
    plain = tag.casefold()
    yield plain
    for index in range(len(plain)):
        yield plain[:index] + plain[index + 1 :]


@dataclass(frozen=True, slots=True)
class Reference:
    """A place where the register names a tag (or a unit, or a rule) that it must define."""

    tag: str
    """The tag under which the name stands."""
    where: str
    """What it is named as, such as `output`."""
    target: str
    place: Place
    among: Names
    otherwise: str
    """What the target is where it is defined but cannot be named here; empty where nothing defines it."""

    @property
    def resolved(self) -> bool:
        return self.target in self.among.tags


def defined_tags(register: Register) -> tuple[DefinedTag, ...]:
    """Every tag that the register defines, once each."""
    found: dict[str, DefinedTag] = {}
    for what, section in (
        ("loop", register.loops),
        ("final element", register.final_elements),
        ("instrument", register.instruments),
        ("function", register.functions),
        ("interlock", register.interlocks),
    ):
        for tag, part in section.items():
            unit_place = part.origin.place("unit")
            found.setdefault(tag, DefinedTag(tag, what, part.origin.key(), part.unit, unit_place))
    for tag, measurement in register.measurements.items():
        place = measurement.origin.place("transmitter")
        found.setdefault(tag, DefinedTag(tag, "transmitter", place, None, place))
    return tuple(found.values())


def references(plant: Plant, rule_ids: Collection[str]) -> tuple[Reference, ...]:
    """Every place where the register names a tag, a unit or a rule."""
    return tuple(_References(plant, rule_ids).all())


class _References:
    def __init__(self, plant: Plant, rule_ids: Collection[str]) -> None:
        self._plant = plant
        self._register = register = plant.register
        self._what = {defined.tag: defined.what for defined in defined_tags(register)}
        measured = {*register.measurements, *register.loops}
        self._commanded = Names(
            "a loop, a function or a final element",
            {*register.loops, *register.functions, *register.final_elements},
        )
        self._measured = Names("a transmitter, an instrument or a loop", measured)
        self._acted_on = Names("a final element or a loop", {*register.final_elements, *register.loops})
        self._units = Names("a unit under `units`", register.units)
        self._rules = Names("a rule (`loopdoc rules` lists them)", rule_ids)
        self._anything = Names(
            "a tag of the register", {*self._what, *register.units, *SECTIONS, *(file.name for file in register.files)}
        )

    def all(self) -> Iterator[Reference]:
        register = self._register
        for loop in register.loops.values():
            yield from self._of_loop(loop)
        for tag, function in register.functions.items():
            to = known(function.to)
            if to is not None:
                yield self._to(tag, "the destination", to, function.origin.place("to"), self._commanded)
            for element in function.outputs:
                yield self._to(tag, "an output", element, function.origin.key("outputs", element), self._commanded)
            for index, entry in enumerate(function.inputs):
                yield self._to(tag, "an input", entry, function.origin.place("inputs", index), self._measured)
            entering = Names(
                f"an input of {tag} or a loop whose output goes to it",
                {*function.inputs, *self._plant.commanders.get(tag, ())},
            )
            for entry in function.weights:
                yield self._to(tag, "a weight", entry, function.origin.key("weights", entry), entering)
        for tag, interlock in register.interlocks.items():
            for entry in interlock.initiators:
                yield self._to(tag, "an initiator", entry, interlock.origin.key("initiators", entry), self._measured)
            for entry in interlock.actions:
                yield self._to(tag, "an action", entry, interlock.origin.key("actions", entry), self._acted_on)
        for section in (register.loops, register.final_elements, register.instruments, register.functions,
                        register.interlocks):  # fmt: skip
            for tag, part in section.items():
                yield from self._unit(tag, part.unit, part.origin)
        for number, text in register.texts.items():
            yield self._to(number, "the unit of the texts", number, text.origin.key(), self._units)
        for deviation in register.deviations:
            at, rule = known(deviation.at), known(deviation.rule)
            whose = at or "deviations"
            if rule is not None:
                yield self._to(whose, "the rule of a deviation", rule, deviation.origin.place("rule"), self._rules)
            if at is not None:
                yield self._to(whose, "the tag of a deviation", at, deviation.origin.place("at"), self._anything)

    def _of_loop(self, loop: Loop) -> Iterator[Reference]:
        controller = known(loop.controller)
        output = known(controller.output) if controller else None
        to = known(output.to) if output else None
        if output is not None and to is not None:
            yield self._to(loop.tag, "the destination of the output", to, output.origin.place("to"), self._commanded)
        process = known(loop.process)
        if process is None or loop.tag not in self._plant.controlled:
            return
        moved = Names(
            f"a final element that {loop.tag} moves",
            [route.end.tag for route in self._plant.controlled[loop.tag].routes],
        )
        for tag in process.branches:
            yield self._to(loop.tag, "a branch of the process", tag, process.origin.key("branches", tag), moved)

    def _unit(self, tag: str, unit: str | Hold | None, origin: Origin) -> Iterator[Reference]:
        number = known(unit)
        if number is not None:
            yield self._to(tag, "the unit", number, origin.place("unit"), self._units)

    def _to(self, tag: str, where: str, target: str, place: Place, among: Names) -> Reference:
        return Reference(tag, where, target, place, among, self._what.get(target, ""))
