"""Measures split at leaf borders, carried as bytes and merged along the canonical tree equal one run to the bit."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import datasets
import reference
from drumlin import _core
from tools import core_mixture, measure, plain_scaling

LEAF, TASK = _core.LEAF_ROWS, _core.LEAF_ROWS * _core.TASK_LEAVES


@pytest.fixture(scope="module")
def case():
    rows = datasets.hills(2 * TASK + 5 * LEAF + 123, components=3, columns=2, seed=17)
    weights = np.random.default_rng(5).exponential(size=len(rows))
    labels = (np.argsort(np.argsort(rows[:, 0])) * 3 // len(rows)).astype(int)
    return rows, weights, reference.partition_start(rows, labels), plain_scaling(rows)


def all_measures(case):
    """One of each kind of measure."""
    mixture = core_mixture(case[2])
    return [
        _core.EmStatistics(mixture, case[3]),
        _core.Scores(mixture, case[3]),
        _core.Sample(2, 500, 3),
        _core.ColumnSummary(2),
    ]


def as_bytes(measures) -> list[bytes]:
    return [one.to_bytes() for one in measures]


@pytest.fixture(scope="module")
def whole(case):
    """The bytes of one run over all rows in one thread."""
    result = as_bytes(measure(case[0], all_measures(case), weights=case[1], size=len(case[0])))
    assert len(result) == 4 and all(result) and len(set(result)) == 4
    return result


@pytest.mark.parametrize("unit", [LEAF, TASK], ids=["leaves", "tasks"])
def test_merged_along_the_tree(case, whole, unit):
    rows, weights = case[:2]
    tree = _core.Tree()
    pieces = 0
    for first in range(0, len(rows), unit):
        part = slice(first, first + unit)
        measures = measure(rows[part], all_measures(case), weights=weights[part], first_row=first)
        tree.push([_core.Measure.from_bytes(data) for data in as_bytes(measures)])
        pieces += 1
    assert pieces > 2
    assert as_bytes(tree.finish()) == whole


@settings(max_examples=8)
@given(sizes=st.lists(st.integers(0, 3 * LEAF), max_size=25), threads=st.sampled_from([1, 2, 3, 4]))
def test_batches_of_any_lengths_and_any_threads(case, whole, sizes, threads):
    measures = measure(case[0], all_measures(case), weights=case[1], size=sizes, threads=threads)
    assert as_bytes(measures) == whole


def test_bytes_there_and_back(case, whole):
    for data in whole:
        assert _core.Measure.from_bytes(data).to_bytes() == data


def test_a_bit_that_changes_is_seen(case, whole):
    """The comparison can fail: one value of one row changed by a millionth."""
    rows = case[0].copy()
    rows[LEAF + 7, 0] += 1e-6
    assert as_bytes(measure(rows, all_measures(case), weights=case[1]))[0] != whole[0]


def test_measures_of_two_kinds_do_not_merge(case):
    tree = _core.Tree()
    import drumlin

    tree.push([_core.ColumnSummary(2)])
    with pytest.raises(drumlin.DrumlinError):
        tree.push([_core.Sample(2, 500, 3)])
        tree.finish()


@settings(max_examples=60)
@given(data=st.binary(max_size=200), at=st.integers(0, 10_000), kind=st.integers(0, 3))
def test_damaged_bytes_are_refused_and_never_crash(whole, data, at, kind):
    import drumlin

    good = whole[kind]
    for broken in (data, good[: at % len(good)], good + data[:1] + b"x"):
        with pytest.raises(drumlin.DrumlinError):
            _core.Measure.from_bytes(broken)


def test_numbers_of_the_summary_and_the_sample(case):
    rows, weights = case[:2]
    weights = np.round(weights, 1)
    _, _, sample, summary = measure(rows, all_measures(case), weights=weights)
    table = summary.table()
    assert table["rows"] == len(rows)
    assert table["zero_weights"] == (weights == 0.0).sum() > 0
    assert table["complete"] == (weights > 0.0).sum()
    assert np.array_equal(table["least"], rows[weights > 0].min(axis=0)) or np.array_equal(
        table["least"], rows.min(axis=0)
    )
    np.testing.assert_allclose(table["weight"], weights.sum(), rtol=1e-13)
    assert sample.values.shape == (500, 2) and sample.weights.shape == (500,)
    numbers = sample.rows.astype(int)
    assert len(set(numbers)) == 500 and (weights[numbers] > 0.0).all()
    assert np.array_equal(sample.values, rows[numbers]), "values in raw units, to the bit"


def test_a_sample_that_holds_all_rows_has_the_row_weights(case):
    rows, weights = case[0][:3_000], case[1][:3_000]
    (sample,) = measure(rows, [_core.Sample(2, 3_000, 3)], weights=weights)
    numbers = sample.rows.astype(int)
    assert sorted(numbers) == list(range(3_000))
    assert np.array_equal(sample.weights, weights[numbers])


def test_sample_weights_are_unbiased(case):
    """Inverse-probability weights: the total over many seeds is the total row weight."""
    rows, weights = case[0][:3_000], case[1][:3_000]
    samples = measure(rows, [_core.Sample(2, 100, seed) for seed in range(200)], weights=weights)
    totals = np.array([sample.weights.sum() for sample in samples])
    sums = np.array([sample.weights @ sample.values for sample in samples])
    error = totals.std() / np.sqrt(len(totals)) + 1e-9 * weights.sum()
    assert abs(totals.mean() - weights.sum()) < 4.5 * error
    want, spread = weights @ rows, sums.std(axis=0) / np.sqrt(len(sums))
    assert np.all(np.abs(sums.mean(axis=0) - want) < 4.5 * spread)
