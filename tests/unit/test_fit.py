"""The fit: what it starts from, what it notes, and the options that change it."""

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin import _core
from drumlin.fitting import em, first_pass
from drumlin.fitting.source import codes_per_column


def hills(n=600, seed=0):
    random = np.random.default_rng(seed)
    return random.normal(size=(n, 2)) + np.repeat(
        [[0.0, 0.0], [8.0, 0.0], [0.0, 9.0]], [n // 2, n // 3, n // 6], axis=0
    )


ROWS = hills()


def table(**extra):
    return pa.table({"a": ROWS[:, 0], "b": ROWS[:, 1], **extra})


def test_the_kinds_are_found():
    model = drumlin.fit(ROWS, 3)
    np.testing.assert_allclose(model.mixture.weights, [1 / 2, 1 / 3, 1 / 6], atol=0.01)
    np.testing.assert_allclose(model.mixture.means, [[0, 0], [8, 0], [0, 9]], atol=0.3)
    assert model.assign(ROWS[[0, 350, 599]]).tolist() == [0, 1, 2]


@pytest.mark.parametrize("start_from", ["k-means++", "random-rows"])
@pytest.mark.parametrize("structure", ["full", "diagonal", "spherical"])
@pytest.mark.parametrize("pooled", [False, True])
def test_structures_and_starts(structure, pooled, start_from):
    model = drumlin.fit(ROWS, 3, structure=structure, pooled=pooled, start_from=start_from)
    assert (model.mixture.structure, model.mixture.pooled) == (structure, pooled)
    np.testing.assert_allclose(model.mixture.weights, [1 / 2, 1 / 3, 1 / 6], atol=0.02)


class TestColumns:
    def test_rows_in_memory_use_all_columns_but_key_and_row_weight(self):
        rows = table(parcel=pa.array(range(600)), count=pa.array([1] * 600))
        assert drumlin.fit(rows, 1, key="parcel", row_weight="count").columns == ("a", "b")

    def test_names_for_an_array(self):
        assert drumlin.fit(ROWS, 1, columns=["p", "q"]).columns == ("p", "q")
        assert drumlin.fit(ROWS, 1, columns=["x1"]).columns == ("x1",)
        with pytest.raises(drumlin.OptionError, match="x0, x1"):
            drumlin.fit(ROWS, 1, columns=["p"])

    def test_the_order_is_the_one_asked_for(self):
        model = drumlin.fit(table(), 1, columns=["b", "a"])
        assert model.columns == ("b", "a")
        np.testing.assert_allclose(model.mixture.means[0], ROWS.mean(axis=0)[::-1])

    @pytest.mark.parametrize(
        ("options", "kind", "text"),
        [
            ({"columns": ["a", "c"]}, drumlin.SchemaError, "'c'"),
            ({"columns": ["a"], "key": "a"}, drumlin.OptionError, "never fitted"),
            ({"columns": ["a"], "row_weight": "a"}, drumlin.OptionError, "row_weight"),
            ({"columns": ["a"], "key": "nokey"}, drumlin.SchemaError, "nokey"),
            ({"columns": ["a"], "row_weight": "text"}, drumlin.SchemaError, "not numbers"),
            ({"columns": ["a"], "missing_codes": {"b": 1}}, drumlin.OptionError, "missing_codes names 'b'"),
            ({"columns": ["a", "text"]}, drumlin.SchemaError, "text"),
            ({}, drumlin.SchemaError, "text"),
            ({"columns": ["a"], "where": "c > 1"}, drumlin.DrumlinError, "'c'"),
            ({"columns": ["a"], "hold_out": "a + 1"}, drumlin.DrumlinError, "hold_out"),
            ({"columns": ["a"], "hold_out": "a > 1e9 or a < 1e9"}, drumlin.DataError, "hold_out leaves no row"),
        ],
    )
    def test_columns_that_cannot_play_their_part(self, options, kind, text):
        with pytest.raises(kind, match=text):
            drumlin.fit(table(text=pa.array(["x"] * 600)), 1, **options)

    def test_codes_per_column(self):
        assert codes_per_column({"*": (-1.0,), "b": (-9.0,)}, ["a", "b"]) == {"a": (-1.0,), "b": (-9.0, -1.0)}
        assert codes_per_column(None, ["a"]) == {}


class TestRows:
    def test_where_is_as_if_the_other_rows_were_absent(self):
        one = drumlin.fit(table(), 2, where="a > 4 or b > 4", columns=["a", "b"])
        two = drumlin.fit(table(), 2, where=(pc.field("a") > 4) | (pc.field("b") > 4), columns=["a", "b"])
        assert one.checksum == two.checksum
        kept = (ROWS > 4).any(axis=1)
        assert one.rows == kept.sum()
        np.testing.assert_allclose(np.sort(one.mixture.means, axis=0), [[0, 0], [8, 9]], atol=0.4)

    def test_hold_out_by_share(self):
        model = drumlin.fit(table(k=pa.array(range(600))), 3, columns=["a", "b"], key="k", hold_out=0.25)
        assert model.rows + model.figures.held_rows == 600
        assert 100 < model.figures.held_rows < 200
        assert abs(model.held_log_likelihood - model.log_likelihood / model.rows) < 0.5

    def test_hold_out_by_condition(self):
        held = np.arange(600) % 3 == 0
        model = drumlin.fit(table(third=pa.array(held)), 3, columns=["a", "b"], hold_out="third == true")
        assert model.figures.held_rows == 200 and model.rows == 400
        np.testing.assert_allclose(model.log_density(ROWS[held]).mean(), model.held_log_likelihood, rtol=1e-12)

    def test_row_weights(self):
        weights = np.array([0.0, 1.0, 2.0] * 200)
        model = drumlin.fit(table(w=weights), 3, columns=["a", "b"], row_weight="w")
        assert model.weight == 600.0 and model.rows == 400
        assert any("row weight 0" in note for note in model.notes)

    def test_complete_rows(self):
        rows = ROWS.copy()
        rows[::10, 1] = np.nan
        with pytest.raises(drumlin.DataError, match=r"'x1' 60 NaN \(first in row 0\).*540 of 600 rows"):
            drumlin.fit(rows, 3)
        model = drumlin.fit(rows, 3, missing="complete-rows")
        assert model.rows == 540 and model.missing == "complete-rows"
        assert any(note.startswith("60 of 600 rows were left out") for note in model.notes)

    def test_keys_make_the_sample_independent_of_row_order(self):
        rows = hills(30_000)
        keys = pa.array(np.arange(30_000))
        tables = [pa.table({"a": rows[:, 0], "b": rows[:, 1], "k": keys})]
        tables.append(tables[0].take(pa.array(np.random.default_rng(0).permutation(30_000))))
        models = [drumlin.fit(one, 3, columns=["a", "b"], key="k", pass_limit=1, tolerance=0.0) for one in tables]
        np.testing.assert_allclose(models[0].mixture.means, models[1].mixture.means, rtol=1e-9, atol=1e-9)
        assert models[0].record["tries"] == models[1].record["tries"]


class TestStart:
    def test_from_a_mixture(self):
        start = drumlin.Mixture(
            [0.2, 0.3, 0.5], [[0, 9], [8, 0], [0, 0]], np.ones(3), structure="spherical", ids=[5, 9, 2]
        )
        model = drumlin.fit(ROWS, start)
        assert model.mixture.ids.tolist() == [2, 9, 5]
        assert model.mixture.structure == "spherical" and model.record["tries"] == []
        full = drumlin.fit(ROWS, start, structure="full", pooled=False)
        assert full.mixture.structure == "full" and full.log_likelihood > model.log_likelihood

    def test_explicit_structure_wins_even_when_it_is_the_default(self):
        start = drumlin.Mixture([1.0], [[0, 0]], [[1.0, 1.0]], structure="diagonal")
        assert drumlin.fit(ROWS, start).mixture.structure == "diagonal"
        assert drumlin.fit(ROWS, start, structure="full").mixture.structure == "full"

    def test_from_a_model_or_its_file(self, tmp_path):
        first = drumlin.fit(table(), 3, columns=["b", "a"], missing="complete-rows", missing_codes={"a": -1})
        first = first.with_names(["x", "y", "z"])
        path = first.save(tmp_path / "m.drumlin")
        for start in (first, path, tmp_path / "m.drumlin"):
            again = drumlin.fit(table(), start)
            assert again.columns == ("b", "a") and again.names == first.names
            assert again.missing == "complete-rows" and dict(again.missing_codes) == {"a": (-1.0,)}
            assert again.record["history"][0]["checksum"] == first.checksum
            np.testing.assert_allclose(again.mixture.means, first.mixture.means, atol=1e-2)
        changed = drumlin.fit(table(), first, missing="refuse", missing_codes={"b": -1})
        assert changed.missing == "refuse" and dict(changed.missing_codes) == {"b": (-1.0,)}

    @pytest.mark.parametrize(
        "options", [{"tries": 8}, {"start_from": "k-means++"}, {"columns": ["a"]}, {"columns": ["b", "a"]}]
    )
    def test_options_without_effect_are_refused(self, options):
        start = drumlin.Mixture([1.0], [[0, 0]], [np.eye(2)], ["a", "b"])
        with pytest.raises(drumlin.OptionError, match=next(iter(options))):
            drumlin.fit(table(), start, **options)

    @pytest.mark.parametrize("components", [0, -1, 2.0, True, None, "3", [2], 70_000])
    def test_components_that_cannot_be(self, components):
        with pytest.raises(drumlin.DrumlinError):
            drumlin.fit(ROWS, components)

    def test_a_start_of_another_width(self):
        with pytest.raises(drumlin.OptionError):
            drumlin.fit(ROWS, drumlin.Mixture([1.0], [[0.0] * 3], [np.eye(3)]))

    def test_ids_of_components_that_vanish_are_not_used_again(self):
        start = drumlin.Mixture([0.5, 0.5], [[0.0, 0.0], [1e6, 1e6]], [np.eye(2)] * 2, ["a", "b"], ids=[0, 7])
        model = drumlin.fit(table(), start)
        if 7 not in model.mixture.ids:
            assert model._next_id == 8 and any("7" in note for note in model.notes)


class TestNotes:
    def told(self, rows, components=1, **options):
        return " ".join(drumlin.fit(rows, components, **options).notes)

    def test_a_constant_column(self):
        rows = np.column_stack([ROWS, np.full(600, 4.0)])
        told = self.told(rows)
        assert "Column 'x2' is constant (4)" in told and "held up by floor" in told

    def test_a_suspected_code(self):
        rows = ROWS.copy()
        rows[::20, 0] = -9999
        told = self.told(rows)
        assert "5 % of 'x0' is exactly -9999" in told and "missing_codes={'x0': [-9999]}" in told

    def test_a_row_number(self):
        rows = pa.table({"a": ROWS[:, 0], "number": np.arange(600)})
        assert "like a row number" in self.told(rows)

    def test_float32_far_from_zero(self):
        rows = (ROWS + 1e7).astype(np.float32)
        assert "float32" in self.told(rows) and "float32" not in self.told(ROWS.astype(np.float32))

    def test_columns_that_determine_each_other(self):
        rows = np.column_stack([ROWS, 2 * ROWS[:, 0] + 1e-4 * np.random.default_rng(0).normal(size=600)])
        assert "'x0' and 'x2' all but determining each other" in self.told(rows, floor=0.0)
        assert "held up by floor=1e-08 in the direction that mixes 'x0' and 'x2'" in self.told(
            np.column_stack([ROWS, 2 * ROWS[:, 0]])
        )

    def test_the_pass_limit(self):
        model = drumlin.fit(ROWS, 3, pass_limit=1, tries=1)
        assert model.stopped == "pass_limit" and model.passes == 1
        assert "Stopped at the limit of 1 pass" in " ".join(model.notes)

    def test_fewer_distinct_rows_than_components(self):
        rows = np.repeat([[0.0, 1.0], [5.0, 5.0], [9.0, 0.0]], 50, axis=0)
        model = drumlin.fit(rows, 5)
        assert model.mixture.components == 3
        assert "lowered from 5 to 3" in " ".join(model.notes)

    def test_notes_are_logged(self, caplog):
        with caplog.at_level("INFO", logger="drumlin"):
            model = drumlin.fit(ROWS, 3)
        assert set(model.notes) <= {record.getMessage() for record in caplog.records}

    def test_tries_that_disagree_are_told(self):
        from drumlin.fitting.notes import tries_note

        assert tries_note([-1.0, -1.0]) == "2 tries on the sample: 2 within 0.001 nats per row of the best."
        assert "no two agree" in tries_note([-1.0, -1.5, -1.25]) and "up to 0.5 below" in tries_note(
            [-1.0, -1.5, -1.25]
        )


def test_one_row_and_one_component():
    model = drumlin.fit(np.array([[3.0, 4.0]]), 1)
    np.testing.assert_allclose(model.mixture.means, [[3.0, 4.0]])
    assert np.isfinite([model.log_likelihood, model.bic, model.icl]).all()


def test_tolerance_zero_runs_to_the_limit():
    model = drumlin.fit(ROWS, 3, pass_limit=7, tolerance=0.0)
    assert model.passes == 7 and model.stopped == "pass_limit"


def test_progress_is_told_to_a_callable():
    events = []
    drumlin.fit(ROWS, 3, progress=events.append)
    whats = [event["what"] for event in events]
    assert whats[0] == "first look" and "pass" in whats and whats[-1] == "closing pass"


def test_an_error_of_the_callable_ends_the_run():
    def stop(event):
        raise RuntimeError("enough")

    with pytest.raises(RuntimeError, match="enough"):
        drumlin.fit(ROWS, 3, progress=stop)


def test_files_cut_any_way(tmp_path):
    for count in (1, 3):
        folder = tmp_path / str(count)
        folder.mkdir()
        for at, part in enumerate(np.array_split(ROWS, count)):
            pq.write_table(pa.table({"a": part[:, 0], "b": part[:, 1]}), folder / f"{at}.parquet", row_group_size=77)
    models = [drumlin.fit(tmp_path / str(count), 3, columns=["a", "b"]) for count in (1, 3)]
    assert models[0].checksum == models[1].checksum == drumlin.fit(ROWS, 3, columns=["a", "b"]).checksum


def test_sample_size_never_depends_on_the_machine():
    assert first_pass.sample_size(1, 2) == 20_000
    assert first_pass.sample_size(50, 2) == 100_000
    assert first_pass.sample_size(5000, 2) == 200_000
    assert first_pass.sample_size(1, 10_000) == (96 << 20) // 80_000
    assert first_pass.sample_size(60_000, 100) == 240_000


def test_distinct_rows():
    values = np.array([[0.0, 1.0], [-0.0, 1.0], [2.0, 1.0], [3.0, 3.0]])
    assert first_pass.distinct_rows(values, np.array([1.0, 1.0, 1.0, 0.0]), 10) == 2
    assert first_pass.distinct_rows(values, np.ones(4), 2) == 2
    many = np.repeat(np.arange(7.0), 1000)[:, None]
    assert first_pass.distinct_rows(many, np.ones(7000), 20) == 7


def test_order_by_weight_breaks_ties_by_the_means():
    mixture = _core.Mixture(
        np.array([0.25, 0.25, 0.25, 0.25]),
        np.array([[2.0, 0.0], [1.0, 5.0], [1.0, 4.0], [0.0, 9.0]]),
        np.ones(4),
        "spherical",
    )
    assert em.order_by_weight(mixture) == [3, 2, 1, 0]


class TestInterrupt:
    """Ctrl-C, as a KeyboardInterrupt that comes while a pass runs."""

    @staticmethod
    def fit(what: str, number: int | None, **options: object) -> drumlin.Model:
        def interrupt(event: dict) -> None:
            if event["what"] == what and event["passes"] == number and event["rows"]:
                raise KeyboardInterrupt

        return drumlin.fit(ROWS, 2, tries=2, tolerance=0.0, pass_limit=6, progress=interrupt, **options)

    def test_the_best_so_far_is_handed_back_with_its_own_log_likelihood(self, tmp_path):
        model = self.fit("pass", 4, on_interrupt="best")
        assert (model.stopped, model.passes, model.icl) == ("interrupt", 3, None)
        assert "Interrupted after 3 passes" in model.notes[-1]
        assert model.log_likelihood == model.trace[-1]["log_likelihood"]
        assert model.log_likelihood == pytest.approx(float(model.log_density(ROWS).sum()), rel=1e-12)
        again = drumlin.load(model.save(tmp_path / "m.drumlin"))
        assert again.checksum == model.checksum and again.icl is None
        assert drumlin.fit(ROWS, again, progress=False).log_likelihood >= model.log_likelihood

    def test_also_during_the_closing_pass(self):
        model = self.fit("closing pass", None, on_interrupt="best")
        assert (model.stopped, model.passes) == ("interrupt", 6)
        assert model.log_likelihood == pytest.approx(float(model.log_density(ROWS).sum()), rel=1e-12)

    @pytest.mark.parametrize("options", [{}, {"on_interrupt": "stop"}])
    def test_it_comes_through_otherwise(self, options):
        with pytest.raises(KeyboardInterrupt):
            self.fit("pass", 4, **options)

    def test_and_before_there_is_anything_to_hand_back(self):
        with pytest.raises(KeyboardInterrupt):
            self.fit("first look", None, on_interrupt="best")
