"""Rendering of a template that is not ours, within limits of time, memory and length.

The sandbox of the templates keeps them from the machine, not from filling its memory (`'x' * 10**9`) or running for
ever. So such a template runs in a process of its own, which the system stops at its limits.
"""

from __future__ import annotations

import os
import signal
import threading
import traceback
import warnings
from collections.abc import Callable
from pathlib import Path

from jinja2 import TemplateSyntaxError

from loopdoc.documents.handover.house import FOLDER, HouseError

MAX_SECONDS = 10
MAX_MEMORY = 512_000_000
"""Beyond what the process holds at its start [bytes]."""
MAX_LENGTH = 20_000_000
"""Of a page [bytes]; the largest of ours have some 2 MB."""
_PAGE, _FAULT = b"p", b"f"


def within_limits(render: Callable[[], str], template: str) -> str:
    """What ``render`` gives.

    Raises
    ------
    HouseError
        The template is faulty, or reaches a limit.
    """
    if not hasattr(os, "fork"):
        raise HouseError(f"{FOLDER}/: templates of your own need a system that can fork, which this one cannot")
    reader, writer = os.pipe()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DeprecationWarning)  # threads of numpy do not matter to a template
        child = os.fork()
    if child == 0:
        os.close(reader)
        _answer(writer, render)
    os.close(writer)
    # The limit of processor time does not stop one that sleeps; this does.
    watch = threading.Timer(2 * MAX_SECONDS, os.kill, (child, signal.SIGKILL))
    watch.start()
    try:
        with os.fdopen(reader, "rb") as pipe:
            told = pipe.read(MAX_LENGTH + 2)
    finally:
        watch.cancel()
        _, status = os.waitpid(child, 0)
    if len(told) > MAX_LENGTH:
        raise HouseError(f"{FOLDER}/: `{template}` gives a page of more than {MAX_LENGTH // 1_000_000} MB")
    if told[:1] == _FAULT:
        raise HouseError(told[1:].decode())
    if told[:1] != _PAGE or status:
        raise HouseError(f"{FOLDER}/: `{template}` takes more than {MAX_SECONDS} s or too much memory")
    return told[1:].decode()


def _answer(writer: int, render: Callable[[], str]) -> None:
    """In the child: render within limits, tell the page or the fault, and end."""
    try:
        _limit()
        try:
            told = _PAGE + render().encode()
        except MemoryError:
            told = b""
        except Exception as error:
            told = _FAULT + fault_text(error).encode()
        with os.fdopen(writer, "wb") as pipe:
            pipe.write(told)
    except BaseException:
        os._exit(1)
    os._exit(0)


def _limit() -> None:
    import resource

    spent = sum(resource.getrusage(resource.RUSAGE_SELF)[:2])
    resource.setrlimit(resource.RLIMIT_CPU, (int(spent) + MAX_SECONDS, int(spent) + MAX_SECONDS))
    held = Path("/proc/self/statm")  # elsewhere the system does not keep to this limit anyway
    if held.exists():
        most = int(held.read_text().split()[0]) * resource.getpagesize() + MAX_MEMORY
        resource.setrlimit(resource.RLIMIT_AS, (most, most))


def fault_text(error: Exception) -> str:
    """File, line and what is wrong, of a fault in a template."""
    if isinstance(error, TemplateSyntaxError):
        return f"{error.filename or error.name}, line {error.lineno}: {error.message}"
    frames = [frame for frame in traceback.extract_tb(error.__traceback__) if frame.filename.endswith(".html")]
    own = [frame for frame in frames if frame.filename.startswith(f"{FOLDER}/")] or frames
    place = f"{own[-1].filename}, line {own[-1].lineno}" if own else f"{FOLDER}/"
    return f"{place}: {error or type(error).__name__}"
