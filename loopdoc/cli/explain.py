"""`loopdoc explain`."""

from __future__ import annotations

import argparse
from typing import TextIO

from loopdoc.cli.reading import unknown_rule
from loopdoc.cli.terminal import EXIT_CLEAN

SUMMARY = "explain a rule: what it means, why, and what it cannot see"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc explain` takes."""
    parser.add_argument("rule", metavar="RULE", help="id of a rule, as in a finding")


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """Print the page of a rule; returns the exit code."""
    from loopdoc.rules.catalogue import RULES
    from loopdoc.rules.explain import explanation

    unknown = unknown_rule([arguments.rule], stderr)
    if unknown:
        return unknown
    stdout.write(explanation(next(rule for rule in RULES if rule.id == arguments.rule)))
    return EXIT_CLEAN
