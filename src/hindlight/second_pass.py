"""More controls for targets that lie beyond all they had, where that many cannot decide: measured, judged, ranked again.

A pass is taken again until nobody asks, no more controls fit, or the budget is spent. A target is ranked with the
controls of a pass only if it lay beyond all of those before: so its p-value holds as one from a fixed number does, see
`DEVELOPERS.md`.
"""

from __future__ import annotations

import logging
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from hindlight import conclude, judge, measuring, more_controls, plan, store, tasks
from hindlight.conclude import Field
from hindlight.lifted import COPY
from hindlight.lightcurve import IntArray
from hindlight.schema import POSITIONS
from hindlight.store import Columns
from hindlight.systems import unit_vectors
from hindlight.verdicts import Place, Session, all_columns, field_of, judged_in, places_of

FULL_BEFORE = "not even the first all fit"
FULL = "no more fit into their frames clear of sources and of each other"
GONE = "too many of their frames are not there any more to measure others in"
SPENT = "[controls] most_per_field is reached"
DECIDED = "these decide"
WITHIN = "some of these are as far out"
NAMED = 3  # targets that a sentence names

log = logging.getLogger("hindlight")


@dataclass(frozen=True, eq=False)
class Carried:
    """Where the second passes of a run end: its positions and ranked fields, and sentences for the last lines."""

    session: Session
    positions: Columns
    fields: list[Field]
    said: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class Ask:
    """Targets of one field, by their places in it and ids, that lie beyond all its controls, which cannot decide."""

    found: Field
    index: tuple[int, ...]
    wanted: more_controls.Wanted

    @property
    def targets(self) -> list[int]:
        """Their ids."""
        return [int(target) for target in self.wanted.targets]


def carried_out(
    session: Session, frames: Columns, positions: Columns, fields: Sequence[Field], size_deg: float
) -> Carried:
    """The ranked fields of a run once every target that asks for more controls has them; `size_deg` is a field's side.

    Targets that had more are in fields apart. Controls that an earlier call added are used before any are planned.
    """
    fields, stopped = list(fields), dict[int, str]()
    before: dict[int, int] = {}
    while asks := _asking(session, positions, fields, stopped):
        session, positions, more = _provided(session, frames, positions, asks, size_deg, stopped)
        going = [ask for ask in asks if ask.targets[0] not in stopped]
        for ask in going:
            sizes = ask.found.ranked.n_controls
            before |= {t: before.get(t, int(sizes[i])) for t, i in zip(ask.targets, ask.index, strict=True)}
        fields = _deeper(session, frames, positions, fields, going, more)
    places = places_of(fields, positions)
    short, _ = conclude.undecided([place.rank for place in places], session.order.settings)
    return Carried(session, positions, fields, _said(places, short, before, stopped))


def _asking(session: Session, positions: Columns, fields: Sequence[Field], stopped: Mapping[int, str]) -> list[Ask]:
    """Who asks for more controls: targets judged where they stand, among blank sky as it is."""
    settings = session.order.settings
    if settings.controls.most_per_field <= settings.controls.per_field:
        return []
    places = places_of(fields, positions)
    short, needed = conclude.undecided([place.rank for place in places], settings)
    asks = []
    for found in fields:
        if found.number < 0 and not found.n_passes:  # searched, or bright
            continue
        mine = [place for place in places if place.found is found]
        index = tuple(place.index for place in mine if short[place.at] and place.target not in stopped)
        if index:
            targets = found.targets[list(index)]
            served = int(found.ranked.n_controls[list(index)].min())
            size = more_controls.next_size(len(found.controls), served, needed, settings.controls)
            cell = int(positions["field"][np.searchsorted(positions["id"], targets[0])])
            asks.append(Ask(found, index, more_controls.Wanted(cell, targets, found.controls, size)))
    return asks


