"""Engines: one read for any number of measures, the same bits wherever it runs."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import textwrap
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from drumlin import _core
from drumlin.engines import ReadingPlan, Reporter, open_engine
from drumlin.engines.budget import TASK_ROWS, Budget
from drumlin.engines.processes import _shares
from drumlin.errors import DataError, OptionError, SchemaError, StreamError
from drumlin.options import Machine
from drumlin.tables import KEEP, open_table

PLAN = ReadingPlan(("x", "y"))
SCALING = _core.Scaling(np.zeros(2), np.ones(2))
MIXTURE = _core.Mixture(np.array([0.4, 0.6]), np.array([[0.0, 0.0], [1.0, 2.0]]), np.stack([np.eye(2), 2 * np.eye(2)]))


def make(rows: int, seed: int = 0) -> pa.Table:
    rng = np.random.default_rng(seed)
    return pa.table(
        {
            "x": rng.normal(size=rows),
            "y": rng.normal(1, 2, size=rows).astype(np.float32),
            "kind": pa.array(np.where(rng.random(rows) < 0.3, "bag", "tube")).dictionary_encode(),
            "count": rng.integers(0, 3, rows),
        }
    )


def measures() -> list[_core.Measure]:
    return [_core.EmStatistics(MIXTURE, SCALING), _core.ColumnSummary(2), _core.Sample(2, 50, 7)]


def as_bytes(found: list[_core.Measure]) -> list[bytes]:
    return [measure.to_bytes() for measure in found]


def run(table: Any, plan: ReadingPlan = PLAN, passes: int = 1, **how: Any) -> list[bytes]:
    machine = Machine(progress=False, **how)
    with open_engine(
        table, plan, machine, ["x", "y", *([plan.weight] if plan.weight else []), *(plan.key or ())]
    ) as engine:
        for _ in range(passes):
            found = as_bytes(engine.run(measures()))
        assert engine.passes == passes
    return found


def test_measures_are_filled_in_the_order_given() -> None:
    rows = make(1000)
    with open_engine(open_table(rows), PLAN, Machine(progress=False), ["x", "y"]) as engine:
        statistics, summary, sample = engine.run(measures(), "looking")
        assert (engine.passes, engine.rows, engine.bytes_read) == (1, 1000, 12_000)
    assert isinstance(statistics, _core.EmStatistics) and statistics.rows == 1000
    assert isinstance(summary, _core.ColumnSummary) and isinstance(sample, _core.Sample)
    assert summary.table()["rows"] == 1000
    assert np.allclose(summary.table()["mean"], [np.mean(rows["x"]), np.mean(rows["y"])], rtol=1e-6)
    assert sample.values.shape == (50, 2)


def test_rows_are_kept_when_they_fit_and_the_bits_stay(tmp_path: Path) -> None:
    pq.write_table(make(50_000), tmp_path / "rows.parquet", row_group_size=7_001)
    table = open_table(tmp_path)
    small, large = Machine(progress=False, memory=256_000_000), Machine(progress=False, memory=2**30)
    with open_engine(table, PLAN, large, ["x", "y"]) as engine:
        first, read = as_bytes(engine.run(measures())), engine.bytes_read
        assert engine.cached
        (tmp_path / "rows.parquet").unlink()  # nothing is read again
        assert as_bytes(engine.run(measures())) == first and engine.bytes_read == read and engine.rows == 50_000
    pq.write_table(make(50_000), tmp_path / "rows.parquet", row_group_size=7_001)
    with open_engine(open_table(tmp_path), PLAN, small, ["x", "y"], keep_rows=False) as engine:
        assert as_bytes(engine.run(measures())) == first and not engine.cached
        assert as_bytes(engine.run(measures())) == first and engine.bytes_read == 2 * read


def test_rows_that_do_not_fit_are_read_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    pq.write_table(make(150_000), tmp_path / "rows.parquet", row_group_size=7_001)
    with open_engine(open_table(tmp_path), PLAN, Machine(progress=False), ["x", "y"]) as engine:
        first, read = as_bytes(engine.run(measures())), engine.bytes_read
    monkeypatch.setattr(Budget, "keep", property(lambda self: 1_300_000))  # rows of 12 bytes
    with open_engine(open_table(tmp_path), PLAN, Machine(progress=False), ["x", "y"]) as engine:
        sizes = []
        for _ in range(3):
            before = engine.bytes_read
            assert as_bytes(engine.run(measures())) == first
            assert (engine.cached, engine.kept_rows, engine.rows) == (False, 2 * 49_152, 150_000)
            sizes.append(engine.bytes_read - before)
        share = 1 - 2 * 49_152 / 150_000
        assert sizes[0] == read and sizes[1] == sizes[2] == pytest.approx(share * read, rel=0.01)


def test_a_source_that_loses_rows_between_reads_is_found_out_behind_kept_rows(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Budget, "keep", property(lambda self: 800_000))
    rows = [make(120_000), make(110_000)]
    table = open_table(lambda: iter(rows.pop(0).to_batches()))
    with open_engine(table, PLAN, Machine(progress=False), ["x", "y"]) as engine:
        engine.run(measures())
        assert engine.kept_rows == 49_152
        with pytest.raises(StreamError, match="120,000 at first, 110,000 now"):
            engine.run(measures())


@pytest.mark.parametrize("threads", [1, 2, 4])
def test_threads_do_not_change_a_bit(threads: int) -> None:
    rows = make(40_000)
    assert run(open_table(rows), threads=threads) == run(open_table(rows), threads=1)


def test_parts_keys_and_weights_are_read() -> None:
    import pyarrow.compute as pc

    rows = make(5_000)
    plan = ReadingPlan(("x", "y"), weight="count", keep=KEEP, held="__held__", key=("kind",))
    table = open_table(rows, where="x > 0")
    extra = {"__held__": pc.field("kind") == "bag"}
    with open_engine(table, plan, Machine(progress=False), ["x", "y", "count", "kind"], extra) as engine:
        summary = engine.run([_core.ColumnSummary(2)])[0]
    assert isinstance(summary, _core.ColumnSummary)
    facts = summary.table()
    x, kinds, counts = np.asarray(rows["x"]), np.asarray(rows["kind"].cast(pa.string())), np.asarray(rows["count"])
    kept = (x > 0) & (counts > 0)
    assert facts["rows"] == 5_000 and facts["kept"] == kept.sum() and facts["held"] == (kept & (kinds == "bag")).sum()
    assert facts["weight"] == counts[kept & (kinds != "bag")].sum()


def test_the_source_s_own_error_comes_through_as_it_is() -> None:
    class TapeError(Exception):
        pass

    tables = [make(30_000, seed) for seed in range(3)]

    def torn() -> Iterator[pa.RecordBatch]:
        for table in tables:
            yield from table.combine_chunks().to_batches(max_chunksize=4_000)
        raise TapeError("the tape tore")

    table = open_table(torn)
    with open_engine(table, PLAN, Machine(progress=False), ["x", "y"]) as engine:
        started = time.monotonic()
        with pytest.raises(TapeError, match="the tape tore"):
            engine.run(measures())
        assert time.monotonic() - started < 5


def test_the_core_s_error_ends_the_reading() -> None:
    pulled = []

    def endless() -> Iterator[pa.RecordBatch]:
        for number in range(100_000):
            pulled.append(number)
            yield pa.record_batch({"x": np.ones(10_000), "y": np.ones(10_000), "w": np.full(10_000, -1.0)})

    plan = ReadingPlan(("x", "y"), weight="w")
    with open_engine(open_table(endless), plan, Machine(progress=False), ["x", "y", "w"]) as engine:
        with pytest.raises(DataError, match="row 0"):
            engine.run(measures())
    assert len(pulled) < 1000


def test_missing_columns_are_named_before_reading() -> None:
    with pytest.raises(SchemaError, match="no column 'z'"):
        open_engine(open_table(make(3)), ReadingPlan(("x", "z")), Machine(), ["x", "z"])


def test_a_stream_is_read_once() -> None:
    table = open_table(make(100).to_reader())
    with open_engine(table, PLAN, Machine(progress=False), ["x", "y"], keep_rows=False) as engine:
        engine.run(measures())
        with pytest.raises(StreamError, match="only once"):
            engine.run(measures())


def test_a_callable_is_kept_from_the_first_read_on() -> None:
    calls = []

    def rows() -> pa.Table:
        calls.append(1)
        return make(1000)

    with open_engine(open_table(rows), PLAN, Machine(progress=False), ["x", "y"]) as engine:
        assert as_bytes(engine.run(measures())) == as_bytes(engine.run(measures())) == as_bytes(engine.run(measures()))
        assert engine.cached


def test_progress_counts_rows() -> None:
    events: list[dict[str, Any]] = []
    reporter = Reporter(events.append)
    with open_engine(open_table(make(20_000)), PLAN, Machine(), ["x", "y"], progress=reporter) as engine:
        engine.run(measures(), "first look")
    assert events[0]["rows"] == 0 and events[-1]["rows"] == 20_000 and events[-1]["done"]
    assert {event["what"] for event in events} == {"first look"}


def test_shares_are_whole_tasks_in_order() -> None:
    assert _shares(0, 2) == []
    for rows in (1, TASK_ROWS, TASK_ROWS + 1, 37 * TASK_ROWS - 5):
        shares = _shares(rows, 2)
        assert shares[0][0] == 0 and shares[-1][1] == rows and all(first % TASK_ROWS == 0 for first, _ in shares)
        assert [end for _, end in shares[:-1]] == [first for first, _ in shares[1:]]


def test_processes_give_the_bits_of_threads(tmp_path: Path) -> None:
    rows = make(2 * TASK_ROWS + 12_345)
    for number, (first, length) in enumerate([(0, 300_000), (300_000, 1), (300_001, len(rows))]):
        pq.write_table(rows.slice(first, length), tmp_path / f"{number}.parquet", row_group_size=100_000)
    plan = ReadingPlan(("x", "y"), weight="count", keep=KEEP, held_share=0.2, key=("kind",), codes={"x": [0.5]})
    table = open_table(tmp_path, where="x > -1")
    in_threads = run(table, plan, threads=2)
    assert run(table, plan, threads=2, engine="processes", passes=2) == in_threads
    assert run(open_table(pa.concat_tables([rows]), where="x > -1"), plan, threads=1) == in_threads


def test_processes_pass_errors_on(tmp_path: Path) -> None:
    rows = make(1000).set_column(3, "count", [np.full(1000, -2.0)])
    pq.write_table(rows, tmp_path / "rows.parquet")
    plan = ReadingPlan(("x", "y"), weight="count")
    with pytest.raises(DataError, match="row 0"):
        run(open_table(tmp_path), plan, threads=1, engine="processes")


def test_processes_need_files() -> None:
    with pytest.raises(OptionError, match="needs rows in Parquet files, but these are in a pyarrow table"):
        run(open_table(make(10)), engine="processes")


SLOW_SOURCE = """
    import sys, time
    import numpy as np, pyarrow as pa
    from drumlin import _core
    from drumlin.engines import ReadingPlan, open_engine
    from drumlin.options import Machine
    from drumlin.tables import open_table

    def slow():
        batch = pa.record_batch({"x": np.ones(1000)})
        print("ready", flush=True)
        while True:
            yield batch
            time.sleep(SLEEP)

    engine = open_engine(open_table(slow), ReadingPlan(("x",)), Machine(progress=False), ["x"])
    try:
        engine.run([_core.ColumnSummary(1)])
    except KeyboardInterrupt:
        print("interrupted", time.time(), flush=True)
        sys.exit(130)
