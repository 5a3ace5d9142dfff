"""The fields of a run: who is judged with whom, every target's rank, and p-values over all targets.

Pure: judgements in, ranks and p-values out. The arithmetic is in `calibrate`, one field at a time in `ranking`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight import calibrate, ranking, tails
from hindlight.host import Plugins
from hindlight.judge import Judgement, full_columns, taken
from hindlight.lifted import Lift, group_size, originals
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.plan import serving_controls
from hindlight.search import best_places
from hindlight.settings import Settings


@dataclass(eq=False)
class Field:
    """One field while it is judged: its targets and controls as ids, and what is known of them so far.

    Targets that were searched are in fields apart, with their best places and those of their controls, out of
    `n_trials` each; so are bright ones, with copies of the controls made as bright as they are (`lift`), which are alike in
    groups of `group_size`; so are those that had `n_passes` second passes, with the controls these added. The numbers of such
    fields are below zero. `searched` are the positions whose periods have been searched.
    """

    number: int
    targets: IntArray
    controls: IntArray
    serving: NDArray[np.bool_]
    n_trials: int = 1
    lift: Lift | None = None
    group_size: float = 1.0
    n_passes: int = 0
    searched: IntArray = field(default_factory=lambda: np.empty(0, np.int64))
    judgement: Judgement = field(default_factory=lambda: Judgement(0))
    ranks: ranking.FieldRanks | None = None
    thresholds: dict[str, ranking.Thresholds] = field(default_factory=dict)
    unlike: FloatArray = field(default_factory=lambda: np.empty(0))

    @property
    def ranked(self) -> ranking.FieldRanks:
        """The ranks, once `rank` has found them."""
        if self.ranks is None:
            raise ValueError(f"field {self.number} has not been ranked")
        return self.ranks

    @property
    def ids(self) -> IntArray:
        """Every position of the field, ascending."""
        return np.sort(np.concatenate([self.targets, self.controls]))

    @property
    def blank_sky(self) -> IntArray:
        """The controls as they were measured, ascending."""
        return originals(self.controls)

    def rows(self, ids: IntArray) -> IntArray:
        """Where these positions stand in the field's judgement."""
        return np.searchsorted(self.ids, ids)


def searched(
    positions: Mapping[str, Any], target: int, bright: Judgement, ids: IntArray, in_frames: NDArray[np.bool_]
) -> Field:
    """A target that was searched as a field of its own, numbered below zero: its best place among its controls' best places.

    `bright` holds the core's columns of the places `ids` (ascending); `in_frames`, by ascending id of the middles, says
    which control ellipses share enough of the target's frames.
    """
    row = int(np.searchsorted(positions["id"], target))
    nodes = positions["node"][positions["parent"] == target]  # by id: the stated place first
    mine = (positions["kind"] == "blank") & (positions["search"] == positions["search"][row])
    middles = np.unique(positions["parent"][mine])
    places = np.stack([_places(positions, int(parent), nodes) for parent in (target, *middles.tolist())])
    at = np.searchsorted(ids, places)
    labels = sorted({channel for channel, _ in bright.values})
    columns = [[np.asarray(bright.values[label, name], float)[at] for label in labels] for name in _CHOOSING]
    best = best_places(*columns) if labels else np.zeros(len(places), np.int64)
    chosen = places[np.arange(len(places)), best]
    serving = serving_controls(positions, middles, in_frames)
    order = np.argsort(chosen[1:])
    return Field(-1 - target, chosen[:1], chosen[1:][order], serving[:, order], n_trials=len(nodes))


def together(fields: Sequence[Field]) -> list[Field]:
    """Searched targets whose controls are judged at the same places as one field, so that these are judged once."""
    alike: dict[tuple[int, ...], list[Field]] = {}
    for found in fields:
        alike.setdefault((found.n_trials, *found.controls.tolist()), []).append(found)
    joined = []
    for group in alike.values():
        targets = np.concatenate([found.targets for found in group])
        serving = np.concatenate([found.serving for found in group])
        order = np.argsort(targets)
        joined.append(Field(group[0].number, targets[order], group[0].controls, serving[order], group[0].n_trials))
    return joined


_CHOOSING = ("core_excess_max", "core_mean_snr")


def _places(positions: Mapping[str, Any], parent: int, nodes: IntArray) -> IntArray:
    """The ids of the places at these nodes around a middle."""
    rows = np.flatnonzero(positions["parent"] == parent)
    rows = rows[np.argsort(positions["node"][rows])]
    return np.asarray(positions["id"][rows[np.searchsorted(positions["node"][rows], nodes)]])


