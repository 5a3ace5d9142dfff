"""Response curves of photographic plates: stars kept out of the fit come out right, with the right errors."""

from __future__ import annotations

import numpy as np
import pytest

from hindlight.ensemble import IMAGE_COLUMNS, calibrated, flags, solved
from hindlight.response import Curve, curve_from, faintest_seen, solve_responses
from hindlight.schema import Flag
from hindlight.settings import Comparisons

NOISE, SCATTER, FIT = 0.1, 0.02, 40
POOR = 3  # a plate that shows four comparisons


def plates(seed: int, n: int = 30, stars: int = 60) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """True fluxes of stars that span a factor of 100, measured fluxes and errors; S-shaped curves that saturate.

    The first FIT stars are comparisons, the others have no part in the fit.
    """
    rng = np.random.default_rng(seed)
    flux = 10 ** rng.uniform(0, 2, stars)
    flux[:2] = 1.0, 100.0
    speed, knee, toe = np.exp(0.3 * rng.standard_normal((n, 1))), 10 ** rng.uniform(1.3, 2.3, (n, 1)), rng.uniform(
        0.9, 1.3, (n, 1)
    )  # fmt: skip
    true = speed * knee * np.log1p(flux / knee) * (flux / (flux + 1.0)) ** (toe - 1.0)
    measured = true * (1 + SCATTER * rng.standard_normal(true.shape)) + NOISE * rng.standard_normal(true.shape)
    return flux, measured, np.full(true.shape, NOISE)


def fitted(seed: int, by_table: bool) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """True fluxes, fluxes and errors of the stars kept out; by the plates' median curve the truth is read off the others."""
    true, measured, error = plates(seed)
    used = measured[:, :FIT].copy()
    used[POOR, 4:] = np.nan
    found = solve_responses(used, error[:, :FIT], true[:FIT] if by_table else np.full(FIT, np.nan), 8)
    assert [k for k, curve in enumerate(found.curves) if curve is None] == [POOR]
    assert found.n_comparisons[POOR] == 4
    assert np.nanmedian(found.scatter) == pytest.approx(SCATTER, rel=0.15)
    order = np.argsort(true[:FIT])
    log_truth = np.interp(np.log(true), np.log(true[:FIT][order]), np.log(found.brightness[order]))
    truth = true[FIT:] if by_table else np.exp(log_truth[FIT:])
    pairs = [
        curve.applied(row, np.hypot(NOISE, scatter * row))
        for curve, row, scatter in zip(found.curves, measured[:, FIT:], found.scatter, strict=True)
        if curve is not None
    ]
    return truth, np.array([flux for flux, _ in pairs]), np.array([err for _, err in pairs])


@pytest.mark.parametrize("by_table", [True, False])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_stars_kept_out_of_the_fit(seed: int, by_table: bool) -> None:
    """Median bias below 1 %, at most 5 % for any star; chi-square per degree of freedom within 0.8 and 1.25."""
    truth, flux, error = fitted(seed, by_table)
    assert abs(np.median(flux / truth - 1)) < 0.01
    assert np.abs(np.median(flux / truth - 1, axis=0)).max() < 0.05
    assert 0.8 < (((flux - truth) / error) ** 2).mean() < 1.25


def test_the_scale_is_that_of_the_median_curve() -> None:
    """Without given fluxes a star has the flux that the median plate measures, bright or faint."""
    _, measured, error = plates(10)
    found = solve_responses(measured, error, np.full(60, np.nan), 8)
    bright = np.argsort(found.brightness)[-50:]
    np.testing.assert_allclose(np.median(measured, axis=0)[bright] / found.brightness[bright], 1.0, atol=0.05)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_median_curve_is_the_identity(seed: int) -> None:
    """Also where plates are so unlike that a first guess of brightnesses is bent: flux is left as most plates give it."""
    true, measured, error = plates(seed)
    measured[:20, true < 5] = np.nan
    measured[20:] = np.abs(measured[20:]) ** 0.6
    found = solve_responses(measured, error, np.full(60, np.nan), 8)
    grid = np.geomspace(3.0, 0.9 * np.nanmax(found.brightness), 40)
    factors = [curve.applied(grid, np.ones(40))[0] / grid for curve in found.curves if curve is not None]
    assert len(factors) == 30
    assert np.abs(np.median(factors, axis=0) - 1).max() < 0.045


def test_curves_rise_everywhere() -> None:
    """Also where a plate is saturated and noise makes its brightest stars the fainter ones."""
    true, measured, error = plates(4)
    measured[:10, true > 30] = measured[:10, true > 30].max(axis=1, keepdims=True) * 0.98
    found = solve_responses(measured, error, true, 8)
    grid = np.linspace(-50.0, 300.0, 4000)
    for curve in found.curves:
        assert curve is not None
        flux, _ = curve.applied(grid, np.ones(len(grid)))
        assert (np.diff(flux) > 0).all()
        assert np.interp(0.0, grid, flux) == pytest.approx(0.0, abs=0.1)


def test_a_saturated_plate_has_large_errors_there() -> None:
    """The error of the flux is that of the measured flux times the slope of the curve."""
    flat = Curve(np.array([1.0, 10.0, 11.0]), np.array([1.0, 10.0, 100.0]), np.zeros(3))
    flux, error = flat.applied(np.array([5.0, 10.5]), np.array([0.1, 0.1]))
    assert flux[0] == pytest.approx(5.0)
    assert error[0] == pytest.approx(0.1)
    slope = np.log(10.0) / np.log(1.1)
    assert flux[1] == pytest.approx(10 * 1.05**slope)
    assert error[1] == pytest.approx(0.1 * slope * flux[1] / 10.5)


