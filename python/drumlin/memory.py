"""How much memory and how many cores this process may use, container limits included."""

from __future__ import annotations

import os
import re
from pathlib import Path
from typing import Any

from drumlin.errors import OptionError

LEAST_MEMORY = 256_000_000
"""The smallest ceiling accepted, in bytes: Python, pyarrow and one open row group need about this much."""

_UNITS = {"": 1, "b": 1}
for _power, _letter in enumerate("kmgt", start=1):
    _UNITS[_letter + "b"] = 1000**_power
    _UNITS[_letter] = _UNITS[_letter + "ib"] = 1024**_power

_NO_LIMIT = 1 << 60


def parse_size(value: int | str) -> int:
    """Return bytes for "1 GiB", "600 MB" or a number of bytes. ValueError when it is none of these.

    >>> parse_size("600 MB"), parse_size("1 GiB"), parse_size(512)
    (600000000, 1073741824, 512)
    """
    if isinstance(value, int):
        return value
    found = re.fullmatch(r"\s*([0-9][0-9_]*(?:\.[0-9]+)?)\s*([a-zA-Z]*)\s*", value)
    if not found or found[2].lower() not in _UNITS:
        raise ValueError(value)
    return int(float(found[1].replace("_", "")) * _UNITS[found[2].lower()])


def check_size(name: str, value: Any) -> int | str | None:
    """The check of the option `memory`."""
    if value is None:
        return None
    try:
        if isinstance(value, bool) or not isinstance(value, int | str):
            raise ValueError
        size = parse_size(value)
    except (ValueError, OverflowError):
        raise OptionError(
            f"{name}={value!r} is not a size: write '1 GiB', '600 MB' or a number of bytes.",
            option=name,
            found=repr(value),
        ) from None
    if size < LEAST_MEMORY:
        raise OptionError(
            f"{name}={value!r} is too small: Python and its file readers alone need about {LEAST_MEMORY // 10**6} MB.",
            option=name,
            found=repr(value),
        )
    return value


def usable_cores() -> int:
    """Return the number of cores this process may run on: affinity, and a container's share of time, rounded up."""
    try:
        cores = len(os.sched_getaffinity(0))
    except AttributeError:  # not Linux
        cores = os.cpu_count() or 1
    share = _processor_share()
    return max(1, min(cores, share) if share else cores)


def free_bytes() -> int:
    """Return the bytes this process can still take: free memory, capped by container limits."""
    return min(_machine_free(), _container_free())


def _machine_free() -> int:
    for line in _read("/proc/meminfo").splitlines():
        if line.startswith("MemAvailable:"):
            return int(line.split()[1]) * 1024
    try:
        return os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE") // 2
    except (AttributeError, OSError, ValueError):
        return 4 << 30


def _container_free() -> int:
    """The least of (limit - used) over this process's control group and the groups above it, versions 1 and 2."""
    free = _NO_LIMIT
    for folder in _groups("memory"):
        limit = _count(folder / "memory.max") or _count(folder / "memory.limit_in_bytes")
        if limit is None or limit >= _NO_LIMIT:
            continue
        used = _count(folder / "memory.current") or _count(folder / "memory.usage_in_bytes") or 0
        for line in _read(folder / "memory.stat").splitlines():
            if line.startswith(("inactive_file ", "total_inactive_file ")):
                used -= int(line.split()[1])  # page cache that is given back at once
                break
        free = min(free, max(limit - used, 0))
    return free


def _processor_share() -> int | None:
    for folder in _groups("cpu"):
        words = _read(folder / "cpu.max").split()
        if len(words) == 2 and words[0].isdigit():
            return -(-int(words[0]) // int(words[1]))
        quota, period = _count(folder / "cpu.cfs_quota_us"), _count(folder / "cpu.cfs_period_us")
        if quota and period and quota > 0:
            return -(-quota // period)
    return None


def _groups(kind: str) -> list[Path]:
    """The control-group folders of this process, innermost first."""
    found: list[Path] = []
    for line in _read("/proc/self/cgroup").splitlines():
        _, kinds, inner = line.split(":", 2)
        if kinds and kind not in kinds.split(","):
            continue
        root = Path("/sys/fs/cgroup") / kind if kinds else Path("/sys/fs/cgroup")
        folder = root / inner.lstrip("/")
        while folder != root.parent:
            if folder.is_dir():
                found.append(folder)
            folder = folder.parent
    return found


def _read(path: str | Path) -> str:
    try:
        return Path(path).read_text(encoding="ascii", errors="replace")
    except OSError:
        return ""


def _count(path: Path) -> int | None:
    text = _read(path).strip()
    return int(text) if text.lstrip("-").isdigit() else None
