"""Time responses against closed forms, python-control and the properties of linear systems."""

import math
import warnings
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.linalg import expm

from loopdoc.engineering.clock import Clock, Unsuited, choose_clocks
from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.simulation import Response, simulate, simulate_metrics
from loopdoc.engineering.structure import (
    ControlStructure,
    Disturbance,
    FinalElement,
    Scenario,
    cascade_structure,
    single_loop_structure,
    standard_scenarios,
)

with warnings.catch_warnings():
    # python-control looks for optional packages with calls that newer Pythons deprecate.
    warnings.simplefilter("ignore")
    import control

VALVE = FinalElement()
WIDE = {"output_low_pct": -1e9, "output_high_pct": 1e9, "setpoint_low_pct": -1e9, "setpoint_high_pct": 1e9}


def manual(
    process: Process, *, step_pct: float = 10.0, clock: Clock, valve: FinalElement = VALVE
) -> Response:
    """Step of the final element with the loop in manual."""
    structure = ControlStructure((process,), (None,), valve)
    return simulate([structure], [Scenario("step", final_element_step_pct=step_pct)], clock=clock)[0][0]


def deviation(response: Response) -> NDArray[np.float64]:
    return response.measurement_pct[-1] - 50.0


# --- processes alone -----------------------------------------------------------------------------


def after(time_s: NDArray[np.float64], dead_time_s: float) -> NDArray[np.float64]:
    return np.maximum(time_s - dead_time_s, 0.0)


@pytest.mark.parametrize("dead_time_s", [0.0, 3.0, 2.37, 0.11])
def test_step_of_a_lag_with_dead_time(dead_time_s: float) -> None:
    response = manual(Process(2.0, (7.0,), dead_time_s), clock=Clock(0.5, 120))
    expected = 20.0 * (1.0 - np.exp(-after(response.time_s, dead_time_s) / 7.0))
    # The held input is solved exactly, also where the dead time ends within a step.
    np.testing.assert_allclose(deviation(response), expected, atol=1e-11)


def test_step_of_two_equal_lags() -> None:
    response = manual(Process(1.0, (4.0, 4.0)), clock=Clock(1.0, 60))
    x = response.time_s / 4.0
    np.testing.assert_allclose(deviation(response), 10.0 * (1.0 - (1.0 + x) * np.exp(-x)), atol=1e-11)


def test_step_of_an_inverse_response() -> None:
    response = manual(Process(1.0, (6.0, 2.0), 1.0, (-3.0,)), clock=Clock(0.25, 160))
    t = after(response.time_s, 1.0)
    # (1-3s)/((6s+1)(2s+1)) in partial fractions: weights (6+3)/(6-2) and (2+3)/(2-6).
    expected = 10.0 * (1.0 - 9.0 / 4.0 * np.exp(-t / 6.0) + 5.0 / 4.0 * np.exp(-t / 2.0))
    np.testing.assert_allclose(deviation(response), expected, atol=1e-11)
    assert deviation(response).min() < -1.0


def test_step_of_an_integration_with_lag() -> None:
    response = manual(Process(-0.02, (5.0,), integrating=True), clock=Clock(1.0, 100))
    t = response.time_s
    np.testing.assert_allclose(deviation(response), -0.2 * (t - 5.0 * (1.0 - np.exp(-t / 5.0))), atol=1e-10)


def test_static_process_with_dead_time() -> None:
    response = manual(Process(0.8, (), 2.0), clock=Clock(0.5, 20))
    # A held value is read just before it changes, so the step shows in the first scan after the dead time.
    np.testing.assert_allclose(deviation(response), np.where(response.time_s > 2.0, 8.0, 0.0), atol=1e-12)


def test_a_chain_of_processes_without_controllers() -> None:
    # A secondary that moves in a straight line between steps leaves an error of order (step/lag)^2.
    structure = ControlStructure((Process(1.0, (3.0,)), Process(2.0, (20.0,), 4.0)), (None, None), VALVE)
    response = simulate([structure], [Scenario("step", final_element_step_pct=10.0)], clock=Clock(0.1, 1000))[
        0
    ][0]
    t = after(response.time_s, 4.0)
    expected = 20.0 * (1.0 - 20.0 / 17.0 * np.exp(-t / 20.0) + 3.0 / 17.0 * np.exp(-t / 3.0))
    np.testing.assert_allclose(deviation(response), expected, atol=1e-3)


def test_disturbance_comes_through_the_lags_of_its_level_only() -> None:
    structure = ControlStructure(
        (Process(3.0, (4.0,), 2.0), Process(2.0, (20.0, 5.0), 4.0)), (None, None), VALVE
    )
    scenarios = [Scenario("d", disturbances=(Disturbance(level, 10.0),)) for level in (0, 1)]
    inner, outer = simulate([structure], scenarios, clock=Clock(0.1, 2000))[0]
    t = inner.time_s
    # At the secondary: no dead time, no gain. From there through gain 2, 4 s, and the primary's lags.
    np.testing.assert_allclose(inner.measurement_pct[0] - 50.0, 10.0 * (1.0 - np.exp(-t / 4.0)), atol=1e-11)
    assert deviation(inner)[-1] == pytest.approx(20.0, abs=1e-2)
    assert np.all(deviation(inner)[t <= 4.0] == 0.0)
    expected = 10.0 * (1.0 - 4.0 / 3.0 * np.exp(-t / 20.0) + 1.0 / 3.0 * np.exp(-t / 5.0))
    np.testing.assert_allclose(deviation(outer), expected, atol=1e-11)
    assert np.all(outer.measurement_pct[0] == 50.0)


