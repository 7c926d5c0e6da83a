"""Rules on ranges, limits and what a cascade asks of its secondary."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.demand import Demand, demand
from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.pairing import CascadeLink, ControlledLoop, Plant
from loopdoc.register.model import Function, Hold, Instrument, Loop, Output, Part, known
from loopdoc.register.place import Place
from loopdoc.register.quantity import Range
from loopdoc.register.units import Unit
from loopdoc.rules.finding import Level
from loopdoc.rules.policy import Limits
from loopdoc.rules.rule import Draft, NotChecked, draft, need, not_checked, only_if, rule
from loopdoc.rules.values import (
    Reading,
    Scale,
    above,
    amount,
    below,
    forward,
    measured_range,
    range_in_both,
    range_place,
    reading,
    readings,
    rounded,
    scale_in,
)


@rule(level=Level.ERROR, source="IEC 61987-1:2006, lower and upper range value (from memory)")
def range_reversed(part: Loop | Instrument | Function) -> Iterator[Draft]:
    """The low end of a range or of a pair of limits is not below its high end.

    Why:
        Percent of range, limits and spans are reckoned from the low end upwards. A reversed range turns the
        sign of the loop without any declared reversal, and a range of no span has no percent at all. A
        setpoint between reversed limits does not exist.
    Breaks:
        `range: 120 to 60 degC`; `span: 12 to 0 t/h` for a primary's output; setpoint limits with `low: 92 degC`
        and `high: 78 degC`; a normal value that is not between its low and its high.
    Holds:
        Each low end is below its high end. The ranges of a split range may be written downwards (`50 to 0 %`:
        that valve opens as the output falls), but not without a span.
    What this check cannot see:
        A transmitter that is calibrated the other way round than written.
    """
    ranges = tuple(_ranges(part))
    for what, written, holder, key in ranges:
        if isinstance(written, Range) and written.span <= 0:
            fault, remedy = (
                ("its two ends are the same", "write its low and its high end")
                if written.span == 0
                else ("its first end is above its second", f"write `{Range(written.high, written.low, written.unit)}`")
            )
            yield draft(part.tag, f"{what} is {written}: {fault}", remedy=remedy, at=holder.origin.place(key))
    if isinstance(part, Loop):
        yield from _orders(part)
    elif isinstance(part, Function):
        for element, opening in part.outputs.items():
            if opening.span == 0:
                yield draft(
                    part.tag,
                    f"{element} has {opening} of the output, which leaves nothing to move it with",
                    remedy=f"write the output at which {element} is shut, then the one at which it is fully open",
                    at=part.origin.place("outputs", element),
                )
    for what, written, *_ in ranges:
        if written is not None:
            need(written, what)


def _ranges(part: Loop | Instrument | Function) -> Iterator[tuple[str, Range | Hold | None, Part, str]]:
    """Each range in words, with the part and the key under which it stands."""
    if isinstance(part, Function):
        yield "the span of the ratio", part.span, part, "span"
        return
    measurement = known(part.measurement)
    if measurement:
        yield "the measurement range", measurement.range, measurement, "range"
    output = _output(part) if isinstance(part, Loop) else None
    if output:
        yield "the output span", output.span, output, "span"


def _output(loop: Loop) -> Output | None:
    controller = known(loop.controller)
    return known(controller.output) if controller else None


def _orders(loop: Loop) -> Iterator[Draft]:
    """Findings on low, normal and high values that are out of order."""
    controller = known(loop.controller)
    groups: tuple[tuple[str, Part | None], ...] = (
        ("operating", known(loop.operating)),
        ("setpoint", known(controller.setpoint) if controller else None),
        ("output", _output(loop)),
    )
    for name, group in groups:
        if group is None:
            continue
        values = {key: known(getattr(group, key, None)) for key in ("low", "normal", "high")}
        for lower, upper in (("low", "normal"), ("normal", "high"), ("low", "high")):
            low, high = values[lower], values[upper]
            if low is None or high is None:
                continue
            scale = Scale(high.unit) if name == "output" else scale_in(high.unit, loop)
            if not scale.takes(low.unit):
                continue
            if lower == "low" and upper == "high" and values["normal"] is not None:
                continue
            limit = scale.value(low)
            # The normal value may be one of the limits; a low limit must leave room below the high one.
            if above(limit, high.value) or ("normal" not in (lower, upper) and not below(limit, high.value)):
                relation = "is above" if above(limit, high.value) else "equals"
                yield draft(
                    loop.tag,
                    f"{name} {lower}, {scale.told(low)}, {relation} {name} {upper}, {high}",
                    remedy="put the values in order",
                    at=group.origin.place(upper),
                    related=((group.origin.place(lower), f"{name} {lower}"),),
                )


# ---------------------------------------------------------------- a loop against its own range


@rule(level=Level.ERROR, source="common practice")
def setpoint_limit_outside_range(controlled: ControlledLoop) -> Iterator[Draft]:
    """A setpoint limit or the normal setpoint lies outside the measurement range.

    Why:
        The measurement can never show such a setpoint: the error stays, and the controller winds up until
        its output is at its limit.
    Breaks:
        `setpoint: {high: 125 degC}` on a range of 60 to 120 degC.
    Holds:
        Setpoint limits and normal setpoint lie in the range or at its ends. Limits that are not given are
        the ends of the range.
    What this check cannot see:
        Setpoints that a program or an operator may enter past the limits.
    """
    setpoint = controlled.controller.setpoint
    only_if(setpoint is not None)
    yield from _outside(controlled.loop, need(setpoint, "the setpoint"), "setpoint")


@rule(level=Level.ERROR, source="common practice")
def operating_outside_range(loop: Loop) -> Iterator[Draft]:
    """The plant is said to run where the transmitter cannot measure.

    Why:
        Outside its range the measurement stands still at an end. The controller and the operator act on a
        value that is not there, and no alarm can come.
    Breaks:
        `operating: {low: 50 degC}` on a range of 60 to 120 degC.
    Holds:
        Low, normal and high operating values lie in the range or at its ends.
    What this check cannot see:
        Start-up and upset conditions that the operating band leaves out.
    """
    only_if(loop.operating is not None)
    yield from _outside(loop, need(loop.operating, "the operating band"), "operating")


def _outside(loop: Loop, group: Part, name: str) -> Iterator[Draft]:
    band = measured_range(loop)
    found: list[Reading] = []
    lacking = None
    try:
        read = readings(group, ("low", "normal", "high"), scale_in(band.unit, loop), name)
        found.extend(value for value in read if above(value.value, band.high) or below(value.value, band.low))
    except NotChecked as reason:
        lacking = reason
    if found:
        told = [f"{value.name}, {value.told}," for value in found]
        listed = told[0] if len(told) == 1 else f"{' '.join(told[:-1])} and {told[-1]}"
        it = "it" if len(found) == 1 else "them"
        yield draft(
            loop.tag,
            f"{name} {listed} {'lies' if len(found) == 1 else 'lie'} outside the measurement range, {band}",
            remedy=f"bring {it} into {band}, or give the transmitter a range that holds {it}",
            at=found[0].place,
            related=(
                (range_place(loop), f"the measurement range, {band}"),
                *((value.place, f"{name} {value.name}, {value.told}") for value in found[1:]),
            ),
        )
    if lacking:
        raise lacking


# ---------------------------------------------------------------- a primary against its secondary


@rule(level=Level.ERROR, source="common practice")
def secondary_range_short(link: CascadeLink, plant: Plant) -> Iterator[Draft]:
    """The secondary cannot measure all that its primary may ask of it.

    Why:
        The primary's output span is the span of setpoints that it may ask for. Where it asks for more than
        the secondary can measure, the setpoint is never reached: the secondary drives its final element to
        the end, and the primary winds up.
    Breaks:
        TIC-2014 asks for 0 to 12 t/h and FIC-2011 measures 0 to 10 t/h.
    Holds:
        The secondary's range covers the primary's output span, as it arrives through the functions between
        them: selectors pass it on, a characteriser bends it by its curve, a sum adds and a ratio multiplies by
        its inputs as the plant runs (`operating`). Output limits do not shorten the span: they can be opened
        from a keyboard, a range cannot.
    What this check cannot see:
        Whether the plant can deliver what the secondary can measure.
    """
    primary, secondary = link.primary, link.secondary
    output = need(primary.controller.output, "the primary's output")
    span = forward(need(output.span, "the primary's output span"), "the primary's output span")
    band = measured_range(secondary.loop)
    asked = _decided(demand(link, span, plant))
    short = _excess(asked.asked, band)
    if short:
        yield draft(
            secondary.tag,
            f"its range, {band}, does not cover {_told(link, span, asked)}: {short} cannot be measured",
            remedy=f"give {secondary.tag} a range that covers {rounded(asked.asked)}, "
            f"or {primary.tag} a shorter output span",
            at=range_place(secondary.loop),
            related=(
                (output.origin.place("span"), f"the output span of {primary.tag}, {span}"),
                *((function.origin.key(), f"the function {function.tag} between them") for function in link.via),
            ),
        )


@rule(level=Level.WARNING, source="common practice; policy secondary_range_ratio")
def secondary_range_wide(secondary: ControlledLoop, plant: Plant, limits: Limits) -> Iterator[Draft]:
    """The secondary measures a much wider range than its primaries can use.

    Why:
        The cascade then uses a small part of the secondary's transmitter. Its resolution and accuracy, which
        are parts of the range, are lost where they are wanted; with an orifice plate most of all.
    Breaks:
        TIC-2014 asks for 0 to 5 t/h and FIC-2011 measures 0 to 15 t/h (with the default ratio of 1.5).
    Holds:
        The secondary's span is not more than `secondary_range_ratio` times the span that all its primaries
        together may ask for.
    What this check cannot see:
        A wide range that another service of the same transmitter needs, such as start-up or totalising.
    """
    links = plant.links_to.get(secondary.tag, ())
    only_if(links)
    band = measured_range(secondary.loop)
    asked = []
    for link in links:
        output = need(link.primary.controller.output, "the primary's output")
        span = forward(need(output.span, "the primary's output span"), "the primary's output span")
        asked.append(_decided(demand(link, span, plant)).asked)
    low, high = min(one.low for one in asked), max(one.high for one in asked)
    if not above(high, low):
        not_checked("the primary may ask for one value only")
    ratio = band.span / (high - low)
    if above(ratio, limits.secondary_range_ratio):
        primaries = " and ".join(link.primary.tag for link in links)
        verb = "asks" if len(links) == 1 else "ask"
        yield draft(
            secondary.tag,
            f"its span, {amount(band.span, band.unit)}, is {ratio:.3g} times the "
            f"{amount(high - low, band.unit)} for which {primaries} {verb}; "
            f"the limit is {limits.secondary_range_ratio:g} times",
            remedy=f"give {secondary.tag} a range nearer to {rounded(Range(low, high, band.unit))}",
            at=range_place(secondary.loop),
            related=tuple(
                (
                    link.primary.controller.origin.place("output", "span"),
                    f"the output span of {link.primary.tag}",
                )
                for link in links
            ),
        )


@rule(level=Level.ERROR, source="common practice (reset wind-up); ISA-TR5.9-2023, anti-reset windup (from memory)")
def output_limit_outside_setpoint(link: CascadeLink, plant: Plant) -> Iterator[Draft]:
    """A primary's output may go beyond the setpoints that its secondary accepts.

    Why:
        Beyond the secondary's setpoint limit the secondary no longer follows, while the primary still sees
        room in its output: it integrates into nothing, and must come all the way back before it acts again.
    Breaks:
        TIC-2014 with `output: {high: 12.5 t/h}` over FIC-2011 with `setpoint: {high: 12 t/h}`.
    Holds:
        The primary's output limits (the ends of its output span where none are given) lie within the
        secondary's setpoint limits (the ends of its range where none are given). Where neither is given,
        the rule `secondary-range-short` compares the two ranges.
    What this check cannot see:
        A primary that holds or tracks when its secondary is at a limit; that keeps it from winding up, but
        the limits still contradict each other.
    """
    lacking = None
    for end in ("low", "high"):
        try:
            yield from _beyond_setpoint(link, end, plant)
        except NotChecked as reason:
            lacking = reason
    if lacking:
        raise lacking


def _beyond_setpoint(link: CascadeLink, end: str, plant: Plant) -> Iterator[Draft]:
    """A finding where one end of a primary's output is beyond what its secondary accepts."""
    primary, secondary = link.primary, link.secondary
    output = need(primary.controller.output, "the primary's output")
    setpoint = secondary.controller.setpoint
    if setpoint is not None:
        setpoint = need(setpoint, "the secondary's setpoint")
    accepted = getattr(setpoint, end) if setpoint else None
    if getattr(output, end) is None and accepted is None:
        return
    band = measured_range(secondary.loop)
    asked, told, place = _output_end(link, output, end, plant)
    if accepted is None:
        bound, bound_place = (band.low if end == "low" else band.high), range_place(secondary.loop)
        bound_told = f"the {end} end of the range of {secondary.tag}, {amount(bound, band.unit)}"
    else:
        written = need(accepted, f"the secondary's {end} setpoint limit")
        scale = scale_in(band.unit, secondary.loop)
        bound = reading(written, scale, f"the secondary's {end} setpoint limit")
        bound_told = f"the {end} setpoint limit of {secondary.tag}, {scale.told(written)}"
        bound_place = secondary.controller.origin.place("setpoint", end)
    if below(asked, bound) if end == "low" else above(asked, bound):
        side = "below" if end == "low" else "above"
        yield draft(
            primary.tag,
            f"its output may ask for {told}, {side} {bound_told}",
            remedy=f"limit the output so that it asks for no {'less' if end == 'low' else 'more'} "
            f"than {amount(bound, band.unit)}, or let {secondary.tag} accept {amount(asked, band.unit)}",
            at=place,
            related=((bound_place, bound_told),),
        )


