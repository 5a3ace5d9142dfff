"""Ranks, tails, thresholds and false-discovery rates against published values, exact results and simulation."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from hindlight import calibrate

# Benjamini & Hochberg 1995, JRSS B 57, 289, section 3.2: fifteen p-values, four rejected at q = 0.05.
PUBLISHED_P = [
    .0001, .0004, .0019, .0095, .0201, .0278, .0298, .0344, .0459, .3240, .4262, .5719, .6528, .7590, 1.0
]  # fmt: skip


def test_false_discovery_gives_the_published_example():
    """The fifteen p-values of Benjamini and Hochberg give four rejections, the fourth adjusted to 0.035625."""
    q = calibrate.false_discovery(np.array(PUBLISHED_P))
    assert (q <= 0.05).sum() == 4
    assert q[3] == pytest.approx(0.035625)


def test_false_discovery_under_any_dependence():
    """Of the same fifteen three are rejected (the fourth adjusts to 0.035625 times 1 + 1/2 + ... + 1/15 = 3.318229)."""
    q = calibrate.false_discovery(np.array(PUBLISHED_P), any_dependence=True)
    assert (q <= 0.05).sum() == 3
    assert q[3] == pytest.approx(0.035625 * 3.3182290)
    assert calibrate.controls_needed(15, 0.05, any_dependence=True) == 995  # 15 * 3.318229 / 0.05 = 995.5


def test_false_discovery_leaves_unknown_p_values_out():
    """A target without a p-value is no trial and keeps NaN."""
    q = calibrate.false_discovery(np.array([0.01, np.nan, 0.02]))
    assert np.isnan(q[1])
    assert q[[0, 2]] == pytest.approx([0.02, 0.02])


@pytest.mark.parametrize(("r", "expected"), [(98.5, 1 / 100), (98.0, 2 / 100), (-1.0, 1.0)])
def test_rank_counts_ties(r, expected):
    """With 99 controls none above gives 1/100, equality with the largest 2/100 (Phipson & Smyth 2010, exact)."""
    null = calibrate.null_from(np.arange(99.0)[:, None])
    assert calibrate.rank(null, np.array([r])).p_value == pytest.approx(expected)


def test_rank_is_exact_for_exchangeable_sets():
    """Over many draws of target and controls alike the p-value is at most its nominal size, and nearly it."""
    rng = np.random.default_rng(11)
    p = []
    for _ in range(1500):
        values = rng.standard_t(3, size=(100, 5))
        values[:, 1] += values[:, 0]
        p.append(calibrate.rank(calibrate.null_from(values[1:]), values[0]).p_value)
    for level in (0.01, 0.05, 0.2):
        low, high = stats.binom.interval(0.9999, len(p), level)
        assert low <= np.sum(np.array(p) <= level + 1e-12) <= high


@pytest.mark.parametrize("n_controls", [2, 9, 30])
def test_rank_is_exact_among_few_controls_by_many_statistics(n_controls):
    """A target is first as seldom as any other of the set, though it is often far out in the scale of a few controls."""
    rng = np.random.default_rng(12)
    sets = [rng.standard_normal((n_controls + 1, 20)) for _ in range(1500)]
    first = sum(calibrate.rank(calibrate.null_from(values[1:]), values[0]).exceeded_by == 0 for values in sets)
    assert first <= stats.binom.ppf(0.9999, len(sets), 1 / (n_controls + 1))


def test_missing_values_are_least_extreme():
    """A statistic that a member of the set lacks never makes it unusual, and no values give no p-value."""
    values = np.array([[1.0, -np.inf], [2.0, -np.inf], [3.0, 0.5]])
    null = calibrate.null_from(values)
    assert calibrate.rank(null, np.array([0.0, -np.inf])).p_value == 1.0
    assert np.isnan(calibrate.rank(null, np.array([-np.inf, -np.inf])).p_value)


def test_a_target_far_beyond_all_controls_reaches_the_floor_whatever_the_number_of_statistics():
    """Ties at the smallest rank are ordered by distance, so forty statistics do not cost a real source its rank."""
    rng = np.random.default_rng(5)
    target = rng.standard_normal(40)
    target[7] = 60.0
    found = calibrate.rank(calibrate.null_from(rng.standard_normal((500, 40))), target)
    assert found.p_value == pytest.approx(1 / 501)
    assert found.column == 7


def test_columns_of_many_equal_values_have_a_sensible_scale():
    """A lone control with anything at all is some 2.3 units out, not hundreds; so is the tail of one-sided values."""
    lone = np.zeros((98, 1))
    lone[31] = 2.5
    assert (lone.max() / calibrate.centre_and_spread(lone)[1])[0] == pytest.approx(2.33)
    rng = np.random.default_rng(3)
    seldom = np.where(rng.random((5000, 1)) < 0.3, np.abs(rng.normal(size=(5000, 1))), 0.0)
    tail = np.quantile(seldom, 0.99) / calibrate.centre_and_spread(seldom)[1]
    assert tail[0] == pytest.approx(2.33, rel=0.01)
    assert calibrate.centre_and_spread(np.zeros((98, 1)))[1][0] == 1.0


@pytest.mark.parametrize("n", [98, 512, 2000])
def test_a_lone_control_of_another_channel_does_not_stand_beside_a_target_far_beyond_it(n):
    """A statistic that is nearly always zero: its values in two channels are compared as they are, alone or among some."""
    values = np.zeros((n, 2))
    values[3, 1] = 2.3
    target = np.array([109.0, 0.0])
    assert calibrate.rank(calibrate.null_from(values, ["a", "a"]), target).p_value == pytest.approx(1 / (n + 1))
    assert calibrate.rank(calibrate.null_from(values, ["a", "b"]), target).p_value == pytest.approx(2 / (n + 1))
    assert calibrate.rank(calibrate.null_from(values, ["a", "a"]), np.array([2.2, 0.0])).p_value > 1.5 / (n + 1)


def test_ranks_of_statistics_that_are_nearly_always_zero_are_exact():
    """A blank target is first no more often than one in so many, and nearly that often (4,000 sets, binomial bounds)."""
    rng = np.random.default_rng(17)
    n, sets = 40, 4000
    first = 0
    for _ in range(sets):
        seldom = np.where(rng.random((n + 1, 4)) < 0.03, rng.poisson(2.0, (n + 1, 4)) * rng.random((n + 1, 4)), 0.0)
        values = np.concatenate([seldom, rng.standard_t(4, (n + 1, 4))], axis=1)
        null = calibrate.null_from(values[1:], ["a", "a", "a", "b", "c", "d", "e", "f"])
        first += calibrate.rank(null, values[0]).p_value <= 1 / (n + 1) + 1e-9
    low, high = stats.binom.interval(0.999, sets, 1 / (n + 1))
    assert low <= first <= high


def test_leave_one_out_equals_counting():
    """Every control's p-value equals a plain count over the others and itself."""
    rng = np.random.default_rng(2)
    values = rng.integers(0, 6, size=(60, 3)).astype(float)
    null = calibrate.null_from(values)
    p = (values[None, :, :] >= values[:, None, :]).sum(axis=1) / 60
    distance = (values - null.centre) / null.spread
    best = p.min(axis=1)
    key = np.where(p == best[:, None], distance, -np.inf).max(axis=1)
    slow = [np.mean((best < best[i]) | ((best == best[i]) & (key >= key[i]))) for i in range(60)]
    assert calibrate.leave_one_out(null) == pytest.approx(slow)


