"""The account of memory: what a ceiling is spent on, and when it is too small."""

from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from drumlin.engines.budget import Budget, Work, in_flight_bytes, plan_memory
from drumlin.errors import OptionError
from drumlin.tables import open_table

GIB = 1 << 30


def test_what_may_wait_is_bounded() -> None:
    assert in_flight_bytes(2**40) == 128 << 20
    assert in_flight_bytes(400 << 20) == 50 << 20
    assert in_flight_bytes(1) == 1 << 20


def table(types: dict[str, pa.DataType]) -> pa.Table:
    return open_table(pa.table({name: pa.array([1, 2], type_) for name, type_ in types.items()}))


def test_columns_are_kept_in_their_own_width() -> None:
    rows = table({"a": pa.float64(), "b": pa.float32(), "c": pa.int16()})
    assert plan_memory(rows, ["a", "b", "c"], [], Work(3), GIB, 2).width == 8 + 4 + 8
    assert plan_memory(rows, ["a", "b", "c"], ["c"], Work(2), GIB, 2).width == 8 + 4 + 8


def test_the_parts_are_the_whole_and_more_work_leaves_less_to_keep() -> None:
    rows = table({"a": pa.float64(), "b": pa.float64()})
    small = plan_memory(rows, ["a", "b"], [], Work(2, 4, True, 20_000), GIB, 2)
    large = plan_memory(rows, ["a", "b"], [], Work(200, 64, True, 20_000), GIB, 2)
    assert large.computing > small.computing and large.keep < small.keep
    spent = small.in_flight + small.reading + small.computing + small.keep * (small.width + 6) / small.width
    assert abs(spent - GIB) < 100


def test_what_fits_is_kept_whole_and_else_the_ceiling_is_used_up() -> None:
    budget = Budget(GIB, 128 << 20, 180 << 20, 20 << 20, 64)
    fits = budget.keep // 64
    assert budget.keeps(fits) and not budget.keeps(fits + 1)
    assert budget.peak(fits + 1) == GIB
    assert budget.peak(1_000_000) == (200 << 20) + 70_000_000


def test_a_ceiling_that_is_too_small_for_the_work_is_refused() -> None:
    rows = table({"a": pa.float64()})
    with pytest.raises(OptionError, match=r"memory=300 MB is too small: 500 components of 300 columns need about"):
        plan_memory(rows, ["a"], [], Work(300, 500), 300_000_000, 2)


def test_reading_is_counted_by_what_the_rows_are_in(tmp_path: Path) -> None:
    """A thousand columns would take 3 GB of pages in large row groups, and next to nothing in small ones."""
    names = [f"c{j}" for j in range(1_000)]
    wide = pa.table({name: np.arange(50.0) for name in names})
    pq.write_table(wide, tmp_path / "wide.parquet")
    work = Work(1_000, 4, False)
    in_file = plan_memory(open_table(tmp_path / "wide.parquet"), names, [], work, 4 * GIB, 2)
    in_memory = plan_memory(open_table(wide), names, [], work, 4 * GIB, 2)
    assert in_file.reading < 160 << 20 and in_memory.reading < 1200 << 20
