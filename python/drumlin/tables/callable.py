"""Rows of a callable that opens a fresh stream for each pass."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterator, Sequence
from typing import Any

import pyarrow as pa

from drumlin.errors import SchemaError, StreamError
from drumlin.tables.table import Gap, Table

__all__ = ["CallableTable"]


class CallableTable(Table):
    """What a zero-argument callable returns: a stream, a frame, or an iterator of batches; it is called for each scan.

    The first call is made at once, to learn the columns; the first scan uses its rows. An exception in the caller's own
    code, in the call or in an iterator of batches, comes through as it is.
    """

    def __init__(self, opener: Callable[[], Any], names: Sequence[str] | None = None) -> None:
        self._opener, self._names = opener, names
        label = f"the callable {getattr(opener, '__name__', type(opener).__name__)}"
        self._next: Table | None = self._open(label)
        super().__init__(self._next.schema, label)
        self.ordered, self.order_advice = self._next.ordered, self._next.order_advice

    def _open(self, label: str) -> Table:
        from drumlin.tables.open import open_table

        result = self._opener()
        if isinstance(result, CallableTable) or (callable(result) and not hasattr(result, "__arrow_c_stream__")):
            raise SchemaError(f"{label} returned another callable. It should return a stream of rows.")
        if hasattr(result, "__next__") and not hasattr(result, "__arrow_c_stream__"):
            return _IteratorTable(result, label)
        return open_table(result, names=self._names)

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        table, self._next = self._next or self._open(self.label), None
        if not table.schema.equals(self.schema):
            raise StreamError(
                f"{self.label} gave other columns than before: {', '.join(table.schema.names)} instead of "
                f"{', '.join(self.schema.names)}. Open the same rows on every call."
            )
        yield from table._read(columns, ranges)


class _IteratorTable(Table):
    """An iterator of record batches, tables or frames with the same columns."""

    rereadable = False

    def __init__(self, batches: Iterator[Any], label: str) -> None:
        first = next(batches, None)
        if first is None:
            raise SchemaError(
                f"{label} gave an iterator without a single batch, so its columns are unknown. Give at least one batch "
                "(it may be empty), or a fresh stream: an iterator that has been used up gives nothing more."
            )
        start = _table(first, label)
        super().__init__(start.schema, label)
        self._batches = itertools.chain([start], batches)

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        for item in self._batches:
            table = _table(item, self.label)
            if not table.schema.remove_metadata().equals(self.schema):
                raise SchemaError(f"{self.label}: a later batch has other columns or types than the first.")
            yield from table.to_batches()


def _table(item: Any, label: str) -> pa.Table:
    if isinstance(item, pa.Table):
        return item
    if isinstance(item, pa.RecordBatch):
        return pa.Table.from_batches([item])
    if hasattr(item, "__arrow_c_stream__") or hasattr(item, "__arrow_c_array__"):
        return pa.table(item)
    raise SchemaError(f"{label} gave an item of type {type(item).__name__}; it should give Arrow record batches.")
