"""Plots of a loop: curves over frequency against closed forms and python-control, what is marked, what is written."""

from __future__ import annotations

import io
import math
import re
import shutil
from pathlib import Path

import control
import numpy as np
import pypdf
import pytest
from numpy.typing import NDArray

from loopdoc.cli import run
from loopdoc.documents.language import GERMAN
from loopdoc.documents.magnitudes import duration
from loopdoc.documents.plots import POINTS_DRAWN, Curve, Drawing, Limit, Mark, Panel, save, to_svg
from loopdoc.documents.responses.frequency_plot import frequency_caption, frequency_drawing
from loopdoc.documents.responses.response_figure import drawn_until_s, figure
from loopdoc.documents.responses.responses import at_limit_note, held_note, margin_rows, movement_rows
from loopdoc.documents.responses.upset_story import benefit, declared_upsets, single_loop_assumption, upset_name
from loopdoc.engineering.comparison import Comparison, ScenarioResponses, compare
from loopdoc.engineering.dynamics import ChainDynamics, Dynamics
from loopdoc.engineering.frequency import LoopStage, analyse_chain
from loopdoc.engineering.loop_curves import loop_curves
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.sampled import quoted_margins
from loopdoc.engineering.simulation import simulate
from loopdoc.engineering.structure import FinalElement, cascade_structure, standard_scenarios
from loopdoc.register.load import Loaded, load
from loopdoc.register.starter import starter_files

Array = NDArray[np.float64]
EXAMPLE = Path(__file__).parent.parent / "examples" / "tarn-hollow"


@pytest.fixture(scope="module")
def plant() -> Plant:
    loaded = load(EXAMPLE)
    assert isinstance(loaded, Loaded)
    return Plant(loaded.register)


@pytest.fixture(scope="module")
def cascade(plant: Plant) -> ChainDynamics:
    return Dynamics(plant).loop("TIC-2014").chains[0]


@pytest.fixture(scope="module")
def compared(cascade: ChainDynamics) -> Comparison:
    found = compare(cascade)
    assert isinstance(found, Comparison)
    return found


# --- curves over frequency -----------------------------------------------------------------------


def test_an_integrator_with_dead_time_follows_its_closed_form() -> None:
    """L = a exp(-jwL)/(jwL) with a = 0.5: |L| = a/(wL), phase -90 degrees less wL without a jump."""
    stages = [LoopStage(Controller(0.5), Process(1.0, (), 1.0, integrating=True))]
    curves = loop_curves(stages, analyse_chain(stages)[0])
    w = curves.w_rad_per_s
    assert curves.magnitude == pytest.approx(0.5 / w, rel=1e-12)
    # Rounding of the angle, some 30 turns on at most.
    assert curves.phase_deg == pytest.approx(-90.0 - np.degrees(w), abs=1e-9 * 360 * 30)
    assert curves.phase_margin_at == pytest.approx((0.5, -90.0 - math.degrees(0.5)), rel=1e-4)
    loop = 0.5 * np.exp(-1j * w) / (1j * w)
    assert curves.sensitivity == pytest.approx(np.abs(1 / (1 + loop)), rel=1e-9)
    assert curves.complementary == pytest.approx(np.abs(loop / (1 + loop)), rel=1e-9)
    assert w[0] < 0.5 / 40
    assert w[-1] > math.pi / 2 * 15


def test_the_outer_loop_of_a_cascade_is_that_of_python_control() -> None:
    inner = LoopStage(Controller(2.0, 5.0), Process(1.0, (5.0, 1.0)))
    outer = LoopStage(Controller(1.5, 60.0), Process(1.0, (60.0, 8.0)))
    margins = analyse_chain([inner, outer])
    curves = loop_curves([inner, outer], margins[1])
    s = control.tf("s")
    closed = control.feedback(2.0 * (1 + 1 / (5 * s)) / ((5 * s + 1) * (s + 1)), 1)
    loop = 1.5 * (1 + 1 / (60 * s)) * closed / ((60 * s + 1) * (8 * s + 1))
    expected = loop(1j * curves.w_rad_per_s)
    assert curves.magnitude == pytest.approx(np.abs(expected), rel=1e-9)
    # The phase is continued, so that it is compared on the circle.
    assert np.exp(1j * np.radians(curves.phase_deg)) == pytest.approx(expected / np.abs(expected), rel=1e-9)
    # The largest of 300 points lies close below the peak that the margins quote: neighbours differ by 3 %.
    assert curves.sensitivity.max() == pytest.approx(margins[1].max_sensitivity, rel=1e-3)
    assert curves.phase_margin_at is not None
    assert curves.phase_margin_at[1] + 180.0 == pytest.approx(margins[1].phase_margin_deg, abs=0.01)


