"""The second half of `mine`: measured light curves to ranks, verdicts and the run's result tables.

No pixel is read here but for the cut-outs that a consistency check asks for, so a run whose plugins or judging settings
change comes straight here.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from hindlight import conclude, examining, host, judge, outcome, plan, store, tasks, tied
from hindlight.bright import Bright, apart
from hindlight.calibrate import Rank
from hindlight.candidates import Described, Examined
from hindlight.conclude import Field
from hindlight.crew import Crew
from hindlight.duplicates import counts
from hindlight.errors import NothingToDoError
from hindlight.fence import Fault, merged
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.order import Order
from hindlight.outcome import Outcome
from hindlight.plugin import Column
from hindlight.positions import Targets, first_controls, separation_deg, serves
from hindlight.schema import CHANNELS, STANDINGS
from hindlight.settings import Settings
from hindlight.store import Columns, RunFolder
from hindlight.systems import unit_vectors
from hindlight.tables import arrow_table, astropy_table, rows_to_columns, write_parquet, write_table


class Watcher(Protocol):
    """Whoever wants to know how far a run is."""

    def stage(self, name: str, total: int) -> None:
        """A stage begins, of `total` steps."""

    def step(self, n: int = 1) -> None:
        """Some steps of the stage are done."""


@dataclass(frozen=True)
class Session:
    """What every stage needs: the run folder, who works, what pieces of work are told, plugins, targets, who watches.

    `comparisons` are the user's own, None where they are to be chosen from the archive.
    """

    run: RunFolder
    crew: Crew
    order: Order
    plugins: host.Plugins
    targets: Targets
    watcher: Watcher
    comparisons: Targets | None = None


def all_columns(session: Session) -> dict[str, Column]:
    """Every column that is judged, by its full name."""
    return judge.full_columns([*session.plugins.statistics, *session.plugins.period_searches])


def ranked_fields(session: Session, frames: Columns, positions: Columns) -> list[Field]:
    """Every target judged and ranked, in fields of those that have one null, each with the controls that it had first."""
    columns = all_columns(session)
    fields = [
        *_fields(frames, positions, session.order.settings),
        *_searched_fields(session, frames, positions, columns),
    ]
    everyone = {found.number: found.ids for found in fields}
    judged = judged_in(session, fields, everyone, tasks.judge_positions, "judging")
    for found in fields:
        found.judgement = judged[found.number]
        conclude.rank(found, session.plugins, session.order.settings)
    fields, bright = _by_brightness(session, fields, columns)
    everything = [*fields, *(targets.apart for targets in bright)]
    if session.plugins.period_searches:
        gate = {found.number: conclude.gated(found, session.order.settings) for found in everything}
        searched = judged_in(session, everything, gate, tasks.search_positions, "searching periods")
        for found in everything:
            found.searched = gate[found.number]
            judge.spread(found.judgement, searched[found.number], found.rows(found.searched), columns)
        _ranked(session, fields, bright)
    return everything


def _by_brightness(
    session: Session, fields: Sequence[Field], columns: Mapping[str, Column]
) -> tuple[list[Field], list[Bright]]:
    """The fields without their bright targets, and these, ranked among controls made as bright as they are."""
    settings = session.order.settings
    left = tasks.residuals(session.order)
    n_targets = sum(len(found.targets) for found in fields)
    split = [apart(found, left, n_targets, settings) for found in fields]
    made = [targets for _, some in split for targets in some]
    if not made:
        return list(fields), []
    copies = {targets.number: targets.apart.controls for targets in made}
    lifted = [targets.apart for targets in made]
    judged = judged_in(session, lifted, copies, tasks.judge_positions, "judging controls as bright as targets")
    for targets in made:
        targets.judged(judged[targets.number], columns)
    rest = [found for found, _ in split]
    _ranked(session, rest, made)
    return rest, made


def _ranked(session: Session, fields: Sequence[Field], bright: Sequence[Bright]) -> None:
    for found in fields:
        conclude.rank(found, session.plugins, session.order.settings)
    for targets in bright:
        targets.ranked(session.plugins, session.order.settings)


def _fields(frames: Columns, positions: Columns, chosen: Settings) -> list[Field]:
    """The fields that hold targets, with which of their first controls may serve which target."""
    found = []
    is_control = first_controls(positions)
    is_target = (positions["kind"] == "target") & (positions["search"] < 0)
    for number in sorted(set(positions["field"][is_target].tolist())):
        here = positions["field"] == number
        targets, controls = positions["id"][is_target & here], positions["id"][is_control & here]
        found.append(field_of(frames, positions, int(number), targets, controls, chosen))
    return found


def field_of(
    frames: Columns, positions: Columns, number: int, targets: IntArray, controls: IntArray, chosen: Settings
) -> Field:
    """These targets and controls (ids) as a field, with which control may serve which target by its frames and place."""
    targets, controls = np.sort(targets), np.sort(controls)
    rows = [np.searchsorted(positions["id"], ids) for ids in (targets, controls)]
    vectors = [unit_vectors(positions["ra"][some], positions["dec"][some]) for some in rows]
    within = plan.field_frames(frames, vectors[0])
    in_frames = serves(within.covered, plan.covered(frames, within.rows, vectors[1]), chosen.controls.shared_frames)
    return Field(number, targets, controls, plan.serving_controls(positions, controls, in_frames))


def _searched_fields(
    session: Session, frames: Columns, positions: Columns, columns: Mapping[str, Column]
) -> list[Field]:
    """The targets that were searched, in fields apart, once the places tried have been compared."""
    tried = np.sort(positions["id"][positions["search"] >= 0])
    if len(tried) == 0:
        return []
    groups = _grouped(tried, session.order.settings.ranking.gather_curves)
    sizes = [len(ids) for ids in groups]
    parts = _collected(session, "comparing places", tasks.judge_brightness, [(ids,) for ids in groups], sizes)
    bright = judge.joined(parts, sizes, columns)
    vectors = unit_vectors(positions["ra"], positions["dec"])
    is_target = (positions["kind"] == "target") & (positions["search"] >= 0)
    is_middle = (positions["kind"] == "blank") & (positions["parent"] == positions["id"])
    found = []
    for row in np.flatnonzero(is_target).tolist():
        alike = is_middle & (positions["search"] == positions["search"][row])
        within = plan.field_frames(frames, vectors[[row]])
        covered = plan.covered(frames, within.rows, vectors[alike])
        in_frames = serves(within.covered, covered, session.order.settings.controls.shared_frames)
        found.append(conclude.searched(positions, int(positions["id"][row]), bright, tried, in_frames))
    return conclude.together(found)


def _collected(
    session: Session, stage: str, function: Callable[..., Any], jobs: Sequence[tuple[Any, ...]], sizes: Sequence[int]
) -> list[Any]:
    """The results of jobs in their order, each told the session's order first; `sizes` says how many steps each is."""
    session.watcher.stage(stage, sum(sizes))
    results: list[Any] = [None] * len(jobs)

    def done(number: int, result: Any) -> None:
        results[number] = result
        session.watcher.step(sizes[number])

    session.crew.run(function, [(session.order, *job) for job in jobs], done)
    return results


