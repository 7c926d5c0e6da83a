"""The Tennessee Eastman example says what the publications say.

Sources:
  Tables 3 to 6 of J. J. Downs, E. F. Vogel: A plant-wide industrial process control problem. Computers &
  Chemical Engineering 17(3):245-255, 1993; teprob.f of the same authors (revision 4-4-91) for the level
  scales and the lags of the valves; temain_mod.f of E. L. Russell, L. H. Chiang and R. D. Braatz (1998-2002)
  for the controllers, cited with their Fault Detection and Diagnosis in Industrial Systems, Springer 2001.
"""

from __future__ import annotations

import re
from pathlib import Path
from typing import NamedTuple, TypeVar

import pytest

from loopdoc.engineering.pairing import Plant
from loopdoc.register.load import Loaded, load
from loopdoc.register.model import Controller, Hold, Loop, Register
from loopdoc.register.quantity import Quantity, Range
from loopdoc.rules.check import check
from loopdoc.rules.finding import CheckResult

T = TypeVar("T")

FOLDER = Path(__file__).parent.parent / "examples" / "tennessee-eastman"

# The register writes numbers as published; only thirds and sevenths are rounded, to seven digits.
ROUNDED = 1e-6


@pytest.fixture(scope="module")
def register() -> Register:
    loaded = load(FOLDER)
    assert isinstance(loaded, Loaded)
    assert loaded.faults == ()
    return loaded.register


class Published(NamedTuple):
    """One controller of temain_mod.f, with the lines of its gain and setpoint as they stand there."""

    number: int
    """n of CONTRLn."""
    tag: str
    xmeas: int
    gain: float
    """Factor of the error in percent of `error_span`, error = setpoint - measurement."""
    reset_h: float | None
    """TAUI in GAIN * ((E - Eold) + E * DELTAT * n / TAUI), where DELTAT is 1/3600 h: so TAUI is in hours."""
    interval_s: float
    setpoint: float
    error_span: float
    unit: str
    output: str
    """XMV(n) for a valve, SETPT(n) for the setpoint of CONTRLn."""
    output_span: float | None
    """What 100 % of the increment adds to the setpoint of the secondary."""


CONTROLLERS = (
    Published(1, "FIC-1002", 2, 1.0, None, 3, 3664.0, 5811, "kg/h", "XMV(1)", None),
    Published(2, "FIC-1003", 3, 1.0, None, 3, 4509.3, 8354, "kg/h", "XMV(2)", None),
    Published(3, "FIC-1001", 1, 1.0, None, 3, 0.25052, 1.017, "kscmh", "XMV(3)", None),
    Published(4, "FIC-1004", 4, 1.0, None, 3, 9.3477, 15.25, "kscmh", "XMV(4)", None),
    Published(5, "FIC-3005", 5, -0.083, 1 / 3600, 3, 26.902, 53, "kscmh", "XMV(5)", None),
    Published(6, "FIC-3010", 10, 1.22, None, 3, 0.33712, 1, "kscmh", "XMV(6)", None),
    Published(7, "LIC-3012", 12, -2.06, None, 3, 50, 70, "%", "XMV(7)", None),
    Published(8, "LIC-4015", 15, -1.62, None, 3, 50, 70, "%", "XMV(8)", None),
    Published(9, "FIC-4019", 19, 0.41, None, 3, 230.31, 460, "kg/h", "XMV(9)", None),
    Published(10, "TIC-2021", 21, -0.156 * 10, 1452 / 3600, 3, 94.599, 150, "degC", "XMV(10)", None),
    Published(11, "FIC-4017", 17, 1.09, 2600 / 3600, 3, 22.949, 46, "m3/h", "XMV(11)", None),
    Published(13, "AIC-2023", 23, 18.0, 3168 / 3600, 360, 32.188, 100, "mol%", "SETPT(3)", 1.017),
    Published(14, "AIC-2026", 26, 8.3, 3168 / 3600, 360, 6.882, 100, "mol%", "SETPT(1)", 5811),
    Published(15, "AIC-2027", 27, 2.37, 5069 / 3600, 360, 18.776, 100, "mol%", "SETPT(2)", 8354),
    Published(16, "TIC-4018", 18, 1.69 / 10, 236 / 3600, 3, 65.731, 130, "degC", "SETPT(9)", 460),
    Published(17, "LIC-2008", 8, 11.1 / 10, 3168 / 3600, 3, 75, 50, "%", "SETPT(4)", 15.25),
    Published(18, "TIC-2009", 9, 2.83 * 10, 982 / 3600, 3, 120.4, 150, "degC", "SETPT(10)", 150),
    Published(19, "AIC-3030", 30, -83.2 / 5 / 3, 6336 / 3600, 360, 13.823, 26, "mol%", "SETPT(6)", 1),
    Published(20, "AIC-4038", 38, -16.3 / 5, 12408 / 3600, 900, 0.8357, 1.6, "mol%", "SETPT(16)", 130),
)
SECONDARIES = {f"SETPT({published.number})": published.tag for published in CONTROLLERS}

