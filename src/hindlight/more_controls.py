"""Controls added to a field for targets that lie beyond all it has: how many, where, in which frames.

A second pass, see `second_pass`. Pure: tables in, tables out; what is added is pinned in the position table as any control is.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.lightcurve import FloatArray, IntArray
from hindlight.plan import BrightSources, FieldFrames, add_more_controls, clear_of_targets, covered
from hindlight.positions import field_of, first_controls, nearest_deg, serves
from hindlight.settings import Controls
from hindlight.systems import unit_vectors

GROWTH = 4  # a field has at most so many times as many controls after a pass as before
SPARE = 1.1  # times the number that would decide is asked for: some will have too few usable samples
LEAST_GAIN = 0.1  # a pass for fewer new controls than this fraction of those there are is not worth it
PLACES_AT_ONCE = 2048  # whose coverage is looked up together

Columns = dict[str, Any]


@dataclass(frozen=True, eq=False)
class Wanted:
    """What some targets of a field (ids) ask for: `size` controls in all, where there are `pool` (ids) now."""

    field: int
    targets: IntArray
    pool: IntArray
    size: int

    @property
    def worth(self) -> int:
        """The fewest new controls that are worth a pass, or all that are still allowed where these are fewer."""
        return max(1, min(int(np.ceil(LEAST_GAIN * len(self.pool))), self.size - len(self.pool)))


def next_size(pool: int, served: int, needed: int, settings: Controls) -> int:
    """How many controls a field is to have next, of which `pool` serve a target by `served`; `needed` would decide.

    Enough to decide if as many of them serve, but at most GROWTH times as many and never more than the budget; `pool` where
    that is spent. It follows from numbers of positions alone, never from how unusual anyone is.
    """
    enough = round(SPARE * needed * pool / max(served, 1))
    least = round((1 + LEAST_GAIN) * pool)
    return max(pool, min(settings.most_per_field, GROWTH * pool, max(enough, least)))


def was_full(positions: Mapping[str, Any], field: int, settings: Controls) -> bool:
    """Whether a field could not even hold the controls that it was to have at first."""
    return int((first_controls(positions) & (positions["field"] == field)).sum()) < settings.per_field


def passes(positions: Mapping[str, Any], field: int) -> list[IntArray]:
    """The ids of a field's added controls, one array for each pass that it had, in order."""
    mine = (positions["kind"] == "control") & (positions["added_for"] >= 0) & (positions["field"] == field)
    return [positions["id"][mine & (positions["round"] == number)] for number in np.unique(positions["round"][mine])]


def sites(
    positions: Mapping[str, Any], wanted: Wanted, frames: Columns, within: FieldFrames, size_deg: float
) -> tuple[FloatArray, FloatArray]:
    """Nodes of the field's lattice (degrees, shape (n,)) that are free of its controls and of every target.

    `size_deg` is the side of a field: it tells around which targets the lattice was laid.
    """
    ours = first_controls(positions) & (positions["field"] == wanted.field)
    spacing = float(positions["clear_radius"][ours][0])
    then = (positions["kind"] == "target") & (positions["round"] <= positions["round"][ours].max())
    then &= positions["field"] == wanted.field
    # Those in this cell, which have not come from a neighbour.
    at_home = then & (field_of(positions["ra"], positions["dec"], size_deg) == wanted.field)
    around = at_home if at_home.any() else then
    ra, dec = clear_of_targets(positions, around, spacing, spacing, wanted.size, wanted.field, frames, within)
    taken = (positions["kind"] == "control") & (positions["field"] == wanted.field)
    occupied = unit_vectors(positions["ra"][taken], positions["dec"][taken])
    free = nearest_deg(unit_vectors(ra, dec), occupied) >= 0.999 * spacing
    return ra[free], dec[free]


def serving_sites(
    frames: Columns, within: FieldFrames, vectors: FloatArray, share: float, enough: int
) -> NDArray[np.bool_]:
    """Which of the first sites (n, 3) serve which targets by their frames, shape (n_targets, m) with m <= n.

    Looked up only until `enough` serve any target. Frames that are not there any more cannot be measured, and do not count.
    """
    there = within.rows_there(frames)[:, None]
    found = [np.zeros((within.covered.shape[1], 0), bool)]
    count = 0
    for start in range(0, len(vectors), PLACES_AT_ONCE):
        inside = covered(frames, within.rows, vectors[start : start + PLACES_AT_ONCE]) & there
        found.append(serves(within.covered, inside, share))
        count += int(found[-1].any(axis=0).sum())
        if count >= enough:
            break
    return np.concatenate(found, axis=1)


def add(
    positions: Columns, wanted: Wanted, places: tuple[FloatArray, FloatArray], round_number: int, frames: Columns,
    within: FieldFrames, bright: BrightSources, settings: Controls,
) -> Columns:  # fmt: skip
    """The position table with new controls at some of the sites `places`; as it was where too few fit to be worth a pass."""
    spacing = float(positions["clear_radius"][np.searchsorted(positions["id"], wanted.pool[0])])
    ra, dec = places
    if len(bright.ra) and len(ra):
        free = bright.blank_sky(spacing / 2).clear(unit_vectors(ra, dec))
        ra, dec = ra[free], dec[free]
    more = wanted.size - len(wanted.pool)
    serving = serving_sites(frames, within, unit_vectors(ra, dec), settings.shared_frames, more)
    chosen = np.flatnonzero(serving.any(axis=0))[:more]
    if len(chosen) < wanted.worth:
        return positions
    owner = wanted.targets[_shared_out(serving[:, chosen])]
    return add_more_controls(positions, wanted.field, round_number, ra[chosen], dec[chosen], spacing, owner)


def _shared_out(serving: NDArray[np.bool_]) -> IntArray:
    """For each place, of the targets that it serves (n_targets, n_places), that which has the fewest so far."""
    count = np.zeros(len(serving))
    chosen = np.empty(serving.shape[1], np.int64)
    for place in range(serving.shape[1]):
        chosen[place] = np.where(serving[:, place], count, np.inf).argmin()
        count[chosen[place]] += 1
    return chosen


def asking(positions: Mapping[str, Any], round_number: int) -> FloatArray:
    """Unit vectors (n, 3) of the targets that the controls of a round were added for; none for any other round."""
    ids = np.unique(positions["added_for"][positions["round"] == round_number])
    rows = np.searchsorted(positions["id"], ids[ids >= 0])
    return unit_vectors(positions["ra"][rows], positions["dec"][rows])
