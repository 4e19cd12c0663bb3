"""Tables larger than the ceiling: fit and predict stay under `memory="600 MB"`, and do not grow with the table."""

import json
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

CEILING = 600_000_000
ROW_GROUP = 250_000
RUNS = 3
COLUMNS = [f"c{j}" for j in range(8)]

CHILD = textwrap.dedent(
    """
    import json, resource, sys, time
    import drumlin

    rows, model, out, verb = sys.argv[1:]
    began = time.monotonic()
    if verb == "fit":
        fitted = drumlin.fit(rows, 4, columns=[f"c{j}" for j in range(8)], key="id", memory="600 MB", tries=2,
                             pass_limit=3, tolerance=0.0, progress=False)
        fitted.save(model)
        count = fitted.rows
    else:
        drumlin.predict(rows, model, out, memory="600 MB", progress=False)
        import pyarrow.parquet as pq
        count = pq.ParquetFile(out).metadata.num_rows
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)
    print(json.dumps({"peak": peak, "rows": count, "seconds": time.monotonic() - began}))
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


def child(*words: object) -> dict:
    done = subprocess.run(
        [sys.executable, "-c", CHILD, *map(str, words)], capture_output=True, text=True, check=False, timeout=3000
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout.splitlines()[-1])


@pytest.fixture(scope="module")
def peaks(tmp_path_factory) -> dict:
    """Peak resident size of fit and of predict at 5 and at 20 million rows, several runs each in its own process."""
    found = {}
    for millions in (5, 20):
        folder = tmp_path_factory.mktemp(f"rows{millions}")
        rows, model, out = folder / "rows.parquet", folder / "model.drumlin", folder / "out.parquet"
        write_table(rows, millions * 1_000_000)
        for verb in ("fit", "predict"):
            runs = []
            for _ in range(RUNS):
                for path in (model, out) if verb == "fit" else (out,):
                    path.unlink(missing_ok=True)
                runs.append(child(rows, model, out, verb))
            found[verb, millions] = runs
            print(verb, millions, runs)
        for path in (rows, out):
            path.unlink()
    return found


@pytest.mark.parametrize("verb", ["fit", "predict"])
def test_under_the_ceiling(peaks, verb):
    assert 20_000_000 * 8 * 8 > 2 * CEILING, "the table must be larger than the ceiling"
    for result in peaks[verb, 20]:
        assert result["rows"] == 20_000_000
        assert result["peak"] < CEILING, f"{result['peak'] / 1e6:.0f} MB"


@pytest.mark.parametrize("verb", ["fit", "predict"])
def test_does_not_grow_with_the_table(peaks, verb):
    # One process differs from the next by some 5 %, whatever the number of rows: compare medians.
    small, large = (statistics.median(result["peak"] for result in peaks[verb, millions]) for millions in (5, 20))
    assert abs(large / small - 1.0) < 0.1, f"{small / 1e6:.0f} MB at 5 million rows, {large / 1e6:.0f} MB at 20 million"
