"""Archives that are no folder: whatever storage fsspec reaches, by URL. The only importer of fsspec.

A file of such an archive is named `ARCHIVE//PATH`: two slashes stand between what the user gave and what was found below
it, so that neither chained URLs nor odd names need be taken apart. Every process opens the storage by itself. Whatever a
storage raises, which is of any kind, comes out as a `StorageError`.
"""

from __future__ import annotations

import errno
import io
import re
import tempfile
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import AbstractContextManager, closing, contextmanager, nullcontext, suppress
from datetime import UTC, datetime
from email.utils import parsedate_to_datetime
from functools import cached_property, lru_cache
from typing import Any, NamedTuple

from fsspec.asyn import AsyncFileSystem
from fsspec.core import url_to_fs
from fsspec.spec import AbstractFileSystem
from fsspec.utils import get_protocol

from hindlight.errors import UsageError

AHEAD = 1 << 15  # bytes that are read at once where fewer are asked for: most headers
LEAST = 1 << 12  # bytes that some storage reads beyond what it is asked for
MOST_AHEAD = 1 << 22  # the same, where a file is read on and on
PIECE = 1 << 22
TIMES = (
    "mtime", "LastModified", "last_modified", "Last-Modified", "updated", "modified", "modificationTime", "modify",
    "created",
)  # fmt: skip
MILLISECONDS_FROM = 1e11  # seconds would be of the year 5138
NS = 1_000_000_000

_URL = re.compile(r"[A-Za-z][A-Za-z0-9+.\-]*(?:://|::.*://)", re.DOTALL)
_FOLDER = re.compile(r"(?:file|local)://(?!.*::)", re.DOTALL)
_PASSWORD = re.compile(r"://[^/@:]*:[^/@]*@")


class StorageError(OSError):
    """Storage that does not give what it is asked for; `strerror` is a sentence."""

    def __str__(self) -> str:
        return str(self.strerror)


class Seen(NamedTuple):
    """A file in a listing: its path below the archive, size in bytes, time of change (0: not told), and what is wrong."""

    path: str
    size: int
    modified_ns: int
    fault: str = ""


# --- names


def is_remote(path: str) -> bool:
    """Whether an archive, or a file as `joined` writes it, is a URL."""
    return _URL.match(path) is not None


def without_scheme(archive: str) -> str:
    """An archive as it is kept: a folder for file://, other URLs without slashes at their end.

    Raises `UsageError` where a URL holds a password: tables and settings of a run would hold it too.
    """
    if _FOLDER.match(archive):
        return str(url_to_fs(archive)[1])
    if not is_remote(archive):
        return archive
    if _PASSWORD.search(archive):
        shown = _PASSWORD.sub("://...@", archive)
        raise UsageError(
            f"archive {shown}: the URL holds a password, which the run would keep; put it into fsspec's configuration "
            "(a file in ~/.config/fsspec, or a variable FSSPEC_...)"
        )
    shorter = archive.rstrip("/")
    return archive if shorter.endswith(":") else shorter


def joined(archive: str, path: str) -> str:
    """The name of a file of an archive given by URL."""
    return f"{archive}//{path}"


def alone(archives: Iterable[str]) -> list[str]:
    """The archives that only this process can see."""
    return [archive for archive in archives if is_remote(archive) and get_protocol(archive.split("::")[-1]) == "memory"]


# --- listing


def check(archive: str) -> None:
    """Raise `UsageError` where the folder that a URL means cannot be listed."""
    _root(archive)


def listed(archive: str, visited: set[tuple[int, Any]]) -> list[Seen]:
    """Every file below a URL, and a `Seen` with a fault for what cannot be listed; those in `visited` are left out.

    Raises `UsageError` where there is nothing to be listed.
    """
    fs, root = _root(archive)
    found, faults = _every_file(fs, root, archive)
    seen = [Seen(".", 0, 0, fault) for fault in faults]
    for name, info in found.items():
        key = hash(fs), name
        if key not in visited:
            visited.add(key)
            seen.append(_seen(name[len(root) :].lstrip("/"), info))
    return seen


