"""The schedule of failure effects of each unit: every failure once, and first those that nothing stands against."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.naming import moves_by_itself, power_of
from loopdoc.documents.narrative import failure_story
from loopdoc.documents.schedules.schedule import (
    DASHES,
    NOT_APPLICABLE,
    REVIEW,
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
from loopdoc.documents.whereabouts import anchor, natural, unit_numbers, unit_of
from loopdoc.documents.wording import (
    NO_BREAK,
    as_written,
    grouped,
    listed,
    number_word,
    sentence,
    value,
)
from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.failure import Consequence, Failure, FailureAnalysis, FailureEffect
from loopdoc.engineering.failure_gathering import failures_once
from loopdoc.engineering.faults import fault_reading
from loopdoc.engineering.spreading import PASSIVE_MODES, ElementMove, normal_mode, transmitter_of
from loopdoc.register.model import Loop, known

KIND = ScheduleKind(
    "failure-effects", "Failure effects", "FE",
    signatures=REVIEW,
)
COLUMNS = (
    Column("What fails", 13.5), Column("What the control does", 22.0), Column("Where the final element goes", 13.0),
    Column("Where the process goes", 17.5), Column("Towards the hazard?", 14.0),
    Column("What stands against it", 20.0),
)  # fmt: skip
READING = (
    "Each failure stands once, at the loop nearest to it; its effects are those on every loop that it reaches. "
    "Failures with the same effect share a row. A trip on a false reading is named; what it moves stands in the cause "
    "and effect chart and is not followed here."
)
CAUTION = (
    "The effects follow from signs and modes alone, one failure at a time, without how far or how fast. They support "
    "a hazard study and do not replace one."
)
UNPOWERED = "The control system loses its power, with it its alarms and the interlocks of the process layer"
UNDECIDED = "Not decided"
NOTHING = "Nothing."
_OUTPUT = {1: "rises", -1: "falls", 0: "stays"}
_ORDER = {failure: rank for rank, failure in enumerate(Failure)}
_PROCESS = {1: "Rises", -1: "Falls", 0: "Left to itself"}


@dataclass(frozen=True, slots=True)
class _Told:
    """One failure as its row tells it."""

    what: str
    """What fails, such as `FV-2011`."""
    how: str
    """What happens to it, such as `loses its air`."""
    cells: tuple[Cell, ...]
    """What follows."""
    bare: bool
    """Whether it goes or may go towards a hazard and nothing stands against it."""
    hurts: bool
    """Whether it surely goes towards a hazard."""


def failure_schedules(basis: Basis) -> Iterator[Page]:
    """The schedule of each unit that has a loop whose failures lead anywhere."""
    analysis = FailureAnalysis(basis.plant)
    for number in unit_numbers(basis.plant):
        loops = [loop for loop in basis.plant.register.loops.values() if unit_of(loop) == number]
        found = failures_once(analysis, sorted(loops, key=lambda loop: natural(loop.tag)))
        if found:
            yield _Failures(basis, analysis, number).page(found)


class _Failures:
    """The schedule of one unit while it is written."""

    def __init__(self, basis: Basis, analysis: FailureAnalysis, number: str) -> None:
        self._basis = basis
        self._plant = basis.plant
        self._analysis = analysis
        self._number = number
        self._writer = Writer(basis)

    def page(self, found: Sequence[FailureEffect]) -> Page:
        power = Failure.CONTROL_POWER_LOST
        own: dict[str, list[FailureEffect]] = {}
        from_elsewhere: list[FailureEffect] = []
        for effect in found:
            if effect.failure is not power:
                here = unit_of(effect.loop) == self._number
                (own.setdefault(effect.loop.tag, []) if here else from_elsewhere).append(effect)
        groups = [
            (self._heading(self._plant.register.loops[tag]), anchor(tag), own[tag]) for tag in sorted(own, key=natural)
        ]
        groups += [("Failures in other units that reach this one", "", from_elsewhere)] if from_elsewhere else []
        unpowered = [effect for effect in found if effect.failure is power]
        groups += [(UNPOWERED, "", unpowered)] if unpowered else []
        told = [(self._writer.prose(heading), at, self._told(effects)) for heading, at, effects in groups]
        bare = [one for _, _, several in told for one in several if one.bare]
        certain, possible = [one for one in bare if one.hurts], [one for one in bare if not one.hurts]
        first = Schedule("What nothing independent stands against", COLUMNS[:1] + COLUMNS[2:], tuple(
            Group(tuple(self._row(one, first=True) for one in several), self._writer.prose(heading))
            for heading, several in (("Towards a hazard", certain), ("May go towards a hazard", possible))
            if several
        ))  # fmt: skip
        whole = Schedule("All failures", COLUMNS, tuple(
            Group(tuple(self._row(one, at="" if index else at) for index, one in enumerate(several)), heading)
            for heading, at, several in told
        ))  # fmt: skip
        return page(
            self._basis, self._writer, KIND, unit=self._number,
            extent=extent((len(own), "loop"), (len(found), "failure")),
            reading=(failure_story.ASSUMPTIONS.replace("Each is", "Each failure is", 1), f"{READING} {DASHES}"),
            caution=CAUTION,
            lead=(_lead(sum(len(several) for _, _, several in told), len(certain), len(possible)),),
            schedules=(first, whole) if bare else (whole,),
        )  # fmt: skip

    def _heading(self, loop: Loop) -> str:
        write, sensor = self._writer, transmitter_of(loop)
        measurement = known(loop.measurement)
        parts = [f"{loop.tag} {write.text(loop.service)}", f"hazard: {write.text(loop.hazard)}"]
        if sensor:
            parts.append(f"measured by {sensor}, on fault {write.text(measurement.on_fault if measurement else None)}")
        controlled = self._plant.controlled.get(loop.tag)
        if controlled:
            ends = listed(dict.fromkeys(route.end.tag for route in controlled.routes))
            mode = normal_mode(controlled)
            parts += [f"commands {ends}"] if ends else []
            parts += [f"normally {mode}"] if mode else []
        return "; ".join(parts)

    def _told(self, effects: Iterable[FailureEffect]) -> tuple[_Told, ...]:
        """Each failure, those with the same effect together."""
        found: dict[tuple[str, tuple[Cell, ...]], _Told] = {}
        for effect in sorted(effects, key=lambda effect: (_ORDER[effect.failure], *map(natural, effect.at))):
            what, how = self._failure(effect)
            hazard, hurts = self._hazard(effect)
            against, nothing = self._against(effect)
            write = self._writer
            cells = (
                write.cell(*self._control(effect)), write.cell(*self._elements(effect)),
                write.cell(*self._process(effect)), write.cell(*hazard, kind="strong" if hurts else ""), against,
            )  # fmt: skip
            if (what, cells) in found:
                how = f"{found[what, cells].how} or {how}".replace(" or loses", " or")
            found[what, cells] = _Told(what, how, cells, nothing, hurts)
        return tuple(found.values())

    def _row(self, told: _Told, *, at: str = "", first: bool = False) -> Row:
        head = self._writer.cell(f"{told.what} {told.how}")
        return Row((head, *(told.cells[1:] if first else told.cells)), at)

    # -- what fails, what the control does

    def _failure(self, effect: FailureEffect) -> tuple[str, str]:
        """What fails, and what happens to it."""
        at = listed(effect.at) or "The transmitter"
        match effect.failure:
            case Failure.MEASUREMENT_BAD | Failure.SECONDARY_LOST:
                return at, "fails" if effect.seen == "bad" else "fails unnoticed"
            case Failure.MEASUREMENT_HIGH | Failure.MEASUREMENT_LOW:
                return at, f"reads too {'high' if effect.failure is Failure.MEASUREMENT_HIGH else 'low'}"
            case Failure.MEASUREMENT_FROZEN:
                return at, "stands still"
            case Failure.MOTIVE_POWER_LOST:
                powers = listed(dict.fromkeys(power_of(move.element) for move in effect.elements), "or")
                return at, f"loses its {powers}" if len(effect.at) == 1 else f"lose their {powers}"
            case Failure.OUTPUT_LOST:
                return at, "loses its signal" if len(effect.at) == 1 else "lose their signal"
        return listed(move.element.tag for move in effect.elements), "as the control system loses its power"

    def _control(self, effect: FailureEffect) -> Iterator[str]:
        told = [*self._own(effect), *self._setpoints(effect), *self._others(effect)]
        yield from told or [NOTHING if effect.seen else NOT_APPLICABLE]

    def _own(self, effect: FailureEffect) -> Iterator[str]:
        """What the controller does whose measurement fails."""
        failed = self._failed(effect)
        controlled = self._plant.controlled.get(failed.tag) if failed else None
        if not effect.seen or controlled is None:
            return
        tag = controlled.tag
        if effect.seen == "bad":
            if effect.mode or effect.forced_output:
                to = f"{tag} goes to {effect.mode}" if effect.mode else f"{tag} stays in its mode"
                held = effect.forced_output in ("", "hold")
                yield sentence(f"{to}, output {'held' if held else as_written(effect.forced_output)}")
            else:
                fault = fault_reading(controlled.loop.measurement)
                why = fault.reason if isinstance(fault, Undecided) else f"what {tag} then does is not given"
                yield sentence(f"{UNDECIDED}: {why}")
        elif normal_mode(controlled) in PASSIVE_MODES:
            yield sentence(f"{tag} is normally {normal_mode(controlled)} and does nothing")
        elif isinstance(effect.output, Undecided):
            yield sentence(f"{UNDECIDED}: {effect.output.reason}")
        elif effect.output:
            yield sentence(f"The output of {tag} {_OUTPUT[effect.output]}")

    def _setpoints(self, effect: FailureEffect) -> Iterator[str]:
        for move in effect.setpoints:
            tag = move.loop.tag
            if isinstance(move.direction, Undecided):
                yield sentence(f"Setpoint of {tag}: {_lower(UNDECIDED)}, {move.direction.reason}")
            elif move.direction:
                raises = move.direction > 0
                limit = value(move.limit) if move.limit and move.alone else ""
                end = f", to {limit} at the {'highest' if raises else 'lowest'}" if limit else ""
                yield sentence(f"{move.by} {'raises' if raises else 'lowers'} the setpoint of {tag}{end}")
            elif move.instead and move.selector:
                yield sentence(f"{move.selector.tag} goes on passing the demand of {listed(move.instead, 'or')}")

    def _others(self, effect: FailureEffect) -> Iterator[str]:
        for one in effect.unfollowed:
            does = {"track": "tracks", "hold": "holds", "nothing": "winds up, it is told to do nothing"}
            yield sentence(f"{one.loop.tag} {does.get(one.policy, 'is no longer followed; its policy is not given')}")
        for tag in dict.fromkeys(trip.interlock.tag for trip in effect.initiated):
            yield sentence(f"{tag} trips on the false reading")
        failed = self._failed(effect) if effect.seen == "bad" else None
        for tag in dict.fromkeys(
            trip.interlock.tag for trip in self._analysis.trips_on(transmitter_of(failed) if failed else None)
        ):
            yield f"What {tag} makes of a bad measurement is not given."

    def _failed(self, effect: FailureEffect) -> Loop | None:
        """The loop whose measurement fails; None where it is none."""
        if effect.failure is Failure.SECONDARY_LOST:
            return next((loop for tag in effect.at if (loop := self._plant.loop_of_transmitter.get(tag))), None)
        return effect.loop if effect.seen else None

    # -- the final element, the process

    def _elements(self, effect: FailureEffect) -> Iterator[str]:
        yield from map(_settles, effect.elements)
        if effect.elements:
            return
        asked = [effect.output, *(move.direction for move in effect.setpoints)]
        tripped = listed(dict.fromkeys(trip.interlock.tag for trip in effect.initiated if trip.interlock.actions))
        if any(isinstance(direction, Undecided) for direction in asked):
            yield f"{UNDECIDED}."
        elif effect.loop.tag in self._plant.controlled or self._analysis.functions_of(effect.loop):
            yield sentence(f"Stays where it is{f', but for the trip of {tripped}' if tripped else ''}")
        else:
            yield NOT_APPLICABLE

    def _process(self, effect: FailureEffect) -> Iterator[str]:
        told = {move.direction.reason for move in effect.elements if isinstance(move.direction, Undecided)}
        unknown = [(one.direction.reason, one.loop.tag) for one in effect.consequences
                   if isinstance(one.direction, Undecided)]  # fmt: skip
        for way, name in _PROCESS.items():
            moved = [
                f"{one.loop.tag} (against {listed(one.opposed_by, 'or')})" if one.opposed_by else one.loop.tag
                for one in effect.consequences
                if one.direction == way
            ]
            if moved:
                yield sentence(f"{name}: {listed(moved)}")
        for reason, tags in grouped(unknown).items():
            yield sentence(f"{UNDECIDED}: {listed(tags)}{'' if reason in told else f', {reason}'}")
        if not effect.consequences:
            yield NOT_APPLICABLE

    def _hazard(self, effect: FailureEffect) -> tuple[list[str], bool]:
        """Which measurements go towards their hazard, and whether any does."""
        if not effect.consequences:
            return [NOT_APPLICABLE], False
        hurt = [one.loop.tag for one in effect.consequences if one.hazardous]
        if hurt:
            return [f"Yes: {listed(hurt)}"], True
        unknown = [one for one in effect.consequences if one.hazardous is None]
        if not unknown:
            return ["No"], False
        unstated = [one.loop.tag for one in unknown if known(one.loop.hazard) is None]
        open_ = [one.loop.tag for one in unknown if known(one.loop.hazard) is not None]
        told = [f"{UNDECIDED}: hazard of {listed(unstated)} not known"] if unstated else []
        told += [f"{UNDECIDED}: {listed(open_)} may go either way"] if open_ else []
        return told, False

    def _against(self, effect: FailureEffect) -> tuple[Cell, bool]:
        """What stands against it, and whether nothing does that should."""
        alarms = [f"{found.loop.tag} {found.alarm.kind.replace('_', '-')}{_at(known(found.alarm.limit))}"
                  for one in effect.consequences for found in one.alarms]  # fmt: skip
        initiators = {trip.interlock.tag: trip.initiator for one in effect.consequences for trip in one.trips}
        trips = [f"{tag} {known(one.direction)}{_at(known(one.limit))}" for tag, one in initiators.items()]
        told = list(dict.fromkeys([*alarms, *trips]))
        if told:
            return self._writer.cell(f"{'; '.join(told)}."), False
        if not any(_matters(one) for one in effect.consequences):
            unknown = any(one.hazardous is None for one in effect.consequences)
            return self._writer.cell(f"{UNDECIDED}." if unknown else NOT_APPLICABLE), False
        back = [f"{one.tag} would move the final element back at its own limit" for one in effect.opposing]
        return self._writer.cell(f"{failure_story.NOTHING}.", *map(sentence, back), kind="strong"), True


def _lead(rows: int, certain: int, possible: int) -> str:
    """How many rows nothing stands against."""
    if not certain + possible:
        return f"Something independent stands against each of the {rows} rows that leads towards a hazard."
    surely = f"{number_word(certain)} {'leads' if certain == 1 else 'lead'}" if certain else ""
    perhaps = f"{number_word(possible)} may{'' if certain else ' lead'}" if possible else ""
    also = f" and {perhaps}" if certain and possible else ""
    return (
        f"Of the {rows} rows, {surely or perhaps} towards a hazard{also}, with nothing independent in the register "
        "that stands against it. These come first, and again at their loops."
    )


def _matters(one: Consequence) -> bool:
    """Whether something ought to stand against it: it goes to a hazard, or may."""
    return bool(one.hazardous) or (one.hazardous is None and known(one.loop.hazard) in ("high", "low", "both"))


def _at(limit: object) -> str:
    return f"{NO_BREAK}{value(limit)}" if limit is not None else ""


def _settles(move: ElementMove) -> str:
    if isinstance(move.direction, Undecided):
        return sentence(f"{move.element.tag}: {_lower(UNDECIDED)}, {move.direction.reason}")
    if move.instead and move.selector:
        return sentence(f"{move.element.tag} stays: {move.selector.tag} passes {listed(move.instead, 'or')}")
    if move.direction == 0:
        return sentence(f"{move.element.tag} stays where it is")
    if move.position == "stopped":
        return sentence(f"{move.element.tag} stops")
    return sentence(f"{moves_by_itself(move.element, move.direction)}{' fully' if move.position else ''}")


def _lower(text: str) -> str:
    return text[0].lower() + text[1:]
