"""Waiting times of the Old Faithful geyser, two components.

`faithful`: Azzalini & Bowman (1990), Applied Statistics 39, 357-365; fitted by a general optimiser in Everitt &
Hothorn, A Handbook of Statistical Analyses Using R (0.360891, 54.612122, 5.872379, 80.093414, 5.867288, 1034.002: a
loose stop). `geyser`: Venables & Ripley (2002), Modern Applied Statistics with S, chapter 16 (0.30759, 54.2026,
4.9520, 80.3603, 7.5076, 1157.542). The digits below are those of EM and L-BFGS run to the end, which agree.
"""

import numpy as np
import pytest

import datasets
import drumlin
import reference
from tools import assert_close, fit_from, theta_of

CASES = {
    "faithful": (0.36088607, (54.6148565, 80.0910694), (5.8712194, 5.8677344), -1034.001749832),
    "geyser": (0.30759356, (54.202649, 80.360309), (4.952001, 7.507636), -1157.542015995),
}
PRINTED = {
    "faithful": (0.360891, (54.612122, 80.093414), (5.872379, 5.867288), -1034.002),
    "geyser": (0.30759, (54.2026, 80.3603), (4.9520, 7.5076), -1157.542),
}


def waiting(name: str) -> np.ndarray:
    return datasets.faithful()[:, 1:] if name == "faithful" else datasets.geyser()[:, :1]


@pytest.mark.parametrize("name", list(CASES))
def test_waiting(name):
    rows = waiting(name)
    start = reference.partition_start(rows, (rows[:, 0] > 68.0).astype(int))
    model = fit_from(rows, start, 300)
    theta = theta_of(model.mixture)  # the heavier component has the longer wait
    share, means, deviations, likelihood = CASES[name]
    # Half a unit of the last printed digit.
    assert_close(theta.weights, [1.0 - share, share], 5e-9, 1.0, what="weights")
    assert_close(theta.means[::-1, 0], means, 5e-7, 1.0, what="means")
    assert_close(np.sqrt(theta.covariances[::-1, 0, 0]), deviations, 5e-7, 1.0, what="deviations")
    assert_close(model.log_likelihood, likelihood, 5e-10, 1.0, what="log-likelihood")
    # The books' numbers: to their last digit for geyser, to three digits for the loosely stopped faithful.
    share, means, deviations, likelihood = PRINTED[name]
    relative = 2e-5 if name == "geyser" else 5e-4
    assert_close(theta.weights[1], share, relative, what="printed share")
    assert_close(theta.means[::-1, 0], means, relative, what="printed means")
    assert_close(np.sqrt(theta.covariances[::-1, 0, 0]), deviations, relative, what="printed deviations")
    assert_close(model.log_likelihood, likelihood, 6e-4, 1.0, what="printed log-likelihood")


@pytest.mark.parametrize("name", list(CASES))
def test_found_from_drumlins_own_start(name):
    model = drumlin.fit(waiting(name), 2, method="em", tolerance=1e-12, pass_limit=500)
    assert_close(model.log_likelihood, CASES[name][3], 1e-8, 1.0, what="log-likelihood")


def test_eruptions_and_waiting_full():
    rows = datasets.faithful()
    model = fit_from(rows, reference.partition_start(rows, (rows[:, 0] >= 3.0).astype(int)), 300)
    theta = theta_of(model.mixture)
    assert_close(theta.weights, [0.64412714, 0.35587286], 5e-9, 1.0, what="weights")
    assert_close(theta.means, [[4.289662, 79.9681152], [2.0363885, 54.4785164]], 6e-7, 1.0, what="means")
    short, long = theta.covariances[1], theta.covariances[0]
    assert_close(short, [[0.0691677, 0.4351676], [0.4351676, 33.6972821]], 6e-8, 1.0, what="covariance, short")
    assert_close(long[0], [0.1699684, 0.9406093], 6e-8, 1.0, what="covariance, long")
    # The source has 36.0462111; run on until nothing moves, EM gives 36.0462113.
    assert_close(long[1, 1], 36.0462113, 6e-8, 1.0, what="variance of waiting, long")
    assert_close(model.log_likelihood, -1130.263960185, 6e-10, 1.0, what="log-likelihood")
