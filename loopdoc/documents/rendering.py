"""A view and a template to HTML. Templates loop and place; whatever is computed or worded comes in the view."""

from __future__ import annotations

import base64
import re
from functools import lru_cache
from importlib.resources import files
from typing import Any

from jinja2 import Environment, FunctionLoader, StrictUndefined, select_autoescape
from jinja2.sandbox import SandboxedEnvironment
from markupsafe import Markup, escape

from loopdoc.documents.bounded import within_limits
from loopdoc.documents.handover.house import FOLDER, NO_HOUSE, House
from loopdoc.documents.language import ENGLISH, LANGUAGES

FONTS = {
    ("loopdoc", "normal", "400"): "IBMPlexSans-Regular.ttf",
    ("loopdoc", "normal", "700"): "IBMPlexSans-Bold.ttf",
    ("loopdoc", "italic", "400"): "IBMPlexSans-Italic.ttf",
    ("loopdoc narrow", "normal", "400"): "IBMPlexSansCondensed-Regular.ttf",
    ("loopdoc narrow", "normal", "700"): "IBMPlexSansCondensed-Bold.ttf",
}
"""Fonts that go with the package, by family, style and weight: pages look alike on every machine."""

_FRACTION = re.compile("([^\\s]+\u00a0[^\\s\u00a0/]+/[^\\s\u00a0,;.]+)")
"""A value that a blank without a break joins to a unit with a stroke."""


def template_text(name: str) -> str:
    """Text of a template or style sheet of the package."""
    return files("loopdoc.templates").joinpath(name).read_text(encoding="utf-8")


@lru_cache(maxsize=4)
def _environment(house: House) -> Environment:
    def load(name: str) -> tuple[str, str, None]:
        own = house.template(name)
        return (template_text(name), name, None) if own is None else (own, f"{FOLDER}/{name}", None)

    # Our own templates need no sandbox, which asks about every attribute and takes as long again as the page.
    environment = (SandboxedEnvironment if house.has_templates else Environment)(
        loader=FunctionLoader(load),
        autoescape=select_autoescape(default=True, default_for_string=True),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.globals.pop("lipsum", None)
    environment.globals["site"] = None  # a page of the site puts its frame in the place of this
    environment.filters["unbroken"] = _unbroken
    return environment


def _unbroken(text: str) -> Markup:
    """A text as HTML in which no value is broken within its unit, as `6.5 t/h` would be behind the stroke."""
    pieces = _FRACTION.split(text)
    kept = (Markup('<span class="whole">{}</span>').format(piece) if index % 2 else escape(piece)
            for index, piece in enumerate(pieces))  # fmt: skip
    return Markup("").join(kept)


def render(template: str, **view: Any) -> str:
    """The HTML of one document."""
    language = LANGUAGES[view["document"].language] if "document" in view else ENGLISH
    house = view["document"].house if "document" in view else NO_HOUSE

    def page() -> str:
        return _environment(house).get_template(template).render(label=language.label, **view)

    return within_limits(page, template) if house.has_templates else page()


@lru_cache(maxsize=4)
def style_sheet(own: str = "") -> str:
    """The style sheet for print: fonts through the package's own address, so the machine's fonts do not matter.

    Variables are put in here, since WeasyPrint would resolve them anew for every cell of every table.
    """
    faces = "\n".join(
        f"@font-face {{ font-family: '{family}'; font-style: {style}; font-weight: {weight}; "
        f"src: url('loopdoc-font:{name}') }}"
        for (family, style, weight), name in FONTS.items()
    )
    css = own or template_text("style.css")
    values = dict(re.findall(r"(--[\w-]+): ([^;}]+?)\s*[;}]", css))
    return faces + "\n" + re.sub(r"var\((--[\w-]+)\)", lambda use: values.get(use[1], use[0]), css)


def font(name: str) -> bytes:
    """A font file of the package."""
    return files("loopdoc.templates").joinpath("fonts", name).read_bytes()


@lru_cache(maxsize=4)
def web_style_sheet(own: str = "") -> str:
    """The style sheet for the screen: one file with the fonts inside, which opens from disk anywhere."""
    faces = "\n".join(
        f"@font-face {{ font-family: '{family}'; font-style: {style}; font-weight: {weight}; "
        f"src: url('data:font/ttf;base64,{base64.b64encode(font(name)).decode()}') format('truetype') }}"
        for (family, style, weight), name in FONTS.items()
    )
    return "\n".join((faces, own or template_text("style.css"), template_text("site.css")))
