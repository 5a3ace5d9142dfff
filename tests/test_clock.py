"""Times: header instants to TDB and UTC, and the barycentre, against published values and against astropy."""

from __future__ import annotations

import astropy.units as u
import erfa
import numpy as np
import pytest
from astropy.coordinates import EarthLocation, SkyCoord, get_body_barycentric
from astropy.time import Time
from astropy.utils import iers
from hypothesis import given
from hypothesis import strategies as st

from hindlight import clock
from hindlight.facts import Moment

GEOCENTRE = (np.nan, np.nan, np.nan)
SITE = EarthLocation.from_geodetic(20 * u.deg, -30 * u.deg, 1000 * u.m)
SITE_M = tuple(float(axis.to_value("m")) for axis in (SITE.x, SITE.y, SITE.z))


def tdb(text: str, scale: str = "utc", site: tuple[float, float, float] = GEOCENTRE) -> float:
    """Seconds from J2000.0 TDB of an ISO time."""
    return float(clock.to_tdb([Moment.from_iso(text)], [scale], np.array([site]))[0])


def direction(ra: float, dec: float) -> np.ndarray:
    """Unit vectors of shape (1, 3)."""
    a, d = np.radians([ra]), np.radians([dec])
    return np.stack([np.cos(d) * np.cos(a), np.cos(d) * np.sin(a), np.sin(d)], axis=-1)


def test_sofa_time_scale_example() -> None:
    """The worked example of the SOFA Time Scale and Calendar Tools cookbook (2021, section 'An example'), to 1 us."""
    x, y, z = erfa.gd2gc(1, np.radians(-(155 + 55 / 60 + 59.6 / 3600)), np.radians(19 + 28 / 60 + 52.5 / 3600), 0.0)
    site = (float(x), float(y), float(z))
    expected = tdb("2006-01-15T21:25:42.684373", "tdb")
    printed = {
        "utc": "2006-01-15T21:24:37.500000",
        "tai": "2006-01-15T21:25:10.500000",
        "tt": "2006-01-15T21:25:42.684000",
        "tcg": "2006-01-15T21:25:43.322690",
        "tcb": "2006-01-15T21:25:56.893952",
    }
    for scale, text in printed.items():
        assert tdb(text, scale, site) == pytest.approx(expected, abs=1.5e-6), scale
    # UT1 is printed for UT1-UTC = +0.3341 s, which the cookbook rounds to a tenth of a millisecond.
    assert tdb("2006-01-15T21:24:37.834100", "ut1", site) == pytest.approx(expected, abs=1e-4)


@pytest.mark.parametrize(
    ("utc", "roemer_s", "geocentre_s", "bjd"),
    [
        ("1988-03-17T06:00:00", -26.0713, -26.0907, 2447237.75034854),
        ("1988-06-21T00:00:00", 492.4135, 492.3946, 2447333.50634951),
        ("2020-09-21T18:00:00", 5.9889, 5.9700, 2459114.25087004),
    ],
)
def test_barycentric_table(utc: str, roemer_s: float, geocentre_s: float, bjd: float) -> None:
    """Values of astropy 8.0.2 `Time.light_travel_time` (built-in ephemeris), agreeing with erfa.epv00, to 1 ms."""
    source = direction(270.0, -10.0)
    for site, expected in ((SITE_M, roemer_s), (GEOCENTRE, geocentre_s)):
        t = np.array([tdb(utc, site=site)])
        delay = clock.roemer(clock.observatory_vectors(t, np.array([site]))[0], source)
        assert delay[0] == pytest.approx(expected, abs=1e-4)
        if site is SITE_M:
            assert clock.bjd(t + delay)[0] == pytest.approx(bjd, abs=1e-3 / 86400)


@pytest.mark.parametrize("scale", clock.SCALES)
def test_scales_agree_with_astropy(scale: str) -> None:
    """Every scale is turned into TDB at a site as astropy turns it, to less than a microsecond over fifty years."""
    rng = np.random.default_rng(3)
    starts, _ = clock._leap_seconds()
    mjd = rng.integers(41700, 60900, 300)
    mjd = mjd[~np.isin(mjd + 1, starts)]  # in a quasi-JD the day that ends with a leap second is stretched
    seconds = rng.uniform(0, 86400, len(mjd))
    with iers.conf.set_temp("auto_download", False):
        astropy_tdb = Time(mjd + 2400000.5, seconds / 86400, format="jd", scale=scale, location=SITE).tdb
    expected = ((astropy_tdb.jd1 - 2451545.0) + astropy_tdb.jd2) * 86400
    moments = [Moment(int(day), float(s)) for day, s in zip(mjd, seconds, strict=True)]
    ours = clock.to_tdb(moments, [scale] * len(mjd), np.tile(SITE_M, (len(mjd), 1)))
    # UT1 - UTC comes from another release of the same bulletins: tens of microseconds apart at the most.
    tolerance = 1e-4 if scale == "ut1" else 5e-7
    np.testing.assert_allclose(ours, expected, rtol=0, atol=tolerance)


