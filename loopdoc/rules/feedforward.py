"""The rule on disturbances that measurements tell of beforehand."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Function, Loop, known
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, not_checked, only_if, rule


@rule(level=Level.WARNING, source="common practice (feedforward control)")
def disturbance_not_fed_forward(loop: Loop, plant: Plant) -> Iterator[Draft]:
    """A disturbance is said to move a measurement that no function brings to the loop.

    Why:
        `moves` is written so that functions act on the disturbance before the loop feels it. Where none of them takes
        the measurement in, the responses are those without feedforward, whatever the register seems to promise: the
        tag is another one than was meant, or the function lacks its input.
    Breaks:
        `steam demand rises: {size: -3 t/h, at: process input, moves: {FT-3003: {size: 3 t/h}}}` of a drum level, where
        FY-3003 adds FT-3002.
    Holds:
        The measurement enters a sum, a ratio or a selector, at once or through a lead-lag or a characteriser, on the
        way of the loop's output, of that of a loop below it or of one that commands it.
    What this check cannot see:
        Whether the function makes the right thing of it: the responses show what it leaves of the disturbance.
    """
    only_if(any(disturbance.moves for disturbance in loop.disturbances.values()))
    functions = _functions(plant, loop)
    entering = tuple(dict.fromkeys(tag for function in functions for tag in function.inputs))
    by_transmitter = {_transmitter(plant, tag) for tag in entering}
    for disturbance in loop.disturbances.values():
        for tag in disturbance.moves:
            if plant.measures(tag) is None or _transmitter(plant, tag) in by_transmitter:
                continue  # `reference-unknown` tells of a tag that nothing measures
            for function in functions:
                if _lacks_an_input(plant, function):  # as `function-incomplete` tells
                    not_checked(f"{function.tag} lacks an input, which may be {tag}")
            yield draft(
                loop.tag,
                f"the disturbance `{disturbance.name}` moves {tag}, which no function brings to {loop.tag} or to a "
                "loop above or below it",
                remedy=f"write the measurement that is meant, as {' or '.join(entering)}"
                if entering
                else "lead the measurement to a function on the way, or leave it out here",
                at=disturbance.origin.key("moves", tag),
            )


def _functions(plant: Plant, loop: Loop) -> tuple[Function, ...]:
    """The functions that bring something to a loop, to those below it and to those above, in order."""
    below = _reached(loop.tag, plant.targets)
    above = {tag: None for one in below for tag in _reached(one, lambda tag: plant.commanders.get(tag, ()))}
    return tuple(plant.register.functions[tag] for tag in above if tag in plant.register.functions)


def _lacks_an_input(plant: Plant, function: Function) -> bool:
    """Whether a sum has nothing to add, or a ratio nothing to multiply."""
    entering = len(plant.commanders.get(function.tag, ())) + len(function.inputs)
    return entering < 2 if known(function.kind) == "sum" else known(function.kind) == "ratio" and not function.inputs


def _reached(start: str, following: Callable[[str], Iterable[str]]) -> tuple[str, ...]:
    """A tag and all that is reached from it, nearest first."""
    found = {start: None}
    waiting = [start]
    while waiting:
        for tag in following(waiting.pop(0)):
            if tag not in found:
                found[tag] = None
                waiting.append(tag)
    return tuple(found)


def _transmitter(plant: Plant, tag: str) -> str:
    """By what two names of one measurement are told to be one."""
    part = plant.measures(tag)
    measurement = known(part.measurement) if part else None
    return (known(measurement.transmitter) if measurement else None) or tag
