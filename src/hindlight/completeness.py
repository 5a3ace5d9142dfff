"""What an archive could have shown: which made-up sources would have been found.

Pure: judgements and p-values in, verdicts out. A source hidden at a control is judged and ranked by the
code that ranks targets, among the other controls: one that carries a source leaves its own null. It is recovered if it
would have been a candidate of the run, had it been one more target of it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from hindlight import calibrate, ranking, tails
from hindlight.injection import PULSES, SMOOTH, Source, uniform
from hindlight.judge import WHOLE, Judgement, joined, taken
from hindlight.lifted import group_size
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.looks import CONFIDENCE
from hindlight.plugin import Column, Plugin
from hindlight.settings import Completeness, Settings
from hindlight.timing import DAY

NOTHING = "nothing"  # a kind: no source at all, which tells the rate of false alarms
BRIGHTER = 1.5  # factor from one step of brightness to the next
FAINT = -1  # a step: not bright
SHARES = 50  # steps of the share of calibration in the variance
HOST, START = 16, 17  # what is drawn of a source

Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Cell:
    """Sources alike: `flux` in median frame errors, period in s; the rest is NaN where there are no pulses."""

    kind: str
    flux: float
    period_s: float = float("nan")
    duty_cycle: float = float("nan")
    window: float = float("nan")
    missing: float = float("nan")


@dataclass(frozen=True)
class Injection:
    """One made-up source: the number of its cell, the id of the control that it is hidden at, and itself."""

    cell: int
    host: int
    source: Source


def grid(settings: Completeness) -> tuple[Cell, ...]:
    """The cells, in the order of the table; the first holds nothing."""
    trains = product(settings.pulse_periods, settings.duty_cycles, settings.windows, settings.missing, settings.fluxes)
    return (
        Cell(NOTHING, 0.0),
        *(Cell(PULSES, flux, period, duty, window, missing) for period, duty, window, missing, flux in trains),
        *(Cell(SMOOTH, flux, period) for period in settings.smooth_periods for flux in settings.fluxes),
    )


def drawn(cells: Sequence[Cell], hosts: IntArray, weights: FloatArray, settings: Completeness) -> list[Injection]:
    """`per_cell` sources for each cell at hosts, shape (n,), drawn with these weights; phases at random."""
    keys = (settings.seed << 32) + np.arange(len(cells) * settings.per_cell)
    edges = np.cumsum(weights) / np.sum(weights)
    found = []
    for number, key in enumerate(keys.tolist()):
        cell = number // settings.per_cell
        at = np.searchsorted(edges, uniform(key, HOST, np.zeros(1, np.int64))[0], side="right")
        host = int(hosts[min(int(at), len(hosts) - 1)])
        found.append(Injection(cell, host, _source(cells[cell], key)))
    return found


def _source(cell: Cell, key: int) -> Source:
    """A source of a cell."""
    if cell.kind == NOTHING:
        return Source(SMOOTH, DAY, 0.0, key)
    start = cell.period_s * float(uniform(key, START, np.zeros(1, np.int64))[0])
    if cell.kind == SMOOTH:
        return Source(SMOOTH, cell.period_s, start, key)
    duration = cell.duty_cycle * cell.period_s
    return Source(PULSES, cell.period_s, start, key, duration, cell.window * duration, cell.missing)


@dataclass(frozen=True, eq=False)
class Null:
    """The controls of one field in some of the frames: ids ascending, shape (n,), what was judged of them, and the rest.

    `serving` (n, n) says which controls serve which one, as if that were a target; never itself. `brighter` are the nulls
    of sources that are bright, by `brightness`: there the judgement is of copies of the controls (`copied`), `serving`
    has shape (n, n_copies), copies are alike in groups of `weight`, and made with one of `n_sources` comparisons. By
    channel, of those whose comparisons tell what calibration leaves: fluxes of 1 (`units`), and the `scatter` it leaves as a
    fraction.
    """

    ids: IntArray
    serving: Mask
    judgement: Judgement
    thresholds: Mapping[str, ranking.Thresholds]
    weight: float = 1.0
    copied: bool = False
    brighter: Mapping[int, Null] = field(default_factory=dict)
    n_sources: int = 0
    units: Mapping[str, float] = field(default_factory=dict)
    scatter: Mapping[str, float] = field(default_factory=dict)

    def alike(self, share: float, hosts: IntArray) -> Null:
        """The same copies, as alike as they are for sources at these controls of this share of calibration in the variance."""
        most = int(self.serving[np.searchsorted(self.ids, hosts)].sum(axis=1).max(initial=0))
        each = self.judgement.n // len(self.ids)
        return replace(self, weight=group_size(share, each, most, self.n_sources))


def null_of(ids: IntArray, in_frames: Mask, judgement: Judgement, settings: Settings) -> Null:
    """The null of controls that share frames as `in_frames` says, shape (n, n)."""
    rows = np.arange(len(ids))
    serving, _ = ranking.matched(judgement, rows, rows, in_frames & ~np.eye(len(ids), dtype=bool), settings.controls)
    return Null(ids, serving, judgement, ranking.thresholds(judgement, rows, settings.detection))


@dataclass(frozen=True)
class Bars:
    """Below which p-value one more target of the run would be a candidate: by the controls alone, and by all p-values."""

    empirical: float
    final: float


def bar(p_values: FloatArray, level: float, any_dependence: bool = False) -> float:
    """Below which p-value one more test, beside those of shape (n,), has a false-discovery rate below the level.

    Benjamini & Hochberg (1995, JRSS B 57, 289): of n + 1 tests, the one with r others below a bound t is below the level
    if t <= (r + 1) level / (n + 1); the largest such bound. With `any_dependence` the level is divided by sum(1 / i) over
    the tests, see `calibrate.false_discovery`. NaN is no test.
    """
    known = np.sort(p_values[np.isfinite(p_values)])
    rank = np.arange(1, len(known) + 2)
    bounds = rank * level / (len(known) + 1) / (float((1.0 / rank).sum()) if any_dependence else 1.0)
    below = np.searchsorted(known, bounds, side="left")
    return float(bounds[below >= np.arange(len(bounds))].max())


@dataclass(frozen=True, eq=False)
class Found:
    """What became of n sources: arrays of shape (n,), `own_p` (n, n_plugins) NaN where a plugin says nothing.

    `enough`: there are as many usable frames as it takes to decide anything.
    """

    recovered: Mask
    extrapolated: Mask
    seen: Mask
    enough: Mask
    lowest_p: FloatArray
    own_p: FloatArray


@dataclass(frozen=True, eq=False)
class Ranked:
    """Sources among the controls: what was judged of both (controls first), which serve which source, and the ranks."""

    both: Judgement
    controls: IntArray
    sources: IntArray
    serving: Mask
    ranks: ranking.FieldRanks

    @property
    def p(self) -> FloatArray:
        """The sources' p-values before any extrapolation, shape (n,)."""
        return np.array([rank.p_value for rank in self.ranks.ranks])


