"""The positions of one field against each other: thresholds from the controls, and every target's rank among them.

Takes what `judge` found for all positions of a field; knows no run folder. The arithmetic is in `calibrate`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm

from hindlight import calibrate
from hindlight.judge import WHOLE, Judgement, oriented
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.plugin import Column
from hindlight.settings import Detection

FAILING_SHARE = 0.05  # a plugin that fails on more of the controls than this gets no p-value
STEADY_SIGMA = 5.0  # controls with a mean flux further out than this do not set detection thresholds
QUIET_SPREAD = 5.0

Key = tuple[str, str]


@dataclass(frozen=True)
class Thresholds:
    """What counts as seen in one channel of one field, from `n_controls` blank positions.

    detected, above_quiet, mean
        In sigma: single flux, single excess over the quiet level, weighted mean flux.
    highest
        The highest single flux at any control, in sigma.
    reduced
        The largest chi-square per degree of freedom at which a series still counts as quiet.
    """

    detected: float
    above_quiet: float
    mean: float
    highest: float
    reduced: float
    n_controls: int


@dataclass(frozen=True, eq=False)
class FieldRanks:
    """Ranks of a field's targets, in their order, with the key of each decisive column and the size of each null."""

    ranks: tuple[calibrate.Rank, ...]
    deciding: tuple[Key | None, ...]
    n_controls: IntArray
    control_p: FloatArray
    keys: tuple[Key, ...]


def calibrated_keys(
    judgement: Judgement, columns: Mapping[str, Column], controls: IntArray, core: bool = False
) -> list[Key]:
    """The (channel, column) pairs that ask about variation and are to be calibrated, in a fixed order.

    Left out are the core's own columns, and those of a plugin that failed on more than 5 % of its calls.
    """
    failed: dict[str, int] = {}
    for fault in judgement.faults:
        failed[fault.plugin] = failed.get(fault.plugin, 0) + fault.count
    shaky = {name for name, count in failed.items() if count > FAILING_SHARE * judgement.calls.get(name, 0)}
    owners = {full: full[: -len(column.name) - 1] for full, column in columns.items()}
    return [
        (channel, full)
        for channel, full in sorted(judgement.values)
        if columns[full].unusual is not None
        and columns[full].about == "variation"
        and owners[full] not in shaky
        and (core or owners[full] != "core")
    ]


def oriented_matrix(
    judgement: Judgement, keys: Sequence[Key], columns: Mapping[str, Column], controls: IntArray
) -> FloatArray:
    """All positions' values of the keys, shape (n_positions, n_keys), turned so that larger is more unusual."""
    found = [
        oriented(judgement.values[key], columns[key[1]], np.asarray(judgement.values[key], float)[controls])
        for key in keys
    ]
    n = len(next(iter(judgement.values.values())))
    return np.stack(found, axis=1) if found else np.empty((n, 0))


def matched(
    judgement: Judgement, targets: IntArray, controls: IntArray, in_frames: NDArray[np.bool_], share: float
) -> NDArray[np.bool_]:
    """Which controls serve which target, shape (n_targets, n_controls).

    `in_frames` says who shares enough frames by footprint; a control must also have nearly as many usable samples in
    each channel.
    """
    good = in_frames.copy()
    for (_, full), values in judgement.values.items():
        if full == "core_n_used":
            good &= values[controls][None, :] >= share * values[targets][:, None]
    return good


def rank_field(
    judgement: Judgement,
    columns: Mapping[str, Column],
    targets: IntArray,
    controls: IntArray,
    serving: NDArray[np.bool_],
) -> FieldRanks:
    """Every target of a field ranked among the controls that serve it; `targets`, `controls` are row indices."""
    keys = calibrated_keys(judgement, columns, controls)
    matrix = oriented_matrix(judgement, keys, columns, controls)
    nulls: dict[bytes, calibrate.Null] = {}
    ranks, deciding = [], []
    for row, mask in zip(targets, serving, strict=True):
        signature = mask.tobytes()
        if signature not in nulls:
            nulls[signature] = calibrate.null_from(matrix[controls[mask]])
        found = calibrate.rank(nulls[signature], matrix[row])
        ranks.append(found)
        deciding.append(keys[found.column] if found.column >= 0 else None)
    control_p = calibrate.leave_one_out(calibrate.null_from(matrix[controls]))
    return FieldRanks(tuple(ranks), tuple(deciding), serving.sum(axis=1), control_p, tuple(keys))


def thresholds(judgement: Judgement, controls: IntArray, detection: Detection) -> dict[str, Thresholds]:
    """What counts as seen, for each channel of the field."""
    labels = sorted({channel for channel, _ in judgement.values if channel != WHOLE})
    return {label: _channel_thresholds(judgement, label, controls, detection, len(labels)) for label in labels}


def _channel_thresholds(
    judgement: Judgement, label: str, controls: IntArray, detection: Detection, n_channels: int
) -> Thresholds:
    def column(name: str) -> FloatArray:
        return np.asarray(judgement.values[label, f"core_{name}"], float)

    rate = detection.false_alarms
    n_used = column("n_used")
    rows = controls[n_used[controls] > 0]
    mean = column("mean_snr")[rows]
    mean_limit = calibrate.robust_threshold(mean, rate / n_channels)
    blank = rows[mean <= calibrate.robust_threshold(mean, norm.sf(STEADY_SIGMA))]
    typical = int(np.median(n_used[n_used > 0])) if np.any(n_used > 0) else 0
    gaussian = calibrate.gaussian_threshold(typical, rate)
    if blank.size < 1:
        k = float(norm.isf(rate / n_channels))
        return Thresholds(gaussian, gaussian, k, gaussian, 2.0, 0)
    reduced = column("reduced")[blank]
    middle = float(np.nanmedian(reduced)) if np.isfinite(reduced).any() else 1.0
    width = (
        float(np.nanmedian(np.abs(reduced - middle))) * calibrate.MAD_TO_SIGMA if np.isfinite(reduced).any() else 0.2
    )
    too_few = rate * (blank.size + 1) < 1
    single = calibrate.threshold(column("snr_max")[blank], rate)
    excess = calibrate.threshold(column("excess_max")[blank], rate)
    return Thresholds(
        detected=max(single, gaussian) if too_few else single,
        above_quiet=_larger(excess, gaussian) if too_few else excess,
        mean=mean_limit,
        highest=float(np.max(column("snr_max")[blank])),
        reduced=middle + QUIET_SPREAD * max(width, 0.02),
        n_controls=int(blank.size),
    )


def _larger(a: float, b: float) -> float:
    return b if np.isnan(a) else max(a, b)


def reported_channels(
    judgement: Judgement, plugin: str, keys: Sequence[Key], matrix: FloatArray, controls: IntArray
) -> list[str]:
    """For every position the channel in which a plugin's calibrated columns are furthest out; '' where none is.

    `matrix` belongs to `keys`; the same rule serves targets and controls.
    """
    mine = [k for k, (_, full) in enumerate(keys) if full.startswith(f"{plugin}_")]
    labels = sorted({channel for channel, full in judgement.values if full.startswith(f"{plugin}_")})
    if not mine:
        return [labels[0] if labels else ""] * len(matrix)
    values = matrix[:, mine]
    null = np.sort(values[controls], axis=0)
    p = np.stack(
        [len(null) + 1 - np.searchsorted(null[:, k], values[:, k], side="left") for k in range(len(mine))], axis=1
    )
    p = np.where(np.isfinite(values), p, len(null) + 2)
    return [keys[mine[k]][0] for k in p.argmin(axis=1)]
