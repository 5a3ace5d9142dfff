"""The dialect for conforming headers: which card is trusted for what, and what is said to be taken for granted."""

from __future__ import annotations

import math

import pytest
from astropy.coordinates import EarthLocation
from astropy.wcs import WCS
from hypothesis import given
from hypothesis import strategies as st

from hindlight import ASSUMPTIONS, Cards, FrameFacts, Moment, PlaneAxes
from hindlight.headers import planes
from hindlight_plugins.standard_headers import StandardHeaders
from made import SITE, cards_of, header, image

NO_TIMES = {"DATE__OBS": None, "EXPTIME": None, "TIMESYS": None}
MARCH = 47237  # 1988-03-17, MJD


def read(axes: PlaneAxes | None = None, **cards: object) -> FrameFacts:
    """The facts of the plain header with some cards changed."""
    return StandardHeaders().read(cards_of(header(**cards)), axes or PlaneAxes())


def instants(facts: FrameFacts) -> tuple[Moment | None, Moment | None, Moment | None]:
    """Start, middle and end."""
    return facts.start, facts.middle, facts.end


def test_plain_header() -> None:
    """A complete header gives every fact; only the primary beam, for which there is no card, is left open."""
    facts = read()
    assert facts == FrameFacts(
        instrument="north array", band="", stokes="I", frequency_hz=154e6, unit="Jy/beam",
        beam_major=108.0, beam_minor=72.0, beam_angle=30.0,
        start=Moment(MARCH, 21600.0), scale="utc", exposure_s=120.0, site=SITE,
        assumptions=("primary_beam_unknown",),
        saturation=facts.saturation, electrons_per_unit=facts.electrons_per_unit, depth=facts.depth,
        span_s=facts.span_s,
    )  # fmt: skip
    assert all(map(math.isnan, (facts.saturation, facts.electrons_per_unit, facts.depth, facts.span_s)))


def test_everything_may_be_missing() -> None:
    """An empty header is read too, with a word for all that it does not say."""
    facts = StandardHeaders().read(Cards(b""), PlaneAxes())
    assert facts.assumptions == ("no_clock", "no_unit", "no_instrument")
    assert instants(facts) == (None, None, None)


@given(
    st.dictionaries(st.sampled_from(sorted(header())), st.sampled_from(["text", "", 5, -1.5, 1e300, True]), max_size=9)
)
def test_wrong_cards_are_no_error(cards: dict[str, object]) -> None:
    """Cards of the wrong kind are as good as absent."""
    facts = read(**{key.replace("-", "__"): value for key, value in cards.items()})
    assert set(facts.assumptions) <= set(ASSUMPTIONS)


@pytest.mark.parametrize(
    ("cards", "expected"),
    [
        ({"DATE__BEG": "1988-03-17T05:00:00", "DATE__END": "1988-03-17T07:00:00"}, (18000.0, None, 25200.0)),
        ({"MJD__BEG": MARCH + 0.25, "MJD__END": MARCH + 0.5}, (21600.0, None, 43200.0)),
        ({"DATE__BEG": "1988-03-17", "MJD__BEG": MARCH + 0.5}, (43200.0, None, None)),
        ({"DATE__END": "1988-03-17T07:00:00"}, (21600.0, None, 25200.0)),
        ({"DATE__END": "1988-03-17T05:00:00"}, (None, None, 18000.0)),
        ({"DATE__AVG": "1988-03-17T05:00:00"}, (None, 18000.0, None)),
        ({"MJD__AVG": MARCH + 0.75}, (None, 64800.0, None)),
        ({"DATE__BEG": "1988-03-17", "DATE__AVG": "1988-03-17T05:00:00"}, (None, 18000.0, None)),
        ({"MJD__OBS": MARCH + 0.25}, (21600.0, None, None)),
        ({"DATE__OBS": "1988-03-17", "MJD__OBS": MARCH + 0.75}, (64800.0, None, None)),
        ({"TSTART": 100.0, "TSTOP": 400.0, "MJDREFI": MARCH, "MJDREFF": 0.25}, (21700.0, None, 22000.0)),
        ({"TSTART": 0.25, "TIMEUNIT": "d", "JDREF": MARCH + 2400000.5}, (21600.0, None, None)),
        ({"TSTART": 60.0, "DATEREF": "1988-03-17T01:00:00", "TIMEOFFS": 0.5}, (3660.5, None, None)),
        ({"TSTART": 60.0, "MJDREF": float(MARCH), "DATEREF": "1999-03-17T01:00:00"}, (60.0, None, None)),
        ({"TSTART": 60.0, "JDREFI": MARCH + 2400000, "JDREFF": 0.5}, (60.0, None, None)),
    ],
)
def test_order_of_trust(cards: dict[str, object], expected: tuple[float | None, ...]) -> None:
    """DATE-BEG and DATE-END before DATE-AVG before DATE-OBS before MJD-OBS; a time of day before a date alone."""
    facts = read(**({"DATE__OBS": "1988-03-17T06:00:00"} | cards))
    for moment, seconds in zip(instants(facts), expected, strict=True):
        if seconds is None:
            assert moment is None
        else:
            assert moment is not None
            assert moment.mjd == MARCH
            assert moment.seconds == pytest.approx(seconds, abs=1e-5)
            assert moment.has_clock
    assert "no_clock" not in facts.assumptions


