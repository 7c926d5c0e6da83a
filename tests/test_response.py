"""`loopdoc response` on registers, against what a specialist works out by hand or in a few lines of numpy."""

from __future__ import annotations

import io
import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from loopdoc.cli import run

HEAD = """\
format: 1
site: {name: Test, owner: Test}
revision: {code: A, date: 2026-01-01, status: issued for review, prepared_by: A, checked_by: B, approved_by: C}
numbering: "T-{unit}-{kind}-{serial}"
tags: '(?P<letters>[A-Z]{2,5})-(?P<unit>\\d{2})(?P<serial>\\d{2})(?P<suffix>[A-Z]?)'
units: {"10": {name: Unit}}
final_elements:
  XV-1001: {unit: "10", kind: control valve, service: Valve, opens_on: rising signal, fails: closed}
loops:
"""


def loop(
    tag: str, variable: str, range_: str, controller: str, process: str, *, to: str = "XV-1001", more: str = ""
) -> str:
    output = f"{{to: {to}{more}}}"
    return f"""\
  {tag}:
    unit: "10"
    service: A loop
    measurement: {{transmitter: {tag.replace("IC", "T")}, variable: {variable}, range: {range_}, signal: 4-20 mA}}
    controller: {{action: reverse, {controller}, output: {output}}}
    process: {{effect: rises, {process}}}
"""


def response(folder: Path, tag: str, *loops: str) -> tuple[Any, str]:
    """The JSON and the text of one loop."""
    (folder / "register.yaml").write_text(HEAD + "".join(loops), encoding="utf-8")
    told = []
    for form in ("json", "text"):
        out, err = io.StringIO(), io.StringIO()
        assert run(["response", str(folder), tag, "--format", form], out, err) == 0, err.getvalue()
        told.append(out.getvalue())
    return json.loads(told[0]), told[1]


def heater(controller: str, process: str) -> str:
    return loop("TIC-1001", "temperature", "0 to 200 degC", controller, process)


# ---------------------------------------------------------------- error integrals


@pytest.mark.parametrize(
    ("controller", "reset_per_gain_s"),
    [
        ("gain: 1.2, reset: 5 min", 300.0 / 1.2),
        ("proportional_band: 80 %, repeats: 0.2 1/min, interval: 2 s", 300.0 / 1.25),
        ("form: parallel, gain: 1.2, reset: 4 min, rate: 20 s, interval: 2 s", 240.0),
        ("form: series, gain: 1.2, reset: 5 min, rate: 20 s, interval: 2 s", 300.0 / 1.2),
    ],
)
def test_the_error_after_an_upset_integrates_to_reset_over_gain(
    tmp_path: Path, controller: str, reset_per_gain_s: float
) -> None:
    """The output must move by du in the end, which takes an error integral of du Ti/K, or du/Ki (hand formula)."""
    found, _ = response(tmp_path, "TIC-1001", heater(controller, "gain: 1.5 degC per %, lag: 5 min, dead_time: 20 s"))
    wanted = 10.0 / 0.75 * reset_per_gain_s * 2.0  # 10 % of span against 0.75 % per %; 2 degC are 1 %
    scenarios = found["scenarios"]
    # None of them crosses its setpoint by more than a hair; what is left at the end of the run is below 1 %.
    assert scenarios["primary disturbance"]["loop"]["iae"] == pytest.approx(wanted, rel=0.01)
    # The setpoint weight is 1, so that the setpoint step asks for the same movement; the first scan acts a whole
    # interval early: half a step of the clock, at most 1 % here, is missing from the trapezoidal sum.
    assert scenarios["setpoint step"]["loop"]["iae"] == pytest.approx(wanted, rel=0.02)


