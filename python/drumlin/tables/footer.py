"""What is kept of a Parquet file between opening and reading it: row counts, sizes, and a hash of its footer."""

from __future__ import annotations

import contextlib
import hashlib
from collections.abc import Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import pyarrow as pa

from drumlin.errors import SchemaError, SourceError
from drumlin.tables.paths import FileEntry
from drumlin.tables.table import BATCH_ROWS

__all__ = ["Footer", "naming", "open_file", "read_footers", "read_group"]

READ_BYTES = 1 << 20
"""Compressed bytes of a column that are fetched at once from a local file."""
FAR_BYTES = 8 << 20
"""The same from any other file system, where a request takes long."""
WHOLE_BYTES = 64 << 20
"""From another file system a row group is fetched as a whole when its columns take no more compressed bytes."""
AT_ONCE = 512


@dataclass(frozen=True, slots=True)
class Footer:
    """A file and what its footer says: rows and bytes (before compression) of each row group.

    `schema` is the position of its schema among those of all files; `digest` a hash of the footer's bytes, empty where
    the file system tells when a file was changed and asking for them would take another request.
    """

    entry: FileEntry
    schema: int
    group_rows: tuple[int, ...]
    group_bytes: tuple[int, ...]
    digest: bytes

    @property
    def rows(self) -> int:
        """The rows of the file."""
        return sum(self.group_rows)

    def check_unchanged(self, source: Any = None) -> None:
        """Raise SourceError when the file is not the one that was opened: by size and time, and by the footer of the
        open file `source`."""
        entry = self.entry
        if source is None:
            info = entry.filesystem.get_file_info(entry.path)
            if not info.is_file:
                raise SourceError(
                    f"{entry.shown} has gone since it was opened. Put it back and start again.", file=entry.shown
                )
            unit = 1 if is_local(entry.filesystem) else 10**9  # object stores list times finer than they tell one
            same = info.size == entry.size and (info.mtime_ns or 0) // unit == entry.modified // unit
        else:
            same = source.size() == entry.size and _digest(entry, source) == self.digest
        if not same:
            raise SourceError(
                f"{entry.shown} has changed since it was opened. Start again once nothing writes to it.",
                file=entry.shown,
            )


def read_footers(entries: Sequence[FileEntry]) -> tuple[list[Footer], list[pa.Schema]]:
    """Read the footers of files, several at a time; return what is kept of each, and the different schemas met.

    Raises SourceError, naming the file, for one that cannot be read or is not a Parquet file. Memory: the footers of
    the few files that are being looked at; under a kilobyte for each file after that.
    """
    footers: list[Footer] = []
    schemas: list[pa.Schema] = []
    known: dict[bytes, int] = {}
    kept: dict[tuple[int, ...], tuple[int, ...]] = {}
    with ThreadPoolExecutor(max_workers=min(8, len(entries))) as pool:
        for start in range(0, len(entries), AT_ONCE):
            some = entries[start : start + AT_ONCE]
            for entry, (packed, rows, sizes, digest) in zip(some, pool.map(_inspect, some), strict=True):
                at = known.setdefault(packed, len(schemas))
                if at == len(schemas):
                    schemas.append(pa.ipc.read_schema(pa.py_buffer(packed)))
                footers.append(Footer(entry, at, kept.setdefault(rows, rows), kept.setdefault(sizes, sizes), digest))
    return footers, schemas


def _inspect(entry: FileEntry) -> tuple[bytes, tuple[int, ...], tuple[int, ...], bytes]:
    import pyarrow.parquet as pq

    if entry.size == 0:
        raise SourceError(
            f"{entry.shown} is empty (0 bytes), so it is not a Parquet file. Make it anew, or leave it out.",
            file=entry.shown,
        )
    with (
        naming(entry.shown),
        entry.filesystem.open_input_file(entry.path) as source,
        pq.ParquetFile(source) as reader,
    ):
        data = reader.metadata
        groups = [data.row_group(group) for group in range(data.num_row_groups)]
        rows, sizes = (group.num_rows for group in groups), (group.total_byte_size for group in groups)
        packed = reader.schema_arrow.remove_metadata().serialize().to_pybytes()
        return packed, tuple(rows), tuple(sizes), _digest(entry, source)


def _digest(entry: FileEntry, source: Any) -> bytes:
    if entry.modified and not is_local(entry.filesystem):
        return b""
    length = int.from_bytes(source.read_at(4, max(0, entry.size - 8)), "little")
    start = max(0, entry.size - 8 - length)
    return hashlib.blake2b(source.read_at(entry.size - start, start), digest_size=8).digest()


def is_local(filesystem: Any) -> bool:
    """Return whether files lie on this machine, so that reading bit by bit costs nothing."""
    return bool(filesystem.type_name == "local")


def open_file(source: Any, columns: Sequence[str], *, local: bool) -> Any:
    """Return a reader of an open Parquet file that decodes the columns page by page, however large its row groups.

    Memory: `READ_BYTES` of each column (`FAR_BYTES` from another file system, where small row groups are fetched
    whole).
    """
    import pyarrow.parquet as pq

    if local:
        return pq.ParquetFile(source, pre_buffer=False, buffer_size=READ_BYTES)
    data = pq.read_metadata(source)
    if _largest_group(data, columns) <= WHOLE_BYTES:
        return pq.ParquetFile(source, metadata=data, pre_buffer=True)
    return pq.ParquetFile(source, metadata=data, pre_buffer=False, buffer_size=FAR_BYTES)


def _largest_group(data: Any, columns: Sequence[str]) -> int:
    """The compressed bytes that the columns take in the row group where they take most."""
    largest = 0
    for group in range(data.num_row_groups):
        chunks = [data.row_group(group).column(place) for place in range(data.num_columns)]
        wanted = [one for one in chunks if any(f"{one.path_in_schema}.".startswith(f"{name}.") for name in columns)]
        largest = max(largest, sum(one.total_compressed_size for one in wanted))
    return largest


def read_group(reader: Any, shown: str, group: int, columns: Sequence[str]) -> Iterator[pa.RecordBatch]:
    """Yield the batches of one row group; raise SourceError where there are fewer or more rows than the footer says."""
    rows, met = reader.metadata.row_group(group).num_rows, 0
    if columns:
        batches = reader.iter_batches(BATCH_ROWS, row_groups=[group], columns=list(columns))
    else:  # the rows alone: a column of nulls
        batches = iter([pa.RecordBatch.from_arrays([pa.nulls(rows)], names=["rows"])])
    while True:
        with naming(shown, group):
            batch = next(batches, None)
        if batch is None:
            break
        met += batch.num_rows
        yield batch
    if met != rows:
        raise SourceError(
            f"{shown}: row group {group} holds {met:,} rows, but the file's own index says {rows:,}. "
            "The file is damaged: make it anew, or leave it out.",
            file=shown,
        )


@contextlib.contextmanager
def naming(shown: str, group: int | None = None) -> Iterator[None]:
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
