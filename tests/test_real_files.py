"""Real files that other people made, read through the walk: facts by eye from their headers, pixels by astropy.

The files are test data inside installed distributions, named in each case; nothing is copied into the project. Where
a distribution does not hold a file the test is skipped; astropy's are always there.
"""

from __future__ import annotations

import importlib.metadata
import math
import shutil
import warnings
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.coordinates import EarthLocation
from astropy.io import fits
from astropy.wcs import WCS

from hindlight import host
from hindlight.archive import WalkResult, walk
from hindlight.files import open_source
from hindlight.headers import read_hdus
from hindlight.settings import Settings
from hindlight.sky import projection
from hindlight.summary import words_of

NAN = math.nan
ASTROPY, ASTROQUERY = "astropy", "astroquery"


PRAIRIE = EarthLocation.from_geodetic("-96d27m11.8008s", "46d52m00.408s", 311.7999995676)


@dataclass(frozen=True)
class Real:
    """A file of a distribution, and what the frame of one of its HDUs is: `middle` is UTC, a date where it has no clock."""

    source: str
    path: str
    words: str
    hdu: int = 0
    middle: str = ""
    exposure: float = NAN
    unit: str = ""
    beam: tuple[float, float, float] = (NAN, NAN, NAN)
    frequency: float = NAN
    instrument: str = ""
    band: str = ""
    dialect: str = "standard_headers"
    site: EarthLocation | None = None


