"""Failure effects against a simulated plant, against hand-worked cases and against what the example's prose says.

The oracle of the directions is an experiment of this file: a first-order process (or two in cascade) with
proportional-integral controllers is integrated by Euler steps with one sensor stuck, and the place where it
ends is compared with where it started. It shares no code with the sign algebra.
"""

from __future__ import annotations

import itertools
from pathlib import Path

import pytest

from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.failure import Failure, FailureAnalysis, FailureEffect
from loopdoc.engineering.faults import FaultReading, fault_reading
from loopdoc.engineering.pairing import Plant
from loopdoc.register.load import Loaded, load

EXAMPLES = Path(__file__).parent.parent / "examples"


def plant_of(folder: Path) -> Plant:
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    return Plant(loaded.register)


def written(folder: Path, text: str) -> Plant:
    (folder / "register.yaml").write_text(text, encoding="utf-8")
    return plant_of(folder)


@pytest.fixture(scope="module")
def tarn() -> Plant:
    return plant_of(EXAMPLES / "tarn-hollow")


def effect(plant: Plant, tag: str, failure: Failure, at: str = "") -> FailureEffect:
    found = [
        one
        for one in FailureAnalysis(plant).effects(tag)
        if one.failure is failure and (not at or at in one.at)
    ]
    assert len(found) == 1, found
    return found[0]


def directions(found: FailureEffect) -> dict[str, object]:
    return {one.loop.tag: one.direction for one in found.consequences}


def sign(value: float) -> int:
    return (value > 1.0) - (value < -1.0)  # a percent of span is far from both ends of every experiment here


# ---------------------------------------------------------------- the experiment


class PI:
    """A proportional-integral controller in percent, clamped; ISA standard form."""

    def __init__(self, action: str) -> None:
        self.sense = 1.0 if action == "reverse" else -1.0
        self.integral = 50.0

    def output(self, setpoint: float, reading: float, step_s: float) -> float:
        error = self.sense * (setpoint - reading)
        self.integral = min(100.0, max(0.0, self.integral + 0.02 * error * step_s))
        return min(100.0, max(0.0, self.integral + 0.5 * error))


def opening_of(output: float, opens_on: str, block: str) -> float:
    signal = 100.0 - output if block == "reversed" else output
    return signal if opens_on == "rising signal" else 100.0 - signal


SINGLE = """
format: 1
units: {"20": {name: Test}}
loops:
  TIC-2001:
    unit: "20"
    measurement: {transmitter: TT-2001, variable: temperature, range: 0 to 100 degC, signal: 4-20 mA}
    controller: {action: %(action)s, gain: 0.5, output: {to: TV-2001}, modes: {normal: automatic}}
    process: {effect: %(effect)s}
final_elements:
  TV-2001: {unit: "20", kind: control valve, opens_on: %(opens_on)s, output_block: %(block)s, signal: 4-20 mA}
"""


@pytest.mark.parametrize(
    ("action", "effect_", "opens_on", "block", "reading"),
    list(
        itertools.product(
            ("direct", "reverse"), ("rises", "falls"), ("rising signal", "falling signal"),
            ("direct", "reversed"), (100.0, 0.0),
        )
    ),
)  # fmt: skip
def test_a_stuck_reading_drives_the_process_where_an_experiment_ends(
    tmp_path: Path, action: str, effect_: str, opens_on: str, block: str, reading: float
) -> None:
    controller, process = PI(action), 50.0
    for _ in range(3000):
        opening = opening_of(controller.output(50.0, reading, 1.0), opens_on, block)
        gain = 1.0 if effect_ == "rises" else -1.0
        process += (50.0 + gain * (opening - 50.0) - process) / 60.0
    plant = written(
        tmp_path, SINGLE % {"action": action, "effect": effect_, "opens_on": opens_on, "block": block}
    )
    failure = Failure.MEASUREMENT_HIGH if reading > 50 else Failure.MEASUREMENT_LOW
    found = effect(plant, "TIC-2001", failure)
    assert [move.direction for move in found.elements] == [sign(opening - 50.0)]
    assert directions(found) == {"TIC-2001": sign(process - 50.0)}


