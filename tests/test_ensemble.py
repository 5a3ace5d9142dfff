"""Gains of frames from their comparisons, and what becomes of fluxes."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats

from hindlight import losses
from hindlight.ensemble import IMAGE_COLUMNS, calibrated, error_scales, solution, solve_gains, solved
from hindlight.robust import excess_scatter
from hindlight.settings import Comparisons


def test_gains_of_a_worked_example() -> None:
    """Three frames of exact ratios 1 : 1.1 : 0.9, one flux missing; the logarithms of the gains add up to zero.

    Gains and brightnesses of the linear system of Honeycutt 1992 (PASP 104, 435), solved by hand.
    """
    flux = np.array([[100, 200, 50], [110, 220, 55], [90, 180, np.nan]])
    found = solve_gains(flux, 0.01 * flux, fewest=2)
    np.testing.assert_allclose(found.gain, [1.003356, 1.103691, 0.903020], atol=1e-6)
    np.testing.assert_allclose(found.brightness, [99.6655, 199.3311, 49.8328], atol=1e-4)
    assert found.n_comparisons.tolist() == [3, 3, 2]


def simulated(seed: int, frames: int = 60, sources: int = 20) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """True gains (mean logarithm zero), fluxes and errors; S/N 10 to 200, and 1 % of scatter beyond the errors."""
    rng = np.random.default_rng(seed)
    gain = np.exp(0.05 * rng.standard_normal(frames))
    gain /= np.exp(np.log(gain).mean())
    brightness = 10 ** rng.uniform(1, 2.3, sources)
    flux = gain[:, None] * brightness * (1 + 0.01 * rng.standard_normal((frames, sources)))
    return gain, flux + rng.standard_normal(flux.shape), np.ones_like(flux)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_gains_and_their_errors(seed: int) -> None:
    """Gains have no bias, errors as stated, and the scatter beyond the errors is found."""
    gain, flux, error = simulated(seed)
    found = solve_gains(flux, error)
    pull = (found.gain - gain) / found.gain_err
    assert abs(np.mean(found.gain / gain) - 1) < 0.002
    assert 0.75 < pull.std() < 1.35
    assert found.common_scatter == pytest.approx(0.01, abs=0.003)
    assert found.spread == pytest.approx(0.05, rel=0.4)


def test_outliers_and_variables_do_no_harm() -> None:
    """A comparison that varies by 30 % is left out; single fluxes that are three times too high hardly matter."""
    gain, flux, error = simulated(4)
    flux[:, 7] *= 1 + 0.3 * np.sin(np.arange(len(flux)))
    rng = np.random.default_rng(5)
    flux[rng.random(flux.shape) < 0.02] *= 3
    found = solve_gains(flux, error)
    assert np.flatnonzero(np.isnan(found.brightness)).tolist() == [7]
    assert np.abs(found.gain / gain - 1).max() < 0.03


def test_faint_comparisons_do_not_bias_the_scale() -> None:
    """At S/N 5 logarithms would be off by -2 %; the linear form is not."""
    rng = np.random.default_rng(6)
    flux = 5.0 + rng.standard_normal((400, 30))
    flux[:200] *= 1.0  # same true gain everywhere: any pattern would come from the method
    bright = np.full((400, 1), 500.0) + rng.standard_normal((400, 1))
    found = solve_gains(np.hstack((flux, bright)), np.ones((400, 31)))
    assert found.brightness[:30].mean() == pytest.approx(5.0, rel=0.01)


def test_too_few_comparisons() -> None:
    """A frame with fewer than three, and a channel without any, has no gain."""
    _, flux, error = simulated(7)
    flux[3, 2:] = np.nan
    found = solve_gains(flux, error)
    assert np.isnan(found.gain[3])
    assert found.n_comparisons[3] == 0
    assert np.isfinite(np.delete(found.gain, 3)).all()
    assert np.isnan(solve_gains(np.full((4, 0), np.nan), np.full((4, 0), np.nan)).gain).all()
    assert np.isnan(solve_gains(flux / 100, error).gain).all()  # S/N below 3: nothing to be learnt from


def test_unconnected_frames_keep_a_mean_scale_of_their_own() -> None:
    """Two sets of frames without a common source are never compared: each keeps its own mean."""
    gain, flux, error = simulated(8)
    flux[:30, :10] = np.nan
    flux[30:, 10:] = np.nan
    flux[:30] *= 2.0  # this set's scale is another one, which nothing in the data can tell
    found = solve_gains(flux, error)
    for part in (slice(None, 30), slice(30, None)):
        assert np.log(found.gain[part]).mean() == pytest.approx(0, abs=1e-9)
        own = gain[part] / np.exp(np.log(gain[part]).mean())
        assert np.abs(found.gain[part] / own - 1).max() < 0.03


def test_excess_scatter_is_the_most_likely_one() -> None:
    """Against a direct search for the maximum of the likelihood; nothing where the errors suffice."""
    rng = np.random.default_rng(9)
    error = rng.uniform(0.5, 2.0, 50)
    residual = error * rng.standard_normal(50) + 1.5 * rng.standard_normal(50)

    def minus_log(s: float) -> float:
        total = error**2 + s**2
        return float((residual**2 / total + np.log(total)).sum())

    best = optimize.minimize_scalar(minus_log, bounds=(0, 10), method="bounded", options={"xatol": 1e-9})
    assert excess_scatter(residual, error) == pytest.approx(best.x, rel=1e-5)
    assert excess_scatter(0.5 * error * rng.standard_normal(50), error) == 0.0
    assert np.isnan(excess_scatter(np.empty(0), np.empty(0)))


def test_error_scales() -> None:
    """Errors are scaled where blank sky scatters differently beyond chance, up or down, and nowhere else."""
    rng = np.random.default_rng(10)
    counts = np.full(400, 300)
    honest = 1 + 1.167 / 300**0.5 * rng.standard_normal(400)
    scale = error_scales(honest, counts)
    assert (scale == 1.0).mean() > 0.98
    assert error_scales(0.9 * honest, counts) == pytest.approx(0.9, rel=0.25)
    assert np.median(error_scales(0.9 * honest, counts)) == pytest.approx(0.9, rel=0.02)
    honest[5], honest[6] = 3.0, 0.5
    scale = error_scales(honest, counts)
    assert scale[5], scale[6] == (3.0, 0.5)
    few = error_scales(np.array([3.0]), np.array([10]))
    assert few.tolist() == [1.0]  # ten controls say too little


def images(n: int) -> dict[str, np.ndarray]:
    """Size and scale of n images."""
    size = {"width": np.full(n, 101), "height": np.full(n, 101), "pixel_scale": np.full(n, 36.0)}
    return size | {"response": np.full(n, "linear", object)}


def nothing(n: int) -> dict[str, np.ndarray]:
    """Frames of whose image nothing was found."""
    return {name: np.full(n, np.nan) for name in IMAGE_COLUMNS}


def test_scatter_that_blank_sky_shows_is_no_extra_scatter() -> None:
    """Errors that are two and a half times too small everywhere are scaled; comparisons need nothing beyond that.

    Taken for a fraction of the flux as well, the same noise would count twice in a bright source's error.
    """
    rng = np.random.default_rng(14)
    flux = 10 ** rng.uniform(1.5, 2.5, 20) + 2.5 * rng.standard_normal((10, 20))
    frame, source = np.nonzero(np.isfinite(flux))
    rows = {"frame": frame, "position": source, "flux": flux[frame, source], "flux_err": np.ones(flux.size),
            "x": 5.0 * source, "y": 50.0 + 0 * source}  # fmt: skip
    known = {"frame": np.arange(10), "pull": np.full(10, 2.5), "n_controls": np.full(10, 500),
             "shift_x": np.zeros(10), "shift_y": np.zeros(10), "fwhm": np.full(10, 3.0),
             "held": np.full(10, np.nan)}  # fmt: skip
    table, _ = solved(np.arange(10), np.full(10, "c", object), [known], [rows], Comparisons(), images(10))
    np.testing.assert_allclose(table["error_scale"], 2.5)
    assert (table["extra_scatter"] < 0.006).all()  # the error of a gain; with the noise counted twice 0.02 and more


def test_error_scale_of_a_channel_is_the_mean_of_the_frames_alike() -> None:
    """As good as 20 frames of 500 controls allow, 1.167 / sqrt(10,000); frames that are far off do not count."""
    rng = np.random.default_rng(15)
    found = []
    for _ in range(200):
        pulls = 2.0 * (1 + 1.167 / 500**0.5 * rng.standard_normal(20))
        pulls[:3] = 9.0
        found.append(error_scales(pulls, np.full(20, 500))[-1])
    assert np.mean(found) == pytest.approx(2.0, rel=0.003)
    assert np.std(found) / 2.0 == pytest.approx(1.167 / (17 * 500) ** 0.5, rel=0.2)  # that of a median is 1.25 times it


def test_solution_and_its_use() -> None:
    """flux / gain; the error carries error scale, extra scatter and gain; a raw frame keeps its flux, error widened."""
    _, flux, error = simulated(11, frames=12)
    flux[4] = np.nan
    gains = solve_gains(flux, error)
    rows = solution(np.arange(12), "c", gains, np.full(12, 1.5), nothing(12), Comparisons())
    rows |= losses.columns(losses.Loss(np.zeros(12)), losses.centres(images(12)))
    assert rows["verdict"].tolist() == ["good"] * 4 + ["uncalibrated"] + ["good"] * 7
    assert rows["extra_scatter"][4] == pytest.approx(gains.spread_limit)  # what the others' gains may scatter by
    value, sigma, bad = calibrated(
        {"frame": np.array([3, 4]), "flux": np.array([100.0, 100.0]), "flux_err": np.array([2.0, 2.0])}, rows
    )
    assert value.tolist() == [100 / rows["gain"][3], 100.0]
    want = [np.hypot(3.0, rows["extra_scatter"][3] * 100) / rows["gain"][3], np.hypot(3.0, 100 * gains.spread_limit)]
    np.testing.assert_allclose(sigma, want)
    assert not bad.any()


def test_frames_without_a_gain_are_not_trusted_beyond_what_a_few_tell() -> None:
    """With eight gains that scatter by 9 %, the error of the other frames' scale is seldom below that, and is said."""
    limits = []
    for seed in range(60):
        rng = np.random.default_rng(seed)
        gain, brightness = np.exp(0.09 * rng.standard_normal(8)), 10 ** rng.uniform(2, 3, 12)
        flux = np.full((20, 12), np.nan)
        flux[:8] = gain[:, None] * brightness + rng.standard_normal((8, 12))
        gains = solve_gains(flux, np.ones((20, 12)))
        rows = solution(np.arange(20), "c", gains, np.ones(20), nothing(20), Comparisons())
        assert (rows["extra_scatter"][8:] == gains.spread_limit).all()
        limits.append(gains.spread_limit)
    below = int(np.sum(np.array(limits) < 0.09))
    assert below <= stats.binom.ppf(0.999, 60, 0.05)
    assert 0.1 < np.median(limits) < 0.2


