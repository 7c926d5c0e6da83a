"""Tuning rules and model reduction against published tables and worked examples."""

import math
import warnings
from dataclasses import replace
from typing import Literal

import numpy as np
import pytest

from loopdoc.engineering.frequency import LoopStage, analyse_chain
from loopdoc.engineering.pid import Controller, StandardSettings
from loopdoc.engineering.process import Process
from loopdoc.engineering.reduction import ReducedModel, reduce_to_first_order, reduce_to_second_order
from loopdoc.engineering.tuning import (
    UltimatePoint,
    amigo,
    cohen_coon,
    imc_pi,
    imc_pid,
    itae,
    lambda_pi,
    simc_at_sensitivities,
    simc_pi,
    simc_pid,
    tyreus_luyben,
    ultimate_point,
    ziegler_nichols_reaction_curve,
    ziegler_nichols_ultimate,
)

with warnings.catch_warnings():
    # python-control looks for optional packages with calls that newer Pythons deprecate.
    warnings.simplefilter("ignore")
    import control


def model(gain: float, lag_s: float, dead_time_s: float) -> ReducedModel:
    return ReducedModel(gain=gain, lag_s=lag_s, second_lag_s=0.0, dead_time_s=dead_time_s)


def integrating(slope: float, dead_time_s: float) -> ReducedModel:
    return model(slope, math.inf, dead_time_s)


def values(settings: StandardSettings) -> tuple[float, ...]:
    """Gain, then reset and rate where the rule sets them."""
    found = [settings.gain]
    if math.isfinite(settings.reset_s):
        found.append(settings.reset_s)
    if settings.rate_s:
        found.append(settings.rate_s)
    return tuple(found)


# --- SIMC and the half rule ----------------------------------------------------------------------

# S. Skogestad, J. Process Control 13:291-309, 2003, Table 4: process list and settings (from memory).
E2 = Process(1.0, (2.0, 1.0, 0.4, 0.2, 0.05, 0.05, 0.05), 0.0, (-0.3, 0.08))
E6 = Process(1.0, (1.0, 1.0, 0.028), 0.0, (0.17, 0.17), True)
E12 = Process(1.0, (10.0, 8.0, 1.0), 0.3, (6.0, 3.0))
FIRST_ORDER = [
    # process, gain, lag, dead time, Kc, tauI
    ("E1", Process(1.0, (1.0, 0.2)), 1.0, 1.1, 0.1, 5.5, 0.8),
    ("E2", E2, 1.0, 2.5, 1.47, 0.85034, 2.5),
    ("E3", Process(2.0, (20.0, 1.0, 0.1, 0.1), 0.0, (15.0,)), 1.5, 1.05, 0.15, 2.33333, 1.05),
    ("E4", Process(1.0, (1.0,) * 4), 1.0, 1.5, 2.5, 0.3, 1.5),
    ("E6", E6, 1.0, math.inf, 1.688, 0.29621, 13.504),
    ("E7", Process(1.0, (1.0,) * 3, 0.0, (-2.0,)), 1.0, 1.5, 3.5, 0.21429, 1.5),
    ("E9", Process(1.0, (1.0, 1.0), 1.0), 1.0, 1.5, 1.5, 0.5, 1.5),
    ("E10", Process(1.0, (20.0, 2.0), 1.0), 1.0, 21.0, 2.0, 5.25, 16.0),
    ("E12", E12, 0.225, 1.0, 0.3, 7.40741, 1.0),
]
SECOND_ORDER = [
    # process, gain, lags, dead time, Kc, tauI, tauD (series)
    ("E2", E2, 1.0, 2.0, 1.2, 0.77, 1.2987, 2.0),
    ("E3", Process(2.0, (20.0, 1.0, 0.1, 0.1), 0.0, (15.0,)), 1.5, 1.0, 0.15, 0.05, 6.66667, 0.4),
    ("E4", Process(1.0, (1.0,) * 4), 1.0, 1.5, 1.0, 1.5, 0.5, 1.5),
    ("E6", E6, 1.0, math.inf, 1.33, 0.358, 1.39665, 2.864),
    ("E7", Process(1.0, (1.0,) * 3, 0.0, (-2.0,)), 1.0, 1.5, 1.0, 2.5, 0.3, 1.5),
    ("E9", Process(1.0, (1.0, 1.0), 1.0), 1.0, 1.0, 1.0, 1.0, 0.5, 1.0),
    ("E10", Process(1.0, (20.0, 2.0), 1.0), 1.0, 20.0, 2.0, 1.0, 10.0, 8.0),
]


