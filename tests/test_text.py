"""The reading of one file: YAML 1.2 core, every refusal with its place, and no input that raises."""

import json
import re

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from loopdoc.register.place import Fault, Place
from loopdoc.register.text import (
    MAX_DEPTH,
    MAX_FILE_BYTES,
    MAX_SCALAR_CHARACTERS,
    TextFile,
    read_text,
)

CONTROL = re.compile("[\x00-\x1f\x7f-\x9f\u2028\u2029]")


def read(content: str | bytes) -> TextFile:
    written = content if isinstance(content, bytes) else content.encode("utf-8")
    file = read_text(written, "units/20.yaml")
    assert isinstance(file, TextFile), file
    return file


def refused(content: str | bytes) -> Fault:
    written = content if isinstance(content, bytes) else content.encode("utf-8")
    fault = read_text(written, "units/20.yaml")
    assert isinstance(fault, Fault), fault
    assert fault.place.file == "units/20.yaml"
    assert fault.message
    assert fault.remedy
    return fault


# ---------------------------------------------------------------- plain scalars

# YAML 1.2.2, section 10.3.2 (core schema), and what YAML 1.1 makes of the same words.
CORE = {
    "NO": "NO",
    "off": "off",
    "yes": "yes",
    "y": "y",
    "12:30": "12:30",
    "1_000": "1_000",
    "2026-11-20": "2026-11-20",
    "2026-13-45": "2026-13-45",
    "84.5 degC": "84.5 degC",
    "60 to 120 degC": "60 to 120 degC",
    "4-20 mA": "4-20 mA",
    "2oo3": "2oo3",
    "0 %": "0 %",
    "true": True,
    "False": False,
    "TRUE": True,
    "null": None,
    "~": None,
    "": None,
    "0": 0,
    "-7": -7,
    "+7": 7,
    "999999999999999999": 999999999999999999,
    "1.5": 1.5,
    ".5": 0.5,
    "5.": 5.0,
    "1e3": 1000.0,
    "-1.2E-3": -0.0012,
    "0x_": "0x_",
    "1.2.3": "1.2.3",
    "1e": "1e",
    ".": ".",
    "+": "+",
    "Nan": "Nan",
}


@pytest.mark.parametrize(("written", "value"), CORE.items())
def test_plain_scalars_are_read_by_the_core_schema(written: str, value: object) -> None:
    data = read(f"a: {written}\n").data
    assert isinstance(data, dict)
    assert data["a"] == value
    assert type(data["a"]) is type(value)


@pytest.mark.parametrize("quote", ["'", '"'])
@pytest.mark.parametrize("written", ["20", "true", "null", "1.5", "010", ".inf", ""])
def test_quoted_scalars_are_text(written: str, quote: str) -> None:
    assert read(f"a: {quote}{written}{quote}").data == {"a": written}


@pytest.mark.parametrize("written", ["|", ">"])
def test_block_scalars_are_text(written: str) -> None:
    assert read(f"a: {written}\n  20\n").data == {"a": "20\n"}


def test_keys_are_always_text() -> None:
    assert read("20: a\ntrue: b\nnull: c\n1.5: d\n010: e\n").data == {
        "20": "a",
        "true": "b",
        "null": "c",
        "1.5": "d",
        "010": "e",
    }


def test_integers_too_long_for_an_integer_are_read_as_what_json_readers_make_of_them() -> None:
    assert read(f"a: {'9' * 30}").data == {"a": 1e30}


# ---------------------------------------------------------------- refusals

