"""Headers of many decades and habits, written by hand: each read through the walk, with exactly the words it deserves.

Expected instants go through astropy's time, expected pixels through the projection equations written out below; the
cards are text of this file's own and no program wrote them. Keywords and habits without a source beside them are common
practice, no source.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.coordinates import FK4, FK5, EarthLocation, Galactic, SkyCoord
from astropy.time import Time
from hypothesis import given
from hypothesis import strategies as st

from hindlight import host
from hindlight.archive import walk
from hindlight.errors import UsageError
from hindlight.facts import Cards, PlaneAxes
from hindlight.schema import ASSUMPTIONS
from hindlight.settings import Settings, settings_from
from hindlight.sky import projection
from hindlight.summary import words_of

NAN = math.nan


@dataclass(frozen=True)
class Sky:
    """Where a header points, and the equations of its projection (Calabretta & Greisen 2002, A&A 395, 1077)."""

    code: str = "SIN"
    lon: float = 30.0
    lat: float = 40.0
    turn: float = 0.0
    frame: Any = "icrs"

    def pixel(self, place: SkyCoord) -> tuple[float, float]:
        """The 0-based pixel of a place; CRPIX is (8, 6), CDELT (-0.01, 0.01) degrees."""
        own = place.transform_to(self.frame).spherical
        away = math.radians((own.lon.deg - self.lon + 180) % 360 - 180)
        lat, lat0 = own.lat.rad, math.radians(self.lat)
        x = math.cos(lat) * math.sin(away)
        y = math.sin(lat) * math.cos(lat0) - math.cos(lat) * math.sin(lat0) * math.cos(away)
        if self.code == "TAN":  # section 5.1.3
            depth = math.sin(lat) * math.sin(lat0) + math.cos(lat) * math.cos(lat0) * math.cos(away)
            x, y = x / depth, y / depth
        elif self.code == "NCP":  # section 5.1.5
            y = (math.cos(lat0) - math.cos(lat) * math.cos(away)) / math.sin(lat0)
        elif self.code == "GLS":  # section 6.1.4
            x, y = away * math.cos(lat), lat - lat0
        x, y, turn = math.degrees(x), math.degrees(y), math.radians(self.turn)
        # Section 6.1: the intermediate coordinates are the pixel offsets times CDELT, turned by CROTA2.
        u_, v = x * math.cos(turn) + y * math.sin(turn), -x * math.sin(turn) + y * math.cos(turn)
        return 7 + u_ / -0.01, 5 + v / 0.01


@dataclass(frozen=True)
class Case:
    """A header, and what it says: `middle` in astropy's `scale`, '' where timing must be refused and `date` is all."""

    name: str
    cards: str
    words: str
    middle: str = ""
    scale: str = "utc"
    date: str = ""
    exposure: float = 120.0
    span: float | None = None
    unit: str = "Jy/beam"
    beam: tuple[float, float, float] = (108.0, 72.0, 30.0)
    frequency: float = NAN
    stokes: str = "I"
    dialect: str = "old_headers"
    site: EarthLocation | None = None
    sky: Sky = field(default_factory=Sky)
    settings: dict[str, Any] = field(default_factory=dict)


HERE = EarthLocation.from_geodetic(lon=20.0, lat=-30.0, height=1000.0)  # a place of no importance

AXES = """
CTYPE1  = 'RA---SIN'
CTYPE2  = 'DEC--SIN'
CRVAL1  =                 30.0
CRVAL2  =                 40.0
CRPIX1  =                  8.0
CRPIX2  =                  6.0
CDELT1  =                -0.01
CDELT2  =                 0.01
"""
ICRS = AXES + "RADESYS = 'ICRS    '"
B1950 = AXES + "EPOCH   =              1950.00"
NAME = """
INSTRUME= 'WESTFERN'
"""
BEAM = """
BMAJ    =   3.000000000000E-02 / Beam major axis (deg)
BMIN    =   2.000000000000E-02
BPA     =                 30.0
"""
RADIO = """
CTYPE3  = 'FREQ    '
CRVAL3  =      1.54000000000E8
CRPIX3  =                  1.0
CDELT3  =          5.00000E+06
CTYPE4  = 'STOKES  '
CRVAL4  =                  1.0
CRPIX4  =                  1.0
CDELT4  =                  1.0
BUNIT   = 'JY/BEAM '           /
"""
CCD = """
BUNIT   = 'ADU     '
FILTER  = 'B       '
SEEING  =                108.0
EXPTIME =                120.0 / exposure time in seconds
"""
POLARISED = "CRVAL4  =                  1.0"
TEXT_BEAM = "HISTORY CLEANER   CLEAN BMAJ=  3.0000E-02 BMIN=  2.0000E-02 BPA=  30.00"
SYNTHESIS = {"frequency": 154e6, "dialect": "synthesis_headers", "exposure": NAN}
OPTICAL = {"unit": "adu", "beam": (108.0, 108.0, 0.0), "site": HERE}
SITE = """
OBSGEO-X=          5195675.767
OBSGEO-Y=          1891071.326
OBSGEO-Z=         -3170873.735
"""
OLD = ICRS + NAME + CCD + SITE
LOG = ICRS + NAME + CCD
PLATE = {"unit": "adu", "beam": (108.0, 108.0, 0.0), "dialect": "plate_headers", "site": None}
EAST = """
LATITUDE=                -30.0 / [deg] north positive
LONGITUD=                 20.0 / [deg] east positive
ALTITUDE=               1000.0 / metres above the sea
"""
STANDARD = {"dialect": "standard_headers", "site": HERE}
MODERN = ICRS + NAME + BEAM + SITE + "BUNIT = 'Jy/beam'\nFREQ    =              1.54E+08\nSTOKES  = 'I'\n"
MODERN = MODERN.replace("BUNIT =", "BUNIT   =")
PLAIN = {"frequency": 154e6, "words": "primary_beam_unknown"} | STANDARD