def ranked(judged: Judgement, hosts: IntArray, null: Null, columns: Mapping[str, Column], settings: Settings) -> Ranked:
    """Sources that were judged at these controls (ids, shape (n,)) ranked as targets are."""
    n, at = null.judgement.n, np.searchsorted(null.ids, hosts)
    both = joined([null.judgement, judged], [n, judged.n], columns)
    controls, sources = np.arange(n), n + np.arange(judged.n)
    serving, _ = ranking.matched(both, sources, controls, null.serving[at], settings.controls, bounded=not null.copied)
    ranks = ranking.rank_field(both, columns, sources, controls, serving, null.weight)
    return Ranked(both, controls, sources, serving, ranks)


def found(
    judged: Judgement, hosts: IntArray, null: Null, columns: Mapping[str, Column], bars: Bars, settings: Settings,
    plugins: Sequence[Plugin] = (),
) -> Found:  # fmt: skip
    """What becomes of sources that were judged at these controls (ids, shape (n,)); `plugins` each ask by themselves too.

    Those that are bright in single frames are ranked among controls made as bright.
    """
    step, share = brightness(judged, null, settings.controls.bright_target_snr)
    bins = np.where(step == FAINT, 0, np.rint(SHARES * share)).astype(np.int64)
    order, parts = [], []
    for number, of_calibration in sorted(set(zip(step.tolist(), bins.tolist(), strict=True))):
        rows = np.flatnonzero((step == number) & (bins == of_calibration))
        among = null if number == FAINT else null.brighter[number].alike(of_calibration / SHARES, hosts[rows])
        order.append(rows)
        parts.append(_found(taken(judged, rows), hosts[rows], among, columns, bars, settings, plugins))
    back = np.argsort(np.concatenate(order)) if order else np.empty(0, np.int64)
    return Found(*(np.concatenate([getattr(part, f.name) for part in parts])[back] for f in fields(Found)))


