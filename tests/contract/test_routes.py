"""Every verb takes rows by every way, and gives the same bits wherever the order is the same."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import datasets
import drumlin

NAMES = ["x0", "x1", "x2"]
FIT: dict[str, Any] = {"columns": NAMES, "where": "x0 > -2", "pass_limit": 4, "tolerance": 0.0, "seed": 2, "tries": 2}


@pytest.fixture(scope="module")
def columns() -> dict[str, np.ndarray]:
    values = datasets.hills(5_003, components=3, columns=3, seed=9)
    return {name: np.ascontiguousarray(values[:, j]) for j, name in enumerate(NAMES)}


@pytest.fixture(scope="module")
def wanted(columns: dict[str, np.ndarray]) -> dict[str, Any]:
    """What every verb says of the rows as an Arrow table."""
    table = pa.table(columns)
    model = drumlin.fit(table, 3, **FIT)
    return {
        "model": model,
        "profile": drumlin.profile(table, columns=NAMES, where="x0 > -2").to_dict(),
        "predict": drumlin.predict(table, model, where="x0 > -2", outputs=["responsibilities"], carry=NAMES).read_all(),
        "log_density": model.log_density(table),
        "assign": model.assign(table),
        "responsibilities": model.responsibilities(table),
        "distance": model.distance(table),
    }


def test_every_verb_takes_every_way(
    route: Any, columns: dict[str, np.ndarray], wanted: dict[str, Any], tmp_path: Path
) -> None:
    model = wanted["model"]
    spill = {"spill": tmp_path} if route.kind == "reader" else {}
    fitted = drumlin.fit(route(columns), 3, **FIT, **spill)
    assert fitted.checksum == model.checksum and fitted.columns == tuple(NAMES)
    # What follows uses the model of the same bits from the table, so that one fault shows in one place.
    profile = drumlin.profile(route(columns), columns=NAMES, where="x0 > -2").to_dict()
    assert {**profile, "label": ""} == {**wanted["profile"], "label": ""}
    found = drumlin.predict(route(columns), model, where="x0 > -2", outputs=["responsibilities"], carry=NAMES)
    assert found.read_all().combine_chunks().equals(wanted["predict"].combine_chunks())
    for method in ("log_density", "assign", "responsibilities", "distance"):
        assert np.array_equal(getattr(model, method)(route(columns)), wanted[method]), method
    written = tmp_path / "grouped.parquet"
    drumlin.predict(route(columns), model, written, where="x0 > -2", outputs=["responsibilities"], carry=NAMES)
    assert pq.read_table(written).combine_chunks().equals(wanted["predict"].combine_chunks())
    assert os.listdir(tmp_path) == ["grouped.parquet"]


def test_a_reader_is_fitted_only_with_a_place_to_keep_its_rows(columns: dict[str, np.ndarray]) -> None:
    with pytest.raises(drumlin.StreamError, match="spill="):
        drumlin.fit(pa.table(columns).to_reader(), 3, **FIT)