SYNTHESIS_CASES = [
    Case(
        "beam in history, two-digit date, B1950",
        B1950 + NAME + RADIO + TEXT_BEAM + "\nDATE-OBS= '17/03/88'",
        "no_clock no_exposure beam_from_history primary_beam_unknown frame_assumed",
        date="1988-03-17",
        sky=Sky(frame=FK4(equinox="B1950", obstime="J1988.21")),
        **SYNTHESIS,
    ),
    Case(
        "the last of several cleanings counts",
        ICRS
        + NAME
        + RADIO
        + "HISTORY BMAJ= 9.0E-02 BMIN= 9.0E-02 BPA= 0.0\nHISTORY nothing\n"
        + TEXT_BEAM
        + "\nDATE-OBS= '1988-03-17'",
        "no_clock no_exposure beam_from_history primary_beam_unknown",
        date="1988-03-17",
        **SYNTHESIS,
    ),
    Case(
        "beam in a comment after one in history, Fortran exponents",
        ICRS + NAME + RADIO + "HISTORY BMAJ= 9.0E-02 BMIN= 9.0E-02 BPA= 0.0\n"
        "COMMENT restored with bmaj = 3.0D-2 bmin = .02D0, bpa = -150\nDATE-OBS= '19880317'",
        "no_clock no_exposure beam_from_history primary_beam_unknown",
        date="1988-03-17",
        **SYNTHESIS,
    ),
    Case(
        "beam over several lines of history, in arcsec",
        ICRS + NAME + RADIO + "HISTORY BMAJ= 108.0 arcsec\nHISTORY BMIN= 72.0 arcsec\nHISTORY BPA= 30.0 deg\n",
        "no_clock no_exposure beam_from_history primary_beam_unknown",
        **SYNTHESIS,
    ),
    Case(
        "beam in history the wrong way round",
        ICRS + NAME + RADIO + "HISTORY BMAJ=  2.0E-02 BMIN=  3.0E-02 BPA=  120.0\nDATE-OBS= '1988-03-17'",
        "no_clock no_exposure beam_from_history beam_swapped primary_beam_unknown",
        date="1988-03-17",
        **SYNTHESIS,
    ),
    Case(
        "a beam of zero in history is none",
        ICRS + NAME + RADIO + "HISTORY BMAJ= 0.0 BMIN= 0.0 BPA= 0.0\nDATE-OBS= '1988-03-17'",
        "no_clock no_exposure no_beam primary_beam_unknown",
        date="1988-03-17",
        beam=(NAN, NAN, NAN),
        **(SYNTHESIS | {"dialect": "standard_headers"}),
    ),
    Case(
        "a card before the history",
        ICRS + NAME + RADIO + BEAM + "HISTORY BMAJ= 9.0E-02 BMIN= 9.0E-02 BPA= 0.0\nDATE-OBS= '17/03/88'",
        "no_clock no_exposure primary_beam_unknown",
        date="1988-03-17",
        **SYNTHESIS,
    ),
    Case(
        "EPOCH of zero is none",
        AXES + NAME + RADIO + TEXT_BEAM + "\nEPOCH   =                  0.0\nDATE-OBS= '17/03/88'",
        "no_clock no_exposure beam_from_history primary_beam_unknown frame_assumed",
        date="1988-03-17",
        **SYNTHESIS,
    ),
    Case(
        "an eight-digit date with a time of day",
        ICRS + NAME + RADIO + TEXT_BEAM + "\nDATE-OBS= '19880317'\nTIME-OBS= '06:00:00' / IAT, start of scan\n"
        "EXPOSURE=                120.0",
        "beam_from_history primary_beam_unknown geocentre",
        "1988-03-17T06:01:00",
        "tai",
        **(SYNTHESIS | {"exposure": 120.0}),
    ),
    Case(
        "axes beyond NAXIS (FITS 4.0, 8.2)",
        ICRS + NAME + RADIO + TEXT_BEAM + "\nDATE-OBS= '19930417'",
        "no_clock no_exposure beam_from_history primary_beam_unknown",
        date="1993-04-17",
        **SYNTHESIS,
    ),
    Case(
        "frequency in GHz, a hand of circular polarisation",
        ICRS
        + NAME
        + RADIO.replace("1.54000000000E8", "          0.154").replace(
            "CRVAL4  =                  1.0", "CRVAL4  =                 -1.0"
        )
        + "CUNIT3  = 'GHz     '\n"
        + TEXT_BEAM
        + "\nDATE-OBS= '17/03/88'",
        "no_clock no_exposure beam_from_history primary_beam_unknown",
        date="1988-03-17",
        stokes="RR",
        **SYNTHESIS,
    ),
    Case(
        "NCP, the projection of east-west arrays",
        B1950.replace("--SIN", "--NCP") + NAME + RADIO + BEAM + "DATE-OBS= '17/03/88'",
        "no_clock no_exposure primary_beam_unknown frame_assumed",
        date="1988-03-17",
        sky=Sky("NCP", frame=FK4(equinox="B1950", obstime="J1988.21")),
        **SYNTHESIS,
    ),
    Case(
        "GLS, the old sinusoidal projection",
        ICRS.replace("--SIN", "--GLS") + NAME + RADIO + BEAM + "DATE-OBS= '17/03/88'",
        "no_clock no_exposure primary_beam_unknown",
        date="1988-03-17",
        sky=Sky("GLS"),
        **SYNTHESIS,
    ),
    Case(
        "galactic, no date at all",
        AXES.replace("RA---", "GLON-").replace("DEC--", "GLAT-") + NAME + RADIO + TEXT_BEAM + "\nDATE-OBS= '        '",
        "no_clock no_exposure beam_from_history primary_beam_unknown",
        sky=Sky(frame=Galactic()),
        **SYNTHESIS,
    ),
    Case(
        "the dates of file and map are none of an observation",
        ICRS + NAME + RADIO + BEAM + "DATE    = '1999-01-02T03:04:05'\nDATE-MAP= '17/03/88'",
        "no_clock no_exposure primary_beam_unknown",
        **(SYNTHESIS | {"dialect": "standard_headers"}),
    ),
    Case(
        "history that says the primary beam was corrected",
        ICRS + NAME + RADIO + TEXT_BEAM + "\nHISTORY image corrected for the primary beam\nDATE-OBS= '17/03/88'",
        "no_clock no_exposure beam_from_history",
        date="1988-03-17",
        **SYNTHESIS,
    ),
    Case(
        "a rest frequency is no observing frequency",
        ICRS + NAME + BEAM + "BUNIT   = 'JY/BEAM'\nRESTFREQ=      1.420405752E+09\nDATE-OBS= '1988-03-17'",
        "no_clock no_exposure primary_beam_unknown stokes_assumed no_frequency",
        date="1988-03-17",
        **(SYNTHESIS | {"dialect": "standard_headers", "frequency": NAN}),
    ),
]