def test_disturbance_of_an_integrating_process_is_a_load() -> None:
    structure = ControlStructure((Process(-0.02, integrating=True),), (None,), VALVE)
    response = simulate(
        [structure], [Scenario("d", disturbances=(Disturbance(0, 5.0),))], clock=Clock(1.0, 40)
    )
    np.testing.assert_allclose(deviation(response[0][0]), 0.1 * response[0][0].time_s, atol=1e-12)


def test_a_disturbance_may_have_a_path_of_its_own() -> None:
    structure = ControlStructure((Process(3.0, (4.0,), 2.0), Process(2.0, (20.0, 5.0), 4.0)), (None, None), VALVE)
    own = Disturbance(1, 10.0, Process(1.0, (7.0,), 30.0))
    load = Disturbance(1, -5.0, Process(-0.02, integrating=True))
    scenarios = [Scenario("own", disturbances=(own,)), Scenario("both", disturbances=(own, load))]
    one, both = simulate([structure], scenarios, clock=Clock(0.1, 2000))[0]
    # The dead time of a path would only postpone the upset: the time of the response begins without it.
    expected = 10.0 * (1.0 - np.exp(-one.time_s / 7.0))
    np.testing.assert_allclose(deviation(one), expected, atol=1e-11)
    np.testing.assert_allclose(deviation(both), expected + 0.1 * one.time_s, atol=1e-10)


def test_a_slow_disturbance_is_followed_until_it_has_come() -> None:
    stage = LoopStage(Controller(1.0, 5.0, interval_s=0.5, **WIDE), Process(1.0, (4.0,), 1.0))
    structure = cascade_structure([stage], final_element=VALVE)
    slow = Scenario("slow", disturbances=(Disturbance(0, 10.0, Process(1.0, (300.0,))),))
    response = simulate([structure], [slow])[0][0]
    # Against integral action a ramp of 10/300 % a second stands off by slope Ti/K, less what has died out.
    assert response.time_s[-1] >= 1800.0
    assert response.metrics.settling_s < 1800.0
    late = response.time_s > 60.0
    expected = 10.0 / 300.0 * np.exp(-response.time_s[late] / 300.0) * 5.0
    np.testing.assert_allclose(deviation(response)[late], expected, rtol=0.02, atol=1e-4)


# --- closed loops --------------------------------------------------------------------------------


def test_sampled_loop_against_its_exact_discrete_form() -> None:
    """One PI loop on a lag with two scans of dead time, as a matrix recursion written out by hand."""
    k, ti, h, gain, lag = 1.3, 9.0, 0.5, 1.2, 6.0
    structure = ControlStructure(
        (Process(gain, (lag,), 2.0 * h),), (Controller(k, ti, interval_s=h, **WIDE),), VALVE
    )
    response = simulate([structure], [Scenario("sp", setpoint_step_pct=10.0)], clock=Clock(h, 300))[0][0]
    a = math.exp(-h / lag)
    y, integral, waiting, expected = 0.0, 0.0, [0.0, 0.0], []
    for _ in range(301):
        expected.append(y)
        integral += k * h / ti * (10.0 - y)
        waiting.append(k * (10.0 - y) + integral)
        y = a * y + gain * (1.0 - a) * waiting.pop(0)
    # The same recursion: rounding only.
    np.testing.assert_allclose(deviation(response), expected, atol=1e-10)


def closed_cascade(inner: LoopStage, outer: LoopStage) -> tuple[control.StateSpace, ...]:
    """Continuous closed cascade by python-control: primary measurement from setpoint, d at each measurement."""
    s = control.tf("s")

    def parts(
        stage: LoopStage,
    ) -> tuple[control.TransferFunction, control.TransferFunction, control.TransferFunction]:
        lags = control.tf(1, 1)
        for lag in stage.process.lags_s:
            lags = lags / (lag * s + 1)
        pi = stage.controller.gain * (1 + 1 / (stage.controller.reset_s * s))
        return pi, stage.process.gain * lags, lags

    c2, g2, d2 = parts(inner)
    c1, g1, d1 = parts(outer)
    closed2 = control.minreal(c2 * g2 / (1 + c2 * g2), verbose=False)
    rest2 = control.minreal(d2 / (1 + c2 * g2), verbose=False)
    loop = c1 * closed2 * g1
    return (
        control.minreal(loop / (1 + loop), verbose=False),
        control.minreal(rest2 * g1 / (1 + loop), verbose=False),
        control.minreal(d1 / (1 + loop), verbose=False),
    )


