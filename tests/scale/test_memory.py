"""Tables larger than the ceiling: the growth of resident memory stays under it, whatever it is, and does not grow with
the table; a container with that much memory and no swap is survived."""

import json
import os
import statistics
import subprocess
import sys
import textwrap
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

pytestmark = [pytest.mark.slow, pytest.mark.timeout(3600)]

ROW_GROUP = 250_000
RUNS = 3
COLUMNS = [f"c{j}" for j in range(8)]

CHILD = textwrap.dedent(
    """
    import json, sys, time
    import drumlin

    def resident(entry):
        lines = open("/proc/self/status").read().splitlines()
        return next(int(line.split()[1]) * 1024 for line in lines if line.startswith(entry + ":"))

    rows, model, out, verb, memory = sys.argv[1:]
    began, before = time.monotonic(), resident("VmRSS")
    told, columns = None, [f"c{j}" for j in range(8)]
    if verb == "estimate":
        found = drumlin.estimate(rows, 4, columns=columns, key="id", memory=memory)
        told, count = found.memory_bytes, found.rows
    elif verb == "fit":
        fitted = drumlin.fit(rows, 4, columns=columns, key="id", memory=memory, tries=2,
                             pass_limit=3, tolerance=0.0, progress=False)
        fitted.save(model)
        count = fitted.rows
    else:
        drumlin.predict(rows, model, out, memory=memory, replace=True, progress=False)
        import pyarrow.parquet as pq
        count = pq.ParquetFile(out).metadata.num_rows
    growth = resident("VmHWM") - before
    print(json.dumps({"growth": growth, "rows": count, "told": told, "seconds": time.monotonic() - began}))
    """
)


def write_table(path: Path, rows: int) -> None:
    """Overlapping hills in 8 float64 columns and a key, one row group at a time, of full mantissas."""
    schema = pa.schema([("id", pa.int64()), *((name, pa.float64()) for name in COLUMNS)])
    means = np.random.default_rng(0).normal(0.0, 4.0, (4, 8))
    with pq.ParquetWriter(path, schema, compression="none", use_dictionary=False) as writer:
        for first in range(0, rows, ROW_GROUP):
            count = min(ROW_GROUP, rows - first)
            random = np.random.default_rng([1, first])
            values = means[random.integers(0, 4, count)] + random.standard_normal((count, 8))
            arrays = [pa.array(np.arange(first, first + count))] + [pa.array(values[:, j]) for j in range(8)]
            writer.write_table(pa.Table.from_arrays(arrays, schema=schema), row_group_size=ROW_GROUP)


def child(*words: object, enter=None) -> dict:
    done = subprocess.run(
        [sys.executable, "-c", CHILD, *map(str, words)],
        capture_output=True,
        text=True,
        check=False,
        timeout=3000,
        preexec_fn=enter,
    )
    assert done.returncode == 0, (done.returncode, done.stderr)
    return json.loads(done.stdout.splitlines()[-1])


@pytest.fixture(scope="module")
def folders(tmp_path_factory) -> dict[int, Path]:
    """Tables of 5 and of 20 million rows, and a model of each."""
    found = {}
    for millions in (5, 20):
        folder = tmp_path_factory.mktemp(f"rows{millions}")
        write_table(folder / "rows.parquet", millions * 1_000_000)
        child(folder / "rows.parquet", folder / "model.drumlin", "", "fit", "600 MB")
        found[millions] = folder
    return found


def run(folder: Path, verb: str, memory: str, enter=None) -> dict:
    model = folder / ("model.drumlin" if verb == "predict" else f"fitted {memory}.drumlin")
    model.unlink(missing_ok=True) if verb == "fit" else None
    return child(folder / "rows.parquet", model, folder / "out.parquet", verb, memory, enter=enter)


@pytest.mark.parametrize(
    ("verb", "memory"),
    [("fit", 300), ("fit", 600), ("fit", 1000), ("fit", 3000), ("predict", 350), ("predict", 600)],
)
def test_growth_stays_under_the_ceiling(folders, verb, memory):
    result = run(folders[20], verb, f"{memory} MB")
    print(verb, memory, result)
    assert result["rows"] == 20_000_000
    assert result["growth"] < memory * 1e6, f"{result['growth'] / 1e6:.0f} MB"


@pytest.mark.parametrize("memory", ["600 MB", "3 GB"])
def test_what_was_told_before_is_right_to_a_fifth(folders, memory):
    told = run(folders[20], "estimate", memory)["told"]
    result = run(folders[20], "fit", memory)
    assert 0.8 < result["growth"] / told < 1.2, (told, result)


@pytest.mark.parametrize("verb", ["fit", "predict"])
def test_does_not_grow_with_the_table(folders, verb):
    # One process differs from the next by some 5 %, whatever the number of rows: compare medians.
    found = {
        millions: statistics.median(run(folders[millions], verb, "350 MB")["growth"] for _ in range(RUNS))
        for millions in (5, 20)
    }
    assert abs(found[20] / found[5] - 1.0) < 0.1, found


@pytest.fixture
def container():
    """Gives a function that makes a control group with a limit on memory, and what a process runs to enter it."""
    made = []

    def make(limit: int):
        (own,) = [
            line for line in Path("/proc/self/cgroup").read_text().splitlines() if line.split(":")[1] in ("", "memory")
        ][:1]
        _, kind, inner = own.split(":", 2)
        root = Path("/sys/fs/cgroup") / kind / inner.lstrip("/")
        group = root / f"drumlin-{os.getpid()}-{len(made)}"
        try:
            group.mkdir()
            made.append(group)
            (group / ("memory.limit_in_bytes" if kind else "memory.max")).write_text(str(limit))
            swap = group / ("memory.swappiness" if kind else "memory.swap.max")
            if swap.exists():
                swap.write_text("0")
        except OSError as error:
            pytest.skip(f"no control group can be made here: {error}")
        return lambda: (group / "cgroup.procs").write_text(str(os.getpid()))

    yield make
    for group in made:
        group.rmdir()


@pytest.mark.parametrize(("verb", "memory"), [("fit", 300), ("fit", 600), ("predict", 400)])
def test_a_container_of_that_size_is_survived(folders, container, verb, memory):
    """The limit leaves 60 MB for the interpreter; what the files take in the page cache is given back by the system."""
    result = run(folders[20], verb, f"{memory} MB", enter=container((memory + 60) * 1_000_000))
    assert result["rows"] == 20_000_000
