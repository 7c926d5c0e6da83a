"""Control structures that branch: one output on several final elements, several controllers for one of them.

In a split range the output of one controller opens each final element over its part; what they bring to the
measurement adds up. In an override a selector passes the lowest or highest of what several controllers ask for, each
with a measurement of its own.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from loopdoc.engineering.functions import Curve
from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.structure import Disturbance, FinalElement

UNFOLLOWED = ("track", "hold", "nothing")
"""What a controller does whose output a selector does not pass: external reset, its integral held, wind-up."""

WHOLE = Curve((0.0, 100.0), (0.0, 100.0))
"""The opening of a final element that takes the whole output."""


@dataclass(frozen=True, slots=True)
class Branch:
    """A final element, and its opening by the output that moves it."""

    final_element: FinalElement
    """Its start is not used: it starts where the output at the start has it."""
    opening: Curve = WHOLE
    """From the output [%] to the opening that it asks for [%]."""


@dataclass(frozen=True, slots=True)
class BranchedLoop:
    """A controller, what it commands, and how that moves its measurement."""

    controller: Controller
    """Its output in percent of the secondary's range, or as it enters the openings of the branches."""
    processes: tuple[Process, ...]
    """From each final element, or the one from the measurement of the loop that it commands."""
    commands: int | None = None
    """Place of the loop whose setpoint it gives, a lower one than its own; None for the final elements."""
    start_pct: float = 50.0
    """Measurement before the upset [%]."""
    setpoint_pct: float | None = None
    """Setpoint before the upset [%]; where the measurement stands if None. Only a loop that commands nothing at the
    start may have them apart."""
    unfollowed: str = "track"
    """What it does while a selector passes the output of another, one of `UNFOLLOWED`."""
    lead_lags: tuple[LeadLag, ...] = ()
    """Between its output and what passes on."""

    @property
    def start_error_pct(self) -> float:
        """Setpoint less measurement before the upset [%]."""
        return 0.0 if self.setpoint_pct is None else self.setpoint_pct - self.start_pct


@dataclass(frozen=True, slots=True)
class BranchedStructure:
    """Loops, innermost first, that command one another and the final elements at the end."""

    loops: tuple[BranchedLoop, ...]
    branches: tuple[Branch, ...]
    output_pct: float = 50.0
    """Output to the final elements before the upset [%]."""
    lowest: bool = True
    """Whether the lowest of what several loops ask of one thing passes, and not the highest."""

    def __post_init__(self) -> None:
        if not self.loops or not self.branches:
            raise ValueError("a branched structure needs a loop and a final element")
        for place, loop in enumerate(self.loops):
            if loop.unfollowed not in UNFOLLOWED:
                raise ValueError(f"a loop that is not followed does one of {', '.join(UNFOLLOWED)}")
            if loop.commands is not None and not 0 <= loop.commands < place:
                raise ValueError("a loop commands final elements, or a loop that stands before it")
            moved_by = len(self.branches) if loop.commands is None else 1
            if len(loop.processes) != moved_by:
                raise ValueError("a loop needs a process for each final element, or one from the loop it commands")
            if len({process.integrating for process in loop.processes}) > 1:
                raise ValueError("of the processes that move one measurement all integrate, or none does")

    @property
    def openings_pct(self) -> tuple[float, ...]:
        """Opening of each final element before the upset [%]."""
        return tuple(branch.opening.at(self.output_pct) for branch in self.branches)

    def commanded_pct(self, place: int) -> float:
        """Where what a loop commands stands before the upset [%]."""
        commands = self.loops[place].commands
        return self.output_pct if commands is None else self.loops[commands].start_pct

    def rivals(self, place: int) -> tuple[int, ...]:
        """The loops that command what a loop commands, itself among them."""
        return tuple(at for at, loop in enumerate(self.loops) if loop.commands == self.loops[place].commands)


@dataclass(frozen=True, slots=True)
class BranchedScenario:
    """What upsets a branched structure at time zero."""

    name: str
    """How it is called in results."""
    read: int
    """Place of the loop whose measurement it is read by."""
    setpoint_step_pct: float = 0.0
    """Step of the setpoint of that loop [%]."""
    disturbances: tuple[Disturbance, ...] = ()
    """Steps that reach measurements from outside; their levels are places of loops."""
    lasts_s: float = math.inf
    """Time after which the disturbances pass again [s]."""
    origin: str = "standard"
    """standard, declared by the register, or sized so that it shows what it is named after."""
