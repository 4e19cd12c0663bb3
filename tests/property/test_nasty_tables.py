"""Tables as they come: constants, ties, copies of a column, wild rows. A fit ends with a finite, whole mixture."""

import numpy as np
from hypothesis import given, note
from hypothesis import strategies as st

import drumlin
from drumlin import modelfile
from reference import STRUCTURES

KINDS = ("normal", "constant", "two values", "integers", "wild tails", "copy", "nearly a copy", "far away", "spike")


@st.composite
def tables(draw: st.DrawFn) -> np.ndarray:
    n = draw(st.integers(1, 150), label="rows")
    kinds = draw(st.lists(st.sampled_from(KINDS), min_size=1, max_size=4), label="columns")
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1), label="seed"))
    columns: list[np.ndarray] = []
    for kind in kinds:
        first = columns[0] if columns else random.standard_normal(n)
        columns.append(
            {
                "normal": random.standard_normal(n) + 4.0 * random.integers(0, 2, n),
                "constant": np.full(n, 17.25),
                "two values": random.integers(0, 2, n) * 3.0,
                "integers": random.integers(0, 6, n).astype(float),
                "wild tails": random.standard_cauchy(n) ** 3,
                "copy": first,
                "nearly a copy": first * 2.0 + 1e-9 * random.standard_normal(n),
                "far away": 1e9 + random.standard_normal(n),
                "spike": np.where(random.random(n) < 0.8, 0.0, random.standard_normal(n)),
            }[kind]
        )
    return np.stack(columns, axis=1)


@given(tables(), st.integers(1, 8), st.sampled_from(STRUCTURES), st.sampled_from(["k-means++", "random-rows"]))
def test_every_fit_ends_whole(rows, components, shape, start_from):
    structure, pooled = shape
    model = drumlin.fit(
        rows,
        components,
        structure=structure,
        pooled=pooled,
        start_from=start_from,
        tries=2,
        pass_limit=30,
        tolerance=0.0,
        method="em",
    )
    mixture = model.mixture
    note(model.notes)
    k = mixture.components
    assert 1 <= k <= min(components, len(np.unique(rows, axis=0)))
    assert k == components or model.notes, "components that are missing are explained"
    assert abs(mixture.weights.sum() - 1.0) < 1e-12 and np.all(np.diff(mixture.weights) <= 0.0)
    assert sorted(mixture.ids.tolist()) == list(range(k))
    for values in (mixture.means, mixture.covariances, model.log_likelihood, model.bic, model.icl):
        assert np.isfinite(values).all()
    worst = 1.0
    for covariance in mixture.covariances:
        scale = np.sqrt(np.diag(covariance))
        assert (scale > 0.0).all() and np.array_equal(covariance, covariance.T)
        values = np.linalg.eigvalsh(covariance / np.outer(scale, scale))
        assert values.min() > -1e-12
        worst = max(worst, values.max() / max(values.min(), 1e-12))
    responsibilities = model.responsibilities(rows)
    assert np.abs(responsibilities.sum(axis=1) - 1.0).max() <= 1e-12
    density = model.log_density(rows)
    assert np.isfinite(density).all()
    size = np.abs(density).max()
    assert abs(density.sum() - model.log_likelihood) <= 1e-13 * len(rows) * max(size, 1.0)
    assert modelfile.from_bytes(model.to_bytes()) == model

    likelihoods = [step["log_likelihood"] for step in model.trace] + [model.log_likelihood]
    # Beyond a condition number of 1e11 a floor cannot be written into a float64 covariance: repairs are exempt.
    if worst < 1e11 and not any("removed" in text for text in model.notes):
        # The least variance of a stored covariance is known to eps times its condition number, and so are densities.
        assert np.diff(likelihoods).min() >= -len(rows) * (1e-13 * max(size, 1.0) + 4.0 * np.finfo(float).eps * worst)
