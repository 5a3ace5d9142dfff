"""The stages of `mine`, one after the other: what is done, what is left, and which tables are written when.

Every stage can be stopped at any instant; the same call continues. Work is handed to a crew, see `hindlight.crew`;
pixels are read in `hindlight.measuring`, what
follows is in `hindlight.verdicts` and `hindlight.second_pass`.
"""

from __future__ import annotations

import logging
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from hindlight import (
    archive,
    asides,
    comparisons,
    duplicates,
    ensemble,
    files,
    host,
    likeness,
    measuring,
    plan,
    record,
    second_pass,
    store,
    tasks,
    verdicts,
)  # fmt: skip
from hindlight.channels import assign
from hindlight.crew import assembled
from hindlight.errors import NothingToDoError, UsageError
from hindlight.lightcurve import FloatArray
from hindlight.order import Order
from hindlight.outcome import Outcome
from hindlight.positions import Targets, read_targets
from hindlight.record import Request
from hindlight.schema import FRAME_SOLUTION, FRAMES, POSITIONS, REJECTS
from hindlight.settings import Settings
from hindlight.storage import alone
from hindlight.store import Columns, RunFolder
from hindlight.systems import unit_vectors
from hindlight.tables import astropy_table, read_ecsv, rows_to_columns, write_table
from hindlight.verdicts import Session, Watcher

SMALL_WORK = 2_000_000  # measurements; up to this many the work is done in this process unless told otherwise

Row = dict[str, Any]

log = logging.getLogger("hindlight")


def mine(request: Request, watcher: Watcher) -> Outcome:
    """The whole job: from archive folders and a target list to the candidate table in the run folder.

    What is wrong with the request is refused before a header is read. Raises `UsageError`, `RunInUseError`,
    `NothingToDoError` or `StoppedError`.
    """
    run = RunFolder(request.out)
    settings = record.settings_in_force(run, request)
    spec = host.spec_from(settings, request.plugins, request.without)
    plugins = host.load(spec)
    _check_plugins(plugins, settings)
    targets = read_targets(request.targets)
    own = _own_comparisons(settings)
    record.compare(run, request, settings, plugins)
    files.check_folders(request.folders)
    _check_shared(request)
    run.create()
    order = Order(str(run.path.resolve()), settings, replace(spec, expected=plugins.fingerprint()))
    with run.locked():
        try:
            with record.logged(run):
                return _mine_locked(run, request, order, plugins, (targets, own), watcher)
        except NothingToDoError:
            run.discard_if_new()
            raise


def _mine_locked(
    run: RunFolder, request: Request, order: Order, plugins: host.Plugins,
    lists: tuple[Targets, Targets | None], watcher: Watcher,
) -> Outcome:  # fmt: skip
    """The job once the run folder is ours; `lists` are the targets and the user's own comparisons, if any."""
    settings = order.settings
    recorded = record.compare(run, request, settings, plugins)
    frames, rejects = _walked(run, request, settings, plugins, watcher)
    size = float(recorded.get("field_size_deg", 0.0))
    small = bool(alone(request.folders)) or len(frames["id"]) * _most_positions(frames, lists[0], settings) < SMALL_WORK
    with assembled(request.workers, request.scheduler, small) as crew:
        session = Session(run, crew, order, plugins, lists[0], watcher, lists[1])
        pairs = duplicates.candidates(frames)
        if len(pairs):  # what the walk found is kept if the run is stopped while it compares
            _write_frames(session, request, frames, rejects, size)
        frames = _compared(session, frames, pairs)
        rejects = _distinct([*rejects, *duplicates.rejects(frames)])
        size = size or plan.chosen_field_size(frames, settings.controls)
        _write_frames(session, request, frames, rejects, size)
        session = replace(session, order=replace(order, version=run.version()))
        positions = _planned(session, frames, size)
        session = replace(session, order=replace(order, version=run.version()))
        given = request.settings is not None or not recorded
        told = () if given else asides.borrowed_settings(run, settings, plugins)
        return _measured_and_judged(session, frames, positions, rejects, size, told)


def _check_shared(request: Request) -> None:
    """Raise `UsageError` where other processes are to read what only this one has."""
    several = request.scheduler is not None or (request.workers or 1) > 1
    if several and (mine_only := alone(request.folders)):
        raise UsageError(f"archive {mine_only[0]}: is in the memory of this process alone; give --workers 1")