CASCADE = """
format: 1
units: {"20": {name: Test}}
loops:
  TIC-2001:
    unit: "20"
    measurement: {transmitter: TT-2001, variable: temperature, range: 0 to 100 degC, signal: 4-20 mA}
    controller: {action: %(outer)s, gain: 0.5, output: {to: FIC-2002, span: 0 to 100 t/h, low: 10 t/h, high: 90 t/h},
                 modes: {normal: automatic}}
    process: {effect: %(outer_effect)s}
  FIC-2002:
    unit: "20"
    measurement: {transmitter: FT-2002, variable: flow, range: 0 to 100 t/h, signal: 4-20 mA}
    controller: {action: %(inner)s, gain: 0.5, output: {to: FV-2002}, modes: {normal: cascade}}
    process: {effect: %(inner_effect)s}
final_elements:
  FV-2002: {unit: "20", kind: control valve, opens_on: rising signal, signal: 4-20 mA}
"""


@pytest.mark.parametrize("stuck", ["outer", "inner"])
@pytest.mark.parametrize("reading", [100.0, 0.0])
@pytest.mark.parametrize("outer_effect", ["rises", "falls"])
@pytest.mark.parametrize("inner_effect", ["rises", "falls"])
def test_a_stuck_reading_in_a_cascade_ends_where_an_experiment_does(
    tmp_path: Path, stuck: str, reading: float, outer_effect: str, inner_effect: str
) -> None:
    actions = {"rises": "reverse", "falls": "direct"}  # negative feedback on both levels
    outer, inner = PI(actions[outer_effect]), PI(actions[inner_effect])
    signs = {"rises": 1.0, "falls": -1.0}
    temperature = flow = 50.0
    for _ in range(8000):
        asked = min(90.0, max(10.0, outer.output(50.0, reading if stuck == "outer" else temperature, 1.0)))
        opening = inner.output(asked, reading if stuck == "inner" else flow, 1.0)
        flow += (50.0 + signs[inner_effect] * (opening - 50.0) - flow) / 10.0
        temperature += (50.0 + signs[outer_effect] * (flow - 50.0) - temperature) / 200.0
    plant = written(
        tmp_path,
        CASCADE
        % {
            "outer": actions[outer_effect], "inner": actions[inner_effect],
            "outer_effect": outer_effect, "inner_effect": inner_effect,
        },
    )  # fmt: skip
    failure = Failure.MEASUREMENT_HIGH if reading > 50 else Failure.MEASUREMENT_LOW
    found = effect(plant, "TIC-2001" if stuck == "outer" else "FIC-2002", failure)
    assert [move.direction for move in found.elements] == [sign(opening - 50.0)]
    assert directions(found) == {"TIC-2001": sign(temperature - 50.0), "FIC-2002": sign(flow - 50.0)}


def test_negative_feedback_drives_the_true_value_away_from_a_wrong_reading() -> None:
    # With the right action a controller answers a false high by driving the true value low: of every loop
    # whose signs are known in either example (their actions are checked by `action-wrong`).
    for name in ("tarn-hollow", "tennessee-eastman"):
        plant = plant_of(EXAMPLES / name)
        for tag in plant.controlled:
            for failure, reading in ((Failure.MEASUREMENT_HIGH, 1), (Failure.MEASUREMENT_LOW, -1)):
                own = effect(plant, tag, failure).consequences[0]
                assert own.loop.tag == tag
                # 0 where a candidate that stands by goes on standing by, or a controller is out of service.
                assert isinstance(own.direction, Undecided) or own.direction in (-reading, 0), (tag, failure)


# ---------------------------------------------------------------- noticed or not (NAMUR NE 43)


