"""`loopdoc compare`."""

from __future__ import annotations

import argparse
from dataclasses import replace
from typing import TextIO

from loopdoc.cli.reading import add_register, load_at
from loopdoc.cli.terminal import EXIT_CLEAN, EXIT_FOUND, EXIT_UNREADABLE

SUMMARY = "tell what changed between two revisions, and what that does to the plant"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc compare` takes."""
    add_register(parser)
    parser.add_argument("old", metavar="OLD", help="a git revision, or a folder that holds a register")
    parser.add_argument(
        "new", metavar="NEW", nargs="?", default="", help="another of them (default: the register as it stands)"
    )
    parser.add_argument(
        "--format", choices=("text", "json", "markdown"), default="text", help="form of the output (default: text)"
    )
    parser.add_argument(
        "--documents",
        action="store_true",
        help="tell also which documents change; both sides are built for that, which takes its time",
    )


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Tell what differs between two revisions; returns the exit code."""
    from loopdoc.documents.basis import basis_of
    from loopdoc.exchange.comparison import comparison_json, comparison_markdown, comparison_text
    from loopdoc.revisions.compare import compared

    sides = []
    for named in (arguments.old, arguments.new):
        loaded = load_at(arguments.register, named, stderr)
        if loaded is None:
            return EXIT_UNREADABLE
        sides.append(loaded)
    old = basis_of(sides[0])
    new = basis_of(sides[1], against=old)
    found = compared(old, new, old_named=arguments.old, new_named=arguments.new or str(arguments.register))
    if arguments.documents:
        from loopdoc.documents.handover.issue import KINDS
        from loopdoc.documents.revision.affected import documents_between

        found = replace(found, documents=documents_between(old, new, KINDS))
    told = {"json": comparison_json, "markdown": comparison_markdown}.get(arguments.format, comparison_text)
    stdout.write(told(found))
    return EXIT_FOUND if found.differs else EXIT_CLEAN
