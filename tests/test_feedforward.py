"""Feedforward in the time domain, against closed forms, python-control and the algorithm written out by hand."""

import math
import warnings

import numpy as np
import pytest
from numpy.typing import NDArray

from loopdoc.engineering.clock import Clock
from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.functions import Curve
from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.simulation import Response, simulate
from loopdoc.engineering.structure import (
    ControlStructure,
    Disturbance,
    Feedforward,
    FinalElement,
    MeasuredMove,
    Scenario,
    cascade_structure,
    single_loop_structure,
)

with warnings.catch_warnings():
    # python-control looks for optional packages with calls that newer Pythons deprecate.
    warnings.simplefilter("ignore")
    import control

VALVE = FinalElement()
WIDE = {"output_low_pct": -1e9, "output_high_pct": 1e9, "setpoint_low_pct": -1e9, "setpoint_high_pct": 1e9}


def respond(structure: ControlStructure, scenario: Scenario, clock: Clock) -> Response:
    return simulate([structure], [scenario], clock=clock)[0][0]


def deviation(response: Response, level: int = -1) -> NDArray[np.float64]:
    return response.measurement_pct[level] - 50.0


# --- perfect feedforward -------------------------------------------------------------------------


@pytest.mark.parametrize(
    "process",
    [
        Process(2.0, (20.0, 3.0), 4.0),
        Process(-1.5, (20.0,), 2.37),  # the dead time ends within a step
        Process(0.02, (5.0,), 3.0, integrating=True),
        Process(1.2, (12.0, 4.0), 1.25, (-3.0,)),
    ],
)
def test_static_feedforward_on_the_path_of_the_upset_leaves_nothing_of_it(process: Process) -> None:
    """The upset enters where the valve does, and what is measured moves the valve against it at the same moment."""
    controller = Controller(math.copysign(0.6, process.gain), 25.0, interval_s=0.5, **WIDE)
    structure = ControlStructure(
        (process,), (controller,), VALVE, feedforwards=((Feedforward("FT-1", -0.8),),)
    )
    # 5 % of a span in which 1 % is worth 0.8 % of the valve.
    path = Process(abs(process.gain) if process.integrating else 1.0, process.lags_s, 0.0, process.leads_s,
                   process.integrating)  # fmt: skip
    load = 4.0 if process.integrating else 4.0 * process.gain
    upset = Disturbance(0, load, path, process.dead_time_s)
    fed = Scenario("fed", disturbances=(upset,), moves=(MeasuredMove("FT-1", 5.0),))
    clock = Clock(0.5, 400)
    response = respond(structure, fed, clock)
    # Equal and opposite inputs of one process: rounding only.
    np.testing.assert_allclose(deviation(response), 0.0, atol=1e-12)
    np.testing.assert_allclose(response.travel_pct - 50.0, -4.0, atol=1e-12)
    alone = respond(structure, Scenario("alone", disturbances=(upset,)), clock)
    assert np.abs(deviation(alone)).max() > 0.5


def test_feedforward_in_a_sum_through_a_secondary_leaves_what_the_secondary_is_late() -> None:
    """Three elements without noise: the level moves by what the feedwater lacks before its loop has followed.

    The upset takes 6 % from a level of 0.01 %/s per %; the setpoint of the secondary rises by 6 % at once. A secondary
    whose closed loop is a lag of 5 s (lambda tuning of a lag: K = T/(5 g), reset T) brings the water late by 5 s, so
    that the level falls by 0.01 * 6 * 5 = 0.3 % in the end; its own controller hardly does anything.
    """
    inner = LoopStage(Controller(10.0 / 5.0, 10.0, **WIDE), Process(1.0, (10.0,)))
    outer = LoopStage(Controller(1e-6, **WIDE), Process(0.01, integrating=True))
    structure = cascade_structure([inner, outer], final_element=VALVE, feedforwards=((), (Feedforward("FT-1", 1.0),)))
    upset = Disturbance(1, -6.0, Process(0.01, integrating=True))
    fed = Scenario("fed", disturbances=(upset,), moves=(MeasuredMove("FT-1", 6.0),))
    response = respond(structure, fed, Clock(0.01, 8000))
    # Scanned every 0.01 s, half of which makes the water later still: 1e-3 of the 5 s.
    assert deviation(response)[-1] == pytest.approx(-0.3, rel=3e-3)
    # And by what a lag is late on the way: e(t) = 0.3 (1 - exp(-t/5)).
    expected = -0.3 * (1.0 - np.exp(-response.time_s / 5.0))
    np.testing.assert_allclose(deviation(response), expected, atol=2e-3)


