"""`loopdoc identify`."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TextIO

from loopdoc.cli.reading import load_register
from loopdoc.cli.terminal import EXIT_CLEAN, EXIT_FOUND, EXIT_UNREADABLE

HELP = """\
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

SUMMARY = "fit a process model to a recorded step or bump test"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc identify` takes."""
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.epilog = HELP
    parser.add_argument(
        "register", type=Path, nargs="?", metavar="REGISTER", help="folder that holds register.yaml; may be left out"
    )
    parser.add_argument("data", type=Path, metavar="DATA.csv", help="the recorded test")
    parser.add_argument("--tag", metavar="TAG", help="tag of the loop tested; needed with REGISTER")
    parser.add_argument("--format", choices=("text", "json"), default="text", help="form of the output (default: text)")
    parser.add_argument(
        "--plot", type=Path, metavar="FILE", help="also draw record, fit and residual, as .svg, .png or .pdf"
    )
    parser.add_argument(
        "--write",
        action="store_true",
        help="write the model and its source into the register; the rest stays as it is",
    )


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Fit a process model to a recorded test; returns the exit code."""
    from loopdoc.engineering.stages import Lacking
    from loopdoc.exchange.escaping import for_terminal
    from loopdoc.exchange.identified import identified, identified_json, identified_text, plot_caption, write_into
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
    loaded = load_register(arguments.register, stderr) if arguments.register is not None else None
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
            plot_caption(found),
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
