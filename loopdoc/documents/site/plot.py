"""The time responses of a chain as data for the page's own plot: every upset, in few points that keep the shape."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from loopdoc.documents.language import ENGLISH
from loopdoc.documents.plots import Curve, Panel
from loopdoc.documents.responses.override_story import override_panels, override_upset
from loopdoc.documents.responses.response_figure import panels
from loopdoc.documents.responses.split_range_story import split_panels, split_upset
from loopdoc.documents.responses.upset_story import upset_name
from loopdoc.engineering.comparison import Comparison
from loopdoc.engineering.override import Override
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.split_range import SplitRange

TOLERANCE = 0.001
"""Largest distance of the points left out from the line drawn, as a share of the height of the panel's curves."""
MOST_POINTS = 600
"""Points of one curve, however it runs."""


def plot_data(plant: Plant, comparison: Comparison) -> dict[str, Any]:
    """The responses of a chain to every upset, ready to be written as JSON."""
    return {
        "tag": comparison.dynamics.chain.lead.tag,
        "upsets": [
            {
                "name": upset_name(comparison, entry),
                "panels": [_panel(panel) for panel in panels(plant, comparison, entry)],
            }
            for entry in comparison.scenarios
        ],
    }


def split_plot_data(plant: Plant, split: SplitRange) -> dict[str, Any]:
    """The responses of a split range as a whole, likewise."""
    return {
        "tag": split.lead.tag,
        "upsets": [
            {
                "name": split_upset(split, response),
                "panels": [_panel(panel) for panel in split_panels(plant, split, response)],
            }
            for response in split.responses
        ],
    }


def override_plot_data(plant: Plant, found: Override) -> dict[str, Any]:
    """The responses of an override as a whole, as written and the other way."""
    return {
        "tag": found.function.tag,
        "upsets": [
            {
                "name": f"{override_upset(found, entry).rstrip(',')}, "
                f"{ENGLISH.how_followed(found.follows(found.normal, as_written=as_written))}",
                "panels": [_panel(panel) for panel in override_panels(plant, found, entry, as_written=as_written)],
            }
            for entry in found.responses
            for as_written in (True, False)
        ],
    }


def _panel(panel: Panel) -> dict[str, Any]:
    curves = [(curve, *_finite(curve)) for curve in panel.curves]
    heights = [float(np.ptp(y)) for _, _, y in curves if len(y)]
    height = max(heights, default=0.0)
    digits = _digits(height)
    return {
        "x": panel.x_label,
        "y": panel.y_label,
        "digits": min(digits, 6),
        "curves": [_curve(curve, x, y, height, digits) for curve, x, y in curves],
        "limits": [{"name": limit.label, "value": limit.value} for limit in panel.limits],
    }


def _finite(curve: Curve) -> tuple[FloatArray, FloatArray]:
    kept = np.isfinite(curve.x) & np.isfinite(curve.y)
    return curve.x[kept], curve.y[kept]


def _curve(curve: Curve, x: FloatArray, y: FloatArray, height: float, digits: int) -> dict[str, Any]:
    kept = thinned(x, y, TOLERANCE * height)
    return {
        "name": curve.label,
        "style": curve.style,
        "x": [float(f"{value:.6g}") for value in x[kept]],
        "y": [round(float(value), digits + 2) for value in y[kept]],
    }


def _digits(height: float) -> int:
    """Digits after the point with which a curve of this height is read."""
    return max(0, 2 - math.floor(math.log10(height))) if height > 0.0 else 2


def thinned(x: FloatArray, y: FloatArray, tolerance: float) -> list[int]:
    """Indices of the points whose joining lines pass every other point within ``tolerance``, counted along ``y``.

    Source: D. H. Douglas, T. K. Peucker, Cartographica 10:112-122, 1973, with the distance taken along one axis
    since the two axes have different units.
    """
    if len(x) < 3:
        return list(range(len(x)))
    kept = {0, len(x) - 1}
    waiting = [(0, len(x) - 1)]
    # The widest gap first would cost a queue; a limit on points only cuts curves that no screen resolves.
    while waiting and len(kept) < MOST_POINTS:
        first, last = waiting.pop(0)
        if last - first < 2:
            continue
        inside = slice(first + 1, last)
        share = (x[inside] - x[first]) / ((x[last] - x[first]) or 1.0)
        distance = np.abs(y[inside] - (y[first] + share * (y[last] - y[first])))
        worst = int(np.argmax(distance))
        if distance[worst] > tolerance:
            at = first + 1 + worst
            kept.add(at)
            waiting += [(first, at), (at, last)]
    return sorted(kept)
