"""Aperture photometry: the sum of the pixels in a circle, each counted by the part of it that lies inside.

    flux = sum(w d),      error^2 = rms^2 sum(w^2) + (sum(w) background_err)^2 + flux / gain,

w being the exact overlap of circle and pixel (the CCD equation of W. J. Merline & S. B. Howell 1995, with weights). No
correction for light outside the circle is made: a Gaussian has 0.2 % of it beyond 1.5 FWHM.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from hindlight import BeamShape, Estimator, Stamps, hookimpl, setting

ROUNDING = 1e-9

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Aperture(Estimator):
    """Flux within a circle, for images in counts or in a unit per pixel."""

    units: ClassVar[tuple[str, ...]] = ("", "Jy/pixel", "mJy/pixel", "uJy/pixel")
    sums: ClassVar[bool] = True

    radius_fwhm: float = setting(1.5, "radius of the circle", unit="FWHM", minimum=0.3, maximum=3)

    def radius(self, beam: BeamShape) -> float:
        """In units of the geometric mean width."""
        return self.radius_fwhm * beam.fwhm

    def measure(self, stamps: Stamps) -> tuple[Array, Array]:
        """Flux and error; NaN where any pixel that the circle touches is."""
        half = stamps.pixels.shape[1] // 2
        weights = circle_overlap(self.radius(stamps.beam), stamps.dx, stamps.dy, half).reshape(len(stamps.dx), -1)
        data = stamps.pixels.reshape(weights.shape)
        if not np.isfinite(data).all():
            data = np.where(weights > 0, data, 0)  # what the circle does not touch may be blank
        flux = (weights * data).sum(axis=1)
        variance = stamps.rms**2 * (weights * weights).sum(axis=1)
        variance += (weights.sum(axis=1) * stamps.background_err) ** 2
        if np.isfinite(stamps.electrons_per_unit):
            variance += np.maximum(flux, 0) / stamps.electrons_per_unit
        return flux, np.sqrt(variance)


def circle_overlap(radius: float, x: Array, y: Array, half: int) -> Array:
    """Area of each pixel of a square stamp inside a circle around (x, y) from its middle, shape (n, size, size).

    `x`, `y` have shape (n,), `size` is 2 * half + 1. The area of the circle to the lower left of each pixel corner has a
    closed form, made of functions of one coordinate and the product of both; differences of it give the pixels.
    """
    square = radius * radius
    edges = np.arange(-half - 0.5, half + 1.0)[:, None]
    # Positions come last while corners are worked out: inner loops are then long, and fast. Both coordinates go together.
    cut = np.minimum(np.maximum(edges - np.concatenate((x, y)), -radius), radius)
    cut2 = cut * cut
    beyond = square * np.arccos(cut / radius) - cut * np.sqrt(square - cut2)  # area of the circle on the far side
    before, half_before = np.pi * square - beyond, 0.375 * np.pi * square - beyond / 2
    past = (cut > 0).astype(float)
    a, left, half_left, right, a2 = (of[None, :, : len(x)] for of in (cut, before, half_before, past, cut2))
    b, below, half_below, above, b2 = (of[:, None, len(x) :] for of in (cut, before, half_before, past, cut2))
    # A corner inside the circle: halves of what is left of it and below it, less a quarter, and the rectangle between.
    corner = a * b
    corner += half_left
    corner += half_below
    # A corner outside the circle: nothing, all, or a part cut off by one of the two lines.
    outside = right * (below - above * (np.pi * square))
    outside += above * left
    corner -= outside
    corner *= a2 + b2 < square  # several times faster than choosing between the two
    corner += outside
    strip = corner[1:] - corner[:-1]
    area = np.empty((len(x), len(strip), len(strip)))
    np.subtract(strip[:, 1:], strip[:, :-1], out=np.moveaxis(area, 0, 2))
    area *= area > ROUNDING  # pixels that the circle does not touch carry no weight at all
    return area


@hookimpl
def register_estimators() -> list[type[Estimator]]:
    """One estimator."""
    return [Aperture]
