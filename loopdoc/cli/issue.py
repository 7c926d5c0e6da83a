"""`loopdoc issue`."""

from __future__ import annotations

import argparse
import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any, TextIO

from loopdoc.cli.reading import add_register, load_basis
from loopdoc.cli.terminal import EXIT_CLEAN, EXIT_FOUND, EXIT_UNREADABLE, progress_on

SUMMARY = "issue the documents of a register"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc issue` takes."""
    add_register(parser)
    where = parser.add_mutually_exclusive_group(required=True)
    where.add_argument("--out", type=Path, metavar="FOLDER", help="where the documents are written")
    where.add_argument(
        "--package",
        type=Path,
        metavar="FOLDER",
        help="one folder to hand over, and one archive FOLDER.zip: documents, index with fingerprints, register",
    )
    parser.add_argument(
        "--documents",
        nargs="+",
        metavar="KIND",
        default=[],
        help="narrative, loop-sheet, response, check-record, alarm-schedule, cause-and-effect, tuning-schedule, "
        "failure-effects, channel-list, instrument-list, check-report, and with --against revision-summary "
        "(default: all)",
    )
    parser.add_argument(
        "--against",
        default="",
        metavar="OLD",
        help="bars beside what differs from a git revision or from another folder's register, and a revision summary",
    )
    parser.add_argument("--formats", default="pdf,html", metavar="LIST", help="pdf, html or pdf,html (default)")
    parser.add_argument(
        "--language",
        choices=("en", "de"),
        help="language of the narratives and loop sheets; other kinds are in English (default: that of the register)",
    )
    parser.add_argument(
        "--sources",
        action="store_true",
        help="end each narrative with an appendix: every value it states, with its line of the register or its "
        "calculation",
    )
    parser.add_argument(
        "--jobs",
        type=int,
        default=os.cpu_count() or 1,
        metavar="N",
        help="processes at work (default: one a processor)",
    )


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Write the documents of a register; returns the exit code."""
    from loopdoc.documents.handover.house import HouseError
    from loopdoc.documents.handover.issue import FORMATS, KINDS, issue
    from loopdoc.documents.language import LANGUAGES
    from loopdoc.documents.pdf import PdfError
    from loopdoc.exchange.findings import summary

    kinds = arguments.documents or list(KINDS)
    formats = [name.strip() for name in arguments.formats.split(",")]
    for what, given, known in (("document kind", kinds, tuple(KINDS)), ("format", formats, FORMATS)):
        strange = [name for name in given if name not in known]
        if strange:
            stderr.write(f"loopdoc: there is no {what} `{strange[0]}`; write {' or '.join(known)}\n")
            return EXIT_UNREADABLE
    if arguments.jobs < 1:
        stderr.write("loopdoc: --jobs takes 1 or more\n")
        return EXIT_UNREADABLE
    if "revision-summary" in arguments.documents and not arguments.against:
        stderr.write("loopdoc: a revision summary needs --against OLD\n")
        return EXIT_UNREADABLE
    basis = load_basis(arguments.register, stderr, with_records="check-record" in kinds, against=arguments.against)
    if basis is None:
        return EXIT_UNREADABLE
    if arguments.language:
        basis = basis.in_language(LANGUAGES[arguments.language])
    if arguments.sources:
        basis = basis.with_appendix_of_sources()
    status = EXIT_CLEAN
    progress = progress_on(stderr)

    def write(formats: Sequence[str]) -> str:
        settings: Any = {"kinds": kinds, "formats": formats, "jobs": arguments.jobs, "progress": progress}
        if arguments.package:
            from loopdoc.documents.handover.package import package

            made = package(basis, arguments.package, **settings)
            return f"{_documents(made.documents)} in {made.folder} and {made.archive} ({made.files} files).\n"
        issued = issue(basis, arguments.out, **settings)
        return f"{_documents(issued.documents)} in {issued.folder} ({len(issued.files)} files).\n"

    try:
        told = write(formats)
    except (HouseError, PdfError) as error:
        stderr.write(f"loopdoc: {error}\n")
        if isinstance(error, HouseError) or "html" not in formats or arguments.package:
            return EXIT_UNREADABLE
        status = EXIT_FOUND
        told = write(["html"])
    stdout.write(told)
    stdout.write(f"Check of the register: {summary(basis.result)}\n")
    return status


def _documents(count: int) -> str:
    return "1 document" if count == 1 else f"{count} documents"
