"""Loop sheets: one page each, nothing lost or overlapping, every value with its unit, signals as published."""

from __future__ import annotations

import io
import re
from dataclasses import replace
from functools import cache
from html import unescape
from pathlib import Path
from typing import Any

import pytest
import weasyprint
from markupsafe import Markup
from pypdf import PdfReader

from loopdoc.documents import pdf
from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.handover.house import house_of
from loopdoc.documents.language import ENGLISH, GERMAN, Language
from loopdoc.documents.loop_sheet.expected_signals import ExpectedRow, expected_commands, expected_readings
from loopdoc.documents.loop_sheet.loop_sheet import SheetView, loop_sheets, sheet_height
from loopdoc.documents.page_fit import DENSITIES, room, title_block_height
from loopdoc.documents.rendering import render
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.pairing import Plant
from loopdoc.register.load import Loaded, load
from loopdoc.rules.check import check

EXAMPLES = Path(__file__).parents[1] / "examples"
NAMES = ("tarn-hollow", "tennessee-eastman")
SIZES = {density.name: density.size for density in DENSITIES}
PT = 0.75
"""Points in a pixel of CSS."""


def basis_of(folder: Path) -> Basis:
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    plant = Plant(loaded.register)
    return Basis(plant, check(plant, loaded.faults), loaded.sources, Dynamics(plant))


@cache
def example(name: str) -> Basis:
    return basis_of(EXAMPLES / name)


@cache
def pages_of(name: str, language: Language = ENGLISH) -> tuple[Page, ...]:
    return tuple(loop_sheets(example(name).in_language(language)))


def page_of(name: str, tag: str) -> Page:
    return next(page for page in pages_of(name) if page.name == tag)


def sheet_of(folder: Path, text: str, tag: str = "") -> Page:
    """The sheet of one loop of a register written for the test."""
    (folder / "register.yaml").write_text(f"format: 1\n{text}", encoding="utf-8")
    return next(page for page in loop_sheets(basis_of(folder)) if tag in ("", page.name))


def html(page: Page) -> str:
    return render(page.template, document=page.document, stylesheet="", **page.view)


def text_of(source: str) -> str:
    """What a reader reads: tags gone, space as one space, no-break spaces kept."""
    inside = re.sub(r"<title>.*?</title>", "", source, flags=re.S)
    return re.sub(r"[ \n]+", " ", unescape(re.sub(r"<[^>]+>", " ", inside)))


# ---------------------------------------------------------------- the page as set


class SetPage:
    """One sheet laid out by WeasyPrint: its boxes in points from the upper margin."""

    def __init__(self, page: Page) -> None:
        fetcher, fonts = pdf._set_up()
        css = pdf._css("")
        self.source = html(page)
        document = weasyprint.HTML(string=self.source, url_fetcher=fetcher).render(stylesheets=[css], font_config=fonts)
        self.count = len(document.pages)
        box = document.pages[0]._page_box
        self.texts: list[tuple[float, float, float, float, str]] = []
        self.main = self.title_block = 0.0
        self._walk(box, inside="")

    def _walk(self, box: Any, inside: str) -> None:
        classes = box.element.get("class", "") if box.element is not None else ""
        if box.element_tag == "main":
            inside, self.main = "main", box.height * PT
        elif classes == "title-block":
            inside, self.title_block = "title-block", box.border_height() * PT
        elif classes == "draft":
            return
        if inside and hasattr(box, "text") and box.text.strip():
            left, baseline = box.position_x * PT, (box.position_y + box.baseline) * PT
            size = box.style["font_size"] * PT
            # From the top of the capitals to the foot of the descenders.
            self.texts.append((left, baseline - 0.7 * size, left + box.width * PT, baseline + 0.22 * size, box.text))
        for child in getattr(box, "children", ()):
            self._walk(child, inside)

    def overlaps(self) -> list[tuple[str, str]]:
        """Texts that lie on each other."""
        found = []
        texts = sorted(self.texts, key=lambda text: text[1])
        for index, a in enumerate(texts):
            for b in texts[index + 1 :]:
                if b[1] >= a[3]:
                    break
                if a[0] < b[2] - 0.1 and b[0] < a[2] - 0.1:  # words beside each other touch
                    found.append((a[4], b[4]))
        return found

    def broken_words(self) -> set[str]:
        """Words on the page that are no words of the text: torn apart because a cell is too narrow."""
        words = {*text_of(self.source).split(" "), "1", "of"}  # 1 of 1: the page number stands in no source
        words |= {piece for word in words for piece in re.findall(r"[^-/]+[-/]?|[-/]", word)}
        shown = {word for text in self.texts for word in text[4].strip().split(" ")}
        return {word for word in shown if word and word not in words}


