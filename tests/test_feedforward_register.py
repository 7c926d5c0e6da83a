"""Feedforward from the register: what functions make of a measurement by hand, and what is said of it."""

from __future__ import annotations

import json
from io import StringIO
from pathlib import Path

import pytest

from loopdoc.cli import run
from loopdoc.documents.language import ENGLISH, GERMAN
from loopdoc.documents.narrative.time_to_act_story import told as told_times
from loopdoc.documents.responses.responses import held_note, metric_rows, movement_rows
from loopdoc.documents.responses.split_range_story import split_caption
from loopdoc.documents.responses.upset_story import declared_upsets
from loopdoc.engineering.clock import Clock
from loopdoc.engineering.comparison import Comparison, compare, declared_scenarios, input_moves, structure_of
from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.feedforward import FunctionInput
from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.simulation import simulate
from loopdoc.engineering.split_range import SplitRange, split_range
from loopdoc.engineering.stages import Chain, Lacking, chains
from loopdoc.engineering.structure import Feedforward, MeasuredMove
from loopdoc.engineering.time_to_act import TimeToAct
from loopdoc.engineering.upsets import Upset, upsets_of
from loopdoc.exchange.split_range import split_lines
from loopdoc.register.load import Loaded, load

DRUM = """\
format: 1
site: {name: Test plant}
revision: {code: A, date: 2026-01-01, status: issued for review}
units:
  "30": {name: Steam}
loops:
  LIC-3001:
    unit: "30"
    service: Drum level
    measurement: {transmitter: LT-3001, variable: level, range: 0 to 100 %}
    controller:
      action: reverse
      gain: 10
      reset: 18 min
      interval: 1 s
      setpoint: {normal: 50 %}
      output: {to: FY-3003, span: -6 to 6 t/h}
    process: {effect: rises, gain: 0.2 %/min per t/h, integrating: true, lag: 10 s, dead_time: 20 s}
    disturbances:
      steam demand rises: {size: -3 t/h, at: process input, moves: {FI-3002: {size: 3000 kg/h, lag: 4 s}}}
      blowdown opens: {size: -1 t/h, at: process input}
  FI-3002:
    unit: "30"
    service: Steam flow
    measurement: {transmitter: FT-3002, variable: flow, range: 0 to 20 t/h, filter: 2 s}
    operating: {normal: 12 t/h}
  FIC-3003:
    unit: "30"
    service: Feedwater flow
    measurement: {transmitter: FT-3003, variable: flow, range: 0 to 25 t/h}
    operating: {normal: 12.5 t/h}
    controller:
      action: reverse
      gain: 1.0
      reset: 5 s
      interval: 0.5 s
      output: {to: FV-3003, low: 0 %, high: 100 %}
    process: {effect: rises, gain: 0.25 t/h per %, lag: 4 s, dead_time: 1 s}
final_elements:
  FV-3003: {unit: "30", kind: control valve, opens_on: rising signal}
functions:
  FY-3003: {unit: "30", service: Sum, kind: sum, inputs: [FT-3002], weights: {FT-3002: 0.9}, to: FIC-3003}
"""
SUM = "inputs: [FT-3002], weights: {FT-3002: 0.9}, to: FIC-3003}"
SHAPED = "weights: {FY-3001: 0.5}, to: FIC-3003}\n" + """\
  FY-3001: {unit: "30", service: Lead-lag, kind: lead-lag, lead: 30 s, lag: 12 s, to: FY-3003}
  FY-3002:
    unit: "30"
    service: Curve
    kind: characteriser
    inputs: [FT-3002]
    curve:
      - {at: 0 t/h, gives: 1 t/h}
      - {at: 12 t/h, gives: 13 t/h}
      - {at: 14 t/h, gives: 17 t/h}
      - {at: 20 t/h, gives: 20 t/h}
    to: FY-3001
"""
RATIO = """\
format: 1
site: {name: Test plant}
revision: {code: A, date: 2026-01-01, status: issued for review}
units:
  "20": {name: Test unit}
loops:
  AIC-2030:
    unit: "20"
    service: Quality
    measurement: {transmitter: AT-2030, variable: analysis, range: 0 to 10 wt%}
    controller:
      action: reverse
      gain: 0.5
      reset: 5 min
      interval: 5 s
      output: {to: FY-2031, span: 0.2 to 0.8 fraction}
    process: {effect: rises, gain: 0.4 wt% per t/h, lag: 2 min, dead_time: 30 s}
    disturbances:
      more feed: {size: -1.2 wt%, lag: 3 min, dead_time: 1 min, moves: {FT-2001: {size: 4 t/h}, AT-2030: {size: 1 wt%}}}
  FIC-2001:
    unit: "20"
    service: Feed
    measurement: {transmitter: FT-2001, variable: flow, range: 0 to 50 t/h, filter: 1 s}
    operating: {normal: 20 t/h}
  FIC-2031:
    unit: "20"
    service: Reflux
    measurement: {transmitter: FT-2031, variable: flow, range: 0 to 25 t/h}
    operating: {normal: 10 t/h}
    controller: {action: reverse, gain: 0.5, reset: 8 s, interval: 1 s, output: {to: FV-2031, low: 0 %, high: 100 %}}
    process: {effect: rises, gain: 0.25 t/h per %, lag: 3 s, dead_time: 1 s}
final_elements:
  FV-2031: {unit: "20", kind: control valve, opens_on: rising signal}
functions:
  FY-2031: {unit: "20", service: Ratio, kind: ratio, inputs: [FT-2001], to: FIC-2031, span: 0.2 to 0.8}
"""
TO_A_VALVE = """\
format: 1
site: {name: Test plant}
revision: {code: A, date: 2026-01-01, status: issued for review}
units:
  "20": {name: Test unit}
loops:
  TIC-2040:
    unit: "20"
    service: Outlet temperature
    measurement: {transmitter: TT-2040, variable: temperature, range: 0 to 200 degC}
    controller: {action: direct, gain: 1, reset: 2 min, interval: 1 s, output: {to: TY-2040, low: 0 %, high: 100 %}}
    process: {effect: falls, gain: -1.6 degC per %, lag: 80 s, dead_time: 10 s}
    disturbances:
      inlet hotter: {size: 16 degC, lag: 60 s, moves: {ZT-2041: {size: -10 %}}}
  ZI-2041:
    unit: "20"
    service: Damper position
    measurement: {transmitter: ZT-2041, variable: position, range: 0 to 100 %}
    operating: {normal: 60 %}
final_elements:
  TV-2040: {unit: "20", kind: control valve, opens_on: falling signal}
functions:
  TY-2040: {unit: "20", service: Sum, kind: sum, inputs: [ZT-2041], weights: {ZT-2041: 0.7, TIC-2040: 2}, to: TV-2040}
"""


