"""Margins against closed forms, published worked examples and their own properties."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopdoc.engineering.frequency import (
    LoopStage,
    Margins,
    analyse_chain,
    speed_ratio,
)
from loopdoc.engineering.open_loop import level_arrays, open_loops
from loopdoc.engineering.pid import Controller, SeriesSettings, standard_from_series
from loopdoc.engineering.process import Process, in_series

INTEGRATOR = Process(1.0, integrating=True)


def single(controller: Controller, process: Process) -> Margins:
    return analyse_chain([LoopStage(controller, process)])[0]


# --- closed forms --------------------------------------------------------------------------------


@pytest.mark.parametrize(("a", "dead_time_s"), [(0.5, 1.0), (0.5, 40.0), (1.2, 3.0), (0.1, 0.2)])
def test_proportional_control_of_integrator_with_dead_time(a: float, dead_time_s: float) -> None:
    # a = K k' L: GM = pi/(2a), PM = pi/2 - a, crossover a/L, so that the delay margin is L (pi/2 - a)/a.
    margins = single(Controller(a / dead_time_s), Process(1.0, (), dead_time_s, integrating=True))
    assert margins.stable
    # All of these follow from one refined root: rounding only.
    assert margins.gain_margin == pytest.approx(math.pi / (2.0 * a), rel=1e-10)
    assert margins.phase_margin_deg == pytest.approx(90.0 - math.degrees(a), rel=1e-10)
    assert margins.crossover_rad_per_s == pytest.approx(a / dead_time_s, rel=1e-10)
    assert margins.phase_crossover_rad_per_s == pytest.approx(math.pi / (2.0 * dead_time_s), rel=1e-10)
    assert margins.delay_margin_s == pytest.approx(dead_time_s * (math.pi / 2.0 - a) / a, rel=1e-10)


# Robustness of SIMC PI with tauc = theta: Skogestad 2003, Table 1, recomputed to the digits given here.
SIMC_MARGINS = [
    (math.inf, 3.1416, 61.352, 1.5905, 1.0, 0.5, 1.5708, 2.1416),
    (8.0, 2.9634, 46.864, 1.7035, 1.2994, 0.5145, 1.4869, 1.5896),
]


@pytest.mark.parametrize(("reset_s", "gm", "pm", "ms", "mt", "wc", "w180", "delay"), SIMC_MARGINS)
def test_simc_margins(
    reset_s: float, gm: float, pm: float, ms: float, mt: float, wc: float, w180: float, delay: float
) -> None:
    margins = single(Controller(0.5, reset_s), Process(1.0, (), 1.0, integrating=True))
    found = (
        margins.gain_margin,
        margins.phase_margin_deg,
        margins.max_sensitivity,
        margins.max_complementary_sensitivity,
        margins.crossover_rad_per_s,
        margins.phase_crossover_rad_per_s,
        margins.delay_margin_s,
    )
    # The reference prints four decimals, the phase margin three.
    assert found == pytest.approx((gm, pm, ms, mt, wc, w180, delay), abs=6e-5, rel=2e-5)


def test_first_order_with_dead_time_and_matched_reset_is_an_integrator_with_dead_time() -> None:
    # Ti = tau cancels the lag: L = K k/(tau s) exp(-Ls), the closed form above with a = K k L/tau.
    margins = single(Controller(2.0, 10.0), Process(1.5, (10.0,), 2.0))
    assert margins.gain_margin == pytest.approx(math.pi / (2.0 * 0.6), rel=1e-10)
    assert margins.phase_margin_deg == pytest.approx(90.0 - math.degrees(0.6), rel=1e-10)


def test_integral_like_control_of_pure_dead_time() -> None:
    # L = g exp(-Ls) under P control: |L| = g everywhere, Ms = 1/(1 - g), Mt = g/(1 - g), GM = 1/g.
    margins = single(Controller(0.5), Process(1.0, (), 3.0))
    assert margins.stable
    assert margins.gain_margin == pytest.approx(2.0, rel=1e-10)
    assert margins.max_sensitivity == pytest.approx(2.0, rel=1e-8)
    assert margins.max_complementary_sensitivity == pytest.approx(1.0, rel=1e-8)
    # The gain never crosses 1: there is no crossover and no angle or delay that could destabilise.
    assert math.isnan(margins.crossover_rad_per_s)
    assert margins.phase_margin_deg == math.inf
    assert margins.delay_margin_s == math.inf


def test_gain_above_one_through_pure_dead_time_is_unstable() -> None:
    assert not single(Controller(1.01), Process(1.0, (), 3.0)).stable


@pytest.mark.parametrize(
    ("process", "ku", "wu"),
    [
        (Process(1.0, (1.0, 1.0, 1.0)), 8.0, math.sqrt(3.0)),  # classical: (1 + jw)^3 = -8 at sqrt 3
        (Process(1.0, (2.0, 5.0, 1.0)), 12.6, 0.89442719),  # Seborg and others, Example 10.4: 63/5
        (Process(2.0, (10.0, 5.0), 1.0), 7.8756645, 0.5388724),  # Seborg prints 7.88 and 11.6 (from memory)
        (Process(1.0, (10.0,), 2.0), 8.502425, 2.0 * math.pi / 7.4415227),
    ],
)
def test_ultimate_gain(process: Process, ku: float, wu: float) -> None:
    margins = single(Controller(1.0), process)
    # Seven to eight printed digits.
    assert margins.gain_margin == pytest.approx(ku, rel=1e-7)
    assert margins.phase_crossover_rad_per_s == pytest.approx(wu, rel=1e-7)
    assert single(Controller(ku * 0.9999), process).stable
    beyond = single(Controller(ku * 1.0001), process)
    assert not beyond.stable
    assert beyond.gain_margin == pytest.approx(1.0 / 1.0001, rel=1e-6)
    assert beyond.phase_margin_deg < 0.0
    assert beyond.max_sensitivity == math.inf
    assert beyond.delay_margin_s == 0.0


def test_a_loop_on_its_stability_limit_is_not_stable() -> None:
    assert not single(Controller(8.0), Process(1.0, (1.0, 1.0, 1.0))).stable


def test_bandwidth_of_a_first_order_loop() -> None:
    # L = 3/(5s+1): T = 0.75/(1.25s+1), 3 dB down at 1/1.25; 3 dB is taken as a factor of 1/sqrt 2.
    margins = single(Controller(3.0), Process(1.0, (5.0,)))
    assert margins.bandwidth_rad_per_s == pytest.approx(0.8, rel=1e-10)
    assert margins.gain_margin == math.inf
    assert math.isnan(margins.phase_crossover_rad_per_s)
    # |L| = 1 at 5w = sqrt 8.
    assert margins.crossover_rad_per_s == pytest.approx(math.sqrt(8.0) / 5.0, rel=1e-10)
    # |S| is 1/4 at rest and rises to 1 where the loop no longer acts.
    assert margins.max_sensitivity == pytest.approx(1.0, abs=1e-6)


def test_an_interval_is_half_of_itself_in_dead_time() -> None:
    sampled = single(Controller(1.0, 10.0, interval_s=3.0), Process(1.0, (10.0,), 2.0))
    delayed = single(Controller(1.0, 10.0), Process(1.0, (10.0,), 3.5))
    assert sampled.gain_margin == pytest.approx(delayed.gain_margin, rel=1e-12)
    assert sampled.max_sensitivity == pytest.approx(delayed.max_sensitivity, rel=1e-12)


def test_the_measurement_filter_is_in_the_loop() -> None:
    filtered = single(Controller(1.0, 10.0, measurement_filter_s=3.0), Process(1.0, (10.0,), 2.0))
    lagged = single(Controller(1.0, 10.0), Process(1.0, (10.0, 3.0), 2.0))
    assert filtered.max_sensitivity == pytest.approx(lagged.max_sensitivity, rel=1e-12)


# --- direction, several crossovers, conditional stability ----------------------------------------


def test_wrong_action_is_unstable() -> None:
    margins = single(Controller(-1.0, 10.0), Process(1.0, (10.0,), 2.0))
    assert not margins.stable
    # Less gain does not mend a wrong action.
    assert math.isnan(margins.gain_margin)


def test_direct_action_on_a_falling_process_is_sound() -> None:
    rising = single(Controller(1.0, 10.0), Process(2.0, (10.0,), 2.0))
    falling = single(Controller(-1.0, 10.0), Process(-2.0, (10.0,), 2.0))
    assert falling == rising


def test_conditionally_stable_loop() -> None:
    """PI on an integrating process with two lags: the phase begins at -180 and rises only in between."""
    process = Process(1.0, (0.02, 0.01), integrating=True)
    # Characteristic s^2 (0.02s+1)(0.01s+1) + K s + K/Ti; Routh array of 0.0002, 0.03, 1, K, K/Ti.
    reset_s = 1.0

    def routh_stable(k: float) -> bool:
        a, b, c, d, e = 0.0002, 0.03, 1.0, k, k / reset_s
        first = (b * c - a * d) / b
        second = (first * d - b * e) / first
        return first > 0.0 and second > 0.0 and e > 0.0

    for k in (0.02, 0.05, 1.0, 50.0, 149.0, 200.0):
        assert single(Controller(k, reset_s), process).stable == routh_stable(k), k


def test_several_gain_crossovers_take_the_worst() -> None:
    """A slow loop around a lightly damped inner loop crosses 1 again at the resonance."""
    inner = LoopStage(Controller(24.5), Process(1.0, (1.0, 1.0), 0.0512))
    outer = LoopStage(Controller(0.6, 4.0), Process(1.0, (8.0,)))
    w = np.geomspace(1e-3, 100.0, 400_001)
    s = 1j * w
    first = 24.5 * np.exp(-0.0512 * s) / (1.0 + s) ** 2
    loop = 0.6 * (1.0 + 0.25 / s) / (1.0 + 8.0 * s) * first / (1.0 + first)
    crossings = np.nonzero(np.diff(np.abs(loop) > 1.0))[0]
    margins = analyse_chain([inner, outer])[1]
    # The dense grid of this test places crossings and peaks to about 3e-5.
    assert margins.crossover_rad_per_s == pytest.approx(w[crossings[-1]], rel=1e-4)
    assert margins.max_sensitivity == pytest.approx((1.0 / np.abs(1.0 + loop)).max(), rel=1e-4)
    angles = np.abs(np.degrees(np.angle(-loop[crossings])))
    assert margins.phase_margin_deg == pytest.approx(angles.min(), rel=1e-3)


def test_outer_loop_may_hold_an_unstable_inner_one() -> None:
    """Inner loop of the wrong action, L = -2/(s+1): one growing mode at s = 1, moved back by the outer loop."""
    inner = LoopStage(Controller(-2.0), Process(1.0, (1.0,)))
    # T = -2/(s-1); outer P of gain -1 on no dynamics but 0.1 s: 0.1 s^2 + 0.9 s + 1 has no growing mode.
    outer = LoopStage(Controller(-1.0), Process(1.0, (0.1,)))
    margins = analyse_chain([inner, outer])
    assert [m.stable for m in margins] == [False, True]
    # With less than half of that gain the mode is left growing: 0.1 s^2 + 0.9 s + 2 K - 1.
    assert not analyse_chain([inner, LoopStage(Controller(-0.49), Process(1.0, (0.1,)))])[1].stable


# --- published cascades --------------------------------------------------------------------------

# D. E. Seborg, T. F. Edgar, D. A. Mellichamp, Process Dynamics and Control, Example 16.1 (statement from
# memory, limits by Routh): Gv = 5/(s+1), Gp1 = 4/((4s+1)(2s+1)), Km1 = 0.05, Km2 = 0.2, minutes. In percent
# of the measurements: secondary 1/(s+1), primary 4*0.05/0.2 = 1.
SECONDARY = Process(1.0, (60.0,))
PRIMARY = Process(1.0, (240.0, 120.0))


def seborg(kc1: float, kc2: float) -> tuple[Margins, ...]:
    return analyse_chain([LoopStage(Controller(kc2), SECONDARY), LoopStage(Controller(kc1), PRIMARY)])


@pytest.mark.parametrize(
    ("kc2", "limit"),
    [
        (0.5, 42.0),
        (1.0, 33.75),
        (2.0, 34.125),
        (4.0, 43.3125),
        (8.0, 65.90625),
        (16.0, 113.203125),
        (25.0, 166.95),
    ],
)
def test_seborg_stability_limits(kc2: float, limit: float) -> None:
    margins = seborg(1.0, kc2)[1]
    # Exact rationals from the Routh array.
    assert margins.gain_margin == pytest.approx(limit, rel=1e-9)
    assert seborg(0.999 * limit, kc2)[1].stable
    assert not seborg(1.001 * limit, kc2)[1].stable


def test_seborg_ultimate_frequency_of_the_cascade() -> None:
    # sqrt(31/8) rad/min.
    found = seborg(1.0, 4.0)[1].phase_crossover_rad_per_s * 60.0
    assert found == pytest.approx(math.sqrt(31.0 / 8.0), rel=1e-9)


def test_seborg_single_loop() -> None:
    # The same valve and primary under one controller: limit 45/4 at sqrt(7/8) rad/min, Gv Gp1 Km1 = 1/(...).
    margins = single(Controller(1.0), in_series(SECONDARY, PRIMARY))
    assert margins.gain_margin == pytest.approx(45.0 / 4.0, rel=1e-9)
    assert margins.phase_crossover_rad_per_s * 60.0 == pytest.approx(math.sqrt(7.0 / 8.0), rel=1e-9)


def test_seborg_cascade_against_the_single_loop() -> None:
    """Ratio of the limits 3.85; the secondary is five times as fast closed, 0.2 min instead of 1 min."""
    cascade = seborg(1.0, 4.0)
    alone = single(Controller(1.0), in_series(SECONDARY, PRIMARY))
    assert cascade[1].gain_margin / alone.gain_margin == pytest.approx(3.85, rel=1e-9)
    assert cascade[0].bandwidth_rad_per_s == pytest.approx(1.0 / (0.2 * 60.0), rel=1e-9)


@pytest.mark.parametrize(
    ("gain", "lag", "static", "closed_lag"), [(4.0, 1.0, 0.8, 0.2), (9.0, 10.0, 0.9, 1.0), (1.0, 6.0, 0.5, 3.0)]
)
def test_a_first_order_secondary_under_proportional_control(
    gain: float, lag: float, static: float, closed_lag: float
) -> None:
    """K/(1+K) and tau/(1+K), standard algebra: the closed loop is a lag, largest at rest and 3 dB down at 1/tau."""
    found = single(Controller(gain), Process(1.0, (lag,)))
    assert found.max_complementary_sensitivity == pytest.approx(static, rel=1e-12)
    assert found.bandwidth_rad_per_s == pytest.approx(1.0 / closed_lag, rel=1e-9)


def test_a_first_order_secondary_whose_reset_is_its_lag() -> None:
    """1/(tauc s + 1) with tauc = tau/K = 0.5 s (direct synthesis, standard algebra)."""
    found = single(Controller(4.0, 2.0), Process(1.0, (2.0,)))
    assert found.bandwidth_rad_per_s == pytest.approx(1.0 / 0.5, rel=1e-9)
    assert found.max_complementary_sensitivity == pytest.approx(1.0, rel=1e-12)
    assert found.crossover_rad_per_s == pytest.approx(1.0 / 0.5, rel=1e-9)


@pytest.mark.parametrize(("k1", "k2", "primary_gain"), [(10.0, 4.0, 1.0), (0.5, 2.0, 3.0)])
def test_a_secondary_upset_at_rest_under_proportional_control(k1: float, k2: float, primary_gain: float) -> None:
    """Attenuated to 1/(1 + K2 + K1 K2 Kp1) of what it does to the open loop (standard algebra); the offset of
    Seborg's cascade for Kc1 = 10, 0.0888889 = 4/(5 + 4 Kc1), is that times the 4 by which it comes through."""
    levels = [
        level_arrays([Controller(k2)], [SECONDARY]),
        level_arrays([Controller(k1)], [Process(primary_gain, (240.0, 120.0))]),
    ]
    inner, outer = (loop[0, 0] for loop in open_loops(levels, np.array([[1e-9]])))
    attenuation = abs(1.0 / ((1.0 + inner) * (1.0 + outer)))
    assert attenuation == pytest.approx(1.0 / (1.0 + k2 + k1 * k2 * primary_gain), rel=1e-9)
    if k1 == 10.0:
        assert 4.0 * attenuation == pytest.approx(0.0888889, abs=5e-8)


