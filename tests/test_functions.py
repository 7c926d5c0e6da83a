"""Functions between loops: characterisers, lead-lags, feedforward, selectors, ratios, by hand and by python-control."""

from __future__ import annotations

import math
from pathlib import Path

import control
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopdoc.engineering.clock import Clock
from loopdoc.engineering.comparison import Comparison, compare
from loopdoc.engineering.demand import Demand, demand
from loopdoc.engineering.direction import PathSign, Undecided, path_sign
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.frequency import LoopStage, Margins, analyse_chain
from loopdoc.engineering.functions import Curve, feeds_forward
from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.sampled import sampled_margins
from loopdoc.engineering.simulation import simulate
from loopdoc.engineering.stages import Chain, Lacking, chains
from loopdoc.engineering.structure import FinalElement, Scenario, cascade_structure, standard_scenarios
from loopdoc.register.load import Loaded, load

ROOT = """\
format: 1
site: {name: Test plant, owner: Process control}
revision: {code: A, date: 2026-01-01, status: issued for review}
units:
  "20": {name: Test unit}
"""

CASCADE = (Path(__file__).parent / "data" / "steam-cascade.yaml").read_text("utf-8")


FLOW = "FIC-2011"
VALVE_CURVE = "[{at: 0 %, gives: 0 %}, {at: 50 %, gives: 20 %}, {at: 100 %, gives: 100 %}]"


def plant_of(folder: Path, text: str) -> Plant:
    (folder / "register.yaml").write_text(ROOT + text, encoding="utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    assert loaded.faults == ()
    return Plant(loaded.register)


def chain_of(folder: Path, text: str, tag: str) -> Chain:
    plant = plant_of(folder, text)
    found = chains(plant, plant.controlled[tag])
    assert not isinstance(found, Lacking), found
    assert len(found) == 1
    return found[0]


def before_valve(keys: str, cascade: str = CASCADE) -> str:
    return cascade.replace("output: {to: FV-2011,", "output: {to: FY-2011,") + (
        f'functions:\n  FY-2011: {{unit: "20", to: FV-2011, {keys}}}\n'
    )


def before_secondary(keys: str, cascade: str = CASCADE) -> str:
    return cascade.replace("output: {to: FIC-2011,", "output: {to: FY-2011,") + (
        f'functions:\n  FY-2011: {{unit: "20", to: FIC-2011, {keys}}}\n'
    )


# ---------------------------------------------------------------- characteriser


def test_a_curve_is_read_between_its_points_and_level_beyond_them() -> None:
    curve = Curve((0.0, 50.0, 100.0), (0.0, 20.0, 100.0))
    assert [curve.at(x) for x in (-10.0, 0.0, 25.0, 50.0, 75.0, 100.0, 110.0)] == [
        0.0,
        0.0,
        10.0,
        20.0,
        60.0,
        100.0,
        100.0,
    ]
    assert curve.slope(25.0) == pytest.approx(0.4)
    # At a corner the steeper side counts: margins are those of the worse side.
    assert curve.slope(50.0) == pytest.approx(1.6)
    assert curve.input_for(60.0) == pytest.approx(75.0)
    assert curve.input_for(20.0) == pytest.approx(50.0)
    assert curve.band(25.0, 75.0) == pytest.approx((10.0, 60.0))
    hump = Curve((0.0, 50.0, 100.0), (0.0, 80.0, 40.0))
    assert hump.band(10.0, 90.0) == pytest.approx((16.0, 80.0))
    assert hump.input_for(60.0) is None
    assert Curve((0.0, 50.0, 100.0), (0.0, 0.0, 10.0)).input_for(0.0) is None


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    steps=st.lists(st.tuples(st.floats(0.1, 50.0), st.floats(0.1, 50.0)), min_size=1, max_size=6),
    share=st.floats(0.0, 1.0),
)
def test_a_rising_curve_and_its_inverse_undo_each_other(steps: list[tuple[float, float]], share: float) -> None:
    inputs, outputs = [0.0], [0.0]
    for dx, dy in steps:
        inputs.append(inputs[-1] + dx)
        outputs.append(outputs[-1] + dy)
    curve = Curve(tuple(inputs), tuple(outputs))
    x = share * inputs[-1]
    back = curve.input_for(curve.at(x))
    assert back is None or back == pytest.approx(x, rel=1e-9, abs=1e-9)
    # numpy interpolates on its own
    assert curve.at(x) == pytest.approx(float(np.interp(x, inputs, outputs)), rel=1e-12, abs=1e-12)


