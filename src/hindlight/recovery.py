"""`hindlight completeness` and `plugins --power`: made-up sources through the unchanged judging of a run, and the tables.

The run is only read; what is made goes beside its result tables. The pieces of work are in `trials`.
"""

from __future__ import annotations

import time
import tomllib
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial
from itertools import chain
from pathlib import Path
from typing import Any

import astropy.table
import numpy as np
from numpy.typing import NDArray

from hindlight import brighter, completeness, host, injection, judge, plan, planted, ranking, record, report_card, store
from hindlight import settings as settings_module
from hindlight.completeness import Bars, Cell, Found, Injection, Looks, Null
from hindlight.crew import Crew, assembled
from hindlight.duplicates import counts
from hindlight.errors import NothingToDoError, UsageError
from hindlight.fence import call
from hindlight.lifted import copies
from hindlight.lightcurve import FloatArray, IntArray, LightCurve
from hindlight.order import Order, book
from hindlight.plugin import Column, PeriodSearch, Statistic
from hindlight.positions import first_controls, read_targets, serves
from hindlight.record import Request
from hindlight.schema import COMPLETENESS, COMPLETENESS_LIMITS, COMPLETENESS_TARGETS
from hindlight.settings import Settings
from hindlight.store import Columns, RunFolder
from hindlight.systems import unit_vectors
from hindlight.tables import astropy_table, read_ecsv, rows_to_columns, write_table
from hindlight.tasks import position_blocks, residuals
from hindlight.trials import (
    ALL,
    EXTRA,
    Outcomes,
    Subset,
    curves_of,
    judge_controls,
    judge_copies,
    judge_injected,
    looks_of,
    plant_in_frame,
    search_controls,
)
from hindlight.verdicts import Watcher
from hindlight.wording import from_to, how_many

INJECTIONS_AT_ONCE = 128
SMALL_WORK = 20_000_000  # frames times positions judged; up to this many the work is done in this process
POWER_RATE = 1e-3
MOST_BEYOND_ROUNDING, MOST_NONLINEAR = 0.02, 1e-6  # sigma: what pixels may differ by from light curves
FEWEST_FOR_TAIL = 40  # controls: fewer show no tail, see `calibrate.tail_bound`
SEARCHED = (
    "target that was searched within its position error is",
    "targets that were searched within their position errors are",
)
UPPER_BOUND = (
    "sources are added to images as they are: what deconvolution does to a source that flickers is not in it, so for "
    "synthesis images completeness is an upper bound"
)

Mask = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class FieldControls:
    """The controls of one field, ids ascending, and where they are (ICRS unit vectors); the names of its targets."""

    number: int
    ids: IntArray
    vectors: FloatArray
    targets: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class Report:
    """What is written and said: the three tables, sentences for the last lines, and the raw outcomes in all frames."""

    table: astropy.table.Table
    targets: astropy.table.Table
    limits: astropy.table.Table
    remarks: tuple[str, ...]


@dataclass(frozen=True)
class Power:
    """A statistic's report card.

    `power` maps kinds of source to the share of them that the statistic alone finds at the rate; `only_here` counts those
    that no other finds; `cost_s` is what a thousand light curves take.
    """

    plugin: str
    power: Mapping[str, float]
    only_here: int
    cost_s: float


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
    """What every stage needs; `used_by_target` says how many frames of each channel each target has."""

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
    used_by_target: Mapping[str, Mapping[str, int]]

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