@pytest.mark.parametrize(
    ("kc2", "limit", "w"),
    [(1.0, 8.0802, 2.0025), (5.0, 14.44804, 3.4655), (10.0, 24.24402, 4.6915), (20.0, 44.14201, 6.4815)],
)
def test_stephanopoulos_cascade(kc2: float, limit: float, w: float) -> None:
    # G. Stephanopoulos, Chemical Process Control, 1984, ch. 20 (attribution from memory), 1/(0.1s+1) inside
    # 100/(10s+1)^2; limits by Routh.
    chain = [
        LoopStage(Controller(kc2), Process(1.0, (0.1,))),
        LoopStage(Controller(1.0), Process(100.0, (10.0, 10.0))),
    ]
    margins = analyse_chain(chain)[1]
    assert margins.gain_margin == pytest.approx(limit, rel=1e-5)
    # Four decimals are printed.
    assert margins.phase_crossover_rad_per_s == pytest.approx(w, abs=6e-5)


def test_stephanopoulos_single_loop() -> None:
    margins = single(Controller(1.0), Process(100.0, (0.1, 10.0, 10.0)))
    assert margins.gain_margin == pytest.approx(2.0402, rel=1e-5)
    assert margins.phase_crossover_rad_per_s == pytest.approx(1.417745, abs=1e-6)


