"""Models, mixtures and measures pickle through bytes: the same in another process, and only those bytes are read."""

from __future__ import annotations

import copy
import pickle
import pickletools
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import datasets
import drumlin
from drumlin import _core, engines
from reference import partition_start
from tools import core_mixture, measure, plain_scaling

ROWS = datasets.hills(4_001, components=3, columns=2, seed=5)
THETA = partition_start(ROWS, (np.argsort(np.argsort(ROWS[:, 0])) * 3 // len(ROWS)).astype(int))
SCALING = plain_scaling(ROWS)

MEASURES: dict[str, _core.Measure] = {
    "em": _core.EmStatistics(core_mixture(THETA), SCALING),
    "em_single": _core.EmStatistics(core_mixture(THETA), SCALING, single=True),
    "scores": _core.Scores(core_mixture(THETA), SCALING, "fit"),
    "summary": _core.ColumnSummary(2),
    "sample": _core.Sample(2, 500, 3),
}

READ = """
import pickle, sys
values = pickle.load(open(sys.argv[1], "rb"))
sys.stdout.buffer.write(b"".join(value.to_bytes() for value in values))
"""


def filled(name: str) -> _core.Measure:
    (result,) = measure(ROWS, [MEASURES[name]])
    return result


def test_every_measure_is_looked_at() -> None:
    assert {type(one) for one in MEASURES.values()} == set(_core.Measure.__subclasses__())


@pytest.mark.parametrize("name", MEASURES)
@pytest.mark.parametrize("protocol", [2, pickle.HIGHEST_PROTOCOL])
def test_measures(name: str, protocol: int) -> None:
    whole = filled(name)
    again = pickle.loads(pickle.dumps(whole, protocol))
    assert type(again) is type(whole) and again.to_bytes() == whole.to_bytes()
    assert copy.deepcopy(whole).to_bytes() == whole.to_bytes()


def test_measures_still_merge_after_the_journey() -> None:
    parts = [measure(rows, [MEASURES["summary"]])[0] for rows in (ROWS[:2000], ROWS[2000:])]
    tree, other = _core.Tree(), _core.Tree()
    for part in parts:
        tree.push([part])
        other.push([pickle.loads(pickle.dumps(part))])
    assert tree.finish()[0].to_bytes() == other.finish()[0].to_bytes()


def called(data: bytes) -> set[str]:
    """The names that a pickle looks up, from its opcodes."""
    found, texts = set(), []
    for opcode, argument, _ in pickletools.genops(data):
        if opcode.name == "GLOBAL":
            found.add(str(argument).replace(" ", "."))
        elif "UNICODE" in opcode.name:
            texts.append(str(argument))
        elif opcode.name == "STACK_GLOBAL":
            found.add(".".join(texts[-2:]))
    return found


def test_only_bytes_are_read(tmp_path: Path) -> None:
    model = drumlin.fit(ROWS, 2, pass_limit=2, tries=1)
    assert called(pickle.dumps(filled("em"))) == {"drumlin.engines.pickling.measure_from_bytes"}
    assert called(pickle.dumps(model)) == {"drumlin.modelfile.from_bytes"}
    model.save(tmp_path / "m.drumlin")
    assert (tmp_path / "m.drumlin").read_bytes() in pickle.dumps(model)


def test_in_another_process(tmp_path: Path) -> None:
    values: list[Any] = [drumlin.fit(ROWS, 2, pass_limit=2, tries=1), *(filled(name) for name in MEASURES)]
    (tmp_path / "values").write_bytes(pickle.dumps(values))
    done = subprocess.run([sys.executable, "-c", READ, str(tmp_path / "values")], capture_output=True, check=True)
    assert done.stdout == b"".join(value.to_bytes() for value in values)


def test_a_damaged_pickle_of_a_measure_is_refused() -> None:
    data = filled("summary").to_bytes()
    for wrong in (b"", data[: len(data) // 2], b"\xff" * 40):
        with pytest.raises(drumlin.DrumlinError):
            engines.measure_from_bytes(wrong)


def test_a_mixture_keeps_its_bits_in_another_process(tmp_path: Path) -> None:
    mixture = drumlin.fit(ROWS, 3, pass_limit=2, tries=1).mixture
    (tmp_path / "mixture").write_bytes(pickle.dumps(mixture))
    code = (
        "import pickle, sys, numpy as np\nmixture = pickle.load(open(sys.argv[1], 'rb'))\n"
        "sys.stdout.buffer.write(mixture.log_density(np.linspace(0, 9, 40).reshape(20, 2)).tobytes())"
    )
    done = subprocess.run([sys.executable, "-c", code, str(tmp_path / "mixture")], capture_output=True, check=True)
    assert done.stdout == mixture.log_density(np.linspace(0, 9, 40).reshape(20, 2)).tobytes()
