"""Thirty-five years of clocks: a source that pulses at the barycentre keeps its phase through every way to write a time.

The true instants come from astropy alone: for cycle after cycle the time at each site when the pulse passes it is solved
for with `Time.light_travel_time`, and written into headers in the styles of four decades. Styles without a source beside
them are common practice, no source.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import astropy.units as u
import numpy as np
import pyarrow.parquet as pq
import pytest
from astropy.coordinates import EarthLocation, SkyCoord
from astropy.io import fits
from astropy.time import Time, TimeDelta
from astropy.utils import iers

import skies
from hindlight import cli, clock

PULSAR = SkyCoord(150.0, -30.0, unit="deg")
PERIOD_S = 1321.87
EPOCH = Time(2452000.125, format="jd", scale="tdb")  # at the barycentre
SITES = {
    "south array": EarthLocation.from_geodetic(lon=20.0, lat=-30.0, height=1000.0),
    "north array": EarthLocation.from_geodetic(lon=-107.0, lat=34.0, height=2100.0),
    "east camera": EarthLocation.from_geodetic(lon=149.0, lat=-31.0, height=1100.0),
}
FULL_CLOCK_S = 5e-3
SIDEREAL_S = 2.0  # UT1 for UTC, and mean for apparent sidereal time: 0.9 s and 1.2 s at the most
GEOCENTRE_S = 0.0213 + FULL_CLOCK_S  # the Earth's radius over the speed of light
EXPOSURE_S = 120.0
SIZE = 72
FIRST_YEAR, LAST_YEAR = 1985.1, 2020.1

Card = tuple[object, str]
Cards = dict[str, Card]
Style = Callable[[Time, float], Cards]  # the middle of the exposure in UTC at its site, seconds -> cards


def seconds(time: Time, days: float = 2451545.0) -> float:
    """Seconds from a Julian date, in the scale of `time`."""
    return float(((time.jd1 - days) + time.jd2) * 86400.0)


def pulses(numbers: np.ndarray, site: EarthLocation) -> Time:
    """When pulses of these numbers, shape (n,), pass a site: UTC, by iteration of the light travel time."""
    arrives = EPOCH + TimeDelta(numbers * PERIOD_S, format="sec", scale="tdb")
    there = arrives = Time(arrives.jd1, arrives.jd2, format="jd", scale="tdb", location=site)
    for _ in range(3):  # each leaves a ten-thousandth of the one before, the Earth's velocity over that of light
        there = arrives - there.light_travel_time(PULSAR, kind="barycentric", ephemeris="builtin")
    return there.utc


def iso(time: Time) -> str:
    """ISO text with microseconds."""
    return str(Time(time, precision=6).isot)


def day_month_year(time: Time) -> str:
    """DD/MM/YY, as before the year 2000 (FITS standard 3.0, 4.4.2.2)."""
    year, month, day = iso(time)[:10].split("-")
    return f"{day}/{month}/{year[2:]}"


def since_midnight(time: Time) -> float:
    """Seconds of the day by the text, as a clock shows them."""
    hours, minutes, rest = iso(time)[11:].split(":")
    return int(hours) * 3600 + int(minutes) * 60 + float(rest)


def begin(middle: Time, exposure: float) -> Time:
    """The start of an exposure by its middle."""
    return middle - exposure / 2 * u.s


def exposure_card(exposure: float) -> Cards:
    """The exposure."""
    return {"EXPTIME": (exposure, "exposure time in seconds")}


def old_text(middle: Time, exposure: float) -> Cards:
    """Two-digit year, and the time of day as text."""
    start = begin(middle, exposure)
    return {"DATE-OBS": (day_month_year(start), "UT date"), "UT": (iso(start)[11:], "UT at start")}


def old_hours(middle: Time, exposure: float) -> Cards:
    """The same in decimal hours."""
    start = begin(middle, exposure)
    return {"DATE-OBS": (day_month_year(start), ""), "UTSTART": (since_midnight(start) / 3600, "[h] start of exposure")}


def old_seconds(middle: Time, exposure: float) -> Cards:
    """The same in seconds of the day."""
    start = begin(middle, exposure)
    return {"DATE-OBS": (day_month_year(start), ""), "UT": (since_midnight(start), "[s] start of exposure")}


def old_middle(middle: Time, exposure: float) -> Cards:
    """Date and time apart, of the middle."""
    return {"DATE-OBS": (iso(middle)[:10], ""), "UT": (iso(middle)[11:], "middle of exposure")}


def old_end(middle: Time, exposure: float) -> Cards:
    """Date and time apart, of the end."""
    end = begin(middle, -exposure)
    return {"DATE-OBS": (iso(end)[:10], ""), "TIME-OBS": (iso(end)[11:], "UT at end of exposure")}


def mjd_start(middle: Time, exposure: float) -> Cards:
    """MJD-OBS alone."""
    return {"MJD-OBS": (float(begin(middle, exposure).mjd), ""), "TIMESYS": ("UTC", "")}


def two_ends(middle: Time, exposure: float) -> Cards:
    """DATE-BEG and DATE-END."""
    return {
        "DATE-BEG": (iso(begin(middle, exposure)), ""), "DATE-END": (iso(begin(middle, -exposure)), ""),
        "TIMESYS": ("UTC", ""),
    }  # fmt: skip


def average(middle: Time, exposure: float) -> Cards:
    """DATE-AVG."""
    return {"DATE-AVG": (iso(middle), ""), "TIMESYS": ("UTC", "")}


def in_scale(name: str) -> Style:
    """DATE-OBS in a scale of TIMESYS."""

    def cards(middle: Time, exposure: float) -> Cards:
        shown = middle.tai - 19 * u.s if name == "GPS" else getattr(middle, name.lower())  # Rots et al. 2015, table 2
        return {"DATE-OBS": (iso(begin(shown, exposure)), ""), "TIMESYS": (name, "")}

    return cards


def from_reference(middle: Time, exposure: float) -> Cards:
    """Seconds from a reference, in TT."""
    day = int(middle.tt.mjd) - 100
    start = seconds(begin(middle.tt, exposure), 2400000.5 + day)
    return {
        "MJDREFI": (day, ""), "MJDREFF": (0.0, ""), "TSTART": (start, ""), "TSTOP": (start + exposure, ""),
        "TIMESYS": ("TT", ""),
    }  # fmt: skip


def local_time(middle: Time, exposure: float) -> Cards:
    """Local time two hours ahead of UTC."""
    start = begin(middle, exposure) + 2 * u.h
    return {"DATE-OBS": (iso(start)[:10], ""), "LT": (iso(start)[11:], "start"), "TIMEZONE": ("UTC+02:00", "")}


def night_date(middle: Time, exposure: float) -> Cards:
    """The date of the evening at 20 degrees east: it begins at local noon."""
    start = begin(middle, exposure)
    evening = start + (20.0 / 360.0 - 0.5) * u.day
    return {"DATE-OBS": (iso(evening)[:10], "date of night"), "UT": (iso(start)[11:], "start")}


def night_by_mjd(middle: Time, exposure: float) -> Cards:
    """The date of the evening before, which MJD-OBS gives away."""
    start = begin(middle, exposure)
    return {
        "DATE-OBS": (day_month_year(start - 1 * u.day), "start"), "UT": (iso(start)[11:], ""),
        "MJD-OBS": (float(start.mjd), ""),
    }  # fmt: skip


def sidereal(middle: Time, exposure: float) -> Cards:
    """Local sidereal time at 20 degrees east."""
    start = begin(middle, exposure)
    hours = start.sidereal_time("apparent", longitude=20.0 * u.deg).hourangle
    return {"DATE-OBS": (iso(start)[:10], "UT date"), "LST": (float(hours), "[h] at start")}


def at_barycentre(middle: Time, exposure: float) -> Cards:
    """A time that has been taken to the barycentre already."""
    there = middle.tdb + middle.light_travel_time(PULSAR, kind="barycentric", ephemeris="builtin")
    return {"DATE-AVG": (iso(there), ""), "TIMESYS": ("TDB", ""), "TREFPOS": ("BARYCENTER", "")}


def date_only(middle: Time, exposure: float) -> Cards:
    """No time of day at all."""
    return {"DATE-OBS": (day_month_year(middle), "")}


@dataclass(frozen=True)
class Clock:
    """A way to write times: in use until a year, at a site ('' for a header without one), good to so many seconds.

    `planes` are those of a cube over time; `exposure_s` that of one frame.
    """

    name: str
    style: Style
    site: str = "south array"
    until: float = LAST_YEAR
    good_to: float = FULL_CLOCK_S
    planes: int = 1
    exposure_s: float = EXPOSURE_S


SCALES = ("UTC", "TAI", "TT", "GPS", "TDB", "TCG", "TCB", "UT1")
CLOCKS = (
    Clock("text", old_text, "north array", 1999.9),
    Clock("hours", old_hours, "east camera", 1999.9),
    Clock("seconds", old_seconds, "south array", 1999.9),
    Clock("middle", old_middle, "north array"),
    Clock("end", old_end, "east camera"),
    Clock("mjd", mjd_start, "north array"),
    Clock("ends", two_ends, "east camera"),
    Clock("long", two_ends, "north array", exposure_s=1300.0),
    Clock("average", average, "south array"),
    *(Clock(name.lower(), in_scale(name), list(SITES)[k % 3]) for k, name in enumerate(SCALES)),
    Clock("reference", from_reference, "east camera"),
    Clock("local", local_time, "south array"),
    Clock("night", night_date, "south array"),
    Clock("jd", night_by_mjd, "north array", 1999.9),
    Clock("cube", average, "east camera", planes=2),
    Clock("barycentre", at_barycentre, "north array"),
    Clock("siteless", average, "", good_to=GEOCENTRE_S),
    Clock("sidereal", sidereal, "south array", good_to=SIDEREAL_S),
    Clock("date", date_only, "south array", 1999.9, good_to=np.nan),
)
PER_CLOCK = 4
NOT_IN_UTC = {"tai", "tt", "gps", "tdb", "tcg", "tcb", "barycentre", "reference"}


def cycles(which: Clock, rng: np.random.Generator) -> np.ndarray:
    """Numbers of pulses spread over the years that a style was in use, one in each part of them."""
    edges = np.linspace(FIRST_YEAR, which.until, PER_CLOCK + 1)
    years = edges[:-1] + rng.uniform(0.05, 0.95, PER_CLOCK) * np.diff(edges)
    return np.round((Time(years, format="jyear", scale="tdb").jd - EPOCH.jd) * 86400.0 / PERIOD_S)


def header(which: Clock, middle: Time, step_s: float) -> fits.Header:
    """The celestial cards of the simulated skies, and the times as `which` writes them."""
    site = SITES[which.site or "south array"]
    metres = tuple(float(axis.to_value("m")) for axis in (site.x, site.y, site.z))
    sky = skies.Sky(instrument=which.site or "lost array", size=SIZE, site=metres)
    cards = skies.header(sky, 50000.0, (0.0, 0.0))
    for key in ("DATE-OBS", "TIMESYS", "XPOSURE", *(() if which.site else ("OBSGEO-X", "OBSGEO-Y", "OBSGEO-Z"))):
        del cards[key]
    written = which.style(middle, which.exposure_s) | exposure_card(which.exposure_s)
    if which.planes > 1:
        day = int(middle.mjd)
        written |= {
            "CTYPE3": ("UTC", ""), "CRPIX3": (1.0, ""), "CRVAL3": (seconds(middle, 2400000.5 + day), ""),
            "CDELT3": (step_s, ""), "CUNIT3": ("s", ""), "MJDREF": (float(day), ""),
        }  # fmt: skip
    for key, (value, comment) in written.items():
        cards[key] = (value, comment)
    return cards


@pytest.fixture(scope="module")
def archive(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Four frames in every style, each with a pulse at the middle of its exposure, and the list of one target."""
    folder = tmp_path_factory.mktemp("decades")
    (folder / "frames").mkdir()
    rng = np.random.default_rng(35)
    with iers.conf.set_temp("auto_download", False):
        for which in CLOCKS:
            numbers, site = cycles(which, rng), SITES[which.site or "south array"]
            for number, (first, second) in enumerate(
                zip(pulses(numbers, site), pulses(numbers + 1, site), strict=True)
            ):
                image = rng.standard_normal((which.planes, SIZE, SIZE))
                for plane in image:
                    skies.add_source(plane, np.full(2, (SIZE - 1) / 2), 20.0, 3.0)
                image = image if which.planes > 1 else image[0]
                cards = header(which, first, seconds(second.tai) - seconds(first.tai))
                name = folder / "frames" / f"{which.name}-{number}.fits"
                fits.PrimaryHDU(image.astype(np.float32), cards).writeto(name)
    (folder / "targets.csv").write_text(f"name,ra,dec\npulsar,{PULSAR.ra.deg},{PULSAR.dec.deg}\n", encoding="utf-8")
    (folder / "s.toml").write_text("[controls]\nper_field = 0\n[comparisons]\nwanted = 0\n", encoding="utf-8")
    return folder


