"""Polars and DuckDB compute what `predict` writes: far tails, gaps, codes and odd names included."""

import datetime
import decimal
from collections.abc import Callable

import duckdb
import numpy as np
import polars as pl
import pyarrow as pa
import pytest

import drumlin

ADDED = ["component", "responsibility", "runner_up", "log_density"]
Engine = Callable[[pa.Table, drumlin.Mixture | drumlin.Model], pa.Table]


def eager(rows: pa.Table, model: drumlin.Mixture | drumlin.Model) -> pa.Table:
    return pl.from_arrow(rows).with_columns(model.as_polars()).unnest("drumlin").to_arrow()


def streamed(rows: pa.Table, model: drumlin.Mixture | drumlin.Model) -> pa.Table:
    lazy = pl.from_arrow(rows).lazy().with_columns(model.as_polars()).unnest("drumlin")
    return lazy.collect(engine="streaming").to_arrow()


def sql(rows: pa.Table, model: drumlin.Mixture | drumlin.Model) -> pa.Table:
    with duckdb.connect() as connection:
        connection.register("all rows", rows)
        return connection.sql(model.as_sql("all rows")).to_arrow_table()


def lazy_groups(rows: pa.Table, model: drumlin.Mixture | drumlin.Model) -> pa.Table:
    return drumlin.lazy_groups(pl.from_arrow(rows).lazy(), model).collect(engine="streaming").to_arrow()


ENGINES = [eager, streamed, sql, lazy_groups]


def mixture(k: int, d: int, structure: str = "full", pooled: bool = False, seed: int = 0) -> drumlin.Mixture:
    random = np.random.default_rng([seed, k, d])
    root = np.eye(d) + 0.3 * random.normal(size=(k, d, d))
    full = root @ root.transpose(0, 2, 1)
    stored = {"full": full, "diagonal": full.diagonal(axis1=1, axis2=2), "spherical": full[:, 0, 0]}[structure]
    names = ["length cm", 'the "net" weight', "select", "weight.kg", "x0", "x1", "x2", "x3"][:d]
    ids = list(range(k, 2 * k))[::-1]
    weights = random.dirichlet(np.full(k, 3.0))
    means = 3.0 * random.normal(size=(k, d))
    return drumlin.Mixture(
        weights, means, stored[0] if pooled else stored, names, structure=structure, pooled=pooled, ids=ids
    )


def rows_for(model: drumlin.Mixture, n: int, gaps: bool = True) -> pa.Table:
    """Rows like the mixture's, a hundredth of them 1e3 to 1e6 standard deviations away; with nulls and NaN."""
    random = np.random.default_rng(n)
    values = model.draw(n, seed=3)
    far = random.random(n) < 0.01
    values[far] *= 10.0 ** random.uniform(3.0, 6.0, (far.sum(), 1))
    columns = {}
    for j, name in enumerate(model.columns):
        column = values[:, j].copy()
        null = None
        if gaps:
            column[random.random(n) < 0.01] = np.nan
            null = random.random(n) < 0.01
        columns[name] = pa.array(column, mask=null)
    return pa.table({"key": np.arange(n), **columns})


def assert_as_predict(found: pa.Table, expected: pa.Table) -> None:
    found = found.sort_by("key")
    assert found.column_names == expected.column_names
    for name in ADDED:
        mine, theirs = found[name].combine_chunks(), expected[name].combine_chunks()
        assert mine.type == theirs.type and mine.is_null().equals(theirs.is_null()), name
        if name == "log_density":
            mine, theirs = (each.drop_null().to_numpy() for each in (mine, theirs))
            # Far away a density is a square of a million standard deviations: then 1e-9 of that.
            assert (np.abs(mine - theirs) <= 1e-9 * np.maximum(1.0, np.abs(theirs))).all()
        elif name == "responsibility":
            mine, theirs = (each.drop_null().to_numpy().astype(float) for each in (mine, theirs))
            assert np.abs(mine - theirs).max(initial=0.0) <= 2.0**-24, "a float32 of the same number, or the next one"
        else:
            assert mine.equals(theirs), name


@pytest.mark.parametrize("engine", ENGINES)
def test_a_million_rows(engine: Engine) -> None:
    model = mixture(3, 3)
    rows = rows_for(model, 1_000_000)
    assert_as_predict(engine(rows, model), drumlin.predict(rows, model, missing="complete-rows").read_all())


@pytest.mark.parametrize("engine", ENGINES)
@pytest.mark.parametrize(
    ("k", "d", "structure", "pooled"),
    [
        (16, 8, "full", False),
        (5, 4, "diagonal", False),
        (5, 4, "spherical", True),
        (4, 3, "full", True),
        (1, 2, "full", False),
        (2, 1, "full", False),
    ],
)
def test_shapes(engine: Engine, k: int, d: int, structure: str, pooled: bool) -> None:
    model = mixture(k, d, structure, pooled)
    rows = rows_for(model, 3_000)
    assert_as_predict(engine(rows, model), drumlin.predict(rows, model, missing="complete-rows").read_all())


