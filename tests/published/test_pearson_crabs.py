"""Row weights: Pearson's (1894) forehead breadths of 1000 Naples crabs in 29 classes, counts as row weights.

Source: K. Pearson (1894), Philosophical Transactions of the Royal Society A 185, 71-110. The five raw moments printed
there confirm the counts. Estimates are those of EM and a general optimiser, which agree.
"""

import numpy as np
import pyarrow as pa
import pytest

import datasets
import drumlin
import reference
from tools import assert_close, fit_from, theta_of

MOMENTS = [16.799, 304.923, 5831.759, 116061.435, 2385609.719]
PASSES = 3000  # the slow eigenvalue is 0.9936: 3000 passes take e^-19 off whatever is left


@pytest.fixture(scope="module")
def crabs():
    classes, counts = datasets.pearson_crabs()
    start = reference.partition_start(classes, (classes[:, 0] > 16.0).astype(int), weights=counts)
    table = pa.table({"x0": classes[:, 0], "count": counts})
    model = fit_from(table, start, PASSES, row_weight="count")
    return classes, counts, start, model


def test_the_counts_have_the_printed_moments(crabs):
    classes, counts, _, _ = crabs
    assert counts.sum() == 1000.0
    for power, moment in enumerate(MOMENTS, start=1):
        assert_close((counts * classes[:, 0] ** power).sum() / 1000.0, moment, 1e-13)


def test_one_component(crabs):
    classes, counts, _, _ = crabs
    model = drumlin.fit(pa.table({"x0": classes[:, 0], "count": counts}), 1, columns=["x0"], row_weight="count")
    assert_close(model.mixture.means, [[16.799]], 1e-14, what="mean")
    assert_close(model.mixture.covariances, [[[22.716599]]], 1e-13, what="variance")
    assert_close(model.log_likelihood, -2980.486478578, 5e-10, 1.0, what="log-likelihood")


def test_two_components(crabs):
    model = crabs[3]
    theta = theta_of(model.mixture)
    # The rate 0.9936 leaves rounding amplified about 150 times; the printed digits end first.
    assert_close(theta.weights, [1.0 - 0.432743996, 0.432743996], 2e-8, 1.0, what="weights")
    assert_close(theta.means[:, 0], [19.2697977, 13.5601917], 2e-7, 1.0, what="means")
    assert_close(np.sqrt(theta.covariances[:, 0, 0]), [3.154722, 4.5777952], 6e-7, 1.0, what="deviations")
    assert_close(model.log_likelihood, -2953.8820188751, 1e-9, 1.0, what="log-likelihood")


def test_weighted_is_duplicated(crabs):
    classes, counts, start, _ = crabs
    weighted = fit_from(pa.table({"x0": classes[:, 0], "count": counts}), start, 200, row_weight="count")
    copies = np.repeat(classes, counts.astype(int), axis=0)
    assert len(copies) == 1000
    duplicated = fit_from(copies, start, 200)
    a, b = theta_of(weighted.mixture), theta_of(duplicated.mixture)
    assert_close(a.weights, b.weights, 1e-12)
    assert_close(a.means, b.means, 1e-12)
    assert_close(a.covariances, b.covariances, 1e-12)
    assert_close(weighted.log_likelihood, duplicated.log_likelihood, 1e-13)
    assert_close(weighted.bic, duplicated.bic, 1e-13)


def test_scaled_weights_leave_the_estimates(crabs):
    classes, counts, start, _ = crabs
    plain, scaled = (
        fit_from(pa.table({"x0": classes[:, 0], "count": w}), start, 200, row_weight="count")
        for w in (counts, 0.37 * counts)
    )
    a, b = theta_of(plain.mixture), theta_of(scaled.mixture)
    assert_close(a.weights, b.weights, 1e-12)
    assert_close(a.means, b.means, 1e-12)
    assert_close(a.covariances, b.covariances, 1e-12)
    assert_close(scaled.log_likelihood, 0.37 * plain.log_likelihood, 1e-13)


def test_zero_weight_is_absent(crabs):
    classes, counts, start, _ = crabs
    assert (counts == 0.0).sum() == 1
    full = fit_from(pa.table({"x0": classes[:, 0], "count": counts}), start, 50, row_weight="count")
    kept = counts > 0.0
    absent = fit_from(pa.table({"x0": classes[kept, 0], "count": counts[kept]}), start, 50, row_weight="count")
    assert_close(theta_of(full.mixture).means, theta_of(absent.mixture).means, 1e-13)
    assert_close(full.log_likelihood, absent.log_likelihood, 1e-14)


def test_other_units_shift_the_likelihood(crabs):
    """y = a + b x: l falls by 1000 log b, the weights stay, the means and deviations go with the units."""
    classes, counts, start, _ = crabs
    a, b = 0.5785, 0.004  # class midpoints in units of forehead breadth to body length
    moved = reference.Theta(start.weights, a + b * start.means, b * b * start.covariances)
    plain = fit_from(pa.table({"x0": classes[:, 0], "count": counts}), start, 100, row_weight="count")
    other = fit_from(pa.table({"x0": a + b * classes[:, 0], "count": counts}), moved, 100, row_weight="count")
    assert_close(other.log_likelihood, plain.log_likelihood - 1000.0 * np.log(b), 1e-11)
    p, q = theta_of(plain.mixture), theta_of(other.mixture)
    assert_close(q.weights, p.weights, 1e-11)
    assert_close(q.means, a + b * p.means, 1e-11)
    assert_close(q.covariances, b * b * p.covariances, 1e-11)
