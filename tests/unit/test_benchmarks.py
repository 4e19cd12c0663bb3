"""The benchmark programme: its cases, verdicts, records, and a run of each part on a few rows."""

from __future__ import annotations

import csv
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import cases
import growth
import passes
import peak
import record
import run
import single
import turns
from drumlin import _core
from lines import Figure, Line, text

EVERYTHING = cases.load()
PASSES = EVERYTHING["pass"]
FAST = turns.Settings(rounds=1, rest=0.0, size=8)
SMALL = {"name": "small", "rows": 4_000, "columns": 3, "components": 4, "structure": "full", "spacing": 0.7}


@pytest.fixture(scope="module")
def small() -> dict[str, Any]:
    return {**SMALL, "log_likelihood": passes.answer(SMALL), "required": 1e-9, "aim": 1e9, "single_required": 1e-9}


@pytest.mark.parametrize("case", PASSES + EVERYTHING["growth"]["cases"], ids=lambda case: case["name"])
def test_a_case_is_complete(case: dict[str, Any]) -> None:
    known = {"name", "rows", "columns", "components", "structure", "spacing", "log_likelihood"}
    known |= {"required", "aim", "share_required", "share_aim", "single_required", "quick"}
    assert set(case) <= known
    assert {"name", "rows", "columns", "components", "structure", "spacing", "log_likelihood"} <= set(case)
    assert case["structure"] in ("full", "diagonal")
    assert math.isfinite(case["log_likelihood"]) and case["log_likelihood"] < 0


@pytest.mark.parametrize("case", PASSES, ids=lambda case: case["name"])
def test_what_is_wanted_of_a_pass(case: dict[str, Any]) -> None:
    assert 0 < case["required"] < case["aim"]
    assert ("share_required" in case) == ("share_aim" in case)
    assert case.get("share_required", 0) <= case.get("share_aim", 0) <= 1
    assert ("single_required" in case) == case["name"].startswith("overlapping")


def test_cases_are_those_that_were_asked_for() -> None:
    sizes = {(case["name"], case["rows"], case["columns"], case["components"]) for case in PASSES}
    overlapping = [(10**6, 2, 8), (10**6, 4, 8), (10**6, 8, 16), (500_000, 16, 16), (200_000, 32, 32)]
    overlapping += [(100_000, 64, 16), (50_000, 128, 8)]
    wanted = {(f"overlapping {d} x {k}", n, d, k) for n, d, k in overlapping}
    wanted |= {(f"separated {d} x {k}", n, d, k) for n, d, k in overlapping if d >= 8}
    wanted |= {(f"{kind} diagonal 32 x 64", 500_000, 32, 64) for kind in ("overlapping", "separated")}
    assert sizes == wanted
    assert all(case["spacing"] == 4.0 for case in PASSES if case["name"].startswith("separated"))
    assert 3 <= sum(case.get("quick", False) for case in PASSES) <= 4
    names = [case["name"] for case in PASSES + EVERYTHING["growth"]["cases"]]
    assert len(set(names)) == len(names)


def test_growth_refers_to_its_own_cases() -> None:
    growing = EVERYTHING["growth"]
    assert growing["cases"][growing["rows_case"]]["components"] == 16
    assert growing["components_from"] in [case["components"] for case in growing["cases"]]
    assert EVERYTHING["scoring"]["required"] < EVERYTHING["scoring"]["aim"]


def test_rows_are_the_same_everywhere() -> None:
    """The digest was noted on the machine that gave the answers; no matrix product takes part in the rows."""
    assert EVERYTHING["stream"]["numpy"] == np.__version__, "answers are kept for the pinned NumPy: renew them"
    cases.check_stream(EVERYTHING["stream"])
    with pytest.raises(SystemExit, match="other rows"):
        cases.check_stream({"numpy": "0.1", "digest": "0" * 16})


