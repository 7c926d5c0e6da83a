"""Margins of loops as they are executed, against closed forms, python-control and the simulation itself."""

import math
from dataclasses import replace

import control
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopdoc.engineering.clock import Clock
from loopdoc.engineering.frequency import LoopStage, Margins, analyse_chain
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.sampled import (
    NotSampled,
    controller_response,
    pulse_response,
    quoted_margins,
    sampled_margins,
)
from loopdoc.engineering.simulation import simulate
from loopdoc.engineering.structure import FinalElement, Scenario, cascade_structure

WIDE = {"output_low_pct": -1e9, "output_high_pct": 1e9, "setpoint_low_pct": -1e9, "setpoint_high_pct": 1e9}


def outermost(*stages: LoopStage) -> Margins:
    found = sampled_margins(stages)[-1]
    assert isinstance(found, Margins)
    return found


def of(controller: Controller, process: Process) -> Margins:
    return outermost(LoopStage(controller, process))


# ---------------------------------------------------------------- closed forms
# K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, ch. 2 and 3 (from memory); each derived
# beside it. Tolerance: a few times the rounding of double precision through the matrix exponential.

CLOSE = 1e-11


@pytest.mark.parametrize("h", [0.01, 0.5, 2.0, 10.0])
@pytest.mark.parametrize("gain", [0.3, -0.3])
def test_a_lag_under_proportional_control(h: float, gain: float) -> None:
    """L = K (1-a)/(z-a), a = exp(-h/T): the closed pole a - K (1-a) reaches -1 at K = (1+a)/(1-a)."""
    found = of(Controller(gain, interval_s=h), Process(math.copysign(1.0, gain), (4.0,)))
    a = math.exp(-h / 4.0)
    assert found.gain_margin == pytest.approx((1 + a) / (1 - a) / 0.3, rel=CLOSE)
    assert found.phase_crossover_rad_per_s == pytest.approx(math.pi / h, rel=CLOSE)
    assert found.stable
    assert found.sampled
    # 1 + L is smallest at z = -1: 1 - K (1-a)/(1+a).
    assert found.max_sensitivity == pytest.approx(1 / (1 - 0.3 * (1 - a) / (1 + a)), rel=CLOSE)


def test_an_integrator_under_proportional_control() -> None:
    """L = K k h/(z-1): the closed pole 1 - K k h reaches -1 at K k h = 2."""
    found = of(Controller(0.6, interval_s=2.0), Process(0.1, integrating=True))
    assert found.gain_margin == pytest.approx(2 / (0.6 * 0.1 * 2.0), rel=CLOSE)
    # |L| = 1 at |z - 1| = K k h, 2 sin(wh/2) = 0.12; the angle of 1/(z-1) there is -(pi/2 + wh/2).
    w = 2 * math.asin(0.06) / 2.0
    assert found.crossover_rad_per_s == pytest.approx(w, rel=1e-9)
    assert found.phase_margin_deg == pytest.approx(math.degrees(math.pi / 2 - w), rel=1e-9)
    assert found.delay_margin_s == pytest.approx((math.pi / 2 - w) / w, rel=1e-9)


@pytest.mark.parametrize("process", [Process(2.0, (4.0,)), Process(0.05, integrating=True)])
def test_deadbeat_control_has_a_gain_margin_of_two(process: Process) -> None:
    """The gain that puts the closed pole at z = 0 is half of that at z = -1 on an integrator, where L = 1/(z-1); on a
    lag L = a/(z-a), with the margin (1+a)/a."""
    h, a = 2.0, math.exp(-2.0 / 4.0)
    gain = a / (2.0 * (1 - a)) if not process.integrating else 1 / (0.05 * h)
    expected = (1 + a) / a if not process.integrating else 2.0
    assert of(Controller(gain, interval_s=h), process).gain_margin == pytest.approx(expected, rel=CLOSE)


