"""Measures pickle through their bytes, so that they can be sent between processes and machines."""

from __future__ import annotations

import copyreg
from collections.abc import Callable

from drumlin import _core

__all__ = ["measure_from_bytes"]


def measure_from_bytes(data: bytes) -> _core.Measure:
    """Return the measure that `to_bytes` wrote; runs no code from the bytes.

    >>> import pickle
    >>> from drumlin import _core, engines
    >>> measure = pickle.loads(pickle.dumps(_core.ColumnSummary(2)))
    >>> measure.to_bytes() == _core.ColumnSummary(2).to_bytes()
    True
    """
    return _core.Measure.from_bytes(data)


def _reduce(measure: _core.Measure) -> tuple[Callable[[bytes], _core.Measure], tuple[bytes]]:
    return measure_from_bytes, (measure.to_bytes(),)


for _kind in _core.Measure.__subclasses__():
    copyreg.pickle(_kind, _reduce)
