"""Free parameters of the six structures, BIC, AIC and ICL.

Sources: McLachlan & Peel (2000), chapter 6; Schwarz (1978), Annals of Statistics 6, 461-464; Akaike (1974), IEEE
Transactions on Automatic Control 19, 716-723; Biernacki, Celeux & Govaert (2000), IEEE Transactions on Pattern
Analysis 22, 719-725.
"""

import numpy as np
import pytest

import drumlin
import reference
from drumlin import _core
from reference import STRUCTURES
from tools import assert_close

# (K, d): full, full pooled, diagonal, diagonal pooled, spherical, spherical pooled
COUNTS = {
    (3, 4): (44, 24, 26, 18, 17, 15),
    (5, 10): (329, 109, 104, 64, 59, 55),
    (10, 50): (13259, 1784, 1009, 559, 519, 510),
    (2, 1): (5, 4, 5, 4, 5, 4),
}


@pytest.mark.parametrize("size", list(COUNTS))
@pytest.mark.parametrize(("structure", "pooled"), STRUCTURES)
def test_free_parameters(size, structure, pooled):
    k, d = size
    expected = COUNTS[size][STRUCTURES.index((structure, pooled))]
    assert reference.free_parameters(k, d, structure, pooled) == expected
    covariances = np.repeat(np.eye(d)[None], 1 if pooled else k, axis=0)
    means = np.arange(float(k * d)).reshape(k, d)
    mixture = _core.Mixture(np.full(k, 1.0 / k), means, covariances, structure, pooled)
    assert mixture.free_parameters == expected


@pytest.mark.parametrize(("structure", "pooled"), STRUCTURES)
def test_row_weights_are_the_n_of_the_criteria(structure, pooled):
    """n is the sum of the row weights, and the parameters are those of the structure that was fitted."""
    import pyarrow as pa

    random = np.random.default_rng(8)
    rows = np.concatenate([random.normal(0.0, 1.0, (300, 2)), random.normal(4.0, 1.0, (200, 2))])
    weights = random.integers(0, 4, size=len(rows)).astype(float)
    table = pa.table({"a": rows[:, 0], "b": rows[:, 1], "copies": weights})
    model = drumlin.fit(
        table, 2, columns=["a", "b"], row_weight="copies", structure=structure, pooled=pooled, method="em"
    )
    parameters = reference.free_parameters(2, 2, structure, pooled)
    total = weights.sum()
    assert total != len(rows)
    assert_close(model.bic, -2.0 * model.log_likelihood + parameters * np.log(total), 1e-13, what="BIC")
    assert_close(model.aic, -2.0 * model.log_likelihood + 2.0 * parameters, 1e-13, what="AIC")
    entropy = reference.entropy(weights, model.responsibilities(rows))
    assert_close(model.icl, model.bic + 2.0 * entropy, 1e-12, what="ICL")
