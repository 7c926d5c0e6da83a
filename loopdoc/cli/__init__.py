"""The command line: parse, call, print; a module a command."""

from __future__ import annotations

import argparse
import gc
import os
import sys
from collections.abc import Callable, Sequence
from io import TextIOWrapper
from typing import TextIO

from loopdoc import __version__
from loopdoc.cli import (
    attest,
    check,
    compare,
    explain,
    identify,
    issue,
    new,
    record,
    response,
    rules,
    schema,
)
from loopdoc.cli.terminal import EXIT_FOUND, EXIT_UNREADABLE

# In the order in which a newcomer needs them.
_COMMANDS = (new, check, issue, response, compare, identify, attest, record, explain, rules, schema)


def main() -> int:
    """Entry point of the `loopdoc` command."""
    # A large register is many small objects that live to the end: collecting among them only costs time.
    gc.set_threshold(50_000, 20, 50)
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")  # a terminal that knows no degree sign is no reason to fail
    try:
        return run(sys.argv[1:], sys.stdout, sys.stderr)
    except BrokenPipeError:  # the reader of our output has gone, as in `loopdoc check . | head`
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return EXIT_FOUND
    except KeyboardInterrupt:
        return 130


def run(argv: Sequence[str], stdout: TextIO, stderr: TextIO) -> int:
    """Run one command; returns the exit code."""
    arguments = _parser().parse_args(argv)
    command: Callable[[argparse.Namespace, TextIO, TextIO], int] = arguments.run
    try:
        return command(arguments, stdout, stderr)
    except OSError as error:
        if isinstance(error, BrokenPipeError):
            raise
        stderr.write(f"loopdoc: {error.strerror}: {error.filename}\n")
        return EXIT_UNREADABLE


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="loopdoc",
        description=(
            "Checks a plant's loop register as a reviewer would, does the control calculations, "
            "and issues the documents."
        ),
    )
    parser.add_argument("--version", action="version", version=f"loopdoc {__version__}")
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")
    for command in _COMMANDS:
        name = command.__name__.rpartition(".")[2]
        summary = command.SUMMARY
        sub = commands.add_parser(name, help=summary, description=summary[0].upper() + summary[1:] + ".")
        sub.set_defaults(run=command.run)
        command.add_arguments(sub)
    return parser
