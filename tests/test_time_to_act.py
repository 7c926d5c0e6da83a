"""The time from alarm to trip: crossings against closed forms and python-control, and what precedes what by hand."""

from __future__ import annotations

import math
import subprocess
import sys
import warnings
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from loopdoc.engineering.crossing import crossing_times
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.process import Process
from loopdoc.engineering.time_to_act import AlarmToTrip, TimeToAct
from loopdoc.register.load import Loaded, load

with warnings.catch_warnings():
    # python-control looks for optional packages with calls that newer Pythons deprecate.
    warnings.simplefilter("ignore")
    import control


def crossing(path: Process, *, size: float, limit: float, ramp_s: float = 0.0) -> float:
    found = crossing_times([path], size_pct=np.array([size]), ramp_s=np.array([ramp_s]), limit_pct=np.array([limit]))
    return float(found[0])


# --- when a limit is passed ----------------------------------------------------------------------


def test_a_lag_with_dead_time() -> None:
    # 20 (1 - e^(-t/540)) = 5 after 90 s of dead time
    assert crossing(Process(2.0, (540.0,), 90.0), size=10.0, limit=5.0) == pytest.approx(
        90.0 - 540.0 * math.log(1.0 - 5.0 / 20.0), rel=1e-11
    )


def test_an_integration() -> None:
    assert crossing(Process(-0.01, (), 3.0, integrating=True), size=10.0, limit=-20.0) == pytest.approx(
        203.0, rel=1e-12
    )


def test_an_integration_behind_a_lag() -> None:
    # 0.2 (t - 5 (1 - e^(-t/5))) = 1
    expected = brentq(lambda t: 0.2 * (t - 5.0 * (1.0 - math.exp(-t / 5.0))) - 1.0, 1.0, 100.0, xtol=1e-12)
    assert crossing(Process(0.02, (5.0,), integrating=True), size=10.0, limit=1.0) == pytest.approx(expected, rel=1e-10)


def test_two_equal_lags() -> None:
    expected = brentq(lambda x: 1.0 - (1.0 + x) * math.exp(-x) - 0.5, 0.1, 10.0, xtol=1e-14) * 4.0
    assert crossing(Process(1.0, (4.0, 4.0)), size=10.0, limit=5.0) == pytest.approx(expected, rel=1e-10)


def test_a_final_element_that_takes_its_time() -> None:
    # 70 % in 7 s at 10 %/s; of an element alone the limit of 25 % is passed after 2.5 s.
    assert crossing(Process(1.0, (), 0.5), size=70.0, limit=25.0, ramp_s=7.0) == pytest.approx(3.0, rel=1e-12)
    # Behind a lag of 5 s, while it moves: 10 (t - 5 (1 - e^(-t/5))) = 20
    moving = brentq(lambda t: 10.0 * (t - 5.0 * (1.0 - math.exp(-t / 5.0))) - 20.0, 0.1, 7.0, xtol=1e-13)
    assert crossing(Process(1.0, (5.0,)), size=70.0, limit=20.0, ramp_s=7.0) == pytest.approx(moving, rel=1e-10)
    # And after it has arrived: 70 - (rest at 7 s) e^(-(t-7)/5) = 60
    rest = 70.0 - 10.0 * (7.0 - 5.0 * (1.0 - math.exp(-7.0 / 5.0)))
    arrived = 7.0 + 5.0 * math.log(rest / 10.0)
    assert crossing(Process(1.0, (5.0,)), size=70.0, limit=60.0, ramp_s=7.0) == pytest.approx(arrived, rel=1e-10)


