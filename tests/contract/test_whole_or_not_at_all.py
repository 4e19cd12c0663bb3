"""Targets are whole or not there: after SIGKILL at any moment, and where the disk is full."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin
from tools import run_python

KILL = """
import hashlib, json, os, random, shutil, signal, sys, time
import drumlin

rows, model_path, to, times = sys.argv[1], sys.argv[2], sys.argv[3], int(sys.argv[4])
model = drumlin.load(model_path)

def run():
    return drumlin.predict(rows, model, to, replace=True, progress=False, key="parcel")

def state():
    # the hashes of the files that are there, by name
    if not os.path.lexists(to):
        return {}
    files = [to] if os.path.isfile(to) else sorted(os.path.join(to, name) for name in os.listdir(to))
    return {name: hashlib.sha256(open(name, "rb").read()).hexdigest() for name in files}

def restore():
    if os.path.isdir(to):
        shutil.rmtree(to)
    if os.path.isdir(to + ".old"):
        shutil.copytree(to + ".old", to)
    elif os.path.isfile(to + ".old"):
        shutil.copyfile(to + ".old", to)

def kind(found):
    if found in (old, new):
        return "old" if found == old else "new"
    either = all(found[name] in (old.get(name), new.get(name)) for name in found)
    return "some of each" if either and set(found) == set(new) else "neither"

def child(work):
    pid = os.fork()
    if pid == 0:
        work()
        os._exit(0)
    return pid

def attempt(turn):
    # at a moment of the whole run, or, every other time, at one after it has begun to write
    pid = child(run)
    if turn % 2:
        time.sleep((turn + draw.random()) / times * 1.05 * took)
    else:
        while not any(f"drumlin-{pid}-" in name for name in os.listdir(os.path.dirname(to))):
            if os.waitpid(pid, os.WNOHANG)[0]:
                return False
        time.sleep(draw.random() * 0.5 * took if turn else 0.0)
    os.kill(pid, signal.SIGKILL)
    _, status = os.waitpid(pid, 0)
    return os.WIFSIGNALED(status)

old = state()
began = time.perf_counter()
assert os.waitpid(child(run), 0)[1] == 0
took = time.perf_counter() - began
new = state()
draw = random.Random(int(sys.argv[5]))
seen, killed, strays = [], 0, 0
for turn in range(times):
    restore()
    killed += attempt(turn)
    seen.append(kind(state()))
    found = [name for name in os.listdir(os.path.dirname(to)) if name.endswith(".part")]
    assert len(found) <= 1, found  # the attempt before has been swept
    strays += len(found)
run()
print(json.dumps({"seen": seen, "killed": killed, "strays": strays, "same": state() == new,
                  "names": sorted(os.listdir(os.path.dirname(to)))}))
"""

FULL = """
import resource, signal, sys
import drumlin
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, 200_000))
try:
    drumlin.predict(sys.argv[1], sys.argv[2], sys.argv[3], replace=True, progress=False)
except drumlin.TargetError as error:
    print(error)
"""


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Three files of 10,000 rows, and a model."""
    folder = tmp_path_factory.mktemp("whole")
    random = np.random.default_rng(4)
    (folder / "in").mkdir()
    for number in range(3):
        rows = {name: random.normal(30.0 * (1 + number), 5.0, 10_000) for name in ("length_cm", "width_cm")}
        pq.write_table(
            pa.table({"parcel": np.arange(10_000), **rows}), folder / "in" / f"{number}.parquet", row_group_size=5_000
        )
    columns = ["length_cm", "width_cm"]
    drumlin.fit(folder / "in", 3, columns=columns, progress=False, pass_limit=3).save(folder / "m.drumlin")
    return folder


def kill_many(place: Path, to: Path, times: int) -> dict[str, object]:
    arguments = [str(place / "in"), str(place / "m.drumlin"), str(to), str(times), "11"]
    done = subprocess.run(
        [sys.executable, "-c", KILL, *arguments], capture_output=True, text=True, timeout=280, check=False
    )
    assert done.returncode == 0, done.stderr
    found: dict[str, object] = json.loads(done.stdout)
    return found


@pytest.mark.parametrize("times", [6, pytest.param(50, marks=pytest.mark.slow)])
@pytest.mark.parametrize("to", ["grouped.parquet", "grouped", "existing"])
def test_kill_at_any_moment(place: Path, tmp_path: Path, to: str, times: int) -> None:
    """One file and a new folder are the old or the new as a whole, a folder that was there file by file."""
    inner = tmp_path / "out"
    inner.mkdir()
    if to.endswith(".parquet"):
        for name in (to, to + ".old"):
            pq.write_table(pa.table({"old": [1.0]}), inner / name)
    if to == "existing":
        for name in (to, to + ".old"):
            (inner / name).mkdir()
            for number in range(3):
                pq.write_table(pa.table({"old": [1.0]}), inner / name / f"{number}.parquet")
    found = kill_many(place, inner / to, times)
    allowed = {"old", "new"} | ({"some of each"} if to == "existing" else set())
    assert set(found["seen"]) <= allowed and found["same"]  # type: ignore[call-overload]
    assert found["killed"] and "old" in found["seen"]  # type: ignore[operator]
    assert found["strays"], "no process was killed while it wrote"
    assert found["names"] == ([to] if to == "grouped" else [to, to + ".old"])


@pytest.mark.parametrize("to", ["grouped.parquet", "grouped/"])
def test_a_full_disk(place: Path, tmp_path: Path, to: str) -> None:
    old = tmp_path / to if to.endswith(".parquet") else tmp_path / to / "1.parquet"
    old.parent.mkdir(exist_ok=True)
    old.write_bytes(b"old")
    done = run_python(
        FULL.replace("sys.argv[1]", repr(str(place / "in")))
        .replace("sys.argv[2]", repr(str(place / "m.drumlin")))
        .replace("sys.argv[3]", repr(str(tmp_path / to)))
    )
    assert done.returncode == 0 and done.stderr == ""
    assert str(tmp_path / to) in done.stdout and "cannot be written: File too large" in done.stdout
    assert old.read_bytes() == b"old"
    assert sorted(str(one.relative_to(tmp_path)) for one in tmp_path.rglob("*") if one.is_file()) == [
        str(old.relative_to(tmp_path))
    ]


def test_a_full_disk_under_a_model(place: Path, tmp_path: Path) -> None:
    (tmp_path / "m.drumlin").write_bytes(b"old")
    code = (
        "import resource, signal, drumlin\n"
        f"model = drumlin.load({str(place / 'm.drumlin')!r})\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))\n"
        f"try:\n    model.save({str(tmp_path / 'm.drumlin')!r}, replace=True)\n"
        "except drumlin.TargetError as error:\n    print(error)\n"
    )
    done = run_python(code)
    assert "m.drumlin cannot be written: File too large" in done.stdout and done.stderr == ""
    assert os.listdir(tmp_path) == ["m.drumlin"] and (tmp_path / "m.drumlin").read_bytes() == b"old"
