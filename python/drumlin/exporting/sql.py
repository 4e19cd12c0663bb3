"""A mixture as one DuckDB query."""

from __future__ import annotations

import math
import os
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from drumlin.errors import OptionError
from drumlin.exporting.parts import CUT, FLOOR, Part, balanced, require_size, take_apart

if TYPE_CHECKING:
    from drumlin.mixture import Mixture

__all__ = ["identifier", "query", "source", "text"]

_OWN = "__drumlin_"


def query(mixture: Mixture, source: str, codes: Mapping[str, Sequence[float]] | None = None, prefix: str = "") -> str:
    """Return a query that selects all columns of `source` (SQL text), and the four that `predict` adds.

    Inner queries compute what outer ones use, so that nothing is computed twice; sums are balanced, so that none nests
    deep.
    """
    if mixture.columns is None:
        raise OptionError("This mixture has no column names: give columns= when making it.", option="columns")
    parts = take_apart(mixture)
    require_size(parts, "The SQL")
    count = range(len(parts))
    logs, shares = [f"{_OWN}l{k}" for k in count], [f"{_OWN}e{k}" for k in count]
    usable, most, best, total, second = (_OWN + name for name in ("usable", "most", "best", "total", "second"))
    x = [f"CAST({identifier(name)} AS DOUBLE)" for name in mixture.columns]
    stages = [
        {usable: _usable(mixture.columns, x, codes or {})}
        | {log: _log_density(part, x) for log, part in zip(logs, parts, strict=True)},
        {most: _greatest(logs)},
        {share: _share(f"{log} - {most}") for log, share in zip(logs, shares, strict=True)},
        # The best has the share exp(0), which is 1; of several the first counts.
        {best: _first([f"{share} = 1e0" for share in shares], count), total: balanced(shares, _sum)},
        {second: _greatest([f"CASE WHEN {best} = {k} THEN -1e0 ELSE {share} END" for k, share in enumerate(shares)])},
    ]
    inner = source
    for stage in stages:
        inner = f"(SELECT *, {', '.join(f'{value} AS {name}' for name, value in stage.items())} FROM {inner})"
    ids = [part.id for part in parts]
    others = [f"{best} <> {k} AND {share} = {second}" for k, share in enumerate(shares)]
    told = {
        "component": (_first([f"{best} = {k}" for k in count], ids), "INTEGER"),
        "responsibility": (f"1e0 / {total}", "FLOAT"),
        "runner_up": (_first(others, ids) if len(parts) > 1 else "NULL", "INTEGER"),
        "log_density": (f"{most} + ln({total})", "DOUBLE"),
    }
    added = [
        f"CASE WHEN {usable} THEN CAST({value} AS {kind}) END AS {identifier(prefix + name)}"
        for name, (value, kind) in told.items()
    ]
    own = [usable, *logs, most, *shares, best, total, second]
    return f"SELECT * EXCLUDE ({', '.join(own)}), {', '.join(added)}\nFROM {inner}\n"


def source(table: str | Sequence[str] = "rows", files: str | Sequence[str] | None = None) -> str:
    """Return what a query reads from: a table by its name, or by its names from the catalog down, or Parquet files.

    >>> print(source(["depot", "scans"]), source(files="scans/*.parquet"))
    "depot"."scans" read_parquet(['scans/*.parquet'])
    """
    if files is not None:
        paths = [os.fspath(files)] if isinstance(files, str | os.PathLike) else [os.fspath(path) for path in files]
        if not paths:
            raise OptionError("files is empty: name at least one Parquet file, or give table=.", option="files")
        return f"read_parquet([{', '.join(map(text, paths))}])"
    names = [table] if isinstance(table, str) else list(table)
    if not names or not all(isinstance(name, str) and name for name in names):
        raise OptionError(
            f"table={table!r} is not a name: give text, or several from the catalog down.", option="table"
        )
    return ".".join(map(identifier, names))


def identifier(name: str) -> str:
    """Return a name as SQL writes it.

    >>> print(identifier('weight "net" kg'))
    "weight ""net"" kg"
    """
    return '"' + name.replace('"', '""') + '"'


def text(value: str) -> str:
    """Return a string as SQL writes it.

    >>> print(text("the depot's scans.parquet"))
    'the depot''s scans.parquet'
    """
    return "'" + value.replace("'", "''") + "'"


def _number(value: float) -> str:
    """A float with an exponent: without one DuckDB takes it for a decimal."""
    written = repr(float(value))
    return written if "e" in written else written + "e0"


def _minus(value: float) -> str:
    return f"- {_number(value)}" if math.copysign(1.0, value) > 0.0 else f"+ {_number(-value)}"


def _sum(left: str, right: str) -> str:
    return f"({left} + {right})"


def _greatest(values: Sequence[str]) -> str:
    return f"greatest({', '.join(values)})" if len(values) > 1 else values[0]


def _log_density(part: Part, x: Sequence[str]) -> str:
    shifted = [f"({column} {_minus(mean)})" for column, mean in zip(x, part.mean, strict=True)]
    squares = []
    for row in part.factor:
        y = balanced([f"{shifted[j]} * {_bracketed(number)}" for j, number in row if number != 0.0], _sum)
        squares.append(f"pow({y}, 2)")
    return f"greatest({_number(part.constant)} - {balanced(squares, _sum)}, {_number(FLOOR)})"


def _bracketed(value: float) -> str:
    return f"({_number(value)})" if value < 0.0 else _number(value)


def _share(below: str) -> str:
    return f"CASE WHEN {below} >= {_number(-CUT)} THEN exp({below}) ELSE 0e0 END"


def _first(conditions: Sequence[str], values: Sequence[int]) -> str:
    cases = " ".join(f"WHEN {one} THEN {value}" for one, value in zip(conditions, values, strict=True))
    return f"CASE {cases} END"


def _usable(columns: Sequence[str], x: Sequence[str], codes: Mapping[str, Sequence[float]]) -> str:
    """Whether a row has all its values: no null, NaN, infinity or code."""
    tests = []
    for name, column in zip(columns, x, strict=True):
        told = text(f"column {name} holds text, not numbers")
        tests.append(
            f"CASE WHEN typeof({identifier(name)}) = 'VARCHAR' THEN error({told}) ELSE {column} IS NOT NULL END"
        )
        tests.append(f"isfinite({column})")
        tests += [f"{column} <> {_number(code)}" for code in codes.get(name, ())]
    return f"coalesce({' AND '.join(tests)}, false)"
