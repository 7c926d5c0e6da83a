"""The tuning schedule of each unit: settings as configured, margins, the process models and where they come from."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.narrative.tuning_story import BASIS
from loopdoc.documents.schedules.schedule import (
    DASHES,
    NOT_APPLICABLE,
    Cell,
    Column,
    Group,
    Row,
    Schedule,
    ScheduleKind,
    Writer,
    page,
)
from loopdoc.documents.values import DASH
from loopdoc.documents.whereabouts import anchor, natural, unit_numbers, unit_of
from loopdoc.documents.wording import NO_BREAK, counted, listed, number_word, upper_first
from loopdoc.engineering.pairing import ControlledLoop
from loopdoc.register.model import Hold, Process, known
from loopdoc.register.quantity import display_number

KIND = ScheduleKind(
    "tuning-schedules", "Tuning schedule", "TS",
    signatures=("Settings entered by, date", "Settings verified by, date", "Accepted for operations by, date",
                "Remarks"),
)  # fmt: skip
COLUMNS = (
    Column("Controller", 5.0), Column("Service", 9.4), Column("Form", 4.4), Column("Action", 4.0),
    Column("Gain or band", 5.0), Column("Reset or repeats", 4.9), Column("Rate", 3.8),
    Column("Rate filter", 3.4), Column("Setpoint weight", 4.4), Column("Meas. filter", 3.8), Column("Interval", 3.9),
    Column("Gain margin", 4.2), Column("Phase margin", 4.2), Column("Ms", 3.2), Column("Crossover, rad/s", 4.7),
    Column("Speed ratio", 3.9), Column("Process model, by what is moved", 15.4), Column("Source", 5.6),
    Column("On hold", 6.0),
)  # fmt: skip
MARGINS = 5
CAUTION = (
    "Margins hold for the models beside them and for no other process; a model drifts with load and fouling. Try "
    "tuning changes only under supervision."
)
_TUNED = {
    "controller": ("action", "form", "gain", "proportional_band", "reset", "repeats", "rate", "derivative_filter",
                   "setpoint_weight", "interval", "output"),
    "measurement": ("range", "filter"),
    "process": (),
}  # fmt: skip
"""What a tuning hangs on; of the process all."""


def tuning_schedules(basis: Basis) -> Iterator[Page]:
    """The schedule of each unit that has a controller."""
    for number in unit_numbers(basis.plant):
        own = [loop for loop in basis.plant.controlled.values() if unit_of(loop.loop) == number]
        if own:
            yield _Tuning(basis).page(number, sorted(own, key=lambda loop: natural(loop.tag)))


class _Tuning:
    """The schedule of one unit while it is written."""

    def __init__(self, basis: Basis) -> None:
        self._basis = basis
        self._writer = Writer(basis)

    def page(self, number: str, loops: list[ControlledLoop]) -> Page:
        rows = tuple(self._row(loop) for loop in loops)
        quoted = sum(self._basis.dynamics.loop(loop.tag).worst is not None for loop in loops)
        return page(
            self._basis, self._writer, KIND, unit=number,
            extent=f"{upper_first(counted(len(loops), 'controller'))}, "
                   f"{number_word(quoted) if quoted else 'none'} with margins",
            reading=(BASIS, DASHES), caution=CAUTION, schedules=(Schedule("", COLUMNS, (Group(rows),)),),
        )  # fmt: skip

    def _row(self, loop: ControlledLoop) -> Row:
        write, controller, tag = self._writer, loop.controller, loop.tag
        measurement = known(loop.loop.measurement)
        rate = known(controller.rate)
        no_rate = controller.rate is None or (rate is not None and not rate.value)
        return Row(
            (
                write.cell(tag), write.cell(loop.loop.service), write.cell(controller.form or "standard"),
                write.cell(controller.action), self._gain(loop), self._reset(loop), write.value(controller.rate, tag),
                write.cell(NOT_APPLICABLE if no_rate else controller.derivative_filter or "10, usual"),
                write.cell("1, usual" if controller.setpoint_weight is None else controller.setpoint_weight),
                write.cell(measurement.filter if measurement else None), write.cell(controller.interval),
                *self._margins(loop), *self._model(loop), write.cell(write.holds_of(tag, _hangs_on)),
            ),
            anchor(tag),
        )  # fmt: skip

    def _gain(self, loop: ControlledLoop) -> Cell:
        controller = loop.controller
        if controller.gain is None and controller.proportional_band is not None:
            band = self._writer.text(controller.proportional_band)
            return self._writer.cell(f"{band} band")
        gain = controller.gain
        shown = f"{display_number(gain)}{NO_BREAK}%/%" if isinstance(gain, float | int) else gain
        return self._writer.value(shown, loop.tag)

    def _reset(self, loop: ControlledLoop) -> Cell:
        controller = loop.controller
        if controller.reset is None and controller.repeats is not None:
            return self._writer.value(controller.repeats, loop.tag)
        if controller.reset is None and controller.gain is not None:
            return self._writer.cell("none")
        return self._writer.value(controller.reset, loop.tag)

    def _margins(self, loop: ControlledLoop) -> tuple[Cell, ...]:
        found = self._basis.dynamics.loop(loop.tag)
        worst = found.worst
        if worst is None:
            return (self._writer.cell(f"Not checked: {found.reason}", over=MARGINS),)
        margins = worst.margins[-1]
        if not margins.stable:
            return (self._writer.cell("Unstable as written", kind="strong", over=MARGINS),)
        ratio, crossover = worst.speed_ratio, margins.crossover_rad_per_s
        texts = (
            _figure(margins.gain_margin, "not quoted"),
            "none" if math.isinf(margins.phase_margin_deg) else _figure(margins.phase_margin_deg, DASH, "°"),
            _figure(margins.max_sensitivity, DASH),
            _figure(crossover, "none"),
            NOT_APPLICABLE if ratio is None else _figure(ratio, DASH),
        )
        return tuple(self._writer.plain(text) for text in texts)

    def _model(self, loop: ControlledLoop) -> tuple[Cell, Cell]:
        """The process model, a line for each branch of a split range, and its source."""
        write, process = self._writer, loop.loop.process
        if not isinstance(process, Process):
            return write.cell(process), write.cell(None)
        ends = listed(dict.fromkeys(route.end.tag for route in loop.routes))
        models = process.branches or {ends: process}
        lines = [f"{end}: {told}" if end else told for end, model in models.items() if (told := self._told(model))]
        return write.cell(*(lines or [DASH])), write.cell(process.source)

    def _told(self, model: Process) -> str:
        write = self._writer
        parts = [] if known(model.effect) is None else [write.text(model.effect)]
        if isinstance(model.effect, Hold):
            parts.append(f"effect {write.text(model.effect)}")
        if model.gain is not None:
            parts.append(f"gain {write.text(model.gain)}".replace(" per ", f"{NO_BREAK}per{NO_BREAK}"))
        if model.integrating:
            parts.append("integrating")
        if isinstance(model.lags, Hold):
            parts.append(f"lag {write.text(model.lags)}")
        elif model.lags:
            lags = listed(write.text(lag) for lag in model.lags)
            parts.append(f"{'lag' if len(model.lags) == 1 else 'lags'} {lags}")
        for name, time in (("lead", model.lead), ("dead time", model.dead_time)):
            if time is not None:
                parts.append(f"{name} {write.text(time)}")
        return ", ".join(parts)


def _hangs_on(path: Sequence[str | int]) -> bool:
    keys = _TUNED.get(str(path[0])) if path else None
    return keys is not None and (not keys or len(path) == 1 or path[1] in keys)


def _figure(number: float, missing: str, unit: str = "") -> str:
    """A figure to three digits; infinite has no unit, and what is not a number is told in words."""
    if math.isnan(number):
        return missing
    return display_number(number, 3) + ("" if math.isinf(number) else unit)
