"""Rows kept in a temporary file: read again bit for bit, and gone at the end, however it comes."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import polars
import pyarrow as pa
import pyarrow.compute as pc
import pytest

import drumlin
from drumlin.errors import SourceError, StreamError, TargetError
from drumlin.tables import BATCH_ROWS, KEEP, Table, open_table
from drumlin.tables.spool import SpoolTable, spooled
from tools import run_python

ROWS = 2 * BATCH_ROWS + 503


@pytest.fixture(scope="module")
def rows() -> pa.Table:
    random = np.random.default_rng(8)
    far = np.arange(ROWS) % 3 == 0
    return pa.table(
        {
            "parcel": [f"p{i:06d}" for i in range(ROWS)],
            "length_cm": random.normal(40, 3, ROWS) + 30 * far,
            "weight_kg": random.normal(2, 0.5, ROWS).astype(np.float32),
            "count": np.arange(ROWS, dtype=np.int16) % 5,
            "kind": pa.array(["bag", "box", "tube", None, "bag"] * (ROWS // 5)).slice(0, ROWS).dictionary_encode(),
        }
    )


def read(table: Table, columns: list[str] | None = None, **how: Any) -> pa.Table:
    return pa.Table.from_batches([batch for _, batch in table.scan(columns, **how)])


def test_it_gives_back_what_was_added(rows: pa.Table, tmp_path: Path) -> None:
    table = SpoolTable(str(tmp_path), rows.schema, "scans")
    for batch in rows.to_batches(max_chunksize=100_000):
        table.add(batch.select(list(reversed(rows.column_names))))
    table.finish()
    assert table.row_count == ROWS and table.rereadable and table.ordered and not table.in_memory
    assert os.listdir(tmp_path) == [os.path.basename(table.path)]
    for _ in range(2):
        found = read(table)
        assert found.drop_columns(["kind"]).equals(rows.drop_columns(["kind"]))
        assert found["kind"].to_pylist() == rows["kind"].to_pylist()
    assert read(table, ["count", "parcel"]).column_names == ["count", "parcel"]
    wanted = [(5, 9), (BATCH_ROWS - 1, BATCH_ROWS + 1), (ROWS - 1, ROWS + 10)]
    got = [row for first, batch in table.scan(["count"], wanted) for row in range(first, first + batch.num_rows)]
    assert got == [row for first, end in wanted for row in range(first, min(end, ROWS))]
    assert sum(batch.num_rows for _, batch in table.scan([])) == ROWS
    table.close()
    table.close()
    assert os.listdir(tmp_path) == []


def test_only_what_is_needed_is_kept(rows: pa.Table, tmp_path: Path) -> None:
    source = open_table(rows.to_reader(), where="count > 1")
    table = spooled(source, ["weight_kg"], str(tmp_path), [pc.field("kind") == "bag"])
    assert sorted(table.schema.names) == ["count", "kind", "weight_kg"]
    found = read(table, ["weight_kg"], extra={"__held__": pc.field("kind") == "bag"})
    assert found[KEEP].to_pylist() == pc.greater(rows["count"], 1).to_pylist()
    assert found["__held__"].to_pylist() == pc.equal(rows["kind"].cast(pa.string()), "bag").to_pylist()
    assert "temporary file" in table.notes[-1] and 100_000 < table.bytes < 6_000_000
    table.close()


def test_no_rows(rows: pa.Table, tmp_path: Path) -> None:
    table = spooled(open_table(rows.slice(0, 0).to_reader()), ["count"], str(tmp_path))
    assert table.row_count == 0 and list(table.scan()) == []
    table.close()


def test_the_file_goes_with_the_table(rows: pa.Table, tmp_path: Path) -> None:
    table = spooled(open_table(rows.to_reader()), ["count"], str(tmp_path))
    scan = table.scan()
    next(scan)
    del table, scan
    assert os.listdir(tmp_path) == []


def test_a_file_that_was_tampered_with_is_named(rows: pa.Table, tmp_path: Path) -> None:
    table = spooled(open_table(rows.to_reader()), ["count"], str(tmp_path))
    os.truncate(table.path, 100)
    with pytest.raises(SourceError, match="temporary file with the rows of Arrow stream, cannot be read any more"):
        read(table)
    os.unlink(table.path)
    with pytest.raises(SourceError, match="cannot be read any more"):
        read(table)
    table.close()


OPTIONS: dict[str, Any] = {
    "columns": ["length_cm", "weight_kg"],
    "where": "kind is not null",
    "row_weight": "count",
    "key": "parcel",
    "hold_out": "length_cm < 35",
    "pass_limit": 4,
    "tries": 2,
    "progress": False,
}


def test_a_stream_is_fitted_as_the_table_is(rows: pa.Table, tmp_path: Path) -> None:
    expected = drumlin.fit(rows, 2, **OPTIONS)
    found = drumlin.fit(rows.to_reader(10_000), 2, spill=tmp_path, **OPTIONS)
    assert found.checksum == expected.checksum
    assert any("temporary file" in note for note in found.notes)
    assert os.listdir(tmp_path) == []


def test_what_is_read_again_is_not_spooled(rows: pa.Table, tmp_path: Path) -> None:
    model = drumlin.fit(rows, 2, spill=tmp_path, **OPTIONS)
    assert not any("temporary file" in note for note in model.notes)


def test_a_stream_without_spill_is_refused_before_it_is_read(rows: pa.Table) -> None:
    reader = rows.to_reader()
    with pytest.raises(StreamError, match=r"only once.*callable.*spill='FOLDER'"):
        drumlin.fit(reader, 2, **OPTIONS)
    assert reader.read_all().num_rows == ROWS


def lazy(table: pa.Table) -> Any:
    return polars.from_arrow(table).lazy()


def from_duckdb(query: str) -> Callable[[pa.Table], Any]:
    def make(table: pa.Table) -> Any:
        import duckdb

        connection = duckdb.connect()
        connection.register("scans", table)
        return connection.sql(query)

    return make


GROUPED = "select parcel, max(length_cm) as length_cm, any_value(weight_kg) as weight_kg from scans group by parcel"
UNORDERED: dict[str, Callable[[pa.Table], Any]] = {
    "duckdb": from_duckdb("select * from scans"),
    "duckdb grouped": from_duckdb(GROUPED),
    "duckdb sorted inside": from_duckdb(f"select * from ({GROUPED} order by parcel limit 9) join scans using (parcel)"),
    "lazy grouped": lambda table: lazy(table).group_by("parcel").agg(polars.all().first()),
    "lazy distinct": lambda table: lazy(table).unique("parcel"),
    "lazy joined": lambda table: lazy(table).join(lazy(table).sort("parcel"), on="parcel"),
    "lazy beside a sort": lambda table: polars.concat([lazy(table).sort("parcel"), lazy(table).unique("parcel")]),
    "callable": lambda table: lambda: lazy(table).unique("parcel"),
}
ORDERED: dict[str, Callable[[pa.Table], Any]] = {
    "duckdb": from_duckdb("select * from scans order by parcel"),
    "duckdb grouped": from_duckdb(f"{GROUPED} order by parcel"),
    "duckdb top": from_duckdb("select parcel, length_cm + 1 as length_cm from scans order by count, parcel limit 50"),
    "lazy": lazy,
    "lazy filtered": lambda table: lazy(table).filter(polars.col("count") > 1).with_columns(x=polars.col("count") + 1),
    "lazy grouped": lambda table: lazy(table).group_by("parcel", maintain_order=True).agg(polars.all().first()),
    "lazy sorted": lambda table: lazy(table).unique("parcel").sort("parcel").select("length_cm"),
    "callable": lambda table: lambda: lazy(table),
    "table": lambda table: table,
}


@pytest.mark.parametrize("kind", UNORDERED)
def test_sources_without_a_repeatable_order(rows: pa.Table, kind: str) -> None:
    table = open_table(UNORDERED[kind](rows.slice(0, 1000)))
    assert not table.ordered and table.order_advice


@pytest.mark.parametrize("kind", ORDERED)
def test_sources_with_a_repeatable_order(rows: pa.Table, kind: str) -> None:
    assert open_table(ORDERED[kind](rows.slice(0, 1000))).ordered


@pytest.mark.parametrize("kind", ["duckdb grouped", "lazy grouped"])
def test_without_an_order_rows_need_a_key_or_a_folder(rows: pa.Table, tmp_path: Path, kind: str) -> None:
    make = UNORDERED[kind]
    options = {"columns": ["length_cm", "weight_kg"], "pass_limit": 3, "tries": 1, "progress": False}
    with pytest.raises(StreamError, match=r"another order.*key=.*spill='FOLDER'"):
        drumlin.fit(make(rows), 2, **options)
    keyed = drumlin.fit(make(rows), 2, key="parcel", **options)
    kept = drumlin.fit(make(rows), 2, spill=tmp_path, **options)
    assert not any("temporary" in note for note in keyed.notes) and any("temporary" in note for note in kept.notes)
    np.testing.assert_allclose(np.sort(kept.mixture.weights), np.sort(keyed.mixture.weights), rtol=0.05)
    assert os.listdir(tmp_path) == []


class Stopped(BaseException):
    """What no one catches, as an interrupt."""


@pytest.mark.parametrize("when", ["source", "fit"])
def test_nothing_is_left_after_an_interrupt(rows: pa.Table, tmp_path: Path, when: str) -> None:
    def batches() -> Iterator[pa.RecordBatch]:
        yield from rows.to_batches(max_chunksize=10_000)
        if when == "source":
            assert len(os.listdir(tmp_path)) == 1
            raise Stopped

    def stop(event: dict[str, Any]) -> None:
        assert len(os.listdir(tmp_path)) == 1
        raise Stopped

    reader = pa.RecordBatchReader.from_batches(rows.schema, batches())
    with pytest.raises(Stopped):
        drumlin.fit(reader, 2, spill=tmp_path, **OPTIONS | {"progress": stop})
    assert os.listdir(tmp_path) == []


INTERRUPTED = """
import os, signal, sys, threading, time
import numpy as np, pyarrow as pa, drumlin
schema = pa.schema({"x": pa.float64()})
def batches():
    yield pa.record_batch({"x": np.arange(70000.0)})
    threading.Timer(0.3, os.kill, (os.getpid(), %s)).start()
    time.sleep(60)