def _grouped(ids: IntArray, size: int) -> list[IntArray]:
    """The ids in groups of a fixed size."""
    return [ids[start : start + size] for start in range(0, len(ids), size)]


def judged_in(
    session: Session,
    fields: Sequence[Field],
    wanted: Mapping[int, IntArray],
    function: Callable[..., judge.Judgement],
    stage: str,
) -> dict[int, judge.Judgement]:
    """Each field's judgement of its wanted positions, made in groups of a fixed size."""
    size, columns = session.order.settings.ranking.gather_curves, all_columns(session)
    groups = {found.number: _grouped(wanted[found.number], size) for found in fields}
    jobs = [(ids, found.lift) for found in fields for ids in groups[found.number]]
    results = iter(_collected(session, stage, function, jobs, [len(ids) for ids, _ in jobs]))
    return {
        number: judge.joined([next(results) for _ in mine], [len(ids) for ids in mine], columns)
        for number, mine in groups.items()
    }


@dataclass(frozen=True, eq=False)
class Place:
    """A target among all of the run: its field, its place in the field, its place in the run, its id and its name."""

    found: Field
    index: int
    at: int
    target: int
    name: str

    @property
    def rank(self) -> Rank:
        """Where it stands among its controls."""
        return self.found.ranked.ranks[self.index]


