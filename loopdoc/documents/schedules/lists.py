"""The channel list of the plant and the instrument list of each unit."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.schedules.schedule import (
    A4,
    DASHES,
    NOT_APPLICABLE,
    Cell,
    Column,
    Group,
    Row,
    Schedule,
    ScheduleKind,
    Writer,
    extent,
    page,
)
from loopdoc.documents.values import shown
from loopdoc.documents.whereabouts import anchor, natural, unit_numbers, unit_of
from loopdoc.documents.wiring_words import cable_lines, terminal_lines
from loopdoc.documents.wording import counted, listed, upper_first
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Connection, FinalElement, Hold, Instrument, Loop, Measurement, known
from loopdoc.register.quantity import Range

CHANNEL_LIST = ScheduleKind("channel-lists", "Channel list", "CL", A4)
INSTRUMENT_LIST = ScheduleKind("instrument-lists", "Instrument list", "IL")

CHANNELS = (
    Column("Channel", 10), Column("Tag", 9), Column("Service", 27), Column("Unit", 5), Column("Direction", 8),
    Column("Signal", 9), Column("Range of the signal", 13), Column("Used by", 11), Column("Shared with", 8),
)  # fmt: skip
_WIRES = (Column("Cables", 13), Column("Terminals", 15))
WIRED_CHANNELS = (
    Column("Channel", 7.5), Column("Tag", 7), Column("Service", 18), Column("Unit", 3.5), Column("Direction", 6.5),
    Column("Signal", 6), Column("Range of the signal", 9.5), *_WIRES, Column("Used by", 8), Column("Shared with", 6),
)  # fmt: skip
"""Where the register has the wiring of a signal at least."""
WIRING_READING = "Cables and terminals run from the field device to the control system, a line for each box or cabinet."
CHANNEL_READING = (
    "Every signal between field and control system, by channel in natural order. AI and AO carry an analogue signal, "
    "DI and DO a contact; PI counts pulses; a digital signal shares a line. Where one channel is given to several "
    "tags, each is named beside the other.",
    DASHES,
)
INSTRUMENTS = (
    Column("Tag", 6.5), Column("Service", 17), Column("Variable", 9.5), Column("Sensor or element", 13),
    Column("Characteristic", 7), Column("Range", 10), Column("Signal", 6), Column("On fault", 7), Column("Filter", 4),
    Column("Channel", 6.5), Column("Drawing", 6), Column("Used by", 7.5),
)  # fmt: skip
ELEMENTS = (
    Column("Tag", 6.5), Column("Service", 18), Column("Kind", 10), Column("Characteristic", 9.5),
    Column("Opens on", 8), Column("Output block", 6.5), Column("Signal", 6), Column("Fails", 5.5),
    Column("Safe position", 5.5), Column("Stroke time", 5), Column("Channel", 6.5), Column("Drawing", 6),
    Column("Moved by", 7),
)  # fmt: skip
INSTRUMENT_READING = (
    "Every transmitter and every final element of the unit, by tag. On fault: what the transmitter does when it fails. "
    "Fails: where the element goes without motive power; safe position: where the hazard study wants it.",
    DASHES,
)

_ANALOGUE = ("4-20 mA", "0-20 mA", "1-5 V")


# ---------------------------------------------------------------- what is measured


@dataclass(frozen=True, slots=True)
class _Sensor:
    """A transmitter or instrument, with the loops that it serves."""

    tag: str
    part: Loop | Instrument
    measurement: Measurement | None
    """None where the whole measurement is on hold or not given."""
    loops: tuple[str, ...]

    def users(self, plant: Plant) -> tuple[str, ...]:
        """Loops that it serves, then the interlocks that it initiates."""
        own = {self.tag, *self.loops}
        found = [one.tag for one in plant.register.interlocks.values() if own & set(one.initiators)]
        return (*self.loops, *found)


def _sensors(plant: Plant) -> Iterator[_Sensor]:
    """Every measurement once; a loop whose transmitter has no tag stands under its own."""
    found: dict[str, _Sensor] = {}
    for loop in plant.register.loops.values():
        measurement = known(loop.measurement)
        transmitter = known(measurement.transmitter) if measurement else None
        tag = transmitter or loop.tag
        other = found.get(tag)
        if other and other.measurement and measurement and other.measurement.channel == measurement.channel:
            found[tag] = _Sensor(tag, other.part, other.measurement, (*other.loops, loop.tag))
        elif other:  # one transmitter with two channels: both are told
            found[f"{tag} {loop.tag}"] = _Sensor(tag, loop, measurement, (loop.tag,))
        else:
            found[tag] = _Sensor(tag, loop, measurement, (loop.tag,))
    for instrument in plant.register.instruments.values():
        if instrument.tag not in found:
            found[instrument.tag] = _Sensor(instrument.tag, instrument, instrument.measurement, ())
    yield from found.values()


# ---------------------------------------------------------------- channels


@dataclass(frozen=True, slots=True)
class _Signal:
    """One signal between field and control system."""

    channel: str | Hold | None
    tag: str
    part: Loop | Instrument | FinalElement
    direction: str
    signal: str | Hold | None
    range: Range | Hold | str | None
    users: tuple[str, ...]
    wiring: tuple[Connection, ...] | Hold
    service: str | Hold | None


def channel_lists(basis: Basis) -> Iterator[Page]:
    """The one channel list of the plant; none where there is no signal."""
    signals = sorted(_signals(basis.plant), key=_by_channel)
    if signals:
        yield _channel_page(basis, signals)


def _signals(plant: Plant) -> Iterator[_Signal]:
    for sensor in _sensors(plant):
        measurement = sensor.measurement
        held = sensor.part.measurement if isinstance(sensor.part.measurement, Hold) else None
        channel, signal, span, wiring = (
            (measurement.channel, measurement.signal, measurement.range, measurement.wiring)
            if measurement
            else (held, held, held, held or ())
        )
        direction, users = _direction(known(signal), "I"), sensor.users(plant)
        yield _Signal(channel, sensor.tag, sensor.part, direction, signal, span, users, wiring, sensor.part.service)
    for element in plant.register.final_elements.values():
        direction = _direction(known(element.signal), "O")
        movers = _movers(plant, element)
        yield _Signal(
            element.channel, element.tag, element, direction, element.signal, NOT_APPLICABLE, movers, element.wiring,
            element.service,
        )  # fmt: skip
        solenoid = known(element.trip_solenoid)
        if solenoid:
            yield _Signal(
                solenoid.channel, known(solenoid.tag) or element.tag, element, "DO", None, NOT_APPLICABLE,
                _interlocks_on(plant, element), solenoid.wiring, f"Trip solenoid of {element.tag}",
            )  # fmt: skip


def _movers(plant: Plant, element: FinalElement) -> tuple[str, ...]:
    """What commands a final element: loops and functions, then interlocks."""
    return tuple(dict.fromkeys((*plant.commanders.get(element.tag, ()), *_interlocks_on(plant, element))))


def _interlocks_on(plant: Plant, element: FinalElement) -> tuple[str, ...]:
    return tuple(one.tag for one in plant.register.interlocks.values() if element.tag in one.actions)


def _direction(signal: str | None, way: str) -> str:
    """AI, AO, DI or DO by the signal; in words where the letters would not say it."""
    if signal in _ANALOGUE:
        return f"A{way}"
    if signal == "contact":
        return f"D{way}"
    if signal == "pulse" and way == "I":
        return "PI"
    return "input" if way == "I" else "output"


def _by_channel(signal: _Signal) -> tuple[object, ...]:
    channel = signal.channel
    if isinstance(channel, str):
        return 0, natural(channel), natural(signal.tag)
    return 1, (), natural(signal.tag)


def _channel_page(basis: Basis, signals: list[_Signal]) -> Page:
    write = Writer(basis)
    on_channel: dict[str, list[str]] = {}
    for signal in signals:
        if isinstance(signal.channel, str):
            on_channel.setdefault(signal.channel, []).append(signal.tag)

    wired = any(signal.wiring for signal in signals)

    def wires(signal: _Signal) -> tuple[Cell, ...]:
        if not wired:
            return ()
        lines = cable_lines(signal.wiring, write.text), terminal_lines(signal.wiring, write.text)
        return tuple(write.cell(*(found or (None,))) for found in lines)

    def row(signal: _Signal) -> Row:
        others = [tag for tag in on_channel.get(known(signal.channel) or "", ()) if tag != signal.tag]
        return Row(
            (
                write.cell(signal.channel), write.cell(signal.tag), write.cell(signal.service),
                write.cell(signal.part.unit), write.cell(signal.direction), write.cell(signal.signal),
                write.cell(signal.range), *wires(signal), write.cell(listed(signal.users) or NOT_APPLICABLE),
                write.cell(listed(others) or "none", kind="strong" if others else ""),
            ),
            anchor(signal.tag),
        )  # fmt: skip

    given = [row(signal) for signal in signals if isinstance(signal.channel, str)]
    without = [row(signal) for signal in signals if not isinstance(signal.channel, str)]
    groups = [Group(tuple(given))] if given else []
    if without:
        groups.append(Group(tuple(without), write.prose("Without a channel in the register")))
    twice = sum(len(tags) > 1 for tags in on_channel.values())
    counts = [counted(len(on_channel), "channel")] if on_channel else []
    counts += [f"{counted(twice, 'channel')} given twice"] if twice else []
    counts += [f"{counted(len(without), 'signal')} without a channel"] if without else []
    site = basis.plant.register.site
    return page(
        basis, write, CHANNEL_LIST, title=shown(site.name if site else None), extent=upper_first(listed(counts)),
        reading=(*CHANNEL_READING[:1], WIRING_READING, *CHANNEL_READING[1:]) if wired else CHANNEL_READING,
        schedules=(Schedule("", WIRED_CHANNELS if wired else CHANNELS, tuple(groups)),),
    )  # fmt: skip


# ---------------------------------------------------------------- instruments


def instrument_lists(basis: Basis) -> Iterator[Page]:
    """The list of each unit that has a transmitter or a final element."""
    plant = basis.plant
    sensors = sorted(_sensors(plant), key=lambda sensor: natural(sensor.tag))
    elements = sorted(plant.register.final_elements.values(), key=lambda element: natural(element.tag))
    for number in unit_numbers(plant):
        own = [sensor for sensor in sensors if unit_of(sensor.part) == number]
        moved = [element for element in elements if unit_of(element) == number]
        if own or moved:
            yield _instrument_page(basis, number, own, moved)


def _instrument_page(basis: Basis, number: str, sensors: list[_Sensor], elements: list[FinalElement]) -> Page:
    write = Writer(basis)
    schedules = []
    if sensors:
        rows = tuple(_sensor_row(write, basis.plant, sensor) for sensor in sensors)
        schedules.append(Schedule("Transmitters and instruments", INSTRUMENTS, (Group(rows),)))
    if elements:
        rows = tuple(_element_row(write, basis.plant, element) for element in elements)
        schedules.append(Schedule("Final elements", ELEMENTS, (Group(rows),)))
    return page(
        basis, write, INSTRUMENT_LIST, unit=number,
        extent=extent((len(sensors), "transmitter"), (len(elements), "final element")),
        reading=INSTRUMENT_READING, schedules=schedules,
    )  # fmt: skip


def _sensor_row(write: Writer, plant: Plant, sensor: _Sensor) -> Row:
    part, measurement = sensor.part, sensor.measurement
    drawing = part.drawing if isinstance(part, Loop) else None
    users = write.cell(listed(sensor.users(plant)) or NOT_APPLICABLE)
    if measurement is None:
        held = write.cell(part.measurement if isinstance(part.measurement, Hold) else None, over=8)
        return Row(
            (write.cell(sensor.tag), write.cell(part.service), held, write.cell(drawing), users), anchor(sensor.tag)
        )
    return Row(
        (
            write.cell(sensor.tag), write.cell(part.service), write.cell(measurement.variable),
            _element_or_sensor(write, measurement), write.cell(measurement.characteristic),
            write.value(measurement.range, sensor.tag), write.cell(measurement.signal),
            write.cell(measurement.on_fault), write.cell(measurement.filter), write.cell(measurement.channel),
            write.cell(drawing), users,
        ),
        anchor(sensor.tag),
    )  # fmt: skip


def _element_or_sensor(write: Writer, measurement: Measurement) -> Cell:
    parts = [write.text(part) for part in (measurement.element, measurement.sensor) if part is not None]
    return write.cell(", ".join(parts) or None)


def _element_row(write: Writer, plant: Plant, element: FinalElement) -> Row:
    is_valve = known(element.kind) == "control valve"
    return Row(
        (
            write.cell(element.tag), write.cell(element.service), write.cell(element.kind),
            write.cell(element.characteristic if element.characteristic or is_valve else NOT_APPLICABLE),
            write.cell(element.opens_on), write.cell(element.output_block or "direct"), write.cell(element.signal),
            write.cell(element.fails), write.cell(element.safe), write.cell(element.stroke_time),
            write.cell(element.channel), write.cell(element.drawing),
            write.cell(listed(_movers(plant, element)) or None),
        ),
        anchor(element.tag),
    )  # fmt: skip