each_controller = pytest.mark.parametrize("published", CONTROLLERS, ids=lambda published: published.tag)


def _given(value: T | Hold | None) -> T:
    assert value is not None
    assert not isinstance(value, Hold)
    return value


def _controller(loop: Loop) -> Controller:
    return _given(loop.controller)


def _value(quantity: Quantity | Hold | None, unit: str) -> float:
    given = _given(quantity)
    assert given.unit.symbol == unit
    return given.value


def _range(register: Register, tag: str) -> Range:
    return _given(_given(register.loops[tag].measurement).range)


def _normal_mode(loop: Loop) -> str:
    return _given(_given(_controller(loop).modes).normal)


def test_every_called_controller_of_the_program_is_in_service_and_no_other(register: Register) -> None:
    in_service = {
        tag
        for tag, loop in register.loops.items()
        if loop.controller is not None and _normal_mode(loop) != "out of service"
    }
    assert in_service == {published.tag for published in CONTROLLERS}


@each_controller
def test_service_names_the_controller_and_its_measurement(register: Register, published: Published) -> None:
    service = _given(register.loops[published.tag].service)
    assert service.endswith(f"(XMEAS({published.xmeas}), CONTRL{published.number})")


@each_controller
def test_gain_and_action_are_the_program_s(register: Register, published: Published) -> None:
    controller = _controller(register.loops[published.tag])
    # The program's gain is per percent of its error span, the register's per percent of the range.
    per_error_span = _given(controller.gain) * published.error_span / _range(register, published.tag).span
    assert per_error_span == pytest.approx(abs(published.gain), rel=ROUNDED)
    # Error = setpoint - measurement: a positive gain raises the output as the measurement falls.
    assert controller.action == ("reverse" if published.gain > 0 else "direct")


@each_controller
def test_reset_is_the_program_s_in_hours(register: Register, published: Published) -> None:
    reset = _controller(register.loops[published.tag]).reset
    if published.reset_h is None:
        assert reset is None
    else:
        # One conversion of a whole number of seconds.
        assert _given(reset).to("h") == pytest.approx(published.reset_h, rel=1e-12)


@each_controller
def test_interval_and_setpoint_are_the_program_s(register: Register, published: Published) -> None:
    controller = _controller(register.loops[published.tag])
    assert _value(controller.interval, "s") == published.interval_s
    assert _value(_given(controller.setpoint).normal, published.unit) == published.setpoint


@each_controller
def test_range_is_the_error_span_or_the_scale_of_a_level(register: Register, published: Published) -> None:
    span = _range(register, published.tag)
    assert span.unit.symbol == published.unit
    assert span.low == 0
    # Table 4 gives the levels in percent; their errors are scaled by the operating band of Table 6.
    assert span.high == (100 if published.unit == "%" else published.error_span)


@each_controller
def test_output_goes_where_the_program_writes(register: Register, published: Published) -> None:
    controller = _controller(register.loops[published.tag])
    output = _given(controller.output)
    if published.output_span is None:
        service = _given(register.final_elements[_given(output.to)].service)
        assert f"({published.output})" in service
        assert (_value(output.low, "%"), _value(output.high, "%")) == (0, 100)  # subroutine CONSHAND
    else:
        assert output.to == SECONDARIES[published.output]
        span = _given(output.span)
        assert (span.low, span.high) == (0, published.output_span)
        assert (output.low, output.high) == (None, None)  # the program does not limit setpoints
        assert controller.when_not_followed == "nothing"


@each_controller
def test_cascade_exactly_where_a_controller_writes_the_setpoint(register: Register, published: Published) -> None:
    commanded = f"SETPT({published.number})" in {other.output for other in CONTROLLERS}
    assert _normal_mode(register.loops[published.tag]) == ("cascade" if commanded else "automatic")


def test_the_controller_that_is_never_called_is_out_of_service(register: Register) -> None:
    # CONTRL22: XMEAS(13) to XMV(6), GAIN22 = -1.0 * 5. on an error in kPa, TAUI22 = 1000./3600. h, SETPT(12)
    loop = register.loops["PIC-3013"]
    controller = _controller(loop)
    assert _normal_mode(loop) == "out of service"
    assert controller.action == "direct"
    assert isinstance(controller.gain, Hold)
    assert _value(controller.reset, "s") == 1000
    assert _value(_given(controller.setpoint).normal, "kPag") == 2633.7
    assert _given(controller.output).to == "FV-3010"


