"""Files of an archive: which there are, and their bytes, unpacked as far as is needed.

A file is named by its path, or as `storage.joined` writes it where the archive is a URL; `list_files`, `opened` and
`check_unchanged` tell the two apart, and whoever reads through them need not. Nothing here knows what FITS is, apart from
the endings of its names and its blocks.
"""

from __future__ import annotations

import logging
import os
import re
import stat
import zlib
from collections.abc import Iterable, Iterator
from contextlib import closing, contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

from hindlight import storage
from hindlight.errors import UsageError
from hindlight.headers import BLOCK, FIRST_READ, SetAsideError, Source

ENDINGS = tuple(base + packed for base in (".fits", ".fit", ".fts") for packed in ("", ".gz", ".fz"))
GZIP_MAGIC = b"\x1f\x8b"
CHUNK = 1 << 16
FIRST_FEED = 1 << 12
FOUR_GIB = 1 << 32
COARSE_CLOCK_NS = 2_000_000_000  # the same file may show a rounded time where it is mounted otherwise

_UNFIT = re.compile(r"[\x00-\x08\x0b-\x1f\x7f-\x9f\u2028\u2029\ud800-\udfff]|\A\s|\s\Z")
_ESCAPE = re.compile(rb"\\x([0-9a-f]{2})")

log = logging.getLogger("hindlight")


@dataclass(frozen=True)
class FileEntry:
    """A file of an archive: its path relative to the archive folder, size in bytes and modification time (0: not told).

    `path` is as `path_text` writes it. `fault` is a sentence where the file (or a folder) cannot be read; size and time
    are then 0.
    """

    path: str
    size: int
    modified_ns: int
    fault: str = ""


def path_text(path: str) -> str:
    """A path as text that every table holds: bytes that are no UTF-8 and control characters are written \\xNN.

    Newlines and tabs stay. Other paths are left alone, but for one that has such an escape in its own name, so that
    `local_path` always finds the way back.
    """
    if not (_UNFIT.search(path) or ("\\x" in path and _ESCAPE.search(os.fsencode(path)))):
        return path
    return _UNFIT.sub(
        lambda found: "".join(f"\\x{byte:02x}" for byte in os.fsencode(found[0])), path.replace("\\", r"\x5c")
    )


def archive_text(archive: str, absolute: bool = False) -> str:
    """An archive as tables hold it: a folder, on request by its absolute path, or a URL. Raises `UsageError`."""
    name = storage.without_scheme(archive)
    return path_text(str(Path(name).resolve()) if absolute and not storage.is_remote(name) else name)


def local_path(archive: str, path: str = "") -> str:
    """Where the system finds a file of an archive, or storage does; both as `path_text` writes them."""
    join = storage.joined if storage.is_remote(archive) else os.path.join
    if "\\x" not in archive and "\\x" not in path:
        return join(archive, path) if path else archive
    names = [_ESCAPE.sub(lambda found: bytes([int(found[1], 16)]), os.fsencode(text)) for text in (archive, path)]
    archive, path = (os.fsdecode(name) for name in names)
    return join(archive, path) if path else archive


def check_folders(archives: Iterable[str]) -> None:
    """Raise `UsageError` for the first archive that is no folder, here or in its storage."""
    for archive in archives:
        if storage.is_remote(archive):
            storage.check(local_path(archive))
        elif not os.path.isdir(local_path(archive)):
            raise UsageError(f"archive {archive}: no such folder; give folders that hold FITS files")


def list_files(archive: str, visited: set[tuple[int, Any]] | None = None) -> list[FileEntry]:
    """Every FITS file below a folder, hidden ones too, in order of their paths.

    Links are followed; each folder is entered once, so that loops of links end. `visited` (device and inode of folders,
    storage and name of files) is shared between archives that may overlap. Raises `UsageError` if the archive is no folder.
    """
    visited = set() if visited is None else visited
    if storage.is_remote(archive):
        return _remote_files(archive, visited)
    check_folders([archive])
    root = Path(local_path(archive))
    entries: list[FileEntry] = []
    pending = [""]
    while pending:
        folder = pending.pop()
        try:
            found = _scan(root, folder, visited)
        except OSError as error:
            entries.append(FileEntry(path_text(folder) or ".", 0, 0, f"the folder cannot be listed: {error.strerror}"))
            continue
        for entry in found:
            relative = f"{folder}/{entry.name}" if folder else entry.name
            if _is_folder(entry):
                pending.append(relative)
            elif entry.name.lower().endswith(ENDINGS):
                entries.append(_entry(entry, path_text(relative)))
    return sorted(entries, key=lambda entry: entry.path)


