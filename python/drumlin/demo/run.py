"""The demonstration on one screen: make, profile, fit, predict, compare with the truth, and fit again with other
threads.
"""

from __future__ import annotations

import contextlib
import shutil
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from drumlin.demo.generate import FITTED, KINDS, Depot, generate
from drumlin.errors import TargetError

if TYPE_CHECKING:
    from drumlin.judging.profile import Profile
    from drumlin.model import Model

__all__ = ["WANTED", "run_demo"]

T = TypeVar("T")

WANTED = 0.98
"""The least share of the true law's own agreement with the truth that counts as success."""

FULL_CHECK_ROWS = 5_000_000
"""Above this many rows the fit with another number of threads is compared after a few passes instead of to its end."""
SHORT_PASSES = 3


@dataclass
class Screen:
    """Writes the steps as they end, and keeps their figures for --json."""

    as_json: bool
    figures: dict[str, Any] = field(default_factory=dict)

    def line(self, text: str = "") -> None:
        """Write one line, unless JSON is wanted."""
        if not self.as_json:
            sys.stdout.write(text + "\n")
            sys.stdout.flush()

    def step(self, name: str, first: str, *more: str) -> None:
        """Write a step: its name, what came of it, and further lines below."""
        self.line(f"{name:<9} {first}")
        for text in more:
            self.line(f"{'':<9} {text}")


def run_demo(
    rows: int,
    *,
    folder: str | None = None,
    keep: bool = False,
    memory: str = "600 MB",
    threads: int | None = None,
    seed: int = 0,
    as_json: bool = False,
    quiet: bool = False,
) -> int:
    """Run the whole job on `rows` generated parcel scans; return 0 when every check holds, else 1.

    Works in `folder` (new or empty; kept), or in a temporary folder that is removed unless `keep`. `memory` and
    `threads` go to fit and predict. Raises TargetError when `folder` is not empty.
    """
    began = time.perf_counter()
    screen = Screen(as_json)
    with _folder(folder, keep) as place:
        screen.line(f"drumlin demo: {rows:,} parcel scans of an invented depot")
        screen.line()
        depot = _make(screen, place, rows, seed, quiet)
        looked = _profile(screen, depot, quiet)
        machine = {"memory": memory, "progress": not quiet and not as_json}
        model = _fit(screen, depot, looked, machine, threads, seed)
        good = _predict(screen, depot, model, {**machine, "threads": threads})
        good = _fit_again(screen, depot, looked, machine, model, threads, seed) and good
        seconds = time.perf_counter() - began
        result = "all checks passed" if good else "A CHECK FAILED"
        screen.step("whole", f"{seconds:.1f} s; peak resident memory {_megabytes(peak_memory())}; {result}")
        screen.figures |= {"seconds": seconds, "peak_memory": peak_memory(), "passed": good}
        if folder or keep:
            screen.step("kept", str(place))
        screen.line()
        _own_table(screen)
    if as_json:
        from drumlin.cli.output import emit_json

        emit_json(screen.figures)
    return 0 if good else 1


@contextlib.contextmanager
def _folder(folder: str | None, keep: bool) -> Iterator[Path]:
    """Yield the folder to work in; a temporary one is removed at the end unless it is to be kept."""
    if folder is not None:
        place = Path(folder)
        if place.exists() and (not place.is_dir() or any(place.iterdir())):
            raise TargetError(f"{folder} is not an empty folder. Name a new one for --dir.", file=folder)
        place.mkdir(parents=True, exist_ok=True)
        yield place
        return
    place = Path(tempfile.mkdtemp(prefix="drumlin-demo-"))
    try:
        yield place
    except BaseException:
        keep = False
        raise
    finally:
        if not keep:
            shutil.rmtree(place, ignore_errors=True)


def _make(screen: Screen, place: Path, rows: int, seed: int, quiet: bool) -> Depot:
    from tqdm import tqdm

    hidden = True if quiet or screen.as_json else None
    with tqdm(total=rows, desc="making scans", unit=" rows", unit_scale=True, leave=False, disable=hidden) as bar:
        depot = generate(place, rows, seed=seed, progress=lambda done: bar.update(done - bar.n))
    screen.step(
        "scans",
        f"{rows:,} rows in {len(depot.files)} Parquet files of uneven size, {_megabytes(depot.size)}, "
        f"made in {depot.seconds:.1f} s;",
        "the kind of each parcel stands in a file of its own, for the end",
    )
    screen.figures["make"] = {"rows": rows, "files": len(depot.files), "bytes": depot.size, "seconds": depot.seconds}
    return depot


def _profile(screen: Screen, depot: Depot, quiet: bool) -> Profile:
    import drumlin
    from drumlin.reporting.columns import short_findings

    looked, seconds = _timed(lambda: drumlin.profile(str(depot.scans), progress=not quiet and not screen.as_json))
    found = [f"{name}: {sentence}" for name, sentence in short_findings(looked)]
    first, *more = looked.option_texts
    options = [f"-> {first}{',' if more else ''}", *([f"   {', '.join(more)}"] if more else [])]
    screen.step("profile", f"one read of {len(looked.columns)} columns in {seconds:.1f} s", *found, *options)
    screen.figures["profile"] = {"seconds": seconds, **looked.to_dict()}
    return looked


