"""Where a frame was taken, by its header: the site, and whether its times hold there or at the barycentre.

Older cards leave open whether east or west is positive; what settles it is looked for, and not guessed.
"""

from __future__ import annotations

import math
import re
from functools import lru_cache

from astropy.coordinates import EarthLocation

from hindlight.dates import greenwich_sidereal_s, read_angle, read_clock, read_date
from hindlight.facts import NAN, Cards, Moment
from hindlight.instants import DATES, clock_of_day, comment_of

EARTH_RADII_M = (6.33e6, 6.40e6)
PLACES = (
    ("LATITUDE", "LONGITUD"), ("SITELAT", "SITELONG"), ("LAT-OBS", "LONG-OBS"), ("OBS-LAT", "OBS-LONG"),
    ("OBSLAT", "OBSLON"), ("GEOLAT", "GEOLON"), ("LAT", "LONG"), ("LAT", "LON"),
)  # fmt: skip
HEIGHTS = ("ALTITUDE", "SITEALT", "SITEELEV", "ALT-OBS", "OBS-ELEV", "HEIGHT", "ELEVATIO")
SIDEREAL = ("LST", "ST", "LST-OBS", "SIDTIME", "LMST")
SAME_LONGITUDE_DEG = 2.0
_OLD_PLACES = frozenset(longitude for _, longitude in PLACES)

_EAST, _WEST = (re.compile(rf"\b((?i:{word})|{word[0].upper()}\b)") for word in ("east", "west"))
_NORTH, _SOUTH = (re.compile(rf"\b((?i:{word})|{word[0].upper()}\b)") for word in ("north", "south"))
_MINUS_EAST, _MINUS_WEST = (
    re.compile(
        rf"({word}\w*|\b{word[0]})\s*(is|are|=|:)?\s*(neg|minus)"
        rf"|((neg\w*|minus)\s*(is|=|:|for)?\s*|-)\b({word}|{word[0]}\b)",
        re.I,
    )
    for word in ("east", "west")
)


def read_place(cards: Cards) -> tuple[str, tuple[float, float, float] | None, tuple[str, ...]]:
    """Where the times hold ('site', 'barycentre' or 'elsewhere'), the site in ITRF metres if it is known, and words."""
    name = cards.text("TREFPOS").upper() or "TOPOCENTER"
    if name.startswith("BARYCENT"):
        return "barycentre", None, ()
    if name.startswith("GEOCENT"):
        return "site", (0.0, 0.0, 0.0), ()
    return ("site" if name.startswith("TOPOCENT") else "elsewhere"), *_site(cards)


def _site(cards: Cards) -> tuple[tuple[float, float, float] | None, tuple[str, ...]]:
    """OBSGEO-X, -Y, -Z or OBSGEO-B, -L, -H, if that is a place on the ground; else an older card's latitude and

    longitude, if it is settled whether east or west is positive.
    """
    x, y, z = cards.number("OBSGEO-X"), cards.number("OBSGEO-Y"), cards.number("OBSGEO-Z")
    if EARTH_RADII_M[0] < math.sqrt(x * x + y * y + z * z) < EARTH_RADII_M[1]:
        return (x, y, z), ()
    latitude, longitude, height = (cards.number(f"OBSGEO-{axis}") for axis in "BLH")
    if abs(latitude) <= 90 and abs(longitude) <= 360 and -500 < height < 10_000:
        return _from_geodetic(latitude, longitude, height), ()
    keys = _place_keys(cards)
    if keys is None:
        return None, ()
    east = east_longitude(cards)
    if east != east:
        return None, ("site_unsettled",)
    return _from_geodetic(_latitude(cards, keys[0]), east, _height(cards)), ()


def _place_keys(cards: Cards) -> tuple[str, str] | None:
    """The pair of cards that gives a possible latitude and longitude."""
    if not cards.has_any(_OLD_PLACES):
        return None
    for latitude, longitude in PLACES:
        if latitude in cards and longitude in cards:
            size = _unsigned(cards, longitude)
            if abs(_latitude(cards, latitude)) <= 90 and abs(size) <= 360:
                return latitude, longitude
    return None