OLD_CASES = [
    Case(
        "two-digit date and UT",
        OLD + "DATE-OBS= '17/03/88'\nUT      = '06:00:00'",
        "start_assumed",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "day before month, as always (IAU-FWG 1997)",
        OLD + "DATE-OBS= '01/02/99'\nUT      = '06:00:00.5' / start of exposure",
        "",
        "1999-02-01T06:01:00.5",
        **OPTICAL,
    ),
    Case(
        "UT in hours, by its size",
        OLD + "DATE-OBS= '17/03/88'\nUT      =                 6.25",
        "start_assumed clock_unit_assumed",
        "1988-03-17T06:16:00",
        **OPTICAL,
    ),
    Case(
        "UT in hours, by its unit",
        OLD + "DATE-OBS= '17/03/88'\nUTSTART =                 6.25 / [h] start time of integration",
        "",
        "1988-03-17T06:16:00",
        **OPTICAL,
    ),
    Case(
        "UT in seconds, by its size",
        OLD + "DATE-OBS= '17/03/88'\nUTC     =              21600.5",
        "start_assumed clock_unit_assumed",
        "1988-03-17T06:01:00.5",
        **OPTICAL,
    ),
    Case(
        "UT in seconds, by its comment",
        OLD + "DATE-OBS= '1988-03-17'\nUT-OBS  =                 10.0 / seconds after midnight",
        "",
        "1988-03-17T00:01:10",
        **OPTICAL,
    ),
    Case(
        "UT in hours written as text",
        OLD + "DATE-OBS= '1988-03-17'\nUT      = '6.25    ' / hours",
        "",
        "1988-03-17T06:16:00",
        **OPTICAL,
    ),
    Case(
        "START",
        OLD + "DATE-OBS= '17/03/88' / UT date\nSTART   = '06 00 00'",
        "",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "four digits mean the start (FITS 4.0, 9.5), no scale stated",
        OLD + "DATE-OBS= '1988-03-17'\nTIME-OBS= '6:00    '",
        "scale_assumed",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "TIME-OBS of the middle",
        OLD + "DATE-OBS= '17/03/88'\nTIME-OBS= '06:00:00' / UT at mid-exposure (hh:mm:ss)",
        "",
        "1988-03-17T06:00:00",
        **OPTICAL,
    ),
    Case(
        "TIME-OBS of the end",
        OLD + "DATE-OBS= '17/03/88' / UT date\nTIME-OBS= '06:00:00' / GMT, end of exposure",
        "",
        "1988-03-17T05:59:00",
        **OPTICAL,
    ),
    Case(
        "ephemeris time",
        OLD + "DATE-OBS= '17/03/88' / start\nTIME-OBS= '06:00:00' / ET",
        "",
        "1988-03-17T06:01:00",
        "tt",
        **OPTICAL,
    ),
    Case(
        "the scale of TIMESYS counts before the keyword's name",
        OLD + "DATE-OBS= '17/03/88' / start\nUT      = '06:00:00'\nTIMESYS = 'TAI     '",
        "",
        "1988-03-17T06:01:00",
        "tai",
        **OPTICAL,
    ),
    Case(
        "twenty-four hours",
        OLD + "DATE-OBS= '31/12/88' / start\nUT      = '24:00:00'",
        "",
        "1989-01-01T00:01:00",
        **OPTICAL,
    ),
    Case(
        # A leap second ended 1987 (IERS Bulletin C list); its 60.5 is half a second before midnight.
        "within a leap second",
        OLD.replace("120.0 /", "  0.5 /") + "DATE-OBS= '31/12/87' / start\nUT      = '23:59:60.25'",
        "",
        "1987-12-31T23:59:60.5",
        exposure=0.5,
        **OPTICAL,
    ),
    Case(
        "the day before a leap second ends in 120 s",
        OLD + "DATE-OBS= '31/12/87' / start\nUT      = '23:59:01'",
        "",
        "1988-01-01T00:00:00",
        **OPTICAL,
    ),
    Case(
        "the day of a leap year",
        OLD + "DATE-OBS= '29/02/88' / start\nUT      = '23:59:30'",
        "",
        "1988-03-01T00:00:30",
        **OPTICAL,
    ),
    Case(
        "a day that the year did not have",
        OLD + "DATE-OBS= '29/02/87'\nUT      = '06:00:00'",
        "no_clock",
        **OPTICAL,
    ),
    Case(
        "a month that no year has: the day is never second",
        OLD + "DATE-OBS= '03/17/88'\nUT      = '06:00:00'",
        "no_clock",
        **OPTICAL,
    ),
    Case(
        "year first, with slashes",
        OLD + "DATE-OBS= '1988/03/17'\nUT      = '06:00:00Z'",
        "",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "year first, with slashes and time",
        OLD + "DATE-OBS= '1988/03/17 06:00:00.0Z' / UT",
        "",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "day first, and it can only be the day",
        OLD + "DATE-OBS= '17-03-1988'\nUT      = '06:00:00'",
        "",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "day first, where it could be the month",
        OLD + "DATE-OBS= '05-03-1988'\nUT      = '06:00:00'",
        "date_form",
        "1988-03-05T06:01:00",
        **OPTICAL,
    ),
    Case(
        "a month by name",
        OLD + "DATE-OBS= '17-Mar-1988'\nUT      = '06:00:00'",
        "",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "a whole instant in the card for the time",
        OLD + "DATE-OBS= '1988-03-17'\nUTC-OBS = '1988-03-17T06:00:00.000'",
        "",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "a time of day that is none",
        OLD + "DATE-OBS= '17/03/88'\nUT      = '25:00:00'",
        "no_clock",
        date="1988-03-17",
        **OPTICAL,
    ),
    Case(
        "an old date and MJD of the same day",
        OLD + "DATE-OBS= '17/03/88'\nMJD-OBS =             47237.25",
        "scale_assumed",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "MJD that differs by half a minute",
        OLD + "DATE-OBS= '17/03/88'\nUT      = '06:00:00'\nMJD-OBS =       47237.25034722",
        "start_assumed",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "MJD of another century",
        OLD + "DATE-OBS= '17/03/03'\nUT      = '06:00:00'\nMJD-OBS =             52715.25",
        "dates_disagree no_clock century_assumed",
        date="1903-03-17",
        **OPTICAL,
    ),
    Case(
        "two digits of this century by the settings",
        OLD + "DATE-OBS= '17/03/24' / start\nUT      = '06:00:00'",
        "century_assumed set_by_user",
        "2024-03-17T06:01:00",
        settings={"frames": [{"to": "1930-01-01", "clock_offset_s": 3155760000.0}]},
        **OPTICAL,
    ),
    Case(
        "two digits that may be of this century, and no time of day",
        OLD + "DATE-OBS= '17/03/24'",
        "century_assumed no_clock",
        date="1924-03-17",
        **OPTICAL,
    ),
    Case(
        "nothing but a Julian date",
        OLD + "DATE-OBS= 'unknown '\nJD      =         2447237.75",
        "start_assumed scale_assumed",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
    Case(
        "FK4 by EPOCH, turned by CROTA2",
        B1950
        + "\nCROTA2  =                 30.0"
        + NAME
        + CCD
        + SITE
        + "DATE-OBS= '17/03/88' / start\nUT      = '06:00:00'",
        "frame_assumed",
        "1988-03-17T06:01:00",
        sky=Sky(turn=30.0, frame=FK4(equinox="B1950", obstime="J1988.21")),
        **OPTICAL,
    ),
    Case(
        "FK5 of 1950 by RADECSYS, EQUINOX before EPOCH",
        AXES.replace("SIN", "TAN")
        + "RADECSYS= 'FK5     '\nEQUINOX =               1975.0\nEPOCH   =               1950.0"
        + NAME
        + CCD
        + SITE
        + "DATE-OBS= '17/03/88' / start\nUT      = '06:00:00'",
        "",
        "1988-03-17T06:01:00",
        sky=Sky("TAN", frame=FK5(equinox="J1975")),
        **OPTICAL,
    ),
    Case(
        "a rotation of the first axis alone",
        AXES
        + "RADESYS = 'ICRS'\nCROTA1  =                 30.0\nALTRPIX =                 99.0\nALTRVAL =                 99.0"
        + NAME
        + CCD
        + SITE
        + "DATE-OBS= '17/03/88' / start\nUT      = '06:00:00'",
        "rotation_doubtful",
        "1988-03-17T06:01:00",
        **OPTICAL,
    ),
]

PLATE_CASES = [
    Case(
        "the night's date, after midnight, by MJD",
        LOG + EAST + "DATE-OBS= '16/03/88' / start\nUT      = '02:00:00'\nMJD-OBS =      47237.083333333\n",
        "night_date",
        "1988-03-17T02:01:00",
        **(OPTICAL | {"dialect": "old_headers"}),
    ),
    Case(
        "the night's date, after midnight, by JD of the middle",
        LOG + EAST + "DATE-OBS= '16/03/88' / date of night\nUT      = '02:00:00'\nJD      =      2447237.59\n",
        "night_date start_assumed",
        "1988-03-17T02:01:00",
        **(PLATE | {"site": HERE}),
    ),
    Case(
        # Sidereal time at Greenwich by Aoki et al. 1982 through ERFA: 13:39:28.015 on 1988-03-17 at 02:00 UT, 20 deg east
        # is 1:20:00 more. A day earlier it is 3 m 56.6 s less.
        "the night's date, after midnight, by the stars",
        LOG + EAST + "DATE-OBS= '16/03/88'\nUT      = '02:00:00' / start\nLST     = '14:59:28'\n",
        "night_date",
        "1988-03-17T02:01:00",
        **(PLATE | {"site": HERE}),
    ),
    Case(
        "the date is right by the stars",
        LOG + EAST + "DATE-OBS= '17/03/88'\nUT      = '02:00:00' / start\nST      = '14:59:28'\n",
        "",
        "1988-03-17T02:01:00",
        **(PLATE | {"site": HERE}),
    ),
    Case(
        "the night's date and nothing to tell the day",
        LOG + "DATE-OBS= '16/03/88' / date of night\nUT      = '02:00:00'\n",
        "night_unsettled no_clock",
        date="1988-03-16",
        **PLATE,
    ),
    Case(
        "the night's date, by longitude",
        LOG + EAST + "DATE-OBS= '16/03/88' / evening date\nUT      = '02:00:00' / start\n",
        "night_date",
        "1988-03-17T02:01:00",
        **(PLATE | {"site": HERE}),
    ),
    Case(
        "the night's date, before midnight",
        LOG + EAST + "DATE-OBS= '16/03/88' / evening date\nUT      = '22:00:00' / start\n",
        "",
        "1988-03-16T22:01:00",
        **(PLATE | {"site": HERE}),
    ),
    Case(
        "local time, offset in text",
        LOG + "DATE-OBS= '17/03/88'\nLT      = '01:30:00'\nTIMEZONE= 'UTC+02:00'\n",
        "local_time geocentre start_assumed",
        "1988-03-16T23:31:00",
        **PLATE,
    ),
    Case(
        "local time after midnight of the night's date",
        LOG + "DATE-OBS= '1988-03-16' / local date of night\nLT      = '01:30:00'\nTIMEZONE= '+2      '\n",
        "local_time night_date geocentre",
        "1988-03-16T23:31:00",
        **PLATE,
    ),
    Case(
        "local time, hours west",
        LOG
        + "DATE-OBS= '1988-03-17'\nLT      = '01:30:00'\nTIMEZONE=                    7 / hours west of Greenwich\n",
        "local_time geocentre",
        "1988-03-17T08:31:00",
        **PLATE,
    ),
    Case(
        "local time, offset settled by longitude",
        LOG + EAST + "DATE-OBS= '1988-03-17'\nLT      = '04:00:00'\nTIMEZONE=                   -1\n",
        "local_time",
        "1988-03-17T03:01:00",
        **(PLATE | {"site": HERE}),
    ),
    Case(
        "local time whose offset could be either way",
        LOG + "DATE-OBS= '1988-03-17'\nTIME-OBS= '04:00:00' / local time\nTIMEZONE=                    1\n",
        "local_unsettled no_clock",
        date="1988-03-17",
        **PLATE,
    ),
    Case(
        "a local time without an offset",
        LOG + "DATE-OBS= '17/03/88'\nTIME-OBS= '04:00:00' / local time\n",
        "local_unsettled no_clock",
        date="1988-03-17",
        **PLATE,
    ),
    Case(
        # The same sidereal time as above, 14:59:28.015 at 02:00:00 UT.
        "sidereal time alone",
        LOG + EAST + "DATE-OBS= '17/03/88' / UT date\nLST     = '14:59:28.015'\n",
        "sidereal_time start_assumed",
        "1988-03-17T02:01:00",
        **(PLATE | {"site": HERE}),
    ),
    Case(
        "sidereal time on a date that may be the night's",
        LOG + EAST + "DATE-OBS= '17/03/88'\nLST     = '14:59:28.015'\n",
        "night_unsettled no_clock",
        date="1988-03-17",
        **(PLATE | {"site": HERE}),
    ),
    Case(
        "sidereal time without a longitude",
        LOG + "DATE-OBS= '17/03/88' / UT date\nLST     = '14:59:28.015'\n",
        "no_clock",
        date="1988-03-17",
        **PLATE,
    ),
    Case(
        "a plate, its exposure in minutes by the comment",
        LOG.replace("120.0 / exposure time in seconds", "70.0 /Exposure time minutes")
        + "PLTLABEL= 'K 1234'\nDATE-OBS= '11/03/76' /UT date of Observation\nUT      = '17:38:00.00' /UT time of observation\n"
        "SITELAT = '-30:00:00.00'\nSITELONG= '+020:00:00.00' /Longitude of Observatory\n",
        "start_assumed site_unsettled geocentre photographic_assumed",
        "1976-03-11T18:13:00",
        exposure=4200.0,
        **PLATE,
    ),
    Case(
        "a plate with a modern date, exposure in hours",
        LOG.replace("120.0 / exposure time in seconds", "0.5 / [h] good time")
        + "PLATENUM=                 1234\nDATE-OBS= '1976-03-11T17:38:00' / start\nTIMESYS = 'UT'\n",
        "geocentre photographic_assumed",
        "1976-03-11T17:53:00",
        exposure=1800.0,
        **PLATE,
    ),
]

STANDARD_CASES = [
    Case(
        "the standard header",
        MODERN + "DATE-OBS= '1988-03-17T06:00:00'\nTIMESYS = 'UTC'\nXPOSURE =                120.0",
        middle="1988-03-17T06:01:00",
        **PLAIN,
    ),
    Case(
        # GPS time is TAI less 19 s (Rots et al. 2015, table 2).
        "GPS time",
        MODERN + "DATE-OBS= '2008-03-17T06:00:00'\nTIMESYS = 'GPS'\nEXPTIME =                120.0",
        middle="2008-03-17T06:01:19",
        scale="tai",
        **PLAIN,
    ),
    *(
        Case(
            f"time scale {name}",
            MODERN + f"DATE-OBS= '2008-03-17T06:00:00'\nTIMESYS = '{name}'\nEXPTIME =                120.0",
            middle="2008-03-17T06:01:00",
            scale=scale,
            **PLAIN,
        )
        for name, scale in (("IAT", "tai"), ("TDT", "tt"), ("ET", "tt"), ("GMT", "utc"), ("TDB", "tdb"))
    ),
    Case(
        "seconds from a reference day",
        MODERN
        + "MJDREF  =              47237.0\nTSTART  =              21600.0\nTSTOP   =              21720.0\nTIMESYS = 'TT'\n"
        "ONTIME  =                120.0",
        middle="1988-03-17T06:01:00",
        scale="tt",
        **PLAIN,
    ),
    Case(
        "a reference day in two parts, intermittent",
        MODERN + "MJDREFI =                47237\nMJDREFF =                 0.25\nTSTART  =                  0.0\n"
        "TSTOP   =                600.0\nTIMESYS = 'TT'\nLIVETIME=                120.0",
        "primary_beam_unknown intermittent",
        "1988-03-17T06:05:00",
        "tt",
        span=600.0,
        frequency=154e6,
        **STANDARD,
    ),
    Case(
        "within the leap second of 2016",
        MODERN + "DATE-OBS= '2016-12-31T23:59:00'\nTIMESYS = 'UTC'\nEXPTIME =                121.0",
        middle="2016-12-31T23:59:60.5",
        exposure=121.0,
        **PLAIN,
    ),
    Case(
        "the beginning and end before all other dates",
        MODERN + "DATE-BEG= '1988-03-17T06:00:00'\nDATE-END= '1988-03-17T06:02:00'\nDATE-AVG= '1988-03-17T09:00:00'\n"
        "DATE-OBS= '17/03/87'\nUT      = '05:00:00'\nTIMESYS = 'UTC'\nEXPTIME =                120.0",
        middle="1988-03-17T06:01:00",
        **(PLAIN | {"dialect": "synthesis_headers"}),
    ),
    Case(
        "the average before DATE-OBS, and that before MJD-OBS",
        MODERN + "DATE-AVG= '1988-03-17T06:01:00'\nDATE-OBS= '1988-03-17T05:00:00'\nMJD-OBS =              47237.5\n"
        "TIMESYS = 'UTC'\nEXPTIME =                120.0",
        middle="1988-03-17T06:01:00",
        **PLAIN,
    ),
    Case(
        "MJD-OBS alone",
        MODERN + "MJD-OBS =             47237.25\nTIMESYS = 'UTC'\nEXPTIME =                120.0",
        middle="1988-03-17T06:01:00",
        **PLAIN,
    ),
    Case(
        "a date alone",
        MODERN + "DATE-OBS= '1988-03-17'\nTIMESYS = 'UTC'\nEXPTIME =                120.0",
        "no_clock primary_beam_unknown",
        date="1988-03-17",
        frequency=154e6,
        **STANDARD,
    ),
    Case(
        "an exposure in minutes by its unit (FITS 4.0, 4.3.2)",
        MODERN + "DATE-OBS= '1988-03-17T06:00:00Z'\nTIMESYS = 'UTC'\nEXPTIME =                  2.0 / [min] exposure",
        middle="1988-03-17T06:01:00",
        **PLAIN,
    ),
    Case(
        "an exposure that may be in milliseconds",
        MODERN + "DATE-OBS= '1988-03-17T00:00:00'\nTIMESYS = 'UTC'\nEXPTIME =             120000.0",
        "primary_beam_unknown exposure_doubtful",
        "1988-03-17T16:40:00",
        exposure=120000.0,
        frequency=154e6,
        **STANDARD,
    ),
    Case(
        "an exposure that may be in days",
        MODERN + "DATE-OBS= '1988-03-17T06:00:00'\nTIMESYS = 'UTC'\nEXPTIME =                0.004",
        "primary_beam_unknown exposure_doubtful",
        "1988-03-17T06:00:00.002",
        exposure=0.004,
        frequency=154e6,
        **STANDARD,
    ),
    *(
        Case(
            f"{key} exposures in one",
            MODERN + f"DATE-OBS= '1988-03-17T06:00:00'\nTIMESYS = 'UTC'\nEXPTIME =                120.0\n"
            f"{key:<8}=                    5",
            "primary_beam_unknown coadds",
            "1988-03-17T06:01:00",
            frequency=154e6,
            **STANDARD,
        )
        for key in ("NCOMBINE", "COADDS")
    ),
    *(
        Case(
            f"the seeing, {said}",
            ICRS + NAME + SITE + "BUNIT   = 'ADU'\nDATE-OBS= '1988-03-17T06:00:00'\nTIMESYS = 'UTC'\nEXPTIME = 120.0\n"
            f"SEEING  =                  3.0 / {said}",
            "",
            "1988-03-17T06:01:00",
            unit="adu",
            beam=(width, width, 0.0),
            **STANDARD,
        )
        for said, width in (("average FWHM (pixels)", 108.0), ("[pix]", 108.0))
    ),
    Case(
        "an exposure from DATE-OBS to DATE-END",
        MODERN + "DATE-OBS= '1988-03-17T06:00:00'\nDATE-END= '1988-03-17T06:02:00'\nTIMESYS = 'UTC'\nEXP_TIME= 100.0",
        "primary_beam_unknown intermittent",
        "1988-03-17T06:01:00",
        exposure=100.0,
        span=120.0,
        frequency=154e6,
        **STANDARD,
    ),
    Case(
        "a long beam without its angle",
        MODERN.replace("BPA", "XPA")
        + "DATE-OBS= '1988-03-17T06:00:00'\nTIMESYS = 'UTC'\nEXPTIME =                120.0",
        "primary_beam_unknown beam_angle_assumed",
        "1988-03-17T06:01:00",
        beam=(math.sqrt(108 * 72), math.sqrt(108 * 72), 0.0),
        frequency=154e6,
        **STANDARD,
    ),
    Case(
        "a nearly round beam without its angle",
        MODERN.replace("BPA", "XPA").replace("2.000000000000E-02", "2.950000000000E-02")
        + "DATE-OBS= '1988-03-17T06:00:00'\nTIMESYS = 'UTC'\nEXPTIME =                120.0",
        middle="1988-03-17T06:01:00",
        beam=(math.sqrt(108 * 106.2), math.sqrt(108 * 106.2), 0.0),
        **PLAIN,
    ),
    Case(
        "a beam the wrong way round",
        MODERN.replace("BMAJ", "BMXX")
        .replace("BMIN", "BMAJ")
        .replace("BMXX", "BMIN")
        .replace("BPA     =                 30.0", "BPA     =                120.0")
        + "DATE-OBS= '1988-03-17T06:00:00'\nTIMESYS = 'UTC'\nEXPTIME =                120.0",
        "primary_beam_unknown beam_swapped",
        "1988-03-17T06:01:00",
        frequency=154e6,
        **STANDARD,
    ),
    *(
        Case(
            f"a beam that can only be in arcsec, settings {settings}",
            MODERN.replace("3.000000000000E-02", "1.080000000000E+02").replace(
                "2.000000000000E-02", "7.200000000000E+01"
            )
            + "DATE-OBS= '1988-03-17T06:00:00'\nTIMESYS = 'UTC'\nEXPTIME =                120.0",
            f"primary_beam_unknown beam_unit{more}",
            "1988-03-17T06:01:00",
            beam=beam,
            frequency=154e6,
            settings=settings,
            **STANDARD,
        )
        for settings, more, beam in (
            ({}, " no_beam", (NAN, NAN, NAN)),
            ({"inventory": {"bmaj_in_arcsec": True}}, "", (108.0, 72.0, 30.0)),
        )
    ),
    *(
        Case(
            f"a place on old cards: {name}",
            MODERN.replace(SITE, "\n")
            + place
            + "\nDATE-OBS= '1988-03-17T02:00:00'\nTIMESYS = 'UTC'\nEXPTIME =                120.0",
            f"primary_beam_unknown{more}",
            "1988-03-17T02:01:00",
            frequency=154e6,
            dialect="standard_headers",
            site=site,
        )
        for name, place, more, site in (
            ("east by its comment", EAST, "", HERE),
            ("a letter in the value", "LAT-OBS = '30:00:00 S'\nLONG-OBS= '20:00:00 E'\nHEIGHT  = 1000.0 / m", "", HERE),
            (
                "west by its comment",
                "SITELAT = -30.0 / degrees\nSITELONG= 340.0 / degrees West\nSITEALT = 1000.0 / [m]",
                "",
                HERE,
            ),
            (
                "minus for west",
                "GEOLAT  = -30.0 / degrees\nGEOLON  = 20.0 / degrees (negative west)\nHEIGHT  = 1000.0 / m",
                "",
                HERE,
            ),
            (
                "both directions in the comment",
                "GEOLAT  = -30.0 / degrees\nGEOLON  = 20.0 / degrees (+E/-W)\nHEIGHT  = 1000.0 / m",
                "",
                HERE,
            ),
            (
                "settled by the stars, the angle of the telescope is no height",
                "LATITUDE= -30.0\nLONGITUD= -20.0\nLST     = '14:59:28'\nALTITUDE= 36.8 / [deg] telescope altitude",
                "",
                EarthLocation.from_geodetic(20.0, -30.0, 0.0),
            ),
            ("not settled", "LATITUDE= -30.0 / degrees\nLONGITUD= -20.0 / degrees", " site_unsettled geocentre", None),
            ("geodetic", "OBSGEO-B= -30.0\nOBSGEO-L= 20.0\nOBSGEO-H= 1000.0", "", HERE),
        )
    ),
    Case(
        "times of the barycentre",
        MODERN
        + "DATE-OBS= '1988-03-17T06:00:00'\nTIMESYS = 'TDB'\nTREFPOS = 'BARYCENTER'\nEXPTIME =                120.0",
        middle="1988-03-17T06:01:00",
        scale="tdb",
        **(PLAIN | {"site": None}),
    ),
]

CASES = SYNTHESIS_CASES + OLD_CASES + PLATE_CASES + STANDARD_CASES


def fits_bytes(cards: str, axes: tuple[int, ...] = (16, 12)) -> bytes:
    """A file of these cards and zero pixels."""
    shape = [f"{f'NAXIS{i}':<8}= {n}" for i, n in enumerate(axes, 1)]
    first = ["SIMPLE  = T", "BITPIX  = 8", f"NAXIS   = {len(axes)}", *shape]
    return block([*first, *cards.splitlines(), "END"]) + bytes(-(-math.prod(axes) // 2880) * 2880)


def block(lines: list[str]) -> bytes:
    """Cards as bytes, padded to a block; empty lines are left out."""
    kept = [line.rstrip() for line in lines if line.strip()]
    assert max(map(len, kept)) <= 80
    raw = "".join(line.ljust(80) for line in kept).encode("ascii")
    return raw.ljust(-(-len(raw) // 2880) * 2880)


def rows(folder: Path, data: bytes, **settings: Any) -> list[dict[str, Any]]:
    """The frames of a file with these bytes, read by the dialects that are installed."""
    (folder / "a.fits").write_bytes(data)
    dialects = host.load(host.spec_from(Settings())).dialects
    found = walk([str(folder)], dialects, settings_from(settings, "test"))
    assert found.rejects == []
    columns = found.frames
    return [{name: values[i] for name, values in columns.items()} for i in range(len(columns["path"]))]


def seconds(text: str, scale: str) -> float:
    """Seconds from J2000.0 TDB by astropy."""
    tdb = Time(text, scale=scale).tdb
    return float(((tdb.jd1 - 2451545.0) + tdb.jd2) * 86400)


def axes_of(case: Case) -> tuple[int, ...]:
    """The lengths of the axes of the image; some writers leave those of length one to the header alone."""
    return (16, 12, 1, 1) if "CTYPE3" in case.cards and "beyond NAXIS" not in case.name else (16, 12)


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_header(tmp_path: Path, case: Case) -> None:
    """Every fact of a header, and exactly what was taken for granted."""
    (row,) = rows(tmp_path, fits_bytes(case.cards, axes_of(case)), **case.settings)
    assert set(words_of(row["assumptions"])) == set(case.words.split())
    assert len(words_of(row["assumptions"])) == len(case.words.split())
    if case.middle:
        assert row["middle_tdb_s"] == pytest.approx(seconds(case.middle, case.scale), abs=1e-3)
    else:
        assert np.isnan(row["middle_tdb_s"])
        assert row["middle_utc"] == case.date
    assert row["exposure_s"] == pytest.approx(case.exposure, nan_ok=True)
    assert row["span_s"] == pytest.approx(case.exposure if case.span is None else case.span, nan_ok=True)
    assert (row["unit"], row["stokes"], row["dialect"]) == (case.unit, case.stokes, case.dialect)
    assert row["frequency_hz"] == pytest.approx(case.frequency, nan_ok=True)
    beam = (row["beam_major"], row["beam_minor"], row["beam_angle"])
    assert beam == pytest.approx(case.beam, rel=1e-6, nan_ok=True)
    site = (NAN,) * 3 if case.site is None else [axis.to_value("m") for axis in case.site.geocentric]
    assert (row["site_x"], row["site_y"], row["site_z"]) == pytest.approx(site, abs=0.01, nan_ok=True)
    place = SkyCoord(case.sky.lon + 0.11, case.sky.lat + 0.07, unit="deg", frame=case.sky.frame).icrs
    cards = Cards(block(case.cards.splitlines()))
    x, y = projection(cards).icrs_to_pixel(np.array([place.ra.deg]), np.array([place.dec.deg]), row["middle_mjd_tdb"])
    assert (x[0], y[0]) == pytest.approx(case.sky.pixel(place), abs=0.01)


def test_planes_over_stokes_and_frequency(tmp_path: Path) -> None:
    """Longer axes of frequency and Stokes parameter give planes their own, the beam in history belongs to all."""
    cards = ICRS + NAME + RADIO + TEXT_BEAM + "\nDATE-OBS= '17/03/88'"
    found = rows(tmp_path, fits_bytes(cards, (16, 12, 3, 2)))
    assert [row["plane"] for row in found] == list(range(6))
    assert [row["stokes"] for row in found] == ["I"] * 3 + ["Q"] * 3
    assert [row["frequency_hz"] for row in found] == pytest.approx([154e6, 159e6, 164e6] * 2)
    assert {row["beam_major"] for row in found} == {108.0}
    assert {row["dialect"] for row in found} == {"synthesis_headers"}


def test_planes_over_time(tmp_path: Path) -> None:
    """Planes of a time axis have the axis' times, whatever old date the header has beside."""
    cards = ICRS + NAME + TEXT_BEAM + "\nDATE-OBS= '17/03/88'\nBUNIT   = 'JY/BEAM'\nFREQ    = 1.54E8\nSTOKES  = 'I'\n"
    cards += "CTYPE3  = 'UTC'\nCRVAL3  = 30.0\nCRPIX3  = 1.0\nCDELT3  = 60.0\nCUNIT3  = 's'\nMJDREF  = 47237.25\n"
    found = rows(tmp_path, fits_bytes(cards, (16, 12, 3)))
    assert [row["middle_tdb_s"] for row in found] == pytest.approx(
        [seconds(f"1988-03-17T06:0{minute}:30", "utc") for minute in range(3)], abs=1e-3
    )
    assert {row["exposure_s"] for row in found} == {60.0}
    words = {"plane_exposure", "geocentre", "beam_from_history", "primary_beam_unknown"}
    assert all(set(words_of(row["assumptions"])) == words for row in found)


GOOD_TIME = """
TTYPE1  = 'QUALITY'
TFORM1  = '1I'
TTYPE2  = 'START   '
TFORM2  = '1D'
TUNIT2  = 's'
TTYPE3  = 'STOP    '
TFORM3  = '1D'
TUNIT3  = 's'
"""


def good_time(name: str, intervals: list[tuple[float, float]], more: str) -> bytes:
    """A binary table of intervals."""
    table = np.zeros(len(intervals), np.dtype([("q", ">i2"), ("start", ">f8"), ("stop", ">f8")]))
    table["start"], table["stop"] = np.transpose(intervals)
    first = "XTENSION= 'BINTABLE'\nBITPIX  = 8\nNAXIS   = 2\nNAXIS1  = 18\nPCOUNT  = 0\nGCOUNT  = 1\nTFIELDS = 3\n"
    cards = first + f"NAXIS2  = {len(intervals)}\nEXTNAME = '{name}'\n" + GOOD_TIME + more
    data = table.tobytes()
    return block([*cards.splitlines(), "END"]) + data.ljust(-(-len(data) // 2880) * 2880, b"\0")


@pytest.mark.parametrize(
    ("name", "reference", "middle", "scale"),
    [
        ("GTI", "MJDREF  = 47237.25\nTIMESYS = 'TT'", "1988-03-17T06:10:00", "tt"),
        ("STDGTI", "MJDREFI = 47237\nMJDREFF = 0.25\nTIMESYS = 'GPS'", "1988-03-17T06:10:19", "tai"),
        ("GTI", "", "1988-03-17T05:10:00", "utc"),
    ],
)
def test_good_time_intervals(tmp_path: Path, name: str, reference: str, middle: str, scale: str) -> None:
    """A table of good time gives the exposure and the span, and the instants where it has a reference of its own."""
    image = fits_bytes(MODERN + "DATE-OBS= '1988-03-17T05:00:00'\nTIMESYS = 'UTC'\nEXPTIME = 5.0")
    table = good_time(name, [(0.0, 100.0), (900.0, 1200.0), (50.0, 50.0)], reference)
    (row,) = rows(tmp_path, image + table)
    assert (row["exposure_s"], row["span_s"]) == (400.0, pytest.approx(1200.0))
    assert row["middle_tdb_s"] == pytest.approx(seconds(middle, scale), abs=1e-3)
    assert set(words_of(row["assumptions"])) == {"primary_beam_unknown", "intermittent"}


def test_good_time_that_cannot_be_read(tmp_path: Path) -> None:
    """A table without intervals, or of another kind, changes nothing; nor does one of another name."""
    image = fits_bytes(MODERN + "DATE-OBS= '1988-03-17T05:00:00'\nTIMESYS = 'UTC'\nEXPTIME = 120.0")
    (alone,) = rows(tmp_path, image)
    for table in (
        good_time("GTI", [(5.0, 5.0)], ""),
        good_time("EVENTS", [(0.0, 100.0)], ""),
        good_time("GTI", [(0.0, 100.0)], "").replace(b"'STOP    '", b"'FINISH  '"),
        good_time("GTI", [(0.0, 100.0)], "").replace(b"TFORM2  = '1D'", b"TFORM2  = '9D'"),
        good_time("GTI", [(0.0, 100.0)], "").replace(b"TUNIT2  = 's'", b"TUNIT2  = 'm'"),
    ):
        (row,) = rows(tmp_path, image + table)
        assert row["middle_tdb_s"] == alone["middle_tdb_s"]
        assert (row["exposure_s"], row["assumptions"]) == (120.0, alone["assumptions"])


@pytest.mark.parametrize(
    ("inherit", "words"),
    [("INHERIT = T", []), ("", ["primary_header"]), ("INHERIT = F", ["no_clock", "no_instrument", "no_exposure"])],
)
def test_facts_in_the_primary_header(tmp_path: Path, inherit: str, words: list[str]) -> None:
    """INHERIT (FITS 4.0, 4.4.2.6) is obeyed; where it is not there, a date in the primary header alone is used."""
    primary = "SIMPLE  = T\nBITPIX  = 8\nNAXIS   = 0\nEXTEND  = T\nBSCALE  = 3.0\n" + NAME
    primary += "DATE-OBS= '17/03/88' / start\nUT      = '06:00:00'\nEXPTIME = 120.0\n"
    image = "XTENSION= 'IMAGE   '\nBITPIX  = 8\nNAXIS   = 2\nNAXIS1  = 16\nNAXIS2  = 12\nPCOUNT  = 0\nGCOUNT  = 1\n"
    image += ICRS + SITE + "BUNIT   = 'ADU'\nSEEING  = 108.0\n" + inherit
    data = block([*primary.splitlines(), "END"]) + block([*image.splitlines(), "END"]) + bytes(2880)
    (row,) = rows(tmp_path, data)
    assert row["hdu"] == 1
    assert words_of(row["assumptions"]) == words
    if "no_clock" not in words:
        assert (row["instrument"], row["exposure_s"]) == ("WESTFERN", 120.0)
        assert row["middle_tdb_s"] == pytest.approx(seconds("1988-03-17T06:01:00", "utc"), abs=1e-3)


@pytest.mark.parametrize(
    ("cards", "words", "middle"),
    [
        ("DATE-OBS= '17/03/24' / start\nUT      = '06:00:00'", ["century_assumed"], "1924-03-17T06:01:00.000"),
        ("DATE-OBS= '17/03/24' / start\nJD      =         2423861.75", [], "1924-03-17T06:01:00.000"),
        ("DATE-OBS= '17/03/24' / start\nUT      = '06:00:00'\nMJD-OBS = 23861.25", [], "1924-03-17T06:01:00.000"),
        ("DATE-OBS= '31/12/29' / start\nUT      = '06:00:00'", ["century_assumed"], "1929-12-31T06:01:00.000"),
        ("DATE-OBS= '01/01/30' / start\nUT      = '06:00:00'", [], "1930-01-01T06:01:00.000"),
        ("DATE-OBS= '17/03/1924' / start\nUT      = '06:00:00'", [], "1924-03-17T06:01:00.000"),
    ],
)
def test_years_of_two_digits(tmp_path: Path, cards: str, words: list[str], middle: str) -> None:
    """DD/MM/YY is of the years 19YY (FITS 4.0, 4.4.2.1); below 30, where no other date confirms it, that is said.

    JD 2423861.75 is 1924-03-17T06:00, by Fliegel and Van Flandern 1968 (Comm. ACM 11, 657): JD 2423862 at noon.
    """
    (row,) = rows(tmp_path, fits_bytes(OLD + cards))
    kept = [word for word in words_of(row["assumptions"]) if word not in ("start_assumed", "scale_assumed")]
    assert (kept, row["middle_utc"]) == (words, middle)


def test_the_night_of_a_plate_in_two_digits(tmp_path: Path) -> None:
    """A date of night, without any other, is read as every date is."""
    data = fits_bytes(LOG + "PLTLABEL= 'K 1234'\nDATE-OBS= 'unknown '\nNIGHT   = '16/03/24'")
    (row,) = rows(tmp_path, data)
    assert (row["dialect"], row["middle_utc"]) == ("plate_headers", "1924-03-16")
    assert "century_assumed" in words_of(row["assumptions"])


def test_a_dialect_by_name(tmp_path: Path) -> None:
    """The settings can name the dialect that reads every header, recognised or not; one that is not there is refused."""
    data = fits_bytes(OLD + "DATE-OBS= '17/03/88'\nUT      = '06:00:00'")
    (row,) = rows(tmp_path, data, inventory={"dialect": "standard_headers"})
    assert (row["dialect"], words_of(row["assumptions"])) == ("standard_headers", ["no_clock"])
    (row,) = rows(tmp_path, fits_bytes(MODERN), inventory={"dialect": "old_headers"})
    assert row["dialect"] == "old_headers"
    with pytest.raises(UsageError, match=r"no dialect 'older'; there are auto, old_headers, plate_headers, standard_"):
        rows(tmp_path, data, inventory={"dialect": "older"})


def test_dialects_are_asked_in_the_order_stated() -> None:
    """DEVELOPERS.md has the order of the shipped dialects."""
    dialects = host.load(host.spec_from(Settings())).dialects
    text = (Path(__file__).parents[1] / "DEVELOPERS.md").read_text(encoding="utf-8")
    stated = ", ".join(f"`{dialect.name}` ({dialect.order})" for dialect in dialects)
    assert stated in " ".join(text.split())


def test_every_sentence_can_be_split_from_the_next() -> None:
    """The words of a frame stand in one column, with semicolons between them."""
    assert not [word for word, sentence in ASSUMPTIONS.items() if ";" in sentence]


HABITS = (
    "DATE-OBS", "DATE_OBS", "UT", "UTC", "TIME-OBS", "UTSTART", "START", "MJD-OBS", "JD", "LST", "LT", "TIMEZONE", "NIGHT",
    "LATITUDE", "LONGITUD", "ALTITUDE", "EXPTIME", "NCOMBINE", "PLTLABEL", "TIMESYS", "CTYPE3", "BMAJ", "CROTA1", "HISTORY",
)  # fmt: skip
VALUES = (
    "'17/03/88'", "'1988-03-17'", "'06:00:00'", "'24:00:00'", "''", "'-'", "' / '", "0", "-1", "24", "86400.5", "1E300", "T",
    "47237.25", "2447237.75", "'UTC+2'", "'LOCAL'", "'FREQ'", "'E'", "'W'", "'20 30 E'", "NaN", "",
    "'BMAJ= 1. BMIN= 1. BPA= 1.'",
    "19880317", "'1988-03-17T06:00:00'",
)  # fmt: skip
SAID = ("", "date of night", "local time", "UT, start", "[h]", "minutes", "east", "west negative", "end", "mid")


@given(st.dictionaries(st.sampled_from(HABITS), st.tuples(st.sampled_from(VALUES), st.sampled_from(SAID)), max_size=9))
def test_no_header_is_an_error(chosen: dict[str, tuple[str, str]]) -> None:
    """Whatever the cards hold, each dialect gives facts with words that are known, and never an instant without a date."""
    cards = Cards(block([f"{key:<8}= {value} / {said}"[:80] for key, (value, said) in chosen.items()] or ["HISTORY"]))
    for dialect in host.load(host.spec_from(Settings())).dialects:
        dialect.recognises(cards)
        facts = dialect.read(cards, PlaneAxes())
        assert set(facts.assumptions) <= set(ASSUMPTIONS)
        clocked = any(m is not None and m.has_clock for m in (facts.start, facts.middle, facts.end))
        assert clocked != ("no_clock" in facts.assumptions)
        assert not clocked or any(key in chosen for key in ("DATE-OBS", "DATE_OBS", "MJD-OBS", "JD", "UT", "NIGHT"))