def fill(page: Page) -> float:
    """The share of its page that a sheet fills, as reckoned."""
    view = page.view["sheet"]
    return sheet_height(view, SIZES[view.density]) / room(page.document)


@pytest.mark.parametrize("language", [ENGLISH, GERMAN])
@pytest.mark.parametrize("name", NAMES)
def test_a_full_sheet_is_one_page_with_nothing_on_top_of_anything(name: str, language: Language) -> None:
    """The sheets that fill nine tenths of their page and more, ten at most, and the fullest indicator."""
    pages = sorted(pages_of(name, language), key=fill, reverse=True)
    indicator = next(page for page in pages if not page.view["sheet"].controller)
    chosen = [indicator, *(page for page in pages[:10] if fill(page) > 0.9)]
    assert len(chosen) > 5
    for page in chosen:
        found = SetPage(page)
        view = page.view["sheet"]
        assert found.count == 1, page.name
        assert found.overlaps() == [], page.name
        assert language is GERMAN or found.broken_words() == set(), page.name  # German words break at soft hyphens
        assert found.main + found.title_block <= 277 * 72 / 25.4, page.name  # what lies between the margins
        # The reckoned heights are those of the page, or a little more; with the German heads a line more, of 9.4 pt at
        # most, where "Freigegeben von" just fits into its column.
        spare = 3.0 if language is ENGLISH else 3.0 + 9.5
        assert -0.1 < sheet_height(view, SIZES[view.density]) - found.main < spare, page.name
        assert title_block_height(page.document) == pytest.approx(found.title_block, abs=1.0), page.name


def test_every_sheet_of_the_examples_fits_its_page() -> None:
    for language in (ENGLISH, GERMAN):
        assert [page.name for name in NAMES for page in pages_of(name, language) if fill(page) > 1.0] == []


LOGO = b'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 320 50"><rect width="320" height="50"/></svg>'
"""As wide and as high as a title block takes."""


@pytest.mark.parametrize(
    "texts",
    [b"", b"owner: Example Works, Solvents and Intermediates\ncautions: Site procedure SP-12 applies to all work.\n"],
)
def test_a_logo_and_words_of_the_site_push_no_sheet_to_a_second_page(texts: bytes) -> None:
    """The four fullest sheets, set with them: the title block is as high as reckoned and the sheet gives way."""
    house = house_of({"logo.svg": LOGO, **({"texts.yaml": texts} if texts else {})})
    basis = replace(basis_of(EXAMPLES / "tarn-hollow"), house=house)
    pages = sorted(loop_sheets(basis), key=fill, reverse=True)
    assert fill(pages[0]) <= 1.0
    for page in pages[:4]:
        found = SetPage(page)
        assert 'class="logo"' in found.source
        assert found.count == 1, page.name
        assert title_block_height(page.document) == pytest.approx(found.title_block, abs=1.0), page.name