def test_a_characteriser_before_a_valve_counts_by_its_slope_at_the_normal_point(tmp_path: Path) -> None:
    text = before_valve(f"kind: characteriser, normal_input: 75 %, curve: {VALVE_CURVE}")
    stage = chain_of(tmp_path, text, FLOW).stages[0]
    # (100 - 20)/(100 - 50) = 1.6 % of opening per % of output
    assert stage.controller.gain == pytest.approx(0.5 * 1.6)
    assert (stage.controller.output_low_pct, stage.controller.output_high_pct) == pytest.approx((0.0, 100.0))
    plain = chain_of(tmp_path, CASCADE, FLOW).stages[0]
    assert stage.process == plain.process


def test_a_characteriser_before_a_secondary_finds_its_normal_input_by_itself(tmp_path: Path) -> None:
    curve = "[{at: 0 t/h, gives: 0 t/h}, {at: 6 t/h, gives: 3 t/h}, {at: 12 t/h, gives: 12 t/h}]"
    cascade = CASCADE.replace("service: Steam flow\n", "service: Steam flow\n    operating: {normal: 7.5 t/h}\n")
    plant = plant_of(tmp_path, before_secondary(f"kind: characteriser, curve: {curve}", cascade))
    found = chains(plant, plant.controlled["TIC-2014"])
    assert not isinstance(found, Lacking)
    controller = found[0].stages[1].controller
    # 7.5 t/h lies where 6 t/h of output give 9 t/h: 1.5; 12 t/h of output span on a range of 15 t/h.
    assert controller.gain == pytest.approx(1.8 * 1.5 * 12 / 15)
    # The output limits, 3 and 10.5 t/h, give 1.5 t/h and 3 + 4.5 x 1.5 = 9.75 t/h.
    assert (controller.output_low_pct, controller.output_high_pct) == pytest.approx((10.0, 65.0))
    link = plant.links[0]
    output = link.primary.controller.output
    assert output is not None
    asked = demand(link, output.span, plant)  # type: ignore[union-attr, arg-type]
    assert isinstance(asked, Demand)
    assert (asked.asked.low, asked.asked.high) == pytest.approx((0.0, 12.0))


def test_other_units_of_a_curve_change_no_number(tmp_path: Path) -> None:
    one = "[{at: 0 t/h, gives: 0 t/h}, {at: 6 t/h, gives: 3 t/h}, {at: 12 t/h, gives: 12 t/h}]"
    other = (
        "[{at: 0 kg/h, gives: 0 kg/s}, {at: 6000 kg/h, gives: 0.8333333333333333 kg/s}, "
        "{at: 12000 kg/h, gives: 3.3333333333333333 kg/s}]"
    )
    gains = [
        chain_of(tmp_path, before_secondary(f"kind: characteriser, normal_input: {x}, curve: {curve}"), "TIC-2014")
        .stages[1]
        .controller
        for x, curve in (("8 t/h", one), ("8000 kg/h", other))
    ]
    assert gains[0].gain == pytest.approx(gains[1].gain, rel=1e-12)
    assert gains[0].output_high_pct == pytest.approx(gains[1].output_high_pct, rel=1e-12)