@pytest.mark.parametrize("structure", ["full", "diagonal"])
def test_rows_follow_the_mixture(structure: str) -> None:
    data = cases.generate({**SMALL, "rows": 40_000, "structure": structure})
    between = np.cov(data.means.T, bias=True)
    within = data.covariances.mean(axis=0)
    assert np.abs(data.rows.mean(axis=0) - data.means.mean(axis=0)).max() < 0.03
    assert np.abs(np.cov(data.rows.T) - between - within).max() < 0.06
    off_diagonal = data.covariances[:, ~np.eye(3, dtype=bool)]
    assert (off_diagonal == 0).all() == (structure == "diagonal")


def test_mixing_is_a_matrix_product() -> None:
    rng = np.random.default_rng(1)
    rows, factor = rng.normal(size=(50, 7)), rng.normal(size=(7, 7))
    assert np.allclose(cases.mixed(rows, factor), rows @ factor.T, rtol=0, atol=1e-13)


def test_a_wrong_answer_ends_the_run(small: dict[str, Any]) -> None:
    wrong = {**small, "log_likelihood": small["log_likelihood"] * (1 + 1e-9)}
    with pytest.raises(SystemExit, match="small: log-likelihood per row .* expected is") as stop:
        passes.measure(wrong, FAST)
    assert isinstance(stop.value.code, str)  # so that the exit status is 1
    with pytest.raises(SystemExit, match="expected is"):
        growth.by_threads({"cases": [wrong], "rows_case": 0, "threads_required": 1}, FAST)


@pytest.mark.parametrize(
    ("figure", "verdict", "wanted"),
    [
        (Figure(62.0, "", 50, 62), "aim", "50 / 62"),
        (Figure(61.9, "", 50, 62), "required", "50 / 62"),
        (Figure(50.0, "", 50, 62), "required", "50 / 62"),
        (Figure(49.9, "", 50, 62), "below (50)", "50 / 62"),
        (Figure(3.0, "", 1.8), "required", "1.8"),
        (Figure(99.0, "", 100, bound="at most"), "required", "<= 100"),
        (Figure(101.0, "", 100, 80, bound="at most"), "below (100)", "<= 100 / 80"),
        (Figure(79.0, "", 100, 80, bound="at most"), "aim", "<= 100 / 80"),
        (Figure(1.14, "", 1.15, bound="at most"), "required", "<= 1.15"),
        (Figure(1.16, "", 1.15, bound="at most"), "below (1.15)", "<= 1.15"),
        (Figure(7.0), "", ""),
    ],
)
def test_verdict_of_a_figure(figure: Figure, verdict: str, wanted: str) -> None:
    assert figure.verdict() == verdict
    assert figure.wanted() == wanted


@pytest.mark.parametrize(
    ("times", "share", "verdict"),
    [
        (70, 0.6, "aim"),
        (70, 0.48, "required"),
        (55, 0.6, "required"),
        (70, 0.4, "below (0.47)"),
        (40, 0.6, "below (50)"),
        (40, 0.4, "below (50) and below (0.47)"),
    ],
)
def test_verdict_of_a_line_is_the_worse(times: float, share: float, verdict: str) -> None:
    line = Line("a line", Figure(times, "times", 50, 62), Figure(share, "", 0.47, 0.52))
    assert line.verdict() == verdict
    assert Line("a line", Figure(times, "times", 50, 62), Figure(share, "")).verdict() == line.figure.verdict()


def test_records_are_never_written_over(tmp_path: Path) -> None:
    line = Line("a line", Figure(2.0, "times", 1, 3), seconds=0.25)
    names = []
    for _ in range(3):
        path = record.free_path("2030-01-02", tmp_path)
        record.write(path, [line, line], {"date": "2030-01-02", "load": "0.10"})
        names.append(path.name)
    assert names == ["2030-01-02-pass.csv", "2030-01-02-pass-2.csv", "2030-01-02-pass-3.csv"]
    with pytest.raises(FileExistsError):
        record.write(path, [line], {})
    first, second = csv.DictReader(path.read_text().splitlines())
    assert first == second
    assert (first["line"], first["figure"], first["verdict"], first["load"]) == ("a line", "2.0", "required", "0.10")
    assert first["peak_mb"] == ""


