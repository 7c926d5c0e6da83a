"""What a cascade saves of an upset: against published integrals, a Lyapunov equation and time simulation."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.linalg import solve_continuous_lyapunov
from scipy.signal import tf2ss

from loopdoc.engineering.attenuation import Rival, error_ratios
from loopdoc.engineering.clock import Clock
from loopdoc.engineering.comparison import cascade_error_ratios
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.simulation import simulate
from loopdoc.engineering.stages import Lacking
from loopdoc.engineering.structure import (
    Disturbance,
    FinalElement,
    Scenario,
    cascade_structure,
    single_loop_structure,
)
from loopdoc.engineering.tuning import simc_at_sensitivities
from loopdoc.register.load import Loaded, load

WIDE = {"output_low_pct": -1e9, "output_high_pct": 1e9, "setpoint_low_pct": -1e9, "setpoint_high_pct": 1e9}
# Primary 2/(60 s + 1), secondary 1.5/(4 s + 1), each reset on its own lag.
A, B, C = 0.45 * 1.5 / 4.0, 1.2 * 2.0 / 60.0, 0.8 * 2.0 * 1.5 / 60.0
CASCADE = (
    LoopStage(Controller(0.45, 4.0), Process(1.5, (4.0,))),
    LoopStage(Controller(1.2, 60.0), Process(2.0, (60.0,))),
)
SINGLE = LoopStage(Controller(0.8, 60.0), Process(3.0, (4.0, 60.0)))


def squared_error(numerator: list[float], denominator: list[float]) -> float:
    """Integral of the square of the impulse response of a rational E(s), by its Lyapunov equation."""
    a, b, c, _ = tf2ss(numerator, denominator)
    return float((c @ solve_continuous_lyapunov(a, -b @ b.T) @ c.T)[0, 0])


def test_a_cascade_without_dead_time_against_its_rational_error() -> None:
    # L2 = a/s, T2 = a/(s + a), L1 = b T2/s with a = K2 Kp2/4, b = K1 Kp1/60; a unit step through the 4 s of the
    # secondary gives E = 2 s / ((60 s + 1)(4 s + 1)(s^2 + a s + a b)).
    cascade = squared_error(
        [2.0, 0.0], np.polymul(np.polymul([60.0, 1.0], [4.0, 1.0]), [1.0, A, A * B]).tolist()
    )
    # One controller, L = c/(s (4 s + 1)): E = 2 / ((60 s + 1)(4 s^2 + s + c)). The integral of a third-order
    # E = c0/(d3 s^3 + d2 s^2 + d1 s + d0) is c0^2 d2 / (2 d0 (d1 d2 - d0 d3)): G. C. Newton, L. A. Gould,
    # J. F. Kaiser, Analytical Design of Linear Feedback Controls, 1957, appendix E (from memory).
    d3, d2, d1, d0 = np.polymul([60.0, 1.0], [4.0, 1.0, C]).tolist()
    single = 4.0 * d2 / (2.0 * d0 * (d1 * d2 - d0 * d3))
    assert single == pytest.approx(squared_error([2.0], [d3, d2, d1, d0]), rel=1e-9)
    found = error_ratios([Rival(CASCADE, SINGLE)])[0]
    # The trapezoidal rule on 80 frequencies a decade, cut off 300 times beyond the last break.
    assert found == pytest.approx(math.sqrt(cascade / single), rel=2e-3)


def test_an_integrating_primary_against_its_rational_error() -> None:
    # Primary k/s with proportional action alone: L1 = K k T2/s; with a step through 4 s,
    # E = k/s 1/(s (4 s + 1)) s/(s + a) s (s + a)/(s^2 + a s + a K k) = k/((4 s + 1)(s^2 + a s + a K k)).
    k, gain = 0.005, 2.0
    cascade = (CASCADE[0], LoopStage(Controller(gain), Process(k, integrating=True)))
    # One proportional-integral controller on 1.5 k/(s (4 s + 1)).
    ks, ti = 1.0, 200.0
    single = LoopStage(Controller(ks, ti), Process(1.5 * k, (4.0,), integrating=True))
    loop = 1.5 * k * ks
    over = squared_error([k], np.polymul([4.0, 1.0], [1.0, A, A * gain * k]).tolist())
    # S = s^2 (4 s + 1)/(s^2 (4 s + 1) + loop (s + 1/ti)), times k/s 1/(s (4 s + 1)).
    alone = squared_error([k], [4.0, 1.0, loop, loop / ti])  # the other factors cancel
    assert error_ratios([Rival(cascade, single)])[0] == pytest.approx(math.sqrt(over / alone), rel=2e-3)


def test_dead_time_and_execution_against_simulation() -> None:
    cascade = (
        LoopStage(Controller(0.3, 4.0, interval_s=0.1, **WIDE), Process(1.0, (4.0,), 1.0)),
        LoopStage(Controller(1.2, 60.0, interval_s=0.1, measurement_filter_s=2.0, **WIDE), Process(2.0, (60.0,), 8.0)),
    )
    joined = Process(2.0, (4.0, 60.0), 9.0)
    controller = Controller(0.9, 55.0, interval_s=0.1, measurement_filter_s=2.0, **WIDE)
    structure = cascade_structure(cascade, final_element=FinalElement())
    upset = Scenario("secondary", disturbances=(Disturbance(0, 1.0),))
    responses = simulate(
        [structure, single_loop_structure(structure, controller)], [upset], clock=Clock(0.1, 12_000)
    )
    ours, theirs = (np.sqrt(np.sum((one[0].measurement_pct[-1] - 50.0) ** 2)) for one in responses)
    # Sampling counts as half an interval of dead time in one and is executed in the other.
    assert error_ratios([Rival(cascade, LoopStage(controller, joined))])[0] == pytest.approx(ours / theirs, rel=0.01)


def test_an_offset_that_stays_has_no_ratio() -> None:
    offset = (CASCADE[0], replace(CASCADE[1], controller=Controller(1.2)))
    without_reset = (replace(CASCADE[0], controller=Controller(0.45)), offset[1])
    found = error_ratios([Rival(offset, SINGLE), Rival(without_reset, SINGLE)])
    # The secondary's reset takes the upset away for the first; nothing does for the second.
    assert math.isfinite(found[0])
    assert math.isnan(found[1])


def test_many_together_are_the_same_as_one_by_one() -> None:
    slower = Rival((replace(CASCADE[0], controller=Controller(0.1, 4.0)), CASCADE[1]), SINGLE)
    three = Rival((CASCADE[0], CASCADE[1], LoopStage(Controller(0.5, 600.0), Process(1.0, (600.0,)))), SINGLE)
    rivals = [Rival(CASCADE, SINGLE), three, slower]
    # The frequencies differ with the company; the integral does not.
    np.testing.assert_allclose(error_ratios(rivals), [error_ratios([one])[0] for one in rivals], rtol=1e-3)


@pytest.mark.parametrize(("gain", "ratio"), [("0.02", 0.99), ("0.025", 0.76)])
def test_the_figures_of_the_rule_cases_by_simulation(tmp_path: Path, gain: str, ratio: float) -> None:
    base = (Path(__file__).parent / "rules" / "base-register.yaml").read_text("utf-8")
    text = base.replace("gain: 0.45\n      reset: 12 s", f"gain: {gain}\n      reset: 4 s")
    (tmp_path / "register.yaml").write_text(text, "utf-8")
    loaded = load(tmp_path)
    assert isinstance(loaded, Loaded)
    chain = Dynamics(Plant(loaded.register)).loop("TIC-2014").chains[0]
    assert cascade_error_ratios([chain]) == (pytest.approx(ratio, abs=0.005),)

    stages = tuple(replace(one, controller=replace(one.controller, **WIDE)) for one in chain.chain.stages)
    inner, outer = (stage.process for stage in stages)
    joined = Process(inner.gain * outer.gain, inner.lags_s + outer.lags_s, inner.dead_time_s + outer.dead_time_s)
    (tuned,) = simc_at_sensitivities(
        [joined], target_ms=[chain.margins[-1].max_sensitivity], interval_s=[1.0], measurement_filter_s=[2.0]
    )
    assert tuned is not None
    single = Controller(tuned.settings.gain, tuned.settings.reset_s, interval_s=1.0, measurement_filter_s=2.0, **WIDE)
    structure = cascade_structure(stages, final_element=FinalElement())
    upset = Scenario("secondary", disturbances=(Disturbance(0, 1.0),))
    responses = simulate(
        [structure, single_loop_structure(structure, single)], [upset], clock=Clock(0.5, 20_000)
    )
    ours, theirs = (np.sqrt(np.sum((one[0].measurement_pct[-1] - 50.0) ** 2)) for one in responses)
    # The executed algorithm against the linear loop: a per cent.
    assert ours / theirs == pytest.approx(ratio, rel=0.02)


def test_an_unstable_cascade_has_a_reason_instead(tmp_path: Path) -> None:
    base = (Path(__file__).parent / "rules" / "base-register.yaml").read_text("utf-8")
    (tmp_path / "register.yaml").write_text(base.replace("gain: 1.8", "gain: 18"), "utf-8")
    loaded = load(tmp_path)
    assert isinstance(loaded, Loaded)
    (found,) = cascade_error_ratios(Dynamics(Plant(loaded.register)).loop("TIC-2014").chains)
    assert isinstance(found, Lacking)
    assert "not stable" in found.reason
