"""Blank positions made as bright as a target: the null of bright targets, with what calibration leaves in it.

A steady source of flux S scatters by the noise of blank sky, and by S times what calibration leaves over in each frame. What
it leaves is told by the comparisons' residuals, which are added frame by frame: blank flux + S (1 + r). Pure: blocks in,
blocks out.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.background import MAD_TO_SIGMA
from hindlight.lightcurve import Block, FloatArray, IntArray, freeze
from hindlight.robust import median_of

COPY = 1 << 40  # the k-th copy of a control has the control's id + k * COPY
FEWEST_SOURCES = 3
FEWEST_FRAMES = 8
LEAST_SHARE = 0.1  # of a comparison's error that is noise of its own, at least
LEAST_SNR = 5.0  # a comparison that is typically fainter tells nothing of what calibration leaves
VARIABLE_FACTOR = 3.0  # a comparison that scatters so many times more than the typical one varies itself

Columns = dict[str, Any]


@dataclass(frozen=True)
class Lift:
    """How bright copies of controls are made: channel label -> flux in the channel's unit; a channel not named stays blank.

    `share` is that of calibration in the variance, in the channel where it is largest, `n_sources` how many comparisons
    tell of it there.
    """

    levels: Mapping[str, float]
    share: float = 0.0
    n_sources: int = 1


@dataclass(frozen=True, eq=False)
class Residuals:
    """What calibration leaves in a channel, as fractions of the flux: `values` of shape (n_sources, n_frames), no gaps.

    `frame` are the frames, ascending; `extra` the further scatter that errors of that frame contain, `gain` its gain.
    `whose` are the targets, if any, that each source is: none of them is held against itself.
    """

    frame: IntArray
    values: FloatArray
    extra: FloatArray
    gain: FloatArray
    whose: tuple[IntArray, ...] = ()

    def row_of(self, copies: IntArray) -> IntArray:
        """The row of `values` that goes into each copy of a control, by the ids of these: another in each copy."""
        return np.asarray((copies + copies // COPY) % COPY % len(self.values))

    def foreign(self, targets: IntArray, copies: IntArray) -> NDArray[np.bool_]:
        """Which copies are made with a source that is not the target itself, shape (n_targets, n_copies)."""
        own = np.zeros((len(targets), len(self.values)), bool)
        for row, some in enumerate(self.whose):
            own[:, row] = np.isin(targets, some)
        return ~own[:, self.row_of(copies)]


def residuals(block: Block, solution: Columns, whose: Sequence[IntArray] = ()) -> Residuals | None:
    """The residuals of a channel's comparisons, one row each in `block`; None where too few tell anything.

    `whose` are the targets that each comparison is.

    Each is scaled down by the share that the comparison's own noise has in it, and up for the part that the fit of n
    sources in a frame has taken off, (n / (n - 1))^(1/2). Where a source was not measured the next one stands in.
    """
    at = np.searchsorted(solution["frame"], block.frame)
    extra, gain = solution["extra_scatter"][at], solution["gain"][at]
    tied = solution["verdict"][at] == "good"
    known = np.isfinite(block.flux) & tied[None, :]
    with np.errstate(invalid="ignore", divide="ignore"):
        weight = np.where(known, block.flux_err**-2.0, 0.0)
        brightness = (weight * np.where(known, block.flux, 0.0)).sum(axis=1) / weight.sum(axis=1)
        relative, own = block.flux_err / brightness[:, None], extra * block.flux / brightness[:, None]
        noise = np.sqrt(np.maximum(relative**2 - own**2, (LEAST_SHARE * relative) ** 2))
        usable = (known.sum(axis=1) >= max(FEWEST_FRAMES, tied.sum() / 2)) & (median_of(noise.T) <= 1 / LEAST_SNR)
        left = np.where(known, block.flux / brightness[:, None] - 1.0, np.nan)
        pull = MAD_TO_SIGMA * median_of(np.abs(left / np.hypot(noise, extra)).T)
        usable &= pull <= VARIABLE_FACTOR * np.median(pull[usable]) if usable.any() else False
    if usable.sum() < FEWEST_SOURCES:
        return None
    left, noise, known = left[usable], noise[usable], known[usable]
    n = known.sum(axis=0)
    left = left * np.where(extra > 0, extra / np.hypot(extra, np.nan_to_num(noise)), 0.0)
    left = left * np.sqrt(n / np.maximum(n - 1, 1))
    own = tuple(some for some, used in zip(whose, usable, strict=True) if used) if whose else ()
    return Residuals(block.frame, _filled(left), extra, gain, own)


def over_all(left: Residuals, frame: IntArray, solution: Columns) -> Residuals:
    """The same over all frames of a channel, shape (n,), ascending.

    Where a frame is not tied to comparisons, or shows none of these, what is left scatters as the errors there say. Each draw
    is made of the frame and the number of the source.
    """
    at = np.searchsorted(solution["frame"], frame)
    extra, gain = np.nan_to_num(solution["extra_scatter"][at]), solution["gain"][at]
    tied = (solution["verdict"][at] == "good") & np.isin(frame, left.frame)
    values = np.zeros((len(left.values), len(frame)))
    values[:, tied] = left.values[:, np.searchsorted(left.frame, frame[tied])]
    for column in np.flatnonzero(~tied).tolist():
        values[:, column] = extra[column] * np.random.default_rng(int(frame[column])).standard_normal(len(values))
    return replace(left, frame=frame, values=values, extra=extra, gain=gain)


def _filled(values: FloatArray) -> FloatArray:
    """The matrix with each gap filled from the next row that has a value there; zero where none has."""
    filled = values.copy()
    for step in range(1, len(values)):
        gaps = np.isnan(filled)
        if not gaps.any():
            break
        filled[gaps] = np.roll(values, -step, axis=0)[gaps]
    return np.nan_to_num(filled)


def lifted(block: Block, base: IntArray, ids: IntArray, level: float, left: Residuals | None) -> Block:
    """The rows of `ids` from a block of the positions `base` (ascending): as they are, or for copies made as bright as `level`.

    Each copy of a control goes with another comparison. A channel without residuals stays blank.
    """
    rows, copy = np.searchsorted(base, ids % COPY), ids // COPY
    taken = {name: getattr(block, name)[rows] for name in MATRICES}
    names = tuple(block.names[row] for row in rows)
    if level == 0.0 or left is None or not copy.any():
        return replace(block, names=names, **{name: freeze(m, m.dtype.type) for name, m in taken.items()})
    at = np.searchsorted(left.frame, block.frame)
    added = np.where(copy[:, None] > 0, level * (1.0 + left.values[left.row_of(ids)][:, at]), 0.0)
    taken["flux"] = taken["flux"] + added
    taken["flux_err"] = np.hypot(taken["flux_err"], left.extra[at] * added)
    taken["raw_flux"] = taken["raw_flux"] + added * left.gain[at]
    return replace(block, names=names, **{name: freeze(m, m.dtype.type) for name, m in taken.items()})


MATRICES = ("t_tdb_s", "exposure_s", "flux", "flux_err", "raw_flux", "raw_flux_err", "flags")


def copies(controls: IntArray, number: int) -> IntArray:
    """The ids of so many copies of each control, ascending."""
    return np.sort((controls[None, :] + COPY * np.arange(1, number + 1)[:, None]).ravel())


def originals(ids: IntArray) -> NDArray[np.int64]:
    """The controls that copies are made of, each once, ascending."""
    return np.unique(ids % COPY)


def how_many(wanted: int, n_controls: int, n_sources: int) -> int:
    """How often each control is copied for about `wanted` copies; no more often than there are comparisons."""
    return max(1, min(-(-wanted // n_controls), n_sources))


def group_size(share: float, each: int, n_copies: int, n_sources: int) -> float:
    """How many copies are as good as one, of those that serve a target, where calibration has a `share` of the variance.

    Without any, the `each` copies of a control differ by a constant only; where it is all, those made with one of the
    `n_sources` comparisons are alike. Between the two copies tell more than this line says, which is on the safe side.
    """
    of_a_source = max(1.0, n_copies / n_sources)
    return (1.0 - share) * each + share * of_a_source