@pytest.mark.parametrize(
    ("comment", "which"),
    [
        ("start of observation", "start"),
        ("Beginning of exposure", "start"),
        ("[UTC] date of observation", "start"),
        ("UTC at mid-exposure", "middle"),
        ("middle of the observation", "middle"),
        ("centre of exposure", "middle"),
        ("average time", "middle"),
        ("midnight of the start", "start"),
        ("end of exposure", "end"),
        ("start to end", "start"),
    ],
)
def test_comment_of_the_date(comment: str, which: str) -> None:
    """DATE-OBS is the start unless its own comment says that it is the middle or the end (FITS 4.0, 9.5)."""
    facts = read(DATE__OBS=("1988-03-17T06:00:00", comment))
    assert getattr(facts, which) == Moment(MARCH, 21600.0)
    assert sum(moment is not None for moment in instants(facts)) == 1
    assert "start_assumed" not in facts.assumptions


def test_two_dates_that_differ() -> None:
    """DATE-OBS and MJD-OBS that disagree leave open which is the start, and this is said."""
    assert "start_assumed" in read(MJD__OBS=MARCH + 0.2507).assumptions
    assert "start_assumed" not in read(MJD__OBS=MARCH + 0.25).assumptions


@pytest.mark.parametrize(
    ("cards", "exposure", "span"),
    [
        ({"XPOSURE": 100.0, "EXPTIME": 120.0, "TELAPSE": 150.0}, 100.0, 150.0),
        ({"XPOSURE": 2.0, "TIMEUNIT": "min"}, 120.0, math.nan),
        ({"EXPTIME": None, "EXPOSURE": 90.0}, 90.0, math.nan),
        ({"EXPTIME": None, "TELAPSE": 90.0}, math.nan, 90.0),
        ({"EXPTIME": None}, math.nan, math.nan),
        ({"EXPTIME": 0.0}, math.nan, math.nan),
        ({"EXPTIME": -5.0}, math.nan, math.nan),
    ],
)
def test_exposure(cards: dict[str, object], exposure: float, span: float) -> None:
    """Good time is XPOSURE, EXPTIME or EXPOSURE in that order; TELAPSE is the span and no good time."""
    facts = read(**cards)
    assert facts.exposure_s == pytest.approx(exposure, nan_ok=True)
    assert facts.span_s == pytest.approx(span, nan_ok=True)


@pytest.mark.parametrize(
    ("timesys", "scale", "seconds"),
    [
        ("UTC", "utc", 21600.0),
        ("UT", "utc", 21600.0),
        ("UT1", "ut1", 21600.0),
        ("TAI", "tai", 21600.0),
        ("IAT", "tai", 21600.0),
        ("ET", "tt", 21600.0),
        ("TT(TAI)", "tt", 21600.0),
        ("tdb", "tdb", 21600.0),
        ("TCB", "tcb", 21600.0),
        ("GPS", "tai", 21619.0),
    ],
)
def test_time_scales(timesys: str, scale: str, seconds: float) -> None:
    """Names of time scales, old ones too; GPS time is TAI less 19 seconds."""
    facts = read(TIMESYS=timesys)
    assert facts.scale == scale
    assert facts.start == Moment(MARCH, seconds)
    assert "scale_assumed" not in facts.assumptions


