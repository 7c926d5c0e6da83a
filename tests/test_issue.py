"""Issued documents: every page as text, the same bytes twice, nothing read from outside, nothing half written."""

from __future__ import annotations

import re
from collections.abc import Mapping
from html.parser import HTMLParser
from pathlib import Path

import pypdf
import pytest

from loopdoc.documents import pdf, titleblock
from loopdoc.documents.basis import Basis
from loopdoc.documents.handover.issue import issue, write_whole
from loopdoc.documents.magnitudes import difference_unit
from loopdoc.documents.titleblock import CAUTIONS, fingerprint
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.pairing import Plant
from loopdoc.register.load import Loaded, load
from loopdoc.register.quantity import parse_range
from loopdoc.register.starter import starter_files
from loopdoc.rules.check import check


def basis_of(folder: Path) -> Basis:
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    plant = Plant(loaded.register)
    return Basis(plant, check(plant, loaded.faults), loaded.sources, Dynamics(plant))


def write_starter(folder: Path, **changes: str) -> Path:
    for name, content in starter_files().items():
        text = content.decode()
        for old, new in changes.items():
            text = text.replace(old, new)
        file = folder / name
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_text(text, encoding="utf-8")
    return folder


def text_of(file: Path) -> str:
    return "\n".join(page.extract_text() for page in pypdf.PdfReader(file).pages)


