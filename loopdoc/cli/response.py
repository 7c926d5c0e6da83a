"""`loopdoc response`."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TextIO

from loopdoc.cli.reading import add_register, load_register
from loopdoc.cli.terminal import EXIT_CLEAN, EXIT_UNREADABLE

SUMMARY = "margins and time responses of a loop or cascade"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc response` takes."""
    add_register(parser)
    parser.add_argument("tag", metavar="TAG", help="tag of a loop with a controller")
    parser.add_argument("--format", choices=("text", "json"), default="text", help="form of the output (default: text)")
    parser.add_argument(
        "--plot",
        type=Path,
        metavar="FILE",
        help="also draw the responses over time and over frequency: .pdf (a page each), .svg or .png (in one figure)",
    )


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Print margins, time responses and tuning review of a loop; returns the exit code."""
    from loopdoc.engineering.comparison import compare
    from loopdoc.engineering.dynamics import Dynamics
    from loopdoc.engineering.override import Override, override
    from loopdoc.engineering.pairing import Plant
    from loopdoc.engineering.split_range import SplitRange, split_range
    from loopdoc.engineering.tuning_review import review, reviewed_loops
    from loopdoc.exchange.responses import response_json, response_text
    from loopdoc.rules.policy import limits_from

    # The check is left out: nothing that is printed here comes from it, and it would take most of the time.
    loaded = load_register(arguments.register, stderr)
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
    split = split_range(loop.chains)
    rivals = override(plant, dynamics, loop.tag)
    if arguments.plot is not None:
        if loop.reason:
            stderr.write(f"loopdoc: nothing to draw for {loop.tag}: {loop.reason}\n")
            return EXIT_UNREADABLE
        from loopdoc.documents.plots import save
        from loopdoc.documents.responses.override_story import override_figure
        from loopdoc.documents.responses.response_figure import drawings
        from loopdoc.documents.responses.split_range_story import split_figure

        drawn = drawings(plant, loop.chains, comparisons)
        if isinstance(split, SplitRange):
            drawn.insert(0, split_figure(plant, split))
        if isinstance(rivals, Override):
            drawn.insert(0, override_figure(plant, rivals))
        try:
            save(drawn, arguments.plot)
        except ValueError as error:
            stderr.write(f"loopdoc: {error}\n")
            return EXIT_UNREADABLE
    reviews = [review(dynamics.loop(tag)) for tag in reviewed_loops(loop)]
    as_asked = response_json if arguments.format == "json" else response_text
    limits = limits_from(loaded.register.policy)
    stdout.write(as_asked(loop, comparisons, reviews, limits, split=split, override=rivals))
    return EXIT_CLEAN
