"""A block's light curves to plugin columns. Pure: it knows no run folder, no other position, no target from a control.

Columns of the core itself (how many samples, how bright at most, how bright in the mean) are made beside the
plugins', by the same rule, so that their thresholds can be taken from the controls.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.fence import Fault, blank, call, checked
from hindlight.lightcurve import Block, FloatArray, IntArray, LightCurve, weighted_mean
from hindlight.plugin import Column, PeriodSearch, Plugin, Statistic

WHOLE = ""  # stands for 'all channels together' where a channel's label is expected

CORE = (
    Column("n_used", "usable samples", dtype="int64"),
    Column("snr_max", "highest flux over its error (absolute for Stokes Q, U, V)", unusual="high", about="presence"),
    Column("excess_max", "highest excess over the quiet level in sigma", unusual="high"),
    Column("mean_snr", "weighted mean flux over its error", unusual="high", about="presence"),
    Column("mean", "weighted mean flux"),
    Column("mean_err", "its error"),
    Column("depth", "median error of a single raw flux"),
    Column("reduced", "chi-square per degree of freedom about the weighted mean", unusual="high"),
)


@dataclass
class Judgement:
    """What was found for n positions: for each channel (or WHOLE) and full column name an array of shape (n,)."""

    n: int
    values: dict[tuple[str, str], Any] = field(default_factory=dict)
    faults: list[Fault] = field(default_factory=list)
    calls: dict[str, int] = field(default_factory=dict)


def judge(blocks: Mapping[str, Block], statistics: Sequence[Statistic]) -> Judgement:
    """Every statistic at every position of the blocks (one per channel, the same positions in each)."""
    result = Judgement(len(next(iter(blocks.values()), ())))
    for label, block in blocks.items():
        curves = list(block.curves())
        _store(result, label, "core", CORE, [core_columns(curve) for curve in curves])
        for statistic in statistics:
            if not statistic.all_channels:
                rows = _rows(result, statistic, block, curves, label)
                _store(result, label, statistic.name, statistic.columns, rows)
    for statistic in statistics:
        if statistic.all_channels and blocks:
            _store(result, WHOLE, statistic.name, statistic.columns, _whole_rows(result, statistic, blocks))
    return result


def search(curves: Sequence[Sequence[LightCurve]], searches: Sequence[PeriodSearch]) -> Judgement:
    """Every period search at every position; `curves` holds each position's channels."""
    result = Judgement(len(curves))
    for plugin in searches:
        rows = []
        for channels in curves:
            usable = timed_curves(channels, plugin.min_points)
            name = channels[0].name if channels else ""
            rows.append(_one(result, plugin, partial(plugin.search, usable), name, WHOLE) if usable else None)
        _store(result, WHOLE, plugin.name, plugin.columns, rows)
    return result


def timed_curves(channels: Sequence[LightCurve], min_points: int) -> tuple[LightCurve, ...]:
    """The channels that have at least `min_points` samples with a known time, restricted to those samples."""
    return tuple(curve.timed for curve in channels if len(curve.timed) >= min_points)


def core_columns(curve: LightCurve) -> dict[str, Any]:
    """The core's own columns for one light curve."""
    if len(curve) == 0:
        return {column.name: blank(column) for column in CORE}
    mean, error = weighted_mean(curve.flux, curve.flux_err)
    snr = curve.flux / curve.flux_err
    excess = curve.above_quiet
    if curve.channel.signed:
        snr, excess = np.abs(snr), np.abs(excess)
    mean_snr = abs(mean / error) if curve.channel.signed else mean / error
    spread = float((((curve.flux - mean) / curve.flux_err) ** 2).sum())
    return {
        "n_used": len(curve),
        "snr_max": float(snr.max()),
        "excess_max": float(excess.max()) if len(curve) > 1 else float("nan"),
        "mean_snr": mean_snr,
        "mean": mean,
        "mean_err": error,
        "depth": float(np.median(curve.raw_flux_err)),
        "reduced": spread / (len(curve) - 1) if len(curve) > 1 else float("nan"),
    }


def _rows(
    result: Judgement, statistic: Statistic, block: Block, curves: list[LightCurve], label: str
) -> list[dict[str, Any] | None]:
    """One statistic at every position of a block; None where there are too few samples or it failed."""
    given = [curve.timed if statistic.uses_times else curve for curve in curves]
    enough = np.array([len(curve) >= statistic.min_points for curve in given], bool)
    if enough.any():
        whole = all(curve is full for curve, full in zip(given, curves, strict=True))
        part = block if whole and enough.all() else block.select(enough, timed=statistic.uses_times)
        together = call(statistic, lambda: _unpacked(statistic.compute_block(part), len(part)), part.names[0], label)
        if isinstance(together, Fault):
            result.faults.append(together)
        elif together is not None:
            cells = iter(together)
            return [
                _one(result, statistic, partial(next, cells), curve.name, label) if ok else None
                for curve, ok in zip(given, enough.tolist(), strict=True)
            ]
    return [
        _one(result, statistic, partial(statistic.compute, curve), curve.name, label) if ok else None
        for curve, ok in zip(given, enough.tolist(), strict=True)
    ]


