"""Local background and noise: median and MAD of an annulus of pixels around each position.

Which pixels belong to the annulus is decided once, around the nearest pixel's centre, and holds for every position of a
frame. Nothing here knows of sky, units or sources.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.lightcurve import FloatArray, IntArray
from hindlight.pixels import Floats, Lattice
from hindlight.plugin import BeamShape
from hindlight.settings import Photometry

MAD_TO_SIGMA = 1.482602  # of a normal distribution
MEDIAN_TO_MEAN = 1.2533  # the median's error over the mean's, sqrt(pi / 2)
FEWEST_PIXELS = 20
GOLDEN_RATIO = 0.6180339887498949  # its multiples spread most evenly (H. Weyl 1916)
KEPT_BYTES = 24 << 20  # the C library heeds blocks up to 32 MiB
TOLERANCE = 1e-6  # of radii: pixels at a whole number of FWHM must not hang on the last digits of the beam


@dataclass(frozen=True, eq=False)
class Annulus:
    """Pixels of an annulus, on the lattice that holds it.

    Of shape (k,) and picking from the flattened stamp: `index` its pixels, `core` those within a beam's width of the
    middle, `around` those between.
    """

    lattice: Lattice
    index: IntArray
    core: IntArray
    around: IntArray


def annulus_of(beam: BeamShape, settings: Photometry) -> Annulus:
    """The annulus that the settings ask for, in units of the beam's mean width."""
    inner, outer = settings.annulus_inner * beam.fwhm, settings.annulus_outer * beam.fwhm
    return _annulus(beam.major, beam.minor, inner, max(inner, outer), settings.annulus_pixels)


