"""Schedules: everything of the register once, nothing clipped, nothing on top of anything, holds with their reasons."""

from __future__ import annotations

import io
import math
import re
import shutil
import subprocess
from collections import Counter
from dataclasses import replace
from functools import cache
from html.parser import HTMLParser
from pathlib import Path

import pytest
from pypdf import PdfReader

from loopdoc.documents.basis import Basis, Page, basis_of
from loopdoc.documents.check_record.check_record import check_records
from loopdoc.documents.loop_sheet.loop_sheet import loop_sheets
from loopdoc.documents.pdf import to_pdf
from loopdoc.documents.rendering import render
from loopdoc.documents.revision.against import page_html
from loopdoc.documents.schedules.alarms import alarm_schedules
from loopdoc.documents.schedules.effects import cause_and_effect_charts
from loopdoc.documents.schedules.failures import failure_schedules
from loopdoc.documents.schedules.lists import channel_lists, instrument_lists
from loopdoc.documents.schedules.tuning import tuning_schedules
from loopdoc.documents.site.site import Site
from loopdoc.documents.whereabouts import natural
from loopdoc.documents.wording import listed
from loopdoc.engineering.failure import Failure, FailureAnalysis
from loopdoc.register.load import Loaded, load

EXAMPLES = Path(__file__).parents[1] / "examples"
NAMES = ("tarn-hollow", "tennessee-eastman")
KINDS = {
    "alarms": alarm_schedules,
    "effects": cause_and_effect_charts,
    "tuning": tuning_schedules,
    "failures": failure_schedules,
    "channels": channel_lists,
    "instruments": instrument_lists,
}


@cache
def example(name: str) -> Basis:
    return basis_at(EXAMPLES / name)


def basis_at(folder: Path) -> Basis:
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    return basis_of(loaded)


def written(folder: Path, text: str) -> Basis:
    (folder / "register.yaml").write_text(f"format: 1\n{text}", encoding="utf-8")
    return basis_at(folder)


def html(page: Page, stylesheet: str = "") -> str:
    return render(page.template, document=page.document, stylesheet=stylesheet, **page.view)


class _Rows(HTMLParser):
    """The rows of every table as a reader sees them; a line break in a cell is ` / `."""

    def __init__(self) -> None:
        super().__init__()
        self.rows: list[list[str]] = []
        self.inside = False

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        if tag == "tr":
            self.rows.append([])
        elif tag in ("td", "th"):
            self.rows[-1].append("")
            self.inside = True
        elif tag == "br" and self.inside:
            self.rows[-1][-1] += " / "

    def handle_endtag(self, tag: str) -> None:
        if tag in ("td", "th"):
            self.inside = False

    def handle_data(self, data: str) -> None:
        if self.inside:
            self.rows[-1][-1] += data.replace("\u00a0", " ")


def rows_of(page: Page) -> list[list[str]]:
    parser = _Rows()
    parser.feed(html(page).partition("<main>")[2].partition('<table class="data sign-off"')[0])
    return parser.rows


def all_rows(kind: str, basis: Basis) -> list[list[str]]:
    return [row for page in KINDS[kind](basis) for row in rows_of(page)]


# ---------------------------------------------------------------- contents against the register


@pytest.mark.parametrize("name", NAMES)
def test_every_alarm_and_every_trip_stands_once(name: str) -> None:
    basis = example(name)
    rows = [row for row in all_rows("alarms", basis) if len(row) == 13 and row[0] != "Tag"]
    shown = Counter((row[0], row[3].partition(",")[0].partition(" / ")[0]) for row in rows)
    register = basis.plant.register
    wanted = Counter(
        (loop.tag, kind.replace("_", "-").capitalize()) for loop in register.loops.values() for kind in loop.alarms
    )
    for interlock in register.interlocks.values():
        for tag in interlock.initiators:
            loop = basis.plant.loop_of_transmitter.get(tag)
            wanted[(loop.tag if loop else tag, f"Trip {interlock.tag}")] += 1
    assert shown == wanted