def recover(asked: Asked, watcher: Watcher) -> Report:
    """Measure what a finished run could have shown, and write its tables of completeness.

    Raises `UsageError` where there is no finished run, `NothingToDoError` where it has no controls.
    """
    run, order, plugins = _opened(asked)
    ephemerides = read_targets(asked.targets) if asked.targets is not None else None
    with run.locked(), assembled(asked.workers, None, _is_small(run, order.settings)) as crew:
        study = _study(run, order, plugins, crew, watcher, _subsets)
        nulls, units = _nulls(study)
        wanted = _wanted(study, nulls)
        outcomes = _outcomes(study, wanted, nulls, units, with_plugins=False)
        proofs = _proofs(study)
        meta = {**_meta(study, units), "run_state": record.state(run, order.settings, plugins)}
        table = _table(study, wanted, outcomes, meta)
        targets, limits = _target_tables(study, run, table, ephemerides, meta)
    remarks = (*_remarks(study, nulls, outcomes[ALL].found, targets), *_proof_remarks(proofs), UPPER_BOUND)
    for name, made in (("completeness_limits", limits), ("completeness_targets", targets), ("completeness", table)):
        for ending in (".fits", ".vot", ".ecsv"):
            write_table(run.file(f"{name}{ending}"), made)
    store.write_text(run, "completeness.txt", "\n".join(remarks) + "\n")
    return Report(table, targets, limits, remarks)


def report_cards(asked: Asked, watcher: Watcher) -> tuple[list[Power], tuple[str, ...]]:
    """The power of each statistic alone on made-up sources in all frames of a run, and what is to be said of it."""
    run, order, plugins = _opened(asked, with_new=True)
    with run.locked(), assembled(asked.workers, None, _is_small(run, order.settings)) as crew:
        study = _study(run, order, plugins, crew, watcher, lambda frames: [_all_frames(frames)])
        nulls, units = _nulls(study)
        wanted = _wanted(study, nulls)
        outcome = _outcomes(study, wanted, nulls, units, with_plugins=True)[ALL]
        asks: list[Statistic | PeriodSearch] = [
            *plugins.statistics,
            *(plugins.period_searches if order.settings.completeness.period_search else ()),
        ]
        rate = np.maximum(POWER_RATE, outcome.found.lowest_p)
        hit = outcome.found.own_p <= rate[:, None] * (1 + 1e-9)
        costs = _costs(study, asks)
    kinds = np.array([study.cells[one.cell].kind for one in wanted])
    cards = []
    for number, plugin in enumerate(asks):
        only = hit[:, number] & (hit.sum(axis=1) == 1) & (kinds != completeness.NOTHING)
        power = {kind: float(hit[kinds == kind, number].mean()) for kind in dict.fromkeys(kinds.tolist())}
        cards.append(Power(plugin.name, power, int(only.sum()), costs[number]))
    powers = {card.plugin: card.power for card in cards}
    empty = report_card.blank(asks, [nulls[found.number][ALL].judgement for found in study.fields])
    said = [_rate_said(outcome.found.lowest_p), report_card.columns_said(Counter(kinds.tolist()))]
    said += report_card.silence_said(asks, powers, empty)
    if not order.settings.completeness.period_search:
        said.append("period searches are left out: [completeness] period_search = true in the run's settings asks them")
    return cards, tuple(said)


def _rate_said(lowest_p: FloatArray) -> str:
    """At which rate of false alarms power is told, by the smallest p-value that each source could have got."""
    low, high = (float(np.maximum(POWER_RATE, p)) for p in (lowest_p.min(), lowest_p.max()))
    if high <= POWER_RATE * (1 + 1e-9):
        return f"power at a false-alarm rate of {POWER_RATE:g}"
    rates = from_to(low, high, ".3g")
    fewest = round(1.0 / float(lowest_p.max()) - 1.0)
    return (
        f"power at a false-alarm rate of {rates}, NOT {POWER_RATE:g}: that takes {round(1 / POWER_RATE) - 1} controls beside "
        f"the one that holds the source, some have {fewest}; at {POWER_RATE:g} power is lower ([controls] per_field)"
    )


def _opened(asked: Asked, with_new: bool = False) -> tuple[RunFolder, Order, host.Plugins]:
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


def _is_small(run: RunFolder, settings: Settings) -> bool:
    """Whether the work is too small to be worth other processes."""
    n = len(completeness.grid(settings.completeness)) * settings.completeness.per_cell
    return n * len(run.frames()["id"]) * (100 if settings.completeness.period_search else 1) < SMALL_WORK


