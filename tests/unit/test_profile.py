"""The column profile: what it counts, what it finds, and the line to paste."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin.judging.codes import Extreme, looks_like_code, suspected_codes
from drumlin.judging.looking import Look, footer_nulls
from drumlin.judging.profile import Profile, profile
from drumlin.options import signature_problems

ROWS = 5000


def depot(rows: int = ROWS, **columns: object) -> pa.Table:
    random = np.random.default_rng(5)
    base: dict[str, object] = {
        "length_cm": random.normal(30.0, 5.0, rows),
        "weight_kg": random.normal(2.0, 0.4, rows).astype(np.float32),
    }
    return pa.table({**base, **columns})


def look_at(table: object, **options: object) -> Profile:
    return profile(table, progress=False, **options)  # type: ignore[arg-type]


def test_the_signature_is_the_defined_one() -> None:
    assert signature_problems(profile, "profile") == []
    assert drumlin.profile is profile


def test_clean_columns_are_suggested_without_a_word() -> None:
    found = look_at(depot())
    assert found.suggested_columns == ("length_cm", "weight_kg")
    assert found.suggested_codes == {} and found.suggested_missing is None
    assert found.rows == found.kept == ROWS and found.complete_share == 1.0
    assert [one.finding for one in found.columns] == ["", ""]
    one = found.column("length_cm")
    values = depot().column("length_cm").to_numpy()
    assert (one.least, one.most) == (values.min(), values.max())
    assert one.quantiles["0.5"] == pytest.approx(np.median(values), abs=1e-9)
    assert str(found).endswith('columns=["length_cm", "weight_kg"]\n  --columns length_cm,weight_kg')


def test_a_planted_code_is_caught_counted_and_proposed() -> None:
    dwell = np.random.default_rng(1).normal(1.2, 0.3, ROWS)
    dwell[::500] = -9999.0
    found = look_at(depot(dwell_s=dwell))
    one = found.columns[0]
    assert one.name == "dwell_s" and one.suggested
    assert [(code.value, code.count, code.exact) for code in one.suspected_codes] == [(-9999.0, 10, True)]
    assert one.least == -9999.0 and one.quantiles["0"] > 0.0
    assert found.suggested_codes == {"dwell_s": (-9999.0,)} and found.suggested_missing == "complete-rows"
    assert found.complete_share == pytest.approx(1 - 10 / ROWS)
    assert 'missing_codes={"dwell_s": [-9999]}, missing="complete-rows"' in found.options_line
    assert "--missing-codes dwell_s=-9999 --missing complete-rows" in found.flags_line
    assert "10 rows are exactly -9999" in one.finding


def test_a_declared_code_counts_as_a_gap_and_is_no_longer_suspected() -> None:
    dwell = np.random.default_rng(1).normal(1.2, 0.3, ROWS)
    dwell[:7] = -9999.0
    one = look_at(depot(dwell_s=dwell), missing_codes={"*": [-9999]}).column("dwell_s")
    assert (one.declared_codes, one.gaps, one.suspected_codes) == (7, 7, ())
    assert one.least is not None and one.least > 0


def test_several_codes_and_a_wild_value_in_one_column() -> None:
    values = np.random.default_rng(2).normal(20.0, 2.0, ROWS)
    values[:100], values[100:150], values[150] = -9999.0, 999.0, -1e7
    found = {code.value: code.count for code in look_at(depot(t=values)).column("t").suspected_codes}
    assert found == {-9999.0: 100, 999.0: 50}


@pytest.mark.parametrize(
    ("values", "codes"),
    [
        (np.r_[np.linspace(0, 98, 500), np.full(20, 99.0)], []),  # an age of 99 is no code
        (np.r_[np.linspace(24, 26, 500), np.zeros(30)], [0.0]),  # zeros far below everything else
        (np.exp(np.random.default_rng(3).normal(0, 2, 2000)), []),  # a long tail is no code
        (np.r_[np.linspace(0, 1, 500), 1e6], []),  # one wild value is no code
        (np.r_[np.linspace(0, 1, 500), 99999.0], [99999.0]),  # one usual code is
        (np.full(50, -9999.0), []),  # a constant is a constant
        (np.array([]), []),
    ],
)
def test_what_counts_as_a_code(values: np.ndarray, codes: list[float]) -> None:
    if len(values) == 0:
        assert suspected_codes(values, Extreme(0.0, 0), Extreme(0.0, 0), 0) == []
        return
    least = Extreme(float(values.min()), int((values == values.min()).sum()))
    most = Extreme(float(values.max()), int((values == values.max()).sum()))
    assert [code.value for code in suspected_codes(values, least, most, len(values))] == codes


def test_usual_codes_are_known_by_their_look() -> None:
    assert all(map(looks_like_code, (-999.0, 99.99, 32767.0, -(2.0**31), float(np.finfo(np.float32).max))))
    assert not any(map(looks_like_code, (9.0, 989.0, 0.0, float("nan"), float("inf"))))


def test_gaps_of_all_kinds_are_counted_apart() -> None:
    values = pa.array([1.0, None, float("nan"), float("inf"), *np.linspace(0, 9, 96)])
    text = pa.array(["a", None] * 50)
    found = look_at(pa.table({"x": values, "label": text, "y": np.random.default_rng(1).normal(size=100)}))
    one = found.column("x")
    assert (one.nulls, one.nans, one.infinite, one.gaps) == (1, 1, 1, 2)
    assert not one.suggested and 'where="abs(x) < 1e300"' in one.finding
    assert found.column("label").nulls == 50
    assert "Text" in found.column("label").finding
    assert found.suggested_columns == ("y",)


def test_gappy_columns_ask_for_complete_rows_and_empty_ones_are_left_out() -> None:
    some = np.random.default_rng(1).normal(size=ROWS)
    some[:50] = np.nan
    most = some.copy()
    most[: ROWS * 3 // 4] = np.nan
    found = look_at(depot(some=some, most=most, none=pa.nulls(ROWS, pa.float64()), nulls=pa.nulls(ROWS)))
    assert found.suggested_columns == ("length_cm", "weight_kg", "some")
    assert found.suggested_missing == "complete-rows"
    assert found.column("some").finding == "50 rows have gaps (1 %)."
    assert found.column("most").finding.startswith("75 % of rows have gaps")
    assert found.column("none").finding == "Holds no finite value at all: left out."
    assert found.column("nulls").nulls == ROWS


def test_what_cannot_tell_rows_apart_is_left_out() -> None:
    random = np.random.default_rng(8)
    length = random.normal(30.0, 5.0, ROWS)
    found = look_at(
        pa.table(
            {
                "length_cm": length,
                "length_in": length / 2.54,
                "belt": np.full(ROWS, 7.5),
                "parcel": np.arange(ROWS) * 7 + 4_200_000_000,
                "scanner_id": random.integers(0, 1000, ROWS),
                "grade": random.integers(1, 4, ROWS),
                "bonus": np.where(random.random(ROWS) < 0.8, 0.0, random.normal(5, 1, ROWS)),
                "tip": np.where(random.random(ROWS) < 0.3, 0.0, random.normal(5, 1, ROWS)),
                "fragile": random.random(ROWS) < 0.5,
                "day": pa.array(np.full(ROWS, "2026-09-01", dtype="datetime64[D]")),
                "component": random.integers(0, 50, ROWS),
            }
        )
    )
    assert found.suggested_columns == ("length_cm", "tip")
    assert found.column("length_in").near_copy_of == "length_cm"
    assert found.column("belt").constant and "Always 7.5" in found.column("belt").finding
    assert found.column("parcel").id_like and "key" in found.column("parcel").finding
    assert "Named like an identifier" in found.column("scanner_id").finding
    assert "Only 3 different values" in found.column("grade").finding
    assert found.column("bonus").repeated[0][0] == 0.0 and " % of rows are exactly 0" in found.column("bonus").finding
    assert " % of rows are exactly 0" in found.column("tip").finding
    assert "Written by an earlier predict" in found.column("component").finding
    effects = [one.effect for one in found.columns]
    assert effects == sorted(effects, reverse=True)


def test_two_columns_with_the_same_code_are_no_copies() -> None:
    random = np.random.default_rng(4)
    first, second = random.normal(size=ROWS), random.normal(size=ROWS)
    first[:100] = second[:100] = -9999.0
    found = look_at(pa.table({"a": first, "b": second}))
    assert found.column("b").near_copy_of is None and found.suggested_columns == ("a", "b")


def test_float32_that_cannot_hold_its_spread_is_told() -> None:
    values = (1e7 + np.random.default_rng(1).normal(0, 1, ROWS)).astype(np.float32)
    one = look_at(pa.table({"x": values})).column("x")
    assert one.suggested and "float32" in one.finding


def test_where_key_and_row_weight() -> None:
    table = depot(count=np.arange(ROWS) % 60 + 1, parcel=np.arange(ROWS), half=np.arange(ROWS) % 2)
    found = look_at(table, where="half == 1", key="parcel", row_weight="count")
    assert (found.rows, found.kept) == (ROWS, ROWS // 2)
    assert found.suggested_columns == ("length_cm", "weight_kg")
    assert "key" in found.column("parcel").finding and "row weight" in found.column("count").finding
    assert found.column("half").least == found.column("half").most == 1.0


def test_columns_narrow_the_look_and_missing_ones_are_named() -> None:
    assert [one.name for one in look_at(depot(), columns=["weight_kg"]).columns] == ["weight_kg"]
    with pytest.raises(drumlin.SchemaError, match="length_cm"):
        look_at(depot(), columns=["lenght_cm"])


def test_tables_without_numbers_and_without_rows() -> None:
    found = look_at(pa.table({"scanner": ["A1", "B2"], "note": pa.array([None, "x"])}))
    assert found.rows == 2 and found.suggested_columns == () and found.column("note").nulls == 1
    assert "No column is fit" in str(found)
    empty = look_at(depot().slice(0, 0))
    assert empty.rows == 0 and empty.suggested_columns == ()


def test_dictionaries_decimals_and_views_are_read() -> None:
    table = pa.table(
        {
            "kind": pa.array(["a", "b", None] * 40).dictionary_encode(),
            "price": pa.array([1, 2, None] * 40).cast(pa.decimal128(21, 2)),
            "list": pa.array([[1], None, [2]] * 40),
        }
    )
    found = look_at(table)
    assert found.column("kind").nulls == found.column("list").nulls == found.column("price").nulls == 40


def test_files_tables_and_one_shot_streams_give_the_same_profile(tmp_path: Path) -> None:
    values = np.random.default_rng(1).normal(size=ROWS)
    values[::50] = -9999.0
    table = depot(t=values, label=pa.array(["x", None] * (ROWS // 2)))
    pq.write_table(table.slice(0, 1300), tmp_path / "part-2.parquet", row_group_size=300)
    pq.write_table(table.slice(1300), tmp_path / "part-10.parquet")
    whole = look_at(table)
    files = look_at(str(tmp_path))
    stream = look_at(pa.RecordBatchReader.from_batches(table.schema, table.to_batches(max_chunksize=777)))
    assert whole.columns == files.columns == stream.columns
    assert look_at(str(tmp_path), threads=1).columns == whole.columns


def test_to_dict_is_plain_json() -> None:
    values = np.random.default_rng(1).normal(size=ROWS)
    values[0] = -9999.0
    text = json.dumps(look_at(depot(t=values)).to_dict(), allow_nan=False)
    back = json.loads(text)
    assert back["suggested_codes"] == {"t": [-9999.0]} and back["columns"][0]["gaps"] == 0


def test_the_notebook_table_escapes_names() -> None:
    found = look_at(pa.table({"<b>": np.random.default_rng(1).normal(size=100)}))
    shown = found._repr_html_()
    assert "&lt;b&gt;" in shown and "<b>" not in shown and repr(found) == str(found)


def test_the_sample_does_not_depend_on_the_cut() -> None:
    table = depot(rows=20_000)
    samples = []
    for cut in (317, 4096, 20_000):
        look = Look(["length_cm", "weight_kg"], [], 1000, seed=3)
        row = 0
        for batch in table.to_batches(max_chunksize=cut):
            look.add(row, batch)
            row += batch.num_rows
        samples.append(look.values)
    assert 1000 < len(samples[0]) <= 2000
    assert all(np.array_equal(samples[0], other) for other in samples[1:])
    assert samples[0][:, 0].mean() == pytest.approx(30.0, abs=1.0)


def test_footers_tell_nulls_only_when_every_footer_does(tmp_path: Path) -> None:
    table = pa.table({"a": pa.array(["x", None, "y"]), "b": pa.array([[1], None, [2]])})
    pq.write_table(table, tmp_path / "1.parquet")
    pq.write_table(table, tmp_path / "2.parquet", write_statistics=["b.list.element"])
    first, second = str(tmp_path / "1.parquet"), str(tmp_path / "2.parquet")
    assert footer_nulls([first], ["a", "b"]) == {"a": 1}
    assert footer_nulls([first, second], ["a", "b"]) == {}
    assert footer_nulls([], ["a"]) == {}


def test_a_wrong_option_is_refused_before_the_rows_are_touched() -> None:
    with pytest.raises(drumlin.OptionError, match="seed"):
        look_at("nowhere.parquet", seed=-1)
    with pytest.raises(drumlin.OptionError, match="columns"):
        look_at("nowhere.parquet", column=["a"])
