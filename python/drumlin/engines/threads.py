"""The engine of threads: a reader thread decodes, the core's own threads compute, rows that fit are kept."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from drumlin import _core
from drumlin.engines.budget import Work, plan_memory
from drumlin.engines.engine import Engine, MachineLike, ReadingPlan
from drumlin.engines.feeder import Feeder, finish_job
from drumlin.engines.progress import Reporter

if TYPE_CHECKING:
    from drumlin.tables import Table

__all__ = ["ThreadEngine"]

ALL_ROWS = 1 << 62
"""A row number beyond any table's."""


class ThreadEngine(Engine):
    """Reads in one helper thread and computes in `machine.thread_count` threads of the core.

    The first read keeps the decoded rows, as far as the memory ceiling allows. Later reads take those from memory, and
    only what comes after them from the source.
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
        work: Work | None = None,
    ) -> None:
        super().__init__(table, reading, machine, needed, extra, reporter, keep_rows, work)
        key = isinstance(reading, ReadingPlan) and reading.key is not None
        self.budget = plan_memory(table, self.needed, key, self.work, machine.memory_bytes, machine.thread_count)
        self._core_reading = reading.core() if isinstance(reading, ReadingPlan) else reading
        self._cache: _core.Cache | None = None

    def _run(self, measures: list[_core.Measure]) -> list[_core.Measure]:
        threads, cache = self.machine.thread_count, self._cache
        if cache is not None and cache.whole:
            job = cache.start(measures, threads)
            finish_job(job, None, self.reporter)
            self.rows = cache.rows
            return job.result()
        if cache is not None:
            job = cache.feed(measures, threads, self.budget.in_flight)
            batches = self.table.scan(self.needed, [(cache.rows, ALL_ROWS)], extra=self.extra)
        else:
            keep = self.budget.keep if self.keep_rows and not self.passes else 0
            job = _core.start_feed(
                self._core_reading,
                measures,
                threads=threads,
                keep=keep,
                copy=not self.table.in_memory,
                in_flight=self.budget.in_flight,
            )
            batches = self.table.scan(self.needed, extra=self.extra)
        feeder = Feeder(job, batches)
        feeder.start()
        finish_job(job, feeder, self.reporter)
        self.rows = feeder.rows + (0 if cache is None else cache.rows)
        self.bytes_read += feeder.bytes
        filled = job.result()
        if cache is None:
            self._cache = job.cache()
            if self._cache is not None:
                self.cached, self.kept_rows = self._cache.whole, self._cache.rows
        return filled

    def close(self) -> None:
        """Let go of the kept rows."""
        import pyarrow as pa

        self._cache = None
        super().close()
        pa.default_memory_pool().release_unused()
