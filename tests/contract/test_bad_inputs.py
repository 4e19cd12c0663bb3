"""What goes wrong for users: each with its own clear error or note, that names the thing and says what to do."""

import os
import re
import stat
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin.engines.budget import Budget

RANDOM = np.random.default_rng(1)
GOOD = pa.table({"length": RANDOM.normal(30.0, 5.0, 400), "weight": RANDOM.normal(2.0, 0.4, 400)})
COLUMNS = ["length", "weight"]


def write(folder, name: str, table: pa.Table = GOOD) -> str:
    pq.write_table(table, folder / name)
    return str(folder / name)


def with_value(column: str, row: int, value) -> pa.Table:
    values = GOOD[column].to_pylist()
    values[row] = value
    return GOOD.set_column(GOOD.schema.get_field_index(column), column, pa.array(values, pa.float64()))


def fails(kind, *parts: str, call=None, **options) -> str:
    """`call` (a fit of `rows` unless given) fails with exactly this kind of error, whose message has all the parts."""
    with pytest.raises(drumlin.DrumlinError) as caught:
        call() if call else drumlin.fit(options.pop("rows"), options.pop("components", 2), **options)
    message = str(caught.value)
    assert type(caught.value) is kind, f"{type(caught.value).__name__}: {message}"
    for part in parts:
        assert re.search(part, message, re.IGNORECASE), f"{part!r} is not in: {message}"
    return message


def fit(rows, components=2, **options):
    return drumlin.fit(rows, components, **({"columns": COLUMNS} | options))


class TestRows:
    def test_no_rows(self):
        fails(drumlin.DataError, "no rows|empty|0 rows", rows=GOOD.slice(0, 0), columns=COLUMNS)

    def test_no_rows_in_a_file(self, tmp_path):
        path = write(tmp_path, "empty.parquet", GOOD.slice(0, 0))
        fails(drumlin.DataError, "no rows|empty|0 rows", "empty.parquet", rows=path, columns=COLUMNS)

    def test_a_folder_without_files(self, tmp_path):
        fails(drumlin.SourceError, tmp_path.name, rows=str(tmp_path), columns=COLUMNS)

    def test_a_glob_that_matches_nothing(self, tmp_path):
        fails(drumlin.SourceError, r"none-\*\.parquet", rows=str(tmp_path / "none-*.parquet"), columns=COLUMNS)

    def test_an_empty_file_among_others(self, tmp_path):
        write(tmp_path, "a.parquet", GOOD.slice(0, 250))
        write(tmp_path, "b.parquet", GOOD.slice(0, 0))
        write(tmp_path, "c.parquet", GOOD.slice(250))
        model = fit(str(tmp_path / "*.parquet"))
        assert model.checksum == fit(GOOD).checksum
        assert any("b.parquet" in note for note in model.notes), model.notes

    def test_where_leaves_nothing(self):
        fails(drumlin.DataError, "where|filter|kept", rows=GOOD, columns=COLUMNS, where="length > 1e9")

    def test_a_one_shot_stream(self):
        reader = pa.RecordBatchReader.from_batches(GOOD.schema, GOOD.to_batches())
        fails(drumlin.StreamError, "once", "callable|file", rows=reader, columns=COLUMNS)

    def test_predict_takes_a_one_shot_stream(self):
        reader = pa.RecordBatchReader.from_batches(GOOD.schema, GOOD.to_batches())
        stream = drumlin.predict(reader, fit(GOOD))
        assert stream.read_all().num_rows == len(GOOD)

    def test_a_callable_that_gives_other_rows_each_time(self, monkeypatch):
        monkeypatch.setattr(Budget, "keep", 0)  # otherwise the rows of the first read are kept
        calls = []

        def rows():
            calls.append(1)
            part = GOOD.slice(0, 400 - len(calls))
            return pa.RecordBatchReader.from_batches(part.schema, part.to_batches())

        fails(drumlin.StreamError, "rows", rows=rows, columns=COLUMNS, tolerance=0.0, pass_limit=5)

    def test_something_that_is_no_table(self):
        for rows in (3.5, object(), {"a": 1}, None):
            with pytest.raises(drumlin.DrumlinError):
                drumlin.fit(rows, 2, columns=["a"])

    def test_a_one_dimensional_array(self):
        with pytest.raises(drumlin.DrumlinError, match=r"2|two|reshape"):
            drumlin.fit(np.zeros(10), 1)