@pytest.mark.parametrize(("name", "tag"), [("tarn-hollow", "FIC-1011"), ("tennessee-eastman", "PIC-3013")])
def test_a_sheet_as_pdf_has_one_page_and_the_same_bytes_each_time(
    name: str, tag: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """`to_pdf` refuses a page of which WeasyPrint has anything to say."""
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1700000000")
    content = pdf.to_pdf(html(page_of(name, tag)))
    assert content == pdf.to_pdf(html(page_of(name, tag)))
    reader = PdfReader(io.BytesIO(content))
    assert len(reader.pages) == 1
    written = reader.pages[0].extract_text()
    assert [words for words in (tag, "Page", "1 of 1", "Loop sheet") if words not in written] == []


def test_a_crowded_sheet_is_set_smaller_and_an_overfull_one_runs_on(tmp_path: Path) -> None:
    """Nothing is clipped: what one page cannot take stands on a second one."""

    def crowded(lines: int) -> Page:
        words = " ".join(["Close the valve and look at the level before anything else is done."] * lines)
        alarms = "\n".join(
            f"      {kind}: {{limit: 5 t/h, response: '{words}'}}" for kind in ("low_low", "low", "high", "high_high")
        )
        return sheet_of(tmp_path, f"loops:\n  FI-1:\n    measurement: {{range: 0 to 9 t/h}}\n    alarms:\n{alarms}\n")

    for lines, density in ((6, "roomy"), (12, "normal"), (14, "dense"), (16, "densest")):
        page = crowded(lines)
        assert page.view["sheet"].density == density
        assert SetPage(page).count == 1
    overfull = crowded(24)
    found = SetPage(overfull)
    assert found.count == 2
    assert found.main + found.title_block < 277 * 72 / 25.4
    reader = PdfReader(io.BytesIO(pdf.to_pdf(html(overfull))))
    # Four alarms with the sentence 24 times each, wherever a line breaks.
    assert sum(len(re.findall(r"anything\s+else", page.extract_text())) for page in reader.pages) == 96


# ---------------------------------------------------------------- what stands on it


def test_document_numbers_are_unique_and_do_not_hang_on_the_other_loops(tmp_path: Path) -> None:
    head = 'numbering: "X-{unit}-{kind}-{serial}"\n'
    head += "tags: '(?P<letters>[A-Z]+)-(?P<unit>[0-9]{2})(?P<serial>[0-9]{2})(?P<suffix>[A-Z]?)'\n"
    tags = ("FIC-2011", "TIC-2011", "TIC-2011A", "FIC-3011", "ODD")
    loops = "loops:\n" + "".join(f"  {tag}: {{unit: '20'}}\n" for tag in tags)
    (tmp_path / "register.yaml").write_text(f"format: 1\n{head}{loops}", encoding="utf-8")
    numbers = [page.document.number for page in loop_sheets(basis_of(tmp_path))]
    assert numbers == ["X-20-LS-FIC11", "X-20-LS-TIC11", "X-20-LS-TIC11A", "X-20-LS-FIC-3011", "X-20-LS-ODD"]
    for name in NAMES:
        numbers = [page.document.number for page in pages_of(name)]
        assert len(set(numbers)) == len(numbers)


def test_a_sheet_tells_the_data_of_its_loop() -> None:
    written = text_of(html(page_of("tarn-hollow", "TIC-2014")))
    for words in (
        "Holds the composition below the feed by setting the reboiler steam flow.",
        "60 to 120\u00a0°C",
        "Pt100 class A",
        "reads high",
        "95 to 101\u00a0°C, normally 98\u00a0°C",
        "94 to 102\u00a0°C, normally 98\u00a0°C",
        "1.0 to 6.0\u00a0t/h, 0 to 100\u00a0% = 0 to 6.5\u00a0t/h, to FIC-2011",
        "normally cascade; permitted: manual, automatic, cascade",
        "manual, hold output",
        "track",
        "FV-2011",
        "IS-2001",
        "2oo3: PT-2023A, PT-2023B, PT-2023C above 1.2\u00a0bar(g)",
        "Loop check tested by",
        "Witnessed by",
    ):
        assert words in written, words


def test_the_sign_of_the_path_is_explained() -> None:
    """TV-2028 opens on a falling signal behind a reversed block and cools: (-1)(-1)(-1) is negative, so direct."""
    view = page_of("tarn-hollow", "TIC-2028").view["sheet"]
    sign = dict(pair for row in view.controller[0].rows for pair in row)["Sign path"]
    assert sign.count("(−)") == 3
    assert sign.endswith(": − in all, needs direct action")


def test_alarms_and_trips_stand_from_the_highest_to_the_lowest(tmp_path: Path) -> None:
    page = sheet_of(
        tmp_path,
        "loops:\n  LI-1:\n    measurement: {transmitter: LT-1, range: 0 to 100 %}\n    alarms:\n"
        "      low: {limit: 10 %, deadband: 2 %, delay: 5 s, priority: high, response: Start the pump, "
        "time_to_respond: 5 min}\n      high_high: {limit: 95 %}\n"
        "      deviation: {limit: 5 %}\n      high: {limit: 90 %}\n"
        "interlocks:\n  IS-1: {initiators: {LT-1: {trips: below 5 %, delay: 1 s}}, actions: {PM-1: stopped}}\n"
        "  IS-2: {initiators: {LI-1: {trips: above 98 %}}}\nfinal_elements: {PM-1: {kind: motor}}\n",
    )
    table = next(table for table in page.view["sheet"].tables if table.title == "Alarms and trips")
    assert [row[:2] for row in table.rows] == [
        ("Trip IS-2", "above 98\u00a0%"),
        ("High high", "95\u00a0%"),
        ("High", "90\u00a0%"),
        ("Low", "10\u00a0%"),
        ("Trip IS-1", "below 5\u00a0%"),
        ("Deviation", "5\u00a0%"),
    ]
    assert table.rows[3][2:] == ("2\u00a0%", "5\u00a0s", "high", "5\u00a0min", "Start the pump")
    assert table.rows[4][-1] == "By itself: PM-1 stopped"


def test_holds_are_marked_and_told_with_their_reasons() -> None:
    source = html(page_of("tennessee-eastman", "PIC-3013"))
    written = text_of(source)
    # Range, on fault, gain, interval, bad measurement, process gain, hazard; fails and safe of the valve.
    assert source.count('<span class="hold">HOLD</span>') == 9 + 6  # and six reasons
    assert "HOLD gain: published as 5.0 % per kPa of an unscaled error; a gain per span waits for the range" in written
    assert "FV-3010 safe position: no hazard study published" in written


@pytest.mark.parametrize(
    ("language", "said"),
    [
        (ENGLISH, ["terminals of cable 2", "FV-1 wiring", "FV-1 box of cable 1 of the trip solenoid"]),
        (GERMAN, ["Klemmen von Kabel 2", "FV-1 Verdrahtung", "FV-1 Klemmenkasten von Kabel 1 des Magnetventils"]),
    ],
)
def test_what_is_held_of_a_wiring_is_named(tmp_path: Path, language: Language, said: list[str]) -> None:
    text = (
        "loops:\n  FIC-1:\n    measurement:\n      transmitter: FT-1\n"
        "      wiring: [{at: JB-1}, {at: MC-1, terminals: {hold: one}}]\n"
        "    controller: {output: {to: FV-1}}\n"
        "final_elements:\n  FV-1: {kind: control valve, wiring: {hold: two}, "
        "trip_solenoid: {tag: XY-1, wiring: [{at: {hold: three}}]}}\n"
    )
    (tmp_path / "register.yaml").write_text(f"format: 1\n{text}", encoding="utf-8")
    (page,) = loop_sheets(basis_of(tmp_path).in_language(language))
    assert [f"{words}: {reason}" for words, reason in zip(said, ("one", "two", "three"), strict=True)] == [
        line for line in page.view["sheet"].holds if line.rpartition(" ")[2] in ("one", "two", "three")
    ]
    assert "HOLD" in page.view["sheet"].drawing


def test_no_cell_is_empty_but_those_to_be_signed() -> None:
    for name in NAMES:
        for page in pages_of(name):
            main = html(page).partition("<main>")[2]
            cells = re.findall(r"<t[hd][^>]*>(.*?)</t[hd]>", main, flags=re.S)
            empty = [cell for cell in cells if not text_of(cell).strip()]
            assert not empty, page.name
            to_be_signed = [cell for cell in cells if re.fullmatch(r'<span class="label">[^<]*</span>', cell)]
            assert len(to_be_signed) == 5, page.name


def test_values_keep_their_units_on_the_same_line() -> None:
    """A number and its unit are held together by a no-break space."""
    loose = re.compile(r"\d (?:t/h|°C|%|mA|bar\(g\)|min|s|h|kg/m³|m³/h|Ω)(?![\w/])")
    for page in pages_of("tarn-hollow"):
        main = re.sub(r"<(ul|svg).*?</\1>", "", html(page).partition("<main>")[2], flags=re.S)
        # Prose of the register (purposes, sensors, responses, resets, summaries) is the engineer's own.
        prose = [page.view["sheet"].purpose, page.view["sheet"].measurement.rows[1][0][1]]
        prose += [row[-1] for table in page.view["sheet"].tables for row in table.rows]
        written = text_of(main)
        for words in prose:
            written = written.replace(re.sub(r"[ \n]+", " ", words), "")
        assert loose.findall(written.replace("4-20 mA", "")) == [], page.name


def test_findings_and_deviations_of_the_loop_stand_on_its_sheet(tmp_path: Path) -> None:
    page = page_of("tennessee-eastman", "FIC-3010")
    assert "pairing-two-primaries" in [point.rule for point in page.view["sheet"].points]
    assert "DRAFT" in html(page)
    deviation = next(
        point for point in page_of("tarn-hollow", "PIC-2021").view["sheet"].points if point.rule == "split-range-gap"
    )
    assert deviation.kind == "Deviation"
    assert "Approved by Operations" in deviation.text


def test_words_of_the_register_stand_in_quotation_marks(tmp_path: Path) -> None:
    page = sheet_of(tmp_path, "loops:\n  FIC-1: {controller: {output: {to: FV-404}}}\n")
    unknown = next(point for point in page.view["sheet"].points if point.rule == "reference-unknown")
    assert "“FV-404”" in unknown.text
    assert "`" not in unknown.text


def test_more_findings_than_a_sheet_takes_are_counted(tmp_path: Path) -> None:
    page = sheet_of(
        tmp_path,
        "loops:\n  FIC-1:\n    measurement: {transmitter: FT-1, variable: flow, range: 10 to 0 t/h, signal: 4-20 mA}\n"
        "    operating: {low: 50 t/h, normal: 60 t/h, high: 70 t/h}\n"
        "    controller: {setpoint: {low: 40 t/h, high: 80 t/h}, output: {to: FV-404}}\n"
        "    alarms: {low: {limit: 90 t/h}, high: {limit: 20 t/h}}\n",
    )
    view = page.view["sheet"]
    assert len(view.points) == 4
    more = re.fullmatch(r"(\d+) more findings about this loop stand in the check report", view.more_points)
    assert more
    assert int(more[1]) >= 1
    levels = [point.kind for point in view.points]
    assert levels == sorted(levels, key=["Error", "Warning", "Note"].index)


def test_sections_without_content_are_left_out(tmp_path: Path) -> None:
    page = sheet_of(tmp_path, "loops:\n  FI-1: {}\n")
    source = html(page)
    written = text_of(source)
    for heading in ("Expected at the loop check", "Controller", "Process and tuning", "Setpoint response", "Interlock"):
        assert heading not in written, heading
    assert "Measurement –" in written
    assert not re.search(r"<ul[^>]*>\s*</ul>|<tbody>\s*</tbody>|<figure>\s*</figure>", source)


def test_text_of_the_register_cannot_become_markup(tmp_path: Path) -> None:
    hostile = "<script>alert(1)</script> & <b>"
    page = sheet_of(
        tmp_path,
        f"loops:\n  FIC-1:\n    service: '{hostile}'\n    purpose: '{hostile}'\n    drawing: '{hostile}'\n"
        f"    measurement: {{transmitter: '{hostile}', sensor: '{hostile}', range: {{hold: '{hostile}'}}}}\n"
        f"    alarms: {{high: {{response: '{hostile}'}}}}\n"
        f"deviations: [{{rule: x, at: FIC-1, reason: '{hostile}', approved_by: '{hostile}'}}]\n",
    )
    source = html(page)
    assert "<script" not in source
    assert "<b>alert" not in source
    assert source.count("&lt;script&gt;alert(1)&lt;/script&gt; &amp; &lt;b&gt;") >= 6


def test_the_small_response_is_drawn_where_the_page_has_room() -> None:
    roomy = page_of("tarn-hollow", "TIC-3050").view["sheet"]
    assert isinstance(roomy.response, Markup)
    assert roomy.response.startswith("<svg")
    assert "settles within 2\u00a0% in" in roomy.response_words
    full = page_of("tarn-hollow", "FIC-1011").view["sheet"]
    assert full.response == ""
    assert "Setpoint response" not in text_of(html(page_of("tarn-hollow", "FIC-1011")))


def test_an_unstable_loop_says_so(tmp_path: Path) -> None:
    page = sheet_of(
        tmp_path,
        "loops:\n  FIC-1:\n    measurement: {transmitter: FT-1, range: 0 to 10 t/h}\n"
        "    controller: {action: direct, gain: 5, reset: 5 s, interval: 1 s, output: {to: FV-1}}\n"
        "    process: {effect: rises, gain: 0.1 t/h per %, lag: 4 s, dead_time: 2 s}\n"
        "final_elements: {FV-1: {kind: control valve, opens_on: rising signal}}\n",
    )
    assert "the loop is unstable as written" in text_of(html(page))
    assert page.view["sheet"].response == ""


# ---------------------------------------------------------------- expected signals


def readings(folder: Path, measurement: str) -> dict[str, ExpectedRow]:
    (folder / "register.yaml").write_text(
        f"format: 1\nloops:\n  XI-1: {{measurement: {{{measurement}}}}}\n", encoding="utf-8"
    )
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    return {row.what: row for row in expected_readings(loaded.register.loops["XI-1"])}


def commands(folder: Path, text: str) -> dict[str, tuple[str, ...]]:
    (folder / "register.yaml").write_text(f"format: 1\n{text}", encoding="utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    plant = Plant(loaded.register)
    return {row.what: row.values for row in expected_commands(plant, plant.register.loops["FIC-1"])}


def test_a_pt100_at_the_steps_of_its_range(tmp_path: Path) -> None:
    """0, 30, 60, 90 and 120 degC in the table of IEC 60751 (reprint of DIN EN 60751:1996): to its two decimals."""
    found = readings(tmp_path, "transmitter: TT-1, sensor: Pt100 class A, range: 0 to 120 degC, signal: 4-20 mA")
    assert found["Pt100 resistance"].values == ("100.00", "111.67", "123.24", "134.71", "146.07")
    assert found["Pt100 resistance"].unit == "Ω"
    assert found["XI-1 shows"].values == ("0.0", "30.0", "60.0", "90.0", "120.0")
    assert found["Signal of TT-1"].values == ("4.00", "8.00", "12.00", "16.00", "20.00")  # IEC 60381-1


def test_a_range_in_fahrenheit_meets_the_same_thermometer(tmp_path: Path) -> None:
    """32 to 248 degF are 0 to 120 degC."""
    found = readings(tmp_path, "transmitter: TT-1, sensor: Pt100, range: 32 to 248 degF, signal: 4-20 mA")
    assert found["Pt100 resistance"].values == ("100.00", "111.67", "123.24", "134.71", "146.07")


@pytest.mark.parametrize("sensor", ["thermocouple type K", "Thermocouple K, class 1"])
def test_a_thermocouple_at_the_steps_of_its_range(tmp_path: Path, sensor: str) -> None:
    """0 to 400 degC in the tables of NIST Monograph 175 (IEC 60584-1): to their three decimals."""
    found = readings(tmp_path, f"transmitter: TT-1, sensor: '{sensor}', range: 0 to 400 degC, signal: 4-20 mA")
    assert found["Type K at 0\u00a0°C reference"].values == ("0.000", "4.096", "8.138", "12.209", "16.397")


def test_a_sensor_outside_its_range_is_left_out(tmp_path: Path) -> None:
    assert "Pt100 resistance" not in readings(tmp_path, "transmitter: TT-1, sensor: Pt100, range: 0 to 900 degC")


def test_a_flow_by_differential_pressure_is_the_root_of_its_signal(tmp_path: Path) -> None:
    """Flow follows the root of the differential pressure (ISO 5167-1): 0, 1/2, sqrt(1/2), sqrt(3/4) and 1 of 8 t/h."""
    found = readings(tmp_path, "transmitter: FT-1, characteristic: square root, range: 0 to 8 t/h, signal: 4-20 mA")
    assert found["Differential pressure"].values == ("0", "25", "50", "75", "100")
    assert found["XI-1 shows"].values == ("0.000", "4.000", "5.657", "6.928", "8.000")


@pytest.mark.parametrize(
    ("signal", "values"),
    [
        ("0-20 mA", ("0.00", "5.00", "10.00", "15.00", "20.00")),
        ("1-5 V", ("1.000", "2.000", "3.000", "4.000", "5.000")),
        ("digital", None),
        ("pulse", None),
    ],
)
def test_a_signal_has_its_own_ends(tmp_path: Path, signal: str, values: tuple[str, ...] | None) -> None:
    found = readings(tmp_path, f"transmitter: XT-1, range: -40 to 60 mbarg, signal: {signal}")
    row = found.get("Signal of XT-1")
    assert (row.values if row else None) == values
    assert found["XI-1 shows"].values == ("−40.00", "−15.00", "10.00", "35.00", "60.00")


@pytest.mark.parametrize("measurement", ["transmitter: XT-1", "range: {hold: open}", "range: 5 to 5 t/h"])
def test_nothing_is_expected_of_a_range_that_is_not_known(tmp_path: Path, measurement: str) -> None:
    assert readings(tmp_path, measurement) == {}


VALVE = "{kind: %s, opens_on: %s signal, output_block: %s, signal: 4-20 mA}"


@pytest.mark.parametrize(
    ("opens_on", "block", "signal", "opening"),
    [  # Output percent -> block -> signal -> valve, by hand.
        ("rising", "direct", ("4.00", "8.00", "12.00", "16.00", "20.00"), ("0", "25", "50", "75", "100")),
        ("falling", "reversed", ("20.00", "16.00", "12.00", "8.00", "4.00"), ("0", "25", "50", "75", "100")),
        ("falling", "direct", ("4.00", "8.00", "12.00", "16.00", "20.00"), ("100", "75", "50", "25", "0")),
    ],
)
def test_a_valve_with_its_output_block(
    tmp_path: Path, opens_on: str, block: str, signal: tuple[str, ...], opening: tuple[str, ...]
) -> None:
    element = VALVE % ("control valve", opens_on, block)
    text = f"loops: {{FIC-1: {{controller: {{output: {{to: FV-1}}}}}}}}\nfinal_elements: {{FV-1: {element}}}\n"
    assert commands(tmp_path, text) == {"Signal to FV-1": signal, "FV-1 opening": opening}


def test_the_valves_of_a_split_range(tmp_path: Path) -> None:
    """Nitrogen shut from 45 % up and fully open at 0 %: 25 % of output is (45 - 25)/45 of its travel, 44.4 %."""
    text = (
        "loops: {FIC-1: {controller: {output: {to: FY-1}}}}\n"
        "functions: {FY-1: {kind: split range, outputs: {FV-1A: 45 to 0 %, FV-1B: 55 to 100 %}}}\n"
        f"final_elements: {{FV-1A: {VALVE % ('control valve', 'falling', 'reversed')}, "
        f"FV-1B: {VALVE % ('control valve', 'rising', 'direct')}}}\n"
    )
    found = commands(tmp_path, text)
    assert found["FV-1A opening"] == ("100", "44.4", "0", "0", "0")
    assert found["FV-1B opening"] == ("0", "0", "0", "44.4", "100")
    assert found["Signal to FV-1A"] == ("4.00", "12.89", "20.00", "20.00", "20.00")  # 20 - 16 x 0.444


@pytest.mark.parametrize(("kind", "what"), [("variable-speed drive", "speed"), ("heater bank", "power")])
def test_a_drive_and_a_heater(tmp_path: Path, kind: str, what: str) -> None:
    element = VALVE % (kind, "rising", "direct")
    text = f"loops: {{FIC-1: {{controller: {{output: {{to: FV-1}}}}}}}}\nfinal_elements: {{FV-1: {element}}}\n"
    assert f"FV-1 {what}" in commands(tmp_path, text)


def test_a_primary_asks_for_setpoints(tmp_path: Path) -> None:
    text = (
        "loops:\n  FIC-1: {controller: {output: {to: FIC-2, span: -8 to 8 t/h}}}\n"
        "  FIC-2: {measurement: {range: 0 to 20 t/h}, controller: {output: {to: FV-2}}}\n"
    )
    assert commands(tmp_path, text) == {"FIC-2 setpoint": ("−8.000", "−4.000", "0.000", "4.000", "8.000")}


def test_the_view_holds_text_only() -> None:
    """Templates loop and place: whatever they print is text already."""
    view = page_of("tarn-hollow", "TIC-2014").view["sheet"]
    assert isinstance(view, SheetView)
    printed = [view.tag, view.service, view.purpose, *view.holds, view.drawing, view.response, view.response_words]
    printed += [value for table in (*view.tables, view.revisions) for row in table.rows for value in row]
    printed += [
        value for panel in (view.measurement, *view.controller) for row in panel.rows for pair in row for value in pair
    ]
    assert all(isinstance(value, str) for value in printed)


def test_a_deviation_stands_on_every_sheet_that_it_touches() -> None:
    deviations = {
        page.name: {point.rule for point in page.view["sheet"].points if point.kind == "Deviation"}
        for page in pages_of("tarn-hollow")
    }
    # The range of TIC-2014 is judged against the output span of AIC-2015; the gap is one in the output of PIC-2021.
    touched = {tag for tag, rules in deviations.items() if "secondary-range-wide" in rules}
    assert touched == {"TIC-2014", "AIC-2015"}
    assert {tag for tag, rules in deviations.items() if "split-range-gap" in rules} == {"PIC-2021"}


def test_the_response_is_drawn_lower_where_it_has_no_room_in_full() -> None:
    page = page_of("tarn-hollow", "TIC-2014")
    view: SheetView = page.view["sheet"]
    size = next(density.size for density in DENSITIES if density.name == view.density)
    assert view.response
    assert sheet_height(view, size) <= room(page.document)
    assert sheet_height(replace(view, response_height=full_height()), size) > room(page.document)


def full_height() -> float:
    """Of the figure on a sheet with room for all of it [pt]."""
    view: SheetView = page_of("tarn-hollow", "FIC-1002").view["sheet"]
    return view.response_height


def test_a_drive_speeds_up_where_a_valve_opens() -> None:
    html = str(page_of("tarn-hollow", "FIC-1017").view["sheet"].controller)
    assert "SC-1017 speeds up on rising signal (+)" in html
    assert "SC-1017 opens" not in html
