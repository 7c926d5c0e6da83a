"""`loopdoc attest`."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import TextIO

from loopdoc.cli.reading import load_basis
from loopdoc.cli.terminal import EXIT_CLEAN, EXIT_FOUND, EXIT_UNREADABLE

SUMMARY = "tell whether issued PDF files are what the register says"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc attest` takes."""
    parser.add_argument(
        "paths",
        type=Path,
        nargs="+",
        metavar="FILE.pdf",
        help="issued files, folders of them, or packages (folder or .zip); and a register, to compare with",
    )
    parser.add_argument("--format", choices=("text", "json"), default="text", help="form of the output (default: text)")


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Tell of each file whether it is whole and what the register says; returns the exit code."""
    from loopdoc.documents.handover.attest import Attestation, NotIssued
    from loopdoc.documents.handover.attest_package import is_package, open_package, verify
    from loopdoc.documents.handover.attest_report import packages_text, report_json, report_text
    from loopdoc.documents.handover.house import HouseError
    from loopdoc.documents.pdf import PdfError
    from loopdoc.exchange.escaping import for_terminal
    from loopdoc.register.files import is_register

    registers = [path for path in arguments.paths if is_register(path)]
    packages = {str(path): open_package(path) for path in arguments.paths if is_package(path)}
    files: list[tuple[str, Callable[[], bytes]]] = [
        (str(file), file.read_bytes)
        for path in arguments.paths
        if path not in registers and str(path) not in packages
        for file in (sorted(path.rglob("*.pdf")) if path.is_dir() else (path,))
    ]
    for path, opened in packages.items():
        if not isinstance(opened, NotIssued):
            inside = (name for name in opened.names if name.endswith(".pdf"))
            files += [(f"{path}/{name}", partial(opened.read, name)) for name in inside]
    if len(registers) > 1 or not (files or packages):
        stderr.write("loopdoc: name one file or more, packages or folders with PDF files, and at most one register\n")
        return EXIT_UNREADABLE
    against = load_basis(registers[0], stderr, with_records=True) if registers else None
    if registers and against is None:
        return EXIT_UNREADABLE
    verified = [
        (path, opened if isinstance(opened, NotIssued) else verify(opened)) for path, opened in packages.items()
    ]
    attestation = Attestation(against)
    try:
        answered = [(name, attestation.attest(read())) for name, read in files]
    except (HouseError, PdfError) as error:
        stderr.write(f"loopdoc: {error}\n")
        return EXIT_UNREADABLE
    named = str(registers[0]) if registers else ""
    if arguments.format == "json":
        stdout.write(report_json(answered, against=named, verified=verified))
    else:
        stdout.write(for_terminal(packages_text(verified) + report_text(answered, against=named)))
    if any(isinstance(found, NotIssued) for _, found in (*verified, *answered)):
        return EXIT_UNREADABLE
    doubted = any(not isinstance(found, NotIssued) and found.doubted for _, found in (*verified, *answered))
    return EXIT_FOUND if doubted else EXIT_CLEAN
