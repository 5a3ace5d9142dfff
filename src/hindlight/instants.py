"""When a frame was taken, by its header: instants, exposures and time scales, in the standard's order of trust and beyond.

The standard is FITS 4.0 (2018) with its paper on time (Rots et al. 2015, A&A 574, A36); `separate_clock` reads dates and
times of day in cards of their own. What is taken for granted is said by a word; nothing here knows where the site is.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import lru_cache
from typing import NamedTuple

from hindlight.dates import DAY_S, WrittenDate, between, read_clock, read_date
from hindlight.facts import NAN, Cards, Moment, PlaneAxes

SCALES = {
    "UTC": "utc", "UT": "utc", "GMT": "utc", "UT1": "ut1", "TAI": "tai", "IAT": "tai", "GPS": "tai",
    "TT": "tt", "TDT": "tt", "ET": "tt", "TDB": "tdb", "TCG": "tcg", "TCB": "tcb",
}  # fmt: skip
GPS_BEHIND_TAI_S = 19.0
SECONDS = {"s": 1.0, "min": 60.0, "h": 3600.0, "d": 86400.0, "a": 31557600.0, "yr": 31557600.0}
PLAUSIBLE_MJD = (15020, 88069)  # 1900 to 2100: an offset that leads elsewhere was not meant from MJD 0
LONGEST_FROM_ZERO_S = 100 * DAY_S  # a plane further from DATE-OBS is counted from something else
MOST_AXES = 9
REFERENCES = ("MJDREF", "MJDREFI", "JDREF", "JDREFI", "DATEREF")
NO_REFERENCE = (Moment(0, 0.0), Moment(-2400001, 43200.0))  # MJD 0 and JD 0: what is written where nothing is known
DISAGREE_S = 1.0
SAME_HOURS_S = 21600.0  # what is a day off to within this is the same time of another day
EXPOSURES = ("EXPTIME", "EXPOSURE", "ITIME", "EXP_TIME", "INTTIME", "ONTIME", "LIVETIME")
LIKELY_EXPOSURE_S = (1e-2, 1e5)
COADDS = ("NCOMBINE", "COADDS", "NCOADDS")
DATES = ("DATE-OBS", "DATE_OBS", "DATEOBS", "UT-DATE", "UTDATE")
CLOCKS = (
    "TIME-OBS", "TIME_OBS", "UTC-OBS", "UT-OBS", "UTSTART", "UT-START", "UTC", "UT", "UTIME", "START", "TIME-BEG",
)  # fmt: skip
JULIAN = ("MJD-OBS", "MJD", "MJDATE", "JD-OBS", "JD")
CLOCKS_OF_START = ("UTSTART", "UT-START", "START", "TIME-BEG")
_CLOCKS, _DATES, _COADDS, _JULIAN = map(frozenset, (CLOCKS, DATES, COADDS, JULIAN))
_TRUSTED = frozenset(("DATE-BEG", "MJD-BEG", "TSTART", "DATE-END", "MJD-END", "TSTOP", "DATE-AVG", "MJD-AVG"))
_COMMENT = re.compile(r"(?:\s*'(?:[^']|'')*')?[^/]*/(.*)")
_START = re.compile(r"\b(start|begin)")
_MIDDLE = re.compile(r"\bmid(dle|point|time|exp\w*)?\b|\bcent(er|re) of (the )?(exp|obs|int)|\b(mean|average) ")
_END = re.compile(r"\bend\b")
BRACKETED = re.compile(r"\[\s*([^\]]*?)\s*\]")
_SCALE = re.compile(r"\b(UTC|UT1|UT|GMT|TAI|IAT|GPS|TDT|TDB|TT|ET)\b")
_LOCAL = re.compile(r"\blocal\b(?! (mean |apparent )?sidereal)", re.I)
_UNITS_IN_WORDS = (
    (re.compile(r"\b(ms|msec|milli-?sec\w*)\b", re.I), 1e-3),
    (re.compile(r"\b(min|mins|minutes?)\b", re.I), 60.0),
    (re.compile(r"\b(hours?|hrs?)\b", re.I), 3600.0),
    (re.compile(r"\b(days?)\b", re.I), 86400.0),
    (re.compile(r"\b(s|secs?|seconds?)\b", re.I), 1.0),
)


class Observed(NamedTuple):
    """The instant that DATE-OBS and its like give: `which` of 'start', 'middle' or 'end' it is, the name of the time
    scale where a card says it, and what was taken for granted. `date_only` is the date where the time of day stood in
    a card of its own.
    """

    moment: Moment | None = None
    which: str = "start"
    scale: str = ""
    words: tuple[str, ...] = ()
    date_only: Moment | None = None


class Times(NamedTuple):
    """The instants of a frame in one time scale, and what was taken for granted."""

    start: Moment | None = None
    middle: Moment | None = None
    end: Moment | None = None
    exposure_s: float = NAN
    span_s: float = NAN
    scale: str = ""
    words: tuple[str, ...] = ()


Exposure = tuple[float, tuple[str, ...]]


def read_times(
    cards: Cards, axes: PlaneAxes, observed: Callable[[Cards], Observed], exposure: Callable[[Cards], Exposure]
) -> tuple[Times, str]:
    """The instants and their astropy time scale; instants without a clock where the scale is none we know."""
    good_time, words = exposure(cards)
    times = (
        _plane_times(cards, axes, observed, good_time) if axes.time_axis else _header_times(cards, observed, good_time)
    )
    if words:
        times = times._replace(words=(*times.words, *words))
    stated = axes.time_axis if axes.time_axis not in ("", "TIME") else times.scale or cards.text("TIMESYS")
    name = stated.upper().partition("(")[0].strip()  # the standard allows a realization, as in TT(TAI)
    if name not in SCALES and name:
        return without_clock(times), "utc"
    if not name and "no_clock" not in times.words:
        times = times._replace(words=(*times.words, "scale_assumed"))
    if name == "GPS":
        start, middle, end = (m.plus(GPS_BEHIND_TAI_S) if m and m.has_clock else m for m in times[:3])
        times = times._replace(start=start, middle=middle, end=end)
    return times, SCALES[name or "UTC"]


def has_old_times(cards: Cards) -> bool:
    """Whether the date is in no standard form, or its time of day in a card of its own: what `separate_clock` is for."""
    date = cards.text("DATE-OBS")
    if date[10:11] == "T":
        return False
    if cards.has_any(_CLOCKS):
        return True
    return (
        cards.has_any(_DATES)
        and any(key in cards and cards.get(key) != "" for key in DATES)
        and cards.moment("DATE-OBS") is None
    )


def comment_of(cards: Cards, key: str) -> str:
    """The comment of a card, '' where there is none."""
    text = cards.card(key)[10:]
    before, slash, after = text.partition("/")
    if not slash or before.count("'") % 2 == 0:  # the slash is not inside the value's quotes
        return after.strip()
    match = _COMMENT.match(text)
    return match.group(1).strip() if match else ""


def _header_times(cards: Cards, observed: Callable[[Cards], Observed], exposure: float) -> Times:
    """What the header says of the whole HDU, by order of trust; the first instant with a time of day counts."""
    span = cards.number("TELAPSE") * _time_unit(cards)
    span = span if span > 0 else NAN
    start = end = middle = None
    if cards.has_any(_TRUSTED):
        start = _instant(cards, "DATE-BEG", "MJD-BEG") or _relative(cards, "TSTART")
        end = _instant(cards, "DATE-END", "MJD-END") or _relative(cards, "TSTOP")
        middle = _instant(cards, "DATE-AVG", "MJD-AVG")
    if _has_clock(start) or _has_clock(end):
        known_start, known_end = (m if _has_clock(m) else None for m in (start, end))
        if known_start is None and known_end is not None:
            known_start = _start_before(known_end, observed(cards))
        return Times(known_start, None, known_end, exposure, span)
    if _has_clock(middle):
        return Times(None, middle, None, exposure, span)
    seen = observed(cards)
    if _has_clock(seen.moment):
        known: dict[str, Moment | None] = {seen.which: seen.moment}
        instants = (known.get("start"), known.get("middle"), known.get("end"))
        return Times(*instants, exposure, span, seen.scale, seen.words)
    dated = start or middle or seen.moment or end
    words = tuple(word for word in seen.words if word != "start_assumed")  # of what there is none
    return without_clock(Times(dated, None, None, exposure, span, seen.scale, words))


def _start_before(end: Moment, seen: Observed) -> Moment | None:
    """DATE-OBS as the start of an exposure whose end alone has a card of the newer kind; None where it may be another."""
    first = seen.moment
    certain = first is not None and first.has_clock and seen.which == "start" and not seen.words and not seen.scale
    return first if certain and first is not None and between(end, first) >= 0 else None


def stated_instant(cards: Cards) -> Observed:
    """DATE-OBS or MJD-OBS: the start of the exposure unless the card's comment says otherwise (FITS 4.0, 9.5)."""
    instant = _instant(cards, "DATE-OBS", "MJD-OBS")
    if not _has_clock(instant):
        return Observed(instant)
    other = cards.moment("MJD-OBS")
    which = _which(comment_of(cards, "MJD-OBS" if instant == other else "DATE-OBS"))
    words: tuple[str, ...] = ()
    if not which and instant and other and abs(between(instant, other)) > DISAGREE_S:
        words = ("start_assumed",)  # the two can only mean different instants of the exposure
    return Observed(instant, which or "start", words=words)


