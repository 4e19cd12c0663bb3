"""What exports are made of, against SciPy's multivariate normal density."""

import numpy as np
import pytest
from scipy.stats import multivariate_normal

import drumlin
from drumlin.exporting.parts import take_apart


@pytest.mark.parametrize("structure", ["full", "diagonal", "spherical"])
@pytest.mark.parametrize("unit", [1.0, 1e-120, 1e120])
def test_parts_give_the_densities(structure: str, unit: float) -> None:
    random = np.random.default_rng(5)
    means = random.normal(size=(3, 4)) * unit
    root = random.normal(size=(3, 4, 4)) + 2.0 * np.eye(4)
    full = root @ root.transpose(0, 2, 1) * unit**2
    stored = {"full": full, "diagonal": full.diagonal(axis1=1, axis2=2), "spherical": full[:, 0, 0]}[structure]
    mixture = drumlin.Mixture([0.5, 0.3, 0.2], means, stored, structure=structure)
    row = random.normal(size=4) * unit
    for part, weight, mean, covariance in zip(
        take_apart(mixture), mixture.weights, means, mixture.covariances, strict=True
    ):
        distance = sum(sum(w * (row[j] - part.mean[j]) for j, w in line) ** 2 for line in part.factor)
        units = 4 * np.log(unit)
        expected = multivariate_normal(mean / unit, covariance / unit**2).logpdf(row / unit) - units + np.log(weight)
        assert part.constant - distance == pytest.approx(expected, rel=1e-12)
        assert [len(line) for line in part.factor] == ([1, 2, 3, 4] if structure == "full" else [1, 1, 1, 1])


def test_a_component_without_weight_is_at_the_floor() -> None:
    mixture = drumlin.Mixture([1.0, 0.0], [[0.0], [5.0]], [[[1.0]], [[1.0]]], ids=[7, 3])
    parts = take_apart(mixture)
    assert [part.id for part in parts] == [7, 3] and parts[1].constant == pytest.approx(-1e290)
