"""A mixture as Polars expressions, without a Python callback."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from functools import reduce
from operator import add, or_
from typing import TYPE_CHECKING

from drumlin.errors import OptionError
from drumlin.exporting.parts import CUT, FLOOR, Part, balanced, require_size, take_apart

if TYPE_CHECKING:
    import polars as pl

    from drumlin.mixture import Mixture

__all__ = ["NAME", "build", "expression"]

NAME = "drumlin"
"""The name of the struct, behind the prefix."""


def expression(mixture: Mixture, codes: Mapping[str, Sequence[float]] | None = None, prefix: str = "") -> pl.Expr:
    """Return one expression over the mixture's columns: a struct of the four columns that `predict` adds."""
    if mixture.columns is None:
        raise OptionError("This mixture has no column names: give columns= when making it.", option="columns")
    parts = take_apart(mixture)
    require_size(parts, "Polars expressions")
    return build(parts, mixture.columns, codes or {}, prefix)


def build(parts: Sequence[Part], columns: Sequence[str], codes: Mapping[str, Sequence[float]], prefix: str) -> pl.Expr:
    """Each stage is a struct with the fields of the one before and new ones, so that nothing is computed twice."""
    import polars as pl

    # Text and dates have no product with a number: Polars refuses them, where a cast would read them.
    numbers = [pl.col(name) * 1.0 for name in columns]
    x = [number.cast(pl.Float64) for number in numbers]
    count = range(len(parts))

    def fields(letter: str) -> list[pl.Expr]:
        return [pl.field(f"{letter}{k}") for k in count]

    most, best, shares = pl.field("most"), pl.field("best"), pl.field("shares")
    below = [(log - most) for log in fields("l")]
    stages: list[dict[str, pl.Expr]] = [
        {f"l{k}": log_density(part, x) for k, part in enumerate(parts)},
        {"most": pl.max_horizontal(fields("l"))},
        {f"e{k}": pl.when(t >= -CUT).then(t.exp()).otherwise(0.0) for k, t in enumerate(below)},
        {"shares": pl.concat_arr(fields("e"))},
        {"best": shares.arr.arg_max(), "total": shares.arr.sum()},
    ]
    made = pl.struct(usable=usable(columns, numbers, codes))
    for stage in stages:
        made = made.struct.with_fields(**stage)
    ids = [part.id for part in parts]
    found = {
        "component": (named(best, ids), pl.Int32),
        "responsibility": (1.0 / pl.field("total"), pl.Float32),
        "runner_up": (named(second(shares, best), ids) if len(parts) > 1 else pl.lit(None), pl.Int32),
        "log_density": (most + pl.field("total").log(), pl.Float64),
    }
    told: dict[str, pl.Expr] = {
        prefix + name: pl.when(pl.field("usable")).then(value).otherwise(None).cast(kind)
        for name, (value, kind) in found.items()
    }
    # The names may be those of fields before: a struct of their own.
    together = pl.struct([value.alias(name) for name, value in told.items()])
    result: pl.Expr = made.struct.with_fields(told=together).struct.field("told").alias(prefix + NAME)
    return result


def log_density(part: Part, x: Sequence[pl.Expr]) -> pl.Expr:
    """The log density of one component, its weight included, held above the floor."""
    shifted = [column - mean for column, mean in zip(x, part.mean, strict=True)]
    squares = []
    for row in part.factor:
        y = balanced([shifted[j] * number for j, number in row if number != 0.0], add)
        squares.append(y * y)
    density: pl.Expr = part.constant - balanced(squares, add)
    return density.clip(lower_bound=FLOOR)


def second(shares: pl.Expr, best: pl.Expr) -> pl.Expr:
    """The position of the second best of each list: the first of those equally good."""
    import polars as pl

    before, after = shares.arr.to_list().list.head(best), shares.arr.to_list().list.slice(best + 1)
    left, right = before.list.max(), after.list.max()
    behind = best + 1 + after.list.arg_max()
    return pl.when(right.is_null() | (left >= right)).then(before.list.arg_max()).otherwise(behind)


def named(position: pl.Expr, ids: list[int]) -> pl.Expr:
    """The id of the component at a position."""
    import polars as pl

    if ids == list(range(len(ids))):
        return position.cast(pl.Int32)
    return position.cast(pl.Int32).replace_strict(list(range(len(ids))), ids, default=None, return_dtype=pl.Int32)


def usable(columns: Iterable[str], x: Sequence[pl.Expr], codes: Mapping[str, Sequence[float]]) -> pl.Expr:
    """Whether a row has all its values: no null, NaN, infinity or code."""
    gaps = []
    for name, column in zip(columns, x, strict=True):
        gaps.append(~column.is_finite().fill_null(False))
        gaps += [(column == code).fill_null(False) for code in codes.get(name, ())]
    return ~reduce(or_, gaps)
