"""Rows in Parquet files."""

from __future__ import annotations

import itertools
import os
import pickle
import subprocess
import sys
import tracemalloc
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.dataset as ds
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin.errors import OptionError, SchemaError, SourceError
from drumlin.tables import BATCH_ROWS, KEEP, Table, open_table


def read(table: Table, columns: list[str] | None = None, **how: Any) -> pa.Table:
    """All rows of a scan, with their row numbers in the column `row`."""
    batches = []
    for first, batch in table.scan(columns, **how):
        assert 0 < batch.num_rows <= BATCH_ROWS
        rows = pa.array(np.arange(first, first + batch.num_rows))
        batches.append(batch.append_column("row", rows))
    return pa.Table.from_batches(batches)


@pytest.fixture
def scans(tmp_path: Path) -> Path:
    """Three files of uneven size, five columns, 1000 rows in all."""
    rng = np.random.default_rng(3)
    whole = pa.table(
        {
            "parcel": [f"p{i}" for i in range(1000)],
            "length_cm": rng.normal(40, 9, 1000),
            "weight_kg": rng.normal(3, 1, 1000).astype(np.float32),
            "count": np.arange(1000, dtype=np.int32),
            "belt speed": rng.uniform(1, 2, 1000),
        }
    )
    for number, (first, rows) in enumerate([(0, 100), (100, 7), (107, 893)]):
        pq.write_table(whole.slice(first, rows), tmp_path / f"scan{number}.parquet", row_group_size=64)
    return tmp_path


def test_all_rows_come_in_order(scans: Path) -> None:
    table = open_table(scans)
    assert table.row_count == 1000 and table.rereadable and not table.in_memory
    assert [Path(file).name for file in table.files] == ["scan0.parquet", "scan1.parquet", "scan2.parquet"]
    for _ in range(2):
        rows = read(table)
        assert rows["row"].to_pylist() == list(range(1000)) == rows["count"].to_pylist()
        assert rows.schema.field("weight_kg").type == pa.float32()
    assert read(table, ["weight_kg", "count"]).column_names == ["weight_kg", "count", "row"]


def test_units_are_the_row_groups(scans: Path) -> None:
    units = open_table(scans).units()
    assert [unit.rows for unit in units] == [64, 36, 7, *[64] * 13, 61]
    assert [unit.first_row for unit in units] == list(np.cumsum([0, *[unit.rows for unit in units[:-1]]]))
    assert all(unit.bytes > 0 for unit in units) and units[2].path.endswith("scan1.parquet")


@pytest.mark.parametrize(
    "ranges", [[(0, 1)], [(63, 65)], [(0, 100), (100, 108)], [(5, 5)], [(990, 2000)], [(3, 4), (700, 701)]]
)
def test_ranges_give_just_these_rows(scans: Path, ranges: list[tuple[int, int]]) -> None:
    batches = list(open_table(scans, where="count >= 0").scan(["count"], ranges))
    got = [row for first, batch in batches for row in range(first, first + batch.num_rows)]
    assert got == [row for first, end in ranges for row in range(first, min(end, 1000))]
    assert [value for _, batch in batches for value in batch["count"].to_pylist()] == got


def test_ranges_out_of_order_are_refused(scans: Path) -> None:
    with pytest.raises(ValueError, match="ascend"):
        open_table(scans).scan(["count"], [(10, 20), (5, 8)])


def test_a_row_group_that_is_not_asked_for_is_not_read(scans: Path) -> None:
    data = bytearray((scans / "scan2.parquet").read_bytes())
    start = pq.read_metadata(scans / "scan2.parquet").row_group(5).column(3).data_page_offset
    data[start : start + 60] = b"\xff" * 60
    (scans / "scan2.parquet").write_bytes(data)
    table = open_table(scans)
    assert read(table, ["count"], ranges=[(0, 300)]).num_rows == 300
    with pytest.raises(SourceError, match=r"scan2\.parquet \(row group 5\) cannot be read as Parquet"):
        read(table, ["count"])


