"""Local background and noise: medians against the obvious way, and what counts of whole numbers do to them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from hindlight.background import MAD_TO_SIGMA, Background, annulus_of, local_background, median_and_mad
from hindlight.pixels import Pixels
from hindlight.plugin import BeamShape
from hindlight.settings import Photometry

SETTINGS = Photometry()
ROUND = BeamShape(3.0, 3.0, 0.0)
NUMBERS = st.one_of(st.floats(-1e6, 1e6, width=32), st.just(float("nan")))


def background(pixels: Pixels, ix: np.ndarray, iy: np.ndarray) -> Background:
    """Around pixels, with the default annulus of a round beam."""
    annulus = annulus_of(ROUND, SETTINGS)
    return local_background(pixels.stamps(ix, iy, annulus.lattice), annulus, pixels.quantum)


def obvious(row: np.ndarray) -> tuple[float, float, int]:
    """Median and MAD of what is not NaN."""
    kept = row[~np.isnan(row)]
    if len(kept) == 0:
        return np.nan, np.nan, 0
    level = np.median(kept.astype(float))
    return float(level), float(np.median(np.abs(kept - kept.dtype.type(level)).astype(float))), len(kept)


@given(
    st.sampled_from([np.float32, np.float64]),
    hnp.arrays(np.float32, st.tuples(st.integers(1, 6), st.integers(1, 40)), elements=NUMBERS),
)
def test_median_and_mad(kind: type, values: np.ndarray) -> None:
    """Selection in place gives the median, the MAD and the count of every row, with gaps and without."""
    values = values.astype(kind)
    want = np.array([obvious(row) for row in values])
    got = np.array(median_and_mad(values.copy())).T
    np.testing.assert_allclose(got, want, rtol=1e-6, atol=1e-30)
    alone = np.concatenate([np.array(median_and_mad(row[None].copy())).T for row in values])
    np.testing.assert_array_equal(got, alone)


def test_no_rows_and_no_columns() -> None:
    """Nothing in, nothing or NaN out."""
    assert median_and_mad(np.zeros((0, 5)))[0].shape == (0,)
    assert np.isnan(median_and_mad(np.zeros((2, 0)))[0]).all()


@pytest.mark.parametrize("major", [1.0, 2.5, 3.0, 5.0, 12.0, 40.0])
@pytest.mark.parametrize("axis_ratio", [1.0, 0.4])
def test_annulus(major: float, axis_ratio: float) -> None:
    """The annulus holds the pixels whose centres lie between its radii, thinned where they are too many."""
    beam = BeamShape(major, major * axis_ratio, 0.0)
    annulus = annulus_of(beam, SETTINGS)
    lattice = annulus.lattice
    rows = np.arange(-lattice.rows, lattice.rows + 1, lattice.down)
    columns = np.arange(-lattice.columns, lattice.columns + 1, lattice.across)
    distance = np.hypot(rows[:, None], columns).ravel()
    inner, outer = SETTINGS.annulus_inner * beam.fwhm, SETTINGS.annulus_outer * beam.fwhm
    np.testing.assert_array_equal(
        annulus.index, np.flatnonzero((distance >= inner - 1e-6) & (distance <= outer + 1e-6))
    )
    assert 0 in rows
    assert 0 in columns
    assert outer - lattice.down < lattice.rows <= outer
    assert outer - lattice.across < lattice.columns <= outer
    assert lattice.down <= max(1.0, beam.minor)  # no beam slips between two rows
    assert lattice.across <= max(1.0, beam.minor)
    assert len(annulus.index) < 1.1 * SETTINGS.annulus_pixels
    thinning = lattice.down * lattice.across
    assert thinning == 1 or len(annulus.index) > SETTINGS.annulus_pixels / 4.5
    assert set(annulus.core.tolist()).isdisjoint(annulus.around)
    assert (distance[annulus.around] < inner).all()
    assert (distance[annulus.core] <= major).all()


def test_the_default_annulus_holds_200_beams() -> None:
    """As the settings promise."""
    annulus = annulus_of(BeamShape(6.0, 6.0, 0.0), SETTINGS)
    assert len(annulus.index) * annulus.lattice.down * annulus.lattice.across / (1.1331 * 36) > 200


def test_background_of_an_image() -> None:
    """Median and 1.4826 MAD of the annulus pixels, here found by distance from the position."""
    rng = np.random.default_rng(1)
    image = rng.normal(50, 3, (90, 100)).astype(np.float32)
    image[20:25, 30:40] = np.nan
    ix, iy = np.array([50, 45, 2]), np.array([45, 40, 80])
    local = background(Pixels(image), ix, iy)
    y, x = np.indices(image.shape)
    for i in range(3):
        distance = np.hypot(x - ix[i], y - iy[i])
        ring = image[(distance >= 9.0) & (distance <= 27.3)]
        level, spread, used = obvious(ring)
        assert local.level[i] == pytest.approx(level, abs=1e-6)
        assert local.rms[i] == pytest.approx(MAD_TO_SIGMA * spread, rel=1e-6)
        assert local.used[i] == used


@pytest.mark.parametrize("value", [0.0, 7.5])
@pytest.mark.parametrize("kind", [np.float32, np.int16])
def test_constant_pixels_have_no_noise(value: float, kind: type) -> None:
    """Padding, zero or not, is no sky: its noise is NaN, in counts too."""
    pixels = Pixels(np.full((70, 70), value, kind), quantum=float(kind is np.int16))
    local = background(pixels, np.array([35]), np.array([35]))
    assert np.isnan(local.rms).all()


def test_too_few_pixels() -> None:
    """Below 20 pixels there is no noise to speak of."""
    rng = np.random.default_rng(1)
    image = np.full((70, 70), np.nan)
    image[20, 20:39] = rng.normal(size=19)
    assert np.isnan(background(Pixels(image), np.array([35]), np.array([35])).rms[0])
    image[20, 39] = 0.1
    assert background(Pixels(image), np.array([35]), np.array([35])).rms[0] > 0


@pytest.mark.parametrize("rms", [1.0, 2.0, 10.0])
def test_counts_have_no_preferred_level(rms: float) -> None:
    """Rounding to whole numbers moves neither background nor noise, as it would the plain median and MAD."""
    rng = np.random.default_rng(1)
    true = 100.37
    image = np.rint(rng.normal(true, rms, (400, 400))).astype(np.int16)
    grid = np.arange(30, 370, 40)
    ix, iy = (axis.ravel() for axis in np.meshgrid(grid, grid))
    local = background(Pixels(image, quantum=1.0), ix, iy)
    pull = (local.level - true) / local.error(local.rms, 1.0)
    if rms > 1:
        assert abs(pull.mean()) < 4 / len(ix) ** 0.5
    assert abs((local.level - true).mean()) < 0.02  # the plain median would be off by 0.37
    assert 0.8 < pull.std() < 1.2
    assert np.median(local.rms) == pytest.approx((rms**2 + 1 / 6) ** 0.5, rel=0.02)


def test_error_of_the_median() -> None:
    """In white noise the median's error is 1.2533 rms / sqrt(n); fewer independent pixels make it larger."""
    rng = np.random.default_rng(2)
    image = rng.normal(0, 2, (600, 600)).astype(np.float32)
    grid = np.arange(30, 570, 50)
    ix, iy = (axis.ravel() for axis in np.meshgrid(grid, grid))
    annulus = annulus_of(ROUND, SETTINGS)
    local = background(Pixels(image), ix, iy)
    pull = local.level / local.error(local.rms, 1.0)
    assert 0.8 < pull.std() < 1.2
    np.testing.assert_allclose(local.error(local.rms, 1.0), 1.2533 * local.rms / len(annulus.index) ** 0.5)
    np.testing.assert_allclose(local.error(local.rms, 10.0), local.error(local.rms, 1.0) * 10**0.5)