def test_curves_end_at_half_the_sampling_frequency_and_are_sampled_where_the_margins_are() -> None:
    """Lag of 6 s at 3 s: P control in z, K (1 - b)/(z - b) with b = exp(-h/T), after one more interval of nothing."""
    stages = [LoopStage(Controller(1.0, interval_s=3.0), Process(1.0, (6.0,)))]
    margins = quoted_margins([stages])[0][0]
    assert margins.sampled
    curves = loop_curves(stages, margins)
    assert curves.w_rad_per_s[-1] == pytest.approx(math.pi / 3.0)
    decay = math.exp(-3.0 / 6.0)
    z = np.exp(1j * curves.w_rad_per_s * 3.0)
    assert curves.magnitude == pytest.approx(np.abs((1 - decay) / (z - decay)), rel=1e-9)


# --- the figure ----------------------------------------------------------------------------------


def marks(panel: Panel) -> list[str]:
    return [mark.label for mark in panel.marks]


def test_each_loop_of_a_cascade_has_its_column_with_margins_and_peaks(cascade: ChainDynamics) -> None:
    drawing = frequency_drawing(cascade)
    assert [panel.title for panel in drawing.rows[0]] == ["TIC-2014", "FIC-2011"]
    for column, margins in zip(zip(*drawing.rows, strict=True), reversed(cascade.margins), strict=True):
        gain, phase, sensitivities = column
        # Three digits are printed.
        assert float(marks(gain)[0].removeprefix("GM ")) == pytest.approx(margins.gain_margin, rel=5e-3)
        assert float(marks(phase)[0][3:-1]) == pytest.approx(margins.phase_margin_deg, rel=5e-3)
        assert float(marks(sensitivities)[0].removeprefix("Ms ")) == pytest.approx(margins.max_sensitivity, rel=5e-3)
        # The stroke of the gain margin reaches from the curve to 1, that of the phase margin from -180 degrees.
        stroke = gain.marks[0]
        curve = gain.curves[0]
        read = np.exp(np.interp(np.log(stroke.x), np.log(curve.x), np.log(curve.y)))
        assert stroke.to == pytest.approx(read, rel=1e-3)  # read between two of 300 points
        assert (stroke.y, phase.marks[0].y) == (1.0, -180.0)
        assert gain.period is not None
        assert "rad/s" in sensitivities.x_label


def placed(panel: Panel, mark: Mark) -> tuple[Array, Array]:
    """Share of the panel at which the name of a mark begins and ends, by its width and height as drawn, and of the
    curve's points: each (x, y) from the lower left corner.
    """
    assert panel.y_view is not None
    curve = panel.curves[0]
    low, high = np.log(panel.y_view)

    def share(x: float | Array, y: float | Array) -> Array:
        across = np.log(np.asarray(x) / curve.x[0]) / math.log(curve.x[-1] / curve.x[0])
        return np.stack((across, (np.log(y) - low) / (high - low)), axis=-1)

    # Two columns of 180 mm, panels 1.2 in high, letters of 6.5 pt about half as wide as high.
    wide, tall = len(mark.label) * 3.3 / 210.0, 6.5 / 86.0
    end = share(mark.x, min(mark.y, mark.to) if mark.is_below else math.sqrt(mark.y * mark.to))
    left = end[0] - 4.0 / 210.0 - wide if mark.is_left else end[0] + 4.0 / 210.0
    bottom = end[1] - 1.0 / 86.0 - tall if mark.is_below else end[1] - tall / 2.0
    return np.array([left, left + wide, bottom, bottom + tall]), share(curve.x, curve.y)


def alone(cascade: ChainDynamics, stage: LoopStage) -> ChainDynamics:
    """One loop, by the names of the innermost of a cascade."""
    innermost = cascade.chain.levels[0]
    level = type(innermost)(innermost.loop, innermost.route, stage)
    return ChainDynamics(type(cascade.chain)((level,)), quoted_margins([[stage]])[0])


