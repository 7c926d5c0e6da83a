"""How a movement spreads: from a controller's output through functions and secondaries to the process.

Sign algebra alone: which way each setpoint, final element and measurement goes, not how far. Every controller
that is not said to fail goes on in its normal mode. Source: elementary; ISA-TR5.9 for direct and reverse
action (from memory).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

from loopdoc.engineering.direction import Undecided, curve_sign, element_sign, process_on, process_sign
from loopdoc.engineering.functions import PASSING
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route
from loopdoc.register.model import FinalElement, Function, Loop, known
from loopdoc.register.quantity import Quantity

Direction = int | Undecided
"""+1 rises, opens or speeds up; -1 falls, closes or slows down; 0 stays (an output or a final element), or is
left to itself (a measurement that is no longer controlled)."""

SELECTORS = {"low select": -1, "high select": 1}
"""The direction in which a candidate of a selector takes the command."""

PASSIVE_MODES = ("manual", "out of service")
"""Modes in which a controller does not act on its measurement."""


@dataclass(frozen=True, slots=True)
class SetpointMove:
    """What becomes of the setpoint of a commanded loop."""

    loop: ControlledLoop
    by: str
    """Tag of the loop that commands it, or of the function whose input moved."""
    direction: Direction
    limit: Quantity | None
    """The output limit of the commanding loop at that end, where it has one."""
    alone: bool
    """Whether that limit is one of the setpoint: no function on the way adds to the demand or changes its size."""
    selector: Function | None
    """A selector on the way that can pass another demand instead."""
    instead: tuple[str, ...]
    """The other candidates of that selector which then command; empty where this demand is passed."""


@dataclass(frozen=True, slots=True)
class ElementMove:
    """What becomes of a final element."""

    element: FinalElement
    direction: Direction
    position: str
    """closed, open, stopped or last, where the failure leads to a position of its own; else empty."""
    selector: Function | None = None
    instead: tuple[str, ...] = ()
    """As for a setpoint: a selector on the way, and its candidates that command in place of this movement."""


@dataclass(slots=True)
class Moves:
    """What a movement has reached so far, outermost first."""

    setpoints: list[SetpointMove] = field(default_factory=list)
    elements: list[ElementMove] = field(default_factory=list)
    ways: list[tuple[ControlledLoop, Route, Direction]] = field(default_factory=list)
    """Every way from a final element that moved: a loop that can move it, its route, the opening."""
    opposed: dict[str, tuple[str, ...]] = field(default_factory=dict)
    """Loops that go on working against the movement, by the tag of the loop on whose measurement they do."""
    commanded: set[str] = field(default_factory=set)
    """Loops whose output has been followed: a ring of loops is followed once."""


def times(first: Direction, second: Direction) -> Direction:
    """The direction of one thing that moves another; what stays moves nothing, whatever its effect would be."""
    if first == 0 or second == 0:
        return 0
    if isinstance(first, Undecided):
        return first
    return second if isinstance(second, Undecided) else first * second


def together(directions: Iterable[Direction]) -> Direction:
    """The direction of several movements that act at once."""
    signs = set()
    for direction in directions:
        if isinstance(direction, Undecided):
            return direction
        signs.add(direction)
    signs.discard(0)
    if len(signs) > 1:
        return Undecided("the movements act against each other")
    return signs.pop() if signs else 0


def feedback(controlled: ControlledLoop) -> Direction:
    """Which way a controller's output goes when its measurement rises."""
    action = known(controlled.controller.action)
    if action == "direct":
        return 1
    return -1 if action == "reverse" else Undecided(f"the action of {controlled.tag} is not given")


def effect_of(controlled: ControlledLoop, route: Route) -> Direction:
    """Which way a loop's measurement goes when the end of a route rises or opens."""
    process = process_on(controlled, route)
    if process is None:
        return Undecided(f"the process of {controlled.tag} is not given")
    effect = process_sign(process)
    return Undecided(f"the effect on {controlled.tag} is not known") if isinstance(effect, Undecided) else effect


def normal_mode(controlled: ControlledLoop) -> str | None:
    """The mode in which a controller runs, where the register gives it."""
    modes = known(controlled.controller.modes)
    return known(modes.normal) if modes else None


def stands_by(controlled: ControlledLoop, selector: Function) -> bool:
    """Whether a candidate of a selector does not command in normal running, because its error drives it away."""
    setpoint, operating = known(controlled.controller.setpoint), known(controlled.loop.operating)
    wanted = known(setpoint.normal) if setpoint else None
    usual = known(operating.normal) if operating else None
    rising = feedback(controlled)
    takes = SELECTORS.get(known(selector.kind) or "")
    if wanted is None or usual is None or takes is None or isinstance(rising, Undecided):
        return False
    if wanted.unit.kind != usual.unit.kind:
        return False
    return -rising * (wanted.value - usual.to(wanted.unit.symbol)) * takes < 0


