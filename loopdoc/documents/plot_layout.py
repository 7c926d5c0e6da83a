"""Figures laid out: from panels with curves to strokes and lettering in points on paper.

Set by hand and by the metrics of the fonts, so that whatever writes the figure gives the same picture.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from loopdoc.documents.drawing import text_width
from loopdoc.documents.plot_scale import Scale, view
from loopdoc.documents.plots import Curve, Drawing, Limit, Mark, Panel
from loopdoc.engineering.process import FloatArray

WIDTH = 180 / 25.4 * 72
"""Of a figure [pt]: that of the text of a page."""
_LEFT, _RIGHT, _TOP, _BOTTOM = 39.6, 4.3, 14.4, 44.6
_PANEL, _BETWEEN = 86.4, 11.5
"""Height of a panel and of what is between two of them [pt]."""
_GAP = 0.34
"""Room between two columns, for the numbers and the name of the axis, in widths of a panel."""
_PERIOD = 24.5
"""Height of a second axis above the panels [pt]."""
_CAPTION_LINE, _CAPTION_CHARACTERS = 9.0, 172
"""Height of a line of a caption [pt], and what fits on one."""
_NAME, _NUMBER, _NOTE = 7.5, 7.0, 6.5
"""Type sizes: names of axes and panels, numbers, and what stands in a panel [pt]."""
_ASCENT, _DESCENT, _MIDDLE = 0.78, 0.22, 0.39
"""From the baseline to the top, the bottom and the middle of a line of figures, in type sizes."""
_TICK = 3.5
"""Length of a tick, and its distance from the number [pt]."""
_HANDLE, _HANDLE_GAP, _ENTRY_GAP = 14.0, 5.6, 14.0
"""Of the legend: a piece of each line, from there to its name, and from one entry to the next [pt]."""
POINTS_DRAWN = 400
"""Points of one curve that are looked at: finer than a printer's dot at this width."""
TOLERANCE = 0.06
"""How far a curve may pass from a point that is left out [pt]: less than a tenth of the width of its line."""
_STYLES: dict[str, tuple[float, str, tuple[float, ...]]] = {
    "solid": (1.1, "#000000", ()),
    "dashed": (0.9, "#444444", (3.33, 1.44)),
    "dash-dotted": (0.9, "#000000", (4.0, 1.5, 0.9, 1.5)),
    "dotted": (0.8, "#000000", (0.8, 1.32)),
    "points": (2.2, "#777777", ()),
}
"""Width [pt], colour and dashes of a curve; the diameter where it is of points."""


@dataclass(frozen=True, slots=True)
class Stroke:
    """Lines of one width and colour; ``pieces`` are (n, 2) places from the left and the top of the figure [pt]."""

    pieces: Sequence[FloatArray]
    width: float
    colour: str = "#000000"
    dash: tuple[float, ...] = ()
    is_dots: bool = False
    """Whether a dot stands at each place, and no line joins them."""


@dataclass(frozen=True, slots=True)
class Lettering:
    """One line of text: where its baseline begins, is in the middle or ends [pt]."""

    x: float
    y: float
    content: str
    size: float
    anchor: Literal["start", "middle", "end"] = "start"
    is_bold: bool = False
    is_turned: bool = False
    """Whether it reads from below upwards."""


@dataclass(slots=True)
class Layout:
    """A figure: its height [pt] and what is on it, in the order of drawing."""

    title: str
    height: float
    strokes: list[Stroke] = field(default_factory=list)
    letters: list[Lettering] = field(default_factory=list)


