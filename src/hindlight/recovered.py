"""The tables and last lines of `hindlight completeness`, from what became of made-up sources."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import astropy.table
import numpy as np

from hindlight import completeness, planted, unseen
from hindlight.chances import Made, Seen, chance
from hindlight.completeness import Found, Injection, Null
from hindlight.completeness_schema import COMPLETENESS, COMPLETENESS_CHANNELS, COMPLETENESS_LIMITS, COMPLETENESS_TARGETS
from hindlight.duplicates import counts
from hindlight.hiding import Places, Used, places_said
from hindlight.lightcurve import FloatArray
from hindlight.looks import Looks
from hindlight.order import book
from hindlight.settings import Controls
from hindlight.store import RunFolder
from hindlight.study import Study
from hindlight.tables import astropy_table, read_ecsv, rows_to_columns
from hindlight.trials import (
    ALL,
    Outcomes,
    looks_of,
)
from hindlight.wording import from_to, how_many

MOST_BEYOND_ROUNDING, MOST_NONLINEAR = 0.02, 1e-6  # sigma: what pixels may differ by from light curves
FEWEST_FOR_TAIL = 40  # controls: fewer show no tail, see `tails.extrapolate`
SEARCHED = (
    "target that was searched within its position error is",
    "targets that were searched within their position errors are",
)
UPPER_BOUND = (
    "sources are added to images as they are: what deconvolution does to a source that flickers is not in it, so for "
    "synthesis images completeness is an upper bound"
)


def metadata(study: Study, units: Mapping[str, float]) -> dict[str, Any]:
    """What the tables say of themselves."""
    chosen = study.settings.completeness
    return {
        "rule": "recovered: the p-value is below what those of this run's target list leave for one more target at its "
        "false-discovery level; ranked among the other controls, by the tail bound where these cannot decide",
        "false_discovery_level": study.settings.ranking.level,
        "p_value_bar": study.bars.final,
        "seed": chosen.seed,
        "period_search": chosen.period_search,
        "median_frame_error": {label: float(f"{unit:.6g}") for label, unit in units.items()},
        "interval": "95 %, Jeffreys: Brown, Cai & DasGupta 2001, Stat. Sci. 16, 101",
        "caution": UPPER_BOUND,
    }


def completeness_table(
    study: Study, at: Mapping[str, Places], wanted: Mapping[str, Sequence[Injection]], outcomes: Mapping[str, Outcomes],
    meta: Mapping[str, Any],
) -> astropy.table.Table:  # fmt: skip
    """completeness.ecsv; a subset without sources has no row."""
    rows = []
    for subset in study.subsets:
        if subset.name not in outcomes:
            continue
        outcome, there = outcomes[subset.name], at[subset.name]
        of_cell = np.array([one.cell for one in wanted[subset.name]])
        for number, cell in enumerate(study.cells):
            row = {
                "subset": subset.name, "instrument": subset.instrument, "decade": subset.decade,
                "n_frames": len(subset.frames), "n_fields": there.n_fields, "n_targets": there.n_targets,
                "n_hosts": len(there.ids), "kind": cell.kind, "flux": cell.flux, "period": cell.period_s,
                "duty_cycle": cell.duty_cycle, "duration": cell.duty_cycle * cell.period_s,
                "window": cell.window * cell.duty_cycle * cell.period_s, "missing": cell.missing,
            }  # fmt: skip
            rows.append(row | completeness.summary_row(of_cell == number, outcome.found, outcome.extra))
    return astropy_table(COMPLETENESS, rows_to_columns(COMPLETENESS, rows), meta)


@dataclass(frozen=True, eq=False)
class TargetTables:
    """completeness_targets.ecsv, completeness_limits.ecsv and completeness_channels.ecsv."""

    targets: astropy.table.Table
    limits: astropy.table.Table
    channels: astropy.table.Table


def target_tables(
    study: Study, run: RunFolder, made: Mapping[str, Made], shown: tuple[int, int], used: Mapping[str, Used],
    ephemerides: Any, meta: Mapping[str, Any],
) -> TargetTables:  # fmt: skip
    """The tables about targets, from made-up sources and targets' frames, both by subset.

    `shown` is how many frames show made-up pulses that surely should, and how many should.
    """
    candidates = {str(row["name"]): row for row in read_ecsv(run.file("candidates.ecsv"))}
    channels = book(study.order.run, study.order.version).channels
    rows: list[dict[str, Any]] = []
    limits: list[dict[str, Any]] = []
    each: list[dict[str, Any]] = []
    for name, looks, cycles in _looks_of_targets(study, run, ephemerides):
        row = candidates[name]
        has = {subset: sum(of.get(name, {}).values()) for subset, of in used.items()}
        seen = Seen(str(row["standing"]), _like_flux(row, looks), _seen_share(row), float(row["period"]), has)
        told = _target_row(name, seen, looks, cycles) | chance(
            seen, made, study.cells, study.settings.completeness.per_cell
        )
        if seen.standing == "unseen":
            told |= unseen.over_all(looks)
            limits += unseen.by_flux(name, looks, sorted(study.settings.completeness.fluxes))
            for number, label in enumerate(looks.labels):
                mine = looks.within(number)
                if mine.n:
                    each.append({"name": name, **unseen.in_channel(mine, number, channels[label].unit, cycles, shown)})
        rows.append(told)
    return TargetTables(
        astropy_table(COMPLETENESS_TARGETS, rows_to_columns(COMPLETENESS_TARGETS, rows), meta),
        astropy_table(COMPLETENESS_LIMITS, rows_to_columns(COMPLETENESS_LIMITS, limits), meta),
        astropy_table(COMPLETENESS_CHANNELS, rows_to_columns(COMPLETENESS_CHANNELS, each), meta),
    )


def _looks_of_targets(study: Study, run: RunFolder, ephemerides: Any) -> list[tuple[str, Looks, bool]]:
    """Every target judged at its stated place: its name, its looks, and whether they are cycles."""
    channels = read_ecsv(run.file("channels.ecsv"))
    positions = book(study.order.run, study.order.version).positions
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
    return [(name, *one) for name, one in zip(names, looks, strict=True)]


def _like_flux(row: Any, looks: Looks) -> float:
    """The highest S/N in a frame of a candidate that is detected, else its lowest threshold; NaN without frames."""
    like = float(row["peak_snr"]) if row["n_detected"] else float(np.min(looks.threshold, initial=np.inf))
    return like if np.isfinite(like) else float("nan")


def _seen_share(row: Any) -> float:
    """The share of a candidate's usable frames in which it is detected."""
    return float(row["n_detected"]) / max(1, int(row["n_used"]))


