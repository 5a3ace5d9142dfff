"""The stages of `mine`, one after the other: what is done, what is left, and which tables are written when.

Every stage can be stopped at any instant; the same call continues. Work is handed to a crew, see `hindlight.crew`.
"""

from __future__ import annotations

import logging
import platform
import tomllib
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Protocol

import numpy as np
import tomli_w

from hindlight import archive, conclude, ensemble, host, judge, outcome, plan, settings, store, tasks
from hindlight.candidates import Described, Examined
from hindlight.channels import assign
from hindlight.conclude import Field
from hindlight.crew import Crew, assembled
from hindlight.errors import HindlightError, NothingToDoError, UsageError
from hindlight.fence import Fault, merged
from hindlight.lightcurve import IntArray
from hindlight.outcome import Outcome
from hindlight.positions import Targets, read_targets, serves
from hindlight.schema import CHANNELS, FRAME_SOLUTION, FRAMES, POSITIONS, REJECTS, STANDINGS
from hindlight.settings import Settings
from hindlight.store import Columns, RunFolder
from hindlight.systems import unit_vectors
from hindlight.tables import arrow_table, astropy_table, rows_to_columns, write_parquet, write_table

SMALL_WORK = 2_000_000  # measurements; up to this many the work is done in this process unless told otherwise
RECORDED_PACKAGES = (
    "hindlight",
    "numpy",
    "scipy",
    "astropy",
    "photutils",
    "pyarrow",
    "dask",
    "distributed",
    "nifty-ls",
)

log = logging.getLogger("hindlight")


class Watcher(Protocol):
    """Whoever wants to know how far a run is."""

    def stage(self, name: str, total: int) -> None:
        """A stage begins, of `total` steps."""

    def step(self, n: int = 1) -> None:
        """Some steps of the stage are done."""


@dataclass(frozen=True)
class Request:
    """What `mine` is asked for."""

    archives: tuple[str, ...]
    targets: Path
    out: Path
    settings: Path | None = None
    plugins: tuple[Path, ...] = ()
    without: tuple[str, ...] = ()
    workers: int | None = None
    scheduler: str | None = None


def mine(request: Request, watcher: Watcher) -> Outcome:
    """The whole job: from archive folders and a target list to the candidate table in the run folder."""
    run = RunFolder(request.out)
    chosen = _settings_in_force(run, request)
    spec = host.spec_from(chosen, request.plugins, request.without)
    plugins = host.load(spec)
    spec = replace(spec, expected=plugins.fingerprint())
    targets = read_targets(request.targets)
    _check_estimator(plugins, chosen)
    recorded = _compare_with_record(run, request, chosen, plugins)
    known = run.frames() if run.has("frames.parquet") else plan.empty(FRAMES)
    if known["id"].size == 0:
        frames, rejects = _walked(request, chosen, plugins, known, watcher)
        run.create()
    else:
        run.create()
        frames, rejects = _walked(request, chosen, plugins, known, watcher)
    with run.locked(), _logged(run):
        return _locked_mine(run, request, chosen, plugins, spec, targets, recorded, frames, rejects, watcher)


@contextmanager
def _logged(run: RunFolder) -> Iterator[None]:
    """Write the log to the run's log.txt while it works; what goes wrong stays there with its traceback."""
    handler = logging.FileHandler(run.file("log.txt"), encoding="utf-8")
    handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
    log.addHandler(handler)
    try:
        yield
    except HindlightError as error:
        log.error("%s", error)
        raise
    except Exception:
        log.exception("error inside the program")
        raise
    finally:
        log.removeHandler(handler)
        handler.close()


def _locked_mine(
    run: RunFolder, request: Request, chosen: Settings, plugins: host.Plugins, spec: host.PluginSpec,
    targets: Targets, recorded: Mapping[str, Any], frames: Columns, rejects: list[dict[str, Any]], watcher: Watcher,
) -> Outcome:  # fmt: skip
    size = float(recorded.get("field_size_deg", 0.0)) or plan.chosen_field_size(frames, chosen.controls)
    store.write_text(run, "settings.toml", _record(request, chosen, plugins, size))
    run.write_columns("frames.parquet", FRAMES, frames)
    solution = ensemble.uncalibrated(frames["id"], frames["channel"])
    run.write_columns("frame_solution.parquet", FRAME_SOLUTION, solution)
    known = run.positions() if run.has("positions.parquet") else plan.no_positions()
    small = len(frames["id"]) * (len(targets) + chosen.controls.per_field) < SMALL_WORK
    with assembled(request.workers, request.scheduler, small) as crew:
        order = tasks.Order(str(run.path.resolve()), chosen, spec, _version(run))
        positions = _planned(run, crew, order, frames, known, targets, size, watcher)
        order = replace(order, version=_version(run))
        pieces = store.pieces(frames, positions)
        _measure(run, crew, order, pieces, watcher)
        rejects += store.part_rejects(run, pieces)
        _write_rejects(run, rejects)
        return _concluded(run, crew, order, plugins, targets, frames, positions, rejects, watcher)


