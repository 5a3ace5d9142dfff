"""What a user knows: which frames a block speaks of, and what each fact does to the frame table and its assumptions."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.time import Time

from hindlight.archive import walk
from hindlight.facts import Cards, FrameFacts, Moment
from hindlight.headers import planes
from hindlight.knowledge import Knowledge
from hindlight.settings import settings_from
from hindlight.summary import words_of
from hindlight_plugins.standard_headers import StandardHeaders
from made import SITE, cards_of, header, image, write

HILL = (6378137.0, 0.0, 0.0)


def knowledge(*blocks: dict[str, Any]) -> Knowledge:
    """Compiled blocks, with one place known by name."""
    settings = settings_from({"sites": {"hill": list(HILL)}, "frames": list(blocks)}, "test")
    return Knowledge(settings.frames, settings.sites)


def matched(block: dict[str, Any], path: str = "plates/1990/a.fits", **cards: object) -> bool:
    """Whether a block speaks of a frame."""
    made = cards_of(header(**cards))
    facts = StandardHeaders().read(made, planes(image((12, 16), **cards))[0].axes)
    return knowledge({**block, "band": "new"}).applied(made, path, facts).band == "new"


@pytest.mark.parametrize(
    ("block", "cards", "expected"),
    [
        ({}, {}, True),
        ({"path": "plates/*"}, {}, True),
        ({"path": "*/1990/?.fits"}, {}, True),
        ({"path": "plates/1990/a.fits"}, {}, True),
        ({"path": "plates/[12]990/*.fits"}, {}, True),
        ({"path": "*.fit"}, {}, False),
        ({"path": "Plates/*"}, {}, False),
        ({"path": "lates/*"}, {}, False),
        ({"instrument": "NORTH*"}, {}, True),
        ({"instrument": "north"}, {}, False),
        ({"instrument": ""}, {"INSTRUME": None}, True),
        ({"instrument": ""}, {}, False),
        ({"header": {"OBSERVER": "J*"}}, {"OBSERVER": "Jo  "}, True),
        ({"header": {"observer": "J*"}}, {"OBSERVER": "Al"}, False),
        ({"header": {"OBSERVER": "*"}}, {}, False),
        ({"header": {"CHIP": 7}}, {"CHIP": 7.0}, True),
        ({"header": {"CHIP": 7}}, {"CHIP": "7"}, False),
        ({"header": {"CHIP": 1}}, {"CHIP": True}, False),
        ({"header": {"CHIP": True}}, {"CHIP": True}, True),
        ({"header": {"CHIP": 7, "OBSERVER": "Jo"}}, {"CHIP": 7, "OBSERVER": "Al"}, False),
        ({"from": "1988-03-17T06:00:00"}, {}, True),
        ({"from": "1988-03-17T06:00:01"}, {}, False),
        ({"to": "1988-03-17T06:00:00"}, {}, False),
        ({"to": "1988-03-18"}, {}, True),
        ({"from": "1988-03-17", "to": "1988-03-18"}, {"DATE__OBS": "1988-03-17"}, True),
        ({"from": "1900-01-01"}, {"DATE__OBS": None}, False),
    ],
)
def test_matching(block: dict[str, Any], cards: dict[str, object], expected: bool) -> None:
    """Patterns, cards and half-open dates decide; what a header lacks matches nothing."""
    assert matched(block, **cards) is expected


def one(folder: Path, *blocks: dict[str, Any], **cards: object) -> tuple[dict[str, Any], list[str]]:
    """The row of a frame after a walk with these blocks, and the words of its assumptions."""
    path = write(folder / "one" / "a.fits", (12, 16), **cards)
    settings = settings_from({"sites": {"hill": list(HILL)}, "frames": list(blocks)}, "test")
    found = walk([str(path.parent)], [StandardHeaders()], settings)
    path.unlink()
    assert found.rejects == []
    row = {name: values[0] for name, values in found.frames.items()}
    return row, [word for word in words_of(row["assumptions"]) if word != "primary_beam_unknown"]


@pytest.mark.parametrize(
    ("fact", "cards", "word", "expected"),
    [
        ({"instrument_name": "dome"}, {"INSTRUME": None}, "no_instrument", {"instrument": "dome"}),
        ({"site": "hill"}, {"OBSGEO__X": None}, "geocentre", {"site_x": HILL[0], "site_z": 0.0}),
        ({"exposure_s": 60}, {"EXPTIME": None}, "no_exposure", {"exposure_s": 60.0, "span_s": 60.0}),
        ({"unit": "JY/BEAM"}, {"BUNIT": None}, "no_unit", {"unit": "Jy/beam"}),
        ({"beam_arcsec": 90}, {"BMAJ": None}, "no_beam", {"beam_major": 90.0, "beam_minor": 90.0, "beam_angle": 0.0}),
        (
            {"beam_arcsec": [90, 60, 10]}, {"BMAJ": None}, "no_beam",
            {"beam_major": 90.0, "beam_minor": 60.0, "beam_angle": 10.0},
        ),
        ({"frequency_hz": 2e8}, {"FREQ": None}, "no_frequency", {"frequency_hz": 2e8}),
        ({"stokes": "v"}, {"STOKES": None}, "stokes_assumed", {"stokes": "V"}),
        ({"time_scale": "tt"}, {"TIMESYS": None}, "scale_assumed", {}),
        ({"date_means": "middle"}, {"MJD__OBS": 47237.26}, "start_assumed", {}),
    ],
)  # fmt: skip
def test_a_fact_ends_an_assumption(
    tmp_path: Path, fact: dict[str, Any], cards: dict[str, object], word: str, expected: dict[str, Any]
) -> None:
    """Each fact fills its columns, ends the word for what was taken for granted, and is recorded with its block."""
    _, before = one(tmp_path, **cards)
    row, after = one(tmp_path, {"instrument": "nothing"}, fact, **cards)
    assert before == [word]
    assert after == ["set_by_user"]
    assert f"set_by_user: {next(iter(fact))} (block 2)" in row["assumptions"]
    assert {name: row[name] for name in expected} == expected
    # The same where the fact is only to fill gaps, and not at all where the header has it.
    assert one(tmp_path, {**fact, "where_missing": True}, **cards)[1] == ["set_by_user"]
    assert one(tmp_path, {**fact, "where_missing": True})[1] == []


@pytest.mark.parametrize(
    ("fact", "expected"),
    [
        ({"band": "R"}, {"band": "R"}),
        ({"saturation": 6e4}, {"saturation": 6e4}),
        ({"electrons_per_unit": 2}, {"electrons_per_unit": 2.0}),
        ({"exposure_s": 60}, {"exposure_s": 60.0, "span_s": 60.0}),
        ({"good_time_fraction": 0.25}, {"exposure_s": 30.0, "span_s": 120.0}),
        ({"good_time_fraction": 0.25, "exposure_s": 60}, {"exposure_s": 60.0, "span_s": 240.0}),
        ({"site": [0, 0, 6.36e6]}, {"site_x": 0.0, "site_z": 6.36e6}),
        ({"primary_beam": "corrected"}, {"primary_beam": "corrected"}),
        (
            {"primary_beam": "uncorrected", "primary_beam_fwhm_deg": 2},
            {"primary_beam": "uncorrected", "primary_beam_fwhm_deg": 2.0},
        ),
        (
            {"primary_beam": "uncorrected", "primary_beam_fwhm_deg": 2, "primary_beam_at_hz": 308e6},  # the frame's: 154
            {"primary_beam": "uncorrected", "primary_beam_fwhm_deg": 4.0},
        ),
        ({"clock_error_s": 0.5}, {"clock_error_s": 0.5}),
    ],
)  # fmt: skip
def test_a_fact_counts_before_the_header(tmp_path: Path, fact: dict[str, Any], expected: dict[str, Any]) -> None:
    """What a block says replaces what the header says; nothing else changes."""
    plain, _ = one(tmp_path)
    row, words = one(tmp_path, fact)
    assert words == ["set_by_user"] + ["intermittent"] * ("good_time_fraction" in fact)
    assert {name: row[name] for name in expected} == expected
    follow = {"assumptions", "modified_ns", "start_mjd_tdb", "middle_mjd_tdb", "end_mjd_tdb", "middle_tdb_s"}
    follow |= {"middle_utc", "site_x", "site_y", "site_z"} | set(expected)
    for name in set(plain) - follow:
        np.testing.assert_equal(row[name], plain[name], err_msg=name)


@pytest.mark.parametrize(
    ("fact", "middle"),
    [
        ({}, 60.0),
        ({"date_means": "middle"}, 0.0),
        ({"date_means": "end"}, -60.0),
        ({"clock_offset_s": -3.5}, 56.5),
        ({"clock_offset_s": 86400, "date_means": "end"}, 86340.0),
        ({"good_time_fraction": 0.5}, 60.0),
        ({"exposure_s": 30}, 15.0),
    ],
)
def test_times_follow(tmp_path: Path, fact: dict[str, Any], middle: float) -> None:
    """The middle of the good time in seconds after 1988-03-17 06:00 UTC, where the header's date and 120 s begin."""
    row, _ = one(tmp_path, *([fact] if fact else []))
    zero = Time("1988-03-17T06:00:00", scale="utc").tdb
    assert (row["middle_mjd_tdb"] - zero.mjd) * 86400 == pytest.approx(middle, abs=1e-4)
    assert row["end_mjd_tdb"] - row["start_mjd_tdb"] == pytest.approx(row["span_s"] / 86400, abs=1e-9)


