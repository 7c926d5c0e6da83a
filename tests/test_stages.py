"""From the register to numbers: percent-of-span gains, signs and limits by hand, margins by python-control."""

from __future__ import annotations

import math
from pathlib import Path

import control
import numpy as np
import pytest

from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.stages import Chain, Lacking, chains
from loopdoc.register.load import Loaded, load

ROOT = """\
format: 1
site: {name: Test plant, owner: Process control}
revision: {code: A, date: 2026-01-01, status: issued for review}
units:
  "20": {name: Test unit}
"""

CASCADE = (Path(__file__).parent / "data" / "steam-cascade.yaml").read_text("utf-8")


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


def test_gains_limits_and_times_are_those_worked_out_by_hand(tmp_path: Path) -> None:
    inner, outer = chain_of(tmp_path, CASCADE, "TIC-2014").stages
    # 0.18 t/h per % of opening on a range of 15 t/h.
    assert inner.process.gain == pytest.approx(0.18 / 15 * 100, rel=1e-12)
    assert inner.process.lags_s == (4.0,)
    assert (inner.controller.gain, inner.controller.reset_s, inner.controller.interval_s) == (0.5, 12.0, 0.5)
    # 5.5 degC per t/h: 15 t/h are the secondary's whole range, 60 degC the primary's.
    assert outer.process.gain == pytest.approx(5.5 * 15 / 60, rel=1e-12)
    assert outer.process.dead_time_s == pytest.approx(90.0)
    # The output asks for 0 to 12 of 15 t/h: a gain of 1.8 becomes 1.8 x 0.8.
    assert outer.controller.gain == pytest.approx(1.44, rel=1e-12)
    assert outer.controller.output_low_pct == pytest.approx(100 * 3 / 15)
    assert outer.controller.output_high_pct == pytest.approx(100 * 10.5 / 15)
    assert outer.controller.setpoint_low_pct == pytest.approx(30.0)
    assert outer.controller.setpoint_high_pct == pytest.approx(60.0)
    assert outer.controller.measurement_filter_s == 6.0


def test_other_units_change_no_number(tmp_path: Path) -> None:
    other = (
        CASCADE.replace("60 to 120 degC", "140 to 248 degF")
        .replace(
            "{low: 78 degC, normal: 84 degC, high: 96 degC}",
            "{low: 172.4 degF, normal: 183.2 degF, high: 204.8 degF}",
        )
        .replace("5.5 degC per t/h", "0.0099 degF per kg/h")
        .replace("0 to 12 t/h, low: 3 t/h, high: 10.5 t/h", "0 to 12000 kg/h, low: 3000 kg/h, high: 10500 kg/h")
        .replace("reset: 9 min", "repeats: 6.666666666666667 1/h")
        .replace("lag: 9 min", "lag: 540 s")
    )
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    for ours, theirs in zip(
        chain_of(tmp_path / "a", CASCADE, "TIC-2014").stages,
        chain_of(tmp_path / "b", other, "TIC-2014").stages,
        strict=True,
    ):
        assert theirs.process.gain == pytest.approx(ours.process.gain, rel=1e-12)
        for field in (
            "gain",
            "reset_s",
            "output_low_pct",
            "output_high_pct",
            "setpoint_low_pct",
            "setpoint_high_pct",
        ):
            assert getattr(theirs.controller, field) == pytest.approx(getattr(ours.controller, field), rel=1e-9)


@pytest.mark.parametrize(
    ("opens_on", "block", "sign"),
    [
        ("rising signal", "direct", 1),
        ("falling signal", "direct", -1),
        ("rising signal", "reversed", -1),
        ("falling signal", "reversed", 1),
    ],
)
def test_the_valve_and_its_output_block_give_the_sign(tmp_path: Path, opens_on: str, block: str, sign: int) -> None:
    text = CASCADE.replace("opens_on: rising signal", f"opens_on: {opens_on}, output_block: {block}")
    stage = chain_of(tmp_path, text, "FIC-2011").stages[0]
    assert math.copysign(1, stage.controller.gain * stage.process.gain) == sign