def test_alarms_run_from_the_highest_limit_to_the_lowest(tmp_path: Path) -> None:
    basis = written(tmp_path, """
loops:
  LI-1: {unit: "10", service: Level, measurement: {transmitter: LT-1, variable: level, range: 0 to 100 %},
         alarms: {low_low: {limit: 10 %}, deviation: {limit: 5 %}, high: {limit: 80 %}, low: {limit: 20 %},
                  high_high: {limit: 90 %}}}
interlocks:
  IS-1: {unit: "10", initiators: {LT-1: {trips: below 5 %}}}
  IS-2: {unit: "10", initiators: {LT-1: {trips: above 95 %}}}
""")
    kinds = [row[3].partition(" / ")[0] for row in all_rows("alarms", basis) if row[0] == "LI-1"]
    assert kinds == ["Trip IS-2", "High-high", "High", "Low", "Low-low", "Trip IS-1", "Deviation"]


def test_an_alarm_names_the_hazard_of_another_loop_of_which_it_warns(tmp_path: Path) -> None:
    basis = written(tmp_path, """
loops:
  PI-1: {unit: "10", service: Pressure, measurement: {transmitter: PT-1, variable: pressure, range: 0 to 1 barg},
         alarms: {high: {limit: 0.8 barg, priority: high, warns_of: {TI-2: high, LI-3: low}},
                  low: {limit: 0.1 barg, priority: low}}}
  TI-2: {unit: "10", service: Temperature, hazard: high, measurement: {transmitter: TT-2, variable: temperature},
         alarms: {high: {limit: 90 degC, priority: low}, low: {limit: 5 degC}}}
  LI-3: {unit: "10", service: Level, hazard: low, measurement: {transmitter: LT-3, variable: level}}
""")
    page = next(alarm_schedules(basis))
    alarms = {(row[0], row[3].partition(" / ")[0]): row[3] for row in rows_of(page) if len(row) == 13}
    assert alarms["PI-1", "High"] == "High / warns of TI-2 high and LI-3 low"
    assert alarms["PI-1", "Low"] == "Low"
    assert "Alarms by priority: 1 high, 2 low and 1 without one." in html(page)


@pytest.mark.parametrize("name", NAMES)
def test_every_channel_stands_once_and_in_natural_order(name: str) -> None:
    basis = example(name)
    register = basis.plant.register
    rows = [row for row in all_rows("channels", basis) if len(row) in (9, 11) and row[0] != "Channel"]
    parts = [*register.measurements.values(), *register.final_elements.values(), *register.solenoids.values()]
    given = [part.channel for part in parts if isinstance(part.channel, str)]
    shown = [row[0] for row in rows if row[0] not in ("–",) and not row[0].startswith("HOLD")]
    assert sorted(shown) == sorted(given)
    assert shown == sorted(shown, key=natural)
    assert len(rows) == len(parts)  # and what has no channel stands there too


def test_cables_and_terminals_stand_in_the_channel_list_where_the_register_has_them() -> None:
    rows = {row[1]: row for row in all_rows("channels", example("tarn-hollow")) if len(row) == 11}
    assert rows["Tag"][7:9] == ["Cables", "Terminals"]
    assert rows["TT-2014"][7:9] == ["C-TT-2014 / M-2001, pair 5", "JB-2001: 9, 10 / MC-20: TB1-9, TB1-10"]
    assert rows["XY-2011"][2] == "Trip solenoid of FV-2011"
    assert rows["XY-2011"][9] == "IS-2001"
    heads = [row for row in all_rows("channels", example("tennessee-eastman")) if row[0] == "Channel"]
    assert heads
    assert all("Cables" not in head for head in heads)


