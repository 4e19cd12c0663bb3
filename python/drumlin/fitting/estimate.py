"""What a fit would cost, before it runs: rows, memory, seconds a pass."""

from __future__ import annotations

import itertools
import os
import time
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from drumlin.fitting.fit import Plan, gather, settle, work_of
from drumlin.fitting.source import Source, open_source
from drumlin.mixture import Mixture
from drumlin.model import Model
from drumlin.options import Machine, Progress, Search, remember_given

if TYPE_CHECKING:
    import pyarrow.compute as pc

    from drumlin import _core
    from drumlin.engines.budget import Budget

HEAD_ROWS = 65_536
HEAD_MOST = 64 * HEAD_ROWS
HEAD_SECONDS = 0.4
"""The head of the table is read until this time has passed, but at least and at most so many rows."""


SPILL_SHARE = 0.3
"""What reading a row from the spill file takes of decoding it from Parquet, about."""


@dataclass(frozen=True)
class Estimate:
    """What a fit would cost.

    Attributes:
        rows: rows of the table; None where that is not known before they are read.
        files: files that hold them.
        decoded_bytes: bytes of the columns to read, decoded; None with `rows`.
        kept_rows: rows that stay in memory between passes; None with `rows`.
        rest: where later passes find the other rows: "nothing", "read again", "from the spill file".
        memory_bytes: the growth of resident memory at its largest; None with `rows`.
        ceiling_bytes: the ceiling of memory.
        first_seconds: seconds of the first look, tries on the sample not counted.
        pass_seconds: seconds of a pass after the first.
        passes: the limit of passes; one first look and one closing pass come on top.
        timed_rows: rows that were read to measure the speed.
    """

    rows: int | None
    files: int
    decoded_bytes: int | None
    kept_rows: int | None
    rest: str
    memory_bytes: int | None
    ceiling_bytes: int
    first_seconds: float | None
    pass_seconds: float | None
    passes: int
    timed_rows: int

    def to_dict(self) -> dict[str, Any]:
        """Return the attributes as JSON values."""
        return asdict(self)

    def __str__(self) -> str:
        """The estimate as lines of text."""
        if self.rows is None or self.kept_rows is None:
            return (
                "rows: not known before they are read once\n"
                f"memory: at most {_size(self.ceiling_bytes)} beside what the process holds already"
            )
        where = {"nothing": "", "read again": "; the others are read again in every pass"}.get(
            self.rest, "; the others are kept decoded in a temporary file"
        )
        files = f" in {self.files:,} {'file' if self.files == 1 else 'files'}" if self.files else ""
        kept = "all rows are kept" if self.kept_rows == self.rows else f"{self.kept_rows:,} rows are kept"
        lines = [
            f"rows: {self.rows:,}{files}, {_size(self.decoded_bytes or 0)} decoded",
            f"between passes: {kept} in memory{where}",
            f"memory: about {_size(self.memory_bytes or 0)} beside what the process holds already "
            f"(ceiling {_size(self.ceiling_bytes)})",
        ]
        if self.first_seconds is not None and self.pass_seconds is not None:
            lines.append(
                f"time: about {_seconds(self.first_seconds)} for the first look, then {_seconds(self.pass_seconds)} "
                f"a pass (measured on {self.timed_rows:,} rows)"
            )
            longest = self.first_seconds + (self.passes + 1) * self.pass_seconds
            lines.append(f"passes: at most {self.passes:,}, or {_seconds(longest)}, and one to close")
        return "\n".join(lines)


@remember_given
def estimate(
    rows: Any,
    components: int | Mixture | Model | str | os.PathLike[str],
    *,
    columns: Sequence[str] | str | None = None,
    missing: str = "refuse",
    missing_codes: Mapping[str, Iterable[float] | float] | None = None,
    where: pc.Expression | str | None = None,
    row_weight: str | None = None,
    key: Sequence[str] | str | None = None,
    hold_out: float | pc.Expression | str | None = None,
    structure: str = "full",
    pooled: bool = False,
    floor: float = 1e-8,
    method: str = "em",
    start_from: str = "k-means++",
    tries: int = 8,
    pass_limit: int = 200,
    tolerance: float = 1e-6,
    seed: int = 0,
    precision: str = "double",
    on_interrupt: str = "stop",
    memory: int | str | None = None,
    threads: int | None = None,
    spill: str | os.PathLike[str] | None = None,
    engine: str = "threads",
    progress: Progress = True,
) -> Estimate:
    """Tell what a fit would cost: rows, what is kept in memory, the peak of memory, seconds a pass. Nothing is fitted.

    Arguments: as for `fit`, checked as there.

    Raises what `fit` raises before it reads the rows; StreamError for rows that can be read only once.

    Cost: the head of the table is read (at most 4 million rows, about half a second) and two passes are taken over it.
    Memory is right to about 20 %; times hold for a machine as busy as it is now, and for rows like those at the head.

    >>> import drumlin, numpy
    >>> rows = numpy.random.default_rng(1).normal(size=(5_000, 3))
    >>> found = drumlin.estimate(rows, 4)
    >>> found.rows, found.kept_rows, found.rest, found.decoded_bytes
    (5000, 5000, 'nothing', 120000)
    """
    asked = gather(locals())
    plan = settle(components, asked.reading, asked.shape)
    source = open_source(rows, plan.reading, asked.about, asked.search.seed, fixed=plan.columns)
    try:
        return _estimate(source, plan, asked.search, asked.machine)
    finally:
        source.table.close()


