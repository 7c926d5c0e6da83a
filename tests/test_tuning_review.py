"""The tuning review as it is shown: published settings in each form and unit, margins by an independent library."""

from __future__ import annotations

import io
import json
import math
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import control
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from loopdoc.cli import run
from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.pid import (
    Controller,
    ParallelSettings,
    SeriesSettings,
    StandardSettings,
    standard_from_parallel,
    standard_from_series,
)
from loopdoc.engineering.process import Process
from loopdoc.engineering.reduction import reduce_to_first_order, reduce_to_second_order
from loopdoc.engineering.tuning import UltimatePoint, ultimate_point
from loopdoc.engineering.tuning_review import (
    NotApplicable,
    Recommendation,
    closed_loop_times,
    in_form,
    process_seen,
    recommendations,
)

REGISTER = """\
format: 1
site: {{name: Test, owner: Test}}
revision: {{code: A, date: 2026-01-01, status: issued for review, prepared_by: A, checked_by: B, approved_by: C}}
numbering: "T-{{unit}}-{{kind}}-{{serial}}"
tags: '(?P<letters>[A-Z]{{2,5}})-(?P<unit>\\d{{2}})(?P<serial>\\d{{2}})(?P<suffix>[A-Z]?)'
units: {{"10": {{name: Unit}}}}
loops:
  TIC-1001:
    unit: "10"
    service: Outlet temperature
    measurement: {{transmitter: TT-1001, variable: temperature, range: 0 to 100 degC, signal: 4-20 mA}}
    operating: {{normal: 50 degC}}
    controller:
      action: reverse
      {controller}
      output: {{to: TV-1001, low: 0 %, high: 100 %}}
    process: {{effect: rises, {process}}}
final_elements:
  TV-1001: {{unit: "10", kind: control valve, service: Steam, opens_on: rising signal, fails: closed}}
"""
STANDARD = "gain: 1.0\n      reset: 10 s"


def shown(folder: Path, controller: str, process: str, *more: str) -> Any:
    """What `loopdoc response` prints of a single loop: JSON, or text where that is asked for."""
    (folder / "register.yaml").write_text(REGISTER.format(controller=controller, process=process), encoding="utf-8")
    out, err = io.StringIO(), io.StringIO()
    assert run(["response", str(folder), "TIC-1001", *(more or ("--format", "json"))], out, err) == 0, err.getvalue()
    return out.getvalue() if more else json.loads(out.getvalue())["tuning_review"]["TIC-1001"]


def by_rule(review: Mapping[str, Any]) -> dict[str, Any]:
    return {row["rule"]: row for row in review["settings"]}


