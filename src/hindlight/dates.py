"""Dates and times of day as headers have written them for decades, and the sidereal time that goes with an instant.

Text and numbers in, a `Moment` or seconds out; what is ambiguous is said beside. Nothing here knows of keywords.
"""

from __future__ import annotations

import re
from typing import NamedTuple

from hindlight.facts import NAN, Moment, Value

DAY_S = 86400.0
J2000_MJD = 51544.5
MJD_1930 = 25977
SIDEREAL_RATE = 1.00273790935  # sidereal seconds in a second of universal time (Aoki et al. 1982, A&A 105, 359)

_MONTHS = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")
_PARTS = re.compile(r"(.*?)(?:[T\s]\s*(\d{1,2}:\d.*))?Z?", re.S)
_DAY_FIRST = re.compile(r"(\d{1,2})[-/.](\d{1,2})[-/.](\d{4})")
_TWO_DIGITS = re.compile(r"(\d{1,2})/\s?(\d{1,2})/(\d{2})")
_YEAR_FIRST = re.compile(r"(\d{4})[/.:](\d{1,2})[/.:](\d{1,2})|(\d{4})(\d{2})(\d{2})")
_NAMED = re.compile(r"(\d{1,2})[-\s/]([A-Z]{3})[-\s/](\d{4})")
_SEXAGESIMAL = re.compile(r"(\d{1,2})(?::|\s+|h\s*)(\d{1,2})(?:(?::|\s+|m\s*)(\d{1,2}(?:\.\d*)?)s?)?m?\s*Z?")
_ANGLE = re.compile(
    r"([+-]?)\s*(\d{1,3})(?:[:\s]+|[d\xb0]\s*)(\d{1,2})(?:(?:[:\s]+|[m']\s*)(\d{1,2}(?:\.\d*)?)[s\"]?)?m?'?"
)


class WrittenDate(NamedTuple):
    """A date as it was written: `two_digits` for a year that says no century, `day_first` where day and month could
    be the other way round.
    """

    moment: Moment | None = None
    two_digits: bool = False
    day_first: bool = False

    @property
    def century_assumed(self) -> bool:
        """Whether two digits from 00 to 29 were read as 1900 to 1929, where many mean this century."""
        return self.two_digits and self.moment is not None and self.moment.mjd < MJD_1930


def read_date(value: Value) -> WrittenDate:
    """A date, with or without a time of day, in any form that can be told.

    `DD/MM/YY` is 19YY (FITS 3.0, 4.4.2.2: never later); also `CCYY-MM-DD`, `CCYY/MM/DD`, `CCYYMMDD`, `DD-MM-CCYY`,
    `DD/MM/CCYY` and months by name. Other forms give no moment.
    """
    text = str(value) if isinstance(value, int) and not isinstance(value, bool) else value
    if not isinstance(text, str):
        return WrittenDate()
    found = None if "/" in text else Moment.from_iso(text)
    if found is not None:
        return WrittenDate(found)
    match = _PARTS.fullmatch(text.strip().upper())
    day, clock = (match.group(1).strip(), match.group(2)) if match else (text, None)
    written = _day(day)
    if written.moment is None or clock is None:
        return written
    seconds, _ = read_clock(clock)
    return written._replace(moment=Moment(written.moment.mjd, seconds) if seconds == seconds else None)


def _day(text: str) -> WrittenDate:
    match = _TWO_DIGITS.fullmatch(text)
    if match:
        day, month, year = match.groups()
        return WrittenDate(_moment(f"19{year}", month, day), two_digits=True)
    match = _DAY_FIRST.fullmatch(text)
    if match:
        day, month, year = match.groups()
        return WrittenDate(_moment(year, month, day), day_first=int(day) <= 12 and int(day) != int(month))
    match = _YEAR_FIRST.fullmatch(text)
    if match:
        year, month, day = (part for part in match.groups() if part is not None)
        return WrittenDate(_moment(year, month, day))
    match = _NAMED.fullmatch(text)
    if match and match.group(2) in _MONTHS:
        return WrittenDate(_moment(match.group(3), str(_MONTHS.index(match.group(2)) + 1), match.group(1)))
    return WrittenDate()


def _moment(year: str, month: str, day: str) -> Moment | None:
    return Moment.from_iso(f"{year}-{int(month):02d}-{int(day):02d}")


def read_clock(value: Value, unit_s: float = NAN) -> tuple[float, bool]:
    """Seconds of the day from sexagesimal text or a number, NaN where it is neither; and whether a unit was assumed.

    `unit_s` is the unit of a bare number in seconds where that is stated. Otherwise numbers up to 24 are hours, larger
    ones seconds. 24:00:00 and 60 seconds are times of day.
    """
    if isinstance(value, str):
        match = _SEXAGESIMAL.fullmatch(value.strip())
        if match:
            hours, minutes, seconds = int(match.group(1)), int(match.group(2)), float(match.group(3) or 0)
            total = hours * 3600 + minutes * 60 + seconds
            return (total if minutes < 60 and seconds < 61 and total <= 86401 else NAN), False
    number = _number(value)
    assumed = unit_s != unit_s
    if assumed:
        unit_s = 3600.0 if number <= 24 else 1.0
    total = number * unit_s
    return (total if 0 <= total <= 86401 else NAN), assumed


def read_angle(value: Value) -> float:
    """Degrees from a number or from text of degrees, minutes and seconds; NaN where it is neither."""
    if isinstance(value, str):
        match = _ANGLE.fullmatch(value.strip())
        if match:
            sign, degrees, minutes, seconds = match.groups()
            size = int(degrees) + int(minutes) / 60 + float(seconds or 0) / 3600
            return -size if sign == "-" else size
    return _number(value)


def _number(value: Value) -> float:
    if isinstance(value, bool):
        return NAN
    try:
        return float(value)  # type: ignore[arg-type]  # None and what is no number end in NaN
    except (TypeError, ValueError):
        return NAN


def greenwich_sidereal_s(moment: Moment) -> float:
    """Mean sidereal time at Greenwich in seconds, of an instant in universal time (Aoki et al. 1982, eqs. 13 and 14)."""
    centuries = (moment.mjd - J2000_MJD) / 36525.0
    midnight = 24110.54841 + centuries * (8640184.812866 + centuries * (0.093104 - 6.2e-6 * centuries))
    return (midnight + moment.seconds * SIDEREAL_RATE) % DAY_S


def between(first: Moment, second: Moment) -> float:
    """Seconds from `second` to `first`."""
    return (first.mjd - second.mjd) * DAY_S + first.seconds - second.seconds