def _most_positions(frames: Columns, targets: Targets, settings: Settings) -> int:
    """About how many positions will be measured at most."""
    narrow = float(np.min(frames["beam_major"], initial=np.inf, where=frames["beam_major"] > 0))
    searched = int(np.count_nonzero(targets.position_error > narrow)) if settings.search.sigmas else 0
    places = settings.search.most_places * (searched + settings.search.controls) if searched else 0
    return len(targets) + settings.controls.per_field + places


def _write_frames(session: Session, request: Request, frames: Columns, rejects: Sequence[Row], size: float) -> None:
    """Write the frame table and, before it, what must be there when it is; `size` of a field is 0 while unknown."""
    text = record.text_of(request, session.order.settings, session.plugins, size)
    store.write_text(session.run, "settings.toml", text)
    _write_rejects(session.run, rejects)
    session.run.write_columns("frames.parquet", FRAMES, frames)


def _compared(session: Session, frames: Columns, pairs: duplicates.Pairs) -> Columns:
    """The frame table with copies, deep images and batches told, once the pixels of these pairs have been compared."""
    same = _same_exposure(session, frames, pairs) if len(pairs) else np.zeros(0, bool)
    frames = {**frames, "duplicate_of": duplicates.settled(frames, pairs.first[same], pairs.second[same])}
    frames["related_to"] = duplicates.related(frames)
    return plan.batched(frames, session.order.settings.flow.batch_frames)


def _same_exposure(session: Session, frames: Columns, pairs: duplicates.Pairs) -> Any:
    """Which of the pairs are one exposure, by their pixels."""
    session.watcher.stage("comparing pixels of possible duplicates", len(pairs))
    pieces = duplicates.jobs(pairs)
    same = np.zeros(len(pairs), bool)

    def done(number: int, result: list[likeness.Likeness]) -> None:
        same[pieces[number]] = [bool(likeness.word) for likeness in result]
        session.watcher.step(len(result))

    todo = [tasks.comparison(session.order, frames, pairs, piece) for piece in pieces]
    session.crew.run(likeness.compare, todo, done)
    log.info("duplicates: %d of %d possible pairs are one exposure", np.count_nonzero(same), len(pairs))
    return same


def _measured_and_judged(
    session: Session, frames: Columns, positions: Columns, rejects: list[Row], size_deg: float, told: tuple[str, ...]
) -> Outcome:
    """All after planning: what is measured is judged and ranked, with more controls where they are wanted.

    `told` is what the last lines say anyway.
    """
    measuring.measure(session, store.pieces(frames, positions))
    _with_parts(session, frames, positions, rejects)
    said = _solved(session, frames, positions)
    session = replace(session, order=replace(session.order, version=session.run.version()))
    first = verdicts.ranked_fields(session, frames, positions)
    last = second_pass.carried_out(session, frames, positions, first, size_deg)
    rejects = _with_parts(last.session, frames, last.positions, rejects)
    said = (*said, *last.said, *told, *_of_the_request(last.session, frames, last.positions))
    return verdicts.tabled(last.session, frames, last.positions, rejects, last.fields, said)


def _of_the_request(session: Session, frames: Columns, positions: Columns) -> tuple[str, ...]:
    """What the last lines say of settings and lists, and of tables that were made of the run before."""
    run, settings = session.run, session.order.settings
    return (
        *asides.of_lists(settings.frames, frames, session.targets, session.comparisons),
        *asides.earlier_targets(positions, session.targets),
        *asides.outdated_completeness(run, record.state(run, settings, session.plugins)),
    )


def _with_parts(session: Session, frames: Columns, positions: Columns, rejects: Sequence[Row]) -> list[Row]:
    """What was set aside, in measuring too, once it is written."""
    measured = store.part_rejects(session.run, store.pieces(frames, positions))
    every = _distinct([*rejects, *measured])
    _write_rejects(session.run, every)
    return every


def _own_comparisons(settings: Settings) -> Targets | None:
    """The user's table of comparisons, None where there is none; raises `UsageError` where it cannot be read."""
    if not settings.comparisons.table:
        return None
    try:
        return read_targets(Path(settings.comparisons.table), fluxes=True)
    except UsageError as error:
        raise UsageError(f"[comparisons] table: {str(error).removeprefix('targets ')}") from None


def _check_plugins(plugins: host.Plugins, settings: Settings) -> None:
    """Raise `UsageError` where the plugins that are left cannot do the job."""
    for kind, some in (("dialect", plugins.dialects), ("estimator", plugins.estimators)):
        if not some:
            raise UsageError(f"--without: no {kind} is left, and nothing can be measured; leave one in")
    archive.chosen_dialects(plugins.dialects, settings)
    ranked = [c for plugin in plugins.statistics for c in plugin.columns if c.unusual and c.about == "variation"]
    if not ranked:
        raise UsageError("--without: no statistic that asks about variation is left to rank by; leave one in")
    names = [e.name for e in plugins.estimators]
    if settings.photometry.estimator not in ("auto", *names):
        raise UsageError(
            f"[photometry] estimator: no estimator {settings.photometry.estimator!r}; there are auto, {', '.join(names)}"
        )


