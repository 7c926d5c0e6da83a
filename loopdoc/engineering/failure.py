"""Failure effects: what a loop does, and where the process goes, when one thing around it fails.

By sign algebra and mode policy alone, without a simulation: a direction is what follows from the signs that
the register gives, and where one is lacking the effect is `Undecided` with the reason. Only one thing fails at
a time.

Assumptions
-----------
- A transmitter that notices its own fault drives a 4-20 mA signal to 3.6 mA or less, or to 21 mA or more
  (NAMUR NE 43; a 1-5 V signal in proportion). The control system takes such a reading as bad and the controller
  does what `on_bad_measurement` says. A digital signal carries the same news in its status. The low end of
  0-20 mA and a pulse that stays away cannot be told from a true reading of zero, nor a held value from a
  steady process: these the controller takes as good.
- A wrong reading within the limits of measurement (3.8 to 20.5 mA by NE 43: drift, a blocked impulse line, a
  fouled element) is taken as good whatever `on_fault` says. It is supposed to stand at the far end of the
  range, so that no setpoint from above can satisfy it.
- A lost analogue output falls to the low end of its signal, and the final element with it. With the power of
  the control system go its alarms and the interlocks of the process layer; the safety layer stands.
- Motive power is lost to all final elements of one sort at a time: air to the valves, electric power to drives,
  motors and heaters.

Sources: NAMUR NE 43 (2003, 2021), limits as in `loopdoc.engineering.scaling`; the algebra is elementary.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from enum import StrEnum
from functools import cached_property

from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.faults import ELECTRIC, LESS, MORE, fault_reading, without_motive_power, without_signal
from loopdoc.engineering.pairing import ControlledLoop, LoopAlarm, Plant, Trip, measured_quantity
from loopdoc.engineering.spreading import (
    PASSIVE_MODES,
    Direction,
    ElementMove,
    Moves,
    SetpointMove,
    command,
    feedback,
    final_elements_of,
    measured_directions,
    normal_mode,
    through_function,
    times,
    transmitter_of,
    upward,
    ways_to,
)
from loopdoc.register.model import Alarm, Function, Interlock, Loop, known
from loopdoc.register.quantity import Quantity

_VOTING = re.compile("([1-9])oo[1-9]")


class Failure(StrEnum):
    """What fails."""

    MEASUREMENT_BAD = "measurement bad"
    """The transmitter fails in the way that the register states under `on_fault`."""
    MEASUREMENT_HIGH = "measurement high"
    """The reading is too high and taken as good."""
    MEASUREMENT_LOW = "measurement low"
    """The reading is too low and taken as good."""
    MEASUREMENT_FROZEN = "measurement frozen"
    """The reading stands still and is taken as good."""
    SECONDARY_LOST = "secondary measurement lost"
    """The secondary's transmitter fails in the way that the register states."""
    OUTPUT_LOST = "output signal lost"
    MOTIVE_POWER_LOST = "motive power lost"
    CONTROL_POWER_LOST = "control system power lost"


@dataclass(frozen=True, slots=True)
class Consequence:
    """What becomes of the true value that a loop measures."""

    loop: Loop
    direction: Direction
    hazardous: bool | None
    """Whether that is the direction that hurts; None where the direction or the hazard is not known."""
    alarms: tuple[LoopAlarm, ...]
    """Alarms on it, by a sensor that has not failed, in the direction in which it goes, and on the way to what its
    primary can ask of it; and those on other quantities that are said to warn of it. Where it is left to itself: in the
    directions that hurt."""
    trips: tuple[Trip, ...]
    """The same for initiators of interlocks, of a safety system's own transmitters too, where the interlock moves
    a final element that has not failed."""
    opposed_by: tuple[str, ...]
    """Loops that go on working against it: the other candidates of a selector, the other terms of a sum."""


@dataclass(frozen=True, slots=True)
class Unfollowed:
    """A loop whose output is no longer followed, and what it does meanwhile."""

    loop: ControlledLoop
    policy: str
    """track, hold or nothing; empty where the register does not say."""


