"""Bright sources of a whole image: what blank control positions must keep clear of.

Not for measuring: only for knowing where the sky is not blank.
"""

from __future__ import annotations

import warnings
from itertools import pairwise

import numpy as np
from photutils.detection import find_peaks
from photutils.utils.exceptions import NoDetectionsWarning

from hindlight.background import MAD_TO_SIGMA, median_and_mad
from hindlight.lightcurve import FloatArray
from hindlight.pixels import Floats
from hindlight.plugin import BeamShape

BOX_FWHM = 32.0  # the noise is taken as constant over boxes of this width
FEWEST_BOX_PIXELS = 64
BOX_SAMPLES = 4096  # pixels of a box that its median and noise are taken from, at most about


def detect_bright(image: Floats, beam: BeamShape, snr: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Local maxima above `snr` times the robust noise around them.

    `image` has shape (height, width), NaN where blank. Returns 0-based x, y of whole pixels and the S/N, shape (n,),
    in order of rows.
    """
    level, rms = box_statistics(image, beam.fwhm)
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = (image - level) / rms
    ratio[~np.isfinite(ratio)] = 0.0
    size = 2 * max(1, round(beam.fwhm / 2)) + 1
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NoDetectionsWarning)
        found = find_peaks(ratio, snr, box_size=size)
    if found is None:
        return np.empty(0), np.empty(0), np.empty(0)
    x, y, peak = (np.asarray(found[name], float) for name in ("x_peak", "y_peak", "peak_value"))
    return x, y, peak


def box_statistics(image: Floats, fwhm: float) -> tuple[Floats, Floats]:
    """Median and 1.4826 MAD of boxes, as images of the same shape; noise is NaN where a box is blank or constant."""
    side = max(FEWEST_BOX_PIXELS, round(BOX_FWHM * fwhm))
    level, rms = np.empty_like(image), np.empty_like(image)
    rows, columns = (np.linspace(0, n, max(1, round(n / side)) + 1).astype(int) for n in image.shape)
    for top, bottom in pairwise(rows):
        for left, right in pairwise(columns):
            box = image[top:bottom, left:right]
            step = max(1, int((box.size / BOX_SAMPLES) ** 0.5))
            middle, spread, _ = median_and_mad(box[::step, ::step].reshape(1, -1).copy())
            level[top:bottom, left:right] = middle[0]
            rms[top:bottom, left:right] = spread[0] * MAD_TO_SIGMA if spread[0] > 0 else np.nan
    return level, rms
