"""The compiled simulation where nothing can be kept, and its bytes in two processes."""

import subprocess
import sys
from pathlib import Path

import numba
import pytest

from loopdoc.engineering.scanning import compiled

ROOT = Path(__file__).parent.parent

PROGRAM = """
import hashlib
from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.simulation import simulate
from loopdoc.engineering.structure import FinalElement, cascade_structure, standard_scenarios
stages = [
    LoopStage(Controller(0.45, 12.0, interval_s=0.5), Process(1.0, (4.0, 1.0), 1.3)),
    LoopStage(Controller(1.44, 540.0, 20.0, interval_s=1.0), Process(1.375, (540.0,), 90.0)),
]
structure = cascade_structure(stages, final_element=FinalElement(6.0, 0.5))
seen = hashlib.sha256()
for response in simulate([structure], standard_scenarios(2))[0]:
    seen.update(response.measurement_pct[1].tobytes() + response.travel_pct.tobytes() + repr(response.metrics).encode())
print(seen.hexdigest())
"""


def test_two_processes_find_the_same_bytes() -> None:
    runs = [subprocess.run([sys.executable, "-c", PROGRAM], cwd=ROOT, capture_output=True, text=True) for _ in range(2)]
    assert [run.stderr for run in runs] == ["", ""]
    assert len({run.stdout for run in runs}) == 1


def test_where_nothing_can_be_kept_functions_are_compiled_all_the_same() -> None:
    # A function that stands in no file has no place beside it, as one in a read-only installation without a home.
    named: dict[str, object] = {}
    exec("def twice(value):\n    return 2.0 * value\n", named)
    with pytest.raises(RuntimeError, match="no locator available"):
        numba.njit(named["twice"], cache=True)
    assert compiled(named["twice"])(1.5) == 3.0  # type: ignore[type-var, operator]
