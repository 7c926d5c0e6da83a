"""Figures written: as SVG into pages, and to files as SVG, PDF or PNG, the latter two by matplotlib.

Black on white, told apart by line style, so that a photocopy says the same as the screen.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache
from html import escape
from importlib.resources import as_file, files
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from loopdoc.documents.drawing import pt
from loopdoc.documents.plot_layout import WIDTH, Layout, Lettering, Stroke, layout
from loopdoc.documents.plots import Drawing
from loopdoc.engineering.process import FloatArray

if TYPE_CHECKING:
    from matplotlib.figure import Figure

FONT_FILES = ("IBMPlexSansCondensed-Regular.ttf", "IBMPlexSansCondensed-Bold.ttf")
FONT_FAMILY = "IBM Plex Sans Condensed"
PAGE_FAMILY = "loopdoc narrow"


def to_svg(drawing: Drawing) -> str:
    """The drawing as SVG text for a page: text stays text, and the same drawing gives the same bytes."""
    laid = layout(drawing)
    return _svg([laid], drawing.title, PAGE_FAMILY)


def save(drawings: Sequence[Drawing], path: Path) -> None:
    """Write drawings with their captions: as .pdf a page for each, as .svg or .png one above the other.

    Raises
    ------
    ValueError
        The ending is another.
    """
    if path.suffix not in (".svg", ".png", ".pdf"):
        raise ValueError(f"a plot is written as .svg, .png or .pdf, not as `{path.suffix or path.name}`")
    laid = [layout(drawing, with_caption=True) for drawing in drawings]
    title = ", ".join(drawing.title for drawing in drawings)
    if path.suffix == ".svg":
        path.write_text('<?xml version="1.0" encoding="utf-8"?>\n' + _svg(laid, title, FONT_FAMILY), encoding="utf-8")
        return
    import matplotlib

    _load_fonts()
    with matplotlib.rc_context({"font.family": FONT_FAMILY, "pdf.fonttype": 42}):
        if path.suffix == ".pdf":
            from matplotlib.backends.backend_pdf import PdfPages

            # No creation date: the same drawing gives the same bytes.
            with PdfPages(path, metadata={"CreationDate": None, "Title": title}) as pages:
                for one in laid:
                    pages.savefig(_figure([one]))
            return
        _figure(laid).savefig(path, dpi=200, metadata={"Software": None}, facecolor="white")


def _svg(figures: Sequence[Layout], title: str, family: str) -> str:
    """Figures one above the other."""
    height = sum(one.height for one in figures)
    lines = [
        f'<svg role="img" xmlns="http://www.w3.org/2000/svg" width="{pt(WIDTH)}pt" height="{pt(height)}pt" '
        f'viewBox="0 0 {pt(WIDTH)} {pt(height)}"><title>{escape(title, quote=False)}</title>'
    ]
    above = 0.0
    for one in figures:
        shift = f' transform="translate(0 {pt(above)})"' if above else ""
        lines.append(f'<g{shift} fill="none" stroke-linejoin="round">')
        lines += [_path(stroke) for stroke in one.strokes if stroke.pieces]
        lines.append(f'</g>\n<g{shift} fill="#000000" font-family="\'{family}\'">')
        lines += [_text(lettering) for lettering in one.letters if lettering.content]
        lines.append("</g>")
        above += one.height
    return "\n".join((*lines, "</svg>"))


def _path(stroke: Stroke) -> str:
    if stroke.is_dots:  # a line of no length with round ends
        steps = "".join(f"M{pt(x)} {pt(y)}h0" for piece in stroke.pieces for x, y in piece.tolist())
    else:
        steps = "".join(f"M{'L'.join(f'{pt(x)} {pt(y)}' for x, y in piece.tolist())}" for piece in stroke.pieces)
    found = f'<path d="{steps}" stroke="{stroke.colour}" stroke-width="{pt(stroke.width)}"'
    found += f' stroke-dasharray="{" ".join(map(pt, stroke.dash))}"' if stroke.dash else ""
    return found + (' stroke-linecap="round"/>' if stroke.is_dots else "/>")


def _text(one: Lettering) -> str:
    found = f'<text x="{pt(one.x)}" y="{pt(one.y)}" font-size="{pt(one.size)}"'
    found += f' text-anchor="{one.anchor}"' if one.anchor != "start" else ""
    found += ' font-weight="700"' if one.is_bold else ""
    found += f' transform="rotate(-90 {pt(one.x)} {pt(one.y)})"' if one.is_turned else ""
    return f"{found}>{escape(one.content, quote=False)}</text>"


@lru_cache(maxsize=1)
def _load_fonts() -> None:
    from matplotlib import font_manager

    for name in FONT_FILES:
        with as_file(files("loopdoc.templates").joinpath("fonts", name)) as path:
            font_manager.fontManager.addfont(str(path))


def _figure(figures: Sequence[Layout]) -> Figure:
    """Figures one above the other, as one of matplotlib."""
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D

    height = sum(one.height for one in figures)
    made = Figure(figsize=(WIDTH / 72.0, height / 72.0), facecolor="none")

    def up(y: Any) -> Any:
        return 1.0 - (above + y) / height

    above = 0.0
    for one in figures:
        for stroke in one.strokes:
            x, y = _joined(stroke.pieces)
            line = Line2D(x / WIDTH, up(y), color=stroke.colour, linewidth=stroke.width)
            if stroke.is_dots:
                line.set(linestyle="none", marker="o", markersize=stroke.width, markeredgewidth=0.0)
            elif stroke.dash:  # matplotlib counts dashes in widths of the line
                line.set_dashes([length / stroke.width for length in stroke.dash])
            made.add_artist(line)
        for text in one.letters:
            made.text(
                text.x / WIDTH, up(text.y), text.content, fontsize=text.size, parse_math=False, va="baseline",
                ha={"start": "left", "middle": "center", "end": "right"}[text.anchor], rotation_mode="anchor",
                weight="bold" if text.is_bold else "normal", rotation=90 if text.is_turned else 0,
            )  # fmt: skip
        above += one.height
    return made


def _joined(pieces: Sequence[FloatArray]) -> tuple[FloatArray, FloatArray]:
    """Pieces of a line as one with gaps."""
    gap = np.full((1, 2), np.nan)
    line = np.concatenate([gap, *(part for piece in pieces for part in (piece, gap))])
    return line[:, 0], line[:, 1]
