"""How long the operator has: for every alarm that precedes a trip, the time between them under each upset.

The loops are in manual, so that nothing works against the upset. An alarm is raised when its reading, filtered,
has been beyond the limit for its delay, and an interlock trips in the same way. An alarm precedes a trip where
it stands on the same transmitter, or on another one that measures the same quantity (told by unit, variable and
the service up to its first comma), and nearer to normal operation on the same side.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from loopdoc.engineering.pairing import Plant, Trip, measured_quantity, normal_value
from loopdoc.register.model import Alarm, Instrument, Interlock, Loop, Measurement, known, seconds
from loopdoc.register.quantity import Quantity
from loopdoc.register.units import UnitError

if TYPE_CHECKING:
    from loopdoc.engineering.upsets import UndecidedUpset, Upset

_SIDES = {"high": 1, "high_high": 1, "low": -1, "low_low": -1}
_VOTING = re.compile("([1-9])oo[1-9]")
_SIGNS = {"above": 1, "below": -1}

_Measured = str | tuple[str, str, str]
"""A transmitter, or a quantity."""


@dataclass(frozen=True, slots=True)
class TimeBetween:
    """One upset from normal operation: when the alarm is raised and when the interlock trips."""

    upset: str
    """In words: `FV-2011 opens fully`, or the name of a disturbance in the register."""
    alarm_s: float
    """From the upset to the alarm, its delay included [s]."""
    trip_s: float
    """From the upset to the trip, its delay included [s]; infinite where the upset does not reach it."""
    at_least: bool
    """True where the whole travel of the final element was taken: in truth it takes no less."""

    @property
    def available_s(self) -> float:
        """From the alarm to the trip [s]; negative where the alarm comes after it, infinite without a trip."""
        return self.trip_s - self.alarm_s if math.isfinite(self.trip_s) else math.inf


@dataclass(frozen=True, slots=True)
class NotDecided:
    """An upset of which the times do not follow from the register, and why."""

    upset: str
    reason: str


@dataclass(frozen=True, slots=True)
class AlarmToTrip:
    """An alarm, an interlock that it precedes, and the times between them."""

    loop: Loop
    alarm: Alarm
    interlock: Interlock
    trips: tuple[Trip, ...]
    """The initiators of the interlock that measure the same quantity."""
    times: tuple[TimeBetween, ...]
    """One for each upset that could be calculated."""
    not_decided: tuple[NotDecided, ...]

    @property
    def shortest(self) -> TimeBetween | None:
        """The upset that leaves the least time; None where none reaches the trip."""
        reached = [time for time in self.times if math.isfinite(time.trip_s)]
        return min(reached, key=lambda time: time.available_s, default=None)


@dataclass(frozen=True, slots=True)
class _Pair:
    """An alarm and an interlock behind it, with the distances that a measurement has to go."""

    loop: Loop
    alarm: Alarm
    interlock: Interlock
    trips: tuple[Trip, ...]
    needed: int
    """So many of the initiators have to trip."""
    moved_by: Loop
    """The loop whose process and disturbances move the measurement."""
    alarm_distance: float
    """From the normal value to the alarm, in percent of the range of the loop that moves it."""
    trip_distances: tuple[float, ...]


class TimeToAct:
    """The times from alarm to trip of a whole plant, calculated together at the first question."""

    def __init__(self, plant: Plant) -> None:
        self._plant = plant

    def of(self, loop: Loop, alarm: Alarm) -> tuple[AlarmToTrip, ...]:
        """What follows an alarm: one entry for each interlock that it precedes."""
        return self._by_alarm.get((loop.tag, alarm.kind), ())

    @cached_property
    def _by_alarm(self) -> dict[tuple[str, str], tuple[AlarmToTrip, ...]]:
        found: dict[tuple[str, str], list[AlarmToTrip]] = {}
        for entry in self.all:
            found.setdefault((entry.loop.tag, entry.alarm.kind), []).append(entry)
        return {key: tuple(entries) for key, entries in found.items()}

    @cached_property
    def all(self) -> tuple[AlarmToTrip, ...]:
        """Every alarm that precedes a trip, in the order of the register."""
        found: list[AlarmToTrip | _Pair] = []
        for loop in self._plant.register.loops.values():
            for alarm in loop.alarms.values():
                found.extend(self._pairs(loop, alarm))
        calculated = iter(self._calculated([entry for entry in found if isinstance(entry, _Pair)]))
        return tuple(next(calculated) if isinstance(entry, _Pair) else entry for entry in found)

    # -- which alarm precedes which trip

    def _pairs(self, loop: Loop, alarm: Alarm) -> Iterator[AlarmToTrip | _Pair]:
        side, limit = _SIDES.get(alarm.kind), known(alarm.limit)
        if side is None or limit is None:
            return
        behind: dict[str, list[Trip]] = {}
        for trip in self._watching(loop):
            if _SIGNS.get(known(trip.initiator.direction) or "") == side:
                behind.setdefault(trip.interlock.tag, []).append(trip)
        for trips in behind.values():
            entry = self._pair(loop, alarm, side, limit, tuple(trips))
            if entry is not None:
                yield entry

    def _watching(self, loop: Loop) -> Iterator[Trip]:
        """The initiators that measure what the loop measures."""
        at = {number for key in _measured(loop, known(loop.measurement)) for number in self._trips_on.get(key, ())}
        return (self._plant.trips[number] for number in sorted(at))

    @cached_property
    def _trips_on(self) -> dict[_Measured, list[int]]:
        """Numbers of the trips on each transmitter and on each quantity."""
        found: dict[_Measured, list[int]] = {}
        for number, trip in enumerate(self._plant.trips):
            part = trip.instrument or trip.loop
            for key in _measured(part, trip.measurement) if part else ():
                found.setdefault(key, []).append(number)
        return found

    @cached_property
    def _moved_on(self) -> dict[_Measured, Loop]:
        """The first loop of the register with upsets on each transmitter and for each quantity."""
        found: dict[_Measured, Loop] = {}
        for loop in self._plant.register.loops.values():
            if self._has_upsets(loop):
                for key in _measured(loop, known(loop.measurement)):
                    found.setdefault(key, loop)
        return found

    def _pair(
        self, loop: Loop, alarm: Alarm, side: int, limit: Quantity, trips: tuple[Trip, ...]
    ) -> AlarmToTrip | _Pair | None:
        interlock = trips[0].interlock
        voting = _VOTING.fullmatch(known(interlock.voting) or "")
        needed = int(voting[1]) if voting else 1

        def undecided(reason: str) -> AlarmToTrip:
            return AlarmToTrip(loop, alarm, interlock, trips, (), (NotDecided("every upset", reason),))

        normal = normal_value(loop)
        if normal is None:
            return undecided(f"the normal value of {loop.tag} is not given")
        moved_by = self._moved_by(loop)
        if moved_by is None:
            return undecided(f"{loop.tag} has no process and no disturbances, and no other loop measures the same")
        band = _band(moved_by)
        if band is None:
            return undecided(f"the range of {moved_by.tag} is not known")
        unit, span = band
        try:
            alarm_distance = 100.0 * (limit.to(unit) - normal.to(unit)) / span
            distances = tuple(
                100.0 * (trip_limit.to(unit) - _trip_normal(trip, normal).to(unit)) / span
                for trip in trips
                if (trip_limit := known(trip.initiator.limit)) is not None
            )
        except UnitError:
            return undecided("the limits are in units of another kind")
        if len(distances) < len(trips):
            return undecided(f"a limit of {interlock.tag} is not known")
        if side * alarm_distance <= 0.0 or side * alarm_distance >= min(side * one for one in distances):
            return None  # an alarm in normal operation, or one that does not precede the trip
        if needed > len(trips):
            return undecided(f"{interlock.tag} trips only together with other measurements")
        return _Pair(loop, alarm, interlock, trips, needed, moved_by, alarm_distance, distances)

    def _moved_by(self, loop: Loop) -> Loop | None:
        """The loop itself where the register says what moves it, else one that measures the same quantity."""
        if self._has_upsets(loop):
            return loop
        keys = _measured(loop, known(loop.measurement))
        found = [other for key in keys if (other := self._moved_on.get(key)) is not None]
        return min(found, key=lambda other: self._plant.position[other.tag], default=None)

    def _has_upsets(self, loop: Loop) -> bool:
        return bool(loop.disturbances) or (loop.process is not None and loop.tag in self._plant.controlled)

    # -- how long it takes

    def _calculated(self, pairs: list[_Pair]) -> list[AlarmToTrip]:
        if not pairs:
            return []
        # Loaded for a plant with alarms before trips only: the check of any other starts without numpy.
        import numpy as np

        from loopdoc.engineering.crossing import crossing_times
        from loopdoc.engineering.process import Process, in_series
        from loopdoc.engineering.upsets import Upset, upsets_of

        upsets = {pair.moved_by.tag: upsets_of(self._plant, pair.moved_by) for pair in pairs}
        paths, sizes, ramps, limits = [], [], [], []
        for pair in pairs:
            for upset in upsets[pair.moved_by.tag]:
                if not isinstance(upset, Upset):
                    continue
                for measurement, distance in _readings(pair):
                    filter_s = seconds(measurement.filter) if measurement else 0.0
                    paths.append(in_series(upset.path, Process(1.0, (filter_s,) if filter_s else ())))
                    sizes.append(upset.size_pct)
                    ramps.append(upset.ramp_s)
                    limits.append(distance)
        times = iter(
            crossing_times(paths, size_pct=np.array(sizes), ramp_s=np.array(ramps), limit_pct=np.array(limits)).tolist()
            if paths
            else ()
        )
        return [_assembled(pair, upsets[pair.moved_by.tag], times) for pair in pairs]


def _assembled(pair: _Pair, upsets: tuple[Upset | UndecidedUpset, ...], times: Iterator[float]) -> AlarmToTrip:
    from loopdoc.engineering.upsets import UndecidedUpset

    between: list[TimeBetween] = []
    not_decided: list[NotDecided] = []
    for upset in upsets:
        if isinstance(upset, UndecidedUpset):
            not_decided.append(NotDecided(upset.name, upset.reason))
            continue
        alarm_s = next(times) + seconds(pair.alarm.delay)
        tripped = sorted(next(times) + seconds(trip.initiator.delay) for trip in pair.trips)
        trip_s = tripped[pair.needed - 1]
        if math.isfinite(alarm_s) or math.isfinite(trip_s):
            between.append(TimeBetween(upset.name, alarm_s, trip_s, upset.whole_travel))
    return AlarmToTrip(pair.loop, pair.alarm, pair.interlock, pair.trips, tuple(between), tuple(not_decided))


def _readings(pair: _Pair) -> Iterator[tuple[Measurement | None, float]]:
    """The measurement and the distance of the alarm, then those of each initiator."""
    yield known(pair.loop.measurement), pair.alarm_distance
    for trip, distance in zip(pair.trips, pair.trip_distances, strict=True):
        yield trip.measurement, distance


def _trip_normal(trip: Trip, of_alarm: Quantity) -> Quantity:
    """Normal value of what an initiator measures; that of the alarm's loop where it has none of its own."""
    return (normal_value(trip.loop) if trip.loop else None) or of_alarm


def _measured(part: Loop | Instrument, measurement: Measurement | None) -> tuple[_Measured, ...]:
    """By what two parts are told to measure the same: their transmitter, and the quantity that they name."""
    return tuple(key for key in (_transmitter(measurement), measured_quantity(part)) if key is not None)


def _transmitter(measurement: Measurement | None) -> str | None:
    return known(measurement.transmitter) if measurement else None


def _band(loop: Loop) -> tuple[str, float] | None:
    measurement = known(loop.measurement)
    own = known(measurement.range) if measurement else None
    return (own.unit.symbol, own.span) if own is not None and own.span > 0.0 else None
