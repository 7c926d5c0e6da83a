"""Loop check records: published signals, what passes and what does not, and pages that hold what they must."""

from __future__ import annotations

import dataclasses
import io
import math
import re
from functools import cache
from html import unescape
from pathlib import Path

import pytest
from pypdf import PdfReader

from loopdoc.documents.basis import Basis, Page, basis_of
from loopdoc.documents.check_record.check_record import RecordView, check_records, record_height
from loopdoc.documents.check_record.expected import plant_checks
from loopdoc.documents.check_record.fit import SIZES
from loopdoc.documents.check_record.tables import CheckTable
from loopdoc.documents.page_fit import room
from loopdoc.documents.pdf import to_pdf
from loopdoc.documents.rendering import render
from loopdoc.engineering.loop_check import LoopChecks, Tolerance, accepted, tolerance_of
from loopdoc.engineering.pairing import Plant
from loopdoc.register.load import Loaded, load
from loopdoc.register.model import Measurement
from loopdoc.register.quantity import parse_quantity, parse_range
from loopdoc.register.units import UNITS

EXAMPLES = Path(__file__).parents[1] / "examples"
HEAD = """\
format: 1
site: {name: Test site, owner: Instruments}
revision: {code: A, date: 2026-11-20, status: issued for review}
units: {"20": {name: Column}}
"""


def basis(folder: Path) -> Basis:
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    return basis_of(loaded)


def written(folder: Path, text: str) -> Basis:
    folder.joinpath("register.yaml").write_text(HEAD + text, "utf-8")
    return basis(folder)


def view_of(basis: Basis, tag: str) -> RecordView:
    page = next(page for page in check_records(basis) if page.name == tag)
    view = page.view["record"]
    assert isinstance(view, RecordView)
    return view


@cache
def example_pages(name: str) -> tuple[Page, ...]:
    return tuple(check_records(basis(EXAMPLES / name)))


def checks_of(basis: Basis, tag: str) -> LoopChecks:
    return plant_checks(basis.plant)[tag]


def table(view: RecordView, title: str) -> CheckTable:
    return next(table for table in view.tables if table.title.startswith(title))


def column(found: CheckTable, heading: str) -> list[str]:
    index = next(index for index, one in enumerate(found.columns) if one.heading.startswith(heading))
    return [row[index] for row in found.rows]


def measured(measurement: str) -> str:
    return f"loops: {{TI-2001: {{unit: '20', measurement: {{transmitter: TT-2001, {measurement}}}}}}}\n"


# ---------------------------------------------------------------- expected signals


def test_pt100_resistances_are_those_of_the_published_table(tmp_path: Path) -> None:
    # DIN EN 60751:1996 table as reprinted at sensorsci.com: 0, 50, 100, 150 and 200 degC, in hundredths of an ohm.
    text = measured("sensor: Pt100 class B, range: 0 to 200 degC, signal: 4-20 mA")
    found = table(view_of(written(tmp_path, text), "TI-2001"), "Measurement")
    assert column(found, "Pt100 resistance") == ["100.00", "119.40", "138.51", "157.33", "175.86"]
    assert column(found, "Signal of TT-2001") == ["4.00", "8.00", "12.00", "16.00", "20.00"]
    # IEC 60751, class B: 0.3 + 0.005 |t| degC; 0.30, 0.80 and 1.30 at 0, 100 and 200 degC in public data sheets.
    assert column(found, "Sensor itself") == ["0.30", "0.55", "0.80", "1.05", "1.30"]


def test_a_pt100_without_a_class_has_no_tolerance_of_its_own(tmp_path: Path) -> None:
    view = view_of(written(tmp_path, measured("sensor: Pt100, range: 0 to 200 degC, signal: 4-20 mA")), "TI-2001")
    assert not [one for one in table(view, "Measurement").columns if one.heading.startswith("Sensor itself")]


def test_the_tolerance_of_a_pt100_is_a_difference_in_degf(tmp_path: Path) -> None:
    view = view_of(written(tmp_path, measured("sensor: Pt100 class B, range: 32 to 392 degF")), "TI-2001")
    # 0 to 200 degC again: 0.3 and 1.3 degC are 0.54 and 2.34 degF.
    assert column(table(view, "Measurement"), "Sensor itself")[::4] == ["0.54", "2.34"]


