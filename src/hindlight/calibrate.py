"""Columns and their null to p-values, thresholds and false-discovery rates. Pure numbers in and out.

A target is ranked within the set of itself and its controls: every calibrated column gives each member of the set a
rank p-value; the smallest is the member's combination, ties ordered by how far out that column lies, in the MAD of the
whole set; the combination is ranked in the same set. Under exchangeability the result is exact (Phipson & Smyth
2010, SAGMB 9, 39): P(p <= a) <= a.
"""

from __future__ import annotations

from collections.abc import Hashable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special, stats

from hindlight.lightcurve import FloatArray, IntArray

MAD_TO_SIGMA = 1.482602


@dataclass(frozen=True, eq=False)
class Null:
    """Controls of one set: oriented values of shape (n, k), larger more unusual, -inf for none; and what follows.

    `family` (k,) is the same number for columns that are of one kind, those of a statistic in several channels.
    """

    values: FloatArray
    sorted_values: FloatArray
    at_least: IntArray
    centre: FloatArray
    spread: FloatArray
    family: IntArray

    @property
    def n(self) -> int:
        """How many controls."""
        return len(self.values)


@dataclass(frozen=True)
class Rank:
    """Where a target stands: (r+1)/(n+1), which column decided it, and its distance beyond the controls in MAD."""

    p_value: float
    column: int
    beyond: float
    exceeded_by: int
    control_distances: FloatArray


def null_from(values: FloatArray, family: Sequence[Hashable] = ()) -> Null:
    """The null of controls' oriented values, shape (n, k); `family` names the kind of each column, () for k kinds."""
    ordered = np.sort(values, axis=0)
    n = len(values)
    at_least = np.empty(values.shape, np.int64)
    for k in range(values.shape[1]):
        at_least[:, k] = n - np.searchsorted(ordered[:, k], values[:, k], side="left")
    centre, spread = centre_and_spread(values)
    numbers: dict[Hashable, int] = {}
    kinds = [numbers.setdefault(kind, len(numbers)) for kind in family or range(values.shape[1])]
    return Null(values, ordered, at_least, centre, spread, np.array(kinds, np.int64))