# Each row: process, then rule: gain, reset, rate in seconds. All processes are one lag (or an integration) and a
# dead time, so that the rules are given them as they stand.
# Ziegler and Nichols, Trans. ASME 64:759-768, 1942; Cohen and Coon, Trans. ASME 75:827-834, 1953; Astrom and
# Hagglund, Advanced PID Control, ISA 2006, eqs. 7.5, 7.7, 7.32, 7.33; the numbers follow from the tables by hand.
# Ultimate points of exp(-2s)/(10s+1) and exp(-s)/s: solved from the phase condition, and pi/(2 k L), 4 L exactly.
# Skogestad 2003: closed-loop time equal to the dead time. Lambda equal to the lag: tau/(K (tau + theta)).
SHOWN = [
    (
        "gain: 1 degC per %, lag: 10 s, dead_time: 2 s",
        {
            "SIMC PI": (2.5, 10.0, 0.0),
            "lambda PI": (10.0 / 12.0, 10.0, 0.0),
            "Ziegler-Nichols PI, reaction curve": (4.5, 6.66667, 0.0),
            "Ziegler-Nichols PID, reaction curve": (6.0, 4.0, 1.0),
            "Ziegler-Nichols PI, ultimate gain": (3.82609, 6.20127, 0.0),
            "Ziegler-Nichols PID, ultimate gain": (5.10145, 3.72076, 0.93019),
            "Cohen-Coon PI": (4.5833, 4.7077, 0.0),
            "Cohen-Coon PID": (6.9167, 4.5479, 0.7018),
            "AMIGO PI": (1.20556, 7.76515, 0.0),
            "AMIGO PID": (2.45, 5.86667, 0.9434),
            "Tyreus-Luyben PI": (8.502425 / 3.2, 2.2 * 7.4415227, 0.0),
            # Rivera and others 1986: (2 tau + theta)/(2 K lambda), tau + theta/2 with lambda = tau.
            "IMC PI": (1.1, 11.0, 0.0),
            # Seborg Table 11.3 at theta/tau = 0.2, worked out by hand.
            "ITAE PI, load": (0.859 * 5**0.977, 10 / 0.674 * 0.2**0.68, 0.0),
            "ITAE PID, setpoint": (0.965 * 5**0.85, 10 / 0.7667, 3.08 * 0.2**0.929),
        },
    ),
    (
        "gain: 1.25 degC per %, lag: 4 s, dead_time: 0.9 s",
        {
            # P. C. Chau, Process Control: A First Course with MATLAB, 2002, Example 5.7A.
            "Ziegler-Nichols PID, reaction curve": (4.2666667, 1.8, 0.45),
            "Cohen-Coon PID": (4.9407, 2.028, 0.3144),
            "AMIGO PID": (1.76, 2.4646, 0.4215),
        },
    ),
    (
        "gain: 0.1 degC/s per %, integrating: true, dead_time: 2 s",
        {
            "SIMC PI": (0.5 / 0.2, 16.0, 0.0),
            "AMIGO PI": (1.75, 26.8, 0.0),
            "AMIGO PID": (2.25, 16.0, 1.0),
            # Chien and Fruehauf 1990 with lambda = 3 L: (2 lambda + L)/(k (lambda + L)**2) and 2 lambda + L.
            "lambda PI": (14.0 / (0.1 * 64.0), 14.0, 0.0),
            # Ku = pi/(2 k L), Pu = 4 L.
            "Tyreus-Luyben PI": (math.pi / 0.4 / 3.2, 17.6, 0.0),
        },
    ),
]


@pytest.mark.parametrize(("process", "expected"), SHOWN)
def test_published_settings_are_shown(tmp_path: Path, process: str, expected: dict[str, tuple[float, ...]]) -> None:
    rows = by_rule(shown(tmp_path, STANDARD, process))
    for rule, values in expected.items():
        row = rows[rule]
        # The published numbers have four digits at least.
        assert (row["gain"], row["reset"], row["rate"]) == pytest.approx(values, rel=1e-4, abs=1e-4), rule


def test_margins_of_simc_are_those_of_its_paper(tmp_path: Path) -> None:
    """Skogestad 2003, Table 1: one lag and dead time, closed-loop time equal to it (recomputed to five digits)."""
    row = by_rule(shown(tmp_path, STANDARD, "gain: 2 degC per %, lag: 5 s, dead_time: 1 s"))["SIMC PI"]
    found = (row["gain_margin"], row["phase_margin_deg"], row["max_sensitivity"], row["crossover_rad_per_s"])
    assert found == pytest.approx((3.1416, 61.352, 1.5905, 0.5), rel=5e-5)
    integrating = "gain: 1 degC/s per %, integrating: true, dead_time: 1 s"
    row = by_rule(shown(tmp_path, STANDARD, integrating))["SIMC PI"]
    found = (row["gain_margin"], row["phase_margin_deg"], row["max_sensitivity"], row["crossover_rad_per_s"])
    # Four digits are printed of the crossover.
    assert found == pytest.approx((2.9634, 46.864, 1.7035, 0.5145), rel=1e-4)


