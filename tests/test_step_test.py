"""A recorded test from its file to the register: reading, conversion, the report, the command."""

from __future__ import annotations

import io
import json
import math
import re
from pathlib import Path

import numpy as np
import pytest

from loopdoc.cli import run
from loopdoc.engineering.commanded import Commanded, commanded
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.stages import Lacking
from loopdoc.exchange.identified import rounded
from loopdoc.exchange.step_test import MAX_BYTES, StepTest, read_step_test
from loopdoc.register.load import Loaded, load
from loopdoc.register.place import Fault
from loopdoc.register.units import unit

HEAD = "time [s],output [%],measurement [degC]\n"


def read(text: str | bytes) -> StepTest:
    test = read_step_test(text if isinstance(text, bytes) else text.encode(), "a.csv")
    assert isinstance(test, StepTest), test
    return test


# --- reading -------------------------------------------------------------------------------------

SAME: dict[str, str | bytes] = {
    "commas": "time [s],output [%],measurement [degC]\n0,40,84.5\n5,45.5,84.6\n",
    "semicolons and decimal commas": "time [s];output [%];measurement [degC]\n0;40;84,5\n5;45,5;84,6\n",
    "tabs": "time [s]\toutput [%]\tmeasurement [degC]\n0\t40\t84.5\n5\t45.5\t84.6\n",
    "quotes, spaces, empty lines": 'time [s], "output [%]" ,measurement (degC)\n\n0, 40,"84.5"\n5,45.5 ,84.6\n\n',
    "another order and other columns": "mode,Measurement [degC],Time [s],OUTPUT [%]\nMAN,84.5,0,40\n,84.6,5,45.5\n",
    "minutes": "time [min],output [%],measurement [degC]\n10,40,84.5\n10.083333333333334,45.5,84.6\n",
    "ISO times": "time,output [%],measurement [degC]\n2026-05-14T10:00:00,40,84.5\n2026-05-14 10:00:05,45.5,84.6\n",
    "ISO times with zones": "time,output [%],measurement [degC]\n"
    "2026-05-14T10:00:00.5+02:00,40,84.5\n2026-05-14T08:00:05.5Z,45.5,84.6\n",
    "Windows": b"\xef\xbb\xbftime [s],output [%],measurement [degC]\r\n0,4e1,84.5\r\n5,+45.5,84.6\r\n",
}


@pytest.mark.parametrize("name", SAME)
def test_one_test_in_many_spellings(name: str) -> None:
    test = read(SAME[name])
    # A time in minutes is rounded in its last place.
    assert test.time_s == pytest.approx([0.0, 5.0], abs=1e-9)
    assert test.moved.tolist() == [40.0, 45.5]
    assert test.measurement.tolist() == [84.5, 84.6]
    assert (test.recorded, str(test.moved_unit), str(test.measurement_unit)) == ("output", "%", "degC")
    assert test.date == ("2026-05-14" if name.startswith("ISO") else "")


def test_the_column_says_what_was_moved() -> None:
    assert read("time [s],opening [%],measurement [degC]\n0,1,2\n").recorded == "opening"
    test = read("time [s],secondary [t/h],measurement [degC]\n0,1,2\n")
    assert (test.recorded, str(test.moved_unit)) == ("secondary", "t/h")


