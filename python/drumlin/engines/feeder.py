"""The reader: a helper thread that decodes batches and hands them to a job of the core."""

from __future__ import annotations

import threading
from collections.abc import Iterator

import pyarrow as pa

from drumlin import _core
from drumlin.engines.progress import Reporter
from drumlin.tables.numeric import plain

__all__ = ["Feeder", "finish_job"]

WAIT = 0.1
"""Seconds between two looks of the main thread at progress and signals."""


class Feeder(threading.Thread):
    """Pushes batches until they end, the job has failed or was cancelled, or the source raises.

    Attributes: `error`, what the source raised, as it was; `rows` and `bytes` pushed so far. A daemon: a reader that
    hangs in a decoder never keeps the process alive.
    """

    def __init__(self, job: _core.Job, batches: Iterator[tuple[int, pa.RecordBatch]]) -> None:
        super().__init__(name="drumlin-reader", daemon=True)
        self._job, self._batches = job, batches
        self.error: BaseException | None = None
        self.rows = 0
        self.bytes = 0

    def run(self) -> None:
        """Do the reading; never raises."""
        try:
            for _, batch in self._batches:
                if not self._job.push(plain(batch)):
                    break
                self.rows += batch.num_rows
                self.bytes += batch.nbytes
            else:
                self._job.end()
        except BaseException as error:
            self.error = error
            self._job.cancel()
        finally:
            close = getattr(self._batches, "close", None)
            if close is not None:
                close()
            del self._batches


def finish_job(job: _core.Job, feeder: Feeder | None, reporter: Reporter) -> None:
    """Wait until a job is done, showing progress. An interrupt or an error cancels the job and passes at once.

    What the source raised goes before what the core says about it.
    """
    try:
        while not job.wait(WAIT):
            if feeder is not None and feeder.error is not None:
                break
            reporter.update(job.rows_done)
    except Exception:
        job.cancel()
        if feeder is not None:
            feeder.join(timeout=WAIT)
            if feeder.error is not None:
                raise feeder.error from None
        raise
    except BaseException:
        job.cancel()
        if feeder is not None:
            # A reader inside the core when the interpreter ends would bring the process down: let it come out.
            feeder.join(timeout=WAIT)
        raise
    if feeder is not None:
        if feeder.error is None:
            feeder.join(timeout=10 * WAIT)
        if feeder.error is not None:
            raise feeder.error
    reporter.update(job.rows_done)
