"""What the statistics are for: each finds its kind of source among noise, and none finds anything in noise.

Noise curves have 90 samples in 18 epochs over 20 years, 5 % of them missing, in two channels observed together; a source
is ranked among 200 of them, p = (r + 1) / (n + 1), in the column's unusual direction.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy import stats

from hindlight import Block, Channel, host
from hindlight.judge import Judgement, full_columns, judge, oriented
from hindlight.lightcurve import freeze
from hindlight.settings import Settings

N_NOISE = 200
SHIPPED = host.load(host.spec_from(Settings(), [], [])).statistics
COLUMNS = full_columns(SHIPPED)
RANKED = [name for name, column in COLUMNS.items() if column.unusual and not name.startswith("core_")]
DAY = 86400.0
YEAR = 365.25 * DAY

RNG = np.random.default_rng(17)
EPOCH = np.repeat(np.arange(18), 5)
TIMES = np.sort(RNG.uniform(0, 20 * YEAR, 18))[EPOCH] + np.tile(np.arange(5) * 300.0, 18)
SAMPLE = np.arange(len(TIMES))


def at(*samples: int, height: float) -> np.ndarray:
    """Flashes in single samples."""
    return height * np.isin(SAMPLE, samples)


def every(step: int, height: float) -> np.ndarray:
    """A flash in each so many samples."""
    return height * (SAMPLE % step == 1)


PHASES = RNG.permutation(len(TIMES)) / len(TIMES) * 2 * np.pi
SLOW = 1.5 * np.sin(2 * np.pi * TIMES / (9 * YEAR))
SCATTERED = 3 * np.sin(PHASES)  # varies from sample to sample

# For each ranked column a source of the kind that it is for, in errors of one sample.
SOURCES: dict[str, np.ndarray] = {
    "chi_square_reduced": SCATTERED,
    "von_neumann_eta": SLOW,
    "stetson_j": SLOW,
    "stetson_k": at(40, height=12.0),
    "brightest_excess": at(40, height=9.0),
    "brightest_second": at(40, 61, height=7.0),
    "brightest_leave_one_out": at(40, height=9.0),
    "brightest_snr": at(40, height=9.0),
    "mean_flux_snr": np.full(len(TIMES), 0.7),
    "bayesian_blocks_interval": 2.0 * ((SAMPLE >= 42) & (SAMPLE < 54)),
    "structure_function_rise": SLOW,
    "distribution_skewness": every(12, 5.0),
    "distribution_mad": SCATTERED,
    "duty_cycle_surprise": every(15, 7.0),
    "epoch_activity_reduced": np.random.default_rng(3).normal(size=18)[EPOCH],
    "epoch_activity_switch": 1.5 * (SAMPLE >= 45),
    "welch_stetson_i": SCATTERED / 2,
}


def block(label: str, sources: np.ndarray, seed: int) -> Block:
    """Fluxes of shape (n_positions, n_samples) with noise of their own errors added, 5 % missing."""
    rng = np.random.default_rng([seed, ord(label)])
    err = rng.uniform(0.8, 1.2, sources.shape)
    flux = sources + err * rng.standard_normal(sources.shape)
    missing = rng.random(sources.shape) < 0.05
    t = np.broadcast_to(TIMES, sources.shape)
    matrices = [freeze(np.where(missing, np.nan, m)) for m in (t, np.full_like(t, 60.0), flux, err, flux, err)]
    names = tuple(f"position {k}" for k in range(len(sources)))
    flags = freeze(np.zeros(sources.shape), np.int64)
    return Block(names, Channel(label), freeze(SAMPLE, np.int64), *matrices, flags, freeze(np.full(len(TIMES), np.nan)))


def judged(sources: np.ndarray, seed: int) -> Judgement:
    """What is found for positions with these fluxes in both channels."""
    found = judge({label: block(label, sources, seed) for label in "ab"}, SHIPPED)
    assert not found.faults
    return found


def values(found: Judgement, name: str) -> np.ndarray:
    """A column in the first channel, or over all channels."""
    return np.asarray(next(found.values[key] for key in sorted(found.values) if key[1] == name), float)


def p_values(name: str, found: Judgement, noise: Judgement) -> np.ndarray:
    """Ranks (r + 1) / (n + 1) of positions among noise, both oriented by the noise."""
    null = values(noise, name)
    order: Callable[[np.ndarray], np.ndarray] = lambda v: oriented(v, COLUMNS[name], null)  # noqa: E731
    above = (order(null)[None, :] >= order(values(found, name))[:, None]).sum(axis=1)
    return (above + 1) / (len(null) + 1)


@pytest.fixture(scope="module")
def noise() -> Judgement:
    """The noise curves that others are ranked among."""
    return judged(np.zeros((N_NOISE, len(TIMES))), seed=1)


@pytest.fixture(scope="module")
def more_noise() -> Judgement:
    """As much noise again."""
    return judged(np.zeros((N_NOISE, len(TIMES))), seed=2)


@pytest.fixture(scope="module")
def recovered() -> Judgement:
    """One source of each kind."""
    return judged(np.stack([SOURCES[name] for name in RANKED]), seed=3)


def test_every_ranked_column_has_its_source():
    """No column is ranked without a source that it is for."""
    assert sorted(SOURCES) == sorted(RANKED)


@pytest.mark.parametrize("name", RANKED)
def test_its_source_stands_out(name, recovered, noise):
    """The source that a column is for ranks above 99 % of noise curves."""
    assert p_values(name, recovered, noise)[RANKED.index(name)] <= 0.01


@pytest.mark.parametrize("name", RANKED)
def test_noise_does_not_stand_out(name, more_noise, noise):
    """Ranks of noise among noise are even; where many values are equal they are never too small."""
    p = p_values(name, more_noise, noise)
    assert (p <= 0.05).sum() <= stats.binom.isf(1e-3, N_NOISE, 0.05) * 1.5  # the null varies as much as what is ranked
    if np.unique(values(noise, name)).size > N_NOISE / 2:
        assert stats.ks_2samp(values(more_noise, name), values(noise, name)).pvalue > 1e-3
