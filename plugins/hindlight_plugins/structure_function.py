"""Structure function: how much the flux differs between measurements, by the time between them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from hindlight import Column, Rows, RowStatistic, Statistic, hookimpl, setting

Array = NDArray[np.float64]

DAY = 86400.0
LAGS = (0.0, 0.01, 0.1, 1.0, 10.0, 100.0, 1e3, 1e4, np.inf)  # days: edges of the bins, the lower one in the bin
FEWEST_PAIRS = 4
MOST_PAIRS = 100_000  # held at once: more do not fit into a cache


@dataclass(frozen=True)
class StructureFunction(RowStatistic):
    """First-order structure function D = mean (S_i - S_j)^2 (Simonetti et al. 1985, ApJ 296, 46) by decades of lag.

    Bins with fewer than four pairs do not count. In long light curves pairs are thinned by their distance in the order
    of time: each sample is paired with its eight successors and with four in every further doubling of the distance, so
    that the cost grows as n log n and no time scale is left out.

    Pairs share samples, and samples of an epoch share what the source did then, so that errors are told by leaving out
    one epoch after the other (a jackknife; Arvesen 1969, Ann. Math. Stat. 40, 2076, for means over pairs). Drawing epochs
    with replacement would pair an epoch with its own copy, at no lag and no difference. At lags near the whole span only
    the first and the last epochs have pairs, and the error of so few is too large (1.8 times for two at either end).
    """

    min_points: ClassVar[int] = 4
    columns = (
        Column("short", "mean squared flux difference in the bin of shortest lags, less that of the errors; NaN where "
               "no bin has four pairs", ucd="stat.variance;phot.flux", flux_power=2),
        Column("short_err", "its 1-sigma error, by leaving out one epoch after the other; NaN where without one no pair "
               "is left", ucd="stat.error;phot.flux", flux_power=2),
        Column("short_lag", "mean lag in that bin", unit="d", ucd="time.interval"),
        Column("long", "the same as `short` in the bin of longest lags; NaN where it is the only one",
               ucd="stat.variance;phot.flux", flux_power=2),
        Column("long_err", "1-sigma error of `long`, as `short_err`", ucd="stat.error;phot.flux", flux_power=2),
        Column("long_lag", "mean lag in that bin", unit="d", ucd="time.interval"),
        Column("rise", "logarithm (base 10) of the mean squared difference, errors not taken off, at longest lags over "
               "that at shortest; 0 for noise; NaN for a single bin", unusual="high", ucd="src.var.index"),
    )  # fmt: skip
    gap_days: float = setting(0.5, "samples further apart than this are separate epochs", unit="day", minimum=0)

    def compute_rows(self, rows: Rows) -> Mapping[str, NDArray[Any]]:
        """The declared columns."""
        step = max(1, MOST_PAIRS // max(1, how_many_pairs(rows.flux.shape[1])))
        parts = [self._some(rows, slice(k, k + step)) for k in range(0, len(rows), step)]
        return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}

    def _some(self, rows: Rows, part: slice) -> dict[str, Array]:
        """The columns of some rows, few enough for all their pairs to be held at once."""
        t = rows.t_tdb_s[part]
        pairs = Pairs.of(t / DAY, rows.flux[part], rows.flux_err[part], np.array(LAGS))
        n, lag, raw, noise = pairs.means()
        populated = n >= FEWEST_PAIRS
        every = np.arange(len(t))
        short, long = populated.argmax(axis=1), len(LAGS) - 2 - populated[:, ::-1].argmax(axis=1)
        any_bin, two = populated.any(axis=1), populated.sum(axis=1) > 1
        low, high = raw[every, short], raw[every, long]
        epoch = np.cumsum(np.diff(t, axis=1, prepend=t[:, :1]) > self.gap_days * DAY, axis=1)
        short_err, long_err = pairs.epoch_errors((short, long), epoch)
        both = two & (low > 0) & (high > 0)
        return {
            "short": np.where(any_bin, low - noise[every, short], np.nan),
            "short_err": np.where(any_bin, short_err, np.nan),
            "short_lag": np.where(any_bin, lag[every, short], np.nan),
            "long": np.where(two, high - noise[every, long], np.nan),
            "long_err": np.where(two, long_err, np.nan),
            "long_lag": np.where(two, lag[every, long], np.nan),
            "rise": np.where(both, np.log10(np.where(both, high, 1)) - np.log10(np.where(both, low, 1)), np.nan),
        }


@dataclass(frozen=True, eq=False)
class Pairs:
    """All pairs of samples of many rows: arrays of shape (n_rows, n_pairs), in order of separation, then time.

    cell
        Which bin the lag falls into, from 1; 0 and n_bins + 1 for none; plus n_bins + 2 for each row before.
    lag, square, noise
        Time between them, squared flux difference, and the sum of their squared errors; NaN for what is no pair.
    n_bins
        How many bins there are.
    """

    cell: NDArray[np.int64]
    lag: Array
    square: Array
    noise: Array
    n_bins: int

    @classmethod
    def of(cls, t: Array, flux: Array, flux_err: Array, edges: Array) -> Pairs:
        """Of samples, shape (n_rows, n_samples), in order of time and NaN at the end of a row; `edges` are the bins'."""
        lag, square, noise = pairwise(np.subtract, t), pairwise(np.subtract, flux), pairwise(np.add, flux_err**2)
        square *= square
        cell = np.searchsorted(edges, lag.ravel(), side="right").reshape(lag.shape)
        cell += np.arange(len(t))[:, None] * (len(edges) + 1)
        return cls(cell, lag, square, noise, len(edges) - 1)

    def means(self) -> tuple[NDArray[np.int64], Array, Array, Array]:
        """How many there are in each bin, their mean lag, mean squared flux difference, and what of that errors make;

        shapes (n_rows, n_bins), NaN where there are no pairs.
        """
        cell, shape = self.cell.ravel(), (len(self.cell), self.n_bins + 2)
        size = shape[0] * shape[1]
        n = np.bincount(cell, minlength=size).reshape(shape)[:, 1:-1]
        sums = (np.bincount(cell, v.ravel(), size).reshape(shape)[:, 1:-1] for v in (self.lag, self.square, self.noise))
        lag, raw, noise = (np.divide(each, n, out=np.full(n.shape, np.nan), where=n > 0) for each in sums)
        return n, lag, raw, noise

    def epoch_errors(self, bins: Sequence[NDArray[np.int64]], epoch: NDArray[np.int64]) -> Array:
        """Errors of mean squared difference less that of the errors, for some choices of a bin of each row.

        `bins` holds arrays of shape (n_rows,), `epoch` has shape (n_rows, n_samples), numbered from 0; the result
        (len(bins), n_rows). With D of all pairs, D_e of those without a member in epoch e, and m epochs that have pairs:
        err^2 = (m - 1) / m sum_e (D_e - D)^2. NaN where all pairs have a member in one epoch.
        """
        n_rows, width = len(epoch), int(epoch.max(initial=0)) + 1
        every, size = np.arange(n_rows), n_rows * width
        chosen = np.zeros((n_rows, self.n_bins + 2), np.int64)  # 0: in none of the bins
        for number, each in reversed(list(enumerate(bins, start=1))):
            chosen[every, each + 1] = number * size
        choice = chosen.ravel()[self.cell]
        value = self.square - self.noise
        own = epoch + every[:, None] * width
        later, earlier = pairwise(np.maximum, own), pairwise(np.minimum, own)
        apart = choice * (later != earlier)  # within an epoch a pair counts once
        shape = (len(bins) + 1, n_rows, width)

        def sums(place: NDArray[np.int64]) -> list[NDArray[Any]]:
            """Pairs and their values by choice, row and epoch."""
            found = (np.bincount(place.ravel(), v, size * shape[0]) for v in (None, value.ravel()))
            return [each.reshape(shape)[1:] for each in found]

        by_later, by_earlier = sums(choice + later), sums(apart + earlier)
        n, total = (np.cumsum(each, axis=2)[..., -1:] for each in by_later)
        n_of, sum_of = (a + b for a, b in zip(by_later, by_earlier, strict=True))
        without = np.divide(total - sum_of, n - n_of, out=np.full(n_of.shape, np.nan), where=n > n_of)
        m = (n_of > 0).sum(axis=2)
        squares = np.cumsum(np.where(n_of > 0, (without - total / np.maximum(n, 1)) ** 2, 0.0), axis=2)[..., -1]
        return np.asarray(np.sqrt(np.where(m > 1, (m - 1) / np.maximum(m, 1) * squares, np.nan)))


def pairwise(combine: np.ufunc, values: NDArray[Any]) -> NDArray[Any]:
    """`combine` of the later and the earlier member of each pair, shape (n_rows, n_pairs), of (n_rows, n_samples)."""
    n = values.shape[1]
    found, at = np.empty((len(values), how_many_pairs(n)), values.dtype), 0
    for k in separations(n):
        combine(values[:, k:], values[:, :-k], out=found[:, at : at + n - k])
        at += n - k
    return found


def how_many_pairs(n: int) -> int:
    """How many pairs n samples make."""
    return sum(n - k for k in separations(n))


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
