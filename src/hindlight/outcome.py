"""The tables a run ends with: candidates, controls, statistics and plugin faults, with their metadata.

Pure: what was judged, ranked and examined in, tables out. Nothing is written here.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import astropy.table
import numpy as np

from hindlight import candidates, ranking
from hindlight.candidates import Described
from hindlight.conclude import Field, PValues
from hindlight.fence import Fault, blank
from hindlight.host import Plugins
from hindlight.judge import full_columns
from hindlight.lifted import COPY
from hindlight.lightcurve import FloatArray
from hindlight.plugin import Column, ConsistencyCheck, Statistic
from hindlight.ranking import FEWEST_BLANK
from hindlight.schema import CANDIDATES, PLUGIN_FAULTS, TableColumn
from hindlight.settings import Controls, Settings
from hindlight.tables import astropy_table, rows_to_columns
from hindlight.tails import MISFIT, Extrapolation
from hindlight.wording import from_to, how_many, short

CAUTION = (
    "A low p_value says that a position varies unlike blank sky in the same frames, not what it is. Look at the frames, "
    "at the other frames of the same night, and for a second instrument, before telescope time or a claim rests on it."
)

HONEST_ERRORS = 1.25  # blank sky that scatters by more than this times its errors, or less than its inverse, is said
MATTERS = 0.2  # of the beam: a position error that small loses 10 % of a Gaussian's peak flux at 1 sigma
NO_EPHEMERIS = dict.fromkeys(("period", "epoch", "period_dot", "window"), float("nan"))


def plugin_cells(found: Field, plugins: Plugins) -> list[dict[str, Any]]:
    """For every position of a field the plugins' columns, each plugin's in the channel where it is furthest out."""
    columns = full_columns([*plugins.statistics, *plugins.period_searches])
    controls = found.rows(found.controls)
    cells: list[dict[str, Any]] = [{} for _ in range(len(found.ids))]
    for plugin in [*plugins.statistics, *plugins.period_searches]:
        labels = ranking.reported_channels(found.judgement, plugin, columns, controls)
        for index, label in enumerate(labels):
            if isinstance(plugin, Statistic) and not plugin.all_channels:
                cells[index][f"{plugin.name}_channel"] = label
            for column in plugin.columns:
                full = f"{plugin.name}_{column.name}"
                values = found.judgement.values.get((label, full))
                cells[index][full] = blank(column) if values is None else values[index]
    return cells


def plugin_columns(plugins: Plugins) -> list[TableColumn]:
    """The declared columns of the candidate table's plugin blocks."""
    made: list[TableColumn] = []
    for plugin in [*plugins.statistics, *plugins.period_searches, *plugins.checks]:
        if isinstance(plugin, ConsistencyCheck):
            made.append(
                TableColumn(f"{plugin.name}_verdict", "pass, fail or uninformative; '' if not asked", dtype="str")
            )
            made.append(TableColumn(f"{plugin.name}_evidence", "why, in a sentence", dtype="str"))
        if isinstance(plugin, Statistic) and not plugin.all_channels:
            where = "channel of these columns: where they are furthest out"
            made.append(TableColumn(f"{plugin.name}_channel", where, dtype="str"))
        made += [_full(plugin.name, column) for column in plugin.columns]
    return made


def _full(name: str, column: Column) -> TableColumn:
    flux = "" if column.flux_power == 0 else f" (in flux unit to the power {column.flux_power:g} of that channel)"
    return TableColumn(f"{name}_{column.name}", column.doc + flux, column.unit, column.ucd, column.dtype)


