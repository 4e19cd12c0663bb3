"""Rows that come as Arrow streams: read once, or opened again by their owner for each pass."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Sequence
from typing import Any

import pyarrow as pa

from drumlin.errors import SchemaError, StreamError
from drumlin.tables.table import Gap, Table

__all__ = ["ReopenedTable", "StreamTable", "from_duckdb", "from_lazyframe"]


class StreamTable(Table):
    """A stream that can be read once: `predict` takes it, a fit of several passes cannot."""

    rereadable = False

    def __init__(self, reader: Any, label: str = "Arrow stream") -> None:
        super().__init__(reader.schema, label)
        self._reader = reader
        self._begun = False

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        if self._begun:
            raise StreamError(
                f"{self.label}: the stream has been read already and gives its rows only once. Give a Parquet path, "
                "a table in memory (reader.read_all()), or a callable that opens a fresh stream on every call."
            )
        self._begun = True
        yield from _drain(self._reader)


class ReopenedTable(Table):
    """Rows whose owner opens a fresh stream for each scan: a query, a lazy frame, an Arrow stream object."""

    def __init__(self, open_reader: Callable[[], Any], schema: pa.Schema, label: str) -> None:
        super().__init__(schema, label)
        self._open_reader = open_reader

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        reader = self._open_reader()
        found = reader.schema.remove_metadata()
        if not found.equals(self.schema):
            raise StreamError(
                f"{self.label}: the columns changed between two reads, from {_types(self.schema)} to {_types(found)}. "
                "Open the same rows each time."
            )
        yield from _drain(reader)


def _drain(reader: Any) -> Iterator[pa.RecordBatch]:
    """Yield the batches of a reader and close it, also when the scan is given up."""
    try:
        while True:
            try:
                batch = reader.read_next_batch()
            except StopIteration:
                return
            yield batch
    finally:
        reader.close()


def from_capsule(rows: Any) -> Table:
    """Return an object with `__arrow_c_stream__` as a table.

    It is taken to open a fresh stream on each call unless it is an iterator or calls itself a reader or a stream; an
    object that gives its rows only once all the same is found out in the second pass.
    """
    kind = type(rows)
    label = f"{kind.__module__.partition('.')[0].lstrip('_')} {kind.__name__}"

    def open_reader() -> Any:
        try:
            return pa.RecordBatchReader.from_stream(rows)
        except pa.ArrowException as error:
            raise SchemaError(f"{label} cannot be read as rows with columns: {error}") from error

    if hasattr(rows, "__next__") or kind.__name__.lower().endswith(("reader", "stream")):
        return StreamTable(open_reader(), label)
    reader = open_reader()
    schema = reader.schema.remove_metadata()
    reader.close()
    return ReopenedTable(open_reader, schema, label)


def from_duckdb(relation: Any) -> ReopenedTable:
    """Return a DuckDB relation as a table: the query runs again for each scan, in batches.

    An open scan holds the relation's connection: do not use it for other queries meanwhile. The rows come in the same
    order every time only where the query ends with an ORDER BY, as its plan tells.
    """
    schema = relation.limit(0).to_arrow_table().schema.remove_metadata()
    table = ReopenedTable(lambda: pa.RecordBatchReader.from_stream(relation), schema, "DuckDB relation")
    table.ordered = _is_sorted_by_duckdb(relation)
    table.order_advice = "end the query with ORDER BY"
    return table


def from_lazyframe(frame: Any) -> ReopenedTable:
    """Return a Polars LazyFrame as a table: the query runs again, in batches, for each scan; it is never collected.

    The rows come in the same order every time unless the plan holds a step that does not keep their order (grouping or
    distinct rows without maintain_order=True, a join) and no sort after it.
    """
    schema = pa.table(frame.collect_schema().to_frame()).schema.remove_metadata()

    def open_reader() -> Any:
        return pa.RecordBatchReader.from_stream(frame.collect_batches(maintain_order=True))

    table = ReopenedTable(open_reader, schema, "Polars LazyFrame")
    table.ordered = _is_ordered_by_polars(frame.explain(optimized=False))
    table.order_advice = "end the query with a sort, or give its steps maintain_order=True"
    return table


_PASSING = ("PROJECTION", "FILTER", "LIMIT", "STREAMING LIMIT")
_SORTING = ("ORDER BY", "TOP N")
_OPERATOR = re.compile(r"[╭├┌]─+ ([A-Za-z ]+?) ─|│ +([A-Z][A-Z_]+) +│")


def _is_sorted_by_duckdb(relation: Any) -> bool:
    """Return whether the plan, from its result down, is a sort with nothing above that could change the order."""
    for titled, bare in _OPERATOR.findall(str(relation.explain())):
        operator = (titled or bare).replace("_", " ").upper()
        if operator in _SORTING:
            return True
        if operator not in _PASSING:
            return False
    return False


def _is_ordered_by_polars(plan: str) -> bool:
    """Return whether no step of a plan, from its result down to a sort, says or is known to lose the order."""
    branched = False
    for line in plan.splitlines():
        step = line.strip()
        if step.startswith("SORT BY") and not branched:
            return True
        if "maintain_order: false" in step or step.endswith("JOIN:"):
            return False
        branched = branched or step.startswith(("UNION", "PLAN"))
    return True


def _types(schema: pa.Schema) -> str:
    return ", ".join(f"{field.name}: {field.type}" for field in schema)