def _study(
    run: RunFolder, order: Order, plugins: host.Plugins, crew: Crew, watcher: Watcher,
    chosen: Callable[[Columns], Sequence[Subset]],
) -> Study:  # fmt: skip
    """Fields, subsets and cells; raises `NothingToDoError` where no field has controls."""
    tables = book(order.run, order.version)
    fields = [found for found in _fields(tables.positions) if len(found.ids) > 1]
    if not fields:
        raise NothingToDoError(f"run {run.path}: {_why_no_fields(tables.positions)}")
    candidates = read_ecsv(run.file("candidates.ecsv"))
    level, dependent = order.settings.ranking.level, order.settings.ranking.any_dependence
    p_values = (np.asarray(candidates[name], float) for name in ("p_empirical", "p_value"))
    bars = Bars(*(completeness.bar(p, level, dependent) for p in p_values))
    asked = plugins.period_searches if order.settings.completeness.period_search else ()
    columns = judge.full_columns([*plugins.statistics, *asked])
    cells = completeness.grid(order.settings.completeness)
    used: dict[str, dict[str, int]] = {}
    for row in read_ecsv(run.file("channels.ecsv")):
        used.setdefault(str(row["name"]), {})[str(row["channel"])] = int(row["n_used"])
    return Study(
        order, plugins, crew, watcher, tables.frames, fields, chosen(tables.frames), cells, bars, columns, used
    )


def _fields(positions: Columns) -> list[FieldControls]:
    """The controls of every field with targets that are judged at their stated place."""
    is_target = (positions["kind"] == "target") & (positions["search"] < 0)
    found = []
    for number in sorted(set(positions["field"][is_target].tolist())):
        here = first_controls(positions) & (positions["field"] == number)
        order = np.argsort(positions["id"][here])
        vectors = unit_vectors(positions["ra"][here], positions["dec"][here])[order]
        names = tuple(positions["name"][is_target & (positions["field"] == number)].tolist())
        found.append(FieldControls(int(number), positions["id"][here][order], vectors, names))
    return found


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


def _all_frames(frames: Columns) -> Subset:
    return Subset(ALL, "", "", frames["id"][counts(frames)])


def _subsets(frames: Columns) -> list[Subset]:
    """All frames, those of each instrument, and those of each instrument and decade, in order of names."""
    used = counts(frames)
    decade = np.array([f"{text[:3]}0s" if text else "" for text in frames["middle_utc"]], object)
    found = [_all_frames(frames)]
    for name in sorted(set(frames["instrument"][used].tolist())):
        mine = used & (frames["instrument"] == name)
        found.append(Subset(name or "(no name)", name, "", frames["id"][mine]))
        found += [
            Subset(f"{name or '(no name)'} {ten}", name, ten, frames["id"][mine & (decade == ten)])
            for ten in sorted(set(decade[mine].tolist()) - {""})
        ]
    return found


def _nulls(study: Study) -> tuple[dict[int, dict[str, Null]], dict[str, float]]:
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
    n_targets = len(study.used_by_target) + 1
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


def _wanted(study: Study, nulls: Mapping[int, Mapping[str, Null]]) -> list[Injection]:
    """The made-up sources: as often for each target, at any of the controls that are measured as well as it is.

    Raises `NothingToDoError` where no target has such a control.
    """
    hosts = np.concatenate([found.ids for found in study.fields])
    weights = np.concatenate([_like_targets(study, found, nulls[found.number][ALL]) for found in study.fields])
    if not weights.any():
        raise NothingToDoError("no target has a control that is measured in as many frames: nothing can be said")
    return completeness.drawn(study.cells, hosts, weights, study.settings.completeness)


def _like_targets(study: Study, found: FieldControls, null: Null) -> FloatArray:
    """For each control of a field the number of targets it stands for, shape (n,): each is shared by those like it."""
    used = completeness.used_frames(null.judgement)
    share = study.settings.controls.shared_frames
    weight = np.zeros(len(found.ids))
    for name in found.targets:
        mine = study.used_by_target.get(name, {})
        like = np.ones(len(found.ids), bool)
        for label, n_used in mine.items():
            like &= used.get(label, np.zeros(len(found.ids))) >= share * n_used
        if like.any() and sum(mine.values()) > 0:
            weight += like / like.sum()
    return weight