def test_margins_are_those_of_the_whole_process(tmp_path: Path) -> None:
    """Three lags and no dead time, which the rules see as one lag and a dead time: python-control has no such need."""
    review = shown(tmp_path, STANDARD, "gain: 1 degC per %, lags: [10 s, 3 s, 1 s]")
    s = control.tf("s")
    process = 1.0 / ((10 * s + 1) * (3 * s + 1) * (s + 1))
    for row in review["settings"]:
        filtered = row["rate"] / 10.0 if row["rate"] else 0.0
        pid = row["gain"] * (1 + 1 / (row["reset"] * s) + row["rate"] * s / (filtered * s + 1))
        gain_margin, phase_margin, *_, crossover = control.margin(pid * process)
        # Six digits are printed.
        assert row["gain_margin"] == pytest.approx(gain_margin, rel=2e-5) or math.isinf(gain_margin), row["rule"]
        assert row["phase_margin_deg"] == pytest.approx(phase_margin, rel=2e-4, abs=1e-3), row["rule"]
        assert row["crossover_rad_per_s"] == pytest.approx(crossover, rel=2e-5), row["rule"]
    # By hand, Skogestad's half rule: 10 + 3/2, and 3/2 + 1 of dead time.
    assert (review["model"]["lag_s"], review["model"]["dead_time_s"]) == (11.5, 2.5)


# Published conversions: Skogestad 2003, eq. 36 and its inverse; parallel Kp = Kc, Ki = Kc/Ti, Kd = Kc Td.
FORMS = [
    ("series", StandardSettings(2.5, 10.0, 1.6), (2.0, 8.0, 2.0)),
    ("series", StandardSettings(2.0, 10.0, 2.5), (1.0, 5.0, 5.0)),
    ("parallel", StandardSettings(2.5, 10.0, 1.6), (2.5, 1.0 / 0.25, 4.0)),
    ("standard", StandardSettings(-2.5, 10.0, 1.6), (2.5, 10.0, 1.6)),
    ("parallel", StandardSettings(2.5), (2.5, math.inf, 0.0)),
]


@pytest.mark.parametrize(("form", "settings", "expected"), FORMS)
def test_settings_in_each_form(form: str, settings: StandardSettings, expected: tuple[float, ...]) -> None:
    found = in_form(settings, form)
    assert (found.gain, found.reset_s, found.rate_s) == pytest.approx(expected, rel=1e-12)


def test_a_form_that_cannot_express_settings_is_refused() -> None:
    with pytest.raises(ValueError, match="no series form"):
        in_form(StandardSettings(2.0, 10.0, 3.0), "series")


positive = st.floats(0.01, 100.0)


@given(gain=positive, reset_s=positive, share=st.floats(0.0, 0.24), w=positive)
def test_every_form_is_the_same_controller(gain: float, reset_s: float, share: float, w: float) -> None:
    """K(1 + 1/(Ti s) + Td s), K'(1 + 1/(Ti' s))(1 + Td' s) and Kp + Ki/s + Kd s at one frequency."""
    standard = StandardSettings(gain, reset_s, share * reset_s)
    s = 1j * w
    expected = gain * (1 + 1 / (reset_s * s) + standard.rate_s * s)
    series, parallel = in_form(standard, "series"), in_form(standard, "parallel")
    as_series = series.gain * (1 + 1 / (series.reset_s * s)) * (1 + series.rate_s * s)
    as_parallel = parallel.gain + 1 / (parallel.reset_s * s) + parallel.rate_s * s
    # Rounding, grown by the square root near a rate of a quarter of the reset.
    assert as_series == pytest.approx(expected, rel=1e-9)
    assert as_parallel == pytest.approx(expected, rel=1e-9)
    back = standard_from_series(SeriesSettings(series.gain, series.reset_s, series.rate_s))
    assert (back.gain, back.reset_s) == pytest.approx((gain, reset_s), rel=1e-9)
    again = standard_from_parallel(ParallelSettings(parallel.gain, 1 / parallel.reset_s, parallel.rate_s))
    assert (again.gain, again.reset_s) == pytest.approx((gain, reset_s), rel=1e-9)


