"""What a recorded output moved, in the terms of the register's process.

A process is stated per percent of the final element's opening, or per unit of the secondary's measurement.
A record holds what the control system stores: the controller's output, the opening, or the secondary's
measurement or setpoint. Between them stand the output block, the direction of the valve, the output span of a
cascade and the branches of a split range.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.direction import Undecided, curve_sign, element_sign
from loopdoc.engineering.functions import curve_of
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route
from loopdoc.engineering.stages import Lacking
from loopdoc.register.model import FinalElement, Function, Loop, known
from loopdoc.register.quantity import Range
from loopdoc.register.units import UNITS, Unit, convert, convert_difference, same_kind

FloatArray = NDArray[np.float64]

OUTPUT, OPENING, SECONDARY = "output", "opening", "secondary"
"""What a record may hold: the controller's output, the final element's opening or speed, the secondary's
measurement or setpoint."""


@dataclass(frozen=True, slots=True, eq=False)
class Commanded:
    """A record in the terms of a loop's process."""

    tag: str
    """The final element or the secondary that moved."""
    what: str
    """What of it moved: its opening, or its measurement as asked for or as recorded."""
    moved: FloatArray
    """(n,) in `unit`."""
    unit: Unit
    """Percent of opening, or the unit of the secondary's range."""
    measurement: FloatArray
    """(n,) in `measurement_unit`."""
    measurement_unit: Unit
    """The unit of the loop's range."""
    branch: bool
    """Whether the final element is one of a split range, with a process of its own."""
    reversed: bool
    """Whether the opening falls as the output rises."""
    selectors: tuple[str, ...]
    """Selectors between the output and what moved: they must have let this output through."""


class _Lacking(Exception):
    """Carries the reason out of the steps below; never leaves this module."""


def commanded(
    plant: Plant,
    tag: str,
    *,
    recorded: str,
    moved: FloatArray,
    unit: Unit,
    measurement: FloatArray,
    measurement_unit: Unit,
) -> Commanded | Lacking:
    """A record in the terms of the process of a loop, or why the register does not say how to convert it."""
    loop = plant.controlled.get(tag)
    if loop is None:
        return Lacking(f"the register has no controller {tag}")
    if not loop.routes:
        return Lacking(f"the output of {tag} leads nowhere")
    try:
        own = _range_of(loop.loop)
        measured = _reading(measurement, measurement_unit, own, f"the measurement of {tag}")
        if all(isinstance(route.end, FinalElement) for route in loop.routes):
            route, values = _opening(loop, recorded, moved, unit)
            element = route.end
            assert isinstance(element, FinalElement)
            what, moved_unit, turned = "opening", UNITS["%"], recorded == OUTPUT and _is_reversed(route)
        elif len(loop.routes) == 1:
            route, turned = loop.routes[0], False
            values, moved_unit = _secondary(loop, route, recorded, moved, unit)
            what = "measurement or setpoint" if recorded == SECONDARY else "setpoint"
        else:
            raise _Lacking(f"the output of {tag} leads to several loops; test each by itself")
    except _Lacking as lacking:
        return Lacking(str(lacking))
    return Commanded(
        tag=route.end.tag,
        what=what,
        moved=values,
        unit=moved_unit,
        measurement=measured,
        measurement_unit=own.unit,
        branch=route.branch is not None,
        reversed=turned,
        selectors=tuple(f.tag for f in route.via if _is_selector(f)) if recorded == OUTPUT else (),
    )


def _range_of(loop: Loop) -> Range:
    measurement = known(loop.measurement)
    own = known(measurement.range) if measurement else None
    if own is None:
        raise _Lacking(f"the measurement range of {loop.tag} is not known")
    return own


def _reading(values: FloatArray, unit: Unit, own: Range, what: str) -> FloatArray:
    """Readings in the unit of a range; percent are percent of the range where its unit is no fraction."""
    if same_kind(unit, own.unit):
        return _mapped(values, lambda value: convert(value, unit, own.unit))
    if unit.symbol == "%":
        return own.low + values * own.span / 100.0
    raise _Lacking(f"{what} is in `{own.unit}` and the record in `{unit}`; write the record in `{own.unit}` or in `%`")


# ---------------------------------------------------------------- final elements


def _opening(loop: ControlledLoop, recorded: str, moved: FloatArray, unit: Unit) -> tuple[Route, FloatArray]:
    """The final element that moved, and its opening [%]."""
    tags = " and ".join(route.end.tag for route in loop.routes)
    if recorded == SECONDARY:
        raise _Lacking(f"{loop.tag} moves {tags} and commands no loop; name the column `output` or `opening`")
    if not same_kind(unit, "%"):
        raise _Lacking(f"{loop.tag} moves {tags}: write the {recorded} in `%`, not in `{unit}`")
    percent = _mapped(moved, lambda value: convert(value, unit, "%"))
    split = any(route.branch is not None for route in loop.routes)
    if not split:
        (route,) = loop.routes
        if recorded == OPENING:
            return route, percent
        return route, _turned(route, _carried(loop, route, percent, UNITS["%"], UNITS["%"]))
    if recorded == OPENING:
        raise _Lacking(f"{loop.tag} moves {tags}: name the column `output`, so that its split range says which moved")
    openings = [(route, _turned(route, _in_branch(route, percent))) for route in loop.routes]
    moving = [(route, opening) for route, opening in openings if np.ptp(opening) > 0.0]
    if len(moving) != 1:
        those = " and ".join(route.end.tag for route, _ in moving)
        raise _Lacking(
            f"the test moves {those} together; test each in its own part of the output"
            if moving
            else f"the output stays where neither of {tags} moves"
        )
    return moving[0]