# SIMC PI and PID of Skogestad 2003, Table 4: process, Kc, tauI, tauD, Ms computed for the whole process with
# the series PID and a derivative filter of 0.01 tauD (recalled published values differ by at most 0.021).
SIMC_CASES = [
    (Process(1.0, (1.0, 0.2)), 5.5, 0.8, 0.0, 1.56, 1.277),
    (
        Process(1.0, (2.0, 1.0, 0.4, 0.2, 0.05, 0.05, 0.05), 0.0, (-0.3, 0.08)),
        0.85034,
        2.5,
        0.0,
        1.662,
        1.038,
    ),
    (Process(1.0, (2.0, 1.0, 0.4, 0.2, 0.05, 0.05, 0.05), 0.0, (-0.3, 0.08)), 1.2987, 2.0, 1.2, 1.74, 1.052),
    (Process(2.0, (20.0, 1.0, 0.1, 0.1), 0.0, (15.0,)), 2.33333, 1.05, 0.0, 1.55, 1.078),
    (Process(1.0, (1.0,) * 4), 0.3, 1.5, 0.0, 1.463, 1.0),
    (Process(1.0, (1.0, 1.0, 0.028), 0.0, (0.17, 0.17), True), 0.29586, 13.52, 0.0, 1.475, 1.294),
    (Process(1.0, (1.0, 1.0, 1.0), 0.0, (-2.0,)), 0.21429, 1.5, 0.0, 1.66, 1.0),
    (Process(1.0, (1.0, 1.0), 1.0), 0.5, 1.5, 0.0, 1.614, 1.0),
    (Process(1.0, (20.0, 2.0), 1.0), 5.25, 16.0, 0.0, 1.716, 1.234),
    (Process(1.0, (10.0, 8.0, 1.0), 0.3, (6.0, 3.0)), 7.40741, 1.0, 0.0, 1.657, 1.182),
    (Process(1.0, (1.0, 0.2)), 10.0, 0.4, 0.2, 1.017, 1.066),
    (Process(2.0, (20.0, 1.0, 0.1, 0.1), 0.0, (15.0,)), 6.66667, 0.4, 0.15, 1.524, 1.237),
    (Process(1.0, (1.0,) * 4), 0.5, 1.5, 1.0, 1.437, 1.0),
    (Process(1.0, (1.0, 1.0, 0.028), 0.0, (0.17, 0.17), True), 1.39665, 2.864, 1.33, 1.249, 1.31),
    (Process(1.0, (1.0, 1.0, 1.0), 0.0, (-2.0,)), 0.3, 1.5, 1.0, 1.857, 1.011),
    (Process(1.0, (1.0, 1.0), 1.0), 0.5, 1.0, 1.0, 1.599, 1.0),
    (Process(1.0, (20.0, 2.0), 1.0), 10.0, 8.0, 2.0, 1.671, 1.164),
]