def test_no_time_scale() -> None:
    """Without TIMESYS the time is UTC, and this is said; of a scale that nobody knows the date alone is kept."""
    assert "scale_assumed" in read(TIMESYS=None).assumptions
    local = read(TIMESYS="LOCAL")
    assert local.start == Moment(MARCH, 0.0, has_clock=False)
    assert "no_clock" in local.assumptions


@pytest.mark.parametrize("date", ["1988-03-17", "17/03/88", None, "unknown"])
def test_no_time_of_day(date: str | None) -> None:
    """A date alone, a two-digit year or nothing leaves the frame without a clock, with the date if there is one."""
    facts = read(DATE__OBS=date)
    assert facts.assumptions[0] == "no_clock"
    assert facts.start == (Moment(MARCH, 0.0, has_clock=False) if date == "1988-03-17" else None)
    assert "scale_assumed" not in read(DATE__OBS=date, TIMESYS=None).assumptions


def test_file_dates_are_no_observing_dates() -> None:
    """DATE and DATE-MAP say when the file was made."""
    facts = read(**NO_TIMES, DATE="2001-01-01T00:00:00", DATE__MAP="2001-01-01T00:00:00")
    assert instants(facts) == (None, None, None)


def test_places() -> None:
    """A barycentric header has no site, the geocentre is one, and any other place gives no usable time."""
    assert read(TREFPOS="BARYCENTER").barycentric
    assert read(TREFPOS="BARYCENTER").site is None
    assert read(TREFPOS="GEOCENTER").site == (0.0, 0.0, 0.0)
    assert read(TREFPOS="TOPOCENTER").site == SITE
    assert "no_clock" in read(TREFPOS="HELIOCENTER").assumptions
    assert "no_clock" not in read().assumptions


def test_sites() -> None:
    """OBSGEO is a place on the ground, by coordinates or by latitude, longitude and height; else it is none."""
    away = {f"OBSGEO__{axis}": None for axis in "XYZ"}
    expected = EarthLocation.from_geodetic(lon=20.0, lat=-30.0, height=1000.0)
    by_angle = read(**away, OBSGEO__B=-30.0, OBSGEO__L=20.0, OBSGEO__H=1000.0).site
    assert by_angle == pytest.approx([axis.to_value("m") for axis in expected.geocentric])
    assert read(**away).site is None
    assert read(OBSGEO__X=0.0, OBSGEO__Y=0.0, OBSGEO__Z=0.0).site is None
    assert read(OBSGEO__X=5e9).site is None


@pytest.mark.parametrize(
    ("cards", "beam"),
    [
        ({}, (108.0, 72.0, 30.0)),
        ({"BMAJ": 0.02, "BMIN": 0.03}, (108.0, 72.0, 120.0)),
        ({"BMIN": None}, (108.0, 108.0, 30.0)),
        ({"BPA": None}, (88.18, 88.18, 0.0)),
        ({"BPA": -10.0}, (108.0, 72.0, 170.0)),
        ({"BMAJ": None, "SEEING": 1.2}, (1.2, 1.2, 0.0)),
        ({"BMAJ": None, "SEEING": (1.2, "[arcsec]"), "PSFFWHM": 2.0}, (1.2, 1.2, 0.0)),
        ({"BMAJ": 0.0}, (math.nan,) * 3),
    ],
)
def test_beams(cards: dict[str, object], beam: tuple[float, ...]) -> None:
    """BMAJ, BMIN and BPA in degrees, in either order; SEEING in arcsec; a long beam without angle as a round one."""
    facts = read(**cards)
    assert (facts.beam_major, facts.beam_minor, facts.beam_angle) == pytest.approx(beam, abs=0.01, nan_ok=True)


@pytest.mark.parametrize(
    ("cards", "frequency"),
    [
        ({"FREQ": 154e6}, 154e6),
        ({"FREQ": None, "OBSFREQ": 1.4e9}, 1.4e9),
        ({"FREQ": (154.0, "[MHz] frequency")}, 154e6),
        ({"FREQ": (1.4, "[GHz] frequency")}, 1.4e9),
        ({"FREQ": 154.0}, math.nan),
        ({"FREQ": None, "RESTFREQ": 1.42e9}, math.nan),
    ],
)
def test_frequency_cards(cards: dict[str, object], frequency: float) -> None:
    """Hertz, or the unit that the comment states; nothing outside 10 MHz to 1 THz, and no rest frequency."""
    facts = read(**cards)
    assert facts.frequency_hz == pytest.approx(frequency, nan_ok=True)
    assert ("no_frequency" in facts.assumptions) == math.isnan(frequency)