def _provided(
    session: Session, frames: Columns, positions: Columns, asks: Sequence[Ask], size_deg: float, stopped: dict[int, str]
) -> tuple[Session, Columns, dict[int, IntArray]]:
    """The controls (ids) that each asking field has next, by its number: planned earlier, or planned and measured now.

    Targets that can have no more are noted in `stopped`.
    """
    chosen = session.order.settings.controls
    found: dict[int, IntArray] = {}
    new = []
    for ask in asks:
        had = more_controls.passes(positions, ask.wanted.field)[ask.found.n_passes :]
        if had and len(ask.found.controls) + len(had[0]) <= chosen.most_per_field:
            found[ask.found.number] = had[0]
        elif more_controls.was_full(positions, ask.wanted.field, chosen):
            _stop(ask, FULL_BEFORE, stopped)
        elif had or ask.wanted.size <= len(ask.wanted.pool):
            _stop(ask, SPENT, stopped)
        else:
            new.append(ask)
    planned = _planned(session, frames, positions, new, size_deg)
    if len(planned["id"]) > len(positions["id"]):
        positions = planned
        session.run.write_columns("positions.parquet", POSITIONS, positions)
        session = replace(session, order=replace(session.order, version=session.run.version()))
        measuring.measure(session, store.pieces(frames, positions), "measuring more controls")
    for ask in new:
        had = more_controls.passes(positions, ask.wanted.field)[ask.found.n_passes :]
        if had:
            found[ask.found.number] = had[0]
        else:
            _stop(ask, _why_none(frames, positions, ask, chosen.shared_frames), stopped)
    return session, positions, found


def _why_none(frames: Columns, positions: Columns, ask: Ask, share: float) -> str:
    """Why no control could be added: a field is full, or what is left of its frames is less than they are to share."""
    rows = np.searchsorted(positions["id"], ask.wanted.targets)
    here = plan.field_frames(frames, unit_vectors(positions["ra"][rows], positions["dec"][rows]))
    left = here.covered[here.rows_there(frames)].sum(axis=0)
    return FULL if (left >= share * here.covered.sum(axis=0)).any() else GONE


def _stop(ask: Ask, why: str, stopped: dict[int, str]) -> None:
    stopped |= dict.fromkeys(ask.targets, why)


def _planned(session: Session, frames: Columns, positions: Columns, asks: Sequence[Ask], size_deg: float) -> Columns:
    """The position table with new controls for those fields that have room for them, all in one round."""
    chosen, round_number = session.order.settings.controls, plan.next_round(positions)
    wanted = _together(asks)
    within: dict[int, plan.FieldFrames] = {}
    sites = {}
    for number, want in wanted.items():
        rows = np.searchsorted(positions["id"], want.targets)
        here = plan.field_frames(frames, unit_vectors(positions["ra"][rows], positions["dec"][rows]))
        places = more_controls.sites(positions, want, frames, here, size_deg)
        vectors = unit_vectors(*places)
        room = more_controls.serving_sites(frames, here, vectors, chosen.shared_frames, want.worth)
        if room.any(axis=0).sum() >= want.worth:  # before any pixel is read
            within[number], sites[number] = here, places
    if not within:
        return positions
    bright = measuring.bright_sources(session, frames, within)
    for number, here in within.items():
        positions = more_controls.add(
            positions, wanted[number], sites[number], round_number, frames, here, bright[number], chosen
        )
    return positions


def _together(asks: Sequence[Ask]) -> dict[int, more_controls.Wanted]:
    """What is wanted for each cell: those of one cell who have come apart share what is added."""
    wanted: dict[int, more_controls.Wanted] = {}
    for ask in asks:
        other = wanted.setdefault(ask.wanted.field, ask.wanted)
        if other is not ask.wanted:
            targets = np.union1d(other.targets, ask.wanted.targets)
            wanted[other.field] = replace(other, targets=targets, size=max(other.size, ask.wanted.size))
    return wanted


def _deeper(
    session: Session, frames: Columns, positions: Columns, fields: Sequence[Field], asks: Sequence[Ask],
    more: Mapping[int, IntArray],
) -> list[Field]:  # fmt: skip
    """The fields with those who asked in fields apart, ranked among the controls they had and those they have more."""
    by_number = {ask.found.number: ask for ask in asks}
    rest, made = [], []
    for found in fields:
        ask = by_number.get(found.number)
        if ask is None:
            rest.append(found)
            continue
        rest.append(conclude.without(found, ask.index))
        _rank(session, found, rest[-1])
        made.append(_apart(session, frames, positions, ask, more[found.number]))
    fresh = judged_in(session, made, _more_by(made, asks, more), tasks.judge_positions, "judging more controls")
    for deep, ask in zip(made, asks, strict=True):
        deep.judgement = _merged(session, ask.found, deep, fresh[deep.number], more[ask.found.number])
        _rank(session, ask.found, deep)
    _search_periods(session, made, asks)
    return [*rest, *made]


def _more_by(made: Sequence[Field], asks: Sequence[Ask], more: Mapping[int, IntArray]) -> dict[int, IntArray]:
    """The controls added to each field apart, by its own number."""
    return {deep.number: more[ask.found.number] for deep, ask in zip(made, asks, strict=True)}


