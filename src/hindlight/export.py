"""One target's light curves out of a run, as a table with raw and calibrated flux side by side."""

from __future__ import annotations

import difflib
from pathlib import Path
from typing import Any

import astropy.table
import numpy as np

from hindlight import store
from hindlight.calibrate import upper_bounds
from hindlight.ensemble import calibrated, flags
from hindlight.errors import UsageError
from hindlight.lightcurve import FloatArray
from hindlight.order import Book, book, frame_label
from hindlight.response import SEEN_SNR
from hindlight.schema import LIGHT_CURVE
from hindlight.store import RunFolder
from hindlight.tables import astropy_table, read_ecsv

JUDGED = ("threshold", "threshold_above_quiet", "quiet_level_err", "confusion_rms", "blank_level")


def light_curves(run: RunFolder, target: str) -> astropy.table.Table:
    """Every measurement of a target, in order of channel and time; NaN flux where a frame gave none.

    Raises `UsageError` for a folder that holds no run, or a name that is no target of it.
    """
    run.require()
    tables = book(str(run.path.resolve()), run.version())
    row = _judged_row(run, tables.positions, _row_of(tables.positions, target, run.path), target)
    plan = [
        piece
        for piece in store.pieces(tables.frames, tables.positions)
        if piece.round == tables.positions["round"][row] and run.part(piece).is_file()
    ]
    if not plan:
        raise UsageError(f"run {run.path}: nothing is measured yet; continue it with `hindlight mine`")
    rows = store.read_rows(run, plan, tables.positions["id"][row : row + 1])
    void = tables.frames["id"][tables.frames["state"] == "void"]
    rows = {name: values[~np.isin(rows["frame"], void)] for name, values in rows.items()}
    order = np.lexsort((rows["frame"], rows["t_tdb_s"], rows["channel"].astype(str)))
    rows = {name: values[order] for name, values in rows.items()}
    searched = tables.positions["parent"][row] >= 0
    place = {name: float(tables.positions[name][row]) for name in ("ra", "dec")}
    meta = {
        "target": target,
        **({f"judged_{name}": value for name, value in place.items()} if searched else {}),
        "flags": "bits are explained in the README",
        "time": "BJD (TDB) at the middle of good time",
    }
    return astropy_table(LIGHT_CURVE, _columns(run, tables, rows, target), meta)


def _row_of(positions: dict[str, Any], target: str, run: Path) -> int:
    names = positions["name"].tolist()
    if target in names and target:
        return int(names.index(target))
    close = difflib.get_close_matches(target, [n for n in names if n], n=1)
    hint = f"did you mean {close[0]!r}?" if close else "names are in candidates.ecsv"
    raise UsageError(f"run {run}: no target {target!r}; {hint}")


def _judged_row(run: RunFolder, positions: dict[str, Any], row: int, target: str) -> int:
    """The row of the place where a target was judged: the stated one, or that found by searching."""
    tried = np.flatnonzero(positions["parent"] == positions["id"][row])
    if len(tried) == 0 or not run.has("candidates.ecsv"):
        return row
    table = read_ecsv(run.file("candidates.ecsv"))
    found = table[table["name"] == target]
    if len(found) == 0 or not np.isfinite(float(found["found_ra"][0])):
        return row
    offset = np.hypot(
        positions["ra"][tried] - float(found["found_ra"][0]), positions["dec"][tried] - float(found["found_dec"][0])
    )
    return int(tried[np.argmin(offset)])


def _columns(run: RunFolder, tables: Book, rows: dict[str, Any], target: str) -> dict[str, Any]:
    """The table's columns from raw rows."""
    flux, flux_err, _ = calibrated(rows, tables.solution)
    at = np.array([tables.row_of_frame[int(frame)] for frame in rows["frame"]], np.int64)
    judged = _judged_channels(run, target)
    nothing = dict.fromkeys(JUDGED, 0.0) | {"threshold": np.inf, "threshold_above_quiet": np.inf}
    known = [judged.get(channel, nothing) for channel in rows["channel"]]
    limit, above, quiet_err, confusion, level = (np.array([row[name] for row in known], float) for name in JUDGED)
    signed = np.array([tables.channels[channel].signed for channel in rows["channel"]], bool)
    of_frame = np.searchsorted(tables.solution["frame"], rows["frame"])
    verdict = tables.solution["verdict"][of_frame]
    seen_only = verdict == "seen_only"
    with np.errstate(invalid="ignore"):
        snr = np.where(
            seen_only, rows["flux"] / (rows["flux_err"] * tables.solution["error_scale"][of_frame]), flux / flux_err
        )
        least = np.where(seen_only, np.maximum(SEEN_SNR, np.where(np.isfinite(limit), limit, 0.0)), limit)
        detected = np.where(signed, np.abs(snr), snr) > least
    return {
        **{name: rows[name] for name in rows if name not in ("position", "gain")},
        "middle_utc": tables.frames["middle_utc"][at],
        "clock_error_s": tables.frames["clock_error_s"][at],
        "flux": flux,
        "flux_err": flux_err,
        "flux_unit": [tables.channels[channel].unit for channel in rows["channel"]],
        "raw_flux": rows["flux"],
        "raw_flux_err": rows["flux_err"],
        "verdict": verdict,
        "detected": detected,
        "limit_sigma": np.where(seen_only, tables.solution["seen_limit"][of_frame], _finite(limit * flux_err - level)),
        "flags": flags(rows, tables.solution),
        "limit_bayes": np.where(signed, np.nan, upper_bounds(flux - level, np.hypot(flux_err, confusion))),
        "limit_above_quiet": _finite(above * np.hypot(flux_err, quiet_err)),
        "deep": np.isin(rows["frame"], tables.frames["related_to"]),
        "path": [frame_label(tables.frames, int(row)) for row in at],
    }


def _finite(values: FloatArray) -> FloatArray:
    return np.where(np.isfinite(values), values, np.nan)


def _judged_channels(run: RunFolder, target: str) -> dict[str, dict[str, float]]:
    """What was found for each channel of a target, if the run has been judged."""
    if not run.has("channels.ecsv"):
        return {}
    table = read_ecsv(run.file("channels.ecsv"))
    mine = table[table["name"] == target]
    there = [name for name in JUDGED if name in table.colnames]  # runs judged by earlier versions lack the last one
    nothing = dict.fromkeys(JUDGED, 0.0)
    return {str(row["channel"]): nothing | {name: float(row[name]) for name in there} for row in mine}
