"""The register as written: what the engineer stated, each part knowing where it stands in the text.

A field is ``None`` where the register says nothing and a `Hold` where it says that the value is not yet known.
Nothing here is computed; what follows from several facts together is in ``loopdoc.engineering``.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, TypeVar

from loopdoc.register.place import Place
from loopdoc.register.quantity import Gain, Quantity, Range
from loopdoc.register.tag_grammar import TagGrammar
from loopdoc.register.text import TextFile

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class Hold:
    """A value not yet known, with the reason."""

    reason: str
    readable: bool = True
    """False where the text holds a value that could not be read; a `schema` finding has said so."""


def known(value: T | Hold | None) -> T | None:
    """The value, or None where it is held or not given."""
    return None if isinstance(value, Hold) else value


def seconds(value: Quantity | Hold | None) -> float:
    """A time in seconds; 0 where it is held or not given, or is negative or no time, of which the check tells."""
    time = known(value)
    return max(0.0, time.to("s")) if time is not None and time.unit.kind == "time" else 0.0


@dataclass(frozen=True, slots=True)
class Origin:
    """Where a part of the register is written."""

    source: TextFile
    path: tuple[str | int, ...]

    def place(self, *steps: str | int) -> Place:
        """Place of the value under this part, or of the nearest enclosing key where it is not written."""
        return self.source.place((*self.path, *steps))

    def key(self, *steps: str | int) -> Place:
        """Place of the key of this part or of a value under it."""
        return self.source.place((*self.path, *steps), key=True)


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """Any part of the register."""

    origin: Origin = field(repr=False, compare=False)


# ---------------------------------------------------------------- wiring


@dataclass(frozen=True, slots=True, kw_only=True)
class Connection(Part):
    """One cable on the way from a field device to the control system, and the terminals on which it ends."""

    cable: str | Hold | None
    """The cable that arrives from the side of the field."""
    pair: str | Hold | None
    """Which pair, triad or cores of that cable."""
    at: str | Hold | None
    """The junction box or cabinet in which the cable ends."""
    terminals: tuple[str, ...] | Hold
    """The terminals there, in the order plus, minus, screen; empty where not given."""


# ---------------------------------------------------------------- measurements


@dataclass(frozen=True, slots=True, kw_only=True)
class Measurement(Part):
    """A transmitter signal."""

    transmitter: str | Hold | None
    """Tag of the transmitter."""
    variable: str | Hold | None
    """temperature, pressure, differential pressure, flow, level, analysis, speed ... (see the schema)."""
    sensor: str | Hold | None
    """Sensor type, such as `Pt100 class A` or `thermocouple type K`."""
    element: str | Hold | None
    """Primary element, such as `orifice plate`."""
    characteristic: str | Hold | None
    """linear or square root."""
    range: Range | Hold | None
    signal: str | Hold | None
    """4-20 mA, 0-20 mA, 1-5 V, pulse, digital ..."""
    on_fault: str | Hold | None
    """reads high, reads low, holds, unknown."""
    filter: Quantity | Hold | None
    """Time constant of the measurement filter."""
    tolerance: Quantity | Hold | None
    """Largest error that a loop check accepts: percent of span, or a difference in a unit of the range."""
    channel: str | Hold | None
    supply: str | Hold | None
    """Energy source of the transmitter, with its voltage or pressure."""
    wiring: tuple[Connection, ...] | Hold
    """From the transmitter to the control system; empty where not given."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Operating(Part):
    """The band in which the plant runs, and its normal value."""

    low: Quantity | Hold | None
    normal: Quantity | Hold | None
    high: Quantity | Hold | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Instrument(Part):
    """A sensor that belongs to no loop."""

    tag: str
    unit: str | Hold | None
    service: str | Hold | None
    measurement: Measurement


# ---------------------------------------------------------------- controllers


