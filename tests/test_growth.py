"""Light that an aperture or a Gaussian model leaves out, against the closed form for a star with wings."""

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS

from hindlight.opening import FrameToMeasure
from hindlight.photometry import measure_frame
from hindlight.settings import Settings
from hindlight_plugins.aperture import Aperture
from hindlight_plugins.peak import Peak
from made import header

FWHM, BETA, SIZE = 6.0, 2.5, 400
WCS_CARDS = ("CTYPE1", "CTYPE2", "CRVAL1", "CRVAL2", "CRPIX1", "CRPIX2", "CDELT1", "CDELT2")
ALPHA = FWHM / 2 / (2 ** (1 / BETA) - 1) ** 0.5


def within(radius):
    """The part of a Moffat star's light within a radius (A. F. J. Moffat 1969, A&A 3, 455)."""
    return 1 - (1 + (radius / ALPHA) ** 2) ** (1 - BETA)


@pytest.fixture(scope="module")
def frame(tmp_path_factory):
    """An image of sixteen stars with wings, and where they are."""
    place = np.arange(60, SIZE - 40, 90) + 0.3
    x, y = (axis.ravel() for axis in np.meshgrid(place, place))
    image = np.random.default_rng(1).normal(100.0, 1.0, (SIZE, SIZE))
    grid_y, grid_x = np.mgrid[:SIZE, :SIZE]
    peak = (BETA - 1) / (np.pi * ALPHA**2)
    flux = np.geomspace(1e5, 8e5, len(x))
    for star_x, star_y, light in zip(x, y, flux, strict=True):
        square = (grid_x - star_x) ** 2 + (grid_y - star_y) ** 2
        image += light * peak * (1 + square / ALPHA**2) ** -BETA
    path = tmp_path_factory.mktemp("growth") / "stars.fits.gz"
    cards = {"CRPIX1": SIZE / 2, "CRPIX2": SIZE / 2, "CDELT1": -1 / 3600, "CDELT2": 1 / 3600, "BUNIT": "adu"}
    head = header(**cards)
    fits.PrimaryHDU(image.astype(np.float32), head).writeto(path)
    asked = FrameToMeasure(str(path), beam_major=FWHM, beam_minor=FWHM, unit="adu")
    ra, dec = WCS({name: head[name] for name in WCS_CARDS}).wcs_pix2world(x, y, 0)
    return asked, ra, dec, flux


@pytest.mark.parametrize("radius", [0.7, 1.0, 1.5])
def test_fraction_of_the_light_that_an_aperture_holds(frame, radius):
    """As the closed form has it, to 1 %: wings in the annulus are taken off with the background."""
    asked, ra, dec, flux = frame
    found = measure_frame(asked, ra, dec, Aperture(radius), Settings(), (ra, dec))
    assert found["held"] == pytest.approx(within(radius * FWHM) / within(3 * FWHM), rel=0.01)
    total = found["flux"] / found["held"]
    assert np.median(total / flux) == pytest.approx(within(3 * FWHM), rel=0.02)


def test_no_fraction_without_sources_or_for_a_peak(frame):
    """Four anchors cannot tell, nor can a reading of the peak."""
    asked, ra, dec, _ = frame
    assert np.isnan(measure_frame(asked, ra, dec, Aperture(), Settings(), (ra[:4], dec[:4]))["held"]).all()
    assert np.isnan(measure_frame(asked, ra, dec, Peak(), Settings(), (ra, dec))["held"]).all()
