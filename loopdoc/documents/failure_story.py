"""What a scheme does when something fails, told in the rows of a table."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

from loopdoc.documents.naming import Names, moves, moves_by_itself, power_of
from loopdoc.documents.wording import NO_BREAK, as_written, listed, sentence, sentences, value
from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.failure import Consequence, Failure, FailureAnalysis, FailureEffect
from loopdoc.engineering.faults import fault_reading
from loopdoc.engineering.pairing import ControlledLoop, Plant, Scheme
from loopdoc.engineering.spreading import PASSIVE_MODES, ElementMove, SetpointMove, normal_mode, transmitter_of
from loopdoc.register.model import FinalElement, Function, Loop, known

ASSUMPTIONS = (
    "They are judged one at a time, by the signs and modes in the register. A transmitter signals its own fault "
    "by a current of at most 3.6 mA or at least 21 mA (NAMUR NE 43); its controller then does what is set for a bad "
    "measurement. A reading that is merely wrong is taken as good, at the worst at the end of its range. One that "
    "stands still is taken as good too, and only another measurement can tell. With the power of the control system "
    "go its alarms and its process interlocks; the safety layer stands. Only what another sensor drives counts as "
    "standing against a failure."
)
"""What every table of failures rests on, told once in a document."""

HEAD = ("Failure", "What the control does", "What the process does", "What stands against it")
NOTHING = "Nothing independent in the register"

_WRONG = {Failure.MEASUREMENT_HIGH: "reads too high", Failure.MEASUREMENT_LOW: "reads too low"}
_LOST = (Failure.OUTPUT_LOST, Failure.MOTIVE_POWER_LOST, Failure.CONTROL_POWER_LOST)
_HURTS = ("high", "low", "both")


@dataclass(frozen=True, slots=True)
class FailureRow:
    """One failure; the cells are sentences, empty where there is nothing to say."""

    failure: str
    control: str
    process: str
    against: str


def hazards(loops: Iterable[Loop], names: Names) -> str:
    """Which directions are hazards, in one sentence; empty where none is declared."""
    found = []
    for loop in loops:
        hazard = known(loop.hazard)
        if hazard in ("high", "low"):
            found.append(f"a {hazard} {names.bare(loop)}")
        elif hazard == "both":
            found.append(f"a {names.bare(loop)} too high or too low")
    if not found:
        return ""
    return sentence(f"The {'hazard is' if len(found) == 1 else 'hazards are'} {listed(found)}")


class FailureStory:
    """The failures of one scheme, or of those of its loops that stand in one unit."""

    def __init__(
        self, plant: Plant, analysis: FailureAnalysis, scheme: Scheme, loops: Sequence[Loop], names: Names
    ) -> None:
        self._plant = plant
        self._analysis = analysis
        self._scheme = scheme
        self._loops = tuple(plant.controlled[loop.tag] for loop in loops if loop.tag in plant.controlled)
        self._names = names
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
            fails = _fails(loop.loop, effect.failure)
            if fails:
                control = sentences(*self._control(effect, loop))
                idle = normal_mode(loop) in PASSIVE_MODES
                own = [] if idle else self._told(effect.consequences, effect)
                yield FailureRow(f"{sensor} {fails}", control, self._process(own, effect), self._against(own, effect))

    def _control(self, effect: FailureEffect, loop: ControlledLoop) -> Iterator[str]:
        """What the controllers do, in sentences."""
        if effect.seen == "bad":
            yield _goes(effect, loop)
            tracking = [one.loop.tag for one in effect.unfollowed if one.policy == "track"]
            if tracking:
                yield f"{listed(tracking)} {'tracks' if len(tracking) == 1 else 'track'}"
        elif normal_mode(loop) in PASSIVE_MODES:
            yield f"{loop.tag} is {_idle(loop)} and does nothing"
        elif effect.seen == "frozen":
            yield f"{loop.tag} goes on by the old value"
        elif isinstance(effect.output, Undecided):
            yield f"What {loop.tag} does cannot be told: {effect.output.reason}"
        else:
            yield from self._asks(effect, loop, effect.output)
        for move in effect.setpoints:
            if move.by in self._plant.register.functions and not _sign(move):
                yield f"What {move.by} then does is not in the register"
        tripped = list(dict.fromkeys(trip.interlock.tag for trip in effect.initiated))
        if tripped:
            yield f"{listed(tripped)} {'trips' if len(tripped) == 1 else 'trip'} on it"

    def _asks(self, effect: FailureEffect, loop: ControlledLoop, output: int) -> Iterator[str]:
        """`TIC-2014 asks for a lower flow (down to 1.0 t/h) and FIC-2011 closes FV-2011`."""
        functions = self._plant.register.functions
        by_loops = [move for move in effect.setpoints if move.by not in functions]
        by_functions = [move for move in effect.setpoints if move.by in functions and _sign(move)]
        told: list[str] = []
        for move in by_loops:
            way = _sign(move) or output
            asked = f"for a {'higher' if way > 0 else 'lower'} {self._names.bare(move.loop.loop)}"
            told.append(f"{move.by} {asked}" if told else f"{move.by} asks {asked}{self._as_far_as(move, way)}")
        beside = {route.end.tag for move in by_functions for route in move.loop.routes}
        moved = [move for move in effect.elements if _sign(move) and move.element.tag not in beside]
        if moved:
            mover = by_loops[-1].loop.tag if by_loops else loop.tag
            told.append(f"{mover} {listed(moves(move.element, _sign(move)) for move in moved)}")
        if told:
            yield listed(told)
        passed: list[SetpointMove | ElementMove] = [*by_loops, *effect.elements]
        for candidate in passed:
            if candidate.instead and not _sign(candidate) and candidate.selector:
                asks = "" if told else f"{loop.tag} asks for {'more' if output > 0 else 'less'}. "
                yield f"{asks}{candidate.selector.tag} goes on passing the demand of {listed(candidate.instead, 'or')}"
        for move in by_functions:
            wanted = "higher" if _sign(move) > 0 else "lower"
            yield f"{move.by} asks {move.loop.tag} for a {wanted} {Names((move.loop.loop,)).bare(move.loop.loop)}"

    def _as_far_as(self, move: SetpointMove, way: int) -> str:
        """How far the first demand goes, in brackets; of a term in a sum, by how much."""
        if move.limit is None:
            return ""
        via = [function for route in self._plant.controlled[move.by].routes for function in route.via]
        if any(known(function.kind) == "sum" for function in via):
            return f" (by up to {value(move.limit).lstrip('−')})"
        return f" ({'up' if way > 0 else 'down'} to {value(move.limit)})"

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
                told = sentence(f"What {function.tag} then does is not in the register")
                yield FailureRow(f"{sensor} signals a fault", told, "", "")
            for move in asked if effect.failure in _WRONG else ():
                if not _sign(move):
                    continue
                way = "higher" if _sign(move) > 0 else "lower"
                ends = {route.end.tag for route in move.loop.routes}
                moved = [one for one in effect.elements if one.element.tag in ends and _sign(one)]
                told = f"{function.tag} asks for a {way} {self._names.bare(move.loop.loop)}"
                if moved:
                    told += f" and {move.loop.tag} {listed(moves(one.element, _sign(one)) for one in moved)}"
                own = [one for one in effect.consequences if one.loop.tag in self._in_scheme]
                yield FailureRow(
                    f"{sensor} {_WRONG[effect.failure]}", sentence(told), self._process(own, effect),
                    self._against(own, effect),
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
                _losses(effects),
                sentence(listed(_settles(move) for move in effect.elements)),
                self._process(own, effect),
                self._against(own, effect),
            )

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
        moved = [one for one in consequences if isinstance(one.direction, int) and one.direction]
        unknown = [one for one in consequences if isinstance(one.direction, Undecided)]
        told = []
        hurt = [one for one in moved if one.hazardous]
        if hurt:
            each = {1: "", 2: "both "}.get(len(hurt), "all ")
            told.append(f"{self._ways(hurt)}, {each}towards the hazard")
        # That a flow falls when its valve closes need not be told beside what matters.
        others = [one for one in moved if not one.hazardous]
        told.append(self._ways([one for one in others if not hurt or one.loop is not effect.loop]))
        if not moved:
            told.append(self._still(consequences, effect))
        if unknown:
            names = [self._names.the(one.loop) for one in unknown]
            load = any(str(one.direction).find("depends on the load") >= 0 for one in unknown)
            goes = f"{listed(names)} {'goes' if len(names) == 1 else 'go'}"
            told.append(f"which way {goes} depends on the load" if load else f"which way {goes} cannot be told")
        for one in moved:
            rivals = [tag for tag in one.opposed_by if tag != one.loop.tag]
            if rivals:
                told.append(f"{listed(rivals, 'or')} takes over at its own setpoint")
            if one.loop.tag in one.opposed_by:
                told.append(f"{one.loop.tag} makes up for it as far as its output limits allow")
        return sentences(*dict.fromkeys(told))

    def _still(self, consequences: Sequence[Consequence], effect: FailureEffect) -> str:
        still = [self._names.the(one.loop) for one in consequences if one.direction == 0]
        passed_over = any(move.instead for move in effect.setpoints) or any(move.instead for move in effect.elements)
        if still and passed_over:
            return f"nothing moves, but {listed(still)} {'is' if len(still) == 1 else 'are'} no longer limited"
        if not still:
            return ""
        return f"{listed(still)} {'is left to itself' if len(still) == 1 else 'are left to themselves'}"

    def _ways(self, found: Sequence[Consequence]) -> str:
        """`the level and the flow fall`, `the temperature falls and the methanol content rises`."""
        by_way: dict[bool, list[str]] = {}
        for one in found:
            by_way.setdefault(one.direction == 1, []).append(self._names.the(one.loop))
        return listed(
            f"{listed(names)} {'rise' if rises else 'fall'}{'s' if len(names) == 1 else ''}"
            for rises, names in by_way.items()
        )

    def _against(self, consequences: Sequence[Consequence], effect: FailureEffect) -> str:
        alarms: dict[str, list[str]] = {}
        for found in (found for one in consequences for found in one.alarms):
            limit = known(found.alarm.limit)
            kind = found.alarm.kind.replace("_", "-")
            alarms.setdefault(found.loop.tag, []).append(f"{kind}{NO_BREAK}{value(limit)}" if limit else kind)
        told = [f"{tag} alarm{'' if len(kinds) == 1 else 's'} ({', '.join(kinds)})" for tag, kinds in alarms.items()]
        tripping: dict[str, str] = {}
        for trip in (trip for one in consequences for trip in one.trips):
            limit, side = known(trip.initiator.limit), known(trip.initiator.direction)
            tripping.setdefault(trip.interlock.tag, f" ({side} {value(limit)})" if limit and side else "")
        told.extend(f"{tag}{limit}" for tag, limit in tripping.items())
        if told:
            return sentence("; ".join(told))
        if not any(one.hazardous or (one.direction == 0 and known(one.loop.hazard) in _HURTS) for one in consequences):
            return ""
        return sentences(NOTHING, _moved_back(effect))


def _moved_back(effect: FailureEffect) -> str:
    """Interlocks on something else that can still move a final element back."""
    told = []
    for interlock in effect.opposing:
        back = [move for move in effect.elements if _sign(move) and move.element.tag in interlock.actions]
        told.append(f"{interlock.tag} {listed(moves(move.element, -_sign(move)) for move in back)} at its own limit")
    return listed(told)


def _sign(move: ElementMove | SetpointMove) -> int:
    """The direction of a movement, 0 where it is not known."""
    return move.direction if isinstance(move.direction, int) else 0


def _fails(loop: Loop, failure: Failure) -> str:
    """What the transmitter does; empty where the register does not say, or where another row says it."""
    fault = fault_reading(loop.measurement)
    own = "" if isinstance(fault, Undecided) or fault.noticed else fault.reads
    if failure is Failure.MEASUREMENT_BAD:
        if isinstance(fault, Undecided):
            return ""
        if fault.noticed:
            return "signals a fault"
        return "fails and holds its last value" if own == "holds" else ""
    wrong = _WRONG.get(failure, "")
    return f"{wrong}, as when it fails" if wrong and own == wrong.replace("too ", "") else wrong


def _idle(loop: ControlledLoop) -> str:
    mode = normal_mode(loop)
    return "kept in manual" if mode == "manual" else str(mode)


def _goes(effect: FailureEffect, loop: ControlledLoop) -> str:
    """What a controller does with a bad measurement."""
    if not effect.mode and not effect.forced_output:
        return f"What {loop.tag} does is not in the register"
    to = f"{loop.tag} goes to {effect.mode}" if effect.mode else f"{loop.tag} stays in its mode"
    if effect.forced_output in ("", "hold"):
        return f"{to} and holds its output"
    ends = listed(moves_by_itself(move.element, _sign(move)) for move in effect.elements if _sign(move))
    return f"{to} with its output at {as_written(effect.forced_output)}{f', and {ends}' if ends else ''}"


def _losses(effects: Sequence[FailureEffect]) -> str:
    """`FV-2011 loses its signal or its air, or the control system its power`."""
    by_subject: dict[tuple[str, ...], list[str]] = {}
    for effect in effects:
        if effect.failure is not Failure.CONTROL_POWER_LOST:
            signal = effect.failure is Failure.OUTPUT_LOST
            what = "signal" if signal else power_of(effect.elements[0].element)
            by_subject.setdefault(effect.at, []).append(f"{'its' if len(effect.at) == 1 else 'their'} {what}")
    told = [f"{listed(at)} lose{'s' if len(at) == 1 else ''} {listed(what, 'or')}" for at, what in by_subject.items()]
    if any(effect.failure is Failure.CONTROL_POWER_LOST for effect in effects):
        same = len(by_subject) == 1 and len(next(iter(by_subject))) == 1
        told.append("the control system its power" if same else "the control system loses its power")
    return ", or ".join(told) if any(" or " in part for part in told) else listed(told, "or")


def _settles(move: ElementMove) -> str:
    """Where a final element comes to rest."""
    if move.direction == 0:
        return f"{move.element.tag} stays where it is"
    if move.position == "stopped":
        return f"{move.element.tag} stops"
    if not move.position:
        return f"{move.element.tag} stops or falls to its lowest speed, as it is set"
    return moves_by_itself(move.element, _sign(move))