FAULTS: dict[str, tuple[str | bytes, int, int, str]] = {
    "empty": ("", 1, 1, "does not name columns"),
    "no columns": ("just words\n", 1, 1, "does not name columns"),
    "no time": ("output [%],measurement [degC]\n1,2\n", 1, 1, "no column `time`"),
    "no output": ("time [s],measurement [degC]\n1,2\n", 1, 1, "no column `output`"),
    "no unit": ("time [s],output,measurement [degC]\n1,2,3\n", 1, 10, "the column `output` has no unit"),
    "unknown unit": ("time [s],output [%],measurement [C]\n1,2,3\n", 1, 21, "unknown unit `C`"),
    "no unit of time": ("time [kg],output [%],measurement [degC]\n1,2,3\n", 1, 1, "`kg` is no unit of time"),
    "twice": ("time [s],output [%],output [%],measurement [degC]\n", 1, 21, "`output` stands twice"),
    "two movers": ("time [s],output [%],opening [%],measurement [degC]\n", 1, 21, "both say what was moved"),
    "no samples": (HEAD, 1, 1, "no samples"),
    "decimal commas among commas": (HEAD + "0,40,84,5\n", 2, 1, "4 fields where the head names 3"),
    "short line": (HEAD + "0,40,84.5\n5,45\n", 3, 1, "2 fields where the head names 3"),
    "no number": (HEAD + "0,40,84.5\n5,45, Bad\n", 3, 7, "`Bad` is not a number"),
    "missing value": (HEAD + "0,,84.5\n", 2, 3, "a value is missing"),
    "not finite": (HEAD + "0,40,1e999\n", 2, 6, "too large a number"),
    "nan": (HEAD + "0,40,nan\n", 2, 6, "`nan` is not a number"),
    "two decimal marks": ("time [s];output [%];measurement [degC]\n0;1,5;2\n1;1.5;3\n", 3, 3, "another decimal mark"),
    "time stands still": (HEAD + "0,40,84.5\n0,40,84.5\n", 3, 1, "the time does not increase"),
    "number for a time": ("time,output [%],measurement [degC]\n0,1,2\n", 2, 1, "the column `time` has no unit"),
    "no time of day": ("time,output [%],measurement [degC]\n14.05.2026 10:00,1,2\n", 2, 1, "is not a time"),
    "no such day": ("time,output [%],measurement [degC]\n2026-02-30T10:00,1,2\n", 2, 1, "not in the calendar"),
    "zones mixed": (
        "time,output [%],measurement [degC]\n2026-02-28T10:00,1,2\n2026-02-28T10:01Z,1,2\n", 3, 1, "others have none",
    ),
    "open quote": (HEAD + '0,40,"84.5\n', 2, 6, "a quote is not closed"),
    "behind a quote": (HEAD + '0,40,"84.5"x\n', 2, 12, "behind a closing quote"),
    "UTF-16": (("\ufeff" + HEAD).encode("utf-16-le"), 1, 1, "UTF-16"),
    "Latin-1": (b"time [s],output [%],measurement [\xb0C]\n", 1, 34, "not UTF-8"),
    "a workbook": (b"PK\x03\x04\x00\x00", 1, 1, "not a text file"),
    "too large": (b" " * (MAX_BYTES + 1), 1, 1, "larger than 16 MiB"),
}  # fmt: skip


@pytest.mark.parametrize("name", FAULTS)
def test_what_cannot_be_read_is_told_with_line_and_column(name: str) -> None:
    content, line, column, says = FAULTS[name]
    fault = read_step_test(content if isinstance(content, bytes) else content.encode(), "a.csv")
    assert isinstance(fault, Fault)
    assert says in fault.message
    assert (fault.place.file, fault.place.line, fault.place.column) == ("a.csv", line, column)
    assert fault.remedy


