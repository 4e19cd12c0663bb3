"""The mixture: what it takes, what it refuses, and that it cannot change."""

import pickle

import numpy as np
import polars as pl
import pyarrow as pa
import pytest

import drumlin

MEANS = np.array([[0.0, 0.0], [5.0, 1.0]])
FULL = np.array([[[1.0, 0.3], [0.3, 2.0]], [[2.0, -0.5], [-0.5, 1.0]]])


def full(**options):
    return drumlin.Mixture([0.6, 0.4], MEANS, FULL, ["a", "b"], **options)


def test_what_it_holds():
    mixture = full()
    assert (mixture.structure, mixture.pooled, mixture.components, mixture.dimensions) == ("full", False, 2, 2)
    assert mixture.columns == ("a", "b")
    assert mixture.ids.tolist() == [0, 1] and mixture.ids.dtype == np.int32
    np.testing.assert_array_equal(mixture.covariances, FULL)
    np.testing.assert_array_equal(mixture.means, MEANS)
    assert mixture.free_parameters == 1 + 4 + 6
    np.testing.assert_allclose(mixture.standard_deviations(), np.sqrt([[1.0, 2.0], [2.0, 1.0]]))


@pytest.mark.parametrize(
    ("structure", "pooled", "given", "shown"),
    [
        ("diagonal", False, [[1.0, 4.0], [9.0, 1.0]], [np.diag([1.0, 4.0]), np.diag([9.0, 1.0])]),
        ("diagonal", True, [[1.0, 4.0]], [np.diag([1.0, 4.0])] * 2),
        ("spherical", False, [1.0, 4.0], [np.eye(2), 4 * np.eye(2)]),
        ("spherical", True, [4.0], [4 * np.eye(2)] * 2),
        ("full", True, FULL[0], [FULL[0]] * 2),
        ("full", True, FULL[:1], [FULL[0]] * 2),
    ],
)
def test_short_forms_of_covariances(structure, pooled, given, shown):
    mixture = drumlin.Mixture([0.5, 0.5], MEANS, given, structure=structure, pooled=pooled)
    np.testing.assert_array_equal(mixture.covariances, shown)
    deviations = np.sqrt(np.diagonal(np.array(shown), axis1=1, axis2=2))
    np.testing.assert_array_equal(mixture.standard_deviations(), deviations)
    again = pickle.loads(pickle.dumps(mixture))
    assert again == mixture and hash(again) == hash(mixture)


@pytest.mark.parametrize("structure", ["full", "diagonal", "spherical"])
def test_one_column_takes_plain_lists(structure):
    mixture = drumlin.Mixture([0.5, 0.5], [0.0, 4.0], [1.0, 9.0], structure=structure)
    np.testing.assert_array_equal(mixture.covariances, [[[1.0]], [[9.0]]])
    assert mixture.means.shape == (2, 1)


@pytest.mark.parametrize(
    ("weights", "means", "covariances"),
    [
        ([0.6, 0.5], MEANS, FULL),
        ([1.2, -0.2], MEANS, FULL),
        ([0.6, 0.4], [[0.0, np.nan], [1.0, 1.0]], FULL),
        ([0.6, 0.4], MEANS, FULL * np.array([[1.0, 9.0], [9.0, 1.0]])),
        ([0.6, 0.4], MEANS, FULL[:, :1]),
        ([0.6, 0.4], MEANS[:, :1], FULL),
        (["x", "y"], MEANS, FULL),
    ],
)
def test_numbers_that_are_not_a_mixture(weights, means, covariances):
    with pytest.raises(drumlin.MixtureError):
        drumlin.Mixture(weights, means, covariances)


@pytest.mark.parametrize(
    "options",
    [
        {"ids": [1, 1]},
        {"ids": [1]},
        {"ids": [-1, 0]},
        {"ids": [0, 2**31]},
        {"columns": ["a"]},
        {"columns": ["a", "a"]},
        {"structure": "round"},
        {"pooled": 1},
    ],
)
def test_options_that_do_not_fit(options):
    with pytest.raises(drumlin.OptionError):
        drumlin.Mixture([0.6, 0.4], MEANS, FULL, **options)


def test_it_cannot_change():
    mixture = full()
    with pytest.raises(AttributeError):
        mixture.weights = [1.0]
    with pytest.raises(AttributeError):
        mixture.anything = 1
    with pytest.raises(AttributeError):
        del mixture._inner
    for array in (mixture.weights, mixture.means, mixture.ids):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0
    mixture.covariances[:] = 0.0
    np.testing.assert_array_equal(mixture.covariances, FULL)


