"""The brightest frames of a light curve against its faintest: what varies where no single frame is bright. Pure.

A source that varies smoothly about a mean is bright in few single frames or in none. Added up, its brightest and its
faintest frames still differ, and the difference shows where the light is that comes and goes: at the position, aside, or
nowhere, since a steady source beside the position that is now nearer and now further away varies there too.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import ndimage

from hindlight.cutouts import beam_arcsec, mean_at
from hindlight.lightcurve import IntArray, LightCurve
from hindlight.plugin import Candidate, Cutout

FEWEST = 4  # frames in a third
MOST = 30  # frames of a third that are added up
APART = 3.0  # typical errors between the medians of both thirds: those of noise alone are 1.94 apart
GAINS = (0.5, 2.0)  # factors of the flux scale that are believed of one frame
AROUND = 1.5  # beams around the steady source in which its motion is fitted
SLOPE = np.array([1.0, -8.0, 0.0, 8.0, -1.0]) / 12.0  # derivative of samples, to fourth order


def brightest_and_faintest(curve: LightCurve) -> tuple[IntArray, IntArray]:
    """Rows of the brightest and of the faintest third of a curve's frames by flux, up to thirty of each, in order of flux.

    Empty where a third has fewer than four frames, or the thirds' medians are less than three typical errors apart: then it
    is noise that sorts them, or what varies is in fewer frames (and those are bright by themselves). Where noise has the
    fraction s of the variance it is s of what such thirds differ by at the position: what lies elsewhere seems nearer by s.
    """
    third = len(curve) // 3
    nobody: IntArray = np.empty(0, np.int64)
    if third < FEWEST:
        return nobody, nobody
    by_flux = np.argsort(curve.flux, kind="stable")
    low, high = by_flux[:third], by_flux[-third:]
    apart = float(np.median(curve.flux[high]) - np.median(curve.flux[low]))
    if not apart >= APART * float(np.median(curve.flux_err[np.concatenate((low, high))])):
        return nobody, nobody
    some = np.linspace(0, third - 1, min(third, MOST)).round().astype(np.int64)
    return high[some], low[some]


def _grid(cutouts: Sequence[Cutout], half_width: float) -> Cutout:
    """An empty cut-out, north up and east left around the position, of median beam and pixel."""
    scale = float(np.median([abs(np.linalg.det(one.to_sky)) ** 0.5 for one in cutouts]))
    fwhm = float(np.median([beam_arcsec(one) for one in cutouts])) / scale
    half = math.ceil(half_width * fwhm)
    return Cutout(
        frame=-1, channel=cutouts[0].channel, pixels=np.zeros((2 * half + 1, 2 * half + 1)), x=float(half), y=float(half),
        to_sky=np.diag([-scale, scale]), fwhm=fwhm, background=0.0, rms=0.0,
        fwhm_known=all(one.fwhm_known for one in cutouts),
    )  # fmt: skip


def _mean_on(grid: Cutout, cutouts: Sequence[Cutout]) -> Cutout:
    """The mean of cut-outs, at least one, less their backgrounds on the pixels of a grid, NaN where none reaches.

    `rms` is that of the mean.
    """
    y, x = np.indices(grid.pixels.shape, dtype=float)
    offsets = grid.to_sky @ np.stack((x - grid.x, y - grid.y)).reshape(2, -1)
    rms = float(np.sum([one.rms**2 for one in cutouts]) ** 0.5) / len(cutouts)
    return replace(grid, pixels=mean_at(cutouts, offsets).reshape(grid.pixels.shape), rms=rms)


@dataclass(frozen=True, eq=False)
class Contrast:
    """What the brightest frames of a curve have more than the faintest, added up.

    `added` is the mean of the brightest less that of the faintest, `light` the mean of them all; `n` is the number of
    frames and `snr` the difference of the fluxes at the position over its error.
    """

    added: Cutout
    light: Cutout
    n: int
    snr: float


def contrast(candidate: Candidate, at: int, half_width: float) -> Contrast | None:
    """The brightest against the faintest frames of curve number `at`; None where neither can be told or read.

    See `brightest_and_faintest`. Pixels are put on the light curve's flux scale.
    """
    curve = candidate.curves[at]
    thirds = brightest_and_faintest(curve)
    if len(thirds[0]) == 0:
        return None
    stacks = [_on_scale(curve, candidate.cutouts(curve.frame[np.sort(rows)], half_width)) for rows in thirds]
    if not all(len(stack) >= FEWEST for stack in stacks):
        return None
    together = [one for stack in stacks for one in stack]
    grid = _grid(together, half_width)
    high, low = (_mean_on(grid, stack) for stack in stacks)
    change = float(curve.flux[thirds[0]].mean() - curve.flux[thirds[1]].mean())
    error = math.hypot(*(float(np.sum(curve.flux_err[rows] ** 2) ** 0.5) / len(rows) for rows in thirds))
    difference = replace(grid, pixels=high.pixels - low.pixels, rms=math.hypot(high.rms, low.rms))
    return Contrast(difference, _mean_on(grid, together), len(together), change / error)


def _on_scale(curve: LightCurve, cutouts: Sequence[Cutout]) -> list[Cutout]:
    """Cut-outs less their backgrounds, times what made calibrated of measured flux in their frames."""
    with np.errstate(divide="ignore", invalid="ignore"):
        factor = np.clip(np.nan_to_num(curve.flux / curve.raw_flux, nan=1.0), *GAINS)
    of = dict(zip(curve.frame.tolist(), factor.tolist(), strict=True))
    return [
        replace(one, pixels=(one.pixels - one.background) * of[one.frame], background=0.0, rms=one.rms * of[one.frame])
        for one in cutouts
    ]


@dataclass(frozen=True)
class Motion:
    """What of a contrast is light of a steady source that moved or changed as a whole, by least squares.

    `shift` is by how much the source lies elsewhere in the brightest frames than in the faintest (east, north; arcsec) and
    `scaled` by what fraction it is brighter; `moved` is what both change at the position, `there` what a point at the
    position adds beside them, in units of the pixels. `delta_chi2` is by how much motion and change, three numbers,
    describe the contrast better than a point at the position alone, one number; negative where the point does better.
    """

    shift: tuple[float, float]
    scaled: float
    moved: float
    there: float
    delta_chi2: float


def motion(found: Contrast, east: float, north: float, floor: float) -> Motion | None:
    """The mean light of a contrast, its gradient and a point at the position, fitted to the light that is added.

    The source of the mean light lies `east` and `north` of the position, in arcsec; pixels within 1.5 beams of either are
    used. First order in the shift. `floor`, a fraction of what is added, is by how much models may be wrong. None where
    too few pixels are known, or nothing is added at the position.
    """
    light, grid = found.light.pixels, found.light
    y, x = np.indices(light.shape, dtype=float)
    x, y = x - grid.x, y - grid.y
    at_x, at_y = np.linalg.inv(grid.to_sky) @ (east, north)
    point = np.exp(-4 * math.log(2) * (x**2 + y**2) / grid.fwhm**2)
    known = np.isfinite(light) & np.isfinite(found.added.pixels)
    filled = np.where(known, light, 0.0)
    models = np.stack([filled, *(ndimage.correlate1d(filled, SLOPE, axis=axis) for axis in (1, 0)), point])
    near = np.minimum(np.hypot(x, y), np.hypot(x - at_x, y - at_y)) <= AROUND * grid.fwhm
    used = near & ndimage.binary_erosion(known, iterations=2)
    here = round(grid.y), round(grid.x)
    height = float(found.added.pixels[here])
    if used.sum() < 4 * len(models) or not height > 0:
        return None
    basis, data = models[:, used].T, found.added.pixels[used]
    error = math.hypot(height / found.snr, floor * height)  # of a point at the position alone
    alike, dx, dy, there = (float(factor) for factor in np.linalg.lstsq(basis, data)[0])
    left = [
        float(np.square(data - some @ np.linalg.lstsq(some, data)[0]).sum()) for some in (basis[:, 3:], basis[:, :3])
    ]
    shift = grid.to_sky @ (-dx, -dy)
    moved = float(models[:3, here[0], here[1]] @ (alike, dx, dy))
    return Motion(
        (float(shift[0]), float(shift[1])), alike, moved, there,
        (left[0] - left[1]) / (float(np.square(basis[:, 3]).sum()) * error**2),
    )  # fmt: skip