def test_a_falling_curve_turns_the_sign(tmp_path: Path) -> None:
    falling = "[{at: 0 %, gives: 100 %}, {at: 100 %, gives: 0 %}]"
    plant = plant_of(tmp_path, before_valve(f"kind: characteriser, normal_input: 40 %, curve: {falling}"))
    loop = plant.controlled[FLOW]
    sign = path_sign(loop, loop.routes[0])
    assert isinstance(sign, PathSign)
    assert sign.action == "direct"
    assert "the curve of FY-2011 falls (-1)" in str(sign)
    found = chains(plant, loop)
    assert not isinstance(found, Lacking)
    assert found[0].stages[0].controller.gain == pytest.approx(-0.5)
    hump = "[{at: 0 %, gives: 0 %}, {at: 50 %, gives: 80 %}, {at: 100 %, gives: 40 %}]"
    loop = plant_of(tmp_path, before_valve(f"kind: characteriser, curve: {hump}")).controlled[FLOW]
    undecided = path_sign(loop, loop.routes[0])
    assert isinstance(undecided, Undecided)
    assert undecided.reason == "the curve of FY-2011 both rises and falls"


@pytest.mark.parametrize(
    ("keys", "reason"),
    [
        ("kind: characteriser", "the curve of FY-2011 is not given"),
        ("kind: characteriser, curve: {hold: valve data}", "the curve of FY-2011 is on hold"),
        (f"kind: characteriser, curve: {VALVE_CURVE}", "the normal input of FY-2011 is not given"),
        (
            "kind: characteriser, normal_input: 20 %, curve: [{at: 0 %, gives: 0 %}, {at: 50 %, gives: 0 %}, "
            "{at: 100 %, gives: 100 %}]",
            "the curve of FY-2011 is level at its normal input, where FIC-2011 moves nothing",
        ),
        (
            "kind: characteriser, normal_input: 20 %, curve: [{at: 50 %, gives: 0 %}, {at: 0 %, gives: 100 %}]",
            "the curve of FY-2011 does not rise from point to point in `at`",
        ),
        (
            "kind: characteriser, normal_input: 20 %, curve: [{at: 0 t/h, gives: 0 %}, {at: 5 t/h, gives: 100 %}]",
            "the curve of FY-2011 is not in the units of what enters it and of what it commands",
        ),
        ("kind: lead-lag, lead: 5 s", "the lag of FY-2011 is not given"),
        ("kind: lead-lag, lead: 5 s, lag: 0 s", "FY-2011 is no lead-lag: the lag must be"),
        ("kind: lead-lag, lead: {hold: tuning}, lag: 4 s", "the lead of FY-2011 is on hold"),
    ],
)
def test_what_a_function_lacks_is_named(tmp_path: Path, keys: str, reason: str) -> None:
    loop = Dynamics(plant_of(tmp_path, before_valve(keys))).loop(FLOW)
    assert loop.chains == ()
    assert loop.reason.startswith(reason)


# ---------------------------------------------------------------- lead-lag


def test_a_lead_lag_in_the_path_is_in_the_loop_exactly(tmp_path: Path) -> None:
    text = (
        CASCADE.replace(", dead_time: 1 s", "")
        .replace("      interval: 0.5 s\n", "")
        .replace("lag: 4 s", "lags: [4 s, 2 s, 1 s]")
    )
    found = Dynamics(plant_of(tmp_path, before_valve("kind: lead-lag, lead: 3 s, lag: 1.5 s", text))).loop(FLOW)
    s = control.tf("s")
    loop = 0.5 * (1 + 1 / (12 * s)) * (3 * s + 1) / (1.5 * s + 1) * 1.2 / ((4 * s + 1) * (2 * s + 1) * (s + 1))
    gain_margin, phase_margin, _, _, crossover, _ = control.stability_margins(loop)
    margins = found.chains[0].margins[0]
    # Both refine the same crossings.
    assert margins.gain_margin == pytest.approx(gain_margin, rel=1e-6)
    assert margins.phase_margin_deg == pytest.approx(phase_margin, rel=1e-6)
    assert margins.crossover_rad_per_s == pytest.approx(crossover, rel=1e-6)