WRITTEN = [
    ("gain: 1.0\n      reset: 10 s", 1.0),
    ("form: parallel\n      gain: 1.0\n      reset: 10 s\n      rate: 0 s", 1.0),
    ("form: series\n      proportional_band: 100 %\n      repeats: 6 1/min\n      rate: 0 s", 1.0),
]


@pytest.mark.parametrize(("controller", "gain"), WRITTEN)
def test_margins_do_not_depend_on_how_settings_are_written(tmp_path: Path, controller: str, gain: float) -> None:
    process = "gain: 1 degC per %, lag: 10 s, dead_time: 2 s"
    plain = by_rule(shown(tmp_path, STANDARD, process))
    other = by_rule(shown(tmp_path, controller, process))
    for rule, row in other.items():
        for name in ("gain_margin", "phase_margin_deg", "max_sensitivity"):
            assert row[name] == pytest.approx(plain[rule][name], rel=1e-5), (rule, name)  # six digits are printed


def test_settings_in_the_units_of_the_register(tmp_path: Path) -> None:
    """Proportional band 100/K; repeats per minute 60/Ti; of the parallel form Ki = K/Ti and Kd = K Td."""
    process = "gain: 1 degC per %, lag: 10 s, dead_time: 2 s"
    written = "proportional_band: 100 %\n      repeats: 6 1/min\n      rate: 0 s"
    rows = by_rule(shown(tmp_path, written, process))
    assert rows["as configured"]["proportional_band"] == pytest.approx(100.0)
    # Ziegler and Nichols: K = 4.5, Ti = 6.6667 s, that is 22.22 % and 9 repeats per minute.
    row = rows["Ziegler-Nichols PI, reaction curve"]
    assert (row["proportional_band"], row["repeats"]) == pytest.approx((22.2222, 9.0), rel=1e-5)
    parallel = "form: parallel\n      gain: 1.0\n      repeats: 6 1/min\n      rate: 1 s"
    # K = 6, Ti = 4 s, Td = 1 s: Ki = 1.5 1/s = 90 1/min, Kd = 6 s.
    row = by_rule(shown(tmp_path, parallel, process))["Ziegler-Nichols PID, reaction curve"]
    assert (row["gain"], row["repeats"], row["rate"]) == pytest.approx((6.0, 90.0, 6.0), rel=1e-5)
    minutes = "gain: 1.0\n      reset: 0.5 min"
    row = by_rule(shown(tmp_path, minutes, process))["Ziegler-Nichols PI, reaction curve"]
    assert row["reset"] == pytest.approx(6.66667 / 60.0, rel=1e-5)


def test_what_is_unstable_on_the_whole_process_is_marked(tmp_path: Path) -> None:
    """Three lags far apart, on which the ultimate gain rules ask too much; closed loop's poles by python-control."""
    review = shown(tmp_path, STANDARD, "gain: 1 degC per %, lags: [100 s, 10 s, 1 s]")
    s = control.tf("s")
    process = 1.0 / ((100 * s + 1) * (10 * s + 1) * (s + 1))
    seen = set()
    for row in review["settings"]:
        pid = row["gain"] * (1 + 1 / (row["reset"] * s) + row["rate"] * s / (row["rate"] / 10.0 * s + 1))
        poles = control.feedback(pid * process, 1).poles()
        assert row["stable"] == bool(np.all(poles.real < 0)), row["rule"]
        assert ("not stable" in row["remark"]) == (not row["stable"])
        seen.add(row["stable"])
    assert seen == {True, False}


def test_what_an_integrating_process_is_given_reads_as_a_slope(tmp_path: Path) -> None:
    # 0.6 % of span a minute for each percent of output, as the register has it on a span of 100 degC.
    review = shown(tmp_path, STANDARD, "gain: 0.6 degC/min per %, integrating: true, dead_time: 2 s")
    assert "slope 0.01 %/s per %, dead time 2 s" in review["basis"][0]


