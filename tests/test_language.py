"""Documents in German: the catalogue is whole, its sentences are right, and no English is left but the register's."""

from __future__ import annotations

import ast
import html
import inspect
import json
import re
from pathlib import Path
from typing import Any

import pytest

from loopdoc.documents.basis import Basis, Page, basis_of
from loopdoc.documents.handover.enclosures import statement
from loopdoc.documents.handover.issue import KINDS
from loopdoc.documents.language import ENGLISH, GERMAN, LANGUAGES, Language
from loopdoc.documents.language.english import English
from loopdoc.documents.language.facts import Action, Asked, Moved, Reason, Rise, Way
from loopdoc.documents.language.german import German
from loopdoc.documents.language.german.labels import LABELS
from loopdoc.documents.language.german.reasons import translated
from loopdoc.documents.language.german.terms import TERMS
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.loop_sheet.loop_sheet import OVERFULL, loop_sheets
from loopdoc.documents.rendering import render
from loopdoc.engineering.direction import Undecided, path_sign
from loopdoc.register.load import Loaded, load
from loopdoc.register.model import FinalElement
from loopdoc.register.quantity import parse_gain, parse_quantity, parse_range

ROOT = Path(__file__).parents[1]
EXAMPLES = ROOT / "examples"
SCHEMA = json.loads((ROOT / "schemas/register.schema.json").read_text())
DOCUMENTS = ROOT / "loopdoc/documents"
MODULES = [path for path in sorted(DOCUMENTS.rglob("*.py")) if "language" not in path.relative_to(DOCUMENTS).parts]
"""What asks for labels; the languages themselves define them."""
TEMPLATES = ("base.html", "narrative.html", "loop-sheet.html", "prose.html")
TRANSLATED = ("narrative", "loop-sheet")


def members(catalogue: type) -> dict[str, Any]:
    """Public functions of a catalogue and of the classes that it is made of."""
    return {name: found for name, found in inspect.getmembers(catalogue, inspect.isfunction) if name[0] != "_"}


# ---------------------------------------------------------------- the catalogue is whole


def test_german_has_every_member_with_the_same_parameters() -> None:
    english, german = members(English), members(German)
    assert english.keys() == german.keys()
    for name, found in german.items():
        assert ".german." in found.__module__ or name in SHARED, name
        assert inspect.signature(found) == inspect.signature(english[name]), name


SHARED = {"value", "band", "sensor", "with_sensor", "in_brackets", "range_of", "text", "entry", "calculated", "message"}
"""Members that join what other members say, alike in every language."""


def labels_used() -> set[str]:
    """Labels that modules and templates ask for, and the heads of the tables."""
    found = set()
    for path in MODULES:
        for node in ast.walk(ast.parse(path.read_text())):
            if isinstance(node, ast.Call) and getattr(node.func, "attr", getattr(node.func, "id", "")) == "label":
                found |= {leaf.value for leaf in ast.walk(node.args[0]) if isinstance(leaf, ast.Constant)}
    for name in TEMPLATES:
        found |= set(re.findall(r'label\("([^"]+)"\)', (ROOT / "templates" / name).read_text()))
    return {name for name in found if isinstance(name, str)}


def test_every_label_has_a_german_name_and_none_is_left_over(german: dict[str, tuple[Page, ...]]) -> None:
    assert labels_used() <= LABELS.keys() | {".", "{}."}
    source = "\n".join(path.read_text() for path in [*MODULES, *(ROOT / "templates").glob("*.html")])
    assert not [name for name in LABELS if f'"{name.rstrip(".")}' not in source]


# Where the schema lists the words that a value takes, by what the catalogue says them of.
LISTS = {
    "mode": {"manual", "automatic", "cascade", "initialisation", "remote output", "out of service"},
    "signal": {"4-20 mA", "0-20 mA", "1-5 V", "pulse", "digital", "contact"},
    "position": {"closed", "open", "last", "stopped", "started"},
    "on fault": {"reads high", "reads low", "holds", "unknown"},
    "action": {"direct", "reverse"},
    "form": {"standard", "parallel", "series"},
    "weight": {"measurement", "error"},
    "not followed": {"track", "hold", "nothing"},
    "effect": {"rises", "falls"},
    "priority": {"low", "medium", "high", "critical"},
    "hazard": {"high", "low", "both", "none"},
    "opens on": {"rising signal", "falling signal"},
    "output block": {"direct", "reversed"},
    "layer": {"process", "safety"},
    "status": {"issued for review", "issued for construction", "issued for use", "as built"},
}


