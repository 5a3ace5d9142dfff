"""Dispersion of one light curve: chi-square against constancy, modulation index, excess variance.

These weigh every sample alike; a source that is bright in one frame out of hundreds is `brightest`'s business.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar

from scipy import special

from hindlight import Column, LightCurve, Statistic, hookimpl, weighted_mean

NAN = float("nan")
MEAN_SIGNIFICANCE = 3.0  # ratios to the mean are blank below this: they would only say that the mean is near zero
SMALLEST = 1e-290  # chances above it are told to all digits
TERMS = 500  # of a continued fraction; far more than chances below that need


@dataclass(frozen=True)
class ChiSquare(Statistic):
    """Chi-square against constancy and the measures of variance that go with it.

    Columns that divide by the mean are NaN where the mean is not positive or below three of its own errors,
    sqrt(sum err^2) / n. `fractional_variability` and all errors are NaN where the excess variance is not positive.
    """

    uses_times: ClassVar[bool] = False
    min_points: ClassVar[int] = 2
    columns = (
        Column("reduced", "chi-square against the weighted mean, per degree of freedom", unusual="high",
               ucd="stat.fit.chi2"),
        Column("p_gauss", "chance of a chi-square as high if errors were Gaussian and right; 0 where below 1e-308",
               ucd="stat.probability"),
        Column("log10_p_gauss", "logarithm (base 10) of that chance, however small", ucd="stat.probability"),
        Column("modulation_index", "standard deviation over mean", ucd="src.var.index"),
        Column("modulation_index_debiased", "the same with the variance of the errors taken off; negative where the "
               "scatter is below the errors", ucd="src.var.index"),
        Column("excess_variance", "variance less the mean squared error", ucd="stat.variance;phot.flux", flux_power=2),
        Column("excess_variance_err", "its 1-sigma error from the errors of the samples", flux_power=2,
               ucd="stat.error;phot.flux"),
        Column("normalized_excess_variance", "excess variance over the squared mean", ucd="src.var.index"),
        Column("normalized_excess_variance_err", "its 1-sigma error", ucd="stat.error;src.var.index"),
        Column("fractional_variability", "square root of the normalized excess variance", ucd="src.var.index"),
        Column("fractional_variability_err", "its 1-sigma error", ucd="stat.error;src.var.index"),
    )  # fmt: skip

    def compute(self, curve: LightCurve) -> dict[str, float]:
        """The declared columns.

        chi2 = sum (S - S_w)^2 / err^2 with n - 1 degrees of freedom. Debiased modulation index (Akritas & Bershady
        1996, ApJ 470, 706; signed as in Sadler et al. 2006, MNRAS 371, 898):
        m = sqrt([sum (S - S_mean)^2 - sum err^2] / n) / S_mean.
        """
        flux, error = curve.flux, curve.flux_err
        n = flux.size
        pull = (flux - weighted_mean(flux, error)[0]) / error
        chi2 = float((pull**2).sum())
        mean = float(flux.mean())
        squares = float(((flux - mean) ** 2).sum())
        noise = float((error**2).sum())
        excess = squares / (n - 1) - noise / n
        values = {
            "reduced": chi2 / (n - 1),
            "p_gauss": float(special.chdtrc(n - 1, chi2)),
            "log10_p_gauss": log10_p_chi_square(chi2, n - 1),
            "modulation_index": NAN,
            "modulation_index_debiased": NAN,
            "excess_variance": excess,
            "excess_variance_err": _excess_error(excess, noise / n, n) if excess > 0 else NAN,
            "normalized_excess_variance": NAN,
            "normalized_excess_variance_err": NAN,
            "fractional_variability": NAN,
            "fractional_variability_err": NAN,
        }
        if mean > 0 and mean >= MEAN_SIGNIFICANCE * noise**0.5 / n:
            net = (squares - noise) / n
            values["modulation_index"] = (squares / (n - 1)) ** 0.5 / mean
            values["modulation_index_debiased"] = (1.0 if net >= 0 else -1.0) * abs(net) ** 0.5 / mean
            values |= _normalized(excess / mean**2, noise / n / mean**2, n)
        return values


def _normalized(excess: float, noise: float, n: int) -> dict[str, float]:
    """Normalized excess variance, F_var and their errors; `noise` is the mean squared error over the squared mean.

    Vaughan et al. 2003 (MNRAS 345, 1271), eq. B2: err(F_var) = err / (2 F_var) with the error of eq. 11.
    """
    if excess <= 0:
        return {"normalized_excess_variance": excess}
    fraction = excess**0.5
    error = _excess_error(excess, noise, n)
    return {
        "normalized_excess_variance": excess,
        "normalized_excess_variance_err": error,
        "fractional_variability": fraction,
        "fractional_variability_err": error / (2 * fraction),
    }


def _excess_error(excess: float, noise: float, n: int) -> float:
    """Error of a positive excess variance with a mean squared error `noise`, or of both over the squared mean.

    Vaughan et al. 2003 (MNRAS 345, 1271), eq. 11: sqrt([sqrt(2/n) noise]^2 + [sqrt(noise/n) 2 F_var]^2), times S^2 with
    the mean S held fixed, where F_var S is the square root of the excess variance. It is that of this light curve: the
    scatter of a source's own variation from one stretch to the next is not in it.
    """
    return (2 / n * noise**2 + 4 * noise / n * excess) ** 0.5


def log10_p_chi_square(chi2: float, dof: int) -> float:
    """Logarithm (base 10) of the chance that chi-square with `dof` degrees of freedom reaches `chi2`.

    Where the chance is too small for a number: Q(a, x) = x^a e^-x / Gamma(a) times the continued fraction
    1/(x+1-a- 1(1-a)/(x+3-a- 2(2-a)/(x+5-a- ...))) with a = dof / 2, x = chi2 / 2 (Abramowitz & Stegun 1964, eq. 6.5.31,
    its even part).
    """
    chance = float(special.chdtrc(dof, chi2))
    if chance > SMALLEST:
        return math.log10(chance)
    a, x = dof / 2, chi2 / 2
    below = x + 2 * TERMS + 1 - a
    for k in range(TERMS, 0, -1):
        below = x + 2 * k - 1 - a - k * (k - a) / below
    return (a * math.log(x) - x - math.lgamma(a) - math.log(below)) / math.log(10)


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [ChiSquare]
