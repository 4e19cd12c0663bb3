"""Rows in Parquet files: a path, a glob, a directory with key=value folders, or a list of them.

Each row group is decoded on its own, straight from the file and in small batches, so that memory depends neither on the
size of the files nor on that of their row groups. The files must stay as they are while they are read: size and time
are compared at every scan.
"""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import pyarrow as pa

from drumlin.errors import SchemaError, SourceError
from drumlin.tables.paths import FileEntry, find_files
from drumlin.tables.schemas import join_schemas
from drumlin.tables.table import BATCH_ROWS, Gap, Table, Unit, fingerprint

__all__ = ["ParquetTable"]

READ_BYTES = 1 << 20
"""Compressed bytes of a column that are fetched at once from a local file."""


@dataclass(frozen=True)
class _File:
    entry: FileEntry
    schema: pa.Schema
    group_rows: tuple[int, ...]
    group_bytes: tuple[int, ...]

    @property
    def rows(self) -> int:
        return sum(self.group_rows)


class ParquetTable(Table):
    """The rows of Parquet files, in the order of their paths (digits as numbers), row group by row group.

    Columns are those that all files have. A column of different numeric width is widened, with a note; one that some
    file lacks, or that has types that do not go together, is left out and named in an error as soon as it is asked
    for. Files without rows are skipped, with a note. Folders called key=value below the named place become columns.

    Raises SourceError, naming the file, when one cannot be found or read; SchemaError when the files have no column
    in common.

    Cost: opening reads the footer of every file. A scan reads the named columns once; memory: one batch, and about a
    megabyte of compressed bytes per column.
    """

    def __init__(self, rows: str | os.PathLike[str] | Sequence[str | os.PathLike[str]]) -> None:
        entries = find_files(rows)
        self._rows = rows
        with ThreadPoolExecutor(max_workers=min(8, len(entries))) as pool:
            found = list(pool.map(_inspect, entries))
        files = [file for file in found if file.rows] or found[:1]
        joint = join_schemas([file.schema for file in files], [file.entry.shown for file in files])
        if not joint.schema.names and joint.left_out:
            names = [entry.shown for entry in entries]
            raise SchemaError(f"The files {names[0]} and {names[-1]} have no column in common. Read them apart.")
        self._partition_types = _partition_types([file.entry for file in files], joint.schema.names)
        schema = joint.schema
        for name, type_ in self._partition_types.items():
            schema = schema.append(pa.field(name, type_))
        label = _label(rows, len(entries))
        super().__init__(schema, label, sum(file.rows for file in files))
        self._files = files
        self._joint = joint.schema
        self.files = [file.entry.shown for file in files]
        self.partitions = list(self._partition_types)
        self.left_out = joint.left_out
        self.fingerprint = fingerprint(schema, [(file.rows, file.entry.size) for file in files])
        for file in found:
            if not file.rows:
                self.note(f"{file.entry.shown} has no rows and was skipped.")
        for text in joint.widened:
            self.note(text)
        for name, reason in joint.left_out.items():
            self.note(f"Column {name!r} cannot be used: {reason}")

    def __reduce__(self) -> tuple[Any, ...]:
        return _open_again, (self._rows, self.where, self.fingerprint)

    def units(self) -> list[Unit]:
        """Return the row groups in row order."""
        found, row = [], 0
        for file in self._files:
            for group, (rows, size) in enumerate(zip(file.group_rows, file.group_bytes, strict=True)):
                found.append(Unit(file.entry.shown, group, row, rows, size))
                row += rows
        return found

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        for file in self._files:
            _check_unchanged(file.entry)
        row = 0
        for file in self._files:
            end = row + file.rows
            if _touches(ranges, row, end):
                yield from self._read_file(file, columns, ranges, row)
            else:
                yield Gap(file.rows)
            row = end

    def _read_file(
        self, file: _File, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None, row: int
    ) -> Iterator[pa.RecordBatch | Gap]:
        """Yield the batches of one file; each row group is read on its own."""
        import pyarrow.parquet as pq

        entry = file.entry
        stored = [name for name in columns if name in self._joint.names]
        constants = dict(entry.partition)
        local = _is_local(entry.filesystem)
        with contextlib.ExitStack() as stack:
            with _naming(entry.shown):
                source = stack.enter_context(entry.filesystem.open_input_file(entry.path))
                opened = pq.ParquetFile(source, pre_buffer=not local, buffer_size=READ_BYTES if local else 0)
                reader = stack.enter_context(opened)
            for group, rows in enumerate(file.group_rows):
                if not _touches(ranges, row, row + rows):
                    yield Gap(rows)
                    row += rows
                    continue
                met = 0
                if stored:
                    batches = reader.iter_batches(BATCH_ROWS, row_groups=[group], columns=stored)
                else:  # columns from the path alone
                    batches = iter([pa.RecordBatch.from_arrays([pa.nulls(rows)], names=["rows"])])
                while True:
                    with _naming(entry.shown, group):
                        batch = next(batches, None)
                        if batch is None:
                            break
                        batch = self._shape(batch, stored, columns, constants)
                    met += batch.num_rows
                    yield batch
                if met != rows:
                    raise SourceError(
                        f"{entry.shown}: row group {group} holds {met:,} rows, but the file's own index says {rows:,}. "
                        "The file is damaged: make it anew, or leave it out.",
                        file=entry.shown,
                    )
                row += rows
        _check_unchanged(entry)

    def _shape(
        self, batch: pa.RecordBatch, stored: Sequence[str], columns: Sequence[str], constants: dict[str, str | None]
    ) -> pa.RecordBatch:
        """Give a batch the joint types and the columns that come from the path."""
        if not columns:
            return batch
        arrays = []
        for name in columns:
            type_ = self.schema.field(name).type
            if name in stored:
                array = batch.column(name)
                if array.type != type_:
                    array = _cast(array, type_)
            else:
                value = constants.get(name)
                scalar = pa.scalar(value, pa.string()).cast(type_)
                array = pa.repeat(scalar, batch.num_rows)
            arrays.append(array)
        return pa.RecordBatch.from_arrays(arrays, names=list(columns))


