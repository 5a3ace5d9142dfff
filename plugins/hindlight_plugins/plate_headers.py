"""Headers of scanned plates and of early detectors, where an observer's log book speaks.

An emulsion, or a card that numbers a plate, makes the response photographic; emulsion and filter make the band.

The date may be that of the night, with a time of day after midnight; the time may be local or sidereal; the exposure
may be in minutes. What the header itself can settle (by MJD, longitude, sidereal time, the stated offset of local
time) is settled, with a word; otherwise the frame has no clock. A day is never guessed.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace

from hindlight import (
    Cards,
    Dialect,
    FrameFacts,
    Moment,
    Observed,
    PlaneAxes,
    between,
    comment_of,
    east_longitude,
    east_or_west,
    greenwich_sidereal_s,
    has_old_times,
    hookimpl,
    julian_instant,
    read_clock,
    read_date,
    read_facts,
    separate_clock,
    sidereal_clock,
    spoken_exposure,
)

NUMBERED = ("PLTLABEL", "PLATENUM", "PLATE-ID", "PLATEID", "PLTRAH")
READ_OUT = frozenset(("RDNOISE", "READNOIS", "READNOI", "CCDTEMP", "CCD-TEMP"))  # of a detector that is no plate
NO_FILTER = ("", "NONE", "NO", "OPEN", "CLEAR")
PLATES = frozenset(("PLTLABEL", "PLATENUM", "PLATE-ID", "PLATEID", "PLATE", "PLTSCALE", "EMULSION", "PLTRAH"))
LOCAL_CLOCKS = ("LT", "LT-OBS", "LOCTIME", "LOC-TIME", "LOCALTIM", "TIME-LOC")
CLOCKS = ("TIME-OBS", "TIME_OBS", "START", "TIME-BEG")  # local only where the comment says so
ZONES = ("TIMEZONE", "TIMEZON", "TZ", "UTOFFSET", "UTC-OFF", "GMTOFF", "ZONE")
STARS = ("LST", "ST", "LST-OBS", "SIDTIME", "LMST")
HABITS = frozenset((*LOCAL_CLOCKS, *ZONES, *STARS, "NIGHT"))
DAY_S = 86400.0
SIDEREAL_RATE = 1.00273790935
DAY_BY_STARS_S = (60.0, 150.0)  # a day is 236 s of sidereal time: the right one fits to within, the wrong one is beyond
ZONE_H = 2.0  # clocks keep within this of the sun

_NIGHT = re.compile(r"\bnight|\bevening|\blocal date|\bcivil date", re.I)
_UTC_DATE = re.compile(r"\b(UTC?|GMT)\b")
_ZONE = re.compile(r"(?:UTC?|GMT)?\s*([+-])\s*(\d{1,2})(?::?(\d{2}))?(?:\.0*)?")
_UT_LESS_LOCAL = re.compile(r"\bU(TC?|niversal)\b\w*\s*(-|minus)\s*L|\bto (get|obtain|give) U", re.I)
_LOCAL_LESS_UT = re.compile(r"\b(LT|LST|local)\b[\w ]*(-|minus)\s*U|\b(from|ahead of) U", re.I)


@dataclass(frozen=True)
class PlateHeaders(Dialect):
    """Reads headers of plates, and others whose time is a night's, local or sidereal, or whose exposure is in minutes."""

    order = 30

    def recognises(self, cards: Cards) -> bool:
        """Whether a card names a plate, or one of these habits shows where DATE-OBS alone gives no instant."""
        if cards.has_any(PLATES):
            return True
        if cards.text("DATE-OBS")[10:11] == "T":
            return cards.text("TIMESYS").upper() in ("LOCAL", "LT")
        if cards.has_any(HABITS):
            return True
        return has_old_times(cards) and any(_speaks_of_night(cards, key) for key in ("DATE-OBS", *CLOCKS))

    def read(self, cards: Cards, axes: PlaneAxes) -> FrameFacts:
        """The facts of one plane."""
        facts = read_facts(cards, axes, _instant, spoken_exposure)
        emulsion = _joined(cards.text("EMULSION"))
        numbered = any(key in cards for key in NUMBERED) or bool(cards.text("PLATE"))
        if not emulsion and (not numbered or cards.has_any(READ_OUT)):
            return facts
        words = facts.assumptions if emulsion else (*facts.assumptions, "photographic_assumed")
        return replace(facts, band=_band(cards, emulsion), response="photographic", assumptions=words)


