"""What an archive could have shown: intervals, bars, limits, and recovery against archives that were simulated otherwise."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

import hidden
from hindlight import completeness
from hindlight.completeness import NOTHING, Cell, bar, jeffreys
from hindlight.injection import PULSES, SMOOTH
from hindlight.settings import Completeness


@pytest.mark.parametrize(
    ("k", "n", "low", "high"),
    [
        (0, 10, 0, 0.217196), (5, 10, 0.223529, 0.776471), (9, 10, 0.618685, 0.988988), (10, 10, 0.782804, 1),
        (0, 100, 0, 0.024745),
    ],
)  # fmt: skip
def test_jeffreys_intervals(k, n, low, high):
    """Equal tails of Beta(k + 1/2, n - k + 1/2), its ends moved to 0 and 1: Brown, Cai & DasGupta 2001, Stat. Sci. 16, 101.

    Values by scipy.stats.beta.ppf, computed outside this project.
    """
    assert jeffreys(k, n) == pytest.approx((low, high), abs=1e-6)


@pytest.mark.parametrize(
    ("k", "n", "low", "high"),
    [
        (0, 10, 0, 0.277533), (5, 10, 0.236593, 0.763407), (9, 10, 0.595850, 0.982124), (10, 10, 0.722467, 1),
        (0, 100, 0, 0.036993),
    ],
)  # fmt: skip
def test_the_other_interval_that_is_recommended_says_the_same(k, n, low, high):
    """Wilson's (1927, JASA 22, 209), by scipy, which the same authors recommend beside it: ends differ by at most 0.07.

    Values computed outside this project; where a limit is one-sided, theirs is the wider.
    """
    wilson = stats.binomtest(k, n).proportion_ci(0.95, "wilson")
    assert (wilson.low, wilson.high) == pytest.approx((low, high), abs=1e-6)
    ours = jeffreys(k, n)
    assert abs(ours[0] - low) < 0.07
    assert abs(ours[1] - high) < 0.07
    if k in (0, n):
        assert ours[1] - ours[0] < high - low


def test_one_sided_limit():
    """None of 100: below 0.018977 at 95 %, one-sided, which is the upper end of the 90 % interval; scipy.stats.beta.ppf."""
    assert stats.beta.ppf(0.95, 0.5, 100.5) == pytest.approx(0.018977, abs=1e-6)
    assert jeffreys(0, 100, 0.9)[1] == pytest.approx(0.018977, abs=1e-6)


def test_interval_of_nothing():
    """No trials, no interval."""
    assert jeffreys(0, 0) == (0.0, 1.0)


@pytest.mark.parametrize(("dependent", "method"), [(False, "bh"), (True, "by")])
def test_bar_is_what_the_false_discovery_rate_leaves_for_one_more(dependent, method):
    """Below the bar one more p-value is below the level among the others, above it is not; in either form of the rate."""
    rng = np.random.default_rng(3)
    for n in (0, 1, 3, 20):
        for _ in range(50):
            p = rng.uniform(size=n) ** rng.integers(1, 6)
            at = bar(p, 0.05, dependent)
            for value, expected in ((at * 0.999, True), (at * 1.001, False)):
                q = stats.false_discovery_control(np.append(p, value), method=method)[-1]
                assert (q < 0.05) == expected
    assert bar(np.array([np.nan, np.nan]), 0.05) == 0.05


def test_grid_and_draws():
    """Each cell has as many sources as asked, at hosts by weight; those of a cell do not depend on the hosts' number."""
    chosen = Completeness(per_cell=200, fluxes=(3.0, 9.0), duty_cycles=(0.1,), smooth_periods=(100.0,))
    cells = completeness.grid(chosen)
    assert [c.kind for c in cells] == [NOTHING, *[PULSES] * 4, *[SMOOTH] * 2]
    wanted = completeness.drawn(cells, np.array([4, 8, 9]), np.array([1.0, 0.0, 3.0]), chosen)
    assert np.bincount([one.cell for one in wanted]).tolist() == [200] * 7
    hosts = np.array([one.host for one in wanted])
    assert not (hosts == 8).any()
    assert (hosts == 9).mean() == pytest.approx(0.75, abs=0.04)
    again = completeness.drawn(cells, np.arange(50), np.ones(50), chosen)
    assert [one.source for one in again] == [one.source for one in wanted]