def _outcomes(
    study: Study, wanted: Sequence[Injection], nulls: Mapping[int, Mapping[str, Null]], units: Mapping[str, float],
    with_plugins: bool,
) -> dict[str, Outcomes]:  # fmt: skip
    """What becomes of every source, by subset."""
    hosts = np.array([one.host for one in wanted])
    places, jobs = [], []
    for found in study.fields:
        mine = np.flatnonzero(np.isin(hosts, found.ids))
        mine = mine[np.argsort(hosts[mine], kind="stable")]  # those at one control share its null
        for start in range(0, len(mine), INJECTIONS_AT_ONCE):
            part = mine[start : start + INJECTIONS_AT_ONCE]
            places.append(part)
            jobs.append((
                [wanted[i] for i in part], study.cells, units, study.subsets, nulls[found.number], study.bars, with_plugins
            ))  # fmt: skip
    results = study.each("judging made-up sources", judge_injected, jobs)
    back = np.argsort(np.concatenate(places))
    return {
        subset.name: _joined([result[number] for result in results], back)
        for number, subset in enumerate(study.subsets)
    }


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


def _meta(study: Study, units: Mapping[str, float]) -> dict[str, Any]:
    """What the tables say of themselves."""
    chosen = study.settings.completeness
    return {
        "rule": "recovered: the p-value is below what the run's own p-values leave for one more target at its "
        "false-discovery level; ranked among the other controls, by the tail bound where these cannot decide",
        "false_discovery_level": study.settings.ranking.level,
        "p_value_bar": study.bars.final,
        "seed": chosen.seed,
        "period_search": chosen.period_search,
        "median_frame_error": {label: float(f"{unit:.6g}") for label, unit in units.items()},
        "interval": "95 %, Jeffreys: Brown, Cai & DasGupta 2001, Stat. Sci. 16, 101",
        "caution": UPPER_BOUND,
    }


def _table(
    study: Study, wanted: Sequence[Injection], outcomes: Mapping[str, Outcomes], meta: Mapping[str, Any]
) -> astropy.table.Table:
    """completeness.ecsv."""
    of_cell = np.array([one.cell for one in wanted])
    rows = []
    for subset in study.subsets:
        outcome = outcomes[subset.name]
        for number, cell in enumerate(study.cells):
            row = {
                "subset": subset.name, "instrument": subset.instrument, "decade": subset.decade,
                "n_frames": len(subset.frames), "kind": cell.kind, "flux": cell.flux, "period": cell.period_s,
                "duty_cycle": cell.duty_cycle, "duration": cell.duty_cycle * cell.period_s,
                "window": cell.window * cell.duty_cycle * cell.period_s, "missing": cell.missing,
            }  # fmt: skip
            rows.append(row | completeness.summary_row(of_cell == number, outcome.found, outcome.extra))
    return astropy_table(COMPLETENESS, rows_to_columns(COMPLETENESS, rows), meta)


def _target_tables(
    study: Study, run: RunFolder, table: astropy.table.Table, ephemerides: Any, meta: Mapping[str, Any]
) -> tuple[astropy.table.Table, astropy.table.Table]:
    """completeness_targets.ecsv and completeness_limits.ecsv."""
    candidates, channels = read_ecsv(run.file("candidates.ecsv")), read_ecsv(run.file("channels.ecsv"))
    positions = book(study.order.run, study.order.version).positions
    standing = {str(row["name"]): str(row["standing"]) for row in candidates}
    limits: dict[str, dict[str, tuple[float, float]]] = {}
    for row in channels:
        level = float(row["blank_level"]) if "blank_level" in channels.colnames else 0.0  # not in runs of before
        told = float(row["threshold"]), level
        limits.setdefault(str(row["name"]), {})[str(row["channel"])] = told
    is_target = (positions["kind"] == "target") & (positions["search"] < 0)
    ids = positions["id"][is_target]
    names = [str(name) for name in positions["name"][is_target]]
    size = study.settings.ranking.gather_curves
    jobs = []
    for start in range(0, len(ids), size):
        mine = names[start : start + size]
        given = [_ephemeris(ephemerides, name) for name in mine]
        jobs.append((ids[start : start + size], [limits.get(name, {}) for name in mine], given))
    looks = [one for result in study.each("counting looks", looks_of, jobs) for one in result]
    peaks = {str(row["name"]): (int(row["n_detected"]), float(row["peak_snr"])) for row in candidates}
    rows, more = [], []
    curve = _pulse_curve(table, study.settings.completeness.fluxes)
    for name, (seen_in, cycles) in zip(names, looks, strict=True):
        unseen = standing.get(name) == "unseen"
        rows.append(_target_row(name, standing.get(name, ""), seen_in, cycles, peaks.get(name, (0, np.nan)), curve))
        for flux in sorted(study.settings.completeness.fluxes) if unseen else ():
            weight = completeness.weights(seen_in, flux)
            limit = completeness.duty_limit(weight)
            more.append({"name": name, "flux": flux, "looks_effective": float(weight.sum()), "duty_limit": limit})
    return (
        astropy_table(COMPLETENESS_TARGETS, rows_to_columns(COMPLETENESS_TARGETS, rows), meta),
        astropy_table(COMPLETENESS_LIMITS, rows_to_columns(COMPLETENESS_LIMITS, more), meta),
    )


