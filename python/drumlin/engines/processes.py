"""The engine of processes: workers each read a share of the tasks, and their results are merged in task order.

A task is an aligned run of row numbers and a node of the canonical merge tree, so the bits are those of the threads.
This is the seam at which engines on several machines dock: a worker needs the files, a range of rows and the bytes of
measures, and gives back the bytes of measures. Workers are started afresh ("spawn"): a script that uses them needs
the usual `if __name__ == "__main__":` guard.
"""

from __future__ import annotations

import concurrent.futures
import contextlib
import functools
import multiprocessing
import os
import signal
import threading
from collections import deque
from collections.abc import Iterator, Mapping, Sequence
from types import FrameType
from typing import TYPE_CHECKING, Any

import pyarrow as pa

from drumlin import _core
from drumlin.engines.budget import TASK_ROWS, Work, in_flight_bytes
from drumlin.engines.engine import Engine, MachineLike, ReadingPlan
from drumlin.engines.feeder import WAIT, Feeder, finish_job
from drumlin.engines.progress import Reporter
from drumlin.errors import InternalError, OptionError

if TYPE_CHECKING:
    from drumlin.tables import Table

__all__ = ["ProcessEngine", "run_share"]

"""Rows of a task."""
SHARES_A_WORKER = 4
"""Shares that the tasks are cut into, for each worker: more even out the load, fewer cut fewer row groups."""


class ProcessEngine(Engine):
    """Reads and computes in `machine.thread_count` worker processes of one thread each; only for tables of files.

    Nothing is cached: each pass reads the files again. Memory: the ceiling is divided among the workers.

    Raises OptionError when the rows are not in files, InternalError when a worker dies.
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
        if not table.files or table.row_count is None:
            raise OptionError(
                f"engine='processes' needs rows in Parquet files, but these are in a {table.label}. "
                "Use engine='threads', or write the rows to Parquet first.",
                option="engine",
            )
        if not isinstance(reading, ReadingPlan):
            raise TypeError("worker processes need a ReadingPlan, which can be sent to them")
        self._plan = reading
        self._workers = machine.thread_count
        self._pool: concurrent.futures.ProcessPoolExecutor | None = None
        self._others: set[multiprocessing.process.BaseProcess] = set()

    def _run(self, measures: list[_core.Measure]) -> list[_core.Measure]:
        assert self.table.row_count is not None
        rows = self.table.row_count
        blank = [measure.to_bytes() for measure in measures]
        waiting = deque(_shares(rows, self._workers))
        running: deque[tuple[int, concurrent.futures.Future[Any]]] = deque()
        tree = _core.Tree()
        done = 0
        pool = self._open()
        try:
            while waiting or running:
                while waiting and len(running) < 2 * self._workers:
                    share = waiting.popleft()
                    with _undisturbed():
                        future = pool.submit(run_share, blank, *share)
                    running.append((share[1] - share[0], future))
                size, future = running[0]
                try:
                    results, read = future.result(timeout=WAIT)
                except TimeoutError:
                    if future.done():  # the worker's own TimeoutError
                        raise
                    self.reporter.update(done)
                    continue
                running.popleft()
                for task in results:
                    tree.push([_core.Measure.from_bytes(part) for part in task])
                done += size
                self.bytes_read += read
                self.reporter.update(done)
        except concurrent.futures.process.BrokenProcessPool as error:
            self._stop()
            raise InternalError(
                "A worker process died, perhaps for want of memory. Use fewer threads=, or engine='threads'."
            ) from error
        except BaseException:
            self._stop()
            raise
        self.rows = rows
        return tree.finish() if rows else [_core.Measure.from_bytes(part) for part in blank]

    def _open(self) -> concurrent.futures.ProcessPoolExecutor:
        if self._pool is None:
            self._others = set(multiprocessing.active_children())
            in_flight = in_flight_bytes(self.machine.memory_bytes // self._workers)
            self._pool = concurrent.futures.ProcessPoolExecutor(
                self._workers,
                mp_context=multiprocessing.get_context("spawn"),
                initializer=functools.partial(
                    _begin_worker, self.table, self._plan, self.needed, self.extra, in_flight, os.getpid()
                ),
            )
        return self._pool

    def _stop(self) -> None:
        """End the workers at once, whatever they are doing."""
        pool, self._pool = self._pool, None
        if pool is None:
            return
        tasks, results = getattr(pool, "_call_queue", None), getattr(pool, "_result_queue", None)
        pool.shutdown(wait=False, cancel_futures=True)
        # Every child that came with the pool goes, also one that the pool does not count yet.
        for worker in set(multiprocessing.active_children()) - self._others:
            worker.kill()
        # The pool's threads, for which the interpreter waits at its end, may be in the middle of a message: writing a
        # task that nobody reads any more, or reading a result whose writer is gone. With this side's other ends closed
        # both fail at once, which the pool expects of workers that died.
        if tasks is not None:
            tasks._reader.close()
        if results is not None:
            results._writer.close()

    def close(self) -> None:
        """End the workers."""
        pool, self._pool = self._pool, None
        if pool is not None:
            pool.shutdown(wait=True, cancel_futures=True)
        super().close()


@contextlib.contextmanager
def _undisturbed() -> Iterator[None]:
    """Hold Ctrl-C back for a moment: a worker interrupted in its start would belong to nobody and never end."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    seen: list[tuple[int, FrameType | None]] = []
    before = signal.signal(signal.SIGINT, lambda number, frame: seen.append((number, frame)))
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)
    if seen and callable(before):
        before(*seen[0])


