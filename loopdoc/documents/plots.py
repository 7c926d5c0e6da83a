"""What a figure shows: panels with curves, limits and marks, in engineering units."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


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
