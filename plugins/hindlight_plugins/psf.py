"""Point-spread-function photometry: the weighted sum that is best in white noise.

    flux = sum(P d) / sum(P^2),      error^2 = rms^2 / sum(P^2) + background and source noise,

with P the PSF sampled at pixel centres, its sum over the whole plane being 1 (K. Horne 1986; T. Naylor 1998). Weights do
not depend on the data, so that the flux stays linear in the pixels; the noise of the source's own photons enters the
error where the gain is known.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from hindlight import BeamShape, Estimator, Stamps, hookimpl, setting

LOG16 = 4 * np.log(2)

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Psf(Estimator):
    """Total flux of a point source with a Gaussian PSF of the width that the header gives."""

    units: ClassVar[tuple[str, ...]] = ("adu", "electron", "count", "adu/s", "electron/s", "count/s")
    needs_beam: ClassVar[bool] = True
    sums: ClassVar[bool] = True

    radius_fwhm: float = setting(1.5, "pixels up to this distance are used", unit="FWHM", minimum=0.5, maximum=3)

    def radius(self, beam: BeamShape) -> float:
        """In units of the longer axis."""
        return self.radius_fwhm * beam.major

    def measure(self, stamps: Stamps) -> tuple[Array, Array]:
        """Total flux and error; NaN where any pixel within the radius is."""
        beam, half = stamps.beam, stamps.pixels.shape[1] // 2
        y, x = (grid.ravel() for grid in np.mgrid[-half : half + 1, -half : half + 1])
        near = np.flatnonzero(np.hypot(x, y) <= self.radius(beam))
        dx, dy = x[near] - stamps.dx[:, None], y[near] - stamps.dy[:, None]
        c, s = np.cos(beam.angle), np.sin(beam.angle)
        along, across = c * dx + s * dy, c * dy - s * dx
        area = np.pi * beam.major * beam.minor / LOG16
        profile = np.exp(-LOG16 * ((along / beam.major) ** 2 + (across / beam.minor) ** 2)) / area
        data = stamps.pixels.reshape(len(stamps.dx), -1)[:, near]
        square = profile * profile
        square_sum = square.sum(axis=1)
        flux = (profile * data).sum(axis=1) / square_sum
        variance = stamps.rms**2 / square_sum + (profile.sum(axis=1) / square_sum * stamps.background_err) ** 2
        if np.isfinite(stamps.electrons_per_unit):
            photons = np.maximum(flux, 0) / stamps.electrons_per_unit
            variance += photons * (square * profile).sum(axis=1) / square_sum**2
        return flux, np.sqrt(variance)


@hookimpl
def register_estimators() -> list[type[Estimator]]:
    """One estimator."""
    return [Psf]
