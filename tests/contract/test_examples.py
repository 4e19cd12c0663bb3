"""The examples of the README and of every docstring run and print what they say."""

import doctest
import importlib
import os
import pkgutil
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import drumlin

ROOT = Path(drumlin.__file__).parents[2]
README = ROOT / "README.md"
FLAGS = doctest.ELLIPSIS | doctest.NORMALIZE_WHITESPACE
ENTRY_POINTS = ("__main__",)


def module_names() -> list[str]:
    found = pkgutil.walk_packages(drumlin.__path__, "drumlin.")
    return ["drumlin"] + [one.name for one in found if not one.name.endswith(ENTRY_POINTS + ("_core",))]


def test_there_are_modules_and_examples():
    assert len(module_names()) > 15
    finder = doctest.DocTestFinder(exclude_empty=True)
    examples = sum(
        len(test.examples) for name in module_names() for test in finder.find(importlib.import_module(name), name)
    )
    assert examples > 30


@pytest.mark.parametrize("name", module_names())
def test_docstrings(name, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    result = doctest.testmod(importlib.import_module(name), optionflags=FLAGS)
    assert result.failed == 0


@pytest.mark.parametrize("name", [one for one in drumlin.__all__ if one != "__version__" and not one.endswith("Error")])
def test_public_names_have_a_runnable_example(name):
    value = getattr(drumlin, name)
    found = doctest.DocTestFinder(recurse=False).find(value, name, globs={})
    assert sum(len(test.examples) for test in found) > 0


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```", README.read_text(encoding="utf-8"), re.DOTALL | re.MULTILINE)


@pytest.fixture(scope="module")
def scans(tmp_path_factory) -> Path:
    """The README's table: parcel scans of the demo."""
    from drumlin.demo.generate import generate

    folder = tmp_path_factory.mktemp("readme")
    generate(folder, 20_000, seed=1)
    return folder / "scans"


@pytest.mark.parametrize("language", ["python", "sh"])
def test_readme(language, scans, tmp_path):
    """The blocks of a language in order, in one folder beside the scans, as a reader would run them."""
    shutil.copytree(scans, tmp_path / "scans")
    found = blocks(language)
    assert found, f"the README has no {language} block"
    environment = os.environ | {"PATH": f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}"}
    for block in found:
        if language == "python":
            command = [sys.executable, "-W", "error", "-c", block]
        else:
            command = ["bash", "-euo", "pipefail", "-c", block]
        done = subprocess.run(command, cwd=tmp_path, env=environment, capture_output=True, text=True, check=False)
        assert done.returncode == 0, f"{block}\n{done.stdout}{done.stderr}"
        assert done.stdout and "Traceback" not in done.stderr
    assert (tmp_path / "parcels.drumlin").is_file() and (tmp_path / "grouped.parquet").exists()
    assert drumlin.load(tmp_path / "parcels.drumlin").names == {0: "small boxes", 1: "flat packets"}


def test_the_readme_names_only_options_that_exist():
    from drumlin import options

    known = {flag.flag for verb in options.VERBS for flag in options.flags(verb)}
    named = set(re.findall(r"(?<![\w-])--[a-z][a-z-]+", README.read_text(encoding="utf-8")))
    extra = {"--dry-run", "--sql", "--polars", "--scorer", "--table"}
    extra |= {"--components", "--model", "--to", "--json", "--help", "--rows", "--names", "--version", "--quiet"}
    assert named, "the README shows no flags"
    assert named <= known | extra, named - known - extra
