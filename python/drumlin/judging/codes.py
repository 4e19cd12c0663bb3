"""Values that look like codes for a missing reading: repeated exactly, and far outside the rest."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["SuspectedCode", "looks_like_code", "robust_spread", "suspected_codes"]

MOST_CODES = 4
FAR = 10.0
"""Spreads between a suspected code and the rest."""

_LIMITS = {
    *(-1e30, -1e20, 1e20, 1e30),
    *(-(2.0**15), 2.0**15 - 1, 2.0**16 - 1, -(2.0**31), 2.0**31 - 1, 2.0**32 - 1, -(2.0**63), 2.0**63 - 1),
    *(float(limit) for kind in (np.float32, np.float64) for limit in (np.finfo(kind).min, np.finfo(kind).max)),
}


@dataclass(frozen=True)
class SuspectedCode:
    """A value that looks like a code: how many rows have it (`exact`: counted, else estimated from the sample), how
    many spreads off.
    """

    value: float
    count: int
    exact: bool
    spreads: float


@dataclass(frozen=True)
class Extreme:
    """The least or the greatest value of a column, and how many rows have it."""

    value: float
    count: int


def looks_like_code(value: float) -> bool:
    """Whether a value is one of the usual codes: two or more nines and nothing else, or the limit of a number type.

    >>> [looks_like_code(value) for value in (-9999.0, 99.0, 9.0, 2147483647.0, 1234.0)]
    [True, True, False, True, False]
    """
    if value in _LIMITS:
        return True
    if not math.isfinite(value) or abs(value) > 1e15:
        return False
    digits = f"{abs(value):.10g}".replace(".", "")
    return len(digits) >= 2 and set(digits) == {"9"}


def robust_spread(values: NDArray[np.float64]) -> float:
    """Return a robust standard deviation: by quartiles, where these agree by wider quantiles; 0 for a constant."""
    if len(values) == 0:
        return 0.0
    for low, high, width in ((0.25, 0.75, 1.349), (0.05, 0.95, 3.29), (0.01, 0.99, 4.65), (0.0, 1.0, 8.0)):
        least, most = np.quantile(values, [low, high])
        if most > least:
            # halves, so that the difference of two huge values stays finite
            return float(2.0 * ((most / 2.0 - least / 2.0) / width))
    return 0.0


def suspected_codes(sample: NDArray[np.float64], least: Extreme, most: Extreme, present: int) -> list[SuspectedCode]:
    """Find the values that look like codes for a gap.

    `sample` holds one column's values, NaN for gaps; `least` and `most` are the extremes over all rows; `present`
    counts the rows with a finite value. A value is suspected when it is an extreme, many spreads away from the rest
    with nothing in between, and either a usual code or repeated in at least five rows (and one of 100,000). At most
    four are returned, lowest first.
    """
    rest = np.sort(sample[np.isfinite(sample)])
    found: dict[float, SuspectedCode] = {}
    if len(rest) == 0 or least.value == most.value:
        return []
    share = present / len(rest)
    while len(rest) and len(found) < MOST_CODES:
        candidates = {one.value: one.count for one in _repeated_far_away(rest, share)}
        candidates |= {one.value: one.count for one in (least, most) if one.value not in found}
        news = [
            code
            for value, count in candidates.items()
            if (
                code := _judge(
                    Extreme(value, count), rest, present, exact=share == 1.0 or value in _values(least, most)
                )
            )
        ]
        if not news:
            break
        found |= {code.value: code for code in news}
        rest = rest[~np.isin(rest, list(found))]
    return sorted(found.values(), key=lambda code: code.value)[:MOST_CODES]


def _values(*extremes: Extreme) -> set[float]:
    return {one.value for one in extremes}


def _repeated_far_away(rest: NDArray[np.float64], share: float) -> list[Extreme]:
    """Return the ends of the sorted sample, and on either side the value most often repeated among those far away.

    Counts are estimates for the whole table. A lone wild value further out must not hide a code.
    """
    middle, spread = _middle_and_spread(rest)
    ends = [rest[:1], rest[-1:]]
    found: dict[float, int] = {}
    for tail in (*ends, rest[rest < middle - FAR / 2 * spread], rest[rest > middle + FAR / 2 * spread]):
        if len(tail):
            values, counts = np.unique(tail, return_counts=True)
            value = float(values[int(counts.argmax())])
            found[value] = round(
                share * int(np.searchsorted(rest, value, "right") - np.searchsorted(rest, value, "left"))
            )
    return [Extreme(value, count) for value, count in found.items()]


def _middle_and_spread(values: NDArray[np.float64]) -> tuple[float, float]:
    middle = float(np.median(values))
    return middle, robust_spread(values) or max(abs(middle), 1.0)


def _judge(candidate: Extreme, rest: NDArray[np.float64], present: int, *, exact: bool) -> SuspectedCode | None:
    others = rest[rest != candidate.value]
    if len(others) == 0 or candidate.count > present / 2:
        return None
    middle, spread = _middle_and_spread(others)
    below = candidate.value < middle
    inward = others[others > candidate.value] if below else others[others < candidate.value]
    if len(inward) == 0:
        return None
    nearest = float(inward[0] if below else inward[-1])
    away = abs(candidate.value / spread - middle / spread)
    gap = abs(candidate.value / spread - nearest / spread)
    usual = looks_like_code(candidate.value)
    enough = candidate.count >= max(5, math.ceil(1e-5 * present))
    far = away > FAR / 2 and gap > FAR / 4 if usual else away > FAR and gap > FAR
    if not far or not (usual or enough):
        return None
    return SuspectedCode(candidate.value, candidate.count, exact, away)
