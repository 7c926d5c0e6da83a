"""What a cascade buys: the same upsets with the cascade as tuned and with one loop on the same final element.

The single loop is tuned by SIMC to the maximum sensitivity of the cascade's outermost loop, so that neither
side wins by being less robust. Source of the rule: S. Skogestad, J. Process Control 13:291-309, 2003; of Ms as
the measure of robustness: K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006, section 4.5.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import reduce

from loopdoc.engineering.clock import Unsuited, choose_clocks
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import in_series
from loopdoc.engineering.simulation import Response, simulate
from loopdoc.engineering.stages import Chain, Level, percent_of_range
from loopdoc.engineering.structure import (
    Disturbance,
    FinalElement,
    Scenario,
    cascade_structure,
    single_loop_structure,
    standard_scenarios,
)
from loopdoc.engineering.tuning import SensitivityTuning, simc_at_sensitivities
from loopdoc.engineering.upsets import Step, declared_step, normal_value
from loopdoc.register.model import known

UPSET_PCT = 10.0
"""Size of the standard upsets: a tenth of the span of the measurement that they move [%]."""


@dataclass(frozen=True, slots=True)
class ScenarioResponses:
    """One upset, answered by the loop or cascade as tuned and, for a cascade, by a single loop in its place."""

    scenario: Scenario
    tuned: Response
    single: Response | None
    """None for a single loop, and where no tuning of equal robustness exists."""

    def ratio(self, of: str) -> float | None:
        """A metric of the cascade over that of the single loop; None where there is nothing to compare."""
        if self.single is None:
            return None
        ours, theirs = abs(getattr(self.tuned.metrics, of)), abs(getattr(self.single.metrics, of))
        return ours / theirs if theirs > 0.0 and math.isfinite(ours) and math.isfinite(theirs) else None


@dataclass(frozen=True, slots=True)
class Comparison:
    """Time responses of one chain under the standard upsets."""

    dynamics: ChainDynamics
    single: SensitivityTuning | None
    """Settings of the single loop; None for a single loop or where none of equal robustness exists."""
    scenarios: tuple[ScenarioResponses, ...]
    start_pct: tuple[float, ...]
    """Where each measurement stood before the upset, innermost first [% of range]."""


@dataclass(frozen=True, slots=True)
class NotSimulated:
    """Why there is no time response to show."""

    reason: str


def compare(dynamics: ChainDynamics) -> Comparison | NotSimulated:
    """Simulate one chain, and for a cascade the single loop in its place."""
    chain = dynamics.chain
    unstable = [
        level.loop.tag for level, margins in zip(chain.levels, dynamics.margins, strict=True) if not margins.stable
    ]
    if unstable:
        return NotSimulated(f"{unstable[0]} as tuned is not stable")
    start_pct = tuple(_start_pct(level) for level in chain.levels)
    structure = cascade_structure(chain.stages, final_element=_final_element(chain), start_pct=start_pct)
    structures = [structure]
    single = _single_loop(dynamics) if len(chain.levels) > 1 else None
    if single is not None:
        lead = chain.stages[-1].controller
        controller = Controller(
            single.settings.gain,
            single.settings.reset_s,
            single.settings.rate_s,
            interval_s=lead.interval_s,
            measurement_filter_s=lead.measurement_filter_s,
            setpoint_low_pct=lead.setpoint_low_pct,
            setpoint_high_pct=lead.setpoint_high_pct,
        )
        structures.append(single_loop_structure(structure, controller))
    clock = choose_clocks([structures])[0]
    if isinstance(clock, Unsuited):
        return NotSimulated(clock.reason)
    scenarios = (*standard_scenarios(len(chain.levels), size_pct=UPSET_PCT), *declared_scenarios(chain))
    tuned, *others = simulate(structures, scenarios)
    alone = others[0] if others else (None,) * len(scenarios)
    return Comparison(
        dynamics,
        single,
        tuple(
            ScenarioResponses(scenario, ours, theirs)
            for scenario, ours, theirs in zip(scenarios, tuned, alone, strict=True)
        ),
        start_pct,
    )


def declared_scenarios(chain: Chain) -> tuple[Scenario, ...]:
    """The disturbances that the register declares for the loops of a chain, by name; those it gives in full."""
    found: dict[str, Scenario] = {}
    for level, (loop, route, stage) in enumerate((one.loop, one.route, one.stage) for one in chain.levels):
        for written in loop.loop.disturbances.values():
            step = declared_step(written, loop, route, stage.process)
            if isinstance(step, Step) and step.size_pct:
                # Two loops may use one name for what each of them meets.
                name = written.name if written.name not in found else f"{written.name} ({loop.tag})"
                found[name] = Scenario(name, disturbances=(Disturbance(level, step.size_pct, step.path),))
    return tuple(found.values())


def _single_loop(dynamics: ChainDynamics) -> SensitivityTuning | None:
    stages = dynamics.chain.stages
    try:
        process = reduce(in_series, (stage.process for stage in stages))
    except ValueError:  # two integrators in series: no rule tunes one loop on them
        return None
    lead = stages[-1].controller
    return simc_at_sensitivities(
        [process],
        target_ms=[dynamics.margins[-1].max_sensitivity],
        interval_s=[lead.interval_s],
        measurement_filter_s=[lead.measurement_filter_s],
    )[0]


def _final_element(chain: Chain) -> FinalElement:
    """The final element with its stroke time and backlash, in the middle of what the innermost controller may ask of it.

    The register does not say how far a valve is open in normal operation, and the process models are linear: what
    the start decides is only how far the limits are away.
    """
    stroke, backlash = known(chain.final_element.stroke_time), known(chain.final_element.backlash)
    inner = chain.stages[0].controller
    middle = (inner.output_low_pct + inner.output_high_pct) / 2.0
    # `tuning-invalid` tells of a negative time, and of a backlash that leaves no travel.
    return FinalElement(
        stroke_time_s=max(0.0, stroke.to("s")) if stroke else 0.0,
        backlash_pct=min(99.9, max(0.0, backlash.to("%"))) if backlash else 0.0,
        start_pct=min(100.0, max(0.0, middle)),
    )


def _start_pct(level: Level) -> float:
    """Normal setpoint or normal measurement in percent of range; the middle where the register gives neither."""
    loop = level.loop.loop
    measurement = known(loop.measurement)
    own = known(measurement.range) if measurement else None
    normal = normal_value(loop)
    if own is None or normal is None:
        return 50.0
    return min(100.0, max(0.0, percent_of_range(normal, own)))
