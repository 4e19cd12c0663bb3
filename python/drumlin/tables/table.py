"""The table: what every source of rows looks like to the rest of the package."""

from __future__ import annotations

import hashlib
import logging
from abc import ABC, abstractmethod
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import pyarrow as pa

from drumlin.errors import DataError, SchemaError, StreamError, nearest
from drumlin.tables.where import Expression, check_expression, evaluate, referenced

logger = logging.getLogger("drumlin")

__all__ = ["BATCH_ROWS", "KEEP", "Table", "Unit"]

KEEP = "__keep__"
"""The boolean column that a scan adds for a row filter: true where the row is kept, null or false where not."""
BATCH_ROWS = 65_536
"""The most rows of a batch that a scan yields."""


@dataclass(frozen=True)
class Unit:
    """A row group of a file: the unit in which files are read.

    `rows` source rows starting with row number `first_row`; `bytes` is their size before compression.
    """

    path: str
    row_group: int
    first_row: int
    rows: int
    bytes: int


class Table(ABC):
    """Rows in a fixed order, with named and typed columns.

    Row numbers count the rows of the source from 0, before any filter.

    Attributes:
        schema: the columns, without `KEEP`.
        row_count: rows of the source before any filter; None while unknown.
        rereadable: whether it can be scanned more than once.
        ordered: whether the rows come in the same order in every scan; `order_advice` says how they would.
        label: the source in words, for messages.
        files: paths of the files, those without rows too; empty where the rows do not come from files.
        partitions: columns whose values come from the paths of the files.
        left_out: columns that not every file gives, each with the reason: they cannot be fitted, filtered by or be
            keys. Those in the schema all the same can be carried along, null where a file lacks them.
        fingerprint: a hash of schema, row counts and file sizes (not of paths or times); "" when unknown.
        in_memory: whether the rows are in memory already.
        where: the row filter, or None.
        notes: what a reader of the results should know about how the rows were read.
    """

    rereadable: bool = True
    ordered: bool = True
    order_advice: str = ""
    in_memory: bool = False

    def __init__(self, schema: pa.Schema, label: str, row_count: int | None = None) -> None:
        self.schema = schema.remove_metadata()
        self.label = label
        self.row_count = row_count
        self.files: list[str] = []
        self.partitions: list[str] = []
        self.left_out: dict[str, str] = {}
        self.fingerprint = "" if row_count is None else fingerprint(self.schema, [(row_count, 0)])
        self.where: Expression | None = None
        self.notes: list[str] = []
        _check_names(self.schema.names, label)

    def __repr__(self) -> str:
        rows = "unknown" if self.row_count is None else f"{self.row_count:,}"
        return f"{type(self).__name__}({self.label!r}, rows={rows}, columns={len(self.schema.names)})"

    @abstractmethod
    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        """Yield batches with at least `columns`, in row order; a `Gap` stands for rows outside `ranges` not read."""

    def scan(
        self,
        columns: Sequence[str] | None = None,
        ranges: Sequence[tuple[int, int]] | None = None,
        *,
        extra: Mapping[str, Expression] | None = None,
    ) -> Iterator[tuple[int, pa.RecordBatch]]:
        """Read the rows once, in row order.

        Args:
            columns: names, in the order wanted; None for all.
            ranges: row numbers as half-open (first, end) pairs, ascending and apart; None for all rows.
            extra: boolean expressions by the name of the column that they are to become.

        Returns:
            Pairs of the row number of a batch's first row and the batch: at most `BATCH_ROWS` rows, never empty.
            With a row filter the batch carries the column `KEEP` too; no row is removed.

        Raises:
            SchemaError: a column is missing. StreamError: the rows can be read only once, or are others than in an
            earlier scan. SourceError: a file cannot be read or has changed. An exception raised by the source's own
            code (a generator, say) comes through as it is.

        Cost: one pass over the named columns. Memory: one batch, and what the source needs to decode it.

        >>> import pyarrow as pa
        >>> from drumlin.tables import open_table
        >>> table = open_table(pa.table({"length_cm": [10.0, 12.5], "weight_kg": [0.4, 2.0]}), where="weight_kg > 1")
        >>> [(first, batch.to_pydict()) for first, batch in table.scan(["length_cm"])]
        [(0, {'length_cm': [10.0, 12.5], '__keep__': [False, True]})]
        """
        names = list(self.schema.names if columns is None else columns)
        self.require(name for name in names if name not in self.schema.names)
        masks: dict[str, Expression] = {} if self.where is None else {KEEP: self.where}
        for name, expression in (extra or {}).items():
            masks[name] = self.check_expression(expression, name.strip("_"))
        used = dict.fromkeys(name for mask in masks.values() for name in referenced(self.schema, mask))
        return self._scan(names, list(used), masks, None if ranges is None else _check_ranges(ranges))

    def _scan(
        self,
        names: list[str],
        used: list[str],
        masks: Mapping[str, Expression],
        ranges: list[tuple[int, int]] | None,
    ) -> Iterator[tuple[int, pa.RecordBatch]]:
        reads = list(dict.fromkeys([*names, *used]))
        row = 0
        end = None if ranges is None else max((last for _, last in ranges), default=0)
        for item in () if end == 0 else self._read(reads, ranges):
            if isinstance(item, Gap):
                row += item.rows
                continue
            for first, piece in _pieces(item, row, ranges):
                yield first, _finish(piece, names, used, masks)
            row += item.num_rows
            if end is not None and row >= end:
                return
        if end is None or row < end:  # the source came to its end
            self._count(row)

    def _count(self, rows: int) -> None:
        """Note how many rows a full scan met; a different number than before is an error."""
        if self.row_count is None:
            self.row_count = rows
            self.fingerprint = self.fingerprint or fingerprint(self.schema, [(rows, 0)])
        elif rows != self.row_count:
            raise StreamError(
                f"{self.label}: the rows changed between two reads: {self.row_count:,} at first, {rows:,} now. "
                "A fit reads the rows several times and needs the same ones each time: give a Parquet path, "
                "a table in memory, or a callable that opens a fresh stream on every call."
            )

    def units(self) -> list[Unit]:
        """Return the row groups of the files in row order; an empty list where the rows do not come from files."""
        return []

    def footer(self, file: str) -> Any:
        """Return the Parquet metadata and the Arrow schema of one of `files`; None where the rows are not in files."""
        return None

    def require(self, columns: Iterable[str]) -> None:
        """Raise SchemaError unless all of `columns` can be used: every file has them, of types that go together."""
        for name in columns:
            if name in self.left_out:
                raise SchemaError(f"{self.label}: column {name!r} cannot be read: {self.left_out[name]}", column=name)
            if name not in self.schema.names:
                raise SchemaError(
                    f"{self.label} has no column {name!r}.{nearest(name, self.schema.names)} "
                    f"The columns are: {listed(self.schema.names)}.",
                    column=name,
                )

    def check_expression(self, expression: Expression, option: str) -> Expression:
        """Return `expression` when it gives true or false for the rows; raise OptionError naming `option` otherwise."""
        checked = check_expression(expression, self.schema, option, self.require)
        if self.left_out:
            self.require(referenced(self.schema, checked))
        return checked

    def close(self) -> None:  # noqa: B027
        """Give back what the table holds beyond memory (a temporary file); it cannot be scanned after."""

    def note(self, sentence: str) -> None:
        """Keep a sentence for the notes of the result, and log it."""
        self.notes.append(sentence)
        logger.info("%s", sentence)


