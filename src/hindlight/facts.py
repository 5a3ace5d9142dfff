"""What a dialect is given and returns: a lean view of header cards, and the facts of one frame.

Only the cards asked for are parsed. The meaning of keywords is the dialects' business, not this module's.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import date
from functools import cached_property, lru_cache

CARD = 80
ORDINAL_OF_MJD = 678576  # of MJD 0, 1858-11-17, as Python counts days
Value = str | float | int | bool | None
NAN = float("nan")

_CONTROL = re.compile(r"[\x00-\x1f\x7f-\x9f\u2028\u2029\ud800-\udfff]")
_FREE = ("", "COMMENT", "HISTORY", "CONTINUE", "HIERARCH")  # may stand more than once
_RECORD = re.compile(r"(DP|DQ|D2IM)\d")  # hold many values each, as 'NAME: value' (M. R. Calabretta et al. 2004, draft)
_STRING = re.compile(r"\s*'((?:[^']|'')*)'")
_WHOLE = re.compile(r"[+-]?[0-9]+")
_REAL = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[EDed][+-]?[0-9]+)?")
_DATE = re.compile(r"\s*([+-]?\d{4,5})-(\d{1,2})-(\d{1,2})(?:[T ](\d{1,2}):(\d{1,2})(?::(\d{1,2}(?:\.\d*)?))?)?Z?\s*")


@dataclass(frozen=True)
class Moment:
    """An instant as a whole day (MJD) and seconds of that day, in whatever scale the header uses.

    `has_clock` is False where only the date is known; seconds are then 0.
    """

    mjd: int
    seconds: float
    has_clock: bool = True

    def plus(self, seconds: float) -> Moment:
        """This instant some seconds later."""
        days, rest = divmod(self.seconds + seconds, 86400.0)
        return Moment(self.mjd + int(days), rest, self.has_clock)

    @classmethod
    def from_mjd(cls, mjd: float) -> Moment:
        """An instant from one number (a double resolves about a microsecond)."""
        day = int(mjd // 1)
        return cls(day, (mjd - day) * 86400.0)

    @classmethod
    def from_iso(cls, text: str) -> Moment | None:
        """An instant from an ISO 8601 date with or without a time of day (FITS 4.0, 9.1.1); None if it is no date."""
        match = _DATE.fullmatch(text)
        if match is None:
            return None
        year, month, day, hour, minute, second = match.groups()
        try:
            mjd = date(int(year), int(month), int(day)).toordinal() - ORDINAL_OF_MJD
        except ValueError:  # the calendar has no such day
            return None
        if hour is None:
            return cls(mjd, 0.0, has_clock=False)
        seconds = int(hour) * 3600 + int(minute) * 60 + float(second or 0)
        if int(hour) > 24 or int(minute) > 59 or float(second or 0) >= 61 or seconds > 86401:
            return None
        return cls(mjd, seconds)


def visible(text: str) -> str:
    """Text with control characters (line breaks too) as \\xNN: fit for any table, and harmless on a terminal."""
    if text.isprintable():
        return text
    return _CONTROL.sub(lambda found: found[0].encode("unicode_escape").decode("ascii"), text)


@dataclass(frozen=True)
class PlaneAxes:
    """Where a plane lies on the axes beside the celestial ones.

    Each mapping goes from the axis type ('FREQ', 'STOKES', 'TIME', ...) to the plane's world coordinate, the step of
    the axis and its unit; an axis of length one is here too. `time_axis` is the type of a longer axis that is a time
    and so gives the plane its own, or '' where there is none.
    """

    values: dict[str, float] = field(default_factory=dict)
    steps: dict[str, float] = field(default_factory=dict)
    units: dict[str, str] = field(default_factory=dict)
    time_axis: str = ""


@dataclass(frozen=True)
class FrameFacts:
    """What a header says about one frame; NaN, '' or None where it says nothing.

    start, middle, end
        Instants in `scale` (an astropy time scale); with `span_s` any two of start, middle, end follow from one.
    exposure_s, span_s
        Good time, and time from first to last photon.
    beam_major, beam_minor, beam_angle
        Full widths at half maximum in arcsec, and position angle east of north in degrees.
    beam_in_pixels
        Whether the widths are in pixels instead, as some headers give the seeing.
    site
        ITRF metres, or None.
    barycentric
        Whether the times are already referred to the barycentre.
    electrons_per_unit, saturation, depth
        In units of the pixels after scaling.
    response, negative
        "linear", or "photographic" where measured fluxes need a curve of each frame's own; whether stars are darker than
        the sky.
    clock_error_s
        1-sigma error of the header's clock.
    good_time_fraction
        Where it is a number, the good time is this fraction of the time from start to end, whatever `exposure_s` says.
    primary_beam, primary_beam_fwhm_deg
        "corrected", "uncorrected" or "unknown"; the width of a Gaussian primary beam about the reference pixel.
    assumptions
        Words of `hindlight.ASSUMPTIONS`, one for each thing taken for granted.
    """

    instrument: str = ""
    band: str = ""
    stokes: str = "I"
    frequency_hz: float = NAN
    unit: str = ""
    beam_major: float = NAN
    beam_minor: float = NAN
    beam_angle: float = NAN
    beam_in_pixels: bool = False
    start: Moment | None = None
    middle: Moment | None = None
    end: Moment | None = None
    scale: str = "utc"
    exposure_s: float = NAN
    span_s: float = NAN
    barycentric: bool = False
    site: tuple[float, float, float] | None = None
    saturation: float = NAN
    electrons_per_unit: float = NAN
    depth: float = NAN
    primary_beam: str = "unknown"
    primary_beam_fwhm_deg: float = NAN
    response: str = "linear"
    negative: bool = False
    clock_error_s: float = NAN
    good_time_fraction: float = NAN
    assumptions: tuple[str, ...] = ()


class Cards:
    """Header cards by keyword, parsed when asked for; the first of a repeated keyword counts.

    `raw` holds the header's bytes up to END, without padding.
    """

    def __init__(self, raw: bytes) -> None:
        """Index the cards of `raw`, whole cards of 80 bytes."""
        self.raw = raw
        self._text = text = raw.decode("latin-1")
        starts = range(0, len(text) - CARD + 1, CARD)
        keys = [text[start : start + 8].rstrip() for start in starts]
        self._index = dict(zip(reversed(keys), reversed(starts), strict=True))  # the first of a repeated keyword stays
        self._repeats = len(keys) - len(self._index)
        if self._repeats:
            for key in _FREE:
                self._repeats -= keys.count(key) - 1 if key in self._index else 0

    def __contains__(self, key: str) -> bool:
        return key in self._index

    def has_any(self, keys: frozenset[str]) -> bool:
        """Whether one of several keywords is there."""
        return not self._index.keys().isdisjoint(keys)

    def __iter__(self) -> Iterator[str]:
        return reversed(self._index)

    @cached_property
    def contradicted(self) -> bool:
        """Whether a keyword stands more than once, with different values."""
        if not self._repeats:
            return False
        cards = [self._text[start : start + CARD] for start in range(0, len(self._text) - CARD + 1, CARD)]
        first: dict[str, str] = {}
        for card in cards:
            known = first.setdefault(card[:8], card)
            free = card[:8].rstrip() in _FREE or _RECORD.match(card)
            differs = known is not card and known != card and not free
            if differs and parse_value(card[10:]) != parse_value(known[10:]):
                return True
        return False

    def card(self, key: str) -> str:
        """The 80 characters of a card, '' where there is none."""
        start = self._index.get(key)
        return "" if start is None else self._text[start : start + CARD]

    def all_of(self, *keys: str) -> list[str]:
        """The text after the keyword of every card with one of these keywords, as for HISTORY and COMMENT."""
        starts = range(0, len(self._text) - CARD + 1, CARD)
        return [self._text[s + 8 : s + CARD].rstrip() for s in starts if self._text[s : s + 8].rstrip() in keys]

    def get(self, key: str) -> Value:
        """The value of a card as text, number or truth; None where it is absent, empty or no value at all."""
        start = self._index.get(key)
        if start is None or self._text[start + 8 : start + 10] != "= ":
            return None
        return parse_value(self._text[start + 10 : start + CARD])

    def text(self, key: str) -> str:
        """The value if it is text, without outer blanks; '' otherwise."""
        start = self._index.get(key)  # as `get` does it; most of the time that dialects take is spent here
        if start is None or self._text[start + 8 : start + 10] != "= ":
            return ""
        value = parse_value(self._text[start + 10 : start + CARD])
        return value.strip() if isinstance(value, str) else ""

    def number(self, key: str) -> float:
        """The value if it is a finite number, NaN otherwise; numbers written as text are not numbers."""
        start = self._index.get(key)
        if start is None or self._text[start + 8 : start + 10] != "= ":
            return NAN
        value = parse_value(self._text[start + 10 : start + CARD])
        if value is None or isinstance(value, str | bool):
            return NAN
        return float(value) if -1e300 < value < 1e300 else NAN

    def integer(self, key: str, default: int = 0) -> int:
        """The value if it is a whole number, `default` otherwise."""
        value = self.get(key)
        return value if isinstance(value, int) and not isinstance(value, bool) else default

    def first_number(self, *keys: str) -> float:
        """The first finite number among several keywords, NaN where there is none."""
        for key in keys:
            value = self.number(key)
            if value == value:
                return value
        return NAN

    def moment(self, key: str) -> Moment | None:
        """The value as an instant: an ISO date under a DATE keyword, a number under an MJD or JD keyword."""
        value = self.get(key)
        if isinstance(value, str):
            return Moment.from_iso(value)
        number = self.number(key)
        if number != number:
            return None
        return Moment.from_mjd(number - 2400000.5 if key.startswith("JD") else number)


@lru_cache(maxsize=16384)  # most cards of an archive repeat from file to file
def parse_value(text: str) -> Value:
    """The value in columns 11 to 80 of a card (FITS 4.0, 4.2): text, truth, whole or real number; None if none."""
    if "'" in text and (match := _STRING.match(text)):
        return match.group(1).replace("''", "'").rstrip()
    bare = text.partition("/")[0].strip()
    if bare in ("T", "F"):
        return bare == "T"
    if _WHOLE.fullmatch(bare):
        return int(bare)
    if _REAL.fullmatch(bare):
        return float(bare.upper().replace("D", "E"))
    return None