def test_another_time_scale(tmp_path: Path) -> None:
    """In 1988 TT was ahead of UTC by 24 leap seconds and 32.184 s (IERS Bulletin C; FITS 4.0, table 30 for TT - TAI)."""
    utc, _ = one(tmp_path)
    tt, _ = one(tmp_path, {"time_scale": "TT"})
    assert utc["middle_tdb_s"] - tt["middle_tdb_s"] == pytest.approx(24 + 32.184, abs=1e-4)


def test_later_blocks_win_fact_by_fact(tmp_path: Path) -> None:
    """Of several blocks each fact is the last one's, and the record says whose."""
    row, _ = one(
        tmp_path, {"exposure_s": 10, "band": "a", "unit": "K"}, {"path": "none"}, {"exposure_s": 20, "band": "b"}
    )
    assert (row["exposure_s"], row["band"], row["unit"]) == (20.0, "b", "K")
    assert "set_by_user: unit (block 1), band, exposure_s (block 3)" in row["assumptions"]
    gap, _ = one(tmp_path, {"band": "a"}, {"band": "b", "where_missing": True})
    assert gap["band"] == "b"
    gap, _ = one(tmp_path, {"band": "b", "where_missing": True}, {"band": "a"})
    assert gap["band"] == "a"


def test_an_instrument_is_matched_by_the_name_it_was_given(tmp_path: Path) -> None:
    """Blocks may speak of an instrument by its header's name or by the one that a block gives."""
    rename = {"instrument": "north array", "instrument_name": "dome"}
    row, _ = one(tmp_path, {"instrument": "dome", "band": "b"}, rename, {"instrument": "north*", "unit": "K"})
    assert (row["instrument"], row["band"], row["unit"]) == ("dome", "b", "K")


