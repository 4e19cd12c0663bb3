"""Which columns can be fitted, which are meant to be, and how wide they are once decoded."""

from __future__ import annotations

import re
from collections.abc import Collection, Sequence

import pyarrow as pa

from drumlin.errors import SchemaError, nearest

__all__ = ["check_features", "decoded_width", "is_feature", "plain", "plain_type", "suggest_columns"]

WRITTEN = ("component", "responsibility", "responsibilities", "runner_up", "log_density", "tail")
"""Columns that drumlin itself adds to a table."""

_IDENTIFIER = re.compile(r"(?i:(^|_)(id|ids|key|uuid|guid|index|idx|rowid|row_number)$)|[a-z](Id|ID|Key)$")


def is_feature(type_: pa.DataType) -> bool:
    """Return whether columns of this type can be fitted: integers, floats, decimals and booleans."""
    types = pa.types
    return bool(
        types.is_integer(type_) or types.is_floating(type_) or types.is_decimal(type_) or types.is_boolean(type_)
    )


def check_features(schema: pa.Schema, columns: Sequence[str]) -> None:
    """Raise SchemaError unless every column exists, is named once, and holds numbers.

    The message names all unfit columns with their types and says what to do with each.

    >>> import pyarrow as pa
    >>> check_features(pa.schema({"length_cm": pa.float32(), "count": pa.int16()}), ["length_cm", "count"])
    """
    for position, name in enumerate(columns):
        if name not in schema.names:
            known = [field.name for field in schema if is_feature(field.type)]
            raise SchemaError(
                f"There is no column {name!r}.{nearest(name, schema.names)} Columns with numbers: {', '.join(known)}.",
                column=name,
            )
        if name in columns[:position]:
            raise SchemaError(f"Column {name!r} is named twice in columns. Name it once.", column=name)
    unfit = [schema.field(name) for name in columns if not is_feature(schema.field(name).type)]
    if not unfit:
        return
    found = "; ".join(f"{field.name!r} holds {_in_words(field.type)}" for field in unfit)
    raise SchemaError(
        f"Only numbers can be fitted, but {found}. {_advice(unfit[0])}",
        column=unfit[0].name,
        columns=[field.name for field in unfit],
    )


def suggest_columns(schema: pa.Schema, leave_out: Collection[str] = ()) -> list[str]:
    """Return the columns that are probably measurements, judged by type and name alone.

    Left out are text, dates, times, booleans, what looks like an identifier by its name, columns that drumlin wrote,
    and those in `leave_out` (keys, row weights, columns from the paths of files).

    >>> import pyarrow as pa
    >>> suggest_columns(pa.schema({"parcel_id": pa.int64(), "length_cm": pa.float64(), "day": pa.date32()}))
    ['length_cm']
    """
    names = []
    for field in schema:
        if field.name in leave_out or field.name in WRITTEN or pa.types.is_boolean(field.type):
            continue
        integer = pa.types.is_integer(field.type)
        if is_feature(field.type) and not (integer and _IDENTIFIER.search(field.name)):
            names.append(field.name)
    return names


def decoded_width(schema: pa.Schema, columns: Sequence[str]) -> int:
    """Return the bytes of one row's `columns` as the core keeps them: 4 for up to 32-bit floats, else 8."""
    return sum(4 if schema.field(name).type in (pa.float16(), pa.float32()) else 8 for name in columns)


def plain(batch: pa.RecordBatch) -> pa.RecordBatch:
    """Return the batch with the encodings undone that the core does not read; other columns are not copied.

    Dictionaries become their values, text views text, and short or very long decimals float64.
    """
    columns, changed = [], False
    for column in batch.columns:
        target = plain_type(column.type)
        if target is None:
            columns.append(column)
        else:
            columns.append(column.cast(target))
            changed = True
    return pa.RecordBatch.from_arrays(columns, names=batch.schema.names) if changed else batch


def plain_type(type_: pa.DataType) -> pa.DataType | None:
    """Return the type that `plain` gives to columns of `type_`; None where it leaves them as they are."""
    if pa.types.is_dictionary(type_):
        return plain_type(type_.value_type) or type_.value_type
    if pa.types.is_string_view(type_):
        return pa.large_string()
    if pa.types.is_binary_view(type_):
        return pa.large_binary()
    if pa.types.is_decimal(type_) and not pa.types.is_decimal128(type_):
        return pa.float64()
    return None


def _in_words(type_: pa.DataType) -> str:
    types = pa.types
    if types.is_dictionary(type_):
        return f"{_in_words(type_.value_type)} ({type_})"
    if types.is_string(type_) or types.is_large_string(type_) or types.is_string_view(type_):
        return "text"
    if types.is_temporal(type_):
        return f"dates or times ({type_})"
    if types.is_nested(type_):
        return f"lists or records ({type_})"
    if types.is_null(type_):
        return "nothing but nulls"
    return str(type_)


def _advice(field: pa.Field) -> str:
    name, types = field.name, pa.types
    if types.is_temporal(field.type):
        encode = "turn it into a number yourself, such as hours since a fixed moment"
    elif types.is_nested(field.type):
        encode = "make a column of each number in it yourself"
    else:
        encode = "encode it as numbers yourself"
    return (
        f"There are three ways: leave {name!r} out of columns; use it as key= (or let predict carry it along); "
        f"or {encode}."
    )
