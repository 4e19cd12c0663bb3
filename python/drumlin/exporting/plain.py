"""Scores rows under one mixture with NumPy alone.

    log_density(rows)        natural logarithm of the density of each row, (n,)
    responsibilities(rows)   probability of each component given the row, (n, k), columns in the order of IDS
    assign(rows)             id of the likeliest component, (n,); -1 for a row with a gap

`rows` is a 2-D array with the columns in the order of COLUMNS. A row with NaN, an infinite value, or a number that
CODES lists for its column, has a gap: NaN in all results, and -1.
"""

import numpy as np

COLUMNS = []
IDS = []
CONSTANTS = []
MEANS = []
FACTORS = []
CODES = {}


def log_density(rows):
    logs, gap = _logs(rows)
    most = logs.max(axis=1)
    return np.where(gap, np.nan, most + np.log(np.exp(logs - most[:, None]).sum(axis=1)))


def responsibilities(rows):
    logs, gap = _logs(rows)
    below = logs - logs.max(axis=1)[:, None]
    shares = np.where(below >= -37.0, np.exp(below), 0.0)
    shares /= shares.sum(axis=1)[:, None]
    shares[gap] = np.nan
    return shares


def assign(rows):
    logs, gap = _logs(rows)
    return np.where(gap, -1, np.asarray(IDS)[logs.argmax(axis=1)])


def _logs(rows):
    rows = np.array(rows, dtype=float)
    if rows.ndim != 2 or rows.shape[1] != len(COLUMNS):
        raise ValueError(f"rows must be an array of {len(COLUMNS)} columns: {', '.join(COLUMNS)}")
    gap = ~np.isfinite(rows).all(axis=1)
    for column, codes in CODES.items():
        gap |= np.isin(rows[:, COLUMNS.index(column)], codes)
    rows[gap] = MEANS[0]
    logs = np.empty((len(rows), len(IDS)))
    for k, (constant, mean, factor) in enumerate(zip(CONSTANTS, MEANS, FACTORS, strict=True)):
        logs[:, k] = constant - (((rows - mean) @ np.asarray(factor).T) ** 2).sum(axis=1)
    return np.maximum(logs, -1e290), gap
