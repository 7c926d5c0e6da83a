"""The panels of a loop sheet: what a loop measures, how its controller is set, and what its process is."""

from __future__ import annotations

import math

from markupsafe import Markup

from loopdoc.documents.language import Language
from loopdoc.documents.loop_sheet.panels import Pair, Panel, cell, joined, term
from loopdoc.documents.values import DASH
from loopdoc.engineering.direction import Undecided, path_sign
from loopdoc.engineering.dynamics import LoopDynamics
from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.register.model import (
    Controller,
    Hold,
    Loop,
    Measurement,
    Operating,
    Process,
    Setpoint,
    known,
)
from loopdoc.register.quantity import Quantity, QuantityError, Range, parse_quantity

# ---------------------------------------------------------------- measurement


def measurement_panel(loop: Loop, language: Language) -> Panel:
    """What a loop measures."""
    measurement, label = known(loop.measurement), language.label
    title = label("Measurement")
    if measurement is None:
        return Panel(title, (((title, cell(loop.measurement, language)),),))
    rows: list[tuple[Pair, ...]] = [
        (
            (label("Transmitter"), cell(measurement.transmitter, language)),
            (label("Variable"), term("variable", measurement.variable, language)),
        ),
        ((label("Element" if measurement.element is not None else "Sensor"), _sensor(measurement, language)),),
        ((label("Range"), _range(measurement, language)),),
        (
            (label("Signal"), term("signal", measurement.signal, language)),
            (label("Channel"), cell(measurement.channel, language)),
        ),
        (
            (label("On fault"), term("on fault", measurement.on_fault, language)),
            (label("Filter"), cell(measurement.filter, language)),
        ),
        ((label("Operating"), _band(loop.operating, language)),),
    ]
    return Panel(title, tuple(rows))


def _sensor(measurement: Measurement, language: Language) -> str:
    return joined(cell(part, language) for part in (measurement.element, measurement.sensor) if part is not None)


def _range(measurement: Measurement, language: Language) -> str:
    root = measurement.characteristic
    extra = [] if root is None else [term("characteristic", root, language)]
    return joined([cell(measurement.range, language), *extra])


def _band(band: Operating | Setpoint | Hold | None, language: Language) -> str:
    """Low and high end with the normal value."""
    if band is None or isinstance(band, Hold):
        return cell(band, language)
    parts = [_ends(band.low, band.high, language)] if band.low is not None or band.high is not None else []
    if band.normal is not None:
        parts.append(Markup(language.normally("{}")).format(cell(band.normal, language)))
    return joined(parts)


def _ends(low: Quantity | Hold | None, high: Quantity | Hold | None, language: Language) -> str:
    if isinstance(low, Quantity) and isinstance(high, Quantity) and low.unit == high.unit:
        return language.shown(Range(low.value, high.value, low.unit, low.written, high.written))
    if low is None:
        return Markup(language.up_to("{}")).format(cell(high, language))
    if high is None:
        return Markup(language.at_least("{}")).format(cell(low, language))
    return Markup(language.between("{}", "{}")).format(cell(low, language), cell(high, language))


# ---------------------------------------------------------------- controller


def controller_panel(plant: Plant, loop: Loop, controller: Controller, language: Language) -> Panel:
    """How the controller is configured."""
    label = language.label
    gain: Pair = (label("Gain"), _gain(controller.gain, language))
    if controller.gain is None and controller.proportional_band is not None:
        gain = (label("Prop. band"), cell(controller.proportional_band, language))
    reset: Pair = (label("Reset"), cell(controller.reset, language))
    if controller.reset is None and controller.repeats is not None:
        reset = (label("Repeats"), cell(controller.repeats, language))
    rows: list[tuple[Pair, ...]] = [
        (
            (label("Action"), term("action", controller.action, language)),
            (label("Form"), term("form", controller.form or "standard", language)),
        ),
        (gain, reset),
        ((label("Rate"), cell(controller.rate, language)), (label("Interval"), cell(controller.interval, language))),
        ((label("Setpoint"), _band(controller.setpoint, language)),),
        ((label("Output"), _output(controller, language)),),
        ((label("Modes"), _modes(controller, language)),),
        (
            (label("Bad meas."), _bad_measurement(controller, language)),
            (label("Not followed"), term("not followed", controller.when_not_followed, language)),
        ),
    ]
    extra = [
        (label(name), cell(value, language))
        for name, value in (
            ("SP weight", controller.setpoint_weight),
            ("Rate filter", controller.derivative_filter),
        )
        if value is not None
    ]
    if extra:
        rows.insert(3, tuple(extra))
    rows.append(((label("Sign path"), _sign(plant.controlled[loop.tag], language)),))
    return Panel(label("Controller"), tuple(rows))


def _gain(gain: float | Hold | None, language: Language) -> str:
    return cell(gain, language) if gain is None or isinstance(gain, Hold) else f"{language.shown(gain)}\u00a0%/%"