@dataclass(frozen=True)
class Gap:
    """Rows that a source left unread because nobody asked for them."""

    rows: int


def fingerprint(schema: pa.Schema, parts: Iterable[tuple[int, int]]) -> str:
    """Hash column names and types and, for each part, its row count and size in bytes (0 where it has none)."""
    digest = hashlib.sha256()
    for field in schema:
        digest.update(f"{field.name}\0{field.type}\0".encode())
    for rows, size in parts:
        digest.update(f"{rows},{size};".encode())
    return digest.hexdigest()


def listed(names: Sequence[Any], most: int = 20) -> str:
    """Return names as words separated by commas, the tail of a long list cut.

    >>> listed(["a", "b"])
    "'a', 'b'"
    """
    text = ", ".join(repr(name) for name in names[:most])
    return text if len(names) <= most else f"{text} and {len(names) - most} more"


def _finish(
    batch: pa.RecordBatch, names: list[str], used: list[str], masks: Mapping[str, Expression]
) -> pa.RecordBatch:
    columns = [batch.column(name) for name in names]
    fields = [batch.schema.field(name).remove_metadata() for name in names]
    try:
        values = evaluate(batch.select(used), list(masks.values()))
    except pa.ArrowException as error:
        condition = " ".join(str(list(masks.values())[0]).split())
        raise DataError(
            f"The condition {condition} cannot be computed for some rows: {str(error).splitlines()[0]}. "
            "Write it so that it can be for every value, as by casting a column to float64."
        ) from error
    for name, mask in zip(masks, values, strict=True):
        columns.append(mask)
        fields.append(pa.field(name, pa.bool_()))
    if not columns:  # a batch without columns still has rows
        return batch.select([])
    return pa.RecordBatch.from_arrays(columns, schema=pa.schema(fields))


def _pieces(
    batch: pa.RecordBatch, row: int, ranges: list[tuple[int, int]] | None
) -> Iterator[tuple[int, pa.RecordBatch]]:
    """Cut a batch to the ranges and to the largest batch size; yield row numbers and pieces."""
    rows = batch.num_rows
    for first, last in [(row, row + rows)] if ranges is None else ranges:
        start, end = max(first, row), min(last, row + rows)
        while start < end:
            length = min(end - start, BATCH_ROWS)
            yield start, batch if length == rows else batch.slice(start - row, length)
            start += length


def _check_ranges(ranges: Sequence[tuple[int, int]]) -> list[tuple[int, int]]:
    before = 0
    for first, last in ranges:
        if first < before or last < first:
            raise ValueError(f"Row ranges must ascend and not overlap, but {(first, last)} follows row {before}.")
        before = last
    return [(first, last) for first, last in ranges if last > first]


def _check_names(names: Sequence[str], label: str) -> None:
    seen: set[str] = set()
    for name in names:
        if name in seen:
            raise SchemaError(f"{label} has more than one column {name!r}. Rename one of them.", column=name)
        seen.add(name)
    if KEEP in seen:
        raise SchemaError(f"{label}: the column name {KEEP!r} is used inside drumlin. Rename the column.", column=KEEP)