def test_the_error_integral_of_a_lasting_offset_is_not_quoted(tmp_path: Path) -> None:
    """A proportional controller leaves 1/(1 + K G) of an upset: its integral has no end."""
    found, text = response(tmp_path, "TIC-1001", heater("gain: 2, interval: 2 s", "gain: 1.5 degC per %, lag: 5 min"))
    metrics = found["scenarios"]["setpoint step"]["loop"]
    assert metrics["iae"] is None
    assert metrics["peak"] == pytest.approx(20.0 * 1.5 / 2.5, rel=1e-3)  # K G = 1.5; at rest within 0.1 %
    assert "IAE ∞: an offset stays, since TIC-1001 has no reset" in text


def test_a_process_that_answers_at_once_is_not_simulated_without_an_interval(tmp_path: Path) -> None:
    process = "gain: 1.5 degC per %, lag: 5 min, lead: 20 min"
    found, text = response(tmp_path, "TIC-1001", heater("gain: 1.2, reset: 5 min", process))
    assert "answers at once" in found["not_simulated"]
    assert "no time responses: the process of TIC-1001 answers at once" in text
    scanned, _ = response(tmp_path, "TIC-1001", heater("gain: 0.2, reset: 5 min, interval: 2 s", process))
    assert "scenarios" in scanned


@pytest.mark.parametrize(
    ("high", "told"),
    [
        ("160 degC", "setpoint step: 10 % of span, 20 K\n"),
        ("105 degC", "setpoint step: 2.5 % of span, 5 K, as far as the setpoint limit allows\n"),
        ("100 degC", "setpoint step: none, since the normal setpoint stands at its limit\n"),
    ],
)
def test_a_setpoint_step_goes_no_further_than_its_limit(tmp_path: Path, high: str, told: str) -> None:
    controller = f"gain: 1, reset: 5 min, interval: 2 s, setpoint: {{normal: 100 degC, high: {high}}}"
    _, text = response(tmp_path, "TIC-1001", heater(controller, "gain: 1.5 degC per %, lag: 5 min, dead_time: 20 s"))
    assert told in text


def test_where_a_model_comes_from_is_told(tmp_path: Path) -> None:
    process = "gain: 1.5 degC per %, lag: 5 min, dead_time: 20 s"
    for written, told in (
        (", source: step test 2026-05-14", "step test 2026-05-14"),
        (", source: {hold: test in week 12}", "on hold (test in week 12)"),
        ("", "no source given"),
    ):
        found, text = response(tmp_path, "TIC-1001", heater("gain: 1, reset: 5 min", process + written))
        assert found["process_sources"] == {"TIC-1001": told}
        assert f"process models from: TIC-1001 {told}\n" in text


def test_what_a_register_writes_cannot_command_a_build_log(tmp_path: Path) -> None:
    process = 'gain: 1.5 degC per %, lag: 5 min, dead_time: 20 s, source: "##[error]test"'
    _, text = response(tmp_path, "TIC-1001", heater("gain: 1, reset: 5 min", process))
    assert "[error]test" in text
    assert "##[" not in text


# ---------------------------------------------------------------- margins


def test_figures_of_a_loop_in_closed_form(tmp_path: Path) -> None:
    """Reset equal to the lag: L = a exp(-Ls)/s, a = K G/T; margins of that by hand."""
    process = "gain: 1.5 degC per %, lag: 5 min, dead_time: 20 s"
    found, text = response(tmp_path, "TIC-1001", heater("gain: 8, reset: 5 min", process))
    a, dead_s = 8.0 * 0.75 / 300.0, 20.0
    margins = found["loop"]
    expected = {
        "gain_margin": math.pi / (2.0 * a * dead_s),
        "phase_margin_deg": 90.0 - math.degrees(a * dead_s),
        "delay_margin_s": (math.pi / 2.0 - a * dead_s) / a,
        "crossover_rad_per_s": a,
        "phase_crossover_rad_per_s": math.pi / (2.0 * dead_s),
    }
    # Six digits are printed.
    assert {name: margins[name] for name in expected} == pytest.approx(expected, rel=2e-6)
    w = np.geomspace(1e-4, 1.0, 400_001)
    open_loop = a * np.exp(-1j * w * dead_s) / (1j * w)
    complementary = np.abs(open_loop / (1.0 + open_loop))
    # The grid is finer than 3e-5 in frequency: maxima are far closer than that, the bandwidth just so.
    assert margins["max_sensitivity"] == pytest.approx(np.abs(1.0 / (1.0 + open_loop)).max(), rel=1e-5)
    assert margins["max_complementary_sensitivity"] == pytest.approx(max(1.0, complementary.max()), rel=1e-5)
    assert margins["bandwidth_rad_per_s"] == pytest.approx(w[np.argmax(complementary < 0.5**0.5)], rel=5e-5)
    assert "Mt" in text


