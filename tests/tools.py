"""What several tests need: mixtures in and out of drumlin, comparisons with a stated scale, jobs of the core."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import pyarrow as pa

import drumlin
from drumlin import _core
from reference import Theta


def columns_of(rows: np.ndarray) -> list[str]:
    """The names that drumlin gives to the columns of an array."""
    return [f"x{j}" for j in range(rows.shape[1])]


def mixture_of(
    theta: Theta, structure: str = "full", pooled: bool = False, columns: Sequence[str] | None = None
) -> Any:
    """`theta` as a drumlin.Mixture."""
    names = list(columns) if columns is not None else [f"x{j}" for j in range(theta.means.shape[1])]
    covariances = theta.covariances[:1] if pooled else theta.covariances
    return drumlin.Mixture(theta.weights, theta.means, covariances, columns=names, structure=structure, pooled=pooled)


def core_mixture(theta: Theta, structure: str = "full", pooled: bool = False) -> _core.Mixture:
    """`theta` as a mixture of the core."""
    covariances = theta.covariances[:1] if pooled else theta.covariances
    return _core.Mixture(theta.weights, theta.means, covariances, structure, pooled)


def theta_of(mixture: Any) -> Theta:
    """The parameters of a drumlin mixture, heaviest component first."""
    return Theta(np.array(mixture.weights), np.array(mixture.means), np.array(mixture.covariances)).by_weight()


def assert_close(got: Any, want: Any, relative: float, scale: Any = None, what: str = "value") -> None:
    """|got - want| <= relative * scale everywhere; the scale is |want| unless given."""
    got, want = np.asarray(got, dtype=np.float64), np.asarray(want, dtype=np.float64)
    assert got.shape == want.shape, f"{what}: shape {got.shape}, expected {want.shape}"
    assert got.size, f"{what}: nothing to compare"
    scale = np.abs(want) if scale is None else np.broadcast_to(np.asarray(scale, dtype=np.float64), want.shape)
    gap = np.abs(got - want)
    excess = np.max(np.where(gap == 0.0, 0.0, gap / np.where(scale > 0.0, scale, np.finfo(float).tiny)))
    assert excess <= relative, f"{what}: off by {excess:.3g} of its scale, allowed {relative:.3g}\n{got}\n{want}"


def assert_same_theta(got: Theta, want: Theta, relative: float) -> None:
    """Weights relative to themselves, means to their standard deviation, covariances to sqrt(variance * variance)."""
    deviations = np.sqrt(np.diagonal(want.covariances, axis1=1, axis2=2))
    assert_close(got.weights, want.weights, relative, what="weights")
    assert_close(got.means, want.means, relative, deviations, what="means")
    scale = deviations[:, :, None] * deviations[:, None, :]
    assert_close(got.covariances, want.covariances, relative, scale, what="covariances")


def fit_from(
    rows: Any, theta: Theta, passes: int, structure: str = "full", pooled: bool = False, **options: Any
) -> Any:
    """Exactly `passes` plain EM passes from `theta`, no floor."""
    start = mixture_of(theta, structure, pooled, options.pop("names", None))
    return drumlin.fit(rows, start, method="em", pass_limit=passes, tolerance=0.0, floor=0.0, **options)


def batches_of(rows: np.ndarray, size: int | Iterable[int] = 4096, **extra: np.ndarray) -> list[pa.RecordBatch]:
    """`rows` (columns x0, x1, ...) and extra columns as batches of `size` rows, or of the sizes given in turn."""
    table = pa.table({name: np.ascontiguousarray(rows[:, j]) for j, name in enumerate(columns_of(rows))} | extra)
    if isinstance(size, int):
        return table.to_batches(max_chunksize=size)
    batches, at = [], 0
    for length in size:
        batches += table.slice(at, length).combine_chunks().to_batches()
        at += length
    return batches + table.slice(at).combine_chunks().to_batches()


def run_job(job: _core.Job, batches: Iterable[pa.RecordBatch] = ()) -> list[_core.Measure]:
    """Feeds a job and waits for its measures."""
    for batch in batches:
        if not job.push(batch):
            break
    job.end()
    while not job.wait(1.0):
        pass
    return job.result()


def measure(
    rows: np.ndarray,
    measures: list[_core.Measure],
    *,
    size: int | Iterable[int] = 4096,
    weights: np.ndarray | None = None,
    threads: int = 1,
    first_row: int = 0,
) -> list[_core.Measure]:
    """The measures of an array, by one read of the core."""
    extra = {} if weights is None else {"w": weights}
    reading = _core.Reading(columns_of(rows), weight=None if weights is None else "w")
    job = _core.start_feed(reading, measures, threads=threads, first_row=first_row)
    return run_job(job, batches_of(rows, size, **extra))


def plain_scaling(rows: np.ndarray) -> _core.Scaling:
    """Centre and spread of an array by the core's own rule, all rows being the sample."""
    return _core.robust_scaling(
        np.ascontiguousarray(rows), np.ones(len(rows)), np.min(rows, axis=0), np.max(rows, axis=0)
    )


def em_pass(rows: np.ndarray, theta: Theta, structure: str = "full", pooled: bool = False, **options: Any) -> Any:
    """EM statistics of an array under `theta`."""
    scaling = options.pop("scaling", None) or plain_scaling(rows)
    (result,) = measure(rows, [_core.EmStatistics(core_mixture(theta, structure, pooled), scaling)], **options)
    return result


def run_python(code: str, *, timeout: float = 120.0, **options: Any) -> subprocess.CompletedProcess[str]:
    """Runs `code` in a fresh interpreter."""
    return subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, timeout=timeout, check=False, **options
    )
