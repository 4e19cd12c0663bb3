"""Rows of a pyarrow Dataset: any format and file system that pyarrow reads."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import pyarrow as pa

from drumlin.errors import SourceError
from drumlin.tables.table import BATCH_ROWS, Gap, Table

__all__ = ["DatasetTable"]


class DatasetTable(Table):
    """The rows of a pyarrow Dataset, fragment by fragment in its own order.

    A filter that the dataset carries belongs to the source: row numbers count what is left after it. Parquet fragments
    are read one row group at a time. Raises SourceError, naming the fragment, when one cannot be read.

    Cost: a scan reads the named columns once; memory: about two row groups.
    """

    def __init__(self, dataset: Any) -> None:
        super().__init__(dataset.schema, f"pyarrow dataset of {type(dataset).__name__}")
        self._dataset = dataset
        self._filtered = bool(getattr(dataset, "_scan_options", None))

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        for name, source, known in self._sources():
            try:
                yield from source.scanner(columns=list(columns), **known).to_batches()
            except (pa.ArrowException, OSError) as error:
                text = str(error).strip().splitlines()[0]
                raise SourceError(f"{name} cannot be read: {text} Make it anew, or leave it out.", file=name) from error

    def _sources(self) -> Iterator[tuple[str, Any, dict[str, Any]]]:
        """Yield the name of each part, what to scan, and how."""
        import pyarrow.dataset as ds

        known: dict[str, Any] = {"batch_size": BATCH_ROWS, "batch_readahead": 1, "fragment_readahead": 1}
        if self._filtered:
            yield self.label, self._dataset, known
            return
        known["schema"] = self._dataset.schema
        for fragment in self._dataset.get_fragments():
            name = getattr(fragment, "path", self.label)
            if not isinstance(fragment, ds.ParquetFileFragment):
                yield name, fragment, known
                continue
            options = ds.ParquetFragmentScanOptions(pre_buffer=False)
            try:
                groups = range(fragment.num_row_groups)
            except (pa.ArrowException, OSError) as error:
                text = str(error).strip().splitlines()[0]
                raise SourceError(f"{name} cannot be read: {text} Make it anew, or leave it out.", file=name) from error
            for group in groups:
                yield name, fragment.subset(row_group_ids=[group]), {**known, "fragment_scan_options": options}
