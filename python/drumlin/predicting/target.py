"""Parquet targets: written beside under hidden names, proven, then renamed."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from drumlin.beside import Beside, sweep, unwritable
from drumlin.errors import DrumlinError, InternalError, OptionError, TargetError
from drumlin.predicting.keys import KeyHash
from drumlin.tables import Table

GROUP_BYTES = 64 << 20
"""A row group is cut when it holds more decoded bytes than this, or than the memory ceiling leaves room for."""

LEAST_GROUP = 16 << 20
"""The room for a row group must be at least this."""

BASE = 265_000_000
"""What reading, scoring and writing take, pyarrow and its pools included, without the row groups that are written."""

COLUMN_BYTES = 3 << 20
"""What each column takes beside: its pages while they are read and written."""

SUFFIXES = (".parquet", ".parq", ".pq")


@dataclass(frozen=True)
class Part:
    """One file to write: the rows up to `end` (None: all the rest), in row groups that end at `cuts`."""

    path: str
    source: str | None
    end: int | None
    cuts: tuple[int, ...]
    leave_out: frozenset[str]


@dataclass(frozen=True)
class Plan:
    """The files to write, and the folder that holds them where there may be several."""

    folder: str | None
    parts: tuple[Part, ...]


def plan_target(to: str, table: Table, replace: bool) -> Plan:
    """Decide which files `to` stands for, and refuse what cannot be written, before anything is read.

    One file; or, when `to` is a folder (it ends in a slash, exists as one, or is no .parquet name for several source
    files), one file for each source file, with the folders below their common one kept.
    """
    files = list(table.files)
    is_folder = to.endswith(os.sep) or os.path.isdir(to)
    is_folder = is_folder or (len(files) > 1 and not to.lower().endswith(SUFFIXES))
    if is_folder and not files:
        raise TargetError(f"{to} is a folder, and the rows do not come from files: name the file to write.", file=to)
    plan = _folder_plan(to, table, files) if is_folder else _file_plan(to, table)
    sources = {os.path.realpath(path) for path in files}
    for part in plan.parts:
        if os.path.realpath(part.path) in sources:
            raise TargetError(f"{part.path} is one of the files that are read: choose another target.", file=part.path)
        if os.path.isdir(part.path):
            raise TargetError(f"{part.path} is a folder: choose another target.", file=part.path)
        if os.path.lexists(part.path) and not replace:
            raise TargetError(
                f"{part.path} exists: choose another target, or replace it with replace=True.", file=part.path
            )
    parent = os.path.dirname(os.path.abspath(to.rstrip(os.sep) or to))
    if not os.path.isdir(parent):
        raise TargetError(f"{parent} does not exist: make the folder first.", file=to)
    if not os.access(parent, os.W_OK | os.X_OK):
        raise TargetError(f"{parent} is not writable.", file=to)
    return plan


def _file_plan(to: str, table: Table) -> Plan:
    ends = tuple(unit.first_row + unit.rows for unit in table.units())
    source = table.files[0] if table.files else None
    return Plan(None, (Part(to, source, None, ends, frozenset()),))


def _folder_plan(to: str, table: Table, files: Sequence[str]) -> Plan:
    base = os.path.commonpath([os.path.dirname(os.path.abspath(path)) for path in files])
    while "=" in os.path.basename(base):  # key=value folders carry a column: keep them
        base = os.path.dirname(base)
    cuts: dict[str, list[int]] = {path: [] for path in files}
    for unit in table.units():
        cuts.setdefault(unit.path, []).append(unit.first_row + unit.rows)
    parts, end = [], 0
    for path in files:
        inner = os.path.relpath(os.path.abspath(path), base)
        ends = tuple(cuts[path])
        end = ends[-1] if ends else end
        parts.append(Part(os.path.join(to, inner), path, end, ends, frozenset(table.partitions)))
    return Plan(to, tuple(parts))


def room_for_groups(memory: int, columns: int, *, asked: bool = True) -> int:
    """Return the most decoded bytes of a row group to write: one is filled while another one is written.

    Raises OptionError when a ceiling `memory` that was `asked` for leaves no room to write so many columns.

    >>> room_for_groups(1 << 30, 13) == GROUP_BYTES
    True
    """
    fixed = BASE + COLUMN_BYTES * columns
    if memory < fixed + 2 * LEAST_GROUP:
        if not asked:
            return LEAST_GROUP
        raise OptionError(
            f"memory={memory / 1e6:.0f} MB is too small to write {columns} columns: about "
            f"{(fixed + 2 * LEAST_GROUP) / 1e6 + 1:.0f} MB are needed. Raise memory, or carry fewer columns.",
            option="memory",
            needed=fixed + 2 * LEAST_GROUP,
        )
    return min(GROUP_BYTES, (memory - fixed) // 2)


class Target:
    """Writes scored batches into the files of a plan; nothing is seen under their names before `finish`."""

    def __init__(
        self, plan: Plan, table: Table, schema: pa.Schema, key: Sequence[str], added: Sequence[str], group_bytes: int
    ) -> None:
        self._table = table
        self._group_bytes = group_bytes
        self._plan, self._schema, self._added = plan, schema, list(added)
        self._key = list(key)
        self._pool = ThreadPoolExecutor(max_workers=1, thread_name_prefix="drumlin-write")
        self._pending: Future[None] | None = None
        self._written: list[tuple[str, str]] = []
        self._beside: Beside | None = None
        self._at = 0
        self._row = 0
        self._waiting: list[pa.RecordBatch] = []
        self._waiting_bytes = 0
        self._writer: pq.ParquetWriter | None = None
        self._rows_in_part = 0
        self._hash = KeyHash(schema, self._key)
        place = plan.folder.rstrip(os.sep) or os.sep if plan.folder is not None else plan.parts[0].path
        self._parent, self._name = os.path.split(os.path.abspath(place))
        sweep(self._parent)

    @property
    def _part(self) -> Part:
        return self._plan.parts[self._at]

    def write(self, first_row: int, read: int, batch: pa.RecordBatch) -> None:
        """Write the results of source rows `first_row` to `first_row + read`; these lie within one row group."""
        with self._naming():
            while self._part.end is not None and first_row >= self._part.end:
                self._finish_part()
            if self._writer is None:
                self._open_part()
            self._row = first_row + read
            if batch.num_rows:
                self._hash.add(batch)
                self._waiting.append(batch.select(self._columns(batch.schema.names)))
                self._waiting_bytes += batch.nbytes
            if self._waiting_bytes >= self._group_bytes or self._row in self._part.cuts:
                self._flush()

    def finish(self) -> list[str]:
        """Write what is left, prove row counts and keys, and give the files their names. Return their paths."""
        with self._naming():
            while True:
                if self._writer is None:
                    self._open_part()
                self._finish_part()
                if self._at >= len(self._plan.parts):
                    break
            self._pool.shutdown(wait=True)
            self._rename()
        return [part.path for part in self._plan.parts]

    def abandon(self) -> None:
        """Remove all that was written; files that were there before stay as they were."""
        self._pool.shutdown(wait=False, cancel_futures=True)
        if self._beside is not None:
            self._beside.remove()

    @contextlib.contextmanager
    def _naming(self) -> Iterator[None]:
        """Turn faults of the file system into TargetError with the file's name."""
        try:
            yield
        except DrumlinError:
            raise
        except OSError as error:
            path = self._plan.parts[min(self._at, len(self._plan.parts) - 1)].path
            raise unwritable(path, error) from error

    def _columns(self, names: Sequence[str]) -> list[int]:
        return [position for position, name in enumerate(names) if name not in self._part.leave_out]

    def _open_part(self) -> None:
        part, folder = self._part, self._plan.folder
        if self._beside is None:
            self._beside = Beside(self._parent, self._name, is_folder=folder is not None)
        temporary = self._beside.path
        if folder is not None:
            temporary = os.path.join(temporary, os.path.relpath(part.path, folder))
            os.makedirs(os.path.dirname(temporary), exist_ok=True)
        self._written.append((temporary, part.path))
        schema, options = _layout(part, self._table, self._schema, self._added)
        self._out_schema = schema
        self._writer = pq.ParquetWriter(temporary, schema, **options)
        self._rows_in_part = 0
        self._hash = KeyHash(self._schema, self._key)

    def _flush(self) -> None:
        """Hand the waiting rows over as one row group; they are written while the next ones are computed."""
        if not self._waiting:
            return
        table = pa.Table.from_batches([batch.cast(self._out_schema) for batch in self._waiting])
        self._waiting, self._waiting_bytes = [], 0
        self._settle()
        pa.default_memory_pool().release_unused()  # what the reader no longer needs
        assert self._writer is not None
        self._rows_in_part += table.num_rows
        self._pending = self._pool.submit(self._writer.write_table, table, row_group_size=table.num_rows)

    def _settle(self) -> None:
        if self._pending is not None:
            pending, self._pending = self._pending, None
            while True:
                with contextlib.suppress(TimeoutError):
                    pending.result(timeout=0.1)
                    return
                if pending.done():
                    pending.result()

    def _finish_part(self) -> None:
        if self._writer is None:
            self._open_part()
        self._flush()
        self._settle()
        assert self._writer is not None
        self._writer.close()
        self._writer = None
        temporary = self._written[-1][0]
        _prove(temporary, self._rows_in_part, self._key, self._hash, self._part)
        descriptor = os.open(temporary, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)
        self._at += 1

    def _rename(self) -> None:
        folder, beside = self._plan.folder, self._beside
        assert beside is not None
        if folder is not None and not os.path.lexists(folder.rstrip(os.sep)):
            os.rename(beside.path, folder.rstrip(os.sep))
            beside.release()
            return
        for temporary, path in self._written:
            os.makedirs(os.path.dirname(os.path.abspath(path)), exist_ok=True)
            os.replace(temporary, path)
        if folder is None:
            beside.release()
        else:
            beside.remove()