@pytest.mark.parametrize(
    ("signal", "on_fault", "noticed"),
    [
        ("4-20 mA", "reads high", True),  # at or above 21 mA, NE 43
        ("4-20 mA", "reads low", True),  # at or below 3.6 mA, NE 43
        ("4-20 mA", "holds", False),
        ("0-20 mA", "reads high", True),
        ("0-20 mA", "reads low", False),  # no live zero: 0 mA is a reading
        ("1-5 V", "reads low", True),
        ("pulse", "reads low", False),  # no pulse is no flow
        ("pulse", "reads high", False),
        ("digital", "reads low", True),
        ("digital", "holds", False),
    ],
)
def test_which_faults_the_control_system_can_notice(
    tmp_path: Path, signal: str, on_fault: str, noticed: bool
) -> None:
    text = SINGLE % {"action": "reverse", "effect": "rises", "opens_on": "rising signal", "block": "direct"}
    given = f"signal: {signal}, on_fault: {on_fault}}}\n    c"
    plant = written(tmp_path, text.replace("signal: 4-20 mA}\n    c", given))
    assert fault_reading(plant.register.loops["TIC-2001"].measurement) == FaultReading(on_fault, noticed)


@pytest.mark.parametrize("lacking", ["signal: 4-20 mA", "on_fault: reads high"])
def test_without_signal_or_fault_nothing_is_said(tmp_path: Path, lacking: str) -> None:
    text = SINGLE % {"action": "reverse", "effect": "rises", "opens_on": "rising signal", "block": "direct"}
    left = {"signal: 4-20 mA", "on_fault: reads high"} - {lacking}
    plant = written(tmp_path, text.replace("signal: 4-20 mA}\n    c", f"{left.pop()}}}\n    c"))
    assert isinstance(fault_reading(plant.register.loops["TIC-2001"].measurement), Undecided)


# ---------------------------------------------------------------- hand-worked cases of the example


def test_a_noticed_fault_puts_the_controller_into_manual_and_its_primary_tracks(tarn: Plant) -> None:
    # FT-2011 reads high on a fault: above 21 mA, so FIC-2011 does what its on_bad_measurement says.
    found = effect(tarn, "FIC-2011", Failure.MEASUREMENT_BAD)
    assert (found.seen, found.mode, found.forced_output, found.output) == ("bad", "manual", "hold", 0)
    assert found.elements == ()
    assert directions(found) == {"FIC-2011": 0, "TIC-2014": 0, "AIC-2015": 0}
    assert [(one.loop.tag, one.policy) for one in found.unfollowed] == [("TIC-2014", "track")]


def test_the_same_fault_seen_from_the_primary(tarn: Plant) -> None:
    found = effect(tarn, "TIC-2014", Failure.SECONDARY_LOST)
    assert found.at == ("FT-2011",)
    assert (found.seen, found.mode) == ("bad", "manual")
    assert next(iter(directions(found))) == "TIC-2014"


def test_a_held_value_is_taken_as_good(tarn: Plant) -> None:
    # The chromatograph AT-2015 holds its last analysis.
    found = effect(tarn, "AIC-2015", Failure.MEASUREMENT_BAD)
    assert (found.seen, found.mode) == ("frozen", "")
    assert isinstance(found.output, Undecided)


def test_a_temperature_that_reads_high_starves_the_reboiler_and_the_analyser_tells(tarn: Plant) -> None:
    # TIC-2014 is reverse: it cuts the steam to its lower limit, 1.0 t/h. The true temperature falls, its hazard;
    # methanol in the water rises (the analysis falls as the temperature rises), its hazard too.
    found = effect(tarn, "TIC-2014", Failure.MEASUREMENT_HIGH)
    assert [(move.loop.tag, move.direction, str(move.limit)) for move in found.setpoints] == [
        ("FIC-2011", -1, "1.0 t/h")
    ]
    assert directions(found) == {"TIC-2014": -1, "FIC-2011": -1, "AIC-2015": 1}
    told = {one.loop.tag: one for one in found.consequences}
    assert (told["TIC-2014"].hazardous, told["TIC-2014"].alarms) == (True, ())  # its own sensor has failed
    assert (told["FIC-2011"].hazardous, told["AIC-2015"].hazardous) == (False, True)
    # The analyser's own alarm, and that of the base temperature, which is said to warn of methanol in the water.
    alarms = [(one.loop.tag, one.alarm.kind) for one in told["AIC-2015"].alarms]
    assert alarms == [("AIC-2015", "high"), ("TI-2018", "low")]


