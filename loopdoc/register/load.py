"""A folder of text files to a `Register`.

What cannot be read as a register at all is `Unreadable`; every other mistake is a fault beside the register
that could be built, so that one bad value does not hide the rest of the plant from the check.
"""

from __future__ import annotations

from collections.abc import Hashable, Iterator, Mapping
from dataclasses import dataclass, fields
from functools import cache
from pathlib import Path
from types import UnionType
from typing import Any, TypeVar, Union, cast, get_args, get_origin, get_type_hints

from loopdoc.register.files import ROOT_NAME, Files, FolderFiles, included, located, read_file
from loopdoc.register.model import (
    Alarm,
    Deviation,
    Disturbance,
    FinalElement,
    Function,
    HeldValue,
    Hold,
    Initiator,
    Instrument,
    Interlock,
    InterlockAction,
    Loop,
    Measurement,
    Move,
    Origin,
    Part,
    PlantUnit,
    Process,
    Register,
    Revision,
    Site,
    UnitText,
)
from loopdoc.register.place import Fault, Place
from loopdoc.register.quantity import (
    Gain,
    Quantity,
    QuantityError,
    Range,
    parse_gain,
    parse_number_range,
    parse_quantity,
    parse_range,
)
from loopdoc.register.schema import schema_faults
from loopdoc.register.tag_grammar import GrammarFault, TagGrammar, read_grammar
from loopdoc.register.text import Spot, TextFile
from loopdoc.register.units import unit

DEFAULT_NUMBERING = "{unit}-{kind}-{serial}"
P = TypeVar("P", bound=Part)
_SECTIONS = ("loops", "final_elements", "instruments", "functions", "interlocks", "texts", "units")
_UNREADABLE = Hold("the value in the register could not be read", readable=False)


@dataclass(frozen=True, slots=True)
class Unreadable:
    """Why a folder or file cannot be read as a register."""

    faults: tuple[Fault, ...]
    sources: Mapping[str, bytes]
    """Content of each file read, by its name."""


@dataclass(frozen=True, slots=True)
class Loaded:
    """A register and the faults found while reading it."""

    register: Register
    faults: tuple[Fault, ...]
    sources: Mapping[str, bytes]
    """Content of each file read, by its name."""


def load(path: Path) -> Loaded | Unreadable:
    """Read the register in a folder, or the one whose root file is ``path``."""
    folder, root_name = located(path)
    if not path.exists():
        return _unreadable(Place(str(path), 1, 1), "there is no such file or folder", "name the register's folder")
    if not (folder / root_name).is_file():
        return _unreadable(
            Place(str(path), 1, 1),
            f"the folder has no `{ROOT_NAME}`",
            "name the register's folder, or make one: loopdoc new",
        )
    return load_files(FolderFiles(folder), root_name)


def load_files(files: Files, root_name: str = ROOT_NAME) -> Loaded | Unreadable:
    """Read a register from its files, wherever they are kept; the root file must be among them."""
    sources: dict[str, bytes] = {}
    root = read_file(files, root_name, sources)
    if isinstance(root, Fault):
        return Unreadable((root,), sources)
    if not isinstance(root.data, dict):
        return _unreadable(
            root.place(()),
            "a register is a mapping of keys; this is something else",
            "begin with `format: 1` and `site:`",
            sources,
        )
    if not root.data.keys() & {"format", "site", "revision", "include"} and root.data.keys() & set(_SECTIONS):
        return _unreadable(
            root.place(()),
            "this is a file that a register includes, not the register",
            f"name the folder that holds `{ROOT_NAME}`",
            sources,
        )
    names, include_faults = included(files, root)
    texts: list[TextFile] = [root]
    unreadable = list(include_faults)
    for name in names:
        text = read_file(files, name, sources)
        if isinstance(text, Fault):
            unreadable.append(text)
        elif not isinstance(text.data, dict):
            unreadable.append(
                Fault(
                    text.place(()),
                    "an included file is a mapping of keys; this is something else",
                    "begin with `loops:`",
                )
            )
        else:
            texts.append(text)
    if unreadable:
        return Unreadable(tuple(unreadable), sources)
    faults = [fault for text in texts for fault in schema_faults(text, root=text is root)]
    reader = _Reader(faults)
    register = reader.register(tuple(texts))
    return Loaded(register, tuple(faults), sources)


