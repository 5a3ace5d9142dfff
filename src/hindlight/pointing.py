"""How far an image is off its own coordinates: centroids of known sources, and the shift that they agree on.

Pixels and predicted places in, a shift over the image out. Nothing here knows of sky, units or fluxes that are kept.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from hindlight.background import MAD_TO_SIGMA, median_and_mad
from hindlight.lightcurve import FloatArray
from hindlight.pixels import Lattice, Pixels
from hindlight.plugin import BeamShape

REACH = 2.5  # stamps reach so many beam widths from the predicted place
BORDER = 1.8  # pixels further out than this tell background and noise
CORE = 1.5  # and centroids come from this part of them
ROUNDS = 6  # of centroiding, at most
CLOSE = 2e-3  # pixels
FEWEST = 3
FEWEST_FOR_GRADIENT = 8
LEAST_SNR = 8.0
FURTHEST = 1.0  # beam widths a source may lie from where the others put it
SAMPLING_ERROR = 0.02  # pixels; what pixels add to the error of a bright source's centroid
GRADIENT_P = 1e-3
HUBER = 1.345  # 95 % efficiency for normal errors (P. J. Huber 1981, Robust Statistics)
REWEIGHTINGS = 10
LOG16 = 4.0 * math.log(2.0)
FLAT = 0.02  # pixels lower than the highest by less than this fraction are as high as it
FLAT_PIXELS = 3.0  # so many more than three times those of a beam make a flat top; two or four fall together by chance
FLAT_SNR = 30.0  # in a fainter source noise may do so


@dataclass(frozen=True, eq=False)
class Centroids:
    """Where sources are, relative to where they were looked for: `dx`, `dy`, their error (pixels), S/N, shape (n,).

    `width` is the source's width over the beam's, 1 for a point; NaN where nothing stands out. `highest` is the highest
    pixel near the source as it is stored; `flat` says whether its top is cut off, as saturation does.
    """

    dx: FloatArray
    dy: FloatArray
    error: FloatArray
    snr: FloatArray
    width: FloatArray
    highest: FloatArray
    flat: NDArray[np.bool_]


def stamp_half(beam: BeamShape) -> int:
    """Half width of the stamps that centroids are taken from, in pixels."""
    return max(3, math.ceil(REACH * beam.major))


@dataclass(frozen=True, eq=False)
class Pointing:
    """The shift of an image: true place = predicted place + `offset` + `gradient` @ (place - middle), in pixels.

    `offset` has shape (2,), `gradient` (2, 2); `error` is that of the offset, `scatter` the scatter of single sources
    about the fit, `n` how many took part.
    """

    offset: FloatArray
    gradient: FloatArray
    middle: tuple[float, float]
    error: float
    scatter: float
    n: int

    def moved(self, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Pixel coordinates with the shift added, shape (n,)."""
        u, v = x - self.middle[0], y - self.middle[1]
        (a, b), (c, d) = self.gradient
        return x + self.offset[0] + a * u + b * v, y + self.offset[1] + c * u + d * v


