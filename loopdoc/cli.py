"""The command line: parse, call, print."""

from __future__ import annotations

import argparse
import datetime
import gc
import os
import sys
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from functools import partial
from io import TextIOWrapper
from pathlib import Path
from typing import TYPE_CHECKING, Any, TextIO

from loopdoc import __version__

if TYPE_CHECKING:
    from loopdoc.documents.basis import Basis
    from loopdoc.register.load import Loaded
    from loopdoc.rules.finding import CheckResult, Level

EXIT_CLEAN, EXIT_FOUND, EXIT_UNREADABLE = 0, 1, 2
IDENTIFY_HELP = """\
The head of DATA.csv names three columns, the last two with their units; others are passed over:
  time         numbers under `time [s]`, [min] or [h], or ISO 8601 times under a plain `time`
  and one that says what was moved:
    output     the controller's output in `%`, of a primary also in the units of its secondary
    opening    the opening (or speed) of the final element, `%`
    secondary  of a primary: the secondary's measurement or setpoint, in its units
  measurement  in its units, or in `%` of the register's range
Columns stand apart by commas, semicolons or tabs; a decimal comma is read beside the latter two. Each value of
what was moved holds until the next line. Samples may be irregular; several steps, and bumps, are welcome.

The model is what the register's `process` states: per percent of the final element's opening, or per unit of the
secondary's measurement. The register says how an output becomes that: output block, direction of the valve, output
span, split range. Test in manual (a primary: with the secondary following), from rest, and move back again: one
step alone cannot tell the gain from a drift. Without REGISTER the model is per unit of the column as recorded,
and nothing can be written.

Exit code: 0 where the test supports a model, 1 where it is refused, 2 where something cannot be read or written.
"""


