"""The positions of one field against each other: thresholds from the controls, and every target's rank among them.

Takes what `judge` found for all positions of a field; knows no run folder. The arithmetic is in `calibrate`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm

from hindlight import calibrate
from hindlight.judge import WHOLE, Judgement, oriented
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.plugin import Column, Plugin
from hindlight.robust import excess_scatter
from hindlight.settings import Controls, Detection

FAILING_SHARE = 0.05  # a plugin that fails on more of the controls than this gets no p-value
STEADY_SIGMA = 5.0  # controls with a mean flux further out than this do not set detection thresholds
COMMON_SHARE = 0.1  # a channel's scale: what this share of its blank positions exceeds at most
FEWEST_BLANK = 10  # blank positions that set thresholds: of fewer, a steady source in one would set them
FEWEST_MEANS = 10  # blank positions that show how much their mean fluxes differ
LOW_SIGMA = 3.3  # a median of blank means that is further below zero is no chance
QUIET_SPREAD = 5.0
QUIET_WITHOUT_CONTROLS = 2.0

Key = tuple[str, str]


@dataclass(frozen=True)
class Thresholds:
    """What counts as seen in one channel of one field, from `n_controls` blank positions.

    detected, above_quiet, mean
        In sigma: single flux, single excess over the quiet level, weighted mean flux.
    reduced
        The largest chi-square per degree of freedom at which a series still counts as quiet.
    confusion
        In units of flux: rms by which the mean fluxes of blank positions differ beyond their errors, since faint sources
        and diffuse emission lie in all of them.
    level
        In units of flux: the median mean flux of blank positions where it is below zero beyond chance, else 0. Among many
        sources the local background comes out too high.
    """

    detected: float
    above_quiet: float
    mean: float
    reduced: float
    n_controls: int
    confusion: float = 0.0
    level: float = 0.0


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
    return np.stack(found, axis=1) if found else np.empty((judgement.n, 0))


def matched(
    judgement: Judgement, targets: IntArray, controls: IntArray, in_frames: NDArray[np.bool_], settings: Controls,
    bounded: bool = True,
) -> tuple[NDArray[np.bool_], FloatArray]:  # fmt: skip
    """Which controls serve which target, shape (n_targets, n_controls), and how unlike these are in depth, (n_targets,).

    `in_frames` says who shares enough frames by footprint; a control must also have nearly as many usable samples in each
    channel, and a like noise: structure in the sky, the edge of the primary beam and sidelobes of bright sources all show
    in it. Where fewer than `fewest_alike` are within the factor `alike`, so many of the most alike ones serve, those that
    are `most_unlike` and beyond never where `bounded`. How unlike: the largest factor between the depth of the target and
    that of a control that serves it, 1 for none.
    """
    good = in_frames.copy()
    unlike = np.zeros(good.shape)
    for (_, full), values in judgement.values.items():
        if full == "core_n_used":
            good &= values[controls][None, :] >= settings.shared_frames * values[targets][:, None]
        if full == "core_depth":
            logs = np.log(values)
            unlike = np.fmax(unlike, np.abs(logs[controls][None, :] - logs[targets][:, None]))
    unlike[~good] = np.inf
    if good.shape[1] == 0:
        return good, np.ones(len(good))
    enough = np.sort(unlike, axis=1)[:, : settings.fewest_alike][:, -1:]  # infinite where there are fewer
    good &= unlike <= np.maximum(np.log(settings.alike), enough)
    if bounded:
        good &= unlike <= np.log(max(settings.alike, settings.most_unlike))
    return good, np.exp(np.max(unlike, axis=1, initial=0.0, where=good))


def rank_field(
    judgement: Judgement,
    columns: Mapping[str, Column],
    targets: IntArray,
    controls: IntArray,
    serving: NDArray[np.bool_],
    weight: float = 1.0,
) -> FieldRanks:
    """Every target of a field ranked among the controls that serve it; `targets`, `controls` are row indices.

    `weight` is that of `calibrate.rank`.
    """
    keys = calibrated_keys(judgement, columns, controls)
    matrix = oriented_matrix(judgement, keys, columns, controls)
    nulls: dict[bytes, calibrate.Null] = {}
    ranks, deciding = [], []
    for row, mask in zip(targets, serving, strict=True):
        signature = mask.tobytes()
        if signature not in nulls:
            nulls[signature] = calibrate.null_from(matrix[controls[mask]], [column for _, column in keys])
        found = calibrate.rank(nulls[signature], matrix[row], weight)
        ranks.append(found)
        deciding.append(keys[found.column] if found.column >= 0 else None)
    control_p = calibrate.leave_one_out(calibrate.null_from(matrix[controls]))
    return FieldRanks(tuple(ranks), tuple(deciding), serving.sum(axis=1), control_p, tuple(keys))


def thresholds(
    judgement: Judgement, controls: IntArray, detection: Detection, n_trials: int = 1
) -> dict[str, Thresholds]:
    """What counts as seen, for each channel of the field.

    The rate of false alarms holds for a position as a whole: a blank one has any detection, in any of its channels,
    with that chance. Each channel's threshold is what one blank position in ten exceeds there, times the one factor
    that makes the rate hold for the channels together. A channel with too few controls has those of Gaussian noise, for the
    brightest of `n_trials` places.
    """
    labels = sorted({channel for channel, _ in judgement.values if channel != WHOLE})
    blank = {label: _blank_rows(judgement, label, controls) for label in labels}
    own = {
        label: _channel_thresholds(judgement, label, blank[label], detection, len(labels), n_trials) for label in labels
    }
    single = _common_factor(judgement, "snr_max", {k: v.detected for k, v in own.items()}, blank, detection)
    excess = _common_factor(judgement, "excess_max", {k: v.above_quiet for k, v in own.items()}, blank, detection)
    return {
        label: replace(limits, detected=limits.detected * single, above_quiet=limits.above_quiet * excess)
        for label, limits in own.items()
    }


def _column(judgement: Judgement, label: str, name: str) -> FloatArray:
    return np.asarray(judgement.values[label, f"core_{name}"], float)


def _blank_rows(judgement: Judgement, label: str, controls: IntArray) -> IntArray:
    """The controls that set a channel's thresholds: those measured in it and without a steady source of their own.

    None where these are too few.
    """
    rows = controls[_column(judgement, label, "n_used")[controls] > 0]
    mean = _column(judgement, label, "mean_snr")[rows]
    quiet = rows[mean <= calibrate.robust_threshold(mean, float(norm.sf(STEADY_SIGMA)))]
    return quiet if len(quiet) >= FEWEST_BLANK else quiet[:0]


def _common_factor(
    judgement: Judgement, name: str, limits: Mapping[str, float], blank: Mapping[str, IntArray], detection: Detection
) -> float:
    """By how much all channels' limits are raised so that the rate holds for their largest ratio to the limit."""
    largest = np.full(judgement.n, np.nan)
    for label, limit in limits.items():
        ratio = np.full(judgement.n, np.nan)
        ratio[blank[label]] = _column(judgement, label, name)[blank[label]] / limit
        largest = np.fmax(largest, ratio)
    factor = calibrate.threshold(largest, detection.false_alarms)
    return factor if np.isfinite(factor) else 1.0


