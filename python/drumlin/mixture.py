"""A mixture of normal components: immutable numbers, and what they say about rows."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any, Self, final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from drumlin import checks
from drumlin.errors import MixtureError, OptionError
from drumlin.options import STRUCTURES
from drumlin.rowwise import RowWise

if TYPE_CHECKING:
    from drumlin import _core

Floats = NDArray[np.float64]

MOST_ID = 2**31 - 1
"""The largest component id: `predict` writes ids as int32."""


@final
class Mixture(RowWise):
    """A mixture of normal components in the units of the columns. Immutable.

    `weights` (k,) sum to 1; `means` (k, d); `covariances` (k, d, d), symmetric and positive definite. A diagonal
    structure also takes variances (k, d), a spherical one (k,); a pooled mixture takes its one covariance with or
    without the leading axis; with one column `means` may be (k,) and `covariances` (k,). `ids` are the components'
    numbers for other people, apart from their position: 0, 1, ... unless given. `columns` are the columns' names.
    Raises MixtureError for numbers that are not a mixture, OptionError for names and ids that cannot be used.

    >>> import drumlin
    >>> variances = [[1.0, 1.0], [2.0, 0.5]]
    >>> drumlin.Mixture([0.6, 0.4], [[0.0, 0.0], [5.0, 1.0]], variances, ["a", "b"], structure="diagonal")
    Mixture of 2 components in 2 columns, structure diagonal
      id    weight       a       b
       0     60.0%   0 ± 1   0 ± 1
       1     40.0%  5 ± 1.41  1 ± 0.707
    """

    __slots__ = ("_columns", "_ids", "_inner", "_means", "_scaling", "_scorer", "_weights")

    _inner: _core.Mixture
    _scaling: _core.Scaling
    _scorer: _core.Scorer | None
    _columns: tuple[str, ...] | None
    _ids: NDArray[np.int32]
    _weights: Floats
    _means: Floats

    def __init__(
        self,
        weights: ArrayLike,
        means: ArrayLike,
        covariances: ArrayLike,
        columns: Sequence[str] | str | None = None,
        *,
        structure: str = "full",
        pooled: bool = False,
        ids: Iterable[int] | None = None,
    ) -> None:
        from drumlin import _core

        structure = checks.choice(STRUCTURES)("structure", structure)
        pooled = checks.switch("pooled", pooled)
        pi, centre, spread = (
            _numbers("weights", weights),
            _numbers("means", means),
            _numbers("covariances", covariances),
        )
        if centre.ndim == 1 and pi.ndim == 1 and len(centre) == len(pi):
            centre = centre[:, None]
        if centre.ndim == 2 and centre.shape[1] == 1 and spread.ndim <= 1:
            spread = spread.reshape(-1, *((1,) if structure == "spherical" else (1, 1)))
            spread = spread[:, 0] if structure == "spherical" else spread
        core = _core.Mixture(pi, centre, spread, structure, pooled)
        self._settle(core, checks.names_or_none("columns", columns), _checked_ids(ids, core.components), None)

    @classmethod
    def _of(
        cls,
        core: _core.Mixture,
        columns: tuple[str, ...] | None,
        ids: Iterable[int],
        scaling: _core.Scaling | None,
    ) -> Self:
        """Wrap a mixture of the core. `scaling` is the one that the rows were fitted with."""
        made = cls.__new__(cls)
        made._settle(core, columns, _checked_ids(ids, core.components), scaling)
        return made

    def _settle(
        self,
        core: _core.Mixture,
        columns: tuple[str, ...] | None,
        ids: NDArray[np.int32],
        scaling: _core.Scaling | None,
    ) -> None:
        if columns is not None and len(columns) != core.dimensions:
            raise OptionError(
                f"columns names {len(columns)} columns, the means have {core.dimensions}.", option="columns"
            )
        weights, means = core.weights, core.means
        for array in (weights, means, ids):
            array.setflags(write=False)
        values = {
            "_inner": core,
            "_columns": columns,
            "_ids": ids,
            "_weights": weights,
            "_means": means,
            "_scaling": scaling if scaling is not None else _own_scaling(core),
            "_scorer": None,
        }
        for name, value in values.items():
            object.__setattr__(self, name, value)

    def __setattr__(self, name: str, value: Any) -> None:
        raise AttributeError(f"a Mixture is immutable: {name!r} cannot be set; make a new Mixture")

    def __delattr__(self, name: str) -> None:
        raise AttributeError(f"a Mixture is immutable: {name!r} cannot be deleted")

    def __reduce__(self) -> tuple[Any, ...]:
        scaling = (self._scaling.centre, self._scaling.spread)
        return _rebuild, (
            (self._weights, self._means, self._inner.stored, self.structure, self.pooled),
            self._columns,
            self._ids,
            scaling,
        )

    @property
    def weights(self) -> Floats:
        """The components' shares of the rows: (k,), summing to 1."""
        return self._weights

    @property
    def means(self) -> Floats:
        """The components' means: (k, d), in the units of the columns."""
        return self._means

    @property
    def covariances(self) -> Floats:
        """The components' covariances: (k, d, d), whatever the structure. Made on each call."""
        return self._inner.covariances

    @property
    def ids(self) -> NDArray[np.int32]:
        """The components' ids: (k,) int32. They stay with a component when the order changes."""
        return self._ids

    @property
    def columns(self) -> tuple[str, ...] | None:
        """The names of the columns, in order; None when the mixture has none."""
        return self._columns

    @property
    def structure(self) -> str:
        """The structure of the covariances: "full", "diagonal" or "spherical"."""
        return self._inner.structure

    @property
    def pooled(self) -> bool:
        """Whether all components share one covariance."""
        return self._inner.pooled

    @property
    def components(self) -> int:
        """The number of components, k."""
        return self._inner.components

    @property
    def dimensions(self) -> int:
        """The number of columns, d."""
        return self._inner.dimensions

    @property
    def free_parameters(self) -> int:
        """The number of free parameters: weights, means and covariances of this structure."""
        return self._inner.free_parameters

    def draw(self, rows: int, seed: int = 0) -> Floats:
        """Draw rows from the mixture: (rows, d) float64, the same for the same seed.

        >>> import drumlin
        >>> drumlin.Mixture([1.0], [[3.0, 4.0]], [[[1.0, 0.0], [0.0, 1.0]]]).draw(5, seed=2).shape
        (5, 2)
        """
        rows = checks.whole(0, 2**40)("rows", rows)
        return self._inner.draw(rows, checks.whole(0, 2**63 - 1)("seed", seed))[0]

    def standard_deviations(self) -> Floats:
        """Return the standard deviation of each column in each component: (k, d), in the units of the columns."""
        return deviations_of(self._inner)

    def _dimensions(self) -> int:
        return self._inner.dimensions

    def _as_mixture(self) -> Mixture:
        return self

    def _get_scorer(self) -> _core.Scorer:
        if self._scorer is None:
            object.__setattr__(self, "_scorer", self._make_scorer({}))
        assert self._scorer is not None
        return self._scorer

    def _make_scorer(self, codes: Mapping[str, Sequence[float]]) -> _core.Scorer:
        """A scorer that takes `codes`, listed by column, for gaps."""
        from drumlin import _core

        names = list(self._columns or (f"x{position}" for position in range(self.dimensions)))
        reading = _core.Reading(names, codes={name: list(listed) for name, listed in codes.items()} or None)
        return _core.Scorer(self._inner, self._scaling, reading, self._ids.tolist())

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Mixture):
            return NotImplemented
        return self._columns == other._columns and self._bytes() == other._bytes()

    def __hash__(self) -> int:
        return hash((self._columns, self._bytes()))

    def _bytes(self) -> tuple[Any, ...]:
        arrays = (self._weights, self._means, self._inner.stored, self._ids)
        return (self.structure, self.pooled, *(array.tobytes() for array in arrays))

    def __repr__(self) -> str:
        from drumlin.describe import mixture_text

        return mixture_text(self)

    def _repr_html_(self) -> str:
        from drumlin.describe import mixture_html

        return mixture_html(self)


