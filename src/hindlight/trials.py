"""The pieces of work of `hindlight completeness`: made-up sources through the unchanged judging of a run.

Plain functions of plain arguments, as in `tasks`; the run is only read.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight import completeness, host, injection, judge, photometry, planted, store
from hindlight.companions import as_listed
from hindlight.completeness import Bars, Cell, Found, Injection, Null
from hindlight.files import check_unchanged
from hindlight.headers import SetAsideError
from hindlight.lifted import Lift
from hindlight.lightcurve import Block, FloatArray, IntArray
from hindlight.looks import SURELY, Looks, by_cycle, by_epoch
from hindlight.order import Order, book, frame_facts
from hindlight.plugin import Column, Plugin
from hindlight.ranking import Thresholds
from hindlight.schema import UNUSABLE
from hindlight.settings import Settings
from hindlight.tasks import anchors_of, position_blocks, residuals
from hindlight.timing import DAY, J2000_JD

ALL = "all"


@dataclass(frozen=True, eq=False)
class Subset:
    """Some frames of the run: their ids, ascending; empty names for all."""

    name: str
    instrument: str
    decade: str
    frames: IntArray


@dataclass(frozen=True, eq=False)
class Judged:
    """Blank controls of one piece of work: in each subset what was judged, and each channel's errors at each control.

    `errors` are medians over the frames, shape (n,), by channel.
    """

    judgements: Mapping[str, judge.Judgement]
    errors: Mapping[str, FloatArray]


@dataclass(frozen=True, eq=False)
class Outcomes:
    """Made-up sources in one subset: what became of them, and of each what EXTRA names, shape (n,) each."""

    found: Found
    extra: Mapping[str, FloatArray]


EXTRA = ("median_snr", "median_lit", "median_used", "median_peak", "median_detected", "bright_frames", "bright_seen")


def judge_controls(order: Order, ids: IntArray, subsets: Sequence[Subset]) -> Judged:
    """Every statistic at these controls (ascending ids) in each subset."""
    blocks = position_blocks(order, ids)["blocks"]
    statistics = host.load(order.plugins).statistics
    judged = {subset.name: judge.judge(_within(blocks, subset), statistics) for subset in subsets}
    return Judged(judged, {label: _typical(block.flux_err) for label, block in blocks.items()})


def judge_copies(order: Order, ids: IntArray, subsets: Sequence[Subset], lift: Lift) -> dict[str, judge.Judgement]:
    """Every statistic at these copies of controls (ascending ids), made as bright as `lift` says, in each subset."""
    blocks = position_blocks(order, ids, lift=lift)["blocks"]
    statistics = host.load(order.plugins).statistics
    return {subset.name: judge.judge(_within(blocks, subset), statistics) for subset in subsets}


def search_controls(order: Order, ids: IntArray, subset: Subset) -> judge.Judgement:
    """Every period search at these positions (ascending ids) in a subset."""
    blocks = _within(position_blocks(order, ids)["blocks"], subset)
    return judge.search(curves_of(blocks), host.load(order.plugins).period_searches)


def count_frames(order: Order, ids: IntArray, subsets: Sequence[Subset]) -> dict[str, dict[str, IntArray]]:
    """How many usable frames these positions (ascending ids) have, shape (n,), by subset and channel."""
    blocks = position_blocks(order, ids)["blocks"]
    return {
        subset.name: {label: _usable(block).sum(axis=1) for label, block in _within(blocks, subset).items()}
        for subset in subsets
    }


def judge_injected(
    order: Order, wanted: Mapping[str, Sequence[Injection]], cells: Sequence[Cell], units: Mapping[str, float],
    subsets: Sequence[Subset], nulls: Mapping[str, Null], bars: Bars, with_plugins: bool,
) -> dict[str, Outcomes]:  # fmt: skip
    """What becomes of sources at controls of one field, `wanted` by subset; `units` are fluxes of 1 by channel."""
    ids = np.unique([one.host for mine in wanted.values() for one in mine])
    plain = position_blocks(order, ids)["blocks"]
    return {
        subset.name: _become(
            order,
            wanted[subset.name],
            cells,
            units,
            _within(plain, subset),
            ids,
            nulls[subset.name],
            bars,
            with_plugins,
        )
        for subset in subsets
        if wanted.get(subset.name)
    }


def _become(
    order: Order, wanted: Sequence[Injection], cells: Sequence[Cell], units: Mapping[str, float],
    plain: Mapping[str, Block], ids: IntArray, null: Null, bars: Bars, with_plugins: bool,
) -> Outcomes:  # fmt: skip
    """The same in one subset, whose frames `plain` has at the controls `ids`."""
    hosts = np.array([one.host for one in wanted])
    rows = np.searchsorted(ids, hosts)
    plugins = host.load(order.plugins)
    columns = judge.full_columns([*plugins.statistics, *plugins.period_searches])
    made = {label: _injected(order, block, rows, wanted, cells, units[label]) for label, block in plain.items()}
    blocks = {label: block for label, (block, _) in made.items()}
    judged = judge.judge(blocks, plugins.statistics)
    if order.settings.completeness.period_search and plugins.period_searches:
        _search_gated(judged, hosts, null, blocks, columns, order.settings, plugins)
    asked = [*plugins.statistics, *plugins.period_searches] if with_plugins else []
    became = completeness.found(judged, hosts, null, columns, bars, order.settings, asked)
    return Outcomes(became, _extra(plain, made, rows, null.thresholds))


def rank_controls(order: Order, ids: IntArray, null: Null) -> tuple[FloatArray, FloatArray]:
    """`completeness.own_of_controls` for controls of a field (ascending ids)."""
    plugins = host.load(order.plugins)
    asked = [*plugins.statistics, *plugins.period_searches]
    return completeness.own_of_controls(null, ids, judge.full_columns(asked), asked)


def plant_in_frame(order: Order, frame: int, controls: IntArray) -> planted.Proof | None:
    """A source added to the pixels of a frame at one of these controls; None where no flux can be measured now."""
    tables = book(order.run, order.version)
    row = tables.row_of_frame[frame]
    who = tables.positions
    pieces = [p for p in store.pieces(tables.frames, who) if p.batch == tables.frames["batch"][row]]
    rows = store.read_rows(tables.folder, pieces, controls, np.array([frame]))
    usable = np.isfinite(rows["flux"]) & ((rows["flags"] & int(UNUSABLE)) == 0)
    if not usable.any():
        return None
    ids = rows["position"][usable]
    key = (order.settings.completeness.seed << 32) + frame
    chosen = int(ids[int(len(ids) * injection.uniform(key, completeness.HOST, np.zeros(1, np.int64))[0])])
    at = int(np.searchsorted(who["id"], chosen))
    facts = frame_facts(tables.frames, row)
    estimator = photometry.choose_estimator(
        host.load(order.plugins).estimators, facts.unit, order.settings.photometry.estimator, facts.beam_major > 0
    )
    try:
        check_unchanged(facts.path, *as_listed(tables.frames, row))
        return planted.plant(
            facts, who["ra"][at : at + 1], who["dec"][at : at + 1], estimator, order.settings,
            anchors_of(tables, row, int(who["round"][at])), key,
        )  # fmt: skip
    except (SetAsideError, OSError, ValueError):
        return None


def looks_of(
    order: Order, ids: IntArray, thresholds: Sequence[Mapping[str, tuple[float, float]]],
    given: Sequence[Mapping[str, float]],
) -> list[tuple[Looks, bool]]:  # fmt: skip
    """The looks at targets (ascending ids) and whether they are cycles.

    `thresholds` are each target's in sigma by channel, and what blank sky measures there (`blank_level`); `given` is its
    ephemeris, NaN for none.
    """
    blocks = position_blocks(order, ids)["blocks"]
    gap = order.settings.detection.epoch_gap_days
    return [
        _looks({label: block for label, block in blocks.items() if label in limits}, row, limits, ephemeris, gap)
        for row, (limits, ephemeris) in enumerate(zip(thresholds, given, strict=True))
    ]


def _within(blocks: Mapping[str, Block], subset: Subset) -> dict[str, Block]:
    """Blocks in the frames of a subset, those without any left out."""
    if subset.name == ALL:
        return dict(blocks)
    kept = {label: np.isin(block.frame, subset.frames) for label, block in blocks.items()}
    return {label: injection.restricted(block, kept[label]) for label, block in blocks.items() if kept[label].any()}


def _usable(block: Block) -> NDArray[np.bool_]:
    """Where a block has usable samples, shape (n, n_frames), by the rule of `LightCurve.from_arrays`."""
    return np.isfinite(block.flux) & np.isfinite(block.flux_err) & (block.flux_err > 0)


def _typical(flux_err: FloatArray) -> FloatArray:
    """The median error of each row, NaN where there is none."""
    return np.array([np.median(row[np.isfinite(row)]) if np.isfinite(row).any() else np.nan for row in flux_err])


def curves_of(blocks: Mapping[str, Block]) -> list[list[Any]]:
    """Each position's light curves."""
    n = len(next(iter(blocks.values()), ()))
    return [[block.curve(row) for block in blocks.values()] for row in range(n)]


