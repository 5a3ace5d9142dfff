"""Whether two images show one exposure, as their pixels say: equal within the step of storing, or with shared noise.

Pixels of some windows are compared, on the grid of the smaller image. Nothing here knows of tables or of time.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from hindlight.background import MAD_TO_SIGMA
from hindlight.headers import SetAsideError
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.opening import FrameToMeasure, OpenFrame, open_frame
from hindlight.pixels import Lattice, Windows
from hindlight.settings import Settings

WINDOWS = 8  # at most, across and down
WINDOW_FWHM = 2.0  # half width of a window
HALF_WIDTHS = (3, 11)  # pixels
SAMPLES_KEPT = 512  # of at most 34,000 pixels each
SHIFT_TOLERANCE = 0.05  # pixels: grids shifted by a whole number to this accuracy are one grid
FEWEST_PIXELS = 64
AGREEING = 0.98  # of the pixels that say anything must be equal
ROUNDING = 1e-6  # of a value: single against double precision
HALF_STEP = 0.51  # of the step between stored values
NOISE_SHARE = 0.5  # of the noise: more tolerance would make any two images equal
CHANCE = 25.0  # minus the logarithm of the chance that unlike images agree as well
SHARED_NOISE = 0.5  # correlation of the noise, from which on it is one exposure
CLIP_SIGMA = 4.0
SIGNIFICANCE = 5.0
PATTERN_SEED = 20

Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Likeness:
    """What pixels say of two frames: `word` is equal, noise (the noise is shared) or ''; the noise's correlation."""

    word: str = ""
    correlation: float = float("nan")


@dataclass(frozen=True, eq=False)
class Sample:
    """Pixels of an image in some windows, shape (n, side, side), NaN where there are none.

    `quantum` is the step between stored values, 0 where there is none; `packed` says that packing may have changed them.
    """

    values: FloatArray
    quantum: float = 0.0
    packed: bool = False

    @cached_property
    def flat(self) -> FloatArray:
        """The values without their windows' medians, 0 where there is no value."""
        flat = np.zeros(self.values.shape)
        for window, out in zip(self.values, flat, strict=True):
            there = np.isfinite(window)
            if there.any():
                out[there] = window[there] - np.median(window[there])
        return flat

    @cached_property
    def sigma(self) -> float:
        """1.4826 MAD of the flat values; NaN where there is none."""
        there = np.isfinite(self.values)
        return MAD_TO_SIGMA * float(np.median(np.abs(self.flat[there]))) if there.any() else float("nan")

    def background(self, reach: int) -> Mask:
        """Pixels that belong to no source and no hole: not far from the window's median nor within `reach` of such.

        Wings of sources are in both images; left in, they would pass for shared noise.
        """
        disc = np.hypot(*np.mgrid[-reach : reach + 1, -reach : reach + 1]) <= reach
        far = np.abs(self.flat) >= CLIP_SIGMA * self.sigma
        return np.asarray(~ndimage.binary_dilation(far, disc[None]) & np.isfinite(self.values))


def compare(
    frames: Sequence[FrameToMeasure], pairs: Sequence[tuple[int, int]], strict: Sequence[bool], settings: Settings
) -> list[Likeness]:
    """What pixels say of pairs of these frames; nothing where one cannot be read."""

    @cache
    def opened(index: int) -> OpenFrame:
        return open_frame(frames[index], settings)

    @lru_cache(SAMPLES_KEPT)
    def own(index: int, half: int) -> Sample:
        return _sample(opened(index), *_pattern(opened(index), half), half)

    found = []
    for (i, j), equal_only in zip(pairs, strict, strict=True):
        try:
            a, b = (i, j) if _extent(opened(i)) <= _extent(opened(j)) else (j, i)
            half = _half_width(opened(a))
            if _one_grid(opened(a), opened(b)):
                other = own(b, half)
            else:
                other = _mapped(opened(a), opened(b), half, frames[a].mjd, frames[b].mjd)
            per_value, reach = _per_value(opened(a), own(a, half)), _reach(opened(a), half)
            found.append(alike(own(a, half), other, per_value, reach, equal_only))
        except (SetAsideError, OSError, ValueError):
            found.append(Likeness())
    return found


def _extent(frame: OpenFrame) -> float:
    return frame.sky.pixel_scale_arcsec * math.hypot(frame.place.width, frame.place.height)


def _one_grid(a: OpenFrame, b: OpenFrame) -> bool:
    """Whether two images have the same size and the same celestial cards (projections are kept by those)."""
    return a.sky is b.sky and (a.place.width, a.place.height) == (b.place.width, b.place.height)


def _per_value(frame: OpenFrame, sample: Sample) -> float:
    """Pixels of a sample for each independent value of the noise, at least one.

    There is one a beam, or one a window where those are smaller, but not more than beams in the image.
    """
    beam = max(1.0, math.pi * frame.beam.major * frame.beam.minor / (4.0 * math.log(2.0)))
    n_windows, n_pixels = len(sample.values), sample.values.size
    independent = min(max(n_pixels / beam, n_windows), frame.place.width * frame.place.height / beam)
    return n_pixels / max(1.0, independent)


def _reach(frame: OpenFrame, half: int) -> int:
    """How far around a bright pixel its source is taken to reach."""
    return max(1, min(half, round(frame.beam.fwhm)))