class TestColumns:
    def test_a_text_column(self):
        table = GOOD.append_column("scanner", pa.array(["A"] * 400))
        fails(drumlin.SchemaError, "scanner", "string|text", "key|leave", rows=table, columns=[*COLUMNS, "scanner"])

    @pytest.mark.parametrize(
        "values",
        [
            pa.array([0] * 400, pa.timestamp("us")),
            pa.array([0] * 400, pa.date32()),
            pa.array([[1.0]] * 400),
            pa.array(["A", "B"] * 200).dictionary_encode(),
        ],
        ids=["timestamp", "date", "list", "dictionary"],
    )
    def test_other_columns_that_are_no_numbers(self, values):
        table = GOOD.append_column("odd", values)
        fails(drumlin.SchemaError, "odd", rows=table, columns=[*COLUMNS, "odd"])

    def test_a_missing_column_with_the_nearest_name(self):
        fails(drumlin.SchemaError, "lenght", "did you mean 'length'", rows=GOOD, columns=["lenght", "weight"])

    @pytest.mark.parametrize("option", ["key", "row_weight"])
    def test_a_missing_column_of_another_role(self, option):
        fails(
            drumlin.SchemaError,
            "wieght",
            "did you mean",
            rows=GOOD,
            columns=["length"],
            **{option: "wieght"},
        )

    def test_a_file_of_another_schema(self, tmp_path):
        write(tmp_path, "a.parquet")
        write(tmp_path, "b.parquet", GOOD.rename_columns(["length", "mass"]))
        rows = str(tmp_path / "*.parquet")
        fails(drumlin.SchemaError, "b.parquet", "weight", rows=rows, columns=COLUMNS)

    def test_a_file_in_which_the_column_is_text(self, tmp_path):
        write(tmp_path, "a.parquet")
        text = GOOD.set_column(1, "weight", pa.array(["heavy"] * 400))
        write(tmp_path, "b.parquet", text)
        fails(drumlin.SchemaError, "b.parquet", "weight", rows=str(tmp_path / "*.parquet"), columns=COLUMNS)

    def test_files_of_other_widths_are_widened_with_a_note(self, tmp_path):
        write(tmp_path, "a.parquet", GOOD.slice(0, 200))
        narrow = GOOD.slice(200).cast(pa.schema([("length", pa.float32()), ("weight", pa.float64())]))
        write(tmp_path, "b.parquet", narrow)
        model = fit(str(tmp_path / "*.parquet"))
        assert model.rows == 400
        assert any("length" in note for note in model.notes), model.notes

    def test_columns_must_be_named_for_files(self, tmp_path):
        path = write(tmp_path, "a.parquet")
        message = fails(drumlin.OptionError, "columns", rows=path)
        assert "length" in message and "weight" in message, "the line to paste"

    def test_the_same_column_twice(self):
        fails(drumlin.OptionError, "length", rows=GOOD, columns=["length", "length"])