@pytest.mark.parametrize(("case", "process", "gain", "lag", "dead_time", "kc", "reset"), FIRST_ORDER)
def test_simc_pi(
    case: str, process: Process, gain: float, lag: float, dead_time: float, kc: float, reset: float
) -> None:
    reduced = reduce_to_first_order(process)
    # The models are exact decimals; the paper rounds E6 to 1.69, from which 0.296 and 13.5 follow.
    assert (reduced.gain, reduced.lag_s, reduced.dead_time_s) == pytest.approx(
        (gain, lag, dead_time), rel=1e-9
    )
    # Five decimals.
    assert values(simc_pi(reduced, closed_loop_s=dead_time)) == pytest.approx((kc, reset), abs=6e-6, rel=1e-5)


@pytest.mark.parametrize(
    ("case", "process", "gain", "lag", "second", "dead_time", "kc", "reset"), SECOND_ORDER
)
def test_simc_pid(
    case: str,
    process: Process,
    gain: float,
    lag: float,
    second: float,
    dead_time: float,
    kc: float,
    reset: float,
) -> None:
    reduced = reduce_to_second_order(process)
    found = (reduced.gain, reduced.lag_s, reduced.second_lag_s, reduced.dead_time_s)
    assert found == pytest.approx((gain, lag, second, dead_time), rel=1e-9)
    series = simc_pid(reduced, closed_loop_s=dead_time)
    assert (series.gain, series.reset_s, series.rate_s) == pytest.approx((kc, reset, second), rel=1e-5)


def test_simc_pid_without_dead_time() -> None:
    # E1 of the same table, for which the paper chooses a closed-loop time of 0.1 s.
    series = simc_pid(reduce_to_second_order(Process(1.0, (1.0, 0.2))), closed_loop_s=0.1)
    assert (series.gain, series.reset_s, series.rate_s) == pytest.approx((10.0, 0.4, 0.2), rel=1e-12)


def test_half_of_the_interval_counts_as_dead_time() -> None:
    # Skogestad 2003, section 2: h/2 of a sampled controller is added to the effective delay.
    assert reduce_to_first_order(Process(1.0, (10.0,), 2.0), interval_s=1.0).dead_time_s == 2.5


@pytest.mark.parametrize(("lead", "gain"), [(4.0, 2.0), (0.5, 0.5)])
def test_a_lead_beyond_every_lag(lead: float, gain: float) -> None:
    """Rules T1a (T0 above the closed-loop time above the lag) and T1b (both below it), Skogestad 2003."""
    # Closed-loop time 2 s = dead time; lag 1 s. T1a: 4/2. T3 from a lag of 1 s: 1/(0.5s+1), gain 1.
    reduced = reduce_to_first_order(Process(1.0, (1.0,), 2.0, (lead,)))
    if lead > 1.0:
        assert (reduced.gain, reduced.lag_s) == (gain, 0.0)
    else:
        assert (reduced.gain, reduced.lag_s) == (1.0, gain)


def test_a_lead_is_joined_with_a_smaller_lag_that_is_close_to_it() -> None:
    """Skogestad 2003, section 2 (from memory): below 1.6 times the smaller lag, and nearer to it than to the larger."""
    # T1 with the lag of 30 s, not below the dead time: the gain rises by 40/30, and the larger lag stays whole.
    reduced = reduce_to_first_order(Process(0.75, (300.0, 30.0), 20.0, (40.0,)))
    assert (reduced.gain, reduced.lag_s, reduced.dead_time_s) == pytest.approx((1.0, 300.0, 20.0), rel=1e-12)
    # 50/30 is not close, and 40/30 is further than 50/40: then the larger lag is taken, which T3 shortens or T2 drops.
    for process in (Process(0.75, (300.0, 30.0), 20.0, (50.0,)), Process(0.75, (50.0, 30.0), 20.0, (40.0,))):
        assert reduce_to_first_order(process).lag_s < 150.0


