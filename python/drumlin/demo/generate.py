"""Parcel scans of an invented depot: the law they follow, and files of them in any number.

Seven kinds of parcel, each a correlated normal in six measured columns. Within a kind one hidden number, the parcel's
size, moves all columns together; `follows` says how closely. The scanner rounds, misreads the length of a few
parcels, and writes -9999 where its clock for the dwell failed. The kind of each parcel goes into a file of its own.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from drumlin.errors import TargetError

if TYPE_CHECKING:
    import pyarrow as pa

__all__ = ["FITTED", "KINDS", "STEPS", "Depot", "Kind", "covariances", "generate", "means", "shares"]

FITTED = ("length_cm", "width_cm", "height_cm", "weight_kg", "belt_speed", "dwell_s")
"""The six measured columns, in the order of every array below."""

STEPS = (0.5, 0.5, 0.5, 0.05, 0.001, 0.001)
"""The scanner's step per column: readings are rounded to it."""

CODE = -9999.0
"""What the scanner writes as dwell where its clock failed."""

CODE_SHARE = 0.0006
MISREAD_SHARE = 0.0005

FIRST_PARCEL = 4_200_000_000
FIRST_DAY = np.datetime64("2026-09-01", "D")
DAYS = 30
SCANNERS = tuple(f"{hall}{lane}" for hall in "ABC" for lane in (1, 2, 3, 4))


@dataclass(frozen=True)
class Kind:
    """One kind of parcel: its share of all parcels, and per column the mean, the standard deviation and how closely
    it follows size.
    """

    name: str
    share: float
    mean: tuple[float, ...]
    deviation: tuple[float, ...]
    follows: tuple[float, ...]


KINDS = (
    Kind(
        "small boxes",
        0.22,
        (29.0, 21.0, 13.5, 1.80, 1.65, 0.95),
        (4.8, 3.4, 2.3, 0.45, 0.12, 0.11),
        (0.85, 0.80, 0.75, 0.70, -0.30, 0.60),
    ),
    Kind(
        "flat packets",
        0.20,
        (33.0, 24.0, 5.0, 1.00, 1.75, 0.85),
        (4.5, 3.6, 1.1, 0.22, 0.12, 0.10),
        (0.90, 0.88, 0.30, 0.75, -0.20, 0.50),
    ),
    Kind(
        "shoe boxes",
        0.16,
        (38.0, 26.0, 15.5, 3.60, 1.45, 1.25),
        (4.8, 3.2, 2.2, 0.85, 0.11, 0.14),
        (0.80, 0.85, 0.80, 0.60, -0.30, 0.60),
    ),
    Kind(
        "large cartons",
        0.12,
        (56.0, 42.0, 33.0, 9.00, 1.25, 1.60),
        (7.0, 5.5, 5.0, 1.80, 0.10, 0.16),
        (0.85, 0.88, 0.85, 0.80, -0.40, 0.70),
    ),
    Kind(
        "book parcels",
        0.11,
        (27.0, 20.0, 8.0, 5.60, 1.50, 1.15),
        (3.2, 2.4, 1.6, 1.00, 0.11, 0.12),
        (0.75, 0.75, 0.80, 0.95, -0.40, 0.55),
    ),
    Kind(
        "heavy bags",
        0.10,
        (50.0, 37.0, 21.0, 12.5, 1.10, 1.75),
        (6.0, 4.6, 3.2, 2.00, 0.09, 0.17),
        (0.70, 0.75, 0.60, 0.92, -0.50, 0.60),
    ),
    Kind(
        "long tubes",
        0.09,
        (72.0, 13.0, 13.0, 2.60, 1.35, 1.80),
        (8.0, 2.0, 2.0, 0.50, 0.11, 0.18),
        (0.40, 0.97, 0.97, 0.75, -0.10, 0.35),
    ),
)

# Files of uneven size, each with row groups of its own length.
PORTIONS = (
    (0.23, 65_536),
    (0.06, 20_000),
    (0.19, 131_072),
    (0.11, 50_000),
    (0.26, 100_000),
    (0.02, 8_192),
    (0.13, 262_144),
)


def shares() -> NDArray[np.float64]:
    """Return the kinds' shares, shape (kinds,), summing to 1."""
    return np.array([kind.share for kind in KINDS])


def means() -> NDArray[np.float64]:
    """Return the kinds' means in the columns' units, shape (kinds, 6)."""
    return np.array([kind.mean for kind in KINDS])


def covariances() -> NDArray[np.float64]:
    """Return the kinds' covariances, shape (kinds, 6, 6), with the rounding's own variance (step squared / 12)."""
    deviation, follows = _deviations(), _follows()
    correlation = np.einsum("ki,kj->kij", follows, follows)
    diagonal = np.arange(len(FITTED))
    correlation[:, diagonal, diagonal] = 1.0
    result: NDArray[np.float64] = correlation * np.einsum("ki,kj->kij", deviation, deviation)
    result[:, diagonal, diagonal] += np.square(STEPS) / 12.0
    return result


def _deviations() -> NDArray[np.float64]:
    return np.array([kind.deviation for kind in KINDS])


def _follows() -> NDArray[np.float64]:
    return np.array([kind.follows for kind in KINDS])


@dataclass(frozen=True)
class Depot:
    """The files of one generated depot.

    `scans` is the folder of the scanners' files, `truth` the file with the kind of each parcel (columns parcel and
    kind, rows in the order of the scans), `files` the paths written, `size` their bytes, `seconds` the time taken.
    """

    folder: Path
    scans: Path
    truth: Path
    files: tuple[Path, ...]
    rows: int
    size: int
    seconds: float


