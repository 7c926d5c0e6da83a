"""Properties of the margins of a register: what must not change them, and what may only change them one way."""

from __future__ import annotations

import tempfile
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.frequency import LoopStage, Margins
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.sampled import sampled_margins
from loopdoc.register.load import Loaded, load

REGISTER = """\
format: 1
site: {{name: Test plant, owner: Process control}}
revision: {{code: A, date: 2026-01-01, status: issued for review}}
units:
  "20": {{name: Test unit}}
loops:
  TIC-2014:
    unit: "20"
    service: Tray temperature
    measurement: {{transmitter: TT-2014, variable: temperature, range: {outer_range}}}
    controller:
      action: reverse
      gain: {outer_gain!r}
      reset: {reset}
      interval: 1 s
      output: {{to: FIC-2011, span: {span}}}
    process: {{effect: rises, gain: {outer_process}, lag: {lag}, dead_time: 1.5 min}}
  FIC-2011:
    unit: "20"
    service: Steam flow
    measurement: {{transmitter: FT-2011, variable: flow, range: {inner_range}}}
    controller:
      action: reverse
      gain: {inner_gain!r}
      reset: 12 s
      interval: {interval}
      output: {{to: FV-2011}}
    process: {{effect: rises, gain: {inner_process}, lag: 4 s}}
final_elements:
  FV-2011: {{unit: "20", kind: control valve, opens_on: rising signal}}
"""
PLAIN = {
    "outer_range": "60 to 120 degC",
    "outer_gain": 1.8,
    "reset": "9 min",
    "span": "0 to 12 t/h",
    "outer_process": "5.5 degC per t/h",
    "lag": "9 min",
    "inner_range": "0 to 15 t/h",
    "inner_gain": 0.5,
    "interval": "0.5 s",
    "inner_process": "0.18 t/h per %",
}


def margins_of(**changed: object) -> tuple[Margins, ...]:
    with tempfile.TemporaryDirectory() as folder:
        Path(folder, "register.yaml").write_text(REGISTER.format(**PLAIN | changed), encoding="utf-8")
        loaded = load(Path(folder))
    assert isinstance(loaded, Loaded), loaded
    assert loaded.faults == ()
    return Dynamics(Plant(loaded.register)).loop("TIC-2014").chains[0].margins


REFERENCE = margins_of()


def assert_the_same(found: tuple[Margins, ...], rel: float) -> None:
    for ours, theirs in zip(found, REFERENCE, strict=True):
        assert (ours.stable, ours.sampled) == (theirs.stable, theirs.sampled)
        for name in ("gain_margin", "phase_margin_deg", "max_sensitivity", "crossover_rad_per_s", "delay_margin_s"):
            assert getattr(ours, name) == pytest.approx(getattr(theirs, name), rel=rel), name


def test_the_reference_shows_both_forms() -> None:
    """The flow loop without dead time is read as sampled, the temperature loop with half an interval."""
    assert [margins.sampled for margins in REFERENCE] == [True, False]


@settings(max_examples=25, deadline=None, derandomize=True)
@given(inner=st.floats(0.2, 8.0), outer=st.floats(0.2, 8.0))
def test_wider_spans_with_gains_in_proportion_leave_the_margins(inner: float, outer: float) -> None:
    """A gain in percent per percent that grows with the span moves the same valve for the same degree."""
    found = margins_of(
        inner_range=f"0 to {15 * inner!r} t/h",
        inner_gain=0.5 * inner,
        outer_range=f"60 to {60 + 60 * outer!r} degC",
        outer_gain=1.8 * outer,
    )
    # Only the rounding of the products differs, and what the refinement makes of it.
    assert_the_same(found, 1e-8)


@settings(max_examples=25, deadline=None, derandomize=True)
@given(
    flow=st.sampled_from([("t/h", 1.0), ("kg/h", 1e3), ("kg/s", 1 / 3.6)]),
    temperature=st.sampled_from([("degC", 1.0, 0.0), ("K", 1.0, 273.15), ("degF", 1.8, 32.0)]),
    time=st.sampled_from([("s", 60.0), ("min", 1.0), ("h", 1 / 60)]),
)
def test_other_units_leave_the_margins(
    flow: tuple[str, float], temperature: tuple[str, float, float], time: tuple[str, float]
) -> None:
    (kg, per_t), (degree, slope, zero), (unit, per_min) = flow, temperature, time
    found = margins_of(
        outer_range=f"{60 * slope + zero!r} to {120 * slope + zero!r} {degree}",
        reset=f"{9 * per_min!r} {unit}",
        span=f"0 to {12 * per_t!r} {kg}",
        outer_process=f"{5.5 * slope / per_t!r} {degree} per {kg}",
        lag=f"{9 * per_min!r} {unit}",
        inner_range=f"0 to {15 * per_t!r} {kg}",
        inner_process=f"{0.18 * per_t!r} {kg} per %",
    )
    assert_the_same(found, 1e-8)


def test_a_proportional_band_and_repeats_are_another_way_to_write_the_same() -> None:
    text = REGISTER.replace(
        "gain: {inner_gain!r}\n      reset: 12 s", "proportional_band: 200 %\n      repeats: 5 1/min"
    )
    assert text != REGISTER
    with tempfile.TemporaryDirectory() as folder:
        Path(folder, "register.yaml").write_text(text.format(**PLAIN), encoding="utf-8")
        loaded = load(Path(folder))
    assert isinstance(loaded, Loaded)
    assert_the_same(Dynamics(Plant(loaded.register)).loop("TIC-2014").chains[0].margins, 1e-8)


@settings(max_examples=40, deadline=None, derandomize=True)
@given(
    gain=st.floats(0.05, 3.0),
    reset=st.floats(1.0, 50.0),
    lag=st.floats(0.5, 20.0),
    dead_time=st.integers(1, 6),
)
def test_doubling_whole_intervals_of_dead_time_never_raises_the_sampled_delay_margin(
    gain: float, reset: float, lag: float, dead_time: int
) -> None:
    """Whole intervals turn the phase alone, so the crossovers stay and each loses what is added."""
    short, long = (
        sampled_margins([LoopStage(Controller(gain, reset, interval_s=1.0), Process(1.0, (lag,), float(theta)))])[0]
        for theta in (dead_time, 2 * dead_time)
    )
    assert isinstance(short, Margins)
    assert isinstance(long, Margins)
    assert long.delay_margin_s <= short.delay_margin_s * (1 + 1e-9)
    assert short.stable or not long.stable