def test_a_steam_valve_that_opens_is_opposed_by_the_interlock_with_other_sensors(tarn: Plant) -> None:
    # FT-2011 too low: FV-2011 opens. IS-2001 shuts FV-2011 and watches PT-2023A, B and C.
    assert [one.tag for one in effect(tarn, "FIC-2011", Failure.MEASUREMENT_LOW).opposing] == ["IS-2001"]
    assert effect(tarn, "FIC-2011", Failure.MEASUREMENT_HIGH).opposing == ()
    # Without its signal the valve cannot be moved by anything.
    assert effect(tarn, "FIC-2011", Failure.OUTPUT_LOST).opposing == ()


def test_a_second_transmitter_of_the_same_level_stands_against_the_first(tarn: Plant) -> None:
    # LT-1010 too high: the feed is cut, the true level falls. LI-1018 (a transmitter of its own) alarms and trips.
    own = effect(tarn, "LIC-1010", Failure.MEASUREMENT_HIGH).consequences[0]
    assert [(one.loop.tag, one.alarm.kind) for one in own.alarms] == [("LI-1018", "low")]
    assert [one.interlock.tag for one in own.trips] == ["IS-1002"]


def test_an_override_that_loses_its_reading_leaves_the_command_to_the_other(tarn: Plant) -> None:
    # PDT-2016 too low: PDIC-2016 asks for all the steam, FY-1011 (a low select) goes on passing FIC-2001.
    found = effect(tarn, "PDIC-2016", Failure.MEASUREMENT_LOW)
    assert found.output == 1
    assert [(one.loop.tag, one.direction, one.instead) for one in found.setpoints] == [("FIC-1011", 0, ("FIC-2001",))]
    assert found.elements == ()
    # Too high: it takes over and cuts the steam.
    assert [one.direction for one in effect(tarn, "PDIC-2016", Failure.MEASUREMENT_HIGH).elements] == [-1]


def test_a_flow_that_reads_low_is_held_in_check_by_the_override_and_moves_the_ratio(tarn: Plant) -> None:
    # FT-2001 too low: FIC-2001 asks for more steam until PDIC-2016 asks for less; FY-2031 cuts the reflux.
    found = effect(tarn, "FIC-2001", Failure.MEASUREMENT_LOW)
    assert {one.loop.tag: (one.by, one.direction) for one in found.setpoints} == {
        "FIC-1011": ("FIC-2001", 1),
        "FIC-2031": ("FY-2031", -1),
    }
    assert found.consequences[0].opposed_by == ("PDIC-2016",)
    assert {one.element.tag: one.direction for one in found.elements} == {"FV-1011": 1, "FV-2031": -1}


def test_the_steam_flow_of_a_three_element_level_moves_the_feedwater_and_the_level_corrects(tarn: Plant) -> None:
    found = effect(tarn, "FI-3002", Failure.MEASUREMENT_LOW)
    assert directions(found) == {"FIC-3003": -1, "LIC-3001": -1}
    told = {one.loop.tag: one for one in found.consequences}
    assert told["LIC-3001"].opposed_by == ("LIC-3001",)
    # LIC-3001's own sensor is well, so its own alarm counts beside the second transmitter's.
    assert [one.loop.tag for one in told["LIC-3001"].alarms] == ["LIC-3001", "LI-3004"]
    bad = effect(tarn, "FI-3002", Failure.MEASUREMENT_BAD)
    assert [isinstance(one.direction, Undecided) for one in bad.setpoints] == [True]