def centre_and_spread(values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Median and MAD (as a sigma) of each column's finite values; a wider measure where more than half are equal.

    That is the distance of the 1 % quantile on the further side, which for a Gaussian is 2.33 sigma. Quantiles are values
    that occur: between many equal ones and a lone other an interpolated one would be next to nothing, and would put the
    lone one further out than any real source.
    """
    k = values.shape[1]
    centre, spread = np.zeros(k), np.ones(k)
    finite = np.isfinite(values)
    whole = finite.all(axis=0) & (len(values) > 0)
    centre[whole], spread[whole] = _middle_and_spread(values[:, whole])
    for j in np.flatnonzero(~whole & finite.any(axis=0)).tolist():
        (centre[j],), (spread[j],) = _middle_and_spread(values[finite[:, j], j : j + 1])
    return centre, spread


def _middle_and_spread(values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The same for columns of finite values, shape (n, k), n > 0."""
    if values.shape[1] == 0:
        return np.empty(0), np.empty(0)
    middle = np.median(values, axis=0)
    low = np.quantile(values, 0.01, axis=0, method="lower")
    high = np.quantile(values, 0.99, axis=0, method="higher")
    further = np.maximum(high - middle, middle - low) / 2.33
    measures = (MAD_TO_SIGMA * np.median(np.abs(values - middle), axis=0), further, np.ptp(values, axis=0))
    spread = np.ones(values.shape[1])
    for measure in reversed(measures):
        spread = np.where(measure > 0, measure, spread)
    return middle, spread


def rank(null: Null, target: FloatArray, weight: float = 1.0) -> Rank:
    """Rank a target's oriented values, shape (k,), within the set of itself and the controls; NaN p for no values.

    Where controls are alike in groups of `weight`, one target stands for so many of them: p = (r + weight) / (n + weight),
    which for whole groups is the exact rank among groups. Ties of the combination are ordered in the scale of the whole set:
    in that of the controls alone, which each of them has a part in, a target would be further out than it is. The distance
    that is returned, and those of the controls, are in the latter: a source is not to set the scale of how far out it is.
    """
    n = null.n
    if n == 0 or not np.isfinite(target).any():
        return Rank(float("nan"), -1, float("nan"), 0, np.empty(0))
    above = np.array([n - np.searchsorted(null.sorted_values[:, k], t, side="left") for k, t in enumerate(target)])
    target_p = np.where(np.isfinite(target), (above + 1) / (n + 1), 1.0)
    control_p = (null.at_least + (target[None, :] >= null.values)) / (n + 1)
    control_p = np.where(np.isfinite(null.values), control_p, 1.0)
    column, best, distance = _combination(target_p[None, :], (target[None, :] - null.centre) / null.spread)
    _, control_best, control_distance = _combination(control_p, (null.values - null.centre) / null.spread)
    tied = control_best == best[0]
    # Of two each is as far from their middle as the other: the target is first then, with a p that says nothing.
    ahead = _as_far_in_set(null, control_p, tied, target, target_p) if n > 1 else control_distance[tied] >= distance[0]
    r = int((control_best < best[0]).sum() + ahead.sum())
    return Rank((r + weight) / (n + weight), int(column[0]), float(distance[0]), r, control_distance)


def _as_far_in_set(
    null: Null, control_p: FloatArray, tied: NDArray[np.bool_], target: FloatArray, target_p: FloatArray
) -> NDArray[np.bool_]:
    """Which of the controls that have a target's combination are as far out as it is, in the scale of the whole set."""
    p = np.concatenate((target_p[None, :], control_p[tied]))
    deciding = (p == target_p.min()).any(axis=0)
    values = np.concatenate((target[None, deciding], null.values[:, deciding]))
    centre, spread = centre_and_spread(values)
    spread = _one_scale(values, centre, spread, null.family[deciding])
    members = np.concatenate(([True], tied))
    distance = _combination(p[:, deciding], (values[members] - centre) / spread)[2]
    return np.asarray(distance[1:] >= distance[0])


def _one_scale(values: FloatArray, centre: FloatArray, spread: FloatArray, family: IntArray) -> FloatArray:
    """The spread of each column (k,), one for all columns of a family of which more than half of the values are equal.

    There the few others set the scale: a lone value is as far out as any other lone one, be it large or next to nothing.
    Among channels of one statistic that can be told.
    """
    equal = (values == centre).mean(axis=0) > 0.5
    shared = spread.copy()
    for kind in np.unique(family[equal]):
        mine = equal & (family == kind)
        shared[mine] = spread[mine].max()
    return shared


def furthest_columns(null: Null, values: FloatArray) -> IntArray:
    """For each row of oriented values (m, k) the column in which it is furthest beyond the controls; shape (m,)."""
    above = np.empty(values.shape)
    for k in range(values.shape[1]):
        above[:, k] = null.n - np.searchsorted(null.sorted_values[:, k], values[:, k], side="left")
    p = np.where(np.isfinite(values), above, null.n + 1.0)
    return _combination(p, (values - null.centre) / null.spread)[0]


def _combination(p: FloatArray, distance: FloatArray) -> tuple[IntArray, FloatArray, FloatArray]:
    """For each row of (m, k): the column with the smallest p (of several, the one furthest out), its p and distance."""
    best = p.min(axis=1)
    masked = np.where(p == best[:, None], distance, -np.inf)
    column = masked.argmax(axis=1)
    return column, best, masked[np.arange(len(p)), column]


def leave_one_out(null: Null) -> FloatArray:
    """The p-value of every control ranked among all of them, shape (n,); 1 where nothing was measured."""
    if null.values.size == 0:
        return np.ones(null.n)
    p = np.where(np.isfinite(null.values), null.at_least / null.n, 1.0)
    _, best, distance = _combination(p, (null.values - null.centre) / null.spread)
    order = np.lexsort((-distance, best))
    key = np.stack([best, -distance], axis=1)[order]
    new = np.concatenate(([True], (key[1:] != key[:-1]).any(axis=1)))
    last = np.append(np.flatnonzero(new)[1:], null.n)
    result = np.empty(null.n)
    result[order] = last[np.cumsum(new) - 1] / null.n
    return result


def false_discovery(p_values: FloatArray, any_dependence: bool = False) -> FloatArray:
    """Benjamini-Hochberg (1995, JRSS B 57, 289) adjusted p-values; NaN stays NaN and does not count as a trial.

    With `any_dependence` those of Benjamini & Yekutieli (2001, Ann. Stat. 29, 1165), which hold whatever the p-values have
    in common: larger by sum(1 / i) over the trials.
    """
    adjusted = np.full(p_values.shape, np.nan)
    known = np.isfinite(p_values)
    if known.any():
        adjusted[known] = stats.false_discovery_control(p_values[known], method="by" if any_dependence else "bh")
    return adjusted


def controls_needed(n_targets: int, level: float, any_dependence: bool = False) -> int:
    """How many controls let a lone candidate among `n_targets` get below the level: targets / (n + 1) < level.

    With `any_dependence` times sum(1 / i) over the targets, see `false_discovery`.
    """
    factor = float((1.0 / np.arange(1, n_targets + 1)).sum()) if any_dependence else 1.0
    return max(1, int(np.floor(factor * n_targets / level * (1 + 1e-12))))  # the level itself is not below it


def threshold(maxima: FloatArray, false_alarms: float) -> float:
    """The value above which at most a fraction `false_alarms` of the controls' maxima lie; NaN for no controls.

    With too few controls for that rate it is the highest of them: the rate is then 1/(n+1).
    """
    finite = np.sort(maxima[np.isfinite(maxima)])[::-1]
    if finite.size == 0:
        return float("nan")
    allowed = int(np.floor(false_alarms * (finite.size + 1))) - 1
    return float(finite[max(0, min(allowed, finite.size - 1))])


def gaussian_threshold(n_samples: int, false_alarms: float) -> float:
    """The same for Gaussian noise and `n_samples` independent looks: Sidak's correction."""
    if n_samples < 1:
        return float("nan")
    return float(stats.norm.isf(-np.expm1(np.log1p(-false_alarms) / n_samples)))


def robust_threshold(values: FloatArray, false_alarms: float) -> float:
    """Median + k MAD-sigma of the controls with Gaussian k for this rate, at least k: unmoved by a few real sources.

    NaN for no controls.
    """
    k = float(stats.norm.isf(false_alarms))
    finite = values[np.isfinite(values)]
    if finite.size == 0:
        return float("nan")
    centre = float(np.median(finite))
    sigma = MAD_TO_SIGMA * float(np.median(np.abs(finite - centre)))
    return max(k, centre + k * max(1.0, sigma))


def upper_bounds(flux: FloatArray, error: FloatArray, confidence: float = 0.95) -> FloatArray:
    """Upper bounds on fluxes that cannot be negative, flat prior (Helene 1983, NIM 212, 319); NaN for no error."""
    known = np.isfinite(flux) & np.isfinite(error) & (error > 0)
    sigma = np.where(known, error, 1.0)
    z = np.where(known, flux, 0.0) / sigma
    bound = sigma * (z - special.ndtri_exp(np.log1p(-confidence) + stats.norm.logcdf(z)))
    return np.asarray(np.where(known, bound, np.nan))


def upper_bound(flux: float, error: float, confidence: float = 0.95) -> float:
    """`upper_bounds` for one flux."""
    return float(upper_bounds(np.array([flux]), np.array([error]), confidence)[0])


def extra_scatter(flux: FloatArray, flux_err: FloatArray) -> float:
    """Maximum-likelihood scatter beyond the errors about a common mean, 0 where the errors suffice; NaN for n < 3.

    Solves the score equation for s: maximises -sum[r^2/(e^2+s^2) + ln(e^2+s^2)]/2 over the mean and s >= 0.
    """
    if flux.size < 3:
        return float("nan")

    def score(variance: float) -> float:
        total = flux_err**2 + variance
        mean = float((flux / total).sum() / (1 / total).sum())
        return float((((flux - mean) ** 2 - total) / total**2).sum())

    if score(0.0) <= 0:
        return 0.0
    high = float(np.ptp(flux)) ** 2
    low = 0.0
    for _ in range(200):
        middle = (low + high) / 2
        low, high = (middle, high) if score(middle) > 0 else (low, middle)
    return float(((low + high) / 2) ** 0.5)


def runs(mask: NDArray[np.bool_]) -> int:
    """How many unbroken runs of True."""
    return int(np.count_nonzero(np.diff(np.concatenate(([0], mask.astype(int)))) == 1))
