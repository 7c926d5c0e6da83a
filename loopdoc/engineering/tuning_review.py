"""The published tuning rules on a loop of the register: settings in its own form, and the margins each would give.

The rules speak of one lag and a dead time; the margins come from the exact frequency response of the whole
model. Rules advise, margins decide: no settings stand here without them.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from loopdoc.engineering.dynamics import ChainDynamics, LoopDynamics
from loopdoc.engineering.frequency import LoopStage, Margins, analyse_chains
from loopdoc.engineering.open_loop import level_arrays, open_loops, static_gains
from loopdoc.engineering.pid import (
    Controller,
    SeriesSettings,
    StandardSettings,
    parallel_from_standard,
    series_from_standard,
    standard_from_series,
)
from loopdoc.engineering.process import Process, frequency_response
from loopdoc.engineering.reduction import ReducedModel, reduce_to_first_order, reduce_to_second_order
from loopdoc.engineering.sampled import quoted_margins
from loopdoc.engineering.stages import settings_of
from loopdoc.engineering.tuning import (
    UltimatePoint,
    amigo,
    cohen_coon,
    imc_pi,
    imc_pid,
    itae,
    lambda_pi,
    simc_pi,
    simc_pid,
    tyreus_luyben,
    ultimate_point,
    ziegler_nichols_reaction_curve,
    ziegler_nichols_ultimate,
)
from loopdoc.register.model import known

SIMC = "S. Skogestad, J. Process Control 13:291-309, 2003"
LAMBDA = "D. E. Seborg and others, Process Dynamics and Control (direct synthesis)"
LAMBDA_INTEGRATING = "I-L. Chien, P. S. Fruehauf, Chem. Eng. Prog. 86(10):33-41, 1990 (integrating processes)"
IMC = "D. E. Rivera, M. Morari, S. Skogestad, Ind. Eng. Chem. Process Des. Dev. 25:252-265, 1986"
AMIGO = "K. J. Åström, T. Hägglund, Advanced PID Control, ISA 2006"
ZIEGLER_NICHOLS = "J. G. Ziegler, N. B. Nichols, Trans. ASME 64:759-768, 1942"
COHEN_COON = "G. H. Cohen, G. A. Coon, Trans. ASME 75:827-834, 1953"
ITAE = (
    "A. M. Lopez and others, Instrum. Technol. 14(11):57-62, 1967 (load); A. A. Rovira and others, Instrum. Control "
    "Syst. 42(12):67-69, 1969 (setpoint)"
)
TYREUS_LUYBEN = "B. D. Tyreus, W. L. Luyben, Ind. Eng. Chem. Res. 31:2625-2628, 1992"


# ---------------------------------------------------------------- what the rules say


@dataclass(frozen=True, slots=True)
class Recommendation:
    """What one published rule says for a process."""

    rule: str
    """Name of the rule and of the actions it sets."""
    source: str
    settings: StandardSettings
    """The settings in the standard form."""


@dataclass(frozen=True, slots=True)
class NotApplicable:
    """A rule that says nothing for a process, and why."""

    rule: str
    reason: str


def closed_loop_times(model: ReducedModel) -> tuple[float, float]:
    """Return what SIMC and what lambda and IMC tuning are asked for [s].

    SIMC takes the effective dead time (its default); lambda and IMC the lag, at least the dead time, and three
    dead times of an integrating process.
    """
    lambda_s = 3.0 * model.dead_time_s if model.integrating else max(model.dead_time_s, model.lag_s)
    return model.dead_time_s, lambda_s


def recommendations(
    first: ReducedModel,
    second: ReducedModel,
    ultimate: UltimatePoint | NotApplicable,
    *,
    proportional_only: bool = False,
) -> tuple[Recommendation | NotApplicable, ...]:
    """What each rule says of a process, given as its models of first and second order and its ultimate point.

    The rules that set no reset are asked for a controller without it.
    """
    simc_s, lambda_s = closed_loop_times(first)
    second_s, _ = closed_loop_times(second)
    lambda_source = LAMBDA_INTEGRATING if first.integrating else LAMBDA

    def at_ultimate(rule: Callable[[UltimatePoint], StandardSettings]) -> Callable[[], StandardSettings]:
        def settings() -> StandardSettings:
            if isinstance(ultimate, NotApplicable):
                raise ValueError(ultimate.reason)
            return rule(ultimate)

        return settings

    curve, oscillation = "Ziegler-Nichols {}, reaction curve", "Ziegler-Nichols {}, ultimate gain"
    proportional: list[tuple[str, str, Callable[[], StandardSettings]]] = [
        (curve.format("P"), ZIEGLER_NICHOLS, lambda: ziegler_nichols_reaction_curve(first, "P")),
        (oscillation.format("P"), ZIEGLER_NICHOLS, at_ultimate(lambda point: ziegler_nichols_ultimate(point, "P"))),
        ("Cohen-Coon P", COHEN_COON, lambda: cohen_coon(first, "P")),
        ("Cohen-Coon PD", COHEN_COON, lambda: cohen_coon(first, "PD")),
    ]
    rules: list[tuple[str, str, Callable[[], StandardSettings]]] = [
        ("SIMC PI", SIMC, lambda: simc_pi(first, closed_loop_s=_positive(simc_s))),
        ("SIMC PID", SIMC, lambda: standard_from_series(_simc_with_rate(second, _positive(second_s)))),
        ("lambda PI", lambda_source, lambda: lambda_pi(first, lambda_s=lambda_s)),
        ("IMC PI", IMC, lambda: imc_pi(first, lambda_s=lambda_s)),
        ("IMC PID", IMC, lambda: imc_pid(first, lambda_s=lambda_s)),
        ("AMIGO PI", AMIGO, lambda: amigo(first, "PI")),
        ("AMIGO PID", AMIGO, lambda: amigo(first, "PID")),
        (curve.format("PI"), ZIEGLER_NICHOLS, lambda: ziegler_nichols_reaction_curve(first, "PI")),
        (curve.format("PID"), ZIEGLER_NICHOLS, lambda: ziegler_nichols_reaction_curve(first, "PID")),
        (oscillation.format("PI"), ZIEGLER_NICHOLS, at_ultimate(lambda point: ziegler_nichols_ultimate(point, "PI"))),
        (oscillation.format("PID"), ZIEGLER_NICHOLS, at_ultimate(lambda point: ziegler_nichols_ultimate(point, "PID"))),
        ("Cohen-Coon PI", COHEN_COON, lambda: cohen_coon(first, "PI")),
        ("Cohen-Coon PID", COHEN_COON, lambda: cohen_coon(first, "PID")),
        ("ITAE PI, load", ITAE, lambda: itae(first, "PI", upset="load")),
        ("ITAE PID, load", ITAE, lambda: itae(first, "PID", upset="load")),
        ("ITAE PI, setpoint", ITAE, lambda: itae(first, "PI", upset="setpoint")),
        ("ITAE PID, setpoint", ITAE, lambda: itae(first, "PID", upset="setpoint")),
        ("Tyreus-Luyben PI", TYREUS_LUYBEN, at_ultimate(lambda point: tyreus_luyben(point, "PI"))),
        ("Tyreus-Luyben PID", TYREUS_LUYBEN, at_ultimate(lambda point: tyreus_luyben(point, "PID"))),
    ]
    found: list[Recommendation | NotApplicable] = []
    for name, source, rule in (*(proportional if proportional_only else ()), *rules):
        try:
            found.append(Recommendation(name, source, rule()))
        except ValueError as error:
            found.append(NotApplicable(name, str(error)))
    return tuple(found)


def _simc_with_rate(second: ReducedModel, closed_loop_s: float) -> SeriesSettings:
    if second.second_lag_s <= 0.0:
        raise ValueError("the process has no second lag to set the rate by: what remains is SIMC PI")
    return simc_pid(second, closed_loop_s=closed_loop_s)


def _positive(dead_time_s: float) -> float:
    if dead_time_s <= 0.0:
        raise ValueError("this rule needs a dead time above zero: without one it asks for infinite gain")
    return dead_time_s


# ---------------------------------------------------------------- what a controller sees


@dataclass(frozen=True, slots=True)
class ProcessSeen:
    """What a controller sees: its process, the loops closed below it, its measurement filter; and the rules' models."""

    below_lag_s: float
    """Lag that stands for the closed loop below [s]; 0 of a single loop."""
    below_dead_time_s: float
    """Dead time that stands for it beside the lag [s]; 0 of a single loop."""
    matched_rad_per_s: float
    """Where both agree with it, and where the errors below are taken [rad/s]; nan where there is no such place."""
    first: ReducedModel
    """Model of first order; half of the execution interval counts as dead time."""
    second: ReducedModel
    """Model of second order, which SIMC takes for a controller with rate."""
    is_reduced: bool
    """True where the process is not one lag (or an integration) and a dead time already."""
    gain_error: float
    """Magnitude of the first model over the exact one, less 1 [dimensionless]; nan where it is not known."""
    phase_error_deg: float
    """Phase of the first model less the exact one [deg]."""
    ultimate: UltimatePoint | NotApplicable


