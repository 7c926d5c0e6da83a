"""Time responses against closed forms, python-control and the properties of linear systems."""

import math
import warnings

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.linalg import expm

from loopdoc.engineering.clock import Clock
from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.simulation import Response, simulate
from loopdoc.engineering.structure import (
    ControlStructure,
    Disturbance,
    FinalElement,
    Scenario,
    cascade_structure,
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
    structure = ControlStructure(
        (Process(3.0, (4.0,), 2.0), Process(2.0, (20.0, 5.0), 4.0)), (None, None), VALVE
    )
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
    # The output jumps by 20 % and falls back.
    assert metrics.reversals == 1
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
    # With the reset on the lag, PI leaves K k/(lag s) exp(-sL): well inside its limit of pi/2, half a scan added.
    assume(kc * (dead_time_s + 0.5) / lag_s < 1.0)
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