def _open_again(rows: Any, where: Any, expected: str) -> ParquetTable:
    """Open the same files in another process; they must be as they were."""
    table = ParquetTable(rows)
    if table.fingerprint != expected:
        raise SourceError(f"{table.label}: the files have changed since they were first opened. Start again.")
    table.where = where
    return table


def _inspect(entry: FileEntry) -> _File:
    """Read the footer of one file."""
    import pyarrow.parquet as pq

    if entry.size == 0:
        raise SourceError(
            f"{entry.shown} is empty (0 bytes), so it is not a Parquet file. Make it anew, or leave it out.",
            file=entry.shown,
        )
    with (
        _naming(entry.shown),
        entry.filesystem.open_input_file(entry.path) as source,
        pq.ParquetFile(source) as reader,
    ):
        data = reader.metadata
        groups = [data.row_group(group) for group in range(data.num_row_groups)]
        schema = reader.schema_arrow.remove_metadata()
        rows, sizes = (group.num_rows for group in groups), (group.total_byte_size for group in groups)
        return _File(entry, schema, tuple(rows), tuple(sizes))


@contextlib.contextmanager
def _naming(shown: str, group: int | None = None) -> Iterator[None]:
    """Turn what pyarrow says about a file into an error that names it."""
    try:
        yield
    except (SourceError, SchemaError, MemoryError):
        raise
    except PermissionError as error:
        raise SourceError(f"{shown} may not be read: permission denied. Check who owns it.", file=shown) from error
    except FileNotFoundError as error:
        raise SourceError(f"{shown} has gone. Put it back, or leave it out.", file=shown) from error
    except (pa.ArrowException, OSError, ValueError) as error:
        place = "" if group is None else f" (row group {group})"
        text = str(error).strip().splitlines()[0] if str(error).strip() else type(error).__name__
        raise SourceError(
            f"{shown}{place} cannot be read as Parquet: {text} The file is damaged, or is not a Parquet file: "
            "make it anew, or leave it out.",
            file=shown,
        ) from error


def _check_unchanged(entry: FileEntry) -> None:
    info = entry.filesystem.get_file_info(entry.path)
    if not info.is_file:
        raise SourceError(f"{entry.shown} has gone since it was opened. Put it back and start again.", file=entry.shown)
    if info.size != entry.size or (info.mtime_ns or 0) != entry.modified:
        raise SourceError(
            f"{entry.shown} has changed since it was opened. Start again once nothing writes to it.", file=entry.shown
        )


def _cast(array: pa.Array, type_: pa.DataType) -> pa.Array:
    exact = not pa.types.is_floating(type_)  # a number that float64 cannot hold exactly is rounded
    return array.cast(type_, safe=exact)


def _touches(ranges: Sequence[tuple[int, int]] | None, start: int, end: int) -> bool:
    return ranges is None or any(first < end and last > start for first, last in ranges)


def _is_local(filesystem: Any) -> bool:
    return bool(filesystem.type_name == "local")


def _partition_types(entries: Sequence[FileEntry], taken: Sequence[str]) -> dict[str, pa.DataType]:
    """Return the columns that the folders make: whole numbers where all values are, else text."""
    values: dict[str, set[str]] = {}
    for entry in entries:
        for name, value in entry.partition:
            if name not in taken:
                values.setdefault(name, set()).update(() if value is None else (value,))
    types = {}
    for name, found in values.items():
        whole = bool(found) and all(value.lstrip("-").isdecimal() and str(int(value)) == value for value in found)
        largest = max((abs(int(value)) for value in found), default=0) if whole else 0
        if not whole or largest >= 2**63:
            types[name] = pa.string()
        else:
            types[name] = pa.int32() if largest < 2**31 else pa.int64()
    return types


def _label(rows: Any, count: int) -> str:
    files = "1 file" if count == 1 else f"{count} files"
    if isinstance(rows, (list, tuple)):
        first = os.fspath(rows[0])
        return (
            first
            if len(rows) == 1 and count == 1
            else f"{first}, ... ({files})"
            if len(rows) > 1
            else f"{first} ({files})"
        )
    text = os.fspath(rows)
    return text if count == 1 and os.path.isfile(text) else f"{text} ({files})"