def test_a_gain_margin_that_is_not_there_is_none(tmp_path: Path) -> None:
    """With the wrong action no factor on the gain is the limit of stability: that is not the same as not quoted."""
    written = REGISTER.replace("action: reverse", "action: direct")
    process = "gain: 1 degC per %, lag: 100 s, dead_time: 5 s"
    (tmp_path / "register.yaml").write_text(written.format(controller=STANDARD, process=process), encoding="utf-8")
    out = io.StringIO()
    assert run(["response", str(tmp_path), "TIC-1001"], out, io.StringIO()) == 0
    row = next(line for line in out.getvalue().splitlines() if line.startswith("as configured"))
    assert "not quoted" not in row
    assert row.endswith("not stable")


def test_rules_that_do_not_apply_say_why(tmp_path: Path) -> None:
    review = shown(tmp_path, STANDARD, "gain: 1 degC per %, lag: 10 s")
    reasons = {entry["rule"]: entry["reason"] for entry in review["not_applied"]}
    assert "dead time above zero" in reasons["Cohen-Coon PI"]
    assert "dead time above zero" in reasons["AMIGO PI"]
    assert "-180 degrees" in reasons["Ziegler-Nichols PI, ultimate gain"]
    assert {row["rule"] for row in review["settings"]} == {"as configured", "lambda PI", "IMC PI", "IMC PID"}
    review = shown(tmp_path, STANDARD, "gain: 1 degC per %, dead_time: 3 s")
    reasons = {entry["rule"]: entry["reason"] for entry in review["not_applied"]}
    assert "lag above zero" in reasons["Cohen-Coon PI"]
    # AMIGO holds for dead time alone: 0.15 (1 + 1/(0.35 L s)) exp(-Ls) has an Ms of 1.3520, by hand on a fine grid.
    amigo_pi = by_rule(review)["AMIGO PI"]
    assert (amigo_pi["gain"], amigo_pi["reset"]) == pytest.approx((0.15, 0.35 * 3.0))
    assert amigo_pi["max_sensitivity"] == pytest.approx(1.3520346, rel=1e-4)
    series = "form: series\n      gain: 1.0\n      reset: 10 s"
    review = shown(tmp_path, series, "gain: 1 degC per %, lag: 10 s, dead_time: 30 s")
    reasons = {entry["rule"]: entry["reason"] for entry in review["not_applied"]}
    # AMIGO PID at r = 3: Ti = 20/31*30 = 19.4 s and Td = 150/19 = 7.9 s, above a quarter of it.
    assert "no series form" in reasons["AMIGO PID"]
    assert reasons["ITAE PI, load"].endswith("and this one is 3 times the lag")
    assert "1.7 times the dead time" in reasons["IMC PI"]


def test_a_loop_without_a_model_is_not_checked(tmp_path: Path) -> None:
    review = shown(tmp_path, STANDARD, "gain: {{hold: step test}}, lag: 10 s".replace("{{", "{").replace("}}", "}"))
    assert "on hold" in review["not_checked"]
    text = shown(tmp_path, STANDARD, "gain: {hold: step test}, lag: 10 s", "--format", "text")
    assert "tuning review: not checked" in text


def test_the_text_gives_no_settings_without_margins_and_cautions(tmp_path: Path) -> None:
    text = shown(tmp_path, STANDARD, "gain: 1 degC per %, lag: 10 s, dead_time: 2 s", "--format", "text")
    assert "Margins decide, rules advise. Try tuning changes only under supervision." in text
    head = next(line for line in text.splitlines() if "Gain, % per %" in line)
    for name in ("Reset, s", "gain margin", "phase", "Ms"):
        assert name in head
    for rule in ("as configured", "SIMC PI", "Cohen-Coon PID"):
        row = next(line for line in text.splitlines() if line.startswith(rule)).removeprefix(rule)
        assert len(row.split()) >= 7, row
    assert "Trans. ASME 64:759-768, 1942" in text


