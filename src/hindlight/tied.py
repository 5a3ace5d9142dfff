"""What a target's row must say of how its frames are tied to comparisons. Sentences only."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from hindlight.comparisons import at_positions, serving
from hindlight.settings import Settings

MOSTLY = 0.5  # of a channel's frames


def of_targets(positions: Mapping[str, Any], frames: Mapping[str, Any], settings: Settings) -> dict[int, str]:
    """By target that serves as a comparison, and by place tried for one, what its row must say of that.

    Gains are a mean over the comparisons of a frame: of what one of them does its part goes into them.
    """
    known = (dict(positions), dict(frames), ("target", "trial"), settings.photometry.assumed_fwhm_pixels)
    ids = positions["id"][positions["kind"] == "comparison"]
    if not settings.comparisons.table:
        ids = serving(*known, settings.comparisons)
    field = dict(zip(positions["id"].tolist(), positions["field"].tolist(), strict=True))
    numbers, counts = np.unique([field[i] for i in ids.tolist()], return_counts=True)
    size = dict(zip(numbers.tolist(), counts.tolist(), strict=True))
    why = "by your own list" if settings.comparisons.table else "since its field has too few others"
    return {
        target: f"serves as a comparison, one of {size[field[source]]}, {why}: about so small a part of its own changes is "
        "taken for the frames'"
        for source, targets in at_positions(*known).items()
        if source in set(ids.tolist())
        for target in targets.tolist()
    }


def untied_note(channels: Sequence[Mapping[str, Any]], settings: Settings) -> str:
    """That a target is bright where no comparisons tie the frames, by its rows of the channel table; '' where it is not.

    No null can tell there what the flux scale does beyond the errors that are assumed.
    """
    bright = []
    for row in channels:
        n, error = row["n_used"], row["flux_mean_err"]
        if n and row["n_calibrated"] < MOSTLY * n and np.isfinite(error) and error > 0:
            snr = row["flux_mean"] / (error * n**0.5)
            bright += [str(row["channel"])] * bool(snr >= settings.controls.bright_target_snr)
    if not bright:
        return ""
    return (
        f"bright in {', '.join(bright)}, where comparisons do not tie the frames: were the flux scale to scatter by more than "
        "its errors say, that would look like variation ([comparisons] uncalibrated_scatter)"
    )
