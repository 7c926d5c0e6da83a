"""`loopdoc schema`."""

from __future__ import annotations

import argparse
from typing import TextIO

from loopdoc.cli.terminal import EXIT_CLEAN

SUMMARY = "print the JSON Schema of the register format"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc schema` takes."""
    which = parser.add_mutually_exclusive_group()
    which.add_argument(
        "--included", action="store_true", help="that of the files which register.yaml includes, not its own"
    )
    which.add_argument("--records", action="store_true", help="that of the results of loop checks")


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Print the schema of the register format; returns the exit code."""
    from loopdoc.register import records
    from loopdoc.register.schema import schema_text

    stdout.write(records.schema_text() if arguments.records else schema_text(root=not arguments.included))
    return EXIT_CLEAN
