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

ROUTES = (
    *("numpy", "arrow", "batch", "parquet", "files", "folders", "polars", "lazyframe", "pandas", "duckdb", "dataset"),
    *("capsule", "callable", "generator", "reader"),
)
"""Every way in which rows can be given; `reader` gives them once."""

Route = Callable[[dict[str, np.ndarray]], Any]


@pytest.fixture(params=ROUTES)
def route(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Route:
    """A function that turns {name: values} into rows, by each way in which rows can be given.

    Name the columns x0, x1, ... for them to be the same by every way: a NumPy array has no names of its own. Ask it
    anew for every verb: a reader gives its rows once.
    """
    kind: str = request.param

    def rows(columns: dict[str, np.ndarray]) -> Any:
        if kind == "numpy":
            return np.stack(list(columns.values()), axis=1)
        if kind == "pandas":
            import pandas

            return pandas.DataFrame(columns)
        if kind in ("polars", "lazyframe"):
            import polars

            frame = polars.DataFrame(columns)
            return frame if kind == "polars" else frame.lazy()
        import pyarrow as pa

        return _from_arrow(kind, pa.table(columns), tmp_path_factory)

    rows.kind = kind  # type: ignore[attr-defined]
    return rows


def _from_arrow(kind: str, table: Any, folders: pytest.TempPathFactory) -> Any:
    batches = table.to_batches(max_chunksize=1000)
    if kind == "arrow":
        return table
    if kind == "batch":
        return table.combine_chunks().to_batches()[0]
    if kind == "reader":
        return table.to_reader(1000)
    if kind == "capsule":
        return _Capsule(table)
    if kind == "callable":
        return lambda: table.to_reader(1000)
    if kind == "generator":
        return lambda: iter(batches)
    if kind == "duckdb":
        import duckdb

        connection = duckdb.connect()
        connection.register("scans", table.append_column("row", [np.arange(len(table))]))
        return connection.sql("select * exclude (row) from scans order by row")
    return _from_files(kind, table, folders.mktemp("route"))


def _from_files(kind: str, table: Any, folder: Any) -> Any:
    import pyarrow.dataset
    import pyarrow.parquet as pq

    third = max(1, len(table) // 3)
    if kind == "parquet":
        pq.write_table(table, folder / "rows.parquet", row_group_size=third)
        return str(folder / "rows.parquet")
    for number, first in enumerate(range(0, len(table), third)):
        place = folder / f"part={number}" if kind == "folders" else folder
        place.mkdir(exist_ok=True)
        pq.write_table(table.slice(first, third), place / f"rows{number}.parquet", row_group_size=700)
    return pyarrow.dataset.dataset(folder) if kind == "dataset" else folder


class _Capsule:
    """An object that knows nothing but the Arrow stream protocol."""

    def __init__(self, table: Any) -> None:
        self._table = table

    def __arrow_c_stream__(self, requested_schema: object = None) -> object:
        return self._table.__arrow_c_stream__(requested_schema)
