"""What a change of the register brings: the findings that an earlier revision had not."""

from __future__ import annotations

import datetime
from collections.abc import Collection
from dataclasses import replace
from pathlib import Path

from loopdoc.engineering.pairing import Plant
from loopdoc.register.files import HeldFiles, located
from loopdoc.register.load import Unreadable, load_files
from loopdoc.revisions.git import NoRegister, register_at
from loopdoc.rules.baseline import new_since
from loopdoc.rules.check import check
from loopdoc.rules.finding import Baseline, CheckResult


def since(
    result: CheckResult, path: Path, revision: str, *, only: Collection[str], today: datetime.date | None = None
) -> CheckResult:
    """The findings of a check that the register at an earlier revision had not, by the same rules and on the same day.

    Where that revision has no register that can be read, all of them are new, and that is said. Raises GitError.
    """
    try:
        files = register_at(path, revision)
    except NoRegister as error:
        return replace(result, baseline=Baseline(revision, 0, f"{error}, so that every finding counts as new."))
    loaded = load_files(HeldFiles(files), located(path)[1])
    if isinstance(loaded, Unreadable):
        first = loaded.faults[0]
        why = f"the revision {revision} cannot be read as a register ({first.place}: {first.message})"
        return replace(result, baseline=Baseline(revision, 0, f"{why}, so that every finding counts as new."))
    return new_since(result, check(Plant(loaded.register), loaded.faults, only=only, today=today), revision)