def _options(looked: Profile, seed: int) -> dict[str, Any]:
    """The options that profile proposed; the fitted columns in the order of the truth."""
    columns = [name for name in FITTED if name in looked.suggested_columns]
    return {
        "columns": columns,
        "missing_codes": {name: list(values) for name, values in looked.suggested_codes.items()},
        "missing": looked.suggested_missing or "refuse",
        "key": "parcel",
        "seed": seed,
    }


def _fit(
    screen: Screen, depot: Depot, looked: Profile, machine: dict[str, Any], threads: int | None, seed: int
) -> Model:
    import drumlin

    options = _options(looked, seed)
    model, seconds = _timed(lambda: drumlin.fit(str(depot.scans), len(KINDS), threads=threads, **options, **machine))
    model.save(depot.folder / "parcels.drumlin")
    width = depot.rows * len(options["columns"]) * 8
    peak = peak_memory()
    per_second = model.rows * model.passes / max(sum(one["seconds"] for one in model.trace), 1e-9)
    screen.step(
        "fit",
        f"{len(KINDS)} components, {len(options['columns'])} columns: {_megabytes(width)} as float64; "
        f"ceiling {machine['memory']}, peak resident memory so far {_megabytes(peak)}",
        f"{model.passes} passes in {seconds:.1f} s, the start on a sample included; stopped: {model.stopped}; "
        f"{_millions(per_second)} rows per second in a pass",
    )
    screen.figures["fit"] = {
        "seconds": seconds,
        "passes": model.passes,
        "stopped": model.stopped,
        "rows": model.rows,
        "table_bytes": width,
        "memory": machine["memory"],
        "peak_memory": peak,
        "rows_per_second": per_second,
        "checksum": model.checksum,
        "notes": list(model.notes),
    }
    return model


def _predict(screen: Screen, depot: Depot, model: Model, machine: dict[str, Any]) -> bool:
    """Write each parcel's component, compare with the truth, and show the cards."""
    import drumlin
    from drumlin.demo.truth import compare_with_truth
    from drumlin.reporting.cards import cards_text

    grouped = depot.folder / "grouped.parquet"
    _, seconds = _timed(lambda: drumlin.predict(str(depot.scans), model, str(grouped), **machine))
    screen.step(
        "predict",
        f"{depot.rows:,} rows written with their components in {seconds:.1f} s, "
        f"{_millions(depot.rows / seconds)} rows per second",
    )
    found = compare_with_truth(grouped, depot.truth, int(model.mixture.ids.max()) + 1)
    good = found.ratio >= WANTED
    screen.step(
        "truth",
        f"adjusted Rand index {found.model:.4f}, of the true law itself {found.law:.4f}: {100 * found.ratio:.2f} % "
        f"of that (wanted: {100 * WANTED:.0f} %){'' if good else ' TOO LOW'};",
        f"{found.left_out:,} rows without a dwell left out; cards under the names that the truth gives:",
    )
    names = found.names()
    screen.line()
    screen.line(cards_text(model.with_names(names) if names else model))
    screen.line()
    screen.figures["predict"] = {"seconds": seconds, "rows_per_second": depot.rows / seconds}
    screen.figures["truth"] = {
        "model": found.model, "law": found.law, "ratio": found.ratio, "left_out": found.left_out, "names": names,
    }  # fmt: skip
    return good


def _fit_again(
    screen: Screen,
    depot: Depot,
    looked: Profile,
    machine: dict[str, Any],
    model: Model,
    threads: int | None,
    seed: int,
) -> bool:
    """Fit with another number of threads; the model part must have the same checksum."""
    import drumlin
    from drumlin.options import Machine

    first = Machine(threads=threads).thread_count
    second = 1 if first > 1 else 2
    options = _options(looked, seed)
    expected, extent = model.checksum, f"after all {model.passes} passes"
    if depot.rows > FULL_CHECK_ROWS:
        options["pass_limit"], extent = SHORT_PASSES, f"after {SHORT_PASSES} passes"
        expected = drumlin.fit(str(depot.scans), len(KINDS), threads=first, **options, **machine).checksum
    other, seconds = _timed(lambda: drumlin.fit(str(depot.scans), len(KINDS), threads=second, **options, **machine))
    good = other.checksum == expected
    screen.step(
        "same bits",
        f"{_threads(first)} {expected[:16]}, {_threads(second)} {other.checksum[:16]}: "
        f"{'equal' if good else 'NOT EQUAL'} {extent} ({seconds:.1f} s)",
    )
    screen.figures["same_bits"] = {"equal": good, "threads": [first, second], "checksums": [expected, other.checksum]}
    return good


def _own_table(screen: Screen) -> None:
    screen.line("For your own table (profile prints the columns to name):")
    screen.line("  drumlin profile TABLE.parquet")
    screen.line("  drumlin fit TABLE.parquet --components 6 --columns NAME,NAME,... --model groups.drumlin")
    screen.line("  drumlin predict TABLE.parquet --model groups.drumlin --to grouped.parquet")


def peak_memory() -> int:
    """Return the most memory that this process has held so far, in bytes; 0 where the system does not tell."""
    try:
        import resource
    except ImportError:
        return 0
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak if sys.platform == "darwin" else peak * 1024


def _timed(work: Callable[[], T]) -> tuple[T, float]:
    began = time.perf_counter()
    return work(), time.perf_counter() - began


def _threads(count: int) -> str:
    return "1 thread" if count == 1 else f"{count} threads"


def _megabytes(size: float) -> str:
    return f"{size / 1e6:,.0f} MB"


def _millions(count: float) -> str:
    return f"{count / 1e6:.1f} million"