@dataclass(frozen=True, slots=True)
class FailureEffect:
    """The effect of one failure, seen from one loop."""

    failure: Failure
    loop: Loop
    at: tuple[str, ...]
    """Tags of the transmitter or final elements that fail; empty for the control system as a whole."""
    seen: str
    """What the controller whose measurement fails sees: bad, high, low or frozen; empty where none fails."""
    mode: str
    """Mode into which that controller goes; empty where it stays in its own."""
    forced_output: str
    """Output into which it goes with that, as the register writes it; empty where none is given."""
    output: Direction
    """Which way its output goes."""
    setpoints: tuple[SetpointMove, ...]
    elements: tuple[ElementMove, ...]
    consequences: tuple[Consequence, ...]
    """The loop's own measurement first, then the others that the failure reaches, innermost first."""
    unfollowed: tuple[Unfollowed, ...]
    initiated: tuple[Trip, ...]
    """Interlocks that the failed reading itself sets off, alone."""
    opposing: tuple[Interlock, ...]
    """Interlocks with other sensors that would move a final element back, should their limits be reached."""


@dataclass(frozen=True, slots=True)
class _Alike:
    """What measures the same thing as a loop, with a transmitter of its own."""

    loops: tuple[Loop, ...]
    sensors: tuple[str, ...]
    """The transmitters of these loops and of instruments that belong to no loop."""


class FailureAnalysis:
    """The failure effects of a plant; what the questions share is resolved once."""

    def __init__(self, plant: Plant) -> None:
        self.plant = plant
        self._alike_by_tag: dict[str, _Alike] = {}

    def effects(self, tag: str) -> tuple[FailureEffect, ...]:
        """The effect of each failure that concerns a loop, in the order of `Failure`.

        An indicator has effects only where its reading enters a function or an interlock.

        Raises
        ------
        KeyError
            The register has no such loop.
        """
        return tuple(_Effects(self, self.plant.register.loops[tag]).all())

    def wrong_readings(self, tag: str) -> tuple[FailureEffect, ...]:
        """The effects of a loop's own transmitter alone: bad, too high, too low.

        Raises
        ------
        KeyError
            The register has no such loop.
        """
        return tuple(_Effects(self, self.plant.register.loops[tag]).wrong_readings())

    def same_quantity(self, loop: Loop) -> tuple[Loop, ...]:
        """Other loops that measure the same thing with a transmitter of their own.

        Told by the unit, the variable and the service up to its first comma: `Drum level` and `Drum level,
        second transmitter`. Where a register does not write it so, nothing is assumed.
        """
        return self._alike(loop).loops

    def sensors_beside(self, loop: Loop) -> tuple[str, ...]:
        """Transmitters beside a loop's own that measure the same thing, those of no loop (a safety system's) too."""
        return self._alike(loop).sensors

    def _alike(self, loop: Loop) -> _Alike:
        """Other loops and instruments that measure the same thing; found once a loop."""
        if loop.tag not in self._alike_by_tag:
            own, quantity = transmitter_of(loop), measured_quantity(loop)
            loops: list[Loop] = []
            sensors: dict[str, None] = {}
            for other in self.plant.measuring.get(quantity, ()) if quantity else ():
                tag = transmitter_of(other) if isinstance(other, Loop) else other.tag
                if other is not loop and tag is not None and tag != own:
                    sensors[tag] = None
                    if isinstance(other, Loop):
                        loops.append(other)
            self._alike_by_tag[loop.tag] = _Alike(tuple(loops), tuple(sensors))
        return self._alike_by_tag[loop.tag]

    def trips_on(self, transmitter: str | None) -> tuple[Trip, ...]:
        """The initiators that watch a transmitter."""
        return self._trips.get(transmitter or "", ())

    def functions_of(self, loop: Loop) -> tuple[tuple[Function, str], ...]:
        """The functions that a loop's measurement enters, each with the tag by which it does."""
        tags = (loop.tag, transmitter_of(loop))
        return tuple((function, tag) for tag in tags if tag for function in self._readers.get(tag, ()))

    @cached_property
    def _trips(self) -> dict[str, tuple[Trip, ...]]:
        found: dict[str, tuple[Trip, ...]] = {}
        for trip in self.plant.trips:
            transmitter = known(trip.measurement.transmitter) if trip.measurement else None
            if transmitter:
                found[transmitter] = (*found.get(transmitter, ()), trip)
        return found

    @cached_property
    def _readers(self) -> dict[str, tuple[Function, ...]]:
        found: dict[str, tuple[Function, ...]] = {}
        for function in self.plant.register.functions.values():
            for tag in function.inputs:
                found[tag] = (*found.get(tag, ()), function)
        return found

    @cached_property
    def interlocks_on(self) -> dict[str, tuple[Interlock, ...]]:
        """The interlocks that act on each tag."""
        found: dict[str, tuple[Interlock, ...]] = {}
        for interlock in self.plant.register.interlocks.values():
            for tag in interlock.actions:
                found[tag] = (*found.get(tag, ()), interlock)
        return found