def _unreadable(place: Place, message: str, remedy: str, sources: Mapping[str, bytes] | None = None) -> Unreadable:
    return Unreadable((Fault(place, message, remedy),), sources or {})


# ---------------------------------------------------------------- from plain data to parts


@cache
def _field_types(part: type[Any]) -> tuple[tuple[str, type, bool, bool], ...]:
    """For each field of a part that is read by its type alone: name, type, whether it is a list and may be held."""
    hints = get_type_hints(part)
    found = []
    for entry in fields(part):
        if entry.name == "origin":
            continue
        hint = hints[entry.name]
        members = [hint]
        if get_origin(hint) in (Union, UnionType):
            members = [member for member in get_args(hint) if member not in (type(None), Hold)]
        kind, may_be_held = members[0], Hold in get_args(hint)
        if kind in (str, float, bool, Quantity, Range, Gain) or (isinstance(kind, type) and issubclass(kind, Part)):
            found.append((entry.name, kind, False, may_be_held))
        elif get_origin(kind) is tuple and (get_args(kind)[0] is str or issubclass(get_args(kind)[0], Part)):
            found.append((entry.name, get_args(kind)[0], True, may_be_held))
    return tuple(found)


_PARSERS = {Quantity: parse_quantity, Range: parse_range, Gain: parse_gain}