def _prove(path: str, rows: int, key: Sequence[str], hashed: KeyHash, part: Part) -> None:
    """Read the written file back: as many rows as were computed, and the very keys."""
    with pq.ParquetFile(path, pre_buffer=False) as file:
        found = file.metadata.num_rows
        if found != rows:
            raise InternalError(f"{part.path}: {found:,} rows were written of {rows:,}.", file=part.path)
        held = [name for name in key if name not in part.leave_out]
        if not held or held != list(key):
            return
        again = KeyHash(file.schema_arrow, held)
        for batch in file.iter_batches(columns=held):
            again.add(batch)
    if again.hexdigest() != hashed.hexdigest():
        raise InternalError(f"{part.path}: the keys written are not the keys read.", file=part.path)


def _layout(part: Part, table: Table, schema: pa.Schema, added: Sequence[str]) -> tuple[pa.Schema, dict[str, Any]]:
    """The schema and the writer's options: metadata, codecs and dictionary use as in the source file."""
    fields = [field for field in schema if field.name not in part.leave_out]
    footer = None if part.source is None else table.footer(part.source)
    if footer is None:
        return pa.schema(fields), {"use_dictionary": [f.name for f in fields if f.name not in added or _small(f.type)]}
    metadata, source = footer
    kept = []
    for field in fields:
        at = source.get_field_index(field.name) if field.name not in added else -1
        same = at >= 0 and source.field(at).type == field.type
        kept.append(source.field(at).with_nullable(field.nullable) if same else field)
    out = pa.schema(kept, metadata=source.metadata)
    codecs: dict[str, str] = {}
    dictionaries = [field.name for field in kept if field.name in added and _small(field.type)]
    if metadata.num_row_groups:
        group = metadata.row_group(0)
        for position in range(group.num_columns):
            column = group.column(position)
            codecs[column.path_in_schema] = _codec(column.compression)
            if any("DICTIONARY" in encoding for encoding in column.encodings):
                dictionaries.append(column.path_in_schema)
    common = max(codecs.values(), key=list(codecs.values()).count, default="snappy")
    for field in kept:
        if not any(path == field.name or path.startswith(field.name + ".") for path in codecs):
            codecs[field.name + (".list.element" if pa.types.is_nested(field.type) else "")] = common
    return out, {"compression": codecs, "use_dictionary": dictionaries}


def _small(kind: pa.DataType) -> bool:
    """Whether values repeat so much that a dictionary pays: ids do, floats do not."""
    return bool(pa.types.is_integer(kind))


def _codec(name: str) -> str:
    return {"UNCOMPRESSED": "none", "LZO": "snappy", "UNKNOWN": "snappy"}.get(name, name.lower())
