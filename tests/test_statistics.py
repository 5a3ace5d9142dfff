"""The shipped statistics against reference values, and the properties that hold for any light curve."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from astropy import stats as astropy_stats
from astropy.io.votable.ucd import check_ucd
from hypothesis import given, settings
from hypothesis import strategies as st

from hindlight import Channel, LightCurve, Statistic, weighted_mean
from hindlight_plugins.bayesian_blocks import BayesianBlocks, best_of_few, first_of_blocks
from hindlight_plugins.brightest import Brightest, leave_one_out, log10_p_of_maximum, p_of_maximum
from hindlight_plugins.chi_square import ChiSquare, log10_p_chi_square
from hindlight_plugins.common_mode import FrameWide
from hindlight_plugins.distribution import Distribution, quantiles, skewness
from hindlight_plugins.duty_cycle import DutyCycle
from hindlight_plugins.epoch_activity import EpochActivity
from hindlight_plugins.lomb_scargle import LombScargle
from hindlight_plugins.mean_flux import MeanFlux
from hindlight_plugins.position_check import Position
from hindlight_plugins.stetson import Stetson
from hindlight_plugins.structure_function import Pairs, StructureFunction, pairwise, separations
from hindlight_plugins.von_neumann import VonNeumann
from hindlight_plugins.welch_stetson import WelchStetson, pairs

PER_CHANNEL = (
    ChiSquare(), VonNeumann(), Stetson(), Brightest(), MeanFlux(), BayesianBlocks(), StructureFunction(), Distribution(),
    DutyCycle(), EpochActivity(),
)  # fmt: skip
STATISTICS = (*PER_CHANNEL, WelchStetson())

# A light curve of eight samples, two of them bright.
TIMES = np.array([0.0, 1, 2, 4, 5, 7, 8, 10])
FLUX = np.array([1.2, 0.8, 1.1, 5.0, 4.4, 0.9, 1.3, 0.7])
ERROR = np.array([0.3, 0.4, 0.3, 0.5, 0.5, 0.4, 0.3, 0.4])
CURVE = LightCurve.from_arrays(TIMES, FLUX, ERROR)

# Values of the published formulas for that light curve, computed outside this project with numpy 2.4 and scipy 1.17.
REFERENCE = [
    (ChiSquare(), "reduced", 13.58182),  # 95.07277 / 7
    (ChiSquare(), "p_gauss", 1.1198e-17),  # scipy.stats.chi2.sf(95.07277, 7)
    (ChiSquare(), "log10_p_gauss", math.log10(1.1198e-17)),
    (ChiSquare(), "modulation_index", 0.8996595),
    (ChiSquare(), "modulation_index_debiased", 0.8161178),  # Akritas & Bershady 1996, ApJ 470, 706
    (ChiSquare(), "excess_variance", 2.843036),  # this and the next five: Vaughan et al. 2003, MNRAS 345, 1271
    (ChiSquare(), "excess_variance_err", 0.128917 * FLUX.mean() ** 2),  # eq. 11 with the mean held fixed
    (ChiSquare(), "normalized_excess_variance", 0.767222),
    (ChiSquare(), "normalized_excess_variance_err", 0.128917),  # eq. 11
    (ChiSquare(), "fractional_variability", 0.875912),
    (ChiSquare(), "fractional_variability_err", 0.0735903),  # eq. B2
    (VonNeumann(), "eta", 1.361753),  # von Neumann 1941, Ann. Math. Stat. 12, 367
    (VonNeumann(), "z", -1.03408),  # (eta - 2) / sqrt(4 (n-2) / (n^2-1))
    (Stetson(), "j", 0.856774),  # Stetson 1996, PASP 108, 851
    (Stetson(pairs="disjoint"), "j", -0.926060),
    (Stetson(pairs="singles"), "j", 2.483257),
    (Stetson(), "k", 0.783436),
    (Brightest(), "snr", 10.0),  # exact: 5.0 / 0.5
    (Brightest(), "leave_one_out", 7.160057),
    (MeanFlux(), "snr", 1.541193 / 0.129010),
    (BayesianBlocks(), "n", 3),  # astropy.stats.bayesian_blocks with p0=0.01: edges 0, 3, 6, 10
    (BayesianBlocks(), "start", 3.0),
    (BayesianBlocks(), "length", 3.0),
    (WelchStetson(), "i", -4.486130),  # Welch & Stetson 1993, AJ 105, 1813
    (WelchStetson(), "j", -0.926060),  # as Stetson's over disjoint pairs
    (WelchStetson(), "n_successive", 4),
    (DutyCycle(), "fraction", 0.25),  # exact: 5.0 and 4.4 of eight
    (DutyCycle(), "by_chance", 8 * 3.167124e-5),  # 1 - Phi(4), printed tables
    (DutyCycle(), "surprise", 7.551667),  # -log10 scipy.stats.binom.sf(1, 8, 3.167124e-5)
    (DutyCycle(), "longest", 2),
    (DutyCycle(), "longest_s", 1.0),
    (EpochActivity(gap_days=1.5 / 86400), "n", 4),  # exact: gaps of 2 s after samples 3, 5 and 7
]


def computed(statistic: Statistic, curve: LightCurve) -> dict[str, float]:
    """The columns of one light curve, that of a position's only channel."""
    return dict(statistic.compute((curve,) if statistic.all_channels else curve))


