"""Where the time of `loopdoc check` goes on a large register, each stage beside its floor.

Run: python benchmarks/check_stages.py [COPIES]     (28 copies of the demo register are about 1,000 loops)
Prints seconds (median of three runs) and the peak memory of the process.
"""

from __future__ import annotations

import gc
import resource
import statistics
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import yaml
from repeated_register import write_repeated

from loopdoc.engineering.pairing import Plant
from loopdoc.exchange.findings import as_text
from loopdoc.register.load import Loaded, load
from loopdoc.register.schema import schema_faults
from loopdoc.register.text import TextFile, read_text
from loopdoc.rules.check import check

RUNS = 3


def median_s(work: Callable[[], Any]) -> tuple[float, Any]:
    """Median time of a few runs, and what the last one returned."""
    times = []
    result = None
    for _ in range(RUNS):
        start = time.perf_counter()
        result = work()
        times.append(time.perf_counter() - start)
    return statistics.median(times), result


def main() -> None:
    copies = int(sys.argv[1]) if len(sys.argv) > 1 else 28
    gc.set_threshold(50_000, 20, 50)  # as the command line does
    with tempfile.TemporaryDirectory() as temporary:
        folder = Path(temporary)
        write_repeated(folder, copies)
        contents = {str(path): path.read_bytes() for path in sorted(folder.rglob("*.yaml"))}
        size_mb = sum(map(len, contents.values())) / 1e6

        floor_s, _ = median_s(lambda: [yaml.load(text, Loader=yaml.CBaseLoader) for text in contents.values()])
        read_s, files = median_s(lambda: [read_text(text, name) for name, text in contents.items()])
        readable = [file for file in files if isinstance(file, TextFile)]
        schema_s, _ = median_s(lambda: [schema_faults(file, root="site" in file.data) for file in readable])
        load_s, loaded = median_s(lambda: load(folder))
        assert isinstance(loaded, Loaded)
        rules_s, result = median_s(lambda: check(Plant(loaded.register), loaded.faults))
        text_s, _ = median_s(lambda: as_text(result))

    size = f"{len(loaded.register.loops)} loops, {len(contents)} files, {size_mb:.1f} MB"
    print(f"{size}, {len(result.findings)} findings")
    floor = f"floor: bare C parser, no places, {floor_s:.2f} s ({read_s / floor_s:.2f} times)"
    print(f"read text with places      {read_s:8.2f} s    {floor}")
    print(f"schema                     {schema_s:8.2f} s")
    print(f"model                      {load_s - read_s - schema_s:8.2f} s    (load less the two above)")
    print(f"pairing and rules          {rules_s:8.2f} s    {1e6 * rules_s / max(1, result.checked):.0f} us a check")
    print(f"findings as text           {text_s:8.2f} s")
    print(f"check in all               {load_s + rules_s + text_s:8.2f} s")
    print(f"peak memory                {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:8.0f} MB")


if __name__ == "__main__":
    main()
