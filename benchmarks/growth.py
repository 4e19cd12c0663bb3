"""Growth: the time of a pass with more rows, more components, more threads."""

from __future__ import annotations

from typing import Any

from cases import Case, check_answer, generate
from competitors import Work, keep, ours, statistics
from lines import Figure, Line
from passes import WARM
from turns import Settings, interleave


def warmed(case: Case, threads: tuple[int, ...], copies: int = 1) -> list[Work]:
    """Passes over the rows of a case, `copies` times over, for each number of threads; the answer is checked.

    The mean log-likelihood of repeated rows is that of the rows.
    """
    data = generate(case)
    sums = statistics(case, data)
    cache = keep(data.rows, sums, max(threads), copies)
    works = [ours(cache, sums, count) for count in threads]
    for work in works:
        for _ in range(WARM):
            check_answer(case["name"], work(), case["log_likelihood"], "expected")
    return works


def by_rows(growth: dict[str, Any], settings: Settings) -> list[Line]:
    """Time per row with `copies` times the rows, against that with the rows once. All are kept at the same time."""
    case, copies = growth["cases"][growth["rows_case"]], growth["copies"]
    works = {str(count): warmed(case, (settings.threads,), count)[0] for count in [1, *copies]}
    seconds = interleave(works, settings)
    return [
        Line(
            f"{case['rows'] * count / 1e6:g}M rows, per row, to {case['rows'] / 1e6:g}M",
            Figure(seconds[str(count)] / count / seconds["1"], "ratio", growth["rows_most"], bound="at most"),
            seconds=seconds[str(count)],
        )
        for count in copies
    ]


def by_components(growth: dict[str, Any], settings: Settings) -> list[Line]:
    """Time per row and component of each case, against the case with `components_from` components."""
    cases = {case["components"]: case for case in growth["cases"]}
    seconds = interleave({str(k): warmed(case, (settings.threads,))[0] for k, case in cases.items()}, settings)
    each = {k: seconds[str(k)] / k / case["rows"] for k, case in cases.items()}
    base = growth["components_from"]
    lines = []
    for k in cases:
        wanted = growth["components_most"] if k > base else None
        figure = Figure(each[k] / each[base], "ratio", wanted, bound="at most")
        lines.append(Line(f"K = {k}, per row and component, to {base}", figure, seconds=seconds[str(k)]))
    return [line for line, k in zip(lines, cases, strict=True) if k != base]


def by_threads(growth: dict[str, Any], settings: Settings) -> Line:
    """Seconds in one thread over seconds in two, over the same kept rows."""
    case = growth["cases"][growth["rows_case"]]
    one, two = warmed(case, (1, 2))
    seconds = interleave({"one": one, "two": two}, settings)
    figure = Figure(seconds["one"] / seconds["two"], "x 1", growth["threads_required"])
    return Line("2 threads, to 1", figure, seconds=seconds["two"])
