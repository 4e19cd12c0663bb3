"""The engine of threads: a reader thread decodes, the core's own threads compute, rows that fit are kept."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from drumlin import _core
from drumlin.engines.engine import Engine, MachineLike, ReadingPlan, in_flight_bytes
from drumlin.engines.feeder import Feeder, finish_job
from drumlin.engines.progress import Reporter
from drumlin.tables.numeric import decoded_width, is_feature

if TYPE_CHECKING:
    from drumlin.tables import Table

__all__ = ["ThreadEngine"]

ROW_OVERHEAD = 18
"""Bytes that a cached row takes beside its columns: weight, hash of the key, and marks."""


class ThreadEngine(Engine):
    """Reads in one helper thread and computes in `machine.thread_count` threads of the core.

    The first read whose row count is known keeps the decoded rows when they fit in half of the memory ceiling; later
    reads come from there.
    """

    def __init__(
        self,
        table: Table,
        reading: ReadingPlan | _core.Reading,
        machine: MachineLike,
        needed: Sequence[str],
        extra: Mapping[str, Any] | None,
        reporter: Reporter,
        keep_rows: bool = True,
    ) -> None:
        super().__init__(table, reading, machine, needed, extra, reporter, keep_rows)
        self._core_reading = reading.core() if isinstance(reading, ReadingPlan) else reading
        self._cache: _core.Cache | None = None

    def _run(self, measures: list[_core.Measure]) -> list[_core.Measure]:
        threads = self.machine.thread_count
        if self._cache is not None:
            job = self._cache.start(measures, threads)
            finish_job(job, None, self.reporter)
            self.rows = self._cache.rows
            return job.result()
        keep = self._fits()
        batches = self.table.scan(self.needed, extra=self.extra)
        job = _core.start_feed(
            self._core_reading,
            measures,
            threads=threads,
            cache=keep,
            in_flight=in_flight_bytes(self.machine.memory_bytes),
        )
        feeder = Feeder(job, batches)
        feeder.start()
        finish_job(job, feeder, self.reporter)
        self.rows = feeder.rows
        self.bytes_read += feeder.bytes
        filled = job.result()
        if keep:
            self._cache = job.cache()
            self.cached = self._cache is not None
        return filled

    def _fits(self) -> bool:
        """Return whether the decoded rows fit in half of the memory ceiling, beside what waits in flight."""
        rows = self.table.row_count
        if rows is None or not self.keep_rows:
            return False
        features = [name for name in self.needed if is_feature(self.table.schema.field(name).type)]
        width = decoded_width(self.table.schema, features) + ROW_OVERHEAD
        return rows * width <= self.machine.memory_bytes // 2 - in_flight_bytes(self.machine.memory_bytes)

    def close(self) -> None:
        """Let go of the kept rows."""
        import pyarrow as pa

        self._cache = None
        super().close()
        pa.default_memory_pool().release_unused()
