"""Time responses as figures: from simulated curves to SVG, through matplotlib's object interface.

Black on white, told apart by line style, so that a photocopy says the same as the screen.
"""

from __future__ import annotations

import io
import re
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import as_file, files
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from matplotlib.figure import Figure

FONT_FILES = ("IBMPlexSansCondensed-Regular.ttf", "IBMPlexSansCondensed-Bold.ttf")
FONT_FAMILY = "IBM Plex Sans Condensed"
PAGE_FAMILY = "loopdoc narrow"
WIDTH_IN = 180 / 25.4
_LEFT_IN, _RIGHT_IN, _TOP_IN, _BOTTOM_IN = 0.55, 0.06, 0.2, 0.62
_PANEL_IN, _BETWEEN_IN = 1.2, 0.16
"""Height of a panel and of what is between two of them [in]."""
MOST_TICKS = 4
"""Steps of an axis; more numbers would touch one another in a panel of a third of the width."""
POINTS_DRAWN = 400
"""Points of one curve in a figure: finer than a printer's dot at this width."""


@dataclass(frozen=True, slots=True)
class Curve:
    """One line of a panel; ``x`` and ``y`` are (n,) in the panel's units."""

    label: str
    style: str
    """solid, dashed, dotted, or points that no line joins."""
    x: NDArray[np.float64]
    y: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Limit:
    """A horizontal line with its name, such as an alarm."""

    label: str
    value: float


@dataclass(frozen=True, slots=True)
class Panel:
    """One set of axes."""

    title: str
    x_label: str
    y_label: str
    curves: tuple[Curve, ...]
    limits: tuple[Limit, ...] = ()


@dataclass(frozen=True, slots=True)
class Drawing:
    """Panels in rows; each row has as many columns as the first."""

    title: str
    """What the figure shows, for those who cannot see it."""
    rows: tuple[tuple[Panel, ...], ...]


def to_svg(drawing: Drawing) -> str:
    """The drawing as SVG text for a page: text stays text, and the same drawing gives the same bytes."""
    with _style(drawing.title) as figure:
        _draw(figure, drawing)
        buffer = io.StringIO()
        figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    text = buffer.getvalue()
    text = text[text.index("<svg") :].replace(FONT_FAMILY, PAGE_FAMILY)
    # A style sheet inside the figure would hold for the whole page around it.
    text = re.sub(r"<(metadata|style)\b.*?</\1>\s*", "", text, flags=re.DOTALL)
    text = re.sub(r'style="([^"]*)"', _as_attributes, text)
    # Matplotlib numbers its groups anew in each figure; a page may hold several.
    text = re.sub(r'(<g) id="[^"]*"', r"\1", text)
    return re.sub(r"(<svg[^>]*>)", rf'\1<title>{_escaped(drawing.title)}</title>', text, count=1).replace(
        "<svg", '<svg role="img"', 1
    )


def save(drawing: Drawing, path: Path) -> None:
    """Write the drawing as .svg, .png or .pdf.

    Raises
    ------
    ValueError
        The ending is another.
    """
    if path.suffix not in (".svg", ".png", ".pdf"):
        raise ValueError(f"a plot is written as .svg, .png or .pdf, not as `{path.suffix or path.name}`")
    with _style(drawing.title) as figure:
        _draw(figure, drawing)
        figure.savefig(path, dpi=200)


@lru_cache(maxsize=1)
def _load_fonts() -> None:
    from matplotlib import font_manager

    for name in FONT_FILES:
        with as_file(files("loopdoc.templates").joinpath("fonts", name)) as path:
            font_manager.fontManager.addfont(str(path))


@contextmanager
def _style(salt: str) -> Iterator[Figure]:
    """A figure within our settings of matplotlib, which are put back after."""
    import matplotlib
    from matplotlib.figure import Figure

    _load_fonts()
    settings: dict[Any, Any] = {
        "svg.fonttype": "none",
        "svg.hashsalt": salt,
        "font.family": FONT_FAMILY,
        "font.size": 7.5,
        "figure.facecolor": "none",
        "axes.facecolor": "none",
        "axes.linewidth": 0.5,
        "axes.titlesize": 7.5,
        "axes.titleweight": "bold",
        "xtick.major.width": 0.5,
        "ytick.major.width": 0.5,
        "xtick.labelsize": 7,
        "ytick.labelsize": 7,
        "grid.linewidth": 0.3,
        "grid.color": "#999999",
        "legend.frameon": False,
        "legend.fontsize": 7,
    }
    with matplotlib.rc_context(settings):
        yield Figure()