class _Effects:
    """The effects of one loop."""

    def __init__(self, analysis: FailureAnalysis, loop: Loop) -> None:
        self._analysis = analysis
        self._plant = analysis.plant
        self._loop = loop

    def all(self) -> Iterator[FailureEffect]:
        loop = self._loop
        controlled = loop.tag in self._plant.controlled
        if controlled or self._analysis.functions_of(loop) or self._analysis.trips_on(transmitter_of(loop)):
            yield from self.wrong_readings()
            yield self._frozen(loop, Failure.MEASUREMENT_FROZEN)
        if controlled:
            secondaries = {route.end.tag: route.end for route in self._plant.controlled[loop.tag].routes}
            for end in secondaries.values():
                if isinstance(end, Loop):
                    yield self._failed(end, Failure.SECONDARY_LOST)
            yield from self._final_elements()

    # -- the measurement

    def wrong_readings(self) -> Iterator[FailureEffect]:
        loop = self._loop
        yield self._failed(loop, Failure.MEASUREMENT_BAD)
        yield self._wrong(loop, 1, Failure.MEASUREMENT_HIGH)
        yield self._wrong(loop, -1, Failure.MEASUREMENT_LOW)

    def _failed(self, loop: Loop, failure: Failure) -> FailureEffect:
        """The fault that the transmitter itself makes; one that is not noticed is a wrong or a frozen reading."""
        fault = fault_reading(loop.measurement)
        if isinstance(fault, Undecided):
            return self._still(loop, failure, "bad", fault)
        if fault.noticed:
            return self._bad(loop, failure)
        if fault.reads == "holds":
            return self._frozen(loop, failure)
        return self._wrong(loop, 1 if fault.reads == "reads high" else -1, failure)

    def _bad(self, loop: Loop, failure: Failure) -> FailureEffect:
        controlled = self._plant.controlled.get(loop.tag)
        moves = Moves()
        mode, written = "", ""
        output: Direction = 0
        if controlled:
            policy = known(controlled.controller.on_bad_measurement)
            mode = (known(policy.mode) or "") if policy else ""
            written = (known(policy.output) or "") if policy else ""
            output = _forced(controlled, mode, written)
            command(self._plant, controlled, output, moves)
        self._unsaid(loop, moves)
        return self._effect(loop, failure, "bad", output, moves, mode=mode, forced_output=written)

    def _unsaid(self, loop: Loop, moves: Moves) -> None:
        """A bad reading enters a function: what that makes of it is in no register."""
        for function, entry in self._analysis.functions_of(loop):
            secondary = self._plant.controlled.get(known(function.to) or "")
            if secondary:
                unsaid = Undecided(f"what {function.tag} does when {entry} is bad is not given")
                moves.setpoints.append(SetpointMove(secondary, function.tag, unsaid, None, False, None, ()))

    def _wrong(self, loop: Loop, reading: int, failure: Failure) -> FailureEffect:
        """A reading at the far end of its range, taken as good."""
        moves = Moves()
        controlled = self._plant.controlled.get(loop.tag)
        output: Direction = 0
        if controlled and normal_mode(controlled) not in PASSIVE_MODES:
            output = times(reading, feedback(controlled))
            command(self._plant, controlled, output, moves)
        for function, entry in self._analysis.functions_of(loop):
            through_function(self._plant, function, entry, reading, moves)
        return self._effect(loop, failure, "high" if reading > 0 else "low", output, moves)

    def _frozen(self, loop: Loop, failure: Failure) -> FailureEffect:
        controlled = self._plant.controlled.get(loop.tag)
        if controlled is None or normal_mode(controlled) in PASSIVE_MODES:
            return self._still(loop, failure, "frozen", 0)
        return self._still(loop, failure, "frozen", Undecided("the output follows whatever error was left"))

    def _still(self, loop: Loop, failure: Failure, seen: str, output: Direction) -> FailureEffect:
        """Nothing follows for the final element; the measurement is left to itself."""
        return self._effect(loop, failure, seen, output, Moves())

    # -- the final elements, the power

    def _final_elements(self) -> Iterator[FailureEffect]:
        ends = final_elements_of(self._plant, self._loop.tag)
        unpowered = tuple(ElementMove(element, *without_signal(element)) for element in ends)
        for move in unpowered:
            yield self._elements_lost(Failure.OUTPUT_LOST, (move,), (move.element.tag,))
        for electric in (False, True):
            sort = tuple(
                ElementMove(element, *without_motive_power(element))
                for element in ends
                if (known(element.kind) in ELECTRIC) == electric
            )
            if sort:
                tags = tuple(move.element.tag for move in sort)
                yield self._elements_lost(Failure.MOTIVE_POWER_LOST, sort, tags)
        if ends:
            yield self._elements_lost(Failure.CONTROL_POWER_LOST, unpowered, ())

    def _elements_lost(self, failure: Failure, moved: tuple[ElementMove, ...], at: tuple[str, ...]) -> FailureEffect:
        moves = Moves(elements=list(moved))
        own = self._plant.controlled[self._loop.tag]
        for move in moved:
            if move.direction != 0:
                moves.ways.extend(ways_to(self._plant, own, move.element.tag, move.direction))
        return self._effect(self._loop, failure, "", 0, moves, at=at)

    # -- what it does to the process

    def _effect(
        self,
        failed: Loop,
        failure: Failure,
        seen: str,
        output: Direction,
        moves: Moves,
        *,
        mode: str = "",
        forced_output: str = "",
        at: tuple[str, ...] | None = None,
    ) -> FailureEffect:
        """Put an effect together; ``failed`` is the loop whose measurement fails, or our own."""
        sensor = transmitter_of(failed)
        sensors = {sensor} if seen and sensor else set()
        alarms_stand = failure is not Failure.CONTROL_POWER_LOST
        lost = set() if seen else {move.element.tag for move in moves.elements}
        unfollowed = self._plant.primaries_of(failed.tag) if seen == "bad" else ()
        reading = {"high": "above", "low": "below"}.get(seen, "")
        return FailureEffect(
            failure=failure,
            loop=self._loop,
            at=((sensor,) if sensor else ()) if at is None else at,
            seen=seen,
            mode=mode,
            forced_output=forced_output,
            output=output,
            setpoints=tuple(moves.setpoints),
            elements=tuple(moves.elements),
            consequences=tuple(
                self._consequence(loop, direction, sensors, lost, moves, alarms_stand)
                for loop, direction in self._directions(failed, moves)
            ),
            unfollowed=tuple(Unfollowed(one, known(one.controller.when_not_followed) or "") for one in unfollowed),
            initiated=tuple(
                trip
                for trip in self._analysis.trips_on(sensor if reading else None)
                if known(trip.initiator.direction) == reading and _trips_alone(trip) and _within_reach(trip)
            ),
            opposing=self._opposing(moves, sensors) if seen else (),
        )

    def _directions(self, failed: Loop, moves: Moves) -> list[tuple[Loop, Direction]]:
        """Where each measurement goes that the movement reaches; the loop's own first."""
        found = measured_directions(self._plant, moves)
        if not found and failed.tag in self._plant.controlled:
            # Nothing moves: the loop, and what hangs on it, is left to itself.
            unknown = [move.direction for move in moves.elements if isinstance(move.direction, Undecided)]
            found = upward(self._plant, {failed.tag: unknown[0] if unknown else 0})
        loops = self._plant.register.loops
        ordered = sorted(found, key=lambda tag: tag != self._loop.tag)
        return [(loops[tag], found[tag]) for tag in ordered]

    def _consequence(
        self, loop: Loop, direction: Direction, failed: set[str], lost: set[str], moves: Moves, alarms_stand: bool
    ) -> Consequence:
        hurts = {"high": (1,), "low": (-1,), "both": (1, -1), "none": ()}.get(known(loop.hazard) or "")
        moved = direction if isinstance(direction, int) and direction else None
        hazardous: bool | None = None
        if hurts == ():
            hazardous = False
        elif hurts is not None and moved is not None:
            hazardous = moved in hurts
        watched = (moved,) if moved is not None else hurts or ()
        opposed_by = moves.opposed.get(loop.tag, ())
        if not watched:
            return Consequence(loop, direction, hazardous, (), (), opposed_by)
        watchers = [
            one
            for one in (loop, *self._analysis.same_quantity(loop))
            if (transmitter := transmitter_of(one)) is not None and transmitter not in failed
        ]
        # A secondary follows no further than its primary may ask.
        asked = {move.loop.tag: move.limit for move in moves.setpoints if move.alone and not move.instead}
        own = transmitter_of(loop)
        sensors = [tag for tag in (own, *self._analysis.sensors_beside(loop)) if tag and tag not in failed]
        alarms = tuple(
            LoopAlarm(watcher, watcher.alarms[kind])
            for sign in watched
            for watcher in watchers
            for kind in (("high", "high_high") if sign > 0 else ("low", "low_low"))
            if kind in watcher.alarms and _comes(watcher.alarms[kind], asked.get(loop.tag), sign)
        ) + tuple(
            entry
            for sign in watched
            for entry in self._plant.warning_of.get((loop.tag, "high" if sign > 0 else "low"), ())
            if transmitter_of(entry.loop) is not None and transmitter_of(entry.loop) not in failed
        )
        trips = tuple(
            trip
            for sign in watched
            for trip in self._voting(sensors, "above" if sign > 0 else "below")
            if (alarms_stand or known(trip.interlock.layer) == "safety") and self._moves_another(trip.interlock, lost)
        )
        return Consequence(loop, direction, hazardous, alarms if alarms_stand else (), trips, opposed_by)

    def _moves_another(self, interlock: Interlock, lost: set[str]) -> bool:
        """Whether an interlock moves a final element beside those that are lost; taken so where it says nothing.

        A controller that it forces moves nothing but the controller's own final elements.
        """
        if not lost or not interlock.actions:
            return True
        moved: set[str] = set()
        for tag in interlock.actions:
            if tag in self._plant.register.loops:
                moved.update(element.tag for element in final_elements_of(self._plant, tag))
            else:
                moved.add(tag)
        return not moved <= lost

    def _voting(self, sensors: Sequence[str], side: str) -> Iterator[Trip]:
        """Initiators on these transmitters that are enough together to trip their interlock."""
        found = [
            trip
            for sensor in sensors
            for trip in self._analysis.trips_on(sensor)
            if known(trip.initiator.direction) == side
        ]
        for trip in found:
            votes = sum(1 for other in found if other.interlock is trip.interlock)
            if votes >= (_needed(trip.interlock) or len(trip.interlock.initiators)):
                yield trip

    def _opposing(self, moves: Moves, failed: set[str]) -> tuple[Interlock, ...]:
        """Interlocks without the failed sensor that put a moved final element back where it came from."""
        found: dict[str, Interlock] = {}
        for move in moves.elements:
            if isinstance(move.direction, Undecided) or move.direction == 0:
                continue
            back = LESS if move.direction > 0 else MORE
            for interlock in self._analysis.interlocks_on.get(move.element.tag, ()):
                shares = any(
                    trip.interlock is interlock for sensor in failed for trip in self._analysis.trips_on(sensor)
                )
                if known(interlock.actions[move.element.tag].position) in back and not shares:
                    found[interlock.tag] = interlock
        return tuple(found.values())