def layout(drawing: Drawing, *, with_caption: bool = False) -> Layout:
    """Lay a drawing out."""
    rows, columns = len(drawing.rows), len(drawing.rows[0])
    caption = textwrap.wrap(drawing.caption, _CAPTION_CHARACTERS) if with_caption else []
    top = _TOP + (_PERIOD if any(panel.period for panel in drawing.rows[0]) else 0.0)
    above = top + rows * _PANEL + (rows - 1) * _BETWEEN + _BOTTOM
    made = Layout(drawing.title, above + (_CAPTION_LINE * (len(caption) + 1) if caption else 0.0))
    wide = (WIDTH - _LEFT - _RIGHT) / (columns + _GAP * (columns - 1))
    for column, panels in enumerate(zip(*drawing.rows, strict=True)):
        left = _LEFT + column * wide * (1.0 + _GAP)
        is_log = panels[0].x_is_log
        across = np.concatenate([values for panel in panels for values in _across(panel)])
        x = Scale(*view(across, 0.0, is_log=is_log), left, left + wide, is_log)
        for row, panel in enumerate(panels):
            panel_top = top + row * (_PANEL + _BETWEEN)
            _lay_panel(made, panel, x, panel_top, is_last=row == rows - 1, comma=drawing.decimal_comma)
    first = [row[0] for row in drawing.rows]
    _lay_legend(made, [*first, *(panel for row in drawing.rows for panel in row[1:])], above)
    for index, line in enumerate(caption):
        made.letters.append(Lettering(_LEFT / 4.0, above + _NOTE * _ASCENT + index * 1.2 * _NOTE, line, _NOTE))
    return made


def _across(panel: Panel) -> Iterator[FloatArray]:
    yield from (curve.x for curve in panel.curves)
    yield np.array([*panel.guides, *(mark.x for mark in panel.marks)], dtype=float)


def _lay_panel(made: Layout, panel: Panel, x: Scale, top: float, *, is_last: bool, comma: bool) -> None:
    bottom = top + _PANEL
    ends, limits = _vertical(panel)
    y = Scale(*ends, bottom, top, panel.y_is_log)
    across, up = x.ticks(), y.ticks(panel.y_step)
    left, right = x.start, x.end
    grid = [*(_line(at, bottom, at, top) for at, _ in across), *(_line(left, at, right, at) for at, _ in up)]
    made.strokes.append(Stroke(grid, 0.3, "#999999"))
    for curve in panel.curves:
        made.strokes.append(_curve(curve, x, y))
    for limit, is_high in limits:
        at = float(y.at(limit.value))
        if top <= at <= bottom:
            made.strokes.append(Stroke([_line(left, at, right, at)], 0.6, dash=(3.6, 1.2, 0.6, 1.2)))
            # The name stands on the side away from the nearer end of the axis.
            baseline = at + 1.5 + _ASCENT * _NOTE if is_high else at - 1.5 - _DESCENT * _NOTE
            made.letters.append(Lettering(right - 2.0, baseline, limit.label, _NOTE, "end"))
    if panel.guides:
        lines = [_line(at, bottom, at, top) for at in x.at(np.array(panel.guides))]
        made.strokes.append(Stroke(lines, 0.5, dash=(0.5, 1.0)))
    for mark in panel.marks:
        _lay_mark(made, mark, x, y)
    frame = [np.array(((left, top), (right, top), (right, bottom), (left, bottom), (left, top)))]
    frame += [_line(at, bottom, at, bottom + _TICK) for at, _ in across]
    frame += [_line(left, at, left - _TICK, at) for at, _ in up]
    if panel.period:
        frame += _lay_period(made, *panel.period, x, top)
    made.strokes.append(Stroke(frame, 0.5))
    _lay_names(made, panel, x, (top, bottom), across if is_last else [], up, comma=comma)


def _lay_names(
    made: Layout, panel: Panel, x: Scale, ends: tuple[float, float], across: Sequence[tuple[float, str]],
    up: Sequence[tuple[float, str]], *, comma: bool,
) -> None:  # fmt: skip
    """Numbers and names of both axes, and the name of the panel; across only where there are numbers."""

    def number(at: float, below: float, name: str, anchor: Literal["middle", "end"]) -> None:
        made.letters.append(Lettering(at, below, name.replace(".", ",") if comma else name, _NUMBER, anchor))

    (top, bottom), left = ends, x.start
    for at, name in across:
        number(at, bottom + 12.5, name, "middle")
    for at, name in up:
        number(left - 2.0 * _TICK, at + _MIDDLE * _NUMBER, name, "end")
    if panel.title:
        above = top - 6.0 - (_PERIOD if panel.period else 0.0)
        made.letters.append(Lettering(left, above, panel.title, _NAME, is_bold=True))
    widest = max((text_width(name, _NUMBER) for _, name in up), default=0.0)
    beside = left - 2.0 * _TICK - widest - 4.0 - _DESCENT * _NAME
    made.letters.append(Lettering(beside, (top + bottom) / 2.0, panel.y_label, _NAME, "middle", is_turned=True))
    if across:
        made.letters.append(Lettering((x.start + x.end) / 2.0, bottom + 23.9, panel.x_label, _NAME, "middle"))


