"""The failures that concern a group of loops, each once: the loops of a cascade share most of theirs."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

from loopdoc.engineering.failure import Failure, FailureAnalysis, FailureEffect
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Loop


def failures_once(analysis: FailureAnalysis, loops: Sequence[Loop]) -> tuple[FailureEffect, ...]:
    """Every failure that concerns one of these loops, in the order of the loops, as the loop nearest to it sees it.

    That loop is the one whose transmitter fails or which commands the final element that does; it may be none of
    these. The loss of the control system's power counts once for each set of final elements that move with it.
    """
    found: dict[tuple[object, ...], FailureEffect] = {}
    for loop in loops:
        for effect in analysis.effects(loop.tag):
            found.setdefault(_which(effect), effect)
    commanders: dict[str, list[str]] = {}
    for controlled in analysis.plant.controlled.values():
        for route in controlled.routes:
            commanders.setdefault(route.end.tag, []).append(controlled.tag)
    return tuple(_seen_nearest(analysis, effect, commanders) for effect in found.values())


def _which(effect: FailureEffect) -> tuple[object, ...]:
    """What tells one failure from another: the secondary's lost measurement is that of its own loop."""
    bad = effect.failure is Failure.SECONDARY_LOST
    at = _failing(effect)
    return Failure.MEASUREMENT_BAD if bad else effect.failure, at, "" if at else effect.loop.tag


def _failing(effect: FailureEffect) -> tuple[str, ...]:
    """What fails, or moves with the power of the control system."""
    if effect.failure is Failure.CONTROL_POWER_LOST:
        return tuple(move.element.tag for move in effect.elements)
    return effect.at


def _seen_nearest(
    analysis: FailureAnalysis, effect: FailureEffect, commanders: Mapping[str, Sequence[str]]
) -> FailureEffect:
    for tag in _nearest(analysis.plant, effect, commanders):
        if tag == effect.loop.tag:
            break
        for other in analysis.effects(tag):
            if _which(other) == _which(effect):
                return other
    return effect


def _nearest(plant: Plant, effect: FailureEffect, commanders: Mapping[str, Sequence[str]]) -> Iterator[str]:
    """Loops whose transmitter fails, or whose output goes straight to the final element that does."""
    for tag in _failing(effect):
        if not effect.seen:
            yield from commanders.get(tag, ())
        elif loop := plant.loop_of_transmitter.get(tag):
            yield loop.tag