def test_a_lead_lag_that_cancels_a_lag_leaves_the_shorter_one() -> None:
    led = LoopStage(Controller(1.5, 6.0), Process(1.0, (5.0, 2.0), 0.5), (LeadLag(5.0, 1.0),))
    plain = LoopStage(Controller(1.5, 6.0), Process(1.0, (2.0, 1.0), 0.5))
    ours, theirs = analyse_chain([led])[0], analyse_chain([plain])[0]
    assert ours.gain_margin == pytest.approx(theirs.gain_margin, rel=1e-7)
    assert ours.max_sensitivity == pytest.approx(theirs.max_sensitivity, rel=1e-7)


def test_a_lead_lag_between_primary_and_secondary_belongs_to_the_primary(tmp_path: Path) -> None:
    plain = chain_of(tmp_path, CASCADE, "TIC-2014").stages
    led = chain_of(tmp_path, before_secondary("kind: lead-lag, lead: 60 s, lag: 20 s"), "TIC-2014").stages
    assert led[0] == plain[0]
    assert (led[1].controller, led[1].process) == (plain[1].controller, plain[1].process)
    assert led[1].lead_lags == (LeadLag(60.0, 20.0),)


def test_a_sampled_lead_lag_is_the_difference_equation_of_its_lag() -> None:
    """y = r x + (1-r) f, f the lag for a held input; with lead = lag it is nothing, with lead 0 a filter."""
    process = Process(1.0, (4.0,))
    plain = sampled_margins([LoopStage(Controller(0.5, 8.0, interval_s=1.0), process)])[0]
    same = sampled_margins([LoopStage(Controller(0.5, 8.0, interval_s=1.0), process, (LeadLag(3.0, 3.0),))])[0]
    filtered = sampled_margins([LoopStage(Controller(0.5, 8.0, interval_s=1.0, measurement_filter_s=3.0), process)])[0]
    lagged = sampled_margins([LoopStage(Controller(0.5, 8.0, interval_s=1.0), process, (LeadLag(0.0, 3.0),))])[0]
    for ours, theirs in ((same, plain), (lagged, filtered)):
        assert isinstance(ours, Margins)
        assert isinstance(theirs, Margins)
        assert ours.gain_margin == pytest.approx(theirs.gain_margin, rel=1e-9)
        assert ours.phase_margin_deg == pytest.approx(theirs.phase_margin_deg, rel=1e-9)


def test_a_lead_lag_in_the_path_is_simulated(tmp_path: Path) -> None:
    dynamics = Dynamics(plant_of(tmp_path, before_valve("kind: lead-lag, lead: 3 s, lag: 1.5 s"))).loop(FLOW).chains[0]
    compared = compare(dynamics)
    assert isinstance(compared, Comparison)
    step = compared.scenarios[0].tuned
    output = step.output_pct[0]
    assert output is not None
    # The first of the valve's travel is lead over lag of the output's, less what the lag has gone in one scan.
    ahead = 2.0 - (1.0 - math.exp(-0.5 / 1.5))
    start_pct = float(step.travel_pct[0] - (output[0] - 50.0) * ahead)
    assert start_pct == pytest.approx(50.0, abs=1e-9)


@pytest.mark.parametrize(("lead_s", "lag_s"), [(3.0, 1.5), (0.0, 4.0), (2.0, 2.0)])
def test_a_lead_lag_answers_a_lasting_output_as_in_closed_form(lead_s: float, lag_s: float) -> None:
    # Proportional on a process too slow to be seen: the output steps once by 10 % and stays.
    stage = LoopStage(Controller(1.0, interval_s=0.5), Process(1.0, (1e9,)), (LeadLag(lead_s, lag_s),))
    structure = cascade_structure([stage], final_element=FinalElement())
    response = simulate([structure], [Scenario("sp", setpoint_step_pct=10.0)], clock=Clock(0.5, 40))[0][0]
    # Executed with the controller, the lag has gone its share of the way with the first scan.
    lagged = 1.0 - np.exp(-(response.time_s + 0.5) / lag_s)
    expected = lead_s / lag_s + (1.0 - lead_s / lag_s) * lagged
    np.testing.assert_allclose(response.travel_pct - 50.0, 10.0 * expected, atol=1e-6)