def test_a_channel_given_twice_is_seen(tmp_path: Path) -> None:
    basis = written(tmp_path, """
instruments:
  PT-1: {unit: "10", variable: pressure, range: 0 to 1 barg, signal: 4-20 mA, channel: AI-10}
  PT-2: {unit: "10", variable: pressure, range: 0 to 1 barg, signal: 4-20 mA, channel: AI-9}
  PT-3: {unit: "10", variable: pressure, range: 0 to 1 barg, signal: 4-20 mA, channel: AI-10}
final_elements:
  XV-1: {unit: "10", kind: on-off valve, signal: contact, channel: DO-1}
  FV-1: {unit: "10", kind: control valve, signal: 4-20 mA, channel: AO-1}
""")
    rows = {row[1]: row for row in all_rows("channels", basis) if len(row) == 9}
    assert rows["PT-1"][8] == "PT-3"
    assert rows["PT-3"][8] == "PT-1"
    assert rows["PT-2"][8] == "none"
    assert [row[0] for row in rows.values()] == ["Channel", "AI-9", "AI-10", "AI-10", "AO-1", "DO-1"]
    assert [rows[tag][4] for tag in ("PT-1", "FV-1", "XV-1")] == ["AI", "AO", "DO"]


@pytest.mark.parametrize("name", NAMES)
def test_every_transmitter_and_final_element_stands_in_one_list(name: str) -> None:
    basis = example(name)
    register = basis.plant.register
    shown = [row[0] for row in all_rows("instruments", basis) if len(row) in (12, 13) and row[0] != "Tag"]
    assert sorted(shown) == sorted((*register.measurements, *register.final_elements))


@pytest.mark.parametrize("name", NAMES)
def test_every_failure_has_one_row_in_each_unit_that_it_reaches(name: str) -> None:
    """What fails, and how, of every loop's own analysis against the first cells of the table of all failures."""
    basis = example(name)
    analysis = FailureAnalysis(basis.plant)
    happens = {
        Failure.MEASUREMENT_BAD: "fails", Failure.SECONDARY_LOST: "fails", Failure.MEASUREMENT_HIGH: "high",
        Failure.MEASUREMENT_LOW: "low", Failure.MEASUREMENT_FROZEN: "stands still", Failure.OUTPUT_LOST: "signal",
        Failure.MOTIVE_POWER_LOST: "air|motive power|electric power", Failure.CONTROL_POWER_LOST: "system",
    }  # fmt: skip
    for page in failure_schedules(basis):
        rows = [row for row in rows_of(page) if len(row) == 6 and row[0] != "What fails"]
        unit = page.name.removeprefix("unit-")
        own = [loop for loop in basis.plant.register.loops.values() if loop.unit == unit]
        wanted = set()
        for loop in own:
            for effect in analysis.effects(loop.tag):
                at = effect.at or tuple(move.element.tag for move in effect.elements)
                wanted.add((at, happens[effect.failure]))
        assert wanted
        for at, how in wanted:
            told = [row for row in rows if re.match(rf"{listed(at)} ", row[0]) and re.search(how, row[0])]
            assert len(told) == 1, (unit, at, how, told)


@pytest.mark.parametrize("name", NAMES)
def test_loops_agree_on_the_effect_of_a_failure_that_they_share(name: str) -> None:
    """A row tells it once for all of them, which holds only where each sees the same directions and protection."""
    plant = example(name).plant
    analysis = FailureAnalysis(plant)
    seen: dict[tuple[object, ...], dict[str, object]] = {}
    shared = 0
    for tag in plant.register.loops:
        for effect in analysis.effects(tag):
            bad = effect.failure is Failure.SECONDARY_LOST
            elements = tuple(move.element.tag for move in effect.elements)
            key = (Failure.MEASUREMENT_BAD if bad else effect.failure, effect.at or elements or tag)
            effects = {one.loop.tag: replace(one, loop=None) for one in effect.consequences}
            shared += key in seen
            assert seen.setdefault(key, effects) == effects, (tag, key)
    assert shared > 10