def centroids(pixels: Pixels, x: FloatArray, y: FloatArray, beam: BeamShape) -> Centroids:
    """Centroids of sources near 0-based pixel coordinates, shape (n,).

    A source is first looked for as the highest pixel within `FURTHEST` beams of where the median source is, then its
    centroid under a weight of the beam's shape is followed until the weight sits on it, which is the least-squares place
    for a point source in white noise. The error is that of a point source in noise with the beam's correlation,
    0.4247 FWHM / (S/N) (Condon 1997, PASP 109, 166).
    """
    half = stamp_half(beam)
    ix, iy = (np.floor(c + 0.5).astype(np.int64) for c in (x, y))
    stamps = pixels.stamps(ix, iy, Lattice.square(half)).astype(float)
    grid = np.arange(-half, half + 1, dtype=float)
    border = np.hypot(grid[:, None], grid) > BORDER * beam.major
    level, spread, used = median_and_mad(stamps[:, border])
    sigma = spread * MAD_TO_SIGMA
    highest = stamps[:, ~border].max(axis=1, initial=-np.inf)
    stamps -= level[:, None, None]
    gone = ~np.isfinite(stamps)
    stamps[gone] = 0.0
    whole = (gone.sum(axis=(1, 2)) == 0) & (sigma > 0) & (used > border.sum() // 2)
    start = _start(stamps, x - ix, y - iy, sigma, whole, beam)
    flat = _flat(stamps[:, ~border], beam)
    return _followed(stamps, whole, sigma, (x - ix, y - iy), start, beam, highest, flat)


def _flat(pixels: FloatArray, beam: BeamShape) -> NDArray[np.bool_]:
    """Whether more pixels near a source, shape (n, m), are as high as the highest than in the beam, a Gaussian."""
    of_beam = math.pi / 4.0 * beam.major * beam.minor * -math.log2(1.0 - FLAT)
    top = pixels.max(axis=1, initial=0.0)
    as_high = (pixels > (1.0 - FLAT) * top[:, None]).sum(axis=1)
    return np.asarray(as_high >= FLAT_PIXELS + 3.0 * of_beam)


def _followed(
    stamps: FloatArray, whole: NDArray[np.bool_], sigma: FloatArray, place: tuple[FloatArray, FloatArray],
    start: tuple[FloatArray, FloatArray], beam: BeamShape, highest: FloatArray,
    flat: NDArray[np.bool_],
) -> Centroids:  # fmt: skip
    """Centroids from a start on; `place` is the predicted one from the middle of each stamp."""
    half, core = stamps.shape[1] // 2, max(2, math.ceil(CORE * beam.major))
    inner = slice(half - core, half + core + 1)
    stamps, grid = stamps[:, inner, inner], np.arange(-core, core + 1, dtype=float)
    dx, dy = start
    limit = beam.minor / 2.0
    with np.errstate(divide="ignore", invalid="ignore"):
        for _ in range(ROUNDS):
            gx, gy = grid - (place[0] + dx)[:, None], grid - (place[1] + dy)[:, None]
            weight = _beam_at(beam, gx, gy)
            weighted = weight * stamps
            columns, rows = weighted.sum(axis=1), weighted.sum(axis=2)
            total = columns.sum(axis=1)
            # Two Gaussians of one width have their weighted centroid half way between them.
            step_x = np.clip(np.nan_to_num(2.0 * (columns * gx).sum(axis=1) / total), -limit, limit)
            step_y = np.clip(np.nan_to_num(2.0 * (rows * gy).sum(axis=1) / total), -limit, limit)
            dx, dy = dx + step_x, dy + step_y
            if not (np.hypot(step_x, step_y) > CLOSE)[whole].any():
                break
        square = (weight * weight).sum(axis=(1, 2))
        snr = np.where(whole, total / square / sigma, np.nan)
        wide = _beam_at(BeamShape(2 * beam.major, 2 * beam.minor, beam.angle), gx, gy)
        of_point = (wide * weight).sum(axis=(1, 2)) / square
        # Weights of width 1 and 2 (in beams) on a Gaussian of width s have sums in the ratio 4 (1 + s^2) / (4 + s^2).
        ratio = np.minimum(1.6 * (wide * stamps).sum(axis=(1, 2)) / total / of_point, 3.9)
        width = 2.0 * np.sqrt(np.maximum(ratio - 1.0, 0.0) / (4.0 - ratio))
        error = np.hypot(0.4247 * beam.fwhm / snr, SAMPLING_ERROR)
    seen = whole & (snr >= LEAST_SNR) & (np.hypot(dx, dy) < REACH / 1.5 * beam.major)
    dx, dy, error, snr, width = (np.where(seen, values, np.nan) for values in (dx, dy, error, snr, width))
    with np.errstate(invalid="ignore"):
        flat = flat & (snr >= FLAT_SNR)
    return Centroids(dx, dy, error, snr, width, highest, flat)


def _beam_at(beam: BeamShape, gx: FloatArray, gy: FloatArray) -> FloatArray:
    """The beam, 1 at its middle, at offsets (n, columns) and (n, rows): shape (n, rows, columns)."""
    c, s = math.cos(beam.angle), math.sin(beam.angle)
    u, v = gx[:, None, :], gy[:, :, None]
    along, across = (c * u + s * v) / beam.major, (c * v - s * u) / beam.minor
    return np.asarray(np.exp(-LOG16 * (along * along + across * across)))


def _start(
    stamps: FloatArray, fx: FloatArray, fy: FloatArray, sigma: FloatArray, whole: NDArray[np.bool_], beam: BeamShape
) -> tuple[FloatArray, FloatArray]:
    """Where to begin, shape (n,) twice: the median offset of the highest pixels, the same for every source."""
    half = stamps.shape[1] // 2
    grid = np.arange(-half, half + 1, dtype=float)
    inside = np.hypot(grid[:, None], grid).ravel() <= BORDER * beam.major
    flat = np.where(inside, stamps.reshape(len(stamps), -1), -np.inf)
    at = flat.argmax(axis=1)
    with np.errstate(invalid="ignore"):
        bright = whole & (flat[np.arange(len(flat)), at] >= LEAST_SNR * sigma)
    if not bright.any():
        return np.zeros(len(stamps)), np.zeros(len(stamps))
    row, column = np.divmod(at[bright], stamps.shape[2])
    return (
        np.full(len(stamps), np.median(column - half - fx[bright])),
        np.full(len(stamps), np.median(row - half - fy[bright])),
    )


def pointing(
    found: Centroids, x: FloatArray, y: FloatArray, shape: tuple[int, int], beam: BeamShape
) -> Pointing | None:
    """The shift that centroids of sources predicted at (x, y), shape (n,), agree on; None with fewer than three.

    A gradient over the image is fitted where it improves the fit beyond chance (F test; common practice, no source).
    Errors are those of the scatter about the fit where that is larger than the centroids' own.
    """
    known = np.isfinite(found.dx)
    if known.sum() < FEWEST:
        return None
    middle_dx, middle_dy = np.median(found.dx[known]), np.median(found.dy[known])
    with np.errstate(invalid="ignore"):
        known &= np.hypot(found.dx - middle_dx, found.dy - middle_dy) <= FURTHEST * beam.major
    n = int(known.sum())
    if n < FEWEST:
        return None
    middle = ((shape[1] - 1) / 2.0, (shape[0] - 1) / 2.0)
    scale = max(shape) / 2.0
    place = np.stack((np.ones(n), (x[known] - middle[0]) / scale, (y[known] - middle[1]) / scale), axis=1)
    seen = np.stack((found.dx[known], found.dy[known]), axis=1)
    fit, chi2, covariance = _robust_fit(place[:, :1], seen, found.error[known])
    spare = 2 * n - 2
    if n >= FEWEST_FOR_GRADIENT:
        wider, wider_chi2, wider_covariance = _robust_fit(place, seen, found.error[known])
        ratio = max(chi2 - wider_chi2, 0.0) / 4 / max(wider_chi2 / (2 * n - 6), 1e-300)
        if special.fdtrc(4, 2 * n - 6, ratio) < GRADIENT_P:
            fit, chi2, covariance, spare = wider, wider_chi2, wider_covariance, 2 * n - 6
    excess = max(1.0, chi2 / max(1, spare))
    gradient = fit[1:].T / scale if len(fit) > 1 else np.zeros((2, 2))
    residual = np.hypot(*(seen - place[:, : len(fit)] @ fit).T)
    return Pointing(
        fit[0], gradient, middle, float((covariance[0, 0] * excess) ** 0.5), float(np.median(residual)) / 1.1774, n
    )


def _robust_fit(place: FloatArray, seen: FloatArray, error: FloatArray) -> tuple[FloatArray, float, FloatArray]:
    """Weighted least squares of both offsets on the columns of `place`, with Huber's weights.

    Returns coefficients (k, 2), chi-square (as Huber counts it) and covariance (k, k) of either offset.
    """
    fit = np.zeros((place.shape[1], 2))
    fit[0] = np.median(seen, axis=0)
    covariance = np.zeros((place.shape[1],) * 2)
    pull = np.zeros_like(seen)
    for _ in range(REWEIGHTINGS):
        pull = (seen - place @ fit) / error[:, None]
        distance = np.hypot(*pull.T) / 2**0.5
        spread = max(1.0, MAD_TO_SIGMA * float(np.median(np.abs(pull))))
        weight = np.minimum(1.0, HUBER * spread / np.maximum(distance, 1e-300)) / error**2
        covariance = np.linalg.pinv((place * weight[:, None]).T @ place, hermitian=True)
        fit = covariance @ (place * weight[:, None]).T @ seen
    pull = (seen - place @ fit) / error[:, None]
    inside = np.minimum(1.0, HUBER * spread / np.maximum(np.hypot(*pull.T) / 2**0.5, 1e-300))
    return fit, float((inside[:, None] * pull**2).sum()), covariance
