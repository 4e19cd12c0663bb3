"""One look at every column while the rows stream past: gaps of the columns that are never fitted, and a sample with
its gaps kept.

The sample holds the rows whose hashed row number lies below a threshold; the threshold is halved whenever twice the
wanted number is exceeded. So it does not depend on how the rows are cut into batches or files, only on the row
numbers and the seed.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pyarrow as pa

__all__ = ["Look", "TappedTable", "footer_nulls"]

KEEP = "__keep__"


class Look:
    """Counts nulls of `others` and samples the columns `measured`, batch by batch, in any cut.

    `values` is the sample, shape (rows, measured), float64 in the columns' units, rows in table order; null becomes
    NaN.
    Memory: at most two samples of `size` rows.
    """

    def __init__(self, measured: Sequence[str], others: Sequence[str], size: int, seed: int) -> None:
        self.measured = list(measured)
        self.nulls = dict.fromkeys(others, 0)
        self.rows = 0
        self.kept = 0
        self._size = size
        self._seed = np.uint64(seed)
        self._threshold = np.uint64(2**64 - 1)
        self._parts: list[NDArray[np.float64]] = []
        self._hashes: list[NDArray[np.uint64]] = []
        self._held = 0

    def add(self, first_row: int, batch: pa.RecordBatch) -> None:
        """Look at one batch whose first row has the row number `first_row`."""
        import pyarrow as pa
        import pyarrow.compute as pc

        self.rows += batch.num_rows
        mask = None
        names = batch.schema.names
        if KEEP in names:
            mask = pc.fill_null(batch.column(names.index(KEEP)), False)
            self.kept += int(pc.sum(mask).as_py() or 0)
        else:
            self.kept += batch.num_rows
        for name in self.nulls:
            column = batch.column(names.index(name))
            if column.null_count or pa.types.is_null(column.type):
                gaps = column.is_null()
                counted = gaps if mask is None else pc.and_(gaps, mask)
                self.nulls[name] += int(pc.sum(counted).as_py() or 0)
        if not self.measured or batch.num_rows == 0:
            return
        hashes = hash_rows(first_row, batch.num_rows, self._seed)
        chosen = hashes <= self._threshold
        if mask is not None:
            chosen &= mask.to_numpy(zero_copy_only=False)
        positions = np.flatnonzero(chosen)
        if len(positions) == 0:
            return
        taken = pa.array(positions)
        part = np.empty((len(positions), len(self.measured)))
        for place, name in enumerate(self.measured):
            part[:, place] = _as_float64(batch.column(names.index(name)).take(taken))
        self._parts.append(part)
        self._hashes.append(hashes[positions])
        self._held += len(positions)
        while self._held > 2 * self._size:
            self._halve()

    def _halve(self) -> None:
        self._threshold = self._threshold >> np.uint64(1)
        below = [hashes <= self._threshold for hashes in self._hashes]
        self._parts = [part[keep] for part, keep in zip(self._parts, below, strict=True)]
        self._hashes = [hashes[keep] for hashes, keep in zip(self._hashes, below, strict=True)]
        filled = [place for place, part in enumerate(self._parts) if len(part)]
        self._parts = [self._parts[place] for place in filled]
        self._hashes = [self._hashes[place] for place in filled]
        self._held = sum(map(len, self._parts))

    @property
    def values(self) -> NDArray[np.float64]:
        if not self._parts:
            return np.empty((0, len(self.measured)))
        return np.concatenate(self._parts)


def hash_rows(first_row: int, rows: int, seed: np.uint64) -> NDArray[np.uint64]:
    """Return one well-mixed 64-bit number per row number (the finaliser of splitmix64: Steele, Lea & Flood 2014)."""
    with np.errstate(over="ignore"):
        mixed = np.arange(first_row, first_row + rows, dtype=np.uint64)
        mixed += seed * np.uint64(0xD1342543DE82EF95)
        mixed += np.uint64(1)
        mixed *= np.uint64(0x9E3779B97F4A7C15)
        mixed ^= mixed >> np.uint64(30)
        mixed *= np.uint64(0xBF58476D1CE4E5B9)
        mixed ^= mixed >> np.uint64(27)
        mixed *= np.uint64(0x94D049BB133111EB)
        mixed ^= mixed >> np.uint64(31)
    return mixed


def _as_float64(column: pa.Array) -> NDArray[np.float64]:
    """Widen one column, null to NaN."""
    import pyarrow as pa
    import pyarrow.compute as pc

    if pa.types.is_boolean(column.type):
        column = pc.cast(column, pa.uint8())
    if pa.types.is_null(column.type):
        return np.full(len(column), np.nan)
    wide = pc.cast(column, pa.float64(), safe=False)
    result: NDArray[np.float64] = wide.to_numpy(zero_copy_only=False)
    return result


class TappedTable:
    """A table whose batches a `Look` sees on their way to the reader; everything else is the table's own."""

    def __init__(self, table: Any, look: Look, columns: Sequence[str]) -> None:
        self._table = table
        self._look = look
        self._columns = list(columns)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._table, name)

    def scan(
        self,
        columns: Sequence[str] | None = None,
        ranges: Sequence[tuple[int, int]] | None = None,
        *,
        extra: Mapping[str, Any] | None = None,
    ) -> Iterator[tuple[int, pa.RecordBatch]]:
        """Read the columns that are looked at along with those asked for."""
        wanted = list(dict.fromkeys([*(columns or []), *self._columns]))
        for first_row, batch in self._table.scan(wanted, ranges, extra=extra):
            self._look.add(first_row, batch)
            yield first_row, batch


def footer_nulls(files: Sequence[str], names: Sequence[str]) -> dict[str, int]:
    """Return the nulls of those columns in `names` whose number every Parquet footer states; no data pages are read.

    Of files on other file systems none is returned: there it would be another request for each.
    """
    import pyarrow.parquet as pq

    counts: dict[str, int] = dict.fromkeys(names, 0)
    if not files or not names or any("://" in path for path in files):
        return {}
    try:
        for path in files:
            metadata = pq.read_metadata(path)
            for group in range(metadata.num_row_groups):
                _add_group(metadata.row_group(group), counts)
            if metadata.num_row_groups:
                schema = set(metadata.schema.to_arrow_schema().names)
                for name in [name for name in counts if name not in schema]:
                    del counts[name]
    except (OSError, ValueError, TypeError):
        return {}
    return counts


def _add_group(group: Any, counts: dict[str, int]) -> None:
    """Add one row group's null counts; a column without a stated count is dropped from `counts`."""
    seen: dict[str, int | None] = {}
    for place in range(group.num_columns):
        chunk = group.column(place)
        statistics = chunk.statistics
        known = statistics is not None and statistics.has_null_count
        seen[chunk.path_in_schema] = statistics.null_count if known else None
    for name in list(counts):
        number = seen.get(name)
        if number is None:
            del counts[name]
        else:
            counts[name] += number
