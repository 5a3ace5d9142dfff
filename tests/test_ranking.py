"""Thresholds of a field from its blank positions, where faint sources and diffuse emission lie under all of them."""

from pathlib import Path

import numpy as np
import pytest

from hindlight import candidates, judge, ranking
from hindlight.lightcurve import Block, Channel, freeze
from hindlight.settings import Controls, Detection
from test_estimators import study

CHANNEL = Channel(label="array|1400MHz|I|30as|Jy/beam", unit="Jy/beam")


def block(steady: np.ndarray, seed: int, n_frames: int = 60, error: float = 1.0) -> Block:
    """Positions of these steady fluxes in white noise."""
    rng = np.random.default_rng(seed)
    shape = (len(steady), n_frames)
    flux = freeze(steady[:, None] + rng.normal(0.0, error, shape), np.float64)
    times, errors = np.broadcast_to(np.arange(n_frames) * 86400.0, shape), np.full(shape, error)
    return Block(
        names=tuple(f"p{k}" for k in range(len(steady))), channel=CHANNEL, frame=np.arange(n_frames), t_tdb_s=times,
        exposure_s=np.full(shape, 60.0), flux=flux, flux_err=errors, raw_flux=flux, raw_flux_err=errors,
        flags=np.zeros(shape, np.int64), clock_error_s=np.full(n_frames, np.nan),
    )  # fmt: skip


def thresholds(steady: np.ndarray, seed: int) -> ranking.Thresholds:
    """What such controls give."""
    found = judge.judge({CHANNEL.label: block(steady, seed)}, ())
    return ranking.thresholds(found, np.arange(len(steady)), Detection())[CHANNEL.label]


def test_a_few_controls_with_sources_set_no_threshold() -> None:
    """Two controls upon steady sources would hide everything fainter; thresholds are then those of Gaussian noise."""
    found = judge.judge({CHANNEL.label: block(np.array([300.0, 500.0]), 1)}, ())
    limits = ranking.thresholds(found, np.arange(2), Detection())[CHANNEL.label]
    assert (limits.n_controls, limits.confusion) == (0, 0.0)
    assert 3.0 < limits.detected < 5.0
    assert 2.0 < limits.mean < 4.0
    more = ranking.thresholds(found, np.arange(2), Detection(), n_trials=500)[CHANNEL.label]
    assert limits.detected + 0.5 < more.detected < 7.0
    assert limits.mean + 0.5 < more.mean < 6.0


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_confusion_is_the_scatter_of_blank_means_beyond_their_errors(seed: int) -> None:
    """An rms of 0.5 under means known to 0.13 is found to within its own error of some 6 %; without it next to nothing."""
    under = np.random.default_rng(seed + 10).normal(0.3, 0.5, 200)
    assert thresholds(under, seed).confusion == pytest.approx(0.5, rel=0.2)
    assert thresholds(np.zeros(200), seed).confusion < 0.06
    assert thresholds(under[:5], seed).confusion == 0.0


def test_bounds_on_total_flux_hold_above_confusion() -> None:
    """A 95 % bound lies above the flux of 95 % of faint sources, confusion among them; by its error alone it would not."""
    rng = np.random.default_rng(4)
    found = thresholds(rng.normal(0.0, 0.5, 200), 4)
    plain = 0
    above = 0
    sources = block(2.0 + rng.normal(0.0, 0.5, 400), 5)
    for curve in sources.curves():
        seen = candidates.ChannelView(curve, len(curve), 0, found)
        row = candidates.channel_row(candidates.View("x", (seen,), str, str), seen)
        above += row["limit_bayes"] > 2.0
        plain += row["flux_mean"] + 1.6449 * row["flux_mean_err"] > 2.0
        assert row["confusion_rms"] == found.confusion
    assert 0.92 * 400 <= above <= 0.98 * 400  # binomial: 380 +- 4, and the confusion is known to 6 %
    assert plain < 0.8 * 400


def test_bounds_hold_where_blank_sky_measures_less_than_nothing() -> None:
    """Blank positions at -1: bounds lie above a source of 0.5 in 95 % of cases, and a frame's limit is that much higher."""
    found = thresholds(np.full(200, -1.0), 6)
    assert found.level == pytest.approx(-1.0, abs=0.05)
    assert thresholds(np.full(200, 1.0), 6).level == thresholds(np.zeros(200), 6).level == 0.0
    assert thresholds(np.full(9, -1.0), 6).level == 0.0
    above = 0
    for curve in block(np.full(400, 0.5 - 1.0), 7).curves():
        seen = candidates.ChannelView(curve, len(curve), 0, found)
        row = candidates.channel_row(candidates.View("x", (seen,), str, str), seen)
        above += row["limit_bayes"] > 0.5
        assert row["limit_sigma"] == pytest.approx(found.detected - found.level)
        assert row["blank_level"] == found.level
    assert 0.92 * 400 <= above <= 0.98 * 400  # binomial: 380 +- 4


