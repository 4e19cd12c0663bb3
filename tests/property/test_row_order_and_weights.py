"""Row order, relabelling and row weights: what must not matter, to rounding."""

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

import datasets
import drumlin
import reference
from strategies import cases
from tools import assert_close, assert_same_theta, em_pass, fit_from, mixture_of, plain_scaling, theta_of

# n sums of eps each, in another order: far below this; a wrong row or weight is far above it.
ROUNDING = 1e-11


def after(statistics, case):
    mixture, kept, notes = statistics.maximise(case.structure, case.pooled, 0.0)
    assert kept == list(range(len(case.start.weights))) and not notes
    return reference.Theta(mixture.weights, mixture.means, mixture.covariances)


@given(cases())
def test_row_order(case):
    order = case.random.permutation(len(case.rows))
    scaling = plain_scaling(case.rows)
    options = {"structure": case.structure, "pooled": case.pooled, "scaling": scaling}
    one = em_pass(case.rows, case.start, weights=case.weights, **options)
    two = em_pass(case.rows[order], case.start, weights=case.weights[order], **options)
    assert one.rows == two.rows == len(case.rows)
    assert_close(two.weight, one.weight, 1e-14, what="weight")
    assert_close(two.log_likelihood, one.log_likelihood, 1e-13, what="log-likelihood")
    assert_same_theta(after(two, case), after(one, case), ROUNDING)


@given(cases())
def test_weight_two_is_the_row_twice_and_weight_zero_is_absent(case):
    copies = case.random.integers(0, 4, size=len(case.rows))
    scaling = plain_scaling(case.rows)
    options = {"structure": case.structure, "pooled": case.pooled, "scaling": scaling}
    weighted = em_pass(case.rows, case.start, weights=copies.astype(float), **options)
    repeated = em_pass(np.repeat(case.rows, copies, axis=0), case.start, **options)
    assert weighted.rows == (copies > 0).sum()
    assert weighted.weight == repeated.weight == copies.sum()
    assert_close(weighted.log_likelihood, repeated.log_likelihood, 1e-13, what="log-likelihood")
    assert_same_theta(after(weighted, case), after(repeated, case), ROUNDING)


@given(cases(), st.floats(1e-30, 1e30))
def test_only_ratios_of_weights_matter(case, factor):
    scaling = plain_scaling(case.rows)
    options = {"structure": case.structure, "pooled": case.pooled, "scaling": scaling}
    one = em_pass(case.rows, case.start, weights=case.weights, **options)
    two = em_pass(case.rows, case.start, weights=factor * case.weights, **options)
    assert_close(two.log_likelihood, factor * one.log_likelihood, 1e-13, what="log-likelihood")
    assert_same_theta(after(two, case), after(one, case), ROUNDING)


@given(cases(most_components=4))
def test_relabelling_a_start(case):
    k = len(case.start.weights)
    order = case.random.permutation(k)
    other = reference.Theta(case.start.weights[order], case.start.means[order], case.start.covariances[order])
    one, two = mixture_of(case.start, case.structure, case.pooled), mixture_of(other, case.structure, case.pooled)
    assert_close(two.log_density(case.rows), one.log_density(case.rows), 1e-13, 1.0, what="log density")
    assert_close(
        two.responsibilities(case.rows), one.responsibilities(case.rows)[:, order], 1e-13, 1.0, what="responsibilities"
    )


@pytest.mark.parametrize("seed", range(3))
def test_relabelling_the_start_of_a_fit(seed):
    rows = datasets.hills(2_000, components=4, columns=2, seed=seed)
    labels = (np.argsort(np.argsort(rows[:, 0])) * 4 // len(rows)).astype(int)
    start = reference.partition_start(rows, labels)
    order = np.array([2, 0, 3, 1])
    other = reference.Theta(start.weights[order], start.means[order], start.covariances[order])
    one, two = fit_from(rows, start, 20), fit_from(rows, other, 20)
    assert_same_theta(theta_of(two.mixture), theta_of(one.mixture), 1e-9)
    assert np.all(np.diff(one.mixture.weights) <= 0.0), "components are ordered by weight, largest first"


@given(cases(most_rows=200))
def test_numpy_rows_by_every_order_of_a_fit(case):
    order = case.random.permutation(len(case.rows))
    table = {f"x{j}": case.rows[:, j] for j in range(case.rows.shape[1])} | {"w": case.weights}
    one, two = (
        fit_from(
            pa.table({name: values[which] for name, values in table.items()}),
            case.start,
            3,
            case.structure,
            case.pooled,
            row_weight="w",
        )
        for which in (np.arange(len(order)), order)
    )
    assert_same_theta(theta_of(two.mixture), theta_of(one.mixture), 1e-10)
    assert_close(two.log_likelihood, one.log_likelihood, 1e-12)


@pytest.mark.parametrize("seed", [1, 2])
def test_with_a_key_the_order_of_the_rows_does_not_matter_to_a_whole_fit(seed):
    """The sample and the starts go by the key, so that shuffled rows give the same groups."""
    rows = datasets.hills(4_000, components=3, columns=2, seed=seed, apart=4.0)
    key = np.arange(len(rows)) * 7919
    order = np.random.default_rng(seed).permutation(len(rows))
    one, two = (
        drumlin.fit(
            pa.table({"a": rows[which, 0], "b": rows[which, 1], "parcel": key[which]}),
            3,
            columns=["a", "b"],
            key="parcel",
            method="em",
            seed=seed,
        )
        for which in (np.arange(len(rows)), order)
    )
    assert_same_theta(theta_of(two.mixture), theta_of(one.mixture), 1e-9)