def enumerated(part: Any) -> list[frozenset[str]]:
    """Every closed list of words in a schema."""
    if isinstance(part, dict):
        own = [frozenset(part["enum"])] if all(isinstance(word, str) for word in part.get("enum", [0])) else []
        return own + [one for value in part.values() for one in enumerated(value)]
    return [one for value in part for one in enumerated(value)] if isinstance(part, list) else []


def test_every_word_of_the_registers_lists_has_a_german_one() -> None:
    lists = enumerated(SCHEMA)
    for kind, words in LISTS.items():
        assert words == TERMS[kind].keys()
    said = {word for words in TERMS.values() for word in words}
    beside = {"en", "de", "measurement", "process input"}  # languages; where a disturbance acts
    assert {word for words in lists for word in words} <= said | beside


# ---------------------------------------------------------------- values


@pytest.mark.parametrize(
    ("written", "german"),
    [
        (parse_quantity("84.5 degC"), "84,5\u00a0°C"),
        (parse_quantity("-0.25 barg"), "−0,25\u00a0bar(g)"),
        (parse_quantity("12 months"), "12\u00a0Monate"),
        (parse_quantity("1480 rpm"), "1480\u00a01/min"),
        (parse_quantity("22850 kg/h"), "22\u202f850\u00a0kg/h"),
        (parse_range("0 to 2.5 barg"), "0\u00a0bis\u00a02,5\u00a0bar(g)"),
        (1234567.0, "1\u202f234\u202f567"),
        (12345.5, "12\u202f345,5"),
        (0.05, "0,05"),
        (None, "–"),
    ],
)
def test_values_follow_the_german_conventions(written: object, german: str) -> None:
    # DIN 5008 (from memory): comma, groups of three from five digits on; DIN 1301: a space before the unit.
    assert GERMAN.value(written) == german


def test_gains_dates_and_limits() -> None:
    assert GERMAN.shown(parse_gain("5.5 degC per t/h")) == "5,5\u00a0°C je t/h"
    assert GERMAN.date("2026-11-20") == "20.11.2026"
    assert GERMAN.date("in the spring") == "in the spring"
    assert GERMAN.as_written("above 1.2 barg") == "über\u00a01,2\u00a0bar(g)"
    assert GERMAN.as_written("hold") == "hold"
    assert GERMAN.band(parse_quantity("1 t/h"), None) == "ab 1\u00a0t/h"
    assert GERMAN.duration(90.0) == "90\u00a0s"
    assert GERMAN.rough_duration(366.0) == "6,1\u00a0min"
    assert ENGLISH.date("2026-11-20") == "2026-11-20"


# ---------------------------------------------------------------- sentences


def element(tag: str, kind: str = "control valve", **more: Any) -> FinalElement:
    fields: dict[str, Any] = dict.fromkeys(FinalElement.__dataclass_fields__)
    return FinalElement(**(fields | {"tag": tag, "kind": kind} | more))


FLOW, TEMPERATURE, WEIGHT = Noun("Durchfluss", "m"), Noun("Temperatur", "f"), Noun("Gewicht", "n")
VALVE, DRIVE = element("FV-1"), element("SC-2", "variable-speed drive")


def test_a_rising_measurement_in_german() -> None:
    steps = (Asked("TIC-1", "FIC-1", FLOW, False), Moved("FIC-1", ((VALVE, -1),)))
    told = GERMAN.rising([Rise("TIC-1", TEMPERATURE, steps, False)], [], [])
    assert told == "Steigt die Temperatur, senkt TIC-1 den Sollwert von FIC-1, und FIC-1 schließt das Stellglied FV-1."


def test_an_alarm_says_of_which_other_hazards_it_warns() -> None:
    assert ENGLISH.alarm_consequence("The pump runs dry", []) == "The pump runs dry"
    assert ENGLISH.alarm_consequence("The pump runs dry", [("FIC-1", Noun("flow"), "low")]) == (
        "The pump runs dry. The alarm also warns of a low flow at FIC-1."
    )
    hazards = [("FIC-1", FLOW, "low"), ("TIC-1", TEMPERATURE, "high")]
    assert GERMAN.alarm_consequence("Die Pumpe läuft trocken", hazards) == (
        "Die Pumpe läuft trocken. Der Alarm zeigt auch an: ein zu niedriger Durchfluss (FIC-1) und eine zu hohe "
        "Temperatur (TIC-1)."
    )


