"""Numeric contract 4: options of the group Machine, and the cutting of the source, never change a bit of the model.

Each way of reading is compared with one reference run by the checksum of the model part, and by the model part's bytes.
"""

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
import pytest

import datasets
import drumlin
from drumlin import _core

SMALL, LARGE = 20_011, 1_700_003
OPTIONS = {"columns": ["a", "b", "c"], "row_weight": "w", "key": "id", "method": "em", "seed": 4, "tries": 3}


def make(rows: int) -> pa.Table:
    random = np.random.default_rng(rows)
    values = datasets.hills(rows, components=3, columns=3, seed=3)
    return pa.table(
        {
            "id": pa.array(random.permutation(rows), pa.int64()),
            "a": values[:, 0],
            "b": values[:, 1].astype(np.float32),
            "c": pa.array(np.round(values[:, 2] * 100.0).astype(np.int32)),
            "w": random.integers(0, 4, size=rows).astype(np.uint8),
            "use": random.random(rows) < 0.8,
        }
    )


@pytest.fixture(scope="module")
def small():
    return make(SMALL)


@pytest.fixture(scope="module")
def large():
    return make(LARGE)


def fit(rows, passes: int = 6, **options):
    return drumlin.fit(rows, 3, pass_limit=passes, **({"tolerance": 0.0} | OPTIONS | options))


@pytest.fixture(scope="module")
def small_model(small):
    return fit(small, threads=1)


@pytest.fixture(scope="module")
def large_model(large):
    return fit(large, passes=2, threads=1)


def in_batches(table: pa.Table, size: int):
    batches = table.combine_chunks().to_batches(max_chunksize=size)
    return lambda: pa.RecordBatchReader.from_batches(table.schema, batches)


def write_uneven(table: pa.Table, folder, files: int, row_group_size: int) -> str:
    """The table as files of very unequal size, one of them without rows, in the order of the numbers in their names."""
    cuts = np.sort(np.random.default_rng(files).integers(0, len(table), size=files - 2))
    cuts = np.concatenate([[0, cuts[0]], cuts, [len(table)]])
    assert len(cuts) == files + 1 and cuts[1] == cuts[2], "one file is empty"
    for number in range(files):
        part = table.slice(cuts[number], cuts[number + 1] - cuts[number])
        pq.write_table(part, folder / f"part-{number}.parquet", row_group_size=row_group_size)
    return str(folder / "part-*.parquet")


def assert_same_model(model, want):
    assert model.checksum == want.checksum
    for name in ("weights", "means", "covariances"):
        assert np.asarray(getattr(model.mixture, name)).tobytes() == np.asarray(getattr(want.mixture, name)).tobytes()
    assert model.log_likelihood == want.log_likelihood


@pytest.mark.parametrize("threads", [1, 2, 4])
def test_threads(small, small_model, threads):
    assert_same_model(fit(small, threads=threads), small_model)


@pytest.mark.parametrize("threads", [2, 4])
def test_threads_on_a_table_of_many_tasks(large, large_model, threads):
    assert LARGE > 20 * _core.LEAF_ROWS * _core.TASK_LEAVES
    assert_same_model(fit(large, passes=2, threads=threads), large_model)


@pytest.mark.parametrize("size", [1, 7, 4096, 1_000_000])
def test_batches(small, small_model, size):
    passes = 6
    assert_same_model(fit(in_batches(small, size), passes, threads=2), small_model)


@pytest.mark.parametrize("size", [4096, 1_000_000])
def test_batches_of_a_large_table(large, large_model, size):
    assert_same_model(fit(in_batches(large, size), passes=2, threads=2), large_model)


@pytest.mark.parametrize("files", [1, 13])
@pytest.mark.parametrize("engine", ["threads", "processes"])
def test_files_and_engines(small, small_model, tmp_path, files, engine):
    if files == 1:
        pq.write_table(small, tmp_path / "all.parquet", row_group_size=7_001)
        rows = str(tmp_path / "all.parquet")
    else:
        rows = write_uneven(small, tmp_path, files, row_group_size=997)
    assert_same_model(fit(rows, engine=engine, threads=2), small_model)


@pytest.mark.parametrize("engine", ["threads", "processes"])
def test_files_of_many_tasks(large, large_model, tmp_path, engine):
    """Two processes that each take half of the tasks, against one thread in this process."""
    rows = write_uneven(large, tmp_path, 13, row_group_size=50_021)
    assert_same_model(fit(rows, passes=2, engine=engine, threads=2), large_model)