def test_an_inverse_response_passes_a_limit_on_the_wrong_side_first() -> None:
    # (1 - 3 s)/((6 s + 1)(2 s + 1)): 1 - 9/4 e^(-t/6) + 5/4 e^(-t/2), at its lowest where 3/8 e^(-t/6) = 5/8 e^(-t/2).
    def response(t: float) -> float:
        return 10.0 * (1.0 - 9.0 / 4.0 * math.exp(-t / 6.0) + 5.0 / 4.0 * math.exp(-t / 2.0))

    lowest = 3.0 * math.log(5.0 / 3.0)
    wrong = brentq(lambda t: response(t) + 1.0, 0.0, lowest, xtol=1e-13)
    right = brentq(lambda t: response(t) - 5.0, lowest, 60.0, xtol=1e-13)
    path = Process(1.0, (6.0, 2.0), 0.0, (-3.0,))
    assert crossing(path, size=10.0, limit=-1.0) == pytest.approx(wrong, rel=1e-9)
    assert crossing(path, size=10.0, limit=5.0) == pytest.approx(right, rel=1e-10)
    assert crossing(path, size=10.0, limit=1.01 * response(lowest)) == math.inf


@pytest.mark.parametrize(
    ("path", "size", "limit"),
    [
        (Process(2.0, (10.0,)), 5.0, 10.1),
        (Process(2.0, (10.0,)), 5.0, -1.0),
        (Process(0.1, (10.0,), integrating=True), -5.0, 1.0),
        (Process(1.0), 5.0, 6.0),
    ],
)
def test_a_limit_that_is_never_reached(path: Process, size: float, limit: float) -> None:
    assert crossing(path, size=size, limit=limit) == math.inf


def test_a_limit_at_the_start_is_refused() -> None:
    with pytest.raises(ValueError, match="at the start itself"):
        crossing(Process(1.0, (5.0,)), size=10.0, limit=0.0)


@settings(max_examples=60, deadline=None)
@given(
    gain=st.floats(0.1, 10.0),
    lags=st.lists(st.floats(0.5, 500.0), min_size=1, max_size=3),
    dead=st.floats(0.0, 100.0),
    ramp=st.floats(0.0, 50.0),
    share=st.floats(0.02, 0.95),
)
def test_properties_of_a_crossing(gain: float, lags: list[float], dead: float, ramp: float, share: float) -> None:
    path, quick = Process(gain, tuple(lags), dead), Process(gain, tuple(lags))
    limit = 10.0 * gain * share
    time_s = crossing(path, size=10.0, limit=limit, ramp_s=ramp)
    # Dead time postpones; size and limit scale together; a slower element comes later; a nearer limit sooner.
    assert crossing(quick, size=10.0, limit=limit, ramp_s=ramp) == pytest.approx(time_s - dead, rel=1e-8, abs=1e-8)
    assert crossing(path, size=-20.0, limit=-2.0 * limit, ramp_s=ramp) == pytest.approx(time_s, rel=1e-8)
    assert crossing(path, size=10.0, limit=limit) <= time_s * (1.0 + 1e-9)
    assert crossing(path, size=10.0, limit=0.9 * limit, ramp_s=ramp) < time_s


# --- a plant -------------------------------------------------------------------------------------

PLANT = """\
format: 1
site: {name: Test plant}
revision: {code: A, date: 2026-01-01, status: issued for review}
units:
  "20": {name: Test unit}
loops:
  TIC-2014:
    unit: "20"
    service: Tray temperature
    measurement: {transmitter: TT-2014, variable: temperature, range: 60 to 120 degC, filter: 6 s}
    operating: {normal: 84 degC}
    controller:
      action: reverse
      gain: 1.8
      output: {to: FIC-2011, span: 0 to 12 t/h}
    process: {effect: rises, gain: 5.5 degC per t/h, lag: 9 min, dead_time: 1.5 min}
    disturbances:
      reflux lost: {size: 40 degC, lag: 3 min}
    alarms:
      high: {limit: 94 degC, delay: 10 s}
  FIC-2011:
    unit: "20"
    service: Steam flow
    measurement: {transmitter: FT-2011, variable: flow, range: 0 to 15 t/h}
    operating: {normal: 7.2 t/h}
    controller:
      action: reverse
      gain: 0.5
      output: {to: FV-2011, low: 10 %, high: 90 %}
    process: {effect: rises, gain: 0.18 t/h per %, lag: 4 s, dead_time: 1 s}
    disturbances:
      steam pressure jumps: {size: 5 t/h}
final_elements:
  FV-2011: {unit: "20", kind: control valve, opens_on: rising signal, stroke_time: 20 s}
interlocks:
  IS-2001:
    unit: "20"
    layer: process
    initiators: {TT-2014: {trips: above 100 degC, delay: 2 s}}
    actions: {FV-2011: closed}
"""


