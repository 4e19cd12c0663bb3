"""A model as text: what the small programs and the JSON say is what the model says."""

import json
import runpy
import subprocess
import sys
from pathlib import Path

import numpy as np
import polars as pl
import pytest

import drumlin
from drumlin.cli.main import run
from drumlin.exporting.sources import json_text, polars_source, scorer_source

COLUMNS = ["length cm", 'the "net" weight']


@pytest.fixture(scope="module")
def rows() -> np.ndarray:
    random = np.random.default_rng(9)
    values = random.normal(size=(2_000, 2)) @ [[2.0, 0.5], [0.0, 1.0]] + np.repeat(
        [[0.0, 0.0], [9.0, 4.0]], 1_000, axis=0
    )
    values[::50] *= 1e4
    values[7, 0] = values[9, 1] = np.nan
    values[::61, 0] = -99.0
    return values


@pytest.fixture(scope="module")
def model(rows: np.ndarray) -> drumlin.Model:
    return drumlin.fit(
        rows, 2, columns=COLUMNS, missing="complete-rows", missing_codes={COLUMNS[0]: -99}, progress=False
    ).with_names({0: "small"})


@pytest.fixture(scope="module")
def path(model: drumlin.Model, tmp_path_factory: pytest.TempPathFactory) -> str:
    return model.save(tmp_path_factory.mktemp("model") / "m.drumlin")


@pytest.mark.parametrize("structure", ["full", "diagonal"])
def test_the_scorer(rows: np.ndarray, model: drumlin.Model, tmp_path: Path, structure: str) -> None:
    if structure == "diagonal":
        options = {"missing": "complete-rows", "missing_codes": {COLUMNS[0]: -99}, "progress": False}
        model = drumlin.fit(rows, 3, columns=COLUMNS, structure=structure, **options)
    (tmp_path / "scorer.py").write_text(scorer_source(model.mixture, model._codes()))
    found = runpy.run_path(str(tmp_path / "scorer.py"))
    np.testing.assert_allclose(found["log_density"](rows), model.log_density(rows), rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(found["responsibilities"](rows), model.responsibilities(rows), atol=1e-9)
    np.testing.assert_array_equal(found["assign"](rows), model.assign(rows))
    with pytest.raises(ValueError, match="2 columns: length cm"):
        found["assign"](rows[:, :1])


def test_the_scorer_needs_numpy_alone(model: drumlin.Model, tmp_path: Path) -> None:
    (tmp_path / "scorer.py").write_text(scorer_source(model.mixture))
    code = "import sys, scorer; print(scorer.assign([[0.0, 0.0]])[0], {'drumlin', 'pyarrow'} & set(sys.modules))"
    done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True, check=True)
    assert done.stdout.split() == [str(model.assign(np.zeros((1, 2)))[0]), "set()"]


def test_the_polars_source_makes_the_same_expression(rows: np.ndarray, model: drumlin.Model, tmp_path: Path) -> None:
    (tmp_path / "groups.py").write_text(polars_source(model.mixture, model._codes()))
    code = "import sys, groups; groups.expression(); print('drumlin' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"
    expression = runpy.run_path(str(tmp_path / "groups.py"))["expression"]
    frame = pl.DataFrame(rows, schema=COLUMNS)
    assert frame.select(expression()).equals(frame.select(model.as_polars()))
    assert frame.select(expression("new_")).columns == ["new_drumlin"]


def test_json_reads_back_exactly(model: drumlin.Model) -> None:
    found = json.loads(json_text(model.mixture, model._codes(), model.names))
    assert found["columns"] == COLUMNS and found["missing_codes"] == {COLUMNS[0]: [-99.0]}
    assert [one["name"] for one in found["components"]] == ["small", None]
    listed = {key: [one[key] for one in found["components"]] for key in ("id", "weight", "mean", "covariance")}
    again = drumlin.Mixture(listed["weight"], listed["mean"], listed["covariance"], found["columns"], ids=listed["id"])
    np.testing.assert_array_equal(again.means, model.mixture.means)
    np.testing.assert_array_equal(again.covariances, model.mixture.covariances)


@pytest.mark.parametrize("form", ["--sql", "--polars", "--scorer", "--json"])
def test_the_command_writes_text(path: str, tmp_path: Path, capsys: pytest.CaptureFixture[str], form: str) -> None:
    assert run(["export", "--model", path, form]) == 0
    shown = capsys.readouterr().out
    target = tmp_path / "out.txt"
    assert run(["export", "--model", path, form, "--to", str(target), "--quiet"]) == 0
    assert target.read_text() == shown and len(shown) > 300
    assert run(["export", "--model", path, form, "--to", str(target)]) == 1
    assert "exists" in capsys.readouterr().err
    assert run(["export", "--model", path, form, "--to", str(target), "--replace", "--quiet"]) == 0
    assert [entry.name for entry in tmp_path.iterdir()] == ["out.txt"]


def test_the_command_names_what_the_query_reads(path: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["export", "--model", path, "--sql", "--table", "the scans"]) == 0
    assert 'FROM "the scans"' in capsys.readouterr().out
    assert run(["export", "--model", path, "--sql", "--files", "a.parquet", "--files", "b/*.parquet"]) == 0
    assert "FROM read_parquet(['a.parquet', 'b/*.parquet'])" in capsys.readouterr().out


@pytest.mark.parametrize(
    "flags",
    [[], ["--json", "--table", "t"], ["--sql", "--table", "t", "--files", "f"], ["--sql", "--replace"], ["--csv"]],
)
def test_usage(path: str, flags: list[str]) -> None:
    assert run(["export", "--model", path, *flags]) == 2
