"""Mixtures and models in words: one screen of text, a notebook table, component cards."""

from __future__ import annotations

import html
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from drumlin.mixture import overall

if TYPE_CHECKING:
    from drumlin.mixture import Mixture
    from drumlin.model import Model

MOST_ROWS = 16
MOST_COLUMNS = 6
CENTRAL_80 = 1.2815515655446004
"""Standard deviations from the mean within which 80 % of a normal law lie."""
_CHUNK = 1024


def number(value: float) -> str:
    """Return a number with as many digits as a reader needs."""
    return f"{value:.4g}" if abs(value) < 1e15 else f"{value:.3e}"


def _cells(mixture: Mixture, names: Mapping[int, str]) -> tuple[list[str], list[list[str]], str]:
    """The header, the lines and a remark on what was left out."""
    columns = list(mixture.columns or [f"x{position}" for position in range(mixture.dimensions)])
    header = ["id", *(["name"] if names else []), "weight", *columns[:MOST_COLUMNS]]
    deviations = mixture.standard_deviations()
    lines = []
    for position in range(min(mixture.components, MOST_ROWS)):
        component = int(mixture.ids[position])
        shown = [
            f"{number(float(mixture.means[position, column]))} ± {float(deviations[position, column]):.3g}"
            for column in range(min(len(columns), MOST_COLUMNS))
        ]
        name = [names.get(component, "")] if names else []
        lines.append([str(component), *name, f"{100.0 * float(mixture.weights[position]):.1f}%", *shown])
    left_out = []
    if mixture.components > MOST_ROWS:
        left_out.append(f"{mixture.components - MOST_ROWS} smaller components")
    if len(columns) > MOST_COLUMNS:
        left_out.append(f"{len(columns) - MOST_COLUMNS} columns")
    return header, lines, f"... and {' and '.join(left_out)}" if left_out else ""


def _text_table(mixture: Mixture, names: Mapping[int, str]) -> str:
    header, lines, remark = _cells(mixture, names)
    widths = [max(len(line[at]) for line in [header, *lines]) for at in range(len(header))]
    rows = [
        "  " + "  ".join(cell.rjust(width) for cell, width in zip(line, widths, strict=True))
        for line in [header, *lines]
    ]
    return "\n".join([*rows, *(["  " + remark] if remark else [])])


def _html_table(mixture: Mixture, names: Mapping[int, str], caption: str) -> str:
    header, lines, remark = _cells(mixture, names)
    head = "".join(f"<th>{html.escape(cell)}</th>" for cell in header)
    body = "".join("<tr>" + "".join(f"<td>{html.escape(cell)}</td>" for cell in line) + "</tr>" for line in lines)
    foot = f"<p>{html.escape(remark)}</p>" if remark else ""
    return (
        f"<table><caption>{html.escape(caption)}</caption><thead><tr>{head}</tr></thead>"
        f"<tbody>{body}</tbody></table>{foot}"
    )


def counted(count: int, noun: str) -> str:
    """Return "1 row", "2,000 rows", "3 passes".

    >>> counted(1, "row"), counted(2000, "row"), counted(3, "pass")
    ('1 row', '2,000 rows', '3 passes')
    """
    return f"{count:,} {noun}" + ("" if count == 1 else "es" if noun.endswith("s") else "s")


def _shape(mixture: Mixture) -> str:
    return f"structure {mixture.structure}" + (", pooled" if mixture.pooled else "")


def _size(mixture: Mixture) -> str:
    return f"of {counted(mixture.components, 'component')} in {counted(mixture.dimensions, 'column')}"


def mixture_text(mixture: Mixture) -> str:
    """The text of a mixture: its size, and one line per component (mean ± standard deviation per column)."""
    return f"Mixture {_size(mixture)}, {_shape(mixture)}\n{_text_table(mixture, {})}"


def mixture_html(mixture: Mixture) -> str:
    """The notebook table of a mixture."""
    return _html_table(mixture, {}, f"Mixture {_size(mixture)}, {_shape(mixture)}")


def model_text(model: Model) -> str:
    """The text of a model: its size, how well and how far it was fitted, one line per component, its notes."""
    lines = [
        f"Model {_size(model.mixture)}, {_shape(model.mixture)}",
        f"  fitted to {counted(model.rows, 'row')} in {counted(model.passes, 'pass')}; "
        f"{number(model.log_likelihood / model.weight if model.weight else float('nan'))} nats per row; "
        f"BIC {model.bic:,.1f}; stopped: {model.stopped}",
        _text_table(model.mixture, model.names),
    ]
    notes = [f"  note: {note}" for note in model.notes[:8]]
    if len(model.notes) > 8:
        notes.append(f"  ... and {len(model.notes) - 8} more notes in .notes")
    return "\n".join(lines + notes)


def model_html(model: Model) -> str:
    """The notebook table of a model."""
    caption = f"Model {_size(model.mixture)}, {_shape(model.mixture)}; {counted(model.rows, 'row')}"
    notes = "".join(f"<li>{html.escape(note)}</li>" for note in model.notes)
    return _html_table(model.mixture, model.names, caption) + (f"<ul>{notes}</ul>" if notes else "")


def cards(mixture: Mixture, names: Mapping[int, str], rows: float) -> list[dict[str, Any]]:
    """One card per component; see `Model.cards`."""
    columns = list(mixture.columns or [f"x{position}" for position in range(mixture.dimensions)])
    deviations = mixture.standard_deviations()
    mean, deviation = overall(mixture._inner)
    others, distances = _nearest(mixture)
    found = []
    for position in range(mixture.components):
        component = int(mixture.ids[position])
        centre, spread = mixture.means[position], deviations[position]
        away = (centre - mean) / deviation
        telling = [int(at) for at in np.argsort(-np.abs(away), kind="stable")[:3] if abs(away[at]) >= 0.5]
        nearest = None
        if mixture.components > 1:
            other = int(mixture.ids[others[position]])
            nearest = {"id": other, "name": names.get(other), "distance": float(distances[position])}
        found.append(
            {
                "id": component,
                "name": names.get(component),
                "share": float(mixture.weights[position]),
                "rows": float(mixture.weights[position]) * rows,
                "ranges": [
                    {
                        "column": columns[at],
                        "mean": float(centre[at]),
                        "deviation": float(spread[at]),
                        "low": float(centre[at] - CENTRAL_80 * spread[at]),
                        "high": float(centre[at] + CENTRAL_80 * spread[at]),
                    }
                    for at in range(len(columns))
                ],
                "apart": [{"column": columns[at], "difference": float(away[at])} for at in telling],
                "nearest": nearest,
            }
        )
    return found


def _nearest(mixture: Mixture) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """For each component the position of the other component that is nearest, and the distance of the means.

    The distance is taken in the narrower component's own standard deviations, so that a wide one is not near to all;
    among very many components, where the whole table would be large, in those of the other component.
    """
    count = mixture.components
    others, distances = np.zeros(count, dtype=np.int64), np.full(count, np.nan)
    for first in range(0, count if count > 1 else 0, _CHUNK):
        some = np.arange(first, min(first + _CHUNK, count))
        table = mixture._get_scorer().score_array(mixture.means[some], "distance", 1)
        if len(some) == count:
            table = np.maximum(table, table.T)
        table[np.arange(len(some)), some] = np.inf
        others[some] = table.argmin(axis=1)
        distances[some] = table.min(axis=1)
    return others, distances
