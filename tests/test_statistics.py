"""The shipped statistics against reference values, and the properties that hold for any light curve."""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy.io.votable.ucd import check_ucd
from hypothesis import given, settings
from hypothesis import strategies as st

from hindlight import Channel, LightCurve, Statistic
from hindlight_plugins.brightest import Brightest, leave_one_out, p_of_maximum
from hindlight_plugins.chi_square import ChiSquare
from hindlight_plugins.common_mode import FrameWide
from hindlight_plugins.lomb_scargle import LombScargle
from hindlight_plugins.mean_flux import MeanFlux
from hindlight_plugins.position_check import Position
from hindlight_plugins.stetson import Stetson
from hindlight_plugins.von_neumann import VonNeumann

STATISTICS = (ChiSquare(), VonNeumann(), Stetson(), Brightest(), MeanFlux())

# A light curve of eight samples, two of them bright.
TIMES = np.array([0.0, 1, 2, 4, 5, 7, 8, 10])
FLUX = np.array([1.2, 0.8, 1.1, 5.0, 4.4, 0.9, 1.3, 0.7])
ERROR = np.array([0.3, 0.4, 0.3, 0.5, 0.5, 0.4, 0.3, 0.4])
CURVE = LightCurve.from_arrays(TIMES, FLUX, ERROR)

# Values of the published formulas for that light curve, computed outside this project with numpy 2.4 and scipy 1.17.
REFERENCE = [
    (ChiSquare(), "reduced", 13.58182),  # 95.07277 / 7
    (ChiSquare(), "p_gauss", 1.1198e-17),  # scipy.stats.chi2.sf(95.07277, 7)
    (ChiSquare(), "modulation_index", 0.8996595),
    (ChiSquare(), "modulation_index_debiased", 0.8161178),  # Akritas & Bershady 1996, ApJ 470, 706
    (ChiSquare(), "excess_variance", 2.843036),  # this and the next four: Vaughan et al. 2003, MNRAS 345, 1271
    (ChiSquare(), "normalized_excess_variance", 0.767222),
    (ChiSquare(), "normalized_excess_variance_err", 0.128917),  # eq. 11
    (ChiSquare(), "fractional_variability", 0.875912),
    (ChiSquare(), "fractional_variability_err", 0.0735903),  # eq. B2
    (VonNeumann(), "eta", 1.361753),  # von Neumann 1941, Ann. Math. Stat. 12, 367
    (VonNeumann(), "z", -1.03408),
    (Stetson(), "j", 0.856774),  # Stetson 1996, PASP 108, 851
    (Stetson(pairs="disjoint"), "j", -0.926060),
    (Stetson(pairs="singles"), "j", 2.483257),
    (Stetson(), "k", 0.783436),
    (Brightest(), "snr", 10.0),  # exact: 5.0 / 0.5
    (Brightest(), "leave_one_out", 7.160057),
    (MeanFlux(), "snr", 1.541193 / 0.129010),
]


@pytest.mark.parametrize(("statistic", "column", "expected"), REFERENCE)
def test_reference_values(statistic, column, expected):
    """Each column has the value of its published formula for the reference light curve."""
    assert statistic.compute(CURVE)[column] == pytest.approx(expected, rel=2e-5)


def test_trials_of_the_maximum():
    """The chance of the highest of n samples agrees with 1 - Phi(z)^n, and doubles its tail when two-sided."""
    assert p_of_maximum(10.0, 8) == pytest.approx(6.096e-23, rel=1e-3)  # computed with scipy.stats.norm.logcdf
    assert p_of_maximum(0.0, 1) == pytest.approx(0.5)  # exact
    assert p_of_maximum(0.0, 3, two_sided=True) == 1.0  # exact
    assert p_of_maximum(6.0, 5, two_sided=True) == pytest.approx(2 * p_of_maximum(6.0, 5), rel=1e-6)
    assert p_of_maximum(50.0, 5) == 0.0


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
    """K of a lone outlier is 2 sqrt(n-1) / n (exact: its mean is taken off), of Gaussian noise sqrt(2/pi) for many."""
    lone = np.zeros(10_000)
    lone[17] = 1.0
    noise = np.random.default_rng(3).normal(size=10_000)
    times, error = np.arange(10_000), np.full(10_000, 1.0)
    assert Stetson().compute(LightCurve.from_arrays(times, lone, error))["k"] == pytest.approx(2 * 9999**0.5 / 10_000)
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


def test_scatter_below_the_errors_gives_a_negative_index():
    """A steady, well-measured source has a negative debiased index and no fractional variability."""
    values = ChiSquare().compute(LightCurve.from_arrays(TIMES, np.full(8, 10.0), ERROR))
    assert values["modulation_index_debiased"] < 0
    assert values["normalized_excess_variance"] < 0
    assert math.isnan(values["fractional_variability"])
    assert math.isnan(values["normalized_excess_variance_err"])


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


def light_curves(min_size: int = 3) -> st.SearchStrategy[LightCurve]:
    """Light curves of any sensible fluxes, errors over a factor 100, ties in time included."""
    sample = st.tuples(st.integers(0, 10**9), st.floats(-1e3, 1e3, allow_subnormal=False), st.floats(0.01, 1.0))
    return st.lists(sample, min_size=min_size, max_size=40).map(lambda rows: LightCurve.from_arrays(*np.array(rows).T))


@settings(deadline=None)
@given(light_curves())
def test_flux_scaling(curve):
    """Fluxes and errors a thousand times larger multiply each column by a thousand to its declared power of flux."""
    larger = LightCurve.from_arrays(curve.t_tdb_s, curve.flux * 1000, curve.flux_err * 1000)
    for statistic in STATISTICS:
        before, after = statistic.compute(curve), statistic.compute(larger)
        size = float(np.square(curve.flux).sum() + np.square(curve.flux_err).sum())
        for column in statistic.columns:
            floor = 1e-9 * max(1.0, (size if column.flux_power else 1.0) * 1000**column.flux_power)
            expected = before[column.name] * 1000**column.flux_power
            if column.name in ("k", "eta", "z") and np.ptp(curve.flux) < 1e-7 * max(1, np.abs(curve.flux).max()):
                continue  # a ratio of rounding errors
            if column.name == "time":
                continue  # equal maxima may change places
            assert after[column.name] == pytest.approx(expected, rel=1e-6, abs=floor, nan_ok=True), column.name


@settings(deadline=None)
@given(light_curves(), st.integers(-(10**9), 10**9))
def test_time_shift(curve, shift):
    """A shift of the time origin changes nothing but times."""
    moved = LightCurve.from_arrays(curve.t_tdb_s + shift, curve.flux, curve.flux_err)
    for statistic in STATISTICS:
        before, after = statistic.compute(curve), statistic.compute(moved)
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
    values = statistic.compute(curve)
    assert list(values) == [column.name for column in statistic.columns]
    assert all(type(value) is float for value in values.values())


def test_every_column_is_described():
    """Every column of the shipped statistics, search and checks has a sentence and a valid UCD1+ word."""
    for plugin in (*STATISTICS, LombScargle(), FrameWide(), Position()):
        for column in plugin.columns:
            assert len(column.doc) > 10
            assert check_ucd(column.ucd, check_controlled_vocabulary=True), f"{plugin.name} {column.name}"
        if isinstance(plugin, Statistic):
            assert any(column.unusual for column in plugin.columns)
