"""The walk: frames and rejects of whole folders, every reason with a file that deserves it, and extended archives."""

from __future__ import annotations

import gzip
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.time import Time
from astropy.wcs import WCS

from hindlight.archive import ADDED_LATER, WalkResult, walk
from hindlight.channels import assign
from hindlight.errors import UsageError
from hindlight.facts import FrameFacts, Moment
from hindlight.files import open_source
from hindlight.plugin import Dialect
from hindlight.schema import FRAMES, REASONS
from hindlight.settings import Settings, settings_from
from hindlight.summary import summarise, words_of
from hindlight_plugins.standard_headers import StandardHeaders
from made import SITE, header, write

STANDARD = (StandardHeaders(),)


def walked(folder: Path, known: dict[str, Any] | None = None, **settings: dict[str, Any]) -> WalkResult:
    """A walk with the shipped dialect."""
    return walk([str(folder)], STANDARD, settings_from(settings, "test"), known)


def one(
    folder: Path, shape: tuple[int, ...] = (12, 16), settings: Settings | None = None, **cards: object
) -> dict[str, Any]:
    """The row of the only frame of a file made of the plain header with some cards changed."""
    path = write(folder / "one" / "a.fits", shape, **cards)
    found = walk([str(path.parent)], STANDARD, settings or Settings())
    path.unlink()
    assert found.rejects == []
    assert len(found.frames["path"]) == 1
    return {name: values[0] for name, values in found.frames.items()}


def as_pinned(found: WalkResult) -> dict[str, Any]:
    """A frame table as a run keeps it."""
    n = len(found.frames["path"])
    labels = assign(found.frames, {}, Settings().channels)
    state = np.full(n, "current", object)
    return found.frames | {"id": np.arange(n), "batch": np.zeros(n, int), "channel": labels, "state": state}


def test_plain_frame(tmp_path: Path) -> None:
    """Every column of a plain image, with times and places as astropy has them."""
    row = one(tmp_path)
    assert set(row) == {column.name for column in FRAMES} - set(ADDED_LATER)
    middle = Time("1988-03-17T06:01:00", scale="utc")
    assert row["middle_tdb_s"] == pytest.approx((middle.tdb.jd1 - 2451545 + middle.tdb.jd2) * 86400, abs=1e-5)
    assert row["middle_mjd_tdb"] == pytest.approx(middle.tdb.mjd, abs=1e-9)
    assert (row["end_mjd_tdb"] - row["start_mjd_tdb"]) * 86400 == pytest.approx(120.0, abs=1e-5)
    assert row["middle_utc"] == "1988-03-17T06:01:00.000"
    assert (row["exposure_s"], row["span_s"]) == (120.0, 120.0)
    assert (row["site_x"], row["site_y"], row["site_z"]) == SITE
    assert (row["path"], row["hdu"], row["plane"]) == ("a.fits", 0, 0)
    assert (row["width"], row["height"], row["pixel_scale"]) == (16, 12, pytest.approx(36.0))
    assert (row["centre_ra"], row["centre_dec"]) == (pytest.approx(30.0), pytest.approx(40.0))
    assert (row["beam_major"], row["beam_minor"], row["beam_angle"]) == (108.0, 72.0, 30.0)
    assert (row["unit"], row["stokes"], row["dialect"]) == ("Jy/beam", "I", "standard_headers")
    assert words_of(row["assumptions"]) == ["primary_beam_unknown"]
    assert "fluxes are apparent" in row["assumptions"]


