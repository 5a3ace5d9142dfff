"""Header cards against astropy's own reader, instants against astropy's times."""

from __future__ import annotations

import warnings
from datetime import datetime

import pytest
from astropy.io import fits
from astropy.time import Time
from hypothesis import given
from hypothesis import strategies as st

from hindlight.facts import Cards, Moment, parse_value, visible

KEYS = st.from_regex(r"[A-Z][A-Z0-9_-]{0,7}", fullmatch=True).filter(
    lambda key: key not in ("END", "COMMENT", "HISTORY", "CONTINUE", "HIERARCH", "SIMPLE", "BITPIX", "EXTEND")
)
TEXT = st.text(st.characters(min_codepoint=32, max_codepoint=126), max_size=30).map(str.rstrip)
NUMBERS = st.integers(-(10**12), 10**12) | st.floats(-1e200, 1e200, allow_nan=False)
VALUES = TEXT | NUMBERS | st.booleans()


def cards_of(header: fits.Header) -> Cards:
    """The cards of an astropy header."""
    return Cards(header.tostring(endcard=False, padding=False).encode("latin-1"))


def card(text: str) -> Cards:
    """A single card."""
    return Cards(text.ljust(80).encode("latin-1"))


@given(st.dictionaries(KEYS, VALUES, max_size=12), TEXT)
def test_values_as_astropy_writes_them(values: dict[str, object], comment: str) -> None:
    """Every value that astropy writes into a header is read as it was meant, whatever the comment."""
    header = fits.Header()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", fits.verify.VerifyWarning)  # long comments are cut off
        for key, value in values.items():
            header[key] = (value, comment)
    cards, again = cards_of(header), fits.Header.fromstring(header.tostring())
    assert set(cards) == set(values)
    for key, value in values.items():
        # Numbers lose digits when written. Text is compared with what was written: astropy misreads some with quotes.
        expected = value if isinstance(value, str) else again[key]
        assert cards.get(key) == expected
        assert type(cards.get(key)) is type(expected)


@given(st.text(st.characters(min_codepoint=32, max_codepoint=126), min_size=70, max_size=70))
def test_no_text_is_an_error(text: str) -> None:
    """Whatever stands in the value's columns, parsing gives a value or none, and never raises."""
    value = parse_value(text)
    assert value is None or isinstance(value, str | bool | int | float)


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("KEY     = 1.5D3 / Fortran", 1500.0),
        ("KEY     = -7", -7),
        ("KEY     = +.5e-1", 0.05),
        ("KEY     =                    T / truth", True),
        ("KEY     = 'it''s / no comment' / comment", "it's / no comment"),
        ("KEY     = '   '", ""),
        ("KEY     = 'no end", None),
        ("KEY     = / nothing", None),
        ("KEY     = NaN", None),
        ("KEY     = inf", None),
        ("KEY     = 1_000", None),
        ("KEY     = (1.0, 2.0)", None),
        ("KEY       1.5", None),
    ],
)
def test_single_cards(text: str, value: object) -> None:
    """Forms of values by FITS 4.0, section 4.2, and what is none."""
    assert card(text).get("KEY") == value


def test_first_of_repeated_cards_counts() -> None:
    """A repeated keyword has the value of its first card; commentary cards are all there."""
    header = fits.Header()
    header["HISTORY"] = "one"
    header["HISTORY"] = "two"
    raw = (
        cards_of(header).raw + b"KEY     =                    1".ljust(80) + b"KEY     =                    2".ljust(80)
    )
    cards = Cards(raw)
    assert cards.integer("KEY") == 1
    assert [text.strip() for text in cards.all_of("HISTORY")] == ["one", "two"]


def test_kinds_are_not_mixed() -> None:
    """Text is no number, a number is no text, truth is neither, and what is absent is blank."""
    header = fits.Header()
    header["TEXT"], header["WHOLE"], header["REAL"], header["TRUE"] = "12", 12, 12.5, True
    cards = cards_of(header)
    assert [cards.text(key) for key in ("TEXT", "WHOLE", "TRUE", "NONE")] == ["12", "", "", ""]
    assert [cards.integer(key, 5) for key in ("TEXT", "WHOLE", "REAL", "TRUE", "NONE")] == [5, 12, 5, 5, 5]
    assert cards.number("WHOLE") == 12.0
    assert all(cards.number(key) != cards.number(key) for key in ("TEXT", "TRUE", "NONE"))
    assert cards.first_number("NONE", "TEXT", "REAL") == 12.5
    assert "TEXT" in cards
    assert "NONE" not in cards
    assert cards.card("NONE") == ""