@pytest.mark.parametrize("dead_time", [0.0, 0.6, 1.0])
def test_a_lag_behind_a_part_of_an_interval(dead_time: float) -> None:
    """With m = 1 - L/h and b = exp(-m h/T): L(z) = K ((1-b) z + b - a)/(z (z-a)); the characteristic equation
    z^2 + (K (1-b) - a) z + K (b-a) leaves the circle at z = -1 where K = (1+a)/(1-2b+a), if that is positive, and as a
    pair of complex poles where K (b-a) = 1."""
    h, lag = 1.0, 3.0
    a, b = math.exp(-h / lag), math.exp(-(h - dead_time) / lag)
    limits = [1 / (b - a)] if b - a > 1e-12 else []
    if 1 - 2 * b + a > 0:
        limits.append((1 + a) / (1 - 2 * b + a))
    # a limit counts only where the other pole is inside: the smallest does
    found = of(Controller(0.5, interval_s=h), Process(1.0, (lag,), dead_time))
    assert found.gain_margin == pytest.approx(min(limits) / 0.5, rel=1e-9)


def test_integral_control_of_a_process_that_follows_at_once() -> None:
    """The measurement is read before the output moves: L = K k (1 + h/Ti z/(z-1))/z, at z = -1 K k (1 + h/2Ti)."""
    found = of(Controller(0.6, 5.0, interval_s=2.0), Process(1.0))
    assert found.gain_margin == pytest.approx(1 / (0.6 * (1 + 2.0 / 5.0 / 2)), rel=CLOSE)


def test_positive_feedback_is_unstable_in_the_sampled_loop() -> None:
    assert not of(Controller(-1.5, interval_s=1.0), Process(1.0, (4.0,))).stable
    # L(0) = -0.5: the gain may double before the static loop runs away.
    found = of(Controller(-0.5, interval_s=1.0), Process(1.0, (4.0,)))
    assert found.stable
    assert found.max_sensitivity == pytest.approx(2.0, rel=1e-6)


# ---------------------------------------------------------------- python-control on the same loop in z


def in_z(stage: LoopStage) -> control.TransferFunction:
    """The loop built from the difference equations of the controller and c2d of the process; whole dead times only."""
    c, p = stage.controller, stage.process
    h = c.interval_s
    z = control.tf("z")
    z.dt = h
    s = control.tf("s")
    lags = p.gain
    for lag in p.lags_s:
        lags = lags / (lag * s + 1)
    for lead in p.leads_s:
        lags = lags * (lead * s + 1)
    if p.integrating:
        lags = lags / s
    process = control.c2d(control.ss(lags), h, "zoh")
    process = control.tf(process) * z ** -round(p.dead_time_s / h)
    smoothing = c.rate_s / c.derivative_filter
    pid = 1 + h / c.reset_s * z / (z - 1)
    if c.rate_s:
        pid = pid + c.rate_s / (smoothing + h) * (z - 1) / (z - smoothing / (smoothing + h))
    if c.measurement_filter_s:
        g = -math.expm1(-h / c.measurement_filter_s)
        pid = pid * g * z / (z - (1 - g))
    return c.gain * pid * process


AGAINST_CONTROL = {
    "PI on a lag": LoopStage(Controller(1.5, 6.0, interval_s=1.0), Process(1.0, (5.0,))),
    "PI on a lag behind two intervals": LoopStage(Controller(0.8, 6.0, interval_s=1.0), Process(1.0, (5.0,), 2.0)),
    "PID, filtered, on two lags": LoopStage(
        Controller(2.0, 12.0, 2.0, interval_s=0.5, measurement_filter_s=1.0), Process(1.2, (10.0, 3.0), 1.0)
    ),
    "PI on an integration with a lag": LoopStage(
        Controller(1.0, 40.0, interval_s=2.0), Process(0.02, (3.0,), integrating=True)
    ),
    "PI on an inverse response": LoopStage(
        Controller(0.4, 8.0, interval_s=1.0), Process(1.0, (6.0, 2.0), 0.0, (-2.0,))
    ),
    "direct action": LoopStage(Controller(-1.5, 6.0, interval_s=1.0), Process(-1.0, (5.0,), 1.0)),
}