@dataclass(frozen=True, slots=True, kw_only=True)
class Setpoint(Part):
    """Setpoint limits and normal setpoint of a controller."""

    low: Quantity | Hold | None
    normal: Quantity | Hold | None
    high: Quantity | Hold | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Output(Part):
    """Where a controller's output goes, over which span, within which limits."""

    to: str | Hold | None
    """Tag of a loop (cascade), a function or a final element."""
    span: Range | Hold | None
    """What 0 and 100 % of the output ask of the secondary; not given for a final element (0 to 100 %)."""
    low: Quantity | Hold | None
    high: Quantity | Hold | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Modes(Part):
    """Normal mode and permitted modes: manual, automatic, cascade, ..."""

    normal: str | Hold | None
    permitted: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class BadMeasurement(Part):
    """What the controller does when its measurement is bad."""

    mode: str | Hold | None
    output: str | Hold | None
    """`hold`, or an output such as `0 %`."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Controller(Part):
    """A PID controller as configured."""

    action: str | Hold | None
    """direct or reverse."""
    form: str | Hold | None
    """standard, parallel or series (ISA-TR5.9); standard where not given."""
    gain: float | Hold | None
    """Percent of output per percent of measurement span, always positive; the action gives the sign."""
    proportional_band: Quantity | Hold | None
    reset: Quantity | Hold | None
    """Reset (integral) time; none for proportional-only control."""
    repeats: Quantity | Hold | None
    rate: Quantity | Hold | None
    """Rate (derivative) time."""
    derivative_filter: float | Hold | None
    """Ratio of the rate time to the time constant of its filter; 10 where not given (common practice)."""
    setpoint_weight: float | Hold | None
    """Weight of the setpoint in the proportional part; 1 where not given."""
    rate_on: str | Hold | None
    """What the rate acts on: measurement (where not given) or error."""
    interval: Quantity | Hold | None
    """Execution interval."""
    setpoint: Setpoint | Hold | None
    output: Output | Hold | None
    modes: Modes | Hold | None
    on_bad_measurement: BadMeasurement | Hold | None
    when_not_followed: str | Hold | None
    """What the controller does while its output is not followed: track, hold, nothing."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Process(Part):
    """What the measurement does when the thing commanded rises.

    The thing commanded is the final element's opening or speed in percent, or the secondary's measurement.
    """

    effect: str | Hold | None
    """rises or falls."""
    gain: Gain | Hold | None
    lags: tuple[Quantity, ...] | Hold
    """First-order time constants, from `lag` or `lags`."""
    lead: Quantity | Hold | None
    """Time constant of a lead; negative for an inverse response."""
    dead_time: Quantity | Hold | None
    integrating: bool
    source: str | Hold | None
    """Where the model comes from: a step test on a date, a design estimate."""
    branches: dict[str, Process]
    """For a split range: one process for each final element, by its tag."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Move(Part):
    """What a measurement does as an upset comes, so that functions may feed it forward."""

    tag: str
    """Of the transmitter, the instrument or the loop."""
    size: Quantity | Hold | None
    """A difference of that measurement's kind."""
    lag: Quantity | Hold | None
    """First-order time constant with which it comes; at once where not given."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Disturbance(Part):
    """An upset that a loop must cope with: a step, and what it passes through on its way to the measurement."""

    name: str
    size: Quantity | Hold | None
    """A difference of the measurement's kind; at the process input, of the kind of what is commanded."""
    lag: Quantity | Hold | None
    """First-order time constant to the measurement; the process's own lags where not given."""
    dead_time: Quantity | Hold | None
    """Before it arrives, besides that of the process it may pass through."""
    at: str | Hold | None
    """measurement (where not given) or process input."""
    moves: dict[str, Move]
    """Measurements that move with it, by tag."""


# ---------------------------------------------------------------- alarms, loops

