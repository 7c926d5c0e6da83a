"""What the documents say of an interlock's bypass."""

from __future__ import annotations

from pathlib import Path

import pytest

from loopdoc.documents.narrative.protection_story import reset
from loopdoc.register.load import Loaded, load

INTERLOCK = """
format: 1
interlocks:
  IS-2001: {unit: "20", layer: safety, initiators: {PT-2021: {trips: above 1 barg}}, actions: {FV-2011: closed},
            bypass: %s}
"""


@pytest.mark.parametrize(
    ("written", "told"),
    [
        (
            "{permitted: for the test of one transmitter at a time, approved_by: Shift supervisor, limit: 8 h}",
            "A bypass is permitted for the test of one transmitter at a time, for 8 h at most; "
            "each one is approved by: Shift supervisor.",
        ),
        ("{permitted: for tests}", "A bypass is permitted for tests, without a limit in time."),
        ("{permitted: no}", "No bypass is permitted."),
    ],
)
def test_a_bypass_is_told_with_its_limit_in_time(tmp_path: Path, written: str, told: str) -> None:
    assert story(tmp_path, written).endswith(told)


def test_of_a_bypass_on_hold_nothing_is_told(tmp_path: Path) -> None:
    assert "bypass" not in story(tmp_path, "{hold: operations}")


def story(folder: Path, bypass: str) -> str:
    (folder / "register.yaml").write_text(INTERLOCK % bypass, encoding="utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    return reset(loaded.register.interlocks["IS-2001"]).replace("\u00a0", " ")
