"""What `completeness` and report cards work on: a finished run, its fields' controls, subsets of frames and kinds of source.

The run is only read.
"""

from __future__ import annotations

import tomllib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from hindlight import completeness, host, judge, plan, record
from hindlight import settings as settings_module
from hindlight.completeness import Bars, Cell
from hindlight.crew import Crew
from hindlight.duplicates import counts
from hindlight.errors import NothingToDoError, UsageError
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.order import Order, book
from hindlight.plugin import Column
from hindlight.positions import first_controls, serves
from hindlight.record import Request
from hindlight.settings import Settings
from hindlight.store import Columns, RunFolder
from hindlight.systems import unit_vectors
from hindlight.tables import read_ecsv
from hindlight.trials import (
    ALL,
    Subset,
)
from hindlight.verdicts import Watcher

MOST_TOGETHER = 4096  # controls of fields put together
SMALL_WORK = 20_000_000  # frames times positions judged; up to this many the work is done in this process


@dataclass(frozen=True, eq=False)
class FieldControls:
    """The controls of one field, ids ascending, and where they are (ICRS unit vectors); the names and ids of its targets.

    Target ids are ascending.
    """

    number: int
    ids: IntArray
    vectors: FloatArray
    targets: tuple[str, ...]
    target_ids: IntArray


@dataclass(frozen=True)
class Asked:
    """What the command line asks for."""

    run: Path
    settings: Path | None = None
    targets: Path | None = None
    plugins: tuple[Path, ...] = ()
    workers: int | None = None


@dataclass(frozen=True, eq=False)
class Study:
    """What every stage needs; `n_targets` are those with a frame."""

    order: Order
    plugins: host.Plugins
    crew: Crew
    watcher: Watcher
    frames: Columns
    fields: Sequence[FieldControls]
    subsets: Sequence[Subset]
    cells: Sequence[Cell]
    bars: Bars
    columns: Mapping[str, Column]
    n_targets: int

    @property
    def settings(self) -> Settings:
        """The settings in force."""
        return self.order.settings

    def each(self, stage: str, function: Callable[..., Any], jobs: Sequence[tuple[Any, ...]]) -> list[Any]:
        """The results of jobs in their order, each told the order first."""
        self.watcher.stage(stage, len(jobs))
        results: list[Any] = [None] * len(jobs)

        def done(number: int, result: Any) -> None:
            results[number] = result
            self.watcher.step()

        self.crew.run(function, [(self.order, *job) for job in jobs], done)
        return results


def opened(asked: Asked, with_new: bool = False) -> tuple[RunFolder, Order, host.Plugins]:
    """The finished run, and what it was judged with; `[completeness]` from the settings file, if one is given.

    Plugins that the run was judged without are left out; `with_new` keeps those of the files given.
    """
    run = RunFolder(asked.run)
    run.require()
    if not run.has("candidates.ecsv"):
        raise UsageError(f"{run.path}: this run was stopped before it was judged; its command continues it")
    request = Request((), Path(), run.path, None, asked.plugins)
    chosen = record.settings_in_force(run, request)
    if asked.settings is not None:
        chosen = replace(chosen, completeness=settings_module.read_settings(asked.settings).completeness)
    recorded = (
        tomllib.loads(run.file("settings.toml").read_text(encoding="utf-8")).get("versions", {}).get("plugins", {})
    )
    known = host.load(host.spec_from(Settings(), asked.plugins)).loaded
    missing = sorted(set(recorded) - {entry.plugin.name for entry in known})
    if missing:
        raise UsageError(f"{run.path}: the run was judged with plugin {missing[0]!r}; give its file with --plugin")
    left_out = {e.plugin.name for e in known if e.plugin.name not in recorded and not (with_new and e.origin == "file")}
    spec = host.spec_from(chosen, asked.plugins, sorted(left_out))
    plugins = host.load(spec)
    spec = replace(spec, expected=plugins.fingerprint())
    return run, Order(str(run.path.resolve()), chosen, spec, run.version()), plugins


def is_small(run: RunFolder, settings: Settings) -> bool:
    """Whether the work is too small to be worth other processes."""
    n = len(completeness.grid(settings.completeness)) * settings.completeness.per_cell
    return n * len(run.frames()["id"]) * (100 if settings.completeness.period_search else 1) < SMALL_WORK


