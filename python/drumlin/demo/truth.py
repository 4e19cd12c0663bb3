"""How well the kinds of parcel were found: against the truth, and against what the true law itself could have done."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from drumlin.demo.generate import CODE, FITTED, KINDS, covariances, means, shares
from drumlin.errors import DataError

if TYPE_CHECKING:
    import pyarrow as pa

    from drumlin.mixture import Mixture

__all__ = ["Agreement", "adjusted_rand", "compare_with_truth", "true_law"]


def true_law() -> Mixture:
    """Return the law the parcels were drawn from, the scanner's rounding included, misreadings not."""
    from drumlin.mixture import Mixture

    return Mixture(shares(), means(), covariances(), list(FITTED))


def adjusted_rand(table: NDArray[np.int64]) -> float:
    """Return the adjusted Rand index of two groupings (Hubert & Arabie 1985) from their table of counts, shape (a, b).

    1 for equal groupings, about 0 for unrelated ones; NaN when the table holds fewer than two rows.

    >>> adjusted_rand(np.array([[5, 0], [0, 7]]))
    1.0
    """
    counts = np.asarray(table, dtype=np.float64)
    total = counts.sum()
    if total < 2:
        return float("nan")

    def pairs(sizes: NDArray[np.float64]) -> float:
        return float((sizes * (sizes - 1.0) / 2.0).sum())

    both, rows, columns = pairs(counts), pairs(counts.sum(axis=1)), pairs(counts.sum(axis=0))
    expected = rows * columns / (total * (total - 1.0) / 2.0)
    most = (rows + columns) / 2.0
    return 1.0 if most == expected else float((both - expected) / (most - expected))


@dataclass(frozen=True)
class Agreement:
    """Counts of parcels by what they were given (first axis) and by true kind (second axis), and the indices they make.

    `model` and `law` are adjusted Rand indices with the truth, over the `rows` that could be given a component;
    `left_out` rows could not. `table` has one line per component id.
    """

    model: float
    law: float
    rows: int
    left_out: int
    table: NDArray[np.int64]

    @property
    def ratio(self) -> float:
        """How near the model comes to the true law."""
        return self.model / self.law

    def names(self) -> dict[int, str]:
        """Name each component after the kind most of its parcels are of; empty unless that gives every kind once."""
        best = self.table.argmax(axis=1)
        if len(set(best.tolist())) != len(KINDS) or len(best) != len(KINDS):
            return {}
        return {component: KINDS[kind].name for component, kind in enumerate(best.tolist())}


def compare_with_truth(grouped: str | Path, truth: str | Path, components: int) -> Agreement:
    """Read what `predict` wrote and the truth side by side, batch by batch; memory is that of one batch.

    `components` is the number of component ids. Raises DataError when the parcels of the two are not the same, row by
    row.
    """
    import pyarrow.compute as pc

    from drumlin.tables import open_table

    law = true_law()
    kinds = len(KINDS)
    by_model = np.zeros((components + 1) * kinds, dtype=np.int64)
    by_law = np.zeros((kinds + 1) * kinds, dtype=np.int64)
    rows = 0
    truths = _Truths(truth)
    for first, batch in open_table(str(grouped)).scan(["parcel", "component", *FITTED]):
        parcel, kind = truths.take(batch.num_rows)
        if not np.array_equal(batch.column("parcel").to_numpy(), parcel):
            raise DataError(f"{grouped}: the parcels from row {first} on are not those of {truth}.", row=first)
        given = pc.fill_null(batch.column("component"), -1).to_numpy().astype(np.int64)
        values = np.column_stack([batch.column(name).to_numpy().astype(np.float64) for name in FITTED])
        values[values == CODE] = np.nan
        lawful = law.assign(values).astype(np.int64)
        lawful[given < 0] = -1
        by_model += np.bincount((given + 1) * kinds + kind, minlength=len(by_model))
        by_law += np.bincount((lawful + 1) * kinds + kind, minlength=len(by_law))
        rows += batch.num_rows
    truths.end()
    model_table = by_model.reshape(-1, kinds)
    law_table = by_law.reshape(-1, kinds)
    left_out = int(model_table[0].sum())
    return Agreement(
        adjusted_rand(model_table[1:]), adjusted_rand(law_table[1:]), rows - left_out, left_out, model_table[1:]
    )


class _Truths:
    """Hands out the parcels and kinds of the truth in runs of any length."""

    def __init__(self, path: str | Path) -> None:
        import pyarrow.parquet as pq

        self._path = path
        self._batches: Iterator[pa.RecordBatch] = pq.ParquetFile(path, pre_buffer=False).iter_batches()
        self._parcels = np.empty(0, dtype=np.int64)
        self._kinds = np.empty(0, dtype=np.int8)

    def take(self, rows: int) -> tuple[NDArray[np.int64], NDArray[np.int8]]:
        while len(self._parcels) < rows:
            batch = next(self._batches, None)
            if batch is None:
                raise DataError(f"{self._path} ends too early.", file=str(self._path))
            self._parcels = np.concatenate([self._parcels, batch.column("parcel").to_numpy()])
            self._kinds = np.concatenate([self._kinds, batch.column("kind").to_numpy()])
        parcels, self._parcels = self._parcels[:rows], self._parcels[rows:]
        kinds, self._kinds = self._kinds[:rows], self._kinds[rows:]
        return parcels, kinds

    def end(self) -> None:
        """Raise DataError when parcels are left over."""
        if len(self._parcels) or next(self._batches, None) is not None:
            raise DataError(f"{self._path} has parcels that were not written.", file=str(self._path))