def brightness(judged: Judgement, null: Null, least_snr: float) -> tuple[IntArray, FloatArray]:
    """How bright positions are in the mean of their brightest channel, and the share of calibration in the variance there.

    In steps of a factor BRIGHTER from one median frame error, of those that `null` has, FAINT for S/N below the least in a
    typical frame; the share as it is of targets (`hindlight.bright`). Shapes (n,).
    """
    mean, error, used = (_core(judged, name) for name in ("mean", "mean_err", "n_used"))
    flux, snr, share = np.zeros((3, judged.n))
    for label in sorted(set(null.units) & set(mean)):
        with np.errstate(invalid="ignore", divide="ignore"):
            own = np.nan_to_num(np.abs(mean[label]) / (error[label] * np.sqrt(used[label])))
        snr = np.maximum(snr, own)
        flux = np.fmax(flux, np.abs(mean[label]) / null.units[label])
        share = np.maximum(share, np.minimum(1.0, (null.scatter[label] * own) ** 2))
    with np.errstate(divide="ignore"):
        steps = np.where(snr >= least_snr, np.rint(np.log(flux) / np.log(BRIGHTER)), FAINT)
    steps = np.minimum(steps, max(null.brighter, default=FAINT))
    return np.where(np.isin(steps, list(null.brighter)), steps, FAINT).astype(np.int64), share


def _found(
    judged: Judgement, hosts: IntArray, null: Null, columns: Mapping[str, Column], bars: Bars, settings: Settings,
    plugins: Sequence[Plugin],
) -> Found:  # fmt: skip
    """The same for sources with one null."""
    if null.copied:  # periods of copies are not searched for, and so none count
        judged = replace(judged, values={key: v for key, v in judged.values.items() if key in null.judgement.values})
    among = ranked(judged, hosts, null, columns, settings)
    each = [_decided(rank, bars, settings, null.weight) for rank in among.ranks.ranks]
    decided = np.array(each, bool).reshape(-1, 2)
    enough = _most_used(judged) >= settings.detection.min_frames
    own = [
        _own_p(among.both, among.controls, among.sources, among.serving, plugin, columns, null.weight)
        for plugin in plugins
    ]
    return Found(
        decided[:, 0] & enough,
        decided[:, 1] & enough,
        _seen(judged, null.thresholds),
        enough,
        np.asarray(null.weight / (among.ranks.n_controls + null.weight), float),
        np.stack(own, axis=1) if own else np.empty((judged.n, 0)),
    )


def _decided(rank: calibrate.Rank, bars: Bars, settings: Settings, weight: float) -> tuple[bool, bool]:
    """Whether a rank makes a candidate, and whether only by the fitted tail: as `conclude.p_values` has it."""
    if rank.p_value < bars.empirical:
        return True, False
    if rank.exceeded_by > 0 or not np.isfinite(rank.p_value):
        return bool(rank.p_value < bars.final), False
    bound = tails.extrapolate(rank.control_distances, rank.beyond, settings.ranking.tail_exceedances, weight).bound
    by_tail = bound < rank.p_value
    return bool((bound if by_tail else rank.p_value) < bars.final), bool(by_tail and bound < bars.final)


def _core(judged: Judgement, name: str) -> dict[str, FloatArray]:
    """A column of the core by channel."""
    return {
        label: np.asarray(values, float)
        for (label, full), values in judged.values.items()
        if full == f"core_{name}" and label != WHOLE
    }


def used_frames(judged: Judgement) -> dict[str, FloatArray]:
    """How many usable frames each position has, by channel."""
    return _core(judged, "n_used")


def _most_used(judged: Judgement) -> FloatArray:
    return np.asarray(np.max([np.zeros(judged.n), *used_frames(judged).values()], axis=0))


def _seen(judged: Judgement, thresholds: Mapping[str, ranking.Thresholds]) -> Mask:
    """Whether any frame is above its channel's threshold."""
    seen = np.zeros(judged.n, bool)
    for label, highest in _core(judged, "snr_max").items():
        seen |= highest > thresholds[label].detected
    return seen


