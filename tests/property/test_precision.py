"""precision="single": how far a float32 pass is from the float64 one, and a final model as good as that of float64."""

import numpy as np
import pyarrow as pa
import pytest

import datasets
import drumlin
from drumlin import _core
from drumlin.fitting import em
from tools import assert_close, run_job

HALF_UNIT = 2.0**-24
"""float32 rounds by up to this share."""
CHAIN = 6.0
"""A sum of 96 terms takes 96 roundings of partial sums that grow evenly: together about sqrt(96 / 3) of the last."""


def case(d: int, k: int, n: int, apart: float, offset: float = 0.0):
    """A mixture, its scaling, and float32 rows drawn about it."""
    random = np.random.default_rng(100 * d + k)
    means = apart * random.normal(size=(k, d))
    factors = np.eye(d) + 0.3 / np.sqrt(d) * random.normal(size=(k, d, d))
    labels = random.integers(0, k, size=n)
    rows = means[labels] + np.einsum("nij,nj->ni", factors[labels], random.normal(size=(n, d)))
    weights = 0.5 + random.random(k)
    covariances = factors @ factors.transpose(0, 2, 1)
    mixture = _core.Mixture(weights / weights.sum(), means + 0.05 + offset, covariances)
    return mixture, _core.Scaling(np.full(d, offset), np.ones(d)), (rows + offset).astype(np.float32)


def one_pass(mixture, scaling, rows, single: bool, weights=None):
    names = [f"x{j}" for j in range(rows.shape[1])]
    table = pa.table({name: np.ascontiguousarray(rows[:, j]) for j, name in enumerate(names)})
    if weights is not None:
        table = table.append_column("w", pa.array(weights))
    reading = _core.Reading(names, weight=None if weights is None else "w")
    measure = _core.EmStatistics(mixture, scaling, single)
    assert measure.single == single, measure.obstacle
    (statistics,) = run_job(_core.start_feed(reading, [measure], threads=2), table.to_batches(max_chunksize=777))
    assert statistics.single == single and statistics.rows == len(rows)
    return statistics


def reach(mixture, scaling) -> float:
    """The furthest reach of a component, by the formula of rust/core/src/kernels/single.rs."""
    means = (mixture.means - scaling.centre) / scaling.spread
    factors = np.linalg.inv(np.linalg.cholesky(mixture.covariances / scaling.spread / scaling.spread[:, None]))
    size = means**2 + np.diagonal(mixture.covariances, axis1=1, axis2=2) / scaling.spread**2
    return float(np.sqrt(np.einsum("kij,kj->ki", factors**2, size).max()))


CASES = [(1, 3, 0.5), (2, 8, 0.3), (3, 5, 2.0), (7, 9, 1.0), (8, 16, 0.3), (17, 3, 2.0), (33, 17, 0.5), (128, 2, 0.3)]


@pytest.mark.parametrize("weighted", [False, True])
@pytest.mark.parametrize(("d", "k", "apart"), CASES)
def test_one_pass_is_as_exact_as_float32_allows(d, k, apart, weighted):
    n = 20_011
    mixture, scaling, rows = case(d, k, n, apart)
    weights = np.random.default_rng(3).random(n) * 1e3 if weighted else None
    double = one_pass(mixture, scaling, rows, False, weights)
    single = one_pass(mixture, scaling, rows, True, weights)
    assert single.weight == double.weight
    # What a fit relies on when it compares the levels of passes.
    assert abs(single.log_likelihood - double.log_likelihood) / double.weight < 0.1 * em.trusted_gain(d)
    assert single.log_likelihood != double.log_likelihood
    got, want = (one.maximise("full", False, 0.0)[0] for one in (single, double))
    # A responsibility is wrong by the error of the log density, about e reach |y| in each of d directions.
    far = reach(mixture, scaling)
    assert_close(got.weights, want.weights, 4.0 * HALF_UNIT * far * np.sqrt(d), what="weights")
    factors = np.linalg.inv(np.linalg.cholesky(want.covariances))
    means = np.einsum("kij,kj->ki", factors, got.means - want.means)
    assert_close(means, 0.0 * means, 4.0 * HALF_UNIT * far * np.sqrt(d), 1.0, what="means, in standard deviations")
    covariances = factors @ (got.covariances - want.covariances) @ factors.transpose(0, 2, 1)
    assert_close(covariances, 0.0 * covariances, CHAIN * HALF_UNIT * far**2, 1.0, what="covariances")


def test_an_offset_costs_nothing_beyond_what_the_column_holds():
    """At 1e7 float32 has steps of 1: both precisions see the same coarse values, and agree on them as ever."""
    mixture, scaling, rows = case(3, 4, 20_011, 1.0, offset=1e7)
    assert set(np.unique(rows % 1.0)) == {0.0}
    double = one_pass(mixture, scaling, rows, False)
    single = one_pass(mixture, scaling, rows, True)
    assert abs(single.log_likelihood - double.log_likelihood) / len(rows) < 1e-7
    got, want = (one.maximise("full", False, 0.0)[0] for one in (single, double))
    assert_close(got.means, want.means, 1e-6, 1.0, what="means")
    assert_close(got.covariances, want.covariances, CHAIN * HALF_UNIT * reach(mixture, scaling) ** 2, 1.0)


@pytest.mark.parametrize(("structure", "pooled"), [("full", False), ("full", True), ("diagonal", False)])
@pytest.mark.parametrize("columns", [2, 5])
def test_the_final_model_meets_the_same_tolerance(structure, pooled, columns):
    tolerance = 1e-6
    rows = datasets.hills(20_011, components=3, columns=columns, seed=6, apart=1.0).astype(np.float32)
    shape = {"structure": structure, "pooled": pooled}
    options = {"seed": 2, "tries": 2, "tolerance": tolerance, "pass_limit": 3000, **shape}
    double = drumlin.fit(rows, 3, **options)
    single = drumlin.fit(rows, 3, precision="single", **options)
    assert double.stopped == single.stopped == "tolerance"
    kinds = [step["precision"] for step in single.trace]
    assert kinds == sorted(kinds, reverse=True) and kinds[:2] == ["single"] * 2 and kinds[-4:] == ["double"] * 4
    assert {step["precision"] for step in double.trace} == {"double"}
    # Both are at most the tolerance below the maximum that they climb to.
    assert abs(single.log_likelihood - double.log_likelihood) / len(rows) < tolerance
    further = drumlin.fit(rows, single.mixture, tolerance=0.0, pass_limit=500, **shape)
    assert 0.0 <= (further.log_likelihood - single.log_likelihood) / len(rows) < 2.0 * tolerance
