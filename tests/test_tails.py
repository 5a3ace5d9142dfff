"""Tails beyond the controls: their bounds against the truth, their fit against a reference library and exact integrals."""

import itertools

import numpy as np
import pytest
from scipy import integrate, stats

from hindlight import tails


@pytest.mark.parametrize(
    ("draw", "survival"),
    [
        (lambda rng, n: rng.standard_normal(n), stats.norm.sf),
        (lambda rng, n: rng.exponential(size=n), stats.expon.sf),
        (lambda rng, n: rng.standard_t(4, size=n), lambda x: stats.t.sf(x, 4)),
    ],
    ids=["normal", "exponential", "student4"],
)
def test_tail_bound_seldom_understates(draw, survival):
    """The bound is below a third of the true chance in at most 3 % of draws, also for heavy tails."""
    rng = np.random.default_rng(8)
    low = 0
    n_sets = 60
    for _ in range(n_sets):
        controls = draw(rng, 512)
        target = max(controls.max() * 1.3, 6.0)
        bound = tails.extrapolate(controls, target, 50).bound
        low += bound < survival(target) / 3
    assert low <= stats.binom.ppf(0.999, n_sets, 0.03)


@pytest.mark.parametrize("weight", [1.0, 4.0])
def test_no_tail_reaches_beyond_three_decades(weight):
    """However far out a target is, its bound is a thousandth of what one control (or group of like ones) weighs."""
    controls = np.sort(np.random.default_rng(1).standard_normal(400))
    far = [tails.extrapolate(controls, target, 50, weight).bound for target in (1e4, 1e8, 1e12)]
    np.testing.assert_allclose(far, 1e-3 * weight / 400)
    assert tails.extrapolate(controls, controls[-1] + 0.01, 50, weight).bound > 1e-3 * weight / 400


def test_tail_bound_says_nothing_inside_the_controls():
    """A target within the controls, or too few of them, gets no tail."""
    controls = np.random.default_rng(1).standard_normal(400)
    assert np.isnan(tails.extrapolate(controls, 1.0, 50).bound)
    assert np.isnan(tails.extrapolate(controls[:20], 9.0, 50).bound)


def excesses(values, m):
    """By how much the m largest of the values exceed the middle between the last of them and the next."""
    ordered = np.sort(values)[::-1]
    return ordered[:m] - (ordered[m - 1] + ordered[m]) / 2


@pytest.mark.parametrize("shape", [-0.3, 0.2, 1.0])
def test_the_most_likely_tail_is_that_of_a_reference_library(shape):
    """Shape and scale are those of scipy.stats.genpareto.fit, to a fraction of what their likelihood can tell."""
    drawn = stats.genpareto.rvs(shape, scale=3.0, size=400, random_state=np.random.default_rng(6))
    found_shape, found_scale = tails.most_likely(drawn[None, :], -1.0)
    wanted_shape, _, wanted_scale = stats.genpareto.fit(drawn, floc=0)
    assert found_shape[0] == pytest.approx(wanted_shape, abs=0.03)
    assert found_scale[0] == pytest.approx(wanted_scale, rel=0.03)


@pytest.mark.parametrize("shape", [-0.4, 0.0, 0.7])
def test_the_statistic_is_the_integral_that_defines_it(shape):
    """Quadrature of m (F_m - F)^2 / (1 - F) over F gives what the sum does (exact)."""
    excess = np.array([0.0, 0.1, 0.1, 0.4, 0.9, 1.6])
    f = stats.genpareto.cdf(excess, shape, scale=0.8)
    edges = np.concatenate(([0.0], f, [1.0]))
    parts = [
        integrate.quad(lambda u, i=i: (i / 6 - u) ** 2 / (1 - u), low, high)[0]
        for i, (low, high) in enumerate(itertools.pairwise(edges))
    ]
    found = tails.upper_anderson_darling(excess[None, :], np.array([shape]), np.array([0.8]))
    assert found[0] == pytest.approx(6 * sum(parts))


KINDS = {
    "normal": lambda rng, n: rng.standard_normal(n),
    "exponential": lambda rng, n: rng.exponential(size=n),
    "student4": lambda rng, n: rng.standard_t(4, n),
}