def _ephemeris(targets: Any, name: str) -> dict[str, float]:
    """The ephemeris that a target list gives, NaN for none."""
    wanted = ("period", "epoch", "period_dot", "window")
    if targets is None or name not in targets.names:
        return dict.fromkeys(wanted, float("nan"))
    row = targets.names.index(name)
    return {column: float(targets.column(column)[row]) for column in wanted}


def _target_row(name: str, seen: Seen, looks: Looks, cycles: bool) -> dict[str, Any]:
    """What completeness_targets.ecsv says of every target."""
    return {
        "name": name, "standing": seen.standing, "n_used": len(looks.look), "n_looks": looks.n, "by_cycles": cycles,
        "like_flux": seen.peak,
    }  # fmt: skip


def remarks(
    study: Study,
    nulls: Mapping[int, Mapping[str, Null]],
    at: Mapping[str, Places],
    found: Found,
    targets: astropy.table.Table,
) -> tuple[str, ...]:
    """What holds for the tables as a whole; `found` is what became of the sources in all frames."""
    chosen = study.settings.completeness
    lit = any(null.brighter for of_field in nulls.values() for null in of_field.values())
    n_subsets = sum(bool(len(one.ids)) for one in at.values())
    said = [
        f"{len(study.cells)} cells of {chosen.per_cell} sources each in {n_subsets} subsets of frames, at "
        f"{len(at[ALL].ids)} controls of {how_many(at[ALL].n_fields, 'field', 'fields')}, measured as often as targets",
        f"recovered means: p below {study.bars.final:.3g}, which the p-values of this run's target list leave for one more "
        f"target at a false-discovery rate of {study.settings.ranking.level:g} (another list leaves another); what checks "
        "would say of it is not asked",
        "a source has the same flux in median frame errors in every channel; channels of Stokes Q, U, V get none",
    ]
    said += places_said(at)
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
    if (targets["standing"] == "unseen").any():
        said.append(
            "limits on unseen targets: a duty cycle is the share of looks throughout which the source is on, its flux the mean "
            "over an exposure, and the best frame of a look counts; completeness_channels.ecsv has them in each unit, "
            "with the rate of short pulses and a sentence"
        )
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
            f"{FEWEST_FOR_TAIL}: however bright, they are not found"
            + _more_in_a_run(study.settings.controls)
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


def _more_in_a_run(controls: Controls) -> str:
    """That a run may do better, where it gives more controls to a target beyond all of its first."""
    if controls.most_per_field <= controls.per_field:
        return ""
    return " here; a run gives a target beyond all of these more of them (a second pass), and may find it"


def proof_remarks(proofs: Sequence[planted.Proof | None]) -> tuple[str, ...]:
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