def test_a_lead_on_an_integration_alone_is_refused() -> None:
    with pytest.raises(ValueError, match="lead on an integration"):
        reduce_to_first_order(Process(1.0, (), 2.0, (1.0,), integrating=True))


# --- other rules ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("found", "expected"),
    [
        # Direct synthesis; Seborg's example with tauc = tau/3 prints Kc = 1.27, tauI = 5.93 (from memory).
        (lambda_pi(model(1.54, 5.93, 1.07), lambda_s=1.97667), (1.2639, 5.93)),
        (lambda_pi(model(1.0, 10.0, 2.0), lambda_s=2.0), (2.5, 10.0)),
        # I-L. Chien, P. S. Fruehauf, Chem. Eng. Prog. 86(10):33-41, 1990, integrating (from memory).
        (lambda_pi(integrating(0.02, 5.0), lambda_s=15.0), (4.375, 35.0)),
        (lambda_pi(integrating(0.1, 7.4), lambda_s=14.8), (0.750751, 37.0)),
        (lambda_pi(integrating(1.0, 1.0), lambda_s=3.0), (0.4375, 7.0)),
        # Rivera, Morari, Skogestad 1986; the second is P. C. Chau's Example 5.7A: about 3.4, 4.5, 0.4.
        (imc_pid(model(1.0, 10.0, 2.0), lambda_s=2.0), (3.6667, 11.0, 0.9091)),
        (imc_pid(model(1.25, 4.0, 0.9), lambda_s=0.6), (3.3905, 4.45, 0.4045)),
        # The improved PI of the same paper (from memory): (2 tau + theta)/(2 K lambda), tau + theta/2, by hand.
        (imc_pi(model(1.0, 10.0, 2.0), lambda_s=10.0), (1.1, 11.0)),
        # Ziegler and Nichols 1942, ultimate gain and period.
        (ziegler_nichols_ultimate(UltimatePoint(10.0, 4.0), "P"), (5.0,)),
        (ziegler_nichols_ultimate(UltimatePoint(10.0, 4.0), "PI"), (4.5, 3.33333)),
        (ziegler_nichols_ultimate(UltimatePoint(10.0, 4.0), "PID"), (6.0, 2.0, 0.5)),
        # Ziegler and Nichols 1942, reaction curve; the PID of the last is Chau's Example 5.7A.
        (ziegler_nichols_reaction_curve(model(1.0, 10.0, 2.0), "P"), (5.0,)),
        (ziegler_nichols_reaction_curve(model(1.0, 10.0, 2.0), "PI"), (4.5, 6.66667)),
        (ziegler_nichols_reaction_curve(model(1.0, 10.0, 2.0), "PID"), (6.0, 4.0, 1.0)),
        (ziegler_nichols_reaction_curve(model(1.25, 4.0, 0.9), "PID"), (4.2666667, 1.8, 0.45)),
        # Cohen and Coon 1953.
        (cohen_coon(model(1.25, 4.0, 0.9), "P"), (3.8222,)),
        (cohen_coon(model(1.25, 4.0, 0.9), "PI"), (3.2667, 2.045)),
        (cohen_coon(model(1.25, 4.0, 0.9), "PID"), (4.9407, 2.028, 0.3144)),
        (cohen_coon(model(1.0, 10.0, 2.0), "P"), (5.3333,)),
        (cohen_coon(model(1.0, 10.0, 2.0), "PI"), (4.5833, 4.7077)),
        (cohen_coon(model(1.0, 10.0, 2.0), "PD"), (6.4167, 0.4956)),
        (cohen_coon(model(1.0, 10.0, 2.0), "PID"), (6.9167, 4.5479, 0.7018)),
        (cohen_coon(model(1.54, 5.93, 1.07), "PI"), (3.293, 2.5918)),
        (cohen_coon(model(1.54, 5.93, 1.07), "PID"), (4.9607, 2.4508, 0.3767)),
        # Astrom and Hagglund 2006, eqs. 7.5, 7.7, 7.32, 7.33.
        (amigo(model(1.0, 10.0, 2.0), "PI"), (1.20556, 7.76515)),
        (amigo(model(1.0, 10.0, 2.0), "PID"), (2.45, 5.86667, 0.9434)),
        (amigo(model(1.25, 4.0, 0.9), "PI"), (0.8313, 3.2008)),
        (amigo(model(1.25, 4.0, 0.9), "PID"), (1.76, 2.4646, 0.4215)),
        (amigo(model(2.0, 10.0, 3.0), "PI"), (0.3625, 8.507)),
        (amigo(model(2.0, 10.0, 3.0), "PID"), (0.85, 6.9, 1.3761)),
        (amigo(integrating(0.1, 2.0), "PI"), (1.75, 26.8)),
        (amigo(integrating(0.1, 2.0), "PID"), (2.25, 16.0, 1.0)),
        # Seborg Table 11.3: the first is printed as the output of a public worked notebook (its Example 11.5), the
        # third is the coefficients themselves; the rest follow by hand, at a dead time equal to the lag and 0.5 of it.
        (itae(model(1.54, 5.93, 1.07), "PI", upset="load"), (2.9719324, 2.7459876)),
        (itae(model(1.54, 5.93, 1.07), "PI", upset="setpoint"), (1.82633, 5.92865)),
        (itae(model(1.0, 1.0, 1.0), "PI", upset="load"), (0.859, 1.4836795)),
        (itae(model(2.0, 10.0, 10.0), "PI", upset="setpoint"), (0.293, 10.0 / 0.865)),
        (itae(model(2.0, 10.0, 10.0), "PID", upset="load"), (0.6785, 10.0 / 0.842, 3.81)),
        (itae(model(2.0, 10.0, 10.0), "PID", upset="setpoint"), (0.4825, 10.0 / 0.6495, 3.08)),
        (itae(model(1.0, 10.0, 5.0), "PID", upset="setpoint"), (1.739413, 13.83604, 1.617685)),
        # Dead time alone, to which the rule was fitted as well: 0.15/Kp and 0.35 L, 0.2/Kp and 0.4 L without rate.
        (amigo(model(2.0, 0.0, 10.0), "PI"), (0.075, 3.5)),
        (amigo(model(2.0, 0.0, 10.0), "PID"), (0.1, 4.0)),
        # Tyreus and Luyben 1992.
        (tyreus_luyben(UltimatePoint(10.0, 4.0), "PI"), (3.125, 8.8)),
        (tyreus_luyben(UltimatePoint(10.0, 4.0), "PID"), (4.54545, 8.8, 0.634921)),
        (tyreus_luyben(UltimatePoint(1.570796, 4.0), "PI"), (0.490874, 8.8)),
    ],
)
def test_published_settings(found: StandardSettings, expected: tuple[float, ...]) -> None:
    # The references are printed to four or five decimals.
    assert values(found) == pytest.approx(expected, abs=6e-5, rel=2e-5)


