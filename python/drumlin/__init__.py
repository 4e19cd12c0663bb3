"""drumlin finds the soft groups of tables that are too large for memory.

>>> import drumlin, numpy
>>> rows = numpy.random.default_rng(1).normal(size=(500, 2)) + numpy.repeat([[0.0], [8.0]], 250, axis=0)
>>> model = drumlin.fit(rows, 2, seed=1, progress=False)
>>> [round(float(share), 3) for share in model.mixture.weights]
[0.5, 0.5]

Names are loaded when they are first used, so that `import drumlin` and `drumlin --help` are quick.
"""

from __future__ import annotations

import importlib
import logging
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from drumlin.errors import (
        DamagedFileError,
        DataError,
        DrumlinError,
        InternalError,
        MixtureError,
        OptionError,
        SchemaError,
        SourceError,
        StreamError,
        TargetError,
    )
    from drumlin.exporting.lazy import lazy_groups
    from drumlin.fitting.estimate import estimate
    from drumlin.fitting.fit import fit
    from drumlin.judging.profile import profile
    from drumlin.mixture import Mixture
    from drumlin.model import Model
    from drumlin.modelfile import load
    from drumlin.predicting.predict import predict

    __version__: str

__all__ = [
    "DamagedFileError",
    "DataError",
    "DrumlinError",
    "InternalError",
    "Mixture",
    "MixtureError",
    "Model",
    "OptionError",
    "SchemaError",
    "SourceError",
    "StreamError",
    "TargetError",
    "__version__",
    "estimate",
    "fit",
    "lazy_groups",
    "load",
    "predict",
    "profile",
]

_HOMES = {
    "Mixture": "drumlin.mixture",
    "Model": "drumlin.model",
    "estimate": "drumlin.fitting.estimate",
    "fit": "drumlin.fitting.fit",
    "lazy_groups": "drumlin.exporting.lazy",
    "load": "drumlin.modelfile",
    "predict": "drumlin.predicting.predict",
    "profile": "drumlin.judging.profile",
}

logging.getLogger("drumlin").addHandler(logging.NullHandler())


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from importlib.metadata import version

        value: Any = version("drumlin")
    elif name in __all__:
        value = getattr(importlib.import_module(_HOMES.get(name, "drumlin.errors")), name)
    else:
        raise AttributeError(f"module 'drumlin' has no attribute {name!r}")
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
