"""Smoothness of a light curve: the von Neumann ratio. It asks about order in time, not about the size of variations."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from hindlight import Column, LightCurve, Statistic, hookimpl


@dataclass(frozen=True)
class VonNeumann(Statistic):
    """Mean squared difference of successive fluxes over their variance: low where neighbours are alike.

    Errors do not enter. NaN where all fluxes are equal.
    """

    min_points: ClassVar[int] = 3
    columns = (
        Column("eta", "mean squared difference of successive fluxes over their variance; 2 for noise", unusual="low",
               ucd="src.var.index"),
        Column("z", "its distance from 2 in standard deviations for independent Gaussian samples", ucd="stat.value"),
    )  # fmt: skip

    def compute(self, curve: LightCurve) -> dict[str, float]:
        """The declared columns.

        eta = [sum (S_i+1 - S_i)^2 / (n-1)] / s^2, with mean 2 and variance 4 (n-2) / (n^2-1) for independent Gaussian
        samples (von Neumann 1941, Ann. Math. Stat. 12, 367).
        """
        flux = curve.flux
        n = flux.size
        spread = float(((flux - flux.mean()) ** 2).sum())
        if n < 3 or flux.max() == flux.min() or spread == 0:
            return {"eta": float("nan"), "z": float("nan")}
        eta = float((np.diff(flux) ** 2).sum()) / spread
        return {"eta": eta, "z": (eta - 2) / (4 * (n - 2) / (n * n - 1)) ** 0.5}


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [VonNeumann]