@pytest.mark.parametrize(
    ("fact", "cards"),
    [
        ({"date_means": "middle"}, {"DATE__BEG": "1988-03-17T06:00:00", "DATE__END": "1988-03-17T07:00:00"}),
        ({"clock_offset_s": 3}, {"DATE__OBS": "1988-03-17"}),
        ({"clock_error_s": 3}, {"DATE__OBS": None}),
        ({"time_scale": "tt"}, {"DATE__OBS": "1988-03-17"}),
        ({"site": "hill"}, {"TREFPOS": "BARYCENTER"}),
        ({"primary_beam_fwhm_deg": 3}, {}),
    ],
)
def test_facts_that_a_header_leaves_no_place_for(
    tmp_path: Path, fact: dict[str, Any], cards: dict[str, object]
) -> None:
    """A fact that cannot be used changes nothing, and is said."""
    plain, before = one(tmp_path, **cards)
    row, after = one(tmp_path, fact, **cards)
    assert set(after) == {*before, "set_without_effect"}
    assert f"set_without_effect: {next(iter(fact))} (block 1)" in row["assumptions"]
    for name in set(plain) - {"assumptions", "modified_ns"}:
        np.testing.assert_equal(row[name], plain[name], err_msg=name)


def test_what_facts_leave_open_is_said(tmp_path: Path) -> None:
    """A radio unit that a block gives brings the questions radio brings; an uncorrected beam without a width is said."""
    bare = {"BUNIT": None, "BMAJ": None, "FREQ": None, "STOKES": None}
    row, words = one(tmp_path, {"unit": "Jy/beam"}, **bare)
    assert set(words) == {"no_beam", "no_frequency", "set_by_user"}
    assert "primary_beam_unknown" in words_of(row["assumptions"])
    _, words = one(tmp_path, {"primary_beam": "uncorrected"})
    assert set(words) == {"primary_beam_apparent", "set_by_user"}


def test_a_width_is_taken_at_the_users_word(tmp_path: Path) -> None:
    """A beam far below a pixel, which a header would not be believed, is used where a block gives it."""
    assert one(tmp_path, BMAJ=1e-4, BMIN=1e-4)[1] == ["no_beam"]
    row, words = one(tmp_path, {"beam_arcsec": 0.36}, BMAJ=1e-4, BMIN=1e-4)
    assert (row["beam_major"], words) == (0.36, ["set_by_user"])


def test_a_hundred_blocks_cost_little() -> None:
    """A hundred blocks of patterns cost less than reading a header: far below a millisecond, on a busy machine too."""
    blocks = [
        {"path": f"plates/{i:03d}/*.fits", "header": {"OBSERVER": f"J{i}*"}, "from": "1980-01-01", "exposure_s": 1 + i}
        for i in range(50)
    ] + [{"path": f"*/night{i:02d}/a*.fits", "unit": f"u{i}"} for i in range(50)]  # fmt: skip
    compiled = knowledge(*blocks)
    cards = Cards(cards_of(header(OBSERVER="J17 K")).raw)
    facts = FrameFacts(instrument="x", start=Moment(47237, 0.0), site=SITE)
    assert compiled.applied(cards, "plates/017/a.fits", facts).exposure_s == 18.0
    started = time.process_time()
    for i in range(2000):
        compiled.applied(cards, f"plates/017/night03/a{i}.fits", facts)
    assert (time.process_time() - started) / 2000 < 5e-4
