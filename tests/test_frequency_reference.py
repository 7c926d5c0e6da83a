"""Margins of loops and cascades against python-control, one by one and in batches."""

import math
import warnings

import numpy as np
import pytest
from numpy.typing import NDArray

from loopdoc.engineering.frequency import (
    LoopStage,
    Margins,
    analyse_chain,
    analyse_chains,
    maximum_sensitivities,
)
from loopdoc.engineering.open_loop import level_arrays
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process, frequency_response

with warnings.catch_warnings():
    # python-control looks for optional packages with calls that newer Pythons deprecate.
    warnings.simplefilter("ignore")
    import control


def single(controller: Controller, process: Process) -> Margins:
    return analyse_chain([LoopStage(controller, process)])[0]


def transfer_function(process: Process) -> control.TransferFunction:
    numerator, denominator = [process.gain], [1.0, 0.0] if process.integrating else [1.0]
    for lead in process.leads_s:
        numerator = np.polymul(numerator, [lead, 1.0])
    for lag in process.lags_s:
        denominator = np.polymul(denominator, [lag, 1.0])
    return control.tf(numerator, denominator)


def controller_polynomials(controller: Controller) -> tuple[NDArray[np.float64], ...]:
    """Numerator from the measurement, numerator from the setpoint, common denominator."""
    c = controller
    integral = np.array([c.reset_s, 0.0]) if math.isfinite(c.reset_s) else np.array([1.0])
    smoothing = np.array([c.rate_s / c.derivative_filter, 1.0]) if c.rate_s else np.array([1.0])

    def numerator(proportional: float, derivative: float) -> NDArray[np.float64]:
        total = proportional * np.polymul(integral, smoothing)
        if math.isfinite(c.reset_s):
            total = np.polyadd(total, smoothing)
        if c.rate_s:
            total = np.polyadd(total, derivative * np.polymul([c.rate_s, 0.0], integral))
        return c.gain * total

    return (
        numerator(1.0, 1.0),
        numerator(c.setpoint_weight, c.derivative_setpoint_weight),
        np.polymul(integral, smoothing),
    )


def reference_loops(chain: list[LoopStage]) -> list[tuple[control.TransferFunction, NDArray[np.complex128]]]:
    """Per level the open loop, and the closed-loop poles, by polynomial algebra."""
    below_numerator, below_denominator = np.array([1.0]), np.array([1.0])
    loops = []
    for stage in chain:
        process = transfer_function(stage.process)
        plant_numerator = np.polymul(process.num[0][0], below_numerator)
        plant_denominator = np.polymul(process.den[0][0], below_denominator)
        feedback, forward, common = controller_polynomials(stage.controller)
        filtered = np.array([stage.controller.measurement_filter_s, 1.0])
        numerator = np.polymul(plant_numerator, feedback)
        denominator = np.polymul(np.polymul(plant_denominator, common), filtered)
        closed = np.polyadd(numerator, denominator)
        loops.append((control.tf(numerator, denominator), np.roots(closed)))
        below_numerator = np.polymul(np.polymul(plant_numerator, forward), filtered)
        below_denominator = closed
    return loops


REFERENCE_CHAINS = {
    "PI on two lags": [LoopStage(Controller(2.0, 8.0), Process(1.5, (10.0, 3.0, 0.5)))],
    "PID with filters": [
        LoopStage(
            Controller(3.0, 12.0, 2.0, derivative_filter=8.0, measurement_filter_s=0.7),
            Process(0.8, (10.0, 3.0, 0.5)),
        )
    ],
    "integrating, inverse response": [
        LoopStage(Controller(0.4, 30.0), Process(0.2, (2.0, 0.5), 0.0, (-0.8,), integrating=True))
    ],
    "PI over PI": [
        LoopStage(Controller(1.2, 3.0), Process(1.0, (3.0, 0.4))),
        LoopStage(Controller(2.5, 30.0), Process(0.9, (30.0, 5.0))),
    ],
    "setpoint weights and filters inside": [
        LoopStage(
            Controller(
                2.0, 3.0, 0.4, setpoint_weight=0.6, derivative_setpoint_weight=0.2, measurement_filter_s=0.3
            ),
            Process(1.0, (3.0, 0.4)),
        ),
        LoopStage(Controller(-2.5, 30.0, measurement_filter_s=2.0), Process(-0.9, (30.0, 5.0))),
    ],
    "level over flow": [
        LoopStage(Controller(0.6, 4.0), Process(1.0, (4.0, 0.5))),
        LoopStage(Controller(-3.0, 900.0), Process(-0.002, (6.0,), integrating=True)),
    ],
    "three levels": [
        LoopStage(Controller(3.0), Process(1.0, (1.0, 0.05))),
        LoopStage(Controller(2.0, 12.0), Process(1.2, (10.0, 1.0))),
        LoopStage(Controller(1.5, 90.0, 10.0), Process(0.8, (80.0, 15.0))),
    ],
}


