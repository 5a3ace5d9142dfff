"""Where made-up sources are hidden: in each subset of frames at controls like the targets that the subset has seen.

An instrument is asked about the targets that it has looked at, and for them alone: sources in fields that it never
observed would only tell where it did not look. Pure: counts of frames in, weights of controls out.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from hindlight import completeness
from hindlight.completeness import Cell, Injection, Null
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.settings import Completeness
from hindlight.study import FieldControls
from hindlight.wording import how_many

MOST_NAMED = 6
Used = Mapping[str, Mapping[str, int]]  # target -> channel -> usable frames


@dataclass(frozen=True, eq=False)
class Places:
    """The controls that sources of one subset may be hidden at: ids and weights, shape (n,), in `n_fields` fields.

    They stand for `n_targets` targets, each with the same share of the weight.
    """

    ids: IntArray
    weights: FloatArray
    n_fields: int
    n_targets: int


def places(fields: Sequence[FieldControls], used: Used, nulls: Mapping[int, Null], share: float) -> Places:
    """The places in a subset, where `used` tells of the targets' frames, from each field's null there.

    Only controls that stand for some target are among them, so there may be none.
    """
    each = [like_targets(found, used, nulls[found.number], share) for found in fields]
    ids = np.concatenate([found.ids for found in fields])
    weights = np.concatenate(each)
    kept = weights > 0
    n_targets = round(float(weights.sum()))  # each target's weight is 1
    return Places(ids[kept], weights[kept], sum(bool(mine.any()) for mine in each), n_targets)


def like_targets(found: FieldControls, used: Used, null: Null, share: float) -> FloatArray:
    """For each control of a field the number of targets it stands for, shape (n,): each is shared by those like it.

    Like a target are controls that have at least a fraction `share` of its usable frames in each of its channels. A target
    without a frame counts nowhere.
    """
    has = completeness.used_frames(null.judgement)
    weight = np.zeros(len(found.ids))
    for name in found.targets:
        mine = used.get(name, {})
        like = np.ones(len(found.ids), bool)
        for label, n_used in mine.items():
            like &= has.get(label, np.zeros(len(found.ids))) >= share * n_used
        if like.any() and sum(mine.values()) > 0:
            weight += like / like.sum()
    return weight


def hidden(cells: Sequence[Cell], at: Places, settings: Completeness) -> list[Injection]:
    """The made-up sources of a subset; the n-th is the same source in every subset, at another control if need be."""
    return completeness.drawn(cells, at.ids, at.weights, settings) if len(at.ids) else []


def places_said(at: Mapping[str, Places]) -> list[str]:
    """Which subsets have no source, and which cover some of the fields only; `at` has the subset of all frames first."""
    names = list(at)
    most = max(one.n_fields for one in at.values())
    empty = [name for name in names if not len(at[name].ids)]
    part = [
        f"{name} ({at[name].n_fields} of {how_many(most, 'field', 'fields')}, "
        f"{how_many(at[name].n_targets, 'target', 'targets')})"
        for name in names
        if 0 < at[name].n_fields < most
    ]
    said = []
    if part:
        said.append(
            "sources of a subset are hidden only where it has frames, so its completeness is that of the targets it has "
            f"looked at: {_listed(part)}"
        )
    if empty:
        said.append(
            f"no target has frames, and controls with as many, in {_listed(empty)}: left out of completeness.ecsv"
        )
    return said


def _listed(names: Sequence[str]) -> str:
    """Names with commas, the first MOST_NAMED of them."""
    more = len(names) - MOST_NAMED
    return ", ".join(names[:MOST_NAMED]) + (f" and {more} more" if more > 0 else "")