def test_what_nothing_stands_against_comes_first(tmp_path: Path) -> None:
    basis = written(tmp_path, """
loops:
  TIC-1: {unit: "10", service: Vessel temperature, hazard: high,
          measurement: {transmitter: TT-1, variable: temperature, range: 0 to 100 degC, signal: 4-20 mA,
                        on_fault: reads high},
          controller: {action: reverse, gain: 1, output: {to: TV-1}, modes: {normal: automatic},
                       on_bad_measurement: {mode: manual, output: 0 %}},
          process: {effect: rises, gain: 1 degC per %}}
final_elements:
  TV-1: {unit: "10", kind: control valve, service: Steam, opens_on: rising signal, fails: closed, signal: 4-20 mA}
""")
    rows = rows_of(next(failure_schedules(basis)))
    bare = [row for row in rows if len(row) == 5 and row[0] != "What fails"]
    # Too low a reading opens the steam valve; a reading that stands still lets the temperature go either way.
    assert [(row[0], row[3]) for row in bare] == [
        ("TT-1 reads too low", "Yes: TIC-1"),
        ("TT-1 stands still", "Not decided: TIC-1 may go either way"),
    ]
    assert all(row[4] == "Nothing independent in the register." for row in bare)
    whole = {row[0]: row for row in rows if len(row) == 6}
    assert whole["TV-1 loses its signal or its air"][2:5] == ["TV-1 closes fully.", "Falls: TIC-1.", "No"]


@pytest.mark.parametrize("name", NAMES)
def test_every_controller_is_in_the_tuning_schedule_with_margins_or_the_reason(name: str) -> None:
    basis = example(name)
    rows = [row for row in all_rows("tuning", basis) if row[0] in basis.plant.controlled]
    assert sorted(row[0] for row in rows) == sorted(basis.plant.controlled)
    for row in rows:
        lacking = basis.dynamics.loop(row[0]).reason
        assert (f"Not checked: {lacking}" in row) is bool(lacking), row


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("name", NAMES)
def test_no_cell_is_empty_and_every_hold_has_its_reason(name: str, kind: str) -> None:
    for page in KINDS[kind](example(name)):
        rows = rows_of(page)
        reasons = {row[0] for row in rows if len(row) == 2 and re.fullmatch(r"HOLD \d+", row[0])}
        cited = {found for row in rows for cell in row for found in re.findall(r"HOLD \d+", cell)}
        assert cited == reasons
        if kind != "effects":
            assert all(cell.strip() for row in rows for cell in row)
        assert not any(re.search(r"None|nan|Undecided|Hold\(|\{", cell) for row in rows for cell in row)


# ---------------------------------------------------------------- time to act

LAG = """
loops:
  PI-1:
    unit: "10"
    service: Vessel pressure
    measurement: {transmitter: PT-1, variable: pressure, range: 0 to 10 barg}
    operating: {normal: 1 barg}
    %s
    alarms: {high: {limit: 2 barg%s}}
interlocks:
  IS-1: {unit: "10", layer: safety, initiators: {PT-1: {trips: above 3 barg}}, response_time: 9 s%s}
"""
UPSET = "disturbances: {cooling lost: {size: 4 bar, lag: 10 min}}"
# A step through one lag passes d at t = -T ln(1 - d/size): from 1 bar to 2 bar of 4 bar it takes T ln(3/2).
BETWEEN_MIN = 10 * math.log(0.75 / 0.5)


@pytest.mark.parametrize(
    ("upset", "respond", "told"),
    [
        (UPSET, ", time_to_respond: 4 min", "Cooling lost: 4.1 min to IS-1"),
        (UPSET, ", time_to_respond: 5 min", "Cooling lost: 4.1 min to IS-1, less than the time to respond"),
        (UPSET, "", "Cooling lost: 4.1 min to IS-1 / "
                    "Not checked against the response: the time to respond is not known"),
        (UPSET.replace("4 bar", "1.5 bar"), ", time_to_respond: 4 min", "Cooling lost: IS-1 is not reached"),
        ("", ", time_to_respond: 4 min",
         "Every upset: not checked, PI-1 has no process and no disturbances, and no other loop measures the same"),
    ],
)  # fmt: skip
def test_the_alarm_schedule_tells_the_time_to_act(tmp_path: Path, upset: str, respond: str, told: str) -> None:
    assert f"{BETWEEN_MIN:.2g} min" == "4.1 min"
    page = next(alarm_schedules(written(tmp_path, LAG % (upset, respond, ""))))
    alarm = next(row for row in rows_of(page) if row[0] == "PI-1" and row[3] == "High")
    assert alarm[12] == told
    assert "do not show that an alarm or an interlock is enough" in html(page)