@pytest.mark.parametrize(
    ("cards", "start", "middle", "end", "words"),
    [
        ({"DATE__BEG": "1988-03-17T06:00:00", "DATE__END": "1988-03-17T07:00:00"}, 0, 1800, 3600, ["intermittent"]),
        ({"DATE__AVG": "1988-03-17T06:01:00"}, 0, 60, 120, []),
        ({"DATE__OBS": ("1988-03-17T06:02:00", "end of exposure")}, 0, 60, 120, []),
        ({"TELAPSE": 600.0}, 0, 300, 600, ["intermittent"]),
        ({"EXPTIME": None}, 0, 0, None, ["no_exposure"]),
        ({"EXPTIME": None, "DATE__AVG": "1988-03-17T06:01:00"}, None, 60, None, ["no_exposure"]),
        ({"EXPTIME": None, "DATE__END": "1988-03-17T06:10:00"}, 0, 300, 600, ["span_is_good_time"]),
        ({"EXPTIME": None, "DATE__OBS": None, "DATE__END": "1988-03-17T06:10:00"}, None, 600, 600, ["no_exposure"]),
        (
            {"EXPTIME": None, "DATE__BEG": "1988-03-17T06:00:00", "DATE__END": "1988-03-17T06:10:00"},
            0, 300, 600, ["span_is_good_time"],
        ),
        ({"DATE__BEG": "1988-03-17T06:00:00", "DATE__END": "1988-03-17T05:00:00"}, 0, 60, 120, ["implausible_date"]),
    ],
)  # fmt: skip
def test_start_middle_end(
    tmp_path: Path, cards: dict[str, object], start: int | None, middle: int, end: int | None, words: list[str]
) -> None:
    """Two of start, middle and end follow from the third and the span; seconds after 06:00, None for unknown."""
    row = one(tmp_path, **cards)
    zero = Time("1988-03-17T06:00:00", scale="utc").tdb.mjd
    for name, expected in (("start", start), ("middle", middle), ("end", end)):
        if expected is not None:
            assert (row[f"{name}_mjd_tdb"] - zero) * 86400 == pytest.approx(expected, abs=1e-3)
    if start is None:
        assert np.isnan(row["start_mjd_tdb"])
    assert [word for word in words_of(row["assumptions"]) if word != "primary_beam_unknown"] == words


def test_exposure_over_a_leap_second(tmp_path: Path) -> None:
    """A span is counted in seconds that pass, leap seconds too."""
    row = one(tmp_path, DATE__BEG="2016-12-31T23:59:00", DATE__END="2017-01-01T00:01:00")
    assert row["span_s"] == pytest.approx(121.0, abs=1e-6)


def test_no_time_of_day(tmp_path: Path) -> None:
    """A date alone gives that date and no time; no date gives neither; both are frames."""
    dated = one(tmp_path, DATE__OBS="1988-03-17")
    assert (dated["middle_utc"], dated["middle_mjd_tdb"]) == ("1988-03-17", 47237.5)
    assert np.isnan([dated["middle_tdb_s"], dated["start_mjd_tdb"], dated["end_mjd_tdb"]]).all()
    blank = one(tmp_path, DATE__OBS=None)
    assert (blank["middle_utc"], blank["exposure_s"]) == ("", 120.0)
    assert np.isnan([blank["middle_tdb_s"], blank["middle_mjd_tdb"]]).all()
    for row in (dated, blank):
        assert words_of(row["assumptions"])[0] == "no_clock"
        assert "geocentre" not in row["assumptions"]


def test_places(tmp_path: Path) -> None:
    """No site is the geocentre, said; a site in the settings is used; a barycentric time needs none."""
    away = {f"OBSGEO__{axis}": None for axis in "XYZ"}
    assert "geocentre" in words_of(one(tmp_path, **away)["assumptions"])
    set_ = settings_from({"sites": {"north array": list(SITE)}}, "test")
    row = one(tmp_path, settings=set_, **away)
    assert (row["site_x"], "geocentre" in row["assumptions"]) == (SITE[0], False)
    row = one(tmp_path, TREFPOS="BARYCENTER", TIMESYS="TDB")
    assert row["barycentric"]
    assert np.isnan(row["site_x"])
    assert "geocentre" not in row["assumptions"]


def test_beams(tmp_path: Path) -> None:
    """No beam, or one that cannot be a width in this image, is none; a width in the settings then stands in."""
    set_ = settings_from({"photometry": {"fwhm_arcsec": {"north array": 90.0}}}, "test")
    for cards in ({"BMAJ": None}, {"BMAJ": 45.0, "BMIN": 45.0}, {"BMAJ": 1e-6, "BMIN": 1e-6}):
        row = one(tmp_path, **cards)
        assert np.isnan([row["beam_major"], row["beam_minor"]]).all()
        assert "no_beam" in words_of(row["assumptions"])
        row = one(tmp_path, settings=set_, **cards)
        assert (row["beam_major"], row["beam_minor"], row["beam_angle"]) == (90.0, 90.0, 0.0)
        assert "beam_from_settings" in words_of(row["assumptions"])


def test_frame_assumed(tmp_path: Path) -> None:
    """A celestial frame that the header leaves open is said to be assumed."""
    assert "frame_assumed" in words_of(one(tmp_path, RADESYS=None)["assumptions"])


