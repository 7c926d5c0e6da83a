"""A split range across its handover: against the single loop, closed forms, and a simulation written out here."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.linalg import expm

from loopdoc.documents.responses.split_range_story import split_caption
from loopdoc.engineering.branched import Branch, BranchedLoop, BranchedScenario, BranchedStructure
from loopdoc.engineering.branched_simulation import BranchedResponse, simulate_branched
from loopdoc.engineering.clock import Clock
from loopdoc.engineering.comparison import NotSimulated
from loopdoc.engineering.dynamics import Dynamics, inputs_beside
from loopdoc.engineering.functions import Curve
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.simulation import simulate
from loopdoc.engineering.split_range import HANDOVER, SplitRange, split_range
from loopdoc.engineering.structure import ControlStructure, Disturbance, FinalElement, Scenario
from loopdoc.exchange.split_range import split_lines
from loopdoc.register.load import Loaded, load

ROOT = Path(__file__).parents[1]
EXAMPLE = ROOT / "examples" / "tarn-hollow"

FloatArray = NDArray[np.float64]

HEATS = Curve((0.0, 45.0, 100.0), (100.0, 0.0, 0.0))
COOLS = Curve((0.0, 55.0, 100.0), (0.0, 0.0, 100.0))
# Heating raises, cooling lowers, both as the output falls: a rising measurement raises the output.
HEATING = Process(0.6, (90.0, 3.0), 2.0)
COOLING = Process(-0.8, (80.0, 3.0), 3.5)
DIRECT = Controller(-3.5, 50.0, interval_s=0.5)


def heated_and_cooled(output_pct: float, *, stroke_s: float = 3.0, backlash_pct: float = 0.0) -> BranchedStructure:
    valve = FinalElement(stroke_s, backlash_pct)
    loop = BranchedLoop(DIRECT, (HEATING, COOLING), start_pct=15.0)
    return BranchedStructure((loop,), (Branch(valve, HEATS), Branch(valve, COOLS)), output_pct)


def upset(size_pct: float, lags_s: tuple[float, ...] = (90.0, 3.0)) -> BranchedScenario:
    return BranchedScenario("upset", 0, disturbances=(Disturbance(0, size_pct, Process(1.0, lags_s)),))


# --- within one branch it is the single loop -----------------------------------------------------


@pytest.mark.parametrize(
    ("output_pct", "place", "slope", "process"),
    [(20.0, 0, -100.0 / 45.0, HEATING), (80.0, 1, 100.0 / 45.0, COOLING)],
)
def test_within_one_branch_it_is_the_single_loop(output_pct: float, place: int, slope: float, process: Process) -> None:
    """The other final element never moves; the loop on one alone has the controller in percent of its opening."""
    structure = heated_and_cooled(output_pct, backlash_pct=0.5)
    clock = Clock(0.25, 3000)
    start = structure.openings_pct[place]
    limits = sorted((start - slope * output_pct, start + slope * (100.0 - output_pct)))
    alone = Controller(
        DIRECT.gain * slope, 50.0, interval_s=0.5, output_low_pct=limits[0], output_high_pct=limits[1]
    )
    plain = ControlStructure((process,), (alone,), FinalElement(3.0, 0.5, start_pct=start), (15.0,))
    path = Process(1.0, (90.0, 3.0))
    for ours, theirs in zip(
        simulate_branched([structure], [BranchedScenario("sp", 0, 2.0), upset(3.0)], clock=clock)[0],
        simulate([plain], [Scenario("sp", 2.0), Scenario("d", disturbances=(Disturbance(0, 3.0, path),))], clock=clock)[
            0
        ],
        strict=True,
    ):
        # Two ways of multiplying the same numbers, over some thousand steps of a stable loop.
        assert np.allclose(ours.measurement_pct[0], theirs.measurement_pct[0], rtol=0.0, atol=1e-10)
        assert np.allclose(ours.travel_pct[place], theirs.travel_pct, rtol=0.0, atol=1e-9)
        assert np.ptp(ours.travel_pct[1 - place]) == 0.0
        assert ours.metrics.iae_pct_s == pytest.approx(theirs.metrics.iae_pct_s, rel=1e-10)
        assert ours.metrics.valve_travel_pct == pytest.approx(theirs.metrics.valve_travel_pct, rel=1e-9)
        assert ours.metrics.reversals == theirs.metrics.reversals


def test_a_cascade_on_one_final_element_is_the_cascade() -> None:
    inner, outer = Controller(0.45, 12.0, interval_s=0.5), Controller(1.44, 540.0, 20.0, interval_s=1.0)
    near, far = Process(1.0, (4.0, 1.0), 1.3), Process(1.375, (540.0,), 90.0)
    valve, clock = FinalElement(6.0, 0.5), Clock(0.25, 8000)
    loops = (BranchedLoop(inner, (near,)), BranchedLoop(outer, (far,), 0))
    branched = BranchedStructure(loops, (Branch(valve),))
    ours = simulate_branched([branched], [BranchedScenario("sp", 1, 10.0)], clock=clock)
    theirs = simulate([ControlStructure((near, far), (inner, outer), valve)], [Scenario("sp", 10.0)], clock=clock)
    for level in (0, 1):
        # Rounding: the limits are taken from another zero.
        found, wanted = ours[0][0].measurement_pct[level], theirs[0][0].measurement_pct[level]
        assert np.allclose(found, wanted, rtol=0.0, atol=1e-10)


# --- steady states in closed form ----------------------------------------------------------------


@pytest.mark.parametrize("size_pct", [-20.0, -6.0, 4.0, 12.0, 30.0])
def test_in_the_end_the_branches_make_the_upset_good(size_pct: float) -> None:
    """0.6 of heating less 0.8 of cooling must fall by the upset: the openings follow by arithmetic."""
    structure = heated_and_cooled(41.25)
    start = HEATING.gain * structure.openings_pct[0]
    assert start == pytest.approx(5.0)
    wanted = start - size_pct
    heating, cooling = max(0.0, wanted / 0.6), max(0.0, -wanted / 0.8)
    response = simulate_branched([structure], [upset(size_pct)], clock=Clock(0.5, 6000))[0][0]
    # Fifty minutes are sixty reset times: what is left of the upset is below rounding of the plot, not of the number.
    assert response.travel_pct[0][-1] == pytest.approx(heating, abs=1e-6)
    assert response.travel_pct[1][-1] == pytest.approx(cooling, abs=1e-6)
    assert response.measurement_pct[0][-1] == pytest.approx(15.0, abs=1e-6)


def test_more_than_both_can_do_stays_as_an_offset() -> None:
    """Full cooling takes 80 % off; of an upset of 100 % from 5 % of heating 15 % stay."""
    response = simulate_branched([heated_and_cooled(41.25)], [upset(100.0)], clock=Clock(0.5, 4000))[0][0]
    assert [float(travel[-1]) for travel in response.travel_pct] == pytest.approx([0.0, 100.0], abs=1e-9)
    # After 22 lags e^-22 of the upset is left.
    assert response.measurement_pct[0][-1] - 15.0 == pytest.approx(100.0 - 5.0 - 80.0, abs=1e-6)
    assert response.metrics.limited_level == 0
    assert math.isinf(response.metrics.iae_pct_s)


# --- the whole response, computed again -----------------------------------------------------------


def held(process: Process, step_s: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Two lags in series for an input held over a step, by the matrix exponential of scipy."""
    slow, fast = process.lags_s
    a = np.array([[-1.0 / slow, 0.0], [1.0 / fast, -1.0 / fast]])
    b = np.array([[process.gain / slow], [0.0]])
    block = expm(np.block([[a, b], [np.zeros((1, 3))]]) * step_s)
    return block[:2, :2], block[:2, 2], np.array([0.0, 1.0])


