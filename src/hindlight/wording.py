"""Numbers in sentences: how many of something, and from where to where."""

from __future__ import annotations

import math


def how_many(count: int, one: str, several: str) -> str:
    """A count with the noun, and the verb where there is one, that go with it: '1 target was', '3 targets were'."""
    return f"{count} {one if count == 1 else several}"


def short(value: float, before: str = "", digits: int = 3) -> str:
    """A number with so many digits behind a mark; '' where there is none."""
    return f"{before}{float(value):.{digits}g}" if math.isfinite(value) else ""


def from_to(low: float, high: float, form: str = "") -> str:
    """The range of two numbers, and one number where both are written alike by the format `form`."""
    first, last = f"{low:{form}}", f"{high:{form}}"
    return first if first == last else f"{first} to {last}"
