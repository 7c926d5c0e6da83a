"""What a cascade buys: the same upsets with the cascade as tuned and with one loop on the same final element.

The single loop is tuned by SIMC to the maximum sensitivity of the cascade's outermost loop, so that neither
side wins by being less robust. Source of the rule: S. Skogestad, J. Process Control 13:291-309, 2003; of Ms as
the measure of robustness: K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006, section 4.5.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import reduce

from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import in_series
from loopdoc.engineering.simulation import Response, simulate
from loopdoc.engineering.stages import Chain, Level, percent_of_range
from loopdoc.engineering.structure import (
    FinalElement,
    Scenario,
    cascade_structure,
    single_loop_structure,
    standard_scenarios,
)
from loopdoc.engineering.tuning import SensitivityTuning, simc_at_sensitivities
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


def compare(dynamics: ChainDynamics) -> Comparison | None:
    """Simulate one chain; None where its loops as tuned are not stable, so that there is no response to show."""
    chain = dynamics.chain
    if not all(margins.stable for margins in dynamics.margins):
        return None
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
    scenarios = standard_scenarios(len(chain.levels), size_pct=UPSET_PCT)
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
    """The final element with its stroke time, in the middle of what the innermost controller may ask of it.

    The register does not say how far a valve is open in normal operation, and the process models are linear: what
    the start decides is only how far the limits are away.
    """
    stroke = known(chain.final_element.stroke_time)
    inner = chain.stages[0].controller
    middle = (inner.output_low_pct + inner.output_high_pct) / 2.0
    return FinalElement(stroke_time_s=stroke.to("s") if stroke else 0.0, start_pct=min(100.0, max(0.0, middle)))


def _start_pct(level: Level) -> float:
    """Normal setpoint or normal measurement in percent of range; the middle where the register gives neither."""
    loop = level.loop.loop
    measurement, operating = known(loop.measurement), known(loop.operating)
    setpoint = known(level.loop.controller.setpoint)
    own = known(measurement.range) if measurement else None
    normal = (known(setpoint.normal) if setpoint else None) or (known(operating.normal) if operating else None)
    if own is None or normal is None:
        return 50.0
    return min(100.0, max(0.0, percent_of_range(normal, own)))