def test_bright_sources_are_found_and_nothing_as_often_as_chance():
    """A flux of 100 sigma always; no source with the rate that the bar allows."""
    cells = [Cell(NOTHING, 0.0), Cell(SMOOTH, 100.0, 1e6)]
    found = np.concatenate([hidden.by_injection(seed, cells, 60, 20, 0.2, each=60) for seed in range(8)], axis=1)
    assert found[1].all()
    # The bar is 0.2 / 5, or a little more where a blank target is below it; p-values of 60 are multiples of 1 / 60.
    assert stats.binomtest(int(found[0].sum()), found[0].size, 2 / 60).pvalue > 1e-3


def test_a_host_leaves_its_own_null():
    """Were a host ranked with itself as it was, the smallest p-value would be smaller than 1 / n."""
    settings = hidden.settings_of(0.2)
    rng = np.random.default_rng(1)
    t = hidden.times(rng, 20)
    null = completeness.null_of(
        np.arange(30), np.ones((30, 30), bool), hidden.judged(rng.standard_normal((30, 20)), t), settings
    )
    assert not null.serving.diagonal().any()
    bars = completeness.Bars(1.0, 1.0)
    source = hidden.judged(50 * rng.uniform(size=(2, 20)), t)
    found = completeness.found(source, np.array([3, 7]), null, hidden.COLUMNS, bars, settings, hidden.STATISTICS)
    assert found.lowest_p == pytest.approx([1 / 30, 1 / 30])
    assert found.own_p.shape == (2, len(hidden.STATISTICS))
    assert np.nanmin(found.own_p) == pytest.approx(1 / 30)
    strict = replace(settings, detection=replace(settings.detection, min_frames=21))
    assert found.recovered.all()
    assert found.seen.all()
    assert not completeness.found(source, np.array([3, 7]), null, hidden.COLUMNS, bars, strict).recovered.any()


def test_few_controls_need_a_tail_and_too_few_find_nothing():
    """Sixty controls cannot decide at 0.002, their tail can; twenty have none, and nothing is found however bright."""
    rng = np.random.default_rng(5)
    t = hidden.times(rng, 20)
    bars = completeness.Bars(0.002, 0.002)
    settings = hidden.settings_of(0.05)
    source = hidden.judged(rng.standard_normal((1, 20)) + 1000 * (np.arange(20) == 4), t)
    for n, expected in ((60, True), (20, False)):
        null = completeness.null_of(
            np.arange(n), np.ones((n, n), bool), hidden.judged(rng.standard_normal((n, 20)), t), settings
        )
        found = completeness.found(source, np.array([0]), null, hidden.COLUMNS, bars, settings)
        assert found.recovered.tolist() == [expected]
        assert found.extrapolated.tolist() == [expected]


def test_completeness_agrees_with_simulated_archives():
    """The small version of tests/studies/completeness.py: sources hidden at controls, and sources that are targets."""
    cells = [Cell(PULSES, 6.0, 1200.0, 0.1, 2.0, 0.2), Cell(SMOOTH, 2.5, 1e6), Cell(NOTHING, 0.0, 1.0)]
    hid = np.stack([hidden.by_injection(seed, cells, 60, 20, 0.2)[:, 0] for seed in range(25)])
    made = np.stack([hidden.by_simulation(seed, cells, 60, 20, 0.2) for seed in range(50)])
    p = [
        stats.fisher_exact([[a.sum(), len(a) - a.sum()], [b.sum(), len(b) - b.sum()]]).pvalue
        for a, b in zip(hid.T, made.T, strict=True)
    ]
    assert len(p) * min(p) > 0.01, (hid.mean(axis=0), made.mean(axis=0), p)
    assert 0.1 < made[:, 0].mean() < 0.95, "a cell that is always or never found would agree by itself"


def test_bright_sources_are_ranked_as_a_run_ranks_bright_targets():
    """Calibration leaves a tenth, ten comparisons tell of it: found as seldom as targets are, not as often as by blank sky."""
    cell, archive = Cell(SMOOTH, 12.0, 8.64e6), (80, 24, 0.05, 0.1, 10)
    hid = [hidden.by_injection_of_bright(seed, cell, *archive, each=4) for seed in range(8)]
    full, blank = (np.concatenate([one[which] for one in hid]) for which in (0, 1))
    made = np.array([hidden.by_simulation_of_bright(seed, cell, *archive) for seed in range(24)])
    table = [[full.sum(), (~full).sum()], [made.sum(), (~made).sum()]]
    assert stats.fisher_exact(table).pvalue > 0.001
    table[0] = [blank.sum(), (~blank).sum()]
    assert stats.fisher_exact(table).pvalue < 1e-4
