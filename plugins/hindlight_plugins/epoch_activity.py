"""Activity over the years: how the mean fluxes of separate epochs differ, and when the source went on or off."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from hindlight import Column, Rows, RowStatistic, Statistic, hookimpl, setting

Array = NDArray[np.float64]

DAY = 86400.0


@dataclass(frozen=True)
class EpochActivity(RowStatistic):
    """Weighted mean fluxes of epochs, groups of samples with gaps between them; NaN where there is one epoch only."""

    min_points: ClassVar[int] = 2
    columns = (
        Column("n", "how many epochs there are", dtype="int64", ucd="meta.number;obs"),
        Column("reduced", "chi-square of the epochs' mean fluxes about their weighted mean, per degree of freedom",
               unusual="high", ucd="stat.fit.chi2"),
        Column("brightening", "largest rise from one epoch to the next over the error of the difference", ucd="stat.snr"),
        Column("fading", "largest fall from one epoch to the next over the error of the difference", ucd="stat.snr"),
        Column("switch", "square root of twice the log likelihood ratio of two levels, with one change between epochs, "
               "against one level; positive for a source switched on, negative for one switched off", unusual="both",
               ucd="stat.likelihood"),
        Column("switch_time", "when that change was, halfway between the samples around it, seconds from J2000.0 TDB at "
               "the barycentre", unit="s", ucd="time.epoch", is_time=True),
    )  # fmt: skip
    gap_days: float = setting(0.5, "samples further apart than this are separate epochs", unit="day", minimum=0)

    def compute_rows(self, rows: Rows) -> Mapping[str, NDArray[Any]]:
        """The declared columns.

        With weights W and mean fluxes m before and after a change, Gaussian errors make twice the log likelihood ratio
        W1 W2 / (W1 + W2) (m2 - m1)^2; exact.
        """
        apart = np.diff(rows.t_tdb_s, axis=1) > self.gap_days * DAY
        first = np.concatenate((np.ones((len(rows), 1), bool), apart), axis=1)
        _, weight, mean = rows.groups(first)
        n = (weight > 0).sum(axis=1)
        away = np.where(weight > 0, mean - rows.weighted_mean[:, None], 0)
        several = n > 1
        step = np.diff(mean, axis=1) / np.hypot(_error(weight[:, 1:]), _error(weight[:, :-1]))
        switch, at = _change(weight, away)
        return {
            "n": n,
            "reduced": np.where(several, Rows.sums(weight * away**2), np.nan) / np.maximum(n - 1, 1),
            "brightening": np.where(several, np.fmax.reduce(step, axis=1, initial=-np.inf), np.nan),
            "fading": np.where(several, np.fmax.reduce(-step, axis=1, initial=-np.inf), np.nan),
            "switch": np.where(several, switch, np.nan),
            "switch_time": np.where(several, _time_before(rows, first, at), np.nan),
        }


def _error(weight: Array) -> Array:
    return np.where(weight > 0, weight, np.nan) ** -0.5


def _change(weight: Array, away: Array) -> tuple[Array, NDArray[np.int64]]:
    """The largest signed root of twice the log likelihood ratio, and the epoch that begins there; shapes (n_rows,)."""
    before = np.cumsum(weight, axis=1)
    flux = np.cumsum(weight * away, axis=1)
    after = before[:, -1:] - before
    possible = np.concatenate((weight[:, 1:] > 0, np.zeros((len(weight), 1), bool)), axis=1)
    early = flux / before
    late = np.divide(flux[:, -1:] - flux, after, out=np.zeros_like(flux), where=possible & (after > 0))
    root = np.where(possible, np.sqrt(np.maximum(before * after, 0) / before[:, -1:]) * (late - early), 0)
    best = np.abs(root).argmax(axis=1)
    return root[np.arange(len(root)), best], best + 1


def _time_before(rows: Rows, first: NDArray[np.bool_], epoch: NDArray[np.int64]) -> Array:
    """Halfway between an epoch's first sample and the one before, shape (n_rows,)."""
    begins = np.cumsum(first & rows.used, axis=1) == epoch[:, None] + 1
    at = np.maximum(begins.argmax(axis=1), 1)
    every = np.arange(len(rows))
    return (rows.t_tdb_s[every, at - 1] + rows.t_tdb_s[every, at]) / 2


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [EpochActivity]