@lru_cache(maxsize=1024)  # comments repeat from file to file
def _which(comment: str) -> str:
    """Which instant of the exposure a comment says its card is, '' where it does not."""
    text = comment.lower()
    if _START.search(text):
        return "start"
    if _MIDDLE.search(text):
        return "middle"
    return "end" if _END.search(text) else ""


def separate_clock(cards: Cards) -> Observed:
    """A date in any form, with the time of day in a card of its own where the date has none, checked against MJD or JD.

    A date that is a day before or after MJD or JD is that of the night and gives way; one further off leaves the frame
    without a clock, as does a time of day that is local.
    """
    key = next((key for key in DATES if key in cards), "")
    written = read_date(cards.get(key))
    if written.moment is None:
        return julian_instant(cards)
    century = _century_words(cards, written)
    words: list[str] = []
    moment, comments, scale = written.moment, [comment_of(cards, key)], ""
    separate = not moment.has_clock
    if separate:
        clock_key, clock, words = clock_of_day(cards)
        if clock is None:
            other = julian_instant(cards)
            near = other.moment is not None and abs(other.moment.mjd - moment.mjd) <= 1
            if near:
                return other
            which, _, assumed = _said_which(comments, written.two_digits)
            return Observed(moment, which, words=(*century, *assumed))
        moment = clock if clock.mjd else replace(clock, mjd=moment.mjd)
        comments.insert(0, comment_of(cards, clock_key) + (" start" if clock_key in CLOCKS_OF_START else ""))
        scale = "UTC" if "UT" in clock_key else ""
    words = [*words, *century, *(["date_form"] if written.day_first else [])]
    if _LOCAL.search(comments[0]):
        return Observed(replace(moment, seconds=0.0, has_clock=False), words=(*words, "local_unsettled"))
    moment, more = _checked_day(cards, moment, separate)
    which, _, assumed = _said_which(comments, written.two_digits or "start_assumed" in more)
    words += [word for word in more if word != "start_assumed"]
    said = scale or next((found.group(1) for text in comments if (found := _SCALE.search(text))), "")
    date = written.moment if separate else None
    return Observed(moment, which, cards.text("TIMESYS") or said, (*words, *assumed), date)


