"""How figures are laid out: numbers of the axes as matplotlib sets them, curves thinned and cut at the frame."""

from __future__ import annotations

import re
from itertools import pairwise
from pathlib import Path

import numpy as np
import pypdf
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from matplotlib.figure import Figure

from loopdoc.documents.plot_layout import TOLERANCE, WIDTH, layout, thinned
from loopdoc.documents.plot_output import save, to_svg
from loopdoc.documents.plot_scale import MOST_STEPS, Scale, view
from loopdoc.documents.plots import Curve, Drawing, Limit, Panel


def test_an_axis_has_the_numbers_of_matplotlib() -> None:
    """Axes of all lengths, and those whose ends are round, drawn by lot."""
    axes = Figure().subplots()
    axes.locator_params(axis="x", nbins=MOST_STEPS)
    axes.ticklabel_format(axis="x", useOffset=False, style="plain")
    lot = np.random.default_rng(5)
    spans = [*10.0 ** lot.uniform(-3.0, 4.0, 60), 1.0, 2.0, 2.5, 4.0, 5.0, 10.0, 40.0, 100.0, 0.2]
    for span in spans:
        # Of an axis far from nought and short, matplotlib leaves numbers out that stand on its ends.
        low = float(lot.uniform(-100.0, 100.0) * span) if span not in (1.0, 10.0, 100.0) else 0.0
        axes.set_xlim(low, low + span)
        places = axes.xaxis.get_majorticklocs()
        names = axes.xaxis.get_major_formatter().format_ticks(places)
        # A number that misses the end by a rounding stands on the axis.
        slack = 1e-9 * span
        expected = [name for name, at in zip(names, places, strict=True) if low - slack <= at <= low + span + slack]
        assert [name for _, name in Scale(low, low + span, 0.0, 100.0).ticks()] == expected, (low, span)


def test_numbers_stand_where_their_values_are() -> None:
    # Downwards, as the vertical axis of a picture runs.
    assert Scale(0.0, 10.0, 100.0, 0.0).ticks(step=5.0) == [(100.0, "0"), (50.0, "5"), (0.0, "10")]
    decades = Scale(0.01, 100.0, 0.0, 200.0, is_log=True).ticks()
    assert [name for _, name in decades] == ["0.01", "0.1", "1", "10", "100"]
    assert [place for place, _ in decades] == pytest.approx([0.0, 50.0, 100.0, 150.0, 200.0])
    # Less than two decades: 1, 2 and 5 times each.
    assert [name for _, name in Scale(0.3, 6.0, 0.0, 200.0, is_log=True).ticks()] == ["0.5", "1", "2", "5"]


def test_a_level_curve_has_an_axis_with_room_on_both_sides() -> None:
    assert view(np.full(3, 40.0), 0.0) == pytest.approx((38.0, 42.0))
    assert view(np.zeros(3), 0.0) == pytest.approx((-0.05, 0.05))
    low, high = view(np.array([1.0, np.nan, 1000.0]), 0.1, is_log=True)
    assert (low, high) == pytest.approx((10**-0.3, 10**3.3))


@given(st.lists(st.tuples(st.floats(0.0, 5.0), st.floats(-100.0, 100.0)), min_size=1, max_size=60))
def test_a_thinned_curve_passes_every_point_within_the_tolerance(steps: list[tuple[float, float]]) -> None:
    x = np.cumsum([step for step, _ in steps])
    y = np.array([height for _, height in steps])
    kept = thinned(np.stack((x, y), axis=-1), TOLERANCE)
    assert (kept[0], kept[-1]) == (0, len(x) - 1)
    for first, last in pairwise(kept):
        between = slice(first, last + 1)
        if x[last] > x[first]:
            line = y[first] + (y[last] - y[first]) * (x[between] - x[first]) / (x[last] - x[first])
            # Rounding of slopes over runs as short as the least float above nought is not asked about.
            assume(np.diff(x[between]).min() > 1e-9)
            assert np.abs(line - y[between]).max() <= TOLERANCE * (1 + 1e-6)