ALARM_ORDER = ("low_low", "low", "high", "high_high")
"""Alarm kinds on the measurement, in rising order of limit."""
ALARM_PRIORITIES = ("low", "medium", "high", "critical")
"""From the least to the most urgent."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Alarm(Part):
    """An alarm on a loop's measurement."""

    kind: str
    """high_high, high, low, low_low or deviation."""
    limit: Quantity | Hold | None
    deadband: Quantity | Hold | None
    delay: Quantity | Hold | None
    priority: str | Hold | None
    """low, medium, high or critical."""
    cause: str | Hold | None
    consequence: str | Hold | None
    response: str | Hold | None
    time_to_respond: Quantity | Hold | None
    warns_of: dict[str, str]
    """Hazards of other loops that this alarm tells of as well: high or low, by tag of the loop."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Loop(Part):
    """A controller, or an indicator, with its measurement and its destination."""

    tag: str
    unit: str | Hold | None
    service: str | Hold | None
    drawing: str | Hold | None
    purpose: str | Hold | None
    measurement: Measurement | Hold | None
    operating: Operating | Hold | None
    controller: Controller | Hold | None
    """None for an indicator."""
    process: Process | Hold | None
    hazard: str | Hold | None
    """The direction of the measurement that hurts: high, low, both, none."""
    disturbances: dict[str, Disturbance]
    """Declared upsets, by name."""
    alarms: dict[str, Alarm]


# ---------------------------------------------------------------- final elements, functions


@dataclass(frozen=True, slots=True, kw_only=True)
class TripSolenoid(Part):
    """The solenoid valve that takes the air from an actuator when an interlock trips."""

    tag: str | Hold | None
    channel: str | Hold | None
    supply: str | Hold | None
    """Energy source of its coil, with the voltage."""
    wiring: tuple[Connection, ...] | Hold
    """From the solenoid valve to the control system; empty where not given."""


@dataclass(frozen=True, slots=True, kw_only=True)
class FinalElement(Part):
    """What an output moves: valve, drive, heater bank."""

    tag: str
    unit: str | Hold | None
    kind: str | Hold | None
    """control valve, on-off valve, damper, variable-speed drive, motor, heater bank."""
    service: str | Hold | None
    drawing: str | Hold | None
    opens_on: str | Hold | None
    """rising signal or falling signal (a drive speeds up where a valve opens)."""
    output_block: str | Hold | None
    """direct, or reversed where the output block turns 0 % output into the high end of the signal."""
    fails: str | Hold | None
    """Position on loss of motive power: closed, open, last, stopped."""
    safe: str | Hold | None
    """Where the hazard study wants it: closed, open, last, stopped."""
    signal: str | Hold | None
    channel: str | Hold | None
    supply: str | Hold | None
    """Energy source of the actuator, with its pressure or voltage."""
    wiring: tuple[Connection, ...] | Hold
    """From the final element to the control system; empty where not given."""
    trip_solenoid: TripSolenoid | Hold | None
    characteristic: str | Hold | None
    """Inherent characteristic: linear, equal percentage, quick opening."""
    stroke_time: Quantity | Hold | None
    backlash: Quantity | Hold | None
    """Part of the travel that the signal loses when it turns round."""
    resolution: Quantity | Hold | None
    """Smallest change of the signal that it answers."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CurvePoint(Part):
    """One point of a characteriser's curve."""

    at: Quantity | Hold | None
    """What enters."""
    gives: Quantity | Hold | None
    """What comes out of it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Function(Part):
    """A computing element between loops."""

    tag: str
    kind: str | Hold | None
    """ratio, high select, low select, sum, split range, lead-lag, characteriser."""
    unit: str | Hold | None
    service: str | Hold | None
    inputs: tuple[str, ...]
    """Tags of the measurements that enter. Controllers are not listed: their own `output: to:` says so."""
    weights: dict[str, float]
    """Sum: factor of each input by tag (of a measurement or a commanding loop); 1 where not given."""
    to: str | Hold | None
    """Tag of the loop or final element that the result commands."""
    outputs: dict[str, Range]
    """Split range: for each final element, the controller output over which it goes from shut to fully open.
    A range written downwards (`50 to 0 %`) opens as the output falls."""
    span: Range | Hold | None
    """Ratio: the span of the ratio setting."""
    normal: float | Hold | None
    """Ratio: the ratio in normal operation."""
    lead: Quantity | Hold | None
    """Lead-lag: its lead time; none where not given."""
    lag: Quantity | Hold | None
    """Lead-lag: its lag time."""
    curve: tuple[CurvePoint, ...] | Hold
    """Characteriser: points in rising order of what enters, with straight lines between them; empty where not given."""
    normal_input: Quantity | Hold | None
    """Characteriser: what enters in normal operation; where not given, what the secondary's normal value asks for.
    Split range: the output that enters in normal operation, from which its responses start."""

    @property
    def inputs_held(self) -> bool:
        """Whether the inputs are on hold."""
        written: Any = self.origin.source.data
        for step in self.origin.path:
            written = written[step]
        return isinstance(written.get("inputs"), dict)


# ---------------------------------------------------------------- interlocks


@dataclass(frozen=True, slots=True, kw_only=True)
class Initiator(Part):
    """One input of an interlock: a measurement and the limit at which it trips."""

    tag: str
    """Tag of an instrument, or of a loop or its transmitter."""
    direction: str | Hold | None
    """above or below."""
    limit: Quantity | Hold | None
    delay: Quantity | Hold | None


@dataclass(frozen=True, slots=True, kw_only=True)
class InterlockAction(Part):
    """What an interlock does to a final element or to a controller."""

    tag: str
    position: str | Hold | None
    """closed, open, stopped, started for a final element; None for a controller."""
    mode: str | Hold | None
    """Mode into which a controller is forced."""
    output: Quantity | Hold | None
    """Output to which a controller is forced."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Bypass(Part):
    """Whether and how an interlock may be taken out of action for a time."""

    permitted: str | Hold | None
    """What for and how, such as `for the test of one transmitter at a time`; `no` where it never is."""
    approved_by: str | Hold | None
    """Who permits each bypass."""
    limit: Quantity | Hold | None
    """Time after which it ends or is permitted anew."""

    @property
    def never(self) -> bool:
        """Whether the register says that there is no bypass."""
        return (known(self.permitted) or "").strip(" .").casefold() in ("no", "none", "never", "not permitted")


