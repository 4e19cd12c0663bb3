"""`drumlin.predict`: every row with its component, as a stream or in files."""

from __future__ import annotations

import contextlib
import os
import time
from collections.abc import Generator, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from drumlin import checks
from drumlin.errors import OptionError, SchemaError
from drumlin.fitting.source import codes_per_column
from drumlin.mixture import Mixture
from drumlin.model import Model
from drumlin.options import Columns, Machine, Progress, TableOptions, Writing, given, remember_given
from drumlin.predicting.summary import Summary, Tally

if TYPE_CHECKING:
    import pyarrow as pa
    import pyarrow.compute as pc

    from drumlin.predicting.scoring import Scored, Scoring
    from drumlin.tables import Table


@remember_given
def predict(
    rows: Any,
    model: Model | Mixture | str | os.PathLike[str],
    to: str | os.PathLike[str] | None = None,
    *,
    outputs: Sequence[str] | str = (),
    prefix: str = "",
    replace: bool = False,
    carry: Sequence[str] | str = "all",
    missing: str | None = None,
    where: pc.Expression | str | None = None,
    key: Sequence[str] | str | None = None,
    memory: int | str | None = None,
    threads: int | None = None,
    progress: Progress = True,
) -> pa.RecordBatchReader | Summary:
    """Give every row its likeliest component, how sure that is, and how unusual the row is.

    Added columns: `component` (int32 id), `responsibility` (float32) of that component, `runner_up` (int32 id; null
    with one component), `log_density` (float64, nats). A row with a gap has nulls there, when gaps are not refused.

    Arguments:
        rows: as for `fit`; a stream that can be read only once is fine. Columns are found by name.
        model: a Model, a Mixture with column names, or the path of a model file.
        to: None for an Arrow stream; a file name; or a folder (ends in a slash, exists, or stands for several source
            files), which gets one file per source file. Row groups, codecs and metadata of source files are kept.
        outputs: "responsibilities" adds all components' responsibilities (fixed-size list of float32).
        prefix: put before the names of the added columns. replace: replace files that exist.
        carry: "all", or the columns to carry along; keys always are.
        missing: as in the model unless given: "refuse" or "complete-rows".
        where: only rows for which this is true; the others are left out of the result.
        key: columns that name a row. They are proven equal in the written file.
        memory, threads, progress: where it runs; no effect on the result.

    Returns a `pyarrow.RecordBatchReader` when `to` is None, else a `Summary`. Files are written under a hidden name and
    renamed when row counts and keys have been proven; on any error, Ctrl-C included, nothing is left behind.

    Raises SchemaError for a missing column or a clash of names; DataError for infinities and refused gaps; TargetError
    for a target that exists or cannot be written; OptionError and SourceError as everywhere.

    Cost: one pass. Memory: a few batches and two row groups of at most 64 MB each, less under a low ceiling; about
    300 MB in all.

    >>> import drumlin, numpy
    >>> rows = numpy.random.default_rng(1).normal(size=(400, 2)) + numpy.repeat([[0.0], [9.0]], 200, axis=0)
    >>> model = drumlin.fit(rows, 2, progress=False)
    >>> drumlin.predict(rows, model).read_all().column_names
    ['x0', 'x1', 'component', 'responsibility', 'runner_up', 'log_density']
    """
    writing = Writing(outputs=outputs, prefix=prefix, replace=replace, carry=carry)  # type: ignore[arg-type]
    about = TableOptions(where=where, key=key)  # type: ignore[arg-type]
    machine = Machine(memory=memory, threads=threads, progress=progress)
    if missing is not None:
        missing = Columns(missing=missing).missing
    target = _checked_target(to)
    mixture, found, codes = open_model(model)
    began = time.perf_counter()

    from drumlin.predicting.scoring import Scoring
    from drumlin.tables import open_table

    names = _names_for_array(rows, mixture)
    table = open_table(rows, where=about.where, names=names)
    scoring = Scoring(
        table,
        mixture,
        {name: list(listed) for name, listed in codes.items()},
        refuse_gaps=(missing or found) == "refuse",
        writing=writing,
        key=about.key or (),
        threads=machine.thread_count,
    )
    if target is None:
        import pyarrow as pa

        stream = (scored.batch for scored in _scored(table, scoring) if scored.batch.num_rows)
        return pa.RecordBatchReader.from_batches(scoring.schema, stream)
    return _write(table, scoring, mixture, target, about.key or (), writing.replace, machine, began)


def _checked_target(to: Any) -> str | None:
    if to is None:
        if "replace" in given():
            raise OptionError("replace has no effect without a target: leave it out, or say to=.", option="replace")
        return None
    if not isinstance(to, str | os.PathLike):
        raise checks.refuse("to", to, "give a path, or None for an Arrow stream")
    path = os.fspath(to)
    if not isinstance(path, str) or not path:
        raise checks.refuse("to", to, "give a path, or None for an Arrow stream")
    if "://" in path:
        raise checks.refuse("to", to, "this version writes to local files only; write there, and copy the files")
    return path


def open_model(model: Any) -> tuple[Mixture, str, dict[str, tuple[float, ...]]]:
    """The mixture, how gaps are read, and the codes that stand for a gap."""
    if isinstance(model, str | os.PathLike):
        from drumlin.modelfile import load

        model = load(model)
    if isinstance(model, Model):
        return model.mixture, model.missing, codes_per_column(model.missing_codes, model.columns)
    if isinstance(model, Mixture):
        return model, "refuse", {}
    raise checks.refuse("model", model, "give a Model, a Mixture or the path of a model file")


def _names_for_array(rows: Any, mixture: Mixture) -> list[str] | None:
    if not isinstance(rows, np.ndarray) or mixture.columns is None or rows.ndim != 2:
        return None
    if rows.shape[1] != mixture.dimensions:
        raise SchemaError(
            f"rows have {rows.shape[1]} columns, the model has {mixture.dimensions}: {', '.join(mixture.columns)}."
        )
    return list(mixture.columns)


def _scored(table: Table, scoring: Scoring) -> Generator[Scored, None, None]:
    """Score the rows batch by batch; the next ones are decoded meanwhile."""
    from drumlin.predicting.scoring import locator
    from drumlin.tables.ahead import ReadAhead

    locate = locator(table)
    ahead = ReadAhead(scoring.open())
    try:
        for first_row, batch in ahead:
            yield scoring.score(first_row, batch, locate)
    finally:
        ahead.close()


def _write(
    table: Table,
    scoring: Scoring,
    mixture: Mixture,
    to: str,
    key: Sequence[str],
    replace: bool,
    machine: Machine,
    began: float,
) -> Summary:
    from drumlin.engines.progress import Reporter
    from drumlin.predicting.target import Target, plan_target, room_for_groups

    names = scoring.schema.names
    added = [names[at] for at in scoring.added]
    group = room_for_groups(machine.memory_bytes, len(scoring.schema), asked=machine.memory is not None)
    target = Target(plan_target(to, table, replace), table, scoring.schema, key, added, group)
    tally = Tally(mixture.ids.tolist(), scoring.added[0])
    reporter = Reporter(machine.progress)
    reporter.start("predict", table.row_count)
    try:
        with contextlib.closing(_scored(table, scoring)) as results:
            for scored in results:
                target.write(scored.first_row, scored.read, scored.batch)
                tally.add(scored.read, scored.batch)
                reporter.update(tally.read)
        files = target.finish()
        reporter.finish()
    except BaseException:
        target.abandon()
        raise
    finally:
        reporter.close()
    return tally.summary(files, time.perf_counter() - began)