@pytest.mark.parametrize(
    ("process", "gain", "period"),
    [
        (Process(1.0, (1.0, 1.0, 1.0)), 8.0, 3.6275987),
        (Process(2.0, (10.0, 5.0), 1.0), 7.8756645, 11.6598754),
        (Process(1.0, (10.0,), 2.0), 8.502425, 7.4415227),
        (Process(1.0, (), 1.0, integrating=True), 1.570796, 4.0),
        (Process(-1.0, (1.0, 1.0, 1.0)), -8.0, 3.6275987),
        # A gain of thousands, where the loop gain at rest says nothing of the ultimate one: Routh limit of
        # (100s+1)(0.1s+1)(0.01s+1): (a + b + c)(1/a + 1/b + 1/c) - 1.
        (Process(1.0, (100.0, 0.1, 0.01)), 100.11 * 110.01 - 1.0, 2.0 * math.pi * math.sqrt(0.1 / 100.11)),
    ],
)
def test_ultimate_points(process: Process, gain: float, period: float) -> None:
    point = ultimate_point(process)
    # Seven printed digits.
    assert (point.gain, point.period_s) == pytest.approx((gain, period), rel=5e-7)


@pytest.mark.parametrize(
    ("process", "pi", "pid"),
    [
        (Process(1.0, (1.0, 1.0, 1.0)), (3.6, 3.023), (4.8, 1.8138, 0.45345)),
        # Seborg prints Kcu = 7.88 and Pu = 11.6 for it (from memory).
        (Process(2.0, (10.0, 5.0), 1.0), (3.54405, 9.71656), (4.7254, 5.82994, 1.45748)),
        (Process(1.0, (10.0,), 2.0), (3.82609, 6.20127), (5.10145, 3.72076, 0.93019)),
    ],
)
def test_ziegler_nichols_from_the_process(
    process: Process, pi: tuple[float, ...], pid: tuple[float, ...]
) -> None:
    point = ultimate_point(process)
    # Five decimals, or four digits.
    assert values(ziegler_nichols_ultimate(point, "PI")) == pytest.approx(pi, abs=6e-6, rel=5e-5)
    assert values(ziegler_nichols_ultimate(point, "PID")) == pytest.approx(pid, abs=6e-6, rel=5e-5)


