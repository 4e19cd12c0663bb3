"""The command itself: help, exit codes, one-line errors, interrupts, pipes."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import click
import pytest

from drumlin import errors
from drumlin.cli import main as cli
from drumlin.cli.main import COMMANDS, command, run
from drumlin.options import VERBS, flags

DRUMLIN = [sys.executable, "-m", "drumlin.cli.main"]


def test_plain_use_shows_the_commands(capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["--help"]) == 0
    shown = capsys.readouterr().out
    assert all(f"  {name} " in shown for name in COMMANDS)
    assert run([]) == 2
    assert run(["--version"]) == 0
    assert capsys.readouterr().out.startswith("drumlin ")


def test_help_loads_neither_numpy_nor_pyarrow() -> None:
    code = (
        "import sys; from drumlin.cli.main import run, COMMANDS\n"
        "assert run(['--help']) == 0\n"
        "assert all(run([name, '--help']) == 0 for name in COMMANDS)\n"
        "heavy = {'numpy', 'pyarrow', 'tqdm', 'drumlin._core'} & set(sys.modules)\n"
        "assert not heavy, heavy"
    )
    subprocess.run([sys.executable, "-c", code], check=True, stdout=subprocess.DEVNULL)


@pytest.mark.parametrize("verb", sorted(set(VERBS) - {"estimate"}))  # which is fit --dry-run
def test_the_flags_are_the_options_of_the_function(verb: str) -> None:
    found = command.get_command(click.Context(command), verb)
    assert found is not None
    by_name = {one.name: one for one in found.params}
    defined = [flag for flag in flags(verb) if flag.name != "replace" or verb != "fit"]
    assert len(defined) > 5
    for flag in defined:
        option = by_name[flag.name]
        assert isinstance(option, click.Option)
        assert flag.flag in option.opts and (option.help or "").startswith(flag.help)
    extra = set(by_name) - {flag.name for flag in defined}
    assert extra <= {"rows", "components", "target", "model", "to", "replace", "as_json", "quiet", "dry_run"}


@pytest.mark.parametrize("name", list(COMMANDS))
def test_every_command_explains_itself(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert run([name, "--help"]) == 0
    shown = capsys.readouterr().out
    assert shown.startswith(f"Usage: drumlin {name} ") and "--json" in shown and "--quiet" in shown


def _raise(monkeypatch: pytest.MonkeyPatch, error: BaseException) -> int:
    @click.command("show")
    def failing() -> None:
        raise error

    monkeypatch.setattr(cli.Commands, "get_command", lambda *_: failing)
    return run(["show"])


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (errors.DrumlinError("m"), 1),
        (errors.OptionError("m"), 2),
        (errors.SchemaError("m"), 4),
        (errors.DataError("m"), 1),
        (errors.MixtureError("m"), 1),
        (errors.StreamError("m"), 1),
        (errors.SourceError("m"), 1),
        (errors.TargetError("m"), 1),
        (errors.DamagedFileError("m"), 5),
        (errors.InternalError("m"), 1),
        (MemoryError(), 1),
        (PermissionError(13, "Permission denied", "m"), 1),
        (RuntimeError("m\nand more"), 1),
        (KeyboardInterrupt(), 130),
        (SystemExit(143), 143),
    ],
)
def test_every_error_has_its_exit_code_and_one_line(
    error: BaseException, code: int, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    assert _raise(monkeypatch, error) == code
    shown = capsys.readouterr()
    assert shown.out == "" and "Traceback" not in shown.err
    if not isinstance(error, SystemExit):
        lines = [line for line in shown.err.splitlines() if line.strip()]
        assert len(lines) == 1 and lines[0].startswith("drumlin: ")


def test_a_traceback_is_shown_on_request(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    monkeypatch.setenv("DRUMLIN_TRACEBACK", "1")
    assert _raise(monkeypatch, errors.DataError("m")) == 1
    assert "Traceback" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (["profil", "x"], "Did you mean 'profile'?"),
        (["fit", "x"], "--components"),
        (["fit", "--components", "3", "--model", "m"], "ROWS"),
        (["fit", "x", "--components", "3", "--model", "m.drumlin", "--tries", "many"], "'many' is not a whole number"),
        (["fit", "x", "--components", "3", "--model", "m.drumlin", "--tries", "0"], "tries=0"),
        (["fit", "x", "--components", "3", "--model", "m.drumlin", "--structure", "round"], "structure='round'"),
        (["fit", "x", "--components", "3", "--model", "m.drumlin", "--missing-codes", "t"], "COLUMN=NUMBER"),
        (["fit", "x", "--components", "0", "--model", "m.drumlin"], "components"),
        (["profile", "x", "--memory", "lots"], "memory='lots'"),
        (["profile", "x", "--quiet", "--progress"], "--quiet"),
        (["profile", "x", "--nonsense"], "--nonsense"),
        (["name", "--model", "m.drumlin", "--names", "0=a"], "--to"),
        (["predict", "x", "--model", "m.drumlin", "--json"], "--to"),
        (["demo", "--rows", "5"], "--rows"),
    ],
)
def test_wrong_use_ends_with_2_and_says_what_to_do(
    arguments: list[str],
    told: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert run(arguments) == 2
    shown = capsys.readouterr()
    assert shown.out == "" and told in shown.err and len(shown.err.splitlines()) == 1
    assert list(tmp_path.iterdir()) == []


def _wait_for(condition: Callable[[], bool], seconds: float = 60.0) -> None:
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "nothing happened"
        time.sleep(0.02)


@pytest.mark.parametrize(("number", "code"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_an_interrupt_ends_quickly_and_leaves_nothing(number: signal.Signals, code: int, tmp_path: Path) -> None:
    process = subprocess.Popen(
        [*DRUMLIN, "demo", "--rows", "20000000"],
        env={**os.environ, "TMPDIR": str(tmp_path)},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    try:
        _wait_for(lambda: any(tmp_path.glob("drumlin-demo-*/scans/*.parquet")))
        time.sleep(0.3)
        process.send_signal(number)
        began = time.monotonic()
        _, told = process.communicate(timeout=30)
        assert time.monotonic() - began < 3.0
    finally:
        process.kill()
        process.communicate()
    assert process.returncode == code
    assert "Traceback" not in told
    if number == signal.SIGINT:
        assert told.splitlines()[-1] == "drumlin: interrupted; nothing was written."
    assert list(tmp_path.iterdir()) == []


def test_a_reader_that_leaves_early_is_no_error(tmp_path: Path) -> None:
    import numpy as np
    import pyarrow as pa
    import pyarrow.parquet as pq

    rows = {f"column_{number:04d}": np.arange(3.0) for number in range(400)}
    pq.write_table(pa.table(rows), tmp_path / "wide.parquet")
    process = subprocess.Popen(
        [*DRUMLIN, "profile", str(tmp_path / "wide.parquet"), "--json"], stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    assert process.stdout is not None and process.stderr is not None
    process.stdout.read(10)
    process.stdout.close()
    told = process.stderr.read()
    process.stderr.close()
    process.wait(timeout=30)
    assert b"Traceback" not in told and b"Exception" not in told