def _ephemeris(targets: Any, name: str) -> dict[str, float]:
    """The ephemeris that a target list gives, NaN for none."""
    wanted = ("period", "epoch", "period_dot", "window")
    if targets is None or name not in targets.names:
        return dict.fromkeys(wanted, float("nan"))
    row = targets.names.index(name)
    return {column: float(targets.column(column)[row]) for column in wanted}


def _pulse_curve(table: astropy.table.Table, fluxes: Sequence[float]) -> tuple[FloatArray, FloatArray]:
    """Fluxes, ascending, and the completeness of pulse trains in all frames, mean over the other cells."""
    mine = table[(table["subset"] == ALL) & (table["kind"] == injection.PULSES)]
    if len(mine) == 0:
        return np.empty(0), np.empty(0)
    grid = np.unique(np.asarray(fluxes, float))
    return grid, np.array([np.mean(mine["completeness"][np.asarray(mine["flux"]) == flux]) for flux in grid])


def _target_row(
    name: str, standing: str, looks: Looks, cycles: bool, peak: tuple[int, float], curve: tuple[FloatArray, FloatArray]
) -> dict[str, Any]:
    """A row of completeness_targets.ecsv."""
    n_detected, peak_snr = peak
    like = peak_snr if n_detected else float(np.min(looks.threshold, initial=np.inf))
    row: dict[str, Any] = {
        "name": name, "standing": standing, "n_used": len(looks.look), "n_looks": looks.n, "by_cycles": cycles,
        "like_flux": like if np.isfinite(like) else float("nan"),
        "found_probability": completeness.between(like, *curve),
    }  # fmt: skip
    if standing == "unseen":
        surely = completeness.weights(looks, completeness.HIGHEST_FLUX)
        row["lowest_duty_limit"] = completeness.duty_limit(surely)
        for word, duty in (("half", 0.5), ("tenth", 0.1), ("hundredth", 0.01)):
            row[f"flux_limit_{word}"] = completeness.flux_limit(looks, duty)
    return row