def test_a_loop_with_a_lead_lag_answers_as_by_python_control() -> None:
    """Setpoint step and upset of a continuous loop; the simulation executes it every 2 ms."""
    stage = LoopStage(
        Controller(0.8, 6.0), Process(1.2, (4.0, 2.0, 1.0)), (LeadLag(3.0, 1.5), LeadLag(0.0, 0.8))
    )  # fmt: skip
    structure = cascade_structure([stage], final_element=FinalElement())
    setpoint, upset = simulate([structure], standard_scenarios(1), clock=Clock(0.002, 20_000))[0]
    s = control.tf("s")
    lags = 1 / ((4 * s + 1) * (2 * s + 1) * (s + 1))
    loop = 0.8 * (1 + 1 / (6 * s)) * (3 * s + 1) / (1.5 * s + 1) / (0.8 * s + 1) * 1.2 * lags
    t = setpoint.time_s[::50]
    _, followed = control.step_response(control.feedback(loop, 1), t)
    _, left = control.step_response(control.feedback(1, loop) * lags, t)
    # 10 % of span; half an interval of lateness is some 1e-3 s of a response that moves by 2 % a second at most.
    assert setpoint.measurement_pct[0][::50] - 50.0 == pytest.approx(10.0 * followed, abs=0.01)
    assert upset.measurement_pct[0][::50] - 50.0 == pytest.approx(10.0 * left, abs=0.01)


@pytest.mark.parametrize(("lead", "lag"), [(-1.0, 2.0), (1.0, 0.0), (math.inf, 1.0), (1.0, math.nan)])
def test_a_lead_lag_that_cannot_be_is_refused(lead: float, lag: float) -> None:
    with pytest.raises(ValueError, match="must be a finite time"):
        LeadLag(lead, lag)


# ---------------------------------------------------------------- feedforward and the three-element level

DRUM = """\
loops:
  LIC-3001:
    unit: "20"
    service: Drum level
    measurement: {transmitter: LT-3001, variable: level, range: 0 to 100 %}
    controller:
      action: reverse
      gain: 1
      reset: 5 min
      interval: 1 s
      output: {to: FY-3003, span: -4 to 4 t/h}
      modes: {normal: automatic, permitted: [automatic]}
    process: {effect: rises, gain: 1.2 %/min per t/h, integrating: true}
  FI-3002:
    unit: "20"
    service: Steam flow
    measurement: {transmitter: FT-3002, variable: flow, range: 0 to 12 t/h}
    operating: {low: 4 t/h, normal: 8 t/h, high: 10 t/h}
  FIC-3003:
    unit: "20"
    service: Feedwater flow
    measurement: {transmitter: FT-3003, variable: flow, range: 0 to 16 t/h}
    controller:
      action: reverse
      gain: 0.5
      reset: 8 s
      interval: 1 s
      output: {to: FV-3003, low: 0 %, high: 100 %}
      modes: {normal: cascade, permitted: [automatic, cascade]}
    process: {effect: rises, gain: 0.16 t/h per %, lag: 3 s}
functions:
  FY-3003: {kind: sum, unit: "20", INPUTS to: FIC-3003}
  FY-3002: {unit: "20", FEEDFORWARD}
final_elements:
  FV-3003: {unit: "20", kind: control valve, opens_on: rising signal}
"""
STEAM_LED = "kind: lead-lag, inputs: [FT-3002], lead: 30 s, lag: 10 s, to: FY-3003"


def test_a_feedforward_lead_lag_shifts_the_setpoint_and_is_in_no_loop(tmp_path: Path) -> None:
    text = DRUM.replace("INPUTS", "").replace("FEEDFORWARD", STEAM_LED)
    plant = plant_of(tmp_path, text)
    assert feeds_forward(plant, plant.register.functions["FY-3002"])
    assert not feeds_forward(plant, plant.register.functions["FY-3003"])
    stages = chain_of(tmp_path, text, "LIC-3001").stages
    assert stages[1].lead_lags == ()
    # 8 t/h of span on a range of 16 t/h; 8 t/h of steam, less 4 and plus 4.
    assert stages[1].controller.gain == pytest.approx(8 / 16)
    assert (stages[1].controller.output_low_pct, stages[1].controller.output_high_pct) == pytest.approx((25.0, 75.0))
    link = next(link for link in plant.links if link.primary.tag == "LIC-3001")
    asked = demand(link, link.primary.controller.output.span, plant)  # type: ignore[union-attr, arg-type]
    assert isinstance(asked, Demand)
    # 4 to 10 t/h of steam in operation, less 4 and plus 4.
    assert (asked.asked.low, asked.asked.high) == pytest.approx((0.0, 14.0))