def test_cascade_against_python_control() -> None:
    inner = LoopStage(Controller(2.0, 4.0, **WIDE), Process(1.0, (4.0, 1.0)))
    outer = LoopStage(Controller(3.0, 60.0, **WIDE), Process(0.9, (60.0, 10.0)))
    structure = cascade_structure([inner, outer], final_element=VALVE)
    # Upsets of 5 % keep the valve, which gets six times the setpoint step, within its travel.
    responses = simulate([structure], standard_scenarios(2, size_pct=5.0), clock=Clock(0.05, 6000))[0]
    by_name = {response.scenario.name: response for response in responses}
    systems = closed_cascade(inner, outer)
    for name, system in zip(
        ("setpoint step", "secondary disturbance", "primary disturbance"), systems, strict=True
    ):
        response = by_name[name]
        _, expected = control.step_response(5.0 * system, response.time_s)
        # A continuous controller is scanned every 0.05 s: an error of that order against the fastest lag, 1 s.
        np.testing.assert_allclose(deviation(response), expected, atol=0.05 * np.abs(expected).max())


def test_error_shrinks_with_the_step() -> None:
    inner = LoopStage(Controller(2.0, 4.0, **WIDE), Process(1.0, (4.0, 1.0)))
    outer = LoopStage(Controller(3.0, 60.0, **WIDE), Process(0.9, (60.0, 10.0)))
    structure = cascade_structure([inner, outer], final_element=VALVE)
    system = closed_cascade(inner, outer)[0]
    errors = []
    for step_s in (0.2, 0.1):
        response = simulate(
            [structure], [standard_scenarios(2, size_pct=5.0)[0]], clock=Clock(step_s, round(200.0 / step_s))
        )[0][0]
        _, expected = control.step_response(5.0 * system, response.time_s)
        errors.append(np.abs(deviation(response) - expected).max())
    # A held output is a first-order error.
    assert errors[1] == pytest.approx(0.5 * errors[0], rel=0.1)


# D. E. Seborg, T. F. Edgar, D. A. Mellichamp, Process Dynamics and Control, Example 16.1 in percent of the
# measurements (see test_frequency): offset in Y1 for a unit step in D2 is 4/(5 + 4 Kc1) and 4/(1 + Kc).
SECONDARY, PRIMARY = Process(1.0, (60.0,)), Process(1.0, (240.0, 120.0))


@pytest.mark.parametrize(("cascade", "gain", "offset"), [(True, 10.0, 0.0888889), (False, 5.0, 4.0 / 6.0)])
def test_seborg_offsets(cascade: bool, gain: float, offset: float) -> None:
    outer = Controller(gain, **WIDE)
    controllers = (Controller(4.0, **WIDE), outer) if cascade else (None, outer)
    structure = ControlStructure((SECONDARY, PRIMARY), controllers, VALVE)
    # D2 of size 1 moves the secondary measurement by Km2 = 0.2, and Y1 shows as Km1 = 0.05 of itself.
    response = simulate(
        [structure], [Scenario("d2", disturbances=(Disturbance(0, 0.2),))], clock=Clock(1.0, 8000)
    )
    # Seven decimals are printed; the modes have died out by 1e-9.
    assert deviation(response[0][0])[-1] / 0.05 == pytest.approx(offset, abs=1e-6)


def test_setpoint_response_of_a_second_order_loop() -> None:
    """PI on an integrator with setpoint weight 0 is a standard second-order system."""
    k, ti, slope = 2.0, 40.0, 0.02
    wn, zeta = math.sqrt(k * slope / ti), 0.5 * math.sqrt(k * slope * ti)
    controller = Controller(k, ti, setpoint_weight=0.0, interval_s=0.05, **WIDE)
    structure = ControlStructure((Process(slope, integrating=True),), (controller,), VALVE)
    metrics = simulate([structure], [Scenario("sp", setpoint_step_pct=10.0)], clock=Clock(0.05, 20_000))[0][
        0
    ].metrics
    root = math.sqrt(1.0 - zeta**2)
    overshoot = 100.0 * math.exp(-math.pi * zeta / root)
    # Scans of 0.05 s add half of it in dead time to a loop of 2/(k slope) = 50 s.
    assert metrics.overshoot_pct == pytest.approx(overshoot, rel=5e-3)
    assert metrics.peak_pct == pytest.approx(10.0 + 0.1 * overshoot, rel=1e-3)
    assert metrics.time_to_peak_s == pytest.approx(math.pi / (wn * root), rel=5e-3)
    # The error integral of the standard system is 2 zeta/wn; its absolute value is a little more.
    assert metrics.iae_pct_s > 10.0 * 2.0 * zeta / wn


def test_metrics_of_a_first_order_loop() -> None:
    # P on an integrator: y = 10 (1 - exp(-t/T)), T = 1/(k slope): IAE 10 T, settling T ln 50, no overshoot.
    controller = Controller(2.0, interval_s=0.02, **WIDE)
    structure = ControlStructure((Process(0.05, integrating=True),), (controller,), VALVE)
    metrics = simulate([structure], [Scenario("sp", setpoint_step_pct=10.0)], clock=Clock(0.02, 10_000))[0][
        0
    ].metrics
    # Half a scan of 0.02 s on T = 10 s.
    assert metrics.iae_pct_s == pytest.approx(100.0, rel=2e-3)
    assert metrics.settling_s == pytest.approx(10.0 * math.log(50.0), rel=2e-3)
    assert metrics.overshoot_pct == 0.0
    assert metrics.reversals == 0
    # The output jumps by 20 % and falls back.
    assert metrics.valve_travel_pct == pytest.approx(40.0, rel=2e-3)