try:
    drumlin.fit(pa.RecordBatchReader.from_batches(schema, batches()), 2, columns=["x"], spill=sys.argv[1])
except KeyboardInterrupt:
    print("interrupted", os.listdir(sys.argv[1]), flush=True)
    os._exit(0)
"""


def test_ctrl_c_passes_while_the_source_blocks_and_a_killed_one_is_swept(rows: pa.Table, tmp_path: Path) -> None:
    def run(signal_name: str) -> subprocess.CompletedProcess[str]:
        command = [sys.executable, "-c", INTERRUPTED % signal_name, str(tmp_path)]
        return subprocess.run(command, capture_output=True, text=True, timeout=50, check=False)

    assert run("signal.SIGINT").stdout == "interrupted []\n"
    assert run("signal.SIGKILL").returncode == -9 and len(os.listdir(tmp_path)) == 1
    drumlin.fit(rows.slice(0, 500).to_reader(), 1, spill=tmp_path, **OPTIONS)
    assert os.listdir(tmp_path) == []


def test_a_full_disk_is_told_with_what_is_free(tmp_path: Path) -> None:
    code = (
        "import os, resource, signal, numpy as np, pyarrow as pa, drumlin\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (1_300_000, 1_300_000))\n"
        "reader = pa.table({'x': np.arange(400_000.0)}).to_reader()\n"
        f"try:\n    drumlin.fit(reader, 2, columns=['x'], spill={str(tmp_path)!r})\n"
        f"except drumlin.TargetError as error:\n    print(error, os.listdir({str(tmp_path)!r}))\n"
    )
    done = run_python(code)
    assert done.stderr == "" and "spill: the temporary file in" in done.stdout and "File too large" in done.stdout
    assert "took 1.0 MB so far" in done.stdout and "are free. []" in done.stdout


def test_a_folder_that_goes_away(rows: pa.Table, tmp_path: Path) -> None:
    with pytest.raises(TargetError, match="spill: the temporary file in .*No such file"):
        SpoolTable(str(tmp_path / "gone"), rows.schema, "scans")
