"""Reasons why something does not follow from the register, in German; one without a German form is quoted."""

from __future__ import annotations

import re

_WHAT = {
    "process gain": "die Prozessverstärkung",
    "process": "das Prozessmodell",
    "dead time": "die Totzeit",
    "lag": "die Zeitkonstante",
    "lags": "die Zeitkonstanten",
    "lead": "die Vorhaltzeitkonstante",
    "range": "der Messbereich",
    "measurement range": "der Messbereich",
    "gain": "die Reglerverstärkung",
    "reset": "die Nachstellzeit",
    "rate": "die Vorhaltezeit",
    "interval": "die Abtastzeit",
    "controller gain": "die Reglerverstärkung",
    "execution interval": "die Abtastzeit",
    "filter": "die Filterzeit",
    "measurement": "die Messung",
    "action": "der Wirksinn",
    "output span": "der Stellbereich",
    "effect": "die Wirkrichtung",
    "curve": "die Kennlinie",
    "operating band": "der Betriebsbereich",
    "controller": "der Regler",
    "output": "der Ausgang",
}
_TAG = r"[A-Z][\w.-]*\d\w*"
_STATES = {"is on hold": "noch offen (HOLD)", "could not be read": "nicht lesbar", "is not given": "nicht angegeben",
           "is not known": "nicht bekannt"}  # fmt: skip
_PATTERNS = (
    (rf"({_TAG}) has no `?process`? for ({_TAG})", r"\1 hat kein Prozessmodell für \2"),
    (rf"({_TAG}) has no controller", r"\1 hat keinen Regler"),
    (rf"the output of ({_TAG}) leads nowhere", r"der Ausgang von \1 führt nirgendwohin"),
    (rf"({_TAG}) commands itself", r"\1 führt sich selbst"),
    (rf"({_TAG}) does not say on which signal it opens", r"für \1 ist nicht angegeben, bei welchem Signal es öffnet"),
    (rf"({_TAG}) as tuned is not stable", r"\1 ist mit dieser Einstellung nicht stabil"),
    (rf"the process gain of ({_TAG}) contradicts the effect", r"die Prozessverstärkung von \1 widerspricht der "
     r"Wirkrichtung"),
    (rf"the curve of ({_TAG}) both rises and falls", r"die Kennlinie von \1 steigt und fällt"),
    (rf"what ({_TAG}) does without its signal is set in the drive", r"das Verhalten von \1 ohne Signal ist im "
     r"Umrichter eingestellt"),
    (r"`?process`? does not say whether the measurement rises or falls", "im Prozessmodell ist nicht angegeben, ob der "
     "Messwert steigt oder fällt"),
    (r"what the controller does with a bad measurement is not given", "die Reaktion des Reglers auf einen gestörten "
     "Messwert ist nicht angegeben"),
    (r"what the transmitter does when it fails is not given", "das Verhalten des Messumformers bei Ausfall ist nicht "
     "angegeben"),
    (r"the transmitter's signal is not given", "das Signal des Messumformers ist nicht angegeben"),
    (r"the movements act against each other", "die Bewegungen wirken gegeneinander"),
    (r"the output follows whatever error was left", "der Ausgang folgt der verbliebenen Regeldifferenz"),
    (r"its lag is on hold", "seine Zeitkonstante ist noch offen (HOLD)"),
    (r"its lag could not be read", "seine Zeitkonstante ist nicht lesbar"),
    (rf"its size, or the range of ({_TAG}), is not known", r"seine Größe oder der Messbereich von \1 ist nicht "
     r"bekannt"),
)  # fmt: skip


def translated(reason: str) -> str:
    """A reason of the calculation in German; in quotation marks as it is where there is no German form of it."""
    found = re.fullmatch(rf"the ([a-z ]+?) of ({_TAG}) ({'|'.join(_STATES)})", reason)
    if found and found[1] in _WHAT:
        verb = "sind" if found[1] == "lags" else "ist"
        return f"{_WHAT[found[1]]} von {found[2]} {verb} {_STATES[found[3]]}"
    for pattern, german in _PATTERNS:
        if re.fullmatch(pattern, reason):
            return re.sub(pattern, german, reason)
    return f"„{reason}“ (Meldung der Berechnung)"


def held_noun(what: str) -> str:
    """What is on hold, with its article; quoted where it has no German name."""
    return _WHAT.get(what, f"„{what}“")
