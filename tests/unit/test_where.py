"""Row filters as text."""

from __future__ import annotations

import datetime
import decimal

import pyarrow as pa
import pyarrow.compute as pc
import pytest
from hypothesis import given
from hypothesis import strategies as st

from drumlin.errors import DataError, OptionError
from drumlin.tables import KEEP, open_table
from drumlin.tables.where import as_expression, parse_where, referenced

ROWS = pa.table(
    {
        "weight_kg": [0.5, 2.0, None, float("nan"), 7.0],
        "count": pa.array([1, 2, 3, 4, 5], pa.int32()),
        "scanner": ["A1", "B2", "it's", None, 'q"t'],
        "day": [datetime.date(2026, 2, day) for day in range(26, 29)] + [datetime.date(2026, 3, day) for day in (1, 2)],
        "at": pa.array([datetime.datetime(2026, 3, 1, hour) for hour in range(5)], pa.timestamp("us")),
        "belt speed": [1.0, 1.5, 2.0, 2.5, 3.0],
        "fragile": [True, False, True, None, False],
        "kind": pa.array(["bag", "box", None, "bag", "tube"]).dictionary_encode(),
        "label": pa.array(["a", "b", "c", None, "it's"], pa.string_view()),
        "there": pa.array([datetime.datetime(2026, 3, 1, h) for h in range(5)], pa.timestamp("us", "Europe/Helsinki")),
        "clock": pa.array([0, 3600, 7200, None, 9000], pa.time32("s")),
        "price": pa.array([decimal.Decimal("1.50"), None, decimal.Decimal(3), decimal.Decimal(4), None]),
        "narrow": pa.array([0.1, 0.2, 0.3, 0.4, None], pa.float32()),
        "long": pa.array([1, 2, 2**63, 2**64 - 1, None], pa.uint64()),
        "wide": pa.array([1, 2, 2**30 + 1, 2**60 + 1, None]),
        "class": [1, 2, 3, 4, 5],
        "µg": [1, 2, 3, 4, 5],
    }
)


def kept(text: str) -> list[int]:
    """Counts (1 to 5) of the rows that the text keeps."""
    batches = [batch for _, batch in open_table(ROWS, where=text).scan(["count"])]
    rows = pa.Table.from_batches(batches)
    return [n for n, keep in zip(rows["count"].to_pylist(), rows[KEEP].to_pylist(), strict=True) if keep]