def _injected(
    order: Order, block: Block, rows: IntArray, wanted: Sequence[Injection], cells: Sequence[Cell], unit: float
) -> tuple[Block, FloatArray]:
    """A channel's light curves with the sources added, and the fluxes that were, shape (n, n_frames).

    What calibration leaves of a comparison it leaves of a source, too.
    """
    flux = np.zeros((len(rows), len(block.frame)))
    left = residuals(order).get(block.channel.label)
    wander = np.zeros((1, len(block.frame)))
    if left is not None:
        wander = left.values[:, np.searchsorted(left.frame, block.frame)]
    if not block.channel.signed and np.isfinite(unit):
        for number, (row, one) in enumerate(zip(rows, wanted, strict=True)):
            peak = unit * cells[one.cell].flux
            if peak > 0:
                shape = injection.brightness(one.source, block.t_tdb_s[row], block.exposure_s[row], block.frame)
                flux[number] = peak * shape * (1.0 + wander[one.source.key % len(wander)])
    tables = book(order.run, order.version)
    at = [tables.row_of_frame[int(frame)] for frame in block.frame]
    electrons = tables.frames["electrons_per_unit"][at]
    keys = np.array([one.source.key for one in wanted])
    return injection.injected(block, rows, flux, keys, tables.solution, electrons), flux