@pytest.mark.parametrize(("process", "gain", "reset_s", "rate_s", "ms", "mt"), SIMC_CASES)
def test_simc_sensitivities(
    process: Process, gain: float, reset_s: float, rate_s: float, ms: float, mt: float
) -> None:
    standard = standard_from_series(SeriesSettings(gain, reset_s, rate_s))
    margins = single(
        Controller(standard.gain, standard.reset_s, standard.rate_s, derivative_filter=100.0), process
    )
    # Three printed decimals; the placing of the derivative filter differs a little where there is rate, most for E6
    # PID, of which 1.23 is what the paper prints (from memory).
    tolerance = 0.012 if rate_s else 0.00051
    assert margins.max_sensitivity == pytest.approx(ms, abs=tolerance)
    assert margins.max_complementary_sensitivity == pytest.approx(mt, abs=tolerance)


# --- properties ----------------------------------------------------------------------------------

positive = st.floats(0.05, 20.0)


@settings(max_examples=40, deadline=None)
@given(gain=positive, reset_s=positive, lag_s=positive, dead_time_s=positive)
def test_doubling_dead_time_never_raises_the_delay_margin(
    gain: float, reset_s: float, lag_s: float, dead_time_s: float
) -> None:
    controller = Controller(gain, reset_s)
    short = single(controller, Process(1.0, (lag_s,), dead_time_s))
    long = single(controller, Process(1.0, (lag_s,), 2.0 * dead_time_s))
    assert long.delay_margin_s <= short.delay_margin_s * (1.0 + 1e-9)
    assert short.stable or not long.stable
    if short.stable:
        # Added dead time up to the delay margin is what the loop can take, by definition.
        margin = short.delay_margin_s
        assert single(controller, Process(1.0, (lag_s,), dead_time_s + 0.999 * margin)).stable
        assert not single(controller, Process(1.0, (lag_s,), dead_time_s + 1.001 * margin)).stable