def _century_words(cards: Cards, written: WrittenDate) -> tuple[str, ...]:
    """A word where the year has two digits that may be of this century, and no MJD or JD says which."""
    if written.moment is None or not written.century_assumed:
        return ()
    _, other = _julian(cards)
    said = other is not None and abs(other.mjd - written.moment.mjd) <= 1
    return () if said else ("century_assumed",)


def _said_which(comments: Sequence[str], doubtful: bool) -> tuple[str, str, tuple[str, ...]]:
    """Which instant the first comment to say so means, or the start, with a word where that is doubtful; as parts of

    an `Observed`, with a blank for the scale.
    """
    which = next(filter(None, map(_which, comments)), "")
    return which or "start", "", ("start_assumed",) if doubtful and not which else ()


def clock_of_day(cards: Cards) -> tuple[str, Moment | None, list[str]]:
    """The first card that holds a time of day: its keyword, the time on day 0 (or its own date), and words."""
    for key in CLOCKS:
        if key not in cards:
            continue
        value = cards.get(key)
        seconds, assumed = read_clock(value)
        if assumed:
            seconds, assumed = read_clock(value, _clock_unit(comment_of(cards, key)))
        if seconds == seconds:
            return key, Moment(0, seconds), ["clock_unit_assumed"] if assumed else []
        whole = read_date(value).moment if isinstance(value, str) else None
        if _has_clock(whole):
            return key, whole, []
    return "", None, []


