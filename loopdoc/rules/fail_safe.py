"""The rule on failed measurements: what a wrong reading drives the process to, and what stands against it."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.failure import Consequence, Failure, FailureAnalysis, FailureEffect
from loopdoc.engineering.pairing import ControlledLoop
from loopdoc.engineering.spreading import ElementMove
from loopdoc.register.model import known
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule

_READINGS = {
    Failure.MEASUREMENT_BAD: "fails as its `on_fault` says",
    Failure.MEASUREMENT_HIGH: "reads too high",
    Failure.MEASUREMENT_LOW: "reads too low",
}


@rule(
    level=Level.WARNING,
    source="IEC 61511-1:2016, clauses 8.2 and 9, a failed control loop as an initiating cause (from memory); sign "
    "algebra",
)
def measurement_fault_unsafe(controlled: ControlledLoop, failures: FailureAnalysis) -> Iterator[Draft]:
    """A failed reading makes the controller drive the process to its hazard, and nothing independent stands against it.

    Why:
        A controller believes its transmitter. When that reads wrong the controller itself makes the hazard, and its
        own alarms show the wrong reading. Only another sensor can tell.
    Breaks:
        A level controller on a single transmitter, `hazard: high`, whose transmitter can read too low: the inlet opens
        and the vessel overflows, with the display showing an empty one.
        It is a note where the reading must first go wrong within its range; a warning where the transmitter's own
        declared fault does it, or where an interlock trips on this very transmitter and is blind with it.
    Holds:
        Where a reading that is too high, too low or failed drives its own measurement to its hazard, there is at
        least one alarm or trip with another sensor on something that the failure moves, an alarm that says that it
        `warns_of` this hazard, an interlock with other sensors that moves the final element back, or another controller
        that works against it.
    What this check cannot see:
        Whether that alarm or trip is reached in time, and relief valves, bunds and other layers that are no loop: say
        so in a deviation.
    """
    loop = controlled.loop
    hazard = need(loop.hazard, "the hazard")
    sensor = need(need(loop.measurement, "the measurement").transmitter, "the transmitter")
    only_if(hazard != "none")
    told: set[int] = set()
    lacking = ""
    for effect in failures.wrong_readings(loop.tag):
        # What the failure does to other measurements, their own alarms tell, or `alarm-missing-for-hazard`.
        for consequence in (one for one in effect.consequences if one.loop is loop):
            direction = consequence.direction
            if isinstance(direction, Undecided):
                lacking = lacking or direction.reason
            elif consequence.hazardous and direction not in told and not _opposed(effect, consequence):
                told.add(direction)
                yield _unopposed(controlled, sensor, effect, consequence, failures)
    if lacking:
        not_checked(lacking)


def _opposed(effect: FailureEffect, hazard: Consequence) -> bool:
    """Whether something with another sensor stands against what a failure does."""
    return bool(
        hazard.opposed_by
        or effect.opposing
        or any(consequence.alarms or consequence.trips for consequence in effect.consequences)
    )


def _unopposed(
    controlled: ControlledLoop, sensor: str, effect: FailureEffect, hazard: Consequence, failures: FailureAnalysis
) -> Draft:
    loop, side = hazard.loop, "high" if hazard.direction == 1 else "low"
    declared = effect.failure is Failure.MEASUREMENT_BAD
    blind = [
        trip
        for trip in failures.trips_on(sensor)
        if known(trip.initiator.direction) == ("above" if side == "high" else "below")
    ]
    moves = [f"{move.element.tag} {_moves(move)}" for move in effect.elements if move.direction in (1, -1)]
    blinded = f"; {blind[0].interlock.tag} trips on the same transmitter and is blind with it" if blind else ""
    return draft(
        controlled.tag,
        f"when {sensor} {_READINGS[effect.failure]}, {', '.join(moves)} and the measurement of {loop.tag} goes {side}, "
        f"which is its hazard; no alarm and no trip with another sensor stands against it{blinded}",
        remedy=f"give it an alarm or a trip on a second transmitter, write `warns_of: {{{loop.tag}: {side}}}` at the "
        "alarm that tells of it, or say in a deviation what stands against it",
        at=controlled.loop.origin.place("measurement", "on_fault" if declared else "transmitter"),
        related=(
            (loop.origin.place("hazard"), f"the hazard of {loop.tag}, {known(loop.hazard)}"),
            *((trip.initiator.origin.place("trips"), f"{trip.interlock.tag} trips on {sensor}") for trip in blind),
        ),
        level=None if declared or blind else Level.NOTE,
    )


def _moves(move: ElementMove) -> str:
    kind, more = known(move.element.kind), move.direction == 1
    if kind in ("variable-speed drive", "motor"):
        return "speeds up" if more else "slows down"
    if kind == "heater bank":
        return "takes more power" if more else "takes less power"
    return "opens" if more else "closes"
