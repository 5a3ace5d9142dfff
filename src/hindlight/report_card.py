"""What is said beside the report cards of statistics: what their columns count, and why some of them find nothing."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from hindlight.completeness import NOTHING
from hindlight.judge import Judgement
from hindlight.plugin import PeriodSearch, Statistic
from hindlight.wording import how_many


def columns_said(sources: Mapping[str, int]) -> str:
    """What the columns of the report cards are, given how many made-up sources there are of each kind."""
    kinds = [f"{how_many(n, 'source', 'sources')} of kind '{kind}'" for kind, n in sources.items() if kind != NOTHING]
    total = sum(n for kind, n in sources.items() if kind != NOTHING)
    none = f"{NOTHING!r}: the same of {how_many(sources[NOTHING], 'control', 'controls')} with no source added, "
    return (
        f"columns: the share that the statistic finds by itself of {' and of '.join(kinds) or 'no source'}; "
        + (f"{none}which are false alarms; " if NOTHING in sources else "")
        + f"'only it finds': how many of the {total} no other statistic here finds; 's per 1000': seconds of one core for "
        "1000 light curves, or 1000 positions where it takes all channels together"
    )


def blank(asked: Sequence[Statistic | PeriodSearch], judgements: Sequence[Judgement]) -> set[str]:
    """The plugins whose ranked columns have no value at any position."""
    valued = {
        full
        for judged in judgements
        for (_, full), values in judged.values.items()
        if np.isfinite(np.asarray(values, float)).any()
    }
    return {
        plugin.name
        for plugin in asked
        if not any(f"{plugin.name}_{column.name}" in valued for column in plugin.columns if column.unusual)
    }


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
            lacking = f"no light curve has what it asks (at least {plugin.min_points} samples)"
            if isinstance(plugin, Statistic) and plugin.all_channels:
                lacking = "too few measurements of several channels go together, or soon follow each other"
            why = f"its columns are blank at every control: {lacking}"
        said.append(f"{plugin.name} finds nothing: {why}")
    return said
