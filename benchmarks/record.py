"""Records: the machine on which a run took place, and a dated file that keeps its lines."""

from __future__ import annotations

import csv
import datetime
import os
import platform
import subprocess
from pathlib import Path

import numpy as np
import sklearn
from threadpoolctl import threadpool_info

from drumlin import _core
from lines import Line
from peak import reset

HERE = Path(__file__).parent
RECORDS = HERE / "records"


def processor() -> str:
    """The processor's name."""
    info = Path("/proc/cpuinfo")
    lines = info.read_text().splitlines() if info.exists() else []
    names = [line.split(":")[1].strip() for line in lines if line.startswith("model name")]
    return names[0] if names else platform.processor() or platform.machine()


def openblas() -> str:
    """Version, kernels and threads of the linear algebra library that NumPy brings."""
    found = [
        about for about in threadpool_info() if about["internal_api"] == "openblas" and "numpy" in about["filepath"]
    ]
    return " ".join(f"{about['version']} {about['architecture']} {about['num_threads']} threads" for about in found)


def machine(threads: int) -> dict[str, str]:
    """What a figure depends on besides the code: told before a run and kept with every line."""
    asked = ["git", "describe", "--always", "--dirty"]
    commit = subprocess.run(asked, capture_output=True, text=True, cwd=HERE).stdout.strip()
    return {
        "date": datetime.date.today().isoformat(),
        "commit": commit or "unknown",
        "processor": processor(),
        "cores": str(os.cpu_count()),
        "tier": _core.kernel_tier(),
        "build": _core.build_info()["profile"],
        "threads": str(threads),
        "load": f"{os.getloadavg()[0]:.2f}",
        "python": platform.python_version(),
        "numpy": np.__version__,
        "openblas": openblas(),
        "scikit-learn": sklearn.__version__,
        "peak_from": reset(),
    }


def free_path(date: str, folder: Path = RECORDS) -> Path:
    """A path that nothing has yet: DATE-pass.csv, DATE-pass-2.csv and so on."""
    path, number = folder / f"{date}-pass.csv", 1
    while path.exists():
        number += 1
        path = folder / f"{date}-pass-{number}.csv"
    return path


def write(path: Path, lines: list[Line], about: dict[str, str]) -> None:
    """One row a line, with the facts of the machine after its values. An existing file is an error."""
    rows = [{**line.values(), **about} for line in lines]
    with path.open("x", newline="") as file:
        writer = csv.DictWriter(file, fieldnames=list(rows[0]))
        writer.writeheader()
        writer.writerows(rows)
