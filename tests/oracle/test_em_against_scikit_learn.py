"""drumlin against scikit-learn's mixture from the same start after 1, 5 and 50 passes, its ridge set to 0."""

import warnings

import numpy as np
import pytest
from sklearn.exceptions import ConvergenceWarning
from sklearn.mixture import GaussianMixture

import datasets
import reference
from reference import Theta
from tools import assert_close, assert_same_theta, fit_from, theta_of

KINDS = {
    ("full", False): "full",
    ("full", True): "tied",
    ("diagonal", False): "diag",
    ("spherical", False): "spherical",
}
PASSES = (1, 5, 50)


def precisions_of(start: Theta, kind: str) -> np.ndarray:
    """The start's covariances inverted, in the shape that scikit-learn wants."""
    if kind == "full":
        return np.linalg.inv(start.covariances)
    if kind == "tied":
        return np.linalg.inv(start.covariances[0])
    variances = np.diagonal(start.covariances, axis1=1, axis2=2)
    return 1.0 / (variances if kind == "diag" else variances[:, 0])


def full_covariances(mixture: GaussianMixture, d: int) -> np.ndarray:
    """Its covariances as (k, d, d)."""
    stored, k = mixture.covariances_, mixture.n_components
    match mixture.covariance_type:
        case "full":
            return stored
        case "tied":
            return np.repeat(stored[None], k, axis=0)
        case "diag":
            return np.stack([np.diag(row) for row in stored])
        case _:
            return np.stack([np.eye(d) * variance for variance in stored])


def continue_to(mixture: GaussianMixture, rows: np.ndarray, passes: int) -> None:
    """Runs exactly `passes` more passes."""
    mixture.set_params(max_iter=passes)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ConvergenceWarning)  # a fixed number of passes is what is asked for
        mixture.fit(rows)
    assert mixture.n_iter_ == passes


@pytest.mark.parametrize(("structure", "pooled"), KINDS, ids=list(KINDS.values()))
def test_same_start_same_passes(structure, pooled):
    kind = KINDS[structure, pooled]
    rows = datasets.hills(8_000, components=4, columns=5, seed=21)
    labels = (np.argsort(np.argsort(rows[:, 0])) * 4 // len(rows)).astype(int)
    start = reference.partition_start(rows, labels, structure, pooled)
    other = GaussianMixture(
        4,
        covariance_type=kind,
        tol=0.0,
        reg_covar=0.0,
        warm_start=True,
        weights_init=start.weights,
        means_init=start.means,
        precisions_init=precisions_of(start, kind),
    )
    done = 0
    for passes in PASSES:
        continue_to(other, rows, passes - done)
        done = passes
        want = Theta(other.weights_, other.means_, full_covariances(other, rows.shape[1])).by_weight()
        model = fit_from(rows, start, passes, structure, pooled)
        assert_same_theta(theta_of(model.mixture), want, 1e-9)
        assert_close(model.log_likelihood, other.score(rows) * len(rows), 1e-10, what="log-likelihood")
        assert_close(model.bic, other.bic(rows), 1e-10, what="BIC")
        assert_close(model.aic, other.aic(rows), 1e-10, what="AIC")
    assert done == 50