@pytest.mark.filterwarnings("ignore::RuntimeWarning:control")  # it looks at z = 1, a pole, as well
@pytest.mark.parametrize("name", AGAINST_CONTROL)
def test_a_sampled_loop_agrees_with_python_control(name: str) -> None:
    """Response at every frequency and the margins; the gain margin by the poles of the closed loop as well."""
    stage = AGAINST_CONTROL[name]
    found = of(stage.controller, stage.process)
    reference = in_z(stage)
    w = np.linspace(0.02, 1.0, 50) * math.pi / stage.controller.interval_s
    feedback, _ = controller_response(stage.controller, w)
    ours = feedback * pulse_response([stage.process], step_s=stage.controller.interval_s).at(w)
    # Polynomial coefficients of the reference lose a few digits; ours are state matrices.
    assert ours == pytest.approx(reference(np.exp(1j * w * stage.controller.interval_s)), rel=1e-8)

    def fastest(factor: float) -> float:
        return float(np.abs(np.roots(np.polyadd(reference.den[0][0], factor * reference.num[0][0]))).max())

    assert found.stable
    # The roots of these polynomials are good to nine digits.
    assert fastest(found.gain_margin * (1 - 1e-6)) < 1.0 < fastest(found.gain_margin * (1 + 1e-6))
    gain_margin, phase_margin, _, _, crossover, _ = control.stability_margins(reference, method="poly")
    # Its search for real points on the unit circle leaves out z = -1 itself; then the poles above stand alone.
    assert math.isinf(gain_margin) or found.gain_margin == pytest.approx(gain_margin, rel=1e-9)
    assert found.phase_margin_deg == pytest.approx(phase_margin, rel=1e-6)
    assert found.crossover_rad_per_s == pytest.approx(crossover, rel=1e-6)


# ---------------------------------------------------------------- the simulation itself


def swings(stages: list[LoopStage], factor: float, *, step_s: float, steps: int) -> float:
    """Growth of the outermost measurement's swing from the middle to the last part of a run."""
    *inner, last = stages
    gained = replace(last.controller, gain=factor * last.controller.gain, **WIDE)
    structure = cascade_structure(
        [*(LoopStage(replace(one.controller, **WIDE), one.process) for one in inner), LoopStage(gained, last.process)],
        final_element=FinalElement(),
    )
    run = simulate([structure], [Scenario("step", setpoint_step_pct=1e-3)], clock=Clock(step_s, steps))[0][0]
    # The final element ends at its stops: only what it can follow is linear, so the step is small.
    change = np.abs(np.diff(run.measurement_pct[-1]))
    part = steps // 5
    return float(change[-part:].max() / change[-3 * part : -2 * part].max())


LOOPS = {
    "a lag": [LoopStage(Controller(0.5, interval_s=1.0), Process(1.0, (4.0,)))],
    "PI behind a part of an interval": [LoopStage(Controller(0.9, 6.0, interval_s=1.0), Process(1.0, (5.0,), 0.7))],
    "PID with a filter": [
        LoopStage(Controller(1.0, 12.0, 2.0, interval_s=1.0, measurement_filter_s=0.8), Process(1.0, (10.0, 2.0), 1.3))
    ],
    "the cascade's own interval": [
        LoopStage(Controller(0.8, 4.0, interval_s=1.0), Process(1.0, (4.0,), 0.4)),
        LoopStage(Controller(1.0, 9.0, interval_s=1.0), Process(1.0, (9.0,), 0.3)),
    ],
    "a primary every third scan": [
        LoopStage(Controller(0.8, 4.0, interval_s=1.0), Process(1.0, (4.0,), 0.4)),
        LoopStage(Controller(0.5, 9.0, interval_s=3.0), Process(1.0, (6.0,))),
    ],
    "three levels": [
        LoopStage(Controller(0.8, 4.0, interval_s=0.5), Process(1.0, (2.0,))),
        LoopStage(Controller(0.6, 6.0, interval_s=1.0), Process(1.0, (6.0,))),
        LoopStage(Controller(0.5, 20.0, interval_s=4.0), Process(1.0, (9.0,))),
    ],
}


@pytest.mark.parametrize("name", LOOPS)
def test_the_simulation_turns_unstable_just_beyond_the_margin(name: str) -> None:
    """Within 2 % on a cascade, whose inner measurement the simulation takes as straight between its steps; 0.2 %
    where the final element alone moves the process, which it solves exactly."""
    stages = LOOPS[name]
    found = outermost(*stages)
    assert found.stable
    off = 0.002 if len(stages) == 1 else 0.02
    # Steps that divide every interval; of a single loop the interval itself.
    step = stages[0].controller.interval_s / (1 if len(stages) == 1 else 10)
    steps = 4000 if len(stages) == 1 else 12_000
    assert swings(stages, found.gain_margin * (1 - off), step_s=step, steps=steps) < 1.0
    assert swings(stages, found.gain_margin * (1 + off), step_s=step, steps=steps) > 1.0


