"""What a loop must do at its check: action, fail positions, modes, tracking and interlocks, as things to try."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence

from loopdoc.documents.loop_sheet.loop_rows import action_words, acts_on
from loopdoc.documents.loop_sheet.loop_tables import related_interlocks
from loopdoc.documents.naming import Names, moves_by_itself, power_of
from loopdoc.documents.narrative.failure_story import FailureStory
from loopdoc.documents.titleblock import fingerprint
from loopdoc.documents.values import HOLD, shown
from loopdoc.documents.wording import NO_BREAK, listed, sentence, sentences, value, with_printed_units
from loopdoc.engineering.failure import Failure, FailureAnalysis, FailureEffect
from loopdoc.engineering.loop_check import (
    FunctionCheck,
    LoopChecks,
    SignalLimit,
    is_pt100,
    readings,
    signal_limits,
    thermocouple_type,
)
from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.engineering.scaling import FAILURE_HIGH_MA, FAILURE_LOW_MA
from loopdoc.engineering.spreading import transmitter_of
from loopdoc.register.model import FinalElement, Function, Hold, Initiator, Interlock, InterlockAction, Loop, known
from loopdoc.register.quantity import Quantity, Range, display_number
from loopdoc.rules.policy import Limits, limits_from

_MODES = ("manual", "automatic", "cascade")
_VERBS = {
    "ratio": "asks for its input times the ratio",
    "low select": "passes the lowest of its inputs",
    "high select": "passes the highest of its inputs",
    "sum": "passes the sum of its inputs",
}


def loop_checks(plant: Plant, limits: Limits, analysis: FailureAnalysis, loop: Loop) -> LoopChecks:
    """All that is checked on one loop."""
    measured = readings(plant, loop, tolerance_pct=limits.loop_check_tolerance, travel_pct=limits.travel_tolerance)
    return LoopChecks(loop.tag, measured, tuple(_functions(plant, analysis, loop)))


def plant_checks(plant: Plant) -> dict[str, LoopChecks]:
    """All that is checked on every loop, by tag."""
    limits, analysis = limits_from(plant.register.policy), FailureAnalysis(plant)
    return {tag: loop_checks(plant, limits, analysis, loop) for tag, loop in plant.register.loops.items()}


def guide(plant: Plant, sources: Mapping[str, bytes]) -> tuple[str, ...]:
    """The first page of a workbook of blanks: what it was made from and how it is filled in."""
    register = plant.register
    site, revision = register.site, register.revision
    return (
        f"Loop check results, {shown(site.name if site else None)}",
        f"Register at revision {shown(revision.code if revision else None)}, fingerprint {fingerprint(sources)[:12]}",
        "",
        "One sheet a loop. Date and who tested are needed; sheets without results are passed over.",
        "Readings: numbers in the unit of their row. As found is before, as left after an adjustment; leave as left "
        "empty where nothing was adjusted.",
        "Functions: pass, fail or not done. What is left empty has not been done, and has not passed.",
        "Tags, names, figures and columns of the blank stay as they are: by them the results are read back.",
    )


def elements_of(plant: Plant, loop: Loop) -> tuple[FinalElement, ...]:
    """The final elements that a loop moves itself."""
    controlled = plant.controlled.get(loop.tag)
    ends = (route.end for route in controlled.routes) if controlled else ()
    return tuple({end.tag: end for end in ends if isinstance(end, FinalElement)}.values())


def _functions(plant: Plant, analysis: FailureAnalysis, loop: Loop) -> Iterator[FunctionCheck]:
    controlled = plant.controlled.get(loop.tag)
    elements = elements_of(plant, loop)
    told = _Told(plant, analysis, loop)
    yield from _signal(loop)
    if controlled is not None:
        yield from _action(controlled, told)
        yield from _ends(controlled)
        yield from _modes(plant, controlled)
        yield from _demand(plant, controlled)
    yield from _fault(plant, loop, told)
    for element in elements:
        yield from _element(element, told.effects)
    interlocks = related_interlocks(plant, loop, elements)
    for interlock in interlocks:
        yield from _interlock(plant, interlock, loop, elements)


class _Told:
    """The failure effects of one loop, and the sentences of the narrative about them."""

    def __init__(self, plant: Plant, analysis: FailureAnalysis, loop: Loop) -> None:
        self.effects = analysis.effects(loop.tag)
        scheme = plant.scheme_of(loop.tag)
        story = FailureStory(plant, analysis, scheme, [loop], Names(scheme.loops))
        self._control = {row.failure: row.control for row in story.rows()}
        self._sensor = transmitter_of(loop)

    def control(self, *failures: str) -> str:
        """What the control does when the loop's own transmitter fails so; empty where that does not follow."""
        found = (self._control.get(f"{self._sensor} {failure}", "") for failure in failures)
        return next(filter(None, found), "")


