"""The first pass: a sample and a summary of every column; what must stop a fit is found here."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from drumlin.describe import counted
from drumlin.errors import DataError, DrumlinError, name_columns

if TYPE_CHECKING:
    from drumlin import _core
    from drumlin.engines.engine import Engine

SAMPLE_PER_COMPONENT = 2_000
SAMPLE_LEAST = 20_000
SAMPLE_MOST = 200_000
SAMPLE_BYTES = 96 << 20
"""The sample has 2,000 rows per component, between 20,000 and 200,000 rows, and at most this many bytes."""

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class FirstPass:
    """What the first pass found: a sample (values (n, d), weights (n,)), the summary, and the scaling of the columns.

    `whole` says that the sample holds every row that is fitted.
    """

    values: Floats
    weights: Floats
    summary: dict[str, Any]
    scaling: _core.Scaling
    whole: bool


def sample_size(components: int, columns: int) -> int:
    """Return how many rows the sample has: the same for every machine.

    >>> sample_size(1, 2), sample_size(30, 2), sample_size(1000, 2)
    (20000, 60000, 200000)
    """
    wanted = min(max(SAMPLE_PER_COMPONENT * components, SAMPLE_LEAST), SAMPLE_MOST)
    return max(min(wanted, SAMPLE_BYTES // (8 * columns)), 4 * components)


def first_pass(
    engine: Engine, columns: Sequence[str], components: int, seed: int, missing: str, label: str
) -> FirstPass:
    """Read the rows once. DataError when they cannot be fitted: no rows, infinities, gaps that are refused."""
    from drumlin import _core

    size = sample_size(components, len(columns))
    try:
        measures = [_core.Sample(len(columns), size, seed), _core.ColumnSummary(len(columns))]
        sample, counted_up = engine.run(measures, "first look")
        assert isinstance(sample, _core.Sample) and isinstance(counted_up, _core.ColumnSummary)
        summary = counted_up.table()
        check_rows(summary, columns, missing, label)
        values, weights = sample.values, sample.weights
        least, most = np.asarray(summary["least"], dtype=float), np.asarray(summary["most"], dtype=float)
        scaling = _core.robust_scaling(values, weights, least, most)
    except DrumlinError as error:
        raise name_columns(error, columns) from error.__cause__
    fitted = int(summary["complete"]) - int(summary["held"])
    return FirstPass(values, weights, summary, scaling, len(weights) >= fitted)


def check_rows(summary: dict[str, Any], columns: Sequence[str], missing: str, label: str) -> None:
    """Raise DataError unless the summary describes rows that can be fitted."""
    rows, kept, complete = int(summary["rows"]), int(summary["kept"]), int(summary["complete"])
    zero, held = int(summary["zero_weights"]), int(summary["held"])
    if rows == 0:
        raise DataError(f"{label} has no rows.", rows=0)
    if kept == 0 and zero:
        raise DataError(
            f"{label}: {counted(rows, 'row')} read, and no row is left: {zero:,} have the row weight 0"
            f"{', the others are filtered out by where' if zero < rows else ''}.",
            rows=rows,
        )
    if kept == 0:
        raise DataError(f"{label}: where leaves none of {counted(rows, 'row')}.", rows=rows)
    refuse_infinite(summary, columns, label)
    if missing == "refuse" and int(summary["incomplete"]):
        raise DataError(
            f"{label} has gaps: {gaps_in_words(summary, columns)}. {complete:,} of {counted(kept, 'row')} are "
            "complete. Fit those with missing='complete-rows', or leave a column with many gaps out of columns.",
            columns=_gap_columns(summary, columns),
        )
    if complete == 0:
        raise DataError(
            f"{label}: none of {counted(kept, 'row')} is complete: {gaps_in_words(summary, columns)}. "
            "Leave the columns with most gaps out of columns.",
            columns=_gap_columns(summary, columns),
        )
    if complete <= held:
        raise DataError(f"{label}: hold_out leaves no row to fit ({held:,} of {complete:,} are held out).", rows=rows)


def refuse_infinite(summary: dict[str, Any], columns: Sequence[str], label: str) -> None:
    """Raise DataError for the first column with infinite values."""
    for position, name in enumerate(columns):
        count = int(summary["infinite"][position])
        if count:
            row = int(summary["first_infinite_row"][position])
            word = name if name.isidentifier() else f"`{name}`"
            raise DataError(
                f"{label}: column {name!r} holds {counted(count, 'infinite value')}, the first in row {row} (counted "
                f'from 0). Correct them, or leave these rows out with where="abs({word}) < 1e300".',
                column=name,
                row=row,
                count=count,
            )


def gaps_in_words(summary: dict[str, Any], columns: Sequence[str]) -> str:
    """Return the gaps per column: how many of what sort, and where the first is."""
    parts = []
    for position, name in enumerate(columns):
        sorts = {"null": "nulls", "NaN": "nans", "code": "codes"}
        counts = {sort: int(summary[entry][position]) for sort, entry in sorts.items()}
        if any(counts.values()):
            told = ", ".join(f"{count:,} {sort}" for sort, count in counts.items() if count)
            parts.append(f"{name!r} {told} (first in row {int(summary['first_gap_row'][position])})")
    more = f" and {len(parts) - 8} more columns" if len(parts) > 8 else ""
    return "; ".join(parts[:8]) + more


def _gap_columns(summary: dict[str, Any], columns: Sequence[str]) -> list[str]:
    return [name for at, name in enumerate(columns) if int(summary["first_gap_row"][at]) >= 0]


def distinct_rows(values: Floats, weights: Floats, enough: int) -> int:
    """Return the number of distinct rows of positive weight, or `enough` as soon as there are so many.

    >>> import numpy
    >>> distinct_rows(numpy.array([[1.0], [1.0], [2.0]]), numpy.ones(3), 5)
    2
    """
    values = values[weights > 0.0] + 0.0  # + 0.0: no two zeros
    few = min(len(values), 8 * enough)
    while True:
        found = len(np.unique(values[:few], axis=0))
        if found >= enough or few >= len(values):
            return min(found, enough)
        few = min(len(values), few * 8)