FILES = [
    # A radio map of 1990 with four axes, a date without a time, EPOCH, BLANK on pixels that are real numbers, the beam
    # in its history alone.
    Real(
        ASTROQUERY,
        "astroquery/nvas/tests/data/image.imfits",
        "no_clock no_exposure beam_from_history primary_beam_unknown frame_assumed",
        middle="1990-01-27",
        unit="Jy/beam",
        beam=(8.55072, 2.791944, 60.19),
        frequency=22.4601e9,
        instrument="VLA",
        dialect="synthesis_headers",
    ),
    # A cut-out of a radio map of 1993: 8-digit date, axes beyond NAXIS, EPOCH and EQUINOX.
    Real(
        ASTROQUERY,
        "astroquery/image_cutouts/first/tests/data/image.fits",
        "no_clock no_exposure primary_beam_unknown frame_assumed",
        middle="1993-04-17",
        unit="Jy/beam",
        beam=(5.4, 5.4, 0.0),
        frequency=1364.9e6,
        instrument="VLA",
        dialect="synthesis_headers",
    ),
    # A galactic map with EPOCH 0, no date at all, a wavelength as its third type.
    Real(
        ASTROQUERY,
        "astroquery/magpis/tests/data/image.fits",
        "no_clock no_exposure primary_beam_unknown stokes_assumed no_frequency",
        unit="Jy/beam",
        beam=(6.19992, 5.4, 0.0),
        instrument="EFFLSBRG",
    ),
    # A detector of a mosaic: a date without a time, UTC in a card of its own, old cards for the place, no unit.
    Real(
        ASTROQUERY,
        "astroquery/cadc/tests/data/query_images.fits",
        "no_unit no_beam",
        middle="2005-07-31T09:55:11.593",
        exposure=2.046,
        instrument="MegaPrime",
        band="g.MP9401",
        dialect="plate_headers",
        site=EarthLocation.from_geodetic(-155.468876, 19.825252, 0.0),
    ),
    # An infrared extension whose primary header has the times, without INHERIT; seeing in pixels of 0.2 arcsec.
    Real(
        ASTROQUERY,
        "astroquery/ukidss/tests/data/image.fits",
        "scale_assumed no_unit primary_header geocentre frame_assumed intermittent",
        hdu=1,
        middle="2007-10-11T13:12:11.136",
        exposure=10.0,
        beam=(0.7635, 0.7635, 0.0),
        instrument="WFCAM",
        band="K",
    ),
    # A CCD image with distortion polynomials; latitude and longitude as text, 'degrees east'.
    Real(
        ASTROQUERY,
        "astroquery/astrometry_net/tests/data/thumbnail-image.fit.gz",
        "scale_assumed no_beam",
        middle="2018-04-17T03:36:07.000",
        exposure=90.0,
        unit="adu",
        instrument="AspenCG16",
        band="r",
        site=PRAIRIE,
    ),
    # The same place in 2011: exposure and coordinates with distortion polynomials.
    Real(
        ASTROPY,
        "astropy/nddata/tests/data/sip-wcs.fits",
        "scale_assumed no_beam repeated_keyword",
        middle="2011-09-01T02:10:05.000",
        exposure=120.0,
        unit="adu",
        instrument="Apogee Alta",
        band="B",
        site=PRAIRIE,
    ),
    # A scanned plate of 1976: UT in a card of its own, 70 minutes ('Exposure time minutes'), a longitude without a
    # direction, the epoch of the plate in EPOCH beside EQUINOX.
    Real(
        ASTROPY,
        "astropy/wcs/tests/data/dss.14.29.56-62.41.05.fits.gz",
        "start_assumed site_unsettled geocentre no_unit no_beam frame_assumed photographic_assumed",
        middle="1976-03-11T18:13:00.000",
        exposure=4200.0,
        instrument="UK 48-inch Schmidt",
        band="bandpass 0",
        dialect="plate_headers",
    ),
    # A camera in orbit, 1994: DD/MM/YY and TIME-OBS in the primary header, INHERIT in the extensions.
    Real(
        ASTROPY,
        "astropy/io/fits/tests/data/test0.fits",
        "no_unit geocentre no_beam frame_assumed",
        hdu=2,
        middle="1994-05-19T15:41:16.115",
        exposure=0.23,
        instrument="WFPC2",
        dialect="old_headers",
    ),
    # Another, 2005: a four-digit date and TIME-OBS, both in the primary header.
    Real(
        ASTROPY,
        "astropy/wcs/tests/data/j94f05bgq_flt.fits",
        "geocentre no_beam frame_assumed",
        hdu=1,
        middle="2005-03-07T06:54:46.000",
        exposure=400.0,
        unit="electron",
        instrument="ACS",
        dialect="old_headers",
    ),
    # Look-up tables of distortion in other HDUs.
    Real(
        ASTROPY,
        "astropy/wcs/tests/data/dist_lookup.fits.gz",
        "no_clock no_exposure no_instrument no_beam",
        hdu=1,
        unit="electron",
    ),
    # A tile-compressed image in FK4 by EQUINOX 1950 alone.
    Real(
        ASTROPY,
        "astropy/io/fits/tests/data/comp.fits",
        "no_clock no_exposure no_unit no_beam frame_assumed",
        hdu=1,
        instrument="Optical",
    ),
    # A map of the southern sky in a zenithal perspective: a beam of 14.4 arcmin, a rest frequency only.
    Real(
        ASTROPY,
        "astropy/modeling/tests/data/1904-66_AZP.fits",
        "no_clock no_exposure no_instrument primary_beam_unknown stokes_assumed no_frequency frame_assumed",
        unit="Jy/beam",
        beam=(864.0, 864.0, 0.0),
    ),
]


def located(source: str, path: str) -> Path:
    """The file inside an installed distribution, which is not imported."""
    try:
        found = Path(str(importlib.metadata.distribution(source).locate_file(path)))
    except importlib.metadata.PackageNotFoundError:
        pytest.skip(f"{source} is not installed")
    if not found.is_file():
        pytest.skip(f"this {source} has no {path}")
    return found


def walked(folder: Path, original: Path) -> WalkResult:
    """The walk over a copy of a file."""
    name = original.name.replace(".imfits", ".fits")
    shutil.copy(original, folder / name)
    return walk([str(folder)], host.load(host.spec_from(Settings())).dialects, Settings())


