"""Prediction: what is added, what is carried along, and that targets are whole or not there."""

import decimal
import os
import threading
import time

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin.predicting import target as target_module
from drumlin.predicting.keys import KeyHash
from drumlin.tables.ahead import ReadAhead

ADDED = ["component", "responsibility", "runner_up", "log_density"]


def table(n=1000, seed=0):
    random = np.random.default_rng(seed)
    far = np.arange(n) % 3 == 0
    columns = {
        "parcel": [f"p{seed}-{i:06d}" for i in range(n)],
        "a": random.normal(size=n) + 8.0 * far,
        "b": pa.array(random.normal(size=n).astype(np.float32)),
        "day": pa.array(np.arange(n, dtype=np.int32) % 31).cast(pa.date32()),
        "kind": pa.array(["bag", "box"] * (n // 2) + ["tube"] * (n % 2)).dictionary_encode(),
    }
    return pa.table(columns).replace_schema_metadata({"owner": "depot"})


@pytest.fixture(scope="module")
def model():
    return drumlin.fit(table(), 2, columns=["b", "a"])


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "in").mkdir()
    for at, (n, codec, group) in enumerate([(1000, "zstd", 400), (700, "snappy", 700), (12, "none", 5)]):
        pq.write_table(table(n, at), tmp_path / "in" / f"f{at}.parquet", row_group_size=group, compression=codec)
    return tmp_path


def names_in(folder):
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*") if path.is_file())


class TestStream:
    def test_columns_and_values(self, model):
        rows = table()
        found = drumlin.predict(rows, model).read_all()
        assert found.column_names == [*rows.column_names, *ADDED]
        assert [str(found.schema.field(name).type) for name in ADDED] == ["int32", "float", "int32", "double"]
        assert found.select(rows.column_names).equals(rows)
        values = np.column_stack([rows["b"].to_numpy(), rows["a"].to_numpy()]).astype(float)
        np.testing.assert_array_equal(found["component"].to_numpy(), model.assign(values))
        np.testing.assert_array_equal(found["log_density"].to_numpy(), model.log_density(values))
        tau = model.responsibilities(values)
        np.testing.assert_allclose(found["responsibility"].to_numpy(), tau.max(axis=1), rtol=1e-6)
        assert (found["runner_up"].to_numpy() != found["component"].to_numpy()).all()

    def test_an_array_is_in_the_order_of_the_model(self, model):
        values = np.random.default_rng(0).normal(size=(10, 2))
        assert drumlin.predict(values, model).read_all().column_names == ["b", "a", *ADDED]
        with pytest.raises(drumlin.SchemaError, match="3 columns"):
            drumlin.predict(np.zeros((1, 3)), model)

    def test_a_mixture_and_a_file_work_too(self, model, tmp_path):
        expected = drumlin.predict(table(), model).read_all()
        assert drumlin.predict(table(), model.mixture).read_all().equals(expected)
        assert drumlin.predict(table(), model.save(tmp_path / "m.drumlin")).read_all().equals(expected)

    def test_responsibilities_on_request(self, model):
        found = drumlin.predict(table(), model, outputs="responsibilities").read_all()
        column = found["responsibilities"].combine_chunks()
        assert column.type.list_size == 2 and str(column.type.value_type) == "float"
        sums = column.flatten().to_numpy().reshape(-1, 2).sum(axis=1)
        np.testing.assert_allclose(sums, 1.0, rtol=1e-6)

    def test_one_component_has_no_runner_up(self):
        values = np.random.default_rng(0).normal(size=(10, 1))
        found = drumlin.predict(values, drumlin.fit(values, 1)).read_all()
        assert found["runner_up"].null_count == 10 and found["responsibility"].to_pylist() == [1.0] * 10

    def test_carry_and_key(self, model):
        found = drumlin.predict(table(), model, carry=["day"], key="parcel")
        assert found.schema.names == ["parcel", "day", *ADDED]
        assert drumlin.predict(table(), model, carry=[]).schema.names == ADDED
        with pytest.raises(drumlin.SchemaError, match="parcels"):
            drumlin.predict(table(), model, key="parcels")

    def test_a_clash_of_names(self, model):
        once = drumlin.predict(table(), model).read_all()
        with pytest.raises(drumlin.SchemaError, match="prefix='new_'"):
            drumlin.predict(once, model)
        again = drumlin.predict(once, model, prefix="new_").read_all()
        assert again["new_component"].equals(again["component"])
        assert drumlin.predict(once, model, carry=["a"]).schema.names == ["a", *ADDED]

    def test_where_leaves_rows_out(self, model):
        found = drumlin.predict(table(), model, where="a > 4 and kind == 'bag'").read_all()
        values = table().to_pandas()
        assert found["parcel"].to_pylist() == values[(values.a > 4) & (values.kind == "bag")].parcel.tolist()

    def test_it_is_lazy_and_can_be_left(self, model):
        opened, closed = [], threading.Event()

        def batches():
            try:
                for at in range(1000):
                    opened.append(at)
                    yield from table(100, at).to_batches()
            finally:
                closed.set()

        schema = table().schema
        stream = drumlin.predict(pa.RecordBatchReader.from_batches(schema, batches()), model)
        assert stream.read_next_batch().num_rows == 100
        time.sleep(0.3)
        assert len(opened) < 10
        del stream
        assert closed.wait(5.0)
        assert len(opened) < 10

    def test_it_hands_on_to_other_libraries(self, model):
        import polars as pl

        frame = pl.DataFrame(drumlin.predict(table(), model, carry=[]))
        assert frame.columns == ADDED and frame.height == 1000

    def test_an_error_of_the_source_comes_through(self, model):
        def batches():
            yield from table(100).to_batches()
            raise ZeroDivisionError("mine")

        stream = drumlin.predict(lambda: pa.RecordBatchReader.from_batches(table().schema, batches()), model)
        with pytest.raises(ZeroDivisionError, match="mine"):
            stream.read_all()

    def test_no_rows(self, model):
        found = drumlin.predict(table().slice(0, 0), model).read_all()
        assert found.num_rows == 0 and found.column_names[-4:] == ADDED

    def test_other_column_types(self):
        values = np.arange(40.0)
        model = drumlin.fit(pa.table({"x": values % 7, "y": values % 5}), 1)
        rows = pa.table(
            {
                "x": pa.array([decimal.Decimal(int(v) % 7) for v in values], pa.decimal128(10, 2)),
                "y": pa.array((values % 5).astype(np.int8)),
            }
        )
        found = drumlin.predict(rows, model).read_all()
        np.testing.assert_array_equal(
            found["log_density"].to_numpy(), model.log_density(np.column_stack([values % 7, values % 5]))
        )
        assert found["x"].type == pa.decimal128(10, 2) and found["y"].type == pa.int8()


class TestGaps:
    def gappy(self):
        rows = table().to_pandas()
        rows.loc[700, "a"] = np.nan
        rows.loc[900, "b"] = np.nan
        return pa.Table.from_pandas(rows, preserve_index=False)

    def test_refused_with_row_and_column(self, model):
        with pytest.raises(drumlin.DataError, match=r"row 700.*'a'") as caught:
            drumlin.predict(self.gappy(), model).read_all()
        assert caught.value.facts == {"column": "a", "row": 700}

    def test_complete_rows_on_request(self, model):
        found = drumlin.predict(self.gappy(), model, missing="complete-rows").read_all()
        assert found.num_rows == 1000
        for name in ADDED:
            gaps = np.flatnonzero(found[name].combine_chunks().is_null().to_numpy(zero_copy_only=False))
            assert gaps.tolist() == [700, 900]

    def test_the_model_says_how(self):
        model = drumlin.fit(self.gappy(), 2, columns=["a", "b"], missing="complete-rows", missing_codes={"*": 0.0})
        rows = pa.table({"a": [0.0, 1.0, None], "b": [1.0, 1.0, 1.0]})
        assert drumlin.predict(rows, model).read_all()["component"].null_count == 2
        with pytest.raises(drumlin.DataError, match="the code 0.0"):
            drumlin.predict(rows, model, missing="refuse").read_all()

    def test_rows_filtered_out_may_have_gaps_and_are_counted(self, model):
        with pytest.raises(drumlin.DataError, match="row 900"):
            drumlin.predict(self.gappy(), model, where="a is not null and not is_nan(a)").read_all()

    def test_infinity_names_the_row_and_the_file(self, model, tmp_path):
        values = table().set_column(1, "a", pa.array(np.where(np.arange(1000) == 950, np.inf, 1.0)))
        for at, part in enumerate([values.slice(0, 600), values.slice(600)]):
            pq.write_table(part, tmp_path / f"f{at}.parquet", row_group_size=100)
        for where in (None, "day != '1970-01-02'"):
            with pytest.raises(drumlin.DataError, match=r"row 350 \(counted from 0\) of .*f1\.parquet") as caught:
                drumlin.predict(tmp_path, model, where=where).read_all()
            assert caught.value.facts["row"] == 950


class TestFiles:
    def test_one_file_keeps_row_groups_codec_and_metadata(self, model, folder):
        source = folder / "in" / "f0.parquet"
        summary = drumlin.predict(source, model, folder / "out.parquet", key="parcel")
        assert summary.rows == 1000 and summary.files == (str(folder / "out.parquet"),)
        before, after = pq.ParquetFile(source), pq.ParquetFile(folder / "out.parquet")
        groups = [[f.metadata.row_group(i).num_rows for i in range(f.metadata.num_row_groups)] for f in (before, after)]
        assert groups[0] == groups[1] == [400, 400, 200]
        codecs = {after.metadata.row_group(0).column(i).compression for i in range(after.metadata.num_columns)}
        assert codecs == {"ZSTD"}
        assert after.schema_arrow.metadata[b"owner"] == b"depot"
        assert after.read().select(table().column_names).equals(before.read())
        assert after.read().equals(drumlin.predict(source, model).read_all())
        assert names_in(folder) == ["in/f0.parquet", "in/f1.parquet", "in/f2.parquet", "out.parquet"]

    def test_a_folder_gets_one_file_per_file(self, model, folder):
        summary = drumlin.predict(folder / "in", model, folder / "out", key="parcel", threads=1)
        assert [os.path.relpath(path, folder) for path in summary.files] == [f"out/f{at}.parquet" for at in range(3)]
        assert summary.rows == 1712 and sum(summary.shares.values()) == pytest.approx(1.0)
        for at in range(3):
            found, source = (pq.read_table(folder / name / f"f{at}.parquet") for name in ("out", "in"))
            assert found.select(source.column_names).equals(source)
        codec = pq.read_metadata(folder / "out" / "f1.parquet").row_group(0).column(0).compression
        assert codec == "SNAPPY"
        assert not [name for name in os.listdir(folder) if name.startswith(".")]

    def test_several_files_into_one(self, model, folder):
        drumlin.predict(folder / "in", model, folder / "all.parquet", key=["parcel", "day"])
        assert pq.read_metadata(folder / "all.parquet").num_rows == 1712
        keys = pq.read_table(folder / "all.parquet", columns=["parcel"])
        assert keys.equals(pq.read_table(folder / "in", columns=["parcel"]))

    def test_key_value_folders_stay_folders(self, model, tmp_path):
        for day in (1, 2):
            (tmp_path / "in" / f"week={day}").mkdir(parents=True)
            pq.write_table(table(50, day), tmp_path / "in" / f"week={day}" / "f.parquet")
        drumlin.predict(tmp_path / "in", model, f"{tmp_path}/out/")
        drumlin.predict(tmp_path / "in" / "week=1", model, f"{tmp_path}/one/")
        assert [name for name in names_in(tmp_path) if not name.startswith("in")] == [
            "one/week=1/f.parquet",
            "out/week=1/f.parquet",
            "out/week=2/f.parquet",
        ]
        assert "week" not in pq.read_schema(tmp_path / "out" / "week=1" / "f.parquet").names
        drumlin.predict(tmp_path / "in", model, tmp_path / "all.parquet")
        assert pq.read_table(tmp_path / "all.parquet")["week"].to_pylist() == [1] * 50 + [2] * 50

    def test_where_and_no_row_left(self, model, folder):
        summary = drumlin.predict(folder / "in", model, folder / "out", where="a > 1000", key="parcel")
        assert summary.rows == 0 and summary.left_out == 1712 and summary.log_density is None
        assert [pq.read_metadata(path).num_rows for path in summary.files] == [0, 0, 0]

    def test_rows_that_do_not_come_from_files(self, model, tmp_path):
        summary = drumlin.predict(table(), model, tmp_path / "out.parquet", key="parcel")
        assert pq.read_table(tmp_path / "out.parquet").num_rows == summary.rows == 1000
        assert summary.to_dict()["shares"].keys() == {"0", "1"} and "1,000 rows to" in str(summary)
        with pytest.raises(drumlin.TargetError, match="is a folder"):
            drumlin.predict(table(), model, tmp_path)

    def test_large_row_groups_are_cut(self, model, tmp_path, monkeypatch):
        monkeypatch.setattr(target_module, "GROUP_BYTES", 10_000)
        pq.write_table(table(200_000), tmp_path / "in.parquet")
        drumlin.predict(tmp_path / "in.parquet", model, tmp_path / "out.parquet", key="parcel")
        assert pq.read_metadata(tmp_path / "out.parquet").num_row_groups > 2
        assert pq.read_table(tmp_path / "out.parquet")["parcel"].equals(
            pq.read_table(tmp_path / "in.parquet")["parcel"]
        )

    def test_empty_files_among_others(self, model, tmp_path):
        pq.write_table(table(0), tmp_path / "a.parquet")
        pq.write_table(table(10), tmp_path / "b.parquet")
        summary = drumlin.predict([tmp_path / "a.parquet", tmp_path / "b.parquet"], model, f"{tmp_path}/out/")
        assert summary.rows == 10


class TestTargets:
    def test_an_existing_target_is_kept(self, model, folder):
        (folder / "out.parquet").write_bytes(b"mine")
        with pytest.raises(drumlin.TargetError, match="replace=True"):
            drumlin.predict(folder / "in", model, folder / "out.parquet")
        assert (folder / "out.parquet").read_bytes() == b"mine"
        drumlin.predict(folder / "in", model, folder / "out.parquet", replace=True)
        assert pq.read_metadata(folder / "out.parquet").num_rows == 1712

    def test_an_existing_folder_keeps_its_other_files(self, model, folder):
        (folder / "out").mkdir()
        (folder / "out" / "other.txt").write_text("mine")
        drumlin.predict(folder / "in", model, folder / "out")
        with pytest.raises(drumlin.TargetError, match=r"f0\.parquet exists"):
            drumlin.predict(folder / "in", model, folder / "out")
        drumlin.predict(folder / "in", model, folder / "out", replace=True)
        assert sorted(os.listdir(folder / "out")) == ["f0.parquet", "f1.parquet", "f2.parquet", "other.txt"]

    @pytest.mark.parametrize(
        ("to", "kind", "text"),
        [
            ("in", drumlin.TargetError, "one of the files that are read"),
            ("in/f0.parquet", drumlin.TargetError, "one of the files that are read"),
            ("nowhere/out.parquet", drumlin.TargetError, "does not exist"),
        ],
    )
    def test_places_that_cannot_be(self, model, folder, to, kind, text):
        before = names_in(folder)
        with pytest.raises(kind, match=text):
            drumlin.predict(folder / "in", model, folder / to, replace=True)
        assert names_in(folder) == before

    @pytest.mark.parametrize(
        ("to", "options", "text"),
        [(None, {"replace": True}, "replace"), (5, {}, "to"), ("", {}, "to"), ("s3://bucket/x.parquet", {}, "local")],
    )
    def test_options_that_cannot_be(self, model, to, options, text):
        with pytest.raises(drumlin.OptionError, match=text):
            drumlin.predict(table(), model, to, **options)

    @pytest.mark.parametrize("model", [5, None, "nowhere.drumlin", drumlin.Mixture([1.0], [0.0], [1.0])])
    def test_models_that_cannot_be(self, model):
        with pytest.raises(drumlin.DrumlinError):
            drumlin.predict(table(), model)

    def test_a_missing_column_names_table_and_nearest(self, model, folder):
        rows = table().rename_columns(["parcel", "A", "b", "day", "kind"])
        pq.write_table(rows, folder / "other.parquet")
        with pytest.raises(drumlin.SchemaError, match=r"other\.parquet has no column 'a'\. Did you mean 'A'"):
            drumlin.predict(folder / "other.parquet", model, folder / "out.parquet")

    @pytest.mark.parametrize("kind", [KeyboardInterrupt, RuntimeError])
    @pytest.mark.parametrize("to", ["out.parquet", "out"])
    def test_nothing_is_left_after_an_error(self, model, folder, kind, to):
        before = names_in(folder)

        def stop(event):
            if event["rows"] > 500:
                raise kind("enough")

        with pytest.raises(kind):
            drumlin.predict(folder / "in", model, folder / to, progress=stop)
        assert names_in(folder) == before and sorted(os.listdir(folder)) == ["in"]

    @pytest.mark.parametrize("replace", [False, True])
    def test_a_full_disk(self, model, folder, monkeypatch, replace):
        if replace:
            (folder / "out.parquet").write_bytes(b"old")

        def full(self, table, row_group_size):
            raise OSError(28, "No space left on device")

        monkeypatch.setattr(target_module.pq.ParquetWriter, "write_table", full)
        with pytest.raises(drumlin.TargetError, match="No space left on device"):
            drumlin.predict(folder / "in", model, folder / "out.parquet", replace=replace)
        assert [name for name in os.listdir(folder) if name != "in"] == (["out.parquet"] if replace else [])

    def test_lost_rows_are_noticed(self, model, folder, monkeypatch):
        write = pq.ParquetWriter.write_table
        monkeypatch.setattr(
            target_module.pq.ParquetWriter, "write_table", lambda self, rows, row_group_size: write(self, rows.slice(1))
        )
        with pytest.raises(drumlin.InternalError, match="rows were written"):
            drumlin.predict(folder / "in", model, folder / "out.parquet")
        assert os.listdir(folder) == ["in"]

    def test_changed_keys_are_noticed(self, model, folder, monkeypatch):
        write = pq.ParquetWriter.write_table

        def shuffled(self, rows, row_group_size):
            write(self, rows.take(pa.array(np.arange(len(rows))[::-1])))

        monkeypatch.setattr(target_module.pq.ParquetWriter, "write_table", shuffled)
        with pytest.raises(drumlin.InternalError, match="keys"):
            drumlin.predict(folder / "in", model, folder / "out.parquet", key="parcel")
        assert os.listdir(folder) == ["in"]


class TestKeyHash:
    ARRAYS = [
        pa.array([1, None, 3, 4] * 10, pa.int64()),
        pa.array(["a", None, "", "ccc"] * 10),
        pa.array(["a", None, "", "ccc"] * 10, pa.large_string()),
        pa.array(["a", None, "", "ccc"] * 10).dictionary_encode(),
        pa.array([b"a", b"", None, b"xyz"] * 10),
        pa.array([True, None, False, True] * 10),
        pa.array([1, None, 3, 4] * 10, pa.int32()).cast(pa.date32()),
        pa.array([decimal.Decimal(3), None] * 20, pa.decimal128(20, 3)),
        pa.array([b"abcd", None] * 20, pa.binary(4)),
    ]

    @pytest.mark.parametrize("array", ARRAYS, ids=lambda array: str(array.type))
    def test_it_does_not_depend_on_the_cuts_but_on_every_value(self, array):
        def hashed(array, cuts):
            key = KeyHash(pa.schema([("k", array.type)]), ["k"])
            for start, end in zip([0, *cuts], [*cuts, len(array)], strict=True):
                key.add(pa.record_batch({"k": array.slice(start, end - start)}))
            return key.hexdigest()

        whole = hashed(array, [])
        assert whole == hashed(array, [7, 7, 20]) == hashed(array, [1, 39])
        assert whole != hashed(array.slice(1), []) and whole != hashed(array.slice(0, 39), [])
        moved = array.take(pa.array([1, 0, *range(2, 40)]))
        assert whole != hashed(moved, [])

    def test_lists_cannot_be_keys(self):
        with pytest.raises(drumlin.SchemaError, match="cannot be a key"):
            KeyHash(pa.schema([("k", pa.list_(pa.int8()))]), ["k"])


class TestReadAhead:
    def test_order_and_end(self):
        assert list(ReadAhead(iter(range(100)))) == list(range(100))

    def test_the_error_comes_after_what_was_read(self):
        def items():
            yield 1
            raise ValueError("mine")

        ahead = ReadAhead(items())
        found = []
        with pytest.raises(ValueError, match="mine"):
            for item in ahead:
                found.append(item)
        assert found == [1]

    def test_it_reads_no_further_than_told_and_can_be_closed(self):
        read = []

        def items():
            for at in range(1000):
                read.append(at)
                yield at

        ahead = ReadAhead(items(), depth=2)
        assert next(iter(ahead)) == 0
        time.sleep(0.2)
        assert len(read) <= 5
        ahead.close()
        ahead._thread.join(2.0)
        assert not ahead._thread.is_alive()

    def test_closing_waits_a_moment_for_the_reader_to_come_out(self):
        inside = threading.Event()

        def items():
            yield 1
            inside.set()
            time.sleep(0.1)
            yield 2

        ahead = ReadAhead(items())
        assert next(iter(ahead)) == 1 and inside.wait(5.0)
        ahead.close()
        assert not ahead._thread.is_alive()


def test_a_ceiling_without_room_to_write_is_refused_before_anything_is_made(tmp_path, model):
    from drumlin.predicting.target import GROUP_BYTES, LEAST_GROUP, room_for_groups

    assert room_for_groups(2**31, 5) == GROUP_BYTES
    assert room_for_groups(256_000_000, 10, asked=False) == LEAST_GROUP, "a small machine is no reason to refuse"
    assert LEAST_GROUP <= room_for_groups(350_000_000, 10) < room_for_groups(400_000_000, 10) < GROUP_BYTES
    rows = pa.table({name: np.arange(10.0) for name in model.columns})
    with pytest.raises(drumlin.OptionError, match="memory=256 MB is too small to write"):
        drumlin.predict(rows, model, tmp_path / "out.parquet", memory="256 MB", progress=False)
    assert list(tmp_path.iterdir()) == []