def test_cubes(tmp_path: Path) -> None:
    """Planes over time, frequency and Stokes are frames with their own times, frequencies and parameters."""
    time = {"CTYPE3": "TIME", "CRVAL3": 60.0, "CDELT3": 120.0, "CRPIX3": 1.0, "CUNIT3": "s", "MJDREF": 47237.25}
    spectral = {"CTYPE3": "FREQ", "CRVAL3": 1e9, "CDELT3": 1e8, "CRPIX3": 1.0}
    stokes = {"CTYPE4": "STOKES", "CRVAL4": 1.0, "CDELT4": 3.0, "CRPIX4": 1.0}
    write(tmp_path / "a.fits", (2, 3, 12, 16), **time, **stokes)
    write(tmp_path / "b.fits", (1, 3, 12, 16), **spectral, **stokes)
    found = walked(tmp_path)
    assert found.rejects == []
    assert found.frames["path"].tolist() == ["a.fits"] * 6 + ["b.fits"] * 3
    assert found.frames["plane"].tolist() == [0, 1, 2, 3, 4, 5, 0, 1, 2]
    assert found.frames["stokes"].tolist() == ["I"] * 3 + ["V"] * 3 + ["I"] * 3
    middles = [f"1988-03-17T06:0{1 + 2 * i}:00.000" for i in range(3)]
    assert found.frames["middle_utc"].tolist() == middles * 2 + ["1988-03-17T06:01:00.000"] * 3
    assert found.frames["frequency_hz"][6:].tolist() == [1e9, 1.1e9, 1.2e9]
    assert len(set(found.frames["digest"].tolist())) == 2


def test_time_cube_without_reference_has_no_clock(tmp_path: Path) -> None:
    """Planes of a time axis that nobody can place have no clock; they are not spread over the file's span."""
    write(tmp_path / "a.fits", (3, 12, 16), CTYPE3="TIME")
    found = walked(tmp_path)
    assert np.isnan(found.frames["middle_tdb_s"]).all()
    assert found.frames["middle_utc"].tolist() == ["1988-03-17"] * 3
    assert all("no_clock" in text for text in found.frames["assumptions"])


def test_time_cube_whose_zero_is_its_date(tmp_path: Path) -> None:
    """Seconds from 0 without a reference are seconds from DATE-OBS, which is said of each plane."""
    write(tmp_path / "a.fits", (3, 12, 16), CTYPE3="TIME", CRVAL3=0.0, CDELT3=60.0, CRPIX3=1.0, CUNIT3="s", MJDREF=0.0)
    found = walked(tmp_path)
    assert found.frames["middle_utc"].tolist() == [f"1988-03-17T06:0{i}:00.000" for i in range(3)]
    assert all("axis_zero_assumed" in words_of(text) for text in found.frames["assumptions"])


def same(found: WalkResult, other: WalkResult, *besides: str) -> None:
    """Two walks found the same but for some columns."""
    assert found.rejects == other.rejects
    for name, values in found.frames.items():
        if name not in ("path", "digest", "size", "modified_ns", *besides):
            assert repr(values.tolist()) == repr(other.frames[name].tolist()), name


def test_packed_files_are_the_same_frames(tmp_path: Path) -> None:
    """Plain, gzip-packed and tile-compressed files of one image give the same frame."""
    plain = write(tmp_path / "plain/a.fits", (60, 80))
    (tmp_path / "gz").mkdir()
    (tmp_path / "gz/a.fits.gz").write_bytes(gzip.compress(plain.read_bytes()))
    (tmp_path / "fz").mkdir()
    data = np.arange(4800, dtype=np.int16).reshape(60, 80)
    fits.CompImageHDU(data, header(), compression_type="RICE_1").writeto(tmp_path / "fz/a.fits.fz")
    expected = walked(tmp_path / "plain")
    same(walked(tmp_path / "gz"), expected, "archive")
    same(walked(tmp_path / "fz"), expected, "archive", "hdu")
    assert walked(tmp_path / "fz").frames["hdu"].tolist() == [1]