def plant_of(folder: Path, text: str) -> Plant:
    (folder / "register.yaml").write_text(text, "utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    assert loaded.faults == ()
    return Plant(loaded.register)


def chain_of(plant: Plant, tag: str) -> Chain:
    found = chains(plant, plant.controlled[tag])
    assert not isinstance(found, Lacking), found
    return found[0]


def path_of(folder: Path, text: str, tag: str) -> Feedforward:
    (entering,) = chain_of(plant_of(folder, text), tag).levels[-1].inputs
    assert isinstance(entering.path, Feedforward), entering.path
    return entering.path


# --- what functions make of a measurement --------------------------------------------------------


def test_a_sum_adds_its_weight_in_percent_of_the_secondary(tmp_path: Path) -> None:
    chain = chain_of(plant_of(tmp_path, DRUM), "LIC-3001")
    (entering,) = chain.levels[-1].inputs
    assert isinstance(entering, FunctionInput)
    assert (entering.tag, entering.function, entering.names) == ("FT-3002", "FY-3003", ("FT-3002", "FI-3002"))
    # 1 % of 20 t/h is 0.2 t/h, of which 0.9 is 0.18 t/h: 0.72 % of 25 t/h. The filter of 2 s is a lag alone.
    assert entering.path == Feedforward("FT-3002", pytest.approx(0.72), (LeadLag(0.0, 2.0),))
    assert chain.levels[0].inputs == ()


def test_a_move_is_taken_by_any_name_of_its_measurement_and_in_percent(tmp_path: Path) -> None:
    scenarios = declared_scenarios(chain_of(plant_of(tmp_path, DRUM), "LIC-3001"))
    # 3000 kg/h of 20 t/h are 15 %.
    assert [scenario.moves for scenario in scenarios] == [(MeasuredMove("FT-3002", pytest.approx(15.0), 4.0),), ()]
    # The dead time of the process counts where the steam flow tells of it beforehand, and nowhere else.
    assert [scenario.disturbances[0].dead_time_s for scenario in scenarios] == [20.0, 0.0]


def test_a_characteriser_and_a_lead_lag_on_the_way(tmp_path: Path) -> None:
    path = path_of(tmp_path, DRUM.replace(SUM, SHAPED), "LIC-3001")
    assert path.lead_lags == (LeadLag(0.0, 2.0), LeadLag(30.0, 12.0))
    # From 12 t/h up by 15 %, 3 t/h: past the corner at 14 t/h the curve gives 17 + 3/6 = 17.5, 4.5 t/h more than the
    # 13 t/h of normal operation. Half of it is 2.25 t/h, 9 % of 25 t/h.
    assert path.brings(15.0) == pytest.approx(9.0)
    # Down by 60 % to nothing: 12 t/h less, half of which is 24 %.
    assert path.brings(-60.0) == pytest.approx(-24.0)


def test_a_ratio_multiplies_by_the_share_of_the_normal_input(tmp_path: Path) -> None:
    path = path_of(tmp_path, RATIO, "AIC-2030")
    # 1 % of 50 t/h is 0.5 t/h, 2.5 % of the 20 t/h in normal operation; 10 of 25 t/h are made of it then.
    assert path == Feedforward("FT-2001", pytest.approx(0.025), (LeadLag(0.0, 1.0),), (), 0, pytest.approx(40.0))
    # Where the register gives the ratio it counts: 0.55 x 20 t/h are 11 t/h.
    given = path_of(tmp_path, RATIO.replace("span: 0.2 to 0.8}\n", "span: 0.2 to 0.8, normal: 0.55}\n"), "AIC-2030")
    assert given.multiplied_pct == pytest.approx(44.0)


def test_the_dead_time_of_an_upset_stands_beside_its_lag(tmp_path: Path) -> None:
    (scenario,) = declared_scenarios(chain_of(plant_of(tmp_path, RATIO), "AIC-2030"))
    assert scenario.moves == (MeasuredMove("FT-2001", pytest.approx(8.0)),)
    assert scenario.disturbances[0].dead_time_s == 60.0


def test_a_sum_in_front_of_a_valve_shifts_its_opening(tmp_path: Path) -> None:
    # A valve that opens on a falling signal opens by less as more is added; the weight of the controller is not its.
    assert path_of(tmp_path, TO_A_VALVE, "TIC-2040") == Feedforward("ZT-2041", pytest.approx(-0.7))


@pytest.mark.parametrize(
    ("old", "new", "reason"),
    [
        ("range: 0 to 20 t/h, filter: 2 s", "range: {hold: data sheet}", "the range of FT-3002 is not known"),
        ("kind: sum, " + SUM, "kind: low select, inputs: [FT-3002], to: FIC-3003}", "FY-3003 selects"),
    ],
)
def test_what_cannot_be_followed_is_told_and_stays(tmp_path: Path, old: str, new: str, reason: str) -> None:
    text = DRUM.replace(old, new).replace("span: -6 to 6 t/h", "span: 0 to 20 t/h")
    chain = chain_of(plant_of(tmp_path, text), "LIC-3001")
    (entering,) = chain.levels[-1].inputs
    assert entering.path == Undecided(reason)
    assert [scenario.moves for scenario in declared_scenarios(chain)] == [(), ()]
    (told,) = input_moves(chain)
    assert (told.function, told.tag, told.moved_by, told.reason) == ("FY-3003", "FT-3002", (), reason)


def test_an_input_in_another_unit_than_the_sum_is_told(tmp_path: Path) -> None:
    text = TO_A_VALVE.replace("variable: position, range: 0 to 100 %", "variable: flow, range: 0 to 10 t/h")
    text = text.replace("normal: 60 %", "normal: 6 t/h").replace("{size: -10 %}", "{size: -1 t/h}")
    (told,) = input_moves(chain_of(plant_of(tmp_path, text), "TIC-2040"))
    assert told.reason == "ZT-2041 is not in the unit of what TY-2040 adds it to"


# --- what it buys --------------------------------------------------------------------------------


def test_water_for_steam_at_once_leaves_nothing_but_what_the_feedwater_is_late(tmp_path: Path) -> None:
    """With a weight of 1 the level stays where the loops on the way and the two flows have put it.

    Steam in excess of water: 3 t/h behind the lags of 10 s of the drum itself, which both pass, of 4 s and of 2 s of
    the steam flow and its filter, and of the feedwater loop, until that flow has come up. Each second of being late is
    3 t/h x 0.2 %/min per t/h / 60 = 0.01 %. The steam flow itself rises with its lag of 4 s only as it is measured, so
    that 4 + 2 s are lost, and in the feedwater loop, at rest with integral action, what its process and scans take:
    its error integral after a step of the setpoint is Ti/(K g) = 5 s/(1.0 x 1.0) of the step.
    """
    text = DRUM.replace("FT-3002: 0.9", "FT-3002: 1.0").replace("gain: 10\n      reset: 18 min", "gain: 0.001")
    chain = chain_of(plant_of(tmp_path, text), "LIC-3001")
    (steam,) = (scenario for scenario in declared_scenarios(chain) if scenario.moves)
    level = simulate([structure_of(chain)], [steam], clock=Clock(0.5, 1200))[0][0].measurement_pct[-1]
    # A level controller of next to no gain leaves it there. The functions are executed every second with it, and the
    # feedwater controller every half: the scans cost up to 1 s of the 11.
    assert level[-1] - 50.0 == pytest.approx(-0.01 * (4.0 + 2.0 + 5.0), rel=0.09)


def test_the_comparison_shows_an_upset_with_feedforward_and_without(tmp_path: Path) -> None:
    (dynamics,) = Dynamics(plant_of(tmp_path, DRUM)).loop("LIC-3001").chains
    found = compare(dynamics)
    assert isinstance(found, Comparison)
    by_name = {entry.scenario.name: entry for entry in found.scenarios}
    assert list(by_name)[-2:] == ["steam demand rises", "blowdown opens"]  # none is shown twice
    steam, blowdown = by_name["steam demand rises"], by_name["blowdown opens"]
    assert blowdown.without_feedforward is None
    assert blowdown.feedforward_ratio("peak_pct") is None
    without = steam.without_feedforward
    assert without is not None
    # A linear plant: three times the load makes three times the departure. What is apart is the dead time of 20 s, by
    # which the peak comes later.
    assert without.metrics.peak_pct == pytest.approx(3.0 * blowdown.tuned.metrics.peak_pct, rel=1e-3)
    late = without.metrics.time_to_peak_s - blowdown.tuned.metrics.time_to_peak_s
    assert late == pytest.approx(20.0, abs=2.0 * without.metrics.step_s)
    # 90 % of the steam is fed forward, so that a tenth of the load is left to the level controller.
    assert steam.feedforward_ratio("iae_pct_s") == pytest.approx(0.1, abs=0.03)
    ratio = steam.ratio("iae_pct_s")
    assert steam.single is not None
    assert ratio is not None
    assert ratio == pytest.approx(without.metrics.iae_pct_s / steam.single.metrics.iae_pct_s)


def test_in_manual_nothing_is_fed_forward(tmp_path: Path) -> None:
    plant = plant_of(tmp_path, DRUM)
    moved = {one.name: one for one in upsets_of(plant, plant.register.loops["LIC-3001"]) if isinstance(one, Upset)}
    bare = plant_of(tmp_path, DRUM.replace(", moves: {FI-3002: {size: 3000 kg/h, lag: 4 s}}", ""))
    unmoved = {one.name: one for one in upsets_of(bare, bare.register.loops["LIC-3001"]) if isinstance(one, Upset)}
    assert moved == unmoved
    assert "steam demand rises" in moved


ALARMED = DRUM.replace(
    "      blowdown opens: {size: -1 t/h, at: process input}\n",
    "    alarms: {low: {limit: 35 %, deadband: 5 %, priority: high, time_to_respond: 2 min}}\n",
).replace("size: -3 t/h", "size: -15 t/h") + """\
interlocks:
  IS-3001:
    unit: "30"
    service: Low level
    layer: process
    initiators: {LT-3001: {trips: below 20 %}}
    voting: 1oo1
    actions: {FV-3003: open}
"""  # fmt: skip


@pytest.mark.parametrize("measured", [True, False])
def test_times_to_act_say_that_nothing_is_fed_forward_in_manual(tmp_path: Path, measured: bool) -> None:
    text = ALARMED if measured else ALARMED.replace(", moves: {FI-3002: {size: 3000 kg/h, lag: 4 s}}", "")
    plant = plant_of(tmp_path, text)
    level = plant.register.loops["LIC-3001"]
    (entry,) = TimeToAct(plant).of(level, level.alarms["low"])
    # 15 % at 15 t/h x 0.2 %/min per t/h take 5 min, whatever the steam flow shows.
    assert entry.shortest is not None
    assert entry.shortest.upset == "steam demand rises"
    assert entry.shortest.available_s == pytest.approx(5.0 * 60.0, rel=1e-6)
    for language, told in ((ENGLISH, "where nothing is fed forward either"), (GERMAN, "ohne Störgrößenaufschaltung")):
        said = told_times(plant, TimeToAct(plant), [level], language)
        assert (told in said) == measured


SPLIT = (
    TO_A_VALVE.replace("to: TV-2040}", "to: TY-2041}")
    .replace("controller: {action: direct", "controller: {action: reverse")
    .replace(
        "process: {effect: falls, gain: -1.6 degC per %, lag: 80 s, dead_time: 10 s}",
        "process: {branches: {TV-2041A: {effect: rises, gain: 1.2 degC per %, lag: 80 s, dead_time: 10 s},"
        " TV-2041B: {effect: falls, gain: -1.6 degC per %, lag: 60 s, dead_time: 8 s}}}",
    )
    .replace(
        '  TV-2040: {unit: "20", kind: control valve, opens_on: falling signal}\n',
        '  TV-2041A: {unit: "20", kind: control valve, opens_on: rising signal}\n'
        '  TV-2041B: {unit: "20", kind: control valve, opens_on: rising signal}\n',
    )
    + '  TY-2041: {unit: "20", service: Split, kind: split range,'
    " outputs: {TV-2041A: 50 to 100 %, TV-2041B: 50 to 0 %}}\n"
)


def test_branches_of_a_split_range_are_fed_forward_and_the_whole_says_that_it_is_not(tmp_path: Path) -> None:
    """Half of the output opens a valve all the way, so that 1 % added moves it by 0.7 x 2 %."""
    plant = plant_of(tmp_path, SPLIT)
    found = Dynamics(plant).loop("TIC-2040").chains
    paths = [one.path for dynamics in found for one in dynamics.chain.levels[0].inputs]
    assert paths == [Feedforward("ZT-2041", pytest.approx(1.4)), Feedforward("ZT-2041", pytest.approx(-1.4))]
    whole = split_range(found)
    assert isinstance(whole, SplitRange), whole
    assert "ZT-2041 into TY-2040: stays as it is in these responses" in list(split_lines(whole))
    assert "What ZT-2041 brings into TY-2040 stays as it is in these responses." in split_caption(whole)


# --- what is said --------------------------------------------------------------------------------


def test_the_command_tells_what_is_fed_forward_and_what_it_leaves(tmp_path: Path) -> None:
    (tmp_path / "register.yaml").write_text(DRUM, "utf-8")
    out = StringIO()
    assert run(["response", str(tmp_path), "LIC-3001"], out, StringIO()) == 0
    text = out.getvalue()
    rows = [line.split()[0:2] for line in text[text.index("steam demand rises") :].splitlines()[1:5]]
    assert rows[0] == ["no", "feedforward"]
    assert [row[0] for row in rows[1:]] == ["single", "with/without", "cascade/single"]
    assert "FT-3002 into FY-3003: stays as it is in the time responses, except under: steam demand rises" in text
    out = StringIO()
    assert run(["response", str(tmp_path), "LIC-3001", "--format", "json"], out, StringIO()) == 0
    found = json.loads(out.getvalue())
    assert found["function_inputs"] == [
        {"function": "FY-3003", "input": "FT-3002", "moved_by": ["steam demand rises"]}
    ]
    steam, blowdown = found["scenarios"]["steam demand rises"], found["scenarios"]["blowdown opens"]
    for name in ("iae", "peak"):
        ratio = abs(steam["cascade"][name] / steam["cascade_without_feedforward"][name])
        assert steam["with_over_without_feedforward"][name] == pytest.approx(ratio, rel=1e-4)
    assert "cascade_without_feedforward" not in blowdown


def test_the_command_tells_which_inputs_stay(tmp_path: Path) -> None:
    bare = DRUM.replace(", moves: {FI-3002: {size: 3000 kg/h, lag: 4 s}}", "")
    (tmp_path / "register.yaml").write_text(bare, "utf-8")
    out = StringIO()
    assert run(["response", str(tmp_path), "LIC-3001"], out, StringIO()) == 0
    assert "FT-3002 into FY-3003: stays as it is in the time responses\n" in out.getvalue()
    assert "no feedforward" not in out.getvalue()
    (dynamics,) = Dynamics(plant_of(tmp_path, bare)).loop("LIC-3001").chains
    stays = "What functions take in besides stays as it is in the responses over time: FT-3002 into FY-3003."
    assert held_note(dynamics) == stays


def test_the_document_sets_the_row_without_feedforward_beside_the_single_loop(tmp_path: Path) -> None:
    (dynamics,) = Dynamics(plant_of(tmp_path, DRUM)).loop("LIC-3001").chains
    found = compare(dynamics)
    assert isinstance(found, Comparison)
    rows = metric_rows(found)
    at = [row["upset"] for row in rows].index("Steam demand rises, declared at LIC-3001")
    assert rows[at + 1]["upset"] == "The same without feedforward"
    assert rows[at]["single_peak"] == rows[at]["iae_ratio"] == "–"
    assert rows[at + 1]["single_peak"] != "–"
    assert {len(row["cells"]) for row in movement_rows(found)} == {8}
    assert held_note(dynamics) == (
        "FT-3002 into FY-3003 moves in the responses over time under steam demand rises, and stays as it is under "
        "every other upset."
    )


def test_both_languages_tell_what_moves_and_what_is_left(tmp_path: Path) -> None:
    (dynamics,) = Dynamics(plant_of(tmp_path, RATIO)).loop("AIC-2030").chains
    found = compare(dynamics)
    assert isinstance(found, Comparison)
    told = declared_upsets(dynamics, found, ENGLISH)
    assert (
        "moves the measurement of AIC-2030 by −1.2\u00a0wt%, through a lag of 3\u00a0min, after a dead time of "
        "1\u00a0min; FT-2001 moves by 4\u00a0t/h at once, and FY-2031 feeds that forward; AT-2030 moves with it, "
        "which changes nothing in these responses; with the cascade AIC-2030 then departs by "
    ) in told
    assert ", without feedforward by " in told
    assert "with the single loop, which has none, by " in told
    assert " Feedforward leaves " in told
    german = declared_upsets(dynamics, found, GERMAN)
    assert (
        "nach einer Totzeit von 1\u00a0min; FT-2001 ändert sich dabei um 4\u00a0t/h (ohne Verzögerung), was FY-2031 "
        "als Störgröße aufschaltet; AT-2030 ändert sich dabei, was in diesen Verläufen nichts bewirkt; "
    ) in german
    assert "ohne Störgrößenaufschaltung um " in german
