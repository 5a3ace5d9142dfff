"""Bayesian blocks: a light curve as the piecewise constant function that fits best for its number of steps.

Most noise is a single block, so that the number of blocks and their excess say nothing of how unusual a light curve is
among others of one block. What is ranked is therefore the one interval that stands highest above all other samples: the
best division with two steps, which every light curve has.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from hindlight import Column, Rows, RowStatistic, Statistic, hookimpl, setting

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

MOST_PIECES = 2000  # the time taken grows with their square


@dataclass(frozen=True)
class BayesianBlocks(RowStatistic):
    """The block that stands highest above the quiet level, of those that Scargle et al. 2013 (ApJ 764, 167) find.

    Edges lie halfway between samples; samples of the same time share a block, and so do successive ones, as few as will
    do, where there are more than 2000. A light curve of one block has no excess. In channels whose flux may be negative
    (Stokes Q, U, V) the excess of either sign counts.
    """

    columns = (
        Column("n", "how many blocks of constant flux describe the light curve", dtype="int64", ucd="meta.number"),
        Column("excess", "highest mean flux of a block above the quiet level over the error of the difference; 0 where "
               "there is one block only", ucd="stat.snr;stat.max"),
        Column("start", "when that block begins, halfway from the sample before, seconds from J2000.0 TDB at the "
               "barycentre; NaN where there is one block only", unit="s", ucd="time.start", is_time=True),
        Column("length", "how long that block lasts, from edge to edge; NaN where there is one block only", unit="s",
               ucd="time.duration"),
        Column("interval", "highest mean flux of successive samples above the mean of all others over the error of the "
               "difference, for the best choice of such an interval", unusual="high", ucd="stat.snr;stat.max"),
        Column("price", "highest price of a block at which the light curve is still more than one; a prior's rate of "
               "false alarms is the share of blank positions whose own is higher than its price", ucd="stat.likelihood"),
    )  # fmt: skip
    min_points: ClassVar[int] = 3
    # Fixed: the table of priors for a rate of false alarms (eq. 21 there) is for Gaussian errors, and what is unusual the
    # controls say. At 4 a block in the middle must stand 4 sigma above its surroundings.
    price: float = setting(4.0, "gain in log-likelihood that one more block must bring (ncp_prior)", minimum=0)

    def compute_rows(self, rows: Rows) -> Mapping[str, NDArray[Any]]:
        """The declared columns."""
        apart, pieces, weight, away = _pieces(rows)
        first = apart & np.take_along_axis(first_of_blocks(weight, away, self.price), pieces, axis=1)
        interval, price = best_of_few(weight, away, rows.channel.signed)
        price = highest_price(weight, away, price)
        group, weight, mean = rows.groups(first)
        n = first.sum(axis=1)
        level, level_err = (values[:, None] for values in rows.quiet_level)
        above = (mean - level) / np.hypot(np.where(weight > 0, weight, np.nan) ** -0.5, level_err)
        above = np.where(weight > 0, np.abs(above) if rows.channel.signed else above, -np.inf)
        best = above.argmax(axis=1)
        start, end = _edges(rows, group == best[:, None])
        several = n > 1
        return {
            "n": n,
            "excess": np.where(several, above[np.arange(len(rows)), best], 0.0),
            "start": np.where(several, start, np.nan),
            "length": np.where(several, end - start, np.nan),
            "interval": interval,
            "price": price,
        }


def _pieces(rows: Rows) -> tuple[Mask, NDArray[np.int64], Array, Array]:
    """What is never divided: which samples begin such a piece, the piece of each sample, shapes (n_curves, n_most),

    and each piece's weight and mean flux less that of all samples, shapes (n_curves, n_pieces), 0 for none.
    """
    in_turn = np.arange(rows.flux.shape[1]) % np.maximum(-(-rows.n // MOST_PIECES), 1)[:, None] == 0
    in_turn[:, 1:] &= rows.t_tdb_s[:, 1:] > rows.t_tdb_s[:, :-1]
    pieces, weight, mean = rows.groups(in_turn)
    return in_turn, pieces, weight, np.where(weight > 0, mean - rows.weighted_mean[:, None], 0)


def first_of_blocks(weight: Array, flux: Array, price: float | Array) -> Mask:
    """Which samples begin a block in the best division of each row, shapes (n_rows, n_samples).

    Fitness for measurements with Gaussian errors (Scargle et al. 2013, eq. 41): (sum w x)^2 / (2 sum w), w = 1/err^2,
    less `price` for each block (one for all, or of shape (n_rows,)); the best division by dynamic programming (their
    section 2.6), all rows at once. Samples of weight 0 at the end of a row are none.
    """
    n_rows, n = flux.shape
    before = np.zeros((n_rows, 1))
    weights = np.concatenate((before, np.cumsum(weight, axis=1)), axis=1)
    fluxes = np.concatenate((before, np.cumsum(weight * flux, axis=1)), axis=1)
    until = np.where(weight > 0, weights[:, :-1], -np.inf)  # no block begins where no sample is
    barred = np.where(weight > 0, 0.0, -np.inf)
    so_far = np.zeros((n_rows, n + 1))  # of the best division of all samples before
    start = np.empty((n_rows, n), np.int64)
    every = np.arange(n_rows)
    for last in range(n):
        gain = fluxes[:, last + 1, None] - fluxes[:, : last + 1]
        gain *= gain
        gain /= 2 * (weights[:, last + 1, None] - until[:, : last + 1])
        gain += so_far[:, : last + 1] + barred[:, : last + 1]
        start[:, last] = gain.argmax(axis=1)
        so_far[:, last + 1] = gain[every, start[:, last]] - price
    first = np.zeros((n_rows, n), bool)
    end = np.full(n_rows, n)
    while np.any(end > 0):
        open_rows = np.flatnonzero(end > 0)
        end[open_rows] = start[open_rows, end[open_rows] - 1]
        first[open_rows, end[open_rows]] = True
    return first


def best_of_few(weight: Array, flux: Array, either_sign: bool) -> tuple[Array, Array]:
    """Of each row the largest (mean inside - mean outside) / error of an interval of samples, and the highest price at

    which a division into two or three blocks is better than none; shapes (n_rows,), NaN for a single sample.

    `weight` and `flux` as in `first_of_blocks`, the fluxes' weighted means being zero: then the ratio is
    F / sqrt(W (1 - W / W_all)) with the sums F of w x and W of w inside, and the price is the sum of F^2 / (2 W) over
    the blocks, divided by how many there are but one; exact.
    """
    n_rows, n = flux.shape
    weights, fluxes = (np.pad(np.cumsum(v, axis=1), ((0, 0), (1, 0))) for v in (weight, weight * flux))
    total = weights[:, -1:]
    before, after = _fitness(fluxes, weights), _fitness(fluxes[:, -1:] - fluxes, total - weights)
    best = np.full(n_rows, -np.inf)
    three = np.full(n_rows, -np.inf)
    for last in range(n):
        inside = weights[:, last + 1, None] - weights[:, : last + 1]
        np.copyto(inside, np.inf, where=inside <= 0)
        gain = fluxes[:, last + 1, None] - fluxes[:, : last + 1]
        fitness = gain * gain
        fitness /= inside
        fitness *= 0.5
        fitness += before[:, : last + 1]
        three = np.maximum(three, fitness.max(axis=1) + after[:, last + 1])
        spread = inside / total
        np.subtract(1, spread, out=spread)
        spread *= inside
        np.copyto(spread, np.inf, where=spread <= 0)
        gain /= np.sqrt(spread, out=spread)
        best = np.maximum(best, (np.abs(gain, out=gain) if either_sign else gain).max(axis=1))
    two = (before + after).max(axis=1)
    several = (weight > 0).sum(axis=1) > 1
    price = np.maximum(np.maximum(two - before[:, -1], (three - before[:, -1]) / 2), 0)
    return np.where(several, best, np.nan), np.where(several, price, np.nan)


def highest_price(weight: Array, flux: Array, price: Array) -> Array:
    """The highest price at which the best division of each row has more than one block, shape (n_rows,).

    That is the highest ratio of what a division gains over one block to how many more blocks it has. From a `price` that
    is too low, if anything, the ratio of the division that is best at it is a higher one, until there is none (Dinkelbach
    1967, Management Science 13, 492); exact. `weight` and `flux` as in `first_of_blocks`; NaN stays.
    """
    price = price.copy()
    rows = np.flatnonzero(np.isfinite(price))
    while rows.size:
        first = first_of_blocks(weight[rows], flux[rows], price[rows])
        place = (np.cumsum(first, axis=1) - 1 + np.arange(len(rows))[:, None] * first.shape[1]).ravel()
        sums = (np.bincount(place, v.ravel(), first.size).reshape(first.shape) for v in (
            weight[rows] * flux[rows], weight[rows]))  # fmt: skip
        blocks = _fitness(*sums)
        ratio = np.cumsum(blocks, axis=1)[:, -1] / np.maximum(first.sum(axis=1) - 1, 1)
        higher = (first.sum(axis=1) > 1) & (ratio > price[rows] * (1 + 1e-12))
        price[rows[higher]] = ratio[higher]
        rows = rows[higher]
    return price


def _fitness(flux: Array, weight: Array) -> Array:
    """F^2 / (2 W) of sums over blocks, 0 for none."""
    return np.asarray(np.divide(flux**2, 2 * weight, out=np.zeros_like(flux), where=weight > 0))


def _edges(rows: Rows, inside: Mask) -> tuple[Array, Array]:
    """Where a run of samples begins and ends, halfway to the samples around it; shapes (n_rows,)."""
    inside = inside & rows.used
    every = np.arange(len(rows))
    first = inside.argmax(axis=1)
    last = first + inside.sum(axis=1) - 1
    t = rows.t_tdb_s
    before, after = t[every, np.maximum(first - 1, 0)], t[every, np.minimum(last + 1, rows.n - 1)]
    return (before + t[every, first]) / 2, (t[every, last] + after) / 2


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [BayesianBlocks]
