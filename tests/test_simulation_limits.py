"""Intervals, limits, wind-up, stroke and backlash in simulated responses."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from loopdoc.engineering.clock import Clock
from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.simulation import Response, simulate
from loopdoc.engineering.structure import (
    ControlStructure,
    FinalElement,
    Scenario,
    cascade_structure,
    standard_scenarios,
)

VALVE = FinalElement()


def manual(
    process: Process, *, step_pct: float = 10.0, clock: Clock, valve: FinalElement = VALVE
) -> Response:
    """Step of the final element with the loop in manual."""
    structure = ControlStructure((process,), (None,), valve)
    return simulate([structure], [Scenario("step", final_element_step_pct=step_pct)], clock=clock)[0][0]


def deviation(response: Response) -> NDArray[np.float64]:
    return response.measurement_pct[-1] - 50.0


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


def test_an_upset_beyond_the_limit_leaves_an_offset_that_is_not_called_settled() -> None:
    """Upset 10 %, gain 0.24: 40 % of travel make good 9.6 %, so that 0.4 % stay, more than 2 % of the upset."""
    process = Process(0.24, (48.0,), 6.0)
    scenario = standard_scenarios(1)[1]
    limits = (Controller(8.0, 48.0, output_low_pct=10.0), Controller(8.0, 48.0, output_low_pct=0.0))
    short, enough = (
        simulate(
            [cascade_structure([LoopStage(one, process)], final_element=FinalElement(start_pct=start))], [scenario]
        )[0][0]
        for one, start in zip(limits, (50.0, 60.0), strict=True)
    )
    # Arrived but for what a lag of 48 s leaves after the whole horizon.
    assert deviation(short)[-1] == pytest.approx(10.0 - 0.24 * 40.0, abs=0.01)
    assert short.metrics.limited_level == 0
    assert math.isinf(short.metrics.settling_s)
    assert math.isinf(short.metrics.iae_pct_s)
    # 41.7 % of travel are asked for; here there are 60.
    assert deviation(enough)[-1] == pytest.approx(0.0, abs=0.01)
    assert enough.travel_pct[-1] == pytest.approx(60.0 - 10.0 / 0.24, abs=0.1)
    assert enough.metrics.limited_level is None
    assert math.isfinite(enough.metrics.settling_s)


def test_of_a_cascade_the_innermost_output_at_its_limit_is_named() -> None:
    """The secondary's valve can make good 5 of 20 %: the primary's output is not what is at its end."""
    inner = LoopStage(Controller(1.0, 5.0, output_low_pct=45.0), Process(1.0, (5.0,)))
    outer = LoopStage(Controller(1.0, 60.0), Process(1.0, (60.0,)))
    structure = cascade_structure([inner, outer], final_element=VALVE)
    response = simulate([structure], [standard_scenarios(2, size_pct=20.0)[1]])[0][0]
    assert response.travel_pct[-1] == pytest.approx(45.0, abs=1e-6)
    assert response.metrics.limited_level == 0
