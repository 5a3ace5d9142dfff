"""One call of a plugin, so that what it raises is recorded and the run goes on.

This is the inline form. A `Fault` is plain data; `FaultLog` counts them by plugin, kind of fault and line. Order of
calls does not change what is recorded: the first position is the one with the lowest sort key.
"""

from __future__ import annotations

import traceback
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any, TypeVar

import numpy as np

from hindlight.plugin import Column, Plugin

Result = TypeVar("Result")


class WrongColumnError(Exception):
    """A plugin returned something other than the columns it declares."""


@dataclass(frozen=True)
class Fault:
    """One way in which a plugin failed: how often, and where first."""

    plugin: str
    kind: str
    target: str
    channel: str
    fault: str
    detail: str
    line: str
    count: int = 1

    @property
    def key(self) -> tuple[str, str, str, str]:
        """What makes two faults the same."""
        return (self.plugin, self.fault, self.line, self.detail if self.fault == "wrong_column" else "")


def call(plugin: Plugin, method: Callable[[], Result], target: str, channel: str = "") -> Result | Fault:
    """What `method` returns, or the fault it ended in."""
    try:
        with np.errstate(all="ignore"):
            return method()
    except WrongColumnError as error:
        return Fault(plugin.name, plugin.kind, target, channel, "wrong_column", str(error), "")
    except (Exception, SystemExit, GeneratorExit) as error:  # noqa: BLE001 - the fence: anything a plugin raises
        frames = traceback.extract_tb(error.__traceback__)
        last = frames[-1]
        line = f"{last.filename.rsplit('/', 1)[-1]}:{last.lineno}"
        return Fault(plugin.name, plugin.kind, target, channel, type(error).__name__, one_line(str(error)), line)


def checked(plugin: Plugin, values: Any, columns: Iterable[Column] | None = None) -> dict[str, Any]:
    """The declared columns out of what a plugin returned, with the declared types.

    Raises `WrongColumnError` for an undeclared column, a missing one, or a value that does not convert.
    """
    declared = {column.name: column for column in (plugin.columns if columns is None else columns)}
    if not isinstance(values, Mapping):
        raise WrongColumnError(f"returned {type(values).__name__}, expected a mapping of columns")
    extra = sorted(set(values) - set(declared))
    missing = sorted(set(declared) - set(values))
    if extra or missing:
        what = f"returned undeclared {extra[0]!r}" if extra else f"did not return {missing[0]!r}"
        raise WrongColumnError(f"{what}; it declares {', '.join(declared)}")
    return {name: _converted(column, values[name]) for name, column in declared.items()}


def blank(column: Column) -> Any:
    """The value that stands for nothing in a column."""
    return {"str": "", "bool": False, "int64": 0}.get(column.dtype, float("nan"))


def merged(faults: Iterable[Fault]) -> list[Fault]:
    """Faults of the same kind counted together, in a fixed order."""
    found: dict[tuple[str, str, str, str], Fault] = {}
    for fault in sorted(faults, key=lambda f: (f.key, f.target, f.channel)):
        first = found.get(fault.key)
        found[fault.key] = fault if first is None else replace(first, count=first.count + fault.count)
    return list(found.values())


def one_line(text: str, limit: int = 300) -> str:
    """Text without line breaks, cut to a length fit for a table."""
    folded = " ".join(text.split())
    return folded if len(folded) <= limit else folded[: limit - 3] + "..."


def _converted(column: Column, value: Any) -> Any:
    if column.dtype == "str":
        if not isinstance(value, str):
            raise WrongColumnError(f"column {column.name!r} must be text, got {type(value).__name__}")
        return value
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise WrongColumnError(f"column {column.name!r} must be one number, got {type(value).__name__}") from None
    if column.dtype == "float64":
        return number
    if not np.isfinite(number):
        raise WrongColumnError(f"column {column.name!r} must be a whole number, got {number}")
    return bool(number) if column.dtype == "bool" else int(number)
