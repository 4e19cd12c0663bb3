"""What a mixture and a model say about rows: log density, responsibilities, the likeliest component, distance."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from drumlin import checks, memory
from drumlin.errors import OptionError, SchemaError

if TYPE_CHECKING:
    import polars as pl
    import pyarrow as pa

    from drumlin import _core
    from drumlin.mixture import Mixture

MANY_ROWS = 4096
"""From this many rows on, all usable cores work; below, starting threads costs more than it saves."""


class RowWise:
    """The methods that `Mixture` and `Model` share.

    All read the rows once, where they are: arrays of float64 or float32 of any strides and Arrow columns are not copied
    as a whole, other numbers are widened first. An array must not be written to meanwhile. Many rows are shared among
    all usable cores. Memory: the result, and a few blocks of 192 rows per core.
    """

    __slots__ = ()

    @property
    def columns(self) -> tuple[str, ...] | None:
        """The names of the columns, in order; None when the mixture has none."""
        raise NotImplementedError

    def _dimensions(self) -> int:
        raise NotImplementedError

    def _get_scorer(self) -> _core.Scorer:
        raise NotImplementedError

    def log_density(self, rows: Any) -> NDArray[np.float64]:
        """Return the log density of each row, in nats: (n,) float64. A row with a gap (null, NaN, code) gets NaN.

        `rows`: a 2-D NumPy array with the columns in the model's order, or any table that `fit` takes (columns by
        name). Infinite values raise DataError. One pass; memory: one number per row. The same bits for any way of
        giving the rows, and as `predict` writes.

        >>> import drumlin, numpy
        >>> mixture = drumlin.Mixture([1.0], [[0.0]], [[[1.0]]])
        >>> mixture.log_density(numpy.array([[0.0]])).round(6).tolist()
        [-0.918939]
        """
        return self._apply(rows, "log_density")

    def responsibilities(self, rows: Any) -> NDArray[np.float64]:
        """Return the responsibility of every component for each row: (n, k) float64, each row summing to 1.

        Columns stand in the order of the components; a row with a gap gets NaN. Entries more than 37 nats below the
        row's best are exactly 0. For tables that do not fit in memory use `drumlin.predict`. One pass; memory: k
        numbers per row.

        >>> import drumlin, numpy
        >>> mixture = drumlin.Mixture([0.5, 0.5], [[-1.0], [1.0]], [[[1.0]], [[1.0]]])
        >>> mixture.responsibilities(numpy.array([[0.0]])).tolist()
        [[0.5, 0.5]]
        """
        return self._apply(rows, "responsibilities")

    def assign(self, rows: Any) -> NDArray[np.int32]:
        """Return the id of the likeliest component of each row: (n,) int32; -1 for a row with a gap.

        Of components equally likely the first counts. One pass, cheaper than the others: no exponential is taken.
        Memory: one number per row.

        >>> import drumlin, numpy
        >>> mixture = drumlin.Mixture([0.5, 0.5], [[-1.0], [1.0]], [[[1.0]], [[1.0]]])
        >>> mixture.assign(numpy.array([[-2.0], [3.0]])).tolist()
        [0, 1]
        """
        return self._apply(rows, "assign")

    def distance(self, rows: Any) -> NDArray[np.float64]:
        """Return the Mahalanobis distance of each row to every component: (n, k) float64; NaN for a row with a gap.

        The distance is in standard deviations of the component in the direction of the row. One pass.

        >>> import drumlin, numpy
        >>> drumlin.Mixture([1.0], [[1.0]], [[[4.0]]]).distance(numpy.array([[5.0]])).tolist()
        [[2.0]]
        """
        return self._apply(rows, "distance")

    def as_polars(self, prefix: str = "") -> pl.Expr:
        """Return a Polars expression that makes what `predict` adds, without a Python callback: a struct "drumlin".

        Fields: `component` (Int32 id), `responsibility` (Float32), `runner_up` (Int32; null with one component) and
        `log_density` (Float64, nats); `prefix` goes before all names. `frame.with_columns(model.as_polars())
        .unnest("drumlin")` gives four columns, on eager and lazy frames and the streaming engine. A row with a null,
        NaN or infinite value, or a code that the model knows, has nulls. The values agree with `predict` to 1e-9, but
        for rows more than 1e144 spreads away, which get the first component instead of the nearest.

        Raises OptionError for a mixture without column names, or with more than 500 components or 10,000 numbers in
        its factors, for which Polars would plan for long: use `drumlin.lazy_groups` there, which is faster for any
        mixture. Polars refuses columns of text, dates and durations; with a column of the same name `unnest` fails.

        >>> import drumlin, polars
        >>> mixture = drumlin.Mixture([0.5, 0.5], [[0.0], [9.0]], [[[1.0]], [[1.0]]], ["weight_kg"])
        >>> frame = polars.DataFrame({"weight_kg": [0.5, 8.0, None]}).with_columns(mixture.as_polars())
        >>> frame.unnest("drumlin")["component"].to_list()
        [0, 1, None]
        """
        from drumlin.exporting.polars import expression

        return expression(self._as_mixture(), self._codes(), checks.text("prefix", prefix))

    def as_sql(
        self, table: str | Sequence[str] = "rows", *, files: str | Sequence[str] | None = None, prefix: str = ""
    ) -> str:
        """Return one DuckDB query that selects all columns of a table and adds what `predict` adds.

        `table` is its name, written as an identifier (several strings: catalog, schema, table); with `files` (a path or
        glob, or several) the rows come from Parquet. Added: `component` (INTEGER id), `responsibility` (FLOAT),
        `runner_up` (INTEGER; NULL with one component) and `log_density` (DOUBLE, nats); `prefix` goes before their
        names. A row with a NULL, NaN or infinite value, or a code that the model knows, has NULLs there. The values
        agree with `predict` to 1e-9, but for rows more than 1e144 spreads away, which get the first component instead
        of the nearest. The order of rows is DuckDB's.

        Raises OptionError for a mixture without column names, or with more than 500 components or 10,000 numbers in
        its factors. DuckDB refuses columns of text and dates.

        >>> import drumlin, duckdb
        >>> mixture = drumlin.Mixture([0.5, 0.5], [[0.0], [9.0]], [[[1.0]], [[1.0]]], ["weight kg"])
        >>> _ = duckdb.sql('CREATE TEMP TABLE scans AS SELECT * FROM (VALUES (0.5), (8.0), (NULL)) AS t("weight kg")')
        >>> sorted(duckdb.sql(mixture.as_sql("scans")).select("component").fetchall(), key=str)
        [(0,), (1,), (None,)]
        """
        from drumlin.exporting.sql import query, source

        return query(self._as_mixture(), source(table, files), self._codes(), checks.text("prefix", prefix))

    def _as_mixture(self) -> Mixture:
        raise NotImplementedError

    def _codes(self) -> dict[str, tuple[float, ...]]:
        """The codes that stand for a gap, by column."""
        return {}

    def _apply(self, rows: Any, what: str) -> NDArray[Any]:
        if isinstance(rows, np.ndarray):
            return self._apply_array(rows, what)
        return self._apply_table(rows, what)

    def _apply_array(self, rows: NDArray[Any], what: str) -> NDArray[Any]:
        if rows.ndim != 2:
            raise SchemaError(
                f"rows must be a 2-D array, one row a line; found {rows.ndim} dimensions. One row is `row[None, :]`.",
                found=rows.ndim,
            )
        if rows.shape[1] != self._dimensions():
            raise SchemaError(
                f"rows have {rows.shape[1]} columns, the mixture has {self._dimensions()}"
                f"{': ' + ', '.join(self.columns) if self.columns else ''}.",
                found=rows.shape[1],
            )
        if rows.dtype != np.float64 and rows.dtype != np.float32:
            if rows.dtype.kind not in "biuf":
                raise SchemaError(f"rows must hold numbers; found an array of {rows.dtype}.", found=str(rows.dtype))
            rows = rows.astype(np.float64)
        elif not rows.flags.aligned:
            rows = rows.copy()
        return self._get_scorer().score_array(rows, what, _threads(len(rows)))

    def _apply_table(self, rows: Any, what: str) -> NDArray[Any]:
        from drumlin.tables import open_table
        from drumlin.tables.numeric import plain

        columns = self.columns
        if columns is None:
            raise OptionError("This mixture has no column names: give rows as a 2-D array, or columns= when making it.")
        table = open_table(rows)
        table.require(name for name in columns if name in table.left_out)
        require_columns(table.schema, columns, table.label)
        scorer, threads = self._get_scorer(), _threads(MANY_ROWS)
        parts = [
            scorer.score_batch(plain(batch), what, first_row=first_row, threads=threads)
            for first_row, batch in table.scan(list(columns))
        ]
        return np.concatenate(parts or [self._apply_array(np.empty((0, self._dimensions())), what)])


def _threads(rows: int) -> int:
    return memory.usable_cores() if rows >= MANY_ROWS else 1


def require_columns(schema: pa.Schema, columns: tuple[str, ...], label: str) -> None:
    """Refuse a table that lacks one of the columns, or has one that is not a column of numbers."""
    from drumlin.errors import nearest
    from drumlin.tables.numeric import check_features

    for name in columns:
        if name not in schema.names:
            raise SchemaError(
                f"{label} has no column {name!r}.{nearest(name, schema.names)} It has: {listed_names(schema.names)}.",
                column=name,
            )
    check_features(schema, list(columns))


def listed_names(names: list[str], most: int = 20) -> str:
    """Return "a, b, c" with a count of the rest after `most` names."""
    shown = ", ".join(names[:most])
    return shown if len(names) <= most else f"{shown} and {len(names) - most} more"
