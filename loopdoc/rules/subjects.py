"""What a rule may visit, how it is found in a register, and what else a rule may ask for."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.failure import FailureAnalysis
from loopdoc.engineering.pairing import CascadeLink, ControlledLoop, LoopAlarm, Plant, Trip
from loopdoc.engineering.time_to_act import TimeToAct
from loopdoc.register.model import FinalElement, Function, HeldValue, Instrument, Interlock, Loop, PlantUnit
from loopdoc.register.place import Fault, Place
from loopdoc.register.text import TextFile
from loopdoc.rules.acceptance import DeviationUse
from loopdoc.rules.finding import Ran
from loopdoc.rules.policy import Limits
from loopdoc.rules.prose import KnownTags, Prose, known_tags, proses
from loopdoc.rules.references import DefinedTag, Reference, defined_tags, references


@dataclass(frozen=True, slots=True)
class Faults:
    """What the reader found in the text, by the name of the file."""

    by_file: Mapping[str, tuple[Fault, ...]]


@dataclass(frozen=True, slots=True)
class Scope:
    """What one check looks at, and the limits by which it judges."""

    plant: Plant
    limits: Limits
    faults: Faults
    rule_ids: tuple[str, ...]
    dynamics: Dynamics
    times: TimeToAct
    failures: FailureAnalysis
    uses: tuple[DeviationUse, ...] = ()
    """What became of each deviation; none before the other rules have been run."""
    ran: Ran = field(default_factory=lambda: Ran.of({}))


SUBJECTS: Mapping[type, Callable[[Scope], Iterable[Any]]] = {
    TextFile: lambda scope: scope.plant.register.files,
    Plant: lambda scope: (scope.plant,),
    DefinedTag: lambda scope: defined_tags(scope.plant.register),
    Reference: lambda scope: references(scope.plant, scope.rule_ids),
    Prose: lambda scope: proses(scope.plant.register),
    HeldValue: lambda scope: scope.plant.register.holds,
    DeviationUse: lambda scope: scope.uses,
    Loop: lambda scope: scope.plant.register.loops.values(),
    ControlledLoop: lambda scope: scope.plant.controlled.values(),
    CascadeLink: lambda scope: scope.plant.links,
    LoopAlarm: lambda scope: scope.plant.alarms,
    FinalElement: lambda scope: scope.plant.register.final_elements.values(),
    Instrument: lambda scope: scope.plant.register.instruments.values(),
    Function: lambda scope: scope.plant.register.functions.values(),
    Interlock: lambda scope: scope.plant.register.interlocks.values(),
    Trip: lambda scope: scope.plant.trips,
    PlantUnit: lambda scope: scope.plant.register.units.values(),
}
"""What a rule may visit (its first parameter), and where one check finds it."""

BESIDES: Mapping[type, Callable[[Scope], Any]] = {
    Plant: lambda scope: scope.plant,
    Limits: lambda scope: scope.limits,
    Faults: lambda scope: scope.faults,
    KnownTags: lambda scope: known_tags(scope.plant.register),
    Ran: lambda scope: scope.ran,
    Dynamics: lambda scope: scope.dynamics,
    TimeToAct: lambda scope: scope.times,
    FailureAnalysis: lambda scope: scope.failures,
}
"""What a rule may ask for besides its subject (its further parameters)."""


def tag_of(subject: Any) -> str:
    """The tag that a subject is about; the name of the file or `register` where it is about no tag."""
    match subject:
        case Plant():
            return "register"
        case TextFile():
            return subject.name
        case CascadeLink():
            return subject.primary.tag
        case LoopAlarm():
            return subject.loop.tag
        case Trip():
            return subject.interlock.tag
        case PlantUnit():
            return subject.number
        case _:
            return str(subject.tag)


def name_of(subject: Any) -> str:
    """The name under which a check that was not made is listed."""
    match subject:
        case CascadeLink():
            return f"{subject.primary.tag} to {subject.secondary.tag}"
        case LoopAlarm():
            return f"{subject.loop.tag} {subject.alarm.kind.replace('_', '-')} alarm"
        case Trip():
            return f"{subject.interlock.tag} {subject.initiator.tag}"
        case _:
            return tag_of(subject)


def place_of(subject: Any, plant: Plant) -> Place:
    """Where a subject stands in the text."""
    match subject:
        case TextFile():
            return subject.place(())
        case DefinedTag() | Reference() | HeldValue() | Prose():
            return subject.place
        case _:
            return plant.register.defined_at(tag_of(subject)) or plant.register.root.place(())