@settings(max_examples=30, deadline=None)
@given(gain=positive, reset_s=positive, lag_s=positive, dead_time_s=positive, faster=st.floats(1e-3, 1e3))
def test_margins_do_not_depend_on_the_unit_of_time(
    gain: float, reset_s: float, lag_s: float, dead_time_s: float, faster: float
) -> None:
    one = single(Controller(gain, reset_s), Process(1.0, (lag_s,), dead_time_s))
    other = single(Controller(gain, reset_s * faster), Process(1.0, (lag_s * faster,), dead_time_s * faster))
    assert one.stable == other.stable
    if one.stable:
        assert other.gain_margin == pytest.approx(one.gain_margin, rel=1e-9)
        assert other.max_sensitivity == pytest.approx(one.max_sensitivity, rel=1e-7)
        assert other.crossover_rad_per_s * faster == pytest.approx(
            one.crossover_rad_per_s, rel=1e-9, nan_ok=True
        )


@settings(max_examples=30, deadline=None)
@given(gain=positive, reset_s=positive, lag_s=positive, dead_time_s=positive)
def test_margins_bound_each_other(gain: float, reset_s: float, lag_s: float, dead_time_s: float) -> None:
    # Astrom and Hagglund 2006, section 4.5: GM >= Ms/(Ms - 1) and PM >= 2 asin(1/(2 Ms)).
    margins = single(Controller(gain, reset_s), Process(1.0, (lag_s,), dead_time_s))
    if margins.stable:
        ms = margins.max_sensitivity
        assert margins.gain_margin >= ms / (ms - 1.0) * (1.0 - 1e-9)
        assert margins.phase_margin_deg >= math.degrees(2.0 * math.asin(0.5 / ms)) * (1.0 - 1e-9)