def test_thermocouple_millivolts_by_the_temperature_of_the_terminals(tmp_path: Path) -> None:
    # NIST ITS-90 database (SRD 60), type K, printed tables: 0, 100, 200, 300 and 400 degC with the junction at 0 degC.
    view = view_of(written(tmp_path, measured("sensor: thermocouple type K, range: 0 to 400 degC")), "TI-2001")
    found = table(view, "Measurement")
    at_zero = column(found, "Type K, terminals at 0\u00a0°C")
    assert at_zero == ["0.000", "4.096", "8.138", "12.209", "16.397"]
    # E(200) - E(25) = 8.138 - 1.000 mV; the printed tables round each to half a microvolt.
    assert float(column(found, "Type K, terminals at 25\u00a0°C")[2]) == pytest.approx(7.138, abs=0.001)
    # E(0) - E(20) = -0.798 mV: hotter terminals turn the sign.
    assert column(found, "Type K, terminals at 20\u00a0°C")[0] == "−0.798"
    assert "Reference junction" in view.blanks


def test_a_thermocouple_beyond_its_range_shows_no_millivolts(tmp_path: Path) -> None:
    view = view_of(written(tmp_path, measured("sensor: thermocouple type K, range: 0 to 1500 degC")), "TI-2001")
    assert not [one for one in table(view, "Measurement").columns if one.heading.startswith("Type K")]


def test_differential_pressure_under_a_root(tmp_path: Path) -> None:
    # sensorsone.com, square root table: 25, 50 and 75 % of the pressure are 50, 70.71 and 86.60 % of the flow.
    text = measured("variable: flow, characteristic: square root, range: 0 to 100 t/h, signal: 4-20 mA")
    found = table(view_of(written(tmp_path, text), "TI-2001"), "Measurement")
    assert column(found, "Differential pressure") == ["0", "25", "50", "75", "100"]
    assert [float(value) for value in column(found, "TI-2001 shows")] == pytest.approx(
        [0.0, 50.0, 70.71, 86.60, 100.0], abs=0.006
    )


# ---------------------------------------------------------------- tolerance


def test_limits_without_a_root_stand_as_far_off_everywhere() -> None:
    half_percent = Tolerance(0.5, UNITS["%"], stated=False)
    # 0.5 % of a span of 60 degC is 0.3 degC.
    low, high = accepted(75.0, parse_range("60 to 120 degC"), half_percent, square_root=False)
    assert (low, high) == pytest.approx((74.7, 75.3), abs=1e-9)
    low, high = accepted(75.0, parse_range("120 to 60 degC"), half_percent, square_root=False)
    assert (low, high) == pytest.approx((74.7, 75.3), abs=1e-9)


@pytest.mark.parametrize(
    ("flow", "low", "high"),
    [
        # By hand, tolerance 1 % of the pressure: roots of 0 and 0.01; of 0.24 and 0.26; of 0.99 and 1.01.
        (0.0, 0.0, 10.0),
        (50.0, 48.9898, 50.9902),
        (100.0, 99.4987, 100.4988),
    ],
)
def test_limits_under_a_root_widen_towards_zero(flow: float, low: float, high: float) -> None:
    tolerance = Tolerance(1.0, UNITS["%"], stated=True)
    found = accepted(flow, parse_range("0 to 100 t/h"), tolerance, square_root=True)
    assert found == pytest.approx((low, high), abs=1e-4)  # four printed decimals


def test_a_printed_limit_lets_nothing_pass_that_the_tolerance_does_not() -> None:
    """FIC-2011 at 0 %: half a percent of the span of the differential pressure is 8 t/h times the root of 0.005."""
    demo = basis(EXAMPLES / "tarn-hollow")
    (empty,) = (one for one in checks_of(demo, "FIC-2011").readings if one.key == "measurement 0 %")
    exact = 8.0 * math.sqrt(0.005)
    assert exact - 0.01 < empty.high <= exact
    # What is a whole number of the last digit loses none to the noise of a division.
    (middle,) = (one for one in checks_of(demo, "TIC-2014").readings if one.key == "measurement 50 %")
    assert middle.high - middle.expected == pytest.approx(middle.expected - middle.low)