@pytest.fixture(scope="module")
def issued(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = write_starter(tmp_path_factory.mktemp("plant"))
    out = tmp_path_factory.mktemp("issued")
    issue(basis_of(folder), out)
    return out


def test_the_register_is_read_once_for_all_title_blocks(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Its fingerprint takes longer the more loops there are, and there are more documents then too."""
    read = []

    def counted(sources: Mapping[str, bytes]) -> str:
        read.append(sources)
        return fingerprint(sources)

    monkeypatch.setattr(titleblock, "fingerprint", counted)
    basis = basis_of(write_starter(tmp_path))
    blocks = [
        basis.document(kind=kind, code="X", title="", supplementary_title="", unit="10", serial="1")
        for kind in ("Loop sheet", "Alarm and trip schedule")
    ]
    assert len(read) == 1
    assert [block.kind for block in blocks] == ["Loop sheet", "Alarm and trip schedule"]


def test_every_kind_is_issued_in_both_formats(issued: Path) -> None:
    names = {path.relative_to(issued).as_posix() for path in issued.rglob("*.*")}
    for stem in ("narratives/unit-10", "loop-sheets/LIC-1001", "loop-sheets/FIC-1002", "responses/LIC-1001"):
        assert {f"{stem}.pdf", f"{stem}.html"} <= names
    assert {"index.html", "style.css"} <= names


def test_every_page_carries_title_block_cautions_and_page_number(issued: Path) -> None:
    files = sorted(issued.rglob("*.pdf"))
    assert {file.parent.name for file in files} == {
        "narratives", "loop-sheets", "responses", "check-records", "alarm-schedules", "cause-and-effect",
        "tuning-schedules", "failure-effects", "channel-lists", "instrument-lists", "check-report",
    }  # fmt: skip
    for file in files:
        pages = pypdf.PdfReader(file).pages
        for number, page in enumerate(pages, 1):
            text = " ".join(page.extract_text().split())
            assert f"{number} of {len(pages)}" in text, file
            assert "New plant" in text, file
            assert "issued for review" in text, file
            assert CAUTIONS[:60] in text, file
            assert re.search(r"\b[0-9a-f]{12}\b", text), file
            assert "DRAFT" not in text, file


def test_documents_say_neither_safe_nor_compliant_nor_none(issued: Path) -> None:
    for file in issued.rglob("*.pdf"):
        text = text_of(file)
        for word in ("[Cc]ompliant", "None(?! of|:)", "nan", "[Uu]ndefined"):  # `none` is what a hazard may be
            # A rule may be called `bad-measurement-undefined`.
            assert not re.search(rf"(?<![\w-]){word}\b", text), (file, word)
        assert not re.search(r"\bsafe\b(?!\s+position)", text, re.IGNORECASE), file


def test_the_same_register_gives_the_same_bytes(issued: Path, tmp_path: Path) -> None:
    """In another process and from another folder: `jobs=2` renders in workers."""
    folder = write_starter(tmp_path / "elsewhere")
    issue(basis_of(folder), tmp_path / "again", jobs=2)
    for file in sorted(issued.rglob("*.*")):
        again = tmp_path / "again" / file.relative_to(issued)
        assert file.read_bytes() == again.read_bytes(), file


class _Links(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.targets: list[str] = []
        self.anchors: set[str] = set()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        for name, value in attrs:
            if name in ("href", "src") and value and tag != "use":
                self.targets.append(value)
            if name == "id" and value:
                self.anchors.add(value)


def links_of(file: Path) -> _Links:
    parser = _Links()
    parser.feed(file.read_text(encoding="utf-8"))
    return parser


def test_every_link_of_the_pages_leads_somewhere(issued: Path) -> None:
    for file in issued.rglob("*.html"):
        for target in links_of(file).targets:
            name, _, anchor = target.partition("#")
            there = (file.parent / name).resolve() if name else file
            assert there.exists(), (file.name, target)
            if anchor:
                assert anchor in links_of(there).anchors, (file.name, target)


def test_errors_make_drafts(tmp_path: Path) -> None:
    folder = write_starter(tmp_path / "plant", **{"action: direct": "action: reverse"})
    issue(basis_of(folder), tmp_path / "out", kinds=["loop-sheet"])
    text = text_of(tmp_path / "out" / "loop-sheets" / "LIC-1001.pdf")
    assert re.search(r"DRAFT: \d errors? open", text)
    assert "action-wrong" in text


def test_holds_make_drafts_only_where_the_status_does_not_allow_them(tmp_path: Path) -> None:
    hold = {"stroke_time: 5 s": "stroke_time: {hold: vendor data}"}
    for status, is_draft in (("issued for review", False), ("issued for construction", True)):
        folder = write_starter(tmp_path / status, **hold, **{"status: issued for review": f"status: {status}"})
        issue(basis_of(folder), tmp_path / f"{status} out", kinds=["loop-sheet"], formats=["pdf"])
        text = text_of(tmp_path / f"{status} out" / "loop-sheets" / "FIC-1002.pdf")
        assert ("DRAFT" in text) is is_draft
        assert "HOLD" in text
        assert "vendor data" in text


@pytest.mark.parametrize(
    "markup",
    [
        '<img src="file:///etc/hostname">',
        '<link rel="attachment" href="file:///etc/hostname">',
        '<p style="background: url(file:///etc/hostname)">x</p>',
        '<link rel="stylesheet" href="http://127.0.0.1:9/x.css">',
    ],
)
def test_a_page_reads_nothing_but_the_package(markup: str) -> None:
    with pytest.raises(pdf.PdfError, match="could not be set"):
        pdf.to_pdf(f"<!doctype html><html lang=en><head><title>t</title>{markup}</head><body>{markup}</body></html>")


def test_text_of_the_register_is_no_markup(tmp_path: Path) -> None:
    attack = "<script>alert(1)</script>{{ 7*7 }}"
    folder = write_starter(tmp_path / "plant", **{"service: Feed tank level\n": f"service: '{attack}'\n"})
    issue(basis_of(folder), tmp_path / "out", formats=["html"])
    for file in (tmp_path / "out").rglob("*.html"):
        content = file.read_text(encoding="utf-8")
        assert "<script>alert" not in content, file
    sheet = (tmp_path / "out" / "loop-sheets" / "LIC-1001.html").read_text(encoding="utf-8")
    assert "&lt;script&gt;" in sheet
    assert "{{ 7*7 }}" in sheet


def test_the_fingerprint_follows_content_and_names_but_not_line_ends() -> None:
    one = fingerprint({"a.yaml": b"x: 1\n", "b.yaml": b"y: 2\n"})
    assert one == fingerprint({"b.yaml": b"y: 2\r\n", "a.yaml": b"x: 1\r\n"})
    assert one != fingerprint({"a.yaml": b"x: 1\ny: 2\n", "b.yaml": b""})
    assert one != fingerprint({"a.yaml": b"x: 1\n", "c.yaml": b"y: 2\n"})


def test_a_failed_write_leaves_what_was_there(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file = tmp_path / "page.html"
    write_whole(file, b"old")

    def full(descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(OSError, match="No space"):
        write_whole(file, b"new")
    assert file.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [file]


@pytest.mark.parametrize(
    ("written", "unit"),
    [("0 to 1 barg", "bar"), ("0 to 300 kPaa", "kPa"), ("60 to 120 degC", "K"), ("0 to 15 t/h", "t/h")],
)
def test_a_change_of_a_measurement_has_the_unit_of_a_difference(written: str, unit: str) -> None:
    assert difference_unit(parse_range(written)) == unit