# --- batches and small things --------------------------------------------------------------------


def test_speed_ratio_is_the_ratio_of_crossovers() -> None:
    # Two matched PI loops: crossovers K/tau of 1/4 and 1.5/60 rad/s, the inner one seen only through T = 1.
    inner = single(Controller(1.0, 4.0), Process(1.0, (4.0,)))
    outer = single(Controller(1.5, 60.0), Process(1.0, (60.0,)))
    assert speed_ratio(inner, outer) == pytest.approx(10.0, rel=1e-10)


def test_every_crossover_counts_where_a_loop_below_resonates() -> None:
    """By the loop written out on two million frequencies: crossovers at 0.1839, 0.6178 and 0.6709 rad/s, with 0.9,
    103.8 and 47.5 deg to -1.
    """
    inner = LoopStage(Controller(2.7, 20.0, interval_s=1.0), Process(1.0, (5.0,), 2.0))
    outer = LoopStage(Controller(16.0, 300.0, interval_s=1.0), Process(0.8, (60.0,), 6.0))
    below, above = analyse_chain([inner, outer])
    assert (below.crossovers, above.crossovers) == (1, 3)
    # Four digits of the grid.
    assert above.crossover_rad_per_s == pytest.approx(0.6709, abs=1e-4)
    assert above.phase_margin_deg == pytest.approx(0.918, abs=1e-3)
    assert above.max_sensitivity == pytest.approx(134.6, rel=1e-3)
    assert single(Controller(0.3), Process(1.0, (5.0,), 2.0)).crossovers == 0