REFUSED = {
    # what is written: line, column, a part of the message
    "": (1, 1, "empty"),
    "# only a comment\n": (1, 1, "empty"),
    "a: &x 1": (1, 4, "`&x`"),
    "a: {b: &x [1]}": (1, 8, "`&x`"),
    "&x a: 1": (1, 1, "key"),
    "a: *x": (1, 4, "`*x`"),
    "*x : 1": (1, 1, "key"),
    "a: !!str 1": (1, 4, "`!!str`"),
    "a: ! 1": (1, 4, "`!`"),
    "a: !!python/object:os.system x": (1, 4, "sets a type"),
    "a: !%1bx 1": (1, 4, "`!?x` sets a type"),
    "!!str a: 1": (1, 1, "key"),
    "a: 1\n<<: {b: 1}": (2, 1, "`<<`"),
    "? {a: 1}\n: b": (1, 3, "key"),
    "? [a]\n: b": (1, 3, "key"),
    '"": 1': (1, 1, "empty"),
    "a: 1\nb: 2\na: 3": (3, 1, "`a` stands twice (first in line 1)"),
    "20: 1\n'20': 2": (2, 1, "`20` stands twice"),
    "a: {b: 1, b: 2}": (1, 11, "`b` stands twice (first in line 1)"),
    "a: 1\n---\nb: 2": (2, 1, "second document"),
    "a: 1\n...\n---\n": (3, 1, "second document"),
    "%YAML 1.1\n---\na: NO": (1, 1, "`%`"),
    "# head\n%TAG ! tag:x,2000:\n---\na: 1": (2, 1, "`%`"),
    # numbers
    "a: 010": (1, 4, "`010` is a number with a leading zero"),
    "a: -007": (1, 4, "leading zero"),
    "a: 00.5": (1, 4, "leading zero"),
    "a:\n  - 1\n  - 08": (3, 5, "leading zero"),
    "a: .inf": (1, 4, "`.inf`"),
    "a: -.INF": (1, 4, "`-.INF`"),
    "a: .nan": (1, 4, "`.nan`"),
    "a: 1e999": (1, 4, "too large"),
    "a: " + "9" * 5000: (1, 4, "too large"),
    "a: -" + "9" * 5000: (1, 4, "too large"),
    # sizes
    "a: " + "[" * MAX_DEPTH + "]" * MAX_DEPTH: (1, 3 + MAX_DEPTH, "deeper than 40"),
    "[" * 1500: (1, 1001, "deeper than 40"),  # the parser's own limit comes first
    "a: " + "x" * (MAX_SCALAR_CHARACTERS + 1): (1, 4, "20000"),
    "b: 1\n? " + "x" * (MAX_SCALAR_CHARACTERS + 1) + "\n: 1": (2, 3, "20000"),
    # characters
    "a: 1\nb: \x1b[31m": (2, 4, "U+001B"),
    "a: \x00": (1, 4, "U+0000"),
    "a: x\x7f": (1, 5, "U+007F"),
    "a: 1\rb: 2": (1, 5, "U+000D"),
    "a: 1\r\nb: \x07": (2, 4, "U+0007"),
    "a: \u202etxt": (1, 4, "U+202E"),
    "a: \u061c": (1, 4, "U+061C"),
    "a: \ufeff1": (1, 4, "U+FEFF"),
    "a: \uffff": (1, 4, "U+FFFF"),
    # the parser breaks lines here and no editor does: the comment would hide a key
    "# harmless\u2028hazard: none\nb: 1": (1, 11, "U+2028"),
    "# harmless\x85hazard: none\nb: 1": (1, 11, "U+0085"),
    'a: "\\e[31m"': (1, 4, "control character"),
    'a: "\\0"': (1, 4, "control character"),
    'a: "\\u202e"': (1, 4, "control character"),
    'a: "\\L"': (1, 4, "control character"),
    'a: "x\\x0dy"': (1, 4, "control character"),
    '"\\e": 1': (1, 1, "control character"),
    'a: "\\ud800"': (1, 7, ""),
    # what the YAML parser itself refuses
    "a: %": (1, 4, "`%`"),
    "unit: @x": (1, 7, "`@`"),
    "a: `x": (1, 4, "a backtick"),
    "a:\n\t- b": (2, 1, "tab"),
    "?\t": (1, 2, "a tab"),
    "a: b: c": (1, 5, "colon"),
    "a\nb: 1": (2, 2, "colon"),
    "a: 'x\nb: 1\n": (1, 4, "quote is not closed"),
    'a: 1\nb: "x\n': (2, 4, "quote is not closed"),
    'a: "x" y': (1, 8, "closing quote"),
    'a: "\\d{2}"': (1, 5, "backslash"),
    "a: {b: 1\nc: 2\nd: 3\n": (1, 4, "not closed"),
    "a: [1, 2\n": (1, 4, "not closed"),
    "a: {b: 1 c: 2}\n": (1, 11, "comma"),
    "a: [1,, 2]": (1, 7, "value is missing"),
    "a: ]": (1, 4, "value is missing"),
    "a:\n  b: 1\n c: 2": (3, 2, "indentation"),
    "a: 1\n- b": (2, 1, "indentation"),
    "a: - b": (1, 4, "list"),
    "a: |x": (1, 5, "not well-formed"),
}


@pytest.mark.parametrize("content", REFUSED)
def test_refusals_name_the_place(content: str) -> None:
    line, column, part = REFUSED[content]
    fault = refused(content)
    assert (fault.place.line, fault.place.column) == (line, column)
    assert part in fault.message
    # a message is a line on a terminal, whatever stands in the file
    assert len(fault.message) < 200
    assert not CONTROL.search(fault.message + fault.remedy)


def test_an_alias_bomb_is_refused_at_its_first_anchor() -> None:
    levels = ["a0: &a0 [x, x]"] + [f"a{n}: &a{n} [*a{n - 1}, *a{n - 1}]" for n in range(1, 40)]
    fault = refused("\n".join(levels))
    assert (fault.place.line, fault.place.column) == (1, 5)


def test_a_file_above_the_size_limit_is_refused_unread() -> None:
    assert "32 MiB" in refused(b"\xff" * (MAX_FILE_BYTES + 1)).message


@pytest.mark.parametrize(
    ("content", "line", "column"),
    [
        (b"\xff\xfea\x00:\x00", 1, 1),  # UTF-16
        (b"a: 1\nb: caf\xe9\n", 2, 7),  # Latin-1
        ("é: é".encode() + b"\xff", 1, 5),
        (b"\xef\xbb\xbfa\xff", 1, 2),
    ],
)
def test_other_encodings_are_refused_at_the_character(content: bytes, line: int, column: int) -> None:
    fault = refused(content)
    assert (fault.place.line, fault.place.column) == (line, column)
    assert "UTF-8" in fault.message


