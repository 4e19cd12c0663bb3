"""The engine of threads: a reader thread decodes, the core's own threads compute, rows that fit are kept."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import pyarrow as pa

from drumlin import _core
from drumlin.engines.budget import TASK_ROWS, Work, plan_memory
from drumlin.engines.engine import Engine, MachineLike, ReadingPlan
from drumlin.engines.feeder import Feeder, finish_job
from drumlin.engines.progress import Reporter
from drumlin.engines.spill import Spill
from drumlin.tables.spool import SpoolTable

if TYPE_CHECKING:
    from drumlin.tables import Table

__all__ = ["ThreadEngine"]

ALL_ROWS = 1 << 62
"""A row number beyond any table's."""

Batches = Iterator[tuple[int, pa.RecordBatch]]


def _is_at_hand(table: Table) -> bool:
    """Whether rows are in memory, or in a temporary file, already."""
    return table.in_memory or isinstance(table, SpoolTable)


class ThreadEngine(Engine):
    """Reads in one helper thread and computes in `machine.thread_count` threads of the core.

    The first read keeps the decoded rows, as far as the memory ceiling allows. Later reads take those from memory, and
    only what comes after them from the source; or from a temporary file, where `machine.spill` names a folder for it.
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
        key = reading.key or () if isinstance(reading, ReadingPlan) else ()
        self.budget = plan_memory(table, self.needed, key, self.work, machine.memory_bytes, machine.thread_count)
        self._core_reading = reading.core() if isinstance(reading, ReadingPlan) else reading
        self._cache: _core.Cache | None = None
        self._spill: Spill | None = None

    def _run(self, measures: list[_core.Measure]) -> list[_core.Measure]:
        threads, cache = self.machine.thread_count, self._cache
        if cache is not None and cache.whole:
            job = cache.start(measures, threads)
            finish_job(job, None, self.reporter)
            self.rows = cache.rows
            return job.result()
        if cache is None and not self._spill:
            batches, job = self._first(measures)
        else:
            batches = self._rest(0 if cache is None else cache.rows)
            in_flight = self.budget.in_flight
            if cache is None:
                job = _core.start_feed(self._core_reading, measures, threads=threads, in_flight=in_flight)
            else:
                job = cache.feed(measures, threads, in_flight)
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
            if self.cached and self._spill is not None:
                self._spill.close()
        return filled

    def _first(self, measures: list[_core.Measure]) -> tuple[Batches, _core.Job]:
        """A read of all rows from the source, which may keep some and write down others."""
        keep = self.budget.keep if self.keep_rows and not self.passes else 0
        batches = self.table.scan(self.needed, extra=self.extra)
        rows = self.table.row_count
        fits = rows is not None and self.budget.keeps(rows)
        if self.machine.spill and self.keep_rows and not (self.passes or fits or _is_at_hand(self.table)):
            tasks = keep // self.budget.width // TASK_ROWS
            # The core counts by batches: it may keep up to two tasks less than this.
            self._spill = Spill(self.machine.spill, self.table.label, max(0, tasks - 2) * TASK_ROWS)
            batches = self._spill.watch(batches)
        job = _core.start_feed(
            self._core_reading,
            measures,
            threads=self.machine.thread_count,
            keep=keep,
            copy=not self.table.in_memory,
            in_flight=self.budget.in_flight,
        )
        return batches, job

    def _rest(self, first: int) -> Batches:
        """The rows from number `first` on, read again."""
        if self._spill is not None and first >= self._spill.start:
            return self._spill.scan(first)
        return self.table.scan(self.needed, [(first, ALL_ROWS)], extra=self.extra)

    def close(self) -> None:
        """Let go of the kept rows."""
        self._cache = None
        if self._spill is not None:
            self._spill.close()
        super().close()
        pa.default_memory_pool().release_unused()
