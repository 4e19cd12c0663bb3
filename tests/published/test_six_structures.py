"""Log-likelihood and BIC of iris and Old Faithful in six structures, from the moments of a known partition.

Data: Fisher (1936), Annals of Eugenics 7, 179-188 (iris, as in scikit-learn, equal to R's copy); Azzalini & Bowman
(1990) (faithful). Values computed by EM to the end; full, pooled full, diagonal and spherical checked by scikit-
learn, the pooled diagonal and spherical ones by stationarity with finite differences, those of up to four columns in
50-digit arithmetic.
"""

import numpy as np
import pytest

import datasets
import reference
from tools import assert_close, fit_from

ORDER = reference.STRUCTURES
# log-likelihood, BIC; in the order full, full pooled, diagonal, diagonal pooled, spherical, spherical pooled
VALUES = {
    "iris 1": [
        (-379.9146301, 829.97815),
        (-379.9146301, 829.97815),
        (-741.0175352, 1522.12015),
        (-741.0175352, 1522.12015),
        (-889.5161307, 1804.08544),
        (-889.5161307, 1804.08544),
    ],
    "iris 2": [
        (-214.3547044, 574.01783),
        (-296.4475748, 688.09722),
        (-386.1853469, 857.55149),
        (-488.9148187, 1042.96790),
        (-478.5590958, 1012.23518),
        (-536.6524714, 1123.41130),
    ],
    "iris 3": [
        (-180.1854771, 580.83891),
        (-256.3540431, 632.96333),
        (-306.8604605, 743.99744),
        (-361.4255220, 813.04248),
        (-384.3140951, 853.80899),
        (-401.8021758, 878.76388),
    ],
    "faithful 2": [
        (-1130.2639602, 2322.19174),
        (-1140.1867594, 2325.21994),
        (-1147.8063525, 2346.06492),
        (-1157.6800123, 2354.60064),
        (-1709.5292822, 3458.29918),
        (-1709.6813729, 3452.99756),
    ],
}


def case(name: str) -> tuple[np.ndarray, np.ndarray]:
    """Rows and the labels of the partition that the start is made from."""
    if name == "faithful 2":
        rows = datasets.faithful()
        return rows, (rows[:, 0] >= 3.0).astype(int)
    rows, species = datasets.iris()
    labels = {"iris 1": np.zeros(150, int), "iris 2": (species > 0).astype(int), "iris 3": species}
    return rows, labels[name]


@pytest.mark.parametrize(("structure", "pooled"), ORDER)
@pytest.mark.parametrize("name", list(VALUES))
def test_log_likelihood_and_information(name, structure, pooled):
    rows, labels = case(name)
    n, d, k = len(rows), rows.shape[1], int(labels.max()) + 1
    start = reference.partition_start(rows, labels, structure, pooled)
    model = fit_from(rows, start, 1 if k == 1 else 1000, structure, pooled)
    likelihood, bic = VALUES[name][ORDER.index((structure, pooled))]
    # Half a unit of the last printed digit, and a little for the printing.
    assert_close(model.log_likelihood, likelihood, 6e-8, 1.0, what="log-likelihood")
    assert_close(model.bic, bic, 6e-6, 1.0, what="BIC")

    parameters = reference.free_parameters(k, d, structure, pooled)
    assert_close(model.bic, -2.0 * model.log_likelihood + parameters * np.log(n), 1e-14, what="BIC by its formula")
    assert_close(model.aic, -2.0 * model.log_likelihood + 2.0 * parameters, 1e-14, what="AIC by its formula")
    responsibilities = model.responsibilities(rows)
    entropy = reference.entropy(np.ones(n), responsibilities)
    assert_close(model.icl, model.bic + 2.0 * entropy, 1e-12, what="ICL: BIC and twice the entropy")