def test_integrated_error_of_a_load_is_reset_over_gain() -> None:
    # F. G. Shinskey, Process Control Systems (from memory): the integral of the error after a load that needs
    # the output change m is m Ti/K, whatever the process.
    k, ti = 1.2, 30.0
    structure = ControlStructure(
        (Process(0.8, (30.0,), 4.0),), (Controller(k, ti, interval_s=1.0, **WIDE),), VALVE
    )
    scenario = Scenario("d", disturbances=(Disturbance(0, 10.0),))
    response = simulate([structure], [scenario], clock=Clock(1.0, 1200))[0][0]
    # The sum of the scanned errors is what the integral action has added up: exact.
    assert deviation(response).sum() == pytest.approx(10.0 / 0.8 * ti / k, rel=1e-9)
    assert response.metrics.iae_pct_s == pytest.approx(10.0 / 0.8 * ti / k, rel=0.02)


def test_derivative_and_filter_against_the_matrix_exponential() -> None:
    """PID with filtered derivative and measurement filter on two lags, continuous, by the exponential of its matrix."""
    k, ti, td, n, tf = 2.0, 20.0, 4.0, 8.0, 1.0
    smooth = td / n
    # States: x1, x2 of the lags 15 and 5, filtered y, integral, derivative state z = filtered y/smooth lag.
    a = np.zeros((5, 5))
    u = np.array([0.0, 0.0, -k - k * td / smooth, 1.0, k * td / smooth])
    a[0] = u / 15.0
    a[0, 0] -= 1.0 / 15.0
    a[1, 0], a[1, 1] = 1.0 / 5.0, -1.0 / 5.0
    a[2, 1], a[2, 2] = 1.0 / tf, -1.0 / tf
    a[3, 2] = -k / ti
    a[4, 2], a[4, 4] = 1.0 / smooth, -1.0 / smooth
    b = np.array([k / 15.0, 0.0, 0.0, k / ti, 0.0]) * 10.0
    controller = Controller(k, ti, td, n, measurement_filter_s=tf, interval_s=0.01, **WIDE)
    structure = ControlStructure((Process(1.0, (15.0, 5.0)),), (controller,), VALVE)
    response = simulate([structure], [Scenario("sp", setpoint_step_pct=10.0)], clock=Clock(0.01, 12_000))[0][
        0
    ]
    block = np.zeros((6, 6))
    block[:5, :5], block[:5, 5] = a, b
    for step in (200, 1000, 4000, 12_000):
        state = expm(block * response.time_s[step])[:5, 5]
        # Scans of 0.01 s against a smoothing of 0.5 s.
        assert deviation(response)[step] == pytest.approx(state[1], abs=0.05)


# --- linear properties ---------------------------------------------------------------------------

LINEAR = cascade_structure(
    [
        LoopStage(Controller(1.5, 6.0, interval_s=0.5, **WIDE), Process(1.0, (4.0,), 1.0)),
        LoopStage(Controller(1.2, 50.0, 3.0, interval_s=1.0, **WIDE), Process(0.9, (60.0, 8.0), 12.0)),
    ],
    final_element=VALVE,
)
CLOCK = Clock(0.5, 400)
# Small enough for the valve, which starts in the middle, to stay within its travel.
sizes = st.floats(-5.0, 5.0)


@settings(max_examples=15, deadline=None)
@given(setpoint=sizes, inner=sizes, outer=sizes)
def test_superposition(setpoint: float, inner: float, outer: float) -> None:
    parts = [
        Scenario("sp", setpoint_step_pct=setpoint),
        Scenario("d2", disturbances=(Disturbance(0, inner),)),
        Scenario("d1", disturbances=(Disturbance(1, outer),)),
    ]
    together = Scenario("all", setpoint, (Disturbance(0, inner), Disturbance(1, outer)))
    *separate, all_at_once = simulate([LINEAR], [*parts, together], clock=CLOCK)[0]
    # Rounding, on the scale of the upsets.
    np.testing.assert_allclose(sum(deviation(r) for r in separate), deviation(all_at_once), atol=1e-10)


@settings(max_examples=15, deadline=None)
@given(steps=st.integers(0, 40), lag_s=st.floats(0.5, 30.0))
def test_dead_time_shifts_an_open_loop_response(steps: int, lag_s: float) -> None:
    prompt = deviation(manual(Process(1.0, (lag_s,)), clock=Clock(0.5, 100)))
    late = deviation(manual(Process(1.0, (lag_s,), 0.5 * steps), clock=Clock(0.5, 100)))
    np.testing.assert_allclose(late[steps:], prompt[: len(prompt) - steps], atol=1e-12)
    assert np.all(late[:steps] == 0.0)


