"""A view and a template to HTML. Templates loop and place; whatever is computed or worded comes in the view."""

from __future__ import annotations

import base64
import re
from functools import lru_cache
from importlib.resources import files
from typing import Any

from jinja2 import FunctionLoader, StrictUndefined, select_autoescape
from jinja2.sandbox import SandboxedEnvironment

from loopdoc.documents.language import ENGLISH, LANGUAGES

FONTS = {
    ("loopdoc", "normal", "400"): "IBMPlexSans-Regular.ttf",
    ("loopdoc", "normal", "700"): "IBMPlexSans-Bold.ttf",
    ("loopdoc", "italic", "400"): "IBMPlexSans-Italic.ttf",
    ("loopdoc narrow", "normal", "400"): "IBMPlexSansCondensed-Regular.ttf",
    ("loopdoc narrow", "normal", "700"): "IBMPlexSansCondensed-Bold.ttf",
}
"""Fonts that go with the package, by family, style and weight: pages look alike on every machine."""


def template_text(name: str) -> str:
    """Text of a template or style sheet of the package."""
    return files("loopdoc.templates").joinpath(name).read_text(encoding="utf-8")


@lru_cache(maxsize=1)
def _environment() -> SandboxedEnvironment:
    environment = SandboxedEnvironment(
        loader=FunctionLoader(template_text),
        autoescape=select_autoescape(default=True, default_for_string=True),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.globals.pop("lipsum", None)
    environment.globals["site"] = None  # a page of the site puts its frame in the place of this
    return environment


def render(template: str, **view: Any) -> str:
    """The HTML of one document."""
    language = LANGUAGES[view["document"].language] if "document" in view else ENGLISH
    return _environment().get_template(template).render(label=language.label, **view)


@lru_cache(maxsize=1)
def style_sheet() -> str:
    """The style sheet for print: fonts through the package's own address, so the machine's fonts do not matter.

    Variables are put in here, since WeasyPrint would resolve them anew for every cell of every table.
    """
    faces = "\n".join(
        f"@font-face {{ font-family: '{family}'; font-style: {style}; font-weight: {weight}; "
        f"src: url('loopdoc-font:{name}') }}"
        for (family, style, weight), name in FONTS.items()
    )
    css = template_text("style.css")
    values = dict(re.findall(r"(--[\w-]+): ([^;}]+?)\s*[;}]", css))
    return faces + "\n" + re.sub(r"var\((--[\w-]+)\)", lambda use: values[use[1]], css)


def font(name: str) -> bytes:
    """A font file of the package."""
    return files("loopdoc.templates").joinpath("fonts", name).read_bytes()


@lru_cache(maxsize=1)
def web_style_sheet() -> str:
    """The style sheet for the screen: one file with the fonts inside, which opens from disk anywhere."""
    faces = "\n".join(
        f"@font-face {{ font-family: '{family}'; font-style: {style}; font-weight: {weight}; "
        f"src: url('data:font/ttf;base64,{base64.b64encode(font(name)).decode()}') format('truetype') }}"
        for (family, style, weight), name in FONTS.items()
    )
    return "\n".join((faces, template_text("style.css"), template_text("site.css")))
