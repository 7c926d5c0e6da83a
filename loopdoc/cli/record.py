"""`loopdoc record`."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TextIO

from loopdoc.cli.reading import add_register, load_register
from loopdoc.cli.terminal import EXIT_CLEAN, EXIT_FOUND, EXIT_UNREADABLE

HELP = """\
RESULTS is a workbook that `--blank` wrote and somebody filled in, or YAML (`loopdoc schema --records`):

  format: 1
  checks:
    - tag: TIC-2014
      date: 2026-11-30
      by: A. Meyer
      instrument: Decade box DB-7
      readings:
        measurement 25 %: {as_found: 75.1 degC, as_found_falling: 74.9 degC}
      functions:
        controller action: {result: pass}

The names of readings and functions are those of the check record. What a check does not tell has not been done,
and what has not been done has not passed.

Exit code: 0 where nothing is out of tolerance as it was left, 1 where something is or a function failed, 2 where
something cannot be read or written.
"""

SUMMARY = "judge the results of loop checks, or write the workbook for them"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc record` takes."""
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.epilog = HELP
    add_register(parser)
    parser.add_argument(
        "results", type=Path, nargs="*", metavar="RESULTS", help="filled workbooks (.xlsx) or YAML files of results"
    )
    parser.add_argument("--blank", type=Path, metavar="FILE.xlsx", help="write a workbook to fill in, a sheet a loop")
    parser.add_argument("--only", nargs="+", metavar="TAG", default=[], help="with --blank: these loops only")
    parser.add_argument("--format", choices=("text", "json"), default="text", help="form of the output (default: text)")
    parser.add_argument(
        "--write", action="store_true", help="keep the results beside the register, in records/TAG.yaml"
    )


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Write the workbook of the loop checks, or judge what comes back; returns the exit code."""
    from loopdoc.documents.check_record.expected import guide, plant_checks
    from loopdoc.documents.handover.issue import write_whole
    from loopdoc.engineering.pairing import Plant
    from loopdoc.engineering.record_verdict import JudgedRecord, Verdict
    from loopdoc.exchange.escaping import for_terminal
    from loopdoc.exchange.record_report import faults_text, judged_records, kept, report_json, report_text
    from loopdoc.exchange.record_workbook import blank_workbook
    from loopdoc.exchange.results import read_results

    if bool(arguments.results) == (arguments.blank is not None) or (arguments.only and not arguments.blank):
        stderr.write("loopdoc: name files of results, or --blank FILE.xlsx and with it --only TAG\n")
        return EXIT_UNREADABLE
    loaded = load_register(arguments.register, stderr)
    if loaded is None:
        return EXIT_UNREADABLE
    plant = Plant(loaded.register)
    unknown = [tag for tag in arguments.only if tag not in plant.register.loops]
    if unknown:
        stderr.write(for_terminal(f"loopdoc: the register has no loop {unknown[0]}\n"))
        return EXIT_UNREADABLE
    checks = plant_checks(plant)
    if arguments.blank is not None:
        chosen = [checks[tag] for tag in arguments.only or checks]
        write_whole(arguments.blank, blank_workbook(chosen, guide=guide(plant, loaded.sources)))
        stdout.write(f"wrote {arguments.blank}: {len(chosen)} {'loop' if len(chosen) == 1 else 'loops'}\n")
        return EXIT_CLEAN
    found = read_results(arguments.results, plant.register.loops)
    judged = found if isinstance(found, str) else judged_records(found, checks, plant.register.loops)
    if isinstance(judged, str):
        stderr.write(judged)
        return EXIT_UNREADABLE
    results = [one for one in judged if isinstance(one, JudgedRecord)]
    if len(results) < len(judged):
        stderr.write(faults_text(one for one in judged if not isinstance(one, JudgedRecord)))
        return EXIT_UNREADABLE
    told = report_json if arguments.format == "json" else report_text
    stdout.write(told(results, len(plant.register.loops)))
    if arguments.write:
        folder = arguments.register.parent if arguments.register.is_file() else arguments.register
        contents = kept(folder, [one.record for one in results])
        if isinstance(contents, str):
            stderr.write(for_terminal(f"loopdoc: nothing was written: {contents}\n"))
            return EXIT_UNREADABLE
        for name, content in contents.items():
            write_whole(folder / name, content)
            stderr.write(f"wrote {name}\n")
    return EXIT_FOUND if any(one.verdict is Verdict.FAIL for one in results) else EXIT_CLEAN
