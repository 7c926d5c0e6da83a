"""Drawn loops: nothing overlaps and nothing leaves the frame, measured with the outlines of the font itself."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files
from itertools import combinations, pairwise
from pathlib import Path
from xml.etree import ElementTree

import pytest
from fontTools.ttLib import TTFont

from loopdoc.documents.drawing import SMALLEST, fitted, tag_lines, text_width, wrapped
from loopdoc.documents.language import ENGLISH, GERMAN, Language
from loopdoc.documents.loop_sheet.lanes import WIDTH
from loopdoc.documents.loop_sheet.loop_drawing import drawn_loop
from loopdoc.engineering.pairing import Plant
from loopdoc.register.load import Loaded, load

EXAMPLES = Path(__file__).parents[1] / "examples"
SVG = "{http://www.w3.org/2000/svg}"
CLOSE = 0.3
"""Boxes that come nearer than this [pt] are called overlapping: half of the thinnest line and a little."""


# ---------------------------------------------------------------- reading a drawing back


@dataclass(frozen=True)
class Box:
    left: float
    top: float
    right: float
    bottom: float
    what: str

    def meets(self, other: Box) -> bool:
        return (
            self.left < other.right + CLOSE
            and other.left < self.right + CLOSE
            and self.top < other.bottom + CLOSE
            and other.top < self.bottom + CLOSE
        )

    def holds(self, other: Box) -> bool:
        return (
            self.left <= other.left
            and other.right <= self.right
            and self.top <= other.top
            and other.bottom <= self.bottom
        )


@lru_cache
def face(bold: bool) -> TTFont:
    name = f"IBMPlexSansCondensed-{'Bold' if bold else 'Regular'}.ttf"
    return TTFont(str(files("loopdoc.templates").joinpath("fonts", name)))


@lru_cache
def extent(letter: str, bold: bool) -> tuple[float, float, float]:
    """Advance, lowest and highest point of a letter, in type sizes."""
    font = face(bold)
    name = font.getBestCmap()[ord(letter)]
    outline = font["glyf"][name]
    low, high = (outline.yMin, outline.yMax) if outline.numberOfContours else (0, 0)
    per_em = font["head"].unitsPerEm
    return font["hmtx"].metrics[name][0] / per_em, low / per_em, high / per_em


def text_box(element: ElementTree.Element) -> Box:
    content = element.text or ""
    bold = element.get("font-weight") == "700"
    size = float(element.get("font-size", "6.4"))
    letters = [extent(letter, bold) for letter in content]
    width = size * sum(advance for advance, _, _ in letters)
    x, y = float(element.get("x", "")), float(element.get("y", ""))
    left = x - {"start": 0.0, "middle": width / 2, "end": width}[element.get("text-anchor", "start")]
    top, bottom = (max(h for _, _, h in letters), min(low for _, low, _ in letters)) if letters else (0.0, 0.0)
    return Box(left, y - size * top, left + width, y - size * bottom, content)


def subpaths(path: str) -> Iterator[list[tuple[float, float]]]:
    """Points of each part of a path; an arc adds the corners of the box around its circle."""
    points: list[tuple[float, float]] = []
    for letter, numbers in re.findall(r"([MLaZ])([^MLaZ]*)", path):
        values = [float(number) for number in re.findall(r"-?[\d.]+", numbers)]
        if letter == "M":
            if points:
                yield points
            points = [(values[0], values[1])]
        elif letter == "L":
            points.append((values[0], values[1]))
        elif letter == "a":
            (x0, y0), radius = points[-1], values[0]
            x1, y1 = x0 + values[5], y0 + values[6]
            middle = (x0 + x1) / 2, (y0 + y1) / 2
            full = "0 1 0" in numbers
            points += [(middle[0] - radius, middle[1] - radius), (middle[0] + radius, middle[1] + radius * full)]
            points.append((x1, y1))
    yield points


def around(points: list[tuple[float, float]], what: str) -> Box:
    across, down = zip(*points, strict=True)
    return Box(min(across), min(down), max(across), max(down), what)


@dataclass(frozen=True)
class Marks:
    height: float
    texts: tuple[Box, ...]
    symbols: tuple[Box, ...]
    lines: tuple[Box, ...]
    """Each straight piece of a line as a thin box."""
    arrows: tuple[Box, ...]


def marks(svg: str) -> Marks:
    root = ElementTree.fromstring(svg)
    texts = tuple(text_box(element) for element in root.iter(f"{SVG}text"))
    symbols, lines, arrows = [], [], []
    for element in root.iter(f"{SVG}path"):
        path = element.get("d", "")
        if element.get("class") == "symbol":
            symbols.append(around([point for part in subpaths(path) for point in part], "symbol"))
        elif element.get("class") == "line":
            what = "frame" if element.get("stroke-dasharray") == "6 2 1 2" or "0.5 0.5" in path else "line"
            for part in subpaths(path):
                lines += [around(list(ends), what) for ends in pairwise(part)]
        elif element.get("fill") == "#111":
            arrows += [around(part, "arrow") for part in subpaths(path)]
    return Marks(float(root.get("viewBox", "").split()[3]), texts, tuple(symbols), tuple(lines), tuple(arrows))


def faults(svg: str) -> list[str]:
    """Everything that overlaps or leaves the frame."""
    found = marks(svg)
    frame = Box(0.9, 0.9, WIDTH - 0.9, found.height - 0.9, "frame")
    told = [f"{box} leaves the frame" for box in (*found.texts, *found.symbols) if not frame.holds(box)]
    told += [f"{a} on {b}" for a, b in combinations(found.texts, 2) if a.meets(b)]
    told += [f"{a} on {b}" for a, b in combinations(found.symbols, 2) if a.meets(b)]
    for text in found.texts:
        touched = [symbol for symbol in found.symbols if symbol.meets(text)]
        told += [f"{text} across the edge of {symbol}" for symbol in touched if not symbol.holds(text)]
        if not touched:  # a symbol hides the lines behind it
            told += [f"{line} through {text}" for line in (*found.lines, *found.arrows) if line.meets(text)]
    return [*told, *crossings(found)]


def crossings(found: Marks) -> Iterator[str]:
    """Where two lines cross that are not the frame; what a symbol hides does not cross."""
    own = [line for line in found.lines if line.what == "line"]
    level = [line for line in own if line.bottom - line.top < line.right - line.left]
    upright = [line for line in own if line.bottom - line.top > line.right - line.left]
    for a in level:
        for b in upright:
            x, y = (b.left + b.right) / 2, (a.top + a.bottom) / 2
            at = Box(x - 0.1, y - 0.1, x + 0.1, y + 0.1, "crossing")
            crosses = a.left < x - 1 and x + 1 < a.right and b.top < y - 1 and y + 1 < b.bottom
            if crosses and not any(symbol.holds(at) for symbol in found.symbols):
                yield f"{a} crosses {b}"


# ---------------------------------------------------------------- registers


def example(name: str) -> Plant:
    loaded = load(EXAMPLES / name)
    assert isinstance(loaded, Loaded)
    return Plant(loaded.register)


@pytest.fixture(scope="module", params=["tarn-hollow", "tennessee-eastman"])
def plant(request: pytest.FixtureRequest) -> Plant:
    return example(request.param)


def plant_of(folder: Path, text: str) -> Plant:
    (folder / "register.yaml").write_text(f"format: 1\nsite: {{name: Test}}\n{text}", encoding="utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    return Plant(loaded.register)


MEASURED = (
    "{transmitter: %s, variable: flow, range: 0 to 10 t/h, signal: 4-20 mA, channel: AI-1, element: orifice plate}"
)


def loop(tag: str, to: str, *, alarms: str = "") -> str:
    measured = MEASURED % tag.replace("IC", "T")
    extra = f", alarms: {{{alarms}}}" if alarms else ""
    controller = f"{{action: reverse, output: {{to: {to}}}}}"
    return f"  {tag}: {{service: Some flow, measurement: {measured}, controller: {controller}{extra}}}\n"


# ---------------------------------------------------------------- tests


@pytest.mark.parametrize("language", [ENGLISH, GERMAN])
def test_every_loop_of_the_examples_is_drawn_without_overlap(plant: Plant, language: Language) -> None:
    for tag in plant.register.loops:
        assert not faults(drawn_loop(plant, tag, language).svg), tag


@pytest.mark.parametrize("language", [ENGLISH, GERMAN])
def test_no_drawing_of_the_examples_cuts_a_word(plant: Plant, language: Language) -> None:
    for tag in plant.register.loops:
        assert "…" not in drawn_loop(plant, tag, language).svg, tag


def test_the_check_sees_what_overlaps() -> None:
    """Two texts on each other, a line through a text, and a text out of the frame."""
    svg = (
        '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 510 100"><path class="line" d="M10 48L90 48"/>'
        '<path class="line" d="M70 30L70 60"/>'
        '<g><text x="20" y="50">one</text><text x="25" y="52">two</text><text x="500" y="90">outside</text></g></svg>'
    )
    assert len(faults(svg)) == 5  # the line runs through both texts, and crosses another


@pytest.mark.parametrize(
    ("tag", "stands"),
    [
        ("TIC-2014", ["AIC", "FIC", "FV-2011", "FC", "0 to 100\u00a0% = 92 to 104\u00a0°C", "reverse"]),  # both ways
        ("FIC-2031", ["FY-2031", "×", "0.8 to 1.5, normally 1.18", "√", "20\u00a0mA shut, 4\u00a0mA open", "reversed"]),
        ("FIC-3003", ["FY-3003", "Σ", "LIC", "AI-3-02", "AI-3-03"]),
        ("PDIC-2016", ["FY-1011", "<", "2001", "IS-1002: closed"]),
        ("PIC-2021", ["f(x)", "45 to 0\u00a0%", "55 to 100\u00a0%", "FO", "FC", "AO-2-03", "AO-2-04"]),
        ("FIC-1011", ["IS-1002: manual, 0\u00a0%", "IS-2001: manual, 0\u00a0%", "4-20 mA"]),
        ("FIC-1017", ["VSD", "M", "IS-1002"]),
        ("AIC-2015", ["FIC-2011"]),  # where the secondary leads on
    ],
)
def test_a_drawing_shows_what_the_loop_is_connected_to(tag: str, stands: list[str]) -> None:
    root = ElementTree.fromstring(drawn_loop(example("tarn-hollow"), tag, ENGLISH).svg)
    written = [element.text for element in root.iter(f"{SVG}text")]
    assert [words for words in stands if words not in written] == []


def test_two_commanders_of_one_valve_are_both_drawn() -> None:
    root = ElementTree.fromstring(drawn_loop(example("tennessee-eastman"), "FIC-3010", ENGLISH).svg)
    assert "PIC-3013" in [element.text for element in root.iter(f"{SVG}text")]


def test_a_drawing_says_in_words_what_it_shows(plant: Plant) -> None:
    for tag in plant.register.loops:
        root = ElementTree.fromstring(drawn_loop(plant, tag, ENGLISH).svg)
        assert root.get("role") == "img"
        assert root[0].tag == f"{SVG}title"
        assert tag in (root[0].text or "")


def test_a_selector_of_many(tmp_path: Path) -> None:
    """Six candidates: the first stands above or is the loop, two are drawn beside it, the rest are counted."""
    candidates = "".join(loop(f"FIC-{n}", "FY-9") for n in range(1, 7))
    plant = plant_of(
        tmp_path, f"loops:\n{candidates}{loop('FIC-9', 'FV-9')}functions: {{FY-9: {{kind: low select, to: FIC-9}}}}\n"
    )
    for tag in plant.register.loops:
        svg = drawn_loop(plant, tag, ENGLISH).svg
        assert not faults(svg), tag
        assert "3 more" in svg


def test_a_sum_of_three_and_functions_in_series(tmp_path: Path) -> None:
    inputs = "".join(f"  FI-{n}: {{measurement: {MEASURED % f'FT-{n}'}}}\n" for n in (21, 22, 23))
    plant = plant_of(
        tmp_path,
        f"loops:\n{loop('FIC-1', 'FY-1')}{loop('FIC-2', 'FV-2')}{inputs}"
        "functions:\n"
        "  FY-1: {kind: sum, inputs: [FT-21, FT-22, FT-23, FT-24], weights: {FT-21: 0.5, FT-22: -1.25}, to: FY-2}\n"
        "  FY-2: {kind: ratio, inputs: [FI-21], span: 0.5 to 2, to: FY-3}\n"
        "  FY-3: {kind: {hold: not chosen}, to: FIC-2}\n"
        "final_elements: {FV-2: {kind: control valve}}\n",
    )
    for tag in ("FIC-1", "FIC-2"):
        svg = drawn_loop(plant, tag, ENGLISH).svg
        assert not faults(svg), tag
        assert "× 0.5" in svg
        assert "FT-24" in svg  # not defined, so named and not drawn
        assert "HOLD" in svg


@pytest.mark.parametrize(
    "kind", ["control valve", "on-off valve", "damper", "variable-speed drive", "motor", "heater bank"]
)
@pytest.mark.parametrize("fails", ["closed", "open", "last", "stopped", "{hold: not studied}"])
def test_every_final_element_in_a_split_range_of_three(tmp_path: Path, kind: str, fails: str) -> None:
    element = (
        f"{{kind: {kind}, fails: {fails}, service: A service with a name of some length for a valve, opens_on: "
        "falling signal, output_block: reversed, signal: 0-20 mA, channel: AO-1}"
    )
    plant = plant_of(
        tmp_path,
        f"loops:\n{loop('FIC-1', 'FY-1')}final_elements: {{FV-1A: {element}, FV-1B: {element}}}\n"
        "functions: {FY-1: {kind: split range, outputs: {FV-1A: 50 to 0 %, FV-1B: 50 to 100 %, FV-1C: 80 to 100 %}}}\n"
        "interlocks:\n"
        + "".join(
            f"  IS-{n}: {{actions: {{FV-1B: closed, FIC-1: {{mode: manual, output: 100 %}}}}}}\n" for n in range(1, 9)
        ),
    )
    svg = drawn_loop(plant, "FIC-1", ENGLISH).svg
    assert not faults(svg)
    assert "and 3 more" in svg  # eight interlocks on the valve, six lines


def test_every_alarm_and_many_interlocks(tmp_path: Path) -> None:
    kinds = ("high_high", "high", "low", "low_low", "deviation")
    alarms = ", ".join(f"{kind}: {{limit: 1234.5678 kg/m3}}" for kind in kinds)
    interlocks = "".join(f"  IS-{n}: {{initiators: {{FT-1: {{trips: above 5 t/h}}}}}}\n" for n in range(1, 13))
    plant = plant_of(
        tmp_path, f"loops:\n{loop('FIC-1', 'FIC-2', alarms=alarms)}{loop('FIC-2', 'FIC-3')}interlocks:\n{interlocks}"
    )
    svg = drawn_loop(plant, "FIC-1", ENGLISH).svg
    assert not faults(svg)
    assert [words for words in ("HH 1234.5678", "DEV 1234.5678", "IS-1, IS-2", ">FIC-3<") if words not in svg] == []


@pytest.mark.parametrize("variable", ["flow", "level", "temperature", "differential pressure", "analysis", "speed"])
def test_every_measuring_point(tmp_path: Path, variable: str) -> None:
    sensor = "a sensor of many words that go on and on"
    measured = f"{{transmitter: XT-1, variable: {variable}, range: {{hold: open}}, sensor: {sensor}}}"
    plant = plant_of(tmp_path, f"loops: {{XI-1: {{measurement: {measured}}}}}\n")
    assert not faults(drawn_loop(plant, "XI-1", ENGLISH).svg)


def test_an_output_that_leads_nowhere(tmp_path: Path) -> None:
    plant = plant_of(
        tmp_path,
        f"loops:\n{loop('FIC-1', 'FV-404')}{loop('FIC-2', 'FIC-2')}"
        "  FIC-3: {controller: {output: {to: {hold: not chosen}}}}\n  FIC-4: {controller: {action: direct}}\n",
    )
    for tag, words in (("FIC-1", "FV-404"), ("FIC-2", "FIC-2"), ("FIC-3", "HOLD"), ("FIC-4", "–")):
        svg = drawn_loop(plant, tag, ENGLISH).svg
        assert not faults(svg), tag
        assert f">{words}<" in svg


def test_primaries_without_a_selector_are_all_named(tmp_path: Path) -> None:
    plant = plant_of(tmp_path, f"loops:\n{loop('FIC-1', 'FIC-3')}{loop('FIC-2', 'FIC-3')}{loop('FIC-3', 'FV-3')}")
    svg = drawn_loop(plant, "FIC-3", ENGLISH).svg
    assert not faults(svg)
    assert ">FIC-2<" in svg


# ---------------------------------------------------------------- wiring


def wiring(stops: int, *, terminals: int = 2, pair: str = "1", name: str = "JB") -> str:
    """Wiring over some boxes, each with terminals of six characters."""
    marks = ", ".join(f"TB{number}-{number + 10}" for number in range(1, terminals + 1))
    cables = ", ".join(
        f"{{cable: MC-20-{at:02}, pair: {pair}, at: {name}-20{at:02}, terminals: [{marks}]}}" for at in range(stops)
    )
    return f"[{cables}]"


MEASURED_WITH_WIRES = (
    "{transmitter: %s, variable: flow, range: 0 to 10 t/h, signal: 4-20 mA, channel: AI-1, element: orifice plate, "
    "characteristic: square root, supply: 230 V AC from the distribution board of the unit, wiring: %s}"
)


@pytest.mark.parametrize("language", [ENGLISH, GERMAN])
@pytest.mark.parametrize("stops", [0, 1, 2, 3, 5])
@pytest.mark.parametrize("terminals", [0, 1, 2, 4, 9])
def test_boxes_and_terminals_of_every_number(tmp_path: Path, language: Language, stops: int, terminals: int) -> None:
    """A ratio of three flows, a select, a split range with trip solenoids and interlocks on everything."""

    def wires(name: str) -> str:
        return wiring(stops, terminals=terminals, name=name)

    flows = "".join(
        f"  FI-{n}: {{measurement: {MEASURED_WITH_WIRES % (f'FT-{n}', wires(f'J{n}'))}}}\n" for n in (21, 22, 23)
    )
    loops = "".join(
        f"  FIC-{n}: {{service: A flow of a long name, measurement: {MEASURED_WITH_WIRES % (f'FT-{n}', wires('JB'))}, "
        f"controller: {{action: reverse, output: {{to: {to}, span: 0 to 10 t/h}}}}, "
        "alarms: {high: {limit: 9 t/h}, low: {limit: 1 t/h}}}\n"
        for n, to in ((1, "FY-1"), (2, "FY-1"), (3, "FY-3"))
    )
    valve = (
        f"{{kind: control valve, fails: closed, service: Steam, signal: 4-20 mA, channel: AO-1, supply: air, "
        f"output_block: reversed, wiring: {wires('JB')}, "
        f"trip_solenoid: {{tag: %s, channel: DO-1, supply: 24 V DC, wiring: {wires('JT')}}}}}"
    )
    acts = "FV-3A: closed, FV-3B: closed, FIC-3: {mode: manual, output: 0 %}"
    interlocks = "".join(
        f"  IS-{n}: {{initiators: {{FT-3: {{trips: above 5 t/h}}}}, actions: {{{acts}}}}}\n" for n in (1, 2, 3, 4, 5)
    )
    plant = plant_of(
        tmp_path,
        f"loops:\n{flows}{loops}functions:\n"
        "  FY-1: {kind: low select, to: FY-2, service: The lower of two flows that are asked for}\n"
        "  FY-2: {kind: ratio, inputs: [FI-21, FT-22, FI-23], span: 0.5 to 2, to: FIC-3, service: A ratio}\n"
        "  FY-3: {kind: split range, outputs: {FV-3A: 50 to 0 %, FV-3B: 50 to 100 %}}\n"
        f"final_elements: {{FV-3A: {valve % 'XY-3A'}, FV-3B: {valve % 'XY-3B'}}}\n"
        f"interlocks:\n{interlocks}",
    )
    for tag in ("FIC-1", "FIC-3", "FI-21"):
        assert not faults(drawn_loop(plant, tag, language).svg), tag


def texts_of(plant: Plant, tag: str) -> dict[str, tuple[float, float]]:
    """What is written on a drawing, each with its place."""
    root = ElementTree.fromstring(drawn_loop(plant, tag, ENGLISH).svg)
    return {
        element.text or "": (float(element.get("x", "")), float(element.get("y", "")))
        for element in root.iter(f"{SVG}text")
    }


def test_cables_and_terminals_stand_in_order_from_the_field_to_the_channel() -> None:
    """The wiring of TT-2014 as the register of the example has it."""
    written = texts_of(example("tarn-hollow"), "TIC-2014")
    way = ("4-20 mA", "C-TT-2014", "JB-2001", "M-2001", "MC-20", "AI-2-05")
    across = [written[words][0] for words in way]
    assert across == sorted(across)
    assert [written[words][0] for words in ("9", "10", "JB-2001")] == 3 * [across[2]]
    assert written["TB1-9"][0] == written["TB1-10"][0]
    assert "pair 5" in written


def test_a_trip_solenoid_is_drawn_with_its_wires_and_interlock() -> None:
    written = texts_of(example("tarn-hollow"), "FIC-2011")
    assert [words for words in ("XY-2011", "S", "SDO-1-01", "SC-20", "IS-2001: closed") if words not in written] == []


def test_the_terminals_are_told_to_those_who_cannot_see_the_drawing() -> None:
    root = ElementTree.fromstring(drawn_loop(example("tarn-hollow"), "FIC-1002", ENGLISH).svg)
    assert "FT-1002 (JB-1001: 3, 4; MC-10: TB1-3, TB1-4)" in (root[0].text or "")
    assert "FV-1002 (JB-1003: 1, 2; MC-10: TB3-1, TB3-2)" in (root[0].text or "")


def test_a_bus_is_a_data_link_and_a_current_an_electric_signal(tmp_path: Path) -> None:
    """ISA-5.1-1984, 6.2: dashes for an electric signal, small circles for a data link."""
    dashes = {}
    for signal in ("4-20 mA", "digital"):
        measured = f"{{transmitter: FT-1, variable: flow, signal: {signal}, wiring: [{{at: JB-1, terminals: [A1]}}]}}"
        plant = plant_of(tmp_path, f"loops: {{FI-1: {{measurement: {measured}}}}}\n")
        svg = drawn_loop(plant, "FI-1", ENGLISH).svg
        assert not faults(svg), signal
        dashes[signal] = 'stroke-dasharray="3.2 2"' in svg
    assert dashes == {"4-20 mA": True, "digital": False}


def test_boxes_of_one_name_stand_in_one_column(tmp_path: Path) -> None:
    """A drive wired straight to the cabinet that the transmitter reaches over a junction box."""
    measured = MEASURED_WITH_WIRES % ("FT-1", "[{at: JB-1, terminals: [A1]}, {at: MC-1, terminals: [A2]}]")
    plant = plant_of(
        tmp_path,
        f"loops:\n  FIC-1: {{measurement: {measured}, controller: {{output: {{to: SC-1}}}}}}\n"
        "final_elements: {SC-1: {kind: variable-speed drive, wiring: [{at: MC-1, terminals: [A3]}]}}\n",
    )
    written = texts_of(plant, "FIC-1")
    assert written["A1"][0] < written["A2"][0] == written["A3"][0]


def test_a_column_is_left_out_where_no_wiring_is_written() -> None:
    for tag in ("TIC-2014", "TI-1014"):
        assert "Junction box and marshalling" in texts_of(example("tarn-hollow"), tag)
    eastman = example("tennessee-eastman")
    for tag in eastman.register.loops:
        assert not {"Terminals", "Junction box and marshalling"} & set(texts_of(eastman, tag)), tag


def test_text_of_the_register_cannot_become_markup_and_long_text_is_kept_in(tmp_path: Path) -> None:
    tag = "FIC-" + "X<script>&\"'" * 4
    plant = plant_of(
        tmp_path,
        f"loops:\n  '{tag.replace(chr(39), chr(39) * 2)}': {{service: '{'<b>a & b</b> ' * 20}', "
        f"measurement: {{transmitter: '{'T' * 90}', range: 0 to 1 t/h, channel: '{'C' * 60}', signal: 4-20 mA}}, "
        f"controller: {{output: {{to: '{'V' * 70}'}}}}}}\n",
    )
    svg = drawn_loop(plant, tag, ENGLISH).svg
    assert not faults(svg)
    assert "<script" not in svg
    assert "<b>" not in svg


def test_text_width_is_that_of_the_font() -> None:
    """The advances that the font's own table gives for a tag."""
    font = face(True)
    names = [font.getBestCmap()[ord(letter)] for letter in "FIC-2011"]
    assert text_width("FIC-2011", 10.0, bold=True) == pytest.approx(
        sum(font["hmtx"].metrics[name][0] for name in names) / 100, rel=1e-12
    )