def test_where_marks_rows_and_keeps_row_numbers(scans: Path) -> None:
    table = open_table(scans, where="`belt speed` > 1.5 and count != 500")
    rows = read(table, ["length_cm"])
    assert rows.column_names == ["length_cm", KEEP, "row"] and rows["row"].to_pylist() == list(range(1000))
    plain = read(open_table(scans), ["belt speed", "count"]).to_pydict()
    wanted = [speed > 1.5 and count != 500 for speed, count in zip(plain["belt speed"], plain["count"], strict=True)]
    assert rows[KEEP].to_pylist() == wanted
    assert KEEP not in table.schema.names


def test_extra_expressions_become_columns(scans: Path) -> None:
    import pyarrow.compute as pc

    rows = read(open_table(scans), ["length_cm"], extra={"__held__": pc.field("count") < 10})
    assert sum(rows["__held__"].to_pylist()) == 10 and rows.column_names == ["length_cm", "__held__", "row"]
    with pytest.raises(OptionError, match="held: .* not true or false"):
        open_table(scans).scan(["length_cm"], extra={"__held__": pc.field("count") + 1})


def test_no_columns_still_gives_rows(scans: Path) -> None:
    assert sum(batch.num_rows for _, batch in open_table(scans).scan([])) == 1000


def test_missing_columns_are_named(scans: Path) -> None:
    with pytest.raises(SchemaError, match="no column 'lenght_cm'. Did you mean 'length_cm'"):
        open_table(scans).scan(["lenght_cm"])
    with pytest.raises(OptionError, match="knows no column 'cuont'. Did you mean 'count'"):
        open_table(scans, where="cuont > 1")


def test_folders_become_columns(tmp_path: Path) -> None:
    for day, scanner, rows in [(9, "B2", 2), (10, "A1", 3)]:
        folder = tmp_path / f"day={day}" / f"scanner={scanner}"
        folder.mkdir(parents=True)
        pq.write_table(pa.table({"x": np.arange(rows, dtype=np.float64)}), folder / "part.parquet")
    table = open_table(tmp_path, where="scanner == 'A1'")
    assert table.partitions == ["day", "scanner"]
    assert table.schema == pa.schema({"x": pa.float64(), "day": pa.int32(), "scanner": pa.string()})
    rows = read(table)
    assert rows["day"].to_pylist() == [9, 9, 10, 10, 10] and rows[KEEP].to_pylist() == [False, False, True, True, True]
    assert read(open_table(tmp_path), ["day"])["day"].to_pylist() == [9, 9, 10, 10, 10]


def test_folders_are_filtered_by_and_carried_but_never_proposed(tmp_path: Path) -> None:
    random = np.random.default_rng(4)
    for day, scanner in [(9, "B2"), (10, "A1"), (10, "__HIVE_DEFAULT_PARTITION__")]:
        folder = tmp_path / "in" / f"day={day}" / f"scanner={scanner}"
        folder.mkdir(parents=True)
        pq.write_table(pa.table({"x": random.normal(size=40), "y": random.normal(size=40)}), folder / "part.parquet")
    rows = tmp_path / "in"
    with pytest.raises(OptionError, match=r'paste: columns=\["x", "y"\]'):
        drumlin.fit(rows, 1)
    assert set(drumlin.profile(rows).suggested_columns) == {"x", "y"}
    model = drumlin.fit(rows, 1, columns=["x", "y"], where="day == 10 and scanner is null")
    assert model.rows == 40
    found = drumlin.predict(rows, model).read_all()
    assert found["day"].to_pylist() == [9] * 40 + [10] * 80
    assert sorted(set(found["scanner"].to_pylist()), key=str) == ["A1", "B2", None]
    drumlin.predict(rows, model, tmp_path / "out.parquet", where="scanner in ('A1', 'B2')")
    written = pq.read_table(tmp_path / "out.parquet", partitioning=None)
    assert written["day"].type == pa.int32() and written["scanner"].to_pylist() == ["B2"] * 40 + ["A1"] * 40


