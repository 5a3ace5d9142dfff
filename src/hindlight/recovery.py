"""`hindlight completeness` and `plugins --power`: made-up sources through the unchanged judging of a run, and the tables.

The run is only read; what is made goes beside its result tables. The pieces of work are in `trials`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import astropy.table
import numpy as np
from numpy.typing import NDArray

from hindlight import brighter, completeness, judge, plan, planted, ranking, record, store
from hindlight.chances import Made
from hindlight.completeness import Found, Injection, Null
from hindlight.crew import assembled
from hindlight.duplicates import counts
from hindlight.errors import NothingToDoError
from hindlight.hiding import Places, Used, hidden, places
from hindlight.injection import PULSES
from hindlight.lifted import copies
from hindlight.lightcurve import IntArray
from hindlight.order import book
from hindlight.positions import read_targets, serves
from hindlight.recovered import UPPER_BOUND, completeness_table, metadata, proof_remarks, remarks, target_tables
from hindlight.study import Asked, FieldControls, Study, is_small, opened, study_of, subsets_of
from hindlight.tables import write_table
from hindlight.tasks import residuals
from hindlight.trials import (
    ALL,
    EXTRA,
    Outcomes,
    Subset,
    count_frames,
    judge_controls,
    judge_copies,
    judge_injected,
    plant_in_frame,
    search_controls,
)
from hindlight.verdicts import Watcher

INJECTIONS_AT_ONCE = 128
Mask = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Report:
    """What is written and said: the four tables, and sentences for the last lines."""

    table: astropy.table.Table
    targets: astropy.table.Table
    limits: astropy.table.Table
    channels: astropy.table.Table
    remarks: tuple[str, ...]


def recover(asked: Asked, watcher: Watcher) -> Report:
    """Measure what a finished run could have shown, and write its tables of completeness.

    Raises `UsageError` where there is no finished run, `NothingToDoError` where it has no controls.
    """
    run, order, plugins = opened(asked)
    ephemerides = read_targets(asked.targets) if asked.targets is not None else None
    with run.locked(), record.logged(run), assembled(asked.workers, None, is_small(run, order.settings)) as crew:
        study = study_of(run, order, plugins, crew, watcher, subsets_of)
        nulls, units = nulls_of(study)
        used = counted_of(study)
        at = places_of(study, used, nulls)
        wanted = {name: hidden(study.cells, one, study.settings.completeness) for name, one in at.items()}
        outcomes = outcomes_of(study, wanted, nulls, units, with_plugins=False)
        proofs = _proofs(study)
        meta = {**metadata(study, units), "run_state": record.state(run, order.settings, plugins)}
        table = completeness_table(study, at, wanted, outcomes, meta)
        cell_of = {name: np.array([one.cell for one in mine], np.int64) for name, mine in wanted.items()}
        made = {name: Made.of(cell_of[name], outcome) for name, outcome in outcomes.items()}
        told = target_tables(study, run, made, _shown(study, cell_of[ALL], outcomes[ALL]), used, ephemerides, meta)
    said = (*remarks(study, nulls, at, outcomes[ALL].found, told.targets), *proof_remarks(proofs), UPPER_BOUND)
    written = (("channels", told.channels), ("limits", told.limits), ("targets", told.targets))
    for name, one in (*((f"completeness_{word}", one) for word, one in written), ("completeness", table)):
        for ending in (".fits", ".vot", ".ecsv"):
            write_table(run.file(f"{name}{ending}"), one)
    store.write_text(run, "completeness.txt", "\n".join(said) + "\n")
    return Report(table, told.targets, told.limits, told.channels, said)


def nulls_of(study: Study) -> tuple[dict[int, dict[str, Null]], dict[str, float]]:
    """Each field's null in each subset, and the median frame error of each channel over all controls."""
    size = study.settings.ranking.gather_curves
    groups = [(f, f.ids[start : start + size]) for f in study.fields for start in range(0, len(f.ids), size)]
    results = study.each("judging controls", judge_controls, [(ids, study.subsets) for _, ids in groups])
    nulls: dict[int, dict[str, Null]] = {}
    for found in study.fields:
        mine = [(result, len(ids)) for (owner, ids), result in zip(groups, results, strict=True) if owner is found]
        nulls[found.number] = {
            subset.name: completeness.null_of(
                found.ids,
                _in_frames(study, found, subset),
                judge.joined([r.judgements[subset.name] for r, _ in mine], [n for _, n in mine], study.columns),
                study.settings,
            )
            for subset in study.subsets
        }
    if study.settings.completeness.period_search and study.plugins.period_searches:
        _search_nulls(study, nulls)
    labels = sorted({label for result in results for label in result.errors})
    errors = {label: np.concatenate([r.errors[label] for r in results if label in r.errors]) for label in labels}
    units = {label: float(np.nanmedian(v)) if np.isfinite(v).any() else np.nan for label, v in errors.items()}
    return _with_brighter(study, nulls, units), units


