"""The options of every verb: each defined once, with its name, default, check and one line of help.

Five groups answer five questions: `Columns` (how are columns read?), `TableOptions` (what is this table?), `Shape`
(what may a component look like?), `Search` (how is it looked for?) and `Machine` (where does it run?); `Writing` says
what `predict` writes. Verbs take the options flat, as keywords; `VERBS` says which verb takes which,
`signature_problems` compares a verb's signature with the definitions, and `flags` hands them to the command line. All
checks run before any data are touched and raise `OptionError`.
"""

from __future__ import annotations

import contextvars
import dataclasses
import functools
import inspect
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, ParamSpec, TypeVar

from drumlin import checks, memory
from drumlin.errors import OptionError, nearest

if TYPE_CHECKING:
    import pyarrow.compute as pc

__all__ = [
    "VERBS",
    "Columns",
    "Flag",
    "Group",
    "Machine",
    "Search",
    "Shape",
    "TableOptions",
    "Writing",
    "flags",
    "given",
    "remember_given",
    "signature_problems",
]

P = ParamSpec("P")
R = TypeVar("R")

Progress = bool | Callable[[dict[str, Any]], None]


def _option(
    default: Any,
    check: Callable[[str, Any], Any],
    text: str,
    *,
    metavar: str = "",
    choices: Sequence[str] = (),
    read: Callable[[str], Any] = str,
    multiple: bool = False,
) -> Any:
    """One option: `check(name, value)` returns the value in its canonical form or raises OptionError."""
    facts = {"check": check, "help": text, "metavar": metavar, "choices": tuple(choices), "read": read}
    return field(default=default, metadata={**facts, "multiple": multiple})


class Group:
    """The base of the option groups: checks each field by its own check."""

    def __post_init__(self) -> None:
        for one in dataclasses.fields(self):  # type: ignore[arg-type]
            value = one.metadata["check"](one.name, getattr(self, one.name))
            object.__setattr__(self, one.name, value)

    def as_record(self) -> dict[str, Any]:
        """Return the options as JSON values, for the record of a fit."""
        return {one.name: _plain(getattr(self, one.name)) for one in dataclasses.fields(self)}  # type: ignore[arg-type]


def _plain(value: Any) -> Any:
    if value is None or isinstance(value, bool | int | float | str):
        return value
    if isinstance(value, Mapping):
        return {str(key): _plain(value[key]) for key in value}
    if isinstance(value, Sequence):
        return [_plain(item) for item in value]
    return "a callable" if callable(value) and not hasattr(value, "to_substrait") else str(value)


MISSING = ("refuse", "complete-rows")
STRUCTURES = ("full", "diagonal", "spherical")
METHODS = ("em",)
STARTS = ("k-means++", "random-rows")
PRECISIONS = ("double", "single")
ON_INTERRUPT = ("stop", "best")
ENGINES = ("threads", "processes")
OUTPUTS = ("responsibilities",)


@dataclass(frozen=True)
class Columns(Group):
    """How columns are read; kept in the model and used again by every verb."""

    columns: tuple[str, ...] | None = _option(
        None,
        checks.names_or_none,
        "Columns to fit, in this order.",
        metavar="NAME,NAME,...",
        read=checks.split_names,
    )
    missing: str = _option(
        "refuse",
        checks.choice(MISSING, {"marginal": "not in this version; leave incomplete rows out with 'complete-rows'"}),
        "What to do with rows that have gaps: refuse the table, or use complete rows only.",
        choices=MISSING,
    )
    missing_codes: Mapping[str, tuple[float, ...]] | None = _option(
        None,
        checks.codes,
        "Values that stand for a gap, per column, or for every column with '*'.",
        metavar="COLUMN=VALUE",
        multiple=True,
    )


@dataclass(frozen=True)
class TableOptions(Group):
    """What this table is."""

    where: pc.Expression | str | None = _option(
        None, checks.expression_or_none, "Use only the rows for which this is true.", metavar="CONDITION"
    )
    row_weight: str | None = _option(
        None, checks.name_or_none, "Column that says how many rows a row stands for.", metavar="NAME"
    )
    key: tuple[str, ...] | None = _option(
        None,
        checks.names_or_none,
        "Columns that name a row to its owner: never fitted, always carried along.",
        metavar="NAME,NAME,...",
        read=checks.split_names,
    )
    hold_out: float | pc.Expression | str | None = _option(
        None,
        checks.share_or_expression,
        "Share of the rows, or condition, to keep out of the fit and judge it by.",
        metavar="SHARE|CONDITION",
        read=checks.share_or_text,
    )