# --- against python-control ----------------------------------------------------------------------


def test_dynamic_feedforward_into_a_cascade_against_python_control() -> None:
    s = control.tf("s")
    inner = LoopStage(Controller(2.0, 4.0, **WIDE), Process(1.0, (4.0, 1.0)))
    outer = LoopStage(Controller(3.0, 60.0, **WIDE), Process(0.9, (60.0, 10.0)))
    lead_lags = (LeadLag(0.0, 2.0), LeadLag(30.0, 12.0))  # the filter of the transmitter, and a lead-lag
    structure = cascade_structure(
        [inner, outer], final_element=VALVE, feedforwards=((), (Feedforward("FT-1", -0.7, lead_lags),))
    )
    upset = Disturbance(1, 5.0, Process(1.0, (40.0,)))
    scenario = Scenario("fed", disturbances=(upset,), moves=(MeasuredMove("FT-1", 6.0, 8.0),))
    response = respond(structure, scenario, Clock(0.05, 8000))
    c2, g2 = 2.0 * (1 + 1 / (4.0 * s)), 1 / ((4 * s + 1) * (s + 1))
    c1, g1 = 3.0 * (1 + 1 / (60.0 * s)), 0.9 / ((60 * s + 1) * (10 * s + 1))
    closed = control.minreal(c2 * g2 / (1 + c2 * g2), verbose=False)
    fed = -0.7 * 6.0 / (8 * s + 1) / (2 * s + 1) * (30 * s + 1) / (12 * s + 1)
    open_loop = 5.0 / (40 * s + 1) + closed * g1 * fed
    whole = control.minreal(open_loop / (1 + c1 * closed * g1), verbose=False)
    expected = np.asarray(control.step_response(whole, response.time_s)[1])
    # A continuous controller is scanned every 0.05 s: an error of that order against the fastest lag, 1 s.
    np.testing.assert_allclose(deviation(response), expected, atol=0.05 * np.abs(expected).max())
    without = respond(structure, Scenario("alone", disturbances=(upset,)), Clock(0.05, 8000))
    # Ten times what the two may differ by: the feedforward is seen at work.
    assert np.abs(deviation(without) - expected).max() > 0.5 * np.abs(expected).max()


# --- as it is executed ---------------------------------------------------------------------------


def test_feedforward_scan_by_scan_by_hand() -> None:
    """A lead-lag and a filter executed every second step with their controller, on a lag that is held in between."""
    h, lag, gain, k, ti = 0.5, 6.0, 1.5, 0.8, 20.0
    controller = Controller(k, ti, interval_s=2 * h, **WIDE)
    feedforward = Feedforward("FT-1", 0.4, (LeadLag(0.0, 3.0), LeadLag(8.0, 5.0)))
    structure = ControlStructure((Process(gain, (lag,)),), (controller,), VALVE, feedforwards=((feedforward,),))
    response = respond(structure, Scenario("fed", moves=(MeasuredMove("FT-1", 10.0, 2.0),)), Clock(h, 240))
    y, integral, filtered, lagged, valve, expected = 0.0, 0.0, 0.0, 0.0, 0.0, []
    for step in range(241):
        expected.append(y)
        if step % 2 == 0:
            moved = 10.0 * (1.0 - math.exp(-step * h / 2.0))
            filtered += (1.0 - math.exp(-2 * h / 3.0)) * (0.4 * moved - filtered)
            lagged += (1.0 - math.exp(-2 * h / 5.0)) * (filtered - lagged)
            integral += k * 2 * h / ti * (0.0 - y)
            valve = k * (0.0 - y) + integral + 8.0 / 5.0 * filtered + (1.0 - 8.0 / 5.0) * lagged
        y = math.exp(-h / lag) * y + gain * (1.0 - math.exp(-h / lag)) * valve
    # The same recursion: rounding only.
    np.testing.assert_allclose(deviation(response), expected, atol=1e-11)