def command(plant: Plant, controlled: ControlledLoop, output: Direction, moves: Moves) -> None:
    """Follow a controller's output down to the final elements."""
    if output == 0 or controlled.tag in moves.commanded:
        return
    moves.commanded.add(controlled.tag)
    for route in controlled.routes:
        direction, by = output, controlled.tag
        selector: Function | None = None
        instead: tuple[str, ...] = ()
        for function in route.via:
            direction = times(direction, _turn(function, by))
            takes = SELECTORS.get(known(function.kind) or "")
            others = tuple(tag for tag in plant.commanders.get(function.tag, ()) if tag != by)
            if takes is not None and others and direction != takes:
                selector, instead = function, others
                if stands_by(controlled, function):
                    direction = 0
            by = function.tag
        opposing = tuple(tag for tag in instead if tag in plant.register.loops)
        if opposing:
            moves.opposed[controlled.tag] = opposing
        if isinstance(route.end, FinalElement):
            element = element_sign(route.end)
            opening = times(direction, element if isinstance(element, Undecided) else element.sign)
            if route.branch is not None and route.branch.low > route.branch.high:
                opening = times(opening, -1)
            moves.elements.append(ElementMove(route.end, opening, "", selector, instead))
            if opening != 0:
                moves.ways.extend(ways_to(plant, controlled, route.end.tag, opening))
        elif route.end.tag in plant.controlled:
            secondary = plant.controlled[route.end.tag]
            limit = output_limit(controlled, output)
            alone = all(known(function.kind) in PASSING for function in route.via)
            moves.setpoints.append(SetpointMove(secondary, controlled.tag, direction, limit, alone, selector, instead))
            _follow(plant, secondary, direction, moves)


def _turn(function: Function, entry: str) -> Direction:
    """+1 where what comes out of a function rises with what enters it, -1 where it falls."""
    if known(function.kind) == "characteriser":
        return curve_sign(function)
    return 1 if function.weights.get(entry, 1.0) >= 0 else -1


def ways_to(
    plant: Plant, controlled: ControlledLoop, element: str, opening: Direction
) -> list[tuple[ControlledLoop, Route, Direction]]:
    """Every loop of a scheme whose measurement a moved final element reaches, each with its route to it."""
    scheme = plant.scheme_of(controlled.tag)
    loops = [plant.controlled[loop.tag] for loop in scheme.loops if loop.tag in plant.controlled]
    loops.sort(key=lambda loop: loop is not controlled)
    return [(loop, route, opening) for loop in loops for route in loop.routes if route.end.tag == element]


def through_function(plant: Plant, function: Function, entry: str, reading: Direction, moves: Moves) -> None:
    """Follow a reading that enters a function, and those behind it, to the setpoint that is made of it."""
    passed = {function.tag}
    while True:
        if known(function.kind) in ("sum", "ratio", "lead-lag", "characteriser"):
            reading = times(reading, _turn(function, entry))
        else:
            reading = Undecided(f"what {function.tag} makes of {entry} does not follow from the register")
        behind = plant.register.functions.get(known(function.to) or "")
        if behind is None or behind.tag in passed:
            break
        entry, function = function.tag, behind
        passed.add(function.tag)
    secondary = plant.controlled.get(known(function.to) or "")
    if secondary is None:
        return
    heard = reading if normal_mode(secondary) in (None, "cascade") else 0
    moves.setpoints.append(SetpointMove(secondary, function.tag, heard, None, False, None, ()))
    for corrector in plant.commanders.get(function.tag, ()):
        if corrector in plant.register.loops:
            moves.opposed[corrector] = (corrector,)
    _follow(plant, secondary, heard, moves)


def _follow(plant: Plant, secondary: ControlledLoop, setpoint: Direction, moves: Moves) -> None:
    """A loop in cascade moves its output with its setpoint as it would against its measurement."""
    mode = normal_mode(secondary)
    if mode is None or mode == "cascade":
        command(plant, secondary, times(setpoint, times(-1, feedback(secondary))), moves)


def measured_directions(plant: Plant, moves: Moves) -> dict[str, Direction]:
    """Which way each measurement goes that a movement of final elements reaches, innermost first."""
    found: dict[str, Direction] = {}
    for controlled, _, _ in moves.ways:
        found[controlled.tag] = together(
            times(opening, effect_of(controlled, route))
            for by, route, opening in moves.ways
            if by.tag == controlled.tag
        )
    return upward(plant, found)


def upward(plant: Plant, found: dict[str, Direction]) -> dict[str, Direction]:
    """The same with every measurement that hangs on these through a cascade."""
    reached = dict(found)
    waiting = list(found)
    while waiting:
        tag = waiting.pop(0)
        for link in plant.links_to.get(tag, ()):
            if link.primary.tag not in reached:
                route = next(route for route in link.primary.routes if route.end.tag == tag)
                reached[link.primary.tag] = times(reached[tag], effect_of(link.primary, route))
                waiting.append(link.primary.tag)
    return reached


def output_limit(controlled: ControlledLoop, output: Direction) -> Quantity | None:
    """The limit that a controller's output meets in a direction, where it has one."""
    written = known(controlled.controller.output)
    if written is None or isinstance(output, Undecided) or output == 0:
        return None
    return known(written.high if output > 0 else written.low)


def final_elements_of(plant: Plant, tag: str) -> tuple[FinalElement, ...]:
    """The final elements that a loop moves, by itself or through its secondaries."""
    found: dict[str, FinalElement] = {}
    waiting, seen = [tag], {tag}
    while waiting:
        controlled = plant.controlled.get(waiting.pop(0))
        for route in controlled.routes if controlled else ():
            if isinstance(route.end, FinalElement):
                found[route.end.tag] = route.end
            elif route.end.tag not in seen:
                seen.add(route.end.tag)
                waiting.append(route.end.tag)
    return tuple(found.values())


def transmitter_of(loop: Loop) -> str | None:
    """Tag of the transmitter with which a loop measures, where the register gives it."""
    measurement = known(loop.measurement)
    return known(measurement.transmitter) if measurement else None