@dataclass(frozen=True)
class Shape(Group):
    """What a component may look like."""

    structure: str = _option("full", checks.choice(STRUCTURES), "Structure of the covariances.", choices=STRUCTURES)
    pooled: bool = _option(False, checks.switch, "One covariance for all components.")
    floor: float = _option(
        1e-8,
        checks.number(least=0.0, below=1.0),
        "Least variance in any direction, as a share of the columns' spread squared; 0 turns it off.",
        metavar="NUMBER",
        read=float,
    )


@dataclass(frozen=True)
class Search(Group):
    """How the mixture is looked for."""

    method: str = _option("em", checks.choice(METHODS), "How the fit proceeds.", choices=METHODS)
    start_from: str = _option("k-means++", checks.choice(STARTS), "How starting values are made.", choices=STARTS)
    tries: int = _option(
        8, checks.whole(1, 10_000), "Sets of starting values to try on the sample.", metavar="COUNT", read=int
    )
    pass_limit: int = _option(
        200, checks.whole(1, 1_000_000), "Most EM passes over the rows.", metavar="COUNT", read=int
    )
    tolerance: float = _option(
        1e-6,
        checks.number(least=0.0),
        "Stop when less than this remains to be gained, in nats per row; 0 runs to the pass limit.",
        metavar="NUMBER",
        read=float,
    )
    seed: int = _option(0, checks.whole(0, 2**63 - 1), "Seed of the sample and the tries.", metavar="NUMBER", read=int)
    precision: str = _option(
        "double",
        checks.choice(PRECISIONS),
        "Precision of the early passes; the last ones are always double.",
        choices=PRECISIONS,
    )
    on_interrupt: str = _option(
        "stop",
        checks.choice(ON_INTERRUPT),
        "What Ctrl-C does during the passes: 'best' hands back the best model so far.",
        choices=ON_INTERRUPT,
    )


