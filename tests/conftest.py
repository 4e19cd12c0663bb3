"""Fixtures and settings that all tests share."""

from __future__ import annotations

import os
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, settings

from drumlin import memory

if "PYTEST_XDIST_WORKER" in os.environ:
    # Several test processes share the cores: by default each computes in one thread.
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "POLARS_MAX_THREADS"):
        os.environ.setdefault(name, "1")
    memory.usable_cores = lambda: 1

settings.register_profile(
    "ci",
    deadline=None,
    derandomize=True,
    max_examples=25,
    database=None,
    print_blob=True,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.register_profile("dev", deadline=None, max_examples=50, suppress_health_check=[HealthCheck.too_slow])
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "ci" if os.environ.get("CI") else "dev"))

ROUTES = ("numpy", "arrow", "parquet", "polars", "pandas", "callable")

Route = Callable[[dict[str, np.ndarray]], Any]


@pytest.fixture(params=ROUTES)
def route(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Route:
    """A function that turns {name: values} into rows, by each way in which rows can be given.

    Name the columns x0, x1, ... for them to be the same by every way: a NumPy array has no names of its own.
    """
    kind: str = request.param

    def rows(columns: dict[str, np.ndarray]) -> Any:
        if kind == "numpy":
            return np.stack(list(columns.values()), axis=1)
        if kind == "polars":
            import polars

            return polars.DataFrame(columns)
        if kind == "pandas":
            import pandas

            return pandas.DataFrame(columns)
        import pyarrow as pa

        table = pa.table(columns)
        if kind == "arrow":
            return table
        if kind == "callable":
            return lambda: pa.RecordBatchReader.from_batches(table.schema, table.to_batches(max_chunksize=1000))
        import pyarrow.parquet as pq

        path = tmp_path_factory.mktemp("route") / "rows.parquet"
        pq.write_table(table, path, row_group_size=max(1, len(table) // 3))
        return str(path)

    rows.kind = kind  # type: ignore[attr-defined]
    return rows