def test_figures_of_any_size_stand_apart(tmp_path: Path) -> None:
    process = "gain: 0.001 degC per %, lag: 60 s, dead_time: 2 s"
    text = shown(tmp_path, "gain: 0.0001\n      reset: 1 h", process, "--format", "text")
    row = next(line for line in text.splitlines() if line.startswith("TIC-1001  "))
    # K k/Ti for both: 1e-4 x 1e-3/3600 s.
    assert row.endswith(" 1  2.78 × 10⁻¹¹ rad/s  2.78 × 10⁻¹¹ rad/s")
    assert "this one is 0.0333 times the lag" in text
    configured = next(line for line in text.splitlines() if line.startswith("as configured"))
    assert configured.endswith(" 1  2.78 × 10⁻¹¹")


def test_what_rounding_leaves_of_a_difference_is_not_printed(tmp_path: Path) -> None:
    # A second lag of 0.01 ms turns the phase by 1e-4 deg at most where it matters.
    text = shown(tmp_path, STANDARD, "gain: 1 degC per %, lags: [10 s, 0.00001 s], dead_time: 2 s", "--format", "text")
    assert "this model is as large and lags as much; the margins do not rest on it." in text


def test_a_proportional_loop_is_shown_the_proportional_rules(tmp_path: Path) -> None:
    rows = by_rule(shown(tmp_path, "gain: 1.0", "gain: 1 degC per %, lag: 10 s, dead_time: 2 s"))
    # Ziegler and Nichols T/(K L) and Ku/2; Cohen and Coon (1/K)(1/r + 1/3).
    assert rows["Ziegler-Nichols P, reaction curve"]["gain"] == pytest.approx(5.0)
    assert rows["Ziegler-Nichols P, ultimate gain"]["gain"] == pytest.approx(8.502425 / 2, rel=1e-6)
    assert rows["Cohen-Coon P"]["gain"] == pytest.approx(5.3333, abs=5e-5)
    assert rows["Cohen-Coon P"]["reset"] is None
    # Cohen and Coon (1/K)(1.25/r + 1/6), theta (6 - 2r)/(22 + 3r).
    assert (rows["Cohen-Coon PD"]["gain"], rows["Cohen-Coon PD"]["rate"]) == pytest.approx((6.4167, 0.4956), abs=5e-5)
    assert rows["Cohen-Coon PD"]["reset"] is None


# --- what a controller sees ----------------------------------------------------------------------

INNER = LoopStage(Controller(2.0, 5.0), Process(1.0, (5.0,), 1.0))
OUTER = LoopStage(Controller(1.0, 60.0), Process(1.5, (60.0, 8.0), 4.0))


def closed(inner: LoopStage, w: float) -> complex:
    """C G/(1 + C G) of a PI controller on one lag and a dead time, written out."""
    s = 1j * w
    controller = inner.controller.gain * (1 + 1 / (inner.controller.reset_s * s))
    process = inner.process.gain * np.exp(-inner.process.dead_time_s * s) / (1 + inner.process.lags_s[0] * s)
    return complex(controller * process / (1 + controller * process))


def test_the_closed_loop_below_is_matched_where_the_phase_reaches_180() -> None:
    seen = process_seen([INNER, OUTER])
    w = seen.matched_rad_per_s
    s = 1j * w
    own = 1.5 * np.exp(-4.0 * s) / ((1 + 60.0 * s) * (1 + 8.0 * s))
    # The phase condition itself, and Ku = 1/|T G|.
    together = closed(INNER, w) * own
    assert together.imag == pytest.approx(0.0, abs=1e-9)
    assert together.real < 0.0
    assert isinstance(seen.ultimate, UltimatePoint)
    assert seen.ultimate.gain == pytest.approx(-1.0 / together.real, rel=1e-9)
    stand_in = np.exp(-seen.below_dead_time_s * s) / (1 + seen.below_lag_s * s)
    assert complex(stand_in) == pytest.approx(closed(INNER, w), rel=1e-9)
    # The half rule on 60, 8 and the lag of the loop below, and its stated error.
    lags = sorted((60.0, 8.0, seen.below_lag_s), reverse=True)
    assert seen.first.lag_s == pytest.approx(lags[0] + lags[1] / 2)
    assert seen.first.dead_time_s == pytest.approx(4.0 + seen.below_dead_time_s + lags[1] / 2 + lags[2])
    model = seen.first.gain * np.exp(-seen.first.dead_time_s * s) / (1 + seen.first.lag_s * s)
    assert abs(model / together) - 1 == pytest.approx(seen.gain_error, rel=1e-6)
    assert math.degrees(np.angle(model / together)) == pytest.approx(seen.phase_error_deg, rel=1e-6)