def plant_of(folder: Path, text: str = PLANT) -> Plant:
    (folder / "register.yaml").write_text(text, "utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    assert loaded.faults == ()
    return Plant(loaded.register)


def only(folder: Path, text: str = PLANT) -> AlarmToTrip:
    (found,) = TimeToAct(plant_of(folder, text)).all
    return found


def by_upset(found: AlarmToTrip) -> dict[str, tuple[float, float]]:
    return {time.upset: (time.alarm_s, time.trip_s) for time in found.times}


def seen_at(response: control.TimeResponseData, limit: float) -> float:
    """Time at which a rising response passes a limit, between samples in a straight line."""
    at = int(np.argmax(response.outputs >= limit))
    t, y = response.time, response.outputs
    return float(t[at - 1] + (limit - y[at - 1]) / (y[at] - y[at - 1]) * (t[at] - t[at - 1]))


def test_upsets_of_a_cascade_against_python_control(tmp_path: Path) -> None:
    times = by_upset(only(tmp_path))
    assert set(times) == {"FV-2011 opens fully", "reflux lost", "steam pressure jumps (FIC-2011)"}
    s = control.tf("s")
    outer, filtered = 5.5 / (540 * s + 1), 1 / (6 * s + 1)
    t = np.arange(0.0, 900.0, 0.05)
    # 7.2 / 0.18 = 40 % open: 60 % more in 12 s. The dead times, 91 and 90 s, are added; then the delays.
    opening = control.forced_response(0.18 / (4 * s + 1) * outer * filtered, t, np.minimum(5.0 * t, 60.0))
    jump = control.forced_response(1 / (4 * s + 1) * outer * filtered, t, np.full_like(t, 5.0))
    lost = control.forced_response(1 / (180 * s + 1) * filtered, t, np.full_like(t, 40.0))
    for upset, response, dead_s in (
        ("FV-2011 opens fully", opening, 91.0),
        ("steam pressure jumps (FIC-2011)", jump, 90.0),
        ("reflux lost", lost, 0.0),
    ):
        alarm_s, trip_s = times[upset]
        # Straight lines between samples of 0.05 s on lags of 3 minutes and more.
        assert alarm_s == pytest.approx(seen_at(response, 10.0) + dead_s + 10.0, abs=1e-3)
        assert trip_s == pytest.approx(seen_at(response, 16.0) + dead_s + 2.0, abs=1e-3)


def test_the_shortest_is_told_and_none_where_no_upset_reaches_the_trip(tmp_path: Path) -> None:
    found = only(tmp_path)
    assert found.shortest is not None
    assert found.shortest.upset == "reflux lost"
    # 40 degC through 3 min: 180 ln(30/24) = 40.2 s apart, less 8 s of delays.
    assert found.shortest.available_s == pytest.approx(180.0 * math.log(30.0 / 24.0) - 8.0, abs=0.05)
    mild = PLANT.replace("size: 40 degC", "size: 12 degC").replace("size: 5 t/h", "size: 2 t/h")
    small = only(tmp_path, mild.replace("normal: 7.2 t/h", "normal: 16.2 t/h"))
    assert small.shortest is None
    # 2 t/h make 11 degC, 90 % open leaves 10 %: 9.9 degC, which reaches neither.
    assert {upset for upset, (_, trip_s) in by_upset(small).items() if math.isfinite(trip_s)} == set()
    assert set(by_upset(small)) == {"reflux lost", "steam pressure jumps (FIC-2011)"}


def test_units_are_converted(tmp_path: Path) -> None:
    other = (
        PLANT.replace("limit: 94 degC", "limit: 201.2 degF")
        .replace("above 100 degC", "above 212 degF")
        .replace("size: 40 degC", "size: 72 degF")
        .replace("size: 5 t/h", "size: 5000 kg/h")
        .replace("normal: 84 degC", "normal: 183.2 degF")
    )
    for upset, times in by_upset(only(tmp_path, other)).items():
        assert times == pytest.approx(by_upset(only(tmp_path))[upset], rel=1e-9)


def test_a_load_at_the_process_input(tmp_path: Path) -> None:
    text = PLANT.replace("size: 40 degC, lag: 3 min", "size: 4 t/h, at: process input")
    alarm_s, trip_s = by_upset(only(tmp_path, text))["reflux lost"]
    # 4 t/h make 22 degC through the 540 s and the filter: both limits are passed 540 ln(12/6) apart, less 8 s.
    assert trip_s - alarm_s == pytest.approx(540.0 * math.log(2.0) - 8.0, rel=1e-6)


def test_a_disturbance_without_a_lag_comes_through_that_of_the_process(tmp_path: Path) -> None:
    alarm_s, trip_s = by_upset(only(tmp_path, PLANT.replace("size: 40 degC, lag: 3 min", "size: 40 degC")))[
        "reflux lost"
    ]
    assert trip_s - alarm_s == pytest.approx(540.0 * math.log(30.0 / 24.0) - 8.0, rel=1e-6)


TWIN = """\
  TI-2015:
    unit: "20"
    service: Tray temperature, second transmitter
    measurement: {transmitter: TT-2015, variable: temperature, range: 0 to 150 degC}
    operating: {normal: 85 degC}
    alarms:
      high: {limit: 95 degC}
final_elements:
"""


def test_an_indicator_moves_with_the_loop_that_measures_the_same(tmp_path: Path) -> None:
    found = TimeToAct(plant_of(tmp_path, PLANT.replace("final_elements:\n", TWIN))).all
    assert [entry.loop.tag for entry in found] == ["TIC-2014", "TI-2015"]
    own, twin = (by_upset(entry)["reflux lost"] for entry in found)
    # 10 degC away like its twin, but without the filter (about 6 s late) and the delay of 10 s.
    assert twin[0] == pytest.approx(-180.0 * math.log(30.0 / 40.0), rel=1e-9)
    assert twin[0] + 16.0 == pytest.approx(own[0], abs=0.5)
    assert twin[1] == own[1]


def test_another_quantity_is_not_the_same(tmp_path: Path) -> None:
    text = PLANT.replace("final_elements:\n", TWIN.replace("service: Tray temperature", "service: Tray 8 temperature"))
    assert [entry.loop.tag for entry in TimeToAct(plant_of(tmp_path, text)).all] == ["TIC-2014"]


VOTED = """\
instruments:
  TT-2016A: {unit: "20", service: "Tray temperature, A", variable: temperature, range: 0 to 150 degC}
  TT-2016B: {unit: "20", service: "Tray temperature, B", variable: temperature, range: 0 to 150 degC}
  TT-2016C: {unit: "20", service: "Tray temperature, C", variable: temperature, range: 0 to 150 degC}
interlocks:
  IS-2001:
    unit: "20"
    layer: process
    initiators:
      TT-2016A: {trips: above 100 degC, delay: 1 s}
      TT-2016B: {trips: above 100 degC, delay: 5 s}
      TT-2016C: {trips: above 100 degC, delay: 30 s}
    voting: VOTING
"""


@pytest.mark.parametrize(("voting", "delay_s"), [("1oo3", 1.0), ("2oo3", 5.0), ("3oo3", 30.0)])
def test_an_interlock_trips_when_enough_of_its_initiators_do(tmp_path: Path, voting: str, delay_s: float) -> None:
    before = PLANT[: PLANT.index("interlocks:")]
    text = before + VOTED.replace("VOTING", voting) + "    actions: {FV-2011: closed}\n"
    trip_s = by_upset(only(tmp_path, text))["reflux lost"][1]
    assert trip_s == pytest.approx(-180.0 * math.log(24.0 / 40.0) + delay_s, rel=1e-9)


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("trips: above 100 degC", "trips: below 70 degC"),  # the other side
        ("limit: 94 degC", "limit: 101 degC"),  # beyond the trip
        ("limit: 94 degC", "limit: 83 degC"),  # raised in normal operation
        ("high: {limit: 94 degC", "deviation: {limit: 4 degC"),  # on the distance from the setpoint
    ],
)
def test_an_alarm_that_does_not_precede_the_trip_has_no_time(tmp_path: Path, old: str, new: str) -> None:
    assert TimeToAct(plant_of(tmp_path, PLANT.replace(old, new))).all == ()


