"""The run folder: lock, pinned plan, raw parts, and light curves regrouped by position.

The plan is the `batch` of each frame and the `round` of each position, written once and only added to. A part holds
the raw measurements of one batch in one round and is never written again. Nothing here measures or judges.
"""

from __future__ import annotations

import fcntl
import json
import os
import socket
from collections.abc import Iterable, Mapping, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from hindlight.ensemble import calibrated
from hindlight.ensemble import flags as flags_of
from hindlight.errors import RunInUseError, UsageError
from hindlight.lightcurve import Block, Channel, FloatArray, IntArray, freeze
from hindlight.schema import FRAME_SOLUTION, FRAMES, MEASUREMENTS, POSITIONS, UNUSABLE, TableColumn
from hindlight.tables import arrow_table, columns_of, read_metadata, read_parquet, write_parquet, write_whole

PART_ROW_GROUP = 16384

Columns = dict[str, Any]


@dataclass(frozen=True)
class Piece:
    """One piece of measuring: a batch of frames in a round of positions."""

    batch: int
    round: int


@dataclass(frozen=True)
class RunFolder:
    """Paths and files of one run."""

    path: Path

    def file(self, name: str) -> Path:
        """The path of a file of the run."""
        return self.path / name

    def part(self, piece: Piece) -> Path:
        """Where the measurements of a piece are."""
        return self.path / "measurements" / f"round-{piece.round:03d}" / f"batch-{piece.batch:06d}.parquet"

    def create(self) -> None:
        """Make the folder; raises `UsageError` where it cannot be one."""
        if self.path.exists() and not self.path.is_dir():
            raise UsageError(f"output {self.path}: is a file; give a folder for the run")
        known = self.has("settings.toml") or self.has("frames.parquet") or not self.path.exists()
        ours = ("lock", "log.txt", "measurements")  # what a run that was killed at once may have left
        if not known and any(p.name not in ours and not p.name.endswith(".part") for p in self.path.iterdir()):
            raise UsageError(f"output {self.path}: holds other files and is no run; give a new or empty folder")
        try:
            (self.path / "measurements").mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise UsageError(f"output {self.path}: cannot be made ({error.strerror}); give another folder") from None

    def version(self) -> str:
        """Changes whenever a table that pieces of work share is written anew."""
        names = ("frames.parquet", "positions.parquet", "frame_solution.parquet")
        return ",".join(str(self.file(n).stat().st_mtime_ns) if self.has(n) else "-" for n in names)

    def discard_if_new(self) -> None:
        """Leave no trace of a run that found nothing to do: remove its folder unless it holds anything."""
        if self.has("settings.toml"):
            return
        for name in ("lock", "log.txt"):
            self.file(name).unlink(missing_ok=True)
        for folder in (self.path / "measurements", self.path):
            with suppress(OSError):
                folder.rmdir()

    def sweep(self) -> None:
        """Remove what a killed process left half written; only for whoever holds the lock."""
        for path in self.path.rglob(".*.part"):
            path.unlink(missing_ok=True)

    def require(self) -> None:
        """Raise `UsageError` unless this is a run that has been measured."""
        if not self.has("positions.parquet"):
            raise UsageError(
                f"{self.path}: no run here; make one with `hindlight mine ARCHIVE --targets FILE --out RUN`"
            )
        if not self.has("frame_solution.parquet"):
            raise UsageError(f"{self.path}: this run was stopped before all was measured; its command continues it")

    def has(self, name: str) -> bool:
        """Whether a file of the run is there."""
        return self.file(name).is_file()

    def write_columns(self, name: str, columns: Sequence[TableColumn], values: Mapping[str, Any]) -> None:
        """Write one of the run's Parquet tables whole."""
        write_parquet(self.file(name), arrow_table(columns, values))

    def frames(self) -> Columns:
        """The frame table as arrays by column."""
        return columns_of(read_parquet(self.file("frames.parquet"), [c.name for c in FRAMES]))

    def positions(self) -> Columns:
        """The position table as arrays by column."""
        return columns_of(read_parquet(self.file("positions.parquet"), [c.name for c in POSITIONS]))

    def solution(self) -> Columns:
        """The frame solution as arrays by column."""
        return columns_of(read_parquet(self.file("frame_solution.parquet"), [c.name for c in FRAME_SOLUTION]))

    @contextmanager
    def locked(self) -> Any:
        """Hold the run's lock; raises `RunInUseError` naming the holder. A dead process's lock is taken over."""
        path = self.file("lock")
        stream = open(path, "a+", encoding="utf-8")  # noqa: SIM115 - closed below, once: closing it drops the lock
        try:
            _take(stream, self.path)
            yield
        finally:
            stream.close()