def test_margins_of_tyreus_luyben_on_an_integrator_with_dead_time() -> None:
    # exp(-s)/s: Ku = pi/2, Pu = 4; the margins of its PI computed from the frequency response (four digits).
    process = Process(1.0, (), 1.0, integrating=True)
    settings = tyreus_luyben(ultimate_point(process), "PI")
    margins = analyse_chain([LoopStage(Controller(settings.gain, settings.reset_s), process)])[0]
    found = (margins.gain_margin, margins.phase_margin_deg, margins.max_sensitivity)
    assert found == pytest.approx((3.037, 48.44, 1.672), rel=3e-4)


def test_a_process_that_never_oscillates_has_no_ultimate_point() -> None:
    with pytest.raises(ValueError, match="never reaches -180 degrees"):
        ultimate_point(Process(1.0, (10.0, 2.0)))


@pytest.mark.parametrize(
    "rule",
    [
        lambda: simc_pi(model(1.0, 10.0, 0.0), closed_loop_s=0.0),
        lambda: simc_pi(model(1.0, 0.0, 1.0), closed_loop_s=1.0),
        lambda: lambda_pi(model(1.0, 10.0, 1.0), lambda_s=0.0),
        lambda: imc_pid(model(1.0, 10.0, 1.0), lambda_s=0.0),
        lambda: imc_pid(integrating(1.0, 1.0), lambda_s=1.0),
        lambda: cohen_coon(integrating(1.0, 1.0), "PI"),
        lambda: cohen_coon(model(1.0, 0.0, 1.0), "PI"),
        # Its rate, theta (6 - 2 r)/(22 + 3 r), is none at r = 3.
        lambda: cohen_coon(model(1.0, 1.0, 3.0), "PD"),
        # Rivera, Morari and Skogestad 1986: lambda above 1.7 theta (from memory).
        lambda: imc_pi(model(1.0, 10.0, 2.0), lambda_s=3.4),
        lambda: itae(integrating(1.0, 1.0), "PI", upset="load"),
        lambda: ziegler_nichols_reaction_curve(model(1.0, 10.0, 0.0), "PI"),
    ],
)
def test_rules_refuse_what_they_cannot_tune(rule: object) -> None:
    with pytest.raises(ValueError, match=r"need|not for integrating"):
        rule()  # type: ignore[operator]


@pytest.mark.parametrize("dead_time_s", [0.99, 10.1, 0.0])
def test_the_error_integrals_are_not_used_beyond_what_they_were_fitted_to(dead_time_s: float) -> None:
    with pytest.raises(ValueError, match=r"fitted to dead times .* (0|0\.099|1\.01) times the lag"):
        itae(model(1.0, 10.0, dead_time_s), "PI", upset="setpoint")


def time_weighted_error(settings: StandardSettings, dead_time_s: float, upset: str) -> float:
    """Integral of t |e| of e^{-Ls}/(s+1) under continuous control by python-control, the delay by a Pade of order 6."""
    numerator, denominator = control.pade(dead_time_s, 6)
    process = control.ss(control.tf(numerator, np.polymul(denominator, [1.0, 1.0])))
    # K (1 + 1/(Ti s) + Td s/(1 + Td s/50)); without rate the second factor falls out.
    lead = [settings.rate_s / 50.0, 1.0]
    top = np.polyadd(
        np.polymul([settings.reset_s, 1.0], lead), [settings.reset_s * settings.rate_s, 0.0, 0.0]
    )
    controller = control.ss(control.tf(settings.gain * top, np.polymul([settings.reset_s, 0.0], lead)))
    time_s = np.linspace(0.0, 15.0 * (1.0 + dead_time_s), 1200)
    loop = control.feedback(process, controller) if upset == "load" else control.feedback(1, process * controller)
    error = np.asarray(control.forced_response(loop, time_s, np.ones_like(time_s)).outputs)
    return float(np.trapezoid(time_s * np.abs(error), time_s))


