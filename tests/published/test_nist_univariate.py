"""NIST Statistical Reference Datasets, univariate summary statistics, fitted with one component.

Source: National Institute of Standards and Technology, StRD, https://www.itl.nist.gov/div898/strd/ (certified mean, and
standard deviation with divisor n - 1, to 15 digits). Values marked ML are the maximum-likelihood variance (divisor n)
and the maximised log-likelihood, computed from the same data by two independent routes.

Two traps. The collection's PiDigits has a 3 where pi has an 8; its certified values hold for the set as distributed.
NumAcc3 and NumAcc4 rounded to float64 have standard deviations of 0.1000000000349246 and 0.10000000055879354: the
program is held to the data it is given, which is worked out here in rational arithmetic, and to the certified 0.1
only as far as these data go.
"""

import math
from fractions import Fraction

import numpy as np
import pytest

import datasets
import drumlin
from tools import assert_close

# set: n, certified mean, certified standard deviation (n - 1)
CERTIFIED = {
    "lottery": (218, 518.958715596330, 291.699727470969),
    "lew": (200, -177.435000000000, 277.332168044316),
    "mavro": (50, 2.00185600000000, 0.000429123454003053),
    "michelso": (100, 299.852400000000, 0.0790105478190518),
    "pidigits": (5000, 4.53480000000000, 2.86733906028871),
    "numacc1": (3, 10000002.0, 1.0),
    "numacc2": (1001, 1.2, 0.1),
    "numacc3": (1001, 1000000.2, 0.1),
    "numacc4": (1001, 10000000.2, 0.1),
}
# How far the float64 data themselves are from the certified decimal ones, in standard deviations of the certified
# value.
REACH = {"mavro": 1.5e-13, "michelso": 5e-14, "numacc3": 10**-9.4, "numacc4": 10**-8.2}
# set: ML variance (divisor n), maximised log-likelihood
MAXIMUM_LIKELIHOOD = {
    "lottery": (84698.415726790674, -1546.1354874161768),
    "lew": (76528.565775, -1408.3296425347778),
    "mavro": (1.80464e-7, 317.24643646598762),
    "michelso": (0.00618024, 112.42605534528965),
    "pidigits": (8.21998896, -12361.114831027097),
}


def data_of(name: str) -> np.ndarray:
    if name == "pidigits":
        return datasets.nist_pi_digits()
    return datasets.nist_numacc(int(name[-1])) if name.startswith("numacc") else datasets.nist(name)


def exact_moments(rows: np.ndarray) -> tuple[Fraction, Fraction]:
    """Mean and variance (divisor n) of float64 numbers without any rounding."""
    values = [Fraction(float(value)) for value in rows[:, 0]]
    mean = sum(values, Fraction(0)) / len(values)
    return mean, sum(((value - mean) ** 2 for value in values), Fraction(0)) / len(values)


@pytest.fixture(scope="module", params=list(CERTIFIED))
def fitted(request):
    rows = data_of(request.param)
    return request.param, rows, drumlin.fit(rows, 1, method="em")


def test_certified_mean_and_deviation(fitted):
    name, rows, model = fitted
    n, mean, deviation = CERTIFIED[name]
    assert len(rows) == n
    assert_close(model.mixture.means, [[mean]], 2e-15, what="mean")
    got = math.sqrt(float(model.mixture.covariances[0, 0, 0]) * n / (n - 1))
    assert_close(got, deviation, REACH.get(name, 2e-14), what="standard deviation")


def test_moments_of_the_float64_data(fitted):
    _, rows, model = fitted
    mean, variance = exact_moments(rows)
    assert_close(model.mixture.means, [[float(mean)]], 4e-16, what="mean")
    # Numeric contract: the relative error of a covariance stays below 1e-12. A set this small does far better.
    assert_close(model.mixture.covariances, [[[float(variance)]]], 1e-13, what="variance")


def test_maximum_likelihood(fitted):
    name, rows, model = fitted
    variance, likelihood = MAXIMUM_LIKELIHOOD.get(name, (None, None))
    if variance is None:
        exact = float(exact_moments(rows)[1])
        variance, likelihood = exact, -0.5 * len(rows) * (math.log(2.0 * math.pi * exact) + 1.0)
        assert_close(model.mixture.covariances, [[[variance]]], 1e-13, what="ML variance")
    else:
        # The published variance is of the decimal data: as float64 those of Mavro have one 1.5e-13 larger.
        assert_close(model.mixture.covariances, [[[variance]]], 4e-13, what="ML variance")
    # At the maximum an error of the variance is felt to second order only; what is left is rounding.
    assert_close(model.log_likelihood, likelihood, 1e-13, what="log-likelihood")


def test_the_traps_are_in_the_data():
    digits = datasets.nist_pi_digits()
    assert abs(digits.mean() - 4.5348) < 1e-12
    for number, deviation in ((3, 0.1000000000349246), (4, 0.10000000055879354)):
        rows = datasets.nist_numacc(number)
        exact = math.sqrt(float(exact_moments(rows)[1] * len(rows) / (len(rows) - 1)))
        assert_close(exact, deviation, 1e-15)
    wide = datasets.nist_numacc(4)[:, 0]
    naive = float(np.mean(wide * wide) - np.mean(wide) ** 2)
    assert abs(naive - 0.01) > 0.001, "the textbook slip would pass: this set no longer tells"