def test_a_feedforward_characteriser_brings_what_its_curve_gives(tmp_path: Path) -> None:
    curve = "[{at: 0 t/h, gives: 0 t/h}, {at: 8 t/h, gives: 6 t/h}, {at: 12 t/h, gives: 12 t/h}]"
    shaped = f"kind: characteriser, inputs: [FT-3002], to: FY-3003, curve: {curve}"
    text = DRUM.replace("INPUTS", "weights: {FY-3002: 0.5},").replace("FEEDFORWARD", shaped)
    controller = chain_of(tmp_path, text, "LIC-3001").stages[1].controller
    # Half of 6 t/h at the normal 8 t/h of steam, less 4 and plus 4, on 16 t/h.
    assert (controller.output_low_pct, controller.output_high_pct) == pytest.approx((-100 / 16, 700 / 16))


def test_a_subtracting_sum_turns_the_gain(tmp_path: Path) -> None:
    text = DRUM.replace("INPUTS", "inputs: [FT-3002], weights: {LIC-3001: -0.5},")
    text = text.replace('  FY-3002: {unit: "20", FEEDFORWARD}\n', "")
    controller = chain_of(tmp_path, text, "LIC-3001").stages[1].controller
    assert controller.gain == pytest.approx(-0.5 * 8 / 16)
    # 8 t/h less and plus 2 t/h
    assert (controller.output_low_pct, controller.output_high_pct) == pytest.approx((600 / 16, 1000 / 16))


# ---------------------------------------------------------------- selectors and ratios


def test_each_candidate_of_a_selector_has_its_margins_as_if_it_were_selected(tmp_path: Path) -> None:
    limiter = """\
  TIC-2015:
    unit: "20"
    service: Reboiler wall temperature
    measurement: {transmitter: TT-2015, variable: temperature, range: 100 to 180 degC}
    controller:
      action: reverse
      gain: 1.2
      reset: 2 min
      interval: 1 s
      output: {to: FY-2011, span: 0 to 12 t/h}
      when_not_followed: track
    process: {effect: rises, gain: 4 degC per t/h, lag: 3 min, dead_time: 20 s}
  FIC-2011:
"""
    text = before_secondary("kind: low select").replace("  FIC-2011:\n    unit", limiter + "    unit")
    plant = plant_of(tmp_path, text)
    dynamics = Dynamics(plant)
    plain = Dynamics(plant_of(tmp_path, CASCADE)).loop("TIC-2014").chains[0]
    selected = dynamics.loop("TIC-2014").chains[0]
    # Analysed beside other chains the grid differs, what is refined on it does not.
    assert selected.margins[1].gain_margin == pytest.approx(plain.margins[1].gain_margin, rel=1e-9)
    assert selected.margins[1].max_sensitivity == pytest.approx(plain.margins[1].max_sensitivity, rel=1e-9)
    assert selected.chain.stages == plain.chain.stages
    other = dynamics.loop("TIC-2015").chains[0]
    assert [level.loop.tag for level in other.chain.levels] == ["FIC-2011", "TIC-2015"]
    # 1.2 x 12/15; 4 degC per t/h x 15 t/h on 80 degC
    assert other.chain.stages[1].controller.gain == pytest.approx(1.2 * 12 / 15)
    assert other.chain.stages[1].process.gain == pytest.approx(4 * 15 / 80)
    assert other.margins[1].stable