def test_a_branch_of_a_split_range_moves_its_valve_faster_than_the_output(tmp_path: Path) -> None:
    text = """\
loops:
  PIC-2021:
    unit: "20"
    service: Blanket pressure
    measurement: {transmitter: PT-2021, variable: pressure, range: 0 to 0.5 barg}
    controller:
      action: reverse
      gain: 2
      reset: 20 s
      output: {to: PY-2021, low: 0 %, high: 100 %}
      modes: {normal: automatic, permitted: [automatic]}
    process:
      branches:
        PV-2021A: {effect: rises, gain: 0.005 barg per %, lag: 20 s}
        PV-2021B: {effect: falls, gain: -0.01 barg per %, lag: 20 s}
functions:
  PY-2021: {kind: split range, unit: "20", outputs: {PV-2021A: 60 to 100 %, PV-2021B: 50 to 0 %}}
final_elements:
  PV-2021A: {unit: "20", kind: control valve, opens_on: rising signal}
  PV-2021B: {unit: "20", kind: control valve, opens_on: falling signal, output_block: reversed}
"""
    plant = plant_of(tmp_path, text)
    found = chains(plant, plant.controlled["PIC-2021"])
    assert not isinstance(found, Lacking)
    by_element = {chain.final_element.tag: chain.stages[0] for chain in found}
    # 40 % of output for the whole travel: 2.5 times; 50 % downwards: -2 times.
    assert by_element["PV-2021A"].controller.gain == pytest.approx(2 * 2.5)
    assert by_element["PV-2021B"].controller.gain == pytest.approx(2 * -2)
    assert all(stage.controller.gain * stage.process.gain > 0 for stage in by_element.values())


def test_a_sum_adds_the_normal_value_of_what_it_adds_and_leaves_the_gain(tmp_path: Path) -> None:
    text = """\
loops:
  LIC-3001:
    unit: "20"
    service: Drum level
    measurement: {transmitter: LT-3001, variable: level, range: 0 to 100 %}
    controller:
      action: reverse
      gain: 1
      reset: 5 min
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
      output: {to: FV-3003, low: 0 %, high: 100 %}
      modes: {normal: cascade, permitted: [automatic, cascade]}
    process: {effect: rises, gain: 0.16 t/h per %, lag: 3 s}
functions:
  FY-3003: {kind: sum, unit: "20", inputs: [FT-3002], to: FIC-3003}
final_elements:
  FV-3003: {unit: "20", kind: control valve, opens_on: rising signal}
"""
    outer = chain_of(tmp_path, text, "LIC-3001").stages[1]
    assert outer.controller.gain == pytest.approx(8 / 16)
    # 8 t/h of steam, less 4 and plus 4, on a range of 16 t/h.
    assert (outer.controller.output_low_pct, outer.controller.output_high_pct) == pytest.approx((25.0, 75.0))
    # 1.2 %/min per t/h: per second, and 16 t/h are the secondary's whole range.
    assert outer.process.gain == pytest.approx(1.2 / 60 * 16 / 100)
    assert outer.process.integrating


def test_margins_of_a_cascade_agree_with_python_control(tmp_path: Path) -> None:
    """Without dead time and with continuous execution the loop is rational, and python-control is exact on it."""
    text = CASCADE.replace(", dead_time: 1.5 min", "").replace(", dead_time: 1 s", "").replace(", filter: 6 s", "")
    text = (
        text.replace("      interval: 1 s\n", "")
        .replace("      interval: 0.5 s\n", "")
        .replace("lag: 9 min", "lags: [9 min, 2 min]")
    )
    dynamics = Dynamics(plant_of(tmp_path, text)).loop("TIC-2014").chains[0]

    s = control.tf("s")
    inner_controller = 0.5 * (1 + 1 / (12 * s))
    inner_process = 1.2 / (4 * s + 1)
    inner = control.minreal(control.feedback(inner_controller * inner_process, 1), verbose=False)
    outer = 1.44 * (1 + 1 / (540 * s)) * inner * 1.375 / ((540 * s + 1) * (120 * s + 1))
    gain_margin, phase_margin, _, _, crossover = control.stability_margins(outer)[:5]
    ours = dynamics.margins[1]
    # Both refine the same crossing; the tolerance is that of their root searches.
    assert ours.phase_margin_deg == pytest.approx(phase_margin, rel=1e-6)
    assert ours.gain_margin == pytest.approx(gain_margin, rel=1e-6) or (
        math.isinf(ours.gain_margin) and np.isinf(gain_margin)
    )
    inner_margin = control.stability_margins(inner_controller * inner_process)
    assert dynamics.margins[0].phase_margin_deg == pytest.approx(inner_margin[1], rel=1e-6)
    assert ours.crossover_rad_per_s == pytest.approx(crossover, rel=1e-6)