def test_both_branches_of_a_split_range_work_the_same_way(tarn: Plant) -> None:
    # PT-2021 too high: the nitrogen valve PV-2021A shuts and the vent PV-2021B opens, so the pressure falls.
    found = effect(tarn, "PIC-2021", Failure.MEASUREMENT_HIGH)
    assert {one.element.tag: one.direction for one in found.elements} == {"PV-2021A": -1, "PV-2021B": 1}
    assert directions(found) == {"PIC-2021": -1}
    # Signals are lost one at a time, the air to both at once.
    assert directions(effect(tarn, "PIC-2021", Failure.OUTPUT_LOST, at="PV-2021B")) == {"PIC-2021": 1}
    assert effect(tarn, "PIC-2021", Failure.MOTIVE_POWER_LOST).at == ("PV-2021A", "PV-2021B")


def test_an_indicator_that_trips_an_interlock_alone_says_so(tarn: Plant) -> None:
    assert [one.interlock.tag for one in effect(tarn, "LI-1018", Failure.MEASUREMENT_LOW).initiated] == ["IS-1002"]
    assert effect(tarn, "LI-1018", Failure.MEASUREMENT_HIGH).initiated == ()
    assert FailureAnalysis(tarn).effects("TI-1014") == ()


def test_an_output_between_its_ends_has_no_direction(tarn: Plant) -> None:
    # TIC-3050 goes to 80 % when its measurement is bad.
    found = effect(tarn, "TIC-3050", Failure.MEASUREMENT_BAD)
    assert isinstance(found.output, Undecided)
    assert isinstance(found.consequences[0].direction, Undecided)


def test_air_failure_agrees_with_the_upsets_that_the_example_tells(tarn: Plant) -> None:
    # texts/*/upsets, "Instrument air lost": unit 10 "FV-1002, FV-1011, FV-1013 ... close"; unit 20 "both steam
    # valves, the distillate and the water valve close; the reflux, the nitrogen and the cooling water to the
    # distillate cooler open"; unit 30 "hot oil, feedwater and deaerator steam shut, demineralised water opens".
    shut = {"FV-1002", "FV-1011", "FV-1013", "FV-2011", "FV-2024", "FV-2013", "FV-3011", "FV-3003", "PV-3021"}
    opened = {"FV-2031", "PV-2021A", "TV-2028", "LV-3020"}
    where = {}
    for tag in tarn.controlled:
        for found in FailureAnalysis(tarn).effects(tag):
            if found.failure is Failure.MOTIVE_POWER_LOST:
                where.update({move.element.tag: (move.position, move.direction) for move in found.elements})
    assert {tag for tag in where if where[tag] == ("closed", -1)} >= shut
    assert {tag for tag in where if where[tag] == ("open", 1)} == opened


def test_with_the_control_system_go_its_alarms_and_its_process_interlocks(tarn: Plant) -> None:
    lost = effect(tarn, "LIC-1010", Failure.CONTROL_POWER_LOST)
    assert directions(lost)["LIC-1010"] == -1
    assert all(one.alarms == () and one.trips == () for one in lost.consequences)
    signal = effect(tarn, "LIC-1010", Failure.OUTPUT_LOST)
    assert [one.interlock.tag for one in signal.consequences[0].trips] == ["IS-1002"]


# ---------------------------------------------------------------- what the register does not say


def test_what_is_not_given_is_undecided_and_not_guessed() -> None:
    plant = plant_of(EXAMPLES / "tennessee-eastman")
    # No effect of the feed on the reactor level is published, no fail position, no fault reading.
    assert isinstance(directions(effect(plant, "LIC-2008", Failure.MEASUREMENT_HIGH))["LIC-2008"], Undecided)
    for failure in (Failure.OUTPUT_LOST, Failure.MOTIVE_POWER_LOST, Failure.CONTROL_POWER_LOST):
        assert isinstance(effect(plant, "FIC-3005", failure).elements[0].direction, Undecided)
    assert isinstance(effect(plant, "FIC-3005", Failure.MEASUREMENT_BAD).output, Undecided)
    # A hazard on hold is neither met nor excluded.
    assert effect(plant, "FIC-3005", Failure.MEASUREMENT_HIGH).consequences[0].hazardous is None
    # A controller out of service moves nothing, whatever it reads; the interlock on its sensor acts.
    found = effect(plant, "PIC-3013", Failure.MEASUREMENT_HIGH)
    assert (found.output, found.elements, [one.interlock.tag for one in found.initiated]) == (0, (), ["IS-3013H"])


