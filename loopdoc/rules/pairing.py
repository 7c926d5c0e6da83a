"""Rules on who commands whom, and in which mode."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.register.model import FinalElement, Function, Loop, known
from loopdoc.register.place import Place
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, only_if, rule

_SEVERAL = ("high select", "low select", "sum")
"""Functions that are there to take in more than one commander."""
_COMMANDING = ("automatic", "cascade")
"""Modes in which a controller moves its own output."""


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
            at=_place_of_command(plant, *first),
            related=tuple(
                (_place_of_command(plant, tag, target), f"{tag} commands {target}") for tag, target in others
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
        at=_place_of_command(plant, second, commanded.tag),
        related=tuple(
            (_place_of_command(plant, tag, commanded.tag), f"{tag} commands it") for tag in commanders if tag != second
        ),
    )


@rule(level=Level.ERROR, source="common practice; cascade mode as in IEC 61804-2, MODE_BLK (from memory)")
def mode_normal_conflict(secondary: ControlledLoop, plant: Plant) -> Iterator[Draft]:
    """The normal modes of a primary and its secondary do not go together.

    Why:
        A primary in automatic over a secondary that is not in cascade commands nothing: its output tracks or
        winds up while the operators believe that it controls. A secondary in cascade under nobody has no
        setpoint.
    Breaks:
        TIC-2014 with `normal: automatic` over FIC-2011 with `normal: automatic`; FIC-2011 with
        `normal: cascade` where no output leads to it.
    Holds:
        Under a primary whose normal mode is automatic or cascade, or under a function, the secondary's
        normal mode is cascade; and a loop in cascade has a commander.
    What this check cannot see:
        The modes at start-up, which belong in the narrative.
    """
    modes = secondary.controller.modes
    commanders = plant.commanders.get(secondary.tag, ())
    if not commanders and modes is None:
        return
    written = need(modes, "the modes")
    normal = need(written.normal, "the normal mode")
    place = written.origin.place("normal")
    if not commanders:
        if normal == "cascade":
            yield draft(
                secondary.tag,
                "its normal mode is cascade, but nothing commands it",
                remedy=f"lead the output of its primary to {secondary.tag}, or write `normal: automatic`",
                at=place,
            )
        return
    if normal == "cascade":
        return
    links = plant.links_to.get(secondary.tag, ())
    commanding = next((link.primary for link in links if _normal_mode(link.primary) in _COMMANDING), None)
    if commanding is not None:
        yield draft(
            secondary.tag,
            f"its normal mode is {normal}, but {commanding.tag}, with normal mode {_normal_mode(commanding)}, "
            "commands it; it follows in cascade only",
            remedy=f"write `normal: cascade`, or another normal mode for {commanding.tag}",
            at=place,
            related=((_mode_place(commanding), f"the normal mode of {commanding.tag}"),),
        )
    elif not links:
        yield draft(
            secondary.tag,
            f"its normal mode is {normal}, but {commanders[0]} commands it; it follows in cascade only",
            remedy="write `normal: cascade`",
            at=place,
            related=((_place_of_command(plant, commanders[0], secondary.tag), f"{commanders[0]} commands it"),),
        )
    for link in links:
        need(need(link.primary.controller.modes, "the primary's modes").normal, "the primary's normal mode")


def _normal_mode(controlled: ControlledLoop) -> str | None:
    modes = known(controlled.controller.modes)
    return known(modes.normal) if modes else None


def _mode_place(controlled: ControlledLoop) -> Place:
    return controlled.controller.origin.place("modes", "normal")


def _place_of_command(plant: Plant, commander: str, target: str) -> Place:
    """Where a loop or a function says that it commands a tag."""
    loop = plant.register.loops.get(commander)
    if loop is not None:
        return loop.origin.place("controller", "output", "to")
    function = plant.register.functions[commander]
    if known(function.to) == target:
        return function.origin.place("to")
    return function.origin.key("outputs", target)
