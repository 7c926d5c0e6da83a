"""From the register to numbers: each loop of a cascade as a controller and a process in percent of span.

Percent of a measurement is percent of its range; percent of a command is percent of opening, or of the
secondary's range. The sign of the path is taken from `loopdoc.engineering.direction`, that of the
controller from its written action, so that a wrong action shows as an unstable loop and not as a sound one.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TypeAlias, TypeVar

from loopdoc.engineering.direction import Undecided, element_sign, process_on
from loopdoc.engineering.feedforward import FunctionInput, inputs_on, normal_input
from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.functions import SELECTORS, Curve, curve_of, fed_by, lead_lag_of
from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route, normal_value
from loopdoc.engineering.pid import (
    Controller,
    ParallelSettings,
    SeriesSettings,
    StandardSettings,
    gain_from_proportional_band,
    on_secondary_range,
    reset_from_repeats,
    standard_from_parallel,
    standard_from_series,
)
from loopdoc.engineering.process import Process
from loopdoc.register import model
from loopdoc.register.model import FinalElement, Hold, known
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.units import UNITS, UnitError

T = TypeVar("T")

DERIVATIVE_FILTER = 10.0
"""Ratio of rate time to its filter where the register gives none (common practice)."""


@dataclass(frozen=True, slots=True)
class Lacking:
    """Why a loop's dynamics cannot be calculated."""

    reason: str


class _Lacking(Exception):
    """Carries the reason out of the steps below; never leaves this module."""


Way: TypeAlias = tuple[tuple[ControlledLoop, Route], ...]
"""Loops with the route that each takes, innermost first."""


@dataclass(frozen=True, slots=True)
class Level:
    """One level of a chain: the loop, the route its output takes, and both as numbers."""

    loop: ControlledLoop
    route: Route
    stage: LoopStage
    inputs: tuple[FunctionInput, ...] = ()
    """What functions on the route take in besides the output of the loop."""


@dataclass(frozen=True, slots=True)
class Chain:
    """A loop with the secondaries below it, innermost first."""

    levels: tuple[Level, ...]

    @property
    def stages(self) -> tuple[LoopStage, ...]:
        return tuple(level.stage for level in self.levels)

    @property
    def lead(self) -> ControlledLoop:
        """The outermost loop."""
        return self.levels[-1].loop

    @property
    def final_element(self) -> FinalElement:
        """What the innermost loop moves."""
        end = self.levels[0].route.end
        assert isinstance(end, FinalElement)
        return end


def chains(plant: Plant, lead: ControlledLoop) -> tuple[Chain, ...] | Lacking:
    """Every chain from a loop down to a final element: one, or one for each branch of a split range."""
    ways = ways_down(plant, lead)
    if isinstance(ways, Lacking):
        return ways
    try:
        return tuple(
            Chain(
                tuple(
                    Level(loop, route, _stage(plant, loop, route), inputs_on(plant, loop, route))
                    for loop, route in way
                )
            )
            for way in ways
        )
    except _Lacking as lacking:
        return Lacking(str(lacking))


def ways_down(plant: Plant, lead: ControlledLoop) -> tuple[Way, ...] | Lacking:
    """The loops and routes from a loop down to each final element that it moves, innermost first."""
    if not lead.routes:
        return Lacking(f"the output of {lead.tag} leads nowhere")
    try:
        return tuple(_below(plant, lead, ()))
    except _Lacking as lacking:
        return Lacking(str(lacking))


def _below(plant: Plant, loop: ControlledLoop, above: tuple[str, ...]) -> list[Way]:
    if loop.tag in above:
        raise _Lacking(f"{loop.tag} commands itself")
    found: list[Way] = []
    for route in loop.routes:
        if isinstance(route.end, FinalElement):
            found.append(((loop, route),))
            continue
        secondary = plant.controlled.get(route.end.tag)
        if secondary is None or not secondary.routes:
            raise _Lacking(f"{route.end.tag} has no controller with an output")
        found.extend((*inner, (loop, route)) for inner in _below(plant, secondary, (*above, loop.tag)))
    return found


