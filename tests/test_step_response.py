"""Setpoint responses against closed forms of linear control."""

from __future__ import annotations

import math

import numpy as np
import pytest

from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.step_response import setpoint_response

# What the harmonics beyond the 4096th hold of the corner of a first-order rise: with k/(pi pace) between
# them and amplitudes falling as 1/k**2, half a hundredth of the step at the first sample and far less after.
TOLERANCE = 5e-3


def test_reset_that_cancels_the_lag_gives_a_first_order_rise() -> None:
    """L = K/(T s), so y = 1 - exp(-K t/T): elementary."""
    stage = LoopStage(Controller(gain=2.0, reset_s=50.0, interval_s=0.0), Process(gain=1.5, lags_s=(50.0,)))
    found = setpoint_response([stage], pace_rad_per_s=3.0 / 50.0)
    assert found is not None
    expected = 1.0 - np.exp(-3.0 / 50.0 * found.time_s)
    assert np.abs(found.measurement - expected).max() < TOLERANCE
    assert found.final == pytest.approx(1.0, abs=1e-6)
    assert found.overshoot < 1e-4
    # Within 2 % after ln(50) time constants; the samples stand 0.05/pace apart.
    assert found.settling_s == pytest.approx(math.log(50.0) * 50.0 / 3.0, rel=0.02)


def test_dead_time_and_interval_delay_the_rise() -> None:
    """An interval counts as half of itself in dead time: nothing moves before, and 1 K (t - delay)/T after."""
    controller = Controller(gain=1.0, reset_s=100.0, interval_s=4.0)
    stage = LoopStage(controller, Process(gain=1.0, lags_s=(100.0,), dead_time_s=8.0))
    found = setpoint_response([stage], pace_rad_per_s=0.01)
    assert found is not None
    # The corner at the end of the dead time is rounded by the harmonics left out.
    assert abs(float(np.interp(9.0, found.time_s, found.measurement))) < TOLERANCE
    assert float(np.interp(15.0, found.time_s, found.measurement)) == pytest.approx(0.05, abs=TOLERANCE)


def test_proportional_control_of_an_integrating_process_overshoots_as_second_order() -> None:
    """L = K/(s (1 + T s)): wn**2 = K/T, 2 zeta wn = 1/T, overshoot exp(-pi zeta/sqrt(1 - zeta**2)).

    Source: K. J. Astrom, R. M. Murray, Feedback Systems, 2nd ed. 2020, section 7.3 (second-order systems).
    """
    gain, lag = 0.05, 20.0
    controller = Controller(gain=1.0, reset_s=math.inf, interval_s=0.0)
    stage = LoopStage(controller, Process(gain=gain, lags_s=(lag,), integrating=True))
    found = setpoint_response([stage], pace_rad_per_s=math.sqrt(gain / lag))
    zeta = 1.0 / (2.0 * math.sqrt(gain * lag))
    assert found is not None
    assert found.overshoot == pytest.approx(math.exp(-math.pi * zeta / math.sqrt(1.0 - zeta**2)), abs=TOLERANCE)
    assert found.final == pytest.approx(1.0, abs=1e-6)


def test_proportional_control_of_a_lag_stays_short_of_the_setpoint() -> None:
    """Final value K/(1 + K), time constant T/(1 + K): elementary."""
    controller = Controller(gain=4.0, reset_s=math.inf, interval_s=0.0)
    found = setpoint_response([LoopStage(controller, Process(gain=1.0, lags_s=(10.0,)))], pace_rad_per_s=0.5)
    assert found is not None
    assert found.final == pytest.approx(0.8, abs=1e-6)
    assert np.abs(found.measurement - 0.8 * (1.0 - np.exp(-0.5 * found.time_s))).max() < TOLERANCE


def test_a_secondary_far_quicker_than_its_primary_does_not_show() -> None:
    """With an inner loop a thousand times as fast, the cascade is the primary on its own process."""
    inner = LoopStage(Controller(gain=1.0, reset_s=0.05, interval_s=0.0), Process(gain=1.0, lags_s=(0.05,)))
    outer = LoopStage(Controller(gain=1.0, reset_s=50.0, interval_s=0.0), Process(gain=1.0, lags_s=(50.0,)))
    cascade = setpoint_response([inner, outer], pace_rad_per_s=0.02)
    alone = setpoint_response([outer], pace_rad_per_s=0.02)
    assert cascade is not None
    assert alone is not None
    assert np.abs(cascade.measurement - alone.measurement).max() < TOLERANCE


def test_the_filter_of_the_controller_is_not_in_the_measurement() -> None:
    """While little has come back, the measurement is K (1 + t/Ti); a filter of its own would hold it back by 30 s."""
    controller = Controller(gain=1e-3, reset_s=1.0, interval_s=0.0, measurement_filter_s=30.0)
    found = setpoint_response([LoopStage(controller, Process(gain=1.0))], pace_rad_per_s=0.01)
    assert found is not None
    # What has come back after 30 s, K/Ti times the integral of the measurement, is below 0.0005.
    assert float(np.interp(30.0, found.time_s, found.measurement)) == pytest.approx(0.031, abs=1e-3)


def test_a_response_that_has_not_settled_is_refused() -> None:
    stage = LoopStage(Controller(gain=1.0, reset_s=1e5, interval_s=0.0), Process(gain=1.0, lags_s=(10.0,)))
    assert setpoint_response([stage], pace_rad_per_s=1.0) is None


@pytest.mark.parametrize("pace", [0.0, -1.0, math.inf, math.nan])
def test_a_pace_that_is_no_frequency_is_refused(pace: float) -> None:
    stage = LoopStage(Controller(gain=1.0, reset_s=10.0, interval_s=0.0), Process(gain=1.0, lags_s=(10.0,)))
    with pytest.raises(ValueError, match="positive frequency"):
        setpoint_response([stage], pace_rad_per_s=pace)
