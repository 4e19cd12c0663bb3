"""The examples of the README run as they stand."""

from __future__ import annotations

import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

import drumlin
from drumlin.demo.generate import generate

README = (Path(__file__).parents[2] / "README.md").read_text(encoding="utf-8")


def example(language: str) -> str:
    """The first block of a language: the whole job. The others are run by tests/contract/test_examples.py."""
    return re.findall(rf"```{language}\n(.*?)```", README, re.DOTALL)[0]


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    generate(tmp_path, 12_000, seed=1)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_the_lines_of_python(folder: Path) -> None:
    exec(compile(example("python"), "README.md", "exec"), {})
    assert drumlin.load("parcels.drumlin").names == {0: "small boxes", 1: "flat packets"}
    assert (folder / "grouped.parquet").exists()


def test_the_lines_of_shell(folder: Path) -> None:
    lines = example("sh").strip().splitlines()
    assert len(lines) == 5
    for line in lines:
        words = shlex.split(line)
        assert words[0] == "drumlin"
        done = subprocess.run([sys.executable, "-m", "drumlin.cli.main", *words[1:]], capture_output=True, text=True)
        assert done.returncode == 0, (line, done.stderr)
    assert drumlin.load("parcels.drumlin").names == {0: "small boxes", 1: "flat packets"}
    assert (folder / "grouped.parquet").exists()