@dataclass(frozen=True, slots=True, kw_only=True)
class Interlock(Part):
    """Initiators, voting, actions and reset."""

    tag: str
    unit: str | Hold | None
    service: str | Hold | None
    drawing: str | Hold | None
    layer: str | Hold | None
    """process or safety."""
    initiators: dict[str, Initiator]
    voting: str | Hold | None
    """Such as 1oo1, 1oo2, 2oo3."""
    actions: dict[str, InterlockAction]
    reset: str | Hold | None
    process_safety_time: Quantity | Hold | None
    response_time: Quantity | Hold | None
    proof_test: Quantity | Hold | None
    bypass: Bypass | Hold | None
    cause: str | Hold | None
    consequence: str | Hold | None


# ---------------------------------------------------------------- site, revision, texts, deviations


@dataclass(frozen=True, slots=True, kw_only=True)
class Site(Part):
    """The plant and the owner of the register."""

    name: str | Hold | None
    owner: str | Hold | None
    language: str | None
    """ISO 639-1 code of the language in which the register is written and its documents are issued."""
    department: str | Hold | None
    """Who answers for the documents within the owner's organisation."""
    technical_reference: str | Hold | None
    """Who answers questions about their contents."""
    classification: str | Hold | None
    """Who may see the documents, as the owner classes them."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Revision(Part):
    """The revision at which documents are issued."""

    code: str | Hold | None
    date: str | Hold | None
    """ISO 8601 date."""
    status: str | Hold | None
    """issued for review, issued for construction, issued for use, as built."""
    summary: str | Hold | None
    prepared_by: str | Hold | None
    checked_by: str | Hold | None
    approved_by: str | Hold | None
    distribution: tuple[str, ...]
    """Who gets the documents of this revision."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PlantUnit(Part):
    """A process unit."""

    number: str
    name: str | Hold | None
    purpose: str | Hold | None