def study_of(
    run: RunFolder, order: Order, plugins: host.Plugins, crew: Crew, watcher: Watcher,
    chosen: Callable[[Columns], Sequence[Subset]], every_control: bool = False,
) -> Study:  # fmt: skip
    """Fields, subsets and cells; raises `NothingToDoError` where no field has controls.

    With `every_control` those of second passes are among a field's controls, and fields in the same frames are one.
    """
    tables = book(order.run, order.version)
    fields = [found for found in fields_of(tables.positions, every_control) if len(found.ids) > 1]
    if every_control:
        fields = together(fields, tables.frames, order.settings.controls.shared_frames)
    if not fields:
        raise NothingToDoError(f"run {run.path}: {_why_no_fields(tables.positions)}")
    candidates = read_ecsv(run.file("candidates.ecsv"))
    level, dependent = order.settings.ranking.level, order.settings.ranking.any_dependence
    p_values = (np.asarray(candidates[name], float) for name in ("p_empirical", "p_value"))
    bars = Bars(*(completeness.bar(p, level, dependent) for p in p_values))
    asked = plugins.period_searches if order.settings.completeness.period_search else ()
    columns = judge.full_columns([*plugins.statistics, *asked])
    cells = completeness.grid(order.settings.completeness)
    n_targets = len({str(name) for name in read_ecsv(run.file("channels.ecsv"))["name"]})
    return Study(
        order, plugins, crew, watcher, tables.frames, fields, chosen(tables.frames), cells, bars, columns, n_targets
    )


def fields_of(positions: Columns, every_control: bool = False) -> list[FieldControls]:
    """The first controls (or all) of every field with targets that are judged at their stated place."""
    controls = positions["kind"] == "control" if every_control else first_controls(positions)
    is_target = (positions["kind"] == "target") & (positions["search"] < 0)
    found = []
    for number in sorted(set(positions["field"][is_target].tolist())):
        here = controls & (positions["field"] == number)
        order = np.argsort(positions["id"][here])
        vectors = unit_vectors(positions["ra"][here], positions["dec"][here])[order]
        mine = np.flatnonzero(is_target & (positions["field"] == number))
        mine = mine[np.argsort(positions["id"][mine])]
        names = tuple(positions["name"][mine].tolist())
        found.append(FieldControls(int(number), positions["id"][here][order], vectors, names, positions["id"][mine]))
    return found


def together(fields: Sequence[FieldControls], frames: Columns, share: float) -> list[FieldControls]:
    """The fields, those as one whose middles share the frames, up to MOST_TOGETHER controls.

    In the same frames controls of one field are as good a null for another; `ranking.matched` still asks each of them for
    as many measurements and a like noise.
    """
    if not fields:
        return []
    middles = np.stack([found.vectors.mean(axis=0) for found in fields])
    covered = plan.field_frames(frames, middles / np.linalg.norm(middles, axis=1, keepdims=True)).covered
    alike = serves(covered, covered, share)
    groups: list[list[int]] = []
    for number, found in enumerate(fields):
        for group in groups:
            first, n = group[0], sum(len(fields[k].ids) for k in group)
            if alike[number, first] and alike[first, number] and n + len(found.ids) <= MOST_TOGETHER:
                group.append(number)
                break
        else:
            groups.append([number])
    return [_merged([fields[k] for k in group]) for group in groups]


def _merged(fields: Sequence[FieldControls]) -> FieldControls:
    """Several fields as one, under the number of the first."""
    ids, vectors, targets = (
        np.concatenate([getattr(f, name) for f in fields]) for name in ("ids", "vectors", "target_ids")
    )
    names = [name for f in fields for name in f.targets]
    order, of_targets = np.argsort(ids), np.argsort(targets)
    named = tuple(names[k] for k in of_targets)
    return FieldControls(fields[0].number, ids[order], vectors[order], named, targets[of_targets])


def _why_no_fields(positions: Columns) -> str:
    """Why nothing can be said of completeness, and what would mend it."""
    targets = positions["kind"] == "target"
    if targets.any() and (positions["search"][targets] >= 0).all():
        return (
            f"all {targets.sum()} targets were searched within their position errors, and completeness is that of targets "
            "at their stated places; [search] sigmas = 0 measures targets there, in a run of its own"
        )
    n = int((positions["kind"] == "control").sum())
    return (
        f"no field has more than one control ({n} in all), so nothing can be said of completeness; [controls] per_field "
        "sets how many, in a run of its own"
    )


def all_frames(frames: Columns) -> Subset:
    """Every frame that counts."""
    return Subset(ALL, "", "", frames["id"][counts(frames)])


def subsets_of(frames: Columns) -> list[Subset]:
    """All frames, those of each instrument, and those of each instrument and decade, in order of names."""
    used = counts(frames)
    decade = np.array([f"{text[:3]}0s" if text else "" for text in frames["middle_utc"]], object)
    found = [all_frames(frames)]
    for name in sorted(set(frames["instrument"][used].tolist())):
        mine = used & (frames["instrument"] == name)
        found.append(Subset(name or "(no name)", name, "", frames["id"][mine]))
        found += [
            Subset(f"{name or '(no name)'} {ten}", name, ten, frames["id"][mine & (decade == ten)])
            for ten in sorted(set(decade[mine].tolist()) - {""})
        ]
    return found
