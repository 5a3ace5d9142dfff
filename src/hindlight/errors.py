"""The few kinds of error that the command line shows as one line, without a traceback.

Anything else that is raised is an error inside the program: its traceback goes to the run's log.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class HindlightError(Exception):
    """Something the user can mend; the text says what, where, what was expected, what was found, and how to mend it."""

    exit_status = 2


class UsageError(HindlightError):
    """The command, a settings file, a target list or a plugin is wrong."""


class RunInUseError(HindlightError):
    """Another live process works in the run folder."""


class NothingToDoError(HindlightError):
    """No FITS image was found, or no target is covered by any frame."""

    exit_status = 3


class StoppedError(HindlightError):
    """The run ended early through an outside fault; the same command continues it."""

    exit_status = 4


class ReaderGoneError(HindlightError):
    """Whoever read the output has gone (`| head`); the command ends without a word."""

    exit_status = 141  # 128 + 13: what a shell says of a program that SIGPIPE has ended


def nearest(name: str, valid: Iterable[str]) -> str:
    """The end of a message about an unknown name: the nearest valid one, or all there are."""
    names = list(valid)
    close = difflib.get_close_matches(name, names, n=1, cutoff=0.5)
    return f"; did you mean {close[0]!r}?" if close else f"; there are {', '.join(sorted(names))}"
