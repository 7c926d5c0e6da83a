"""What documents, the command and the site say of split ranges and overrides: the numbers of the calculation."""

from __future__ import annotations

import io
import json
import re
import shutil
from pathlib import Path

import pytest

from loopdoc.cli import run
from loopdoc.documents.basis import Basis, basis_of
from loopdoc.documents.language import ENGLISH, GERMAN
from loopdoc.documents.responses.override_story import (
    override_caption,
    override_figure,
    override_section,
    override_told,
)
from loopdoc.documents.responses.responses import responses, supplements
from loopdoc.documents.responses.split_range_story import split_caption, split_figure, split_section, split_told
from loopdoc.documents.site.plot import override_plot_data, split_plot_data
from loopdoc.engineering.override import Override
from loopdoc.engineering.split_range import SplitRange
from loopdoc.register.load import Loaded, load

ROOT = Path(__file__).parents[1]
EXAMPLE = ROOT / "examples" / "tarn-hollow"


@pytest.fixture(scope="module")
def basis() -> Basis:
    loaded = load(EXAMPLE)
    assert isinstance(loaded, Loaded)
    return basis_of(loaded)


@pytest.fixture(scope="module")
def split(basis: Basis) -> SplitRange:
    found = basis.split_range("PIC-2021")
    assert isinstance(found, SplitRange)
    return found


@pytest.fixture(scope="module")
def rivals(basis: Basis) -> Override:
    found = basis.override("FIC-2001")
    assert isinstance(found, Override)
    return found


def plain(text: str) -> str:
    return text.replace("\N{NO-BREAK SPACE}", " ")


# --- split range -----------------------------------------------------------------------------------


def test_a_figure_draws_the_opening_of_each_final_element(basis: Basis, split: SplitRange) -> None:
    drawing = split_figure(basis.plant, split)
    above, below = drawing.rows
    assert [panel.title for panel in above] == ["Setpoint step", "Upset at PIC-2021"]
    for panel, response in zip(below, split.responses, strict=True):
        assert [curve.label for curve in panel.curves] == ["PV-2021A", "PV-2021B"]
        assert len({curve.style for curve in panel.curves}) == 2
        for curve, travel in zip(panel.curves, response.travel_pct, strict=True):
            assert (curve.y == travel).all()
    assert {"H", "IS-2001"} & {limit.label.split()[0] for limit in above[0].limits}


def test_the_caption_tells_the_start_and_that_the_register_does_not(split: SplitRange) -> None:
    told = plain(split_caption(split))
    for words in (
        "PV-2021A at 8.33 % and PV-2021B at 0 %", "the output at 41.3 %", "the register does not say", "PY-2021",
        "handover at 50 %", "stroke times (3 s of PV-2021A and 3 s of PV-2021B)", "Inherent characteristics",
    ):  # fmt: skip
        assert words in told
    german = plain(split_caption(split, GERMAN))
    for words in ("PV-2021A bei 8,33 %", "sagt das Register nicht", "Übergang bei 50 %"):
        assert words in german


def test_sentences_tell_what_crosses_and_the_worst_branch(split: SplitRange) -> None:
    told = plain(split_told(split))
    assert "carries the output over the handover at 50 %" in told
    assert "PV-2021A at 0 % and PV-2021B at 6.25 %" in told
    assert told.endswith("the worst is that with PV-2021B, Ms 1.43.")
    assert "führt den Ausgang über den Übergang bei 50 %" in plain(split_told(split, GERMAN))
    none = SplitRange(
        split.chains, split.function, split.structure, split.near, split.far, split.handover_pct, False,
        split.responses[:1],
    )  # fmt: skip
    assert split_told(none).startswith("None of the upsets carries the output over the handover")


def test_the_tables_hold_the_figures_of_the_responses(split: SplitRange) -> None:
    view = split_section(split, "<svg/>")
    assert [row["crosses"] for row in view["openings"]] == ["no", "yes"]
    for row, response in zip(view["openings"], split.responses, strict=True):
        ends = [float(row["cells"][2 * place]) for place in (0, 1)]
        # Three digits are printed.
        assert ends == pytest.approx([float(travel[-1]) for travel in response.travel_pct], rel=5e-3, abs=5e-3)
        assert all(" to " in row["cells"][2 * place + 1] for place in (0, 1))
    assert view["rows"][1]["cells"][-1] == str(split.responses[1].metrics.reversals)