def test_three_levels_as_worked_out_by_hand(tmp_path: Path) -> None:
    """Every form and unit on the way: series form, band, repeats, setpoint weight, filter, interval, spans."""
    loops = (
        loop("AIC-1003", "analysis", "0 to 10 %", "gain: 0.5, repeats: 1.5 1/h, interval: 1 min",
             "gain: 0.2 % per degC, lag: 20 min, dead_time: 5 min", to="TIC-1002", more=", span: 90 to 130 degC"),
        loop("TIC-1002", "temperature", "80 to 140 degC, filter: 2 s",
             "form: series, proportional_band: 50 %, reset: 5 min, rate: 20 s, interval: 1 s, setpoint_weight: 0.5",
             "gain: 5 degC per t/h, lags: [8 min, 20 s], dead_time: 40 s", to="FIC-1001", more=", span: 0 to 12 t/h"),
        loop("FIC-1001", "flow", "0 to 15 t/h", "gain: 0.5, reset: 8 s, interval: 0.5 s",
             "gain: 0.15 t/h per %, lag: 4 s, dead_time: 1 s"),
    )  # fmt: skip
    found, text = response(tmp_path, "AIC-1003", *loops)
    s = 1j * np.geomspace(1e-5, 1.0, 400_001)
    flow = 0.5 * (1 + 1 / (8 * s)) * np.exp(-0.25 * s) * 1.0 * np.exp(-s) / (1 + 4 * s)
    flow_closed = flow / (1 + flow)
    factor = 1 + 20 / 300  # series to standard
    gain, reset, rate = 2 * factor * 12 / 15, 300 * factor, 20 / factor
    steam = 5 * 15 / 60 * np.exp(-40 * s) / ((1 + 480 * s) * (1 + 20 * s)) * flow_closed * np.exp(-0.5 * s)
    temperature = gain * (1 + 1 / (reset * s) + rate * s / (1 + rate / 10 * s)) * steam / (1 + 2 * s)
    temperature_closed = gain * (0.5 + 1 / (reset * s)) * steam / (1 + temperature)
    composition = 0.2 * 60 / 10 * np.exp(-300 * s) / (1 + 1200 * s)
    analysis = 0.5 * 40 / 60 * (1 + 1 / (2400 * s)) * np.exp(-30 * s) * composition
    by_hand = {"FIC-1001": flow, "TIC-1002": temperature, "AIC-1003": analysis * temperature_closed}
    crossovers = {}
    for tag, curve in by_hand.items():
        told = found["margins_by_level"][tag]
        last = np.nonzero(np.abs(curve) > 1.0)[0][-1]
        crossovers[tag] = s[last].imag
        # Grid points lie 3e-5 apart in frequency: angles there are good to 0.01 deg, maxima to 1e-6.
        assert told["crossover_rad_per_s"] == pytest.approx(crossovers[tag], rel=5e-5)
        assert told["phase_margin_deg"] == pytest.approx(180.0 + np.degrees(np.angle(curve[last])), abs=0.01)
        assert told["max_sensitivity"] == pytest.approx(np.abs(1 / (1 + curve)).max(), rel=1e-5)
    ratios = crossovers["TIC-1002"] / crossovers["AIC-1003"], crossovers["FIC-1001"] / crossovers["TIC-1002"]
    assert f"TIC-1002 over AIC-1003: {ratios[0]:.1f}" in text
    assert f"FIC-1001 over TIC-1002: {ratios[1]:.1f}" in text