"""


@pytest.mark.parametrize("sleep", [0.0, 0.01, 60.0], ids=["busy", "slow", "hanging"])
def test_an_interrupt_passes_at_once(sleep: float) -> None:
    code = textwrap.dedent(SLOW_SOURCE).replace("SLEEP", str(sleep))
    child = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    assert child.stdout is not None
    try:
        assert child.stdout.readline().strip() == "ready"
        time.sleep(0.5)
        sent = time.time()
        child.send_signal(signal.SIGINT)
        out, error = child.communicate(timeout=20)
    finally:
        child.kill()
    words = out.split()
    assert words[0] == "interrupted", error
    assert float(words[1]) - sent < 0.5 and child.returncode == 130 and error == ""


@pytest.mark.skipif(not hasattr(os, "fork"), reason="needs fork")
def test_a_forked_child_works() -> None:
    table = open_table(make(20_000))
    before = run(table, threads=2)
    code = textwrap.dedent(
        """
        import os, sys
        sys.path[:0] = [TESTS]
        from test_engines import make, open_table, run
        table = open_table(make(20_000))
        before = run(table, threads=2)
        child = os.fork()
        if child == 0:
            os._exit(0 if run(table, threads=2) == before else 1)
        sys.exit(os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]))
        """
    ).replace("TESTS", repr(str(Path(__file__).parent)))
    assert before == run(table, threads=2)
    subprocess.run([sys.executable, "-c", code], check=True, timeout=60)
