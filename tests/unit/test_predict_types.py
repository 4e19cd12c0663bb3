"""What `predict` carries along is as it was: types of every kind, fields and their metadata, row groups, codecs."""

from __future__ import annotations

import decimal
import os
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin

N = 300
ADDED = ["component", "responsibility", "runner_up", "log_density"]
WHOLE = pa.array(range(N), pa.int64())


def dictionary(index: pa.DataType, value: pa.DataType) -> pa.Array:
    return pa.array(["bag", None, "box"] * 100).dictionary_encode().cast(pa.dictionary(index, value))


TEXT = ["a", None, "é" * 20] * 100
BYTES = [b"abc", None, b"xyz"] * 100
MONEY = [decimal.Decimal("1.25"), None, decimal.Decimal(-7)] * 100
KINDS: dict[str, pa.Array] = {
    "string": pa.array(TEXT),
    "large_string": pa.array(TEXT, pa.large_string()),
    "string_view": pa.array(TEXT, pa.string_view()),
    "binary": pa.array(BYTES),
    "large_binary": pa.array(BYTES, pa.large_binary()),
    "fixed_binary": pa.array(BYTES, pa.binary(3)),
    "dictionary": dictionary(pa.int8(), pa.string()),
    "time_zone": WHOLE.cast(pa.timestamp("us", "Europe/Helsinki")),
    "nanoseconds": WHOLE.cast(pa.timestamp("ns")),
    "date32": WHOLE.cast(pa.int32()).cast(pa.date32()),
    "time32": WHOLE.cast(pa.int32()).cast(pa.time32("ms")),
    "duration": WHOLE.cast(pa.duration("ms")),
    "decimal32": pa.array(MONEY, pa.decimal32(5, 2)),
    "decimal128": pa.array(MONEY, pa.decimal128(12, 3)),
    "decimal256": pa.array(MONEY, pa.decimal256(50, 3)),
    "list": pa.array([[1.0, 2.0], None, []] * 100, pa.list_(pa.float32())),
    "large_list": pa.array([[1, 2], None, []] * 100, pa.large_list(pa.int8())),
    "fixed_list": pa.array([[1, 2], None, [3, 4]] * 100, pa.list_(pa.int16(), 2)),
    "struct": pa.array(
        [{"a": 1, "b": ["x"]}, None, {"a": None, "b": []}] * 100,
        pa.struct([("a", pa.int8()), ("b", pa.list_(pa.string()))]),
    ),
    "map": pa.array([[("k", 1)], None, []] * 100, pa.map_(pa.string(), pa.int32())),
    "boolean": pa.array([True, None, False] * 100),
    "float16": pa.array(np.arange(N).astype(np.float16)),
    "uint64": pa.array([2**64 - 1] * N, pa.uint64()),
    "null": pa.nulls(N),
    "uuid": pa.ExtensionArray.from_storage(
        pa.uuid(), pa.array([bytes([i % 256] * 16) for i in range(N)], pa.binary(16))
    ),
    "dots.and spaces": pa.array([1] * N, pa.int8()),
}


