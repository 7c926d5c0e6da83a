"""Rules on the functions between loops: ratio stations, selectors, sums and split ranges."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

from loopdoc.engineering.demand import operating_band
from loopdoc.engineering.direction import Undecided, path_sign
from loopdoc.engineering.pairing import ControlledLoop, Plant, normal_value
from loopdoc.register.model import Function, Loop, Output, known
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.units import UNITS, same_difference, same_kind
from loopdoc.rules.finding import Level
from loopdoc.rules.policy import Limits
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule
from loopdoc.rules.values import above, amount, below, equal, forward, measured_range, range_place, rounded

_SELECTORS = ("high select", "low select")
_NEEDED = {
    "ratio": (("span", "its span"),),
    "characteriser": (("curve", "its curve"),),
    "lead-lag": (("lag", "its lag"),),
}
"""What each kind of function needs besides its signals: key, and what it is in words."""


@rule(level=Level.WARNING, source="common practice")
def function_incomplete(function: Function, plant: Plant) -> Iterator[Draft]:
    """A function lacks an input, a destination or a value without which it does nothing.

    Why:
        A selector with one candidate selects nothing, and a ratio without its flow has nothing to multiply: either a
        controller's output leads past the function, or the function is left over from an earlier scheme. Without its
        curve, its lag or its span nobody can build it, and no rule can follow a signal through it.
    Breaks:
        A low select to which one output leads; a sum with one input; a ratio without `inputs` or without `span`; a
        characteriser without `curve`; a lead-lag without `lag`; a function without `to` or `outputs` (an error: whoever
        commands it moves nothing).
    Holds:
        A selector or a sum takes in two signals or more, a ratio one flow, a split range has two final elements, each
        function leads somewhere, and what its kind needs is given.
    What this check cannot see:
        A candidate that is a constant, such as a fixed limit: write a deviation that says so.
    """
    kind = need(function.kind, "the kind of the function")
    entering = len(plant.commanders.get(function.tag, ())) + len(function.inputs)
    if function.to is None and not function.outputs:
        if function.origin.place("outputs") != function.origin.key():
            not_checked("the outputs are on hold")
        yield draft(
            function.tag,
            f"it is a {kind} that leads nowhere",
            remedy="write `outputs:`" if kind == "split range" else "write `to:` with the loop that it commands",
            at=function.origin.key(),
            level=Level.ERROR,
        )
    if kind == "split range" and len(function.outputs) == 1:
        yield draft(
            function.tag,
            f"it is a split range with one output, {next(iter(function.outputs))}: there is nothing to split",
            remedy="add the other final element, or lead the controller to this one",
            at=function.origin.place("outputs"),
        )
    for key, what in _NEEDED.get(kind, ()):
        if getattr(function, key) in (None, ()):
            yield draft(
                function.tag,
                f"it is a {kind}, but {what} is not given",
                remedy=f"write `{key}:`, or `{{hold: reason}}` until it is known",
                at=function.origin.key(),
            )
    if function.inputs_held:
        not_checked("the inputs are on hold")
    lacking = ""
    if kind in (*_SELECTORS, "sum") and entering < 2:
        does = "to add" if kind == "sum" else "to choose between"
        signals = f"{'only one' if entering else 'no'} signal enters"
        lacking = f"{signals} it: there is nothing {does}"
    elif kind == "ratio" and not function.inputs:
        lacking = "no measurement enters it: there is nothing to multiply"
    elif not entering:
        lacking = "nothing enters it"
    if lacking:
        yield draft(
            function.tag,
            f"it is a {kind}, but {lacking}",
            remedy="lead the missing output to it, or name the measurement under `inputs`; or take the function out",
            at=function.origin.key(),
        )


# ---------------------------------------------------------------- ratio stations


@rule(level=Level.ERROR, source="common practice")
def ratio_range_short(function: Function, plant: Plant) -> Iterator[Draft]:
    """A ratio station cannot ask for the flow that is wanted, or asks for one that its secondary does not take.

    Why:
        The setpoint is the ratio times the wild flow. Where the span of the ratio times the flow as the plant runs
        goes beyond the secondary's setpoint limits or its range, the ratio is not held. Where the flows in normal
        running stand in a ratio outside the span, the station cannot hold the one to the other.
    Breaks:
        `span: 0.8 to 1.5` on 7 to 14 t/h over a secondary of 0 to 18 t/h: 21 t/h may be asked for. `normal: 1.6` with
        that span. Flows of 13.5 and 8 t/h in normal running, a ratio of 1.69.
    Holds:
        The span times the operating band of the input lies in the secondary's setpoint limits (or its range, where it
        has none), and both the normal ratio and the ratio of the two normal flows lie in the span. Where a controller
        sets the ratio, its output span lies in the station's, and `secondary-range-short` compares the ranges.
    What this check cannot see:
        Start-up, where a ratio station is usually out of use.
    """
    only_if(known(function.kind) == "ratio")
    span = forward(need(function.span, "the span of the ratio"), "the span of the ratio").to("fraction")
    normal = known(function.normal)
    is_outside = normal is not None and (below(normal, span.low) or above(normal, span.high))
    if is_outside:
        yield draft(
            function.tag,
            f"its normal ratio, {normal:g}, lies outside its span, {span.low:g} to {span.high:g}",
            remedy="give it a span that holds the normal ratio, or correct the ratio",
            at=function.origin.place("normal"),
            related=((function.origin.place("span"), "the span of the ratio"),),
        )
    yield from _set_beyond(function, span, plant)
    to = need(function.to, "the destination")
    secondary = plant.controlled.get(to)
    if secondary is None:
        not_checked(f"{to} is no loop with a controller")
    if len(function.inputs) != 1:
        not_checked("it does not have one input to multiply")
    (tag,) = function.inputs
    wild = plant.register.loops.get(tag) or plant.loop_of_transmitter.get(tag)
    flow = operating_band(wild) if wild else None
    if wild is None or flow is None:
        not_checked(f"the operating band of {tag} is not given")
    band = measured_range(secondary.loop)
    if not same_kind(flow.unit, band.unit):
        not_checked(f"{tag} and {to} have units of different kinds")
    flow = flow.to(band.unit.symbol)
    if not is_outside:  # else the normal flows only say the same again
        yield from _of_normal_flows(function, span, wild, secondary)
    if plant.commanders.get(function.tag):
        return
    asked = Range(span.low * flow.low, span.high * flow.high, band.unit)
    setpoint = known(secondary.controller.setpoint)
    for end, reached, outside in (("low", asked.low, below), ("high", asked.high, above)):
        limit = known(getattr(setpoint, end)) if setpoint else None
        bound = limit.to(band.unit.symbol) if limit and same_kind(limit.unit, band.unit) else getattr(band, end)
        place = setpoint.origin.place(end) if setpoint and limit else range_place(secondary.loop)
        what = f"the {end} {'setpoint limit' if limit else 'end of the range'} of {to}"
        if outside(reached, bound):
            yield draft(
                function.tag,
                f"its span, {span.low:g} to {span.high:g}, on {tag} ({rounded(flow)} in operation) asks {to} for "
                f"{amount(reached, band.unit)}, beyond {what}, {amount(bound, band.unit)}",
                remedy=f"shorten the span, or let {to} take {amount(reached, band.unit)}",
                at=function.origin.place("span"),
                related=((place, what),),
            )


def _set_beyond(function: Function, span: Range, plant: Plant) -> Iterator[Draft]:
    """Findings on controllers that set a ratio beyond the span of the station."""
    for tag in plant.commanders.get(function.tag, ()):
        controlled = plant.controlled.get(tag)
        output = known(controlled.controller.output) if controlled else None
        asked = known(output.span) if output else None
        if output is None or asked is None or asked.unit.kind != "fraction":
            continue
        written = asked.to("fraction")
        if below(written.low, span.low) or above(written.high, span.high):
            yield draft(
                function.tag,
                f"{tag} may set a ratio of {written.low:g} to {written.high:g}, beyond its span, "
                f"{span.low:g} to {span.high:g}",
                remedy="let the two spans agree",
                at=function.origin.place("span"),
                related=((output.origin.place("span"), f"the output span of {tag}"),),
            )


def _of_normal_flows(function: Function, span: Range, wild: Loop, secondary: ControlledLoop) -> Iterator[Draft]:
    flow, held = normal_value(wild), normal_value(secondary.loop)
    if flow is None or held is None or not same_kind(flow.unit, held.unit) or not flow.value:
        return
    ratio = held.to(flow.unit.symbol) / flow.value
    if below(ratio, span.low) or above(ratio, span.high):
        yield draft(
            function.tag,
            f"in normal running {secondary.tag} stands at {held} and {wild.tag} at {flow}, a ratio of {ratio:.3g}; "
            f"its span is {span.low:g} to {span.high:g}",
            remedy="give it a span that holds this ratio, or correct the normal flows",
            at=function.origin.place("span"),
            related=(
                (secondary.loop.origin.place("operating", "normal"), f"the normal flow of {secondary.tag}"),
                (wild.origin.place("operating", "normal"), f"the normal flow of {wild.tag}"),
            ),
        )


# ---------------------------------------------------------------- selectors


@rule(level=Level.WARNING, source="common practice: a selector compares signals of one scale")
def selector_span_mismatch(function: Function, plant: Plant) -> Iterator[Draft]:
    """The candidates of a selector have different output spans.

    Why:
        Many control systems compare the percentages. With 0 to 12 t/h beside 0 to 15 t/h, 60 % is 7.2 t/h from one and
        9 t/h from the other, and the selector lets the wrong one pass.
    Breaks:
        FIC-2001 with `span: 0 to 12 t/h` and PDIC-2016 with `span: 0 to 15 t/h`, both leading to FY-1011.
    Holds:
        All candidates have one span, in whatever units of one kind.
    What this check cannot see:
        A control system that compares in engineering units, for which the spans may differ: accept it by a deviation.
    """
    only_if(known(function.kind) in _SELECTORS)
    spans: list[tuple[str, Range, ControlledLoop]] = []
    for controlled in _candidates(function, plant):
        output = need(controlled.controller.output, f"the output of {controlled.tag}")
        spans.append((controlled.tag, need(output.span, f"the output span of {controlled.tag}"), controlled))
    only_if(len(spans) > 1)
    first, span, leader = spans[0]
    for tag, other, controlled in spans[1:]:
        if not same_difference(other.unit, span.unit):
            not_checked(f"the output spans of {first} and {tag} are of different kinds")
        there = other.to(span.unit.symbol)
        if not (equal(there.low, span.low) and equal(there.high, span.high)):
            yield draft(
                function.tag,
                f"it compares {first} with an output span of {span} and {tag} with {other}: 60 % are "
                f"{amount(span.low + 0.6 * span.span, span.unit)} from the one and "
                f"{amount(other.low + 0.6 * other.span, other.unit)} from the other",
                remedy="give its candidates one span, or say in a deviation that it compares in engineering units",
                at=controlled.controller.origin.place("output", "span"),
                related=((leader.controller.origin.place("output", "span"), f"the output span of {first}"),),
            )


@rule(level=Level.WARNING, source="common practice (override control)")
def selector_direction(function: Function, plant: Plant) -> Iterator[Draft]:
    """A selector picks the candidate that lets a measurement run to its hazard.

    Why:
        A low select keeps the command down, and so keeps a measurement that rises with it from going high. Where every
        candidate is to be kept from going low instead, the selector chooses each time the one that does least against
        its hazard: a high select was meant.
    Breaks:
        A low select between a pressure and a flow controller that both raise steam, both with `hazard: low`.
    Holds:
        At least one candidate with a hazard is kept from it: by a low select a measurement that rises with the command
        from high, one that falls with it from low; by a high select the other way round.
    What this check cannot see:
        Which of the candidates was meant as the override.
    """
    kind = known(function.kind)
    only_if(kind in _SELECTORS)
    candidates = _candidates(function, plant)
    only_if(candidates)
    guarded: list[tuple[ControlledLoop, str, str]] = []
    for controlled in candidates:
        hazard = need(controlled.loop.hazard, f"the hazard of {controlled.tag}")
        if hazard == "none":
            continue
        for route in controlled.routes:
            sign = path_sign(controlled, route) if function in route.via else None
            if isinstance(sign, Undecided):
                not_checked(sign.reason)
            if sign is not None:
                guarded.append((controlled, hazard, "high" if (kind == "low select") == (sign.sign > 0) else "low"))
    only_if(guarded)
    if any(hazard in ("both", kept) for _, hazard, kept in guarded):
        return
    told = " and ".join(f"{controlled.tag} (hazard {hazard})" for controlled, hazard, _ in guarded)
    other = "high select" if kind == "low select" else "low select"
    yield draft(
        function.tag,
        f"as a {kind} it keeps measurements from going {guarded[0][2]}, but its candidates are {told}",
        remedy=f"write `kind: {other}`, or correct the hazards",
        at=function.origin.place("kind"),
        related=tuple(
            (controlled.loop.origin.place("hazard"), f"the hazard of {controlled.tag}") for controlled, *_ in guarded
        ),
    )


def _candidates(function: Function, plant: Plant) -> tuple[ControlledLoop, ...]:
    """The controllers among which a selector chooses, where their outputs lead straight to it."""
    found = (plant.controlled.get(tag) for tag in plant.commanders.get(function.tag, ()))
    return tuple(controlled for controlled in found if controlled)


# ---------------------------------------------------------------- characterisers


@rule(level=Level.ERROR, source="common practice: a loop keeps its sign over the whole of its output")
def characteriser_not_monotonic(function: Function, plant: Plant) -> Iterator[Draft]:
    """The curve of a characteriser turns back, or is not in order.

    Why:
        Where the curve falls after it has risen, the loop's gain changes its sign: negative feedback becomes positive,
        and the controller drives the measurement away. Where the curve is level (a warning) its output moves nothing.
    Breaks:
        `curve: [{at: 0 %, gives: 0 %}, {at: 60 %, gives: 80 %}, {at: 100 %, gives: 70 %}]` behind a controller; points
        whose `at` does not rise from one to the next.
    Holds:
        What enters rises from point to point, and what comes out rises, or falls, all the way. The curve of a
        measurement that is fed forward may turn: it stands in no loop.
    What this check cannot see:
        Whether the curve is that of the plant.
    """
    only_if(known(function.kind) == "characteriser")
    points = need(function.curve or None, f"the curve of {function.tag}")
    entering = [need(point.at, "a point of the curve") for point in points]
    leaving = [need(point.gives, "a point of the curve") for point in points]
    commanded = any(tag in plant.controlled for tag in plant.commanders.get(function.tag, ()))
    turned = 0.0
    steps = zip(points[1:], pairwise(entering), pairwise(leaving), strict=True)
    for point, (left, right), (low, high) in steps:
        if not same_kind(left.unit, right.unit) or not same_kind(low.unit, high.unit):
            not_checked("the points of the curve have units of different kinds")
        if not below(left.value, right.to(left.unit.symbol)):
            yield draft(
                function.tag,
                f"its curve goes from {left} to {right}: what enters does not rise from point to point",
                remedy="put the points in rising order of `at`, each once",
                at=point.origin.place("at"),
            )
            return
        rise = high.to(low.unit.symbol) - low.value
        if equal(rise, 0.0) and commanded:
            yield draft(
                function.tag,
                f"from {left} to {right} its curve stays at {low}: the output of the controller moves nothing there",
                remedy="let the curve rise, or limit the controller's output to the part that does",
                at=point.origin.place("gives"),
                level=Level.WARNING,
            )
        elif turned * rise < 0 and commanded:
            yield draft(
                function.tag,
                f"its curve turns at {left}: from {low} it goes {'down' if rise < 0 else 'up'} to {high}, and the "
                "loop's gain changes its sign there",
                remedy=f"let the curve {'rise' if turned > 0 else 'fall'} all the way",
                at=point.origin.place("gives"),
            )
            return
        turned = turned or rise


@rule(level=Level.WARNING, source="common practice (reset wind-up)")
def characteriser_short(function: Function, plant: Plant) -> Iterator[Draft]:
    """The curve of a characteriser ends inside the output limits of the controller that passes through it.

    Why:
        Beyond its ends a curve is level: the output moves on and nothing follows it, and the controller winds up.
    Breaks:
        A curve from 0 to 80 % behind an output with limits of 0 and 100 %.
    Holds:
        The points reach from the low to the high output limit (the ends of the output span, or 0 and 100 %, where none
        are given).
    What this check cannot see:
        A curve that is level at its end on purpose: accept it by a deviation.
    """
    only_if(known(function.kind) == "characteriser")
    commanders = _candidates(function, plant)
    only_if(commanders)
    points = need(function.curve or None, f"the curve of {function.tag}")
    first, last = (need(points[index].at, "a point of the curve") for index in (0, -1))
    for controlled in commanders:
        output = need(controlled.controller.output, f"the output of {controlled.tag}")
        for end, point, outside in (("low", first, below), ("high", last, above)):
            limit = _output_end(output, end)
            if not same_kind(limit.unit, point.unit):
                not_checked(f"the curve and the output of {controlled.tag} are in units of different kinds")
            if outside(limit.to(point.unit.symbol), point.value):
                yield draft(
                    function.tag,
                    f"its curve {'begins' if end == 'low' else 'ends'} at {point}, but the output of {controlled.tag} "
                    f"goes {'down' if end == 'low' else 'up'} to {limit}",
                    remedy=f"give the curve a point at {limit}, or limit the output to {point}",
                    at=points[0 if end == "low" else -1].origin.place("at"),
                    related=((output.origin.place(_end_key(output, end)), f"the output of {controlled.tag}"),),
                )


def _end_key(output: Output, end: str) -> str:
    """The key that decides one end of an output."""
    return end if getattr(output, end) is not None else "span"


def _output_end(output: Output, end: str) -> Quantity:
    """The output limit at one end: as written, or the end of the output span, or 0 and 100 %."""
    limit = getattr(output, end)
    if limit is not None:
        written: Quantity = need(limit, f"the {end} output limit")
        return written
    if output.span is None:
        return Quantity(0.0 if end == "low" else 100.0, UNITS["%"])
    span = need(output.span, "the output span")
    return Quantity(span.low if end == "low" else span.high, span.unit)


# ---------------------------------------------------------------- split ranges


@rule(level=Level.WARNING, source="common practice; see policy split_range_gap")
def split_range_gap(function: Function, limits: Limits) -> Iterator[Draft]:
    """A band of a split range's output moves no final element.

    Why:
        Inside the band the controller integrates and nothing happens: the loop has a dead zone, and the
        measurement drifts across it before the next valve answers.
    Breaks:
        `outputs: {PV-3001A: 60 to 100 %, PV-3001B: 40 to 0 %}`: between 40 and 60 % both valves stand still.
    Holds:
        The branches meet (`50 to 100 %` and `50 to 0 %`), or leave no more than the policy allows.
    What this check cannot see:
        A gap that is wanted, so that two opposed valves are never open together: accept it by a deviation.
    """
    only_if(known(function.kind) == "split range" and len(function.outputs) > 1)
    for lower, top, upper, bottom, _ in _neighbours(function):
        if above(bottom - top, limits.split_range_gap):
            yield draft(
                function.tag,
                f"between {top:g} and {bottom:g} % of the output neither {lower} nor {upper} moves",
                remedy=f"let {upper} begin where {lower} ends, or accept the gap by a deviation with its reason",
                at=function.origin.place("outputs", upper),
                related=((function.origin.place("outputs", lower), f"where {lower} ends"),),
            )


@rule(level=Level.WARNING, source="common practice; see policy split_range_overlap")
def split_range_overlap(function: Function, limits: Limits) -> Iterator[Draft]:
    """Two final elements of a split range move together over a band of the output.

    Why:
        Where the branches overlap both elements move: the gain of the loop is the sum of the two there, and two
        opposed valves work against each other.
    Breaks:
        `outputs: {PV-3001A: 40 to 100 %, PV-3001B: 60 to 0 %}`: between 40 and 60 % both move.
    Holds:
        The branches meet, or overlap by no more than the policy allows.
    What this check cannot see:
        An overlap that is wanted, as to keep a small valve from shutting before the large one opens: accept it by
        a deviation.
    """
    only_if(known(function.kind) == "split range" and len(function.outputs) > 1)
    for lower, top, upper, bottom, end in _neighbours(function):
        both_to = min(top, end)
        if above(both_to - bottom, limits.split_range_overlap):
            yield draft(
                function.tag,
                f"between {bottom:g} and {both_to:g} % of the output {lower} and {upper} both move",
                remedy=f"let {upper} begin where {lower} ends, or accept the overlap by a deviation with its reason",
                at=function.origin.place("outputs", upper),
                related=((function.origin.place("outputs", lower), f"where {lower} ends"),),
            )


def _neighbours(function: Function) -> Iterator[tuple[str, float, str, float, float]]:
    """Each branch of a split range after those below it: the element that reaches furthest and where it ends, the
    next element, and where that one begins and ends [% of the output]."""
    (lower, _, top), *above_it = _branches(function)
    for element, bottom, end in above_it:
        yield lower, top, element, bottom, end
        if end > top:
            lower, top = element, end


def _branches(function: Function) -> list[tuple[str, float, float]]:
    """The branches of a split range in order: element, and the output in percent over which it moves."""
    found = []
    for element, branch in function.outputs.items():
        if branch.unit.kind != "fraction":
            not_checked(f"the branch of {element} is not in percent of the output")
        span = branch.to("%")
        found.append((element, min(span.low, span.high), max(span.low, span.high)))
    return sorted(found, key=lambda one: one[1:])

