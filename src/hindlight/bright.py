"""Targets that are bright in single frames, in fields apart: ranked among controls made as bright as they are.

Pure: ranked fields in, fields out. What makes a control brighter is in `lifted`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from hindlight import calibrate
from hindlight.conclude import Field, rank, without
from hindlight.host import Plugins
from hindlight.judge import Judgement, joined, taken
from hindlight.lifted import COPY, Lift, Residuals, copies, how_many
from hindlight.lightcurve import FloatArray
from hindlight.plugin import Column
from hindlight.settings import Settings

STEP = 1.25  # targets whose S/N in single frames are within about this factor share their controls

Evidence = Mapping[str, Residuals]


@dataclass(frozen=True, eq=False)
class Bright:
    """Targets that share copies of a field's controls: `apart`, taken out of `blank`."""

    blank: Field
    apart: Field

    @property
    def number(self) -> int:
        """That of the field apart."""
        return self.apart.number

    def judged(self, found: Judgement, columns: Mapping[str, Column]) -> None:
        """Fill in the judgement of the field apart: its targets are judged already, `found` is of its controls."""
        targets = taken(self.blank.judgement, self.blank.rows(self.apart.targets))
        sizes = (len(self.apart.targets), len(self.apart.controls))
        self.apart.judgement = joined((targets, found), sizes, columns)

    def ranked(self, plugins: Plugins, settings: Settings) -> None:
        """Rank the targets among the copies; what counts as seen at all is still told by blank sky."""
        rank(self.apart, plugins, settings)
        self.apart.thresholds = {
            label: replace(self.blank.thresholds[label], above_quiet=own.above_quiet, reduced=own.reduced)
            for label, own in self.apart.thresholds.items()
        }


@dataclass(frozen=True, eq=False)
class _Brightness:
    """Of a field's targets, shapes (n_channels, n_targets): `flux` in the mean, and of a typical frame its `snr` and the

    `share` of the calibration in its variance.
    """

    flux: FloatArray
    snr: FloatArray
    share: FloatArray


def apart(found: Field, left: Evidence, n_targets: int, settings: Settings) -> tuple[Field, list[Bright]]:
    """A ranked field without the targets that are bright in single frames, and these.

    `left` is what calibration leaves, for each channel where comparisons tell it; `n_targets` is the number of targets in
    the run. Targets alike in brightness in every such channel share their copies.
    """
    labels = sorted(label for label in left if (label, "core_mean") in found.judgement.values)
    if not labels or not len(found.targets) or not len(found.controls):
        return found, []
    of = _brightness(found, labels, left)
    with np.errstate(divide="ignore"):
        step = np.where(of.snr >= settings.controls.bright_target_snr, np.rint(np.log(of.snr) / np.log(STEP)), -1.0)
    groups: dict[tuple[float, ...], list[int]] = {}
    for index, key in enumerate(map(tuple, step.T.tolist())):
        if max(key) >= 0:
            groups.setdefault(key, []).append(index)
    ranking = settings.ranking
    needed = calibrate.controls_needed(n_targets, ranking.level, ranking.any_dependence)
    wanted = min(needed, settings.controls.bright_pool)
    made = []
    for key, members in sorted(groups.items()):
        lit = [row for row, at in enumerate(key) if at >= 0]
        levels = {labels[row]: float(np.median(of.flux[row, members])) for row in lit}
        share = of.share[lit][:, members].max(axis=1)
        leading = left[labels[lit[int(share.argmax())]]]
        lift = Lift(levels, float(share.max()), len(leading.values))
        made.append(_copied(found, members, lift, wanted, left))
    return without(found, [index for members in groups.values() for index in members]), made


def _brightness(found: Field, labels: list[str], left: Evidence) -> _Brightness:
    rows = found.rows(found.targets)
    flux, error, n_used = (
        np.abs(np.stack([np.asarray(found.judgement.values[label, name], float)[rows] for label in labels]))
        for name in ("core_mean", "core_mean_err", "core_n_used")
    )
    extra = np.array([np.median(left[label].extra) for label in labels])
    with np.errstate(invalid="ignore", divide="ignore"):
        frame_error = error * np.sqrt(n_used)
        share = np.minimum(1.0, (extra[:, None] * flux / frame_error) ** 2)
    return _Brightness(flux, np.nan_to_num(flux / frame_error), np.nan_to_num(share))


def _copied(found: Field, members: list[int], lift: Lift, wanted: int, left: Evidence) -> Bright:
    """Targets of a field, with copies of its controls, about `wanted`; none is held against its own residuals."""
    each = how_many(wanted, len(found.controls), lift.n_sources)
    controls = copies(found.controls, each)
    targets, serving = found.targets[members], np.tile(found.serving[members], each)
    for label in lift.levels:
        serving &= left[label].foreign(targets, controls)
    # Below the numbers of searched targets, which may be taken out of fields of their own.
    number = -1 - COPY - int(targets[0])
    field = Field(number, targets, controls, serving, found.n_trials, lift)
    return Bright(found, field)