@dataclass(frozen=True, slots=True, kw_only=True)
class UnitText(Part):
    """Narrative prose of one unit."""

    overview: str | Hold | None
    start_up: tuple[str, ...]
    shut_down: tuple[str, ...]
    upsets: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Deviation(Part):
    """A finding accepted in writing."""

    rule: str | Hold | None
    at: str | Hold | None
    """Tag at which the finding stands."""
    reason: str | Hold | None
    approved_by: str | Hold | None
    until: str | Hold | None
    """ISO 8601 date."""


@dataclass(frozen=True, slots=True, kw_only=True)
class HeldValue:
    """A hold with the place where it stands and the tag it belongs to."""

    tag: str
    path: tuple[str | int, ...]
    """Path of the value under the tag, such as ("process", "gain")."""
    reason: str
    place: Place


@dataclass(frozen=True)
class Register:
    """All loops, final elements, functions, interlocks and texts of a site."""

    root: TextFile
    files: tuple[TextFile, ...]
    """The root file first, then the included ones in order of name."""
    site: Site | None
    revision: Revision | None
    history: tuple[Revision, ...]
    """Earlier revisions, as written (oldest first)."""
    numbering: str
    """Pattern of document numbers with {unit}, {kind} and {serial}."""
    tag_pattern: TagGrammar | None
    policy: dict[str, float]
    """Thresholds that the register sets; the others keep their defaults (see ``loopdoc.rules.policy``)."""
    units: dict[str, PlantUnit]
    loops: dict[str, Loop]
    final_elements: dict[str, FinalElement]
    instruments: dict[str, Instrument]
    functions: dict[str, Function]
    interlocks: dict[str, Interlock]
    deviations: tuple[Deviation, ...]
    texts: dict[str, UnitText]
    twice: tuple[tuple[str, Place, Place], ...]
    """Tags defined more than once: tag, the later place, the first place. The first definition counts."""
    holds: tuple[HeldValue, ...]

    @cached_property
    def measurements(self) -> dict[str, Measurement]:
        """Every measurement by the tag of its transmitter or instrument."""
        found = {tag: instrument.measurement for tag, instrument in self.instruments.items()}
        for loop in self.loops.values():
            measurement = known(loop.measurement)
            transmitter = measurement and known(measurement.transmitter)
            if measurement and transmitter:
                found.setdefault(transmitter, measurement)
        return found

    @cached_property
    def solenoids(self) -> dict[str, TripSolenoid]:
        """Every trip solenoid that has a tag, by it."""
        found: dict[str, TripSolenoid] = {}
        for element in self.final_elements.values():
            solenoid = known(element.trip_solenoid)
            tag = solenoid and known(solenoid.tag)
            if solenoid and tag:
                found.setdefault(tag, solenoid)
        return found

    @cached_property
    def held(self) -> dict[str, frozenset[tuple[str | int, ...]]]:
        """Paths under each tag that are on hold; tells a mapping on hold from one that is not given."""
        found: dict[str, set[tuple[str | int, ...]]] = {}
        for held in self.holds:
            found.setdefault(held.tag, set()).add(held.path)
        return {tag: frozenset(paths) for tag, paths in found.items()}

    def defined_at(self, tag: str) -> Place | None:
        """Place of the key under which a tag is defined; None for a tag the register does not define."""
        sections: tuple[Mapping[str, Part], ...] = (
            self.loops, self.final_elements, self.instruments, self.functions, self.interlocks,
        )  # fmt: skip
        for section in sections:
            if tag in section:
                return section[tag].origin.key()
        measurement, solenoid = self.measurements.get(tag), self.solenoids.get(tag)
        if measurement:
            return measurement.origin.place("transmitter")
        return solenoid.origin.place("tag") if solenoid else None