# ---------------------------------------------------------------- controller


def _stage(plant: Plant, loop: ControlledLoop, route: Route) -> LoopStage:
    controller, lead_lags = _controller(plant, loop, route)
    return LoopStage(controller, _process(loop, route), lead_lags)


def controller_of(loop: ControlledLoop, route: Route) -> Controller | Lacking:
    """The controller of a loop with its output in percent of its own span."""
    try:
        return _own_controller(loop, route)
    except _Lacking as lacking:
        return Lacking(str(lacking))


def _controller(plant: Plant, loop: ControlledLoop, route: Route) -> tuple[Controller, tuple[LeadLag, ...]]:
    controller = _own_controller(loop, route)
    try:
        return _on_commanded(plant, controller, loop, route)
    except (ValueError, ZeroDivisionError) as error:
        raise _unmade(loop.tag, error) from error


def _unmade(tag: str, error: Exception) -> _Lacking:
    """Of a nonsensical setting; `tuning-invalid` and others tell it."""
    return _Lacking(f"the settings of {tag} do not make a controller: {error}")


def _own_controller(loop: ControlledLoop, route: Route) -> Controller:
    written, tag = loop.controller, loop.tag
    action = _need(written.action, f"the action of {tag}")
    measurement = _need(loop.loop.measurement, f"the measurement of {tag}")
    own = _need(measurement.range, f"the range of {tag}")
    try:
        settings = settings_of(written, tag)
        output = known(written.output)
        setpoint = known(written.setpoint)
        weight, smoothing = known(written.setpoint_weight), known(written.derivative_filter)
        low, high = _output_limits(output, route, tag)
        setpoint_low = _percent_of(known(setpoint.low) if setpoint else None, own, 0.0)
        setpoint_high = _percent_of(known(setpoint.high) if setpoint else None, own, 100.0)
        return Controller(
            gain=settings.gain if action == "reverse" else -settings.gain,
            reset_s=settings.reset_s,
            rate_s=settings.rate_s,
            derivative_filter=DERIVATIVE_FILTER if smoothing is None else smoothing,
            setpoint_weight=1.0 if weight is None else weight,
            derivative_setpoint_weight=1.0 if known(written.rate_on) == "error" else 0.0,
            interval_s=_seconds(written.interval),
            measurement_filter_s=_seconds(measurement.filter),
            output_low_pct=low,
            output_high_pct=high,
            setpoint_low_pct=setpoint_low,
            setpoint_high_pct=setpoint_high,
        )
    except (ValueError, ZeroDivisionError) as error:
        raise _unmade(tag, error) from error


def settings_of(written: model.Controller, tag: str) -> StandardSettings:
    """The written settings in the standard form.

    In the parallel form `reset` or `repeats` gives the integral gain by itself (1/time) and `rate` the
    derivative gain (time), as ISA-TR5.9 has them (from memory).

    Raises
    ------
    ValueError
        The settings have no standard form.
    """
    band = known(written.proportional_band)
    gain = known(written.gain)
    if gain is None and band is not None:
        gain = gain_from_proportional_band(band.to("%"))
    gain = _need(written.gain if gain is None else gain, f"the gain of {tag}")
    if gain < 0.0:
        raise ValueError("the gain is negative, where the action gives the sign")
    reset, repeats = (
        _need_not_held(written.reset, f"the reset of {tag}"),
        _need_not_held(written.repeats, f"the repeats of {tag}"),
    )
    reset_s = math.inf
    if reset is not None:
        reset_s = reset.to("s")
    elif repeats is not None:
        reset_s = reset_from_repeats(repeats.to("1/s"))
    rate = _need_not_held(written.rate, f"the rate of {tag}")
    rate_s = rate.to("s") if rate else 0.0
    form = known(written.form) or "standard"
    if form == "series":
        return standard_from_series(SeriesSettings(gain, reset_s, rate_s))
    if form == "parallel":
        return standard_from_parallel(ParallelSettings(gain, 1.0 / reset_s, rate_s))
    return StandardSettings(gain, reset_s, rate_s)