# --- override --------------------------------------------------------------------------------------


def test_a_figure_draws_both_measurements_and_what_is_asked_and_passed(basis: Basis, rivals: Override) -> None:
    drawing = override_figure(basis.plant, rivals)
    idle, busy, asked = drawing.rows
    assert [panel.title for panel in idle] == [
        "FIC-2001: setpoint to its limit", "PDIC-2016: external reset", "PDIC-2016: no external reset",
    ]  # fmt: skip
    assert [row[0].y_label for row in drawing.rows] == ["PDIC-2016, mbar", "FIC-2001, t/h", "asked of FIC-1011, t/h"]
    with_reset = asked[1]
    ours, theirs, passed = with_reset.curves
    assert [curve.label for curve in with_reset.curves] == ["FIC-2001", "PDIC-2016", "passed"]
    # A low select passes the lower of the two.
    assert (abs(passed.y - [min(pair) for pair in zip(ours.y, theirs.y, strict=True)]) < 1e-9).all()
    assert busy[1].curves[1].label == "measurement"


def test_sentences_tell_who_stands_by_and_what_a_takeover_comes_to(rivals: Override) -> None:
    told = plain(override_told(rivals))
    entry, (place,) = rivals.responses[-1], rivals.standing_by
    ours, theirs = rivals.taken_over(entry.as_written, place), rivals.taken_over(entry.otherwise, place)
    late, later = (seen.spell.first_s - seen.reaches_s for seen in (ours, theirs))
    assert 0.0 < late < later
    for words in (
        "PDIC-2016 stands by with its measurement 50 mbar below its setpoint",
        "The setpoint of FIC-2001 raised to its limit, 14.2 t/h, does not bring PDIC-2016 into command",
        "Nothing that the register gives brings PDIC-2016 into command",
        f"with external reset it takes over {late:g} s after its measurement has passed its setpoint",
        f"({ours.spell.first_s:g} s after the upset)",
        f"past the setpoint by {3.0 * ours.past_pct:.1f} mbar at most",
        f"without external reset it would take over {later:g} s after its measurement",
    ):
        assert words in told, words
    german = plain(override_told(rivals, GERMAN))
    for words in (
        "PDIC-2016 steht bereit, sein Messwert 50 mbar unter dem Sollwert", "Grenze, 14,2 t/h, anheben",
        "mit externer Integralrückführung übernimmt PDIC-2016", "ohne externe Integralrückführung",
    ):  # fmt: skip
        assert words in german, words
    assert "through a lag of the reset time" in override_caption(rivals)
    assert "Nachstellzeit" in override_caption(rivals, GERMAN)


def test_a_table_has_a_row_for_each_way_of_following(rivals: Override) -> None:
    rows = override_section(rivals, "<svg/>")["rows"]
    assert [row["follows"] for row in rows] == ["with external reset", "without external reset"] * 2
    assert rows[0]["cells"][:4] == ["–"] * 4
    assert plain(rows[2]["cells"][1]) == "74 s"


# --- where they stand ------------------------------------------------------------------------------


def test_the_response_documents_and_the_narrative_hold_them(basis: Basis) -> None:
    pages = {page.name: page for page in responses(basis)}
    assert [view["function"] for view in pages["PIC-2021"].view["splits"]] == ["PY-2021"]
    assert [view["function"] for view in pages["FIC-2001"].view["overrides"]] == ["FY-1011"]
    assert pages["PIC-2021"].view["not_whole"] == []
    told = supplements(basis)
    # The branches are parts of the whole: one figure tells both.
    assert len(told["PIC-2021"].figures) == 1
    assert "handover" in told["PIC-2021"].benefit(ENGLISH)
    assert "PDIC-2016 stands by" in told["FIC-2001"].benefit(ENGLISH)


