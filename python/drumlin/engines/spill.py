"""The rows that a ceiling of memory leaves no room for, written down decoded during the first read."""

from __future__ import annotations

from collections.abc import Iterator

import pyarrow as pa

from drumlin.tables.spool import SpoolTable
from drumlin.tables.table import KEEP

__all__ = ["Spill"]

_KEEP = "keep, of the row filter"
"""What the column of the row filter is called in the file, where its own name is not allowed."""

Batches = Iterator[tuple[int, pa.RecordBatch]]


class Spill:
    """Writes the rows from number `start` on to a temporary file in `folder` while they pass, and gives them back.

    Raises TargetError, naming the folder, when it has no room; SourceError when the file cannot be read again.

    >>> import pyarrow as pa, tempfile
    >>> from drumlin.engines.spill import Spill
    >>> batch = pa.record_batch({"weight_kg": [0.5, 1.5, 2.5]})
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     spill = Spill(folder, "parcels", 1)
    ...     passed = [batch.num_rows for _, batch in spill.watch(iter([(0, batch)]))]
    ...     again = [(first, batch.to_pydict()) for first, batch in spill.scan(2)]
    ...     spill.close()
    >>> passed, again
    ([3], [(2, {'weight_kg': [2.5]})])
    """

    def __init__(self, folder: str, label: str, start: int) -> None:
        self._folder, self._label = folder, label
        self.start = start
        self._table: SpoolTable | None = None

    @property
    def bytes(self) -> int:
        """Bytes written."""
        return 0 if self._table is None else self._table.bytes

    def watch(self, batches: Batches) -> Batches:
        """Pass on what comes, and write down the rows from `start` on."""
        for first, batch in batches:
            yield first, batch
            if first + batch.num_rows > self.start:
                part = _renamed(batch.slice(max(0, self.start - first)), KEEP, _KEEP)
                if self._table is None:
                    self._table = SpoolTable(self._folder, part.schema, self._label)
                self._table.add(part)
        if self._table is not None:
            self._table.finish()

    def scan(self, first: int) -> Batches:
        """Give back the rows from number `first` on, which is not before `start`."""
        if self._table is None:
            return
        begin = first - self.start
        for at, batch in self._table.scan(ranges=[(begin, begin + (1 << 62))]):
            yield at + self.start, _renamed(batch, _KEEP, KEEP)

    def close(self) -> None:
        """Remove the file."""
        if self._table is not None:
            self._table.close()


def _renamed(batch: pa.RecordBatch, old: str, new: str) -> pa.RecordBatch:
    names = batch.schema.names
    return batch.rename_columns([new if name == old else name for name in names]) if old in names else batch
