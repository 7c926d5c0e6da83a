"""German: title block, front matter, open points and the loop sheet."""

from __future__ import annotations

import re
from collections.abc import Sequence

from loopdoc.documents.language.english.grammar import NO_BREAK
from loopdoc.documents.language.english.sheet import EnglishSheet
from loopdoc.documents.language.german.failure import ALARMS
from loopdoc.documents.language.german.grammar import GermanGrammar
from loopdoc.documents.wording import grouped, sentence, sentences, upper_first

_HELD = {
    "measurement": "Messung",
    "measurement on_fault": "Verhalten bei Ausfall",
    "measurement transmitter": "Messumformer",
    "measurement variable": "Messgröße",
    "measurement sensor": "Sensor",
    "measurement element": "Messelement",
    "measurement characteristic": "Kennlinie der Messung",
    "measurement range": "Messbereich",
    "measurement signal": "Messsignal",
    "measurement filter": "Filterzeit",
    "measurement channel": "Kanal",
    "measurement supply": "Speisung",
    "measurement tolerance": "Toleranz",
    "controller": "Regler",
    "controller action": "Wirksinn",
    "controller form": "Reglerform",
    "controller gain": "Reglerverstärkung",
    "controller proportional_band": "Proportionalbereich",
    "controller reset": "Nachstellzeit",
    "controller repeats": "Nachstellrate",
    "controller rate": "Vorhaltezeit",
    "controller derivative_filter": "Vorhaltfilter",
    "controller setpoint_weight": "Sollwertgewichtung",
    "controller interval": "Abtastzeit",
    "controller setpoint": "Sollwert",
    "controller output": "Ausgang",
    "controller modes": "Betriebsarten",
    "controller on_bad_measurement": "Reaktion auf gestörten Messwert",
    "controller when_not_followed": "Verhalten bei offener Kaskade",
    "process": "Prozessmodell",
    "process gain": "Prozessverstärkung",
    "process effect": "Wirkrichtung",
    "process dead_time": "Totzeit",
    "process lag": "Zeitkonstante",
    "process lags": "Zeitkonstanten",
    "process lead": "Vorhaltzeitkonstante",
    "process source": "Quelle des Prozessmodells",
    "operating": "Betriebsbereich",
    "operating low": "unterer Betriebswert",
    "operating normal": "normaler Betriebswert",
    "operating high": "oberer Betriebswert",
    "alarms": "Alarme",
    "hazard": "Gefahrenrichtung",
    "fails": "Stellung bei Ausfall",
    "safe": "Sicherheitsstellung",
    "to": "Ziel",
    "service": "Funktion",
    "drawing": "Zeichnung",
    "purpose": "Zweck",
    "unit": "Teilanlage",
    "kind": "Art",
    "signal": "Signal",
    "channel": "Kanal",
    "supply": "Speisung",
    "trip_solenoid": "Magnetventil",
    "trip_solenoid tag": "Kennzeichen des Magnetventils",
    "trip_solenoid channel": "Kanal des Magnetventils",
    "trip_solenoid supply": "Speisung des Magnetventils",
    "range": "Messbereich",
    "on_fault": "Verhalten bei Ausfall",
    "variable": "Messgröße",
    "opens_on": "Öffnungssinn",
    "output_block": "Ausgangsbaustein",
    "characteristic": "Kennlinie",
    "stroke_time": "Stellzeit",
    "backlash": "Umkehrspanne",
    "resolution": "Auflösung",
    "span": "Bereich",
    "normal": "Normalwert",
    "inputs": "Eingänge",
    "weights": "Gewichte",
    "outputs": "Ausgänge",
    "lead": "Vorhalt",
    "lag": "Verzögerung",
    "curve": "Kennlinie",
    "layer": "Ebene",
    "initiators": "Auslöser",
    "voting": "Auswahl",
    "actions": "Aktionen",
    "reset": "Rücksetzen",
    "process_safety_time": "Prozesssicherheitszeit",
    "response_time": "Reaktionszeit",
    "proof_test": "Wiederholungsprüfung",
    "bypass": "Überbrückung",
    "cause": "Ursache",
    "consequence": "Folge",
}
_OF_CABLE = {"cable": "Nummer", "pair": "Paar", "at": "Klemmenkasten", "terminals": "Klemmen"}
_OF_ALARM = {
    "limit": "Grenzwert",
    "deadband": "Hysterese",
    "delay": "Verzögerung",
    "priority": "Priorität",
    "cause": "Ursache",
    "consequence": "Folge",
    "response": "Maßnahme",
    "time_to_respond": "Eingriffszeit",
}
_STEPS = (
    (r"output block direct", "Ausgangsbaustein direkt"),
    (r"output block reversed", "Ausgangsbaustein umgekehrt"),
    (r"(\S+) opens on rising signal", r"\1 öffnet bei steigendem Signal"),
    (r"(\S+) opens on falling signal", r"\1 öffnet bei fallendem Signal"),
    (r"(\S+) speeds up on rising signal", r"\1 läuft bei steigendem Signal schneller"),
    (r"(\S+) speeds up on falling signal", r"\1 läuft bei fallendem Signal schneller"),
    (r"(\S+) takes more power on rising signal", r"Leistung von \1 steigt mit dem Signal"),
    (r"(\S+) takes more power on falling signal", r"Leistung von \1 steigt bei fallendem Signal"),
    (r"(\S+) subtracts it", r"\1 subtrahiert"),
    (r"the curve of (\S+) falls", r"die Kennlinie von \1 fällt"),
    (r"(\S+) is driven by the falling output", r"\1 folgt dem fallenden Ausgang"),
    (r"the measurement of (\S+) rises when (\S+)'s measurement rises", r"Messwert von \1 steigt mit dem von \2"),
    (r"the measurement of (\S+) falls when (\S+)'s measurement rises", r"Messwert von \1 fällt mit steigendem \2"),
    (r"the measurement of (\S+) rises when (\S+) opens", r"Messwert von \1 steigt, wenn \2 öffnet"),
    (r"the measurement of (\S+) falls when (\S+) opens", r"Messwert von \1 fällt, wenn \2 öffnet"),
    (r"the measurement of (\S+) rises when (\S+) speeds up", r"Messwert von \1 steigt, wenn \2 schneller läuft"),
    (r"the measurement of (\S+) falls when (\S+) speeds up", r"Messwert von \1 fällt, wenn \2 schneller läuft"),
    (r"the measurement of (\S+) rises when (\S+) takes more power", r"Messwert von \1 steigt mit der Leistung von \2"),
    (r"the measurement of (\S+) falls when (\S+) takes more power", r"Messwert von \1 fällt mit der Leistung von \2"),
)
"""What the sign algebra calls the links of a path. A test holds them against the algebra."""
_LIMITS = {"low": "untere", "high": "obere"}


