"""Rules on what an interlock does: to final elements, and to the controllers that move them."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.direction import PathSign, element_sign
from loopdoc.engineering.failure import FailureAnalysis
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route, Trip, measured_quantity
from loopdoc.engineering.spreading import PASSIVE_MODES, normal_mode
from loopdoc.register.model import FinalElement, Interlock, InterlockAction, known
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule
from loopdoc.rules.values import equal

_MACHINES = ("variable-speed drive", "motor", "heater bank")
_STOPPED_BY_CONTACT = ("variable-speed drive", "motor")
_OPENING = {"closed": 0.0, "stopped": 0.0, "open": 100.0, "started": 100.0}
_DOES = {"closed": "closes", "stopped": "stops", "open": "opens", "started": "starts"}


@rule(
    level=Level.ERROR,
    source="IEC 61511-1:2016, clause 10.3, the safe state of each safety function (from memory); common practice",
)
def interlock_action_unsafe(interlock: Interlock, plant: Plant) -> Iterator[Draft]:
    """An interlock moves a final element away from its safe position.

    Why:
        The hazard study says where the element has to stand when something goes wrong, and the interlock acts when
        something goes wrong. One of the two is mistaken.
    Breaks:
        `actions: {FV-2011: open}` where FV-2011 has `safe: closed`. A warning in the process layer, which may have a
        reason of its own, such as a recycle that opens to save a pump.
    Holds:
        Each element goes to its safe position. For machines closed and stopped are one. Starting a machine, and
        elements whose safe position is the last one, are not judged.
    What this check cannot see:
        Whether the safe position is the right one for this hazard: it may differ from hazard to hazard.
    """
    moved = [
        (action, plant.register.final_elements[tag])
        for tag, action in interlock.actions.items()
        if tag in plant.register.final_elements and action.position is not None
    ]
    only_if(moved)
    for action, element in moved:
        position, safe = known(action.position), known(element.safe)
        if position not in ("closed", "stopped", "open") or safe not in _OPENING:
            continue
        if _OPENING[position] != _OPENING[safe]:
            yield draft(
                interlock.tag,
                f"it {_DOES[position]} {element.tag}, whose safe position is {safe}",
                remedy=f"write `{element.tag}: {_ordered(element, safe)}`, or correct the safe position after the "
                "hazard study",
                at=action.origin.place(),
                related=((element.origin.place("safe"), f"the safe position of {element.tag}, {safe}"),),
                level=Level.ERROR if known(interlock.layer) == "safety" else Level.WARNING,
            )
    for action, element in moved:
        if need(action.position, f"what it does to {element.tag}") != "started":
            need(element.safe, f"the safe position of {element.tag}")


def _ordered(element: FinalElement, safe: str | None) -> str:
    """A safe position as an action orders it: a motor is started and stopped, a valve opened and closed."""
    opens = _OPENING[safe or ""] > 0
    if known(element.kind) in _MACHINES:
        return "started" if opens else "stopped"
    return "open" if opens else "closed"


# ---------------------------------------------------------------- the controller above a tripped element


@rule(level=Level.WARNING, source="common practice: reset wind-up against a tripped valve, bumpless release")
def interlock_loop_not_forced(interlock: Interlock, plant: Plant) -> Iterator[Draft]:
    """An interlock trips a final element and leaves the controller that moves it to work on.

    Why:
        In automatic the controller sees its measurement leave the setpoint and drives its output to the limit. When
        the interlock is reset the element follows that output: a steam valve goes from shut to wide open.
    Breaks:
        `actions: {FV-2011: closed}` with FIC-2011 in cascade; FIC-2011 forced to manual without an output, so that
        the valve returns to where it stood before the trip; FIC-2011 forced into automatic.
    Holds:
        For each tripped element the controllers that move it are forced to an output, or state that they track when
        they are not followed. A controller that moves further elements (a split range) is left free as long as one
        of them is; one that stands in manual or out of service is left out.
    What this check cannot see:
        Tracking that is built in the output block and not written in the register.
    """
    tripped = [
        tag
        for tag, action in interlock.actions.items()
        if tag in plant.register.final_elements and known(action.position) in _OPENING
    ]
    found: dict[str, tuple[ControlledLoop, str]] = {}
    for tag in tripped:
        for controlled in plant.moved_by.get(tag, ()):
            ends = {route.end.tag for route in controlled.routes}
            if normal_mode(controlled) not in PASSIVE_MODES and ends <= set(tripped):
                found.setdefault(controlled.tag, (controlled, tag))
    only_if(found)
    held = [tag for tag in found if ("actions", tag) in plant.register.held.get(interlock.tag, ())]
    for controlled, element in found.values():
        if controlled.tag in held or known(controlled.controller.when_not_followed) == "track":
            continue
        fault = _not_forced(controlled, interlock.actions.get(controlled.tag))
        if fault:
            does = _DOES[known(interlock.actions[element].position) or "closed"]
            action = interlock.actions.get(controlled.tag)
            yield draft(
                interlock.tag,
                f"it {does} {element}, but {fault}",
                remedy=f"write `{controlled.tag}: {{mode: manual, output: "
                f"{_parking(controlled, element, interlock)}}}` under `actions`, or `when_not_followed: track` for "
                f"{controlled.tag} where its output follows the position",
                at=action.origin if action else interlock.actions[element].origin,
                related=((controlled.loop.origin.key(), f"{controlled.tag} moves {element}"),),
            )
    if held:
        not_checked(f"what it does to {held[0]} is on hold")


def _not_forced(controlled: ControlledLoop, action: InterlockAction | None) -> str:
    """What is wrong with how an interlock treats a controller; empty where it is forced to an output."""
    if action is None:
        mode = normal_mode(controlled)
        works = f"{controlled.tag} goes on in {mode}" if mode else f"{controlled.tag} goes on"
        return f"{works} and winds up: at the reset the element goes where that output is"
    mode = known(action.mode)
    if mode in ("automatic", "cascade", "remote output"):
        return f"forces {controlled.tag} into {mode}, where it winds up: at the reset the element follows that output"
    if mode is not None and action.output is None:
        return (
            f"forces {controlled.tag} into {mode} without an output: at the reset the element returns to where it stood"
        )
    return ""


def _parking(controlled: ControlledLoop, element: str, interlock: Interlock) -> str:
    """The output at which an element stands where the interlock puts it."""
    wanted = _OPENING[known(interlock.actions[element].position) or "closed"]
    for output in (0.0, 100.0):
        if any(_opening_at(route, output) == wanted for route in controlled.routes if route.end.tag == element):
            return f"{output:g} %"
    return "0 %"


@rule(level=Level.ERROR, source="sign algebra; common practice: bumpless release of a tripped valve")
def trip_output_mismatch(interlock: Interlock, plant: Plant) -> Iterator[Draft]:
    """An interlock forces a controller to an output at which the tripped final element would stand elsewhere.

    Why:
        While the interlock acts, the element stands where it was put. At the reset it goes at once to the output
        of its controller, which is still in manual: the valve that was shut for a reason opens by itself.
    Breaks:
        `{FV-2011: closed, FIC-2011: {mode: manual, output: 100 %}}` where FV-2011 opens on a rising signal; 0 % where
        it opens on a falling signal without a reversed output block; 20 %, at which it stands a fifth open.
    Holds:
        At the forced output every element that the interlock moves, and this controller too, stands where the
        interlock puts it. Motors and drives, which a contact stops at whatever speed is set, are left out.
    What this check cannot see:
        An output block that goes on holding the element after the reset until an operator moves it.
    """
    forced = [
        (plant.controlled[tag], action, route, route.end)
        for tag, action in interlock.actions.items()
        if action.output is not None and tag in plant.controlled
        for route in plant.controlled[tag].routes
        if route.end.tag in interlock.actions
        and isinstance(route.end, FinalElement)
        and known(route.end.kind) not in _STOPPED_BY_CONTACT
    ]
    only_if(forced)
    lacking = ""
    for controlled, action, route, element in forced:
        output, position = known(action.output), known(interlock.actions[element.tag].position)
        if output is None or position not in _OPENING or output.unit.kind != "fraction":
            lacking = lacking or f"the output of {controlled.tag}, or the position of {element.tag}, is not known"
            continue
        stands = _opening_at(route, output.to("%"))
        if stands is None:
            lacking = lacking or f"{element.tag} does not say on which signal it opens"
        elif not equal(stands, _OPENING[position]):
            yield draft(
                interlock.tag,
                f"it {_DOES[position]} {element.tag} and forces {controlled.tag} to {output}, at which "
                f"{element.tag} stands {_stands(stands)}: it goes there at the reset",
                remedy=f"write `output: {_parking(controlled, element.tag, interlock)}`, or correct the direction of "
                f"{element.tag}",
                at=action.origin.place("output"),
                related=(
                    (interlock.actions[element.tag].origin.place(), f"{element.tag}, {position}"),
                    (element.origin.place("opens_on"), _direction(element)),
                ),
            )
    if lacking:
        not_checked(lacking)


def _opening_at(route: Route, output: float) -> float | None:
    """The opening of a final element in percent at an output in percent; None where its direction is not known."""
    if not isinstance(route.end, FinalElement):
        return None
    sign = element_sign(route.end)
    if not isinstance(sign, PathSign):
        return None
    opening = output
    if route.branch is not None:
        if route.branch.span == 0:
            return None
        opening = 100 * (output - route.branch.low) / route.branch.span
    opening = min(100.0, max(0.0, opening))
    return opening if sign.sign > 0 else 100.0 - opening


def _stands(opening: float) -> str:
    if equal(opening, 0.0):
        return "closed"
    return "fully open" if equal(opening, 100.0) else f"{opening:.3g} % open"


def _direction(element: FinalElement) -> str:
    reversed_block = ", by a reversed output block" if known(element.output_block) == "reversed" else ""
    return f"{element.tag} opens on {known(element.opens_on)}{reversed_block}"


# ---------------------------------------------------------------- several interlocks on one element


@rule(
    level=Level.WARNING,
    source="common practice; IEC 62881 (cause and effect matrix): effects with priority (from memory)",
)
def interlock_actions_conflict(element: FinalElement, plant: Plant, failures: FailureAnalysis) -> Iterator[Draft]:
    """Two interlocks put one final element into opposite positions.

    Why:
        When both have tripped, the element goes where the logic happens to let it. Nobody can tell from the cause and
        effect chart which it is.
    Breaks:
        IS-2001 closes FV-2011 and IS-2003 opens it.
    Holds:
        All interlocks on one element put it into the same position, or the two trip on one quantity in opposite
        directions and cannot both have tripped.
    What this check cannot see:
        An order of priority in the logic, or that both never trip together: say so in a deviation.
    """
    acting = [
        (interlock, position)
        for interlock in failures.interlocks_on.get(element.tag, ())
        if (position := known(interlock.actions[element.tag].position)) in _OPENING
    ]
    only_if(len(acting) > 1)
    (first, where), *others = acting
    for other, position in others:
        if _OPENING[position or ""] != _OPENING[where or ""] and not _exclude_each_other(first, other, plant):
            yield draft(
                element.tag,
                f"{other.tag} {_DOES[position or '']} it and {first.tag} {_DOES[where or '']} it; which prevails is "
                "not written",
                remedy="let one interlock act on another element, or say in a deviation which of them prevails",
                at=other.actions[element.tag].origin.place(),
                related=((first.actions[element.tag].origin.place(), f"{first.tag}, {where}"),),
            )


def _exclude_each_other(first: Interlock, other: Interlock, plant: Plant) -> bool:
    """Whether two interlocks trip on one quantity alone, the one above its limit and the other below."""
    one, two = ({_trips_by(trip) for trip in plant.trips_of[interlock.tag]} for interlock in (first, other))
    if len(one) != 1 or len(two) != 1:
        return False
    (quantity, direction), (its, opposite) = *one, *two
    return quantity == its and {direction, opposite} == {"above", "below"}


def _trips_by(trip: Trip) -> tuple[object, object]:
    """What an initiator watches, and in which direction it trips."""
    owner = trip.instrument or trip.loop
    return (measured_quantity(owner) if owner else None) or trip.initiator.tag, trip.initiator.direction
