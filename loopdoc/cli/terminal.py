"""Exit codes, colour and progress."""

from __future__ import annotations

import os
from collections.abc import Callable
from typing import TextIO

EXIT_CLEAN, EXIT_FOUND, EXIT_UNREADABLE = 0, 1, 2


def colour(stream: TextIO) -> bool:
    """Whether a stream is shown in colour: on a terminal, unless the environment says otherwise."""
    if os.environ.get("NO_COLOR"):
        return False
    if os.environ.get("FORCE_COLOR"):
        return True
    return stream.isatty() and os.environ.get("TERM") != "dumb"


def progress_on(stderr: TextIO) -> Callable[[int, int], None]:
    """Shows how far a long work is, on a terminal only."""
    if not stderr.isatty():
        return lambda done, total: None

    def show(done: int, total: int) -> None:
        stderr.write(f"\r{done} of {total} files" + ("\n" if done == total else ""))
        stderr.flush()

    return show
