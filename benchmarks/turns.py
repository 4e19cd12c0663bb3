"""Turns: competitors run one after the other, again and again: a slow moment of the machine hits all of them."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True)
class Settings:
    """How a run measures: rounds, threads of all competitors, seconds of rest, rows of the matrices multiplied.

    The threads of a matrix product spin for about 25 ms after it and would take a core from whoever runs next: hence
    the rest.
    """

    rounds: int = 7
    threads: int = 2
    rest: float = 0.2
    size: int = 2048


def turn(work: Callable[[], object], rest: float) -> float:
    """Seconds of the second of two calls in a row, after a rest: the passes of a fit follow one another."""
    time.sleep(rest)
    work()
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def interleave(works: dict[str, Callable[[], object]], settings: Settings) -> dict[str, float]:
    """The median seconds of each, over all rounds of turns."""
    taken: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(settings.rounds):
        for name, work in works.items():
            taken[name].append(turn(work, settings.rest))
    return {name: statistics.median(each) for name, each in taken.items()}
