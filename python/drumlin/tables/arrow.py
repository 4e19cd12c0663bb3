"""Rows in memory as Arrow: pyarrow tables and batches, and frames that turn into them."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import pyarrow as pa

from drumlin.errors import SchemaError
from drumlin.tables.table import BATCH_ROWS, Gap, Table

__all__ = ["ArrowTable", "from_pandas", "from_polars"]


class ArrowTable(Table):
    """The rows of a pyarrow Table, without a copy. Cost of a scan: none beyond a filter's; memory: none."""

    in_memory = True

    def __init__(self, table: pa.Table, label: str = "pyarrow table") -> None:
        super().__init__(table.schema, label, table.num_rows)
        self._table = table

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        if columns:
            yield from self._table.select(list(columns)).to_batches(max_chunksize=BATCH_ROWS)
        elif self._table.num_rows:
            yield pa.RecordBatch.from_arrays([pa.nulls(self._table.num_rows)], names=["rows"])


def from_pandas(frame: Any) -> ArrowTable:
    """Return a pandas frame as a table; its index is not a column. Numbers are rarely copied."""
    repeated = frame.columns[frame.columns.duplicated()]
    if len(repeated):
        raise SchemaError(f"The pandas frame has more than one column {repeated[0]!r}. Rename one of them.")
    try:
        table = pa.Table.from_pandas(frame, preserve_index=False)
    except (pa.ArrowException, TypeError, ValueError) as error:
        text = str(error.args[0] if error.args else error)
        raise SchemaError(
            f"The pandas frame cannot be read as a table: {text}. Drop or convert that column."
        ) from error
    return ArrowTable(table, "pandas frame")


def from_polars(frame: Any) -> ArrowTable:
    """Return a Polars DataFrame as a table, without a copy."""
    try:
        table = pa.table(frame)
    except Exception as error:  # Polars raises its own kinds for Object columns
        raise SchemaError(
            f"The Polars frame cannot be read as a table: {error} Drop or convert that column."
        ) from error
    return ArrowTable(table, "Polars frame")