def test_a_tolerance_in_units_is_a_difference() -> None:
    tolerance = Tolerance(0.5, UNITS["degC"], stated=True)
    # 0.5 degC are 0.9 degF, without the 32 of the scale.
    found = accepted(212.0, parse_range("32 to 392 degF"), tolerance, square_root=False)
    assert found == pytest.approx((211.1, 212.9), abs=1e-9)


@pytest.mark.parametrize(
    ("tolerance", "shown"),
    [
        ("", "±0.5\u00a0% of span, common practice"),
        (", tolerance: 0.25 %", "±0.25\u00a0% of span"),
        (", tolerance: 0.4 degC", "±0.4\u00a0°C"),
        (", tolerance: 3 barg", "3\u00a0bar(g), not of the range"),
        (", tolerance: {hold: vendor}", "HOLD"),
    ],
)
def test_where_the_tolerance_comes_from(tmp_path: Path, tolerance: str, shown: str) -> None:
    view = view_of(written(tmp_path, measured(f"range: 0 to 200 degC{tolerance}")), "TI-2001")
    facts = dict(fact for row in view.facts for fact in row)
    assert re.sub("<[^>]+>", "", facts["Tolerance of a reading"]) == shown
    readable = tolerance in ("", ", tolerance: 0.25 %", ", tolerance: 0.4 degC")
    assert [found.title for found in view.tables if found.title == "Measurement"] == ["Measurement"] * readable
    assert bool(view.notes) is not readable


def test_the_policy_of_the_site_replaces_common_practice(tmp_path: Path) -> None:
    text = "policy: {loop_check_tolerance: 0.2, travel_tolerance: 5}\n" + measured("range: 0 to 200 degC")
    found = written(tmp_path, text)
    facts = dict(fact for row in view_of(found, "TI-2001").facts for fact in row)
    assert facts["Tolerance of a reading"] == "±0.2\u00a0% of span, by the site's policy"
    middle = checks_of(found, "TI-2001").reading("measurement 50 %")
    assert middle is not None
    assert (middle.low, middle.high) == (99.6, 100.4)


def test_a_negative_tolerance_is_none() -> None:
    loaded = load(EXAMPLES / "tarn-hollow")
    assert isinstance(loaded, Loaded)
    measurement = loaded.register.loops["TIC-2014"].measurement
    assert isinstance(measurement, Measurement)
    minus = dataclasses.replace(measurement, tolerance=parse_quantity("-0.5 %"))
    assert tolerance_of(minus, default_pct=0.5) is None


# ---------------------------------------------------------------- readings and functions of the example


@pytest.fixture(scope="module")
def plant() -> Plant:
    return basis(EXAMPLES / "tarn-hollow").plant


@pytest.fixture(scope="module")
def checks(plant: Plant) -> dict[str, LoopChecks]:
    return plant_checks(plant)


def reading(checks: dict[str, LoopChecks], tag: str, key: str) -> tuple[float, float, float]:
    found = checks[tag].reading(key)
    assert found is not None, key
    return found.expected, found.low, found.high


def test_split_range_travel(checks: dict[str, LoopChecks]) -> None:
    # PV-2021A is fully open at 0 % and shut from 45 %: 1 - 25/45 at 25 %; PV-2021B opens from 55 to 100 %.
    found = [reading(checks, "PIC-2021", f"PV-2021A travel {step} %")[0] for step in (0, 25, 50, 75, 100)]
    assert found == pytest.approx([100.0, 100 * (1 - 25 / 45), 0.0, 0.0, 0.0], abs=0.05)  # as printed
    found = [reading(checks, "PIC-2021", f"PV-2021B travel {step} %")[0] for step in (0, 25, 50, 75, 100)]
    assert found == pytest.approx([0.0, 0.0, 0.0, 100 * 20 / 45, 100.0], abs=0.05)


def test_a_stroke_is_not_slower_than_the_register_says(checks: dict[str, LoopChecks]) -> None:
    assert reading(checks, "FIC-2011", "FV-2011 stroke time opening") == (5.0, 0.0, 5.0)


def test_alarms_come_at_their_limit_and_clear_by_their_dead_band(checks: dict[str, LoopChecks]) -> None:
    # TIC-2014: high at 104 degC, low at 93 degC, dead band 0.6 degC, 0.5 % of 60 degC.
    assert reading(checks, "TIC-2014", "high alarm") == (104.0, 103.7, 104.3)
    assert reading(checks, "TIC-2014", "high alarm clears")[0] == 103.4
    assert reading(checks, "TIC-2014", "low alarm clears")[0] == 93.6