def test_a_loop_that_does_not_track_may_wind_up() -> None:
    assert ENGLISH.does_not_track(["TIC-1"], "FIC-1", "nothing") == (
        "While FIC-1 is out of cascade or at a limit, TIC-1 goes on calculating and may wind up"
    )
    assert GERMAN.does_not_track(["TIC-1", "TIC-2"], "", "nothing") == (
        "Solange der Folgeregler nicht in Kaskade oder an einer Grenze ist, rechnen TIC-1 und TIC-2 weiter und können "
        "auflaufen (Wind-up)"
    )


def test_units_of_a_gain_in_german() -> None:
    assert GERMAN.value(parse_gain("-0.08 wt% per degC")).replace("\u00a0", " ") == "−0,08 Gew.-% je °C"
    assert GERMAN.value(parse_gain("-2.0 %/min per %")).replace("\u00a0", " ") == "−2,0 %/min je %"


def test_why_in_german() -> None:
    reason = Reason(TEMPERATURE, False, element=DRIVE)
    rise = Rise("TIC-1", TEMPERATURE, (Moved("TIC-1", ((DRIVE, 1),)),), False)
    assert GERMAN.rising([rise], [Action(("TIC-1",), False, "direct", (reason,))], []) == (
        "Steigt die Temperatur, erhöht TIC-1 die Drehzahl von SC-2. TIC-1 wirkt direkt, weil die Temperatur bei "
        "steigender Drehzahl von SC-2 fällt."
    )
    both = Action(("TIC-1", "FIC-1"), True, "reverse", (
        Reason(TEMPERATURE, True, beside=FLOW), Reason(FLOW, True, element=VALVE, opened=True),
    ))  # fmt: skip
    assert GERMAN.rising([], [both], []) == (
        "Beide Regler wirken invers, weil die Temperatur mit dem Durchfluss steigt und der Durchfluss beim Öffnen von "
        "FV-1 steigt."
    )


@pytest.mark.parametrize(
    ("language", "told"),
    [
        (ENGLISH, "the flow and the weight fall and the temperature rises, all towards the hazard"),
        (GERMAN, "der Durchfluss und das Gewicht fallen und die Temperatur steigt, alle in Richtung der Gefahr"),
    ],
)
def test_articles_and_number_agree(language: Language, told: str) -> None:
    names = (FLOW, WEIGHT, TEMPERATURE) if language is GERMAN else (Noun("flow"), Noun("weight"), Noun("temperature"))
    ways = [Way(names[0], False), Way(names[1], False), Way(names[2], True)]
    assert language.towards_the_hazard(ways) == told


@pytest.mark.parametrize(
    ("language", "told"),
    [
        (ENGLISH, "stops PM-1, closes FV-1 and FV-2 and puts FIC-1 in manual at 0 % output"),
        (GERMAN, "schaltet PM-1 aus, schließt FV-1 und FV-2 und schaltet FIC-1 in Handbetrieb mit Ausgang 0 %"),
    ],
)
def test_what_an_interlock_does(language: Language, told: str) -> None:
    positions = [("stopped", ["PM-1"]), ("closed", ["FV-1", "FV-2"])]
    assert language.acts(positions, [("manual", "0 %", ["FIC-1"])]) == told


def test_hazards_take_their_article() -> None:
    assert GERMAN.hazards([(FLOW, "low")]) == "Gefährlich ist ein zu niedriger Durchfluss."
    assert GERMAN.hazards([(TEMPERATURE, "high"), (WEIGHT, "both")]) == (
        "Gefährlich sind eine zu hohe Temperatur und ein zu hohes oder zu niedriges Gewicht."
    )


@pytest.mark.parametrize(
    ("when", "told"),
    [
        (GERMAN.upset_if("FV-1 shuts", moved=True), "Schließt FV-1, bleiben dem Bediener 3 min"),
        (GERMAN.upset_if("SC-2 stops", moved=True), "Läuft SC-2 aus, bleiben dem Bediener 3 min"),
        (GERMAN.upset_if("feed lost", moved=False), "Bei der Störung „feed lost“ bleiben dem Bediener 3 min"),
    ],
)
def test_the_time_to_act_in_german(when: str, told: str) -> None:
    left = GERMAN.operator_has(when, "3 min", ("LI-1", "low"), "IS-1", "2 min", least=False, short=False)
    assert left == f"{told} vom Tiefalarm von LI-1 bis zur Auslösung von IS-1; für den Eingriff sind 2 min angesetzt"