@settings(max_examples=15, deadline=None)
@given(
    gain=st.floats(0.2, 3.0),
    lag_s=st.floats(2.0, 30.0),
    dead_time_s=st.floats(0.0, 5.0),
    kc=st.floats(0.1, 0.8),
)
def test_final_value(gain: float, lag_s: float, dead_time_s: float, kc: float) -> None:
    # P control settles at K k/(1 + K k) of the setpoint step, PI at all of it.
    k = kc / gain
    structures = [
        ControlStructure((Process(gain, (lag_s,), dead_time_s),), (controller,), VALVE)
        for controller in (Controller(k, **WIDE), Controller(k, lag_s, **WIDE))
    ]
    responses = simulate(structures, [Scenario("sp", setpoint_step_pct=10.0)], clock=Clock(1.0, 2000))
    for (response,), share in zip(responses, (kc / (1.0 + kc), 1.0), strict=True):
        # 2000 s are more than six times the slowest mode, Ti/(K k) = 300 s at worst.
        assert deviation(response)[-1] == pytest.approx(10.0 * share, abs=0.05)


def test_sign_of_every_level_may_be_turned() -> None:
    stages = [
        LoopStage(Controller(-1.5, 6.0, interval_s=0.5, **WIDE), Process(-1.0, (4.0,), 1.0)),
        LoopStage(Controller(-1.2, 50.0, 3.0, interval_s=1.0, **WIDE), Process(-0.9, (60.0, 8.0), 12.0)),
    ]
    turned = cascade_structure(stages, final_element=VALVE)
    one, other = (r[0] for r in simulate([LINEAR, turned], [standard_scenarios(2)[0]], clock=CLOCK))
    np.testing.assert_allclose(deviation(other), deviation(one), atol=1e-12)


# --- what is executed ----------------------------------------------------------------------------


def test_each_controller_keeps_its_own_interval() -> None:
    stages = [
        LoopStage(Controller(0.8, 6.0, interval_s=0.5), Process(1.0, (4.0,), 1.0)),
        LoopStage(Controller(1.2, 50.0, interval_s=2.0), Process(0.9, (60.0,), 12.0)),
    ]
    response = simulate([cascade_structure(stages, final_element=VALVE)], [standard_scenarios(2)[0]])[0][0]
    assert response.metrics.executed_interval_s == (0.5, 2.0)
    assert response.metrics.step_s == 0.5
    # A held output is held but for rounding.
    changes = np.nonzero(np.abs(np.diff(response.output_pct[1])) > 1e-12)[0] + 1
    assert len(changes) > 50
    assert np.all(changes % 4 == 0)
    # The secondary takes the primary's output as its setpoint in the same scan.
    np.testing.assert_allclose(response.setpoint_pct[0], response.output_pct[1], atol=1e-12)


def test_limits_hold() -> None:
    stages = [
        LoopStage(
            Controller(2.0, 6.0, interval_s=0.5, output_high_pct=62.0, setpoint_high_pct=58.0),
            Process(1.0, (4.0,), 1.0),
        ),
        LoopStage(Controller(4.0, 50.0, interval_s=1.0, output_high_pct=70.0), Process(0.9, (60.0,), 12.0)),
    ]
    response = simulate(
        [cascade_structure(stages, final_element=VALVE)], [Scenario("sp", setpoint_step_pct=30.0)]
    )[0][0]
    assert response.output_pct[1].max() == 70.0
    assert response.setpoint_pct[0].max() == 58.0
    assert response.output_pct[0].max() == 62.0
    assert response.travel_pct.max() == 62.0


def test_setpoint_beyond_its_limit_is_cut() -> None:
    stages = [
        LoopStage(Controller(1.0, 10.0, interval_s=1.0, setpoint_high_pct=55.0), Process(1.0, (10.0,), 2.0))
    ]
    response = simulate(
        [cascade_structure(stages, final_element=VALVE)], [Scenario("sp", setpoint_step_pct=20.0)]
    )[0][0]
    assert response.setpoint_pct[0].max() == 55.0
    assert response.measurement_pct[0][-1] == pytest.approx(55.0, abs=0.02)
    assert math.isfinite(response.metrics.settling_s)


def test_final_element_ends_at_its_travel() -> None:
    process = Process(1.0, (5.0,))
    response = manual(process, step_pct=80.0, clock=Clock(1.0, 60), valve=FinalElement(start_pct=70.0))
    assert response.travel_pct.max() == 100.0
    assert deviation(response)[-1] == pytest.approx(30.0, abs=1e-3)


def saturated_cascade(sign: float) -> Response:
    """The valve is too small for the setpoint asked of the primary."""
    stages = [
        LoopStage(
            Controller(sign * 1.0, 6.0, interval_s=0.5, output_low_pct=45.0, output_high_pct=55.0),
            Process(sign * 1.0, (4.0,), 1.0),
        ),
        LoopStage(Controller(2.0, 40.0, interval_s=1.0), Process(0.9, (60.0,), 5.0)),
    ]
    structure = cascade_structure(stages, final_element=VALVE)
    return simulate([structure], [Scenario("sp", setpoint_step_pct=8.0)], clock=Clock(0.5, 2400))[0][0]


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_primary_does_not_wind_up_on_a_limited_secondary(sign: float) -> None:
    response = saturated_cascade(sign)
    # Valve at its limit: secondary at 55, primary at 50 + 0.9*5 = 54.5, error 3.5 for good.
    assert response.output_pct[0][-1] == 50.0 + sign * 5.0
    assert response.measurement_pct[0][-1] == pytest.approx(55.0, abs=1e-6)
    assert response.measurement_pct[1][-1] == pytest.approx(54.5, abs=1e-3)
    # External reset: the integral stands at the secondary's measurement, the output K e above it.
    assert response.output_pct[1][-1] == pytest.approx(55.0 + 2.0 * 3.5, abs=1e-2)


