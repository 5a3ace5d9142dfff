"""How much of a point source's light an estimator counts: its flux over all the light out to the background annulus.

Wings of the PSF that an aperture or a Gaussian model leaves out are the same fraction of every point source, and so make
no variation; they do make fluxes of different instruments disagree. Pixels in, a fraction out.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.lightcurve import FloatArray
from hindlight.plugin import BeamShape, Estimator, Stamps

WANTED = 12  # of the brightest known sources of a frame
FEWEST = 5
WORST_ERROR = 0.1
LEAST_SNR = 20.0  # against the noise in the wide circle, of a source that is to tell

Columns = dict[str, NDArray[Any]]


@dataclass(frozen=True)
class AllLight(Estimator):
    """The sum of the pixels within a wide circle, whose edge is soft over one pixel: there is little light out there."""

    radius_fwhm: float = 3.0

    def radius(self, beam: BeamShape) -> float:
        """In units of the longer axis, as that of the annulus."""
        return self.radius_fwhm * beam.major

    def measure(self, stamps: Stamps) -> tuple[FloatArray, FloatArray]:
        """Flux and error from the noise; NaN where any pixel within the radius is."""
        half = stamps.pixels.shape[1] // 2
        grid = np.arange(-half, half + 1, dtype=float)
        across, down = grid - stamps.dx[:, None], grid - stamps.dy[:, None]
        distance = np.hypot(across[:, None, :], down[:, :, None])
        weight = np.clip(self.radius(stamps.beam) + 0.5 - distance, 0.0, 1.0)
        flux = (weight * np.where(weight > 0, stamps.pixels, 0.0)).sum(axis=(1, 2))
        variance = stamps.rms**2 * (weight * weight).sum(axis=(1, 2))
        variance += (weight.sum(axis=(1, 2)) * stamps.background_err) ** 2
        return flux, np.sqrt(variance)


def fraction_held(counted: Columns, whole: Columns) -> float:
    """The fraction of the light that an estimator counts, from what `photometry.measure` found of some sources.

    `counted` is by the estimator, `whole` by `AllLight`. It is the slope of the one against the other, by least squares with
    an offset: an error of the background enters the wide circle most, and as much for a faint source as for a bright one.
    NaN where fewer than five unflagged sources stand out, or where they tell it to worse than 10 %.
    """
    with np.errstate(invalid="ignore"):
        clear = counted["flux"] >= LEAST_SNR * whole["flux_err"]  # by the whole flux, faint sources would be lucky ones
    clear &= (counted["flags"] == 0) & (whole["flags"] == 0)
    if clear.sum() < FEWEST:
        return float("nan")
    x, y, weight = counted["flux"][clear], whole["flux"][clear], whole["flux_err"][clear] ** -2.0
    x, y = x - np.average(x, weights=weight), y - np.average(y, weights=weight)
    square, product = float((weight * x * x).sum()), float((weight * x * y).sum())
    if product <= 0.0 or square**-0.5 > WORST_ERROR:
        return float("nan")
    return square / product