def _lay_period(made: Layout, name: str, unit_s: float, x: Scale, top: float) -> list[FloatArray]:
    """A second axis above, of the periods of the frequencies below; returns its ticks."""
    period = Scale(2.0 * math.pi / unit_s / x.high, 2.0 * math.pi / unit_s / x.low, x.end, x.start, is_log=True)
    ticks = period.ticks()
    made.letters += [Lettering(at, top - 8.4, number, _NOTE, "middle") for at, number in ticks]
    made.letters.append(Lettering((x.start + x.end) / 2.0, top - 17.5, name, _NAME, "middle"))
    return [_line(at, top, at, top - _TICK) for at, _ in ticks]


def _vertical(panel: Panel) -> tuple[tuple[float, float], list[tuple[Limit, bool]]]:
    """Ends of the vertical axis, and the limits that are drawn, each with whether it is in the upper half."""
    heights = [curve.y for curve in panel.curves]
    low, high = panel.y_view or view(np.concatenate(heights), 0.05, is_log=panel.y_is_log)
    # A limit far off would flatten the curves; it is named in the caption's table instead.
    room = 0.6 * (high - low)
    drawn = [limit for limit in panel.limits if low - room <= limit.value <= high + room]
    heights += [np.array([limit.value for limit in drawn]), *(np.array((mark.y, mark.to)) for mark in panel.marks)]
    ends = panel.y_view or view(np.concatenate(heights), 0.05, is_log=panel.y_is_log)
    return ends, [(limit, limit.value > (low + high) / 2) for limit in drawn]


def _lay_mark(made: Layout, mark: Mark, x: Scale, y: Scale) -> None:
    at, here, there = float(x.at(mark.x)), float(y.at(mark.y)), float(y.at(mark.to))
    beside = -4.0 if mark.is_left else 4.0
    if here == there:
        made.strokes.append(Stroke([np.array([[at, here]])], 4.0, is_dots=True))
        across, baseline = at, here - 4.0 - _DESCENT * _NOTE
    else:
        ends = [_line(at - 2.5, end, at + 2.5, end) for end in (here, there)]
        made.strokes += [Stroke([_line(at, here, at, there)], 1.6), Stroke(ends, 1.0)]
        across, baseline = at + beside, (here + there) / 2.0 + _MIDDLE * _NOTE
        if mark.is_below:
            baseline = max(here, there) + 1.0 + _ASCENT * _NOTE
    anchor: Literal["start", "end"] = "end" if mark.is_left else "start"
    made.letters.append(Lettering(across, baseline, mark.label, _NOTE, anchor))


def _lay_legend(made: Layout, panels: Sequence[Panel], bottom: float) -> None:
    """Names of the curves below the panels, where there are several."""
    styles = {curve.label: curve.style for panel in reversed(panels) for curve in reversed(panel.curves) if curve.label}
    names = list(dict.fromkeys(curve.label for panel in panels for curve in panel.curves if curve.label))
    if len(names) < 2:
        return
    widths = [_HANDLE + _HANDLE_GAP + text_width(name, _NUMBER) for name in names]
    left = (WIDTH - sum(widths) - _ENTRY_GAP * (len(names) - 1)) / 2.0
    for name, wide in zip(names, widths, strict=True):
        width, colour, dash = _STYLES[styles[name]]
        is_dots = styles[name] == "points"
        height = bottom - 10.3
        handle = np.array([[left + _HANDLE / 2.0, height]]) if is_dots else _line(left, height, left + _HANDLE, height)
        made.strokes.append(Stroke([handle], width, colour, dash, is_dots))
        made.letters.append(Lettering(left + _HANDLE + _HANDLE_GAP, bottom - 7.9, name, _NUMBER))
        left += wide + _ENTRY_GAP