# Tables 4 and 5: base case of XMEAS(1) to XMEAS(41).
BASE_CASE = (
    (0.25052, "kscmh"), (3664.0, "kg/h"), (4509.3, "kg/h"), (9.3477, "kscmh"), (26.902, "kscmh"),
    (42.339, "kscmh"), (2705.0, "kPag"), (75.0, "%"), (120.4, "degC"), (0.33712, "kscmh"),
    (80.109, "degC"), (50.0, "%"), (2633.7, "kPag"), (25.16, "m3/h"), (50.0, "%"),
    (3102.2, "kPag"), (22.949, "m3/h"), (65.731, "degC"), (230.31, "kg/h"), (341.43, "kW"),
    (94.599, "degC"), (77.297, "degC"),
    (32.188, "mol%"), (8.8933, "mol%"), (26.383, "mol%"), (6.882, "mol%"), (18.776, "mol%"), (1.6567, "mol%"),
    (32.958, "mol%"), (13.823, "mol%"), (23.978, "mol%"), (1.2565, "mol%"), (18.579, "mol%"),
    (2.2633, "mol%"), (4.8436, "mol%"), (2.2986, "mol%"),
    (0.01787, "mol%"), (0.8357, "mol%"), (0.09858, "mol%"), (53.724, "mol%"), (43.828, "mol%"),
)  # fmt: skip


@pytest.mark.parametrize(("xmeas", "base_case"), list(enumerate(BASE_CASE, start=1)))
def test_every_measurement_stands_once_with_its_base_case(
    register: Register, xmeas: int, base_case: tuple[float, str]
) -> None:
    (loop,) = (loop for loop in register.loops.values() if f"(XMEAS({xmeas})" in str(loop.service))
    assert re.fullmatch(rf"[A-Z]{{2,3}}-\d\d{xmeas:02}", loop.tag)
    value, unit = base_case
    assert _value(_given(loop.operating).normal, unit) == value


def test_there_are_no_other_measurements(register: Register) -> None:
    assert len(register.loops) == len(BASE_CASE)
    assert not register.instruments


# Table 5: the dead time, equal to the sampling interval [h].
DEAD_TIMES_H = {xmeas: 0.25 if xmeas >= 37 else 0.1 for xmeas in range(23, 42)}


@pytest.mark.parametrize(("xmeas", "dead_time_h"), list(DEAD_TIMES_H.items()))
def test_analysers_carry_their_sampling(register: Register, xmeas: int, dead_time_h: float) -> None:
    (loop,) = (loop for loop in register.loops.values() if f"(XMEAS({xmeas})" in str(loop.service))
    assert f"sampled every {dead_time_h:g} h" in _given(loop.purpose).lower()
    if loop.controller is not None:
        assert _value(_given(loop.process).dead_time, "h") == dead_time_h
        # One conversion of a whole number of seconds.
        assert _given(_controller(loop).interval).to("h") == pytest.approx(dead_time_h, rel=1e-12)


# Table 3 (greatest flow of the valve) and the lags of the valves in teprob.f [s].
@pytest.mark.parametrize(
    ("tag", "valve", "greatest", "unit", "lag_s"),
    [
        ("FIC-1001", "XMV(3)", 1.017, "kscmh", 6),
        ("FIC-1002", "XMV(1)", 5811, "kg/h", 8),
        ("FIC-1003", "XMV(2)", 8354, "kg/h", 8),
        ("FIC-1004", "XMV(4)", 15.25, "kscmh", 9),
        # Not in Table 3: teprob.f with this valve at 100 % and all else at the base case.
        ("FIC-3010", "XMV(6)", 0.84145, "kscmh", 5),
        ("FIC-4019", "XMV(9)", 485.41309, "kg/h", 120),
    ],
)
def test_flow_processes_are_the_valve_and_its_lag(
    register: Register, tag: str, valve: str, greatest: float, unit: str, lag_s: float
) -> None:
    loop = register.loops[tag]
    process = _given(loop.process)
    at_full_opening = _given(process.gain).in_units(unit, "%") * 100
    assert at_full_opening == pytest.approx(greatest, rel=1e-5)  # five digits are written
    assert [lag.to("s") for lag in _given(process.lags)] == [lag_s]
    element = _given(_given(_controller(loop).output).to)
    assert f"({valve})" in _given(register.final_elements[element].service)


def _level_pct(volume_m3: float, empty_ft3: float, span_ft3: float) -> float:
    """Level [%] of a volume, by the scales of teprob.f (35.3145 ft3 in a m3)."""
    return (volume_m3 * 35.3145 - empty_ft3) / span_ft3 * 100


# teprob.f: volume at 0 % and volume from 0 to 100 % [ft3] of XMEAS(8), XMEAS(12), XMEAS(15).
LEVEL_SCALES = {"2008": (84.6, 666.7), "3012": (27.5, 290.0), "4015": (78.25, 156.5)}


