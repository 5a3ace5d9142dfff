"""What made-up sources that are bright in single frames are ranked among: controls made as bright, as targets are.

A run copies controls for each group of targets alike in brightness. Made-up sources have the same flux in median frame errors
in all channels, so a ladder of brightnesses serves them all; rungs on which calibration has no part in the scatter are left
out, since copies rank there as blank sky does. Pure: numbers and judgements in, nulls out.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from hindlight import calibrate
from hindlight.completeness import BRIGHTER, Cell, Null
from hindlight.injection import PULSES, SMOOTH
from hindlight.judge import Judgement
from hindlight.lifted import Lift, Residuals, how_many
from hindlight.settings import Settings

LEAST_SHARE = 0.05  # of calibration in the variance


@dataclass(frozen=True)
class Rung:
    """Sources of one step of `completeness.brightness`: how bright their copies are, and how many comparisons tell what

    calibration leaves in the channel where it has the largest share of the variance.
    """

    step: int
    lift: Lift
    n_sources: int


def rungs(
    cells: Sequence[Cell], units: Mapping[str, float], left: Mapping[str, Residuals], settings: Settings
) -> list[Rung]:
    """The rungs that sources of these cells need.

    `units` are median frame errors by channel, `left` is what calibration leaves.
    """
    labels = sorted(label for label in left if np.isfinite(units.get(label, np.nan)))
    if not labels:
        return []
    highest = max(_mean(cell) for cell in cells)
    first = int(np.rint(np.log(settings.controls.bright_target_snr) / np.log(BRIGHTER)))
    found = []
    for step in range(first, int(np.ceil(np.log(max(1.0, highest)) / np.log(BRIGHTER))) + 1):
        flux = BRIGHTER**step
        scatter = {label: float(np.median(left[label].extra)) * flux for label in labels}
        leading = max(labels, key=lambda label: scatter[label])
        share = scatter[leading] ** 2 / (1.0 + scatter[leading] ** 2)
        if share >= LEAST_SHARE:
            levels = {label: flux * units[label] for label in labels}
            found.append(Rung(step, Lift(levels), len(left[leading].values)))
    return found


def _mean(cell: Cell) -> float:
    """The mean brightness of a source in median frame errors."""
    share = {SMOOTH: 0.5, PULSES: cell.duty_cycle * (1.0 - cell.missing)}.get(cell.kind, 0.0)
    return cell.flux * share


def copied_times(rung: Rung, n_controls: int, n_targets: int, settings: Settings) -> int:
    """How often each of a field's controls is copied, as for a target of the run."""
    ranking = settings.ranking
    needed = calibrate.controls_needed(n_targets, ranking.level, ranking.any_dependence)
    return how_many(min(needed, settings.controls.bright_pool), n_controls, rung.n_sources)


def null_on(rung: Rung, blank: Null, judgement: Judgement) -> Null:
    """The null of a rung, from that of blank sky and what was judged of the copies, ids ascending."""
    serving = np.tile(blank.serving, judgement.n // len(blank.ids))
    return replace(blank, serving=serving, judgement=judgement, copied=True, brighter={}, n_sources=rung.n_sources)
