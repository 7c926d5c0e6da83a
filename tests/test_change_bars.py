"""Bars beside what an issue against an earlier revision changes: where they stand, and that they stand nowhere else."""

from __future__ import annotations

import io
import re
from html.parser import HTMLParser
from pathlib import Path

import pypdf
import pytest

from loopdoc.cli import run
from loopdoc.documents.basis import Basis, basis_of
from loopdoc.documents.handover.attest import Answer, Attestation, Attested
from loopdoc.documents.handover.issue import issue, page_html, pages_of, pdf_of
from loopdoc.documents.revision.change_bars import blocks, difference, with_bars
from loopdoc.register.load import Loaded, load
from loopdoc.register.starter import starter_files


def write(folder: Path, *changes: tuple[str, str]) -> Path:
    """The starter's register with some changes of its text, each in one place."""
    texts = {name: content.decode() for name, content in starter_files().items()}
    for old, new in changes:
        (name,) = (name for name, text in texts.items() if old in text)
        texts[name] = texts[name].replace(old, new, 1)
    for name, text in texts.items():
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_text(text, "utf-8")
    return folder


def read(folder: Path, against: Basis | None = None) -> Basis:
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    return basis_of(loaded, against=against)


def page(body: str) -> str:
    return f"<html><head><title>t</title></head><body><main>\n{body}\n</main></body></html>"


# ---------------------------------------------------------------- blocks


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("<p>The limit is 94 &deg;C.</p>", "<p class='x'>The <b>limit</b> is\n 94 \u00b0C.</p>"),  # as a reader sees it
        ("<h2>3.1 FIC-2011</h2>", "<h2>3.2 FIC-2011</h2>"),
        ("<p>HOLD\u00a01</p>", "<p>HOLD\u00a02</p>"),
        ('<div class="revisions"><p>A</p></div>', '<div class="revisions"><p>B</p></div>'),
        ("<nav><ol><li>1</li></ol></nav>", "<nav><ol><li>2</li></ol></nav>"),
        ('<svg><g id="a"/><use href="#a"/></svg>', '<svg><g id="b"/><use href="#b"/></svg>'),
        ('<div class="title-block"><p>A</p></div>', '<div class="title-block"><p>B</p></div>'),
    ],
)  # fmt: skip
def test_what_a_reader_does_not_take_for_a_change_bears_no_bar(old: str, new: str) -> None:
    assert not difference(page(old), page(new)).differs
    assert with_bars(page(old), page(new)) == page(new)


def test_each_kind_of_block_bears_its_bar() -> None:
    old = "<h2>1 One</h2><p>a</p><ul><li>b</li></ul><table><tr><td>c</td><td>d</td></tr></table><figure><svg/></figure>"
    new = (
        '<h2>1 Two</h2><p class="keep">A</p><ul><li>B</li></ul><table><tr id="r"><td>cd</td><td></td></tr></table>'
        "<figure><svg><g/></svg></figure>"
    )
    assert with_bars(page(old), page(new)) == page(
        '<h2 class="changed">1 Two</h2><p class="changed keep">A</p><ul><li class="changed">B</li></ul>'
        '<table><tr class="changed" id="r"><td>cd</td><td></td></tr></table>'
        '<figure class="changed"><svg><g/></svg></figure>'
    )


def test_what_is_gone_marks_what_comes_after_it() -> None:
    old, new = "<p>a</p><p>b</p><p>c</p>", "<p>a</p><p>c</p>"
    assert with_bars(page(old), page(new)) == page('<p>a</p><p class="removed-before">c</p>')
    assert difference(page(old), page(new)).removed == 1


def test_a_row_put_in_marks_no_other() -> None:
    rows = "".join(f"<tr><td>{number}</td></tr>" for number in range(50))
    new = rows.replace("<tr><td>20</td></tr>", "<tr><td>20</td></tr><tr><td>new</td></tr>")
    found = difference(page(f"<table>{rows}</table>"), page(f"<table>{new}</table>"))
    assert [block.key for block in found.changed] == ["tr\u241e\u241fnew"]


def test_blocks_are_those_of_an_independent_reader() -> None:
    """Counted by the tags of a page that has them all, read in another way."""
    html = page("<p>a<br>b</p><ul><li>c</li><li>d</li></ul><figure><svg><p>x</p></svg></figure>"
                "<table><tr><td><p>e</p></td></tr></table><svg><g/></svg>")  # fmt: skip
    assert [block.name for block in blocks(html)] == ["p", "li", "li", "figure", "tr", "svg"]


