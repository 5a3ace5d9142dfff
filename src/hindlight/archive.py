"""Walking an archive: every frame with what its header says, and everything that is set aside, from headers only.

Files are read in pieces of some hundreds; what is costly one by one (times, footprints) is done for a piece at once.
A file that is broken never ends the walk: it becomes a row of the rejects. No pixel is read here, unless checksums are
to be verified.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass, replace
from functools import partial
from itertools import islice
from typing import Any, NamedTuple

import numpy as np

from hindlight import clock
from hindlight.companions import sort_out
from hindlight.errors import UsageError
from hindlight.facts import NAN, Cards, FrameFacts
from hindlight.files import FileEntry, list_files, local_path, open_source
from hindlight.frametable import LONGEST_EXPOSURE_S, Columns, Found, Row, columns_of, reject
from hindlight.goodtime import with_good_time
from hindlight.headers import GOOD_TIME, Hdu, Plane, SetAsideError, Source, facts_of, inherited, planes, read_hdus
from hindlight.integrity import verifier
from hindlight.knowledge import Knowledge
from hindlight.plugin import Dialect
from hindlight.schema import FRAMES
from hindlight.settings import COMPANION_KINDS, Inventory, Settings
from hindlight.storage import StorageError
from hindlight.timetables import plane_times

FILES_AT_ONCE = 512
HELD_AT_ONCE = 1 << 25  # bytes of headers and of frames: files may have many HDUs, and these long headers
FRAME_BYTES = 1 << 10
MEGABYTE = 1_000_000
AUTO = "auto"
PLAUSIBLE_MJD = (-3242, 88_069)  # 1850-01-01 and 2100-01-01
ADDED_LATER = ("id", "batch", "channel", "state", "duplicate_of", "related_to")
TIME_CARDS = ("DATE-OBS", "MJD-OBS", "DATE-BEG", "MJD-BEG", "DATE-AVG", "MJD-AVG", "DATE-END", "MJD-END", "TSTART")


class WalkResult(NamedTuple):
    """What a walk found.

    frames
        Columns of `schema.FRAMES` without those that are given later (`ADDED_LATER`), of new and changed files only, in
        order of archive, path, HDU and plane.
    rejects
        Rows of `schema.REJECTS`, of new and changed files only.
    present, unchanged
        (archive, path) of every file that is there and no companion of another, and of those that were known and have
        not changed.
    """

    frames: Columns
    rejects: list[Row]
    present: set[tuple[str, str]]
    unchanged: set[tuple[str, str]]


@dataclass(frozen=True)
class _Reader:
    """What every file is read with, and where what is set aside is put."""

    dialects: Sequence[Dialect]
    knowledge: Knowledge
    settings: Inventory
    rejects: list[Row]


def walk(
    archives: Sequence[str],
    dialects: Sequence[Dialect],
    settings: Settings,
    known: Mapping[str, Any] | None = None,
    progress: Callable[[int], None] | None = None,
    skip: Sequence[str] = (),
) -> WalkResult:
    """Every frame of some archives (folders or URLs) that is not among the `known` frames, read from headers alone.

    `known` are columns of frames found before; their files are not read again while size and time are the same.
    `progress` is called with a number of files now and then; folders in `skip`, as that of a run, are not entered.
    Raises `UsageError` if an archive is no folder, or the settings name a dialect that is not there.
    """
    dialects = chosen_dialects(dialects, settings)
    before = _known_files(known or {})
    visited = {(place.st_dev, place.st_ino) for folder in skip if (place := _place(folder)) is not None}
    folders = {
        archive: sort_out(list_files(archive, visited), settings.companions) for archive in dict.fromkeys(archives)
    }
    files = [(archive, entry) for archive, folder in folders.items() for entry in folder.images]
    present = {(archive, entry.path) for archive, entry in files}
    companions = {(a, path): own for a, folder in folders.items() for path, own in folder.companions.items()}
    new = [f for f in files if before.get((f[0], f[1].path)) != _identity(f[1], companions.get((f[0], f[1].path), {}))]
    step = progress or (lambda _n: None)
    step(len(files) - len(new))
    parts: list[Columns] = []
    rejects = [
        reject(archive, entry, SetAsideError("companion", sentence))
        for archive, folder in folders.items()
        for entry, sentence in folder.aside
    ]
    knowledge = Knowledge(settings.frames, settings.sites)
    reader = _Reader(dialects, knowledge, settings.inventory, rejects)
    remaining = iter(sorted(new, key=lambda f: (f[0], f[1].path)))
    while piece := list(islice(remaining, FILES_AT_ONCE)):
        found: list[Found] = []
        held = 0
        for archive, entry in piece:
            for frames in _read_file(archive, entry, companions.get((archive, entry.path), {}), reader):
                found += frames
                held += _held(frames)
                if held > HELD_AT_ONCE:
                    parts.append(columns_of(found, settings, rejects))
                    found, held = [], 0
            step(1)  # a file whose checksums are verified may take a while
        parts.append(columns_of(found, settings, rejects))
    rejects.sort(key=lambda row: (row["path"], row["hdu"], row["plane"], row["archive"]))
    unchanged = present - {(archive, entry.path) for archive, entry in new}
    return WalkResult(_joined(parts), rejects, present, unchanged)


def chosen_dialects(dialects: Sequence[Dialect], settings: Settings) -> Sequence[Dialect]:
    """The dialects to be asked, or the one that the settings name. Raises `UsageError` if that is not there."""
    name = settings.inventory.dialect
    chosen = [dialect for dialect in dialects if name in (AUTO, dialect.name)]
    if not chosen and name != AUTO:
        there = ", ".join((AUTO, *sorted(dialect.name for dialect in dialects)))
        raise UsageError(f"[inventory] dialect: no dialect {name!r}; there are {there}")
    return chosen


def _place(folder: str) -> os.stat_result | None:
    try:
        return os.stat(folder)
    except OSError:
        return None


def _known_files(known: Mapping[str, Any]) -> dict[tuple[str, str], tuple[Any, ...]]:
    """What tells whether the files of some frames have changed; see `_identity`."""
    if not known:
        return {}
    names = ("size", "modified_ns", *(f"{kind}_file" for kind in COMPANION_KINDS))
    rows = zip(known["archive"], known["path"], known["state"], *(known[name] for name in names), strict=True)
    return {(a, p): (int(size), int(time), *own) for a, p, state, size, time, *own in rows if state != "void"}


def _identity(entry: FileEntry, companions: Mapping[str, str]) -> tuple[Any, ...]:
    return entry.size, entry.modified_ns, *(companions.get(kind, "") for kind in COMPANION_KINDS)


def _joined(parts: Sequence[Columns]) -> Columns:
    types: dict[str, Any] = {"float64": np.float64, "int64": np.int64, "bool": np.bool_, "str": object}
    return {
        c.name: np.concatenate([np.empty(0, types[c.dtype]), *[part[c.name] for part in parts]]).astype(types[c.dtype])
        for c in FRAMES
        if c.name not in ADDED_LATER
    }


# --- one file


def _read_file(archive: str, entry: FileEntry, companions: Mapping[str, str], reader: _Reader) -> Iterator[list[Found]]:
    """The frames of a file, some HDUs at a time; adds what of it is set aside.

    Frames wait for a table of good time that may follow them in the file, unless they are very many.
    """
    images, last, held = 0, -1, 0
    primary: Cards | None = None
    waiting: list[Found] = []
    timeless: list[tuple[Hdu, Callable[..., list[Found]]]] = []  # images whose planes may get their times from a table
    table: Hdu | None = None
    try:
        if entry.fault:
            raise SetAsideError("unreadable", entry.fault)
        opened = partial(_opened, archive, reader)
        wanted = reader.settings.verify_checksums
        table = _companion_table(opened, companions)
        with opened(entry.path) as source, verifier(wanted, opened, entry.path, companions) as sums:
            for hdu in read_hdus(source):
                unverified, fault = sums.verdict(hdu, _takes_primary(hdu.cards, primary))
                last = hdu.index
                images += hdu.is_image
                if not hdu.index and not hdu.axes:
                    primary = hdu.cards
                if fault is not None:
                    reader.rejects.append(reject(archive, entry, fault, last))
                elif hdu.is_image:
                    words = ("unverified",) if unverified else ()
                    made = partial(_frames_of, archive, entry, hdu, primary, companions, reader, words)
                    frames = made()
                    if hdu.time_table and frames:
                        timeless.append((hdu, made))
                    waiting += frames
                    held += _held(frames)
                    if held > HELD_AT_ONCE:
                        yield [_known(frame, reader, table) for frame in waiting]
                        waiting, held = [], 0
                elif hdu.is_good_time:
                    waiting = [_with_good_time(frame, hdu) for frame in waiting]
                elif hdu.table:
                    waiting = _with_times(waiting, hdu, timeless)
        if not images:
            raise SetAsideError("no_image", f"none of its {last + 1} HDUs holds an image")
    except SetAsideError as error:
        # A gzip stream that breaks after some HDUs cannot know which one it was in.
        reader.rejects.append(reject(archive, entry, error, last + 1 if last >= 0 and images else error.hdu))
    except OSError as error:
        said = str(error) if isinstance(error, StorageError) else f"the system says: {error.strerror}"
        reason = SetAsideError("unreadable", said)
        reader.rejects.append(reject(archive, entry, reason))
    if waiting:
        yield [_known(frame, reader, table) for frame in waiting]


def _companion_table(
    opened: Callable[[str], AbstractContextManager[Source]], companions: Mapping[str, str]
) -> Hdu | None:
    """The table of good time in a file beside the image, None where none is named. Raises `SetAsideError`."""
    name = companions.get("good_time")
    if name is None:
        return None
    try:
        with opened(name) as source:
            table = next((hdu for hdu in read_hdus(source) if hdu.is_good_time), None)
    except (SetAsideError, OSError) as error:
        detail = (error.strerror if isinstance(error, OSError) else None) or str(error)
        raise SetAsideError("bad_companion", f"its good_time companion {name} cannot be used: {detail}") from error
    if table is None:
        words = " or ".join(GOOD_TIME)
        raise SetAsideError("bad_companion", f"its good_time companion {name} has no table with EXTNAME {words}")
    return table


def _opened(archive: str, reader: _Reader, path: str) -> AbstractContextManager[Source]:
    return open_source(local_path(archive, path), reader.settings.unpacked_limit_mb * MEGABYTE)


def _held(frames: Sequence[Found]) -> int:
    """About the bytes that frames take while they wait."""
    return FRAME_BYTES * len(frames) + sum(len(f.hdu.cards.raw) for f in frames if f.plane.index == 0)


def _frames_of(
    archive: str,
    entry: FileEntry,
    hdu: Hdu,
    primary: Cards | None,
    companions: Mapping[str, str],
    reader: _Reader,
    words: tuple[str, ...],
    times: Sequence[float] = (),
) -> list[Found]:
    """The frames of an HDU, as far as nothing is wrong with it; `words` are among the assumptions of each.

    `times` are those of its planes where a table gives them.
    """
    frames: list[Found] = []
    forced = reader.settings.dialect != AUTO
    try:
        cards, more = _with_primary(hdu.cards, primary)
        for plane in planes(hdu, reader.settings.planes_limit, times):
            read = _facts(cards, plane, reader.dialects, forced, (*more, *words))
            frames.append(Found(archive, entry, hdu, plane, *read, companions))
    except SetAsideError as error:
        reader.rejects.append(reject(archive, entry, error, hdu.index))
    return frames


def _with_times(
    waiting: Sequence[Found], table: Hdu, timeless: Sequence[tuple[Hdu, Callable[..., list[Found]]]]
) -> list[Found]:
    """The waiting frames, those of images whose planes have their times in this table made anew."""
    frames = list(waiting)
    for image, made in timeless:
        here = [f for f in frames if f.hdu is image]
        if here and (times := plane_times(image, table)):
            at = frames.index(here[0])
            frames[at : at + len(here)] = made(times=times)
    return frames


def _known(frame: Found, reader: _Reader, table: Hdu | None) -> Found:
    """The frame with what the user knows of it, and what follows from its companions, a table of good time among them."""
    if table is not None:
        frame = _with_good_time(frame, table)
    facts = frame.facts
    if reader.knowledge:
        facts = reader.knowledge.applied(frame.hdu.cards, frame.entry.path, facts)
    return frame._replace(facts=_with_gains(facts, "primary_beam" in frame.companions))


def _with_gains(facts: FrameFacts, has_file: bool) -> FrameFacts:
    """The facts of a frame with what follows from a companion that holds the primary beam's gain, or from there being none.

    A frame that has one is uncorrected unless something says otherwise.
    """
    words = facts.assumptions
    if not has_file:
        if facts.primary_beam != "uncorrected" or math.isfinite(facts.primary_beam_fwhm_deg):
            return facts
        return replace(facts, assumptions=(*words, "primary_beam_apparent"))
    if facts.primary_beam == "corrected":
        return replace(facts, assumptions=(*words, "gains_not_applied"))
    known = tuple(word for word in words if word != "primary_beam_unknown")
    return replace(facts, primary_beam="uncorrected", assumptions=known)


def _with_primary(cards: Cards, primary: Cards | None) -> tuple[Cards, tuple[str, ...]]:
    """The cards that say what a frame is: with those of a primary header without data where only it has a date.

    The standard has INHERIT for this (see `read_hdus`); many files that mean it do not say it.
    """
    if primary is None or "INHERIT" in cards or not _takes_primary(cards, primary):
        return cards, ()
    return inherited(cards, primary), ("primary_header",)


def _takes_primary(cards: Cards, primary: Cards | None) -> bool:
    """Whether cards of a primary header without data count for an extension too."""
    if primary is None or cards.get("INHERIT") is True:
        return primary is not None
    if "INHERIT" in cards or any(key in cards for key in TIME_CARDS):
        return False
    return any(key in primary for key in TIME_CARDS)


def _facts(
    cards: Cards, plane: Plane, dialects: Sequence[Dialect], forced: bool, words: tuple[str, ...]
) -> tuple[str, FrameFacts]:
    try:
        read = facts_of(cards, plane.axes, dialects, forced)
    except Exception as error:  # a dialect may be anyone's: what it raises sets the HDU aside and is said there
        raise SetAsideError("bad_header", f"the dialect failed: {type(error).__name__}: {error}") from error
    if read is None:
        raise SetAsideError("no_dialect", "no dialect recognises the header")
    if read[1].scale not in clock.SCALES:
        raise SetAsideError("bad_header", f"dialect {read[0]} gave the unknown time scale {read[1].scale!r}")
    words = (*words, "repeated_keyword") if cards.contradicted else words
    facts = _plausible(read[1])
    return read[0], replace(facts, assumptions=(*facts.assumptions, *words)) if words else facts


def _with_good_time(frame: Found, table: Hdu) -> Found:
    """The frame with exposure and span of a table of good-time intervals, unless it is a plane with a time of its own."""
    if frame.plane.axes.time_axis:
        return frame
    return frame._replace(facts=with_good_time(frame.facts, table.cards, table.table))


def _plausible(facts: FrameFacts) -> FrameFacts:
    """The facts without dates and durations that cannot be, with a word for each kind of thing that was left out."""
    left_out: dict[str, Any] = {
        name: None
        for name in ("start", "middle", "end")
        if (moment := getattr(facts, name)) and not PLAUSIBLE_MJD[0] <= moment.mjd < PLAUSIBLE_MJD[1]
    }
    words = ["implausible_date"] if left_out else []
    durations = [name for name in ("exposure_s", "span_s") if not _is_duration(getattr(facts, name))]
    if durations:
        words.append("implausible_exposure")
        left_out |= dict.fromkeys(durations, NAN)
        if "exposure_s" in durations and facts.unit.endswith("/s"):
            left_out["electrons_per_unit"] = NAN  # they were counted over that exposure
    return replace(facts, **left_out, assumptions=(*facts.assumptions, *words)) if words else facts


def _is_duration(seconds: float) -> bool:
    """Whether a duration is none at all (NaN), or one that an image can have."""
    return not (seconds < 0 or seconds > LONGEST_EXPOSURE_S)