def test_a_record_is_bounded(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("loopdoc.exchange.step_test.MAX_SAMPLES", 3)
    assert len(read(HEAD + "0,1,2\n1,1,2\n2,1,2\n").time_s) == 3
    fault = read_step_test((HEAD + "0,1,2\n1,1,2\n2,1,2\n3,1,2\n").encode(), "a.csv")
    assert isinstance(fault, Fault)
    assert (fault.place.line, fault.message) == (5, "more than 3 samples")


# --- conversion ----------------------------------------------------------------------------------

REGISTER = """\
format: 1
site: {name: Fellside}
revision: {code: A, date: 2026-11-20, status: issued for review}
units:
  "20": {name: Rectification}
loops:
  # of the tray
  TIC-2014:
    unit: "20"
    measurement: {transmitter: TT-2014, variable: temperature, range: 60 to 120 degC}
    controller: {output: {to: FIC-2011, span: 2 to 12 t/h}}
    process: {hold: step test in week 12}   # asked for
    hazard: high
  FIC-2011:
    unit: "20"
    measurement: {transmitter: FT-2011, variable: flow, range: 0 to 15 t/h}
    controller: {output: {to: FV-2011}}
    process:
      effect: rises           # of the valve
      gain: 150 kg/h per %
      lag: 4 s                # estimated
      source: design estimate
  FIC-2012: {unit: "20", measurement: {range: 0 to 15 t/h}, controller: {output: {to: FV-2012}}}
  FIC-2013: {unit: "20", measurement: {range: 0 to 15 t/h}, controller: {output: {to: FV-2013}}}
  LIC-2021: {unit: "20", measurement: {range: 0 to 100 %}, controller: {output: {to: FY-2021, span: -6 to 6 t/h}}}
  PIC-2031:
    unit: "20"
    measurement: {range: 0 to 2 barg}
    controller: {output: {to: PY-2031}}
    process:
      branches:
        PV-2031A: {effect: rises, gain: 6 mbar per %, lag: 90 s}   # nitrogen
        PV-2031B: {effect: falls, gain: -8 mbar per %, lag: 80 s}
  TIC-2041: {unit: "20", measurement: {range: 0 to 9 degC}, controller: {output: {to: FY-2041, span: 0 to 2 fraction}}}
  TIC-2051:
    unit: "20"
    measurement: {range: 32 to 212 degF}
    controller: {output: {to: TIC-2014, span: 60 to 120 degC}}
  TI-2061: {unit: "20", measurement: {range: 0 to 100 degC}}
  FIC-2071: {unit: "20", measurement: {range: 0 to 15 t/h}, controller: {output: {to: FY-2071}}}
  TIC-2081: {unit: "20", measurement: {range: 0 to 9 degC}, controller: {output: {to: FY-2081, span: 0 to 100 %}}}
  FIC-2091: {unit: "20", measurement: {range: 0 to 15 t/h}, controller: {output: {to: FY-2091}}}
final_elements:
  FV-2011: {unit: "20", kind: control valve, opens_on: rising signal}
  FV-2012: {unit: "20", kind: control valve, opens_on: falling signal}
  FV-2013: {unit: "20", kind: control valve}
  FV-2071: {unit: "20", kind: control valve, opens_on: rising signal}
  FV-2091: {unit: "20", kind: control valve, opens_on: rising signal}
  PV-2031A: {unit: "20", kind: control valve, opens_on: falling signal, output_block: reversed}
  PV-2031B: {unit: "20", kind: control valve, opens_on: rising signal}
functions:
  FY-2021: {kind: sum, inputs: [FT-2011], weights: {LIC-2021: -0.5}, to: FIC-2011}
  PY-2031: {kind: split range, outputs: {PV-2031A: 40 to 0 %, PV-2031B: 60 to 100 %}}
  FY-2041: {kind: ratio, inputs: [FT-2011], to: FIC-2011}
  FY-2071: {kind: characteriser, to: FV-2071,
            curve: [{at: 0 %, gives: 100 %}, {at: 50 %, gives: 20 %}, {at: 100 %, gives: 0 %}]}
  FY-2081: {kind: characteriser, to: FIC-2011,
            curve: [{at: 0 %, gives: 0 t/h}, {at: 50 %, gives: 4 t/h}, {at: 100 %, gives: 12 t/h}]}
  FY-2091: {kind: characteriser, to: FV-2091}
"""


@pytest.fixture
def plant(tmp_path: Path) -> Plant:
    (tmp_path / "register.yaml").write_text(REGISTER, "utf-8")
    loaded = load(tmp_path)
    assert isinstance(loaded, Loaded)
    return Plant(loaded.register)


def taken(
    plant: Plant, tag: str, recorded: str, moved: list[float], symbol: str, measurement: str = "%"
) -> Commanded | Lacking:
    return commanded(
        plant, tag, recorded=recorded, moved=np.array(moved), unit=unit(symbol),
        measurement=np.array([0.0, 50.0]), measurement_unit=unit(measurement),
    )  # fmt: skip


TAKEN = [
    # tag, column, values, unit; what moved, its values, its unit
    ("FIC-2011", "output", [10.0, 20.0], "%", "FV-2011", [10.0, 20.0], "%"),
    ("FIC-2011", "output", [0.1, 0.2], "fraction", "FV-2011", [10.0, 20.0], "%"),
    ("FIC-2012", "output", [10.0, 20.0], "%", "FV-2012", [90.0, 80.0], "%"),  # opens on a falling signal
    ("FIC-2012", "opening", [10.0, 20.0], "%", "FV-2012", [10.0, 20.0], "%"),
    ("FIC-2013", "opening", [10.0, 20.0], "%", "FV-2013", [10.0, 20.0], "%"),
    ("TIC-2014", "output", [10.0, 20.0], "%", "FIC-2011", [3.0, 4.0], "t/h"),  # 2 to 12 t/h
    ("TIC-2014", "output", [3.0, 4.0], "t/h", "FIC-2011", [3.0, 4.0], "t/h"),
    ("TIC-2014", "secondary", [3000.0, 4000.0], "kg/h", "FIC-2011", [3.0, 4.0], "t/h"),
    ("TIC-2014", "secondary", [20.0, 40.0], "%", "FIC-2011", [3.0, 6.0], "t/h"),  # of the range 0 to 15 t/h
    ("LIC-2021", "output", [50.0, 60.0], "%", "FIC-2011", [0.0, -0.6], "t/h"),  # 12 t/h of span, weight -0.5
    ("PIC-2031", "output", [20.0, 10.0], "%", "PV-2031A", [50.0, 75.0], "%"),
    ("PIC-2031", "output", [70.0, 80.0], "%", "PV-2031B", [25.0, 50.0], "%"),
    ("TIC-2051", "output", [0.0, 50.0], "%", "TIC-2014", [60.0, 90.0], "degC"),
    ("TIC-2051", "secondary", [140.0, 194.0], "degF", "TIC-2014", [60.0, 90.0], "degC"),
    ("FIC-2071", "output", [25.0, 75.0], "%", "FV-2071", [60.0, 10.0], "%"),  # halfway along each line of its curve
    ("TIC-2081", "output", [25.0, 75.0], "%", "FIC-2011", [2.0, 8.0], "t/h"),
    ("TIC-2081", "output", [0.25, 0.75], "fraction", "FIC-2011", [2.0, 8.0], "t/h"),
]


@pytest.mark.parametrize(("tag", "recorded", "moved", "symbol", "end", "values", "end_unit"), TAKEN)
def test_an_output_becomes_what_the_process_is_stated_for(
    plant: Plant, tag: str, recorded: str, moved: list[float], symbol: str, end: str, values: list[float], end_unit: str
) -> None:
    found = taken(plant, tag, recorded, moved, symbol)
    assert isinstance(found, Commanded), found
    assert (found.tag, str(found.unit)) == (end, end_unit)
    assert found.moved == pytest.approx(values, abs=1e-9)
    assert found.reversed is ((tag == "FIC-2012" and recorded == "output") or end in ("PV-2031A", "FV-2071"))
    assert found.branch is (tag == "PIC-2031")


def test_the_measurement_is_taken_in_the_unit_of_its_range(plant: Plant) -> None:
    percent = taken(plant, "TIC-2014", "output", [1.0, 2.0], "%")
    fahrenheit = taken(plant, "TIC-2014", "output", [1.0, 2.0], "%", "degF")
    assert isinstance(percent, Commanded)
    assert isinstance(fahrenheit, Commanded)
    assert percent.measurement.tolist() == [60.0, 90.0]  # 0 and 50 % of 60 to 120 degC
    assert fahrenheit.measurement == pytest.approx([-160.0 / 9.0, 10.0])  # 0 and 50 degF


LACKING = [
    ("TIC-9999", "output", "%", "no controller TIC-9999"),
    ("TI-2061", "output", "%", "no controller TI-2061"),
    ("FIC-2013", "output", "%", "does not say on which signal it opens; write it, or record the `opening`"),
    ("FIC-2011", "output", "t/h", "write the output in `%`"),
    ("FIC-2011", "secondary", "t/h", "commands no loop"),
    ("TIC-2014", "opening", "%", "record that as `secondary [t/h]`"),
    ("TIC-2014", "output", "degC", "in `t/h` or in `%`"),
    ("TIC-2014", "secondary", "degC", "write the record in `t/h`"),
    ("PIC-2031", "opening", "%", "name the column `output`"),
    ("FIC-2091", "output", "%", "the curve of FY-2091 is not given; record the `opening` of FV-2091"),
    ("TIC-2041", "output", "%", "what FY-2041 makes of the output of TIC-2041 does not follow"),
]


@pytest.mark.parametrize(("tag", "recorded", "symbol", "says"), LACKING)
def test_what_the_register_does_not_say_is_asked_for(
    plant: Plant, tag: str, recorded: str, symbol: str, says: str
) -> None:
    found = taken(plant, tag, recorded, [1.0, 2.0], symbol)
    assert isinstance(found, Lacking)
    assert says in found.reason


def test_a_split_range_is_tested_in_one_branch(plant: Plant) -> None:
    both = taken(plant, "PIC-2031", "output", [30.0, 70.0], "%")
    neither = taken(plant, "PIC-2031", "output", [45.0, 55.0], "%")
    assert isinstance(both, Lacking)
    assert isinstance(neither, Lacking)
    assert "moves PV-2031A and PV-2031B together" in both.reason
    assert "neither of PV-2031A and PV-2031B moves" in neither.reason


# --- rounding ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("value", "half_width", "written"),
    [
        # The rule's own cases: an error of 0.119 takes two digits, one of 0.367 takes one.
        (0.827, 0.119, "0.83"),
        (0.827, 0.367, "0.8"),
        (5.4837, 0.21, "5.48"),
        (5.4837, 0.5, "5.5"),
        (12345.0, 2000.0, "12300"),
        (-0.0421, 0.003, "-0.0421"),
        (-0.04, 3.0, "0.0"),
        (2.0, 1e-9, "2.000"),
        (0.0, 0.0, "0"),
        (1.5, math.inf, "1.500"),
    ],
)
def test_values_are_written_with_the_digits_that_their_interval_supports(
    value: float, half_width: float, written: str
) -> None:
    assert float(rounded(value, half_width)) == pytest.approx(float(written))
    if written != "0":
        assert rounded(value, half_width) == written