def _root(archive: str) -> tuple[Any, str]:
    """The storage, fresh, and its name for the folder; raises `UsageError`."""
    try:
        fs, root = _storage(archive)
        fs.invalidate_cache()
        top = fs.ls(root, detail=True)
    except FileNotFoundError:
        raise UsageError(f"archive {archive}: no such folder there; give the URL of a folder that is") from None
    except ImportError as error:
        raise UsageError(
            f"archive {archive}: a package for such URLs is missing ({_line(error)}); install it beside hindlight"
        ) from None
    except ValueError as error:
        raise UsageError(
            f"archive {archive}: no storage for such a URL ({_line(error)}); give a folder, or a URL that fsspec knows"
        ) from None
    except Exception as error:  # noqa: BLE001 - every storage has errors of its own
        raise UsageError(
            f"archive {archive}: the storage does not answer ({_line(error)}); "
            "see whether address, network and credentials are right"
        ) from None
    if [info for info in top if info["name"].rstrip("/") == root and info["type"] == "file"]:
        raise UsageError(f"archive {archive}: is a file; give the URL of the folder that holds it")
    return fs, root


def _every_file(fs: Any, root: str, archive: str) -> tuple[dict[str, Any], list[str]]:
    """What is listed of each file by its name in the storage, and sentences on folders that cannot be listed."""
    found: dict[str, Any] = {}
    if not _lists_folder_by_folder(fs):  # an object store gives all names below a prefix at once
        try:
            return fs.find(root, detail=True), []
        except Exception as error:  # noqa: BLE001 - every storage has errors of its own
            raise UsageError(f"archive {archive}: its files cannot be listed ({_line(error)}); try again") from None
    faults: list[str] = []
    pending, entered = [root], {root}
    while pending:
        folder = pending.pop()
        try:
            listing = fs.ls(folder, detail=True)
        except Exception as error:  # noqa: BLE001 - every storage has errors of its own
            faults.append(f"the folder {folder} cannot be listed: {_line(error)}")
            continue
        for info in listing:
            name = info["name"].rstrip("/")
            if info["type"] != "directory":
                found[name] = info
            elif name not in entered:  # links may lead back
                entered.add(name)
                pending.append(name)
    return found, faults


def _lists_folder_by_folder(fs: Any) -> bool:
    """Whether `find` is fsspec's own, which leaves folders out in silence that cannot be listed."""
    if isinstance(fs, AsyncFileSystem):
        return type(fs)._find is AsyncFileSystem._find
    return type(fs).find is AbstractFileSystem.find


def _seen(path: str, info: Mapping[str, Any]) -> Seen:
    if "//" in path:
        return Seen(path, 0, 0, "two slashes in its name: it cannot be told where it is")
    if info["type"] not in ("file", "link"):
        return Seen(path, 0, 0, "not a regular file")
    if info.get("size") is None:
        return Seen(path, 0, 0, "the storage does not tell its size")
    return Seen(path, int(info["size"]), modified_ns(info))


def modified_ns(info: Mapping[str, Any]) -> int:
    """When a file was changed, in ns since 1970, as the storage tells it in one of many ways; 0 where it does not."""
    for key in TIMES:
        with suppress(ValueError, TypeError, OverflowError):
            seconds = _seconds(info.get(key))
            if seconds > 0:
                return int(seconds * NS)
    return 0


def _seconds(told: Any) -> float:
    """Seconds since 1970 of a time; raises where it is none."""
    if isinstance(told, str):
        if re.match(r"\d{14}", told):  # as file transfer has it (RFC 3659)
            told = datetime.strptime(told[:14], "%Y%m%d%H%M%S")
        else:
            told = parsedate_to_datetime(told) if "," in told else datetime.fromisoformat(told)
    if isinstance(told, datetime):
        return (told if told.tzinfo else told.replace(tzinfo=UTC)).timestamp()
    return float(told) / (1000.0 if float(told) > MILLISECONDS_FROM else 1.0)


# --- one file


def status(path: str) -> tuple[int, int]:
    """Size and time of change (ns, 0: not told) of a file now. Raises `FileNotFoundError` and `StorageError`."""
    with _said():
        fs, name = _located(path)
        fs.invalidate_cache()
        try:
            info = fs.info(name)
        except FileNotFoundError:
            info = None
    if info is None:
        raise FileNotFoundError(errno.ENOENT, "no such file", path)
    return int(info["size"] or 0), modified_ns(info)


