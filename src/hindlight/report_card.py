"""The report cards of statistics, what their columns count, and why some of them find nothing."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from hindlight.completeness import NOTHING, Cell, Mask, half_flux
from hindlight.judge import Judgement
from hindlight.lightcurve import FloatArray
from hindlight.plugin import PeriodSearch, Statistic
from hindlight.wording import how_many


@dataclass(frozen=True)
class Power:
    """A statistic's report card.

    `power` maps kinds of source to the share of them that the statistic alone finds at the rate, `half` to the peak flux in
    median frame errors at which it finds half of them (infinite beyond the `fluxes` of the grid, see `half_flux`);
    `only_here` counts those that no other one that enters p_value finds, None for one that does not enter it itself;
    `cost_s` is what a thousand light curves take.
    """

    plugin: str
    power: Mapping[str, float]
    half: Mapping[str, float]
    fluxes: tuple[float, ...]
    only_here: int | None
    cost_s: float


def hits(own_p: FloatArray, lowest_p: FloatArray, rate: float) -> Mask:
    """What is found at a rate, or at the smallest that controls can tell: shape (n, n_plugins), from p-values of it."""
    return np.asarray(own_p <= np.maximum(rate, lowest_p)[:, None] * (1 + 1e-9))


def cards(
    asked: Sequence[Statistic | PeriodSearch], hit: Mask, cells: Sequence[Cell], false: Mask, costs: Sequence[float]
) -> list[Power]:
    """The report cards: `hit` (n, n_plugins) for sources of these cells, `false` (n_controls, n_plugins) for none."""
    kinds, fluxes = np.array([cell.kind for cell in cells]), np.array([cell.flux for cell in cells])
    real = [kind for kind in dict.fromkeys(kinds.tolist()) if kind != NOTHING]
    counts = np.array([enters(plugin) for plugin in asked], bool)
    others = hit[:, : len(asked)][:, counts].sum(axis=1)
    grid = tuple(np.unique(fluxes[fluxes > 0]).tolist())
    made = []
    for number, plugin in enumerate(asked):
        mine = hit[:, number]
        half = {kind: _half(fluxes[kinds == kind], mine[kinds == kind]) for kind in real}
        power = {NOTHING: float(false[:, number].mean())} | {kind: float(mine[kinds == kind].mean()) for kind in real}
        only = int((mine & (others == 1) & (kinds != NOTHING)).sum()) if counts[number] else None
        made.append(Power(plugin.name, power, half, grid, only, costs[number]))
    return made


def _half(flux: FloatArray, found: Mask) -> float:
    """The flux at which half of these sources are found."""
    grid = np.unique(flux[flux > 0])
    return half_flux(grid, np.array([found[flux == one].mean() for one in grid]))


def enters(plugin: Statistic | PeriodSearch) -> bool:
    """Whether a plugin has a part in p_value: a column that is ranked and asks about variation."""
    return any(column.unusual is not None and column.about == "variation" for column in plugin.columns)


def presence_said(asked: Sequence[Statistic | PeriodSearch]) -> list[str]:
    """Which plugins ask about presence alone, and what follows."""
    names = [p.name for p in asked if not enters(p) and any(column.unusual is not None for column in p.columns)]
    if not names:
        return []
    return [
        f"{', '.join(names)}: asks whether a source is there, not whether it varies, and is no part of p_value; it takes none "
        "from what only another finds"
    ]


def columns_said(sources: Mapping[str, int], n_controls: int) -> str:
    """What the columns of the report cards are, given how many made-up sources there are of each kind."""
    kinds = [f"{how_many(n, 'source', 'sources')} of kind '{kind}'" for kind, n in sources.items() if kind != NOTHING]
    total = sum(n for kind, n in sources.items() if kind != NOTHING)
    return (
        f"columns: the share that the statistic finds by itself of {' and of '.join(kinds) or 'no source'}, over all fluxes of "
        "the grid; 'half at': the peak flux in median frame errors at which it finds half; "
        f"{NOTHING!r}: the share of {how_many(n_controls, 'control', 'controls')} without a source that it finds, each among "
        "the others, which are false alarms (about the rate, unless values are equal or few controls serve); 'only it finds': "
        f"how many of the {total} no other statistic finds that is part of p_value; 's per 1000': seconds of one core for 1000 "
        "light curves, or 1000 positions where it takes all channels together"
    )


def blank(asked: Sequence[Statistic | PeriodSearch], judgements: Sequence[Judgement]) -> set[str]:
    """The plugins whose ranked columns have no value at any position."""
    ranked = {p.name: {f"{p.name}_{column.name}" for column in p.columns if column.unusual is not None} for p in asked}
    asked_for = set().union(*ranked.values())
    valued = {
        full
        for judged in judgements
        for (_, full), values in judged.values.items()
        if full in asked_for and np.isfinite(np.asarray(values, float)).any()
    }
    return {name for name, columns in ranked.items() if not columns & valued}


def silence_said(
    asked: Sequence[Statistic | PeriodSearch], power: Mapping[str, Mapping[str, float]], empty: set[str]
) -> list[str]:
    """Why a plugin finds no source of any kind: nothing to rank, no light curve it can use, or none far enough out."""
    said = []
    for plugin in asked:
        found = any(share > 0 for kind, share in power[plugin.name].items() if kind != NOTHING)
        if found:
            continue
        if not any(column.unusual for column in plugin.columns):
            why = "none of its columns is ranked"
        elif plugin.name not in empty:
            why = "no source is further out than chance at this rate"
        else:
            lacking = (
                f"it gives no finite number there, or fails (plugin_faults.ecsv), or wants more than they have (at least "
                f"{plugin.min_points} samples, times)"
            )
            if isinstance(plugin, Statistic) and plugin.all_channels:
                lacking = "too few measurements of several channels go together, or soon follow each other"
            why = f"its columns are blank at every control: {lacking}"
        said.append(f"{plugin.name} finds nothing: {why}")
    return said