@pytest.mark.parametrize(("actions", "upset"), [("PI", "load"), ("PID", "load"), ("PI", "setpoint")])
def test_itae_settings_leave_nearly_the_least_error(
    actions: Literal["PI", "PID"], upset: Literal["load", "setpoint"]
) -> None:
    """By the definition of the rule; the setpoint PID is left out, since its rate acted on a setpoint otherwise."""
    settings = itae(model(1.0, 1.0, 0.5), actions, upset=upset)
    found = time_weighted_error(settings, 0.5, upset)
    for field in ("gain", "reset_s", "rate_s")[: len(actions)]:
        for factor in (0.8, 1.25):
            changed = replace(settings, **{field: factor * getattr(settings, field)})
            # The fits are straight lines through optima that lie up to 4 % lower.
            assert time_weighted_error(changed, 0.5, upset) > 0.97 * found


# --- tuning to a robustness ----------------------------------------------------------------------


def test_simc_at_its_own_published_sensitivity() -> None:
    # Skogestad 2003, Table 1: tauc = theta gives Ms 1.7035 (integrating) and 1.5905 (lag = reset).
    level, flow = simc_at_sensitivities(
        [Process(1.0, (), 1.0, integrating=True), Process(3.0, (5.0,), 1.0)],
        target_ms=[1.7035217, 1.5904902],
        interval_s=[0.0, 0.0],
    )
    assert level is not None
    assert flow is not None
    # Ms to eight digits gives the tuning constant to about seven.
    assert level.closed_loop_s == pytest.approx(1.0, rel=1e-5)
    assert level.settings.gain == pytest.approx(0.5, rel=1e-5)
    assert level.settings.reset_s == pytest.approx(8.0, rel=1e-5)
    assert flow.closed_loop_s == pytest.approx(1.0, rel=1e-5)


@pytest.mark.parametrize("with_rate", [False, True])
@pytest.mark.parametrize("target", [1.2, 1.6, 3.0])
def test_the_sensitivity_reached_is_the_one_asked_for(target: float, with_rate: bool) -> None:
    processes = [
        Process(1.1, (4.0, 540.0), 91.0),
        Process(-0.4, (30.0, 8.0, 2.0), 0.0),
        Process(0.01, (6.0,), 3.0, integrating=True),
        Process(1.0, (5.0,), 0.0),
    ]
    intervals = [1.0, 0.5, 1.0, 2.0]
    found = simc_at_sensitivities(
        processes,
        target_ms=[target] * 4,
        interval_s=intervals,
        measurement_filter_s=[0.0, 1.0, 0.0, 0.0],
        with_rate=with_rate,
    )
    for process, interval, filter_s, tuning in zip(
        processes, intervals, [0.0, 1.0, 0.0, 0.0], found, strict=True
    ):
        assert tuning is not None
        settings = tuning.settings
        controller = Controller(
            settings.gain,
            settings.reset_s,
            settings.rate_s,
            interval_s=interval,
            measurement_filter_s=filter_s,
        )
        margins = analyse_chain([LoopStage(controller, process)])[0]
        # The search stops within 1e-7 of the target; margins and search refine the peak separately.
        assert margins.max_sensitivity == pytest.approx(target, rel=1e-6)
        assert tuning.max_sensitivity == pytest.approx(target, rel=1e-6)


def test_no_tuning_where_no_gain_disturbs_the_loop() -> None:
    unlimited, no_lag = simc_at_sensitivities(
        [Process(1.0, (5.0,)), Process(1.0, (), 3.0)], target_ms=[1.5, 1.5], interval_s=[0.0, 1.0]
    )
    assert unlimited is None
    assert no_lag is None


@pytest.mark.parametrize("target", [1.0, math.inf, math.nan])
def test_a_meaningless_target_is_refused(target: float) -> None:
    with pytest.raises(ValueError, match="finite number above 1"):
        simc_at_sensitivities([Process(1.0, (5.0,), 1.0)], target_ms=[target], interval_s=[1.0])
