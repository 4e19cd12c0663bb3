"""Ctrl-C gives control back at once, in Python and on the command line, and a forked child can fit."""

import os
import signal
import subprocess
import sys
import time

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

HALF_A_SECOND = 0.5
MARGIN = 0.4  # a busy machine: time until the child is scheduled and its answer is read


@pytest.fixture(scope="module")
def big_file(tmp_path_factory):
    """One row group that takes seconds to fit, so that an interrupt falls inside a pass."""
    random = np.random.default_rng(0)
    columns = {f"c{j}": random.standard_normal(1_500_000).astype(np.float32) for j in range(6)}
    path = tmp_path_factory.mktemp("interrupt") / "rows.parquet"
    pq.write_table(pa.table(columns), path, row_group_size=500_000, use_dictionary=False, compression="none")
    return path


IN_PYTHON = """
import sys, time, drumlin
source = {source}
print("ready", flush=True)
began = time.monotonic()
try:
    drumlin.fit(source, 40, columns=[f"c{{j}}" for j in range(6)], tolerance=0.0, pass_limit=100000, engine="{engine}")
    print("finished", flush=True)
except KeyboardInterrupt:
    print("interrupted", time.monotonic(), began, flush=True)
    # The process is in order: it can go on and fit again.
    import numpy
    drumlin.fit(numpy.random.default_rng(0).normal(size=(500, 2)), 2)
    print("again", flush=True)
"""


def interrupt(process: subprocess.Popen, after: float) -> float:
    time.sleep(after)
    assert process.poll() is None, "it ended before it could be interrupted"
    sent = time.monotonic()
    process.send_signal(signal.SIGINT)
    return sent


@pytest.mark.parametrize(
    ("source", "engine", "after"),
    [(source, "threads", after) for source in ("path", "table") for after in (0.3, 1.5, 4.0)]
    + [("path", "processes", after) for after in (0.6, 0.8, 1.5, 1.6, 1.8, 2.1, 3.0)],
)
def test_in_python(big_file, source, engine, after):
    text = {
        "path": f"{str(big_file)!r}",
        "table": f"__import__('pyarrow.parquet').parquet.read_table({str(big_file)!r})",
    }
    code = IN_PYTHON.format(source=text[source], engine=engine)
    with subprocess.Popen(
        [sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    ) as process:
        try:
            assert process.stdout.readline() == "ready\n"
            sent = interrupt(process, after)
            answer = process.stdout.readline().split()
            assert answer and answer[0] == "interrupted", answer
            # time.monotonic is one clock for all processes of a machine.
            assert float(answer[1]) - sent < HALF_A_SECOND + MARGIN
            out, err = process.communicate(timeout=60)
        finally:
            process.kill()
    assert out == "again\n", err
    assert process.returncode == 0, err


def test_on_the_command_line(big_file, tmp_path):
    target = tmp_path / "model.drumlin"
    command = [sys.executable, "-m", "drumlin.cli.main"]
    script = os.path.join(os.path.dirname(sys.executable), "drumlin")
    if os.path.exists(script):
        command = [script]
    command += ["fit", str(big_file), "--components", "40", "--columns", ",".join(f"c{j}" for j in range(6))]
    command += ["--model", str(target), "--tolerance", "0", "--pass-limit", "100000"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        try:
            sent = interrupt(process, 4.0)
            out, err = process.communicate(timeout=60)
            took = time.monotonic() - sent
        finally:
            process.kill()
    assert process.returncode == 130, err
    assert took < HALF_A_SECOND + 2 * MARGIN, "control back, and the interpreter closed"
    assert "Traceback" not in err and not out
    assert list(tmp_path.iterdir()) == [], "no half-written file is left"


def test_the_best_so_far_on_the_command_line(big_file, tmp_path):
    target = tmp_path / "model.drumlin"
    command = [sys.executable, "-m", "drumlin.cli.main", "fit", str(big_file), "--components", "2", "--tries", "1"]
    command += ["--columns", "c0,c1", "--tolerance", "0", "--pass-limit", "1000000", "--on-interrupt", "best"]
    command += ["--model", str(target)]
    for after in (4.0, 8.0, 16.0):  # on a busy machine it may take long until there is something to hand back
        with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
            try:
                sent = interrupt(process, after)
                out, err = process.communicate(timeout=60)
                took = time.monotonic() - sent
            finally:
                process.kill()
        assert process.returncode == 130, err
        assert took < HALF_A_SECOND + 2 * MARGIN, "control back, and the interpreter closed"
        if out:
            break
    assert "stopped: interrupt" in out and "Traceback" not in err
    assert [path.name for path in tmp_path.iterdir()] == ["model.drumlin"]
    import drumlin

    model = drumlin.load(target)
    assert model.stopped == "interrupt" and model.passes > 0 and model.icl is None


@pytest.mark.skipif(not hasattr(os, "fork"), reason="this platform has no fork")
def test_a_forked_child_fits():
    """The child has its own threads: an inherited pool would hang for ever. A batch call, not a single row."""
    code = """
import os, sys, numpy, drumlin, warnings
warnings.simplefilter("ignore")
rows = numpy.random.default_rng(0).normal(size=(50_000, 3))
before = drumlin.fit(rows, 3, threads=2, pass_limit=3, tolerance=0.0)
child = os.fork()
if child == 0:
    try:
        model = drumlin.fit(rows, 3, threads=2, pass_limit=3, tolerance=0.0)
        densities = model.log_density(rows)
        os._exit(0 if model.checksum == before.checksum and len(densities) == 50_000 else 3)
    except BaseException:
        import traceback
        traceback.print_exc()
        os._exit(4)
_, status = os.waitpid(child, 0)
after = drumlin.fit(rows, 3, threads=2, pass_limit=3, tolerance=0.0)
assert after.checksum == before.checksum
print("child ended with", os.waitstatus_to_exitcode(status))
"""
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=False, start_new_session=True
    )
    assert done.stdout == "child ended with 0\n", done.stdout + done.stderr


def test_several_threads_of_python_fit_at_once():
    from concurrent.futures import ThreadPoolExecutor

    import drumlin

    rows = np.random.default_rng(0).standard_normal((20_000, 2))
    want = drumlin.fit(rows, 2, pass_limit=3, tolerance=0.0).checksum
    with ThreadPoolExecutor(4) as pool:
        found = list(
            pool.map(lambda _: drumlin.fit(rows, 2, pass_limit=3, tolerance=0.0, threads=2).checksum, range(8))
        )
    assert found == [want] * 8