class GermanSheet(GermanGrammar, EnglishSheet):
    """Words of the title block, of the front matter and of the loop sheet."""

    # -- title block

    def cautions(self) -> str:
        return (
            "Dieses Dokument unterstützt die Prüfung durch befugte oder sachkundige Personen und ersetzt sie nicht. "
            "Örtliche Vorschriften, die Sicherheitsbetrachtung und die Angaben der Hersteller haben Vorrang. "
            "Sicherheitsfunktionen brauchen ihren eigenen Lebenszyklus (IEC 61511). Änderungen der Reglereinstellung "
            "nur unter Aufsicht erproben."
        )

    def check_state(self, errors: int, warnings: int, notes: int, deviations: int, holds: int, not_made: int) -> str:
        counts = (
            (errors, "Fehler", "Fehler"), (warnings, "Warnung", "Warnungen"), (notes, "Hinweis", "Hinweise"),
            (deviations, "Abweichung", "Abweichungen"), (holds, "HOLD", "HOLDs"),
            (not_made, "Prüfung nicht durchgeführt", "Prüfungen nicht durchgeführt"),
        )  # fmt: skip
        return ", ".join(f"{self.number(number)} {one if number == 1 else many}" for number, one, many in counts)

    def errors_open(self, errors: int) -> str:
        return f"{errors} offene{'r' if errors == 1 else ''} Fehler"

    def holds_open(self, status: str) -> str:
        return f"offene HOLDs beim Status „{status}“" if status else "offene HOLDs, Status unbekannt"

    def unit_title(self, number: str, name: str) -> str:
        return f"Teilanlage {number} {name}" if name else f"Teilanlage {number}"

    # -- front matter of the narrative

    def extent(self, schemes: int, indicators: int, interlocks: int) -> str:
        counts = ((schemes, "control scheme"), (indicators, "indicator"), (interlocks, "interlock"))
        return upper_first(self.listed(self.counted(number, noun) for number, noun in counts if number)) or "Überblick"

    def reading(self, owner: str, section: str) -> str:
        keeper = f" (geführt von: {owner})" if owner else ""
        held = f"Was noch offen ist, trägt den Vermerk HOLD und steht in Abschnitt {section}" if section else ""
        changed = (
            f"Jeder Wert steht im Register{keeper} oder ist daraus berechnet und wird nur dort geändert"
        )
        texts = "Texte des Registers und Meldungen der Prüfung stehen in ihrer eigenen Sprache"
        return sentences(changed, held, texts)

    # -- open points

    def held_name(self, path: Sequence[str | int]) -> str:
        steps = [str(step) for step in path]
        whole = " ".join(steps)
        if whole in _HELD:
            return _HELD[whole]
        if "wiring" in steps:
            cable, *of_it = steps[steps.index("wiring") + 1 :] or ("",)
            wired = f"Kabel {int(cable) + 1}" if cable else "Verdrahtung"
            wired = f"{_OF_CABLE.get(of_it[0], self.quoted(of_it[0]))} von {wired}" if of_it else wired
            return f"{wired} des Magnetventils" if steps[0] == "trip_solenoid" else wired
        if steps[0] == "alarms" and len(steps) > 1 and steps[1] in ALARMS:
            name = ALARMS[steps[1]]
            return f"{_OF_ALARM.get(steps[2], self.quoted(steps[2]))} für {name}" if len(steps) > 2 else name
        if steps[0] == "disturbances" and len(steps) > 1:
            disturbance = f"Störung {self.quoted(steps[1])}"
            what = {
                "size": "Größe",
                "lag": "Zeitkonstante",
                "dead_time": "Totzeit",
                "at": "Angriffspunkt",
                "moves": "mitbewegte Messungen",
            }.get(steps[-1], "Angabe")
            if len(steps) > 3:
                return f"{what} von {steps[3]} zu: {disturbance}"
            return f"{what} zu: {disturbance}" if len(steps) > 2 else disturbance
        if steps[:2] == ["process", "branches"] and len(steps) > 2:
            name = _HELD.get(f"process {steps[3]}", self.quoted(steps[3])) if len(steps) > 3 else _HELD["process"]
            return f"{name} für {steps[2]}"
        if "setpoint" in steps or "output" in steps:
            which = "Sollwert" if "setpoint" in steps else "Ausgang"
            last = steps[-1]
            if last in _LIMITS:
                return f"{_LIMITS[last]} Grenze ({which})"
            return f"{which}: {_HELD.get(last, self.quoted(last))}"
        return _HELD.get(steps[-1], self.quoted(whole.replace("_", " ")))

    def still_on_hold(self, held: Sequence[tuple[str, str]]) -> str:
        tags_of = grouped(held)
        names_of = grouped((self.listed(tags), name) for name, tags in tags_of.items())
        parts = [f"{self.listed(names)} ({tags})" for tags, names in names_of.items()]
        return sentence(f"Noch offen (HOLD): {'; '.join(parts)}") if parts else ""

    def deviations_stand(self, found: Sequence[str], count: int) -> str:
        what = "Es besteht eine genehmigte Abweichung" if count == 1 else "Es bestehen genehmigte Abweichungen"
        return sentence(f"{what} bei {self.listed(found)}")

    def finding_text(self, text: str) -> str:
        return sentence(text)

    def finding_clause(self, text: str) -> str:
        return f"{text}."

    # -- the loop sheet

    def the_operator(self) -> str:
        return "Bediener"

    def through(self, tags: str, functions: str) -> str:
        return f"{tags} über {functions}"

    def more_findings(self, number: int) -> str:
        stand = "1 weiterer Befund zu diesem Regelkreis steht" if number == 1 else (
            f"{number} weitere Befunde zu diesem Regelkreis stehen"
        )
        return f"{stand} im Dokumentenverzeichnis"

    def accepted(self, reason: str, approved_by: str, until: str) -> str:
        return f"{reason} Genehmigt von {approved_by}, bis {until}."

    def percent_is(self, span: str) -> str:
        return f"0 bis 100{NO_BREAK}% = {span}"

    def output_to(self, tag: str) -> str:
        return f"auf {tag}"

    def permitted(self, modes: Sequence[str]) -> str:
        return f"zulässig: {', '.join(modes)}"

    def hold_output(self) -> str:
        return "Ausgang halten"

    def sign_undecided(self, reason: str) -> str:
        return f"nicht bestimmbar: {reason}"

    def sign_step(self, what: str) -> str:
        for pattern, german in _STEPS:
            if re.fullmatch(pattern, what):
                return re.sub(pattern, german, what)
        return self.quoted(what)

    def sign_path(self, steps: str, sign: str, action: str) -> str:
        return f"{steps}: insgesamt {sign}, erfordert Wirksinn {self.term('action', action)}"

    def margins_not_calculated(self, reason: str) -> str:
        return f"nicht berechnet: {reason}"

    def unstable(self) -> str:
        return "der Regelkreis ist mit diesen Angaben instabil"

    def as_sampled(self) -> str:
        return "des abgetasteten Regelkreises"

    def times_as_fast(self, inner: str, ratio: str) -> str:
        return f"{inner} ist {ratio}-mal so schnell"

    def model_gain(self, gain: str) -> str:
        return f"Verstärkung {gain}"

    def model_lags(self, lags: Sequence[str]) -> str:
        return f"{'Zeitkonstante' if len(lags) == 1 else 'Zeitkonstanten'} {' und '.join(lags)}"

    def model_lead(self, lead: str) -> str:
        return f"Vorhalt {lead}"

    def model_dead_time(self, time: str) -> str:
        return f"Totzeit {time}"

    def integrating(self) -> str:
        return "integrierend"

    def moved_by(self, loops: str) -> str:
        return f"gestellt von {loops}"

    def alarm_name(self, kind: str) -> str:
        return ALARMS[kind]

    def trip_name(self, interlock: str) -> str:
        return f"Auslösung {interlock}"

    def by_itself(self, actions: str) -> str:
        return f"Selbsttätig: {actions}"

    def initiated_here(self) -> str:
        return "von diesem Regelkreis ausgelöst"

    # -- expected signals

    def shows(self, tag: str) -> str:
        return f"Anzeige {tag}"

    def setpoint_of(self, tag: str) -> str:
        return f"Sollwert {tag}"

    def signal_of(self, tag: str) -> str:
        return f"Signal von {tag}"

    def signal_to(self, tag: str) -> str:
        return f"Signal an {tag}"

    def pt100(self) -> str:
        return "Widerstand Pt100"

    def thermocouple(self, letter: str) -> str:
        return f"Typ {letter}, Vergleichsstelle 0{NO_BREAK}°C"

    def position_of(self, tag: str, kind: str) -> str:
        if kind in ("variable-speed drive", "motor"):
            return f"Drehzahl {tag}"
        return f"{'Leistung' if kind == 'heater bank' else 'Stellung'} {tag}"

    # -- the drawing

    def drawing_title(self, tag: str, way: str) -> str:
        return f"Gezeichneter Regelkreis {tag}, von oben nach unten: {way}"

    def fail_letters(self, fails: str) -> str:
        return {"closed": "FC", "open": "FO", "last": "FL", "stopped": "aus"}.get(fails, fails)

    def signal_ends(self, first: str, last: str, kind: str) -> str:
        ends = {"variable-speed drive": ("Drehzahl 0\u00a0%", "100\u00a0%"), "heater bank": ("aus", "volle Leistung")}
        shut, opened = ends.get(kind, ("zu", "auf"))
        return f"{first} {shut}, {last} {opened}"

    def more(self, number: int) -> str:
        return f"{number} weitere"

    def pair(self, mark: str) -> str:
        return f"Paar {mark}" if mark.isdigit() else mark

    def supplied_by(self, supply: str) -> str:
        return f"Speisung: {supply}"

    def and_more(self, number: int) -> str:
        return f"und {number} weitere"