# ---------------------------------------------------------------- measurement


def _signal(loop: Loop) -> Iterator[FunctionCheck]:
    measurement = known(loop.measurement)
    limits = signal_limits(measurement) if measurement else ()
    if not limits:
        return
    good = [limit for limit in limits if limit.state == "measurement"]
    bad = [limit for limit in limits if limit.state.startswith("failure")]
    yield FunctionCheck(
        "signal limits",
        f"Apply {_currents(good)}, then {_currents(bad)}.",
        f"The first two are read as {listed(_percent(limit.percent) for limit in good)}, "
        "the last two are marked bad (NAMUR NE 43).",
        "4-20 mA",
    )


def _currents(limits: Iterable[SignalLimit]) -> str:
    values = [f"{limit.current_ma:.1f}" for limit in limits]
    return f"{listed(values)}{NO_BREAK}mA"


def _percent(number: float) -> str:
    return f"{display_number(number)}{NO_BREAK}%"


def _fault(plant: Plant, loop: Loop, told: _Told) -> Iterator[FunctionCheck]:
    """What the reading and the controller do when the transmitter itself fails."""
    measurement = known(loop.measurement)
    if measurement is None:
        return
    sensor = known(measurement.transmitter) or "the transmitter"
    reads = {
        "reads high": f"The signal goes to at least {FAILURE_HIGH_MA:.0f}{NO_BREAK}mA",
        "reads low": f"The signal goes to at most {FAILURE_LOW_MA}{NO_BREAK}mA",
    }
    on_fault = known(measurement.on_fault)
    if isinstance(measurement.on_fault, Hold):
        reading = HOLD
    elif on_fault is None or on_fault == "unknown":
        reading = ""
    elif on_fault == "holds":
        reading = "The reading holds its last value"
    elif known(measurement.signal) == "4-20 mA":
        reading = reads[on_fault]
    else:
        reading = f"The loop {on_fault}"
    control = told.control("signals a fault", "fails and holds its last value") if loop.tag in plant.controlled else ""
    if not control and on_fault in ("reads high", "reads low"):
        control = told.control(f"{on_fault.replace('reads', 'reads too')}, as when it fails")
    controller = known(loop.controller)
    bad = known(controller.on_bad_measurement) if controller else None
    words = [on_fault or ""] + ([shown(bad.mode), shown(bad.output)] if bad else [])
    shows_bad = "the display marks it bad" if on_fault in reads and known(measurement.signal) == "4-20 mA" else ""
    expect = HOLD if reading == HOLD else sentences(listed(filter(None, (reading, shows_bad))), control)
    if is_pt100(measurement) or thermocouple_type(measurement):
        do = f"Open the circuit of the sensor of {sensor}."
    elif on_fault == "holds":
        do = f"Make {sensor} fail, or stop its updates."
    else:
        do = f"Make {sensor} signal its fault, as by its own test function."
    yield FunctionCheck("transmitter fault", do, expect, "; ".join(words))


# ---------------------------------------------------------------- controller


def _action(controlled: ControlledLoop, told: _Told) -> Iterator[FunctionCheck]:
    action = controlled.controller.action
    tag = controlled.tag
    expect = HOLD if isinstance(action, Hold) else ""
    if action in ("direct", "reverse"):
        control = told.control("reads too high", "reads too high, as when it fails")
        # Interlocks have their own rows, and a loop kept in manual does nothing here by design.
        moved = [part for part in control.split(". ") if " trip" not in part and "does nothing" not in part]
        expect = sentences(f"The output of {tag} {'rises' if action == 'direct' else 'falls'}", ". ".join(moved))
    following = listed(dict.fromkeys(route.end.tag for route in controlled.routes if isinstance(route.end, Loop)))
    beside = f", with {following} in cascade" if following else ""
    yield FunctionCheck(
        "controller action",
        f"In automatic at a steady setpoint{beside}, raise the measurement slowly.",
        expect,
        shown(action),
    )