def test_a_reading_through_a_selector_is_converted_as_a_reading(tmp_path: Path) -> None:
    """32 to 212 degF of output span is 0 to 100 degC of a secondary of -50 to 150 degC."""
    text = """\
loops:
  TIC-1:
    unit: "20"
    service: Service
    measurement: {transmitter: TT-1, variable: temperature, range: 0 to 100 degC}
    controller: {action: reverse, gain: 1, reset: 5 min, output: {to: TY-2, span: 32 to 212 degF}}
    process: {effect: rises, gain: 1 degC per degC, lag: 5 min}
  TIC-2:
    unit: "20"
    service: Service
    measurement: {transmitter: TT-2, variable: temperature, range: -50 to 150 degC}
    controller: {action: reverse, gain: 1, reset: 1 min, output: {to: TV-2}}
    process: {effect: rises, gain: 1 degC per %, lag: 30 s}
functions:
  TY-2: {kind: low select, unit: "20", to: TIC-2}
final_elements:
  TV-2: {unit: "20", kind: control valve, opens_on: rising signal}
"""
    controller = chain_of(tmp_path, text, "TIC-1").stages[1].controller
    assert controller.gain == pytest.approx(0.5)
    assert (controller.output_low_pct, controller.output_high_pct) == pytest.approx((25.0, 75.0))


def test_a_controller_that_sets_a_ratio_is_scaled_by_the_wild_flow(tmp_path: Path) -> None:
    text = """\
loops:
  AIC-1:
    unit: "20"
    service: Service
    measurement: {transmitter: AT-1, variable: analysis, range: 0 to 10 %}
    controller: {action: direct, gain: 0.4, reset: 20 min, output: {to: FY-2, span: 0.2 to 0.7 fraction}}
    process: {effect: falls, gain: -2 % per t/h, lag: 10 min}
  FI-1:
    unit: "20"
    service: Service
    measurement: {transmitter: FT-1, variable: flow, range: 0 to 30 t/h}
    operating: {normal: 20 t/h}
  FIC-2:
    unit: "20"
    service: Service
    measurement: {transmitter: FT-2, variable: flow, range: 0 to 25 t/h}
    controller: {action: reverse, gain: 0.5, reset: 10 s, output: {to: FV-2}}
    process: {effect: rises, gain: 0.25 t/h per %, lag: 3 s}
functions:
  FY-2: {kind: ratio, unit: "20", inputs: [FT-1], to: FIC-2, span: 0.2 to 0.7}
final_elements:
  FV-2: {unit: "20", kind: control valve, opens_on: rising signal}
"""
    stage = chain_of(tmp_path, text, "AIC-1").stages[1]
    # 0.5 of ratio on 20 t/h is 10 t/h, on a range of 25 t/h; direct action. 0.2 x 20 = 4 t/h, 0.7 x 20 = 14 t/h.
    assert stage.controller.gain == pytest.approx(-0.4 * 10 / 25)
    assert (stage.controller.output_low_pct, stage.controller.output_high_pct) == pytest.approx((16.0, 56.0))
    # -2 % per t/h x 25 t/h on 10 %
    assert stage.process.gain == pytest.approx(-2 * 25 / 10)


def test_rate_on_error_lets_the_setpoint_through_the_derivative(tmp_path: Path) -> None:
    with_rate = CASCADE.replace("      gain: 0.5\n", "      gain: 0.5\n      rate: 2 s\n")
    on_error = with_rate.replace("rate: 2 s\n", "rate: 2 s\n      rate_on: error\n")
    found = [chain_of(tmp_path, text, FLOW).stages[0].controller for text in (with_rate, on_error)]
    assert [controller.derivative_setpoint_weight for controller in found] == [0.0, 1.0]
    # It is the loop above that feels it, not the loop itself.
    margins = [Dynamics(plant_of(tmp_path, text)).loop("TIC-2014").chains[0].margins for text in (with_rate, on_error)]
    assert margins[0][0].gain_margin == pytest.approx(margins[1][0].gain_margin, rel=1e-9)
    assert margins[0][1].gain_margin != pytest.approx(margins[1][1].gain_margin, rel=1e-4)
