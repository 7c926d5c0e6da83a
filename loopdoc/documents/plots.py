"""Curves as figures: from numbers to SVG, PDF or PNG, through matplotlib's object interface.

Black on white, told apart by line style, so that a photocopy says the same as the screen.
"""

from __future__ import annotations

import io
import math
import re
import textwrap
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import as_file, files
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from matplotlib.figure import Figure, SubFigure

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
_PERIOD_IN = 0.34
"""Height of a second axis above the panels [in]."""
_NUMBER_PT, _X_NAME_PT, _Y_NAME_PT = 5.0, 15.0, 34.0
"""From the edge of a panel to the numbers of an axis, and to its name below, above or beside them [pt]."""
_CAPTION_LINE_IN, _CAPTION_CHARACTERS = 0.125, 172
"""Height of a line of a caption [in], and what fits on one."""
_ON_PAPER: dict[str, Any] = {"bbox": {"facecolor": "#ffffff", "edgecolor": "none", "pad": 0.2}, "zorder": 1.8}
"""A label inside a panel covers the grid and the dotted lines, which would strike it through, but no curve."""


@dataclass(frozen=True, slots=True)
class Curve:
    """One line of a panel; ``x`` and ``y`` are (n,) in the panel's units."""

    label: str
    style: str
    """solid, dashed, dash-dotted, dotted, or points that no line joins."""
    x: NDArray[np.float64]
    y: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Limit:
    """A horizontal line with its name, such as an alarm."""

    label: str
    value: float


@dataclass(frozen=True, slots=True)
class Mark:
    """A vertical stroke from a curve to what it is measured against, with its name; a dot where both are one."""

    label: str
    x: float
    y: float
    to: float
    is_left: bool = False
    """True where the name stands on the left of it."""
    is_below: bool = False
    """True where the name stands below the lower end of the stroke, not beside its middle."""


@dataclass(frozen=True, slots=True)
class Panel:
    """One set of axes."""

    title: str
    x_label: str
    y_label: str
    curves: tuple[Curve, ...]
    limits: tuple[Limit, ...] = ()
    marks: tuple[Mark, ...] = ()
    guides: tuple[float, ...] = ()
    """Places on the horizontal axis at which a thin line stands."""
    x_is_log: bool = False
    y_is_log: bool = False
    y_view: tuple[float, float] | None = None
    """Ends of the vertical axis; by the curves where none are given."""
    y_step: float | None = None
    """Distance of the numbers of the vertical axis; by its length where none is given."""
    period: tuple[str, float] | None = None
    """Of a frequency axis in rad/s: name of a second axis of periods, and how many seconds its unit has."""


@dataclass(frozen=True, slots=True)
class Drawing:
    """Panels in rows; each row has as many columns as the first."""

    title: str
    """What the figure shows, for those who cannot see it."""
    rows: tuple[tuple[Panel, ...], ...]
    caption: str = ""
    """Scenario and assumptions; written below a figure that stands alone. A document sets it as its own text."""
    decimal_comma: bool = False
    """Whether the numbers of the axes have a comma in the place of the point."""


def to_svg(drawing: Drawing) -> str:
    """The drawing as SVG text for a page: text stays text, and the same drawing gives the same bytes."""
    with _style(drawing.title) as figure:
        figure.set_size_inches(WIDTH_IN, _height_in(drawing))
        _draw(figure, drawing, _height_in(drawing))
        buffer = io.StringIO()
        figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    text = buffer.getvalue()
    text = text[text.index("<svg") :].replace(FONT_FAMILY, PAGE_FAMILY)
    # A style sheet inside the figure would hold for the whole page around it.
    text = re.sub(r"<(metadata|style)\b.*?</\1>\s*", "", text, flags=re.DOTALL)
    text = re.sub(r'style="([^"]*)"', _as_attributes, text)
    text = re.sub(r' transform="rotate\(-0 [^"]*"', "", text)
    # Matplotlib numbers its groups anew in each figure; a page may hold several.
    text = re.sub(r'(<g) id="[^"]*"', r"\1", text)
    # Groups that set nothing cost as much in a page as what they hold.
    count = 1
    while count:
        text, count = re.subn(r"<g>\s*((?:[^<]|<(?!/?g\b))*?)\s*</g>", r"\1", text)
    if drawing.decimal_comma:
        text = re.sub(r">([-−]?\d+)\.(\d+)</text>", r">\1,\2</text>", text)
    return re.sub(r"(<svg[^>]*>)", rf"\1<title>{_escaped(drawing.title)}</title>", text, count=1).replace(
        "<svg", '<svg role="img"', 1
    )


