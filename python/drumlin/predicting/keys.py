"""A running hash of key columns that does not depend on how the rows are cut into batches."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc

from drumlin.errors import SchemaError


class KeyHash:
    """Hashes the values of key columns row by row, nulls told apart: equal keys in equal order hash alike."""

    def __init__(self, schema: pa.Schema, key: Sequence[str]) -> None:
        self._key = list(key)
        for name in self._key:
            kind = schema.field(name).type
            if pa.types.is_nested(kind) or pa.types.is_null(kind):
                raise SchemaError(
                    f"Column {name!r} holds {kind}, which cannot be a key: name a column of numbers, text or dates.",
                    column=name,
                )
        self._digests = [tuple(hashlib.blake2b() for _ in range(3)) for _ in self._key]

    def add(self, batch: pa.RecordBatch) -> None:
        """Take the rows of the next batch."""
        for name, (valid, lengths, values) in zip(self._key, self._digests, strict=True):
            array = batch.column(batch.schema.get_field_index(name))
            if pa.types.is_dictionary(array.type):
                array = array.dictionary_decode()
            valid.update(_bytes(pc.is_valid(array).cast(pa.uint8())))
            present = array.drop_null()
            if _is_variable(present.type):
                present = present.cast(pa.large_binary())
                lengths.update(_bytes(pc.binary_length(present)))
                if len(present):
                    values.update(_content(present))
            elif pa.types.is_boolean(present.type):
                values.update(_bytes(present.cast(pa.uint8())))
            else:
                values.update(_bytes(present))

    def hexdigest(self) -> str:
        """Return the hash of all rows so far."""
        total = hashlib.blake2b()
        for digests in self._digests:
            for digest in digests:
                total.update(digest.digest())
        return total.hexdigest()


def _is_variable(kind: pa.DataType) -> bool:
    types = pa.types
    text = types.is_string(kind) or types.is_large_string(kind) or types.is_string_view(kind)
    return bool(text or types.is_binary(kind) or types.is_large_binary(kind) or str(kind) == "binary_view")


def _bytes(array: pa.Array) -> Any:
    """The fixed-width values of an array without nulls, as they lie in memory."""
    width = array.type.bit_width // 8
    buffer = array.buffers()[1]
    if buffer is None or len(array) == 0:
        return b""
    return memoryview(buffer)[array.offset * width : (array.offset + len(array)) * width]


def _content(array: pa.LargeBinaryArray) -> Any:
    """The joined bytes of a binary array without nulls."""
    _, offsets, data = array.buffers()
    if data is None:
        return b""
    view = memoryview(offsets).cast("q")
    return memoryview(data)[view[array.offset] : view[array.offset + len(array)]]
