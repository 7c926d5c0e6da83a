"""Who commands whom: the directed graph of loops, functions and final elements, resolved once.

A `Plant` is what the rules and documents work on: every link of it exists, so nobody has to look a tag up
twice. What could not be resolved (unknown tags, cycles) is kept beside it for the rules to tell.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

from loopdoc.register.model import (
    Alarm,
    Controller,
    FinalElement,
    Function,
    Initiator,
    Instrument,
    Interlock,
    Loop,
    Measurement,
    Register,
    known,
)
from loopdoc.register.quantity import Quantity, Range


@dataclass(frozen=True, slots=True)
class Route:
    """One way of a controller's output, through functions, to a final element or to a secondary loop."""

    via: tuple[Function, ...]
    end: FinalElement | Loop
    branch: Range | None = None
    """Of a split range: the controller output over which this final element goes from shut to fully open."""


@dataclass(frozen=True, slots=True)
class ControlledLoop:
    """A loop with a controller, and where its output leads."""

    loop: Loop
    controller: Controller
    routes: tuple[Route, ...]

    @property
    def tag(self) -> str:
        return self.loop.tag


@dataclass(frozen=True, slots=True)
class CascadeLink:
    """A primary that commands a secondary, directly or through functions."""

    primary: ControlledLoop
    secondary: ControlledLoop
    via: tuple[Function, ...]


@dataclass(frozen=True, slots=True)
class LoopAlarm:
    """An alarm with the loop on whose measurement it stands."""

    loop: Loop
    alarm: Alarm


@dataclass(frozen=True, slots=True)
class Trip:
    """One initiator of an interlock with the measurement it watches."""

    interlock: Interlock
    initiator: Initiator
    measurement: Measurement | None
    """None where the register does not define the initiator's tag."""
    loop: Loop | None
    """The loop of that measurement; None for an instrument of its own."""
    instrument: Instrument | None


@dataclass(frozen=True, slots=True)
class Scheme:
    """Loops that act together: a cascade with all its levels, an override, a split range, or a single loop."""

    loops: tuple[Loop, ...]
    """Outermost first; loops without a controller stand alone."""
    functions: tuple[Function, ...]
    final_elements: tuple[FinalElement, ...]

    @property
    def lead(self) -> Loop:
        """The loop after which the scheme is named: the outermost."""
        return self.loops[0]


def measured_quantity(part: Loop | Instrument) -> tuple[str, str, str] | None:
    """What a loop or instrument measures: unit, variable, and service up to its first comma.

    `Drum level` and `Drum level, second transmitter` are one quantity. None where the register does not say.
    """
    measurement = known(part.measurement)
    variable = known(measurement.variable) if measurement else None
    unit, service = known(part.unit), known(part.service)
    if variable is None or unit is None or service is None:
        return None
    return unit, variable, service.partition(",")[0].strip().casefold()


def normal_value(loop: Loop) -> Quantity | None:
    """Where a measurement stands in normal operation: its normal setpoint, or its normal operating value."""
    controller, operating = known(loop.controller), known(loop.operating)
    setpoint = known(controller.setpoint) if controller else None
    return (known(setpoint.normal) if setpoint else None) or (known(operating.normal) if operating else None)


