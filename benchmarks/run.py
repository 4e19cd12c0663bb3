"""Times one pass against scikit-learn and a matrix product, after checking the answer; prints a table, keeps a record.

    python benchmarks/run.py              all lines, seven rounds, a record in records/
    python benchmarks/run.py --quick      a few lines, three rounds, no record
    python benchmarks/run.py --answers    what the reference finds on each case, for cases.toml

README.md tells how to read the table. A wrong answer ends the run with exit status 1; a figure below what is required
is reported and does not.
"""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

from threadpoolctl import threadpool_limits

import cases
import growth
import passes
import peak
import record
import single
import streaming
from lines import HEAD, Figure, Line, text
from turns import Settings

HELD_BACK = ("OPENBLAS_", "OMP_NUM_THREADS", "GOTO_NUM_THREADS")
"""Variables beginning so would hold the reference and the product back."""
BUSY = 0.5
"""Load before a run above which its figures deserve doubt."""


def scoring_lines(wanted: dict[str, Any], settings: Settings) -> Iterator[Line]:
    """Scoring of rows in memory, and of one row; none where `scoring.py` is not there."""
    if not (cases.HERE / "scoring.py").exists():
        return
    import scoring

    found = {each["way"]: each for each in scoring.scoring(repeats=settings.rounds)}
    for way in ("argmax", "log density"):
        mine, theirs = found[f"{way}, array"], found[f"reference {way}"]
        rate = Figure(mine["rows_per_second"] / 1e6, "Mrows/s", wanted["required"], wanted["aim"])
        times = Figure(mine["times"], "times", wanted["times_required"])
        yield Line(f"scoring: {way}, rate", rate, None, mine["seconds"], theirs["seconds"])
        yield Line(f"scoring: {way}, times", times, None, mine["seconds"], theirs["seconds"])
    one = scoring.one_row()["seconds"]
    figure = Figure(one * 1e6, "us", wanted["one_row_required"], bound="at most")
    yield Line("scoring: log density, one row", figure, seconds=one)


def quick(everything: dict[str, Any], settings: Settings) -> Iterator[Line]:
    """The passes marked `quick`, without their peak memory, and two threads against one."""
    yield from (passes.measure(case, settings) for case in everything["pass"] if case.get("quick"))
    yield growth.by_threads(everything["growth"], settings)


def complete(everything: dict[str, Any], settings: Settings) -> Iterator[Line]:
    """All lines."""
    for case in everything["pass"]:
        yield replace(passes.measure(case, settings), peak_mb=peak.peak(case, settings.threads))
    if single.offered():
        yield from (single.single(case, settings) for case in everything["pass"] if "single_required" in case)
    yield from growth.by_rows(everything["growth"], settings)
    yield from growth.by_components(everything["growth"], settings)
    yield growth.by_threads(everything["growth"], settings)
    if "scoring" in everything:
        yield from scoring_lines(everything["scoring"], settings)
    yield from streaming.streaming(everything["streaming"], settings)


def main() -> None:
    parser = argparse.ArgumentParser(description="time one pass against the reference library")
    parser.add_argument("--quick", action="store_true", help="a few lines, three rounds, no record")
    parser.add_argument("--answers", action="store_true", help="print the reference's answer to each case only")
    parser.add_argument("--threads", type=int, default=2, help="threads of all competitors (default: 2)")
    options = parser.parse_args()
    held_back = [name for name in os.environ if name.startswith(HELD_BACK)]
    if held_back:
        parser.error(f"unset {', '.join(sorted(held_back))} first (make bench does)")
    everything = cases.load()
    if options.answers:
        about = record.machine(options.threads)
        print(f'numpy = "{about["numpy"]}"\nscikit_learn = "{about["scikit-learn"]}"')
        print(f'digest = "{cases.digest(cases.generate(cases.TINY))}"')
        for case in everything["pass"] + everything["growth"]["cases"]:
            print(f"{case['name']:36} log_likelihood = {passes.answer(case)!r}", flush=True)
        return
    cases.check_stream(everything["stream"])
    with threadpool_limits(options.threads):
        about = record.machine(options.threads)
        print("  ".join(f"{name} {value}" for name, value in about.items()))
        if float(about["load"]) > BUSY:
            print(f"load {about['load']}: other programs run, and the reference suffers more from them than we do")
        print(HEAD)
        lines = []
        settings = Settings(3 if options.quick else 7, options.threads)
        for line in (quick if options.quick else complete)(everything, settings):
            lines.append(line)
            print(text(line), flush=True)
    below = sum(line.verdict().startswith("below") for line in lines)
    print(f"{len(lines)} lines, {below} below what is required")
    if not options.quick:
        path = record.free_path(about["date"])
        record.write(path, lines, about)
        print(f"record: {path.relative_to(cases.HERE.parent)}")


if __name__ == "__main__":
    sys.exit(main())
