"""Welch & Stetson's I and Stetson's J over all channels: do measurements made at the same time agree?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from hindlight import Column, LightCurve, Statistic, hookimpl, setting, weighted_mean

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

DAY = 86400.0


@dataclass(frozen=True)
class WelchStetson(Statistic):
    """Deviations that agree within pairs: of different channels at the same time, else of one channel soon after.

    Pairing rule: in order of time over all channels, two neighbours of different channels are a pair where their
    exposures overlap (unknown exposures: where their times are equal). What is left is paired within its channel, each
    with its successor where both are no further apart than `soon_days`. Every measurement is in one pair at most: in a
    chain of such neighbours the first is paired with the second, the third with the fourth.
    """

    all_channels: ClassVar[bool] = True
    min_points: ClassVar[int] = 2
    columns = (
        Column("i", "Welch & Stetson's I over pairs of simultaneous measurements of different channels, and of successive "
               "ones of a channel; NaN for fewer than two pairs", unusual="high", ucd="src.var.index"),
        Column("j", "Stetson's J over the same pairs and what is left single", ucd="src.var.index"),
        Column("n_simultaneous", "pairs of different channels", dtype="int64", ucd="meta.number"),
        Column("n_successive", "pairs within a channel", dtype="int64", ucd="meta.number"),
    )  # fmt: skip
    soon_days: float = setting(0.5, "longest time between both of a pair within a channel", unit="day", minimum=0)

    def compute(self, curve: Sequence[LightCurve]) -> dict[str, float]:
        """The declared columns, of all channels with two samples or more.

        delta = (S - S_w) / err with the channel's weighted mean; I = sqrt(1 / (n (n-1))) sum delta_i delta_j over n
        pairs (Welch & Stetson 1993, AJ 105, 1813, eq. 1 from memory). J as in Stetson 1996 (PASP 108, 851), where delta
        has sqrt(n/(n-1)) of its channel and one alone counts delta^2 - 1, all weights 1.
        """
        t, half, channel, delta, unbiased = _together(curve)
        first, second, n_simultaneous = pairs(t, half, channel, self.soon_days * DAY)
        n = len(first)
        product = delta[first] * delta[second]
        alone = np.ones(len(t), bool)
        alone[first] = alone[second] = False
        both = np.concatenate((unbiased[first] * unbiased[second], unbiased[alone] ** 2 - 1))
        return {
            "i": float(product.sum()) * (1 / (n * (n - 1))) ** 0.5 if n > 1 else float("nan"),
            "j": float(np.mean(np.sign(both) * np.sqrt(np.abs(both)))),
            "n_simultaneous": n_simultaneous,
            "n_successive": n - n_simultaneous,
        }


def _together(curves: Sequence[LightCurve]) -> tuple[Array, Array, NDArray[np.int64], Array, Array]:
    """All channels in order of time: times, half exposures (0 where unknown), channel numbers, both kinds of delta."""
    deltas = [(c.flux - weighted_mean(c.flux, c.flux_err)[0]) / c.flux_err for c in curves]
    unbiased = [(d.size / max(1, d.size - 1)) ** 0.5 * d for d in deltas]
    t = np.concatenate([c.t_tdb_s for c in curves])
    half = np.concatenate([c.exposure_s for c in curves]) / 2
    channel = np.repeat(np.arange(len(curves)), [len(c) for c in curves])
    order = np.lexsort((channel, t))
    half = np.where(np.isfinite(half), half, 0.0)
    return t[order], half[order], channel[order], np.concatenate(deltas)[order], np.concatenate(unbiased)[order]


def pairs(
    t: Array, half: Array, channel: NDArray[np.int64], soon: float
) -> tuple[NDArray[np.int64], NDArray[np.int64], int]:
    """Indices of the first and second members of all pairs, and how many of them (the first ones) are simultaneous.

    `t` ascending, `half` the exposures' half lengths, both in seconds, `channel` their channels, shapes (n,).
    """
    gap = np.diff(t)
    overlapping = (gap < half[1:] + half[:-1]) | (gap == 0)
    at_once = np.flatnonzero(_every_other(overlapping & (channel[1:] != channel[:-1])))
    left = np.ones(len(t), bool)
    left[at_once] = left[at_once + 1] = False
    rest = np.flatnonzero(left)
    rest = rest[np.argsort(channel[rest], kind="stable")]
    near = (channel[rest[1:]] == channel[rest[:-1]]) & (np.diff(t[rest]) <= soon)
    later = np.flatnonzero(_every_other(near))
    return np.concatenate((at_once, rest[later])), np.concatenate((at_once + 1, rest[later + 1])), len(at_once)


def _every_other(linked: Mask) -> Mask:
    """Of each unbroken run of links the first, third, ..., so that no two share a member."""
    at = np.arange(len(linked))
    broken = np.maximum.accumulate(np.where(linked, -1, at))
    return linked & ((at - broken) % 2 == 1)


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [WelchStetson]