@pytest.mark.parametrize(
    ("day", "offset"),
    [
        ("1965-01-01", 3.54013),
        ("1972-01-01", 10.0),
        ("1980-01-01", 19.0),
        ("1988-01-01", 24.0),
        ("1999-01-01", 32.0),
        ("2012-07-01", 35.0),
        ("2017-01-01", 37.0),
        ("2049-01-01", 37.0),
    ],
)
def test_tai_minus_utc(day: str, offset: float) -> None:
    """TAI - UTC at the start of days, from the table of IERS Bulletin C (`erfa.dat`); the last value holds on."""
    assert tdb(f"{day}T00:00:00") - tdb(f"{day}T00:00:00", "tai") == pytest.approx(offset, abs=1e-6)


def test_leap_second_is_a_second() -> None:
    """23:59:60.5 is half a second before midnight and a second and a half after 23:59:59."""
    assert tdb("2017-01-01T00:00:00") - tdb("2016-12-31T23:59:60.5") == pytest.approx(0.5, abs=1e-6)
    assert tdb("2016-12-31T23:59:60.5") - tdb("2016-12-31T23:59:59") == pytest.approx(1.5, abs=1e-6)
    assert clock.iso_utc(np.array([tdb("2016-12-31T23:59:60.5")])) == ["2016-12-31T23:59:60.500"]


def test_midnight_as_24_hours() -> None:
    """24:00:00 is the midnight that ends the day."""
    assert tdb("1988-03-17T24:00:00") == tdb("1988-03-18T00:00:00")


@pytest.mark.parametrize(
    ("year", "delta_t"), [(1870, 1.61), (1900, -2.72), (1920, 21.16), (1940, 24.33), (1950, 29.15)]
)
def test_universal_time_before_1960(year: int, delta_t: float) -> None:
    """Before 1960 'utc' is time by the Earth's rotation, within 1.5 s of TT - UT1 in the Astronomical Almanac, K8."""
    seconds = tdb(f"{year}-01-01T00:00:00") - tdb(f"{year}-01-01T00:00:00", "tt")
    assert seconds == pytest.approx(delta_t, abs=1.5)


def test_universal_time_is_continuous_in_1960() -> None:
    """Where UTC begins, time by the Earth's rotation leads over to it within a tenth of a second."""
    step = tdb("1960-01-01T00:00:00") - tdb("1959-12-31T00:00:00") - 86400.0
    assert abs(step) < 0.1


def test_unknown_instants_are_nan() -> None:
    """None and impossible years give NaN, and nothing else in the batch changes."""
    moments = [None, Moment(-99999, 0.0), Moment(50000, 0.0), Moment(999999, 0.0)]
    times = clock.to_tdb(moments, ["utc"] * 4, np.full((4, 3), np.nan))
    assert np.isnan(times).tolist() == [True, True, False, True]
    assert times[2] == tdb("1995-10-10T00:00:00")
    assert clock.iso_utc(times) == ["", "", "1995-10-10T00:00:00.000", ""]


def test_unknown_scale_is_refused() -> None:
    """A scale that astropy does not have is an error that names it."""
    with pytest.raises(ValueError, match="'lst'"):
        clock.to_tdb([None], ["lst"], np.full((1, 3), np.nan))


@given(
    st.integers(-3242, 106301),
    st.integers(0, 86399999),
    st.sampled_from(["utc", "tai", "tt"]),
)
def test_iso_comes_back(mjd: int, milliseconds: int, scale: str) -> None:
    """UTC text of an instant, read again, is that instant to half a millisecond, in every year."""
    time = clock.to_tdb([Moment(mjd, milliseconds / 1000)], [scale], np.full((1, 3), np.nan))
    if not np.isfinite(time[0]):
        return
    again = Moment.from_iso(clock.iso_utc(time)[0])
    if again is None or not -3242 <= again.mjd < 106302:
        assert mjd in (-3242, 106301)
        return
    back = clock.to_tdb([again], ["utc"], np.full((1, 3), np.nan))
    # UTC of the sixties has steps of tenths of a second, and so have the polynomials for earlier years where they meet.
    in_a_step = 36933 <= mjd <= 41317 or any(abs(mjd - join) < 3 for join in (409, 15020, 22324, 29995))
    assert back[0] == pytest.approx(time[0], abs=0.2 if in_a_step else 0.00053)


