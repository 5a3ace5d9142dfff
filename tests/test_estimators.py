"""The shipped estimators: unbiased, with right errors, and as a plugin should be."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from photutils.geometry import circular_overlap_grid

from hindlight import BeamShape, Estimator, Stamps
from hindlight.testing import check_plugin
from hindlight_plugins import aperture, peak, psf
from hindlight_plugins.aperture import Aperture, circle_overlap
from hindlight_plugins.peak import Peak
from hindlight_plugins.psf import Psf

BEAMS = [BeamShape(3.0, 3.0, 0.0), BeamShape(4.5, 3.0, 0.7), BeamShape(9.0, 4.0, 2.0), BeamShape(12.0, 12.0, 0.0)]


def study(name: str) -> ModuleType:
    """A script of tests/studies as a module."""
    path = Path(__file__).parent / "studies" / f"{name}.py"
    spec = importlib.util.spec_from_file_location(f"study_{name}", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


PULLS = study("pulls")


def source_stamps(beam: BeamShape, half: int, **kwargs: object) -> Stamps:
    """Noiseless sources of peak 1 at 121 places within a pixel."""
    dx, dy = (axis.ravel() for axis in np.meshgrid(np.linspace(-0.5, 0.5, 11), np.linspace(-0.5, 0.5, 11)))
    offset = np.arange(-half, half + 1)
    pixels = PULLS.gaussian(beam, offset - dx[:, None, None], offset[:, None] - dy[:, None, None])
    n = len(dx)
    return Stamps(pixels, dx, dy, np.full(n, 0.01), np.zeros(n), beam, **kwargs)


@pytest.mark.parametrize("estimator", [Aperture(), Peak(), Psf()], ids=lambda e: e.name)
def test_conformance(estimator: Estimator) -> None:
    """Each passes the kit that plugin authors run."""
    check_plugin(estimator)


def test_registration() -> None:
    """Each module offers its one estimator."""
    assert aperture.register_estimators() == [Aperture]
    assert peak.register_estimators() == [Peak]
    assert psf.register_estimators() == [Psf]


@pytest.mark.parametrize("beam", BEAMS, ids=lambda b: f"{b.major:g}x{b.minor:g}")
def test_peak_has_no_bias_within_a_pixel(beam: BeamShape) -> None:
    """At S/N 100 the peak of a beam is read to well below 1 % wherever in a pixel it lies."""
    stamps = source_stamps(beam, 2)
    flux, error = Peak().measure(stamps)
    assert np.abs(flux - 1).max() < 1e-9
    np.testing.assert_allclose(error, 0.01, rtol=0.01)  # the map's own rms


@pytest.mark.parametrize("beam", BEAMS, ids=lambda b: f"{b.major:g}x{b.minor:g}")
def test_peak_forgives_a_beam_that_is_a_little_wrong(beam: BeamShape) -> None:
    """A source 5 % wider than the beam is still read to 1 %: the reading stays close to the map's own value."""
    wider = BeamShape(1.05 * beam.major, 1.05 * beam.minor, beam.angle)
    stamps = source_stamps(wider, 2)
    flux, _ = Peak().measure(Stamps(stamps.pixels, stamps.dx, stamps.dy, stamps.rms, stamps.background_err, beam))
    assert np.abs(flux - 1).max() < 0.01


def test_peak_weights_stay_small() -> None:
    """The weights of a well-sampled beam do not blow up: white noise in the pixels is not amplified."""
    beam = BeamShape(12.0, 12.0, 0.0)
    rng = np.random.default_rng(1)
    n = 2000
    noise = Stamps(rng.normal(size=(n, 5, 5)), rng.uniform(-0.5, 0.5, n), rng.uniform(-0.5, 0.5, n), np.ones(n),
                   np.zeros(n), beam)  # fmt: skip
    assert Peak().measure(noise)[0].std() < 1.0


@pytest.mark.parametrize("beam", BEAMS, ids=lambda b: f"{b.major:g}x{b.minor:g}")
def test_psf_total_flux(beam: BeamShape) -> None:
    """A PSF of peak 1 has total flux 2 pi s_major s_minor, found wherever in a pixel it lies; N_eff is twice that."""
    stamps = source_stamps(beam, int(np.ceil(Psf().radius(beam))))
    flux, error = Psf().measure(stamps)
    total = np.pi * beam.major * beam.minor / (4 * np.log(2))
    np.testing.assert_allclose(flux, total, rtol=1e-9)
    np.testing.assert_allclose(error, 0.01 * (2 * total) ** 0.5, rtol=0.01)