def test_frequency_and_stokes_of_a_plane() -> None:
    """The axes of a plane count before the keywords."""
    axes = PlaneAxes({"FREQ": 1.4, "STOKES": 4.0}, {"FREQ": 0.0, "STOKES": 1.0}, {"FREQ": "GHz", "STOKES": ""})
    assert (read(axes).frequency_hz, read(axes).stokes) == (1.4e9, "V")
    for code, name in ((-1.0, "RR"), (-5.0, "XX"), (2.0, "Q"), (17.0, "17")):
        assert read(PlaneAxes({"STOKES": code}, {"STOKES": 1.0}, {"STOKES": ""})).stokes == name


def test_stokes_assumed() -> None:
    """A radio image that does not say is total intensity, and this is said; of a photograph nobody asks."""
    assert (read(STOKES="V").stokes, read(STOKES=None).stokes) == ("V", "I")
    assert "stokes_assumed" in read(STOKES=None).assumptions
    optical = read(STOKES=None, BMAJ=None, FREQ=None, BUNIT="adu", FILTER="r")
    assert optical.assumptions == ()
    assert optical.band == "r"


@pytest.mark.parametrize(
    ("unit", "electrons"),
    [("adu", 2.0), ("COUNTS", 2.0), ("adu/s", 240.0), ("electron", 1.0), ("electron/s", 120.0), ("Jy/beam", math.nan)],
)
def test_gain(unit: str, electrons: float) -> None:
    """Electrons for a unit of the pixels: the gain for counts, times the exposure for a rate, none for fluxes."""
    assert read(BUNIT=unit, GAIN=2.0).electrons_per_unit == pytest.approx(electrons, nan_ok=True)


def test_names_and_levels() -> None:
    """Instrument before telescope; saturation and noise as they are stated."""
    facts = read(INSTRUME=None, TELESCOP="dish", SATURATE=60000.0, RMS=0.01)
    assert (facts.instrument, facts.saturation, facts.depth) == ("dish", 60000.0, 0.01)
    assert "no_instrument" in read(INSTRUME=None).assumptions
    assert "no_unit" in read(BUNIT=None).assumptions


def plane_times(n: int = 3, **cards: object) -> list[FrameFacts]:
    """The facts of the planes of a cube over time."""
    cube = image((n, 12, 16), **cards)
    return [StandardHeaders().read(cube.cards, plane.axes) for plane in planes(cube)]


TIME_AXIS = {"CTYPE3": "TIME", "CRPIX3": 1.0, "CRVAL3": 30.0, "CDELT3": 60.0, "CUNIT3": "s", "MJDREF": float(MARCH)}


def test_planes_over_time() -> None:
    """Each plane of a time axis has its own middle; its step is the exposure where the header states that of all."""
    found = plane_times(**TIME_AXIS)
    assert [facts.middle for facts in found] == [Moment(MARCH, s) for s in (30.0, 90.0, 150.0)]
    assert {(facts.exposure_s, facts.span_s) for facts in found} == {(60.0, 60.0)}
    assert all("plane_exposure" in facts.assumptions for facts in found)
    short = plane_times(**TIME_AXIS, EXPTIME=None, XPOSURE=50.0)
    assert {(facts.exposure_s, facts.span_s) for facts in short} == {(50.0, 60.0)}
    assert "plane_exposure" not in short[0].assumptions


def test_time_axis_in_other_units_and_scales() -> None:
    """Days and minutes, and scales named by the axis itself."""
    days = plane_times(**(TIME_AXIS | {"CUNIT3": "d", "CRVAL3": 0.5, "CDELT3": 0.25}))
    assert [facts.middle for facts in days] == [Moment(MARCH + d, s) for d, s in ((0, 43200.0), (0, 64800.0), (1, 0.0))]
    assert plane_times(**(TIME_AXIS | {"CTYPE3": "TAI"}))[0].scale == "tai"
    absolute = plane_times(**(TIME_AXIS | {"MJDREF": None, "CRVAL3": MARCH * 86400.0}))
    assert absolute[1].middle == Moment(MARCH, 60.0)


