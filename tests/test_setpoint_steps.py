"""Why the steam valve of the example goes there and back so often after an upset of the analyser's loop."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from loopdoc.engineering.comparison import structure_of
from loopdoc.engineering.dynamics import ChainDynamics, Dynamics
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.scanning import REVERSAL_PCT
from loopdoc.engineering.setpoint_steps import stepped_links, steps_told
from loopdoc.engineering.simulation import Response, simulate
from loopdoc.engineering.structure import ControlStructure, standard_scenarios
from loopdoc.register.load import Loaded, load

ROOT = Path(__file__).parent.parent


@pytest.fixture(scope="module")
def plant() -> Plant:
    loaded = load(ROOT / "examples" / "tarn-hollow")
    assert isinstance(loaded, Loaded)
    return Plant(loaded.register)


@pytest.fixture(scope="module")
def dynamics(plant: Plant) -> Dynamics:
    return Dynamics(plant)


@pytest.fixture(scope="module")
def analyser(dynamics: Dynamics) -> ChainDynamics:
    return dynamics.loop("AIC-2015").chains[0]


def answered(structure: ControlStructure) -> Response:
    """A setpoint step of a tenth of the span."""
    return simulate([structure], standard_scenarios(3)[:1])[0][0]


def changed(structure: ControlStructure, level: int, **fields: float) -> ControlStructure:
    controllers: list[Controller | None] = list(structure.controllers)
    one = controllers[level]
    assert one is not None
    controllers[level] = replace(one, **fields)
    return replace(structure, controllers=tuple(controllers))


def turns(travel: np.ndarray, least: float) -> list[int]:
    """Points at which a signal turns and goes back by so much, by looking back over the signal itself."""
    found: list[int] = []
    start, rising = 0, None
    for i in range(1, len(travel)):
        part = travel[start : i + 1]
        top, bottom = start + int(part.argmax()), start + int(part.argmin())
        if rising in (None, True) and travel[top] - travel[i] >= least:
            found += [top] if rising else []
            start, rising = i, False
        elif rising in (None, False) and travel[i] - travel[bottom] >= least:
            found += [bottom] if rising is False else []
            start, rising = i, True
    return found


def test_reversals_are_no_noise_and_follow_the_executions_of_the_primary(analyser: ChainDynamics) -> None:
    structure = structure_of(analyser.chain)
    response = answered(structure)
    found = turns(response.travel_pct, REVERSAL_PCT)
    # What is kept is every sixth step, each the mean over it: a turn just above the threshold may be missed in it.
    assert len(found) == pytest.approx(response.metrics.reversals, abs=2)
    # Every setpoint of TIC-2014 is one turn, at the scan that brings it or within its settling, and one turn back.
    stairs = response.setpoint_pct[1]
    assert stairs is not None
    scans = int(np.count_nonzero(np.abs(np.diff(stairs[: found[-1] + 1])) > 1e-9)) + 1
    assert len(found) <= 2 * scans
    # Nothing else makes them: not without the staircase, and not without the proportional action on it.
    continuous = answered(changed(structure, 2, interval_s=1.0))
    without_kick = answered(changed(structure, 1, setpoint_weight=0.0))
    assert response.metrics.reversals > 4 * continuous.metrics.reversals
    assert response.metrics.reversals > 10 * without_kick.metrics.reversals
    assert response.metrics.valve_travel_pct > 2 * continuous.metrics.valve_travel_pct
    # The other side of it, as the sentence says.
    assert without_kick.metrics.settling_s > response.metrics.settling_s


def test_the_link_is_named_and_no_other_of_the_example(
    plant: Plant, dynamics: Dynamics, analyser: ChainDynamics
) -> None:
    assert [(above.loop.tag, below.loop.tag) for above, below in stepped_links(analyser)] == [("AIC-2015", "TIC-2014")]
    (told,) = steps_told(analyser)
    assert told.startswith("AIC-2015 is executed once in 5 min, and TIC-2014 answers each new setpoint before the next")
    others = [tag for tag in plant.controlled if tag != "AIC-2015"]
    assert not any(stepped_links(chain) for tag in others for chain in dynamics.loop(tag).chains)


@pytest.mark.parametrize(("weight", "links"), [(0.19, 0), (0.2, 1)])
def test_a_secondary_that_is_not_kicked_beyond_its_end_goes_one_way(
    analyser: ChainDynamics, weight: float, links: int
) -> None:
    """K b G of TIC-2014: 4 times 6.5 t/h of output on a range of 8 t/h, times 12 degC per t/h on a span of 60 degC."""
    secondary = analyser.chain.levels[1]
    assert secondary.stage.controller.gain * secondary.stage.process.gain == pytest.approx(4 * 6.5 / 8 * 12 * 8 / 60)
    weighted = replace(secondary.stage.controller, setpoint_weight=weight)
    levels = list(analyser.chain.levels)
    levels[1] = replace(secondary, stage=replace(secondary.stage, controller=weighted))
    chain = replace(analyser.chain, levels=tuple(levels))
    assert len(stepped_links(replace(analyser, chain=chain))) == links


@pytest.mark.parametrize("where", ["loopdoc/exchange/responses.py", "templates/responses.html"])
def test_what_counts_as_a_reversal_is_stated_as_it_is_counted(where: str) -> None:
    assert f"went back by at least {REVERSAL_PCT:g} %" in (ROOT / where).read_text("utf-8")
