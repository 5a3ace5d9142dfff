"""Files that belong to images: which of an archive's files are companions, and of which image.

Told by names alone, see `settings.Companions`. What a companion does to a measurement is the business of `photometry`.
"""

from __future__ import annotations

import posixpath
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from hindlight.files import ENDINGS, FileEntry, local_path
from hindlight.settings import COMPANION_KINDS, Companions

PACKED = ("", ".gz", ".fz")  # a companion may be packed where its pattern does not say so
NOUNS = {
    "weight": "weights",
    "rms": "noise map",
    "mask": "mask",
    "primary_beam": "primary-beam gains",
    "good_time": "good-time intervals",
}


@dataclass(frozen=True)
class SortedFiles:
    """The files of an archive folder.

    images
        Those that are no companions, in their order; the time of one that has companions is that of the latest of them.
    companions
        For the path of an image the paths of its companions, by kind.
    aside
        Companions, each with a sentence.
    """

    images: list[FileEntry]
    companions: dict[str, dict[str, str]] = field(default_factory=dict)
    aside: list[tuple[FileEntry, str]] = field(default_factory=list)


def sort_out(entries: Sequence[FileEntry], patterns: Companions) -> SortedFiles:
    """Images and companions among the files of one archive folder.

    A file that is named as a companion is never an image, whether or not its own image is there.
    """
    wanted = {k: posixpath.normpath(getattr(patterns, k)) for k in COMPANION_KINDS if getattr(patterns, k)}
    if not wanted:
        return SortedFiles(list(entries))
    shapes = {kind: _shape(pattern) for kind, pattern in wanted.items()}
    kinds = {e.path: kind for e in entries if (kind := _kind_of(e.path, shapes))}
    by_path = {entry.path: entry for entry in entries}
    found, owner = SortedFiles([]), dict[str, str]()
    for entry in entries:
        if entry.path in kinds:
            continue
        mine = {}
        for kind, pattern in wanted.items():
            path = next((p for p in _names(entry.path, pattern) if kinds.get(p) == kind), "")
            if path:
                mine[kind] = path
                owner.setdefault(path, entry.path)
        if mine:
            found.companions[entry.path] = mine
            latest = max(entry.modified_ns, *(by_path[path].modified_ns for path in mine.values()))
            entry = FileEntry(entry.path, entry.size, latest, entry.fault)
        found.images.append(entry)
    for path, kind in kinds.items():
        whose = (
            f"the {NOUNS[kind]} of {owner[path]}"
            if path in owner
            else f"named as {NOUNS[kind]}, its image is not there"
        )
        found.aside.append((by_path[path], whose))
    return found


def as_listed(frames: Mapping[str, Any], row: int) -> tuple[int, int, tuple[str, ...]]:
    """Size, time (ns) and companions' places of a frame's file, from the frame table: what `check_unchanged` is given.

    Companions of every kind count, as they did for the time.
    """
    named = [str(frames[f"{kind}_file"][row]) for kind in COMPANION_KINDS]
    places = tuple(local_path(str(frames["archive"][row]), path) for path in named if path)
    return int(frames["size"][row]), int(frames["modified_ns"][row]), places


def _shape(pattern: str) -> re.Pattern[str]:
    """What paths of companions look like."""
    while pattern.startswith("../"):
        pattern = pattern[3:]
    plain = re.escape(pattern).replace(r"\{stem\}", "[^/]+").replace(r"\{name\}", "[^/]+")
    return re.compile(rf"(?:.*/)?{plain}(?:\.gz|\.fz)?", re.DOTALL)


def _kind_of(path: str, shapes: dict[str, re.Pattern[str]]) -> str:
    return next((kind for kind, shape in shapes.items() if shape.fullmatch(path)), "")


def _names(path: str, pattern: str) -> Iterator[str]:
    """Paths that the companion of an image may have."""
    folder, name = posixpath.split(path)
    bare = next((name[: -len(p)] for p in PACKED[1:] if name.lower().endswith(p)), name)
    ending = next((e for e in sorted(ENDINGS, key=len, reverse=True) if name.lower().endswith(e)), "")
    stem = name[: len(name) - len(ending)]
    for base in dict.fromkeys((name, bare)):
        filled = pattern.replace("{name}", base).replace("{stem}", stem)
        for packed in PACKED:
            yield posixpath.normpath(posixpath.join(folder, filled + packed))