@lru_cache(maxsize=1024)
def _clock_unit(comment: str) -> float:
    """Seconds in the unit that a comment states for a time of day, NaN where it states none."""
    bracket = BRACKETED.search(comment)
    if bracket and bracket.group(1).lower() in SECONDS:
        return SECONDS[bracket.group(1).lower()]
    text = re.sub(r"\b(h+|d+)[:/ ]m+[:/ ]\S+", "", comment, flags=re.I)  # hh:mm:ss is a form and no unit
    return next((unit for pattern, unit in _UNITS_IN_WORDS[2:] if pattern.search(text)), NAN)


def julian_instant(cards: Cards) -> Observed:
    """The instant by MJD-OBS, or by another card with a Julian date, whose reference is not defined anywhere."""
    key, moment = _julian(cards)
    if moment is None:
        return Observed()
    which = _which(comment_of(cards, key))
    words = () if which or key == "MJD-OBS" else ("start_assumed",)
    return Observed(moment, which or "start", words=words)


def _julian(cards: Cards) -> tuple[str, Moment | None]:
    for key in JULIAN if cards.has_any(_JULIAN) else ():
        number = cards.number(key)
        if number == number:
            moment = Moment.from_mjd(number - 2400000.5 if key.startswith("JD") else number)
            if PLAUSIBLE_MJD[0] <= moment.mjd < PLAUSIBLE_MJD[1] and number % 1:
                return key, moment
    return "", None


def _checked_day(cards: Cards, moment: Moment, separate: bool) -> tuple[Moment, tuple[str, ...]]:
    """The instant, moved by a day where the date stood apart and MJD or JD says so; without clock where they disagree.

    MJD-OBS that differs by less can only mean another instant of the exposure, and leaves open which is the start.
    """
    key, other = _julian(cards)
    if other is None:
        return moment, ()
    apart = between(other, moment)
    days = round(apart / DAY_S)
    if days == 0:
        return moment, ("start_assumed",) if key == "MJD-OBS" and abs(apart) > DISAGREE_S else ()
    if separate and abs(days) == 1 and abs(apart - days * DAY_S) < SAME_HOURS_S:
        return replace(moment, mjd=moment.mjd + days), ("night_date",)
    return replace(moment, seconds=0.0, has_clock=False), ("dates_disagree",)