class TestGaps:
    @pytest.mark.parametrize("value", [None, float("nan")], ids=["null", "nan"])
    def test_refused_with_the_ways_out(self, value):
        message = fails(
            drumlin.DataError, "weight", "complete-rows", rows=with_value("weight", 17, value), columns=COLUMNS
        )
        assert "1" in message and "length" not in message.replace("length_cm", ""), "gaps are counted by column"

    @pytest.mark.parametrize("value", [None, float("nan")], ids=["null", "nan"])
    def test_complete_rows(self, value):
        model = fit(with_value("weight", 17, value), missing="complete-rows")
        assert model.rows == 399
        assert any("1 " in note and "row" in note for note in model.notes), model.notes
        kept = np.delete(np.stack([GOOD[name].to_numpy() for name in COLUMNS], axis=1), 17, axis=0)
        one = fit(with_value("weight", 17, value), 1, missing="complete-rows")
        np.testing.assert_allclose(one.mixture.means[0], kept.mean(axis=0), rtol=1e-13)

    @pytest.mark.parametrize("missing", ["refuse", "complete-rows"])
    @pytest.mark.parametrize("value", [float("inf"), float("-inf")])
    def test_infinity_is_refused(self, value, missing):
        rows = with_value("weight", 17, value)
        fails(drumlin.DataError, "weight", r"\b17\b", "infinit", rows=rows, columns=COLUMNS, missing=missing)

    def test_a_code_for_gaps(self):
        model = fit(with_value("weight", 17, -9999.0), missing="complete-rows", missing_codes={"weight": [-9999]})
        assert model.rows == 399

    def test_a_suspected_code_is_noted(self):
        weights = GOOD["weight"].to_numpy().copy()
        weights[::40] = -9999.0
        model = fit(GOOD.set_column(1, "weight", pa.array(weights)))
        assert any("-9999" in note.replace(",", "") and "weight" in note for note in model.notes), model.notes

    def test_no_complete_row(self):
        table = pa.table({"a": [1.0, None] * 50, "b": [None, 1.0] * 50})
        fails(drumlin.DataError, "complete", rows=table, columns=["a", "b"], missing="complete-rows")

    def test_predict_refuses_gaps_when_the_model_does(self):
        model = fit(GOOD)
        rows = with_value("weight", 17, None)
        fails(
            drumlin.DataError,
            "weight",
            r"\b17\b",
            call=lambda: drumlin.predict(rows, model).read_all(),
        )
        stream = drumlin.predict(rows, model, missing="complete-rows")
        table = stream.read_all()
        assert len(table) == 400 and table["component"].null_count == 1 and table["component"][17].as_py() is None


class TestDegenerate:
    def test_a_constant_column_is_noted(self):
        table = GOOD.append_column("belt", pa.array(np.full(400, 1.5)))
        model = drumlin.fit(table, 2, columns=[*COLUMNS, "belt"])
        assert any("belt" in note and "constant" in note for note in model.notes), model.notes
        assert np.isfinite(model.mixture.covariances).all() and np.isfinite(model.log_likelihood)

    def test_two_equal_columns(self):
        table = GOOD.append_column("length_again", GOOD["length"])
        model = drumlin.fit(table, 2, columns=[*COLUMNS, "length_again"])
        assert np.isfinite(model.log_likelihood) and model.notes

    def test_fewer_distinct_rows_than_components(self):
        table = pa.table({"a": [1.0, 2.0, 3.0] * 40, "b": [0.0, 5.0, 1.0] * 40})
        model = drumlin.fit(table, 5, columns=["a", "b"])
        assert model.mixture.components <= 3
        assert any("distinct" in note for note in model.notes), model.notes

    def test_fewer_rows_than_components(self):
        model = drumlin.fit(GOOD.slice(0, 3), 10, columns=COLUMNS)
        assert model.mixture.components <= 3 and model.notes

    def test_one_row(self):
        model = drumlin.fit(GOOD.slice(0, 1), 1, columns=COLUMNS)
        assert np.isfinite(model.mixture.covariances).all() and model.notes

    def test_one_component(self):
        model = fit(GOOD, 1)
        assert model.mixture.weights.tolist() == [1.0]
        table = drumlin.predict(GOOD, model).read_all()
        assert table["runner_up"].null_count == len(GOOD)
        assert set(table["component"].to_pylist()) == {0} and set(table["responsibility"].to_pylist()) == {1.0}

    @pytest.mark.parametrize("components", [0, -1, 2.5, 65_536, True, None])
    def test_numbers_of_components_that_are_none(self, components):
        fails(drumlin.OptionError, "components", rows=GOOD, components=components, columns=COLUMNS)


