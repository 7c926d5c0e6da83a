"""English as it is written, and prose that keeps its tags and values whole."""

from __future__ import annotations

from pathlib import Path

import pytest

from loopdoc.documents.wording import (
    Run,
    Setter,
    Target,
    as_written,
    band,
    clause,
    counted,
    grouped,
    listed,
    lower_first,
    number_word,
    plain,
    plural,
    sentence,
    sentences,
    told_of,
    value,
    with_article,
    with_printed_units,
)
from loopdoc.register.load import Loaded, load
from loopdoc.register.model import Hold, Register
from loopdoc.register.pointer import Unresolved, pointed
from loopdoc.register.quantity import parse_quantity, parse_range


@pytest.mark.parametrize(
    ("items", "expected"),
    [
        ([], ""),
        (["FV-1"], "FV-1"),
        (["FV-1", "FV-2"], "FV-1 and FV-2"),
        (["FV-1", "FV-2", "FV-3"], "FV-1, FV-2 and FV-3"),
    ],
)
def test_lists_end_with_and(items: list[str], expected: str) -> None:
    assert listed(items) == expected
    assert listed(items, "or") == expected.replace(" and ", " or ")


# Articles follow the sound, not the letter: any English grammar.
@pytest.mark.parametrize(
    ("phrase", "article"),
    [
        ("control valve", "a"), ("equal percentage control valve", "an"), ("on-off valve", "an"),
        ("hour", "an"), ("heater bank", "a"), ("unit", "a"), ("uninterrupted supply", "an"), ("one", "a"),
        ("F content", "an"), ("B content", "a"), ("U tube", "a"), ("LIC", "an"), ("TIC", "a"), ("MW", "an"),
        ("HOLD", "a"), ("8 min delay", "an"), ("80 % limit", "an"), ("11 t/h flow", "an"), ("1 s filter", "a"),
        ("180 s wait", "a"),
    ],
)  # fmt: skip
def test_articles_follow_the_sound(phrase: str, article: str) -> None:
    assert with_article(phrase) == f"{article} {phrase}"


@pytest.mark.parametrize(
    ("noun", "many"),
    [("loop", "loops"), ("control scheme", "control schemes"), ("switch", "switches"), ("bus", "buses"),
     ("assembly", "assemblies"), ("relay", "relays")],
)  # fmt: skip
def test_plurals(noun: str, many: str) -> None:
    assert plural(noun) == many
    assert (counted(0, noun), counted(1, noun), counted(3, noun)) == (f"no {noun}", f"one {noun}", f"three {many}")


def test_numbers_to_twelve_are_words() -> None:
    assert [number_word(number) for number in (0, 1, 12, 13, 40)] == ["no", "one", "twelve", "13", "40"]


@pytest.mark.parametrize(
    ("written", "inside"),
    [
        ("Reboiler steam flow", "reboiler steam flow"),
        ("A in the reactor feed", "A in the reactor feed"),
        ("Pt100 class A", "Pt100 class A"),
        ("TIC-2014 is out of cascade", "TIC-2014 is out of cascade"),
        ("D feed", "D feed"),
        ("pH of the water", "pH of the water"),
        ("", ""),
    ],
)
def test_only_ordinary_words_lose_their_capital(written: str, inside: str) -> None:
    assert lower_first(written) == inside


def test_a_sentence_becomes_a_clause() -> None:
    assert clause("The feed pump runs dry.") == "the feed pump runs dry"
    assert clause("A tube leaks") == "a tube leaks"
    assert clause("A is lost to the flare.") == "A is lost to the flare"
    assert clause("IS-2001 trips") == "IS-2001 trips"


@pytest.mark.parametrize(
    ("written", "told"),
    [
        ("the level is left to itself", "The level is left to itself."),
        ("Already one.", "Already one."),
        ("  two   spaces \n and a line ", "Two spaces and a line."),
        ("a trailing comma,", "A trailing comma."),
        ("done!", "Done!"),
        ("", ""),
    ],
)
def test_sentences_have_one_capital_and_one_stop(written: str, told: str) -> None:
    assert sentence(written) == told


