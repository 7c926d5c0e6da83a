"""Control narratives: sentences of a small register, and what must hold of every narrative of both examples."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import yaml
from markupsafe import Markup

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.handover.issue import KINDS
from loopdoc.documents.loop_sheet.loop_sheet import loop_sheets
from loopdoc.documents.narrative.narrative import Supplement, narratives
from loopdoc.documents.pdf import to_pdf
from loopdoc.documents.rendering import render
from loopdoc.documents.revision.against import page_html
from loopdoc.documents.site.site import Site
from loopdoc.documents.view import Figure, Paragraph, Section, Steps, Table
from loopdoc.documents.wording import Prose, plain
from loopdoc.engineering.dynamics import Dynamics, LoopDynamics
from loopdoc.engineering.pairing import Plant
from loopdoc.register.load import Loaded, load
from loopdoc.register.units import UNITS
from loopdoc.rules.check import check
from loopdoc.rules.finding import CheckResult
from loopdoc.rules.references import defined_tags

ROOT = Path(__file__).parent.parent
EXAMPLES = ("tarn-hollow", "tennessee-eastman")

SMALL = """
format: 1
site: {name: Fellside, owner: Process control group}
revision: {code: B, date: 2026-11-20, status: issued for review, summary: Second issue,
           prepared_by: Process control, checked_by: Instrumentation, approved_by: Operations}
history:
  - {code: A, date: 2026-09-01, status: issued for review, summary: First issue}
numbering: "FS-{unit}-{kind}-{serial}"
tags: '(?P<letters>[A-Z]{2,5})-(?P<unit>\\d{2})(?P<serial>\\d{2})(?P<suffix>[A-Z]?)'
units:
  "20": {name: Column, purpose: Parts the feed.}
loops:
  TIC-2014:
    unit: "20"
    service: Column temperature
    drawing: D-20-103
    purpose: Holds the composition by setting the steam flow.
    measurement: {transmitter: TT-2014, variable: temperature, sensor: Pt100 class A, range: 60 to 120 degC,
                  signal: 4-20 mA, on_fault: reads high}
    operating: {normal: 84.5 degC}
    controller:
      action: reverse
      gain: 1.8
      reset: 9 min
      interval: 1 s
      setpoint: {low: 78 degC, normal: 84.5 degC, high: 92 degC}
      output: {to: FIC-2011, span: 0 to 12 t/h, low: 2 t/h, high: 10.5 t/h}
      modes: {normal: automatic, permitted: [manual, automatic]}
      on_bad_measurement: {mode: manual, output: hold}
      when_not_followed: track
    process: {effect: rises, gain: 5.5 degC per t/h, lag: 9 min, dead_time: 1.5 min, source: step test}
    hazard: high
    alarms:
      high: {limit: 94 degC, deadband: 0.6 degC, delay: 10 s, priority: medium, cause: Too much steam,
             consequence: The product is wet, response: Cut the steam at FIC-2011, time_to_respond: 5 min}
  FIC-2011:
    unit: "20"
    service: Reboiler steam flow
    measurement: {transmitter: FT-2011, variable: flow, element: orifice plate, characteristic: square root,
                  range: 0 to 15 t/h, signal: 4-20 mA, on_fault: reads low}
    controller:
      action: reverse
      gain: 0.45
      reset: 12 s
      interval: 0.5 s
      setpoint: {low: 0 t/h, high: 12 t/h}
      output: {to: FV-2011, low: 0 %, high: 100 %}
      modes: {normal: cascade, permitted: [manual, automatic, cascade]}
      on_bad_measurement: {mode: manual, output: 0 %}
    process: {effect: rises, gain: 0.15 t/h per %, lag: 4 s, dead_time: 1 s, source: step test}
    hazard: none
  LIC-2020:
    unit: "20"
    service: Base level
    measurement: {transmitter: LT-2020, variable: level, range: 0 to 100 %, signal: 4-20 mA, on_fault: reads low}
    controller:
      action: direct
      gain: 2
      setpoint: {low: 30 %, normal: 50 %, high: 70 %}
      output: {to: LV-2020, low: 0 %, high: 100 %}
      modes: {normal: automatic, permitted: [manual, automatic]}
      on_bad_measurement: {mode: manual, output: hold}
    process: {effect: falls, gain: -1.0 %/min per %, integrating: true}
    hazard: both
  PI-2007:
    unit: "20"
    service: Top pressure
    measurement: {transmitter: PT-2007, variable: pressure, range: 0 to 4 barg, signal: 4-20 mA, on_fault: reads high}
    operating: {low: 0.5 barg, normal: 1.0 barg, high: 1.5 barg}
