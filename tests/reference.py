"""Textbook EM for mixtures of normal components in NumPy float64: the oracle of the tests.

Written to be read beside the formulas, not to be fast. Nothing is centred, scaled, floored, skipped or repaired, so
it is meant for well-scaled data. Logarithms are natural and log-likelihoods are totals (weighted sums over rows).

Symbols: x (n, d) rows, w (n,) row weights, W their sum, k components; t (n, k) responsibilities, N_k = sum_i w_i t_ik.

Sources: Dempster, Laird & Rubin (1977), J. R. Statist. Soc. B 39, 1-38; Redner & Walker (1984), SIAM Review 26,
195-239; McLachlan & Peel (2000), Finite Mixture Models, chapters 2 and 3 (the six covariance structures).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

STRUCTURES = [(structure, pooled) for structure in ("full", "diagonal", "spherical") for pooled in (False, True)]
"""The six structures, as pairs (structure, pooled)."""


@dataclass(frozen=True)
class Theta:
    """The parameters: weights (k,), means (k, d), covariances (k, d, d) whatever the structure."""

    weights: np.ndarray
    means: np.ndarray
    covariances: np.ndarray

    def by_weight(self) -> Theta:
        """The same mixture with the heaviest component first."""
        order = np.argsort(-self.weights, kind="stable")
        return Theta(self.weights[order], self.means[order], self.covariances[order])


def squared_distances(rows: np.ndarray, theta: Theta) -> np.ndarray:
    """Squared Mahalanobis distances (n, k), by Cholesky factor and solve."""
    columns = []
    for mean, covariance in zip(theta.means, theta.covariances, strict=True):
        lower = np.linalg.cholesky(covariance)
        standard = np.linalg.solve(lower, (rows - mean).T)
        columns.append((standard**2).sum(axis=0))
    return np.stack(columns, axis=1)


def log_terms(rows: np.ndarray, theta: Theta) -> np.ndarray:
    """log pi_k + log N(x_i | mu_k, Sigma_k), shape (n, k)."""
    d = rows.shape[1]
    log_determinants = np.array(
        [2.0 * np.log(np.diag(np.linalg.cholesky(covariance))).sum() for covariance in theta.covariances]
    )
    log_normals = -0.5 * (d * np.log(2.0 * np.pi) + log_determinants + squared_distances(rows, theta))
    return np.log(theta.weights) + log_normals


def log_density(rows: np.ndarray, theta: Theta) -> np.ndarray:
    """log sum_k pi_k N(x_i | mu_k, Sigma_k), shape (n,), by log-sum-exp."""
    terms = log_terms(rows, theta)
    best = terms.max(axis=1)
    return best + np.log(np.exp(terms - best[:, None]).sum(axis=1))


def e_step(rows: np.ndarray, weights: np.ndarray, theta: Theta) -> tuple[np.ndarray, float]:
    """Responsibilities (n, k) and the total log-likelihood of `theta`."""
    terms = log_terms(rows, theta)
    densities = log_density(rows, theta)
    return np.exp(terms - densities[:, None]), float(weights @ densities)


def m_step(
    rows: np.ndarray, weights: np.ndarray, responsibilities: np.ndarray, structure: str = "full", pooled: bool = False
) -> Theta:
    """The exact maximiser given responsibilities: weighted moments, reduced to the structure."""
    d = rows.shape[1]
    mass = weights[:, None] * responsibilities
    shares = mass.sum(axis=0)
    means = (mass.T @ rows) / shares[:, None]
    covariances = np.empty((len(shares), d, d))
    for k, mean in enumerate(means):
        centred = rows - mean
        covariances[k] = (mass[:, k, None] * centred).T @ centred / shares[k]
    if pooled:
        common = np.einsum("k,kij->ij", shares, covariances) / weights.sum()
        covariances = np.repeat(common[None], len(shares), axis=0)
    if structure == "diagonal":
        covariances = np.stack([np.diag(np.diag(covariance)) for covariance in covariances])
    elif structure == "spherical":
        covariances = np.stack([np.eye(d) * np.trace(covariance) / d for covariance in covariances])
    elif structure != "full":
        raise ValueError(structure)
    return Theta(shares / weights.sum(), means, covariances)


def run(
    rows: np.ndarray,
    start: Theta,
    passes: int,
    structure: str = "full",
    pooled: bool = False,
    weights: np.ndarray | None = None,
) -> tuple[Theta, list[float]]:
    """`passes` EM passes from `start`.

    Returns the mixture and `passes + 1` total log-likelihoods: the start's, then the one after each pass.
    """
    weights = np.ones(len(rows)) if weights is None else weights
    theta, trace = start, []
    for _ in range(passes):
        responsibilities, likelihood = e_step(rows, weights, theta)
        trace.append(likelihood)
        theta = m_step(rows, weights, responsibilities, structure, pooled)
    trace.append(e_step(rows, weights, theta)[1])
    return theta, trace


def partition_start(
    rows: np.ndarray,
    labels: np.ndarray,
    structure: str = "full",
    pooled: bool = False,
    weights: np.ndarray | None = None,
) -> Theta:
    """The moments of a known partition (labels 0..k-1): an M-step with responsibilities 0 and 1."""
    weights = np.ones(len(rows)) if weights is None else weights
    return m_step(rows, weights, np.eye(int(labels.max()) + 1)[labels], structure, pooled)


def free_parameters(k: int, d: int, structure: str, pooled: bool) -> int:
    """K - 1 weights, K d means, and what the structure leaves free of each covariance (or of the pooled one)."""
    each = {"full": d * (d + 1) // 2, "diagonal": d, "spherical": 1}[structure]
    return k - 1 + k * d + each * (1 if pooled else k)


def entropy(weights: np.ndarray, responsibilities: np.ndarray) -> float:
    """-sum_i w_i sum_k t_ik log t_ik, with 0 log 0 = 0."""
    logs = np.log(np.where(responsibilities > 0.0, responsibilities, 1.0))
    return float(-(weights @ (responsibilities * logs).sum(axis=1)))
