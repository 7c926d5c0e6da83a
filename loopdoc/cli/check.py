"""`loopdoc check`."""

from __future__ import annotations

import argparse
import datetime
import os
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

from loopdoc.cli.reading import add_register, unknown_rule
from loopdoc.cli.terminal import EXIT_CLEAN, EXIT_FOUND, EXIT_UNREADABLE, colour

if TYPE_CHECKING:
    from loopdoc.rules.finding import CheckResult, Level

SUMMARY = "check a register and print the findings"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc check` takes."""
    add_register(parser)
    parser.add_argument(
        "--format",
        choices=("text", "json", "sarif", "junit", "markdown", "code-quality"),
        default="text",
        help="form of the output (default: text); the last four name files as from the current folder",
    )
    parser.add_argument(
        "--since",
        metavar="REVISION",
        help="report only what is new or changed since this git revision, and judge the exit code by that",
    )
    parser.add_argument(
        "--fail-on", choices=("error", "warning", "note", "never"), default="error",
        help="exit 1 when a finding of this level or above is open (default: error)",
    )  # fmt: skip
    parser.add_argument("--only", nargs="+", metavar="RULE", default=[], help="check by these rules only")
    parser.add_argument(
        "--date",
        type=_date,
        metavar="YYYY-MM-DD",
        help="the day by which deviations are judged (default: today); documents judge by the date of their revision",
    )


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Check a register and print the findings; returns the exit code."""
    from loopdoc.engineering.pairing import Plant
    from loopdoc.exchange.findings import unreadable_result, unreadable_text
    from loopdoc.register.load import Unreadable, load
    from loopdoc.rules.check import check
    from loopdoc.rules.finding import Level

    unknown = unknown_rule(arguments.only, stderr)
    if unknown:
        return unknown
    least = None if arguments.fail_on == "never" else Level[arguments.fail_on.upper()]
    loaded = load(arguments.register)
    if isinstance(loaded, Unreadable):
        stderr.write(unreadable_text(loaded.faults, loaded.sources, colour=colour(stderr)))
        result = unreadable_result(loaded.faults, loaded.sources)
        if arguments.format != "text" and result.findings:
            stdout.write(_told(result, arguments, loaded.sources, least, colour=False))
        return EXIT_UNREADABLE
    today = arguments.date or _today()
    result = check(Plant(loaded.register), loaded.faults, only=arguments.only, today=today)
    if arguments.since is not None:
        from loopdoc.exchange.escaping import for_terminal
        from loopdoc.revisions.git import GitError
        from loopdoc.revisions.since import since

        try:
            result = since(result, arguments.register, arguments.since, only=arguments.only, today=today)
        except GitError as error:
            stderr.write(for_terminal(f"loopdoc: {error}\n"))
            return EXIT_UNREADABLE
    stdout.write(_told(result, arguments, loaded.sources, least, colour=colour(stdout)))
    return EXIT_FOUND if least and any(finding.level >= least for finding in result.findings) else EXIT_CLEAN


def _told(
    result: CheckResult,
    arguments: argparse.Namespace,
    sources: Mapping[str, bytes],
    least: Level | None,
    *,
    colour: bool,
) -> str:
    """The result of a check in the form asked for; each form is imported only where it is."""
    folder = _from_here(arguments.register)
    match arguments.format:
        case "text":
            from loopdoc.exchange.findings import as_text

            return as_text(result, sources, colour=colour)
        case "json":
            from loopdoc.exchange.findings import as_json

            return as_json(result)
        case "sarif":
            from loopdoc.exchange.sarif import as_sarif

            return as_sarif(result, folder=folder)
        case "junit":
            from loopdoc.exchange.junit import as_junit

            return as_junit(result, folder=folder, least=least)
        case "markdown":
            from loopdoc.exchange.markdown import as_markdown

            return as_markdown(result, folder=folder)
        case _:
            from loopdoc.exchange.code_quality import as_code_quality

            return as_code_quality(result, folder=folder)


def _from_here(register: Path) -> str:
    """What stands before a file's name to name it from the current folder; nothing for a register elsewhere."""
    folder = (register.parent if register.is_file() else register).resolve()
    here = Path.cwd()
    if folder == here or not folder.is_relative_to(here):
        return ""
    return f"{folder.relative_to(here).as_posix()}/"


def _date(written: str) -> datetime.date:
    """A day as `--date` takes it."""
    try:
        return datetime.date.fromisoformat(written)
    except ValueError:
        raise argparse.ArgumentTypeError(f"`{written}` is no day; write it as in 2026-11-20") from None


def _today() -> datetime.date:
    """Today; or the day of SOURCE_DATE_EPOCH, so that a check can be made again as it was."""
    try:
        return datetime.datetime.fromtimestamp(int(os.environ.get("SOURCE_DATE_EPOCH", "")), datetime.UTC).date()
    except (ValueError, OverflowError, OSError):  # not set, or no date
        return datetime.date.today()
