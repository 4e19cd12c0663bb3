"""Times one pass against scikit-learn and a matrix product, after checking the answer; prints ratios, keeps a record.

    python benchmarks/run.py            all cases, seven interleaved repeats
    python benchmarks/run.py --quick    two cases, three repeats

A pass is the E-step, the log-likelihood and the sufficient statistics over rows that lie in memory. All three run in
turn in the same process on the same rows, so a slow moment of the machine hits all of them; the median counts.
OPENBLAS_CORETYPE and OPENBLAS_L2_SIZE must not be set: they would hold the reference and the product back.
"""

from __future__ import annotations

import argparse
import csv
import datetime
import os
import platform
import resource
import statistics
import subprocess
import sys
import time
import tomllib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray
from sklearn.mixture import GaussianMixture

from drumlin import _core

HERE = Path(__file__).parent
Floats = NDArray[np.float64]


def generate(case: dict[str, Any]) -> tuple[Floats, Floats, Floats]:
    """Rows, means and covariances of a case. The same on every machine with the same NumPy."""
    rng = np.random.default_rng(case["rows"] + 1000 * case["columns"] + case["components"])
    n, d, k = case["rows"], case["columns"], case["components"]
    means = rng.normal(size=(k, d)) * case["spacing"]
    if case["structure"] == "full":
        factors = np.eye(d) + 0.3 / np.sqrt(d) * rng.normal(size=(k, d, d))
    else:
        factors = np.stack([np.diag(rng.uniform(0.7, 1.4, d)) for _ in range(k)])
    labels = rng.integers(0, k, n)
    rows = rng.normal(size=(n, d))
    for c in range(k):
        chosen = labels == c
        rows[chosen] = means[c] + rows[chosen] @ factors[c].T
    return rows, means, factors @ factors.transpose(0, 2, 1)


def finish(job: _core.Job) -> list[_core.Measure]:
    while not job.wait(1.0):
        pass
    return job.result()


def ours(case: dict[str, Any], rows: Floats, means: Floats, covariances: Floats, threads: int) -> Callable[[], float]:
    """One pass of ours; returns the log-likelihood per row."""
    names = [f"x{j}" for j in range(case["columns"])]
    k = case["components"]
    mixture = _core.Mixture(np.full(k, 1 / k), means, covariances, case["structure"])
    scaling = _core.Scaling(np.zeros(len(names)), np.ones(len(names)))
    measures: list[_core.Measure] = [_core.EmStatistics(mixture, scaling)]
    feed = _core.start_feed(_core.Reading(names), measures, threads=threads, cache=True)
    for start in range(0, len(rows), 65_536):
        part = np.asfortranarray(rows[start : start + 65_536])
        feed.push(pa.RecordBatch.from_arrays([pa.array(part[:, j]) for j in range(len(names))], names=names))
    feed.end()
    finish(feed)
    cache = feed.cache()
    assert cache is not None

    def one() -> float:
        (found,) = finish(cache.start(measures, threads))
        assert isinstance(found, _core.EmStatistics)
        return found.log_likelihood / found.weight

    return one


def reference(case: dict[str, Any], rows: Floats, means: Floats, covariances: Floats) -> Callable[[], float]:
    """One iteration of scikit-learn's from the same mixture; returns the log-likelihood per row."""
    k = case["components"]
    kind = {"full": "full", "diagonal": "diag"}[case["structure"]]
    precisions = np.linalg.inv(covariances)
    if kind == "diag":
        precisions = np.einsum("kii->ki", precisions).copy()
    model = GaussianMixture(k, covariance_type=kind, reg_covar=0.0)
    model.weights_, model.means_ = np.full(k, 1 / k), means.copy()
    root = np.linalg.cholesky(precisions).copy() if kind == "full" else np.sqrt(precisions)
    model.precisions_cholesky_ = root
    kept = (model.weights_, model.means_, root)

    def one() -> float:
        model.weights_, model.means_, model.precisions_cholesky_ = kept
        log_likelihood, log_shares = model._e_step(rows)
        model._m_step(rows, log_shares)
        return float(log_likelihood)

    return one