def places_of(fields: Sequence[Field], positions: Columns) -> list[Place]:
    """Every target, in order of field and id."""
    flat = [(found, index, int(target)) for found in fields for index, target in enumerate(found.targets)]
    names = positions["name"][plan.owners(positions, np.array([target for _, _, target in flat], np.int64))]
    return [Place(f, index, at, target, str(names[at])) for at, (f, index, target) in enumerate(flat)]


def tabled(
    session: Session,
    frames: Columns,
    positions: Columns,
    rejects: Sequence[Mapping[str, Any]],
    fields: Sequence[Field],
    said: Sequence[str],
) -> Outcome:
    """Every target of the ranked fields examined and described; the result tables, made and written.

    `said` are sentences for the last lines that earlier stages have to say.
    """
    settings, plugins = session.order.settings, session.plugins
    places = places_of(fields, positions)
    ranks = [place.rank for place in places]
    p = conclude.p_values(ranks, settings, [place.found.group_size for place in places])
    with np.errstate(invalid="ignore"):
        beyond = p.q < settings.ranking.level
    examined = _examined(session, places, beyond)
    described = _described(session, places, [*zip(beyond.tolist(), p.testable.tolist(), strict=True)], examined)
    cells = {found.number: outcome.plugin_cells(found, plugins) for found in fields}
    errors = dict(zip(session.targets.names, session.targets.position_error.tolist(), strict=True))
    beams, serves, rows = _beams(frames, settings), tied.of_targets(positions, frames, settings), []
    for place, cells_of in zip(places, described, strict=True):
        found, where = place.found, int(np.searchsorted(positions["id"], place.target))
        row = dict(cells[found.number][int(np.searchsorted(found.ids, place.target))])
        row |= examined[place.at].cells if place.at in examined else {}
        row |= {**cells_of.cells, **outcome.chance_cells(found, place.index, place.at, p)}
        stated = int(plan.owners(positions, np.array([place.target]))[0])
        row |= {"name": place.name, "ra": float(positions["ra"][stated]), "dec": float(positions["dec"][stated])}
        row["n_trials"] = found.n_trials
        if found.n_trials > 1:
            row |= {"found_ra": float(positions["ra"][where]), "found_dec": float(positions["dec"][where])}
        beam = min((beams[row["channel"]] for row in cells_of.channels if row["channel"] in beams), default=np.inf)
        apart = _distances(positions, stated, where)
        known = (
            outcome.place_note(found, apart, errors.get(place.name, 0.0), settings.search.most_places, beam),
            serves.get(place.target, ""),
            tied.untied_note(cells_of.channels, settings),
        )
        row["notes"] = outcome.notes(found, place.index, place.at, p, settings.controls, known)
        rows.append(row)
    faults = [f for found in fields for f in found.judgement.faults] + [f for e in examined.values() for f in e.faults]
    meta = outcome.meta(settings, p, fields)
    table = outcome.candidate_table(rows, plugins, meta)
    sizes = [int(place.found.ranked.n_controls[place.index]) for place in places]
    said = [*said, *outcome.undecided_remarks(described, sizes, p, settings.detection.min_frames)]
    result = _result(session.run, table, described, frames, rejects, merged(faults), p, fields, settings, said)
    _write(session, result, described, fields, {place.target: place.name for place in places}, meta)
    return result


def _beams(frames: Columns, settings: Settings) -> dict[str, float]:
    """The median width of the beam or seeing of each channel, in arcsec."""
    labels = np.asarray(frames["channel"], object)
    rows_of = {str(label): np.flatnonzero(labels == label) for label in sorted(set(labels.tolist()))}
    width = settings.photometry.assumed_fwhm_pixels
    return {label: 3600.0 * float(np.median(plan.beams(frames, rows, width))) for label, rows in rows_of.items()}


def _distances(positions: Columns, stated: int, judged: int) -> FloatArray:
    """How far the place judged, and the place tried furthest out, are from the stated one (rows), in arcsec."""
    tried = np.flatnonzero(positions["parent"] == positions["id"][stated])
    rows = np.array([judged, *tried.tolist()])
    apart = separation_deg(
        unit_vectors(positions["ra"][rows], positions["dec"][rows]),
        unit_vectors(positions["ra"][[stated]], positions["dec"][[stated]]),
    )
    return np.array([apart[0, 0], apart.max()]) * 3600.0