@pytest.mark.parametrize(
    ("given", "told"),
    [
        (", process_safety_time: 90 s", "Response 9 s, 10 % of the process safety time of 90 s"),
        ("", "Response 9 s; not checked, the process safety time is not known"),
    ],
)
def test_a_trip_is_shown_with_its_share_of_the_process_safety_time(tmp_path: Path, given: str, told: str) -> None:
    rows = rows_of(next(alarm_schedules(written(tmp_path, LAG % (UPSET, "", given)))))
    assert next(row for row in rows if row[3].startswith("Trip"))[12] == told


# ---------------------------------------------------------------- cause and effect


def forty_effects(folder: Path) -> Basis:
    """Two voted interlocks of the safety layer and one of the process layer, on 40 valves with long names."""
    valves = [f"XV-10{number:02d}" for number in range(40)]
    actions = [", ".join(f"{tag}: {'open' if index % 5 else 'closed'}" for index, tag in enumerate(valves))]
    actions.append(", ".join(f"{tag}: closed" for tag in valves[::3]))
    elements = "\n".join(
        f'  {tag}: {{unit: "10", kind: on-off valve, service: Isolation of stream {tag[-2:]} to the north vessel}}'
        for tag in valves
    )
    causes = "{PT-1: {trips: above 8 barg, delay: 1 s}, PT-2: {trips: above 8 barg}, PT-3: {trips: above 8 barg}}"
    return written(folder, f"""
revision: {{code: A, date: 2026-01-01, status: issued for review}}
final_elements:
{elements}
instruments:
  PT-1: {{unit: "10", service: "Vessel pressure, channel A", variable: pressure, range: 0 to 10 barg}}
  PT-2: {{unit: "10", service: "Vessel pressure, channel B", variable: pressure, range: 0 to 10 barg}}
  PT-3: {{unit: "10", service: "Vessel pressure, channel C", variable: pressure, range: 0 to 10 barg}}
interlocks:
  IS-1: {{unit: "10", layer: safety, voting: 2oo3, initiators: {causes}, actions: {{{actions[0]}}}}}
  IS-2: {{unit: "10", layer: safety, voting: 2oo3, initiators: {causes}, actions: {{{actions[1]}}}}}
  IS-3: {{unit: "10", layer: process, voting: 1oo1, initiators: {{PT-1: {{trips: above 7 barg}}}},
          actions: {{XV-1000: closed, XV-1039: open}}}}
""")


def test_a_chart_of_forty_effects_keeps_its_heads_and_its_marks(tmp_path: Path) -> None:
    page = next(cause_and_effect_charts(forty_effects(tmp_path)))
    rows = rows_of(page)
    heads = [index for index, row in enumerate(rows) if row[0] == "Interlock" and "Cause" in row]
    assert [len(rows[index]) for index in heads] == [5 + 40, 5 + 2]  # layers apart, safety first
    tags = [head.partition(" / ")[0] for head in rows[heads[0]][5:]]
    assert tags == [f"XV-10{number:02d}" for number in range(40)]
    first = rows[heads[0] + 1]
    assert first[:2] == ["IS-1", "2oo3"]
    assert first[5:] == ["O" if number % 5 else "C" for number in range(40)]
    assert rows[heads[0] + 2][0] == "PT-2 / Vessel pressure, channel B"
    assert rows[heads[0] + 4][5:] == ["" if number % 3 else "C" for number in range(40)]