def test_controls_of_a_like_noise_serve() -> None:
    """Those within a tenth of the target's typical error, or the most alike ones where these are few; how unlike is said."""
    error = np.geomspace(1.0, 4.0, 60)
    found = judge.Judgement(61, {
        ("c", "core_n_used"): np.full(61, 20), ("c", "core_depth"): np.append(error, 1.0),
        ("d", "core_n_used"): np.full(61, 20), ("d", "core_depth"): np.append(np.where(np.arange(60) == 2, 9.0, 1.0), 1.0),
    })  # fmt: skip
    target, controls = np.array([60]), np.arange(60)
    few = Controls(fewest_alike=3)
    serving, unlike = ranking.matched(found, target, controls, np.ones((1, 60), bool), few)
    assert np.flatnonzero(serving[0]).tolist() == [0, 1, 3, 4]  # 1.1 is the fifth; the third is unlike in channel d
    assert unlike[0] == pytest.approx(error[4])
    serving, unlike = ranking.matched(found, target, controls, np.ones((1, 60), bool), Controls(fewest_alike=10))
    assert np.flatnonzero(serving[0]).tolist() == [0, 1, *range(3, 11)]
    assert unlike[0] == pytest.approx(error[10])
    allowed = (np.arange(60) % 2 == 0)[None, :]
    serving, _ = ranking.matched(found, target, controls, allowed, Controls(fewest_alike=100, most_unlike=10.0))
    assert np.array_equal(serving, allowed)
    serving, unlike = ranking.matched(found, target, controls, allowed, Controls())
    assert np.array_equal(serving, allowed & (error < 3.0) & (controls != 2))
    assert unlike[0] == error[error < 3.0][-1]
    anyhow, _ = ranking.matched(found, target, controls, allowed, Controls(), bounded=False)
    assert np.array_equal(anyhow, allowed)


def test_no_control_is_alike_by_default() -> None:
    """A target without controls is unlike none; a channel in which the target was not measured does not count."""
    found = judge.Judgement(3, {
        ("c", "core_n_used"): np.array([20, 20, 20]), ("c", "core_depth"): np.array([1.0, 1.0, 1.0]),
        ("d", "core_n_used"): np.array([0, 20, 0]), ("d", "core_depth"): np.array([np.nan, 5.0, np.nan]),
    })  # fmt: skip
    none, unlike = ranking.matched(found, np.array([0]), np.empty(0, int), np.ones((1, 0), bool), Controls())
    assert none.shape == (1, 0)
    assert unlike.tolist() == [1.0]
    serving, unlike = ranking.matched(found, np.array([0]), np.array([1, 2]), np.ones((1, 2), bool), Controls())
    assert serving.all()
    assert unlike.tolist() == [1.0]


def test_a_small_version_of_the_study(tmp_path: Path) -> None:
    """Blank targets among ripples: with controls alike their p-values and columns are those of chance, with others not."""
    kinds = study("blank_kinds")
    kinds.archive(tmp_path, "ripple", 5, targets=60, frames=16, size=300)
    alike, anywhere = (kinds.mined(tmp_path, chosen, periods=False) for chosen in ("", kinds.ANYWHERE))
    assert kinds.holds([alike], "alike", say=False)
    assert not kinds.holds([anywhere], "anywhere", say=False)
    p, other = kinds.likeness([alike]), kinds.likeness([anywhere])
    assert len(p) > 12
    assert len(p) * min(p.values()) > kinds.LEAST_P
    assert len(other) * min(other.values()) <= kinds.LEAST_P


def test_blank_sky_near_a_bright_source_is_no_more_unusual_than_elsewhere(tmp_path: Path) -> None:
    """A small version of another study: high rings that vary by factors are where all targets and few controls are."""
    matching = study("matching")
    settings = matching.archive(tmp_path, "rings", 2, targets=100, frames=12, size=360)
    for more, fine in (("", True), ("most_unlike = 1e9\n", False)):
        runs = [matching.p_values(tmp_path, more + settings)]
        assert matching.holds(runs, "rings", say=False)[0] == fine