def _settings_in_force(run: RunFolder, request: Request) -> Settings:
    """The settings given, else those of the run, else the defaults."""
    if request.settings is None and run.has("settings.toml"):
        return settings.read_settings(run.file("settings.toml"))
    return settings.read_settings(request.settings)


def _check_estimator(plugins: host.Plugins, chosen: Settings) -> None:
    names = [e.name for e in plugins.estimators]
    if chosen.photometry.estimator not in ("auto", *names):
        raise UsageError(
            f"[photometry] estimator: no estimator {chosen.photometry.estimator!r}; there are auto, {', '.join(names)}"
        )


def _measuring_plugins(plugins: host.Plugins) -> str:
    """A word for the plugins that touch measured values, with their versions and settings."""
    return host.Plugins(
        tuple(entry for entry in plugins.loaded if entry.plugin.kind in ("dialect", "estimator"))
    ).fingerprint()[:16]


def _compare_with_record(
    run: RunFolder, request: Request, chosen: Settings, plugins: host.Plugins
) -> Mapping[str, Any]:
    """What the run recorded of itself; raises `UsageError` where this request does not fit it."""
    if not run.has("settings.toml"):
        return {}
    data = tomllib.loads(run.file("settings.toml").read_text(encoding="utf-8"))
    record: Mapping[str, Any] = data.get("run", {})
    ours = [str(Path(a).resolve()) for a in request.archives]
    missing = [a for a in record.get("archives", []) if a not in ours]
    if missing:
        raise UsageError(f"run {run.path}: was made from archive {missing[0]}; give that too, or another --out")
    before = settings.settings_from(data, f"{run.path}/settings.toml").measuring()
    for section, values in chosen.measuring().items():
        for key in sorted({*values, *before[section]}):
            if values.get(key) != before[section].get(key):
                raise UsageError(
                    f"run {run.path}: [{section}] {key} was {before[section].get(key)!r} and is now {values.get(key)!r}; "
                    "it touches what has been measured: keep it, or give another --out"
                )
    if record.get("measuring_plugins") != _measuring_plugins(plugins):
        raise UsageError(
            f"run {run.path}: its dialects or estimators differ from those now; use the same, or give another --out"
        )
    return record


def _record(request: Request, chosen: Settings, plugins: host.Plugins, field_size_deg: float) -> str:
    """The text of settings.toml: every setting in force, and what the run was made from and with."""
    instances = {entry.plugin.name: entry.plugin for entry in plugins.loaded}
    versions = dict(host.installed_versions(RECORDED_PACKAGES))
    record = {
        "run": {
            "archives": [str(Path(a).resolve()) for a in request.archives],
            "field_size_deg": field_size_deg,
            "measuring_plugins": _measuring_plugins(plugins),
        },
        "versions": {
            "python": platform.python_version(),
            "packages": versions,
            "plugins": {e.plugin.name: f"{e.source} {e.version}".strip() for e in plugins.loaded},
        },
    }
    return settings.render(chosen, instances) + "\n" + tomli_w.dumps(record)


def _walked(
    request: Request, chosen: Settings, plugins: host.Plugins, known: Columns, watcher: Watcher
) -> tuple[Columns, list[dict[str, Any]]]:
    """The frame table after a walk of the archive, and what was set aside; raises `NothingToDoError` for no frame."""
    watcher.stage("reading headers", 0)
    found = archive.walk(request.archives, plugins.dialects, chosen, known, watcher.step)
    labels = assign(found.frames, known, chosen.channels)
    frames = plan.merge_frames(known, {**found.frames, "channel": labels}, found.present, chosen.flow.batch_frames)
    if not np.any(frames["state"] != "void"):
        what = f"{len(found.rejects)} files or HDUs were set aside" if found.rejects else "there is no FITS file"
        raise NothingToDoError(
            f"archive {', '.join(request.archives)}: no usable FITS image found ({what}); "
            "give a folder that holds .fits, .fit or .fts files"
        )
    rejects = list(found.rejects)
    for state, reason in (("vanished", "vanished"), ("void", "changed")):
        for row in np.flatnonzero(frames["state"] == state):
            rejects.append({
                "path": frames["path"][row], "hdu": int(frames["hdu"][row]), "plane": int(frames["plane"][row]),
                "reason": reason, "detail": "its measurements are kept" if state == "vanished" else "measured anew",
            })  # fmt: skip
    return frames, rejects