# Helene 1983, NIM 212, 319: bounds for sigma = 1 at 95 %, computed with scipy.stats.norm; the last from its logarithms.
@pytest.mark.parametrize(
    ("flux", "bound"),
    [(0, 1.959964), (1, 2.727185), (2, 3.655984), (3, 4.645508), (-1, 1.411994), (-10, 0.292467), (-40, 0.0747768)],
)
def test_upper_bound(flux, bound):
    """The flat-prior bound holds down to forty sigma below zero."""
    assert calibrate.upper_bound(flux, 1.0) == pytest.approx(bound, rel=1e-5)
    assert calibrate.upper_bound(1000.0 * flux, 1000.0) == pytest.approx(1000 * bound, rel=1e-5)


def test_upper_bound_needs_an_error():
    """Without a positive error there is no bound."""
    assert np.isnan(calibrate.upper_bound(1.0, 0.0))


def test_extra_scatter_of_a_worked_example():
    """Eight fluxes whose scatter by Nelder-Mead on the likelihood (scipy) is 1.527896."""
    flux = np.array([1.2, 0.8, 1.1, 5.0, 4.4, 0.9, 1.3, 0.7])
    error = np.array([0.3, 0.4, 0.3, 0.5, 0.5, 0.4, 0.3, 0.4])
    assert calibrate.extra_scatter(flux, error) == pytest.approx(1.527896, rel=1e-5)
    assert calibrate.extra_scatter(np.ones(9), np.ones(9)) == 0.0
    assert np.isnan(calibrate.extra_scatter(flux[:2], error[:2]))