def chance_cells(found: Field, index: int, at: int, p: PValues) -> dict[str, Any]:
    """The columns of a target that come from its rank; `at` is its place among all targets of the run."""
    rank, deciding = found.ranked.ranks[index], found.ranked.deciding[index]
    tail = p.tails.get(at, Extrapolation())
    channel, column = deciding or ("", "")
    return {
        "p_value": p.p[at],
        "q_value": p.q[at],
        "p_is_extrapolated": bool(p.extrapolated[at]),
        "p_empirical": p.empirical[at],
        "tail_shape": tail.shape,
        "tail_n": tail.n,
        "tail_fit_p": tail.fit_p,
        "lowest_p_statistic": f"{column} in {channel}" if channel else column,
        "beyond_controls": rank.beyond,
        "n_controls": int(found.ranked.n_controls[index]),
        "n_effective": float(found.ranked.n_controls[index] / found.group_size),
        "null": null_of(found),
        "unlike": float(found.unlike[index]),
    }


def null_of(found: Field) -> str:
    """What the controls of a field are."""
    if found.lift is None:
        return "blank sky"
    levels = ", ".join(f"{level:.3g} in {label}" for label, level in sorted(found.lift.levels.items()))
    return f"blank sky and the residuals of comparisons, scaled to a flux of {levels}"


def notes(found: Field, index: int, at: int, p: PValues, controls: Controls, known: Sequence[str] = ()) -> str:
    """What a reader should know before trusting a row; `known` is what others have to say of it, '' for nothing."""
    n_controls = int(found.ranked.n_controls[index])
    said = []
    if p.short[at]:
        counted = f" that count as {n_controls / found.group_size:.3g}" if found.group_size > 1 else ""
        are = how_many(n_controls, "control", "controls")
        said.append(f"{are}{counted} cannot decide at this level, {p.needed} are needed")
    if p.extrapolated[at]:
        said.append("p_value is the upper bound of a fitted tail, beyond every control")
    if (tail := p.tails.get(at)) is not None and tail.rejected:
        said.append(f"the tail of its controls does not fit (p = {tail.fit_p:.2g}) and is not used")
    if n_controls == 0:
        said.append("no control serves this target: no p-value")
    if (left_out := _too_unlike(found, index, controls)) > 0:
        said.append(
            f"{left_out} more controls were left out, whose noise is unlike its own by more than a factor "
            f"{controls.most_unlike:g} ([controls] most_unlike)"
        )
    return "; ".join([*said, *filter(None, known)])


def _too_unlike(found: Field, index: int, controls: Controls) -> int:
    """How many controls would have served a target that has few, had they not been too unlike it."""
    n_controls = int(found.ranked.n_controls[index])
    if n_controls >= controls.fewest_alike or found.lift is not None:
        return 0
    rows = found.rows(found.targets[[index]]), found.rows(found.controls)
    anyhow, _ = ranking.matched(found.judgement, *rows, found.serving[[index]], controls, bounded=False)
    return int(anyhow.sum()) - n_controls


def place_note(found: Field, distances: FloatArray, error: float, most_places: int, beam: float) -> str:
    """What is to be said of the place a target was judged at; '' where it is the stated one and its error small.

    `distances` in arcsec from the stated place: of the place judged, and of the one tried furthest out; `error` is the
    target's position error and `beam` the narrowest width at half maximum of its channels, in arcsec.
    """
    if found.n_trials == 1:
        if not error > MATTERS * beam:
            return ""
        lost = 100 * (1 - 2 ** (-4 * (error / beam) ** 2))  # a Gaussian beam of that width
        return (
            f"measured at the stated place only: off by its error of {error:g} arcsec, {lost:.0f} % of the flux would be "
            f"lost in a beam of {beam:.3g} arcsec"
        )
    said = (
        f"searched at {found.n_trials} places up to {distances[1]:.4g} arcsec from the stated one, as its controls were; "
        f"judged {distances[0]:.4g} arcsec away from it"
    )
    return said + ("; [search] most_places left out those further away" if found.n_trials >= most_places else "")