def save(drawings: Sequence[Drawing], path: Path) -> None:
    """Write drawings with their captions: as .pdf a page for each, as .svg or .png one above the other.

    Raises
    ------
    ValueError
        The ending is another.
    """
    if path.suffix not in (".svg", ".png", ".pdf"):
        raise ValueError(f"a plot is written as .svg, .png or .pdf, not as `{path.suffix or path.name}`")
    with _style(drawings[0].title) as figure:
        if path.suffix == ".pdf":
            from matplotlib.backends.backend_pdf import PdfPages

            title = ", ".join(drawing.title for drawing in drawings)
            # No creation date: the same drawing gives the same bytes.
            with PdfPages(path, metadata={"CreationDate": None, "Title": title}) as pages:
                for drawing in drawings:
                    figure.clear()
                    height_in = _height_in(drawing) + _caption_in(drawing)
                    figure.set_size_inches(WIDTH_IN, height_in)
                    _draw(figure, drawing, height_in)
                    pages.savefig(figure)
            return
        heights = [_height_in(drawing) + _caption_in(drawing) for drawing in drawings]
        figure.set_size_inches(WIDTH_IN, sum(heights))
        parts = figure.subfigures(len(drawings), 1, squeeze=False, height_ratios=heights)[:, 0]
        for part, drawing, height_in in zip(parts, drawings, heights, strict=True):
            _draw(part, drawing, height_in)
        metadata = {"Date": None} if path.suffix == ".svg" else {"Software": None}
        figure.savefig(path, dpi=200, metadata=metadata, facecolor="white")


def _height_in(drawing: Drawing) -> float:
    rows = len(drawing.rows)
    return _top_in(drawing) + rows * _PANEL_IN + (rows - 1) * _BETWEEN_IN + _BOTTOM_IN


def _top_in(drawing: Drawing) -> float:
    return _TOP_IN + (_PERIOD_IN if any(panel.period for panel in drawing.rows[0]) else 0.0)


def _caption_lines(drawing: Drawing) -> list[str]:
    return textwrap.wrap(drawing.caption, _CAPTION_CHARACTERS)


def _caption_in(drawing: Drawing) -> float:
    lines = len(_caption_lines(drawing))
    return _CAPTION_LINE_IN * (lines + 1) if lines else 0.0


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
        "text.parse_math": False,
        "pdf.fonttype": 42,
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


def _draw(figure: Figure | SubFigure, drawing: Drawing, height_in: float) -> None:
    """Draw into a figure of this height, its caption in what is below the panels and the legend."""
    rows, columns = len(drawing.rows), len(drawing.rows[0])
    caption_in = height_in - _height_in(drawing)
    # Set by hand: an automatic layout measures every text several times and takes as long as all the rest.
    figure.subplots_adjust(
        left=_LEFT_IN / WIDTH_IN,
        right=1.0 - _RIGHT_IN / WIDTH_IN,
        top=1.0 - _top_in(drawing) / height_in,
        bottom=(_BOTTOM_IN + caption_in) / height_in,
        wspace=0.34,
        hspace=_BETWEEN_IN / _PANEL_IN,
    )
    if caption_in:
        left, top = _LEFT_IN / WIDTH_IN / 4.0, caption_in / height_in
        text = "\n".join(_caption_lines(drawing))
        figure.text(left, top, text, va="top", ha="left", fontsize=6.5, linespacing=1.2)
    axes = figure.subplots(rows, columns, squeeze=False)
    for row, panels in enumerate(drawing.rows):
        for column, panel in enumerate(panels):
            _draw_panel(axes[row][column], panel, last_row=row == rows - 1)
    entries: dict[str, Any] = {}
    for panel_axes in [*axes[:, 0], *axes[:, 1:].flat]:
        for handle, label in zip(*panel_axes.get_legend_handles_labels(), strict=True):
            entries.setdefault(label, handle)
    if len(entries) > 1:
        figure.legend(
            list(entries.values()), list(entries), loc="lower center", ncols=len(entries),
            bbox_to_anchor=(0.5, caption_in / height_in),
        )  # fmt: skip