def _examined(session: Session, places: Sequence[Place], beyond: NDArray[np.bool_]) -> dict[int, Examined]:
    """Periods and checks of the targets beyond chance, by their place in the run."""
    chosen = [place for place in places if beyond[place.at]]
    jobs = [
        (place.target, place.found.blank_sky, {k: v.above_quiet for k, v in place.found.thresholds.items()})
        for place in chosen
    ]
    results = _collected(session, "examining candidates", examining.examine_target, jobs, [1] * len(jobs))
    return {place.at: result for place, result in zip(chosen, results, strict=True)}


def _described(
    session: Session, places: Sequence[Place], decided: Sequence[tuple[bool, bool]], examined: Mapping[int, Examined]
) -> list[Described]:
    """What the tables say of every target from its light curves."""
    listed = {name: row for row, name in enumerate(session.targets.names)}
    columns = {name: session.targets.column(name) for name in outcome.NO_EPHEMERIS}
    by_field: dict[int, list[Place]] = {}
    for place in places:
        by_field.setdefault(place.found.number, []).append(place)
    size = session.order.settings.ranking.gather_curves
    groups = [mine[start : start + size] for mine in by_field.values() for start in range(0, len(mine), size)]
    jobs = []
    for group in groups:
        given = [
            {k: float(v[listed[place.name]]) for k, v in columns.items()}
            if place.name in listed
            else outcome.NO_EPHEMERIS
            for place in group
        ]
        ids = np.array([place.target for place in group])
        judged = [decided[place.at] for place in group]
        jobs.append((ids, group[0].found.thresholds, given, judged, [examined.get(place.at) for place in group]))
    results = _collected(session, "describing targets", tasks.describe_targets, jobs, [len(group) for group in groups])
    return [said for result in results for said in result]


def _result(
    run: RunFolder,
    table: Any,
    described: Sequence[Described],
    frames: Columns,
    rejects: Sequence[Mapping[str, Any]],
    faults: Sequence[Fault],
    p: conclude.PValues,
    fields: Sequence[Field],
    settings: Settings,
    said: Sequence[str],
) -> Outcome:
    """The run's outcome in numbers."""
    units = dict(zip(frames["channel"].tolist(), frames["unit"].tolist(), strict=True))
    return Outcome(
        run=run.path,
        table=table,
        standings={word: int(np.sum(table["standing"] == word)) for word in STANDINGS},
        n_frames=int(np.count_nonzero(counts(frames))),
        n_measurements=int(sum(row["n_frames"] for target in described for row in target.channels)),
        rejects=dict(sorted(Counter(str(row["reason"]) for row in rejects).items())),
        faults=tuple(faults),
        extrapolated=int(p.extrapolated.sum()),
        remarks=(*outcome.related_frames(frames), *said, *outcome.remarks(p, fields, settings, units)),
    )


def _write(
    session: Session,
    result: Outcome,
    described: Sequence[Described],
    fields: Sequence[Field],
    names: Mapping[int, str],
    meta: Mapping[str, Any],
) -> None:
    """Write every result table, the candidate table last; raises `NothingToDoError` where no target is covered."""
    run = session.run
    channel_rows = [row for said in described for row in said.channels]
    write_table(run.file("channels.ecsv"), astropy_table(CHANNELS, rows_to_columns(CHANNELS, channel_rows), meta))
    write_table(run.file("plugin_faults.ecsv"), outcome.fault_table(result.faults))
    statistics = outcome.statistic_columns(fields, names, session.plugins)
    write_parquet(run.file("statistics.parquet"), arrow_table(*statistics))
    write_parquet(run.file("controls.parquet"), arrow_table(*outcome.control_columns(fields, session.plugins)))
    store.write_text(run, "summary.txt", outcome.summary(result))
    for ending in (".fits", ".vot", ".ecsv"):
        write_table(run.file(f"candidates{ending}"), result.table)
    if result.standings["uncovered"] == len(result.table):
        raise NothingToDoError(f"no target has a usable pixel in any of the {result.n_frames} frames; see rejects.ecsv")