def _output_end(link: CascadeLink, output: Output, end: str, plant: Plant) -> tuple[float, str, Place]:
    """The setpoint that one end of a primary's output asks for, how it is told, and where it stands."""
    limit = getattr(output, end)
    if limit is None:
        span = forward(need(output.span, "the primary's output span"), "the primary's output span")
        value, unit, place = (span.low if end == "low" else span.high), span.unit, output.origin.place("span")
    else:
        written = need(limit, f"the primary's {end} output limit")
        value, unit, place = written.value, written.unit, output.origin.place(end)
    asked = _decided(demand(link, Range(value, value, unit), plant))
    reached = asked.asked.low if end == "low" else asked.asked.high
    return reached, _told_end(value, unit, reached, asked), place


def _told_end(value: float, unit: Unit, reached: float, asked: Demand) -> str:
    written, arriving = amount(value, unit), amount(reached, asked.asked.unit)
    if asked.steps:
        return f"{arriving} (its output of {written}; {'; '.join(asked.steps)})"
    return written if written == arriving else f"{written} ({arriving})"


def _decided(asked: Demand | Undecided) -> Demand:
    if isinstance(asked, Undecided):
        not_checked(asked.reason)
    return asked


def _told(link: CascadeLink, span: Range, asked: Demand) -> str:
    """What the primary may ask for, in words."""
    if asked.steps:
        steps = "; ".join(asked.steps)
        return f"what {link.primary.tag} may ask for, {rounded(asked.asked)} (its output of {span}; {steps})"
    return f"what {link.primary.tag} may ask for, {range_in_both(span, asked.asked.unit)}"


