"""Rules on tuning."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.pairing import ControlledLoop
from loopdoc.register.model import Controller, Hold, Part, Process, known
from loopdoc.register.quantity import Quantity
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, rule


@rule(level=Level.ERROR, source="ISA-TR5.9-2023, PID algorithm (from memory): the parameters' domains")
def tuning_invalid(controlled: ControlledLoop) -> Iterator[Draft]:
    """A tuning parameter or a time of the process has a value that no controller or process can have.

    Why:
        Nothing can be calculated from it, and a control system either refuses it or takes it for something
        else (a reset time of 0 is read by one as no reset, by another as the fastest).
    Breaks:
        `gain: -1.8` (the sign belongs in `action`), `gain: 0`, `reset: 0 s`, `rate: -5 s`, `interval: 0 s`,
        a lag of 0, a negative dead time.
    Holds:
        Gain, proportional band, reset, repeats, interval, derivative filter and lags are greater than 0; rate,
        measurement filter, setpoint weight and dead time are not negative. Proportional-only control has no
        `reset`, and no rate is the same as `rate: 0 s`.
    What this check cannot see:
        Whether the loop is stable and well tuned, which other rules judge. Both of `gain` and
        `proportional_band`, or of `reset` and `repeats`, are refused by the format (`schema`).
    """
    controller = controlled.controller
    measurement, process = known(controlled.loop.measurement), known(controlled.loop.process)
    yield from _parameters(controlled.tag, controller)
    if measurement:
        yield from _not_negative(controlled.tag, measurement, "filter", "the measurement filter", "leave it out")
    if process:
        for part in (process, *process.branches.values()):
            yield from _times(controlled.tag, part)
    if controller.proportional_band is None:
        need(controller.gain, "the gain")
    for key in ("proportional_band", "reset", "repeats", "rate", "interval"):
        if isinstance(getattr(controller, key), Hold):
            need(getattr(controller, key), f"the {key.replace('_', ' ')}")


def _parameters(tag: str, controller: Controller) -> Iterator[Draft]:
    yield from _positive(tag, controller, "gain", "the gain", "write a positive number; `action` gives the sign")
    yield from _positive(tag, controller, "proportional_band", "the proportional band", "write a positive percentage")
    yield from _positive(
        tag, controller, "reset", "the reset time", "write a time, or leave it out for proportional-only control"
    )
    yield from _positive(
        tag, controller, "repeats", "the reset rate", "write a rate, or leave it out for proportional-only control"
    )
    yield from _positive(tag, controller, "interval", "the execution interval", "write the scan time")
    yield from _positive(tag, controller, "derivative_filter", "the derivative filter ratio", "write 5 to 20, say")
    yield from _not_negative(tag, controller, "rate", "the rate time", "write `0 s` for no rate")
    yield from _not_negative(tag, controller, "setpoint_weight", "the setpoint weight", "write 0 to 1")


def _times(tag: str, process: Process) -> Iterator[Draft]:
    lags = () if isinstance(process.lags, Hold) else process.lags
    for index, lag in enumerate(lags):
        if lag.value <= 0:
            single = process.origin.place("lags") == process.origin.key()  # written as `lag`
            place = process.origin.place("lag") if single else process.origin.place("lags", index)
            message = f"a lag of the process is {lag}; it must be greater than 0"
            yield draft(tag, message, remedy="leave it out", at=place)
    yield from _not_negative(tag, process, "dead_time", "the dead time", "leave it out where there is none")


def _positive(tag: str, part: Part, key: str, what: str, remedy: str) -> Iterator[Draft]:
    value = _number(part, key)
    if value is not None and value <= 0:
        yield _draft(tag, part, key, f"{what} is {_written(part, key)}; it must be greater than 0", remedy)


def _not_negative(tag: str, part: Part, key: str, what: str, remedy: str) -> Iterator[Draft]:
    value = _number(part, key)
    if value is not None and value < 0:
        yield _draft(tag, part, key, f"{what} is {_written(part, key)}; it cannot be negative", remedy)


def _number(part: Part, key: str) -> float | None:
    written: Quantity | float | Hold | None = getattr(part, key)
    if written is None or isinstance(written, Hold):
        return None
    return written.value if isinstance(written, Quantity) else written


def _draft(tag: str, part: Part, key: str, message: str, remedy: str) -> Draft:
    return draft(tag, message, remedy=remedy, at=part.origin.place(key))


def _written(part: Part, key: str) -> str:
    written: Quantity | float = getattr(part, key)
    return str(written) if isinstance(written, Quantity) else f"{written:g}"
