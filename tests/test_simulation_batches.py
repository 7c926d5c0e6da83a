"""Scenarios, chosen clocks and batches of simulated responses."""

import math
import shutil
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from loopdoc.engineering.clock import Clock, Unsuited, choose_clocks
from loopdoc.engineering.comparison import structure_of
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.simulation import simulate, simulate_groups, simulate_metrics
from loopdoc.engineering.structure import (
    ControlStructure,
    Disturbance,
    FinalElement,
    Scenario,
    cascade_structure,
    single_loop_structure,
    standard_scenarios,
)
from loopdoc.register.load import Loaded, load

VALVE = FinalElement()


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
                # Only rounding differs: the matrices of a plant are found together.
                assert metrics.iae_pct_s == pytest.approx(one.iae_pct_s, rel=1e-9)
                assert metrics.peak_pct == pytest.approx(one.peak_pct, rel=1e-9)
                assert metrics.settling_s == pytest.approx(one.settling_s, abs=one.step_s)
                assert metrics.horizon_s == one.horizon_s
                assert metrics.executed_interval_s == one.executed_interval_s


def test_a_chosen_horizon_covers_the_response() -> None:
    for responses in simulate([TIC, SINGLE], standard_scenarios(2)):
        for response in responses:
            assert math.isfinite(response.metrics.settling_s)
            assert response.metrics.settling_s < 0.8 * response.metrics.horizon_s


def test_cutting_a_run_short_at_rest_changes_little() -> None:
    chosen = choose_clocks([[TIC]])[0]
    assert not isinstance(chosen, Unsuited)
    clock = chosen
    short = simulate([TIC], standard_scenarios(2))[0]
    full = simulate([TIC], standard_scenarios(2), clock=Clock(clock.step_s, 2 * clock.steps))[0]
    for one, other in zip(short, full, strict=True):
        assert other.metrics.horizon_s > one.metrics.horizon_s
        # At rest means within 0.1 % of the peak: the error integral then misses about as much.
        assert one.metrics.iae_pct_s == pytest.approx(other.metrics.iae_pct_s, rel=5e-3)
        assert one.metrics.peak_pct == other.metrics.peak_pct


def test_a_slow_loop_is_followed_through_every_scan() -> None:
    """Of a long run not every point is kept, but all of them are executed and read."""
    structure = cascade_structure(
        [LoopStage(Controller(1.0, 3000.0, interval_s=1.0), Process(1.0, (3000.0,), 600.0))],
        final_element=VALVE,
    )
    chosen = choose_clocks([[structure]])[0]
    assert not isinstance(chosen, Unsuited)
    assert chosen.step_s == 1.0
    thinned = simulate([structure], standard_scenarios(1))[0]
    whole = simulate([structure], standard_scenarios(1), clock=Clock(1.0, round(thinned[0].time_s[-1])))[0]
    for one, other in zip(thinned, whole, strict=True):
        assert one.metrics.executed_interval_s == (1.0,)
        assert one.metrics.settling_s == other.metrics.settling_s
        assert len(one.time_s) < len(other.time_s)
        kept = np.searchsorted(other.time_s, one.time_s)
        np.testing.assert_array_equal(one.time_s, other.time_s[kept])
        np.testing.assert_array_equal(one.measurement_pct[0], other.measurement_pct[0][kept])
        np.testing.assert_array_equal(one.travel_pct, other.travel_pct[kept])


def test_a_fast_loop_is_stepped_within_its_interval() -> None:
    structure = cascade_structure(
        [LoopStage(Controller(0.9, 4.0, interval_s=2.0), Process(1.0, (4.0,), 1.0))], final_element=VALVE
    )
    clock = choose_clocks([[structure]])[0]
    assert not isinstance(clock, Unsuited)
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
        (lambda: ControlStructure((LEVEL,), (), VALVE), "one entry per process"),
        (lambda: ControlStructure((LEVEL,), (None,), VALVE, (50.0, 50.0)), "one start per process"),
        (lambda: FinalElement(stroke_time_s=-1.0), "stroke time"),
        (lambda: FinalElement(backlash_pct=100.0), "backlash"),
        (lambda: FinalElement(resolution_pct=-1.0), "resolution"),
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