def test_the_name_of_a_gain_margin_lies_clear_of_its_curve(plant: Plant, cascade: ChainDynamics) -> None:
    dynamics = Dynamics(plant)
    chains = [chain for tag in plant.controlled for chain in dynamics.loop(tag).chains]
    # A lag executed twice in its time constant: the gain margin is read at half the sampling frequency.
    late = alone(cascade, LoopStage(Controller(1.0, interval_s=3.0), Process(1.0, (6.0,))))
    above_one = alone(cascade, LoopStage(Controller(20.0, 5.0), Process(1.0, (5.0,), 2.0)))
    for chain in (*chains, late, above_one):
        for panel in frequency_drawing(chain).rows[0]:
            for mark in panel.marks:
                (left, right, bottom, top), curve = placed(panel, mark)
                assert min(left, bottom) >= 0.0, panel.title
                assert max(right, top) <= 1.0, panel.title
                x, y = curve.T
                assert not np.any((left < x) & (x < right) & (bottom < y) & (y < top)), panel.title
    for chain in (late, above_one):
        (mark,) = frequency_drawing(chain).rows[0][0].marks
        assert mark.is_left


def test_an_unstable_loop_is_named_so_and_has_no_peaks(cascade: ChainDynamics) -> None:
    drawing = frequency_drawing(alone(cascade, LoopStage(Controller(20.0, 5.0), Process(1.0, (5.0,), 2.0))))
    assert "NOT STABLE" in drawing.rows[0][0].title
    assert drawing.rows[2][0].marks == ()


def test_the_caption_states_the_assumptions(cascade: ChainDynamics, plant: Plant, compared: Comparison) -> None:
    told = frequency_caption(cascade)
    for words in ("exact dead time", "linear process models", "every loop below it closed", "half of itself"):
        assert words in told
    told = figure(plant, compared).caption
    for words in ("10 % of span", "normal value", "output limits", "stroke time", "one controller on FV-2011"):
        assert words in told


def test_upsets_that_a_figure_has_no_room_for_are_named_in_its_caption(plant: Plant, compared: Comparison) -> None:
    """Three levels and a declared upset are five; the outermost loop's own has the least news and is left out."""
    crowded = compare(Dynamics(plant).loop("AIC-2015").chains[0])
    assert isinstance(crowded, Comparison)
    drawing = figure(plant, crowded)
    assert len(crowded.scenarios) == len(drawing.rows[0]) + 1
    assert not any("AIC-2015" in panel.title for panel in drawing.rows[0])
    assert "Not drawn for want of room: the upset at AIC-2015." in drawing.caption
    assert "Aus Platzgründen nicht gezeichnet: die Störung an AIC-2015." in figure(plant, crowded, GERMAN).caption
    assert len(compared.scenarios) <= len(figure(plant, compared).rows[0])
    assert "Not drawn" not in figure(plant, compared).caption


def test_a_setpoint_step_is_named_as_far_as_its_limit_lets_it_go(plant: Plant) -> None:
    """DIC-1012 stands at 1120 kg/m3 and may be set to 1150: a tenth of its span is more than that."""
    limited, whole = (compare(Dynamics(plant).loop(tag).chains[0]) for tag in ("DIC-1012", "FIC-2031"))
    assert isinstance(limited, Comparison)
    assert isinstance(whole, Comparison)
    step = limited.scenarios[0]
    controller = plant.controlled["DIC-1012"].loop.controller
    assert controller is not None
    room = controller.setpoint.high.value - controller.setpoint.normal.value  # type: ignore[union-attr]
    assert upset_name(limited, step) == f"Setpoint of DIC-1012 up by {room:g}\u00a0kg/m³, to its limit"
    assert upset_name(limited, step, GERMAN).endswith("kg/m³ bis an seine Grenze")
    assert "10 % of span in its setpoint, or as far as its limit goes, and" in figure(plant, limited).caption
    assert "limit" not in upset_name(whole, whole.scenarios[0])
    assert "as far as" not in figure(plant, whole).caption


