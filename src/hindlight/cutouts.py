"""Cut-outs of several frames on one grid: what bright frames add to quiet ones. Pure.

A variable beside a steady source is told by the light that is added, not by the light that is there.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from scipy import ndimage

from hindlight.lightcurve import FloatArray, LightCurve
from hindlight.plugin import Candidate, Cutout

RING = (0.7, 2.5)  # beams: where a steady source spoils centroid and shape
SEEN = 4.0  # sigma that a steady source has in the mean of the quiet frames
QUIET_FRAMES = 10
SPOILS = 0.15  # a steady source of this part of the bright frame's height spoils them


def beam_arcsec(cutout: Cutout) -> float:
    """Width of a cut-out's beam on the sky."""
    return float(cutout.fwhm * abs(np.linalg.det(cutout.to_sky)) ** 0.5)


def quiet_cutouts(candidate: Candidate, at: int, half_width: float) -> list[Cutout]:
    """Cut-outs of up to ten quiet frames of curve number `at` of a candidate, evenly over it."""
    frames = candidate.curves[at].frame[~candidate.bright[at]]
    rows = np.linspace(0, len(frames) - 1, min(len(frames), QUIET_FRAMES)).round().astype(np.int64)
    return list(candidate.cutouts(frames[np.unique(rows)], half_width)) if len(frames) else []


def mean_at(cutouts: Sequence[Cutout], offsets: FloatArray) -> FloatArray:
    """Mean of cut-outs less their backgrounds at offsets (east, north) in arcsec from the position, shape (2, n).

    Shape (n,), NaN where no cut-out reaches; between pixels by cubic splines.
    """
    total, number = np.zeros(offsets.shape[1]), np.zeros(offsets.shape[1])
    for cutout in cutouts:
        x, y = np.linalg.inv(cutout.to_sky) @ offsets
        place = y + cutout.y, x + cutout.x
        data = cutout.pixels - cutout.background
        there = np.isfinite(data)
        value = ndimage.map_coordinates(np.where(there, data, 0.0), place, order=3, mode="nearest")
        reached = ndimage.map_coordinates(there.astype(float), place, order=1, cval=0.0) > 0.999
        total += np.where(reached, value, 0.0)
        number += reached
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(number > 0, total / number, np.nan))


def added(cutout: Cutout, quiet: Sequence[Cutout]) -> tuple[Cutout, float]:
    """The cut-out less the mean of quiet ones where a steady source stands beside, and that source's relative height.

    The height is that of the brightest steady source between 0.7 and 2.5 beams over the cut-out's within one beam. Where it
    is below 0.15, or not seen, or there are no quiet ones, the cut-out is returned as it is, and 0.
    """
    if not quiet:
        return cutout, 0.0
    y, x = np.indices(cutout.pixels.shape, dtype=float)
    off = np.stack((x - cutout.x, y - cutout.y)).reshape(2, -1)
    steady = mean_at(quiet, cutout.to_sky @ off)
    far = np.hypot(*off) / cutout.fwhm
    ring = (far >= RING[0]) & (far <= RING[1]) & np.isfinite(steady)
    excess = (cutout.pixels - cutout.background).ravel() - steady
    core = (far <= 1.0) & np.isfinite(excess)
    if not ring.any() or not core.any():
        return cutout, 0.0
    height = float(np.abs(steady[ring]).max())
    noise = float(np.median([one.rms for one in quiet])) / len(quiet) ** 0.5
    own = float(np.abs(excess[core]).max())
    if height < SEEN * noise or height < SPOILS * own or own <= 0.0:
        return cutout, 0.0
    pixels = cutout.background + excess.reshape(cutout.pixels.shape)
    return replace(cutout, pixels=pixels), height / own


def added_part(curve: LightCurve) -> FloatArray:
    """How much of each flux is above the quiet level, 0 to 1, shape (n,): what is left of it where `added` takes light off.

    A source that is never dark is seen in the mean of the quiet frames as well, and is taken off like any other steady one.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        part = 1.0 - curve.quiet_level[0] / curve.flux
    return np.asarray(np.clip(np.nan_to_num(part, nan=1.0), 0.0, 1.0))