def test_recovery_from_a_limit_is_prompt() -> None:
    """After a large setpoint step the output leaves its limit before the setpoint is reached, not long after."""
    stages = [LoopStage(Controller(3.0, 40.0, interval_s=1.0), Process(1.0, (60.0,), 5.0))]
    structure = cascade_structure(stages, final_element=FinalElement(start_pct=80.0))
    response = simulate([structure], [Scenario("sp", setpoint_step_pct=15.0)])[0][0]
    assert response.output_pct[0].max() == 100.0
    leaves = np.nonzero(response.output_pct[0] >= 100.0)[0][-1]
    assert response.measurement_pct[0][leaves] < 65.0
    assert response.metrics.overshoot_pct < 10.0


def test_tertiary_learns_of_a_limit_through_the_levels() -> None:
    stages = [
        LoopStage(Controller(1.0, 4.0, interval_s=0.5, output_high_pct=54.0), Process(1.0, (3.0,), 0.5)),
        LoopStage(Controller(-1.5, 20.0, interval_s=1.0), Process(-1.0, (20.0,), 2.0)),
        LoopStage(Controller(1.5, 120.0, interval_s=2.0), Process(1.0, (120.0,), 10.0)),
    ]
    structure = cascade_structure(stages, final_element=VALVE)
    # The middle level works in the other direction: lowering it asks the innermost for more than 54.
    response = simulate([structure], [Scenario("sp", setpoint_step_pct=-9.0)], clock=Clock(0.5, 6000))[0][0]
    assert response.measurement_pct[1][-1] == pytest.approx(46.0, abs=1e-3)
    assert response.measurement_pct[2][-1] == pytest.approx(46.0, abs=1e-2)
    # Outermost: integral at the middle measurement, output 1.5*(-5) below it. The middle: its setpoint is 38.5,
    # its integral at the innermost measurement, output -1.5*(38.5 - 46) above that.
    assert response.output_pct[2][-1] == pytest.approx(46.0 - 7.5, abs=5e-2)
    assert response.output_pct[1][-1] == pytest.approx(54.0 + 11.25, abs=1e-1)


def test_stroke_time_ramps_the_valve() -> None:
    # 10 % at 100 % in 20 s takes 2 s: the response is that of a ramp, delayed by half of it on average.
    process, valve = Process(1.0, (5.0,)), FinalElement(stroke_time_s=20.0)
    response = manual(process, clock=Clock(0.05, 1200), valve=valve)
    t = response.time_s
    ramp = 5.0 * np.where(t < 2.0, t - 5.0 * (1.0 - np.exp(-t / 5.0)), 0.0)
    at_two = 5.0 * (2.0 - 5.0 * (1.0 - math.exp(-2.0 / 5.0)))
    beyond = 10.0 - (10.0 - at_two) * np.exp(-(t - 2.0) / 5.0)
    # Within a step the mean of the ramp is held: second order in 0.05/5.
    np.testing.assert_allclose(deviation(response), np.where(t < 2.0, ramp, beyond), atol=1e-4)
    # Means of the quarters of the ramp.
    response = manual(process, clock=Clock(0.5, 120), valve=valve)
    assert list(response.travel_pct[:5] - 50.0) == pytest.approx([1.25, 3.75, 6.25, 8.75, 10.0], abs=1e-12)


def test_the_end_of_a_stroke_within_a_step() -> None:
    # 1 % at 4 %/s takes a quarter of a second: mean over the first half second 1 - 0.25*0.5/0.5.
    response = manual(
        Process(1.0, (5.0,)), step_pct=1.0, clock=Clock(0.5, 16), valve=FinalElement(stroke_time_s=25.0)
    )
    assert list(response.travel_pct[:2] - 50.0) == pytest.approx([0.75, 1.0], abs=1e-12)


def test_backlash_takes_its_half_from_the_middle() -> None:
    response = manual(Process(1.0, (5.0,)), clock=Clock(0.5, 120), valve=FinalElement(backlash_pct=3.0))
    assert np.all(response.travel_pct == 58.5)


def test_backlash_makes_an_integrating_loop_cycle() -> None:
    # K. J. Astrom, R. M. Murray, Feedback Systems, ch. 10 (describing function): PI on an integrator with
    # backlash never comes to rest; without backlash it does.
    def run(backlash_pct: float) -> Response:
        stage = LoopStage(Controller(2.0, 20.0, interval_s=0.5), Process(0.1, (1.0,), integrating=True))
        structure = cascade_structure([stage], final_element=FinalElement(backlash_pct=backlash_pct))
        return simulate([structure], [Scenario("sp", setpoint_step_pct=5.0)], clock=Clock(0.5, 4000))[0][0]

    loose, tight = run(4.0), run(0.0)
    assert np.ptp(deviation(loose)[-1000:]) > 0.5
    assert loose.metrics.reversals > 20
    assert np.ptp(deviation(tight)[-1000:]) < 1e-6
    assert tight.metrics.reversals < 5


