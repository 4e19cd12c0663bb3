"""Rows of a 2-D NumPy array."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
import pyarrow as pa

from drumlin.errors import SchemaError
from drumlin.tables.table import BATCH_ROWS, Gap, Table

__all__ = ["ArrayTable"]


class ArrayTable(Table):
    """The rows of an array of shape (rows, columns), of any strides, not copied as a whole.

    float32 stays float32; integers, booleans and other floats are read as float64. Columns are called `x0`, `x1`, ...
    unless `names` says otherwise. The array must not be written to while it is read.

    Raises SchemaError for another number of axes, values that are not numbers, masked arrays and a wrong number of
    names.

    Cost: a scan copies one batch at a time.
    """

    in_memory = True

    def __init__(self, rows: Any, names: Sequence[str] | None = None) -> None:
        if isinstance(rows, np.ma.MaskedArray):
            raise SchemaError("A masked array is not read as it is. Write rows.filled(numpy.nan) to make its gaps NaN.")
        if rows.dtype.kind not in "fiub":
            raise SchemaError(
                f"The array holds {rows.dtype} values, not real numbers. Convert it, as by rows.astype(numpy.float64)."
            )
        if rows.ndim != 2:
            way = "rows.reshape(-1, 1)" if rows.ndim == 1 else "rows.reshape(len(rows), -1)"
            raise SchemaError(f"The array has {rows.ndim} axes, but needs two: rows and columns. Write {way}, perhaps.")
        columns = rows.shape[1]
        if names is None:
            names = [f"x{position}" for position in range(columns)]
        if len(names) != columns:
            raise SchemaError(f"The array has {columns} columns, but {len(names)} names: {', '.join(names)}.")
        self._array = rows
        self._dtype = np.dtype(np.float32 if rows.dtype == np.float32 else np.float64)
        type_ = pa.float32() if self._dtype == np.float32 else pa.float64()
        super().__init__(pa.schema([(name, type_) for name in names]), "NumPy array", rows.shape[0])

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        positions = [self.schema.get_field_index(name) for name in columns]
        for first in range(0, self._array.shape[0], BATCH_ROWS):
            block = self._array[first : first + BATCH_ROWS]
            if positions:
                arrays = [pa.array(np.ascontiguousarray(block[:, position], self._dtype)) for position in positions]
                yield pa.RecordBatch.from_arrays(arrays, names=list(columns))
            else:
                yield pa.RecordBatch.from_arrays([pa.nulls(len(block))], names=["rows"])
