"""`loopdoc rules`."""

from __future__ import annotations

import argparse
from typing import TextIO

from loopdoc.cli.terminal import EXIT_CLEAN

SUMMARY = "list the rules and the thresholds of the policy"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """What `loopdoc rules` takes."""


def run(arguments: argparse.Namespace, stdout: TextIO, stderr: TextIO) -> int:
    """List the rules and the thresholds of the policy; returns the exit code."""
    from loopdoc.rules.explain import overview

    stdout.write(overview())
    return EXIT_CLEAN