def test_a_line_is_made_smaller_and_then_cut() -> None:
    content, size = fitted("4 mA lowest speed, 20 mA full speed", 80.0)
    assert (content, size < 6.4, text_width(content, size) <= 80.0 + 1e-9) == (
        "4 mA lowest speed, 20 mA full speed",
        True,
        True,
    )
    content, size = fitted("W" * 100, 40.0)
    assert (size, content[-1], text_width(content, size) <= 40.0) == (SMALLEST, "…", True)


def test_a_text_is_broken_at_its_spaces() -> None:
    words = "one two three four five six seven eight nine ten"
    assert " ".join(wrapped(words, 60.0, 9)) == words
    cut = wrapped(words, 60.0, 2)
    assert len(cut) == 2
    assert cut[-1].endswith("…")
    assert max(text_width(line) for line in wrapped(words, 60.0, 9)) <= 60.0


@pytest.mark.parametrize(
    ("tag", "pattern", "lines"),
    [
        ("TIC-2014A", r"(?P<letters>[A-Z]+)-(?P<unit>\d\d)(?P<serial>\d\d)(?P<suffix>[A-Z]?)", ("TIC", "2014A")),
        ("20TIC14", r"(?P<unit>\d\d)(?P<letters>[A-Z]+)(?P<serial>\d\d)", ("20TIC14", "")),
        ("TIC-2014", None, ("TIC", "2014")),
        ("TIC2014", None, ("TIC2014", "")),
    ],
)
def test_a_bubble_holds_letters_above_the_number(tag: str, pattern: str | None, lines: tuple[str, str]) -> None:
    assert tag_lines(tag, re.compile(pattern) if pattern else None) == lines