def _band(cards: Cards, emulsion: str) -> str:
    """Emulsion and filter as `PX40B+Y38`, or the code of the band pass where there is neither."""
    code = cards.get("BANDPASS")
    glass = _joined(cards.text("FILTER"))
    parts = [emulsion, "" if glass.upper() in NO_FILTER else glass]
    return "+".join(filter(None, parts)) or ("" if code is None else f"bandpass {code}")


def _joined(text: str) -> str:
    return "".join(text.split())


def _speaks_of_night(cards: Cards, key: str) -> bool:
    said = comment_of(cards, key)
    return bool(said) and (_NIGHT.search(said) is not None or "local" in said.lower())


def _instant(cards: Cards) -> Observed:
    """The instant by universal, local or sidereal time, in that order."""
    seen = separate_clock(cards)
    if seen.moment is None:
        return _of_night(cards)
    if cards.text("TIMESYS").upper() in ("LOCAL", "LT") or not seen.moment.has_clock:
        if "dates_disagree" in seen.words:
            return seen
        local = _local(cards, seen)
        return local if local is not None else _by_stars(cards, seen)
    return _right_day(cards, seen)


def _of_night(cards: Cards) -> Observed:
    """The date of a NIGHT card, where DATE-OBS gives none; its time of day is not looked for."""
    night = read_date(cards.get("NIGHT"))
    return Observed(night.moment, words=("century_assumed",) if night.century_assumed else ())


def _right_day(cards: Cards, seen: Observed) -> Observed:
    """The same with the day after where the date is that of the night and the time is after midnight."""
    if seen.moment is None or seen.date_only is None or "night_date" in seen.words:
        return seen
    if julian_instant(cards).moment is not None:  # it has been compared with the date already
        return seen
    east, next_day = east_longitude(cards), replace(seen.moment, mjd=seen.moment.mjd + 1)
    moved = seen._replace(moment=next_day, words=(*seen.words, "night_date"))
    if _is_night(cards):
        if east == east:
            return moved if _solar_days(seen.moment, east, seen.date_only) < 0.5 else seen
        return seen._replace(moment=replace(seen.date_only), words=(*seen.words, "night_unsettled"))
    stars = sidereal_clock(cards)
    if stars == stars and east == east and seen.moment.seconds < DAY_S / 2:
        near, far = DAY_BY_STARS_S
        if _off_stars(seen.moment, east, stars) > far and _off_stars(next_day, east, stars) < near:
            return moved
    return seen


def _is_night(cards: Cards) -> bool:
    """Whether the header says that its date is that of the night."""
    return "NIGHT" in cards or _NIGHT.search(comment_of(cards, "DATE-OBS")) is not None


def _solar_days(moment: Moment, east: float, date: Moment) -> float:
    """Mean solar days at the longitude from the beginning of a date to an instant."""
    longitude = (east + 180.0) % 360.0 - 180.0
    return between(moment, date) / DAY_S + longitude / 360.0


def _off_stars(moment: Moment, east: float, stars: float) -> float:
    """By how many seconds a sidereal time is not that of an instant at a longitude."""
    off = stars - greenwich_sidereal_s(moment) - east * 240.0
    return abs((off + DAY_S / 2) % DAY_S - DAY_S / 2)


