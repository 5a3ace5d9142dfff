"""Calls in a process of their own, for code that broken data can bring down together with whoever called it.

The process is begun at the first call and kept; one that dies is an exception here, and the next call begins another.
What is called, its arguments and its result must pickle. Nothing here knows what is called.
"""

from __future__ import annotations

import atexit
import pickle
import subprocess
import sys
import threading
from collections.abc import Callable
from typing import IO, Any, ParamSpec, TypeVar

Given = ParamSpec("Given")
Result = TypeVar("Result")


class BrokeDownError(Exception):
    """The other process died of what it was asked to do."""


class _Process:
    """The other process, if there is one; one call at a time."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._process: subprocess.Popen[bytes] | None = None
        atexit.register(self.end)

    def call(self, request: bytes) -> Any:
        with self._lock:
            if self._process is None:
                self._process = subprocess.Popen(
                    [sys.executable, "-c", f"from {__name__} import serve; serve()"],
                    stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL,
                    start_new_session=True,  # Ctrl-C is for whoever waits here
                )  # fmt: skip
            stdin, stdout = self._process.stdin, self._process.stdout
            if stdin is None or stdout is None:
                raise BrokeDownError("the other process has no pipes")
            try:
                stdin.write(request)
                stdin.flush()
                return pickle.load(stdout)
            except (EOFError, BrokenPipeError, pickle.UnpicklingError):
                self.end()
                raise BrokeDownError("the process that unpacks broke down") from None
            except BaseException:  # whoever gives up waiting leaves an answer behind that nobody wants
                self.end()
                raise

    def end(self) -> None:
        """Stop the process, if there is one."""
        process, self._process = self._process, None
        if process is not None:
            process.kill()
            process.communicate()


_process = _Process()


def call(function: Callable[Given, Result], *given: Given.args, **named: Given.kwargs) -> Result:
    """What a function returns or raises, called in the other process; `BrokeDownError` where that dies of it."""
    result, error = _process.call(pickle.dumps((function, given, named)))
    if error is not None:
        raise error
    answer: Result = result
    return answer


def serve() -> None:
    """Answer calls from standard input until it ends."""
    requests, answers = sys.stdin.buffer, sys.stdout.buffer
    sys.stdout = sys.stderr  # what is called may print; answers must stay whole
    while True:
        try:
            function, given, named = pickle.load(requests)
        except EOFError:
            return
        _answer(answers, function, given, named)


def _answer(answers: IO[bytes], function: Callable[..., Any], given: Any, named: Any) -> None:
    try:
        answer: tuple[Any, Exception | None] = (function(*given, **named), None)
    except Exception as error:  # noqa: BLE001 - it is raised again on the other side
        answer = (None, RuntimeError(f"{type(error).__name__}: {error}"))
    pickle.dump(answer, answers, protocol=pickle.HIGHEST_PROTOCOL)
    answers.flush()