def test_equality():
    assert full() == full()
    assert full() != full(ids=[3, 4])
    assert full() != drumlin.Mixture([0.6, 0.4], MEANS, FULL)
    assert full() != "mixture"


def test_row_wise_methods_agree_over_arrays_and_tables():
    mixture = full(ids=[7, 3])
    rows = np.random.default_rng(0).normal(size=(300, 2))
    rows[5, 0] = np.nan
    columns = {"b": rows[:, 1], "other": rows[:, 0], "a": rows[:, 0]}
    for name in ("log_density", "responsibilities", "assign", "distance"):
        expected = getattr(mixture, name)(rows)
        assert len(expected) == 300
        for table in (pa.table(columns), pl.DataFrame(columns)):
            np.testing.assert_array_equal(getattr(mixture, name)(table), expected, err_msg=name)
        assert len(getattr(mixture, name)(pa.table(columns).slice(0, 0))) == 0
        assert getattr(mixture, name)(rows[:0]).shape == expected[:0].shape
    assert set(mixture.assign(rows).tolist()) == {-1, 3, 7} and mixture.assign(rows)[5] == -1
    assert np.isnan(mixture.log_density(rows)[5])
    np.testing.assert_allclose(np.delete(mixture.responsibilities(rows), 5, 0).sum(axis=1), 1.0, rtol=1e-12)


def test_rows_that_do_not_fit():
    mixture = full()
    for rows in (np.zeros(2), np.zeros((3, 3)), np.array([["x", "y"]]), np.zeros((1, 2), dtype=complex)):
        with pytest.raises(drumlin.SchemaError):
            mixture.log_density(rows)
    with pytest.raises(drumlin.SchemaError, match="'b'"):
        mixture.assign(pa.table({"a": [1.0], "c": [1.0]}))
    with pytest.raises(drumlin.SchemaError):
        mixture.assign(pa.table({"a": [1.0], "b": ["x"]}))
    with pytest.raises(drumlin.OptionError, match="no column names"):
        drumlin.Mixture([1.0], [0.0], [1.0]).assign(pa.table({"a": [1.0]}))
    with pytest.raises(drumlin.DataError):
        mixture.log_density(np.array([[0.0, np.inf]]))


def test_whole_numbers_and_booleans_are_numbers():
    mixture = drumlin.Mixture([1.0], [[0.0, 0.0]], [np.eye(2)])
    expected = mixture.log_density(np.array([[1.0, 0.0]]))
    for kind in (np.int8, np.uint16, np.int64, np.float32, bool):
        np.testing.assert_array_equal(mixture.log_density(np.array([[1, 0]], dtype=kind)), expected)


def test_draw():
    mixture = full()
    rows = mixture.draw(20_000, seed=3)
    assert rows.shape == (20_000, 2)
    np.testing.assert_array_equal(rows, mixture.draw(20_000, seed=3))
    assert not np.array_equal(rows, mixture.draw(20_000, seed=4))
    np.testing.assert_allclose(rows.mean(axis=0), mixture.weights @ MEANS, atol=0.1)
    assert mixture.draw(0).shape == (0, 2)
    with pytest.raises(drumlin.OptionError):
        mixture.draw(-1)


def test_far_and_tiny_units():
    for scale in (1e-120, 1e120):
        mixture = drumlin.Mixture([0.5, 0.5], [[-scale], [scale]], [[[scale**2]], [[scale**2]]])
        rows = np.array([[0.0], [scale], [1e3 * scale]])
        assert np.isfinite(mixture.log_density(rows)).all()
        np.testing.assert_allclose(mixture.responsibilities(rows)[0], [0.5, 0.5])


def test_text_and_table():
    text = repr(full())
    assert text.startswith("Mixture of 2 components in 2 columns, structure full\n")
    assert "60.0%" in text and "5 ± 1.41" in text
    big = drumlin.Mixture(
        np.full(40, 1 / 40),
        np.zeros((40, 9)),
        np.ones(1),
        structure="spherical",
        pooled=True,
        columns=list("abcdefghi"),
    )
    assert len(repr(big).splitlines()) < 25 and "24 smaller components and 3 columns" in repr(big)
    odd = drumlin.Mixture([1.0], [0.0], [1.0], ["<b>"])
    assert "<table>" in odd._repr_html_() and "<b>" not in odd._repr_html_() and "&lt;b&gt;" in odd._repr_html_()
