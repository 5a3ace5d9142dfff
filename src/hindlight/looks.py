"""What looks without a detection say: limits on flux, on how often a source is on, and on the rate of short pulses.

A look is an epoch, or a cycle of a known ephemeris. Frames of one look show one state of the source and may share their
errors, so they are no tries of their own: the best of them counts. Pure: looks in, limits out.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from hindlight.lightcurve import FloatArray, IntArray
from hindlight.timing import DAY, from_nearest_pulse

CONFIDENCE = 0.95
BISECTIONS = 60
HIGHEST_FLUX = 1e4  # median frame errors; limits above it are none
SURELY = 2.0  # sigma above a threshold: seen with a chance of 0.977


@dataclass(frozen=True, eq=False)
class Looks:
    """The usable frames of a target, shape (n,).

    `look` numbers the independent looks they belong to, ascending from 0; `channel` numbers channels; `error` and
    `threshold` are those of the frame's flux in median errors of its channel; `share` is the chance that a source that is
    on during the look is on in this frame; `exposure_s` is in seconds, NaN where unknown. Of each channel, by its number,
    `labels` and the median frame error in the channel's own unit (`typical`).
    """

    look: IntArray
    channel: IntArray
    error: FloatArray
    threshold: FloatArray
    share: FloatArray
    exposure_s: FloatArray
    labels: tuple[str, ...] = ()
    typical: tuple[float, ...] = ()

    @property
    def n(self) -> int:
        """How many looks."""
        return int(self.look.max()) + 1 if self.look.size else 0

    def within(self, channel: int) -> Looks:
        """Those in one channel, numbered anew."""
        mine = self.channel == channel
        _, look = np.unique(self.look[mine], return_inverse=True)
        arrays = {name: getattr(self, name)[mine] for name in ("channel", "error", "threshold", "share", "exposure_s")}
        return replace(self, look=look, **arrays)


def by_epoch(t_s: FloatArray, gap_days: float) -> IntArray:
    """The epoch of each frame of shape (n,), from 0; frames without a clock (NaN) count as one epoch together."""
    order = np.argsort(t_s, kind="stable")  # NaN last
    later = np.diff(t_s[order], prepend=t_s[order][:1])
    new = (later > gap_days * DAY) | (np.isnan(t_s[order]) & ~np.isnan(np.concatenate(([np.nan], t_s[order][:-1]))))
    look = np.empty(len(t_s), np.int64)
    look[order] = np.cumsum(new)
    return look


def by_cycle(
    t_s: FloatArray, exposure_s: FloatArray, period: float, period_dot: float, window_s: float
) -> tuple[IntArray, FloatArray]:
    """The cycle of each frame (from 0, in order of time) and how much of the window around its pulse it covers.

    `t_s` are seconds from the ephemeris' epoch, finite; an exposure that is not known, and a window of no width, are
    taken as instants.
    """
    away = from_nearest_pulse(t_s, period, period_dot)
    _, cycle = np.unique(np.rint((t_s - away) / period).astype(np.int64), return_inverse=True)
    exposure = np.nan_to_num(exposure_s)
    inside = (np.abs(away) <= (exposure + window_s) / 2).astype(float)
    if not window_s > 0:
        return cycle, inside
    overlap = np.minimum(exposure / 2, away + window_s / 2) - np.maximum(-exposure / 2, away - window_s / 2)
    return cycle, np.clip(overlap / window_s, 0.0, 1.0)


def chance_seen(flux: FloatArray | float, error: FloatArray, threshold: FloatArray) -> FloatArray:
    """The chance that Gaussian noise leaves a flux above threshold times error: Phi(flux / error - threshold)."""
    return np.asarray(special.ndtr(flux / error - threshold))


def weights(looks: Looks, flux: float) -> FloatArray:
    """The chance of each look to show a source that is on throughout, with this mean flux in a frame; shape (n_looks,).

    The best frame of a look counts, in the best of its channels. Frames that cover parts of a window only (share below 1)
    are alternatives: a pulse lies in one of them, so within a channel their chances add up.
    """
    seen = looks.share * chance_seen(flux, looks.error, looks.threshold)
    best = np.zeros(looks.n)
    for channel in np.unique(looks.channel):
        mine = looks.channel == channel
        sure = mine & (looks.share >= 1.0)
        np.maximum.at(best, looks.look[sure], seen[sure])
        parts = np.bincount(looks.look[mine & ~sure], seen[mine & ~sure], minlength=looks.n)
        best = np.maximum(best, np.minimum(parts, 1.0))
    return best


def duty_limit(weight: FloatArray, confidence: float = CONFIDENCE) -> float:
    """The largest duty cycle q that looks without a detection allow: product of (1 - q weight) = 1 - confidence.

    The duty cycle is the share of looks (not of the time) in which the source is on; `weight` (n,) is each look's chance to
    show it if it is on throughout. For weights of 1 it is the exact one-sided
    binomial limit 1 - (1 - confidence)^(1/n). NaN where the product is larger at q = 1: no limit.
    """
    wanted = np.log1p(-confidence)

    def missed(q: float) -> float:
        with np.errstate(divide="ignore"):
            return float(np.log1p(-q * weight).sum())

    if not missed(1.0) <= wanted:
        return float("nan")
    low, high = 0.0, 1.0
    for _ in range(BISECTIONS):
        middle = (low + high) / 2
        low, high = (middle, high) if missed(middle) > wanted else (low, middle)
    return (low + high) / 2


def flux_limit(looks: Looks, duty_cycle: float) -> float:
    """The mean flux in a frame, in median frame errors, from which this duty cycle is excluded; NaN for too few looks."""

    def excluded(flux: float) -> bool:
        return bool(duty_limit(weights(looks, flux)) <= duty_cycle)

    if looks.n == 0 or not excluded(HIGHEST_FLUX):
        return float("nan")
    low, high = 0.0, HIGHEST_FLUX
    for _ in range(BISECTIONS):
        middle = (low + high) / 2
        low, high = (low, middle) if excluded(middle) else (middle, high)
    return high


def surely_seen(looks: Looks) -> float:
    """The mean flux in a frame, in median frame errors, that a typical frame shows with a chance of 0.977."""
    return float(np.median(looks.threshold)) + SURELY


def seen_fluence(looks: Looks, fluence: float, collected: bool) -> FloatArray:
    """The chance of each frame to show a pulse that is over within its exposure, shape (n,); NaN for an unknown exposure.

    `fluence` is in median frame errors times seconds, or, where fluxes are `collected` over the exposure (counts), in
    median frame errors.
    """
    flux = np.where(np.isnan(looks.exposure_s), np.nan, fluence / (1.0 if collected else looks.exposure_s))
    return chance_seen(flux, looks.error, looks.threshold)


def rate_limit(chance: FloatArray, exposure_s: FloatArray, confidence: float = CONFIDENCE) -> float:
    """The largest rate per second of short pulses that frames without one allow: -ln(1 - confidence) / sum(chance exposure).

    Pulses come at random (Poisson), so none in that time has the probability exp(-rate time). `chance` (n,) is each frame's
    to show a pulse, frames with NaN tell nothing. NaN where no time is left.
    """
    time = float(np.nansum(chance * exposure_s))
    return float(-np.log1p(-confidence)) / time if time > 0 else float("nan")
