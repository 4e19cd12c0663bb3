"""A mixture as text for others to keep: a scorer in plain Python and NumPy, the source of a Polars expression, JSON."""

from __future__ import annotations

import inspect
import json
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from drumlin.errors import OptionError
from drumlin.exporting.parts import CUT, FLOOR, Part, balanced, require_size, take_apart

if TYPE_CHECKING:
    from drumlin.mixture import Mixture

__all__ = ["json_text", "polars_source", "scorer_source"]

Codes = Mapping[str, Sequence[float]]


def scorer_source(mixture: Mixture, codes: Codes | None = None) -> str:
    """Return a Python module that scores rows of this mixture and needs NumPy only. Numbers are exact."""
    from drumlin.exporting import plain

    columns = _columns(mixture)
    parts = take_apart(mixture)
    known = {name: list(map(float, one)) for name, one in (codes or {}).items()}
    numbers = {
        "COLUMNS = []": f"COLUMNS = {columns!r}",
        "IDS = []": f"IDS = {[part.id for part in parts]!r}",
        "CONSTANTS = []": f"CONSTANTS = {[part.constant for part in parts]!r}",
        "MEANS = []": f"MEANS = {[list(part.mean) for part in parts]!r}",
        "FACTORS = []": f"FACTORS = {[_square(part) for part in parts]!r}",
        "CODES = {}": f"CODES = {known!r}",
    }
    text = inspect.getsource(plain)
    for blank, filled in numbers.items():
        text = text.replace(f"\n{blank}\n", f"\n{filled}\n", 1)
    return text


def polars_source(mixture: Mixture, codes: Codes | None = None) -> str:
    """Return a Python module with a function `expression`, which gives the expression of `as_polars`. Needs Polars."""
    from drumlin.exporting import polars

    columns, parts = _columns(mixture), take_apart(mixture)
    require_size(parts, "Polars expressions")
    taken: list[Any] = [Part, balanced, polars.build, polars.log_density, polars.second, polars.named, polars.usable]
    head = (
        f'"""A mixture of {len(parts)} components as a Polars expression.\n\n'
        f'    frame.with_columns(expression()).unnest("{polars.NAME}")\n"""\n\n'
        "from __future__ import annotations\n\nfrom dataclasses import dataclass\nfrom functools import reduce\n"
        f"from operator import add, or_\n\nCUT = {CUT!r}\nFLOOR = {FLOOR!r}\nNAME = {polars.NAME!r}"
    )
    listed = "\n".join(f"    {part!r}," for part in parts)
    known = {name: list(one) for name, one in (codes or {}).items()}
    numbers = f"COLUMNS = {columns!r}\nCODES = {known!r}\nPARTS = [\n{listed}\n]"
    call = 'def expression(prefix=""):\n    return build(PARTS, COLUMNS, CODES, prefix)'
    return "\n\n\n".join([head, *(inspect.getsource(one).rstrip() for one in taken), numbers, call]) + "\n"


def json_text(mixture: Mixture, codes: Codes | None = None, names: Mapping[int, str] | None = None) -> str:
    """Return the mixture as JSON text. Numbers read back exactly.

    Keys: `columns` (names), `structure`, `pooled`, `missing_codes` (by column), `components`: for each `id`, `name` (or
    null), `weight`, `mean`, `covariance` (rows), in the units of the columns.

    >>> import drumlin, json
    >>> from drumlin.exporting.sources import json_text
    >>> found = json.loads(json_text(drumlin.Mixture([1.0], [[3.0]], [[[0.1]]], ["weight_kg"])))
    >>> found["columns"], found["components"][0]["covariance"]
    (['weight_kg'], [[0.1]])
    """
    listed: list[dict[str, Any]] = [
        {
            "id": int(one),
            "name": (names or {}).get(int(one)),
            "weight": float(weight),
            "mean": mean.tolist(),
            "covariance": covariance.tolist(),
        }
        for one, weight, mean, covariance in zip(
            mixture.ids, mixture.weights, mixture.means, mixture.covariances, strict=True
        )
    ]
    found = {
        "columns": None if mixture.columns is None else list(mixture.columns),
        "structure": mixture.structure,
        "pooled": mixture.pooled,
        "missing_codes": {name: list(one) for name, one in (codes or {}).items()},
        "components": listed,
    }
    return json.dumps(found, indent=1, allow_nan=False, ensure_ascii=False) + "\n"


def _columns(mixture: Mixture) -> list[str]:
    if mixture.columns is None:
        raise OptionError("This mixture has no column names: give columns= when making it.", option="columns")
    return list(mixture.columns)


def _square(part: Part) -> list[list[float]]:
    square = np.zeros((len(part.mean), len(part.mean)))
    for i, row in enumerate(part.factor):
        for j, number in row:
            square[i, j] = number
    return [list(map(float, row)) for row in square]