# --- the command ---------------------------------------------------------------------------------


def a_file(folder: Path, head: str, moved: tuple[float, float], gain: float, lag: float, name: str = "a.csv") -> Path:
    """A bump test with ISO times, one sample in 5 s: dead time 15 s, noise a hundredth of the response."""
    rng = np.random.default_rng(4)
    t = 5.0 * np.arange(160)
    low, high = moved
    up, down = (1.0 - np.exp(-np.maximum(t - start - 15.0, 0.0) / lag) for start in (100.0, 420.0))
    y = 80.0 + gain * (high - low) * (up - down) + 0.01 * gain * (high - low) * rng.normal(size=len(t))
    u = np.where((t >= 100.0) & (t < 420.0), high, low)
    lines = [
        f"2026-05-14T10:{int(at) // 60:02d}:{int(at) % 60:02d},{a:g},{b:.5f}" for at, a, b in zip(t, u, y, strict=True)
    ]
    path = folder / name
    path.write_text("\n".join([head, *lines]) + "\n", "utf-8")
    return path


def called(*arguments: object) -> tuple[int, str, str]:
    out, err = io.StringIO(), io.StringIO()
    status = run([str(argument) for argument in arguments], out, err)
    return status, out.getvalue(), err.getvalue()


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "register.yaml").write_text(REGISTER, "utf-8")
    return tmp_path