def _with_brighter(
    study: Study, nulls: Mapping[int, Mapping[str, Null]], units: Mapping[str, float]
) -> dict[int, dict[str, Null]]:
    """The nulls with those of sources that are bright in single frames."""
    left = residuals(study.order)
    ladder = brighter.rungs(study.cells, units, left, study.settings)
    n_targets = study.n_targets + 1
    jobs, places = [], []
    for found in study.fields:
        for rung in ladder:
            each = brighter.copied_times(rung, len(found.ids), n_targets, study.settings)
            ids = copies(found.ids, each)
            places.append((found.number, rung))
            jobs.append((ids, study.subsets, rung.lift))
    made = study.each("judging controls as bright as sources", judge_copies, jobs) if jobs else []
    on: dict[tuple[int, str], dict[int, Null]] = {}
    for (number, rung), judged in zip(places, made, strict=True):
        for name, judgement in judged.items():
            on.setdefault((number, name), {})[rung.step] = brighter.null_on(rung, nulls[number][name], judgement)
    told = {label: units[label] for label in left if label in units}
    scatter = {label: float(np.median(left[label].extra)) for label in told}
    return {
        number: {
            name: replace(null, brighter=on.get((number, name), {}), units=told, scatter=scatter)
            for name, null in of_field.items()
        }
        for number, of_field in nulls.items()
    }


def _in_frames(study: Study, found: FieldControls, subset: Subset) -> Mask:
    """Which controls share enough frames of a subset with which, shape (n, n)."""
    mine = np.isin(study.frames["id"], subset.frames)
    inside = plan.field_frames({name: values[mine] for name, values in study.frames.items()}, found.vectors)
    return serves(inside.covered, inside.covered, study.settings.controls.shared_frames)


def _search_nulls(study: Study, nulls: Mapping[int, Mapping[str, Null]]) -> None:
    """Search the periods of controls that pass the gate, as in a run."""
    jobs, places = [], []
    for found in study.fields:
        for subset in study.subsets:
            null = nulls[found.number][subset.name]
            rows = np.arange(len(found.ids))
            ranked = ranking.rank_field(null.judgement, study.columns, rows[:0], rows, null.serving[:0])
            passes = rows[ranked.control_p <= study.settings.ranking.gate]
            if len(passes):
                jobs.append((found.ids[passes], subset))
                places.append((null, passes))
    for (null, passes), result in zip(
        places, study.each("searching periods of controls", search_controls, jobs), strict=True
    ):
        judge.spread(null.judgement, result, passes, study.columns)


def counted_of(study: Study) -> dict[str, Used]:
    """The usable frames of every target, by subset."""
    size = study.settings.ranking.gather_curves
    groups = [
        (f.targets[k : k + size], f.target_ids[k : k + size])
        for f in study.fields
        for k in range(0, len(f.targets), size)
    ]
    counted = study.each("counting frames of targets", count_frames, [(ids, study.subsets) for _, ids in groups])
    return {
        subset.name: {
            name: {label: int(n[row]) for label, n in result[subset.name].items()}
            for (names, _), result in zip(groups, counted, strict=True)
            for row, name in enumerate(names)
        }
        for subset in study.subsets
    }