def deviations_of(core: _core.Mixture) -> Floats:
    """Return the standard deviations (k, d) of a mixture of the core, without making (k, d, d) where not needed."""
    stored = core.stored
    if core.structure == "full":
        variances = np.diagonal(stored, axis1=1, axis2=2)
    elif core.structure == "diagonal":
        variances = stored
    else:
        variances = np.repeat(stored[:, None], core.dimensions, axis=1)
    return np.broadcast_to(np.sqrt(variances), (core.components, core.dimensions))


def overall(core: _core.Mixture) -> tuple[Floats, Floats]:
    """Return the mean (d,) and standard deviation (d,) of the whole mixture, safe from overflow."""
    weights, means, deviations = core.weights, core.means, deviations_of(core)
    mean = weights @ means
    away = np.abs(means - mean)
    top = np.maximum(deviations, away).max(axis=0)
    return mean, top * np.sqrt(weights @ ((deviations / top) ** 2 + (away / top) ** 2))


def _own_scaling(core: _core.Mixture) -> _core.Scaling:
    """Centre and spread for a mixture that came without rows: its own mean and deviation, as a power of two."""
    from drumlin import _core

    mean, deviation = overall(core)
    return _core.Scaling(mean, np.exp2(np.clip(np.round(np.log2(deviation)), -460, 460)))


def _rebuild(
    core: tuple[Any, ...],
    columns: tuple[str, ...] | None,
    ids: NDArray[np.int32],
    scaling: tuple[Floats, Floats],
) -> Mixture:
    from drumlin import _core

    return Mixture._of(_core.Mixture(*core), columns, ids.tolist(), _core.Scaling(*scaling))


def _numbers(name: str, value: ArrayLike) -> Floats:
    try:
        return np.ascontiguousarray(value, dtype=np.float64)
    except (TypeError, ValueError):
        raise MixtureError(f"{name} must be an array of numbers.", option=name) from None


def _checked_ids(ids: Iterable[int] | None, components: int) -> NDArray[np.int32]:
    if ids is None:
        return np.arange(components, dtype=np.int32)
    one = checks.whole(0, MOST_ID)
    found = [int(one("ids", value)) for value in ids]
    if len(found) != components:
        raise OptionError(f"ids has {len(found)} numbers for {components} components.", option="ids")
    if len(set(found)) != len(found):
        raise OptionError("ids must differ from each other.", option="ids")
    return np.array(found, dtype=np.int32)
