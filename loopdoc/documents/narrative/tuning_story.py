"""The tuning basis of a scheme: settings as configured, process models with their source, margins."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Sequence

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.values import HOLD
from loopdoc.documents.wording import NO_BREAK, grouped, sentences
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.pairing import ControlledLoop
from loopdoc.register.model import Controller, Hold, Process, known
from loopdoc.register.quantity import Gain

SETTINGS_HEAD = (
    "Controller", "Form", "Gain", "Proportional band", "Reset", "Repeats", "Rate", "Rate filter", "Setpoint weight",
    "Filter", "Interval", "Gain margin", "Phase margin", "Ms", "Crossover", "Speed ratio",
)  # fmt: skip
PROCESS_HEAD = ("Loop", "Moved", "Process gain", "Lags", "Lead", "Dead time", "Source")

BASIS = ENGLISH.tuning_basis()
"""What every table of settings and margins rests on, in English."""


def settings_rows(
    loops: Sequence[ControlledLoop], dynamics: Dynamics, language: Language
) -> Iterator[tuple[str, ...]]:
    """One row for each controller, as `SETTINGS_HEAD` names the columns; empty where nothing is given."""
    for loop in loops:
        written = loop.controller
        measurement = known(loop.loop.measurement)
        form = known(written.form)
        weight = written.setpoint_weight
        yield (
            loop.tag,
            "" if form == "standard" else _term("form", written.form, language),
            _given(written.gain, language),
            _given(written.proportional_band, language),
            _given(written.reset, language) or (language.label("none") if _proportional_only(written) else ""),
            _given(written.repeats, language),
            _given(written.rate, language),
            _given(written.derivative_filter, language),
            _term("weight", weight, language) if isinstance(weight, str) else _given(weight, language),
            _given(measurement.filter, language) if measurement else "",
            _given(written.interval, language),
            *_margins(dynamics, loop.tag, language),
        )


def _term(kind: str, written: str | Hold | None, language: Language) -> str:
    return language.term(kind, written) if isinstance(written, str) else _given(written, language)


def _proportional_only(written: Controller) -> bool:
    return written.reset is None and written.repeats is None and known(written.gain) is not None


def process_rows(loops: Sequence[ControlledLoop], language: Language) -> Iterator[tuple[str, ...]]:
    """One row for each process model, as `PROCESS_HEAD` names the columns."""
    for loop in loops:
        process = loop.loop.process
        models: list[tuple[str, Process | Hold | None]] = [("", process)]
        if isinstance(process, Process) and process.branches:
            models = list(process.branches.items())
        given = process.source if isinstance(process, Process) else None
        source = language.entry(given) if isinstance(given, str) else _given(given, language)
        for branch, model in models:
            yield loop.tag, branch or _commanded(loop, language), *_model(model, language), source


def _commanded(loop: ControlledLoop, language: Language) -> str:
    return language.listed(dict.fromkeys(route.end.tag for route in loop.routes))


def _model(model: Process | Hold | None, language: Language) -> tuple[str, str, str, str]:
    """Gain, lags, lead and dead time of a model."""
    if isinstance(model, Hold):
        return HOLD, "", "", ""
    if model is None:
        return "", "", "", ""
    lags = HOLD if isinstance(model.lags, Hold) else language.listed(language.value(lag) for lag in model.lags)
    return _given(model.gain, language), lags, _given(model.lead, language), _given(model.dead_time, language)


def _margins(dynamics: Dynamics, tag: str, language: Language) -> tuple[str, str, str, str, str]:
    worst = dynamics.loop(tag).worst
    if worst is None:
        return ("",) * 5
    margins = worst.margins[-1]
    if not margins.stable:
        return language.label("unstable"), "", "", "", ""
    ratio = worst.speed_ratio
    crossover = margins.crossover_rad_per_s
    degrees = margins.phase_margin_deg
    phase = f"{_figure(degrees, language)}°" if math.isfinite(degrees) else language.label("none")
    crosses = f"{_figure(crossover, language)}{NO_BREAK}rad/s" if math.isfinite(crossover) else language.label("none")
    speed = _figure(ratio, language) if ratio is not None and math.isfinite(ratio) else ""
    by = language.by_frequency_response()
    return (
        language.calculated(_figure(margins.gain_margin, language), tag, language.label("Gain margin"), by),
        language.calculated(phase, tag, language.label("Phase margin"), by),
        language.calculated(_figure(margins.max_sensitivity, language), tag, language.label("Ms"), by),
        language.calculated(crosses, tag, language.label("Crossover"), by),
        language.calculated(speed, tag, language.label("Speed ratio"), by),
    )


def _figure(number: float, language: Language) -> str:
    if math.isnan(number):
        # Where the sampled loop would be needed and is not calculated; the remarks say why.
        return language.label("not quoted")
    return language.number(number, 3 if abs(number) < 100 else 4)


def remarks(loops: Sequence[ControlledLoop], dynamics: Dynamics, language: Language) -> str:
    """What the tables do not say: which margins cannot be calculated and why, what is unstable."""
    told: list[str] = []
    calculated = [loop.tag for loop in loops if dynamics.loop(loop.tag).worst is not None]
    if any(len(dynamics.loop(tag).chains) > 1 for tag in calculated):
        told.append(language.larger_branch())
    told.extend(_without_margins(loops, dynamics, language))
    sampled = []
    for tag in calculated:
        worst = dynamics.loop(tag).worst
        if worst is None:
            continue
        margins = worst.margins[-1]
        if not margins.stable:
            told.append(language.not_stable(tag))
        elif margins.not_quoted:
            told.append(language.gain_margin_sampled(tag, language.reason(margins.not_quoted)))
        elif margins.sampled:
            sampled.append(tag)
    if sampled:
        told.append(language.margins_sampled(sampled))
    return sentences(*told)


def _without_margins(loops: Sequence[ControlledLoop], dynamics: Dynamics, language: Language) -> Iterator[str]:
    """Why the margins of some loops cannot be calculated; loops that lack the same are named together."""
    lacking = [(loop.tag, reason) for loop in loops if (reason := dynamics.loop(loop.tag).reason)]
    own = [
        (found[1], tag)
        for tag, reason in lacking
        if (found := re.fullmatch(rf"the (.+) of {re.escape(tag)} is on hold", reason))
    ]
    for what, tags in grouped(own).items():
        yield language.no_margins_held(tags, what)
    named = {tag for _, tag in own}
    for reason, tags in grouped((reason, tag) for tag, reason in lacking if tag not in named).items():
        yield language.no_margins(tags, language.reason(reason))


def _given(written: object, language: Language) -> str:
    """A value, HOLD where it is held, nothing where it is not given."""
    if written is None:
        return ""
    if isinstance(written, Gain):
        return language.value(written).replace(" ", NO_BREAK)
    return language.number(written) if isinstance(written, float) else language.value(written)