def _output_limits(output: model.Output | None, route: Route, tag: str) -> tuple[float, float]:
    """Output limits in percent of the output span."""
    span = _need_not_held(output.span, f"the output span of {tag}") if output else None
    low = known(output.low) if output else None
    high = known(output.high) if output else None
    if span is None:
        if not isinstance(route.end, FinalElement):
            raise _Lacking(f"the output span of {tag} is not given")
        return (low.to("%") if low else 0.0, high.to("%") if high else 100.0)
    return _percent_of(low, span, 0.0), _percent_of(high, span, 100.0)


@dataclass(frozen=True, slots=True)
class _Asked:
    """What becomes of a controller's output on its way, as a straight line through the normal point."""

    at_0: float
    """What 0 % of the output asks for."""
    at_100: float
    """What 100 % of the output asks for."""
    low: float
    """What the lower output limit asks for; on the line but for a characteriser."""
    high: float
    """What the upper output limit asks for."""

    def mapped(self, factor: float, added: float) -> _Asked:
        """The same times a factor, plus something added."""
        ends = (factor * value + added for value in (self.at_0, self.at_100, self.low, self.high))
        return _Asked(*ends)

    def through(self, curve: Curve, normal: float) -> _Asked:
        """The same through a characteriser: by its slope at the normal input, the limits by the curve itself."""
        slope, out = curve.slope(normal), curve.at(normal)
        return _Asked(
            out + slope * (self.at_0 - normal),
            out + slope * (self.at_100 - normal),
            curve.at(self.low),
            curve.at(self.high),
        )


def _on_commanded(
    plant: Plant, controller: Controller, loop: ControlledLoop, route: Route
) -> tuple[Controller, tuple[LeadLag, ...]]:
    """The controller with its output in percent of what it commands, and the lead-lags on the way there."""
    if isinstance(route.end, FinalElement):
        element = element_sign(route.end)
        if isinstance(element, Undecided):
            raise _Lacking(element.reason)
        turns = element.sign < 0
        own = Range(0.0, 100.0, UNITS["%"])
        asked = _Asked(0.0, 100.0, controller.output_low_pct, controller.output_high_pct)
    else:
        turns = False
        measurement = _need(route.end.measurement, f"the measurement of {route.end.tag}")
        own = _need(measurement.range, f"the range of {route.end.tag}")
        asked = _asked_in_units(controller, loop, route, own)
    lead_lags = []
    commander = loop.tag
    for function in route.via:
        if known(function.kind) == "lead-lag":
            lead_lags.append(_decided(lead_lag_of(function)))
        else:
            asked = _through(plant, function, commander, loop, route, own, asked)
        commander = function.tag
    if turns:
        asked = asked.mapped(-1.0, 100.0)
    asked = asked.mapped(100.0 / own.span, -100.0 * own.low / own.span)
    moved = on_secondary_range(controller, span_low_pct=asked.at_0, span_high_pct=asked.at_100)
    low, high = sorted((asked.low, asked.high))
    return replace(moved, output_low_pct=low, output_high_pct=high), tuple(lead_lags)


def _asked_in_units(controller: Controller, loop: ControlledLoop, route: Route, own: Range) -> _Asked:
    """The output span of a primary as it enters the first function, in the unit that counts there."""
    output = known(loop.controller.output)
    span = _need(output.span if output else None, f"the output span of {loop.tag}")
    kinds = [known(function.kind) for function in route.via]
    try:
        if "characteriser" in kinds:
            low, high = span.low, span.high
        elif "ratio" in kinds:
            low, high = span.to("fraction").low, span.to("fraction").high
        elif "sum" in kinds:  # it may add a span on both sides of zero: a difference, not a reading
            low, high = (Quantity(end, span.unit).difference_in(own.unit.symbol) for end in (span.low, span.high))
        else:
            low, high = span.to(own.unit.symbol).low, span.to(own.unit.symbol).high
    except UnitError as error:
        raise _Lacking(
            f"the output span of {loop.tag} and the range of {route.end.tag} are of different kinds"
        ) from error
    limits = (low + (high - low) * limit / 100.0 for limit in (controller.output_low_pct, controller.output_high_pct))
    return _Asked(low, high, *limits)


