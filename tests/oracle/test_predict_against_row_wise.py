"""What `predict` writes against the mixture's own row-wise numbers, by every way in which rows can be given."""

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import datasets
import drumlin
import reference
from tools import assert_close, mixture_of


@pytest.fixture(scope="module")
def case():
    rows = datasets.hills(7_001, components=4, columns=3, seed=41)
    labels = (np.argsort(np.argsort(rows[:, 0])) * 4 // len(rows)).astype(int)
    return rows, mixture_of(reference.partition_start(rows, labels))


def test_added_columns(case, route):
    rows, mixture = case
    given = route({f"x{j}": np.ascontiguousarray(rows[:, j]) for j in range(3)})
    result = drumlin.predict(given, mixture).read_all()
    added = ["component", "responsibility", "runner_up", "log_density"]
    assert [name for name in result.schema.names if name != "part"] == ["x0", "x1", "x2", *added]
    kinds = [pa.int32(), pa.float32(), pa.int32(), pa.float64()]
    assert [result.schema.field(name).type for name in added] == kinds
    responsibilities = mixture.responsibilities(rows)
    order = np.argsort(-responsibilities, axis=1, kind="stable")
    assert np.array_equal(result["component"].to_numpy(), order[:, 0])
    best = np.take_along_axis(responsibilities, order[:, :1], axis=1)[:, 0]
    assert np.array_equal(result["responsibility"].to_numpy(), best.astype(np.float32))
    assert np.array_equal(result["log_density"].to_numpy(), mixture.log_density(rows))
    # A second place is told only where it is more than nothing.
    second = np.take_along_axis(responsibilities, order[:, 1:2], axis=1)[:, 0]
    told = second > 0.0
    assert told.sum() > 1000
    assert np.array_equal(result["runner_up"].to_numpy(zero_copy_only=False)[told], order[told, 1])


def test_all_responsibilities(case):
    rows, mixture = case
    result = drumlin.predict(rows, mixture, outputs=["responsibilities"]).read_all()
    listed = result["responsibilities"].combine_chunks()
    assert listed.type == pa.list_(pa.float32(), 4)
    got = listed.flatten().to_numpy().reshape(-1, 4)
    assert np.array_equal(got, mixture.responsibilities(rows).astype(np.float32))


def test_ids_stand_for_components_whatever_their_place(case):
    rows, mixture = case
    other = drumlin.Mixture(mixture.weights, mixture.means, mixture.covariances, mixture.columns, ids=[7, 3, 11, 0])
    one = drumlin.predict(rows, mixture).read_all()["component"].to_numpy()
    two = drumlin.predict(rows, other).read_all()["component"].to_numpy()
    assert np.array_equal(np.array([7, 3, 11, 0])[one], two)
    assert np.array_equal(other.assign(rows), two)


def test_parquet_to_parquet_keeps_rows_keys_and_other_columns(case, tmp_path):
    rows, mixture = case
    random = np.random.default_rng(0)
    table = pa.table(
        {
            "parcel": pa.array([f"P{number:07d}" for number in random.permutation(len(rows))]),
            "x2": rows[:, 2],
            "note": pa.array([None if i % 7 == 0 else "ok" for i in range(len(rows))]),
            "x0": rows[:, 0],
            "x1": rows[:, 1],
        }
    ).replace_schema_metadata({"owner": "depot"})
    pq.write_table(table, tmp_path / "rows.parquet", row_group_size=1_000, compression="zstd")
    drumlin.predict(str(tmp_path / "rows.parquet"), mixture, str(tmp_path / "out.parquet"), key="parcel")
    file = pq.ParquetFile(tmp_path / "out.parquet")
    assert file.metadata.num_row_groups == 8 and file.metadata.row_group(0).column(0).compression == "ZSTD"
    result = file.read()
    assert result.schema.metadata[b"owner"] == b"depot"
    assert result.select(table.schema.names).equals(table)
    assert np.array_equal(result["log_density"].to_numpy(), mixture.log_density(rows))
    file.close()


def test_where_leaves_rows_out_and_carry_leaves_columns_out(case):
    rows, mixture = case
    table = pa.table({f"x{j}": rows[:, j] for j in range(3)} | {"id": np.arange(len(rows)), "other": rows[:, 0]})
    result = drumlin.predict(table, mixture, where="x0 > 0", carry=[], key="id").read_all()
    kept = rows[:, 0] > 0.0
    assert result.schema.names == ["id", "component", "responsibility", "runner_up", "log_density"]
    assert np.array_equal(result["id"].to_numpy(), np.flatnonzero(kept))
    assert np.array_equal(result["log_density"].to_numpy(), mixture.log_density(rows)[kept])


def test_held_out_rows_judge_the_mixture_that_never_saw_them():
    rows = datasets.hills(6_000, components=3, columns=2, seed=8)
    out = np.arange(len(rows)) % 3 == 0
    table = pa.table({"a": rows[:, 0], "b": rows[:, 1], "out": out})
    options = {"columns": ["a", "b"], "pass_limit": 10, "tolerance": 0.0}
    held = drumlin.fit(table, 3, hold_out="out", **options)
    without = drumlin.fit(table, 3, where="not out", **options)
    assert held.mixture == without.mixture and held.log_likelihood == without.log_likelihood
    assert held.rows == 4_000 and held.figures.held_rows == 2_000
    assert_close(held.held_log_likelihood, held.log_density(rows[out]).mean(), 1e-12)


def test_a_held_out_share_goes_by_the_key():
    rows = datasets.hills(6_000, components=3, columns=2, seed=8)
    key = np.arange(len(rows)) * 31 + 5
    order = np.random.default_rng(2).permutation(len(rows))
    figures = [
        drumlin.fit(
            pa.table({"a": rows[which, 0], "b": rows[which, 1], "id": key[which]}),
            1,
            columns=["a", "b"],
            key="id",
            hold_out=0.25,
        ).figures
        for which in (np.arange(len(rows)), order)
    ]
    assert figures[0].held_rows == figures[1].held_rows == 6_000 - figures[0].rows
    assert abs(figures[0].held_rows - 1_500) < 5.0 * np.sqrt(6_000 * 0.25 * 0.75)
    assert_close(figures[1].held_log_likelihood, figures[0].held_log_likelihood, 1e-12)


@pytest.mark.parametrize(
    "kind",
    [
        pa.int8(),
        pa.int16(),
        pa.int32(),
        pa.int64(),
        pa.uint8(),
        pa.uint16(),
        pa.uint32(),
        pa.uint64(),
        pa.float16(),
        pa.float32(),
        pa.float64(),
        pa.decimal128(10, 2),
        pa.bool_(),
    ],
    ids=str,
)
def test_every_numeric_type_is_widened_exactly(kind):
    random = np.random.default_rng(1)
    values = random.integers(0, 2 if kind == pa.bool_() else 100, 500)
    if pa.types.is_decimal(kind):
        import decimal

        column = pa.array([decimal.Decimal(int(value)) / 4 for value in values], kind)
        wide = values / 4.0
    else:
        column = pa.array(values.astype(bool) if kind == pa.bool_() else values.astype(kind.to_pandas_dtype()), kind)
        wide = values.astype(float)
    model = drumlin.fit(pa.table({"a": column}), 1, columns=["a"])
    want = drumlin.fit(pa.table({"a": wide}), 1, columns=["a"])
    assert model.mixture == want.mixture and model.log_likelihood == want.log_likelihood


def test_the_largest_number_of_components():
    from drumlin import _core

    k = _core.MOST_COMPONENTS
    assert k == 65_535
    means, variances = np.linspace(-1.0, 1.0, k), np.full((k, 1, 1), 1e-4)
    mixture = drumlin.Mixture(np.full(k, 1.0 / k), means[:, None], variances)
    rows = np.array([[0.0], [0.5], [3.0]])
    theta = reference.Theta(np.full(k, 1.0 / k), means[:, None], variances)
    terms = -0.5 * (rows - theta.means.T) ** 2 / 1e-4 - 0.5 * np.log(2e-4 * np.pi) - np.log(k)
    best = terms.max(axis=1)
    want = best + np.log(np.exp(terms - best[:, None]).sum(axis=1))
    assert_close(mixture.log_density(rows), want, 1e-12, np.maximum(np.abs(want), 1.0))
    with pytest.raises(drumlin.DrumlinError, match="65,?535"):
        drumlin.Mixture(np.full(k + 1, 1.0 / (k + 1)), np.zeros((k + 1, 1)), np.ones((k + 1, 1, 1)))