@lru_cache(maxsize=64)
def _annulus(major: float, minor: float, inner: float, outer: float, most: int) -> Annulus:
    """An annulus by its radii and the beam's widths in pixels, with at most about `most` pixels.

    Rows are left out before columns are, since pixels of one row lie together in the file and in memory; but never so
    many that less than one row a beam's width is left.
    """
    fewer = math.ceil((math.pi * (outer**2 - inner**2) / most) ** 0.5) ** 2
    down = max(1, min(fewer, int(minor)))
    across = max(1, math.ceil(fewer / down))
    lattice = Lattice(int(outer) // down * down, int(outer) // across * across, down, across)
    rows, columns = (offset.astype(float) ** 2 for offset in lattice.offsets)
    square = (rows[:, None] + columns).ravel()
    inner, outer = inner * (1.0 - TOLERANCE), outer * (1.0 + TOLERANCE)
    ring = np.flatnonzero((square >= inner**2) & (square <= outer**2))
    core, within = square <= major**2, square < inner**2
    return Annulus(lattice, ring, np.flatnonzero(core), np.flatnonzero(within & ~core))


@dataclass(frozen=True, eq=False)
class Background:
    """Per position, shape (n,): median, 1.4826 MAD (NaN below 20 pixels or where half are equal), pixels used.

    `core` and `around` are the highest pixels within a beam's width, and from there to the annulus.
    """

    level: FloatArray
    rms: FloatArray
    used: IntArray
    core: FloatArray
    around: FloatArray

    def error(self, rms: FloatArray, beam_pixels: float) -> FloatArray:
        """1-sigma error of the median for a noise per pixel, `beam_pixels` pixels having independent noise together.

        MEDIAN_TO_MEAN rms / sqrt(n), exact for white noise (`beam_pixels` = 1), an upper bound for correlated noise.
        """
        independent = np.maximum(1.0, self.used / max(1.0, beam_pixels))
        return MEDIAN_TO_MEAN * rms / np.sqrt(independent)


@lru_cache(maxsize=1)
def keep_freed_memory() -> None:
    """Make the C library keep what is freed, once per process.

    By default glibc gives freed arrays back to the system and takes new ones page by page, which costs more than the
    arithmetic; it keeps blocks up to the largest one freed so far (mallopt(3), M_MMAP_THRESHOLD). Harmless elsewhere.
    """
    np.empty(KEPT_BYTES, np.uint8)


def local_background(stamps: Floats, annulus: Annulus, quantum: float = 0.0) -> Background:
    """Background and noise of stamps on the annulus' lattice, shape (n, rows, columns).

    `quantum` is the step between values where they are counts, see `Pixels`.
    """
    stamps = stamps.reshape(len(stamps), -1)
    ring = np.take(stamps, annulus.index, axis=1, mode="clip")
    with np.errstate(invalid="ignore", over="ignore"):  # infinite pixels may make NaN, never a warning
        if quantum:
            ring += _dither(len(annulus.index), quantum).astype(ring.dtype)
        level, spread, used = median_and_mad(ring)
    core = np.fmax.reduce(np.take(stamps, annulus.core, axis=1), axis=1)
    around = np.full(len(stamps), np.nan)
    if len(annulus.around):
        around = np.fmax.reduce(np.take(stamps, annulus.around, axis=1), axis=1)
    spread[(used < FEWEST_PIXELS) | (spread <= quantum / 2.0)] = np.nan
    return Background(level, spread * MAD_TO_SIGMA, used, core, around)


def _dither(n: int, quantum: float) -> FloatArray:
    """Offsets, shape (n,), spread evenly over one quantum about zero, always the same ones.

    The median of whole numbers is a whole number, up to half a count from the background that a sum of pixels has
    under it; spread out over the interval that each count stands for, they have the right median and MAD.
    """
    return np.asarray((np.arange(1, n + 1) * GOLDEN_RATIO % 1.0 - 0.5) * quantum, dtype=np.float64)


def median_and_mad(values: Floats) -> tuple[FloatArray, FloatArray, IntArray]:
    """Median, median absolute deviation from it, and number of values that are not NaN, for each row of (n, k).

    `values` is used as scratch. Rows come out the same whatever other rows are with them. NaN for a row without values.
    """
    n, k = values.shape
    used = np.full(n, k, np.int64)
    if n == 0 or k == 0:
        return np.full(n, np.nan), np.full(n, np.nan), used
    lowest = np.min(values, axis=1)
    holes = np.isnan(lowest)
    if holes.any():
        level, spread = np.empty(n), np.empty(n)
        level[holes], spread[holes], used[holes] = _with_holes(values[holes])
        if not holes.all():
            level[~holes], spread[~holes] = _without_holes(values[~holes], False)
        return level, spread, used
    return *_without_holes(values, bool((lowest > 0.0).all())), used


def _without_holes(values: Floats, positive: bool) -> tuple[FloatArray, FloatArray]:
    """Rows without NaN, by selection in place: half the values are left below the median and half above it."""
    half = values.shape[1] // 2
    level = _middle(values, positive)
    column = level.astype(values.dtype)[:, None]
    np.subtract(column, values[:, :half], out=values[:, :half])
    np.subtract(values[:, half:], column, out=values[:, half:])
    return level, _middle(values, True)


def _middle(values: Floats, positive: bool) -> FloatArray:
    """The median of each row of (n, k); the values are left with the k // 2 smaller ones in front.

    Floats that are not negative sort like the integers of the same bits, which is faster.
    """
    half = values.shape[1] // 2
    view: NDArray[Any] = values
    if positive:
        view = values.view(np.int32 if values.dtype.itemsize == 4 else np.int64)
    view.partition(half, axis=1)
    upper = values[:, half].astype(float)
    if values.shape[1] % 2:
        return upper
    lower = np.max(values[:, :half], axis=1).astype(float)
    middle: FloatArray = (lower + upper) / 2.0
    return middle


def _with_holes(values: Floats) -> tuple[FloatArray, FloatArray, IntArray]:
    """Rows with values that are no numbers: every other one of those is put below all values and the rest above, which

    leaves the median where it was and lets one selection serve every row.
    """
    holes = ~np.isfinite(values)
    used = np.count_nonzero(~holes, axis=1)
    odd = np.cumsum(holes, axis=1, dtype=np.uint8) & 1  # running over at 256 leaves odd and even as they are
    outside = np.array([np.inf, -np.inf], values.dtype)[odd[holes]]
    filled = values.copy()
    filled[holes] = outside
    level = _middle_between_holes(filled, used)
    deviation = np.abs(values - level.astype(values.dtype)[:, None])
    deviation[holes] = outside
    return level, _middle_between_holes(deviation, used), used


def _middle_between_holes(values: Floats, used: IntArray) -> FloatArray:
    """The median of the `used` finite values of each row of (n, k), NaN for none; see `_with_holes` for the others."""
    k = values.shape[1]
    middle = np.full(len(values), np.nan)
    odd = (k - used) % 2 == 1  # then one more is below than above
    for rows, upper, pair in ((~odd & (used > 0), k // 2, k % 2 == 0), (odd & (used > 0), (k + 1) // 2, k % 2 == 1)):
        if not rows.any():
            continue
        part = values[rows]
        part.partition(upper, axis=1)
        high = part[:, upper].astype(float)
        middle[rows] = (high + part[:, :upper].max(axis=1, initial=-np.inf)) / 2 if pair else high
    return middle
