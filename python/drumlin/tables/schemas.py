"""One schema for many files: equal columns stay, numbers of unlike width are widened, the rest is left out by name."""

from __future__ import annotations

from collections.abc import Sequence

import pyarrow as pa

__all__ = ["JointSchema", "join_schemas", "widen"]


class JointSchema:
    """What several schemas have in common.

    `schema` holds the columns of all files but those of types that do not go together. `left_out` gives for these, and
    for columns that some file lacks, the reason why they cannot be used; `notes` says in sentences what was done.
    """

    def __init__(self, schema: pa.Schema, notes: list[str], left_out: dict[str, str]) -> None:
        self.schema, self.notes, self.left_out = schema, notes, left_out


def join_schemas(
    schemas: Sequence[pa.Schema], names: Sequence[str], counts: Sequence[int] | None = None
) -> JointSchema:
    """Join schemas, each that of a file called by the name at its place and of `counts` files in all (1 without it).

    Columns keep the order of the first file that has them.
    """
    counts = [1] * len(schemas) if counts is None else counts
    fields: dict[str, pa.Field] = {}
    source: dict[str, str] = {}
    widened: dict[str, str] = {}
    apart: dict[str, str] = {}
    for schema, file in zip(schemas, names, strict=True):
        for field in schema:
            name, type_ = field.name, field.type
            if name not in fields:
                fields[name], source[name] = field.remove_metadata(), file
                continue
            if field.nullable:
                fields[name] = fields[name].with_nullable(True)
            known = fields[name].type
            if known == type_ or name in apart:
                continue
            wider = widen(known, type_)
            if wider is None:
                apart[name] = (
                    f"it is {known} in {source[name]} but {type_} in {file}. "
                    "Give it one type in all files, or leave one of them out."
                )
                continue
            fields[name] = fields[name].with_type(wider)
            if not pa.types.is_null(known) and not pa.types.is_null(type_):
                widened[name] = (
                    f"Column {name!r} is {known} in {source[name]} and {type_} in {file}; it is read as {wider}."
                )
    lacking: dict[str, str] = {}
    notes = [text for name, text in widened.items() if name not in apart]
    for name in fields:
        files = zip(schemas, names, counts, strict=True)
        without = [(file, count) for schema, file, count in files if name not in schema.names]
        if not without or name in apart:
            continue
        fields[name] = fields[name].with_nullable(True)
        share = f"{sum(count for _, count in without)} of {sum(counts)} files lack it"
        lacking[name] = (
            f"{source[name]} has it, but {without[0][0]} does not ({share}). "
            "Add the column to all files, or leave those files out."
        )
        notes.append(f"Column {name!r} is null in the rows of {without[0][0]}, which lacks it ({share}).")
    notes += [f"Column {name!r} cannot be used: {reason}" for name, reason in apart.items()]
    kept = pa.schema([field for name, field in fields.items() if name not in apart])
    return JointSchema(kept, notes, apart | lacking)


def widen(a: pa.DataType, b: pa.DataType) -> pa.DataType | None:
    """Return the type that holds the values of both types, or None when there is none.

    >>> widen(pa.int16(), pa.int64()), widen(pa.int32(), pa.float32()), widen(pa.string(), pa.int8())
    (DataType(int64), DataType(double), None)
    """
    types = pa.types
    if a == b or types.is_null(b):
        return a
    if types.is_null(a):
        return b
    if types.is_dictionary(a) or types.is_dictionary(b):
        return widen(*(type_.value_type if types.is_dictionary(type_) else type_ for type_ in (a, b)))
    if types.is_integer(a) and types.is_integer(b):
        return _widen_integers(a, b)
    if types.is_floating(a) and types.is_floating(b):
        return a if a.bit_width > b.bit_width else b
    if all(types.is_integer(type_) or types.is_floating(type_) or types.is_decimal(type_) for type_ in (a, b)):
        return pa.float64()
    if types.is_timestamp(a) and types.is_timestamp(b):
        units = ("s", "ms", "us", "ns")
        return pa.timestamp(max(a.unit, b.unit, key=units.index), a.tz) if a.tz == b.tz else None
    for family, widest in ((_TEXTS, pa.large_string()), (_BINARIES, pa.large_binary())):
        if a in family and b in family:
            return widest
    return None


_TEXTS = (pa.string(), pa.large_string(), pa.string_view())
_BINARIES = (pa.binary(), pa.large_binary(), pa.binary_view())


def _widen_integers(a: pa.DataType, b: pa.DataType) -> pa.DataType | None:
    signed = [type_ for type_ in (a, b) if pa.types.is_signed_integer(type_)]
    if len(signed) != 1:
        return a if a.bit_width > b.bit_width else b
    unsigned = b if signed[0] is a else a
    bits = max(signed[0].bit_width, 2 * unsigned.bit_width)
    return {8: pa.int8(), 16: pa.int16(), 32: pa.int32(), 64: pa.int64()}.get(bits)