def test_a_trip_stands_in_the_record_of_its_own_measurement(checks: dict[str, LoopChecks]) -> None:
    assert reading(checks, "FIC-1017", "IS-1002 trip by FT-1017")[0] == 200.0
    assert checks["FIC-1011"].reading("IS-1002 trip by FT-1017") is None


def expected(checks: dict[str, LoopChecks], tag: str, key: str) -> str:
    found = checks[tag].function(key)
    assert found is not None, (key, [one.key for one in checks[tag].functions])
    return found.expect.replace("\u00a0", " ")


@pytest.mark.parametrize(
    ("tag", "key", "words"),
    [
        ("TIC-2014", "controller action", "The output of TIC-2014 falls."),
        ("AIC-2015", "controller action", "The output of AIC-2015 rises."),
        ("FIC-2011", "controller action", "FIC-2011 closes FV-2011."),
        ("FIC-2011", "FV-2011 without air", "FV-2011 closes fully."),
        ("TIC-2028", "TV-2028 without signal", "TV-2028 opens fully."),
        ("FIC-1017", "SC-1017 without electric power", "SC-1017 stops."),
        ("TIC-2014", "transmitter fault", "at least 21 mA"),
        ("PIC-2021", "transmitter fault", "at most 3.6 mA"),
        ("TIC-2014", "transmitter fault", "TIC-2014 goes to manual and holds its output."),
        ("TIC-2014", "tracking", "tracks the setpoint of FIC-2011"),
        ("TIC-2014", "mode transfers", "The output does not jump"),
        ("TIC-2014", "output limits", "1.0 t/h and 6.0 t/h"),
        ("TIC-2014", "setpoint of FIC-2011", "0, 3.25 and 6.5 t/h"),
        ("FIC-2011", "IS-2001 by PT-2023A", "Alone it does nothing (2oo3). With one other: FV-2011 closed"),
        ("FIC-1011", "IS-1002 by LT-1018", "FV-1011 closed and FIC-1011 manual, 0 %."),
        ("LI-2029", "signal limits", "−1.25 % and 103.125 %"),  # NE 43, by hand: (3.8 - 4)/16 and (20.5 - 4)/16
    ],
)
def test_what_should_happen(checks: dict[str, LoopChecks], tag: str, key: str, words: str) -> None:
    assert words in expected(checks, tag, key)


def test_an_indicator_is_asked_nothing_of_a_controller(checks: dict[str, LoopChecks]) -> None:
    assert {one.key for one in checks["LI-2029"].functions} == {"signal limits", "transmitter fault"}


def test_names_of_checks_are_unique(checks: dict[str, LoopChecks]) -> None:
    for one in checks.values():
        keys = [part.key for part in (*one.readings, *one.functions)]
        assert len(keys) == len(set(keys)), one.tag


def test_a_cascade_carries_its_order_of_work() -> None:
    pages = {page.name: page.view["record"] for page in example_pages("tarn-hollow")}
    for tag in ("FIC-2011", "TIC-2014", "AIC-2015"):
        assert [step for step, _ in pages[tag].order] == ["FIC-2011", "TIC-2014", "AIC-2015"]
    assert pages["PIC-3015"].order == ()


def test_holds_are_shown_and_nothing_is_invented(tmp_path: Path) -> None:
    text = """\
loops:
  TIC-2001:
    unit: "20"
    measurement: {transmitter: TT-2001, range: {hold: vendor}, signal: 4-20 mA, on_fault: {hold: vendor}}
    controller: {action: {hold: process}, output: {to: TV-2001}}
    alarms: {high: {limit: 90 degC}, low: {limit: {hold: process}}, high_high: {delay: 5 s}}
final_elements: {TV-2001: {unit: "20", kind: control valve, opens_on: {hold: valve list}, fails: {hold: valve list}}}
"""
    view = view_of(written(tmp_path, text), "TIC-2001")
    assert [found.title for found in view.tables] == ["Alarms", "Functions"]
    assert column(table(view, "Alarms"), "Expected") == ["90\u00a0°C", "HOLD", "not stated"]
    assert column(table(view, "Alarms"), "Accept") == ["–", "–", "–"]
    functions = dict(zip(column(table(view, "Functions"), "Function"), column(table(view, "Functions"), "Should"),
                         strict=True))  # fmt: skip
    assert functions["Controller action"] == "HOLD"
    assert functions["Transmitter fault"] == "HOLD"
    assert functions["TV-2001 without signal"] == "HOLD"
    assert functions["Mode transfers"] == "Not stated in the register"
    assert view.notes == ("No readings are given: what they follow from is on HOLD.",)
    assert any("vendor" in line for line in view.holds)


