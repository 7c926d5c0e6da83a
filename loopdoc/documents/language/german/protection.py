"""German: alarms and interlocks, and the time between the two."""

from __future__ import annotations

import re
from collections.abc import Sequence

from loopdoc.documents.language.english.protection import EnglishProtection
from loopdoc.documents.language.german.failure import GermanFailure
from loopdoc.documents.language.german.grammar import number_word
from loopdoc.documents.language.german.scheme import into_mode
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.wording import sentences

_DOES = {
    "closed": ("schließt", ""),
    "open": ("öffnet", ""),
    "stopped": ("schaltet", " aus"),
    "started": ("schaltet", " ein"),
    "last": ("hält", " in der letzten Stellung"),
}
_UPSETS = (
    (r"(\S+) shuts", r"\1 schließt"),
    (r"(\S+) opens fully", r"\1 öffnet ganz"),
    (r"(\S+) stops", r"\1 läuft aus"),
    (r"(\S+) runs at full speed", r"\1 läuft mit voller Drehzahl"),
    (r"(\S+) goes off", r"\1 fällt aus"),
    (r"(\S+) goes to full power", r"\1 geht auf volle Leistung"),
)
_IF = (
    (r"(\S+) shuts", r"Schließt \1"),
    (r"(\S+) opens fully", r"Öffnet \1 ganz"),
    (r"(\S+) stops", r"Läuft \1 aus"),
    (r"(\S+) runs at full speed", r"Läuft \1 mit voller Drehzahl"),
    (r"(\S+) goes off", r"Fällt \1 aus"),
    (r"(\S+) goes to full power", r"Geht \1 auf volle Leistung"),
)
_LAYERS = {"process": "Betriebsebene", "safety": "Sicherheitsebene"}


