"""Squared Mahalanobis distances of a fitted normal, and quantiles of the chi-square distribution.

Sources: Healy (1968), Applied Statistics 17, 157-161; Gnanadesikan & Kettenring (1972), Biometrics 28, 81-124. With the
maximum-likelihood covariance the squared distances sum to n d; with the divisor n - 1 to (n - 1) d. Iris: Fisher
(1936). Quantiles: printed tables, recomputed in 50 digits.
"""

import numpy as np
import pytest
from scipy.special import gammainc

import datasets
import drumlin
import reference
from tools import assert_close, mixture_of

QUANTILES = [
    (0.975, 1, 5.02388618731489),
    (0.975, 2, 7.37775890822787),
    (0.99, 4, 13.2767041359876),
    (0.999, 10, 29.5882984450744),
    (0.9999, 50, 95.9687484781634),
]


def test_iris_one_component():
    rows, _ = datasets.iris()
    model = drumlin.fit(rows, 1, method="em")
    squared = model.distance(rows)[:, 0] ** 2
    assert_close(squared.sum(), 600.0, 1e-13, what="sum of squared distances")
    assert_close(squared.sum() * 149.0 / 150.0, 596.0, 1e-13, what="sum with divisor n - 1")
    assert_close(squared.max() * 149.0 / 150.0, 13.10109253, 5e-9, 1.0, what="largest with divisor n - 1")


def test_iris_shares_beyond_the_published_points():
    """The 97.5 % points: chi-square of 4, and the Beta law that holds inside the sample."""
    rows, _ = datasets.iris()
    model = drumlin.fit(rows, 1, method="em")
    squared = model.distance(rows)[:, 0] ** 2 * 149.0 / 150.0
    with_numpy = np.cov(rows.T)
    centred = rows - rows.mean(axis=0)
    want = np.einsum("ni,ij,nj->n", centred, np.linalg.inv(with_numpy), centred)
    for point in (11.14328678, 10.87681213, 11.81306240):
        assert (squared > point).sum() == (want > point).sum() > 0


@pytest.mark.parametrize(("share", "d", "quantile"), QUANTILES)
def test_a_point_at_the_quantile(share, d, quantile):
    """A row at squared distance q of a d-column normal leaves 1 - share of the mass outside its ellipsoid."""
    random = np.random.default_rng(d)
    half = random.standard_normal((d, d))
    covariance = half @ half.T + d * np.eye(d)
    direction = random.standard_normal(d)
    direction /= np.linalg.norm(direction)
    mean = random.standard_normal(d)
    row = mean + np.linalg.cholesky(covariance) @ direction * np.sqrt(quantile)
    theta = reference.Theta(np.ones(1), mean[None], covariance[None])
    squared = float(mixture_of(theta).distance(row[None])[0, 0]) ** 2
    assert_close(squared, quantile, 1e-12, what="squared distance")
    assert_close(gammainc(d / 2.0, squared / 2.0), share, 1e-12, what="share inside")


@pytest.mark.parametrize(("share", "d", "quantile"), QUANTILES[:4])
def test_drawn_rows_lie_inside_as_often_as_they_should(share, d, quantile):
    random = np.random.default_rng(d)
    half = random.standard_normal((d, d))
    theta = reference.Theta(np.ones(1), np.zeros((1, d)), (half @ half.T + d * np.eye(d))[None])
    mixture = mixture_of(theta)
    n = 40_000
    drawn = mixture.draw(n, seed=4)
    rows = np.asarray(drawn[0] if isinstance(drawn, tuple) else drawn)
    inside = float((mixture.distance(rows)[:, 0] ** 2 <= quantile).mean())
    assert abs(inside - share) < 4.5 * np.sqrt(share * (1.0 - share) / n)