class _Reader:
    """Builds the parts of the register, adding a fault for each value that cannot be read."""

    def __init__(self, faults: list[Fault]) -> None:
        self._faults = faults
        self._told = {fault.place for fault in faults}
        self._faulty = {fault.place.file for fault in faults}
        """Files in which the schema refuses something: elsewhere no place has to be looked up."""

    # -- values

    def _value(self, origin: Origin, steps: tuple[str | int, ...], value: Any, kind: type) -> Any:
        """One value as ``kind``; a Hold where it is held or cannot be read; None where it is not given."""
        if value is None:
            return None
        if isinstance(value, dict) and "hold" in value:
            return Hold(str(value["hold"]))
        if kind in _PARSERS:
            if not isinstance(value, str):
                return _UNREADABLE  # the schema has said so
            try:
                return _PARSERS[kind](value)
            except QuantityError as error:
                self._fault(origin, steps, f"`{steps[-1]}`: {error.fault}", error.remedy)
                return _UNREADABLE
        if kind is float:
            return float(value) if isinstance(value, int | float) and not isinstance(value, bool) else _UNREADABLE
        if kind is str:
            # A mark, such as the number of a pair, may be a whole number; a word not known to the schema is refused.
            is_word = isinstance(value, str) or type(value) is int
            return str(value) if is_word and not self._refused(origin, *steps) else _UNREADABLE
        if kind is bool:
            return value if isinstance(value, bool) else False
        return self._part(Origin(origin.source, (*origin.path, *steps)), value, kind)

    def _part(self, origin: Origin, value: Any, part: type[P], /, **given: Any) -> P | Hold:
        if not isinstance(value, dict):
            return _UNREADABLE
        if "hold" in value and part is not Loop:
            return Hold(str(value["hold"]))
        read: dict[str, Any] = {}
        # mypy takes a class for unhashable where it cannot tell whether its instances are.
        for name, inner, many, may_be_held in _field_types(cast("Hashable", part)):
            if name in given:
                continue
            written = value.get(name)
            if many:
                found = () if written is None else self._list(origin, name, written, inner)
                read[name] = found if may_be_held or isinstance(found, tuple) else ()
            elif written is None:  # as most are
                read[name] = False if inner is bool else None
            else:
                read[name] = self._value(origin, (name,), written, inner)
                if inner is bool:
                    read[name] = bool(read[name])
        return part(origin=origin, **read, **given)

    def _refused(self, origin: Origin, *steps: str | int) -> bool:
        """Whether the schema refuses a value."""
        return origin.source.name in self._faulty and origin.place(*steps) in self._told

    def _fault(self, origin: Origin, steps: tuple[str | int, ...], message: str, remedy: str) -> None:
        place = origin.place(*steps)
        if place not in self._told:
            self._told.add(place)
            self._faults.append(Fault(place, message, remedy, "/" + "/".join(map(str, (*origin.path, *steps)))))

    def _below(self, origin: Origin, value: Any, name: str) -> Iterator[tuple[str, Any, Origin]]:
        """Entries of the mapping ``name`` inside ``value``: key, value, origin."""
        section = value.get(name) if isinstance(value, dict) else None
        if isinstance(section, dict) and "hold" not in section:
            for key, entry in section.items():
                yield key, entry, Origin(origin.source, (*origin.path, name, key))

    def _list(self, origin: Origin, name: str, written: Any, kind: type) -> tuple[Any, ...] | Hold:
        """A list of texts or parts; a hold where it, or one of its parts, is not known."""
        if isinstance(written, dict) and "hold" in written:
            return Hold(str(written["hold"]))
        if not isinstance(written, list):
            return _UNREADABLE  # the schema has said so
        if kind is str:
            marks = ((at, item) for at, item in enumerate(written) if isinstance(item, str) or type(item) is int)
            return tuple(
                str(mark) for at, mark in marks if isinstance(mark, str) or not self._refused(origin, name, at)
            )
        within = (*origin.path, name)
        parts = [self._part(Origin(origin.source, (*within, at)), entry, kind) for at, entry in enumerate(written)]
        return next((part for part in parts if isinstance(part, Hold)), tuple(parts))

    # -- parts with more than plain fields

    def _loop(self, origin: Origin, tag: str, value: Any) -> Loop | None:
        alarms = {}
        for kind, entry, where in self._below(origin, value, "alarms"):
            warns_of = {loop: side for loop, side, _ in self._below(where, entry, "warns_of") if isinstance(side, str)}
            alarm = self._part(where, entry, Alarm, kind=kind, warns_of=warns_of)
            if isinstance(alarm, Alarm):
                alarms[kind] = alarm
        disturbances = {}
        for name, entry, where in self._below(origin, value, "disturbances"):
            moves = {tag: self._part(at, move, Move, tag=tag) for tag, move, at in self._below(where, entry, "moves")}
            known_moves = {tag: move for tag, move in moves.items() if isinstance(move, Move)}
            disturbance = self._part(where, entry, Disturbance, name=name, moves=known_moves)
            if isinstance(disturbance, Disturbance):
                disturbances[name] = disturbance
        process = self._process(Origin(origin.source, (*origin.path, "process")), value.get("process"))
        loop = self._part(origin, value, Loop, tag=tag, alarms=alarms, disturbances=disturbances, process=process)
        return loop if isinstance(loop, Loop) else None

    def _process(self, origin: Origin, value: Any) -> Process | Hold | None:
        if value is None:
            return None
        if not isinstance(value, dict):
            return _UNREADABLE
        if "hold" in value:
            return Hold(str(value["hold"]))
        branches = {}
        for tag, entry, where in self._below(origin, value, "branches"):
            branch = self._process(where, entry)
            if isinstance(branch, Process):
                branches[tag] = branch
        process = self._part(origin, value, Process, lags=self._lags(origin, value), branches=branches)
        return process

    def _lags(self, origin: Origin, value: dict[str, Any]) -> tuple[Quantity, ...] | Hold:
        if "lags" not in value:
            lag = self._value(origin, ("lag",), value.get("lag"), Quantity)
            return lag if isinstance(lag, Hold) else () if lag is None else (lag,)
        written = value["lags"]
        if isinstance(written, dict) and "hold" in written:
            return Hold(str(written["hold"]))
        if not isinstance(written, list):
            return _UNREADABLE
        lags = [self._value(origin, ("lags", index), item, Quantity) for index, item in enumerate(written)]
        held = [lag for lag in lags if not isinstance(lag, Quantity)]
        return held[0] or _UNREADABLE if held else tuple(lags)

    def _function(self, origin: Origin, tag: str, value: Any) -> Function | None:
        weights = {
            key: float(entry)
            for key, entry, _ in self._below(origin, value, "weights")
            if isinstance(entry, int | float) and not isinstance(entry, bool)
        }
        outputs = {}
        for element, entry, where in self._below(origin, value, "outputs"):
            span = self._value(Origin(where.source, where.path[:-1]), (element,), entry, Range)
            if isinstance(span, Range):
                outputs[element] = span
        function = self._part(
            origin,
            value,
            Function,
            tag=tag,
            weights=weights,
            outputs=outputs,
            span=self._ratio_span(origin, value),
        )
        return function if isinstance(function, Function) else None

    def _ratio_span(self, origin: Origin, value: Any) -> Range | Hold | None:
        """The span of a ratio setting: two numbers, as a rule without a unit."""
        written = value.get("span")
        if isinstance(written, str):
            try:
                return Range(*parse_number_range(written), unit("fraction"))
            except QuantityError:
                pass  # it may have a unit, as percent
        span = self._value(origin, ("span",), written, Range)
        return span if isinstance(span, Range | Hold) else None

    def _interlock(self, origin: Origin, tag: str, value: Any) -> Interlock | None:
        initiators = {}
        for sensor, entry, where in self._below(origin, value, "initiators"):
            direction, limit = self._trips(where, entry.get("trips") if isinstance(entry, dict) else None)
            initiator = self._part(where, entry, Initiator, tag=sensor, direction=direction, limit=limit)
            if isinstance(initiator, Initiator):
                initiators[sensor] = initiator
        actions = {}
        for target, entry, where in self._below(origin, value, "actions"):
            if isinstance(entry, str):
                actions[target] = InterlockAction(origin=where, tag=target, position=entry, mode=None, output=None)
            elif isinstance(entry, dict):
                action = self._part(where, entry, InterlockAction, tag=target, position=None)
                if isinstance(action, InterlockAction):
                    actions[target] = action
        interlock = self._part(origin, value, Interlock, tag=tag, initiators=initiators, actions=actions)
        return interlock if isinstance(interlock, Interlock) else None

    def _trips(self, origin: Origin, written: Any) -> tuple[str | Hold | None, Quantity | Hold | None]:
        if isinstance(written, dict) and "hold" in written:
            held = Hold(str(written["hold"]))
            return held, held
        if not isinstance(written, str):
            return (None, None) if written is None else (_UNREADABLE, _UNREADABLE)
        direction, _, limit = written.partition(" ")
        if direction not in ("above", "below"):
            return _UNREADABLE, _UNREADABLE  # the schema has said so
        return direction, self._value(origin, ("trips",), limit, Quantity)

    def _instrument(self, origin: Origin, tag: str, value: Any) -> Instrument | None:
        measurement = self._part(origin, value, Measurement, transmitter=tag)
        if not isinstance(measurement, Measurement):
            return None
        instrument = self._part(origin, value, Instrument, tag=tag, measurement=measurement)
        return instrument if isinstance(instrument, Instrument) else None

    # -- the whole

    def register(self, files: tuple[TextFile, ...]) -> Register:
        root = files[0]
        assert isinstance(root.data, dict)
        sections: dict[str, dict[str, tuple[Origin, Any]]] = {name: {} for name in _SECTIONS}
        first_key: dict[str, Place] = {}
        twice: list[tuple[str, Place, Place]] = []
        deviations: list[Deviation] = []
        for file in files:
            origin = Origin(file, ())
            for name in _SECTIONS:
                for tag, value, where in self._below(origin, file.data, name):
                    if not isinstance(value, dict):
                        continue  # the schema has said so
                    space = name if name in ("texts", "units") else "tags"
                    first = first_key.setdefault(f"{space}/{tag}", where.key())
                    if first == where.key():
                        sections[name][tag] = (where, value)
                    else:
                        twice.append((tag, where.key(), first))
            written = file.data.get("deviations") if isinstance(file.data, dict) else None
            for index, entry in enumerate(written if isinstance(written, list) else ()):
                deviation = self._part(Origin(file, ("deviations", index)), entry, Deviation)
                if isinstance(deviation, Deviation):
                    deviations.append(deviation)
        data, at_root = root.data, Origin(root, ())

        def only(kind: type[P], name: str) -> P | None:
            part = self._value(at_root, (name,), data.get(name), kind)
            return part if isinstance(part, kind) else None

        history = []
        for index, entry in enumerate(data["history"] if isinstance(data.get("history"), list) else ()):
            revision = self._part(Origin(root, ("history", index)), entry, Revision)
            if isinstance(revision, Revision):
                history.append(revision)

        def parts(name: str, kind: type[P], key: str) -> dict[str, P]:
            made = {tag: self._part(where, value, kind, **{key: tag}) for tag, (where, value) in sections[name].items()}
            return {tag: part for tag, part in made.items() if isinstance(part, kind)}

        def built(name: str, build: Any) -> dict[str, Any]:
            made = {tag: build(where, tag, value) for tag, (where, value) in sections[name].items()}
            return {tag: part for tag, part in made.items() if part is not None}

        texts = {tag: self._part(where, value, UnitText) for tag, (where, value) in sections["texts"].items()}
        numbering = data.get("numbering")
        policy = data.get("policy")
        return Register(
            root=root,
            files=files,
            site=only(Site, "site"),
            revision=only(Revision, "revision"),
            history=tuple(history),
            numbering=numbering if isinstance(numbering, str) else DEFAULT_NUMBERING,
            tag_pattern=self._tag_pattern(root),
            policy={
                name: float(value)
                for name, value in (policy if isinstance(policy, dict) else {}).items()
                if isinstance(value, int | float) and not isinstance(value, bool)
            },
            units=parts("units", PlantUnit, "number"),
            loops=built("loops", self._loop),
            final_elements=parts("final_elements", FinalElement, "tag"),
            instruments=built("instruments", self._instrument),
            functions=built("functions", self._function),
            interlocks=built("interlocks", self._interlock),
            deviations=tuple(deviations),
            texts={tag: text for tag, text in texts.items() if isinstance(text, UnitText)},
            twice=tuple(twice),
            holds=tuple(hold for file in files for hold in _holds(file)),
        )

    def _tag_pattern(self, root: TextFile) -> TagGrammar | None:
        assert isinstance(root.data, dict)
        written = root.data.get("tags")
        if not isinstance(written, str):
            return None
        grammar = read_grammar(written)
        if isinstance(grammar, GrammarFault):
            self._fault(Origin(root, ()), ("tags",), grammar.message, grammar.remedy)
            return None
        return grammar


def _holds(file: TextFile) -> Iterator[HeldValue]:
    """Every hold of one file, with the tag (or section) under which it stands."""

    def walk(data: Any, spot: Spot, path: tuple[str | int, ...]) -> Iterator[HeldValue]:
        if isinstance(data, dict) and isinstance(spot.inside, dict):
            if "hold" in data:
                depth = 1 if len(path) > 1 and path[0] in _SECTIONS else 0
                tag, inner = (str(path[depth]), path[depth + 1 :]) if path else ("register", ())
                yield HeldValue(
                    tag=tag,
                    path=inner,
                    reason=str(data["hold"]),
                    place=Place(file.name, spot.key_line, spot.key_column),
                )
                return
            for key, value in data.items():
                if isinstance(value, dict | list):
                    yield from walk(value, spot.inside[key], (*path, key))
        elif isinstance(data, list) and isinstance(spot.inside, list):
            for index, value in enumerate(data):
                if isinstance(value, dict | list):
                    yield from walk(value, spot.inside[index], (*path, index))

    yield from walk(file.data, file.spot, ())
