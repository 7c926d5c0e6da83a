"""Check report, revision summary and the fields of the title block, against what the register and its check say."""

from __future__ import annotations

from dataclasses import fields
from pathlib import Path

import pytest

from loopdoc.documents.basis import Basis, Page, basis_of
from loopdoc.documents.handover.issue import KINDS
from loopdoc.documents.page_fit import title_table_height
from loopdoc.documents.rendering import render
from loopdoc.documents.revision.check_report import check_reports
from loopdoc.documents.revision.revision_summary import revision_summaries
from loopdoc.documents.schedules.schedule import Schedule
from loopdoc.documents.wording import plain
from loopdoc.register.load import Loaded, load
from loopdoc.rules.policy import Limits

ROOT = Path(__file__).parent.parent
BASE = (Path(__file__).parent / "rules" / "base-register.yaml").read_text("utf-8")
QUICK = {kind: KINDS[kind] for kind in ("loop-sheet", "tuning-schedule", "channel-list")}


def basis(folder: Path, *changes: tuple[str, str], against: Basis | None = None) -> Basis:
    text = BASE
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    folder.mkdir(parents=True)
    (folder / "register.yaml").write_text(text, "utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    return basis_of(loaded, against=against)


def tables(page: Page) -> dict[str, list[list[str]]]:
    """Cells of each table by its title."""
    found = {}
    for schedule in page.view["schedules"]:
        assert isinstance(schedule, Schedule)
        found[schedule.title] = [
            [" ".join(plain(line) for line in cell.lines).replace("\u00a0", " ") for cell in row.cells]
            for group in schedule.groups
            for row in group.rows
        ]
    return found


def html(page: Page) -> str:
    return render(page.template, document=page.document, stylesheet="", **page.view)


# ---------------------------------------------------------------- check report


@pytest.fixture(scope="module")
def plant() -> Basis:
    loaded = load(ROOT / "examples" / "tarn-hollow")
    assert isinstance(loaded, Loaded)
    return basis_of(loaded)


def test_the_report_has_a_row_for_each_finding_deviation_rule_and_threshold(plant: Basis) -> None:
    (page,) = check_reports(plant)
    found = tables(page)
    told = [one for one in plant.result.findings if one.rule != "hold-open"]
    assert sorted((row[0], row[1]) for row in found["Open findings"]) == sorted((one.tag, one.rule) for one in told)
    assert sum(len(row[1].split(", ")) for row in found["Values on hold"]) == len(plant.result.findings) - len(told)
    assert len(found["Findings accepted by deviation"]) == len(plant.result.accepted)
    assert all(all(cell and cell != "–" for cell in row) for row in found["Findings accepted by deviation"])
    loud, quiet = found["Checks that found something, or could not all be made"], found["Checks without a finding"]
    assert sorted(row[0] for row in (*loud, *quiet)) == sorted(plant.result.coverage)
    assert sum(int(row[3]) for row in (*loud, *quiet)) == plant.result.checked
    assert sum(int(row[4]) for row in loud) == plant.result.not_checked
    assert sum(int(row[5]) for row in loud) == len(plant.result.findings) + len(plant.result.accepted)
    assert all((row[6] != "–") == (row[4] != "0") for row in loud)
    assert len(found["Thresholds in force"]) == len(fields(Limits))
    assert "Findings reviewed by" in html(page)


def test_a_threshold_of_the_register_stands_first_with_its_default(tmp_path: Path) -> None:
    (page,) = check_reports(basis(tmp_path / "plant", ("loops:\n", "policy: {gain_margin: 2.5}\nloops:\n")))
    first = tables(page)["Thresholds in force"][0]
    assert first[:3] == ["gain margin", "2.5", "1.7"]


# ---------------------------------------------------------------- revision summary


def test_without_an_earlier_revision_there_is_no_summary(plant: Basis) -> None:
    assert list(revision_summaries(plant, QUICK)) == []


def test_the_summary_tells_changes_effects_and_documents(tmp_path: Path) -> None:
    old = basis(tmp_path / "old")
    changes = (("gain: 1.8\n", "gain: 0.9\n"), ("stroke_time: 6 s", "stroke_time: 0.1 min"))
    (page,) = revision_summaries(basis(tmp_path / "new", *changes, against=old), QUICK)
    found = tables(page)
    rows = {(row[0], row[1]): row[2:4] for row in found["Changes, the farthest reaching first"]}
    assert rows["TIC-2014", "controller / gain"] == ["1.8", "0.9"]
    assert rows["FV-2011", "stroke time"] == ["6 s", "0.1 min (the same value written otherwise)"]
    assert [row[0] for row in found["Margins"]] == ["TIC-2014"]
    affected = {row[2].split()[0]: row[4] for row in found["Documents affected"] if row[1] == "Loop sheet"}
    assert "differ" in affected["TIC-2014"]
    story = " ".join(plain(run) for run in page.view["lead"]).replace("\u00a0", " ")
    assert "changes one loop (TIC-2014)" in story
    assert "Only written otherwise: FV-2011." in story
    assert "Change reviewed by" in html(page)


def test_two_equal_registers_make_a_summary_that_says_so(tmp_path: Path) -> None:
    old = basis(tmp_path / "old")
    (page,) = revision_summaries(basis(tmp_path / "new", against=old), QUICK)
    assert tables(page) == {}
    assert "says the same as revision" in plain(page.view["lead"][0])


# ---------------------------------------------------------------- title block


FURTHER = """\
site: {name: Plant, owner: Owner, department: Controls, technical_reference: A. Meyer,
       classification: Internal}"""


def test_fields_of_the_title_block_stand_where_the_register_gives_them(tmp_path: Path) -> None:
    head, _, rest = BASE.partition("site:")
    _, _, rest = rest.partition("\n")
    given = basis(tmp_path / "given")
    bare = html(next(KINDS["loop-sheet"](given)))
    for label in ("Responsible department", "Technical reference", "Classification", "Distribution"):
        assert label not in bare
    folder = tmp_path / "further"
    folder.mkdir()
    text = f"{head}{FURTHER}\n{rest}".replace("revision:\n", "revision:\n  distribution: [Operations, Archive]\n", 1)
    (folder / "register.yaml").write_text(text, "utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    assert not loaded.faults
    page = next(KINDS["loop-sheet"](basis_of(loaded)))
    for label, value in (("Responsible department", "Controls"), ("Technical reference", "A. Meyer"),
                         ("Classification", "Internal"),
                         ("Distribution", "Operations, Archive")):  # fmt: skip
        assert f'<span class="label">{label}</span>{value}</td>' in html(page)
    # Two rows more, of a label of 6.6 pt and a line of 7.6 pt by 1.15 with 1 mm of padding.
    without = next(KINDS["loop-sheet"](given)).document
    assert title_table_height(page.document) > title_table_height(without) + 2 * (6.6 + 7.6 * 1.15)
