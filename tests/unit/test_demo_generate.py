"""The generated depot: its law, its files, and the comparison with the truth."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
import pytest
from sklearn.metrics import adjusted_rand_score

import drumlin
from drumlin.demo import generate as depots
from drumlin.demo.generate import CODE, FITTED, KINDS, Depot, draw, generate
from drumlin.demo.truth import adjusted_rand, compare_with_truth, true_law

ROWS = 30_000


@pytest.fixture(scope="module")
def depot(tmp_path_factory: pytest.TempPathFactory) -> Depot:
    return generate(tmp_path_factory.mktemp("depot"), ROWS, seed=3)


def test_the_law_is_a_mixture() -> None:
    assert depots.shares().sum() == pytest.approx(1.0)
    assert list(depots.shares()) == sorted(depots.shares(), reverse=True)
    law = true_law()
    assert law.columns == FITTED and len(law.weights) == len(KINDS)
    assert np.all(np.linalg.eigvalsh(depots.covariances()) > 0)


def test_draws_follow_the_law() -> None:
    kinds, values = draw(200_000, seed=1, chunk=0)
    assert kinds.dtype == np.int8 and values.shape == (200_000, len(FITTED))
    shares = np.bincount(kinds, minlength=len(KINDS)) / len(kinds)
    assert shares == pytest.approx(depots.shares(), abs=0.005)
    whole = values[:, -1] != CODE
    assert 0 < np.count_nonzero(~whole) < 300
    assert np.all(values[whole] > 0)
    for kind in range(len(KINDS)):
        chosen = values[whole & (kinds == kind)]
        deviation = np.sqrt(np.diagonal(depots.covariances()[kind]))
        assert np.abs(np.median(chosen, axis=0) - depots.means()[kind]) / deviation == pytest.approx(0.0, abs=0.15)
        # width and the rest; some lengths are misread
        assert chosen[:, 1:].std(axis=0) / deviation[1:] == pytest.approx(1.0, abs=0.05)


def test_readings_are_rounded_to_the_scanners_step() -> None:
    _, values = draw(1000, seed=1, chunk=0)
    steps = values[:, :4] / np.array(depots.STEPS[:4])
    assert steps == pytest.approx(np.rint(steps), abs=1e-9)


def test_chunks_are_repeatable_and_differ() -> None:
    first, again, other = draw(100, 1, 0)[1], draw(100, 1, 0)[1], draw(100, 1, 1)[1]
    assert np.array_equal(first, again) and not np.array_equal(first, other)


def test_the_files_are_uneven_and_hold_every_parcel_once(depot: Depot) -> None:
    metadata = [pq.read_metadata(path) for path in depot.files]
    assert sum(one.num_rows for one in metadata) == ROWS
    assert len({one.num_rows for one in metadata}) == len(depot.files) == 7
    parcels = np.concatenate([pq.read_table(path, columns=["parcel"])["parcel"].to_numpy() for path in depot.files])
    truth = pq.read_table(depot.truth)
    assert len(np.unique(parcels)) == ROWS and np.array_equal(parcels, truth["parcel"].to_numpy())
    assert pc.max(truth["kind"]).as_py() == len(KINDS) - 1
    table = pq.read_table(depot.files[0])
    assert table.schema.names == ["parcel", "scanner", "day", *FITTED, "count"]
    assert table.schema.field("day").type == pa.date32() and table.schema.field("scanner").type == pa.string()
    assert pc.min(table["count"]).as_py() == 1
    assert depot.size == sum(path.stat().st_size for path in depot.files)


def test_the_same_seed_writes_the_same_rows(depot: Depot, tmp_path: Path) -> None:
    again = generate(tmp_path / "again", ROWS, seed=3)
    for one, other in zip(depot.files, again.files, strict=True):
        assert pq.read_table(one).equals(pq.read_table(other))


def test_progress_counts_rows_and_nothing_is_overwritten(tmp_path: Path) -> None:
    seen: list[int] = []
    generate(tmp_path, 12_345, progress=seen.append)
    assert seen[-1] == 12_345 and seen == sorted(seen)
    with pytest.raises(drumlin.TargetError, match="exists"):
        generate(tmp_path, 10)


def test_few_rows_still_make_all_files(tmp_path: Path) -> None:
    assert sum(pq.read_metadata(path).num_rows for path in generate(tmp_path, 3).files) == 3


def test_the_adjusted_rand_index_is_the_usual_one() -> None:
    random = np.random.default_rng(1)
    first, second = random.integers(0, 5, 2000), random.integers(0, 4, 2000)
    second[:1500] = first[:1500] % 4
    table = np.bincount(first * 4 + second, minlength=20).reshape(5, 4)
    assert adjusted_rand(table) == pytest.approx(adjusted_rand_score(first, second), rel=1e-12)
    assert adjusted_rand(np.array([[4]])) == 1.0
    assert np.isnan(adjusted_rand(np.array([[1]])))


def test_the_true_law_agrees_with_itself(depot: Depot, tmp_path: Path) -> None:
    grouped = tmp_path / "grouped.parquet"
    law = drumlin.Mixture(depots.shares(), depots.means(), depots.covariances(), list(FITTED))
    drumlin.predict(str(depot.scans), law, str(grouped), progress=False)
    found = compare_with_truth(grouped, depot.truth, len(KINDS))
    assert found.rows + found.left_out == ROWS
    assert 0.9 < found.law < 1.0
    assert found.names()[0] == KINDS[0].name and len(found.names()) == len(KINDS)
    # a Mixture knows no codes: the few rows with -9999 get some component and are told apart by the law only
    assert found.ratio == pytest.approx(1.0, abs=0.01)


def test_other_parcels_are_noticed(depot: Depot, tmp_path: Path) -> None:
    table = pq.read_table(depot.files[0]).slice(1)
    pq.write_table(table.append_column("component", pa.array(np.zeros(len(table), np.int32))), tmp_path / "x.parquet")
    with pytest.raises(drumlin.DataError, match="not those"):
        compare_with_truth(tmp_path / "x.parquet", depot.truth, 1)