@pytest.mark.parametrize(
    ("old", "new", "upset", "reason"),
    [
        ("operating: {normal: 84 degC}\n", "operating: {}\n", "every upset", "the normal value of TIC-2014"),
        ("above 100 degC", "above 16 barg", "every upset", "the limits are in units of another kind"),
        (", delay: 2 s}}", ", delay: 2 s}}\n    voting: 2oo2", "every upset", "IS-2001 trips only together with other"),
        ("size: 40 degC", "size: {hold: awaiting the study}", "reflux lost", "its size, or the range of TIC-2014"),
        ("lag: 3 min", "lag: {hold: awaiting the study}", "reflux lost", "its lag is on hold"),
        ("gain: 5.5 degC per t/h", "gain: {hold: step test}", "FV-2011 at its limits", "the process gain of TIC-2014"),
        ("gain: 0.18 t/h per %", "gain: {hold: step test}", "FV-2011 at its limits", "the process gain of FIC-2011"),
    ],
)
def test_what_does_not_follow_is_said_so(tmp_path: Path, old: str, new: str, upset: str, reason: str) -> None:
    assert PLANT.count(old) == 1
    found = only(tmp_path, PLANT.replace(old, new))
    reasons = {entry.upset: entry.reason for entry in found.not_decided}
    assert reasons[upset].startswith(reason)
    assert upset not in by_upset(found)


