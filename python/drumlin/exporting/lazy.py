"""A model's columns inside a lazy Polars query, computed by the core while the query streams."""

from __future__ import annotations

import os
from typing import TYPE_CHECKING, Any

from drumlin import checks
from drumlin.errors import DataError, OptionError, SchemaError
from drumlin.rowwise import require_columns

if TYPE_CHECKING:
    import polars as pl

    from drumlin.mixture import Mixture
    from drumlin.model import Model

__all__ = ["lazy_groups"]

_NAME = "__drumlin_groups__"


def lazy_groups(
    frame: pl.LazyFrame, model: Model | Mixture | str | os.PathLike[str], *, prefix: str = ""
) -> pl.LazyFrame:
    """Add to a lazy query the columns that `predict` adds: `component`, `responsibility`, `runner_up`, `log_density`.

    Arguments:
        frame: a Polars LazyFrame with the model's columns, found by name. It is never collected as a whole.
        model: a Model, a Mixture with column names, or the path of a model file.
        prefix: put before the names of the added columns.

    Rows with a gap (null, NaN, or a code that the model knows) have nulls there. The values are those of `predict`, to
    the bit; batches may have any size and order. Polars runs the core in its own threads, also with
    `collect(engine="streaming")` and the sinks.

    Raises SchemaError when the query is built: for a missing column, one that holds no numbers, or a clash of names;
    OptionError for anything but a LazyFrame. An infinite value ends the query when it is met, with an error that names
    the column.

    Cost: one look at each row, with the rest of the query. Memory: a batch.

    >>> import drumlin, polars
    >>> mixture = drumlin.Mixture([0.5, 0.5], [[0.0], [9.0]], [[[1.0]], [[1.0]]], ["weight_kg"])
    >>> query = polars.LazyFrame({"weight_kg": [0.5, 8.0, None]}).filter(polars.col("weight_kg") != 3.0)
    >>> drumlin.lazy_groups(query, mixture).select("component").collect()["component"].to_list()
    [0, 1]
    """
    import polars as pl

    from drumlin.predicting.predict import open_model

    prefix = checks.text("prefix", prefix)
    if not isinstance(frame, pl.LazyFrame):
        raise OptionError(
            f"frame: found {type(frame).__name__}; lazy_groups takes a Polars LazyFrame. For a DataFrame write "
            "frame.lazy(), for other rows drumlin.predict(rows, model).",
            option="frame",
        )
    mixture, _, codes = open_model(model)
    columns = mixture.columns
    if columns is None:
        raise OptionError("The mixture has no column names: make it with columns=.", option="model")
    schema = frame.collect_schema()
    empty = pl.DataFrame(schema=schema)
    require_columns(empty.to_arrow().schema, columns, "The query")
    scorer = mixture._make_scorer({name: list(one) for name, one in codes.items()}) if codes else mixture._get_scorer()

    def score(rows: pl.Series) -> pl.Series:
        from drumlin.tables.numeric import plain

        table = rows.struct.unnest().to_arrow().combine_chunks()
        batches = table.to_batches() or [_empty_batch(table.schema)]
        try:
            parts = [scorer.score(plain(batch), first_row=0, threads=1) for batch in batches]
        except DataError as error:  # rows have no numbers here
            raise DataError(
                f"lazy_groups: column {error.facts.get('column')!r} holds an infinite value. Correct it, or leave the "
                "row out with filter.",
                column=error.facts.get("column"),
            ) from None
        import pyarrow as pa

        frame = pl.from_arrow(pa.Table.from_batches(parts))
        assert isinstance(frame, pl.DataFrame)
        return frame.rename({name: prefix + name for name in frame.columns}).to_struct(_NAME)

    result = score(empty.select(columns).to_struct(_NAME)).dtype
    assert isinstance(result, pl.Struct)
    for field in result.fields:
        if field.name in schema:
            raise SchemaError(
                f"The query already has a column {field.name!r}. Put something before the names of the new columns "
                "(prefix='new_').",
                column=field.name,
            )
    scored: Any = pl.struct(columns).map_batches(score, return_dtype=result, is_elementwise=True)
    return frame.with_columns(scored.alias(_NAME)).unnest(_NAME)


def _empty_batch(schema: Any) -> Any:
    import pyarrow as pa

    return pa.RecordBatch.from_pylist([], schema=schema)
