"""What a scheme does when something fails, told in the rows of a table."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.language.facts import Moves, Way
from loopdoc.documents.naming import Names
from loopdoc.documents.wording import sentence, sentences
from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.failure import Consequence, Failure, FailureAnalysis, FailureEffect
from loopdoc.engineering.faults import fault_reading
from loopdoc.engineering.pairing import ControlledLoop, Plant, Scheme
from loopdoc.engineering.spreading import PASSIVE_MODES, ElementMove, SetpointMove, normal_mode, transmitter_of
from loopdoc.register.model import FinalElement, Function, Loop, known

ASSUMPTIONS = ENGLISH.failure_assumptions()
"""What every table of failures rests on, in English."""
NOTHING = ENGLISH.nothing_against()
"""Where no alarm and no trip stands against a hazard, in English."""

HEAD = ("Failure", "What the control does", "What the process does", "What stands against it")

_WRONG = {Failure.MEASUREMENT_HIGH: "high", Failure.MEASUREMENT_LOW: "low"}
_LOST = (Failure.OUTPUT_LOST, Failure.MOTIVE_POWER_LOST, Failure.CONTROL_POWER_LOST)
_HURTS = ("high", "low", "both")


@dataclass(frozen=True, slots=True)
class FailureRow:
    """One failure; the cells are sentences, empty where there is nothing to say."""

    failure: str
    control: str
    process: str
    against: str


def hazards(loops: Iterable[Loop], names: Names, language: Language) -> str:
    """Which directions are hazards, in one sentence; empty where none is declared."""
    found = [
        (names.bare(loop), hazard) for loop in loops if (hazard := known(loop.hazard)) in ("high", "low", "both")
    ]
    return language.hazards(found) if found else ""


class FailureStory:
    """The failures of one scheme, or of those of its loops that stand in one unit."""

    def __init__(
        self,
        plant: Plant,
        analysis: FailureAnalysis,
        scheme: Scheme,
        loops: Sequence[Loop],
        names: Names,
        language: Language = ENGLISH,
    ) -> None:
        self._plant = plant
        self._analysis = analysis
        self._scheme = scheme
        self._loops = tuple(plant.controlled[loop.tag] for loop in loops if loop.tag in plant.controlled)
        self._names = names
        self._language = language
        self._in_scheme = {loop.tag for loop in scheme.loops}

    def rows(self) -> tuple[FailureRow, ...]:
        """A row for each failure whose effect follows from the register."""
        found = [row for loop in self._loops for row in self._measurement(loop)]
        found.extend(self._inputs())
        found.extend(self._final_elements())
        return tuple(found)

    # -- measurements

    def _measurement(self, loop: ControlledLoop) -> Iterator[FailureRow]:
        sensor = transmitter_of(loop.loop)
        leads_anywhere = loop.routes or self._analysis.functions_of(loop.loop) or self._analysis.trips_on(sensor)
        for effect in self._analysis.effects(loop.tag) if sensor and leads_anywhere else ():
            fails = self._fails(sensor or "", loop.loop, effect.failure)
            if fails:
                control = sentences(*self._control(effect, loop))
                idle = normal_mode(loop) in PASSIVE_MODES
                own = [] if idle else self._told(effect.consequences, effect)
                yield FailureRow(fails, control, self._process(own, effect), self._against(own, effect))

    def _control(self, effect: FailureEffect, loop: ControlledLoop) -> Iterator[str]:
        """What the controllers do, in sentences."""
        language = self._language
        if effect.seen == "bad":
            yield self._goes(effect, loop)
            tracking = [one.loop.tag for one in effect.unfollowed if one.policy == "track"]
            if tracking:
                yield language.track_too(tracking)
        elif normal_mode(loop) in PASSIVE_MODES:
            yield language.does_nothing(loop.tag, normal_mode(loop) or "")
        elif effect.seen == "frozen":
            yield language.goes_on(loop.tag)
        elif isinstance(effect.output, Undecided):
            yield language.cannot_be_told(loop.tag, language.reason(effect.output.reason))
        else:
            yield from self._asks(effect, loop, effect.output)
        for move in effect.setpoints:
            if move.by in self._plant.register.functions and not _sign(move):
                yield language.function_undefined(move.by)
        tripped = list(dict.fromkeys(trip.interlock.tag for trip in effect.initiated))
        if tripped:
            yield language.trips_on_it(tripped)

    def _goes(self, effect: FailureEffect, loop: ControlledLoop) -> str:
        """What a controller does with a bad measurement."""
        if not effect.mode and not effect.forced_output:
            return self._language.bad_undefined(loop.tag)
        output = "" if effect.forced_output in ("", "hold") else self._language.as_written(effect.forced_output)
        return self._language.goes(loop.tag, effect.mode, output, _moved(effect.elements))

    def _asks(self, effect: FailureEffect, loop: ControlledLoop, output: int) -> Iterator[str]:
        """`TIC-2014 asks for a lower flow (down to 1.0 t/h) and FIC-2011 closes FV-2011`."""
        functions = self._plant.register.functions
        by_loops = [move for move in effect.setpoints if move.by not in functions]
        by_functions = [move for move in effect.setpoints if move.by in functions and _sign(move)]
        asked = [
            (move.by, move.loop.tag, self._names.bare(move.loop.loop), (_sign(move) or output) > 0)
            for move in by_loops
        ]
        reach = self._as_far_as(by_loops[0], _sign(by_loops[0]) or output) if by_loops else ""
        beside = {route.end.tag for move in by_functions for route in move.loop.routes}
        moved = _moved(move for move in effect.elements if move.element.tag not in beside)
        if asked or moved:
            mover = by_loops[-1].loop.tag if by_loops else loop.tag
            yield self._language.demands(asked, reach, mover, moved)
        passed: list[SetpointMove | ElementMove] = [*by_loops, *effect.elements]
        for candidate in passed:
            if candidate.instead and not _sign(candidate) and candidate.selector:
                wanted = None if asked or moved else output > 0
                yield self._language.goes_on_passing(loop.tag, wanted, candidate.selector.tag, candidate.instead)
        for move in by_functions:
            name = Names((move.loop.loop,), self._language).bare(move.loop.loop)
            yield self._language.asks_of(move.by, move.loop.tag, name, up=_sign(move) > 0)

    def _as_far_as(self, move: SetpointMove, way: int) -> str:
        """How far the first demand goes, in brackets; of a term in a sum, by how much."""
        if move.limit is None:
            return ""
        limit = self._language.value(move.limit)
        via = [function for route in self._plant.controlled[move.by].routes for function in route.via]
        if any(known(function.kind) == "sum" for function in via):
            return self._language.reach_by(limit.replace("−", ""))
        return self._language.reach_to(limit, up=way > 0) if move.alone else ""

    # -- measurements of other loops that enter a function of the scheme

    def _inputs(self) -> Iterator[FailureRow]:
        tags = {loop.tag for loop in self._loops}
        for function in self._scheme.functions:
            if known(function.to) not in tags:
                continue
            for entry in function.inputs:
                loop = self._plant.register.loops.get(entry) or self._plant.loop_of_transmitter.get(entry)
                if loop is not None and transmitter_of(loop) and loop.tag not in tags:
                    yield from self._input(function, loop)

    def _input(self, function: Function, loop: Loop) -> Iterator[FailureRow]:
        sensor = transmitter_of(loop)
        for effect in self._analysis.effects(loop.tag):
            asked = [move for move in effect.setpoints if move.by == function.tag]
            if effect.failure is Failure.MEASUREMENT_BAD and asked and effect.seen == "bad":
                told = sentence(self._language.function_undefined(function.tag))
                open_ = sentence(self._language.not_told())
                yield FailureRow(self._language.transmitter_fails(sensor or "", "fault"), told, open_, open_)
            for move in asked if effect.failure in _WRONG else ():
                if not _sign(move):
                    continue
                ends = {route.end.tag for route in move.loop.routes}
                moved = _moved(one for one in effect.elements if one.element.tag in ends)
                name = self._names.bare(move.loop.loop)
                told = self._language.asks_and_moves(function.tag, move.loop.tag, name, _sign(move) > 0, moved)
                own = [one for one in effect.consequences if one.loop.tag in self._in_scheme]
                yield FailureRow(
                    self._language.transmitter_fails(sensor or "", _WRONG[effect.failure]), sentence(told),
                    self._process(own, effect), self._against(own, effect),
                )  # fmt: skip

    # -- final elements

    def _final_elements(self) -> Iterator[FailureRow]:
        """One row for each way of settling; failures that come to the same stand together."""
        found: dict[tuple[object, ...], list[FailureEffect]] = {}
        for loop in self._loops:
            moving = any(isinstance(route.end, FinalElement) for route in loop.routes)
            if not moving or normal_mode(loop) == "out of service":
                continue
            for effect in self._analysis.effects(loop.tag):
                decided = all(isinstance(move.direction, int) for move in effect.elements)
                if effect.failure in _LOST and decided:
                    key = tuple((move.element.tag, move.direction, move.position) for move in effect.elements)
                    same = found.setdefault(key, [])
                    if not any(one.failure is effect.failure and one.at == effect.at for one in same):
                        same.append(effect)
        for effects in found.values():
            effect = effects[0]
            own = [one for one in effect.consequences if one.loop.tag in self._in_scheme]
            yield FailureRow(
                self._losses(effects),
                sentence(self._language.settles([(one.element, _sign(one), one.position) for one in effect.elements])),
                self._process(own, effect),
                self._against_each(effects),
            )

    def _against_each(self, effects: Sequence[FailureEffect]) -> str:
        """What stands against losses told in one row, and what is left of it without the control system's power."""
        found = [[one for one in effect.consequences if one.loop.tag in self._in_scheme] for effect in effects]
        told, guards = self._against(found[0], effects[0]), self._guards(found[0])
        for effect, consequences in zip(effects, found, strict=True):
            if effect.failure is Failure.CONTROL_POWER_LOST and (left := self._guards(consequences)) != guards:
                return sentences(told, self._language.without_control_power("; ".join(left)))
        return told

    def _losses(self, effects: Sequence[FailureEffect]) -> str:
        """`FV-2011 loses its signal or its air, or the control system its power`."""
        by_subject: dict[tuple[str, ...], list[FinalElement | None]] = {}
        for effect in effects:
            if effect.failure is not Failure.CONTROL_POWER_LOST:
                signal = effect.failure is Failure.OUTPUT_LOST
                by_subject.setdefault(effect.at, []).append(None if signal else effect.elements[0].element)
        power = any(effect.failure is Failure.CONTROL_POWER_LOST for effect in effects)
        return self._language.losses(list(by_subject.items()), power)

    # -- the process, and what stands against it

    def _told(self, consequences: Sequence[Consequence], effect: FailureEffect) -> list[Consequence]:
        """The loop itself and those above it; of those below, whose demand has been told, what is hazardous."""
        above, waiting = {effect.loop.tag}, [effect.loop.tag]
        while waiting:
            for primary in self._plant.primaries_of(waiting.pop()):
                if primary.tag not in above:
                    above.add(primary.tag)
                    waiting.append(primary.tag)
        return [
            one
            for one in consequences
            if one.loop.tag in self._in_scheme and (one.loop.tag in above or one.hazardous)
        ]

    def _process(self, consequences: Sequence[Consequence], effect: FailureEffect) -> str:
        language = self._language
        moved = [one for one in consequences if isinstance(one.direction, int) and one.direction]
        unknown = [one for one in consequences if isinstance(one.direction, Undecided)]
        told = []
        hurt = [one for one in moved if one.hazardous]
        if hurt:
            told.append(language.towards_the_hazard(self._ways(hurt)))
        # That a flow falls when its valve closes need not be told beside what matters.
        others = [one for one in moved if not one.hazardous]
        beside = [one for one in others if not hurt or one.loop is not effect.loop]
        told.append(language.process_ways(self._ways(beside)))
        if not moved:
            told.append(self._still(consequences, effect))
        if unknown:
            names = [self._names.bare(one.loop) for one in unknown]
            load = any(str(one.direction).find("depends on the load") >= 0 for one in unknown)
            told.append(language.way_unknown(names, by_load=load))
        for one in moved:
            rivals = [tag for tag in one.opposed_by if tag != one.loop.tag]
            if rivals:
                told.append(language.takes_over(rivals))
            if one.loop.tag in one.opposed_by:
                told.append(language.makes_up(one.loop.tag))
        return sentences(*dict.fromkeys(told))

    def _still(self, consequences: Sequence[Consequence], effect: FailureEffect) -> str:
        still = [self._names.bare(one.loop) for one in consequences if one.direction == 0]
        passed_over = any(move.instead for move in effect.setpoints) or any(move.instead for move in effect.elements)
        if not still:
            return ""
        return self._language.unlimited(still) if passed_over else self._language.left(still)

    def _ways(self, found: Sequence[Consequence]) -> list[Way]:
        return [Way(self._names.bare(one.loop), one.direction == 1) for one in found]

    def _against(self, consequences: Sequence[Consequence], effect: FailureEffect) -> str:
        told = self._guards(consequences)
        if told:
            return sentence("; ".join(told))
        if not any(one.hazardous or (one.hazardous is None and known(one.loop.hazard) in _HURTS)
                   for one in consequences):  # fmt: skip
            return sentence(self._language.no_hazard()) if consequences else ""
        return sentences(self._language.nothing_against(), self._moved_back(effect))

    def _guards(self, consequences: Sequence[Consequence]) -> list[str]:
        """The alarms and trips that stand against it."""
        language = self._language
        alarms: dict[str, list[tuple[str, str]]] = {}
        for found in (found for one in consequences for found in one.alarms):
            limit = known(found.alarm.limit)
            alarms.setdefault(found.loop.tag, []).append((found.alarm.kind, language.value(limit) if limit else ""))
        told = [language.alarms_against(tag, kinds) for tag, kinds in alarms.items()]
        tripping: dict[str, str] = {}
        for trip in (trip for one in consequences for trip in one.trips):
            limit, side = known(trip.initiator.limit), known(trip.initiator.direction)
            known_limit = language.value(limit) if limit else ""
            tripping.setdefault(
                trip.interlock.tag, language.trip_against(trip.interlock.tag, side or "", known_limit)
            )
        told.extend(tripping.values())
        return told

    def _moved_back(self, effect: FailureEffect) -> str:
        """Interlocks on something else that can still move a final element back."""
        told = []
        for interlock in effect.opposing:
            back = tuple(
                (move.element, -_sign(move))
                for move in effect.elements
                if _sign(move) and move.element.tag in interlock.actions
            )
            told.append(self._language.moved_back(interlock.tag, back))
        return self._language.listed(told)

    def _fails(self, sensor: str, loop: Loop, failure: Failure) -> str:
        """What the transmitter does; empty where the register does not say, or where another row says it."""
        language, fault = self._language, fault_reading(loop.measurement)
        own = "" if isinstance(fault, Undecided) or fault.noticed else fault.reads
        if failure is Failure.MEASUREMENT_BAD:
            if isinstance(fault, Undecided):
                return ""
            if fault.noticed:
                return language.transmitter_fails(sensor, "fault")
            return language.transmitter_fails(sensor, "holds") if own == "holds" else ""
        wrong = _WRONG.get(failure, "")
        return language.transmitter_fails(sensor, wrong, as_when_it_fails=own == f"reads {wrong}") if wrong else ""


def _moved(found: Iterable[ElementMove]) -> Moves:
    """Final elements that move in a known direction."""
    return tuple((move.element, _sign(move)) for move in found if _sign(move))


def _sign(move: ElementMove | SetpointMove) -> int:
    """The direction of a movement, 0 where it is not known."""
    return move.direction if isinstance(move.direction, int) else 0
