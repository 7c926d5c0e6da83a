"""What a site puts in the place of ours: its logo, its words in the title block, its templates and style sheet.

The files stand in the folder `house` beside the register's root file, each under the name of what it replaces. They
are input like any other: checked when they are read, rendered within limits, and enclosed in every PDF.
"""

from __future__ import annotations

import base64
import re
import struct
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files
from pathlib import Path

from loopdoc.register.place import Fault
from loopdoc.register.text import read_text

FOLDER = "house"
TEXTS = "texts.yaml"
LOGOS = ("logo.svg", "logo.png")
STYLE_SHEET = "style.css"
MAX_BYTES = 1_000_000
"""Of one file."""
MAX_PIXELS = 4_000
"""Of a side of a logo: what is pressed small may unpack large."""
_TEXT_KEYS = ("owner", "cautions")
_ACTIVE = (
    (re.compile(r"<!(?:DOCTYPE|ENTITY)", re.I), "a document type, which a logo does not need"),
    (re.compile(r"<\?(?!xml\s)", re.I), "a processing instruction"),
    (re.compile(r"<\s*(?:[\w-]+:)?(script|foreignObject|iframe|animate\w*|set|handler)\b", re.I), "an active element"),
    (re.compile(r"\son\w+\s*=", re.I), "an event handler"),
    (re.compile(r"""\bhref\s*=\s*(?!["']\s*#)""", re.I), "a reference to something outside of it"),
    (re.compile(r"""url\(\s*(?!["']?\s*#)""", re.I), "a reference to something outside of it"),
    (re.compile(r"@import", re.I), "an import"),
)


class HouseError(Exception):
    """A file of the site's own cannot be used; the message names file, line and what is wrong."""


@dataclass(frozen=True, slots=True, eq=False)
class House:
    """The site's own files, checked."""

    files: Mapping[str, bytes]
    """Content by name; of a file that replaces one of ours, the same name."""
    owner: str = ""
    """In the place of the register's owner; empty where that stands."""
    cautions: str = ""
    """After the standing cautions, which nothing removes."""
    logo: str = ""
    """Address of the logo with the logo in it; empty where there is none."""

    def template(self, name: str) -> str | None:
        """Text of the site's own template, if it has one of this name."""
        return self.files[name].decode() if name in self.files and name.endswith(".html") else None

    @property
    def style_sheet(self) -> str:
        """The site's own style sheet; empty where ours serves."""
        return self.files.get(STYLE_SHEET, b"").decode()

    @property
    def has_templates(self) -> bool:
        """Whether any page is rendered by a template that is not ours."""
        return any(name.endswith(".html") for name in self.files)


NO_HOUSE = House({})


@lru_cache(maxsize=1)
def replaceable() -> tuple[str, ...]:
    """Names of the templates and the style sheet that a site may replace."""
    names = (file.name for file in files("loopdoc.templates").iterdir())
    return (*sorted(name for name in names if name.endswith(".html")), STYLE_SHEET)


def read_house(folder: Path) -> House:
    """The site's own files beside a register; NO_HOUSE where there are none.

    Raises
    ------
    HouseError
        A file cannot be used.
    OSError
        A file cannot be read.
    """
    place = folder / FOLDER
    if not place.is_dir():
        return NO_HOUSE
    found: dict[str, bytes] = {}
    for file in sorted(place.iterdir()):
        if file.name.startswith("."):
            continue
        if not file.is_file() or not file.resolve().is_relative_to(folder.resolve()):
            raise HouseError(f"{FOLDER}/{file.name} is no file of this folder; it holds plain files only")
        if file.stat().st_size > MAX_BYTES:
            raise HouseError(f"{FOLDER}/{file.name} is larger than {MAX_BYTES // 1_000_000} MB")
        found[file.name] = file.read_bytes()
    return house_of(found)