SELECTED = """
format: 1
units: {"20": {name: Test}}
loops:
  TIC-2001:
    unit: "20"
    measurement: {transmitter: TT-2001, variable: temperature, range: 0 to 1200 degC, signal: 4-20 mA}
    controller: {action: reverse, gain: 1, output: {to: TY-2001}, modes: {normal: automatic}}
    process: {effect: rises}
    hazard: high
  TIC-2002:
    unit: "20"
    measurement: {transmitter: TT-2002, variable: temperature, range: 0 to 400 degC, signal: 4-20 mA}
    operating: {normal: 200 degC}
    controller: {action: reverse, gain: 1, setpoint: {normal: 300 degC}, output: {to: TY-2001},
                 modes: {normal: automatic}}
    process: {effect: rises}
    hazard: high
functions:
  TY-2001: {kind: low select, unit: "20", to: EH-2001}
final_elements:
  EH-2001: {unit: "20", kind: heater bank, opens_on: rising signal, fails: stopped, signal: 4-20 mA}
interlocks:
  IS-2001: {unit: "20", layer: safety, voting: 2oo2, actions: {EH-2001: stopped},
            initiators: {TT-2001: {trips: above 1100 degC}, TT-2002: {trips: above 390 degC}}}
  IS-2002: {unit: "20", layer: safety, voting: 1oo2, actions: {EH-2001: stopped},
            initiators: {TT-2001: {trips: above 1150 degC}, TT-2002: {trips: above 395 degC}}}
"""


def test_a_selector_before_a_final_element_works_as_before_a_loop(tmp_path: Path) -> None:
    plant = written(tmp_path, SELECTED)
    # TIC-2002 stands by (200 of 300 degC); reading low it asks for more heat, and the low select passes it over.
    idle = effect(plant, "TIC-2002", Failure.MEASUREMENT_LOW)
    assert [(one.direction, one.instead) for one in idle.elements] == [(0, ("TIC-2001",))]
    # Reading high it takes the heat away, from both temperatures.
    assert directions(effect(plant, "TIC-2002", Failure.MEASUREMENT_HIGH)) == {"TIC-2002": -1, "TIC-2001": -1}
    # TIC-2001 reading low turns the heat up until TIC-2002 takes over.
    up = effect(plant, "TIC-2001", Failure.MEASUREMENT_LOW)
    assert directions(up) == {"TIC-2001": 1, "TIC-2002": 1}
    assert up.consequences[0].opposed_by == ("TIC-2002",)
    # Without its signal a heater bank is off.
    assert [one.position for one in effect(plant, "TIC-2001", Failure.OUTPUT_LOST).elements] == ["stopped"]


def test_an_initiator_that_needs_another_does_not_stand_alone(tmp_path: Path) -> None:
    plant = written(tmp_path, SELECTED)
    told = {one.loop.tag: one for one in effect(plant, "TIC-2001", Failure.MEASUREMENT_LOW).consequences}
    # Of TT-2002 alone, IS-2001 (2oo2) does not trip; IS-2002 (1oo2) does.
    assert [one.interlock.tag for one in told["TIC-2002"].trips] == ["IS-2002"]
    assert [one.interlock.tag for one in effect(plant, "TIC-2001", Failure.MEASUREMENT_HIGH).initiated] == ["IS-2002"]


def test_a_reading_cannot_trip_beyond_the_end_of_its_range() -> None:
    # IS-3012H trips above 136.6 % and LT-3012 ends at 100 % (`trip-outside-range` says so).
    plant = plant_of(EXAMPLES / "tennessee-eastman")
    assert effect(plant, "LIC-3012", Failure.MEASUREMENT_HIGH).initiated == ()


def test_a_ring_of_loops_is_followed_once(tmp_path: Path) -> None:
    text = CASCADE % {"outer": "reverse", "inner": "reverse", "outer_effect": "rises", "inner_effect": "rises"}
    ring = text.replace("to: FV-2002", "to: TIC-2001").replace("normal: automatic", "normal: cascade")
    found = effect(written(tmp_path, ring), "TIC-2001", Failure.MEASUREMENT_HIGH)
    assert [move.loop.tag for move in found.setpoints] == ["FIC-2002", "TIC-2001"]