def _forced(controlled: ControlledLoop, mode: str, written: str) -> Direction:
    """Which way the output goes when the measurement is bad."""
    if normal_mode(controlled) in PASSIVE_MODES or written == "hold" or (mode and not written):
        return 0
    if written in ("0 %", "100 %"):
        return 1 if written == "100 %" else -1
    if written:
        return Undecided(f"whether {written} is more or less than before depends on the load")
    return Undecided("what the controller does with a bad measurement is not given")


def _comes(alarm: Alarm, asked: Quantity | None, side: int) -> bool:
    """Whether an alarm comes before a secondary is where its primary can ask it to go; taken so where not known."""
    limit = known(alarm.limit)
    if limit is None or asked is None or limit.unit.kind != asked.unit.kind:
        return True
    return side * (asked.to(limit.unit.symbol) - limit.value) >= 0


def _trips_alone(trip: Trip) -> bool:
    """Whether this one initiator is enough to trip its interlock."""
    return (_needed(trip.interlock) or len(trip.interlock.initiators)) == 1


def _needed(interlock: Interlock) -> int | None:
    """How many initiators trip an interlock; None where the voting is not known."""
    votes = _VOTING.fullmatch(known(interlock.voting) or "")
    return int(votes[1]) if votes else None


def _within_reach(trip: Trip) -> bool:
    """Whether a reading at the end of the range passes the limit; taken so where either is not known."""
    limit, span = known(trip.initiator.limit), known(trip.measurement.range) if trip.measurement else None
    if limit is None or span is None or limit.unit.kind != span.unit.kind:
        return True
    reach = span.to(limit.unit.symbol)
    if known(trip.initiator.direction) == "above":
        return max(reach.low, reach.high) > limit.value
    return min(reach.low, reach.high) < limit.value