def _channel_thresholds(
    judgement: Judgement, label: str, blank: IntArray, detection: Detection, n_channels: int, n_trials: int
) -> Thresholds:
    """A channel's thresholds by itself, before the common factor; those of Gaussian noise where no control sets them."""
    rate = detection.false_alarms / n_channels
    n_used = _column(judgement, label, "n_used")
    means = _column(judgement, label, "mean")[blank], _column(judgement, label, "mean_err")[blank]
    if blank.size == 0:
        typical = int(np.median(n_used[n_used > 0])) if np.any(n_used > 0) else 0
        gaussian = calibrate.gaussian_threshold(typical * n_trials, rate)
        return Thresholds(gaussian, gaussian, float(norm.isf(rate / n_trials)), QUIET_WITHOUT_CONTROLS, 0)
    return Thresholds(
        detected=calibrate.threshold(_column(judgement, label, "snr_max")[blank], COMMON_SHARE),
        above_quiet=calibrate.threshold(_column(judgement, label, "excess_max")[blank], COMMON_SHARE),
        mean=calibrate.robust_threshold(_column(judgement, label, "mean_snr")[blank], rate),
        reduced=_quiet_limit(_column(judgement, label, "reduced")[blank]),
        n_controls=int(blank.size),
        confusion=_confusion(*means),
        level=_level(*means),
    )


def _confusion(mean: FloatArray, error: FloatArray) -> float:
    """The excess scatter of mean fluxes, shape (n,), about their median; 0 for fewer than FEWEST_MEANS of them."""
    if len(mean) < FEWEST_MEANS:
        return 0.0
    return excess_scatter(mean - np.median(mean), error)


def _level(mean: FloatArray, error: FloatArray) -> float:
    """The median of mean fluxes, shape (n,), where it is below zero beyond chance; else 0, and for fewer than FEWEST_MEANS.

    The error of a median is (pi / 2 n)^(1/2) times the scatter, that of a normal law; from memory.
    """
    if len(mean) < FEWEST_MEANS:
        return 0.0
    middle = float(np.median(mean))
    scatter = max(calibrate.MAD_TO_SIGMA * float(np.median(np.abs(mean - middle))), float(np.median(error)))
    return middle if middle < -LOW_SIGMA * scatter * (np.pi / 2 / len(mean)) ** 0.5 else 0.0


def _quiet_limit(reduced: FloatArray) -> float:
    """The largest chi-square per degree of freedom at which a series still counts as quiet."""
    known = reduced[np.isfinite(reduced)]
    if known.size == 0:
        return QUIET_WITHOUT_CONTROLS
    middle = float(np.median(known))
    return middle + QUIET_SPREAD * max(0.02, calibrate.MAD_TO_SIGMA * float(np.median(np.abs(known - middle))))


def reported_channels(
    judgement: Judgement, plugin: Plugin, columns: Mapping[str, Column], controls: IntArray
) -> list[str]:
    """For every position the channel in which a plugin's calibrated columns are furthest out; '' where none is.

    Furthest out is what `calibrate.rank` means by it: the smallest rank among the controls, then the largest distance
    beyond them. The same rule serves targets and controls.
    """
    mine = {f"{plugin.name}_{column.name}" for column in plugin.columns}
    keys = [k for k in sorted(judgement.values) if k[1] in mine]
    calibrated = [k for k in keys if columns[k[1]].unusual is not None]
    if not calibrated:
        return [keys[0][0] if keys else WHOLE] * judgement.n
    matrix = oriented_matrix(judgement, calibrated, columns, controls)
    furthest = calibrate.furthest_columns(calibrate.null_from(matrix[controls]), matrix)
    return [calibrated[k][0] for k in furthest]
