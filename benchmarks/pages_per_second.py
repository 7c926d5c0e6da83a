"""Pages a second of `loopdoc issue` beside WeasyPrint alone on the same HTML, by kind of document, in one run.

    python benchmarks/pages_per_second.py [REGISTER] [--jobs N] [--kinds KIND ...]

`issue` is all of it: reading, checking, simulating, drawing, HTML, PDF with the register inside, writing. WeasyPrint
alone is `weasyprint.HTML(string=...).write_pdf(...)` of the same pages with the same style sheet and fonts, into
memory, in one process. Times are processor seconds of this process and its children, which others disturb
least; the share of the plots is that of simulating and drawing them.
"""

from __future__ import annotations

import argparse
import gc
import io
import os
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pypdf
import weasyprint

from loopdoc.documents import pdf
from loopdoc.documents.basis import Basis, basis_of
from loopdoc.documents.handover.issue import KINDS, issue, pages_of
from loopdoc.documents.responses import responses
from loopdoc.documents.revision.against import page_html
from loopdoc.engineering import simulation
from loopdoc.register.load import Loaded, load

EXAMPLE = Path(__file__).parent.parent / "examples" / "tarn-hollow"


def processor_s() -> float:
    """Processor seconds of this process and of the children that have ended."""
    return sum(os.times()[:4])


class Share:
    """Processor seconds spent in a function, while the benchmark runs."""

    def __init__(self) -> None:
        self.seconds = 0.0
        self._inside = False

    def of(self, function: Callable[..., Any]) -> Callable[..., Any]:
        def timed(*arguments: Any, **named: Any) -> Any:
            if self._inside:
                return function(*arguments, **named)
            self._inside, start = True, processor_s()
            try:
                return function(*arguments, **named)
            finally:
                self.seconds += processor_s() - start
                self._inside = False

        return timed


def read(folder: Path) -> Basis:
    """The register, new: nothing of it has been calculated."""
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    return basis_of(loaded)


def main() -> None:
    """Print a line a kind, and one for all together."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("register", nargs="?", type=Path, default=EXAMPLE)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--kinds", nargs="+", default=list(KINDS), choices=list(KINDS))
    arguments = parser.parse_args()
    gc.set_threshold(50_000, 20, 50)  # as the command does
    pdf.to_pdf("<!doctype html><html lang='en'><head><title>t</title></head><body>t</body></html>")

    simulated, drawn = Share(), Share()
    simulation.simulate_groups = simulated.of(simulation.simulate_groups)
    responses.to_svg = drawn.of(responses.to_svg)

    with tempfile.TemporaryDirectory() as folder:
        start, wall = processor_s(), time.perf_counter()
        basis = read(arguments.register)
        issue(basis, Path(folder), kinds=arguments.kinds, formats=["pdf"], jobs=arguments.jobs)
        whole_s, wall_s = processor_s() - start, time.perf_counter() - wall

    fetcher, fonts = pdf._set_up()
    css = pdf._css("")
    alone_s, sheets = 0.0, 0
    print(f"{'kind':18} {'documents':>9} {'pages':>6} {'WeasyPrint, s a page':>21}")
    for kind in arguments.kinds:
        sources = [page_html(page, stylesheet="") for page in pages_of(basis, kind)]
        start = processor_s()
        made = [
            weasyprint.HTML(string=source, url_fetcher=fetcher).write_pdf(
                stylesheets=[css], font_config=fonts, pdf_variant="pdf/a-3a"
            )
            for source in sources
        ]
        spent_s = processor_s() - start
        count = sum(len(pypdf.PdfReader(io.BytesIO(one)).pages) for one in made)
        alone_s, sheets = alone_s + spent_s, sheets + count
        if count:
            print(f"{kind:18} {len(made):9} {count:6} {spent_s / count:21.3f}")
    overhead_s = whole_s - alone_s
    print(f"issue --jobs {arguments.jobs}: {whole_s:.1f} s of processor, {wall_s:.1f} s by the clock, {sheets} pages,")
    print(f"  {sheets / whole_s:.2f} pages a processor second, {sheets / wall_s:.2f} by the clock")
    print(f"WeasyPrint alone: {alone_s:.1f} s of processor, {sheets / alone_s:.2f} pages a second")
    print(f"overhead: {overhead_s:.1f} s, {overhead_s / alone_s:.0%}")
    print(f"  simulation {simulated.seconds:.1f} s ({simulated.seconds / alone_s:.0%}), figures {drawn.seconds:.1f} s "
          f"({drawn.seconds / alone_s:.0%})")  # fmt: skip
    print(f"load of the machine (1, 5, 15 min): {', '.join(f'{one:.1f}' for one in os.getloadavg())}")


if __name__ == "__main__":
    main()