def process_seen(stages: Sequence[LoopStage]) -> ProcessSeen:
    """What the outermost controller of a chain sees, and the models of it that the rules are given.

    A closed loop below is taken as a lag and a dead time that agree with it exactly, in magnitude and phase, where
    the phase of all together reaches -180 degrees: there its share in the ultimate gain is decided. Where the phase
    never does, they agree at the crossover of the controller as configured.

    Parameters
    ----------
    stages : sequence of LoopStage
        Innermost level first.

    Returns
    -------
    ProcessSeen
        The models and how far the first differs from the exact response.

    Raises
    ------
    ValueError
        There is no frequency at which a closed loop below could be matched, or it does not follow its setpoint, or
        the half rule does not reduce the process.

    Source: S. Skogestad, J. Process Control 13:291-309, 2003 (half rule; from memory). The matching at the phase
    crossover is ours.
    """
    *below, stage = stages
    controller = stage.controller
    filter_s, interval_s = controller.measurement_filter_s, controller.interval_s
    ultimate: UltimatePoint | NotApplicable
    try:
        ultimate = ultimate_point(
            stage.process, interval_s=interval_s, measurement_filter_s=filter_s, below=below
        )
        w = 2.0 * math.pi / ultimate.period_s
    except ValueError as error:
        ultimate = NotApplicable("", str(error))
        w = analyse_chains([stages])[0][-1].crossover_rad_per_s
    if interval_s and w > math.pi / 2.0 / interval_s and isinstance(ultimate, UltimatePoint):
        ultimate = NotApplicable(
            "",
            "it needs the ultimate gain, and the phase reaches -180 degrees above a quarter of the sampling "
            "frequency, where half an interval of dead time no longer stands for the sampling",
        )
    lags = (*stage.process.lags_s, filter_s) if filter_s else stage.process.lags_s
    process = replace(stage.process, lags_s=lags)
    below_lag_s = below_dead_time_s = 0.0
    exact = _seen_at(stages, w) if math.isfinite(w) else complex(math.nan)
    if below:
        process = replace(process, gain=_static_gain(stages))
        if not math.isfinite(w):
            raise ValueError(
                "the phase never reaches -180 degrees and the gain never crosses 1: there is no frequency at which "
                "the closed loop below could be replaced by a lag and a dead time"
            )
        share = exact / _response(process, w, interval_s / 2.0)
        below_lag_s, below_dead_time_s = _lag_and_dead_time(share, w)
        process = replace(
            process, lags_s=(*process.lags_s, below_lag_s), dead_time_s=process.dead_time_s + below_dead_time_s
        )
    first = reduce_to_first_order(process, interval_s=interval_s)
    simple = Process(
        first.gain, () if first.integrating else (first.lag_s,), first.dead_time_s, integrating=first.integrating
    )
    off = _response(simple, w, 0.0) / exact if math.isfinite(w) else complex(math.nan)
    return ProcessSeen(
        below_lag_s=below_lag_s,
        below_dead_time_s=below_dead_time_s,
        matched_rad_per_s=w,
        first=first,
        second=reduce_to_second_order(process, interval_s=interval_s),
        is_reduced=bool(below) or process.order > 1 or any(process.leads_s),
        gain_error=abs(off) - 1.0,
        phase_error_deg=math.degrees(cmath.phase(off)) if math.isfinite(abs(off)) else math.nan,
        ultimate=ultimate,
    )


