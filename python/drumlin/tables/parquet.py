"""Rows in Parquet files: a path, a glob, a directory with key=value folders, or a list of them.

Each row group is decoded on its own, straight from the file and in small batches, so that memory depends neither on
the size of the files nor on that of their row groups. Of each file only its path, row counts and sizes are kept, and
none is left open. The files must stay as they are while they are read: size, time and footer are compared at every
scan.
"""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator, Sequence
from typing import Any

import pyarrow as pa

from drumlin.errors import SchemaError
from drumlin.tables.footer import Footer, is_local, naming, open_file, read_footers, read_group
from drumlin.tables.paths import FileEntry, find_files, without_login
from drumlin.tables.schemas import join_schemas
from drumlin.tables.table import Gap, Table, Unit, fingerprint, listed

__all__ = ["ParquetTable"]


class ParquetTable(Table):
    """The rows of Parquet files, in the order of their paths (digits as numbers), row group by row group.

    A column of different numeric width is widened, with a note. One that some file lacks is null in that file's rows
    and can only be carried along; one whose types do not go together is left out: either is named in an error as soon
    as it is needed. Files without rows are not read, with a note. Folders called key=value below the named place become
    columns.

    Raises SourceError, naming the file, when one cannot be found or read; SchemaError when the files have no column
    in common.

    Sent to another process, it is the table that was opened here: a file that was changed since is an error there too.

    Cost: opening reads the footer of every file. A scan reads the named columns once; memory: one batch, and about a
    megabyte of compressed bytes per column; and under a kilobyte for every file.
    """

    def __init__(self, rows: str | os.PathLike[str] | Sequence[str | os.PathLike[str]]) -> None:
        entries = find_files(rows)
        found, schemas = read_footers(entries)
        files = [file for file in found if file.rows] or found[:1]
        first: dict[int, FileEntry] = {}
        counts: dict[int, int] = {}
        for file in files:
            first.setdefault(file.schema, file.entry)
            counts[file.schema] = counts.get(file.schema, 0) + 1
        joint = join_schemas(
            [schemas[at] for at in first], [entry.shown for entry in first.values()], list(counts.values())
        )
        if joint.left_out and not set(joint.schema.names) - set(joint.left_out):
            names = [entry.shown for entry in entries]
            raise SchemaError(f"The files {names[0]} and {names[-1]} have no column in common. Read them apart.")
        self._partition_types = _partition_types([file.entry for file in files], joint.schema.names)
        schema = joint.schema
        for name, type_ in self._partition_types.items():
            schema = schema.append(pa.field(name, type_))
        label = _label(rows, len(entries))
        super().__init__(schema, label, sum(file.rows for file in files))
        self._files, self._found = files, found
        self._stored = [frozenset(one.names) for one in schemas]
        self.files = [file.entry.shown for file in found]
        self.partitions = list(self._partition_types)
        self.left_out = joint.left_out
        self.fingerprint = fingerprint(schema, [(file.rows, file.entry.size) for file in files])
        empty = [file.entry.shown for file in found if not file.rows]
        if len(empty) == 1:
            self.note(f"{empty[0]} has no rows.")
        elif empty:
            self.note(f"{len(empty)} files have no rows: {listed(empty, 3)}.")
        for text in joint.notes:
            self.note(text)

    def units(self) -> list[Unit]:
        """Return the row groups in row order."""
        found, row = [], 0
        for file in self._files:
            for group, (rows, size) in enumerate(zip(file.group_rows, file.group_bytes, strict=True)):
                found.append(Unit(file.entry.shown, group, row, rows, size))
                row += rows
        return found

    def footer(self, file: str) -> Any:
        """Return the metadata and the schema that the file shown as `file` holds; None when it is not of the table."""
        for one in self._found:
            if one.entry.shown == file:
                with naming(file), one.entry.filesystem.open_input_file(one.entry.path) as source:
                    reader = open_file(source, [], local=True)
                    return reader.metadata, reader.schema_arrow
        return None

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        for file in self._files:
            file.check_unchanged()
        row = 0
        for file in self._files:
            end = row + file.rows
            if _touches(ranges, row, end):
                yield from self._read_file(file, columns, ranges, row)
            else:
                yield Gap(file.rows)
            row = end

    def _read_file(
        self, file: Footer, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None, row: int
    ) -> Iterator[pa.RecordBatch | Gap]:
        """Yield the batches of one file; each row group is read on its own."""
        entry = file.entry
        stored = [name for name in columns if name in self._stored[file.schema] and name in self.schema.names]
        stored = [name for name in stored if name not in self._partition_types]
        with contextlib.ExitStack() as stack:
            with naming(entry.shown):
                source = stack.enter_context(entry.filesystem.open_input_file(entry.path))
                file.check_unchanged(source)
                reader = stack.enter_context(open_file(source, stored, local=is_local(entry.filesystem)))
            for group, rows in enumerate(file.group_rows):
                if _touches(ranges, row, row + rows):
                    for batch in read_group(reader, entry.shown, group, stored):
                        with naming(entry.shown, group):
                            shaped = self._shape(batch, stored, columns, dict(entry.partition))
                        yield shaped
                else:
                    yield Gap(rows)
                row += rows
        file.check_unchanged()

    def _shape(
        self, batch: pa.RecordBatch, stored: Sequence[str], columns: Sequence[str], constants: dict[str, str | None]
    ) -> pa.RecordBatch:
        """Give a batch the joint types, the columns that come from the path, and nulls for columns that are lacking."""
        if not columns:
            return batch
        arrays = []
        for name in columns:
            type_ = self.schema.field(name).type
            if name in stored:
                array = batch.column(name)
                if array.type != type_:
                    array = _cast(array, type_)
            elif name in self._partition_types and constants.get(name) is not None:
                array = pa.repeat(pa.scalar(constants[name], pa.string()).cast(type_), batch.num_rows)
            else:
                array = pa.nulls(batch.num_rows, type_)
            arrays.append(array)
        return pa.RecordBatch.from_arrays(arrays, names=list(columns))


def _cast(array: pa.Array, type_: pa.DataType) -> pa.Array:
    exact = not pa.types.is_floating(type_)  # a number that float64 cannot hold exactly is rounded
    return array.cast(type_, safe=exact)


def _touches(ranges: Sequence[tuple[int, int]] | None, start: int, end: int) -> bool:
    return ranges is None or any(first < end and last > start for first, last in ranges)


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
        first = without_login(os.fspath(rows[0]))
        return (
            first
            if len(rows) == 1 and count == 1
            else f"{first}, ... ({files})"
            if len(rows) > 1
            else f"{first} ({files})"
        )
    text = without_login(os.fspath(rows))
    return text if count == 1 and os.path.isfile(text) else f"{text} ({files})"