def test_a_record_names_the_terminals_where_the_register_has_them() -> None:
    pages = {page.name: page.view["record"] for page in example_pages("tarn-hollow")}
    assert pages["PIC-2021"].facts[-1] == (
        ("Terminals of PT-2021", "JB-2002: 1, 2; MC-20: TB2-1, TB2-2"),
        ("Terminals of PV-2021A", "JB-2003: 5, 6; MC-20: TB3-5, TB3-6"),
        ("Terminals of PV-2021B", "JB-2003: 7, 8; MC-20: TB3-7, TB3-8"),
    )
    for page in example_pages("tennessee-eastman"):
        assert "Terminals" not in text_of(page), page.name


# ---------------------------------------------------------------- pages


def text_of(page: Page) -> str:
    source = render(page.template, document=page.document, stylesheet="", **page.view)
    return re.sub(r"[ \n]+", " ", unescape(re.sub(r"<[^>]+>", " ", source)))


@pytest.mark.parametrize("name", ["tarn-hollow", "tennessee-eastman"])
def test_every_record_fits_one_page_or_parts_over_two(name: str) -> None:
    for page in example_pages(name):
        view = page.view["record"]
        sizes = next(sizes for sizes in SIZES if sizes.name == view.classes.split()[0])
        if "apart" in view.classes:
            assert view.tables[-1].title == "Functions", page.name
            assert record_height(view, SIZES[-1]) > room(page.document), page.name
        else:
            assert record_height(view, sizes) <= room(page.document), page.name
        for one in view.tables:
            assert one.rows, (page.name, one.title)
            assert all(len(row) == len(one.columns) for row in one.rows), (page.name, one.title)
        said = text_of(page)
        assert not re.search(r"\bNone\b|\bnan\b", said), page.name


@pytest.mark.parametrize(
    ("name", "tag", "pages"),
    [
        ("tarn-hollow", "FIC-2011", 2),
        ("tarn-hollow", "TIC-2014", 1),
        ("tarn-hollow", "FIC-1017", 1),
        ("tennessee-eastman", "LIC-3012", 1),
    ],
)
def test_pages_as_set(name: str, tag: str, pages: int) -> None:
    page = next(page for page in example_pages(name) if page.name == tag)
    html = render(page.template, document=page.document, stylesheet="", **page.view)
    assert len(PdfReader(io.BytesIO(to_pdf(html, (), dated=page.document.dated))).pages) == pages


def test_names_of_the_register_are_text_and_not_markup(tmp_path: Path) -> None:
    view = written(tmp_path, "loops: {TI-2001: {unit: '20', service: '<script>x</script>'}}\n")
    page = next(iter(check_records(view)))
    assert "<script>" not in render(page.template, document=page.document, stylesheet="", **page.view)


def test_a_value_is_not_broken_within_its_unit(tmp_path: Path) -> None:
    """Rules of line breaking allow a break behind the stroke of `t/h`; what the register says stays text."""
    page = next(check_records(written(tmp_path, """
loops:
  LIC-1: {service: Level, measurement: {transmitter: LT-1, variable: level, range: 0 to 100 %},
          controller: {action: direct, output: {to: FIC-2, span: 0 to 6.5 t/h, low: 0 t/h, high: 6.5 t/h}}}
  FIC-2: {service: "<i>Flow</i>", measurement: {transmitter: FT-2, variable: flow, range: 0 to 8 t/h},
          controller: {action: reverse, output: {to: FV-2}, setpoint: {low: 0 t/h, high: 6.5 t/h}}}
""")))
    source = render(page.template, document=page.document, stylesheet="", **page.view)
    assert '<span class="whole">6.5\u00a0t/h</span>' in source
    assert "<i>" not in source
