"""Structure function: how much the flux differs between measurements, by the time between them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from hindlight import Column, Rows, RowStatistic, Statistic, hookimpl

Array = NDArray[np.float64]

DAY = 86400.0
LAGS = (0.0, 0.01, 0.1, 1.0, 10.0, 100.0, 1e3, 1e4, np.inf)  # days: edges of the bins, the lower one in the bin
FEWEST_PAIRS = 4


@dataclass(frozen=True)
class StructureFunction(RowStatistic):
    """First-order structure function D = mean (S_i - S_j)^2 (Simonetti et al. 1985, ApJ 296, 46) by decades of lag.

    Bins with fewer than four pairs do not count. In long light curves pairs are thinned by their distance in the order
    of time: each sample is paired with its eight successors and with four in every further doubling of the distance, so
    that the cost grows as n log n and no time scale is left out.
    """

    min_points: ClassVar[int] = 4
    columns = (
        Column("short", "mean squared flux difference in the bin of shortest lags, less that of the errors; NaN where "
               "no bin has four pairs", ucd="stat.variance;phot.flux", flux_power=2),
        Column("short_lag", "mean lag in that bin", unit="d", ucd="time.interval"),
        Column("long", "the same as `short` in the bin of longest lags; NaN where it is the only one",
               ucd="stat.variance;phot.flux", flux_power=2),
        Column("long_lag", "mean lag in that bin", unit="d", ucd="time.interval"),
        Column("rise", "logarithm (base 10) of the mean squared difference, errors not taken off, at longest lags over "
               "that at shortest; 0 for noise; NaN for a single bin", unusual="high", ucd="src.var.index"),
    )  # fmt: skip

    def compute_rows(self, rows: Rows) -> Mapping[str, NDArray[Any]]:
        """The declared columns."""
        n, lag, raw, noise = structure_function(rows.t_tdb_s / DAY, rows.flux, rows.flux_err, np.array(LAGS))
        populated = n >= FEWEST_PAIRS
        every = np.arange(len(rows))
        short, long = populated.argmax(axis=1), len(LAGS) - 2 - populated[:, ::-1].argmax(axis=1)
        any_bin, two = populated.any(axis=1), populated.sum(axis=1) > 1
        low, high = raw[every, short], raw[every, long]
        ratio = np.divide(high, low, out=np.full(len(rows), np.nan), where=two & (low > 0) & (high > 0))
        return {
            "short": np.where(any_bin, low - noise[every, short], np.nan),
            "short_lag": np.where(any_bin, lag[every, short], np.nan),
            "long": np.where(two, high - noise[every, long], np.nan),
            "long_lag": np.where(two, lag[every, long], np.nan),
            "rise": np.log10(ratio),
        }


def structure_function(
    t: Array, flux: Array, flux_err: Array, edges: Array
) -> tuple[NDArray[np.int64], Array, Array, Array]:
    """Pairs in each bin of lags, their mean lag, mean squared flux difference, and what of that the errors make.

    `t`, `flux`, `flux_err` have shape (n_rows, n_samples), NaN at the end; the results (n_rows, len(edges) - 1), NaN
    where there are no pairs.
    """
    n_rows, width = flux.shape
    bins = len(edges) - 1
    variance = flux_err**2
    size = n_rows * bins
    total = np.zeros((4, size))
    for k in separations(width):
        lag = t[:, k:] - t[:, :-k]
        inside = (lag >= edges[0]) & (lag < edges[-1])
        at = (np.searchsorted(edges, lag, side="right") - 1 + bins * np.arange(n_rows)[:, None])[inside]
        if at.size == 0:
            continue
        total[0] += np.bincount(at, minlength=size)
        square, noise = (flux[:, k:] - flux[:, :-k]) ** 2, variance[:, k:] + variance[:, :-k]
        for row, values in enumerate((lag, square, noise), start=1):
            total[row] += np.bincount(at, values[inside], size)
    n = total[0]
    means = np.divide(total[1:], n, out=np.full((3, size), np.nan), where=n > 0).reshape(3, n_rows, bins)
    return n.astype(np.int64).reshape(n_rows, bins), means[0], means[1], means[2]


def separations(n: int) -> Iterator[int]:
    """How far apart in the order of time samples are paired: 1 to 8, then four steps to every doubling; below n."""
    k = 1
    while k < n:
        yield k
        k += max(1, 2 ** (k.bit_length() - 3)) if k >= 8 else 1


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [StructureFunction]
