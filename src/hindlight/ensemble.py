"""From the comparisons' raw fluxes to each frame's gain, error scale, extra scatter and verdict, and their use.

For now no comparison is measured: every frame has gain 1 and the verdict 'uncalibrated', which says so. What reads
light curves goes through `calibrated` already, so a solution changes fluxes without a pixel being read again.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.lightcurve import FloatArray, IntArray

Columns = dict[str, Any]


def uncalibrated(frames: IntArray, channels: NDArray[np.object_]) -> Columns:
    """The solution that changes nothing, for frames of shape (n,)."""
    n = len(frames)
    return {
        "frame": frames,
        "channel": channels,
        "gain": np.ones(n),
        "gain_err": np.full(n, np.nan),
        "shift_x": np.full(n, np.nan),
        "shift_y": np.full(n, np.nan),
        "error_scale": np.ones(n),
        "extra_scatter": np.zeros(n),
        "n_comparisons": np.zeros(n, np.int64),
        "verdict": np.full(n, "uncalibrated", dtype=object),
    }


def calibrated(
    frame: IntArray, flux: FloatArray, flux_err: FloatArray, solution: Columns
) -> tuple[FloatArray, FloatArray, NDArray[np.bool_]]:
    """Calibrated flux and error, and whether the frame is bad, for raw rows of shape (n,).

    flux / gain and hypot(flux_err * error_scale, extra_scatter * flux) / gain; `solution` is sorted by frame.
    """
    at = np.searchsorted(solution["frame"], frame)
    gain = solution["gain"][at]
    error = np.hypot(flux_err * solution["error_scale"][at], solution["extra_scatter"][at] * flux)
    return flux / gain, error / gain, np.asarray(solution["verdict"][at] == "bad")