@given(
    st.datetimes(min_value=datetime(1600, 1, 1)),
    st.integers(0, 6),
)
def test_dates_as_astropy_reads_them(when: datetime, digits: int) -> None:
    """An ISO date and time is the same instant for us and for astropy."""
    text = when.isoformat(timespec="seconds")
    text += f".{'123456'[:digits]}" if digits else ""
    moment = Moment.from_iso(text)
    time = Time(text, scale="tai")
    assert moment is not None
    assert moment.has_clock
    assert moment.mjd + moment.seconds / 86400 == pytest.approx((time.jd1 - 2400000.5) + time.jd2, abs=1e-9)


@given(st.integers(1600, 2200), st.integers(0, 13), st.integers(0, 33))
def test_impossible_days_are_none(year: int, month: int, day: int) -> None:
    """A date that the calendar does not have is no date."""
    text = f"{year:04d}-{month:02d}-{day:02d}"
    try:
        expected = round(Time(text, scale="tai").mjd)
    except ValueError:
        assert Moment.from_iso(text) is None
        return
    assert Moment.from_iso(text) == Moment(expected, 0.0, has_clock=False)


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        ("2016-12-31T23:59:60.5", 86400.5),
        ("1988-03-17T24:00:00", 86400.0),
        ("1988-03-17T06:00", 21600.0),
        ("1988-03-17 06:00:00", 21600.0),
        ("1988-03-17T06:00:00.25Z", 21600.25),
        ("1988-03-17T6:0:0", 21600.0),
    ],
)
def test_times_of_day(text: str, seconds: float) -> None:
    """Leap seconds, midnight as 24 hours, and forms that are met though FITS asks for others."""
    moment = Moment.from_iso(text)
    assert moment is not None
    assert moment.seconds == seconds
    assert moment.has_clock


@pytest.mark.parametrize(
    "text", ["", "17/03/88", "1988-03", "1988-03-17T25:00:00", "1988-03-17T06:60:00", "1988-03-17T06:00:61", "soon"]
)
def test_what_is_no_date(text: str) -> None:
    """Two-digit years, times the clock does not have, and other text are no instants."""
    assert Moment.from_iso(text) is None


@given(st.integers(-10000, 100000), st.floats(0, 0.999999))
def test_moment_from_a_number(day: int, fraction: float) -> None:
    """An MJD as one number is split into day and seconds, as exactly as the number was."""
    moment = Moment.from_mjd(day + fraction)
    assert moment.mjd + moment.seconds / 86400 == pytest.approx(day + fraction, abs=1e-10)
    assert 0 <= moment.seconds < 86400


def test_moment_by_keyword() -> None:
    """Dates are read as text, MJD and JD as numbers."""
    header = fits.Header()
    header["DATE-OBS"], header["MJD-OBS"], header["JDREF"] = "1988-12-31", 47526.25, 2447526.75
    cards = cards_of(header)
    assert cards.moment("DATE-OBS") == Moment(47526, 0.0, has_clock=False)
    assert cards.moment("MJD-OBS") == cards.moment("JDREF") == Moment(47526, 21600.0)
    assert cards.moment("MJD-END") is None


@given(st.integers(40000, 60000), st.floats(0, 86399), st.floats(-1e6, 1e6))
def test_later(day: int, seconds: float, more: float) -> None:
    """Some seconds later is that much later, in a day of its own."""
    later = Moment(day, seconds).plus(more)
    assert (later.mjd - day) * 86400 + later.seconds == pytest.approx(seconds + more, abs=1e-6)
    assert 0 <= later.seconds <= 86400


def test_repeated_keywords() -> None:
    """A keyword with two values contradicts itself; the same value twice, and what may stand often, do not."""

    def cards(*texts: str) -> Cards:
        return Cards("".join(text.ljust(80) for text in texts).encode("latin-1"))

    history = ("HISTORY one", "HISTORY two", "COMMENT x", "COMMENT y", "", "")
    assert not cards("CRVAL1  = 1.0", *history).contradicted
    assert not cards("CRVAL1  = 1.0", "CRVAL1  = 1.00 / the same", *history).contradicted
    assert cards("CRVAL1  = 1.0", "CRVAL1  = 2.0", *history).contradicted
    assert cards("OBJECT  = 'a'", "OBJECT  = 'b'").contradicted


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("plain é µ", "plain é µ"),
        ("a\nb\t", "a\\nb\\t"),
        ("\x1b[31m", "\\x1b[31m"),
        ("\udcff", "\\udcff"),
        ("\x85", "\\x85"),
    ],
)
def test_visible(text: str, shown: str) -> None:
    """Control characters are written out, all else is left."""
    assert visible(text) == shown
