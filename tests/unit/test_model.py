"""The model: figures, names, cards, and that it cannot change."""

import copy
import dataclasses
import pickle

import numpy as np
import pytest

import drumlin
from drumlin.model import surviving_names


@pytest.fixture(scope="module")
def rows():
    random = np.random.default_rng(5)
    centres = np.repeat([[0.0, 0.0, 1.0], [9.0, 0.0, 1.0], [0.0, 30.0, 1.0]], [300, 200, 100], axis=0)
    return random.normal(size=(600, 3)) * [1.0, 2.0, 0.5] + centres


@pytest.fixture(scope="module")
def model(rows):
    return drumlin.fit(rows, 3, columns=["long", "wide", "deep"], seed=2)


def test_figures(rows, model):
    assert model.columns == ("long", "wide", "deep")
    assert model.rows == 600 and model.weight == 600.0
    np.testing.assert_allclose(model.log_density(rows).sum(), model.log_likelihood, rtol=1e-12)
    p, n = model.mixture.free_parameters, 600.0
    assert p == 2 + 9 + 18
    assert model.bic == pytest.approx(-2 * model.log_likelihood + p * np.log(n), rel=1e-14)
    assert model.aic == pytest.approx(-2 * model.log_likelihood + 2 * p, rel=1e-14)
    tau = model.responsibilities(rows)
    logs = np.where(tau > 0, np.log(np.where(tau > 0, tau, 1.0)), 0.0)
    assert model.icl == pytest.approx(model.bic - 2 * (tau * logs).sum(), rel=1e-9)
    assert model.held_log_likelihood is None
    assert (model.limit, model.groups, model.statistics) == (None, None, None)


def test_the_record_tells_how_it_came_about(model):
    record = model.record
    assert record["stopped"] == model.stopped == "tolerance"
    assert record["passes"] == model.passes == len(record["trace"]) == len(model.trace)
    assert {"pass", "log_likelihood", "per_row", "remaining", "moving", "precision", "seconds"} == set(
        record["trace"][0]
    )
    assert [step["pass"] for step in record["trace"]] == list(range(1, model.passes + 1))
    levels = [step["log_likelihood"] for step in record["trace"]]
    assert np.all(np.diff([*levels, model.log_likelihood]) > -1e-9 * abs(levels[0]))
    assert record["options"]["components"] == 3 and record["options"]["seed"] == 2
    assert record["data"]["rows"] == 600 and record["data"]["columns"]["wide"]["present"] == 600
    assert len(record["tries"]) == 8 and record["history"] == []
    assert "nats per row" in record["stopped_in_words"]


def test_it_cannot_change(model):
    with pytest.raises(dataclasses.FrozenInstanceError):
        model.mixture = None
    with pytest.raises(TypeError):
        model.missing_codes["a"] = (1.0,)
    record, trace, names = model.record, model.trace, model.names
    record["stopped"], trace[0]["pass"], names[0] = "never", 99, "mine"
    record["trace"][0]["pass"] = 99
    assert model.stopped == "tolerance" and model.trace[0]["pass"] == 1 and model.names == {}


def test_components_are_ordered_by_weight(model):
    np.testing.assert_allclose(model.mixture.weights, [1 / 2, 1 / 3, 1 / 6], atol=0.01)
    assert model.mixture.ids.tolist() == [0, 1, 2]


def test_names(model):
    named = model.with_names(["small", "long", "wide"])
    assert named.names == {0: "small", 1: "long", 2: "wide"} and model.names == {}
    assert named.checksum != model.checksum and named.mixture is model.mixture
    assert named.with_names({1: "tube"}).names == {0: "small", 1: "tube", 2: "wide"}
    assert named.with_names({1: "", 0: None}).names == {2: "wide"}
    assert named.with_names({0: "long", 1: "small"}).names == {0: "long", 1: "small", 2: "wide"}
    assert named.id_of("wide") == 2 and named.id_of(1) == 1 and named.id_of(np.int32(1)) == 1
    assert "tube" in repr(named.with_names({1: "tube"}))


@pytest.mark.parametrize(
    "names", [["a"], {7: "a"}, {"x": "a"}, {0: "a", 1: "a"}, {0: "a\nb"}, {0: " a"}, {0: 5}, {0: "x" * 201}, "abc"]
)
def test_names_that_cannot_be(model, names):
    with pytest.raises(drumlin.OptionError, match="names"):
        model.with_names(names)


def test_an_unknown_name_is_answered_with_the_nearest(model):
    with pytest.raises(drumlin.OptionError, match="Did you mean 'tubes'"):
        model.with_names({0: "tubes"}).id_of("tube")
    with pytest.raises(drumlin.OptionError):
        model.id_of(3)


def test_surviving_names():
    assert surviving_names({0: "a", 4: "b"}, [4, 5]) == {4: "b"}


def test_cards(rows, model):
    cards = model.with_names({2: "high"}).cards()
    assert [card["id"] for card in cards] == [0, 1, 2]
    assert [card["name"] for card in cards] == [None, None, "high"]
    assert sum(card["share"] for card in cards) == pytest.approx(1.0)
    assert sum(card["rows"] for card in cards) == pytest.approx(600.0)
    high = cards[2]
    assert high["apart"][0]["column"] == "wide" and high["apart"][0]["difference"] > 1.0
    assert all("deep" not in [one["column"] for one in card["apart"]] for card in cards)
    wide = next(one for one in high["ranges"] if one["column"] == "wide")
    inside = (rows[500:, 1] > wide["low"]) & (rows[500:, 1] < wide["high"])
    assert 0.7 < inside.mean() < 0.9
    assert high["nearest"]["id"] == 0 and cards[0]["nearest"]["id"] == 1
    distances = model.distance(model.mixture.means)
    expected = max(distances[2, 0], distances[0, 2])  # in the narrower one's own standard deviations
    assert high["nearest"]["distance"] == pytest.approx(expected)


def test_one_component_has_no_neighbour(rows):
    (card,) = drumlin.fit(rows, 1).cards()
    assert card["nearest"] is None and card["apart"] == [] and card["share"] == 1.0


def test_copies_are_equal(model):
    for again in (pickle.loads(pickle.dumps(model)), copy.deepcopy(model), copy.copy(model)):
        assert again == model and hash(again) == hash(model) and again.record == model.record
        assert again.to_bytes() == model.to_bytes()
    assert model != "model"


def test_draw(model):
    drawn = model.draw(1000, seed=1)
    assert drawn.shape == (1000, 3)
    np.testing.assert_array_equal(drawn, model.draw(1000, seed=1))


def test_text_and_table(model):
    text = repr(model)
    assert text.splitlines()[0] == "Model of 3 components in 3 columns, structure full"
    assert "600 rows" in text and "note: 8 tries" in text and len(text.splitlines()) < 25
    assert "<table>" in model._repr_html_() and "<li>" in model._repr_html_()


def test_one_row_is_cheap(model):
    """No argument is checked twice and nothing is built again: well below a tenth of a millisecond."""
    import time

    row = np.zeros((1, 3))
    model.assign(row)
    taken = []
    for _ in range(200):
        began = time.perf_counter()
        model.log_density(row)
        taken.append(time.perf_counter() - began)
    assert np.median(taken) < 100e-6