@pytest.mark.parametrize("name", REFERENCE_CHAINS)
def test_margins_agree_with_python_control(name: str) -> None:
    chain = REFERENCE_CHAINS[name]
    for margins, (loop, poles) in zip(analyse_chain(chain), reference_loops(chain), strict=True):
        assert margins.stable
        assert (poles.real < 0.0).all()
        gm, pm, _, w180, wc, _ = control.stability_margins(loop, returnall=True)
        # Both refine the same roots; polynomials of order ten or so leave about eight digits.
        raising = [(g, w) for g, w in zip(gm, w180, strict=True) if g > 1.0]
        if raising:
            expected, at = min(raising)
            assert margins.gain_margin == pytest.approx(expected, rel=1e-6)
            assert margins.phase_crossover_rad_per_s == pytest.approx(at, rel=1e-6)
        else:
            assert margins.gain_margin == math.inf
        assert margins.phase_margin_deg == pytest.approx(min(abs(pm)), rel=1e-6)
        assert margins.crossover_rad_per_s == pytest.approx(max(wc), rel=1e-6)
        peak = control.system_norm(control.feedback(1, loop), "inf", tol=1e-9)
        assert margins.max_sensitivity == pytest.approx(peak, rel=1e-6)
        complementary = control.minreal(control.feedback(loop, 1), verbose=False)
        bandwidth = control.bandwidth(complementary, dbdrop=-20.0 * math.log10(math.sqrt(2.0)))
        assert margins.bandwidth_rad_per_s == pytest.approx(bandwidth, rel=1e-6)


def test_stability_agrees_with_the_closed_loop_poles() -> None:
    """Random chains of one to three levels, many of them unstable, against polynomial roots."""
    rng = np.random.default_rng(3)
    chains = []
    for _ in range(150):
        chain = []
        for level in range(rng.integers(1, 4)):
            lags = tuple(10.0 ** rng.uniform(-1.0, 1.0) * 5.0**level for _ in range(rng.integers(1, 4)))
            process = Process(10.0 ** rng.uniform(-0.5, 0.5), lags, integrating=rng.random() < 0.25)
            reset_s = math.inf if rng.random() < 0.4 else 10.0 ** rng.uniform(-0.5, 1.5)
            gain = 10.0 ** rng.uniform(-1.5, 1.2) * (-1.0 if rng.random() < 0.1 else 1.0)
            chain.append(LoopStage(Controller(gain, reset_s), process))
        chains.append(chain)
    states: list[bool] = []
    for chain, found in zip(chains, analyse_chains(chains), strict=True):
        for margins, (_, poles) in zip(found, reference_loops(chain), strict=True):
            # Polynomial roots cannot tell a nearly undamped pole from an undamped one.
            if (np.abs(poles.real) > 1e-4 * np.abs(poles)).all():
                assert margins.stable == bool((poles.real < 0.0).all()), chain
                states.append(margins.stable)
    assert 50 < sum(states) < len(states) - 50


def test_dead_time_against_a_high_order_pade_loop() -> None:
    # The test may approximate where the tool does not: order 8 is exact to 1e-6 at these frequencies.
    chain = [
        LoopStage(Controller(0.8, 4.0), Process(1.0, (4.0,), 1.0)),
        LoopStage(Controller(1.5, 60.0), Process(1.2, (60.0,), 12.0)),
    ]
    delays = [control.tf(*control.pade(stage.process.dead_time_s, 8)) for stage in chain]
    below = control.tf(1, 1)
    for margins, stage, delay in zip(analyse_chain(chain), chain, delays, strict=True):
        pi = control.tf(
            [stage.controller.gain * stage.controller.reset_s, stage.controller.gain],
            [stage.controller.reset_s, 0.0],
        )
        loop = pi * transfer_function(stage.process) * delay * below
        gm, pm, _, _, wc, _ = control.stability_margins(loop, returnall=True)
        assert margins.gain_margin == pytest.approx(min(g for g in gm if g > 1.0), rel=1e-5)
        assert margins.phase_margin_deg == pytest.approx(min(abs(pm)), rel=1e-5)
        assert margins.crossover_rad_per_s == pytest.approx(max(wc), rel=1e-5)
        below = control.feedback(loop, 1)


def test_a_batch_gives_each_chain_its_own_margins_in_order() -> None:
    chains = [*REFERENCE_CHAINS.values(), *reversed(REFERENCE_CHAINS.values())]
    for chain, found in zip(chains, analyse_chains(chains), strict=True):
        for alone, together in zip(analyse_chain(chain), found, strict=True):
            # The grid of a batch is as fine as its widest member needs: the refined figures agree.
            assert together.gain_margin == pytest.approx(alone.gain_margin, rel=1e-9)
            assert together.max_sensitivity == pytest.approx(alone.max_sensitivity, rel=1e-7)
            assert together.phase_margin_deg == pytest.approx(alone.phase_margin_deg, rel=1e-9)


def test_maximum_sensitivities_are_those_of_the_margins() -> None:
    loops = [chain[0] for chain in REFERENCE_CHAINS.values()]
    loops.append(LoopStage(Controller(-1.0, 10.0), Process(1.0, (10.0,), 2.0)))
    expected = [single(loop.controller, loop.process).max_sensitivity for loop in loops]
    columns = level_arrays([loop.controller for loop in loops], [loop.process for loop in loops])
    assert list(maximum_sensitivities(columns)) == pytest.approx(expected, rel=1e-7)


def test_process_frequency_response_agrees_with_python_control() -> None:
    process = Process(2.0, (5.0, 1.0), 0.0, (-0.5,), integrating=True)
    w = np.geomspace(1e-3, 1e2, 50)
    np.testing.assert_allclose(frequency_response(process, w), transfer_function(process)(1j * w), rtol=1e-12)
    delayed = frequency_response(Process(2.0, (5.0,), 3.0), w)
    np.testing.assert_allclose(delayed, 2.0 / (1.0 + 5j * w) * np.exp(-3j * w), rtol=1e-12)