def test_a_lead_lag_behind_the_sum_acts_on_both() -> None:
    """What joins in front of a lead-lag of the output goes through it; what joins behind it does not."""
    controller = Controller(1e-9, **WIDE)
    process = Process(1.0, (5.0,))

    def travel(joins: int) -> NDArray[np.float64]:
        structure = ControlStructure(
            (process,), (controller,), VALVE, lead_lags=((LeadLag(3.0, 6.0),),),
            feedforwards=((Feedforward("FT-1", 1.0, joins=joins),),),
        )  # fmt: skip
        scenario = Scenario("fed", moves=(MeasuredMove("FT-1", 10.0),))
        return respond(structure, scenario, Clock(0.1, 300)).travel_pct - 50.0

    # The lag takes a held step exactly, and has gone its first way at the first scan.
    steps = 1.0 - np.exp(-0.1 * np.arange(1, 302) / 6.0)
    np.testing.assert_allclose(travel(0), 0.5 * 10.0 + 0.5 * 10.0 * steps, atol=1e-6)
    np.testing.assert_allclose(travel(1), 10.0, atol=1e-6)


def test_a_ratio_multiplies_what_the_controller_asks_for() -> None:
    """Setpoint of the secondary = ratio x wild flow, in the units of a plant.

    Wild flow 40 of 0 to 80 t/h, secondary 20 of 0 to 50 t/h: a ratio of 0.5 in normal operation. The wild flow rises
    by 8 t/h while the controller of the ratio moves it as it will.
    """
    inner = LoopStage(Controller(1.5, 4.0, interval_s=0.5, **WIDE), Process(1.0, (4.0,)))
    outer = LoopStage(Controller(0.9, 40.0, interval_s=1.0, **WIDE), Process(0.8, (60.0,), 3.0))
    feedforward = Feedforward("FT-1", 80.0 / 100.0 / 40.0, multiplied_pct=40.0)
    structure = cascade_structure(
        [inner, outer], final_element=VALVE, start_pct=(40.0, 50.0), feedforwards=((), (feedforward,))
    )
    upset = Disturbance(1, -9.0, Process(1.0, (30.0,)))
    scenario = Scenario("fed", disturbances=(upset,), moves=(MeasuredMove("FT-1", 10.0, 5.0),))
    response = respond(structure, scenario, Clock(0.5, 1200))
    output, setpoint = response.output_pct[1], response.setpoint_pct[0]
    assert output is not None
    assert setpoint is not None
    scans = slice(0, None, 2)
    # The output is in percent of the secondary as it stands at the normal wild flow: 1 % is 0.5 of 40 t/h.
    ratio = output[scans] / 100.0 * 50.0 / 40.0
    wild = 40.0 + 8.0 * (1.0 - np.exp(-response.time_s[scans] / 5.0))
    np.testing.assert_allclose(setpoint[scans], ratio * wild / 50.0 * 100.0, atol=1e-10)
    assert np.ptp(ratio) > 0.02  # the product is seen at work, not one of its factors alone


def test_a_characteriser_on_the_way_brings_what_its_curve_gives() -> None:
    curve = Curve((-20.0, 0.0, 5.0, 20.0), (-10.0, 0.0, 4.0, 7.0))
    feedforward = Feedforward("FT-1", 0.5, curves=(curve,))
    # 10 % moves on past the corner at 5 %: 4 + 3/15 x 5 = 5, halved.
    assert feedforward.brings(10.0) == pytest.approx(2.5)
    structure = ControlStructure(
        (Process(1.0, (5.0,)),), (Controller(1e-9, **WIDE),), VALVE, feedforwards=((feedforward,),)
    )
    response = respond(structure, Scenario("fed", moves=(MeasuredMove("FT-1", 10.0),)), Clock(0.1, 50))
    assert response.travel_pct[-1] - 50.0 == pytest.approx(2.5)