def test_a_turn_times_the_second_of_two_calls(monkeypatch: pytest.MonkeyPatch) -> None:
    now, calls = [0.0], []
    monkeypatch.setattr(turns.time, "perf_counter", lambda: now[0])
    monkeypatch.setattr(turns.time, "sleep", lambda seconds: calls.append(f"rest {seconds}"))

    def work() -> None:
        calls.append("call")
        now[0] += len(calls)

    assert turns.turn(work, 0.2) == 3.0
    assert calls == ["rest 0.2", "call", "call"]


def test_competitors_run_in_turn_and_the_median_counts(monkeypatch: pytest.MonkeyPatch) -> None:
    order: list[str] = []
    seconds = {"x": iter([3.0, 1.0, 2.0]), "y": iter([9.0, 9.5, 7.0])}

    def turn(work: str, rest: float) -> float:
        order.append(work)
        return next(seconds[work])

    monkeypatch.setattr(turns, "turn", turn)
    assert turns.interleave({"x": "x", "y": "y"}, turns.Settings(3)) == {"x": 2.0, "y": 9.0}
    assert order == ["x", "y"] * 3


@pytest.mark.parametrize("structure", ["full", "diagonal"])
def test_a_pass_runs(small: dict[str, Any], structure: str) -> None:
    case = {**small, "structure": structure}
    case["log_likelihood"] = passes.answer(case)
    line = passes.measure(case, FAST)
    assert line.verdict() == "required"
    assert line.log_likelihood == pytest.approx(case["log_likelihood"], rel=1e-10)
    assert line.seconds and line.share and line.gigaflops
    assert line.gigaflops == pytest.approx(passes.flops(case) / line.seconds / 1e9)


def test_useful_operations() -> None:
    sizes = {"rows": 10, "columns": 5, "components": 3}
    assert passes.flops({**sizes, "structure": "full"}) == 2 * 10 * 3 * 5 * 6
    assert passes.flops({**sizes, "structure": "diagonal"}) == 8 * 10 * 3 * 5


def test_peak_holds_the_kept_rows_and_not_the_generated_ones() -> None:
    kept = 8 * 400_000 * 4 / 1e6
    found = peak.peak({**SMALL, "rows": 400_000, "columns": 4}, 1)
    if peak.reset() == "reset":
        assert kept < found < 2 * kept + 20
    else:
        assert found >= 0


def test_all_lines_run(small: dict[str, Any], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(peak, "peak", lambda case, threads: 1.5)
    more = {**small, "components": 2}
    more["log_likelihood"] = passes.answer(more)
    growing = {
        "cases": [more, small],
        "rows_case": 1,
        "copies": [2, 3],
        "rows_most": 1e9,
        "components_from": 2,
        "components_most": 1e9,
        "threads_required": 1e-9,
    }
    streamed = {"rows": 10_000, "group": 3_000, "case": {key: small[key] for key in SMALL if key != "rows"}}
    streamed |= {"streamed_most": 1e9, "kept_most": 1e9, "predict_most": 1e9}
    everything = {"pass": [small, {**small, "quick": True}], "growth": growing, "streaming": streamed}
    for choice, passed in ((run.quick, 1), (run.complete, 2)):
        lines = list(choice(everything, FAST))
        singles = 2 if choice is run.complete and single.offered() else 0
        assert len(lines) == passed + singles + (1 if choice is run.quick else 7)
        assert {line.verdict() for line in lines} == {"required"}
        assert [line.peak_mb for line in lines[:passed]] == [1.5 if choice is run.complete else None] * passed
        assert len({text(line).index("required") for line in lines}) == 1


def test_single_is_offered_as_the_core_has_it() -> None:
    assert single.offered() == hasattr(_core.EmStatistics, "single")


def test_variables_that_hold_the_reference_back_are_refused(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("OPENBLAS_CORETYPE", "Haswell")
    monkeypatch.setattr("sys.argv", ["run.py", "--quick"])
    with pytest.raises(SystemExit) as stop:
        run.main()
    assert stop.value.code == 2
    assert "OPENBLAS_CORETYPE" in capsys.readouterr().err
