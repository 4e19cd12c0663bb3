"""`drumlin.fit`: the flow from rows to a model."""

from __future__ import annotations

import datetime
import logging
import math
import os
import platform
import time
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from drumlin import checks
from drumlin.errors import DrumlinError, OptionError, name_columns
from drumlin.fitting import em, notes
from drumlin.fitting.first_pass import FirstPass, distinct_rows, first_pass, sample_size
from drumlin.fitting.source import Source, open_source
from drumlin.mixture import Mixture
from drumlin.model import Figures, Model, surviving_names
from drumlin.options import Columns, Machine, Progress, Search, Shape, TableOptions, given, remember_given

if TYPE_CHECKING:
    import pyarrow.compute as pc

    from drumlin import _core
    from drumlin.engines import Work
    from drumlin.engines.engine import Engine
    from drumlin.engines.progress import Reporter

logger = logging.getLogger("drumlin")

SHORT_PASSES = 50
"""Passes of a try on the sample."""


@remember_given
def fit(
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
) -> Model:
    """Fit a mixture of normal components to rows that need not fit in memory.

    Arguments:
        rows: a path, glob, directory or list of them (Parquet); a pyarrow Table or Dataset; a frame;
            any object with `__arrow_c_stream__` that can be read again; a 2-D NumPy array; a callable that opens a
            fresh stream.
        components: how many; or a Mixture, a Model or the path of a model file to start from: then there is one try,
            and columns, how they are read, ids, names and structure come from it unless given.
        columns: names of the columns to fit; needed unless the rows are in memory (then all but key and row_weight).
        missing: "refuse" stops at tables with gaps (null, NaN, a code), "complete-rows" leaves rows with gaps out.
        missing_codes: values that stand for a gap: {column: [values]}, or {"*": [values]} for every column.
        where: only rows for which this is true, on raw values: "weight_kg > 0", or a pyarrow.compute expression.
        row_weight: column that says how many rows a row stands for; 0 is as if the row were absent.
        key: columns that name a row; never fitted. The sample then depends on the keys, not on the order of rows.
        hold_out: share of the rows (0..1), or condition, to leave out of the fit and judge it by.
        structure, pooled: "full", "diagonal" or "spherical" covariances; one for all components when pooled.
        floor: least variance in any direction, as a share of the columns' spread squared; 0 turns it off.
        method: "em", plain exact EM. start_from: "k-means++" or "random-rows". tries: starts tried on the sample.
        pass_limit: most EM passes. tolerance: stop when less is estimated to remain, in nats per row, and no component
            moves; 0 runs to the limit. seed: of sample, tries and hold_out.
        precision: "single" takes the early passes in float32, up to twice as fast where components overlap, and
            the last ones in float64, so that the model meets the same tolerance. Where conditioning forbids float32,
            `notes` says so.
        on_interrupt: "best" makes Ctrl-C during the passes hand back the best mixture whose log-likelihood is known
            (`stopped` is then "interrupt", `icl` None); with "stop", and before a pass is complete, it comes through.
        spill: folder for one temporary file: the rows that `memory` has no room for, decoded, instead of reading them
            again from the source; and those of a stream that can be read only once, or of a query without a repeatable
            order, which are refused without it (a query is taken as it is with a key).
        memory, threads, engine, progress: where it runs. They never change a bit of the model, nor does spill.

    Returns a `Model`: components ordered by weight, largest first; `log_likelihood` is of this very mixture.

    Raises OptionError before data are touched; SchemaError for columns that are missing or hold no numbers; DataError
    for gaps, infinities, bad row weights, or no rows; StreamError for rows that cannot be read twice in the same order;
    TargetError where spill has no room.

    Cost: one pass to look at the columns, one per EM pass, one to close. Memory: a sample of 20,000 to 200,000 rows,
    the statistics (components times columns squared), and batches; decoded columns are kept when the ceiling allows.

    >>> import drumlin, numpy
    >>> rows = numpy.random.default_rng(1).normal(size=(400, 2)) + numpy.repeat([[0.0], [9.0]], 200, axis=0)
    >>> model = drumlin.fit(rows, 2, columns=["length_cm", "width_cm"], progress=False)
    >>> model.columns, model.stopped, model.mixture.weights.round(2).tolist()
    (('length_cm', 'width_cm'), 'tolerance', [0.5, 0.5])

    Source: Dempster, Laird and Rubin (1977); short runs from several starts: Biernacki, Celeux and Govaert (2003).
    """
    asked = gather(locals())
    plan = settle(components, asked.reading, asked.shape)
    began = time.perf_counter()
    source = open_source(
        rows, plan.reading, asked.about, asked.search.seed, fixed=plan.columns, spill=asked.machine.spill
    )
    try:
        return _run(source, plan, asked.about, asked.search, asked.machine, began)
    finally:
        source.table.close()