def _line(x0: float, y0: float, x1: float, y1: float) -> FloatArray:
    return np.array(((x0, y0), (x1, y1)), dtype=float)


# ---------------------------------------------------------------- curves


def _curve(curve: Curve, x: Scale, y: Scale) -> Stroke:
    width, colour, dash = _STYLES[curve.style]
    places = np.stack((x.at(curve.x), y.at(curve.y)), axis=-1)
    if curve.style != "points":
        places = places[_outermost(places[:, 1])]
    is_drawn = np.isfinite(places).all(axis=-1)
    top, bottom = y.end, y.start
    if curve.style == "points":
        inside = is_drawn & (places[:, 1] >= top) & (places[:, 1] <= bottom)
        return Stroke([places[inside]], width, colour, is_dots=True)
    breaks = np.flatnonzero(np.diff(is_drawn)) + 1
    runs = [run for run in np.split(places, breaks) if np.isfinite(run[:1]).all()]
    pieces = [piece for run in runs for piece in _between(run[thinned(run, TOLERANCE)], top, bottom)]
    return Stroke(pieces, width, colour, dash)


def _outermost(values: FloatArray) -> NDArray[np.intp]:
    """Indices of the lowest and the highest value of each of many stretches, so that no peak is cut off."""
    stretch = 2 * len(values) // POINTS_DRAWN
    if stretch < 3:
        return np.arange(len(values))
    whole = len(values) // stretch * stretch
    stretches = values[:whole].reshape(-1, stretch)
    start = np.arange(0, whole, stretch)
    lowest, highest = start + stretches.argmin(axis=1), start + stretches.argmax(axis=1)
    return np.unique(np.concatenate([lowest, highest, [0, len(values) - 1]]))


def thinned(points: FloatArray, tolerance: float) -> list[int]:
    """Indices of points whose joining lines pass every other point within ``tolerance``, counted along the second axis.

    ``points`` is (n, 2), its first column not falling. Each line goes on for as long as it lies in the fan that every
    point passed leaves open, so that the time is proportional to n.
    Source: J. Sklansky, V. Gonzalez, Pattern Recognition 12:327-331, 1980, with the distance taken along one axis.
    """
    x, y = points[:, 0].tolist(), points[:, 1].tolist()
    kept, low, high = [0], -math.inf, math.inf
    for index in range(1, len(x)):
        run = x[index] - x[kept[-1]]
        slope = (y[index] - y[kept[-1]]) / run if run > 0.0 else math.nan
        if not low <= slope <= high:  # nor where the curve goes straight up
            if kept[-1] != index - 1:
                kept.append(index - 1)
                run = x[index] - x[index - 1]
            low, high = -math.inf, math.inf
            if run <= 0.0:
                kept.append(index)
                continue
            slope = (y[index] - y[kept[-1]]) / run
        low, high = max(low, slope - tolerance / run), min(high, slope + tolerance / run)
    if kept[-1] != len(x) - 1:
        kept.append(len(x) - 1)
    return kept


def _between(points: FloatArray, top: float, bottom: float) -> list[FloatArray]:
    """The pieces of a line that lie between two heights."""
    if len(points) and top <= points[:, 1].min() and points[:, 1].max() <= bottom:
        return [points]
    pieces: list[list[tuple[float, float]]] = []
    is_open = False
    for (x0, y0), (x1, y1) in pairwise(points.tolist()):
        rise = y1 - y0
        shares = ((top - y0) / rise, (bottom - y0) / rise) if rise else (0.0, 1.0 if top <= y0 <= bottom else 0.0)
        enter, leave = max(0.0, min(shares)), min(1.0, max(shares))
        if enter >= leave:
            is_open = False
            continue
        if not is_open or enter > 0.0:
            pieces.append([(x0 + enter * (x1 - x0), y0 + enter * rise)])
        pieces[-1].append((x0 + leave * (x1 - x0), y0 + leave * rise))
        is_open = leave == 1.0
    return [np.array(piece) for piece in pieces]