@pytest.mark.parametrize(("number", "noun", "told"), [
    (1, "control scheme", "eine Regelung"), (2, "control scheme", "zwei Regelungen"), (13, "indicator", "13 Anzeigen"),
])  # fmt: skip
def test_things_are_counted(number: int, noun: str, told: str) -> None:
    assert GERMAN.counted(number, noun) == told


def test_reasons_of_the_calculation_are_german_or_quoted() -> None:
    assert translated("the process gain of AIC-2023 is on hold") == (
        "die Prozessverstärkung von AIC-2023 ist noch offen (HOLD)"
    )
    assert translated("the moon is full") == "„the moon is full“ (Meldung der Berechnung)"


# ---------------------------------------------------------------- whole documents


@pytest.fixture(scope="module")
def bases() -> dict[str, Basis]:
    found = {}
    for name in ("tarn-hollow", "tennessee-eastman"):
        loaded = load(EXAMPLES / name)
        assert isinstance(loaded, Loaded)
        found[name] = basis_of(loaded)
    return found


@pytest.fixture(scope="module")
def german(bases: dict[str, Basis]) -> dict[str, tuple[Page, ...]]:
    # Without the figures, which take most of the time; tests of the response plots hold those.
    from loopdoc.documents.narrative.narrative import narratives

    found = {}
    for name, basis in bases.items():
        in_german = basis.in_language(GERMAN)
        found[name] = (*narratives(in_german), *loop_sheets(in_german))
    return found


def words_of(page: Page) -> str:
    """What a page says, a line for each paragraph and cell; drawings included."""
    text = render(page.template, document=page.document, stylesheet="", **page.view)
    text = re.sub(r"<(style|head)\b.*?</\1>", "", text, flags=re.DOTALL)
    text = re.sub(r"</(p|td|th|li|h\d|text|title|figcaption)>|<br>", "\n", text)
    return html.unescape(re.sub(r"<[^>]+>", "", text)).replace("\u00ad", "")


def test_the_language_is_told_and_the_number_kept(german: dict[str, tuple[Page, ...]], bases: dict[str, Basis]) -> None:
    pages = german["tarn-hollow"]
    assert {page.document.language for page in pages} == {"de"}
    html_text = render(pages[0].template, document=pages[0].document, stylesheet="", **pages[0].view)
    assert '<html lang="de">' in html_text
    assert "Regelungsbeschreibung, de<" in html_text
    numbers = [page.document.number for page in pages]
    assert numbers[-1] == list(loop_sheets(bases["tarn-hollow"]))[-1].document.number
    assert {page.document.kind for page in pages} == {"Regelungsbeschreibung", "Regelkreisblatt"}


def test_a_file_states_its_language_and_its_date_as_any_other(german: dict[str, tuple[Page, ...]]) -> None:
    stated = statement("loop-sheet", german["tarn-hollow"][-1], {"register.yaml": b""}, None)
    assert (stated.language, stated.date) == ("de", "2026-11-20")


def test_no_clumsy_joint_shows(german: dict[str, tuple[Page, ...]]) -> None:
    for pages in german.values():
        for page in pages:
            text = words_of(page)
            for clumsy in (r"\b(von|vom|zu|in|an) (dem|der) (von|an)\b", r"\bvon dem\b", r"\bzu dem\b", r" ,", r"\.\.",
                           r"\b(der|die|das|und|oder|von) (der|die|das|und|oder|von) [a-z]", r"„“", r"[^.]  [^ ]"):
                found = re.search(clumsy, re.sub(r"[ \n]*\n[ \n]*", "\n", text).replace("\n", " ¦ "))
                assert not found, (page.name, found.group(), text[max(0, found.start() - 60) : found.end() + 40])


def test_sentences_begin_and_end_as_sentences_do(german: dict[str, tuple[Page, ...]]) -> None:
    for pages in german.values():
        for page in pages:
            for section in page.view.get("sections", ()):
                for part in (section, *section.sections):
                    for block in part.blocks:
                        if block.kind == "paragraph":
                            text = "".join(f"{run.before}{run.text}{run.after}" for run in block.prose)
                            assert text[0].isupper() or text[0] in "„0123456789", text
                            assert text.endswith((".", "“.", "!", "?")), text


