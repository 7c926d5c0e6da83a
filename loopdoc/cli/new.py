"""`loopdoc new`."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TextIO

from loopdoc.cli.terminal import EXIT_CLEAN, EXIT_UNREADABLE

SUMMARY = "write a small register to start from"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc new` takes."""
    parser.add_argument("folder", type=Path, metavar="FOLDER", help="a folder that does not exist yet, or is empty")


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Write a register to start from; returns the exit code."""
    from loopdoc.register.starter import starter_files

    folder: Path = arguments.folder
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        stderr.write(f"loopdoc: {folder} is there already and not an empty folder; name another\n")
        return EXIT_UNREADABLE
    for name, content in starter_files().items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(content)
        stdout.write(f"wrote {path}\n")
    stdout.write(f"Next: loopdoc check {folder}\n")
    return EXIT_CLEAN