@dataclass(frozen=True)
class Asked:
    """The options of a fit, checked."""

    reading: Columns
    about: TableOptions
    shape: Shape
    search: Search
    machine: Machine


def gather(written: Mapping[str, Any]) -> Asked:
    """Check the options of a fit, given by name."""

    def group(kind: Any) -> Any:
        return kind(**{one.name: written[one.name] for one in fields(kind) if one.name in written})

    return Asked(group(Columns), group(TableOptions), group(Shape), group(Search), group(Machine))


@dataclass(frozen=True)
class Plan:
    """What is fitted, with what the mixture to start from (if any) has to say."""

    components: int
    reading: Columns
    shape: Shape
    columns: tuple[str, ...] | None = None
    start: Mixture | None = None
    model: Model | None = None


def settle(components: Any, reading: Columns, shape: Shape) -> Plan:
    """Check `components` and the options that depend on it."""
    from drumlin import _core

    if isinstance(components, str | os.PathLike):
        from drumlin.modelfile import load

        components = load(components)
    if not isinstance(components, Mixture | Model):
        if checks.as_whole(components) is None:
            raise checks.refuse(
                "components", components, "give a number, a Mixture, a Model or the path of a model file"
            )
        count = checks.whole(1, _core.MOST_COMPONENTS)("components", components)
        return Plan(int(count), reading, shape)
    written = given()
    for name in ("tries", "start_from"):
        if name in written:
            raise OptionError(
                f"{name} has no effect when components is a mixture to start from: leave it out.", option=name
            )
    model = components if isinstance(components, Model) else None
    start = model.mixture if model is not None else components
    assert isinstance(start, Mixture)
    if start.columns is not None and "columns" in written and reading.columns != start.columns:
        raise OptionError(
            f"columns comes from the mixture to start from ({', '.join(start.columns)}): leave it out.",
            option="columns",
        )
    if start.columns is None and reading.columns is not None and len(reading.columns) != start.dimensions:
        raise OptionError(
            f"columns names {len(reading.columns)} columns, the mixture to start from has {start.dimensions}.",
            option="columns",
        )
    if model is not None:
        reading = replace(
            reading,
            missing=reading.missing if "missing" in written else model.missing,
            missing_codes=reading.missing_codes if "missing_codes" in written else dict(model.missing_codes) or None,
        )
    shape = replace(
        shape,
        structure=shape.structure if "structure" in written else start.structure,
        pooled=shape.pooled if "pooled" in written else start.pooled,
    )
    columns = start.columns if start.columns is not None else reading.columns
    return Plan(start.components, reading, shape, columns, start, model)


def work_of(source: Source, plan: Plan) -> Work:
    """Return what a fit computes, for the account of memory."""
    from drumlin.engines import Work

    columns = len(source.columns)
    return Work(columns, plan.components, plan.shape.structure == "full", sample_size(plan.components, columns))


def _run(source: Source, plan: Plan, about: TableOptions, search: Search, machine: Machine, began: float) -> Model:
    from drumlin.engines import open_engine
    from drumlin.engines.progress import Reporter

    if plan.start is not None and plan.start.dimensions != len(source.columns):
        raise OptionError(
            f"The mixture to start from has {plan.start.dimensions} columns without names, the rows have "
            f"{len(source.columns)}. Name its columns with columns=.",
            option="components",
        )
    reporter = Reporter(machine.progress)
    work = work_of(source, plan)
    engine = open_engine(
        source.table,
        source.reading,
        machine,
        list(source.needed),
        extra=dict(source.extra),
        progress=reporter,
        work=work,
    )
    try:
        return _fit_with(engine, reporter, source, plan, about, search, machine, began)
    except DrumlinError as error:
        renamed = name_columns(error, source.columns)
        if renamed is error:
            raise
        raise renamed from error.__cause__
    finally:
        engine.close()