def test_numbers_of_different_width_are_widened_with_a_note(tmp_path: Path) -> None:
    pq.write_table(
        pa.table({"x": pa.array([1, 2], pa.int16()), "y": pa.array([1.5], pa.float32()).take([0, 0])}),
        tmp_path / "a.parquet",
    )
    pq.write_table(pa.table({"x": pa.array([3.5]), "y": pa.array([0.1])}), tmp_path / "b.parquet")
    table = open_table(tmp_path)
    assert [str(type_) for type_ in table.schema.types] == ["double", "double"]
    assert read(table)["x"].to_pylist() == [1.0, 2.0, 3.5]
    assert len(table.notes) == 2 and "'x' is int16 in" in table.notes[0] and "read as double" in table.notes[0]


def test_whole_numbers_too_long_for_a_float_are_rounded_when_widened(tmp_path: Path) -> None:
    pq.write_table(pa.table({"x": [2**60 + 1]}), tmp_path / "a.parquet")
    pq.write_table(pa.table({"x": [0.5]}), tmp_path / "b.parquet")
    pq.write_table(pa.table({"x": [Decimal("1.25")]}), tmp_path / "c.parquet")
    assert read(open_table(tmp_path))["x"].to_pylist() == [float(2**60), 0.5, 1.25]


def test_columns_that_some_files_lack_are_null_there_and_named_when_needed(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    pq.write_table(pa.table({"x": [1.0], "temp": pa.array([2], pa.int8()), "day": ["a"]}), tmp_path / "a.parquet")
    pq.write_table(pa.table({"x": [1.0], "day": [3]}), tmp_path / "b.parquet")
    pq.write_table(pa.table({"x": [5.0], "day": [3]}), tmp_path / "c.parquet")
    with caplog.at_level("INFO", "drumlin"):
        table = open_table(tmp_path)
    assert table.schema.names == ["x", "temp"] and set(table.left_out) == {"temp", "day"}
    assert len(table.notes) == 2 == len(caplog.messages) and "which lacks it (2 of 3 files" in table.notes[0]
    assert read(table)["temp"].to_pylist() == [2, None, None] and table.schema.field("temp").type == pa.int8()
    lacking = r"'temp' cannot be read: .*a\.parquet has it, but .*b\.parquet does not \(2 of 3"
    with pytest.raises(SchemaError, match=lacking):
        table.require(["x", "temp"])
    for where in ("temp > 1", "x > 0 or temp is null"):
        with pytest.raises(SchemaError, match=lacking):
            open_table(tmp_path, where=where)
    with pytest.raises(
        SchemaError, match=r"'day' cannot be read: it is string in .*a\.parquet but int64 in .*b\.parquet"
    ):
        table.scan(["day"])


def test_lacking_columns_in_every_verb(tmp_path: Path) -> None:
    rows = np.random.default_rng(2).normal(size=(60, 2))
    pq.write_table(pa.table({"x": rows[:30, 0], "y": rows[:30, 1], "temp": rows[:30, 0]}), tmp_path / "a.parquet")
    pq.write_table(pa.table({"x": rows[30:, 0], "y": rows[30:, 1]}), tmp_path / "b.parquet")
    lacking = r"'temp' cannot be read: .*a\.parquet has it, but .*b\.parquet does not"
    with pytest.raises(OptionError, match=r'paste: columns=\["x", "y"\]'):
        drumlin.fit(tmp_path, 1)
    for options in (
        {"columns": ["x", "temp"]},
        {"columns": ["x"], "key": "temp"},
        {"columns": ["x"], "where": "temp>1"},
    ):
        with pytest.raises(SchemaError, match=lacking):
            drumlin.fit(tmp_path, 1, **options)
    model = drumlin.fit(tmp_path, 1, columns=["x", "y"])
    assert any("'temp' is null in the rows of" in note for note in model.notes)
    found = drumlin.predict(tmp_path, model).read_all()
    assert found["temp"].null_count == 30 and found["component"].null_count == 0
    assert drumlin.predict(tmp_path, model, carry=["temp"]).schema.names[0] == "temp"
    named = drumlin.Mixture([1.0], [[0.0, 0.0]], [np.eye(2)], columns=["x", "temp"])
    for run in (lambda: drumlin.predict(tmp_path, named), lambda: named.assign(tmp_path)):
        with pytest.raises(SchemaError, match=lacking):
            run()
    with pytest.raises(SchemaError, match=lacking):
        drumlin.predict(tmp_path, model, key="temp")
    profile = drumlin.profile(tmp_path)
    assert [one.name for one in profile.columns] == ["x", "y"] and "'temp'" in " ".join(profile.notes)


@pytest.mark.parametrize("order", list(itertools.permutations(range(4)))[::5])
def test_widths_in_any_order(tmp_path: Path, order: tuple[int, ...]) -> None:
    kinds = [pa.int32(), pa.int64(), pa.float32(), pa.float64()]
    for place, kind in enumerate(order):
        pq.write_table(pa.table({"x": pa.array([place, place + 1], kinds[kind])}), tmp_path / f"{place}.parquet")
    table = open_table(tmp_path)
    assert table.schema.field("x").type == pa.float64() and "it is read as double" in table.notes[0]
    assert read(table)["x"].to_pylist() == [0, 1, 1, 2, 2, 3, 3, 4]


def test_files_of_another_schema_are_refused(tmp_path: Path) -> None:
    pq.write_table(pa.table({"x": [1.0]}), tmp_path / "a.parquet")
    pq.write_table(pa.table({"y": [1.0]}), tmp_path / "b.parquet")
    with pytest.raises(SchemaError, match="no column in common"):
        open_table(tmp_path)


def test_a_file_without_rows_is_not_read_with_a_note(tmp_path: Path) -> None:
    pq.write_table(pa.table({"x": [1.0, 2.0]}), tmp_path / "a.parquet")
    pq.write_table(pa.table({"x": pa.array([], pa.float64())}), tmp_path / "b.parquet")
    table = open_table(tmp_path)
    assert table.row_count == 2 and len(table.files) == 2 and "b.parquet has no rows" in table.notes[0]


def test_files_without_rows_alone_make_an_empty_table(tmp_path: Path) -> None:
    pq.write_table(pa.table({"x": pa.array([], pa.float64())}), tmp_path / "b.parquet")
    table = open_table(tmp_path)
    assert table.row_count == 0 and list(table.scan()) == [] and table.schema.names == ["x"]


@pytest.mark.parametrize("content", [b"", b"not a parquet file at all", b"PAR1" + b"\x00" * 40 + b"PAR1"])
def test_a_damaged_file_is_named(tmp_path: Path, content: bytes) -> None:
    pq.write_table(pa.table({"x": [1.0]}), tmp_path / "a.parquet")
    (tmp_path / "b.parquet").write_bytes(content)
    with pytest.raises(SourceError, match=r"b\.parquet.*[Mm]ake it anew") as caught:
        open_table(tmp_path)
    assert isinstance(caught.value, OSError) and caught.value.facts["file"].endswith("b.parquet")


def test_a_truncated_file_is_named(scans: Path) -> None:
    data = (scans / "scan2.parquet").read_bytes()
    (scans / "scan2.parquet").write_bytes(data[: len(data) // 2])
    with pytest.raises(SourceError, match=r"scan2\.parquet"):
        open_table(scans)


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read everything")
def test_a_file_that_may_not_be_read_is_named(scans: Path) -> None:
    (scans / "scan1.parquet").chmod(0)
    with pytest.raises(SourceError, match=r"scan1\.parquet may not be read"):
        open_table(scans)


def test_a_file_that_changes_is_found_out(scans: Path) -> None:
    table = open_table(scans)
    read(table)
    pq.write_table(pa.table({"length_cm": [1.0]}), scans / "scan1.parquet")
    with pytest.raises(SourceError, match=r"scan1\.parquet has changed"):
        read(table)
    (scans / "scan1.parquet").unlink()
    with pytest.raises(SourceError, match=r"scan1\.parquet has gone"):
        read(table)


def test_a_file_that_changes_while_it_is_read_is_found_out(scans: Path) -> None:
    table = open_table(scans)
    scan = table.scan(["count"])
    next(scan)
    os.utime(scans / "scan0.parquet", (1, 1))
    with pytest.raises(SourceError, match=r"scan0\.parquet has changed"):
        list(scan)


def test_the_fingerprint_knows_sizes_but_no_paths_or_times(
    scans: Path, tmp_path_factory: pytest.TempPathFactory
) -> None:
    before = open_table(scans).fingerprint
    other = tmp_path_factory.mktemp("other") / "moved"
    scans.rename(other)
    os.utime(other / "scan0.parquet", (1, 1))
    assert open_table(other).fingerprint == before != ""
    pq.write_table(pa.table({"length_cm": [1.0], "count": [1]}), other / "scan9.parquet")
    assert open_table(other).fingerprint != before


def test_labels_say_what_was_named(scans: Path) -> None:
    assert open_table(scans / "scan0.parquet").label == str(scans / "scan0.parquet")
    assert open_table(f"{scans}/*.parquet").label == f"{scans}/*.parquet (3 files)"
    assert open_table(scans).label == f"{scans} (3 files)"
    assert open_table([scans / "scan1.parquet", scans / "scan0.parquet"]).label.endswith("scan1.parquet, ... (2 files)")


def test_a_table_can_be_sent_to_another_process(scans: Path) -> None:
    table = open_table(scans, where="count < 5")
    again = pickle.loads(pickle.dumps(table))
    assert read(again).equals(read(table))
    message = pickle.dumps(table)
    pq.write_table(pa.table({"count": [1]}), scans / "scan1.parquet")
    with pytest.raises(SourceError, match=r"scan1\.parquet has changed"):
        read(pickle.loads(message))


def test_names_with_dots_and_dictionaries_come_through(tmp_path: Path) -> None:
    kinds = pa.array(["bag", "tube", "bag"]).dictionary_encode()
    pq.write_table(pa.table({"a": [1.0, 2.0, 3.0], "a.b": [4.0, 5.0, 6.0], "kind": kinds}), tmp_path / "x.parquet")
    table = open_table(tmp_path / "x.parquet", where="kind == 'bag' and `a.b` > 4.5")
    assert read(table, ["a"])[KEEP].to_pylist() == [False, False, True]
    assert read(table, ["a.b", "kind"])["a.b"].to_pylist() == [4.0, 5.0, 6.0]
    assert pa.types.is_dictionary(read(table, ["kind"]).schema.field("kind").type)


def test_a_column_named_like_the_inner_one_is_refused(tmp_path: Path) -> None:
    pq.write_table(pa.table({KEEP: [1.0]}), tmp_path / "x.parquet")
    with pytest.raises(SchemaError, match="used inside drumlin"):
        open_table(tmp_path)


@pytest.mark.parametrize("kind", ["path", "dataset", "filtered"])
def test_memory_does_not_grow_with_the_row_group(tmp_path: Path, kind: str) -> None:
    rows = 1_000_000
    columns = {f"x{j}": np.random.default_rng(j).normal(size=rows) for j in range(4)}
    pq.write_table(pa.table(columns), tmp_path / "one.parquet", row_group_size=rows)
    columns.clear()
    dataset = ds.dataset(tmp_path)
    sources = {"path": tmp_path, "dataset": dataset, "filtered": dataset.filter(pc.field("x0") > -9)}
    table = open_table(sources[kind])
    before, most, met = pa.total_allocated_bytes(), 0, 0
    for _, batch in table.scan():
        met += batch.num_rows
        most = max(most, pa.total_allocated_bytes() - before)
    assert met == rows and most < 20e6  # decoded, the row group alone has 32 MB


@pytest.mark.slow
def test_a_row_group_of_300_megabytes(tmp_path: Path) -> None:
    """Read page by page it takes a tenth of what it takes decoded."""
    code = (
        "import sys, threading, time, pyarrow.parquet as pq\n"
        "from drumlin.tables import open_table\n"
        "def held():\n"
        "    return int(open('/proc/self/status').read().split('VmRSS:')[1].split()[0]) / 1024\n"
        "table = open_table(sys.argv[1])\nfirst = most = held()\n"
        "for _ in table.scan():\n    most = max(most, held())\n"
        "print(most - first)\nmost = held()\n"
        "whole = pq.read_table(sys.argv[1])\nprint(held() - most)\n"
    )
    rows = 10_000_000
    columns = {f"x{j}": np.random.default_rng(j).normal(size=rows) for j in range(4)}
    pq.write_table(pa.table(columns), tmp_path / "one.parquet", row_group_size=rows)
    columns.clear()
    done = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path / "one.parquet")], capture_output=True, text=True, check=True
    )
    streamed, whole = (float(line) for line in done.stdout.split())
    assert streamed < 80 and whole > 200


