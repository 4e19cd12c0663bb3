"""The model: what a fit returns and a model file holds."""

from __future__ import annotations

import copy
import math
import os
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING, Any, final

import numpy as np
from numpy.typing import NDArray

from drumlin import checks
from drumlin.errors import OptionError, nearest
from drumlin.mixture import Mixture
from drumlin.rowwise import RowWise

if TYPE_CHECKING:
    from drumlin import _core


@dataclass(frozen=True)
class Figures:
    """What the closing pass of a fit counted. Totals are over the fitted rows, by row weight, in nats."""

    rows: int
    weight: float
    log_likelihood: float
    entropy: float | None
    """None where a fit was interrupted before its closing pass."""
    held_rows: int = 0
    held_weight: float = 0.0
    held_log_likelihood: float = 0.0


@final
@dataclass(frozen=True, repr=False, eq=False)
class Model(RowWise):
    """A fitted mixture with all that is needed to use it again: columns and how to read them, names, record.

    Immutable; `with_names` returns a new model. Made by `drumlin.fit` and `drumlin.load`; pickles through the bytes
    of its file. The row-wise methods (`log_density`, `responsibilities`, `assign`, `distance`) take a 2-D NumPy array
    in the order of `columns`, or any table; they read gaps as NaN whatever the option `missing` of the fit was.

    >>> import drumlin, numpy
    >>> rows = numpy.random.default_rng(1).normal(size=(500, 2)) + numpy.repeat([[0.0], [8.0]], 250, axis=0)
    >>> model = drumlin.fit(rows, 2, seed=1, progress=False)
    >>> model.columns, model.mixture.ids.tolist(), model.names
    (('x0', 'x1'), [0, 1], {})
    """

    mixture: Mixture
    missing: str
    missing_codes: Mapping[str, tuple[float, ...]]
    figures: Figures
    _names: Mapping[int, str] = field(default_factory=dict)
    _record: Mapping[str, Any] = field(default_factory=dict)
    _next_id: int = 0
    _kept: dict[str, Any] = field(default_factory=dict, init=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "missing_codes", MappingProxyType(dict(self.missing_codes)))
        object.__setattr__(
            self, "_names", MappingProxyType({int(one): self._names[one] for one in sorted(self._names)})
        )
        object.__setattr__(self, "_next_id", max(self._next_id, int(self.mixture.ids.max()) + 1))

    @property
    def columns(self) -> tuple[str, ...]:
        """The names of the fitted columns, in order."""
        columns = self.mixture.columns
        assert columns is not None, "a model's mixture names its columns"
        return columns

    @property
    def names(self) -> dict[int, str]:
        """The names given to components, by id; components without a name are absent."""
        return dict(self._names)

    @property
    def limit(self) -> None:
        """The calibrated limit; None in this version."""
        return None

    @property
    def groups(self) -> None:
        """The groups of components; None in this version."""
        return None

    @property
    def statistics(self) -> None:
        """The kept sufficient statistics; None in this version."""
        return None

    @property
    def record(self) -> dict[str, Any]:
        """How the model came about: options, trace, stopped, passes, seconds, data, history, notes, versions (a copy).

        `trace` has one entry per EM pass: `pass`, `log_likelihood` (total, of the mixture entering the pass),
        `per_row`, `remaining` (estimated nats per row still to be gained, or None), `moving`, `precision` ("single" or
        "double"), `seconds`.
        """
        return copy.deepcopy(dict(self._record))

    @property
    def notes(self) -> tuple[str, ...]:
        """What the reader of the model should know: repairs, dropped rows, suspicious columns, how far tries agree."""
        return tuple(self._record.get("notes", ()))

    @property
    def trace(self) -> list[dict[str, Any]]:
        """The EM passes of the fit, as in `record`."""
        return copy.deepcopy(list(self._record.get("trace", [])))

    @property
    def stopped(self) -> str:
        """Why the fit ended: "tolerance" or "pass_limit"."""
        return str(self._record.get("stopped", ""))

    @property
    def passes(self) -> int:
        """The number of EM passes."""
        return int(self._record.get("passes", 0))

    @property
    def rows(self) -> int:
        """The number of rows fitted."""
        return self.figures.rows

    @property
    def weight(self) -> float:
        """The summed row weights of the rows fitted: the n of BIC and ICL."""
        return self.figures.weight

    @property
    def log_likelihood(self) -> float:
        """The total log-likelihood of the fitted rows under this very mixture, in nats."""
        return self.figures.log_likelihood

    @property
    def held_log_likelihood(self) -> float | None:
        """The log-likelihood per row of the rows held out, in nats; None when none were."""
        held = self.figures.held_weight
        return self.figures.held_log_likelihood / held if held > 0.0 else None

    @property
    def bic(self) -> float:
        """-2 L + p ln n, with n the summed row weights and p the free parameters (Schwarz 1978). Smaller is better."""
        return -2.0 * self.log_likelihood + self.mixture.free_parameters * math.log(self.weight)

    @property
    def aic(self) -> float:
        """-2 L + 2 p (Akaike 1974). Smaller is better."""
        return -2.0 * self.log_likelihood + 2.0 * self.mixture.free_parameters

    @property
    def icl(self) -> float | None:
        """BIC + 2 E, E the entropy of the responsibilities (Biernacki, Celeux and Govaert 2000). Smaller is better.

        None for a model whose fit was interrupted.
        """
        entropy = self.figures.entropy
        return None if entropy is None else self.bic + 2.0 * entropy

    @property
    def checksum(self) -> str:
        """SHA-256 (hex) of the model part of the file: the same for the same fit, whatever the machine options."""
        if "checksum" not in self._kept:
            from drumlin.modelfile import model_checksum

            self._kept["checksum"] = model_checksum(self)
        return str(self._kept["checksum"])

    def with_names(self, names: Mapping[int, str] | Sequence[str]) -> Model:
        """Return the model with components named: {id: name}, or one name per component in the order of `mixture.ids`.

        Names given before stay unless replaced; an empty name takes one away. Names must differ from each other.

        >>> import drumlin, numpy
        >>> rows = numpy.random.default_rng(1).normal(size=(200, 1)) + numpy.repeat([[0.0], [9.0]], 100, axis=0)
        >>> drumlin.fit(rows, 2, progress=False).with_names({0: "small", 1: "large"}).names
        {0: 'small', 1: 'large'}
        """
        ids = [int(one) for one in self.mixture.ids]
        if isinstance(names, Mapping):
            given = dict(names)
        else:
            listed = [names] if isinstance(names, str) else list(names)
            if len(listed) != len(ids):
                raise OptionError(f"names has {len(listed)} names for {len(ids)} components.", option="names")
            given = dict(zip(ids, listed, strict=True))
        merged = dict(self._names)
        for one, name in given.items():
            found = checks.as_whole(one)
            if found not in ids:
                known = ", ".join(map(str, ids[:20]))
                raise OptionError(f"names: no component has the id {one!r}. There are: {known}.", option="names")
            merged[found] = _checked_name(name)
        merged = {one: name for one, name in merged.items() if name}
        check_names_differ(merged)
        return Model(self.mixture, self.missing, self.missing_codes, self.figures, merged, self._record, self._next_id)

    def id_of(self, name: str | int) -> int:
        """Return the id of the component with this name (or this id); OptionError with the nearest name when none has.

        >>> import drumlin, numpy
        >>> rows = numpy.random.default_rng(1).normal(size=(200, 1))
        >>> drumlin.fit(rows, 1, progress=False).with_names(["all"]).id_of("all")
        0
        """
        by_name = {known: one for one, known in self._names.items()}
        if isinstance(name, str) and name in by_name:
            return by_name[name]
        found = checks.as_whole(name)
        if found is not None and found in self.mixture.ids:
            return found
        raise OptionError(f"No component is called {name!r}.{nearest(str(name), by_name)}", option="names")

    def cards(self) -> list[dict[str, Any]]:
        """Describe the components, largest first: one dict each.

        `id`, `name` (or None), `share` (0..1), `rows` (share of the summed row weights); `ranges`: per column `mean`,
        `deviation`, `low` and `high` (the central 80 % of the component); `apart`: up to three columns that set the
        component apart, with `difference` from the overall mean in overall standard deviations; `nearest`: `id`,
        `name` and `distance` of the other component that its mean is nearest to, in standard deviations of that one.

        >>> import drumlin, numpy
        >>> rows = numpy.random.default_rng(1).normal(size=(200, 1)) + numpy.repeat([[0.0], [9.0]], 100, axis=0)
        >>> [card["apart"][0]["column"] for card in drumlin.fit(rows, 2, progress=False).cards()]
        ['x0', 'x0']
        """
        from drumlin.describe import cards

        return cards(self.mixture, self._names, self.weight)

    def draw(self, rows: int, seed: int = 0) -> NDArray[np.float64]:
        """Draw rows from the model's mixture: (rows, d) float64, the same for the same seed.

        >>> import drumlin, numpy
        >>> model = drumlin.fit(numpy.random.default_rng(1).normal(size=(200, 3)), 1, progress=False)
        >>> model.draw(4, seed=2).shape
        (4, 3)
        """
        return self.mixture.draw(rows, seed)

    def save(self, path: str | os.PathLike[str], *, replace: bool = False) -> str:
        """Write the model to a file (by custom ending in .drumlin) and return its path.

        Written beside under a hidden name and renamed, so that the file is there whole or not at all. TargetError when
        the file exists and `replace` is False, or when the place cannot be written to.

        >>> import drumlin, numpy, tempfile, os
        >>> model = drumlin.fit(numpy.random.default_rng(1).normal(size=(200, 2)), 1, progress=False)
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     path = model.save(os.path.join(folder, "all.drumlin"))
        ...     drumlin.load(path).checksum == model.checksum
        True
        """
        from drumlin.modelfile import save

        return save(self, path, replace=checks.switch("replace", replace))

    def to_bytes(self) -> bytes:
        """Return the bytes that `save` writes."""
        from drumlin.modelfile import to_bytes

        return to_bytes(self)

    def __reduce__(self) -> tuple[Any, ...]:
        from drumlin.modelfile import from_bytes

        return from_bytes, (self.to_bytes(),)

    def __eq__(self, other: object) -> bool:
        return self.checksum == other.checksum if isinstance(other, Model) else NotImplemented

    def __hash__(self) -> int:
        return hash(self.checksum)

    def __repr__(self) -> str:
        from drumlin.describe import model_text

        return model_text(self)

    def _repr_html_(self) -> str:
        from drumlin.describe import model_html

        return model_html(self)

    def _dimensions(self) -> int:
        return self.mixture.dimensions

    def _as_mixture(self) -> Mixture:
        return self.mixture

    def _codes(self) -> dict[str, tuple[float, ...]]:
        from drumlin.fitting.source import codes_per_column

        return codes_per_column(self.missing_codes, self.columns)

    def _get_scorer(self) -> _core.Scorer:
        if not self.missing_codes:
            return self.mixture._get_scorer()
        if "scorer" not in self._kept:
            from drumlin.fitting.source import codes_per_column

            self._kept["scorer"] = self.mixture._make_scorer(codes_per_column(self.missing_codes, self.columns))
        scorer: _core.Scorer = self._kept["scorer"]
        return scorer


def _checked_name(name: Any) -> str:
    if name is None:
        return ""
    if not isinstance(name, str) or not name.isprintable() or name != name.strip() or len(name) > 200:
        raise OptionError(
            f"names: {name!r} cannot be a name: give one line of at most 200 characters, no space at its ends.",
            option="names",
        )
    return name


def check_names_differ(names: Mapping[int, str]) -> None:
    """Refuse a name that two components share."""
    seen: dict[str, int] = {}
    for one, name in names.items():
        if name in seen:
            raise OptionError(f"names: components {seen[name]} and {one} are both called {name!r}.", option="names")
        seen[name] = one


def surviving_names(names: Mapping[int, str], ids: Iterable[int]) -> dict[int, str]:
    """Return the names whose components are still there."""
    left = set(ids)
    return {one: name for one, name in names.items() if one in left}
