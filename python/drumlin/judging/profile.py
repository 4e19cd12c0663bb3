"""Look at the columns of a table before anything is fitted to them."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict, dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from drumlin.judging.codes import Extreme, SuspectedCode, suspected_codes
from drumlin.judging.findings import Facts, finding
from drumlin.judging.looking import Look, TappedTable, footer_nulls
from drumlin.options import Columns, Machine, Progress, Search, TableOptions, remember_given

if TYPE_CHECKING:
    import pyarrow as pa
    import pyarrow.compute as pc

    from drumlin.tables import Table

__all__ = ["ColumnProfile", "Profile", "profile"]

SAMPLE_ROWS = 100_000
SAMPLE_VALUES = 8_000_000
ALIKE = 0.9995
"""Above this correlation one column is nearly a copy of another."""
LEVELS = ("0", "0.01", "0.25", "0.5", "0.75", "0.99", "1")


@dataclass(frozen=True)
class ColumnProfile:
    """What was seen in one column.

    `nulls`, `nans`, `infinite`, `declared_codes` (values given as missing_codes), `least` and `most` count and
    compare all rows that `where` keeps; `quantiles` (by level "0.01", ...), `distinct`, `repeated` (value and share
    of the values present) and `near_copy_of` come from a sample, with gaps and codes left out. Numbers are None for
    columns that do not hold numbers. `suggested` says whether the column is in the line to paste, `finding` says in a
    sentence what the column means for a fit.
    """

    name: str
    type: str
    nulls: int
    nans: int = 0
    infinite: int = 0
    declared_codes: int = 0
    least: float | None = None
    most: float | None = None
    quantiles: Mapping[str, float] = field(default_factory=dict)
    distinct: int | None = None
    constant: bool = False
    id_like: bool = False
    repeated: tuple[tuple[float, float], ...] = ()
    suspected_codes: tuple[SuspectedCode, ...] = ()
    near_copy_of: str | None = None
    usable: bool = False
    suggested: bool = False
    finding: str = ""
    effect: float = 0.0

    @property
    def gaps(self) -> int:
        """Rows in which the column is null, NaN or a declared code."""
        return self.nulls + self.nans + self.declared_codes


@dataclass(frozen=True, repr=False)
class Profile:
    """The columns of a table, the one with the largest effect on a fit first.

    `rows` counts the table's rows, `kept` those that `where` keeps; `sampled` rows were looked at in detail.
    `suggested_columns`, `suggested_codes` and `suggested_missing` are the options for `fit`; `complete_share` is the
    share of rows that are complete in the suggested columns once the suggested codes count as gaps (from the sample).
    """

    label: str
    rows: int
    kept: int
    sampled: int
    columns: tuple[ColumnProfile, ...]
    suggested_columns: tuple[str, ...]
    suggested_codes: Mapping[str, tuple[float, ...]]
    suggested_missing: str | None
    complete_share: float
    notes: tuple[str, ...] = ()

    def column(self, name: str) -> ColumnProfile:
        """Return the profile of one column; KeyError when there is none of that name."""
        for one in self.columns:
            if one.name == name:
                return one
        raise KeyError(name)

    @property
    def options_line(self) -> str:
        """The suggested options as they stand in a call of `fit`."""
        return ", ".join(self.option_texts)

    @property
    def option_texts(self) -> list[str]:
        """The suggested options one by one."""
        parts = [f"columns=[{', '.join(_quoted(name) for name in self.suggested_columns)}]"]
        if self.suggested_codes:
            codes = ", ".join(
                f"{_quoted(name)}: [{', '.join(plain_number(value) for value in values)}]"
                for name, values in self.suggested_codes.items()
            )
            parts.append(f"missing_codes={{{codes}}}")
        if self.suggested_missing:
            parts.append(f"missing={_quoted(self.suggested_missing)}")
        return parts

    @property
    def flags_line(self) -> str:
        """The suggested options as flags of the command line."""
        import shlex

        parts = ["--columns", ",".join(self.suggested_columns)]
        for name, values in self.suggested_codes.items():
            for value in values:
                parts += ["--missing-codes", f"{name}={plain_number(value)}"]
        if self.suggested_missing:
            parts += ["--missing", self.suggested_missing]
        return shlex.join(parts)

    def to_dict(self) -> dict[str, Any]:
        """Return everything as plain dicts, lists, numbers and texts, fit for JSON."""
        result = asdict(self)
        result["columns"] = [{**asdict(one), "gaps": one.gaps} for one in self.columns]
        result["options_line"], result["flags_line"] = self.options_line, self.flags_line
        return result

    def __repr__(self) -> str:
        from drumlin.reporting.columns import profile_text

        return profile_text(self)

    def _repr_html_(self) -> str:
        from drumlin.reporting.columns import profile_html

        return profile_html(self)


def _quoted(name: str) -> str:
    import json

    return json.dumps(name, ensure_ascii=False)


def plain_number(value: float) -> str:
    """Write a number so that it reads back exactly, whole numbers without a point.

    >>> plain_number(-9999.0), plain_number(0.25)
    ('-9999', '0.25')
    """
    return str(int(value)) if value == int(value) and abs(value) < 1e16 else repr(value)


@remember_given
def profile(
    rows: Any,
    *,
    columns: Sequence[str] | None = None,
    missing_codes: Mapping[str, Iterable[float] | float] | None = None,
    where: pc.Expression | str | None = None,
    row_weight: str | None = None,
    key: Sequence[str] | str | None = None,
    seed: int = 0,
    memory: int | str | None = None,
    threads: int | None = None,
    engine: str = "threads",
    progress: Progress = True,
) -> Profile:
    """Look at the columns of `rows`: type, gaps, range, quantiles, and what would harm a fit.

    Arguments:
        rows: a path, glob, directory or list of them (Parquet), a pyarrow Table, Dataset or stream, a frame, a 2-D
            array, or a callable that opens a stream; a stream that can be read only once is fine here.
        columns: look at these only (all columns by default); a name that is missing is a SchemaError.
        missing_codes: values that stand for a gap, as {column: [values]}, or {"*": [values]} for every column.
        where: look at the rows only for which this is true.
        row_weight, key: columns that will play these parts, and so are not suggested for the fit.
        seed: of the sample.
        memory, threads, engine, progress: where it runs; no effect on the result. The rows are always read by
            threads of this process.

    Returns a `Profile`. Counts and ranges are of all rows; quantiles, repeated values and near copies of a sample of
    100,000 to 200,000 rows (fewer above 80 columns). Row weights are not applied: everything is counted in rows. Null
    and NaN both are gaps.

    Cost: one pass over all columns; memory for the sample and one open row group.

    Raises SchemaError for a missing column or a table without columns, SourceError for a file that cannot be read.

    >>> import numpy, drumlin
    >>> rows = numpy.column_stack([numpy.linspace(0, 1, 200) ** 2, numpy.full(200, 7.0)])
    >>> print(drumlin.profile(rows, progress=False).suggested_columns)
    ('x0',)
    """
    from drumlin.tables import open_table
    from drumlin.tables.numeric import WRITTEN, is_feature

    reading = Columns(columns=columns, missing_codes=missing_codes)  # type: ignore[arg-type]
    about = TableOptions(where=where, row_weight=row_weight, key=key)  # type: ignore[arg-type]
    search = Search(seed=seed)
    machine = Machine(memory=memory, threads=threads, engine=engine, progress=progress)

    table = open_table(rows, where=about.where)
    apart = [*(about.key or ()), *([about.row_weight] if about.row_weight else [])]
    named = [*(reading.columns or ()), *apart, *(name for name in reading.missing_codes or () if name != "*")]
    table.require(named)
    names = list(reading.columns) if reading.columns is not None else _usable(table)
    types = {name: table.schema.field(name).type for name in names}
    measured = [name for name in names if is_feature(types[name])]
    others = [name for name in names if not is_feature(types[name])]
    codes = {name: codes_of(reading.missing_codes, name) for name in measured}

    look, summary = _read(table, measured, others, codes, search.seed, machine)
    shares = _details(measured, look.values, summary, codes)
    parts = {name: "key" for name in about.key or ()}
    if about.row_weight:
        parts[about.row_weight] = "row weight"
    parts |= {name: "partition" for name in table.partitions}
    parts |= {name: "written" for name in names if name in WRITTEN}
    seen = [_column(name, types[name], look, summary, shares.get(name), measured, parts.get(name)) for name in names]
    return _assemble(table, look, seen, shares, named=reading.columns is not None)


def _usable(table: Table) -> list[str]:
    """The columns that every file gives."""
    return [name for name in table.schema.names if name not in table.left_out]


def codes_of(declared: Mapping[str, Sequence[float]] | None, name: str) -> tuple[float, ...]:
    """Return the declared codes of one column, those for every column included."""
    both = [*(declared or {}).get("*", ()), *(declared or {}).get(name, ())]
    return tuple(dict.fromkeys(both))


def _read(
    table: Table,
    measured: list[str],
    others: list[str],
    codes: Mapping[str, tuple[float, ...]],
    seed: int,
    machine: Machine,
) -> tuple[Look, dict[str, Any]]:
    """Read the rows once: the look of every column, and the core's summary of those that hold numbers."""
    from drumlin import _core
    from drumlin.engines import Reporter, open_engine
    from drumlin.tables import KEEP

    keep = KEEP if table.where is not None else None
    stated = footer_nulls(table.files, others) if keep is None else {}
    size = max(2_000, min(SAMPLE_ROWS, SAMPLE_VALUES // max(1, len(measured))))
    look = Look(measured, [name for name in others if name not in stated], size, seed)
    tapped: Any = TappedTable(table, look, [*measured, *look.nulls])
    summary: dict[str, Any] = {}
    if measured:
        wanted = {name: list(values) for name, values in codes.items() if values}
        reading = _core.Reading(measured, keep=keep, codes=wanted)
        inside = Machine(memory=machine.memory, threads=machine.threads, progress=machine.progress)
        reporter = Reporter(machine.progress)
        with open_engine(tapped, reading, inside, measured, progress=reporter, keep_rows=False) as engine:
            (found,) = engine.run([_core.ColumnSummary(len(measured))], "profile")
        assert isinstance(found, _core.ColumnSummary)
        summary = found.table()
    else:
        for _ in tapped.scan([]):
            pass
    look.nulls |= stated
    return look, summary


@dataclass
class Detail:
    """What the sample tells about one column; `gap` marks the sampled rows without a usable value."""

    codes: list[SuspectedCode] = field(default_factory=list)
    gap: NDArray[np.bool_] = field(default_factory=lambda: np.empty(0, dtype=bool))
    sampled: int = 0
    quantiles: dict[str, float] = field(default_factory=dict)
    distinct: int = 0
    integers: bool = False
    repeated: tuple[tuple[float, float], ...] = ()
    copy_of: str | None = None


def _details(
    measured: list[str], values: NDArray[np.float64], summary: dict[str, Any], declared: Mapping[str, tuple[float, ...]]
) -> dict[str, Detail]:
    """Find suspected codes column by column, then profile the sample without them."""
    from drumlin import _core

    values = values.copy()
    values[~np.isfinite(values)] = np.nan
    found: dict[str, list[SuspectedCode]] = {}
    for place, name in enumerate(measured):
        column = values[:, place]
        if declared[name]:
            column[np.isin(column, declared[name])] = np.nan
        least = Extreme(float(summary["least"][place]), int(summary["least_count"][place]))
        most = Extreme(float(summary["most"][place]), int(summary["most_count"][place]))
        present = int(summary["present"][place])
        found[name] = suspected_codes(column, least, most, present) if present else []
        if found[name]:
            column[np.isin(column, [code.value for code in found[name]])] = np.nan
    if len(values) == 0 or not measured:
        return {}
    sample = _core.sample_profile(values, np.ones(len(values)))
    correlations = np.asarray(sample["correlations"])
    details: dict[str, Detail] = {}
    for place, name in enumerate(measured):
        gap = np.isnan(values[:, place])
        alike = np.flatnonzero(np.abs(np.nan_to_num(correlations[place, :place])) > ALIKE)
        levels = zip(LEVELS, np.asarray(sample["quantiles"])[place].tolist(), strict=True)
        details[name] = Detail(
            codes=found[name],
            gap=gap,
            sampled=len(gap) - int(np.count_nonzero(gap)),
            quantiles={} if gap.all() else dict(levels),
            distinct=int(sample["distinct"][place]),
            integers=bool(sample["integers"][place]),
            repeated=tuple((float(value), float(share)) for value, share in sample["repeated"][place]),
            copy_of=measured[int(alike[0])] if len(alike) else None,
        )
    return details


def _column(
    name: str,
    type_: pa.DataType,
    look: Look,
    summary: dict[str, Any],
    detail: Detail | None,
    measured: list[str],
    part: str | None,
) -> ColumnProfile:
    """Put together what is known about one column and judge it."""
    if name not in measured:
        facts = Facts(name=name, type=type_, rows=look.kept, gaps=look.nulls[name], part=part)
        judged = finding(facts)
        return ColumnProfile(
            name, str(type_), look.nulls[name], suggested=False, finding=judged.sentence, effect=judged.effect
        )
    place = measured.index(name)
    counts = {what: int(summary[what][place]) for what in ("nulls", "nans", "infinite", "codes", "present")}
    present = counts["present"]
    least, most = float(summary["least"][place]), float(summary["most"][place])
    found = detail if detail is not None else Detail()
    facts = Facts(
        name=name,
        type=type_,
        rows=look.kept,
        gaps=counts["nulls"] + counts["nans"] + counts["codes"],
        infinite=counts["infinite"],
        present=present,
        constant=present > 0 and least == most,
        least=least,
        codes=tuple(found.codes),
        copy_of=found.copy_of,
        sampled=found.sampled,
        distinct=found.distinct,
        integers=found.integers,
        repeated=found.repeated,
        quantiles=found.quantiles,
        part=part,
    )
    judged = finding(facts)
    return ColumnProfile(
        name=name,
        type=str(type_),
        nulls=counts["nulls"],
        nans=counts["nans"],
        infinite=counts["infinite"],
        declared_codes=counts["codes"],
        least=least if present else None,
        most=most if present else None,
        quantiles=found.quantiles,
        distinct=found.distinct,
        constant=facts.constant,
        id_like=facts.id_like,
        repeated=found.repeated,
        suspected_codes=facts.codes,
        near_copy_of=facts.copy_of,
        usable=True,
        suggested=judged.suggested,
        finding=judged.sentence,
        effect=judged.effect,
    )


def _assemble(
    table: Table, look: Look, seen: list[ColumnProfile], details: Mapping[str, Detail], *, named: bool
) -> Profile:
    suggested = tuple(one.name for one in seen if one.suggested)
    codes = {
        one.name: tuple(code.value for code in one.suspected_codes)
        for one in seen
        if one.suggested and one.suspected_codes
    }
    gaps = any(one.suggested and (one.gaps or one.suspected_codes) for one in seen)
    incomplete = np.zeros(len(look.values), dtype=bool)
    for name in suggested:
        if name in details:
            incomplete |= details[name].gap
    complete = 1.0 - float(incomplete.mean()) if len(incomplete) else 0.0
    order = sorted(range(len(seen)), key=lambda place: (-seen[place].effect, place))
    notes = list(table.notes)
    if not named:
        notes += [f"Column {name!r} was left out: {reason}" for name, reason in table.left_out.items()]
    return Profile(
        label=table.label,
        rows=look.rows,
        kept=look.kept,
        sampled=len(look.values),
        columns=tuple(seen[place] for place in order),
        suggested_columns=suggested,
        suggested_codes=codes,
        suggested_missing="complete-rows" if gaps else None,
        complete_share=complete,
        notes=tuple(notes),
    )