@pytest.mark.parametrize(("statistic", "column", "expected"), REFERENCE)
def test_reference_values(statistic, column, expected):
    """Each column has the value of its published formula for the reference light curve."""
    assert computed(statistic, CURVE)[column] == pytest.approx(expected, rel=2e-5)


def test_mean_robust_measures_and_blocks_of_the_reference():
    """What no column shows by itself; values computed outside this project as those above."""
    assert weighted_mean(FLUX, ERROR) == pytest.approx((1.541193, 0.129010), rel=1e-5)
    robust = Distribution().compute(LightCurve.from_arrays(TIMES, FLUX, np.ones(8)))
    assert robust["iqr"] == pytest.approx(0.889561, abs=1e-6)  # 0.741301 times 1.2
    assert robust["mad"] == pytest.approx(0.444781, abs=1e-6)  # 1.482602 times 0.3
    # astropy.stats.bayesian_blocks with p0=0.01 and with p0=0.05: edges 0, 3, 6, 10
    first = first_of_blocks(ERROR[None] ** -2, (FLUX - weighted_mean(FLUX, ERROR)[0])[None], 4.0)[0]
    middles = (TIMES[1:] + TIMES[:-1]) / 2
    assert [TIMES[0], *middles[np.flatnonzero(first)[1:] - 1], TIMES[-1]] == [0, 3, 6, 10]


def test_trials_of_the_maximum():
    """The chance of the highest of n samples agrees with 1 - Phi(z)^n, and doubles its tail when two-sided."""
    assert p_of_maximum(10.0, 8) == pytest.approx(6.096e-23, rel=1e-3)  # computed with scipy.stats.norm.logcdf
    assert p_of_maximum(0.0, 1) == pytest.approx(0.5)  # exact
    assert p_of_maximum(0.0, 3, two_sided=True) == 1.0  # exact
    assert p_of_maximum(6.0, 5, two_sided=True) == pytest.approx(2 * p_of_maximum(6.0, 5), rel=1e-6)
    assert p_of_maximum(50.0, 5) == 0.0


def test_chances_too_small_for_a_number():
    """Logarithms go on where chances are 0, and are theirs where they are not."""
    assert log10_p_of_maximum(10.0, 8) == pytest.approx(math.log10(6.096e-23), abs=1e-4)
    # scipy.stats.norm.logsf(60) = -1805.0135606805675
    assert p_of_maximum(60.0, 300) == 0.0
    assert log10_p_of_maximum(60.0, 300) == pytest.approx(
        -1805.0135606805675 / math.log(10) + math.log10(300), rel=1e-12
    )
    assert log10_p_of_maximum(60.0, 300, two_sided=True) == pytest.approx(log10_p_of_maximum(60.0, 600), rel=1e-12)
    # scipy.stats.chi2.logsf(1450, 29) = -659.9306788550208: reduced 50
    assert log10_p_chi_square(1450.0, 29) == pytest.approx(-659.9306788550208 / math.log(10), rel=1e-12)
    # For 30 degrees of freedom Q = e^-x sum_{k<15} x^k / k!; exact
    for chi2 in (30.0, 3000.0, 30000.0):
        x = chi2 / 2
        exact = (math.log(math.fsum(x**k / math.factorial(k) for k in range(15))) - x) / math.log(10)
        assert log10_p_chi_square(chi2, 30) == pytest.approx(exact, rel=1e-12)
    flux = 60.0 * (np.arange(30) == 7)
    curve = LightCurve.from_arrays(np.arange(30.0), flux, np.full(30, 0.3))
    values, brightest = ChiSquare().compute(curve), Brightest().compute(curve)
    assert (values["p_gauss"], brightest["p_trials"]) == (0.0, 0.0)
    assert values["log10_p_gauss"] == pytest.approx(log10_p_chi_square(29 * values["reduced"], 29), rel=1e-12)
    assert brightest["log10_p_trials"] == pytest.approx(log10_p_of_maximum(brightest["excess"], 30), rel=1e-12)