def test_an_opening_that_does_not_follow_is_taken_at_its_worst(tmp_path: Path) -> None:
    text = PLANT.replace("variable: flow", "variable: pressure").replace("0 to 15 t/h", "0 to 15 barg")
    text = text.replace("0 to 12 t/h", "0 to 12 barg").replace("5.5 degC per t/h", "5.5 degC per bar")
    text = text.replace("7.2 t/h", "7.2 barg").replace("0.18 t/h per %", "0.18 bar per %").replace("5 t/h", "5 bar")
    found = only(tmp_path, text)
    time = next(time for time in found.times if time.upset == "FV-2011 opens fully")
    assert time.at_least
    # The whole travel makes 18 bar and 99 degC; the small lags bear on both limits alike.
    assert time.available_s == pytest.approx(540.0 * math.log(89.0 / 83.0) - 8.0, abs=0.5)


def test_a_register_without_alarms_before_trips_needs_no_numpy(tmp_path: Path) -> None:
    (tmp_path / "register.yaml").write_text(PLANT.replace("limit: 94", "limit: 101"), "utf-8")
    program = (
        "import sys; from pathlib import Path; from loopdoc.register.load import load; "
        "from loopdoc.engineering.pairing import Plant; from loopdoc.engineering.time_to_act import TimeToAct; "
        f"assert TimeToAct(Plant(load(Path({str(tmp_path)!r})).register)).all == (); assert 'numpy' not in sys.modules"
    )
    subprocess.run([sys.executable, "-c", program], check=True, cwd=Path(__file__).parent.parent)