def _walked(
    run: RunFolder, request: Request, settings: Settings, plugins: host.Plugins, watcher: Watcher
) -> tuple[Columns, list[Row]]:
    """The frame table after a walk of the archive, and what was set aside; raises `NothingToDoError` for no frame."""
    run.sweep()
    known = run.frames() if run.has("frames.parquet") else plan.empty(FRAMES)
    watcher.stage("reading headers", 0)
    found = archive.walk(request.folders, plugins.dialects, settings, known, watcher.step, [str(run.path)])
    labels = assign(found.frames, known, settings.channels)
    frames = plan.merge_frames(known, {**found.frames, "channel": labels}, found.present)
    if not np.any(frames["state"] != "void"):
        what = f"{len(found.rejects)} files or HDUs were set aside" if found.rejects else "there is no FITS file"
        raise NothingToDoError(
            f"archive {', '.join(request.archives)}: no usable FITS image found ({what}); "
            "give a folder that holds .fits, .fit or .fts files"
        )
    return frames, _distinct([*_earlier_rejects(run, found.unchanged), *found.rejects, *plan.lost_frames(frames)])


def _earlier_rejects(run: RunFolder, unchanged: set[tuple[str, str]]) -> list[Row]:
    """What was set aside in files that are not read again because they have not changed."""
    if not run.has("rejects.ecsv"):
        return []
    table = read_ecsv(run.file("rejects.ecsv"))
    rows = [{c.name: int(r[c.name]) if c.dtype == "int64" else str(r[c.name]) for c in REJECTS} for r in table]
    kept = [row for row in rows if (row["archive"], row["path"]) in unchanged]
    return [row for row in kept if row["reason"] not in ("vanished", "changed", "duplicate_of")]


def _distinct(rejects: Sequence[Row]) -> list[Row]:
    """Rows in a fixed order, each once."""
    keyed = {(r["path"], r["hdu"], r["plane"], r["reason"], r["archive"]): r for r in rejects}
    return [keyed[key] for key in sorted(keyed)]


def _write_rejects(run: RunFolder, rejects: Sequence[Mapping[str, Any]]) -> None:
    write_table(run.file("rejects.ecsv"), astropy_table(REJECTS, rows_to_columns(REJECTS, rejects)))


def _planned(session: Session, frames: Columns, size_deg: float) -> Columns:
    """The position table with this target list, and controls for every field that has none."""
    run, settings = session.run, session.order.settings
    known = run.positions() if run.has("positions.parquet") else plan.no_positions()
    positions = plan.add_targets(known, session.targets, plan.new_targets(known, session.targets), size_deg)
    round_of_controls = plan.round_for_controls(known, positions)
    searches = _sought(session, frames, positions, len(known["id"]))
    for _, group in searches:
        positions = plan.add_trials(positions, group)
    within: dict[int, plan.FieldFrames] = {}
    for number in plan.fields_without_controls(positions):
        mine = (positions["kind"] == "target") & (positions["field"] == number)
        vectors = unit_vectors(positions["ra"][mine], positions["dec"][mine])
        here = plan.field_frames(frames, vectors)
        if len(here.rows):
            within[number] = here
    if not within and len(known["id"]) == 0:
        hint = "; all ra are below 24: degrees are wanted, not hours" if max(session.targets.ra) < 24 else ""
        raise NothingToDoError(
            f"no target is covered by any of the {len(frames['id'])} frames; "
            f"check the positions (ICRS degrees) and the archive{hint}"
        )
    bright = measuring.bright_sources(session, frames, within)
    chosen = _comparisons(session, frames, positions, within, bright)
    for number, (ra, dec) in chosen.items():
        positions = plan.add_comparisons(positions, number, round_of_controls, ra, dec)
    for number, here in within.items():
        spacing = plan.field_spacing(frames, here.rows, settings.controls, settings.photometry.assumed_fwhm_pixels)
        positions = plan.add_controls(
            positions, number, round_of_controls, frames, here, spacing, bright[number], settings.controls
        )
    for here, group in searches:
        spacing = plan.field_spacing(frames, here.rows, settings.controls, settings.photometry.assumed_fwhm_pixels)
        positions = plan.add_blanks(
            positions, group, frames, here, spacing, settings.controls, settings.search.controls
        )
    if len(positions["id"]) > len(known["id"]):
        run.write_columns("positions.parquet", POSITIONS, positions)
    return positions