def test_the_deepest_permitted_nesting_is_read() -> None:
    nested = "[" * (MAX_DEPTH - 1) + "]" * (MAX_DEPTH - 1)
    assert read(f"a: {nested}").data == {"a": json.loads(nested)}


def test_the_longest_permitted_scalar_is_read() -> None:
    assert read(f"a: {'x' * MAX_SCALAR_CHARACTERS}").data == {"a": "x" * MAX_SCALAR_CHARACTERS}


# ---------------------------------------------------------------- places

PLACED = """\
# a comment
loops:
  TIC-2014:
    service: tray 12
    alarms: {high: {limit: 94 degC}}
    permitted:
      - manual
      - automatic
  'é😀': x
"""


@pytest.mark.parametrize(
    ("path", "value", "key"),
    [
        ((), (2, 1), (2, 1)),
        (("loops",), (3, 3), (2, 1)),
        (("loops", "TIC-2014"), (4, 5), (3, 3)),
        (("loops", "TIC-2014", "service"), (4, 14), (4, 5)),
        (("loops", "TIC-2014", "alarms"), (5, 13), (5, 5)),
        (("loops", "TIC-2014", "alarms", "high", "limit"), (5, 28), (5, 21)),
        (("loops", "TIC-2014", "permitted", 1), (8, 9), (8, 9)),
        (("loops", "é😀"), (9, 9), (9, 3)),
        # where nothing is written: the nearest enclosing key
        (("loops", "TIC-2014", "purpose"), (3, 3), (3, 3)),
        (("loops", "TIC-2014", "alarms", "low", "limit"), (5, 5), (5, 5)),
        (("loops", "TIC-2014", "permitted", 7), (6, 5), (6, 5)),
        (("loops", "TIC-2014", "service", "deeper"), (4, 5), (4, 5)),
    ],
)
@pytest.mark.parametrize("newline", ["\n", "\r\n"])
@pytest.mark.parametrize("bom", ["", "\ufeff"])
def test_places(
    path: tuple[str | int, ...], value: tuple[int, int], key: tuple[int, int], newline: str, bom: str
) -> None:
    file = read((bom + PLACED).replace("\n", newline))
    assert file.place(path) == Place("units/20.yaml", *value)
    assert file.place(path, key=True) == Place("units/20.yaml", *key)


def test_line_ends_and_byte_order_mark_do_not_change_what_is_read() -> None:
    with_block = PLACED + "prose: |\n  one\n  two\n"
    assert read(("\ufeff" + with_block).replace("\n", "\r\n")).data == read(with_block).data


def test_a_place_prints_as_editors_open_it() -> None:
    assert str(Place("units/20.yaml", 41, 7)) == "units/20.yaml:41:7"


# ---------------------------------------------------------------- any input

PIECES = [
    "a", "b", "20", "010", ".inf", "1e999", ":", "?", "-", ",", "[", "]", "{", "}", "&", "*", "!", "|", ">",
    "'", '"', "%", "@", "`", "#", "---", "...", "<<", "~", "\\", "\\u0000", "\t", "\n", "\r\n", "\x1b",
    "\u2028", ": ", "- ", "\n  ", "\n    ", "{a: ", '"\\', "é", "😀", " ",
]  # fmt: skip


@settings(max_examples=300, deadline=None)
@given(
    st.binary(max_size=200) | st.lists(st.sampled_from(PIECES), max_size=40).map(lambda parts: "".join(parts).encode())
)
@example(b"\xef\xbb\xbf")
@example(b"? ")
@example(b"%")
@example(b"---")
@example(b"a: !")
def test_no_bytes_raise_and_every_fault_lies_in_the_file(content: bytes) -> None:
    result = read_text(content, "units/20.yaml")
    if isinstance(result, Fault):
        lines = content.count(b"\n") + 1
        assert 1 <= result.place.line <= lines + 1
        assert result.place.column >= 1
        assert not CONTROL.search(result.message + result.remedy)
    else:
        assert isinstance(result, TextFile)


SCALARS = st.none() | st.booleans() | st.integers(-(10**17), 10**17) | st.floats(allow_nan=False, allow_infinity=False)
TEXTS = st.text(st.characters(min_codepoint=32, max_codepoint=0x24F, exclude_categories=["Cc"]))
DATA = st.recursive(
    SCALARS | TEXTS,
    lambda inner: (
        st.lists(inner, max_size=4)
        | st.dictionaries(TEXTS.filter(lambda key: key not in ("", "<<")), inner, max_size=4)
    ),
    max_leaves=12,
)


@settings(max_examples=100, deadline=None)
@given(DATA)
def test_what_json_writes_is_read_as_json_reads_it(data: object) -> None:
    # JSON is YAML 1.2 (section 1.2 there), so a JSON reader is an independent reference for the data.
    written = json.dumps(data, ensure_ascii=False)
    assert read(written).data == json.loads(written)