# --- limits --------------------------------------------------------------------------------------


def test_the_primary_tracks_what_the_secondary_took_less_what_is_fed_forward() -> None:
    """While the sum stands at the secondary's setpoint limit, the integral holds as for a limit of its own.

    At rest the integral of a PI primary stands still where K h/Ti e + h/Ti (actual - computed) = 0, so that the output
    is what the secondary took of it, and K e more: limit - feedforward + K e.
    """
    inner = LoopStage(
        Controller(1.5, 4.0, setpoint_low_pct=0.0, setpoint_high_pct=62.0, output_low_pct=-1e9, output_high_pct=1e9),
        Process(1.0, (4.0,)),
    )
    outer = LoopStage(Controller(2.0, 60.0, **WIDE), Process(0.8, (60.0,)))
    structure = cascade_structure([inner, outer], final_element=VALVE, feedforwards=((), (Feedforward("FT-1", 0.5),)))
    upset = Disturbance(1, -20.0, Process(1.0, (10.0,)))
    scenario = Scenario("fed", disturbances=(upset,), moves=(MeasuredMove("FT-1", 10.0),))
    response = respond(structure, scenario, Clock(0.5, 4000))
    output, setpoint = response.output_pct[1], response.setpoint_pct[0]
    assert output is not None
    assert setpoint is not None
    assert setpoint[-1] == pytest.approx(62.0)
    error = -deviation(response)[-1]
    assert error == pytest.approx(20.0 - 0.8 * 12.0, rel=1e-6)
    # 12 % is the limit from the start, 5 % of which is fed forward.
    assert output[-1] - 50.0 == pytest.approx(12.0 - 5.0 + 2.0 * error, rel=1e-6)
    assert response.metrics.limited_level == 1


def test_feedforward_to_a_final_element_is_tracked_at_the_end_of_its_travel() -> None:
    controller = Controller(2.0, 30.0)  # of 0 to 100 % of its own, which the sum goes beyond
    structure = ControlStructure(
        (Process(0.5, (20.0,)),), (controller,), FinalElement(start_pct=80.0),
        feedforwards=((Feedforward("FT-1", 1.0),),),
    )  # fmt: skip
    upset = Disturbance(0, -15.0, Process(1.0, (10.0,)))
    scenario = Scenario("fed", disturbances=(upset,), moves=(MeasuredMove("FT-1", 15.0),))
    response = respond(structure, scenario, Clock(0.5, 2000))
    output = response.output_pct[0]
    assert output is not None
    assert response.travel_pct[-1] == pytest.approx(100.0)
    error = -deviation(response)[-1]
    assert error == pytest.approx(15.0 - 0.5 * 20.0, rel=1e-6)
    # 85 % and 15 % fed forward fill the travel; the error of 5 % asks for K e = 10 % more.
    assert output[-1] == pytest.approx(85.0 + 2.0 * error, rel=1e-6)
    assert response.metrics.limited_level == 0


# --- around it -----------------------------------------------------------------------------------


@pytest.mark.parametrize("dead_time_s", [0.0, 3.0, 2.37, 0.11])
def test_an_upset_arrives_after_its_dead_time(dead_time_s: float) -> None:
    structure = ControlStructure((Process(1.0, (7.0,)), Process(1.0, (4.0,), 2.0)), (None, None), VALVE)
    upset = Disturbance(1, 10.0, Process(1.0, (6.0, 2.0), 9.0, (-3.0,)), dead_time_s)
    response = respond(structure, Scenario("late", disturbances=(upset,)), Clock(0.5, 160))
    t = np.maximum(response.time_s - dead_time_s, 0.0)
    # (1-3s)/((6s+1)(2s+1)) in partial fractions: weights (6+3)/(6-2) and (2+3)/(2-6).
    expected = 10.0 * (1.0 - 9.0 / 4.0 * np.exp(-t / 6.0) + 5.0 / 4.0 * np.exp(-t / 2.0))
    # The held step is solved exactly, also where the dead time ends within a step.
    np.testing.assert_allclose(deviation(response), expected, atol=1e-11)