# --- scenarios, clocks, batches ------------------------------------------------------------------

TIC = cascade_structure(
    [
        LoopStage(Controller(0.45, 12.0, interval_s=0.5), Process(1.0, (4.0,), 1.0)),
        LoopStage(Controller(1.44, 540.0, interval_s=1.0), Process(1.375, (540.0,), 90.0)),
    ],
    final_element=FinalElement(stroke_time_s=6.0, start_pct=49.0),
    start_pct=(49.3, 40.8),
)
SINGLE = single_loop_structure(TIC, Controller(1.6, 545.0, interval_s=1.0))


def test_standard_scenarios_name_the_levels() -> None:
    names = [[s.name for s in standard_scenarios(levels)] for levels in (1, 2, 3, 4)]
    assert names == [
        ["setpoint step", "primary disturbance"],
        ["setpoint step", "secondary disturbance", "primary disturbance"],
        ["setpoint step", "tertiary disturbance", "secondary disturbance", "primary disturbance"],
        [
            "setpoint step",
            "level 1 disturbance",
            "tertiary disturbance",
            "secondary disturbance",
            "primary disturbance",
        ],
    ]


def test_the_cascade_takes_the_secondary_disturbance_away() -> None:
    cascade, single = simulate([TIC, SINGLE], standard_scenarios(2))
    ours, theirs = cascade[1].metrics, single[1].metrics
    # The single loop learns of it through 540 s of lag; ten times is far on the near side of what is seen.
    assert abs(ours.peak_pct) < 0.3 * abs(theirs.peak_pct)
    assert ours.iae_pct_s < 0.1 * theirs.iae_pct_s
    assert {len(r.time_s) for r in (*cascade, *single)} == {len(cascade[0].time_s)}
    assert single[0].setpoint_pct[0] is None
    assert single[0].output_pct[0] is None


def test_a_batch_gives_the_figures_of_single_runs() -> None:
    other = cascade_structure(
        [LoopStage(Controller(0.6, 20.0, interval_s=1.0), Process(1.2, (20.0,), 4.0))], final_element=VALVE
    )
    groups = [
        ([TIC, SINGLE], standard_scenarios(2)),
        ([other], standard_scenarios(1)),
        ([TIC], standard_scenarios(2, size_pct=5.0)),
    ]
    for (structures, scenarios), found in zip(groups, simulate_metrics(groups), strict=True):
        assert not isinstance(found, Unsuited)
        for row, together in zip(simulate(structures, scenarios), found, strict=True):
            for response, metrics in zip(row, together, strict=True):
                one = response.metrics
                # One structure is advanced by blocks, in which a valve that moves slowly is taken to be in
                # time: late by less than a hundredth of a step. Otherwise only rounding differs.
                assert metrics.iae_pct_s == pytest.approx(one.iae_pct_s, rel=1e-4)
                assert metrics.peak_pct == pytest.approx(one.peak_pct, rel=1e-4)
                assert metrics.settling_s == pytest.approx(one.settling_s, abs=one.step_s)
                assert metrics.horizon_s == one.horizon_s
                assert metrics.executed_interval_s == one.executed_interval_s


def test_blocks_of_steps_are_the_steps() -> None:
    """PID with filters and weights, scanned at two intervals, limited at first: by blocks and one by one."""
    structure = cascade_structure(
        [
            LoopStage(
                Controller(1.5, 6.0, 0.5, measurement_filter_s=0.8, setpoint_weight=0.7, interval_s=0.5),
                Process(1.0, (4.0, 1.0), 1.2, (0.5,)),
            ),
            LoopStage(
                Controller(6.0, 50.0, 3.0, derivative_setpoint_weight=0.4, interval_s=1.5),
                Process(0.04, (8.0,), 12.3, integrating=True),
            ),
        ],
        final_element=FinalElement(start_pct=80.0),
    )
    scenarios = [Scenario("sp", 8.0), Scenario("d", 2.0, (Disturbance(0, 3.0), Disturbance(1, 2.0)))]
    clock = Clock(0.5, 1600)
    by_blocks = simulate([structure], scenarios, clock=clock)[0]
    assert by_blocks[0].travel_pct.max() == 100.0
    # Another structure of the same pattern beside it keeps the engine to single steps.
    other = replace(structure, start_pct=(49.0, 49.0))
    by_steps = simulate([structure, other], scenarios, clock=clock)[0]
    for one, two in zip(by_blocks, by_steps, strict=True):
        for ours, theirs in zip(
            (*one.measurement_pct, *one.output_pct, *one.setpoint_pct, one.travel_pct),
            (*two.measurement_pct, *two.output_pct, *two.setpoint_pct, two.travel_pct),
            strict=True,
        ):
            # The same sums in another order.
            np.testing.assert_allclose(ours, theirs, atol=1e-9)


def test_a_chosen_horizon_covers_the_response() -> None:
    for responses in simulate([TIC, SINGLE], standard_scenarios(2)):
        for response in responses:
            assert math.isfinite(response.metrics.settling_s)
            assert response.metrics.settling_s < 0.8 * response.metrics.horizon_s