def _in_branch(route: Route, percent: FloatArray) -> FloatArray:
    assert route.branch is not None
    branch = route.branch.to("%")
    if branch.span == 0.0:
        raise _Lacking(f"the split range gives {route.end.tag} no part of the output")
    clipped: FloatArray = np.clip(100.0 * (percent - branch.low) / branch.span, 0.0, 100.0)
    return clipped


def _is_reversed(route: Route) -> bool:
    """Whether the opening falls as the output rises."""
    assert isinstance(route.end, FinalElement)
    sign = element_sign(route.end)
    if isinstance(sign, Undecided):
        raise _Lacking(f"{sign.reason}; write it, or record the `opening`")
    downwards = route.branch is not None and route.branch.low > route.branch.high
    falling = sum(known(function.kind) == "characteriser" and curve_sign(function) == -1 for function in route.via)
    return ((sign.sign < 0) != downwards) != (falling % 2 == 1)


def _turned(route: Route, percent: FloatArray) -> FloatArray:
    assert isinstance(route.end, FinalElement)
    sign = element_sign(route.end)
    if isinstance(sign, Undecided):
        raise _Lacking(f"{sign.reason}; write it, or record the `opening`")
    return percent if sign.sign > 0 else 100.0 - percent


# ---------------------------------------------------------------- secondaries


def _secondary(
    loop: ControlledLoop, route: Route, recorded: str, moved: FloatArray, unit: Unit
) -> tuple[FloatArray, Unit]:
    """What moved in the unit of the secondary's range."""
    assert isinstance(route.end, Loop)
    tag, own = route.end.tag, _range_of(route.end)
    if recorded == OPENING:
        raise _Lacking(
            f"{loop.tag} commands {tag}, and its process is per `{own.unit}` of {tag}: record that as "
            f"`secondary [{own.unit}]`"
        )
    if recorded == SECONDARY:
        return _reading(moved, unit, own, f"the measurement of {tag}"), own.unit
    _need_followed(loop, route)
    output = known(loop.controller.output)
    span = known(output.span) if output else None
    shaped = any(known(function.kind) == "characteriser" for function in route.via)
    asked_in = span.unit if shaped and span else own.unit  # a curve takes what enters it in a unit of its own
    if unit.symbol != "%":
        if not same_kind(unit, asked_in):
            raise _Lacking(f"{loop.tag} commands {tag} in `{asked_in}`; write its output in `{asked_in}` or in `%`")
        written = _mapped(moved, lambda value: convert(value, unit, asked_in))
        return _carried(loop, route, written, asked_in, own.unit), own.unit
    if span is None or (span.unit.difference_kind != own.unit.difference_kind and not shaped):
        raise _Lacking(
            f"the output span of {loop.tag} does not say what a percent of output asks of {tag}; record that as "
            f"`secondary [{own.unit}]`"
        )
    asked = span.low + moved * span.span / 100.0
    through_sum = any(known(function.kind) == "sum" for function in route.via)
    if not shaped and (through_sum or span.unit.kind != own.unit.kind):
        # An amount that is added is a difference of readings.
        added = _mapped(asked, lambda value: convert_difference(value, span.unit, own.unit))
        return _carried(loop, route, added, own.unit, own.unit), own.unit
    asked = _mapped(asked, lambda value: convert(value, span.unit, asked_in))
    return _carried(loop, route, asked, asked_in, own.unit), own.unit


def _carried(loop: ControlledLoop, route: Route, values: FloatArray, unit: Unit, end: Unit) -> FloatArray:
    """What the functions on the way make of an output in a unit, in the unit of the end."""
    _need_followed(loop, route)
    commander = loop.tag
    for function in route.via:
        kind = known(function.kind)
        if kind == "sum":
            values = function.weights.get(commander, 1.0) * values
        elif kind == "characteriser":
            curve = curve_of(function, given=unit, gives=end)
            if isinstance(curve, Undecided):
                raise _Lacking(f"{curve.reason}; record {_instead(route)}")
            values, unit = np.interp(values, curve.inputs, curve.outputs), end
        commander = function.tag
    return values


def _need_followed(loop: ControlledLoop, route: Route) -> None:
    """Refuse a way through a function of which the register does not say what it makes of an output."""
    for function in route.via:
        if not (_is_selector(function) or known(function.kind) in ("sum", "characteriser", "split range")):
            raise _Lacking(
                f"what {function.tag} makes of the output of {loop.tag} does not follow from the register; record "
                f"{_instead(route)}"
            )


def _instead(route: Route) -> str:
    return f"the {'`opening`' if isinstance(route.end, FinalElement) else '`secondary`'} of {route.end.tag}"


def _is_selector(function: Function) -> bool:
    return known(function.kind) in ("high select", "low select")


def _mapped(values: FloatArray, conversion: Callable[[float], float]) -> FloatArray:
    """Every value converted; a conversion of units is a line, so two points give it."""
    at_0, at_1 = conversion(0.0), conversion(1.0)
    return values if (at_0, at_1) == (0.0, 1.0) else at_0 + values * (at_1 - at_0)