def test_a_model_takes_the_place_of_a_hold_and_nothing_else_changes(folder: Path) -> None:
    data = a_file(folder, "time,output [%],measurement [degC]", (30.0, 35.0), 0.55, 60.0)
    status, out, _ = called("identify", folder, data, "--tag", "TIC-2014", "--write", "--format", "json")
    assert status == 0
    found = json.loads(out)
    # 10 % of output are 1 t/h: 0.55 degC per % are 5.5 degC per t/h.
    gain = found["model"]["gain"]
    assert gain["low"] <= 5.5 <= gain["high"]
    assert found["model"]["lags_s"][0]["value"] == pytest.approx(60.0, rel=0.1)
    assert found["moved"] == {"what": "setpoint of FIC-2011", "unit": "t/h", "recorded": "output"}
    assert found["written"] == {"file": "register.yaml", "line": 12}
    values = found["register"]
    expected = REGISTER.replace(
        "    process: {hold: step test in week 12}   # asked for\n",
        "    process:   # asked for\n" + "".join(f"      {key}: {values[key]}\n" for key in values),
    )
    assert (folder / "register.yaml").read_text("utf-8") == expected
    assert list(values) == ["effect", "gain", "lag", "dead_time", "source"]
    assert values["source"].startswith("step test 2026-05-14, file a.csv, 95 % intervals gain 5.")
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    process = loaded.register.loops["TIC-2014"].process
    assert process is not None
    assert not [fault for fault in loaded.faults if "process" in fault.pointer]