def test_an_unknown_loop_is_a_key_error(tarn: Plant) -> None:
    with pytest.raises(KeyError):
        FailureAnalysis(tarn).effects("FV-2011")


# ---------------------------------------------------------------- independence

HEATED = """
format: 1
units: {"20": {name: Test}}
loops:
  TIC-2001:
    unit: "20"
    service: Outlet temperature
    measurement: {transmitter: TT-2001, variable: temperature, range: 0 to 200 degC, signal: 4-20 mA}
    controller: {action: reverse, gain: 1, output: {to: TV-2001}, modes: {normal: automatic}}
    process: {effect: rises}
    hazard: high
instruments:
  TT-2002: {unit: "20", service: "Outlet temperature, safety system", variable: temperature, range: 0 to 200 degC}
final_elements:
  TV-2001: {unit: "20", kind: control valve, opens_on: falling signal, output_block: reversed, fails: open,
            signal: 4-20 mA}
  XV-2003: {unit: "20", kind: on-off valve, signal: contact}
interlocks:
  IS-2001: {unit: "20", layer: safety, initiators: {TT-2002: {trips: above 150 degC}}, voting: 1oo1,
            actions: %s}
"""


@pytest.mark.parametrize(
    ("actions", "stands"),
    [
        # The valve is stuck open without its signal or its air: what can only shut this valve does not help.
        ("{TV-2001: closed}", False),
        ("{TV-2001: closed, TIC-2001: {mode: manual, output: 0 %}}", False),
        ("{TIC-2001: {mode: manual, output: 0 %}}", False),
        ("{TV-2001: closed, XV-2003: closed}", True),
    ],
)
def test_an_interlock_does_not_stand_against_the_loss_of_all_that_it_moves(
    tmp_path: Path, actions: str, stands: bool
) -> None:
    plant = written(tmp_path, HEATED % actions)
    for failure in (Failure.OUTPUT_LOST, Failure.MOTIVE_POWER_LOST, Failure.CONTROL_POWER_LOST):
        (told,) = effect(plant, "TIC-2001", failure).consequences
        assert (told.direction, told.hazardous) == (1, True)
        assert [one.interlock.tag for one in told.trips] == (["IS-2001"] if stands else []), failure
    # With a wrong reading the valve itself is sound, and the safety system shuts it by its own transmitter.
    (told,) = effect(plant, "TIC-2001", Failure.MEASUREMENT_LOW).consequences
    assert [one.interlock.tag for one in told.trips] == ["IS-2001"]


def test_the_transmitters_of_the_safety_system_stand_against_a_failed_controller(tarn: Plant) -> None:
    # PT-2021 too low: nitrogen in, vent shut, the pressure rises. PT-2023A, B and C measure it for IS-2001 (2oo3),
    # PT-2017 for the alarm of PI-2017; PIC-2021's own alarm hangs on the failed transmitter.
    (told,) = effect(tarn, "PIC-2021", Failure.MEASUREMENT_LOW).consequences
    assert [trip.initiator.tag for trip in told.trips] == ["PT-2023A", "PT-2023B", "PT-2023C"]
    assert [(one.loop.tag, one.alarm.kind) for one in told.alarms] == [("PI-2017", "high")]


def test_a_trip_on_the_failed_transmitter_does_not_count(tarn: Plant) -> None:
    # FT-1017 too high: the pump slows down. IS-1002 watches the circulation by the same FT-1017, and the level.
    (told,) = effect(tarn, "FIC-1017", Failure.MEASUREMENT_HIGH).consequences
    assert (told.direction, told.hazardous, told.alarms, told.trips) == (-1, True, (), ())


