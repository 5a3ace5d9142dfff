"""Stetson's J and K: deviations that agree between neighbours in time, and the shape of their distribution."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from hindlight import Column, LightCurve, Statistic, hookimpl, setting, weighted_mean

PAIRS = ("overlapping", "disjoint", "singles")


@dataclass(frozen=True)
class Stetson(Statistic):
    """Stetson's J and K (Stetson 1996, PASP 108, 851), all sets of observations with weight 1.

    J depends on what is called a pair, whatever the time between its members: 'overlapping' pairs each sample with the
    next, 'disjoint' the first with the second, the third with the fourth and so on (an odd one out stands alone),
    'singles' lets each stand alone.
    """

    min_points: ClassVar[int] = 2
    columns = (
        Column("j", "Stetson's J over pairs of successive samples, pairs as the setting `pairs` says (overlapping "
               "unless changed)", unusual="high", ucd="src.var.index"),
        Column("k", "Stetson's K: mean over root mean square of the absolute deviations; 0.798 for Gaussian noise, "
               "small for a lone outlier, near 1 for two levels", unusual="both", ucd="src.var.index"),
    )  # fmt: skip
    pairs: str = setting("overlapping", "what J calls a pair of successive samples", choices=PAIRS)

    def compute(self, curve: LightCurve) -> dict[str, float]:
        """The declared columns; NaN where all fluxes are equal (K) or for fewer than two samples.

        delta = sqrt(n/(n-1)) (S - S_w) / err; P = delta_i delta_j for a pair, delta^2 - 1 for one alone;
        J = mean of sgn(P) sqrt|P|; K = mean|delta| / sqrt(mean delta^2).
        """
        flux, error = curve.flux, curve.flux_err
        n = flux.size
        if n < 2:
            return {"j": float("nan"), "k": float("nan")}
        delta = (n / (n - 1)) ** 0.5 * (flux - weighted_mean(flux, error)[0]) / error
        product = _products(delta, self.pairs)
        j = float(np.mean(np.sign(product) * np.sqrt(np.abs(product))))
        rms = float(np.sqrt(np.mean(delta**2)))
        varies = flux.max() > flux.min() and rms > 0
        return {"j": j, "k": float(np.mean(np.abs(delta))) / rms if varies else float("nan")}


def _products(delta: NDArray[np.float64], pairs: str) -> NDArray[np.float64]:
    """P of every set of observations, see `Stetson`."""
    if pairs == "overlapping":
        return delta[:-1] * delta[1:]
    if pairs == "singles":
        return delta**2 - 1
    paired = delta.size // 2 * 2
    return np.concatenate((delta[0:paired:2] * delta[1:paired:2], delta[paired:] ** 2 - 1))


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [Stetson]
