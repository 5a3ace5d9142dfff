"""The shape of the distribution of fluxes, whatever their order: lopsided or not, and how wide by robust measures."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from hindlight import Column, Rows, RowStatistic, Statistic, hookimpl

Array = NDArray[np.float64]

MAD_TO_SIGMA = 1.482602  # 1 / Phi^-1(3/4)
IQR_TO_SIGMA = 0.7413011  # half of it


@dataclass(frozen=True)
class Distribution(RowStatistic):
    """Moments and quantiles of the pulls, (S - median S) / err."""

    uses_times: ClassVar[bool] = False
    min_points: ClassVar[int] = 5
    columns = (
        Column("skewness", "skewness G1 of the pulls (Joanes & Gill 1998): positive for a source that flares, negative "
               "for one that fades; NaN where all pulls are equal", unusual="both", ucd="stat.param"),
        Column("quantile_ratio", "distance from the median of the pulls' 95 % quantile over that of their 5 % quantile; "
               "1 for noise, above for a source often bright; NaN where the latter is 0", ucd="stat.param"),
        Column("mad", "median absolute deviation of the pulls as a Gaussian sigma: scatter over errors, whatever few "
               "outliers do", unusual="high", ucd="stat.stdev"),
        Column("iqr", "range of the middle half of the pulls as a Gaussian sigma", ucd="stat.stdev"),
    )  # fmt: skip

    def compute_rows(self, rows: Rows) -> Mapping[str, NDArray[Any]]:
        """The declared columns. Quantiles are interpolated linearly between the sorted pulls."""
        median = quantiles(rows.flux, rows.n, 0.5)[:, None]
        pull = np.sort((rows.flux - median) / rows.flux_err, axis=1)
        low, quarter, middle, three, high = (quantiles(pull, rows.n, q) for q in (0.05, 0.25, 0.5, 0.75, 0.95))
        below = middle - low
        return {
            "skewness": skewness(np.where(rows.used, pull, 0), rows.n),
            "quantile_ratio": np.divide(high - middle, below, out=np.full(len(rows), np.nan), where=below > 0),
            "mad": MAD_TO_SIGMA * quantiles(np.abs(pull - middle[:, None]), rows.n, 0.5),
            "iqr": IQR_TO_SIGMA * (three - quarter),
        }


def quantiles(values: Array, n: NDArray[np.int64], q: float) -> Array:
    """The q-quantile of each row's n numbers (the rest NaN), shape (n_rows,), interpolated linearly."""
    ordered = np.sort(values, axis=1)
    at = (n - 1) * q
    lower = np.floor(at).astype(np.int64)
    every = np.arange(len(values))
    low, high = ordered[every, lower], ordered[every, np.minimum(lower + 1, n - 1)]
    return low + (high - low) * (at - lower)


def skewness(values: Array, n: NDArray[np.int64]) -> Array:
    """G1 = sqrt(n (n-1)) / (n-2) m3 / m2^1.5 (Joanes & Gill 1998, J. R. Stat. Soc. D 47, 183) of each row's first n.

    The rest of a row is 0. NaN for fewer than three numbers and where all are equal.
    """
    used = np.arange(values.shape[1]) < n[:, None]
    away = np.where(used, values - (Rows.sums(values) / n)[:, None], 0)
    m2, m3 = Rows.sums(away**2) / n, Rows.sums(away**3) / n
    cube = m2**1.5  # of a tiny m2 it is 0
    spread = np.where((n > 2) & (cube > 0), cube, np.nan)
    return np.sqrt(n * (n - 1.0)) / np.maximum(n - 2, 1) * m3 / spread


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [Distribution]