def own_of_controls(
    null: Null, ids: IntArray, columns: Mapping[str, Column], plugins: Sequence[Plugin]
) -> tuple[FloatArray, FloatArray]:
    """The p-values of blank controls (ids, shape (n,)) by each plugin alone, each among the others: shape (n, n_plugins).

    And the smallest that each could have, shape (n,).
    """
    rows, every = np.searchsorted(null.ids, ids), np.arange(null.judgement.n)
    serving = null.serving[rows]
    each = [_own_p(null.judgement, every, rows, serving, plugin, columns, null.weight) for plugin in plugins]
    p = np.stack(each, axis=1) if each else np.empty((len(ids), 0))
    return p, np.asarray(null.weight / (serving.sum(axis=1) + null.weight), float)


def _own_p(
    judgement: Judgement, controls: IntArray, sources: IntArray, serving: Mask, plugin: Plugin,
    columns: Mapping[str, Column], weight: float,
) -> FloatArray:  # fmt: skip
    """The p-values of sources by one plugin's calibrated columns alone, those that ask about presence included.

    `controls` and `sources` are rows of the judgement, `serving` says which of the first serve which of the second.
    """
    mine = {f"{plugin.name}_{column.name}" for column in plugin.columns if column.unusual is not None}
    keys = [key for key in sorted(judgement.values) if key[1] in mine]
    matrix = ranking.oriented_matrix(judgement, keys, columns, controls)
    nulls: dict[bytes, calibrate.Null] = {}
    p = []
    for row, mask in zip(sources, serving, strict=True):
        if mask.tobytes() not in nulls:
            nulls[mask.tobytes()] = calibrate.null_from(matrix[controls[mask]], [column for _, column in keys])
        p.append(calibrate.rank(nulls[mask.tobytes()], matrix[row], weight).p_value)
    return np.array(p)


def jeffreys(k: float, n: int, confidence: float = CONFIDENCE) -> tuple[float, float]:
    """The interval of a binomial fraction: Beta(k + 1/2, n - k + 1/2), from 0 where k = 0, to 1 where k = n.

    Brown, Cai & DasGupta 2001 (Stat. Sci. 16, 101), eq. 6 and 7.
    """
    tail = (1 - confidence) / 2
    low = 0.0 if k == 0 else float(stats.beta.ppf(tail, k + 0.5, n - k + 0.5))
    high = 1.0 if k == n else float(stats.beta.isf(tail, k + 0.5, n - k + 0.5))
    return low, high


def half_flux(fluxes: FloatArray, share: FloatArray) -> float:
    """The flux from which half of the sources are found, from the shares found at fluxes, ascending, > 0; both shape (n,).

    Linear in the logarithm of the flux, where the share first reaches a half; minus infinity where it does at the lowest
    flux, infinity where it nowhere does, NaN for no fluxes.
    """
    reached = np.flatnonzero(share >= 0.5)
    if len(fluxes) == 0:
        return float("nan")
    if len(reached) == 0:
        return float("inf")
    at = int(reached[0])
    if at == 0:
        return float("-inf") if share[0] > 0.5 else float(fluxes[0])
    part = (0.5 - share[at - 1]) / (share[at] - share[at - 1])
    return float(fluxes[at - 1] * (fluxes[at] / fluxes[at - 1]) ** part)


def summary_row(mine: Mask, outcome: Found, extra: Mapping[str, FloatArray]) -> dict[str, Any]:
    """The counted columns of a cell whose sources are `mine`, shape (n,); medians of what `extra` holds of each source."""
    n, k = int(mine.sum()), int(outcome.recovered[mine].sum())
    low, high = jeffreys(k, n)
    return {
        "n_injected": n,
        "n_recovered": k,
        "completeness": k / n if n else float("nan"),
        "completeness_low": low,
        "completeness_high": high,
        "n_seen": int(outcome.seen[mine].sum()),
        "n_extrapolated": int((outcome.extrapolated & outcome.recovered)[mine].sum()),
        "lowest_p": float(np.median(outcome.lowest_p[mine])) if n else float("nan"),
    } | {name: float(np.median(values[mine])) if n else float("nan") for name, values in extra.items()}