@pytest.mark.parametrize("kind", KINDS)
def test_good_tails_are_seldom_rejected(kind):
    """Of normal, exponential and Student t(4) controls at most one set in a hundred is; other levels hold alike."""
    rng = np.random.default_rng(9)
    p = np.array([tails.goodness_of_fit(excesses(KINDS[kind](rng, 512), 50))[1] for _ in range(300)])
    for level in (tails.MISFIT, 0.05, 0.2):
        assert np.sum(p < level) <= stats.binom.ppf(0.999, len(p), level)
    assert p.min() < 0.1


def test_what_is_lighter_than_the_tail_is_no_misfit():
    """Values that end, evenly or bunched at their end, are bounded by an exponential tail: a bound too high is one."""
    rng = np.random.default_rng(13)
    even = [rng.random(400) for _ in range(20)]
    assert not any(tails.extrapolate(values, 9.0, 50).rejected for values in even)
    bunched = np.concatenate([np.linspace(0, 3.2, 75), np.linspace(3.3, 4.0, 18), np.linspace(4.77, 4.97, 6)])
    assert not tails.extrapolate(bunched, 40.0, 50).rejected
    assert tails.most_likely(excesses(even[0], 50)[None, :], -1.0)[0][0] < -0.5
    assert tails.extrapolate(even[0], 9.0, 50).shape == 0


def test_a_tail_with_a_jump_is_rejected_and_not_used():
    """Eight sources among 512 normal controls, at 20 sigma: no bound is given, and the p of the fit says why."""
    rng = np.random.default_rng(10)
    controls = [np.concatenate([rng.standard_normal(504), rng.normal(20, 0.3, 8)]) for _ in range(20)]
    found = [tails.extrapolate(values, 40.0, 50) for values in controls]
    assert sum(tail.rejected for tail in found) >= 18
    for tail in found:
        assert tail.n == 50
        assert np.isnan(tail.bound) == tail.rejected == (tail.fit_p < 0.01)


def test_values_alike_in_groups_are_no_misfit():
    """Copies of each control would make any tail look bad; counted as so many they do not, and jumps are still seen."""
    rng = np.random.default_rng(12)
    good = [np.repeat(rng.exponential(size=400), 4) + rng.normal(0, 1e-3, 1600) for _ in range(40)]
    assert sum(tails.extrapolate(values, 30.0, 50, 4.0).rejected for values in good) <= 3
    assert sum(tails.extrapolate(values, 30.0, 200, 1.0).rejected for values in good) >= 15
    far = [np.concatenate([values, rng.normal(30, 0.3, 32)]) for values in good[:10]]
    assert sum(tails.extrapolate(values, 99.0, 50, 4.0).rejected for values in far) >= 8


@pytest.mark.parametrize(
    "values",
    [
        np.random.default_rng(1).poisson(3, 200).astype(float),
        np.round(np.random.default_rng(2).standard_normal(500), 1),
        np.repeat(np.arange(20.0), 10),
        np.concatenate([np.zeros(100), np.ones(30), [2.0]]),
        np.concatenate([np.zeros(100), np.full(25, 1.0)]),
        np.concatenate([np.zeros(150), np.ones(10), [2.0, 3.0]]),
    ],
    ids=["counts", "rounded", "steps", "two steps", "one step", "mostly equal"],
)
def test_equal_values_make_a_tail_or_none(values):
    """Discrete statistics end in a finite verdict, without a warning; where there is a bound it is a chance."""
    found = tails.extrapolate(values, values.max() + 3.0, 50)
    assert found.n >= 10
    assert found.shape >= 0
    assert 0 < found.fit_p <= 1
    assert found.rejected or 0 < found.bound < 1


def test_an_exponential_tail_of_known_scale():
    """Shape 0, scale 1, start ln 4, beyond which a quarter lies: exp(-12) = 6.144e-6 at 12 (exact)."""
    tail = tails.Tail(0.25, np.log(4.0), np.array([0.0]), np.array([1.0]), 0.0, np.empty(0))
    assert tail.beyond(12.0) == pytest.approx(np.exp(-12.0))
    assert tail.beyond(12.0) == pytest.approx(6.144e-6, rel=1e-4)
    assert tail.reached(6.144e-6) == pytest.approx(12.0, rel=1e-5)