@pytest.mark.parametrize("engine", ENGINES)
def test_codes_of_a_model_and_whole_numbers(engine: Engine) -> None:
    random = np.random.default_rng(6)
    length = random.integers(10, 90, 2_000)
    length[::17] = -9999
    rows = pa.table(
        {"key": np.arange(2_000), "length": length, "weight": random.normal(5.0, 1.0, 2_000).astype(np.float32)}
    )
    model = drumlin.fit(
        rows, 2, columns=["length", "weight"], missing="complete-rows", missing_codes={"length": -9999}, progress=False
    )
    expected = drumlin.predict(rows, model).read_all()
    assert expected["component"].null_count == len(length[::17])
    assert_as_predict(engine(rows, model), expected)


@pytest.mark.parametrize("engine", [eager, sql])
def test_components_equally_likely_and_rows_beyond_reach(engine: Engine) -> None:
    same = drumlin.Mixture([0.25] * 4, [[0.0], [0.0], [5.0], [5.0]], [[[1.0]]] * 4, ["x"])
    rows = pa.table({"key": [0, 1, 2, 3], "x": [0.0, 5.0, 1e140, -1e200]})
    assert_as_predict(engine(rows.slice(0, 3), same), drumlin.predict(rows.slice(0, 3), same).read_all())
    found = engine(rows, same).sort_by("key")["log_density"].to_pylist()
    assert np.isfinite(found).all() and found[3] == pytest.approx(-1e290)


@pytest.mark.parametrize("engine", ENGINES)
@pytest.mark.parametrize("weights", [[0.0, 1.0], [0.0, 0.5, 0.5], [0.5, 0.0, 0.5]])
def test_components_without_weight(engine: Engine, weights: list[float]) -> None:
    k = len(weights)
    model = drumlin.Mixture(weights, [[0.0], [5.0], [100.0]][:k], [[[1.0]]] * k, ["x"])
    rows = pa.table({"key": [0, 1, 2, 3], "x": [0.0, 5.0, 60.0, 100.0]})
    assert_as_predict(engine(rows, model), drumlin.predict(rows, model).read_all())


@pytest.mark.parametrize("engine", ENGINES)
@pytest.mark.parametrize("column", [["1.5", "2.5"], [datetime.date(2026, 1, 1)] * 2, [datetime.timedelta(1)] * 2])
def test_columns_that_hold_no_numbers_are_refused(engine: Engine, column: list[object]) -> None:
    rows = pa.table({"key": [0, 1], "x": column})
    model = drumlin.Mixture([1.0], [[0.0]], [[[1.0]]], ["x"])
    with pytest.raises((drumlin.SchemaError, pl.exceptions.PolarsError, duckdb.Error)):
        engine(rows, model)


@pytest.mark.parametrize("engine", [eager, streamed, sql])
def test_booleans_and_decimals_are_numbers(engine: Engine) -> None:
    rows = pa.table({"key": [0, 1], "x": [True, False], "y": [decimal.Decimal("1.25"), decimal.Decimal("-3.50")]})
    model = drumlin.Mixture([1.0], [[0.0, 1.0]], [np.eye(2)], ["x", "y"])
    assert_as_predict(engine(rows, model), drumlin.predict(rows, model).read_all())


@pytest.mark.parametrize("engine", [eager, sql])
def test_infinite_values_have_nothing(engine: Engine) -> None:
    rows = pa.table({"key": [0, 1, 2], "x": [np.inf, -np.inf, 1.0]})
    found = engine(rows, drumlin.Mixture([1.0], [[0.0]], [[[1.0]]], ["x"])).sort_by("key")
    assert found["component"].to_pylist() == [None, None, 0]


@pytest.mark.parametrize("way", ["as_polars", "as_sql"])
def test_beyond_a_size_the_streaming_way_is_named(way: str) -> None:
    large = drumlin.Mixture(np.full(300, 1 / 300), np.zeros((300, 8)), np.stack([np.eye(8)] * 300), list("abcdefgh"))
    with pytest.raises(drumlin.OptionError, match=r"10,800 numbers.*drumlin\.predict.*drumlin\.lazy_groups"):
        getattr(large, way)()
    many = drumlin.Mixture(np.full(501, 1 / 501), np.zeros((501, 1)), np.ones((501, 1, 1)), ["a"])
    with pytest.raises(drumlin.OptionError, match=r"501 components.*drumlin\.predict.*drumlin\.lazy_groups"):
        getattr(many, way)()
    bare = drumlin.Mixture([1.0], [[0.0]], [[[1.0]]])
    with pytest.raises(drumlin.OptionError, match="no column names"):
        getattr(bare, way)()
