"""Cases: what `cases.toml` holds, the rows of a case, and whether an answer is right.

Rows come from one stream of NumPy's PCG64 and are mixed by elementwise products and sums in a fixed order, never by a
matrix product, whose order of summation differs between processors. So the same NumPy gives the same rows everywhere,
and the answers in `cases.toml` hold on every machine.
"""

from __future__ import annotations

import hashlib
import tomllib
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

HERE = Path(__file__).parent
Case = dict[str, Any]
Floats = NDArray[np.float64]
TINY: Case = {"name": "tiny", "rows": 64, "columns": 3, "components": 2, "structure": "full", "spacing": 1.0}
CLOSE = 1e-10
"""Largest relative difference between two answers in float64."""


class Data(NamedTuple):
    """Rows (n, d) of a case, and means (k, d) and covariances (k, d, d) of the mixture that they were drawn from."""

    rows: Floats
    means: Floats
    covariances: Floats


def load(path: Path = HERE / "cases.toml") -> dict[str, Any]:
    """All that `cases.toml` holds."""
    return tomllib.loads(path.read_text())


def mixed(rows: Floats, factor: Floats) -> Floats:
    """rows @ factor.T, summed over ascending columns, each product rounded: the same bits on every processor."""
    out: Floats = rows[:, :1] * factor[:, 0]
    for j in range(1, rows.shape[1]):
        out += rows[:, j : j + 1] * factor[:, j]
    return out


def generate(case: Case) -> Data:
    """Rows, means and covariances of a case. The same on every machine with the same NumPy.

    Components are equally likely. Their means are normal with standard deviation `spacing` per column; within a
    component a column's is about 1, with random correlations where the structure is full.
    """
    n, d, k = case["rows"], case["columns"], case["components"]
    full = case["structure"] == "full"
    rng = np.random.Generator(np.random.PCG64(n + 1000 * d + k))
    means = rng.normal(size=(k, d)) * case["spacing"]
    if full:
        factors = np.eye(d) + 0.3 / np.sqrt(d) * rng.normal(size=(k, d, d))
    else:
        factors = rng.uniform(0.7, 1.4, (k, 1, d)) * np.eye(d)
    labels = rng.integers(0, k, n)
    rows = rng.normal(size=(n, d))
    for c in range(k):
        part = rows[labels == c]
        rows[labels == c] = means[c] + (mixed(part, factors[c]) if full else part * factors[c].diagonal())
    return Data(rows, means, np.stack([mixed(factor, factor) for factor in factors]))


def digest(data: Data) -> str:
    """A short checksum of the rows."""
    return hashlib.sha256(np.ascontiguousarray(data.rows, "<f8").tobytes()).hexdigest()[:16]


def check_stream(stream: dict[str, str]) -> None:
    """Ends the run where this NumPy draws other rows than the answers were computed for."""
    found = digest(generate(TINY))
    if found != stream["digest"]:
        raise SystemExit(
            f"NumPy {np.__version__} draws other rows than NumPy {stream['numpy']}, for which cases.toml holds the "
            f"answers (digest {found}, not {stream['digest']}). Install that version, or renew the answers (README.md)"
        )


def check_answer(name: str, found: float, expected: float, what: str, close: float = CLOSE) -> None:
    """Ends the run with exit status 1 where an answer is wrong."""
    if not abs(found - expected) <= close * abs(expected):
        raise SystemExit(f"{name}: log-likelihood per row {found!r}, {what} is {expected!r}")