def _apart(session: Session, frames: Columns, positions: Columns, ask: Ask, more: IntArray) -> Field:
    """Those who ask as a field of their own, not judged yet."""
    n_passes = ask.found.n_passes + 1
    number = -1 - (1 + n_passes) * COPY - ask.targets[0]  # below those of bright targets, which are one COPY down
    controls = np.concatenate([ask.found.controls, more])
    deep = field_of(frames, positions, number, ask.wanted.targets, controls, session.order.settings)
    return replace(deep, n_passes=n_passes)


def _merged(session: Session, found: Field, deep: Field, fresh: judge.Judgement, more: IntArray) -> judge.Judgement:
    """What statistics say of a field apart: of most of its positions it is known, `fresh` is of its new controls."""
    known = np.setdiff1d(deep.ids, more)
    old = _split(session, judge.taken(found.judgement, found.rows(known)), periods=False)
    both = judge.joined((old, fresh), (len(known), len(more)), all_columns(session))
    sorted_ = judge.taken(both, np.argsort(np.concatenate([known, more])))
    return replace(sorted_, faults=both.faults, calls=both.calls)


def _split(session: Session, whole: judge.Judgement, periods: bool) -> judge.Judgement:
    """What period searches found, or all but that."""
    theirs = judge.full_columns(session.plugins.period_searches).keys() - judge.full_columns(()).keys()
    return judge.Judgement(whole.n, {key: v for key, v in whole.values.items() if (key[1] in theirs) == periods})


def _rank(session: Session, found: Field, made: Field) -> None:
    """Rank what was made of a field; what counts as seen is told by the first controls, for all targets of a field alike."""
    conclude.rank(made, session.plugins, session.order.settings)
    made.thresholds = found.thresholds


def _search_periods(session: Session, made: Sequence[Field], asks: Sequence[Ask]) -> None:
    """Search the periods of all that pass the gate of a field apart and have not been searched, and rank again."""
    if not session.plugins.period_searches or not made:
        return
    columns = all_columns(session)
    gates = [conclude.gated(deep, session.order.settings) for deep in made]
    new = {
        deep.number: np.setdiff1d(gate, ask.found.searched) for deep, gate, ask in zip(made, gates, asks, strict=True)
    }
    searched = judged_in(session, made, new, tasks.search_positions, "searching periods of more controls")
    for deep, gate, ask in zip(made, gates, asks, strict=True):
        old = np.intersect1d(gate, ask.found.searched)
        known = _split(session, judge.taken(ask.found.judgement, ask.found.rows(old)), periods=True)
        fresh = new[deep.number]
        both = judge.joined((known, searched[deep.number]), (len(old), len(fresh)), columns)
        judge.spread(deep.judgement, both, deep.rows(np.concatenate([old, fresh])), columns)
        deep.searched = gate
        _rank(session, ask.found, deep)


def _said(
    places: Sequence[Place], short: NDArray[np.bool_], before: Mapping[int, int], stopped: Mapping[int, str]
) -> tuple[str, ...]:
    """What became of those who asked: a sentence for each way it ended, and a line in the log for each target."""
    ends: dict[str, list[tuple[str, int, int]]] = {}
    for place in places:
        if place.target not in before and stopped.get(place.target, FULL_BEFORE) == FULL_BEFORE:
            continue  # that the first did not all fit is said anyway
        now = int(place.found.ranked.n_controls[place.index])
        end = WITHIN if place.rank.exceeded_by else DECIDED if not short[place.at] else stopped[place.target]
        ends.setdefault(end, []).append((place.name, before.get(place.target, now), now))
        log.info("second pass: %s: %d controls, %d in the end: %s", *ends[end][-1], end)
    return tuple(_sentence(end, ends[end]) for end in (DECIDED, WITHIN, FULL, GONE, SPENT) if end in ends)


def _sentence(end: str, who: Sequence[tuple[str, int, int]]) -> str:
    names = ", ".join(name for name, _, _ in who[:NAMED])
    others = f" and {len(who) - NAMED} others" if len(who) > NAMED else ""
    first, last = _span([n for _, n, _ in who]), _span([n for _, _, n in who])
    return f"controls after a second pass for {names}{others}: {last}, where {first} could not decide; {end}"


def _span(numbers: Sequence[int]) -> str:
    low, high = min(numbers), max(numbers)
    return f"{low} to {high}" if high > low else str(low)
