"""What the register's models and tunings give: margins of every loop and cascade, or why they are unknown."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from loopdoc.engineering.pairing import Plant

# What calculates is loaded at the first question, so that a check without one starts without numpy.
if TYPE_CHECKING:
    from loopdoc.engineering.frequency import Margins
    from loopdoc.engineering.stages import Chain, Lacking


@dataclass(frozen=True, slots=True, eq=False)
class ChainDynamics:
    """One chain from a loop down to a final element, with its margins level by level."""

    chain: Chain
    margins: tuple[Margins, ...]
    """Innermost level first."""

    @property
    def speed_ratio(self) -> float | None:
        """Crossover of the level below over that of the outermost; None for a single loop."""
        from loopdoc.engineering.frequency import speed_ratio

        return speed_ratio(self.margins[-2], self.margins[-1]) if len(self.margins) > 1 else None


def inputs_beside(chains: Sequence[ChainDynamics]) -> tuple[tuple[str, str], ...]:
    """What functions on the way of chains take in besides the loops: its tag, and that of the function."""
    levels = [level for dynamics in chains for level in dynamics.chain.levels]
    return tuple(dict.fromkeys((one.tag, one.function) for level in levels for one in level.inputs))


@dataclass(frozen=True, slots=True)
class LoopDynamics:
    """What is known of a loop's dynamics."""

    tag: str
    chains: tuple[ChainDynamics, ...]
    """One for each way to a final element (the branches of a split range); empty where nothing can be calculated."""
    reason: str
    """Why nothing can be calculated; empty where it can."""

    @property
    def worst(self) -> ChainDynamics | None:
        """The chain with the largest maximum sensitivity: what the margins of the loop are quoted from."""
        return max(self.chains, key=lambda found: found.margins[-1].max_sensitivity, default=None)


class Dynamics:
    """Dynamics of a whole plant, calculated together at the first question."""

    def __init__(self, plant: Plant) -> None:
        self._plant = plant

    def loop(self, tag: str) -> LoopDynamics:
        """Dynamics of one loop; for an indicator nothing but the reason.

        Raises
        ------
        KeyError
            The register has no such loop.
        """
        return self._by_tag[tag]

    def error_ratio(self, cascade: ChainDynamics) -> float | Lacking:
        """Error of a cascade after an upset at its secondary, as a share of a single loop's; or why there is none.

        See `loopdoc.engineering.comparison.cascade_error_ratios`.
        """
        return self._error_ratios[cascade]

    @cached_property
    def _error_ratios(self) -> dict[ChainDynamics, float | Lacking]:
        from loopdoc.engineering.comparison import cascade_error_ratios

        cascades = [chain for loop in self._by_tag.values() for chain in loop.chains if len(chain.margins) > 1]
        return dict(zip(cascades, cascade_error_ratios(cascades), strict=True))

    @cached_property
    def _by_tag(self) -> dict[str, LoopDynamics]:
        from loopdoc.engineering.sampled import quoted_margins
        from loopdoc.engineering.stages import Lacking, chains

        resolved = {tag: chains(self._plant, controlled) for tag, controlled in self._plant.controlled.items()}
        flat = [chain for found in resolved.values() if not isinstance(found, Lacking) for chain in found]
        margins = iter(quoted_margins([chain.stages for chain in flat]))
        by_tag: dict[str, LoopDynamics] = {}
        for tag in self._plant.register.loops:
            found = resolved.get(tag, Lacking(f"{tag} has no controller"))
            if isinstance(found, Lacking):
                by_tag[tag] = LoopDynamics(tag, (), found.reason)
            else:
                by_tag[tag] = LoopDynamics(tag, tuple(ChainDynamics(chain, next(margins)) for chain in found), "")
        return by_tag