def _version(run: RunFolder) -> str:
    """Changes whenever a shared table of the run is written anew."""
    names = ("frames.parquet", "positions.parquet", "frame_solution.parquet")
    return ",".join(str(run.file(n).stat().st_mtime_ns) if run.has(n) else "-" for n in names)


def _planned(
    run: RunFolder, crew: Crew, order: tasks.Order, frames: Columns, known: Columns, targets: Targets, size_deg: float,
    watcher: Watcher,
) -> Columns:  # fmt: skip
    """The position table with this target list, controls chosen for fields that are new."""
    new = plan.new_targets(known, targets)
    if new.size == 0:
        return known
    positions = plan.add_targets(known, targets, new, size_deg)
    had = set(known["field"][known["kind"] == "control"].tolist())
    fields = sorted(set(positions["field"][positions["round"] == positions["round"].max()].tolist()) - had)
    within = {}
    for number in fields:
        mine = (positions["kind"] == "target") & (positions["field"] == number)
        within[number] = plan.field_frames(frames, unit_vectors(positions["ra"][mine], positions["dec"][mine]))
    bright = _bright_sources(crew, order, frames, within, watcher)
    for number in fields:
        if len(within[number].rows) == 0:
            continue
        spacing = plan.field_spacing(
            frames, within[number].rows, order.settings.controls, order.settings.photometry.assumed_fwhm_pixels
        )
        positions = plan.add_controls(
            positions, number, frames, within[number], spacing, bright[number], order.settings.controls
        )
    run.write_columns("positions.parquet", POSITIONS, positions)
    return positions


def _bright_sources(
    crew: Crew, order: tasks.Order, frames: Columns, within: Mapping[int, plan.FieldFrames], watcher: Watcher
) -> dict[int, plan.BrightSources]:
    """Sources that controls of each field must keep clear of, from its reference frames."""
    per_field = {
        number: plan.reference_frames(frames, found.rows, order.settings.controls.reference_frames)
        for number, found in within.items()
    }
    wanted = sorted({int(row) for rows in per_field.values() for row in rows})
    results: dict[int, plan.BrightSources] = {}
    watcher.stage("looking for bright sources", len(wanted))

    def done(number: int, result: Any) -> None:
        results[wanted[number]] = result
        watcher.step()

    crew.run(tasks.find_bright, [(order, int(frames["id"][row])) for row in wanted], done)
    joined = {}
    for number, rows in per_field.items():
        parts = [results[int(row)] for row in rows]
        joined[number] = plan.BrightSources(
            *(
                np.concatenate([np.empty(0), *[getattr(p, name) for p in parts]])
                for name in ("ra", "dec", "snr", "beam")
            )
        )
    return joined


def _measure(run: RunFolder, crew: Crew, order: tasks.Order, pieces: Sequence[store.Piece], watcher: Watcher) -> None:
    """Measure every piece that has no part yet."""
    todo = [piece for piece in pieces if not run.part(piece).is_file()]
    watcher.stage("measuring", len(pieces))
    watcher.step(len(pieces) - len(todo))
    log.info("measuring: %d of %d pieces to do", len(todo), len(pieces))
    crew.run(tasks.measure_piece, [(order, piece) for piece in todo], lambda _n, _r: watcher.step())


def _write_rejects(run: RunFolder, rejects: Sequence[Mapping[str, Any]]) -> None:
    ordered = sorted(rejects, key=lambda r: (r["path"], r["hdu"], r["plane"], r["reason"]))
    write_table(run.file("rejects.ecsv"), astropy_table(REJECTS, rows_to_columns(REJECTS, ordered)))


def _fields(frames: Columns, positions: Columns, chosen: Settings) -> list[Field]:
    """The fields that hold targets, with which control may serve which target."""
    found = []
    is_target, is_control = positions["kind"] == "target", positions["kind"] == "control"
    for number in sorted(set(positions["field"][is_target].tolist())):
        here = positions["field"] == number
        targets, controls = positions["id"][is_target & here], positions["id"][is_control & here]
        vectors = unit_vectors(positions["ra"], positions["dec"])
        within = plan.field_frames(frames, vectors[is_target & here])
        covered = plan.covered(frames, within.rows, vectors[is_control & here])
        in_frames = serves(within.covered, covered, chosen.controls.shared_frames)
        serving = conclude.serving_controls(positions, np.sort(controls), in_frames)
        found.append(Field(int(number), np.sort(targets), np.sort(controls), serving))
    return found


