"""The engine: what fitting may ask of the machine."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from types import TracebackType
from typing import TYPE_CHECKING, Any, Protocol

from drumlin import _core
from drumlin.engines.budget import Work
from drumlin.engines.progress import Reporter
from drumlin.errors import StreamError

if TYPE_CHECKING:
    from drumlin.tables import Table

__all__ = ["Engine", "MachineLike", "ReadingPlan", "open_engine"]


class MachineLike(Protocol):
    """The part of the option group `Machine` that engines use."""

    @property
    def memory_bytes(self) -> int:
        """The ceiling of memory in bytes."""

    @property
    def thread_count(self) -> int:
        """Threads that compute, or worker processes."""

    @property
    def spill(self) -> str | None:
        """A folder for rows that are read again and do not fit in memory."""

    @property
    def engine(self) -> str:
        """ "threads" or "processes"."""


@dataclass(frozen=True)
class ReadingPlan:
    """The arguments of `_core.Reading`, kept so that they can be sent to other processes. `core` makes the Reading."""

    columns: tuple[str, ...]
    weight: str | None = None
    keep: str | None = None
    held: str | None = None
    held_share: float = 0.0
    held_seed: int = 0
    key: tuple[str, ...] | None = None
    codes: Mapping[str, Sequence[float]] | None = field(default=None)

    def core(self) -> _core.Reading:
        """Return the reading as the core takes it."""
        return _core.Reading(
            list(self.columns),
            weight=self.weight,
            keep=self.keep,
            held=self.held,
            held_share=self.held_share,
            held_seed=self.held_seed,
            key=None if self.key is None else list(self.key),
            codes=None if self.codes is None else {name: list(values) for name, values in self.codes.items()},
        )


class Engine(ABC):
    """Runs measures over the rows of a table, one read for any number of them. Use as a context manager, or `close`.

    Attributes:
        passes: reads of the rows so far, from the source or from the cache.
        rows: rows met by the latest read, before any filter.
        cached: whether further reads come from memory alone.
        kept_rows: rows that further reads find in memory: the first ones.
        bytes_read: decoded bytes that were read from the source so far.
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
        self.table = table
        self.reading = reading
        self.machine = machine
        self.needed = list(dict.fromkeys(needed))
        self.extra = dict(extra or {})
        self.reporter = reporter
        self.keep_rows = keep_rows
        self.work = Work(len(self.needed)) if work is None else work
        self.passes = 0
        self.rows = 0
        self.cached = False
        self.kept_rows = 0
        self.bytes_read = 0
        table.require(self.needed)

    def run(self, measures: Sequence[_core.Measure], what: str = "reading") -> list[_core.Measure]:
        """Read the rows once and return the measures, filled, in the order given. `what` names the pass in the
        progress.

        Raises DataError and its like from the core, SourceError from files, StreamError when rows that can be read only
        once are read again, and whatever the caller's own generator raised, as it was. KeyboardInterrupt comes
        through within a fraction of a second; the reader is then left to end by itself.
        """
        if self.passes and not self.cached and not self.table.rereadable:
            raise StreamError(
                f"{self.table.label} gives its rows only once, but they are needed several times. Give a Parquet path, "
                "a table in memory (reader.read_all()), or a callable that opens a fresh stream on every call."
            )
        self.reporter.start(what, self.table.row_count)
        try:
            filled = self._run(list(measures))
        finally:
            self.reporter.finish()
        self.passes += 1
        return filled

    @abstractmethod
    def _run(self, measures: list[_core.Measure]) -> list[_core.Measure]: ...

    def close(self) -> None:
        """Give back memory and workers, and clear the progress line. The engine cannot be used after."""
        self.cached, self.kept_rows = False, 0
        self.reporter.close()

    def __enter__(self) -> Engine:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def open_engine(
    table: Table,
    reading: ReadingPlan | _core.Reading,
    machine: MachineLike,
    needed: Sequence[str],
    extra: Mapping[str, Any] | None = None,
    progress: Reporter | None = None,
    *,
    keep_rows: bool = True,
    work: Work | None = None,
) -> Engine:
    """Return the engine that `machine.engine` names.

    Args:
        table: the rows.
        reading: how the columns of a batch are read; a `ReadingPlan` where worker processes are to be possible.
        machine: memory in bytes, threads, engine. None of them changes a bit of the result.
        needed: the columns to read: features, row weight, keys.
        extra: boolean expressions by the name of the column they become, such as the part held out.
        progress: where progress is shown.
        keep_rows: whether decoded rows may be kept in memory for later reads; False where there is but one read.
        work: what is computed, for the account of memory.

    Raises OptionError when `machine.memory_bytes` is too small for the work; SchemaError when a column is missing.

    >>> import numpy as np
    >>> from drumlin import _core
    >>> from drumlin.engines import ReadingPlan, open_engine
    >>> from drumlin.options import Machine
    >>> from drumlin.tables import open_table
    >>> table = open_table(np.arange(6.0).reshape(3, 2))
    >>> with open_engine(table, ReadingPlan(("x0", "x1")), Machine(), ["x0", "x1"]) as engine:
    ...     (summary,) = engine.run([_core.ColumnSummary(2)])
    >>> summary.table()["mean"]
    [2.0, 3.0]
    """
    reporter = Reporter(False) if progress is None else progress
    if machine.engine == "processes":
        from drumlin.engines.processes import ProcessEngine

        return ProcessEngine(table, reading, machine, needed, extra, reporter, keep_rows, work)
    from drumlin.engines.threads import ThreadEngine

    return ThreadEngine(table, reading, machine, needed, extra, reporter, keep_rows, work)
