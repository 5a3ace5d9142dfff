"""Arithmetic that the fits of comparisons share: medians of what is known, scatter beyond errors, what is connected.

Matrices have shape (n_frames, n_sources), NaN or `known` false where a frame has no flux of a source.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, sparse, special
from scipy.sparse import csgraph

from hindlight.background import MAD_TO_SIGMA
from hindlight.lightcurve import FloatArray, IntArray

CLIPS = 5
HUBER = 1.345  # 95 % efficiency for normal errors (P. J. Huber 1981, Robust Statistics)
VARIABLE_FACTOR = 3.0  # a comparison that scatters so many times more than the typical one is no comparison
VARIABLE_P = 1e-6


def median_of(values: FloatArray, axis: int = 0) -> FloatArray:
    """The median of what is not NaN, NaN where all is."""
    some = np.isfinite(values).any(axis=axis)
    filled = np.where(np.expand_dims(some, axis), values, 0.0)
    return np.where(some, np.nanmedian(filled, axis=axis), np.nan)


def excess_scatter(residual: FloatArray, error: FloatArray) -> float:
    """Scatter s >= 0 beyond the errors by maximum likelihood, for residuals about a known mean; NaN without any.

    Outliers beyond four times the typical pull are left aside, the scatter found so far counted among the errors: by
    the errors alone the brightest sources would be outliers. s maximises -sum(r^2 / (e^2 + s^2) + ln(e^2 + s^2)) / 2.
    """
    if len(residual) == 0:
        return float("nan")
    scatter = 0.0
    kept = np.zeros(len(residual), bool)
    for _ in range(CLIPS):
        before, pull = kept, np.abs(residual) / np.hypot(error, scatter)
        kept = pull <= 4.0 * max(1.0, MAD_TO_SIGMA * float(np.median(pull)))
        if np.array_equal(kept, before):
            break
        scatter = _most_likely(residual[kept] ** 2, error[kept] ** 2)
    return scatter


def _most_likely(square: FloatArray, variance: FloatArray) -> float:
    def score(s2: float) -> float:
        total = variance + s2
        return float((square / total**2 - 1.0 / total).sum())

    if score(0.0) <= 0.0:
        return 0.0
    high: float = float(square.max())
    if score(high) >= 0.0:
        return float(high**0.5)
    best = float(optimize.brentq(score, 0.0, high, xtol=1e-12, rtol=1e-9))
    return float(best**0.5)


def column_scatter(residual: FloatArray, error: FloatArray, known: NDArray[np.bool_]) -> float:
    """The same for one source, all of shape (n_frames,); NaN where fewer than three frames know it."""
    return excess_scatter(residual[known], error[known]) if known.sum() >= 3 else float("nan")


def frame_scatter(residual: FloatArray, error: FloatArray, known: NDArray[np.bool_], common: float) -> float:
    """A frame's own scatter where it is significantly larger than the channel's, else the channel's."""
    n = int(known.sum())
    if n < 5:
        return common
    chi2 = float((residual[known] ** 2 / (error[known] ** 2 + common**2)).sum())
    if special.chdtrc(n - 1, chi2) > 1e-3:
        return common
    return max(common, excess_scatter(residual[known], error[known]))


def most_variable(
    residual: FloatArray, error: FloatArray, known: NDArray[np.bool_], scatter: FloatArray, common: float
) -> int | None:
    """The source that scatters most, if that is far more than the typical one does and no chance; None otherwise."""
    if known.any(axis=0).sum() <= 3 or not np.isfinite(scatter).any():
        return None
    ratio = np.nan_to_num(scatter, nan=-1.0)
    at = int(ratio.argmax())
    typical = max(float(np.nanmedian(scatter)), 1e-3)
    mine = known[:, at]
    chi2 = float((residual[mine, at] ** 2 / (error[mine, at] ** 2 + common**2)).sum())
    chance = float(special.chdtrc(int(mine.sum()) - 1, chi2))
    return at if scatter[at] > VARIABLE_FACTOR * typical and chance < VARIABLE_P else None


def connected(known: NDArray[np.bool_]) -> IntArray:
    """The connected part of each frame, then of each source."""
    graph = sparse.bmat([[None, sparse.csr_matrix(known)], [sparse.csr_matrix(known.T), None]])
    labels: IntArray = csgraph.connected_components(graph, directed=False)[1]
    return labels