def many_files(folder: Path, count: int) -> None:
    """`count` names of one small file of 20 columns."""
    pq.write_table(pa.table({f"x{j}": np.arange(50.0) for j in range(20)}), folder / "0.parquet")
    for number in range(1, count):
        os.link(folder / "0.parquet", folder / f"{number}.parquet")


def test_of_many_files_little_is_kept(tmp_path: Path) -> None:
    many_files(tmp_path, 2000)
    open_files = len(os.listdir("/proc/self/fd"))
    tracemalloc.start()
    try:
        table = open_table(tmp_path)
        kept, _ = tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    assert kept < 2000 * 1000 and table.row_count == 100_000
    assert len(os.listdir("/proc/self/fd")) <= open_files + 2
    scan = table.scan(["x0"])
    assert sum(batch.num_rows for _, batch in itertools.islice(scan, 500)) == 25_000
    assert len(os.listdir("/proc/self/fd")) <= open_files + 4
    scan.close()


@pytest.mark.slow
def test_twenty_thousand_files(tmp_path: Path) -> None:
    many_files(tmp_path, 20_000)
    code = (
        "import os, sys, time\nfrom drumlin.tables import open_table\n"
        "def held():\n"
        "    return int(open('/proc/self/status').read().split('VmRSS:')[1].split()[0]) / 1024\n"
        "open_table(sys.argv[1] + '/0.parquet')\nfirst, files = held(), len(os.listdir('/proc/self/fd'))\n"
        "began = time.perf_counter()\ntable = open_table(sys.argv[1])\nprint(time.perf_counter() - began)\n"
        "rows = sum(batch.num_rows for _, batch in table.scan(['x0']))\n"
        "print(held() - first, rows, len(os.listdir('/proc/self/fd')) - files)\n"
    )
    done = subprocess.run([sys.executable, "-c", code, str(tmp_path)], capture_output=True, text=True, check=True)
    seconds, grown, rows, files = (float(word) for word in done.stdout.split())
    assert rows == 1_000_000 and files <= 2
    assert grown < 40 and seconds < 60


