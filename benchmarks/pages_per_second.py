"""Pages a second of `loopdoc issue` beside WeasyPrint alone on the same HTML, by kind of document, in one run.

    python benchmarks/pages_per_second.py [REGISTER] [--jobs N] [--kinds KIND ...]

`issue` is all of it: reading, checking, simulating, drawing, HTML, PDF with the register inside, writing. WeasyPrint
alone is `weasyprint.HTML(string=...).write_pdf(...)` of the same pages with the same style sheet and fonts, into
memory, in one process. Times are processor seconds of this process and its children, which others disturb
least. A table of the stages gives each one's share; PDF is what no other stage has, and with several processes what
these have spent. Ours reads its pages as XML where they are well-formed, and WeasyPrint alone as HTML, which is slower:
that makes up for a part of the other stages.
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
from loopdoc.documents.handover import issue as handover
from loopdoc.documents.handover.issue import KINDS
from loopdoc.documents.responses import responses
from loopdoc.documents.revision.against import page_html
from loopdoc.register.load import Loaded, load

EXAMPLE = Path(__file__).parent.parent / "examples" / "tarn-hollow"


def processor_s() -> float:
    """Processor seconds of this process and of the children that have ended."""
    return sum(os.times()[:4])


class Stages:
    """Processor seconds by stage; what a stage calls of another counts for that one alone."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._open: list[str] = []
        self._since = processor_s()

    def _pass(self) -> None:
        """Give the time since the last change of stage to the one that ends."""
        now = processor_s()
        if self._open:
            self.seconds[self._open[-1]] += now - self._since
        self._since = now

    def of(self, stage: str, function: Callable[..., Any]) -> Callable[..., Any]:
        """The function, its time counted for the stage."""
        self.seconds.setdefault(stage, 0.0)

        def timed(*arguments: Any, **named: Any) -> Any:
            self._pass()
            self._open.append(stage)
            try:
                return function(*arguments, **named)
            finally:
                self._pass()
                self._open.pop()

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

    stages = Stages()
    reading = stages.of("read and check", read)
    # Simulations and figures are asked for while documents are built, and count for themselves.
    handover.pages_of = stages.of("build the documents", handover.pages_of)
    for name in ("comparison", "split_range", "override"):
        setattr(Basis, name, stages.of("simulate", getattr(Basis, name)))
    responses.to_svg = stages.of("draw the figures", responses.to_svg)
    handover._pdf_source = stages.of("HTML and enclosures", handover._pdf_source)
    handover.write_whole = stages.of("write the files", handover.write_whole)

    with tempfile.TemporaryDirectory() as folder:
        start, wall = processor_s(), time.perf_counter()
        basis = reading(arguments.register)
        handover.issue(basis, Path(folder), kinds=arguments.kinds, formats=["pdf"], jobs=arguments.jobs)
        whole_s, wall_s = processor_s() - start, time.perf_counter() - wall
    own_s = sum(stages.seconds.values())

    fetcher, fonts = pdf._set_up()
    css = pdf._css("")
    alone_s, sheets = 0.0, 0
    print(f"{'kind':18} {'documents':>9} {'pages':>6} {'WeasyPrint, s a page':>21}")
    for kind in arguments.kinds:
        sources = [page_html(page, stylesheet="") for page in handover.pages_of(basis, kind)]
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
    print(f"\n{'stage':24} {'s':>7} {'of the whole':>13} {'of WeasyPrint alone':>20}")
    rows = {
        **stages.seconds,
        "PDF and the rest": whole_s - own_s,
        "the whole": whole_s,
        "WeasyPrint alone": alone_s,
        "overhead": whole_s - alone_s,
    }
    for stage, spent_s in rows.items():
        print(f"{stage:24} {spent_s:7.1f} {spent_s / whole_s:13.1%} {spent_s / alone_s:20.1%}")
    print(f"{sheets} pages with {arguments.jobs} processes: {sheets / whole_s:.2f} a processor second against "
          f"{sheets / alone_s:.2f} of WeasyPrint alone; {wall_s:.1f} s by the clock")  # fmt: skip
    print(f"load of the machine (1, 5, 15 min): {', '.join(f'{one:.1f}' for one in os.getloadavg())}")


if __name__ == "__main__":
    main()