def test_distorted_images(tmp_path: Path) -> None:
    """An image with SIP distortion lies where the full astropy WCS puts it."""
    cards = {
        "CTYPE1": "RA---TAN-SIP",
        "CTYPE2": "DEC--TAN-SIP",
        "A_ORDER": 2,
        "A_2_0": 1e-3,
        "B_ORDER": 2,
        "B_0_2": 2e-3,
    }
    row = one(tmp_path, CRPIX1=1.0, CRPIX2=1.0, **cards)
    quiet = {key.replace("-", "__"): None for key in header() if key.startswith(("DATE", "OBSGEO"))}
    head = header(CRPIX1=1.0, CRPIX2=1.0, **cards, **quiet)  # astropy warns of what it adds beside dates and places
    ra, dec = WCS(head).all_pix2world([[7.5, 5.5]], 0)[0]
    assert (row["centre_ra"], row["centre_dec"]) == (pytest.approx(ra, abs=1e-9), pytest.approx(dec, abs=1e-9))


def test_several_images_in_a_file(tmp_path: Path) -> None:
    """Each image HDU is a frame; tables are passed over; one without coordinates is set aside by itself."""
    table = fits.BinTableHDU.from_columns([fits.Column("a", "J", array=np.arange(9))])
    data = np.ones((12, 16), np.float32)
    bare = fits.ImageHDU(data)
    images = [fits.ImageHDU(data, header(CRVAL1=30.0 + i)) for i in range(2)]
    fits.HDUList([fits.PrimaryHDU(), images[0], table, bare, images[1]]).writeto(tmp_path / "a.fits")
    found = walked(tmp_path)
    assert found.frames["hdu"].tolist() == [1, 4]
    assert [(row["hdu"], row["reason"]) for row in found.rejects] == [(3, "no_wcs")]


# --- what is set aside


class Nobody(Dialect):
    """Reads no header."""

    def recognises(self, cards):
        """Never."""
        return False


class Faulty(StandardHeaders):
    """Fails on every header."""

    order = 1

    def read(self, cards, axes):
        """Divides by nothing."""
        raise ZeroDivisionError("by zero")


class Stellar(StandardHeaders):
    """Gives a time scale that there is not."""

    def read(self, cards, axes):
        """Sidereal time."""
        return FrameFacts(start=Moment(50000, 0.0), scale="gmst")


def cut(path: Path) -> None:
    """A file without its last block."""
    path.write_bytes(write(path.parent / "whole.fits").read_bytes()[:-2880])
    (path.parent / "whole.fits").unlink()


def broken_gzip(path: Path) -> None:
    """A gzip file that ends in the middle."""
    whole = write(path.parent / "whole.fits", (90, 90)).read_bytes()
    path.write_bytes(gzip.compress(whole)[:-3000])
    (path.parent / "whole.fits").unlink()


MAKERS: dict[str, tuple[str, Callable[[Path], object], int]] = {
    "empty_file": ("a.fits", lambda path: path.write_bytes(b""), -1),
    "not_fits": ("a.fits", lambda path: path.write_text("no image"), -1),
    "unreadable": ("a.fits", lambda path: path.symlink_to("nowhere"), -1),
    "bad_header": ("a.fits", lambda path: path.write_bytes(b"SIMPLE  =                    T".ljust(2880)), 0),
    "truncated": ("a.fits", cut, 0),
    "bad_compression": ("a.fits.gz", broken_gzip, -1),
    "no_image": ("a.fits", lambda path: fits.PrimaryHDU().writeto(path), -1),
    "no_wcs": ("a.fits", lambda path: write(path, CTYPE1=None, CTYPE2=None), 0),
    "bad_wcs": ("a.fits", lambda path: write(path, CDELT1=0.0), 0),
    "unknown_axis": ("a.fits", lambda path: write(path, (3, 12, 16)), 0),
}


@pytest.mark.parametrize("reason", sorted(MAKERS))
def test_each_reason(tmp_path: Path, reason: str) -> None:
    """A file that is wrong in one way is one row with that reason and a sentence; the file beside it is a frame."""
    name, make, hdu = MAKERS[reason]
    make(tmp_path / name)
    write(tmp_path / "b.fits")
    found = walked(tmp_path)
    (row,) = found.rejects
    assert (row["path"], row["hdu"], row["plane"], row["reason"]) == (name, hdu, -1, reason)
    assert reason in REASONS
    assert " " in row["detail"]
    assert found.frames["path"].tolist() == ["b.fits"]
    assert (str(tmp_path), name) in found.present