def test_the_same_size_and_time_but_another_footer(tmp_path: Path) -> None:
    path = tmp_path / "a.parquet"
    pq.write_table(pa.table({"x": [1.0, 2.0]}), path)
    table, before = open_table(tmp_path), os.stat(path)
    pq.write_table(pa.table({"x": [3.0, 2.0]}), path)
    assert os.stat(path).st_size == before.st_size
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns))
    with pytest.raises(SourceError, match=r"a\.parquet has changed"):
        read(table)


@pytest.mark.parametrize("verb", ["fit", "predict"])
def test_a_file_that_changes_between_passes_ends_every_verb(scans: Path, verb: str) -> None:
    def touch(event: dict[str, Any]) -> None:
        os.utime(scans / "scan2.parquet", (1, 1))

    columns = ["length_cm", "weight_kg"]
    if verb == "fit":
        with pytest.raises(SourceError, match=r"scan2\.parquet has changed"):
            drumlin.fit(scans, 2, columns=columns, progress=touch, engine="processes", threads=1, tries=1)
        return
    model = drumlin.fit(scans, 1, columns=columns)
    stream = drumlin.predict(scans, model)
    os.utime(scans / "scan2.parquet", (1, 1))
    with pytest.raises(SourceError, match=r"scan2\.parquet has changed"):
        stream.read_all()
    with pytest.raises(SourceError, match="has changed"):
        drumlin.predict(scans, model, scans.parent / "out.parquet", progress=touch_once(scans / "scan0.parquet"))
    assert not [name for name in os.listdir(scans.parent) if "out.parquet" in name]


def touch_once(path: Path) -> Any:
    def touch(event: dict[str, Any]) -> None:
        os.utime(path, (2, 2))

    return touch
