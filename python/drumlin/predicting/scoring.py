"""Adding a model's columns to batches of rows."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa

from drumlin.errors import DataError, OptionError, SchemaError
from drumlin.options import Writing
from drumlin.rowwise import require_columns
from drumlin.tables import KEEP, Table

if TYPE_CHECKING:
    from drumlin import _core
    from drumlin.mixture import Mixture

Locate = Callable[[int], str]


@dataclass(frozen=True)
class Scored:
    """A batch of results: `read` source rows were read from `first_row` on, and the kept ones are in `batch`."""

    first_row: int
    read: int
    batch: pa.RecordBatch


class Scoring:
    """What a mixture adds to the rows of a table, and which of their own columns are carried along.

    `schema` is that of the results; `added` are the positions of the added columns in it.
    """

    def __init__(
        self,
        table: Table,
        mixture: Mixture,
        codes: dict[str, list[float]],
        *,
        refuse_gaps: bool,
        writing: Writing,
        key: Sequence[str],
        threads: int,
    ) -> None:
        columns = mixture.columns
        if columns is None:
            raise OptionError("The mixture has no column names: make it with columns=.", option="model")
        table.require(name for name in columns if name in table.left_out)
        require_columns(table.schema, columns, table.label)
        table.require(key)
        self._table, self._columns, self._codes = table, columns, codes
        self._refuse_gaps, self._threads = refuse_gaps, threads
        self._all = "responsibilities" in writing.outputs
        self._scorer: _core.Scorer = mixture._make_scorer(codes) if codes else mixture._get_scorer()
        if writing.carry == "all":
            self.carried = list(table.schema.names)
        else:
            table.require(name for name in writing.carry if name not in table.schema.names)
            wanted = {*writing.carry, *key}
            self.carried = [name for name in table.schema.names if name in wanted]
        self._reads = list(dict.fromkeys([*self.carried, *columns]))
        empty = pa.RecordBatch.from_pylist([], schema=pa.schema([table.schema.field(name) for name in columns]))
        results = self._score(empty, 0).schema
        fields = [field.with_name(writing.prefix + field.name) for field in results]
        for field in fields:
            if field.name in self.carried:
                raise SchemaError(
                    f"{table.label} already has a column {field.name!r}. Put something before the names of the new "
                    "columns (prefix='new_'), or do not carry the old ones along (carry=[...] with those to keep).",
                    column=field.name,
                )
        self.schema = pa.schema([*(table.schema.field(name) for name in self.carried), *fields])
        self.added = list(range(len(self.carried), len(self.schema.names)))

    def open(self) -> Iterator[tuple[int, pa.RecordBatch]]:
        """Start a scan of the columns needed."""
        return self._table.scan(self._reads)

    def score(self, first_row: int, batch: pa.RecordBatch, locate: Locate) -> Scored:
        """Return the kept rows of a batch with the added columns."""
        read, kept = batch.num_rows, None
        if KEEP in batch.schema.names:
            keep = batch.column(batch.schema.get_field_index(KEEP)).fill_null(False)
            if keep.true_count < read:
                kept = np.flatnonzero(keep.to_numpy(zero_copy_only=False))
                batch = batch.filter(keep)
        try:
            results = self._score(batch, first_row)
        except DataError as error:
            raise _at_row(error, first_row, kept, locate) from error.__cause__
        if self._refuse_gaps and results.column(0).null_count:
            raise self._gap(first_row, batch, results, kept, locate)
        carried = [batch.column(batch.schema.get_field_index(name)) for name in self.carried]
        return Scored(first_row, read, pa.RecordBatch.from_arrays([*carried, *results.columns], schema=self.schema))

    def _score(self, batch: pa.RecordBatch, first_row: int) -> Any:
        from drumlin.tables.numeric import plain

        part = plain(batch.select([batch.schema.get_field_index(name) for name in self._columns]))
        return self._scorer.score(part, first_row=first_row, threads=self._threads, responsibilities=self._all)

    def _gap(self, first_row: int, batch: pa.RecordBatch, results: Any, kept: Any, locate: Locate) -> DataError:
        """The error for the first row with a gap."""
        at = int(np.flatnonzero(results.column(0).is_null().to_numpy(zero_copy_only=False))[0])
        row = first_row + (at if kept is None else int(kept[at]))
        for name in self._columns:
            value = batch.column(batch.schema.get_field_index(name))[at].as_py()
            found = "null" if value is None else "NaN" if value != value else f"the code {value}"
            if value is None or value != value or float(value) in self._codes.get(name, ()):
                return DataError(
                    f"{locate(row)}: column {name!r} has a gap ({found}), and missing is 'refuse'. With "
                    "missing='complete-rows' rows with gaps stay, without a component; or leave them out with where.",
                    column=name,
                    row=row,
                )
        return DataError(f"{locate(row)}: the row has a gap, and missing is 'refuse'.", row=row)


def _at_row(error: DataError, first_row: int, kept: Any, locate: Locate) -> DataError:
    """The error with the true row number (rows filtered out counted) and the file."""
    row = error.facts.get("row")
    if not isinstance(row, int):
        return error
    true = row if kept is None else first_row + int(kept[row - first_row])
    text = str(error).replace(f"row {row}", locate(true), 1)
    return DataError(text, {**error.facts, "row": true})


def locator(table: Table) -> Locate:
    """Return a function that says where a row is: its number, and for files the file and the row in it."""
    units = table.units()
    starts = np.array([unit.first_row for unit in units], dtype=np.int64)
    files: dict[str, int] = {}
    for unit in units:
        files.setdefault(unit.path, unit.first_row)

    def locate(row: int) -> str:
        if not units:
            return f"row {row} (counted from 0)"
        path = units[int(np.searchsorted(starts, row, side="right")) - 1].path
        return f"row {row - files[path]} (counted from 0) of {path}"

    return locate