def _through(
    plant: Plant,
    function: model.Function,
    commander: str,
    loop: ControlledLoop,
    route: Route,
    own: Range,
    asked: _Asked,
) -> _Asked:
    """What a function makes of what a controller asks for, its other inputs at their normal values."""
    kind = known(function.kind)
    to_element = isinstance(route.end, FinalElement)
    if kind in SELECTORS:
        return asked
    if kind == "characteriser":
        return asked.through(*_characterised(function, loop, route, own))
    if kind == "split range" and to_element and route.branch is not None:
        # The element goes from shut to fully open over its branch: its opening moves that much faster.
        start, width = route.branch.to("%").low, route.branch.to("%").span
        return asked.mapped(100.0 / width, -100.0 * start / width)
    weight = function.weights.get(commander, 1.0)
    if kind == "sum" and to_element:
        return asked.mapped(weight, 0.0)  # what it adds shifts the opening and changes no gain
    if kind not in ("ratio", "sum") or to_element:
        raise _Lacking(f"what {function.tag} makes of the output of {commander} does not follow from the register")
    inputs = {tag: _normal(plant, tag, own) for tag in fed_by(plant, function, commander)}
    if kind == "ratio":
        return asked.mapped(math.prod(inputs.values()), 0.0)
    return asked.mapped(weight, math.fsum(function.weights.get(tag, 1.0) * value for tag, value in inputs.items()))


def _characterised(
    function: model.Function, loop: ControlledLoop, route: Route, own: Range
) -> tuple[Curve, float]:
    """The curve of a characteriser in a loop's path, and its input at the normal point."""
    kinds = [known(part.kind) for part in route.via]
    if kinds.count("characteriser") > 1 or "ratio" in kinds or "sum" in kinds:
        raise _Lacking(f"{function.tag}, a characteriser, stands in one path with a {_other(kinds)}")
    output = known(loop.controller.output)
    span = known(output.span) if output else None
    given = UNITS["%"] if isinstance(route.end, FinalElement) or span is None else span.unit
    curve = _decided(curve_of(function, given=given, gives=own.unit))
    written = _need_not_held(function.normal_input, f"the normal input of {function.tag}")
    normal = None
    if written is not None:
        normal = written.to(given.symbol)
    elif not isinstance(route.end, FinalElement):
        wanted = normal_value(route.end)
        normal = curve.input_for(wanted.to(own.unit.symbol)) if wanted is not None else None
    if normal is None:
        raise _Lacking(f"the normal input of {function.tag} is not given")
    if curve.slope(normal) == 0.0:
        raise _Lacking(f"the curve of {function.tag} is level at its normal input, where {loop.tag} moves nothing")
    return curve, normal


def _other(kinds: list[str | None]) -> str:
    return next((kind for kind in kinds if kind in ("ratio", "sum")), "second characteriser")


def _normal(plant: Plant, tag: str, own: Range) -> float:
    """Normal value of what enters a function, in the secondary's unit."""
    return _decided(normal_input(plant, tag)).to(own.unit.symbol).low


def _decided(found: T | Undecided) -> T:
    if isinstance(found, Undecided):
        raise _Lacking(found.reason)
    return found


# ---------------------------------------------------------------- process


def process_along(loop: ControlledLoop, route: Route) -> Process | Lacking:
    """The process of a loop on one route, from percent of what it commands to percent of its own range."""
    try:
        return _process(loop, route)
    except _Lacking as lacking:
        return Lacking(str(lacking))