def test_figures_read_on_the_way_are_those_of_the_signals() -> None:
    """Loops of every kind, limited, loose and slow to settle, run together and one by one."""
    open_far = FinalElement(start_pct=85.0)
    loops = [
        (Controller(0.9, 4.0, interval_s=1.0), Process(1.0, (4.0,), 2.3), VALVE),
        (Controller(4.0, 30.0, 3.0, interval_s=2.0), Process(0.9, (60.0, 8.0), 5.0), FinalElement(20.0, 2.0)),
        (Controller(-3.0, 90.0, interval_s=1.0), Process(-0.02, (), 6.0, integrating=True), open_far),
        (Controller(2.2, 20.0, interval_s=0.5), Process(1.0, (9.0, 3.0), 1.0, (2.0,)), FinalElement(4.0, 0.0, 1.5)),
    ]
    structures = [
        cascade_structure([LoopStage(controller, process)], final_element=valve)
        for controller, process, valve in loops
    ]
    scenarios = [*standard_scenarios(1), Scenario("both", -7.0, (Disturbance(0, 4.0), Disturbance(0, 3.0)))]
    together = simulate_metrics([([structure], scenarios) for structure in structures])
    for structure, found in zip(structures, together, strict=True):
        assert not isinstance(found, Unsuited)
        for response, metrics in zip(simulate([structure], scenarios)[0], found[0], strict=True):
            one = response.metrics
            # Only rounding differs: the matrices of a plant are found together.
            assert metrics.iae_pct_s == pytest.approx(one.iae_pct_s, rel=1e-9)
            assert metrics.peak_pct == pytest.approx(one.peak_pct, rel=1e-9)
            assert metrics.time_to_peak_s == pytest.approx(one.time_to_peak_s, abs=one.step_s)
            assert metrics.settling_s == pytest.approx(one.settling_s, abs=one.step_s)
            assert metrics.overshoot_pct == pytest.approx(one.overshoot_pct, rel=1e-9, abs=1e-9)
            assert metrics.valve_travel_pct == pytest.approx(one.valve_travel_pct, rel=1e-9)
            assert metrics.reversals == one.reversals
            assert (metrics.horizon_s, metrics.step_s) == (one.horizon_s, one.step_s)


def test_resolution_is_a_staircase() -> None:
    """A signal that ramps by 0.3 % a scan moves a valve with a resolution of 1 % at every fourth scan."""
    # Integral action alone ramps on a measurement that has stuck: the process is too slow to be seen.
    stage = LoopStage(Controller(1e-6, 1e-6, interval_s=1.0), Process(1.0, (1e9,)))
    structure = cascade_structure([stage], final_element=FinalElement(resolution_pct=1.0))
    response = simulate([structure], [Scenario("sp", setpoint_step_pct=0.3)], clock=Clock(1.0, 11))[0][0]
    assert response.output_pct[0] is not None
    # Signal less start: 0.3, 0.6, 0.9, 1.2 moves; then 1.5, 1.8, 2.1, 2.4 (1.2 since) moves; then 3.6.
    np.testing.assert_allclose(response.output_pct[0] - 50.0, 0.3 * np.arange(1, 13), atol=1e-6)
    expected = [0.0, 0.0, 0.0, 1.2, 1.2, 1.2, 1.2, 2.4, 2.4, 2.4, 2.4, 3.6]
    np.testing.assert_allclose(response.travel_pct - 50.0, expected, atol=1e-6)


def test_backlash_follows_what_the_resolution_has_let_through() -> None:
    stage = LoopStage(Controller(1e-6, 1e-6, interval_s=1.0), Process(1.0, (1e9,)))
    valve = FinalElement(backlash_pct=0.8, resolution_pct=1.0)
    structure = cascade_structure([stage], final_element=valve)
    response = simulate([structure], [Scenario("sp", setpoint_step_pct=0.3)], clock=Clock(1.0, 7))[0][0]
    # Half of the backlash, from its middle, is lost of each level that the staircase reaches: 1.2 and 2.4.
    np.testing.assert_allclose(response.travel_pct - 50.0, [0.0] * 3 + [0.8] * 4 + [2.0], atol=1e-6)


def test_what_is_too_far_apart_is_said_in_numbers() -> None:
    refused = choose_clocks([[TOO_WIDE]])[0]
    assert isinstance(refused, Unsuited)
    # 100,000 s of lag and 10,000 s of dead time are 30.6 h; twice that in steps of its fastest loop.
    assert "30.6 h" in refused.reason
    assert "2,000,000" in refused.reason


def test_groups_simulated_together_are_those_simulated_alone() -> None:
    loose = replace(TIC, final_element=FinalElement(stroke_time_s=6.0, backlash_pct=1.0, resolution_pct=0.5))
    groups = [
        ([TIC, SINGLE], standard_scenarios(2)),
        ([TOO_WIDE], standard_scenarios(2)),
        ([loose, replace(SINGLE, final_element=loose.final_element)], standard_scenarios(2)),
    ]
    together = simulate_groups(groups)
    assert isinstance(together[1], Unsuited)
    for place in (0, 2):
        found = together[place]
        assert not isinstance(found, Unsuited)
        for ours, theirs in zip(found, simulate(*groups[place]), strict=True):
            for one, other in zip(ours, theirs, strict=True):
                np.testing.assert_array_equal(one.time_s, other.time_s)
                # The same sums in another order.
                np.testing.assert_allclose(one.measurement_pct[-1], other.measurement_pct[-1], atol=1e-9)


def test_backlash_and_resolution_come_from_the_register(tmp_path: Path) -> None:
    folder = tmp_path / "plant"
    shutil.copytree(Path(__file__).parent.parent / "examples" / "tarn-hollow", folder)
    file = folder / "units" / "20-rectification.yaml"
    text = file.read_text(encoding="utf-8")
    file.write_text(
        text.replace("\n  FV-2011:\n", "\n  FV-2011:\n    backlash: 1.2 %\n    resolution: 0.4 %\n"), encoding="utf-8"
    )
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    chain = Dynamics(Plant(loaded.register)).loop("FIC-2011").chains[0].chain
    element = structure_of(chain).final_element
    assert (element.backlash_pct, element.resolution_pct) == (1.2, 0.4)
