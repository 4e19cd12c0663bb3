"""drumlin against the textbook EM of `reference.py`, from the same start, after 1, 5 and 50 passes."""

import numpy as np
import pytest

import datasets
import reference
from reference import STRUCTURES
from tools import assert_close, assert_same_theta, fit_from, theta_of

PARAMETERS = 1e-9
LIKELIHOOD = 1e-10


def start_for(rows, structure, pooled, k=3, weights=None):
    """A plain start that no component of which is near its end: moments of the rows sorted by their first column."""
    labels = (np.argsort(np.argsort(rows[:, 0])) * k // len(rows)).astype(int)
    return reference.partition_start(rows, labels, structure, pooled, weights)


@pytest.mark.parametrize("passes", [1, 5, 50])
@pytest.mark.parametrize(("structure", "pooled"), STRUCTURES)
def test_parameters_and_likelihood(structure, pooled, passes):
    rows = datasets.hills(10_000, components=3, columns=4)
    start = start_for(rows, structure, pooled)
    want, trace = reference.run(rows, start, passes, structure, pooled)
    model = fit_from(rows, start, passes, structure, pooled)
    assert (model.mixture.structure, model.mixture.pooled) == (structure, pooled)
    assert_same_theta(theta_of(model.mixture), want.by_weight(), PARAMETERS)
    assert_close(model.log_likelihood, trace[-1], LIKELIHOOD, what="log-likelihood")


@pytest.mark.parametrize("passes", [1, 5, 50])
@pytest.mark.parametrize(("structure", "pooled"), STRUCTURES)
def test_row_weights(structure, pooled, passes):
    rows = datasets.hills(5_000, components=3, columns=3, seed=11)
    weights = np.random.default_rng(3).exponential(size=len(rows))
    weights[::17] = 0.0
    start = start_for(rows, structure, pooled, weights=weights)
    want, trace = reference.run(rows, start, passes, structure, pooled, weights)
    table = {f"x{j}": rows[:, j] for j in range(3)} | {"w": weights}
    import pyarrow as pa

    model = fit_from(pa.table(table), start, passes, structure, pooled, row_weight="w")
    assert_same_theta(theta_of(model.mixture), want.by_weight(), PARAMETERS)
    assert_close(model.log_likelihood, trace[-1], LIKELIHOOD, what="log-likelihood")


@pytest.mark.parametrize("k", [1, 2, 7, 16])
@pytest.mark.parametrize("d", [1, 2, 5, 9, 17])
def test_shapes(k, d):
    """Every tail length of rows in a kernel's block is met over the sizes used here."""
    rows = datasets.hills(3_000 + 37 * d + k, components=k, columns=d, seed=100 + d, apart=3.0)
    start = start_for(rows, "full", False, k)
    want, trace = reference.run(rows, start, 3)
    model = fit_from(rows, start, 3)
    assert_same_theta(theta_of(model.mixture), want.by_weight(), PARAMETERS)
    assert_close(model.log_likelihood, trace[-1], LIKELIHOOD, what="log-likelihood")


def test_trace_is_the_likelihood_of_each_pass():
    rows = datasets.hills(4_000)
    start = start_for(rows, "full", False)
    _, trace = reference.run(rows, start, 6)
    model = fit_from(rows, start, 6)
    got = np.array([step["log_likelihood"] for step in model.record["trace"]])
    assert len(got) >= 6
    assert_close(got, trace[: len(got)], LIKELIHOOD, what="trace")


def test_the_comparison_can_fail():
    """One pass more is far outside the tolerance, so that agreement above means something."""
    rows = datasets.hills(4_000)
    start = start_for(rows, "full", False)
    want, _ = reference.run(rows, start, 6)
    model = fit_from(rows, start, 5)
    with pytest.raises(AssertionError, match="off by"):
        assert_same_theta(theta_of(model.mixture), want.by_weight(), PARAMETERS)