def test_a_frame_that_scatters_wildly_is_bad() -> None:
    """Where comparisons disagree by more than half of their flux nothing can be measured."""
    _, flux, error = simulated(12)
    flux[2] *= np.where(np.arange(20) % 2, 3.0, 0.2)
    gains = solve_gains(flux, error)
    rows = solution(np.arange(60), "c", gains, np.ones(60), nothing(60), Comparisons())
    assert np.flatnonzero(rows["verdict"] == "bad").tolist() == [2]


def test_channels_are_solved_apart_and_spoken_of() -> None:
    """A channel with comparisons is tied, one without is said to be raw; every frame has a row, in order of frame."""
    _, flux, error = simulated(13, frames=10)
    frame, source = np.nonzero(np.isfinite(flux))
    rows = {"frame": 2 * frame, "position": source, "flux": flux[frame, source], "flux_err": error[frame, source],
            "x": 5.0 * source, "y": 50.0 + 0 * source}  # fmt: skip
    known = {"frame": 2 * np.arange(10), "pull": np.ones(10), "n_controls": np.full(10, 200),
             "shift_x": np.full(10, 0.25), "shift_y": np.full(10, -0.5), "fwhm": np.full(10, 3.0),
             "held": np.full(10, np.nan)}  # fmt: skip
    channels = np.array(["tied", "raw"] * 10, object)
    table, said = solved(np.arange(20), channels, [known], [rows], Comparisons(), images(20))
    assert table["frame"].tolist() == list(range(20))
    assert table["verdict"].tolist() == ["good", "uncalibrated"] * 10
    assert table["extra_scatter"][1] == Comparisons().uncalibrated_scatter
    assert table["shift_x"][0] == 0.25
    assert np.isnan(table["shift_x"][1])
    assert any("tied" in line and "10 of 10 frames" in line for line in said)
    assert any("raw is not tied" in line and "5 %" in line for line in said)
    some = {name: values[rows["frame"] < 14] for name, values in rows.items()}
    _, said = solved(np.arange(20), channels, [known], [some], Comparisons(), images(20))
    assert any(
        "7 of 10 frames" in line and "the other 3 keep raw fluxes, with errors widened by" in line for line in said
    )


def test_light_that_is_not_counted_is_a_factor_of_the_channel() -> None:
    """The median over the frames that tell it, in every gain; told by too few, within their scatter or 2 %, it is all."""
    _, flux, error = simulated(14, frames=12)
    gains = solve_gains(flux, error)
    told = np.array([0.84, 0.86, 0.85, 0.83, 0.87, *[np.nan] * 7])
    image = nothing(12) | {"held": told}
    rows = solution(np.arange(12), "c", gains, np.ones(12), image, Comparisons())
    plain = solution(np.arange(12), "c", gains, np.ones(12), nothing(12), Comparisons())
    np.testing.assert_allclose(rows["gain"], 0.85 * plain["gain"])
    np.testing.assert_allclose(rows["gain_err"], 0.85 * plain["gain_err"])
    assert rows["held"].tolist() == [0.85] * 12
    for weak in (
        np.where(np.arange(12) == 2, np.nan, told),
        10 * (told - 0.85) + 0.95,
        0.01 * (told - 0.85) + 0.985,
    ):  # four frames; five that differ; five that agree on too little
        image = nothing(12) | {"held": weak}
        assert solution(np.arange(12), "c", gains, np.ones(12), image, Comparisons())["held"].tolist() == [1.0] * 12
