"""No text of a register can command what shows it: terminal, build log, XML, Markdown."""

from __future__ import annotations

import json
import re
import unicodedata
from xml.etree import ElementTree

import pytest
from hypothesis import given
from hypothesis import strategies as st
from markdown_it import MarkdownIt
from markdown_it.token import Token

from loopdoc.exchange.escaping import as_code, for_json, for_line, for_markdown, for_terminal, for_xml
from loopdoc.register.quantity import display_number

# Cc control, Cf format (with the bidirectional marks), Cs surrogates, Co private use, Cn not a character, Zl and Zp.
OBEYED = {"Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp"}
ANY_TEXT = st.text(st.characters(exclude_categories=[]), max_size=40)
HOSTILE = [
    "\x1b[2J\x1b]0;title\x07",
    "\u202egnissim si pirt\u202c",
    "\u200b\u2066\ufeff\u00ad",
    "\x9b31m",
    "one\rtwo\x00",
    "\udc80",
    "\U000e0041",
    "| a | b |",
    "`code` and ``more`` and `",
    "<script>alert(1)</script><!-- & &amp; &#8203;",
    "@operations please, @org/team",
    "[a](https://example.com) ![b](x) https://example.com www.example.com ftp://x.y a@example.com",
    "<https://example.com>",
    "#12 and !34, GH-5, $6, %7, &8, ~9 :tada: *bold* __also__ ~~gone~~ $x^2$",
    "\\| \\` ]]> <![CDATA[",
]


@pytest.mark.parametrize("text", HOSTILE)
def test_a_terminal_is_shown_only_what_can_be_seen(text: str) -> None:
    shown = for_terminal(text)
    assert {unicodedata.category(character) for character in shown} & OBEYED == set()


@given(ANY_TEXT)
def test_a_line_is_one_line_of_visible_text(text: str) -> None:
    shown = for_line(text)
    assert {unicodedata.category(character) for character in shown} & OBEYED == set()
    assert len(shown.splitlines()) <= 1
    assert for_line(shown) == shown


def test_a_power_of_ten_is_shown_as_it_is_printed() -> None:
    assert for_terminal(f"IAE {display_number(1.2e13, 3)} %") == "IAE 1.2 × 10¹³ %"
    assert for_terminal("5\u00a0t/h") == "5\\u00a0t/h"


def test_plain_text_in_any_script_stays_as_it_is() -> None:
    text = "Kühlwasser ≥ 5 °C, µ = 0.3; 反応器の温度\nДавление"
    assert for_terminal(text) == text


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("::error file=x::text", r"\u003a:error file=x::text"),
        ("first\n  ::add-mask::x", "first\n" + r"  \u003a:add-mask::x"),
        ("##vso[task.setvariable variable=x]y", r"\u0023#vso[task.setvariable variable=x]y"),
        ("after words ##[error]y", r"after words \u0023#[error]y"),
        ("##teamcity[buildStop]", r"\u0023#teamcity[buildStop]"),
    ],
)
def test_a_build_log_is_given_no_command(text: str, shown: str) -> None:
    assert for_terminal(text) == shown


@given(st.recursive(ANY_TEXT, lambda inner: st.lists(inner) | st.dictionaries(ANY_TEXT, inner), max_leaves=5))
def test_json_says_the_same_in_visible_characters(document: object) -> None:
    text = for_json(document)
    assert json.loads(text) == document
    assert {unicodedata.category(character) for character in text.replace("\n", "")} & OBEYED == set()
    assert "##vso[" not in for_json("##vso[task.x]")


@given(ANY_TEXT)
def test_xml_is_well_formed_and_says_the_same(text: str) -> None:
    element = ElementTree.fromstring(f'<a b="{for_xml(text)}">{for_xml(text)}</a>')
    assert element.attrib["b"] == (element.text or "") == for_terminal(text)


def cells(text: str) -> list[Token]:
    """The parts of a table's second cell, as a parser of GitHub's Markdown sees them."""
    parser = MarkdownIt("gfm-like")
    tokens = parser.parse(f"| Place | Finding |\n| --- | --- |\n| x | {text} |\n")
    inline = [token for token in tokens if token.type == "inline"]
    assert len(inline) == 4, "the row keeps its two cells"
    assert tokens[0].type == "table_open"
    assert tokens[-1].type == "table_close"
    return inline[-1].children or []


def seen(parts: list[Token]) -> str:
    return "".join(part.content for part in parts)


def squeezed(text: str) -> str:
    return " ".join(text.replace("`", "").split())


@pytest.mark.parametrize("text", HOSTILE)
def test_markdown_shows_the_text_and_makes_nothing_of_it(text: str) -> None:
    parts = cells(for_markdown(text))
    assert {part.type for part in parts} <= {"text", "text_special", "code_inline"}
    assert squeezed(seen(parts).replace("\u200b", "")) == squeezed(for_line(text).replace("\u200b", ""))
    plain = "".join(part.content for part in parts if part.type != "code_inline")
    assert not re.search(r"[@#!]\w|://|www\.\w|GH-\d", plain)


@given(ANY_TEXT)
def test_markdown_never_breaks_out_of_its_cell(text: str) -> None:
    parts = cells(for_markdown(text))
    assert {part.type for part in parts} <= {"text", "text_special", "code_inline"}
    code = cells(as_code(text))
    assert {part.type for part in code} == {"code_inline"}
