"""The schedule of failure effects of each unit: one row for every loop and every failure that concerns it."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.naming import moves_by_itself, power_of, quantity
from loopdoc.documents.narrative import failure_story
from loopdoc.documents.schedules.schedule import (
    A3,
    DASHES,
    NOT_APPLICABLE,
    Cell,
    Column,
    Group,
    Row,
    Schedule,
    Writer,
    page,
    unit_title,
)
from loopdoc.documents.whereabouts import anchor, natural, unit_numbers, unit_of
from loopdoc.documents.wording import NO_BREAK, as_written, counted, grouped, listed, sentence, upper_first, value
from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.failure import Consequence, Failure, FailureAnalysis, FailureEffect
from loopdoc.engineering.faults import fault_reading
from loopdoc.engineering.spreading import PASSIVE_MODES, ElementMove, normal_mode, transmitter_of
from loopdoc.register.model import Loop, known

FOLDER = "failure-effects"
COLUMNS = (
    Column("Loop", 5.2), Column("Failure", 12.5), Column("What the controller sees", 11.0),
    Column("What the control does", 19.5), Column("Where the final element goes", 13.0),
    Column("Where the process goes", 15.0), Column("Towards the hazard?", 8.8),
    Column("What stands against it", 15.0),
)  # fmt: skip
UNDECIDED = "Not decided"
NOTHING = "Nothing."
_SEEN = {
    "bad": "A bad measurement", "high": "Too high, taken as good", "low": "Too low, taken as good",
    "frozen": "The old value, taken as good",
}  # fmt: skip
_WAYS = {1: "rises", -1: "falls", 0: "is left to itself"}


def failure_schedules(basis: Basis) -> Iterator[Page]:
    """The schedule of each unit that has a loop whose failures lead anywhere."""
    analysis = FailureAnalysis(basis.plant)
    for number in unit_numbers(basis.plant):
        own = [loop for loop in basis.plant.register.loops.values() if unit_of(loop) == number]
        found = [(loop, effects) for loop in sorted(own, key=lambda loop: natural(loop.tag))
                 if (effects := analysis.effects(loop.tag))]  # fmt: skip
        if found:
            yield _Failures(basis, analysis).page(number, found)


class _Failures:
    """The schedule of one unit while it is written."""

    def __init__(self, basis: Basis, analysis: FailureAnalysis) -> None:
        self._basis = basis
        self._plant = basis.plant
        self._analysis = analysis
        self._writer = Writer(basis)

    def page(self, number: str, found: list[tuple[Loop, tuple[FailureEffect, ...]]]) -> Page:
        groups = tuple(
            Group(
                tuple(self._row(effect, "" if index else anchor(loop.tag)) for index, effect in enumerate(effects)),
                self._writer.prose(self._heading(loop)),
            )
            for loop, effects in found
        )
        effects = sum(len(effects) for _, effects in found)
        return page(
            self._basis, self._writer,
            folder=FOLDER, kind="Failure effects", code="FE", unit=number, paper=A3,
            title=unit_title(self._basis, number),
            extent=upper_first(f"{counted(len(found), 'loop')}, {counted(effects, 'failure')}"),
            reading=(failure_story.ASSUMPTIONS.replace("They", "Failures", 1), DASHES), caution=(
                "The effects follow from signs and modes alone, one failure at a time, without how far or how fast. "
                "They support a hazard study and do not replace one."
            ),
            view={"schedules": (Schedule("", COLUMNS, groups),)},
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

    def _row(self, effect: FailureEffect, at: str) -> Row:
        write = self._writer
        hazard, strong = self._hazard(effect)
        return Row(
            (
                write.cell(effect.loop.tag), write.cell(self._failure(effect)),
                write.cell(self._sees(effect)), write.cell(*self._control(effect)),
                write.cell(*self._elements(effect)), write.cell(*self._process(effect)),
                write.cell(*hazard, kind="strong" if strong else ""), self._against(effect),
            ),
            at,
        )  # fmt: skip

    # -- what fails, what the control does

    def _failure(self, effect: FailureEffect) -> str:
        at = listed(effect.at)
        match effect.failure:
            case Failure.MEASUREMENT_BAD | Failure.SECONDARY_LOST:
                return f"{at or 'The transmitter'} fails"
            case Failure.MEASUREMENT_HIGH | Failure.MEASUREMENT_LOW:
                way = "high" if effect.failure is Failure.MEASUREMENT_HIGH else "low"
                return f"{at or 'The transmitter'} reads too {way}"
            case Failure.MEASUREMENT_FROZEN:
                return f"{at or 'The transmitter'} stands still"
            case Failure.OUTPUT_LOST:
                return f"{at} {'loses its' if len(effect.at) == 1 else 'lose their'} signal"
            case Failure.MOTIVE_POWER_LOST:
                powers = listed(dict.fromkeys(power_of(move.element) for move in effect.elements), "or")
                return f"{at} {'loses its' if len(effect.at) == 1 else 'lose their'} {powers}"
        return "The control system loses its power"

    def _control(self, effect: FailureEffect) -> Iterator[str]:
        told = [*self._own(effect), *self._setpoints(effect), *self._others(effect)]
        yield from told or [NOTHING if effect.seen else NOT_APPLICABLE]

    def _sees(self, effect: FailureEffect) -> str:
        failed = self._failed(effect)
        fault = fault_reading(failed.measurement) if failed and effect.seen == "bad" else None
        if isinstance(fault, Undecided):
            return f"{UNDECIDED}: {fault.reason}."
        return _SEEN.get(effect.seen, NOT_APPLICABLE)

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
                given = not isinstance(fault_reading(controlled.loop.measurement), Undecided)
                yield f"{UNDECIDED}: what {tag} then does is not given." if given else f"{UNDECIDED}."
        elif normal_mode(controlled) in PASSIVE_MODES:
            yield sentence(f"{tag} is normally {normal_mode(controlled)} and does nothing")
        elif isinstance(effect.output, Undecided):
            yield sentence(f"{UNDECIDED}: {effect.output.reason}")
        elif effect.output:
            yield sentence(f"The output of {tag} {_WAYS[effect.output]}")

    def _setpoints(self, effect: FailureEffect) -> Iterator[str]:
        for move in effect.setpoints:
            tag = move.loop.tag
            if isinstance(move.direction, Undecided):
                yield sentence(f"Setpoint of {tag}: {_lower(UNDECIDED)}, {move.direction.reason}")
            elif move.direction:
                raises = move.direction > 0
                end = f", to {value(move.limit)} at the {'highest' if raises else 'lowest'}" if move.limit else ""
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
        if any(isinstance(direction, Undecided) for direction in asked):
            yield f"{UNDECIDED}."
        elif effect.loop.tag in self._plant.controlled or self._analysis.functions_of(effect.loop):
            yield "Stays where it is."
        else:
            yield NOT_APPLICABLE

    def _process(self, effect: FailureEffect) -> Iterator[str]:
        told = {move.direction.reason for move in effect.elements if isinstance(move.direction, Undecided)}
        unknown = [(one.direction.reason, one.loop.tag) for one in effect.consequences
                   if isinstance(one.direction, Undecided)]  # fmt: skip
        for one in effect.consequences:
            if not isinstance(one.direction, Undecided):
                rivals = f"; {listed(one.opposed_by, 'or')} works against it" if one.opposed_by else ""
                yield sentence(f"{one.loop.tag}: the {quantity(one.loop)} {_WAYS[one.direction]}{rivals}")
        for reason, tags in grouped(unknown).items():
            yield sentence(f"{listed(tags)}: {_lower(UNDECIDED)}{'' if reason in told else f', {reason}'}")
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

    def _against(self, effect: FailureEffect) -> Cell:
        alarms = [f"{found.loop.tag} {found.alarm.kind.replace('_', '-')}{_at(known(found.alarm.limit))}"
                  for one in effect.consequences for found in one.alarms]  # fmt: skip
        initiators = {trip.interlock.tag: trip.initiator for one in effect.consequences for trip in one.trips}
        trips = [f"{tag} {known(one.direction)}{_at(known(one.limit))}" for tag, one in initiators.items()]
        told = list(dict.fromkeys([*alarms, *trips]))
        if told:
            return self._writer.cell(f"{'; '.join(told)}.")
        if not any(_matters(one) for one in effect.consequences):
            unknown = any(one.hazardous is None for one in effect.consequences)
            return self._writer.cell(f"{UNDECIDED}." if unknown else NOT_APPLICABLE)
        back = [f"{one.tag} would move the final element back at its own limit" for one in effect.opposing]
        return self._writer.cell(f"{failure_story.NOTHING}.", *map(sentence, back), kind="strong")


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