def _fit_with(
    engine: Engine,
    reporter: Reporter,
    source: Source,
    plan: Plan,
    about: TableOptions,
    search: Search,
    machine: Machine,
    began: float,
) -> Model:

    columns, shape = source.columns, plan.shape
    label = source.table.label
    look = first_pass(engine, columns, plan.components, search.seed, plan.reading.missing, label)
    told = [*source.table.notes, *notes.row_notes(look, columns)]
    told += notes.column_notes(look, columns, source.table.schema, source.codes)
    levels: list[float] = []
    if plan.start is None:
        start, levels, more = _best_try(look, plan, search, machine, reporter)
        told += more
    else:
        start = plan.start._inner.reshape(shape.structure, shape.pooled)
    wide = notes.too_wide(look, columns) if search.precision == "single" else []
    told += wide
    passes = em.run_passes(
        engine,
        start,
        look.scaling,
        structure=shape.structure,
        pooled=shape.pooled,
        floor=shape.floor,
        tolerance=search.tolerance,
        pass_limit=search.pass_limit,
        single=search.precision == "single" and not wide,
        report=lambda step, gain: _report(reporter, step, gain),
        keep_on_interrupt=search.on_interrupt == "best",
    )
    reporter.facts()
    passes, figures = _judge(engine, passes, look.scaling, about, search)
    order = em.order_by_weight(passes.mixture)
    core = passes.mixture.reorder(order)
    old_ids = None if plan.start is None else plan.start.ids.tolist()
    ids = list(range(len(order))) if old_ids is None else [old_ids[passes.survivors[at]] for at in order]
    told += notes.event_notes(passes, old_ids)
    told += notes.obstacle_notes(passes, old_ids)
    told += notes.direction_notes(core, ids, look.scaling, columns, shape.floor)
    meaning = notes.stopped_in_words(passes.stopped, passes.trace, search.tolerance)
    if passes.stopped != "tolerance":
        told.append(meaning)
    for note in told[len(source.table.notes) :]:  # the table has logged its own
        logger.info("%s", note)
    record = _record(source, plan, about, search, machine, engine, look)
    record |= {
        "trace": passes.trace,
        "stopped": passes.stopped,
        "stopped_in_words": meaning,
        "passes": len(passes.trace),
        "tries": levels,
        "seconds": round(time.perf_counter() - began, 3),
        "notes": told,
    }
    names: dict[int, str] = {}
    next_id = len(order) if plan.start is None else max(plan.start.ids.tolist()) + 1
    if plan.model is not None:
        names, next_id = surviving_names(plan.model.names, ids), plan.model._next_id
    mixture = Mixture._of(core, columns, ids, look.scaling)
    return Model(mixture, plan.reading.missing, source.codes, figures, names, record, next_id)


def _best_try(
    look: FirstPass, plan: Plan, search: Search, machine: Machine, reporter: Reporter
) -> tuple[_core.Mixture, list[float], list[str]]:
    """Try several starts on the sample; return the best, the log-likelihoods per row of all, and notes."""
    from drumlin import _core

    told = []
    count = distinct_rows(look.values, look.weights, plan.components)
    if count < plan.components:
        where = "the rows hold" if look.whole else f"the sample of {len(look.weights):,} rows holds"
        told.append(f"components was lowered from {plan.components} to {count}: {where} only {count} distinct rows.")
    tries = search.tries if count > 1 else 1
    job = _core.start_tries(
        look.values,
        look.weights,
        look.scaling,
        components=count,
        structure=plan.shape.structure,
        pooled=plan.shape.pooled,
        floor=plan.shape.floor,
        start_from=search.start_from,
        tries=tries,
        passes=SHORT_PASSES,
        seed=search.seed,
        threads=machine.thread_count,
    )
    try:
        while not job.wait(0.1):
            reporter.pulse(f"{tries} tries on the sample")
    except BaseException:
        job.cancel()
        raise
    found = job.tries()
    levels = [float(level) for _, level, _ in found]
    best = max(range(len(found)), key=lambda at: levels[at] if math.isfinite(levels[at]) else -math.inf)
    if tries > 1:
        told.append(notes.tries_note(levels))
    return found[best][0], levels, told


