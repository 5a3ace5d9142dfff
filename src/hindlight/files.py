"""Files of an archive: which there are, and their bytes, unpacked as far as is needed.

Only local paths are known. `list_files` and `open_source` are the two places that touch a file system, so that other
kinds of storage can be added there. Nothing here knows what FITS is, apart from the endings of its names and its
blocks.
"""

from __future__ import annotations

import os
import stat
import zlib
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from hindlight.errors import UsageError
from hindlight.headers import BLOCK, FIRST_READ, SetAsideError, Source

ENDINGS = tuple(base + packed for base in (".fits", ".fit", ".fts") for packed in ("", ".gz", ".fz"))
GZIP_MAGIC = b"\x1f\x8b"
CHUNK = 1 << 16
FOUR_GIB = 1 << 32


@dataclass(frozen=True)
class FileEntry:
    """A file of an archive: its path relative to the archive folder, size in bytes and modification time.

    `fault` is a sentence where the file (or a folder) cannot be read; size and time are then 0.
    """

    path: str
    size: int
    modified_ns: int
    fault: str = ""


def check_folders(archives: Iterable[str]) -> None:
    """Raise `UsageError` for the first archive that is no folder."""
    for archive in archives:
        if not os.path.isdir(archive):
            raise UsageError(f"archive {archive}: no such folder; give folders that hold FITS files")


def list_files(archive: str, visited: set[tuple[int, int]] | None = None) -> list[FileEntry]:
    """Every FITS file below a folder, hidden ones too, in order of their paths.

    Links are followed; each folder is entered once, so that loops of links end. `visited` (device and inode of folders)
    is shared between archives that may overlap. Raises `UsageError` if the archive is no folder.
    """
    check_folders([archive])
    root = Path(archive)
    visited = set() if visited is None else visited
    entries: list[FileEntry] = []
    pending = [""]
    while pending:
        folder = pending.pop()
        try:
            found = _scan(root, folder, visited)
        except OSError as error:
            entries.append(FileEntry(folder or ".", 0, 0, f"the folder cannot be listed: {error.strerror}"))
            continue
        for entry in found:
            relative = f"{folder}/{entry.name}" if folder else entry.name
            if _is_folder(entry):
                pending.append(relative)
            elif entry.name.lower().endswith(ENDINGS):
                entries.append(_entry(entry, relative))
    return sorted(entries, key=lambda entry: entry.path)


def _scan(root: Path, folder: str, visited: set[tuple[int, int]]) -> list[os.DirEntry[str]]:
    """What a folder holds, in order of names; nothing if it has been visited."""
    path = root / folder
    status = path.stat()
    identity = (status.st_dev, status.st_ino)
    if identity in visited:
        return []
    visited.add(identity)
    with os.scandir(path) as found:
        return sorted(found, key=lambda entry: entry.name)


def _is_folder(entry: os.DirEntry[str]) -> bool:
    try:
        return entry.is_dir()
    except OSError:  # a link that leads to itself
        return False


def _entry(entry: os.DirEntry[str], relative: str) -> FileEntry:
    try:
        status = entry.stat()
    except OSError as error:
        return FileEntry(relative, 0, 0, f"the file cannot be looked at: {error.strerror}")
    if not stat.S_ISREG(status.st_mode):
        return FileEntry(relative, 0, 0, "not a regular file")
    return FileEntry(relative, status.st_size, status.st_mtime_ns)


@contextmanager
def open_source(path: str, unpacked_limit: int) -> Iterator[Source]:
    """The unpacked bytes of a file, whether plain or gzip (told by its first bytes, not its name).

    `unpacked_limit` bounds, in bytes, what a gzip file may unpack to. Raises `OSError` where the system refuses, and
    `SetAsideError` (bad_compression) while a broken or too large gzip file is read.
    """
    descriptor = os.open(path, os.O_RDONLY)
    try:
        head = os.pread(descriptor, FIRST_READ, 0)
        if head.startswith(GZIP_MAGIC):
            yield GzipSource(descriptor, unpacked_limit)
        else:
            yield PlainSource(descriptor, head)
    finally:
        os.close(descriptor)