def _extra(
    plain: Mapping[str, Block], made: Mapping[str, tuple[Block, FloatArray]], rows: IntArray,
    thresholds: Mapping[str, Thresholds],
) -> dict[str, FloatArray]:  # fmt: skip
    """Of each source the highest S/N that was added to a frame, how many frames it lit, and how many could be used;

    then, as measured with the noise, the highest S/N in a frame, and how many frames are above their threshold; at last
    how many frames should surely show it (S/N added SURELY above the threshold, to twice that), and how many of them do.
    """
    highest, lit, used, peak, detected, bright, shown = np.zeros((7, len(rows)))
    for label, block in plain.items():
        error = block.flux_err[rows]
        snr = np.where(np.isfinite(error), made[label][1] / error, 0.0)
        highest = np.maximum(highest, snr.max(axis=1, initial=0.0))
        lit += (snr > 1.0).sum(axis=1)
        used += np.isfinite(error).sum(axis=1)
        measured = np.nan_to_num(made[label][0].flux / made[label][0].flux_err)
        measured = np.abs(measured) if block.channel.signed else measured
        peak = np.maximum(peak, measured.max(axis=1, initial=0.0))
        above = measured > thresholds[label].detected
        detected += above.sum(axis=1)
        least = thresholds[label].detected + SURELY
        surely = (snr >= least) & (snr <= 2 * least)
        bright += surely.sum(axis=1)
        shown += (surely & above).sum(axis=1)
    return dict(zip(EXTRA, (highest, lit, used, peak, detected, bright, shown), strict=True))


def _search_gated(
    judged: judge.Judgement, hosts: IntArray, null: Null, blocks: Mapping[str, Block], columns: Mapping[str, Column],
    settings: Settings, plugins: host.Plugins,
) -> None:  # fmt: skip
    """Search the periods of the sources that the statistics so far put among the foremost, as in a run."""
    plain = replace(null, judgement=_without(null.judgement, plugins.period_searches))
    passes = completeness.ranked(judged, hosts, plain, columns, settings).p <= settings.ranking.gate
    rows = np.flatnonzero(passes)
    curves = curves_of(blocks)
    judge.spread(judged, judge.search([curves[row] for row in rows], plugins.period_searches), rows, columns)


def _without(judgement: judge.Judgement, plugins: Sequence[Plugin]) -> judge.Judgement:
    """A judgement without the columns of some plugins."""
    names = {f"{plugin.name}_{column.name}" for plugin in plugins for column in plugin.columns}
    return replace(judgement, values={key: v for key, v in judgement.values.items() if key[1] not in names})


def _looks(
    blocks: Mapping[str, Block], row: int, limits: Mapping[str, tuple[float, float]], given: Mapping[str, float],
    gap_days: float,
) -> tuple[Looks, bool]:  # fmt: skip
    """The looks at one target in unsigned channels."""
    parts: list[list[Any]] = [[], [], [], [], []]
    told: dict[str, float] = {}
    for label, block in blocks.items():
        curve = block.curve(row)
        if len(curve) == 0 or block.channel.signed:
            continue
        least, level = limits[label]
        unit = float(np.median(curve.flux_err))
        threshold = least - level / curve.flux_err
        mine = (curve.t_tdb_s, curve.exposure_s, curve.flux_err / unit, threshold, np.full(len(curve), len(told)))
        told[label] = unit
        for part, values in zip(parts, mine, strict=True):
            part.append(values)
    t, exposure, error, threshold, channel = (np.concatenate(p) if p else np.empty(0) for p in parts)
    cycles = bool(np.isfinite([given["period"], given["epoch"]]).all())
    look, share = by_epoch(t, gap_days), np.ones(len(t))
    if cycles:
        known = np.isfinite(t)
        t, exposure, error, threshold, channel = (v[known] for v in (t, exposure, error, threshold, channel))
        since = t - (given["epoch"] - J2000_JD) * DAY
        dot, window = float(np.nan_to_num(given["period_dot"])), float(np.nan_to_num(given["window"]))
        look, share = by_cycle(since, exposure, given["period"], dot, window)
    of = channel.astype(np.int64)
    return Looks(look, of, error, threshold, share, exposure, tuple(told), tuple(told.values())), cycles