def test_a_model_is_written_in_the_units_that_the_register_has(folder: Path) -> None:
    data = a_file(folder, "time;output [%];measurement [t/h]".replace(";", ","), (40.0, 50.0), 0.15, 20.0)
    status, out, _ = called("identify", folder, data, "--tag", "FIC-2011", "--write")
    assert status == 0
    assert "the register holds: gain 150 kg/h per %, lag 4 s (design estimate)" in out
    assert "wrote the process of FIC-2011 at register.yaml:18:5" in out
    text = (folder / "register.yaml").read_text("utf-8")
    process = text[text.index("    process:\n      effect") : text.index("  FIC-2012")]
    lines = process.splitlines()
    assert lines[1] == "      effect: rises           # of the valve"
    number, _, units = lines[2].removeprefix("      gain: ").partition(" ")
    assert float(number) == pytest.approx(150.0, rel=0.01)
    assert units == "kg/h per %"
    assert lines[3].startswith("      lag: ")
    assert lines[3].endswith("# estimated")
    assert lines[4].startswith("      dead_time: ")
    assert text.replace(process, "") == REGISTER.replace(
        REGISTER[REGISTER.index("    process:\n      effect") : REGISTER.index("  FIC-2012")], ""
    )


def test_a_lead_goes_with_the_model_that_it_belonged_to(folder: Path) -> None:
    """The model that is written was fitted without a lead: with the old one it would be another process."""
    lead = REGISTER.replace("      lag: 4 s ", "      lead: 3 s\n      lag: 4 s ")
    assert lead != REGISTER
    (folder / "register.yaml").write_text(lead, "utf-8")
    data = a_file(folder, "time,output [%],measurement [t/h]", (40.0, 50.0), 0.15, 20.0)
    status, out, _ = called("identify", folder, data, "--tag", "FIC-2011", "--write")
    assert status == 0
    assert "lead 3 s" in out
    assert "caution: no form with a lead is fitted" in out
    assert "lead" not in (folder / "register.yaml").read_text("utf-8")


def test_a_test_that_settles_contradicts_a_register_that_integrates(folder: Path) -> None:
    gain = next(line for line in REGISTER.splitlines() if "gain: 150 kg/h per %" in line)
    ramps = REGISTER.replace(gain, "      gain: 150 kg/h/min per %\n      integrating: true")
    (folder / "register.yaml").write_text(ramps, "utf-8")
    data = a_file(folder, "time,output [%],measurement [t/h]", (40.0, 50.0), 0.15, 20.0)
    status, out, _ = called("identify", folder, data, "--tag", "FIC-2011")
    assert status == 0
    assert "caution: the register says that the process integrates, but in the test the measurement settles" in out


def test_a_branch_of_a_split_range_is_written_into_that_branch(folder: Path) -> None:
    # The output falls from 30 to 10 %: the nitrogen valve opens from 25 to 75 %; 0.01 barg per % of opening.
    data = a_file(folder, "time,output [%],measurement [barg]", (30.0, 10.0), -0.025, 60.0)
    status, out, _ = called("identify", folder, data, "--tag", "PIC-2031", "--write")
    assert status == 0
    assert "the opening of PV-2031A falls as the output rises" in out
    text = (folder / "register.yaml").read_text("utf-8")
    (line,) = (line for line in text.splitlines() if "PV-2031A: {effect" in line)
    assert line.startswith("        PV-2031A: {effect: rises, gain: 10.")
    assert " mbar per %, lag: " in line
    assert text.count("\n") == REGISTER.count("\n") or "dead_time" in text
    assert "        PV-2031B: {effect: falls, gain: -8 mbar per %, lag: 80 s}\n" in text


def test_a_falling_valve_turns_the_sign_and_the_contradiction_is_told(folder: Path) -> None:
    register = REGISTER.replace(
        "FIC-2012: {unit: \"20\", ", "FIC-2012: {process: {effect: rises, gain: 0.1 t/h per %}, unit: \"20\", "
    )
    (folder / "register.yaml").write_text(register, "utf-8")
    data = a_file(folder, "time,output [%],measurement [t/h]", (40.0, 50.0), 0.15, 20.0)
    status, out, _ = called("identify", folder, data, "--tag", "FIC-2012")
    assert status == 0
    assert "the measurement falls with the opening of FV-2012" in out
    assert "the test says the opposite" in out
    assert (folder / "register.yaml").read_text("utf-8") == register