def test_a_controller_is_forced_and_a_hold_is_told(tmp_path: Path) -> None:
    basis = written(tmp_path, """
loops:
  FIC-1: {unit: "10", service: Feed, measurement: {transmitter: FT-1, variable: flow, range: 0 to 10 t/h},
          controller: {action: reverse, gain: 1, output: {to: FV-1}}}
final_elements:
  FV-1: {unit: "10", kind: control valve, service: Feed}
interlocks:
  IS-1: {unit: "10", layer: process, initiators: {FT-1: {trips: above 9 t/h}},
         actions: {FV-1: closed, FIC-1: {mode: manual, output: 0 %}}}
  IS-2: {unit: "10", initiators: {FT-1: {trips: below 1 t/h}}, actions: {hold: hazard study}}
""")
    page = next(cause_and_effect_charts(basis))
    rows = rows_of(page)
    head = next(row for row in rows if "Cause" in row and len(row) == 7)
    mark = dict(zip(head[5:], next(row for row in rows if row[0] == "IS-1" and len(row) == 7)[5:], strict=True))
    assert mark == {"FIC-1 / Feed": "M / 0 %", "FV-1 / Feed": "C"}
    assert [row[0] for row in rows if row[0].startswith("IS-2 /")] == ["IS-2 / Effects: HOLD 1"]
    assert ["HOLD 1", "hazard study"] in rows
    assert "C closes it; M forces the controller to manual; a percentage" in html(page)


# ---------------------------------------------------------------- on paper


def words_of(content: bytes, folder: Path) -> list[tuple[float, float, list[tuple[float, float, float, float, str]]]]:
    """Width and height of each page, and the box and text of each of its words [pt]."""
    file = folder / "page.pdf"
    file.write_bytes(content)
    told = subprocess.run(["pdftotext", "-bbox", file, "-"], check=True, capture_output=True, text=True).stdout
    pages = []
    for width, height, inside in re.findall(r'<page width="([\d.]+)" height="([\d.]+)">(.*?)</page>', told, re.S):
        found = re.findall(r'<word xMin="(.*?)" yMin="(.*?)" xMax="(.*?)" yMax="(.*?)">(.*?)</word>', inside)
        words = [(float(a), float(b), float(c), float(d), text) for a, b, c, d, text in found]
        # The mark across a draft lies under the text, which is meant.
        pages.append((float(width), float(height), [word for word in words if not _is_draft_mark(word)]))
    return pages


def _is_draft_mark(word: tuple[float, float, float, float, str]) -> bool:
    left, top, right, bottom, text = word
    return text in "DRAFT" and min(right - left, bottom - top) > 20


def _is_turned(word: tuple[float, float, float, float, str]) -> bool:
    left, top, right, bottom, text = word
    return len(text) > 3 and bottom - top > 1.4 * (right - left)


def on_paper(page: Page, folder: Path) -> None:
    """No word beyond the margins, none on top of another, the heads of a table on each of its pages."""
    content = to_pdf(html(page))  # raises on any line that WeasyPrint logs
    assert content == to_pdf(html(page))
    count = len(PdfReader(io.BytesIO(content)).pages)
    for number, (width, height, words) in enumerate(words_of(content, folder), 1):
        assert width > height
        text = " ".join(word[4] for word in words)
        assert f"{number} of {count}" in text
        assert "This document supports and does not replace review" in text
        for left, top, right, bottom, word in words:
            inside = left > 19.5 * 72 / 25.4 and right < width - 9.5 * 72 / 25.4 and top > 20 and bottom < height - 15
            assert inside, (page.name, number, word)
        for index, (left, top, right, bottom, word) in enumerate(words):
            for other in words[index + 1 :]:
                across = min(right, other[2]) - max(left, other[0])
                down = min(bottom, other[3]) - max(top, other[1])
                # A word's box is as high as its line, so that lines touch: a third of a line is an overlap.
                turned = _is_turned((left, top, right, bottom, word)) or _is_turned(other)
                along, apart = (down, across) if turned else (across, down)
                assert along < 0.5 or apart < 3.0, (page.name, number, word, other[4])


needs_poppler = pytest.mark.skipif(shutil.which("pdftotext") is None, reason="pdftotext is not installed")


@needs_poppler
@pytest.mark.parametrize("kind", KINDS)
def test_nothing_is_clipped_and_nothing_overlaps(kind: str, tmp_path: Path) -> None:
    pages = [page for page in KINDS[kind](example("tarn-hollow")) if page.name in ("unit-10", "plant")]
    assert len(pages) == 1
    on_paper(pages[0], tmp_path)