def test_psf_effective_pixels() -> None:
    """For FWHM 3 px the effective number of pixels is 4 pi s^2 = 20.396 (T. Naylor 1998)."""
    stamps = source_stamps(BEAMS[0], 5)
    assert (Psf(radius_fwhm=3.0).measure(source_stamps(BEAMS[0], 9))[1] / 0.01) ** 2 == pytest.approx(20.396, rel=1e-4)
    assert (Psf().measure(stamps)[1][60] / 0.01) ** 2 == pytest.approx(20.396, rel=1e-3)


@pytest.mark.parametrize("radius", [0.3, 0.7, 1.0, 2.5, 4.5, 7.77])
def test_overlap_agrees_with_photutils(radius: float) -> None:
    """The exact overlap of circle and pixels is that of photutils, to rounding."""
    rng = np.random.default_rng(1)
    x, y = rng.uniform(-0.5, 0.5, (2, 40))
    x[:4], y[:4] = (0.0, 0.5, -0.5, 0.0), (0.0, 0.5, 0.25, -0.5)
    half = int(np.ceil(radius))
    edge = half + 0.5
    got = circle_overlap(radius, x, y, half)
    for i in range(40):
        low_x, high_x, low_y, high_y = -edge - x[i], edge - x[i], -edge - y[i], edge - y[i]
        size = 2 * half + 1
        want = circular_overlap_grid(low_x, high_x, low_y, high_y, size, size, radius, 1, 1)
        np.testing.assert_allclose(got[i], want, atol=1e-9)
    np.testing.assert_allclose(got.sum(axis=(1, 2)), np.pi * radius**2, rtol=1e-7)


def test_aperture_noise_follows_the_ccd_equation() -> None:
    """F = 1e4 electrons in 50 pixels over a background known from 500: 129.904 (Merline & Howell 1995)."""
    radius = (50 / np.pi) ** 0.5
    beam = BeamShape(radius / 1.5, radius / 1.5, 0.0)
    pixels = np.full((1, 11, 11), 1e4 / 50)
    sigma = (100.0 + 5**2) ** 0.5
    stamps = Stamps(pixels, np.zeros(1), np.zeros(1), np.array([sigma]), np.array([sigma / 500**0.5]), beam, 1.0)
    flux, error = Aperture().measure(stamps)
    assert flux[0] == pytest.approx(1e4)
    # Pixels cut by the circle count by the square of their part, so the sum of weights squared is below 50.
    weights = circle_overlap(radius, np.zeros(1), np.zeros(1), 5)
    exact = (1e4 + 125 * ((weights**2).sum() + 50**2 / 500)) ** 0.5
    assert error[0] == pytest.approx(exact)
    assert error[0] == pytest.approx(129.904, rel=0.03)


@pytest.mark.parametrize("estimator", [Aperture(), Psf()], ids=lambda e: e.name)
def test_photons_of_the_source_enter_the_error(estimator: Estimator) -> None:
    """With a known gain a bright source is less certain than a blank position, by its own counting noise."""
    half = int(np.ceil(estimator.radius(BEAMS[0])))
    plain = estimator.measure(source_stamps(BEAMS[0], half))
    counted = estimator.measure(source_stamps(BEAMS[0], half, electrons_per_unit=10.0))
    np.testing.assert_array_equal(plain[0], counted[0])
    extra = (counted[1] ** 2 - plain[1] ** 2) * 10.0 / counted[0]
    # All photons count in an aperture; weights of the PSF give 4/3 of it for a Gaussian.
    np.testing.assert_allclose(extra, 1.0 if isinstance(estimator, Aperture) else 4 / 3, rtol=0.02)


@pytest.mark.parametrize("estimator", [Aperture(), Peak(), Psf()], ids=lambda e: e.name)
def test_a_blank_pixel_far_out_does_no_harm(estimator: Estimator) -> None:
    """Only pixels that carry weight must be there."""
    half = int(np.ceil(estimator.radius(BEAMS[0]))) + 1
    stamps = source_stamps(BEAMS[0], half)
    want = estimator.measure(stamps)[0].copy()
    stamps.pixels[:, 0, 0] = np.nan
    np.testing.assert_array_equal(estimator.measure(stamps)[0], want)
    stamps.pixels[:, half, half] = np.nan
    assert np.isnan(estimator.measure(stamps)[0]).all()


@pytest.mark.parametrize("snr", [0, 5, 50])
@pytest.mark.parametrize("case", PULLS.CASES, ids=lambda c: f"{c.estimator.name}-{c.beam.major:g}-{c.noise}")
def test_errors_are_right(case: object, snr: int) -> None:
    """(flux - truth) / error has mean 0 and standard deviation 1 in the noise each estimator is meant for."""
    n = 400
    pull = PULLS.pulls(case, snr, n, seed=2)
    assert abs(pull.mean()) < PULLS.MEAN + 4 / n**0.5
    assert 1 - 0.03 - 4 / (2 * n) ** 0.5 < pull.std(ddof=1) < 1 + 0.03 + 4 / (2 * n) ** 0.5