def _half_width(frame: OpenFrame) -> int:
    """Of the windows: some beams, but at least two windows must fit side by side."""
    low, high = HALF_WIDTHS
    wanted = min(high, max(low, round(WINDOW_FWHM * frame.beam.fwhm)))
    return max(1, min(wanted, (min(frame.place.width, frame.place.height) // 2 - 1) // 2))


def _pattern(frame: OpenFrame, half: int) -> tuple[IntArray, IntArray]:
    """Middles of windows spread over an image: always the same ones for an image of that size."""
    jitter = np.random.default_rng(PATTERN_SEED).random((2, WINDOWS))
    side = 2 * half + 1

    def middles(length: int, share: FloatArray) -> IntArray:
        n = min(WINDOWS, max(1, length // side))
        free = max(0.0, length / n - side)
        return np.asarray(np.floor(np.arange(n) * length / n + share[:n] * free) + half, np.int64)

    x, y = np.meshgrid(middles(frame.place.width, jitter[0]), middles(frame.place.height, jitter[1]))
    return x.ravel(), y.ravel()


def _sample(frame: OpenFrame, ix: IntArray, iy: IntArray, half: int) -> Sample:
    """Windows around pixels of a frame."""
    pixels = frame.pixels(Windows(ix, iy, half))
    values = pixels.stamps(ix, iy, Lattice.square(half)).astype(float)
    return Sample(values, pixels.quantum, frame.place.image.hdu.compressed)


def _mapped(a: OpenFrame, b: OpenFrame, half: int, mjd_a: float, mjd_b: float) -> Sample:
    """The second image where the first one's windows lie, on the first one's pixels.

    As they are stored where the grids differ by a whole number of pixels, interpolated linearly elsewhere.
    """
    ix, iy = _pattern(a, half)
    x, y = b.sky.icrs_to_pixel(*a.sky.pixel_to_icrs(ix.astype(float), iy.astype(float), mjd_a), mjd_b)
    if not (np.isfinite(x).all() and np.isfinite(y).all()):
        raise ValueError("the one image lies beyond the other's projection")
    shift = np.array([x - ix, y - iy])
    whole = np.rint(np.median(shift, axis=1))
    if np.abs(shift - whole[:, None]).max() <= SHIFT_TOLERANCE:
        return _sample(b, ix + int(whole[0]), iy + int(whole[1]), half)
    offset = np.arange(-half, half + 1)
    columns = np.broadcast_to(ix[:, None, None] + offset, (len(ix), len(offset), len(offset)))
    rows = np.broadcast_to(iy[:, None, None] + offset[:, None], columns.shape)
    sky = a.sky.pixel_to_icrs(columns.ravel().astype(float), rows.ravel().astype(float), mjd_a)
    px, py = (np.nan_to_num(p, nan=-1e6).clip(-1e6, 1e9) for p in b.sky.icrs_to_pixel(*sky, mjd_b))
    jx, jy = (np.floor(p + 0.5).astype(np.int64) for p in (px, py))
    reach = math.ceil(half * 1.5 * a.sky.pixel_scale_arcsec / b.sky.pixel_scale_arcsec) + 2
    pixels = b.pixels(Windows(np.rint(x).astype(np.int64), np.rint(y).astype(np.int64), reach))
    near = pixels.stamps(jx, jy, Lattice.square(1)).astype(float)
    values = np.einsum("nij,ni,nj->n", near, _linear(py - jy), _linear(px - jx))
    return Sample(values.reshape(columns.shape), 0.0, b.place.image.hdu.compressed)


def _linear(offset: FloatArray) -> FloatArray:
    """Weights (n, 3) of the pixels before, at and after the nearest one, for offsets within half a pixel."""
    return np.stack([np.maximum(-offset, 0.0), 1.0 - np.abs(offset), np.maximum(offset, 0.0)], axis=1)


def alike(a: Sample, b: Sample, per_value: float, reach: int = 1, equal_only: bool = False) -> Likeness:
    """What two samples of the same places say of their images.

    `per_value` of their pixels have one independent value of the noise; sources reach `reach` pixels.

    Equal: nearly all pixels that are not the background's commonest value agree within the step of storing, and unlike
    images would not. Noise: what is left without local level and without sources is correlated beyond chance.
    """
    if _equal(a, b, per_value):
        return Likeness("equal", 1.0)
    if equal_only:
        return Likeness()
    clean = a.background(reach) & b.background(reach)
    independent = np.count_nonzero(clean) / per_value
    if independent <= 4.0 or np.count_nonzero(clean) < FEWEST_PIXELS:
        return Likeness()
    if min(np.std(a.flat[clean]), np.std(b.flat[clean])) == 0.0:
        return Likeness()
    rho = float(np.corrcoef(a.flat[clean], b.flat[clean])[0, 1])
    beyond = math.atanh(min(rho, 1.0 - 1e-12)) * math.sqrt(independent - 3.0)  # R. A. Fisher 1921
    return Likeness("noise" if rho > SHARED_NOISE and beyond > SIGNIFICANCE else "", rho)


def _equal(a: Sample, b: Sample, per_value: float) -> bool:
    """Whether the pixels that say anything are the same, and would not be by chance."""
    good = np.isfinite(a.values) & np.isfinite(b.values)
    if np.count_nonzero(good) < FEWEST_PIXELS:
        return False
    x, y = a.values[good], b.values[good]
    telling = (x != np.median(x)) | (y != np.median(y))
    x, y = x[telling], y[telling]
    most = NOISE_SHARE * min(a.sigma, b.sigma)
    tolerance = most if a.packed or b.packed else min(HALF_STEP * max(a.quantum, b.quantum), most)

    def agreement(other: FloatArray) -> float:
        return float(np.mean(np.abs(x - other) <= tolerance + ROUNDING * np.abs(x)))

    if len(x) < FEWEST_PIXELS or agreement(y) < AGREEING:
        return False
    by_chance = max(agreement(np.random.default_rng(PATTERN_SEED).permutation(y)), 1.0 / len(y))
    return -math.log(by_chance) * len(x) / per_value > CHANCE
