"""The chance that a source like a target would have been found: which made-up sources are like it, and how many were.

Like is compared with like: what was measured of the target in its frames with what was measured of the made-up sources in
theirs, noise and the dilution of pulses shorter than an exposure included. Pure: outcomes in, a row out.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np

from hindlight.completeness import NOTHING, Cell, Mask, jeffreys
from hindlight.injection import PULSES, SMOOTH
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.trials import Outcomes

FACTORS = (1.25, 1.5, 2.0)  # by which the number of frames may differ: the smallest that has enough sources
FEWEST_LIKE = 5  # sources of a cell, in the mean, that make a curve
MOST_UNLIKE = 0.25  # difference in the share of frames that show the source
KINDS = {
    "periodic": (PULSES, SMOOTH), "repeating": (PULSES,), "single": (PULSES,), "variable": (SMOOTH,),
    "unseen": (PULSES, SMOOTH), "undecided": (PULSES, SMOOTH),
}  # fmt: skip
NONE: dict[str, Any] = {
    "found_probability": float("nan"), "found_low": float("nan"), "found_high": float("nan"), "like_kind": "",
    "like_period": float("nan"), "like_duty_cycle": float("nan"), "like_subset": "", "like_frames": float("nan"),
    "like_sources": 0,
}  # fmt: skip


@dataclass(frozen=True)
class Seen:
    """What is to be compared of a target.

    `peak` is the highest flux over its error in a frame, `share` that of the usable frames above the threshold, `period` in
    seconds or NaN; `used` are its usable frames by subset, in the order of the table.
    """

    standing: str
    peak: float
    share: float
    period: float
    used: Mapping[str, int]


@dataclass(frozen=True)
class _At:
    """Sources of one curve at some highest S/N: the share found, the share of frames that show them, how many tell it."""

    found: float
    share: float
    n: int


@dataclass(frozen=True, eq=False)
class Made:
    """The made-up sources of a subset: their cells and what became of each, shape (n,).

    Whether it was found, usable frames, highest S/N measured in a frame, share of frames above the threshold.
    """

    cell: IntArray
    found: FloatArray
    used: FloatArray
    peak: FloatArray
    share: FloatArray

    @classmethod
    def of(cls, cell: IntArray, outcome: Outcomes) -> Made:
        """Those of an outcome."""
        used, detected = outcome.extra["median_used"], outcome.extra["median_detected"]
        share = detected / np.maximum(used, 1.0)
        return cls(cell, outcome.found.recovered.astype(float), used, outcome.extra["median_peak"], share)

    def taken(self, mine: Mask) -> Made:
        """Those where `mine`, shape (n,), is true."""
        return Made(*(getattr(self, f.name)[mine] for f in fields(self)))

    def near(self, n_used: int, factor: float) -> Made:
        """Those with as many frames to within a factor."""
        with np.errstate(divide="ignore"):
            return self.taken(np.abs(np.log(self.used) - np.log(n_used)) <= np.log(factor))


def chance(target: Seen, made: Mapping[str, Made], cells: Sequence[Cell], per_cell: int) -> dict[str, Any]:
    """The columns of completeness_targets.ecsv that say whether a source like a target would have been found.

    Of made-up sources with about as many frames, in a subset that has (nearly) all of the target's, the kind is taken that
    its standing asks for, and of that the period and duty cycle whose sources show in the nearest share of their frames
    where their highest S/N in a frame is the target's. NaN where none is like it.
    """
    name, pool = _pool(target, made, min(FEWEST_LIKE, per_cell) * len(cells))
    if pool is None or not target.peak > 0:
        return NONE
    best: tuple[tuple[float, float], int, _At] | None = None
    for curve in _curves(cells):
        cell = cells[curve[-1]]
        at = _between(pool, curve, target.peak) if cell.kind in KINDS.get(target.standing, ()) else None
        if at is None or abs(at.share - target.share) > MOST_UNLIKE:
            continue
        apart = float(abs(np.log(cell.period_s / target.period))) if target.period > 0 else 0.0
        unlike = round(abs(at.share - target.share), 2), apart
        if best is None or unlike < best[0]:
            best = unlike, curve[-1], at
    return NONE if best is None else _row(name, pool, cells[best[1]], best[2])


def _row(name: str, pool: Made, cell: Cell, at: _At) -> dict[str, Any]:
    """The columns for sources of a cell and those that differ in flux only."""
    low, high = jeffreys(at.found * at.n, at.n)
    return {
        "found_probability": at.found, "found_low": low, "found_high": high, "like_kind": cell.kind,
        "like_period": cell.period_s, "like_duty_cycle": cell.duty_cycle, "like_subset": name,
        "like_frames": float(np.median(pool.used)), "like_sources": at.n,
    }  # fmt: skip


def _pool(target: Seen, made: Mapping[str, Made], fewest: int) -> tuple[str, Made | None]:
    """The subset that has most sources with as many frames as the target, and these sources; None where too few have."""
    most = max(target.used.values(), default=0)
    for factor in FACTORS:
        near = {
            name: made[name].near(n, factor)
            for name, n in target.used.items()
            if name in made and n * FACTORS[0] >= most > 0
        }
        if near:
            name = max(near, key=lambda key: len(near[key].cell))
            if len(near[name].cell) >= fewest:
                return name, near[name]
    return "", None


def _curves(cells: Sequence[Cell]) -> list[list[int]]:
    """Numbers of cells that differ in flux only, ascending in it; every curve begins where no source is."""
    nothing = [number for number, cell in enumerate(cells) if cell.kind == NOTHING]
    groups: dict[str, list[int]] = {}
    for number, cell in enumerate(cells):
        if cell.kind != NOTHING:
            groups.setdefault(repr(replace(cell, flux=0.0)), []).append(number)
    return [[*nothing, *sorted(group, key=lambda number: cells[number].flux)] for group in groups.values()]


def _between(pool: Made, curve: Sequence[int], peak: float) -> _At | None:
    """The share found and the share of frames seen of a curve's sources whose highest S/N is `peak`; None outside them.

    Linear in the logarithm of the cells' median highest S/N; `n` is the smaller number of sources of the two cells around.
    """
    rows = []
    for number in curve:
        mine = pool.cell == number
        if mine.any() and np.median(pool.peak[mine]) > 0:
            rows.append((np.median(pool.peak[mine]), pool.found[mine].mean(), np.median(pool.share[mine]), mine.sum()))
    if len(rows) < 2:
        return None
    x, found, share, n = (np.array(values) for values in zip(*rows, strict=True))
    x = np.maximum.accumulate(np.log(x))  # fainter than the noise, the highest S/N hardly rises with the flux
    if not x[0] <= np.log(peak) <= x[-1]:
        return None
    above = max(1, int(np.searchsorted(x, np.log(peak))))
    return _At(
        float(np.interp(np.log(peak), x, found)),
        float(np.interp(np.log(peak), x, share)),
        int(min(n[above - 1], n[above])),
    )