@needs_poppler
def test_forty_effects_fit_their_sheet(tmp_path: Path) -> None:
    page = next(cause_and_effect_charts(forty_effects(tmp_path)))
    on_paper(page, tmp_path)


@needs_poppler
def test_heads_of_forty_effects_stand_on_every_page_of_sixty_causes(tmp_path: Path) -> None:
    valves = [f"XV-10{number:02d}" for number in range(40)]
    causes = [[f"PT-{20 + number}{channel:02d}" for channel in range(3)] for number in range(20)]
    elements = "\n".join(f'  {tag}: {{unit: "10", kind: on-off valve, service: Inlet of vessel}}' for tag in valves)
    sensors = "\n".join(
        f'  {tag}: {{unit: "10", service: Pressure, variable: pressure, range: 0 to 10 barg}}'
        for three in causes for tag in three
    )  # fmt: skip
    interlocks = "\n".join(
        f'  IS-30{index:02d}: {{unit: "10", layer: safety, voting: 2oo3, service: Overpressure, '
        f'initiators: {{{", ".join(f"{tag}: {{trips: above 8 barg}}" for tag in three)}}}, '
        f'actions: {{{", ".join(f"{tag}: closed" for tag in valves[index % 5 :: 5])}}}}}'
        for index, three in enumerate(causes)
    )
    basis = written(
        tmp_path, f"final_elements:\n{elements}\ninstruments:\n{sensors}\ninterlocks:\n{interlocks}\n"
    )
    page = next(cause_and_effect_charts(basis))
    sheets = words_of(to_pdf(html(page)), tmp_path)
    with_causes = [{word[4] for word in words} for _, _, words in sheets if any(w[4] == "2oo3" for w in words)]
    assert len(with_causes) > 1
    assert all(set(valves) <= words for words in with_causes)
    assert all(sum(tag in words for words in with_causes) == 1 for three in causes for tag in three)


@pytest.mark.parametrize("kind", KINDS)
def test_values_lead_to_the_loop_sheet_on_the_screen(kind: str) -> None:
    basis = example("tarn-hollow")
    page = next(iter(KINDS[kind](basis)))
    site = Site(basis, [*(("loop-sheet", sheet) for sheet in loop_sheets(basis)), (kind, page)], ["html"])
    screen = page_html(page, stylesheet="../style.css", site=site.frame(kind, page))
    assert re.search(r'<a class="(tag|value)" href="\.\./loop-sheets/[A-Z]+-\d+\.html">', screen.partition("<main")[2])
    assert "<a " not in html(page).partition("<main>")[2]


def test_schedules_and_check_records_show_the_deviations_that_touch_them() -> None:
    """FIC-1017 of the demo has two; its transmitter's alarms, its tuning and its failures stand in unit 10."""
    basis = example("tarn-hollow")
    shown = {
        (kind, page.name): [row[0] for row in rows_of(page) if len(row) == 5 and row[0].endswith("FIC-1017")]
        for kind in ("alarms", "tuning", "failures", "channels")
        for page in KINDS[kind](basis)
    }
    of_loop = ["measurement-fault-unsafe, FIC-1017", "alarm-time-short, FIC-1017"]
    for kind in ("alarms", "tuning", "failures"):
        assert shown[kind, "unit-10"] == of_loop
        assert shown[kind, "unit-30"] == []
    assert shown["channels", "plant"] == []
    notes = {page.name: page.view["record"].notes for page in check_records(basis)}
    assert [note for note in notes["FIC-1017"] if "FIC-1017 (measurement-fault-unsafe, alarm-time-short)" in note]
    assert not any("FIC-1017" in note for note in notes["FIC-2011"])


def test_a_loop_out_of_service_is_not_said_to_leave_alone_what_its_transmitter_trips() -> None:
    page = next(page for page in failure_schedules(example("tennessee-eastman")) if page.name == "unit-30")
    row = next(row for row in rows_of(page) if row[0] == "PT-3013 reads too high")
    assert row[2] == "Stays where it is, but for the trip of IS-3013H."
