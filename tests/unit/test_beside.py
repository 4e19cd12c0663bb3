"""Files on the way: made, locked, renamed, and swept once nobody holds them."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from drumlin.beside import Beside, sweep

HOLD = """
import sys
from drumlin.beside import Beside
held = Beside(sys.argv[1], "grouped.parquet"), Beside(sys.argv[1], "grouped", is_folder=True)
open(held[1].path + "/inner", "w").close()
print("ready", flush=True)
sys.stdin.read()
"""


def test_a_file_is_made_locked_and_removed(tmp_path: Path) -> None:
    with_name = Beside(str(tmp_path), "a.parquet")
    folder = Beside(str(tmp_path), "a", is_folder=True)
    assert sorted(os.listdir(tmp_path)) == sorted(os.path.basename(one.path) for one in (with_name, folder))
    assert all(name.startswith(".a.") and str(os.getpid()) in name for name in os.listdir(tmp_path))
    sweep(str(tmp_path))
    assert len(os.listdir(tmp_path)) == 2
    for one in (with_name, folder):
        one.remove()
        one.remove()
    assert os.listdir(tmp_path) == []


def test_a_renamed_file_stays(tmp_path: Path) -> None:
    one = Beside(str(tmp_path), "a.parquet")
    os.replace(one.path, tmp_path / "a.parquet")
    one.release()
    one.remove()
    assert os.listdir(tmp_path) == ["a.parquet"]


def test_permissions_are_those_of_a_new_file(tmp_path: Path) -> None:
    (tmp_path / "usual").write_text("")
    one = Beside(str(tmp_path), "a")
    assert os.stat(one.path).st_mode == os.stat(tmp_path / "usual").st_mode
    one.remove()


def test_what_a_living_process_writes_stays_and_a_killed_one_s_is_swept(tmp_path: Path) -> None:
    others = [".a.parquet.part", ".x.drumlin-7-zz.part", "drumlin-999999-01234567.part", "grouped.parquet"]
    for name in others:
        (tmp_path / name).write_text("mine")
    process = subprocess.Popen(
        [sys.executable, "-c", HOLD, str(tmp_path)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    assert process.stdout is not None and process.stdout.readline() == "ready\n"
    sweep(str(tmp_path))
    assert len(os.listdir(tmp_path)) == len(others) + 2
    process.kill()
    process.communicate()
    sweep(str(tmp_path))
    assert sorted(os.listdir(tmp_path)) == sorted(others)


def test_a_locked_file_stays_although_its_number_is_of_no_process(tmp_path: Path) -> None:
    """As where the process that writes runs in another container, on the same folder."""
    one = Beside(str(tmp_path), "a")
    foreign = tmp_path / ".a.drumlin-4194305-00000000.part"  # above the largest process number of Linux
    os.rename(one.path, foreign)
    sweep(str(tmp_path))
    assert foreign.exists()
    one.release()
    sweep(str(tmp_path))
    assert not foreign.exists()


def test_names_as_long_as_file_systems_take(tmp_path: Path) -> None:
    one = Beside(str(tmp_path), "x" * 255)
    assert os.path.exists(one.path)
    one.remove()


def test_a_folder_that_is_not_there(tmp_path: Path) -> None:
    sweep(str(tmp_path / "nowhere"))
    with pytest.raises(FileNotFoundError):
        Beside(str(tmp_path / "nowhere"), "a")