def written_out(size_pct: float, output_pct: float, steps: int, step_s: float) -> tuple[FloatArray, FloatArray]:
    """Measurement from its start and both openings, scan by scan: PI, split, stroke, two processes, sum."""
    systems = [held(HEATING, step_s), held(COOLING, step_s), held(Process(size_pct, (90.0, 3.0)), step_s)]
    states = [np.zeros(2) for _ in systems]
    delays = [round(process.dead_time_s / step_s) for process in (HEATING, COOLING)]
    openings = np.zeros((2, steps + 1))
    openings[:, 0] = HEATS.at(output_pct), COOLS.at(output_pct)
    moved = [np.zeros(steps + 1), np.zeros(steps + 1)]
    drives = openings[:, 0].copy()
    measured = np.zeros(steps + 1)
    integral = output = 0.0
    for k in range(steps + 1):
        if k:
            for one in (0, 1):
                at = k - 1 - delays[one]
                states[one] = systems[one][0] @ states[one] + systems[one][1] * (moved[one][at] if at >= 0 else 0.0)
            states[2] = systems[2][0] @ states[2] + systems[2][1]
        measured[k] = sum(system[2] @ state for system, state in zip(systems, states, strict=True))
        error = -measured[k]
        integral += DIRECT.gain * step_s / DIRECT.reset_s * error
        output = DIRECT.gain * error + integral
        limited = min(max(output_pct + output, 0.0), 100.0) - output_pct
        integral += step_s / DIRECT.reset_s * (limited - output)
        for one, curve in enumerate((HEATS, COOLS)):
            target = float(np.interp(output_pct + limited, curve.inputs, curve.outputs))
            rate = 100.0 * step_s / 3.0
            move = min(max(target - drives[one], -rate), rate)
            drives[one] += move
            mean = drives[one] - move * abs(move) / rate / 2.0
            openings[one, k] = mean
            moved[one][k] = mean - (HEATS, COOLS)[one].at(output_pct)
    return measured, openings


