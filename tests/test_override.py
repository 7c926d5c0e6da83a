"""An override: against the plain loop, closed forms, and a simulation written out here with the published form."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.linalg import expm

from loopdoc.engineering.branched import Branch, BranchedLoop, BranchedScenario, BranchedStructure
from loopdoc.engineering.branched_simulation import BranchedResponse, simulate_branched
from loopdoc.engineering.clock import Clock
from loopdoc.engineering.comparison import NotSimulated
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.override import TO_THE_LIMIT, Override, override
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.simulation import simulate
from loopdoc.engineering.structure import ControlStructure, Disturbance, FinalElement, Scenario
from loopdoc.register.load import Loaded, load

ROOT = Path(__file__).parents[1]
EXAMPLE = ROOT / "examples" / "tarn-hollow"
FloatArray = NDArray[np.float64]

VALVE = FinalElement(6.0, 0.5)
FLOW = BranchedLoop(Controller(0.85, 5.0, interval_s=0.5, measurement_filter_s=1.0), (Process(1.2, (4.0,), 1.0),))
NORMAL = BranchedLoop(
    Controller(1.1, 60.0, 8.0, interval_s=1.0, measurement_filter_s=2.0, setpoint_weight=0.7),
    (Process(1.2, (50.0, 12.0), 5.0),), 0, 60.0,
)  # fmt: skip
FAR_OFF = BranchedLoop(Controller(1.7, 70.0, interval_s=1.0), (Process(0.001, (60.0,), 5.0),), 0, 0.0, 100.0)


def low_select(*candidates: BranchedLoop, below: tuple[BranchedLoop, ...] = ()) -> BranchedStructure:
    return BranchedStructure((*below, *candidates), (Branch(VALVE if below else FinalElement()),))


# --- a candidate that is far away ----------------------------------------------------------------


@pytest.mark.parametrize("unfollowed", ["track", "hold", "nothing"])
def test_with_the_other_far_away_it_is_the_plain_cascade(unfollowed: str) -> None:
    structure = low_select(NORMAL, replace(FAR_OFF, unfollowed=unfollowed), below=(FLOW,))
    scenarios = [
        BranchedScenario("sp", 1, 10.0),
        BranchedScenario("d", 1, disturbances=(Disturbance(0, 8.0),)),
        BranchedScenario("d", 1, disturbances=(Disturbance(1, 8.0),)),
    ]
    clock = Clock(0.25, 4000)
    ours = simulate_branched([structure], scenarios, clock=clock)[0]
    plain = ControlStructure(
        (FLOW.processes[0], NORMAL.processes[0]), (FLOW.controller, NORMAL.controller), VALVE, (50.0, 60.0)
    )
    theirs = simulate(
        [plain],
        [Scenario("sp", 10.0), *(Scenario("d", disturbances=(Disturbance(level, 8.0),)) for level in (0, 1))],
        clock=clock,
    )[0]
    for found, wanted in zip(ours, theirs, strict=True):
        assert found.spells[2].times == 0
        for level in (0, 1):
            # Rounding, in a stable loop: limits are counted from another zero.
            assert np.allclose(found.measurement_pct[level], wanted.measurement_pct[level], rtol=0.0, atol=1e-10)
        assert np.allclose(found.travel_pct[0], wanted.travel_pct, rtol=0.0, atol=1e-9)
        assert found.metrics.iae_pct_s == pytest.approx(wanted.metrics.iae_pct_s, rel=1e-10)
        assert found.metrics.limited_level == wanted.metrics.limited_level


# --- when it takes over, in closed form ------------------------------------------------------------

STEADY = BranchedLoop(Controller(1.0, 60.0, interval_s=0.1), (Process(1.0, (20.0,)),))
GAIN, RESET_S, AWAY, RATE = 2.0, 70.0, 16.0, 0.2
"""Of a constraint that ramps at so many % per second toward its setpoint, so many % away."""


def constraint(unfollowed: str, high_pct: float = 90.0) -> BranchedLoop:
    controller = Controller(GAIN, RESET_S, interval_s=0.1, output_high_pct=high_pct)
    # What the final element does to it is next to nothing: its measurement goes as the upset has it.
    return BranchedLoop(controller, (Process(1e-9, (20.0,)),), None, 30.0, 30.0 + AWAY, unfollowed)


def ramped(unfollowed: str, *, high_pct: float = 90.0) -> BranchedResponse:
    ramp = BranchedScenario("ramp", 1, disturbances=(Disturbance(1, 1.0, Process(RATE, (), integrating=True)),))
    structure = low_select(STEADY, constraint(unfollowed, high_pct))
    return simulate_branched([structure], [ramp], clock=Clock(0.1, 3000))[0][0]


def test_by_external_reset_it_takes_over_at_the_first_scan_past_its_setpoint() -> None:
    """While what is selected rests, the integral is what is selected; the sum of a scan adds its share of the error."""
    response = ramped("track")
    past = 0.1 * (math.floor(AWAY / RATE / 0.1 + 1e-6) + 1)
    # To the scan: at the one before the error is nought or above.
    assert response.spells[1].first_s == pytest.approx(past, abs=0.1 + 1e-9)
    before = response.time_s < AWAY / RATE - 0.05
    error = response.setpoint_pct[1] - response.measurement_pct[1]
    held = np.minimum(50.0 + GAIN * error * (1.0 + 0.1 / RESET_S), 90.0)
    assert np.allclose(response.output_pct[1][before], held[before], rtol=0.0, atol=1e-9)


@pytest.mark.parametrize("high_pct", [60.0, 75.0, 90.0])
def test_without_it_the_way_back_from_the_limit_is_integrated_first(high_pct: float) -> None:
    """K v t + K v t^2/(2 Ti) = limit less what is selected, t from where the error changes sign."""
    response = ramped("nothing", high_pct=high_pct)
    up = high_pct - 50.0
    late = RESET_S * (-1.0 + math.sqrt(1.0 + 2.0 * up / (GAIN * RATE * RESET_S)))
    # The sum in the place of the integral is one scan, 0.1 s, ahead at most; and it is looked at scan by scan.
    assert response.spells[1].first_s == pytest.approx(AWAY / RATE + late, abs=0.2)
    assert late > 20.0


def test_a_held_integral_stays_where_it_was_as_the_selected_output_moves_on() -> None:
    """The normal loop asks for d more at once: K e + what was selected before falls below it d/K from the setpoint."""
    asks = replace(STEADY, controller=Controller(1.0, math.inf, interval_s=0.1), processes=(Process(1e-9, (20.0,)),))
    structure = low_select(asks, constraint("hold"))
    ramp = (Disturbance(1, 1.0, Process(RATE, (), integrating=True)),)
    response = simulate_branched([structure], [BranchedScenario("sp", 0, 6.0, ramp)], clock=Clock(0.1, 1500))[0][0]
    assert response.spells[1].first_s == pytest.approx((AWAY - 6.0 / GAIN) / RATE, abs=0.1 + 1e-9)


# --- the whole response, computed again -----------------------------------------------------------


def written_out(steps: int, h: float, size: float, lasts: int, *, reset: bool) -> tuple[FloatArray, ...]:
    """Two PI controllers on one valve: gain times error, and what the selector passes through a lag of the reset time.

    The lag is solved backward, so that the one that passes has the backward sum of its error for an integral. Without
    external reset each has that sum for itself.
    """
    gains, resets, setpoints = (1.0, 1.5), (30.0, 40.0), (0.0, 10.0)
    lags, effects, delays = (20.0, 35.0), (1.0, 0.9), (4, 6)
    decay = [float(expm(np.array([[-h / lag]]))[0, 0]) for lag in lags]
    y, u, lagged = np.zeros((2, steps + 1)), np.zeros((2, steps + 1)), [0.0, 0.0 if reset else 40.0]
    passed = np.zeros(steps + 1)
    states, upset = [0.0, 0.0], 0.0
    for k in range(steps + 1):
        if k:
            for one in (0, 1):
                at = k - 1 - delays[one]
                moved = passed[at] if at >= 0 else 0.0
                states[one] = decay[one] * states[one] + (1.0 - decay[one]) * effects[one] * moved
            upset = decay[1] * upset + (1.0 - decay[1]) * (size if k - 1 < lasts else 0.0)
        y[:, k] = states[0], states[1] + upset
        for one in (0, 1):
            u[one, k] = gains[one] * (setpoints[one] - y[one, k]) * (1.0 + h / resets[one]) + lagged[one]
        asked = np.clip(u[:, k], -50.0, 40.0)
        passed[k] = asked.min()
        for one in (0, 1):
            share = h / resets[one]
            if reset:
                lagged[one] += share / (1.0 + share) * (passed[k] - lagged[one])
            else:
                # Each by itself: the sum of its error, drawn back from its own limit.
                error = gains[one] * (setpoints[one] - y[one, k])
                lagged[one] += share * error + share * (asked[one] - u[one, k])
        u[:, k] = asked
    return y[0], y[1], u[0], u[1]


@pytest.mark.parametrize("reset", [True, False])
def test_the_responses_are_those_of_a_simulation_written_out_here(reset: bool) -> None:
    unfollowed = "track" if reset else "nothing"
    pair = [
        BranchedLoop(
            Controller(gain, reset_s, interval_s=0.5, output_high_pct=90.0), (Process(effect, (lag,), dead),), None,
            40.0, 40.0 + error, unfollowed,
        )
        for gain, reset_s, effect, lag, dead, error in (
            (1.0, 30.0, 1.0, 20.0, 2.0, 0.0), (1.5, 40.0, 0.9, 35.0, 3.0, 10.0),
        )
    ]  # fmt: skip
    pushed = (Disturbance(1, 22.0, Process(1.0, (35.0,))),)
    scenario = BranchedScenario("past", 1, disturbances=pushed, lasts_s=400.0)
    response = simulate_branched([low_select(*pair)], [scenario], clock=Clock(0.5, 2000))[0][0]
    y0, y1, u0, u1 = written_out(2000, 0.5, 22.0, 800, reset=reset)
    # Exact for held inputs on both sides; a hundred thousand roundings.
    assert np.allclose(response.measurement_pct[0] - 40.0, y0, rtol=0.0, atol=1e-8)
    assert np.allclose(response.measurement_pct[1] - 40.0, y1, rtol=0.0, atol=1e-8)
    assert np.allclose(response.output_pct[0] - 50.0, u0, rtol=0.0, atol=1e-8)
    assert np.allclose(response.output_pct[1] - 50.0, u1, rtol=0.0, atol=1e-8)
    commands = u1 < u0
    spell = response.spells[1]
    assert spell.first_s == response.time_s[commands][0]
    assert spell.last_s == response.time_s[commands][-1]
    assert spell.last_s < response.time_s[-1], "control went back"


def test_a_high_select_is_the_mirror_of_a_low_select() -> None:
    """Everything turned round the middle: the same with its sign changed."""
    push = Disturbance(1, 20.0, Process(1.0, (30.0,)))
    lows = low_select(STEADY, BranchedLoop(Controller(1.5, 40.0), (Process(0.9, (35.0,)),), None, 40.0, 50.0))
    highs = replace(
        lows,
        loops=(lows.loops[0], replace(lows.loops[1], start_pct=60.0, setpoint_pct=50.0)),
        lowest=False,
    )
    low = simulate_branched([lows], [BranchedScenario("up", 1, disturbances=(push,))], clock=Clock(0.1, 4000))[0][0]
    turned = replace(push, size_pct=-20.0)
    high = simulate_branched([highs], [BranchedScenario("up", 1, disturbances=(turned,))], clock=Clock(0.1, 4000))[0][0]
    assert low.spells == high.spells
    assert low.spells[1].times == 1
    # Rounding alone: subtraction is exact under a change of sign, the added starts are not.
    assert np.allclose(low.measurement_pct[0] - 50.0, 50.0 - high.measurement_pct[0], rtol=0.0, atol=1e-9)
    assert np.allclose(low.measurement_pct[1] - 40.0, 60.0 - high.measurement_pct[1], rtol=0.0, atol=1e-9)


# --- from the register ---------------------------------------------------------------------------

Reading = Callable[..., Override | NotSimulated | None]


@pytest.fixture(scope="module")
def register_with() -> Reading:
    files = {path.relative_to(EXAMPLE): path.read_text(encoding="utf-8") for path in sorted(EXAMPLE.rglob("*.yaml"))}

    def read(folder: Path, tag: str, *changes: tuple[str, str]) -> Override | NotSimulated | None:
        whole = "\0".join(files.values())
        for old, new in changes:
            assert whole.count(old) == 1, old
            whole = whole.replace(old, new)
        for name, text in zip(files, whole.split("\0"), strict=True):
            (folder / name).parent.mkdir(parents=True, exist_ok=True)
            (folder / name).write_text(text, encoding="utf-8")
        loaded = load(folder)
        assert isinstance(loaded, Loaded)
        plant = Plant(loaded.register)
        return override(plant, Dynamics(plant), tag)

    return read


PDIC = "setpoint: {low: 150 mbar, normal: 200 mbar, high: 210 mbar}\n      output: {to: FY-1011, span: 0 to 13 t/h, " \
       "low: 2 t/h, high: 12.5 t/h}\n      modes: {normal: automatic, permitted: [manual, automatic]}\n      " \
       "on_bad_measurement: {mode: manual, output: hold}\n      when_not_followed: track"  # fmt: skip


def test_the_rectifier_is_kept_from_flooding(tmp_path: Path, register_with: Reading) -> None:
    found = register_with(tmp_path, "PDIC-2016")
    assert isinstance(found, Override)
    assert [loop.tag for loop in found.loops] == ["FIC-2001", "PDIC-2016"]
    assert found.loops[found.normal].tag == "FIC-2001"
    assert found.end.tag == "FIC-1011"
    (idle,) = found.standing_by
    limit, sized = found.responses
    # 14.2 t/h is 2.8 above normal; by 1.3 t/h per t/h of steam and 18 mbar per t/h the pressure rises by 38.8 mbar,
    # 11 short of its setpoint: nothing that the operator may ask for brings the override in.
    assert limit.scenario.name == TO_THE_LIMIT
    assert not found.taken_over(limit.as_written, idle).takes_over
    end = found.structure.loops[2].start_pct + 100.0 * (14.2 - 11.4) / 1.3 * 18.0 / 300.0
    assert limit.as_written.measurement_pct[2][-1] == pytest.approx(end, rel=2e-3)
    # 50 mbar to the setpoint and a tenth of the span beyond.
    assert sized.scenario.disturbances[0].size_pct == pytest.approx(100.0 * (50.0 + 30.0) / 300.0)
    ours, theirs = (found.taken_over(response, idle) for response in (sized.as_written, sized.otherwise))
    assert ours.takes_over
    assert theirs.takes_over
    assert ours.reaches_s <= ours.spell.first_s < ours.reaches_s + 10.0
    assert theirs.spell.first_s > ours.spell.first_s + 60.0
    assert theirs.past_pct > 1.5 * ours.past_pct
    assert sized.scenario.lasts_s < ours.gives_back_s < math.inf
    # Where it holds the measurement at its setpoint the steam gives way by the tenth of span over the gain.
    middle = np.searchsorted(sized.as_written.time_s, sized.scenario.lasts_s) - 1
    assert sized.as_written.measurement_pct[2][middle] == pytest.approx(100.0 * 200.0 / 300.0, abs=0.1)
    steam = sized.as_written.measurement_pct[0]
    assert (steam[middle] - steam[0]) * 15.0 / 100.0 == pytest.approx(-30.0 / 18.0, rel=0.02)


def test_what_the_register_lets_wind_up_winds_up(tmp_path: Path, register_with: Reading) -> None:
    found = register_with(tmp_path, "FIC-2001", (PDIC, PDIC.replace("followed: track", "followed: nothing")))
    assert isinstance(found, Override)
    (idle,) = found.standing_by
    assert found.follows(idle) == "nothing"
    assert found.follows(idle, as_written=False) == "track"
    ours, theirs = (
        found.taken_over(response, idle) for response in (found.responses[1].as_written, found.responses[1].otherwise)
    )
    assert ours.spell.first_s > theirs.spell.first_s + 60.0


def test_a_loop_that_passes_no_selector_is_no_override(tmp_path: Path, register_with: Reading) -> None:
    assert register_with(tmp_path, "TIC-2014") is None


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        (
            (("operating: {low: 70 mbar, normal: 150 mbar", "operating: {low: 70 mbar, normal: 200 mbar"),),
            "FIC-2001, PDIC-2016 would command by the normal values at FY-1011: who stands by has a normal value "
            "(`operating`) apart from its normal setpoint, on the side from which it does not ask",
        ),
        (
            (("kind: low select\n", "kind: low select\n    inputs: [FT-1002]\n"),),
            "FT-1002 enters FY-1011 beside the controllers",
        ),
        (((PDIC, PDIC.replace("to: FY-1011", "to: FIC-1011")),), "FY-1011 has one candidate alone"),
        (
            (
                (
                    "stream that the rectifier can take\n    to: FIC-1011\n".replace("stream", "steam"),
                    "steam that the rectifier can take\n    to: FY-1012\n  FY-1012: {kind: lead-lag, unit: \"10\", "
                    "service: Steam, lead: 5 s, lag: 9 s, to: FIC-1011}\n",
                ),
            ),
            "a lead-lag stands behind FY-1011",
        ),
    ],
)
def test_what_cannot_be_simulated_is_told(
    tmp_path: Path, register_with: Reading, changes: tuple[tuple[str, str], ...], reason: str
) -> None:
    assert register_with(tmp_path, "FIC-2001", *changes) == NotSimulated(reason)