# ---------------------------------------------------------------- several execution intervals


def eigenvalue_radius(stages: list[LoopStage]) -> float:
    """Largest pole of the whole chain over one outer interval, from the difference equations written out in time."""
    base = stages[0].controller.interval_s
    lifted = round(stages[-1].controller.interval_s / base)
    pulses = [pulse_response([one.process for one in stages[: k + 1]], step_s=base) for k in range(len(stages))]
    sizes = [len(pulse.first) for pulse in pulses]
    delays = [pulse.whole + 2 for pulse in pulses]
    longest = max(delays)
    order = sum(sizes) + longest + 2 * len(stages)  # states, past inputs, integral and held setpoint of each level

    def advance(x: np.ndarray, k: int) -> np.ndarray:
        states = list(np.split(x[: sum(sizes)], np.cumsum(sizes)[:-1]))
        past = x[sum(sizes) : sum(sizes) + longest]  # past[0] is the input of the interval just gone
        integral, asked = x[-2 * len(stages) : -len(stages)].copy(), x[-len(stages) :].copy()
        measured = [
            pulse.gain * (pulse.weights @ state + pulse.through * past[pulse.whole])
            for pulse, state in zip(pulses, states, strict=True)
        ]
        setpoint = 0.0
        for level in reversed(range(len(stages))):
            c = stages[level].controller
            if k % round(c.interval_s / base) == 0:
                error = setpoint - measured[level]
                integral[level] += c.gain * c.interval_s / c.reset_s * error
                asked[level] = c.gain * error + integral[level]
            setpoint = asked[level]
        past = np.concatenate([[setpoint], past[:-1]])
        states = [
            state + pulse.increment @ state + pulse.first * past[pulse.whole] + pulse.second * past[pulse.whole + 1]
            for pulse, state in zip(pulses, states, strict=True)
        ]
        return np.concatenate([*states, past, integral, asked])

    matrix = np.eye(order)
    for k in range(lifted):
        matrix = np.array([advance(column, k) for column in matrix.T]).T
    return float(np.abs(np.linalg.eigvals(matrix)).max())


@pytest.mark.parametrize("name", ["the cascade's own interval", "a primary every third scan", "three levels"])
def test_a_chain_of_several_intervals_agrees_with_the_poles_of_its_difference_equations(name: str) -> None:
    stages = LOOPS[name]
    found = outermost(*stages)

    def radius(factor: float) -> float:
        *inner, last = stages
        return eigenvalue_radius(
            [*inner, LoopStage(replace(last.controller, gain=factor * last.controller.gain), last.process)]
        )

    # Eigenvalues of matrices of this size are good to ten digits.
    assert radius(found.gain_margin * (1 - 1e-6)) < 1.0 < radius(found.gain_margin * (1 + 1e-6))


def test_short_intervals_lead_to_the_half_interval_form() -> None:
    stages = [
        LoopStage(Controller(0.8, 4.0, interval_s=0.02), Process(1.0, (4.0,), 1.0)),
        LoopStage(Controller(1.5, 60.0, interval_s=0.1), Process(1.2, (60.0,), 12.0)),
    ]
    for ours, half in zip(sampled_margins(stages), analyse_chain(stages), strict=True):
        assert isinstance(ours, Margins)
        # What is left is the square of the angle that a crossover turns in an interval, 1e-3 rad at most, and the
        # backward sum of the integral, half an interval against the reset time.
        assert ours.gain_margin == pytest.approx(half.gain_margin, rel=5e-3)
        assert ours.phase_margin_deg == pytest.approx(half.phase_margin_deg, rel=5e-3)
        assert ours.max_sensitivity == pytest.approx(half.max_sensitivity, rel=5e-3)
        assert ours.bandwidth_rad_per_s == pytest.approx(half.bandwidth_rad_per_s, rel=5e-3)


