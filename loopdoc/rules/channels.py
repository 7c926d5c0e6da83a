"""Rules on the channels of the control system."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import (
    Connection,
    FinalElement,
    Hold,
    Instrument,
    Loop,
    Measurement,
    Part,
    Register,
    TripSolenoid,
    known,
)
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
class Wired:
    """A device of the field that is wired to the control system."""

    tag: str
    """Of the transmitter, final element or solenoid valve."""
    channel: str | None
    signal: str | None
    wiring: tuple[Connection, ...]
    part: Part
    """Where its channel and its wiring are written."""


def wired(part: Loop | Instrument | FinalElement | TripSolenoid, tag: str) -> Wired | None:
    """What is wired of one part of the register; None where that is not known."""
    holder = known(part.measurement) if isinstance(part, Loop | Instrument) else part
    if holder is None:
        return None
    transmitter = known(holder.transmitter) if isinstance(holder, Measurement) else None
    # A solenoid valve has its coil on a contact.
    signal = "contact" if isinstance(holder, TripSolenoid) else known(holder.signal)
    wiring = () if isinstance(holder.wiring, Hold) else holder.wiring
    return Wired(transmitter or tag, known(holder.channel), signal, wiring, holder)


def all_wired(register: Register) -> Iterator[Wired]:
    """Everything that is wired, in the order of the register's sections; a shared transmitter once for each loop."""
    for section in (register.loops, register.instruments, register.final_elements, register.solenoids):
        for tag, part in section.items():
            found = wired(part, tag)
            if found is not None:
                yield found


def share_a_bus(one: Wired, other: Wired) -> bool:
    """Whether two devices may share a channel and its wires: one device itself, or several on one bus."""
    return one.tag == other.tag or one.signal == other.signal == "digital"


def plain(written: str) -> str:
    """A name as names are compared: without regard to case and spacing."""
    return " ".join(written.split()).casefold()


@rule(level=Level.ERROR, source="common practice: one signal, one channel")
def channel_duplicate(plant: Plant) -> Iterator[Draft]:
    """Two signals are put on one channel.

    Why:
        One of the two is wired elsewhere, and its loop sheet sends the technician to the wrong terminals.
    Breaks:
        TT-2014 and FT-2011 both with `channel: AI-2-07`.
    Holds:
        Each channel has one transmitter, one final element or one trip solenoid. Loops that share a transmitter
        share its channel. Digital signals may share one: several devices hang on one bus.
    What this check cannot see:
        One channel written in two ways, such as `AI-2-07` and `AI-2-7`.
    """
    first: dict[str, Wired] = {}
    for device in all_wired(plant.register):
        if device.channel is None:
            continue
        other = first.setdefault(plain(device.channel), device)
        if not share_a_bus(device, other):
            yield draft(
                device.tag,
                f"it is put on channel {device.channel}, on which {other.tag} is already",
                remedy="write the channel to which it is wired",
                at=device.part.origin.place("channel"),
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
    solenoid = known(part.trip_solenoid) if isinstance(part, FinalElement) else None
    tag = known(solenoid.tag) if solenoid else None
    devices = (wired(part, part.tag), wired(solenoid, tag or part.tag) if solenoid else None)
    judged = [(device, kind) for device in devices if device and (kind := _kind(device.channel))]
    only_if(bool(judged))
    for device, kind in judged:
        yield from _mismatch(device, kind)


def _kind(channel: str | None) -> str:
    """AI, AO, DI or DO where the channel's name says one of them."""
    kinds = set(_WORD.findall(channel or ""))
    return kinds.pop() if len(kinds) == 1 else ""


def _mismatch(device: Wired, kind: str) -> Iterator[Draft]:
    told, way, sort = _KINDS[kind]
    is_input = isinstance(device.part, Measurement)
    if way != ("in" if is_input else "out"):
        what = (
            "measurement" if is_input else "trip solenoid" if isinstance(device.part, TripSolenoid) else "final element"
        )
        yield draft(
            device.tag,
            f"it is a {what}, but its channel {device.channel} is {told}",
            remedy=f"write the {'input' if is_input else 'output'} to which it is wired",
            at=device.part.origin.place("channel"),
        )
        return
    signal = need(device.signal, "the signal")
    if signal in _SORTS and _SORTS[signal] != sort:
        is_written = not isinstance(device.part, TripSolenoid)
        yield draft(
            device.tag,
            f"its signal is {signal}, but its channel {device.channel} is {told}",
            remedy="write the channel to which it is wired" + (", or its signal" if is_written else ""),
            at=device.part.origin.place("channel"),
            related=((device.part.origin.place("signal"), f"the signal, {signal}"),) if is_written else (),
        )