def _ends(controlled: ControlledLoop) -> Iterator[FunctionCheck]:
    output, setpoint = known(controlled.controller.output), known(controlled.controller.setpoint)
    if output is not None and (output.low is not None or output.high is not None):
        yield FunctionCheck(
            "output limits",
            "In automatic, hold the measurement off the setpoint on one side, then on the other.",
            _stops("The output", output.low, output.high),
            _limit_words(output.low, output.high),
        )
    if setpoint is not None and (setpoint.low is not None or setpoint.high is not None):
        yield FunctionCheck(
            "setpoint limits",
            "Enter a setpoint below and one above the limits.",
            _stops("The setpoint", setpoint.low, setpoint.high),
            _limit_words(setpoint.low, setpoint.high),
        )


def _stops(what: str, low: Quantity | Hold | None, high: Quantity | Hold | None) -> str:
    return sentence(f"{what} stops at {listed(value(end) for end in (low, high) if end is not None)}")


def _limit_words(*parts: object) -> str:
    return "; ".join("HOLD" if isinstance(part, Hold) else str(part) for part in parts if part is not None)


def _modes(plant: Plant, controlled: ControlledLoop) -> Iterator[FunctionCheck]:
    modes = known(controlled.controller.modes)
    permitted = modes.permitted if modes else ()
    if not permitted:
        expect = HOLD if isinstance(controlled.controller.modes, Hold) else ""
        yield FunctionCheck("mode transfers", "Change between the permitted modes.", expect, "")
        return
    against = ", ".join(permitted)
    found = [mode for mode in _MODES if mode in permitted]
    if len(found) > 1:
        expect = "The output does not jump at any change"
        if "cascade" in found:
            commanders = listed(primary.tag for primary in plant.primaries_of(controlled.tag))
            computed = listed(tag for tag, one in plant.register.functions.items() if known(one.to) == controlled.tag)
            expect += f"; in cascade the setpoint follows {commanders or computed or 'its function'}"
        yield FunctionCheck("mode transfers", f"Change from {' to '.join(found)}, and back.", sentence(expect), against)
    barred = [mode for mode in _MODES if mode not in permitted and (mode != "cascade" or _commanded(plant, controlled))]
    if barred:
        expect = f"{'It is' if len(barred) == 1 else 'Both are' if len(barred) == 2 else 'All are'} refused."
        yield FunctionCheck("modes not permitted", f"Try {listed(barred, 'and')}.", expect, against)


def _commanded(plant: Plant, controlled: ControlledLoop) -> bool:
    return bool(plant.commanders.get(controlled.tag))


def _demand(plant: Plant, controlled: ControlledLoop) -> Iterator[FunctionCheck]:
    """What a controller's output does on its way to a secondary, and when it is not followed."""
    controller = controlled.controller
    output = known(controller.output)
    span = known(output.span) if output else None
    secondaries = [route for route in controlled.routes if isinstance(route.end, Loop)]
    for route in secondaries:
        if not route.via and span is not None:
            yield FunctionCheck(
                f"setpoint of {route.end.tag}",
                f"In manual, set the output to 0, 50 and 100{NO_BREAK}%; {route.end.tag} in cascade.",
                sentence(f"The setpoint of {route.end.tag} shows {_thirds(span)}, or stops at its own limits"),
                str(span),
            )
    functions = {function.tag: function for route in controlled.routes for function in route.via}
    functions |= {tag: one for tag, one in plant.register.functions.items() if known(one.to) == controlled.tag}
    for function in functions.values():
        yield from _function(plant, function)
    if not secondaries and not any(known(one.kind) in ("low select", "high select") for one in functions.values()):
        return
    policy = controller.when_not_followed
    if not secondaries:
        return
    ends = listed(dict.fromkeys(route.end.tag for route in secondaries))
    expects = {
        "track": f"The output of {controlled.tag} tracks the setpoint of {ends}; back in cascade nothing jumps.",
        "hold": f"The output of {controlled.tag} stays where it was.",
        "nothing": f"The output of {controlled.tag} goes on by itself, and may jump when {ends} is back in cascade.",
    }
    yield FunctionCheck(
        "tracking",
        f"Put {ends} in automatic, move its setpoint, and put it back in cascade.",
        HOLD if isinstance(policy, Hold) else expects.get(policy or "", ""),
        shown(policy),
    )


def _thirds(span: Range) -> str:
    middle = Quantity((span.low + span.high) / 2, span.unit)
    low = Quantity(span.low, span.unit, span.written_low)
    high = Quantity(span.high, span.unit, span.written_high)
    return listed((display_number(low.value), display_number(middle.value), value(high)))