class GermanProtection(GermanFailure, EnglishProtection):
    """Sentences about alarms, interlocks and times to act."""

    # -- alarms

    def alarm_heading(self, tag: str, kind: str) -> str:
        return f"{tag} {self.alarm_kind(kind)}"

    def alarm_limit(self, limit: str, deadband: str, delay: str) -> str:
        parts = [limit, f"Hysterese {deadband}" if deadband else "", f"nach {delay}" if delay else ""]
        return ", ".join(part for part in parts if part)

    def alarm_consequence(self, consequence: str, hazards: Sequence[tuple[str, Noun, str]]) -> str:
        if not hazards:
            return consequence
        told = self.listed(f"{self.hazard(name, side)} ({tag})" for tag, name, side in hazards)
        return sentences(consequence, f"der Alarm zeigt auch an: {told}")

    def alarm_response(self, response: str, time: str) -> str:
        return sentences(response, f"innerhalb von {time}" if time else "")

    # -- interlocks

    def effects(self, first: str, does: str, others: Sequence[str]) -> str:
        also = f"; ebenso {self.listed(others)}" if others else ""
        return f"{first} {does}{also}"

    def trips_alone(self, tag: str, conditions: Sequence[str]) -> str:
        return f"{tag} löst aus, wenn {self.either(conditions)}"

    def counts(self, tag: str, voting: str, conditions: Sequence[str]) -> str:
        return f"Zu den Bedingungen von {tag} ({voting or 'Auswahl nicht angegeben'}) gehört {self.listed(conditions)}"

    def condition(self, tag: str, side: str, limit: str, delay: str, *, counted: bool = False) -> str:
        if not side or not limit:
            return f"{tag} an seinem Grenzwert (HOLD)" if counted else f"{tag} seinen Grenzwert (HOLD) überschreitet"
        lasting = f" für {delay}" if delay else ""
        beyond = self.side(side, limit)
        return f"{tag} {beyond}{lasting}" if counted else f"{tag}{lasting} {beyond} liegt"

    def acts(
        self, positions: Sequence[tuple[str, Sequence[str]]], forced: Sequence[tuple[str, str, Sequence[str]]]
    ) -> str:
        told = []
        for position, tags in positions:
            verb, rest = _DOES[position]
            told.append(f"{verb} {self.listed(tags)}{rest}")
        for mode, output, tags in forced:
            at = f" mit Ausgang {output}" if output else ""
            into = f"{into_mode(mode)}{at}" if mode else f"auf den Ausgang {output}"
            told.append(f"{'schaltet' if mode else 'stellt'} {self.listed(tags)} {into}")
        return self.listed(told)

    def trips_when_alike(self, tags: Sequence[str], needed: int, side: str, limit: str, delay: str) -> str:
        names = self.listed(tags)
        rest = f"{f'für {delay} ' if delay else ''}{self.side(side, limit)}"
        if not needed:
            return f"{names} {rest} liegen; die Auswahl ist nicht angegeben"
        if needed == len(tags):
            return f"alle Messwerte von {names} {rest} liegen"
        if needed == 1:
            return f"einer der Messwerte von {names} {rest} liegt"
        return f"{number_word(needed)} der Messwerte von {names} {rest} liegen"

    def trips_when(self, conditions: Sequence[str], needed: int, of: int) -> str:
        if len(conditions) == 1 or needed == 1:
            return self.either(conditions)
        if needed and needed == of:
            return self.listed(conditions)
        if needed:
            return f"{number_word(needed)} dieser Bedingungen erfüllt sind: dass {', dass '.join(conditions)}"
        return f"{self.either(conditions)}; die Auswahl ist nicht angegeben"

    def interlock_told(self, tag: str, layer: str, when: str, does: str, cause: str, consequence: str) -> str:
        belongs = f"{tag} gehört zur {_LAYERS[layer]}" if layer else ""
        trips = f"{'Sie' if layer else tag} löst aus, wenn {when}" if when else ""
        acts = does
        if does:
            verb, _, rest = does.partition(" ")
            acts = f"Die Verriegelung {verb} {rest}" if when else f"{tag} {does}"
        without = ""
        if consequence:
            without = f"{'Folge ohne Verriegelung' if does else 'Folge'}: {consequence}"
        return sentences(belongs, trips, acts, f"Wahrscheinliche Ursache: {cause}" if cause else "", without)

    def reset_is(self, written: str, *, plain: bool) -> str:
        return f"Rücksetzen: {written}"

    def proof_tested(self, every: str) -> str:
        number, _, unit = every.partition("\u00a0")
        one = {"Monat": "jeden Monat", "Jahr": "jedes Jahr", "Woche": "jede Woche"}
        times = one[unit] if number == "1" and unit in one else f"alle {every}"
        return f"Die Wiederholungsprüfung findet {times} statt"

    def no_bypass(self) -> str:
        return "Eine Überbrückung ist nicht zulässig"

    def bypass(self, permitted: str, who: str, limit: str) -> str:
        told = f"Eine Überbrückung ist zulässig: {permitted.rstrip('.')}"
        told += f"; längstens {limit}" if limit else "; ohne zeitliche Begrenzung"
        return f"{told} (freigegeben durch: {who})" if who else told

    def only_limits(self, tag: str) -> str:
        if tag:
            return f"Für {tag} enthält das Register nur die Auslösebedingung"
        return "Für diese Verriegelungen enthält das Register nur die Auslösebedingungen"

    def unused_by_interlocks(self, tags: Sequence[str]) -> str:
        return f"Keine Verriegelung verwendet {self.either(tags)}"

    def also_enters(self, sensor: str, functions: Sequence[str]) -> str:
        return f"{sensor} geht auch in {self.listed(functions)} ein"

    # -- response of an interlock

    def acts_within(self, tag: str, response: str, share: str, given: str, *, late: bool) -> tuple[str, ...]:
        acts = f"{tag} wirkt innerhalb von {response}"
        if not given:
            return (acts,)
        judged = "Ob das genügt, wird im Lebenszyklus der Sicherheitsfunktion beurteilt"
        if late:
            return f"{acts}, nicht früher als die Prozesssicherheitszeit von {given}", judged
        return f"{acts}; das sind {share} der Prozesssicherheitszeit von {given}", judged

    def safety_time(self, given: str) -> str:
        return f"Die Prozesssicherheitszeit beträgt {given}"

    def not_checked_in_time(self, *, safety_time: bool, response: bool) -> str:
        names = [*(["die Prozesssicherheitszeit"] if safety_time else []), *(["die Reaktionszeit"] if response else [])]
        lacking = f"{self.listed(names)} {'ist' if len(names) == 1 else 'sind'} nicht bekannt"
        return f"Ob die Verriegelung rechtzeitig wirkt, ist nicht geprüft: {lacking}"

    # -- time to act

    def times_caution(self, *, measured: bool) -> str:
        without = " und ohne Störgrößenaufschaltung" if measured else ""
        return (
            f"Gerechnet ist vom Normalbetrieb aus, mit den Regelkreisen im Handbetrieb{without}; das zeigt nicht, dass "
            "die Verriegelung genügt"
        )

    def the_alarm(self, tag: str, kind: str) -> str:
        return f"dem {self.alarm_kind(kind)} von {tag}"

    def _from_alarm(self, tag: str, kind: str) -> str:
        return f"vom {self.alarm_kind(kind)} von {tag}"

    def not_carried_on(self, alarms: Sequence[tuple[str, str]], trip: str) -> str:
        names = self.either(self.the_alarm(*alarm) for alarm in alarms)
        return f"Keine Störung im Register führt nach {names} weiter bis zur Auslösung von {trip}"

    def time_not_checked(self, alarms: Sequence[tuple[str, str]], trip: str, reason: str) -> str:
        names = self.listed(self._from_alarm(*alarm) for alarm in alarms)
        return f"Die Zeit {names} bis zur Auslösung von {trip} ist nicht geprüft: {reason}"

    def upset(self, name: str) -> str:
        return _in_german(name, _UPSETS) or self.quoted(name)

    def upset_if(self, name: str, *, moved: bool) -> str:
        return (_in_german(name, _IF) if moved else "") or f"Bei der Störung {self.quoted(name)}"

    def trips_before(self, when: str, trip: str, late: str, alarm: tuple[str, str]) -> str:
        comma = "" if when.startswith("Bei ") else ","
        return (
            f"{when}{comma} löst {trip} bereits {late} vor {self.the_alarm(*alarm)} aus: Kein Eingriff kommt mehr "
            "rechtzeitig, und nur die Auslösung wirkt"
        )

    def operator_has(
        self, when: str, left: str, alarm: tuple[str, str], trip: str, given: str, *, least: bool, short: bool
    ) -> str:
        time = f"{'mindestens ' if least else ''}{left}"
        comma = "" if when.startswith("Bei ") else ","
        has = f"{when}{comma} bleiben dem Bediener {time} {self._from_alarm(*alarm)} bis zur Auslösung von {trip}"
        if not given:
            return f"{has}; die nötige Eingriffszeit ist nicht bekannt, deshalb ist das nicht geprüft"
        if not short:
            return f"{has}; für den Eingriff sind {given} angesetzt"
        if least:
            return f"{has}; ob die für den Eingriff angesetzten {given} genügen, ist nicht geprüft"
        return f"{has}, weniger als die für den Eingriff angesetzten {given}"

    # -- on the loop sheet

    def times_line_caution(self) -> str:
        return "gerechnet mit Regelkreisen im Handbetrieb, kein Nachweis, dass eine Verriegelung genügt"

    def alarm_to_trip(self, kind: str, trip: str, told: str) -> str:
        return f"{self.alarm_kind(kind)} bis {trip}: {told}"

    def not_reached(self, *, checked: bool) -> str:
        return "nicht erreicht" if checked else "nicht geprüft"

    def before_the_alarm(self, late: str, upset: str) -> str:
        return f"löst {late} vor dem Alarm aus ({self.upset(upset)})"

    def time_left(self, left: str, upset: str, given: str, *, least: bool) -> str:
        told = f"{'mindestens ' if least else ''}{left} ({self.upset(upset)})"
        return f"{told}, {given} angesetzt" if given else told


def _in_german(name: str, forms: Sequence[tuple[str, str]]) -> str:
    """What a final element does in an upset; empty for a name that the register gives."""
    for pattern, german in forms:
        if re.fullmatch(pattern, name):
            return re.sub(pattern, german, name)
    return ""
