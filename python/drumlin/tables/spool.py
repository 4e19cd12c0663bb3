"""Rows written once to a temporary file, to be read again from there: streams that can be read only once, sources
without a repeatable order, and whatever else does not fit in memory.

The file lies in a folder that the user named, under a hidden name; it goes with the table, also after an error, and
what a killed process left there goes at the next use of the folder.
"""

from __future__ import annotations

import contextlib
import shutil
import weakref
from collections.abc import Iterable, Iterator, Sequence
from typing import Any

import pyarrow as pa

from drumlin.beside import Beside, sweep, unwritable
from drumlin.errors import SourceError
from drumlin.tables.numeric import plain
from drumlin.tables.table import BATCH_ROWS, Gap, Table
from drumlin.tables.where import Expression, referenced

__all__ = ["SpoolTable", "spooled"]


class SpoolTable(Table):
    """Takes record batches one after the other, and is then a table of them.

    The rows lie decoded and uncompressed in one Arrow file, each column in its own width (dictionaries as their
    values), in batches of at most `BATCH_ROWS` rows. `add` the batches, `finish`, then `scan` as often as wanted, and
    `close`. The file is removed by `close`, when the table is no longer used, and at the end of the process.

    Attributes: `path` of the file; `bytes` written so far.

    Raises TargetError, naming the folder, when the file cannot be written; SourceError when it cannot be read again.

    Cost: adding writes the rows once; a scan reads the columns asked for. Memory: one batch.

    >>> import pyarrow as pa, tempfile
    >>> from drumlin.tables.spool import SpoolTable
    >>> batch = pa.record_batch({"length_cm": [10.0, 12.5], "parcel": ["p1", "p2"]})
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     table = SpoolTable(folder, batch.schema, "parcels")
    ...     table.add(batch)
    ...     table.finish()
    ...     print(table.row_count, [part.to_pydict() for _, part in table.scan(["length_cm"], [(1, 2)])])
    ...     table.close()
    2 [{'length_cm': [12.5]}]
    """

    def __init__(self, folder: str, schema: pa.Schema, label: str) -> None:
        empty = pa.RecordBatch.from_pylist([], schema=schema.remove_metadata())
        super().__init__(plain(empty).schema, label)
        self.folder = folder
        self.bytes = 0
        self._lengths: list[int] = []
        self._sink: Any = None
        self._writer: Any = None
        sweep(folder)
        with self._naming():
            self._beside = Beside(folder, "rows")
            self._end = weakref.finalize(self, self._beside.remove)
            self._sink = pa.OSFile(self._beside.path, "wb")
            self._writer = pa.ipc.new_file(self._sink, self.schema)

    @property
    def path(self) -> str:
        """The path of the file."""
        return self._beside.path

    def add(self, batch: pa.RecordBatch) -> None:
        """Write the rows of the next batch; it has the columns of the schema, in any order."""
        batch = plain(batch.select(self.schema.names))
        with self._naming():
            for start in range(0, batch.num_rows, BATCH_ROWS):
                part = batch.slice(start, BATCH_ROWS)
                self._writer.write_batch(part)
                self._lengths.append(part.num_rows)
                self.bytes = self._sink.tell()

    def finish(self) -> None:
        """Close the file for writing; from here on the rows can be scanned."""
        with self._naming():
            self._close_writer()
        self._count(sum(self._lengths))

    def close(self) -> None:
        """Remove the file. May be called again; the table cannot be scanned after."""
        with contextlib.suppress(OSError, pa.ArrowException):
            self._close_writer()
        self._end()

    def _close_writer(self) -> None:
        writer, sink, self._writer, self._sink = self._writer, self._sink, None, None
        try:
            if writer is not None:
                writer.close()
        finally:
            if sink is not None:
                sink.close()

    @contextlib.contextmanager
    def _naming(self) -> Iterator[None]:
        """Turn faults of the file system into an error that says how much there is and how much was written."""
        try:
            yield
        except OSError as error:
            told = unwritable(f"spill: the temporary file in {self.folder}", error)
            with contextlib.suppress(OSError):
                free = shutil.disk_usage(self.folder).free
                taken = f"The rows of {self.label} took {_size(self.bytes)} so far; {_size(free)} are free."
                told.args = (f"{told} {taken}",)
            raise told from error

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        fields = [self.schema.get_field_index(name) for name in columns]
        with contextlib.ExitStack() as stack:
            with self._reading():
                source = stack.enter_context(pa.OSFile(self.path, "rb"))
                reader = pa.ipc.open_file(source, options=pa.ipc.IpcReadOptions(included_fields=fields or [0]))
            row = 0
            for number, length in enumerate(self._lengths):
                if ranges is not None and not any(first < row + length and last > row for first, last in ranges):
                    yield Gap(length)
                else:
                    with self._reading():
                        batch = reader.get_batch(number)
                    yield batch
                row += length

    @contextlib.contextmanager
    def _reading(self) -> Iterator[None]:
        try:
            yield
        except (OSError, pa.ArrowException) as error:
            raise SourceError(
                f"{self.path}, the temporary file with the rows of {self.label}, cannot be read any more: "
                f"{str(error).strip().splitlines()[0]} Start again, and leave the file alone until the end.",
                file=self.path,
            ) from error


def spooled(table: Table, columns: Iterable[str], folder: str, masks: Iterable[Expression] = ()) -> SpoolTable:
    """Read `table` once and return its rows as a table that can be read again, with the same row numbers and filter.

    Only `columns` are kept, and those that the row filter and the expressions `masks` use. The table's partitions and
    notes are handed on, with a note on the file. The file is removed when anything goes wrong, Ctrl-C included.

    Cost: one pass over the columns needed, and one write of them.
    """
    from drumlin.tables.ahead import ReadAhead

    conditions = [*masks, *([] if table.where is None else [table.where])]
    used = [name for condition in conditions for name in referenced(table.schema, condition)]
    names = list(dict.fromkeys([*columns, *used]))
    spool = SpoolTable(folder, pa.schema([table.schema.field(name) for name in names]), table.label)
    try:
        ahead = ReadAhead(table.scan(names))
        try:
            for _, batch in ahead:
                spool.add(batch)
        finally:
            ahead.close()
        spool.finish()
    except BaseException:
        spool.close()
        raise
    spool.where, spool.partitions, spool.fingerprint = table.where, list(table.partitions), table.fingerprint
    spool.notes = list(table.notes)
    spool.note(f"The rows of {table.label} were kept in a temporary file in {folder} ({_size(spool.bytes)}).")
    return spool


def _size(count: int) -> str:
    """Return a number of bytes in words.

    >>> _size(1_500_000), _size(900)
    ('1.5 MB', '900 bytes')
    """
    for unit, name in ((10**9, "GB"), (10**6, "MB")):
        if count >= unit:
            return f"{count / unit:.1f} {name}"
    return f"{count:,} bytes"
