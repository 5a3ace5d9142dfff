"""What the largest of some controls allow of the distribution beyond them: bounds, and whether the tail fits at all.

Pure numbers in and out. A tail is only asked for where controls cannot decide, and what it gives is marked wherever it
appears.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy import stats

from hindlight.lightcurve import FloatArray

TAIL_CONFIDENCE = 0.95
FEWEST_EXCEEDANCES = 10
TAIL_REACH = 1e-3  # of what one control weighs: no smaller chance is told by a tail, however far out a target is
SHAPES = np.concatenate(([0.0], np.geomspace(1e-3, 5.0, 160)))
SCALES = np.geomspace(0.02, 50.0, 400)
LOGS_AT_ONCE = 25  # factors: no product of so many, each below the largest shape / scale * excess, overflows
MISFIT = 0.01  # exceedances that a tail fitted to them gives with less than this chance are not of its form
BOOTSTRAPS = 999
BOOTSTRAP_SHAPES = np.array([-0.9, -0.6, -0.4, -0.2, -0.1, 0.0, 0.1, 0.2, 0.4, 0.8, 1.5, 3.0, 5.0])
HEAVIER = np.geomspace(3e-3, 1e3, 60)  # shape / scale that are tried, per median excess
LIGHTER = np.concatenate((np.linspace(0.02, 0.9, 14), 1 - np.geomspace(0.08, 1e-3, 10)))  # and below zero, per largest
LIGHTEST = -1.0  # values spread evenly up to an end; the likelihood of still lighter ones has no maximum


@dataclass(frozen=True, eq=False)
class Tail:
    """What the largest of some controls' distances allow of the distribution beyond them.

    Generalised Pareto tails, shape >= 0, that start at `start`, beyond which lies `fraction` of the controls by the
    distances `excess` (m,); `shape` and `scale` (n,) are those within the 95 % profile-likelihood interval of the tail
    probability. No chance below `least` is told: beyond a few decades a fit says what form was chosen for it, and changes by
    orders of magnitude with a few controls.
    """

    fraction: float
    start: float
    shape: FloatArray
    scale: FloatArray
    least: float
    excess: FloatArray

    def beyond(self, distance: float) -> float:
        """The largest chance that any of the tails gives to lie beyond a distance, `least` at least: an upper bound."""
        shape, scale = self.shape[:, None], self.scale[:, None]
        chance = float(self.fraction * np.exp(-_log_terms(shape, scale, np.array([distance - self.start])).min()))
        return max(chance, self.least)

    def reached(self, chance: float) -> float:
        """The distance beyond which that bound would be the given chance, were there no `least`."""
        log = np.log(self.fraction / chance)
        curved = self.shape > 0
        shape = np.where(curved, self.shape, 1.0)
        return float(self.start + (self.scale * np.where(curved, np.expm1(shape * log) / shape, log)).max())


@dataclass(frozen=True)
class Extrapolation:
    """What a tail says of one target.

    bound
        The largest chance of a blank position beyond the target; NaN where no tail can be fitted, or none of them fits.
    shape
        The most likely one, 0 or more; NaN where no tail was fitted, as in `fit_p`.
    n
        How many controls' distances it was fitted to; 0 for none.
    fit_p
        The chance that so many distances beyond its start are as unlike such a tail as these.
    """

    bound: float = float("nan")
    shape: float = float("nan")
    n: int = 0
    fit_p: float = float("nan")

    @property
    def rejected(self) -> bool:
        """Whether there is a tail that does not fit."""
        return self.fit_p < MISFIT


def tail_of(distances: FloatArray, exceedances: int, weight: float = 1.0) -> Tail | None:
    """The tail of the controls' distances, shape (n,), fitted to the largest `exceedances`; None where none can be.

    The bound it gives is the upper end of the 95 % profile-likelihood interval. The plain estimate (Knijnenburg et al.
    2009, Bioinformatics 25, i161) understates heavy tails and is not used. Controls alike in groups of `weight` tell that
    much less: more of them are used, and the likelihood counts accordingly.
    """
    finite = np.sort(distances[np.isfinite(distances)])[::-1]
    m = min(round(exceedances * weight), finite.size // 4)
    if m < FEWEST_EXCEEDANCES * weight:
        return None
    start = float((finite[m - 1] + finite[m]) / 2)
    excess = finite[:m] - start
    scale0 = float(excess.mean())
    if scale0 <= 0:
        return None
    shape, scale = SHAPES[:, None], SCALES[None, :] * scale0
    likelihood = -m * np.log(scale) - (shape + 1) * _log_terms(shape, scale, excess)
    inside = likelihood >= likelihood.max() - weight * stats.chi2.isf(1 - TAIL_CONFIDENCE, 1) / 2
    row, column = np.nonzero(inside)
    return Tail(m / finite.size, start, SHAPES[row], scale[0, column], TAIL_REACH * weight / finite.size, excess)


def extrapolate(distances: FloatArray, target: float, exceedances: int, weight: float = 1.0) -> Extrapolation:
    """What the tail of the controls' distances says of a target that lies beyond all of them; nothing of any other.

    See `tail_of` for the bound, `goodness_of_fit` for whether it holds.
    """
    if not target > np.max(distances, initial=-np.inf, where=np.isfinite(distances)) or not np.isfinite(target):
        return Extrapolation()
    tail = tail_of(distances, exceedances, weight)
    if tail is None:
        return Extrapolation()
    shape, fit_p = goodness_of_fit(tail.excess, weight)
    bound = float("nan") if fit_p < MISFIT else tail.beyond(target)
    return Extrapolation(bound, shape, len(tail.excess), fit_p)


def goodness_of_fit(excess: FloatArray, weight: float = 1.0) -> tuple[float, float]:
    """The most likely shape >= 0 of the tail of excesses, shape (m,), and the chance of a fit no better than that.

    Where a tail lighter than an exponential fits better, it is that one's chance: such excesses have a bound that is too
    high, which is no misfit. By a bootstrap of draws from the fitted tail, fitted alike, always the same draws; the
    statistic is that of `upper_anderson_darling`. Of excesses alike in groups of `weight` it is so many times as large as of
    one of each, since it grows with their number alone.
    """
    kept, chances = 0.0, []
    for lightest in (0.0, LIGHTEST):
        shape, scale = most_likely(excess[None, :], lightest)
        statistic = float(upper_anderson_darling(excess[None, :], shape, scale)[0]) / weight
        nearest = int(np.abs(BOOTSTRAP_SHAPES - shape[0]).argmin())
        drawn = _bootstrapped(max(2, round(len(excess) / weight)), nearest, lightest)
        as_large = len(drawn) - int(np.searchsorted(drawn, statistic, side="left"))
        chances.append((as_large + 1) / (len(drawn) + 1))
        kept = max(kept, float(shape[0]))
    return kept, max(chances)


@lru_cache(maxsize=512)
def _bootstrapped(m: int, index: int, lightest: float) -> FloatArray:
    """The statistic of `BOOTSTRAPS` draws of m excesses from the tail of that shape, ascending; the scale has no part in it."""
    shape = BOOTSTRAP_SHAPES[index]
    drawn = np.random.default_rng([m, index]).exponential(size=(BOOTSTRAPS, m))
    excess = np.expm1(shape * drawn) / shape if shape != 0 else drawn
    return np.sort(upper_anderson_darling(excess, *most_likely(excess, lightest)))


def most_likely(excess: FloatArray, lightest: float = 0.0) -> tuple[FloatArray, FloatArray]:
    """Shape, not below `lightest`, and scale of the tail most likely for each row of excesses (k, m) >= 0; each (k,).

    The likelihood of a generalised Pareto tail has its maximum over the scale where shape = mean log(1 + r y) for r =
    shape / scale (Grimshaw 1993, Technometrics 35, 185), so that r alone is searched for, on a grid. Excesses of exactly
    zero, where values are equal, would make a scale of zero the likeliest: it is kept within the bounds of `tail_of`.
    """
    middle = np.median(excess, axis=1)
    unit = np.where(middle > 0, middle, excess.mean(axis=1))
    y = excess / unit[:, None]
    shape, scale = np.zeros(len(y)), y.mean(axis=1)
    best = -np.log(scale) - 1.0
    ratios = [*np.outer(HEAVIER, np.ones(len(y)))]
    if lightest < 0:
        ratios += [*-np.outer(LIGHTER, 1 / y.max(axis=1))]
    for ratio in ratios:
        curved = np.log1p(ratio[:, None] * y).mean(axis=1)
        width = curved / ratio
        likelihood = -np.log(width) - curved - 1.0
        better = (likelihood > best) & (curved >= lightest) & (curved <= SHAPES[-1]) & (width >= SCALES[0])
        best, shape, scale = (
            np.where(better, new, old) for new, old in ((likelihood, best), (curved, shape), (width, scale))
        )
    return shape, scale * unit


def upper_anderson_darling(excess: FloatArray, shape: FloatArray, scale: FloatArray) -> FloatArray:
    """How unlike the rows of excesses (k, m) are to tails of these shapes and scales (k,), above all far out; shape (k,).

    m times the integral of (F_m - F)^2 / (1 - F) dF, the Anderson-Darling statistic with its weight on the upper tail alone
    (Sinclair, Spurr & Ahmad 1990, Commun. Stat. Theory Methods 19, 3677; from memory): m/2 - 2 sum F_i -
    sum (2 - (2i - 1) / m) log(1 - F_i). Finite where excesses are zero, as those of equal values are.
    """
    y = np.sort(excess, axis=1) / scale[:, None]
    m = y.shape[1]
    curved = (shape != 0)[:, None]
    k = np.where(curved, shape[:, None], 1.0)
    survival = np.where(curved, -np.log1p(np.where(curved, k * y, 0.0)) / k, -y)  # its logarithm
    weights = 2 - (2 * np.arange(1, m + 1) - 1) / m
    return np.asarray(m / 2 + 2 * np.expm1(survival).sum(axis=1) - (weights * survival).sum(axis=1))


def _log_terms(shape: FloatArray, scale: FloatArray, excess: FloatArray) -> FloatArray:
    """Sum over the excesses of log(1 + shape y / scale) / shape, and of y / scale where the shape is zero."""
    ratio = shape / scale
    logs = np.zeros(ratio.shape)
    for start in range(0, len(excess), LOGS_AT_ONCE):  # one logarithm of a product is much faster than many
        product = np.ones(ratio.shape)
        for y in excess[start : start + LOGS_AT_ONCE]:
            product *= 1.0 + ratio * y
        logs += np.log(product)
    return np.where(shape > 0, logs / np.where(shape > 0, shape, 1.0), excess.sum() / scale)