@pytest.fixture(scope="module")
def source(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A file with a column of each kind, metadata on the table and on fields, a field without nulls, two codecs."""
    random = np.random.default_rng(0)
    fields = [pa.field("x", pa.float64(), nullable=False), pa.field("y", pa.float64(), metadata={"unit": "cm"})]
    fields += [pa.field(name, array.type, metadata={"kind": name}) for name, array in KINDS.items()]
    arrays = [pa.array(random.normal(size=N)), pa.array(random.normal(size=N)), *KINDS.values()]
    path = tmp_path_factory.mktemp("types") / "in.parquet"
    table = pa.Table.from_arrays(arrays, schema=pa.schema(fields, metadata={"owner": "depot"}))
    codecs = {name: "zstd" for name in table.column_names}
    with pq.ParquetWriter(path, table.schema, compression=codecs | {"x": "gzip"}, use_dictionary=["string"]) as writer:
        for start, rows in ((0, 128), (128, 0), (128, 172)):  # one row group without rows
            writer.write_table(table.slice(start, rows))
    return path


@pytest.fixture(scope="module")
def mixture() -> drumlin.Mixture:
    return drumlin.Mixture([0.5, 0.5], [[0.0, 0.0], [1.0, 1.0]], [np.eye(2)] * 2, columns=["x", "y"])


def groups(path: Path | str) -> list[int]:
    metadata = pq.read_metadata(path)
    return [metadata.row_group(at).num_rows for at in range(metadata.num_row_groups)]


@pytest.mark.parametrize("options", [{}, {"outputs": ["responsibilities"], "prefix": "new_"}, {"key": "string"}])
def test_every_kind_of_column_is_carried_as_it_was(
    source: Path, mixture: drumlin.Mixture, tmp_path: Path, options: dict[str, Any]
) -> None:
    to = tmp_path / "out.parquet"
    drumlin.predict(source, mixture, to, **options)
    before, after = pq.read_table(source), pq.read_table(to)
    kept = after.select(before.column_names)
    assert kept.schema.equals(before.schema, check_metadata=True)
    assert kept.equals(before)
    assert [size for size in groups(source) if size] == groups(to) == [128, 172]
    codecs = [pq.read_metadata(path).row_group(0) for path in (source, to)]
    shared = {one.path_in_schema: one.compression for one in map(codecs[0].column, range(codecs[0].num_columns))}
    written = {one.path_in_schema: one.compression for one in map(codecs[1].column, range(codecs[1].num_columns))}
    assert shared == {name: written[name] for name in shared} and shared["x"] == "GZIP" != shared["y"] == "ZSTD"
    prefix = options.get("prefix", "")
    assert written[prefix + "log_density"] == "ZSTD"
    added = after.column_names[len(before.column_names) :]
    assert added[:4] == [prefix + name for name in ADDED]
    if "outputs" in options:
        assert after.schema.field("new_responsibilities").type == pa.list_(pa.field("element", pa.float32()), 2)


def test_carry_keeps_the_metadata_of_what_is_kept(source: Path, mixture: drumlin.Mixture, tmp_path: Path) -> None:
    to = tmp_path / "out.parquet"
    drumlin.predict(source, mixture, to, carry=["y", "struct"], key="uint64")
    found = pq.read_schema(to)
    assert found.names == ["y", "struct", "uint64", *ADDED]
    assert found.field("y").metadata == {b"unit": b"cm"} and found.metadata[b"owner"] == b"depot"


def test_a_file_of_pandas_stays_one_of_pandas(mixture: drumlin.Mixture, tmp_path: Path) -> None:
    import pandas

    frame = pandas.DataFrame(
        {"x": np.arange(9.0), "y": np.arange(9.0)}, index=pandas.Index(list("abcdefghi"), name="p")
    )
    frame.to_parquet(tmp_path / "in.parquet")
    drumlin.predict(tmp_path / "in.parquet", mixture, tmp_path / "out.parquet")
    found = pandas.read_parquet(tmp_path / "out.parquet")
    assert found[["x", "y"]].equals(frame) and list(found.columns) == ["x", "y", *ADDED]
    drumlin.predict(tmp_path / "in.parquet", mixture, tmp_path / "part.parquet", carry=["y"])
    assert list(pandas.read_parquet(tmp_path / "part.parquet").columns) == ["y", *ADDED]


def test_files_without_rows_have_their_output_too(mixture: drumlin.Mixture, tmp_path: Path) -> None:
    (tmp_path / "in").mkdir()
    for name, rows in (("a", 0), ("b", 5), ("c", 0), ("d", 7), ("e", 0)):
        table = pa.table({"x": np.arange(float(rows)), "y": np.arange(float(rows))})
        pq.write_table(table.replace_schema_metadata({"file": name}), tmp_path / "in" / f"{name}.parquet")
    found = drumlin.predict(tmp_path / "in", mixture, tmp_path / "out")
    assert [os.path.basename(path) for path in found.files] == [f"{name}.parquet" for name in "abcde"]
    assert [pq.read_metadata(path).num_rows for path in found.files] == [0, 5, 0, 7, 0]
    assert [pq.read_schema(path).metadata[b"file"] for path in found.files] == [b"a", b"b", b"c", b"d", b"e"]
    assert all(pq.read_schema(path).names == ["x", "y", *ADDED] for path in found.files)


def test_a_column_that_some_files_lack_is_null_there(mixture: drumlin.Mixture, tmp_path: Path) -> None:
    (tmp_path / "in").mkdir()
    both = {"x": np.arange(4.0), "y": np.arange(4.0)}
    pq.write_table(pa.table({**both, "temp": pa.array([1, 2, 3, 4], pa.int16())}), tmp_path / "in" / "a.parquet")
    pq.write_table(pa.table(both), tmp_path / "in" / "b.parquet")
    drumlin.predict(tmp_path / "in", mixture, tmp_path / "all.parquet")
    assert pq.read_table(tmp_path / "all.parquet")["temp"].to_pylist() == [1, 2, 3, 4, None, None, None, None]
    found = drumlin.predict(tmp_path / "in", mixture, tmp_path / "out")
    assert [pq.read_table(path)["temp"].null_count for path in found.files] == [0, 4]
