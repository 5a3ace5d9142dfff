"""Times in bulk: header instants to TDB and UTC, and the way from the barycentre to the observatory.

Everything is seconds from J2000.0 TDB (JD 2451545.0 TDB) in float64, which resolves 0.1 microsecond over a century.
Fundamental arguments, Earth and leap seconds come from ERFA and from the Earth-rotation table that astropy bundles;
nothing is ever downloaded. Instants outside 1850 to 2150 are taken for none: no image is that old. The built-in
ephemeris was fitted to 1900 to 2100.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache
from typing import Any

import erfa
import numpy as np
from astropy.utils import iers
from numpy.typing import NDArray

from hindlight.dates import greenwich_sidereal_s
from hindlight.facts import Moment
from hindlight.lightcurve import FloatArray

SCALES = ("utc", "ut1", "tai", "tt", "tdb", "tcg", "tcb")
DAY_S = 86400.0
TT_MINUS_TAI_S = 32.184
MJD_ZERO = 2400000.5
J2000_MJD = 51544.5
J2000_JD = 2451545.0
FIRST_MJD, LAST_MJD = -3242, 106_302  # 1850-01-01 and 2150-01-01
UTC_BEGINS_MJD = 36934  # 1960-01-01
LEAP_SECONDS_BEGIN_MJD = 41317  # 1972-01-01
AU_LIGHT_S = 499.004783836156412  # IAU 2012 astronomical unit over c
LIGHT_M_S = 299792458.0


def to_tdb(moments: Sequence[Moment | None], scales: Sequence[str], sites: FloatArray) -> FloatArray:
    """Seconds from J2000.0 TDB at the site, shape (n,); NaN for None and for instants outside 1850 to 2150.

    `scales` are words of `SCALES`, one for each instant; `sites` has shape (n, 3), ITRF metres, NaN for the geocentre.
    Day and seconds are kept apart until the end, so that nothing is lost to rounding: errors stay below a microsecond.
    Times in 'utc' before 1960 are universal time by the Earth's rotation (to a second, see `_delta_t`).
    Raises `ValueError` for another scale.
    """
    unknown = set(scales) - set(SCALES)
    if unknown:
        raise ValueError(f"time scale {sorted(unknown)[0]!r} is none of {', '.join(SCALES)}")
    day = np.array([FIRST_MJD - 1 if m is None else m.mjd for m in moments], dtype=float)
    seconds = np.array([0.0 if m is None else m.seconds for m in moments], dtype=float)
    good = (day >= FIRST_MJD) & (day < LAST_MJD)
    result = np.full(len(day), np.nan)
    result[good] = _to_tdb(day[good], seconds[good], np.array(scales, dtype=object)[good], np.asarray(sites)[good])
    return result


def _to_tdb(day: FloatArray, seconds: FloatArray, scale: NDArray[Any], sites: FloatArray) -> FloatArray:
    tt = seconds.copy()  # seconds of the day `day` in TT; TDB itself where the scale is one of the barycentre
    earth_rotation = scale == "ut1"
    utc = seconds - np.where(earth_rotation & (day >= UTC_BEGINS_MJD), _ut1_minus_utc(day, seconds), 0.0)
    universal = earth_rotation | (scale == "utc")
    tt[universal] = (utc + _tai_minus_utc(day, utc) + TT_MINUS_TAI_S)[universal]
    tt[scale == "tai"] += TT_MINUS_TAI_S
    for name, convert in (("tcg", erfa.tcgtt), ("tcb", erfa.tcbtdb)):
        own = scale == name
        whole, part = convert(MJD_ZERO + day[own], seconds[own] / DAY_S)
        tt[own] = ((whole - MJD_ZERO - day[own]) + part) * DAY_S
    terrestrial = ~((scale == "tdb") | (scale == "tcb"))
    tt[terrestrial] += _tdb_minus_tt(day[terrestrial], tt[terrestrial], sites[terrestrial])
    return (day - J2000_MJD) * DAY_S + tt


def _tdb_minus_tt(day: FloatArray, seconds: FloatArray, sites: FloatArray) -> FloatArray:
    """TDB - TT in seconds at a site (Fairhead & Bretagnon 1990, through ERFA's dtdb)."""
    x, y, z = np.where(np.isfinite(sites), sites, 0.0).T / 1000.0
    # Universal time enters only terms of 2 microseconds, so that TT less a minute or so would do.
    universal = (seconds - TT_MINUS_TAI_S - _tai_minus_utc(day, seconds)) / DAY_S % 1.0
    result: FloatArray = erfa.dtdb(MJD_ZERO + day, seconds / DAY_S, universal, np.arctan2(y, x), np.hypot(x, y), z)
    return result


def _tai_minus_utc(day: FloatArray, seconds: FloatArray) -> FloatArray:
    """TAI - UTC in seconds at a UTC day and seconds of it; before 1960 TAI - UT1, extended into the past."""
    result = np.empty(len(day))
    modern, old = day >= LEAP_SECONDS_BEGIN_MJD, day < UTC_BEGINS_MJD
    starts, offsets = _leap_seconds()
    result[modern] = offsets[np.searchsorted(starts, day[modern], side="right") - 1]
    result[old] = _delta_t(day[old] + seconds[old] / DAY_S) - TT_MINUS_TAI_S
    between = ~(modern | old)
    if between.any():
        year, month, number, _ = erfa.jd2cal(MJD_ZERO, day[between])
        result[between] = erfa.dat(year, month, number, np.clip(seconds[between] / DAY_S, 0.0, 1.0))
    return result


def _leap_seconds() -> tuple[FloatArray, FloatArray]:
    """MJD from which each TAI - UTC since 1972 holds, and its value in seconds."""
    table = erfa.leap_seconds.get()
    table = table[table["year"] >= 1972]
    _, starts = erfa.cal2jd(table["year"], table["month"], 1)
    return starts, table["tai_utc"]


def _delta_t(mjd: FloatArray) -> FloatArray:
    """TT - UT1 in seconds before 1960, to about a second (polynomials of Espenak & Meeus 2006, NASA/TP-2006-214141)."""
    year = 2000.0 + (mjd - J2000_MJD) / 365.25
    coefficients = (
        (1860.0, 1860.0, (7.62, 0.5737, -0.251754, 0.01680668, -0.0004473624, 1 / 233174)),
        (1900.0, 1900.0, (-2.79, 1.494119, -0.0598939, 0.0061966, -0.000197)),
        (1920.0, 1920.0, (21.20, 0.84493, -0.076100, 0.0020936)),
        (1941.0, 1950.0, (29.07, 0.407, -1 / 233, 1 / 2547)),
    )
    result = np.full(len(mjd), 7.62)
    for begins, origin, series in coefficients:
        later = year >= begins
        result[later] = np.polynomial.polynomial.polyval(year[later] - origin, series)
    return result


@lru_cache(maxsize=1)
def _earth_rotation() -> Any:
    """The table of UT1 - UTC that astropy bundles."""
    return iers.IERS_B.open()


def _ut1_minus_utc(day: FloatArray, seconds: FloatArray) -> FloatArray:
    """UT1 - UTC in seconds; outside the bundled table its nearest value, at worst a second off."""
    if len(day) == 0:
        return np.zeros(0)
    value, _ = _earth_rotation().ut1_utc(MJD_ZERO + day, seconds / DAY_S, return_status=True)
    return np.asarray(value.to_value("s"))


def iso_utc(tdb_seconds: FloatArray) -> list[str]:
    """ISO 8601 UTC with milliseconds for seconds from J2000.0 TDB, shape (n,); '' for NaN.

    A leap second is written with 60 seconds. Before 1960 the text is universal time by the Earth's rotation.
    """
    tdb = np.asarray(tdb_seconds, dtype=float)
    good = np.isfinite(tdb)
    day, seconds = _utc_of(tdb[good])
    milliseconds = np.rint(seconds * 1000.0).astype(np.int64)
    length = np.where(np.isin(day + 1, _leap_seconds()[0]), 86_401_000, 86_400_000)
    over = milliseconds >= length
    day, milliseconds = day + over, milliseconds - np.where(over, length, 0)
    leap = milliseconds >= 86_400_000
    start = np.datetime64("1858-11-17", "ms") + day.astype("timedelta64[D]")
    text = np.datetime_as_string(start + (milliseconds - 1000 * leap).astype("timedelta64[ms]"), unit="ms")
    result = np.full(len(tdb), "", dtype=object)
    result[good] = [t.replace(":59.", ":60.") if inside else t for t, inside in zip(text.tolist(), leap, strict=True)]
    return list(result)


def _utc_of(tdb: FloatArray) -> tuple[FloatArray, FloatArray]:
    """UTC as MJD day and seconds of it, 86400 and more within a leap second; good to 20 microseconds."""
    tai = tdb - TT_MINUS_TAI_S - _roughly_tdb_minus_tt(tdb)
    starts, offsets = _leap_seconds()
    era = np.searchsorted((starts - J2000_MJD) * DAY_S + offsets, tai, side="right") - 1
    old = era < 0
    offset = np.where(old, 0.0, offsets[era])
    for _ in range(3):  # the offset depends on the UTC that is sought
        utc = tai[old] - offset[old]
        day_old = np.floor(utc / DAY_S + J2000_MJD)
        offset[old] = _tai_minus_utc(day_old, utc - (day_old - J2000_MJD) * DAY_S)
    utc = tai - offset
    last_day = np.append(starts[1:], np.inf)[era] - 1
    day = np.minimum(np.floor(utc / DAY_S + J2000_MJD), np.where(old, np.inf, last_day))
    return day, utc - (day - J2000_MJD) * DAY_S


def _roughly_tdb_minus_tt(tdb: FloatArray) -> FloatArray:
    """TDB - TT in seconds to 10 microseconds (Kaplan 2005, USNO Circular 179, eq. 2.6), for where that will do."""
    t = tdb / (36525 * DAY_S)
    return np.asarray(
        0.001657 * np.sin(628.3076 * t + 6.2401)
        + 0.000022 * np.sin(575.3385 * t + 4.2970)
        + 0.000014 * np.sin(1256.6152 * t + 6.1969)
        + 0.000005 * np.sin(606.9777 * t + 4.0212)
        + 0.000005 * np.sin(52.9691 * t + 0.4444)
        + 0.000002 * np.sin(21.3299 * t + 5.5431)
        + 0.000010 * t * np.sin(628.3076 * t + 4.2490)
    )


def observatory_vectors(middle_tdb_s: FloatArray, sites: FloatArray) -> FloatArray:
    """From the Solar-System barycentre to the observatory in light-seconds, ICRS axes, shape (n, 3).

    `middle_tdb_s` has shape (n,), `sites` (n, 3), ITRF metres, NaN for the geocentre; NaN times give NaN. The Earth is
    ERFA's epv00 (about 50 microseconds), its rotation IAU 2000B with UT1 from the bundled table (about 1 microsecond).
    The convention is that of `astropy.time.Time.light_travel_time`, which takes aberration off the short vector to the
    site as if that were a source (2.1 microseconds): whoever checks a time with astropy finds the same.
    """
    result = np.full((len(middle_tdb_s), 3), np.nan)
    good = np.isfinite(middle_tdb_s)
    times = np.asarray(middle_tdb_s)[good]
    # The bare function: the other warns outside 1900 to 2100, the years its series were fitted to.
    _, barycentric, _ = erfa.ufunc.epv00(J2000_JD, times / DAY_S)
    vectors = np.array(barycentric["p"]) * AU_LIGHT_S
    sites = np.asarray(sites)[good]
    there = np.isfinite(sites).all(axis=1)
    if there.any():
        velocity = np.array(barycentric["v"])[there] * AU_LIGHT_S / DAY_S
        vectors[there] += _less_aberration(_from_geocentre(times[there], sites[there]), velocity)
    result[good] = vectors
    return result


def _less_aberration(vectors: FloatArray, velocity: FloatArray) -> FloatArray:
    """Vectors turned from apparent to geometric direction, to first order in the velocity (in units of light's)."""
    x, y, z = vectors.T
    vx, vy, vz = velocity.T
    length = np.sqrt(x * x + y * y + z * z)
    along = (x * vx + y * vy + z * vz) / length
    return np.stack([x - length * vx + along * x, y - length * vy + along * y, z - length * vz + along * z], axis=1)


def _from_geocentre(tdb: FloatArray, sites: FloatArray) -> FloatArray:
    """ITRF metres to light-seconds along the axes of the GCRS, shape (n, 3)."""
    day, utc = _utc_of(tdb)
    modern = day >= UTC_BEGINS_MJD
    universal = utc + np.where(modern, _ut1_minus_utc(day, utc), 0.0)
    to_itrf = erfa.c2t00b(J2000_JD, tdb / DAY_S, MJD_ZERO + day, universal / DAY_S, 0.0, 0.0)
    # The inverse of a rotation is its transpose; written out so that no last bit depends on the number of rows.
    x, y, z = (sites / LIGHT_M_S).T
    return np.stack([to_itrf[:, 0, k] * x + to_itrf[:, 1, k] * y + to_itrf[:, 2, k] * z for k in range(3)], axis=1)


def roemer(vector: FloatArray, unit_vectors: FloatArray) -> FloatArray:
    """Seconds by which light of a distant source reaches the barycentre after the observatory, shape (m,).

    `vector` (3,) in light-seconds as from `observatory_vectors`, `unit_vectors` (m, 3) towards the sources. Parallax
    and the Shapiro delay (at most 0.12 ms) are left out (Eastman et al. 2010).
    """
    x, y, z = (float(v) for v in vector)
    # No matrix product: its last bits depend on how many sources there are.
    return np.asarray(unit_vectors[:, 0] * x + unit_vectors[:, 1] * y + unit_vectors[:, 2] * z)


def sidereal_deg(middle_tdb_s: FloatArray, sites: FloatArray) -> FloatArray:
    """Local mean sidereal time in degrees at ITRF places of shape (n, 3), UTC taken for UT1: good to 0.005 degrees.

    NaN without a time or a place.
    """
    known = np.isfinite(middle_tdb_s) & np.isfinite(sites).all(axis=1)
    found = np.full(len(middle_tdb_s), np.nan)
    day, seconds = _utc_of(middle_tdb_s[known])
    moments = (Moment(int(d), float(s)) for d, s in zip(day, seconds, strict=True))
    greenwich = np.array([greenwich_sidereal_s(moment) / 240.0 for moment in moments])
    found[known] = (greenwich + np.degrees(np.arctan2(sites[known, 1], sites[known, 0]))) % 360.0
    return found


def bjd(t_tdb_s: FloatArray) -> FloatArray:
    """Barycentric Julian Date (TDB) of seconds from J2000.0 TDB at the barycentre; exact to 40 microseconds."""
    return np.asarray(J2000_JD + np.asarray(t_tdb_s) / DAY_S)


def mjd(tdb_s: FloatArray) -> FloatArray:
    """Modified Julian Date (TDB) of seconds from J2000.0 TDB; exact to a microsecond."""
    return np.asarray(J2000_MJD + np.asarray(tdb_s) / DAY_S)


def iso_date(days: FloatArray) -> list[str]:
    """ISO 8601 dates of whole Modified Julian Dates, shape (n,); '' for NaN."""
    whole = np.nan_to_num(days).astype(np.int64).astype("timedelta64[D]")
    dates = np.datetime_as_string(np.datetime64("1858-11-17", "D") + whole)
    return [date if day == day else "" for date, day in zip(dates.tolist(), days, strict=True)]
