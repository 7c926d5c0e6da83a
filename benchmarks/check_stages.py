"""Where the time of `loopdoc check` goes on a large register, each stage beside its floor.

Run: python benchmarks/check_stages.py [COPIES]     (250 copies of the demo register are 10,000 loops)

A floor is what the stage cannot do without, on the same register in the same run: the bare parser for reading, the
bare validator for the schema, one walk over the plain data for the model and for pairing, an empty rule for each
check, and the bare frequency response of as many cascades for the dynamics. Times are processor
times, which other work on the machine disturbs least. Small registers are timed three times: the median counts.
"""

from __future__ import annotations

import gc
import json
import resource
import statistics
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import jsonschema_rs
import numpy as np
from repeated_register import write_repeated
from yaml._yaml import CParser

from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.time_to_act import TimeToAct
from loopdoc.exchange.findings import as_text
from loopdoc.register.files import FolderFiles
from loopdoc.register.load import Loaded, load_files
from loopdoc.register.schema import schema_faults, schema_text
from loopdoc.register.text import TextFile, read_text
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.check import check

SMALL_COPIES = 50
FREQUENCIES = 400
CHUNK = 250


def main() -> None:
    copies = int(sys.argv[1]) if len(sys.argv) > 1 else 25
    runs = 3 if copies <= SMALL_COPIES else 1
    gc.set_threshold(50_000, 20, 50)  # as the command line does

    def timed(work: Callable[[], Any]) -> tuple[float, Any]:
        times = []
        result = None
        for _ in range(runs):
            result = None
            start = time.process_time()
            result = work()
            times.append(time.process_time() - start)
        return statistics.median(times), result

    with tempfile.TemporaryDirectory() as temporary:
        folder = Path(temporary)
        write_repeated(folder, copies)
        contents = {str(path): path.read_bytes() for path in sorted(folder.rglob("*.yaml"))}
        size_mb = sum(map(len, contents.values())) / 1e6
        bare_read_s, _ = timed(lambda: [bare_events(content) for content in contents.values()])
        read_s, files = timed(lambda: [read_text(content, name) for name, content in contents.items()])
        read_mb = peak_mb()
        readable = [file for file in files if isinstance(file, TextFile)]
        validators = {
            root: jsonschema_rs.Draft202012Validator(json.loads(schema_text(root=root))) for root in (True, False)
        }
        bare_schema_s, _ = timed(lambda: [list(validators[is_root(file)].iter_errors(file.data)) for file in readable])
        schema_s, _ = timed(lambda: [schema_faults(file, root=is_root(file)) for file in readable])
        walk_s, _ = timed(lambda: [sum(1 for _ in walked(file.data)) for file in readable])
        load_s, loaded = timed(lambda: load_files(FolderFiles(folder)))
    assert isinstance(loaded, Loaded)
    load_mb = peak_mb()
    resolve_s, plant = timed(lambda: resolved(loaded))
    moving = [rule.id for rule in RULES if {Dynamics, TimeToAct} & set(rule.besides)]
    still = [rule.id for rule in RULES if rule.id not in moving]
    rules_s, result = timed(lambda: check(plant, loaded.faults, only=still))
    rules_mb = peak_mb()
    empty_s, _ = timed(lambda: [list(empty_rule()) for _ in range(result.checked)])
    dynamics_s, moved = timed(lambda: check(Plant(loaded.register), loaded.faults, only=moving))
    dynamics_mb = peak_mb()
    bare_dynamics_s, _ = timed(lambda: bare_responses(len(plant.controlled)))
    text_s, _ = timed(lambda: as_text(result, loaded.sources))

    loops = f"{len(loaded.register.loops)} loops ({len(plant.controlled)} with controllers)"
    checks = result.checked + moved.checked
    print(f"{loops}, {len(contents)} files, {size_mb:.1f} MB; {checks} checks by {len(RULES)} rules")
    print(f"{'stage':<28}{'s':>8}{'floor, s':>10}{'times':>8}{'peak, MB':>10}   floor")
    model_s = load_s - read_s - schema_s
    for stage, taken, floor, mb, told in (
        ("read text with places", read_s, bare_read_s, read_mb, "events of the C parser on the same bytes"),
        ("schema", schema_s, bare_schema_s, None, "the validator on the plain data"),
        ("model", model_s, walk_s, load_mb, "one walk over the plain data"),
        ("resolve", resolve_s, walk_s, None, "one walk over the plain data"),
        (f"rules ({len(still)})", rules_s, empty_s, rules_mb, "an empty rule for each check"),
        (f"dynamics ({len(moving)} rules)", dynamics_s, bare_dynamics_s, dynamics_mb, "response at 400 frequencies"),
        ("findings as text", text_s, None, None, ""),
    ):
        beside = f"{floor:>10.2f}{taken / floor:>8.1f}" if floor else " " * 18
        print(f"{stage:<28}{taken:>8.2f}{beside}{f'{mb:.0f}' if mb else '':>10}   {told}")
    print(f"{'check in all':<28}{load_s + resolve_s + rules_s + dynamics_s + text_s:>8.2f}{'':>18}{peak_mb():>10.0f}")


def peak_mb() -> float:
    """Largest memory of this process so far."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def is_root(file: TextFile) -> bool:
    return isinstance(file.data, dict) and "site" in file.data


def bare_events(content: bytes) -> int:
    """Take every event of the C parser and do nothing with it."""
    get_event = CParser(content.decode()).get_event
    count = 0
    while get_event() is not None:
        count += 1
    return count


def walked(data: Any) -> Iterator[Any]:
    """Every value of some plain data."""
    yield data
    if isinstance(data, dict | list):
        for value in data.values() if isinstance(data, dict) else data:
            yield from walked(value)


def resolved(loaded: Loaded) -> Plant:
    """The plant with its pairings, alarms and trips found."""
    plant = Plant(loaded.register)
    _ = plant.controlled, plant.links, plant.alarms, plant.trips
    return plant


def empty_rule() -> Iterator[None]:
    yield from ()


def bare_responses(loops: int) -> None:
    """Open loop of as many first-order processes with dead time under PI control, and the largest sensitivity."""
    omega = np.logspace(-4, 2, FREQUENCIES)
    for start in range(0, loops, CHUNK):
        lag = np.linspace(5.0, 500.0, min(CHUNK, loops - start))[:, None]
        process = np.exp(-1j * omega * lag / 5) / (1 + 1j * omega * lag)
        open_loop = process * (1 + 1 / (1j * omega * lag))
        np.abs(1 / (1 + open_loop)).max(axis=1)


if __name__ == "__main__":
    main()
