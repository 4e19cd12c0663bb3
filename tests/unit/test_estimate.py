"""What a fit would cost, told before it runs."""

from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin.engines.budget import TASK_ROWS, Budget

ROWS = 150_000
COLUMNS = ["length_cm", "weight_kg"]


@pytest.fixture
def path(tmp_path: Path) -> Path:
    random = np.random.default_rng(8)
    rows = pa.table({name: random.normal(size=ROWS) for name in COLUMNS})
    pq.write_table(rows, tmp_path / "rows.parquet", row_group_size=50_000)
    return tmp_path / "rows.parquet"


def test_a_table_that_fits(path: Path) -> None:
    found = drumlin.estimate(path, 3, columns=COLUMNS, memory="1 GiB", pass_limit=30)
    assert (found.rows, found.files, found.decoded_bytes, found.passes) == (ROWS, 1, 16 * ROWS, 30)
    assert (found.kept_rows, found.rest, found.ceiling_bytes) == (ROWS, "nothing", 1 << 30)
    assert 0 < found.memory_bytes < found.ceiling_bytes
    assert 0 < found.pass_seconds and 0 < found.first_seconds and 0 < found.timed_rows <= ROWS
    text = str(found)
    assert "rows: 150,000 in 1 file, 2 MB decoded" in text
    assert "all rows are kept in memory" in text and "passes: at most 30, or" in text


def test_a_table_that_does_not_fit(path: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Budget, "keep", property(lambda self: int(2.5 * TASK_ROWS * self.width)))
    found = drumlin.estimate(path, 3, columns=COLUMNS, memory="1 GiB")
    assert (found.kept_rows, found.rest, found.memory_bytes) == (2 * TASK_ROWS, "read again", 1 << 30)
    assert "98,304 rows are kept in memory; the others are read again in every pass" in str(found)
    spilled = drumlin.estimate(path, 3, columns=COLUMNS, memory="1 GiB", spill=tmp_path)
    assert spilled.rest == "from the spill file" and "temporary file" in str(spilled)
    assert [entry.name for entry in tmp_path.iterdir()] == ["rows.parquet"]


def test_rows_that_are_not_counted_yet() -> None:
    table = pa.table({name: np.arange(10.0) for name in COLUMNS})
    found = drumlin.estimate(lambda: table.to_reader(), 2, columns=COLUMNS)
    assert (found.rows, found.kept_rows, found.pass_seconds) == (None, None, None)
    assert "not known before they are read once" in str(found)


def test_from_a_model_and_a_table_in_memory() -> None:
    rows = np.random.default_rng(2).normal(size=(2_000, 2))
    model = drumlin.fit(rows, 2, progress=False)
    assert drumlin.estimate(rows, model).kept_rows == 2_000


@pytest.mark.parametrize(
    ("options", "told"),
    [
        ({"columns": ["height_cm"]}, "no column 'height_cm'"),
        ({"columns": COLUMNS, "tries": 0}, "tries"),
        ({"columns": COLUMNS, "memory": "1 MB"}, "memory"),
    ],
)
def test_what_a_fit_refuses_is_refused(path: Path, options: dict, told: str) -> None:
    with pytest.raises(drumlin.DrumlinError, match=told):
        drumlin.estimate(path, 3, **options)


def test_a_stream_that_can_be_read_once_is_not_used_up() -> None:
    stream = pa.table({name: np.arange(10.0) for name in COLUMNS}).to_reader()
    with pytest.raises(drumlin.StreamError):
        drumlin.estimate(stream, 2, columns=COLUMNS)
    assert stream.read_all().num_rows == 10
