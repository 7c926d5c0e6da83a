"""Declared disturbances, leads and backlash from the register to numbers, by hand."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from loopdoc.engineering.comparison import Comparison, compare, declared_scenarios
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.process import Process
from loopdoc.engineering.stages import Chain, Lacking, chains
from loopdoc.engineering.structure import Disturbance
from loopdoc.register.load import Loaded, load

TEXT = """\
format: 1
site: {name: Test plant}
revision: {code: A, date: 2026-01-01, status: issued for review}
units:
  "20": {name: Test unit}
loops:
  TIC-2014:
    unit: "20"
    service: Tray temperature
    measurement: {transmitter: TT-2014, variable: temperature, range: 60 to 120 degC}
    controller:
      action: reverse
      gain: 1.8
      reset: 9 min
      interval: 1 s
      output: {to: FIC-2011, span: 0 to 12 t/h}
    process: {effect: rises, gain: 5.5 degC per t/h, lag: 9 min, lead: -20 s, dead_time: 1.5 min}
    disturbances:
      cold reflux: {size: -3 degC, lag: 4 min}
      steam wetter: {size: -0.6 t/h, at: process input}
      feed hotter: {size: 5.4 degF}
      unknown: {size: {hold: process study}}
  FIC-2011:
    unit: "20"
    service: Steam flow
    measurement: {transmitter: FT-2011, variable: flow, range: 0 to 15 t/h}
    controller:
      action: reverse
      gain: 0.5
      reset: 12 s
      interval: 0.5 s
      output: {to: FV-2011, low: 0 %, high: 100 %}
    process: {effect: rises, gain: 0.18 t/h per %, lag: 4 s, dead_time: 1 s}
    disturbances:
      cold reflux: {size: 0.3 t/h}
      setpoint step: {size: 10 %, at: process input}
  LIC-2020:
    unit: "20"
    service: Drum level
    measurement: {transmitter: LT-2020, variable: level, range: 0 to 100 %}
    controller: {action: direct, gain: 2, interval: 1 s, output: {to: LV-2020, low: 0 %, high: 100 %}}
    process: {effect: falls, gain: -0.6 %/min per %, integrating: true, lag: 10 s}
    disturbances:
      inflow: {size: -5 %, at: process input}
final_elements:
  FV-2011: {unit: "20", kind: control valve, opens_on: rising signal, stroke_time: 6 s, backlash: 1.5 %}
  LV-2020: {unit: "20", kind: control valve, opens_on: rising signal}
"""


def plant_of(folder: Path, text: str = TEXT) -> Plant:
    (folder / "register.yaml").write_text(text, "utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    assert loaded.faults == ()
    return Plant(loaded.register)


def chain_of(plant: Plant, tag: str) -> Chain:
    found = chains(plant, plant.controlled[tag])
    assert not isinstance(found, Lacking), found
    return found[0]


def test_a_lead_is_a_zero_of_the_process(tmp_path: Path) -> None:
    assert chain_of(plant_of(tmp_path), "TIC-2014").stages[1].process.leads_s == (-20.0,)


def test_declared_disturbances_in_percent_with_their_paths(tmp_path: Path) -> None:
    scenarios = {one.name: one.disturbances for one in declared_scenarios(chain_of(plant_of(tmp_path), "TIC-2014"))}
    # Innermost first; a name that is taken, by another loop or a standard upset, has the tag beside it.
    assert list(scenarios) == [
        "cold reflux",
        "setpoint step (FIC-2011)",
        "cold reflux (TIC-2014)",
        "steam wetter",
        "feed hotter",
    ]
    # 0.3 of 15 t/h, through the flow's own lag of 4 s.
    assert scenarios["cold reflux"] == (Disturbance(0, pytest.approx(2.0), Process(1.0, (4.0,))),)
    # 10 % of opening make 0.18 x 10 = 1.8 of 15 t/h.
    assert scenarios["setpoint step (FIC-2011)"] == (Disturbance(0, pytest.approx(12.0), Process(1.0, (4.0,), 1.0)),)
    # -3 of 60 degC through a lag of its own; 5.4 degF are 3 degC through that of the process.
    assert scenarios["cold reflux (TIC-2014)"] == (Disturbance(1, pytest.approx(-5.0), Process(1.0, (240.0,))),)
    assert scenarios["feed hotter"] == (Disturbance(1, pytest.approx(5.0), Process(1.0, (540.0,))),)
    # -0.6 t/h x 5.5 degC per t/h = -3.3 of 60 degC, with the inverse response of the process.
    (wetter,) = scenarios["steam wetter"]
    assert (wetter.level, wetter.size_pct) == (1, pytest.approx(-5.5))
    assert wetter.path == Process(1.0, (540.0,), 90.0, (-20.0,))


def test_a_load_on_a_level_is_met_by_the_valve(tmp_path: Path) -> None:
    (chain,) = Dynamics(plant_of(tmp_path)).loop("LIC-2020").chains
    found = compare(chain)
    assert isinstance(found, Comparison)
    response = next(entry.tuned for entry in found.scenarios if entry.scenario.name == "inflow")
    # 5 % less at the input of a level that falls with it: the valve opens by 5 % to hold it, for which proportional
    # action of 2 needs 2.5 %.
    assert response.measurement_pct[0][-1] - response.measurement_pct[0][0] == pytest.approx(2.5, rel=1e-3)
    assert response.travel_pct[-1] - response.travel_pct[0] == pytest.approx(5.0, rel=1e-3)


@pytest.mark.parametrize(("backlash", "apart"), [(", backlash: 1.5 %", 0.75), ("", 0.0)])
def test_a_valve_stands_half_its_backlash_away_from_its_signal(tmp_path: Path, backlash: str, apart: float) -> None:
    (chain,) = Dynamics(plant_of(tmp_path, TEXT.replace(", backlash: 1.5 %", backlash))).loop("FIC-2011").chains
    found = compare(chain)
    assert isinstance(found, Comparison)
    step = found.scenarios[0].tuned
    assert step.output_pct[0] is not None
    # Long after the step, when the stroke time holds nothing back any more.
    late = len(step.time_s) // 2
    assert np.abs(step.output_pct[0] - step.travel_pct)[late:].max() == pytest.approx(apart, abs=0.05)