def test_an_alarm_beyond_what_the_primary_can_ask_does_not_come(tarn: Plant) -> None:
    # PT-3010 too low: PIC-3010 asks for hot oil up to its output limit of 285 t/h; FIC-3011 alarms at 315 t/h.
    told = {one.loop.tag: one for one in effect(tarn, "PIC-3010", Failure.MEASUREMENT_LOW).consequences}
    assert told["FIC-3011"].direction == 1
    assert told["FIC-3011"].alarms == ()
    assert [(one.loop.tag, one.alarm.kind) for one in told["PIC-3010"].alarms] == [("PIC-3015", "high")]
    # FT-3011 too low: nothing holds the true flow back, but its alarm hangs on the failed transmitter. LT-1010 too
    # high: LIC-1010 asks for no less than 2 t/h; FIC-1002 alarms on the way, at 6 t/h.
    told = {one.loop.tag: one for one in effect(tarn, "LIC-1010", Failure.MEASUREMENT_HIGH).consequences}
    assert [one.alarm.kind for one in told["FIC-1002"].alarms] == ["low"]


def test_a_limit_of_what_a_sum_adds_is_no_limit_of_the_setpoint(tarn: Plant) -> None:
    # LIC-3001 may trim the steam flow by 5 t/h: the setpoint of FIC-3003 is not 5 t/h then.
    (move,) = effect(tarn, "LIC-3001", Failure.MEASUREMENT_LOW).setpoints
    assert (move.loop.tag, move.alone) == ("FIC-3003", False)
    (move,) = effect(tarn, "PIC-3010", Failure.MEASUREMENT_LOW).setpoints
    assert (move.loop.tag, move.alone) == ("FIC-3011", True)


# ---------------------------------------------------------------- functions on the way, by hand

FED_FORWARD = """
format: 1
site: {{name: Fellside}}
revision: {{code: A, date: 2026-11-20, status: issued for review}}
units: {{"30": {{name: Steam}}}}
loops:
  FI-3002: {{unit: "30", measurement: {{transmitter: FT-3002, variable: flow, range: 0 to 20 t/h}}}}
  FIC-3003:
    unit: "30"
    measurement: {{transmitter: FT-3003, variable: flow, range: 0 to 25 t/h}}
    controller: {{action: reverse, output: {{to: FY-3005}}, modes: {{normal: cascade}}}}
    process: {{effect: rises}}
final_elements:
  FV-3003: {{unit: "30", kind: control valve, opens_on: rising signal}}
functions:
  FY-3001: {{kind: lead-lag, inputs: [FT-3002], lag: 5 s, to: FY-3002}}
  FY-3002: {{kind: characteriser, to: FY-3003, curve: [{{at: 0 t/h, gives: {low}}}, {{at: 20 t/h, gives: {high}}}]}}
  FY-3003: {{kind: sum, weights: {{FY-3002: {weight}}}, to: FIC-3003}}
  FY-3005: {{kind: characteriser, to: FV-3003, curve: [{{at: 0 %, gives: {shut}}}, {{at: 100 %, gives: {open}}}]}}
"""


@pytest.mark.parametrize("weight", [1.0, -0.5])
@pytest.mark.parametrize(("low", "high"), [("0 t/h", "18 t/h"), ("18 t/h", "0 t/h")])
@pytest.mark.parametrize(("shut", "open_"), [("0 %", "100 %"), ("100 %", "0 %")])
def test_a_reading_is_followed_through_every_function_behind_it(
    weight: float, low: str, high: str, shut: str, open_: str, tmp_path: Path
) -> None:
    plant = written(tmp_path, FED_FORWARD.format(weight=weight, low=low, high=high, shut=shut, open=open_))
    found = effect(plant, "FI-3002", Failure.MEASUREMENT_HIGH)

    asked = (1 if weight > 0 else -1) * (1 if low == "0 t/h" else -1)
    (setpoint,) = found.setpoints
    assert (setpoint.loop.tag, setpoint.by, setpoint.direction) == ("FIC-3003", "FY-3003", asked)
    (move,) = found.elements
    # The flow controller raises its output for a higher setpoint; a falling curve shuts the valve by it.
    assert (move.element.tag, move.direction) == ("FV-3003", asked * (1 if shut == "0 %" else -1))