def _unit_controller(stage: LoopStage) -> Controller:
    seen = stage.controller
    return Controller(1.0, interval_s=seen.interval_s, measurement_filter_s=seen.measurement_filter_s)


def _seen_at(stages: Sequence[LoopStage], w_rad_per_s: float) -> complex:
    """Exact response that the outermost controller acts on: its open loop with a gain of 1 in its place."""
    controllers = [*(stage.controller for stage in stages[:-1]), _unit_controller(stages[-1])]
    levels = [
        level_arrays([controller], [stage.process]) for controller, stage in zip(controllers, stages, strict=True)
    ]
    return complex(open_loops(levels, np.array([[w_rad_per_s]]))[-1][0, 0])


def _static_gain(stages: Sequence[LoopStage]) -> float:
    """Gain, or slope, of what the outermost controller sees: a loop below without reset follows in part only."""
    controllers = [*(stage.controller for stage in stages[:-1]), _unit_controller(stages[-1])]
    levels = [
        level_arrays([controller], [stage.process]) for controller, stage in zip(controllers, stages, strict=True)
    ]
    gain = float(static_gains(levels)[-1][1][0])
    if not math.isfinite(gain) or gain == 0.0:
        raise ValueError("the loop below does not follow its setpoint")
    return gain


def _response(process: Process, w_rad_per_s: float, delay_s: float) -> complex:
    response = complex(frequency_response(process, np.array([w_rad_per_s]))[0])
    return response * cmath.exp(-1j * w_rad_per_s * delay_s)