def _remote_files(archive: str, visited: set[tuple[int, Any]]) -> list[FileEntry]:
    """The same of an archive given by URL."""
    seen = [s for s in storage.listed(local_path(archive), visited) if s.fault or s.path.lower().endswith(ENDINGS)]
    entries = [FileEntry(path_text(s.path), s.size, s.modified_ns, s.fault) for s in seen]
    if any(entry.modified_ns == 0 and not entry.fault for entry in entries):
        log.info("archive %s: no times of change are told; a file counts as changed if its size does", archive)
    return sorted(entries, key=lambda entry: entry.path)


def _scan(root: Path, folder: str, visited: set[tuple[int, Any]]) -> list[os.DirEntry[str]]:
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


def open_file(path: str) -> int:
    """A descriptor of a regular file, never waiting for one that is a pipe by now. Raises `OSError`, `SetAsideError`."""
    descriptor = os.open(path, os.O_RDONLY | os.O_NONBLOCK)
    if stat.S_ISREG(os.fstat(descriptor).st_mode):
        return descriptor
    os.close(descriptor)
    raise SetAsideError("unreadable", "not a regular file")


def _status(path: str) -> tuple[int, int]:
    """Size and time of change (ns) of a file now."""
    if storage.is_remote(path):
        return storage.status(path)
    status = os.stat(path)
    return status.st_size, status.st_mtime_ns


def check_unchanged(path: str, size: int, modified_ns: int, companions: Iterable[str] = ()) -> None:
    """Raise `SetAsideError` where a file is no longer the one that was listed. Raises `OSError` too.

    `modified_ns` is that of the latest of the file and its companions. Where a storage told no time, then or now, the size
    alone decides.
    """
    try:
        size_now, time_now = _status(path)
    except FileNotFoundError:
        raise SetAsideError("vanished", "the file is gone since its header was read") from None
    for companion in companions:
        with suppress(FileNotFoundError):  # whoever opens it says so
            time_now = max(time_now, _status(companion)[1])
    untimed = storage.is_remote(path) and 0 in (modified_ns, time_now)
    if size_now != size or (not untimed and abs(time_now - modified_ns) > COARSE_CLOCK_NS):
        raise SetAsideError("changed", "the file has changed since its header was read; give the same command again")


class Bytes(Protocol):
    """The bytes of a file as it is stored."""

    @property
    def size(self) -> int:
        """How many there are."""

    def pread(self, length: int, offset: int) -> bytes:
        """Up to `length` bytes from `offset`, fewer only at the end."""


class LocalFile:
    """A regular file of this system. Raises as `open_file`."""

    def __init__(self, path: str) -> None:
        self._descriptor = open_file(path)
        self.size = os.fstat(self._descriptor).st_size

    def pread(self, length: int, offset: int) -> bytes:
        """See `Bytes`."""
        return os.pread(self._descriptor, length, offset)

    def close(self) -> None:
        """Let go of it."""
        os.close(self._descriptor)


def opened(path: str) -> closing[LocalFile] | closing[storage.RemoteFile]:
    """A file as it is stored, wherever it is, to be used in a `with` statement. Raises `OSError`, `SetAsideError`."""
    return closing(storage.RemoteFile(path)) if storage.is_remote(path) else closing(LocalFile(path))


@contextmanager
def open_source(path: str, unpacked_limit: int) -> Iterator[Source]:
    """The unpacked bytes of a file, whether plain or gzip (told by its first bytes, not its name).

    `unpacked_limit` bounds, in bytes, what a gzip file may unpack to. Raises `OSError` where the system refuses, and
    `SetAsideError` (bad_compression) while a broken or too large gzip file is read.
    """
    with opened(path) as file:
        head = file.pread(FIRST_READ, 0)
        if head.startswith(GZIP_MAGIC):
            yield GzipSource(file, unpacked_limit)
        else:
            yield PlainSource(file, head)


class PlainSource:
    """A file as it is; `head` are its first bytes, which need not be read again."""

    def __init__(self, file: Bytes, head: bytes) -> None:
        self._file, self._head = file, head

    def read_at(self, offset: int, length: int) -> bytes:
        """Up to `length` bytes, fewer only at the end."""
        if offset >= self._file.size:
            return b""
        if offset + length <= len(self._head):
            return self._head[offset : offset + length]
        return self._file.pread(length, offset)

    def reaches(self, end: int) -> bool:
        """Whether the file has `end` bytes."""
        return self._file.size >= end


