"""What a ceiling of memory is spent on: rows in flight, the reader, the computation, and what is left to keep rows."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from drumlin import _core
from drumlin.errors import OptionError
from drumlin.tables.numeric import decoded_width, is_feature

if TYPE_CHECKING:
    from drumlin.tables import Table

__all__ = ["Budget", "Work", "in_flight_bytes", "plan_memory"]

IN_FLIGHT = 128 << 20
"""The most bytes of decoded rows that wait between reading and computing."""

BASE = 148 << 20
"""What pyarrow, its readers and their pools take, the libraries themselves included."""

COLUMN_READER = 3 << 20
"""Compressed and decoded pages of one column while it is read, at most."""

COLUMN_BATCH = 1 << 20
"""A batch of one column, and its copy in another type, where the rows do not come from files."""

ROW_OVERHEAD = 6
"""Bytes that a kept row takes beside its columns: its likely component, marks, and its share of the leaf."""

KEY_BYTES = 8
"""Bytes that a kept row takes more where a key is read: the key's hash."""

TASK_ROWS = _core.TASK_LEAVES * _core.LEAF_ROWS
"""Rows of a task of the core, which are kept together or not at all."""

NODES = 12
"""Sums that a thread holds at a time: nodes of the merge tree, and emptied ones for leaves to come."""


def in_flight_bytes(memory: int) -> int:
    """Return how many bytes of decoded rows may wait under a ceiling of `memory` bytes."""
    return max(1 << 20, min(IN_FLIGHT, memory // 8))


SAMPLES = 10
"""Copies of the sample at its largest: nodes of the tree, the merged one, its values, and those of the tries."""


@dataclass(frozen=True)
class Work:
    """What is computed: `components` of `columns`, `full` structure or not, from a sample of `sample` rows."""

    columns: int
    components: int = 1
    full: bool = True
    sample: int = 0

    def bytes(self, threads: int) -> int:
        """Return the memory that sums, working room and the sample take."""
        d, k = self.columns, self.components
        features = 1 + d + (d * (d + 1) // 2 if self.full else d)
        sums = NODES * 8 * features * (-(-k // 8) * 8)
        room = 8 * _core.LEAF_ROWS * (2 * d + k) + 8 * 400 * (d + 2 * k)
        return threads * (sums + room) + SAMPLES * 8 * self.sample * (d + 2)


@dataclass(frozen=True)
class Budget:
    """A ceiling in bytes and its parts; `keep` is what is left for decoded rows of `width` bytes each."""

    ceiling: int
    in_flight: int
    reading: int
    computing: int
    width: int

    @property
    def keep(self) -> int:
        """Bytes of batches that may be kept, what a kept row takes beside its columns taken off."""
        left = self.ceiling - self.in_flight - self.reading - self.computing
        return max(0, int(left * self.width / (self.width + ROW_OVERHEAD)))

    def keeps(self, rows: int) -> bool:
        """Return whether so many rows can all be kept."""
        return rows * self.width <= self.keep

    def peak(self, rows: int) -> int:
        """Return about how much memory reading and computing `rows` rows several times takes."""
        if not self.keeps(rows):
            return self.ceiling
        return self.reading + self.computing + rows * (self.width + ROW_OVERHEAD)


def plan_memory(
    table: Table, needed: Sequence[str], key: Sequence[str], work: Work, ceiling: int, threads: int
) -> Budget:
    """Return how a ceiling is spent on reading the columns `needed`, `key` among them.

    OptionError when it is too small for the work.
    """
    kept = [name for name in needed if name not in key and is_feature(table.schema.field(name).type)]
    width = max(1, decoded_width(table.schema, kept) + (KEY_BYTES if key else 0))
    in_flight = in_flight_bytes(ceiling)
    reading = BASE + _column_bytes(table) * len(needed)
    computing = work.bytes(threads)
    least = in_flight + reading + computing
    if least > ceiling:
        raise OptionError(
            f"memory={ceiling / 1e6:.0f} MB is too small: {work.components} components of {work.columns} columns need "
            f"about {least / 1e6 + 1:.0f} MB in {threads} threads. Raise memory, or take fewer threads or components.",
            option="memory",
            needed=least,
        )
    return Budget(ceiling, in_flight, reading, computing, width)


def _column_bytes(table: Table) -> int:
    """What reading takes a column: small row groups have no large pages."""
    largest = max((unit.bytes for unit in table.units()), default=0)
    if not largest:
        return COLUMN_BATCH
    return min(COLUMN_READER, 3 * largest // len(table.schema))
