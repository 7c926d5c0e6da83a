"""Rules on tuning."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.register.model import Controller, FinalElement, Hold, Loop, Part, Process, known
from loopdoc.register.quantity import Quantity
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, only_if, rule


@rule(level=Level.ERROR, source="ISA-TR5.9-2023, PID algorithm (from memory): the parameters' domains")
def tuning_invalid(part: Loop | FinalElement) -> Iterator[Draft]:
    """A tuning parameter or a time has a value that no controller, process or final element can have.

    Why:
        Nothing can be calculated from it, and a control system either refuses it or takes it for something
        else (a reset time of 0 is read by one as no reset, by another as the fastest).
    Breaks:
        `gain: -1.8` (the sign belongs in `action`), `gain: 0`, `reset: 0 s`, `rate: -5 s`, `interval: 0 s`,
        a lag of 0, a negative dead time, a lead without a lag, `stroke_time: -6 s`, `backlash: 100 %`.
    Holds:
        Gain, proportional band, reset, repeats, interval, derivative filter and lags are greater than 0; rate,
        measurement filter, setpoint weight, dead time and stroke time are not negative; backlash and resolution
        are 0 % or more and below 100 %. A lead, of either sign, has a lag or an integration beside it.
        Proportional-only control has no `reset`, and no rate is the same as `rate: 0 s`.
    What this check cannot see:
        Whether the loop is stable and well tuned, which other rules judge. Both of `gain` and
        `proportional_band`, or of `reset` and `repeats`, are refused by the format (`schema`).
    """
    if isinstance(part, FinalElement):
        yield from _of_element(part)
        return
    controller, measurement, process = known(part.controller), known(part.measurement), known(part.process)
    only_if(controller or process or part.disturbances)
    if controller:
        yield from _parameters(part.tag, controller)
    if measurement:
        yield from _not_negative(part.tag, measurement, "filter", "the measurement filter", "leave it out")
    for one in (process, *process.branches.values()) if process else ():
        yield from _times(part.tag, one)
    for disturbance in part.disturbances.values():
        name = f"the disturbance `{disturbance.name}`"
        yield from _positive(
            part.tag, disturbance, "lag", f"the lag of {name}", "leave it out for the process's own lag"
        )
        yield from _not_negative(part.tag, disturbance, "dead_time", f"the dead time of {name}", "leave it out")
        for move in disturbance.moves.values():
            what = f"the lag of {move.tag} in {name}"
            yield from _positive(part.tag, move, "lag", what, "leave it out where it moves at once")
    if controller and controller.proportional_band is None:
        need(controller.gain, "the gain")
    for key in ("proportional_band", "reset", "repeats", "rate", "interval") if controller else ():
        if isinstance(getattr(controller, key), Hold):
            need(getattr(controller, key), f"the {key.replace('_', ' ')}")


def _of_element(element: FinalElement) -> Iterator[Draft]:
    written = (element.stroke_time, element.backlash, element.resolution)
    only_if(any(value is not None and not isinstance(value, Hold) for value in written))
    yield from _not_negative(element.tag, element, "stroke_time", "the stroke time", "write the time for a full stroke")
    for key in ("backlash", "resolution"):
        yield from _not_negative(element.tag, element, key, f"the {key}", "leave it out where there is none")
        value = _number(element, key)
        if value is not None and value >= 100:
            message = f"the {key} is {_written(element, key)}; it must be below 100 %"
            yield _draft(element.tag, element, key, message, "write a part of the travel, as in `0.5 %`")


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
    lead = known(process.lead)
    if lead is not None and lead.value and not lags and not process.integrating and not isinstance(process.lags, Hold):
        message = f"the process has a lead of {lead} and no lag: it would answer a step with an impulse"
        yield draft(tag, message, remedy="add its lag, or leave the lead out", at=process.origin.place("lead"))
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