def _remarks(
    study: Study, nulls: Mapping[int, Mapping[str, Null]], found: Found, targets: astropy.table.Table
) -> tuple[str, ...]:
    """What holds for the tables as a whole; `found` is what became of the sources in all frames."""
    chosen = study.settings.completeness
    lit = any(null.brighter for of_field in nulls.values() for null in of_field.values())
    said = [
        f"{len(study.cells)} cells of {chosen.per_cell} sources each in {len(study.subsets)} subsets of frames, at "
        f"{sum(len(f.ids) for f in study.fields)} controls of {how_many(len(study.fields), 'field', 'fields')}",
        f"recovered means: p below {study.bars.final:.3g}, which the run's own p-values leave for one more target at a "
        f"false-discovery rate of {study.settings.ranking.level:g}; what checks would say of it is not asked",
        "a source has the same flux in median frame errors in every channel; channels of Stokes Q, U, V get none",
    ]
    if not chosen.period_search:
        said.append("period searches are left out, of sources and controls alike ([completeness] period_search)")
    elif lit:
        said.append("periods of sources that are bright in single frames are not searched for")
    said += _control_remarks(study, found.lowest_p, lit)
    least = study.settings.detection.min_frames
    if not found.enough.all():
        said.append(
            f"{int((~found.enough).sum())} of {len(found.enough)} sources have fewer than {least} usable frames in every "
            "channel: a target is undecided then, however bright ([detection] min_frames)"
        )
    tables = book(study.order.run, study.order.version)
    placed = (tables.positions["kind"] == "target") & (tables.positions["search"] < 0)
    without = {int(n) for n in tables.positions["field"][placed]} - {f.number for f in study.fields}
    if without:
        fields = how_many(
            len(without), "field with fewer than two controls is", "fields with fewer than two controls are"
        )
        said.append(f"{fields} left out")
    searched = int(((tables.positions["kind"] == "target") & (tables.positions["search"] >= 0)).sum())
    if searched:
        said.append(f"{how_many(searched, *SEARCHED)} not in these tables")
    undated = int((counts(study.frames) & ~np.isfinite(study.frames["middle_tdb_s"])).sum())
    if undated:
        said.append(
            f"{how_many(undated, 'frame without a clock sees', 'frames without a clock see')} a source at a random phase"
        )
    if not targets["by_cycles"].any():
        said.append("looks are epochs; a target list with ephemerides (--targets) makes them cycles")
    return tuple(said)


def _control_remarks(study: Study, lowest_p: FloatArray, lit: bool) -> list[str]:
    """Whether controls are enough to find anything, by the smallest p-value that each source could have got."""
    short = lowest_p >= study.bars.empirical
    hopeless = short & (np.rint(1.0 / lowest_p - 1.0) < FEWEST_FOR_TAIL)
    bar, final = f"{study.bars.empirical:.3g}", f"{study.bars.final:.3g}"
    said = []
    if hopeless.any():
        said.append(
            f"too few controls for {hopeless.sum()} of {len(short)} sources: p cannot be below "
            f"{lowest_p[hopeless].min():.3g} at best, below {bar} is needed, and no tail can be fitted to fewer than "
            f"{FEWEST_FOR_TAIL}: however bright, they could not have been found"
            + ("; for bright sources as many comparisons are wanted as controls" if lit else "")
        )
    if (short & ~hopeless).any():
        said.append(
            f"controls cannot decide by themselves for {(short & ~hopeless).sum()} of {len(short)} sources (p below {bar} is "
            "needed): the upper bound of a fitted tail does (n_extrapolated)"
        )
    if said and bar != final:
        said.append(
            f"p below {bar} is what the run's p-values by controls alone leave for one more target; where a tail is fitted, "
            f"those of the run's targets count by their tails too, are smaller, and leave more: p below {final}"
        )
    return said


def _proof_remarks(proofs: Sequence[planted.Proof | None]) -> tuple[str, ...]:
    """What sources added to pixels have shown."""
    made = [proof for proof in proofs if proof is not None]
    if not made:
        return (
            "not proved on pixels: no frame could be measured again" if proofs else "not proved on pixels: none asked",
        )
    beyond, linear = max(abs(p.beyond_rounding) for p in made), max(abs(p.linear) for p in made)
    said = "proved" if beyond <= MOST_BEYOND_ROUNDING and linear <= MOST_NONLINEAR else "NOT proved"
    said += (
        f" on {len(made)} injections in pixels: largest difference {max(abs(p.difference) for p in made):.2g} sigma, "
        f"of which rounding to the steps of stored images leaves {beyond:.2g}, and floating-point pixels without their "
        f"local background {linear:.1g}"
    )
    if len(made) < len(proofs):
        said += f"; {len(proofs) - len(made)} more could not be measured"
    counted = [p.counted for p in made]
    return (
        said,
        f"of a beam-shaped source {from_to(100 * min(counted), 100 * max(counted), '.1f')} % are counted; fluxes here are "
        "those counted, put right where comparisons tell what is lost",
    )
