"""What a fit reads: the table, its columns, and the part that each column plays."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from drumlin.errors import OptionError, SchemaError, StreamError, nearest
from drumlin.options import Columns, TableOptions
from drumlin.rowwise import listed_names

if TYPE_CHECKING:
    from drumlin.engines import ReadingPlan
    from drumlin.tables import Table

HELD = "__held__"
"""The boolean column of the rows that are held out."""


@dataclass(frozen=True)
class Source:
    """An opened table, the columns to fit, all columns to read, and the expressions to compute while reading."""

    table: Table
    columns: tuple[str, ...]
    needed: tuple[str, ...]
    extra: Mapping[str, Any]
    reading: ReadingPlan
    codes: Mapping[str, tuple[float, ...]]


def open_source(
    rows: Any,
    columns: Columns,
    about: TableOptions,
    seed: int,
    *,
    fixed: tuple[str, ...] | None = None,
    spill: str | None = None,
) -> Source:
    """Open `rows` for several passes and settle which columns are fitted.

    `fixed` are the columns of the mixture to start from; they take the place of the option `columns`. Rows that cannot
    be read twice in the same order are kept in a temporary file in the folder `spill`: close the table at the end.
    """
    from drumlin.engines import ReadingPlan
    from drumlin.tables import KEEP, open_table

    wanted = fixed if fixed is not None else columns.columns
    names = array_names(rows, wanted)
    table = open_table(rows, where=about.where, names=names)
    passing = not table.rereadable or not (table.ordered or about.key)
    if passing and spill is None:
        raise _passing_rows(table)
    apart = [*(about.key or ()), *([about.row_weight] if about.row_weight else [])]
    table.require(apart)
    chosen = _chosen(table, wanted, apart)
    _check_parts(table, chosen, about)
    extra: dict[str, Any] = {}
    share = 0.0
    if isinstance(about.hold_out, float):
        share = about.hold_out
    elif about.hold_out is not None:
        from drumlin.tables.where import as_expression

        expression = as_expression(about.hold_out, table.schema, "hold_out")
        extra[HELD] = table.check_expression(expression, "hold_out")
    codes = codes_per_column(columns.missing_codes, chosen)
    reading = ReadingPlan(
        chosen,
        weight=about.row_weight,
        keep=KEEP if table.where is not None else None,
        held=HELD if extra else None,
        held_share=share,
        held_seed=seed,
        key=about.key,
        codes=codes or None,
    )
    needed = tuple(dict.fromkeys([*chosen, *apart]))
    if passing and spill is not None:
        from drumlin.tables.spool import spooled

        table = spooled(table, needed, spill, extra.values())
    return Source(table, chosen, needed, extra, reading, codes)


def _passing_rows(table: Table) -> StreamError:
    """The error for rows that cannot be read twice in the same order, with the ways out."""
    if not table.rereadable:
        return StreamError(
            f"{table.label} can be read only once, and a fit reads the rows several times. Give a path, a pyarrow "
            "Table or Dataset, a frame, or a callable without arguments that opens a fresh stream for each pass; or "
            "have the rows kept in a temporary file with spill='FOLDER'."
        )
    return StreamError(
        f"{table.label}: the rows may come in another order each time they are read, and a fit reads them several "
        f"times. There are three ways: {table.order_advice}; name a key= that tells the rows apart (the model is then "
        "the same to rounding); or have the rows kept in a temporary file with spill='FOLDER'."
    )


def array_names(rows: Any, columns: Sequence[str] | None) -> list[str] | None:
    """Return the names for the columns of a NumPy array: `columns`, unless they choose among x0, x1, ..."""
    if columns is None or not isinstance(rows, np.ndarray) or rows.ndim != 2:
        return None
    given = [f"x{position}" for position in range(rows.shape[1])]
    if set(columns) <= set(given):
        return None
    if len(columns) != rows.shape[1]:
        raise OptionError(
            f"columns names {len(columns)} columns, the array has {rows.shape[1]}: name all of them in order, or "
            "choose among x0, x1, ...",
            option="columns",
        )
    return list(columns)


def codes_per_column(
    codes: Mapping[str, tuple[float, ...]] | None, columns: Sequence[str]
) -> dict[str, tuple[float, ...]]:
    """Return the codes that stand for a gap by column, '*' spread over all; refuse codes of a column not read."""
    found = dict(codes or {})
    everywhere = found.pop("*", ())
    for name in found:
        if name not in columns:
            raise OptionError(
                f"missing_codes names {name!r}, which is not among the columns to fit.{nearest(name, columns)} "
                f"They are: {listed_names(list(columns))}.",
                option="missing_codes",
            )
    per_column = {name: tuple(sorted({*everywhere, *found.get(name, ())})) for name in columns}
    return {name: listed for name, listed in per_column.items() if listed}


def _chosen(table: Table, wanted: Sequence[str] | None, apart: Sequence[str]) -> tuple[str, ...]:
    from drumlin.tables.numeric import check_features, suggest_columns

    if wanted is None and not table.in_memory:
        likely = suggest_columns(table.schema, [*apart, *table.partitions, *table.left_out])
        line = f"columns={likely!r}".replace("'", '"')
        advice = (
            f"For the columns that look like measurements, paste: {line}. drumlin.profile shows what is in them."
            if likely
            else f"None looks like a measurement. There are: {listed_names(table.schema.names)}."
        )
        raise OptionError(f"columns must be named for {table.label}. {advice}", option="columns", suggested=likely)
    chosen = tuple(wanted) if wanted is not None else tuple(n for n in table.schema.names if n not in apart)
    if not chosen:
        raise SchemaError(f"{table.label} has no column to fit.")
    table.require(chosen)
    check_features(table.schema, chosen)
    return chosen


def _check_parts(table: Table, columns: Sequence[str], about: TableOptions) -> None:
    """A key is never fitted, and a row weight is neither fitted nor anything but a number."""
    from drumlin.tables.numeric import is_feature

    for name in about.key or ():
        if name in columns:
            raise OptionError(f"{name!r} is both in key and in columns: a key is never fitted.", option="key")
    weight = about.row_weight
    if weight is None:
        return
    if weight in columns:
        raise OptionError(f"{weight!r} is both row_weight and in columns: take it out of columns.", option="row_weight")
    kind = table.schema.field(weight).type
    if not is_feature(kind):
        raise SchemaError(f"row_weight: column {weight!r} holds {kind}, not numbers.", column=weight)
