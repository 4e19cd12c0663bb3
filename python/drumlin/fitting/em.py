"""The EM passes: statistics of all rows, M-step, stopping, one after the other."""

from __future__ import annotations

import re
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
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
class Judged:
    """A mixture that a pass has judged: rows, their summed weight and the total log-likelihood."""

    mixture: _core.Mixture
    survivors: list[int]
    rows: int
    weight: float
    log_likelihood: float


@dataclass(frozen=True)
class Passes:
    """Where the passes came to: the mixture, which start positions survived, the trace, and why they ended."""

    mixture: _core.Mixture
    survivors: list[int]
    trace: list[dict[str, Any]]
    stopped: str
    events: list[tuple[int, int, str]]
    """Repairs: (pass, start position or -1, what happened)."""
    obstacle: tuple[int, int, float] | None
    """Why float32 was given up: (first pass in float64, start position, reach in standard deviations)."""
    judged: Judged | None
    """The mixture that entered the last complete pass; None when there was none."""

    def step_back(self) -> Passes:
        """Return to the last mixture whose log-likelihood is known, as if the passes had been interrupted there."""
        assert self.judged is not None
        events = [event for event in self.events if event[0] < len(self.trace)]
        mixture, survivors = self.judged.mixture, self.judged.survivors
        return replace(self, mixture=mixture, survivors=survivors, events=events, stopped="interrupt")


def trusted_gain(columns: int) -> float:
    """Return what a float32 pass must gain to be followed by another, in nats per row.

    It is more than ten times what float32 blurs the log-likelihood by: 2e-9 to 6e-8 for up to 50 columns, and about
    1e-9 a column beyond (tests/property/test_precision.py).
    """
    return max(1e-6, 2e-8 * columns)


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
    single: bool,
    report: Report,
    keep_on_interrupt: bool = False,
) -> Passes:
    """Take EM passes from `start` until `tolerance` or `pass_limit`.

    With `single` the passes are taken in float32 while the conditioning of the mixture allows it and they gain more
    than float32 can blur; then in float64. Only float64 passes are judged by `tolerance`.

    With `keep_on_interrupt` a KeyboardInterrupt after a complete pass ends the passes; otherwise it comes through.

    The log-likelihood of a pass is that of the mixture entering it (Dempster, Laird and Rubin 1977). Cost: one read of
    the rows per pass.
    """
    from drumlin import _core

    mixture, survivors = start, list(range(start.components))
    stopping = _core.Stopping(0.0 if single else tolerance, LEAST_SHARE, scaling)
    trusted = max(tolerance, trusted_gain(start.dimensions))
    trace: list[dict[str, Any]] = []
    events: list[tuple[int, int, str]] = []
    obstacle: tuple[int, int, float] | None = None
    judged: Judged | None = None
    stopped = "pass_limit"
    for number in range(1, pass_limit + 1):
        began = time.perf_counter()
        measure = _core.EmStatistics(mixture, scaling, single)
        if single and not measure.single:
            single = False
            stopping = _core.Stopping(tolerance, LEAST_SHARE, scaling)
            position, reach = measure.obstacle or (0, 0.0)
            obstacle = (number, survivors[position], reach)
        try:
            (statistics,) = engine.run([measure], "pass")
        except KeyboardInterrupt:
            if keep_on_interrupt and judged is not None:
                return Passes(mixture, survivors, trace, "interrupt", events, obstacle, judged).step_back()
            raise
        assert isinstance(statistics, _core.EmStatistics)
        after, kept, sentences = statistics.maximise(structure, pooled, floor)
        remaining, moving, stop = stopping.add(statistics.log_likelihood, statistics.weight, mixture, after)
        for sentence in sentences:
            events.append((number, *_place(sentence, survivors)))
        judged = Judged(mixture, survivors, statistics.rows, statistics.weight, statistics.log_likelihood)
        survivors = [survivors[position] for position in kept]
        same = after.components == mixture.components
        mixture = after
        trace.append(
            {
                "pass": number,
                "log_likelihood": statistics.log_likelihood,
                "per_row": statistics.log_likelihood / statistics.weight,
                "remaining": remaining,
                "moving": moving,
                "precision": "single" if single else "double",
                "seconds": round(time.perf_counter() - began, 6),
            }
        )
        gain = trace[-1]["per_row"] - trace[-2]["per_row"] if number > 1 else None
        report(trace[-1], gain)
        if stop:
            stopped = "tolerance"
            break
        if single and same and gain is not None and gain < trusted:
            single = False
            stopping = _core.Stopping(tolerance, LEAST_SHARE, scaling)
    return Passes(mixture, survivors, trace, stopped, events, obstacle, judged)


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