@pytest.mark.parametrize(
    ("tag", "greatest_m3_per_h", "number"), [("LIC-3012", 65.71, "3012"), ("LIC-4015", 49.1, "4015")]
)
def test_level_processes_are_the_flow_of_table_3_out_of_the_published_volume(
    register: Register, tag: str, greatest_m3_per_h: float, number: str
) -> None:
    process = _given(register.loops[tag].process)
    span_m3 = LEVEL_SCALES[number][1] / 35.3145
    per_second = -greatest_m3_per_h / 100 / span_m3 * 100 / 3600
    assert process.integrating
    # Four digits are written.
    assert _given(process.gain).in_units("%", "%") == pytest.approx(per_second, rel=5e-4)


# Table 6, shutdown limits. Levels in m3.
@pytest.mark.parametrize(
    ("interlock", "sensor", "direction", "limit", "unit"),
    [
        ("IS-2007", "PT-2007", "above", 3000, "kPag"),
        ("IS-2008H", "LT-2008", "above", 24.0, "m3"),
        ("IS-2008L", "LT-2008", "below", 2.0, "m3"),
        ("IS-2009", "TT-2009", "above", 175, "degC"),
        ("IS-3012H", "LT-3012", "above", 12.0, "m3"),
        ("IS-3012L", "LT-3012", "below", 1.0, "m3"),
        ("IS-4015H", "LT-4015", "above", 8.0, "m3"),
        ("IS-4015L", "LT-4015", "below", 1.0, "m3"),
        # temain_mod.f, the override in CONTRL6
        ("IS-3013H", "PT-3013", "above", 2950, "kPag"),
        ("IS-3013L", "PT-3013", "below", 2300, "kPag"),
    ],
)
def test_trips_are_the_published_limits(
    register: Register, interlock: str, sensor: str, direction: str, limit: float, unit: str
) -> None:
    (initiator,) = register.interlocks[interlock].initiators.values()
    assert initiator.tag == sensor
    assert initiator.direction == direction
    if unit == "m3":
        expected = _level_pct(limit, *LEVEL_SCALES[sensor[-4:]])
        assert _value(initiator.limit, "%") == pytest.approx(expected, abs=0.05)  # one decimal is written
    else:
        assert _value(initiator.limit, unit) == limit


def test_no_interlock_is_added_to_the_published_ones(register: Register) -> None:
    assert len(register.interlocks) == 10


# Table 6, normal operating limits.
@pytest.mark.parametrize(
    ("tag", "low", "high", "unit"),
    [
        ("PI-2007", None, 2895, "kPag"),
        ("LIC-2008", 50, 100, "%"),
        ("TIC-2009", None, 150, "degC"),
        ("LIC-3012", 30, 100, "%"),
        ("LIC-4015", 30, 100, "%"),
    ],
)
def test_operating_bands_are_the_published_limits(
    register: Register, tag: str, low: float | None, high: float, unit: str
) -> None:
    band = _given(register.loops[tag].operating)
    assert (band.low if low is None else _value(band.low, unit)) == low
    assert _value(band.high, unit) == high


def test_nothing_that_the_papers_leave_open_is_filled_in(register: Register) -> None:
    for element in register.final_elements.values():
        assert isinstance(element.fails, Hold)
        assert isinstance(element.safe, Hold)
    for loop in register.loops.values():
        assert not loop.alarms
        if loop.controller is not None:
            assert isinstance(_given(loop.measurement).on_fault, Hold)
            assert isinstance(_controller(loop).on_bad_measurement, Hold)


def _told_findings() -> dict[str, set[str]]:
    """Rule and tags of the table under "What the check finds" in the README."""
    readme = (FOLDER / "README.md").read_text(encoding="utf-8")
    told: dict[str, set[str]] = {}
    for rule, at in re.findall(r"^\| `([a-z-]+)` \| ([^|]+) \|", readme, re.MULTILINE):
        if at != "everywhere":
            told.setdefault(rule, set()).update(at.split(", "))
    return told


@pytest.fixture(scope="module")
def checked(register: Register) -> CheckResult:
    return check(Plant(register), ())


def test_the_readme_tells_what_the_check_finds(checked: CheckResult) -> None:
    told = _told_findings()
    assert told
    for rule, tags in told.items():
        assert {finding.tag for finding in checked.findings if finding.rule == rule} == tags


def test_published_actions_agree_with_the_balances(checked: CheckResult) -> None:
    # `effect` follows from balances, `action` from the sign of the published gain. The effect is held for
    # LIC-2008; CONTRL22, which is never called, comes on top.
    assert checked.coverage["action-wrong"].checked == len(CONTROLLERS) - 1 + 1
    assert not [finding for finding in checked.findings if finding.rule == "action-wrong"]