def _function(plant: Plant, function: Function) -> Iterator[FunctionCheck]:
    kind = known(function.kind)
    if kind is None or kind not in _VERBS:
        return
    entering = len(function.inputs) + len(plant.commanders.get(function.tag, ()))
    setting = f" Normal ratio {shown(function.normal)}." if kind == "ratio" and function.normal is not None else ""
    yield FunctionCheck(
        f"{function.tag} {kind}",
        f"Move the input of {function.tag}." if entering == 1 else f"Move each input of {function.tag} in turn.",
        f"{function.tag} {_VERBS[kind]}.{setting}",
        "; ".join(filter(None, (kind, shown(function.normal) if kind == "ratio" else ""))),
    )


# ---------------------------------------------------------------- final elements


def _element(element: FinalElement, effects: Sequence[FailureEffect]) -> Iterator[FunctionCheck]:
    signal = next((one for one in _moves(effects, Failure.OUTPUT_LOST, element)), "")
    yield FunctionCheck(
        f"{element.tag} without signal",
        f"Take the signal off {element.tag}.",
        HOLD if isinstance(element.opens_on, Hold) and not signal else signal,
        "; ".join((shown(element.opens_on), shown(element.signal))),
    )
    power = power_of(element)
    fails = sentence(next((one for one in _moves(effects, Failure.MOTIVE_POWER_LOST, element)), ""))
    yield FunctionCheck(
        f"{element.tag} without {power}",
        f"Take the {power} off {element.tag}.",
        HOLD if isinstance(element.fails, Hold) else fails,
        shown(element.fails),
    )


def _moves(effects: Sequence[FailureEffect], failure: Failure, element: FinalElement) -> Iterator[str]:
    for effect in effects:
        if effect.failure is not failure or element.tag not in effect.at:
            continue
        for move in effect.elements:
            if move.element.tag != element.tag or not isinstance(move.direction, int):
                continue
            if move.direction == 0:
                yield f"{element.tag} stays where it is."
            elif move.position == "stopped":
                yield f"{element.tag} stops."
            elif not move.position and known(element.kind) in ("variable-speed drive", "motor"):
                yield f"{element.tag} stops or falls to its lowest speed, as it is set."
            else:
                yield f"{moves_by_itself(element, move.direction)} fully."


# ---------------------------------------------------------------- interlocks


def _interlock(
    plant: Plant, interlock: Interlock, loop: Loop, elements: Sequence[FinalElement]
) -> Iterator[FunctionCheck]:
    own = acts_on(interlock, [*(element.tag for element in elements), loop.tag])
    acts = listed(f"{action.tag} {action_words(action)}" for action in own or tuple(interlock.actions.values()))
    voting = known(interlock.voting)
    held = isinstance(interlock.voting, Hold) or any(
        hold.tag == interlock.tag and hold.path == ("actions",) for hold in plant.register.holds
    )
    for initiator in interlock.initiators.values():
        yield FunctionCheck(
            f"{interlock.tag} by {initiator.tag}",
            _drive(initiator),
            HOLD if held else _acts(voting, len(interlock.initiators), acts),
            "; ".join((shown(voting), shown(initiator.direction), _limit_words(initiator.limit), _actions(own))),
        )
    yield FunctionCheck(
        f"{interlock.tag} reset",
        f"Bring {'the initiator' if len(interlock.initiators) == 1 else 'all initiators'} of {interlock.tag} back.",
        HOLD if isinstance(interlock.reset, Hold) else _resets(known(interlock.reset)),
        shown(interlock.reset),
    )


def _actions(actions: Iterable[InterlockAction]) -> str:
    """What an interlock does, with plain blanks: a workbook gives back no others."""
    return ", ".join(f"{action.tag} {action_words(action)}" for action in actions).replace(NO_BREAK, " ")


def _drive(initiator: Initiator) -> str:
    limit = " ".join(shown(part) for part in (initiator.direction, initiator.limit) if part is not None)
    delay = f" for more than {value(initiator.delay)}" if initiator.delay is not None else ""
    return f"Drive {initiator.tag} {limit or 'to its limit'}{delay}."


def _acts(voting: str | None, initiators: int, acts: str) -> str:
    if voting is None:
        if initiators == 1 and acts:
            return sentence(acts)
        return ""
    needed = int(voting.partition("oo")[0]) if voting.partition("oo")[0].isdigit() else 0
    if not acts or not needed:
        return ""
    if needed == 1:
        return sentence(acts)
    others = "one other" if needed == 2 else f"{needed - 1} others"
    return sentences(f"Alone it does nothing ({voting})", f"With {others}: {acts}")


def _resets(reset: str | None) -> str:
    if reset is None:
        return ""
    if reset.startswith("manual"):
        return sentence(f"Nothing moves before the reset ({with_printed_units(reset)})")
    return sentence(f"Reset: {with_printed_units(reset)}")