def _excess(asked: Range, band: Range) -> str:
    """The parts of what is asked that lie outside a range, in words; empty where it is covered."""
    parts = []
    if below(asked.low, band.low):
        parts.append(str(rounded(Range(asked.low, min(asked.high, band.low), band.unit))))
    if above(asked.high, band.high):
        parts.append(str(rounded(Range(max(asked.low, band.high), asked.high, band.unit))))
    return " and ".join(parts)


# ---------------------------------------------------------------- resolution

_BY_PRESSURE = ("orifice", "venturi", "nozzle", "wedge", "pitot", "cone meter")
"""Primary elements that measure flow by a differential pressure, as they stand in `element`."""


@rule(level=Level.WARNING, source="common practice (turndown of a flow meter); see policy low_flow")
def operating_poor_resolution(loop: Loop, limits: Limits) -> Iterator[Draft]:
    """A flow is to be held where its differential pressure is too small to measure it.

    Why:
        The differential pressure goes with the square of the flow: at 25 % of the range it is 6 % of its own span,
        and an error of 0.1 % of that span, which is 0.05 % of the flow at the top, is 0.8 % of the flow there. Below
        about a quarter of the range the controller follows noise, and a total reckoned from it is wrong.
    Breaks:
        `operating: {low: 3 t/h}` on an orifice plate of 0 to 15 t/h, 20 % of the range.
    Holds:
        The lowest operating value of such a meter lies at or above `low_flow` of its range. Meters of another
        principle are not judged.
    What this check cannot see:
        A second transmitter for the low range, or a meter whose maker promises a wider turndown.
    """
    measurement = known(loop.measurement)
    element = (known(measurement.element) or "").casefold() if measurement else ""
    only_if(
        measurement
        and known(measurement.variable) == "flow"
        and (known(measurement.characteristic) == "square root" or any(word in element for word in _BY_PRESSURE))
    )
    band = measured_range(loop)
    operating = need(loop.operating, "the operating band")
    key = "low" if operating.low is not None else "normal"
    need(getattr(operating, key), f"operating {key}")
    for lowest in readings(operating, (key,), scale_in(band.unit, loop), "operating"):
        share = 100 * (lowest.value - band.low) / band.span
        if below(share, limits.low_flow):
            most = amount(band.low + 100 * (lowest.value - band.low) / limits.low_flow, band.unit)
            yield draft(
                loop.tag,
                f"operating {lowest.name}, {lowest.told}, is {share:.3g} % of the range, {band}, where the "
                f"differential pressure is {max(share, 0) ** 2 / 100:.2g} % of its own span; "
                f"the limit is {limits.low_flow:g} %",
                remedy=f"let the range end at {most}, add a transmitter for low flow, or choose another kind of meter",
                at=lowest.place,
                related=((range_place(loop), f"the measurement range, {band}"),),
            )
