"""Local background and noise: median and MAD of an annulus of pixels around each position.

Which pixels belong to the annulus is decided once, around the nearest pixel's centre, and holds for every position of a
frame. Nothing here knows of sky, units or sources.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.lightcurve import FloatArray, IntArray
from hindlight.pixels import Floats, Pixels
from hindlight.settings import Photometry

MAD_TO_SIGMA = 1.482602  # of a normal distribution
MEDIAN_TO_MEAN = 1.2533  # the median's error over the mean's, sqrt(pi / 2)
FEWEST_PIXELS = 20
CHUNK = 64  # positions at a time: their stamps stay in the processor's cache


@dataclass(frozen=True, eq=False)
class Annulus:
    """Pixels of an annulus on a lattice of every `step`-th row and column.

    `half` is the half width of the square stamp that holds it, a multiple of `step`; `index` of shape (k,) picks its
    pixels from the flattened stamp.
    """

    half: int
    step: int
    index: IntArray

    @classmethod
    def around(cls, fwhm: float, settings: Photometry) -> Annulus:
        """The annulus that the settings ask for, radii in units of `fwhm` (pixels)."""
        inner, outer = settings.annulus_inner * fwhm, max(settings.annulus_outer, settings.annulus_inner) * fwhm
        area = math.pi * (outer**2 - inner**2)
        step = max(1, math.ceil((area / settings.annulus_pixels) ** 0.5))
        half = int(outer) // step * step
        offset = np.arange(-half, half + 1, step, dtype=float) ** 2
        square = offset[:, None] + offset
        inside = (square >= inner**2) & (square <= outer**2)
        return cls(half, step, np.flatnonzero(inside))


@dataclass(frozen=True, eq=False)
class Background:
    """Per position, shape (n,): median, 1.4826 MAD (NaN below 20 pixels or where all are equal), pixels used."""

    level: FloatArray
    rms: FloatArray
    used: IntArray

    def error(self, beam_pixels: float) -> FloatArray:
        """1-sigma error of the median, where `beam_pixels` pixels of the annulus have independent noise together.

        MEDIAN_TO_MEAN rms / sqrt(n), exact for white noise (`beam_pixels` = 1), an upper bound for correlated noise.
        """
        independent = np.maximum(1.0, self.used / max(1.0, beam_pixels))
        return MEDIAN_TO_MEAN * self.rms / np.sqrt(independent)


def local_background(pixels: Pixels, ix: IntArray, iy: IntArray, annulus: Annulus) -> Background:
    """Background and noise around pixels (ix, iy), shape (n,)."""
    n = len(ix)
    level, rms, used = np.empty(n), np.empty(n), np.empty(n, np.int64)
    for start in range(0, n, CHUNK):
        part = slice(start, start + CHUNK)
        stamps = pixels.stamps(ix[part], iy[part], annulus.half, annulus.step)
        ring = np.take(stamps.reshape(len(stamps), -1), annulus.index, axis=1, mode="clip")
        level[part], rms[part], used[part] = median_and_mad(ring)
    rms *= MAD_TO_SIGMA
    rms[(used < FEWEST_PIXELS) | (rms == 0.0)] = np.nan
    return Background(level, rms, used)


def median_and_mad(values: Floats) -> tuple[FloatArray, FloatArray, IntArray]:
    """Median, median absolute deviation from it, and number of values that are not NaN, for each row of (n, k).

    `values` is used as scratch. Rows come out the same whatever other rows are with them. NaN for a row without values.
    """
    n, k = values.shape
    used = np.full(n, k, np.int64)
    if n == 0 or k == 0:
        return np.full(n, np.nan), np.full(n, np.nan), used
    holes = np.isnan(np.min(values, axis=1))
    if holes.any():
        level, spread = np.empty(n), np.empty(n)
        level[holes], spread[holes], used[holes] = _with_holes(values[holes])
        if not holes.all():
            level[~holes], spread[~holes] = _without_holes(values[~holes])
        return level, spread, used
    return *_without_holes(values), used


def _without_holes(values: Floats) -> tuple[FloatArray, FloatArray]:
    """Rows without NaN, by selection in place: half the values are left below the median and half above it."""
    half = values.shape[1] // 2
    level = _middle(values)
    column = level.astype(values.dtype)[:, None]
    np.subtract(column, values[:, :half], out=values[:, :half])
    np.subtract(values[:, half:], column, out=values[:, half:])
    # Deviations are not negative, and such floats sort like the integers of the same bits, which is faster.
    return level, _middle(values, np.int32 if values.dtype.itemsize == 4 else np.int64)


def _middle(values: Floats, sort_as: Any = None) -> FloatArray:
    """The median of each row of (n, k); the values are left with the k // 2 smaller ones in front."""
    half = values.shape[1] // 2
    sorted_view: NDArray[Any] = values if sort_as is None else values.view(sort_as)
    sorted_view.partition(half, axis=1)
    upper = values[:, half].astype(float)
    if values.shape[1] % 2:
        return upper
    lower = np.max(values[:, :half], axis=1).astype(float)
    middle: FloatArray = (lower + upper) / 2.0
    return middle


def _with_holes(values: Floats) -> tuple[FloatArray, FloatArray, IntArray]:
    """Rows with NaN, by sorting, which puts NaN last."""
    used = np.count_nonzero(~np.isnan(values), axis=1)
    values.sort(axis=1)
    level = _sorted_middle(values, used)
    values = np.abs(values - level.astype(values.dtype)[:, None])
    values.sort(axis=1)
    return level, _sorted_middle(values, used), used


def _sorted_middle(values: Floats, used: IntArray) -> FloatArray:
    """The median of the first `used` values of each sorted row; at least one more value (NaN) stands behind them."""
    rows = np.arange(len(values))
    lower, upper = values[rows, np.maximum(used - 1, 0) // 2], values[rows, used // 2]
    middle: FloatArray = (lower.astype(float) + upper.astype(float)) / 2.0
    return middle