@pytest.mark.parametrize(
    ("text", "want"),
    [
        ("count > 3", [4, 5]),
        ("count>=2 and count<4", [2, 3]),
        ("2 <= count < 4", [2, 3]),
        ("3 < count", [4, 5]),
        ("count == 1 or count == 5", [1, 5]),
        ("count = 1 OR count = 5", [1, 5]),
        ("count <> 1 AND NOT count = 5", [2, 3, 4]),
        ("not (count < 3 or count > 4)", [3, 4]),
        ("count in (1, 3)", [1, 3]),
        ("count not in [1, 3]", [2, 4, 5]),
        ("count in (2)", [2]),
        ("count > -1", [1, 2, 3, 4, 5]),
        ("-count > -2", [1]),
        ("count * 2 + 1 > 7 and count / 2 < 2.5", [4]),
        ("weight_kg > 1", [2, 5]),
        ("weight_kg is null", [3]),
        ("weight_kg IS NOT NULL", [1, 2, 4, 5]),
        ("weight_kg is not None", [1, 2, 4, 5]),
        ("is_nan(weight_kg)", [4]),
        ("is_null(scanner)", [4]),
        ("abs(count - 3) < 1", [3]),
        ("scanner == 'B2'", [2]),
        ('scanner == "it\'s"', [3]),
        ("scanner == 'it\\'s'", [3]),
        ("scanner != 'A1'", [2, 3, 5]),
        ("scanner in ('A1', 'B2')", [1, 2]),
        ("scanner == 'not = and is null'", []),
        ("`belt speed` >= 2.5", [4, 5]),
        ("day >= '2026-03-01'", [4, 5]),
        ("'2026-03-01' == day", [4]),
        ("day in ('2026-02-26', '2026-03-02')", [1, 5]),
        ("at < '2026-03-01 02:00'", [1, 2]),
        ("fragile", [1, 3]),
        ("not fragile and count < 9", [2, 5]),
        ("fragile == true", [1, 3]),
        ("  count\n  == 2 ", [2]),
        # a null is neither equal nor unequal, in nor not in
        ("scanner not in ('A1')", [2, 3, 5]),
        ("not (scanner in ('A1') or scanner == 'B2')", [3, 5]),
        ("not scanner == 'A1'", [2, 3, 5]),
        ("scanner not in ('A1') or scanner is null", [2, 3, 4, 5]),
        ("fragile == TRUE and not fragile is null", [1, 3]),
        ("not (not count > 3)", [4, 5]),
        ("count = 1 or count = 2 and not weight_kg = 2", [1]),
        ("(count = 1 or count = 2) and not weight_kg = 2", [1]),
        ("scanner == 'it''s' or scanner == \"q\"\"t\"", [3, 5]),
        ("scanner == '' or scanner in ('', 'B2')", [2]),
        ("scanner == 'A''1' or scanner == 'and'", []),
        ("kind in ('bag', 'none')", [1, 4]),
        ("kind != 'bag'", [2, 5]),
        ("label in ('a', 'it''s')", [1, 5]),
        ("label >= 'b'", [2, 3, 5]),
        ("there < '2026-03-01 04:00'", [1, 2]),  # two hours ahead of the universal time that is stored
        ("there < '2026-03-01 04:00Z'", [1, 2, 3, 4]),
        ("there < '2026-03-01 02:00+01:00'", [1]),
        ("there >= '2026-03-02'", []),
        ("there in ('2026-03-01 03:00', '2026-03-01 05:00')", [2, 4]),
        ("clock > '01:00'", [3, 5]),
        ("price > 1.5", [3, 4]),
        ("price in (1.5, 4)", [1, 4]),
        ("narrow == 0.1 or narrow in (0.3)", [1, 3]),
        ("narrow <= 0.2", [1, 2]),
        ("long > 9223372036854775807", [3, 4]),
        ("long == 18446744073709551615", [4]),
        ("long > -1", [1, 2, 3, 4]),
        ("long > 1.5", [2, 3, 4]),
        ("wide > 1.5 and wide > narrow", [2, 3, 4]),
        ("wide / 2 >= 1 and 0.5 * wide < 9", [2]),
        ("wide - 0.5 > count", [3, 4]),
        ("count < 99999999999999999999", [1, 2, 3, 4, 5]),
        ("`class` > 4 or µg == 2", [2, 5]),
    ],
)
def test_text_keeps_the_right_rows(text: str, want: list[int]) -> None:
    assert kept(text) == want


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "the text is empty"),
        ("count >", "cannot be understood"),
        ("count > 3; import os", "cannot be understood"),
        ("__import__('os')", "knows no function '__import__'"),
        ("count.real > 1", r"cannot hold 'count\.real'"),
        ("[c for c in count]", "cannot hold"),
        ("(lambda: 1)()", "cannot hold"),
        ("count ** 2 > 1", "cannot hold"),
        ("3 > 2", "neither is a column"),
        ("3", "does not mention a column"),
        ("coutn > 2", "knows no column 'coutn'. Did you mean 'count'"),
        ("scanner == B2", "knows no column 'B2'.*quotes"),
        ("day > 'soon'", "'soon' cannot be read as date32"),
        ("count is 3", "goes only with null"),
        ("3 in count", "takes a column at its left"),
        ("count in ()", "takes a column at its left"),
        ("count in (1, 'a')", "do not fit together"),
        ("count in ('a', 'b')", "do not fit together"),
        ("count in ('1')", "text, but the column holds int32"),
        ("class > 2", "stands in back-ticks"),
        ("clock > 'noon'", "cannot be read as time32.*write 06:30"),
        ("there > 'soon'", "cannot be read as timestamp"),
        ("-'a' > count", "not a number"),
        ("count + 1", "not true or false"),
        ("scanner > 3", "does not fit the columns"),
        ("scanner and count", "does not fit the columns"),
    ],
)
def test_text_that_cannot_be_used_is_refused(text: str, message: str) -> None:
    with pytest.raises(OptionError, match=message) as caught:
        open_table(ROWS, where=text)
    assert "where: " in str(caught.value) and caught.value.facts["option"] == "where"


def test_expressions_go_in_as_they_are() -> None:
    assert kept(pc.field("count") > 3) == [4, 5]  # type: ignore[arg-type]
    with pytest.raises(OptionError, match="found int"):
        as_expression(3, ROWS.schema)
    with pytest.raises(Exception, match="has no column 'nix'"):
        open_table(ROWS, where=pc.field("nix") > 3)


def test_a_condition_that_fails_at_some_value_is_named() -> None:
    with pytest.raises(DataError, match=r"The condition \(wide > 1\.5\) cannot be computed for some rows"):
        kept(pc.field("wide") > 1.5)  # type: ignore[arg-type]


def test_only_columns_that_are_used_are_read() -> None:
    assert referenced(ROWS.schema, parse_where("`belt speed` > 1 and day > '2026-01-01'", ROWS.schema)) == [
        "day",
        "belt speed",
    ]


@given(st.text(max_size=40))
def test_any_text_is_an_expression_or_an_option_error(text: str) -> None:
    try:
        parse_where(text, ROWS.schema)
    except OptionError:
        pass
