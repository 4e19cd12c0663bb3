"""Opens whatever holds the rows as a table."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from typing import Any

import pyarrow as pa

from drumlin.errors import OptionError, SchemaError
from drumlin.tables.paths import is_path
from drumlin.tables.table import Table
from drumlin.tables.where import as_expression

__all__ = ["open_table"]

_ACCEPTED = (
    "Rows can be: a Parquet path, glob, directory or list of them; a pyarrow Table, Dataset or RecordBatchReader; "
    "a Polars or pandas frame; a DuckDB relation; any object with __arrow_c_stream__; a 2-D NumPy array; "
    "or a callable that opens a fresh stream for each pass."
)


def open_table(rows: Any, *, where: Any = None, names: Sequence[str] | None = None) -> Table:
    """Open rows as a table.

    Args:
        rows: a Parquet path, glob, directory or list of them; a pyarrow Table, RecordBatch, Dataset or
        RecordBatchReader;
            a Polars DataFrame or LazyFrame; a pandas frame; a DuckDB relation; any object with `__arrow_c_stream__`; a
            2-D NumPy array; or a zero-argument callable that opens a fresh stream for each pass.
        where: a pyarrow expression or text; true for the rows to use. Rows are marked by it, not removed.
        names: the columns of a NumPy array (x0, x1, ... without it).

    Raises:
        SourceError: a file cannot be found or read. SchemaError: the rows have no columns that can be read.
        OptionError: `rows` is something else, or `where` does not fit the columns.

    Cost: footers of files are read, rows are not.

    >>> import numpy as np
    >>> from drumlin.tables import open_table
    >>> open_table(np.zeros((5, 2)), names=["length_cm", "width_cm"])
    ArrayTable('NumPy array', rows=5, columns=2)
    """
    table = _open(rows, names)
    if where is not None:
        expression = as_expression(where, table.schema, "where")
        table.where = table.check_expression(expression, "where")
    return table


def _open(rows: Any, names: Sequence[str] | None) -> Table:
    if is_path(rows):
        from drumlin.tables.parquet import ParquetTable

        return ParquetTable(rows)
    if isinstance(rows, (pa.Table, pa.RecordBatch)):
        from drumlin.tables.arrow import ArrowTable

        return ArrowTable(rows if isinstance(rows, pa.Table) else pa.Table.from_batches([rows]))
    if isinstance(rows, pa.RecordBatchReader):
        from drumlin.tables.stream import StreamTable

        return StreamTable(rows)
    if _is(rows, "numpy", "ndarray"):
        from drumlin.tables.array import ArrayTable

        return ArrayTable(rows, names)
    if _is(rows, "pandas", "DataFrame"):
        from drumlin.tables.arrow import from_pandas

        return from_pandas(rows)
    if _is(rows, "polars", "DataFrame"):
        from drumlin.tables.arrow import from_polars

        return from_polars(rows)
    if _is(rows, "polars", "LazyFrame"):
        from drumlin.tables.stream import from_lazyframe

        return from_lazyframe(rows)
    if _is(rows, "duckdb", "DuckDBPyRelation"):
        from drumlin.tables.stream import from_duckdb

        return from_duckdb(rows)
    if _is(rows, "pyarrow.dataset", "Dataset"):
        from drumlin.tables.dataset import DatasetTable

        return DatasetTable(rows)
    if hasattr(rows, "__arrow_c_stream__") and not _is_series(rows):
        from drumlin.tables.stream import from_capsule

        return from_capsule(rows)
    if callable(rows) and not isinstance(rows, type):
        from drumlin.tables.callable import CallableTable

        return CallableTable(rows, names)
    raise _refusal(rows)


def _is(rows: object, module: str, name: str) -> bool:
    """Return whether `rows` is of a class of a module that need not be installed; nothing is imported."""
    kind = getattr(sys.modules.get(module), name, None)
    return kind is not None and isinstance(rows, kind)


def _is_series(rows: object) -> bool:
    return _is(rows, "polars", "Series") or _is(rows, "pandas", "Series")


def _refusal(rows: object) -> Exception:
    if isinstance(rows, (list, tuple)):
        if not rows:
            return OptionError("rows: the list of paths is empty. Name at least one Parquet file.", option="rows")
        return OptionError(
            f"rows: a list must hold paths, but this one holds {type(rows[0]).__name__}. "
            "For numbers write numpy.asarray(rows).",
            option="rows",
        )
    if isinstance(rows, dict):
        return OptionError("rows: a dict is not read as a table. Write pyarrow.table(rows).", option="rows")
    if _is_series(rows):
        return SchemaError("The rows are a single series. Write rows.to_frame().")
    if hasattr(rows, "__next__"):
        return OptionError(
            "rows: an iterator gives its rows only once. Give a callable that makes a new one each time.", option="rows"
        )
    return OptionError(f"rows: found {type(rows).__name__}. {_ACCEPTED}", option="rows")