def test_few_points_are_left_of_a_smooth_curve() -> None:
    x = np.linspace(0.0, 200.0, 400)
    assert len(thinned(np.stack((x, 80.0 * np.exp(-x / 40.0)), axis=-1), TOLERANCE)) < 40
    assert thinned(np.stack((x, 3.0 * x), axis=-1), TOLERANCE) == [0, 399]


def one_panel(x: list[float], y: list[float], **more: object) -> Drawing:
    curve = Curve("a", "solid", np.array(x), np.array(y))
    return Drawing("one", ((Panel("", "time, s", "y", (curve,), **more),),))  # type: ignore[arg-type]


def test_a_curve_ends_at_the_frame_and_breaks_where_it_has_no_value() -> None:
    laid = layout(one_panel([0, 1, 2, 3, 4, 5, 6], [0, 2, 0, np.nan, 0.5, 0.5, 0.5], y_view=(0.0, 1.0)))
    (curve,) = (stroke for stroke in laid.strokes if stroke.width == 1.1)
    (frame,) = (stroke for stroke in laid.strokes if stroke.width == 0.5)
    (left, top), (right, bottom) = frame.pieces[0].min(axis=0), frame.pieces[0][2]
    assert [len(piece) for piece in curve.pieces] == [2, 2, 2]
    rising, falling, level = curve.pieces
    per_s = (right - left) / 6.0
    assert rising == pytest.approx(np.array([[left, bottom], [left + 0.5 * per_s, top]]))
    assert falling == pytest.approx(np.array([[left + 1.5 * per_s, top], [left + 2.0 * per_s, bottom]]))
    assert level == pytest.approx(np.array([[left + at * per_s, (top + bottom) / 2.0] for at in (4, 6)]))


def test_a_limit_far_off_does_not_flatten_the_curve() -> None:
    limits = (Limit("H 12", 12.0), Limit("HH 100", 100.0))
    letters = [one.content for one in layout(one_panel([0, 1], [0, 10], limits=limits)).letters]
    assert "H 12" in letters
    assert "HH 100" not in letters
    assert "100" not in letters


def test_lettering_stays_on_the_figure() -> None:
    curves = tuple(Curve(f"curve {index}", style, np.arange(3.0), np.arange(3.0) * 1e3)
                   for index, style in enumerate(("solid", "dashed", "dotted", "points")))  # fmt: skip
    panel = Panel("a panel", "time, s", "TIC-2014, °C", curves, (Limit("H 2000", 2000.0),))
    laid = layout(Drawing("two", ((panel,), (panel,)), "caption " * 60), with_caption=True)
    for one in laid.letters:
        assert 0.0 < one.x < WIDTH, one
        assert 0.0 < one.y < laid.height, one


def test_a_page_gets_text_as_text_and_the_marks_of_language() -> None:
    panel = Panel("", "x", "f & g", (Curve("", "solid", np.arange(2.0), np.array([0.5, 1.0])),))
    drawing = Drawing("a < b", ((panel,),), decimal_comma=True)
    svg = to_svg(drawing)
    assert svg.startswith('<svg role="img"')
    assert "<title>a &lt; b</title>" in svg
    assert ">f &amp; g</text>" in svg
    assert {"0,6", "0,8", "1,0"} <= set(re.findall(r">([^<>]+)</text>", svg))


def test_words_that_look_like_formulas_are_written_as_they_are(tmp_path: Path) -> None:
    drawing = Drawing("$x$", ((Panel("$a_b$", "x", "y", (Curve("", "solid", np.arange(2.0), np.arange(2.0)),)),),))
    save([drawing], tmp_path / "a.pdf")
    assert "$a_b$" in pypdf.PdfReader(tmp_path / "a.pdf").pages[0].extract_text()