UNPLACED = TIME_AXIS | {"CRVAL3": 0.0, "MJDREF": None}


@pytest.mark.parametrize(
    "cards",
    [
        {"CUNIT3": "furlong"},
        {"CDELT3": None},
        {"CTYPE3": "TIME-TAB"},
        {"DATE__OBS": "1988-03-17"},
        {"DATE__OBS": ("1988-03-17T06:00:00", "middle of the observation")},
        {"MJDREF": -60000.0},  # a reference that leads nowhere is one all the same
        {"DATEREF": "in spring"},
        {"CRVAL3": 1.0e9},  # seconds since another zero
        {"CRVAL3": 21600.0},  # seconds since midnight: DATE-OBS has 06:00:00
        {"CRVAL3": 21660.0, "CRPIX3": 2.0},
        {"CTYPE3": "TAI"},  # DATE-OBS is in UTC
        {"CTYPE3": "GPS", "TIMESYS": "TAI"},
    ],
)
def test_time_axis_that_cannot_be_placed(cards: dict[str, object]) -> None:
    """Planes whose times cannot be told have no clock but the file's date; they are not spread over its span."""
    found = plane_times(**(UNPLACED | cards))
    assert all({"no_clock", "axis_time_unknown"} <= set(facts.assumptions) for facts in found)
    assert not any("axis_zero_assumed" in facts.assumptions for facts in found)
    assert {facts.start for facts in found} == {Moment(MARCH, 0.0, has_clock=False)}


def test_time_axis_with_a_date_for_reference() -> None:
    """Midnight of DATEREF is an instant (FITS 4.0, 9.2.2), and no assumption."""
    found = plane_times(**(UNPLACED | {"CRVAL3": 30.0, "DATEREF": "1988-03-17"}))
    assert [facts.middle for facts in found] == [Moment(MARCH, s) for s in (30.0, 90.0, 150.0)]
    assert not any("axis" in word for word in found[0].assumptions)


@pytest.mark.parametrize(
    "cards",
    [
        {},
        {"MJDREF": 0.0},
        {"MJDREF": 0.0, "DATEREF": "1858-11-17"},
        {"MJDREFI": 0, "MJDREFF": 0.0},
        {"JDREF": 0.0},
        {"DATEREF": ""},
        {"CTYPE3": "UTC"},
        {"CTYPE3": "TAI", "TIMESYS": "TAI"},
        {"CDELT3": 1.0, "CUNIT3": "min"},
        {"CRVAL3": -30.0, "TIMEOFFS": 30.0},
        {"CRVAL3": 60.0, "CRPIX3": 2.0},
    ],
)
def test_date_for_the_zero_of_a_time_axis(cards: dict[str, object]) -> None:
    """Without a reference, or with the zero of a calendar, DATE-OBS is the zero of the axis, which is said.

    MJD 0, which the standard takes (FITS 4.0, 9.2.2), counts where it leads to a likely date, as in seconds of MJD.
    """
    found = plane_times(**(UNPLACED | cards))
    assert [facts.middle for facts in found] == [Moment(MARCH, s) for s in (21600.0, 21660.0, 21720.0)]
    assert all("axis_zero_assumed" in facts.assumptions for facts in found)
    assert not any({"no_clock", "axis_time_unknown"} & set(facts.assumptions) for facts in found)
    assert {(facts.exposure_s, facts.span_s) for facts in found} == {(60.0, 60.0)}


def test_header_as_astropy_writes_a_time_axis() -> None:
    """`WCS.to_header` writes MJDREF = 0.0 for a header without a reference: the planes are where DATE-OBS says."""
    wcs = WCS(naxis=3)
    wcs.wcs.ctype = "RA---SIN", "DEC--SIN", "TIME"
    wcs.wcs.cdelt, wcs.wcs.crval, wcs.wcs.crpix = (-0.01, 0.01, 60.0), (30.0, 40.0, 0.0), (8.0, 6.0, 1.0)
    wcs.wcs.cunit = "deg", "deg", "s"
    written = {key: card for key, card in wcs.to_header().items() if "REF" in key and "PIX" not in key}
    assert any(float(card) == 0.0 for key, card in written.items() if key.startswith("MJDREF"))
    found = plane_times(**(UNPLACED | written))
    assert [facts.middle for facts in found] == [Moment(MARCH, s) for s in (21600.0, 21660.0, 21720.0)]
