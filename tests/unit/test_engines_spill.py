"""Rows that memory has no room for, kept decoded in one file for the time of a fit."""

from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin import _core
from drumlin.engines import ReadingPlan, open_engine
from drumlin.engines.budget import TASK_ROWS, Budget
from drumlin.options import Machine
from drumlin.tables import KEEP, open_table

ROWS = 200_000
COLUMNS = ["x", "y"]


@pytest.fixture
def path(tmp_path: Path) -> Path:
    random = np.random.default_rng(4)
    rows = pa.table({"x": random.normal(size=ROWS), "y": random.normal(2.0, 3.0, ROWS).astype(np.float32)})
    pq.write_table(rows, tmp_path / "rows.parquet", row_group_size=33_333)
    return tmp_path / "rows.parquet"


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    made = tmp_path / "spill"
    made.mkdir()
    return made


def summary(engine: object) -> bytes:
    (found,) = engine.run([_core.ColumnSummary(2)])  # type: ignore[attr-defined]
    return found.to_bytes()


@pytest.mark.parametrize("kept_tasks", [0, 1, 3])
@pytest.mark.parametrize("where", [None, "x > 0"])
def test_rows_beyond_memory_come_from_the_file(
    path: Path, folder: Path, monkeypatch: pytest.MonkeyPatch, kept_tasks: int, where: str | None
) -> None:
    plan = ReadingPlan(tuple(COLUMNS), keep=None if where is None else KEEP)
    with open_engine(open_table(path, where=where), plan, Machine(progress=False), COLUMNS) as engine:
        expected = summary(engine)
    # Batches do not end where tasks do: a little more is allowed than the tasks take.
    monkeypatch.setattr(Budget, "keep", property(lambda self: int((kept_tasks + 0.5) * TASK_ROWS * self.width)))
    machine = Machine(progress=False, spill=str(folder))
    with open_engine(open_table(path, where=where), plan, machine, COLUMNS) as engine:
        assert summary(engine) == expected
        assert not engine.cached and engine.kept_rows in (kept_tasks * TASK_ROWS, (kept_tasks - 1) * TASK_ROWS)
        assert len(list(folder.iterdir())) == 1
        path.unlink()  # the source is not read again
        assert summary(engine) == expected and summary(engine) == expected
        assert engine.rows == ROWS
    assert not list(folder.iterdir())


def test_nothing_is_written_where_everything_fits(path: Path, folder: Path) -> None:
    machine = Machine(progress=False, spill=str(folder))
    with open_engine(open_table(path), ReadingPlan(tuple(COLUMNS)), machine, COLUMNS) as engine:
        summary(engine)
        assert engine.cached and not list(folder.iterdir())


def test_a_fit_leaves_nothing_behind_and_has_the_same_bits(
    path: Path, folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fit(**options: object) -> drumlin.Model:
        return drumlin.fit(path, 2, columns=COLUMNS, tries=1, pass_limit=3, tolerance=0.0, progress=False, **options)

    plain = fit()
    monkeypatch.setattr(Budget, "keep", property(lambda self: 2 * TASK_ROWS * self.width))
    assert fit(spill=folder).checksum == plain.checksum
    assert not list(folder.iterdir())
    rows = pq.read_table(path)
    bad = rows.set_column(0, "x", pa.array(np.where(np.arange(ROWS) == ROWS - 1, np.inf, 0.5)))
    pq.write_table(bad, path, row_group_size=33_333)
    with pytest.raises(drumlin.DataError, match="infinite"):
        fit(spill=folder)
    assert not list(folder.iterdir())