def draw(rows: int, seed: int, chunk: int) -> tuple[NDArray[np.int8], NDArray[np.float64]]:
    """Draw one chunk: the kinds, shape (rows,), and what the scanner wrote, shape (rows, 6).

    The numbers depend on `seed`, `chunk` and `rows` alone. Lengths are in cm, weights in kg, speeds in m/s, dwells in
    s; a dwell is
    -9999 where the clock failed. No gaps otherwise.
    """
    random = np.random.default_rng([seed, chunk])
    borders = np.cumsum(shares())[:-1]
    kinds = np.searchsorted(borders, random.random(rows), side="right").astype(np.int8)
    follows = _follows()
    rest = np.sqrt(1.0 - follows**2)
    values = random.standard_normal((rows, len(FITTED)))
    values *= rest[kinds]
    values += follows[kinds] * random.standard_normal((rows, 1))
    values *= _deviations()[kinds]
    values += means()[kinds]
    misread = np.flatnonzero(random.random(rows) < MISREAD_SHARE)
    values[misread, 0] *= random.uniform(1.25, 1.75, len(misread))
    steps = np.array(STEPS)
    np.maximum(np.rint(values / steps), 1.0, out=values)
    values *= steps
    values[random.random(rows) < CODE_SHARE, len(FITTED) - 1] = CODE
    return kinds, values


def generate(folder: str | Path, rows: int, *, seed: int = 0, progress: Callable[[int], object] | None = None) -> Depot:
    """Write `rows` parcel scans as Parquet files of uneven size into `folder`/scans, and their kinds into
    `folder`/truth.parquet.

    Rows are drawn and written one row group at a time, so that memory stays flat for any number of rows. `progress`
    is called with the number of rows written after each row group.

    Raises TargetError when there are scans or a truth in `folder` already, OSError when the folder cannot be written.

    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     depot = generate(folder, 1000, seed=1)
    ...     print(depot.rows, len(depot.files))
    1000 7
    """
    import pyarrow as pa
    import pyarrow.parquet as pq

    began = time.perf_counter()
    folder = Path(folder)
    scans, truth = folder / "scans", folder / "truth.parquet"
    for target in (scans, truth):
        if target.exists():
            raise TargetError(f"{target} exists. Choose a new or an empty folder.", file=str(target))
    scans.mkdir(parents=True)
    truth_schema = pa.schema([("parcel", pa.int64()), ("kind", pa.int8())])
    files: list[Path] = []
    first = chunk = 0
    with pq.ParquetWriter(truth, truth_schema) as truth_writer:
        for number, (file_rows, group_rows) in enumerate(_portions(rows), start=1):
            path = scans / f"scans-{number}.parquet"
            files.append(path)
            with pq.ParquetWriter(path, _schema()) as writer:
                for length in _groups(file_rows, group_rows):
                    kinds, values = draw(length, seed, chunk)
                    table = _table(values, first, rows, seed, chunk)
                    writer.write_table(table, row_group_size=length)
                    truth_table = pa.table([table.column("parcel"), pa.array(kinds)], schema=truth_schema)
                    truth_writer.write_table(truth_table, row_group_size=length)
                    first += length
                    chunk += 1
                    if progress is not None:
                        progress(first)
    size = sum(path.stat().st_size for path in files)
    return Depot(folder, scans, truth, tuple(files), rows, size, time.perf_counter() - began)


def _portions(rows: int) -> Iterator[tuple[int, int]]:
    """Yield rows and row-group length of each file; the portions' rounding goes to the last file."""
    left = rows
    for position, (portion, group_rows) in enumerate(PORTIONS):
        file_rows = left if position == len(PORTIONS) - 1 else min(left, int(rows * portion))
        left -= file_rows
        yield file_rows, group_rows


def _groups(file_rows: int, group_rows: int) -> Iterator[int]:
    for start in range(0, file_rows, group_rows):
        yield min(group_rows, file_rows - start)


def _schema() -> pa.Schema:
    import pyarrow as pa

    return pa.schema(
        [
            ("parcel", pa.int64()),
            ("scanner", pa.string()),
            ("day", pa.date32()),
            ("length_cm", pa.float32()),
            ("width_cm", pa.float32()),
            ("height_cm", pa.float32()),
            ("weight_kg", pa.float64()),
            ("belt_speed", pa.float32()),
            ("dwell_s", pa.float32()),
            ("count", pa.int32()),
        ]
    )


def _table(values: NDArray[np.float64], first: int, rows: int, seed: int, chunk: int) -> pa.Table:
    """Put one chunk of readings into a table with its keys, scanners, days and counts."""
    import pyarrow as pa

    schema = _schema()
    length = len(values)
    random = np.random.default_rng([seed, chunk, 1])
    number = np.arange(first, first + length)
    scanner = pa.DictionaryArray.from_arrays(
        random.integers(0, len(SCANNERS), length).astype(np.int8), pa.array(SCANNERS)
    ).cast(pa.string())
    day = FIRST_DAY + (number * DAYS // max(rows, 1)).astype("timedelta64[D]")
    count = random.geometric(0.9, length).astype(np.int32)
    measured = [pa.array(values[:, position], schema.field(name).type) for position, name in enumerate(FITTED)]
    columns = [
        pa.array(FIRST_PARCEL + 7 * number, pa.int64()),
        scanner,
        pa.array(day, pa.date32()),
        *measured,
        pa.array(count),
    ]
    return pa.table(columns, schema=schema)