def _judged(
    crew: Crew, order: tasks.Order, fields: Sequence[Field], wanted: Mapping[int, IntArray], function: Any,
    columns: Mapping[str, Any], watcher: Watcher, stage: str,
) -> dict[int, judge.Judgement]:  # fmt: skip
    """Each field's judgement of its wanted positions, made in groups of a fixed size."""
    size = order.settings.ranking.gather_curves
    jobs: list[tuple[int, IntArray]] = []
    for found in fields:
        ids = wanted[found.number]
        jobs += [(found.number, ids[start : start + size]) for start in range(0, len(ids), size)]
    watcher.stage(stage, sum(len(ids) for _, ids in jobs))
    results: dict[int, judge.Judgement] = {}

    def done(number: int, result: judge.Judgement) -> None:
        results[number] = result
        watcher.step(len(jobs[number][1]))

    crew.run(function, [(order, ids) for _, ids in jobs], done)
    whole = {}
    for found in fields:
        mine = [n for n, (field_number, _) in enumerate(jobs) if field_number == found.number]
        whole[found.number] = judge.joined([results[n] for n in mine], [len(jobs[n][1]) for n in mine], columns)
    return whole


def _concluded(
    run: RunFolder, crew: Crew, order: tasks.Order, plugins: host.Plugins, targets: Targets, frames: Columns,
    positions: Columns, rejects: Sequence[Mapping[str, Any]], watcher: Watcher,
) -> Outcome:  # fmt: skip
    """Judge, rank, examine and write the run's result tables."""
    fields = _fields(frames, positions, order.settings)
    columns = judge.full_columns([*plugins.statistics, *plugins.period_searches])
    everyone = {found.number: found.ids for found in fields}
    judged = _judged(crew, order, fields, everyone, tasks.judge_positions, columns, watcher, "judging")
    for found in fields:
        found.judgement = judged[found.number]
        conclude.rank(found, plugins, order.settings)
    if plugins.period_searches:
        gate = {found.number: conclude.gated(found, order.settings) for found in fields}
        searched = _judged(crew, order, fields, gate, tasks.search_positions, columns, watcher, "searching periods")
        for found in fields:
            judge.spread(found.judgement, searched[found.number], found.rows(gate[found.number]), columns)
            conclude.rank(found, plugins, order.settings)
    return _tabled(run, crew, order, plugins, targets, frames, positions, rejects, fields, watcher)


def _tabled(
    run: RunFolder, crew: Crew, order: tasks.Order, plugins: host.Plugins, targets: Targets, frames: Columns,
    positions: Columns, rejects: Sequence[Mapping[str, Any]], fields: Sequence[Field], watcher: Watcher,
) -> Outcome:  # fmt: skip
    """The result tables of a run, made from its ranked fields and written."""
    p = conclude.p_values([rank for found in fields for rank in found.ranked.ranks], order.settings)
    starts = np.cumsum([0, *[len(found.targets) for found in fields]])
    with np.errstate(invalid="ignore"):
        beyond = p.q < order.settings.ranking.level
    examined = _examined(crew, order, fields, starts, beyond, watcher)
    described = _described(crew, order, fields, starts, beyond, examined, targets, positions, watcher)
    rows = []
    for found, start in zip(fields, starts, strict=False):
        cells = outcome.plugin_cells(found, plugins)
        for index, at_row in enumerate(found.rows(found.targets)):
            at = int(start) + index
            extra = examined[at].cells if at in examined else {}
            row = {**cells[at_row], **extra, **described[at].cells, **outcome.chance_cells(found, index, at, p)}
            row["notes"] = outcome.notes(found, index, at, p)
            rows.append(_placed(row, positions, int(found.targets[index])))
    faults = merged(
        [f for found in fields for f in found.judgement.faults] + [f for e in examined.values() for f in e.faults]
    )
    return _written(run, order, plugins, rows, described, faults, fields, positions, frames, rejects, p)


def _placed(row: dict[str, Any], positions: Columns, target: int) -> dict[str, Any]:
    where = int(np.searchsorted(positions["id"], target))
    return {**row, "ra": float(positions["ra"][where]), "dec": float(positions["dec"][where])}