def _judge(
    engine: Engine, passes: em.Passes, scaling: _core.Scaling, about: TableOptions, search: Search
) -> tuple[em.Passes, Figures]:
    """Give the figures of the mixture that is handed out: by a closing pass, or after an interrupt as known already."""
    if passes.stopped != "interrupt":
        try:
            core = passes.mixture.reorder(em.order_by_weight(passes.mixture))
            return passes, _close(engine, core, scaling, about)
        except KeyboardInterrupt:
            if search.on_interrupt != "best" or passes.judged is None:
                raise
            passes = passes.step_back()
    known = passes.judged
    assert known is not None
    return passes, Figures(known.rows, known.weight, known.log_likelihood, None)


def _close(engine: Engine, core: _core.Mixture, scaling: _core.Scaling, about: TableOptions) -> Figures:
    """Read the rows once more: the log-likelihood and entropy of the mixture that is handed out."""
    from drumlin import _core

    parts = ["fit", "held"] if about.hold_out is not None else ["fit"]
    scores = engine.run([_core.Scores(core, scaling, part) for part in parts], "closing pass")
    fitted = scores[0]
    assert isinstance(fitted, _core.Scores)
    figures = Figures(fitted.rows, fitted.weight, fitted.log_likelihood, fitted.entropy)
    if len(scores) > 1 and isinstance(scores[1], _core.Scores):
        held = scores[1]
        figures = replace(
            figures, held_rows=held.rows, held_weight=held.weight, held_log_likelihood=held.log_likelihood
        )
    return figures


def _report(reporter: Reporter, step: Mapping[str, Any], gain: float | None) -> None:
    """Tell the end of a pass: to the log, and to the line of the pass that follows."""
    logger.debug("pass %d: %.9g nats per row", step["pass"], step["per_row"])
    reporter.facts(passes=step["pass"] + 1, gain=gain)


def _record(
    source: Source,
    plan: Plan,
    about: TableOptions,
    search: Search,
    machine: Machine,
    engine: Engine,
    look: FirstPass,
) -> dict[str, Any]:
    """How the model came about, as JSON values."""
    import pyarrow

    import drumlin
    from drumlin import _core

    history: list[Any] = []
    if plan.model is not None:
        before = plan.model.record
        history = [*before.get("history", []), {"checksum": plan.model.checksum, "created": before.get("created")}]
    options = plan.reading.as_record() | about.as_record() | plan.shape.as_record() | search.as_record()
    where = {"memory": machine.memory_bytes, "threads": machine.thread_count, "engine": machine.engine}
    summary = look.summary
    per_column = {
        name: {
            "type": str(source.table.schema.field(name).type),
            **{entry: _finite(summary[entry][at]) for entry in ("present", "nulls", "nans", "codes")},
            **{entry: _finite(summary[entry][at]) for entry in ("least", "most", "mean", "variance")},
        }
        for at, name in enumerate(source.columns)
    }
    return {
        "options": options | {"columns": list(source.columns), "components": plan.components},
        "machine": where,
        "data": {
            "rows": int(summary["rows"]),
            "kept": int(summary["kept"]),
            "complete": int(summary["complete"]),
            "label": source.table.label,
            "files": len(source.table.files),
            "fingerprint": source.table.fingerprint,
            "columns": per_column,
        },
        "reads": engine.passes,
        "history": history,
        "created": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
        "versions": {
            "drumlin": drumlin.__version__,
            "python": platform.python_version(),
            "numpy": np.__version__,
            "pyarrow": pyarrow.__version__,
            "kernel": _core.kernel_tier(),
        },
    }


def _finite(value: Any) -> int | float | None:
    if isinstance(value, int | np.integer):
        return int(value)
    return float(value) if math.isfinite(float(value)) else None