def test_a_wrong_action_shows_as_an_unstable_loop(tmp_path: Path) -> None:
    text = CASCADE.replace("action: reverse\n      gain: 1.8", "action: direct\n      gain: 1.8")
    margins = Dynamics(plant_of(tmp_path, text)).loop("TIC-2014").chains[0].margins
    assert [found.stable for found in margins] == [True, False]


def test_a_gain_margin_is_that_of_the_sampled_loop_where_half_an_interval_is_not_the_sampling(tmp_path: Path) -> None:
    """Proportional control of a lag without dead time, by hand (K. J. Astrom, B. Wittenmark, Computer-Controlled
    Systems, 3rd ed. 1997, ch. 2, from memory): with a = exp(-T/tau) it turns unstable at the gain (1+a)/(1-a)/K, and
    at half the sampling frequency; half an interval as dead time would give another figure."""
    lag = CASCADE.replace("      reset: 12 s\n", "").replace(", lag: 4 s, dead_time: 1 s", ", lag: 4 s")
    lag = lag.replace("      interval: 0.5 s", "      interval: 2 s")
    found = Dynamics(plant_of(tmp_path, lag)).loop("FIC-2011").chains[0].margins[0]
    exact = (1 + math.exp(-2 / 4)) / (1 - math.exp(-2 / 4)) / (0.5 * 1.2)
    w = np.linspace(0.5, 3.0, 200_000)
    half_interval = 0.5 * 1.2 * np.exp(-1j * w) / (1 + 4j * w)
    crossing = np.argmax(np.diff(np.sign(half_interval.imag)) > 0)
    assert -1 / half_interval.real[crossing] > 1.3 * exact
    assert found.stable
    assert found.sampled
    # Both are this formula; what is left is rounding.
    assert found.gain_margin == pytest.approx(exact, rel=1e-12)


@pytest.mark.parametrize(
    ("old", "new", "reason"),
    [
        ("gain: 5.5 degC per t/h", "gain: {hold: step test in week 12}", "the process gain of TIC-2014 is on hold"),
        ("range: 60 to 120 degC, ", "", "the range of TIC-2014 is not given"),
        ("      gain: 1.8\n", "", "the gain of TIC-2014 is not given"),
        ("opens_on: rising signal, ", "", "FV-2011 does not say on which signal it opens"),
        ("reset: 9 min", "reset: {hold: to be tuned}", "the reset of TIC-2014 is on hold"),
        ("span: 0 to 12 t/h", "span: {hold: range of the meter}", "the output span of TIC-2014 is on hold"),
        (
            "gain: 1.8",
            "form: series\n      rate: 8 min\n      gain: 0",
            "the settings of TIC-2014 do not make a controller",
        ),
        (
            "gain: 1.8",
            "rate: 10 s\n      derivative_filter: 0\n      gain: 1.8",
            "the settings of TIC-2014 do not make a controller: the derivative filter factor",
        ),
    ],
)
def test_what_is_lacking_is_named(tmp_path: Path, old: str, new: str, reason: str) -> None:
    assert CASCADE.count(old) >= 1
    loop = Dynamics(plant_of(tmp_path, CASCADE.replace(old, new, 1))).loop("TIC-2014")
    assert loop.chains == ()
    assert loop.reason.startswith(reason)