def test_chi_square_of_published_table():
    """The chance of a chi-square agrees with printed tables: upper 5 % points for 1, 2, 9, 10 degrees of freedom."""
    for dof, point in ((1, 3.8415), (2, 5.9915), (9, 16.9190), (10, 18.3070)):
        half = math.sqrt(point / 2)
        flux = np.zeros(dof + 1)
        flux[:2] = half, -half  # a chi-square of just `point`
        curve = LightCurve.from_arrays(np.arange(dof + 1), flux, np.ones(dof + 1))
        assert ChiSquare().compute(curve)["p_gauss"] == pytest.approx(0.05, rel=1e-4)


def test_von_neumann_moments():
    """For independent Gaussian samples eta has mean 2 and z unit variance (von Neumann 1941), within 4 sigma."""
    rng = np.random.default_rng(11)
    values = [
        VonNeumann().compute(LightCurve.from_arrays(np.arange(20), rng.normal(size=20), np.ones(20)))
        for _ in range(4000)
    ]
    eta, z = (np.array([v[name] for v in values]) for name in ("eta", "z"))
    assert abs(eta.mean() - 2) < 4 * eta.std() / 4000**0.5
    assert z.var() == pytest.approx(1, abs=4 * (2 / 4000) ** 0.5)


def test_stetson_k_limits():
    """K of a lone outlier and of Gaussian noise, exact.

    A lone deviation among n that are 0 has K = 1 / sqrt(n): that of an outlier which does not move the mean, since
    another sample outweighs it. Where all weigh the same it does: the n - 1 others lie 1/n of it below the mean, and
    K = 2 sqrt(n-1) / n, twice as much for many. Gaussian noise: sqrt(2/pi).
    """
    lone = np.zeros(10_000)
    lone[17] = 1.0
    noise = np.random.default_rng(3).normal(size=10_000)
    times, error = np.arange(10_000), np.full(10_000, 1.0)
    assert Stetson().compute(LightCurve.from_arrays(times, lone, error))["k"] == pytest.approx(2 * 9999**0.5 / 10_000)
    pinned = np.where(times == 4000, 1e-7, error)
    assert Stetson().compute(LightCurve.from_arrays(times, lone, pinned))["k"] == pytest.approx(0.01, rel=1e-5)
    gaussian = Stetson().compute(LightCurve.from_arrays(times, noise, error))["k"]
    assert gaussian == pytest.approx((2 / np.pi) ** 0.5, abs=0.02)


def test_stetson_odd_one_out_stands_alone():
    """With disjoint pairs an odd last sample counts as one alone, delta^2 - 1."""
    curve = LightCurve.from_arrays(np.arange(3), np.array([1.0, 1.0, 4.0]), np.ones(3))
    delta = math.sqrt(1.5) * np.array([-1.0, -1.0, 2.0])
    expected = (math.sqrt(delta[0] * delta[1]) + math.sqrt(delta[2] ** 2 - 1)) / 2
    assert Stetson(pairs="disjoint").compute(curve)["j"] == pytest.approx(expected)


def test_ratios_to_a_mean_that_is_not_there_are_blank():
    """Columns that divide by the mean are NaN where it is negative or below three of its errors."""
    for level in (-5.0, 0.5):
        values = ChiSquare().compute(LightCurve.from_arrays(TIMES, level + FLUX - FLUX.mean(), ERROR * 3))
        assert math.isnan(values["modulation_index"])
        assert math.isnan(values["normalized_excess_variance"])
        assert math.isfinite(values["excess_variance"])


def test_the_error_of_the_excess_variance_is_its_scatter():
    """Of a source that varies the same way each time, in 4000 noises of errors unlike each other; within 4 sigma."""
    rng = np.random.default_rng(6)
    error = rng.uniform(0.8, 1.2, 60)
    shape = 2.0 * np.sin(np.arange(60.0)) - 3  # a negative mean: no ratio to it, and the error all the same
    found = [
        ChiSquare().compute(LightCurve.from_arrays(np.arange(60.0), shape + error * rng.normal(size=60), error))
        for _ in range(4000)
    ]
    excess, told = (np.array([v[name] for v in found]) for name in ("excess_variance", "excess_variance_err"))
    assert np.isfinite(told).all()
    assert excess.std() == pytest.approx(
        np.sqrt(np.mean(told**2)), rel=4 / np.sqrt(2 * 4000) + 0.03
    )  # 0.03: s^2 has n - 1