def _whole_rows(result: Judgement, statistic: Statistic, blocks: Mapping[str, Block]) -> list[dict[str, Any] | None]:
    rows = []
    for curves in zip(*(block.curves() for block in blocks.values()), strict=True):
        given = tuple(curve.timed if statistic.uses_times else curve for curve in curves)
        given = tuple(curve for curve in given if len(curve) >= statistic.min_points)
        name = curves[0].name
        rows.append(_one(result, statistic, partial(statistic.compute, given), name, WHOLE) if given else None)
    return rows


def _one(result: Judgement, plugin: Plugin, method: Any, name: str, label: str) -> dict[str, Any] | None:
    """One fenced call with its columns checked; None, and a fault noted, where it failed."""
    result.calls[plugin.name] = result.calls.get(plugin.name, 0) + 1
    values = call(plugin, lambda: checked(plugin, method()), name, label)
    if isinstance(values, Fault):
        result.faults.append(values)
        return None
    return values


def _unpacked(together: Mapping[str, Any] | None, n: int) -> list[dict[str, Any]] | None:
    """What `compute_block` returned for n positions as one mapping for each."""
    if together is None:
        return None
    lists = [np.broadcast_to(np.asarray(values), n).tolist() for values in together.values()]
    return [dict(zip(together, row, strict=True)) for row in zip(*lists, strict=True)] if lists else [{}] * n


def _store(
    result: Judgement, label: str, name: str, columns: Sequence[Column], rows: Sequence[dict[str, Any] | None]
) -> None:
    for column in columns:
        cells = [blank(column) if row is None else row[column.name] for row in rows]
        dtype: Any = object if column.dtype == "str" else column.dtype
        result.values[label, f"{name}_{column.name}"] = np.array(cells, dtype=dtype)


def taken(whole: Judgement, rows: IntArray) -> Judgement:
    """What was found for some of the positions, without the faults."""
    return Judgement(len(rows), {key: values[rows] for key, values in whole.values.items()})


def joined(parts: Sequence[Judgement], lengths: Sequence[int], columns: Mapping[str, Column]) -> Judgement:
    """Judgements of consecutive groups of positions as one; what a group lacks is blank there."""
    whole = Judgement(sum(lengths))
    keys = sorted({key for part in parts for key in part.values})
    for key in keys:
        column = columns[key[1]]
        pieces = []
        for part, length in zip(parts, lengths, strict=True):
            dtype: Any = object if column.dtype == "str" else column.dtype
            pieces.append(part.values.get(key, np.full(length, blank(column), dtype=dtype)))
        whole.values[key] = np.concatenate(pieces)
    for part in parts:
        whole.faults += part.faults
        for name, count in part.calls.items():
            whole.calls[name] = whole.calls.get(name, 0) + count
    return whole


def spread(whole: Judgement, part: Judgement, rows: NDArray[np.int64], columns: Mapping[str, Column]) -> None:
    """Put what was found for some positions (at `rows`) into a judgement of all; the others are blank."""
    for key, values in part.values.items():
        column = columns[key[1]]
        dtype: Any = object if column.dtype == "str" else column.dtype
        cells = np.full(whole.n, blank(column), dtype=dtype)
        cells[rows] = values
        whole.values[key] = cells
    whole.faults += part.faults
    for name, count in part.calls.items():
        whole.calls[name] = whole.calls.get(name, 0) + count


def full_columns(plugins: Sequence[Plugin]) -> dict[str, Column]:
    """Every column by its full name, the core's included."""
    named = {f"core_{column.name}": column for column in CORE}
    for plugin in plugins:
        named |= {f"{plugin.name}_{column.name}": column for column in plugin.columns}
    return named


def oriented(values: FloatArray, column: Column, null: FloatArray) -> FloatArray:
    """A calibrated column turned so that larger is more unusual, NaN at the far low end; `null` holds the controls."""
    values = np.asarray(values, float)
    if column.unusual == "low":
        values = -values
    elif column.unusual == "both":
        finite = null[np.isfinite(null)]
        values = np.abs(values - (np.median(finite) if finite.size else 0.0))
    return np.where(np.isnan(values), -np.inf, values)