def _draw_panel(axes: Any, panel: Panel, *, last_row: bool) -> None:
    # Only curves of an axis of given ends leave the panel; a page is quicker without the cut.
    is_cut = panel.y_view is not None
    styles = {
        "solid": ("-", 1.1, "#000000"),
        "dashed": ("--", 0.9, "#444444"),
        "dash-dotted": ("-.", 0.9, "#000000"),
        "dotted": (":", 0.8, "#000000"),
        "points": ("none", 0.0, "#777777"),
    }
    for curve in panel.curves:
        line, width, colour = styles[curve.style]
        x, y = _thinned(curve)
        axes.plot(
            x, y, linestyle=line, linewidth=width, color=colour, label=curve.label,
            marker="." if curve.style == "points" else "none", markersize=2.5, clip_on=is_cut,
        )  # fmt: skip
    if panel.x_is_log:
        axes.set_xscale("log")
    if panel.y_is_log:
        axes.set_yscale("log")
    if panel.y_view:
        axes.set_ylim(*panel.y_view)
    low, high = axes.get_ylim()
    for limit in panel.limits:
        # A limit far off would flatten the curves; it is named in the caption's table instead.
        if low - 0.6 * (high - low) <= limit.value <= high + 0.6 * (high - low):
            axes.axhline(limit.value, linewidth=0.6, color="#000000", dashes=(6, 2, 1, 2), clip_on=is_cut)
            # The name stands on the side away from the nearer end of the axis.
            is_high = limit.value > (low + high) / 2
            axes.annotate(
                limit.label, (1.0, limit.value), xycoords=("axes fraction", "data"),
                xytext=(-2, -1.5 if is_high else 1.5), textcoords="offset points",
                ha="right", va="top" if is_high else "bottom", fontsize=6.5, **_ON_PAPER,
            )  # fmt: skip
    for guide in panel.guides:
        axes.axvline(guide, linewidth=0.5, color="#000000", dashes=(1, 2), clip_on=False, zorder=1.5)
    for mark in panel.marks:
        _draw_mark(axes, mark)
    _draw_scales(axes, panel, last_row=last_row)
    if panel.title:
        # Set by hand, like all places here: an automatic one measures every text above the panel.
        axes.set_title(panel.title, loc="left", y=1.0 + (_PERIOD_IN / _PANEL_IN if panel.period else 0.0))


def _thinned(curve: Curve) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """The curve in few points, of each stretch the lowest and the highest, so that no peak is cut off."""
    stretch = 2 * len(curve.x) // POINTS_DRAWN
    if stretch < 3 or curve.style == "points":
        return curve.x, curve.y
    whole = len(curve.y) // stretch * stretch
    y = curve.y[:whole].reshape(-1, stretch)
    start = np.arange(0, whole, stretch)
    ends = np.array([0, len(curve.y) - 1])
    kept = np.unique(np.concatenate([start + y.argmin(axis=1), start + y.argmax(axis=1), ends]))
    return curve.x[kept], curve.y[kept]


def _draw_mark(axes: Any, mark: Mark) -> None:
    if mark.y == mark.to:
        axes.plot([mark.x], [mark.y], marker="o", markersize=3.0, color="#000000", linestyle="none")
    else:
        axes.plot([mark.x, mark.x], [mark.y, mark.to], marker="_", markersize=5.0, linewidth=1.6, color="#000000")
    beside = -4 if mark.is_left else 4
    if mark.y == mark.to:
        at, offset, anchor = mark.y, (0, 4), "bottom"
    elif mark.is_below:
        at, offset, anchor = min(mark.y, mark.to), (beside, -1), "top"
    else:
        middle = math.sqrt(mark.y * mark.to) if axes.get_yscale() == "log" else (mark.y + mark.to) / 2.0
        at, offset, anchor = middle, (beside, 0), "center"
    axes.annotate(
        mark.label, (mark.x, at), xytext=offset, textcoords="offset points",
        ha="right" if mark.is_left else "left", va=anchor, fontsize=6.5, **_ON_PAPER,
    )  # fmt: skip