def english_words() -> set[str]:
    """Words that only the English catalogue uses: of its headings, and of its closed lists."""
    said = {name for name in LABELS if LABELS[name] != name} | {w for words in TERMS.values() for w in words}
    words = {word.casefold() for text in said for word in re.findall(r"[A-Za-z]{4,}", text)}
    own = {word.casefold() for text in (*LABELS.values(), *(w for words in TERMS.values() for w in words.values()))
           for word in re.findall(r"[A-Za-zÄÖÜäöüß]{4,}", text.replace("\u00ad", ""))}  # fmt: skip
    return words - own - {"register"}  # the same in both


def register_words(basis: Basis) -> set[str]:
    """Words of the register's own texts and of the check's messages, which stay in their language."""
    texts = [source.decode() for source in basis.sources.values()]
    texts += [finding.message + finding.remedy + finding.rule for finding in
              (*basis.result.findings, *basis.result.accepted)]  # fmt: skip
    return {word.casefold() for text in texts for word in re.findall(r"[A-Za-z]{4,}", text)}


def test_no_english_is_left_but_the_registers(
    german: dict[str, tuple[Page, ...]], bases: dict[str, Basis]
) -> None:
    for name, pages in german.items():
        allowed = register_words(bases[name])
        for page in pages:
            words = {word.casefold() for word in re.findall(r"[A-Za-zÄÖÜäöüß]{4,}", words_of(page))}
            left = (words & english_words()) - allowed
            assert not left, (page.name, sorted(left))


def test_numbers_of_our_own_have_a_comma(german: dict[str, tuple[Page, ...]]) -> None:
    for page in german["tarn-hollow"]:
        if page.template != "loop-sheet.html":
            continue
        sheet = page.view["sheet"]
        cells = [value for panel in (sheet.measurement, *sheet.controller) for row in panel.rows for label, value in row
                 if label.replace("\u00ad", "") not in ("Quelle", "Sensor", "Messelement")]  # fmt: skip
        cells += [value for row in sheet.expected.rows for value in row] if sheet.expected else []
        assert not [cell for cell in cells if re.search(r"\d\.\d", cell)]


def test_every_german_sheet_fits_its_page(german: dict[str, tuple[Page, ...]]) -> None:
    for pages in german.values():
        for page in pages:
            if page.template == "loop-sheet.html":
                assert OVERFULL not in page.view["sheet"].density, page.name


def test_every_link_of_a_sign_path_has_german_words(bases: dict[str, Basis]) -> None:
    for basis in bases.values():
        for loop in basis.plant.controlled.values():
            for route in loop.routes:
                sign = path_sign(loop, route)
                if not isinstance(sign, Undecided):
                    assert not [step for step in sign.steps if "„" in GERMAN.sign_step(step.what)]


def test_kinds_without_a_catalogue_stay_english(bases: dict[str, Basis]) -> None:
    basis = bases["tarn-hollow"].in_language(GERMAN)
    others = [kind for kind in KINDS if kind not in (*TRANSLATED, "response", "check-record")]
    for kind in others:
        assert {page.document.language for page in KINDS[kind](basis)} <= {"en"}, kind


def test_a_german_register_is_issued_in_german(tmp_path: Path) -> None:
    (tmp_path / "register.yaml").write_text(
        "format: 1\nsite: {name: Werk Süd, language: de}\n"
        "revision: {code: A, date: 2026-11-20, status: issued for review}\n"
        'units: {"20": {name: Rektifikation}}\n'
        'texts: {"20": {overview: "Der Druck steht bei {PI-2001/operating/normal}."}}\n'
        'loops: {PI-2001: {unit: "20", service: Kopfdruck, measurement: {transmitter: PT-2001, variable: pressure, '
        "range: 0 to 2.5 barg}, operating: {normal: 0.15 barg}}}\n"
    )
    loaded = load(tmp_path)
    assert isinstance(loaded, Loaded)
    basis = basis_of(loaded)
    assert basis.language is LANGUAGES["de"]
    narrative = next(iter(KINDS["narrative"](basis)))
    assert "Der Druck steht bei 0,15\u00a0bar(g)." in words_of(narrative)
    assert narrative.document.revision.date == "20.11.2026"