def test_without_a_register_the_columns_are_taken_as_they_are(tmp_path: Path) -> None:
    data = a_file(tmp_path, "time,output [%],measurement [degC]", (30.0, 35.0), 0.55, 60.0)
    status, out, _ = called("identify", data)
    assert status == 0
    assert "no register given" in out
    assert "degC per %" in out
    status, _, err = called("identify", data, "--write")
    assert (status, "--write needs the register" in err) == (2, True)


def test_what_is_refused_is_not_written(folder: Path) -> None:
    data = a_file(folder, "time,output [%],measurement [degC]", (30.0, 30.0), 0.55, 60.0)
    status, out, _ = called("identify", folder, data, "--tag", "TIC-2014", "--write")
    assert status == 1
    assert "refused: the output never moves" in out
    assert (folder / "register.yaml").read_text("utf-8") == REGISTER
    status, out, _ = called("identify", folder, data, "--tag", "TIC-2014", "--write", "--format", "json")
    assert (json.loads(out)["model"], json.loads(out)["written"]) == (None, None)


def test_faults_are_told_and_no_traceback(folder: Path) -> None:
    (folder / "a.csv").write_text(HEAD + "0,40,Bad\x1b\n", "utf-8")
    status, out, err = called("identify", folder, folder / "a.csv", "--tag", "TIC-2014")
    assert (status, out) == (2, "")
    assert err.startswith("a.csv:2:6: error: `Bad\\u001b` is not a number\n    remedy: ")
    good = a_file(folder, "time,output [%],measurement [degC]", (30.0, 35.0), 0.55, 60.0)
    for arguments, says in (
        ((folder, good), "say with --tag"),
        ((folder, good, "--tag", "TIC-9"), "no controller TIC-9"),
        ((folder / "nowhere", good, "--tag", "TIC-2014"), "there is no such file"),
        ((folder / "nowhere.csv",), "No such file"),
        ((good, "--plot", folder / "a.gif"), ".svg, .png or .pdf"),
    ):
        status, out, err = called("identify", *arguments)
        assert (status, out, says in err) == (2, "", True), err


def test_a_tag_defined_twice_is_not_written(folder: Path) -> None:
    (folder / "register.yaml").write_text(REGISTER + "include: [b.yaml]\n", "utf-8")
    (folder / "b.yaml").write_text('loops: {TIC-2014: {unit: "20"}}\n', "utf-8")
    data = a_file(folder, "time,output [%],measurement [degC]", (30.0, 35.0), 0.55, 60.0)
    status, out, err = called("identify", folder, data, "--tag", "TIC-2014", "--write")
    assert status == 2
    assert "95 % interval" in out
    assert "nothing was written: TIC-2014 is defined twice" in err


def test_the_plot_is_drawn(folder: Path) -> None:
    data = a_file(folder, "time,output [%],measurement [degC]", (30.0, 35.0), 0.55, 60.0)
    status, _, _ = called("identify", folder, data, "--tag", "TIC-2014", "--plot", folder / "a.svg")
    assert status == 0
    drawn = (folder / "a.svg").read_text("utf-8")
    title = "TIC-2014: step test 2026-05-14, file a.csv"
    for words in (title, "residual, °C", "measurement, °C", "FIC-2011, t/h", "fit"):
        assert f">{words}<" in drawn
    _, out, _ = called("identify", folder, data, "--tag", "TIC-2014")
    gain = next(line for line in out.splitlines() if line.startswith("    gain")).split()
    told = " ".join(re.sub(r"<[^>]*>", " ", drawn).split())
    assert f"One lag: gain {gain[1]} degC per t/h, lag" in told
    assert f"95 % intervals: gain {gain[5]} to {gain[7]} degC per t/h, lag" in told
    still = a_file(folder, "time,output [%],measurement [degC]", (30.0, 30.0), 0.55, 60.0)
    called("identify", folder, still, "--tag", "TIC-2014", "--plot", folder / "b.svg")
    assert "No model: the output never moves" in (folder / "b.svg").read_text("utf-8")
