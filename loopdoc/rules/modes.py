"""Rules on modes, and on what a controller does while its output is not followed."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.register.model import Controller, Function, Interlock, Loop, Modes, Output, known
from loopdoc.register.place import Place
from loopdoc.register.quantity import Quantity, QuantityError, parse_quantity
from loopdoc.register.units import UNITS
from loopdoc.rules.finding import Level
from loopdoc.rules.pairing import place_of_command
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule
from loopdoc.rules.values import Scale, above, below

_COMMANDING = ("automatic", "cascade")
"""Modes in which a controller moves its own output."""
_CHOSEN = ("manual", "automatic", "cascade")
"""Modes that an operator chooses; into the others the control system goes by itself."""
_SELECTORS = ("high select", "low select")


@rule(level=Level.ERROR, source="common practice; cascade mode as in IEC 61804-2, MODE_BLK (from memory)")
def mode_normal_conflict(secondary: ControlledLoop, plant: Plant) -> Iterator[Draft]:
    """The normal modes of a primary and its secondary do not go together.

    Why:
        A primary in automatic over a secondary that is not in cascade commands nothing: its output tracks or
        winds up while the operators believe that it controls. A secondary in cascade under nobody has no
        setpoint.
    Breaks:
        TIC-2014 with `normal: automatic` over FIC-2011 with `normal: automatic`; FIC-2011 with
        `normal: cascade` where no output leads to it.
    Holds:
        Under a primary whose normal mode is automatic or cascade, or under a function, the secondary's
        normal mode is cascade; and a loop in cascade has a commander.
    What this check cannot see:
        The modes at start-up, which belong in the narrative.
    """
    only_if(not any(secondary.tag in ring for ring in plant.cycles))  # nobody commands first in a ring
    modes = secondary.controller.modes
    commanders = plant.commanders.get(secondary.tag, ())
    if not commanders and modes is None:
        return
    written = need(modes, "the modes")
    normal = need(written.normal, "the normal mode")
    place = written.origin.place("normal")
    if not commanders:
        if normal == "cascade":
            yield draft(
                secondary.tag,
                "its normal mode is cascade, but nothing commands it",
                remedy=f"lead the output of its primary to {secondary.tag}, or write `normal: automatic`",
                at=place,
            )
        return
    if normal == "cascade":
        return
    links = plant.links_to.get(secondary.tag, ())
    commanding = next((link.primary for link in links if _normal_mode(link.primary) in _COMMANDING), None)
    if commanding is not None:
        yield draft(
            secondary.tag,
            f"its normal mode is {normal}, but {commanding.tag}, with normal mode {_normal_mode(commanding)}, "
            "commands it; it follows in cascade only",
            remedy=f"write `normal: cascade`, or another normal mode for {commanding.tag}",
            at=place,
            related=((_mode_place(commanding), f"the normal mode of {commanding.tag}"),),
        )
    elif not links:
        yield draft(
            secondary.tag,
            f"its normal mode is {normal}, but {commanders[0]} commands it; it follows in cascade only",
            remedy="write `normal: cascade`",
            at=place,
            related=((place_of_command(plant, commanders[0], secondary.tag), f"{commanders[0]} commands it"),),
        )
    for link in links:
        need(need(link.primary.controller.modes, "the primary's modes").normal, "the primary's normal mode")


def _normal_mode(controlled: ControlledLoop) -> str | None:
    modes = known(controlled.controller.modes)
    return known(modes.normal) if modes else None


def _mode_place(controlled: ControlledLoop) -> Place:
    return controlled.controller.origin.place("modes", "normal")


@rule(level=Level.ERROR, source="common practice; mode as in IEC 61804-2, MODE_BLK, permitted (from memory)")
def mode_not_permitted(part: ControlledLoop | Interlock, plant: Plant) -> Iterator[Draft]:
    """A controller is put into a mode that is not among its permitted ones.

    Why:
        The control system refuses a mode that is not permitted: a normal mode that the operators cannot choose is
        never reached. A controller that is forced into such a mode by an interlock or a bad measurement stands where
        nobody may move it (a warning).
    Breaks:
        `modes: {normal: cascade, permitted: [manual, automatic]}`; `on_bad_measurement: {mode: manual}` where only
        automatic and cascade are permitted.
    Holds:
        The normal mode, the mode on a bad measurement and those into which interlocks force a controller are among
        `permitted`. Out of service, initialisation and remote output need not be: nobody chooses them.
    What this check cannot see:
        The modes that the control system permits.
    """
    if isinstance(part, Interlock):
        yield from _forced(part, plant)
        return
    controller = part.controller
    modes = need(controller.modes, "the modes")
    permitted = _permitted(modes)
    normal = need(modes.normal, "the normal mode")
    if normal in _CHOSEN and normal not in permitted:
        yield draft(
            part.tag,
            f"its normal mode is {normal}, but {_only(permitted)} permitted",
            remedy=f"permit {normal}, or write another normal mode",
            at=modes.origin.place("normal"),
            related=((modes.origin.place("permitted"), "the permitted modes"),),
        )
    bad = known(controller.on_bad_measurement)
    mode = known(bad.mode) if bad else None
    if bad and mode in _CHOSEN and mode not in permitted:
        yield draft(
            part.tag,
            f"on a bad measurement it goes to {mode}, but {_only(permitted)} permitted",
            remedy=f"permit {mode}, or write another mode for a bad measurement",
            at=bad.origin.place("mode"),
            related=((modes.origin.place("permitted"), "the permitted modes"),),
            level=Level.WARNING,
        )


def _forced(interlock: Interlock, plant: Plant) -> Iterator[Draft]:
    """Findings on controllers that an interlock forces into a mode that is not permitted."""
    actions = [action for action in interlock.actions.values() if action.mode is not None]
    only_if(actions)
    for action in actions:
        mode = known(action.mode)
        controlled = plant.controlled.get(action.tag)
        modes = known(controlled.controller.modes) if controlled else None
        if modes and modes.permitted and mode in _CHOSEN and mode not in modes.permitted:
            yield draft(
                interlock.tag,
                f"it forces {action.tag} to {mode}, but {_only(modes.permitted)} permitted there",
                remedy=f"permit {mode} at {action.tag}, or force another mode",
                at=action.origin.place("mode"),
                related=((modes.origin.place("permitted"), f"the permitted modes of {action.tag}"),),
                level=Level.WARNING,
            )


def _only(permitted: tuple[str, ...]) -> str:
    """The permitted modes as the subject of a sentence, with its verb."""
    return f"only {' and '.join(permitted)} {'is' if len(permitted) == 1 else 'are'}"


def _permitted(modes: Modes) -> tuple[str, ...]:
    if not modes.permitted:
        not_checked("the permitted modes are not given")
    return modes.permitted


# ---------------------------------------------------------------- a bad measurement


@rule(level=Level.WARNING, source="common practice; NAMUR NE 107 and IEC 61804-2 status bad (from memory)")
def bad_measurement_undefined(controlled: ControlledLoop) -> Iterator[Draft]:
    """The register does not say what a controller does when its measurement is bad, or lets it control on.

    Why:
        What nobody has decided is decided by the default of the control system: one holds the output, another drives
        on by a reading at the end of the range. The narrative then says nothing of the failure that comes most often.
    Breaks:
        A controller without `on_bad_measurement`, or with a mode and no output; `mode: automatic`.
    Holds:
        `on_bad_measurement: {mode: manual, output: hold}`, or an output to go to.
    What this check cannot see:
        Whether the choice is right for the plant; the failure effects of the narrative show what comes of it.
    """
    bad = controlled.controller.on_bad_measurement
    if bad is None:
        yield draft(
            controlled.tag,
            "the register does not say what the controller does when its measurement is bad",
            remedy="write `on_bad_measurement: {mode: manual, output: hold}`, or the output to go to",
            at=controlled.controller.origin.key(),
        )
        return
    policy = need(bad, "the response to a bad measurement")
    if policy.mode is None or policy.output is None:
        missing = "into which mode the controller goes" if policy.mode is None else "what its output does"
        yield draft(
            controlled.tag,
            f"for a bad measurement the register does not say {missing}",
            remedy="write both, as in `{mode: manual, output: hold}`",
            at=policy.origin.key(),
        )
    mode = known(policy.mode)
    if mode in _COMMANDING:
        yield draft(
            controlled.tag,
            f"on a bad measurement it goes to {mode}, and goes on controlling by what it reads",
            remedy="write `mode: manual`, with the output to hold or to go to",
            at=policy.origin.place("mode"),
        )
    for written, what in ((policy.mode, "mode"), (policy.output, "output")):
        if written is not None:
            need(written, f"the {what} on a bad measurement")


@rule(level=Level.WARNING, source="common practice")
def fallback_outside_output_limits(controlled: ControlledLoop) -> Iterator[Draft]:
    """The output to go to on a bad measurement lies outside the output limits.

    Why:
        Either the limits keep the output from going there, and the final element stops short of the position that
        was wanted, or the limits do not mean what the register says.
    Breaks:
        `on_bad_measurement: {mode: manual, output: 0 %}` with `output: {low: 35 %}`.
    Holds:
        The output lies between the limits, or is held.
    What this check cannot see:
        A control system whose limits act in automatic only; write a deviation that says so.
    """
    bad = known(controlled.controller.on_bad_measurement)
    output = known(controlled.controller.output)
    only_if(bad and output and bad.output is not None and bad.output != "hold")
    assert bad is not None
    assert output is not None
    written = need(bad.output, "the output on a bad measurement")
    try:
        fallback = _in_output_units(parse_quantity(written), output)
    except QuantityError:
        not_checked("the output on a bad measurement could not be read")
    for end, outside in (("low", below), ("high", above)):
        limit = getattr(output, end)
        if limit is None:
            continue
        bound = need(limit, f"the {end} output limit")
        scale = Scale(fallback.unit)
        if not scale.takes(bound.unit):
            not_checked(f"the {end} output limit has a unit of another kind")
        if outside(fallback.value, scale.value(bound)):
            told = written if str(fallback) == written else f"{written} ({fallback})"
            yield draft(
                controlled.tag,
                f"on a bad measurement its output goes to {told}, {'below' if end == 'low' else 'above'} "
                f"the {end} output limit, {bound}",
                remedy="bring the output between the limits, or move the limit",
                at=bad.origin.place("output"),
                related=((output.origin.place(end), f"the {end} output limit, {bound}"),),
            )


def _in_output_units(fallback: Quantity, output: Output) -> Quantity:
    """An output in percent as what it asks of the secondary, where the output has a span."""
    span = known(output.span)
    if span is None or fallback.unit != UNITS["%"] or span.unit == UNITS["%"]:
        return fallback
    return Quantity(float(f"{span.low + span.span * fallback.value / 100:.6g}"), span.unit)


# ---------------------------------------------------------------- an output that is not followed


@rule(level=Level.WARNING, source="ISA-TR5.9-2023, anti-reset windup and initialisation (from memory)")
def tracking_missing(controlled: ControlledLoop, plant: Plant) -> Iterator[Draft]:
    """A primary does nothing, or nothing is said of what it does, while its secondary does not follow.

    Why:
        While the secondary is in manual or at a limit, the primary's output moves nothing, and its reset adds up. When
        the cascade is closed again the setpoint jumps to wherever the output has wandered.
    Breaks:
        TIC-2014 over FIC-2011 without `when_not_followed`, or with `when_not_followed: nothing`.
    Holds:
        `when_not_followed: track` (the output follows the secondary's setpoint or measurement) or `hold`. Controllers
        whose output passes a selector are judged by `selector-tracking-missing`; one that moves a final element alone
        is held by its own output limits.
    What this check cannot see:
        Whether the control system is configured so.
    """
    commands = any(isinstance(route.end, Loop) for route in controlled.routes)
    only_if(commands and not _selectors(controlled) and not any(controlled.tag in ring for ring in plant.cycles))
    written = controlled.controller.when_not_followed
    ends = " and ".join(dict.fromkeys(route.end.tag for route in controlled.routes))
    if written is None:
        yield draft(
            controlled.tag,
            f"the register does not say what it does while {ends} does not follow",
            remedy="write `when_not_followed: track`",
            at=controlled.controller.origin.key(),
        )
    elif need(written, "what it does when it is not followed") == "nothing":
        yield draft(
            controlled.tag,
            f"it does nothing while {ends} does not follow: {_consequence(controlled.controller)}",
            remedy="write `when_not_followed: track`, and configure it so",
            at=controlled.controller.origin.place("when_not_followed"),
            related=((controlled.controller.origin.place("output", "to"), f"its output goes to {ends}"),),
        )


@rule(level=Level.ERROR, source="ISA-TR5.9-2023, anti-reset windup, override controllers (from memory)")
def selector_tracking_missing(controlled: ControlledLoop) -> Iterator[Draft]:
    """A controller winds up while the selector behind it chooses another one.

    Why:
        The controller that is not selected sees an error that its output does not change. Its reset carries the output
        to a limit, and when it ought to take over it first has to come all the way back: the override acts too late.
    Breaks:
        PDIC-2016 with a reset and `when_not_followed: nothing`, leading to the low select FY-1011. Where nothing is
        said of it, a warning.
    Holds:
        Each candidate of a selector has `when_not_followed: track` or `hold`, by external reset or by tracking the
        selected signal; or it has no reset, and nothing to wind up.
    What this check cannot see:
        Whether the offset that keeps the candidates apart is right.
    """
    selectors = _selectors(controlled)
    only_if(selectors)
    controller = controlled.controller
    names = " and ".join(selector.tag for selector in selectors)
    written = controller.when_not_followed
    if written is None:
        yield draft(
            controlled.tag,
            f"the register does not say what it does while {names} chooses another controller",
            remedy="write `when_not_followed: track`",
            at=controller.origin.key(),
            related=((selectors[0].origin.key(), f"the {known(selectors[0].kind)} {selectors[0].tag}"),),
            level=Level.WARNING,
        )
    elif need(written, "what it does when it is not followed") == "nothing" and _resets(controller):
        yield draft(
            controlled.tag,
            f"it has a reset and does nothing while {names} chooses another controller: it winds up and acts too late",
            remedy="write `when_not_followed: track`, and give it the selected signal as external reset",
            at=controller.origin.place("when_not_followed"),
            related=((selectors[0].origin.key(), f"the {known(selectors[0].kind)} {selectors[0].tag}"),),
        )


def _selectors(controlled: ControlledLoop) -> tuple[Function, ...]:
    """The selectors that a controller's output passes, once each."""
    found = {f.tag: f for route in controlled.routes for f in route.via if known(f.kind) in _SELECTORS}
    return tuple(found.values())


def _resets(controller: Controller) -> bool:
    return controller.reset is not None or controller.repeats is not None


def _consequence(controller: Controller) -> str:
    return "it winds up" if _resets(controller) else "the setpoint jumps when the cascade is closed again"
