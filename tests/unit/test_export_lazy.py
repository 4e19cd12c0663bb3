"""Group columns inside a lazy Polars query."""

from pathlib import Path

import numpy as np
import polars as pl
import pytest

import drumlin

MIXTURE = drumlin.Mixture([0.5, 0.5], [[0.0, 1.0], [9.0, 1.0]], [np.eye(2), np.eye(2)], ["length_cm", "weight_kg"])
FRAME = pl.DataFrame({"parcel": range(5_000), "length_cm": np.linspace(-3.0, 12.0, 5_000), "weight_kg": np.ones(5_000)})


def test_nothing_is_collected_and_the_schema_is_known(monkeypatch: pytest.MonkeyPatch) -> None:
    with monkeypatch.context() as patch:
        patch.setattr(pl.LazyFrame, "collect", lambda *_, **__: pytest.fail("collected"))
        query = drumlin.lazy_groups(FRAME.lazy(), MIXTURE, prefix="new_")
        schema = query.collect_schema()
    assert list(schema) == [*FRAME.columns, "new_component", "new_responsibility", "new_runner_up", "new_log_density"]
    assert query.collect().schema == schema


def test_inside_a_query_that_streams_to_a_file(tmp_path: Path) -> None:
    FRAME.write_parquet(tmp_path / "rows.parquet", row_group_size=700)
    query = pl.scan_parquet(tmp_path / "rows.parquet").filter(pl.col("length_cm") > 0.0)
    counts = (
        drumlin.lazy_groups(query, MIXTURE).group_by("component").len().sort("component").collect(engine="streaming")
    )
    expected = MIXTURE.assign(FRAME.filter(pl.col("length_cm") > 0.0))
    assert counts["len"].to_list() == np.bincount(expected).tolist()
    drumlin.lazy_groups(query, MIXTURE).sink_parquet(tmp_path / "out.parquet")
    found = pl.read_parquet(tmp_path / "out.parquet").sort("parcel")
    assert found["component"].to_list() == expected.tolist()


def test_a_model_file_and_an_empty_query(tmp_path: Path) -> None:
    model = drumlin.fit(FRAME.select("length_cm", "weight_kg").with_columns(pl.col("weight_kg") * pl.lit(1.0)), 1)
    path = model.save(tmp_path / "m.drumlin")
    found = drumlin.lazy_groups(FRAME.head(0).lazy(), path).collect()
    assert found.height == 0 and found.schema["component"] == pl.Int32


def test_what_cannot_be_is_said_when_the_query_is_built() -> None:
    with pytest.raises(drumlin.SchemaError, match="no column 'weight_kg'"):
        drumlin.lazy_groups(FRAME.lazy().drop("weight_kg"), MIXTURE)
    with pytest.raises(drumlin.SchemaError, match="'length_cm'"):
        drumlin.lazy_groups(FRAME.lazy().with_columns(length_cm=pl.lit("long")), MIXTURE)
    with pytest.raises(drumlin.SchemaError, match="already has a column 'component'.*prefix"):
        drumlin.lazy_groups(FRAME.lazy().with_columns(component=1), MIXTURE)
    with pytest.raises(drumlin.OptionError, match=r"frame\.lazy\(\)"):
        drumlin.lazy_groups(FRAME, MIXTURE)  # type: ignore[arg-type]


def test_an_infinite_value_ends_the_query_and_names_the_column() -> None:
    query = drumlin.lazy_groups(FRAME.lazy().with_columns(weight_kg=pl.lit(float("inf"))), MIXTURE)
    with pytest.raises(Exception, match="'weight_kg' holds an infinite value"):
        query.collect()
