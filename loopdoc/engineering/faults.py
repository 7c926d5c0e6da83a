"""What a transmitter reads, and where a final element goes, when it fails or is left without signal or power.

Source: NAMUR NE 43 (2003, 2021) for the currents beyond the range; the assumptions are those of
`loopdoc.engineering.failure`.
"""

from __future__ import annotations

from dataclasses import dataclass

from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.spreading import Direction
from loopdoc.register.model import FinalElement, Hold, Measurement, known

ELECTRIC = ("variable-speed drive", "motor", "heater bank")
LESS, MORE = ("closed", "stopped"), ("open", "started")
"""Positions of a final element with less, and with more, of what it passes."""


@dataclass(frozen=True, slots=True)
class FaultReading:
    """How the fault of a transmitter shows in the control system."""

    reads: str
    """reads high, reads low or holds, as the register says."""
    noticed: bool
    """Whether the control system can tell it from a good reading."""


def fault_reading(measurement: Measurement | Hold | None) -> FaultReading | Undecided:
    """How a transmitter's own fault shows, by its signal and by what it does on a fault (NAMUR NE 43)."""
    written = known(measurement)
    on_fault = known(written.on_fault) if written else None
    if written is None or on_fault not in ("reads high", "reads low", "holds"):
        return Undecided("what the transmitter does when it fails is not given")
    if on_fault == "holds":
        return FaultReading(on_fault, noticed=False)
    signal = known(written.signal)
    if signal is None:
        return Undecided("the transmitter's signal is not given")
    beyond = ("4-20 mA", "1-5 V", "digital", "0-20 mA") if on_fault == "reads high" else ("4-20 mA", "1-5 V", "digital")
    return FaultReading(on_fault, noticed=signal in beyond)


def without_signal(element: FinalElement) -> tuple[Direction, str]:
    signal, opens_on = known(element.signal), known(element.opens_on)
    if signal is None or signal == "digital":
        told = "its signal is not given" if signal is None else "a digital signal has no low end"
        return Undecided(f"where {element.tag} goes without its signal does not follow: {told}"), ""
    kind = known(element.kind)
    if signal == "contact" and kind in ELECTRIC:
        return -1, "stopped"
    if kind in ("variable-speed drive", "motor"):
        # Whether it stops without its speed signal or falls to its lowest speed is set in the drive.
        if opens_on == "rising signal":
            return -1, ""
        return Undecided(f"what {element.tag} does without its signal is set in the drive"), ""
    if opens_on == "rising signal":
        return -1, "stopped" if kind == "heater bank" else "closed"
    if opens_on == "falling signal":
        return 1, "open"
    return Undecided(f"{element.tag} does not say on which signal it opens"), ""


def without_motive_power(element: FinalElement) -> tuple[Direction, str]:
    fails = known(element.fails)
    if fails in LESS:
        return -1, fails
    if fails == "open":
        return 1, fails
    if fails == "last":
        return 0, fails
    return Undecided(f"where {element.tag} fails to is not given"), ""