def _local(cards: Cards, seen: Observed) -> Observed | None:
    """The instant by local time and its offset; None where no local time is given."""
    date = seen.moment
    if date is None:
        return None
    clock = date.seconds if date.has_clock else _local_clock(cards)
    if clock != clock:
        return None
    words = tuple(word for word in seen.words if word != "local_unsettled")
    day = replace(date, seconds=0.0, has_clock=False)
    offset = _zone_s(cards)
    if offset != offset:
        return Observed(day, scale="UTC", words=(*words, "local_unsettled"))
    moment = Moment(date.mjd, clock).plus(-offset)
    if _UTC_DATE.search(comment_of(cards, "DATE-OBS")):
        moment = replace(moment, mjd=date.mjd)
    elif _is_night(cards) and clock < DAY_S / 2:
        moment, words = moment.plus(DAY_S), (*words, "night_date")
    return Observed(moment, seen.which, "UTC", (*words, "local_time"))


def _local_clock(cards: Cards) -> float:
    """Seconds of the local day, NaN where no card gives them."""
    for key in (*LOCAL_CLOCKS, *CLOCKS):
        if key in cards and (key in LOCAL_CLOCKS or "local" in comment_of(cards, key).lower()):
            seconds, _ = read_clock(cards.get(key), 3600.0)
            if seconds == seconds:
                return seconds
    return float("nan")


def _zone_s(cards: Cards) -> float:
    """Seconds by which local time is ahead of universal time; NaN where that, or its sign, is not settled."""
    key = next((key for key in ZONES if key in cards), "")
    match = _ZONE.fullmatch(cards.text(key).upper())
    if match:
        sign, hours, minutes = match.groups()
        return (int(hours) * 3600 + int(minutes or 0) * 60) * (-1.0 if sign == "-" else 1.0)
    hours, said = cards.number(key), comment_of(cards, key)
    if not abs(hours) <= 14:
        return float("nan")
    sign = bool(_LOCAL_LESS_UT.search(said)) - bool(_UT_LESS_LOCAL.search(said)) or east_or_west(said)
    if not sign and hours:
        solar = ((east_longitude(cards) + 180.0) % 360.0 - 180.0) / 15.0
        sign = (abs(hours - solar) <= ZONE_H) - (abs(-hours - solar) <= ZONE_H)
    return hours * 3600.0 * sign if sign or not hours else float("nan")


def _by_stars(cards: Cards, seen: Observed) -> Observed:
    """The instant by sidereal time, where the header has no other: on the date, or in the night that begins on it.

    Where these differ, and the header does not say which is meant, the frame has no clock.
    """
    stars, east = sidereal_clock(cards), east_longitude(cards)
    if seen.moment is None or stars != stars or east != east:
        return seen
    date = replace(seen.moment, seconds=0.0)
    noon = replace(date, has_clock=True).plus(DAY_S / 2 - ((east + 180.0) % 360.0 - 180.0) * 240.0)
    of_night = _when(noon, stars, east)
    midnight = replace(date, has_clock=True)
    of_date = _when(midnight, stars, east)
    twice = of_date.plus(DAY_S / SIDEREAL_RATE).mjd == date.mjd
    words = (*seen.words, "sidereal_time")
    if _is_night(cards):
        return Observed(of_night, seen.which, "UT", words)
    said = _UTC_DATE.search(comment_of(cards, "DATE-OBS")) is not None
    if not twice and (said or abs(between(of_date, of_night)) < 1.0):
        return Observed(of_date, seen.which, "UT", words)
    return seen._replace(words=(*seen.words, "night_unsettled"))


def _when(first: Moment, stars: float, east: float) -> Moment:
    """The first instant from `first` on when the sidereal time at a longitude is `stars`."""
    wait = (stars - greenwich_sidereal_s(first) - east * 240.0) % DAY_S
    return first.plus(wait / SIDEREAL_RATE)


@hookimpl
def register_dialects() -> list[type[Dialect]]:
    """The one dialect of this module."""
    return [PlateHeaders]
