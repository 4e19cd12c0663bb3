"""One schema for many files."""

from __future__ import annotations

import pyarrow as pa
import pytest

from drumlin.tables.schemas import join_schemas, widen

PAIRS = [
    (pa.int8(), pa.int32(), pa.int32()),
    (pa.uint8(), pa.uint16(), pa.uint16()),
    (pa.uint8(), pa.int8(), pa.int16()),
    (pa.uint32(), pa.int32(), pa.int64()),
    (pa.uint64(), pa.int64(), None),
    (pa.int64(), pa.float32(), pa.float64()),
    (pa.float16(), pa.float32(), pa.float32()),
    (pa.decimal128(10, 2), pa.int32(), pa.float64()),
    (pa.decimal128(10, 2), pa.decimal128(12, 3), pa.float64()),
    (pa.null(), pa.string(), pa.string()),
    (pa.string(), pa.large_string(), pa.large_string()),
    (pa.dictionary(pa.int8(), pa.string()), pa.string(), pa.string()),
    (pa.binary(), pa.binary_view(), pa.large_binary()),
    (pa.timestamp("s"), pa.timestamp("us"), pa.timestamp("us")),
    (pa.timestamp("s", "UTC"), pa.timestamp("s"), None),
    (pa.bool_(), pa.int8(), None),
    (pa.string(), pa.float64(), None),
    (pa.date32(), pa.string(), None),
]


@pytest.mark.parametrize(("a", "b", "joint"), PAIRS, ids=lambda type_: str(type_))
def test_types_widen_the_same_way_round(a: pa.DataType, b: pa.DataType, joint: pa.DataType | None) -> None:
    assert widen(a, b) == joint and widen(b, a) == joint and widen(a, a) == a


def test_columns_keep_the_order_of_their_first_file() -> None:
    first, second = pa.schema({"b": pa.int8(), "a": pa.int8()}), pa.schema({"a": pa.int16(), "b": pa.int8()})
    joint = join_schemas([first, second], ["1", "2"], [2, 1])
    assert joint.schema == pa.schema({"b": pa.int8(), "a": pa.int16()})
    assert joint.notes == ["Column 'a' is int8 in 1 and int16 in 2; it is read as int16."] and not joint.left_out


def test_lacking_columns_are_counted() -> None:
    whole, part = pa.schema({"a": pa.int8(), "b": pa.int8()}), pa.schema({"a": pa.int8()})
    joint = join_schemas([part, whole], ["1", "2"], [2, 1])
    assert joint.schema.names == ["a", "b"] and set(joint.left_out) == {"b"}
    assert joint.left_out["b"].startswith("2 has it, but 1 does not (2 of 3 files lack it)")
    assert joint.notes == ["Column 'b' is null in the rows of 1, which lacks it (2 of 3 files lack it)."]


def test_types_that_do_not_go_together_are_left_out() -> None:
    joint = join_schemas([pa.schema({"a": pa.int8()}), pa.schema({"a": pa.string()}), pa.schema({})], ["1", "2", "3"])
    assert joint.schema.names == [] and "int8 in 1 but string in 2" in joint.left_out["a"]
    assert len(joint.notes) == 1 and "cannot be used" in joint.notes[0]