@pytest.mark.parametrize(
    ("dialect", "reason", "detail"),
    [
        (Nobody(), "no_dialect", "no dialect recognises"),
        (Faulty(), "bad_header", "ZeroDivisionError: by zero"),
        (Stellar(), "bad_header", "unknown time scale 'gmst'"),
    ],
)
def test_dialects_that_fail(tmp_path: Path, dialect: Dialect, reason: str, detail: str) -> None:
    """A header that no dialect reads, or on which one fails, is set aside and said; the walk goes on."""
    write(tmp_path / "a.fits")
    (row,) = walk([str(tmp_path)], [dialect], Settings()).rejects
    assert row["reason"] == reason
    assert detail in row["detail"]


def test_planes_with_bad_coordinates_are_one_row(tmp_path: Path) -> None:
    """A cube whose coordinates are unusable is one row, not one for each plane."""
    cards = {"CTYPE3": "FREQ", "CRVAL3": 1e9, "CDELT3": 1e8, "CRPIX3": 1.0}
    write(tmp_path / "a.fits", (3, 12, 16), CDELT1=0.0, **cards)
    assert [(row["hdu"], row["plane"], row["reason"]) for row in walked(tmp_path).rejects] == [(0, -1, "bad_wcs")]


def test_good_hdus_of_a_broken_file_stay(tmp_path: Path) -> None:
    """Of a file that is cut short in its second image, the first is a frame."""
    data = np.ones((12, 16), np.float32)
    path = tmp_path / "a.fits"
    fits.HDUList([fits.PrimaryHDU(data, header()), fits.ImageHDU(data, header())]).writeto(path)
    path.write_bytes(path.read_bytes()[:-2880])
    found = walked(tmp_path)
    assert found.frames["hdu"].tolist() == [0]
    assert [(row["hdu"], row["reason"]) for row in found.rejects] == [(1, "truncated")]