def _lag_and_dead_time(share: complex, w_rad_per_s: float) -> tuple[float, float]:
    """Lag and dead time that have this response at one frequency; no lag where it is above 1, no dead time below 0."""
    behind = -cmath.phase(share) % (2.0 * math.pi)
    if behind > 1.5 * math.pi:  # a closed loop that leads here, by its setpoint weight or an overshoot
        return 0.0, 0.0
    turned = math.acos(min(1.0, abs(share)))
    lag_angle = min(turned, behind, math.radians(89.0))
    return math.tan(lag_angle) / w_rad_per_s, (behind - lag_angle) / w_rad_per_s


# ---------------------------------------------------------------- the loop's own form


@dataclass(frozen=True, slots=True)
class FormSettings:
    """Settings in a loop's own form, as the register's keys have them."""

    gain: float
    """Percent of output per percent of measurement span, positive: K, or Kp of the parallel form."""
    reset_s: float
    """Reset time [s], infinite for none; of the parallel form the reciprocal of its integral gain."""
    rate_s: float
    """Rate time [s]; of the parallel form its derivative gain."""


def in_form(settings: StandardSettings, form: str) -> FormSettings:
    """Standard settings in another form, as the register's keys have them: the inverse of `stages.settings_of`.

    Parameters
    ----------
    settings : StandardSettings
        The settings; the sign of the gain is not told, since the action gives it.
    form : str
        standard, series or parallel.

    Returns
    -------
    FormSettings
        The settings in that form.

    Raises
    ------
    ValueError
        The form cannot express them.

    Source: ISA-TR5.9-2023 (forms; from memory).
    """
    positive = replace(settings, gain=abs(settings.gain))
    if form == "series":
        series = series_from_standard(positive)
        return FormSettings(series.gain, series.reset_s, series.rate_s)
    if form == "parallel":
        parallel = parallel_from_standard(positive)
        integral = parallel.integral_per_s
        return FormSettings(parallel.proportional, 1.0 / integral if integral else math.inf, parallel.derivative_s)
    return FormSettings(positive.gain, positive.reset_s, positive.rate_s)


# ---------------------------------------------------------------- the review


@dataclass(frozen=True, slots=True)
class RuleSettings:
    """What one rule sets in a loop, and what that gives."""

    rule: str
    source: str
    settings: FormSettings
    margins: Margins
    """On the whole model, every loop below closed; of several branches of a split range those of the worst."""