def test_threshold_has_the_stated_rate():
    """At most one in a hundred blank positions has a maximum above a threshold made for that rate from others."""
    rng = np.random.default_rng(4)
    exceeded = 0
    for _ in range(200):
        limit = calibrate.threshold(rng.standard_normal((512, 40)).max(axis=1), 0.01)
        exceeded += int((rng.standard_normal((10, 40)).max(axis=1) > limit).sum())
    assert exceeded <= stats.binom.ppf(0.9999, 2000, 0.01)
    assert exceeded >= 3


def test_gaussian_threshold_is_the_published_one():
    """One false alarm in a million looks lies at 4.7534 sigma (normal table)."""
    assert calibrate.gaussian_threshold(1, 1e-6) == pytest.approx(4.7534, abs=1e-4)
    # Sidak 1967, J. Am. Stat. Assoc. 62, 626: one in 1e5 over a thousand looks is 1 - (1 - 1e-5)^1000 = 0.00995022 (exact).
    assert stats.norm.sf(calibrate.gaussian_threshold(1000, 0.00995022)) == pytest.approx(1e-5, rel=1e-6)
    assert calibrate.gaussian_threshold(1000, -np.expm1(1000 * np.log1p(-1e-6))) == pytest.approx(4.7534, abs=1e-3)


def test_robust_threshold_ignores_a_few_real_sources():
    """Three real sources among three hundred blank positions do not move what counts as seen in the mean."""
    rng = np.random.default_rng(3)
    blank = rng.standard_normal(300)
    contaminated = np.concatenate([blank[3:], [30.0, 40.0, 50.0]])
    assert calibrate.robust_threshold(contaminated, 0.01) == pytest.approx(
        calibrate.robust_threshold(blank, 0.01), abs=0.2
    )


@pytest.mark.parametrize("n_targets", [1, 7, 100, 400, 1234])
@pytest.mark.parametrize("level", [0.01, 0.05, 0.1, 0.3])
def test_controls_needed(n_targets, level):
    """With so many controls a target beyond all of them is below the level among others that are not, with fewer it is not."""
    n = calibrate.controls_needed(n_targets, level)
    for controls, decides in (
        (n, True),
        (n - 2, False),
    ):  # with n - 1 the level itself may be hit, give or take rounding
        p = np.ones(n_targets)
        p[0] = 1 / (controls + 1)
        assert (calibrate.false_discovery(p)[0] < level) == decides
    assert calibrate.controls_needed(400, 0.05) == 8000  # 400 / 8000 is 0.05 itself


@given(st.lists(st.booleans(), max_size=30))
def test_runs_counts_unbroken_stretches(mask):
    """The number of runs equals what splitting the text at gaps gives."""
    text = "".join("x" if m else " " for m in mask)
    assert calibrate.runs(np.array(mask, dtype=bool)) == len(text.split())
