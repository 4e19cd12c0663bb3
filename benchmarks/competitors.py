"""The three that are timed in turn: our pass, an iteration of scikit-learn's, a large matrix product in NumPy."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray
from sklearn.mixture import GaussianMixture

from cases import Case, Data
from drumlin import _core

BATCH = 65_536

Work = Callable[[], float]


def finish(job: _core.Job) -> list[_core.Measure]:
    """The sums of a job, when it is done."""
    while not job.wait(1.0):
        pass
    return job.result()


def statistics(case: Case, data: Data, **precision: bool) -> _core.EmStatistics:
    """The measure of a pass under the mixture that the rows were drawn from."""
    k, d = data.means.shape
    mixture = _core.Mixture(np.full(k, 1 / k), data.means, data.covariances, case["structure"])
    return _core.EmStatistics(mixture, _core.Scaling(np.zeros(d), np.ones(d)), **precision)


def keep(rows: NDArray[Any], measure: _core.EmStatistics, threads: int, copies: int = 1) -> _core.Cache:
    """The rows as Arrow columns of their own, `copies` times over, kept in memory; takes one pass."""
    names = [f"x{j}" for j in range(rows.shape[1])]
    feed = _core.start_feed(_core.Reading(names), [measure], threads=threads, keep=1 << 62)
    for _ in range(copies):
        for start in range(0, len(rows), BATCH):
            part = rows[start : start + BATCH].copy(order="F")
            feed.push(pa.RecordBatch.from_arrays([pa.array(part[:, j]) for j in range(len(names))], names=names))
    feed.end()
    finish(feed)
    cache = feed.cache()
    assert cache is not None
    return cache


def ours(cache: _core.Cache, measure: _core.EmStatistics, threads: int) -> Work:
    """One pass of ours over kept rows; returns the log-likelihood per row."""

    def one() -> float:
        (found,) = finish(cache.start([measure], threads))
        assert isinstance(found, _core.EmStatistics)
        return found.log_likelihood / found.weight

    return one


def reference(case: Case, data: Data) -> Work:
    """One iteration of scikit-learn's from the same mixture; returns the log-likelihood per row."""
    k = case["components"]
    diagonal = case["structure"] == "diagonal"
    precisions = np.linalg.inv(data.covariances)
    root = np.sqrt(np.einsum("kii->ki", precisions)) if diagonal else np.linalg.cholesky(precisions).copy()
    model = GaussianMixture(k, covariance_type="diag" if diagonal else "full", reg_covar=0.0)
    start = (np.full(k, 1 / k), data.means.copy(), root)

    def one() -> float:
        model.weights_, model.means_, model.precisions_cholesky_ = start
        log_likelihood, log_shares = model._e_step(data.rows)
        model._m_step(data.rows, log_shares)
        return float(log_likelihood)

    return one


def product(size: int) -> Work:
    """A large matrix product in NumPy; its rate is the machine's practical limit."""
    rng = np.random.Generator(np.random.PCG64(0))
    a, b = rng.normal(size=(size, size)), rng.normal(size=(size, size))

    def one() -> float:
        return float((a @ b)[0, 0])

    return one