def test_the_response_across_the_handover_is_that_of_a_simulation_written_out_here() -> None:
    clock = Clock(0.5, 1200)
    response = simulate_branched([heated_and_cooled(41.25)], [upset(10.0)], clock=clock)[0][0]
    measured, openings = written_out(10.0, 41.25, clock.steps, clock.step_s)
    # Both are exact for held inputs: rounding is all that is between them.
    assert np.allclose(response.measurement_pct[0] - 15.0, measured, rtol=0.0, atol=1e-9)
    for travel, opening in zip(response.travel_pct, openings, strict=True):
        assert np.allclose(travel, opening, rtol=0.0, atol=1e-9)
    assert response.travel_pct[0].min() == 0.0
    assert response.travel_pct[1].max() > 5.0


def test_travel_and_turns_are_those_of_all_final_elements() -> None:
    response = simulate_branched([heated_and_cooled(41.25)], [upset(10.0)], clock=Clock(0.5, 1200))[0][0]
    # Nothing moves between the steps: the sum of the differences at every step is the whole travel.
    each = [float(np.abs(np.diff(travel)).sum()) for travel in response.travel_pct]
    starts = (25.0 / 3.0, 0.0)
    first = sum(abs(float(travel[0]) - at) for travel, at in zip(response.travel_pct, starts, strict=True))
    assert response.metrics.valve_travel_pct == pytest.approx(sum(each) + first, rel=1e-9)
    # Heating shuts and stays; cooling opens too far once and comes back.
    assert response.metrics.reversals == 1


# --- from the register ---------------------------------------------------------------------------


@pytest.fixture(scope="module")
def register_with() -> Callable[..., SplitRange | NotSimulated | None]:
    files = {
        path.relative_to(EXAMPLE): path.read_text(encoding="utf-8")
        for path in sorted(EXAMPLE.rglob("*.yaml"))
    }

    def read(folder: Path, *changes: tuple[str, str], tag: str = "PIC-2021") -> SplitRange | NotSimulated | None:
        for name, text in files.items():
            if name.name == "20-rectification.yaml":
                for old, new in changes:
                    assert text.count(old) == 1, old
                    text = text.replace(old, new)
            (folder / name).parent.mkdir(parents=True, exist_ok=True)
            (folder / name).write_text(text, encoding="utf-8")
        loaded = load(folder)
        assert isinstance(loaded, Loaded)
        return split_range(Dynamics(Plant(loaded.register)).loop(tag).chains)

    return read