def related_frames(frames: Mapping[str, Any]) -> tuple[str, ...]:
    """What the last lines say of copies and of deep images; nothing where there are none."""
    said = []
    copies = int(np.count_nonzero((frames["duplicate_of"] >= 0) & (frames["state"] != "void")))
    if copies:
        kept = "of an exposure that is kept, and"
        are = how_many(copies, f"frame is a copy {kept} counts", f"frames are copies {kept} count")
        said.append(f"duplicates: {are} nowhere (rejects.ecsv)")
    holds = np.unique(frames["related_to"][frames["related_to"] >= 0])
    parts = int(np.count_nonzero((frames["related_to"] >= 0) & ~np.isin(frames["id"], holds)))
    if parts:
        said.append(
            f"related: {how_many(len(holds), 'deep image holds', 'deep images hold')} {parts} of the other frames: those are "
            "judged for variability, the deep ones count for the quiet level alone (channels.ecsv)"
        )
    return tuple(said)


def undecided_remarks(
    described: Sequence[Described], n_controls: Sequence[int], p: PValues, min_frames: int
) -> list[str]:
    """Why targets that frames cover are undecided, in a sentence for each reason; those without any control are not here.

    Targets in the order of `p`, with how many controls each was ranked with.
    """
    reasons: Counter[str] = Counter()
    for said, controls, empirical in zip(described, n_controls, p.empirical.tolist(), strict=True):
        if said.cells["standing"] != "undecided":
            continue
        if max((int(row["n_used"]) for row in said.channels), default=0) < min_frames:
            reasons[f"fewer than {min_frames} usable frames in every channel"] += 1
        elif controls:
            few = (
                "beyond every control, and these are too few to decide, by themselves or by their tail; more controls or "
                "fewer targets can ([controls] per_field and most_per_field)"
            )
            reasons[few if np.isfinite(empirical) else "no statistic that can be ranked"] += 1
    return [f"{how_many(n, 'target is', 'targets are')} undecided: {why}" for why, n in sorted(reasons.items())]


def remarks(p: PValues, fields: Sequence[Field], settings: Settings, units: Mapping[str, str]) -> tuple[str, ...]:
    """What the last lines of a run must say; `units` are those of flux by channel."""
    said = []
    sizes = [int(n) for found in fields for n in found.ranked.n_controls]
    alone = sum(size == 0 for size in sizes)
    if alone:
        has = how_many(alone, "target has", "targets have")
        said.append(f"{has} no control and so no p-value: nothing is said of their variation")
    said += [*_trial_remarks(p, fields), *_placing_remarks(fields, settings)]
    said += _search_remarks(fields, settings)
    if p.short.any():
        lie = how_many(int(p.short.sum()), "target lies", "targets lie")
        lit = any(found.group_size > 1 for found in fields)
        said.append(
            f"{lie} beyond every control, but their number cannot decide at q < {settings.ranking.level:g}: {p.needed} "
            "controls would ([controls] per_field and most_per_field, [search] controls"
            + ("; for bright targets as many [comparisons] wanted, too)" if lit else ")")
        )
    said += [
        *_threshold_remarks(fields), *_error_remarks(fields), *_confusion_remarks(fields, units), *_level_remarks(fields)
    ]  # fmt: skip
    if p.extrapolated.any():
        are = how_many(int(p.extrapolated.sum()), "p-value is the upper bound", "p-values are upper bounds")
        said.append(f"{are} of a fitted tail (p_is_extrapolated)")
    if rejected := sum(tail.rejected for tail in p.tails.values()):
        are = how_many(rejected, "target has", "targets have")
        said.append(
            f"{are} controls whose tail does not fit at p < {MISFIT:g} (tail_fit_p): p_value is from ranks alone"
        )
    return tuple(said)


def _trial_remarks(p: PValues, fields: Sequence[Field]) -> list[str]:
    """What was tried: how many targets q counts, and out of how many columns each one's smallest rank is."""
    counted = int(np.isfinite(p.p).sum())
    keys = [len(found.ranked.keys) for found in fields if found.ranked.keys]
    if not (counted and keys):
        return []
    channels = {channel for found in fields for channel, _ in found.ranked.keys if channel}
    return [
        f"counted as trials: {how_many(counted, 'target', 'targets')} (q_value), and for each {from_to(min(keys), max(keys))} "
        f"ranked columns in {how_many(len(channels), 'channel', 'channels')} (p_value), as for its controls"
    ]