def _plane_times(cards: Cards, axes: PlaneAxes, observed: Callable[[Cards], Observed], exposure: float) -> Times:
    """The instant of one plane on a time axis: its pixel is centred on its world coordinate.

    Without a usable coordinate, unit or zero the plane has no clock: planes are never spread over the file's span.
    """
    axis = axes.time_axis
    value = axes.values.get(axis, NAN)
    unit = SECONDS.get(axes.units.get(axis, "") or cards.text("TIMEUNIT") or "s", NAN)
    middle = after_reference(cards, value * unit)
    step = abs(axes.steps.get(axis, NAN) * unit) or NAN
    words: tuple[str, ...] = ()
    if step == step and not exposure <= step:
        exposure, words = step, ("plane_exposure",)  # what the header states is longer: that of all planes together
    if middle is not None:
        return Times(None, middle, None, exposure, step, words=words)
    seen = observed(cards)
    middle = _after_date(cards, axes, seen, unit)
    if middle is not None:
        return Times(None, middle, None, exposure, step, seen.scale, (*words, "axis_zero_assumed", *seen.words))
    dated = _header_times(cards, observed, exposure)
    said = tuple(word for word in dated.words if word not in ("start_assumed", "no_clock"))
    day = dated.start or dated.middle or dated.end
    return without_clock(Times(day, None, None, exposure, step, words=(*words, *said, "axis_time_unknown")))


def _after_date(cards: Cards, axes: PlaneAxes, seen: Observed, unit: float) -> Moment | None:
    """The instant of a plane whose axis has no reference, with DATE-OBS for the axis' zero; None where that may not be.

    By the standard the zero is MJD 0 then (FITS 4.0, 9.2.2; Rots et al. 2015, 4.2.2), which is asked before this and
    leads to no likely date. DATE-OBS stands in where it is the start, with a time of day, in the axis' time scale, and
    the axis does not count from midnight: its first plane would then be at the time of day of DATE-OBS.
    """
    seconds = axes.values.get(axes.time_axis, NAN) * unit
    zero = seen.moment
    if zero is None or not zero.has_clock or seen.which != "start" or not abs(seconds) <= LONGEST_FROM_ZERO_S:
        return None
    if not _lacks_reference(cards) or not _scales_agree(axes.time_axis, seen.scale or cards.text("TIMESYS")):
        return None
    step = abs(axes.steps.get(axes.time_axis, NAN) * unit)
    if zero.seconds > step and abs(_first_coordinate(cards, axes) * unit - zero.seconds) <= step:
        return None
    offset = cards.number("TIMEOFFS") * _time_unit(cards)
    return zero.plus(seconds + (0.0 if offset != offset else offset))


def _lacks_reference(cards: Cards) -> bool:
    """Whether no card gives a time reference, or only the zero of a calendar; one that cannot be read is a reference."""
    unreadable = any(cards.text(key) and cards.moment(key) is None for key in REFERENCES)
    return not unreadable and _reference(cards) in NO_REFERENCE


def _scales_agree(axis: str, date: str) -> bool:
    """Whether a time axis of this type counts in the scale of DATE-OBS, which is UTC where none is named."""
    name = date.upper().partition("(")[0].strip() or "UTC"
    return axis == "TIME" or (SCALES.get(axis) == SCALES.get(name) and (axis == "GPS") == (name == "GPS"))


def _first_coordinate(cards: Cards, axes: PlaneAxes) -> float:
    """The world coordinate of the first plane of the time axis, in the axis' unit; NaN where no card says it."""
    types = (cards.text(f"CTYPE{i}").upper().partition("-")[0].strip() for i in range(1, MOST_AXES + 1))
    number = next((i for i, kind in enumerate(types, 1) if kind == axes.time_axis), 0)
    pixel = cards.number(f"CRPIX{number}")
    first = 1.0 - (0.0 if pixel != pixel else pixel)
    return cards.number(f"CRVAL{number}") + first * axes.steps.get(axes.time_axis, NAN)


def stated_exposure(cards: Cards) -> Exposure:
    """Good time in seconds: XPOSURE, EXPTIME or one of its like, in seconds unless its comment has another unit in

    brackets (FITS 4.0, 4.3.2).
    """
    return _exposure(cards, _bracketed_unit)


