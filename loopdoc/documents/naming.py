"""What things are called in a sentence: the quantity that a loop measures, a final element, what moves it."""

from __future__ import annotations

import re
from collections.abc import Iterable

from loopdoc.documents.wording import NO_BREAK, lower_first, value, with_article
from loopdoc.register.model import FinalElement, Loop, Measurement, known

_NAMED_BY_SERVICE = ("analysis", "weight", "power", "speed", "position", "current", "vibration")
"""Variables of which a service says enough without the word."""

_DRIVES = ("variable-speed drive", "motor")


def stem(service: str) -> str:
    """A service without what follows its first comma, semicolon, colon or bracket."""
    return re.split(r"[,;:(]", service, maxsplit=1)[0].strip()


def quantity(loop: Loop) -> str:
    """What a loop measures, in full and without an article: `rectifier tray 4 temperature`."""
    measurement = known(loop.measurement)
    variable = known(measurement.variable) if measurement else None
    service = stem(known(loop.service) or "")
    if variable == "analysis":
        content = re.match(r"(.+?) in (.+)", service)
        if content:
            return f"{lower_first(content[1])} content of {content[2]}"
    if not service:
        return variable or "measurement"
    if variable is None or variable in _NAMED_BY_SERVICE or variable.rsplit(" ", 1)[-1] in service.casefold():
        return lower_first(service)
    return f"flow of {lower_first(service)}" if variable == "flow" else variable


def short_quantity(loop: Loop) -> str:
    """What a loop measures, in a word or two: `temperature`, `methanol content`."""
    measurement = known(loop.measurement)
    variable = known(measurement.variable) if measurement else None
    if variable == "analysis":
        return quantity(loop).partition(" of ")[0] if " content of " in quantity(loop) else "analysis"
    return variable or quantity(loop)


class Names:
    """Names of the measured quantities of loops that are told together, none of them ambiguous."""

    def __init__(self, loops: Iterable[Loop]) -> None:
        self._loops = tuple(loops)

    def bare(self, loop: Loop) -> str:
        """The short name where no other loop of the story has it, the full one otherwise."""
        short = short_quantity(loop)
        alone = all(short_quantity(other) != short for other in self._loops if other.tag != loop.tag)
        return short if alone else quantity(loop)

    def the(self, loop: Loop) -> str:
        """The same with its article."""
        return f"the {self.bare(loop)}"


def sensor(measurement: Measurement) -> str:
    """Primary element and sensor as a reader wants them beside the tag; empty where nothing is given."""
    parts = [known(measurement.element), known(measurement.sensor)]
    if known(measurement.characteristic) == "square root":
        parts.append("square root")
    return ", ".join(part for part in parts if part)


def with_sensor(measurement: Measurement) -> str:
    """Tag of a transmitter with its sensor: `TT-2014 (Pt100 class A)`; empty where it has no tag."""
    tag, kind = known(measurement.transmitter), sensor(measurement)
    if tag is None:
        return ""
    return f"{tag} ({kind})" if kind else tag


def in_brackets(measurement: Measurement) -> str:
    """Transmitter, sensor and range behind the name of what is measured: ` (FT-2011, orifice plate, 0 to 8 t/h)`."""
    written = known(measurement.range)
    parts = (known(measurement.transmitter), sensor(measurement), value(written) if written else "")
    told = ", ".join(part for part in parts if part)
    return f" ({told})" if told else ""


def over_range(measurement: Measurement) -> str:
    """` over 0 to 8 t/h`, with its leading space; empty where the range is not known."""
    written = known(measurement.range)
    return f" over {value(written)}" if written else ""


# ---------------------------------------------------------------- final elements


def element_phrase(element: FinalElement, told: str = "") -> str:
    """A final element with what it is: `FV-2011, an equal percentage control valve`.

    ``told`` is what the sentence has named already: a service that says the same is left out.
    """
    kind, service = known(element.kind), stem(known(element.service) or "")
    characteristic = known(element.characteristic)
    new = service and service.casefold() not in told.casefold()
    if kind is None:
        return f"{element.tag}, {lower_first(service)}" if new else element.tag
    noun = f"{characteristic} {kind}" if characteristic and kind == "control valve" else kind
    if kind in _DRIVES or kind == "heater bank":
        return f"{element.tag}, the {noun} of the {lower_first(service)}" if service else f"{element.tag}, the {noun}"
    return f"{element.tag}, {with_article(noun)}{f' on the {lower_first(service)}' if new else ''}"


def moves(element: FinalElement, direction: int) -> str:
    """What somebody does who moves it: `opens FV-2011`, `slows down SC-1017`."""
    return f"{_verb(element, direction)} {element.tag}"


def moves_by_itself(element: FinalElement, direction: int) -> str:
    """What it does: `FV-2011 opens`, `SC-1017 slows down`."""
    if known(element.kind) == "heater bank":
        return f"{element.tag} takes {'more' if direction > 0 else 'less'} power"
    return f"{element.tag} {_verb(element, direction)}"


def made_to_move(element: FinalElement, direction: int) -> str:
    """What a measurement makes a controller do: `open FV-2011`, `slow down SC-1017`."""
    more, less = _verbs(element)
    return f"{more if direction > 0 else less} {element.tag}"


def _verbs(element: FinalElement) -> tuple[str, str]:
    kind = known(element.kind)
    if kind in _DRIVES:
        return "speed up", "slow down"
    return ("turn up", "turn down") if kind == "heater bank" else ("open", "close")


def _verb(element: FinalElement, direction: int) -> str:
    more, less = _verbs(element)
    verb, _, rest = (more if direction > 0 else less).partition(" ")
    return f"{verb}s {rest}".rstrip()


def travel(element: FinalElement) -> str:
    """What an output of 0 to 100 % covers."""
    kind = known(element.kind)
    if kind in _DRIVES:
        return "speed range"
    return "power" if kind == "heater bank" else "travel"


def power_of(element: FinalElement) -> str:
    """What moves it: air where a spring stands against it, else its motive power."""
    kind = known(element.kind)
    if kind in _DRIVES or kind == "heater bank":
        return "electric power"
    return "air" if known(element.fails) in ("closed", "open") else "motive power"


def percent(number: float) -> str:
    """A percentage that no line breaks."""
    return f"{number:g}{NO_BREAK}%"
