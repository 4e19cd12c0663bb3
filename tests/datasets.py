"""The small published tables of the tests, and made ones that need no file. Sources stand beside each."""

from __future__ import annotations

from pathlib import Path

import numpy as np

DATA = Path(__file__).parent / "data"


def _read(name: str) -> np.ndarray:
    return np.loadtxt(DATA / f"{name}.csv", delimiter=",", skiprows=1, ndmin=2)


def faithful() -> np.ndarray:
    """Old Faithful, 272 eruptions: duration in minutes, waiting time in minutes (Azzalini & Bowman 1990)."""
    return _read("faithful")


def geyser() -> np.ndarray:
    """Old Faithful, August 1985, 299 rows: waiting time, duration in minutes (Venables & Ripley 2002)."""
    return _read("geyser")


def iris() -> tuple[np.ndarray, np.ndarray]:
    """Fisher's (1936) iris, 150 rows by four lengths in cm, with the species as 0, 1, 2 (scikit-learn)."""
    from sklearn.datasets import load_iris

    bunch = load_iris()
    return bunch.data, bunch.target


def nist(name: str) -> np.ndarray:
    """A univariate set of the NIST Statistical Reference Datasets as one column: lew, lottery, mavro, michelso."""
    return _read(f"nist_{name}")


def nist_numacc(number: int) -> np.ndarray:
    """NumAcc1 to NumAcc4 of the same collection, which are defined by a rule. Decimal values rounded to float64."""
    if number == 1:
        return np.array([[10000001.0], [10000003.0], [10000002.0]])
    base = {2: "1", 3: "1000000", 4: "10000000"}[number]
    low, middle, high = (float(f"{base}.{digit}") for digit in "123")
    return np.array([middle] + [low, high] * 500)[:, None]


def nist_pi_digits() -> np.ndarray:
    """PiDigits: the first 5000 digits of pi as distributed, with its slip (a 3 where pi has an 8)."""
    unit = 10**5020

    def arctangent_of_inverse(n: int) -> int:
        term = total = unit // n
        divisor, sign = 3, -1
        while term:
            term //= n * n
            total += sign * (term // divisor)
            divisor, sign = divisor + 2, -sign
        return total

    pi = 4 * (4 * arctangent_of_inverse(5) - arctangent_of_inverse(239))  # Machin (1706)
    digits = [pi // 10 ** (5020 - position) % 10 for position in range(5000)]
    assert digits[956] == 8
    digits[956] = 3
    return np.array(digits, dtype=np.float64)[:, None]


def esl_points() -> np.ndarray:
    """The 20 points of Hastie, Tibshirani & Friedman (2009), The Elements of Statistical Learning, table 8.1."""
    text = "-0.39 0.12 0.94 1.67 1.76 2.44 3.72 4.28 4.92 5.53 0.06 0.48 1.01 1.68 1.80 3.25 4.12 4.60 5.28 6.22"
    return np.array([float(word) for word in text.split()])[:, None]


def pearson_crabs() -> tuple[np.ndarray, np.ndarray]:
    """Pearson's (1894) Naples crabs: midpoints of 29 classes (1..29) as one column, and the 1000 animals' counts."""
    text = "1 3 5 2 7 10 13 19 20 25 40 31 60 62 54 74 84 86 96 85 75 47 43 24 19 9 5 0 1"
    counts = np.array([float(word) for word in text.split()])
    return np.arange(1.0, 30.0)[:, None], counts


def hills(rows: int, components: int = 3, columns: int = 3, seed: int = 5, apart: float = 2.5) -> np.ndarray:
    """A made table of overlapping, tilted hills with unequal weights, centred near zero."""
    random = np.random.default_rng(seed)
    weights = 0.6 ** np.arange(components)
    label = random.choice(components, size=rows, p=weights / weights.sum())
    means = apart * random.standard_normal((components, columns))
    tilts = random.standard_normal((components, columns, columns)) * 0.5 + np.eye(columns)
    return means[label] + np.einsum("nij,nj->ni", tilts[label], random.standard_normal((rows, columns)))
