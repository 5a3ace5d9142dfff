"""Centroids of known sources and the shift of an image that they agree on."""

from __future__ import annotations

import numpy as np
import pytest

from hindlight.pixels import Pixels
from hindlight.plugin import BeamShape
from hindlight.pointing import Centroids, centroids, pointing

SIZE = 300
MIDDLE = (SIZE - 1) / 2


def image(x: np.ndarray, y: np.ndarray, peak: np.ndarray, beam: BeamShape, rng: np.random.Generator) -> np.ndarray:
    """Elliptical Gaussians in white noise of rms 1 on a background of 50."""
    made = rng.normal(50, 1, (SIZE, SIZE))
    row, column = np.mgrid[:SIZE, :SIZE]
    c, s = np.cos(beam.angle), np.sin(beam.angle)
    for a, b, height in zip(x, y, peak, strict=True):
        dx, dy = column - a, row - b
        along, across = (c * dx + s * dy) / beam.major, (c * dy - s * dx) / beam.minor
        made += height * np.exp(-4 * np.log(2) * (along**2 + across**2))
    return made.astype(np.float32)


def lattice(n: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Places apart from each other, at any phase of the pixels."""
    grid = np.linspace(30, SIZE - 31, int(np.ceil(n**0.5)))
    x, y = (axis.ravel()[:n] for axis in np.meshgrid(grid, grid))
    return x + rng.uniform(-0.5, 0.5, n), y + rng.uniform(-0.5, 0.5, n)


@pytest.mark.parametrize("beam", [BeamShape(3.0, 3.0, 0.0), BeamShape(5.0, 2.5, 0.6)])
def test_centroids(beam: BeamShape) -> None:
    """Right to their error, at any phase of the pixels, for a shift of a beam too; S/N is the peak's; points are points."""
    rng = np.random.default_rng(1)
    x, y = lattice(49, rng)
    shift = np.array((0.7 * beam.minor, -0.5 * beam.minor))
    peak = np.geomspace(15, 500, 49)
    found = centroids(Pixels(image(x + shift[0], y + shift[1], peak, beam, rng)), x, y, beam)
    pull = np.stack((found.dx - shift[0], found.dy - shift[1])) / found.error
    assert np.abs(pull).max() < 4.5
    assert pull.std() < 1.1  # the error is that of noise with the beam's correlation, an upper bound in white noise
    np.testing.assert_allclose(found.snr[peak > 100], peak[peak > 100], rtol=0.25)
    assert np.median(found.snr / peak) == pytest.approx(1.0, abs=0.05)
    assert np.median(found.width) == pytest.approx(1.0, abs=0.03)


def test_extended_faint_and_cut_off_sources() -> None:
    """A source twice as wide says so; one that does not stand out, or lies over the edge or blanks, is NaN."""
    rng = np.random.default_rng(2)
    beam = BeamShape(3.0, 3.0, 0.0)
    pixels = image(np.array([60.0]), np.array([60.0]), np.array([200.0]), BeamShape(6.0, 6.0, 0.0), rng)
    pixels[200, 201] = np.nan
    found = centroids(Pixels(pixels), np.array([60.0, 120.0, 2.0, 200.0]), np.array([60.0, 120.0, 2.0, 200.0]), beam)
    assert found.width[0] == pytest.approx(2.0, abs=0.2)
    assert np.isnan(found.dx[1:]).all()


@pytest.mark.parametrize("fwhm", [2.0, 3.0, 6.0, 15.0])
def test_flat_tops(fwhm: float) -> None:
    """Cut off at half of their height, after which a flat field spreads them by 1 %, they are flat; whole ones never are."""
    rng = np.random.default_rng(6)
    beam = BeamShape(fwhm, fwhm, 0.0)
    x, y = lattice(9, rng) if fwhm > 10 else lattice(25, rng)
    whole = image(x, y, np.full(len(x), 200.0), beam, rng)
    cut = np.minimum(whole, 150.0) * rng.normal(1, 0.003, whole.shape)
    assert not centroids(Pixels(whole), x, y, beam).flat.any()
    found = centroids(Pixels(cut.astype(np.float32)), x, y, beam)
    assert found.flat[np.isfinite(found.dx)].mean() > (0.9 if fwhm > 2 else 0.0)


@pytest.mark.parametrize("gradient", [0.0, 2e-3])
def test_shift_and_gradient(gradient: float) -> None:
    """Shift and gradient over the field are found, a gradient only where there is one; moved places are right."""
    rng = np.random.default_rng(3)
    beam = BeamShape(3.0, 3.0, 0.0)
    x, y = lattice(25, rng)
    matrix = gradient * np.array([[1.0, -0.5], [0.3, -1.0]])
    true = np.array([[0.4], [-0.2]]) + matrix @ np.stack((x - MIDDLE, y - MIDDLE))
    pixels = Pixels(image(x + true[0], y + true[1], np.full(25, 40.0), beam, rng))
    found = pointing(centroids(pixels, x, y, beam), x, y, (SIZE, SIZE), beam)
    assert found is not None
    assert found.n == 25
    assert np.hypot(*(found.offset - [0.4, -0.2])) < 4 * found.error
    assert found.error < 0.02
    assert bool(found.gradient.any()) == bool(gradient)
    moved = np.stack(found.moved(x, y)) - np.stack((x, y))
    assert np.abs(moved - true).max() < 0.05


def made_up(dx: np.ndarray, dy: np.ndarray, error: float) -> Centroids:
    """Centroids of points of S/N 30."""
    ones = np.ones(len(dx))
    return Centroids(dx, dy, error * ones, 30 * ones, ones, ones, np.zeros(len(dx), bool))


def test_sources_that_are_elsewhere_do_not_matter() -> None:
    """A quarter of the sources blended, moved or misidentified: the rest decide, and the error grows."""
    rng = np.random.default_rng(4)
    x, y = lattice(20, rng)
    dx, dy = 0.3 + 0.02 * rng.standard_normal((2, 20))
    dx[:4] += 1.0
    dy[4] = 9.0
    found = pointing(made_up(dx, dy, 0.02), x, y, (SIZE, SIZE), BeamShape(3.0, 3.0, 0.0))
    assert found is not None
    assert found.n == 19  # the one that is beams away is not even asked
    np.testing.assert_allclose(found.offset, 0.3, atol=0.06)


def test_fewer_than_three_sources_say_nothing() -> None:
    """Two sources, or three of which one was not found."""
    x = y = np.array([50.0, 150.0, 250.0])
    dx = np.array([0.1, 0.1, np.nan])
    assert pointing(made_up(dx, dx, 0.02), x, y, (SIZE, SIZE), BeamShape(3.0, 3.0, 0.0)) is None