def _output(controller: Controller, language: Language) -> str:
    output = known(controller.output)
    if output is None:
        return cell(controller.output, language)
    parts = [] if output.low is None and output.high is None else [_ends(output.low, output.high, language)]
    if output.span is not None:
        parts.append(Markup(language.percent_is("{}")).format(cell(output.span, language)))
    if output.to is not None:
        parts.append(Markup(language.output_to("{}")).format(cell(output.to, language)))
    return joined(parts)


def _modes(controller: Controller, language: Language) -> str:
    modes = known(controller.modes)
    if modes is None:
        return cell(controller.modes, language)
    parts: list[str] = []
    if modes.normal is not None:
        parts.append(Markup(language.normally("{}")).format(term("mode", modes.normal, language)))
    if modes.permitted:
        parts.append(language.permitted([language.term("mode", mode) for mode in modes.permitted]))
    return joined(parts, "; ")


def _bad_measurement(controller: Controller, language: Language) -> str:
    bad = known(controller.on_bad_measurement)
    if bad is None:
        return cell(controller.on_bad_measurement, language)
    parts = [] if bad.mode is None else [term("mode", bad.mode, language)]
    if bad.output is not None:
        parts.append(_forced_output(bad.output, language))
    return joined(parts)


def _forced_output(output: str | Hold, language: Language) -> str:
    """`hold`, or a quantity, which the register keeps as it is written."""
    if output == "hold":
        return language.hold_output()
    try:
        return cell(output, language) if isinstance(output, Hold) else language.shown(parse_quantity(output))
    except QuantityError:
        return cell(output, language)


def _sign(controlled: ControlledLoop, language: Language) -> str:
    """Why the loop needs its action, one statement for each way of its output."""
    found: list[str] = []
    for route in controlled.routes:
        sign = path_sign(controlled, route)
        if isinstance(sign, Undecided):
            reason = sign.reason.replace("`", "").removeprefix(f"{controlled.tag}: ")
            words = language.sign_undecided(language.reason(reason))
        else:
            steps = ", ".join(f"{language.sign_step(step.what)} ({'+' if step.sign > 0 else '−'})"
                              for step in sign.steps)  # fmt: skip
            words = language.sign_path(steps, "+" if sign.sign > 0 else "−", sign.action)
        if words not in found:
            found.append(words)
    return "; ".join(found) or DASH


# ---------------------------------------------------------------- tuning


def tuning_panel(loop: Loop, dynamics: LoopDynamics, language: Language) -> Panel:
    """Process model and margins."""
    process, label = known(loop.process), language.label
    title = label("Process and tuning")
    rows: list[tuple[Pair, ...]] = []
    if process is None:
        rows.append(((label("Process"), cell(loop.process, language)),))
    elif process.branches:
        rows.extend(((tag, _model(branch, language)),) for tag, branch in process.branches.items())
    else:
        rows.append(((label("Process"), _model(process, language)),))
    if process is not None:
        rows.append(((label("Source"), cell(process.source, language)),))
    worst = dynamics.worst
    if worst is None:
        rows.append(((label("Margins"), language.margins_not_calculated(language.reason(dynamics.reason))),))
        return Panel(title, tuple(rows))
    margins = worst.margins[-1]
    if not margins.stable:
        rows.append(((label("Margins"), language.unstable()),))
        return Panel(title, tuple(rows))
    gain, degrees = _figure(margins.gain_margin, language), margins.phase_margin_deg
    phase = label("none") if math.isinf(degrees) else _figure(degrees, language, "°")
    crossover = _figure(margins.crossover_rad_per_s, language, "\u00a0rad/s")
    rows.append(((label("Gain margin"), gain), (label("Phase margin"), phase)))
    rows.append(((label("Ms"), _figure(margins.max_sensitivity, language)), (label("Crossover"), crossover)))
    if margins.sampled:
        rows.append(((label("Margins"), language.as_sampled()),))
    if worst.speed_ratio is not None and math.isfinite(worst.speed_ratio):
        inner = worst.chain.levels[-2].loop.tag
        faster = language.times_as_fast(inner, language.number(worst.speed_ratio, 2))
        rows.append(((label("Speed ratio"), faster),))
    return Panel(title, tuple(rows))


def _model(process: Process, language: Language) -> str:
    parts = [] if process.effect is None else [term("effect", process.effect, language)]
    if process.gain is not None:
        parts.append(Markup(language.model_gain("{}")).format(cell(process.gain, language)))
    if process.integrating:
        parts.append(language.integrating())
    lags = process.lags
    if isinstance(lags, Hold):
        parts.append(Markup(language.model_lags(["{}"])).format(cell(lags, language)))
    elif lags:
        parts.append(language.model_lags([language.shown(lag) for lag in lags]))
    if process.lead is not None:
        parts.append(Markup(language.model_lead("{}")).format(cell(process.lead, language)))
    if process.dead_time is not None:
        parts.append(Markup(language.model_dead_time("{}")).format(cell(process.dead_time, language)))
    return joined(parts)


def _figure(value: float, language: Language, unit: str = "") -> str:
    """A calculated figure to three digits; a dash where there is none, such as a crossover never reached."""
    if math.isnan(value):
        return DASH
    return language.number(value, 3) if math.isinf(value) else f"{language.number(value, 3)}{unit}"