@settings(max_examples=30, deadline=None, derandomize=True)
@given(
    gain=st.floats(0.1, 4.0),
    reset=st.floats(2.0, 100.0),
    lag=st.floats(1.0, 50.0),
    dead_time=st.floats(0.0, 4.0),
    interval=st.floats(0.2, 3.0),
)
def test_stability_is_that_of_the_poles(
    gain: float, reset: float, lag: float, dead_time: float, interval: float
) -> None:
    stage = LoopStage(Controller(gain, reset, interval_s=interval), Process(1.0, (lag, lag / 5), dead_time))
    radius = eigenvalue_radius([stage])
    if abs(radius - 1.0) > 1e-6:
        assert of(stage.controller, stage.process).stable == (radius < 1.0)


# ---------------------------------------------------------------- what is quoted


def test_below_a_quarter_of_the_sampling_frequency_half_an_interval_is_quoted() -> None:
    slow = LoopStage(Controller(0.6, 20.0, interval_s=1.0), Process(1.0, (20.0,), 10.0))
    assert quoted_margins([[slow]])[0] == analyse_chain([slow])
    assert not analyse_chain([slow])[0].sampled
    fast = LoopStage(Controller(1.6, interval_s=1.0), Process(1.0, (20.0,)))
    assert [found.sampled for found in quoted_margins([[fast], [fast, slow], [slow]])[1]] == [True, False]
    assert quoted_margins([[fast], [slow]])[0][0].gain_margin == of(fast.controller, fast.process).gain_margin
    continuous = LoopStage(Controller(1.6), Process(1.0, (20.0, 3.0, 1.0)))
    assert quoted_margins([[continuous]])[0] == analyse_chain([continuous])


def test_a_primary_over_a_secondary_that_is_unstable_only_as_it_is_sampled() -> None:
    """K = 0.95 times the limit of half an interval is beyond the sampled limit (1+a)/(1-a) of the secondary."""
    h = 2.0
    half = analyse_chain([LoopStage(Controller(1.0, interval_s=h), Process(1.0, (4.0,)))])[0].gain_margin
    inner = LoopStage(Controller(0.95 * half, interval_s=h), Process(1.0, (4.0,)))
    outer = LoopStage(Controller(0.2, 500.0, interval_s=h), Process(1.0, (400.0,), 60.0))
    assert [found.stable for found in analyse_chain([inner, outer])] == [True, True]
    assert [found.stable for found in quoted_margins([[inner, outer]])[0]] == [False, False]


@pytest.mark.parametrize(
    ("inner_s", "outer_s", "reason"),
    [
        (1.0, 1.5, "its interval of 1.5 s is no whole multiple of 1 s, that of the loop below"),
        (2.0, 1.0, "its interval of 1 s is no whole multiple of 2 s, that of the loop below"),
        (0.0, 1.0, "the execution interval of a loop below is not given"),
        (0.01, 60.0, "the innermost loop is executed more than 2000 times in an interval of this one"),
    ],
)
def test_what_is_not_sampled_says_why(inner_s: float, outer_s: float, reason: str) -> None:
    inner = LoopStage(Controller(0.3, interval_s=inner_s), Process(1.0, (0.02,)))
    outer = LoopStage(Controller(0.5, interval_s=outer_s), Process(1.0, (9.0,)))
    assert sampled_margins([inner, outer])[1] == NotSampled(reason)


def test_a_gain_margin_that_would_need_another_sampled_loop_is_not_quoted() -> None:
    inner = LoopStage(Controller(0.3, interval_s=1.0), Process(1.0, (0.02,)))
    outer = LoopStage(Controller(0.5, interval_s=1.5), Process(1.0, (9.0,)))
    found = quoted_margins([[inner, outer]])[0][1]
    assert found.stable
    assert math.isnan(found.gain_margin)
    assert found.not_quoted == "its interval of 1.5 s is no whole multiple of 1 s, that of the loop below"


def test_a_chain_needs_a_loop() -> None:
    with pytest.raises(ValueError, match="at least one loop"):
        sampled_margins([])
    with pytest.raises(ValueError, match="interval above zero"):
        pulse_response([Process(1.0, (4.0,))], step_s=0.0)