def house_of(contents: Mapping[str, bytes]) -> House:
    """The site's own files from their contents by name.

    Raises
    ------
    HouseError
        A file cannot be used.
    """
    for name, content in contents.items():
        if name not in (*replaceable(), TEXTS, *LOGOS):
            taken = ", ".join((TEXTS, *LOGOS, *replaceable()))
            raise HouseError(f"{FOLDER}/{name} has no name of ours, so that it would replace nothing; names: {taken}")
        if not name.endswith(".png"):
            try:
                content.decode()
            except UnicodeDecodeError as error:
                line = content[: error.start].count(b"\n") + 1
                raise HouseError(f"{FOLDER}/{name}, line {line}: this is not UTF-8 text") from None
    if not contents:
        return NO_HOUSE
    _refuse_outside(contents.get(STYLE_SHEET, b"").decode())
    owner, cautions = _texts(contents.get(TEXTS, b""))
    logos = [name for name in LOGOS if name in contents]
    if len(logos) > 1:
        raise HouseError(f"{FOLDER}/ holds two logos, {logos[0]} and {logos[1]}; keep one")
    logo = _logo(logos[0], contents[logos[0]]) if logos else ""
    return House(dict(contents), owner, cautions, logo)


def _texts(content: bytes) -> tuple[str, str]:
    if not content:
        return "", ""
    name = f"{FOLDER}/{TEXTS}"
    read = read_text(content, name)
    if isinstance(read, Fault):
        raise HouseError(f"{name}, line {read.place.line}: {read.message}; {read.remedy}")
    if not isinstance(read.data, dict):
        raise HouseError(f"{name}, line 1: write `owner: ...` or `cautions: ...`")
    for key, value in read.data.items():
        line = read.place((key,), key=True).line
        if key not in _TEXT_KEYS:
            raise HouseError(f"{name}, line {line}: there is no text `{key}`; write {' or '.join(_TEXT_KEYS)}")
        if not isinstance(value, str) or not value.strip():
            raise HouseError(f"{name}, line {line}: `{key}` is text")
    return tuple(" ".join(str(read.data.get(key, "")).split()) for key in _TEXT_KEYS)  # type: ignore[return-value]


def _refuse_outside(css: str) -> None:
    for pattern in (re.compile(r"@import", re.I), re.compile(r"""url\(\s*(?!["']?\s*(?:#|data:))""", re.I)):
        found = pattern.search(css)
        if found:
            line = css.count("\n", 0, found.start()) + 1
            raise HouseError(f"{FOLDER}/{STYLE_SHEET}, line {line}: reads something outside of it, which pages may not")


def _logo(name: str, content: bytes) -> str:
    if name.endswith(".svg"):
        _refuse_active(f"{FOLDER}/{name}", content.decode())
        kind = "svg+xml"
    else:
        header = content[:24]
        sides = struct.unpack(">II", header[16:24]) if header[:8] == b"\x89PNG\r\n\x1a\n" and len(header) == 24 else ()
        if not sides or not all(0 < side <= MAX_PIXELS for side in sides):
            raise HouseError(f"{FOLDER}/{name} is no PNG image of at most {MAX_PIXELS} by {MAX_PIXELS} pixels")
        kind = "png"
    return f"data:image/{kind};base64,{base64.b64encode(content).decode()}"


def _refuse_active(name: str, svg: str) -> None:
    from xml.etree import ElementTree

    for pattern, what in _ACTIVE:
        found = pattern.search(svg)
        if found:
            line = svg.count("\n", 0, found.start()) + 1
            raise HouseError(f"{name}, line {line}: holds {what}; save it as plain SVG")
    try:
        root = ElementTree.fromstring(svg)
    except ElementTree.ParseError as error:
        raise HouseError(f"{name}, line {error.position[0]}: is no SVG image ({error})") from None
    if root.tag != "{http://www.w3.org/2000/svg}svg":
        raise HouseError(f"{name}, line 1: is no SVG image; its root is `{root.tag.rsplit('}', 1)[-1]}`")