def test_file_that_the_system_refuses(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A file that cannot be opened is unreadable, in the system's words."""
    write(tmp_path / "a.fits")
    monkeypatch.setattr(os, "open", lambda *_: (_ for _ in ()).throw(PermissionError(13, "Permission denied")))
    (row,) = walked(tmp_path).rejects
    assert (row["reason"], row["detail"]) == ("unreadable", "the system says: Permission denied")


def test_unpacked_limit(tmp_path: Path) -> None:
    """A file that unpacks to more than the setting allows is set aside."""
    head = write(tmp_path / "whole.fits", (700, 900)).read_bytes()
    (tmp_path / "a.fits.gz").write_bytes(gzip.compress(head))
    (tmp_path / "whole.fits").unlink()
    assert walked(tmp_path, inventory={"unpacked_limit_mb": 1}).rejects[0]["reason"] == "bad_compression"
    assert walked(tmp_path, inventory={"unpacked_limit_mb": 3}).rejects == []


# --- whole archives


def test_order_and_repeatability(tmp_path: Path) -> None:
    """Frames are in order of archive, path, HDU and plane, and a second walk finds the same."""
    for name in ("b/2.fits", "b/10.fits", "a/x.fits", "c.fits"):
        write(tmp_path / "one" / name)
    write(tmp_path / "other" / "a.fits")
    archives = [str(tmp_path / "other"), str(tmp_path / "one")]
    first, second = (walk(archives, STANDARD, Settings()) for _ in range(2))
    assert first.frames["path"].tolist() == ["a/x.fits", "b/10.fits", "b/2.fits", "c.fits", "a.fits"]
    same(first, second)
    assert first.frames["digest"].tolist() == second.frames["digest"].tolist()


def test_pieces_make_no_difference(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """How many files are read at once changes nothing."""
    for i in range(7):
        write(tmp_path / f"{i}.fits", CRVAL1=30.0 + i, DATE__OBS=f"199{i}-01-01T00:00:00")
    whole = walked(tmp_path)
    monkeypatch.setattr("hindlight.archive.FILES_AT_ONCE", 2)
    same(walked(tmp_path), whole)


def test_progress(tmp_path: Path) -> None:
    """Progress adds up to the number of files."""
    for i in range(3):
        write(tmp_path / f"{i}.fits")
    steps: list[int] = []
    walk([str(tmp_path)], STANDARD, Settings(), None, steps.append)
    assert sum(steps) == 3


def test_empty_archive(tmp_path: Path) -> None:
    """An empty folder holds nothing, and a missing one is an error of the command."""
    found = walked(tmp_path)
    assert {len(values) for values in found.frames.values()} == {0}
    assert (found.rejects, found.present) == ([], set())
    with pytest.raises(UsageError, match="no such folder"):
        walked(tmp_path / "missing")


def test_extension_of_a_known_archive(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Of a known archive only new and changed files are read; the rest is named, and what is gone is not there."""
    for name in ("kept", "changed", "gone"):
        write(tmp_path / f"{name}.fits")
    known = as_pinned(walked(tmp_path))
    (tmp_path / "gone.fits").unlink()
    os.utime(tmp_path / "changed.fits", ns=(1, 1))
    write(tmp_path / "new.fits")
    opened: list[str] = []
    monkeypatch.setattr("hindlight.archive.open_source", _recorded(opened))
    found = walked(tmp_path, known)
    assert [Path(path).name for path in opened] == ["changed.fits", "new.fits"]
    assert found.frames["path"].tolist() == ["changed.fits", "new.fits"]
    assert sorted(path for _, path in found.present) == ["changed.fits", "kept.fits", "new.fits"]
    assert found.unchanged == {(str(tmp_path), "kept.fits")}


def test_void_frames_are_not_known(tmp_path: Path) -> None:
    """Frames that were void because their file had changed do not hide the file."""
    write(tmp_path / "a.fits")
    known = as_pinned(walked(tmp_path))
    known["state"][:] = "void"
    assert walked(tmp_path, known).frames["path"].tolist() == ["a.fits"]


def _recorded(opened: list[str]) -> Callable[..., Any]:
    """The function that opens files, with a list of what it opened."""

    def opening(path: str, limit: int) -> Any:
        opened.append(path)
        return open_source(path, limit)

    return opening


# --- the summary


def test_summary(tmp_path: Path) -> None:
    """Counts, medians and ranges by channel, frames by target, and words by how often they occur."""
    for i in range(4):
        write(
            tmp_path / f"a{i}.fits",
            DATE__OBS=f"199{i}-05-05T00:00:00",
            EXPTIME=100.0 + i,
            BMAJ=0.02 + 0.001 * i,
            RMS=0.5,
        )
    write(
        tmp_path / "b.fits",
        INSTRUME="camera",
        BUNIT="adu",
        BMAJ=None,
        FREQ=None,
        STOKES=None,
        DATE__OBS=None,
        CRVAL1=90.0,
    )
    (tmp_path / "c.fits").write_bytes(b"")
    found = walked(tmp_path)
    frames = found.frames | {"channel": assign(found.frames, {}, Settings().channels)}
    summary = summarise(frames, found.rejects, ("here", "there", "nowhere"), [30.0, 90.0, 0.0], [40.0, 40.0, -80.0])
    camera, array = summary.channels
    assert (summary.n_frames, array.n_frames, camera.n_frames) == (5, 4, 1)
    assert (array.instrument, array.first, array.last) == (
        "north array", "1990-05-05T00:00:50.000", "1993-05-05T00:00:51.500",
    )  # fmt: skip
    assert (array.exposure_s, array.beam_min, array.beam_max, array.depth, array.unit) == (
        101.5, 72.0, pytest.approx(82.8), 0.5, "Jy/beam",
    )  # fmt: skip
    assert (camera.first, camera.last) == ("", "")
    assert np.isnan([camera.beam_min, camera.beam_max, camera.depth]).all()
    assert [(t.name, t.n_frames, t.n_channels) for t in summary.targets] == [
        ("here", 4, 1), ("there", 1, 1), ("nowhere", 0, 0),
    ]  # fmt: skip
    assert [(c.word, c.count) for c in summary.rejects] == [("empty_file", 1)]
    assert [(c.word, c.count) for c in summary.assumptions] == [
        ("primary_beam_unknown", 4), ("no_beam", 1), ("no_clock", 1),
    ]  # fmt: skip
    assert all(c.meaning for c in (*summary.rejects, *summary.assumptions))


def test_summary_of_nothing() -> None:
    """No frames and no targets make an empty summary."""
    nothing = {column.name: np.empty(0, object if column.dtype == "str" else float) for column in FRAMES}
    summary = summarise(nothing, [], ("a",), [1.0], [2.0])
    assert (summary.n_frames, summary.channels, summary.rejects) == (0, (), ())
    assert [target.n_frames for target in summary.targets] == [0]