class PlainSource:
    """A file as it is; `head` are its first bytes, which need not be read again."""

    def __init__(self, descriptor: int, head: bytes) -> None:
        self._descriptor, self._head = descriptor, head
        self._size = os.fstat(descriptor).st_size

    def read_at(self, offset: int, length: int) -> bytes:
        """Up to `length` bytes, fewer only at the end."""
        if offset >= self._size:
            return b""
        if offset + length <= len(self._head):
            return self._head[offset : offset + length]
        return os.pread(self._descriptor, length, offset)

    def reaches(self, end: int) -> bool:
        """Whether the file has `end` bytes."""
        return self._size >= end


class GzipSource:
    """A gzip file, unpacked forwards and no further than asked.

    The last four bytes of a gzip file give the unpacked size modulo 4 GiB (RFC 1952, 2.3.1). Where that is where the
    data at hand end, nothing follows them and they need not be unpacked; otherwise they are, in small pieces.
    """

    def __init__(self, descriptor: int, limit: int) -> None:
        self._descriptor, self._limit = descriptor, limit
        self._packed_size = os.fstat(descriptor).st_size
        self._packed_at = 0
        self._stream = zlib.decompressobj(wbits=31)
        self._waiting = b""  # packed bytes not yet fed
        self._window, self._window_at = b"", 0  # the unpacked bytes kept, and where they begin
        self._ended = False
        self._known_end: int | None = None

    def read_at(self, offset: int, length: int) -> bytes:
        """Up to `length` unpacked bytes, fewer only at the end."""
        if self._known_end is not None and offset >= self._known_end:
            return b""
        self._drop_before(offset)
        while self._window_at + len(self._window) < offset + length and self._unpack():
            self._drop_before(offset)
        start = offset - self._window_at
        return self._window[start : start + length]

    def reaches(self, end: int) -> bool:
        """Whether the file unpacks to at least `end` bytes."""
        self._check_limit(end)
        if (self._trailer_size() - end) % FOUR_GIB < BLOCK:
            self._known_end = end
            return True
        self._drop_before(end)
        while self._window_at + len(self._window) < end and self._unpack():
            self._drop_before(end)
        return self._window_at + len(self._window) >= end

    def _trailer_size(self) -> int:
        return int.from_bytes(os.pread(self._descriptor, 4, max(0, self._packed_size - 4)), "little")

    def _drop_before(self, offset: int) -> None:
        """Forget unpacked bytes before `offset`; they are never asked for again."""
        cut = min(offset - self._window_at, len(self._window))
        if cut > 0:
            self._window, self._window_at = self._window[cut:], self._window_at + cut

    def _unpack(self) -> bool:
        """Unpack one more piece; False at the end of the file."""
        if self._ended:
            return False
        if not self._waiting:
            self._waiting = os.pread(self._descriptor, CHUNK, self._packed_at)
            self._packed_at += len(self._waiting)
        if not self._waiting:
            raise SetAsideError("bad_compression", "the gzip file ends in the middle")
        try:
            piece = self._stream.decompress(self._waiting, CHUNK)
        except zlib.error as error:
            raise SetAsideError("bad_compression", f"the gzip file is broken: {error}") from error
        self._waiting = self._stream.unconsumed_tail
        if self._stream.eof:
            self._next_member()
        self._window += piece
        self._check_limit(self._window_at + len(self._window))
        return True

    def _next_member(self) -> None:
        """Go on with a further gzip member; what else follows (padding) is left."""
        rest = self._stream.unused_data
        if len(rest) < len(GZIP_MAGIC):
            more = os.pread(self._descriptor, CHUNK, self._packed_at)
            self._packed_at += len(more)
            rest += more
        self._stream, self._waiting = zlib.decompressobj(wbits=31), rest
        self._ended = not rest.startswith(GZIP_MAGIC)

    def _check_limit(self, size: int) -> None:
        if size > self._limit:
            megabytes = self._limit // 1_000_000
            raise SetAsideError("bad_compression", f"the file unpacks to more than the limit of {megabytes} MB")