# ---------------------------------------------------------------- documents


class _Classes(HTMLParser):
    """Text of every element with the class `changed`."""

    def __init__(self, html: str) -> None:
        super().__init__()
        self.found: list[str] = []
        self._depth = 0
        self.feed(html)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        if self._depth:
            self._depth += tag not in ("br", "col")
        elif "changed" in (dict(attrs).get("class") or "").split():
            self._depth = 1
            self.found.append("")

    def handle_endtag(self, tag: str) -> None:
        self._depth = max(0, self._depth - 1)

    def handle_data(self, data: str) -> None:
        if self._depth:
            self.found[-1] += data


def sheet(basis: Basis, tag: str) -> str:
    return next(page_html(one, stylesheet="") for one in pages_of(basis, "loop-sheet") if one.name == tag)


def main_of(html: str) -> str:
    return html.partition("<main>")[2]


def test_a_changed_gain_bears_a_bar_on_its_sheet_and_nowhere_on_the_others(tmp_path: Path) -> None:
    text = b"".join(starter_files().values()).decode()
    gain = re.search(r"gain: (\d[\d.]*)\n", text)
    assert gain
    old = read(write(tmp_path / "old"))
    new = read(write(tmp_path / "new", (f"gain: {gain[1]}\n", "gain: 0.123\n")), against=old)
    barred = {one.name: _Classes(page_html(one, stylesheet="")).found for one in pages_of(new, "loop-sheet")}
    with_gain = [name for name, found in barred.items() if any("0.123" in said for said in found)]
    assert len(with_gain) == 1
    for name, found in barred.items():
        html = sheet(new, name)
        assert "Bars mark changes since revision" in html
        without_bars = re.sub(r' class="changed"|(?<=")changed ', "", html)
        assert bool(found) == (main_of(without_bars) != main_of(sheet(old, name)))


def test_a_new_sheet_is_called_new_and_bears_no_bar(tmp_path: Path) -> None:
    old = read(write(tmp_path / "old"))
    extra = "loops:\n  FI-1099:\n    unit: \"10\"\n    service: Spare\n    measurement: {transmitter: FT-1099}\n"
    new = read(write(tmp_path / "new", ("loops:\n", extra)), against=old)
    html = sheet(new, "FI-1099")
    assert "New in this revision" in html
    assert "Bars mark" not in html
    assert not _Classes(html).found


def test_a_barred_pdf_keeps_its_bytes_and_is_attested(tmp_path: Path) -> None:
    old, new = tmp_path / "old", tmp_path / "new"
    write(old)
    write(new, ("service: ", "service: Changed "))
    made = []
    for _ in range(2):
        basis = read(new, against=read(old))
        changed = next(one for one in pages_of(basis, "loop-sheet") if _Classes(page_html(one, stylesheet="")).found)
        made.append(pdf_of(basis, "loop-sheet", changed))
    assert made[0] == made[1]
    text = " ".join(pypdf.PdfReader(io.BytesIO(made[0])).pages[0].extract_text().split())
    assert "Bars mark changes since revision" in text
    found = Attestation(read(new)).attest(made[0])
    assert isinstance(found, Attested)
    assert (found.register_whole, found.pages_unaltered, found.current) == (Answer.YES,) * 3
    stale = Attestation(read(old)).attest(made[0])
    assert isinstance(stale, Attested)
    assert stale.current is Answer.NO


def test_issue_against_a_folder_writes_the_revision_summary(tmp_path: Path) -> None:
    old, new = write(tmp_path / "old"), write(tmp_path / "new", ("service: ", "service: Changed "))
    out, err = io.StringIO(), io.StringIO()
    arguments = ["issue", str(new), "--out", str(tmp_path / "out"), "--documents", "channel-list", "--formats", "html"]
    assert run([*arguments, "--against", str(old)], out, err) == 0
    assert "Bars mark changes" in (tmp_path / "out" / "channel-lists" / "plant.html").read_text("utf-8")
    assert run(["issue", str(new), "--out", str(tmp_path / "out"), "--documents", "revision-summary"], out, err) == 2
    assert "needs --against" in err.getvalue()


def test_without_an_earlier_revision_no_document_bears_a_bar(tmp_path: Path) -> None:
    issue(read(write(tmp_path / "plant")), tmp_path / "out", kinds=["loop-sheet", "tuning-schedule"], formats=["html"])
    for file in (tmp_path / "out").rglob("*.html"):
        html = file.read_text("utf-8")
        assert not _Classes(html).found
        assert "bars-note" not in html