def test_an_upset_at_once_arrives_whole_after_its_dead_time() -> None:
    structure = ControlStructure((Process(1.0, (7.0,)),), (None,), VALVE)
    for dead_time_s, seen in ((1.0, 1.0), (1.2, 1.5)):
        upset = Disturbance(0, 10.0, Process(1.0), dead_time_s)
        response = respond(structure, Scenario("late", disturbances=(upset,)), Clock(0.5, 16))
        np.testing.assert_allclose(deviation(response), np.where(response.time_s >= seen, 10.0, 0.0), atol=1e-12)


def test_nothing_is_fed_forward_to_a_single_loop_or_in_manual() -> None:
    inner = LoopStage(Controller(2.0, 4.0, interval_s=0.5), Process(1.0, (4.0, 1.0)))
    outer = LoopStage(Controller(3.0, 60.0, interval_s=1.0), Process(0.9, (60.0, 10.0)))
    cascade = cascade_structure([inner, outer], final_element=VALVE, feedforwards=((), (Feedforward("FT-1", 1.0),)))
    upset = Disturbance(1, 5.0, Process(1.0, (40.0,)))
    alone = Scenario("alone", disturbances=(upset,))
    fed = Scenario("fed", disturbances=(upset,), moves=(MeasuredMove("FT-1", 6.0),))
    manual = ControlStructure(cascade.processes, (None, None), VALVE, feedforwards=cascade.feedforwards)
    for structure in (single_loop_structure(cascade, Controller(2.0, 90.0)), manual):
        one, other = (respond(structure, scenario, Clock(0.5, 600)) for scenario in (alone, fed))
        np.testing.assert_array_equal(one.measurement_pct[1], other.measurement_pct[1])


def test_what_is_not_fed_forward_moves_as_it_did() -> None:
    """Cases with feedforward and without run beside each other, to the last bit as by themselves."""
    stage = LoopStage(Controller(0.45, 12.0, interval_s=0.5), Process(1.0, (4.0, 1.0), 1.3))
    plain = cascade_structure([stage], final_element=FinalElement(6.0, 0.5))
    moved = cascade_structure(
        [stage], final_element=FinalElement(6.0, 0.5), feedforwards=((Feedforward("FT-1", 1.0),),)
    )
    alone = Scenario("alone", disturbances=(Disturbance(0, 10.0),))
    fed = Scenario("fed", disturbances=(Disturbance(0, 10.0),), moves=(MeasuredMove("FT-1", -9.0, 3.0),))
    clock = Clock(0.25, 800)
    by_itself = respond(plain, alone, clock)
    (together, helped), (elsewhere, unmoved) = simulate([moved, plain], [alone, fed], clock=clock)
    for other in (together, elsewhere, unmoved):
        np.testing.assert_array_equal(other.measurement_pct[0], by_itself.measurement_pct[0])
        assert other.metrics == by_itself.metrics
    assert helped.metrics.iae_pct_s < 0.5 * by_itself.metrics.iae_pct_s


def test_a_slow_measurement_is_followed_until_it_has_come() -> None:
    stage = LoopStage(Controller(2.0, 5.0, interval_s=0.5), Process(1.0, (5.0,), 1.0))
    structure = cascade_structure([stage], final_element=VALVE, feedforwards=((Feedforward("FT-1", 1.0),),))
    slow = Scenario("slow", moves=(MeasuredMove("FT-1", 10.0, 400.0),))
    response = simulate([structure], [slow])[0][0]
    output = response.output_pct[0]
    assert output is not None
    # After six lags exp(-6) = 0.25 % is still to come, which the output makes room for.
    assert output[-1] - 50.0 == pytest.approx(-10.0, rel=0.01)