def test_cutting_a_run_short_at_rest_changes_little() -> None:
    clock = choose_clocks([[TIC]])[0]
    assert isinstance(clock, Clock)
    short = simulate([TIC], standard_scenarios(2))[0]
    full = simulate([TIC], standard_scenarios(2), clock=Clock(clock.step_s, 2 * clock.steps))[0]
    for one, other in zip(short, full, strict=True):
        assert other.metrics.horizon_s > one.metrics.horizon_s
        # At rest means within 0.1 % of the peak: the error integral then misses about as much.
        assert one.metrics.iae_pct_s == pytest.approx(other.metrics.iae_pct_s, rel=5e-3)
        assert one.metrics.peak_pct == other.metrics.peak_pct


def test_a_widened_step_changes_little() -> None:
    """A slow loop that is scanned often is not followed through every scan; the figures stay."""
    structure = cascade_structure(
        [LoopStage(Controller(1.0, 3000.0, interval_s=1.0), Process(1.0, (3000.0,), 600.0))],
        final_element=VALVE,
    )
    chosen = choose_clocks([[structure]])[0]
    assert isinstance(chosen, Clock)
    assert chosen.step_s > 1.0
    coarse = simulate([structure], standard_scenarios(1))[0]
    fine = simulate(
        [structure], standard_scenarios(1), clock=Clock(1.0, round(chosen.step_s * chosen.steps))
    )[0]
    assert coarse[0].metrics.executed_interval_s == (chosen.step_s,)
    for one, other in zip(coarse, fine, strict=True):
        # One degree of phase at the crossover.
        assert one.metrics.iae_pct_s == pytest.approx(other.metrics.iae_pct_s, rel=0.01)
        assert one.metrics.peak_pct == pytest.approx(other.metrics.peak_pct, rel=0.01)


def test_a_fast_loop_is_stepped_within_its_interval() -> None:
    structure = cascade_structure(
        [LoopStage(Controller(0.9, 4.0, interval_s=2.0), Process(1.0, (4.0,), 1.0))], final_element=VALVE
    )
    clock = choose_clocks([[structure]])[0]
    assert isinstance(clock, Clock)
    assert clock.step_s < 2.0
    response = simulate([structure], standard_scenarios(1))[0][0]
    assert response.metrics.executed_interval_s == (2.0,)


def test_a_loop_that_cannot_settle_says_so() -> None:
    stage = LoopStage(Controller(9.0, interval_s=0.1), Process(1.0, (10.0, 10.0, 10.0)))
    structure = cascade_structure([stage], final_element=VALVE)
    metrics = simulate([structure], [Scenario("sp", setpoint_step_pct=5.0)])[0][0].metrics
    assert metrics.settling_s == math.inf
    assert metrics.reversals > 3


TOO_WIDE = cascade_structure(
    [
        LoopStage(Controller(1.0, 0.1, interval_s=0.05), Process(1.0, (0.1,), 0.05)),
        LoopStage(Controller(1.0, 1e5, interval_s=1.0), Process(1.0, (1e5,), 1e4)),
    ],
    final_element=VALVE,
)
LEVEL = Process(0.01, (), 5.0, integrating=True)
TWO_INTEGRATIONS = ControlStructure((LEVEL, LEVEL), (None, Controller(1.0, 100.0, interval_s=1.0)), VALVE)


def test_a_group_that_cannot_be_simulated_leaves_the_others() -> None:
    found = simulate_metrics(
        [
            ([TOO_WIDE], standard_scenarios(2)),
            ([TIC], standard_scenarios(2)),
            ([TWO_INTEGRATIONS], standard_scenarios(2)),
        ]
    )
    assert isinstance(found[0], Unsuited)
    assert isinstance(found[2], Unsuited)
    assert not isinstance(found[1], Unsuited)
    assert len(found[1][0]) == 3


@pytest.mark.parametrize(
    ("build", "said"),
    [
        (lambda: ControlStructure((), (), VALVE), "at least one process"),
        (lambda: ControlStructure((SECONDARY,), (), VALVE), "one entry per process"),
        (lambda: ControlStructure((SECONDARY,), (None,), VALVE, (50.0, 50.0)), "one start per process"),
        (lambda: FinalElement(stroke_time_s=-1.0), "stroke time"),
        (lambda: FinalElement(backlash_pct=100.0), "backlash"),
        (lambda: FinalElement(start_pct=101.0), "outside its travel"),
        (
            lambda: simulate([TIC], [Scenario("d", disturbances=(Disturbance(2, 1.0),))]),
            "there is no level 2",
        ),
        (
            lambda: simulate([ControlStructure((Process(1.0),), (None,), VALVE)], standard_scenarios(1)),
            "nothing in this structure",
        ),
        (lambda: simulate([TOO_WIDE], standard_scenarios(2)), "too far apart"),
        (lambda: simulate([TWO_INTEGRATIONS], standard_scenarios(2)), "two integrating processes"),
    ],
)
def test_what_cannot_be_simulated_is_refused(build: object, said: str) -> None:
    with pytest.raises(ValueError, match=said):
        build()  # type: ignore[operator]