def test_a_secondary_without_reset_follows_in_part() -> None:
    proportional = LoopStage(Controller(3.0), Process(1.0, (5.0,), 1.0))
    # Settled share of a proportional loop: K Kp/(1 + K Kp) = 3/4.
    assert process_seen([proportional, OUTER]).first.gain == pytest.approx(1.5 * 0.75)


def test_a_measurement_filter_counts_as_a_lag() -> None:
    filtered = LoopStage(replace(OUTER.controller, measurement_filter_s=2.0), OUTER.process)
    first = process_seen([filtered]).first
    # Half rule on 60, 8, 2.
    assert (first.lag_s, first.dead_time_s) == (64.0, 4.0 + 4.0 + 2.0)


def test_nothing_is_recommended_where_the_closed_loop_cannot_be_matched() -> None:
    lags_only = LoopStage(Controller(2.0, 5.0), Process(1.0, (5.0,)))
    weak = LoopStage(Controller(0.1), Process(1.5, (60.0,)))
    with pytest.raises(ValueError, match="no frequency"):
        process_seen([lags_only, weak])


# --- which rules speak ---------------------------------------------------------------------------


def told(process: Process, *, interval_s: float = 0.0) -> tuple[Recommendation | NotApplicable, ...]:
    ultimate: UltimatePoint | NotApplicable
    try:
        ultimate = ultimate_point(process, interval_s=interval_s)
    except ValueError as error:
        ultimate = NotApplicable("", str(error))
    first = reduce_to_first_order(process, interval_s=interval_s)
    return recommendations(first, reduce_to_second_order(process, interval_s=interval_s), ultimate)


def test_rules_keep_the_sign_of_the_process() -> None:
    rising = told(Process(2.0, (10.0, 3.0), 2.0), interval_s=0.5)
    falling = told(Process(-2.0, (10.0, 3.0), 2.0), interval_s=0.5)
    assert len(rising) == 19
    for one, other in zip(rising, falling, strict=True):
        assert isinstance(one, Recommendation)
        assert isinstance(other, Recommendation)
        assert other.rule == one.rule
        assert other.settings.gain == pytest.approx(-one.settings.gain, rel=1e-9)
        assert other.settings.reset_s == pytest.approx(one.settings.reset_s, rel=1e-9)


def test_the_closed_loop_times_are_the_stated_defaults() -> None:
    # Lambda not below the dead time, three dead times of an integrating process.
    assert closed_loop_times(reduce_to_first_order(Process(1.0, (10.0,), 2.0))) == (2.0, 10.0)
    assert closed_loop_times(reduce_to_first_order(Process(1.0, (1.0,), 2.0))) == (2.0, 2.0)
    assert closed_loop_times(reduce_to_first_order(Process(1.0, (), 2.0, integrating=True))) == (2.0, 6.0)


def test_an_unstable_ultimate_above_the_sampling_is_not_used() -> None:
    """A lag of 4 s without dead time at 2 s: -180 degrees by half an interval lies beyond pi/(2 h)."""
    seen = process_seen([LoopStage(Controller(1.0, 4.0, interval_s=2.0), Process(1.0, (4.0,)))])
    assert isinstance(seen.ultimate, NotApplicable)
    assert "sampling" in seen.ultimate.reason
