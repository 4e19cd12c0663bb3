"""Instructions of one pass of the core, counted by valgrind, and the record that they are held against.

python tests/counting.py    counts every kernel of the record anew and writes the record
"""

from __future__ import annotations

import datetime
import os
import re
import shutil
import subprocess
import sys
import tomllib
from dataclasses import dataclass
from pathlib import Path

HERE = Path(__file__).resolve().parent
RECORD = HERE / "contract" / "instructions.toml"
EXAMPLE = HERE.parent / "target" / "release" / "examples" / "counted"
# valgrind knows no AVX-512
TIERS = ("avx2", "portable")


@dataclass(frozen=True)
class Case:
    """Rows of `columns` from `components` full components, and the hints that the counted pass finds."""

    rows: int
    columns: int
    components: int
    spacing: float
    hints: str


KERNELS = {
    "dense": {tier: Case(3072, 8, 16, 0.7, "none") for tier in TIERS},
    # The pass that leaves the hints is not counted, but it takes its time: fewer rows where every operation is a call.
    "skipping": {"avx2": Case(3072, 32, 32, 4.0, "left"), "portable": Case(768, 32, 32, 4.0, "left")},
}


def missing() -> str | None:
    """What keeps this machine from counting, if anything."""
    for tool in ("valgrind", "cargo", "rustc"):
        if shutil.which(tool) is None:
            return f"{tool} is not installed: instructions are not counted"
    return None


def compiler() -> str:
    """Name and version of the compiler."""
    return subprocess.run(["rustc", "--version"], check=True, capture_output=True, text=True).stdout.strip()


def build() -> None:
    """Compiles the example; at once when it is up to date."""
    # The binding is named too, so that the libraries under the core are those of `make build`.
    command = ["cargo", "build", "--quiet", "--release", "--locked"]
    command += ["-p", "drumlin-core", "-p", "drumlin-py", "--example", EXAMPLE.name]
    environment = {"PYO3_PYTHON": sys.executable} | os.environ
    subprocess.run(command, check=True, cwd=HERE.parent, env=environment)


def count(case: Case, tier: str) -> int:
    """Instructions of one pass over the rows in memory: loading, scaling, E-step and sums."""
    marker = ["valgrind", "--tool=callgrind", "--toggle-collect=*::counted_pass*", "--callgrind-out-file=/dev/null"]
    case_of = [str(value) for value in (case.rows, case.columns, case.components, case.spacing)]
    command = [*marker, str(EXAMPLE), *case_of, "full", tier, case.hints]
    done = subprocess.run(command, capture_output=True, text=True)
    assert done.returncode == 0, f"{' '.join(command)}\n{done.stdout}{done.stderr}"
    found = re.search(r"Collected : (\d+)", done.stderr)
    assert found and int(found[1]) > 0, f"nothing was counted: is counted_pass inlined?\n{done.stderr}"
    return int(found[1])


def recorded(kernel: str, tier: str) -> dict[str, object]:
    """The record of one kernel: `count`, `rustc`, `date`."""
    record: dict[str, object] = tomllib.loads(RECORD.read_text())[kernel][tier]
    return record


def write_record() -> None:
    """Counts every kernel and writes the record."""
    lines = ["# Instructions of one pass in memory, by kernel and tier: written by `make record-instructions`.\n"]
    for kernel, cases in KERNELS.items():
        for tier, case in cases.items():
            number = count(case, tier)
            print(f"{kernel} {tier}: {number}")
            lines.append(
                f'[{kernel}.{tier}]\ncount = {number}\nrustc = "{compiler()}"\ndate = {datetime.date.today()}\n'
            )
    RECORD.write_text("\n".join(lines))


if __name__ == "__main__":
    if reason := missing():
        sys.exit(reason)
    build()
    write_record()
