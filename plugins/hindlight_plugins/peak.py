"""Peak reading: the flux density of an unresolved source in a map whose unit is per beam.

The beam is known, and so is the noise: its autocorrelation is that of the beam. The best linear unbiased amplitude of a
beam at a given position is then generalised least squares over the few central pixels,

    flux = p' C^-1 d / p' C^-1 p,      error = rms sqrt(w' R w),      w = C^-1 p / p' C^-1 p,

with p the beam sampled around the position, R the beam at the separations between pixels, C = R plus a little white
noise (A. C. Aitken 1935). Where map and beam are well sampled this comes down to reading the map between its pixels: the
error is the map's own rms, in noise that is the beam's as in noise that was smoothed by it.
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
class Peak(Estimator):
    """The value of the map at the position, in its own unit (per beam)."""

    units: ClassVar[tuple[str, ...]] = ("Jy/beam", "mJy/beam", "uJy/beam", "nJy/beam", "kJy/beam", "K", "mK", "uK")
    correlated: ClassVar[bool] = True

    half_width: int = setting(2, "the square of pixels used reaches this far from the middle", unit="pixel", minimum=1)
    white_noise: float = setting(
        1e-3,
        "white noise allowed for, as a fraction of the map's variance; keeps weights small",
        minimum=1e-6,
        maximum=1,
    )

    def radius(self, beam: BeamShape) -> float:
        """Half the width of the square."""
        return float(self.half_width)

    def measure(self, stamps: Stamps) -> tuple[Array, Array]:
        """Flux density and error; NaN where any pixel of the square is."""
        half, middle = self.half_width, stamps.pixels.shape[1] // 2
        square = slice(middle - half, middle + half + 1)
        data = stamps.pixels[:, square, square].reshape(len(stamps.dx), -1).astype(float)
        y, x = (grid.ravel().astype(float) for grid in np.mgrid[-half : half + 1, -half : half + 1])
        noise = beam_at(stamps.beam, x[:, None] - x, y[:, None] - y)
        inverse: Array = np.linalg.inv(noise + self.white_noise * np.eye(len(x))).astype(float)
        template = beam_at(stamps.beam, x - stamps.dx[:, None], y - stamps.dy[:, None])
        weights = apply(inverse, template)
        norm = (weights * template).sum(axis=1)
        weights /= norm[:, None]
        flux = (weights * data).sum(axis=1)
        # w' R w without another product: R w = (C - white noise) w, C w = p / norm, and w' p = 1.
        variance = stamps.rms**2 * (1 / norm - self.white_noise * (weights * weights).sum(axis=1))
        return flux, np.sqrt(variance + (weights.sum(axis=1) * stamps.background_err) ** 2)


def beam_at(beam: BeamShape, dx: Array, dy: Array) -> Array:
    """The beam, 1 at its middle, at pixel offsets."""
    c, s = np.cos(beam.angle), np.sin(beam.angle)
    along, across = c * dx + s * dy, c * dy - s * dx
    value: Array = np.exp(-LOG16 * ((along / beam.major) ** 2 + (across / beam.minor) ** 2))
    return value


def apply(matrix: Array, rows: Array) -> Array:
    """A symmetric matrix (k, k) applied to each row of (n, k).

    Written out because the last bits of a library's product depend on how many rows there are.
    """
    total: Array = rows[:, :1] * matrix[0]
    for column in range(1, len(matrix)):
        total += rows[:, column : column + 1] * matrix[column]
    return total


@hookimpl
def register_estimators() -> list[type[Estimator]]:
    """One estimator."""
    return [Peak]
