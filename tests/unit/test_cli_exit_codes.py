"""Exit codes of the commands for what can be wrong with sources, targets and models."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import drumlin
from drumlin.cli.main import run


@pytest.fixture
def depot(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A working folder with scans, a model, a file that lacks a column, and files that are not what they seem."""
    random = np.random.default_rng(3)
    table = pa.table({name: random.normal(size=200) for name in ("length_cm", "width_cm")})
    (tmp_path / "scans").mkdir()
    (tmp_path / "uneven").mkdir()
    pq.write_table(table, tmp_path / "scans" / "a.parquet")
    pq.write_table(table, tmp_path / "uneven" / "a.parquet")
    pq.write_table(table.drop_columns(["width_cm"]), tmp_path / "uneven" / "b.parquet")
    holes = [None, *table["width_cm"].to_pylist()[1:]]
    pq.write_table(table.set_column(1, "width_cm", [holes]), tmp_path / "holes.parquet")
    (tmp_path / "broken.parquet").write_bytes(b"PAR1 but not much more")
    model = drumlin.fit(tmp_path / "scans", 1, columns=["length_cm", "width_cm"], progress=False)
    data = Path(model.save(tmp_path / "m.drumlin")).read_bytes()
    (tmp_path / "damaged.drumlin").write_bytes(data[:-20])
    (tmp_path / "taken.parquet").write_bytes(b"mine")
    monkeypatch.chdir(tmp_path)
    return tmp_path


FIT = ["fit", "--components", "1", "--columns", "length_cm,width_cm", "--model", "new.drumlin"]
PREDICT = ["predict", "--model", "m.drumlin", "--to", "out.parquet"]


@pytest.mark.parametrize(
    ("arguments", "code", "told"),
    [
        ([*FIT, "scans"], 0, "model written"),
        ([*PREDICT, "scans"], 0, ""),
        ([*FIT, "scans", "--where", "length_cm > 0 and width_cm in (1, 2) or width_cm > 0", "--spill", "."], 0, ""),
        ([*PREDICT, "uneven/a.parquet", "scans/a.parquet", "--to", "out/"], 0, ""),
        ([*FIT, "nowhere.parquet"], 1, "nowhere.parquet does not exist"),
        ([*FIT, "broken.parquet"], 1, "broken.parquet cannot be read as Parquet"),
        ([*PREDICT, "scans/*.pq"], 1, "No Parquet file matches scans/*.pq"),
        ([*PREDICT, "belt://scans"], 1, "pyarrow knows no file system 'belt'"),
        ([*PREDICT, "scans", "--to", "taken.parquet"], 1, "taken.parquet exists"),
        ([*PREDICT, "scans", "--to", "nowhere/out.parquet"], 1, "does not exist: make the folder first"),
        ([*FIT, "holes.parquet"], 1, "width_cm"),
        ([*PREDICT, "holes.parquet"], 1, "row 0 (counted from 0) of holes.parquet"),
        ([*FIT, "scans", "--where", "length > 0"], 2, "knows no column 'length'. Did you mean 'length_cm'?"),
        ([*FIT, "scans", "--where", "length_cm >"], 2, "cannot be understood"),
        ([*FIT, "scans", "--spill", "nowhere"], 2, "there is no such folder"),
        ([*PREDICT, "scans", "--to", "s3://depot/out.parquet"], 2, "local files only"),
        ([*FIT, "scans", "--columns", "length_cm,wide_cm"], 4, "no column 'wide_cm'"),
        ([*FIT, "uneven"], 4, "'width_cm' cannot be read: uneven/a.parquet has it, but uneven/b.parquet does not"),
        ([*PREDICT, "uneven"], 4, "uneven/b.parquet does not"),
        ([*PREDICT, "scans", "--key", "parcel"], 4, "has no column 'parcel'"),
        ([*PREDICT, "scans", "--model", "damaged.drumlin"], 5, "damaged.drumlin cannot be loaded"),
        (["show", "--model", "damaged.drumlin"], 5, "damaged.drumlin cannot be loaded"),
    ],
)
def test_exit_codes(
    depot: Path, arguments: list[str], code: int, told: str, capsys: pytest.CaptureFixture[str]
) -> None:
    before = set(os.listdir(depot))
    assert run(arguments) == code
    shown = capsys.readouterr()
    assert told in shown.err and "Traceback" not in shown.err
    if code:
        assert shown.out == "" and shown.err.splitlines()[-1].startswith("drumlin: ")
        assert set(os.listdir(depot)) == before and (depot / "taken.parquet").read_bytes() == b"mine"
    assert not [name for name in os.listdir(depot) if name.startswith(".")]


def test_notes_on_the_files_go_to_standard_error(depot: Path, capsys: pytest.CaptureFixture[str]) -> None:
    narrow = pq.read_table("scans/a.parquet").cast(pa.schema([("length_cm", pa.float32()), ("width_cm", pa.float64())]))
    pq.write_table(narrow, "scans/b.parquet")
    assert run([*FIT, "scans"]) == 0 and run([*PREDICT, "scans"]) == 0
    told = "note: Column 'length_cm' is double in scans/a.parquet and float in scans/b.parquet; it is read as double."
    assert capsys.readouterr().err.splitlines().count(told) == 2
