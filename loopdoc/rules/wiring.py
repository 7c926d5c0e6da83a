"""Rules on the wiring between the field and the control system."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Connection, Hold, known
from loopdoc.rules.channels import Wired, all_wired, plain, share_a_bus
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, rule


@rule(level=Level.ERROR, source="common practice: one terminal, one wire of one signal")
def terminal_duplicate(plant: Plant) -> Iterator[Draft]:
    """Two signals are put on one terminal of a junction box or cabinet.

    Why:
        One of the two ends elsewhere. Whoever connects a calibrator by the loop sheet breaks into the wrong loop,
        and may move a valve that was to stand still.
    Breaks:
        TT-2014 and FT-2011 both with terminal 5 of JB-2001.
    Holds:
        Each terminal carries one signal. Loops that share a transmitter share its terminals. Digital signals may
        share them: several devices hang on one bus.
    What this check cannot see:
        Commons and shields that are bridged on purpose: leave them out of `terminals`, or write a deviation. One
        terminal written in two ways, such as `TB3-11` and `TB3/11`.
    """
    first: dict[tuple[str, str], tuple[Wired, Connection, int]] = {}
    for device, connection in _connections(plant):
        at, terminals = known(connection.at), connection.terminals
        if at is None or isinstance(terminals, Hold):
            continue
        for index, terminal in enumerate(terminals):
            other, there, place = first.setdefault((plain(at), plain(terminal)), (device, connection, index))
            if not share_a_bus(device, other):
                yield draft(
                    device.tag,
                    f"it is put on terminal {terminal} of {at}, on which {other.tag} is already",
                    remedy="write the terminal on which its wire ends",
                    at=connection.origin.place("terminals", index),
                    related=((there.origin.place("terminals", place), f"the terminal of {other.tag}"),),
                )


@rule(level=Level.ERROR, source="common practice: one pair, one signal")
def cable_pair_duplicate(plant: Plant) -> Iterator[Draft]:
    """Two signals are put on one pair of a cable.

    Why:
        One pair carries one current loop. One of the two signals is in another pair, and is looked for in the wrong
        one when the cable is tested.
    Breaks:
        TT-2014 and FT-2011 both with `cable: MC-20-01, pair: 1`.
    Holds:
        Each pair of each cable carries one signal. Loops that share a transmitter share its pair. Digital signals
        may share one: several devices hang on one bus. A cable named without a pair is not judged.
    What this check cannot see:
        One cable or pair written in two ways, and cores that overlap (`cores 7, 8` and `cores 8, 9`).
    """
    first: dict[tuple[str, str], tuple[Wired, Connection]] = {}
    for device, connection in _connections(plant):
        cable, pair = known(connection.cable), known(connection.pair)
        if cable is None or pair is None:
            continue
        other, there = first.setdefault((plain(cable), plain(pair)), (device, connection))
        if not share_a_bus(device, other):
            yield draft(
                device.tag,
                f"it is put on pair {pair} of cable {cable}, on which {other.tag} is already",
                remedy="write the pair in which its signal runs",
                at=connection.origin.place("pair"),
                related=((there.origin.place("pair"), f"the pair of {other.tag}"),),
            )


@rule(level=Level.ERROR, source="common practice: a cable has two ends")
def cable_ends_differ(plant: Plant) -> Iterator[Draft]:
    """One cable ends in two places.

    Why:
        All pairs of a multicore cable run between the same two boxes. Where the register lets one of them end
        elsewhere, either the cable or the box is not the one of the plant.
    Breaks:
        Pair 1 of MC-20-01 from JB-2001 to MP-02, pair 2 of it from JB-2001 to MP-03, or from JB-2002 to MP-02.
    Holds:
        Every signal in a cable comes from the same box (or from its device) and goes to the same one. Digital
        signals are not judged: their bus may branch.
    What this check cannot see:
        One box written in two ways.
    """
    first: dict[str, tuple[Wired, Connection, str]] = {}
    for device in all_wired(plant.register):
        start = ""
        for connection in device.wiring if device.signal != "digital" else ():
            cable, at = known(connection.cable), known(connection.at)
            if cable is None or at is None:
                start = at or start
                continue
            other, there, begun = first.setdefault(plain(cable), (device, connection, start))
            end = known(there.at) or ""
            if plain(end) != plain(at):
                key, fault = "at", f"ends at {at} here, and at {end} with {other.tag}"
            else:
                key, fault = (
                    "cable", f"comes from {start or 'the field'} here, and from {begun or 'the field'} with {other.tag}"
                )  # fmt: skip
            if plain(end) != plain(at) or plain(begun) != plain(start):
                yield draft(
                    device.tag,
                    f"cable {cable} {fault}",
                    remedy="write the cable and the box of the plant",
                    at=connection.origin.place(key),
                    related=((there.origin.place(key), f"the wiring of {other.tag}"),),
                )
            start = at


def _connections(plant: Plant) -> Iterator[tuple[Wired, Connection]]:
    """Every cable with its terminals, by the device that it belongs to."""
    for device in all_wired(plant.register):
        for connection in device.wiring:
            yield device, connection
