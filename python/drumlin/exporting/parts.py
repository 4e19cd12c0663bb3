"""A mixture taken apart: the numbers of which every export is made."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from drumlin.errors import OptionError

if TYPE_CHECKING:
    from drumlin.mixture import Mixture

LOG_TWO_PI = math.log(2.0 * math.pi)

CUT = 37.0
"""Nats below the best component of a row from which on a component counts for nothing."""

FLOOR = -1.0e290
"""Log densities are held above this."""

MOST_NUMBERS = 10_000
"""The most numbers (of all factors) in an expression or query: beyond it engines take long to plan, or give up."""


MOST_PARTS = 500
"""The most components in one: the time to plan grows with their square (500 take 2 s in Polars, 1,000 take 7)."""

_STREAM = (
    "Stream the rows through drumlin.predict(rows, model), or in Polars through drumlin.lazy_groups(frame, model)."
)


@dataclass(frozen=True)
class Part:
    """One component: its log density (log weight included) of x is `constant` - sum over i of (W (x - mean))_i^2.

    `factor` holds the rows of W, the inverse Cholesky factor times sqrt(1/2), as (column, number) pairs: a triangle, or
    one number a row where the covariance is diagonal.
    """

    id: int
    constant: float
    mean: tuple[float, ...]
    factor: tuple[tuple[tuple[int, float], ...], ...]


def take_apart(mixture: Mixture) -> list[Part]:
    """Return the components of a mixture, in its order; one of weight 0 is at the floor everywhere, as in `predict`.

    >>> import drumlin
    >>> from drumlin.exporting.parts import take_apart
    >>> part, = take_apart(drumlin.Mixture([1.0], [[3.0]], [[[0.5]]]))
    >>> part.mean, [(column, round(number, 15)) for column, number in part.factor[0]]
    ((3.0,), [(0, 1.0)])
    """
    covariances, parts = mixture.covariances, []
    diagonal = mixture.structure != "full"
    for at, (weight, mean, id_) in enumerate(zip(mixture.weights, mixture.means, mixture.ids, strict=True)):
        deviations = np.sqrt(np.diag(covariances[at]))
        # By standard deviations first, so that no unit of a column is too large or too small for a product.
        lower = np.linalg.cholesky(covariances[at] / deviations[:, None] / deviations)
        inverse = np.linalg.solve(lower, np.eye(len(mean))) * math.sqrt(0.5) / deviations
        constant = (math.log(weight) if weight > 0.0 else FLOOR) - 0.5 * len(mean) * LOG_TWO_PI
        constant -= float(np.sum(np.log(np.diag(lower)) + np.log(deviations)))
        rows = tuple(
            tuple((j, float(inverse[i, j])) for j in range(i if diagonal else 0, i + 1)) for i in range(len(mean))
        )
        parts.append(Part(int(id_), constant, tuple(map(float, mean)), rows))
    return parts


def require_size(parts: Sequence[Part], what: str) -> None:
    """Refuse a mixture that is too large for an engine to plan."""
    numbers = sum(len(row) for part in parts for row in part.factor)
    if len(parts) > MOST_PARTS:
        raise OptionError(
            f"{what} of this mixture would hold {len(parts):,} components, and beyond {MOST_PARTS} query engines take "
            f"seconds to minutes to plan. {_STREAM}",
            option="model",
            found=len(parts),
        )
    if numbers > MOST_NUMBERS:
        raise OptionError(
            f"{what} of this mixture would hold {numbers:,} numbers, and beyond {MOST_NUMBERS:,} query engines take "
            f"minutes to plan or give up. {_STREAM}",
            option="model",
            found=numbers,
        )


def balanced(items: Sequence[Any], join: Callable[[Any, Any], Any]) -> Any:
    """Join items pairwise, so that what is joined nests no deeper than it must.

    >>> balanced(["a", "b", "c", "d", "e"], lambda left, right: f"({left}+{right})")
    '(((a+b)+(c+d))+e)'
    """
    rest = list(items)
    while len(rest) > 1:
        pairs = [join(*rest[at : at + 2]) for at in range(0, len(rest) - 1, 2)]
        rest = pairs + rest[2 * len(pairs) :]
    return rest[0]