Reading = Callable[..., SplitRange | NotSimulated | None]
SPLIT = "PV-2021A: 45 to 0 %"


def crossing(split: SplitRange) -> dict[str, bool]:
    return {response.scenario.name: split.crosses(response) for response in split.responses}


def test_the_start_is_chosen_so_that_the_standard_upset_crosses(tmp_path: Path, register_with: Reading) -> None:
    split = register_with(tmp_path)
    assert isinstance(split, SplitRange)
    assert not split.is_declared
    assert split.handover_pct == 50.0
    # Half of a tenth of 1 bar by 0.006 bar per % is 8.33 % of nitrogen, 3.75 % of the output below 45 %.
    assert split.structure.output_pct == pytest.approx(45.0 - 0.45 * 0.05 / 0.006)
    assert split.structure.openings_pct == pytest.approx((0.05 / 0.006, 0.0))
    assert crossing(split) == {"setpoint step": False, "primary disturbance": True}
    end = {e.tag: float(t[-1]) for e, t in zip(split.elements, split.responses[1].travel_pct, strict=True)}
    # The other half by 0.008 bar per % of vent; 2 % of the upset are left where it settles.
    assert end["PV-2021B"] == pytest.approx(0.05 / 0.008, abs=0.02 * 0.1 / 0.008)
    assert end["PV-2021A"] == 0.0
    assert split.worst.chain.final_element.tag == "PV-2021B"


def test_a_declared_start_is_kept_and_an_upset_sized_to_cross(tmp_path: Path, register_with: Reading) -> None:
    split = register_with(tmp_path, (f"outputs:\n      {SPLIT}", f"normal_input: 60 %\n    outputs:\n      {SPLIT}"))
    assert isinstance(split, SplitRange)
    assert split.is_declared
    assert split.structure.output_pct == pytest.approx(60.0)
    # 5 of the 45 % of the vent's part.
    assert split.structure.openings_pct == pytest.approx((0.0, 100.0 / 9.0))
    found = crossing(split)
    assert found[HANDOVER]
    assert not found["primary disturbance"], "it opens the vent further"
    sized = split.responses[-1].scenario
    # The vent holds 0.008 bar per % of 11.1 %: twice that, downward, ends as far in the nitrogen.
    assert sized.disturbances[0].size_pct == pytest.approx(-2.0 * 100.0 * 0.008 * 100.0 / 9.0)
    assert float(split.responses[-1].travel_pct[0][-1]) == pytest.approx(0.008 * 100.0 / 9.0 / 0.006, rel=0.02)


def test_a_characteriser_on_a_branch_opens_it_by_its_curve(tmp_path: Path, register_with: Reading) -> None:
    """The margins take the slope at the normal input; the response goes along the curve."""
    split = register_with(
        tmp_path,
        ("PV-2021B: 55 to 100 %", "PY-2022: 55 to 100 %"),
        (
            "  FY-2031:\n",
            "  PY-2022:\n    kind: characteriser\n    unit: \"20\"\n    service: Vent\n    to: PV-2021B\n"
            "    normal_input: 20 %\n    curve:\n      - {at: 0 %, gives: 0 %}\n      - {at: 50 %, gives: 20 %}\n"
            "      - {at: 100 %, gives: 100 %}\n  FY-2031:\n",
        ),
    )
    assert isinstance(split, SplitRange), split
    # Half of the part gives a fifth of the opening.
    assert split.structure.branches[1].opening == Curve((0.0, 55.0, 77.5, 100.0), (0.0, 0.0, 20.0, 100.0))


