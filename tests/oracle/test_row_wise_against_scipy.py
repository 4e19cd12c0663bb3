"""The row-wise numbers of a mixture against SciPy's normal density and the definitions."""

import numpy as np
import pytest
from scipy.special import logsumexp
from scipy.stats import multivariate_normal

import datasets
import reference
from tools import assert_close, mixture_of


@pytest.fixture(scope="module")
def case():
    rows = datasets.hills(3_500, components=4, columns=3, seed=31)
    labels = (np.argsort(np.argsort(rows[:, 1])) * 4 // len(rows)).astype(int)
    theta = reference.partition_start(rows, labels)
    terms = np.stack(
        [
            np.log(weight) + multivariate_normal(mean, covariance).logpdf(rows)
            for weight, mean, covariance in zip(theta.weights, theta.means, theta.covariances, strict=True)
        ],
        axis=1,
    )
    return rows, theta, terms


def test_log_density(case):
    rows, theta, terms = case
    assert_close(mixture_of(theta).log_density(rows), logsumexp(terms, axis=1), 1e-12, what="log density")


def test_responsibilities(case):
    rows, theta, terms = case
    want = np.exp(terms - logsumexp(terms, axis=1, keepdims=True))
    got = mixture_of(theta).responsibilities(rows)
    assert_close(got, want, 1e-12, 1.0, what="responsibilities")
    assert np.abs(got.sum(axis=1) - 1.0).max() <= 1e-12


def test_assign(case):
    rows, theta, terms = case
    mixture = mixture_of(theta)
    assert np.array_equal(mixture.assign(rows), np.asarray(mixture.ids)[terms.argmax(axis=1)])


def test_distance(case):
    rows, theta, _ = case
    want = np.empty((len(rows), 4))
    for k, (mean, covariance) in enumerate(zip(theta.means, theta.covariances, strict=True)):
        centred = rows - mean
        want[:, k] = np.sqrt(np.einsum("ni,ij,nj->n", centred, np.linalg.inv(covariance), centred))
    assert_close(mixture_of(theta).distance(rows), want, 1e-10, what="distance")


@pytest.mark.parametrize(("structure", "pooled"), reference.STRUCTURES)
def test_every_structure(case, structure, pooled):
    rows, _, _ = case
    labels = (np.argsort(np.argsort(rows[:, 1])) * 4 // len(rows)).astype(int)
    theta = reference.partition_start(rows, labels, structure, pooled)
    mixture = mixture_of(theta, structure, pooled)
    assert_close(mixture.log_density(rows), reference.log_density(rows, theta), 1e-12, what="log density")
    assert_close(mixture.distance(rows) ** 2, reference.squared_distances(rows, theta), 1e-11, what="distance")


def test_float32_rows_are_widened(case):
    rows, theta, _ = case
    narrow = rows.astype(np.float32)
    mixture = mixture_of(theta)
    assert np.array_equal(mixture.log_density(narrow), mixture.log_density(narrow.astype(np.float64)))


@pytest.mark.parametrize("view", ["fortran", "reversed", "every second", "transposed"])
def test_strides(case, view):
    rows, theta, _ = case
    strided = {
        "fortran": np.asfortranarray(rows),
        "reversed": rows[::-1],
        "every second": np.repeat(rows, 2, axis=0)[::2],
        "transposed": np.ascontiguousarray(rows.T).T,
    }[view]
    mixture = mixture_of(theta)
    assert np.array_equal(mixture.log_density(strided), mixture.log_density(np.ascontiguousarray(strided)))


def test_a_model_has_the_same_row_wise_numbers(case):
    import drumlin

    rows, theta, _ = case
    model = drumlin.fit(rows, mixture_of(theta), pass_limit=1, tolerance=0.0)
    for name in ("log_density", "responsibilities", "assign", "distance"):
        assert np.array_equal(getattr(model, name)(rows), getattr(model.mixture, name)(rows)), name
    assert_close(model.log_density(rows).sum(), model.log_likelihood, 1e-12, what="log-likelihood")