def row_of(found: WalkResult, hdu: int) -> dict[str, Any]:
    """The frame of one HDU."""
    (index,) = np.flatnonzero(found.frames["hdu"] == hdu)
    return {name: values[index] for name, values in found.frames.items()}


@pytest.mark.parametrize("real", FILES, ids=lambda real: real.path.rpartition("/")[2])
def test_facts(tmp_path: Path, real: Real) -> None:
    """What the header says, and exactly what it leaves open."""
    row = row_of(walked(tmp_path, located(real.source, real.path)), real.hdu)
    assert sorted(words_of(row["assumptions"])) == sorted(real.words.split())
    assert row["middle_utc"] == real.middle
    assert np.isfinite(row["middle_tdb_s"]) == ("T" in real.middle)
    assert row["exposure_s"] == pytest.approx(real.exposure, nan_ok=True)
    assert (row["unit"], row["instrument"], row["band"]) == (real.unit, real.instrument, real.band)
    assert (row["beam_major"], row["beam_minor"], row["beam_angle"]) == pytest.approx(real.beam, rel=0.01, nan_ok=True)
    assert row["frequency_hz"] == pytest.approx(real.frequency, nan_ok=True)
    assert (row["stokes"], row["dialect"]) == ("I", real.dialect)
    site = (NAN,) * 3 if real.site is None else [axis.to_value("m") for axis in real.site.geocentric]
    assert (row["site_x"], row["site_y"], row["site_z"]) == pytest.approx(site, abs=0.01, nan_ok=True)


@pytest.mark.parametrize("real", FILES, ids=lambda real: real.path.rpartition("/")[2])
def test_pixels(tmp_path: Path, real: Real) -> None:
    """A position is at the pixel at which astropy has it, to a hundredth of a pixel."""
    path = located(real.source, real.path)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # astropy says what it would mend in each header
        with fits.open(path) as hdus:
            header = hdus[real.hdu].header
            if header.get("INHERIT") and "EQUINOX" in hdus[0].header:  # which astropy leaves to its user
                header["EQUINOX"] = hdus[0].header["EQUINOX"]
            theirs = WCS(header, hdus).celestial
            place = theirs.pixel_to_world(3.0, 4.0).icrs
    with open_source(str(path), 10**9) as source:
        cards = next(hdu.cards for hdu in read_hdus(source) if hdu.index == real.hdu)
    ours = projection(cards, str(path)).icrs_to_pixel(np.array([place.ra.deg]), np.array([place.dec.deg]))
    assert (ours[0][0], ours[1][0]) == pytest.approx((3.0, 4.0), abs=0.01)


@pytest.mark.parametrize(
    ("source", "path", "reason", "detail"),
    [
        # A scanned plate of 1951 with the scanner's plate solution and no CTYPE: no standard defines that solution.
        (ASTROQUERY, "astroquery/ipac/ned/tests/data/query_images.fits", "no_wcs", "no pair of celestial axes"),
        # A raw exposure on pixels alone.
        (ASTROPY, "astropy/io/fits/tests/data/fixed-1890.fits", "no_wcs", "PIXEL, PIXEL"),
        # A long-slit spectrum.
        (ASTROPY, "astropy/io/fits/tests/data/o4sp040b0_raw.fits", "no_wcs", "LAMBDA, ANGLE"),
        # Random groups, tables, and no image.
        (ASTROPY, "astropy/io/fits/tests/data/random_groups.fits", "no_image", "HDUs"),
    ],
)
def test_what_is_no_image_of_the_sky(tmp_path: Path, source: str, path: str, reason: str, detail: str) -> None:
    """Files without celestial coordinates are set aside with the right word."""
    found = walked(tmp_path, located(source, path))
    assert len(found.frames["path"]) == 0
    assert {row["reason"] for row in found.rejects} == {reason}
    assert all(detail in row["detail"] for row in found.rejects)
