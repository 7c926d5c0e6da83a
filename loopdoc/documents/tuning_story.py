"""The tuning basis of a scheme: settings as configured, process models with their source, margins."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Sequence

from loopdoc.documents.values import HOLD, shown
from loopdoc.documents.wording import NO_BREAK, grouped, listed, sentences, value
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.pairing import ControlledLoop
from loopdoc.register.model import Controller, Hold, Process, known
from loopdoc.register.quantity import Quantity, display_number

SETTINGS_HEAD = (
    "Controller", "Form", "Gain", "Proportional band", "Reset", "Repeats", "Rate", "Rate filter", "Setpoint weight",
    "Filter", "Interval", "Gain margin", "Phase margin", "Ms", "Crossover", "Speed ratio",
)  # fmt: skip
PROCESS_HEAD = ("Loop", "Moved", "Process gain", "Lags", "Lead", "Dead time", "Source")

BASIS = (
    "Gains are in percent of output per percent of measurement span, in the standard form (ISA-TR5.9) unless a table "
    "names another. Margins come from the exact frequency response of the process models with every loop below "
    "closed; dead time is not approximated, and an execution interval counts as half of itself in dead time; a loop "
    "whose gain margin would be read above a quarter of its sampling frequency, where that no longer holds, is "
    "analysed as it is sampled. Ms is the "
    "maximum sensitivity; the speed ratio is the crossover of the loop below over that of the loop itself."
)
"""What every table of settings and margins rests on, told once in a document."""


def settings_rows(loops: Sequence[ControlledLoop], dynamics: Dynamics) -> Iterator[tuple[str, ...]]:
    """One row for each controller, as `SETTINGS_HEAD` names the columns; empty where nothing is given."""
    for loop in loops:
        written = loop.controller
        measurement = known(loop.loop.measurement)
        form = _given(written.form)
        yield (
            loop.tag,
            "" if form == "standard" else form,
            _given(written.gain),
            _given(written.proportional_band),
            _given(written.reset) or ("none" if _proportional_only(written) else ""),
            _given(written.repeats),
            _given(written.rate),
            _given(written.derivative_filter),
            _given(written.setpoint_weight),
            _given(measurement.filter) if measurement else "",
            _given(written.interval),
            *_margins(dynamics, loop.tag),
        )


def _proportional_only(written: Controller) -> bool:
    return written.reset is None and written.repeats is None and known(written.gain) is not None


def process_rows(loops: Sequence[ControlledLoop]) -> Iterator[tuple[str, ...]]:
    """One row for each process model, as `PROCESS_HEAD` names the columns."""
    for loop in loops:
        process = loop.loop.process
        models: list[tuple[str, Process | Hold | None]] = [("", process)]
        if isinstance(process, Process) and process.branches:
            models = list(process.branches.items())
        source = _given(process.source) if isinstance(process, Process) else ""
        for branch, model in models:
            yield loop.tag, branch or _commanded(loop), *_model(model), source


def _commanded(loop: ControlledLoop) -> str:
    return listed(dict.fromkeys(route.end.tag for route in loop.routes))


def _model(model: Process | Hold | None) -> tuple[str, str, str, str]:
    """Gain, lags, lead and dead time of a model."""
    if isinstance(model, Hold):
        return HOLD, "", "", ""
    if model is None:
        return "", "", "", ""
    gain = _given(model.gain)
    lags = HOLD if isinstance(model.lags, Hold) else listed(value(lag) for lag in model.lags)
    return gain, lags, _given(model.lead), _given(model.dead_time)


def _margins(dynamics: Dynamics, tag: str) -> tuple[str, str, str, str, str]:
    worst = dynamics.loop(tag).worst
    if worst is None:
        return ("",) * 5
    margins = worst.margins[-1]
    if not margins.stable:
        return "unstable", "", "", "", ""
    ratio = worst.speed_ratio
    crossover = margins.crossover_rad_per_s
    return (
        _figure(margins.gain_margin),
        f"{_figure(margins.phase_margin_deg)}°" if math.isfinite(margins.phase_margin_deg) else "∞",
        _figure(margins.max_sensitivity),
        f"{_figure(crossover)}{NO_BREAK}rad/s" if math.isfinite(crossover) else "none",
        _figure(ratio) if ratio is not None and math.isfinite(ratio) else "",
    )


def _figure(number: float) -> str:
    if math.isnan(number):
        return "not quoted"  # where the sampled loop would be needed and is not calculated; the remarks say why
    return display_number(number, 3 if abs(number) < 100 else 4)


def remarks(loops: Sequence[ControlledLoop], dynamics: Dynamics) -> str:
    """What the tables do not say: which margins cannot be calculated and why, what is unstable."""
    told: list[str] = []
    calculated = [loop.tag for loop in loops if dynamics.loop(loop.tag).worst is not None]
    if any(len(dynamics.loop(tag).chains) > 1 for tag in calculated):
        told.append("Of a split range the branch with the larger maximum sensitivity is quoted")
    told.extend(_without_margins(loops, dynamics))
    sampled = []
    for tag in calculated:
        worst = dynamics.loop(tag).worst
        if worst is None:
            continue
        margins = worst.margins[-1]
        if not margins.stable:
            told.append(f"{tag} is not stable as tuned")
        elif margins.not_quoted:
            told.append(f"The gain margin of {tag} would need the sampled loop: {margins.not_quoted}")
        elif margins.sampled:
            sampled.append(tag)
    if sampled:
        told.append(f"The margins of {listed(sampled)} are those of the sampled loop")
    return sentences(*told)


def _without_margins(loops: Sequence[ControlledLoop], dynamics: Dynamics) -> Iterator[str]:
    """Why the margins of some loops cannot be calculated; loops that lack the same are named together."""
    lacking = [(loop.tag, reason) for loop in loops if (reason := dynamics.loop(loop.tag).reason)]
    own = [
        (found[1], tag)
        for tag, reason in lacking
        if (found := re.fullmatch(rf"the (.+) of {re.escape(tag)} is on hold", reason))
    ]
    for what, tags in grouped(own).items():
        yield f"No margins can be calculated for {listed(tags)}, whose {what} is on hold"
    named = {tag for _, tag in own}
    for reason, tags in grouped((reason, tag) for tag, reason in lacking if tag not in named).items():
        yield f"No margins can be calculated for {listed(tags)}: {reason}"


def _given(written: object) -> str:
    """A value, HOLD where it is held, nothing where it is not given."""
    if written is None:
        return ""
    if isinstance(written, float):
        return display_number(written)
    if isinstance(written, Quantity):
        return value(written)
    return shown(written).replace(" per ", f"{NO_BREAK}per{NO_BREAK}")
