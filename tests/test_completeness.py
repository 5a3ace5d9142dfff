"""What an archive could have shown: intervals, bars, limits, and recovery against archives that were simulated otherwise."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

import hidden
from hindlight import completeness
from hindlight.completeness import NOTHING, Cell, Looks, bar, by_cycle, by_epoch, duty_limit, jeffreys, weights
from hindlight.injection import PULSES, SMOOTH
from hindlight.settings import Completeness
from hindlight.timing import DAY


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


def test_interval_of_nothing():
    """No trials, no interval."""
    assert jeffreys(0, 0) == (0.0, 1.0)


@pytest.mark.parametrize(
    ("n", "limit"), [(10, 0.258866), (30, 0.0950339), (100, 0.0295130), (1000, 0.00299125)]
)  # fmt: skip
def test_duty_limit_of_looks_that_miss_nothing(n, limit):
    """The exact one-sided binomial limit, 1 - 0.05^(1/n)."""
    assert duty_limit(np.ones(n)) == pytest.approx(limit, abs=1e-6)


def test_duty_limit_of_looks_that_see_part():
    """Twenty looks of 0.1 and ten of 0.3; and looks that set no limit."""
    assert duty_limit(np.concatenate([np.full(20, 0.1), np.full(10, 0.3)])) == pytest.approx(0.560685, abs=1e-6)
    assert np.isnan(duty_limit(np.full(20, 0.1)))
    assert np.isnan(duty_limit(np.empty(0)))
    assert duty_limit(np.ones(1)) == pytest.approx(0.95)


def test_chance_to_see_a_flux():
    """At a threshold of 5 sigma a flux of 5, 6, 7 sigma is seen with these chances."""
    seen = completeness.chance_seen(np.array([5.0, 6.0, 7.0]), np.ones(3), np.full(3, 5.0))
    assert seen == pytest.approx([0.5, 0.8413, 0.9772], abs=5e-5)


def looks(look, channel, share=None):
    """Looks with errors of 1 and thresholds of 5."""
    n = len(look)
    return Looks(np.array(look), np.array(channel), np.ones(n), np.full(n, 5.0), np.ones(n) if share is None else share)


def test_frames_of_one_look():
    """Frames of one channel are independent tries, another channel adds none, parts of a window add up."""
    assert weights(looks([0, 0, 1], [0, 0, 0]), 5.0) == pytest.approx([0.75, 0.5])
    assert weights(looks([0, 0], [0, 1]), 5.0) == pytest.approx([0.5])
    assert weights(looks([0, 0], [0, 0], np.array([0.2, 0.5])), 50.0) == pytest.approx([0.7])
    assert weights(looks([0, 0], [0, 0], np.array([0.8, 0.5])), 50.0) == pytest.approx([1.0])


def test_flux_limits():
    """A duty cycle of a half is excluded by ten looks only where they see enough of them; by three never."""
    ten = looks(range(10), [0] * 10)
    flux = completeness.flux_limit(ten, 0.5)
    assert duty_limit(weights(ten, flux)) == pytest.approx(0.5, abs=1e-6)
    assert duty_limit(weights(ten, flux - 0.1)) > 0.5 or np.isnan(duty_limit(weights(ten, flux - 0.1)))
    assert np.isnan(completeness.flux_limit(looks(range(3), [0] * 3), 0.5))


def test_epochs_and_cycles():
    """Frames nearer than the gap are one look, those without a clock are one together; cycles by the nearest pulse."""
    t = np.array([3.0, 0.0, np.nan, 0.2, 3.3, np.nan]) * DAY
    assert by_epoch(t, 0.5).tolist() == [1, 0, 2, 0, 1, 2]
    assert by_epoch(np.full(2, np.nan), 0.5).tolist() == [0, 0]
    assert by_epoch(np.empty(0), 0.5).tolist() == []
    cycle, share = by_cycle(np.array([0.0, 1000.0, 1020.0, 5500.0]), np.full(4, 40.0), 1000.0, 0.0, 60.0)
    assert cycle.tolist() == [0, 1, 1, 2]
    assert share == pytest.approx([40 / 60, 40 / 60, 30 / 60, 0.0])


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