def process_of_indicator(loop: model.Loop) -> Process | Lacking:
    """The process of a loop without controller, from a hundredth of the unit of its input to percent of its range."""
    written = known(loop.process)
    if written is None:
        return Lacking(f"{loop.tag} has no `process`")
    try:
        gain = _need(written.gain, f"the process gain of {loop.tag}")
        return _model(loop, written, gain.denominator.symbol, 1.0)
    except _Lacking as lacking:
        return Lacking(str(lacking))


def _process(loop: ControlledLoop, route: Route) -> Process:
    if isinstance(loop.loop.process, Hold):
        raise _Lacking(f"the process of {loop.tag} is on hold")
    written = process_on(loop, route)
    if written is None:
        raise _Lacking(f"{loop.tag} has no `process` for {route.end.tag}")
    commanded_unit, commanded_span = commanded(route)
    return _model(loop.loop, written, commanded_unit, commanded_span)


def commanded(route: Route) -> tuple[str, float]:
    """Unit and span of what a route commands: percent of opening, or the secondary's range."""
    if isinstance(route.end, FinalElement):
        return "%", 100.0
    below = _need(route.end.measurement, f"the measurement of {route.end.tag}")
    range_ = _need(below.range, f"the range of {route.end.tag}")
    return range_.unit.symbol, range_.span


def _model(loop: model.Loop, written: model.Process, commanded_unit: str, commanded_span: float) -> Process:
    tag = loop.tag
    gain = _need(written.gain, f"the process gain of {tag}")
    measurement = _need(loop.measurement, f"the measurement of {tag}")
    own = _need(measurement.range, f"the range of {tag}")
    if isinstance(written.lags, Hold):
        raise _Lacking(f"the lag of {tag} is on hold")
    _need_not_held(written.dead_time, f"the dead time of {tag}")
    lead = _need_not_held(written.lead, f"the lead of {tag}")
    if gain.integrates(own.unit.symbol) != written.integrating:
        rate, integrates = ("no", "is") if written.integrating else ("a", "is not")
        raise _Lacking(f"the process gain of {tag} is {rate} rate of change, but the process {integrates} integrating")
    if gain.value * {"rises": 1, "falls": -1}.get(known(written.effect) or "", 0) < 0:
        raise _Lacking(f"the process gain of {tag} contradicts the effect")
    try:
        per_unit = gain.in_units(own.unit.symbol, commanded_unit) * commanded_span / own.span
        return Process(
            gain=per_unit,
            lags_s=tuple(lag.to("s") for lag in written.lags),
            dead_time_s=_seconds(written.dead_time),
            leads_s=(lead.to("s"),) if lead and lead.value else (),
            integrating=written.integrating,
        )
    except (ValueError, ZeroDivisionError) as error:
        raise _Lacking(f"the process of {tag} does not make a model: {error}") from error


# ---------------------------------------------------------------- values


def _need(value: T | Hold | None, what: str) -> T:
    if value is None:
        raise _Lacking(f"{what} is not given")
    if isinstance(value, Hold):
        raise _Lacking(f"{what} is on hold" if value.readable else f"{what} could not be read")
    return value


def _need_not_held(value: T | Hold | None, what: str) -> T | None:
    return None if value is None else _need(value, what)


def _seconds(value: Quantity | Hold | None) -> float:
    quantity = known(value)
    return quantity.to("s") if quantity else 0.0


def measured_range(loop: ControlledLoop) -> Range:
    """The measurement range of a loop that has a stage, and so has one."""
    measurement = known(loop.loop.measurement)
    own = known(measurement.range) if measurement else None
    assert own is not None
    return own


def percent_of_range(value: Quantity, own: Range) -> float:
    """A reading in percent of a measurement range."""
    return 100.0 * (value.to(own.unit.symbol) - own.low) / own.span


def _percent_of(value: Quantity | None, own: Range, default: float) -> float:
    return default if value is None else percent_of_range(value, own)
