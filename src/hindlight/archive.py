"""Walking an archive: every frame with what its header says, and everything that is set aside, from headers only.

Files are read in pieces of some hundreds; what is costly one by one (times, footprints) is done for a piece at once.
A file that is broken never ends the walk: it becomes a row of the rejects. No pixel is read here.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from functools import lru_cache
from itertools import islice
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from hindlight import clock, footprints
from hindlight.facts import NAN, FrameFacts, Moment
from hindlight.files import FileEntry, list_files, open_source
from hindlight.headers import Hdu, Plane, SetAsideError, facts_of, planes, read_hdus
from hindlight.lightcurve import FloatArray
from hindlight.outlines import Image, Outline, outlines
from hindlight.plugin import Dialect
from hindlight.schema import ASSUMPTIONS, FRAMES
from hindlight.settings import Settings
from hindlight.systems import NoCelestialError

FILES_AT_ONCE = 512
MEGABYTE = 1_000_000
ADDED_LATER = ("id", "batch", "channel", "state", "duplicate_of", "related_to")
BEAM_PIXELS = (0.5, 100.0)  # a stated width outside it is no width of a point source in this image

Columns = dict[str, NDArray[Any]]
Row = dict[str, Any]


class WalkResult(NamedTuple):
    """What a walk found.

    frames
        Columns of `schema.FRAMES` without those that are given later (`ADDED_LATER`), of new and changed files only, in
        order of archive, path, HDU and plane.
    rejects
        Rows of `schema.REJECTS`, of new and changed files only.
    present, unchanged
        (archive, path) of every file that is there, and of those that were known and have not changed.
    """

    frames: Columns
    rejects: list[Row]
    present: set[tuple[str, str]]
    unchanged: set[tuple[str, str]]


class _Found(NamedTuple):
    """One frame, as its header and the dialect describe it."""

    archive: str
    entry: FileEntry
    hdu: Hdu
    plane: Plane
    dialect: str
    facts: FrameFacts


def walk(
    archives: Sequence[str],
    dialects: Sequence[Dialect],
    settings: Settings,
    known: Mapping[str, Any] | None = None,
    progress: Callable[[int], None] | None = None,
    skip: Sequence[str] = (),
) -> WalkResult:
    """Every frame of some archive folders that is not among the `known` frames, read from headers alone.

    `known` are columns of frames found before; their files are not read again while size and time are the same.
    `progress` is called with a number of files now and then; folders in `skip`, as that of a run, are not entered.
    Raises `UsageError` if an archive is no folder.
    """
    before = _known_files(known or {})
    visited = {(place.st_dev, place.st_ino) for folder in skip if (place := _place(folder)) is not None}
    files = [(archive, entry) for archive in archives for entry in list_files(archive, visited)]
    present = {(archive, entry.path) for archive, entry in files}
    new = [f for f in files if before.get((f[0], f[1].path)) != (f[1].size, f[1].modified_ns)]
    step = progress or (lambda _n: None)
    step(len(files) - len(new))
    parts: list[Columns] = []
    rejects: list[Row] = []
    remaining = iter(sorted(new, key=lambda f: (f[0], f[1].path)))
    while piece := list(islice(remaining, FILES_AT_ONCE)):
        found: list[_Found] = []
        for archive, entry in piece:
            _read_file(archive, entry, dialects, settings, found, rejects)
        parts.append(_columns(found, settings, rejects))
        step(len(piece))
    rejects.sort(key=lambda row: (row["path"], row["hdu"], row["plane"], row["archive"]))
    unchanged = present - {(archive, entry.path) for archive, entry in new}
    return WalkResult(_joined(parts), rejects, present, unchanged)


def _place(folder: str) -> os.stat_result | None:
    try:
        return os.stat(folder)
    except OSError:
        return None


def _known_files(known: Mapping[str, Any]) -> dict[tuple[str, str], tuple[int, int]]:
    if not known:
        return {}
    rows = zip(known["archive"], known["path"], known["size"], known["modified_ns"], known["state"], strict=True)
    return {(a, p): (int(size), int(time)) for a, p, size, time, state in rows if state != "void"}


def _joined(parts: Sequence[Columns]) -> Columns:
    types: dict[str, Any] = {"float64": np.float64, "int64": np.int64, "bool": np.bool_, "str": object}
    return {
        c.name: np.concatenate([np.empty(0, types[c.dtype]), *[part[c.name] for part in parts]]).astype(types[c.dtype])
        for c in FRAMES
        if c.name not in ADDED_LATER
    }


# --- one file


def _read_file(
    archive: str,
    entry: FileEntry,
    dialects: Sequence[Dialect],
    settings: Settings,
    found: list[_Found],
    rejects: list[Row],
) -> None:
    """Add the frames of a file and what of it is set aside."""
    images, last = 0, -1
    try:
        if entry.fault:
            raise SetAsideError("unreadable", entry.fault)
        limit = settings.inventory.unpacked_limit_mb * MEGABYTE
        with open_source(os.path.join(archive, entry.path), limit) as source:
            for hdu in read_hdus(source):
                last = hdu.index
                if hdu.is_image:
                    images += 1
                    found.extend(_frames_of(archive, entry, hdu, dialects, rejects))
        if not images:
            raise SetAsideError("no_image", f"none of its {last + 1} HDUs holds an image")
    except SetAsideError as error:
        # A gzip stream that breaks after some HDUs cannot know which one it was in.
        rejects.append(_reject(archive, entry, error, last + 1 if last >= 0 and images else error.hdu))
    except OSError as error:
        rejects.append(_reject(archive, entry, SetAsideError("unreadable", f"the system says: {error.strerror}")))


def _frames_of(
    archive: str, entry: FileEntry, hdu: Hdu, dialects: Sequence[Dialect], rejects: list[Row]
) -> Iterator[_Found]:
    try:
        for plane in planes(hdu):
            read = _facts(hdu, plane, dialects)
            yield _Found(archive, entry, hdu, plane, *read)
    except SetAsideError as error:
        rejects.append(_reject(archive, entry, error, hdu.index))


def _facts(hdu: Hdu, plane: Plane, dialects: Sequence[Dialect]) -> tuple[str, FrameFacts]:
    try:
        read = facts_of(hdu.cards, plane.axes, dialects)
    except Exception as error:  # a dialect may be anyone's: what it raises sets the HDU aside and is said there
        raise SetAsideError("bad_header", f"the dialect failed: {type(error).__name__}: {error}") from error
    if read is None:
        raise SetAsideError("no_dialect", "no dialect recognises the header")
    if read[1].scale not in clock.SCALES:
        raise SetAsideError("bad_header", f"dialect {read[0]} gave the unknown time scale {read[1].scale!r}")
    return read


def _reject(archive: str, entry: FileEntry, error: SetAsideError, hdu: int = -1) -> Row:
    place = {"path": entry.path, "hdu": hdu, "plane": error.plane, "archive": archive}
    return {**place, "reason": error.reason, "detail": error.detail}


# --- many frames at once


def _columns(found: Sequence[_Found], settings: Settings, rejects: list[Row]) -> Columns:
    """The columns of some frames; those without usable coordinates become rejects."""
    words: list[list[str]] = [list(f.facts.assumptions) for f in found]
    times = _times(found, settings, words)
    usable, kept = _outlines(found, times["middle_mjd_tdb"], words, rejects)
    columns = {name: values[kept] for name, values in (times | _plain(found)).items()}
    columns |= footprints.columns(usable)
    _beams(columns, settings, [words[i] for i in kept])
    columns["assumptions"] = _text([_sentences(tuple(dict.fromkeys(words[i]))) for i in kept])
    return columns


def _text(values: Sequence[str]) -> NDArray[Any]:
    return np.array(values, dtype=object)


def _plain(found: Sequence[_Found]) -> Columns:
    """What only has to be copied."""
    facts = [f.facts for f in found]
    numbers = ("frequency_hz", "beam_major", "beam_minor", "beam_angle", "depth", "saturation", "electrons_per_unit")
    columns: Columns = {name: np.array([getattr(f, name) for f in facts], dtype=float) for name in numbers}
    columns |= {
        name: _text([getattr(f, name) for f in facts])
        for name in ("instrument", "band", "stokes", "unit", "primary_beam")
    }
    frequency = columns["frequency_hz"]
    columns["frequency_hz"] = np.where((frequency > 0) & np.isfinite(frequency), frequency, NAN)
    columns["barycentric"] = np.array([f.barycentric for f in facts], dtype=bool)
    columns["archive"] = _text([f.archive for f in found])
    columns["path"] = _text([f.entry.path for f in found])
    columns["dialect"] = _text([f.dialect for f in found])
    columns["digest"] = _text([_digest(f.hdu, f.entry.size) for f in found])
    integers = {
        "hdu": [f.hdu.index for f in found],
        "plane": [f.plane.index for f in found],
        "size": [f.entry.size for f in found],
        "modified_ns": [f.entry.modified_ns for f in found],
        "width": [f.plane.width for f in found],
        "height": [f.plane.height for f in found],
    }
    return columns | {name: np.array(values, dtype=np.int64) for name, values in integers.items()}


def _digest(hdu: Hdu, size: int) -> str:
    return hashlib.blake2b(hdu.cards.raw + size.to_bytes(8, "little"), digest_size=12).hexdigest()


@lru_cache(maxsize=1024)
def _sentences(words: tuple[str, ...]) -> str:
    return "; ".join(f"{word}: {ASSUMPTIONS[word]}" if word in ASSUMPTIONS else word for word in words)


def _times(found: Sequence[_Found], settings: Settings, words: Sequence[list[str]]) -> Columns:
    """Instants in TDB, durations and sites; adds a word for each thing taken for granted."""
    facts = [f.facts for f in found]
    has_clock = [_has_clock(f) for f in facts]
    sites = np.array([_site(f, settings) for f in facts], dtype=float).reshape(-1, 3)
    scales = [f.scale for f in facts]

    def instants(name: str) -> FloatArray:
        moments = [getattr(f, name) if known else None for f, known in zip(facts, has_clock, strict=True)]
        return clock.to_tdb(moments, scales, sites)

    start, middle, end = (instants(name) for name in ("start", "middle", "end"))
    exposure = np.array([f.exposure_s for f in facts], dtype=float)
    span = np.where(end >= start, end - start, np.array([f.span_s for f in facts], dtype=float))
    stated = np.isfinite(exposure)
    exposure, span = np.where(stated, exposure, span), np.where(np.isfinite(span), span, exposure)
    half = np.nan_to_num(span) / 2
    middle = _first(middle, start + half, end - half)
    clocked = np.isfinite(middle)
    days = np.array([_day(f) for f in facts], dtype=float)
    homeless = clocked & np.isnan(sites[:, 0]) & ~np.array([f.barycentric for f in facts], dtype=bool)
    for rows, word in (
        (~clocked, "no_clock"),
        (~stated & np.isfinite(exposure), "span_is_good_time"),
        (~np.isfinite(exposure), "no_exposure"),
        (homeless, "geocentre"),
    ):
        for i in np.flatnonzero(rows).tolist():
            words[i].append(word)
    start, end = _first(start, middle - span / 2), _first(end, middle + span / 2)
    return {
        "start_mjd_tdb": clock.mjd(start),
        "middle_mjd_tdb": np.where(clocked, clock.mjd(middle), days + 0.5),
        "end_mjd_tdb": clock.mjd(end),
        "middle_tdb_s": middle,
        "middle_utc": _text([t or d for t, d in zip(clock.iso_utc(middle), clock.iso_date(days), strict=True)]),
        "exposure_s": exposure,
        "span_s": span,
        "site_x": sites[:, 0],
        "site_y": sites[:, 1],
        "site_z": sites[:, 2],
    }


def _first(*choices: FloatArray) -> FloatArray:
    """Element by element the first choice that is finite."""
    result = choices[0]
    for choice in choices[1:]:
        result = np.where(np.isfinite(result), result, choice)
    return result


def _has_clock(facts: FrameFacts) -> bool:
    return "no_clock" not in facts.assumptions and all(m.has_clock for m in _moments(facts))


def _moments(facts: FrameFacts) -> list[Moment]:
    return [moment for moment in (facts.start, facts.middle, facts.end) if moment is not None]


def _day(facts: FrameFacts) -> float:
    """The MJD of the day, NaN where there is no date."""
    moments = _moments(facts)
    return float(moments[0].mjd) if moments else NAN


def _site(facts: FrameFacts, settings: Settings) -> tuple[float, float, float]:
    if facts.barycentric:
        return (NAN, NAN, NAN)
    return facts.site or settings.sites.get(facts.instrument, (NAN, NAN, NAN))


def _outlines(
    found: Sequence[_Found], mjd: FloatArray, words: Sequence[list[str]], rejects: list[Row]
) -> tuple[list[Outline], list[int]]:
    """The outline of each frame with usable coordinates, and which frames those are."""
    images = [
        Image(f.hdu.cards, os.path.join(f.archive, f.entry.path), f.plane.width, f.plane.height, date)
        for f, date in zip(found, mjd.tolist(), strict=True)
    ]
    kept: list[int] = []
    usable: list[Outline] = []
    refused = None
    for i, own in enumerate(outlines(images)):
        if isinstance(own, Outline):
            usable.append(own)
            kept.append(i)
            if own.system_assumed:
                words[i].append("frame_assumed")
        elif found[i].hdu is not refused:  # one row for all planes of a cube
            refused = found[i].hdu
            reason = "no_wcs" if isinstance(own, NoCelestialError) else "bad_wcs"
            rejects.append(_reject(found[i].archive, found[i].entry, SetAsideError(reason, str(own)), refused.index))
    return usable, kept


def _beams(columns: Columns, settings: Settings, words: Sequence[list[str]]) -> None:
    """Fill in widths from the settings where the header gives none, or one that cannot be a width in this image."""
    ratio = columns["beam_major"] / columns["pixel_scale"]
    good = (ratio >= BEAM_PIXELS[0]) & (ratio <= BEAM_PIXELS[1])
    good &= (columns["beam_minor"] > 0) & (columns["beam_minor"] <= columns["beam_major"])
    for i in np.flatnonzero(~good).tolist():
        width = settings.photometry.fwhm_arcsec.get(columns["instrument"][i], NAN)
        words[i].append("no_beam" if np.isnan(width) else "beam_from_settings")
        columns["beam_major"][i] = columns["beam_minor"][i] = width
        columns["beam_angle"][i] = 0.0 if width == width else NAN
