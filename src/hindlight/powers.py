"""`hindlight plugins --power`: what each statistic of a run finds by itself of made-up sources, and what it costs."""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from functools import partial
from itertools import chain
from typing import Any

import numpy as np

from hindlight import judge, record, report_card
from hindlight.completeness import Mask, Null
from hindlight.crew import assembled
from hindlight.fence import call
from hindlight.hiding import Places, hidden
from hindlight.lightcurve import FloatArray, LightCurve
from hindlight.plugin import PeriodSearch, Statistic
from hindlight.recovery import INJECTIONS_AT_ONCE, counted_of, nulls_of, outcomes_of, places_of
from hindlight.report_card import Power
from hindlight.study import Asked, Study, all_frames, is_small, opened, study_of
from hindlight.tasks import position_blocks
from hindlight.trials import ALL, curves_of, rank_controls
from hindlight.verdicts import Watcher
from hindlight.wording import from_to

POWER_RATE = 1e-3


def report_cards(asked: Asked, watcher: Watcher) -> tuple[list[Power], tuple[str, ...]]:
    """The power of each statistic alone on made-up sources in all frames of a run, and what is to be said of it."""
    run, order, plugins = opened(asked, with_new=True)
    with run.locked(), record.logged(run), assembled(asked.workers, None, is_small(run, order.settings)) as crew:
        study = study_of(run, order, plugins, crew, watcher, lambda frames: [all_frames(frames)], every_control=True)
        nulls, units = nulls_of(study)
        at = places_of(study, counted_of(study), nulls)[ALL]
        wanted = hidden(study.cells, at, study.settings.completeness)
        outcome = outcomes_of(study, {ALL: wanted}, nulls, units, with_plugins=True)[ALL]
        asks: list[Statistic | PeriodSearch] = [
            *plugins.statistics,
            *(plugins.period_searches if order.settings.completeness.period_search else ()),
        ]
        false = _false_alarms(study, at, nulls)
        costs = _costs(study, asks)
    hit = report_card.hits(outcome.found.own_p, outcome.found.lowest_p, POWER_RATE)
    cards = report_card.cards(asks, hit, [study.cells[one.cell] for one in wanted], false, costs)
    empty = report_card.blank(asks, [nulls[found.number][ALL].judgement for found in study.fields])
    kinds = Counter(study.cells[one.cell].kind for one in wanted)
    said = [_rate_said(outcome.found.lowest_p), report_card.columns_said(kinds, len(at.ids))]
    said += report_card.presence_said(asks)
    said += report_card.silence_said(asks, {card.plugin: card.power for card in cards}, empty)
    if not order.settings.completeness.period_search:
        said.append("period searches are left out: [completeness] period_search = true in the run's settings asks them")
    return cards, tuple(said)


def _false_alarms(study: Study, at: Places, nulls: Mapping[int, Mapping[str, Null]]) -> Mask:
    """Which plugin alone finds which blank control that may hold a source, each among the others: (n, n_plugins)."""
    here = [(f, np.intersect1d(f.ids, at.ids)) for f in study.fields]
    jobs = [(ids, replace(nulls[f.number][ALL], brighter={})) for f, ids in here if len(ids)]
    ranked = study.each("ranking controls", rank_controls, jobs)
    return np.concatenate([report_card.hits(p, lowest, POWER_RATE) for p, lowest in ranked])


def _rate_said(lowest_p: FloatArray) -> str:
    """At which rate of false alarms power is told, by the smallest p-value that each source could have got."""
    low, high = (float(np.maximum(POWER_RATE, p)) for p in (lowest_p.min(), lowest_p.max()))
    if high <= POWER_RATE * (1 + 1e-9):
        return f"power at a false-alarm rate of {POWER_RATE:g}"
    rates = from_to(low, high, ".3g")
    fewest = round(1.0 / float(lowest_p.max()) - 1.0)
    return (
        f"power at a false-alarm rate of {rates}, NOT {POWER_RATE:g}: that takes {round(1 / POWER_RATE) - 1} controls beside "
        f"the one that holds the source, some have {fewest}, those of second passes and of other fields in the same "
        f"frames included; at {POWER_RATE:g} power is lower. A run of its own with [controls] per_field = "
        f"{round(1.2 / POWER_RATE)} reaches it where so many fit into the frames"
    )


def _costs(study: Study, plugins: Sequence[Statistic | PeriodSearch]) -> list[float]:
    """Seconds that each plugin takes for a thousand calls with one light curve (or all of a position), by the wall clock."""
    ids = study.fields[0].ids[:INJECTIONS_AT_ONCE]
    curves = curves_of(position_blocks(study.order, ids)["blocks"])
    for curve in chain.from_iterable(curves):
        _ = curve.above_quiet if len(curve) else None  # what statistics share is not the cost of the first one asked
    return [_cost(plugin, curves) for plugin in plugins]


def _cost(plugin: Statistic | PeriodSearch, curves: Sequence[Sequence[LightCurve]]) -> float:
    """The same for one plugin, NaN where no light curve has enough samples for it."""
    method: Callable[[Any], Any] = plugin.compute if isinstance(plugin, Statistic) else plugin.search
    given: list[Any] = [channels for one in curves if (channels := judge.timed_curves(one, plugin.min_points))]
    if isinstance(plugin, Statistic) and not plugin.all_channels:
        given = list(chain.from_iterable(given))
    start = time.perf_counter()
    for curve in given:
        call(plugin, partial(method, curve), "")
    return 1000.0 * (time.perf_counter() - start) / len(given) if given else float("nan")