def test_an_unstable_loop_has_a_phase_margin_only_where_a_crossover_is_beyond() -> None:
    """An integrator with a dead time of 1 s under a gain a crosses over at a rad/s, at -90 deg less a."""
    alone = single(Controller(1.8), Process(1.0, (), 1.0, integrating=True))
    assert alone.phase_margin_deg == pytest.approx(90.0 - math.degrees(1.8), rel=1e-10)
    # The outer loop crosses over a thousand times slower, at 0.001 rad/s and 90 deg short of -1: it swings for the
    # inner one.
    inner = LoopStage(Controller(1.8), Process(1.0, (), 1.0, integrating=True))
    _, outer = analyse_chain([inner, LoopStage(Controller(0.001), INTEGRATOR)])
    assert not outer.stable
    assert outer.crossover_rad_per_s == pytest.approx(0.001, rel=1e-3)
    assert outer.phase_margin_deg == math.inf


def test_loops_that_swing_have_no_speed_to_compare() -> None:
    # The gain of an integrator with a dead time of 1 s may be pi/2 at most.
    inner, outer = (single(Controller(gain), Process(1.0, (), 1.0, integrating=True)) for gain in (1.6, 0.1))
    assert not inner.stable
    assert math.isnan(speed_ratio(inner, outer))
    assert math.isnan(speed_ratio(outer, inner))


def test_an_empty_chain_is_refused() -> None:
    with pytest.raises(ValueError, match="at least one loop"):
        analyse_chain([])


@pytest.mark.parametrize(
    ("fields", "said"),
    [
        ({"gain": 0.0}, "other than zero"),
        ({"gain": 1.0, "lags_s": (-1.0,)}, "every lag"),
        ({"gain": 1.0, "dead_time_s": math.inf}, "dead time"),
        ({"gain": 1.0, "lags_s": (1.0,), "leads_s": (math.nan,)}, "every lead"),
        ({"gain": 1.0, "lags_s": (1.0, 0.0), "leads_s": (1.0, 2.0)}, "more leads than lags"),
    ],
)
def test_a_process_that_cannot_be_is_refused(fields: dict[str, object], said: str) -> None:
    with pytest.raises(ValueError, match=said):
        Process(**fields)  # type: ignore[arg-type]


def test_two_integrations_in_series_are_refused() -> None:
    with pytest.raises(ValueError, match="two integrating processes"):
        in_series(INTEGRATOR, INTEGRATOR)
