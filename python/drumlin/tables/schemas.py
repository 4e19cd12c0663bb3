"""One schema for many files: equal columns stay, numbers of unlike width are widened, the rest is left out by name."""

from __future__ import annotations

from collections.abc import Sequence

import pyarrow as pa

__all__ = ["JointSchema", "join_schemas", "widen"]


class JointSchema:
    """What several schemas have in common.

    `widened` holds sentences about columns that were given a wider type, `left_out` reasons by column name.
    """

    def __init__(self, schema: pa.Schema, widened: list[str], left_out: dict[str, str]) -> None:
        self.schema, self.widened, self.left_out = schema, widened, left_out


def join_schemas(schemas: Sequence[pa.Schema], names: Sequence[str]) -> JointSchema:
    """Join the schemas of files called `names`. Columns keep the order of the first file that has them."""
    groups: dict[bytes, tuple[pa.Schema, list[str]]] = {}
    for schema, name in zip(schemas, names, strict=True):
        groups.setdefault(schema.serialize().to_pybytes(), (schema, []))[1].append(name)
    fields: dict[str, pa.Field] = {}
    source: dict[str, str] = {}
    widened: dict[str, str] = {}
    left_out: dict[str, str] = {}
    for schema, files in groups.values():
        for field in schema:
            name, type_ = field.name, field.type
            if name not in fields:
                fields[name], source[name] = field.remove_metadata().with_nullable(True), files[0]
                continue
            known = fields[name].type
            if known == type_ or name in left_out:
                continue
            wider = widen(known, type_)
            if wider is None:
                left_out[name] = (
                    f"it is {known} in {source[name]} but {type_} in {files[0]}. "
                    "Give it one type in all files, or leave one of them out."
                )
                continue
            fields[name] = pa.field(name, wider)
            if not pa.types.is_null(known) and not pa.types.is_null(type_):
                widened[name] = (
                    f"Column {name!r} is {known} in {source[name]} and {type_} in {files[0]}; it is read as {wider}."
                )
    for name in fields:
        lacking = [file for schema, files in groups.values() if name not in schema.names for file in files]
        if lacking:
            left_out[name] = (
                f"{source[name]} has it, but {lacking[0]} does not ({len(lacking)} of {len(names)} files lack it). "
                "Add the column to all files, or leave those files out."
            )
    kept = pa.schema([field for name, field in fields.items() if name not in left_out])
    return JointSchema(kept, [text for name, text in widened.items() if name not in left_out], left_out)


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
