"""Plain EM never falls, the exact invariants of an M-step hold, and K = 1 is mean and covariance."""

import numpy as np
import pyarrow as pa
from hypothesis import given

import reference
from strategies import cases
from tools import assert_close, em_pass, fit_from, mixture_of, theta_of


def table_of(case) -> tuple[pa.Table, list[str]]:
    columns = {f"x{j}": case.rows[:, j] for j in range(case.rows.shape[1])}
    return pa.table(columns | {"w": case.weights}), list(columns)


@given(cases())
def test_never_falls(case):
    table, columns = table_of(case)
    model = fit_from(table, case.start, 25, case.structure, case.pooled, row_weight="w")
    trace = np.array([step["log_likelihood"] for step in model.record["trace"]] + [model.log_likelihood])
    assert len(trace) >= 26
    # A total of n numbers is known to about eps times the sum of their sizes.
    rounding = 1e-14 * case.weights.sum() * np.abs(model.log_density(case.rows)).max()
    assert np.diff(trace).min() >= -rounding


@given(cases())
def test_invariants_of_an_m_step(case):
    """sum pi mu is the weighted mean; between and within covariances add up to the weighted covariance."""
    mixture, _, _ = em_pass(case.rows, case.start, case.structure, case.pooled, weights=case.weights).maximise(
        case.structure, case.pooled, 0.0
    )
    share = case.weights / case.weights.sum()
    mean = share @ case.rows
    centred = case.rows - mean
    total = (share[:, None] * centred).T @ centred
    deviations = np.sqrt(np.diag(total))
    assert_close(mixture.weights.sum(), 1.0, 1e-14)
    assert_close(mixture.weights @ mixture.means, mean, 1e-12, deviations, what="mean")
    between = mixture.means - mean
    parts = np.einsum("k,kij->ij", mixture.weights, mixture.covariances + between[:, :, None] * between[:, None, :])
    scale = np.outer(deviations, deviations)
    if case.structure == "full":
        assert_close(parts, total, 1e-11, scale, what="covariance")
    elif case.structure == "diagonal":
        assert_close(np.diag(parts), np.diag(total), 1e-11, what="variances")
    else:
        assert_close(np.trace(parts), np.trace(total), 1e-11, what="total variance")


@given(cases(most_components=1))
def test_one_component_is_mean_and_covariance(case):
    table, columns = table_of(case)
    model = fit_from(table, case.start, 1, row_weight="w")
    wide = case.rows.astype(np.longdouble)
    share = (case.weights / case.weights.sum()).astype(np.longdouble)
    mean = share @ wide
    covariance = (share[:, None] * (wide - mean)).T @ (wide - mean)
    scale = np.sqrt(np.outer(np.diag(covariance), np.diag(covariance)).astype(float))
    assert_close(model.mixture.means[0], mean, 1e-13, np.sqrt(np.diag(covariance)).astype(float), what="mean")
    assert_close(model.mixture.covariances[0], covariance, 1e-12, scale, what="covariance")
    assert np.array_equal(model.mixture.weights, [1.0])


@given(cases(most_components=4))
def test_responsibilities_sum_to_one(case):
    for spread in (1.0, 1e-3, 1e4):
        theta = reference.Theta(case.start.weights, case.start.means, case.start.covariances * spread)
        responsibilities = mixture_of(theta, case.structure, case.pooled).responsibilities(case.rows)
        assert np.abs(responsibilities.sum(axis=1) - 1.0).max() <= 1e-12
        assert (responsibilities >= 0.0).all() and (responsibilities <= 1.0).all()


@given(cases())
def test_shares_of_the_statistics(case):
    statistics = em_pass(case.rows, case.start, case.structure, case.pooled, weights=case.weights)
    responsibilities, likelihood = reference.e_step(case.rows, case.weights, case.start)
    assert_close(statistics.shares, case.weights @ responsibilities, 1e-11, statistics.weight, what="shares")
    assert_close(statistics.shares.sum(), case.weights.sum(), 1e-13)
    assert_close(statistics.log_likelihood, likelihood, 1e-12, what="log-likelihood")


@given(cases(most_rows=200))
def test_a_fixed_point_stays(case):
    """A mixture that EM no longer moves is moved by a further pass only by rounding."""
    if len(case.start.weights) > 1:
        return
    first = fit_from(case.rows, case.start, 1, case.structure, case.pooled)
    second = fit_from(case.rows, theta_of(first.mixture), 1, case.structure, case.pooled)
    assert_close(second.mixture.covariances, first.mixture.covariances, 1e-13, np.abs(first.mixture.covariances).max())