def _latitude(cards: Cards, key: str) -> float:
    text, said = cards.text(key).upper(), comment_of(cards, key)
    size = _unsigned(cards, key)
    southern = _SOUTH.search(said) and not _NORTH.search(said) and "neg" not in said
    return -abs(size) if southern or "S" in (text[-1:], text[:1]) else size


def _unsigned(cards: Cards, key: str) -> float:
    """Degrees of a latitude or longitude, without what a letter says of the direction."""
    value = cards.get(key)
    return read_angle(value.strip().strip("NSEWnsew ") if isinstance(value, str) else value)


def _height(cards: Cards) -> float:
    """Metres above the ellipsoid where a card says metres, else 0: an error of 3 km is one of 10 microseconds."""
    for key in HEIGHTS:
        height = cards.number(key)
        if -500 < height < 10_000 and re.search(r"\b(m|met(er|re)s?)\b", comment_of(cards, key)):
            return height
    return 0.0


def east_longitude(cards: Cards) -> float:
    """Degrees east of Greenwich by OBSGEO or by an older card whose direction is settled; NaN otherwise.

    Settled it is by a letter beside the number, by the comment, or by a sidereal time that only one sign can have.
    """
    if cards.number("OBSGEO-L") == cards.number("OBSGEO-L"):
        return cards.number("OBSGEO-L")
    x, y = cards.number("OBSGEO-X"), cards.number("OBSGEO-Y")
    if x == x and y == y:
        return math.degrees(math.atan2(y, x))
    keys = _place_keys(cards)
    if keys is None:
        return NAN
    size, text = _unsigned(cards, keys[1]), cards.text(keys[1]).upper()
    sign = (
        {"E": 1, "W": -1}.get(text[-1:]) or {"E": 1, "W": -1}.get(text[:1]) or east_or_west(comment_of(cards, keys[1]))
    )
    if sign:
        return sign * size
    by_stars = _longitude_by_stars(cards)
    fits = [lon for lon in (size, -size) if abs((lon - by_stars + 180) % 360 - 180) < SAME_LONGITUDE_DEG]
    return fits[0] if len(fits) == 1 else NAN


def east_or_west(comment: str) -> int:
    """1 where a comment says that east is positive, -1 for west, 0 where it says neither or both."""
    if _MINUS_WEST.search(comment) or _MINUS_EAST.search(comment):
        return bool(_MINUS_WEST.search(comment)) - bool(_MINUS_EAST.search(comment))
    return bool(_EAST.search(comment)) - bool(_WEST.search(comment))


def _longitude_by_stars(cards: Cards) -> float:
    """The longitude at which the header's sidereal time is that of its instant, NaN where it has not both."""
    sidereal = sidereal_clock(cards)
    if sidereal != sidereal:
        return NAN
    key = next((key for key in DATES if key in cards), "")
    moment = read_date(cards.get(key)).moment
    if moment is not None and not moment.has_clock:
        _, clock, _ = clock_of_day(cards)
        moment = clock and Moment(moment.mjd, clock.seconds)
    return NAN if moment is None else (sidereal - greenwich_sidereal_s(moment)) / 240.0


def sidereal_clock(cards: Cards) -> float:
    """The header's local sidereal time in seconds, NaN where it has none."""
    for key in SIDEREAL:
        if key in cards:
            seconds, _ = read_clock(cards.get(key), 3600.0)
            if seconds == seconds:
                return seconds
    return NAN


@lru_cache(maxsize=256)
def _from_geodetic(latitude: float, longitude: float, height: float) -> tuple[float, float, float]:
    place = EarthLocation.from_geodetic(longitude, latitude, height)
    x, y, z = (float(axis.to_value("m")) for axis in (place.x, place.y, place.z))
    return x, y, z
