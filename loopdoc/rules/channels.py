"""Rules on the channels of the control system."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import FinalElement, Instrument, Loop, Measurement, Part, known
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, only_if, rule

_KINDS = {
    "AI": ("an analogue input", "in", "analogue"),
    "AO": ("an analogue output", "out", "analogue"),
    "DI": ("a digital input", "in", "discrete"),
    "DO": ("a digital output", "out", "discrete"),
}
"""What the two letters in a channel's name say: in words, which way the signal goes, and its sort."""
_SORTS = {
    "4-20 mA": "analogue",
    "0-20 mA": "analogue",
    "1-5 V": "analogue",
    "pulse": "discrete",
    "contact": "discrete",
}
"""Sort of each signal; a digital one (fieldbus) needs no channel of either sort."""
_WORD = re.compile(r"(?<![A-Za-z])S?(AI|AO|DI|DO)(?![A-Za-z])")
"""The two letters as a word of their own, with S before them where the safety system has its own channels."""


@dataclass(frozen=True, slots=True)
class _Channel:
    """A channel as one part of the register names it."""

    tag: str
    """The transmitter or final element that is wired to it."""
    written: str
    signal: str | None
    part: Part


def _channel(part: Loop | Instrument | FinalElement) -> _Channel | None:
    holder = part if isinstance(part, FinalElement) else known(part.measurement)
    written = known(holder.channel) if holder else None
    if holder is None or written is None:
        return None
    transmitter = known(holder.transmitter) if isinstance(holder, Measurement) else None
    return _Channel(transmitter or part.tag, written, known(holder.signal), holder)


@rule(level=Level.ERROR, source="common practice: one signal, one channel")
def channel_duplicate(plant: Plant) -> Iterator[Draft]:
    """Two signals are put on one channel.

    Why:
        One of the two is wired elsewhere, and its loop sheet sends the technician to the wrong terminals.
    Breaks:
        TT-2014 and FT-2011 both with `channel: AI-2-07`.
    Holds:
        Each channel has one transmitter or one final element. Loops that share a transmitter share its channel.
        Digital signals may share one: several devices hang on one bus.
    What this check cannot see:
        One channel written in two ways, such as `AI-2-07` and `AI-2-7`.
    """
    register = plant.register
    first: dict[str, _Channel] = {}
    for section in (register.loops, register.instruments, register.final_elements):
        for part in section.values():
            channel = _channel(part)
            if channel is None:
                continue
            other = first.setdefault(" ".join(channel.written.split()).casefold(), channel)
            if other.tag == channel.tag or channel.signal == other.signal == "digital":
                continue
            yield draft(
                channel.tag,
                f"it is put on channel {channel.written}, on which {other.tag} is already",
                remedy="write the channel to which it is wired",
                at=channel.part.origin.place("channel"),
                related=((other.part.origin.place("channel"), f"the channel of {other.tag}"),),
            )


@rule(level=Level.ERROR, source="common practice; the channel's name as the register writes it")
def channel_signal_mismatch(part: Loop | Instrument | FinalElement) -> Iterator[Draft]:
    """A signal is put on a channel that cannot take it.

    Why:
        An output wired to an input moves nothing, and a current into a digital input reads on or off. Either the
        channel or the signal is not the one of the plant, and the loop sheet is wrong.
    Breaks:
        `channel: AI-2-03` on a valve; `channel: DI-1-04` with `signal: 4-20 mA`; a contact on `AO-1-02`.
    Holds:
        Measurements are on inputs and final elements on outputs; currents and voltages on analogue channels,
        contacts and pulses on digital ones. What a channel is, is taken from AI, AO, DI or DO (SAI and so on for a
        safety system) as a word in its name; of other names nothing is supposed, nor of digital signals.
    What this check cannot see:
        What the hardware behind the name is.
    """
    channel = _channel(part)
    kinds = set(_WORD.findall(channel.written)) if channel else set()
    only_if(len(kinds) == 1)
    assert channel is not None
    (kind,) = kinds
    told, way, sort = _KINDS[kind]
    out = isinstance(part, FinalElement)
    if way != ("out" if out else "in"):
        what = "it is a final element" if out else "it is a measurement"
        yield draft(
            channel.tag,
            f"{what}, but its channel {channel.written} is {told}",
            remedy=f"write the {'output' if out else 'input'} to which it is wired",
            at=channel.part.origin.place("channel"),
        )
        return
    signal = need(channel.signal, "the signal")
    if signal in _SORTS and _SORTS[signal] != sort:
        yield draft(
            channel.tag,
            f"its signal is {signal}, but its channel {channel.written} is {told}",
            remedy="write the channel to which it is wired, or its signal",
            at=channel.part.origin.place("channel"),
            related=((channel.part.origin.place("signal"), f"the signal, {signal}"),),
        )