@dataclass(frozen=True, slots=True)
class TuningReview:
    """The published rules on one loop, beside what is configured."""

    dynamics: ChainDynamics
    """The chain of which the loop is the lead."""
    form: str
    """standard, parallel or series."""
    configured: RuleSettings
    rules: tuple[RuleSettings | NotApplicable, ...]
    seen: ProcessSeen
    branches: int
    """Final elements of a split range that the loop moves; 1 of every other loop."""
    action_contradicts: bool
    """True where the configured action is not the one that the process needs; the rules' margins are for that one."""

    @property
    def tag(self) -> str:
        return self.dynamics.chain.lead.tag


@dataclass(frozen=True, slots=True)
class NotReviewed:
    """Why no tuning can be reviewed."""

    tag: str
    reason: str


def reviewed_loops(loop: LoopDynamics) -> tuple[str, ...]:
    """Tags of a loop and of those closed below it, outermost first."""
    levels = (level.loop.tag for found in loop.chains for level in reversed(found.chain.levels))
    return tuple(dict.fromkeys((loop.tag, *levels)))


def review(loop: LoopDynamics) -> tuple[TuningReview | NotReviewed, ...]:
    """The tuning review of a loop on each of its chains (the branches of a split range); one reason where none is."""
    if not loop.chains:
        return (NotReviewed(loop.tag, loop.reason),)
    return tuple(_review(loop, dynamics) for dynamics in loop.chains)


def _review(loop: LoopDynamics, dynamics: ChainDynamics) -> TuningReview | NotReviewed:
    chain = dynamics.chain
    for level, margins in zip(chain.levels[:-1], dynamics.margins[:-1], strict=True):
        if not margins.stable:
            return NotReviewed(loop.tag, f"{level.loop.tag}, on which it acts, is not stable as tuned")
    written = chain.lead.controller
    form = known(written.form) or "standard"
    standard = settings_of(written, loop.tag)
    stage = chain.stages[-1]
    try:
        seen = process_seen(chain.stages)
    except ValueError as error:
        return NotReviewed(loop.tag, str(error))
    worst = loop.worst
    assert worst is not None
    configured = RuleSettings("as configured", "", in_form(standard, form), worst.margins[-1])
    told: list[NotApplicable | tuple[Recommendation, FormSettings]] = []
    proportional_only = math.isinf(standard.reset_s)
    for found in recommendations(seen.first, seen.second, seen.ultimate, proportional_only=proportional_only):
        if isinstance(found, NotApplicable):
            told.append(found)
            continue
        # The stage's gain is in percent of what is commanded; the register's is in percent of the output.
        gain = standard.gain * found.settings.gain / stage.controller.gain
        try:
            told.append((found, in_form(replace(found.settings, gain=gain), form)))
        except ValueError as error:
            told.append(NotApplicable(found.rule, str(error)))
    applied = [entry for entry in told if not isinstance(entry, NotApplicable)]
    margins_of = iter(_worst_margins(loop, stage, [found.settings for found, _ in applied]))
    return TuningReview(
        dynamics=dynamics,
        form=form,
        configured=configured,
        rules=tuple(
            entry
            if isinstance(entry, NotApplicable)
            else RuleSettings(entry[0].rule, entry[0].source, entry[1], next(margins_of))
            for entry in told
        ),
        seen=seen,
        branches=len({one.chain.final_element.tag for one in loop.chains}),
        action_contradicts=stage.controller.gain * seen.first.gain < 0.0,
    )


def _worst_margins(loop: LoopDynamics, stage: LoopStage, wanted: Sequence[StandardSettings]) -> Iterator[Margins]:
    """Margins of a loop with each of these settings, which are in percent of what the given stage commands."""
    trials = []
    for settings in wanted:
        for dynamics in loop.chains:
            *below, own = dynamics.chain.stages
            # One controller moves every branch of a split range: the same change of its gain reaches all of them.
            gain = own.controller.gain * settings.gain / stage.controller.gain
            tried = replace(own.controller, gain=gain, reset_s=settings.reset_s, rate_s=settings.rate_s)
            trials.append([*below, replace(own, controller=tried)])
    analysed = [found[-1] for found in quoted_margins(trials)]
    for start in range(0, len(analysed), len(loop.chains)):
        yield max(analysed[start : start + len(loop.chains)], key=lambda margins: margins.max_sensitivity)