def _take(stream: IO[str], run: Path) -> None:
    try:
        fcntl.lockf(stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        stream.seek(0)
        holder = stream.read().strip() or "another process"
        raise RunInUseError(f"run {run}: in use by {holder}; wait for it or give another --out") from None
    stream.seek(0)
    stream.truncate()
    stream.write(f"host {socket.gethostname()} process {os.getpid()}\n")
    stream.flush()


def pieces(frames: Columns, positions: Columns) -> list[Piece]:
    """Every piece of the plan, in order."""
    batches = np.unique(frames["batch"][(frames["state"] != "void") & (frames["batch"] >= 0)])
    rounds = np.unique(positions["round"])
    return [Piece(int(batch), int(round_)) for round_ in rounds for batch in batches]


def write_part(run: RunFolder, piece: Piece, columns: Columns, rejects: list[dict[str, Any]]) -> None:
    """Write one part, sorted by position and frame, with the frames set aside while measuring in its metadata."""
    order = np.lexsort((columns["frame"], columns["position"]))
    values = {c.name: columns[c.name][order] for c in MEASUREMENTS}
    table = arrow_table(MEASUREMENTS, values, {"rejects": json.dumps(rejects, sort_keys=True)})
    path = run.part(piece)
    path.parent.mkdir(parents=True, exist_ok=True)
    if not path.exists():  # a slow copy of the same task may come second; what is there stays
        write_parquet(path, table, PART_ROW_GROUP)


def part_rejects(run: RunFolder, plan: Iterable[Piece]) -> list[dict[str, Any]]:
    """Frames set aside while they were measured, in the order of the plan."""
    rows: list[dict[str, Any]] = []
    for piece in plan:
        rows += json.loads(read_metadata(run.part(piece)).get(b"rejects", b"[]"))
    return rows


def read_rows(run: RunFolder, plan: Iterable[Piece], positions: IntArray, frames: IntArray | None = None) -> Columns:
    """All raw rows of these positions (and only these frames, if given), ordered by position and frame."""
    wanted = np.unique(positions)
    first, last = (int(wanted[0]), int(wanted[-1])) if len(wanted) else (0, -1)
    filters: Any = [("position", ">=", first), ("position", "<=", last), ("position", "in", pa.array(wanted))]
    if frames is not None:
        filters.append(("frame", "in", pa.array(np.unique(frames))))
    names = [c.name for c in MEASUREMENTS]
    tables = [read_parquet(run.part(piece), names, filters) for piece in plan]
    rows = columns_of(pa.concat_tables(tables).unify_dictionaries())
    order = np.lexsort((rows["frame"], rows["position"]))
    return {name: values[order] for name, values in rows.items()}


def blocks(
    rows: Columns, positions: IntArray, names: Sequence[str], solution: Columns, channels: Mapping[str, Channel]
) -> dict[str, Block]:
    """Rows as one block per channel, in order of channel; every position has a row in each.

    Measurements with a flag that makes them unusable, without a finite flux, or in a frame whose solution is bad are
    NaN. `positions` (sorted) and `names` belong together; `rows` are those of `read_rows`, each with its frame's
    `clock_error_s`.
    """
    found: dict[str, Block] = {}
    for label in sorted(set(rows["channel"].tolist())):
        mine = rows["channel"] == label
        part = {name: values[mine] for name, values in rows.items()}
        found[label] = _block(part, positions, names, solution, channels[label])
    return found


def _block(rows: Columns, positions: IntArray, names: Sequence[str], solution: Columns, channel: Channel) -> Block:
    frames, first, column = np.unique(rows["frame"], return_index=True, return_inverse=True)
    row = np.asarray(np.searchsorted(positions, rows["position"]))
    flux, flux_err, bad = calibrated(rows, solution)
    usable = np.isfinite(flux) & np.isfinite(flux_err) & (flux_err > 0) & ~bad & ((rows["flags"] & int(UNUSABLE)) == 0)

    def matrix(values: FloatArray, keep: NDArray[np.bool_] = usable) -> FloatArray:
        filled = np.full((len(positions), len(frames)), np.nan)
        filled[row[keep], column[keep]] = values[keep]
        filled.flags.writeable = False
        return filled

    flags = np.zeros((len(positions), len(frames)), np.int64)
    flags[row, column] = flags_of(rows, solution)
    flags.flags.writeable = False
    return Block(
        names=tuple(names),
        channel=channel,
        frame=freeze(frames, np.int64),
        t_tdb_s=matrix(rows["t_tdb_s"]),
        exposure_s=matrix(rows["exposure_s"]),
        flux=matrix(flux),
        flux_err=matrix(flux_err),
        raw_flux=matrix(rows["flux"]),
        raw_flux_err=matrix(rows["flux_err"]),
        flags=flags,
        clock_error_s=freeze(rows["clock_error_s"][first]),
    )


def write_text(run: RunFolder, name: str, text: str) -> None:
    """Write a text file of the run whole."""
    write_whole(run.file(name), text.encode("utf-8"))