def test_iso_rounds_up_to_the_next_day() -> None:
    """Half a millisecond before midnight is midnight, and never 24:00 or a 60th second."""
    late = tdb("2015-12-31T23:59:59") + 0.9997
    assert clock.iso_utc(np.array([late])) == ["2016-01-01T00:00:00.000"]


def test_iso_dates() -> None:
    """Days become dates, unknown days nothing."""
    assert clock.iso_date(np.array([47526.0, np.nan, 0.0])) == ["1988-12-31", "", "1858-11-17"]


@pytest.mark.parametrize(("ra", "dec"), [(270.0, -10.0), (10.0, 80.0), (150.0, -30.0), (0.0, 0.0), (45.0, -60.0)])
def test_light_travel_times_agree_with_astropy(ra: float, dec: float) -> None:
    """Delays over fifty years equal astropy's own to 0.1 microsecond."""
    with iers.conf.set_temp("auto_download", False):
        times = Time(np.linspace(41800, 60900, 97), format="mjd", scale="utc", location=SITE)
        seconds = ((times.tdb.jd1 - 2451545.0) + times.tdb.jd2) * 86400
        travel = times.light_travel_time(SkyCoord(ra, dec, unit="deg"), ephemeris="builtin").to_value("s")
    ours = clock.observatory_vectors(seconds, np.tile(SITE_M, (len(seconds), 1)))
    delays = [clock.roemer(vector, direction(ra, dec))[0] for vector in ours]
    np.testing.assert_allclose(delays, travel, rtol=0, atol=1e-7)


def test_observatory_is_where_earth_and_site_are() -> None:
    """Earth by ephemeris plus site by rotation, as astropy gives them, but for the 2.1 microseconds of aberration."""
    with iers.conf.set_temp("auto_download", False):
        times = Time(np.linspace(41800, 60900, 97), format="mjd", scale="utc", location=SITE)
        place, _ = SITE.get_gcrs_posvel(times)
        earth = get_body_barycentric("earth", times, ephemeris="builtin")
        seconds = ((times.tdb.jd1 - 2451545.0) + times.tdb.jd2) * 86400
    ours = clock.observatory_vectors(seconds, np.tile(SITE_M, (len(seconds), 1)))
    expected = (place + earth).xyz.to_value("m").T / clock.LIGHT_M_S
    np.testing.assert_allclose(ours, expected, rtol=0, atol=2.3e-6)


def test_observatory_without_time_or_site() -> None:
    """No time gives NaN; no site gives the geocentre, at most 21.3 ms from any place on the ground."""
    times = np.array([0.0, np.nan, 0.0])
    vectors = clock.observatory_vectors(times, np.array([SITE_M, SITE_M, GEOCENTRE]))
    assert np.isnan(vectors[1]).all()
    assert 0.0210 < np.linalg.norm(vectors[0] - vectors[2]) < 0.0213
    assert 488.03 < np.linalg.norm(vectors[2]) < 509.94


def test_old_and_coming_dates_work() -> None:
    """Plates of the nineteenth century and predictions for the next are within the ephemeris, without a warning."""
    times = np.array([tdb("1887-05-05T05:00:00"), tdb("2110-05-05T05:00:00")])
    lengths = np.linalg.norm(clock.observatory_vectors(times, np.array([SITE_M, SITE_M])), axis=1)
    assert ((lengths > 488.0) & (lengths < 511.0)).all()


def test_roemer_has_the_same_bits_in_any_batch() -> None:
    """The delay of a source does not depend on which other sources are asked about."""
    rng = np.random.default_rng(5)
    sources = rng.normal(size=(257, 3))
    vector = rng.normal(size=3) * 300
    together = clock.roemer(vector, sources)
    assert together.tolist() == [clock.roemer(vector, sources[i : i + 1])[0] for i in range(257)]


def test_observatory_has_the_same_bits_in_any_batch() -> None:
    """A frame's vector does not depend on which other frames are asked about."""
    times = np.linspace(-5e8, 8e8, 33)
    sites = np.tile(SITE_M, (33, 1))
    together = clock.observatory_vectors(times, sites)
    alone = [clock.observatory_vectors(times[i : i + 1], sites[i : i + 1])[0].tolist() for i in range(33)]
    assert together.tolist() == alone


def test_nothing_is_downloaded(monkeypatch: pytest.MonkeyPatch) -> None:
    """Times work where every attempt to reach the network is an error."""

    def refuse(*_args: object, **_kwargs: object) -> None:
        raise AssertionError("tried to download")

    monkeypatch.setattr("astropy.utils.data.download_file", refuse)
    monkeypatch.setattr("astropy.utils.iers.iers.download_file", refuse)
    clock._earth_rotation.cache_clear()
    t = np.array([tdb("2031-01-01T00:00:00", "ut1", SITE_M)])
    assert np.isfinite(clock.observatory_vectors(t, np.array([SITE_M]))).all()