RECORD_HELP = """\
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
    command: Callable[[argparse.Namespace, TextIO, TextIO], int] = arguments.command
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

    def command(name: str, function: Callable[..., int], summary: str) -> argparse.ArgumentParser:
        sub = commands.add_parser(name, help=summary, description=summary[0].upper() + summary[1:] + ".")
        sub.set_defaults(command=function)
        return sub

    new = command("new", _new, "write a small register to start from")
    new.add_argument("folder", type=Path, metavar="FOLDER", help="a folder that does not exist yet, or is empty")

    check = command("check", _check, "check a register and print the findings")
    _add_register(check)
    check.add_argument(
        "--format",
        choices=("text", "json", "sarif", "junit", "markdown", "code-quality"),
        default="text",
        help="form of the output (default: text); the last four name files as from the current folder",
    )
    check.add_argument(
        "--since",
        metavar="REVISION",
        help="report only what is new or changed since this git revision, and judge the exit code by that",
    )
    check.add_argument(
        "--fail-on", choices=("error", "warning", "note", "never"), default="error",
        help="exit 1 when a finding of this level or above is open (default: error)",
    )  # fmt: skip
    check.add_argument("--only", nargs="+", metavar="RULE", default=[], help="check by these rules only")
    check.add_argument(
        "--date",
        type=_date,
        metavar="YYYY-MM-DD",
        help="the day by which deviations are judged (default: today); documents judge by the date of their revision",
    )

    issue = command("issue", _issue, "issue the documents of a register")
    _add_register(issue)
    where = issue.add_mutually_exclusive_group(required=True)
    where.add_argument("--out", type=Path, metavar="FOLDER", help="where the documents are written")
    where.add_argument(
        "--package",
        type=Path,
        metavar="FOLDER",
        help="one folder to hand over, and one archive FOLDER.zip: documents, index with fingerprints, register",
    )
    issue.add_argument(
        "--documents",
        nargs="+",
        metavar="KIND",
        default=[],
        help="narrative, loop-sheet, response, check-record, alarm-schedule, cause-and-effect, tuning-schedule, "
        "failure-effects, channel-list, instrument-list, check-report, and with --against revision-summary "
        "(default: all)",
    )
    issue.add_argument(
        "--against",
        default="",
        metavar="OLD",
        help="bars beside what differs from a git revision or from another folder's register, and a revision summary",
    )
    issue.add_argument("--formats", default="pdf,html", metavar="LIST", help="pdf, html or pdf,html (default)")
    issue.add_argument(
        "--language",
        choices=("en", "de"),
        help="language of the narratives and loop sheets; other kinds are in English (default: that of the register)",
    )
    issue.add_argument(
        "--jobs",
        type=int,
        default=os.cpu_count() or 1,
        metavar="N",
        help="processes at work (default: one a processor)",
    )

    response = command("response", _response, "margins and time responses of a loop or cascade")
    _add_register(response)
    response.add_argument("tag", metavar="TAG", help="tag of a loop with a controller")
    response.add_argument(
        "--format", choices=("text", "json"), default="text", help="form of the output (default: text)"
    )
    response.add_argument(
        "--plot",
        type=Path,
        metavar="FILE",
        help="also draw the responses over time and over frequency: .pdf (a page each), .svg or .png (in one figure)",
    )

    compare = command("compare", _compare, "tell what changed between two revisions, and what that does to the plant")
    _add_register(compare)
    compare.add_argument("old", metavar="OLD", help="a git revision, or a folder that holds a register")
    compare.add_argument(
        "new", metavar="NEW", nargs="?", default="", help="another of them (default: the register as it stands)"
    )
    compare.add_argument(
        "--format", choices=("text", "json", "markdown"), default="text", help="form of the output (default: text)"
    )
    compare.add_argument(
        "--documents",
        action="store_true",
        help="tell also which documents change; both sides are built for that, which takes its time",
    )

    identify = command("identify", _identify, "fit a process model to a recorded step or bump test")
    identify.formatter_class = argparse.RawDescriptionHelpFormatter
    identify.epilog = IDENTIFY_HELP
    identify.add_argument(
        "register", type=Path, nargs="?", metavar="REGISTER", help="folder that holds register.yaml; may be left out"
    )
    identify.add_argument("data", type=Path, metavar="DATA.csv", help="the recorded test")
    identify.add_argument("--tag", metavar="TAG", help="tag of the loop tested; needed with REGISTER")
    identify.add_argument(
        "--format", choices=("text", "json"), default="text", help="form of the output (default: text)"
    )
    identify.add_argument(
        "--plot", type=Path, metavar="FILE", help="also draw record, fit and residual, as .svg, .png or .pdf"
    )
    identify.add_argument(
        "--write",
        action="store_true",
        help="write the model and its source into the register; the rest stays as it is",
    )

    attest = command("attest", _attest, "tell whether issued PDF files are what the register says")
    attest.add_argument(
        "paths",
        type=Path,
        nargs="+",
        metavar="FILE.pdf",
        help="issued files, folders of them, or packages (folder or .zip); and a register, to compare with",
    )
    attest.add_argument("--format", choices=("text", "json"), default="text", help="form of the output (default: text)")

    record = command("record", _record, "judge the results of loop checks, or write the workbook for them")
    record.formatter_class = argparse.RawDescriptionHelpFormatter
    record.epilog = RECORD_HELP
    _add_register(record)
    record.add_argument(
        "results", type=Path, nargs="*", metavar="RESULTS", help="filled workbooks (.xlsx) or YAML files of results"
    )
    record.add_argument("--blank", type=Path, metavar="FILE.xlsx", help="write a workbook to fill in, a sheet a loop")
    record.add_argument("--only", nargs="+", metavar="TAG", default=[], help="with --blank: these loops only")
    record.add_argument(
        "--format", choices=("text", "json"), default="text", help="form of the output (default: text)"
    )
    record.add_argument(
        "--write", action="store_true", help="keep the results beside the register, in records/TAG.yaml"
    )

    explain = command("explain", _explain, "explain a rule: what it means, why, and what it cannot see")
    explain.add_argument("rule", metavar="RULE", help="id of a rule, as in a finding")
    command("rules", _rules, "list the rules and the thresholds of the policy")
    schema = command("schema", _schema, "print the JSON Schema of the register format")
    which = schema.add_mutually_exclusive_group()
    which.add_argument(
        "--included", action="store_true", help="that of the files which register.yaml includes, not its own"
    )
    which.add_argument("--records", action="store_true", help="that of the results of loop checks")
    return parser


def _add_register(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("register", type=Path, metavar="REGISTER", help="folder that holds register.yaml")


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


# ---------------------------------------------------------------- commands


def _new(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
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


def _check(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    from loopdoc.engineering.pairing import Plant
    from loopdoc.exchange.findings import unreadable_result, unreadable_text
    from loopdoc.register.load import Unreadable, load
    from loopdoc.rules.check import check
    from loopdoc.rules.finding import Level

    unknown = _unknown_rule(arguments.only, stderr)
    if unknown:
        return unknown
    least = None if arguments.fail_on == "never" else Level[arguments.fail_on.upper()]
    loaded = load(arguments.register)
    if isinstance(loaded, Unreadable):
        stderr.write(unreadable_text(loaded.faults, loaded.sources, colour=_colour(stderr)))
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
    stdout.write(_told(result, arguments, loaded.sources, least, colour=_colour(stdout)))
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


def _colour(stream: TextIO) -> bool:
    """Whether a stream is shown in colour: on a terminal, unless the environment says otherwise."""
    if os.environ.get("NO_COLOR"):
        return False
    if os.environ.get("FORCE_COLOR"):
        return True
    return stream.isatty() and os.environ.get("TERM") != "dumb"


def _issue(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
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
    basis = _basis(arguments.register, stderr, with_records="check-record" in kinds, against=arguments.against)
    if basis is None:
        return EXIT_UNREADABLE
    if arguments.language:
        basis = basis.in_language(LANGUAGES[arguments.language])
    status = EXIT_CLEAN
    progress = _progress(stderr)

    def write(formats: Sequence[str]) -> str:
        settings: Any = {"kinds": kinds, "formats": formats, "jobs": arguments.jobs, "progress": progress}
        if arguments.package:
            from loopdoc.documents.handover.package import package

            made = package(basis, arguments.package, **settings)
            return f"{made.documents} documents in {made.folder} and {made.archive} ({made.files} files).\n"
        issued = issue(basis, arguments.out, **settings)
        return f"{issued.documents} documents in {issued.folder} ({len(issued.files)} files).\n"

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


def _response(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    from loopdoc.engineering.comparison import compare
    from loopdoc.engineering.dynamics import Dynamics
    from loopdoc.engineering.pairing import Plant
    from loopdoc.engineering.tuning_review import review, reviewed_loops
    from loopdoc.exchange.responses import response_json, response_text
    from loopdoc.rules.policy import limits_from

    # The check is left out: nothing that is printed here comes from it, and it would take most of the time.
    loaded = _load(arguments.register, stderr)
    if loaded is None:
        return EXIT_UNREADABLE
    plant = Plant(loaded.register)
    dynamics = Dynamics(plant)
    if arguments.tag not in plant.controlled:
        from difflib import get_close_matches

        near = get_close_matches(arguments.tag, plant.controlled, 1)
        hint = f"did you mean {near[0]}?" if near else "name a loop with a controller"
        stderr.write(f"loopdoc: the register has no controller {arguments.tag}; {hint}\n")
        return EXIT_UNREADABLE
    loop = dynamics.loop(arguments.tag)
    comparisons = [compare(chain) for chain in loop.chains]
    if arguments.plot is not None:
        if loop.reason:
            stderr.write(f"loopdoc: nothing to draw for {loop.tag}: {loop.reason}\n")
            return EXIT_UNREADABLE
        from loopdoc.documents.plots import save
        from loopdoc.documents.responses.response_figure import drawings

        try:
            save(drawings(plant, loop.chains, comparisons), arguments.plot)
        except ValueError as error:
            stderr.write(f"loopdoc: {error}\n")
            return EXIT_UNREADABLE
    reviews = [review(dynamics.loop(tag)) for tag in reviewed_loops(loop)]
    as_asked = response_json if arguments.format == "json" else response_text
    stdout.write(as_asked(loop, comparisons, reviews, limits_from(loaded.register.policy)))
    return EXIT_CLEAN


def _compare(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    from loopdoc.documents.basis import basis_of
    from loopdoc.exchange.comparison import comparison_json, comparison_markdown, comparison_text
    from loopdoc.revisions.compare import compared

    sides = []
    for named in (arguments.old, arguments.new):
        loaded = _at_revision(arguments.register, named, stderr)
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


def _identify(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    from loopdoc.engineering.stages import Lacking
    from loopdoc.exchange.escaping import for_terminal
    from loopdoc.exchange.identified import identified, identified_json, identified_text, write_into
    from loopdoc.exchange.step_test import MAX_BYTES, read_step_test
    from loopdoc.register.place import Fault, Place

    def unreadable(message: str) -> int:
        stderr.write(for_terminal(f"loopdoc: {message}\n"))
        return EXIT_UNREADABLE

    if arguments.register is None and arguments.write:
        return unreadable("--write needs the register into which it is to write")
    if arguments.register is not None and arguments.tag is None:
        return unreadable("say with --tag which loop was tested")
    with arguments.data.open("rb") as file:
        test = read_step_test(file.read(MAX_BYTES + 1), arguments.data.name)
    if isinstance(test, Fault):
        stderr.write(for_terminal(f"{test.place}: error: {test.message}\n    remedy: {test.remedy}\n"))
        return EXIT_UNREADABLE
    loaded = _load(arguments.register, stderr) if arguments.register is not None else None
    if loaded is None and arguments.register is not None:
        return EXIT_UNREADABLE
    found = identified(test, arguments.tag or "", loaded.register if loaded else None)
    if isinstance(found, Lacking):
        return unreadable(found.reason)
    if arguments.plot is not None:
        from loopdoc.documents.plots import save
        from loopdoc.documents.responses.step_test_plot import step_test_drawing

        drawing = step_test_drawing(
            found.plot_title,
            time_s=test.time_s,
            measurement=found.measurement,
            measurement_unit=found.measurement_unit.display,
            moved=found.moved,
            moved_label=f"{found.moved_label}, {found.moved_unit.display}",
            fitted_time_s=found.result.time_s,
            fitted=found.result.fitted,
        )
        try:
            save([drawing], arguments.plot)
        except ValueError as error:
            return unreadable(str(error))
    written: Place | str | None = None
    if arguments.write and loaded is not None and found.result.model is not None:
        folder = arguments.register.parent if arguments.register.is_file() else arguments.register
        written = write_into(loaded, folder, found)
    place = written if isinstance(written, Place) else None
    as_asked = identified_json if arguments.format == "json" else identified_text
    stdout.write(as_asked(found, place))
    if isinstance(written, str):
        return unreadable(f"nothing was written: {written}")
    return EXIT_CLEAN if found.result.model is not None else EXIT_FOUND


def _attest(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
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
    against = _basis(registers[0], stderr, with_records=True) if registers else None
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


def _record(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
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
    loaded = _load(arguments.register, stderr)
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


def _explain(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    from loopdoc.rules.catalogue import RULES
    from loopdoc.rules.explain import explanation

    unknown = _unknown_rule([arguments.rule], stderr)
    if unknown:
        return unknown
    stdout.write(explanation(next(rule for rule in RULES if rule.id == arguments.rule)))
    return EXIT_CLEAN


def _rules(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    from loopdoc.rules.explain import overview

    stdout.write(overview())
    return EXIT_CLEAN


def _schema(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    from loopdoc.register import records
    from loopdoc.register.schema import schema_text

    stdout.write(records.schema_text() if arguments.records else schema_text(root=not arguments.included))
    return EXIT_CLEAN


# ---------------------------------------------------------------- steps that commands share


def _load(path: Path, stderr: TextIO) -> Loaded | None:
    """The register; None, with each reason told, where the text cannot be read as one."""
    from loopdoc.exchange.findings import unreadable_text
    from loopdoc.register.load import Unreadable, load

    loaded = load(path)
    if isinstance(loaded, Unreadable):
        stderr.write(unreadable_text(loaded.faults, loaded.sources, colour=_colour(stderr)))
        return None
    return loaded


def _at_revision(path: Path, named: str, stderr: TextIO) -> Loaded | None:
    """The register at a revision or in another folder; None, with each reason told, where there is none."""
    from loopdoc.exchange.escaping import for_terminal
    from loopdoc.exchange.findings import unreadable_text
    from loopdoc.register.load import Unreadable
    from loopdoc.revisions.earlier import at_revision
    from loopdoc.revisions.git import GitError

    if not named:
        return _load(path, stderr)
    try:
        loaded = at_revision(path, named)
    except GitError as error:
        stderr.write(for_terminal(f"loopdoc: {error}\n"))
        return None
    if isinstance(loaded, Unreadable):
        stderr.write(for_terminal(f"loopdoc: {named} cannot be read as a register\n"))
        stderr.write(unreadable_text(loaded.faults, loaded.sources, colour=_colour(stderr)))
        return None
    return loaded


def _basis(path: Path, stderr: TextIO, *, with_records: bool = False, against: str = "") -> Basis | None:
    """The register read, resolved, checked and calculated; None, with each reason told, where it cannot be read.

    With the site's own files beside it, the results of loop checks where they are asked for, and the register at an
    earlier revision where one is named.
    """
    loaded = _load(path, stderr)
    earlier = _at_revision(path, against, stderr) if loaded is not None and against else None
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


def _unknown_rule(ids: Sequence[str], stderr: TextIO) -> int:
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


def _progress(stderr: TextIO) -> Callable[[int, int], None]:
    """Shows how far a long work is, on a terminal only."""
    if not stderr.isatty():
        return lambda done, total: None

    def show(done: int, total: int) -> None:
        stderr.write(f"\r{done} of {total} files" + ("\n" if done == total else ""))
        stderr.flush()

    return show
