"""The commands in a real terminal and in a pipe: where progress is shown, and what Ctrl-C does."""

import fcntl
import os
import pty
import re
import select
import signal
import struct
import subprocess
import sys
import termios
import time
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

HALF_A_SECOND = 0.5
MARGIN = 1.5
"""For a busy machine, and for the interpreter to close."""

COLUMNS = [f"c{j}" for j in range(4)]


@pytest.fixture(scope="module")
def rows(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("rows") / "rows.parquet"
    random = np.random.default_rng(2)
    pq.write_table(pa.table({name: random.normal(size=300_000) for name in COLUMNS}), path)
    return path


def command(rows: Path, target: Path, *more: str) -> list[str]:
    words = [sys.executable, "-m", "drumlin.cli.main", "fit", str(rows), "--components", "6"]
    return [*words, "--columns", ",".join(COLUMNS), "--model", str(target), "--tries", "1", "--tolerance", "0", *more]


class Terminal:
    """A program whose standard error, and keyboard, is a terminal of its own; its standard output is a pipe."""

    def __init__(self, words: list[str]) -> None:
        self._main, other = pty.openpty()
        fcntl.ioctl(other, termios.TIOCSWINSZ, struct.pack("HHHH", 30, 100, 0, 0))
        # A session of its own with this terminal, so that Ctrl-C typed there reaches the program.
        take = (
            "import fcntl, os, sys, termios; fcntl.ioctl(0, termios.TIOCSCTTY, 0); os.execv(sys.argv[1], sys.argv[1:])"
        )
        self.process = subprocess.Popen(
            [sys.executable, "-c", take, *words],
            stdin=other,
            stdout=subprocess.PIPE,
            stderr=other,
            start_new_session=True,
        )
        os.close(other)
        self.shown = ""

    def read(self, until: str, seconds: float) -> bool:
        """Read what is shown until a pattern is; False when it does not come in time, or the program ends."""
        end = time.monotonic() + seconds
        while not re.search(until, self.shown):
            ready, _, _ = select.select([self._main], [], [], max(0.0, end - time.monotonic()))
            if not ready:
                return False
            try:
                part = os.read(self._main, 65_536)
            except OSError:  # the other side is closed
                return False
            self.shown += part.decode(errors="replace")
        return True

    def type(self, keys: bytes) -> float:
        """Type keys; return the moment."""
        os.write(self._main, keys)
        return time.monotonic()

    def close(self) -> tuple[int, str]:
        """Wait for the end; return the exit code and what came on standard output."""
        try:
            self.read("(?!)", 0.0)
            out, _ = self.process.communicate(timeout=60)
            self.read("(?!)", 0.2)
        finally:
            self.process.kill()
            os.close(self._main)
        return self.process.returncode, out.decode()


def test_a_terminal_shows_progress_and_ctrl_c_typed_there_ends_it(rows: Path, tmp_path: Path) -> None:
    terminal = Terminal(command(rows, tmp_path / "m.drumlin", "--pass-limit", "100000"))
    # The number of the pass, rows of all rows, the gain of the pass before.
    shown = terminal.read(r"pass +[2-9][^\r]*300k[^\r]*gain [-0-9.e]+ nats/row", 60.0)
    sent = terminal.type(b"\x03")
    code, out = terminal.close()
    took = time.monotonic() - sent
    assert shown, terminal.shown[-500:]
    assert (code, out) == (130, "")
    assert took < HALF_A_SECOND + MARGIN
    assert "interrupted; nothing was written." in terminal.shown and "Traceback" not in terminal.shown
    assert list(tmp_path.iterdir()) == []


def test_in_a_terminal_results_go_to_the_pipe_and_the_line_is_cleared(rows: Path, tmp_path: Path) -> None:
    terminal = Terminal(command(rows, tmp_path / "m.drumlin", "--pass-limit", "3"))
    terminal.read("model written to", 60.0)
    code, out = terminal.close()
    assert code == 0 and "3 passes, stopped: pass_limit" in out and "\r" not in out and "\x1b" not in out
    assert "nats/row" in terminal.shown and "nats/row" not in terminal.shown.rsplit("\r", 1)[-1]


def test_a_pipe_shows_no_progress(rows: Path, tmp_path: Path) -> None:
    words = command(rows, tmp_path / "m.drumlin", "--pass-limit", "3")
    done = subprocess.run(words, capture_output=True, text=True, check=True)
    assert "\r" not in done.stderr and "rows/s" not in done.stderr and "model written to" in done.stderr
    words[words.index("--pass-limit") :] = ["--replace", "--quiet", "--pass-limit", "3"]
    assert subprocess.run(words, capture_output=True, text=True, check=True).stderr == ""


@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGTERM])
def test_predict_ended_from_outside_leaves_nothing(rows: Path, tmp_path: Path, sent: signal.Signals) -> None:
    model, out = tmp_path / "m.drumlin", tmp_path / "out"
    out.mkdir()
    subprocess.run(command(rows, model, "--pass-limit", "2", "--quiet"), capture_output=True, check=True)
    many = [str(rows)] * 1 + ["--model", str(model), "--to", str(out / "grouped.parquet")]
    code = (
        "import sys, os, signal, threading\n"
        "from drumlin.predicting import target\n"
        "write = target.Target.write\n"
        "def slow(self, *rest):\n"
        f"    os.kill(os.getpid(), {int(sent)})\n"
        "    return write(self, *rest)\n"
        "target.Target.write = slow\n"
        "from drumlin.cli.main import main\n"
        f"sys.argv = ['drumlin', 'predict', *{many!r}]\n"
        "main()\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=False)
    assert done.returncode == {signal.SIGINT: 130, signal.SIGTERM: 143}[sent], done.stderr
    assert list(out.iterdir()) == [] and "Traceback" not in done.stderr