class Plant:
    """The register resolved: routes, cascades, alarms, trips, schemes."""

    def __init__(self, register: Register) -> None:
        self.register = register

    @cached_property
    def controlled(self) -> dict[str, ControlledLoop]:
        """Loops with a controller, by tag."""
        found = {}
        for tag, loop in self.register.loops.items():
            controller = known(loop.controller)
            if controller is not None:
                found[tag] = ControlledLoop(loop, controller, tuple(self._routes(loop, controller)))
        return found

    @cached_property
    def links(self) -> tuple[CascadeLink, ...]:
        """Every pair of primary and secondary; a chain of three levels gives two links, and a ring of outputs none."""
        return tuple(
            CascadeLink(primary, self.controlled[route.end.tag], route.via)
            for primary in self.controlled.values()
            for route in primary.routes
            if isinstance(route.end, Loop) and route.end.tag in self.controlled
            if not any(primary.tag in ring and route.end.tag in ring for ring in self.cycles)
        )

    @cached_property
    def links_to(self) -> dict[str, tuple[CascadeLink, ...]]:
        """The links that end at each secondary, by its tag."""
        found: dict[str, list[CascadeLink]] = {}
        for link in self.links:
            found.setdefault(link.secondary.tag, []).append(link)
        return {tag: tuple(links) for tag, links in found.items()}

    @cached_property
    def alarms(self) -> tuple[LoopAlarm, ...]:
        return tuple(LoopAlarm(loop, alarm) for loop in self.register.loops.values() for alarm in loop.alarms.values())

    @cached_property
    def warning_of(self) -> dict[tuple[str, str], tuple[LoopAlarm, ...]]:
        """The alarms of other loops that are said to tell of a hazard, by the tag of the loop and the side."""
        found: dict[tuple[str, str], list[LoopAlarm]] = {}
        for entry in self.alarms:
            for hazard in entry.alarm.warns_of.items():
                found.setdefault(hazard, []).append(entry)
        return {hazard: tuple(alarms) for hazard, alarms in found.items()}

    @cached_property
    def alarms_of_unit(self) -> dict[str, tuple[LoopAlarm, ...]]:
        """The alarms of each process unit, by its number."""
        found: dict[str, list[LoopAlarm]] = {}
        for entry in self.alarms:
            number = known(entry.loop.unit)
            if number is not None:
                found.setdefault(number, []).append(entry)
        return {number: tuple(alarms) for number, alarms in found.items()}

    @cached_property
    def trips_of(self) -> dict[str, tuple[Trip, ...]]:
        """The initiators of each interlock, by its tag."""
        found: dict[str, list[Trip]] = {tag: [] for tag in self.register.interlocks}
        for trip in self.trips:
            found[trip.interlock.tag].append(trip)
        return {tag: tuple(trips) for tag, trips in found.items()}

    @cached_property
    def trips(self) -> tuple[Trip, ...]:
        found = []
        for interlock in self.register.interlocks.values():
            for tag, initiator in interlock.initiators.items():
                instrument = self.register.instruments.get(tag)
                loop = self.register.loops.get(tag) or self.loop_of_transmitter.get(tag)
                measurement = instrument.measurement if instrument else known(loop.measurement) if loop else None
                found.append(Trip(interlock, initiator, measurement, None if instrument else loop, instrument))
        return tuple(found)

    @cached_property
    def loops_on(self) -> dict[str, tuple[Loop, ...]]:
        """The loops that measure with each transmitter, in the order of the register."""
        found: dict[str, list[Loop]] = {}
        for loop in self.register.loops.values():
            measurement = known(loop.measurement)
            transmitter = known(measurement.transmitter) if measurement else None
            if transmitter:
                found.setdefault(transmitter, []).append(loop)
        return {tag: tuple(loops) for tag, loops in found.items()}

    @cached_property
    def loop_of_transmitter(self) -> dict[str, Loop]:
        """The loop that each transmitter belongs to (the first, where several name it)."""
        return {tag: loops[0] for tag, loops in self.loops_on.items()}

    def measures(self, tag: str) -> Loop | Instrument | None:
        """The part that has a measurement: an instrument or a loop by its own tag, or the loop of a transmitter."""
        register = self.register
        return register.instruments.get(tag) or register.loops.get(tag) or self.loop_of_transmitter.get(tag)

    @cached_property
    def measuring(self) -> dict[tuple[str, str, str], tuple[Loop | Instrument, ...]]:
        """The loops, then the instruments, that measure each quantity, in the order of the register."""
        found: dict[tuple[str, str, str], list[Loop | Instrument]] = {}
        parts: tuple[Loop | Instrument, ...] = (*self.register.loops.values(), *self.register.instruments.values())
        for part in parts:
            quantity = measured_quantity(part)
            if quantity is not None:
                found.setdefault(quantity, []).append(part)
        return {quantity: tuple(parts) for quantity, parts in found.items()}

    def loops_watching(self, part: Loop | Instrument) -> tuple[Loop, ...]:
        """Every loop that measures what a loop or instrument measures, with its transmitter or another."""
        measurement = known(part.measurement)
        transmitter = known(measurement.transmitter) if measurement else None
        quantity = measured_quantity(part)
        on_it = self.loops_on.get(transmitter, ()) if transmitter else ()
        alike = self.measuring.get(quantity, ()) if quantity else ()
        found = {loop.tag: loop for loop in (*on_it, *alike) if isinstance(loop, Loop)}
        return tuple(found.values())

    @cached_property
    def position(self) -> dict[str, int]:
        """Where each loop stands in the register, counted from 0."""
        return {tag: index for index, tag in enumerate(self.register.loops)}

    @cached_property
    def moved_by(self) -> dict[str, tuple[ControlledLoop, ...]]:
        """The controllers whose output moves each final element, directly or through functions."""
        found: dict[str, dict[str, ControlledLoop]] = {}
        for controlled in self.controlled.values():
            for route in controlled.routes:
                if isinstance(route.end, FinalElement):
                    found.setdefault(route.end.tag, {})[controlled.tag] = controlled
        return {tag: tuple(loops.values()) for tag, loops in found.items()}

    @cached_property
    def commanders(self) -> dict[str, tuple[str, ...]]:
        """Tags of the loops and functions that command each tag directly."""
        found: dict[str, list[str]] = {}
        for tag, targets in self._targets.items():
            for target in targets:
                found.setdefault(target, []).append(tag)
        return {tag: tuple(commanders) for tag, commanders in found.items()}

    @cached_property
    def interlocked(self) -> frozenset[str]:
        """Tags on which an interlock acts."""
        return frozenset(tag for interlock in self.register.interlocks.values() for tag in interlock.actions)

    def targets(self, tag: str) -> tuple[str, ...]:
        """What a loop or a function commands directly, as written (unknown tags included)."""
        return self._targets.get(tag, ())

    @cached_property
    def cycles(self) -> tuple[tuple[str, ...], ...]:
        """Tags that command one another in a ring, each ring once, beginning with its first tag in the register."""
        found: dict[frozenset[str], tuple[str, ...]] = {}
        done: set[str] = set()
        for start in self._targets:
            path: list[str] = []
            on_path: set[str] = set()
            stack = [(start, iter(self._targets.get(start, ())))] if start not in done else []
            if stack:
                path.append(start)
                on_path.add(start)
            while stack:
                tag, targets = stack[-1]
                target = next(targets, None)
                if target is None:
                    stack.pop()
                    path.pop()
                    on_path.discard(tag)
                    done.add(tag)
                elif target in on_path:
                    ring = tuple(path[path.index(target) :])
                    found.setdefault(frozenset(ring), ring)
                elif target not in done and target in self._targets:
                    stack.append((target, iter(self._targets[target])))
                    path.append(target)
                    on_path.add(target)
        return tuple(found.values())

    @cached_property
    def schemes(self) -> tuple[Scheme, ...]:
        """Every loop in exactly one scheme, in the order in which the register names its first loop."""
        neighbours: dict[str, set[str]] = {tag: set() for tag in self.register.loops}
        for tag, targets in self._targets.items():
            for target in targets:
                neighbours.setdefault(tag, set()).add(target)
                neighbours.setdefault(target, set()).add(tag)
        functions = {tag: index for index, tag in enumerate(self.register.functions)}
        elements = {tag: index for index, tag in enumerate(self.register.final_elements)}
        seen: set[str] = set()
        schemes = []
        for first in self.register.loops:
            if first in seen:
                continue
            together = {first}
            waiting = [first]
            while waiting:
                for tag in neighbours[waiting.pop()] - together:
                    together.add(tag)
                    waiting.append(tag)
            seen |= together
            register = self.register
            loops = [
                register.loops[tag] for tag in sorted(together & register.loops.keys(), key=self.position.__getitem__)
            ]
            # A loop that commands more levels stands further out; the order of the register decides among equals.
            loops.sort(key=lambda loop: -self.depth(loop.tag))
            schemes.append(
                Scheme(
                    tuple(loops),
                    tuple(
                        register.functions[tag]
                        for tag in sorted(together & functions.keys(), key=functions.__getitem__)
                    ),
                    tuple(
                        register.final_elements[tag]
                        for tag in sorted(together & elements.keys(), key=elements.__getitem__)
                    ),
                )
            )
        return tuple(schemes)

    def depth(self, tag: str) -> int:
        """How many levels of secondaries stand below a loop: 0 for one that moves a final element."""
        return self._depth(tag, frozenset())

    def scheme_of(self, tag: str) -> Scheme:
        """The scheme a loop belongs to.

        Raises
        ------
        KeyError
            The register has no such loop.
        """
        return self._scheme_by_loop[tag]

    @cached_property
    def _scheme_by_loop(self) -> dict[str, Scheme]:
        return {loop.tag: scheme for scheme in self.schemes for loop in scheme.loops}

    def chain(self, tag: str) -> tuple[ControlledLoop, ...]:
        """A loop and the secondaries below it, innermost first, following the first route of each."""
        found: list[ControlledLoop] = []
        next_tag: str | None = tag
        while next_tag in self.controlled and next_tag not in (loop.tag for loop in found):
            loop = self.controlled[next_tag]
            found.append(loop)
            next_tag = next((route.end.tag for route in loop.routes if isinstance(route.end, Loop)), None)
        return tuple(reversed(found))

    def primaries_of(self, tag: str) -> tuple[ControlledLoop, ...]:
        """The loops that command a loop, directly or through functions."""
        return tuple(link.primary for link in self.links_to.get(tag, ()))

    # -- the graph

    @cached_property
    def _targets(self) -> dict[str, tuple[str, ...]]:
        """What each loop and function commands directly, as written (unknown tags included)."""
        targets: dict[str, tuple[str, ...]] = {}
        for tag, loop in self.register.loops.items():
            controller = known(loop.controller)
            output = known(controller.output) if controller else None
            to = known(output.to) if output else None
            targets[tag] = (to,) if to else ()
        for tag, function in self.register.functions.items():
            to = known(function.to)
            targets[tag] = ((to,) if to else ()) + tuple(function.outputs)
        return targets

    def _routes(self, loop: Loop, controller: Controller) -> Iterator[Route]:
        output = known(controller.output)
        to = known(output.to) if output else None
        if to is not None:
            yield from self._routes_from(to, (), None)

    def _routes_from(self, tag: str, via: tuple[Function, ...], branch: Range | None) -> Iterator[Route]:
        register = self.register
        if tag in register.final_elements:
            yield Route(via, register.final_elements[tag], branch)
        elif tag in register.loops:
            yield Route(via, register.loops[tag], branch)
        elif tag in register.functions and register.functions[tag] not in via:
            function = register.functions[tag]
            to = known(function.to)
            if to is not None:
                yield from self._routes_from(to, (*via, function), branch)
            for element, span in function.outputs.items():
                yield from self._routes_from(element, (*via, function), span)

    def _depth(self, tag: str, above: frozenset[str]) -> int:
        below = [
            self._depth(target, above | {tag})
            for target in self._targets.get(tag, ())
            if target in self._targets and target not in above and target != tag
        ]
        return (1 if tag in self.register.loops else 0) + max(below, default=0) if tag in self._targets else 0
