"""Many light curves at once: a row's result is its own, to the last byte, and gaps do not send it another way."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest

from hindlight import Block, Channel, Column, LightCurve, Rows, RowStatistic, Statistic, host
from hindlight.judge import judge
from hindlight.lightcurve import freeze
from hindlight.settings import Settings
from hindlight.testing import simulated_block, simulated_curve

SHIPPED = [s for s in host.load(host.spec_from(Settings(), [], [])).statistics if isinstance(s, RowStatistic)]


def gappy_block() -> Block:
    """Ten positions in 300 frames, the last two with few samples, some frames without a clock for all of them."""
    rng = np.random.default_rng(4)
    shape = (10, 300)
    t = np.broadcast_to(np.sort(rng.uniform(0, 3e8, 300)), shape) + rng.uniform(0, 5, (10, 1))
    t = np.where(rng.random(300) < 0.03, np.nan, t)
    err = rng.uniform(0.8, 1.2, shape)
    flux = 5 + err * rng.standard_normal(shape) + 4 * (np.arange(300) // 30 == np.arange(10)[:, None])
    gaps = rng.random(shape) < np.array([0.05] * 8 + [0.97, 0.997])[:, None]
    matrices = [freeze(np.where(gaps, np.nan, m)) for m in (t, np.full(shape, 60.0), flux, err, flux, err)]
    names = tuple(f"position {k}" for k in range(10))
    flags = freeze(np.zeros(shape), np.int64)
    return Block(names, Channel("a"), freeze(np.arange(300), np.int64), *matrices, flags, freeze(np.full(300, np.nan)))


@pytest.mark.parametrize("statistic", SHIPPED, ids=lambda s: s.name)
def test_a_row_does_not_depend_on_the_others(statistic):
    """Alone, with shorter or with longer ones: the same bytes."""
    lengths = (9, 40, 150, 300)
    curves = tuple(simulated_curve(n, seed=k, brighter=20.0) for k, n in enumerate(lengths))
    together = statistic.compute_rows(Rows.of(curves))
    for row, curve in enumerate(curves):
        alone = statistic.compute_rows(curve.rows)
        pair = statistic.compute_rows(Rows.of((curves[0], curve)))
        for name, values in together.items():
            assert values[row].tobytes() == alone[name][0].tobytes() == pair[name][1].tobytes(), name


def test_rows_are_the_light_curves_in_order_of_time():
    """Samples first, in each light curve's order, then NaN; means and quiet levels are those of the curves."""
    block = simulated_block()
    rows = block.rows
    for row, curve in enumerate(block.curves()):
        n = len(curve)
        assert rows.n[row] == n
        for name in ("t_tdb_s", "exposure_s", "flux", "flux_err"):
            np.testing.assert_array_equal(getattr(rows, name)[row, :n], getattr(curve, name))
            assert np.isnan(getattr(rows, name)[row, n:]).all()
        assert rows.weighted_mean[row] == pytest.approx(np.average(curve.flux, weights=curve.flux_err**-2))
        np.testing.assert_allclose(rows.above_quiet[row, :n], curve.above_quiet)


def test_groups_of_consecutive_samples():
    """Sums of weights and weighted means of groups; a row with fewer groups has none beyond its own."""
    curves = (
        LightCurve.from_arrays(np.arange(4.0), np.array([1.0, 3, 10, 20]), np.array([1.0, 1, 1, 0.5])),
        LightCurve.from_arrays(np.arange(2.0), np.array([5.0, 7]), np.ones(2)),
    )
    first = np.array([[True, False, True, False], [True, False, True, True]])
    group, weight, mean = Rows.of(curves).groups(first)
    assert group[0].tolist() == [0, 0, 1, 1]
    np.testing.assert_allclose(weight, [[2, 5], [2, 0]])
    np.testing.assert_allclose(mean, [[2, 18], [6, np.nan]])


def test_no_samples_at_all():
    """Empty light curves make empty rows."""
    rows = Rows.of((LightCurve.from_arrays(np.empty(0), np.empty(0), np.empty(0)),))
    assert rows.flux.shape == (1, 0)
    assert np.isnan(rows.weighted_mean).all()


@dataclass(frozen=True)
class Counted(Statistic):
    """Samples that a block has at each position; `compute` must not be needed."""

    columns = (Column("n", "samples of the block", unusual="high"),)
    min_points = 5

    def compute_block(self, block):
        assert np.isfinite(block.t_tdb_s[np.isfinite(block.flux)]).all()
        return {"n": np.isfinite(block.flux).sum(axis=1)}


@dataclass(frozen=True)
class Short(Statistic):
    """A statistic whose `compute_block` returns too few numbers."""

    columns = (Column("n", "samples of the light curve", unusual="high"),)

    def compute(self, curve):
        return {"n": len(curve)}

    def compute_block(self, block):
        return {"n": np.zeros(len(block) - 1)}


def test_compute_block_is_used_with_gaps_and_without_clocks():
    """Positions with too few samples are left out of the block, and samples without a time; the others keep their place."""
    block = gappy_block()
    timed = (np.isfinite(block.flux) & np.isfinite(block.t_tdb_s)).sum(axis=1)
    assert timed.min() < 5 <= np.sort(timed)[1]
    assert timed.sum() < np.isfinite(block.flux).sum()
    found = judge({"a": block}, [Counted()])
    assert not found.faults
    np.testing.assert_array_equal(found.values["a", "counted_n"], np.where(timed < 5, np.nan, timed))


@pytest.mark.parametrize("statistic", SHIPPED, ids=lambda s: s.name)
def test_judging_together_is_judging_one_by_one(statistic):
    """Every column of a block is that of its light curves, or blank where they are too short."""
    block = gappy_block()
    found = judge({"a": block}, [statistic])
    for row, curve in enumerate(block.curves()):
        given = curve.timed if statistic.uses_times else curve
        alone = statistic.compute(given) if len(given) >= statistic.min_points else None
        for column in statistic.columns:
            value = found.values["a", f"{statistic.name}_{column.name}"][row]
            blank = 0 if column.dtype == "int64" else np.nan
            np.testing.assert_array_equal(value, blank if alone is None else alone[column.name], column.name)


def test_a_block_of_the_wrong_length_is_a_fault_and_done_one_by_one():
    """What `compute_block` does wrong is recorded; `compute` answers."""
    found = judge({"a": simulated_block()}, [Short()])
    assert [fault.plugin for fault in found.faults] == ["short"]
    assert (found.values["a", "short_n"] > 20).all()
