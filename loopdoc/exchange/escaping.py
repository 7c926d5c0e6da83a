"""Text of a register made harmless for where it is shown; every form of output takes it through here.

A reader of the text must see what stands in it, and nothing that shows it may obey it: not a terminal (escape
sequences, bidirectional marks), not a build log (lines that a forge takes for commands), not XML, not a page in
Markdown (markup, links, mentions).
"""

from __future__ import annotations

import json
import re
from typing import Any

_SUSPECT = re.compile(r"[^\n -~]+")
# As a calculated number is printed; the spaces that keep a document from breaking it have no meaning in a terminal.
_POWER_OF_TEN = re.compile("(?<=\\d)\u00a0×\u00a0(?=10)")
# Build servers take these for commands in any line that is printed, wherever in the line the second one stands.
_LOG_COMMAND = re.compile(r"^([ \t]*):(?=:)|#(?=#[\w-]*\[)", re.MULTILINE)
_MARKDOWN = re.compile(
    r"(?P<entity>[<>&])|(?P<markup>[\\`*_\[\]|~$^{}])"
    # A mention, a reference by number and the start of a link that a forge makes of plain text.
    r"|[@#!%]|:(?=//|\w+:)|(?<=www)\.|(?<=GH)-(?=\d)",
    re.IGNORECASE,
)
_ENTITIES = {"<": "&lt;", ">": "&gt;", "&": "&amp;"}
# No backslash stops a mention, since forges look for it in the finished text; a zero-width space between does.
_ZERO_WIDTH = "&#8203;"


def for_terminal(text: str) -> str:
    """Text in lines that a terminal or a build log shows and does not obey."""
    plain = _POWER_OF_TEN.sub(" × ", text)
    return _LOG_COMMAND.sub(_log_command, _SUSPECT.sub(_written_out, plain))


def for_line(text: str) -> str:
    """The same in one line."""
    return for_terminal(text.replace("\n", " "))


def for_json(document: Any) -> str:
    """A JSON document in which all is written out that a terminal or a build log might obey."""
    text = _LOG_COMMAND.sub(_log_command, json.dumps(document, ensure_ascii=False, indent=2, allow_nan=False))
    return _SUSPECT.sub(lambda run: "".join(c if c.isprintable() else json.dumps(c)[1:-1] for c in run[0]), text)


def for_xml(text: str) -> str:
    """Content of an XML element or of an attribute in double quotes."""
    plain = for_terminal(text).replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")
    return plain.replace('"', "&quot;").replace("\n", "&#10;")


def for_markdown(text: str) -> str:
    """Text in a cell of a Markdown table that is shown as it stands; what is in backticks is set as code."""
    pieces = for_line(text).split("`")
    if len(pieces) % 2 == 0:  # one of them has no partner
        return _inert("`".join(pieces))
    return "".join(as_code(piece) if index % 2 and piece else _inert(piece) for index, piece in enumerate(pieces))


def as_code(text: str) -> str:
    """A code span in a cell of a Markdown table, which nothing in the text can end; a mention in it is none."""
    shown = for_line(text).replace("|", "\\|")
    fence = "`" * (1 + max(map(len, re.findall("`+", shown)), default=0))
    # One blank at each end is not shown; without it a backtick at an end would join the fence.
    return f"{fence} {shown} {fence}" if "`" in shown or not shown.strip() else f"{fence}{shown}{fence}"


def _inert(text: str) -> str:
    def written(found: re.Match[str]) -> str:
        character = found[0]
        plain = _ENTITIES.get(character) or (f"\\{character}" if found["markup"] else character)
        after = text[found.end() : found.end() + 1]
        refers = character in "@#!%&~$" and (after.isalnum() or after in ('"', "_"))
        return plain + _ZERO_WIDTH if refers or character in ":.-" else plain

    return _MARKDOWN.sub(written, text)


def _written_out(run: re.Match[str]) -> str:
    return "".join(
        c if c.isprintable() else f"\\u{ord(c):04x}" if ord(c) < 0x10000 else f"\\U{ord(c):08x}" for c in run[0]
    )


def _log_command(found: re.Match[str]) -> str:
    return f"{found[1] or ''}\\u{ord(found[0][-1]):04x}"