def _sought(
    session: Session, frames: Columns, positions: Columns, n_known: int
) -> list[tuple[plan.FieldFrames, plan.Sought]]:  # fmt: skip
    """Which of the new targets, those after the first `n_known` positions, are searched, and the frames they are in."""
    settings = session.order.settings
    new = positions["id"][n_known:]
    fields = positions["field"][n_known:]
    found = []
    for number in sorted(set(fields.tolist())) if session.targets.position_error.any() else ():
        mine = np.isin(positions["id"], new[fields == number])
        here = plan.field_frames(frames, unit_vectors(positions["ra"][mine], positions["dec"][mine]))
        if len(here.rows):
            beam = float(np.median(plan.beams(frames, here.rows, settings.photometry.assumed_fwhm_pixels)))
            groups = plan.sought(positions, session.targets, positions["id"][mine], beam, settings.search)
            found += [(here, group) for group in groups]
    return found


def _comparisons(
    session: Session, frames: Columns, positions: Columns, within: Mapping[int, plan.FieldFrames],
    bright: Mapping[int, plan.BrightSources],
) -> dict[int, tuple[FloatArray, FloatArray]]:  # fmt: skip
    """New comparisons of each field, ICRS degrees: those of the user's table, or chosen from the bright sources."""
    settings = session.order.settings.comparisons
    kind = positions["kind"]
    if session.comparisons is not None:
        given = session.comparisons
        return {} if (kind == "comparison").any() else {int(positions["field"][0]): (given.ra, given.dec)}
    if settings.wanted == 0:
        return {}
    occupied = unit_vectors(positions["ra"][kind == "target"], positions["dec"][kind == "target"])
    known = unit_vectors(positions["ra"][kind == "comparison"], positions["dec"][kind == "comparison"])
    wanted: list[tuple[int, int]] = []
    places: dict[int, comparisons.Candidates] = {}
    for number, here in within.items():
        some = places[number] = comparisons.candidates(bright[number], occupied, known, settings)
        known = np.concatenate((known, unit_vectors(some.ra, some.dec)))
        if len(some.ra) >= settings.fewest:
            rows = comparisons.sampled_frames(frames, here.rows, settings.located_in)
            wanted += [(number, int(row)) for row in rows]
    session.watcher.stage("locating comparison sources", len(wanted))
    found: list[comparisons.Located | None] = [None] * len(wanted)

    def done(number: int, result: comparisons.Located) -> None:
        found[number] = result
        session.watcher.step()

    jobs = [(session.order, int(frames["id"][row]), places[number].ra, places[number].dec) for number, row in wanted]
    session.crew.run(tasks.locate_sources, jobs, done)
    return {
        number: comparisons.placed(
            places[number], [f for (n, _), f in zip(wanted, found, strict=True) if f and n == number], settings
        )
        for number in within
    }


def _solved(session: Session, frames: Columns, positions: Columns) -> tuple[str, ...]:
    """Solve the flux scale of every channel from the measurements and write it; what to say of it in the last lines."""
    batches = sorted({piece.batch for piece in store.pieces(frames, positions)})
    session.watcher.stage("solving the flux scale", len(batches))
    found: list[Any] = [None] * len(batches)

    def done(number: int, result: tasks.FrameEvidence) -> None:
        found[number] = result
        session.watcher.step()

    session.crew.run(tasks.frame_evidence, [(session.order, int(batch)) for batch in batches], done)
    chosen = session.order.settings.comparisons
    solved, said = ensemble.solved(
        frames["id"], frames["channel"], [f.frames for f in found], [f.comparisons for f in found], chosen, frames,
        _given_fluxes(session, positions),
    )  # fmt: skip
    session.run.write_columns("frame_solution.parquet", FRAME_SOLUTION, solved)
    return said


def _given_fluxes(session: Session, positions: Columns) -> dict[int, float]:
    """Fluxes in the user's table of comparisons, by position; they are found by their places, which are those of it."""
    given = session.comparisons
    if given is None:
        return {}
    flux = dict(
        zip(zip(given.ra.tolist(), given.dec.tolist(), strict=True), given.column("flux").tolist(), strict=True)
    )
    mine = positions["kind"] == "comparison"
    places = zip(positions["ra"][mine].tolist(), positions["dec"][mine].tolist(), strict=True)
    return {int(i): flux[place] for i, place in zip(positions["id"][mine], places, strict=True) if place in flux}
