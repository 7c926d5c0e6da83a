"""How the commands read a register."""

from __future__ import annotations

import argparse
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

from loopdoc.cli.terminal import EXIT_CLEAN, EXIT_UNREADABLE, colour

if TYPE_CHECKING:
    from loopdoc.documents.basis import Basis
    from loopdoc.register.load import Loaded


def add_register(parser: argparse.ArgumentParser) -> None:
    """The register as the command's first argument."""
    parser.add_argument("register", type=Path, metavar="REGISTER", help="folder that holds register.yaml")


def load_register(path: Path, stderr: TextIO) -> Loaded | None:
    """The register; None, with each reason told, where the text cannot be read as one."""
    from loopdoc.exchange.findings import unreadable_text
    from loopdoc.register.load import Unreadable, load

    loaded = load(path)
    if isinstance(loaded, Unreadable):
        stderr.write(unreadable_text(loaded.faults, loaded.sources, colour=colour(stderr)))
        return None
    return loaded


def load_at(path: Path, named: str, stderr: TextIO) -> Loaded | None:
    """The register at a revision or in another folder; None, with each reason told, where there is none."""
    from loopdoc.exchange.escaping import for_terminal
    from loopdoc.exchange.findings import unreadable_text
    from loopdoc.register.load import Unreadable
    from loopdoc.revisions.earlier import at_revision
    from loopdoc.revisions.git import GitError

    if not named:
        return load_register(path, stderr)
    try:
        loaded = at_revision(path, named)
    except GitError as error:
        stderr.write(for_terminal(f"loopdoc: {error}\n"))
        return None
    if isinstance(loaded, Unreadable):
        stderr.write(for_terminal(f"loopdoc: {named} cannot be read as a register\n"))
        stderr.write(unreadable_text(loaded.faults, loaded.sources, colour=colour(stderr)))
        return None
    return loaded


def load_basis(path: Path, stderr: TextIO, *, with_records: bool = False, against: str = "") -> Basis | None:
    """The register read, resolved, checked and calculated; None, with each reason told, where it cannot be read.

    With the site's own files beside it, the results of loop checks where they are asked for, and the register at an
    earlier revision where one is named.
    """
    loaded = load_register(path, stderr)
    earlier = load_at(path, against, stderr) if loaded is not None and against else None
    if loaded is None or (against and earlier is None):
        return None
    from loopdoc.documents.basis import basis_of
    from loopdoc.documents.handover.house import HouseError, read_house
    from loopdoc.exchange.record_report import faults_text
    from loopdoc.register.records import load_records

    folder = path.parent if path.is_file() else path
    try:
        house = read_house(folder)
    except HouseError as error:
        stderr.write(f"loopdoc: {error}\n")
        return None
    records = load_records(folder) if with_records else {}
    if isinstance(records, tuple):
        stderr.write(faults_text(records))
        return None
    before = basis_of(earlier, records, house=house) if earlier else None
    return basis_of(loaded, records, against=before, house=house)


def unknown_rule(ids: Sequence[str], stderr: TextIO) -> int:
    """Tell the first id that is no rule, and the rule that may be meant; `EXIT_CLEAN` where there is none."""
    from difflib import get_close_matches

    from loopdoc.rules.catalogue import RULES

    known = [rule.id for rule in RULES]
    for name in ids:
        if name not in known:
            near = get_close_matches(name, known, 1)
            hint = f"did you mean {near[0]}?" if near else "`loopdoc rules` lists them"
            stderr.write(f"loopdoc: there is no rule `{name}`; {hint}\n")
            return EXIT_UNREADABLE
    return EXIT_CLEAN
