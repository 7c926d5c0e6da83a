"""The site's own logo, words and templates: in their place, within limits, and enclosed so that attest knows them."""

from __future__ import annotations

import io
from pathlib import Path

import pypdf
import pytest

from loopdoc.cli import run
from loopdoc.documents import bounded
from loopdoc.documents.handover.attest import Attestation, Attested
from loopdoc.documents.handover.house import HouseError, house_of
from loopdoc.documents.rendering import template_text
from loopdoc.documents.titleblock import CAUTIONS
from loopdoc.register.starter import starter_files

LOGO = b'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 100 20"><rect width="100" height="20"/></svg>'


def plant(folder: Path, **house: bytes) -> Path:
    for name, content in starter_files().items():
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_bytes(content)
    (folder / "house").mkdir()
    for name, content in house.items():
        (folder / "house" / name.replace("_", ".", 1)).write_bytes(content)
    return folder


def issue(register: Path, out: Path, *more: str) -> tuple[int, str]:
    err = io.StringIO()
    arguments = ["issue", str(register), "--out", str(out), "--documents", "channel-list", "--jobs", "1", *more]
    return run(arguments, io.StringIO(), err), err.getvalue()


def test_logo_and_words_stand_in_the_title_block_and_the_standing_cautions_stay(tmp_path: Path) -> None:
    texts = b"owner: Example Works\ncautions: Site procedure SP-12 applies.\n"
    register = plant(tmp_path / "plant", logo_svg=LOGO, texts_yaml=texts)
    assert issue(register, tmp_path / "out") == (0, "")
    page = (tmp_path / "out" / "channel-lists" / "plant.html").read_text(encoding="utf-8")
    assert '<img class="logo" src="data:image/svg+xml;base64,' in page
    (file,) = (tmp_path / "out").rglob("*.pdf")
    text = " ".join(pypdf.PdfReader(file).pages[0].extract_text().split())
    assert "Example Works" in text
    assert " ".join((CAUTIONS, "Site procedure SP-12 applies.")) in text


def test_attest_makes_the_pages_again_with_what_the_site_put_in(tmp_path: Path) -> None:
    own = template_text("schedule.html").replace("<h1>", "<h1>Works standard 7: ").encode()
    css = template_text("style.css").replace("--ink: #111", "--ink: #222").encode()
    register = plant(tmp_path / "plant", schedule_html=own, style_css=css, logo_svg=LOGO)
    assert issue(register, tmp_path / "out", "--formats", "pdf") == (0, "")
    (file,) = (tmp_path / "out").rglob("*.pdf")
    assert "Works standard 7: Channel list" in pypdf.PdfReader(file).pages[0].extract_text()
    names = set(pypdf.PdfReader(file).attachments)
    assert {"house/schedule.html", "house/style.css", "house/logo.svg"} <= names
    found = Attestation().attest(file.read_bytes())
    assert isinstance(found, Attested)
    assert (found.register_whole.value, found.pages_unaltered.value) == ("yes", "yes")
    # Another template beside the register: the document is no longer what would be issued.
    out = io.StringIO()
    assert run(["attest", str(file), str(register)], out, io.StringIO()) == 0
    (register / "house" / "schedule.html").write_bytes(own.replace(b"standard 7", b"standard 8"))
    assert run(["attest", str(file), str(register)], out, io.StringIO()) == 1


@pytest.mark.parametrize(
    ("template", "told"),
    [
        ("one\n{{ nothing.at }}", "house/schedule.html, line 2: 'nothing' is undefined"),
        ("one\n\n{% for a in %}", "house/schedule.html, line 3: "),
        ("{{ ''.__class__.__mro__ }}", "house/schedule.html, line 1: access to attribute '__class__'"),
        ("{% include 'missing.html' %}", "house/schedule.html, line 1: "),
        ("{{ 'x' * 10**9 }}", "`schedule.html` takes more than"),
        ("{{ '%1000000000d' % 1 }}", "`schedule.html` takes more than"),
        ("{% for a in range(99999) %}{% for b in range(99999) %}{% endfor %}{% endfor %}", "takes more than 1 s"),
        ("{% for a in range(300) %}{{ 'x' * 100000 }}{% endfor %}", "a page of more than"),
    ],
)
def test_a_faulty_template_is_told_by_line_and_a_bomb_is_stopped(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, template: str, told: str
) -> None:
    monkeypatch.setattr(bounded, "MAX_SECONDS", 1)
    register = plant(tmp_path / "plant", schedule_html=template.encode())
    status, error = issue(register, tmp_path / "out", "--formats", "html")
    assert status == 2
    assert told in error
    assert len(error.splitlines()) == 1


@pytest.mark.parametrize(
    ("name", "content", "told"),
    [
        ("loopsheet.html", b"x", "has no name of ours"),
        ("texts.yaml", b"caution: x", "line 1: there is no text `caution`"),
        ("texts.yaml", b"owner: [a]", "line 1: `owner` is text"),
        ("texts.yaml", b"owner: 'a", "house/texts.yaml, line 1"),
        ("logo.png", b"\x89PNG\r\n\x1a\n" + bytes(16), "is no PNG image"),
        ("logo.png", b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR\0\1\0\0\0\1\0\0", "at most 4000 by 4000"),
        ("logo.svg", b"<svg", "is no SVG image"),
        ("logo.svg", b"<html/>", "its root is `html`"),
        ("logo.svg", LOGO.replace(b"<rect", b"\n<script>x</script><rect"), "line 2: holds an active element"),
        ("logo.svg", LOGO.replace(b"<rect", b"<rect onload='x()'"), "an event handler"),
        ("logo.svg", LOGO.replace(b"<rect", b"<image href='http://x/y.png'/><rect"), "outside of it"),
        ("logo.svg", LOGO.replace(b"<rect", b"<rect fill='url(file:///x)'"), "outside of it"),
        ("logo.svg", b"<!DOCTYPE svg [<!ENTITY a 'b'>]>" + LOGO, "a document type"),
        ("style.css", b"p { color: red }\n@import 'x.css';", "line 2: reads something outside of it"),
        ("style.css", b"p { background: url(http://x/y) }", "line 1: reads something outside of it"),
        ("base.html", b"a\n\xff", "line 2: this is not UTF-8 text"),
    ],
)
def test_what_cannot_be_used_is_told(name: str, content: bytes, told: str) -> None:
    with pytest.raises(HouseError) as caught:
        house_of({name: content})
    assert told in str(caught.value)


def test_a_link_out_of_the_register_is_refused(tmp_path: Path) -> None:
    register = plant(tmp_path / "plant")
    (register / "house" / "base.html").symlink_to("/etc/hostname")
    status, error = issue(register, tmp_path / "out", "--formats", "html")
    assert (status, "is no file of this folder" in error) == (2, True)