def test_empty_sentences_are_left_out() -> None:
    assert sentences("one", "", "two") == "One. Two."


@pytest.mark.parametrize(
    ("purpose", "told"),
    [
        ("Keeps the drum full.", "LIC-1 keeps the drum full."),
        ("Holds A in the feed. Sampled every 0.1 h.", "LIC-1 holds A in the feed. Sampled every 0.1 h."),
        ("Written but never called.", "LIC-1: written but never called."),
        ("Gas to flare", "LIC-1: gas to flare."),
        ("This one is spare", "LIC-1: this one is spare."),
    ],
)
def test_a_purpose_is_told_of_its_loop(purpose: str, told: str) -> None:
    assert told_of("LIC-1", purpose) == told


def test_values_are_printed_without_a_place_to_break() -> None:
    assert value(parse_quantity("84.5 degC")) == "84.5\u00a0°C"
    assert value(parse_range("60 to 120 degC")) == "60\u00a0to\u00a0120\u00a0°C"
    assert value(Hold("awaiting vendor data")) == "HOLD"


def test_limits_read_as_a_band() -> None:
    low, high = parse_quantity("2 t/h"), parse_quantity("10.5 t/h")
    assert band(low, high) == "2\u00a0to\u00a010.5\u00a0t/h"
    assert band(None, high) == "up to 10.5\u00a0t/h"
    assert band(low, Hold("unknown")) == "from 2\u00a0t/h"
    assert band(low, parse_quantity("9000 kg/h")) == "2\u00a0t/h to 9000\u00a0kg/h"
    assert band(None, None) == ""


@pytest.mark.parametrize(
    ("written", "printed"),
    [
        ("98 degC", "98\u00a0°C"),
        ("above 1.2 barg", "above\u00a01.2\u00a0bar(g)"),
        ("60 to 120 degC", "60\u00a0to\u00a0120\u00a0°C"),
        ("5.5 degC per t/h", "5.5\u00a0°C\u00a0per\u00a0t/h"),
        ("reads high", "reads high"),
        (1.18, "1.18"),
    ],
)
def test_what_the_register_writes_is_printed(written: str | float, printed: str) -> None:
    assert as_written(written) == printed


@pytest.mark.parametrize(
    ("written", "printed"),
    [
        ("warm it by 2 degC a minute", "warm it by 2\u00a0°C a minute"),
        ("below -5 degC.", "below −5\u00a0°C."),
        ("at 0.5 barg, then 8 t/h", "at 0.5\u00a0bar(g), then 8\u00a0t/h"),
        ("4 to 6 t/h", "4 to 6\u00a0t/h"),
        ("FIC-2011 t/h", "FIC-2011 t/h"),
        ("tray 4 temperature", "tray 4 temperature"),
        ("in 2 steps", "in 2 steps"),
    ],
)
def test_units_in_prose_are_printed_as_in_tables(written: str, printed: str) -> None:
    assert with_printed_units(written) == printed


def test_grouping_keeps_the_order_and_says_nothing_twice() -> None:
    assert grouped([("b", "1"), ("a", "2"), ("b", "3"), ("b", "1")]) == {"b": ("1", "3"), "a": ("2",)}


# ---------------------------------------------------------------- prose


@pytest.fixture(scope="module")
def register() -> Register:
    loaded = load(Path(__file__).parent.parent / "examples" / "tarn-hollow")
    assert isinstance(loaded, Loaded)
    return loaded.register


@pytest.fixture(scope="module")
def setter(register: Register) -> Setter:
    def target(tag: str) -> Target:
        return Target(sheet=f"{tag}.html")

    return Setter(register, {"FIC-2001", "TIC-2014"}, target)


def test_tags_are_found_with_what_stands_against_them(setter: Setter) -> None:
    assert setter.prose("Look at (FIC-2001), then TIC-2014's trend.") == (
        Run("Look at "),
        Run("FIC-2001", "tag", "FIC-2001.html", before="(", after="),"),
        Run(" then "),
        Run("TIC-2014", "tag", "TIC-2014.html", after="'s"),
        Run(" trend."),
    )