def places_of(study: Study, used: Mapping[str, Used], nulls: Mapping[int, Mapping[str, Null]]) -> dict[str, Places]:
    """Where sources are hidden in each subset.

    Raises `NothingToDoError` where no target has a control that is measured as well as it is.
    """
    share = study.settings.controls.shared_frames
    at = {
        name: places(study.fields, mine, {number: of_field[name] for number, of_field in nulls.items()}, share)
        for name, mine in used.items()
    }
    if not len(at[ALL].ids):
        raise NothingToDoError("no target has a control that is measured in as many frames: nothing can be said")
    return at


def outcomes_of(
    study: Study, wanted: Mapping[str, Sequence[Injection]], nulls: Mapping[int, Mapping[str, Null]],
    units: Mapping[str, float], with_plugins: bool,
) -> dict[str, Outcomes]:  # fmt: skip
    """What becomes of every source, by subset; subsets without sources are left out."""
    at: list[Mapping[str, IntArray]] = []
    jobs = []
    for found in study.fields:
        for part in _pieces(wanted, found.ids):
            here = {name: [wanted[name][i] for i in numbers] for name, numbers in part.items()}
            at.append(part)
            jobs.append((here, study.cells, units, study.subsets, nulls[found.number], study.bars, with_plugins))
    results = study.each("judging made-up sources", judge_injected, jobs)
    outcomes = {}
    for name in wanted:
        mine = [(part[name], result[name]) for part, result in zip(at, results, strict=True) if name in result]
        if mine:
            back = np.argsort(np.concatenate([numbers for numbers, _ in mine]))
            outcomes[name] = _joined([outcome for _, outcome in mine], back)
    return outcomes


def _pieces(wanted: Mapping[str, Sequence[Injection]], ids: IntArray) -> list[dict[str, IntArray]]:
    """The sources at these controls in pieces of work: numbers of sources by subset.

    Those at one control are together and next to each other, since they share its null.
    """
    hosts = {name: np.array([one.host for one in mine], np.int64) for name, mine in wanted.items()}
    n_at = sum((np.bincount(np.searchsorted(ids, h[np.isin(h, ids)]), minlength=len(ids)) for h in hosts.values()), 0)
    piece = (np.cumsum(n_at) - n_at) // (INJECTIONS_AT_ONCE * max(1, len(hosts)))
    found = []
    for number in np.unique(piece).tolist():
        part = {}
        for name, h in hosts.items():
            mine = np.flatnonzero(np.isin(h, ids[piece == number]))
            if len(mine):
                part[name] = mine[np.argsort(h[mine], kind="stable")]
        if part:
            found.append(part)
    return found


def _shown(study: Study, cell: IntArray, outcome: Outcomes) -> tuple[int, int]:
    """How many frames show made-up pulses that surely should, and how many should; `cell` is that of each source."""
    pulses = np.array([one.kind == PULSES for one in study.cells])[cell]
    seen, all_of_them = (int(outcome.extra[name][pulses].sum()) for name in ("bright_seen", "bright_frames"))
    return seen, all_of_them


def _joined(parts: Sequence[Outcomes], back: IntArray) -> Outcomes:
    """Outcomes of pieces of work as one, in the order of the sources."""
    names = ("recovered", "extrapolated", "seen", "enough", "lowest_p", "own_p")
    found = Found(*(np.concatenate([getattr(part.found, name) for part in parts])[back] for name in names))
    return Outcomes(found, {name: np.concatenate([part.extra[name] for part in parts])[back] for name in EXTRA})


def _proofs(study: Study) -> list[planted.Proof | None]:
    """Sources added to pixels, in frames evenly spread over time in every unsigned channel."""
    tables = book(study.order.run, study.order.version)
    usable = counts(study.frames) & (study.frames["state"] == "current")
    labels = [label for label, channel in tables.channels.items() if not channel.signed]
    each = int(np.ceil(study.settings.completeness.pixels / max(1, len(labels))))
    chosen: list[int] = []
    for label in labels:
        mine = study.frames["id"][usable & (study.frames["channel"] == label)]
        chosen += mine[np.unique(np.linspace(0, len(mine) - 1, min(each, len(mine))).astype(int))].tolist()
    controls = np.sort(np.concatenate([found.ids for found in study.fields]))
    return study.each("adding sources to pixels", plant_in_frame, [(frame, controls) for frame in chosen])
