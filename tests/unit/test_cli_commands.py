"""The commands on real files: the same answers as the functions, on standard output; notes on standard error."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin.cli.main import run
from drumlin.cli.name import read_names
from drumlin.demo.generate import FITTED, Depot, generate

OPTIONS = ["--columns", ",".join(FITTED), "--missing-codes", "dwell_s=-9999", "--missing", "complete-rows"]
Captured = pytest.CaptureFixture[str]


@pytest.fixture(scope="module")
def depot(tmp_path_factory: pytest.TempPathFactory) -> Depot:
    return generate(tmp_path_factory.mktemp("depot"), 12_000, seed=1)


@pytest.fixture(scope="module")
def scans(depot: Depot) -> str:
    return str(depot.scans)


@pytest.fixture(scope="module")
def model(scans: str, tmp_path_factory: pytest.TempPathFactory) -> str:
    path = str(tmp_path_factory.mktemp("model") / "m.drumlin")
    assert run(["fit", scans, "--components", "7", "--model", path, *OPTIONS, "--quiet"]) == 0
    return path


def answer(capsys: Captured, *arguments: str) -> Any:
    """Run a command with --json and return what it wrote."""
    assert run([*arguments, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def test_profile_ends_with_lines_that_work_as_they_are(scans: str, tmp_path: Path, capsys: Captured) -> None:
    assert run(["profile", scans]) == 0
    shown = capsys.readouterr()
    lines = shown.out.splitlines()
    assert "rows are exactly -9999" in shown.out and lines[-2].strip().startswith("columns=[")
    target = str(tmp_path / "m.drumlin")
    assert run(["fit", scans, "--components", "2", "--model", target, *lines[-1].split()]) == 0
    options = eval(f"dict({lines[-2].strip()})")
    again = drumlin.fit(scans, 2, progress=False, **options)
    assert again.checksum == drumlin.load(target).checksum


def test_profile_as_json_is_the_functions_answer(scans: str, capsys: Captured) -> None:
    found = answer(capsys, "profile", scans, "--columns", "dwell_s,weight_kg", "--where", "weight_kg > 1")
    expected = drumlin.profile(scans, columns=["dwell_s", "weight_kg"], where="weight_kg > 1", progress=False)
    assert found == json.loads(json.dumps(expected.to_dict()))


def test_fit_equals_the_function(scans: str, model: str) -> None:
    expected = drumlin.fit(
        scans,
        7,
        columns=FITTED,
        missing_codes={"dwell_s": [-9999]},
        missing="complete-rows",
        progress=False,
    )
    assert drumlin.load(model).checksum == expected.checksum


def test_fit_shows_cards_on_standard_output_and_notes_on_standard_error(
    scans: str, tmp_path: Path, capsys: Captured
) -> None:
    target = str(tmp_path / "m.drumlin")
    arguments = ["fit", scans, "--components", "2", "--model", target, *OPTIONS]
    assert run(arguments) == 0
    shown = capsys.readouterr()
    assert "Typical range per column" in shown.out and "note:" not in shown.out
    assert "were left out because of gaps" in shown.err and f"model written to {target}" in shown.err
    assert run(arguments) == 1
    assert "exists" in capsys.readouterr().err
    assert run([*arguments, "--replace", "--quiet"]) == 0
    assert capsys.readouterr().err == ""


def test_fit_from_several_paths_and_from_a_model(depot: Depot, model: str, tmp_path: Path, capsys: Captured) -> None:
    target = str(tmp_path / "m.drumlin")
    paths = [str(path) for path in depot.files]
    flags = ["--missing-codes", "dwell_s=-9999", "--missing", "complete-rows", "--pass-limit", "2", "--pooled"]
    found = answer(capsys, "fit", *paths, "--components", model, "--model", target, *flags)
    assert found["pooled"] is True and found["passes"] <= 2 and len(found["components"]) == 7
    assert found["columns"] == list(FITTED)


def test_show_explains_the_model(model: str, capsys: Captured) -> None:
    assert run(["show", "--model", model]) == 0
    text = capsys.readouterr().out
    loaded = drumlin.load(model)
    assert loaded.checksum in text and "note: " in text and "What sets each apart" in text
    found = answer(capsys, "show", "--model", model)
    assert found["checksum"] == loaded.checksum and found["log_likelihood"] == loaded.log_likelihood
    assert found["means"] == loaded.mixture.means.tolist() and found["record"]["options"]


def test_name_writes_a_named_model(model: str, tmp_path: Path, capsys: Captured) -> None:
    target = str(tmp_path / "named.drumlin")
    assert run(["name", "--model", model, "--names", "0=small boxes,3=cartons, big", "--to", target]) == 0
    assert "small boxes" in capsys.readouterr().out
    assert drumlin.load(target).names == {0: "small boxes", 3: "cartons, big"}
    assert run(["name", "--model", target, "--names", "3=", "--replace"]) == 0
    assert drumlin.load(target).names == {0: "small boxes"}
    capsys.readouterr()
    assert run(["name", "--model", target, "--names", "1=x", "--to", target]) == 1
    assert run(["name", "--model", target, "--names", "99=x", "--replace"]) == 2
    assert "99" in capsys.readouterr().err
    assert drumlin.load(target).names == {0: "small boxes"}


@pytest.mark.parametrize("text", ["", "boxes", "a=boxes", "0=x,0=y", "0=x,,y,1"])
def test_names_that_cannot_be_read(text: str) -> None:
    if text == "0=x,,y,1":
        assert read_names(text) == {0: "x,,y,1"}
        return
    with pytest.raises(drumlin.OptionError, match="names"):
        read_names(text)


def test_predict_writes_a_file_and_sums_up(scans: str, model: str, tmp_path: Path, capsys: Captured) -> None:
    target = tmp_path / "grouped.parquet"
    found = answer(capsys, "predict", scans, "--model", model, "--to", str(target), "--key", "parcel")
    table = pq.read_table(target)
    assert found["rows"] == table.num_rows == 12_000
    assert {"parcel", "component", "responsibility", "runner_up", "log_density"} <= set(table.schema.names)
    assert found["incomplete"] == table["component"].null_count
    assert run(["predict", scans, "--model", model, "--to", str(target)]) == 1
    assert "exists" in capsys.readouterr().err
    assert run(["predict", scans, "--model", model, "--to", str(target), "--replace", "--prefix", "kind_"]) == 0
    assert "kind_component" in pq.read_table(target).schema.names


def test_predict_without_a_target_is_an_arrow_stream(scans: str, model: str) -> None:
    arguments = ["predict", scans, "--model", model, "--carry", "parcel", "--quiet"]
    done = subprocess.run([sys.executable, "-m", "drumlin.cli.main", *arguments], capture_output=True, check=True)
    table = pa.ipc.open_stream(done.stdout).read_all()
    assert done.stderr == b"" and table.num_rows == 12_000
    assert table.schema.names == ["parcel", "component", "responsibility", "runner_up", "log_density"]


def test_predict_never_writes_binary_to_a_terminal(
    scans: str, model: str, monkeypatch: pytest.MonkeyPatch, capsys: Captured
) -> None:
    monkeypatch.setattr(sys.stdout, "isatty", lambda: True)
    assert run(["predict", scans, "--model", model]) == 2
    assert "terminal" in capsys.readouterr().err


def test_exit_codes_of_real_faults(scans: str, model: str, tmp_path: Path, capsys: Captured) -> None:
    target = str(tmp_path / "m.drumlin")
    assert run(["profile", str(tmp_path / "nowhere.parquet")]) == 1
    assert run(["fit", scans, "--components", "2", "--model", target, "--columns", "lenght_cm"]) == 4
    assert "length_cm" in capsys.readouterr().err
    assert run(["fit", scans, "--components", "2", "--model", target, "--columns", "scanner"]) == 4
    assert run(["fit", scans, "--components", "2", "--model", target]) == 2
    assert "columns=[" in capsys.readouterr().err
    damaged = tmp_path / "damaged.drumlin"
    damaged.write_bytes(Path(model).read_bytes()[:-9])
    assert run(["show", "--model", str(damaged)]) == 5
    assert run(["predict", scans, "--model", str(damaged), "--to", str(tmp_path / "x.parquet")]) == 5
    assert run(["fit", scans, "--components", "2", "--model", str(tmp_path / "no" / "m.drumlin"), *OPTIONS]) == 1
    assert [path.name for path in tmp_path.iterdir()] == ["damaged.drumlin"]


def test_the_readers_own_table_goes_through_the_three_commands(tmp_path: Path, capsys: Captured) -> None:
    random = np.random.default_rng(2)
    rows = 4000
    flow = random.normal(10.0, 1.0, rows) + 12.0 * (random.random(rows) < 0.4)
    heat = random.normal(60.0, 3.0, rows)
    heat[::200] = -9999.0
    table = pa.table(
        {
            "reading_id": np.arange(rows),
            "at": pa.array(np.arange(rows).astype("datetime64[ms]")),
            "site": ["north", "south"] * (rows // 2),
            "flow": pa.array(flow, mask=random.random(rows) < 0.02),
            "heat": heat,
        }
    )
    source, model, grouped = (str(tmp_path / name) for name in ("own.parquet", "own.drumlin", "grouped.parquet"))
    pq.write_table(table, source)
    assert run(["profile", source]) == 0
    flags = capsys.readouterr().out.splitlines()[-1].split()
    assert run(["fit", source, "--components", "2", *flags, "--model", model]) == 0
    assert run(["predict", source, "--model", model, "--to", grouped]) == 0
    result = pq.read_table(grouped)
    assert result.num_rows == rows and result.select(table.schema.names).equals(table)
    assert drumlin.load(model).mixture.weights[0] == pytest.approx(0.6, abs=0.03)


def test_the_demo_holds_its_own_checks(tmp_path: Path, capsys: Captured) -> None:
    folder = tmp_path / "demo"
    assert run(["demo", "--rows", "40000", "--dir", str(folder), "--quiet"]) == 0
    shown = capsys.readouterr().out
    assert "rows are exactly -9999" in shown and "equal after all" in shown and "all checks passed" in shown
    assert [line.split()[1] for line in shown.splitlines()[-3:]] == ["profile", "fit", "predict"]
    assert len(shown.splitlines()) <= 50
    assert {path.name for path in folder.iterdir()} == {"scans", "truth.parquet", "parcels.drumlin", "grouped.parquet"}
    assert run(["demo", "--rows", "40000", "--dir", str(folder)]) == 1
    assert "not an empty folder" in capsys.readouterr().err


def test_the_demo_fails_when_the_kinds_are_not_found(monkeypatch: pytest.MonkeyPatch, capsys: Captured) -> None:
    monkeypatch.setattr("drumlin.demo.run.WANTED", 1.5)
    assert run(["demo", "--rows", "20000", "--json"]) == 1
    found = json.loads(capsys.readouterr().out)
    assert found["passed"] is False and found["same_bits"]["equal"] is True
    assert found["truth"]["ratio"] > 0.95


def test_a_dry_run_tells_what_a_fit_would_cost_and_writes_nothing(
    scans: str, tmp_path: Path, capsys: Captured, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert run(["fit", scans, "--components", "3", "--dry-run", "--memory", "1 GiB", *OPTIONS]) == 0
    shown = capsys.readouterr()
    assert "all rows are kept in memory" in shown.out and "a pass (measured on" in shown.out
    found = answer(capsys, "fit", scans, "--components", "3", "--dry-run", "--memory", "1 GiB", *OPTIONS)
    assert found["rows"] == found["kept_rows"] == 12_000 and found["ceiling_bytes"] == 1 << 30
    assert list(tmp_path.iterdir()) == []
    assert run(["fit", scans, "--components", "3", *OPTIONS]) == 2
    assert "--model" in capsys.readouterr().err
