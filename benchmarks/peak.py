"""Peak memory of our passes alone: by how much the resident memory of a fresh process grows over its generated rows.

    python benchmarks/peak.py CASE THREADS       (the case as JSON, as cases.toml has it)

The process generates the rows of a case, then keeps them as Arrow columns and takes two passes. Where Linux lets it,
the high-water mark is reset in between ("reset"); elsewhere the growth of the largest resident memory counts
("maximum"), which tells too little where generating the rows needed more than the passes.
"""

from __future__ import annotations

import ctypes
import gc
import json
import resource
import subprocess
import sys
from pathlib import Path

from cases import Case, generate
from competitors import keep, ours, statistics

STATUS = Path("/proc/self/status")


def trim() -> None:
    """Gives freed memory back to the system, where the C library can, so that it cannot hide growth."""
    gc.collect()
    library = ctypes.CDLL(None)
    if hasattr(library, "malloc_trim"):
        library.malloc_trim(0)


def status(name: str) -> int | None:
    """Bytes that the system tells under `name`; None where it tells nothing."""
    lines = STATUS.read_text().splitlines() if STATUS.exists() else []
    return next((int(line.split()[1]) * 1024 for line in lines if line.startswith(f"{name}:")), None)


def most() -> int:
    """The most bytes that were resident since the start, or since the last reset."""
    unit = 1 if sys.platform == "darwin" else 1024
    return status("VmHWM") or resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit


def reset() -> str:
    """Sets the high-water mark back to the present ("reset"), or tells that this is not possible ("maximum")."""
    try:
        Path("/proc/self/clear_refs").write_text("5")
    except OSError:
        return "maximum"
    return "reset" if status("VmHWM") is not None else "maximum"


def peak(case: Case, threads: int) -> float:
    """MB (10^6 bytes) by which a process of its own grows over the passes of a case."""
    command = [sys.executable, str(Path(__file__)), json.dumps(case), str(threads)]
    done = subprocess.run(command, check=True, stdout=subprocess.PIPE, text=True)
    return float(done.stdout)


def main() -> None:
    case, threads = json.loads(sys.argv[1]), int(sys.argv[2])
    data = generate(case)
    sums = statistics(case, data)
    trim()
    reset()
    before = most()
    one = ours(keep(data.rows, sums, threads), sums, threads)
    one()
    one()
    print((most() - before) / 1e6)


if __name__ == "__main__":
    main()
