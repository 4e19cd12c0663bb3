"""What is loaded when: `import drumlin` and `--help` are quick because heavy libraries wait until they are needed."""

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from tools import run_python

HEAVY = ("pyarrow", "pyarrow.dataset", "polars", "pandas", "duckdb", "matplotlib", "sklearn", "scipy")


def loaded_after(code: str) -> set[str]:
    done = run_python(f"{code}\nimport sys\nprint(*sorted(sys.modules))")
    assert done.returncode == 0, done.stderr
    modules = set(done.stdout.split("\n")[-2].split())
    assert "sys" in modules
    return modules


def test_import_loads_nothing_heavy():
    modules = loaded_after("import drumlin")
    assert "drumlin" in modules
    assert not modules & set(HEAVY)


def test_help_loads_nothing_heavy():
    code = "import sys; sys.argv = ['drumlin', '--help']\nfrom drumlin.cli.main import main\n"
    modules = loaded_after(code + "try:\n    main()\nexcept SystemExit as end:\n    assert not end.code, end.code")
    assert "click" in modules
    assert not modules & set(HEAVY)


def test_a_fit_of_a_file_loads_no_frame_library(tmp_path):
    path = tmp_path / "rows.parquet"
    pq.write_table(pa.table({"a": np.random.default_rng(0).normal(size=500)}), path)
    modules = loaded_after(f"import drumlin\ndrumlin.fit({str(path)!r}, 1, columns=['a'])")
    assert "drumlin.fitting.fit" in modules and "pyarrow" in modules
    assert not modules & {"polars", "pandas", "duckdb", "matplotlib"}