@dataclass(frozen=True)
class Machine(Group):
    """Where it runs; never changes a bit of the model."""

    memory: int | str | None = _option(
        None,
        memory.check_size,
        "Ceiling of memory, such as '1 GiB' or '600 MB'; by default half of what is free.",
        metavar="SIZE",
    )
    threads: int | None = _option(
        None,
        checks.whole_or_none(1, 1024),
        "Threads that compute; by default one per usable core.",
        metavar="COUNT",
        read=int,
    )
    spill: str | None = _option(
        None,
        checks.folder_or_none,
        "Folder for a temporary file: rows that do not fit in memory or cannot be read again are kept there.",
        metavar="FOLDER",
    )
    engine: str = _option(
        "threads", checks.choice(ENGINES), "Compute in threads or in worker processes.", choices=ENGINES
    )
    progress: Progress = _option(True, checks.progress, "Show progress on a terminal.")

    @functools.cached_property
    def memory_bytes(self) -> int:
        """The ceiling in bytes: what was asked for, or half of what is free (container limits included)."""
        if self.memory is not None:
            return memory.parse_size(self.memory)
        return max(memory.free_bytes() // 2, memory.LEAST_MEMORY)

    @property
    def thread_count(self) -> int:
        """The number of computing threads: what was asked for, or the cores this process may use."""
        return self.threads if self.threads is not None else memory.usable_cores()


@dataclass(frozen=True)
class Writing(Group):
    """What `predict` writes."""

    outputs: tuple[str, ...] = _option(
        (),
        checks.several(OUTPUTS),
        "Further outputs: 'responsibilities' adds every component's responsibility.",
        metavar="NAME,...",
        read=checks.split_names,
    )
    prefix: str = _option("", checks.text, "Put this before the names of the added columns.", metavar="TEXT")
    replace: bool = _option(False, checks.switch, "Replace a target that exists.")
    carry: str | tuple[str, ...] = _option(
        "all",
        checks.all_or_names,
        "Columns of the rows to carry along: 'all', or names (keys are always carried).",
        metavar="all|NAME,...",
        read=checks.split_names,
    )


Part = tuple[type[Group], tuple[str, ...] | None]

VERBS: dict[str, tuple[Part, ...]] = {
    "fit": ((Columns, None), (TableOptions, None), (Shape, None), (Search, None), (Machine, None)),
    "estimate": ((Columns, None), (TableOptions, None), (Shape, None), (Search, None), (Machine, None)),
    "predict": (
        (Writing, None),
        (Columns, ("missing",)),
        (TableOptions, ("where", "key")),
        (Machine, ("memory", "threads", "progress")),
    ),
    "profile": (
        (Columns, ("columns", "missing_codes")),
        (TableOptions, ("where", "row_weight", "key")),
        (Search, ("seed",)),
        (Machine, ("memory", "threads", "engine", "progress")),
    ),
}
"""The options of each verb, in the order of its signature: groups, and which of their options (None: all)."""

OTHER_DEFAULTS: dict[tuple[str, str], Any] = {("predict", "missing"): None}
"""Defaults that differ in one verb, with the reason: predict reads gaps as the model says unless told otherwise."""


def verb_fields(verb: str) -> list[dataclasses.Field[Any]]:
    """Return the option definitions of a verb, in the order of its signature."""
    found = []
    for group, names in VERBS[verb]:
        fields = {one.name: one for one in dataclasses.fields(group)}  # type: ignore[arg-type]
        found += [fields[name] for name in (names if names is not None else fields)]
    return found


@dataclass(frozen=True)
class Flag:
    """An option as the command line needs it.

    `read` turns the text after the flag into the option's value; a `switch` takes no text; `multiple` flags may be
    repeated (hand the list of texts over as the value). `choices` is empty when any text may be given.
    """

    name: str
    flag: str
    default: Any
    help: str
    metavar: str
    choices: tuple[str, ...]
    switch: bool
    multiple: bool
    read: Callable[[str], Any]


def flags(verb_or_group: str | type[Group], only: Iterable[str] | None = None) -> list[Flag]:
    """Return the flags of a verb ("fit") or of one group (Machine), in order; `only` keeps those named.

    >>> [flag.flag for flag in flags(Shape)]
    ['--structure', '--pooled', '--floor']
    """
    if isinstance(verb_or_group, str):
        fields = verb_fields(verb_or_group)
    else:
        fields = list(dataclasses.fields(verb_or_group))  # type: ignore[arg-type]
    wanted = None if only is None else set(only)
    return [
        Flag(
            name=one.name,
            flag="--" + one.name.replace("_", "-"),
            default=one.default,
            help=one.metadata["help"],
            metavar=one.metadata["metavar"],
            choices=one.metadata["choices"],
            switch=isinstance(one.default, bool),
            multiple=one.metadata["multiple"],
            read=one.metadata["read"],
        )
        for one in fields
        if wanted is None or one.name in wanted
    ]


def signature_problems(function: Callable[..., Any], verb: str) -> list[str]:
    """Return how the keyword-only parameters of `function` differ from the definitions: names, defaults, order."""
    expected = [(one.name, OTHER_DEFAULTS.get((verb, one.name), one.default)) for one in verb_fields(verb)]
    found = [
        (parameter.name, parameter.default)
        for parameter in inspect.signature(function).parameters.values()
        if parameter.kind is inspect.Parameter.KEYWORD_ONLY
    ]
    if [name for name, _ in expected] != [name for name, _ in found]:
        return [f"{verb} takes {[name for name, _ in found]}, defined are {[name for name, _ in expected]}"]
    return [
        f"{verb}: the default of {name} is {value!r}, defined is {defined!r}"
        for (name, defined), (_, value) in zip(expected, found, strict=True)
        if type(value) is not type(defined) or value != defined
    ]


_given: contextvars.ContextVar[frozenset[str]] = contextvars.ContextVar("drumlin_given", default=frozenset())


def given() -> frozenset[str]:
    """Return the names of the keywords that the caller of the running verb wrote out."""
    return _given.get()


def remember_given(function: Callable[P, R]) -> Callable[P, R]:
    """Make a verb remember which keywords were written out, for `given`.

    An unknown keyword is an OptionError with the nearest name.
    """
    known = list(inspect.signature(function).parameters)

    @functools.wraps(function)
    def verb(*args: P.args, **kwargs: P.kwargs) -> R:
        for name in kwargs:
            if name not in known:
                raise OptionError(
                    f"{function.__name__} has no option {name!r}.{nearest(name, known)} It takes: {', '.join(known)}.",
                    option=name,
                )
        token = _given.set(frozenset(kwargs))
        try:
            return function(*args, **kwargs)
        finally:
            _given.reset(token)

    return verb