def _estimate(source: Source, plan: Plan, search: Search, machine: Machine) -> Estimate:
    from drumlin.engines.budget import TASK_ROWS, plan_memory

    table, threads = source.table, machine.thread_count
    key, work = source.reading.key or (), work_of(source, plan)
    budget = plan_memory(table, source.needed, key, work, machine.memory_bytes, threads)
    rows = table.row_count
    speed = _measure(source, plan, search, threads, budget)
    if rows is None:
        files, passes = len(table.files), search.pass_limit
        return Estimate(None, files, None, None, "read again", None, budget.ceiling, None, None, passes, speed.rows)
    all_kept = budget.keeps(rows) and machine.engine == "threads"
    kept = 0 if machine.engine != "threads" else budget.keep // budget.width // TASK_ROWS * TASK_ROWS
    kept = rows if all_kept else min(kept, rows)
    again = (rows - kept) * (SPILL_SHARE if machine.spill else 1.0) * speed.decode
    return Estimate(
        rows,
        len(table.files),
        rows * budget.width,
        kept,
        "nothing" if all_kept else "from the spill file" if machine.spill else "read again",
        budget.peak(rows),
        budget.ceiling,
        rows * (speed.decode + speed.look),
        again + rows * speed.compute,
        search.pass_limit,
        speed.rows,
    )


@dataclass(frozen=True)
class _Speed:
    """Seconds a row: decoding, looking at it for the first time, computing; from so many rows."""

    rows: int
    decode: float
    look: float
    compute: float


def _measure(source: Source, plan: Plan, search: Search, threads: int, budget: Budget) -> _Speed:
    """Read the head of the table, look at it, and take two passes over it."""
    from drumlin import _core
    from drumlin.tables.numeric import plain

    d = len(source.columns)
    most = min(HEAD_MOST, max(HEAD_ROWS, budget.keep // budget.width // 2))
    scan: Iterator[Any] = source.table.scan(source.needed, [(0, most)], extra=source.extra)
    next(scan, None)  # opening is not decoding
    batches, count, began = [], 0, time.perf_counter()
    for _, batch in scan:
        batches.append(plain(batch))
        count += batch.num_rows
        if time.perf_counter() - began > HEAD_SECONDS:
            break
    decode = (time.perf_counter() - began) / max(1, count)
    if not batches:  # a single batch was all
        again = source.table.scan(source.needed, extra=source.extra)
        batches = [plain(batch) for _, batch in itertools.islice(again, 1)]
        count = sum(batch.num_rows for batch in batches)
    sample, summary = _core.Sample(d, max(20 * plan.components, 2_000), search.seed), _core.ColumnSummary(d)
    began = time.perf_counter()
    look = _core.start_feed(source.reading.core(), [sample, summary], threads=threads, keep=1 << 62)
    for batch in batches:
        look.push(batch)
    look.end()
    sample, summary = _finished(look)
    looked = (time.perf_counter() - began) / max(1, count)
    cache = look.cache()
    if cache is None or not len(sample.values):
        return _Speed(count, decode, looked, 0.0)
    table = summary.table()
    ends = [np.asarray(table[end], dtype=float) for end in ("least", "most")]
    scaling = _core.robust_scaling(sample.values, sample.weights, *ends)
    mixture = _start(plan, search, sample, scaling, threads)
    taken = []
    for _ in range(2):  # the second finds caches and likely components as later passes do
        began = time.perf_counter()
        _finished(cache.start([_core.EmStatistics(mixture, scaling)], threads))
        taken.append(time.perf_counter() - began)
    return _Speed(count, decode, looked, min(taken) / max(1, count))


def _start(plan: Plan, search: Search, sample: Any, scaling: _core.Scaling, threads: int) -> _core.Mixture:
    """A mixture of the size that is asked for: where the passes would begin, or something like it."""
    from drumlin import _core

    if plan.start is not None:
        return plan.start._inner.reshape(plan.shape.structure, plan.shape.pooled)
    job = _core.start_tries(
        sample.values,
        sample.weights,
        scaling,
        components=min(plan.components, len(sample.values)),
        structure=plan.shape.structure,
        pooled=plan.shape.pooled,
        floor=plan.shape.floor,
        start_from="random-rows",
        tries=1,
        passes=2,
        seed=search.seed,
        threads=threads,
    )
    while not job.wait(0.1):
        pass
    mixture = job.tries()[0][0]
    assert isinstance(mixture, _core.Mixture)
    return mixture


def _finished(job: _core.Job) -> list[Any]:
    while not job.wait(0.1):
        pass
    return list(job.result())


def _size(count: int) -> str:
    return f"{count / 1e9:.1f} GB" if count >= 1e9 else f"{count / 1e6:,.0f} MB"


def _seconds(seconds: float) -> str:
    """Return a time in words.

    >>> _seconds(0.0312), _seconds(7.25), _seconds(200.0), _seconds(9000.0)
    ('0.031 s', '7.2 s', '3.3 min', '2.5 h')
    """
    if seconds < 1.0:
        return f"{seconds:.2g} s"
    if seconds < 120.0:
        return f"{seconds:.1f} s"
    return f"{seconds / 60:.1f} min" if seconds < 7200.0 else f"{seconds / 3600:.1f} h"
