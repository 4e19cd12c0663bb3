"""Affine maps of the columns and extreme scales: units do not matter (numeric contract 1 and 2)."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import drumlin
import reference
from drumlin import _core
from strategies import cases
from tools import assert_close, em_pass, fit_from, mixture_of, plain_scaling, theta_of

EPS = np.finfo(float).eps


def on_a_grid(rows: np.ndarray) -> np.ndarray:
    """Multiples of 1/64: then 1e6 * row + 1e15 is exact in float64, and a map loses nothing of the input."""
    return np.round(rows * 64.0) / 64.0


def mapped(theta: reference.Theta, factor: np.ndarray, offset: np.ndarray) -> reference.Theta:
    return reference.Theta(
        theta.weights, theta.means * factor + offset, theta.covariances * factor[:, None] * factor[None, :]
    )


@pytest.mark.parametrize("spreads_away", [0.0, 1e3, 1e6, 1e9])
@pytest.mark.parametrize("factor", [1e6, 1.0])
@pytest.mark.parametrize(("structure", "pooled"), reference.STRUCTURES)
def test_memberships_stay(structure, pooled, factor, spreads_away):
    """The new means can be told from each other only to eps * offset, and that is all that memberships may move."""
    random = np.random.default_rng(12)
    label = random.choice(3, size=1500, p=[0.5, 0.3, 0.2])
    centres = np.array([[0.0, 0.0, 0.0], [3.0, 1.0, -2.0], [-1.0, 4.0, 2.0]])
    rows = on_a_grid(centres[label] + random.standard_normal((1500, 3)))
    factors = np.full(3, factor) if structure == "spherical" else np.array([factor, 1.0, 1.0])
    offsets = factors * spreads_away
    moved = rows * factors + offsets
    assert np.array_equal((moved - offsets) / factors, rows), "the map must lose nothing"
    start = reference.partition_start(rows, label, structure, pooled)
    one = fit_from(rows, start, 15, structure, pooled)
    two = fit_from(moved, mapped(start, factors, offsets), 15, structure, pooled)
    allowed = 200.0 * EPS * max(1.0, spreads_away)
    assert_close(two.responsibilities(moved), one.responsibilities(rows), allowed, 1.0, what="responsibilities")
    a, b = theta_of(one.mixture), theta_of(two.mixture)
    assert_close(b.weights, a.weights, allowed, 1.0, what="weights")
    assert_close((b.means - offsets) / factors, a.means, allowed, 1.0, what="means")
    shift = len(rows) * np.log(factors).sum()
    assert_close(two.log_likelihood, one.log_likelihood - shift, 10.0 * allowed, what="log-likelihood")


@pytest.mark.parametrize("spreads_away", [0.0, 1e9])
@pytest.mark.parametrize("factor", [1e6, 1e-6])
def test_a_whole_fit_finds_the_same_groups(factor, spreads_away):
    random = np.random.default_rng(2)
    label = random.choice(3, size=3000, p=[0.5, 0.3, 0.2])
    centres = np.array([[0.0, 0.0], [6.0, 1.0], [-1.0, 7.0]])
    rows = on_a_grid(centres[label] + random.standard_normal((3000, 2)))
    moved = rows.copy()
    moved[:, 0] = moved[:, 0] * factor + spreads_away * factor
    one = drumlin.fit(rows, 3, method="em", tolerance=0.0, pass_limit=100)
    two = drumlin.fit(moved, 3, method="em", tolerance=0.0, pass_limit=100)
    allowed = 200.0 * EPS * max(1e3, spreads_away)  # 1e-6 * row is rounded, and so are the new means
    assert_close(two.responsibilities(moved), one.responsibilities(rows), allowed, 1.0, what="responsibilities")


@given(cases(), st.integers(-460, 460))
def test_powers_of_two_change_memberships_by_rounding_only(case, power):
    """2^-460 to 2^460 is 1e-138 to 1e138: the scaled columns are the same to the bit; densities are in other units."""
    d, factor = case.rows.shape[1], 2.0**power
    moved = case.rows * factor
    scaling, other = plain_scaling(case.rows), plain_scaling(moved)
    assert np.array_equal(other.spread, scaling.spread * factor)
    assert np.array_equal(other.centre, scaling.centre * factor)
    options = {"structure": case.structure, "pooled": case.pooled, "weights": case.weights}
    start = mapped(case.start, np.full(d, factor), np.zeros(d))
    one = em_pass(case.rows, case.start, scaling=scaling, **options)
    two = em_pass(moved, start, scaling=other, **options)
    # A log density is known to eps of its size, which has d * power * log 2 of units in it.
    rounding = 4.0 * EPS * (d * abs(power) * np.log(2.0) + 50.0)
    assert_close(two.shares, one.shares, rounding, one.weight, what="shares")
    a, _, _ = one.maximise(case.structure, case.pooled, 1e-8)
    b, _, _ = two.maximise(case.structure, case.pooled, 1e-8)
    deviations = np.sqrt(np.diagonal(a.covariances, axis1=1, axis2=2))
    assert_close(b.weights, a.weights, rounding, 1.0, what="weights")
    assert_close(b.means / factor, a.means, 20.0 * rounding, deviations, what="means")
    scale = deviations[:, :, None] * deviations[:, None, :]
    assert_close(b.covariances / factor / factor, a.covariances, 50.0 * rounding, scale, what="covariances")


@given(cases(most_rows=200), st.lists(st.floats(-138.0, 138.0), min_size=4, max_size=4))
def test_any_scales_side_by_side(case, exponents):
    d = case.rows.shape[1]
    structure = "full" if case.structure == "spherical" else case.structure  # spherical has one scale for all columns
    factors = 10.0 ** np.array(exponents[:d])
    start = reference.partition_start(
        case.rows, (case.rows[:, 0] > np.median(case.rows[:, 0])).astype(int), structure, case.pooled
    )
    moved, there = case.rows * factors, mapped(start, factors, np.zeros(d))
    assert np.isfinite(there.covariances).all()
    one = fit_from(case.rows, start, 3, structure, case.pooled)
    two = fit_from(moved, there, 3, structure, case.pooled)
    assert np.isfinite(two.mixture.means).all() and np.isfinite(two.mixture.covariances).all()
    got, want = two.responsibilities(moved), one.responsibilities(case.rows)
    assert_close(got, want, 1e-9, 1.0, what="responsibilities")
    assert np.isfinite(two.log_likelihood)


@pytest.mark.parametrize("factor", [1e-150, 1e150])
def test_a_spread_beyond_the_bounds_is_refused_by_name(factor):
    import pyarrow as pa

    random = np.random.default_rng(0)
    table = pa.table({"fine": random.standard_normal(100), "odd_scale": factor * random.standard_normal(100)})
    with pytest.raises(drumlin.DrumlinError, match="odd_scale"):
        drumlin.fit(table, 2, columns=["fine", "odd_scale"])


@pytest.mark.parametrize("wild", [1e6, -9999.0])
@pytest.mark.parametrize("seed", range(5))
def test_a_few_wild_rows_do_not_move_centre_or_spread(seed, wild):
    random = np.random.default_rng(seed)
    rows = random.standard_normal((10_000, 2)) * [1.0, 30.0] + [0.0, 500.0]
    dirty = rows.copy()
    dirty[::1000] = wild * np.array([1.0, 30.0])
    a, b = plain_scaling(rows), plain_scaling(dirty)
    assert np.all(np.abs(b.spread / a.spread - 1.0) < 0.01)
    assert np.all(np.abs(b.centre - a.centre) < 0.01 * a.spread)


def test_spreads_are_powers_of_two_near_the_spread():
    random = np.random.default_rng(1)
    scales = np.array([1e-100, 3e-7, 1.0, 5.0, 7e11, 1e100])
    rows = random.standard_normal((5000, 6)) * scales
    spread = plain_scaling(rows).spread
    assert np.all(np.frexp(spread)[0] == 0.5)
    assert np.all((spread > 0.2 * scales) & (spread < 5.0 * scales))


def test_a_far_component_keeps_twelve_digits():
    """Numeric contract 3: a small group 10,000 spreads from the centre, against 64-bit mantissas."""
    random = np.random.default_rng(9)
    near, far = random.standard_normal((20_000, 2)), random.standard_normal((1_000, 2)) + 1e4
    rows = np.concatenate([near, far])
    start = reference.Theta(
        np.array([0.9, 0.1]), np.array([[0.1, 0.0], [1e4 + 1.0, 1e4 - 1.0]]), np.stack([np.eye(2)] * 2)
    )
    mixture, _, notes = em_pass(rows, start).maximise("full", False, 0.0)
    assert not notes
    for k, group in enumerate((near, far)):
        exact = group.astype(np.longdouble)
        mean = exact.mean(axis=0)
        centred = exact - mean
        want = (centred[:, :, None] * centred[:, None, :]).mean(axis=0)
        assert_close(mixture.covariances[k], want, 1e-12, np.sqrt(np.diag(want)[:, None] * np.diag(want)))
        assert_close(mixture.means[k], mean, 1e-14, np.maximum(np.abs(mean), 1.0).astype(float))


@given(cases(most_rows=150), st.floats(0.0, 300.0))
def test_rows_however_far_have_finite_densities_and_whole_memberships(case, exponent):
    mixture = mixture_of(case.start, case.structure, case.pooled)
    direction = case.random.standard_normal((50, case.rows.shape[1]))
    far = direction * 10.0**exponent
    for rows in (far, np.sign(far) * np.finfo(float).max, np.concatenate([case.rows, far])):
        density = mixture.log_density(rows)
        assert np.isfinite(density).all()
        responsibilities = mixture.responsibilities(rows)
        assert np.isfinite(responsibilities).all() and (responsibilities >= 0.0).all()
        assert np.abs(responsibilities.sum(axis=1) - 1.0).max() <= 1e-12
        assert np.isfinite(mixture.distance(rows)).all()


def test_far_rows_are_ranked_by_the_same_formula():
    """Where every density underflows the answer is still the one of the formula, not a made-up one."""
    theta = reference.Theta(
        np.array([0.7, 0.3]), np.array([[0.0, 0.0], [2.0, 0.0]]), np.stack([np.eye(2), 1.5 * np.eye(2)])
    )
    rows = np.array([[1e3, 0.0], [-1e5, 3.0], [40.0, 40.0], [1e8, -1e8]])
    mixture = mixture_of(theta)
    assert np.all(np.exp(reference.log_terms(rows, theta)) == 0.0), "rows that are not far enough"
    assert_close(mixture.log_density(rows), reference.log_density(rows, theta), 1e-13)
    assert_close(mixture.responsibilities(rows), reference.e_step(rows, np.ones(4), theta)[0], 1e-12, 1.0)


def test_a_fit_with_far_rows_stays_finite():
    random = np.random.default_rng(6)
    rows = random.standard_normal((2_000, 2))
    rows[::500] *= 1e30
    model = drumlin.fit(rows, 3, method="em")
    for value in (model.mixture.weights, model.mixture.means, model.mixture.covariances, model.log_likelihood):
        assert np.isfinite(value).all()
    assert np.abs(model.responsibilities(rows).sum(axis=1) - 1.0).max() <= 1e-12


def test_scaling_refuses_what_is_no_scaling():
    for centre, spread in (([0.0], [0.0]), ([0.0], [-1.0]), ([np.nan], [1.0]), ([0.0, 0.0], [1.0])):
        with pytest.raises(drumlin.DrumlinError):
            _core.Scaling(np.array(centre), np.array(spread))