final_elements:
  FV-2011: {unit: "20", kind: control valve, service: Reboiler steam, opens_on: rising signal, fails: closed,
            safe: closed, signal: 4-20 mA, characteristic: equal percentage, stroke_time: 6 s}
  LV-2020: {unit: "20", kind: control valve, service: Bottoms, opens_on: falling signal, output_block: reversed,
            fails: open, safe: {hold: hazard study not finished}, signal: 4-20 mA}
interlocks:
  IS-2001:
    unit: "20"
    service: Overpressure
    layer: safety
    initiators: {PT-2007: {trips: above 2.5 barg, delay: 1 s}}
    voting: 1oo1
    actions: {FV-2011: closed, FIC-2011: {mode: manual, output: 0 %}}
    reset: manual, local
    process_safety_time: 90 s
    response_time: 8 s
    proof_test: 12 months
    cause: Cooling lost.
    consequence: The relief valve lifts.
texts:
  "20":
    overview: |
      The column runs at {PI-2007/operating/normal}.

      Steam is cut {IS-2001/initiators/PT-2007/trips}; see {PI-2007/nowhere}.
    start_up: [Put FIC-2011 in automatic at 3 t/h., Wait]
    upsets: ["Steam lost: the level falls. Cut LIC-2020."]
"""


def basis_of(folder: Path) -> Basis:
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    plant = Plant(loaded.register)
    return Basis(plant, check(plant, loaded.faults), loaded.sources, Dynamics(plant))


@pytest.fixture(scope="module")
def small(tmp_path_factory: pytest.TempPathFactory) -> Basis:
    folder = tmp_path_factory.mktemp("small")
    (folder / "register.yaml").write_text(SMALL, encoding="utf-8")
    return basis_of(folder)


@pytest.fixture(scope="module")
def column(small: Basis) -> Page:
    return next(narratives(small))


@pytest.fixture(scope="module", params=EXAMPLES)
def example(request: pytest.FixtureRequest) -> tuple[Basis, tuple[Page, ...]]:
    basis = basis_of(ROOT / "examples" / str(request.param))
    return basis, tuple(narratives(basis))


def sections_of(page: Page) -> Iterator[Section]:
    for section in page.view["sections"]:
        yield section
        yield from section.sections


def proses(page: Page) -> Iterator[Prose]:
    yield page.view["reading"]
    for section in sections_of(page):
        if section.tags:
            yield section.tags
        for block in section.blocks:
            if isinstance(block, Paragraph):
                yield block.prose
            elif isinstance(block, Steps):
                yield from block.items
            elif isinstance(block, Table):
                yield from (cell for row in block.rows for cell in row)


def text_of(page: Page) -> str:
    return "\n".join(plain(prose) for prose in proses(page)).replace("\u00a0", " ")


def section(page: Page, title: str) -> str:
    found = next(one for one in sections_of(page) if title in one.title)
    told = []
    for block in found.blocks:
        if isinstance(block, Paragraph):
            told.append(f"{block.label} {plain(block.prose)}")
        elif isinstance(block, Table):
            told.extend(" | ".join(plain(cell) for cell in row) for row in block.rows)
        elif isinstance(block, Steps):
            told.extend(plain(item) for item in block.items)
    return "\n".join(told).replace("\u00a0", " ")


def html_of(page: Page, stylesheet: str) -> str:
    return render(page.template, document=page.document, stylesheet=stylesheet, **page.view)


# ---------------------------------------------------------------- sentences of the small register


def test_a_cascade_is_told_as_an_engineer_would(column: Page) -> None:
    told = section(column, "Column temperature")
    assert "TIC-2014 holds the composition by setting the steam flow." in told
    assert (
        "TT-2014 (Pt100 class A) measures the column temperature over 60 to 120 °C, and TIC-2014 holds it at its "
        "setpoint by commanding FIC-2011. FIC-2011 holds the reboiler steam flow (FT-2011, orifice plate, square "
        "root, 0 to 15 t/h) by moving FV-2011, an equal percentage control valve."
    ) in told
    assert (
        "When the temperature rises, TIC-2014 asks for a lower flow and FIC-2011 closes FV-2011. Both are reverse "
        "acting, because the temperature rises with the flow and the flow as FV-2011 opens."
    ) in told
    assert "While FIC-2011 is out of cascade or at a limit, TIC-2014 tracks it, so that the return is bumpless." in told


def test_modes_and_limits_of_a_cascade_stand_in_one_table(column: Page) -> None:
    told = section(column, "Column temperature")
    row = "TIC-2014 | automatic | manual or automatic | 84.5 °C | 78 to 92 °C | FIC-2011, 0 to 12 t/h | 2 to 10.5 t/h"
    assert row in told
    assert "FIC-2011 | cascade | manual, automatic or cascade | from TIC-2014 | 0 to 12 t/h | FV-2011 |" in told


def test_a_single_loop_is_told_in_sentences(column: Page) -> None:
    told = section(column, "Base level")
    assert (
        "LT-2020 measures the base level over 0 to 100 %, and LIC-2020 holds it at its setpoint by moving LV-2020, a "
        "control valve on the bottoms. LV-2020 opens on a falling signal, and its output block is reversed, so that "
        "0 % of output still means a shut valve."
    ) in told
    assert "When the level rises, LIC-2020 opens LV-2020. LIC-2020 is direct acting, because the level falls" in told
    assert (
        "LIC-2020 runs in automatic; the operator may put it in manual. Its setpoint, normally 50 %, may be set from "
        "30 to 70 %; its output may use the whole travel of LV-2020."
    ) in told


def test_failures_say_what_is_seen_done_and_met(column: Page) -> None:
    told = section(column, "Column temperature")
    assert "When something fails. The hazard is a high temperature." in told
    rows = {row.partition(" | ")[0]: row for row in told.split("\n") if " | " in row}
    assert rows["TT-2014 signals a fault"] == (
        "TT-2014 signals a fault | TIC-2014 goes to manual and holds its output. | The temperature is left to itself. "
        "| Nothing independent in the register."
    )
    # The sensor reads low, so the steam rises; the sensor's own alarm does not count, the interlock is another's.
    assert rows["TT-2014 reads too low"] == (
        "TT-2014 reads too low | TIC-2014 asks for a higher flow (up to 10.5 t/h) and FIC-2011 opens FV-2011. | The "
        "temperature rises, towards the hazard. | Nothing independent in the register. IS-2001 closes FV-2011 at its "
        "own limit."
    )
    assert rows["FT-2011 signals a fault"] == (
        "FT-2011 signals a fault | FIC-2011 goes to manual with its output at 0 %, and FV-2011 closes. TIC-2014 "
        "tracks. | The flow and the temperature fall. | No declared hazard."
    )
    assert rows["FV-2011 loses its signal or its air, or the control system its power"].startswith(
        "FV-2011 loses its signal or its air, or the control system its power | FV-2011 closes. |"
    )


def test_alarms_go_with_the_power_of_the_control_system(tmp_path: Path) -> None:
    # The level is watched by one alarm, which the control system gives; without power there is none.
    watched = SMALL.replace("    hazard: both\n", "    hazard: both\n    alarms: {low: {limit: 20 %}}\n")
    (tmp_path / "register.yaml").write_text(watched, encoding="utf-8")
    told = section(next(narratives(basis_of(tmp_path))), "Base level")
    row = next(row for row in told.split("\n") if row.startswith("LV-2020 loses"))
    assert row.endswith("| LIC-2020 alarm (low 20 %). Without the control system's power: nothing.")


def test_alarms_carry_the_response_and_its_time(column: Page) -> None:
    row = (
        "TIC-2014 high | 94 °C, deadband 0.6 °C, after 10 s | medium | Too much steam | The product is wet | "
        "Cut the steam at FIC-2011. Within 5 min."
    )
    assert row in section(column, "Column temperature")


def test_an_interlock_is_told_with_its_times(column: Page) -> None:
    told = section(column, "IS-2001")
    assert (
        "IS-2001 belongs to the safety layer. It trips when PT-2007 stands above 2.5 bar(g) for 1 s, and then closes "
        "FV-2011 and puts FIC-2011 in manual at 0 % output. Likely cause: cooling lost. Without it, the relief valve "
        "lifts."
    ) in told
    assert (
        "Reset is manual, local. IS-2001 acts within 8 s, 8.9 % of the process safety time of 90 s. Whether that is "
        "enough is judged in the lifecycle of the safety function. It is proof-tested every 12 months."
    ) in told


def test_tuning_gives_settings_margins_and_models(small: Basis, column: Page) -> None:
    told = section(column, "Column temperature")
    margins = small.dynamics.loop("TIC-2014").worst
    assert margins is not None
    row = next(row for row in told.split("\n") if row.startswith("TIC-2014 | 1.8 | 9 min"))
    assert f"{margins.margins[-1].max_sensitivity:.3g}" in row.split(" | ")
    assert "TIC-2014 | FIC-2011 | 5.5 °C per t/h | 9 min | 1.5 min | step test" in told
    # Proportional alone: no reset.
    assert re.search(r"LIC-2020 \| 2 \| none", section(column, "Base level"))


def test_pointers_of_the_prose_show_values_and_what_leads_nowhere(column: Page) -> None:
    told = section(column, "Overview")
    assert "Unit 20 parts the feed." in told
    assert "The column runs at 1.0 bar(g)." in told
    assert "Steam is cut above 2.5 bar(g); see {PI-2007/nowhere}." in told
    assert 'class="unresolved"' in html_of(column, "")


def test_steps_and_upsets_are_numbered(column: Page) -> None:
    html = html_of(column, "")
    assert section(column, "Start-up") == "Put FIC-2011 in automatic at 3 t/h.\nWait."
    assert section(column, "Upsets") == "Steam lost. The level falls. Cut LIC-2020."
    assert "<b>Steam lost.</b>" in html
    assert "Shutdown" not in [one.title for one in sections_of(column)]  # nothing is written for it


def test_a_hold_is_said_once_with_its_reason(column: Page) -> None:
    assert "Still on hold: the safe position of LV-2020." in section(column, "Base level")
    assert "Safe position | LV-2020 | Hazard study not finished." in section(column, "Holds")
    assert text_of(column).count("Hazard study not finished") == 1


def test_a_scheme_that_another_unit_leads_is_told_there() -> None:
    # FIC-2001 of unit 20 commands FIC-1011 of unit 10 through the low select FY-1011.
    feed, column, _ = narratives(basis_of(ROOT / "examples/tarn-hollow"))
    told = section(feed, "Evaporator steam flow")
    assert "It belongs to the scheme led by FIC-2001, which TH-20-CN-001 tells as a whole (unit 20)." in told
    assert "FY-1011 passes the lower of the demands of FIC-2001 and PDIC-2016 on to FIC-1011." in told
    assert "FT-1011 reads too low" in section(column, "Vapour feed to rectifier")
    # What the cascade gains is told once, with the scheme as a whole.
    feed, column, _ = KINDS["narrative"](basis_of(ROOT / "examples/tarn-hollow"))
    assert "With the cascade" not in section(feed, "Evaporator steam flow")
    assert "With the cascade" in section(column, "Vapour feed to rectifier")


def test_what_is_calculated_elsewhere_has_its_place(small: Basis) -> None:
    figure = Figure(Markup('<svg class="made"><title>made</title></svg>'), "Setpoint step")
    benefit = Supplement(lambda language: "The cascade halves the deviation.", (figure,))
    page = next(narratives(small, {"TIC-2014": benefit}))
    told = section(page, "Column temperature")
    assert "The cascade halves the deviation." in told
    html = html_of(page, "")
    assert '<svg class="made">' in html
    assert "<figcaption>Setpoint step</figcaption>" in html


def test_front_matter_and_contents(column: Page) -> None:
    html = html_of(column, "")
    assert column.folder == "narratives"
    assert column.name == "unit-20"
    assert (column.document.number, column.document.kind) == ("FS-20-CN-001", "Control narrative")
    assert column.document.supplementary_title == "Two control schemes, one indicator and one interlock"
    assert html.index("Second issue") < html.index("First issue")
    for anchor in re.findall(r'href="#([^"]+)"', html):
        assert html.count(f'id="{anchor}"') == 1, anchor


def test_tags_lead_to_their_sheets_on_the_screen_only(small: Basis, column: Page) -> None:
    site = Site(small, [*(("loop-sheet", sheet) for sheet in loop_sheets(small)), ("narrative", column)], ["html"])
    screen = page_html(column, stylesheet="../style.css", site=site.frame("narrative", column))
    paper = html_of(column, "")
    assert '<a class="tag" href="../loop-sheets/TIC-2014.html">TIC-2014</a>' in screen
    assert '<a class="tag" href="../loop-sheets/TIC-2014.html">TT-2014</a>' in screen
    assert '<a class="tag" href="../loop-sheets/FIC-2011.html">FV-2011</a>' in screen
    assert '<a class="tag" href="#interlock-IS-2001">IS-2001</a>' in paper
    assert "../" not in paper


def test_text_of_the_register_cannot_become_markup(tmp_path: Path) -> None:
    hostile = SMALL.replace("Column temperature", "<script>x</script> & {{ 7*7 }}")
    hostile = hostile.replace("Too much steam", "<b>hot</b>")
    (tmp_path / "register.yaml").write_text(hostile, encoding="utf-8")
    html = html_of(next(narratives(basis_of(tmp_path))), "")
    assert "<script>" not in html
    assert "<b>hot" not in html
    assert "{{ 7*7 }}" in html


# ---------------------------------------------------------------- what holds of every narrative


CLUMSY = re.compile(r"  |None|\( | [,.;:)]|\.\.|,,|\b(a|an|the|and|of|to) \1\b|Hold\(|\ba [aeio][a-z]")


def test_no_clumsy_joint_shows(example: tuple[Basis, tuple[Page, ...]]) -> None:
    for page in example[1]:
        for prose in proses(page):
            text = plain(prose)
            assert not CLUMSY.search(text), text
            assert not re.search(r"\bsafe\b(?! position)|compliant", text), text


def test_nothing_is_empty_and_everything_is_numbered(example: tuple[Basis, tuple[Page, ...]]) -> None:
    for page in example[1]:
        found = page.view["sections"]
        assert [one.number for one in found] == [str(index + 1) for index in range(len(found))]
        for one in found:
            assert [part.number for part in one.sections] == [f"{one.number}.{n + 1}" for n in range(len(one.sections))]
        for one in sections_of(page):
            assert one.title
            assert one.blocks or one.sections, one.title
            for block in one.blocks:
                if isinstance(block, Table):
                    assert block.rows
                    assert all(len(row) == len(block.head) for row in block.rows)
                    for column in range(len(block.head)):
                        assert any(plain(row[column]) for row in block.rows), (one.title, block.head[column])


def test_every_tag_of_the_unit_is_told(example: tuple[Basis, tuple[Page, ...]]) -> None:
    basis, pages = example
    for page, number in zip(pages, basis.plant.register.units, strict=True):
        text = text_of(page)
        for defined in defined_tags(basis.plant.register):
            if defined.unit == number:
                assert re.search(rf"\b{re.escape(defined.tag)}\b", text), defined.tag


def test_every_value_has_its_unit(example: tuple[Basis, tuple[Page, ...]]) -> None:
    displays = sorted({unit.display for unit in UNITS.values()} | {"rad/s"}, key=len, reverse=True)
    number = r"−?\d+(\.\d+)?"
    with_unit = "|".join(re.escape(display) for display in displays if display)
    value = re.compile(
        rf"((above|below|high|low|high-high|low-low)\u00a0)?({number}\u00a0to\u00a0)?{number}\u00a0?({with_unit})"
        rf"(/[a-z]+)?(\u00a0per\u00a0({with_unit}))?"
    )
    for page in example[1]:
        for prose in proses(page):
            for run in prose:
                # The ratio of FY-2031 has no unit (both flows are in t/h); 4-20 mA names a signal.
                if run.kind == "value" and run.text not in ("1.18", "0.8\u00a0to\u00a01.5", "4-20\u00a0mA"):
                    assert value.fullmatch(run.text), run.text


def test_no_number_stands_outside_a_value(column: Page) -> None:
    # All but tags, values with their units, the sensor Pt100, the drawing, the unit (also as what a finding is about)
    # and the dimensionless figures of the tuning table (gain, margins).
    for one in sections_of(column):
        for block in one.blocks:
            cells: list[Prose] = []
            if isinstance(block, Paragraph) and one.title != "Control schemes":
                cells = [block.prose]
            elif isinstance(block, Table) and block.name != "tuning":
                cells = [cell for row in block.rows for cell in row]
            for prose in cells:
                text = "".join(run.before + (run.text if run.kind == "text" else "") + run.after for run in prose)
                assert not re.search(r"\d", re.sub(r"Pt100|Unit 20|text-tag-unknown, 20", "", text)), plain(prose)


def test_sentences_begin_and_end_as_sentences_do(example: tuple[Basis, tuple[Page, ...]]) -> None:
    for page in example[1]:
        for one in sections_of(page):
            for block in one.blocks:
                if isinstance(block, Paragraph):
                    text = plain(block.prose)
                    assert text[0].isupper() or text[0].isdigit(), text
                    assert text[-1] in ".!?", text


def test_the_same_is_told_in_the_same_words() -> None:
    # An operator who compares two schemes must not look for a difference where there is none.
    pages = narratives(basis_of(ROOT / "examples/tarn-hollow"))
    told = {plain(prose) for page in pages for prose in proses(page) if re.search(r" tracks? .*bumpless", plain(prose))}
    pairs = [one for one in told if len(set(re.findall(r"[A-Z]+-[0-9]+", one))) == 2]
    assert len(pairs) >= 6
    shape = "While TAG is out of cascade or at a limit, TAG tracks it, so that the return is bumpless."
    assert {re.sub(r"[A-Z]+-[0-9]+", "TAG", one) for one in pairs} == {shape}


def test_what_is_held_is_said_once_and_shortly() -> None:
    # Each narrative of the published plant has dozens of holds; their reasons stand in one table.
    basis = basis_of(ROOT / "examples/tennessee-eastman")
    for page in narratives(basis):
        for one in sections_of(page):
            prose = " ".join(plain(block.prose) for block in one.blocks if isinstance(block, Paragraph))
            assert "HOLD" not in prose
            assert prose.count("Still on hold") <= 1
        reasons = [plain(row[2]) for one in sections_of(page) for block in one.blocks
                   if isinstance(block, Table) and block.name == "holds" for row in block.rows]  # fmt: skip
        assert reasons


def test_two_builds_are_alike(example: tuple[Basis, tuple[Page, ...]]) -> None:
    basis, pages = example
    assert [page.view for page in narratives(basis)] == [page.view for page in pages]


# ---------------------------------------------------------------- paper


@pytest.mark.parametrize("which", ["small", "tennessee-eastman"])
def test_the_page_is_set_without_complaint(which: str, small: Basis) -> None:
    # `to_pdf` raises on any line that WeasyPrint logs.
    basis = small if which == "small" else basis_of(ROOT / "examples" / which)
    page = list(narratives(basis))[-1]
    assert to_pdf(html_of(page, "")).startswith(b"%PDF-")


# ---------------------------------------------------------------- a register with gaps and faults


def variants() -> Iterator[tuple[str, dict[str, Any]]]:
    """The register of the rule cases with every value under one key written wrongly.

    What cannot be read is a hold in the model; a word that the format does not know stays in it as it is.
    """
    base = yaml.safe_load((ROOT / "tests" / "rules" / "base-register.yaml").read_text(encoding="utf-8"))

    def keys(data: object) -> Iterator[str]:
        if isinstance(data, dict):
            for key, entry in data.items():
                yield str(key)
                yield from keys(entry)

    def changed(data: object, key: str) -> object:
        if not isinstance(data, dict):
            return data
        return {one: "nonsense" if one == key else changed(entry, key) for one, entry in data.items()}

    for key in dict.fromkeys(keys({name: base[name] for name in base if isinstance(base[name], dict)})):
        yield key, {name: changed(entry, key) for name, entry in base.items()}


class NotCalculated(Dynamics):
    """Dynamics that nobody has time to calculate for every variant."""

    def loop(self, tag: str) -> LoopDynamics:
        return LoopDynamics(tag, (), f"the gain of {tag} is on hold")


def test_no_gap_and_no_nonsense_stops_the_narrative(tmp_path: Path) -> None:
    count = 0
    for key, data in variants():
        (tmp_path / "register.yaml").write_text(json.dumps(data, default=str), encoding="utf-8")
        loaded = load(tmp_path)
        if not isinstance(loaded, Loaded):
            continue
        plant = Plant(loaded.register)
        basis = Basis(plant, CheckResult((), (), {}), loaded.sources, NotCalculated(plant))
        for page in narratives(basis):
            text = text_of(page)
            assert not re.search(r"None|Hold\(|  | [,.;)]|\.\.", text), key
        count += 1
    assert count > 60
