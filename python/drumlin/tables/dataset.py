"""Rows of a pyarrow Dataset: any format and file system that pyarrow reads."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import pyarrow as pa

from drumlin.errors import SourceError
from drumlin.tables.footer import is_local, naming, open_file, read_group
from drumlin.tables.table import BATCH_ROWS, Gap, Table
from drumlin.tables.where import evaluate, referenced

__all__ = ["DatasetTable"]


class DatasetTable(Table):
    """The rows of a pyarrow Dataset, fragment by fragment in its own order.

    A filter that the dataset carries belongs to the source: row numbers count what is left after it. Parquet fragments
    are read page by page, as files are, and row groups that a filter rules out by their statistics are not read. Raises
    SourceError, naming the fragment, when one cannot be read.

    Cost: a scan reads the named columns once; memory: one batch and about
    a megabyte per column for Parquet, for other formats what pyarrow's own scanner holds.
    """

    def __init__(self, dataset: Any) -> None:
        super().__init__(dataset.schema, f"pyarrow dataset of {type(dataset).__name__}")
        self._filter = (getattr(dataset, "_scan_options", None) or {}).get("filter")
        if self._filter is not None:  # a filtered dataset hands out no fragments; a copy without its filter does
            dataset = dataset.replace_schema(dataset.schema)
            dataset._scan_options = {}
        self._dataset = dataset

    def _read(self, columns: Sequence[str], ranges: Sequence[tuple[int, int]] | None) -> Iterator[pa.RecordBatch | Gap]:
        import pyarrow.dataset as ds

        condition = self._filter
        used = [] if condition is None else referenced(self.schema, condition)
        names = list(dict.fromkeys([*columns, *used]))
        for fragment in self._dataset.get_fragments(condition):
            shown = getattr(fragment, "path", self.label)
            parquet = isinstance(fragment, ds.ParquetFileFragment)
            for batch in self._parquet(fragment, shown, names) if parquet else self._other(fragment, shown, names):
                if condition is not None and batch.num_rows:
                    batch = batch.filter(evaluate(batch.select(used), [condition])[0])
                yield batch

    def _other(self, fragment: Any, shown: str, names: list[str]) -> Iterator[pa.RecordBatch]:
        scanner = fragment.scanner(
            columns=names, schema=self.schema, batch_size=BATCH_ROWS, batch_readahead=1, fragment_readahead=1
        )
        try:
            yield from scanner.to_batches()
        except (pa.ArrowException, OSError) as error:
            text = str(error).strip().splitlines()[0]
            raise SourceError(f"{shown} cannot be read: {text} Make it anew, or leave it out.", file=shown) from error

    def _parquet(self, fragment: Any, shown: str, names: list[str]) -> Iterator[pa.RecordBatch]:
        import pyarrow.dataset as ds

        with naming(shown):
            if self._filter is not None:
                fragment = fragment.subset(self._filter, schema=self.schema)
            groups = [group.id for group in fragment.row_groups]
            stored = [name for name in names if name in fragment.physical_schema.names]
            constants = ds.get_partition_keys(fragment.partition_expression)
            source = fragment.open()
        local = is_local(fragment.filesystem) if fragment.filesystem is not None else True
        with source:
            with naming(shown):
                reader = open_file(source, stored, local=local)
            for group in groups:
                for batch in read_group(reader, shown, group, stored):
                    with naming(shown, group):
                        shaped = self._shape(batch, names, stored, constants)
                    yield shaped

    def _shape(
        self, batch: pa.RecordBatch, names: list[str], stored: list[str], constants: dict[str, Any]
    ) -> pa.RecordBatch:
        """Give a batch the dataset's types, the columns of its partition, and nulls for columns that are lacking."""
        if not names:
            return batch
        arrays = []
        for name in names:
            type_ = self.schema.field(name).type
            if name in stored:
                array = batch.column(name)
                arrays.append(array if array.type == type_ else array.cast(type_))
            elif constants.get(name) is not None:
                arrays.append(pa.repeat(pa.scalar(constants[name]).cast(type_), batch.num_rows))
            else:
                arrays.append(pa.nulls(batch.num_rows, type_))
        return pa.RecordBatch.from_arrays(arrays, names=names)
