"""The examples of the README and of every docstring run and print what they say."""

import doctest
import importlib
import os
import pkgutil
import re
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


@pytest.mark.timeout(120)
def test_readme(tmp_path):
    """All Python and shell blocks in order, in one folder, as a reader would run them (`make` lines left out)."""
    text = README.read_text(encoding="utf-8")
    found = re.findall(r"^```(python|sh|shell|bash|console)\n(.*?)^```", text, re.DOTALL | re.MULTILINE)
    kinds = [kind for kind, _ in found]
    assert "python" in kinds and len(kinds) > kinds.count("python"), kinds
    environment = os.environ | {"PATH": f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}"}
    ran = 0
    for kind, block in found:
        if kind == "python":
            command = [sys.executable, "-c", block]
        else:
            lines = [line.removeprefix("$ ") for line in block.splitlines()]
            lines = [line for line in lines if not re.match(r"(make|git|cd|pip|\.?/?.*pip) ", line)]
            command = ["bash", "-euo", "pipefail", "-c", "\n".join(lines)]
            if not any(line and not line.startswith("#") for line in lines):
                continue
        done = subprocess.run(command, cwd=tmp_path, env=environment, capture_output=True, text=True, check=False)
        assert done.returncode == 0, f"{block}\n{done.stdout}{done.stderr}"
        ran += 1
    assert ran >= 2


def test_the_readme_names_only_options_that_exist():
    from drumlin import options

    known = {flag.flag for verb in options.VERBS for flag in options.flags(verb)}
    named = set(re.findall(r"(?<![\w-])--[a-z][a-z-]+", "\n".join(blocks("sh") + blocks("bash") + blocks("console"))))
    extra = {"--components", "--model", "--to", "--json", "--help", "--rows", "--names", "--version"}
    assert named, "the README shows no flags"
    assert named <= known | extra, named - known - extra
