"""The option precision: which passes are float32, what the trace and the notes say, and what a measure is of."""

import numpy as np
import pyarrow as pa
import pytest

import datasets
import drumlin
from drumlin import _core
from tools import batches_of, run_job

ROWS = datasets.hills(6_007, components=3, columns=2, seed=8, apart=1.5)


def kinds(model) -> list[str]:
    return [step["precision"] for step in model.trace]


def notes_about_it(model) -> list[str]:
    return [note for note in model.notes if "precision" in note]


def test_double_is_the_default():
    assert drumlin.fit(ROWS, 3).checksum == drumlin.fit(ROWS, 3, precision="double").checksum
    assert set(kinds(drumlin.fit(ROWS, 3))) == {"double"}


def test_early_passes_are_single_and_the_last_ones_double():
    model = drumlin.fit(ROWS, 3, precision="single")
    assert model.stopped == "tolerance" and notes_about_it(model) == []
    assert model.record["options"]["precision"] == "single"
    switch = kinds(model).index("double")
    assert switch >= 2 and kinds(model) == ["single"] * switch + ["double"] * (model.passes - switch)
    levels = [step["per_row"] for step in model.trace]
    gains = np.diff(levels[:switch])
    assert gains[-1] < 1e-6 and (gains[:-1] >= 1e-6).all()
    # The rule that ends the fit begins anew: an estimate takes three passes of its own.
    assert [step["remaining"] is None for step in model.trace[switch : switch + 3]] == [True, True, False]


def test_a_large_tolerance_ends_the_trust_earlier():
    loose = drumlin.fit(ROWS, 3, precision="single", tolerance=1e-3)
    tight = drumlin.fit(ROWS, 3, precision="single", tolerance=1e-6)
    assert kinds(loose).count("single") < kinds(tight).count("single")


def test_the_pass_limit_counts_both():
    model = drumlin.fit(ROWS, 3, precision="single", pass_limit=3, tolerance=0.0)
    assert kinds(model) == ["single"] * 3 and model.stopped == "pass_limit"
    closing = _core.Scores(model.mixture._inner, model.mixture._scaling)
    (scores,) = run_job(_core.start_feed(_core.Reading(["x0", "x1"]), [closing], threads=1), batches_of(ROWS))
    assert model.log_likelihood == scores.log_likelihood


def thin(correlation: float, at: float = 0.0) -> drumlin.Mixture:
    covariances = [np.eye(2), np.eye(2), [[1.0, correlation], [correlation, 1.0]]]
    means = [[-2.0, 0.0], [2.0, 0.0], [at, 1.0 + at]]
    return drumlin.Mixture([0.4, 0.35, 0.25], means, covariances, columns=["x0", "x1"], ids=[7, 4, 5])


def test_an_ill_conditioned_start_falls_back_with_a_note():
    model = drumlin.fit(ROWS, thin(0.99999), precision="single")
    (note,) = notes_about_it(model)
    assert "from pass 1 on" in note and "component 5 is so thin" in note
    assert set(kinds(model)) == {"double"}
    assert model.checksum == drumlin.fit(ROWS, thin(0.99999)).checksum


def test_a_component_that_becomes_thin_ends_float32_where_it_does():
    random = np.random.default_rng(5)
    line = 20.0 + random.normal(size=(800, 1)) + 1e-3 * random.normal(size=(800, 2))
    model = drumlin.fit(np.concatenate([ROWS, line]), thin(0.5, at=20.0), precision="single")
    (note,) = notes_about_it(model)
    switch = kinds(model).index("double")
    assert switch == 1 and "from pass 2 on" in note and "component 5" in note
    assert model.stopped == "tolerance"


def test_values_that_float32_cannot_hold_beside_the_rest():
    rows = ROWS.copy()
    rows[17, 1] = 1e17
    model = drumlin.fit(rows, 2, columns=["a", "b"], precision="single", pass_limit=5)
    (note,) = notes_about_it(model)
    assert "was not used" in note and "'b'" in note
    assert set(kinds(model)) == {"double"}


@pytest.fixture(scope="module")
def parts():
    mixture = _core.Mixture(np.array([0.5, 0.5]), np.array([[-1.0, 0.0], [1.0, 0.5]]), np.stack([np.eye(2)] * 2))
    return mixture, _core.Scaling(np.zeros(2), np.ones(2))


def test_measures_of_both_precisions_in_one_read(parts):
    def statistics(*single: bool) -> list[bytes]:
        measures = [_core.EmStatistics(*parts, one) for one in single]
        job = _core.start_feed(_core.Reading(["x0", "x1"]), measures, threads=2)
        return [measure.to_bytes() for measure in run_job(job, batches_of(ROWS))]

    (double,), (single,) = statistics(False), statistics(True)
    assert double != single
    assert statistics(True, False, True) == [single, double, single]
    again = _core.Measure.from_bytes(single)
    assert isinstance(again, _core.EmStatistics) and again.single and again.to_bytes() == single
    assert not _core.Measure.from_bytes(double).single


def test_obstacles(parts):
    mixture, scaling = parts
    assert _core.EmStatistics(mixture, scaling, True).obstacle is None
    far = _core.Mixture(mixture.weights, mixture.means + [[0.0, 0.0], [99.0, 0.0]], mixture.covariances)
    measure = _core.EmStatistics(far, scaling, True)
    assert not measure.single and measure.obstacle == (1, pytest.approx(np.hypot(100.0, 1.0)))
    # Seen from the middle of the columns it is near.
    assert _core.EmStatistics(far, _core.Scaling(np.array([50.0, 0.0]), np.array([64.0, 1.0])), True).obstacle


def test_rows_with_gaps_and_filters_come_in_single_as_in_double():
    table = pa.table({"a": ROWS[:, 0], "b": ROWS[:, 1].astype(np.float32)})
    holes = ROWS[:, 0].copy()
    holes[::97] = np.nan
    gaps = table.set_column(0, "a", pa.array(holes))
    options = {"precision": "single", "seed": 3, "pass_limit": 4, "tolerance": 0.0}
    left_out = drumlin.fit(gaps, 3, missing="complete-rows", **options)
    filtered = drumlin.fit(table, 3, where=f"a != {float(ROWS[0, 0])!r}", **options)
    assert kinds(left_out) == kinds(filtered) == ["single"] * 4
    assert left_out.rows == len(ROWS) - len(ROWS[::97]) and filtered.rows == len(ROWS) - 1