def _shares(rows: int, workers: int) -> list[tuple[int, int]]:
    """Cut the rows into runs of whole tasks, in order."""
    tasks = -(-rows // TASK_ROWS)
    size = max(1, -(-tasks // (workers * SHARES_A_WORKER))) * TASK_ROWS
    return [(first, min(first + size, rows)) for first in range(0, rows, size)]


_worker: tuple[Table, _core.Reading, list[str], dict[str, Any], int]
"""What a worker process works on; set once, when it starts."""


def _begin_worker(
    table: Table, plan: ReadingPlan, needed: list[str], extra: dict[str, Any], in_flight: int, parent: int
) -> None:
    global _worker
    if os.getpid() != parent:
        signal.signal(signal.SIGINT, signal.SIG_IGN)  # the parent sees the interrupt and ends its workers
    _worker = (table, plan.core(), needed, extra, in_flight)


def run_share(blank: list[bytes], first: int, end: int) -> tuple[list[list[bytes]], int]:
    """Read rows `first` to `end` in a worker; return the measures of each task as bytes, and the bytes read."""
    table, reading, needed, extra, in_flight = _worker
    batches = _Cutter(table.scan(needed, [(first, end)], extra=extra))
    results, read = [], 0
    for start in range(first, end, TASK_ROWS):
        measures = [_core.Measure.from_bytes(part) for part in blank]
        job = _core.start_feed(reading, measures, threads=1, first_row=start, in_flight=in_flight)
        feeder = Feeder(job, batches.until(min(start + TASK_ROWS, end)))
        feeder.start()
        finish_job(job, feeder, Reporter(False))
        feeder.join()
        results.append([measure.to_bytes() for measure in job.result()])
        read += feeder.bytes
    return results, read


class _Cutter:
    """Cuts a scan at the borders of tasks, so that a row group across a border is decoded once."""

    def __init__(self, batches: Iterator[tuple[int, pa.RecordBatch]]) -> None:
        self._batches = batches
        self._left: tuple[int, pa.RecordBatch] | None = None

    def until(self, end: int) -> Iterator[tuple[int, pa.RecordBatch]]:
        """Yield the rows before row number `end` that have not been yielded yet."""
        while True:
            item, self._left = self._left or next(self._batches, None), None
            if item is None:
                return
            row, batch = item
            if row >= end:
                self._left = item
                return
            if row + batch.num_rows > end:
                self._left = (end, batch.slice(end - row))
                batch = batch.slice(0, end - row)
            yield row, batch