def without(found: Field, index: Sequence[int]) -> Field:
    """The field without some of its targets, given by their places in it; it must be ranked again."""
    kept = np.setdiff1d(np.arange(len(found.targets)), np.array(index, np.int64))
    rest = replace(found, targets=found.targets[kept], serving=found.serving[kept])
    judgement = taken(found.judgement, found.rows(rest.ids))
    rest.judgement = replace(judgement, faults=found.judgement.faults, calls=found.judgement.calls)
    return rest


def rank(found: Field, plugins: Plugins, settings: Settings) -> None:
    """Fill in a field's ranks and thresholds from its judgement."""
    columns = full_columns([*plugins.statistics, *plugins.period_searches])
    targets, controls = found.rows(found.targets), found.rows(found.controls)
    # A bright target's own photons are in its errors, and not in those of the copies.
    serving, found.unlike = ranking.matched(
        found.judgement, targets, controls, found.serving, settings.controls, bounded=found.lift is None
    )
    if found.lift is not None:
        each, most = len(found.controls) // len(found.blank_sky), int(serving.sum(axis=1).max(initial=0))
        found.group_size = group_size(found.lift.share, each, most, found.lift.n_sources)
    found.ranks = ranking.rank_field(found.judgement, columns, targets, controls, serving, found.group_size)
    found.thresholds = ranking.thresholds(found.judgement, controls, settings.detection, found.n_trials)


def gated(found: Field, settings: Settings) -> IntArray:
    """The positions whose periods are searched: those the statistics so far put among the foremost fraction."""
    if len(found.targets) == 0:
        return found.targets
    target_p = np.array([r.p_value for r in found.ranked.ranks])
    with np.errstate(invalid="ignore"):
        pass_targets = found.targets[target_p <= settings.ranking.gate]
        pass_controls = found.controls[found.ranked.control_p <= settings.ranking.gate]
    return np.sort(np.concatenate([pass_targets, pass_controls]))


@dataclass(frozen=True, eq=False)
class PValues:
    """Over all targets of the run, in order of their ids: shapes (n,).

    `short`: beyond every control, whose number cannot decide at the run's level; `testable`: there is a p-value that
    decides. That of a target that is short does only where its tail puts it below the level: a target beyond everything
    blank that is known is not shown to be steady by there being too little of it. `tails`: what the tail of its controls says
    of each target that is short and has one, by its place.
    """

    empirical: FloatArray
    p: FloatArray
    q: FloatArray
    extrapolated: NDArray[np.bool_]
    short: NDArray[np.bool_]
    testable: NDArray[np.bool_]
    needed: int
    tails: Mapping[int, tails.Extrapolation] = field(default_factory=dict)


def undecided(ranks: Sequence[calibrate.Rank], settings: Settings) -> tuple[NDArray[np.bool_], int]:
    """Which targets of the run lie beyond all controls, whose number cannot decide, shape (n,), and the number that would."""
    empirical = np.array([r.p_value for r in ranks])
    level, dependent = settings.ranking.level, settings.ranking.any_dependence
    with np.errstate(invalid="ignore"):
        short = np.array([r.exceeded_by == 0 for r in ranks]) & (
            calibrate.false_discovery(empirical, dependent) >= level
        )
    return short, calibrate.controls_needed(int(np.isfinite(empirical).sum()), level, dependent)


def p_values(ranks: Sequence[calibrate.Rank], settings: Settings, weights: Sequence[float] | None = None) -> PValues:
    """One p-value and q-value per target; a tail bound stands in where the controls alone cannot decide.

    `weights` are the group sizes of the controls that each was ranked with, 1 where they are not given.
    """
    empirical = np.array([r.p_value for r in ranks])
    short, needed = undecided(ranks, settings)
    p = empirical.copy()
    fitted: dict[int, tails.Extrapolation] = {}
    for index in np.flatnonzero(short).tolist():
        tail = tails.extrapolate(
            ranks[index].control_distances,
            ranks[index].beyond,
            settings.ranking.tail_exceedances,
            weights[index] if weights else 1.0,
        )
        if tail.n:
            fitted[index] = tail
        p[index] = np.fmin(p[index], tail.bound)
    q = calibrate.false_discovery(p, settings.ranking.any_dependence)
    with np.errstate(invalid="ignore"):
        testable = np.isfinite(empirical) & (~short | (q < settings.ranking.level))
    return PValues(empirical, p, q, p < empirical, short, testable, needed, fitted)
