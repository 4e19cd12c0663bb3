"""The 20 points of The Elements of Statistical Learning (Hastie, Tibshirani & Friedman, 2nd edition 2009, section 8.5).

The maximiser printed there (4.62, 0.87, 1.06, 0.77, 0.546) is that of an EM run stopped early: its log-likelihood is
-38.923602. The values here are the exact maximum, found by EM and by a general optimiser.
"""

import numpy as np

import datasets
import reference
from tools import assert_close, fit_from, mixture_of, theta_of

MAXIMUM = {
    "weights": [0.5545902325255461, 1.0 - 0.5545902325255461],
    "means": [1.08316180773906, 4.655912807978878],
    "variances": [0.8113706189175555, 0.8187935704379324],
    "log_likelihood": -38.9133715074374749,
}
START = reference.Theta(np.array([0.5, 0.5]), np.array([[1.0], [4.5]]), np.ones((2, 1, 1)))


def test_exact_maximum():
    model = fit_from(datasets.esl_points(), START, 200)
    theta = theta_of(model.mixture)
    # Rate 0.656: after 200 passes only rounding is left. It is amplified by 1 / (1 - 0.656).
    assert_close(theta.weights, MAXIMUM["weights"], 1e-13, what="weights")
    assert_close(theta.means[:, 0], MAXIMUM["means"], 1e-13, what="means")
    assert_close(theta.covariances[:, 0, 0], MAXIMUM["variances"], 1e-13, what="variances")
    assert_close(model.log_likelihood, MAXIMUM["log_likelihood"], 1e-14, what="log-likelihood")


def test_the_printed_values_are_lower():
    printed = reference.Theta(
        np.array([0.546, 0.454]), np.array([[1.06], [4.62]]), np.array([0.77, 0.87]).reshape(2, 1, 1)
    )
    likelihood = mixture_of(printed).log_density(datasets.esl_points()).sum()
    assert_close(likelihood, -38.923602, 1e-8, what="log-likelihood")


def test_likelihood_beside_a_spike():
    """A narrow component on the largest point with weight 0.05 overtakes the maximum as its variance goes to 0.

    At variance 1e-30 its float64 mean 6.22 must sit on the float64 point, and it does.
    """
    points = datasets.esl_points()
    first = np.delete(points, points[:, 0].argmax(), axis=0)
    likelihoods = []
    for variance in (1e-2, 1e-6, 1e-12, 1e-30, 1e-60):
        spike = reference.Theta(
            np.array([0.95, 0.05]),
            np.array([[first.mean()], [6.22]]),
            np.array([first.var(), variance]).reshape(2, 1, 1),
        )
        got = mixture_of(spike).log_density(points).sum()
        assert_close(got, reference.log_density(points, spike).sum(), 1e-12)
        likelihoods.append(got)
    assert np.all(np.diff(likelihoods) > 0) and likelihoods[-1] > MAXIMUM["log_likelihood"]