def residuals(archive: Path, run: str) -> dict[str, np.ndarray]:
    """Mine the archive; by style, how many seconds each measurement's time is from the nearest pulse."""
    arguments = ["mine", archive / "frames", "--targets", archive / "targets.csv", "--out", archive / run,
                 "--settings", archive / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0
    frames = pq.read_table(archive / run / "frames.parquet").to_pylist()
    rows = pq.read_table(archive / run / "measurements").to_pylist()
    style = {frame["id"]: frame["path"].partition("-")[0] for frame in frames}
    found: dict[str, list[float]] = {}
    for row in rows:
        time = np.nan if row["t_tdb_s"] is None else row["t_tdb_s"]
        off = (time - seconds(EPOCH)) / PERIOD_S
        found.setdefault(style[row["frame"]], []).append(PERIOD_S * (off - np.round(off)))
    return {name: np.array(values) for name, values in found.items()}


def test_every_clock_keeps_the_phase(archive: Path) -> None:
    """Full clocks to 5 ms, sidereal time to 2 s, a frame without a site to the Earth's radius; a date alone to nothing."""
    found = residuals(archive, "run")
    assert {which.name: PER_CLOCK * which.planes for which in CLOCKS} == {n: len(v) for n, v in found.items()}
    for which in CLOCKS:
        off = np.abs(found[which.name])
        if which.good_to == which.good_to:
            assert off.max() <= which.good_to, (which.name, off)
        else:
            assert np.isnan(off).all(), which.name


def test_leap_seconds_matter(archive: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The test above would notice: without leap seconds every time in UTC is 12 to 27 s off, one in TAI not at all."""
    monkeypatch.setattr(clock, "_tai_minus_utc", lambda day, _seconds: np.full(len(day), 10.0))
    found = residuals(archive, "no_leap_seconds")
    for name, off in found.items():  # TAI - UTC was 10 s in 1972, 22 s in 1985 and 37 s from 2017 on (IERS Bulletin C)
        if name in NOT_IN_UTC:
            assert np.abs(off).max() <= FULL_CLOCK_S, name
        elif name != "date":
            assert ((off < -11.0) & (off > -28.0)).all(), (name, off)


def test_the_barycentre_matters(archive: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The test above would notice: at the site pulses come up to 510 s early or late, all over the year."""
    monkeypatch.setattr(clock, "roemer", lambda _vector, towards: np.zeros(len(towards)))
    found = residuals(archive, "no_barycentre")
    for which in CLOCKS:
        if which.name == "barycentre":
            assert np.abs(found[which.name]).max() <= FULL_CLOCK_S
        elif which.name != "date":
            assert np.abs(found[which.name]).max() > 100.0, which.name
