"""The highest single measurement of a light curve: what finds a source that was bright once in hundreds of frames."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray
from scipy import special

from hindlight import Column, LightCurve, Statistic, hookimpl

SMALLEST = 1e-290  # chances above it are told to all digits


@dataclass(frozen=True)
class Brightest(Statistic):
    """The highest measurement, above the quiet level and outright.

    In channels whose flux may be negative (Stokes Q, U, V) the largest departure of either sign is taken.
    """

    uses_times: ClassVar[bool] = False
    min_points: ClassVar[int] = 3
    columns = (
        Column("excess", "highest flux above the quiet level over the error of the difference", unusual="high",
               ucd="stat.snr;stat.max"),
        Column("second", "second highest such excess: high for a source that brightens again, whatever one outlier does",
               unusual="high", ucd="stat.snr"),
        Column("p_trials", "chance that Gaussian noise reaches it in as many samples; 0 where below 1e-308",
               ucd="stat.probability"),
        Column("log10_p_trials", "logarithm (base 10) of that chance, however small", ucd="stat.probability"),
        Column("snr", "highest flux over its error", unusual="high", about="presence", ucd="stat.snr;stat.max"),
        Column("time", "when the highest excess was measured, seconds from J2000.0 TDB at the barycentre; NaN where "
               "that frame has no clock", unit="s", ucd="time.epoch", is_time=True),
        Column("leave_one_out", "highest flux above the weighted mean of all others over the error of the difference",
               unusual="high", ucd="stat.snr;stat.max"),
    )  # fmt: skip

    def compute(self, curve: LightCurve) -> dict[str, float]:
        """The declared columns."""
        fold = np.abs if curve.channel.signed else np.asarray
        above = fold(curve.above_quiet)
        at = int(np.argmax(above))
        highest, n, signed = float(above[at]), len(curve), curve.channel.signed
        return {
            "excess": highest,
            "second": float(np.partition(above, -2)[-2]),
            "p_trials": p_of_maximum(highest, n, two_sided=signed),
            "log10_p_trials": log10_p_of_maximum(highest, n, two_sided=signed),
            "snr": float(np.max(fold(curve.flux / curve.flux_err))),
            "time": float(curve.t_tdb_s[at]),
            "leave_one_out": float(np.max(fold(leave_one_out(curve.flux, curve.flux_err)))),
        }


def p_of_maximum(z: float, n: int, *, two_sided: bool = False) -> float:
    """Chance that the highest of n independent standard normal samples (of their magnitudes) reaches z.

    p = 1 - Phi(z)^n, or 1 - [1 - 2 Q(z)]^n; exact.
    """
    if not two_sided:
        return float(-np.expm1(n * special.log_ndtr(z)))
    tail = 2 * float(special.ndtr(-z))
    return -math.expm1(n * math.log1p(-tail)) if tail < 1 else 1.0


def log10_p_of_maximum(z: float, n: int, *, two_sided: bool = False) -> float:
    """Logarithm (base 10) of `p_of_maximum`, where that is too small for a number too: n Q(z) there, or 2 n Q(z)."""
    chance = p_of_maximum(z, n, two_sided=two_sided)
    if chance > SMALLEST:
        return math.log10(chance)
    return (math.log(2 * n if two_sided else n) + float(special.log_ndtr(-z))) / math.log(10)


def leave_one_out(flux: NDArray[np.float64], flux_err: NDArray[np.float64]) -> NDArray[np.float64]:
    """Excess of each sample, shape (n,), over the weighted mean of the others, in units of its own error; n >= 2.

    (S_i - S_w,-i) / sqrt(err_i^2 + err_w,-i^2); exact. Sums without a sample are formed from both sides, so that one
    sample of overwhelming weight costs no digits.
    """
    weight = flux_err**-2.0
    flux = flux - np.median(flux)
    others = _sum_of_others(weight)
    mean = _sum_of_others(weight * flux) / others
    return (flux - mean) / np.sqrt(flux_err**2 + 1 / others)


def _sum_of_others(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """For each element the sum of all others, without subtraction."""
    before = np.concatenate(([0.0], np.cumsum(values[:-1])))
    after = np.concatenate((np.cumsum(values[:0:-1])[::-1], [0.0]))
    return before + after


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [Brightest]
