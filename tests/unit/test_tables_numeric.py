"""Which columns can be fitted."""

from __future__ import annotations

import datetime
from decimal import Decimal

import pyarrow as pa
import pytest

from drumlin.errors import SchemaError
from drumlin.tables.numeric import check_features, decoded_width, is_feature, plain, suggest_columns

SCHEMA = pa.schema(
    {
        "parcel": pa.string(),
        "parcel_id": pa.int64(),
        "scannerId": pa.int32(),
        "length_cm": pa.float64(),
        "width_cm": pa.float32(),
        "price": pa.decimal128(9, 2),
        "count": pa.int16(),
        "fragile": pa.bool_(),
        "day": pa.date32(),
        "at": pa.timestamp("us"),
        "corners": pa.list_(pa.float64()),
        "kind": pa.dictionary(pa.int8(), pa.string()),
        "nothing": pa.null(),
        "component": pa.int32(),
    }
)


def test_numbers_and_booleans_can_be_fitted() -> None:
    fit = [field.name for field in SCHEMA if is_feature(field.type)]
    assert fit == [
        "parcel_id", "scannerId", "length_cm", "width_cm", "price", "count", "fragile", "component",
    ]  # fmt: skip
    check_features(SCHEMA, fit)


def test_suggestions_leave_out_what_is_no_measurement() -> None:
    assert suggest_columns(SCHEMA, ["count"]) == ["length_cm", "width_cm", "price"]
    assert suggest_columns(pa.schema({"humid": pa.int64(), "android_version": pa.int8()})) == [
        "humid",
        "android_version",
    ]


@pytest.mark.parametrize(
    ("columns", "text"),
    [
        (["parcel"], "'parcel' holds text.*leave 'parcel' out.*key=.*encode it as numbers"),
        (["length_cm", "day", "corners"], r"'day' holds dates or times \(date32.*'corners' holds lists.*hours since"),
        (["corners"], "make a column of each number"),
        (["kind"], r"'kind' holds text \(dictionary"),
        (["nothing"], "nothing but nulls"),
        (["lenght_cm"], "no column 'lenght_cm'. Did you mean 'length_cm'"),
        (["length_cm", "length_cm"], "named twice"),
    ],
)
def test_the_rest_is_refused_by_name_with_advice(columns: list[str], text: str) -> None:
    with pytest.raises(SchemaError, match=text):
        check_features(SCHEMA, columns)


def test_width_is_that_of_decoded_rows() -> None:
    assert decoded_width(SCHEMA, ["length_cm", "width_cm", "count", "price"]) == 28


def test_encodings_are_undone_and_the_rest_is_not_copied() -> None:
    day = datetime.date(2026, 3, 1)
    batch = pa.record_batch(
        {
            "kind": pa.array(["bag", None]).dictionary_encode(),
            "name": pa.array(["a", None], pa.string_view()),
            "raw": pa.array([b"a", None], pa.binary_view()),
            "price": pa.array([Decimal("1.5"), None], pa.decimal32(5, 2)),
            "x": pa.array([1.0, 2.0]),
            "day": pa.array([day, day]),
        }
    )
    got = plain(batch)
    assert [str(type_) for type_ in got.schema.types] == [
        "string", "large_string", "large_binary", "double", "double", "date32[day]",
    ]  # fmt: skip
    assert got.to_pydict() == {**batch.to_pydict(), "price": [1.5, None]}
    assert got["x"].buffers()[1].address == batch["x"].buffers()[1].address
    rest = batch.select(["x", "day"])
    assert plain(rest) is rest