def test_what_a_sum_adds_before_the_split_shifts_nothing_and_is_told(tmp_path: Path, register_with: Reading) -> None:
    plain = register_with(tmp_path / "plain")
    split = register_with(
        tmp_path / "summed",
        ("output: {to: PY-2021,", "output: {to: FY-2025,"),
        (
            "  FY-2031:\n",
            "  FY-2025: {kind: sum, unit: \"20\", service: Vapour ahead, inputs: [FT-2001], to: PY-2021}\n  FY-2031:\n",
        ),
    )
    assert isinstance(plain, SplitRange)
    assert isinstance(split, SplitRange), split
    assert split.structure == plain.structure
    assert inputs_beside(split.chains) == (("FT-2001", "FY-2025"),)
    assert "What FT-2001 brings into FY-2025 stays as it is in these responses." in split_caption(split)
    assert "FT-2001 into FY-2025: stays as it is in these responses" in list(split_lines(split))


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        (
            (("PV-2021B: {effect: falls, gain: -0.008 bar per %", "PV-2021B: {effect: rises, gain: 0.008 bar per %"),),
            "PIC-2021 as tuned is not stable",
        ),
        (
            (
                (
                    "PV-2021B: {effect: falls, gain: -0.008 bar per %, lags: [80 s, 3 s]",
                    "PV-2021B: {effect: falls, gain: -0.0001 bar/s per %, integrating: true, lags: [3 s]",
                ),
            ),
            "one branch of PY-2021 integrates and the other does not",
        ),
        (
            ((f"outputs:\n      {SPLIT}", f"normal_input: {{hold: vendor}}\n    outputs:\n      {SPLIT}"),),
            "the normal input of PY-2021 is on hold or could not be read",
        ),
    ],
)
def test_what_cannot_be_simulated_is_told(
    tmp_path: Path, register_with: Reading, changes: tuple[tuple[str, str], ...], reason: str
) -> None:
    assert register_with(tmp_path, *changes) == NotSimulated(reason)


PRIMARY = """\
  PIC-2090:
    unit: "20"
    service: Overhead pressure
    measurement: {transmitter: PT-2090, variable: pressure, range: 0 to 2 barg, signal: 4-20 mA}
    operating: {normal: 0.5 barg}
    controller:
      action: reverse
      gain: 0.6
      reset: 400 s
      interval: 1 s
      setpoint: {low: 0.1 barg, normal: 0.5 barg, high: 1.5 barg}
      output: {to: PIC-2021, span: 0.10 to 0.20 barg}
      when_not_followed: track
    process: {effect: rises, gain: 1.5 bar per bar, lag: 300 s, source: design estimate}
  PIC-2021:
"""


def test_below_a_primary_the_split_range_is_that_of_its_secondary(tmp_path: Path, register_with: Reading) -> None:
    split = register_with(tmp_path, ("  PIC-2021:\n", PRIMARY), tag="PIC-2090")
    assert isinstance(split, SplitRange), split
    assert split.lead.tag == "PIC-2090"
    assert [loop.start_pct for loop in split.structure.loops] == pytest.approx([15.0, 25.0])
    assert crossing(split)["secondary disturbance"]
    response = next(one for one in split.responses if one.scenario.name == "secondary disturbance")
    # As without the primary: in the end its measurement, and so the setpoint of the secondary, is where it was.
    assert float(response.travel_pct[1][-1]) == pytest.approx(0.05 / 0.008, rel=0.05)
    assert float(response.measurement_pct[1][-1]) == pytest.approx(25.0, abs=0.05)


def test_a_single_loop_is_no_split_range(tmp_path: Path) -> None:
    loaded = load(EXAMPLE)
    assert isinstance(loaded, Loaded)
    assert split_range(Dynamics(Plant(loaded.register)).loop("FIC-2011").chains) is None


def test_all_responses_of_a_split_range_have_one_time_axis(tmp_path: Path, register_with: Reading) -> None:
    split = register_with(tmp_path)
    assert isinstance(split, SplitRange)
    one, other = split.responses
    assert isinstance(one, BranchedResponse)
    assert one.time_s is other.time_s
    assert all(len(travel) == len(one.time_s) for response in split.responses for travel in response.travel_pct)
