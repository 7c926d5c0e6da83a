"""Rules on who commands whom."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import FinalElement, Function, Loop, known
from loopdoc.register.place import Place
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, only_if, rule

_SEVERAL = ("high select", "low select", "sum")
"""Functions that are there to take in more than one commander."""


@rule(level=Level.ERROR, source="common practice")
def pairing_cycle(plant: Plant) -> Iterator[Draft]:
    """Loops command one another in a ring.

    Why:
        A ring of setpoints has no outermost loop: nobody sets what the plant is to do, and the controllers
        drive one another.
    Breaks:
        TIC-2014 with `output: {to: FIC-2011}` and FIC-2011 with `output: {to: TIC-2014}`.
    Holds:
        Every chain of outputs ends at a final element.
    What this check cannot see:
        A ring that closes through the process, as any two loops that disturb each other do.
    """
    for ring in plant.cycles:
        first, *others = pairwise((*ring, ring[0]))
        round_again = ", which commands ".join((*ring[1:], ring[0]))
        yield draft(
            ring[0],
            f"the outputs run in a ring: {ring[0]} commands {round_again}" if others else "it commands itself",
            remedy="lead one of these outputs to the final element that it is to move",
            at=place_of_command(plant, *first),
            related=tuple(
                (place_of_command(plant, tag, target), f"{tag} commands {target}") for tag, target in others
            ),
        )


@rule(level=Level.ERROR, source="common practice")
def pairing_two_primaries(commanded: Loop | FinalElement | Function, plant: Plant) -> Iterator[Draft]:
    """A loop or a final element is commanded from two places, and nothing chooses between them.

    Why:
        The last one to write wins, scan by scan. Both believe that they are followed, and both wind up.
    Breaks:
        TIC-2014 and PIC-2021 both with `output: {to: FIC-2011}`.
    Holds:
        One commander each; where there are more, a low select, a high select or a sum stands between.
    What this check cannot see:
        Two controllers of which a program puts one at a time into automatic.
    """
    commanders = plant.commanders.get(commanded.tag, ())
    only_if(commanders)
    if len(commanders) < 2:
        return
    if isinstance(commanded, Function) and need(commanded.kind, "the kind of the function") in _SEVERAL:
        return
    second = commanders[1]
    names = f"{', '.join(commanders[:-1])} and {commanders[-1]}"
    yield draft(
        commanded.tag,
        f"commanded by {names}, and nothing chooses between them",
        remedy="lead them to a low select, a high select or a sum, and its result to this one",
        at=place_of_command(plant, second, commanded.tag),
        related=tuple(
            (place_of_command(plant, tag, commanded.tag), f"{tag} commands it") for tag in commanders if tag != second
        ),
    )


@rule(level=Level.ERROR, source="common practice")
def pairing_without_controller(commander: Loop | Function, plant: Plant) -> Iterator[Draft]:
    """An output leads to a loop that has no controller.

    Why:
        An indicator takes no setpoint. The output moves nothing, and the controller that sends it winds up; most often
        the output was to go to another loop, or the secondary's controller was never entered.
    Breaks:
        TIC-2014 with `output: {to: FI-3004}`.
    Holds:
        Every loop that is commanded has a `controller`.
    What this check cannot see:
        A controller outside the register: enter it with its loop.
    """
    targets = plant.targets(commander.tag)
    only_if(targets)
    for target in targets:
        loop = plant.register.loops.get(target)
        if loop is not None and loop.controller is None:
            yield draft(
                commander.tag,
                f"its output goes to {target}, which has no controller and takes no setpoint",
                remedy=f"lead the output to the loop that is to follow, or write the controller of {target}",
                at=place_of_command(plant, commander.tag, target),
                related=((loop.origin.key(), f"{target}, an indicator"),),
            )


@rule(level=Level.WARNING, source="common practice")
def final_element_unmoved(element: FinalElement, plant: Plant) -> Iterator[Draft]:
    """No controller and no interlock moves a final element that is there to be set.

    Why:
        A control valve that nothing moves is most often one whose loop was given another tag, or one that was taken
        out of use and left in the register; its loop sheet and its interlocks are then missing.
    Breaks:
        `FV-2012` of kind control valve, where no output and no action of an interlock names it.
    Holds:
        Every control valve, damper, drive and heater is the destination of an output or the subject of an interlock.
        On-off valves and motors may be worked by hand from the operator station.
    What this check cannot see:
        A drive that runs at one speed for good: accept it by a deviation.
    """
    only_if(known(element.kind) in ("control valve", "damper", "variable-speed drive", "heater bank"))
    if element.tag not in plant.commanders and element.tag not in plant.interlocked:
        for loop in plant.register.loops.values():
            controller = known(loop.controller)
            output = known(controller.output) if controller else None
            if output is not None:
                need(output.to or "", f"the destination of {loop.tag}")
        yield draft(
            element.tag,
            f"it is a {known(element.kind)}, but no output leads to it and no interlock acts on it",
            remedy="lead the output that moves it to this tag, or take it out of the register",
            at=element.origin.key(),
        )


def place_of_command(plant: Plant, commander: str, target: str) -> Place:
    """Where a loop or a function says that it commands a tag."""
    loop = plant.register.loops.get(commander)
    if loop is not None:
        return loop.origin.place("controller", "output", "to")
    function = plant.register.functions[commander]
    if known(function.to) == target:
        return function.origin.place("to")
    return function.origin.key("outputs", target)
