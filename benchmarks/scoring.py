"""Times scoring of rows in memory against scikit-learn, after checking the answers; prints rates and ratios.

    python benchmarks/scoring.py [--rows 1000000] [--repeats 7]

Log density, likeliest component and `predict` (both at once, and the runner-up) of an array, of its float32 and
Fortran-ordered copies and of an Arrow table; and one row through a model. Competitors run in turn in one process, with
a rest between them, because the threads of a matrix product spin on for a while. Medians count; minima are told too.
"""

from __future__ import annotations

import argparse
import statistics
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray
from sklearn.mixture import GaussianMixture

import drumlin
from cases import generate

CASE = {"columns": 8, "components": 16, "structure": "full", "spacing": 0.7}
Floats = NDArray[np.float64]


def reference(mixture: drumlin.Mixture) -> GaussianMixture:
    """The same mixture as scikit-learn's."""
    model = GaussianMixture(mixture.components, covariance_type="full")
    model.weights_, model.means_ = mixture.weights, mixture.means
    model.precisions_cholesky_ = np.linalg.cholesky(np.linalg.inv(mixture.covariances)).copy()
    return model


def check(mixture: drumlin.Mixture, rows: Floats, works: dict[str, Callable[[], Any]]) -> None:
    """Every way gives the reference's answers; a row with two components equally likely to 1e-9 may go to either."""
    want_log, want_best = works["reference log density"](), works["reference argmax"]()
    shares = np.sort(mixture.responsibilities(rows), axis=1)
    clear = shares[:, -1] - shares[:, -2] > 1e-9
    for name, work in works.items():
        log = best = None
        if name.startswith("log density"):
            log = work()
        elif name.startswith("argmax"):
            best = work()
        elif name.startswith("predict"):
            table = work()
            log, best = table["log_density"].to_numpy(), table["component"].to_numpy()
        loose = 1e-10 if "float32" not in name else 1e-4
        if log is not None and not np.abs(log - want_log).max() <= loose * np.abs(want_log).max():
            raise SystemExit(f"{name}: log densities differ from the reference's")
        if best is not None and "float32" not in name and not np.array_equal(best[clear], want_best[clear]):
            raise SystemExit(f"{name}: components differ from the reference's")


def timed(work: Callable[[], Any]) -> float:
    time.sleep(0.2)
    began = time.perf_counter()
    work()
    return time.perf_counter() - began


def scoring(rows: int = 1_000_000, repeats: int = 7) -> list[dict[str, Any]]:
    """Checks, then times. Per way: `way`, `seconds` (median), `least`, `rows_per_second`, `times` (the reference's)."""
    data, means, covariances = generate({**CASE, "rows": rows})
    k, d = means.shape
    mixture = drumlin.Mixture(np.full(k, 1 / k), means, covariances, [f"x{j}" for j in range(d)])
    model = reference(mixture)
    narrow, fortran = data.astype(np.float32), np.asfortranarray(data)
    table = pa.table({f"x{j}": np.ascontiguousarray(data[:, j]) for j in range(d)})
    works: dict[str, Callable[[], Any]] = {
        "reference log density": lambda: model.score_samples(data),
        "reference argmax": lambda: model.predict(data),
    }
    for name, given in (("array", data), ("float32", narrow), ("Fortran order", fortran), ("table", table)):
        works[f"log density, {name}"] = lambda given=given: mixture.log_density(given)
        works[f"argmax, {name}"] = lambda given=given: mixture.assign(given)
    works["predict, table"] = lambda: drumlin.predict(table, mixture, carry=[]).read_all()
    works["predict, array"] = lambda: drumlin.predict(data, mixture, carry=[]).read_all()
    check(mixture, data, works)
    taken: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(repeats):
        for name, work in works.items():
            taken[name].append(timed(work))
    seconds = {name: statistics.median(each) for name, each in taken.items()}
    return [
        {
            "way": name,
            "seconds": seconds[name],
            "least": min(taken[name]),
            "rows_per_second": rows / seconds[name],
            "times": seconds["reference argmax" if "argmax" in name else "reference log density"] / seconds[name],
        }
        for name in works
    ]


def one_row(repeats: int = 2_000) -> dict[str, Any]:
    """Seconds of one row through a model's `log_density`: `seconds` (median) and `least`."""
    data, means, covariances = generate({**CASE, "rows": 5_000})
    k, d = means.shape
    mixture = drumlin.Mixture(np.full(k, 1 / k), means, covariances, [f"x{j}" for j in range(d)])
    model = drumlin.fit(data, mixture, pass_limit=1, progress=False)
    taken = []
    for i in range(repeats):
        row = data[i % 5_000][None, :]
        began = time.perf_counter()
        model.log_density(row)
        taken.append(time.perf_counter() - began)
    return {"way": "one row", "seconds": statistics.median(taken), "least": min(taken)}


def main() -> None:
    parser = argparse.ArgumentParser(description="time scoring of rows in memory against the reference library")
    parser.add_argument("--rows", type=int, default=1_000_000)
    parser.add_argument("--repeats", type=int, default=7)
    options = parser.parse_args()
    print(f"{'way':28} {'median s':>9} {'least s':>9} {'Mrows/s':>8} {'best':>8} {'times':>7}")
    for found in scoring(options.rows, options.repeats):
        print(
            f"{found['way']:28} {found['seconds']:9.4f} {found['least']:9.4f} {found['rows_per_second'] / 1e6:8.2f} "
            f"{options.rows / found['least'] / 1e6:8.2f} {found['times']:7.1f}"
        )
    found = one_row()
    print(f"one row: {found['seconds'] * 1e6:.1f} microseconds (median), {found['least'] * 1e6:.1f} (least)")


if __name__ == "__main__":
    main()