def product(size: int = 2048) -> Callable[[], float]:
    """A large matrix product in NumPy; its rate is the machine's practical limit."""
    rng = np.random.default_rng(0)
    a, b = rng.normal(size=(size, size)), rng.normal(size=(size, size))

    def one() -> float:
        return float((a @ b)[0, 0])

    return one


def timed(work: Callable[[], float]) -> tuple[float, float]:
    time.sleep(0.2)
    start = time.perf_counter()
    answer = work()
    return time.perf_counter() - start, answer


def machine() -> dict[str, str]:
    commit = subprocess.run(["git", "rev-parse", "--short", "HEAD"], capture_output=True, text=True, cwd=HERE).stdout
    name = platform.processor() or platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        name = next(
            (line.split(":")[1].strip() for line in info.read_text().splitlines() if "model name" in line), name
        )
    return {
        "date": datetime.date.today().isoformat(),
        "commit": commit.strip(),
        "processor": name,
        "tier": _core.kernel_tier(),
        "python": platform.python_version(),
        "numpy": np.__version__,
    }


def measure(case: dict[str, Any], repeats: int, threads: int) -> dict[str, Any]:
    """Checks the answer, then times the three in turn."""
    rows, means, covariances = generate(case)
    mine, theirs, matrix = (
        ours(case, rows, means, covariances, threads),
        reference(case, rows, means, covariances),
        product(),
    )
    a, b = mine(), theirs()
    if not abs(a - b) <= 1e-10 * abs(b):
        raise SystemExit(f"{case['name']}: log-likelihood {a!r}, the reference has {b!r}")
    matrix()
    runs: list[tuple[float, float, float]] = []
    for _ in range(repeats):
        runs.append((timed(mine)[0], timed(theirs)[0], timed(matrix)[0]))
    seconds, reference_seconds, product_seconds = (statistics.median(column) for column in zip(*runs, strict=True))
    d = case["columns"]
    flops = 2 * case["rows"] * case["components"] * (d * (d + 1) if case["structure"] == "full" else 4 * d)
    return {
        "case": case["name"],
        "log_likelihood": a,
        "seconds": seconds,
        "reference_seconds": reference_seconds,
        "times_faster": reference_seconds / seconds,
        "gigaflops": flops / seconds / 1e9,
        "share_of_product": flops / seconds / (2 * 2048**3 / product_seconds),
        "peak_mb": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024,
    }


def main() -> None:
    parser = argparse.ArgumentParser(description="time one pass against the reference library")
    parser.add_argument("--quick", action="store_true", help="two cases, three repeats, no record")
    parser.add_argument("--threads", type=int, default=2)
    options = parser.parse_args()
    if {"OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE"} & set(os.environ):
        parser.error("unset OPENBLAS_CORETYPE and OPENBLAS_L2_SIZE first (make bench does)")
    cases = tomllib.loads((HERE / "cases.toml").read_text())["pass"]
    if options.quick:
        cases = [case for case in cases if case.get("quick")]
    about = machine()
    print("  ".join(f"{name} {value}" for name, value in about.items()))
    print(f"{'case':32} {'seconds':>9} {'reference':>10} {'times':>7} {'GF/s':>7} {'of product':>11} {'peak MB':>8}")
    rows = []
    for case in cases:
        row = measure(case, 3 if options.quick else 7, options.threads)
        rows.append(row)
        print(
            f"{row['case']:32} {row['seconds']:9.4f} {row['reference_seconds']:10.3f} {row['times_faster']:7.1f} "
            f"{row['gigaflops']:7.1f} {row['share_of_product']:11.2f} {row['peak_mb']:8.0f}",
            flush=True,
        )
    if not options.quick:
        path = HERE / "records" / f"{about['date']}-pass.csv"
        with path.open("w", newline="") as file:
            writer = csv.DictWriter(file, fieldnames=[*rows[0], *about])
            writer.writeheader()
            writer.writerows({**row, **about} for row in rows)
        print(f"record: {path.relative_to(HERE.parent)}")


if __name__ == "__main__":
    sys.exit(main())
