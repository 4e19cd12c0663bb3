"""The EM passes: statistics of all rows, M-step, stopping, one after the other."""

from __future__ import annotations

import re
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from drumlin import _core
    from drumlin.engines.engine import Engine

LEAST_SHARE = 1e-4
"""Components below this weight do not hold up the end of a fit by moving."""

Report = Callable[[dict[str, Any], float | None], None]


@dataclass(frozen=True)
class Passes:
    """Where the passes came to: the mixture, which start positions survived, the trace, and why they ended."""

    mixture: _core.Mixture
    survivors: list[int]
    trace: list[dict[str, Any]]
    stopped: str
    events: list[tuple[int, int, str]]
    """Repairs: (pass, start position or -1, what happened)."""


def run_passes(
    engine: Engine,
    start: _core.Mixture,
    scaling: _core.Scaling,
    *,
    structure: str,
    pooled: bool,
    floor: float,
    tolerance: float,
    pass_limit: int,
    report: Report,
) -> Passes:
    """Take EM passes from `start` until `tolerance` or `pass_limit`.

    The log-likelihood of a pass is that of the mixture entering it (Dempster, Laird and Rubin 1977). Cost: one read of
    the rows per pass.
    """
    from drumlin import _core

    mixture, survivors = start, list(range(start.components))
    stopping = _core.Stopping(tolerance, LEAST_SHARE, scaling)
    trace: list[dict[str, Any]] = []
    events: list[tuple[int, int, str]] = []
    stopped = "pass_limit"
    for number in range(1, pass_limit + 1):
        began = time.perf_counter()
        (statistics,) = engine.run([_core.EmStatistics(mixture, scaling)], "pass")
        assert isinstance(statistics, _core.EmStatistics)
        after, kept, sentences = statistics.maximise(structure, pooled, floor)
        remaining, moving, stop = stopping.add(statistics.log_likelihood, statistics.weight, mixture, after)
        for sentence in sentences:
            events.append((number, *_place(sentence, survivors)))
        survivors = [survivors[position] for position in kept]
        mixture = after
        trace.append(
            {
                "pass": number,
                "log_likelihood": statistics.log_likelihood,
                "per_row": statistics.log_likelihood / statistics.weight,
                "remaining": remaining,
                "moving": moving,
                "seconds": round(time.perf_counter() - began, 6),
            }
        )
        gain = trace[-1]["per_row"] - trace[-2]["per_row"] if number > 1 else None
        report(trace[-1], gain)
        if stop:
            stopped = "tolerance"
            break
    return Passes(mixture, survivors, trace, stopped, events)


def _place(sentence: str, survivors: Sequence[int]) -> tuple[int, str]:
    """Split "component at position 3 had no rows left" into the start position and the rest."""
    found = re.match(r"component at position (\d+) (.*)", sentence)
    if not found or int(found[1]) >= len(survivors):
        return -1, sentence
    return survivors[int(found[1])], found[2]


def order_by_weight(mixture: _core.Mixture) -> list[int]:
    """Return the positions in the order of the model: by weight, largest first; ties by the means, column by column.

    >>> from drumlin import _core
    >>> import numpy
    >>> order_by_weight(_core.Mixture(numpy.array([0.2, 0.8]), numpy.zeros((2, 1)), numpy.ones((2, 1, 1))))
    [1, 0]
    """
    means: NDArray[np.float64] = mixture.means
    keys = [means[:, column] for column in range(means.shape[1] - 1, -1, -1)]
    return [int(position) for position in np.lexsort([*keys, -mixture.weights])]