def _draw(figure: Figure, drawing: Drawing) -> None:
    rows, columns = len(drawing.rows), len(drawing.rows[0])
    height_in = _TOP_IN + rows * _PANEL_IN + (rows - 1) * _BETWEEN_IN + _BOTTOM_IN
    figure.set_size_inches(WIDTH_IN, height_in)
    # Set by hand: an automatic layout measures every text several times and takes as long as all the rest.
    figure.subplots_adjust(
        left=_LEFT_IN / WIDTH_IN,
        right=1.0 - _RIGHT_IN / WIDTH_IN,
        top=1.0 - _TOP_IN / height_in,
        bottom=_BOTTOM_IN / height_in,
        wspace=0.34,
        hspace=_BETWEEN_IN / _PANEL_IN,
    )
    axes = figure.subplots(rows, columns, squeeze=False, sharex="col")
    for row, panels in enumerate(drawing.rows):
        for column, panel in enumerate(panels):
            _draw_panel(axes[row][column], panel, last_row=row == rows - 1)
    handles, labels = axes[0][0].get_legend_handles_labels()
    if len(handles) > 1:
        figure.legend(handles, labels, loc="lower center", ncols=len(handles))


def _draw_panel(axes: Any, panel: Panel, *, last_row: bool) -> None:
    styles = {
        "solid": ("-", 1.1, "#000000"),
        "dashed": ("--", 0.9, "#444444"),
        "dotted": (":", 0.8, "#000000"),
        "points": ("none", 0.0, "#777777"),
    }
    for curve in panel.curves:
        line, width, colour = styles[curve.style]
        step = max(1, len(curve.x) // POINTS_DRAWN)
        axes.plot(
            curve.x[::step], curve.y[::step], linestyle=line, linewidth=width, color=colour, label=curve.label,
            marker="." if curve.style == "points" else "none", markersize=2.5,
        )  # fmt: skip
    low, high = axes.get_ylim()
    for limit in panel.limits:
        # A limit far off would flatten the curves; it is named in the caption's table instead.
        if low - 0.6 * (high - low) <= limit.value <= high + 0.6 * (high - low):
            axes.axhline(limit.value, linewidth=0.6, color="#000000", dashes=(6, 2, 1, 2))
            # The name stands on the side away from the nearer end of the axis.
            is_high = limit.value > (low + high) / 2
            axes.annotate(
                limit.label, (1.0, limit.value), xycoords=("axes fraction", "data"),
                xytext=(-2, -1.5 if is_high else 1.5), textcoords="offset points",
                ha="right", va="top" if is_high else "bottom", fontsize=6.5,
            )  # fmt: skip
    axes.locator_params(nbins=MOST_TICKS)
    axes.margins(x=0)
    axes.grid(visible=True)
    axes.set_axisbelow(True)
    axes.ticklabel_format(axis="y", useOffset=False)
    if panel.title:
        axes.set_title(panel.title, loc="left")
    axes.set_ylabel(panel.y_label)
    if last_row:
        axes.set_xlabel(panel.x_label)


def _as_attributes(style: re.Match[str]) -> str:
    """A style attribute as single attributes: in a page, properties of SVG alone would be taken for faulty CSS."""
    attributes = []
    for declaration in style[1].split(";"):
        name, _, value = declaration.partition(":")
        name, value = name.strip(), value.strip()
        if name == "font":
            size, _, family = value.partition(" ")
            attributes += [f'font-size="{size}"', f'font-family="{family}"']
        elif name:
            attributes.append(f'{name}="{value}"')
    return " ".join(attributes)


def _escaped(text: str) -> str:
    return text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")