def test_responses_are_drawn_while_something_moves(cascade: ChainDynamics, plant: Plant, compared: Comparison) -> None:
    """The single loop is the last to come to rest; all columns end with it, and nothing later moves by a hundredth."""
    responses = [one for entry in compared.scenarios for one in (entry.tuned, entry.single) if one is not None]
    until = drawn_until_s(responses)
    assert until < responses[0].time_s[-1]
    assert max(one.metrics.settling_s for one in responses) < until
    for one in responses:
        after = one.time_s > until
        for signal in (one.measurement_pct[-1], one.travel_pct):
            assert np.abs(signal[after] - signal[-1]).max() <= 0.01 * (signal.max() - signal.min())
    above, below = figure(plant, compared).rows
    ends = {curve.x[-1] for panel in (*above, *below) for curve in panel.curves}
    assert len(ends) == 1


def test_no_peak_is_left_out_of_a_figure() -> None:
    """A kick of one point among thousands is drawn to its full height, and at its own time."""
    y = np.zeros(8001)
    y[17], y[5003] = 43.0, -7.0
    svg = to_svg(Drawing("kick", ((Panel("", "time, s", "y", (Curve("y", "solid", np.arange(8001.0), y),)),),)))
    path = max(re.findall(r'd="(M[^"]*)"', svg), key=len)
    points = np.array([[float(x) for x in pair] for pair in re.findall(r"(-?[\d.]+) (-?[\d.]+)", path)])
    assert len(points) < 2 * POINTS_DRAWN
    across = (points[:, 0] - points[0, 0]) / (points[-1, 0] - points[0, 0]) * 8000
    # The picture counts downward; a hundredth of a point of the page is a fiftieth of a step of time here.
    assert across[points[:, 1].argmin()] == pytest.approx(17, abs=1)
    assert across[points[:, 1].argmax()] == pytest.approx(5003, abs=1)
    rest = points[0, 1]
    assert (points[:, 1].max() - rest) / (rest - points[:, 1].min()) == pytest.approx(7 / 43, rel=1e-3)


def test_alarms_trips_and_output_limits_are_in_the_time_responses(plant: Plant) -> None:
    compared = compare(Dynamics(plant).loop("PIC-2021").chains[0])
    assert isinstance(compared, Comparison)
    above, below = figure(plant, compared).rows
    names = {limit.label.split()[0] for limit in above[0].limits}
    register = plant.register
    assert {"H", "L"} & names
    trips = {trip.interlock.tag for trip in plant.trips if (trip.loop or trip.instrument) is not None}
    assert names & trips, "the trips on what PIC-2021 measures"
    for limit in above[0].limits:
        tag = limit.label.split()[0]
        if tag in register.interlocks:
            limits = [one.limit.to("barg") for one in register.interlocks[tag].initiators.values()]  # type: ignore[union-attr]
            assert limit.value in limits
    assert [limit.value for limit in below[0].limits] == [0.0, 100.0]


# --- files ---------------------------------------------------------------------------------------


def starter(folder: Path) -> Path:
    for name, content in starter_files().items():
        file = folder / name
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_bytes(content)
    return folder


def plotted(folder: Path, tag: str, file: Path) -> bytes:
    out, err = io.StringIO(), io.StringIO()
    assert run(["response", str(folder), tag, "--plot", str(file)], out, err) == 0, err.getvalue()
    return file.read_bytes()


def test_a_pdf_has_a_page_over_time_and_one_over_frequency(tmp_path: Path) -> None:
    folder = starter(tmp_path / "plant")
    first = plotted(folder, "LIC-1001", tmp_path / "a.pdf")
    pages = [page.extract_text() for page in pypdf.PdfReader(tmp_path / "a.pdf").pages]
    assert len(pages) == 2
    assert "time, " in pages[0]
    assert "frequency, rad/s" in pages[1]
    assert "period, " in pages[1]
    assert first == plotted(folder, "LIC-1001", tmp_path / "b.pdf")


@pytest.mark.parametrize("ending", ["svg", "png"])
def test_one_figure_holds_both_and_has_the_same_bytes_again(tmp_path: Path, ending: str) -> None:
    folder = starter(tmp_path / "plant")
    first = plotted(folder, "FIC-1002", tmp_path / f"a.{ending}")
    assert first == plotted(folder, "FIC-1002", tmp_path / f"b.{ending}")
    if ending == "svg":
        text = first.decode()
        assert "frequency, rad/s" in text
        assert "time, " in text