def test_scatter_below_the_errors_gives_a_negative_index():
    """A steady, well-measured source has a negative debiased index and no fractional variability."""
    values = ChiSquare().compute(LightCurve.from_arrays(TIMES, np.full(8, 10.0), ERROR))
    assert values["modulation_index_debiased"] < 0
    assert values["normalized_excess_variance"] < 0
    assert math.isnan(values["fractional_variability"])
    assert math.isnan(values["normalized_excess_variance_err"])
    assert values["excess_variance"] < 0
    assert math.isnan(values["excess_variance_err"])


def test_brightest_sees_a_lone_flare_and_its_time():
    """One bright sample among three hundred stands out in excess and leave-one-out, and its time is given."""
    rng = np.random.default_rng(5)
    flux = 3 + rng.normal(size=300)
    flux[123] += 8
    values = Brightest().compute(LightCurve.from_arrays(np.arange(300) * 60.0, flux, np.ones(300)))
    assert values["excess"] > 6
    assert values["second"] < 4
    assert values["leave_one_out"] == pytest.approx(values["excess"], rel=0.05)
    assert values["time"] == 123 * 60.0
    assert values["p_trials"] < 1e-7


def test_brightest_without_clock():
    """A flare in a frame without a clock is found, its time is NaN."""
    times = np.where(np.arange(8) == 3, np.nan, TIMES)
    values = Brightest().compute(LightCurve.from_arrays(times, np.where(np.arange(8) == 3, 50.0, 1.0), ERROR))
    assert values["excess"] > 50
    assert math.isnan(values["time"])


def test_signed_channels_are_two_sided():
    """In Stokes V a deep negative sample is as bright as a positive one."""
    channel = Channel("v", stokes="V")
    up, down = (LightCurve.from_arrays(TIMES, sign * (FLUX - 1), ERROR, channel=channel) for sign in (1, -1))
    for statistic in (Brightest(), MeanFlux()):
        assert statistic.compute(up) == pytest.approx(statistic.compute(down))


def test_leave_one_out_agrees_with_the_obvious_way():
    """The running sums give what leaving out one sample after the other gives, one overwhelming weight included."""
    rng = np.random.default_rng(8)
    flux, error = rng.normal(size=40), rng.uniform(0.5, 2, 40)
    error[7] = 1e-9
    slow = []
    for i in range(40):
        rest = np.arange(40) != i
        weight = error[rest] ** -2
        mean = (weight * flux[rest]).sum() / weight.sum()
        slow.append((flux[i] - mean) / math.sqrt(error[i] ** 2 + 1 / weight.sum()))
    np.testing.assert_allclose(leave_one_out(flux, error), slow, rtol=1e-10)


def test_robust_measures_and_skewness():
    """Quantiles as numpy's, MAD and skewness of the reference fluxes; G1 is scipy.stats.skew(FLUX, bias=False)."""
    n = np.array([8])
    quarter, three = (quantiles(FLUX[None], n, q)[0] for q in (0.25, 0.75))
    assert three - quarter == pytest.approx(1.2)
    assert quantiles(np.abs(FLUX - np.median(FLUX))[None], n, 0.5)[0] == pytest.approx(0.3)
    assert skewness(FLUX[None], n)[0] == pytest.approx(1.419551, rel=1e-6)
    assert skewness(FLUX[None], n)[0] * 6 / math.sqrt(8 * 7) == pytest.approx(1.138173, rel=1e-6)  # g1


def test_skewness_of_hardly_any_spread_is_blank():
    """Fluxes so nearly equal that the cube of their spread is no number have none, and say so without a warning."""
    flux = np.array([0, 0, 0, 0, 1.3e-160])
    assert np.isnan(skewness(flux[None], np.array([5]))[0])


def test_the_rise_over_hardly_any_difference():
    """A ratio that is no number any more has a logarithm: fluxes equal but for 1e-160 within an hour, and 1 a year on."""
    t = np.concatenate((np.arange(4) * 900.0, [3e7]))
    values = StructureFunction().compute(LightCurve.from_arrays(t, np.array([0, 0, 0, 1.3e-160, 1.0]), np.ones(5)))
    assert 319 < values["rise"] < 322