@pytest.mark.parametrize("kept", ["all", "none", "the first tasks"])
def test_kept_and_read_again(large, large_model, tmp_path, monkeypatch, kept):
    from drumlin.engines.budget import Budget
    from drumlin.engines.threads import ThreadEngine

    path = tmp_path / "all.parquet"
    pq.write_table(large, path, row_group_size=100_000)
    ways = []
    run = ThreadEngine.run

    def watched(self, *arguments, **options):
        result = run(self, *arguments, **options)
        ways.append((self.cached, self.kept_rows))
        return result

    monkeypatch.setattr(ThreadEngine, "run", watched)
    if kept != "all":
        part = 0 if kept == "none" else 60 * large.num_rows // 3
        monkeypatch.setattr(Budget, "keep", property(lambda self: part * self.width // 60))
    assert_same_model(fit(str(path), passes=2, memory="2 GiB", threads=2), large_model)
    assert len(ways) >= 4 and len(set(ways)) == 1
    whole, rows = ways[0]
    assert whole == (kept == "all")
    if kept == "the first tasks":
        assert 0 < rows < large.num_rows and rows % (16 * 3072) == 0
    else:
        assert rows == (large.num_rows if whole else 0)


@pytest.mark.parametrize("condition", ["use", pc.field("use")], ids=["text", "expression"])
def test_where(small, tmp_path, condition):
    """Removed rows stay as gaps in the row numbers: the bits are those of zero weights, however the source is cut."""
    want = fit(small, where=condition, threads=1)
    assert_same_model(fit(in_batches(small, 7), where=condition, threads=4), want)
    rows = write_uneven(small, tmp_path, 13, row_group_size=997)
    for engine in ("threads", "processes"):
        assert_same_model(fit(rows, where=condition, threads=2, engine=engine), want)
    weights = np.where(small["use"].to_numpy(), small["w"].to_numpy(), 0).astype(np.uint8)
    removed = small.set_column(small.schema.get_field_index("w"), "w", pa.array(weights))
    zeroed = fit(removed, threads=1)
    for name in ("weights", "means", "covariances"):
        assert np.array_equal(getattr(zeroed.mixture, name), getattr(want.mixture, name)), name
    assert zeroed.log_likelihood == want.log_likelihood


@pytest.mark.parametrize("hold_out", [0.25, "use"])
def test_hold_out(small, tmp_path, hold_out):
    want = fit(small, hold_out=hold_out, threads=1)
    assert_same_model(fit(in_batches(small, 7), hold_out=hold_out, threads=4), want)
    rows = write_uneven(small, tmp_path, 13, row_group_size=997)
    for engine in ("threads", "processes"):
        assert_same_model(fit(rows, hold_out=hold_out, threads=2, engine=engine), want)


def test_scores_do_not_depend_on_threads_or_batches(small, small_model):
    tables = []
    for size, threads in ((20_011, 1), (7, 2), (4096, 4)):
        stream = drumlin.predict(in_batches(small, size), small_model, threads=threads)
        tables.append(stream.read_all().combine_chunks())
    assert len(tables[0]) == SMALL
    assert tables[1].equals(tables[0]) and tables[2].equals(tables[0])


@pytest.mark.parametrize("structure", ["full", "diagonal", "spherical"])
@pytest.mark.parametrize("pooled", [False, True])
def test_kernel_tiers(small, structure, pooled):
    """Every set of instructions that this machine has gives the bits of the portable path."""
    tiers = _core.kernel_tiers()
    assert "portable" in tiers and len(tiers) == len(set(tiers))
    models = {}
    try:
        for tier in tiers:
            _core.force_kernel_tier(tier)
            assert _core.kernel_tier() == tier
            models[tier] = fit(small, structure=structure, pooled=pooled, threads=1)
    finally:
        _core.force_kernel_tier(None)
    for model in models.values():
        assert_same_model(model, models["portable"])


@pytest.fixture(scope="module")
def single_model(small):
    model = fit(small, precision="single", threads=1)
    assert [step["precision"] for step in model.trace][:2] == ["single", "single"]
    return model


def test_single_is_another_model(small_model, single_model):
    assert single_model.checksum != small_model.checksum


@pytest.mark.parametrize("threads", [2, 4])
def test_single_by_threads_and_batches(small, single_model, threads):
    assert_same_model(fit(small, precision="single", threads=threads), single_model)
    for size in (7, 4096):
        assert_same_model(fit(in_batches(small, size), precision="single", threads=threads), single_model)


@pytest.mark.parametrize("engine", ["threads", "processes"])
def test_single_by_files_and_engines(small, single_model, tmp_path, engine):
    rows = write_uneven(small, tmp_path, 13, row_group_size=997)
    assert_same_model(fit(rows, precision="single", engine=engine, threads=2), single_model)


def test_single_and_then_double_cached_and_read_again(small, tmp_path):
    """Past the switch the likely components that float32 passes left are hints, and no more."""
    options = {"precision": "single", "tolerance": 1e-4, "columns": ["a", "b"]}
    pq.write_table(small, tmp_path / "all.parquet")
    want = fit(small, passes=200, threads=1, **options)
    assert {step["precision"] for step in want.trace} == {"single", "double"} and want.stopped == "tolerance"
    for engine in ("threads", "processes"):
        assert_same_model(fit(str(tmp_path / "all.parquet"), passes=200, engine=engine, threads=2, **options), want)


@pytest.mark.parametrize("structure", ["full", "diagonal", "spherical"])
def test_single_on_every_kernel_tier(small, structure):
    models = []
    try:
        for tier in _core.kernel_tiers():
            _core.force_kernel_tier(tier)
            models.append(fit(small, structure=structure, precision="single", threads=1))
    finally:
        _core.force_kernel_tier(None)
    for model in models:
        assert_same_model(model, models[0])


def test_another_seed_or_one_changed_value_changes_the_checksum(small, small_model):
    """The comparisons above can fail."""
    column = small["a"].to_numpy().copy()
    column[SMALL // 2] = np.nextafter(column[SMALL // 2], np.inf) + 1e-9
    changed = small.set_column(small.schema.get_field_index("a"), "a", pa.array(column))
    assert fit(changed, threads=1).checksum != small_model.checksum
    assert fit(small, passes=5, threads=1).checksum != small_model.checksum
