"""The plot of a process model fitted to a step test: measurement and fit, what is left over, what was moved."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from loopdoc.documents.plots import Curve, Drawing, Panel

FloatArray = NDArray[np.float64]
TIME_UNITS = ((7200.0, 3600.0, "h"), (600.0, 60.0, "min"), (0.0, 1.0, "s"))
"""From this length on [s], divide by this and write that."""


def step_test_drawing(
    title: str,
    caption: str,
    *,
    time_s: FloatArray,
    measurement: FloatArray,
    measurement_unit: str,
    moved: FloatArray,
    moved_label: str,
    fitted_time_s: FloatArray,
    fitted: FloatArray | None,
) -> Drawing:
    """Three panels under one another; without a fit, measurement and what was moved alone."""
    divisor, unit = next((by, unit) for least, by, unit in TIME_UNITS if float(time_s[-1]) >= least)
    axis = f"time, {unit}"
    t = time_s / divisor
    curves = [Curve("measurement", "points", t, measurement)]
    residual = []
    if fitted is not None:
        t_fitted = fitted_time_s / divisor
        left = measurement[np.searchsorted(time_s, fitted_time_s)] - fitted
        curves.append(Curve("fit", "solid", t_fitted, fitted))
        residual.append((Panel("", axis, f"residual, {measurement_unit}", (Curve("", "points", t_fitted, left),)),))
    above = (Panel(title, axis, f"measurement, {measurement_unit}", tuple(curves)),)
    # Each value is held until the next: the corners are drawn, not the slopes between samples.
    changes = np.flatnonzero(np.diff(moved)) + 1
    corners = np.concatenate(([0], np.repeat(changes, 2), [len(moved) - 1]))
    held = np.concatenate(([moved[0]], np.column_stack((moved[changes - 1], moved[changes])).ravel(), [moved[-1]]))
    below = (Panel("", axis, moved_label, (Curve("", "solid", t[corners], held),)),)
    return Drawing(title, (above, *residual, below), caption)