def _draw_scales(axes: Any, panel: Panel, *, last_row: bool) -> None:
    """Strokes, numbers and names of the axes.

    The places of the numbers are matplotlib's; they are drawn here, since its axes make several objects of each
    stroke, which takes four times as long as all the rest of a figure.
    """
    axes.margins(x=0)
    axes.xaxis.set_visible(False)
    axes.yaxis.set_visible(False)
    x = _numbers(*axes.get_xlim(), is_log=panel.x_is_log)
    y = _numbers(*axes.get_ylim(), is_log=panel.y_is_log, step=panel.y_step)
    along_x, along_y = axes.get_xaxis_transform(), axes.get_yaxis_transform()
    grid: dict[str, Any] = {"linewidth": 0.3, "color": "#999999", "zorder": 0.5, "clip_on": False}
    axes.vlines(list(x), 0.0, 1.0, transform=along_x, **grid)
    axes.hlines(list(y), 0.0, 1.0, transform=along_y, **grid)
    _draw_scale(axes, x if last_row else dict.fromkeys(x, ""), panel.x_label if last_row else "", side="bottom")
    _draw_scale(axes, y, panel.y_label, side="left")
    if panel.period:
        name, unit_s = panel.period
        low, high = (2.0 * math.pi / unit_s / frequency for frequency in reversed(axes.get_xlim()))
        periods = _numbers(low, high, is_log=True)
        at = {2.0 * math.pi / unit_s / period: number for period, number in periods.items()}
        _draw_scale(axes, at, name, side="top")


def _numbers(low: float, high: float, *, is_log: bool, step: float | None = None) -> dict[float, str]:
    """Where an axis has strokes, and the number at each; of a logarithmic one the decades, in plain figures."""
    from matplotlib.ticker import LogLocator, MaxNLocator, MultipleLocator, ScalarFormatter

    if is_log:
        return {at: f"{at:g}" for at in LogLocator().tick_values(low, high) if low <= at <= high}
    locator = MultipleLocator(step) if step else MaxNLocator(MOST_TICKS, steps=[1, 2, 2.5, 5, 10])
    shown = [at for at in map(float, locator.tick_values(low, high)) if low <= at <= high]
    formatter = ScalarFormatter(useOffset=False)
    formatter.set_scientific(False)
    formatter.create_dummy_axis()
    assert formatter.axis is not None
    formatter.axis.set_view_interval(low, high)
    return dict(zip(shown, formatter.format_ticks(shown), strict=True))


def _draw_scale(axes: Any, numbers: Mapping[float, str], name: str, *, side: Literal["bottom", "left", "top"]) -> None:
    """Strokes with their numbers along one side of a panel, and the name of what they count."""
    from matplotlib.markers import TICKDOWN, TICKLEFT, TICKUP

    upright = side == "left"
    along = axes.get_yaxis_transform() if upright else axes.get_xaxis_transform()
    edge = 1.0 if side == "top" else 0.0
    places = [(edge, at) if upright else (at, edge) for at in numbers]
    marker = {"bottom": TICKDOWN, "left": TICKLEFT, "top": TICKUP}[side]
    axes.plot(*zip(*places, strict=True), transform=along, linestyle="none", marker=marker, markersize=3.5,
              markeredgewidth=0.5, color="#000000", clip_on=False, scalex=False, scaley=False)  # fmt: skip
    outward = (-1.0, 0.0) if upright else (0.0, 1.0 if side == "top" else -1.0)
    placed = {"va": "center" if upright else "bottom" if side == "top" else "top"}
    placed["ha"] = "right" if upright else "center"
    for place, number in zip(places, numbers.values(), strict=True):
        if number:
            offset = (_NUMBER_PT * outward[0], _NUMBER_PT * outward[1])
            axes.annotate(number, place, xycoords=along, xytext=offset, textcoords="offset points",
                          fontsize=6.5 if side == "top" else 7, **placed)  # fmt: skip
    if name:
        away = _Y_NAME_PT if upright else _X_NAME_PT
        axes.annotate(name, (edge, 0.5) if upright else (0.5, edge), xycoords="axes fraction",
                      xytext=(away * outward[0], away * outward[1]), textcoords="offset points",
                      rotation=90 if upright else 0, ha="center", va=placed["va"])  # fmt: skip


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
