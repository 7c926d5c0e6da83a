"""Where a loop of a cascade gets its setpoint in steps that it answers one by one, and what comes of that."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.stages import Level
from loopdoc.register.quantity import display_number


def stepped_links(dynamics: ChainDynamics) -> tuple[tuple[Level, Level], ...]:
    """Commanding and commanded level of each link whose final element moves there and back at every execution.

    The commanding loop is executed so seldom that its output is a staircase (its interval times the crossover of the
    loop below is at least 1 rad), and at a step the proportional action of the loop below moves what it commands
    further than it will stay: gain, setpoint weight and process gain multiply to more than 1, or the process
    integrates.
    """
    levels, found = dynamics.chain.levels, []
    for below, above, margins in zip(levels, levels[1:], dynamics.margins, strict=False):
        controller, process = below.stage.controller, below.stage.process
        kick = abs(controller.setpoint_weight * controller.gain * process.gain)
        returns = kick > 0.0 if process.integrating else kick > 1.0
        if returns and above.stage.controller.interval_s * margins.crossover_rad_per_s >= 1.0:
            found.append((above, below))
    return tuple(found)


def steps_told(dynamics: ChainDynamics) -> Iterator[str]:
    """The same in sentences, one a link."""
    element = dynamics.chain.final_element.tag
    for above, below in stepped_links(dynamics):
        weight = display_number(below.stage.controller.setpoint_weight, 3)
        yield (
            f"{above.loop.tag} is executed once in {_time(above.stage.controller.interval_s)}, and {below.loop.tag} "
            f"answers each new setpoint before the next one comes: {element} goes there and back every time, and that "
            f"is in its travel and reversals. A setpoint weight of {below.loop.tag} below {weight} makes this smaller, "
            f"and {above.loop.tag} slower."
        )


def _time(seconds: float) -> str:
    return f"{display_number(seconds / 60.0, 3)} min" if seconds >= 120.0 else f"{display_number(seconds, 3)} s"