class TestWeights:
    @pytest.mark.parametrize("value", [-1.0, float("nan"), float("inf"), None])
    def test_a_weight_that_is_none(self, value):
        weights = [1.0] * 400
        weights[23] = value
        rows = GOOD.append_column("count", pa.array(weights, pa.float64()))
        fails(drumlin.DataError, "count", r"\b23\b", rows=rows, columns=COLUMNS, row_weight="count")

    def test_all_weights_zero(self):
        rows = GOOD.append_column("count", pa.array([0] * 400))
        fails(drumlin.DataError, "weight|count", rows=rows, columns=COLUMNS, row_weight="count")

    def test_zero_weights_are_noted(self):
        rows = GOOD.append_column("count", pa.array([0, 1] * 200))
        model = fit(rows, row_weight="count")
        assert model.weight == 200.0
        assert any("weight" in note and "200" in note for note in model.notes), model.notes

    def test_a_text_weight(self):
        rows = GOOD.append_column("count", pa.array(["1"] * 400))
        fails(drumlin.SchemaError, "count", rows=rows, columns=COLUMNS, row_weight="count")


class TestFiles:
    def test_no_such_file(self, tmp_path):
        fails(drumlin.SourceError, "scans.parquet", rows=str(tmp_path / "scans.parquet"), columns=COLUMNS)

    @pytest.mark.parametrize("damage", ["cut", "noise", "text"])
    def test_corrupt_parquet(self, tmp_path, damage):
        path = write(tmp_path, "good.parquet")
        content = bytearray(Path(path).read_bytes())
        if damage == "cut":
            content = content[: len(content) // 2]
        elif damage == "noise":
            content[40 : len(content) // 2] = os.urandom(len(content) // 2 - 40)
        else:
            content = bytearray(b"length,weight\n1,2\n" * 50)
        (tmp_path / "bad.parquet").write_bytes(bytes(content))
        rows = [path, str(tmp_path / "bad.parquet")]
        fails(drumlin.SourceError, "bad.parquet", rows=rows, columns=COLUMNS)

    def test_an_existing_output(self, tmp_path):
        rows, target = write(tmp_path, "rows.parquet"), tmp_path / "out.parquet"
        target.write_bytes(b"mine")
        model = fit(GOOD)
        fails(drumlin.TargetError, "out.parquet", "replace", call=lambda: drumlin.predict(rows, model, str(target)))
        assert target.read_bytes() == b"mine"
        drumlin.predict(rows, model, str(target), replace=True)
        assert pq.read_table(target).num_rows == 400
        assert sorted(path.name for path in tmp_path.iterdir()) == ["out.parquet", "rows.parquet"]

    def test_the_output_must_not_be_the_source(self, tmp_path):
        rows = write(tmp_path, "rows.parquet")
        before = Path(rows).read_bytes()
        model = fit(GOOD)
        fails(drumlin.TargetError, "rows.parquet", call=lambda: drumlin.predict(rows, model, rows, replace=True))
        assert Path(rows).read_bytes() == before

    def test_a_target_in_no_folder(self, tmp_path):
        rows, target = write(tmp_path, "rows.parquet"), tmp_path / "nowhere" / "out.parquet"
        fails(drumlin.TargetError, "nowhere", call=lambda: drumlin.predict(rows, fit(GOOD), str(target)))

    @pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root may write everywhere")
    def test_an_unwritable_folder(self, tmp_path):
        rows = write(tmp_path, "rows.parquet")
        folder = tmp_path / "closed"
        folder.mkdir()
        folder.chmod(stat.S_IRUSR | stat.S_IXUSR)
        model = fit(GOOD)
        try:
            target = str(folder / "out.parquet")
            fails(drumlin.TargetError, "closed", call=lambda: drumlin.predict(rows, model, target))
            fails(drumlin.TargetError, "closed", call=lambda: model.save(folder / "model.drumlin"))
        finally:
            folder.chmod(stat.S_IRWXU)

    def test_a_target_below_a_file(self, tmp_path):
        """Unwritable for everyone, root as well."""
        rows = write(tmp_path, "rows.parquet")
        (tmp_path / "file").write_bytes(b"")
        model = fit(GOOD)
        target = tmp_path / "file" / "out.parquet"
        fails(drumlin.TargetError, "file", call=lambda: drumlin.predict(rows, model, str(target)))
        fails(drumlin.TargetError, "model.drumlin", call=lambda: model.save(tmp_path / "file" / "model.drumlin"))

    def test_a_failed_predict_leaves_nothing(self, tmp_path):
        rows = write(tmp_path, "rows.parquet", with_value("weight", 350, float("inf")))
        model = fit(GOOD)
        fails(drumlin.DataError, "350", call=lambda: drumlin.predict(rows, model, str(tmp_path / "out.parquet")))
        assert [path.name for path in tmp_path.iterdir()] == ["rows.parquet"]

    def test_names_that_clash(self, tmp_path):
        table = GOOD.append_column("component", pa.array([1] * 400))
        rows, model = write(tmp_path, "rows.parquet", table), fit(GOOD)
        out = str(tmp_path / "out.parquet")
        fails(drumlin.SchemaError, "component", "prefix", call=lambda: drumlin.predict(rows, model, out))
        drumlin.predict(rows, model, out, prefix="new_")
        assert {"component", "new_component"} <= set(pq.read_schema(out).names)

    def test_rows_that_lack_a_column_of_the_model(self):
        model = fit(GOOD)
        rows = GOOD.rename_columns(["length", "wieght"])
        fails(drumlin.SchemaError, "weight", "wieght", call=lambda: drumlin.predict(rows, model))


class TestOptions:
    @pytest.mark.parametrize(
        ("option", "value"),
        [
            ("structure", "round"),
            ("pooled", "yes"),
            ("floor", -1.0),
            ("method", "magic"),
            ("start_from", "nowhere"),
            ("tries", 0),
            ("pass_limit", -3),
            ("tolerance", float("nan")),
            ("seed", -1),
            ("seed", 1.5),
            ("memory", "much"),
            ("memory", "1 MB"),
            ("threads", 0),
            ("engine", "steam"),
            ("missing", "marginal"),
            ("hold_out", 1.5),
            ("where", "length >"),
            ("missing_codes", {"weight": ["none"]}),
        ],
    )
    def test_a_value_that_is_not_allowed(self, option, value):
        message = fails(drumlin.OptionError, option, rows=GOOD, **({"columns": COLUMNS} | {option: value}))
        assert len(message) > 30

    def test_an_option_that_does_not_exist(self):
        fails(drumlin.OptionError, "toleranse", "tolerance", rows=GOOD, columns=COLUMNS, toleranse=1e-3)

    def test_options_are_checked_before_the_rows_are_touched(self):
        def rows():
            raise AssertionError("the rows were opened")

        fails(drumlin.OptionError, "structure", rows=rows, columns=COLUMNS, structure="round")

    @pytest.mark.parametrize(("option", "value"), [("tries", 3), ("start_from", "random-rows")])
    def test_an_option_without_effect(self, option, value):
        start = fit(GOOD).mixture
        fails(drumlin.OptionError, option, rows=GOOD, components=start, **{option: value})

    def test_a_code_for_a_column_that_is_not_fitted(self):
        fails(drumlin.OptionError, "wieght", rows=GOOD, columns=COLUMNS, missing_codes={"wieght": [-9999]})


class TestMixtures:
    @pytest.mark.parametrize(
        ("weights", "means", "covariances"),
        [
            ([0.5, 0.4], [[0.0], [1.0]], [[[1.0]], [[1.0]]]),
            ([1.5, -0.5], [[0.0], [1.0]], [[[1.0]], [[1.0]]]),
            ([0.5, 0.5], [[0.0], [np.nan]], [[[1.0]], [[1.0]]]),
            ([0.5, 0.5], [[0.0], [1.0]], [[[1.0]], [[-1.0]]]),
            ([0.5, 0.5], [[0.0], [1.0]], [[[1.0]], [[0.0]]]),
            ([0.5, 0.5], [[0.0], [1.0]], [[[1.0]]]),
            ([0.5, 0.5], [[0.0]], [[[1.0]], [[1.0]]]),
            ([1.0], [[0.0, 0.0]], [[[1.0, 2.0], [2.0, 1.0]]]),
            ([1.0], [[0.0, 0.0]], [[[1.0, 0.5], [0.2, 1.0]]]),
            ([], np.zeros((0, 1)), np.zeros((0, 1, 1))),
            (["a"], [[0.0]], [[[1.0]]]),
        ],
    )
    def test_numbers_that_are_no_mixture(self, weights, means, covariances):
        with pytest.raises(drumlin.MixtureError) as caught:
            drumlin.Mixture(weights, means, covariances)
        assert len(str(caught.value)) > 20

    def test_rows_of_another_width(self):
        mixture = drumlin.Mixture([1.0], [[0.0, 0.0]], [np.eye(2)])
        with pytest.raises(drumlin.DrumlinError, match="2"):
            mixture.log_density(np.zeros((5, 3)))
        with pytest.raises(drumlin.DrumlinError):
            mixture.log_density(np.zeros(5))

    def test_gaps_in_rows_give_gaps(self):
        mixture = drumlin.Mixture([1.0], [[0.0, 0.0]], [np.eye(2)])
        rows = np.array([[0.0, 0.0], [np.nan, 0.0]])
        assert np.isnan(mixture.log_density(rows)).tolist() == [False, True]
        assert mixture.assign(rows).tolist() == [0, -1]


def test_the_readers_own_table(tmp_path):
    """Nulls, -9999, a timestamp, an integer id and a text column: the demo's last three commands run on it."""
    import json
    import subprocess
    import sys

    random = np.random.default_rng(3)
    n = 5_000
    kind = random.integers(0, 2, n)
    temperature = np.round(np.where(kind == 1, random.normal(20, 2, n), random.normal(60, 5, n)), 1)
    pressure = np.where(kind == 1, random.normal(1.0, 0.1, n), random.normal(3.0, 0.2, n))
    temperature[::50] = -9999.0
    table = pa.table(
        {
            "reading_id": pa.array(np.arange(n) + 10**9),
            "taken": pa.array(np.arange(n) * 60_000_000 + 1_700_000_000_000_000, pa.timestamp("us")),
            "station": pa.array([f"S{i % 7}" for i in range(n)]),
            "temp": temperature,
            "pressure": pa.array(pressure, mask=random.random(n) < 0.02),
        }
    )
    path = write(tmp_path, "mine.parquet", table)

    def command(*words: str) -> subprocess.CompletedProcess:
        code = "from drumlin.cli.main import main; main()"
        return subprocess.run(
            [sys.executable, "-c", code, *words], capture_output=True, text=True, cwd=tmp_path, check=False
        )

    profile = command("profile", path)
    assert profile.returncode == 0, profile.stderr
    assert "-9999" in profile.stdout.replace(",", "") and "columns" in profile.stdout
    line = [text for text in profile.stdout.splitlines() if "columns" in text][-1]
    assert "temp" in line and "pressure" in line
    assert "station" not in line and "taken" not in line and "reading_id" not in line

    refused = command("fit", path, "--components", "2", "--columns", "temp,pressure", "--model", "m.drumlin")
    assert refused.returncode == 1 and "complete-rows" in refused.stderr and "pressure" in refused.stderr
    assert not (tmp_path / "m.drumlin").exists()

    options = ["--columns", "temp,pressure", "--key", "reading_id", "--missing", "complete-rows"]
    options += ["--missing-codes", "temp=-9999", "--model", "m.drumlin"]
    fitted = command("fit", path, "--components", "2", *options)
    assert fitted.returncode == 0, fitted.stderr
    assert "Traceback" not in fitted.stderr

    predicted = command("predict", path, "--model", "m.drumlin", "--to", "out.parquet")
    assert predicted.returncode == 0, predicted.stderr
    result = pq.read_table(tmp_path / "out.parquet")
    assert result.num_rows == n and result["reading_id"].equals(table["reading_id"])
    assert set(table.schema.names) < set(result.schema.names)
    gaps = table["pressure"].is_null().to_numpy() | (temperature == -9999.0)
    component = result["component"].to_numpy(zero_copy_only=False)
    assert np.array_equal(np.isnan(component), gaps)
    agree = np.mean((component[~gaps] == 0) == (kind[~gaps] == 0))
    assert max(agree, 1 - agree) > 0.999

    shown = command("show", "--model", "m.drumlin", "--json")
    assert shown.returncode == 0, shown.stderr
    assert json.loads(shown.stdout)