def _placing_remarks(fields: Sequence[Field], settings: Settings) -> list[str]:
    """Why there are fewer controls than were asked for; targets are in the way where they outnumber them."""
    plain, wanted = [found for found in fields if _is_plain(found)], settings.controls.per_field
    sizes = [int(n) for found in plain for n in found.ranked.n_controls]
    if not sizes or min(sizes) >= wanted:
        return []
    said = f"controls per target: {from_to(min(sizes), max(sizes))}, {wanted} were asked for; "
    if not all(len(found.controls) < wanted for found in fields if not found.lift):
        return [said + "more were measured, but in fewer frames or with another noise"]
    targets = sum(len(found.targets) for found in fields)
    said += (
        f"no more fit into the frames clear of sources, of {how_many(targets, 'target', 'targets')} and of each other"
    )
    many = targets > sum(len(found.controls) for found in plain)
    return [said + ("; a shorter list, or one split into runs, leaves room for more" if many else "")]


def _is_plain(found: Field) -> bool:
    """Whether a field holds blank sky as it was chosen first: no places that were chosen, no copies, none added."""
    return found.n_trials == 1 and found.lift is None and not found.n_passes


def _search_remarks(fields: Sequence[Field], settings: Settings) -> list[str]:
    """Targets that were searched within their position errors."""
    found = [f for f in fields if f.n_trials > 1]
    if not found:
        return []
    each = [(f, max(1, len(f.controls) // max(1, len(f.blank_sky)))) for f in found]  # copies for bright targets
    trials, sizes = [f.n_trials for f in found], [int(n) // k for f, k in each for n in f.ranked.n_controls]
    one, several = "target was searched within its position error", "targets were searched within their position errors"
    were = how_many(len(sizes), one, several)
    noun = "control" if max(sizes) == 1 else "controls"
    said = (
        f"{were} at "
        f"{from_to(min(trials), max(trials))} places each, with {from_to(min(sizes), max(sizes))} {noun} searched alike"
    )
    short = min(sizes) < settings.search.controls
    return [said + (f"; {settings.search.controls} were asked for, no more fit into the frames" if short else "")]


def _threshold_remarks(fields: Sequence[Field]) -> list[str]:
    """Targets whose detection thresholds no blank positions could set."""
    assumed = sum(
        len(found.targets) for found in fields if any(limits.n_controls == 0 for limits in found.thresholds.values())
    )
    if not assumed:
        return []
    return [
        f"detection thresholds of {assumed} targets are, in some channel, those of Gaussian noise: fewer than {FEWEST_BLANK} "
        "controls without a source of their own are measured there; real noise has more outliers (n_detected)"
    ]


def _error_remarks(fields: Sequence[Field]) -> list[str]:
    """Channels whose stated errors are not the scatter of blank sky."""
    scatter: dict[str, list[float]] = {}
    for found in fields:
        controls = found.rows(found.controls)
        for (label, full), values in found.judgement.values.items():
            if full == "core_reduced" and controls.size and _is_plain(found):
                scatter.setdefault(label, []).extend(np.sqrt(values[controls][np.isfinite(values[controls])]).tolist())
    said = []
    for label, values in sorted(scatter.items()):
        factor = float(np.median(values)) if values else 1.0
        if not 1 / HONEST_ERRORS < factor < HONEST_ERRORS:
            said.append(
                f"errors in {label} are not the scatter of blank sky, which is {factor:.2f} times as large: standings and "
                "p-values hold, since the controls have the same errors, but S/N, mean errors and limits do not"
            )
    return said


def _confusion_remarks(fields: Sequence[Field], units: Mapping[str, str]) -> list[str]:
    """Channels in which faint sources and diffuse emission, not noise, bound what can be said of a mean flux."""
    worst: dict[str, float] = {}
    for found in fields:
        for label, limits in found.thresholds.items() if found.lift is None else ():
            error = found.judgement.values[label, "core_mean_err"][found.rows(found.controls)]
            if limits.confusion > 0 and limits.confusion > np.nanmedian(error):
                worst[label] = max(worst.get(label, 0.0), limits.confusion)
    return [
        f"mean fluxes of blank positions in {label} scatter by {confusion:.3g} {units[label] or 'of the image'} "
        "(rms) more than their errors explain: confusion or diffuse emission, which bounds on the total flux contain "
        "(confusion_rms in channels.ecsv)"
        for label, confusion in sorted(worst.items())
    ]


def _level_remarks(fields: Sequence[Field]) -> list[str]:
    """Channels in which blank positions measure less than nothing by more than the error of a mean."""
    lowest: dict[str, float] = {}
    for found in fields:
        for label, limits in found.thresholds.items() if found.lift is None else ():
            error = found.judgement.values[label, "core_mean_err"][found.rows(found.controls)]
            if limits.level < 0 and -limits.level > np.nanmedian(error):
                lowest[label] = min(lowest.get(label, 0.0), limits.level)
    return [
        f"blank positions in {label} measure down to {level:.3g} in the median, not 0: among many sources the local background "
        "comes out too high; fluxes are as measured, limits on them allow for it (blank_level in channels.ecsv)"
        for label, level in sorted(lowest.items())
    ]


def meta(settings: Settings, p: PValues, fields: Sequence[Field]) -> dict[str, Any]:
    """Metadata of the result tables: the levels in force, and the usual caution."""
    return {
        "caution": CAUTION,
        "false_discovery_level": settings.ranking.level,
        "detection_false_alarm_rate": settings.detection.false_alarms,
        "detection_rule": "a blank position has any detection, in any channel, with this chance (from the controls)",
        "limit_confidence": 0.95,
        "controls_needed_for_one_candidate": p.needed,
        "n_fields": len(fields),
    }


@dataclass(frozen=True, eq=False)
class Outcome:
    """What a run ends with: the candidate table, counts of standings, and numbers for the last lines."""

    run: Path
    table: astropy.table.Table
    standings: Mapping[str, int]
    n_frames: int
    n_measurements: int
    rejects: Mapping[str, int]
    faults: tuple[Fault, ...]
    extrapolated: int
    remarks: tuple[str, ...]


def summary(result: Outcome) -> str:
    """The text of summary.txt, which is also what a run says at its end."""
    counted = ", ".join(f"{n} {word}" for word, n in result.standings.items() if n)
    lines = [
        f"{len(result.table)} targets, {result.n_frames} frames, {result.n_measurements} measurements of targets",
        f"standings: {counted}",
    ]
    aside = ", ".join(f"{n} {reason}" for reason, n in result.rejects.items())
    lines.append(f"set aside: {aside or 'nothing'}" + (" (rejects.ecsv)" if aside else ""))
    count = sum(fault.count for fault in result.faults)
    names = sorted({fault.plugin for fault in result.faults})
    lines.append(
        f"plugin faults: {count or 'none'}" + (f" in {', '.join(names)} (plugin_faults.ecsv)" if count else "")
    )
    return "\n".join([*lines, *result.remarks, CAUTION]) + "\n"


def shown(rows: Sequence[Mapping[str, Any]]) -> tuple[list[str], list[list[str]]]:
    """What is printed of some rows of the candidate table: names of columns, and the cells of each row.

    A p-value that is the bound of a tail is marked, its q-value too, and never stands without that of the controls beside it.
    """
    names = ["name", "standing", "p", "q", "seen/used", "peak S/N", "first seen", "period (s)"]
    beside = any(row["p_is_extrapolated"] for row in rows)
    if beside:
        names.insert(3, "by controls")
    cells = []
    for row in rows:
        mark = "<" if row["p_is_extrapolated"] else ""
        cells.append([
            str(row["name"]), str(row["standing"]), short(row["p_value"], mark),
            *([short(row["p_empirical"])] if beside else []), short(row["q_value"], mark),
            f"{row['n_detected']}/{row['n_used']}", short(row["peak_snr"]), str(row["first_detected"])[:19],
            short(row["period"], digits=8),
        ])  # fmt: skip
    return names, cells


def candidate_table(
    rows: Sequence[Mapping[str, Any]], plugins: Plugins, meta: Mapping[str, Any]
) -> astropy.table.Table:
    """The candidate table, best first."""
    declared = [*CANDIDATES, *plugin_columns(plugins)]
    arranged = [rows[i] for i in candidates.order(rows)]
    blanks = {"str": "", "bool": False, "int64": 0, "float64": float("nan")}
    values = {c.name: [row.get(c.name, blanks[c.dtype]) for row in arranged] for c in declared}
    return astropy_table(declared, values, meta)


def control_columns(fields: Sequence[Field], plugins: Plugins) -> tuple[list[TableColumn], dict[str, Any]]:
    """The controls' table: id, field, every calibrated column, and each control's p-value among the others.

    A control has one row, though the sets of second passes hold those of earlier ones.
    """
    calibrated = [
        _full(plugin.name, column)
        for plugin in [*plugins.statistics, *plugins.period_searches]
        for column in plugin.columns
        if column.unusual is not None
    ]
    declared = [
        TableColumn("id", "identifier of the position", dtype="int64", ucd="meta.id"),
        TableColumn("field", "cell of sky; below zero for targets apart", dtype="int64"),
        TableColumn("copy", "0: as measured; k: made as bright as the field's targets, the k-th time", dtype="int64"),
        *calibrated,
        TableColumn("p_value", "rank of the control among all controls of its field", ucd="stat.probability"),
    ]
    values: dict[str, list[Any]] = {c.name: [] for c in declared}
    told: set[int] = set()
    for found in fields:
        cells = plugin_cells(found, plugins)
        for control, row, p in zip(found.controls, found.rows(found.controls), found.ranked.control_p, strict=True):
            if found.n_passes and int(control) in told:
                continue
            told.add(int(control))
            values["id"].append(int(control) % COPY)
            values["copy"].append(int(control) // COPY)
            values["field"].append(found.number)
            values["p_value"].append(float(p))
            for column in calibrated:
                values[column.name].append(float(cells[row][column.name]))
    return declared, values


def statistic_columns(
    fields: Sequence[Field], names: Mapping[int, str], plugins: Plugins
) -> tuple[list[TableColumn], dict[str, Any]]:
    """Every statistic of every target in every channel ('' for all together): one row per target and channel."""
    declared = [
        TableColumn("name", "target", dtype="str", ucd="meta.id;src"),
        TableColumn("channel", "key of comparable fluxes; '' for all channels together", dtype="str"),
        *[_full(p.name, c) for p in [*plugins.statistics, *plugins.period_searches] for c in p.columns],
    ]
    rows = []
    for found in fields:
        labels = sorted({channel for channel, _ in found.judgement.values})
        for target, index in zip(found.targets, found.rows(found.targets), strict=True):
            for label in labels:
                cells = {full: v[index] for (channel, full), v in found.judgement.values.items() if channel == label}
                rows.append({"name": names[int(target)], "channel": label, **cells})
    return declared, rows_to_columns(declared, rows)


def fault_table(faults: Sequence[Fault]) -> astropy.table.Table:
    """plugin_faults.ecsv."""
    rows = [{c.name: getattr(fault, c.name) for c in PLUGIN_FAULTS} for fault in faults]
    return astropy_table(PLUGIN_FAULTS, rows_to_columns(PLUGIN_FAULTS, rows))
