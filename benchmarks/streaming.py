"""Streaming: passes over a Parquet file against decoding and computing alone, and `predict` against a plain copy.

The file is made in a temporary folder: the columns of the case and a key, in row groups of `group` rows. Checked before
anything is timed: read again and kept rows give the same bits, and `predict` the reference's log densities.
"""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

import drumlin
from cases import generate
from competitors import finish
from drumlin import _core
from drumlin.engines import Engine, ReadingPlan, open_engine
from drumlin.options import Machine
from drumlin.tables import open_table
from lines import Figure, Line
from scoring import reference
from turns import Settings, interleave

ADDED = ("component", "responsibility", "runner_up", "log_density")
CHECKED = 100_000
"""Rows whose log densities are compared with the reference's."""


class Streamed:
    """A file of `rows` rows of a case, read, computed, scored and copied in every way that is timed."""

    def __init__(self, wanted: dict[str, Any], folder: Path, threads: int) -> None:
        rows, group = wanted["rows"], wanted["group"]
        case = {**wanted["case"], "rows": group}
        data = generate(case)
        k, d = data.means.shape
        self.columns = [f"x{j}" for j in range(d)]
        self.path, self.out, self.copied = (folder / name for name in ("rows.parquet", "out.parquet", "copy.parquet"))
        self.threads = threads
        random = np.random.Generator(np.random.PCG64(rows))
        fields = [pa.field("key", pa.int64()), *(pa.field(name, pa.float64()) for name in self.columns)]
        with pq.ParquetWriter(self.path, pa.schema(fields)) as writer:
            for first in range(0, rows, group):
                count = min(group, rows - first)
                part = data.rows[:count] if first == 0 else data.rows[random.permutation(group)[:count]]
                arrays = [pa.array(np.arange(first, first + count))]
                arrays += [pa.array(np.ascontiguousarray(part[:, j])) for j in range(d)]
                writer.write_table(pa.table(arrays, schema=writer.schema), row_group_size=count)
        self.mixture = drumlin.Mixture(np.full(k, 1 / k), data.means, data.covariances, self.columns)
        self.sums = _core.EmStatistics(self.mixture._inner, self.mixture._scaling)
        self.read_again, self.kept = self._engine(keep_rows=False), self._engine(keep_rows=True)
        likelihoods = {self._pass(engine) for engine in (self.read_again, self.kept, self.kept)}
        if len(likelihoods) != 1 or not self.kept.cached:
            raise SystemExit(f"streaming: passes over read and kept rows differ: {likelihoods}")
        self.predict()
        expected = reference(self.mixture).score_samples(data.rows[: min(CHECKED, group, rows)])
        found = pq.read_table(self.out, columns=["log_density"]).slice(0, len(expected)).column(0).to_numpy()
        if not np.abs(found - expected).max() <= 1e-10 * np.abs(expected).max():
            raise SystemExit("streaming: log densities differ from the reference's")
        with pq.ParquetFile(self.out) as written:
            self.added = [written.read_row_group(g, columns=list(ADDED)) for g in range(written.num_row_groups)]

    def _engine(self, *, keep_rows: bool) -> Engine:
        machine = Machine(threads=self.threads, memory="16 GiB", progress=False)
        table, plan = open_table(str(self.path)), ReadingPlan(tuple(self.columns))
        return open_engine(table, plan, machine, self.columns, keep_rows=keep_rows)

    def _pass(self, engine: Engine) -> float:
        (found,) = engine.run([self.sums])
        assert isinstance(found, _core.EmStatistics)
        return found.log_likelihood

    def works(self) -> dict[str, Callable[[], object]]:
        """What is timed, by name."""
        return {
            "decode": self.decode,
            "compute": self.compute,
            "streamed": lambda: self._pass(self.read_again),
            "kept": lambda: self._pass(self.kept),
            "predict": self.predict,
            "copy": self.copy,
        }

    def decode(self) -> None:
        """Read the columns with pyarrow alone."""
        with pq.ParquetFile(self.path, pre_buffer=False) as file:
            for group in range(file.num_row_groups):
                file.read_row_group(group, columns=self.columns, use_threads=True)

    def compute(self) -> None:
        """Take a pass over the kept rows by the core alone."""
        finish(self.kept._cache.start([self.sums], self.threads))  # type: ignore[attr-defined]

    def predict(self) -> None:
        """Score the file into another one."""
        drumlin.predict(self.path, self.mixture, self.out, replace=True, threads=self.threads, progress=False)

    def copy(self) -> None:
        """Read all columns and write them with four more, with pyarrow alone."""
        with pq.ParquetFile(self.path) as file, pq.ParquetFile(self.out) as written:
            with pq.ParquetWriter(self.copied, written.schema_arrow) as writer:
                for group in range(file.num_row_groups):
                    table = file.read_row_group(group)
                    for name, column in zip(ADDED, self.added[group].columns, strict=True):
                        table = table.append_column(written.schema_arrow.field(name), column)
                    writer.write_table(table.cast(written.schema_arrow), row_group_size=table.num_rows)


def streaming(wanted: dict[str, Any], settings: Settings) -> Iterator[Line]:
    """The lines of streaming, from one file."""
    with tempfile.TemporaryDirectory(prefix="drumlin-bench-") as folder:
        streamed = Streamed(wanted, Path(folder), settings.threads)
        works = streamed.works()
        files = {name: works.pop(name) for name in ("predict", "copy")}
        # A file of this size takes seconds: fewer rounds are as steady.
        seconds = interleave(works, settings) | interleave(files, replace(settings, rounds=min(3, settings.rounds)))
    millions = f"{wanted['rows'] / 1e6:g}M"

    def line(name: str, part: str, whole: float, most: float) -> Line:
        figure = Figure(seconds[part] / whole, "ratio", most, bound="at most")
        return Line(f"{millions} {name}", figure, seconds=seconds[part])

    alone = seconds["decode"] + seconds["compute"]
    yield line("read again, to its parts", "streamed", alone, wanted["streamed_most"])
    yield line("kept, to computing", "kept", seconds["compute"], wanted["kept_most"])
    yield line("predict, to a copy", "predict", seconds["copy"], wanted["predict_most"])
