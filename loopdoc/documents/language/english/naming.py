"""English: what quantities, sensors and final elements are called."""

from __future__ import annotations

import re

from loopdoc.documents.language.english.grammar import EnglishGrammar
from loopdoc.documents.language.facts import Moves
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.wording import lower_first, with_article
from loopdoc.register.model import FinalElement, Loop, Measurement, known

_NAMED_BY_SERVICE = ("analysis", "weight", "power", "speed", "position", "current", "vibration")
"""Variables of which a service says enough without the word."""

DRIVES = ("variable-speed drive", "motor")


def stem(service: str) -> str:
    """A service without what follows its first comma, semicolon, colon or bracket."""
    return re.split(r"[,;:(]", service, maxsplit=1)[0].strip()


class EnglishNaming(EnglishGrammar):
    """Names of things in a sentence."""

    def quantity(self, loop: Loop) -> Noun:
        """What a loop measures, in full and without an article: `rectifier tray 4 temperature`."""
        measurement = known(loop.measurement)
        variable = known(measurement.variable) if measurement else None
        service = stem(known(loop.service) or "")
        if variable == "analysis":
            content = re.match(r"(.+?) in (.+)", service)
            if content:
                return Noun(f"{lower_first(content[1])} content of {content[2]}")
        if not service:
            return Noun(variable or "measurement")
        if variable is None or variable in _NAMED_BY_SERVICE or variable.rsplit(" ", 1)[-1] in service.casefold():
            return Noun(lower_first(service))
        return Noun(f"flow of {lower_first(service)}" if variable == "flow" else variable)

    def short_quantity(self, loop: Loop) -> Noun:
        """What a loop measures, in a word or two: `temperature`, `methanol content`."""
        measurement = known(loop.measurement)
        variable = known(measurement.variable) if measurement else None
        if variable == "analysis":
            full = self.quantity(loop)
            return Noun(full.partition(" of ")[0] if " content of " in full else "analysis")
        return Noun(variable) if variable else self.quantity(loop)

    def the(self, name: Noun) -> str:
        """A name with its article, as the subject of a sentence."""
        return f"the {name}"

    # -- measurements

    def sensor(self, measurement: Measurement) -> str:
        """Primary element and sensor as a reader wants them beside the tag; empty where nothing is given."""
        parts = [self.text(known(measurement.element) or ""), self.text(known(measurement.sensor) or "")]
        if known(measurement.characteristic) == "square root":
            parts.append(self.term("characteristic", "square root"))
        return ", ".join(part for part in parts if part)

    def with_sensor(self, measurement: Measurement) -> str:
        """Tag of a transmitter with its sensor: `TT-2014 (Pt100 class A)`; empty where it has no tag."""
        tag, kind = known(measurement.transmitter), self.sensor(measurement)
        if tag is None:
            return ""
        return f"{tag} ({kind})" if kind else tag

    def in_brackets(self, measurement: Measurement) -> str:
        """Transmitter, sensor and range behind what is measured: ` (FT-2011, orifice plate, 0 to 8 t/h)`."""
        written = known(measurement.range)
        parts = (known(measurement.transmitter), self.sensor(measurement), self.value(written) if written else "")
        told = ", ".join(part for part in parts if part)
        return f" ({told})" if told else ""

    def range_of(self, measurement: Measurement) -> str:
        """The measuring range; empty where it is not known."""
        written = known(measurement.range)
        return self.value(written) if written else ""

    # -- final elements

    def element_phrase(self, element: FinalElement, told: str = "") -> str:
        """A final element with what it is: `FV-2011, an equal percentage control valve`.

        ``told`` is what the sentence has named already: a service that says the same is left out.
        """
        kind, service = known(element.kind), stem(known(element.service) or "")
        characteristic = known(element.characteristic)
        new = service and service.casefold() not in told.casefold()
        if kind is None:
            return f"{element.tag}, {lower_first(service)}" if new else element.tag
        noun = f"{characteristic} {kind}" if characteristic and kind == "control valve" else kind
        if kind in DRIVES or kind == "heater bank":
            whose = f" of the {lower_first(service)}" if service else ""
            return f"{element.tag}, the {noun}{whose}"
        return f"{element.tag}, {with_article(noun)}{f' on the {lower_first(service)}' if new else ''}"

    def moves(self, moved: Moves) -> str:
        """What somebody does who moves final elements: `opens FV-2011`, `slows down SC-1017`."""
        return self.listed(f"{_verb(element, way)} {element.tag}" for element, way in moved)

    def moves_by_itself(self, moved: Moves) -> str:
        """What they do: `FV-2011 opens`, `SC-1017 slows down`."""
        return self.listed(_by_itself(element, way) for element, way in moved)

    def power_of(self, element: FinalElement) -> str:
        """What moves it: air where a spring stands against it, else its motive power."""
        kind = known(element.kind)
        if kind in DRIVES or kind == "heater bank":
            return "electric power"
        return "air" if known(element.fails) in ("closed", "open") else "motive power"


def verbs(element: FinalElement) -> tuple[str, str]:
    """What is done to a final element, up and down."""
    kind = known(element.kind)
    if kind in DRIVES:
        return "speed up", "slow down"
    return ("turn up", "turn down") if kind == "heater bank" else ("open", "close")


def _verb(element: FinalElement, direction: int) -> str:
    more, less = verbs(element)
    verb, _, rest = (more if direction > 0 else less).partition(" ")
    return f"{verb}s {rest}".rstrip()


def _by_itself(element: FinalElement, direction: int) -> str:
    if known(element.kind) == "heater bank":
        return f"{element.tag} takes {'more' if direction > 0 else 'less'} power"
    return f"{element.tag} {_verb(element, direction)}"