class RemoteFile:
    """A file that is read by ranges of its bytes; raises `StorageError`."""

    def __init__(self, path: str) -> None:
        with _said():
            self._fs, self._name = _located(path)
        self._held, self._held_at, self._ahead = b"", 0, AHEAD
        self._handle: Any = None

    @cached_property
    def size(self) -> int:
        """Bytes of the file."""
        with _said():
            return int(self._fs.info(self._name)["size"])

    def pread(self, length: int, offset: int) -> bytes:
        """Up to `length` bytes from `offset`, fewer only at the end. Some more are read ahead and kept."""
        end = min(offset + length, self.size)
        if offset >= end:
            return b""
        held_to = self._held_at + len(self._held)
        if not self._held_at <= offset <= end <= held_to:
            self._ahead = (
                min(2 * self._ahead, MOST_AHEAD) if self._held and self._held_at <= offset <= held_to else AHEAD
            )
            (self._held,) = self.ranges([offset], [min(self.size, max(end, offset + self._ahead))])
            self._held_at = offset
        return self._held[offset - self._held_at : end - self._held_at]

    def ranges(self, starts: Sequence[int], ends: Sequence[int]) -> list[bytes]:
        """The bytes of each range, all of them within the file."""
        with _said():
            if isinstance(self._fs, AsyncFileSystem) or type(self._fs).cat_file is not AbstractFileSystem.cat_file:
                names = [self._name] * len(starts)
                got = self._fs.cat_ranges(names, list(starts), list(ends), on_error="raise")
            else:
                got = [self._through_handle(start, end) for start, end in zip(starts, ends, strict=True)]
        for start, end, piece in zip(starts, ends, got, strict=True):
            if len(piece) != end - start:
                told = f"{len(piece)} bytes for {end - start} from byte {start}"
                raise _error(f"gave {told}: the file is changing, or ranges are not served")
        return [bytes(piece) for piece in got]

    def _through_handle(self, start: int, end: int) -> bytes:
        """For storage without ranges of its own: fsspec would open the file for each, and read 5 MB ahead."""
        if self._handle is None:
            self._handle = self._fs.open(self._name, "rb", block_size=LEAST, cache_type="none")
        self._handle.seek(start)
        return bytes(self._handle.read(end - start))

    def close(self) -> None:
        """Let go of it."""
        handle, self._handle = self._handle, None
        if handle is not None:
            with suppress(Exception):  # what has been read has been read
                handle.close()


class _Stream(io.RawIOBase):
    """A remote file for readers that seek and read."""

    def __init__(self, file: RemoteFile) -> None:
        self._file, self._at = file, 0

    def readable(self) -> bool:
        return True

    def seekable(self) -> bool:
        return True

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        base = {io.SEEK_SET: 0, io.SEEK_CUR: self._at, io.SEEK_END: self._file.size}[whence]
        self._at = base + offset
        return self._at

    def readinto(self, buffer: Any) -> int:
        got = self._file.pread(len(buffer), self._at)
        buffer[: len(got)] = got
        self._at += len(got)
        return len(got)

    def close(self) -> None:
        self._file.close()
        super().close()


def readable(path: str) -> AbstractContextManager[Any]:
    """What a library that opens files by itself is given: the path of a local file, else an open stream of ranges."""
    return closing(io.BufferedReader(_Stream(RemoteFile(path)))) if is_remote(path) else nullcontext(path)


@contextmanager
def fetched(path: str, end: int) -> Iterator[str]:
    """The first `end` bytes of a remote file, or all there are, as a local file that is deleted afterwards."""
    with closing(RemoteFile(path)) as file, tempfile.NamedTemporaryFile(prefix="hindlight-") as local:
        end = min(end, file.size)
        for start in range(0, end, PIECE):
            local.writelines(file.ranges([start], [min(start + PIECE, end)]))
        local.flush()
        yield local.name


@lru_cache(maxsize=64)
def _storage(archive: str) -> tuple[Any, str]:
    """The storage of an archive and its own name for the folder; raises whatever the storage does."""
    fs, root = url_to_fs(archive)
    return fs, str(root).rstrip("/")


def _located(path: str) -> tuple[Any, str]:
    """The storage of a file as `joined` writes it, and its own name for the file."""
    archive, _, below = path.rpartition("//")
    fs, root = _storage(archive)
    return fs, f"{root}/{below}" if root else f"{fs.root_marker}{below}"


@contextmanager
def _said() -> Iterator[None]:
    """Make a `StorageError` of whatever storage raises."""
    try:
        yield
    except FileNotFoundError as error:
        raise _error("the file is not there") from error
    except Exception as error:
        raise _error(_line(error)) from error


def _error(what: str) -> StorageError:
    return StorageError(errno.EIO, f"the storage says: {what}")


def _line(error: BaseException) -> str:
    """An error in a line, without a full stop."""
    text = " ".join(str(error).split()).rstrip(".")
    return f"{type(error).__name__}: {text}" if text else type(error).__name__