class GzipStream:
    """What a gzip file unpacks to, member after member, in pieces; packed bytes are read `chunk` at a time.

    Each member is fed in steps that grow from a small one: zlib hands back what it was fed beyond a member's end, which
    would be copied once for each of a great many small members.
    """

    def __init__(self, file: Bytes, chunk: int = CHUNK) -> None:
        self.packed_at = 0  # how far the file has been read
        self._file, self._chunk = file, chunk
        self._waiting = memoryview(b"")  # packed bytes read and not yet fed
        self._member = zlib.decompressobj(wbits=31)
        self._step = FIRST_FEED
        self._ended = False

    def piece(self, most: int) -> bytes:
        """The next unpacked bytes, at most so many; b'' at the end. Raises `SetAsideError` (bad_compression)."""
        unpacked = b""
        while not unpacked and not self._ended:
            if not self._waiting and not self._fill():
                raise SetAsideError("bad_compression", "the gzip file ends in the middle")
            fed = self._waiting[: self._step]
            try:
                unpacked = self._member.decompress(fed, most)
            except zlib.error as error:
                raise SetAsideError("bad_compression", f"the gzip file is broken: {error}") from error
            left = self._member.unused_data if self._member.eof else self._member.unconsumed_tail
            self._waiting = self._waiting[len(fed) - len(left) :]
            self._step = min(2 * self._step, self._chunk)
            if self._member.eof:
                self._next_member()
        return unpacked

    def _fill(self) -> bool:
        """Read more of the file; False at its end."""
        more = self._file.pread(self._chunk, self.packed_at)
        self.packed_at += len(more)
        self._waiting = memoryview(bytes(self._waiting) + more)
        return bool(more)

    def _next_member(self) -> None:
        """Go on with a further gzip member; what else follows (padding) is left."""
        if len(self._waiting) < len(GZIP_MAGIC):
            self._fill()
        self._member, self._step = zlib.decompressobj(wbits=31), FIRST_FEED
        self._ended = self._waiting[: len(GZIP_MAGIC)] != GZIP_MAGIC


class GzipSource:
    """A gzip file, unpacked forwards and no further than asked.

    The last four bytes of a gzip file give the unpacked size modulo 4 GiB (RFC 1952, 2.3.1). Where that is where the
    data at hand end, nothing follows them and they need not be unpacked; otherwise they are, in small pieces.
    """

    def __init__(self, file: Bytes, limit: int) -> None:
        self.stream = GzipStream(file)
        self._file, self._limit = file, limit
        self._window, self._window_at = bytearray(), 0  # the unpacked bytes kept, and where they begin
        self._known_end: int | None = None

    def read_at(self, offset: int, length: int) -> bytes:
        """Up to `length` unpacked bytes, fewer only at the end."""
        if self._known_end is not None and offset >= self._known_end:
            return b""
        self._unpack_to(offset + length, offset)
        start = offset - self._window_at
        return bytes(self._window[start : start + length])

    def reaches(self, end: int) -> bool:
        """Whether the file unpacks to at least `end` bytes."""
        self._check_limit(end)
        if (self._trailer_size() - end) % FOUR_GIB < BLOCK:
            self._known_end = end
            return True
        self._unpack_to(end, end)
        return self._window_at + len(self._window) >= end

    def _trailer_size(self) -> int:
        return int.from_bytes(self._file.pread(4, max(0, self._file.size - 4)), "little")

    def _unpack_to(self, end: int, keep_from: int) -> None:
        """Unpack up to `end`, or the file's end; forget what is before `keep_from`, which is never asked for again."""
        while True:
            cut = min(keep_from - self._window_at, len(self._window))
            if cut > 0:
                del self._window[:cut]
                self._window_at += cut
            if self._window_at + len(self._window) >= end:
                return
            piece = self.stream.piece(CHUNK)
            if not piece:
                return
            self._window += piece
            self._check_limit(self._window_at + len(self._window))

    def _check_limit(self, size: int) -> None:
        if size > self._limit:
            megabytes = self._limit // 1_000_000
            raise SetAsideError("bad_compression", f"the file unpacks to more than the limit of {megabytes} MB")
