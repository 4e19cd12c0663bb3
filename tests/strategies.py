"""Hypothesis strategies: small tables with mixtures to start from.

They shrink towards few rows, columns and components.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from hypothesis import strategies as st

import reference
from reference import STRUCTURES, Theta


@dataclass(frozen=True)
class Case:
    """Rows (n, d), row weights (n,), a start with its structure, and the generator for further draws."""

    rows: np.ndarray
    weights: np.ndarray
    start: Theta
    structure: str
    pooled: bool
    random: np.random.Generator


@st.composite
def cases(draw: st.DrawFn, most_rows: int = 400, most_components: int = 3, most_columns: int = 4) -> Case:
    """Overlapping hills, large enough that no component runs empty; the start is a rough partition along one column."""
    k = draw(st.integers(1, most_components), label="components")
    d = draw(st.integers(1, most_columns), label="columns")
    n = draw(st.integers(30 * k * d, max(most_rows, 40 * k * d)), label="rows")
    structure, pooled = draw(st.sampled_from(STRUCTURES), label="structure")
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1), label="seed"))
    means = 3.0 * random.standard_normal((k, d))
    tilts = np.eye(d) + 0.4 * random.standard_normal((k, d, d))
    label = random.integers(0, k, size=n)
    rows = means[label] + np.einsum("nij,nj->ni", tilts[label], random.standard_normal((n, d)))
    weights = random.exponential(size=n) + 0.1
    rank = np.argsort(np.argsort(rows[:, 0]))
    start = reference.partition_start(rows, (rank * k // n).astype(int), structure, pooled, weights)
    return Case(rows, weights, start, structure, pooled, random)
