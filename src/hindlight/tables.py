"""Tables to files and back: whole or not at all, with units, UCDs and descriptions, and the same bytes every time.

Every file is written aside, flushed to disk and renamed into place. Nothing here knows what a table means.
"""

from __future__ import annotations

import io
import os
import tempfile
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import astropy.table
import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from hindlight.errors import UsageError
from hindlight.schema import NATURAL_UNIT, TableColumn

ARROW_TYPES = {"float64": pa.float64(), "int64": pa.int64(), "bool": pa.bool_(), "str": pa.string()}
WRITERS = {".ecsv": "ascii.ecsv", ".fits": "fits", ".vot": "votable", ".csv": "ascii.csv"}


def write_whole(path: Path, data: bytes) -> None:
    """Put `data` at `path`, whole or not at all, also if the machine loses power."""
    descriptor, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.", suffix=".part")
    try:
        with os.fdopen(descriptor, "wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        os.chmod(name, 0o666 & ~_umask())
        os.replace(name, path)
    except BaseException:
        if os.path.exists(name):
            os.unlink(name)
        raise
    folder = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)


def _umask() -> int:
    current = os.umask(0o022)
    os.umask(current)
    return current


def arrow_table(
    columns: Sequence[TableColumn], values: Mapping[str, Any], metadata: Mapping[str, str] | None = None
) -> pa.Table:
    """An Arrow table with the declared columns; descriptions, units and UCDs are in the fields' metadata."""
    fields = [
        pa.field(c.name, ARROW_TYPES[c.dtype], metadata={"description": c.doc, "unit": c.unit, "ucd": c.ucd})
        for c in columns
    ]
    arrays = [pa.array(values[c.name], type=ARROW_TYPES[c.dtype]) for c in columns]
    return pa.Table.from_arrays(arrays, schema=pa.schema(fields, metadata=dict(metadata or {})))


def write_parquet(path: Path, table: pa.Table, row_group: int = 65536) -> None:
    """Write an Arrow table as Parquet with page checksums."""
    buffer = io.BytesIO()
    pq.write_table(table, buffer, compression="zstd", write_page_checksum=True, row_group_size=row_group)
    write_whole(path, buffer.getvalue())


def read_parquet(path: Path, columns: Sequence[str] | None = None, filters: Any = None) -> pa.Table:
    """Read Parquet, verifying page checksums. Raises `UsageError` naming the file where it is damaged."""
    wanted = None if columns is None else list(columns)
    try:
        return pq.read_table(path, columns=wanted, filters=filters, page_checksum_verification=True, partitioning=None)
    except (pa.ArrowException, OSError, KeyError) as error:
        raise damaged(path, error) from None


def read_metadata(path: Path) -> dict[bytes, bytes]:
    """The key-value metadata of a Parquet file. Raises `UsageError` naming the file where it is damaged."""
    try:
        return dict(pq.read_schema(path).metadata or {})
    except (pa.ArrowException, OSError) as error:
        raise damaged(path, error) from None


def read_ecsv(path: Path) -> astropy.table.Table:
    """Read ECSV. Raises `UsageError` naming the file where it is damaged."""
    try:
        return astropy.table.Table.read(path, format="ascii.ecsv")
    except (ValueError, OSError, IndexError, KeyError) as error:
        raise damaged(path, error) from None


def damaged(path: Path, error: Exception) -> UsageError:
    """What to say of a file of the run that cannot be read."""
    detail = " ".join(str(error).split())[:120]
    return UsageError(
        f"{path}: is damaged ({detail}); delete that file and give the `mine` command again, it is made anew"
    )


def columns_of(table: pa.Table) -> dict[str, Any]:
    """An Arrow table as NumPy arrays by column name (text as object arrays)."""
    return {name: table.column(name).to_numpy() for name in table.column_names}


def astropy_table(
    columns: Sequence[TableColumn], values: Mapping[str, Any], meta: Mapping[str, Any] | None = None
) -> astropy.table.Table:
    """An astropy table with the declared columns, their units, descriptions and UCDs."""
    table = astropy.table.Table(meta=dict(meta or {}))
    for column in columns:
        data = np.asarray(values[column.name])
        data = data.astype(str) if column.dtype == "str" else data.astype(column.dtype)
        table[column.name] = data
        info = table[column.name].info
        if column.unit and column.unit != NATURAL_UNIT:
            info.unit = column.unit
        info.description = column.doc
        if column.ucd:
            info.meta = {"ucd": column.ucd}
    return table


def write_table(path: Path, table: astropy.table.Table) -> None:
    """Write an astropy table in the format of the file's ending: .ecsv, .fits, .vot, .csv or .parquet."""
    suffix = path.suffix.lower()
    if suffix == ".parquet":
        write_parquet(path, pa.table({name: np.asarray(table[name]).tolist() for name in table.colnames}))
        return
    with tempfile.TemporaryDirectory() as folder:
        scratch = Path(folder) / f"table{suffix}"
        _write_scratch(scratch, table, suffix)
        write_whole(path, scratch.read_bytes())


def _write_scratch(scratch: Path, table: astropy.table.Table, suffix: str) -> None:
    if suffix == ".vot":
        from astropy.io.votable import from_table, writeto

        votable = from_table(table)
        for field_, name in zip(votable.get_first_table().fields, table.colnames, strict=True):
            field_.ucd = (table[name].info.meta or {}).get("ucd")
        writeto(votable, str(scratch))
    elif suffix == ".fits":
        _fits_safe(table).write(scratch, format="fits")
    else:
        table.write(scratch, format=WRITERS[suffix])


def _fits_safe(table: astropy.table.Table) -> astropy.table.Table:
    """A copy whose text is plain ASCII, as FITS demands, and whose UCDs stand in TUCDn cards."""
    safe = table.copy()
    safe.meta = {}
    for number, name in enumerate(table.colnames, 1):
        if safe[name].dtype.kind == "U":
            width = max(1, safe[name].dtype.itemsize // 4)
            text = [value.encode("ascii", "backslashreplace") for value in safe[name].tolist()]
            safe[name] = astropy.table.Column(np.array(text, dtype=f"S{max([width, *map(len, text)])}"))
        safe[name].info.description = table[name].info.description
        ucd = (table[name].info.meta or {}).get("ucd")
        safe[name].info.meta = {}
        if ucd:
            safe.meta[f"TUCD{number}"] = ucd
    return safe


def rows_to_columns(columns: Sequence[TableColumn], rows: Iterable[Mapping[str, Any]]) -> dict[str, list[Any]]:
    """A list of rows as lists by column; what a row leaves out is blank."""
    blanks = {"str": "", "bool": False, "int64": 0, "float64": float("nan")}
    rows = list(rows)
    return {c.name: [row.get(c.name, blanks[c.dtype]) for row in rows] for c in columns}
