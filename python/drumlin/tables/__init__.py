"""Rows, whatever they come from, as one thing: a `Table` that is scanned in row order.

One file a source (Parquet files, datasets, Arrow tables and frames, streams, arrays, callables), and beside them what
they share: `table` (the scan), `paths` (which files), `schemas` (one schema for many files), `where` (row filters),
`numeric` (which columns can be fitted). Nothing here knows about mixtures.

| source | scanned again | held in memory |
|---|---|---|
| Parquet path, glob, directory or list; pyarrow Dataset | yes | no |
| pyarrow Table or RecordBatch, Polars and pandas frames, 2-D NumPy array | yes | yes (not copied) |
| Polars LazyFrame, DuckDB relation, callable | yes, it runs again | no |
| RecordBatchReader and other one-shot streams | no | no |
"""

from drumlin.tables.open import open_table
from drumlin.tables.table import BATCH_ROWS, KEEP, Table, Unit

__all__ = ["BATCH_ROWS", "KEEP", "Table", "Unit", "open_table"]
