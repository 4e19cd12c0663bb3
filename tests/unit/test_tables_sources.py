"""Rows from everything that is not a Parquet path: Arrow, frames, queries, streams, arrays, callables, datasets."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas
import polars
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.dataset as ds
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin.errors import OptionError, SchemaError, SourceError, StreamError
from drumlin.tables import BATCH_ROWS, KEEP, Table, open_table

ROWS = 2 * BATCH_ROWS + 1000


def read(table: Table, columns: list[str] | None = None, **how: Any) -> pa.Table:
    """All rows of a scan; checks that row numbers follow each other."""
    batches, row = [], 0
    for first, batch in table.scan(columns, **how):
        assert first == row and 0 < batch.num_rows <= BATCH_ROWS
        batches.append(batch)
        row += batch.num_rows
    return pa.Table.from_batches(batches)


@pytest.fixture(scope="module")
def rows() -> pa.Table:
    return pa.table(
        {
            "length_cm": np.arange(ROWS, dtype=np.float64),
            "weight_kg": np.arange(ROWS, dtype=np.float32) % 7,
            "scanner": np.where(np.arange(ROWS) % 2, "A1", "B2"),
        }
    )


class Capsule:
    """An object that knows nothing but the Arrow stream protocol, and can be asked again."""

    def __init__(self, table: pa.Table) -> None:
        self.table = table

    def __arrow_c_stream__(self, requested_schema: object = None) -> object:
        return self.table.__arrow_c_stream__(requested_schema)


def as_lazyframe(table: pa.Table) -> Any:
    return polars.from_arrow(table).lazy()


def as_dataset(table: pa.Table) -> Any:
    return ds.dataset(table)


def as_duckdb(table: pa.Table) -> Any:
    import duckdb

    return duckdb.connect().from_arrow(table)


def as_generator(table: pa.Table) -> Callable[[], Iterator[pa.RecordBatch]]:
    return lambda: iter(table.to_batches(max_chunksize=777))


def as_reader_callable(table: pa.Table) -> Callable[[], Any]:
    return lambda: table.to_reader()


REREADABLE: dict[str, tuple[Callable[[pa.Table], Any], bool]] = {
    "pyarrow": (lambda table: table, True),
    "batch": (lambda table: table.combine_chunks().to_batches()[0], True),
    "polars": (polars.from_arrow, True),
    "pandas": (lambda table: table.to_pandas(), True),
    "lazyframe": (as_lazyframe, False),
    "dataset": (as_dataset, False),
    "duckdb": (as_duckdb, False),
    "capsule": (Capsule, False),
    "generator": (as_generator, False),
    "callable": (as_reader_callable, False),
}


@pytest.mark.parametrize("kind", REREADABLE)
def test_every_source_gives_the_same_rows_twice(rows: pa.Table, kind: str) -> None:
    make, in_memory = REREADABLE[kind]
    table = open_table(make(rows), where="weight_kg > 2 and scanner == 'B2'")
    assert table.rereadable and table.in_memory == in_memory and table.files == [] and table.units() == []
    assert table.schema.names == rows.schema.names and KEEP not in table.schema.names
    wanted = pc.and_(pc.greater(rows["weight_kg"], 2), pc.equal(rows["scanner"], "B2"))
    for _ in range(2):
        found = read(table, ["weight_kg", "length_cm"])
        assert found.column_names == ["weight_kg", "length_cm", KEEP]
        assert found["length_cm"].combine_chunks() == rows["length_cm"].combine_chunks()
        assert found["weight_kg"].type == pa.float32()
        assert found[KEEP].combine_chunks() == wanted.combine_chunks()
    assert table.row_count == ROWS and len(table.fingerprint) == 64


@pytest.mark.parametrize("kind", REREADABLE)
def test_every_source_takes_ranges(rows: pa.Table, kind: str) -> None:
    table = open_table(REREADABLE[kind][0](rows))
    got = [
        (first, batch["length_cm"][0].as_py(), batch.num_rows)
        for first, batch in table.scan(["length_cm"], [(10, 20), (BATCH_ROWS - 1, BATCH_ROWS + 1)])
    ]
    assert sum(count for _, _, count in got) == 12 and all(first == value for first, value, _ in got)


def test_a_reader_is_read_once(rows: pa.Table) -> None:
    table = open_table(rows.to_reader())
    assert not table.rereadable and table.row_count is None and table.fingerprint == ""
    assert read(table).num_rows == ROWS == table.row_count
    with pytest.raises(StreamError, match="only once.*callable"):
        list(table.scan())


def test_an_object_that_gives_its_rows_once_is_found_out(rows: pa.Table) -> None:
    class Once(Capsule):
        def __arrow_c_stream__(self, requested_schema: object = None) -> object:
            table, self.table = self.table, self.table.slice(0, 0)
            return table.__arrow_c_stream__(requested_schema)

    class Holder(Capsule):
        opened = -1

        def __arrow_c_stream__(self, requested_schema: object = None) -> object:
            self.opened += 1
            return self.table.slice(0, ROWS if self.opened < 2 else 5).__arrow_c_stream__(requested_schema)

    table = open_table(Holder(rows))
    read(table)
    with pytest.raises(StreamError, match="rows changed between two reads: 132,072 at first, 5 now"):
        read(table)

    class OnceReader(Once):
        pass

    assert not open_table(OnceReader(rows)).rereadable


def test_a_callable_that_returns_a_used_stream_is_found_out(rows: pa.Table) -> None:
    reader = rows.to_reader()
    table = open_table(lambda: reader)
    read(table)
    with pytest.raises((StreamError, pa.ArrowInvalid, ValueError)):
        read(table)


def test_what_a_generator_raises_comes_through_as_it_is(rows: pa.Table) -> None:
    class MyError(Exception):
        pass

    def broken() -> Iterator[pa.RecordBatch]:
        yield from rows.slice(0, 10).to_batches()
        raise MyError("the tape tore")

    with pytest.raises(MyError, match="the tape tore"):
        read(open_table(broken))
    reader = pa.RecordBatchReader.from_batches(rows.schema, broken())
    with pytest.raises(MyError, match="the tape tore"):
        read(open_table(reader))


def test_a_callable_is_called_once_a_pass(rows: pa.Table) -> None:
    calls = []

    def open_rows() -> pa.Table:
        calls.append(1)
        return rows

    table = open_table(open_rows)
    for passes in (1, 2, 3):
        read(table)
        assert len(calls) == passes


def test_a_callable_that_changes_its_columns_is_found_out(rows: pa.Table) -> None:
    parts = [rows, rows.drop_columns(["scanner"])]
    table = open_table(lambda: parts.pop(0))
    read(table)
    with pytest.raises(StreamError, match="other columns"):
        read(table)


@pytest.mark.parametrize("result", [lambda: 3, lambda: lambda: 3, lambda: iter([]), lambda: iter([3])])
def test_a_callable_that_returns_no_rows_is_refused(result: Any) -> None:
    with pytest.raises((OptionError, SchemaError)):
        open_table(result)


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("dtype", [np.float32, np.float64, np.int16, np.bool_, ">f8", np.float16])
def test_arrays_of_any_strides_and_types(order: Any, dtype: Any) -> None:
    values = np.arange(60).reshape(15, 4) % 2
    array = np.asarray(values, dtype=dtype, order=order)
    for view, want in [(array, values), (array[::-2, 1:3], values[::-2, 1:3])]:
        table = open_table(view)
        assert table.schema.names == [f"x{j}" for j in range(want.shape[1])] and table.in_memory
        found = read(table)
        assert np.array_equal(np.stack([found[name] for name in found.column_names], axis=1), want)
        assert all(type_ == (pa.float32() if dtype == np.float32 else pa.float64()) for type_ in found.schema.types)


def test_arrays_longer_than_a_batch_and_with_names() -> None:
    array = np.arange(2.0 * ROWS).reshape(ROWS, 2)
    table = open_table(array, where="width_cm > 5", names=["length_cm", "width_cm"])
    found = read(table)
    assert np.array_equal(found["width_cm"], array[:, 1]) and found[KEEP].to_pylist()[:4] == [False, False, False, True]


@pytest.mark.parametrize(
    ("array", "text"),
    [
        (np.zeros(3), r"1 axes.*reshape\(-1, 1\)"),
        (np.zeros((2, 2, 2)), "3 axes"),
        (np.array([["a"]]), "<U1 values"),
        (np.zeros((2, 2), dtype=complex), "complex128"),
        (np.ma.masked_array(np.zeros((2, 2)), mask=True), r"filled\(numpy.nan\)"),
        (np.zeros((2, 2), dtype=object), "object"),
    ],
)
def test_arrays_that_are_not_rows_of_numbers_are_refused(array: Any, text: str) -> None:
    with pytest.raises(SchemaError, match=text):
        open_table(array)


def test_a_wrong_number_of_names_is_refused() -> None:
    with pytest.raises(SchemaError, match="2 columns, but 1 names"):
        open_table(np.zeros((2, 2)), names=["a"])


def test_frames_that_are_no_tables_are_refused() -> None:
    with pytest.raises(SchemaError, match="more than one column 'a'"):
        open_table(pandas.DataFrame([[1, 2]], columns=["a", "a"]))
    with pytest.raises(SchemaError, match="pandas frame cannot be read"):
        open_table(pandas.DataFrame({"a": [1, "x", object()]}))
    with pytest.raises(SchemaError, match="more than one column 'a'"):
        open_table(pa.table([[1], [2]], names=["a", "a"]))
    assert open_table(pandas.DataFrame({"a": [1.0, 2.0]}, index=["p", "q"])).schema.names == ["a"]


@pytest.mark.parametrize(
    ("rows", "text"),
    [
        ([], "list of paths is empty"),
        ([1.0, 2.0], "numpy.asarray"),
        ({"a": [1]}, "pyarrow.table"),
        (3, "found int"),
        (iter([]), "callable that makes a new one"),
        (None, "found NoneType"),
    ],
)
def test_what_is_no_table_is_refused_with_advice(rows: Any, text: str) -> None:
    with pytest.raises(OptionError, match=text):
        open_table(rows)


def test_a_series_is_refused() -> None:
    with pytest.raises(SchemaError, match="to_frame"):
        open_table(pandas.Series([1.0]))


def test_a_lazy_frame_is_never_collected(rows: pa.Table, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    pq.write_table(rows, tmp_path / "a.parquet", row_group_size=10_000)

    def refuse(*_: Any, **__: Any) -> Any:
        raise AssertionError("the whole frame was asked for")

    for name in ("collect", "collect_async", "fetch", "describe"):
        monkeypatch.setattr(polars.LazyFrame, name, refuse, raising=False)
    frame = polars.scan_parquet(tmp_path / "a.parquet").filter(polars.col("weight_kg") > 0)
    model = drumlin.fit(frame, 1, columns=["length_cm", "weight_kg"], pass_limit=2, progress=False)
    assert model.rows == ROWS - -(-ROWS // 7)
    assert sum(batch.num_rows for batch in drumlin.predict(frame, model)) == model.rows
    assert len(model.assign(frame)) == model.rows


def test_a_lazy_frame_is_read_while_it_is_made(rows: pa.Table) -> None:
    """The first batch is there before the last one has been asked for."""
    asked = []

    def count(frame: Any) -> Any:
        asked.append(len(frame))
        return frame

    parts = [polars.from_arrow(rows.slice(0, 20_000)).lazy().map_batches(count, streamable=True) for _ in range(40)]
    scan = open_table(polars.concat(parts)).scan(["length_cm"])
    next(scan)
    met = len(asked)
    rest = sum(batch.num_rows for _, batch in scan)
    assert rest > 0 and met < len(asked) and sum(asked) == 40 * 20_000


def test_datasets_with_filters_and_many_files(tmp_path: Path, rows: pa.Table) -> None:
    for number in range(3):
        pq.write_table(rows.slice(number * 1000, 1000), tmp_path / f"{number}.parquet", row_group_size=300)
    dataset = ds.dataset(tmp_path)
    assert read(open_table(dataset, where="length_cm < 10"))[KEEP].to_pylist().count(True) == 10
    filtered = open_table(dataset.filter(pc.field("length_cm") >= 2990))
    assert read(filtered)["length_cm"].to_pylist() == [float(value) for value in range(2990, 3000)]
    (tmp_path / "1.parquet").write_bytes(b"broken")
    with pytest.raises(SourceError, match=r"1\.parquet cannot be read"):
        read(open_table(dataset))


def test_datasets_with_partitions_and_files_that_differ(tmp_path: Path, rows: pa.Table) -> None:
    parts = [(1, rows.slice(0, 500)), (2, rows.slice(500, 300).drop_columns(["scanner"]))]
    for number, part in parts:
        (tmp_path / f"day={number}").mkdir()
        pq.write_table(part, tmp_path / f"day={number}" / "a.parquet", row_group_size=200)
    fields = [("length_cm", pa.float64()), ("weight_kg", pa.float64()), ("scanner", pa.string()), ("day", pa.int8())]
    dataset = ds.dataset(tmp_path, schema=pa.schema(fields), partitioning="hive")
    whole = dataset.to_table()
    assert read(open_table(dataset)).equals(whole) and whole["scanner"].null_count == 300
    assert read(open_table(dataset), ["day", "weight_kg"]).equals(whole.select(["day", "weight_kg"]))
    assert sum(batch.num_rows for _, batch in open_table(dataset).scan([])) == 800
    for condition in (pc.field("day") == 2, pc.field("length_cm") > 450, pc.field("scanner") == "A1"):
        found = read(open_table(dataset.filter(condition)), ["length_cm"])
        assert found.equals(dataset.filter(condition).to_table(columns=["length_cm"]))


def test_datasets_of_other_formats(tmp_path: Path) -> None:
    (tmp_path / "a.csv").write_text("x,y\n1,2.5\n3,4.5\n")
    assert read(open_table(ds.dataset(tmp_path, format="csv")), ["y"])["y"].to_pylist() == [2.5, 4.5]


def test_opening_a_frame_imports_no_other_library() -> None:
    import subprocess
    import sys

    code = (
        "import sys, numpy as np\nfrom drumlin.tables import open_table\nopen_table(np.zeros((3, 2)))\n"
        "print([m for m in ('pandas', 'polars', 'duckdb', 'pyarrow.dataset', 'tqdm') if m in sys.modules])"
    )
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "[]"