def test_a_loop_that_is_not_simulated_is_drawn_over_frequency(tmp_path: Path) -> None:
    folder = tmp_path / "plant"
    shutil.copytree(EXAMPLE, folder)
    file = folder / "units" / "10-feed-and-evaporation.yaml"
    text = file.read_text(encoding="utf-8")
    assert text.count("lags: [700 min, 1 min]") == 1
    file.write_text(text.replace("[700 min, 1 min]", "[70000 min, 1 min]"), encoding="utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    assert not isinstance(compare(Dynamics(Plant(loaded.register)).loop("DIC-1012").chains[0]), Comparison)
    plotted(folder, "DIC-1012", tmp_path / "plot.svg")
    assert "time, " not in (tmp_path / "plot.svg").read_text(encoding="utf-8")


def test_a_log_axis_has_plain_numbers_and_nothing_is_a_path(tmp_path: Path) -> None:
    x = np.geomspace(0.001, 10.0, 50)
    drawing = Drawing("x", ((Panel("", "x", "y", (Curve("", "solid", x, x),), x_is_log=True, y_is_log=True),),))
    texts = re.findall(r">([^<>]+)</text>", to_svg(drawing))
    assert {"0.001", "0.1", "10"} <= set(texts)
    with pytest.raises(ValueError, match=r"\.svg, \.png or \.pdf"):
        save([drawing], tmp_path / "plot.jpg")


def one_panel(x: list[float], y: list[float], **more: object) -> Drawing:
    curve = Curve("a", "solid", np.array(x), np.array(y))
    return Drawing("one", ((Panel("", "time, s", "y", (curve,), **more),),))  # type: ignore[arg-type]


def test_a_limit_far_off_does_not_flatten_the_curve() -> None:
    limits = (Limit("H 12", 12.0), Limit("HH 100", 100.0))
    texts = re.findall(r">([^<>]+)</text>", to_svg(one_panel([0, 1], [0, 10], limits=limits)))
    assert "H 12" in texts
    assert "HH 100" not in texts
    assert "100" not in texts


def test_numbers_of_an_axis_stand_where_their_values_are() -> None:
    """At the same places along the axis as the corners of a curve that turns at them."""
    svg = to_svg(one_panel([0, 10, 20, 30, 40], [0, 9, 1, 8, 0]))
    corners = [float(x) for x in re.findall(r"[ML] ([\d.]+) [\d.]+", max(re.findall(r'd="(M[^"]*)"', svg), key=len))]
    numbers = {text: float(x) for x, text in re.findall(r'<text[^>]* x="([\d.]+)"[^>]*>([^<>]+)</text>', svg)}
    assert [numbers[text] for text in ("0", "10", "20", "30", "40")] == pytest.approx(corners, abs=0.01)


def test_words_that_look_like_formulas_are_written_as_they_are(tmp_path: Path) -> None:
    drawing = Drawing("$x$", ((Panel("$a_b$", "x", "y", (Curve("", "solid", np.arange(2.0), np.arange(2.0)),)),),))
    save([drawing], tmp_path / "a.pdf")
    assert "$a_b$" in pypdf.PdfReader(tmp_path / "a.pdf").pages[0].extract_text()


# --- told in sentences ---------------------------------------------------------------------------


def test_a_declared_upset_is_told(cascade: ChainDynamics, compared: Comparison) -> None:
    told = declared_upsets(cascade, compared)
    declared = "The upset “steam pressure falls” (declared at FIC-2011) moves the measurement of FIC-2011 by"
    assert told.startswith(declared)
    assert "through a lag of 15" in told
    assert "TIC-2014 then departs by" in told
    assert "with the single loop by" in told


def test_a_declared_upset_at_a_process_input_names_the_process(tmp_path: Path) -> None:
    folder = starter(tmp_path)
    file = folder / "units" / "10-feed.yaml"
    text = file.read_text(encoding="utf-8")
    upset = "disturbances: {feed is cut: {size: -1 m3/h, at: process input}}"
    file.write_text(text.replace("  LIC-1001:\n", f"  LIC-1001:\n    {upset}\n"), encoding="utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    dynamics = Dynamics(Plant(loaded.register)).loop("LIC-1001").chains[0]
    told = declared_upsets(dynamics, compare(dynamics))
    assert told.startswith("The upset “feed is cut” (declared at LIC-1001) acts on LIC-1001 as a change of FIC-1002 by")
    assert "through the process of LIC-1001" in told
    assert "LIC-1001 then departs by" in told


def test_what_a_cascade_is_compared_with_stands_beside_the_ratios(compared: Comparison) -> None:
    assert "tuned by SIMC" in benefit(compared)
    told = single_loop_assumption(compared)
    assert "maximum sensitivity of TIC-2014" in told
    assert "FV-2011" in told
    entry = next(entry for entry in compared.scenarios if entry.single is not None)
    ratio = entry.ratio("iae_pct_s")
    assert ratio is not None
    assert entry.single is not None
    assert ratio == pytest.approx(entry.tuned.metrics.iae_pct_s / entry.single.metrics.iae_pct_s)


def test_an_upset_at_the_input_of_an_integrating_process_is_in_units_of_what_commands_it(tmp_path: Path) -> None:
    loaded = load(starter(tmp_path))
    assert isinstance(loaded, Loaded)
    found = compare(Dynamics(Plant(loaded.register)).loop("LIC-1001").chains[0])
    assert isinstance(found, Comparison)
    names = [upset_name(found, entry) for entry in found.scenarios]
    secondary = loaded.register.loops["FIC-1002"].measurement
    # A tenth of the span of the secondary, which commands the level.
    tenth = secondary.range.span / 10.0  # type: ignore[union-attr]
    assert f"An upset of {tenth:g}\u00a0m³/h at the process input of LIC-1001" in names


# --- the issued document -------------------------------------------------------------------------


def test_the_document_holds_review_ratios_and_both_figures(tmp_path: Path) -> None:
    folder = starter(tmp_path / "plant")
    out, err = io.StringIO(), io.StringIO()
    arguments = ["issue", str(folder), "--out", str(tmp_path / "out"), "--documents", "response", "--formats", "html"]
    assert run(arguments, out, err) == 0, err.getvalue()
    page = (tmp_path / "out" / "responses" / "LIC-1001.html").read_text(encoding="utf-8")
    assert "Margins decide, rules advise. Try tuning changes only under supervision." in page
    assert page.count('role="img"') == 2
    for words in ("Cascade over single loop", "tuned by SIMC on all processes in series", "Trans. ASME 64:759-768"):
        assert words in page
    tables = re.findall(r'<div class="reviewed">(.*?)</div>', page, flags=re.DOTALL)
    assert [re.search(r"<h3>(.*?)</h3>", table)[1] for table in tables] == [  # type: ignore[index]
        "LIC-1001, standard form",
        "FIC-1002, standard form",
    ]
    for table in tables:
        rows = re.findall(r'<tr><th scope="row">(.*?)</th>(.*?)</tr>', table)
        assert rows[0][0] == "as configured"
        assert len(rows) > 5
        for rule, cells in rows:
            # Gain, reset, rate, then the four figures of robustness: never one without the others.
            assert all(re.findall(r'<td class="number">(.*?)</td>', cells)), rule
            assert len(re.findall(r'<td class="number">', cells)) == 7


def test_a_scheme_with_a_loop_on_hold_says_what_is_not_checked(tmp_path: Path) -> None:
    folder = starter(tmp_path / "plant")
    file = folder / "units" / "10-feed.yaml"
    text = file.read_text(encoding="utf-8")
    held = re.sub(r"(LIC-1001:.*?gain: )[^\n,}]+( per m3/h)", r"\1{hold: step test}", text, count=1, flags=re.DOTALL)
    assert held != text
    file.write_text(held, encoding="utf-8")
    out, err = io.StringIO(), io.StringIO()
    arguments = ["issue", str(folder), "--out", str(tmp_path / "out"), "--documents", "response", "--formats", "html"]
    assert run(arguments, out, err) == 0, err.getvalue()
    page = (tmp_path / "out" / "responses" / "LIC-1001.html").read_text(encoding="utf-8")
    assert "<b>LIC-1001:</b> not checked: the process gain of LIC-1001 is on hold." in page
    assert "FIC-1002, standard form" in page


# --- the tables of the issued document -----------------------------------------------------------


def test_movements_stand_for_the_cascade_and_the_single_loop_side_by_side(compared: Comparison) -> None:
    rows = movement_rows(compared)
    assert [len(row["cells"]) for row in rows] == [8] * len(compared.scenarios)
    for row, entry in zip(rows, compared.scenarios, strict=True):
        assert entry.single is not None
        assert row["cells"][3] == str(entry.tuned.metrics.reversals)
        assert row["cells"][7] == str(entry.single.metrics.reversals)
        # The peak of an upset is where the curve that is drawn is furthest from its start, to a point of it.
        if entry.scenario.disturbances:
            curve = entry.single.measurement_pct[-1]
            top = int(np.abs(curve - curve[0]).argmax())
            assert entry.peak_time_s(entry.single) == pytest.approx(
                entry.single.time_s[top], abs=float(entry.single.time_s[1])
            )
            assert row["cells"][4] == duration(entry.single.metrics.time_to_peak_s)


def test_a_setpoint_that_is_only_approached_has_no_time_to_peak() -> None:
    """A PI controller whose reset cancels the lag closes to a lag alone, which never passes its setpoint."""
    found = simulate(
        [cascade_structure([LoopStage(Controller(1.0, 50.0), Process(1.0, (50.0,)))], final_element=FinalElement())],
        standard_scenarios(1),
    )[0]
    step, upset = (ScenarioResponses(response.scenario, response, None) for response in found)
    assert step.scenario.setpoint_step_pct
    assert math.isnan(step.peak_time_s(step.tuned))
    assert upset.peak_time_s(upset.tuned) > 0.0


def test_a_lasting_offset_that_is_only_approached_has_no_time_to_peak() -> None:
    """Proportional action on a lag leaves 1/(1 + K) of an upset behind, which the measurement nears as a lag does."""
    found = simulate(
        [cascade_structure([LoopStage(Controller(1.0), Process(1.0, (50.0,)))], final_element=FinalElement())],
        standard_scenarios(1),
    )[0]
    _, upset = (ScenarioResponses(response.scenario, response, None) for response in found)
    assert upset.tuned.metrics.peak_pct == pytest.approx(5.0, rel=0.01)  # half of 10 %
    assert math.isnan(upset.peak_time_s(upset.tuned))


def test_a_response_of_few_steps_is_drawn_past_where_it_settles() -> None:
    """A loop executed once in 0.6 lags settles by the second step, of which alone no curve could be drawn."""
    found = simulate(
        [
            cascade_structure(
                [LoopStage(Controller(1.0, interval_s=3.0), Process(1.0, (5.0,)))], final_element=FinalElement()
            )
        ],
        standard_scenarios(1),
    )[0]
    assert drawn_until_s(found) >= 2.0 * max(response.metrics.settling_s for response in found)


def test_margins_of_a_level_stand_with_its_peaks_and_bandwidth(cascade: ChainDynamics) -> None:
    outer = cascade.margins[-1]
    row = margin_rows(cascade)[0]
    assert float(row["max_complementary"]) == pytest.approx(outer.max_complementary_sensitivity, rel=5e-3)
    assert float(row["bandwidth"].split()[0]) == pytest.approx(outer.bandwidth_rad_per_s, rel=5e-3)


def test_an_upset_that_the_final_element_cannot_make_good_is_told(plant: Plant, compared: Comparison) -> None:
    """5 K at 0.24 % of 50 K per % ask for 41.7 % of the fan's speed; from the middle of 20 to 100 % it has 40 %."""
    fan = compare(Dynamics(plant).loop("TIC-3050").chains[0])
    assert isinstance(fan, Comparison)
    assert at_limit_note(fan) == (
        "An upset of 5\u00a0K at TIC-3050 does not settle: the output of TIC-3050 stands at its limit, with SC-3050 at "
        "100\u00a0%; from the middle of its limits that is more than it can make good."
    )
    assert at_limit_note(compared) == ""
    out, err = io.StringIO(), io.StringIO()
    assert run(["response", str(EXAMPLE), "TIC-3050"], out, err) == 0
    assert "primary disturbance: does not settle, since the output of TIC-3050 stands at its limit" in out.getvalue()
    assert "has no reset" not in out.getvalue()


def test_what_functions_take_in_besides_the_loops_is_told(plant: Plant, cascade: ChainDynamics) -> None:
    """The drum level's output meets the steam flow at the sum."""
    drum = Dynamics(plant).loop("LIC-3001").chains[0]
    sums = [function for level in drum.chain.levels for function in level.route.via]
    assert sums, "a three-element level commands through a sum"
    told = held_note(drum)
    assert told.startswith(f"FT-3002 into {sums[0].tag} moves in the responses over time under steam demand rises")
    assert "LIC-3001" not in told
    assert held_note(cascade) == ""