def _examined(
    crew: Crew, order: tasks.Order, fields: Sequence[Field], starts: IntArray, beyond: Any, watcher: Watcher
) -> dict[int, Examined]:
    """Periods and checks of the targets beyond chance, by their place among all targets."""
    places: list[int] = []
    jobs: list[tuple[Any, ...]] = []
    for found, start in zip(fields, starts, strict=False):
        bright = {label: limits.above_quiet for label, limits in found.thresholds.items()}
        for index, target in enumerate(found.targets):
            if beyond[start + index]:
                places.append(int(start) + index)
                jobs.append((order, int(target), found.controls, bright))
    watcher.stage("examining candidates", len(jobs))
    results: dict[int, Examined] = {}

    def done(number: int, result: Examined) -> None:
        results[places[number]] = result
        watcher.step()

    crew.run(tasks.examine_target, jobs, done)
    return results


def _described(
    crew: Crew, order: tasks.Order, fields: Sequence[Field], starts: IntArray, beyond: Any,
    examined: Mapping[int, Examined], targets: Targets, positions: Columns, watcher: Watcher,
) -> dict[int, Described]:  # fmt: skip
    """What the tables say of every target from its light curves, by its place among all targets."""
    given = _given_ephemerides(targets)
    size = order.settings.ranking.gather_curves
    places: list[list[int]] = []
    jobs: list[tuple[Any, ...]] = []
    for found, start in zip(fields, starts, strict=False):
        for first in range(0, len(found.targets), size):
            ids = found.targets[first : first + size]
            mine = [int(start) + first + k for k in range(len(ids))]
            names = positions["name"][np.searchsorted(positions["id"], ids)]
            ephemerides = [given.get(str(name), outcome.NO_EPHEMERIS) for name in names]
            places.append(mine)
            jobs.append((
                order, ids, found.thresholds, ephemerides, [bool(beyond[k]) for k in mine], [examined.get(k) for k in mine]
            ))  # fmt: skip
    watcher.stage("describing targets", int(starts[-1]))
    results: dict[int, Described] = {}

    def done(number: int, result: list[Described]) -> None:
        results.update(zip(places[number], result, strict=True))
        watcher.step(len(result))

    crew.run(tasks.describe_targets, jobs, done)
    return results


def _given_ephemerides(targets: Targets) -> dict[str, dict[str, float]]:
    columns = {name: targets.column(name) for name in outcome.NO_EPHEMERIS}
    return {name: {k: float(v[row]) for k, v in columns.items()} for row, name in enumerate(targets.names)}


def _written(
    run: RunFolder, order: tasks.Order, plugins: host.Plugins, rows: Sequence[Mapping[str, Any]],
    described: Mapping[int, Described], faults: Sequence[Fault], fields: Sequence[Field], positions: Columns,
    frames: Columns, rejects: Sequence[Mapping[str, Any]], p: conclude.PValues,
) -> Outcome:  # fmt: skip
    """Write every result table; the candidate table comes last."""
    meta = outcome.meta(order.settings, p, fields)
    channel_rows = [row for place in sorted(described) for row in described[place].channels]
    write_table(run.file("channels.ecsv"), astropy_table(CHANNELS, rows_to_columns(CHANNELS, channel_rows), meta))
    write_table(run.file("plugin_faults.ecsv"), outcome.fault_table(faults))
    names = {int(i): str(n) for i, n in zip(positions["id"], positions["name"], strict=True)}
    write_parquet(run.file("statistics.parquet"), arrow_table(*outcome.statistic_columns(fields, names, plugins)))
    write_parquet(run.file("controls.parquet"), arrow_table(*outcome.control_columns(fields, plugins)))
    table = outcome.candidate_table(rows, plugins, meta)
    for ending in (".fits", ".vot", ".ecsv"):
        write_table(run.file(f"candidates{ending}"), table)
    standings = {word: int(np.sum(table["standing"] == word)) for word in STANDINGS}
    reasons = Counter(str(r["reason"]) for r in rejects)
    result = Outcome(
        run=run.path, table=table, standings=standings, n_frames=int(np.sum(frames["state"] != "void")),
        n_measurements=int(sum(row["n_frames"] for row in channel_rows)), rejects=dict(sorted(reasons.items())),
        faults=tuple(faults), extrapolated=int(p.extrapolated.sum()), remarks=outcome.remarks(p, fields, order.settings),
    )  # fmt: skip
    store.write_text(run, "summary.txt", outcome.summary(result))
    if standings["uncovered"] == len(table):
        raise NothingToDoError(
            f"no target is covered by any of the {result.n_frames} frames; check the positions (ICRS degrees) and the archive"
        )
    return result