@lru_cache(maxsize=1024)
def _bracketed_unit(comment: str) -> float:
    bracket = BRACKETED.search(comment)
    return SECONDS.get(bracket.group(1), 1.0) if bracket else 1.0


def spoken_exposure(cards: Cards) -> Exposure:
    """The same, with the unit in whatever words the comment has it, as in 'exposure time minutes'."""
    return _exposure(cards, _spoken_unit)


@lru_cache(maxsize=1024)
def _spoken_unit(comment: str) -> float:
    bracket = BRACKETED.search(comment)
    if bracket and bracket.group(1) in SECONDS:
        return SECONDS[bracket.group(1)]
    return next((unit for pattern, unit in _UNITS_IN_WORDS if pattern.search(comment)), 1.0)


def _exposure(cards: Cards, unit_of: Callable[[str], float]) -> Exposure:
    exposure = cards.number("XPOSURE") * _time_unit(cards)
    if exposure > 0:
        return exposure, _exposure_words(exposure)
    for key in EXPOSURES:
        exposure = cards.number(key)
        if exposure == exposure:
            break
    if not exposure > 0:
        return NAN, ()
    exposure *= unit_of(comment_of(cards, key))
    words = ("coadds",) if cards.has_any(_COADDS) and any(cards.number(count) > 1 for count in COADDS) else ()
    return exposure, (*_exposure_words(exposure), *words)


def _exposure_words(exposure: float) -> tuple[str, ...]:
    return () if LIKELY_EXPOSURE_S[0] <= exposure <= LIKELY_EXPOSURE_S[1] else ("exposure_doubtful",)


def _time_unit(cards: Cards) -> float:
    return SECONDS.get(cards.text("TIMEUNIT") or "s", NAN) if "TIMEUNIT" in cards else 1.0


def _instant(cards: Cards, *keys: str) -> Moment | None:
    """The first of several keywords that gives a date and time of day, else the first that gives a date."""
    dated = None
    for key in keys:
        moment = cards.moment(key) if key in cards else None
        if moment is not None and moment.has_clock:
            return moment
        dated = dated or moment
    return dated


def _relative(cards: Cards, key: str) -> Moment | None:
    """An instant that is given as an offset from the header's time reference."""
    if key not in cards:
        return None
    return after_reference(cards, cards.number(key) * _time_unit(cards))


def after_reference(cards: Cards, seconds: float) -> Moment | None:
    """The header's time reference, MJD 0 where it has none, and so many seconds; None where that is no likely date."""
    offset = cards.number("TIMEOFFS") * _time_unit(cards)
    seconds += 0.0 if offset != offset else offset
    reference = _reference(cards)
    if not math.isfinite(seconds) or not reference.has_clock:
        return None
    moment = reference.plus(seconds)
    return moment if PLAUSIBLE_MJD[0] <= moment.mjd < PLAUSIBLE_MJD[1] else None


def _reference(cards: Cards) -> Moment:
    """MJDREF before JDREF before DATEREF; the first two may be split into whole days and a fraction."""
    for stem, zero in (("MJDREF", 0.0), ("JDREF", 2400000.5)):
        whole, part = cards.number(f"{stem}I"), cards.number(f"{stem}F")
        if whole == whole:
            rest = Moment.from_mjd((0.0 if part != part else part) - zero % 1)
            return replace(rest, mjd=rest.mjd + int(whole - zero // 1))
        if cards.number(stem) == cards.number(stem):
            return Moment.from_mjd(cards.number(stem) - zero)
    date = cards.moment("DATEREF")
    return replace(date, has_clock=True) if date else Moment(0, 0.0)


def without_clock(times: Times) -> Times:
    """The same with no more than a date."""
    start, middle, end = (m and Moment(m.mjd, 0.0, has_clock=False) for m in times[:3])
    words = tuple(dict.fromkeys((*times.words, "no_clock")))
    return times._replace(start=start, middle=middle, end=end, words=words)


def _has_clock(moment: Moment | None) -> bool:
    return moment is not None and moment.has_clock