def test_a_tag_inside_a_longer_word_is_none(setter: Setter) -> None:
    assert [run.kind for run in setter.prose("XFIC-2001 and FIC-2001A")] == ["text"]


def test_values_are_kept_whole(setter: Setter) -> None:
    runs = setter.prose("It falls to 2 t/h (0.5 barg).")
    assert [(run.text, run.before, run.after) for run in runs if run.kind == "value"] == [
        ("2\u00a0t/h", "", ""),
        ("0.5\u00a0bar(g)", "(", ")."),
    ]


def test_setting_loses_no_character(setter: Setter) -> None:
    for text in ("«Ü» ((a)) [b] `c` -1.5 .. ,, FIC-2001/TIC-2014 {x} }{ 5 t/h.", "", " ", "a\u00a0b", "…FIC-2001…"):
        expected = with_printed_units(text).replace("`", "")
        assert plain(setter.prose(text)) == expected


def test_pointers_show_the_value_of_the_register(setter: Setter) -> None:
    text = "It alarms at {TIC-2014/alarms/low/limit} and trips {IS-2001/initiators/PT-2023A/trips}."
    assert plain(setter.prose(text)) == "It alarms at 93\u00a0°C and trips above\u00a01.2\u00a0bar(g)."


def test_a_pointer_to_a_text_reads_as_text(setter: Setter) -> None:
    runs = setter.prose("{FIC-2001/service}")
    assert [(run.text, run.kind) for run in runs] == [("Vapour feed to rectifier", "text")]


@pytest.mark.parametrize(
    "pointer",
    ["TIC-2014/alarms/low/limt", "TIC-9999/range", "TIC-2014", "TIC-2014/alarms", "", "/", "TIC-2014/a~2b",
     "TIC-2014/controller/setpoint/normal/x", "AIC-2015/measurement/0"],
)  # fmt: skip
def test_a_pointer_that_leads_nowhere_is_shown_and_stops_nothing(
    setter: Setter, register: Register, pointer: str
) -> None:
    assert isinstance(pointed(register, pointer), Unresolved)
    run = next(run for run in setter.prose(f"Stop at {{{pointer}}} at once.") if run.kind == "unresolved")
    assert run.text == f"{{{pointer}}}"


def test_braces_quoted_as_code_are_no_pointer(setter: Setter) -> None:
    """As the remedies of findings quote what to write."""
    told = setter.prose("Write `warns_of: {TIC-2014: high}` at the alarm, as at {TIC-2014/measurement/range}.")
    assert [run.text for run in told if run.kind == "code"] == ["warns_of: {TIC-2014: high}"]
    assert not [run for run in told if run.kind == "unresolved"]


# RFC 6901, section 5, on a register instead of the RFC's own document: escapes, list entries, whole parts.
def test_pointers_follow_the_standard(tmp_path: Path) -> None:
    (tmp_path / "register.yaml").write_text(
        "format: 1\nloops:\n  A-1:\n    unit: '1'\n    a/b: one\n    m~n: two\n    list: [x, 7]\n"
        "    range: {hold: awaiting vendor data}\n    measurement: {transmitter: T-1, range: 0 to 5 barg}\n",
        encoding="utf-8",
    )
    loaded = load(tmp_path)
    assert isinstance(loaded, Loaded)
    register = loaded.register
    assert pointed(register, "A-1/a~1b") == "one"
    assert pointed(register, "A-1/m~0n") == "two"
    assert pointed(register, "A-1/list/1") == 7
    assert isinstance(pointed(register, "A-1/list/01"), Unresolved)  # section 4: no leading zeros
    assert isinstance(pointed(register, "A-1/list/-"), Unresolved)
    assert pointed(register, "A-1/range") == Hold("awaiting vendor data")
    assert pointed(register, "A-1/range/low") == Hold("awaiting vendor data")
    assert pointed(register, "T-1/range") == "0 to 5 barg"  # a transmitter is its loop's measurement
