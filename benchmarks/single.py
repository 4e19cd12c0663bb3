"""Passes in float32 over float32 columns against passes in float64 over float64 columns."""

from __future__ import annotations

import inspect

import numpy as np

from cases import Case, check_answer, generate
from competitors import keep, ours, statistics
from drumlin import _core
from lines import Figure, Line
from passes import WARM
from turns import Settings, interleave

CLOSE = 1e-5
"""Largest relative difference of the log-likelihoods: a hundred roundings of float32, which mostly cancel in a mean."""


def offered() -> bool:
    """Whether this build has passes in float32."""
    return "single" in inspect.signature(_core.EmStatistics).parameters


def single(case: Case, settings: Settings) -> Line:
    """Checks both answers, then times both in turn; the figure is float64 seconds over float32 seconds."""
    name = f"single, {case['name']}"
    data = generate(case)
    works = {}
    for precision, rows in (("double", data.rows), ("single", data.rows.astype(np.float32))):
        sums = statistics(case, data, single=True) if precision == "single" else statistics(case, data)
        if precision == "single" and not sums.single:
            raise SystemExit(f"{name}: float32 is refused for this mixture: {sums.obstacle}")
        works[precision] = ours(keep(rows, sums, settings.threads), sums, settings.threads)
    for _ in range(WARM):
        check_answer(name, works["double"](), case["log_likelihood"], "expected")
        answer = works["single"]()
        check_answer(name, answer, case["log_likelihood"], "expected", CLOSE)
    seconds = interleave(works, settings)
    figure = Figure(seconds["double"] / seconds["single"], "x double", case["single_required"])
    return Line(name, figure, seconds=seconds["single"], log_likelihood=answer)