def test_pulls_decide_the_shape():
    """Skewness and spread are those of (S - median) / err: twice the errors, half the spread, the same skewness."""
    one, two = (Distribution().compute(LightCurve.from_arrays(TIMES, FLUX, np.full(8, e))) for e in (1.0, 2.0))
    assert one["skewness"] == pytest.approx(1.419551, rel=1e-6)
    assert one["mad"] == pytest.approx(0.3 * 1.482602)
    assert one["iqr"] == pytest.approx(1.2 / 1.348980, rel=1e-5)
    assert one["quantile_ratio"] == pytest.approx((4.79 - 1.15) / (1.15 - 0.735))  # numpy.quantile
    assert two["mad"] == pytest.approx(one["mad"] / 2)
    assert two["skewness"] == pytest.approx(one["skewness"])


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("price", [1.0, 4.0])
def test_blocks_are_those_of_astropy(seed, price):
    """The division of a light curve with a burst and a step is that of astropy.stats.bayesian_blocks."""
    rng = np.random.default_rng(seed)
    t = np.cumsum(rng.uniform(1, 9, 60))
    err = rng.uniform(0.5, 2, 60)
    flux = err * rng.normal(size=60) + 4.0 * (np.arange(60) // 6 == 3) + 2.0 * (np.arange(60) > 40)
    first = first_of_blocks(err[None] ** -2, (flux - flux.mean())[None], price)[0]
    edges = astropy_stats.bayesian_blocks(t, flux, err, fitness="measures", ncp_prior=price)
    middles = (t[1:] + t[:-1]) / 2
    np.testing.assert_allclose(middles[np.flatnonzero(first)[1:] - 1], edges[1:-1])
    assert BayesianBlocks(price=price).compute(LightCurve.from_arrays(t, flux, err))["n"] == len(edges) - 1


@pytest.mark.parametrize("seed", range(12))
def test_the_price_is_where_astropy_finds_one_block(seed):
    """Just below it astropy.stats.bayesian_blocks divides the light curve, just above it does not."""
    rng = np.random.default_rng([seed, 3])
    t = np.cumsum(rng.uniform(1, 9, 40))
    err = rng.uniform(0.5, 2, 40)
    burst = 3.0 * (np.arange(40) // 5 == 3) * (seed % 2)
    flux = (
        7.0 + err * rng.normal(size=40) + burst - burst[::-1] * (seed % 3) + 1.5 * (np.arange(40) % 13 > 9) * (seed > 7)
    )
    price = BayesianBlocks().compute(LightCurve.from_arrays(t, flux, err))["price"]
    blocks = [len(astropy_stats.bayesian_blocks(t, flux - 7, err, fitness="measures", ncp_prior=price + d)) - 1
              for d in (-1e-9, 1e-9)]  # fmt: skip
    assert blocks[0] > 1
    assert blocks[1] == 1


def test_prices_of_few_steps_and_of_many():
    """Prices of light curves without noise; exact.

    Twice the log likelihood ratio of a step is its significance squared. Four neighbours that go up and down by 1, four
    samples each among zeros, gain 2 each for five steps, more than any two or three blocks gain for theirs.
    """
    t, err = np.arange(60.0), np.ones(60)
    step = 2.0 * (t >= 20)
    wave = np.where((t >= 22) & (t < 38), 1 - 2 * ((t - 22) // 4 % 2), 0)
    prices = [BayesianBlocks().compute(LightCurve.from_arrays(t, f, err))["price"] for f in (step, wave, 0 * step)]
    assert prices == pytest.approx([(2 / math.sqrt(1 / 20 + 1 / 40)) ** 2 / 2, 4 * 2 / 5, 0])
    assert best_of_few(np.ones((1, 60)), wave[None], False)[1][0] < 1.2
    assert best_of_few(np.ones((1, 60)), (step - step.mean())[None], False)[1][0] == pytest.approx(prices[0])


def test_samples_of_one_time_share_a_block():
    """A jump within samples of the same time is no block's edge, and no interval's."""
    t, flux = np.array([0.0, 1, 2, 3, 3, 4, 5, 6]), np.array([0.0, 0, 0, 0, 50, 50, 50, 50])
    up, down = (BayesianBlocks().compute(LightCurve.from_arrays(t, f, np.ones(8))) for f in (flux, flux[::-1]))
    assert up["start"] in (2.5, 3.5)
    assert up["interval"] == pytest.approx(40 / math.sqrt(1 / 5 + 1 / 3))  # five of mean 40, or three of mean 50
    assert down["interval"] == pytest.approx(40 / math.sqrt(1 / 5 + 1 / 3))


def test_long_light_curves_are_divided_in_coarser_pieces():
    """In 5000 samples, three to a piece, a burst is found to within a piece."""
    t = np.arange(5000.0)
    flux = np.random.default_rng(9).normal(size=5000) + 3.0 * ((t >= 2998) & (t < 3100))
    values = BayesianBlocks(price=9.0).compute(LightCurve.from_arrays(t, flux, np.ones(5000)))
    assert values["n"] == 3
    assert abs(values["start"] - 2997.5) <= 3
    assert abs(values["length"] - 102) <= 6
    assert values["interval"] == pytest.approx(3 * math.sqrt(102), abs=4)


@pytest.mark.parametrize("seed", range(3))
def test_highest_interval_agrees_with_the_obvious_way(seed):
    """The best of all intervals, each compared with the samples outside it."""
    rng = np.random.default_rng(seed)
    curve = LightCurve.from_arrays(np.arange(11.0), rng.normal(size=11), rng.uniform(0.5, 2, 11))
    weight = curve.flux_err**-2
    found = []
    for first in range(11):
        for end in range(first + 1, 12 if first else 11):
            inside = (np.arange(11) >= first) & (np.arange(11) < end)
            means = [(weight * curve.flux)[m].sum() / weight[m].sum() for m in (inside, ~inside)]
            found.append((means[0] - means[1]) / math.sqrt(sum(1 / weight[m].sum() for m in (inside, ~inside))))
    assert BayesianBlocks().compute(curve)["interval"] == pytest.approx(max(found))


def test_structure_function_of_the_reference():
    """Pairs, mean squared differences and noise in three bins of lag, as computed outside this project (numpy)."""
    n, _, raw, noise = Pairs.of(TIMES[None], FLUX[None], ERROR[None], np.array([0, 1.5, 3.5, 6.5])).means()
    assert n.tolist() == [[4, 9, 9]]
    assert raw[0] == pytest.approx([0.1925, 9.202222, 9.288889], rel=1e-6)
    assert raw[0] - noise[0] == pytest.approx([-0.12, 8.868889, 8.955556], rel=1e-6)


def epochs_of(seed: int) -> LightCurve:
    """Twelve epochs thirty days apart, each of four samples an hour apart and of a level of its own beside noise."""
    rng = np.random.default_rng([seed, 21])
    epoch = np.repeat(np.arange(12), 4)
    t = 86400.0 * 30 * epoch + 3600.0 * np.tile(np.arange(4), 12)
    error = rng.uniform(0.5, 1.5, len(t))
    flux = 2.0 * rng.normal(size=12)[epoch] + error * rng.normal(size=len(t))
    return LightCurve.from_arrays(t, flux, error)


def test_errors_of_the_structure_function_are_a_jackknife_over_epochs():
    """They are what leaving out all pairs with a member in one epoch gives, one epoch after the other."""
    curve = epochs_of(1)
    values = StructureFunction().compute(curve)
    first, second = (pairwise(which, np.arange(48)[None])[0] for which in (np.minimum, np.maximum))
    lag = (curve.t_tdb_s[second] - curve.t_tdb_s[first]) / 86400
    value = (curve.flux[second] - curve.flux[first]) ** 2 - curve.flux_err[second] ** 2 - curve.flux_err[first] ** 2
    for name, low, high in (("short", 0.01, 0.1), ("long", 100, 1e3)):
        mine = (lag >= low) & (lag < high)
        left = [value[mine & (first // 4 != e) & (second // 4 != e)].mean() for e in range(12)]
        assert values[name] == pytest.approx(value[mine].mean())
        expected = math.sqrt(11 / 12 * np.sum((np.array(left) - value[mine].mean()) ** 2))
        assert values[f"{name}_err"] == pytest.approx(expected)


def test_errors_of_the_structure_function_are_its_scatter():
    """Over 600 sources that vary from epoch to epoch, 48 samples in 12 epochs, at both ends of the lags.

    Errors that took pairs for independent would be three times too small at long lags. A jackknife over pairs is somewhat too
    large in the mean (Efron & Stein 1981, Ann. Stat. 9, 586).
    """
    found = [StructureFunction().compute(epochs_of(seed)) for seed in range(600)]
    for name in ("short", "long"):
        value, told = (np.array([v[key] for v in found]) for key in (name, f"{name}_err"))
        assert 0.9 < np.sqrt(np.mean(told**2)) / value.std() < 1.3
    assert np.mean([v["short"] for v in found]) == pytest.approx(0, abs=4 * 0.5 / 600**0.5)


def test_a_structure_function_that_rests_on_one_epoch_has_no_error():
    """Where each pair has a member in one epoch nothing is left without it; values stay."""
    t = np.concatenate((np.arange(6) * 60.0, [8.64e7]))
    values = StructureFunction().compute(LightCurve.from_arrays(t, np.arange(7.0), np.ones(7)))
    assert math.isfinite(values["short"])
    assert math.isfinite(values["long"])
    assert math.isnan(values["short_err"])
    assert math.isnan(values["long_err"])


def test_structure_function_is_blank_without_pairs():
    """Fewer than four pairs at a lag are none: two groups of two have one bin only."""
    t = np.array([0.0, 60.0, 9e6, 9e6 + 60.0])
    values = StructureFunction().compute(LightCurve.from_arrays(t, np.arange(4.0), np.ones(4)))
    assert values["short_lag"] == pytest.approx(9e6 / 86400)
    assert math.isnan(values["long"])
    assert math.isnan(values["rise"])


def test_pairs_are_thinned_evenly_over_time_scales():
    """Separations in order of time: all of the first eight, four in each doubling, the cost n log n."""
    found = list(separations(4000))
    assert found[:14] == [1, 2, 3, 4, 5, 6, 7, 8, 10, 12, 14, 16, 20, 24]
    assert len(found) < 50
    assert max(b / a for a, b in itertools.pairwise(found[7:])) <= 1.25


def test_simultaneous_channels_are_paired_once():
    """Overlapping neighbours of different channels are pairs, the rest within its channel where it is close in time."""
    #              a     b      a     a      b      c      c       a
    t = np.array([0.0, 10.0, 100.0, 130.0, 500.0, 500.0, 520.0, 5000.0])
    channel = np.array([0, 1, 0, 0, 1, 2, 2, 0])
    first, second, at_once = pairs(t, np.full(8, 15.0), channel, 60.0)
    assert list(zip(first.tolist(), second.tolist(), strict=True)) == [(0, 1), (4, 5), (2, 3)]
    assert at_once == 2
    first, second, at_once = pairs(t, np.zeros(8), channel, 60.0)  # unknown exposures: equal times only
    assert list(zip(first.tolist(), second.tolist(), strict=True)) == [(4, 5), (2, 3)]


def test_welch_stetson_of_two_channels():
    """I of two channels at equal times is sqrt(1/(n(n-1))) sum delta_1 delta_2 (Welch & Stetson 1993)."""
    rng = np.random.default_rng(2)
    common = rng.normal(size=30)
    flux = [common + 0.3 * rng.normal(size=30) for _ in range(2)]
    curves = tuple(LightCurve.from_arrays(np.arange(30) * 1e6, f, np.full(30, 0.3), channel=Channel(str(k)))
                   for k, f in enumerate(flux))  # fmt: skip
    values = WelchStetson().compute(curves)
    delta = [(f - f.mean()) / 0.3 for f in flux]
    assert values["n_simultaneous"] == 30
    assert values["i"] == pytest.approx((delta[0] * delta[1]).sum() / math.sqrt(30 * 29))
    product = 30 / 29 * delta[0] * delta[1]
    assert values["j"] == pytest.approx(np.mean(np.sign(product) * np.sqrt(np.abs(product))))


def test_a_source_switched_on():
    """Two levels with one change: its time, and the square root of twice the log likelihood ratio; exact."""
    t = np.repeat(np.arange(6) * 10 * 86400.0, 3) + np.tile([0.0, 60, 120], 6)
    flux = np.where(np.arange(18) < 6, 1.0, 3.0)
    on, off = (EpochActivity().compute(LightCurve.from_arrays(t, f, np.ones(18))) for f in (flux, -flux))
    assert on["n"] == 6
    assert on["switch"] == pytest.approx(2 / math.sqrt(1 / 6 + 1 / 12))
    assert off["switch"] == pytest.approx(-on["switch"])
    assert on["switch_time"] == pytest.approx((t[5] + t[6]) / 2)
    assert on["brightening"] == off["fading"] == pytest.approx(2 / math.sqrt(2 / 3))
    assert on["fading"] == pytest.approx(0, abs=1e-9)
    assert on["reduced"] == pytest.approx(on["switch"] ** 2 / 5)  # all of the chi-square of 6 means is this step


def test_longest_run_in_time_of_those_with_most_samples():
    """Of two runs of two bright samples the longer in time is told; a quiet light curve has none."""
    flux = np.array([0, 9, 9, 0, 0, 9, 9, 0, 0, 0, 0, 0.0])
    t = np.array([0, 1, 2, 3, 4, 5, 9, 10, 11, 12, 13, 14.0])
    values = DutyCycle().compute(LightCurve.from_arrays(t, flux, np.ones(12)))
    assert (values["longest"], values["longest_s"], values["fraction"]) == (2, 4.0, pytest.approx(1 / 3))
    quiet = DutyCycle().compute(LightCurve.from_arrays(t, flux * 0, np.ones(12)))
    assert (quiet["longest"], quiet["fraction"], quiet["surprise"]) == (0, 0.0, 0.0)
    assert math.isnan(quiet["longest_s"])


def light_curves(min_size: int = 3) -> st.SearchStrategy[LightCurve]:
    """Light curves of any sensible fluxes, errors over a factor 100, ties in time included."""
    sample = st.tuples(st.integers(0, 10**9), st.floats(-1e3, 1e3, allow_subnormal=False), st.floats(0.01, 1.0))
    return st.lists(sample, min_size=min_size, max_size=40).map(lambda rows: LightCurve.from_arrays(*np.array(rows).T))


RATIOS = ("k", "eta", "z", "skewness", "quantile_ratio", "rise")  # of fluxes that are equal: of rounding errors
CHOSEN = ("time", "start", "length", "n", "switch", "switch_time")  # among equal maxima any may be chosen


def enough_for(curve: LightCurve) -> list[Statistic]:
    """The statistics that may be given so short a light curve."""
    return [statistic for statistic in STATISTICS if len(curve) >= statistic.min_points]


@settings(deadline=None)
@given(light_curves())
def test_flux_scaling(curve):
    """Fluxes and errors a thousand times larger multiply each column by a thousand to its declared power of flux."""
    larger = LightCurve.from_arrays(curve.t_tdb_s, curve.flux * 1000, curve.flux_err * 1000)
    for statistic in enough_for(curve):
        before, after = computed(statistic, curve), computed(statistic, larger)
        size = float(np.square(curve.flux).sum() + np.square(curve.flux_err).sum())
        for column in statistic.columns:
            floor = 1e-9 * max(1.0, (size if column.flux_power else 1.0) * 1000**column.flux_power)
            expected = before[column.name] * 1000**column.flux_power
            if column.name in RATIOS and np.ptp(curve.flux) < 1e-7 * max(1, np.abs(curve.flux).max()):
                continue  # a ratio of rounding errors
            if column.name in CHOSEN:
                continue  # equal maxima may change places
            assert after[column.name] == pytest.approx(expected, rel=1e-6, abs=floor, nan_ok=True), column.name


@settings(deadline=None)
@given(light_curves(), st.integers(-(10**9), 10**9))
def test_time_shift(curve, shift):
    """A shift of the time origin changes nothing but times."""
    moved = LightCurve.from_arrays(curve.t_tdb_s + shift, curve.flux, curve.flux_err)
    for statistic in enough_for(curve):
        before, after = computed(statistic, curve), computed(statistic, moved)
        for column in statistic.columns:
            expected = before[column.name] + (shift if column.is_time else 0)
            assert after[column.name] == pytest.approx(expected, nan_ok=True)


AWKWARD = {
    "shortest": ([0, 1, 2], [1, 2, 1], [1, 1, 1]),
    "equal": (range(9), [3.3] * 9, np.linspace(0.1, 1, 9)),
    "zero": (range(9), [0.0] * 9, np.ones(9)),
    "huge outlier": (range(9), [1] * 8 + [1e12], np.ones(9)),
    "negative": (range(9), -np.arange(1.0, 10), np.ones(9)),
    "wide errors": (range(9), np.arange(9), np.geomspace(0.01, 1, 9)),
    "ties": ([5] * 9, np.arange(9), np.ones(9)),
    "no clock": ([np.nan] * 9, np.arange(9), np.ones(9)),
}


@pytest.mark.parametrize("statistic", STATISTICS, ids=lambda s: s.name)
@pytest.mark.parametrize("rows", AWKWARD.values(), ids=AWKWARD)
def test_awkward_curves(statistic, rows):
    """No awkward light curve raises or warns, and every declared column comes back as a float."""
    curve = LightCurve.from_arrays(*(np.array(list(column), float) for column in rows))
    if len(curve) < statistic.min_points:
        return
    values = computed(statistic, curve)
    assert list(values) == [column.name for column in statistic.columns]
    kinds = {"float64": float, "int64": int}
    assert all(type(values[column.name]) is kinds[column.dtype] for column in statistic.columns)


def test_every_column_is_described():
    """Every column of the shipped statistics, search and checks has a sentence and a valid UCD1+ word."""
    for plugin in (*STATISTICS, LombScargle(), FrameWide(), Position()):
        for column in plugin.columns:
            assert len(column.doc) > 10
            assert check_ucd(column.ucd, check_controlled_vocabulary=True), f"{plugin.name} {column.name}"
        if isinstance(plugin, Statistic):
            assert any(column.unusual for column in plugin.columns)