def test_beyond_the_comparisons() -> None:
    """A line through the origin below, the last slope above, with an error that grows up to 15 %; kept as text."""
    curve = curve_from(Curve(np.array([2.0, 4.0, 8.0]), np.array([1.0, 2.0, 6.0]), np.array([0.1, 0.0, 0.0])).text)
    flux, error = curve.applied(np.array([-2.0, 0.0, 1.0, 16.0, 800.0, np.nan]), np.zeros(6))
    np.testing.assert_allclose(flux[:4], [-1.0, 0.0, 0.5, 18.0])
    np.testing.assert_allclose(error[:3], [0.1, 0.0, 0.05])
    assert error[3] / flux[3] == pytest.approx(0.1 * np.log(3.0) ** 2)
    assert error[4] / flux[4] == pytest.approx(0.15)
    assert np.isnan(flux[5])


def test_a_comparison_that_varies_is_left_out() -> None:
    """One that doubles on every other plate has no brightness, and the others are as they would be without it."""
    _, measured, error = plates(5)
    without = solve_responses(np.delete(measured, 7, axis=1), error[:, 1:], np.full(59, np.nan), 8)
    measured[::2, 7] *= 2.0
    found = solve_responses(measured, error, np.full(60, np.nan), 8)
    assert np.flatnonzero(np.isnan(found.brightness)).tolist() == [7]
    np.testing.assert_allclose(np.delete(found.brightness, 7), without.brightness, rtol=1e-3)


def test_plates_without_a_common_star_are_solved_apart() -> None:
    """Two fields of one channel: what is in one does not change the other."""
    _, measured, error = plates(6)
    both = np.full((30, 60), np.nan)
    both[:15, :30], both[15:, 30:] = measured[:15, :30], measured[15:, 30:]
    found = solve_responses(both, error, np.full(60, np.nan), 8)
    alone = solve_responses(both[:15, :30], error[:15, :30], np.full(30, np.nan), 8)
    np.testing.assert_array_equal(found.brightness[:30], alone.brightness)
    assert all(curve is not None for curve in found.curves)


def test_a_single_plate_knows_no_scale() -> None:
    """Without a second plate or given fluxes there is nothing to compare with; with these there is."""
    true, measured, error = plates(7, n=1)
    assert solve_responses(measured, error, np.full(60, np.nan), 8).curves == (None,)
    assert solve_responses(measured, error, true, 8).curves[0] is not None


def test_too_few_are_left_where_comparisons_vary() -> None:
    """Eight comparisons of which one varies are seven: no curve, and the given fluxes still tell the limits."""
    true, measured, error = plates(9)
    some = np.argsort(true)[-8:]
    measured[::2, some[3]] *= 10.0
    found = solve_responses(measured[:, some], error[:, some], true[some], 8)
    assert all(curve is None for curve in found.curves)
    np.testing.assert_array_equal(found.brightness, true[some])
    nothing = solve_responses(np.full((4, 0), np.nan), np.full((4, 0), np.nan), np.empty(0), 8)
    assert nothing.curves == (None,) * 4


def test_the_faintest_star_seen() -> None:
    """Of known brightness, five times its error on the plate; NaN where there is none."""
    flux = np.array([[10.0, 5.0, 4.9, 20.0], [1.0, 1.0, 1.0, np.nan]])
    limit = faintest_seen(flux, np.ones_like(flux), np.array([30.0, 20.0, 10.0, np.nan]))
    np.testing.assert_array_equal(limit, [20.0, np.nan])


def test_the_solution_and_its_use() -> None:
    """Plates have curves, the poor one no flux; what is brighter than its plate's comparisons is flagged."""
    true, measured, error = plates(8)
    measured[POOR, 4:] = np.nan
    frame, source = np.nonzero(np.isfinite(measured))
    rows = {"frame": frame, "position": source, "flux": measured[frame, source], "flux_err": error[frame, source],
            "x": 3.0 * source, "y": 2.0 * source}  # fmt: skip
    images = {name: np.full(30, 500) for name in ("width", "height", "pixel_scale")}
    images["response"] = np.full(30, "photographic", object)
    known = {"frame": np.arange(30), "pull": np.ones(30), "n_controls": np.full(30, 200)}
    known |= {name: np.full(30, 1.0) for name in IMAGE_COLUMNS}
    given = dict(enumerate(true.tolist()))
    channel = np.full(30, "plates", object)
    table, said = solved(np.arange(30), channel, [known], [rows], Comparisons(), images, given)
    assert table["verdict"].tolist() == ["seen_only" if k == POOR else "good" for k in range(30)]
    assert any("29 of 30 plates have a response curve from up to" in line and "table" in line for line in said)
    assert any("1 of 30 plates of plates have fewer than 8 comparisons" in line for line in said)
    flux, err, bad = calibrated(rows, table)
    assert np.isnan(flux[frame == POOR]).all()
    assert not bad.any()
    good = frame != POOR
    pull = (flux[good] - true[source[good]]) / err[good]
    assert 0.8 < (pull**2).mean() < 1.25
    far = {"frame": np.array([5, 5]), "flux": np.array([1.0, 1e4]), "flags": np.array([1, 1])}
    assert flags(far, table).tolist() == [1, 1 | Flag.EXTRAPOLATED]
