"""What happens when whoever reads the output goes away: `hindlight inventory ARCHIVE | head -5`.

Such an end is quiet, with the status a shell gives a program that the signal SIGPIPE has ended: a pipeline that asks
for it (`set -o pipefail`) can tell it from a command that was done.
"""

from __future__ import annotations

import os
import select
import sys
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from typing import Any, NoReturn

from rich.console import Console

from hindlight.errors import ReaderGoneError


@contextmanager
def read_by_someone() -> Iterator[None]:
    """What is printed within is flushed at its end; raises `ReaderGoneError` where nobody reads it any more.

    A broken pipe that is neither standard output nor standard error is an error like any other.
    """
    try:
        yield
        if sys.stdout is not None:  # as after `>&-`
            sys.stdout.flush()
    except BrokenPipeError as error:
        if nobody_reads(sys.stdout) or nobody_reads(sys.stderr):
            raise ReaderGoneError("whoever read the output has gone; the same command continues") from error
        # Click makes of a broken pipe, whichever it is, an exit that says nothing.
        raise RuntimeError(f"a pipe that is not the output broke: {error}") from error


def nobody_reads(stream: Any) -> bool:
    """Whether a stream is a pipe whose reading end is closed."""
    try:
        number = stream.fileno()
    except (OSError, ValueError, AttributeError):
        return False
    if not hasattr(select, "poll"):
        return True  # where pipes cannot be asked, what broke is taken for the output
    poll = select.poll()
    poll.register(number, 0)
    return any(event & (select.POLLERR | select.POLLHUP) for _, event in poll.poll(0))


def let_go() -> None:
    """Send what is still buffered for readers that have gone nowhere, so that the interpreter ends without a word."""
    for stream in (sys.stdout, sys.stderr):
        if nobody_reads(stream):
            with suppress(OSError):
                os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())


class PipedConsole(Console):
    """A console that leaves a broken pipe to its caller, where it would end the program by itself."""

    def on_broken_pipe(self) -> NoReturn:
        """Called while the `BrokenPipeError` is handled, which goes on."""
        error = sys.exc_info()[1]
        raise error if error is not None else BrokenPipeError
