"""Phase and predicted windows of an ephemeris, and the test of one that was given.

Times are seconds at the barycentre from the ephemeris' own epoch. Searching for periods is the plugins' business.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.stats import hypergeom

from hindlight.lightcurve import FloatArray

J2000_JD = 2451545.0
DAY = 86400.0
CLOCK_SIGMAS = 2.0


def from_nearest_pulse(t: FloatArray, period: float, period_dot: float = 0.0) -> FloatArray:
    """Seconds from the nearest pulse of t_k = P k + P Pdot k^2 / 2, for times `t` from the epoch; shape (n,)."""
    k = np.rint(t / period)
    for _ in range(3):
        k = np.rint((t - 0.5 * period * period_dot * k**2) / period)
    return np.asarray(t - period * k - 0.5 * period * period_dot * k**2)


def in_window(
    t: FloatArray, exposure_s: FloatArray, clock_error_s: FloatArray, period: float, period_dot: float, window_s: float
) -> NDArray[np.bool_]:
    """Which exposures of shape (n,) (middle, good time, clock's error in seconds) overlap a window around a pulse.

    Where a clock's error is known the exposure may lie CLOCK_SIGMAS of it further away.
    """
    reach = (np.nan_to_num(exposure_s) + window_s) / 2 + CLOCK_SIGMAS * np.nan_to_num(clock_error_s)
    return np.asarray(np.abs(from_nearest_pulse(t, period, period_dot)) <= reach)


def lookback(inside: NDArray[np.bool_], detected: NDArray[np.bool_]) -> float:
    """Chance of at least as many detections falling inside the windows as did, shapes (n,); NaN without frames.

    With M frames, K inside a window and d detections of which x inside: the hypergeometric tail P(X >= x) (Fisher's
    one-sided exact test). It is the chance of one trial, and holds only for an ephemeris made without these frames.
    """
    if inside.size == 0:
        return float("nan")
    hits = int((inside & detected).sum())
    return float(hypergeom.sf(hits - 1, inside.size, int(inside.sum()), int(detected.sum())))