def test_the_site_gets_every_upset_with_its_panels(basis: Basis, split: SplitRange, rivals: Override) -> None:
    upsets = split_plot_data(basis.plant, split)["upsets"]
    assert [len(upset["panels"]) for upset in upsets] == [2, 2]
    upsets = override_plot_data(basis.plant, rivals)["upsets"]
    assert [len(upset["panels"]) for upset in upsets] == [3] * 4
    assert len({upset["name"] for upset in upsets}) == 4


def test_the_reason_is_told_where_the_whole_is_not_simulated(tmp_path: Path) -> None:
    folder = tmp_path / "plant"
    shutil.copytree(EXAMPLE, folder)
    file = folder / "units" / "20-rectification.yaml"
    text = file.read_text(encoding="utf-8")
    old = "operating: {low: 70 mbar, normal: 150 mbar"
    assert text.count(old) == 1
    file.write_text(text.replace(old, "operating: {low: 70 mbar, normal: 200 mbar"), encoding="utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    page = next(page for page in responses(basis_of(loaded)) if page.name == "FIC-2001")
    assert page.view["overrides"] == []
    (told,) = page.view["not_whole"]
    assert told.startswith("No response is drawn of the whole: FIC-2001, PDIC-2016 would command")
    out, err = io.StringIO(), io.StringIO()
    assert run(["response", str(folder), "PDIC-2016"], out, err) == 0, err.getvalue()
    assert "the override as a whole: no time responses: FIC-2001, PDIC-2016 would command" in out.getvalue()


# --- the command -----------------------------------------------------------------------------------


def answered(tag: str, *options: str) -> str:
    out, err = io.StringIO(), io.StringIO()
    assert run(["response", str(EXAMPLE), tag, *options], out, err) == 0, err.getvalue()
    return out.getvalue()


def test_the_command_tells_of_a_split_range_in_json_and_text(split: SplitRange) -> None:
    found = json.loads(answered("PIC-2021", "--format", "json"))
    assert [branch["final_element"] for branch in found["branches"]] == ["PV-2021A", "PV-2021B"]
    whole = found["split_range"]
    assert whole["function"] == "PY-2021"
    assert whole["start_declared"] is False
    assert whole["worst_branch"] == "PV-2021B"
    crossing = whole["scenarios"]["primary disturbance"]
    assert crossing["crosses_handover"] is True
    assert crossing["openings_pct"]["PV-2021B"]["high"] == pytest.approx(split.responses[1].travel_range_pct[1][1])
    text = answered("PIC-2021")
    assert "PIC-2021 > PY-2021 > PV-2021A and PV-2021B, across the handover" in text
    assert re.search(r"PV-2021B +0 +6\.25 +0 +7\.88   beyond the handover", text)
    assert "since the register gives no `normal_input` of PY-2021" in text


def test_the_command_tells_of_an_override_in_json_and_text(rivals: Override) -> None:
    found = json.loads(answered("PDIC-2016", "--format", "json"))["override"]
    assert found["in_command"] == "FIC-2001"
    assert found["when_not_followed"] == {"FIC-2001": "track", "PDIC-2016": "track"}
    sized = found["scenarios"]["PDIC-2016 past its setpoint"]
    ours, theirs = (sized[name]["candidates"]["PDIC-2016"] for name in ("as_written", "otherwise"))
    place = rivals.standing_by[0]
    assert ours["takes_over_s"] == rivals.taken_over(rivals.responses[-1].as_written, place).spell.first_s
    assert theirs["past_setpoint"] > ours["past_setpoint"] > 0.0
    assert found["scenarios"]["setpoint to its limit"]["as_written"]["candidates"]["PDIC-2016"]["takes_over"] is False
    text = answered("FIC-2001")
    assert "FIC-2001 and PDIC-2016 > FY-1011 > FIC-1011 > FV-1011, low select" in text
    assert "no limit or upset that the register gives brings the override into command" in text
    assert "override" not in answered("FIC-1011")


def test_both_are_drawn_by_the_command(tmp_path: Path) -> None:
    for tag, words in (("PIC-2021", "opening, %"), ("FIC-2001", "asked of FIC-1011, t/h")):
        file = tmp_path / f"{tag}.svg"
        answered(tag, "--plot", str(file))
        assert words in file.read_text(encoding="utf-8")
