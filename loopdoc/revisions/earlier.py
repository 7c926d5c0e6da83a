"""A register at another revision: as git keeps it, or in another folder."""

from __future__ import annotations

from pathlib import Path

from loopdoc.register.files import HeldFiles, is_register, located
from loopdoc.register.load import Loaded, Unreadable, load, load_files
from loopdoc.revisions.git import register_at


def at_revision(path: Path, named: str) -> Loaded | Unreadable:
    """The register at ``path`` as it is at what ``named`` names: a folder with a register, or else a git revision.

    Raises
    ------
    GitError
        Neither is there.
    """
    if named and "\0" not in named and is_register(Path(named)):
        return load(Path(named))
    return load_files(HeldFiles(register_at(path, named)), located(path)[1])
